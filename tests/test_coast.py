"""The generalised coast: what is bridged, dropped and kept, at any bearing, place, projection and tiling."""

import multiprocessing
import pickle
from concurrent.futures import ProcessPoolExecutor
from types import SimpleNamespace

import numpy as np
import pyogrio
import pytest
import shapely
from scipy import ndimage
from utils_geometry import GEOD, angle_between, lay, open_up, scene, scene_km

from shelfmap import coast as coast_module
from shelfmap.basins import Basins, Tiling
from shelfmap.chains import join_ends
from shelfmap.coast import CoastLine, coast_from_lines, trace_coast
from shelfmap.errors import CoastError
from shelfmap.geodesy import distance_bearing, unwrap_lon_deg
from shelfmap.grid import GridSource, open_grid
from shelfmap.inputs import make_coast
from shelfmap.pipeline import screen
from shelfmap.profiles import place_on
from shelfmap.rasters import write_geotiff
from shelfmap.settings import CoastSettings, GridSettings, Settings, ShelfBreakSettings
from shelfmap.shelfbreak import find_shelf_breaks
from shelfmap.synthetic import SyntheticGrid, round_coast, shelf_profile, straight_coast
from shelfmap.transects import crossing_transects
from shelfmap.vectors import read_table, read_vector

SHELF = shelf_profile(60e3, 120.0, 1 / 20, 4000.0)
EARTH_M = 6_371_008.8


def beach(x, y):
    """Coast along y = 0, sea to the north, 5 m a kilometre."""
    return -5.0 * y


def discs(*places, coast_km=-60.0):
    """Coast along y = `coast_km` and round islands (east, north, radius) in km."""
    return lambda x, y: np.maximum(
        beach(x, y - coast_km), np.max([10 * (r - np.hypot(x - a, y - b)) for a, b, r in places], axis=0)
    )


def off_coast_m(lon_deg, lat_deg, bearing_deg, lon, lat):
    """Cross-track distance from the coast of `straight_coast`, metres seaward."""
    distance_m, azimuth_deg = distance_bearing(lon_deg, lat_deg, lon, lat)
    return EARTH_M * np.arcsin(np.sin(distance_m / EARTH_M) * np.cos(np.radians(azimuth_deg - bearing_deg)))


# ---- straight coasts

CASES = [
    *[(lat, "EPSG:4326", 0.05, 0.0) for lat in (0.0, 30.0, 60.0, 75.0, 80.0, -45.0)],
    (52.0, "EPSG:32631", 5000.0, 3.0),
    (52.0, "EPSG:3035", 5000.0, 20.0),
    (-72.0, "EPSG:3031", 5000.0, 170.0),
    (45.0, "EPSG:4326", 0.05, 179.8),
]


@pytest.mark.parametrize(("lat", "crs", "cell", "lon"), CASES)
@pytest.mark.parametrize("bearing", range(0, 360, 45))
def test_straight_coast(write_grid, lat, crs, cell, lon, bearing):
    """Bearing within 0.1 degrees (1 is promised), shore within 1 m, width and depth of the break within one cell.

    The depth of a cell is exact at its centre, so that the shore, in the middle of an even slope, is found far better
    than a cell; 1 m allows for what a chord of the curved distance misses. The kink of the break blunts over the longer
    cell side (its depth by that times the slope beyond).
    """
    stretch = 1 / np.cos(np.radians(lat)) if crs == "EPSG:4326" else 1.0
    shape = (61, 2 * int(30 * stretch) + 1)
    path = write_grid(straight_coast(bearing, lat, SHELF, lon_deg=lon, crs=crs, cell=cell, shape=shape))
    laid = lay(path)
    source, t, p = laid.source, laid.transects, laid.profiles
    assert len(laid.coast.lines) == 1
    col, row = source.index_of(t.lon_deg, t.lat_deg)
    edge_m = np.minimum.reduce([
        col * source.step_x_m, (source.n_cols - 1 - col) * source.step_x_m,
        row * source.step_y_m, (source.n_rows - 1 - row) * source.step_y_m,
    ])  # fmt: skip
    inner = (edge_m > 20e3) & (distance_bearing(lon, lat, t.lon_deg, t.lat_deg)[0] > 15e3)
    assert inner.sum() >= 8
    # the coast is a geodesic: square to it at the station is its own azimuth there and 90 degrees to the right
    _, back_deg, _ = GEOD.inv(np.full(len(t), lon), np.full(len(t), lat), t.lon_deg, t.lat_deg)
    to_station = distance_bearing(lon, lat, t.lon_deg, t.lat_deg)[1]
    onward = np.where(angle_between(to_station, bearing - 90.0) < 90, back_deg + 180.0, back_deg)
    assert angle_between(t.bearing_deg, onward + 90.0)[inner].max() < 0.1
    assert np.abs(off_coast_m(lon, lat, bearing, p.shore_lon_deg, p.shore_lat_deg))[inner].max() < 1.0
    breaks = find_shelf_breaks(p, ShelfBreakSettings())
    cell_m = max(source.step_x_m, source.step_y_m)
    whole = inner & (p.length_m > 100e3)  # long enough that the band of smoothings fits beyond the break
    assert whole.any()
    assert np.abs(breaks.break_m[whole] - 60e3).max() < cell_m
    assert np.abs(breaks.depth_m[whole] - 120.0).max() < cell_m / 20
    # between the kinks the profile is that of the scene to the float32 of the file and the curve of a cell
    on_shelf = (p.distance_m > 2 * cell_m) & (p.distance_m < 60e3 - 2 * cell_m)
    wanted = SHELF.depth_at(p.distance_m[on_shelf])
    assert np.abs(p.depth_m[np.ix_(whole, on_shelf)] - wanted).max() < 0.05


