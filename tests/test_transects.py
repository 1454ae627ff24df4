"""Stations along a coast, and transects drawn by hand."""

from itertools import pairwise

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from utils_geometry import EMPTY, angle_between

from shelfmap.coast import Coast, CoastLine
from shelfmap.errors import TransectError
from shelfmap.geodesy import distance_bearing
from shelfmap.settings import CoastSettings, TransectSettings
from shelfmap.transects import coast_pieces, crossing_transects, lay_transects, transects_from_lines

DEGREE_M = 111_319.490793  # of the equator: a pi / 180


def coast_of(*lines):
    return Coast(
        lines=tuple(CoastLine.through(np.array(lon, dtype=float), np.array(lat, dtype=float)) for lon, lat in lines),
        islets=EMPTY,
        source="drawn",
    )


#: Westward along the equator, the sea to the north; the second runs north, the sea to the east.
EQUATOR = ([12, 11, 10], [0, 0, 0])
MERIDIAN = ([20, 20], [0, 1])


def lines_of(*lonlat):
    return np.array([shapely.linestrings(*line) for line in lonlat], dtype=object)


def test_stations_stand_in_the_middle_of_equal_parts():
    """2 degrees of equator, 222.6 km, at 50 km: four parts of 55.66 km, to a millimetre; sea to the north."""
    t = lay_transects(coast_of(EQUATOR, MERIDIAN), TransectSettings(spacing_km=50), CoastSettings())
    first = t.rows(0, 4)
    assert t.transect_id.tolist() == [1, 2, 3, 4, 5, 6]
    assert t.coast_part.tolist() == [1, 1, 1, 1, 2, 2]
    np.testing.assert_allclose(first.coast_m, (np.arange(4) + 0.5) * DEGREE_M / 2, atol=1e-3)
    np.testing.assert_allclose(first.lon_deg, [11.75, 11.25, 10.75, 10.25], atol=1e-8)
    np.testing.assert_allclose(first.piece_start_m[1:], first.piece_stop_m[:-1], atol=1e-6)
    assert angle_between(first.bearing_deg, 0.0).max() < 1e-6
    assert angle_between(t.bearing_deg[4:], 90.0).max() < 1e-6


def test_nodes_run_from_half_the_generalisation_landward_to_the_search_length():
    t = lay_transects(
        coast_of(EQUATOR), TransectSettings(spacing_km=50, length_km=105), CoastSettings(generalise_km=24)
    )
    assert t.node_m[0, 0] == -12e3
    assert t.node_m[0, -1] == 105e3
    assert np.diff(t.node_m, axis=1).max() <= 1e4
    away_m, _ = distance_bearing(t.lon_deg[:, None], t.lat_deg[:, None], t.node_lon_deg, t.node_lat_deg)
    np.testing.assert_allclose(away_m, np.abs(t.node_m), atol=1e-5)


def test_coast_shorter_than_the_spacing_carries_one_station():
    t = lay_transects(coast_of(MERIDIAN), TransectSettings(spacing_km=500), CoastSettings())
    assert len(t) == 1
    assert t.coast_m[0] == pytest.approx(0.5 * (t.piece_start_m[0] + t.piece_stop_m[0]))


def test_closed_coast_has_no_seam_in_its_bearings():
    """A ring of 72 chords: every bearing radial to a chord's half, 2.5 degrees, wherever the ring begins."""
    for begin in (0, 17):
        turn = np.radians(-(np.arange(73) + begin) * 5.0)
        ring = coast_of((10 + np.cos(-turn), np.sin(-turn)))
        t = lay_transects(ring, TransectSettings(spacing_km=10), CoastSettings())
        # land on the left of a ring run counter-clockwise: an island
        radial = distance_bearing(10.0, 0.0, t.lon_deg, t.lat_deg)[1]
        assert ring.lines[0].is_closed
        assert angle_between(t.bearing_deg, radial).max() < 2.5


def test_box_without_stations_is_refused():
    with pytest.raises(TransectError, match=r"no station lies in coast.box = \[1.0, 2.0, 3.0, 4.0\]; move or widen"):
        lay_transects(coast_of(EQUATOR), TransectSettings(), CoastSettings(box=(1.0, 2.0, 3.0, 4.0)))


