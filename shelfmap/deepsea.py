"""What the 1-D physics is given: checked profiles, the deep sea they end in, and the turning of the Earth."""

from dataclasses import fields
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from shelfmap._kernels.march import deep_ends
from shelfmap.constants import EARTH_ROTATION_RAD_S
from shelfmap.errors import ResponseError

__all__ = ["FrozenArrays", "checked_profiles", "checked_rows", "coriolis_rad_s", "deep_end"]

BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]
FloatArray = NDArray[np.float64]


class FrozenArrays:
    """Marks every array of a result read-only."""

    __slots__ = ()

    def __post_init__(self) -> None:
        for field in fields(self):  # type: ignore[arg-type]
            getattr(self, field.name).setflags(write=False)


def coriolis_rad_s(lat_deg: ArrayLike, rotation: bool = True) -> FloatArray:
    """Coriolis parameter 2 Omega sin(latitude), rad/s; 0 without rotation.

    Parameters
    ----------
    lat_deg : array_like of float
        Latitudes, degrees.
    rotation : bool
        Whether the Earth turns.

    Examples
    --------
    >>> coriolis_rad_s([0.0, 30.0]).round(9)
    array([0.0000e+00, 7.2921e-05])
    """
    turn_rad_s = 2.0 * EARTH_ROTATION_RAD_S if rotation else 0.0
    return np.asarray(turn_rad_s * np.sin(np.radians(np.asarray(lat_deg, dtype=float))))


def deep_end(
    x_m: ArrayLike, depth_m: ArrayLike, deep_m: float | Literal["deepest"]
) -> tuple[IntArray, FloatArray, BoolArray]:
    """Where each profile meets the deep sea.

    Parameters
    ----------
    x_m : (m,) array_like of float
        Distances from the coast, metres, from 0, not falling; two equal ones are a vertical step.
    depth_m : (n, m) array_like of float
        Depths, metres, > 0 (1e-6 up) but for the first sample, which may be 0; NaN after each row's end.
    deep_m : float or "deepest"
        Depth of the deep sea, metres, or the greatest depth of each row.

    Returns
    -------
    n_used : (n,) array of int
        Samples used, from the coast: up to the first as deep as the deep sea (the profile is cut exactly where
        the depth is reached, just before that sample), else up to the greatest depth. 0 where none can be used.
    outer_depth_m : (n,) array of float
        Depth of the deep sea, metres; NaN where the profile cannot be used.
    stepped : (n,) array of bool
        Whether the profile ends shallower and a vertical step to the deep sea follows.

    Raises
    ------
    ResponseError
        If shapes do not fit, `x_m` does not run from 0 without falling, or `deep_m` is not above 0.

    Examples
    --------
    >>> deep_end([0.0, 1e5, 2e5, 3e5], [[10.0, 100.0, 3000.0, 5000.0]], 4000.0)
    (array([4]), array([4000.]), array([False]))
    """
    x, depth = checked_profiles(x_m, depth_m)
    n = depth.shape[0]
    if deep_m == "deepest":
        valid = ~np.logical_or.accumulate(np.isnan(depth), axis=1)
        greatest = np.where(valid, depth, -np.inf).max(axis=1)
        outer = np.where(greatest > 0.0, greatest, np.nan)
    elif isinstance(deep_m, str) or not 0.0 < deep_m < np.inf:
        raise ResponseError(f"deep_m = {deep_m!r}: give metres above 0, or 'deepest'")
    else:
        outer = np.full(n, float(deep_m))
    n_used, stepped = np.zeros(n, dtype=np.int64), np.zeros(n, dtype=np.bool_)
    deep_ends(x, depth, outer, n_used, stepped)
    outer[n_used == 0] = np.nan
    return n_used, outer, stepped


def checked_profiles(x_m: ArrayLike, depth_m: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Copy positions and depths, checked: kernels want plain, writable, contiguous arrays."""
    x, depth = np.array(x_m, dtype=float), np.array(depth_m, dtype=float, order="C")
    if x.ndim != 1 or depth.ndim != 2 or depth.shape[1] != x.size:
        raise ResponseError(f"x_m of shape {x.shape}, depth_m of shape {depth.shape}: give (m,) and (n, m)")
    if x.size == 0 or x[0] != 0.0 or not np.all(np.isfinite(x)) or np.any(np.diff(x) < 0.0):
        raise ResponseError("x_m must start at 0 and never fall: distances from the coast, metres, seaward")
    return x, depth


def checked_rows(n: int, **values: ArrayLike) -> tuple[FloatArray, ...]:
    """Copy arrays of one value per transect, checked."""
    rows = tuple(np.array(value, dtype=float) for value in values.values())
    for name, row in zip(values, rows, strict=True):
        if row.shape != (n,):
            raise ResponseError(f"{name} has shape {row.shape}; give one value for each transect, ({n},)")
    return rows