# ---- circles


@pytest.mark.parametrize("inside", ["land", "sea"])
@pytest.mark.parametrize("lat", [0.0, 60.0, 75.0, -45.0])
def test_circle(write_grid, inside, lat):
    """Bearings within 2 degrees of radial, radius within 0.5 %, and no crossing before the break, 20 km off."""
    shape = (61, 2 * int(30 / np.cos(np.radians(lat))) + 1)
    shelf = shelf_profile(20e3, 120.0, 1 / 20, 2000.0)
    path = write_grid(round_coast(80e3, lat, shelf, inside=inside, lon_deg=179.9, shape=shape))
    laid = lay(path, CoastSettings(smallest_sea_km2=500, smallest_enclosed_sea_km2=500), length_km=100.0)
    t, p = laid.transects, laid.profiles
    [line] = laid.coast.lines
    assert line.is_closed
    to_middle = distance_bearing(t.lon_deg, t.lat_deg, 179.9, lat)[1]
    assert angle_between(t.bearing_deg, to_middle + (180.0 if inside == "land" else 0.0)).max() < 2.0
    radius_m, _ = distance_bearing(179.9, lat, t.lon_deg, t.lat_deg)
    assert np.abs(radius_m / 80e3 - 1).max() < 5e-3
    breaks = find_shelf_breaks(p, ShelfBreakSettings())
    assert np.isfinite(breaks.break_m).all()
    ends = np.stack(place_on(t, p.shore_m + breaks.break_m), axis=1)
    shores = np.stack([p.shore_lon_deg, p.shore_lat_deg], axis=1)
    assert not crossing_transects(shores, ends, t.coast_part).any()


def test_transects_across_a_small_basin_cross(write_grid):
    """The flag can be raised: ends beyond the middle of a circle cross their neighbours."""
    path = write_grid(round_coast(80e3, 0.0, shelf_profile(20e3, 120.0, 1 / 20, 2000.0), inside="sea", shape=(61, 61)))
    laid = lay(path, CoastSettings(smallest_sea_km2=500, smallest_enclosed_sea_km2=500), length_km=150.0)
    t, p = laid.transects, laid.profiles
    ends = np.stack(place_on(t, p.shore_m + 120e3), axis=1)
    assert crossing_transects(np.stack([p.shore_lon_deg, p.shore_lat_deg], axis=1), ends, t.coast_part).all()


# ---- copies of one coast


def ragged(lon_deg=10.0, lat_sign=1, mirror=False):
    """A winding coast, the sea to the east (mirrored: to the west) of the middle, at 40 degrees."""
    rows, cols = np.mgrid[-40:41, -40:41]
    east = -cols if mirror else cols
    elevation = 4.0 * (8 * np.sin(rows / 9.0) - east) - 0.8 * np.maximum(east - 20, 0) ** 2
    elevation = elevation if lat_sign > 0 else elevation[::-1]
    return SyntheticGrid(
        elevation_m=elevation.astype(np.float32),
        x0=lon_deg - 2.0, y0=lat_sign * 40.0 - 2.0, dx=0.05, dy=0.05, crs="EPSG:4326", description="ragged",
    )  # fmt: skip


