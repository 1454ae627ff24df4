"""The words of the output: cautions, statuses and other words a column may hold, and how waves are named.

Every word stands here once, with its meaning; the layers, their metadata and README take it from here.
"""

from collections.abc import Mapping
from types import MappingProxyType
from typing import Final

from shelfmap.constants import CONSTITUENTS
from shelfmap.errors import LayerError

__all__ = [
    "CAUTIONS",
    "CONFIDENCES",
    "END_REASONS",
    "ENUMERATIONS",
    "GAUGE_USES",
    "INDEX_CLASSES",
    "RESPONSE_KINDS",
    "STATUSES",
    "wave_label",
    "wave_title",
]

CAUTIONS: Final = (
    "Screening from gridded bathymetry. Not for navigation or any purpose involving safety at sea. "
    "Depths follow the grid's datum, taken as mean sea level unless stated; in shallow water that may be wrong by the "
    "local tidal range. Linear physics, no prediction of water level. "
    "Siting, diving, boat work and coastal defence need local codes, permits and licensed practice."
)

STATUSES: Final[Mapping[str, str]] = MappingProxyType({
    "ok": "A shelf with a break, facing the open sea: confidence and note say how good its results are.",
    "no_break": "No shelf break was found; results that need one are empty.",
    "facing_land": "The transect meets land on the other side: a gulf or strait, not a shelf.",
    "island": "Land, or a bank that all but shuts off the water behind, stands in the transect: no open shelf.",
    "edge_of_grid": "The grid ends before a break or the deep sea is reached: take a larger grid.",
    "void": "Depths are missing over too long a stretch of the transect.",
    "too_short": "The transect holds too few wet samples to compute anything.",
    "not_sea": "No water was found within reach of the station.",
})  # fmt: skip

END_REASONS: Final[Mapping[str, str]] = MappingProxyType({
    "search_length": "It reached the search length asked for.",
    "edge_of_grid": "The grid ends there.",
    "facing_land": "It met the coast on the other side.",
    "island": "It met an island.",
    "void": "Depths are missing from there on.",
})  # fmt: skip

CONFIDENCES: Final[Mapping[str, str]] = MappingProxyType({
    "good": "Straight open shelf, clear break, depths that settle the period.",
    "fair": "One of these is weak: use with the note.",
    "poor": "1-D physics hardly applies or the depths do not settle it: only a hint.",
})  # fmt: skip

INDEX_CLASSES: Final[Mapping[str, str]] = MappingProxyType({
    "none": "The shelf is not tuned to any of the constituents asked for.",
    "low": "A slight tuning.",
    "moderate": "Tuned well enough to matter locally.",
    "high": "Near resonance.",
    "very high": "At resonance, as far as the depths can tell.",
})  # fmt: skip

RESPONSE_KINDS: Final[Mapping[str, str]] = MappingProxyType({
    "constituent": "A tidal constituent.",
    "period": "A further period asked for in the settings.",
    "curve": "A point of the response curve, gain against period.",
})  # fmt: skip

GAUGE_USES: Final[Mapping[str, str]] = MappingProxyType({
    "fitted": "The edge tide is fitted to it, and the other gauges bear it out.",
    "off": "The edge tide is fitted to it, but the other gauges say otherwise: see note.",
    "no_value": "It has no amplitude and phase of a wave asked for, or every gauge in reach has zero.",
    "out_of_reach": "No cell of water of the region is near enough.",
})  # fmt: skip

#: Words a text column may hold, by column name, each with its meaning.
ENUMERATIONS: Final[Mapping[str, Mapping[str, str]]] = MappingProxyType({
    "status": STATUSES,
    "end_reason": END_REASONS,
    "confidence": CONFIDENCES,
    "index_class": INDEX_CLASSES,
    "kind": RESPONSE_KINDS,
    "gauge_use": GAUGE_USES,
})  # fmt: skip


_USUAL_NAMES: Final = {name.lower(): name for name in CONSTITUENTS}


def wave_label(wave: str | float) -> str:
    """Label of a wave in column names, unique among constituents and periods.

    Parameters
    ----------
    wave : str or float
        Name of a constituent, or a period, hours, from 0.001 to 100 000.

    Raises
    ------
    LayerError
        If the constituent is unknown or the period is out of range.

    Examples
    --------
    >>> wave_label("M2"), wave_label(0.5), wave_label(12.0)
    ('m2', 'p0_5h', 'p12h')
    """
    if isinstance(wave, str):
        if wave not in CONSTITUENTS:
            raise LayerError(f"constituent {wave!r} is unknown; use one of {', '.join(CONSTITUENTS)}")
        return wave.lower()
    if not 1e-3 <= wave <= 1e5:  # within these repr writes no exponent
        raise LayerError(f"a wave of period {wave} h has no column; give hours from 0.001 to 100000")
    return f"p{_digits(wave).replace('.', '_')}h"


def wave_title(label: str) -> str:
    """Name of a wave for people, from its label.

    Raises
    ------
    LayerError
        If the label is none that `wave_label` gives.

    Examples
    --------
    >>> wave_title("m2"), wave_title("p0_5h")
    ('M2', '0.5 h')
    """
    if label in _USUAL_NAMES:
        return _USUAL_NAMES[label]
    try:
        period_h = float(label[1:-1].replace("_", "."))
        known = wave_label(period_h) == label
    except (ValueError, LayerError):
        known = False
    if not known:
        raise LayerError(f"{label!r} is no wave label; make labels with wave_label, which gives 'm2' or 'p0_5h'")
    return f"{_digits(period_h)} h"


def _digits(value: float) -> str:
    """Shortest decimal digits that give this number and no other."""
    return repr(float(value)).removesuffix(".0")
