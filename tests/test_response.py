"""The 1-D response against closed forms, exact reference profiles, an ODE solver and its own plain twins."""

import json
import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import j0
from utils_response import (
    G,
    end_state,
    ode_incident,
    omega_of,
    plain_cell,
    plain_drag,
    plain_march,
    random_shelves,
    waves,
)

from shelfmap._kernels import cells as kernel_cells
from shelfmap._kernels import march as kernel_march
from shelfmap.errors import ResponseError
from shelfmap.response import Friction, coriolis_rad_s, deep_end, wave_response

REFERENCE = json.loads((Path(__file__).parent / "data" / "reference_profiles.json").read_text())
M2, K1 = omega_of("M2"), omega_of("K1")
FLAT = [100.0, 100.0]
# the march is cut so that tides on shelves come out to 1e-7; the tables print 5 decimals
TABLE = 1e-5


# ---- closed forms


def test_step_shelf_gain_by_width():
    """S2: gain = 1 / sqrt(cos^2 kL + r^2 sin^2 kL), 100 m beside 4000 m."""
    widths = np.array([50, 100, 150, 200, 250, 300, 350, 400]) * 1e3
    wanted = [1.02503, 1.10663, 1.26877, 1.57267, 2.18819, 3.68914, 6.32452, 3.70084]
    gain = [waves([0, w], FLAT, w, M2).gain[0, 0] for w in widths]
    assert gain == pytest.approx(wanted, abs=TABLE)


@pytest.mark.parametrize(
    ("shallow_m", "deep_m", "peak"),
    [(50, 4000, 8.9443), (100, 4000, 6.3246), (150, 4000, 5.1640), (200, 4000, 4.4721), (100, 1000, 3.1623)],
)
def test_step_shelf_peak_gain(shallow_m, deep_m, peak):
    """S3: the gain at kL = pi / 2 is sqrt(h2 / h1)."""
    width = math.sqrt(G * shallow_m) * math.pi / 2 / M2
    gain = waves([0, width], [shallow_m, shallow_m], width, M2, outer=deep_m).gain[0, 0]
    assert gain == pytest.approx(peak, abs=1e-4)


def test_step_shelf_with_friction():
    """S4: gain at resonance for growing linear friction."""
    wanted = [6.32456, 6.10860, 5.37428, 4.67182, 3.70281, 3.06592]
    width = 350.122e3
    got = [
        waves([0, width], FLAT, width, M2, friction=r).damped_gain[0, 0] for r in (0.0, 1e-4, 5e-4, 1e-3, 2e-3, 3e-3)
    ]
    assert got == pytest.approx(wanted, abs=TABLE)


def reflection(width_m, friction_m_s):
    eta, flux = end_state([0.0, width_m], FLAT, M2, 0.0, friction_m_s, 256)
    outgoing = 1j * flux * M2 / math.sqrt(G * 4000.0)
    return abs((eta + outgoing) / (eta - outgoing))


def test_reflected_share_with_friction():
    """S5 and S6: what comes back from the shelf, and the shelf that swallows all."""
    wanted = [1, 0.93171, 0.69963, 0.47783, 0.17305, 0.03882]
    got = [reflection(350.122e3, r) for r in (0.0, 1e-4, 5e-4, 1e-3, 2e-3, 3e-3)]
    assert got == pytest.approx(wanted, abs=TABLE)
    # the table gives width and friction to 7 digits
    assert reflection(351.9083e3, 2.809408e-3) < 1e-6


def test_edge_ratio_by_latitude():
    """S9: 1 / cos(kL) with k^2 = (w^2 - f^2) / (g h), below the inertial frequency too."""
    lat = np.array([0.0, 20.0, 29.0, 45.0, 60.0])
    out = wave_response(
        [0, 300e3],
        np.full((5, 2), 100.0),
        np.full(5, 300e3),
        np.full(5, 4000.0),
        coriolis_rad_s(lat),
        [M2, K1],
        friction=Friction(linear_m_s=0.0),
    )
    assert out.edge_ratio[:, 0] == pytest.approx([4.48473, 3.25245, 2.52226, 1.63829, 1.20338], abs=TABLE)
    assert out.edge_ratio[:, 1] == pytest.approx([1.30576, 1.14548, 1.01478, 0.79745, 0.65410], abs=TABLE)
    np.testing.assert_array_equal(np.isnan(out.gain[:, 1]), [False, False, False, True, True])
    np.testing.assert_array_equal(out.below_inertial[:, 1], [False, False, False, True, True])


