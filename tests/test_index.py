"""The resonance index: its table, its factors, its gaps and its classes."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from utils_response import modes, omega_of

from shelfmap.errors import ResponseError
from shelfmap.index import INDEX_CLASSES, index_class, resonance_index

M2 = omega_of("M2")
POLE = complex(M2, -M2 / 10)  # tuned to M2, Q = 5
NAN = complex(np.nan, np.nan)


@pytest.mark.parametrize(
    ("width_km", "index"),
    [(10, 3e-5), (60, 0.0013), (150, 0.011), (250, 0.078), (300, 0.29), (350, 0.975), (400, 0.36), (700, 0.018)],
)
def test_index_by_shelf_width(width_km, index):
    """M2 over a 100 m shelf beside 4000 m without rotation; tolerance: the digits given.

    By hand at 10 km: y = 10 / 350.122, Q = 4.9256, tuning 3.37e-5, strength 0.975.
    """
    pole = modes([0, width_km * 1e3], [100, 100], width_km * 1e3).pole_rad_s
    got = resonance_index([M2], pole).index[0, 0]
    digits = 3 if index > 0.9 else (1 if index < 1e-4 else 2)
    assert float(f"{got:.{digits}g}") == pytest.approx(index)


@pytest.mark.parametrize("share", [0.01, 0.025, 0.05, 0.5])
def test_strength_is_one_less_depth_ratio_of_the_step_shelf(share):
    """sech^2(pi / 4Q) = 1 - h1/h2 for Q = (pi / 4) / atanh sqrt(h1/h2): exact."""
    q = math.pi / 4 / math.atanh(math.sqrt(share))
    got = resonance_index([1.0], [[1.0 - 0.5j / q]])
    assert got.strength[0, 0] == pytest.approx(1 - share, rel=1e-12)
    assert got.tuning[0, 0] == pytest.approx(1.0, rel=1e-12)


def test_best_mode_is_named():
    """The mode with the greatest product gives index, tuning and strength; modes count from 1."""
    poles = [[1e-4 - 1e-5j, 3e-4 - 1e-5j, 5e-4 - 1e-5j]]
    got = resonance_index([1e-4, 2.9e-4, 6e-4], poles)
    np.testing.assert_array_equal(got.mode, [[1, 2, 3]])
    np.testing.assert_allclose(got.index, got.tuning * got.strength, rtol=1e-15)


def test_gaps_are_nan_with_mode_zero():
    """No pole or Q < 0.5: the mode is left out; none left: NaN and mode 0, never an index of 0."""
    poles = [[NAN, NAN, NAN], [M2 - 1.1j * M2, NAN, NAN], [NAN, POLE, NAN], [M2 - 1.1j * M2, NAN, POLE]]
    got = resonance_index([M2], poles)
    np.testing.assert_array_equal(np.isnan(got.index[:, 0]), [True, True, False, False])
    np.testing.assert_array_equal(got.mode[:, 0], [0, 0, 2, 3])
    for part in (got.tuning, got.strength):
        np.testing.assert_array_equal(np.isnan(part), np.isnan(got.index))
    assert resonance_index([M2], [[M2 - 0.999j * M2]]).mode[0, 0] == 1


@given(y=st.floats(0.2, 5.0), q=st.floats(0.6, 100.0))
def test_index_is_bounded_and_symmetric_in_the_logarithm_of_frequency(y, q):
    """0 <= index <= 1, alike for w = y w_n and w_n / y, and never above the tuned one."""
    got = resonance_index([y, 1 / y, 1.0], [[1.0 - 0.5j / q]]).index[0]
    assert got[0] == pytest.approx(got[1], rel=1e-9)
    assert 0.0 <= got[0] <= got[2] <= 1.0


def test_inputs_stay_and_results_are_read_only():
    """Arrays given are not written to; arrays returned cannot be."""
    omega, poles = np.array([M2]), np.array([[POLE, NAN, NAN]])
    omega.setflags(write=False)
    poles.setflags(write=False)
    got = resonance_index(omega, poles)
    with pytest.raises(ValueError, match="read-only"):
        got.index[0, 0] = 1.0


def test_classes_by_their_bounds():
    """A bound belongs to the class above it; NaN has no class, an empty string; shape is kept."""
    for bound, name in INDEX_CLASSES[1:]:
        assert index_class(bound) == name
        assert index_class(np.nextafter(bound, 0.0)) != name
    got = index_class([[0.0, 0.049, 0.05], [0.5, 1.0, np.nan]])
    assert got.tolist() == [["none", "none", "low"], ["high", "very high", ""]]


@pytest.mark.parametrize(
    ("omega", "poles", "words"),
    [
        ([0.0], [[POLE]], "frequencies above 0"),
        (M2, [[POLE]], "give a list"),
        ([M2], [POLE], r"give \(n, k\)"),
        ([M2], np.empty((2, 0)), r"give \(n, k\)"),
    ],
)
def test_messages(omega, poles, words):
    """Arrays that do not fit are named, with what is wanted."""
    with pytest.raises(ResponseError, match=words):
        resonance_index(omega, poles)