def paired(laid, lon0_deg, lat_sign, mirror):
    """Rows of a copy as they would stand in the original, in order of latitude: east, north, bearing, depths."""
    t = laid.transects
    east = (t.lon_deg - lon0_deg + 180) % 360 - 180
    bearing = np.radians(t.bearing_deg)
    table = np.stack([(-east if mirror else east), t.lat_deg * lat_sign], axis=1)
    vector = np.stack([np.sin(bearing) * (-1 if mirror else 1), np.cos(bearing) * lat_sign], axis=1)
    order = np.argsort(table[:, 1])
    return table[order], vector[order], laid.profiles.depth_m[order]


@pytest.mark.parametrize(
    ("lon", "lat_sign", "mirror"),
    [(100.0, 1, False), (180.0, 1, False), (-179.0, 1, False), (10.0, -1, False), (10.0, 1, True)],
)
def test_copies_of_a_coast_give_the_same_transects(write_grid, lon, lat_sign, mirror):
    """Moved, moved over 180, southern and mirrored: stations within 200 m, bearings within 0.5 degrees.

    Contours and simplification start elsewhere on a mirrored grid, which moves the coast by up to the tolerance of the
    simplification, radius / 50 = 200 m; over the 40 km of a bearing that is 0.3 degrees.
    """
    first = paired(lay(write_grid(ragged())), 10.0, 1, False)
    copy = paired(lay(write_grid(ragged(lon, lat_sign, mirror))), lon, lat_sign, mirror)
    assert first[0].shape == copy[0].shape
    away_m, _ = distance_bearing(*first[0].T, *copy[0].T)
    assert away_m.max() < 200.0
    assert np.abs(first[1] - copy[1]).max() < np.radians(0.5)
    width = min(first[2].shape[1], copy[2].shape[1])
    first_m, copy_m = first[2][:, 1:width], copy[2][:, 1:width]
    both = np.isfinite(first_m) & np.isfinite(copy_m)
    assert both.mean() > 0.3
    # a station 200 m along a coast that winds by up to 45 degrees starts up to 200 m elsewhere; cells are 5 km
    assert np.median(np.abs(first_m[both] / copy_m[both] - 1)) < 0.01


# ---- closing


@pytest.mark.parametrize(("width_km", "is_followed"), [(8, False), (14, False), (30, True), (44, True)])
def test_inlets_are_bridged_below_the_generalisation(write_grid, width_km, is_followed):
    """60 km long inlets; 20 km is the limit, and a cell is 2 km."""
    path = write_grid(
        scene(lambda x, y: np.where((np.abs(x) < width_km / 2) & (y <= 0) & (y > -60), -20.0, beach(x, y - 1)))
    )
    laid = lay(path, spacing_km=5.0, length_km=50.0)
    _, north_km = scene_km(laid.source, laid.transects.lon_deg, laid.transects.lat_deg)
    assert (north_km.min() < -50.0) == is_followed
    # a bridge may sag by what a disc of 10 km reaches into it: 10 - sqrt(100 - 49) = 2.9 km for 14 km
    assert is_followed or north_km.min() > -2.9


def test_small_island_is_dropped_and_named_as_islet(write_grid):
    """A disc of 5 km radius, 79 km2."""
    laid = lay(write_grid(scene(discs((0, 30, 5)))), spacing_km=5.0, length_km=50.0)
    assert len(laid.coast.lines) == 1
    [islet] = laid.coast.islets
    east_km, north_km = scene_km(laid.source, shapely.get_x(islet.centroid), shapely.get_y(islet.centroid))
    # contour of a cone on 2 km cells
    assert float(np.hypot(east_km, north_km - 30)) < 0.5


def test_large_island_carries_stations(write_grid):
    """A disc of 15 km radius, 707 km2, above the least of 500: a ring of 2 pi 15 km, chords and cells within 2 %."""
    laid = lay(write_grid(scene(discs((0, 30, 15)))), spacing_km=5.0, length_km=50.0)
    assert [line.is_closed for line in laid.coast.lines] == [False, True]
    assert laid.coast.lines[1].length_m == pytest.approx(2 * np.pi * 15e3, rel=0.02)
    assert len(laid.coast.islets) == 0


