"""Tide gauges from a table or a vector file of points."""

import csv
import difflib
import io
import warnings
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap.errors import LayerError, SettingsError, ShelfmapWarning
from shelfmap.gauges import Gauges
from shelfmap.geodesy import unwrap_lon_deg
from shelfmap.localfiles import local_file
from shelfmap.settings import GaugeSettings
from shelfmap.vectors import read_vector

__all__ = ["read_gauges"]

FloatArray = NDArray[np.float64]

#: Files of these names are read as text, others are handed to GDAL.
_TEXT: Final = (".csv", ".tsv", ".txt")
_DELIMITERS: Final = ",;\t"
#: Cells that hold no value, in small letters.
_MISSING: Final = ("", "nan", "na", "n/a", "null", "none")
_UNIT_M: Final = {"m": 1.0, "cm": 0.01, "mm": 0.001, "ft": 0.3048}
#: No constituent is higher anywhere, metres: more is another unit, or stands for a missing value.
_HIGHEST_M: Final = 20.0
#: Phases may run on past a turn, so far, degrees: more stands for a missing value.
_FARTHEST_PHASE_DEG: Final = 720.0
#: An error names no more columns of a file than this, and shows no more characters of a value.
_MOST_COLUMNS: Final = 30
_SHOWN: Final = 40


@dataclass(frozen=True, slots=True, kw_only=True)
class _Table:
    """What a file holds, one row a gauge.

    Attributes
    ----------
    path : Path
        The file.
    places : list of str
        Where each row stands in it, for messages.
    columns : dict of str to list
        Values as they stand, by column name.
    lonlat_deg : (n, 2) array of float or None
        Points of a vector file.
    """

    path: Path
    places: list[str]
    columns: dict[str, list[Any]]
    lonlat_deg: FloatArray | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class _Wave:
    """A constituent and the columns it stands in."""

    name: str
    amplitude: str
    phase: str | None


def read_gauges(settings: GaugeSettings, constituents: Sequence[str]) -> Gauges:
    """Tide gauges of the file of the settings, every row of it.

    Parameters
    ----------
    settings : GaugeSettings
        The file, its columns and their unit.
    constituents : sequence of str
        Those wanted, by their usual names.

    Returns
    -------
    Gauges
        Those of the constituents that the file has amplitudes of, in the order asked for. Rows without an identity
        are named by their number; an identity that stands twice gets a number behind it.

    Raises
    ------
    SettingsError
        If no file is named, or it lacks a column: of coordinates, of identities where the settings name one, or of
        amplitudes of any of the constituents.
    LayerError
        If the file cannot be read, is empty, or holds a value that is no such thing.

    Warns
    -----
    ShelfmapWarning
        If a constituent has no column of amplitudes or no value in it, and is left out; if one has no column of
        phases; if an identity stands twice.
    """
    if settings.file is None:
        raise SettingsError("gauges.file is not given; name a CSV or a vector file of tide gauges")
    is_text = settings.file.suffix.lower() in _TEXT
    table = (_text_table if is_text else _vector_table)(settings.file, settings.layer)
    if not table.places:
        raise LayerError(f"{table.path}: holds no gauges; give one row for each")
    lon_deg, lat_deg = _coordinates(table, settings)
    waves = _waves(table, settings, constituents)
    amplitude_m = np.stack([_amplitude_m(table, wave.amplitude, settings.amplitude_unit) for wave in waves], axis=1)
    phase_deg = np.stack([_phase_deg(table, wave.phase) for wave in waves], axis=1)
    filled = np.flatnonzero(np.isfinite(amplitude_m).any(axis=0))
    if not len(filled):
        raise LayerError(
            f"{table.path}: the columns {', '.join(_shown(wave.amplitude) for wave in waves)} are empty; "
            "give the amplitude of one constituent at one gauge at least"
        )
    identities = _identities(table, settings)
    names = [wave.name for wave in waves]
    kept = [names[n] for n in filled]
    _tell_left_out(table, f"no column {_shown(settings.amplitude_column)}", [n for n in constituents if n not in names])
    _tell_left_out(table, "no amplitude in their columns", [name for name in names if name not in kept])
    return Gauges(
        name=identities,
        lon_deg=lon_deg,
        lat_deg=lat_deg,
        constituents=tuple(kept),
        amplitude_m=amplitude_m[:, filled],
        phase_deg=phase_deg[:, filled],
    )


# ---- files


