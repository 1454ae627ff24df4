"""Rows of layers: checked against the column table, and as Arrow tables that travel, are kept and are written."""

import io
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import pyarrow as pa
import shapely
from numpy.typing import NDArray

from shelfmap.antimeridian import split_antimeridian
from shelfmap.columns import LAYERS, Column, columns_of
from shelfmap.errors import LayerError
from shelfmap.geodesy import Projection
from shelfmap.words import ENUMERATIONS

__all__ = ["GEOMETRY_COLUMN", "Layer", "encode", "geometry_type", "pack", "to_columns", "to_table", "unpack"]

ObjectArray = NDArray[np.object_]

#: Column of the shapes, as well-known binary.
GEOMETRY_COLUMN: Final = "geom"
#: Where a table says what its shapes are.
_TYPE_KEY: Final = b"geometry_type"
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
    with_field : bool
        Whether columns of the 2-D response are among them.

    Raises
    ------
    LayerError
        If columns are missing or unknown, lengths differ, or the geometry is not of the layer's kind.
    """

    name: str
    columns: Mapping[str, NDArray[Any]]
    geometry: ObjectArray | None = None
    waves: Sequence[str] = ()
    with_field: bool = False

    def __post_init__(self) -> None:
        wanted = [column.name for column in columns_of(self.name, self.waves, with_field=self.with_field)]
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
            lengths[GEOMETRY_COLUMN] = np.shape(self.geometry)
        if len(set(lengths.values())) > 1 or any(len(shape) != 1 for shape in lengths.values()):
            raise LayerError(f"layer {self.name}: columns must be 1-D and of one length, but are {lengths}")


def encode(layer: Layer, projection: Projection | None = None) -> pa.Table:
    """Arrow table of a layer, as it is written: every value checked, fields carrying title and meaning.

    Parameters
    ----------
    layer : Layer
        The rows.
    projection : Projection, optional
        Coordinate system of the output; needed for layers with geometry, whose lines are split at 180 degrees.

    Raises
    ------
    LayerError
        If values do not fit the column table, or geometry lies beyond the output's system.
    """
    columns = columns_of(layer.name, layer.waves, with_field=layer.with_field)
    arrays = [_array(layer, column) for column in columns]
    fields = [pa.field(column.name, _ARROW_TYPES[column.dtype], metadata=_field_metadata(column)) for column in columns]
    kind = ""
    if layer.geometry is not None:
        if projection is None:
            raise LayerError(f"layer {layer.name}: a coordinate system must be given for its geometry")
        geometry, kind = _drawable(layer, projection)
        arrays.append(pa.array(shapely.to_wkb(geometry, flavor="iso"), pa.binary()))
        fields.append(pa.field(GEOMETRY_COLUMN, pa.binary()))
    return pa.Table.from_arrays(arrays, schema=pa.schema(fields, metadata={_TYPE_KEY: kind}))


def geometry_type(table: pa.Table) -> str:
    """What the shapes of an encoded layer are, in OGC's words; empty for a table without any."""
    return str(table.schema.metadata[_TYPE_KEY].decode())


def to_table(columns: Mapping[str, NDArray[Any]]) -> pa.Table:
    """Arrow table of any columns: numbers, text, bytes; None is empty.

    Examples
    --------
    >>> to_columns(to_table({"a": np.array([1.5, np.nan]), "b": np.array(["x", None], dtype=object)}))["b"]
    array(['x', None], dtype=object)
    """
    return pa.table({name: pa.array(values) for name, values in columns.items()})


def to_columns(*tables: pa.Table) -> dict[str, NDArray[Any]]:
    """Columns of Arrow tables, one below the other; whole numbers with gaps come as floats with NaN."""
    table = pa.concat_tables(tables, promote_options="default")  # a column of nothing but gaps takes the others' type
    return {name: table[name].to_numpy() for name in table.column_names}


def pack(tables: Mapping[str, pa.Table]) -> bytes:
    """Named Arrow tables as bytes: Arrow's streams one after the other."""
    sink = pa.BufferOutputStream()
    for name, table in tables.items():
        named = table.replace_schema_metadata({**(table.schema.metadata or {}), b"name": name})
        with pa.ipc.new_stream(sink, named.schema) as stream:
            stream.write_table(named)
    return bytes(sink.getvalue())


def unpack(data: bytes) -> dict[str, pa.Table]:
    """Named Arrow tables from bytes made by `pack`, each in memory of its own, so that one can outlive the others.

    Raises
    ------
    LayerError
        If they are other bytes.
    """
    source = io.BytesIO(data)
    tables = {}
    try:
        while source.tell() < len(data):
            with pa.ipc.open_stream(pa.PythonFile(source, mode="r")) as stream:
                table = stream.read_all()
            tables[table.schema.metadata[b"name"].decode()] = table
    except (pa.ArrowException, OSError, KeyError, TypeError, UnicodeError) as error:
        raise LayerError("kept work was not written by this program; run again with --anew") from error
    return tables


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
