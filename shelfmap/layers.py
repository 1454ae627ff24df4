"""Results to GeoPackage, whole or not at all; the reader's names stand here too."""

import json
import os
import sqlite3
from collections.abc import Iterator, Mapping, Sequence
from contextlib import closing, contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyogrio
import shapely
from numpy.typing import NDArray

from shelfmap import __version__
from shelfmap.antimeridian import split_antimeridian
from shelfmap.columns import LAYERS, Column, columns_of
from shelfmap.errors import GridError, LayerError
from shelfmap.geodesy import WGS84, Projection
from shelfmap.replacement import check_target, replacing
from shelfmap.vectors import VectorData, read_table, read_vector
from shelfmap.words import CAUTIONS, ENUMERATIONS

__all__ = ["Layer", "VectorData", "read_table", "read_vector", "write_layers"]

ObjectArray = NDArray[np.object_]

_GEOMETRY_COLUMN = "geom"
_SHAPES = {
    "line": (shapely.GeometryType.LINESTRING, shapely.GeometryType.MULTILINESTRING),
    "point": (shapely.GeometryType.POINT,),
}
_ARROW_TYPES = {"int64": pa.int64(), "float64": pa.float64(), "str": pa.string(), "bool": pa.bool_()}
_KINDS = {"int64": "iuf", "float64": "iuf", "str": "UO", "bool": "b"}  # numpy kinds a column takes, besides objects


@dataclass(frozen=True, slots=True, kw_only=True)
class Layer:
    """Rows of one layer to be written, with exactly the columns of the column table.

    Parameters
    ----------
    name : str
        One of `shelfmap.columns.LAYERS`.
    columns : dict of str to (n,) array
        Values by column name. NaN, and None in object arrays, are written as NULL; integers may come as floats with
        NaN; infinite numbers are refused.
    geometry : (n,) array of shapely geometry or None
        Longitude and latitude, degrees, longitudes unwrapped; lines or points as the layer asks, None for a table.
        A None or empty member is written as NULL.
    waves : sequence of str
        Labels from `shelfmap.words.wave_label`, for the columns that stand once for each wave.

    Raises
    ------
    LayerError
        If columns are missing or unknown, lengths differ, or the geometry is not of the layer's kind.
    """

    name: str
    columns: Mapping[str, NDArray[Any]]
    geometry: ObjectArray | None = None
    waves: Sequence[str] = ()

    def __post_init__(self) -> None:
        wanted = [column.name for column in columns_of(self.name, self.waves)]
        missing = [name for name in wanted if name not in self.columns]
        extra = [name for name in self.columns if name not in wanted]
        if missing or extra:
            raise LayerError(
                f"layer {self.name}: missing columns {missing}, unknown columns {extra}; "
                "give exactly the columns of the column table"
            )
        if (self.geometry is None) != (LAYERS[self.name].geometry is None):
            raise LayerError(f"layer {self.name}: {LAYERS[self.name].geometry or 'no'} geometry must be given")
        lengths = {name: np.shape(self.columns[name]) for name in wanted}
        if self.geometry is not None:
            lengths[_GEOMETRY_COLUMN] = np.shape(self.geometry)
        if len(set(lengths.values())) > 1 or any(len(shape) != 1 for shape in lengths.values()):
            raise LayerError(f"layer {self.name}: columns must be 1-D and of one length, but are {lengths}")


def write_layers(
    path: str | Path,
    layers: Sequence[Layer],
    *,
    crs: str = WGS84,
    title: str = "",
    description: str = "",
    overwrite: bool = False,
) -> Path:
    """Write layers to one GeoPackage, whole or not at all.

    Parameters
    ----------
    path : str or Path
        File to write, ending in .gpkg. It appears, or replaces an older one, only when everything is in it.
    layers : sequence of Layer
        In the order of the file.
    crs : str
        Coordinate system of the geometries, ``EPSG:n``.
    title, description : str
        What the run is called and where its numbers come from, for the file's metadata.
    overwrite : bool
        Whether a file that is there may be replaced.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    OutputExistsError
        If the file is there and `overwrite` is False.
    LayerError
        If the layers do not fit the column table or the file cannot be written; an older file stays as it was.

    Notes
    -----
    Lines that cross the 180 meridian are split there. Column titles, meanings and allowed words go into the tables of
    OGC GeoPackage's Schema extension, the cautions into its Metadata extension. With the environment variable
    SOURCE_DATE_EPOCH set, the same layers give the same bytes.
    """
    path = Path(path)
    check_target(path, overwrite=overwrite)
    projection = _output_projection(crs)
    names = [layer.name for layer in layers]
    if not names or len(set(names)) != len(names):
        raise LayerError(f"output {path}: layers {names}; give at least one, and each once")
    about = {"title": title, "abstract": description, "software": f"shelfmap {__version__}", "cautions": CAUTIONS}
    with _one_sentence(path), replacing(path) as part, _dated():
        for layer in layers:
            _write_layer(part, layer, projection, crs)
        with closing(sqlite3.connect(part)) as database, database:
            _add_words(database, layers)
            _add_metadata(database, about)
            _count_rows(database, layers)
    return path


