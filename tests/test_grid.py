"""Grids read right however they are stored, sampled right, and refused with a cure where they cannot be."""

import math
import pickle
import warnings
from http.server import BaseHTTPRequestHandler, HTTPServer
from threading import Thread

import numpy as np
import pytest
import rasterio
import rasterio.shutil
from hypothesis import assume, given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from rasterio.control import GroundControlPoint
from rasterio.transform import Affine
from scipy.ndimage import map_coordinates
from utils_grid import DATA, masked_bilinear, write_nc, write_tif

from shelfmap.errors import GridError
from shelfmap.geodesy import Projection, distance_bearing
from shelfmap.grid import INSIDE, OUTSIDE, VOID, Grid, open_grid
from shelfmap.settings import VOID_LAND_M, GridSettings

longitudes = st.floats(-720, 720)
latitudes = st.floats(-90, 90)
seeds = st.integers(0, 2**32 - 1)

# deepest 3x the highest: elevations by their values alone
ELEVATION = np.array([[-300, -200, -100, 50], [-250, -150, -50, 80], [-200, -100, 20, 100]], dtype=np.int16)


def opened(path, **settings):
    return open_grid(GridSettings(path=path, **settings))


def whole(source):
    return source.read(0, source.n_rows, 0, source.n_cols)


# --- what is read, however it is stored ------------------------------------------------------------------------


@pytest.mark.parametrize("south_up", [False, True])
@pytest.mark.parametrize("east_first", [False, True])
@pytest.mark.parametrize("dtype", ["int16", "int32", "float32", "float64"])
def test_rows_run_north_and_columns_east_whatever_the_file(tmp_path, south_up, east_first, dtype):
    path = write_tif(
        tmp_path / "a.tif", ELEVATION.astype(dtype), x0=10.0, y0=40.0, dx=0.5, south_up=south_up, east_first=east_first
    )
    source = opened(path)
    grid = whole(source)
    assert_array_equal(grid.depth_m, -ELEVATION.astype(np.float32))
    assert (source.x0, source.y0, source.dx, source.dy) == pytest.approx((10.0, 40.0, 0.5, 1.0), abs=1e-12)
    assert (source.n_rows, source.n_cols, source.wraps) == (3, 4, False)
    assert_allclose(source.box_deg, (9.75, 39.5, 11.75, 42.5), atol=1e-12)
    assert source.dtype == dtype


def test_grid_in_memory_is_read_only_float32(tmp_path):
    grid = whole(opened(write_tif(tmp_path / "a.tif", ELEVATION)))
    assert grid.depth_m.dtype == np.float32
    assert grid.depth_m.flags.c_contiguous
    with pytest.raises(ValueError, match="read-only"):
        grid.depth_m[0, 0] = 1.0


@pytest.mark.parametrize("depth_m", [np.zeros((2, 2)), np.zeros(4, np.float32), np.zeros((4, 4), np.float32)[:, ::2]])
def test_grid_refuses_arrays_kernels_cannot_take(depth_m):
    with pytest.raises(GridError, match="C-contiguous 2-D float32"):
        Grid(depth_m=depth_m, row0=0, col0=0)


def test_source_survives_pickling(tmp_path):
    source = opened(write_tif(tmp_path / "a.tif", ELEVATION))
    again = pickle.loads(pickle.dumps(source))
    assert again == source
    assert_array_equal(whole(again).depth_m, whole(source).depth_m)


def test_depths_positive_down_come_back_as_they_are(tmp_path):
    path = write_tif(tmp_path / "a.tif", -ELEVATION)
    assert_array_equal(whole(opened(path, positive="down")).depth_m, -ELEVATION)


def test_scale_and_offset_are_applied(tmp_path):
    path = write_tif(tmp_path / "a.tif", ELEVATION, scale=0.5, offset=-3.0)
    assert_array_equal(whole(opened(path)).depth_m, -(0.5 * ELEVATION - 3.0))


def test_level_shift_raises_the_water_either_sign(tmp_path):
    path = write_tif(tmp_path / "a.tif", ELEVATION)
    assert_array_equal(whole(opened(path, level_shift_m=2.5)).depth_m, 2.5 - ELEVATION)
    assert_array_equal(whole(opened(path, positive="down", level_shift_m=2.5)).depth_m, 2.5 + ELEVATION)


