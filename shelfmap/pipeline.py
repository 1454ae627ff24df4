"""The only module that knows the order of the stages; coast sections run over one executor."""

import logging
import multiprocessing
import os
import signal
import threading
import warnings
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import BrokenExecutor, Executor, ProcessPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap.coast import Coast
from shelfmap.errors import LayerError, SettingsError, ShelfmapError, ShelfmapWarning
from shelfmap.geodesy import distance_bearing
from shelfmap.grid import GridSource, open_grid
from shelfmap.inputs import make_coast, make_transects, picked_breaks
from shelfmap.layers import Layer, write_layers
from shelfmap.profiles import END_REASONS, START_REASONS, Profiles, place_on, step_of
from shelfmap.provenance import run_layer, status_counts
from shelfmap.replacement import check_target
from shelfmap.sections import Section, sample_section, screen_section, stack
from shelfmap.settings import Settings
from shelfmap.tables import Screened, result_layers, transect_columns
from shelfmap.transects import NODE_M, Transects

__all__ = ["Progress", "Run", "screen", "write_coast", "write_transects"]

Progress = Callable[[str, int, int], None]
"""Called with the name of a stage, how much of it is done, and how much there is."""

#: Stations in one section of coast: the unit of work, the same whatever the number of workers.
SECTION_STATIONS: Final = 64
#: Whole turns by which longitudes of the same place may differ.
TURNS_DEG: Final = np.array([-360.0, 0.0, 360.0])
#: Lines to be edited begin this far landward of the shoreline, metres, so that they meet it when they come back.
SETBACK_M: Final = 10.0

#: A grid with fewer cells than this in `generalise_km` gives bearings that follow the steps of its shoreline.
FEWEST_COAST_CELLS: Final = 4.0

_LOG = logging.getLogger(__name__)


@dataclass(frozen=True, slots=True, kw_only=True)
class Run:
    """What a run made, and everything it was made from."""

    path: Path
    """The GeoPackage."""
    source: GridSource
    """What was understood of the grid."""
    coast: Coast
    """The coast that the stations stand on."""
    screened: Screened
    """Results of every stage, one row a transect, in SI units."""
    step_m: float
    """Sample spacing along the transects, metres."""

    def summary(self) -> dict[str, Any]:
        """Counts and totals of the run, ready for JSON."""
        return {
            "path": str(self.path),
            "transects": len(self.screened.status),
            "status": status_counts(self.screened.status),
            "coast_parts": len(self.coast.lines),
            "coast_km": round(_length_km(self.coast), 1),
            "step_km": round(self.step_m / 1e3, 3),
            "positive": f"{self.source.positive} ({self.source.positive_why})",
        }


def screen(
    settings: Settings,
    *,
    overwrite: bool = False,
    workers: int = 1,
    executor: Executor | None = None,
    progress: Progress | None = None,
) -> Run:
    """Screen a coast: from the grid to a GeoPackage of transects with a resonance index.

    Parameters
    ----------
    settings : Settings
        Everything about the run.
    overwrite : bool
        Whether an older output may be replaced.
    workers : int
        Processes over sections of coast; the results are the same for any number. A script that asks for more than
        one calls `screen` under ``if __name__ == "__main__":``, as always with processes.
    executor : Executor, optional
        Runs the sections instead of processes started here.
    progress : callable, optional
        Told of the sections done.

    Returns
    -------
    Run
        The file and all that is in it.

    Raises
    ------
    ShelfmapError
        If the grid, the coast, a file named in the settings or the output is not as it must be, or a worker process
        died; nothing is written then. A single transect that cannot be screened gets a status and never stops the run.

    Warns
    -----
    ShelfmapWarning
        If breaks picked by hand lie beyond the depths of their transects, and are not used, or off their lines.
    """
    _check_output(settings, settings.output.path, overwrite=overwrite)
    source = open_grid(settings.grid)
    _LOG.info("values of %s taken as %s: %s", source.path, source.positive, source.positive_why)
    _warn_of_coarse_cells(source, settings)
    coast = make_coast(source, settings)
    _LOG.info("coast: %d stretches, %.0f km, %s", len(coast.lines), _length_km(coast), coast.source)
    transects = make_transects(source, coast, settings)
    picks = picked_breaks(settings, transects.transect_id)
    sections = _sections(source, coast, transects, settings, picks)
    screened = _screen_sections(sections, workers, executor, progress)
    _warn_of_picks(sections, screened)
    run = Run(
        path=settings.output.path,
        source=source,
        coast=coast,
        screened=screened,
        step_m=step_of(source, settings.transects),
    )
    counts = ", ".join(f"{count} {status}" for status, count in status_counts(screened.status).items())
    write_layers(
        settings.output.path,
        [
            *result_layers(screened, coast, settings),
            run_layer(settings, source, coast, run.step_m, screened.status),
        ],
        crs=settings.output.crs,
        title=settings.title,
        description=f"Screened from {source.path}; {len(transects)} transects: {counts}.",
        overwrite=overwrite,
    )
    return run