@pytest.mark.parametrize(
    ("name", "lat_deg"),
    [("K1", 30.0), ("O1", 27.613), ("P1", 29.820), ("Q1", 26.449), ("M2", 74.472), ("N2", 70.980), ("S2", 85.765)],
)
def test_critical_latitude(name, lat_deg):
    """S10: no wave comes from the deep poleward of w = f; half the last digit given on either side, S2 is flat."""
    for shift, below in ((-0.006, False), (0.006, True)):
        for sign in (1, -1):
            out = waves([0, 1e5], FLAT, 1e5, omega_of(name), lat=sign * (lat_deg + shift))
            assert out.below_inertial[0, 0] == below
            assert np.isnan(out.gain[0, 0]) == below


def test_linear_shelf_edge_ratio():
    """S11: 1 / J0(2 w sqrt(L / (g s))) on a shelf from 0 to 100 m, and the flat one beside it."""
    widths = np.array([50, 100, 150, 200]) * 1e3
    linear = [waves([0, w], [0, 100], w, M2).edge_ratio[0, 0] for w in widths]
    flat = [waves([0, w], FLAT, w, M2).edge_ratio[0, 0] for w in widths]
    assert linear == pytest.approx([1.05229, 1.23667, 1.67817, 2.91423], abs=TABLE)
    assert flat == pytest.approx([1.02570, 1.10983, 1.27881, 1.60325], abs=TABLE)
    exact = [1.0 / j0(2.0 * M2 * w / math.sqrt(G * 100.0)) for w in widths]
    # measured 4.4e-7 at the widest, where the break nears a node
    assert linear == pytest.approx(exact, rel=1e-6)


def test_lag_of_step_shelf():
    """Closed form: the coast lags the incident wave at the step by atan(r tan kL)."""
    out = waves([0, 300e3], FLAT, 300e3, M2)
    k_l = M2 * 300e3 / math.sqrt(G * 100.0)
    assert out.lag_rad[0, 0] == pytest.approx(math.atan2(math.sqrt(1 / 40) * math.sin(k_l), math.cos(k_l)), rel=1e-7)


def test_gain_of_long_waves_is_one():
    """S14: a wave much longer than the shelf sees a straight wall: 1 + O((kL)^2), here 2e-5."""
    assert waves([0, 1e5], FLAT, 1e5, 1e-6).gain[0, 0] == pytest.approx(1.0, abs=2e-5)


@pytest.mark.parametrize("shallow_m", [100.0, 50.0])
def test_transmission_from_step_to_gradual(shallow_m):
    """F4 and F5: 2 / (1 + sqrt(h1/h2)) over a step, (h2/h1)^(1/4) over a slope of many wavelengths.

    Sent back and forth between wall and slope, greatest and least gain are T / (1 -+ R): T is their harmonic mean.
    """
    omega = np.linspace(1.4e-3, 3.2e-3, 400)
    gain = waves([0, 2e5], [shallow_m] * 2, 2e5, omega).gain[0]
    step = 2.0 / (1.0 / gain.max() + 1.0 / gain.min())
    # 400 frequencies over a dozen peaks miss the tip of a peak by up to 1 %
    assert step == pytest.approx(2.0 / (1.0 + math.sqrt(shallow_m / 4000.0)), rel=5e-3)
    rise = np.linspace(0.0, 1.0, 400)
    x = np.concatenate([[0.0], 2e5 + 4e6 * rise])
    depth = np.concatenate([[shallow_m], shallow_m * (4000.0 / shallow_m) ** (rise**2 * (3 - 2 * rise))])
    gain = waves(x, depth, 2e5, omega).gain[0]
    # reflection left over by the slope: about 1 %
    assert 2.0 / (1.0 / gain.max() + 1.0 / gain.min()) == pytest.approx((4000.0 / shallow_m) ** 0.25, rel=2e-2)
    assert gain.max() / gain.min() < 1.06


