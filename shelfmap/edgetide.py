"""The tide at an open edge, fitted to gauges inside it: smooth shapes with a prior, each gauge also predicted unseen.

The response is linear in the edge tide, so that the response to a handful of shapes, at the gauges, is all it takes.
The shapes are the leading principal components of a smooth random field along the edge (Gaussian covariance of the
distance in space), scaled to unit variance; their complex amplitudes and the local error of a gauge are independent
Gaussians whose sizes make the gauges most likely. Gauges far off weigh less, as errors with Student's t distribution
of four degrees of freedom want it (Lange, Little & Taylor 1989, J. Am. Stat. Assoc. 84, 881-896, from memory).
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.distance import cdist

from shelfmap.geodesy import positions_m
from shelfmap.mesh import Mesh

__all__ = ["MOST_SHAPES", "EdgeFit", "edge_shapes", "explained_share", "fit_edge", "why_off"]

ComplexArray = NDArray[np.complex128]
FloatArray = NDArray[np.float64]

#: Distance over which tides of the open sea go together, metres: about an eighth of the semidiurnal wavelength there.
CORRELATION_M: Final = 1.2e6
#: Shapes that hold less of the variance than this are left out, and never are there more than this.
LEAST_SHARE: Final = 1e-4
MOST_SHAPES: Final = 40
#: So many nodes of an edge settle the shapes.
_NODES: Final = 500
#: Degrees of freedom of the distribution of local errors.
FREEDOM: Final = 4.0
#: Variance of Gaussian errors over the squared scale that this distribution takes from them: the root x of
#: E[(nu + 2) x E / (nu + 2 x E)] = 1 for exponential E, solved numerically. Errors are given as such a variance.
VARIANCE: Final = 1.376
#: Local error of a gauge: at least this share of the tide at the gauges.
LEAST_LOCAL: Final = 0.03
#: A gauge is off if unseen it is predicted worse than this many standard deviations.
OFF: Final = 3.0
_TURNS: Final = 100


def edge_shapes(mesh: Mesh) -> FloatArray:
    """Shapes an edge tide is made of, (k, n), at the k nodes of `Mesh.edge_node`.

    Their sum with amplitudes of unit variance has unit variance along the edge, and is smooth over 1200 km.
    """
    node = mesh.edge_node
    place = positions_m(mesh.node_lon_deg[node], mesh.node_lat_deg[node])
    chosen = place[np.unique(np.linspace(0, len(place) - 1, min(_NODES, len(place))).astype(int))]
    covariance = np.exp(-0.5 * (cdist(chosen, chosen) / CORRELATION_M) ** 2)
    variance, vector = np.linalg.eigh(covariance)
    kept = np.flatnonzero(variance > LEAST_SHARE * variance.sum())[::-1][:MOST_SHAPES]
    # carried from the chosen nodes to all (Nystroem)
    return np.asarray(
        np.exp(-0.5 * (cdist(place, chosen) / CORRELATION_M) ** 2) @ vector[:, kept] / np.sqrt(variance[kept])
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EdgeFit:
    """An edge tide fitted to gauges.

    Parameters
    ----------
    amplitude : (n,) array of complex
        Of each shape, metres.
    covariance : (n, n) array of complex
        Of their errors, metres squared.
    tide_sd_m : float
        Size of the edge tide: standard deviation of the amplitudes before the gauges were known.
    local_sd_m : float
        Local error of a gauge: what the cells do not show, root mean square.
    weight : (g,) array of float
        Of each gauge, 1.5 or less; 0 where it has no value.
    fitted, left_out : (g,) array of complex
        Tide at each gauge: fitted to all, and to all others; metres.
    left_out_sd_m : (g,) array of float
        Standard deviation of the difference of `left_out` and the gauge, local error included.
    """

    amplitude: ComplexArray
    covariance: ComplexArray
    tide_sd_m: float
    local_sd_m: float
    weight: FloatArray
    fitted: ComplexArray
    left_out: ComplexArray
    left_out_sd_m: FloatArray

    def is_off(self, observed: ComplexArray) -> NDArray[np.bool_]:
        """Gauges that are predicted badly by all the others, (g,)."""
        with np.errstate(invalid="ignore"):
            return np.asarray(abs(observed - self.left_out) > OFF * self.left_out_sd_m)


def fit_edge(response: ComplexArray, observed: ComplexArray) -> EdgeFit:
    """Edge tide most likely behind the tide at gauges.

    Parameters
    ----------
    response : (g, n) array of complex
        Tide at each gauge in answer to each shape of `edge_shapes`.
    observed : (g,) array of complex
        A exp(i G) at each gauge, metres; NaN where there is no value. At least one must be there.

    Returns
    -------
    EdgeFit
        With fewer gauges than shapes the prior settles what they leave open.
    """
    is_seen = np.isfinite(observed)
    x, y = response[is_seen], observed[is_seen]
    weight = np.ones(len(y))
    for _ in range(_TURNS):
        tide_var, local_var = _sizes(x, y, weight)
        inverse = np.linalg.inv((x.conj().T * weight) @ x + local_var / tide_var * np.eye(x.shape[1]))
        amplitude = inverse @ (x.conj().T @ (weight * y))
        off = abs(y - x @ amplitude) ** 2 / local_var
        wanted = np.asarray((FREEDOM + 2.0) / (FREEDOM + 2.0 * off))  # two real errors in a complex one
        if np.allclose(wanted, weight, rtol=0, atol=1e-6):
            break
        weight = wanted
    fitted = response @ amplitude
    spread = np.einsum("gi,ij,gj->g", response, inverse, response.conj()).real
    all_weights = np.zeros(len(observed))
    all_weights[is_seen] = weight
    lever = np.minimum(all_weights * spread, 1.0 - 1e-9)
    unseen = np.where(is_seen, observed - (observed - fitted) / (1.0 - lever), fitted)
    error_var = VARIANCE * local_var
    return EdgeFit(
        amplitude=amplitude,
        covariance=np.asarray(error_var * inverse, dtype=complex),
        tide_sd_m=float(np.sqrt(tide_var)),
        local_sd_m=float(np.sqrt(error_var)),
        weight=all_weights,
        fitted=fitted,
        left_out=unseen,
        left_out_sd_m=np.sqrt(error_var * (1.0 + spread / (1.0 - lever))),
    )


def _sizes(x: ComplexArray, y: ComplexArray, weight: FloatArray) -> tuple[float, float]:
    """Variance of the shapes' amplitudes and of the local error that make weighted gauges most likely."""
    root = np.sqrt(weight)
    left, size, _ = np.linalg.svd(root[:, None] * x, full_matrices=False)
    in_shapes = left.conj().T @ (root * y)
    outside = max(float((weight * abs(y) ** 2).sum() - (abs(in_shapes) ** 2).sum()), 0.0)
    scale = max(float((size**2).sum()) / len(y), 1e-300)
    ratio = np.geomspace(1e-5, 10.0, 121) * scale  # of the local error's variance to the tide's
    shared = (abs(in_shapes) ** 2 / (size**2 + ratio[:, None])).sum(axis=1) + outside / ratio
    tide_var = np.maximum(shared / len(y), 1e-300)  # no tide at all
    n_outside = len(y) - len(size)
    likely = -len(y) * np.log(tide_var) - np.log(size**2 + ratio[:, None]).sum(axis=1) - n_outside * np.log(ratio)
    best = int(np.argmax(likely))
    floor = LEAST_LOCAL**2 * float((weight * abs(y) ** 2).sum() / weight.sum())
    return float(tide_var[best]), max(float(tide_var[best] * ratio[best]), floor)