def test_pieces_cover_the_coast_once():
    """Pieces meet end to start and sum to the coast; vertices inside a piece are kept."""
    coast = coast_of(([12, 11.9, 11.2, 10], [0, 0.2, -0.1, 0]))
    t = lay_transects(coast, TransectSettings(spacing_km=40), CoastSettings())
    pieces = [shapely.get_coordinates(piece) for piece in coast_pieces(coast, t)]
    for one, after in pairwise(pieces):
        np.testing.assert_allclose(one[-1], after[0], atol=1e-9)
    whole = np.concatenate([pieces[0], *[piece[1:] for piece in pieces[1:]]])
    np.testing.assert_allclose(whole[0], [12, 0], atol=1e-12)
    np.testing.assert_allclose(whole[-1], [10, 0], atol=1e-12)
    assert {(11.9, 0.2), (11.2, -0.1)} <= {tuple(point) for point in whole.round(12).tolist()}


# ---- drawn by hand


def test_drawn_lines_keep_their_identities():
    """Kept where given once; repeated ones, zeros and negative ones numbered above the largest."""
    lines = lines_of(*[([10 + k, 10 + k], [0, 1]) for k in range(5)])
    t = transects_from_lines(lines, np.array([7, 3, 7, 0, -2]), coast_of(EQUATOR), 1e4)
    assert t.transect_id.tolist() == [7, 3, 8, 9, 10]
    assert transects_from_lines(lines, None, coast_of(EQUATOR), 1e4).transect_id.tolist() == [1, 2, 3, 4, 5]
    assert t.is_drawn.all()


def test_drawn_line_with_bends_and_parts_is_one_transect():
    """North for one degree, then east for one: the length is the sum of the legs, nodes at most 10 km apart."""
    bent = shapely.multilinestrings([shapely.linestrings([11, 11], [0, 1]), shapely.linestrings([11, 12], [1, 1])])
    straight = shapely.linestrings([11.5, 11.5], [0, 0.05])
    t = transects_from_lines(np.array([bent, straight], dtype=object), None, coast_of(EQUATOR), 1e4)
    legs_m = distance_bearing([11, 11], [0, 1], [11, 12], [1, 1])[0]
    assert np.nanmax(t.node_m[0]) == pytest.approx(legs_m.sum(), abs=1e-6)
    known = np.isfinite(t.node_m[0])
    assert np.diff(t.node_m[0, known]).max() <= 1e4
    assert [11.0, 1.0] in np.stack([t.node_lon_deg[0], t.node_lat_deg[0]], axis=1).tolist()
    assert t.bearing_deg[0] == pytest.approx(0.0, abs=1e-6)
    assert np.isfinite(t.node_m[1]).sum() == 2
    assert np.isnan(t.node_lon_deg[1, 2:]).all()


def test_drawn_line_over_the_date_line_does_not_jump():
    t = transects_from_lines(lines_of(([179.5, -179.5], [0, 0])), None, coast_of(EQUATOR), 1e4)
    assert np.diff(t.node_lon_deg[0]).max() < 0.1
    assert np.nanmax(t.node_m) == pytest.approx(DEGREE_M, abs=1e-3)


def test_drawn_lines_stand_for_the_coast_halfway_to_their_neighbours():
    """Stations 11.0, 11.1 and 11.9 E and one away: 11.13 km apart, then 89 km, at most half of 50 km each way."""
    lines = lines_of(*[([lon, lon], [0.01, 1]) for lon in (11.9, 11.1, 11.0, 15.0)])
    t = transects_from_lines(lines, None, coast_of(EQUATOR), 5e4)
    assert t.coast_part.tolist() == [1, 1, 1, 0]
    np.testing.assert_allclose(t.coast_m[:3], np.array([0.1, 0.9, 1.0]) * DEGREE_M, atol=1.0)
    np.testing.assert_allclose(t.piece_stop_m[1], 0.95 * DEGREE_M, atol=1.0)
    np.testing.assert_allclose(t.piece_start_m[2], 0.95 * DEGREE_M, atol=1.0)
    np.testing.assert_allclose(t.piece_start_m[1], 0.9 * DEGREE_M - 25e3, atol=1.0)
    assert np.isnan([t.coast_m[3], t.piece_start_m[3], t.piece_stop_m[3]]).all()
    coast = coast_of(EQUATOR)
    pieces = coast_pieces(coast, t)
    assert pieces[3] is None
    # the first would begin 14 km before the coast does
    np.testing.assert_allclose(shapely.get_coordinates(pieces[0])[0], [12.0, 0.0], atol=1e-9)


