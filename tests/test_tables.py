"""Columns of a run: all filled, units turned, remarks and empty values where they belong."""

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
from utils_pipeline import layers_of, screened_of

from shelfmap import index, words
from shelfmap.columns import columns_of
from shelfmap.demo import write_demo
from shelfmap.geodesy import distance_bearing
from shelfmap.settings import Settings
from shelfmap.tables import waves_of


@pytest.fixture(scope="module")
def settings(tmp_path_factory) -> Settings:
    return Settings.from_toml(write_demo(tmp_path_factory.mktemp("demo"))[-1])


@pytest.fixture(scope="module")
def run(settings):
    """The demo, which holds every case; two seconds, and read only."""
    coast, screened = screened_of(settings)
    return SimpleNamespace(coast=coast, screened=screened)


@pytest.fixture(scope="module")
def layers(run, settings):
    return tables(run.screened, run, settings)


def tables(screened, run, settings):
    return layers_of(screened, run.coast, settings)


def test_every_column_is_filled_somewhere_and_empty_only_where_that_has_a_meaning(layers, settings):
    labels = [wave.label for wave in waves_of(settings)]
    assert list(layers) == ["coast_index", "transects", "shelf_breaks", "profiles", "response"]
    for name, table in layers.items():
        columns = columns_of(name, labels if name in ("coast_index", "transects") else ())
        assert list(table.columns) == [column.name for column in columns]
        for column in columns:
            assert table[column.name].notna().any(), column.name
            assert column.null_means or table[column.name].notna().all(), column.name


def test_words_are_those_users_are_told_of(layers):
    for table in layers.values():
        for name in set(table.columns) & set(words.ENUMERATIONS):
            assert set(table[name].dropna()) <= set(words.ENUMERATIONS[name])
    assert set(words.INDEX_CLASSES) == {name for _, name in index.INDEX_CLASSES}
    assert list(words.INDEX_CLASSES) == [name for _, name in index.INDEX_CLASSES]


def test_units_are_turned_into_those_of_the_columns(layers, run):
    table, screened = layers["transects"], run.screened
    pairs = {
        "coast_km": screened.transects.coast_m / 1e3,
        "shelf_width_km": screened.breaks.break_m / 1e3,
        "break_spread_km": screened.breaks.spread_m / 1e3,
        "travel_time_h": screened.modes.travel_time_s / 3600,
        "period1_h": screened.modes.node_period_s[:, 0] / 3600,
        "pole2_h": 2 * np.pi / screened.modes.pole_rad_s[:, 1].real / 3600,
        "current_antinode_km": screened.modes.current_antinode_m / 1e3,
        "lag_m2_deg": np.degrees(screened.waves.lag_rad[:, 0]),
        "gain_m2": screened.waves.gain[:, 0],
        "period1_sd_h": screened.modes.period_sd_s / 3600,
        "q3": screened.modes.q[:, 2],
    }
    for name, expected in pairs.items():
        np.testing.assert_allclose(table[name], expected, rtol=1e-14, err_msg=name)


def test_a_break_stands_as_far_from_the_shore_as_the_shelf_is_wide(layers):
    """Along the geodesic, to 1 m: places are straight in degrees between nodes 10 km apart (0.44 m measured)."""
    lines, points = layers["transects"].set_index("transect_id"), layers["shelf_breaks"]
    shore = lines.loc[points["transect_id"]]
    away_m, _ = distance_bearing(
        shore["lon_deg"].to_numpy(),
        shore["lat_deg"].to_numpy(),
        points["lon_deg"].to_numpy(),
        points["lat_deg"].to_numpy(),
    )
    np.testing.assert_allclose(away_m, points["shelf_width_km"] * 1e3, rtol=0, atol=1.0)


def test_mean_depth_is_the_area_under_the_shelf_over_its_width(layers, run):
    profiles, breaks = run.screened.profiles, run.screened.breaks
    for row in np.flatnonzero(np.isfinite(breaks.break_m)):
        inside = profiles.distance_m < breaks.break_m[row]
        x_m = np.append(profiles.distance_m[inside], breaks.break_m[row])
        depth_m = np.append(profiles.depth_m[row, inside], breaks.depth_m[row])
        mean_m = np.sum(np.diff(x_m) * (depth_m[1:] + depth_m[:-1]) / 2) / x_m[-1]
        assert layers["transects"]["mean_depth_m"][row] == pytest.approx(mean_m, rel=1e-12)


def test_mean_depth_of_an_even_slope_is_half_the_depth_of_its_break(run, settings):
    profiles, breaks = run.screened.profiles, run.screened.breaks
    even = replace(
        run.screened,
        profiles=replace(profiles, depth_m=np.where(np.isfinite(profiles.depth_m), profiles.distance_m / 500, np.nan)),
        breaks=replace(breaks, depth_m=breaks.break_m / 500),
    )
    np.testing.assert_allclose(
        tables(even, run, settings)["transects"]["mean_depth_m"], breaks.break_m / 1000, rtol=1e-12
    )


