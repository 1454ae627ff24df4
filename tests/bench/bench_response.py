"""Response of 200 transects at 60 periods: the compiled march against one banded solve per transect and period.

March and banded loop solve the same equations on the same 400 cells, without friction, in one run. The whole call
also checks, copies, cuts cells and marches a second grid to extrapolate (fourth order for second). Run with
``pytest tests/bench/bench_response.py -o "addopts=" -s``; the last test prints the ratio.
"""

import math
import time

import numpy as np
import pytest
from numba import njit
from scipy.linalg import solve_banded

from shelfmap._kernels import cells as kernel_cells
from shelfmap._kernels import march as kernel_march
from shelfmap.constants import GRAVITY_M_S2
from shelfmap.modes import DepthError, shelf_modes
from shelfmap.response import Friction, wave_response

N, M, DEEP_M = 200, 400, 4000.0
PERIODS_H = np.geomspace(1.5, 25.0, 60)
OMEGA = 2 * np.pi / (3600 * PERIODS_H)
MEDIANS: dict[str, float] = {}


def transects():
    rng = np.random.default_rng(5)
    x = np.linspace(0, 400e3, M + 1)
    break_m = rng.uniform(150e3, 250e3, N)
    shelf = 10 + rng.uniform(80, 150, (N, 1)) * np.minimum(x / break_m[:, None], 1)
    slope = np.maximum(x - break_m[:, None], 0) / 30
    return x, (shelf + slope) * np.exp(rng.normal(0, 0.05, (N, M + 1))), break_m


def all_cells():
    """Cells of every transect: widths (n, M + 1) and inertia (n, M)."""
    x, depth, _ = transects()
    width, inertia = np.empty((N, M + 1)), np.empty((N, M))
    for row in range(N):
        used_x, used_h, i_break = kernel_cells.take_profile(x, depth[row], DEEP_M, np.nan)
        cells, _ = kernel_cells.cut_cells(used_x, used_h, i_break, M)
        width[row], inertia[row] = cells.width_m, cells.inertia_s2_m
    return width, inertia


@njit
def march_all(width, inertia, stiffness, eta, flux, at_break):
    for row in range(width.shape[0]):
        cells = kernel_cells.Cells(width[row], inertia[row], inertia[row], inertia[row], False, -1)
        kernel_march.march_real(cells, stiffness, eta[row], flux[row], at_break)


def marched(width, inertia):
    """Gain (n, p) by the compiled march on given cells."""
    eta, flux, at_break = np.empty((N, OMEGA.size)), np.empty((N, OMEGA.size)), np.empty(OMEGA.size)
    march_all(width, inertia, OMEGA**2, eta, flux, at_break)
    return 1 / np.abs(eta - 1j * flux * OMEGA / math.sqrt(GRAVITY_M_S2 * DEEP_M))


def banded(width, inertia):
    """Gain (n, p): the same tridiagonal system, solved anew for each transect and period."""
    return np.array([banded_gain(w, k) for w, k in zip(width, inertia, strict=True)])


def banded_gain(w, k):
    n, c = k.size, math.sqrt(GRAVITY_M_S2 * DEEP_M)
    band = np.zeros((3, n + 1), dtype=complex)
    right = np.zeros(n + 1, dtype=complex)
    right[n] = 1.0
    gain = np.empty(OMEGA.size)
    band[0, 1:] = -1 / k
    for q, omega in enumerate(OMEGA):
        band[2, :-1] = -1 / k
        band[1] = -omega * omega * w
        band[1, :-1] += 1 / k
        band[1, 1:] += 1 / k
        out = 1j / (c * omega)
        band[1, n] = 1 + out / k[-1] - 1j * omega / c * w[n]
        band[2, n - 1] = -out / k[-1]
        gain[q] = abs(solve_banded((1, 1), band, right)[0])
    return gain


def respond(profiles, friction=0.0, f=0.0):
    x, depth, break_m = profiles
    rows = (x, depth, break_m, np.full(N, DEEP_M), np.full(N, f))
    return wave_response(*rows, OMEGA, friction=Friction(linear_m_s=friction))


def modes(profiles):
    x, depth, break_m = profiles
    error = DepthError(fixed_m=0.5, per_depth=0.012, correlation_m=20e3)
    return shelf_modes(
        x, depth, break_m, np.full(N, DEEP_M), np.zeros(N), friction_m_s=1e-3, depth_error=error,
        break_sd_m=np.full(N, 1e3),
    )  # fmt: skip


@pytest.mark.benchmark(group="response 200 x 400 x 60")
def test_march(benchmark):
    cells = all_cells()
    benchmark.pedantic(marched, args=cells, rounds=50, warmup_rounds=2)
    MEDIANS["march"] = benchmark.stats.stats.median


@pytest.mark.benchmark(group="response 200 x 400 x 60")
def test_whole_call(benchmark):
    benchmark.pedantic(respond, args=(transects(),), rounds=30, warmup_rounds=2)
    MEDIANS["whole call"] = benchmark.stats.stats.median


@pytest.mark.benchmark(group="response 200 x 400 x 60")
def test_whole_call_with_friction_and_rotation(benchmark):
    benchmark.pedantic(respond, args=(transects(), 1e-3, 5e-5), rounds=20, warmup_rounds=2)


@pytest.mark.benchmark(group="response 200 x 400 x 60")
def test_banded_loop(benchmark):
    cells = all_cells()
    gains = benchmark.pedantic(banded, args=cells, rounds=3)
    MEDIANS["banded loop"] = benchmark.stats.stats.median
    # the same equations: rounding only, through 400 cells and a system of condition about 1e5
    np.testing.assert_allclose(gains, marched(*cells), rtol=1e-8)


@pytest.mark.benchmark(group="modes of 200 transects")
def test_modes(benchmark):
    benchmark.pedantic(modes, args=(transects(),), rounds=5, warmup_rounds=1)


def test_ratio(capsys):
    """The march is hundreds of times faster than the loop on the same cells: 500 on a quiet machine."""
    if len(MEDIANS) < 3:
        pytest.skip("needs the runs above")
    march, whole = (MEDIANS["banded loop"] / MEDIANS[name] for name in ("march", "whole call"))
    with capsys.disabled():
        print(f"\n{time.strftime('%F')} banded loop / march: {march:.0f}x, banded loop / whole call: {whole:.0f}x")  # noqa: T201
    assert march > 250
