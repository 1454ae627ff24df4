"""Compiled loops of the shelf break: gradients over a length, and the first steepening that lasts."""

import numpy as np
from numba import njit
from numpy.typing import NDArray

F64 = NDArray[np.float64]
I64 = NDArray[np.int64]

#: Places looked at between two samples.
PLACES_PER_STEP = 4
#: A shelf flatter than this counts as this steep in the contrast, rise over run.
LEAST_SLOPE_BEFORE = 1e-4
#: Gradient of the mean shelf (Heezen, Tharp & Ewing 1959, as quoted in general works): flatter ones count alike.
MEAN_SHELF_SLOPE = 1e-3


@njit(cache=True)
def depth_at(row: F64, n: int, step_m: float, x_m: float) -> float:
    """Depth of a profile at a distance, straight between samples, its ends held."""
    place = x_m / step_m
    if place <= 0.0:
        return float(row[0])
    if place >= n - 1:
        return float(row[n - 1])
    j = int(place)
    part = place - j
    return float(row[j] + part * (row[j + 1] - row[j]))


@njit(cache=True)
def slope_between(row: F64, n: int, step_m: float, from_m: float, to_m: float) -> float:
    """Mean gradient (rise over run, down positive) between two distances, clipped to the profile; 0 if it is empty."""
    from_m, to_m = max(from_m, 0.0), min(to_m, (n - 1) * step_m)
    if to_m - from_m <= 0.0:
        return 0.0
    return (depth_at(row, n, step_m, to_m) - depth_at(row, n, step_m, from_m)) / (to_m - from_m)


@njit(cache=True)
def _shoals_again(
    row: F64, n: int, step_m: float, from_m: float, depth_m: float, sustain_m: float, deepest_m: float, ocean_m: float
) -> bool:
    """Whether, before the open ocean, the bed comes more than halfway back up to a depth, and to shelf depths.

    It must stay there for longer than `sustain_m`. Halfway from the greatest depth since: a trough before a bank, as
    on glaciated shelves, and not the slope.
    """
    run_m, trough_m = 0.0, depth_m
    for j in range(int(np.ceil(from_m / step_m)), n):
        if row[j] >= ocean_m:
            return False
        trough_m = max(trough_m, row[j])
        run_m = run_m + step_m if row[j] < min(0.5 * (depth_m + trough_m), deepest_m) else 0.0
        if run_m > sustain_m:
            return True
    return False


@njit(cache=True)
def _stretch(
    row: F64, n: int, step_m: float, start: int, slope: float, confirm: float, smoothing_m: float, ocean_m: float
) -> tuple[int, int]:
    """Last place of the stretch from `start` that keeps to `slope`, short of the ocean; first to `confirm` or -1."""
    d = step_m / PLACES_PER_STEP
    half = 0.5 * smoothing_m
    place, reached = start, -1
    while place < (n - 1) * PLACES_PER_STEP + 1:
        gradient = slope_between(row, n, step_m, place * d - half, place * d + half)
        if gradient < slope:
            break
        if reached < 0 and gradient >= confirm:
            reached = place
        place += 1
        if depth_at(row, n, step_m, (place - 1) * d) >= ocean_m:
            break
    return place - 1, reached


@njit(cache=True)
def find_break(
    row: F64,
    n: int,
    step_m: float,
    slope: float,
    confirm: float,
    smoothing_m: float,
    sustain_m: float,
    shallowest_m: float,
    deepest_m: float,
    least_contrast: float,
    ocean_m: float,
) -> tuple[float, float]:
    """Distance of the shelf break from the shore and its depth, metres; NaN where there is none.

    The gradient at x is taken over `smoothing_m` centred on x: the slope of the running mean of the depth. A candidate
    is a stretch of at least `sustain_m`, or down to the open ocean, on which it stays at `slope` or more. The break is
    where the gradient grows by the largest factor, beyond over (before + 1:1000), from one smoothing length before
    the stretch to where it has its say and no deeper than `deepest_m`, moved to where the lines of shelf and slope on
    both sides meet. It must lie beyond the first sample, between the depths allowed, and have the contrast, and beyond
    the stretch the bed must not come halfway back up to it before the ocean: that would be a trough. The first
    candidate that reaches `confirm` and passes is it; where none does, the first with twice the contrast on which the
    bed falls to three times the break's depth, or to the ocean: a long gentle slope.
    """
    d = step_m / PLACES_PER_STEP
    half = 0.5 * smoothing_m
    fallback, fallback_depth = np.nan, np.nan
    falls_to = 0.0
    i = 0
    while i < (n - 1) * PLACES_PER_STEP + 1:
        if falls_to >= ocean_m or depth_at(row, n, step_m, i * d - half) >= ocean_m:
            break
        if (
            depth_at(row, n, step_m, i * d) < shallowest_m
            or slope_between(row, n, step_m, i * d - half, i * d + half) < slope
        ):
            i += 1
            continue
        last, reached = _stretch(row, n, step_m, i, slope, confirm, smoothing_m, ocean_m)
        falls_to = depth_at(row, n, step_m, last * d)
        if (last - i) * d >= sustain_m or falls_to >= ocean_m:
            say = reached if reached >= 0 else i + int(np.ceil(sustain_m / d))
            corner = _sharpest(row, n, step_m, i * d - smoothing_m, say * d + half, smoothing_m, deepest_m)
            at, depth = meeting(row, n, step_m, corner, smoothing_m)
            before, beyond = sides(row, n, step_m, at, depth, smoothing_m)
            contrast = beyond / max(before, LEAST_SLOPE_BEFORE)
            if (
                at >= step_m  # in the first cell the grid holds no shelf
                and shallowest_m <= depth <= deepest_m
                and contrast >= least_contrast
                and not _shoals_again(row, n, step_m, last * d, depth, sustain_m, deepest_m, ocean_m)
            ):
                if reached >= 0:
                    return at, depth
                if np.isnan(fallback) and contrast >= 2.0 * least_contrast and falls_to >= min(3.0 * depth, ocean_m):
                    fallback, fallback_depth = at, depth
        i = last + 2
    return fallback, fallback_depth


