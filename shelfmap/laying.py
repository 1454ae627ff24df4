"""What a run is laid out on, before any depth is sampled: the grid, the coast, the transects."""

import logging
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Final

import numpy as np
import shapely

from shelfmap.checkpoint import Checkpoint, digest, files_digest
from shelfmap.coast import Coast, CoastLine
from shelfmap.errors import GridError
from shelfmap.grid import GridSource, open_grid
from shelfmap.inputs import make_coast, make_transects
from shelfmap.layers import pack, to_columns, to_table, unpack
from shelfmap.profiles import step_of
from shelfmap.settings import Settings
from shelfmap.transects import Transects
from shelfmap.workers import Mapped

__all__ = ["Laid", "check_unchanged", "lay", "stamps_of", "timed"]

#: A grid with fewer cells than this in `generalise_km` gives bearings that follow the steps of its shoreline.
FEWEST_COAST_CELLS: Final = 4.0

#: A coast that took less than this is made again rather than kept, seconds.
LEAST_KEPT_S: Final = 5.0

_LOG = logging.getLogger(__name__)


@dataclass(frozen=True, slots=True, kw_only=True)
class Laid:
    """A run before its sections."""

    source: GridSource
    stamps: tuple[tuple[int, int], ...]
    """Size and time of change of each of the grid's files when they were opened first."""
    content: str
    """Hash of this package's code and of what the grid holds; empty where nothing is kept."""
    coast: Coast
    transects: Transects
    step_m: float
    """Sample spacing along the transects, metres."""

    def check_unchanged(self) -> None:
        """Refuse results of a grid that was written to while it was read.

        Raises
        ------
        GridError
            If a file of the grid has changed or vanished.
        """
        check_unchanged(self.source, self.stamps)


def lay(settings: Settings, mapped: Mapped, kept: Checkpoint | None = None) -> Laid:
    """Open the grid, make the coast and lay the transects.

    Parameters
    ----------
    settings : Settings
        Of the run.
    mapped : Mapped
        Does the work on the coast.
    kept : Checkpoint, optional
        Where a coast traced from the grid is kept, and taken from.

    Raises
    ------
    ShelfmapError
        If the grid, the coast or the transects are not as they must be.
    """
    source = open_grid(settings.grid)
    stamps = stamps_of(source)
    _LOG.info("values of %s taken as %s: %s", source.path, source.positive, source.positive_why)
    content = "" if kept is None else digest(files_digest(source.disk_files()), source)
    with timed("coast"):
        coast = _coast(source, settings, mapped, kept, content)
    _LOG.info("coast: %d stretches, %.0f km, %s", len(coast.lines), coast.length_km, coast.source)
    _warn_of_coarse_cells(source, settings)
    with timed("transects"):
        transects = make_transects(source, coast, settings)
    step_m = step_of(source, settings.transects)
    if settings.transects.step_km is not None and step_m > settings.transects.step_km * 1e3:
        _LOG.warning(
            "transects.step_km = %g would take too many samples over %g km; %.3f km is used",
            settings.transects.step_km,
            settings.transects.length_km,
            step_m / 1e3,
        )
    return Laid(source=source, stamps=stamps, content=content, coast=coast, transects=transects, step_m=step_m)


@contextmanager
def timed(stage: str) -> Iterator[None]:
    """Log how long a stage took."""
    start = time.perf_counter()
    yield
    _LOG.info("%s: %.1f s", stage, time.perf_counter() - start)


def stamps_of(source: GridSource) -> tuple[tuple[int, int], ...]:
    """Size and time of change of each of the grid's files.

    Raises
    ------
    GridError
        If one has vanished.
    """
    try:
        return tuple((stat.st_size, stat.st_mtime_ns) for stat in (file.stat() for file in source.disk_files()))
    except OSError as error:
        raise GridError(f"{source.path}: has vanished ({error.strerror}); put it back and run again") from error


def check_unchanged(source: GridSource, stamps: tuple[tuple[int, int], ...]) -> None:
    """Refuse results of a grid that was written to while it was read.

    Raises
    ------
    GridError
        If a file of the grid has changed since it had these stamps, or vanished.
    """
    if stamps_of(source) != stamps:
        raise GridError(f"{source.path}: has changed while it was read; run again once nothing writes to it")


def _warn_of_coarse_cells(source: GridSource, settings: Settings) -> None:
    """Say where the grid is too coarse for the scale of the coast asked for."""
    cells = settings.coast.generalise_m / source.step_m
    if settings.transects.file is None and cells < FEWEST_COAST_CELLS:
        _LOG.warning(
            "coast.generalise_km = %g is %.1f cells of this grid: bearings follow its steps, less so from %.0f on",
            settings.coast.generalise_km,
            cells,
            np.ceil(FEWEST_COAST_CELLS * source.step_m / 1e3),
        )


def _coast(source: GridSource, settings: Settings, mapped: Mapped, kept: Checkpoint | None, content: str) -> Coast:
    """Coast kept by a stopped run, else made, and kept where that took long."""
    if kept is None or settings.coast.file is not None:
        return make_coast(source, settings, mapped=mapped)
    key = digest("coast", content, settings.coast.model_dump_json())
    data = kept.load(key)
    if data is not None:
        return _unpack_coast(data)
    start = time.perf_counter()
    coast = make_coast(source, settings, mapped=mapped)
    if time.perf_counter() - start >= LEAST_KEPT_S:
        kept.save(key, _pack_coast(coast))
    return coast


def _pack_coast(coast: Coast) -> bytes:
    lines = np.array([shapely.linestrings(line.lon_deg, line.lat_deg) for line in coast.lines], dtype=object)
    return pack(
        {
            "lines": to_table({"shape": shapely.to_wkb(lines)}),
            "islets": to_table({"shape": shapely.to_wkb(coast.islets)}),
            "source": to_table({"words": np.array([coast.source], dtype=object)}),
        }
    )


def _unpack_coast(data: bytes) -> Coast:
    tables = {name: to_columns(table) for name, table in unpack(data).items()}
    lines = [shapely.get_coordinates(line).T for line in shapely.from_wkb(tables["lines"]["shape"])]
    return Coast(
        lines=tuple(CoastLine.through(lon_deg, lat_deg) for lon_deg, lat_deg in lines),
        islets=np.asarray(shapely.from_wkb(tables["islets"]["shape"]), dtype=object),
        source=str(tables["source"]["words"][0]),
    )