@pytest.mark.parametrize(
    ("dtype", "nodata"), [("int16", -150), ("float32", -9999.9), ("float32", math.nan), ("float64", -1e30)]
)
def test_missing_cells_are_nan_and_land_only_on_request(tmp_path, dtype, nodata):
    """-9999.9 in float32 is another number than in float64: it must be compared as stored."""
    values = ELEVATION.astype(dtype)
    values[1, 1] = nodata
    path = write_tif(tmp_path / "a.tif", values, nodata=nodata)
    missing = np.zeros(values.shape, bool)
    missing[1, 1] = True
    assert_array_equal(np.isnan(whole(opened(path)).depth_m), missing)
    filled = whole(opened(path, void_is_land=True, level_shift_m=5.0)).depth_m
    assert filled[1, 1] == -VOID_LAND_M
    assert_array_equal(filled[~missing], 5.0 - values[~missing].astype(np.float32))


def test_nodata_setting_replaces_the_one_in_the_file(tmp_path):
    path = write_tif(tmp_path / "a.tif", ELEVATION, nodata=-300)
    missing = np.isnan(whole(opened(path, nodata=100)).depth_m)
    assert_array_equal(missing, ELEVATION == 100)


def test_infinite_values_and_masked_cells_are_missing(tmp_path):
    values = ELEVATION.astype(np.float32)
    values[0, 1] = np.inf
    mask = np.full(values.shape, 255, np.uint8)
    mask[2, 0] = 0
    missing = np.isnan(whole(opened(write_tif(tmp_path / "a.tif", values, mask=mask))).depth_m)
    assert_array_equal(np.argwhere(missing), [[0, 1], [2, 0]])


def test_second_band_is_read(tmp_path):
    path = write_tif(tmp_path / "a.tif", ELEVATION, count=2)
    with rasterio.open(path, "r+") as out:
        out.write(2 * ELEVATION[::-1], 2)
    assert_array_equal(whole(opened(path, band=2)).depth_m, -2 * ELEVATION)


@pytest.mark.parametrize("mapping", [False, True])
@pytest.mark.parametrize("northward", [False, True])
def test_netcdf_with_and_without_grid_mapping(tmp_path, mapping, northward):
    lat = np.array([40.0, 41.0, 42.0])
    order = slice(None, None, 1 if northward else -1)
    path = write_nc(
        tmp_path / "a.nc", ELEVATION[order], np.arange(4.0) + 20, lat[order], mapping=mapping, scale_factor=0.1,
        add_offset=7.0, _FillValue=np.int16(-50), long_name="elevation",
    )  # fmt: skip
    source = opened(path)
    expected = np.where(ELEVATION == -50, np.nan, -(0.1 * ELEVATION + 7.0))
    # float32 holds values of 40 m to 2e-6 m
    assert_allclose(whole(source).depth_m, expected, atol=4e-6)
    assert source.is_geographic
    assert source.crs_why == (
        "from the file" if mapping else "taken as EPSG:4326, for its axes are longitude and latitude in degrees"
    )
    assert_allclose(source.lonlat_of(0, 0), (20.0, 40.0))


def test_netcdf_columns_from_east_to_west(tmp_path):
    path = write_nc(tmp_path / "a.nc", ELEVATION[:, ::-1], np.arange(4.0)[::-1], np.arange(3.0))
    source = opened(path)
    assert_array_equal(whole(source).depth_m, -ELEVATION)
    assert source.x0 == 0.0


def test_netcdf_of_several_variables_needs_a_name(tmp_path):
    path = write_nc(tmp_path / "a.nc", ELEVATION, np.arange(4.0), np.arange(3.0), names=("z", "tid"), positive="up")
    with pytest.raises(GridError, match=r"several variables \(z, tid\); name one in grid\.variable"):
        opened(path)
    with pytest.raises(GridError, match=r"no variable 'depht'; there are: z, tid"):
        opened(path, variable="depht")
    assert_array_equal(whole(opened(path, variable="z")).depth_m, -ELEVATION)


def test_netcdf_of_one_variable_knows_its_name(tmp_path):
    path = write_nc(tmp_path / "a.nc", ELEVATION, np.arange(4.0), np.arange(3.0))
    assert_array_equal(whole(opened(path, variable="elevation")).depth_m, -ELEVATION)
    with pytest.raises(GridError, match=r"no variable 'z'; there are: elevation"):
        opened(path, variable="z")


def test_zip_archive_is_read_in_place(tmp_path):
    from zipfile import ZipFile

    path = write_tif(tmp_path / "a.tif", ELEVATION)
    with ZipFile(tmp_path / "a.zip", "w") as archive:
        archive.write(path, "inner/a.tif")
    assert_array_equal(whole(opened(f"/vsizip/{tmp_path}/a.zip/inner/a.tif")).depth_m, -ELEVATION)


