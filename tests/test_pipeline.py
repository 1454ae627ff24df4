"""Whole runs: every layer filled, known answers, the same numbers however the work is shared out, honest failures."""

import multiprocessing
import os
from concurrent.futures import BrokenExecutor, Executor, ThreadPoolExecutor

import numpy as np
import pandas as pd
import pyogrio
import pytest
import shapely
from utils_pipeline import assert_same_results, settings_for, small_coast

from shelfmap import pipeline
from shelfmap.columns import columns_of
from shelfmap.demo import write_demo
from shelfmap.errors import LayerError, OutputExistsError, SettingsError, ShelfmapError
from shelfmap.geodesy import distance_bearing
from shelfmap.grid import open_grid
from shelfmap.pipeline import screen
from shelfmap.provenance import status_counts
from shelfmap.sections import pack_section
from shelfmap.settings import Settings
from shelfmap.synthetic import step_profile, straight_coast
from shelfmap.vectors import read_table, read_vector
from shelfmap.words import STATUSES

LAYERS = ("coast_index", "transects", "shelf_breaks", "profiles", "response", "run")
DEMO_WAVES = ("m2", "s2", "n2", "k1", "o1", "p1h", "p3h")


@pytest.fixture(scope="module")
def demo(tmp_path_factory):
    """The demo, screened once for all tests here."""
    folder = tmp_path_factory.mktemp("demo")
    return screen(Settings.from_toml(write_demo(folder)[-1]))


@pytest.fixture(scope="module")
def table(demo):
    return read_table(demo.path, "transects")


@pytest.fixture
def three_sections(tmp_path, write_grid):
    """Settings of a coast with more stations than two sections hold."""
    return settings_for(write_grid(small_coast()), tmp_path, transects={"spacing_km": 1.9, "length_km": 150.0})


def at(settings, path):
    return settings.model_copy(update={"output": settings.output.model_copy(update={"path": path})})


# ---- what a run writes


def test_every_layer_is_there_with_every_column_in_order(demo):
    assert [name for name, _ in pyogrio.list_layers(demo.path)] == list(LAYERS)
    for layer in LAYERS:
        waves = DEMO_WAVES if layer in ("coast_index", "transects") else ()
        assert list(read_table(demo.path, layer)) == [column.name for column in columns_of(layer, waves)]


def test_every_column_of_transects_holds_a_value_somewhere(table):
    """A column that is empty all through is one that nobody fills."""
    empty = [name for name, values in table.items() if pd.isna(values).all()]
    assert empty == []


def test_every_transect_has_a_known_status_and_an_index_only_where_it_is_ok(table):
    assert set(table["status"]) <= set(STATUSES)
    assert np.isnan(table["index_max"][table["status"] != "ok"]).all()
    assert np.isfinite(table["index_max"][table["status"] == "ok"]).all()


def test_coast_is_covered_once_by_its_pieces(demo):
    """1e-6: pieces share their ends with their neighbours and run along the same chords."""
    data = read_vector(demo.path, "coast_index")
    total_m = 0.0
    for piece in data.geometry:
        lon, lat = shapely.get_coordinates(piece).T
        total_m += distance_bearing(lon[:-1], lat[:-1], lon[1:], lat[1:])[0].sum()
    assert total_m == pytest.approx(sum(line.length_m for line in demo.coast.lines), rel=1e-6)


def test_run_layer_holds_settings_sources_counts_and_versions(demo):
    rows = read_table(demo.path, "run")
    said = {(topic, name): value for topic, name, value in zip(*rows.values(), strict=True)}
    assert said["setting", "transects.spacing_km"] == "20.0"
    assert said["setting", "shelf_break.deepest_m"] == "550.0"
    assert said["source", "grid"] == demo.source.path
    assert said["source", "grid values"] == "positive up: set by grid.positive"
    counts = {name: int(value) for (topic, name), value in said.items() if topic == "count"}
    assert counts.pop("transects") == sum(counts.values()) == len(demo.status)
    assert {"shelfmap", "python", "numpy", "pyproj"} <= {name for topic, name in said if topic == "version"}
    assert "Not for navigation" in said["caution", "cautions"]


def test_summary_counts_what_the_table_holds(demo, table):
    summary = demo.summary()
    assert summary["transects"] == len(table["status"])
    assert summary["status"] == status_counts(table["status"])
    assert sum(summary["status"].values()) == summary["transects"]


# ---- the demo shows each case where it should


def mainland(table, north, south):
    return (table["coast_part"] == 1) & (table["lat_deg"] < north) & (table["lat_deg"] > south)