# ---- exact profiles


@pytest.mark.parametrize("case", REFERENCE["profiles"], ids=lambda case: f"profile{case['id']}")
def test_reference_profile(case):
    """Gain and phase against Bessel functions at 30 digits, friction against a converged march.

    Measured: 2e-8 at 4 h and longer, 3e-5 at 1 h; with friction 1.1e-6 (depth zero at the coast) and 3e-5.
    """
    names = list(REFERENCE["periods_h"])
    omega = 2 * np.pi / 3600 / np.array(list(REFERENCE["periods_h"].values()))
    x = case["dx_m"] * np.arange(len(case["depth_m"]))
    set_up = {"outer": case["outer_depth_m"], "lat": case["lat_deg"]}
    plain = waves(x, case["depth_m"], x[case["break_node"]], omega, **set_up)
    damped = waves(x, case["depth_m"], x[case["break_node"]], omega, friction=REFERENCE["friction_m_s"], **set_up)
    n_checked = 0
    for i, name in enumerate(names):
        if not case["gain"].get(name):
            assert plain.below_inertial[0, i]
            continue
        gain, phase_deg = case["gain"][name]
        tolerance = 5e-5 if name == "60min" else 5e-8
        got = plain.gain[0, i] * np.exp(1j * plain.lag_rad[0, i])
        assert abs(got / (gain * np.exp(1j * np.radians(phase_deg))) - 1) < tolerance
        gain, phase_deg = case["damped_gain"][name]
        tolerance = 5e-5 if name == "60min" else 2e-6
        got = damped.damped_gain[0, i] * np.exp(1j * damped.lag_rad[0, i])
        assert abs(got / (gain * np.exp(1j * np.radians(phase_deg))) - 1) < tolerance
        n_checked += 1
    assert n_checked >= 3


def test_converges_at_fourth_order_on_kinked_profiles():
    """Halving the cells cuts the error by 16: order 3.8 or more in the mean over twelve kinked profiles."""
    x, depth, _ = random_shelves(3, 12, 14)
    orders = []
    for row in depth:
        ends = [end_state(x, row, 2 * np.pi / (3 * 3600), 1e-4, 0.0, n)[0].real for n in (64, 128, 256, 4096)]
        errors = np.abs(np.array(ends[:3]) - ends[3])
        orders.append(np.log2(errors[0] / errors[2]) / 2)
    assert np.mean(orders) > 3.8


@pytest.mark.parametrize("row", range(10))
def test_against_adaptive_ode_solver(row):
    """Friction and rotation together on ten rough profiles: an 8th-order adaptive solver agrees.

    Measured: 2e-6 for tides on 64 cells, 5e-6 at 2 h; the profiles have up to 38 kinks. In row 0 omega^2 - f^2 nearly
    cancels (60 degrees south) and friction varies within a cell: 2.2e-5.
    """
    x, depth, break_m = random_shelves(11, 10)
    profile = np.maximum(depth[row], 3.0)
    n = int(np.argmax(profile)) + 1
    omega = np.array([M2, omega_of("M4"), 2 * np.pi / 7200])
    lat = -60.0 + 12.0 * row
    f = float(coriolis_rad_s(lat))
    outer = float(profile.max())
    out = waves(x, profile, break_m[row], omega, outer=outer, lat=lat, friction=2e-3)
    got = out.damped_gain[0] * np.exp(1j * out.lag_rad[0])
    exact = np.array([1 / ode_incident(x[:n], profile[:n], w, f, 2e-3, outer) for w in omega])
    np.testing.assert_array_less(np.abs(got / exact - 1), [5e-5, 1e-5, 1e-5] if row == 0 else [5e-6, 5e-6, 1e-5])