# --- where cells lie -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("crs", "x0", "y0"), [("EPSG:32629", 4.5e5, 4.0e6), ("EPSG:3035", 2.8e6, 2.0e6)])
def test_projected_cells_lie_where_the_projection_puts_them(tmp_path, crs, x0, y0):
    source = opened(write_tif(tmp_path / "a.tif", ELEVATION, x0=x0, y0=y0, dx=5000, dy=4000, crs=crs))
    lon_deg, lat_deg = source.lonlat_of([0.0, 3.0], [0.0, 2.0])
    x_m, y_m = Projection(crs).from_lonlat(lon_deg, lat_deg)
    # PROJ's equal-area projection comes back to a millimetre only (a series for the authalic latitude)
    assert_allclose(x_m, [x0, x0 + 15_000], rtol=0, atol=2e-3)
    assert_allclose(y_m, [y0, y0 + 8000], rtol=0, atol=2e-3)
    assert_allclose(np.stack(source.index_of(lon_deg, lat_deg)), [[0, 3], [0, 2]], rtol=0, atol=1e-6)
    # scale factors of both systems within 2 % of one in this area
    assert source.step_x_m == pytest.approx(5000, rel=0.02)
    assert source.step_m == source.step_y_m == pytest.approx(4000, rel=0.02)
    west, south, east, north = source.box_deg
    assert west < lon_deg[0] < lon_deg[1] < east
    assert south < lat_deg[0] < lat_deg[1] < north


def test_projected_units_other_than_metres(tmp_path):
    """US survey feet: a 1000 ft cell is 304.8006 m times the scale factor of the zone, within 1e-3 of one."""
    source = opened(write_tif(tmp_path / "a.tif", ELEVATION, x0=9e5, y0=9e5, dx=1000, dy=1000, crs="EPSG:2236"))
    assert source.step_x_m == pytest.approx(304.8006, rel=1e-3)


def test_steps_of_a_geographic_grid_are_geodesics(tmp_path):
    """Cell sides of 15 arc-seconds at 60 N on WGS84: 232.5 by 464.2 m, derived beforehand."""
    source = opened(write_tif(tmp_path / "a.tif", ELEVATION, x0=5.0, y0=60 - 1 / 240, dx=1 / 240, dy=1 / 240))
    assert source.step_x_m == pytest.approx(232.5, abs=0.05)
    assert source.step_y_m == pytest.approx(464.2, abs=0.05)


def test_box_of_a_polar_grid_holds_the_pole(tmp_path):
    source = opened(write_tif(tmp_path / "a.tif", ELEVATION, x0=-3e5, y0=-2e5, dx=2e5, dy=2e5, crs="EPSG:3995"))
    west, south, east, north = source.box_deg
    assert (west, east, north) == (-180.0, 180.0, 90.0)
    assert 84 < south < 86


def test_box_of_a_projected_grid_across_180_stays_in_one_piece(tmp_path):
    source = opened(write_tif(tmp_path / "a.tif", ELEVATION, x0=6.8e5, y0=8e6, dx=5e4, dy=5e4, crs="EPSG:32760"))
    west, _, east, _ = source.box_deg
    assert 178 < west < 180 < east < 182


WORLD = np.random.default_rng(5).integers(-6000, 3000, (19, 36)).astype(np.int16)  # 10 degrees, nodes on whole tens


@pytest.fixture(scope="module")
def worlds(tmp_path_factory):
    """One world stored in eight ways."""
    folder = tmp_path_factory.mktemp("worlds")
    repeated = np.hstack([WORLD, WORLD[:, :1]])
    turned = np.roll(WORLD, 18, axis=1)
    common = {"y0": -90.0, "dx": 10.0, "dy": 10.0}
    lat = np.arange(-90.0, 91.0, 10.0)
    up, down = {"positive": "up"}, {"positive": "down"}
    return [
        opened(write_tif(folder / "0.tif", WORLD, **common), **up),
        opened(write_tif(folder / "180.tif", turned, x0=-180.0, **common), **up),
        opened(write_tif(folder / "360.tif", repeated, **common), **up),
        opened(write_tif(folder / "south.tif", WORLD, south_up=True, **common), **up),
        opened(write_tif(folder / "east.tif", repeated, east_first=True, **common), **up),
        opened(write_tif(folder / "down.tif", -turned, x0=-180.0, **common), **down),
        opened(write_nc(folder / "a.nc", WORLD, np.arange(0.0, 360.0, 10.0), lat), **up),
        opened(write_nc(folder / "b.nc", repeated[::-1], np.arange(0.0, 361.0, 10.0), lat[::-1]), **up),
    ]


def test_every_storing_of_the_world_goes_round_it(worlds):
    assert {(source.n_rows, source.n_cols, source.wraps) for source in worlds} == {(19, 36, True)}
    for source in worlds:
        assert source.box_deg[3] == 90.0
        assert source.box_deg[2] - source.box_deg[0] == pytest.approx(360.0)