def _text_table(path: Path, layer: str | None) -> _Table:
    """Table of a text file whose first line names the columns."""
    if layer is not None:
        raise SettingsError(f"gauges.layer = {_shown(layer)}: {path} is text, which has no layers; leave it out")
    text = _text(path)
    delimiter = max(_DELIMITERS, key=text.lstrip().partition("\n")[0].count)
    reader = csv.reader(io.StringIO(text), delimiter=delimiter, strict=True)
    try:
        lines = [(reader.line_num, [cell.strip() for cell in cells]) for cells in reader]
    except csv.Error as error:
        raise LayerError(f"{path}, line {reader.line_num}: {error}; mend the quotes there") from error
    lines = [(number, cells) for number, cells in lines if any(cells)]
    if not lines:
        raise LayerError(f"{path}: is empty; give a heading that names the columns, and a line for each gauge")
    (_, names), *rows = lines
    twice = next((name for name, count in Counter(names).items() if name and count > 1), None)
    if twice is not None:
        raise LayerError(f"{path}: two columns are called {_shown(twice)}; rename one")
    for number, cells in rows:
        if any(cells[len(names) :]):
            raise LayerError(
                f"{path}, line {number}: has {len(cells)} values for {len(names)} columns; write numbers with a "
                "decimal point, and quote text that holds the delimiter"
            )
        cells.extend([""] * (len(names) - len(cells)))
    return _Table(
        path=path,
        places=[f"line {number}" for number, _ in rows],
        columns={name: [cells[n] for _, cells in rows] for n, name in enumerate(names) if name},
    )


def _text(path: Path) -> str:
    """Content of a local file of text; Python opens it, so that nothing in it leads elsewhere."""
    file, why = local_file(path, "gauges.file")
    if file is None:
        raise LayerError(f"gauge file {path}: {why}")
    if file != path:
        raise LayerError(f"gauge file {path} lies in an archive; unpack it and name the file itself")
    try:
        text = path.read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as error:
        raise LayerError(f"gauge file {path} is no text in UTF-8; save it as UTF-8") from error
    except OSError as error:
        raise LayerError(f"gauge file {path} cannot be opened ({error.strerror}); make it readable") from error
    if "\0" in text:
        raise LayerError(f"gauge file {path} is no text in UTF-8; save it as UTF-8")
    return text


def _vector_table(path: Path, layer: str | None) -> _Table:
    """Table of a vector file of points."""
    data = read_vector(path, layer)
    is_point = (shapely.get_dimensions(data.geometry) == 0) & (shapely.get_num_coordinates(data.geometry) == 1)
    if not is_point.all():
        row = int(np.argmin(is_point))
        raise LayerError(f"{path}, row {row + 1}: is a {data.geometry[row].geom_type}; give each gauge as one point")
    return _Table(
        path=path,
        places=[f"row {number}" for number in range(1, len(is_point) + 1)],
        columns={name: values.tolist() for name, values in data.columns.items()},
        lonlat_deg=shapely.get_coordinates(data.geometry),
    )


# ---- columns


def _find(table: _Table, wanted: str) -> str | None:
    """Name of a column as it stands in the file: exactly, else without regard to case; None where there is none."""
    if wanted in table.columns:
        return wanted
    alike = [name for name in table.columns if name.casefold() == wanted.casefold()]
    if len(alike) > 1:
        raise SettingsError(f"{table.path}: {_list(alike)} are all like {wanted!r}; name one in the settings of gauges")
    return alike[0] if alike else None


def _require(table: _Table, wanted: str, setting: str) -> str:
    """Name of a column as it stands in the file."""
    found = _find(table, wanted)
    if found is None:
        raise SettingsError(f"{table.path}: has no column {_shown(wanted)}{_hint(table, wanted, setting)}")
    return found


def _hint(table: _Table, wanted: str, setting: str) -> str:
    """What is there instead of a column, and the setting that names it."""
    usual = {name.casefold(): name for name in table.columns}
    near = difflib.get_close_matches(wanted.casefold(), usual, n=1, cutoff=0.4)
    closest = f", the closest {_shown(usual[near[0]])}" if near else ""
    return f"; its columns are {_list(list(table.columns))}{closest}; name the right one as {setting}"


def _waves(table: _Table, settings: GaugeSettings, constituents: Sequence[str]) -> list[_Wave]:
    """Those of the constituents that have a column of amplitudes."""
    waves = []
    for name in constituents:
        amplitude = _find(table, settings.amplitude_column.replace("{name}", name))
        if amplitude is not None:
            phase = _find(table, settings.phase_column.replace("{name}", name))
            waves.append(_Wave(name=name, amplitude=amplitude, phase=phase))
    if not waves:
        if not constituents:
            raise SettingsError("no constituents are asked of the gauges; name some as response.constituents")
        wanted = settings.amplitude_column.replace("{name}", constituents[0])
        raise SettingsError(
            f"{table.path}: has no amplitudes of {', '.join(constituents)}, no column {_shown(wanted)} or alike"
            f"{_hint(table, wanted, 'gauges.amplitude_column')}"
        )
    _tell_phaseless(table, settings, [wave.name for wave in waves if wave.phase is None])
    return waves


def _tell_phaseless(table: _Table, settings: GaugeSettings, names: list[str]) -> None:
    if names:
        wanted = settings.phase_column.replace("{name}", names[0])
        warnings.warn(
            f"{table.path}: has no phases of {', '.join(names)}, no column {_shown(wanted)} or alike"
            f"{_hint(table, wanted, 'gauges.phase_column')}",
            ShelfmapWarning,
            stacklevel=4,
        )