def test_the_columns_of_the_index_agree_with_each_other(layers, settings):
    table = layers["transects"]
    waves = [wave for wave in waves_of(settings) if wave.name]  # further periods do not count beside constituents
    of_waves = table[[f"index_{wave.label}" for wave in waves]].to_numpy()
    has = np.isfinite(of_waves).any(axis=1)
    assert has.any()
    assert not has.all()
    np.testing.assert_array_equal(table["index_max"].notna(), has)
    largest = np.nanmax(of_waves[has], axis=1)
    np.testing.assert_array_equal(table["index_max"][has], largest)
    np.testing.assert_allclose(table["tuning"][has] * table["strength"][has], largest, rtol=1e-12)
    assert table["index_constituent"][has].tolist() == [waves[k].name for k in np.nanargmax(of_waves[has], axis=1)]
    assert table["index_class"][has].tolist() == index.index_class(largest).tolist()
    assert set(table["index_mode"][has]) <= {1, 2, 3}
    for name in ("index_constituent", "index_mode", "index_class", "tuning", "strength", "confidence"):
        np.testing.assert_array_equal(table[name].notna(), has, err_msg=name)


def test_only_a_good_status_has_an_index_and_a_status_explains_what_is_empty(layers):
    table = layers["transects"]
    assert (table.loc[table["index_max"].notna(), "status"] == "ok").all()
    assert table.loc[table["status"] == "ok", "shelf_width_km"].notna().all()
    not_computed = table["status"].isin(["facing_land", "island", "void", "edge_of_grid", "too_short", "not_sea"])
    assert not_computed.any()
    empty = ["gain_m2", "damped_gain_m2", "edge_ratio_m2", "period1_h", "q1", "travel_time_h", "deep_m", "friction_m_s"]
    assert table.loc[not_computed, empty].isna().all(axis=None)
    assert table["fetch_km"].notna().sum() == table["end_reason"].isin(["facing_land", "island"]).sum()


def test_confidence_counts_the_doubts_named_in_the_note(layers):
    table = layers["transects"]
    good = table[table["confidence"] == "good"]
    told = good["note"].dropna().str.split("; ").explode()
    assert told.str.contains("below_inertial|near a node|profile ends|overdamped").all()  # remarks that are no doubts
    assert table.loc[table["confidence"] == "poor", "note"].str.contains("; ").all()


def test_waves_slower_than_the_earth_turns_are_named_and_have_no_gain(run, settings):
    waves = run.screened.waves
    slow = waves.below_inertial.copy()
    slow[:, 3] = True  # K1, as if farther north
    screened = replace(run.screened, waves=replace(waves, below_inertial=slow))
    table = tables(screened, run, settings)["transects"]
    told = table["note"].fillna("").str.contains(r"below_inertial \(slower than the inertial period\): .*K1")
    np.testing.assert_array_equal(told, table["deep_m"].notna())


def test_a_profile_that_stops_short_of_the_deep_sea_says_how_deep_it_is(layers, run):
    stepped = run.screened.is_stepped & np.isfinite(run.screened.outer_depth_m)
    told = layers["transects"]["note"].fillna("").str.contains(r"profile ends at \d+ m, sea beyond taken as 4000 m")
    np.testing.assert_array_equal(told, stepped)


def test_the_shelf_next_door_of_another_width_is_remarked(run, settings):
    breaks = run.screened.breaks
    part = run.screened.transects.coast_part
    is_ok = run.screened.status == "ok"
    row = next(k for k in range(2, len(part) - 2) if is_ok[k - 2 : k + 3].all() and np.ptp(part[k - 2 : k + 3]) == 0)
    width_m = breaks.break_m.copy()
    width_m[row - 2 : row + 3] = 90e3, 90e3, 30e3, 60e3, 60e3
    screened = replace(run.screened, breaks=replace(breaks, break_m=width_m))
    note = tables(screened, run, settings)["transects"]["note"]
    assert "shelf width changes 3.0-fold to a neighbour" in note[row - 1]
    assert "shelf width changes 3.0-fold to a neighbour" in note[row]
    assert "shelf width changes 2.0-fold to a neighbour" in note[row + 1]


def test_profiles_hold_every_wet_sample_and_nothing_more(layers, run):
    table, profiles = layers["profiles"], run.screened.profiles
    assert len(table) == profiles.n_samples.sum()
    for number, rows in table.groupby("transect_id"):
        k = int(np.flatnonzero(profiles.transect_id == number)[0])
        n = profiles.n_samples[k]
        np.testing.assert_array_equal(rows["depth_m"], profiles.depth_m[k, :n])
        np.testing.assert_allclose(rows["distance_km"], np.arange(n) * profiles.step_m / 1e3, rtol=1e-14)


def test_the_response_has_a_row_for_each_wave_of_each_transect_computed_and_its_curve(layers, run, settings):
    table, screened = layers["response"], run.screened
    computed = np.isfinite(screened.outer_depth_m)
    waves = waves_of(settings)
    asked = table[table["kind"] != "curve"]
    assert len(asked) == computed.sum() * len(waves)
    assert sorted(asked["transect_id"].unique()) == sorted(screened.transects.transect_id[computed])
    first = asked[asked["transect_id"] == asked["transect_id"].iloc[0]]
    assert first["wave"].tolist() == [wave.name for wave in waves]
    assert first["kind"].tolist() == ["constituent" if wave.name else "period" for wave in waves]
    np.testing.assert_allclose(first["period_h"], [wave.period_h for wave in waves])
    curve = table[table["kind"] == "curve"]
    assert curve["gain"].notna().all()
    assert curve["index"].isna().all()
    assert (curve["wave"] == "").all()