def explained_share(observed: ComplexArray, predicted: ComplexArray) -> float:
    """Share of the tide's variance that a prediction explains; NaN without gauges that have both.

    1 less the sum of squared vector errors over that of squared amplitudes.

    Examples
    --------
    >>> explained_share(np.array([1.0 + 0j, 2.0]), np.array([1.0 + 0j, 1.0]))
    0.8
    """
    both = np.isfinite(observed) & np.isfinite(predicted)
    total = float((abs(observed[both]) ** 2).sum())
    return 1.0 - float((abs(observed[both] - predicted[both]) ** 2).sum()) / total if total > 0 else np.nan


def why_off(observed: complex, predicted: complex, period_h: float) -> str:
    """Why a gauge may be far from what all others say.

    Examples
    --------
    >>> why_off(0.2j, 1.0 + 0j, 12.42)
    '0.20 of the height predicted, 186 min later: behind a barrier or up a river that the cells do not show'
    >>> why_off(1j, 1.0 + 0j, 12.42)
    'the height predicted, but 186 min later: an estuary, or clock, time zone or kind of phase'
    """
    ratio = abs(observed) / max(abs(predicted), 1e-12)
    minutes = float(np.angle(observed / predicted)) / (2 * np.pi) * period_h * 60 if predicted else 0.0
    when = f"{abs(minutes):.0f} min {'later' if minutes > 0 else 'earlier'}"
    if 0.8 < ratio < 1.25:
        what = "an estuary, or clock" if minutes > 0 else "clock"
        return f"the height predicted, but {when}: {what}, time zone or kind of phase"
    if ratio <= 0.8 and minutes > 0:
        return f"{ratio:.2f} of the height predicted, {when}: behind a barrier or up a river that the cells do not show"
    return f"{ratio:.2f} of the height predicted, {when}: a strait, bay or unit that is not as the cells show it"
