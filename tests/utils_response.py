"""Slow, plain twins of the compiled march, and independent solutions to hold it against."""

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import quad, solve_ivp

from shelfmap._kernels import cells as kernel_cells
from shelfmap._kernels import march as kernel_march
from shelfmap.constants import CONSTITUENTS, GRAVITY_M_S2
from shelfmap.modes import DepthError, ShelfModes, shelf_modes
from shelfmap.response import Friction, WaveResponse, coriolis_rad_s, wave_response

G = GRAVITY_M_S2
ERROR = DepthError(fixed_m=0.5, per_depth=0.012, correlation_m=20e3)


def omega_of(name: str) -> float:
    return math.radians(CONSTITUENTS[name].speed_deg_per_h) / 3600.0


def waves(
    x: Any,
    depth: Any,
    break_m: float,
    omega: Any,
    *,
    outer: float = 4000.0,
    lat: float = 0.0,
    friction: Friction | float = 0.0,
) -> WaveResponse:
    """Response of a single profile."""
    if not isinstance(friction, Friction):
        friction = Friction(linear_m_s=friction)
    return wave_response(x, [depth], [break_m], [outer], coriolis_rad_s([lat]), np.atleast_1d(omega), friction=friction)


def modes(
    x: Any,
    depth: Any,
    break_m: float,
    *,
    outer: float = 4000.0,
    lat: float = 0.0,
    friction: float = 0.0,
    error: DepthError = ERROR,
    break_sd: float = 0.0,
) -> ShelfModes:
    """Modes of a single profile."""
    return shelf_modes(
        x,
        [depth],
        [break_m],
        [outer],
        coriolis_rad_s([lat]),
        friction_m_s=friction,
        depth_error=error,
        break_sd_m=[break_sd],
    )


def random_shelves(
    seed: int, n: int, m: int = 40
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Rough shelves on one set of positions: x (m,), depth (n, m), break (n,)."""
    rng = np.random.default_rng(seed)
    x = np.concatenate([[0.0], np.sort(rng.uniform(2e3, 498e3, m - 2)), [500e3]])
    break_m = rng.uniform(50e3, 300e3, n)
    edge = rng.uniform(60.0, 200.0, n)[:, None]
    near = edge * (0.1 + 0.9 * np.minimum(x / break_m[:, None], 1.0))
    beyond = np.maximum(x - break_m[:, None], 0.0) / rng.uniform(20.0, 60.0, n)[:, None]
    return x, (near + beyond) * np.exp(rng.normal(0.0, 0.15, (n, m))), break_m


def ode_incident(x: Any, depth: Any, omega: float, f: float, friction_m_s: float, outer: float) -> complex:
    """Twice the incident wave per unit at the coast by an adaptive 8th-order solver, piece by piece.

    The profile must start deeper than the friction floor and end at the deep sea.
    """
    x, depth = np.asarray(x, dtype=float), np.asarray(depth, dtype=float)
    state = np.array([1.0 + 0j, 0j])
    for i in range(x.size - 1):

        def slope(at: float, y: Any, i: int = i) -> list[complex]:
            h = depth[i] + (depth[i + 1] - depth[i]) * (at - x[i]) / (x[i + 1] - x[i])
            s = omega + 1j * friction_m_s / h
            return [-omega * (s - f * f / s) * y[1] / (G * h), y[0]]

        solved = solve_ivp(slope, (x[i], x[i + 1]), state, method="DOP853", rtol=1e-11, atol=1e-13)
        state = solved.y[:, -1]
    return complex(state[0] - 1j * state[1] * np.sqrt(omega**2 - f * f + 0j) / math.sqrt(G * outer))


def plain_cell(x: Any, depth: Any, a: float, b: float) -> tuple[float, float]:
    """Integral of dx / (g h) over [a, b] and the 1/h-weighted centroid, by adaptive quadrature."""
    kinks = [p for p in np.asarray(x) if a < p < b] or None
    zeroth = quad(lambda at: 1.0 / np.interp(at, x, depth), a, b, points=kinks, epsabs=0, epsrel=1e-12)[0]
    first = quad(lambda at: at / np.interp(at, x, depth), a, b, points=kinks, epsabs=0, epsrel=1e-12)[0]
    return zeroth / G, first / zeroth


def plain_march(cells: kernel_cells.Cells, pull: Any) -> tuple[complex, complex]:
    """Elevation and flux at the end for one wave; `pull` (n,) is the stiffness of each cell. No zero coast."""
    eta, flux = 1.0 + 0j, 0j
    for j in range(len(cells.inertia_s2_m)):
        flux = flux + cells.width_m[j] * eta
        eta = eta - pull[j] * cells.inertia_s2_m[j] * flux
    return eta, flux + cells.width_m[-1] * eta


def end_state(x: Any, depth: Any, omega: float, f: float, friction_m_s: float, n_cells: int) -> tuple[complex, complex]:
    """Extrapolated elevation and flux at the outer end from about `n_cells` cells."""
    fine, nodes = kernel_cells.cut_cells(np.asarray(x, dtype=float), np.asarray(depth, dtype=float), -1, n_cells)
    coarse = kernel_cells.coarsen(fine, nodes)
    ends = []
    for cells in (fine, coarse):
        eta, flux, at_break = (np.zeros((2, 1)) for _ in range(3))
        kernel_march.march_damped(cells, np.array([omega]), f * f, friction_m_s, eta, flux, at_break)
        ends.append((complex(eta[0, 0], eta[1, 0]), complex(flux[0, 0], flux[1, 0])))
    (eta_f, flux_f), (eta_c, flux_c) = ends
    return eta_f + (eta_f - eta_c) / 3.0, flux_f + (flux_f - flux_c) / 3.0


def plain_drag(x: Any, depth: Any, omega: float, f: float, drag_m: float, outer: float, n: int = 6000) -> complex:
    """Twice the incident wave per unit at the coast with drag, on `n` equal steps of distance, second order."""
    at = np.linspace(0.0, x[-1], n + 1)
    middle = 0.5 * (at[1:] + at[:-1])
    h, dx = np.interp(middle, x, depth), at[1] - at[0]
    friction = np.full(n, 1e-3)
    for _ in range(60):
        s = omega + 1j * friction / np.maximum(h, 1.0)
        pull = omega * (s - f * f / s) / (G * h)
        eta, flux = 1.0 + 0j, 0j
        size = np.empty(n)
        for j in range(n):
            flux += (0.5 * dx if j == 0 else dx) * eta
            eta -= pull[j] * dx * flux
            size[j] = abs(flux)
        flux += 0.5 * dx * eta
        incident = eta - 1j * flux * math.sqrt(omega**2 - f * f) / math.sqrt(G * outer)
        new = 8.0 / (3.0 * math.pi) * drag_m * omega * size / h / abs(incident)
        if np.max(np.abs(np.sqrt(new / friction) - 1.0)) < 1e-6:
            break
        friction = np.sqrt(friction * new)
    return incident
