"""Several files as one grid: tiles joined bit for bit, sheets over each other in order, failures that name the file."""

import pickle
import warnings
from dataclasses import replace
from itertools import pairwise, product
from pathlib import Path

import numpy as np
import pytest
import rasterio
import shapely
from hypothesis import assume, given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from rasterio.transform import Affine
from rasterio.windows import Window
from utils_geometry import EMPTY
from utils_grid import DATA, masked_bilinear, write_nc, write_tif
from utils_pipeline import assert_same_results, screened_of, settings_for, small_coast

from shelfmap import profiles as profiles_module
from shelfmap.coast import Coast
from shelfmap.errors import GridError, LayerError
from shelfmap.geodesy import Projection
from shelfmap.grid import INSIDE, OUTSIDE, VOID, open_grid
from shelfmap.inspection import inspect_grid
from shelfmap.pipeline import screen
from shelfmap.profiles import place_on, sample_profiles, step_of
from shelfmap.settings import VOID_LAND_M, GridSettings, TransectSettings
from shelfmap.sheets import boxes_meet
from shelfmap.transects import transects_from_lines
from shelfmap.vectors import read_table

NO_COAST = Coast(lines=(), islets=EMPTY, source="none")
PLAIN = {"x0": 3.0, "y0": 50.0, "dx": 0.25, "dy": 0.125}  # sides that binary numbers hold exactly


def opened(*paths, **settings):
    return open_grid(GridSettings(path=paths, **{"positive": "up", **settings}))


def whole(source):
    return source.read(0, source.n_rows, 0, source.n_cols)


def write_cut(folder, values, row_edges, col_edges, *, overlap=0, **place):
    """Write a grid as tiles; each goes on for `overlap` cells north and east of its own."""
    paths = []
    for row0, row1 in pairwise(row_edges):
        for col0, col1 in pairwise(col_edges):
            tile = values[row0 : row1 + overlap, col0 : col1 + overlap]
            corner = {"x0": place["x0"] + col0 * place["dx"], "y0": place["y0"] + row0 * place["dy"]}
            paths.append(write_tif(folder / f"{row0}-{col0}-{overlap}.tif", tile, **{**place, **corner}))
    return paths


def rough(shape, seed=1, void_share=0.1):
    rng = np.random.default_rng(seed)
    values = rng.uniform(-900, 200, shape).astype(np.float32)
    values[rng.random(shape) < void_share] = np.nan
    return values


# --- files on one lattice --------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def cuts(tmp_path_factory):
    """A grid, and the same cut with and without overlap, its tiles in any order."""
    folder = tmp_path_factory.mktemp("cuts")
    values = rough((40, 50))
    plain = write_cut(folder, values, (0, 9, 30, 40), (0, 17, 20, 50), **PLAIN)
    over = write_cut(folder, values, (0, 9, 30, 40), (0, 17, 20, 50), overlap=3, **PLAIN)
    return opened(write_tif(folder / "whole.tif", values, **PLAIN)), opened(*plain), opened(*over[::-1])


def test_a_grid_cut_into_tiles_is_the_grid(cuts):
    one, *others = cuts
    for other in others:
        assert len(other.sheets) == 1
        assert len(other.files) == 9
        assert {name: getattr(other, name) for name in ("x0", "y0", "dx", "dy", "n_rows", "n_cols", "wraps")} == {
            name: getattr(one, name) for name in ("x0", "y0", "dx", "dy", "n_rows", "n_cols", "wraps")
        }
        assert other.box_deg == one.box_deg
        assert_array_equal(whole(other).depth_m, whole(one).depth_m)


@given(
    row0=st.integers(-3, 39), n_rows=st.integers(1, 45), col0=st.integers(-3, 49), n_cols=st.integers(1, 55),
    seed=st.integers(0, 2**32 - 1),
)  # fmt: skip
@hypothesis_settings(max_examples=30, deadline=None)
def test_windows_and_samples_of_tiles_are_those_of_the_grid(cuts, row0, n_rows, col0, n_cols, seed):
    one, *others = cuts
    assume(row0 + n_rows > 0 and col0 + n_cols > 0)
    rng = np.random.default_rng(seed)
    lon, lat = rng.uniform(2.5, 16.0, 20), rng.uniform(49.5, 55.5, 20)
    expected, (depth_m, state) = one.read(row0, row0 + n_rows, col0, col0 + n_cols), one.sample(lon, lat)
    for other in others:
        window = other.read(row0, row0 + n_rows, col0, col0 + n_cols)
        assert_array_equal(window.depth_m, expected.depth_m)
        assert (window.row0, window.col0, window.wrap_cols) == (expected.row0, expected.col0, 0)
        found_m, found = other.sample(lon, lat)
        assert_array_equal(found_m, depth_m)
        assert_array_equal(found, state)


@pytest.mark.parametrize(
    "stored", [{"south_up": True}, {"east_first": True}, {"tags": {"AREA_OR_POINT": "Point"}}, {"crs": "OGC:CRS84"}]
)
def test_tiles_may_be_stored_otherwise_than_each_other(tmp_path, stored):
    """South-up, east to west, cells said to be points, longitude named before latitude: all on one lattice."""
    values = rough((12, 20))
    paths = [
        write_tif(tmp_path / "a.tif", values[:, :8], **PLAIN),
        write_tif(tmp_path / "b.tif", values[:7, 8:], **{**PLAIN, "x0": 5.0}, **stored),
        write_tif(tmp_path / "c.tif", values[7:, 8:], **{**PLAIN, "x0": 5.0, "y0": 50.875}, **stored),
    ]
    for order in (paths, paths[::-1]):
        source = opened(*order)
        assert (len(source.sheets), source.x0, source.y0) == (1, 3.0, 50.0)
        assert_array_equal(whole(source).depth_m, -values)


