"""Layers full of made-up values, for tests of writers and readers."""

import numpy as np
import shapely

from shelfmap.columns import LAYERS, columns_of
from shelfmap.layers import Layer
from shelfmap.words import ENUMERATIONS


def made_up_layer(name, n=5, waves=(), geometry=None, **given):
    """A layer whose every nullable number is empty in its first row; `given` replaces columns."""
    rng = np.random.default_rng(7)
    columns = {}
    for column in columns_of(name, waves):
        if column.name in ENUMERATIONS:
            values = np.resize(np.array(list(ENUMERATIONS[column.name]), dtype=object), n)
        elif column.dtype == "int64":
            values = np.arange(n) + 1
        elif column.dtype == "bool":
            values = np.arange(n) % 2 == 0
        elif column.dtype == "str":
            values = np.array([f"{column.name} {i}" for i in range(n)], dtype=object)
        else:
            values = rng.random(n)
            values[:1] = np.nan if column.null_means else 0.5
        columns[column.name] = values
    if geometry is None and LAYERS[name].geometry == "line":
        geometry = np.array([shapely.LineString([(i, 40), (i + 0.5, 41)]) for i in range(n)], dtype=object)
    elif geometry is None and LAYERS[name].geometry == "point":
        geometry = np.array([shapely.Point(i, 40) for i in range(n)], dtype=object)
    return Layer(name=name, columns=columns | given, geometry=geometry, waves=waves)


def waves_for(name, waves):
    """Waves for layers that have columns for each, none for the others."""
    return waves if name in ("coast_index", "transects") else ()
