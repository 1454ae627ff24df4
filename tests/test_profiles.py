"""Profiles: depths against a slow twin, and every way a profile starts, is mended and ends."""

from dataclasses import replace

import numpy as np
import pytest
import shapely
from hypothesis import given
from hypothesis import strategies as st
from utils_geometry import EMPTY, GEOD, lay, open_up, scene, slow_depth

from shelfmap._kernels.tracing import despike, mend_gaps
from shelfmap.coast import Coast
from shelfmap.geodesy import distance_bearing
from shelfmap.profiles import END_REASONS, START_REASONS, distance_along, place_on, sample_profiles, step_of
from shelfmap.response import Friction, wave_response
from shelfmap.settings import CoastSettings, TransectSettings
from shelfmap.synthetic import SyntheticGrid, step_profile, straight_coast
from shelfmap.transects import transects_from_lines

HAIR = 1e-6
NO_COAST = Coast(lines=(), islets=EMPTY, source="none")
M2_RAD_S = np.radians(28.9841042) / 3600


def strip(depths_m, step=1000.0):
    """Grid whose depth depends on the column only: a profile eastward is the list of depths."""
    depth = np.tile(np.asarray(depths_m, dtype=np.float32), (9, 1))
    return SyntheticGrid(
        elevation_m=-depth, x0=5e5, y0=0.0, dx=step, dy=step, crs="EPSG:32631", description="strip"
    )  # fmt: skip


def traced(path, *, start_col=0.0, seek_m=1e9, length_cols=None, islets=EMPTY, back_cols=0.0):
    """Profile along the middle row of a strip, one sample a column (UTM scale 0.9996 taken into account)."""
    source = open_up(path)
    stop = source.n_cols - 1 if length_cols is None else start_col + length_cols
    lon, lat = source.lonlat_of(np.array([start_col, stop]), np.array([4.0, 4.0]))
    line = np.array([shapely.linestrings(lon, lat)], dtype=object)
    transects = transects_from_lines(line, None, NO_COAST, 1e4)
    step_m = distance_bearing(lon[0], lat[0], lon[1], lat[1])[0] / (stop - start_col) * (1 - 1e-9)
    transects = replace(transects, is_drawn=np.zeros(1, dtype=bool), node_m=transects.node_m - back_cols * step_m)
    return sample_profiles(source, transects, float(step_m), seek_m=seek_m, islets=islets)


def reasons(p):
    return START_REASONS[p.start_reason[0]], END_REASONS[p.end_reason[0]]


WET = [50.0] * 30