def test_vertical_step_inside_is_exact():
    """Two equal positions are a vertical step; the flat-flat shelf has a closed form."""
    omega, c1, c2, c3 = 3e-4, math.sqrt(G * 40), math.sqrt(G * 150), math.sqrt(G * 4000)
    a, b = omega * 60e3 / c1, omega * 80e3 / c2
    eta, flux = math.cos(a), math.sin(a) * c1 / omega  # flux is int eta dx
    eta, flux = (
        eta * math.cos(b) - flux * omega / c2 * math.sin(b),
        flux * math.cos(b) + eta * c2 / omega * math.sin(b),
    )
    exact = 1 / abs(eta - 1j * flux * omega / c3)
    out = waves([0, 60e3, 60e3, 140e3], [40, 40, 150, 150], 60e3, omega)
    assert out.gain[0, 0] == pytest.approx(exact, rel=1e-7)
    assert out.edge_ratio[0, 0] == pytest.approx(1 / abs(math.cos(a)), rel=1e-7)


# ---- quadratic drag


@pytest.mark.parametrize("amplitude_m", [0.3, 1.0])
def test_drag_against_plain_iteration(amplitude_m):
    """Drag by the compiled march and by a plain loop on 6000 steps of distance agree to 1e-3 (both stop at 1e-4)."""
    x, depth = [0.0, 300e3, 340e3], [5.0, 80.0, 4000.0]
    friction = Friction(linear_m_s=1e-3, drag=2.5e-3, offshore_amplitude_m=[amplitude_m, np.nan])
    out = waves(x, depth, 300e3, [M2, M2], lat=45.0, friction=friction)
    exact = plain_drag(x, depth, M2, float(coriolis_rad_s(45.0)), 2.5e-3 * amplitude_m, 4000.0)
    assert out.damped_gain[0, 0] == pytest.approx(1 / abs(exact), rel=1e-3)
    assert out.lag_rad[0, 0] == pytest.approx(-np.angle(exact), abs=1e-3)
    linear = waves(x, depth, 300e3, [M2], lat=45.0, friction=1e-3)
    assert out.damped_gain[0, 1] == linear.damped_gain[0, 0]


def test_drag_grows_with_the_tide():
    """A greater tide meets more friction: gain at resonance falls, and a tiny tide has the frictionless gain."""
    width = 350.122e3
    gains = [
        waves(
            [0, width], FLAT, width, [M2], friction=Friction(linear_m_s=0.0, drag=2.5e-3, offshore_amplitude_m=[a])
        ).damped_gain[0, 0]
        for a in (1e-5, 0.1, 0.5, 2.0)
    ]
    assert np.all(np.diff(gains) < 0)
    assert gains[0] == pytest.approx(6.32456, rel=1e-4)


# ---- twins, rows, invariances


def test_cells_hold_exact_integrals():
    """Each cell's inertia and face against adaptive quadrature, to 1e-10; nodes at equal steps of travel time."""
    x, depth, _ = random_shelves(5, 1, 12)
    cells, nodes = kernel_cells.cut_cells(x, depth[0], -1, 64)
    for j in range(cells.inertia_s2_m.size):
        inertia, face = plain_cell(x, depth[0], nodes.x_m[j], nodes.x_m[j + 1])
        assert cells.inertia_s2_m[j] == pytest.approx(inertia, rel=1e-10)
        assert nodes.face_m[j] == pytest.approx(face, rel=1e-10)
    np.testing.assert_allclose(nodes.depth_m, np.interp(nodes.x_m, x, depth[0]), rtol=1e-9)
    assert cells.inertia_s2_m.size == 64
    assert nodes.x_m[-1] == x[-1]