def test_the_first_file_gives_a_cell_and_the_next_fills_what_it_misses(tmp_path):
    upper, lower = np.full((4, 4), -10, np.float32), np.full((4, 6), -20, np.float32)
    upper[1, 2] = np.nan
    source = opened(write_tif(tmp_path / "a.tif", upper, **PLAIN), write_tif(tmp_path / "b.tif", lower, **PLAIN))
    expected = np.full((4, 6), 20.0)
    expected[:, :4] = 10.0
    expected[1, 2] = 20.0
    assert len(source.sheets) == 1
    assert_array_equal(whole(source).depth_m, expected)
    assert pickle.loads(pickle.dumps(source)) == source


def test_a_gap_between_tiles_is_missing_and_beyond_them_is_outside(tmp_path):
    values = rough((12, 12), void_share=0.0)
    paths = write_cut(tmp_path, values, (0, 6, 12), (0, 4, 8, 12), **PLAIN)
    source = opened(*[path for path in paths if path.name != "0-4-0.tif"])
    expected = -values
    expected[:6, 4:8] = np.nan
    assert_array_equal(whole(source).depth_m, expected)
    lon, lat = source.lonlat_of([6.0, 1.0, 12.0, -1.0], [2.0, 2.0, 2.0, 2.0])
    assert_array_equal(source.sample(lon, lat)[1], [VOID, INSIDE, OUTSIDE, OUTSIDE])
    land = whole(replace(source, sheets=(replace(source.sheets[0], void_is_land=True),))).depth_m
    assert_array_equal(land, np.where(np.isnan(expected), -VOID_LAND_M, expected))


WORLD = np.random.default_rng(5).integers(-6000, 3000, (19, 36)).astype(np.int16)
POLE_TO_POLE = {"y0": -90.0, "dx": 10.0, "dy": 10.0}


@pytest.mark.parametrize("first", [0.0, -180.0])
def test_tiles_round_the_globe_are_the_globe(tmp_path, first):
    """With a last column that repeats the first, cut with it, too."""
    repeated = np.hstack([WORLD, WORLD[:, :1]])
    one = opened(write_tif(tmp_path / "w.tif", repeated, x0=first, **POLE_TO_POLE))
    paths = write_cut(tmp_path, repeated, (0, 10, 19), (0, 12, 15, 37), x0=first, **POLE_TO_POLE)
    tiles = opened(*paths)
    assert tiles.wraps
    assert (tiles.x0, tiles.n_cols, tiles.dx) == (one.x0, 36, one.dx)
    for window in ((0, 19, 0, 36), (3, 12, 30, 50), (-2, 30, -7, 3), (0, 19, 5, 80)):
        expected, found = one.read(*window), tiles.read(*window)
        assert_array_equal(found.depth_m, expected.depth_m)
        assert (found.row0, found.col0, found.wrap_cols) == (expected.row0, expected.col0, expected.wrap_cols)
    rng = np.random.default_rng(3)
    lon, lat = rng.uniform(-400, 400, 200), rng.uniform(-90, 90, 200)
    for found, expected in zip(tiles.sample(lon, lat), one.sample(lon, lat), strict=True):
        assert_array_equal(found, expected)


def test_tiles_of_both_ranges_of_longitude_go_together(tmp_path):
    """0 to 110 and 120 to 230 as stored, 240 to 350 as -120 to -10, and a third that crosses 180 over them all."""
    paths = [
        write_tif(tmp_path / "a.tif", WORLD[:, :12], x0=0.0, **POLE_TO_POLE),
        write_tif(tmp_path / "b.tif", WORLD[:, 12:24], x0=120.0, **POLE_TO_POLE),
        write_tif(tmp_path / "c.tif", WORLD[:, 24:], x0=-120.0, **POLE_TO_POLE),
        write_tif(tmp_path / "d.tif", np.roll(WORLD, 6, axis=1)[:, :12], x0=-60.0, **POLE_TO_POLE),
    ]
    one = opened(write_tif(tmp_path / "w.tif", WORLD, x0=0.0, **POLE_TO_POLE))
    for order in (paths, paths[::-1], [paths[1], paths[3], paths[0], paths[2]]):
        tiles = opened(*order)
        assert (len(tiles.sheets), tiles.wraps, tiles.n_cols) == (1, True, 36)
        rng = np.random.default_rng(3)
        lon, lat = rng.uniform(-400, 400, 200), rng.uniform(-90, 90, 200)
        assert_allclose(tiles.sample(lon, lat)[0], one.sample(lon, lat)[0], atol=1e-7)


def test_tiles_on_both_sides_of_180_make_a_small_grid(tmp_path):
    """Not one of 360 degrees with a gap, whichever comes first."""
    values = rough((8, 20), void_share=0.0)
    place = {"y0": -20.0, "dx": 1.0, "dy": 1.0}
    west = write_tif(tmp_path / "w.tif", values[:, :10], x0=170.5, **place)
    east = write_tif(tmp_path / "e.tif", values[:, 10:], x0=-179.5, **place)
    for source in (opened(west, east), opened(east, west)):
        assert (source.x0, source.n_cols, source.wraps) == (170.5, 20, False)
        assert_array_equal(whole(source).depth_m, -values)
        assert source.sample(-175.0, -18.0)[1] == INSIDE


def test_a_globe_with_a_gap_stays_in_one_piece(tmp_path):
    """Tiles from 40 to 350 degrees: the seam lies in the gap, not beside it."""
    paths = [
        write_tif(tmp_path / "a.tif", WORLD[:, :16], x0=-170.0, **POLE_TO_POLE),
        write_tif(tmp_path / "b.tif", WORLD[:, 16:32], x0=40.0, **POLE_TO_POLE),
    ]
    source = opened(*paths)
    assert (source.x0, source.n_cols, source.wraps) == (40.0, 31, False)


def test_lattices_that_do_not_fit_are_sheets_of_their_own(tmp_path):
    a = write_tif(tmp_path / "a.tif", rough((6, 6), void_share=0.0), **PLAIN)
    for name, change in (
        ("half", {"x0": 3.0 + 6.5 * 0.25}),
        ("step", {"dx": 0.2}),
        ("system", {"crs": "EPSG:32631", "x0": 5e5, "y0": 5.6e6, "dx": 1e4, "dy": 1e4}),
    ):
        b = write_tif(tmp_path / f"{name}.tif", rough((6, 6), void_share=0.0), **{**PLAIN, **change})
        assert len(opened(a, b).sheets) == 2
    near = write_tif(tmp_path / "near.tif", rough((6, 6)), **{**PLAIN, "x0": 3.0 + 6.02 * 0.25})
    assert len(opened(a, near).sheets) == 1


