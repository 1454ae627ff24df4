"""Plain-Python twin of the shelf-break rule, and profiles to try it on."""

import math

import numpy as np

from shelfmap.profiles import Profiles

PLACES = 4


def profiles_of(rows, step_m):
    """Profiles of hand-made depths, each from a shoreline."""
    n = len(rows)
    depth_m = np.full((n, max(1, *(len(row) for row in rows))), np.nan)
    for k, row in enumerate(rows):
        depth_m[k, : len(row)] = row
    zeros = np.zeros(n, dtype=np.int64)
    return Profiles(
        transect_id=np.arange(1, n + 1),
        step_m=float(step_m),
        depth_m=depth_m,
        n_samples=np.array([len(row) for row in rows], dtype=np.int64),
        is_filled=np.zeros(depth_m.shape, dtype=bool),
        start_reason=zeros.copy(),
        end_reason=zeros.copy(),
        shore_m=np.zeros(n),
        shore_lon_deg=np.zeros(n),
        shore_lat_deg=np.zeros(n),
        n_bridged=zeros.copy(),
        n_filled=zeros.copy(),
        n_despiked=zeros.copy(),
    )


def bent(nodes_km, depths_m, step_m, length_m):
    """Depths straight between nodes, sampled from the shore."""
    return np.interp(np.arange(0.0, length_m + 1e-6, step_m), np.array(nodes_km) * 1e3, depths_m)


class SlowBreak:
    """The rule of `find_break`, word by word, with numpy's interpolation and no thought of speed."""

    def __init__(self, row, step_m, smoothing_m):
        self.row, self.step_m, self.smoothing_m = np.asarray(row, dtype=float), step_m, smoothing_m
        self.x_m = np.arange(len(row)) * step_m
        self.place_m = np.arange((len(row) - 1) * PLACES + 1) * (step_m / PLACES)

    def depth(self, x_m):
        return float(np.interp(x_m, self.x_m, self.row))

    def mean_slope(self, from_m, to_m):
        from_m, to_m = max(from_m, 0.0), min(to_m, self.x_m[-1])
        return (self.depth(to_m) - self.depth(from_m)) / (to_m - from_m) if to_m > from_m else 0.0

    def gradient(self, x_m):
        return self.mean_slope(x_m - self.smoothing_m / 2, x_m + self.smoothing_m / 2)

    def sides(self, x_m, depth_m):
        left, right = max(x_m - self.smoothing_m, 0.0), min(x_m + self.smoothing_m, self.x_m[-1])
        before = (depth_m - self.depth(left)) / (x_m - left) if x_m > left else 0.0
        beyond = (self.depth(right) - depth_m) / (right - x_m) if right > x_m else 0.0
        return before, beyond

    def corner(self, from_m, to_m, deepest_m):
        d = self.step_m / PLACES
        best, best_growth = 0.0, -math.inf
        for k in range(max(1, math.floor(from_m / d)), min(len(self.place_m) - 1, math.ceil(to_m / d)) + 1):
            depth_m = self.depth(k * d)
            before, beyond = self.sides(k * d, depth_m)
            growth = beyond / (max(before, 0.0) + 1e-3)
            if depth_m <= deepest_m and growth > best_growth + 1e-9:
                best, best_growth = k * d, growth
        return best

    def meeting(self, x_m):
        reach, left, right = max(self.smoothing_m / 2, self.step_m), x_m - self.step_m, x_m + self.step_m
        if left - reach < 0 or right + reach > self.x_m[-1]:
            return x_m, self.depth(x_m)
        before, beyond = self.mean_slope(left - reach, left), self.mean_slope(right, right + reach)
        if beyond <= before:
            return x_m, self.depth(x_m)
        ends = sorted([self.depth(left), self.depth(right)])
        at = left + (self.depth(right) - self.depth(left) - beyond * (right - left)) / (before - beyond)
        at = min(max(at, left), right)
        return at, min(max(self.depth(left) + before * (at - left), ends[0]), ends[1])

    def is_trough(self, from_m, depth_m, sustain_m, deepest_m, ocean_m):
        run_m, trough_m = 0.0, depth_m
        for x_m, here_m in zip(self.x_m, self.row, strict=True):
            if x_m < from_m - 1e-6:
                continue
            if here_m >= ocean_m:
                return False
            trough_m = max(trough_m, here_m)
            run_m = run_m + self.step_m if here_m < min((depth_m + trough_m) / 2, deepest_m) else 0.0
            if run_m > sustain_m:
                return True
        return False

    def candidates(self, slope, shallowest_m, ocean_m):
        """First and last place of each stretch that keeps to the slope."""
        i = 0
        while i < len(self.place_m):
            x_m = self.place_m[i]
            if self.depth(x_m - self.smoothing_m / 2) >= ocean_m:
                return
            if self.depth(x_m) < shallowest_m or self.gradient(x_m) < slope:
                i += 1
                continue
            last = i
            while (
                last + 1 < len(self.place_m)
                and self.depth(self.place_m[last]) < ocean_m
                and self.gradient(self.place_m[last + 1]) >= slope
            ):
                last += 1
            yield i, last
            if self.depth(self.place_m[last]) >= ocean_m:
                return
            i = last + 2

    def find(self, slope, confirm, sustain_m, shallowest_m, deepest_m, least_contrast, ocean_m):
        d = self.step_m / PLACES
        fallback = (math.nan, math.nan)
        for i, last in self.candidates(slope, shallowest_m, ocean_m):
            falls_to_m = self.depth(self.place_m[last])
            if self.place_m[last] - self.place_m[i] < sustain_m and falls_to_m < ocean_m:
                continue
            confirmed = [k for k in range(i, last + 1) if self.gradient(self.place_m[k]) >= confirm]
            say_m = self.place_m[confirmed[0]] if confirmed else self.place_m[i] + math.ceil(sustain_m / d) * d
            corner_m = self.corner(self.place_m[i] - self.smoothing_m, say_m + self.smoothing_m / 2, deepest_m)
            at_m, depth_m = self.meeting(corner_m)
            before, beyond = self.sides(at_m, depth_m)
            contrast = beyond / max(before, 1e-4)
            if at_m < self.step_m or not shallowest_m <= depth_m <= deepest_m or contrast < least_contrast:
                continue
            if self.is_trough(self.place_m[last], depth_m, sustain_m, deepest_m, ocean_m):
                continue
            if confirmed:
                return at_m, depth_m
            long_gentle = contrast >= 2 * least_contrast and falls_to_m >= min(3 * depth_m, ocean_m)
            if math.isnan(fallback[0]) and long_gentle:
                fallback = (at_m, depth_m)
        return fallback
