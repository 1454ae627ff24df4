"""Natural modes against closed forms, exact reference profiles, response peaks, differences and random errors."""

import json
import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import jn_zeros
from utils_response import ERROR, G, modes, omega_of, random_shelves, waves

from shelfmap.errors import ResponseError
from shelfmap.modes import DepthError, shelf_modes
from shelfmap.response import coriolis_rad_s

REFERENCE = json.loads((Path(__file__).parent / "data" / "reference_profiles.json").read_text())
M2 = omega_of("M2")


def coefficients(x, depth):
    """First period in units of 2 L / sqrt(g h1), and the next over the first."""
    period = modes(x, depth, x[-1]).node_period_s[0]
    unit = 2.0 * x[-1] / math.sqrt(G * max(depth))
    return period[0] / unit, period[1] / period[0], period[2] / period[0]


# ---- closed forms


def test_uniform_depth():
    """B1: 4 L / c and its odd fractions (Merian, from memory)."""
    assert coefficients([0, 1e5], [100, 100]) == pytest.approx([2, 1 / 3, 1 / 5], rel=1e-6)


def test_linear_depth():
    """B2, and the odd modes of B8 by symmetry: zeros of J0; depth zero at the head is the hard part."""
    got = coefficients([0, 1e5], [0, 100])
    zeros = jn_zeros(0, 3)
    assert got == pytest.approx([2 * math.pi / zeros[0], zeros[0] / zeros[1], zeros[0] / zeros[2]], rel=2e-6)
    assert got == pytest.approx([2.6127, 0.4357, 0.2779], abs=5e-5)
    assert got[0] / 2 == pytest.approx(1.3064, abs=5e-5)  # B8: two such halves, 2 L twice as long


def test_parabolic_depth():
    """B3, and the odd modes of B9 by symmetry: 2 pi L / (sqrt(m (m + 1)) c), m = 1, 3, 5."""
    x = np.linspace(0, 1e5, 2001)
    got = coefficients(x, 100 * (1 - (1 - x / 1e5) ** 2))
    # 2000 straight pieces lie under the parabola by 6e-8 of its depth, more near the head
    wanted = [math.pi / math.sqrt(2), math.sqrt(2 / 12), math.sqrt(2 / 30)]
    assert got == pytest.approx(wanted, rel=1e-5)
    assert got[0] / 2 == pytest.approx(1.1107, abs=5e-5)


def test_quarter_wave_and_travel_time_are_exact():
    """Travel time L / c on flat ground, 2 L / c on a slope from zero; quarter wave four times that."""
    c = math.sqrt(G * 100)
    flat, slope = modes([0, 1e5], [100, 100], 1e5), modes([0, 1e5], [0, 100], 1e5)
    assert flat.travel_time_s[0] == pytest.approx(1e5 / c, rel=1e-14)
    assert slope.travel_time_s[0] == pytest.approx(2e5 / c, rel=1e-14)
    assert slope.quarter_wave_s[0] == 4 * slope.travel_time_s[0]
    assert slope.node_period_s[0, 0] / slope.quarter_wave_s[0] == pytest.approx(0.653, abs=5e-4)


@pytest.mark.parametrize(
    ("name", "lat_deg", "width_km"),
    [
        ("M2", 0, 350.12), ("M2", 20, 374.51), ("M2", 45, 515.44), ("M2", 60, 798.84),
        ("S2", 0, 338.27), ("S2", 20, 360.11), ("S2", 45, 479.70), ("S2", 60, 682.17),
        ("K1", 0, 674.68), ("K1", 20, 924.93), ("O1", 0, 727.82), ("O1", 20, 1078.41),
    ],
)  # fmt: skip
def test_quarter_wave_width(name, lat_deg, width_km):
    """S1 and S8: the flat 100 m shelf of this width has the tide's period; widths are given to 10 m."""
    period = modes([0, width_km * 1e3], [100, 100], width_km * 1e3, lat=lat_deg).node_period_s[0, 0]
    assert period == pytest.approx(2 * math.pi / omega_of(name), rel=2e-5)


