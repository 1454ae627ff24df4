"""March of long waves from the coast to the deep sea, and the response of one profile after another.

Elevation is 1 at the coast and the flux integral P = int_0^x eta dx is 0 there. Per cell and wave: P grows by
width * eta, then eta falls by a * inertia * P with a = omega (s - f^2 / s), s = omega + i r / h. Second order on
one grid; callers extrapolate from two. Periods run innermost and contiguous: the other order was 33 times slower.
"""

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from shelfmap._kernels.cells import (
    PHASE_PER_CELL_MAX,
    Cells,
    cell_count,
    coarsen,
    cut_cells,
    take_profile,
    travel_time,
    used_end,
)
from shelfmap.constants import GRAVITY_M_S2

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

LORENTZ = 8.0 / (3.0 * math.pi)  # work of quadratic drag by a sinusoid of unit amplitude
DRAG_TURNS_MAX = 200
DRAG_TOLERANCE = 1e-4
FRICTION_START_MIN_M_S = 1e-6  # the turn r <- sqrt(r r_new) cannot leave zero


@njit(cache=True, error_model="numpy")
def coast_series(y: complex) -> tuple[complex, complex, complex, complex]:
    """Solution near a coast of depth zero: eta and P / x at y = a x / (g slope), and their derivatives by y.

    J0(2 sqrt y) and J1(2 sqrt y) / sqrt y; six terms, y is about (phase of one cell / 2)^2.
    """
    eta = 1.0 - y * (1.0 - y / 4.0 * (1.0 - y / 9.0 * (1.0 - y / 16.0 * (1.0 - y / 25.0))))
    flux = 1.0 - y / 2.0 * (1.0 - y / 6.0 * (1.0 - y / 12.0 * (1.0 - y / 20.0 * (1.0 - y / 30.0))))
    flux_y = -0.5 * (1.0 - y / 3.0 * (1.0 - y / 8.0 * (1.0 - y / 15.0 * (1.0 - y / 24.0))))
    return eta, flux, -flux, flux_y


@njit(cache=True, error_model="numpy")
def march_real(cells: Cells, stiffness: FloatArray, eta: FloatArray, flux: FloatArray, eta_break: FloatArray) -> None:
    """March all waves without friction; `stiffness` is omega^2 - f^2. Fills the values at the end and the break."""
    n, first = cells.inertia_s2_m.size, 0
    eta[:] = 1.0
    flux[:] = 0.0
    if cells.zero_coast:
        first = 1
        for q in range(stiffness.size):
            start, growth, _, _ = coast_series(complex(stiffness[q] * cells.inertia_s2_m[0]))
            eta[q] = start.real
            flux[q] = cells.width_m[0] * growth.real
    if cells.i_break > 0:
        _march_cells(cells, first, cells.i_break, stiffness, eta, flux)
        eta_break[:] = eta
        first = cells.i_break
    _march_cells(cells, first, n, stiffness, eta, flux)
    for q in range(stiffness.size):
        flux[q] += cells.width_m[n] * eta[q]


@njit(cache=True, error_model="numpy")
def _march_cells(cells: Cells, begin: int, end: int, stiffness: FloatArray, eta: FloatArray, flux: FloatArray) -> None:
    """March on from node `begin` to node `end`; two cells at a time halve the stores."""
    width, inertia = cells.width_m, cells.inertia_s2_m
    odd = begin + (end - begin) % 2
    for j in range(begin, odd):
        for q in range(stiffness.size):
            flux[q] += width[j] * eta[q]
            eta[q] -= inertia[j] * stiffness[q] * flux[q]
    for j in range(odd, end, 2):
        width_a, width_b, inertia_a, inertia_b = width[j], width[j + 1], inertia[j], inertia[j + 1]
        for q in range(stiffness.size):
            p, e = flux[q] + width_a * eta[q], eta[q]
            e -= inertia_a * stiffness[q] * p
            p += width_b * e
            flux[q] = p
            eta[q] = e - inertia_b * stiffness[q] * p


@njit(cache=True, error_model="numpy")
def march_damped(
    cells: Cells,
    omega: FloatArray,
    f2: float,
    friction_m_s: float,
    eta: FloatArray,
    flux: FloatArray,
    eta_break: FloatArray,
) -> None:
    """March all waves with constant linear friction; rows 0 and 1 of the results are real and imaginary parts."""
    n, first = cells.inertia_s2_m.size, 0
    er, ei, pr, pi = eta[0], eta[1], flux[0], flux[1]
    er[:] = 1.0
    ei[:] = 0.0
    pr[:] = 0.0
    pi[:] = 0.0
    if cells.zero_coast:
        first = 1
        rho = friction_m_s * cells.damping_per_m[0]
        for q in range(omega.size):
            start, growth, _, _ = coast_series(stiffness_at(omega[q], f2, rho) * cells.inertia_s2_m[0])
            er[q], ei[q] = start.real, start.imag
            pr[q], pi[q] = cells.width_m[0] * growth.real, cells.width_m[0] * growth.imag
    for j in range(first, n):
        if j == cells.i_break:
            eta_break[:] = eta
        width, inertia = cells.width_m[j], cells.inertia_s2_m[j]
        rho = friction_m_s * cells.damping_per_m[j]
        for q in range(omega.size):
            turn = f2 / (omega[q] * omega[q] + rho * rho)
            ar = inertia * omega[q] * omega[q] * (1.0 - turn)
            ai = inertia * omega[q] * rho * (1.0 + turn)
            pr[q] += width * er[q]
            pi[q] += width * ei[q]
            er[q] -= ar * pr[q] - ai * pi[q]
            ei[q] -= ar * pi[q] + ai * pr[q]
    if n == cells.i_break:
        eta_break[:] = eta
    for q in range(omega.size):
        pr[q] += cells.width_m[n] * er[q]
        pi[q] += cells.width_m[n] * ei[q]


