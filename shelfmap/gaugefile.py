"""Tide gauges from a CSV table or a vector file of points."""

import difflib
import warnings
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Final

import numpy as np
import pandas as pd
import shapely
from numpy.typing import NDArray

from shelfmap.errors import SettingsError, ShelfmapWarning
from shelfmap.gauges import Gauges
from shelfmap.settings import GaugeSettings
from shelfmap.vectors import read_vector

__all__ = ["read_gauges"]

FloatArray = NDArray[np.float64]
Columns = Mapping[str, NDArray[Any]]

#: Names of tables of text that no library of vectors is asked about.
_TABLES: Final = (".csv", ".txt", ".tsv")
_METRES: Final = {"m": 1.0, "cm": 0.01, "mm": 0.001, "ft": 0.3048}
#: No tide is higher than this, metres.
_HIGHEST_M: Final = 20.0


def read_gauges(settings: GaugeSettings, constituents: Sequence[str]) -> Gauges:
    """Gauges of a file, with those of the constituents wanted that it has.

    Parameters
    ----------
    settings : GaugeSettings
        The file, which must be named, and what its columns are called; capitals do not matter.
    constituents : sequence of str
        Names of the constituents wanted.

    Returns
    -------
    Gauges
        Phases from 0 up to 360 degrees.

    Raises
    ------
    SettingsError
        If the file holds no gauge, lacks a column, or a value is none or out of its range.
    LayerError
        If a vector file cannot be read.

    Warns
    -----
    ShelfmapWarning
        If the file has no columns for a constituent wanted.
    """
    path = settings.file
    if path is None:
        raise SettingsError("gauges.file: must be given; name a table of harmonic constants")
    columns, points = _read(path, settings.layer)
    if points is not None:
        lon_deg, lat_deg = points.T
    else:
        lon_deg, lat_deg = (
            _numbers(columns, path, f"gauges.{key}", getattr(settings, key)) for key in ("lon_column", "lat_column")
        )
    if not len(lon_deg):
        raise SettingsError(f"{path}: holds no gauges; give a row for each")
    _refuse(path, "longitude", lon_deg, ~(abs(lon_deg) <= 360), "degrees from -360 to 360")
    _refuse(path, "latitude", lat_deg, ~(abs(lat_deg) <= 90), "degrees from -90 to 90")
    kept, amplitude_m, phase_deg = [], [], []
    for name in constituents:
        wanted = [column.replace("{name}", name) for column in (settings.amplitude_column, settings.phase_column)]
        if _place(columns, wanted[0]) is None:
            continue
        kept.append(name)
        amplitude_m.append(_amplitudes(columns, path, wanted[0], _METRES[settings.amplitude_unit]))
        phase_deg.append(
            np.full(len(lon_deg), np.nan)
            if _place(columns, wanted[1]) is None
            else np.mod(_numbers(columns, path, "gauges.phase_column", wanted[1]), 360.0)
        )
    if not kept:
        raise SettingsError(
            f"{path}: no column {settings.amplitude_column!r} for any of {', '.join(constituents)}; its columns are "
            f"{', '.join(columns)}: name theirs in gauges.amplitude_column"
        )
    if len(kept) < len(constituents):
        missing = ", ".join(name for name in constituents if name not in kept)
        warnings.warn(f"{path}: no columns for {missing}; the edge tide is not known", ShelfmapWarning, stacklevel=2)
    return Gauges(
        name=_identities(columns, settings.id_column, len(lon_deg)),
        lon_deg=lon_deg,
        lat_deg=lat_deg,
        constituents=tuple(kept),
        amplitude_m=np.stack(amplitude_m, axis=1),
        phase_deg=np.stack(phase_deg, axis=1),
    )


def _read(path: Path, layer: str | None) -> tuple[Columns, FloatArray | None]:
    """Columns of the file, and its points (n, 2) where these are shapes."""
    if path.suffix.lower() in _TABLES:
        return _read_table(path), None
    data = read_vector(path, layer)
    if not (shapely.get_type_id(data.geometry) == shapely.GeometryType.POINT).all():
        raise SettingsError(f"{path}: holds other shapes than points; give the gauges as points")
    return data.columns, shapely.get_coordinates(data.geometry)


def _read_table(path: Path) -> Columns:
    try:
        with path.open(encoding="utf-8-sig") as stream:  # a stream: a name would be followed into the network
            table = pd.read_csv(stream, sep=None, engine="python", dtype=object, skipinitialspace=True)
    except OSError as error:
        raise SettingsError(f"gauges.file {path} cannot be read: {error.strerror}") from error
    except (ValueError, pd.errors.ParserError) as error:
        raise SettingsError(
            f"gauges.file {path} is no table of comma-separated columns in UTF-8 ({error}); save it as one"
        ) from error
    return {str(name): table[name].to_numpy() for name in table.columns}


def _place(columns: Columns, name: str) -> str | None:
    """Name of a column as the file spells it; None where it has none."""
    if name in columns:
        return name
    return next((own for own in columns if own.lower() == name.lower()), None)


def _numbers(columns: Columns, path: Path, setting: str, name: str) -> FloatArray:
    """Values of a column, NaN where they are empty."""
    own = _place(columns, name)
    if own is None:
        near = difflib.get_close_matches(name, list(columns), n=1, cutoff=0.5)
        hint = f"did you mean {near[0]!r}? " if near else ""
        raise SettingsError(
            f"{path}: no column {name!r}; {hint}its columns are {', '.join(columns)}: name it in {setting}"
        )
    numbers = np.asarray(pd.to_numeric(pd.Series(columns[own]), errors="coerce"), dtype=float)
    is_text = np.isnan(numbers) & ~pd.isna(columns[own]) & (np.char.strip(columns[own].astype(str)) != "")
    _refuse(path, own, columns[own], is_text | np.isinf(numbers), "a number, or nothing")
    return numbers


def _amplitudes(columns: Columns, path: Path, name: str, metres: float) -> FloatArray:
    values = np.asarray(_numbers(columns, path, "gauges.amplitude_column", name) * metres)
    allowed = f"metres from 0 to {_HIGHEST_M:g}, or nothing; check gauges.amplitude_unit"
    _refuse(path, name, values, (values < 0) | (values > _HIGHEST_M), allowed)
    return values


def _refuse(path: Path, what: str, values: NDArray[Any], is_wrong: NDArray[np.bool_], allowed: str) -> None:
    """Name the first wrong value and its row."""
    if is_wrong.any():
        row = int(np.argmax(is_wrong))
        raise SettingsError(f"{path}, row {row + 1}: {what} is {values[row]}; give {allowed}")


def _identities(columns: Columns, name: str, count: int) -> NDArray[np.object_]:
    """Name of each gauge; row numbers where the file has none, and in the place of empty ones."""
    own = _place(columns, name)
    numbers = [str(row + 1) for row in range(count)]
    if own is None:
        return np.array(numbers, dtype=object)
    given = [None if pd.isna(value) else str(value).strip() for value in columns[own]]
    return np.array([one or number for one, number in zip(given, numbers, strict=True)], dtype=object)