def test_drawn_lines_attach_to_the_nearest_coast_within_reach():
    """Also where its longitudes are a turn away."""
    coast = coast_of(EQUATOR, MERIDIAN, ([190, 189], [50, 50]))
    lines = lines_of(
        ([20.05, 21], [0.5, 0.5]), ([11.5, 11.5], [0.05, 1]), ([-170.5, -170.5], [50.05, 51]), ([11.5, 11.5], [0.2, 1])
    )
    t = transects_from_lines(lines, None, coast, 1e4)
    assert t.coast_part.tolist() == [coast_number(coast, lon) for lon in (20.0, 11.0, 189.5)] + [0]


def coast_number(coast, lon_deg):
    return 1 + [line.lon_deg.min() <= lon_deg <= line.lon_deg.max() for line in coast.lines].index(True)


def slow_nearest(coast, lon_deg, lat_deg):
    """Nearest of very many points on each line."""
    best = (np.inf, 0, np.nan)
    for number, line in enumerate(coast.lines, start=1):
        at_m = np.linspace(0, line.length_m, 4001)
        away_m, _ = distance_bearing(
            np.interp(at_m, line.along_m, line.lon_deg), np.interp(at_m, line.along_m, line.lat_deg), lon_deg, lat_deg
        )
        best = min(best, (away_m.min(), number, at_m[away_m.argmin()]))
    return best


@settings(max_examples=50)
@given(st.floats(10.0, 12.0), st.floats(59.0, 61.0))
def test_nearest_coast_equals_a_search_of_points(lon_deg, lat_deg):
    """At 60 N, to 60 m: points are 30 m apart, legs of 30 km bend by 20 m against straight ones."""
    coast = coast_of(([10, 10.5, 11.2, 12], [59.5, 60.2, 59.8, 60.4]), ([12, 11, 10], [59.2, 59.4, 59.1]))
    t = transects_from_lines(lines_of(([lon_deg, lon_deg], [lat_deg, lat_deg + 1])), None, coast, 2e5)
    line = coast.lines[t.coast_part[0] - 1]
    on = np.interp(t.coast_m[0], line.along_m, line.lon_deg), np.interp(t.coast_m[0], line.along_m, line.lat_deg)
    away_m, _ = distance_bearing(*on, lon_deg, lat_deg)
    assert away_m <= slow_nearest(coast, lon_deg, lat_deg)[0] + 60.0


def test_file_without_lines_is_refused():
    nothing = np.array([shapely.points(1, 2), shapely.linestrings([[1, 1], [1, 1]])], dtype=object)
    with pytest.raises(TransectError, match="holds no line with a length; draw each from the shore seaward"):
        transects_from_lines(nothing, None, coast_of(EQUATOR), 1e4)


# ---- crossing


def test_crossing_transects_of_one_coast_are_both_flagged():
    start = np.array([[0, 0], [1, 0], [2, 0], [3, 0]], dtype=float)
    end = np.array([[1.5, 1], [0.5, 1], [2, 1], [np.nan, np.nan]])
    assert crossing_transects(start, end, np.ones(4, dtype=np.int64)).tolist() == [True, True, False, False]
    assert not crossing_transects(start, end, np.arange(4)).any()


@pytest.mark.parametrize("n", [0, 1])
def test_nothing_crosses_alone(n):
    assert crossing_transects(np.zeros((n, 2)), np.ones((n, 2)), np.ones(n, dtype=np.int64)).tolist() == [False] * n
