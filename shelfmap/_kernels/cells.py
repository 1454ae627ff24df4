"""Cut one depth profile into cells of equal travel time, with exact integrals on piecewise-linear depth.

A *face* stands in each cell at its 1/h-weighted centroid, so that a cell in which the flux is constant is solved
exactly. Nodes fall on the coast, on vertical steps, on the break and on the outer end, and every stretch between
these holds an even number of cells: the coarse grid of every second node then serves for extrapolation.
"""

import math
from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from shelfmap.constants import GRAVITY_M_S2

FloatArray = NDArray[np.float64]

DEPTH_MIN_M = 1e-6  # less is no water; at the coast it counts as zero, which is regular
DEPTH_MAX_M = 1e5
FRICTION_FLOOR_M = 1.0  # friction with r/h is ill-posed where h -> 0
PHASE_PER_CELL = 0.045  # omega * ds aimed at: |gain| then good to 1e-6 or better
PHASE_PER_CELL_MAX = 0.1
CELLS_MIN = 64
CELLS_MAX = 8192


class Cells(NamedTuple):
    """Cells of one profile as the march needs them; where `zero_coast`, cell 0 is the series from depth zero."""

    width_m: FloatArray  # (n + 1,) what the flux grows by, per elevation: face to face, and last face to end
    inertia_s2_m: FloatArray  # (n,) integral of dx / (g h); zero_coast: x_1 / (g slope) in cell 0
    damping_per_m: FloatArray  # (n,) mean of 1 / max(h, floor), weighted by 1 / h
    inverse_depth_per_m: FloatArray  # (n,) mean of 1 / h, weighted by 1 / h
    zero_coast: bool
    i_break: int  # node of the break, -1 if none


class Nodes(NamedTuple):
    """Where nodes and faces stand; depth on the shoreward side of each node."""

    x_m: FloatArray  # (n + 1,)
    depth_m: FloatArray  # (n + 1,)
    face_m: FloatArray  # (n,)


#: Depths that differ by less than this share are one: bilinear means of equal depths differ by 1e-13.
EVEN_SHARE = 1e-9


@njit(cache=True, error_model="numpy")
def used_end(x_m: FloatArray, depth_m: FloatArray, outer_m: float) -> tuple[int, int, float, float, bool]:
    """First and last sample of the used part, position and depth of its end, and whether a step follows.

    The end is cut exactly where the depth reaches `outer_m`, else it is the last of the greatest depths, which on an
    even floor are equal but for rounding. A last sample of -1 means that the profile cannot be used.
    """
    n = 0
    while n < depth_m.size and not math.isnan(depth_m[n]):
        n += 1
    bad = n < 2 or not outer_m > 0.0
    for i in range(n):
        if depth_m[i] < 0.0 or depth_m[i] > DEPTH_MAX_M or (i > 0 and depth_m[i] < DEPTH_MIN_M):
            bad = True
    if bad:
        return 0, -1, math.nan, math.nan, False
    first = 0
    while first + 1 < n and x_m[first + 1] == x_m[0]:
        first += 1
    deepest, greatest_m = first, 0.0
    for i in range(first, n):
        if depth_m[i] >= outer_m:
            if i == first:
                return 0, -1, math.nan, math.nan, False
            if x_m[i] == x_m[i - 1]:
                n, greatest_m = i, depth_m[i - 1]  # the step is there
                break
            share = (outer_m - depth_m[i - 1]) / (depth_m[i] - depth_m[i - 1])
            end_m = x_m[i] if depth_m[i] == outer_m else x_m[i - 1] + share * (x_m[i] - x_m[i - 1])
            return first, i, end_m, outer_m, False
        greatest_m = max(greatest_m, depth_m[i])
    for i in range(first, n):
        if depth_m[i] >= (1.0 - EVEN_SHARE) * greatest_m:
            deepest = i
    if x_m[deepest] == x_m[first]:
        return 0, -1, math.nan, math.nan, False
    return first, deepest, x_m[deepest], depth_m[deepest], True


@njit(cache=True, error_model="numpy")
def take_profile(
    x_m: FloatArray, depth_m: FloatArray, outer_m: float, break_m: float
) -> tuple[FloatArray, FloatArray, int]:
    """Take the used part of one profile, with the break as a sample of its own.

    Returns positions, depths (both empty where the profile cannot be used) and the break's sample, -1 if none.
    """
    first, last, end_m, end_depth_m, _ = used_end(x_m, depth_m, outer_m)
    size = last - first + 2
    if last < 0:
        return np.empty(0), np.empty(0), -1
    x, h = np.empty(size), np.empty(size)
    n, i_break = 0, -1
    for i in range(first, last + 1):
        x_i = end_m if i == last else x_m[i]
        h_i = end_depth_m if i == last else depth_m[i]
        if i_break < 0 and n > 0 and x[n - 1] < break_m < x_i:
            share = (break_m - x[n - 1]) / (x_i - x[n - 1])
            x[n], h[n] = break_m, h[n - 1] + share * (h_i - h[n - 1])
            i_break = n
            n += 1
        x[n], h[n] = x_i, h_i
        if i_break < 0 and n > 0 and x_i == break_m:
            i_break = n
        n += 1
    if h[0] < DEPTH_MIN_M:
        h[0] = 0.0
    return x[:n], h[:n], i_break