def test_a_file_joins_a_sheet_further_up_only_where_nothing_between_is_passed_over(tmp_path):
    """First wins, also where the first and the third are tiles of one grid."""
    tile = np.full((4, 4), -1, np.float32)
    a = write_tif(tmp_path / "a.tif", tile, **PLAIN)
    c = write_tif(tmp_path / "c.tif", 3 * tile, **{**PLAIN, "x0": 5.0})
    over_c = write_tif(tmp_path / "over.tif", 2 * tile, **{**PLAIN, "x0": 5.1})
    aside = write_tif(tmp_path / "aside.tif", 2 * tile, **{**PLAIN, "x0": 9.1})
    assert [len(sheet.files) for sheet in opened(a, over_c, c).sheets] == [1, 1, 1]
    assert opened(a, over_c, c).sample(5.5, 50.2)[0] == 2.0
    assert [len(sheet.files) for sheet in opened(a, aside, c).sheets] == [2, 1]


@given(*[st.tuples(st.floats(-720, 720), st.floats(0, 360)) for _ in range(2)])
def test_boxes_meet_on_the_circle(one, other):
    """Against points: the ends of both boxes, one of which lies in the other where they meet."""
    (a, wide_a), (b, wide_b) = one, other

    def holds(west, wide, lon):
        return (lon - west) % 360 <= wide

    expected = any(holds(a, wide_a, x) for x in (b, b + wide_b)) or any(holds(b, wide_b, x) for x in (a, a + wide_a))
    edges = [(x - y) % 360 for x in (a, a + wide_a) for y in (b, b + wide_b)]
    assume(min(min(e, 360 - e) for e in edges) > 1e-6)
    assert boxes_meet((a, 0, a + wide_a, 1), (b, 0, b + wide_b, 1)) == expected


# --- sheets over each other ------------------------------------------------------------------------------------


@pytest.fixture
def stack(tmp_path):
    """A fine sheet of two tiles with missing cells and a gap, a middle one, over a coarse one they reach beyond."""
    fine = rough((30, 24), seed=2, void_share=0.2)
    middle, coarse = rough((9, 9), seed=3, void_share=0.2), rough((8, 8), seed=4, void_share=0.2)
    place = {"x0": 3.3, "y0": 50.4, "dx": 0.03, "dy": 0.03}
    tiles = write_cut(tmp_path, fine, (0, 30), (0, 10, 14, 24), **place)
    del tiles[1]
    layers = [
        (np.where((np.arange(24) >= 10) & (np.arange(24) < 14), np.nan, fine), place),
        (middle, {"x0": 2.55, "y0": 50.11, "dx": 0.11, "dy": 0.12}),
        (coarse, PLAIN),
    ]
    paths = [write_tif(tmp_path / f"{k}.tif", values, **place) for k, (values, place) in enumerate(layers[1:])]
    return opened(*tiles, *paths), layers


def slow_stack(layers, lon, lat):
    """Depth by the plain bilinear loop from the first sheet that has one; NaN for none."""
    for values, place in layers:
        depth, state = masked_bilinear(-values, (lat - place["y0"]) / place["dy"], (lon - place["x0"]) / place["dx"])
        if state == INSIDE:
            return depth
    return np.nan


def padded(source, layers):
    """Layers with the last one as large as the frame."""
    (values, place), cells = layers[-1], np.full((source.n_rows, source.n_cols), np.nan)
    row0, col0 = (round((place[k] - getattr(source, k)) / place[d]) for k, d in (("y0", "dy"), ("x0", "dx")))
    cells[row0 : row0 + values.shape[0], col0 : col0 + values.shape[1]] = values
    return [*layers[:-1], (cells, {**place, "x0": source.x0, "y0": source.y0})]


def test_points_take_the_first_depth_there_is(stack):
    source, layers = stack
    layers = padded(source, layers)
    rng = np.random.default_rng(9)
    lon, lat = rng.uniform(2.3, 5.0, 400), rng.uniform(49.9, 51.3, 400)
    depth_m, state = source.sample(lon, lat)
    expected = [slow_stack(layers, *point) for point in zip(lon, lat, strict=True)]
    assert_allclose(depth_m, expected, rtol=1e-9)
    assert_array_equal(state == INSIDE, np.isfinite(expected))
    assert 0.02 < np.mean(state == VOID) < 0.5
    assert (source.sample(lon.reshape(20, 20), lat.reshape(20, 20))[0].ravel() == depth_m)[state == INSIDE].all()


def test_profiles_take_the_first_depth_there_is(stack):
    """Each sample against the plain loop at its place on the chord, but for those that the tracing mended.

    Water is raised by 300 m, so that few samples are land.
    """
    source, layers = stack
    source = replace(source, sheets=tuple(replace(sheet, level_shift_m=300.0) for sheet in source.sheets))
    layers = [(values - 300.0, place) for values, place in padded(source, layers)]
    rng = np.random.default_rng(4)
    ends = np.stack([rng.uniform(2.5, 4.6, (60, 2)), rng.uniform(50.0, 50.9, (60, 2))], axis=2)
    transects = transects_from_lines(shapely.linestrings(ends), None, NO_COAST, 1e4)
    profiles = sample_profiles(source, transects, 1500.0, seek_m=0.0, islets=EMPTY)
    at_m = profiles.shore_m[:, None] + profiles.distance_m
    lon, lat = place_on(transects, at_m)
    raw = ~profiles.is_filled & np.isfinite(profiles.depth_m) & (profiles.depth_m > 0)
    expected = [slow_stack(layers, lon[k, j], lat[k, j]) for k, j in np.argwhere(raw)]
    assert_allclose(profiles.depth_m[raw], expected, rtol=1e-6)
    assert raw.sum() > 200