def test_archipelago_of_small_islands_gets_no_stations(write_grid):
    """Nine islands of 113 km2 with 3 km gaps would be one large island if bridged to each other."""
    places = [(east, 40, 6) for east in range(-60, 61, 15)]
    laid = lay(write_grid(scene(discs(*places))), spacing_km=5.0, length_km=50.0)
    assert len(laid.coast.lines) == 1
    assert len(laid.coast.islets) == 9


def test_barrier_islands_are_bridged_to_the_mainland(write_grid):
    """Islands of 4 km radius 8 km off the coast at y = -60: the most seaward station stands on one."""
    laid = lay(write_grid(scene(discs((-20, -48, 4), (0, -48, 4), (20, -48, 4)))), spacing_km=2.0, length_km=50.0)
    assert len(laid.coast.lines) == 1
    _, north_km = scene_km(laid.source, laid.transects.lon_deg, laid.transects.lat_deg)
    assert north_km.max() == pytest.approx(-44.0, abs=0.5)


def test_lakes_get_no_stations_and_enclosed_seas_do(write_grid):
    """A round lake of 30 km radius, 2827 km2."""
    path = write_grid(scene(lambda x, y: np.where(np.hypot(x, y + 60) < 30, -50.0, beach(x, y))))
    assert len(lay(path).coast.lines) == 1
    lines = lay(path, CoastSettings(smallest_enclosed_sea_km2=2500.0)).coast.lines
    assert [line.is_closed for line in lines] == [False, True]


def test_edges_of_the_grid_are_no_coast(write_grid):
    """A coast along y = 0 over 240 km: nothing but it."""
    laid = lay(write_grid(scene(beach)), spacing_km=5.0, length_km=50.0)
    [line] = laid.coast.lines
    _, north_km = scene_km(laid.source, line.lon_deg, line.lat_deg)
    assert np.abs(north_km).max() < 0.1
    assert line.length_m == pytest.approx(240e3, rel=0.02)  # 0.75 of a cell short at each end


@pytest.mark.parametrize("where", ["sea", "land"])
def test_missing_cells_far_from_the_shore_make_no_coast(write_grid, where):
    """A missing patch of 60 km on the sea, one of 6000 km2 on the land."""
    north, radius = (60, 30) if where == "sea" else (-70, 45)
    path = write_grid(scene(lambda x, y: np.where(np.hypot(x, y - north) < radius, np.nan, beach(x, y))))
    [line] = lay(path).coast.lines
    assert not line.is_closed
    assert line.length_m == pytest.approx(240e3, rel=0.02)


def test_missing_margins_of_a_turned_grid_make_no_coast_along_them(write_grid):
    """Grids warped into another system have corners without values; the coast meets them, and does not follow them."""
    path = write_grid(scene(lambda x, y: np.where(np.abs(x) + np.abs(y) > 110, np.nan, beach(x, y))))
    laid = lay(path, spacing_km=5.0)
    [line] = laid.coast.lines
    east_km, north_km = scene_km(laid.source, line.lon_deg, line.lat_deg)
    assert np.abs(north_km[np.abs(east_km) < 100]).max() < 0.1
    assert (
        line.length_m < 245e3
    )  # 240 km across, bent a little in the corners, where every cell is like the nearest known


def test_missing_cells_can_count_as_land(write_grid):
    path = write_grid(scene(lambda x, y: np.where(y < 0, np.nan, -5.0 - 5 * y)))
    with pytest.raises(CoastError, match=r"set grid\.void_is_land = true"):
        lay(path)
    laid = lay(path, void_is_land=True)
    _, north_km = scene_km(laid.source, laid.coast.lines[0].lon_deg, laid.coast.lines[0].lat_deg)
    # elevation 10 against depth 5 between the last wet row, y = 0, and the next, 2 km south
    assert np.abs(north_km + 2 / 3).max() < 0.05


def test_level_moves_the_coast(write_grid):
    """10 m up a beach of 5 m/km is 2 km."""
    laid = lay(write_grid(scene(beach)), CoastSettings(level_m=10.0, smallest_sea_km2=500))
    _, north_km = scene_km(laid.source, laid.coast.lines[0].lon_deg, laid.coast.lines[0].lat_deg)
    assert np.abs(north_km + 2.0).max() < 0.05