@njit(cache=True)
def _sharpest(
    row: F64, n: int, step_m: float, from_m: float, to_m: float, smoothing_m: float, deepest_m: float
) -> float:
    """Place between two distances, above a depth, where the gradient grows by the largest factor; first of equals."""
    d = step_m / PLACES_PER_STEP
    best, best_growth = 0.0, -np.inf
    low = max(1, int(np.floor(from_m / d)))
    high = min((n - 1) * PLACES_PER_STEP, int(np.ceil(to_m / d)))
    for k in range(low, high + 1):
        depth = depth_at(row, n, step_m, k * d)
        if depth > deepest_m:
            continue
        before, beyond = sides(row, n, step_m, k * d, depth, smoothing_m)
        growth = beyond / (max(before, 0.0) + MEAN_SHELF_SLOPE)
        if growth > best_growth + 1e-9:
            best, best_growth = k * d, growth
    return best


@njit(cache=True)
def meeting(row: F64, n: int, step_m: float, corner_m: float, smoothing_m: float) -> tuple[float, float]:
    """Where the lines of shelf and slope meet near a corner of the sampled profile, and the depth there.

    A kink between two samples shows as two blunt corners. Lines through the samples one step off the corner, each over
    half a smoothing length or a step, meet at the kink itself. Never farther than a step from the corner; the corner
    as it is where there is no room for the lines or they do not steepen.
    """
    depth = depth_at(row, n, step_m, corner_m)
    reach = max(0.5 * smoothing_m, step_m)
    left, right = corner_m - step_m, corner_m + step_m
    if left - reach < 0.0 or right + reach > (n - 1) * step_m:
        return corner_m, depth
    before = slope_between(row, n, step_m, left - reach, left)
    beyond = slope_between(row, n, step_m, right, right + reach)
    if beyond <= before:
        return corner_m, depth
    left_depth, right_depth = depth_at(row, n, step_m, left), depth_at(row, n, step_m, right)
    at = left + (right_depth - left_depth - beyond * (right - left)) / (before - beyond)
    at = min(max(at, left), right)
    depth = left_depth + before * (at - left)
    return at, min(max(depth, min(left_depth, right_depth)), max(left_depth, right_depth))


@njit(cache=True)
def sides(row: F64, n: int, step_m: float, at_m: float, depth_m: float, smoothing_m: float) -> tuple[float, float]:
    """Gradients of the lines to a point from the profile one smoothing length before it, and on from it as far.

    The point's own depth counts, not the profile's there: a kink between two samples is blunt in the profile.
    """
    from_m, to_m = max(at_m - smoothing_m, 0.0), min(at_m + smoothing_m, (n - 1) * step_m)
    before, beyond = 0.0, 0.0
    if at_m > from_m:
        before = (depth_m - depth_at(row, n, step_m, from_m)) / (at_m - from_m)
    if to_m > at_m:
        beyond = (depth_at(row, n, step_m, to_m) - depth_m) / (to_m - at_m)
    return before, beyond


@njit(cache=True)
def find_breaks(
    depth_m: F64,
    n_samples: I64,
    step_m: float,
    slopes: F64,
    confirm: float,
    smoothings_m: F64,
    limits: F64,
    out_m: F64,
    out_depth_m: F64,
) -> None:
    """Breaks of every profile for every pair of threshold and smoothing length.

    `limits` holds sustain_m, shallowest_m, deepest_m, least_contrast, ocean_m; the outputs are
    (n, n_slopes, n_smoothings).
    """
    for k in range(depth_m.shape[0]):
        for a in range(slopes.shape[0]):
            for b in range(smoothings_m.shape[0]):
                out_m[k, a, b], out_depth_m[k, a, b] = np.nan, np.nan
                if n_samples[k] >= 3:
                    out_m[k, a, b], out_depth_m[k, a, b] = find_break(
                        depth_m[k], n_samples[k], step_m, slopes[a], max(confirm, slopes[a]), smoothings_m[b],
                        limits[0], limits[1], limits[2], limits[3], limits[4],
                    )  # fmt: skip


@njit(cache=True)
def measure_breaks(
    depth_m: F64, n_samples: I64, step_m: float, break_m: F64, break_depth_m: F64, smoothing_m: float, out_sides: F64
) -> None:
    """Gradients before and beyond each break; NaN without a break."""
    for k in range(depth_m.shape[0]):
        out_sides[k] = np.nan
        if not np.isnan(break_m[k]):
            out_sides[k, 0], out_sides[k, 1] = sides(
                depth_m[k], n_samples[k], step_m, break_m[k], break_depth_m[k], smoothing_m
            )


@njit(cache=True)
def depths_at(depth_m: F64, n_samples: I64, step_m: float, at_m: F64, out_depth_m: F64) -> None:
    """Depth of each profile at a distance; NaN where that is NaN."""
    for k in range(depth_m.shape[0]):
        out_depth_m[k] = np.nan
        if not np.isnan(at_m[k]):
            out_depth_m[k] = depth_at(depth_m[k], n_samples[k], step_m, at_m[k])