def test_linear_shelf_resonance_width():
    """S12: from 0 to 100 m the M2 width is 268.011 km, 0.76548 of the flat one; width given to 1 m."""
    period = modes([0, 268.011e3], [0, 100], 268.011e3).node_period_s[0, 0]
    assert period == pytest.approx(2 * math.pi / M2, rel=4e-6)


@pytest.mark.parametrize(
    ("shallow_m", "deep_m", "q"),
    [(50, 4000, 6.9954), (100, 4000, 4.9256), (150, 4000, 4.0046), (200, 4000, 3.4531), (100, 1000, 2.3985)],
)
def test_step_shelf_poles(shallow_m, deep_m, q):
    """S3: w_n = (c / L) ((2n + 1) pi / 2 - i atanh sqrt(h1/h2)), all three, to 1e-6; Q of the first."""
    got = modes([0, 2e5], [shallow_m] * 2, 2e5, outer=deep_m)
    rate = math.sqrt(G * shallow_m) / 2e5
    exact = rate * (np.array([1, 3, 5]) * math.pi / 2 - 1j * math.atanh(math.sqrt(shallow_m / deep_m)))
    np.testing.assert_allclose(got.pole_rad_s[0], exact, rtol=1e-6)
    assert got.q[0, 0] == pytest.approx(q, abs=5e-5)


def test_pole_of_the_tuned_shelf():
    """S7: Re 1.405189e-4, Im -1.426408e-5 rad/s."""
    pole = modes([0, 350.122e3], [100, 100], 350.122e3).pole_rad_s[0, 0]
    assert pole == pytest.approx(1.405189e-4 - 1.426408e-5j, rel=2e-6)


def test_sea_level_rise():
    """S13: one metre more water, dT/T = sqrt(h / (h + 1)) - 1."""
    for h, wanted in ((50, -0.00985), (100, -0.00496)):
        before, after = (modes([0, 2e5], [d, d], 2e5).node_period_s[0, 0] for d in (h, h + 1))
        assert after / before - 1 == pytest.approx(wanted, abs=5e-6)
        assert after / before == pytest.approx(math.sqrt(h / (h + 1)), rel=1e-12)


# ---- exact profiles


@pytest.mark.parametrize("case", REFERENCE["profiles"], ids=lambda case: f"profile{case['id']}")
def test_reference_profile(case):
    """Travel time, node periods and poles against Bessel functions at 30 digits; measured 7e-8 and 3e-7.

    The list of poles there may name one twice or one far off, so each of theirs near a node mode must be ours.
    """
    x = case["dx_m"] * np.arange(len(case["depth_m"]))
    got = modes(
        x, case["depth_m"], x[case["break_node"]], outer=case["outer_depth_m"], lat=case["lat_deg"], friction=1e-3
    )
    assert got.travel_time_s[0] / 3600 == pytest.approx(case["travel_time_h"], rel=1e-12)
    assert got.node_period_s[0] / 3600 == pytest.approx(case["node_period_h"], rel=2e-7)
    ours = np.stack([2 * np.pi / got.pole_rad_s[0].real / 3600, got.q[0]], axis=1)
    for theirs in case["pole_period_h_and_q"]:
        if theirs is not None:
            assert np.abs(ours / theirs - 1).max(axis=1).min() < 1e-6
    assert np.all(got.damped_q[0] < got.q[0])


# ---- poles