@pytest.mark.parametrize("most_cells", [1, 300])
def test_groups_of_transects_do_not_move_a_depth(stack, monkeypatch, most_cells):
    source, _ = stack
    rng = np.random.default_rng(6)
    ends = np.stack([rng.uniform(2.5, 4.9, (30, 2)), rng.uniform(50.0, 51.2, (30, 2))], axis=2)
    transects = transects_from_lines(shapely.linestrings(ends), None, NO_COAST, 1e4)
    together = sample_profiles(source, transects, 1500.0, seek_m=1e4, islets=EMPTY)
    read = []
    monkeypatch.setattr("shelfmap.profiles.MOST_CELLS", most_cells)
    monkeypatch.setattr(
        "shelfmap.profiles._read_stack", lambda *args, _call=profiles_module._read_stack: read.append(1) or _call(*args)
    )
    apart = sample_profiles(source, transects, 1500.0, seek_m=1e4, islets=EMPTY)
    assert len(read) == 30 if most_cells == 1 else 1 < len(read) < 31
    assert_array_equal(apart.depth_m, together.depth_m)
    assert_array_equal(apart.end_reason, together.end_reason)


def test_a_long_transect_on_fine_cells_is_read_in_runs(tmp_path, monkeypatch):
    """230 km across 800 by 800 cells: 640,000 cells as one window; a tenth of that, and a cell or two more a run."""
    values = rough((800, 800), void_share=0.02)
    source = opened(write_tif(tmp_path / "a.tif", values - 1000, x0=3.0, y0=-1.0, dx=0.002, dy=0.002))
    line = np.array([shapely.linestrings([3.01, 4.59], [-0.99, 0.59])], dtype=object)
    transects = transects_from_lines(line, None, NO_COAST, 1e4)
    at_once = sample_profiles(source, transects, 200.0, seek_m=0.0, islets=EMPTY)
    assert at_once.n_samples[0] > 1200
    stacks = []
    monkeypatch.setattr("shelfmap.profiles.MOST_CELLS", 64_000)
    monkeypatch.setattr(
        "shelfmap.profiles._read_stack",
        lambda *args, _call=profiles_module._read_stack: stacks.append(_call(*args)) or stacks[-1],
    )
    in_runs = sample_profiles(source, transects, 200.0, seek_m=0.0, islets=EMPTY)
    depth, layout, _ = stacks[0]
    assert len(layout) == 10
    assert depth.size < 1.4 * 64_000
    assert_array_equal(in_runs.depth_m, at_once.depth_m)


def test_sheets_that_transects_pass_by_are_not_read(stack):
    """A tile that has vanished is no fault of transects elsewhere."""
    source, _ = stack
    for placed in source.sheets[0].files:
        Path(placed.file.path).unlink()
    for lat, fails in ((50.15, False), (50.5, True)):
        line = np.array([shapely.linestrings([2.6, 4.6], [lat, lat])], dtype=object)
        transects = transects_from_lines(line, None, NO_COAST, 1e4)
        if fails:
            with pytest.raises(GridError, match=r"0-0-0.tif: cannot be read as a raster .*No such file"):
                sample_profiles(source, transects, 1500.0, seek_m=1e4, islets=EMPTY)
        else:
            sample_profiles(source, transects, 1500.0, seek_m=1e4, islets=EMPTY)


def test_a_transect_across_the_meridian_opposite_of_a_sheet_meets_nothing_there(tmp_path):
    """From 348 to 358 E, over a sheet that ends at 350: at 355 its columns jump by a turn, right over the sheet."""
    upper = write_tif(tmp_path / "u.tif", np.full((40, 351), -7, np.float32), x0=0.0, y0=-20.0, dx=1.0, dy=1.0)
    world = write_tif(tmp_path / "w.tif", np.full((179, 360), -500, np.float32), x0=-180.0, y0=-89.0, dx=1.0, dy=1.0)
    with rasterio.open(upper, "r+") as sheet:  # a step of its own, so that it is no tile of the world
        sheet.transform = Affine(1.001, 0, -0.5, 0, -1.0, 19.5)
    source = opened(upper, world)
    assert len(source.sheets) == 2
    line = np.array([shapely.linestrings([348.0, 358.0], [0.0, 0.0])], dtype=object)
    transects = transects_from_lines(line, None, NO_COAST, 1e4)
    profiles = sample_profiles(source, transects, 2000.0, seek_m=0.0, islets=EMPTY)
    lon, _ = place_on(transects, profiles.shore_m[:, None] + profiles.distance_m)
    assert_allclose(profiles.depth_m, np.where(lon < 350.35, 7.0, 500.0), rtol=1e-12)


# --- the frame -------------------------------------------------------------------------------------------------


def test_the_frame_is_the_last_lattice_large_enough_for_all(stack):
    """Coarse cells of 0.25 by 0.125 degrees from 3, 50; the middle sheet begins at 2.495, the fine ends at 51.285."""
    source, _ = stack
    assert (source.x0, source.y0, source.dx, source.dy) == (2.5, 50.0, 0.25, 0.125)
    assert (source.n_rows, source.n_cols) == (11, 10)
    assert source.sheets[-1].n_cols == 10


def test_cells_of_the_frame_take_means_of_the_finest_sheet(stack):
    """4 by 4 depths of the fine sheet (8 columns and 4 rows of it in a cell), 2 by 2 and 1 by 1: plain loops."""
    source, layers = stack
    layers = padded(source, layers)
    assert [round(source.step_m / sheet.step_m) for sheet in source.sheets] == [7, 2, 1]
    expected = np.full((source.n_rows, source.n_cols), np.nan)
    for n, layer in ((1, layers[2]), (2, layers[1]), (4, layers[0])):
        off = (np.arange(n) + 0.5) / n - 0.5
        for row in range(source.n_rows):
            for col in range(source.n_cols):
                at = [(2.5 + (col + a) * 0.25, 50 + (row + b) * 0.125) for a in off for b in off]
                depths = np.array([slow_stack([layer], *point) for point in at])
                if np.isfinite(depths).sum() >= n * n / 2:
                    expected[row, col] = np.nanmean(depths)
    assert_allclose(whole(source).depth_m, expected, rtol=1e-6)
    part = source.read(2, 7, 3, 9)
    assert_array_equal(part.depth_m, whole(source).depth_m[2:7, 3:9])


