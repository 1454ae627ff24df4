"""Resonance index: how well a shelf is tuned to a wave, and how much there is to tune."""

from dataclasses import dataclass, fields
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from shelfmap.errors import ResponseError

__all__ = ["INDEX_CLASSES", "Q_OVERDAMPED", "Q_STOPPED", "ResonanceIndex", "index_class", "resonance_index"]

IntArray = NDArray[np.int64]
FloatArray = NDArray[np.float64]

#: Lower bound of each class of the index, and its name.
INDEX_CLASSES: Final = ((0.0, "none"), (0.05, "low"), (0.2, "moderate"), (0.4, "high"), (0.7, "very high"))

#: Below this a mode leaks so fast that it does not swing.
Q_OVERDAMPED: Final = 0.5
#: Below this, friction counted, a mode loses 99.8 % of its energy in a cycle: there is nothing to tune.
Q_STOPPED: Final = 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class ResonanceIndex:
    """Resonance index of each transect at each wave, and what it is made of.

    Attributes
    ----------
    index : (n, p) array of float
        Greatest of tuning times strength over the modes, 0 to 1; NaN where no mode can be judged.
    mode : (n, p) array of int
        Number, from 1, of the mode that gives it; 0 where `index` is NaN.
    tuning, strength : (n, p) array of float
        The two factors of that mode, 0 to 1.
    """

    index: FloatArray
    mode: IntArray
    tuning: FloatArray
    strength: FloatArray

    def __post_init__(self) -> None:
        for field in fields(self):
            getattr(self, field.name).setflags(write=False)


def resonance_index(omega_rad_s: ArrayLike, pole_rad_s: ArrayLike, damped_q: ArrayLike | None = None) -> ResonanceIndex:
    """Resonance index of each transect at each wave.

    Parameters
    ----------
    omega_rad_s : (p,) array_like of float
        Angular frequencies of the waves, rad/s, > 0.
    pole_rad_s : (n, k) array_like of complex
        Frictionless poles of the modes of each transect (`ShelfModes.pole_rad_s`), rad/s.
    damped_q : (n, k) array_like of float, optional
        Q of the same modes with friction; NaN where not known.

    Returns
    -------
    ResonanceIndex
        One row per transect, one column per wave. Modes without a pole and overdamped ones (Q < 0.5) are left
        out, and so are those that friction all but stops (damped Q < 1); NaN where none is left.

    Raises
    ------
    ResponseError
        If shapes do not fit or a frequency is not above 0.

    Notes
    -----
    Our own definition. With the pole w_n, Q = Re w_n / (2 |Im w_n|) and y = w / Re w_n::

        tuning   = 1 / (1 + Q^2 (y - 1/y)^2)
        strength = sech^2(pi / (4 Q))
        index    = max over modes of tuning * strength

    Tuning is the power response of an oscillator. Strength is 1 - h1/h2 of the flat shelf of depth h1 beside a
    sea of depth h2 that has the same Q, so the index goes to 0 for a narrow shelf and for one that leaks all.
    It tells how well a shelf is tuned; the gain tells how much that is worth.

    Examples
    --------
    >>> tuned = resonance_index([1.405189e-4], [[1.405189e-4 - 1.426408e-5j]])
    >>> tuned.index.round(3), tuned.mode
    (array([[0.975]]), array([[1]]))
    """
    omega, pole = np.asarray(omega_rad_s, dtype=float), np.asarray(pole_rad_s, dtype=complex)
    if omega.ndim != 1 or not np.all((omega > 0.0) & np.isfinite(omega)):
        raise ResponseError(
            f"omega_rad_s of shape {omega.shape}: give a list of frequencies above 0, rad/s (2 pi / period)"
        )
    if pole.ndim != 2 or pole.shape[1] == 0:
        raise ResponseError(f"pole_rad_s has shape {pole.shape}; give (n, k): k modes for each of n transects")
    valid = (pole.real > 0.0) & (pole.imag != 0.0)
    natural = np.where(valid, pole.real, np.nan)
    q = natural / (2.0 * np.abs(np.where(valid, pole.imag, np.nan)))
    q[q < Q_OVERDAMPED] = np.nan
    if damped_q is not None:
        q[np.asarray(damped_q, dtype=float) < Q_STOPPED] = np.nan
    y = omega[None, :, None] / natural[:, None, :]
    tuning = 1.0 / (1.0 + (q[:, None, :] * (y - 1.0 / y)) ** 2)
    strength = np.broadcast_to((1.0 / np.cosh(np.pi / (4.0 * q)) ** 2)[:, None, :], tuning.shape)
    product = tuning * strength
    best = np.where(np.isnan(product), -1.0, product).argmax(axis=2)
    index, tuning, strength = (
        np.take_along_axis(values, best[:, :, None], axis=2)[:, :, 0] for values in (product, tuning, strength)
    )
    return ResonanceIndex(index=index, mode=np.where(np.isnan(index), 0, best + 1), tuning=tuning, strength=strength)


def index_class(index: ArrayLike) -> NDArray[np.str_]:
    """Class of each index by `INDEX_CLASSES`; an empty string where the index is NaN.

    Parameters
    ----------
    index : array_like of float
        Resonance indices, 0 to 1.

    Returns
    -------
    array of str
        Same shape.

    Examples
    --------
    >>> index_class([0.04, 0.05, 0.975, float("nan")])
    array(['none', 'low', 'very high', ''], dtype='<U9')
    """
    values = np.asarray(index, dtype=float)
    bounds = [bound for bound, _ in INDEX_CLASSES[1:]]
    names = np.array([name for _, name in INDEX_CLASSES])
    return np.where(np.isnan(values), "", names[np.digitize(values, bounds)])
