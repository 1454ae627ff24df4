"""Natural periods with a node at the break, and complex poles of the open shelf."""

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
)
from shelfmap._kernels.march import coast_series, inverse
from shelfmap._kernels.sensitivity import first_mode, mode_shape
from shelfmap.constants import GRAVITY_M_S2

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

N_MODES = 3
START_SHARE = 0.9  # Newton starts from this share of the node mode
POLE_SHARE_MIN, POLE_SHARE_MAX = 0.5, 1.6  # a pole further from its node mode belongs to something else
NEWTON_TURNS_MAX = 60
HIGHEST_MU = 1e12  # 1/s^2, far above any wave: ends the search where depths are absurd
NEWTON_TOLERANCE = 1e-11
FOLLOW_TOLERANCE = 1e-3
SAME_POLE = 1e-6
LEAST_LOSS = 1e-9  # a mode that loses less has no Q that numbers of 16 digits could tell
FRICTION_SHARES = (0.1, 0.25, 0.5, 0.75, 1.0)
FRICTION_LEAP_MAX = 0.5  # a damped pole that moves by more in one step is another one


@njit(cache=True, error_model="numpy")
def march_node(cells: Cells, i_end: int, mu: float) -> tuple[float, float, int]:
    """Elevation at node `i_end`, its derivative by mu, and the nodal points before it."""
    eta, eta_mu, flux, flux_mu, nodal = 1.0, 0.0, 0.0, 0.0, 0
    for j in range(i_end):
        before = eta
        inertia = cells.inertia_s2_m[j]
        if j == 0 and cells.zero_coast:
            value, growth, value_y, growth_y = coast_series(complex(mu * inertia))
            eta, eta_mu = value.real, value_y.real * inertia
            flux, flux_mu = cells.width_m[0] * growth.real, cells.width_m[0] * growth_y.real * inertia
        else:
            flux += cells.width_m[j] * eta
            flux_mu += cells.width_m[j] * eta_mu
            eta_mu -= inertia * (flux + mu * flux_mu)
            eta -= inertia * mu * flux
        if before * eta < 0.0 or eta == 0.0:
            nodal += 1
    return eta, eta_mu, nodal


@njit(cache=True, error_model="numpy")
def node_mode(cells: Cells, i_end: int, time_s: float, number: int) -> float:
    """Eigenvalue mu of mode `number` (from 1) with a node at `i_end`: counting of nodal points, then Newton."""
    low, high = 0.0, (number * math.pi / time_s) ** 2
    count_low, (_, _, count_high) = 0, march_node(cells, i_end, high)
    while count_high < number:
        if not high < HIGHEST_MU:
            return math.nan
        low, count_low = high, count_high
        high *= 2.0
        count_high = march_node(cells, i_end, high)[2]
    while count_low < number - 1 or count_high > number:
        middle = 0.5 * (low + high)
        if middle in (low, high):
            return math.nan
        count = march_node(cells, i_end, middle)[2]
        if count >= number:
            high, count_high = middle, count
        else:
            low, count_low = middle, count
    mu = 0.5 * (low + high)
    for _ in range(NEWTON_TURNS_MAX):
        eta, eta_mu, count = march_node(cells, i_end, mu)
        if count >= number:
            high = mu
        else:
            low = mu
        new = mu - eta / eta_mu if eta_mu != 0.0 else low
        if not low < new < high:
            new = 0.5 * (low + high)
        if abs(new - mu) <= 1e-13 * mu:
            return new
        mu = new
    return mu