def test_windows_over_the_seam_hold_the_same_bits(tmp_path):
    """Whatever window a cell of the frame is read in, and on whichever turn."""
    rng = np.random.default_rng(7)
    coarse = write_tif(tmp_path / "w.tif", WORLD[:, :35], **{**POLE_TO_POLE, "x0": -180.0, "dx": 360 / 35})
    fine_m = rng.uniform(-5000, -10, (70, 90)).astype(np.float32)
    fine = write_tif(tmp_path / "f.tif", fine_m, x0=160.3, y0=-30.2, dx=0.7, dy=0.9)
    source = opened(fine, coarse)
    everything = whole(source).depth_m
    covered = np.abs(everything + WORLD[:, :35]) > 1e-3
    assert covered[:, :4].any()
    assert covered[:, -2:].any()
    for _ in range(30):
        row0, col0 = rng.integers(0, 15), rng.integers(-40, 40)
        window = source.read(row0, row0 + rng.integers(1, 9), col0, col0 + rng.integers(1, 30))
        rows = window.row0 + np.arange(window.depth_m.shape[0])
        cols = (window.col0 + np.arange(window.depth_m.shape[1])) % 35
        assert_array_equal(window.depth_m, everything[np.ix_(rows, cols)])
    assert_array_equal(source._means(source.sheets[0], (8, 12, 35, 39)), source._means(source.sheets[0], (8, 12, 0, 4)))


def test_missing_cells_of_upper_sheets_are_no_land(tmp_path):
    """Land is what all files miss."""
    values = np.full((8, 8), -50, np.float32)
    fine, coarse = values.copy(), values.copy()
    fine[2:6, 2:6], coarse[:, 5:] = np.nan, np.nan
    place = {**PLAIN, "x0": 3.125, "dx": 0.125}
    paths = write_tif(tmp_path / "f.tif", fine, **place), write_tif(tmp_path / "c.tif", coarse, **PLAIN)
    source = opened(*paths, void_is_land=True)
    lon = np.array([3.125 + 3.5 * 0.125, 3.125, 3 + 7 * 0.25])
    depth_m, state = source.sample(lon, np.full(3, 50.4))
    assert_array_equal(depth_m, [50.0, 50.0, -VOID_LAND_M])
    assert_array_equal(state, INSIDE)
    assert whole(source).depth_m[3, 7] == -VOID_LAND_M
    assert whole(source).depth_m[3, 1] == 50.0


@pytest.mark.parametrize(
    ("crs", "x0", "y0", "lon", "lat"),
    [
        ("EPSG:32631", 4.8e5, 5.5e6, 3.5, 50.0),
        ("EPSG:3035", 3.8e6, 2.8e6, 4.8, 49.5),
        ("EPSG:3995", -2e5, -2e5, 50.0, 89.5),
        ("EPSG:3832", 3.3e6, 2e6, 180.3, 17.8),
    ],
)
@pytest.mark.parametrize("first", [0.0, -180.0])
def test_fine_sheets_of_any_system_lie_over_a_globe(tmp_path, crs, x0, y0, lon, lat, first):
    """A cap over the pole, a sheet across 180: found at points, in the frame, and by transects over the seam."""
    world = np.full((180, 360), -4000, np.int16)
    coarse = write_tif(tmp_path / "w.tif", world, x0=first + 0.5, y0=-89.5, dx=1.0, dy=1.0)
    fine = write_tif(tmp_path / "f.tif", np.full((200, 200), -30, np.float32), x0=x0, y0=y0, dx=2e3, dy=2e3, crs=crs)
    source = opened(fine, coarse)
    assert (source.n_rows, source.n_cols, source.wraps) == (180, 360, True)
    x, y = Projection(crs).from_lonlat(lon, lat)
    assert x0 < x < x0 + 4e5
    assert y0 < y < y0 + 4e5
    assert_allclose(source.sample([lon, lon - 360, 100.0], [lat, lat, 0.0])[0], [30.0, 30.0, 4000.0])
    cells = whole(source)
    col, row = np.round(source.index_of(*source.sheets[0].lonlat_of(40.0, 60.0))).astype(int)
    assert cells.depth_m[row, col % 360] == pytest.approx(30.0)
    assert cells.depth_m[90, 100] == 4000.0
    assert_array_equal(source.read(0, 180, col - 5, col + 5).depth_m[:, 5], cells.depth_m[:, col % 360])
    line = np.array([shapely.linestrings([lon - 0.35, lon + 0.35], [lat, lat])], dtype=object)
    transects = transects_from_lines(line, None, NO_COAST, 1e4)
    profiles = sample_profiles(source, transects, 500.0, seek_m=0.0, islets=EMPTY)
    assert_allclose(profiles.depth_m, 30.0)


@pytest.mark.parametrize(("dx", "n_cols", "wraps"), [(1.0, 360, True), (0.7, 514, False)])
def test_a_frame_grows_round_the_globe_and_no_further(tmp_path, dx, n_cols, wraps):
    """A cap over the pole above a grid from 10 to 50 E and 60 to 84 N; cells of 0.7 degrees do not close the globe."""
    coarse = write_tif(
        tmp_path / "c.tif", np.full((24, round(40 / dx)), -900, np.int16), x0=10 + dx / 2, y0=60.5, dx=dx, dy=1.0
    )
    cap = write_tif(
        tmp_path / "p.tif", np.full((80, 80), -70, np.int16), x0=-39e4, y0=-39e4, dx=1e4, dy=1e4, crs="EPSG:3995"
    )
    source = opened(cap, coarse)
    assert (source.n_rows, source.n_cols, source.wraps) == (30, n_cols, wraps)
    assert source.box_deg[3] == 90.0
    depth_m, state = source.sample([30.0, 30.0, -120.0, 100.0], [88.0, 70.0, 87.5, 70.0])
    assert_allclose(depth_m, [70.0, 900.0, 70.0, np.nan])
    assert_array_equal(state, [INSIDE, INSIDE, INSIDE, VOID])
    cells = whole(source).depth_m
    assert_allclose(cells[-1], 70.0)
    col, row = np.round(source.index_of([30.2, 100.2], [70.5, 70.5])).astype(int)
    assert_array_equal(cells[row, col], [900.0, np.nan])


