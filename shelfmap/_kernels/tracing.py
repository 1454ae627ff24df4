"""Compiled loops of the profiles: find the shore on a transect, sample seaward, mend spikes and short gaps."""

from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from shelfmap._kernels.sampling import bilinear_cell, locate
from shelfmap.constants import GRAVITY_M_S2

F64 = NDArray[np.float64]
F32 = NDArray[np.float32]
I64 = NDArray[np.int64]
U8 = NDArray[np.uint8]

#: Why a profile ends, in the order of `shelfmap.words.END_REASONS`. The loops here know land, not islands.
LENGTH, GRID_EDGE, LAND, ISLAND, VOID = 0, 1, 2, 3, 4
#: How a profile starts: at a shoreline, in open water, or not at all.
AT_SHORE, IN_WATER, NO_WATER, START_OUTSIDE, START_VOID = 0, 1, 2, 3, 4

_OUTSIDE = -1.0e30


class Track(NamedTuple):
    """A transect on windows of sheets, those that give depths first in front; a sheet may have several windows."""

    depth_m: F32
    """Windows one after the other, row by row; NaN void."""
    layout: I64
    """(s, 6) of each window: where it begins in `depth_m`, its rows and columns, the row and the column of the sheet
    that it begins with, columns of the sheet round the globe (0 where it does not close)."""
    node: F64
    """(1 + 2 s, k) distance of each node from the station, metres, rising; then its row and its column on the sheet of
    each window, NaN where that is far."""


@njit(cache=True)
def _depth_at(track: Track, at_m: float) -> float:
    """Depth on a transect at a distance from its station, from the first sheet that has one there.

    NaN where one or more sheets lie there but none has a depth; `_OUTSIDE` beyond all sheets or the transect.
    """
    node, n = track.node, track.node.shape[1]
    if at_m < node[0, 0] or at_m > node[0, n - 1]:
        return _OUTSIDE
    low, high = 0, n - 1
    while high - low > 1:
        middle = (low + high) // 2
        if node[0, middle] <= at_m:
            low = middle
        else:
            high = middle
    part = (at_m - node[0, low]) / (node[0, high] - node[0, low])
    nothing = _OUTSIDE
    for sheet in range(track.layout.shape[0]):
        begin, n_rows, n_cols = track.layout[sheet, 0], track.layout[sheet, 1], track.layout[sheet, 2]
        k = 1 + 2 * sheet
        row = node[k, low] + part * (node[k, high] - node[k, low])
        col = node[k + 1, low] + part * (node[k + 1, high] - node[k + 1, low])
        i, up = locate(row, track.layout[sheet, 3], n_rows, 0)
        j, right = locate(col, track.layout[sheet, 4], n_cols, track.layout[sheet, 5])
        if i < 0 or j < 0:
            continue
        next_col = j + 1 if j + 1 < n_cols else 0  # on the last column it weighs nothing, or the grid closes
        south, north = begin + i * n_cols, begin + min(i + 1, n_rows - 1) * n_cols
        d = float(bilinear_cell(track.depth_m, south, north, j, next_col, up, right))
        if not np.isnan(d):
            return d
        nothing = np.nan
    return nothing


@njit(cache=True)
def _bisect(track: Track, dry_m: float, wet_m: float, hair_m: float) -> float:
    """Where the water begins between a dry and a wet place, to a hundredth of a millimetre."""
    for _ in range(60):
        middle = 0.5 * (dry_m + wet_m)
        d = _depth_at(track, middle)
        if d > hair_m:
            wet_m = middle
        else:
            dry_m = middle
        if abs(wet_m - dry_m) < 1e-5:
            break
    return wet_m


@njit(cache=True)
def seek_landward(track: Track, look_m: float, hair_m: float) -> tuple[float, int]:
    """Where the shore lies behind a station in the water; the station itself where the transect meets none."""
    look_m = min(
        look_m, -0.25 * track.node[0, 0]
    )  # looks, however coarse the grid; none where the transect starts here
    at_m = -look_m
    while look_m > 0.0 and at_m >= track.node[0, 0]:
        d = _depth_at(track, at_m)
        if d == _OUTSIDE or np.isnan(d):
            break
        if d <= hair_m:
            return _bisect(track, at_m, at_m + look_m, hair_m), AT_SHORE
        at_m -= look_m
    return 0.0, IN_WATER