@njit(cache=True, error_model="numpy")
def march_pole(cells: Cells, kappa: complex, speed: float) -> tuple[complex, complex]:
    """Twice the incident wave at complex kappa = sqrt(omega^2 - f^2), and its derivative by kappa."""
    stiffness = kappa * kappa
    eta, eta_d, flux, flux_d = 1.0 + 0.0j, 0.0j, 0.0j, 0.0j
    n = cells.inertia_s2_m.size
    for j in range(n):
        inertia = cells.inertia_s2_m[j]
        if j == 0 and cells.zero_coast:
            eta, growth, eta_y, growth_y = coast_series(stiffness * inertia)
            eta_d = eta_y * inertia
            flux, flux_d = cells.width_m[0] * growth, cells.width_m[0] * growth_y * inertia
        else:
            flux += cells.width_m[j] * eta
            flux_d += cells.width_m[j] * eta_d
            eta_d -= inertia * (flux + stiffness * flux_d)
            eta -= inertia * stiffness * flux
    flux += cells.width_m[n] * eta
    flux_d += cells.width_m[n] * eta_d
    outgoing = -1j * kappa / speed
    return eta + outgoing * flux, 2.0 * kappa * (eta_d + outgoing * flux_d) - 1j / speed * flux


@njit(cache=True, error_model="numpy")
def march_damped_pole(
    cells: Cells, omega: complex, f2: float, friction_m_s: float, speed: float
) -> tuple[complex, complex]:
    """Twice the incident wave at complex omega with linear friction, and its derivative by omega."""
    eta, eta_w, flux, flux_w = 1.0 + 0.0j, 0.0j, 0.0j, 0.0j
    n = cells.inertia_s2_m.size
    for j in range(n):
        s = omega + 1j * friction_m_s * cells.damping_per_m[j]
        inverse_s = inverse(s)
        turn = f2 * inverse_s
        pull = omega * (s - turn) * cells.inertia_s2_m[j]
        pull_w = (s - turn + omega * (1.0 + turn * inverse_s)) * cells.inertia_s2_m[j]
        if j == 0 and cells.zero_coast:
            eta, growth, eta_y, growth_y = coast_series(pull)
            eta_w = eta_y * pull_w
            flux, flux_w = cells.width_m[0] * growth, cells.width_m[0] * growth_y * pull_w
        else:
            flux += cells.width_m[j] * eta
            flux_w += cells.width_m[j] * eta_w
            eta_w -= pull_w * flux + pull * flux_w
            eta -= pull * flux
    flux += cells.width_m[n] * eta
    flux_w += cells.width_m[n] * eta_w
    kappa = outer_kappa(omega, f2)
    return eta - 1j * kappa / speed * flux, eta_w - 1j / speed * (kappa * flux_w + omega * inverse(kappa) * flux)


@njit(cache=True, error_model="numpy")
def outer_kappa(omega: complex, f2: float) -> complex:
    """sqrt(omega^2 - f^2) on the side of outgoing waves."""
    kappa = complex(np.sqrt(omega * omega - f2))
    return kappa if kappa.real >= 0.0 else -kappa


@njit(cache=True, error_model="numpy")
def find_pole(fine: Cells, coarse: Cells, speed: float, start: complex, found: ComplexArray, n_found: int) -> complex:
    """Newton from `start` for a pole other than those found, each found one and its mirror divided out."""
    kappa = start
    for turn in range(NEWTON_TURNS_MAX):
        value_f, slope_f = march_pole(fine, kappa, speed)
        value_c, slope_c = march_pole(coarse, kappa, speed)
        value, slope = value_f + (value_f - value_c) / 3.0, slope_f + (slope_f - slope_c) / 3.0
        if value == 0.0:
            return kappa
        rate = slope * inverse(value)
        for i in range(n_found):
            rate -= inverse(kappa - found[i]) + inverse(kappa + found[i].conjugate())
        if rate == 0.0 or not math.isfinite(abs(rate)):
            break
        step = inverse(rate)
        if abs(step) > 0.5 * abs(kappa):
            step *= 0.5 * abs(kappa) / abs(step)
        kappa -= step
        if abs(step) <= NEWTON_TOLERANCE * abs(kappa) and turn > 0:
            return kappa
    return complex(math.nan, math.nan)


