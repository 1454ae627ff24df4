"""What a user may draw instead of having it computed: the coast, the transects, the shelf breaks."""

import logging
from typing import Any, Final

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap.coast import Coast, coast_from_lines, trace_coast
from shelfmap.errors import CoastError, SettingsError, TransectError
from shelfmap.geodesy import unwrap_lon_deg
from shelfmap.grid import GridSource
from shelfmap.settings import Settings
from shelfmap.transects import Transects, lay_transects, transects_from_lines
from shelfmap.vectors import VectorData, read_vector
from shelfmap.workers import Mapped

__all__ = ["make_coast", "make_transects", "picked_breaks"]

_LOG = logging.getLogger(__name__)

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Geometries = NDArray[np.object_]

_POINT, _LINE, _POLYGON = 0, 1, 2
#: Names of the column of identities: ours, and what a shapefile leaves of it.
_ID_NAMES: Final = ("transect_id", "transect_i")
#: Identities are whole numbers that a shapefile's columns hold exactly.
_LARGEST_ID: Final = 2**31 - 1
#: A line that begins deeper than it ends by more than this may have been drawn from the sea to the shore, metres.
BACKWARD_FALL_M: Final = 20.0


def make_coast(source: GridSource, settings: Settings, *, mapped: Mapped = map) -> Coast:
    """Coast of a run: from the grid, or from the vector file of the settings (polygons are land, lines the coast).

    Parameters
    ----------
    source : GridSource
        The bathymetry.
    settings : Settings
        Of which `coast` counts.
    mapped : Mapped
        Runs the tiles of the grid, in this process by default; the coast is the same wherever they run.

    Raises
    ------
    CoastError
        If there is no coast, or the file holds neither lines nor polygons.
    LayerError
        If the file cannot be read.
    """
    if settings.coast.file is None:
        return trace_coast(source, settings.coast, mapped=mapped)
    data = read_vector(settings.coast.file, settings.coast.layer)
    kind = shapely.get_dimensions(data.geometry)
    if (kind == _POLYGON).any():
        _tell_left_out(data, kind != _POLYGON, "polygons, which are taken as land")
        return trace_coast(source, settings.coast, land=data.geometry[kind == _POLYGON], mapped=mapped)
    if (kind == _LINE).any():
        _tell_left_out(data, kind != _LINE, "lines")
        return coast_from_lines(source, data.geometry[kind == _LINE], str(data.path))
    raise CoastError(f"{data.path}: holds neither lines nor polygons; give the coast as lines, or the land as polygons")


def make_transects(source: GridSource, coast: Coast, settings: Settings) -> Transects:
    """Transects of a run: laid out along the coast, or those of the vector file of the settings.

    Parameters
    ----------
    source : GridSource
        The bathymetry; tells which end of a drawn line is the sea.
    coast : Coast
        What they stand on.
    settings : Settings
        Of which `transects` and `coast` count.

    Raises
    ------
    TransectError
        If there are none, or their column transect_id holds other things than whole numbers.
    LayerError
        If the file cannot be read.
    """
    if settings.transects.file is None:
        return lay_transects(coast, settings.transects, settings.coast)
    data = read_vector(settings.transects.file, settings.transects.layer)
    is_line = shapely.get_dimensions(data.geometry) == _LINE
    if not is_line.any():
        raise TransectError(f"{data.path}: holds no lines; draw each transect from the shore seaward")
    _tell_left_out(data, ~is_line, "lines")
    lines = _seaward(source, coast, data.geometry[is_line])
    ids = _identities(data)
    return transects_from_lines(
        lines, None if ids is None else _whole_numbers(data, ids)[is_line], coast, settings.transects.spacing_m
    )


def _tell_left_out(data: VectorData, is_other: NDArray[np.bool_], used: str) -> None:
    if is_other.any():
        _LOG.warning("%s: %d shapes that are no %s are left out", data.path, is_other.sum(), used)


def _identities(data: VectorData) -> NDArray[Any] | None:
    """Column of identities as it stands in a file; None without one."""
    return next((data.columns[name] for name in _ID_NAMES if name in data.columns), None)


