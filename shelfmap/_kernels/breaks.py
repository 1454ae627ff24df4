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
    row: F64, n: int, step_m: float, from_m: float, depth_m: float, sustain_m: float, ocean_m: float
) -> bool:
    """Whether, before the open ocean, the bed comes back above a depth for longer than `sustain_m`."""
    run_m = 0.0
    for j in range(int(np.ceil(from_m / step_m)), n):
        if row[j] >= ocean_m:
            return False
        run_m = run_m + step_m if row[j] < depth_m else 0.0
        if run_m > sustain_m:
            return True
    return False


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
) -> float:
    """Distance of the shelf break from the shore, metres; NaN where there is none.

    The gradient at x is taken over `smoothing_m` centred on x: the slope of the running mean of the depth. A candidate
    is a stretch of at least `sustain_m` on which it stays at `slope` or more and on which it reaches `confirm`. The
    break is where the gradient changes most, ``h(x + L) - 2 h(x) + h(x - L)`` at its largest, from one smoothing
    length before the stretch to where `confirm` is reached. It must lie between the depths allowed and have the
    contrast, and beyond it the bed must not come back above its depth before the ocean. The first that does is it.
    """
    d = step_m / PLACES_PER_STEP
    n_places = (n - 1) * PLACES_PER_STEP + 1
    half = 0.5 * smoothing_m
    i = 0
    while i < n_places:
        x = i * d
        if depth_at(row, n, step_m, x) < shallowest_m or slope_between(row, n, step_m, x - half, x + half) < slope:
            i += 1
            continue
        if depth_at(row, n, step_m, x) > deepest_m + smoothing_m * slope:
            break
        stop, reached = i, -1
        while stop < n_places:
            gradient = slope_between(row, n, step_m, stop * d - half, stop * d + half)
            if gradient < slope:
                break
            if reached < 0 and gradient >= confirm:
                reached = stop
            stop += 1
        if (stop - 1 - i) * d >= sustain_m and reached >= 0:
            best, best_change = -1, 0.0
            low = max(1, int(np.floor((x - smoothing_m) / d)))
            high = min(n_places - 1, int(np.ceil((reached * d + half) / d)))
            for k in range(low, high + 1):
                at = k * d
                change = slope_between(row, n, step_m, at, at + smoothing_m) - slope_between(
                    row, n, step_m, at - smoothing_m, at
                )
                if change > best_change * (1.0 + 1e-9):
                    best, best_change = k, change
            if best > 0:
                at = best * d
                depth = depth_at(row, n, step_m, at)
                before, beyond = sides(row, n, step_m, at, smoothing_m)
                if (
                    shallowest_m <= depth <= deepest_m
                    and beyond >= least_contrast * max(before, LEAST_SLOPE_BEFORE)
                    and not _shoals_again(row, n, step_m, at, depth, sustain_m, ocean_m)
                ):
                    return at
        i = stop + 1
    return np.nan


@njit(cache=True)
def sides(row: F64, n: int, step_m: float, at_m: float, smoothing_m: float) -> tuple[float, float]:
    """Gradient over one smoothing length before a place, and beyond it."""
    return (
        slope_between(row, n, step_m, at_m - smoothing_m, at_m),
        slope_between(row, n, step_m, at_m, at_m + smoothing_m),
    )


@njit(cache=True)
def find_breaks(
    depth_m: F64, n_samples: I64, step_m: float, slopes: F64, confirm: float, smoothings_m: F64, limits: F64, out_m: F64
) -> None:
    """Breaks of every profile for every pair of threshold and smoothing length.

    `limits` holds sustain_m, shallowest_m, deepest_m, least_contrast, ocean_m; `out_m` is (n, n_slopes, n_smoothings).
    """
    for k in range(depth_m.shape[0]):
        for a in range(slopes.shape[0]):
            for b in range(smoothings_m.shape[0]):
                out_m[k, a, b] = np.nan
                if n_samples[k] >= 3:
                    out_m[k, a, b] = find_break(
                        depth_m[k], n_samples[k], step_m, slopes[a], max(confirm, slopes[a]), smoothings_m[b],
                        limits[0], limits[1], limits[2], limits[3], limits[4],
                    )  # fmt: skip


@njit(cache=True)
def measure_breaks(
    depth_m: F64, n_samples: I64, step_m: float, break_m: F64, smoothing_m: float, out_depth_m: F64, out_sides: F64
) -> None:
    """Depth at each break and the gradients before and beyond it; NaN without a break."""
    for k in range(depth_m.shape[0]):
        if np.isnan(break_m[k]):
            continue
        out_depth_m[k] = depth_at(depth_m[k], n_samples[k], step_m, break_m[k])
        out_sides[k, 0], out_sides[k, 1] = sides(depth_m[k], n_samples[k], step_m, break_m[k], smoothing_m)
