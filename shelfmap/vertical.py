"""What a raster's metadata say about the vertical: which way values count, their unit, their datum."""

import re
from collections.abc import Mapping
from typing import Final, Literal

from shelfmap.errors import GridError

__all__ = ["Positive", "check_unit", "datum_words", "decide_positive"]

Positive = Literal["up", "down"]

_TELLING_WORDS: Final[Mapping[str, Positive]] = {
    "height": "up", "altitude": "up", "elevation": "up", "elev": "up", "depth": "down",
}  # fmt: skip

#: Elevations count as such by their values alone where the deepest is this much larger than the highest.
_DEEP_TO_HIGH: Final = 1.2

_OTHER_UNITS: Final = re.compile(
    r"(kilo|deci|centi|milli)met(re|er)s?|km|dm|cm|mm|ft|foot|feet|us-ft|us survey f(oo|ee)t|fathoms?|fm", re.IGNORECASE
)

_DATUM: Final = re.compile(
    r"datum|mean.sea.?level|astronomical tide|geoid|ellipsoid|low water|high water|low tide|high tide"
    r"|\b(?-i:MSL|LAT|HAT|MLLW|MLW|MHW|MHHW|LLW|NAP|NHN|ODN|AHD|IGLD\w*|NGVD\w*|NAVD\w*|CGVD\w*|EVRF\w*|EGM\w*)\b",
    re.IGNORECASE,
)


def decide_positive(texts: Mapping[str, str], lowest: float, highest: float, name: str) -> tuple[Positive, str]:
    """Tell whether values are elevations ("up") or depths ("down"), and why.

    Parameters
    ----------
    texts : mapping of str
        What the metadata say, by attribute: ``positive``, ``standard_name``, ``long_name``, ``units`` and so on.
    lowest, highest : float
        Extreme values of the grid or of a sample of it, metres as stored; NaN where there is none.
    name : str
        Name of the grid, for the message.

    Returns
    -------
    positive, why : str
        "up" or "down", and one plain clause.

    Raises
    ------
    GridError
        If neither words nor values tell, or words contradict each other.

    Examples
    --------
    >>> decide_positive({"standard_name": "sea_floor_depth_below_geoid"}, 0.0, 812.0, "dem.nc")
    ('down', 'standard_name "sea_floor_depth_below_geoid"')
    >>> decide_positive({}, -5824.0, 2795.0, "dem.tif")
    ('up', 'deepest value -5824 m against highest 2795 m')
    """
    attribute = texts.get("positive", "").strip().lower()
    if attribute in ("up", "down"):
        return ("up" if attribute == "up" else "down"), f'attribute positive "{attribute}"'
    votes = {label: side for label, text in texts.items() if (side := _side_of(text)) is not None}
    if len(set(votes.values())) == 1:
        label, side = next(iter(votes.items()))
        return side, f'{label} "{texts[label]}"'
    if votes:
        said = ", ".join(f'{label} "{texts[label]}"' for label in votes)
        trouble = f"its metadata contradict each other ({said})"
    elif lowest < 0 < highest and -lowest >= _DEEP_TO_HIGH * highest:
        return "up", f"deepest value {lowest:.0f} m against highest {highest:.0f} m"
    else:
        trouble = f"no metadata tell, nor do the values ({lowest:.6g} to {highest:.6g})"
    raise GridError(
        f"{name}: cannot tell elevations from depths: {trouble}; "
        'set grid.positive = "up" for elevations or "down" for depths'
    )


def _side_of(text: str) -> Positive | None:
    """Side the words of one text stand for; None where they say nothing, or both."""
    words = re.findall(r"[a-z]+", text.lower())
    sides = {_TELLING_WORDS[word] for w in words if (word := w.removesuffix("s")) in _TELLING_WORDS}
    return sides.pop() if len(sides) == 1 else None


def check_unit(unit: str, name: str) -> None:
    """Refuse values that are said to be in anything but metres; an unknown word passes.

    Raises
    ------
    GridError
        If the unit is another length.
    """
    if _OTHER_UNITS.fullmatch(unit.strip()):
        raise GridError(f"{name}: values are in {unit.strip()!r}, but must be metres; convert the grid to metres")


def datum_words(texts: Mapping[str, str]) -> tuple[str, ...]:
    """Every text that names a vertical datum, as "label: text", each once and shortened.

    Examples
    --------
    >>> datum_words({"NOTE": "depths below LAT", "lat#units": "degrees_north"})
    ('NOTE: depths below LAT',)
    """
    found = {text.strip(): label for label, text in reversed(list(texts.items())) if _DATUM.search(f"{label} {text}")}
    return tuple(sorted(f"{label}: {text[:100]}" for text, label in found.items()))