@njit(cache=True, error_model="numpy")
def find_poles(fine: Cells, coarse: Cells, speed: float, starts: FloatArray, kappa: ComplexArray) -> None:
    """Fill `kappa` (3,) with one pole for each node mode, all distinct, by rising real part; NaN where none was found.

    From each start plain Newton first; where that ends on a pole already found or far off, Newton with the poles
    found divided out.
    """
    found = np.empty(starts.size, dtype=np.complex128)
    n_found = 0
    for i in range(starts.size):
        for n_divided in (0, n_found):
            pole = find_pole(fine, coarse, speed, complex(START_SHARE * starts[i]), found, n_divided)
            fresh = (
                pole.imag < -LEAST_LOSS * pole.real
                and POLE_SHARE_MIN * starts[i] < pole.real < POLE_SHARE_MAX * starts[i]
            )
            for k in range(n_found):
                if abs(found[k] - pole) <= SAME_POLE * abs(pole):
                    fresh = False
            if fresh:
                found[n_found] = pole
                n_found += 1
                kappa[i] = pole
                break
    for i in range(1, n_found):  # by hand: np.argsort takes 5 s to compile
        k = i
        while k > 0 and found[k].real < found[k - 1].real:
            found[k], found[k - 1] = found[k - 1], found[k]
            k -= 1
    n = 0
    for i in range(starts.size):
        if not math.isnan(kappa[i].real):
            kappa[i] = found[n]
            n += 1


@njit(cache=True, error_model="numpy")
def damped_newton(
    fine: Cells, coarse: Cells, speed: float, f2: float, friction_m_s: float, start: complex, tolerance: float
) -> complex:
    """Newton from `start` for a damped pole; NaN where it leaps, does not settle or settles on pure decay.

    On the coarse cells alone where these are given for the fine ones too.
    """
    omega, is_coarse = start, fine.inertia_s2_m.size == coarse.inertia_s2_m.size
    for _ in range(NEWTON_TURNS_MAX):
        value, slope = march_damped_pole(coarse, omega, f2, friction_m_s, speed)
        if not is_coarse:
            value_f, slope_f = march_damped_pole(fine, omega, f2, friction_m_s, speed)
            value, slope = value_f + (value_f - value) / 3.0, slope_f + (slope_f - slope) / 3.0
        if slope == 0.0 or not math.isfinite(abs(slope)):
            break
        step = value * inverse(slope)
        omega -= step
        if not abs(omega - start) <= FRICTION_LEAP_MAX * abs(start):
            break
        if abs(step) <= tolerance * abs(omega):
            return omega if omega.real > 0.0 else complex(math.nan, math.nan)
    return complex(math.nan, math.nan)


@njit(cache=True, error_model="numpy")
def damp_pole(fine: Cells, coarse: Cells, speed: float, f2: float, friction_m_s: float, pole: complex) -> complex:
    """Follow a frictionless pole omega to full friction; NaN where it is lost or turns into pure decay.

    Only the last step has to be exact: those before it, on the coarse cells, lead to the right pole.
    """
    omega = pole
    for share in FRICTION_SHARES[:-1]:
        omega = damped_newton(coarse, coarse, speed, f2, share * friction_m_s, omega, FOLLOW_TOLERANCE)
    return damped_newton(fine, coarse, speed, f2, friction_m_s, omega, NEWTON_TOLERANCE)


@njit(cache=True, error_model="numpy")
def friction_loss(cells: Cells, pole: complex, f2: float, friction_m_s: float) -> float:
    """1/Q that weak friction adds: int(r u^2) / (omega int(h u^2)), u taken at the real part of the pole."""
    mu = max(pole.real * pole.real - f2, 0.0)
    eta, flux, loss, energy = 1.0, 0.0, 0.0, 0.0
    for j in range(cells.inertia_s2_m.size):
        if j == 0 and cells.zero_coast:
            start, growth, _, _ = coast_series(complex(mu * cells.inertia_s2_m[0]))
            eta, flux = start.real, cells.width_m[0] * growth.real
        else:
            flux += cells.width_m[j] * eta
            eta -= mu * cells.inertia_s2_m[j] * flux
        energy += flux * flux * cells.inertia_s2_m[j]
        loss += flux * flux * cells.inertia_s2_m[j] * cells.damping_per_m[j] * friction_m_s
    return loss / (pole.real * energy)