@given(points=st.lists(st.tuples(longitudes, latitudes), min_size=1, max_size=8))
@hypothesis_settings(max_examples=40, deadline=None)
def test_same_world_stored_otherwise_gives_the_same_depths(worlds, points):
    """Depths up to 6 km over cells of 10 degrees: rounding of longitudes moves them by less than 1e-7 m."""
    lon_deg, lat_deg = np.array(points).T
    depth_m, state = whole(worlds[0]).sample(*worlds[0].index_of(lon_deg, lat_deg))
    assert (state == INSIDE).all()
    for source in worlds:
        other, other_state = whole(source).sample(*source.index_of(lon_deg, lat_deg))
        assert_array_equal(other_state, state)
        assert_allclose(other, depth_m, atol=1e-7)
        scattered, _ = source.sample(lon_deg, lat_deg)
        assert_allclose(scattered, depth_m, atol=1e-7)


@given(
    lon0=longitudes, lat0=st.floats(-80, 80), d_lon=st.floats(0, 120), margin=st.integers(0, 3), which=st.integers(0, 7)
)
@hypothesis_settings(max_examples=60, deadline=None)
def test_window_over_the_seam_equals_the_whole_world(worlds, lon0, lat0, d_lon, margin, which):
    """A window holds every point it was made for and gives the very bits of the whole grid."""
    source = worlds[which]
    lon_deg, lat_deg = lon0 + np.linspace(0, d_lon, 9), np.full(9, lat0)
    index = source.index_of(lon_deg, lat_deg)
    col0, row0 = (int(np.floor(first)) - margin for first in (index[0][0], index[1][0]))
    window = source.read(row0, row0 + 2 + 2 * margin, col0, col0 + int(d_lon / source.dx) + 3 + 2 * margin)
    depth_m, state = window.sample(*index)
    whole_m, whole_state = whole(source).sample(*index)
    assert_array_equal(state, whole_state)
    assert_array_equal(depth_m, whole_m)


def test_window_over_more_than_the_globe_is_the_globe(worlds):
    grid = worlds[0].read(0, 19, 30, 30 + 3 * 36)
    assert grid.depth_m.shape == (19, 36)
    assert_array_equal(grid.depth_m, np.roll(-WORLD, -30, axis=1))


@given(lon_deg=longitudes, lat_deg=latitudes)
@hypothesis_settings(max_examples=60, deadline=None)
def test_index_and_place_are_inverse(worlds, lon_deg, lat_deg):
    for source in worlds[:3]:
        assert -1e-9 <= source.index_of(lon_deg, lat_deg)[0] <= source.n_cols
        back_lon, back_lat = source.lonlat_of(*source.index_of(lon_deg, lat_deg))
        assert (back_lon - lon_deg) % 360.0 == pytest.approx(0.0, abs=1e-9) or (
            back_lon - lon_deg
        ) % 360.0 == pytest.approx(360.0, abs=1e-9)
        assert back_lat == pytest.approx(lat_deg, abs=1e-12)


def test_step_in_short_decimals_still_closes_the_globe(tmp_path):
    values = np.tile(ELEVATION[:, :1], (1, 108))
    source = opened(write_tif(tmp_path / "a.tif", values, x0=-180.0, dx=3.3333333, dy=1.0), positive="up")
    assert source.wraps
    assert source.dx == 360.0 / 108


def test_part_of_the_globe_does_not_wrap(tmp_path):
    source = opened(write_tif(tmp_path / "a.tif", WORLD[:, :35], y0=-90.0, dx=10, dy=10), positive="up")
    assert not source.wraps
    assert whole(source).sample(*source.index_of(345.0, 0.0))[1] == OUTSIDE


# --- windows and samples ---------------------------------------------------------------------------------------


@given(
    seed=seeds, row0=st.integers(-3, 11), n_rows=st.integers(1, 15), col0=st.integers(-3, 13), n_cols=st.integers(1, 15)
)
@hypothesis_settings(max_examples=40, deadline=None)
def test_window_equals_the_same_part_of_the_whole(mid_grid, seed, row0, n_rows, col0, n_cols):
    source, everything = mid_grid
    assume(row0 + n_rows > 0 and col0 + n_cols > 0)
    window = source.read(row0, row0 + n_rows, col0, col0 + n_cols)
    n, m = window.depth_m.shape
    assert_array_equal(window.depth_m, everything.depth_m[window.row0 : window.row0 + n, window.col0 : window.col0 + m])
    rng = np.random.default_rng(seed)
    row, col = window.row0 + rng.uniform(-0.5, n, 30), window.col0 + rng.uniform(-0.5, m, 30)
    depth_m, state = window.sample(col, row)
    inside = state != OUTSIDE
    whole_m, whole_state = everything.sample(col, row)
    assert_array_equal(depth_m[inside], whole_m[inside])
    assert_array_equal(state[inside], whole_state[inside])
    by_hand = (row >= window.row0) & (row <= window.row0 + n - 1) & (col >= window.col0) & (col <= window.col0 + m - 1)
    assert_array_equal(inside, by_hand)