@pytest.mark.parametrize("lon", [3.0, 180.0])
def test_box_keeps_stations_inside_it(write_grid, lon):
    """Over 180 degrees east is smaller than west."""
    path = write_grid(straight_coast(0.0, 10.0, SHELF, lon_deg=lon, shape=(61, 121)))
    west, east = lon - 1.0, (lon + 0.5 + 180) % 360 - 180
    laid = lay(path, CoastSettings(box=(west, 9.0, east, 11.0), smallest_sea_km2=500), spacing_km=10.0)
    assert laid.transects.lon_deg.min() == pytest.approx(lon - 1.0, abs=0.1)
    assert laid.transects.lon_deg.max() == pytest.approx(lon + 0.5, abs=0.1)


@pytest.mark.parametrize("crs", ["EPSG:32631", "EPSG:2263"])
def test_grid_in_other_units(write_grid, crs):
    """The same beach in metres and in US survey feet."""
    lat, lon = (50.0, 3.0) if crs == "EPSG:32631" else (40.0, -74.0)
    cell = 2000.0 if crs == "EPSG:32631" else 2000.0 * 3937 / 1200
    grid = straight_coast(90.0, lat, SHELF, lon_deg=lon, crs=crs, cell=cell, shape=(81, 81))
    laid = lay(write_grid(grid))
    assert laid.coast.lines[0].length_m == pytest.approx(80 * 2000 - 1.5 * 2000, rel=5e-3)


# ---- coasts from vector files


@pytest.mark.parametrize("lon", [3.0, 179.9, -100.0])
def test_land_polygons_give_the_coast_of_the_grid(write_grid, lon):
    """Within a cell of the grid's; land on the far side of the globe does not matter."""
    grid = straight_coast(0.0, 10.0, SHELF, lon_deg=lon, shape=(61, 61))
    far = lon - 180.0
    land = [
        shapely.box(lon - 10, 0, lon + 10, 10),
        shapely.box(far - 20, -40, far + 20, 60),
        shapely.box(lon - 0.5, 10.4, lon - 0.45, 10.45),  # an islet of 27 km2
    ]
    from_grid = lay(write_grid(grid)).coast.lines[0]
    [line] = trace_coast(
        open_up(write_grid(grid)), CoastSettings(smallest_sea_km2=500), np.array(land, dtype=object)
    ).lines
    assert line.length_m == pytest.approx(from_grid.length_m, rel=2e-3)
    # the parallel and the geodesic along the coast part by less than 100 m over 3 degrees
    assert np.abs(line.lat_deg - 10.0).max() < 0.05


def test_adjoining_polygons_are_one_land_and_their_lakes_are_land(write_grid):
    """Districts under the area of an island make up a mainland; a lake in one, 3000 km2, gets no stations."""
    source = open_up(write_grid(straight_coast(0.0, 10.0, SHELF, shape=(61, 61))))
    districts = [
        shapely.box(w, s, w + 0.25, s + 0.25) for w in np.arange(-2, 2, 0.25) for s in np.arange(9.5, 10, 0.25)
    ]
    lake = shapely.box(-0.3, 8.6, 0.2, 9.1)
    land = np.array([*districts, shapely.box(-2, 8, 2, 9.5).difference(lake)], dtype=object)
    coast = trace_coast(source, CoastSettings(smallest_sea_km2=500), land)
    assert len(coast.lines) == 1
    assert len(coast.islets) == 0


def test_land_off_the_grid_is_refused(write_grid):
    source = open_up(write_grid(scene(beach)))
    with pytest.raises(CoastError, match=r"all of it is water \(or land of coast\.file\)"):
        trace_coast(source, CoastSettings(smallest_sea_km2=500), np.array([shapely.box(100, 50, 101, 51)]))


@pytest.mark.parametrize("direction", [1, -1])
def test_coast_lines_are_turned_so_that_the_sea_is_on_the_right(write_grid, direction):
    source = open_up(write_grid(straight_coast(0.0, 10.0, SHELF, lon_deg=180.0, shape=(61, 61))))
    lon = np.array([179.0, 179.9, -179.9, -179.0])[::direction]
    multi = shapely.multilinestrings(
        [shapely.linestrings(lon, [10.0] * 4), shapely.linestrings([178.8, 178.9], [10, 10])]
    )
    coast = coast_from_lines(source, np.array([multi], dtype=object), "drawn.gpkg")
    assert len(coast.lines) == 2
    # sea to the north on the right hand: westward
    assert coast.lines[0].lon_deg[0] > coast.lines[0].lon_deg[-1]
    assert np.ptp(coast.lines[0].lon_deg) == pytest.approx(2.0, abs=1e-9)