@njit(cache=True, error_model="numpy")
def shelf_rows(
    x_m: FloatArray,
    depth_m: FloatArray,
    break_m: FloatArray,
    outer_m: FloatArray,
    coriolis: FloatArray,
    friction_m_s: float,
    depth_error: tuple[float, float, float],
    break_sd_m: FloatArray,
    time_s: FloatArray,
    node_period_s: FloatArray,
    pole: ComplexArray,
    damped_pole: ComplexArray,
    period_sd_s: FloatArray,
    kernel: FloatArray,
    share: FloatArray,
    antinode_m: FloatArray,
) -> None:
    """Modes of every profile; results come filled with NaN and stay so where there is no value."""
    for row in range(depth_m.shape[0]):
        x, h, i_break = take_profile(x_m, depth_m[row], outer_m[row], break_m[row])
        if x.size == 0 or math.isnan(coriolis[row]):
            continue
        last = x.size - 1
        total_s = travel_time(x, h, last)
        shelf_s = travel_time(x, h, i_break) if i_break > 0 else total_s
        omega = N_MODES * math.pi / shelf_s
        n_cells = cell_count(total_s, omega)
        if i_break > 0:
            time_s[row] = shelf_s
        if omega * total_s > PHASE_PER_CELL_MAX * n_cells:
            continue
        fine, nodes = cut_cells(x, h, i_break, n_cells)
        coarse = coarsen(fine, nodes)
        f2 = coriolis[row] * coriolis[row]
        n_end = fine.i_break if i_break > 0 else fine.inertia_s2_m.size
        starts = np.empty(N_MODES)
        mu_first = math.nan
        for i in range(N_MODES):
            mu = node_mode(fine, n_end, shelf_s, i + 1)
            starts[i] = math.sqrt(mu)
            if i_break > 0:
                mu_first = mu if i == 0 else mu_first
                mu += (mu - node_mode(coarse, n_end // 2, shelf_s, i + 1)) / 3.0
                node_period_s[row, i] = 2.0 * math.pi / math.sqrt(mu + f2)
        _poles(fine, coarse, starts, f2, outer_m[row], friction_m_s, pole[row], damped_pole[row])
        if i_break > 0:
            size = fine.i_break
            face_flux, eta, flux = np.empty(size), np.empty(size + 1), np.empty(size + 1)
            mode_shape(fine, nodes, mu_first, face_flux, eta, flux)
            first_mode(
                fine, nodes, face_flux, eta, flux, mu_first / (mu_first + f2), depth_error, break_sd_m[row],
                x_m, depth_m[row], x, h, i_break, kernel[row], share[row : row + 1], antinode_m[row : row + 1],
                period_sd_s[row : row + 1],
            )  # fmt: skip
            period_sd_s[row] *= node_period_s[row, 0]


@njit(cache=True, error_model="numpy")
def _poles(
    fine: Cells,
    coarse: Cells,
    starts: FloatArray,
    f2: float,
    outer_m: float,
    friction_m_s: float,
    pole: ComplexArray,
    damped_pole: ComplexArray,
) -> None:
    """Fill poles (3,) without and with friction, as omega."""
    speed = math.sqrt(GRAVITY_M_S2 * outer_m)
    find_poles(fine, coarse, speed, starts, pole)
    for i in range(N_MODES):
        if math.isnan(pole[i].real):
            continue
        pole[i] = np.sqrt(pole[i] * pole[i] + f2)
        damped = pole[i]
        if friction_m_s > 0.0:
            damped = damp_pole(fine, coarse, speed, f2, friction_m_s, pole[i])
            for k in range(i):
                if abs(damped - damped_pole[k]) <= SAME_POLE * abs(damped):
                    damped = complex(math.nan, math.nan)
            if math.isnan(damped.real):
                loss = friction_loss(fine, pole[i], f2, friction_m_s)
                damped = pole[i] - 0.5j * pole[i].real * loss
        damped_pole[i] = damped