@pytest.fixture(scope="module")
def mid_grid(tmp_path_factory):
    values = np.random.default_rng(2).uniform(-900, 200, (12, 14)).astype(np.float32)
    values[3:6, 4:9] = np.nan
    values[0, 0] = np.nan
    path = write_tif(tmp_path_factory.mktemp("mid") / "a.tif", values, x0=-8.0, y0=42.0, dx=0.25, dy=0.25, tiled=True,
                     blockxsize=16, blockysize=16)  # fmt: skip
    source = opened(path)
    return source, whole(source)


@pytest.mark.parametrize("window", [(12, 15, 0, 3), (0, 3, 14, 20), (-5, 0, 0, 3), (4, 4, 0, 3)])
def test_window_off_the_grid_is_refused(mid_grid, window):
    with pytest.raises(GridError, match="holds no cell of the grid's 12 by 14"):
        mid_grid[0].read(*window)


@given(seed=seeds, void_share=st.sampled_from([0.0, 0.3, 0.8, 1.0]))
@hypothesis_settings(max_examples=30, deadline=None)
def test_sampling_equals_a_plain_loop(seed, void_share):
    """Same formula in another order of adding: 1e-12 of the depths."""
    rng = np.random.default_rng(seed)
    depth_m = rng.uniform(-100, 6000, (5, 6)).astype(np.float32)
    depth_m[rng.random(depth_m.shape) < void_share] = np.nan
    row, col = rng.uniform(-0.7, 4.7, 40), rng.uniform(-0.7, 5.7, 40)
    found_m, found_state = Grid(depth_m=depth_m.copy(), row0=0, col0=0).sample(col, row)
    twin = [masked_bilinear(depth_m, r, c) for r, c in zip(row, col, strict=True)]
    assert_array_equal(found_state, [state for _, state in twin])
    assert_allclose(found_m, [depth for depth, _ in twin], rtol=1e-12)


def test_sampling_equals_scipy_where_nothing_is_missing():
    """scipy.ndimage.map_coordinates of order 1, an independent bilinear: equal to rounding."""
    rng = np.random.default_rng(3)
    depth_m = rng.uniform(0, 5000, (30, 40)).astype(np.float32)
    row, col = rng.uniform(0, 29, 500), rng.uniform(0, 39, 500)
    found_m, state = Grid(depth_m=depth_m, row0=0, col0=0).sample(col, row)
    assert (state == INSIDE).all()
    assert_allclose(found_m, map_coordinates(depth_m.astype(float), [row, col], order=1), rtol=1e-11)


def test_cell_centres_give_their_own_values_even_beside_missing_cells(mid_grid):
    """One NaN must not poison its neighbours: the first wet cells would vanish."""
    _, grid = mid_grid
    row, col = np.mgrid[0:12, 0:14]
    depth_m, state = grid.sample(col, row)
    assert_array_equal(depth_m, grid.depth_m)
    assert_array_equal(state, np.where(np.isnan(grid.depth_m), VOID, INSIDE))


def test_half_the_weight_decides_between_a_depth_and_a_void():
    grid = Grid(depth_m=np.array([[8, np.nan], [8, np.nan]], dtype=np.float32), row0=0, col0=0)
    depth_m, state = grid.sample([0.5, 0.5001], [0.3, 0.3])
    assert_array_equal(state, [INSIDE, VOID])
    assert_array_equal(depth_m, [8.0, np.nan])


@pytest.mark.parametrize(
    ("col", "row"), [(-1e-3, 1), (3.001, 1), (1, -1e-3), (1, 2.001), (np.nan, 1), (1, np.inf), (1e300, 1)]
)
def test_nothing_is_extrapolated(col, row):
    depth_m, state = Grid(depth_m=-ELEVATION.astype(np.float32), row0=0, col0=0).sample(col, row)
    assert state == OUTSIDE
    assert np.isnan(depth_m)


def test_rounding_does_not_push_edge_points_off_the_grid():
    depth_m, state = Grid(depth_m=-ELEVATION.astype(np.float32), row0=5, col0=7).sample(
        [7 - 1e-9, 10 + 1e-9], [5, 7 + 1e-9]
    )
    assert_array_equal(state, INSIDE)
    assert_array_equal(depth_m, [300.0, -100.0])


