"""The only module that knows the order of the stages; coast sections run over one executor."""

import itertools
import logging
import warnings
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap.checkpoint import Checkpoint, digest
from shelfmap.coast import Coast
from shelfmap.errors import LayerError, ShelfmapWarning
from shelfmap.geodesy import distance_bearing
from shelfmap.geopackage import GeoPackage, write_layers
from shelfmap.grid import GridSource, open_grid
from shelfmap.inputs import make_coast, picked_breaks
from shelfmap.layers import Layer, to_columns, unpack
from shelfmap.laying import Laid, lay, timed
from shelfmap.provenance import run_layer, status_counts
from shelfmap.replacement import check_name, check_target, placing
from shelfmap.sections import Section, pack_drawn_section, pack_section
from shelfmap.settings import Settings
from shelfmap.stations import station_layers
from shelfmap.tables import Columns
from shelfmap.transects import Transects
from shelfmap.workers import Mapped, mapping

__all__ = ["Progress", "Run", "screen", "write_coast", "write_transects"]

Progress = Callable[[str, int, int], None]
"""Called with the name of a stage, how much of it is done, and how much there is."""

#: Stations in one section of coast: the unit of work, the same whatever the number of workers.
SECTION_STATIONS: Final = 64
#: Whole turns by which longitudes of the same place may differ.
TURNS_DEG: Final = np.array([-360.0, 0.0, 360.0])
_LOG = logging.getLogger(__name__)


@dataclass(frozen=True, slots=True, kw_only=True)
class Run:
    """What a run made, and what it was made from; the results are in the file (`shelfmap.read_table`)."""

    path: Path
    """The GeoPackage."""
    source: GridSource
    """What was understood of the grid."""
    coast: Coast
    """The coast that the stations stand on."""
    status: NDArray[np.object_]
    """(n,) status of each transect."""
    step_m: float
    """Sample spacing along the transects, metres."""

    def summary(self) -> dict[str, Any]:
        """Counts and totals of the run, ready for JSON."""
        return {
            "path": str(self.path),
            "transects": len(self.status),
            "status": status_counts(self.status),
            "coast_parts": len(self.coast.lines),
            "coast_km": round(self.coast.length_km, 1),
            "step_km": round(self.step_m / 1e3, 3),
            "positive": f"{self.source.positive} ({self.source.positive_why})",
        }


def screen(
    settings: Settings,
    *,
    overwrite: bool = False,
    anew: bool = False,
    workers: int = 1,
    executor: Executor | None = None,
    scheduler: str | None = None,
    progress: Progress | None = None,
) -> Run:
    """Screen a coast: from the grid to a GeoPackage of transects with a resonance index.

    Finished sections of coast are kept beside the output until it is whole, so that a run that was stopped goes on
    from them when it is started again with the same settings and grid.

    Parameters
    ----------
    settings : Settings
        Everything about the run.
    overwrite : bool
        Whether an older output may be replaced.
    anew : bool
        Whether to do everything again, whatever a stopped run has left.
    workers : int
        Processes over the coast and its sections; the results are the same for any number. A script that asks for more
        than one calls `screen` under ``if __name__ == "__main__":``, as always with processes.
    executor : Executor, optional
        Does the work instead of processes started here.
    scheduler : str, optional
        Address of a dask.distributed scheduler whose workers do it instead.
    progress : callable, optional
        Told of the sections done.

    Returns
    -------
    Run
        The file, and what it was made from.

    Raises
    ------
    ShelfmapError
        If the grid, the coast, a file named in the settings or the output is not as it must be, or a worker process
        died; no output is written then. A single transect that cannot be screened gets a status and never stops the
        run.

    Warns
    -----
    ShelfmapWarning
        If breaks picked by hand lie beyond the depths of their transects, and are not used, or off their lines.
    """
    path = settings.output.path
    _check_output(settings, path, overwrite=overwrite)
    with mapping(workers, executor, scheduler) as mapped, Checkpoint.beside(path, anew=anew) as kept:
        laid = lay(settings, mapped, kept)
        picks = picked_breaks(settings, laid.transects.transect_id)
        with placing(kept.folder, path) as part:
            file = GeoPackage(part, settings.output.crs, path)
            with timed("sections"):
                packed = _packed_sections(laid, settings, picks, mapped, kept)
                columns = _collect(packed, _n_sections(laid.transects), file, progress)
            _warn_of_picks(picks, columns, laid.step_m)
            with timed("last layers"):
                _finish(file, columns, laid, settings)
            laid.check_unchanged()
    return Run(path=path, source=laid.source, coast=laid.coast, status=columns["status"], step_m=laid.step_m)


