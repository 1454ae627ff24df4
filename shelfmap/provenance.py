"""Where the numbers of a run come from: settings, versions, sources and counts, as rows of text."""

import importlib.metadata
import platform
from collections import Counter
from collections.abc import Iterator, Mapping
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from shelfmap import __version__
from shelfmap.coast import Coast
from shelfmap.field import Field
from shelfmap.grid import GridSource
from shelfmap.layers import Layer
from shelfmap.settings import Settings
from shelfmap.words import CAUTIONS, STATUSES

__all__ = ["field_run_layer", "run_layer", "status_counts"]

_LIBRARIES: Final = ("numpy", "scipy", "numba", "shapely", "rasterio", "pyogrio", "pyproj", "contourpy")


def status_counts(status: NDArray[np.object_]) -> dict[str, int]:
    """How many transects came to each status, in the order of `STATUSES`; those that none came to are left out.

    Examples
    --------
    >>> status_counts(np.array(["void", "ok", "ok"], dtype=object))
    {'ok': 2, 'void': 1}
    """
    counts = Counter(status.tolist())
    return {word: counts[word] for word in STATUSES if counts[word]}


def run_layer(
    settings: Settings,
    source: GridSource,
    coast: Coast,
    step_m: float,
    status: NDArray[np.object_],
    field: Field | None = None,
) -> Layer:
    """Layer `run`: everything one needs to say where an output comes from, and to make it again.

    Parameters
    ----------
    settings : Settings
        As used, defaults and all.
    source : GridSource
        What was understood of the grid.
    coast : Coast
        The coast used.
    step_m : float
        Sample spacing along the transects, metres.
    status : (n,) array of str
        Status of each transect.
    field : Field, optional
        The 2-D response that was joined to them.
    """
    counts = status_counts(status)
    return _layer(
        settings,
        source,
        {"sample spacing [km]": f"{step_m / 1e3:.3f}", "coast": coast.source} | _field_rows(field),
        {"transects": str(len(status))} | {word: str(counts.get(word, 0)) for word in STATUSES},
    )


def field_run_layer(settings: Settings, source: GridSource, field: Field) -> Layer:
    """Layer `run` of a region: where its maps come from, and what was done to its water."""
    counts = {
        "cells": str(len(field.mesh.cell)),
        "unknowns": str(field.mesh.n_free),
        "natural modes": str(len(field.modes)),
        "gauges in reach": str(int((field.gauge_cell >= 0).sum())),
    }
    return _layer(settings, source, _field_rows(field), counts)


def _field_rows(field: Field | None) -> dict[str, str]:
    if field is None:
        return {}
    return {f"2-D response, remark {number}": remark for number, remark in enumerate(field.remarks, start=1)}


def _layer(settings: Settings, source: GridSource, sources: Mapping[str, str], counts: Mapping[str, str]) -> Layer:
    topics: dict[str, Mapping[str, str | None]] = {
        "caution": {"cautions": CAUTIONS},
        "setting": dict(_flat(settings.model_dump(mode="json"))),
        "source": _grid_rows(source) | dict(sources),
        "count": counts,
        "version": {"shelfmap": __version__, "python": platform.python_version()}
        | {name: importlib.metadata.version(name) for name in _LIBRARIES},
    }
    rows = [(topic, name, value) for topic, values in topics.items() for name, value in values.items()]
    topic, name, value = (np.array(column, dtype=object) for column in zip(*rows, strict=True))
    return Layer(name="run", columns={"topic": topic, "name": name, "value": value})


def _grid_rows(source: GridSource) -> dict[str, str]:
    """What was understood of each file of the grid, in order of priority."""
    rows: dict[str, str] = {}
    for sheet in source.sheets:
        for placed in sheet.files:
            label = "grid" if len(source.files) == 1 else f"grid {len(rows) // 3 + 1}"
            rows |= {
                label: placed.file.path,
                f"{label} values": f"positive {placed.positive}: {placed.positive_why}",
                f"{label} coordinate system": f"{sheet.projection.name} ({placed.crs_why})",
            }
    return rows


def _flat(tree: dict[str, Any], stem: str = "") -> Iterator[tuple[str, str | None]]:
    """Settings as dotted names and text."""
    for key, value in tree.items():
        if isinstance(value, dict) and value:
            yield from _flat(value, f"{stem}{key}.")
        else:
            yield f"{stem}{key}", None if value is None or value == {} else str(value)