def test_sampling_keeps_shapes_and_inputs():
    col, row = np.array([[0.5, 1.5]]), np.array([[0.0], [1.0], [2.0]])
    before = col.copy(), row.copy()
    depth_m, state = Grid(depth_m=-ELEVATION.astype(np.float32), row0=0, col0=0).sample(col, row)
    assert depth_m.shape == state.shape == (3, 2)
    assert_array_equal(depth_m[:, 0], [250.0, 200.0, 150.0])
    assert_array_equal(col, before[0])
    assert_array_equal(row, before[1])


def test_scattered_points_read_in_tiles_equal_the_whole(tmp_path):
    rng = np.random.default_rng(8)
    values = rng.uniform(-900, 100, (1025, 600)).astype(np.float32)
    source = opened(write_tif(tmp_path / "a.tif", values, x0=3.0, y0=50.0, dx=0.01, dy=0.01))
    lon_deg, lat_deg = rng.uniform(2.9, 9.1, 400), rng.uniform(49.9, 60.4, 400)
    lon_deg[0], lat_deg[1] = np.nan, np.nan
    lon_deg[2], lat_deg[2] = source.lonlat_of(599, 1024)
    lon_deg[3], lat_deg[3] = source.lonlat_of(511.5, 511.5)  # between tiles
    depth_m, state = source.sample(lon_deg, lat_deg)
    whole_m, whole_state = whole(source).sample(*source.index_of(lon_deg, lat_deg))
    assert_array_equal(state, whole_state)
    assert_array_equal(depth_m, whole_m)
    assert_array_equal(state[2:4], INSIDE)


def test_scattered_points_all_off_the_grid(mid_grid):
    depth_m, state = mid_grid[0].sample([100.0], [0.0])
    assert_array_equal(state, [OUTSIDE])
    assert np.isnan(depth_m).all()


# --- real windows ----------------------------------------------------------------------------------------------


@pytest.mark.real
@pytest.mark.parametrize(
    ("name", "lon_deg", "lat_deg", "least_m", "most_m"),
    [
        ("etopo1_us_southeast.tif", -70.0, 30.0, 5000, 6000),  # abyssal plain
        ("etopo1_us_southeast.tif", 290.0, 30.0, 5000, 6000),  # the same in other longitudes
        ("etopo1_us_southeast.tif", -80.5, 31.5, 10, 50),  # inner shelf
        ("etopo1_us_southeast.tif", -82.5, 35.5, -1600, -300),  # mountains
        ("etopo1_iberia_biscay.tif", -6.0, 45.5, 4000, 5000),  # abyssal plain of the bay
        ("etopo1_iberia_biscay.tif", -4.0, 40.5, -1500, -400),  # inland plateau
    ],
)
def test_real_windows_put_sea_and_land_where_they_are(name, lon_deg, lat_deg, least_m, most_m):
    """Ranges wide enough to know from any atlas (from memory); a flipped or shifted grid falls out of them."""
    source = opened(DATA / name)
    depth_m, state = source.sample(lon_deg, lat_deg)
    assert state == INSIDE
    assert least_m < depth_m < most_m


@pytest.mark.real
def test_real_window_has_cells_on_whole_tenths_and_is_known_by_its_values():
    source = opened(DATA / "etopo1_us_southeast.tif")
    assert (source.x0, source.y0, source.n_cols, source.n_rows) == (pytest.approx(-83), pytest.approx(24), 181, 151)
    assert (source.positive, source.positive_why) == ("up", "deepest value -6060 m against highest 1560 m")
    distance_m, _ = distance_bearing(-74.05, 31.5, -73.95, 31.5)
    assert source.step_m == source.step_x_m == pytest.approx(float(distance_m), rel=1e-9)


# --- refused, with the cure ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("more", "settings", "message"),
    [
        (
            {"transform": Affine(0.98, 0.17, 0, 0.17, -0.98, 3)},
            {},
            "rotated or sheared; warp it to a north-up grid",
        ),
        ({"crs": None}, {}, r"has no coordinate system; set grid\.crs"),
        ({"crs": "EPSG:4978"}, {}, "Geocentric CRS 'WGS 84' does not say where cells lie"),
        ({"crs": 'LOCAL_CS["pier",UNIT["metre",1]]'}, {}, "Engineering CRS 'pier' does not say where cells lie"),
        ({"crs": "EPSG:4807"}, {}, "meridian other than Greenwich"),
        ({"crs": "+proj=ob_tran +o_proj=longlat +o_lon_p=-162 +o_lat_p=39"}, {}, "rotated pole"),
        ({"crs": "EPSG:32630"}, {}, r"look like degrees, but .*\(EPSG:32630\) counts in metres; set grid\.crs"),
        ({"x0": 4e5, "y0": 4e6, "dx": 500.0}, {}, r"are no degrees, but .*\(EPSG:4326\) counts in degrees"),
        ({"dx": 150.0}, {}, "goes round the globe more than once"),
        ({}, {"crs": "EPSG:999999"}, "unknown to PROJ"),
        ({}, {"band": 2}, r"has 1 band\(s\), no band 2; set grid\.band"),
        ({"unit": "feet"}, {}, "values are in 'feet', but must be metres"),
    ],
)
def test_layouts_that_cannot_be_used_are_refused_with_the_cure(tmp_path, more, settings, message):
    path = write_tif(tmp_path / "a.tif", ELEVATION, **{"x0": 1.0, "y0": 2.0, **more})
    with pytest.raises(GridError, match=message):
        opened(path, **settings)


