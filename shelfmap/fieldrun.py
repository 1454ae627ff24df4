"""A run of the 2-D response alone: from the settings to a folder of maps and layers."""

import math
import os
import tempfile
from collections.abc import Iterator, Mapping
from concurrent.futures import Executor
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from numpy.typing import NDArray

from shelfmap.errors import FieldError, OutputExistsError
from shelfmap.field import Field
from shelfmap.fieldlayers import field_layers
from shelfmap.fieldmaps import map_names, write_maps
from shelfmap.geopackage import GeoPackage, output_projection
from shelfmap.grid import GridSource, open_grid
from shelfmap.laying import check_unchanged, stamps_of
from shelfmap.provenance import field_run_layer
from shelfmap.rasters import companions, place_raster
from shelfmap.region import solve_region
from shelfmap.replacement import check_target, placing, unfinished
from shelfmap.settings import FieldSettings, Settings
from shelfmap.workers import mapping

__all__ = ["FieldRun", "field_folder", "run_field"]

#: Layers of a region.
LAYER_FILE: Final = "field.gpkg"


@dataclass(frozen=True, slots=True, kw_only=True)
class FieldRun:
    """What a run of the 2-D response made."""

    folder: Path
    """Where it is."""
    paths: tuple[Path, ...]
    """Maps, then the layers."""
    source: GridSource
    """What was understood of the grid."""
    field: Field
    """The response itself."""

    def summary(self) -> dict[str, Any]:
        """What came of it, ready for JSON."""
        layers = {layer.name: layer.columns for layer in field_layers(self.field, with_maps=True)}
        return {
            "folder": str(self.folder),
            "files": [path.name for path in self.paths],
            "cells": len(self.field.mesh.cell),
            "edge": "held" if self.field.mesh.is_held else "radiating",
            "waves": _rows(layers["field_waves"]),
            "modes": _rows(layers.get("natural_modes", {})),
            "remarks": list(self.field.remarks),
        }


def run_field(
    settings: Settings,
    *,
    overwrite: bool = False,
    workers: int = 1,
    executor: Executor | None = None,
    scheduler: str | None = None,
) -> FieldRun:
    """Solve the region of the settings, and write its maps and layers into a folder.

    Parameters
    ----------
    settings : Settings
        Without a section `field`, its defaults hold.
    overwrite : bool
        Whether files of an earlier run may be replaced.
    workers, executor, scheduler
        Where the waves are solved: see `shelfmap.workers.mapping`.

    Raises
    ------
    OutputExistsError
        If one of the files is there and may not be replaced.
    ShelfmapError
        If the grid, the region, a file named in the settings or the folder is not as it must be; nothing is written
        then.
    """
    folder = field_folder(settings)
    _check(folder, settings, overwrite=overwrite)
    source = open_grid(settings.grid)
    stamps = stamps_of(source)
    with mapping(workers, executor, scheduler, together=1) as mapped:
        field = solve_region(source, settings, mapped=mapped)
    with _made(folder), unfinished(folder / LAYER_FILE) as held, tempfile.TemporaryDirectory(dir=held) as part:
        maps = write_maps(field, Path(part), settings.title)
        with placing(Path(part), folder / LAYER_FILE) as whole:  # first: another program may hold the old one
            _write_layers(whole, folder / LAYER_FILE, settings, source, field)
            check_unchanged(source, stamps)
        for path in folder.glob("mode_*.tif"):  # of an earlier run that found more of them
            if path.name in map_names(settings):
                for old in (path, *companions(path)):
                    old.unlink(missing_ok=True)
        written = [*(place_raster(path, folder / path.name) for path in maps), folder / LAYER_FILE]
    return FieldRun(folder=folder, paths=tuple(written), source=source, field=field)


def _write_layers(part: Path, target: Path, settings: Settings, source: GridSource, field: Field) -> None:
    """Write the layers to what will be `target`."""
    file = GeoPackage(part, settings.output.crs, target)
    for layer in (*field_layers(field, with_maps=True), field_run_layer(settings, source, field)):
        file.add_layer(layer)
    file.finish(title=settings.title, description=f"2-D response of {source.path}; {'; '.join(field.remarks)}.")


def field_folder(settings: Settings) -> Path:
    """Folder of the maps: that of the settings, or one beside the output, named after it."""
    if settings.field is not None and settings.field.folder is not None:
        return settings.field.folder
    return settings.output.path.with_name(f"{settings.output.path.stem}_field")


def _check(folder: Path, settings: Settings, *, overwrite: bool) -> None:
    """Refuse a folder that could not be written to, and files that are there; before anything is solved."""
    output_projection(settings.output.crs)
    if folder.exists() and not folder.is_dir():
        raise FieldError(f"output folder {folder} is a file; give another field.folder")
    if not folder.parent.is_dir():
        raise FieldError(f"output folder {folder}: there is no folder {folder.parent}; make it first")
    if not os.access(folder if folder.exists() else folder.parent, os.W_OK):
        raise FieldError(f"output folder {folder} is read-only; write to another folder or open it for writing")
    inputs = {path.resolve() for path in _inputs(settings)}
    for name in [*map_names(settings), LAYER_FILE]:
        path = folder / name
        if path.resolve() in inputs:
            raise FieldError(f"output {path} is an input too and would be lost; give another field.folder")
        there = [file for file in (path, *companions(path)) if file.exists()]
        if there and not overwrite:
            raise OutputExistsError(
                f"output {there[0]} exists already; allow it to be overwritten or give another folder"
            )
    if folder.exists():
        check_target(folder / LAYER_FILE, overwrite=overwrite)


def _inputs(settings: Settings) -> Iterator[Path]:
    """Files that the run reads."""
    yield from settings.grid.paths
    chosen = settings.field or FieldSettings()
    named = (settings.gauges.file, chosen.file, chosen.open_file, chosen.points_file)
    yield from (path for path in named if path is not None)


@contextmanager
def _made(folder: Path) -> Iterator[None]:
    """Make the folder, and take it away again if nothing came into it."""
    try:
        folder.mkdir(exist_ok=True)
    except OSError as error:
        raise FieldError(f"output folder {folder} cannot be made: {error.strerror}; write to another folder") from error
    try:
        yield
    finally:
        with suppress(OSError):  # there is something in it
            folder.rmdir()


def _rows(columns: Mapping[str, NDArray[Any]]) -> list[dict[str, Any]]:
    """Rows of a layer, numbers as JSON has them: None for none."""
    names = list(columns)
    rows = zip(*(columns[name].tolist() for name in names), strict=True)
    return [
        {n: None if isinstance(v, float) and math.isnan(v) else v for n, v in zip(names, row, strict=True)}
        for row in rows
    ]