def test_march_equals_plain_loop():
    """Compiled march and plain loop differ by rounding only (fused multiply-add)."""
    x, depth, _ = random_shelves(6, 1, 20)
    cells, _ = kernel_cells.cut_cells(x, depth[0], -1, 128)
    omega, f2, r = np.array([M2, 3e-4]), 1e-8, 1e-3
    eta, flux, at_break = (np.zeros((2, 2)) for _ in range(3))
    kernel_march.march_damped(cells, omega, f2, r, eta, flux, at_break)
    real_eta, real_flux, real_break = (np.zeros(2) for _ in range(3))
    kernel_march.march_real(cells, omega**2 - f2, real_eta, real_flux, real_break)
    for q, w in enumerate(omega):
        s = w + 1j * r * cells.damping_per_m
        wanted = plain_march(cells, w * (s - f2 / s))
        np.testing.assert_allclose([eta[0, q] + 1j * eta[1, q], flux[0, q] + 1j * flux[1, q]], wanted, rtol=1e-11)
        plain = plain_march(cells, np.full(cells.inertia_s2_m.size, w * w - f2))
        np.testing.assert_allclose([real_eta[q], real_flux[q]], np.real(plain), rtol=1e-11)


def test_rows_do_not_see_each_other():
    """A batch equals batches of one, bit for bit, in any order."""
    x, depth, break_m = random_shelves(7, 9)
    depth[4] = np.nan
    depth[2, 30:] = np.nan
    f, outer = coriolis_rad_s(np.linspace(-70, 70, 9)), np.full(9, 4000.0)
    friction = Friction(linear_m_s=1e-3, drag=2.5e-3, offshore_amplitude_m=[0.5, np.nan])

    def run(rows):
        return wave_response(x, depth[rows], break_m[rows], outer[rows], f[rows], [M2, K1], friction=friction)

    whole, turned = run(np.arange(9)), run(np.arange(9)[::-1])
    for name in ("gain", "damped_gain", "lag_rad", "edge_ratio"):
        single = np.concatenate([getattr(run(np.array([i])), name) for i in range(9)])
        np.testing.assert_array_equal(getattr(whole, name), single)
        np.testing.assert_array_equal(getattr(turned, name)[::-1], single)


@settings(max_examples=25, deadline=None)
@given(scale=st.floats(0.25, 4.0), stretch=st.floats(0.3, 3.0), seed=st.integers(0, 50))
def test_gain_keeps_under_scaling(scale, stretch, seed):
    """Depths times k, widths times l and frequency times sqrt(k) / l leave the gain as it is (f = 0)."""
    x, depth, break_m = random_shelves(seed, 1, 15)
    base = waves(x, depth[0], break_m[0], 2e-4, outer=5000.0)
    scaled = waves(
        x * stretch, depth[0] * scale, break_m[0] * stretch, 2e-4 * math.sqrt(scale) / stretch, outer=5000.0 * scale
    )
    # rounding may move a cell boundary: the error of the march itself, 1e-8, is the limit
    assert scaled.gain[0, 0] == pytest.approx(base.gain[0, 0], rel=1e-7)
    assert scaled.lag_rad[0, 0] == pytest.approx(base.lag_rad[0, 0], abs=1e-7)


@settings(max_examples=25, deadline=None)
@given(lat=st.floats(-74, 74), seed=st.integers(0, 50), friction=st.floats(0, 5e-3))
def test_hemispheres_are_alike_and_friction_absorbs(lat, seed, friction):
    """North and south answer alike, and friction never sends back more than came: |R| <= 1."""
    x, depth, break_m = random_shelves(seed, 1, 15)
    north = waves(x, depth[0], break_m[0], M2, lat=lat, friction=friction)
    south = waves(x, depth[0], break_m[0], M2, lat=-lat, friction=friction)
    assert north.damped_gain[0, 0] == south.damped_gain[0, 0]
    n = int(np.argmax(depth[0])) + 1
    f = float(coriolis_rad_s(lat))
    eta, flux = end_state(x[:n], depth[0, :n], M2, f, friction, 256)
    outgoing = 1j * flux * math.sqrt(M2**2 - f * f) / math.sqrt(G * 4000.0)
    assert abs((eta + outgoing) / (eta - outgoing)) <= 1 + 1e-9


