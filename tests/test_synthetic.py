"""Synthetic grids hold the depth their closed form states, at every bearing, latitude and coordinate system."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.ndimage import map_coordinates

from shelfmap.errors import GridError
from shelfmap.geodesy import Projection, distance_bearing, geodesic_nodes
from shelfmap.synthetic import ShelfProfile, round_coast, shelf_profile, step_profile, straight_coast

SLOPE = 1 / 500
PLANE = shelf_profile(400e3, 800.0, 0.05, 4000.0)  # one slope across the coast, so that interpolation adds no kink

bearings = st.floats(0.0, 360.0)
latitudes = st.floats(-75.0, 75.0)
#: system, longitude off its axis (grid north is not true north there), cell, latitudes it serves
SYSTEMS = [
    ("EPSG:4326", 10.0, 0.04, (-75, -40, 0, 20, 60, 75)),
    ("EPSG:32631", 5.0, 4000.0, (0, 30, 60, 75)),
    ("EPSG:3035", 22.0, 4000.0, (40, 55, 68)),
]


def interpolate(grid, lon, lat):
    """Elevation between cell centres, bilinear, float64."""
    x, y = Projection(grid.crs).from_lonlat(lon, lat)
    index = np.array([(y - grid.y0) / grid.dy, (x - grid.x0) / grid.dx])
    assert (index >= 0).all()
    assert (index[0] <= grid.elevation_m.shape[0] - 1).all()
    assert (index[1] <= grid.elevation_m.shape[1] - 1).all()
    return map_coordinates(grid.elevation_m.astype(float), index, order=1)


# ---- profiles


def test_shelf_profile_has_its_break_and_its_foot_where_stated():
    profile = shelf_profile(65e3, 130.0, 1 / 15, 4130.0, coast_depth_m=10.0)
    depths = profile.depth_at([0.0, 32.5e3, 65e3, 65e3 + 15.0, 125e3, 900e3])
    np.testing.assert_allclose(depths, [10.0, 70.0, 130.0, 131.0, 4130.0, 4130.0], rtol=1e-12)  # rounding


def test_step_profile_is_level_on_both_sides_of_the_drop():
    depths = step_profile(350e3, 100.0, 4000.0).depth_at([0.0, 349_999.9, 350e3, 350_000.1, 1e6])
    np.testing.assert_array_equal(depths, [100.0, 100.0, 100.0, 4000.0, 4000.0])


def test_land_mirrors_the_first_slope_and_rises_1_in_200_behind_a_wall():
    np.testing.assert_allclose(PLANE.depth_at([-1e3, -1e9]), [-2.0, -1000.0], rtol=1e-12)
    np.testing.assert_allclose(step_profile(9e3, 50.0, 90.0).depth_at([-1e3, -1e9]), [-5.0, -1000.0], rtol=1e-12)


@pytest.mark.parametrize(
    ("distance_m", "depth_m", "message"),
    [
        ([0.0], [0.0], "one depth for each of two or more distances"),
        ([0.0, 1.0], [0.0], "one depth for each of two or more distances"),
        ([1.0, 2.0], [0.0, 1.0], "must start at 0 and rise"),
        ([0.0, 2.0, 2.0], [0.0, 1.0, 3.0], "must start at 0 and rise"),
        ([0.0, 2.0], [0.0, -1.0], "must be 0 or more; depth is positive down"),
        ([0.0, 2.0], [0.0, np.nan], "must be 0 or more"),
    ],
)
def test_profile_nodes_out_of_order_are_refused(distance_m, depth_m, message):
    with pytest.raises(GridError, match=message):
        ShelfProfile(distance_m=np.array(distance_m), depth_m=np.array(depth_m))


@pytest.mark.parametrize("change", [{"width_m": 0.0}, {"slope_beyond": -0.1}, {"floor_m": 100.0}])
def test_shelf_profile_refuses_a_shelf_that_is_none(change):
    with pytest.raises(GridError, match="must be above 0 and floor_m"):
        shelf_profile(**{"width_m": 1e4, "break_depth_m": 100.0, "slope_beyond": 0.05, "floor_m": 4000.0, **change})


# ---- straight coast


@pytest.mark.parametrize(
    ("crs", "lon_deg", "cell", "lat_deg"), [(*system[:3], lat) for system in SYSTEMS for lat in system[3]]
)
@pytest.mark.parametrize("bearing_deg", [0.0, 33.0, 90.0, 135.0, 200.0, 285.0])
def test_depth_off_a_straight_coast_follows_the_profile(crs, lon_deg, cell, lat_deg, bearing_deg):
    """Walk from stations on the coast's geodesic along their normals; the grid must give slope times distance.

    5 m of distance allowed: curvature of the grid's lines within a 4 km cell is at most (2 km)^2 tan(75)/(2 * 6371 km)
    = 1.2 m per axis, the formula's own error 0.04 m, float32 0.03 m.
    """
    grid = straight_coast(bearing_deg, lat_deg, PLANE, lon_deg=lon_deg, crs=crs, cell=cell, shape=(61, 61))
    reach_m = 0.65 * 30 * (cell if cell > 1 else cell * 111e3 * np.cos(np.radians(lat_deg)))
    offset_m = np.linspace(-reach_m, reach_m, 7)
    for along_m in (-reach_m, -0.3 * reach_m, 0.6 * reach_m):
        lon, lat = (a.item() for a in geodesic_nodes(lon_deg, lat_deg, bearing_deg + 90.0, along_m))
        _, to_middle_deg = distance_bearing(lon, lat, lon_deg, lat_deg)
        normal_deg = to_middle_deg + (90.0 if along_m > 0 else -90.0)
        elevation_m = interpolate(grid, *(a[0] for a in geodesic_nodes(lon, lat, normal_deg, offset_m)))
        np.testing.assert_allclose(-elevation_m / SLOPE, offset_m, atol=5.0)


def test_half_a_thousand_kilometres_off_the_coast_is_still_within_metres():
    """500 km along and 500 km off, where the formula's error is 5 m (see its notes)."""
    profile = shelf_profile(900e3, 1800.0, 0.05, 4000.0)
    grid = straight_coast(250.0, 40.0, profile, lon_deg=5.0, crs="EPSG:3035", cell=8000.0, shape=(181, 181))
    lon, lat = (a.item() for a in geodesic_nodes(5.0, 40.0, 340.0, 500e3))
    _, to_middle_deg = distance_bearing(lon, lat, 5.0, 40.0)
    elevation_m = interpolate(grid, *(a[0] for a in geodesic_nodes(lon, lat, to_middle_deg + 90.0, 500e3)))
    assert -elevation_m.item() / SLOPE == pytest.approx(500e3, abs=10.0)  # 5 m formula, rest interpolation