def test_a_projected_frame_grows_to_hold_what_lies_over_it(tmp_path):
    """A geographic sheet over the corner of a UTM grid; frames of a projected system have no globe to end at."""
    coarse = write_tif(
        tmp_path / "c.tif", np.full((20, 20), -900, np.int16), x0=5e5, y0=5e6, dx=5e3, dy=5e3, crs="EPSG:32631"
    )
    fine = write_tif(tmp_path / "f.tif", np.full((80, 80), -70, np.int16), x0=2.6, y0=44.9, dx=0.01, dy=0.01)
    source = opened(fine, coarse)
    x, y = Projection("EPSG:32631").from_lonlat(np.array([2.6, 2.6, 3.4]), np.array([44.9, 45.7, 45.7]))
    assert -1e3 < source.x0 - x.min() < 5e3  # half a cell of the fine sheet lies beyond these corners
    assert -1e3 < source.y0 - y.min() < 5e3
    assert source.n_rows > 20
    assert source.n_cols > 20
    assert (source.x0 - 5e5) % 5e3 == (source.y0 - 5e6) % 5e3 == 0.0
    depth_m, _ = source.sample([2.7, 3.9, 4.9], [45.0, 45.5, 45.2])
    assert_allclose(depth_m, [70.0, 900.0, np.nan])
    col, row = np.round(source.index_of([2.7, 3.9], [45.0, 45.5])).astype(int)
    assert_allclose(whole(source).depth_m[row, col], [70.0, 900.0])


def test_a_sheet_beyond_the_map_of_the_last_is_refused(tmp_path):
    world = write_tif(tmp_path / "w.tif", WORLD, **POLE_TO_POLE)
    utm = write_tif(tmp_path / "u.tif", rough((6, 6)), x0=5e5, y0=5e6, dx=1e3, dy=1e3, crs="EPSG:32631")
    with pytest.raises(GridError, match=r"w.tif: reaches beyond what WGS 84 / UTM zone 31N .* name the file .* last"):
        opened(world, utm)


def test_a_finer_file_below_a_coarser_one_is_warned_of(tmp_path, caplog):
    coarse = write_tif(tmp_path / "c.tif", rough((8, 8)), **PLAIN)
    fine = write_tif(tmp_path / "f.tif", rough((8, 8)), **{**PLAIN, "dx": 0.05, "dy": 0.05})
    opened(fine, coarse)
    assert caplog.text == ""
    opened(coarse, fine)
    assert "f.tif has smaller cells than" in caplog.text


def test_step_follows_the_finest_sheet_down_to_a_quarter_of_the_frame(tmp_path):
    settings = TransectSettings(length_km=100)
    coarse = write_tif(tmp_path / "c.tif", rough((40, 40)), x0=4e5, y0=5e6, dx=4e3, dy=4e3, crs="EPSG:32631")
    for cell, expected in ((2e3, 2e3), (1e2, 1e3)):
        fine = write_tif(tmp_path / "f.tif", rough((9, 9)), x0=5e5, y0=5.1e6, dx=cell, dy=cell, crs="EPSG:32631")
        source = opened(fine, coarse)
        assert step_of(source, settings) == pytest.approx(expected, rel=1e-3)
        assert step_of(source, TransectSettings(length_km=100, step_km=0.2)) == 200.0


# --- whole runs ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("overlap", [0, 2])
def test_a_grid_cut_into_tiles_gives_the_same_tables(tmp_path, overlap):
    grid = small_coast(cell=0.0625, shape=(44, 76))
    values = grid.elevation_m.copy()
    values[20:24, 30:34] = np.nan
    place = {"x0": -17.0, "y0": 38.5, "dx": 0.0625, "dy": 0.0625}
    one = write_tif(tmp_path / "whole.tif", values, **place)
    tiles = write_cut(tmp_path, values, (0, 13, 30, 44), (0, 20, 45, 76), overlap=overlap, **place)
    for name, path in (("one", str(one)), ("cut", [str(tile) for tile in tiles[::-1]])):
        settings = settings_for(one, tmp_path, grid={"path": path}, output={"path": f"{name}.gpkg"})
        assert (screen(settings).status == "ok").sum() > 10
    assert_same_results(tmp_path / "one.gpkg", tmp_path / "cut.gpkg")


@pytest.mark.real
def test_a_real_grid_cut_by_its_windows_gives_the_same_tables(tmp_path):
    """Steps of a tenth of a degree are no binary numbers: places are counted from the same corner all the same."""
    path = DATA / "etopo1_bering_antimeridian.tif"
    tiles = []
    with rasterio.open(path) as grid:
        for row, col in product(range(0, grid.height, 47), range(0, grid.width, 53)):
            window = Window(col, row, min(53, grid.width - col), min(47, grid.height - row))
            tiles.append(tmp_path / f"{row}-{col}.tif")
            profile = {"driver": "GTiff", "count": 1, "dtype": grid.dtypes[0], "crs": grid.crs, "nodata": grid.nodata}
            x, y = grid.transform.c + col * grid.transform.a, grid.transform.f + row * grid.transform.e
            size = {"width": window.width, "height": window.height, "transform": Affine(0.1, 0, x, 0, -0.1, y)}
            with rasterio.open(tiles[-1], "w", **profile, **size) as out:
                out.write(grid.read(window=window))
    assert len(tiles) == 32
    for name, files in (("one", path), ("cut", [str(tile) for tile in tiles])):
        settings = settings_for(
            path, tmp_path, grid={"path": files}, coast={"generalise_km": 60.0, "box": [170.0, 58.0, -170.0, 66.0]},
            output={"path": f"{name}.gpkg"},
        )  # fmt: skip
        assert (screen(settings).status == "ok").sum() > 10
    assert_same_results(tmp_path / "one.gpkg", tmp_path / "cut.gpkg")