def test_samples_on_straight_pieces_change_nothing():
    """Samples put in between on straight pieces leave every answer: error of the march only, 1e-7."""
    x, depth = np.array([0, 100e3, 200e3, 260e3]), np.array([0, 60, 130, 4000.0])
    fine_x = np.union1d(np.linspace(0, 260e3, 131), x)
    few = waves(x, depth, 200e3, M2, lat=40, friction=1e-3)
    many = waves(fine_x, np.interp(fine_x, x, depth), 200e3, M2, lat=40, friction=1e-3)
    assert many.gain[0, 0] == pytest.approx(few.gain[0, 0], rel=3e-7)
    assert many.damped_gain[0, 0] == pytest.approx(few.damped_gain[0, 0], rel=3e-6)


def test_inputs_stay_and_results_are_read_only():
    """Arrays given are not written to; arrays returned cannot be."""
    x, depth, break_m = random_shelves(8, 3)
    given_arrays = [x, depth, break_m, np.full(3, 4000.0), np.zeros(3), np.array([M2])]
    copies = [array.copy() for array in given_arrays]
    for array in given_arrays:
        array.setflags(write=False)
    out = wave_response(*given_arrays, friction=Friction(linear_m_s=1e-3))
    for array, copy in zip(given_arrays, copies, strict=True):
        np.testing.assert_array_equal(array, copy)
    with pytest.raises(ValueError, match="read-only"):
        out.gain[0, 0] = 1.0


# ---- degenerate rows and messages


@pytest.mark.parametrize(
    "depth",
    [
        [np.nan, np.nan, np.nan],
        [50.0, np.nan, 100.0],
        [50.0, 0.0, 100.0],
        [50.0, -3.0, 100.0],
        [-1.0, 20.0, 100.0],
        [50.0, np.inf, 100.0],
        [50.0, 1e-9, 100.0],
        [5000.0, 5000.0, 5000.0],
        [300.0, 200.0, 100.0],
    ],
)
def test_unusable_row_is_nan(depth):
    """A row without a usable profile is NaN throughout, whatever stands in it."""
    for friction in (Friction(linear_m_s=1e-3), Friction(linear_m_s=0.0, drag=1e-3, offshore_amplitude_m=[1.0])):
        out = waves([0, 1e4, 2e4], depth, 1e4, M2, friction=friction)
        for name in ("gain", "damped_gain", "lag_rad", "edge_ratio"):
            assert np.isnan(getattr(out, name)).all()
    n_used, outer, _ = deep_end([0, 1e4, 2e4], [depth], 4000.0)
    assert n_used[0] == 0
    assert np.isnan(outer[0])


@pytest.mark.parametrize("break_m", [np.nan, -5.0, 0.0, 1e9])
def test_without_a_break_the_gain_stays(break_m):
    """No break, or one off the profile: gain and lag as with one, edge ratio NaN."""
    x, depth = [0, 200e3, 240e3], [20.0, 120.0, 4000.0]
    out, wanted = waves(x, depth, break_m, M2), waves(x, depth, 200e3, M2)
    # the break is a node of the march: without it the kink there costs 2e-7
    assert out.gain[0, 0] == pytest.approx(wanted.gain[0, 0], rel=1e-6)
    assert np.isnan(out.edge_ratio[0, 0])


def test_edge_ratio_is_nan_near_a_node():
    """At a quarter wave the break is a node: no ratio."""
    assert np.isnan(waves([0, 350.122e3], FLAT, 350.122e3, M2).edge_ratio[0, 0])


def test_wave_too_short_for_the_cells_is_nan():
    """Beyond 0.1 rad per cell at 8192 cells a wave is refused; longer ones beside it are kept."""
    out = waves([0, 500e3], FLAT, 500e3, [M2, 0.2])
    assert np.isfinite(out.gain[0, 0])
    assert np.isnan(out.gain[0, 1])
    assert np.isnan(out.edge_ratio[0, 1])


def test_no_rows_and_no_waves():
    """Nothing asked, nothing given: empty arrays of the right shape."""
    friction = Friction(linear_m_s=1e-3)
    none = np.empty(0)
    assert wave_response([0, 1], np.empty((0, 2)), none, none, none, [M2], friction=friction).gain.shape == (0, 1)
    assert waves([0, 1e5], FLAT, 1e5, none, friction=friction).gain.shape == (1, 0)


