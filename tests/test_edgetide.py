"""The edge tide: its shapes, its fit to gauges against brute force, gauges left out, gauges that are off."""

import numpy as np
import pytest
from scipy.stats import multivariate_normal
from utils_field import waters_of

from shelfmap.edgetide import FREEDOM, VARIANCE, edge_shapes, explained_share, fit_edge, why_off
from shelfmap.geodesy import positions_m
from shelfmap.mesh import make_mesh

RNG = np.random.default_rng(11)


def mesh_of(n=30, dx=50e3):
    """Square of deep sea, open all round."""
    return make_mesh(waters_of(np.full((n, n), 4000.0), dx=dx, dy=dx), held=True)


def complex_normal(rng, *shape):
    """Complex numbers of unit variance."""
    return (rng.standard_normal(shape) + 1j * rng.standard_normal(shape)) / np.sqrt(2)


def case(n_gauges=40, n_shapes=6, tide=0.8, local=0.05, seed=1):
    """Response, true amplitudes and gauges with local errors."""
    rng = np.random.default_rng(seed)
    response = complex_normal(rng, n_gauges, n_shapes)
    truth = tide * complex_normal(rng, n_shapes)
    return response, truth, response @ truth + local * complex_normal(rng, n_gauges)


def test_shapes_have_the_covariance_they_should():
    """Unit variance and a Gaussian fall over 1200 km, but for the share of the shapes left out, 1e-4 each."""
    mesh = mesh_of()
    shapes = edge_shapes(mesh)
    place = positions_m(mesh.node_lon_deg[mesh.edge_node], mesh.node_lat_deg[mesh.edge_node])
    away = np.linalg.norm(place[:, None] - place, axis=2)
    np.testing.assert_allclose(shapes @ shapes.T, np.exp(-0.5 * (away / 1.2e6) ** 2), atol=5e-3)
    assert shapes.shape[1] < 20


def test_a_finer_mesh_has_the_same_shapes():
    coarse, fine = mesh_of(15, 100e3), mesh_of(60, 25e3)
    variance = [np.linalg.svd(edge_shapes(mesh), compute_uv=False) ** 2 for mesh in (coarse, fine)]
    shares = [each / each.sum() for each in variance]
    np.testing.assert_allclose(shares[0][:6], shares[1][:6], rtol=0.05)


def test_exact_gauges_give_the_tide_back():
    response, truth, _ = case()
    fit = fit_edge(response, response @ truth)
    # the local error is at least 3 % of the tide, which pulls the amplitudes towards nothing by its square
    np.testing.assert_allclose(fit.amplitude, truth, rtol=0.01, atol=0.002)
    assert not fit.is_off(response @ truth).any()


def test_sizes_and_amplitudes_are_the_most_likely_ones():
    """Against the likelihood of the whole covariance matrix, at the weights the fit ended with."""
    response, _, observed = case()
    fit = fit_edge(response, observed)
    local_sd = fit.local_sd_m / np.sqrt(VARIANCE)

    def likely(tide_sd, local_sd):
        covariance = tide_sd**2 * response @ response.conj().T + np.diag(local_sd**2 / fit.weight)
        both = np.block([[covariance.real, -covariance.imag], [covariance.imag, covariance.real]]) / 2
        return multivariate_normal(cov=both).logpdf(np.concatenate([observed.real, observed.imag]))

    best = likely(fit.tide_sd_m, local_sd)
    for tide, local in ((0.9, 1.0), (1.1, 1.0), (1.0, 0.9), (1.0, 1.1)):  # the grid of ratios is 12 % fine
        assert likely(tide * fit.tide_sd_m, local * local_sd) < best + 0.1
    covariance = fit.tide_sd_m**2 * response @ response.conj().T + np.diag(local_sd**2 / fit.weight)
    wanted = fit.tide_sd_m**2 * response.conj().T @ np.linalg.solve(covariance, observed)
    np.testing.assert_allclose(fit.amplitude, wanted, rtol=1e-8)


def test_left_out_is_what_a_fit_without_the_gauge_says():
    """Sizes and weights held: ridge regression without each gauge in turn."""
    response, _, observed = case(n_gauges=12)
    fit = fit_edge(response, observed)
    ridge = (fit.local_sd_m / fit.tide_sd_m) ** 2 / VARIANCE * np.eye(response.shape[1])
    for gauge in range(12):
        x, y, w = (np.delete(each, gauge, axis=0) for each in (response, observed, fit.weight))
        amplitude = np.linalg.solve((x.conj().T * w) @ x + ridge, x.conj().T @ (w * y))
        assert fit.left_out[gauge] == pytest.approx(response[gauge] @ amplitude, rel=1e-9)