@njit(cache=True)
def seek_seaward(track: Track, seek_m: float, look_m: float, short: int, hair_m: float) -> tuple[float, int]:
    """Where the water begins before a station on land, within `seek_m`.

    A pool of fewer than four looks of `look_m` does not count where more water follows. Where depth is missing between
    the last dry look and the water, that look is the shore if at most `short` samples of two looks are missing; else
    the transect starts in a void.
    """
    look_m = min(look_m, 0.25 * seek_m)  # looks, however coarse the grid
    found_m, shore_dry_m, dry_m, wet_run, reason = 0.0, 0.0, 0.0, 0, NO_WATER
    at_m = look_m
    while at_m <= seek_m and wet_run < 4:
        d = _depth_at(track, at_m)
        if d == _OUTSIDE:
            reason = AT_SHORE if reason == AT_SHORE else START_OUTSIDE
            break
        if d > hair_m:
            if wet_run == 0:
                found_m, shore_dry_m = at_m, dry_m
            wet_run += 1
            reason = AT_SHORE
        elif d <= hair_m:
            wet_run, dry_m = 0, at_m
            reason = AT_SHORE if reason == AT_SHORE else NO_WATER
        elif reason == NO_WATER:
            reason = START_VOID
        at_m += look_m
    if reason != AT_SHORE:
        return 0.0, reason
    missing_m = found_m - shore_dry_m - look_m
    if missing_m < 0.5 * look_m:
        return _bisect(track, shore_dry_m, found_m, hair_m), AT_SHORE
    if missing_m < (2 * short + 0.5) * look_m:
        return shore_dry_m, AT_SHORE
    return 0.0, START_VOID


@njit(cache=True)
def find_shore(track: Track, seek_m: float, look_m: float, short: int, hair_m: float) -> tuple[float, int]:
    """Where on a transect its water begins (distance from the station), and how it starts."""
    here = _depth_at(track, 0.0)
    if here == _OUTSIDE:
        return 0.0, START_OUTSIDE
    if np.isnan(here):
        return 0.0, START_VOID
    if here > hair_m:
        return seek_landward(track, look_m, hair_m)
    return seek_seaward(track, seek_m, look_m, short, hair_m)


@njit(cache=True)
def sample_seaward(track: Track, shore_m: float, at_shore: bool, step_m: float, out: F64) -> tuple[int, int]:
    """Depths every `step_m` from the shore; how many lie on the transect and in the grid, and why they stop."""
    last_m = track.node[0, track.node.shape[1] - 1]
    last_m = min(last_m, shore_m + last_m)  # a shore landward of the station makes no transect longer
    for j in range(out.shape[0]):
        at_m = shore_m + j * step_m
        if at_m > last_m:
            return j, LENGTH
        d = _depth_at(track, at_m)
        if d == _OUTSIDE:
            return j, GRID_EDGE
        out[j] = d
        if j == 0 and at_shore:
            out[0] = 0.0
    return out.shape[0], LENGTH


@njit(cache=True)
def median_of_five(row: F64, first: int) -> float:
    """Median of five neighbours, all of them water; NaN else. By hand: np.sort alone takes 8 s to compile."""
    median = np.nan
    for i in range(first, first + 5):
        if not row[i] > 0.0:
            return np.nan
        below, equal = 0, 0
        for j in range(first, first + 5):
            below += row[j] < row[i]
            equal += row[j] == row[i]
        if below <= 2 < below + equal:
            median = row[i]
    return float(median)


