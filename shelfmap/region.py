"""The 2-D response as the settings ask for it: polygons, points and gauges read, waters opened, waves solved."""

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap.errors import FieldError
from shelfmap.field import Field, Points, solve_field
from shelfmap.gaugefile import read_gauges
from shelfmap.gauges import Gauges
from shelfmap.grid import GridSource
from shelfmap.settings import FieldSettings, Settings
from shelfmap.vectors import read_vector
from shelfmap.waters import open_waters
from shelfmap.waves import waves_of
from shelfmap.workers import Mapped

__all__ = ["solve_region"]

_POINT, _POLYGON = 0, 2
_KINDS = {_POINT: "points", _POLYGON: "polygons"}


def solve_region(source: GridSource, settings: Settings, *, mapped: Mapped = map) -> Field:
    """Response of the region of the settings.

    Parameters
    ----------
    source : GridSource
        The bathymetry.
    settings : Settings
        Of which `field`, `gauges` and `response` count; without a section `field` its defaults hold.
    mapped : Mapped
        Runs over the waves.

    Raises
    ------
    FieldError
        As `open_waters` and `solve_field`, or if a file holds other things than it should.
    LayerError
        If a file cannot be read.
    """
    chosen = settings.field or FieldSettings()
    waters = open_waters(
        source,
        chosen,
        region=_drawn(chosen, "file", _POLYGON),
        open_area=_drawn(chosen, "open_file", _POLYGON),
    )
    names = [wave.name for wave in waves_of(settings) if wave.name]
    gauges = None if settings.gauges.file is None else read_gauges(settings.gauges, names)
    return solve_field(waters, settings, gauges, points=_points(chosen, gauges), mapped=mapped)


def _points(chosen: FieldSettings, gauges: Gauges | None) -> Points | None:
    """Points of the settings' file, numbered, or else the gauges."""
    drawn = _drawn(chosen, "points_file", _POINT)
    if drawn is not None:
        names = np.array([str(number) for number in range(1, len(drawn) + 1)], dtype=object)
        return Points(name=names, lon_deg=shapely.get_x(drawn), lat_deg=shapely.get_y(drawn))
    if gauges is None:
        return None
    return Points(name=gauges.name, lon_deg=gauges.lon_deg, lat_deg=gauges.lat_deg)


def _drawn(chosen: FieldSettings, name: str, kind: int) -> NDArray[np.object_] | None:
    """Geometries of one kind from a file of the settings; None where none is named."""
    path = getattr(chosen, name)
    if path is None:
        return None
    data = read_vector(path, getattr(chosen, name.replace("file", "layer")))
    parts = shapely.get_parts(data.geometry)
    wanted = parts[shapely.get_dimensions(parts) == kind]
    if not len(wanted):
        raise FieldError(f"field.{name}: {data.path} holds no {_KINDS[kind]}; draw {_KINDS[kind]} in it")
    return np.asarray(wanted, dtype=object)
