"""Shapes and columns of any vector file, in longitude and latitude."""

import sqlite3
import warnings
from collections.abc import Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
import pyogrio
import pyogrio.raw
import shapely
from numpy.typing import NDArray

from shelfmap.errors import GridError, LayerError, ShelfmapWarning
from shelfmap.geodesy import Projection
from shelfmap.localfiles import CLOSED, archive_of, local_file, why_refused, why_unnameable

__all__ = ["VectorData", "layers_in", "read_table", "read_vector"]

ObjectArray = NDArray[np.object_]


#: Longitudes may run on past 180, so far.
_FARTHEST_LON_DEG: Final = 720.0


@dataclass(frozen=True, slots=True, kw_only=True)
class VectorData:
    """Shapes and columns of one layer of a vector file.

    Parameters
    ----------
    geometry : (n,) array of shapely geometry
        Longitude and latitude, degrees, 2-D, none of them missing or empty; of any type.
    columns : dict of str to (n,) array
        Values by column name; integers with gaps come as floats with NaN.
    path : Path
        The file.
    layer : str
        The layer read.
    """

    geometry: ObjectArray
    columns: dict[str, NDArray[Any]]
    path: Path
    layer: str


def read_vector(path: str | Path, layer: str | None = None) -> VectorData:
    """Read the shapes and columns of a vector file, in longitude and latitude.

    Parameters
    ----------
    path : str or Path
        Anything GDAL reads.
    layer : str, optional
        Layer to read; may be left out where only one has shapes.

    Raises
    ------
    LayerError
        If the file cannot be read, the layer is not there or not named among several, or it has no shapes or no
        coordinate system.

    Warns
    -----
    ShelfmapWarning
        If rows have no shape; they are dropped.
    """
    path = Path(path)
    name = _local_name(path)
    layer = _choose_layer(path, name, layer)
    _refuse_endless(path, layer)
    with _readable(path):
        meta, _, wkb, fields = pyogrio.raw.read(name, layer=layer, force_2d=True)
        with np.errstate(invalid="ignore"):
            geometry: ObjectArray = shapely.from_wkb(wkb)
    keep = ~(shapely.is_missing(geometry) | shapely.is_empty(geometry))
    if not keep.all():
        warnings.warn(
            f"{path}, layer {layer}: {np.count_nonzero(~keep)} row(s) without a shape are left out",
            ShelfmapWarning,
            stacklevel=2,
        )
    return VectorData(
        geometry=_to_lonlat(geometry[keep], meta["crs"], path),
        columns={str(name): values[keep] for name, values in zip(meta["fields"], fields, strict=True)},
        path=path,
        layer=layer,
    )


def read_table(path: str | Path, layer: str) -> dict[str, NDArray[Any]]:
    """Columns of one layer, in order, without its shapes.

    Parameters
    ----------
    path : str or Path
        Vector file or table, anything GDAL reads.
    layer : str
        Layer to read.

    Returns
    -------
    dict of str to (n,) array
        NULL comes as NaN, in text columns as None; whole numbers with gaps come as floats.

    Raises
    ------
    LayerError
        If the file cannot be read or holds no such layer.
    """
    path = Path(path)
    name = _local_name(path)
    _require_layer(path, layer, list(_layers_of(path, name)))
    with _readable(path):
        meta, _, _, fields = pyogrio.raw.read(name, layer=layer, read_geometry=False)
    return {str(name): values for name, values in zip(meta["fields"], fields, strict=True)}


def layers_in(path: str | Path) -> list[str]:
    """Names of the layers and tables of a file.

    Raises
    ------
    LayerError
        If the file cannot be read.
    """
    path = Path(path)
    return list(_layers_of(path, _local_name(path)))


def _local_name(path: Path) -> str:
    """Name GDAL opens for a local file that sends it nowhere else; folders must be databases of that form."""
    if path.is_dir() and path.suffix.lower() == ".gdb":
        return str(path.absolute())
    if path.is_dir():
        raise LayerError(f"vector file {path} is a folder; name the file in it")
    file, why = local_file(path, "the setting that names it")
    if file is None:
        raise LayerError(f"vector file {path}: {why}")
    try:
        refused = why_unnameable(path) or why_refused(file)
    except OSError as error:
        raise LayerError(f"vector file {path} cannot be opened ({error.strerror}); make it readable") from error
    if refused is not None:
        raise LayerError(f"vector file {path}: {refused}")
    archive = archive_of(path) if file != path else None
    # never a bare name: GDAL takes what stands before a colon for a driver
    return str(path.absolute()) if archive is None else f"/vsi{archive[0]}/{file.absolute()}{archive[2]}"