def test_pole_gives_the_peak_of_the_response():
    """Near a mode of high Q the gain is a Lorentzian of the pole: peak frequency and half-power width."""
    x, depth, break_m = [0, 250e3, 270e3], [30, 60, 4000], 250e3
    got = modes(x, depth, break_m)
    omega = np.linspace(0.8, 1.2, 4001) * got.pole_rad_s[0, 0].real
    gain = waves(x, depth, break_m, omega).gain[0]
    # the next mode leans on the peak: shift of order 1 / (8 Q^2), Q = 7
    assert omega[gain.argmax()] == pytest.approx(got.pole_rad_s[0, 0].real, rel=5e-3)
    width = np.ptp(omega[gain > gain.max() / math.sqrt(2)])
    assert omega[gain.argmax()] / width == pytest.approx(got.q[0, 0], rel=2e-2)


def test_poles_are_zeros_of_the_response_for_rough_profiles():
    """On 60 rough profiles all three poles are found, distinct, in order, damped and not far from the node modes.

    T_pole / T_node stays within 0.62 and 2: the limits within which a pole is taken for a node mode's.
    """
    x, depth, break_m = random_shelves(21, 60)
    f = coriolis_rad_s(np.linspace(-60, 60, 60))
    got = shelf_modes(
        x, depth, break_m, np.full(60, 4000.0), f, friction_m_s=1e-3, depth_error=ERROR, break_sd_m=np.zeros(60)
    )
    assert np.isfinite(got.pole_rad_s).all()
    assert np.isfinite(got.damped_pole_rad_s).all()
    assert np.all(got.pole_rad_s.imag < 0)
    assert np.all(np.diff(got.pole_rad_s.real, axis=1) > 0)
    assert np.all(got.damped_q < got.q)
    ratio = 2 * np.pi / got.pole_rad_s.real / got.node_period_s
    assert 0.9 < np.median(ratio[:, 0]) < 1.2
    assert ratio.min() > 1 / 1.6
    assert ratio.max() < 2.0


def test_damped_pole_of_flat_shelf():
    """The damped pole is a zero of cos kL - i (w / c2) sin kL / k with k^2 = w (w + i r / h) / (g h), f = 0."""
    r, h, deep, width = 1e-3, 100.0, 4000.0, 300e3
    omega = modes([0, width], [h, h], width, friction=r).damped_pole_rad_s[0, 0]
    s = omega + 1j * r / h
    k = np.sqrt(omega * s / (G * h))
    balance = np.cos(k * width) - 1j * omega / math.sqrt(G * deep) * np.sin(k * width) / k
    # |dF / d(w / w0)| is pi / 2: the balance is the relative error of the pole, about
    assert abs(balance) < 1e-6


def test_weak_friction_adds_its_loss():
    """1/Q rises by int(r u^2) / (w int(h u^2)), r / (w h) on a flat shelf, for friction that is weak (1e-5 m/s)."""
    got = modes([0, 300e3], [100, 100], 300e3, friction=1e-5)
    added = 1 / got.damped_q[0, 0] - 1 / got.q[0, 0]
    # to first order in 1 / Q only: (pi / 4Q)^2 is 2.5 % here
    assert added == pytest.approx(1e-5 / (100 * got.pole_rad_s[0, 0].real), rel=3e-2)


def test_modes_without_a_break():
    """No break: poles as before, node periods and all that needs a break NaN."""
    x, depth = [0, 200e3, 240e3], [20.0, 120.0, 4000.0]
    with_break, without = modes(x, depth, 200e3), modes(x, depth, np.nan)
    # another set of cells, on which the kink is no node
    assert without.pole_rad_s[0, 0] == pytest.approx(with_break.pole_rad_s[0, 0], rel=1e-6)
    for name in ("travel_time_s", "quarter_wave_s", "node_period_s", "period_sd_s", "kernel_peak_share"):
        assert np.isnan(getattr(without, name)).all()
    assert np.isnan(without.kernel_per_m).all()
    assert np.isnan(without.current_antinode_m).all()


# ---- invariances