def test_lines_without_length_are_refused(write_grid):
    source = open_up(write_grid(scene(beach)))
    with pytest.raises(CoastError, match=r"dots\.gpkg: holds no line with a length; give the coast as lines"):
        coast_from_lines(source, np.array([shapely.linestrings([[3, 50], [3, 50]])], dtype=object), "dots.gpkg")


# ---- tiles


@pytest.mark.parametrize("tile_cells", [20, 33, 61])
def test_tiles_do_not_matter(write_grid, monkeypatch, tile_cells):
    """A winding coast with islands and inlets in one tile and in many.

    Lengths within 1e-3 and 0.1 km; places within 0.5 km, since the simplification, radius / 50 = 200 m, starts
    elsewhere in each tile on both sides.
    """
    path = write_grid(
        scene(
            lambda x, y: np.maximum(
                6 * (25 * np.sin(x / 22.0) + 8 * np.cos(x / 5.0) - y), 10 * (18 - np.hypot(x - 30, y - 80))
            )
        )
    )
    settings = CoastSettings(smallest_sea_km2=500)
    whole = trace_coast(open_up(path), settings)
    cut = Tiling.cut
    monkeypatch.setattr(
        coast_module, "Tiling", SimpleNamespace(cut=lambda source, region: cut(source, region, tile_cells=tile_cells))
    )
    tiled = trace_coast(open_up(path), settings)
    assert [line.is_closed for line in tiled.lines] == [line.is_closed for line in whole.lines]
    assert len(whole.lines) == 2
    for one, other in zip(whole.lines, tiled.lines, strict=True):
        assert other.length_m == pytest.approx(one.length_m, rel=1e-3, abs=100.0)
        paths = [shapely.linestrings(*scene_km(open_up(path), line.lon_deg, line.lat_deg)) for line in (one, other)]
        assert shapely.hausdorff_distance(*paths) < 0.5


def test_coast_round_the_globe_has_no_seam(write_grid):
    """A zonal continent of 2-degree cells has a northern and a southern coast, each closed, one turn long."""
    lon, lat = np.meshgrid(-179.0 + 2 * np.arange(180), -89.0 + 2 * np.arange(90))
    band = np.abs(lat - 10 - 5 * np.sin(np.radians(2 * lon)))
    grid = SyntheticGrid(
        elevation_m=(50 * np.clip(20 - band, -40, 40)).astype(np.float32),
        x0=-179.0, y0=-89.0, dx=2.0, dy=2.0, crs="EPSG:4326", description="zonal continent",
    )  # fmt: skip
    laid = lay(write_grid(grid), CoastSettings(), spacing_km=300.0, length_km=1000.0)
    assert len(laid.coast.lines) == 2
    for line in laid.coast.lines:
        assert line.is_closed
        assert np.ptp(line.lon_deg) == pytest.approx(360.0, abs=1e-6)
        shore = 10 + 5 * np.sin(np.radians(2 * line.lon_deg)) + (20 if line.lat_deg.mean() > 10 else -20)
        assert np.abs(line.lat_deg - shore).max() < 0.3  # a fraction of the 2-degree cells
    assert (laid.profiles.start_reason == 0).all()


# ---- tiles anywhere, in any order


@pytest.fixture
def rough_globe(write_grid):
    """A globe of 2-degree cells in 242 tiles: random lands, lakes and seas, missing patches, ice on both poles."""
    rng = np.random.default_rng(5)
    large, small = (
        ndimage.gaussian_filter(rng.normal(size=(90, 180)), size, mode=("nearest", "wrap")) for size in (9.0, 1.0)
    )
    elevation_m = 4000.0 * large / large.std() + 600.0 * small / small.std() - 1000.0
    elevation_m[:4] = elevation_m[-3:] = 500.0
    elevation_m[np.roll(ndimage.gaussian_filter(rng.normal(size=(90, 180)), 3), 40) > 0.18] = np.nan
    return write_grid(
        SyntheticGrid(
            elevation_m=elevation_m.clip(-6000, 6000).astype(np.float32),
            x0=-179.0, y0=-89.0, dx=2.0, dy=2.0, crs="EPSG:4326", description="rough globe",
        )
    )  # fmt: skip