def test_shelf_tuned_to_m2_is_at_resonance_with_it(table):
    """Widths of 355 km were chosen for M2; a fifth of the stations may look askew or across missing data."""
    tuned = mainland(table, -27.3, -30.5) & (table["status"] == "ok")
    assert tuned.sum() >= 12
    assert np.median(table["index_m2"][tuned]) > 0.85
    assert (table["index_class"][tuned] == "very high").mean() > 0.8
    assert (table["gain_m2"][tuned] > 5).mean() > 0.8
    assert (table["damped_gain_m2"] < table["gain_m2"])[tuned].all()


def test_narrow_shelf_has_no_resonance(table):
    narrow = mainland(table, -35.6, -37.8) & (table["status"] == "ok")
    assert narrow.sum() >= 10
    assert set(table["index_class"][narrow]) == {"none"}
    assert table["gain_m2"][narrow].max() < 1.2
    assert np.median(table["shelf_width_km"][narrow]) < 25


def test_ramp_shows_no_break_but_a_gain(table):
    """The change from narrow shelf to ramp is gradual, so well south of it."""
    ramp = mainland(table, -39.2, -40.5)
    assert set(table["status"][ramp]) == {"no_break"}
    assert np.isnan(table["shelf_width_km"][ramp]).all()
    assert np.isfinite(table["gain_m2"][ramp]).all()


def test_gulf_faces_land_and_tells_the_fetch(table):
    """Its mouth looks at the open sea in part."""
    gulf = mainland(table, -32.6, -33.6) & (table["lon_deg"] > -18.4)
    facing = table["status"][gulf] == "facing_land"
    assert facing.mean() > 0.9
    fetch_km = table["fetch_km"][gulf][facing]
    assert ((fetch_km > 10) & (fetch_km < 250)).all()
    assert np.isnan(table["gain_m2"][gulf][facing]).all()


def test_islands_and_missing_depths_are_named(table):
    assert "island" in table["status"][mainland(table, -33.9, -34.6)]
    assert "void" in table["status"][mainland(table, -29.5, -30.6)]


def test_lake_below_sea_level_has_no_station(demo, table):
    """The lake lies 100 km and more inland of the coast between 30 and 31 S, in the east of it."""
    inland = mainland(table, -29.0, -32.0) & (table["lon_deg"] > -19.0)
    assert not inland.any()
    source = open_grid(Settings.from_toml(demo.path.parent / "demo.toml").grid)
    lon, lat = np.meshgrid(np.linspace(-19.3, -16.5, 57), np.linspace(-32.0, -29.0, 61))
    depth_m, _ = source.sample(lon, lat)
    assert np.nanmax(depth_m) > 20  # there is one


def test_island_above_500_km2_has_stations_of_its_own(table):
    assert (table["coast_part"] == 2).sum() >= 3


# ---- known answers, from file to file


@pytest.fixture
def flat_shelf(tmp_path, write_grid):
    """Settings of a flat shelf, 300 km of 100 m over 4000 m at the equator, by their response table."""
    profile = step_profile(300e3, 100.0, 4000.0)
    # an even number of columns: no cell stands on the coast itself, where rounding makes it land or sea
    path = write_grid(straight_coast(270.0, 0.0, profile, cell=0.02, shape=(61, 400)))
    return lambda **response: settings_for(path, tmp_path, transects={"length_km": 380.0}, response=response)


def test_flat_shelf_gains_what_the_closed_form_says(flat_shelf):
    """1 / sqrt(cos^2 kL + h1/h2 sin^2 kL), 100 m over 4000 m, 300 km, M2, no rotation: 3.689.

    3 %: the grid smears break and coast over a cell of 2.2 km, and 1 km of width moves this gain by 1 %.
    """
    out = read_table(screen(flat_shelf(constituents=["M2"], rotation=False)).path, "transects")
    assert set(out["status"]) == {"ok"}
    np.testing.assert_allclose(out["gain_m2"], 3.68914, rtol=0.03)
    np.testing.assert_allclose(out["shelf_width_km"], 300.0, atol=2.2)


def test_quadratic_drag_damps_more_where_the_tide_is_larger(flat_shelf):
    gains = []
    for amplitude_m in (0.1, 1.0):
        run = screen(
            flat_shelf(constituents=["M2"], drag=0.0025, offshore_amplitude_m={"M2": amplitude_m}), overwrite=True
        )
        table = read_table(run.path, "transects")
        gains.append(table["damped_gain_m2"])
        assert (table["friction_m_s"] == 1e-3).all()  # of all other waves
    assert (gains[1] < 0.9 * gains[0]).all()
    assert (gains[0] < table["gain_m2"]).all()


