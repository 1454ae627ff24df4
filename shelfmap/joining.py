"""The 2-D response at the stations of transects: its columns there, and how far both pictures agree."""

from collections.abc import Iterator
from typing import Final

import numpy as np
from numpy.typing import NDArray

from shelfmap.field import Field, nearest_cells
from shelfmap.tables import Columns

__all__ = ["field_columns", "field_doubts"]

ComplexArray = NDArray[np.complex128]
FloatArray = NDArray[np.float64]

#: Ratios of both gains, the larger over the smaller, up to which they agree, and from which the transect says little.
AGREES: Final = 1.25
FAILS: Final = 2.0
#: Share of a difference, on a logarithmic scale, that lies seaward of the break if it is to be blamed on the ocean.
_SEAWARD: Final = 0.5


def field_columns(columns: Columns, field: Field, reach_m: float) -> Columns:
    """Columns `field_...` of each transect.

    Parameters
    ----------
    columns : dict of str to (n,) array
        `shelfmap.tables.station_columns` of all transects.
    field : Field
        The 2-D response, of the same waves.
    reach_m : float
        A cell farther than this from the shore end of a transect says nothing about it, metres.
    """
    cell = _cells(field, columns["shore_lon"], columns["lat_deg"], reach_m)
    out: Columns = {"field_ratio": _ratio(columns, field, cell)}
    for done in field.waves:
        label = done.wave.label
        unit, tide = _at(done.unit, cell), _at(done.tide, cell)
        out[f"field_gain_{label}"] = abs(unit)
        out[f"field_lag_{label}_deg"] = np.degrees(np.angle(unit))
        out[f"field_tide_{label}_m"] = abs(tide)
        is_dated = done.fit is not None
        phase_deg = np.mod(np.degrees(np.angle(tide)), 360.0)
        out[f"field_phase_{label}_deg"] = phase_deg if is_dated else np.full(len(cell), np.nan)
    return out


def field_doubts(columns: Columns, field: Field, reach_m: float) -> Iterator[tuple[NDArray[np.object_], FloatArray]]:
    """Where both pictures differ: what to say, and how many doubts it is worth, 0 where they agree.

    Parameters
    ----------
    columns, field, reach_m
        As for `field_columns`; `columns` holds its results too.
    """
    ratio = columns["field_ratio"]
    name = next((done.wave.name or f"{done.wave.period_h:g} h" for done in field.waves), "")
    with np.errstate(invalid="ignore", divide="ignore"):
        size = np.nan_to_num(abs(np.log(ratio)))
    weight = (size > np.log(AGREES)).astype(float) + (size > np.log(FAILS))
    seaward = _cells(field, columns["break_lon"], columns["break_lat_deg"], reach_m)
    at_break = abs(_at(field.waves[0].unit, seaward)) if field.waves else np.full(len(ratio), np.nan)
    with np.errstate(invalid="ignore", divide="ignore"):
        by_ocean = np.log(at_break) / np.log(ratio) > _SEAWARD
    text = np.array(
        [
            f"2-D gain of {name} is {each:.2g} times the transect's: "
            + (
                f"at the break it is {there:.2g} already, so that is not this shelf's doing"
                if ocean
                else "the shelf is not straight and even enough here"
            )
            for each, there, ocean in zip(ratio, at_break, by_ocean, strict=True)
        ],
        dtype=object,
    )
    yield text, weight


def _ratio(columns: Columns, field: Field, cell: NDArray[np.int64]) -> FloatArray:
    """2-D gain over the transect's, at the first constituent that has both."""
    out = np.full(len(cell), np.nan)
    for done in field.waves:
        gain = columns[f"damped_gain_{done.wave.label}"].astype(float)
        with np.errstate(invalid="ignore", divide="ignore"):
            ratio = abs(_at(done.unit, cell)) / gain
        out = np.where(np.isnan(out), ratio, out)
    return out


def _cells(field: Field, lon_deg: FloatArray, lat_deg: FloatArray, reach_m: float) -> NDArray[np.int64]:
    """Nearest cell of each point, -1 where none is in reach or the point is none."""
    is_point = np.isfinite(lon_deg) & np.isfinite(lat_deg)
    out = np.full(len(lon_deg), -1, dtype=np.int64)
    cell, away_m = nearest_cells(field.mesh, lon_deg[is_point], lat_deg[is_point])
    out[is_point] = np.where(away_m <= reach_m, cell, -1)
    return out


def _at(values: ComplexArray | None, cell: NDArray[np.int64]) -> ComplexArray:
    """Values of cells; NaN where there is none."""
    if values is None:
        return np.full(len(cell), complex(np.nan))
    return np.where(cell >= 0, values[np.maximum(cell, 0)], np.nan)