ROUGH = CoastSettings(generalise_km=200.0, smallest_island_km2=4e5, smallest_sea_km2=2e5)


def bits(coast):
    """Everything a coast holds, as bytes."""
    lines = [(line.lon_deg.tobytes(), line.lat_deg.tobytes(), line.along_m.tobytes()) for line in coast.lines]
    return lines, [line.is_closed for line in coast.lines], shapely.to_wkb(coast.islets).tolist()


def backwards(function, jobs):
    """Map that runs all jobs from the last to the first, each sent as to another process, and gives them in order."""
    sent = [pickle.dumps(job) for job in jobs]
    done = [pickle.dumps(function(pickle.loads(job))) for job in reversed(sent)]
    return map(pickle.loads, reversed(done))


def test_order_of_the_tiles_does_not_matter(rough_globe):
    """Bit for bit, with lines, islets and lakes in plenty."""
    source = open_up(rough_globe)
    coast = trace_coast(source, ROUGH)
    assert len(coast.lines) > 3
    assert len(coast.islets) > 10
    assert bits(trace_coast(source, ROUGH, mapped=backwards)) == bits(coast)


def test_processes_give_the_same_coast_as_one(rough_globe):
    source = open_up(rough_globe)
    with ProcessPoolExecutor(2, mp_context=multiprocessing.get_context("spawn")) as pool:
        spread = trace_coast(source, ROUGH, mapped=pool.map)
    assert bits(spread) == bits(trace_coast(source, ROUGH))


@pytest.mark.parametrize("level_m", [0.0, 123.4])
def test_tiles_without_a_shore_are_left_out_and_change_nothing(rough_globe, monkeypatch, level_m):
    """The same bits when every window is read and traced."""
    source, settings = open_up(rough_globe), ROUGH.model_copy(update={"level_m": level_m})
    read = []
    read_many = GridSource.read_many

    def noted(self, windows):
        windows = list(windows)
        read.extend(windows)
        return read_many(self, windows)

    monkeypatch.setattr(GridSource, "read_many", noted)
    coast = trace_coast(source, settings)
    few = len(read)
    monkeypatch.setattr(Basins, "may_hold_shore", lambda self, window: True)
    monkeypatch.setattr(Basins, "shore_mask", Basins.sea_mask)
    read.clear()
    assert bits(trace_coast(source, settings)) == bits(coast)
    assert len(read) == 2 * 242
    assert 242 < few < len(read) - 20


def test_jobs_are_small_and_made_as_they_are_asked_for(rough_globe):
    """So that neither the jobs of a globe nor all labels are in one place at once."""
    sizes = []

    def one_by_one(function, jobs):
        for job in jobs:
            sizes.append(len(pickle.dumps(job)))
            made = len(sizes)
            yield function(job)
            assert len(sizes) == made

    trace_coast(open_up(rough_globe), ROUGH, mapped=one_by_one)
    assert len(sizes) > 2 * 11  # several jobs in each of 11 rows, twice
    assert max(sizes) < 20_000


@pytest.mark.parametrize("drawn", [False, True])
def test_land_of_a_file_runs_over_the_same_map(rough_globe, tmp_path, drawn):
    """Both passes; polygons give the same coast wherever their tiles are traced."""
    content = {"grid": {"path": str(rough_globe), "positive": "up"}, "coast": {"generalise_km": 400.0}}
    if drawn:
        land = [shapely.Point(lon, lat).buffer(12) for lon in range(-180, 180, 40) for lat in (-50, 0, 45)]
        path = tmp_path / "land.gpkg"
        pyogrio.raw.write(path, shapely.to_wkb(land), [], [], geometry_type="Polygon", crs="EPSG:4326")
        content["coast"]["file"] = str(path)
    settings = Settings.from_dict(content | {"output": {"path": str(tmp_path / "out.gpkg")}})
    source, called = open_up(rough_globe), []

    def noted(function, jobs):
        called.append(function.__name__)
        return backwards(function, jobs)

    assert bits(make_coast(source, settings, mapped=noted)) == bits(make_coast(source, settings))
    assert len(called) == 2


# ---- refusals


