"""From a grid and transects to depth profiles, each from the shore seaward."""

import math
import warnings
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise
from typing import Final

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap import words
from shelfmap._kernels import tracing
from shelfmap.basins import SHORE_HAIR_M
from shelfmap.geodesy import distance_bearing
from shelfmap.grid import GridSource
from shelfmap.settings import TransectSettings
from shelfmap.sheets import Sheet, boxes_meet
from shelfmap.transects import NODE_M, Transects

__all__ = [
    "END_REASONS",
    "START_REASONS",
    "Profiles",
    "distance_along",
    "lines_along",
    "place_on",
    "sample_profiles",
    "step_of",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Why a profile ends, in the order of the compiled codes; islands are told from other land after the tracing.
END_REASONS: Final = tuple(words.END_REASONS)
#: How a profile starts, in the order of the compiled codes.
START_REASONS: Final = ("shore", "open_water", "not_sea", "edge_of_grid", "void")
#: Land or missing depth of at most this many samples is bridged.
SHORT_GAP_SAMPLES: Final = 2
#: Missing depth of at most this share of the travel time is filled.
SHORT_GAP_SHARE: Final = 0.02
#: A spike smaller than this is left alone, metres.
LEAST_SPIKE_M: Final = 10.0
#: A profile has at most this many samples; a finer grid is sampled more coarsely, and the step says so.
MOST_SAMPLES: Final = 6000
#: Sheets finer than this share of the frame's cells, one part in so many, do not make samples closer.
FINEST_SHARE: Final = 4.0
#: Windows of all sheets of the grid, for as many transects as fit, have at most this many cells together: 160 MB.
MOST_CELLS: Final = 40_000_000

# Which ends of a box (first and last row, first and last column) are the least of their kind.
_IS_LEAST: Final = np.array([True, False, True, False])


@dataclass(frozen=True, slots=True, kw_only=True)
class Profiles:
    """Depth along each transect from its shore, one row a transect."""

    transect_id: IntArray
    """(n,) identity."""
    step_m: float
    """Distance between samples, metres."""
    depth_m: FloatArray
    """(n, m) depth at j * step_m from the shore, positive down; 0 at a shoreline; NaN beyond the end."""
    n_samples: IntArray
    """(n,) samples with a depth."""
    is_filled: BoolArray
    """(n, m) True where a short gap was bridged or filled."""
    start_reason: IntArray
    """(n,) index into START_REASONS."""
    end_reason: IntArray
    """(n,) index into END_REASONS; -1 where there is no profile."""
    shore_m: FloatArray
    """(n,) distance of the shore from the station along the transect, metres, negative landward."""
    shore_lon_deg: FloatArray
    """(n,) longitude of the shore."""
    shore_lat_deg: FloatArray
    """(n,) latitude of the shore."""
    n_bridged: IntArray
    """(n,) land samples bridged."""
    n_filled: IntArray
    """(n,) missing samples filled."""
    n_despiked: IntArray
    """(n,) single-sample spikes replaced."""

    @property
    def distance_m(self) -> FloatArray:
        """(m,) distance of each sample from the shore, metres."""
        return np.asarray(np.arange(self.depth_m.shape[1]) * self.step_m)

    @property
    def length_m(self) -> FloatArray:
        """(n,) length of water sampled, metres; 0 where there is none."""
        return np.asarray(np.maximum(self.n_samples - 1, 0) * self.step_m)


def step_of(source: GridSource, settings: TransectSettings) -> float:
    """Sample spacing of a run, metres: as set, else the grid's own step, and never over `MOST_SAMPLES` samples.

    Of several sheets the finest counts, but down to a quarter of the frame's step only: one spacing serves the whole
    run, and a survey of one harbour may cost a run round a continent four times the samples, not a hundred times.
    """
    finest_m = min(sheet.step_m for sheet in source.sheets)
    wanted_m = settings.step_km * 1e3 if settings.step_km else max(finest_m, source.step_m / FINEST_SHARE)
    return max(wanted_m, settings.length_m / MOST_SAMPLES)


def sample_profiles(
    source: GridSource, transects: Transects, step_m: float, *, seek_m: float, islets: NDArray[np.object_]
) -> Profiles:
    """Sample depths along transects, from the shore to the search length, the grid's edge, land or missing depth.

    Parameters
    ----------
    source : GridSource
        The bathymetry; windows round neighbouring transects are read, one at a time.
    transects : Transects
        Lines to sample.
    step_m : float
        Sample spacing, metres.
    seek_m : float
        How far seaward of a station on land water is sought, metres; lines drawn by hand are searched to half their
        length.
    islets : array of shapely polygons
        Land (lon, lat) that a profile ends at as an island, not as facing land.

    Returns
    -------
    Profiles
        Runs of land or missing depth of at most two samples are bridged by straight lines, and missing depth of at
        most 2 % of the travel time; single-sample spikes are replaced by the running median of five. All counted.
    """
    n = len(transects)
    m = int((np.nanmax(transects.node_m) - np.nanmin(transects.node_m)) / step_m) + 2
    seek_row_m = np.where(transects.is_drawn, np.nanmax(transects.node_m, axis=1) / 2, seek_m)
    n_nodes = np.isfinite(transects.node_m).sum(axis=1)
    col, row = _node_index(source, transects)
    depth_m, filled = np.full((n, m), np.nan), np.zeros((n, m), dtype=np.uint8)
    shore_m, land_m = np.full(n, np.nan), np.full(n, np.nan)
    start, end = np.zeros(n, dtype=np.int64), np.full(n, -1, dtype=np.int64)
    n_samples, counts = np.zeros(n, dtype=np.int64), np.zeros((n, 3), dtype=np.int64)
    for first, stop in _groups(source, _boxes(source, col, row)):
        rows = slice(first, stop)
        depth, layout, node = _read_stack(source, transects.node_m[rows], col[rows], row[rows])
        tracing.trace_rows(
            depth, layout, node, n_nodes[rows], step_m, seek_row_m[rows],
            SHORT_GAP_SAMPLES, SHORT_GAP_SHARE, LEAST_SPIKE_M, SHORE_HAIR_M,
            depth_m[rows], filled[rows], shore_m[rows], start[rows], n_samples[rows], end[rows], land_m[rows],
            counts[rows],
        )  # fmt: skip
    shore_m[start > tracing.IN_WATER] = np.nan
    end[_ends_at_islet(transects, end, shore_m + land_m, islets)] = tracing.ISLAND
    shore_lon, shore_lat = place_on(transects, shore_m)
    width = max(1, int(n_samples.max(initial=1)))
    return Profiles(
        transect_id=transects.transect_id,
        step_m=step_m,
        depth_m=depth_m[:, :width].copy(),
        n_samples=n_samples,
        is_filled=filled[:, :width].astype(bool),
        start_reason=start,
        end_reason=end,
        shore_m=shore_m,
        shore_lon_deg=shore_lon,
        shore_lat_deg=shore_lat,
        n_bridged=counts[:, 0],
        n_filled=counts[:, 1],
        n_despiked=counts[:, 2],
    )


def place_on(transects: Transects, at_m: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Places on transects at distances from their stations.

    Parameters
    ----------
    transects : Transects
        The lines, n of them.
    at_m : (n,) or (n, m) array of float
        Distances from the station, metres; NaN gives NaN.

    Returns
    -------
    lon_deg, lat_deg : array of float, like `at_m`
        Straight between nodes, see `shelfmap.transects.NODE_M`. Beyond the last node, that node.
    """
    lon_deg, lat_deg = np.full(at_m.shape, np.nan), np.full(at_m.shape, np.nan)
    for k in range(len(transects)):
        known = np.isfinite(transects.node_m[k])
        node_m = transects.node_m[k, known]
        lon_deg[k] = np.interp(at_m[k], node_m, transects.node_lon_deg[k, known])
        lat_deg[k] = np.interp(at_m[k], node_m, transects.node_lat_deg[k, known])
    return lon_deg, lat_deg


def lines_along(transects: Transects, start_m: FloatArray, stop_m: FloatArray) -> NDArray[np.object_]:
    """Lines on transects between two distances from their stations, with nodes `NODE_M` apart at most.

    Parameters
    ----------
    transects : Transects
        The lines, n of them.
    start_m, stop_m : (n,) array of float
        Distances from the station, metres.

    Returns
    -------
    (n,) array of shapely lines
        Longitude and latitude, degrees, longitudes without jumps.
    """
    n_nodes = np.maximum(np.ceil((stop_m - start_m) / NODE_M).astype(int), 1) + 1
    lon_deg, lat_deg = [], []
    for k in range(len(transects)):
        known = np.isfinite(transects.node_m[k])
        node_m = transects.node_m[k, known]
        at_m = np.linspace(start_m[k], stop_m[k], n_nodes[k])
        lon_deg.append(np.interp(at_m, node_m, transects.node_lon_deg[k, known]))
        lat_deg.append(np.interp(at_m, node_m, transects.node_lat_deg[k, known]))
    lines: NDArray[np.object_] = shapely.linestrings(
        np.concatenate(lon_deg), np.concatenate(lat_deg), indices=np.repeat(np.arange(len(transects)), n_nodes)
    )
    return lines


def distance_along(transects: Transects, row: int, lon_deg: float, lat_deg: float) -> float:
    """Distance from the station to where a point near a transect projects on it.

    Parameters
    ----------
    transects : Transects
        The lines.
    row : int
        Which of them.
    lon_deg, lat_deg : float
        The point.

    Returns
    -------
    float
        Metres; for a point past an end of the transect, that end. Legs of 10 km count as plane triangles.
    """
    known = np.isfinite(transects.node_m[row])
    node_m = transects.node_m[row, known]
    node_lon, node_lat = transects.node_lon_deg[row, known], transects.node_lat_deg[row, known]
    away_m, _ = distance_bearing(node_lon, node_lat, lon_deg, lat_deg)
    leg_m = np.diff(node_m)
    ahead = away_m[:-1] ** 2 - away_m[1:] ** 2 + leg_m**2  # law of cosines in the triangle of point and leg
    share = np.clip(ahead / (2 * leg_m**2), 0.0, 1.0)
    nearest = int(np.argmin(away_m[:-1] ** 2 - share * ahead + (share * leg_m) ** 2))
    return float(node_m[nearest] + share[nearest] * leg_m[nearest])


def _node_index(source: GridSource, transects: Transects) -> tuple[FloatArray, FloatArray]:
    """(n, s, k) index of every node on every sheet, without jumps along a transect; NaN on sheets it does not meet."""
    n, k = transects.node_m.shape
    col, row = np.full((2, n, len(source.sheets), k), np.nan)
    for number, sheet in enumerate(source.sheets):
        near = np.ones(n, dtype=bool) if sheet is source.sheets[-1] else _near(sheet, transects)
        if not near.any():
            continue
        lon_deg, lat_deg = transects.node_lon_deg[near], transects.node_lat_deg[near]
        col[near, number], row[near, number] = sheet.index_of(lon_deg, lat_deg)
        if sheet.wraps:
            col[near, number] = col[near, number, :1] + (lon_deg - lon_deg[:, :1]) / sheet.dx
        elif sheet.is_geographic:
            turns = np.nan_to_num(np.round(np.diff(col[near, number]) * (sheet.dx / 360.0)))
            col[near, number, 1:] -= np.cumsum(turns, axis=1) * (360.0 / sheet.dx)
    # far from where a projection holds it gives no finite place
    off_map = ~(np.isfinite(col) & np.isfinite(row))
    return np.where(off_map, np.nan, col), np.where(off_map, np.nan, row)


def _near(sheet: Sheet, transects: Transects) -> BoolArray:
    """Which transects have a box that meets a sheet's."""
    lon_deg, lat_deg = transects.node_lon_deg, transects.node_lat_deg
    boxes = np.stack(
        [np.nanmin(lon_deg, axis=1), np.nanmin(lat_deg, axis=1), np.nanmax(lon_deg, axis=1), np.nanmax(lat_deg, axis=1)]
    )
    sheet_box = sheet.box_deg
    return np.array([boxes_meet((west, south, east, north), sheet_box) for west, south, east, north in boxes.T])


def _boxes(source: GridSource, col: FloatArray, row: FloatArray) -> FloatArray:
    """(n, s, 4) first and last row, first and last column that each transect needs of each sheet; NaN for none.

    With a cell to spare, and clipped to the sheet; a sheet that a transect passes by is not needed.
    """
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)  # a transect off the map has no least and no greatest index
        ends = [np.nanmin(row, axis=2), np.nanmax(row, axis=2), np.nanmin(col, axis=2), np.nanmax(col, axis=2)]
    box = np.floor(np.stack(ends, axis=2)) + np.array([-1, 3, -1, 3])
    for number, sheet in enumerate(source.sheets):
        of_sheet = box[:, number]
        beside = (of_sheet[:, 0] >= sheet.n_rows) | (of_sheet[:, 1] <= 0)
        if not sheet.wraps:
            beside |= (of_sheet[:, 2] >= sheet.n_cols) | (of_sheet[:, 3] <= 0)
            of_sheet[:, 2:] = np.clip(of_sheet[:, 2:], 0, sheet.n_cols)
        of_sheet[:, :2] = np.clip(of_sheet[:, :2], 0, sheet.n_rows)
        of_sheet[beside] = np.nan
    return np.asarray(box)


def _groups(source: GridSource, boxes: FloatArray) -> Iterator[tuple[int, int]]:
    """Cut transects into runs of rows whose windows of all sheets together are small enough to read."""
    n_cells = _n_cells(source, boxes)
    first, box, n_read = 0, boxes[0], n_cells[0]
    for k in range(1, len(boxes)):
        wider = np.where(_IS_LEAST, np.fmin(box, boxes[k]), np.fmax(box, boxes[k]))
        n_wider = _n_cells(source, wider)
        # far apart, as on two islands, they are cheaper to read one by one
        if n_wider > min(MOST_CELLS, n_read + n_cells[k]):
            yield first, k
            first, box, n_read = k, boxes[k], n_cells[k]
        else:
            box, n_read = wider, n_wider
    yield first, len(boxes)


def _n_cells(source: GridSource, box: FloatArray) -> FloatArray:
    """(...) cells in boxes (..., s, 4) of the sheets, all sheets together."""
    widest = np.array([sheet.n_cols for sheet in source.sheets])
    rows, cols = box[..., 1] - box[..., 0], np.minimum(box[..., 3] - box[..., 2], widest)
    return np.asarray(np.nansum(rows * cols, axis=-1))


def _read_stack(
    source: GridSource, node_m: FloatArray, col: FloatArray, row: FloatArray
) -> tuple[NDArray[np.float32], IntArray, FloatArray]:
    """Windows of the sheets that a group of transects needs, and nodes on them, as the compiled loops take them.

    A transect whose windows alone are too large is read in runs of its nodes, with windows for each: along a slanting
    line these are as many times smaller as there are runs. See `tracing.Track`.
    """
    n_legs = node_m.shape[1] - 1
    n_runs = max(1, min(math.ceil(_n_cells(source, _joined(_boxes(source, col, row))) / MOST_CELLS), n_legs))
    edges = np.linspace(0, n_legs, n_runs + 1).astype(int).tolist()
    runs = [slice(begin, end + 1) for begin, end in pairwise(edges)]
    boxes = [_joined(_boxes(source, col[:, :, run], row[:, :, run])) for run in runs]
    grids, nodes = [], [node_m]
    for number, sheet in enumerate(source.sheets):
        for run, box in zip(runs, boxes, strict=True):
            if np.isfinite(box[number]).all():
                grids.append(sheet.read(*box[number].astype(int).tolist()))
                for index in (row, col):
                    nodes.append(np.full(node_m.shape, np.nan))
                    nodes[-1][:, run] = index[:, number, run]
    if not grids:  # all of them off the grid: any window tells
        grids, nodes = [source.sheets[-1].read(0, 2, 0, 2)], [node_m, row[:, -1], col[:, -1]]
    begins = np.cumsum([0] + [grid.depth_m.size for grid in grids])
    layout = [
        (begin, *grid.depth_m.shape, grid.row0, grid.col0, grid.wrap_cols)
        for begin, grid in zip(begins, grids, strict=False)
    ]
    depth = grids[0].depth_m.ravel() if len(grids) == 1 else np.concatenate([grid.depth_m.ravel() for grid in grids])
    depth.setflags(write=False)  # one type for the loops, so that they are compiled once
    return depth, np.array(layout, dtype=np.int64), np.stack(nodes, axis=1)


def _joined(boxes: FloatArray) -> FloatArray:
    """(s, 4) least and greatest row, least and greatest column of the boxes of n transects on each sheet."""
    least: FloatArray = np.fmin.reduce(boxes)
    greatest: FloatArray = np.fmax.reduce(boxes)
    return np.where(_IS_LEAST, least, greatest)


def _ends_at_islet(transects: Transects, end: IntArray, land_m: FloatArray, islets: NDArray[np.object_]) -> BoolArray:
    """Whether the land each profile ends at is one of the islets."""
    hit = np.zeros(len(end), dtype=bool)
    at_land = np.flatnonzero(end == tracing.LAND)
    if not len(at_land) or not len(islets):
        return hit
    lon_deg, lat_deg = place_on(transects, land_m)
    tree = shapely.STRtree(islets)
    for turn in (0.0, 360.0, -360.0):
        points = shapely.points(lon_deg[at_land] + turn, lat_deg[at_land])
        hit[at_land[np.unique(tree.query(points, predicate="intersects")[0])]] = True
    return hit