def write_coast(settings: Settings, path: Path, *, overwrite: bool = False) -> Coast:
    """Write the generalised coast as lines, to be edited and given back as `coast.file`.

    Parameters
    ----------
    settings : Settings
        As for `screen`; its output path is not used.
    path : Path
        GeoPackage to write.
    overwrite : bool
        Whether an older file may be replaced.

    Raises
    ------
    ShelfmapError
        As `screen`.
    """
    _check_output(settings, path, overwrite=overwrite)
    coast = make_coast(open_grid(settings.grid), settings)
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


def write_transects(settings: Settings, path: Path, *, overwrite: bool = False) -> Profiles:
    """Write the transects from shore to their ends, to be edited and given back as `transects.file`.

    Parameters
    ----------
    settings, path, overwrite
        As for `write_coast`.

    Raises
    ------
    ShelfmapError
        As `screen`.
    """
    _check_output(settings, path, overwrite=overwrite)
    source = open_grid(settings.grid)
    coast = make_coast(source, settings)
    transects = make_transects(source, coast, settings)
    profiles = stack([sample_section(section) for section in _sections(source, coast, transects, settings)])
    layer = Layer(
        name="transect_lines",
        columns=transect_columns(transects, profiles),
        geometry=_lines_to_edit(transects, profiles),
    )
    write_layers(
        path, [layer], crs=settings.output.crs, title=settings.title, description=coast.source, overwrite=overwrite
    )
    return profiles


def _check_output(settings: Settings, path: Path, *, overwrite: bool) -> None:
    """Refuse an output that cannot be written, or that would replace what it is made from."""
    inputs = [
        *(("grid.path", file) for file in settings.grid.paths),
        ("coast.file", settings.coast.file),
        ("transects.file", settings.transects.file),
        ("shelf_break.file", settings.shelf_break.file),
    ]
    for name, given in inputs:
        if given is not None and given.resolve() == path.resolve():
            raise LayerError(f"output {path} is {name} too and would be lost; write to another file")
    check_target(path, overwrite=overwrite)


def _length_km(coast: Coast) -> float:
    return sum(line.length_m for line in coast.lines) / 1e3


def _sections(
    source: GridSource,
    coast: Coast,
    transects: Transects,
    settings: Settings,
    picks: NDArray[np.object_] | None = None,
) -> list[Section]:
    """Cut the transects, and the breaks picked on them, into sections of neighbouring stations."""
    if picks is None:
        picks = np.full(len(transects), None, dtype=object)
    step_m = step_of(source, settings.transects)
    if settings.transects.step_km is not None and step_m > settings.transects.step_km * 1e3:
        _LOG.warning(
            "transects.step_km = %g would take too many samples over %g km; %.3f km is used",
            settings.transects.step_km,
            settings.transects.length_km,
            step_m / 1e3,
        )
    return [
        Section(
            source=source,
            settings=settings,
            transects=transects.rows(start, start + SECTION_STATIONS),
            step_m=step_m,
            islets=_islets_near(coast, transects.rows(start, start + SECTION_STATIONS)),
            picks=picks[start : start + SECTION_STATIONS],
        )
        for start in range(0, len(transects), SECTION_STATIONS)
    ]


def _islets_near(coast: Coast, transects: Transects) -> NDArray[np.object_]:
    """Islets that transects may meet: those in the box round them, longitudes a turn away too."""
    if not len(coast.islets):
        return coast.islets
    lon_deg, lat_deg = transects.node_lon_deg, transects.node_lat_deg
    west, south, east, north = np.nanmin(lon_deg), np.nanmin(lat_deg), np.nanmax(lon_deg), np.nanmax(lat_deg)
    boxes = shapely.box(west + TURNS_DEG, south, east + TURNS_DEG, north)
    _, near = shapely.STRtree(coast.islets).query(boxes, predicate="intersects")
    return np.asarray(coast.islets[np.unique(near)])