@settings(max_examples=25, deadline=None)
@given(scale=st.floats(0.25, 4.0), stretch=st.floats(0.3, 3.0), seed=st.integers(0, 50))
def test_periods_scale_with_width_and_depth(scale, stretch, seed):
    """S14: T goes with width and with depth^(-1/2), Q stays; the third mode to 1e-6."""
    x, depth, break_m = random_shelves(seed, 1, 15)
    base = modes(x, depth[0], break_m[0], outer=5000.0)
    scaled = modes(x * stretch, depth[0] * scale, break_m[0] * stretch, outer=5000.0 * scale)
    np.testing.assert_allclose(scaled.node_period_s, base.node_period_s * stretch / math.sqrt(scale), rtol=1e-6)
    np.testing.assert_allclose(scaled.q, base.q, rtol=1e-5)
    np.testing.assert_allclose(scaled.kernel_per_m * stretch, base.kernel_per_m, rtol=1e-5, atol=1e-12)


def test_rows_do_not_see_each_other():
    """A batch equals batches of one, bit for bit."""
    x, depth, break_m = random_shelves(9, 6)
    depth[1, 25:] = np.nan
    depth[3] = np.nan
    break_m[4] = np.nan
    f = coriolis_rad_s(np.linspace(-70, 70, 6))

    def run(rows):
        n = len(rows)
        return shelf_modes(
            x, depth[rows], break_m[rows], np.full(n, 4000.0), f[rows],
            friction_m_s=1e-3, depth_error=ERROR, break_sd_m=np.full(n, 1e3),
        )  # fmt: skip

    whole, singles = run(np.arange(6)), [run(np.array([i])) for i in range(6)]
    for name in whole.__dataclass_fields__:
        np.testing.assert_array_equal(
            getattr(whole, name), np.concatenate([getattr(s, name) for s in singles]), err_msg=name
        )


# ---- sensitivity and uncertainty


def test_kernel_of_flat_shelf():
    """K = (2 / L) sin^2(pi x / 2 L) on a flat shelf, its integral 1, 0 beyond the break."""
    x = np.linspace(0, 400e3, 81)
    depth = np.where(x <= 300e3, 100.0, 4000.0)
    x = np.insert(x, 61, 300e3)
    depth = np.insert(depth, 61, 4000.0)
    got = modes(x, depth, 300e3)
    on = slice(0, 61)
    exact = 2 / 300e3 * np.sin(np.pi * x[on] / 600e3) ** 2
    np.testing.assert_allclose(got.kernel_per_m[0, on], exact, rtol=1e-4, atol=1e-11)
    assert np.trapezoid(got.kernel_per_m[0, on], x[on]) == pytest.approx(1.0, rel=1e-3)
    assert np.all(got.kernel_per_m[0, 62:] == 0.0)
    assert got.kernel_peak_share[0] == pytest.approx(5e3 * exact[-2:].mean(), rel=1e-3)
    assert got.current_antinode_m[0] == pytest.approx(300e3, rel=1e-2)


@pytest.mark.parametrize("lat_deg", [0.0, 45.0])
def test_kernel_against_differences(lat_deg):
    """dT/T = -1/2 int K dh/h dx mu/(mu + f^2), against central differences of 0.1 % in depth."""
    x = np.linspace(0, 260e3, 261)
    depth = np.interp(x, [0, 60e3, 200e3, 260e3], [5, 50, 150, 4000.0])
    base = modes(x, depth, 200e3, lat=lat_deg)
    f = float(coriolis_rad_s(lat_deg))
    share = 1 - (f * base.node_period_s[0, 0] / 2 / np.pi) ** 2
    for middle in (30e3, 100e3, 170e3):
        bump = 1e-3 * np.exp(-(((x - middle) / 12e3) ** 2))
        up, down = (modes(x, depth * (1 + s * bump), 200e3, lat=lat_deg).node_period_s[0, 0] for s in (1.0, -1.0))
        wanted = (up - down) / 2 / base.node_period_s[0, 0]
        got = -0.5 * share * np.trapezoid((base.kernel_per_m[0] * bump)[:201], x[:201])
        # trapezoids of 1 km under a bump of 12 km; second order in 0.1 %
        assert got == pytest.approx(wanted, rel=2e-3)