def write_coast(settings: Settings, path: Path, *, overwrite: bool = False, workers: int = 1) -> Coast:
    """Write the generalised coast as lines, to be edited and given back as `coast.file`.

    Parameters
    ----------
    settings : Settings
        As for `screen`; its output path is not used.
    path : Path
        GeoPackage to write.
    overwrite : bool
        Whether an older file may be replaced.
    workers : int
        Processes to use.

    Raises
    ------
    ShelfmapError
        As `screen`.
    """
    _check_output(settings, path, overwrite=overwrite)
    with mapping(workers) as mapped:
        coast = make_coast(open_grid(settings.grid), settings, mapped=mapped)
    layer = Layer(
        name="coast_lines",
        columns={
            "coast_part": np.arange(1, len(coast.lines) + 1),
            "length_km": np.array([line.length_m / 1e3 for line in coast.lines]),
            "closed": np.array([line.is_closed for line in coast.lines]),
        },
        geometry=np.array([shapely.linestrings(line.lon_deg, line.lat_deg) for line in coast.lines], dtype=object),
    )
    write_layers(
        path, [layer], crs=settings.output.crs, title=settings.title, description=coast.source, overwrite=overwrite
    )
    return coast


def write_transects(settings: Settings, path: Path, *, overwrite: bool = False, workers: int = 1) -> int:
    """Write the transects from shore to their ends, to be edited and given back as `transects.file`.

    Parameters
    ----------
    settings, path, overwrite, workers
        As for `write_coast`.

    Returns
    -------
    int
        How many there are.

    Raises
    ------
    ShelfmapError
        As `screen`.
    """
    _check_output(settings, path, overwrite=overwrite)
    with mapping(workers) as mapped:
        laid = lay(settings, mapped)
        packed = mapped(pack_drawn_section, _sections(laid, settings))
        columns = to_columns(*(unpack(data)["stations"] for data in packed))
    layer = Layer(name="transect_lines", geometry=shapely.from_wkb(columns.pop("line")), columns=columns)
    write_layers(
        path, [layer], crs=settings.output.crs, title=settings.title, description=laid.coast.source, overwrite=overwrite
    )
    return len(laid.transects)


def _check_output(settings: Settings, path: Path, *, overwrite: bool) -> None:
    """Refuse an output that cannot be written, or that would replace what it is made from."""
    check_name(path)
    inputs = [
        *(("grid.path", file) for file in settings.grid.paths),
        ("coast.file", settings.coast.file),
        ("transects.file", settings.transects.file),
        ("shelf_break.file", settings.shelf_break.file),
        ("gauges.file", settings.gauges.file),
    ]
    for name, given in inputs:
        if given is not None and given.exists() and path.exists() and given.samefile(path):
            raise LayerError(f"output {path} is {name} too and would be lost; write to another file")
    check_target(path, overwrite=overwrite)


# ---- sections