def _output_projection(crs: str) -> Projection:
    authority, _, code = crs.partition(":")
    if authority.upper() != "EPSG" or not code.isdecimal():
        raise LayerError(f"output crs {crs!r} is not of the form EPSG:n; GIS programs need a code, such as EPSG:4326")
    try:
        projection = Projection(crs)
    except GridError as error:
        raise LayerError(f"output {error}") from error
    if not (projection.crs.is_geographic or projection.crs.is_projected):
        raise LayerError(
            f"output crs {crs!r} ({projection.crs.name}) is neither geographic nor projected; "
            "give one that maps are drawn in, such as EPSG:4326"
        )
    return projection


@contextmanager
def _one_sentence(path: Path) -> Iterator[None]:
    """Turn what GDAL, SQLite and the system say while writing into one error with a cure."""
    try:
        yield
    except LayerError:
        raise
    except (RuntimeError, sqlite3.Error, OSError) as error:
        raise LayerError(
            f"output {path} cannot be written ({error}); make room on the disk or write to another folder"
        ) from error


@contextmanager
def _dated() -> Iterator[None]:
    """Let GDAL write the date of SOURCE_DATE_EPOCH, if the environment has one, for the same bytes every time."""
    seconds = os.environ.get("SOURCE_DATE_EPOCH")
    if seconds is None:
        yield
        return
    if not seconds.isdecimal():
        raise LayerError(f"SOURCE_DATE_EPOCH = {seconds!r} is no whole number of seconds; mend or unset it")
    date = datetime.fromtimestamp(int(seconds), tz=UTC).strftime("%Y-%m-%dT%H:%M:%S.000Z")
    before = pyogrio.get_gdal_config_option("OGR_CURRENT_DATE")
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": date})
    try:
        yield
    finally:
        pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": before})


def _write_layer(part: Path, layer: Layer, projection: Projection, crs: str) -> None:
    columns = columns_of(layer.name, layer.waves)
    arrays = [_array(layer, column) for column in columns]
    fields = [pa.field(column.name, _ARROW_TYPES[column.dtype], metadata=_field_metadata(column)) for column in columns]
    geometry_options: dict[str, str] = {}
    layer_options = {"IDENTIFIER": LAYERS[layer.name].title, "DESCRIPTION": LAYERS[layer.name].description}
    if layer.geometry is not None:
        geometry, kind = _drawable(layer, projection)
        arrays.append(pa.array(shapely.to_wkb(geometry, flavor="iso"), pa.binary()))
        fields.append(pa.field(_GEOMETRY_COLUMN, pa.binary()))
        geometry_options = {"geometry_name": _GEOMETRY_COLUMN, "geometry_type": kind, "crs": crs}
        layer_options["GEOMETRY_NAME"] = _GEOMETRY_COLUMN
    pyogrio.write_arrow(
        pa.Table.from_arrays(arrays, schema=pa.schema(fields)),
        part,
        layer=layer.name,
        driver="GPKG",
        layer_metadata={"CAUTIONS": CAUTIONS},
        layer_options=layer_options,
        **geometry_options,
    )


def _field_metadata(column: Column) -> dict[str, str]:
    """Title and meaning of a column as GDAL reads them from Arrow."""
    unit = f" Unit: {column.unit}." if column.unit else ""
    empty = f" Empty: {column.null_means}" if column.null_means else ""
    return {"GDAL:OGR:alternative_name": column.alias, "GDAL:OGR:comment": f"{column.meaning}{unit}{empty}"}