@njit(cache=True, error_model="numpy")
def stiffness_at(omega: complex, f2: float, rho: float) -> complex:
    """Give omega (s - f^2 / s) with s = omega + i rho."""
    s = omega + 1j * rho
    return omega * (s - f2 * inverse(s))


@njit(cache=True, error_model="numpy")
def inverse(z: complex) -> complex:
    """Give 1 / z without the error that a compiled complex division raises at 0: not finite there."""
    size = z.real * z.real + z.imag * z.imag
    return complex(z.real / size, -z.imag / size)


@njit(cache=True, error_model="numpy")
def march_varied(
    cells: Cells, omega: float, f2: float, rho: FloatArray, flux_size: FloatArray
) -> tuple[complex, complex, complex]:
    """March one wave with its own damping in each cell; returns eta, P at the end and eta at the break.

    `flux_size` is filled with abs(P) at the faces.
    """
    eta, flux, eta_break = 1.0 + 0.0j, 0.0j, complex(math.nan)
    for j in range(rho.size):
        if j == cells.i_break:
            eta_break = eta
        pull = stiffness_at(complex(omega), f2, rho[j]) * cells.inertia_s2_m[j]
        if j == 0 and cells.zero_coast:
            eta, growth, _, _ = coast_series(pull)
            flux = cells.width_m[0] * growth
        else:
            flux += cells.width_m[j] * eta
            eta -= pull * flux
        flux_size[j] = abs(flux)
    if rho.size == cells.i_break:
        eta_break = eta
    return eta, flux + cells.width_m[rho.size] * eta, eta_break


@njit(cache=True, error_model="numpy")
def settle_drag(
    cells: Cells, omega: float, f2: float, outgoing: complex, drag_m: float, friction_m_s: FloatArray
) -> bool:
    """Turn r(x) = 8/(3 pi) Cd U(x) until it settles, in place; `drag_m` is Cd times the amplitude offshore.

    `outgoing` is -i kappa / sqrt(g H), which makes eta + outgoing * P twice the incident wave.
    """
    n = friction_m_s.size
    rho, flux_size = np.empty(n), np.empty(n)
    for _ in range(DRAG_TURNS_MAX):
        for j in range(n):
            rho[j] = friction_m_s[j] * cells.damping_per_m[j]
        eta, flux, _ = march_varied(cells, omega, f2, rho, flux_size)
        scale = LORENTZ * drag_m * omega / abs(eta + outgoing * flux)
        change = 0.0
        for j in range(n):
            new = math.sqrt(friction_m_s[j] * scale * flux_size[j] * cells.inverse_depth_per_m[j])
            change = max(change, abs(new / friction_m_s[j] - 1.0))
            friction_m_s[j] = new
        if change < DRAG_TOLERANCE:
            return True
    return False


