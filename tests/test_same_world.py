"""Same world, same answer: how a grid is stored moves no number, how it is drawn moves them by what a cell explains."""

import numpy as np
import pytest
import rasterio
from hypothesis import given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st
from rasterio.enums import Resampling
from rasterio.warp import calculate_default_transform, reproject
from utils_grid import DATA, write_nc, write_tif
from utils_pipeline import RESULTS, assert_same_results, settings_for

from shelfmap.geodesy import distance_bearing, unwrap_lon_deg
from shelfmap.pipeline import screen
from shelfmap.synthetic import round_coast, shelf_profile, straight_coast
from shelfmap.vectors import read_table

SHELF = shelf_profile(100e3, 150.0, 0.05, 3000.0)
#: A coast askew on its grid, so that stations differ; steps of a sixteenth of a degree are exact binary numbers.
WORLD = straight_coast(255.0, 40.0, SHELF, cell=0.0625, shape=(48, 84))
DEPTHS = np.round(WORLD.elevation_m).astype(np.float32)
#: The same with a hole in the shelf.
HOLED = DEPTHS.copy()
HOLED[20:24, 30:36] = np.nan
PLACE = {"x0": WORLD.x0, "y0": WORLD.y0, "dx": 0.0625, "dy": 0.0625}
RUN = {"transects": {"spacing_km": 12.0, "length_km": 200.0}}
#: Columns that tell where, and columns that tell what.
#: K1 is left out where it is slower than the inertial period, everywhere beyond 30 degrees.
NUMBERS = ("shelf_width_km", "break_depth_m", "mean_depth_m", "period1_h", "q1", "gain_m2", "index_max")


def screened(folder, path, name="out", **tables):
    """Output of a run of a grid."""
    settings = settings_for(path, folder, **{**RUN, **tables}, output={"path": f"{name}.gpkg"})
    return screen(settings, overwrite=True).path


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    """Output of the world as it is, and of the one with a hole."""
    folder = tmp_path_factory.mktemp("plain")
    whole = screened(folder, write_tif(folder / "whole.tif", DEPTHS, **PLACE), "whole")
    holed = screened(folder, write_tif(folder / "holed.tif", HOLED, **PLACE), "holed")
    assert (read_table(whole, "transects")["status"] == "ok").sum() >= 15
    assert "void" in read_table(holed, "transects")["status"]
    return {"whole": whole, "holed": holed}


# ---- storage only: bit for bit

STORED = {
    "rows from the south": {"south_up": True},
    "columns from the east": {"east_first": True},
    "int16": {"dtype": np.int16},
    "int32": {"dtype": np.int32},
    "float64": {"dtype": np.float64},
    "tiled and deflated": {"tiled": True, "blockxsize": 16, "blockysize": 16, "compress": "deflate"},
    "strips of one row": {"blockysize": 1, "compress": "lzw"},
    "the second of three bands": {"count": 3},
}


@pytest.mark.parametrize("how", STORED)
def test_storage_moves_no_number(tmp_path, plain, how):
    given_ = dict(STORED[how])
    values = DEPTHS.astype(given_.pop("dtype", np.float32))
    path = write_tif(tmp_path / "other.tif", values, **PLACE, **given_)
    assert_same_results(plain["whole"], screened(tmp_path, path, grid={"band": 2 if "count" in given_ else 1}))


def test_packed_integers_move_no_number(tmp_path, plain):
    """Half metres above -2000 m: metres are whole multiples of them."""
    path = write_tif(tmp_path / "p.tif", ((DEPTHS + 2000) * 2).astype(np.int16), **PLACE, scale=0.5, offset=-2000.0)
    assert_same_results(plain["whole"], screened(tmp_path, path))


@pytest.mark.parametrize("word", ["depth", ""])
def test_depths_for_elevations_move_no_number(tmp_path, plain, word):
    """Said by the file, or by the user."""
    path = write_tif(tmp_path / "d.tif", -DEPTHS, **PLACE, description=word)
    grid = {"positive": "auto" if word else "down"}
    assert_same_results(plain["whole"], screened(tmp_path, path, grid=grid))


