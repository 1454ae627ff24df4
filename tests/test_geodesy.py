"""Distances, bearings and places on the ellipsoid, against closed forms and a published length."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from shelfmap.errors import GridError
from shelfmap.geodesy import (
    Projection,
    area_m2,
    distance_bearing,
    geodesic_nodes,
    local_projection,
    unwrap_lon_deg,
)

LON = st.floats(-540, 540)
LAT = st.floats(-85, 85)


def test_quarter_meridian():
    """From equator to pole along a meridian: 10 001 965.729 m on WGS84 (from memory), to a millimetre."""
    distance_m, bearing_deg = distance_bearing(7.0, 0.0, 7.0, 90.0)
    assert distance_m == pytest.approx(10_001_965.729, abs=2e-3)
    assert bearing_deg == pytest.approx(0.0, abs=1e-9)


def test_one_degree_of_equator():
    """On the equator a degree is a pi / 180, a = 6 378 137 m."""
    distance_m, _ = distance_bearing(10.0, 0.0, 11.0, 0.0)
    assert distance_m == pytest.approx(6_378_137.0 * np.pi / 180, abs=1e-3)


@given(LON, LAT, st.floats(0, 359.9), st.floats(1.0, 3e6))
def test_node_lies_at_its_distance_and_bearing(lon_deg, lat_deg, bearing_deg, distance_m):
    """Forth and back agree to a micrometre in distance; bearings to 1e-6 degrees over a kilometre and more."""
    lon, lat = geodesic_nodes([lon_deg], [lat_deg], [bearing_deg], [distance_m])
    back_m, back_deg = distance_bearing(lon_deg, lat_deg, lon[0, 0], lat[0, 0])
    assert back_m == pytest.approx(distance_m, abs=1e-6)
    assert abs((back_deg - bearing_deg + 180) % 360 - 180) < 1e-6 * max(1.0, 1e3 / distance_m)
    assert abs(lon[0, 0] - lon_deg) <= 180.0


def test_negative_distance_runs_backwards():
    lon, lat = geodesic_nodes([5.0], [0.0], [90.0], [-111319.490793])
    assert lon[0, 0] == pytest.approx(4.0, abs=1e-9)
    assert lat[0, 0] == pytest.approx(0.0, abs=1e-9)


@given(LON, LON)
def test_unwrapped_longitude_is_whole_turns_away_and_near_the_middle(lon_deg, middle_deg):
    """Within half a turn of the middle but for rounding (1e-9 degrees is 0.1 mm)."""
    out = float(unwrap_lon_deg(lon_deg, middle_deg))
    assert abs(out - middle_deg) <= 180.0 + 1e-9
    turns = (out - lon_deg) / 360.0
    assert turns == pytest.approx(round(turns), abs=1e-9)


def test_longitude_that_needs_no_turn_is_unchanged_bit_for_bit():
    lon = np.array([0.1, -179.9, 33.3])
    np.testing.assert_array_equal(unwrap_lon_deg(lon, 0.0), lon)


def test_area_of_a_hemisphere_side_and_either_direction():
    """A one-degree cell at the equator: R^2 dlon sin(dlat) on the authalic sphere (6 371 007.181 m), to 1 %."""
    ring = np.array([0, 1, 1, 0]), np.array([0, 0, 1, 1])
    expected = 6_371_007.181**2 * np.radians(1) * np.sin(np.radians(1))
    assert area_m2(*ring) == pytest.approx(expected, rel=0.01)
    assert area_m2(ring[0][::-1], ring[1][::-1]) == pytest.approx(area_m2(*ring), rel=1e-12)


@pytest.mark.parametrize("crs", ["EPSG:32631", "EPSG:3035", "EPSG:3031", "EPSG:2263"])
def test_projection_there_and_back(crs):
    """A round trip closes to 1e-9 degrees (0.1 mm)."""
    projection = Projection(crs)
    lon, lat = {"EPSG:3031": (170.0, -72.0), "EPSG:2263": (-74.0, 40.6)}.get(crs, (4.0, 52.0))
    back = projection.to_lonlat(*projection.from_lonlat(lon, lat))
    assert np.allclose(back, (lon, lat), atol=1e-8, rtol=0)


def test_unit_of_a_foot_system_is_known():
    """EPSG:2263 counts in US survey feet, 1200 / 3937 m."""
    assert Projection("EPSG:2263").metres_per_unit == pytest.approx(1200 / 3937, rel=1e-9)
    assert Projection("EPSG:4326").metres_per_unit == 1.0


def test_geographic_system_keeps_unwrapped_longitudes():
    lon, lat = Projection("EPSG:4326").from_lonlat(np.array([190.0]), np.array([1.0]))
    assert (lon[0], lat[0]) == (190.0, 1.0)


def test_unknown_system_is_named_with_its_cure():
    with pytest.raises(GridError, match="'EPSG:1' is unknown to PROJ; give one as EPSG:n or WKT"):
        Projection("EPSG:1")


def test_local_projection_keeps_distance_and_bearing_from_its_middle():
    """Azimuthal equidistant: 300 km at 30 degrees stands at (150, 259.8) km, to a centimetre."""
    lon, lat = geodesic_nodes([20.0], [70.0], [30.0], [3e5])
    x_m, y_m = local_projection(20.0, 70.0).from_lonlat(lon[0, 0], lat[0, 0])
    assert x_m == pytest.approx(1.5e5, abs=0.01)
    assert y_m == pytest.approx(3e5 * np.cos(np.radians(30)), abs=0.01)


@pytest.mark.parametrize(("lon", "lat"), [(20.0, 70.0), (179.9, -45.0), (-180.0, 89.9), (370.0, 0.0)])
def test_local_plane_is_the_projection_bit_for_bit(lon, lat):
    """PROJ's own way between the two systems, found by its slow search."""
    plane = local_projection(lon, lat)
    slow = Projection(f"+proj=aeqd +lat_0={lat:.6f} +lon_0={lon:.6f} +datum=WGS84 +units=m +no_defs")
    rng = np.random.default_rng(1)
    lon_deg, lat_deg = lon + rng.uniform(-9, 9, 500), np.clip(lat + rng.uniform(-6, 6, 500), -90, 90)
    x_m, y_m = plane.from_lonlat(lon_deg, lat_deg)
    np.testing.assert_array_equal((x_m, y_m), slow.from_lonlat(lon_deg, lat_deg))
    np.testing.assert_array_equal(plane.to_lonlat(x_m, y_m), slow.to_lonlat(x_m, y_m))
    assert np.ptp(x_m) > 1e5 or abs(lat) > 80
