"""From a grid and transects to depth profiles, each from the shore seaward."""

from dataclasses import dataclass
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
from shelfmap.transects import Transects

__all__ = ["END_REASONS", "START_REASONS", "Profiles", "distance_along", "place_on", "sample_profiles", "step_of"]

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
    """Sample spacing of a run, metres: as set, else the grid's own step, and never over `MOST_SAMPLES` samples."""
    wanted_m = source.step_m if settings.step_km is None else settings.step_km * 1e3
    return max(wanted_m, settings.length_m / MOST_SAMPLES)


def sample_profiles(
    source: GridSource, transects: Transects, step_m: float, *, seek_m: float, islets: NDArray[np.object_]
) -> Profiles:
    """Sample depths along transects, from the shore to the search length, the grid's edge, land or missing depth.

    Parameters
    ----------
    source : GridSource
        The bathymetry; one window round the transects is read.
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
    col, row = _node_index(source, transects)
    row0, row1, col0, col1 = _window(source, col, row)
    grid = source.read(row0, row1, col0, col1)
    first_col = col0 if source.wraps else grid.col0
    depth_m, filled = np.full((n, m), np.nan), np.zeros((n, m), dtype=np.uint8)
    shore_m, land_m = np.full(n, np.nan), np.full(n, np.nan)
    start, end = np.zeros(n, dtype=np.int64), np.full(n, -1, dtype=np.int64)
    n_samples, counts = np.zeros(n, dtype=np.int64), np.zeros((n, 3), dtype=np.int64)
    tracing.trace_rows(
        grid.depth_m, grid.row0, first_col,
        transects.node_m, row, col, np.isfinite(transects.node_m).sum(axis=1),
        step_m, np.where(transects.is_drawn, np.nanmax(transects.node_m, axis=1) / 2, seek_m),
        SHORT_GAP_SAMPLES, SHORT_GAP_SHARE, LEAST_SPIKE_M, SHORE_HAIR_M,
        depth_m, filled, shore_m, start, n_samples, end, land_m, counts,
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
        Straight between nodes 10 km apart: within 2 cm of the geodesic. Beyond the last node, that node.
    """
    lon_deg, lat_deg = np.full(at_m.shape, np.nan), np.full(at_m.shape, np.nan)
    for k in range(len(transects)):
        known = np.isfinite(transects.node_m[k])
        node_m = transects.node_m[k, known]
        lon_deg[k] = np.interp(at_m[k], node_m, transects.node_lon_deg[k, known])
        lat_deg[k] = np.interp(at_m[k], node_m, transects.node_lat_deg[k, known])
    return lon_deg, lat_deg


def distance_along(transects: Transects, row: int, lon_deg: float, lat_deg: float) -> float:
    """Distance from the station to where a point near a transect projects on it, metres; past its ends, the end."""
    known = np.isfinite(transects.node_m[row])
    node_m = transects.node_m[row, known]
    node_lon, node_lat = transects.node_lon_deg[row, known], transects.node_lat_deg[row, known]
    away_m, _ = distance_bearing(node_lon, node_lat, lon_deg, lat_deg)
    leg_m = np.diff(node_m)
    share = np.clip((away_m[:-1] ** 2 - away_m[1:] ** 2 + leg_m**2) / (2 * leg_m**2), 0.0, 1.0)
    off_m2 = away_m[:-1] ** 2 - 2 * share * leg_m * 0.5 * (away_m[:-1] ** 2 - away_m[1:] ** 2 + leg_m**2) / leg_m
    off_m2 += (share * leg_m) ** 2
    nearest = int(np.argmin(off_m2))
    return float(node_m[nearest] + share[nearest] * leg_m[nearest])


def _node_index(source: GridSource, transects: Transects) -> tuple[FloatArray, FloatArray]:
    """Grid index of every node, columns without jumps where the grid goes round the globe."""
    col, row = source.index_of(transects.node_lon_deg, transects.node_lat_deg)
    if source.wraps:
        first = np.isfinite(col[:, 0])
        col[first] = col[first, :1] + (transects.node_lon_deg[first] - transects.node_lon_deg[first, :1]) / source.dx
        col += source.n_cols * np.round((col[0, 0] - col[:, :1]) / source.n_cols)
    return col, row


def _window(source: GridSource, col: FloatArray, row: FloatArray) -> tuple[int, int, int, int]:
    """Window of the grid (row0, row1, col0, col1) that holds all nodes inside it, with a cell to spare."""
    row0, row1 = int(np.nanmin(row)) - 1, int(np.nanmax(row)) + 3
    col0, col1 = int(np.nanmin(col)) - 1, int(np.nanmax(col)) + 3
    if not source.wraps:
        col0, col1 = min(max(col0, 0), source.n_cols - 2), max(min(col1, source.n_cols), 2)
    return min(max(row0, 0), source.n_rows - 2), max(min(row1, source.n_rows), 2), col0, col1


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