def _array(layer: Layer, column: Column) -> pa.Array:
    """Turn one column into Arrow, checked: its type, no infinite number, no gap where none may be, only known words."""
    where = f"layer {layer.name}, column {column.name}"
    values = np.asarray(layer.columns[column.name])
    if values.dtype.kind not in _KINDS[column.dtype] + "O":
        raise LayerError(f"{where}: {values.dtype} given, {column.dtype} wanted")
    try:
        array = pa.array(values, _ARROW_TYPES[column.dtype], from_pandas=True)
    except (pa.ArrowException, UnicodeError) as error:
        raise LayerError(f"{where}: values are not all {column.dtype} ({error})") from error
    if column.dtype == "float64" and (infinite := np.count_nonzero(np.isinf(np.asarray(array)))):
        raise LayerError(f"{where}: {infinite} infinite value(s); give NaN and say why in status")
    if array.null_count and not column.null_means:
        raise LayerError(f"{where}: {array.null_count} empty value(s), but every row must have one")
    allowed = ENUMERATIONS.get(column.name)
    if allowed and (strangers := set(array.unique().to_pylist()) - {None, *allowed}):
        raise LayerError(f"{where}: {sorted(strangers)} not among the words {', '.join(allowed)}")
    return array


def _drawable(layer: Layer, projection: Projection) -> tuple[ObjectArray, str]:
    """Geometry in the output's system and its OGR type; one line in several parts makes all multilines."""
    kind = LAYERS[layer.name].geometry
    geometry = shapely.force_2d(np.asarray(layer.geometry, dtype=object))
    geometry[shapely.is_empty(geometry)] = None
    if not np.isin(shapely.get_type_id(geometry), [shapely.GeometryType.MISSING, *_SHAPES[str(kind)]]).all():
        raise LayerError(f"layer {layer.name}: only {kind} geometry belongs there")
    lonlat = shapely.get_coordinates(geometry)
    if not (np.isfinite(lonlat).all() and (np.abs(lonlat[:, 1]) <= 90.0).all()):
        raise LayerError(f"layer {layer.name}: geometry holds NaN, infinite numbers or latitudes beyond 90 degrees")
    geometry = split_antimeridian(geometry)
    if not projection.is_geographic:
        geometry = shapely.transform(geometry, projection.from_lonlat, interleaved=False)
        if not np.isfinite(shapely.get_coordinates(geometry)).all():
            raise LayerError(
                f"layer {layer.name} reaches beyond {projection.name}; choose an output crs for the whole coast"
            )
    if kind == "point":
        return geometry, "Point"
    single = shapely.get_type_id(geometry) == shapely.GeometryType.LINESTRING
    if (single | shapely.is_missing(geometry)).all():
        return geometry, "LineString"
    geometry[single] = shapely.multilinestrings(geometry[single], indices=np.arange(np.count_nonzero(single)))
    return geometry, "MultiLineString"


def _add_words(database: sqlite3.Connection, layers: Sequence[Layer]) -> None:
    """Add the words a text column may hold, each with its meaning; GDAL's Arrow writer cannot."""
    for layer in layers:
        for name in (column.name for column in columns_of(layer.name, layer.waves) if column.name in ENUMERATIONS):
            database.executemany(
                "INSERT OR IGNORE INTO gpkg_data_column_constraints"
                " (constraint_name, constraint_type, value, description) VALUES (?, 'enum', ?, ?)",
                [(name, word, f"{word}: {meaning}") for word, meaning in ENUMERATIONS[name].items()],
            )
            database.execute(
                "UPDATE gpkg_data_columns SET constraint_name = ? WHERE table_name = ? AND column_name = ?",
                (name, layer.name, name),
            )


def _add_metadata(database: sqlite3.Connection, about: dict[str, str]) -> None:
    """Add what the whole file is, as JSON (RFC 8259).

    Not through GDAL's own dataset metadata: with those in it, every program that reads the file through GDAL leaves a
    .aux.xml beside it (measured with GDAL 3.12.4).
    """
    cursor = database.execute(
        "INSERT INTO gpkg_metadata (md_scope, md_standard_uri, mime_type, metadata)"
        " VALUES ('dataset', 'https://www.rfc-editor.org/rfc/rfc8259', 'application/json', ?)",
        (json.dumps(about, ensure_ascii=False),),
    )
    database.execute(
        "INSERT INTO gpkg_metadata_reference (reference_scope, timestamp, md_file_id)"
        " SELECT 'geopackage', max(last_change), ? FROM gpkg_contents",
        (cursor.lastrowid,),
    )


def _count_rows(database: sqlite3.Connection, layers: Sequence[Layer]) -> None:
    """Make sure that all rows arrived."""
    for layer in layers:
        (count,) = database.execute(f'SELECT count(*) FROM "{layer.name}"').fetchone()
        wanted = len(next(iter(layer.columns.values())))
        if count != wanted:
            raise LayerError(
                f"layer {layer.name}: {count} of {wanted} rows arrived; make room on the disk and run again"
            )