@pytest.mark.parametrize("mapping", [False, True])
@pytest.mark.parametrize("northward", [False, True])
def test_netcdf_moves_no_number(tmp_path, plain, mapping, northward):
    lon = WORLD.x0 + 0.0625 * np.arange(DEPTHS.shape[1])
    lat = WORLD.y0 + 0.0625 * np.arange(DEPTHS.shape[0])
    order = slice(None, None, 1 if northward else -1)
    path = write_nc(tmp_path / "w.nc", DEPTHS[order], lon, lat[order], mapping=mapping)
    assert_same_results(plain["whole"], screened(tmp_path, path))


@pytest.mark.parametrize("how", ["nodata", "set by the user", "mask"])
def test_missing_cells_are_missing_however_they_are_told(tmp_path, plain, how):
    filled = np.nan_to_num(HOLED, nan=-32768.0).astype(np.int16)
    told = {"nodata": {"nodata": -32768}, "mask": {"mask": np.where(np.isnan(HOLED), 0, 255).astype(np.uint8)}}
    path = write_tif(
        tmp_path / "h.tif", filled if how != "mask" else np.nan_to_num(HOLED), **PLACE, **told.get(how, {})
    )
    grid = {"nodata": -32768.0} if how == "set by the user" else {}
    assert_same_results(plain["holed"], screened(tmp_path, path, grid=grid))


@pytest.mark.real
@pytest.mark.parametrize("how", ["rows from the south", "float64", "tiled and deflated", "netCDF", "depths"])
def test_storage_moves_no_number_of_a_real_coast(tmp_path, how):
    """A crop of the west coast of the United States, 36 to 42 N."""
    with rasterio.open(DATA / "etopo1_us_west.tif") as grid:
        values, step = grid.read(1)[::-1][40:101, 50:121].astype(np.float32), 0.1
    place = {"x0": -127.0, "y0": 36.0, "dx": step, "dy": step}
    run = {"coast": {"generalise_km": 30.0}, "transects": {"spacing_km": 30.0, "length_km": 200.0}}
    one = screened(tmp_path, write_tif(tmp_path / "plain.tif", values, **place), "one", **run)
    assert (read_table(one, "transects")["status"] == "ok").sum() >= 10
    grid = {"positive": "down"} if how == "depths" else {}
    if how == "netCDF":
        lon, lat = (place[o] + step * np.arange(n) for o, n in (("x0", 71), ("y0", 61)))
        path = write_nc(tmp_path / "other.nc", values, lon, lat)
    else:
        given_ = dict(STORED.get(how, {}))
        stored = (-values if how == "depths" else values).astype(given_.pop("dtype", np.float32))
        path = write_tif(tmp_path / "other.tif", stored, **place, **given_)
    assert_same_results(one, screened(tmp_path, path, "two", grid=grid, **run))


#: An island at 60 E on a band round the globe, eighths of a degree.
AROUND_LON, AROUND_LAT = np.arange(0.0, 360.0, 0.125), np.arange(30.0, 50.01, 0.125)
AROUND_RUN = {"transects": {"spacing_km": 40.0, "length_km": 250.0}, "coast": {"generalise_km": 40.0}}


@pytest.fixture(scope="module")
def around(tmp_path_factory):
    """Depths of the band from 0 to 360 degrees, and the output of its run."""
    away_m, _ = distance_bearing(60.0, 40.0, *np.meshgrid(AROUND_LON, AROUND_LAT))
    values = np.round(-SHELF.depth_at(away_m - 300e3)).astype(np.float32)
    folder = tmp_path_factory.mktemp("around")
    return values, screened(folder, write_band(folder / "a.tif", values, 0.0), **AROUND_RUN)


def write_band(path, values, x0):
    return write_tif(path, values, x0=x0, y0=30.0, dx=0.125, dy=0.125)


def test_last_column_that_repeats_the_first_moves_no_number(tmp_path, around):
    """The seam goes through the island."""
    values = np.roll(around[0], -480, axis=1)
    one = screened(tmp_path, write_band(tmp_path / "o.tif", values, 60.0), "one", **AROUND_RUN)
    path = write_band(tmp_path / "r.tif", np.hstack([values, values[:, :1]]), 60.0)
    assert_same_results(one, screened(tmp_path, path, "two", **AROUND_RUN))