def _n_sections(transects: Transects) -> int:
    return -(-len(transects) // SECTION_STATIONS)


def _sections(laid: Laid, settings: Settings, picks: NDArray[np.object_] | None = None) -> Iterator[Section]:
    """Cut the transects, and the breaks picked on them, into sections of neighbouring stations."""
    islets = _Islets(laid.coast)
    for start in range(0, len(laid.transects), SECTION_STATIONS):
        transects = laid.transects.rows(start, start + SECTION_STATIONS)
        none = np.full(len(transects), None, dtype=object)
        yield Section(
            source=laid.source,
            settings=settings,
            transects=transects,
            step_m=laid.step_m,
            islets=islets.near(transects),
            picks=none if picks is None else picks[start : start + SECTION_STATIONS],
        )


class _Islets:
    """Islets of a coast, to be found by place."""

    def __init__(self, coast: Coast) -> None:
        self._islets = coast.islets
        self._tree = shapely.STRtree(coast.islets)

    def near(self, transects: Transects) -> NDArray[np.object_]:
        """Those that transects may meet: in the box round them, longitudes a turn away too."""
        lon_deg, lat_deg = transects.node_lon_deg, transects.node_lat_deg
        west, south, east, north = np.nanmin(lon_deg), np.nanmin(lat_deg), np.nanmax(lon_deg), np.nanmax(lat_deg)
        boxes = shapely.box(west + TURNS_DEG, south, east + TURNS_DEG, north)
        _, near = self._tree.query(boxes, predicate="intersects")
        return np.asarray(self._islets[np.unique(near)], dtype=object)


def _packed_sections(
    laid: Laid, settings: Settings, picks: NDArray[np.object_], mapped: Mapped, kept: Checkpoint
) -> Iterator[bytes]:
    """Give the packed rows of every section in order: kept ones as they are, the others screened and kept."""
    run_key = _run_key(laid, settings)
    sections = list(_sections(laid, settings, picks))
    keys = [_section_key(run_key, section) for section in sections]
    is_kept = kept.claim(keys)
    missing = [section for section, there in zip(sections, is_kept, strict=True) if not there]
    if any(is_kept):
        _LOG.warning("%d of %d sections were finished by an earlier run and are used", sum(is_kept), len(sections))
    # the first one here: on a first run it compiles the loops, which processes must not do all at once
    fresh = itertools.chain(map(pack_section, missing[:1]), mapped(pack_section, missing[1:]))
    for section, key, there in zip(sections, keys, is_kept, strict=True):
        if there:
            data = kept.load(key) or pack_section(section)  # a kept one may be damaged
        else:
            data = next(fresh)
            kept.save(key, data)
        yield data


def _run_key(laid: Laid, settings: Settings) -> str:
    """Hash of all that every section depends on: code, depths, settings."""
    used = settings.model_dump_json(exclude={"title": True, "output": {"path": True, "crs": True}})
    return digest(laid.content, used)


def _section_key(run_key: str, section: Section) -> str:
    """Hash of all that one section depends on."""
    transects = section.transects
    arrays = [getattr(transects, name) for name in transects.__slots__]
    return digest(run_key, section.step_m, section.islets, section.picks, *arrays)


def _collect(packed: Iterator[bytes], n_sections: int, file: GeoPackage, progress: Progress | None) -> Columns:
    """Write rows of sections as they come; give the columns of all stations."""
    stations = []
    for data in packed:
        tables = unpack(data)
        stations.append(tables.pop("stations"))
        for name, table in tables.items():
            file.add(name, table)
        if progress is not None:
            progress("sections", len(stations), n_sections)
    return to_columns(*stations)


def _finish(file: GeoPackage, columns: Columns, laid: Laid, settings: Settings) -> None:
    """Write the layers that need all stations, and what the file is."""
    for layer in station_layers(columns, laid.transects, laid.coast, settings):
        file.add_layer(layer)
    file.add_layer(run_layer(settings, laid.source, laid.coast, laid.step_m, columns["status"]))
    counts = ", ".join(f"{count} {status}" for status, count in status_counts(columns["status"]).items())
    file.finish(
        title=settings.title,
        description=f"Screened from {laid.source.path}; {len(laid.transects)} transects: {counts}.",
    )


def _warn_of_picks(picks: NDArray[np.object_], columns: Columns, step_m: float) -> None:
    """Say which breaks picked by hand could not be used, and which lie off their transects."""
    is_given, is_used = ~shapely.is_missing(picks), columns["picked"]
    ids = columns["transect_id"]
    if (is_given & ~is_used).any():
        warnings.warn(
            f"breaks picked for transect_id {_some(ids[is_given & ~is_used])} lie beyond the depths of these transects "
            "and are not used; move them between shore and end",
            ShelfmapWarning,
            stacklevel=3,
        )
    rows = np.flatnonzero(is_used)
    off_m, _ = distance_bearing(
        columns["break_lon"][rows],
        columns["break_lat_deg"][rows],
        shapely.get_x(picks[rows]),
        shapely.get_y(picks[rows]),
    )
    far = rows[off_m > 2 * step_m]
    if len(far):
        warnings.warn(
            f"breaks picked for transect_id {_some(ids[far])} lie up to {off_m.max() / 1e3:.1f} km off their lines; "
            "the nearest places on these are used",
            ShelfmapWarning,
            stacklevel=3,
        )


def _some(ids: Sequence[Any] | NDArray[np.int64]) -> str:
    return ", ".join(map(str, ids[:10])) + ", ..." * (len(ids) > 10)
