"""What came of each transect: its status, its remarks, and how far its index can be trusted."""

from collections.abc import Iterator
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from shelfmap.index import Q_STOPPED
from shelfmap.profiles import END_REASONS, START_REASONS, Profiles
from shelfmap.shelfbreak import ShelfBreaks

__all__ = ["LEAST_SAMPLES", "Doubt", "confidences", "doubts", "neighbour_doubts", "sills", "statuses", "usable"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
TextArray = NDArray[np.object_]

#: A profile needs this many samples, the shore among them.
LEAST_SAMPLES: Final = 4

#: Limits of the doubts, each said in its remark.
LEAST_FOUND_SHARE: Final = 0.6
WIDEST_SPREAD: Final = 0.3
CLEAR_CONTRAST: Final = 3.0
FEWEST_SHELF_SAMPLES: Final = 4.0
HEAVIEST_CELL: Final = 0.05
LARGEST_PERIOD_ERROR: Final = 0.15
LARGEST_WIDTH_CHANGE: Final = 1.5
#: A basin this many times deeper than a sill seaward of it answers in its own way; this many times, it is shut off.
SILL_RATIO: Final = 4.0
SHUT_OFF_RATIO: Final = 16.0
#: Water shallower than this, behind a bar, is no basin, metres.
LEAST_BASIN_M: Final = 20.0

#: A remark on some transects that lowers their confidence: what to say, where.
Doubt = tuple[TextArray, BoolArray]


def statuses(profiles: Profiles, breaks: ShelfBreaks, ocean_m: float) -> TextArray:
    """One word for each transect: whether its results hold and, if not, why.

    Parameters
    ----------
    profiles, breaks
        Results of the stages, n transects.
    ocean_m : float
        A transect that gets this deep has reached the open ocean, metres: land, the grid's edge or missing depth
        beyond count no more. A sill 16 times shallower than a basin behind it counts as land.

    Returns
    -------
    (n,) array of str
        Keys of `shelfmap.words.STATUSES`.
    """
    n = len(profiles.n_samples)
    out = np.full(n, "ok", dtype=object)
    with np.errstate(invalid="ignore"):
        reached_ocean = np.fmax.reduce(profiles.depth_m, axis=1, initial=0.0) >= ocean_m
    has_break = np.isfinite(breaks.break_m)
    end = np.array([*END_REASONS, ""], dtype=object)[profiles.end_reason]
    out[~has_break] = "no_break"
    closed = np.isin(end, ["facing_land", "island"]) & ~reached_ocean
    cut = ~has_break & ~reached_ocean & np.isin(end, ["edge_of_grid", "void"])
    out[closed | cut] = end[closed | cut]
    basin_m, sill_m = sills(profiles, breaks)
    with np.errstate(invalid="ignore"):
        out[np.isin(out, ["ok", "no_break"]) & (basin_m > SHUT_OFF_RATIO * sill_m)] = "island"
    short = profiles.n_samples < LEAST_SAMPLES
    out[short] = np.where(end[short] == "search_length", "too_short", end[short])
    for reason in ("not_sea", "edge_of_grid", "void"):
        out[profiles.start_reason == START_REASONS.index(reason)] = reason
    return out


def usable(status: TextArray, profiles: Profiles, ocean_m: float) -> BoolArray:
    """Whether gains mean anything: a shelf with a break, or a bed that falls to the open ocean without one."""
    deep = np.fmax.reduce(profiles.depth_m, axis=1, initial=0.0) >= ocean_m
    return np.asarray((status == "ok") | ((status == "no_break") & deep))


def sills(profiles: Profiles, breaks: ShelfBreaks) -> tuple[FloatArray, FloatArray]:
    """The basin on each shelf that is deepest for the sill between it and the break, and that sill.

    Parameters
    ----------
    profiles, breaks
        Results of the stages, n transects.

    Returns
    -------
    basin_m, sill_m : (n,) array of float
        Depths of a sample of at least 20 m, and of one seaward of it but before the break, or before the greatest
        depth where there is no break, whose ratio is largest; equal where the bed only deepens, NaN without a basin.
    """
    deepest = np.argmax(np.nan_to_num(profiles.depth_m, nan=-1.0), axis=1) * profiles.step_m
    end_m = np.where(np.isnan(breaks.break_m), deepest, breaks.break_m)
    on_shelf = profiles.distance_m[None, :] <= end_m[:, None]
    depth_m = np.where(on_shelf & (profiles.depth_m > 0), profiles.depth_m, np.nan)
    basin_m = np.fmax.accumulate(np.where(depth_m >= LEAST_BASIN_M, depth_m, np.nan), axis=1)
    worst = np.argmax(np.nan_to_num(basin_m / depth_m, nan=0.0), axis=1)
    rows = np.arange(len(worst))
    return basin_m[rows, worst], np.where(np.isnan(basin_m[rows, worst]), np.nan, depth_m[rows, worst])


def doubts(
    profiles: Profiles,
    breaks: ShelfBreaks,
    kernel_share: FloatArray,
    period_error: FloatArray,
    damped_q: FloatArray,
) -> Iterator[Doubt]:
    """Go through the reasons in a transect itself to trust its index less, each with the transects it holds for.

    Parameters
    ----------
    profiles, breaks
        Results of the stages, n transects.
    kernel_share : (n,) array of float
        Largest share of one sample in the slowest period.
    period_error : (n,) array of float
        Standard deviation of the slowest period over that period.
    damped_q : (n,) array of float
        Q of the slowest mode with friction.

    Yields
    ------
    remark : (n,) array of str
        What to say.
    holds : (n,) array of bool
        Where.
    """
    width_km, spread_km = breaks.break_m / 1e3, breaks.spread_m / 1e3
    with np.errstate(invalid="ignore"):
        cells = breaks.break_m / profiles.step_m
        yield (
            _said("break found by {:.0%} of the thresholds and smoothings tried", breaks.found_share),
            breaks.found_share < LEAST_FOUND_SHARE,
        )
        yield (
            _said("break moves by {:.1f} km with threshold and smoothing", spread_km),
            spread_km > WIDEST_SPREAD * width_km,
        )
        yield _said("break is faint, contrast {:.1f}", breaks.contrast), breaks.contrast < CLEAR_CONTRAST
        yield _said("shelf is {:.1f} samples wide", cells), cells < FEWEST_SHELF_SAMPLES
        yield (
            _said("one sample holds {:.0%} of the period", kernel_share),
            (kernel_share > HEAVIEST_CELL) & (kernel_share * np.maximum(cells, FEWEST_SHELF_SAMPLES) > 3.0),
        )
        yield _said("period uncertain by {:.0%}", period_error), period_error > LARGEST_PERIOD_ERROR
        on_shelf = profiles.distance_m[None, :] < np.nan_to_num(breaks.break_m)[:, None]
        gaps = (profiles.is_filled & on_shelf).sum(axis=1)
        yield _said("samples on the shelf bridged, filled or smoothed: {:d}", gaps), gaps > 0
        yield _said("friction all but stops mode 1, Q {:.1f}", damped_q), damped_q < Q_STOPPED
        basin_m, sill_m = sills(profiles, breaks)
        yield _said("basin of {:.0f} m behind a sill of {:.1f} m", basin_m, sill_m), basin_m > SILL_RATIO * sill_m
        in_water = profiles.start_reason == START_REASONS.index("open_water")
        yield _said("starts in open water, off a bridged inlet", in_water), in_water


def neighbour_doubts(crosses: BoolArray, width_change: FloatArray) -> Iterator[Doubt]:
    """Go through the reasons in the transects beside one to trust its index less, as `doubts` does.

    Parameters
    ----------
    crosses : (n,) array of bool
        Whether a transect crosses another before the break.
    width_change : (n,) array of float
        Ratio of the wider to the narrower of its shelf width and its neighbours', the largest; NaN unknown.
    """
    yield _said("crosses another transect before the break", crosses), crosses
    with np.errstate(invalid="ignore"):
        changes = width_change > LARGEST_WIDTH_CHANGE
    yield _said("shelf width changes {:.1f}-fold to a neighbour", width_change), changes


def _said(text: str, *values: NDArray[Any]) -> TextArray:
    return np.array([text.format(*row) for row in zip(*values, strict=True)], dtype=object)


def confidences(has_index: BoolArray, n_doubts: NDArray[np.int64]) -> TextArray:
    """Confidence in each index: good without doubts, fair with one, poor with more; None where there is no index.

    Examples
    --------
    >>> confidences(np.array([True, True, True, False]), np.array([0, 1, 3, 0])).tolist()
    ['good', 'fair', 'poor', None]
    """
    words = np.array(["good", "fair", "poor"], dtype=object)[np.minimum(n_doubts, 2)]
    words[~has_index] = None
    return words