def _tell_left_out(table: _Table, why: str, names: list[str]) -> None:
    if names:
        warnings.warn(f"{table.path}: {', '.join(names)} left out of the gauges: {why}", ShelfmapWarning, stacklevel=3)


# ---- values


def _coordinates(table: _Table, settings: GaugeSettings) -> tuple[FloatArray, FloatArray]:
    """Longitudes from -180 up to 180 and latitudes, degrees, none missing."""
    if table.lonlat_deg is not None:
        return unwrap_lon_deg(table.lonlat_deg[:, 0], 0.0), table.lonlat_deg[:, 1].copy()
    found = []
    for wanted, setting, most in ((settings.lon_column, "lon", 360.0), (settings.lat_column, "lat", 90.0)):
        name = _require(table, wanted, f"gauges.{setting}_column")
        values = _numbers(table, name, (-most, most), "degrees", "give longitude and latitude in degrees")
        if np.isnan(values).any():
            row = int(np.argmax(np.isnan(values)))
            raise LayerError(
                f"{table.path}, {table.places[row]}: {_shown(name)} is {_shown(table.columns[name][row])}, no "
                "coordinate; give it, or delete the row"
            )
        found.append(values)
    return unwrap_lon_deg(found[0], 0.0), found[1]


def _amplitude_m(table: _Table, name: str, unit: str) -> FloatArray:
    """Amplitudes of a column, metres; NaN where a cell is empty."""
    cure = f"check gauges.amplitude_unit = {unit!r}, and leave cells without a value empty"
    return _numbers(table, name, (0.0, _HIGHEST_M / _UNIT_M[unit]), unit, cure) * _UNIT_M[unit]


def _phase_deg(table: _Table, name: str | None) -> FloatArray:
    """Phases of a column, degrees from 0 up to 360; NaN where a cell is empty, or without a column."""
    if name is None:
        return np.full(len(table.places), np.nan)
    bounds = (-_FARTHEST_PHASE_DEG, _FARTHEST_PHASE_DEG)
    turned = _numbers(table, name, bounds, "degrees", "leave cells without a value empty") % 360.0
    return turned % 360.0  # a hair below 0 is rounded to a whole turn


def _numbers(table: _Table, name: str, bounds: tuple[float, float], unit: str, cure: str) -> FloatArray:
    """Numbers of a column; NaN where a cell is empty.

    Raises
    ------
    LayerError
        If a cell holds other things than a number within the bounds.
    """
    numbers = np.full(len(table.places), np.nan)
    for row, value in enumerate(table.columns[name]):
        if _is_missing(value):
            continue
        where = f"{table.path}, {table.places[row]}: {_shown(name)} is {_shown(value)}"
        try:
            numbers[row] = _number(value)
        except (TypeError, ValueError, OverflowError) as error:
            raise LayerError(
                f"{where}, no number; write numbers with a decimal point, and leave cells without a value empty"
            ) from error
        if not bounds[0] <= numbers[row] <= bounds[1]:
            raise LayerError(f"{where}, allowed are {bounds[0]:g} to {bounds[1]:g} {unit}; {cure}")
    return numbers


def _number(value: Any) -> float:
    if "_" in str(value):  # Python groups digits so, nobody else does
        raise ValueError
    return float(value)


def _identities(table: _Table, settings: GaugeSettings) -> NDArray[np.object_]:
    """Identity of each gauge, each another: those of the file, else the number of the row."""
    if settings.id_column == GaugeSettings.model_fields["id_column"].default:
        column = _find(table, settings.id_column)
    else:
        column = _require(table, settings.id_column, "gauges.id_column")
    values = [None] * len(table.places) if column is None else table.columns[column]
    given = [str(row) if _is_missing(value) else _label(value) for row, value in enumerate(values, start=1)]
    taken, count, names = set(given), Counter[str](), []
    for name in given:
        count[name] += 1
        new = name
        while count[name] > 1 and (new := f"{name}-{count[name]}") in taken:
            count[name] += 1
        taken.add(new)
        names.append(new)
    twice = sorted({name for name in given if count[name] > 1})
    if twice:
        warnings.warn(
            f"{table.path}: {_list(twice)} stand twice or more among the identities of gauges; a number is put behind "
            "all but the first",
            ShelfmapWarning,
            stacklevel=3,
        )
    return np.array(names, dtype=object)


def _label(value: Any) -> str:
    """Identity as text; whole numbers that a file keeps as floats without their fraction."""
    return str(int(value)) if isinstance(value, float) and value.is_integer() else str(value).strip()


def _is_missing(value: Any) -> bool:
    return value is None or str(value).strip().casefold() in _MISSING


def _shown(value: Any) -> str:
    """A value in quotes as Python writes it, on one line, cut where it is long."""
    text = repr(value)
    return text if len(text) <= _SHOWN else f"{text[:_SHOWN]}..."


def _list(names: list[str]) -> str:
    return ", ".join(map(_shown, names[:_MOST_COLUMNS])) + ", ..." * (len(names) > _MOST_COLUMNS)