@njit(cache=True, error_model="numpy")
def piece_time(dx_m: float, depth_a_m: float, depth_b_m: float) -> float:
    """Exact travel time of a long wave over one linear piece, seconds."""
    if dx_m == 0.0:
        return 0.0
    return 2.0 * dx_m / (math.sqrt(GRAVITY_M_S2 * depth_a_m) + math.sqrt(GRAVITY_M_S2 * depth_b_m))


@njit(cache=True, error_model="numpy")
def travel_time(x_m: FloatArray, depth_m: FloatArray, i_end: int) -> float:
    """Exact travel time from the first sample to sample `i_end`, seconds."""
    total = 0.0
    for i in range(i_end):
        total += piece_time(x_m[i + 1] - x_m[i], depth_m[i], depth_m[i + 1])
    return total


@njit(cache=True, error_model="numpy")
def piece_moments(dx_m: float, depth_a_m: float, depth_b_m: float) -> tuple[float, float]:
    """Integrals of dx/h and of (x - x_a) dx/h over one linear piece; series where nearly flat."""
    mean = 0.5 * (depth_a_m + depth_b_m)
    d = 0.5 * (depth_b_m - depth_a_m) / mean
    if abs(d) < 0.05:
        e = d * d
        lift = 1.0 + e * (1 / 3 + e * (1 / 5 + e * (1 / 7 + e * (1 / 9 + e / 11))))
        skew = -d * (1 / 3 + e * (1 / 5 + e * (1 / 7 + e * (1 / 9 + e / 11))))
    else:
        lift = 0.5 * math.log(depth_b_m / depth_a_m) / d
        skew = (1.0 - lift) / d
    zeroth = dx_m * lift / mean
    return zeroth, 0.5 * dx_m * (zeroth + dx_m * skew / mean)


@njit(cache=True, error_model="numpy")
def piece_damping(dx_m: float, depth_a_m: float, depth_b_m: float) -> float:
    """Integral of dx / (h max(h, floor)) over one linear piece."""
    floor = FRICTION_FLOOR_M
    if depth_a_m >= floor and depth_b_m >= floor:
        return dx_m / (depth_a_m * depth_b_m)
    if depth_a_m <= floor and depth_b_m <= floor:
        return piece_moments(dx_m, depth_a_m, depth_b_m)[0] / floor
    shallow, deep = min(depth_a_m, depth_b_m), max(depth_a_m, depth_b_m)
    below = dx_m * (floor - shallow) / (deep - shallow)
    return piece_moments(below, shallow, floor)[0] / floor + (dx_m - below) / (floor * deep)


@njit(cache=True, error_model="numpy")
def coast_damping(slope: float, x_m: float) -> float:
    """Plain mean of 1 / max(h, floor) from a coast of depth zero to `x_m`: there the flux grows like x."""
    depth = slope * x_m
    if depth <= FRICTION_FLOOR_M:
        return 1.0 / FRICTION_FLOOR_M
    return (1.0 + math.log(depth / FRICTION_FLOOR_M)) / depth


@njit(cache=True, error_model="numpy")
def cell_count(travel_time_s: float, omega_rad_s: float) -> int:
    """Cells for a wave of `omega_rad_s`: even, so that phase per cell is small, within the bounds."""
    wanted = travel_time_s * omega_rad_s / PHASE_PER_CELL
    return 2 * math.ceil(0.5 * min(max(wanted, CELLS_MIN), CELLS_MAX))


@njit(cache=True, error_model="numpy")
def cut_cells(x_m: FloatArray, depth_m: FloatArray, i_break: int, n_cells: int) -> tuple[Cells, Nodes]:
    """Cut a used profile into about `n_cells` cells (a few more where it has steps, a break or a dry coast)."""
    last = x_m.size - 1
    step_s = travel_time(x_m, depth_m, last) / n_cells
    room = n_cells + 2 * x_m.size + 2
    node, depth, face = np.empty(room + 1), np.empty(room + 1), np.empty(room)
    inertia, damping, inverse = np.empty(room), np.empty(room), np.empty(room)
    zero_coast = depth_m[0] == 0.0
    first_end = 1 if zero_coast else last
    n, node_break = 0, -1
    node[0], depth[0] = x_m[0], depth_m[0]
    begin = 0
    while begin < last:
        end = begin + 1
        while not (end in (last, i_break, first_end) or x_m[end + 1] == x_m[end] or x_m[end] == x_m[begin]):
            end += 1
        part_s = travel_time(x_m[begin:], depth_m[begin:], end - begin)
        if part_s > 0.0:
            n = _cut_part(
                x_m[begin : end + 1],
                depth_m[begin : end + 1],
                part_s,
                step_s,
                n,
                node,
                depth,
                face,
                inertia,
                damping,
                inverse,
            )
        if end == i_break:
            node_break = n
        begin = end
    if zero_coast:
        slope = depth_m[1] / x_m[1]
        face[0] = node[1]
        inertia[0] = node[1] / (GRAVITY_M_S2 * slope)
        damping[0] = coast_damping(slope, node[1])
        inverse[0] = 1.0 / depth[1]
    nodes = Nodes(node[: n + 1], depth[: n + 1], face[:n])
    width = _widths(nodes.face_m, nodes.x_m[n])
    return Cells(width, inertia[:n], damping[:n], inverse[:n], zero_coast, node_break), nodes


