"""From profiles to shelf breaks, by thresholding the depth gradient."""

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from shelfmap._kernels import breaks
from shelfmap.profiles import Profiles
from shelfmap.settings import ShelfBreakSettings

__all__ = ["ShelfBreaks", "find_shelf_breaks", "measure_picked_breaks"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

#: The band of thresholds and smoothing lengths, as multiples of those set, that the spread is taken over.
BAND: Final = (0.5, 1.0, 2.0)
#: Gradients over fewer samples than this are noise of the grid: a kink between two samples blunts over one.
LEAST_SMOOTHING_SAMPLES: Final = 2.0


@dataclass(frozen=True, slots=True, kw_only=True)
class ShelfBreaks:
    """The shelf break of each profile, one row a transect; NaN where there is none."""

    break_m: FloatArray
    """(n,) distance from the shore, metres."""
    depth_m: FloatArray
    """(n,) depth there, metres, positive down."""
    slope_before: FloatArray
    """(n,) gradient over one smoothing length before it, rise over run."""
    slope_beyond: FloatArray
    """(n,) gradient over one smoothing length beyond it."""
    contrast: FloatArray
    """(n,) slope_beyond / slope_before, the latter counted as 1e-4 at least."""
    spread_m: FloatArray
    """(n,) distance between the nearest and the farthest break found over the band, metres; NaN where picked."""
    found_share: FloatArray
    """(n,) share of the band that found a break, 0 to 1; NaN where picked."""
    is_picked: BoolArray
    """(n,) True where picked by hand."""


def find_shelf_breaks(profiles: Profiles, settings: ShelfBreakSettings) -> ShelfBreaks:
    """Find the first lasting steepening of each profile, and how far it depends on threshold and smoothing.

    Parameters
    ----------
    profiles : Profiles
        Depths from the shore seaward.
    settings : ShelfBreakSettings
        Threshold, confirmation, smoothing, depths allowed.

    Returns
    -------
    ShelfBreaks
        The rule is that of `shelfmap._kernels.breaks.find_break`; the thresholds 1:100 and 1:40 are those of coastal
        practice (glossary of the Coastal Zone Management Unit, Barbados), the definition is that of IHO-IOC B-6: the
        line of marked increase of slope. Gradients are taken over two samples at least. "No break" is an answer.
    """
    limits = np.array(
        [settings.sustain_m, settings.shallowest_m, settings.deepest_m, settings.least_contrast, settings.ocean_m]
    )
    band = np.array(BAND)
    shape = (len(profiles.n_samples), len(band), len(band))
    found_m, found_depth_m = np.empty(shape), np.empty(shape)
    breaks.find_breaks(
        profiles.depth_m,
        profiles.n_samples,
        profiles.step_m,
        settings.slope * band,
        settings.confirm_slope,
        _smoothing_m(profiles, settings) * band,
        limits,
        found_m,
        found_depth_m,
    )
    middle = BAND.index(1.0)
    break_m, break_depth_m = found_m[:, middle, middle].copy(), found_depth_m[:, middle, middle].copy()
    has = np.isfinite(break_m)
    spread_m = np.full(len(break_m), np.nan)
    spread_m[has] = np.nanmax(found_m[has], axis=(1, 2)) - np.nanmin(found_m[has], axis=(1, 2))
    sides = _sides(profiles, settings, break_m, break_depth_m)
    return ShelfBreaks(
        break_m=break_m,
        depth_m=break_depth_m,
        slope_before=sides[:, 0],
        slope_beyond=sides[:, 1],
        contrast=_contrast(sides),
        spread_m=spread_m,
        found_share=np.isfinite(found_m).mean(axis=(1, 2)),
        is_picked=np.zeros(len(break_m), dtype=bool),
    )


def measure_picked_breaks(profiles: Profiles, settings: ShelfBreakSettings, break_m: FloatArray) -> ShelfBreaks:
    """Take breaks picked by hand.

    Parameters
    ----------
    profiles : Profiles
        Depths from the shore seaward.
    settings : ShelfBreakSettings
        Only the smoothing length counts, for the gradients.
    break_m : (n,) array of float
        Distance of each break from the shore, metres; NaN for none. One beyond the end of its profile is none.

    Returns
    -------
    ShelfBreaks
        Depths are those of the profile; without spread and share.
    """
    inside = (break_m > 0) & (break_m <= profiles.length_m)
    kept_m = np.where(inside, break_m, np.nan)
    depth_m = np.empty(len(kept_m))
    breaks.depths_at(profiles.depth_m, profiles.n_samples, profiles.step_m, kept_m, depth_m)
    sides = _sides(profiles, settings, kept_m, depth_m)
    return ShelfBreaks(
        break_m=kept_m,
        depth_m=depth_m,
        slope_before=sides[:, 0],
        slope_beyond=sides[:, 1],
        contrast=_contrast(sides),
        spread_m=np.full(len(break_m), np.nan),
        found_share=np.full(len(break_m), np.nan),
        is_picked=inside,
    )


def _smoothing_m(profiles: Profiles, settings: ShelfBreakSettings) -> float:
    """Length gradients are taken over, metres: as set, but two samples at least."""
    return max(settings.smoothing_m, LEAST_SMOOTHING_SAMPLES * profiles.step_m)


def _sides(
    profiles: Profiles, settings: ShelfBreakSettings, break_m: FloatArray, break_depth_m: FloatArray
) -> FloatArray:
    """(n, 2) gradients before and beyond each break."""
    sides = np.empty((len(break_m), 2))
    smoothing_m = _smoothing_m(profiles, settings)
    breaks.measure_breaks(
        profiles.depth_m, profiles.n_samples, profiles.step_m, break_m, break_depth_m, smoothing_m, sides
    )
    return sides


def _contrast(sides: FloatArray) -> FloatArray:
    return np.asarray(sides[:, 1] / np.maximum(sides[:, 0], breaks.LEAST_SLOPE_BEFORE))