def test_globe_from_180_west_has_the_same_answers(tmp_path, around):
    """The coast is closed on maps of tiles that begin elsewhere: stations within a metre, answers within 1e-4."""
    values, plain = around
    path = write_band(tmp_path / "t.tif", np.roll(values, 1440, axis=1), -180.0)
    more = {"width_km": 0.01, "depth_m": 0.015, "relative": 1e-4, "gain": 1e-4}
    assert assert_stations_alike(plain, screened(tmp_path, path, **AROUND_RUN), **more).max() < 1.0


@pytest.mark.parametrize("x0", [-90.0, 60.0], ids=["elsewhere", "seam through the island"])
def test_globe_that_begins_anywhere_has_like_answers(tmp_path, around, x0):
    """A closed coast is measured from another of its points, so stations fall between the others: widths within
    the cell of 14 km, depths within the fall of the shelf over it.
    """
    values, plain = around
    path = write_band(tmp_path / "t.tif", np.roll(values, -round(x0 / 0.125), axis=1), x0)
    more = {"width_km": 14.0, "depth_m": 21.0, "relative": 0.1, "gain": 0.01}
    assert assert_stations_alike(plain, screened(tmp_path, path, **AROUND_RUN), **more).max() < 20.1e3


def test_water_raised_is_ground_lowered(tmp_path, plain):
    """Whole metres, so that single precision holds the sum as it holds the grid."""
    path = write_tif(tmp_path / "raised.tif", DEPTHS + 7.0, **PLACE)
    assert_same_results(plain["whole"], screened(tmp_path, path, grid={"level_shift_m": 7.0}))


def test_what_lies_beyond_the_search_moves_no_number(tmp_path, plain):
    """Land and other sea in the west, where no transect of 100 km gets."""
    run = {"transects": {"spacing_km": 12.0, "length_km": 100.0}}
    other = DEPTHS.copy()
    other[22:24, 1:3] = 30.0
    other[:, 4:6] = -1234.0
    one = screened(tmp_path, write_tif(tmp_path / "w.tif", DEPTHS, **PLACE), "one", **run)
    assert read_table(one, "profiles")["lon_deg"].min() > WORLD.x0 + 0.0625 * 7
    assert_same_results(one, screened(tmp_path, write_tif(tmp_path / "o.tif", other, **PLACE), **run))


@pytest.mark.parametrize("box", [[-0.5, 39.0, 3.0, 41.0], [359.5, 39.0, 363.0 - 360.0, 41.0]])
def test_a_box_given_in_another_turn_is_the_same(tmp_path, box):
    path = write_tif(tmp_path / "w.tif", DEPTHS, **PLACE)
    one = screened(tmp_path, path, "one", coast={"box": [-0.5, 39.0, 3.0, 41.0]})
    assert_same_results(one, screened(tmp_path, path, "two", coast={"box": box}))


# ---- drawn otherwise: to rounding


def assert_close(path, other, *, turn_deg=0.0, mirror=1.0, relative=1e-9):
    """Transects agree, those of the other world in reverse order if it is a mirror image."""
    one, two = read_table(path, "transects"), read_table(other, "transects")
    order = slice(None, None, 1 if mirror > 0 else -1)
    assert one["status"].tolist() == two["status"][order].tolist()
    for name in (*NUMBERS, "lag_m2_deg", "length_km"):
        np.testing.assert_allclose(two[name][order], one[name], rtol=relative, err_msg=name)
    return one, {name: values[order] for name, values in two.items()}


@pytest.mark.parametrize("turn", [-360.0, 360.0])
def test_longitudes_a_turn_further_are_the_same(tmp_path, plain, turn):
    """Rounding of larger longitudes, 6e-14 degrees, 6 nm on the ground: far below 1e-9 of anything."""
    path = write_tif(tmp_path / "t.tif", DEPTHS, **{**PLACE, "x0": WORLD.x0 + turn})
    one, two = assert_close(plain["whole"], screened(tmp_path, path))
    np.testing.assert_allclose(two["lon_deg"], one["lon_deg"], atol=1e-10)


