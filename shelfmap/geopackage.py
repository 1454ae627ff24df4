"""A GeoPackage in the making: layers written piece by piece, described, and put in place whole or not at all."""

import json
import os
import sqlite3
from collections.abc import Iterator, Sequence
from contextlib import closing, contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import Final

import pyarrow as pa
import pyogrio

from shelfmap import __version__
from shelfmap.columns import LAYERS
from shelfmap.errors import GridError, LayerError
from shelfmap.geodesy import WGS84, Projection
from shelfmap.layers import GEOMETRY_COLUMN, Layer, encode, geometry_type
from shelfmap.replacement import check_target, replacing
from shelfmap.words import CAUTIONS, ENUMERATIONS

__all__ = ["GeoPackage", "output_projection", "write_layers"]

#: Rows gathered before they are written: each call opens the file anew.
_ROWS_AT_ONCE: Final = 100_000


class GeoPackage:
    """A new GeoPackage that rows are added to; nothing of it counts before `finish`.

    Parameters
    ----------
    path : Path
        File to make, which is not there yet.
    crs : str
        Coordinate system of the geometries, ``EPSG:n``.
    target : Path
        What it will be once it is whole: named where something goes wrong.

    Raises
    ------
    LayerError
        If the system is not one that maps are drawn in; from its methods, if layers do not fit the column table or the
        file cannot be written.
    """

    def __init__(self, path: Path, crs: str, target: Path) -> None:
        self.path = path
        self.target = target
        self.crs = crs
        self.projection = output_projection(crs)
        self._waiting: dict[str, list[pa.Table]] = {}
        self._rows: dict[str, int] = {}
        self._words: dict[str, list[str]] = {}
        self._made: set[str] = set()

    def add(self, name: str, table: pa.Table) -> None:
        """Add rows to a layer, encoded by `shelfmap.layers.encode`; the first ones say what its columns are."""
        self._rows[name] = self._rows.get(name, 0) + table.num_rows
        self._words.setdefault(name, [column for column in table.column_names if column in ENUMERATIONS])
        waiting = self._waiting.setdefault(name, [])
        waiting.append(table)
        if sum(part.num_rows for part in waiting) >= _ROWS_AT_ONCE:
            self._write(name)

    def add_layer(self, layer: Layer) -> None:
        """Encode a layer and add its rows."""
        self.add(layer.name, encode(layer, self.projection))

    def finish(self, *, title: str = "", description: str = "") -> None:
        """Write what still waits, the meanings of words, the metadata, and the layers' order; count the rows."""
        for name in list(self._waiting):
            self._write(name)
        with _writing(self.target):
            self._describe(title, description)

    def _describe(self, title: str, description: str) -> None:
        about = {"title": title, "abstract": description, "software": f"shelfmap {__version__}", "cautions": CAUTIONS}
        with closing(sqlite3.connect(self.path)) as database, database:
            _add_words(database, self._words)
            _add_metadata(database, about)
            _put_in_order(database, [name for name in LAYERS if name in self._rows])
            _count_rows(database, self._rows)

    def _write(self, name: str) -> None:
        tables = self._waiting[name]
        if not tables:
            return
        self._waiting[name] = []
        kind = geometry_type(tables[0])
        drawn = {"geometry_name": GEOMETRY_COLUMN, "geometry_type": kind, "crs": self.crs} if kind else {}
        about = {"IDENTIFIER": LAYERS[name].title, "DESCRIPTION": LAYERS[name].description}
        with _writing(self.target):
            pyogrio.write_arrow(
                pa.concat_tables(tables).replace_schema_metadata(None),
                self.path,
                layer=name,
                driver="GPKG",
                append=name in self._made,
                layer_metadata={"CAUTIONS": CAUTIONS},
                layer_options=about | ({"GEOMETRY_NAME": GEOMETRY_COLUMN} if kind else {}),
                **drawn,
            )
        self._made.add(name)


@contextmanager
def _writing(target: Path) -> Iterator[None]:
    """Write in haste, under the date that is due; whatever GDAL, SQLite and the system say becomes one sentence."""
    try:
        # the file counts only once it is whole and on the disk, so GDAL need not wait for the disk at every step
        with _configured({"OGR_SQLITE_SYNCHRONOUS": "OFF", "OGR_CURRENT_DATE": _date()}):
            yield
    except LayerError:
        raise
    except (RuntimeError, sqlite3.Error, OSError) as error:
        raise LayerError(
            f"output {target} cannot be written ({error}); make room on the disk or write to another folder"
        ) from error


@contextmanager
def _configured(options: dict[str, str | None]) -> Iterator[None]:
    """Set options of GDAL for a while; those that are None stay."""
    options = {name: value for name, value in options.items() if value is not None}
    before = {name: pyogrio.get_gdal_config_option(name) for name in options}
    pyogrio.set_gdal_config_options(options)
    try:
        yield
    finally:
        pyogrio.set_gdal_config_options(before)


def _date() -> str | None:
    """Date of SOURCE_DATE_EPOCH, if the environment has one, for the same bytes every time."""
    seconds = os.environ.get("SOURCE_DATE_EPOCH")
    if seconds is None:
        return None
    if not seconds.isdecimal():
        raise LayerError(f"SOURCE_DATE_EPOCH = {seconds!r} is no whole number of seconds; mend or unset it")
    return datetime.fromtimestamp(int(seconds), tz=UTC).strftime("%Y-%m-%dT%H:%M:%S.000Z")


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
    names = [layer.name for layer in layers]
    if not names or len(set(names)) != len(names):
        raise LayerError(f"output {path}: layers {names}; give at least one, and each once")
    with replacing(path) as part:
        file = GeoPackage(part, crs, path)
        for layer in layers:
            file.add_layer(layer)
        file.finish(title=title, description=description)
    return path


def output_projection(crs: str) -> Projection:
    """Coordinate system of an output.

    Raises
    ------
    LayerError
        If it is not one that maps are drawn in.
    """
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


def _add_words(database: sqlite3.Connection, words: dict[str, list[str]]) -> None:
    """Add the words that columns of layers may hold, each with its meaning; GDAL's Arrow writer cannot."""
    for layer, columns in words.items():
        for name in columns:
            database.executemany(
                "INSERT OR IGNORE INTO gpkg_data_column_constraints"
                " (constraint_name, constraint_type, value, description) VALUES (?, 'enum', ?, ?)",
                [(name, word, f"{word}: {meaning}") for word, meaning in ENUMERATIONS[name].items()],
            )
            database.execute(
                "UPDATE gpkg_data_columns SET constraint_name = ? WHERE table_name = ? AND column_name = ?",
                (name, layer, name),
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


def _put_in_order(database: sqlite3.Connection, names: Sequence[str]) -> None:
    """List the layers in the order of the column table, whichever was written first."""
    database.execute("UPDATE gpkg_contents SET rowid = rowid + ?", (len(names),))
    database.executemany(
        "UPDATE gpkg_contents SET rowid = ? WHERE table_name = ?", [(k, name) for k, name in enumerate(names, start=1)]
    )


def _count_rows(database: sqlite3.Connection, rows: dict[str, int]) -> None:
    """Make sure that all rows arrived."""
    for name, wanted in rows.items():
        (count,) = database.execute(f'SELECT count(*) FROM "{name}"').fetchone()
        if count != wanted:
            raise LayerError(f"layer {name}: {count} of {wanted} rows arrived; make room on the disk and run again")
