"""Response of 200 transects at 60 periods: the compiled march against one banded solve per transect and period.

Both on about 400 cells of equal travel time, without friction, in one run. Run with
``pytest tests/bench/bench_response.py -o "addopts=" -s``; the last test prints the ratio.
"""

import math
import time

import numpy as np
import pytest
from scipy.linalg import solve_banded

from shelfmap._kernels import cells as kernel_cells
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


def banded_gain(x, depth):
    """Gain at all periods of one profile: the same tridiagonal system, solved anew for each period."""
    used_x, used_h, i_break = kernel_cells.take_profile(x, depth, DEEP_M, np.nan)
    cells, _ = kernel_cells.cut_cells(used_x, used_h, i_break, M)
    k, w = cells.inertia_s2_m, cells.width_m
    n, c = k.size, math.sqrt(GRAVITY_M_S2 * DEEP_M)
    band = np.zeros((3, n + 1), dtype=complex)
    right = np.zeros(n + 1, dtype=complex)
    right[n] = 1.0
    gain = np.empty(OMEGA.size)
    for q, omega in enumerate(OMEGA):
        d = omega * omega
        band[0, 1:] = -1 / k
        band[2, :-1] = -1 / k
        band[1] = -d * w
        band[1, :-1] += 1 / k
        band[1, 1:] += 1 / k
        out = 1j * omega / (c * d)
        band[1, n] = 1 + out / k[-1] - 1j * omega / c * w[n]
        band[2, n - 1] = -out / k[-1]
        gain[q] = abs(solve_banded((1, 1), band, right)[0])
    return gain


def respond(friction=0.0, lat=0.0):
    x, depth, break_m = transects()
    rows = (x, depth, break_m, np.full(N, DEEP_M), np.full(N, lat))
    return wave_response(*rows, OMEGA, friction=Friction(linear_m_s=friction))


def modes():
    x, depth, break_m = transects()
    error = DepthError(fixed_m=0.5, per_depth=0.012, correlation_m=20e3)
    return shelf_modes(
        x, depth, break_m, np.full(N, DEEP_M), np.zeros(N), friction_m_s=1e-3, depth_error=error,
        break_sd_m=np.full(N, 1e3),
    )  # fmt: skip


@pytest.mark.benchmark(group="response 200 x 400 x 60")
def test_compiled(benchmark):
    benchmark.pedantic(respond, rounds=30, warmup_rounds=2)
    MEDIANS["compiled"] = benchmark.stats.stats.median


@pytest.mark.benchmark(group="response 200 x 400 x 60")
def test_compiled_with_friction_and_rotation(benchmark):
    benchmark.pedantic(respond, args=(1e-3, 5e-5), rounds=20, warmup_rounds=2)


@pytest.mark.benchmark(group="response 200 x 400 x 60")
def test_banded_loop(benchmark):
    x, depth, _ = transects()
    gains = benchmark.pedantic(lambda: np.array([banded_gain(x, row) for row in depth]), rounds=3)
    MEDIANS["banded"] = benchmark.stats.stats.median
    # the march extrapolates, the plain system is of second order: 0.045^2 / 12 a wavelength, grown at resonance
    np.testing.assert_allclose(gains, respond().gain, rtol=2e-2)
    assert np.median(np.abs(gains / respond().gain - 1)) < 1e-4


@pytest.mark.benchmark(group="modes of 200 transects")
def test_modes(benchmark):
    benchmark.pedantic(modes, rounds=5, warmup_rounds=1)


def test_ratio(capsys):
    """The public call, checks and copies included, is 500 times faster than the loop."""
    if len(MEDIANS) < 2:
        pytest.skip("needs the two runs above")
    ratio = MEDIANS["banded"] / MEDIANS["compiled"]
    with capsys.disabled():
        print(f"\n{time.strftime('%F')} banded loop / compiled: {ratio:.0f}x")  # noqa: T201
    assert ratio > 500