@settings(max_examples=25, deadline=None)
@given(bearing_deg=bearings, lat_deg=latitudes)
def test_turning_the_coast_round_changes_the_sign_of_every_elevation(bearing_deg, lat_deg):
    there = straight_coast(bearing_deg, lat_deg, PLANE, shape=(9, 11))
    back = straight_coast(bearing_deg + 180.0, lat_deg, PLANE, shape=(9, 11))
    np.testing.assert_allclose(there.elevation_m, -back.elevation_m, atol=1e-4)  # float32 of some 100 m


@settings(max_examples=25, deadline=None)
@given(bearing_deg=bearings, lat_deg=latitudes)
def test_mirroring_the_bearing_mirrors_the_grid(bearing_deg, lat_deg):
    right = straight_coast(bearing_deg, lat_deg, PLANE, shape=(9, 11))
    left = straight_coast(-bearing_deg, lat_deg, PLANE, shape=(9, 11))
    np.testing.assert_allclose(right.elevation_m, left.elevation_m[:, ::-1], atol=1e-4)  # float32 of some 100 m


def test_coast_across_the_date_line_is_the_one_at_greenwich():
    here = straight_coast(70.0, -40.0, PLANE, lon_deg=0.0)
    there = straight_coast(70.0, -40.0, PLANE, lon_deg=180.0)
    np.testing.assert_allclose(there.elevation_m, here.elevation_m, atol=1e-3)  # float32 of some 1000 m
    assert there.x[-1] > 180.0


def test_step_shelf_has_two_depths_and_no_third():
    sea_m = straight_coast(270.0, 50.0, step_profile(100e3, 80.0, 4000.0)).elevation_m
    assert set(np.unique(sea_m[sea_m < 0]).tolist()) == {-80.0, -4000.0}


def test_axes_name_the_cell_centres_and_the_grid_is_read_only():
    grid = straight_coast(270.0, 45.0, PLANE, lon_deg=3.0, crs="EPSG:32631", cell=1000.0, shape=(3, 5))
    middle_x, middle_y = Projection("EPSG:32631").from_lonlat(3.0, 45.0)
    np.testing.assert_allclose(grid.x, middle_x + np.arange(-2000.0, 2001.0, 1000.0), rtol=1e-12)
    np.testing.assert_allclose(grid.y, middle_y + np.arange(-1000.0, 1001.0, 1000.0), rtol=1e-12)
    with pytest.raises(ValueError, match="read-only"):
        grid.elevation_m[0, 0] = 1.0


# ---- round coast


@pytest.mark.parametrize(("crs", "lon_deg", "cell", "lats"), SYSTEMS)
@pytest.mark.parametrize(("inside", "sign"), [("land", 1.0), ("sea", -1.0)])
def test_depth_round_a_circle_depends_on_the_distance_from_its_middle_only(crs, lon_deg, cell, lats, inside, sign):
    """Asked at the cells themselves; 0.1 m of distance allowed for float32 elevations of some 100 m."""
    grid = round_coast(30e3, lats[0], PLANE, inside=inside, lon_deg=lon_deg, crs=crs, cell=cell, shape=(21, 21))
    lon, lat = Projection(crs).to_lonlat(*np.meshgrid(grid.x, grid.y))
    distance_m, _ = distance_bearing(lon_deg, lats[0], lon, lat)
    np.testing.assert_allclose(-grid.elevation_m / SLOPE, sign * (distance_m - 30e3), atol=0.1)


def test_round_basin_is_as_large_as_its_circle():
    """Cells of sea times their area against pi r^2; 1 % for a rim of 1000 cells crossed at random."""
    grid = round_coast(60e3, 50.0, PLANE, inside="sea", lon_deg=3.0, crs="EPSG:32631", cell=500.0, shape=(301, 301))
    assert (grid.elevation_m < 0).sum() * 0.25e6 == pytest.approx(np.pi * 60e3**2, rel=0.01)


@pytest.mark.parametrize(("radius_m", "inside"), [(50e3, "water"), (0.0, "sea"), (float("nan"), "land")])
def test_round_coast_refuses_what_is_no_circle_of_land_or_sea(radius_m, inside):
    with pytest.raises(GridError, match=r"must be 'land' or 'sea' and radius_m = .* above 0"):
        round_coast(radius_m, 45.0, PLANE, inside=inside)


def test_same_call_gives_the_same_bits():
    first, again = (straight_coast(123.4, 56.7, PLANE).elevation_m.tobytes() for _ in range(2))
    assert first == again
