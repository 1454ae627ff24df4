"""Layers with one row a transect, finished once all transects are known: neighbours compared, remarks joined."""

from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap.assess import confidences, neighbour_doubts
from shelfmap.coast import Coast
from shelfmap.columns import columns_of
from shelfmap.field import Field
from shelfmap.joining import field_columns, field_doubts
from shelfmap.layers import Layer
from shelfmap.settings import Settings
from shelfmap.tables import Columns
from shelfmap.transects import Transects, coast_pieces, crossing_transects
from shelfmap.waves import waves_of

__all__ = ["station_layers"]

FloatArray = NDArray[np.float64]


def station_layers(
    columns: Columns, transects: Transects, coast: Coast, settings: Settings, field: Field | None = None
) -> list[Layer]:
    """Layers `coast_index`, `transects` and `shelf_breaks`.

    Parameters
    ----------
    columns : dict of str to (n,) array
        `shelfmap.tables.station_columns` of all transects of a run, in order.
    transects : Transects
        The same transects.
    coast : Coast
        The coast they stand on.
    settings : Settings
        Which waves are wanted.
    field : Field, optional
        The 2-D response of the same waves.
    """
    reach_m = settings.gauges.reach_km * 1e3
    if field is not None:
        columns = columns | field_columns(columns, field, reach_m)
    labels = [wave.label for wave in waves_of(settings)]
    break_lon, break_lat = columns["break_lon"], columns["break_lat_deg"]
    crosses = crossing_transects(
        np.stack([columns["shore_lon"], columns["lat_deg"]], axis=1),
        np.stack([break_lon, break_lat], axis=1),
        transects.coast_part,
    )
    apart = [] if field is None else field_doubts(columns, field, reach_m)
    doubts = [*neighbour_doubts(crosses, _width_change(transects, columns)), *apart]
    columns = columns | {"crosses": crosses} | _judged(columns, doubts)
    pieces = coast_pieces(coast, transects)
    on_coast = ~shapely.is_missing(pieces)
    has_break = np.isfinite(break_lon)
    at_break = columns | {"lon_deg": columns["break_lon_deg"], "lat_deg": break_lat}
    return [
        _layer("coast_index", columns, on_coast, pieces[on_coast], labels, with_field=field is not None),
        _layer(
            "transects", columns, slice(None), shapely.from_wkb(columns["line"]), labels, with_field=field is not None
        ),
        _layer("shelf_breaks", at_break, has_break, shapely.points(break_lon[has_break], break_lat[has_break])),
    ]


def _layer(
    name: str,
    columns: Columns,
    rows: Any,
    geometry: NDArray[np.object_],
    waves: Sequence[str] = (),
    *,
    with_field: bool = False,
) -> Layer:
    """Those of the columns that belong to a layer, some rows of them."""
    wanted = [column.name for column in columns_of(name, waves, with_field=with_field)]
    chosen = {key: columns[key][rows] for key in wanted}
    return Layer(name=name, columns=chosen, geometry=geometry, waves=waves, with_field=with_field)


def _judged(columns: Columns, doubts: Iterable[tuple[NDArray[np.object_], NDArray[Any]]]) -> Columns:
    """Note and confidence of each transect: what was remarked on it alone, and what its surroundings make doubtful.

    A doubt is a text for each transect, and how much it counts there: 0 where it does not hold.
    """
    is_ok = columns["status"] == "ok"
    notes = [[] if own is None else [own] for own in columns["remarks"]]
    n_doubts = columns["n_doubts"].copy()
    for text, weight in doubts:
        for row in np.flatnonzero((weight > 0) & is_ok):
            notes[row].append(text[row])
        n_doubts += weight.astype(n_doubts.dtype)
    return {
        "note": np.array(["; ".join(parts) or None for parts in notes], dtype=object),
        "confidence": confidences(np.isfinite(columns["index_max"]), n_doubts),
    }


def _width_change(transects: Transects, columns: Columns) -> FloatArray:
    """Ratio of a shelf's width to the next stations', the larger over the smaller, the largest; NaN without any."""
    width_m = np.where(columns["status"] == "ok", columns["shelf_width_km"], np.nan)
    out = np.full(len(width_m), np.nan)
    same = (transects.coast_part[1:] == transects.coast_part[:-1]) & (transects.coast_part[1:] > 0)
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = np.where(same, width_m[1:] / width_m[:-1], np.nan)
    ratio = np.fmax(ratio, 1.0 / ratio)
    out[1:] = ratio
    out[:-1] = np.fmax(out[:-1], ratio)
    return out