def test_depths_equal_a_slow_twin_along_the_geodesic(write_grid):
    """To 2 mm: chords between nodes 10 km apart leave the geodesic by up to 4 m at 60 N, over a bed of slope 1:2000."""
    rng = np.random.default_rng(3)
    rows, cols = np.mgrid[0:61, 0:61]
    bed = 500 + 10 * np.sin(rows / 20.0) + 10 * np.cos(cols / 17.0) + rng.normal(0, 0.01, (61, 61))
    grid = SyntheticGrid(
        elevation_m=-bed.astype(np.float32), x0=10.0, y0=58.5, dx=0.05, dy=0.05, crs="EPSG:4326", description="bed"
    )
    source = open_up(write_grid(grid))
    line = np.array([shapely.linestrings([10.4, 12.6], [59.1, 60.9])], dtype=object)
    transects = transects_from_lines(line, None, NO_COAST, 1e4)
    p = sample_profiles(source, transects, 2500.0, seek_m=0.0, islets=EMPTY)
    assert reasons(p) == ("open_water", "search_length")
    azimuth, _, length_m = GEOD.inv(10.4, 59.1, 12.6, 60.9)
    assert p.n_samples[0] == int(length_m // 2500) + 1
    for j in range(p.n_samples[0]):
        lon, lat, _ = GEOD.fwd(10.4, 59.1, azimuth, j * 2500.0)
        expected = slow_depth(grid.elevation_m, (lon - 10.0) / 0.05, (lat - 58.5) / 0.05)
        assert p.depth_m[0, j] == pytest.approx(expected, abs=2e-3 + 4 / 2000)


def test_shore_lies_at_the_crossing_within_a_cell(write_grid):
    """Elevation 10, then depth 30: a quarter of a cell on, to 1e-4 cells (UTM's scale grows by 1e-5)."""
    p = traced(write_grid(strip([-10.0, -10.0, 30.0, *WET])))
    assert reasons(p) == ("shore", "search_length")
    assert p.shore_m[0] / p.step_m == pytest.approx(1.25, abs=1e-4)
    assert p.depth_m[0, 0] == 0.0
    assert p.depth_m[0, 1] == pytest.approx(30 + 0.25 * 20, abs=1e-2)


def test_station_in_water_finds_the_shore_behind_it(write_grid):
    """Three columns off, with four to look back over; without, it starts in open water."""
    path = write_grid(strip([-10.0, -10.0, 10.0, *WET]))
    back = traced(path, back_cols=4.0)
    assert START_REASONS[back.start_reason[0]] == "shore"
    assert back.shore_m[0] / back.step_m == pytest.approx(1.5 - 4.0, abs=1e-4)
    assert START_REASONS[traced(path, start_col=4.0).start_reason[0]] == "open_water"


@pytest.mark.parametrize("ratio", [1.0, 40.0])
def test_shore_is_found_however_coarse_the_step(write_grid, ratio):
    """Looks are at most a quarter of the reach: a step forty times the reach finds the same shore, to 0.1 mm."""
    source = open_up(write_grid(strip([-10.0, -10.0, 30.0, *WET])))
    lon, lat = source.lonlat_of(np.array([0.5, 30.0]), np.array([4.0, 4.0]))
    transects = transects_from_lines(np.array([shapely.linestrings(lon, lat)], dtype=object), None, NO_COAST, 1e4)
    transects = replace(transects, is_drawn=np.zeros(1, dtype=bool))
    p = sample_profiles(source, transects, 100.0 * ratio, seek_m=1500.0, islets=EMPTY)
    assert p.shore_m[0] == pytest.approx(750.0 / 0.9996, abs=0.5)  # UTM scale changes by 4e-7 over the grid


@pytest.mark.parametrize(
    ("depths", "start"),
    [
        ([-5.0] * 40, "not_sea"),
        ([np.nan] * 6 + WET, "void"),
        ([-5.0, -5.0, *[np.nan] * 8, *WET], "void"),
        ([-5.0, -5.0, np.nan, *WET], "shore"),
        ([*[-5.0] * 3, 5.0, *[-5.0] * 3, *WET], "shore"),
    ],
)
def test_how_profiles_start(write_grid, depths, start):
    p = traced(write_grid(strip(depths)), seek_m=2e4)
    assert START_REASONS[p.start_reason[0]] == start
    if start != "shore":
        assert p.n_samples[0] == 0
        assert p.end_reason[0] == -1
        assert np.isnan(p.shore_m[0])


def test_pool_behind_the_shore_does_not_count(write_grid):
    """One wet column, three dry ones, the sea: the shore is that of the sea, half a cell before column 7."""
    p = traced(write_grid(strip([*[-5.0] * 3, 5.0, *[-50.0] * 3, *WET])))
    assert p.shore_m[0] / p.step_m == pytest.approx(6.5, abs=1e-4)


def test_water_is_sought_only_so_far(write_grid):
    path = write_grid(strip([*[-5.0] * 10, *WET]))
    assert START_REASONS[traced(path, seek_m=8000.0).start_reason[0]] == "not_sea"
    assert START_REASONS[traced(path, seek_m=12000.0).start_reason[0]] == "shore"


def test_start_outside_the_grid_and_end_at_its_edge(write_grid):
    path = write_grid(strip([-50.0, *WET]))
    assert START_REASONS[traced(path, start_col=-5.0).start_reason[0]] == "edge_of_grid"
    beyond = traced(path, length_cols=60.0)
    assert reasons(beyond) == ("shore", "edge_of_grid")
    assert beyond.n_samples[0] == 30


def test_land_to_the_edge_of_the_grid_is_not_called_a_lake(write_grid):
    p = traced(write_grid(strip([-5.0] * 20)), length_cols=40.0)
    assert START_REASONS[p.start_reason[0]] == "edge_of_grid"


@pytest.mark.parametrize(
    ("dry", "end", "bridged"), [(1, "search_length", 1), (2, "search_length", 2), (3, "facing_land", 0)]
)
def test_land_of_two_samples_is_bridged_and_three_end_a_profile(write_grid, dry, end, bridged):
    """Samples stand five sixths beyond a column, so that a run of dry columns is a run of as many dry samples."""
    p = traced(write_grid(strip([-250.0, *WET[:10], *[-50.0] * dry, *WET])))
    assert reasons(p)[1] == end
    assert p.n_bridged[0] == bridged == p.is_filled[0].sum()
    if bridged:
        assert np.nanmin(p.depth_m[0, 1:]) > 0


def test_land_of_an_islet_is_an_island(write_grid):
    """Even where the islet's longitudes are a turn away."""
    path = write_grid(strip([-50.0, *WET[:10], *[-50.0] * 4, *WET]))
    lon, lat = open_up(path).lonlat_of(12.5, 4.0)
    islet = shapely.box(lon - 0.02, lat - 0.02, lon + 0.02, lat + 0.02)
    for turn in (0.0, 360.0):
        islets = np.array([shapely.transform(islet, lambda a, turn=turn: a + np.array([turn, 0.0]))], dtype=object)
        assert reasons(traced(path, islets=islets))[1] == "island"
    away = np.array([shapely.box(lon + 0.1, lat, lon + 0.2, lat + 0.1)], dtype=object)
    assert reasons(traced(path, islets=away))[1] == "facing_land"


@pytest.mark.parametrize(("missing", "end"), [(1, "search_length"), (2, "search_length"), (8, "void")])
def test_missing_depth_is_filled_or_ends_a_profile(write_grid, missing, end):
    p = traced(write_grid(strip([-50.0, *WET[:10], *[np.nan] * missing, *WET])))
    assert reasons(p)[1] == end
    assert (p.n_filled[0] > 0) == (end == "search_length")


def test_two_hundredths_of_the_travel_time_may_be_missing():
    """5 samples of 300 at one depth are 1.7 % and filled, 7 are 2.3 % and not; beyond far land nothing counts."""
    for missing, kept in ((5, 300), (7, 100)):
        row = np.full(300, 80.0)
        row[0], row[100 : 100 + missing] = 0.0, np.nan
        n, _, _, bridged, voids = mend_gaps(row, 300, 1000.0, 2, 0.02, HAIR, np.zeros(300, dtype=np.uint8))
        assert (n, bridged) == (kept, 0)
        assert voids == (missing if kept == 300 else 0)
    row = np.full(300, 80.0)
    row[0], row[100:105], row[150:160] = 0.0, np.nan, -5.0
    n, *_ = mend_gaps(row, 300, 1000.0, 2, 0.02, HAIR, np.zeros(300, dtype=np.uint8))
    assert n == 100  # 5 of 145, not of 285


def test_filled_depths_lie_on_the_straight_line():
    row = np.array([0.0, 10.0, np.nan, np.nan, 40.0, 50.0])
    filled = np.zeros(6, dtype=np.uint8)
    mend_gaps(row, 6, 1000.0, 2, 0.02, HAIR, filled)
    np.testing.assert_allclose(row, [0, 10, 20, 30, 40, 50], rtol=1e-15)
    assert filled.tolist() == [0, 0, 1, 1, 0, 0]


def test_spike_goes_and_steep_slope_stays():
    """The spike of 400 m on a shelf of 80 m, not the fall from 80 to 4000 m, and not a pair of deep samples."""
    row = np.array([0, 80, 80, 80, 400, 80, 80, 80, 80, 2000, 4000, 4000, 4000, 4000, 4000.0])
    wanted = row.copy()
    wanted[4] = 80.0
    mended = np.zeros(row.size, dtype=np.uint8)
    assert despike(row, row.size, 10.0, np.empty(row.size), mended) == 1
    np.testing.assert_array_equal(row, wanted)
    assert np.flatnonzero(mended).tolist() == [4]


@given(st.lists(st.floats(0.1, 5000.0), min_size=5, max_size=40))
def test_no_slope_that_only_falls_is_despiked(depths):
    row = np.sort(np.array(depths))
    before = row.copy()
    assert despike(row, row.size, 10.0, np.empty(row.size), np.zeros(row.size, dtype=np.uint8)) == 0
    np.testing.assert_array_equal(row, before)


@pytest.mark.parametrize("most_cells", [1, 2000, 40_000_000])
def test_rows_are_independent(write_grid, monkeypatch, most_cells):
    """Every row bit for bit as alone, whatever is read together; with islets, voids and edges among them."""
    monkeypatch.setattr("shelfmap.profiles.MOST_CELLS", most_cells)
    rng = np.random.default_rng(5)
    holes = rng.random((121, 121)) < 0.01
    path = write_grid(
        scene(lambda x, y: np.where(holes, np.nan, -3 * (y - 10 * np.sin(x / 15)) + 40 * np.cos(x * y / 900)))
    )
    laid = lay(path, spacing_km=10.0)
    assert len(laid.transects) > 10
    for k in range(len(laid.transects)):
        one = sample_profiles(
            laid.source, laid.transects.rows(k, k + 1), laid.profiles.step_m, seek_m=1e4, islets=laid.coast.islets
        )
        n = one.n_samples[0]
        assert n == laid.profiles.n_samples[k]
        assert one.end_reason[0] == laid.profiles.end_reason[k]
        np.testing.assert_array_equal(one.depth_m[0, :n], laid.profiles.depth_m[k, :n])
        assert np.isnan(laid.profiles.depth_m[k, n:]).all()


def test_rows_are_independent_over_the_date_line_of_a_globe(write_grid):
    """Transects on both sides of the seam and across it give the same bits together and alone, and the true depths."""
    lon, lat = np.meshgrid(-179.5 + np.arange(360.0), -89.5 + np.arange(180.0))
    grid = SyntheticGrid(
        elevation_m=(-1000 - 300 * np.cos(np.radians(3 * lon)) * np.cos(np.radians(lat))).astype(np.float32),
        x0=-179.5, y0=-89.5, dx=1.0, dy=1.0, crs="EPSG:4326", description="globe of water",
    )  # fmt: skip
    source = open_up(write_grid(grid))
    lines = [
        shapely.linestrings([a, b], [5.0, 6.0])
        for a, b in ((178, 183), (-178, -183), (10, 15), (357, 362), (-181, -176))
    ]
    transects = transects_from_lines(np.array(lines, dtype=object), None, NO_COAST, 1e4)
    together = sample_profiles(source, transects, 5e4, seek_m=1e4, islets=EMPTY)
    for k in range(len(lines)):
        alone = sample_profiles(source, transects.rows(k, k + 1), 5e4, seek_m=1e4, islets=EMPTY)
        n = alone.n_samples[0]
        assert n > 8
        np.testing.assert_array_equal(alone.depth_m[0, :n], together.depth_m[k, :n])
        at_lon, at_lat = place_on(transects.rows(k, k + 1), np.arange(n)[None, :] * 5e4)
        wanted = 1000 + 300 * np.cos(np.radians(3 * at_lon[0])) * np.cos(np.radians(at_lat[0]))
        assert np.abs(alone.depth_m[0, :n] - wanted).max() < 0.3  # 300 m (3 h)^2 / 8 of a cell of 1 degree: 0.1 m


@pytest.mark.parametrize(("lat", "bearing"), [(0.0, 0.0), (30.0, 90.0), (60.0, 45.0)])
def test_gain_of_a_step_shelf_from_the_grid(write_grid, lat, bearing):
    """M2 gain of 100 m by 200 km beside 4000 m within 1 % of 1 / sqrt(cos^2 kL + (h1/h2) sin^2 kL).

    The step falls between two cells of 2 km: that moves kL by 0.5 % and the gain by 1 % at most.
    """
    crs = f"+proj=laea +lat_0={lat} +lon_0=0 +datum=WGS84 +units=m"
    grid = straight_coast(bearing, lat, step_profile(200e3, 100.0, 4000.0), crs=crs, cell=2000.0, shape=(261, 261))
    laid = lay(write_grid(grid), CoastSettings(smallest_sea_km2=500), spacing_km=20.0, length_km=215.0)
    p = laid.profiles
    rows = np.flatnonzero(p.length_m > 205e3)
    assert len(rows) > 3
    coriolis = 2 * 7.292115e-5 * np.sin(np.radians(p.shore_lat_deg[rows]))
    depth = p.depth_m[rows]
    gain = wave_response(
        p.distance_m, depth, np.full(len(rows), 200e3), np.full(len(rows), 4000.0), coriolis, [M2_RAD_S],
        friction=Friction(linear_m_s=0.0),
    ).gain[:, 0]  # fmt: skip
    k_l = np.sqrt((M2_RAD_S**2 - coriolis**2) / (9.81 * 100)) * 200e3
    assert gain == pytest.approx(1 / np.sqrt(np.cos(k_l) ** 2 + 100 / 4000 * np.sin(k_l) ** 2), rel=0.01)


@given(st.floats(0.0, 1.0), st.floats(-3000.0, 3000.0))
def test_distance_along_is_the_foot_of_a_point(share, off_m):
    """To 10 m at 50 N for points up to 3 km off: legs of 10 km are taken as straight."""
    line = np.array([shapely.linestrings([3.0, 4.5], [50.0, 51.0])], dtype=object)
    transects = transects_from_lines(line, None, NO_COAST, 1e4)
    azimuth, _, length_m = GEOD.inv(3.0, 50.0, 4.5, 51.0)
    lon, lat, back = GEOD.fwd(3.0, 50.0, azimuth, share * length_m)
    lon, lat, _ = GEOD.fwd(lon, lat, (back + 180 if share > 0 else azimuth) + 90, off_m)
    assert distance_along(transects, 0, lon, lat) == pytest.approx(share * length_m, abs=10.0)


def test_distance_along_ends_at_the_ends():
    line = np.array([shapely.linestrings([3.0, 3.5], [0.0, 0.0])], dtype=object)
    transects = transects_from_lines(line, None, NO_COAST, 1e4)
    assert distance_along(transects, 0, 2.9, 0.01) == 0.0
    assert distance_along(transects, 0, 3.7, 0.01) == pytest.approx(0.5 * 111319.49, abs=0.1)


def test_place_on_gives_no_place_for_no_distance():
    line = np.array([shapely.linestrings([3.0, 3.5], [0.0, 0.0])], dtype=object)
    transects = transects_from_lines(line, None, NO_COAST, 1e4)
    lon, lat = place_on(transects, np.array([[np.nan, 0.0, 1e9]]))
    assert np.isnan([lon[0, 0], lat[0, 0]]).all()
    assert lon[0, 1:].tolist() == [3.0, 3.5]


def test_step_follows_the_grid_the_setting_and_the_limit(write_grid):
    source = open_up(write_grid(strip(WET)))
    assert step_of(source, TransectSettings(length_km=100)) == pytest.approx(1000 / 0.9996, rel=1e-4)
    assert step_of(source, TransectSettings(length_km=100, step_km=2.5)) == 2500.0
    assert step_of(source, TransectSettings(length_km=3000, step_km=0.1)) == 500.0