def test_one_shallow_cell_stands_out():
    """A cell of 1 m depth amid 80 m acts as a wall and takes a large share of K; without it no interval has 1 %."""
    x = np.linspace(0, 200e3, 401)
    depth = np.full(401, 80.0)
    smooth = modes(x, depth, 200e3).kernel_peak_share[0]
    depth[200:202] = 1.0
    assert smooth < 0.01
    assert modes(x, depth, 200e3).kernel_peak_share[0] > 0.05


@pytest.mark.parametrize(("lat_deg", "break_sd"), [(0.0, 0.0), (40.0, 3e3)])
def test_period_deviation_against_random_depths(lat_deg, break_sd):
    """Analytic deviation of the first period against 1000 seeded draws of correlated depth errors and breaks.

    A deviation from 1000 draws is itself known to 2.2 %; 9 % is four times that, and linearity costs little.
    """
    n = 1000
    x = np.linspace(0, 240e3, 121)
    depth = np.interp(x, [0, 224e3, 240e3], [20, 130, 4000.0])  # no kink at the break: that is not linear
    error = DepthError(fixed_m=1.0, per_depth=0.02, correlation_m=20e3)
    rng = np.random.default_rng(4)
    sigma = np.hypot(error.fixed_m, error.per_depth * depth)
    root = np.linalg.cholesky(np.exp(-np.abs(x[:, None] - x) / 20e3) + 1e-10 * np.eye(121))
    drawn = depth + sigma * (rng.normal(size=(n, 121)) @ root.T)
    got = shelf_modes(
        x, drawn, 200e3 + break_sd * rng.normal(size=n), np.full(n, 4500.0), np.full(n, coriolis_rad_s(lat_deg)),
        friction_m_s=0.0, depth_error=error, break_sd_m=np.zeros(n),
    )  # fmt: skip
    analytic = modes(x, depth, 200e3, lat=lat_deg, error=error, break_sd=break_sd).period_sd_s[0]
    assert analytic == pytest.approx(got.node_period_s[:, 0].std(), rel=0.09)


# ---- degenerate rows and messages


@pytest.mark.parametrize(
    "depth",
    [[np.nan, np.nan, np.nan], [50.0, 0.0, 100.0], [50.0, -3.0, 100.0], [5e3, 5e3, 5e3], [np.inf, 1.0, 2.0]],
)
def test_unusable_row_is_nan(depth):
    """A row without a usable profile is NaN throughout."""
    got = modes([0, 1e4, 2e4], depth, 1e4, friction=1e-3)
    for name in got.__dataclass_fields__:
        assert np.isnan(getattr(got, name)).all(), name


def test_break_too_near_for_the_cells():
    """A break of a minute's travel on a transect of hours needs more cells than there are: NaN, travel time kept."""
    got = modes([0, 1e3, 500e3], [50, 50, 100.0], 1e3)
    assert got.travel_time_s[0] == pytest.approx(1e3 / math.sqrt(G * 50), rel=1e-12)
    assert np.isnan(got.node_period_s).all()
    assert np.isnan(got.pole_rad_s).all()


@pytest.mark.parametrize("friction", [-1.0, np.nan, np.inf])
def test_friction_message(friction):
    """Friction below 0 is refused."""
    with pytest.raises(ResponseError, match="from 0 up"):
        modes([0, 1e5], [100, 100], 1e5, friction=friction)


@pytest.mark.parametrize(
    ("values", "words"),
    [((-1, 0, 1e4), "both must be 0 or more"), ((0, np.nan, 1e4), "both must"), ((0, 0, 0), "metres above 0")],
)
def test_depth_error_messages(values, words):
    """Depth errors that make no sense are refused with the cure."""
    with pytest.raises(ResponseError, match=words):
        DepthError(fixed_m=values[0], per_depth=values[1], correlation_m=values[2])