def test_expected_errors_are_as_large_as_errors():
    """Squared errors of 60 made tides over the expected: an exponential of mean 1.

    0.85 for Gaussian errors as here; on six real coasts 0.73 to 0.84, for their errors have heavier tails.
    """
    ratios = []
    for seed in range(60):
        response, _, observed = case(seed=seed, local=0.2)  # well above the least local error, 3 % of the tide
        fit = fit_edge(response, observed)
        ratios.append(abs(observed - fit.left_out) ** 2 / fit.left_out_sd_m**2)
    ratios = np.concatenate(ratios)
    assert np.mean(ratios < np.log(5)) == pytest.approx(0.8, abs=0.06)  # 80 % of an exponential lies below log 5


@pytest.mark.parametrize("n_gauges", [1, 2, 5])
def test_with_fewer_gauges_than_shapes_the_prior_holds(n_gauges):
    response, _, observed = case(n_gauges=n_gauges, n_shapes=9)
    fit = fit_edge(response, observed)
    assert np.isfinite(fit.amplitude).all()
    assert np.isfinite(fit.left_out_sd_m).all()
    far = complex_normal(np.random.default_rng(5), 500, 9) @ fit.amplitude
    assert np.sqrt(np.mean(abs(far) ** 2)) < 3 * np.sqrt(np.mean(abs(observed) ** 2))


def test_gauges_without_a_value_are_predicted_and_count_for_nothing():
    response, _, observed = case()
    gappy = np.where(np.arange(len(observed)) % 4 == 0, np.nan, observed)
    fit, without = fit_edge(response, gappy), fit_edge(response[np.isfinite(gappy)], gappy[np.isfinite(gappy)])
    np.testing.assert_allclose(fit.amplitude, without.amplitude, rtol=1e-12)
    assert (fit.weight[::4] == 0).all()
    np.testing.assert_array_equal(fit.left_out[::4], fit.fitted[::4])


def test_a_gauge_that_is_off_is_named_and_moves_little():
    response, truth, observed = case()
    wrong = observed.copy()
    wrong[7] *= np.exp(1j * 1.5)  # a clock three hours wrong
    clean, fit = fit_edge(response, observed), fit_edge(response, wrong)
    assert np.flatnonzero(fit.is_off(wrong)).tolist() == [7]
    assert abs(fit.amplitude - truth).max() < 2 * abs(clean.amplitude - truth).max() + 0.02
    assert fit.weight[7] < 0.3 < (FREEDOM + 2) / FREEDOM


@pytest.mark.parametrize("factor", [10.0, 1e-3, np.exp(0.5j)])
def test_the_unit_and_the_phase_of_the_tide_do_not_matter(factor):
    response, _, observed = case()
    one, other = fit_edge(response, observed), fit_edge(response, factor * observed)
    np.testing.assert_allclose(other.amplitude, factor * one.amplitude, rtol=1e-6)
    np.testing.assert_allclose(other.left_out_sd_m, abs(factor) * one.left_out_sd_m, rtol=1e-6)


def test_order_of_the_gauges_does_not_matter():
    response, _, observed = case()
    order = RNG.permutation(len(observed))
    one, other = fit_edge(response, observed), fit_edge(response[order], observed[order])
    np.testing.assert_allclose(other.amplitude, one.amplitude, rtol=1e-9)


def test_no_tide_at_all_is_fitted_by_none():
    fit = fit_edge(case()[0], np.zeros(40, dtype=complex))
    assert abs(fit.amplitude).max() == 0


def test_explained_share_counts_phases_and_leaves_gaps_out():
    observed = np.array([1.0, 1j, np.nan])
    assert explained_share(observed, observed) == 1.0
    assert explained_share(observed, -observed) == -3.0
    assert explained_share(observed, np.array([1.0, np.nan, 1.0])) == 1.0
    assert np.isnan(explained_share(np.array([np.nan]), np.array([1.0])))


@pytest.mark.parametrize(
    ("observed", "said"),
    [
        (np.exp(1j), "the height predicted, but 119 min later: an estuary, or clock"),
        (np.exp(-1j), "the height predicted, but 119 min earlier: clock"),
        (0.3 * np.exp(0.5j), "0.30 of the height predicted, 59 min later: behind a barrier"),
        (2.0, "2.00 of the height predicted, 0 min earlier: a strait, bay or unit"),
    ],
)
def test_why_a_gauge_may_be_off(observed, said):
    assert why_off(observed, 1.0 + 0j, 12.42).startswith(said)