@hypothesis_settings(max_examples=6, deadline=None, derandomize=True)
@given(steps=st.integers(-2880, 2880).filter(lambda steps: steps))
def test_any_longitude_is_as_good_as_another(plain, tmp_path_factory, steps):
    """Moved round the globe by whole sixteenths of a degree, across 180 too; rounding as above."""
    folder = tmp_path_factory.mktemp("moved")
    path = write_tif(folder / "m.tif", DEPTHS, **{**PLACE, "x0": WORLD.x0 + steps * 0.0625})
    one, two = assert_close(plain["whole"], screened(folder, path))
    np.testing.assert_allclose(
        unwrap_lon_deg(two["lon_deg"] - steps * 0.0625, one["lon_deg"]), one["lon_deg"], atol=1e-10
    )


@pytest.mark.parametrize("moved", [2880.0 * 0.0625, -2000 * 0.0625], ids=["across 180", "elsewhere"])
def test_all_rows_of_all_layers_are_there_across_180(tmp_path, plain, moved):
    path = write_tif(tmp_path / "m.tif", DEPTHS, **{**PLACE, "x0": WORLD.x0 + moved})
    other = screened(tmp_path, path)
    for layer in RESULTS:
        one, two = read_table(plain["whole"], layer), read_table(other, layer)
        assert {name: len(values) for name, values in one.items()} == {
            name: len(values) for name, values in two.items()
        }


@pytest.mark.parametrize("axis", ["east-west", "north-south"])
def test_a_mirror_image_has_the_same_answers(tmp_path, plain, axis):
    """The coast runs the other way, so stations come in reverse. South of the equator the Coriolis parameter changes
    its sign, and the waves of one transect know only its square. 2e-4: the closing of the coast begins its circles
    elsewhere, which moves stations by metres and the grid's steps with them.
    """
    if axis == "east-west":
        values, place = DEPTHS[:, ::-1], {**PLACE, "x0": -(WORLD.x0 + 0.0625 * (DEPTHS.shape[1] - 1))}
    else:
        values, place = DEPTHS[::-1], {**PLACE, "y0": -(WORLD.y0 + 0.0625 * (DEPTHS.shape[0] - 1))}
    path = write_tif(tmp_path / "mirror.tif", values.copy(), **place)
    one, two = assert_close(plain["whole"], screened(tmp_path, path), mirror=-1.0, relative=2e-4)
    x, y = ("lon_deg", "lat_deg") if axis == "east-west" else ("lat_deg", "lon_deg")
    np.testing.assert_allclose(two[x], -one[x], atol=2e-4)
    np.testing.assert_allclose(two[y], one[y], atol=2e-4)


# ---- on other maps and cells: to what a cell explains


def assert_stations_alike(path, other, *, width_km, depth_m, relative, gain):
    """Every station has the status and answers of the nearest one of the other world."""
    one, two = read_table(path, "transects"), read_table(other, "transects")
    away_m, _ = distance_bearing(
        one["lon_deg"][:, None], one["lat_deg"][:, None], two["lon_deg"][None], two["lat_deg"][None]
    )
    near = np.argmin(away_m, axis=1)
    assert (one["status"] == two["status"][near]).all()
    ok = one["status"] == "ok"
    assert ok.sum() >= 6
    for name, absolute, share in (
        ("shelf_width_km", width_km, 0.0),
        ("break_depth_m", depth_m, 0.0),
        ("period1_h", 0.0, relative),
        ("gain_m2", 0.0, gain),
        ("index_max", 0.0, 2 * relative),
    ):
        np.testing.assert_allclose(two[name][near][ok], one[name][ok], rtol=share, atol=absolute, err_msg=name)
    return np.min(away_m, axis=1)


def of_uniform_coast(path):
    """Medians over the stations of a coast that is the same all along, those near the grid's ends left out."""
    table = read_table(path, "transects")
    inner = np.zeros(len(table["status"]), dtype=bool)
    inner[2:-2] = True
    ok = inner & (table["status"] == "ok")
    assert ok.sum() > 0.8 * inner.sum()
    assert inner.sum() >= 6
    return {name: float(np.median(table[name][ok])) for name in NUMBERS}


MAPS = {
    "UTM": (40.0, 3.0, "EPSG:32631", 5000.0, (70, 90)),
    "LAEA": (52.0, 10.0, "EPSG:3035", 5000.0, (70, 90)),
    "polar stereographic south": (-72.0, 170.0, "EPSG:3031", 5000.0, (70, 90)),
    "polar stereographic north": (75.0, -45.0, "EPSG:3413", 5000.0, (70, 90)),
    "finer cells": (40.0, 3.0, "EPSG:4326", 0.03125, (96, 168)),
    "cells half a cell away": (40.0, 3.0, "EPSG:4326", 0.0625, (49, 85)),  # odd: a centre where a corner was
}


