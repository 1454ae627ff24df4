"""Shapes and columns of any vector file, in longitude and latitude."""

import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyogrio
import pyogrio.raw
import shapely
from numpy.typing import NDArray

from shelfmap.errors import GridError, LayerError, ShelfmapWarning
from shelfmap.geodesy import Projection

__all__ = ["VectorData", "read_table", "read_vector"]

ObjectArray = NDArray[np.object_]


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
    layer = _choose_layer(path, layer)
    with _readable(path):
        meta, _, wkb, fields = pyogrio.raw.read(path, layer=layer, force_2d=True)
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
    _require_layer(path, layer, list(_layers_of(path)))
    with _readable(path):
        meta, _, _, fields = pyogrio.raw.read(path, layer=layer, read_geometry=False)
    return {str(name): values for name, values in zip(meta["fields"], fields, strict=True)}


def _layers_of(path: Path) -> dict[str, bool]:
    """Name of every layer of a file, and whether it has shapes."""
    with _readable(path):
        return {str(name): geometry is not None for name, geometry in pyogrio.list_layers(path)}


def _choose_layer(path: Path, layer: str | None) -> str:
    """Layer asked for, or the only one that has shapes."""
    layers = _layers_of(path)
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
            return geometry
        moved: ObjectArray = shapely.transform(geometry, projection.to_lonlat, interleaved=False)
    except (GridError, RuntimeError) as error:
        raise LayerError(f"vector file {path}: {error}; save it in a system with an EPSG code") from error
    if not np.isfinite(shapely.get_coordinates(moved)).all():
        raise LayerError(
            f"vector file {path}: some points lie outside {projection.name}; assign the right system in a GIS"
        )
    return moved


@contextmanager
def _readable(path: Path) -> Iterator[None]:
    """Turn what GDAL says while reading into one error with a cure."""
    try:
        yield
    except (RuntimeError, OSError, shapely.errors.ShapelyError) as error:
        cure = "give a vector file that GDAL reads, such as a GeoPackage" if path.exists() else "correct the path"
        raise LayerError(f"vector file {path} cannot be read ({error}); {cure}") from error