def test_tables_not_wanted_are_not_written(tmp_path, write_grid):
    settings = settings_for(
        write_grid(small_coast()), tmp_path, output={"profiles": False, "response_curves": False, "crs": "EPSG:3035"}
    )
    run = screen(settings)
    assert "profiles" not in dict(pyogrio.list_layers(run.path))
    assert set(read_table(run.path, "response")["kind"]) == {"constituent"}
    assert pyogrio.read_info(run.path, layer="transects")["crs"] == "EPSG:3035"


# ---- the same numbers however the work is shared out


@pytest.mark.parametrize("workers", [2, 3])
def test_processes_give_the_same_tables_as_one(three_sections, tmp_path, workers):
    alone = screen(three_sections)
    assert len(alone.status) > 2 * pipeline.SECTION_STATIONS
    shared = screen(at(three_sections, tmp_path / "shared.gpkg"), workers=workers)
    assert_same_results(alone.path, shared.path)


def test_the_callers_threads_give_the_same_tables(three_sections, tmp_path):
    alone = screen(three_sections)
    with ThreadPoolExecutor(3) as threads:
        shared = screen(at(three_sections, tmp_path / "shared.gpkg"), executor=threads)
        assert threads.submit(int, 3).result() == 3  # still the caller's, still open
    assert_same_results(alone.path, shared.path)


@pytest.mark.parametrize("stations", [1, 7, 1000])
def test_size_of_a_section_moves_no_number(tmp_path, write_grid, monkeypatch, stations):
    """Each transect is computed by itself: the neighbours in its section do not matter, to the last bit."""
    settings = settings_for(write_grid(small_coast()), tmp_path)
    usual = screen(settings)
    monkeypatch.setattr(pipeline, "SECTION_STATIONS", stations)
    assert_same_results(usual.path, screen(at(settings, tmp_path / "other.gpkg")).path)


def test_progress_is_told_of_every_section(three_sections):
    told = []
    screen(three_sections, progress=lambda *what: told.append(what))
    n = told[-1][2]
    assert n == 3
    assert told == [("sections", done, n) for done in range(1, n + 1)]


# ---- failures


def die(section):
    """Stands in for a section whose process is killed; the first one is done by this process."""
    if multiprocessing.parent_process() is not None:
        os._exit(9)
    return pack_section(section)


def test_dead_worker_ends_in_one_sentence_with_the_cure(three_sections, monkeypatch):
    monkeypatch.setattr(pipeline, "pack_section", die)
    with pytest.raises(
        ShelfmapError, match=r"^a worker process died .*; run again with fewer workers or a larger"
    ) as e:
        screen(three_sections, workers=2)
    assert "\n" not in str(e.value)
    assert not three_sections.output.path.exists()


class Broken(Executor):
    def submit(self, *_):
        raise BrokenExecutor("gone")


def test_broken_executor_of_the_caller_is_told_the_same_way(three_sections):
    with pytest.raises(ShelfmapError, match=r"^a worker process died \(gone\)"):
        screen(three_sections, executor=Broken())


@pytest.mark.parametrize("fault", [ZeroDivisionError, KeyboardInterrupt])
def test_failed_section_is_raised_and_the_older_output_stays(three_sections, monkeypatch, fault):
    """A section that fails is never left out: half a coast would look like a whole one."""
    path = screen(three_sections).path
    before = path.read_bytes()

    def stop(_section):
        raise fault

    monkeypatch.setattr(pipeline, "pack_section", stop)
    with pytest.raises(fault):
        screen(three_sections, overwrite=True)
    assert path.read_bytes() == before
    assert sorted(file.name for file in path.parent.iterdir()) == ["grid0.tif", "out.gpkg"]


def test_existing_output_is_refused_before_any_work(tmp_path):
    (tmp_path / "out.gpkg").write_text("mine", encoding="utf-8")
    with pytest.raises(OutputExistsError, match=r"out\.gpkg exists already; allow it to be overwritten"):
        screen(settings_for(tmp_path / "missing.tif", tmp_path))


def test_fewer_than_one_worker_is_refused(three_sections):
    with pytest.raises(SettingsError, match="workers = 0: at least 1"):
        screen(three_sections, workers=0)


@pytest.mark.parametrize("section", ["coast", "transects", "shelf_break", "gauges"])
def test_output_that_would_replace_its_own_input_is_refused(tmp_path, write_grid, section):
    """Somebody who edits a layer within the output and runs again would lose the edits."""
    settings = settings_for(write_grid(small_coast()), tmp_path, **{section: {"file": "out.gpkg"}})
    (tmp_path / "out.gpkg").write_text("edits", encoding="utf-8")
    with pytest.raises(LayerError, match=rf"out\.gpkg is {section}\.file too and would be lost; write to another file"):
        screen(settings, overwrite=True)
    assert (tmp_path / "out.gpkg").read_text(encoding="utf-8") == "edits"