def test_crs_setting_mends_a_wrong_system(tmp_path):
    path = write_tif(tmp_path / "a.tif", ELEVATION, x0=1.0, y0=2.0, crs="EPSG:32630")
    source = opened(path, crs="EPSG:4326")
    assert source.is_geographic
    assert source.crs_why == "set by grid.crs"


def test_grid_in_grads_is_refused(tmp_path):
    grads = 'GEOGCS["g",DATUM["d",SPHEROID["s",6378137,298.257223563]],PRIMEM["Greenwich",0],'
    grads += 'UNIT["grad",0.015707963267949]]'
    with pytest.raises(GridError, match="counts in grad, not degrees"):
        opened(write_tif(tmp_path / "a.tif", ELEVATION, crs=grads))


@pytest.mark.parametrize("shape", [(1, 4), (4, 1)])
def test_one_row_or_column_is_no_grid(tmp_path, shape):
    with pytest.raises(GridError, match="a grid needs two of each"):
        opened(write_tif(tmp_path / "a.tif", np.zeros(shape, np.int16)))


def test_complex_values_are_refused(tmp_path):
    with pytest.raises(GridError, match="holds complex numbers"):
        opened(write_tif(tmp_path / "a.tif", ELEVATION.astype(np.complex64)))


def test_unplaced_rasters_are_refused_without_a_warning(tmp_path):
    """Ground control points, no georeference at all, and unevenly spaced axes: the library's warning is our error."""
    corners = [GroundControlPoint(r, c, 10 + c, 50 - r) for r, c in ((0, 0), (0, 4), (3, 0))]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", rasterio.errors.NotGeoreferencedWarning)
        profile = {"driver": "GTiff", "height": 3, "width": 4, "count": 1, "dtype": "int16"}
        rasterio.open(tmp_path / "n.tif", "w", **profile).close()
        with rasterio.open(tmp_path / "g.tif", "w", **profile) as out:
            out.gcps = (corners, "EPSG:4326")
    uneven = write_nc(tmp_path / "u.nc", ELEVATION, np.arange(4.0) ** 2, np.arange(3.0))
    for path in (tmp_path / "g.tif", tmp_path / "n.tif", uneven):
        with pytest.raises(GridError, match="does not say where its cells lie on a regular grid"):
            opened(path)


def test_netcdf_without_axis_units_has_no_coordinate_system(tmp_path):
    path = write_nc(tmp_path / "a.nc", ELEVATION, np.arange(4.0), np.arange(3.0), axes_said=False)
    with pytest.raises(GridError, match=r"does not say where|has no coordinate system"):
        opened(path)


@pytest.mark.parametrize(
    ("path", "message"),
    [
        ("nowhere.tif", "no such file; check grid.path"),
        (".", "is a folder; name the raster file in it"),
        ("https://example.org/dem.tif", "network paths are not opened in this version"),
        ("/vsicurl/https://example.org/dem.tif", "network paths are not opened"),
        ("/vsizip/vsicurl/example.org/dem.zip/a.tif", "no such file"),
        ("/vsis3/bucket/dem.tif", "network paths are not opened"),
        ("WMS:example", "network paths are not opened"),
        ("<VRTDataset rasterXSize='4'></VRTDataset>", "network paths are not opened"),
    ],
)
def test_paths_that_are_no_local_file(path, message):
    with pytest.raises(GridError, match=message):
        opened(path)


def test_files_that_are_no_raster(tmp_path):
    (tmp_path / "a.txt").write_text("not a raster")
    (tmp_path / "empty.tif").touch()
    (tmp_path / "wms.xml").write_text("<GDAL_WMS><Service name='WMS'/></GDAL_WMS>")
    for name in ("a.txt", "empty.tif"):
        with pytest.raises(GridError, match=r"cannot be read as a raster \(.*not recognized"):
            opened(tmp_path / name)
    with pytest.raises(GridError, match="describes a network service"):
        opened(tmp_path / "wms.xml")