def test_all_land_is_refused_with_its_cure(write_grid):
    with pytest.raises(
        CoastError,
        match=r"no water body of at least 500 km2 .* check that it holds depths here, their sign \(grid.positive\)",
    ):
        lay(write_grid(scene(lambda x, y: 0 * x + 5.0)))


def test_all_sea_is_refused(write_grid):
    with pytest.raises(CoastError, match="all of it is water"):
        lay(write_grid(scene(lambda x, y: 0 * x - 5.0)))


@pytest.mark.parametrize("box", [(40.0, 50.0, 41.0, 51.0), (-177.0, -50.0, -170.0, -40.0)])
def test_box_off_the_grid_is_refused(write_grid, box):
    with pytest.raises(CoastError, match="lies outside the grid, which covers west, south, east, north = 1"):
        lay(write_grid(scene(beach)), CoastSettings(box=box))


# ---- joining


def test_ends_are_joined_nearest_first_and_closed():
    pieces = [np.array([[0, 0], [1, 0]]), np.array([[1.1, 0], [1, 1]]), np.array([[1, 1.2], [0, 0.2]])]
    [chain] = join_ends([piece.astype(float) for piece in pieces], tolerance=0.25)
    np.testing.assert_array_equal(chain[0], chain[-1])
    assert len(chain) == 4


def test_ends_are_joined_over_the_seam():
    pieces = [np.array([[8.0, 1], [10.0, 1]]), np.array([[0.0, 1], [3.0, 1]])]
    [chain] = join_ends(pieces, tolerance=0.1, turn=10)
    assert chain[:, 0].tolist() == [8.0, 10.0, 13.0]
    assert len(join_ends(pieces, tolerance=0.1)) == 2


def test_line_through_repeated_points_drops_them():
    line = CoastLine.through(np.array([0.0, 0.0, 1.0, 1.0]), np.array([0.0, 0.0, 0.0, 0.0]))
    assert line.lon_deg.tolist() == [0.0, 1.0]
    assert line.length_m == pytest.approx(111319.49, abs=0.01)


# ---- over the pole


@pytest.mark.parametrize("crs", ["EPSG:3413", "EPSG:3031"])
@pytest.mark.parametrize("is_island", [True, False])
def test_coast_round_a_pole_is_closed_and_faces_its_sea(tmp_path, crs, is_island):
    """Longitudes run on round the pole, along coasts and transects, and the file is written."""
    y, x = np.mgrid[0:100, 0:100] - 49.5
    r = np.hypot(x, y)
    shelf = np.where(r < 25, -100.0, -4000.0) if is_island else np.where(r > 22, -100.0, -4000.0)
    elevation_m = np.where(r < 10 if is_island else r > 30, 200.0, shelf).astype(np.float32)
    path = write_geotiff(
        tmp_path / "g.tif", elevation_m, x0=-495e3, y0=-495e3, dx=1e4, dy=1e4, crs=crs, description="elevation"
    )
    settings = Settings.from_dict(
        {
            "grid": {"path": str(path)},
            "coast": {"generalise_km": 50.0, "smallest_enclosed_sea_km2": 100.0},
            "transects": {"spacing_km": 30.0, "length_km": 300.0},
            "output": {"path": str(tmp_path / "out.gpkg")},
        }
    )
    run = screen(settings)
    (line,) = run.coast.lines
    assert line.is_closed
    assert abs(line.lon_deg[-1] - line.lon_deg[0]) == pytest.approx(360)
    assert set(run.status) == {"ok"}
    away = 180.0 if (crs == "EPSG:3413") == is_island else 0.0  # from the north pole, and to the south pole, is south
    off_deg = unwrap_lon_deg(read_table(run.path, "transects")["bearing_deg"] - away, 0.0)
    assert np.abs(off_deg).max() < 4  # cells of 10 km on a circle of 100 km
    west, _, east, _ = shapely.bounds(shapely.get_parts(read_vector(run.path, "transects").geometry)).T
    assert west.min() >= -180
    assert east.max() <= 180


def test_land_polygon_over_the_whole_grid_leaves_no_coast(write_grid):
    """Its edges, straight in degrees, once bowed into the grid and carried stations."""
    world = np.array([shapely.box(-180, -90, 180, 90)], dtype=object)
    with pytest.raises(CoastError, match=r"water \(or land of coast\.file\)"):
        trace_coast(open_grid(GridSettings(path=write_grid(scene(beach)))), CoastSettings(), land=world)