def _whole_numbers(data: VectorData, ids: NDArray[Any]) -> IntArray:
    """Identities as integers, text that holds such among them; 0 where a row has none."""
    numbers, strange = np.zeros(len(ids), dtype=np.int64), []
    for row, given in enumerate(ids.tolist()):
        try:
            number = 0.0 if given is None or given == "" else float(given)
        except (TypeError, ValueError):
            number = np.inf
        if np.isnan(number):
            continue
        if number != np.floor(number) or abs(number) > _LARGEST_ID:
            strange.append(str(given)[:30])
        else:
            numbers[row] = int(number)
    if strange:
        raise TransectError(
            f"{data.path}: the column transect_id holds {', '.join(map(repr, strange[:3]))}, no whole number up to "
            f"{_LARGEST_ID}; make it an integer column that holds the transect_id of the transects"
        )
    return numbers


def _seaward(source: GridSource, coast: Coast, lines: Geometries) -> Geometries:
    """Turn round the lines that begin in deep water off the coast and end at it.

    Depth alone would turn a line across a gulf that begins off a bridged inlet, distance alone one across a strait.
    """
    ends = np.concatenate([shapely.get_coordinates(line)[[0, -1]] for line in lines])
    depth_m, _ = source.sample(ends[:, 0], ends[:, 1])
    depth_m = np.maximum(np.nan_to_num(depth_m, nan=np.inf), 0.0)  # off the grid and in voids: deep, as far as we know
    lon_deg = unwrap_lon_deg(ends[:, 0], float(coast.lines[0].lon_deg.mean()))
    squeeze = np.cos(np.radians(ends[:, 1].mean()))
    shore = shapely.multilinestrings(
        [shapely.linestrings(line.lon_deg * squeeze, line.lat_deg) for line in coast.lines]
    )
    away = shapely.distance(shapely.points(lon_deg * squeeze, ends[:, 1]), shore)
    with np.errstate(invalid="ignore"):
        backward = (depth_m[::2] - depth_m[1::2] > BACKWARD_FALL_M) & (away[::2] > away[1::2])
    if backward.any():
        _LOG.warning("%d of the transects drawn ran from the sea to the shore and were turned round", backward.sum())
    out = lines.copy()
    for row in np.flatnonzero(backward):  # reversing a multi-part line would keep the order of its parts
        out[row] = shapely.linestrings(shapely.get_coordinates(lines[row])[::-1])
    return out


def picked_breaks(settings: Settings, transect_id: IntArray) -> Geometries:
    """Shelf breaks picked by hand.

    Parameters
    ----------
    settings : Settings
        Of which `shelf_break.file` counts.
    transect_id : (n,) array of int
        Identities of the run's transects.

    Returns
    -------
    (n,) array of shapely points or None
        Longitude and latitude of the break of each transect; None where none is picked.

    Raises
    ------
    SettingsError
        If the file holds other things than points with the transect_id of a transect, one each.
    TransectError
        If its column transect_id holds other things than whole numbers.
    LayerError
        If the file cannot be read.
    """
    picks = np.full(len(transect_id), None, dtype=object)
    if settings.shelf_break.file is None:
        return picks
    data = read_vector(settings.shelf_break.file, settings.shelf_break.layer)
    column = _identities(data)
    if column is None or (shapely.get_dimensions(data.geometry) != _POINT).any():
        raise SettingsError(f"{data.path}: breaks picked by hand must be points with a column transect_id")
    if not len(data.geometry):
        raise SettingsError(f"{data.path}: holds no points; pick breaks, or drop shelf_break.file")
    points, part_of = shapely.get_parts(data.geometry, return_index=True)
    ids = _whole_numbers(data, column)[part_of]
    known = {int(number): row for row, number in enumerate(transect_id)}
    strangers = sorted({str(number) for number in ids if number not in known})
    if strangers:
        raise SettingsError(
            f"{data.path}: no transect of this run has transect_id {', '.join(strangers[:5])}; "
            "delete or mend these points, or give the transects they were picked on as transects.file"
        )
    for number, point in zip(ids, points, strict=True):
        if picks[known[int(number)]] is not None:
            raise SettingsError(f"{data.path}: transect_id {int(number)} has two breaks; leave one")
        picks[known[int(number)]] = point
    return picks