def bed_m(lon, lat):
    """Elevation of a bed that falls westward from a coast at 9.5 W, with hills of 3 km on it."""
    east_m = (lon + 9.5) * 111_320 * np.cos(np.radians(40.0))
    return 0.004 * east_m + 4.0 * np.sin(east_m / 3e3) * np.cos(lat * 111_320 / 4e3)


def test_a_fine_survey_over_a_coarse_grid_is_followed(tmp_path):
    """UTM cells of 400 m over cells of 6 km that have the same coast 8 km too far east and no hills.

    Hills of wave number 1/3 km and 1/4 km and 4 m height: bilinear on 400 m cells is off by h^2/8 of their curvature,
    400^2 / 8 * 4 * (1/9 + 1/16) / 1e6 = 14 mm, and by as much as the chord of 10 km strays (2 m on slopes of 4 m in
    3 km, 3 mm); the coarse grid is off by 32 m. Where the survey is missing the coarse grid shows.
    """
    coarse_lon, coarse_lat = -12.0 + 0.0625 * np.arange(80), 38.5 + 0.0625 * np.arange(48)
    lon, lat = np.meshgrid(coarse_lon, coarse_lat)
    flat = 0.004 * ((lon + 9.5) * 111_320 * np.cos(np.radians(40.0)) - 8e3)
    coarse = write_tif(tmp_path / "c.tif", flat.astype(np.float32), x0=-12.0, y0=38.5, dx=0.0625, dy=0.0625)
    x, y = np.meshgrid(4.2e5 + 400.0 * np.arange(200), 4.4e6 + 400.0 * np.arange(150))
    fine_m = bed_m(*Projection("EPSG:32629").to_lonlat(x, y)).astype(np.float32)
    fine_m[60:64, :] = np.nan
    fine = write_tif(
        tmp_path / "f.tif", fine_m, x0=4.2e5, y0=4.4e6, dx=400.0, dy=400.0, crs="EPSG:32629", compress="deflate"
    )
    settings = settings_for(
        coarse, tmp_path, grid={"path": [str(fine), str(coarse)]},
        transects={"spacing_km": 2.0, "length_km": 60.0, "step_km": 0.4},
    )  # fmt: skip
    source = open_grid(settings.grid)
    _, screened = screened_of(settings)
    profiles, transects = screened.profiles, screened.transects
    lon, lat = place_on(transects, profiles.shore_m[:, None] + profiles.distance_m)
    col, row = source.sheets[0].index_of(lon, lat)
    raw = np.isfinite(profiles.depth_m) & ~profiles.is_filled & (profiles.distance_m > 0)
    known = raw & (col > 1) & (col < 198) & (row > 1) & (row < 148) & ((row < 59) | (row > 64))
    assert known.sum() > 500
    assert_allclose(profiles.depth_m[known], -bed_m(lon, lat)[known], atol=0.02)
    void = raw & (col > 1) & (col < 198) & (row > 60.6) & (row < 62.4)
    coarse_m = -0.004 * ((lon + 9.5) * 111_320 * np.cos(np.radians(40.0)) - 8e3)
    assert void.sum() > 20
    assert_allclose(profiles.depth_m[void], coarse_m[void], atol=0.02)
    # stations follow the survey's coast where there is one, and the coarse one elsewhere
    on_survey = (source.sheets[0].index_of(transects.lon_deg, transects.lat_deg)[1] > 10) & (
        source.sheets[0].index_of(transects.lon_deg, transects.lat_deg)[1] < 140
    )
    east_m = (transects.lon_deg + 9.5) * 111_320 * np.cos(np.radians(40.0))
    assert np.abs(np.median(east_m[on_survey])) < 1e3
    assert np.median(east_m[transects.lat_deg < 39.3]) == pytest.approx(8e3, abs=1e3)


# --- what is said of several files -----------------------------------------------------------------------------


def test_run_and_report_name_every_file(tmp_path, write_grid):
    grid = write_grid(small_coast())
    fine = write_tif(tmp_path / "fine.tif", np.full((9, 9), -40, np.float32), x0=0.0, y0=40.0, dx=0.01, dy=0.01)
    settings = settings_for(grid, tmp_path, grid={"path": [str(fine), str(grid)]}, transects={"spacing_km": 50.0})
    run = screen(settings)
    rows = read_table(run.path, "run")
    said = {name: value for topic, name, value in zip(*rows.values(), strict=True) if topic == "source"}
    assert (said["grid 1"], said["grid 2"]) == (str(fine), str(grid))
    assert said["grid 1 values"] == said["grid 2 values"] == "positive up: set by grid.positive"
    assert "EPSG:4326" in said["grid 2 coordinate system"]
    assert run.source.path == f"{fine} and 1 more file"
    report = inspect_grid(settings.grid)
    assert [file.sheet for file in report.files] == [1, 2]
    text = "\n".join(report.lines())
    assert f"{fine}: sheet 1, 9 rows by 9 columns, cells of " in text
    assert f"{grid}: sheet 2, 55 rows by 95 columns" in text
    assert report.bytes_on_disk == fine.stat().st_size + grid.stat().st_size
    assert (report.n_rows, report.n_cols) == (55, 95)
    assert report.can_screen
    for lost in (fine, grid):
        doomed = settings.model_copy(update={"output": settings.output.model_copy(update={"path": lost})})
        with pytest.raises(LayerError, match=r"is grid\.path too and would be lost"):
            screen(doomed, overwrite=True)