def _layers_of(path: Path, name: str) -> dict[str, bool]:
    """Name of every layer of a file, and whether it has shapes."""
    with _readable(path):
        return {str(layer): geometry is not None for layer, geometry in pyogrio.list_layers(name)}


def _choose_layer(path: Path, name: str, layer: str | None) -> str:
    """Layer asked for, or the only one that has shapes."""
    layers = _layers_of(path, name)
    drawn = [name for name, has_shapes in layers.items() if has_shapes]
    if layer is not None:
        _require_layer(path, layer, list(layers))
        if not layers[layer]:
            raise LayerError(f"{path}, layer {layer} is a table without shapes; choose among {drawn}")
        return layer
    if not drawn:
        raise LayerError(f"vector file {path} holds no shapes, only tables; give a file of points, lines or polygons")
    if len(drawn) > 1:
        raise LayerError(f"vector file {path} holds several layers; name one of {', '.join(drawn)}")
    return drawn[0]


def _refuse_endless(path: Path, layer: str) -> None:
    """Refuse a view that calls itself: SQLite would make rows of it for ever."""
    if not path.is_file():  # a folder that is a database, or a file in an archive
        return
    with path.open("rb") as stream:
        if not stream.read(16).startswith(b"SQLite format 3"):
            return
    try:
        with closing(sqlite3.connect(f"{path.absolute().as_uri()}?mode=ro&immutable=1", uri=True)) as database:
            views = database.execute("SELECT sql FROM sqlite_master WHERE type = 'view' AND sql LIKE '%recursive%'")
            if views.fetchone() is not None:
                raise LayerError(f"vector file {path}: a layer is a view that calls itself; save {layer!r} as a table")
    except sqlite3.Error as error:
        raise LayerError(f"vector file {path} cannot be read ({error}); write it anew") from error


def _require_layer(path: Path, layer: str, known: list[str]) -> None:
    if layer not in known:
        raise LayerError(f"vector file {path} has no layer {layer!r}; its layers are {', '.join(known)}")


def _to_lonlat(geometry: ObjectArray, crs: str | None, path: Path) -> ObjectArray:
    if not crs:
        raise LayerError(
            f"vector file {path} has no coordinate system; assign it in a GIS, or restore a shapefile's .prj"
        )
    try:
        projection = Projection(crs)
        if projection.is_geographic:
            _check_degrees(geometry, path)
            return geometry
        moved: ObjectArray = shapely.transform(geometry, projection.to_lonlat, interleaved=False)
    except (GridError, RuntimeError) as error:
        raise LayerError(f"vector file {path}: {error}; save it in a system with an EPSG code") from error
    if not np.isfinite(shapely.get_coordinates(moved)).all():
        raise LayerError(
            f"vector file {path}: some points lie outside {projection.name}; assign the right system in a GIS"
        )
    return moved


def _check_degrees(geometry: ObjectArray, path: Path) -> None:
    lonlat = shapely.get_coordinates(geometry)
    # written so that NaN fails too
    if not ((np.abs(lonlat[:, 0]) <= _FARTHEST_LON_DEG).all() and (np.abs(lonlat[:, 1]) <= 90.0).all()):
        raise LayerError(
            f"vector file {path}: some points are no longitude and latitude in degrees; delete them, or assign the "
            "system the coordinates are in"
        )


@contextmanager
def _readable(path: Path) -> Iterator[None]:
    """Keep GDAL from the network; turn its errors while reading into one with a cure, its warnings into ours."""
    before = {option: pyogrio.get_gdal_config_option(option) for option in CLOSED}
    pyogrio.set_gdal_config_options(dict(CLOSED))
    try:
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            yield
    except (RuntimeError, OSError, ValueError, shapely.errors.ShapelyError) as error:
        raise LayerError(
            f"vector file {path} cannot be read ({_one_line(error)}); give a vector file that GDAL reads, such as a "
            "GeoPackage"
        ) from error
    finally:
        pyogrio.set_gdal_config_options(before)
    for said in dict.fromkeys(_one_line(warning.message) for warning in caught):
        warnings.warn(f"{path}: {said}", ShelfmapWarning, stacklevel=4)


def _one_line(said: object) -> str:
    """What a library says, on one line, cut where it is long."""
    text = " ".join(str(said).split())
    return text if len(text) <= 200 else f"{text[:200]}..."