@njit(cache=True, error_model="numpy")
def _cut_part(
    x: FloatArray,
    h: FloatArray,
    part_s: float,
    step_s: float,
    n: int,
    node: FloatArray,
    depth: FloatArray,
    face: FloatArray,
    inertia: FloatArray,
    damping: FloatArray,
    inverse: FloatArray,
) -> int:
    """Append the cells of one continuous stretch; returns the new number of cells."""
    last = x.size - 1
    count = 2 * max(1, math.ceil(0.5 * part_s / step_s - 1e-9))
    dt = part_s / count
    i = 0
    rest_s = piece_time(x[1] - x[0], h[0], h[1])
    x_a, h_a = x[0], h[0]
    for j in range(count):
        need_s = dt
        sum0 = sum1 = sum_damping = sum_inverse = 0.0
        final = j == count - 1
        start_m = x_a
        while True:
            within = not final and (need_s < rest_s or i == last - 1)
            if within:
                c_a = math.sqrt(GRAVITY_M_S2 * h_a)
                c_b = c_a + 0.5 * GRAVITY_M_S2 * (h[i + 1] - h[i]) / (x[i + 1] - x[i]) * need_s
                x_b, h_b = x_a + 0.5 * (c_a + c_b) * need_s, c_b * c_b / GRAVITY_M_S2
                rest_s -= need_s
            else:
                x_b, h_b = x[i + 1], h[i + 1]
                need_s -= rest_s
                i += 1
                if i < last:
                    rest_s = piece_time(x[i + 1] - x[i], h[i], h[i + 1])
            if x_b > x_a and h_a > 0.0:
                zeroth, first = piece_moments(x_b - x_a, h_a, h_b)
                sum0 += zeroth
                sum1 += first + (x_a - start_m) * zeroth
                sum_damping += piece_damping(x_b - x_a, h_a, h_b)
                sum_inverse += (x_b - x_a) / (h_a * h_b)
            x_a, h_a = x_b, h_b
            if within or i == last:
                break
        if sum0 > 0.0:
            face[n] = start_m + sum1 / sum0
            inertia[n] = sum0 / GRAVITY_M_S2
            damping[n] = sum_damping / sum0
            inverse[n] = sum_inverse / sum0
        node[n + 1], depth[n + 1] = x_a, h_a
        n += 1
    return n


@njit(cache=True, error_model="numpy")
def _widths(face_m: FloatArray, end_m: float) -> FloatArray:
    """Distances between faces, from the coast to the end."""
    width = np.empty(face_m.size + 1)
    before = 0.0
    for j in range(face_m.size):
        width[j] = face_m[j] - before
        before = face_m[j]
    width[face_m.size] = end_m - before
    return width


@njit(cache=True, error_model="numpy")
def coarsen(cells: Cells, nodes: Nodes) -> Cells:
    """Make the grid of every second node."""
    n = nodes.face_m.size // 2
    face, inertia = np.empty(n), np.empty(n)
    damping, inverse = np.empty(n), np.empty(n)
    for j in range(n):
        a, b = 2 * j, 2 * j + 1
        k_a, k_b = cells.inertia_s2_m[a], cells.inertia_s2_m[b]
        inertia[j] = k_a + k_b
        face[j] = (k_a * nodes.face_m[a] + k_b * nodes.face_m[b]) / inertia[j]
        damping[j] = (k_a * cells.damping_per_m[a] + k_b * cells.damping_per_m[b]) / inertia[j]
        inverse[j] = (k_a * cells.inverse_depth_per_m[a] + k_b * cells.inverse_depth_per_m[b]) / inertia[j]
    if cells.zero_coast:
        slope = nodes.depth_m[2] / nodes.x_m[2]
        face[0] = nodes.x_m[2]
        inertia[0] = nodes.x_m[2] / (GRAVITY_M_S2 * slope)
        damping[0] = coast_damping(slope, nodes.x_m[2])
        inverse[0] = 1.0 / nodes.depth_m[2]
    i_break = cells.i_break // 2 if cells.i_break > 0 else -1
    return Cells(_widths(face, nodes.x_m[2 * n]), inertia, damping, inverse, cells.zero_coast, i_break)
