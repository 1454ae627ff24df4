"""Cutting at the 180 meridian: nothing lost, nothing spanning the world."""

import numpy as np
import pytest
import shapely
from hypothesis import given
from hypothesis import strategies as st

from shelfmap.antimeridian import split_antimeridian
from shelfmap.errors import LayerError
from shelfmap.geodesy import distance_bearing

STEPS = st.lists(st.tuples(st.floats(-20, 20), st.floats(-85, 85)), min_size=1, max_size=12)
STARTS = st.tuples(st.floats(-400, 400), st.floats(-85, 85))


def array_of(*shapes):
    out = np.empty(len(shapes), dtype=object)
    out[:] = shapes
    return out


def length_m(geometry):
    lonlat, row = shapely.get_coordinates(shapely.get_parts(np.array([geometry])), return_index=True)
    distance_m, _ = distance_bearing(*lonlat[:-1].T, *lonlat[1:].T)
    return distance_m[row[1:] == row[:-1]].sum()


@given(STARTS, STEPS)
def test_length_stays_and_no_segment_spans_the_world(start, steps):
    """1e-7 of the length: the cut lies on the great ellipse, off the geodesic by 2.5e-8 at most (20,000 tries)."""
    lons = np.cumsum([start[0], *(step[0] for step in steps)])
    lats = [start[1], *(step[1] for step in steps)]
    line = shapely.LineString(np.column_stack([lons, lats]))
    (split,) = split_antimeridian(array_of(line))
    west, _, east, _ = split.bounds
    assert west >= -180
    assert east <= 180
    assert length_m(split) == pytest.approx(length_m(line), rel=1e-7, abs=1e-3)
    lonlat, row = shapely.get_coordinates(shapely.get_parts(np.array([split])), return_index=True)
    jumps = np.abs(np.diff(lonlat[:, 0]))[row[1:] == row[:-1]]
    assert jumps.max() <= 20 + 1e-9  # a step of the line, or a piece of one


@given(STARTS, STEPS, st.integers(-3, 3))
def test_whole_turns_of_longitude_change_nothing(start, steps, turns):
    """Dyadic coordinates, so that 360 degrees are added without rounding."""
    lons = np.round(np.cumsum([start[0], *(step[0] for step in steps)]) * 1024) / 1024
    lats = [start[1], *(step[1] for step in steps)]
    line = array_of(shapely.LineString(np.column_stack([lons, lats])))
    turned = array_of(shapely.LineString(np.column_stack([lons + 360 * turns, lats])))
    # the one on the meridian itself may come out as -180 or 180: compare only lines that never touch it
    if np.all((lons - 180) % 360 != 0):
        assert shapely.equals_exact(split_antimeridian(line)[0], split_antimeridian(turned)[0], tolerance=1e-9)


def test_a_line_from_170_to_190_becomes_two_parts():
    (split,) = split_antimeridian(array_of(shapely.LineString([(170, 0), (190, 0)])))
    assert split.wkt == "MULTILINESTRING ((170 0, 180 0), (-180 0, -170 0))"
    assert not split.intersects(shapely.box(0, -10, 10, 10))


def test_a_line_back_and_forth_becomes_one_part_for_each_stretch():
    (split,) = split_antimeridian(array_of(shapely.LineString([(179, 0), (181, 1), (179, 2), (178, 2)])))
    assert [len(part.coords) for part in split.geoms] == [2, 3, 3]


def test_a_line_that_only_touches_the_meridian_stays_in_one_part():
    (split,) = split_antimeridian(array_of(shapely.LineString([(181, 0), (180, 1), (181, 2)])))
    assert split.wkt == "LINESTRING (-179 0, -180 1, -179 2)"


def test_a_line_round_the_world_is_cut_once_a_turn():
    lons = np.arange(-170.0, 560.0, 10.0)
    (split,) = split_antimeridian(array_of(shapely.LineString(np.column_stack([lons, 0 * lons]))))
    assert len(split.geoms) == 3
    assert split.length == pytest.approx(lons[-1] - lons[0], rel=1e-12)


def test_the_parts_of_a_multiline_are_cut_one_by_one():
    shape = shapely.MultiLineString([[(0, 0), (1, 0)], [(179, 5), (181, 5)]])
    (split,) = split_antimeridian(array_of(shape))
    assert len(split.geoms) == 3
    assert split.geoms[0].wkt == "LINESTRING (0 0, 1 0)"


def test_the_cut_lies_on_the_geodesic():
    """From (170, 60) to (190, 60) it crosses 180 north of 60 degrees: tan lat = tan 60 / cos 10 deg by symmetry."""
    (split,) = split_antimeridian(array_of(shapely.LineString([(170, 60), (190, 60)])))
    expected_deg = np.degrees(np.arctan(np.tan(np.radians(60)) / np.cos(np.radians(10))))
    assert split.geoms[0].coords[-1] == pytest.approx((180, expected_deg), abs=1e-12)


def test_points_come_back_within_180():
    shapes = array_of(shapely.Point(181, 5), shapely.Point(180, 5), shapely.Point(-541, 5), shapely.Point(3, 5))
    assert [point.x for point in split_antimeridian(shapes)] == [-179, 180, 179, 3]


def test_what_needs_nothing_is_the_same_object_and_the_input_stays():
    crossing = shapely.LineString([(179, 0), (181, 0)])
    shapes = array_of(shapely.LineString([(0, 0), (1, 1)]), None, shapely.LineString(), crossing)
    before = shapes.copy()
    out = split_antimeridian(shapes)
    assert all(one is other for one, other in zip(out[:3], shapes[:3], strict=True))
    assert all(one is other for one, other in zip(shapes, before, strict=True))
    assert out[3] is not crossing


def test_each_line_is_cut_as_if_it_stood_alone():
    rng = np.random.default_rng(3)
    lines = array_of(*(shapely.LineString(rng.uniform([150, -60], [210, 60], (4, 2))) for _ in range(50)))
    together = split_antimeridian(lines)
    alone = [split_antimeridian(lines[i : i + 1])[0] for i in range(50)]
    assert all(one.wkb == other.wkb for one, other in zip(together, alone, strict=True))


def test_longitudes_that_jump_are_refused():
    with pytest.raises(LayerError, match=r"jumps 340\.0 degrees.*unwrap its longitudes"):
        split_antimeridian(array_of(shapely.LineString([(170, 0), (-170, 0)])))


def test_nothing_in_nothing_out():
    assert split_antimeridian(np.array([], dtype=object)).size == 0