def _screen_sections(
    sections: Sequence[Section], workers: int, executor: Executor | None, progress: Progress | None
) -> Screened:
    """Screen every section and put the results together in order."""
    done: list[Screened] = []
    with _mapping(min(workers, len(sections)), executor) as mapped:
        for result in mapped(screen_section, sections):
            done.append(result)
            if progress is not None:
                progress("sections", len(done), len(sections))
    return stack(done)


@contextmanager
def _mapping(workers: int, executor: Executor | None) -> Iterator[Callable[..., Iterator[Screened]]]:
    """Give the `map` of a run: over the caller's executor, in this process, or over processes started afresh."""
    if workers < 1:
        raise SettingsError(f"workers = {workers}: at least 1")
    try:
        if executor is not None:
            yield executor.map
        elif workers == 1:
            yield map
        else:
            # workers leave Ctrl-C to this process, which then ends them
            with ProcessPoolExecutor(
                workers,
                mp_context=multiprocessing.get_context("spawn"),
                initializer=_obey_parent,
            ) as pool:
                yield pool.map
    except BrokenExecutor as error:
        raise ShelfmapError(
            f"a worker process died ({error}), most often for want of memory; run again with fewer workers or a larger "
            'transects.step_km, and in a script call screen under if __name__ == "__main__"'
        ) from error


def _obey_parent() -> None:
    """In a worker: leave Ctrl-C to the parent, and end when it has ended, however that came about."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    parent = multiprocessing.parent_process()

    def follow() -> None:
        if parent is not None:
            parent.join()
            os._exit(1)

    threading.Thread(target=follow, daemon=True).start()


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


def _warn_of_picks(sections: Sequence[Section], screened: Screened) -> None:
    """Say which breaks picked by hand could not be used, and which lie off their transects."""
    picks = np.concatenate([section.picks for section in sections])
    is_given = np.array([pick is not None for pick in picks], dtype=bool)
    ids, is_used = screened.transects.transect_id, screened.breaks.is_picked
    if (is_given & ~is_used).any():
        warnings.warn(
            f"breaks picked for transect_id {_some(ids[is_given & ~is_used])} lie beyond the depths of these transects "
            "and are not used; move them between shore and end",
            ShelfmapWarning,
            stacklevel=3,
        )
    lon_deg, lat_deg = place_on(screened.transects, screened.profiles.shore_m + screened.breaks.break_m)
    rows = np.flatnonzero(is_used)
    off_m, _ = distance_bearing(lon_deg[rows], lat_deg[rows], shapely.get_x(picks[rows]), shapely.get_y(picks[rows]))
    far = rows[off_m > 2 * screened.profiles.step_m]
    if len(far):
        warnings.warn(
            f"breaks picked for transect_id {_some(ids[far])} lie up to {off_m.max() / 1e3:.1f} km off their lines; "
            "the nearest places on these are used",
            ShelfmapWarning,
            stacklevel=3,
        )


def _some(ids: NDArray[np.int64]) -> str:
    return ", ".join(map(str, ids[:10])) + ", ..." * (len(ids) > 10)


def _lines_to_edit(transects: Transects, profiles: Profiles) -> NDArray[np.object_]:
    """Line of each transect that comes back as the same transect: from just landward of its shore to past its end.

    What a profile ends at (land, missing depth, the grid's edge) lies on the line too, else it would be forgotten;
    one that ends at the search length ends there.
    """
    at_shore = profiles.start_reason == START_REASONS.index("shore")
    start_m = np.nan_to_num(profiles.shore_m) - SETBACK_M * at_shore
    searched = profiles.end_reason == END_REASONS.index("search_length")
    past = np.where(searched, -0.9, 0.5)  # steps past the last sample, less one
    stop_m = np.nan_to_num(profiles.shore_m) + (profiles.n_samples + past) * profiles.step_m
    start_m = np.maximum(start_m, np.nanmin(transects.node_m, axis=1))
    stop_m = np.minimum(stop_m, np.nanmax(transects.node_m, axis=1))
    lines = []
    for row, (start, stop) in enumerate(zip(start_m, stop_m, strict=True)):
        at_m = np.linspace(start, stop, int(np.ceil((stop - start) / NODE_M)) + 1)
        lon_deg, lat_deg = place_on(transects.rows(row, row + 1), at_m[None, :])
        lines.append(shapely.linestrings(lon_deg[0], lat_deg[0]))
    return np.array(lines, dtype=object)