@njit(cache=True)
def despike(row: F64, n: int, least_m: float, work: F64, mended: U8) -> int:
    """Replace single deep or shallow samples by the running median of five; return how many.

    A sample counts where it is more than twice, or less than half, the median of itself and its two neighbours on
    each side, and differs from it by more than `least_m`. A slope, however steep, is its own median and stays.
    """
    count = 0
    for j in range(n):
        work[j] = row[j]
    for j in range(2, n - 2):
        median = median_of_five(work, j - 2)
        if median > 0.0 and abs(work[j] - median) > least_m and not 0.5 * median <= work[j] <= 2.0 * median:
            row[j] = median
            mended[j] = 1
            count += 1
    return count


@njit(cache=True)
def mend_gaps(
    row: F64, n: int, step_m: float, short: int, share: float, hair_m: float, filled: U8
) -> tuple[int, int, float, int, int]:
    """Bridge short runs of land and fill short voids; stop at the first longer one.

    Land of at most `short` samples, and missing depth of at most `short` samples or of at most `share` of the
    travel time up to the first longer land, are replaced by straight lines between the water on both sides and marked
    in `filled`.
    Returns the samples kept, the reason they end (-1: the whole profile is kept), the middle of the land it ends at
    (metres from the shore), and how many samples were bridged and filled.
    """
    bridged, voids, dry_run, whole_tau = 0, 0, 0, 0.0
    for j in range(1, n):
        if row[j] > hair_m:
            whole_tau += step_m / np.sqrt(GRAVITY_M_S2 * row[j])
        dry_run = dry_run + 1 if row[j] <= hair_m else 0
        if dry_run > short:
            break
    j = 1
    while j < n:
        if row[j] > hair_m:
            j += 1
            continue
        stop, has_land = j, False
        while stop < n and not row[stop] > hair_m:
            has_land = has_land or row[stop] <= hair_m
            stop += 1
        run = stop - j
        fits = stop < n and run <= short
        if not fits and stop < n and not has_land:
            mean = 0.5 * (max(row[j - 1], 1.0) + row[stop])
            fits = run * step_m / np.sqrt(GRAVITY_M_S2 * mean) <= share * whole_tau
        if not fits or (j == 1 and row[0] <= hair_m and has_land):
            return j, (LAND if has_land else VOID), (j + 0.5 * (run - 1)) * step_m, bridged, voids
        for i in range(j, stop):
            part = (i - j + 1.0) / (run + 1.0)
            row[i] = (1.0 - part) * row[j - 1] + part * row[stop]
            filled[i] = 1
        if has_land:
            bridged += run
        else:
            voids += run
        j = stop
    return n, -1, np.nan, bridged, voids


@njit(cache=True)
def trace_rows(
    depth: F32,
    layout: I64,
    node: F64,
    n_nodes: I64,
    step_m: float,
    seek_m: F64,
    short: int,
    share: float,
    least_spike_m: float,
    hair_m: float,
    out_depth_m: F64,
    out_filled: U8,
    out_shore_m: F64,
    out_start: I64,
    out_n: I64,
    out_end: I64,
    out_land_m: F64,
    out_counts: I64,
) -> None:
    """Trace every transect on windows of sheets, see `Track`; rows are independent of each other.

    `node` is (n, 1 + 2 s, k), of which the first `n_nodes` of each transect count.
    `out_counts` holds bridged, filled and despiked samples by row; `out_land_m` the middle of the land a profile ends
    at, metres from the shore.
    """
    work = np.empty(out_depth_m.shape[1])
    for k in range(node.shape[0]):
        track = Track(depth, layout, node[k, :, : n_nodes[k]])
        shore_m, start = find_shore(track, seek_m[k], 0.5 * step_m, short, hair_m)
        out_shore_m[k], out_start[k] = shore_m, start
        if start > IN_WATER:
            continue
        row = out_depth_m[k]
        n, end = sample_seaward(track, shore_m, start == AT_SHORE, step_m, row)
        n_kept, reason, land_m, bridged, voids = mend_gaps(row, n, step_m, short, share, hair_m, out_filled[k])
        if reason >= 0:
            end = reason
            row[n_kept:] = np.nan
        out_counts[k, 2] = despike(row, n_kept, least_spike_m, work, out_filled[k])
        out_n[k], out_end[k], out_land_m[k] = n_kept, end, land_m
        out_counts[k, 0], out_counts[k, 1] = bridged, voids
