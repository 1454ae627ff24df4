"""What moves the first node period: its flux, the kernel K = (P^2 / h) / int(P^2 / h), shares and variance."""

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from shelfmap._kernels.cells import Cells, Nodes, piece_moments
from shelfmap._kernels.march import coast_series
from shelfmap.constants import GRAVITY_M_S2

FloatArray = NDArray[np.float64]


@njit(cache=True, error_model="numpy")
def mode_shape(cells: Cells, nodes: Nodes, mu: float, face_flux: FloatArray, eta: FloatArray, flux: FloatArray) -> None:
    """Fill flux at faces (i_break,), elevation and flux at nodes (i_break + 1,) of a node mode."""
    eta[0], flux[0], p = 1.0, 0.0, 0.0
    for j in range(cells.i_break):
        if j == 0 and cells.zero_coast:
            start, growth, _, _ = coast_series(complex(mu * cells.inertia_s2_m[0]))
            eta[1], p = start.real, cells.width_m[0] * growth.real
        else:
            p += cells.width_m[j] * eta[j]
            eta[j + 1] = eta[j] - mu * cells.inertia_s2_m[j] * p
        face_flux[j] = p
        flux[j + 1] = p + (nodes.x_m[j + 1] - nodes.face_m[j]) * eta[j + 1]


@njit(cache=True, error_model="numpy")
def flux_at(x_m: float, j: int, nodes: Nodes, eta: FloatArray, flux: FloatArray) -> tuple[float, int]:
    """Flux at `x_m` by cubic Hermite between nodes (its slope is eta), and the cell; search starts from cell `j`."""
    while j < eta.size - 2 and nodes.x_m[j + 1] < x_m:
        j += 1
    dx = nodes.x_m[j + 1] - nodes.x_m[j]
    t = (x_m - nodes.x_m[j]) / dx
    s = 1.0 - t
    value = s * s * (1.0 + 2.0 * t) * flux[j] + t * t * (1.0 + 2.0 * s) * flux[j + 1]
    return value + t * s * dx * (s * eta[j] - t * eta[j + 1]), j


@njit(cache=True, error_model="numpy")
def peak_share(
    x: FloatArray, h: FloatArray, i_break: int, nodes: Nodes, eta: FloatArray, flux: FloatArray, total: float
) -> float:
    """Largest share of int(P^2 / h) between two neighbouring samples up to the break."""
    largest, j = 0.0, 0
    for i in range(i_break):
        dx = 0.25 * (x[i + 1] - x[i])
        share = 0.0
        for quarter in range(4):
            a, b = 0.25 * quarter, 0.25 * (quarter + 1)
            h_a, h_b = h[i] + a * (h[i + 1] - h[i]), h[i] + b * (h[i + 1] - h[i])
            if dx == 0.0:
                continue
            if h_a == 0.0:
                p, j = flux_at(x[i] + dx, j, nodes, eta, flux)
                share += 0.5 * p * p * dx / h_b
            else:
                zeroth, first = piece_moments(dx, h_a, h_b)
                p, j = flux_at(x[i] + quarter * dx + first / zeroth, j, nodes, eta, flux)
                share += p * p * zeroth
        largest = max(largest, share / total)
    return largest


@njit(cache=True, error_model="numpy")
def depth_variance(
    cells: Cells,
    nodes: Nodes,
    face_flux: FloatArray,
    total: float,
    fixed_m: float,
    per_depth: float,
    correlation_m: float,
) -> float:
    """Double integral of K K' (sigma sigma' / (h h')) exp(-distance / correlation) over the cells up to the break.

    The exponential lets the double sum run in one pass.
    """
    variance, carried, before_m = 0.0, 0.0, nodes.x_m[0]
    for j in range(cells.i_break):
        weight = face_flux[j] ** 2 * cells.inertia_s2_m[j] * GRAVITY_M_S2 / total
        inverse = cells.inverse_depth_per_m[j]
        if j == 0 and cells.zero_coast:  # there P grows like x and h like x
            weight *= 0.5
            inverse *= 2.0
        weight *= math.sqrt((fixed_m * inverse) ** 2 + per_depth**2)
        middle_m = 0.5 * (nodes.x_m[j] + nodes.x_m[j + 1])
        carried *= math.exp((before_m - middle_m) / correlation_m)
        span = (nodes.x_m[j + 1] - nodes.x_m[j]) / correlation_m
        own = 2.0 * (span + math.expm1(-span)) / (span * span) if span > 1e-4 else 1.0 - span / 3.0
        variance += weight * (own * weight + 2.0 * carried)
        carried += weight
        before_m = middle_m
    return variance


@njit(cache=True, error_model="numpy")
def first_mode(
    cells: Cells,
    nodes: Nodes,
    face_flux: FloatArray,
    eta: FloatArray,
    flux: FloatArray,
    rotation_share: float,
    depth_error: tuple[float, float, float],
    break_sd_m: float,
    x_m: FloatArray,
    depth_m: FloatArray,
    x: FloatArray,
    h: FloatArray,
    i_break: int,
    kernel: FloatArray,
    share: FloatArray,
    antinode_m: FloatArray,
    relative_sd: FloatArray,
) -> None:
    """Sensitivity of the first node period: kernel on samples, largest share, antinode, relative deviation."""
    total = 0.0
    for j in range(face_flux.size):
        weight = face_flux[j] ** 2 * cells.inertia_s2_m[j] * GRAVITY_M_S2
        total += 0.5 * weight if j == 0 and cells.zero_coast else weight
    j = 0
    for i in range(x_m.size):
        if x_m[i] > x[i_break]:
            kernel[i] = 0.0
        elif not math.isnan(depth_m[i]):
            p, j = flux_at(x_m[i], j, nodes, eta, flux)
            kernel[i] = p * p / (depth_m[i] * total) if depth_m[i] > 0.0 else 0.0
    share[0] = peak_share(x, h, i_break, nodes, eta, flux, total)
    highest = 0.0
    for j in range(1, flux.size):
        if flux[j] ** 2 > highest * nodes.depth_m[j]:
            highest, antinode_m[0] = flux[j] ** 2 / nodes.depth_m[j], nodes.x_m[j]
    variance = depth_variance(cells, nodes, face_flux, total, depth_error[0], depth_error[1], depth_error[2])
    at_break = flux[flux.size - 1] ** 2 / (nodes.depth_m[flux.size - 1] * total)
    relative_sd[0] = 0.5 * rotation_share * math.sqrt(variance + (at_break * break_sd_m) ** 2)