@pytest.mark.parametrize("name", MAPS)
def test_a_uniform_coast_has_the_same_answers_on_any_map(tmp_path, name):
    """Against the same coast in degrees at the same latitude.

    Bilinear cells of 5-7 km blunt the kinks of coast and break: widths within half a cell, depths within the rise of
    the slope over that (1:20), periods and gains by as much as widths. Without rotation, for beyond 74.5 degrees M2 is
    slower than the inertial period.
    """
    lat, lon, crs, cell, shape = MAPS[name]
    degrees = straight_coast(270.0, lat, SHELF, lon_deg=lon, cell=0.0625, shape=(48, 150 if abs(lat) > 60 else 84))
    other = straight_coast(270.0, lat, SHELF, lon_deg=lon, crs=crs, cell=cell, shape=shape)
    found = []
    for number, grid in enumerate((degrees, other)):
        path = write_tif(
            tmp_path / f"{number}.tif", grid.elevation_m, x0=grid.x0, y0=grid.y0, dx=grid.dx, dy=grid.dy, crs=grid.crs
        )
        found.append(screened(tmp_path, path, f"{number}", response={"rotation": False}))
    # A shelf of 1:667 falls 5.3 m in 3.5 km; the index has the period and the width of the resonance in it.
    away_m = assert_stations_alike(*found, width_km=3.5, depth_m=5.3, relative=0.04, gain=0.005)
    assert away_m.max() < 12e3  # a whole spacing: one coast may reach beyond the other
    for path in found:  # the coast is a meridian, and the cells beside it are those of an even slope
        table = read_table(path, "transects")
        across_m, _ = distance_bearing(table["lon_deg"], table["lat_deg"], lon, table["lat_deg"])
        assert across_m.max() < 0.1  # 0.02 m at most: the shore is read on an even slope
    one, two = map(of_uniform_coast, found)
    assert two["shelf_width_km"] == pytest.approx(one["shelf_width_km"], abs=3.5)
    assert two["break_depth_m"] == pytest.approx(one["break_depth_m"], abs=30.0)
    assert two["period1_h"] == pytest.approx(one["period1_h"], rel=0.04)
    assert two["gain_m2"] == pytest.approx(one["gain_m2"], rel=0.02)


def test_missing_land_read_as_land_has_the_same_coast(tmp_path):
    """The shore moves to within a cell of the last wet one, so widths change by less than a cell."""
    grid = straight_coast(270.0, 40.0, SHELF, cell=0.0625, shape=(48, 84))
    place = {"x0": grid.x0, "y0": grid.y0, "dx": grid.dx, "dy": grid.dy}
    whole = of_uniform_coast(screened(tmp_path, write_tif(tmp_path / "w.tif", grid.elevation_m, **place), "w"))
    wet = np.where(grid.elevation_m < 0, grid.elevation_m, np.nan).astype(np.float32)
    path = write_tif(tmp_path / "v.tif", wet, **place)
    void = of_uniform_coast(screened(tmp_path, path, "v", grid={"void_is_land": True}))
    assert void["shelf_width_km"] == pytest.approx(whole["shelf_width_km"], abs=0.0625 * 111.2 * np.cos(np.radians(40)))
    assert void["gain_m2"] == pytest.approx(whole["gain_m2"], rel=0.03)