def test_local_mosaic_may_not_reach_for_the_network(tmp_path):
    """A file beside us must not make us ask a server: a listening one hears nothing."""
    asked = []

    class Listener(BaseHTTPRequestHandler):
        def handle_one_request(self):
            asked.append(self.client_address)

    with HTTPServer(("127.0.0.1", 0), Listener) as server:
        Thread(target=server.serve_forever, daemon=True).start()
        (tmp_path / "a.vrt").write_text(
            '<VRTDataset rasterXSize="4" rasterYSize="3"><SRS>EPSG:4326</SRS>'
            "<GeoTransform>0,1,0,3,0,-1</GeoTransform>"
            '<VRTRasterBand dataType="Int16" band="1"><SimpleSource>'
            f"<SourceFilename>/vsicurl/http://127.0.0.1:{server.server_port}/a.tif</SourceFilename>"
            "<SourceBand>1</SourceBand></SimpleSource></VRTRasterBand></VRTDataset>"
        )
        with pytest.raises(GridError, match=r"a\.vrt: names '/vsicurl/http://.*', which is no local file"):
            opened(tmp_path / "a.vrt", positive="up")
        server.shutdown()
    assert asked == []


def test_truncated_vanished_and_replaced_files(tmp_path):
    values = np.random.default_rng(1).integers(-3000, 900, (300, 300)).astype(np.int16)
    path = write_tif(tmp_path / "a.tif", values, dx=0.1, dy=0.1, compress="deflate")
    source = opened(path)
    content = path.read_bytes()
    path.write_bytes(content[: len(content) * 2 // 3])
    with pytest.raises(GridError, match="cannot be read as a raster"):
        opened(path)
    with pytest.raises(GridError, match="cannot be read as a raster"):
        whole(source)
    path.unlink()
    write_tif(path, ELEVATION)
    with pytest.raises(GridError, match="the file has changed since"):
        whole(source)
    path.unlink()
    with pytest.raises(GridError, match=r"cannot be read as a raster .*No such file"):
        whole(source)


@pytest.mark.parametrize("value", [-32768, 20000])
def test_undeclared_missing_values_are_named(tmp_path, value):
    values = ELEVATION.copy()
    values[1, 2] = value
    path = write_tif(tmp_path / "a.tif", values)
    with pytest.raises(GridError, match=rf"value {value} is no elevation or depth in metres; .*set grid\.nodata"):
        opened(path)
    assert np.isnan(whole(opened(path, nodata=value)).depth_m[1, 2])


def test_only_a_bounded_part_of_a_large_grid_is_read_to_open_it(tmp_path):
    """8 by 8 windows of 256 cells: memory stays under 30 MB where the grid as float64 has 134 MB."""
    import tracemalloc

    values = np.tile(np.linspace(-4000, 900, 4096).astype(np.int16), (4096, 1))
    path = write_tif(tmp_path / "a.tif", values, dx=0.01, dy=0.01, compress="deflate", tiled=True)
    tracemalloc.start()
    source = opened(path)
    peak_bytes = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert source.positive == "up"
    assert peak_bytes < 30e6


def test_netcdf4_file_is_read(tmp_path):
    """The HDF5 kind of netCDF, as large grids come."""
    path = tmp_path / "a.nc"
    rasterio.shutil.copy(
        write_tif(tmp_path / "a.tif", ELEVATION, x0=10.0, y0=40.0), path, driver="netCDF", FORMAT="NC4"
    )
    source = opened(path)
    assert path.read_bytes()[1:4] == b"HDF"
    assert_allclose((source.x0, source.y0), (10.0, 40.0))
    assert_array_equal(whole(source).depth_m, -ELEVATION)


def test_missing_value_beyond_the_range_of_the_type(tmp_path):
    """Desktop systems declare -1.8e308 for float32 grids and -99999 for int16: neither may warn or match a value."""
    for dtype, nodata in ((np.float32, -1.7976931348623157e308), (np.int16, -99999)):
        source = opened(write_tif(tmp_path / f"{np.dtype(dtype)}.tif", ELEVATION.astype(dtype)), nodata=nodata)
        assert_array_equal(whole(source).depth_m, -ELEVATION)


def test_undeclared_fill_is_warned_of_and_declared_fill_is_missing(tmp_path, caplog):
    """-9999 lies within the depths of the sea, so it cannot be refused like larger ones."""
    elevation = np.full((4, 4), -50, dtype=np.int16)
    elevation[0, 0], elevation[1, 1] = -9999, 20
    path = write_tif(tmp_path / "g.tif", elevation)
    assert np.nanmax(whole(open_grid(GridSettings(path=path, positive="up"))).depth_m) == 9999
    assert "holds -9999, which mostly means missing: then set grid.nodata = -9999" in caplog.text
    caplog.clear()
    assert np.nanmax(whole(open_grid(GridSettings(path=path, positive="up", nodata=-9999))).depth_m) == 50
    assert caplog.text == ""