def test_coast_of_any_small_depth_tends_to_depth_zero():
    """h -> 0 at the coast is regular: 1 mm of water there moves the gain by less than 1e-4, 1e-9 m by nothing."""
    dry, damp, wet = (waves([0, 200e3], [h, 100.0], 200e3, M2).gain[0, 0] for h in (0.0, 1e-9, 1e-3))
    assert wet == pytest.approx(dry, rel=1e-4)
    assert damp == dry


def test_deep_end_cuts_exactly_and_keeps_the_answer_continuous():
    """The cut stands where the depth is reached; the gain does not jump as the deep sea passes a sample."""
    x, depth = [0, 100e3, 200e3, 300e3], [10.0, 100.0, 3000.0, 5000.0]
    n_used, outer, stepped = deep_end(x, [depth] * 2, 4000.0)
    assert (n_used.tolist(), outer.tolist(), stepped.tolist()) == ([4, 4], [4000.0, 4000.0], [False, False])
    below, above = (waves(x, depth, 100e3, M2, outer=h).gain[0, 0] for h in (3000 - 1e-6, 3000 + 1e-6))
    assert below == pytest.approx(above, rel=1e-8)
    cut = waves([0, 100e3, 200e3, 250e3], [10.0, 100.0, 3000.0, 4000.0], 100e3, M2).gain[0, 0]
    assert waves(x, depth, 100e3, M2).gain[0, 0] == pytest.approx(cut, rel=1e-12)
    n_used, outer, stepped = deep_end(x, [depth], 6000.0)
    assert (n_used[0], outer[0], stepped[0]) == (4, 6000.0, True)
    n_used, outer, stepped = deep_end(x, [[10.0, 200.0, 90.0, np.nan]], "deepest")
    assert (n_used[0], outer[0], stepped[0]) == (2, 200.0, False)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"x_m": [1.0, 2.0]}, "must start at 0"),
        ({"x_m": [0.0, -2.0]}, "never fall"),
        ({"x_m": [0.0, 1.0, 2.0]}, r"give \(m,\) and \(n, m\)"),
        ({"break_m": [1.0, 2.0]}, "break_m has shape"),
        ({"coriolis_rad_s": 0.0}, "coriolis_rad_s has shape"),
        ({"omega_rad_s": [0.0]}, "frequencies above 0"),
        ({"omega_rad_s": 1e-4}, "give a list"),
        ({"friction": Friction(linear_m_s=0, drag=1e-3, offshore_amplitude_m=[1, 1])}, "one for each wave"),
    ],
)
def test_messages(change, words):
    """Arrays that do not fit are named, with what is wanted."""
    right = {
        "x_m": [0.0, 1e5],
        "depth_m": [FLAT],
        "break_m": [1e5],
        "outer_depth_m": [4000.0],
        "coriolis_rad_s": [0.0],
        "omega_rad_s": [M2],
        "friction": Friction(linear_m_s=1e-3),
    }
    with pytest.raises(ResponseError, match=words):
        wave_response(**{**right, **change})


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({"linear_m_s": -1.0}, "from 0 up"),
        ({"linear_m_s": np.nan}, "from 0 up"),
        ({"linear_m_s": 0.0, "drag": 1e-3}, "belong together"),
        ({"linear_m_s": 0.0, "offshore_amplitude_m": [1.0]}, "belong together"),
        ({"linear_m_s": 0.0, "drag": 0.0, "offshore_amplitude_m": [1.0]}, "above 0"),
        ({"linear_m_s": 0.0, "drag": 1e-3, "offshore_amplitude_m": [-1.0]}, "metres above 0"),
    ],
)
def test_friction_messages(values, words):
    """Friction that makes no sense is refused with the cure."""
    with pytest.raises(ResponseError, match=words):
        Friction(**values)


@pytest.mark.parametrize("deep_m", [0.0, -5.0, float("nan"), "deep"])
def test_deep_end_message(deep_m):
    """A depth of the deep sea that is none is refused."""
    with pytest.raises(ResponseError, match="or 'deepest'"):
        deep_end([0, 1e5], [FLAT], deep_m)