@pytest.mark.parametrize(("lat", "crs", "inside"), [(-90.0, "EPSG:3031", "land"), (90.0, "EPSG:3413", "sea")])
def test_both_polar_coasts_have_the_same_answers_on_a_map_and_in_degrees(tmp_path, lat, crs, inside):
    """A continent round the south pole, an ocean round the north pole, of 1200 km radius.

    In degrees the cells at 79 degrees are 1.3 by 7 km, on the map 8 by 8 km: widths within half a cell.
    """
    flat = round_coast(1200e3, lat, SHELF, inside=inside, crs=crs, cell=8000.0, shape=(420, 420))
    col, row = np.arange(0, 360, 0.5) - 180.0, np.sign(lat) * np.arange(73.0, 90.01, 0.0625)
    lon, at = np.meshgrid(col, np.sort(row))
    away_m, _ = distance_bearing(0.0, lat, lon, at)
    seaward_m = (away_m - 1200e3) * (1 if inside == "land" else -1)
    depth_m = np.where(seaward_m > 0, SHELF.depth_at(np.maximum(seaward_m, 0.0)), 0.0)
    values = np.where(seaward_m > 0, -depth_m, np.minimum(-seaward_m * 0.005, 500.0)).astype(np.float32)
    degrees = write_tif(tmp_path / "d.tif", values, x0=-180.0, y0=float(at.min()), dx=0.5, dy=0.0625)
    on_map = write_tif(
        tmp_path / "m.tif", flat.elevation_m, x0=flat.x0, y0=flat.y0, dx=flat.dx, dy=flat.dy, crs=flat.crs
    )
    run = {
        "transects": {"spacing_km": 150.0, "length_km": 300.0},
        "coast": {"generalise_km": 30.0},
        "response": {"rotation": False},
    }
    found = [screened(tmp_path, path, path.stem, **run) for path in (degrees, on_map)]
    # Half a cell is 4 km, 4 % of the width, in which the shelf falls 6 m. What the gain exceeds 1 by, 0.154, goes with
    # the square of the width: 8 % of it. Both coasts are rings whose stations begin anywhere: half a spacing apart.
    assert assert_stations_alike(*found, width_km=4.0, depth_m=6.0, relative=0.04, gain=0.011).max() < 76e3
    tables = [read_table(path, "transects") for path in found]
    for table in tables:
        assert (table["status"] == "ok").all()
        assert len(table["status"]) == pytest.approx(2 * np.pi * 1200 / 150, abs=2)
        np.testing.assert_allclose(distance_bearing(0.0, lat, table["lon_deg"], table["lat_deg"])[0], 1200e3, atol=8e3)
    for name, tolerance in (("shelf_width_km", 4.0), ("break_depth_m", 30.0), ("period1_h", 0.3), ("gain_m2", 0.03)):
        one, two = (np.median(table[name]) for table in tables)
        assert one == pytest.approx(two, abs=tolerance), name


@pytest.mark.real
@pytest.mark.filterwarnings("ignore:Use `@` matmul:PendingDeprecationWarning")  # within the library that warps
def test_a_real_coast_warped_to_a_map_has_like_answers(tmp_path):
    """Iberia in LAEA (EPSG:3035), warped bilinearly to about the same cells: a second smoothing of every depth.

    Stations of the two coasts within 10 km of each other: half of them agree on width within two cells (22 km) and on
    the M2 gain within 10 %.
    """
    source = DATA / "etopo1_iberia_biscay.tif"
    with rasterio.open(source) as grid:
        transform, width, height = calculate_default_transform(
            grid.crs, "EPSG:3035", grid.width, grid.height, *grid.bounds
        )
        warped = np.full((height, width), np.nan, dtype=np.float32)
        reproject(
            rasterio.band(grid, 1), warped, dst_crs="EPSG:3035", dst_transform=transform, dst_nodata=np.nan,
            resampling=Resampling.bilinear,
        )  # fmt: skip
    path = write_tif(tmp_path / "laea.tif", warped[::-1], transform=transform, crs="EPSG:3035")
    run = {"coast": {"generalise_km": 50.0, "box": [-9.9, 37.0, -1.5, 48.0]}, "transects": {"length_km": 400.0}}
    one, two = (read_table(screened(tmp_path, p, n, **run), "transects") for p, n in ((source, "s"), (path, "w")))
    away_m, _ = distance_bearing(
        one["lon_deg"][:, None], one["lat_deg"][:, None], two["lon_deg"][None], two["lat_deg"][None]
    )
    near, away = np.argmin(away_m, axis=1), np.min(away_m, axis=1)
    both = (away < 10e3) & (one["status"] == "ok") & (two["status"][near] == "ok")
    assert both.sum() > 50
    width_km = np.abs(one["shelf_width_km"] - two["shelf_width_km"][near])[both]
    gain = np.abs(np.log(one["gain_m2"] / two["gain_m2"][near]))[both]
    assert np.median(width_km) < 22.0
    assert np.median(gain) < 0.1