def test_each_file_tells_its_own_sign(tmp_path, caplog):
    up = write_nc(tmp_path / "up.nc", -np.full((4, 4), 40, np.int16), np.arange(4.0), np.arange(4.0), positive="up")
    down = write_nc(
        tmp_path / "d.nc", np.full((4, 4), 90, np.int16), np.arange(4.0, 8.0), np.arange(4.0), positive="down"
    )
    source = opened(up, down, positive="auto")
    assert_array_equal(whole(source).depth_m, np.tile(np.repeat([40.0, 90.0], 4), (4, 1)))
    assert source.positive == "up and down"
    assert 'd.nc down, attribute positive "down"' in source.positive_why
    assert inspect_grid(GridSettings(path=(up, down))).lines()[7].startswith("values       elevations and depths")


def test_a_tile_of_water_alone_is_judged_with_the_others_of_its_grid(tmp_path):
    """A cut grid is understood like the whole; a file on a lattice of its own has to tell by itself."""
    values = np.tile(np.linspace(-3000, 900, 12).astype(np.float32), (6, 1))
    tiles = write_cut(tmp_path, values, (0, 6), (0, 4, 8, 12), **PLAIN)
    source = opened(*tiles, positive="auto")
    assert_array_equal(whole(source).depth_m, -values)
    assert source.positive_why == "deepest value -3000 m against highest 900 m"
    with pytest.raises(GridError, match=r"0-0-0\.tif: cannot tell elevations from depths"):
        opened(tiles[0], positive="auto")


@pytest.mark.parametrize(
    ("spoil", "message"),
    [
        (lambda path: path.unlink(), r"0-20-0.tif: cannot be read as a raster .*No such file"),
        (lambda path: path.write_bytes(path.read_bytes()[:700]), r"0-20-0.tif: cannot be read as a raster"),
        (lambda path: write_tif(path, rough((5, 5)), **PLAIN), r"0-20-0.tif: the file has changed since"),
    ],
)
def test_a_tile_that_vanishes_or_breaks_is_named(tmp_path, spoil, message):
    """Others are open when it happens, and windows that do not need it still come."""
    values = rough((20, 60))
    tiles = write_cut(tmp_path, values, (0, 20), (0, 20, 40, 60), **PLAIN)
    coarse = write_tif(tmp_path / "c.tif", rough((9, 9)), **{**PLAIN, "dx": 2.0, "dy": 2.0})
    source = opened(*tiles, coarse)
    spoil(tiles[1])
    windows = source.sheets[0].read_many([(0, 20, 0, 20), (0, 20, 0, 60)])
    assert_array_equal(next(windows).depth_m, -values[:, :20])
    with pytest.raises(GridError, match=message):
        next(windows)
    with pytest.raises(GridError, match=message):
        whole(source)
    with pytest.raises(GridError, match=message):
        source.sample(*source.sheets[0].lonlat_of(30.0, 5.0))


def test_more_files_than_may_be_open(tmp_path, monkeypatch):
    monkeypatch.setattr("shelfmap.rasterfile._MOST_HANDLES", 3)
    values = rough((4, 40), void_share=0.0)
    source = opened(*write_cut(tmp_path, values, (0, 2, 4), range(0, 41, 4), **PLAIN))
    assert_array_equal(whole(source).depth_m, -values)


def test_mosaic_that_names_its_sources_by_their_place(tmp_path, monkeypatch):
    """A VRT beside its tiles, opened from another folder; and one whose tile is gone fails, when read at the latest."""
    folder = tmp_path / "mosaic"
    folder.mkdir()
    values = rough((10, 12), void_share=0.0)
    write_cut(folder, values, (0, 10), (0, 5, 12), **PLAIN)
    with rasterio.open(folder / "0-0-0.tif") as tile:
        top_left = tile.transform
    sources = "".join(
        f'<SimpleSource><SourceFilename relativeToVRT="1">{name}</SourceFilename><SourceBand>1</SourceBand>'
        f'<SrcRect xOff="0" yOff="0" xSize="{n}" ySize="10"/><DstRect xOff="{col}" yOff="0" xSize="{n}" ySize="10"/>'
        "</SimpleSource>"
        for name, col, n in (("0-0-0.tif", 0, 5), ("0-5-0.tif", 5, 7))
    )
    (folder / "all.vrt").write_text(
        '<VRTDataset rasterXSize="12" rasterYSize="10"><SRS>EPSG:4326</SRS>'
        f"<GeoTransform>{', '.join(repr(part) for part in top_left.to_gdal())}</GeoTransform>"
        f'<VRTRasterBand dataType="Float32" band="1">{sources}</VRTRasterBand></VRTDataset>'
    )
    monkeypatch.chdir(tmp_path)
    source = opened("mosaic/all.vrt")
    assert_array_equal(whole(source).depth_m, -values)
    (folder / "0-5-0.tif").unlink()
    with pytest.raises(GridError, match=r"all.vrt: cannot be read as a raster"):
        whole(source)


def test_int16_tiles_with_scale_and_a_variable_among_several(tmp_path):
    """Netcdf of several variables packed in int16 beside a GeoTIFF of floats on the same lattice."""
    values = np.arange(24, dtype=np.int16).reshape(4, 6) - 30
    packed = write_nc(
        tmp_path / "p.nc", values, 3 + 0.25 * np.arange(6), 50 + 0.125 * np.arange(4), names=("z", "tid"),
        scale_factor=0.5, add_offset=-2.0, _FillValue=np.int16(-20),
    )  # fmt: skip
    below = write_nc(
        tmp_path / "q.nc", np.full((4, 6), -9, np.int16), 3 + 0.25 * np.arange(6), 50 + 0.125 * np.arange(4),
        names=("z", "tid"), mapping=True,
    )  # fmt: skip
    source = opened(packed, below, variable="z")
    assert len(source.sheets) == 1
    assert source.dtype == "int16"
    assert_array_equal(whole(source).depth_m, np.where(values == -20, 9.0, -(0.5 * values - 2)))


def test_no_points_at_all_and_points_that_the_first_sheet_has(stack):
    source, _ = stack
    assert source.sample([], [])[0].shape == (0,)
    depth_m, state = source.sample(3.3, 50.4 + 0.03 * np.arange(3))
    assert depth_m.shape == state.shape == (3,)


def test_nothing_is_said_while_several_files_are_read(cuts):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        whole(cuts[1])