@njit(cache=True, error_model="numpy")
def drag_wave(
    fine: Cells, coarse: Cells, omega: float, f2: float, outgoing: complex, drag_m: float, start_m_s: float
) -> tuple[complex, complex]:
    """Twice the incident wave per unit at the coast, and the elevation at the break, with drag; NaN if unsettled."""
    n = fine.inertia_s2_m.size
    friction = np.full(n, max(start_m_s, FRICTION_START_MIN_M_S))
    if not settle_drag(fine, omega, f2, outgoing, drag_m, friction):
        return complex(math.nan), complex(math.nan)
    size = np.empty(n)
    eta, flux, eta_break = march_varied(fine, omega, f2, friction * fine.damping_per_m, size)
    rho = np.empty(n // 2)
    for j in range(n // 2):
        k_a, k_b = fine.inertia_s2_m[2 * j], fine.inertia_s2_m[2 * j + 1]
        mean = (k_a * friction[2 * j] + k_b * friction[2 * j + 1]) / (k_a + k_b)
        rho[j] = mean * coarse.damping_per_m[j]
    eta_c, flux_c, eta_break_c = march_varied(coarse, omega, f2, rho, size)
    incident = _extrapolate(eta + outgoing * flux, eta_c + outgoing * flux_c)
    return incident, _extrapolate(eta_break, eta_break_c)


@njit(cache=True, error_model="numpy")
def _extrapolate(fine: complex, coarse: complex) -> complex:
    """Richardson's step for a second-order scheme on ns and ns / 2 cells."""
    return fine + (fine - coarse) / 3.0


@njit(cache=True, error_model="numpy")
def deep_ends(
    x_m: FloatArray,
    depth_m: FloatArray,
    deep_m: FloatArray,
    n_used: NDArray[np.int64],
    stepped: NDArray[np.bool_],
) -> None:
    """Count the samples used, 0 where none can be, and say whether a step to the deep follows, row by row."""
    for row in range(depth_m.shape[0]):
        _, last, _, _, step = used_end(x_m, depth_m[row], deep_m[row])
        n_used[row] = last + 1
        stepped[row] = step


@njit(cache=True, error_model="numpy")
def respond(
    x_m: FloatArray,
    depth_m: FloatArray,
    break_m: FloatArray,
    outer_m: FloatArray,
    coriolis: FloatArray,
    omega: FloatArray,
    friction_m_s: float,
    drag_m: FloatArray,
    incident: ComplexArray,
    damped_incident: ComplexArray,
    eta_break: ComplexArray,
) -> None:
    """Twice the incident wave per unit elevation at the coast, without and with friction, and eta at the break.

    Results are (n, p) and come filled with NaN; rows and waves that cannot be solved stay so. `drag_m` (p,) is
    drag coefficient times amplitude offshore, NaN for waves with linear friction.
    """
    p = omega.size
    omega_max = np.max(omega) if p > 0 else 0.0
    for row in range(depth_m.shape[0]):
        x, h, i_break = take_profile(x_m, depth_m[row], outer_m[row], break_m[row])
        if x.size == 0 or math.isnan(coriolis[row]):
            continue
        time_s = travel_time(x, h, x.size - 1)
        n_cells = cell_count(time_s, omega_max)
        fine, nodes = cut_cells(x, h, i_break, n_cells)
        coarse = coarsen(fine, nodes)
        f2 = coriolis[row] * coriolis[row]
        speed = math.sqrt(GRAVITY_M_S2 * outer_m[row])
        _respond_plain(fine, coarse, omega, f2, speed, incident[row], eta_break[row])
        damped_incident[row] = incident[row]
        if friction_m_s > 0.0:
            _respond_damped(fine, coarse, omega, f2, speed, friction_m_s, damped_incident[row], eta_break[row])
        for q in range(p):
            if not math.isnan(drag_m[q]):
                outgoing = -1j * math.sqrt(max(omega[q] * omega[q] - f2, 0.0)) / speed
                damped_incident[row, q], eta_break[row, q] = drag_wave(
                    fine, coarse, omega[q], f2, outgoing, drag_m[q], friction_m_s
                )
            if omega[q] * time_s > PHASE_PER_CELL_MAX * n_cells:
                incident[row, q] = damped_incident[row, q] = eta_break[row, q] = complex(math.nan)
            elif omega[q] * omega[q] <= f2:
                incident[row, q] = damped_incident[row, q] = complex(math.nan)


@njit(cache=True, error_model="numpy")
def _respond_plain(
    fine: Cells,
    coarse: Cells,
    omega: FloatArray,
    f2: float,
    speed: float,
    incident: ComplexArray,
    eta_break: ComplexArray,
) -> None:
    p = omega.size
    stiffness = omega * omega - f2
    eta, flux, at_break = np.empty((2, p)), np.empty((2, p)), np.full((2, p), math.nan)
    march_real(fine, stiffness, eta[0], flux[0], at_break[0])
    march_real(coarse, stiffness, eta[1], flux[1], at_break[1])
    for q in range(p):
        outgoing = -1j * math.sqrt(max(stiffness[q], 0.0)) / speed
        incident[q] = _extrapolate(eta[0, q] + outgoing * flux[0, q], eta[1, q] + outgoing * flux[1, q])
        eta_break[q] = _extrapolate(complex(at_break[0, q]), complex(at_break[1, q]))


@njit(cache=True, error_model="numpy")
def _respond_damped(
    fine: Cells,
    coarse: Cells,
    omega: FloatArray,
    f2: float,
    speed: float,
    friction_m_s: float,
    incident: ComplexArray,
    eta_break: ComplexArray,
) -> None:
    p = omega.size
    shape = (2, 2, p)
    eta, flux, at_break = np.empty(shape), np.empty(shape), np.full(shape, math.nan)
    march_damped(fine, omega, f2, friction_m_s, eta[0], flux[0], at_break[0])
    march_damped(coarse, omega, f2, friction_m_s, eta[1], flux[1], at_break[1])
    for q in range(p):
        outgoing = -1j * math.sqrt(max(omega[q] * omega[q] - f2, 0.0)) / speed
        incident[q] = _extrapolate(
            complex(eta[0, 0, q], eta[0, 1, q]) + outgoing * complex(flux[0, 0, q], flux[0, 1, q]),
            complex(eta[1, 0, q], eta[1, 1, q]) + outgoing * complex(flux[1, 0, q], flux[1, 1, q]),
        )
        eta_break[q] = _extrapolate(
            complex(at_break[0, 0, q], at_break[0, 1, q]), complex(at_break[1, 0, q], at_break[1, 1, q])
        )
