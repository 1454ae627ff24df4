"""Shelf breaks: at the kink whatever threshold and step, none where there is none, steady under noise."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from utils_shelfbreak import SlowBreak, bent, profiles_of

from shelfmap._kernels import breaks as kernel
from shelfmap.pipeline import screen
from shelfmap.settings import Settings, ShelfBreakSettings
from shelfmap.shelfbreak import ShelfBreaks, find_shelf_breaks, measure_picked_breaks
from shelfmap.vectors import read_table

STEPS_M = [200.0, 500.0, 1000.0, 2000.0, 5000.0, 10_000.0]
DEFAULT = ShelfBreakSettings()
CLASSIC = ([0, 65, 65 + 15 * 3.87], [0, 130, 4000])  # 1:500 to 130 m, then 1:15


def find(rows, step_m, **given_settings):
    return find_shelf_breaks(profiles_of(rows, step_m), ShelfBreakSettings(**given_settings))


@pytest.mark.parametrize("step_m", STEPS_M)
@pytest.mark.parametrize("slope", [1 / 400, 1 / 200, 1 / 100, 1 / 50, 1 / 25, 1 / 16])
def test_a_kink_is_found_where_it_is_whatever_the_threshold(step_m, slope):
    """Shelf 1:500, slope 1:15: the lines meet at the kink, so position and depth hold to rounding."""
    rows = []
    for part in np.arange(0.0, 1.0, 0.1):  # the kink anywhere between two samples
        x_m = np.arange(0.0, 300e3, step_m)
        kink_m = 65e3 + part * step_m
        rows.append(np.minimum(x_m / 500, kink_m / 500) + np.clip((x_m - kink_m) / 15, 0, 3900))
    found = find(rows, step_m, slope=slope)
    kink_m = 65e3 + np.arange(0.0, 1.0, 0.1) * step_m
    np.testing.assert_allclose(found.break_m, kink_m, rtol=1e-9)
    np.testing.assert_allclose(found.depth_m, kink_m / 500, rtol=1e-9)
    np.testing.assert_allclose(found.slope_before, 1 / 500, rtol=1e-9)
    np.testing.assert_allclose(found.slope_beyond, 1 / 15, rtol=1e-9)
    np.testing.assert_allclose(found.contrast, 500 / 15, rtol=1e-9)


def test_a_clear_kink_has_no_spread_and_the_whole_band_finds_it():
    found = find([bent(*CLASSIC, 1000.0, 200e3)], 1000.0)
    assert found.spread_m[0] < 1e-6
    assert found.found_share[0] == 1.0


@pytest.mark.parametrize("step_m", [1000.0, 5000.0, 10_000.0])
def test_a_curved_shelf_moves_the_break_by_little(step_m):
    """Parabolic shelf to 150 m at 80 km: position to a fiftieth of a step, depth to 6 m (chords at 10 km steps)."""
    x_m = np.arange(0.0, 200e3, step_m)
    found = find([np.where(x_m < 80e3, 150 * (x_m / 80e3) ** 2, 150 + (x_m - 80e3) / 15)], step_m)
    assert abs(found.break_m[0] - 80e3) < step_m / 50
    assert abs(found.depth_m[0] - 150) < 6.0


@pytest.mark.parametrize("step_m", STEPS_M)
@pytest.mark.parametrize(
    "depth_of",
    [
        pytest.param(lambda x_m: x_m / 30, id="steep ramp"),
        pytest.param(lambda x_m: x_m / 200, id="gentle ramp"),
        pytest.param(lambda x_m: x_m / 60, id="ramp between the thresholds"),
        pytest.param(lambda x_m: 4000 * (x_m / 400e3) ** 2, id="parabola"),
        pytest.param(lambda x_m: 1000 * (x_m / 300e3) ** 1.5, id="gentle convex ramp"),
        pytest.param(lambda x_m: 4000 * (1 - np.exp(-x_m / 100e3)), id="concave"),
        pytest.param(lambda x_m: np.full(x_m.shape, 80.0), id="flat"),
        pytest.param(lambda x_m: np.interp(x_m, [0, 80e3, 150e3], [0, 700, 4000]), id="too deep"),
        pytest.param(lambda x_m: np.interp(x_m, [0, 20e3, 80e3], [0, 10, 4000]), id="too shallow"),
    ],
)
def test_no_break_is_an_answer(step_m, depth_of):
    found = find([depth_of(np.arange(0.0, 400e3, step_m))], step_m)
    assert np.isnan(found.break_m[0])
    assert np.isnan([found.depth_m[0], found.slope_before[0], found.contrast[0], found.spread_m[0]]).all()


@pytest.mark.parametrize("step_m", STEPS_M)
@pytest.mark.parametrize(
    ("nodes_km", "depths_m", "break_km", "depth_m"),
    [
        pytest.param([0, 20, 40, 60, 100, 130], [0, 200, 220, 60, 120, 2500], 100, 120, id="basin and bank"),
        pytest.param([0, 5, 15, 30, 40, 100, 130], [0, 20, 350, 350, 60, 140, 2500], 100, 140, id="edge above bank"),
        pytest.param([0, 5, 10, 60, 70, 200, 240], [0, 60, 700, 700, 250, 300, 3500], 200, 300, id="glacial trough"),
        pytest.param([0, 5, 100, 140], [0, 60, 120, 3000], 100, 120, id="nearshore ramp"),
        pytest.param([0, 10, 100, 140], [0, 160, 200, 3000], 100, 200, id="deep nearshore ramp"),
    ],
)
def test_troughs_and_ramps_near_the_shore_are_not_the_break(step_m, nodes_km, depths_m, break_km, depth_m):
    found = find([bent(nodes_km, depths_m, step_m, 240e3)], step_m)
    assert found.break_m[0] == pytest.approx(break_km * 1e3, abs=1e-6)  # a sample stands at the kink at these steps
    assert found.depth_m[0] == pytest.approx(depth_m, abs=1e-6)


@pytest.mark.parametrize("step_m", STEPS_M)
def test_a_slope_too_gentle_to_confirm_is_found_by_the_fall(step_m):
    """55 m at 90 km, 1:60 to 800 m, then a plateau: never 1:40, but three times the depth and a clear contrast."""
    found = find([bent([0, 90, 90 + 60 * 0.745, 300], [0, 55, 800, 850], step_m, 300e3)], step_m)
    assert (found.break_m[0], found.depth_m[0]) == pytest.approx((90e3, 55.0))


def test_a_gentle_slope_that_steepens_far_below_the_shelf_keeps_its_break():
    """The steepening at 800 m is no shelf break, and does not hide the one at 55 m."""
    found = find([bent([0, 90, 90 + 60 * 0.745, 160], [0, 55, 800, 3500], 1000.0, 300e3)], 1000.0)
    assert (found.break_m[0], found.depth_m[0]) == pytest.approx((90e3, 55.0))


def test_noise_moves_the_break_little():
    """Noise of 2 m at 1 km steps against a kink of 1:500 to 1:15: nine of ten within a sample, all within two."""
    rng = np.random.default_rng(5)
    clean = bent(*CLASSIC, 1000.0, 200e3)
    rows = [np.maximum(clean + 2.0 * rng.standard_normal(clean.size), 0.0) for _ in range(200)]
    off_m = np.abs(find(rows, 1000.0).break_m - 65e3)
    assert np.quantile(off_m, 0.9) < 1000.0
    assert off_m.max() < 2000.0


def test_the_spread_grows_and_the_contrast_falls_as_the_break_is_rounded():
    """The gradient grows evenly from 1:500 to 1:15 over 0.1 to 20 km."""
    past_m = np.maximum(np.arange(0.0, 150e3, 500.0) - 65e3, 0.0)
    rows = [
        np.arange(0.0, 150e3, 500.0) / 500
        + (1 / 15 - 1 / 500) * np.where(past_m < over_m, past_m**2 / (2 * over_m), past_m - over_m / 2)
        for over_m in (100.0, 6e3, 10e3, 20e3)
    ]
    found = find(rows, 500.0)
    np.testing.assert_allclose(found.break_m, 65e3, atol=1500.0)  # where the steepening sets in, well within 5 km
    np.testing.assert_allclose(found.depth_m, 130.0, atol=4.0)
    assert (np.diff(found.contrast) < 0).all()
    assert found.spread_m[0] < 1.0
    assert found.spread_m[1] < found.spread_m[2] < found.spread_m[3]


def test_picked_breaks_are_taken_with_the_depth_of_the_profile():
    rows = [bent(*CLASSIC, 1000.0, 200e3)] * 5
    picked = measure_picked_breaks(profiles_of(rows, 1000.0), DEFAULT, np.array([65e3, 70.5e3, np.nan, -1.0, 200.5e3]))
    assert picked.is_picked.tolist() == [True, True, False, False, False]
    np.testing.assert_allclose(picked.depth_m[:2], [130.0, 130.0 + 5500 / 15])
    assert picked.contrast[0] == pytest.approx(500 / 15)
    assert np.isnan(picked.break_m[2:]).all()
    assert np.isnan([picked.spread_m, picked.found_share]).all()


@pytest.mark.parametrize("row", [[], [0.0], [0.0, 200.0], [50.0, 400.0, 900.0]])
def test_profiles_too_short_to_tell_have_no_break(row):
    assert np.isnan(find([row], 1000.0).break_m[0])


@pytest.mark.parametrize("row", [np.linspace(60, 4000, 41), 500.0 + 1000.0 * np.arange(5)])
def test_a_shore_in_deep_water_has_no_break_at_the_shore(row):
    """A profile from a bridged inlet may begin at 500 m and be below all shelf breaks a quarter step on."""
    assert np.isnan(find([row], 1000.0).break_m[0])


def random_row(rng, n):
    """Random walk down with banks, basins and shoals: what no one would draw."""
    steps = rng.normal(rng.choice([2, 10, 60]), rng.choice([5, 30, 80]), n)
    return np.maximum(np.concatenate([[0.0], np.cumsum(steps * np.linspace(0.1, 2.0, n))]), 0.1)


def test_rows_are_independent_of_the_rows_beside_them():
    rng = np.random.default_rng(3)
    rows = [random_row(rng, n) for n in rng.integers(5, 150, 20)]
    together = find(rows, 2000.0)
    for k, row in enumerate(rows):
        alone = find([row], 2000.0)
        for name in ShelfBreaks.__dataclass_fields__:
            np.testing.assert_array_equal(getattr(alone, name)[0], getattr(together, name)[k])


def test_the_slow_twin_finds_the_same_breaks():
    """Both read the same rule; interpolation rounds differently, so to a millionth of a step, on 300 random rows."""
    rng = np.random.default_rng(11)
    n_found = 0
    for _ in range(300):
        row, step_m = random_row(rng, int(rng.integers(10, 120))), float(rng.choice([500.0, 2000.0, 8000.0]))
        smoothing_m = max(5000.0, 2 * step_m)
        limits = (5000.0, 20.0, 550.0, 2.0, 1000.0)
        fast = kernel.find_break(row, len(row), step_m, 0.01, 0.025, smoothing_m, *limits)
        slow = SlowBreak(row, step_m, smoothing_m).find(0.01, 0.025, *limits)
        np.testing.assert_allclose(fast, slow, rtol=1e-6)
        n_found += np.isfinite(fast[0])
    assert 50 < n_found < 250  # the rows try both answers


SEEDS = st.integers(0, 2**32 - 1)


@given(SEEDS, st.sampled_from([0.25, 0.5, 2.0, 4.0]))
@settings(max_examples=60, deadline=None)
def test_distances_and_depths_scaled_together_scale_the_break(seed, scale):
    """Powers of two scale without rounding; settings in metres scale along, gradients stay."""
    row = random_row(np.random.default_rng(seed), 80)
    scaled = ShelfBreakSettings(
        smoothing_km=5 * scale, sustain_km=5 * scale, shallowest_m=20 * scale, deepest_m=550 * scale,
        ocean_m=1000 * scale,
    )  # fmt: skip
    plain = find_shelf_breaks(profiles_of([row], 2000.0), DEFAULT)
    large = find_shelf_breaks(profiles_of([row * scale], 2000.0 * scale), scaled)
    np.testing.assert_array_equal(large.break_m, plain.break_m * scale)
    np.testing.assert_array_equal(large.depth_m, plain.depth_m * scale)
    np.testing.assert_array_equal(large.contrast, plain.contrast)


@given(SEEDS, st.integers(1, 60))
@settings(max_examples=60, deadline=None)
def test_what_lies_beyond_the_open_ocean_changes_nothing(seed, more):
    """The profile goes on for twice the longest smoothing beyond 1000 m, then is extended by anything."""
    rng = np.random.default_rng(seed)
    row = random_row(rng, 60)
    row = row[: np.argmax(row >= 1000.0)] if (row >= 1000.0).any() else row
    row = np.concatenate([row, np.full(12, 1500.0)])
    longer = np.concatenate([row, rng.uniform(1.0, 5000.0, more)])
    short, long = find([row], 2000.0), find([longer], 2000.0)
    for name in ("break_m", "depth_m", "contrast", "spread_m", "found_share"):
        np.testing.assert_array_equal(getattr(long, name), getattr(short, name))


@pytest.mark.real
@pytest.mark.parametrize("window", ["etopo1_us_southeast", "etopo1_iberia_biscay"])
def test_real_shelves_break_at_depths_shelves_have(repository, tmp_path, window):
    """Median between 40 and 300 m, all within 20 to 550 m, the range Britannica gives (article 539632)."""
    run = screen(
        Settings.from_dict({
            "grid": {"path": str(repository / "tests" / "data" / f"{window}.tif")},
            "transects": {"spacing_km": 40.0},
            "output": {"path": str(tmp_path / "out.gpkg"), "profiles": False, "response_curves": False},
        })
    )  # fmt: skip
    table = read_table(run.path, "transects")
    depth_m = table["break_depth_m"][table["status"] == "ok"]
    assert len(depth_m) > 30
    assert 40 < np.median(depth_m) < 300
    assert depth_m.min() >= 20
    assert depth_m.max() <= 550
