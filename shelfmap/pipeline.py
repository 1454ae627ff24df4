"""The only module that knows the order of the stages; coast sections run over one executor."""

import importlib.metadata
import logging
import multiprocessing
import platform
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Executor, ProcessPoolExecutor
from contextlib import contextmanager, nullcontext
from dataclasses import dataclass, fields, is_dataclass, replace
from pathlib import Path
from typing import Any, Final, TypeVar

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap import __version__
from shelfmap.assess import statuses, usable
from shelfmap.coast import Coast, coast_from_lines, trace_coast
from shelfmap.errors import CoastError, SettingsError, TransectError
from shelfmap.grid import GridSource, open_grid
from shelfmap.index import ResonanceIndex, resonance_index
from shelfmap.layers import Layer, read_vector, write_layers
from shelfmap.profiles import Profiles, distance_along, sample_profiles, step_of
from shelfmap.replacement import check_target
from shelfmap.response import (
    DepthError,
    Friction,
    WaveResponse,
    coriolis_rad_s,
    deep_end,
    shelf_modes,
    wave_response,
)
from shelfmap.settings import Settings
from shelfmap.shelfbreak import ShelfBreaks, find_shelf_breaks, measure_picked_breaks
from shelfmap.tables import Screened, result_layers, transect_columns, transect_geometry, waves_of
from shelfmap.transects import Transects, lay_transects, transects_from_lines
from shelfmap.words import CAUTIONS, STATUSES

__all__ = ["Progress", "Run", "make_coast", "make_transects", "screen", "write_coast", "write_transects"]

FloatArray = NDArray[np.float64]
Progress = Callable[[str, int, int], None]
"""Called with the name of a stage, how much of it is done, and how much there is."""

#: Stations in one section of coast: the unit of work, the same whatever the number of workers.
SECTION_STATIONS: Final = 64
#: Periods of the response curves, hours, evenly spaced in their logarithm.
CURVE_PERIODS_H: Final = np.geomspace(0.5, 48.0, 64)
#: A curve shows periods from this share of the travel time on: below, its peaks lie closer than its points.
CURVE_LEAST_SHARE: Final = 0.25

_T = TypeVar("_T")
_LOG = logging.getLogger(__name__)


@dataclass(frozen=True, slots=True, kw_only=True)
class Run:
    """What a run made."""

    path: Path
    """The GeoPackage."""
    source: GridSource
    coast: Coast
    screened: Screened
    step_m: float
    """Sample spacing along the transects, metres."""

    def summary(self) -> dict[str, Any]:
        """Counts and totals of the run, ready for JSON."""
        counts = Counter(self.screened.status.tolist())
        index = self.screened.index.index
        return {
            "path": str(self.path),
            "transects": len(self.screened.status),
            "status": {status: counts[status] for status in STATUSES if counts[status]},
            "coast_parts": len(self.coast.lines),
            "coast_km": round(sum(line.length_m for line in self.coast.lines) / 1e3, 1),
            "step_km": round(self.step_m / 1e3, 3),
            "index_max": round(float(np.nanmax(index)), 3) if np.isfinite(index).any() else None,
            "positive": f"{self.source.positive} ({self.source.positive_why})",
        }


@dataclass(frozen=True, slots=True, kw_only=True)
class _Section:
    """One section's work: everything its function needs, small enough to send to a process."""

    source: GridSource
    settings: Settings
    transects: Transects
    step_m: float
    islets: NDArray[np.object_]
    picks: NDArray[np.object_]
    """(n,) points (lon, lat) of breaks picked by hand; None for none."""


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
        Processes over sections of coast; the results are the same for any number.
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
        If the grid, the coast, a file named in the settings or the output is not as it must be; nothing is written
        then. A single transect that cannot be screened gets a status and never stops the run.
    """
    check_target(settings.output.path, overwrite=overwrite)
    source = open_grid(settings.grid)
    _LOG.info("values of %s taken as %s: %s", source.path, source.positive, source.positive_why)
    coast = make_coast(source, settings)
    transects = make_transects(source, coast, settings)
    screened = _screen_sections(_sections(source, coast, transects, settings), workers, executor, progress)
    layers = result_layers(screened, coast, settings)
    run = Run(
        path=settings.output.path,
        source=source,
        coast=coast,
        screened=screened,
        step_m=step_of(source, settings.transects),
    )
    layers.append(_run_layer(run, settings))
    write_layers(
        settings.output.path,
        layers,
        crs=settings.output.crs,
        title=settings.title,
        description=f"Screened from {source.path}; {_counts(screened)}.",
        overwrite=overwrite,
    )
    return run


def make_coast(source: GridSource, settings: Settings) -> Coast:
    """Coast of a run: from the grid, or from the vector file of the settings (polygons are land, lines the coast).

    Raises
    ------
    CoastError
        If there is no coast, or the file holds neither lines nor polygons.
    LayerError
        If the file cannot be read.
    """
    if settings.coast.file is None:
        return trace_coast(source, settings.coast)
    data = read_vector(settings.coast.file, settings.coast.layer)
    kinds = shapely.get_dimensions(data.geometry)
    name = str(settings.coast.file)
    if (kinds == 2).any():
        return trace_coast(source, settings.coast, land=data.geometry[kinds == 2])
    if (kinds == 1).any():
        return coast_from_lines(source, data.geometry[kinds == 1], name)
    raise CoastError(f"{name}: holds neither lines nor polygons; give the coast as lines, or the land as polygons")


def make_transects(source: GridSource, coast: Coast, settings: Settings) -> Transects:
    """Transects of a run: laid out along the coast, or those of the vector file of the settings.

    Raises
    ------
    TransectError
        If there are none.
    LayerError
        If the file cannot be read.
    """
    if settings.transects.file is None:
        return lay_transects(coast, settings.transects, settings.coast)
    data = read_vector(settings.transects.file, settings.transects.layer)
    lines = _seaward(source, data.geometry[shapely.get_dimensions(data.geometry) == 1])
    if not len(lines):
        raise TransectError(f"{settings.transects.file}: holds no lines; draw each transect from the shore seaward")
    ids = data.columns.get("transect_id")
    if ids is not None:
        kept = ids[shapely.get_dimensions(data.geometry) == 1]
        ids = np.nan_to_num(kept.astype(float), nan=0.0).astype(np.int64)
    return transects_from_lines(lines, ids, coast, settings.transects.spacing_m)


def _seaward(source: GridSource, lines: NDArray[np.object_]) -> NDArray[np.object_]:
    """Turn round the lines that begin in deeper water than they end in."""
    ends = [shapely.get_coordinates(line)[[0, -1]] for line in lines]
    if not ends:
        return lines
    lonlat = np.concatenate(ends)
    depth_m, _ = source.sample(lonlat[:, 0], lonlat[:, 1])
    first_m, last_m = np.nan_to_num(depth_m[::2], nan=0.0), np.nan_to_num(depth_m[1::2], nan=np.inf)
    backwards = (first_m > 0) & (last_m < first_m)
    out = lines.copy()
    out[backwards] = shapely.reverse(lines[backwards])
    return out


def _picked_breaks(settings: Settings, transect_id: NDArray[np.int64]) -> NDArray[np.object_]:
    """Point of the break picked for each transect; None where there is none."""
    picks = np.full(len(transect_id), None, dtype=object)
    if settings.shelf_break.file is None:
        return picks
    data = read_vector(settings.shelf_break.file, settings.shelf_break.layer)
    where = str(settings.shelf_break.file)
    if "transect_id" not in data.columns or (shapely.get_dimensions(data.geometry) != 0).any():
        raise SettingsError(f"{where}: breaks picked by hand must be points with a column transect_id")
    ids = data.columns["transect_id"]
    known = {int(number): row for row, number in enumerate(transect_id)}
    strangers = sorted({str(number) for number in ids if number not in known})
    if strangers:
        raise SettingsError(f"{where}: transect_id {', '.join(strangers[:5])} belong to no transect of this run")
    for number, point in zip(ids, data.geometry, strict=True):
        if picks[known[int(number)]] is not None:
            raise SettingsError(f"{where}: transect_id {number} has two breaks; leave one")
        picks[known[int(number)]] = shapely.get_parts(point)[0]
    return picks


def _sections(source: GridSource, coast: Coast, transects: Transects, settings: Settings) -> list[_Section]:
    """Cut the transects into sections of neighbouring stations."""
    picks = _picked_breaks(settings, transects.transect_id)
    step_m = step_of(source, settings.transects)
    return [
        _Section(
            source=source,
            settings=settings,
            transects=transects.rows(start, start + SECTION_STATIONS),
            step_m=step_m,
            islets=coast.islets,
            picks=picks[start : start + SECTION_STATIONS],
        )
        for start in range(0, len(transects), SECTION_STATIONS)
    ]


def _screen_sections(
    sections: Sequence[_Section], workers: int, executor: Executor | None, progress: Progress | None
) -> Screened:
    """Screen every section and put the results together in order."""
    done: list[Screened] = []
    with _executor(workers if len(sections) > 1 else 1, executor) as pool:
        results: Iterator[Screened] = (
            map(screen_section, sections) if pool is None else pool.map(screen_section, sections)
        )
        for result in results:
            done.append(result)
            if progress is not None:
                progress("sections", len(done), len(sections))
    return stack(done)


@contextmanager
def _executor(workers: int, executor: Executor | None) -> Iterator[Executor | None]:
    """Give the executor of a run: the caller's, none for one worker, or processes started afresh."""
    if workers < 1:
        raise SettingsError(f"workers = {workers}: at least 1")
    own = None
    if executor is None and workers > 1:
        own = ProcessPoolExecutor(workers, mp_context=multiprocessing.get_context("spawn"))
    with own if own is not None else nullcontext():
        yield executor if own is None else own


def screen_section(section: _Section) -> Screened:
    """Screen one section of coast: a pure function of its input, fit for any executor."""
    settings, transects = section.settings, section.transects
    profiles = sample_profiles(
        section.source,
        transects,
        section.step_m,
        seek_m=settings.coast.generalise_m / 2,
        islets=section.islets,
    )
    breaks = _breaks(section, profiles)
    status = statuses(profiles, breaks, settings.shelf_break.ocean_m)
    computed = usable(status, profiles, settings.shelf_break.ocean_m)
    depth_m = np.where(computed[:, None], profiles.depth_m, np.nan)
    _, outer_depth_m, stepped = deep_end(profiles.distance_m, depth_m, settings.response.deep_m)
    rows = (
        profiles.distance_m,
        depth_m,
        np.where(computed, breaks.break_m, np.nan),
        outer_depth_m,
        coriolis_rad_s(profiles.shore_lat_deg, rotation=settings.response.rotation),
    )
    modes = shelf_modes(
        *rows,
        friction_m_s=settings.response.friction_m_s,
        depth_error=_depth_error(settings),
        break_sd_m=np.hypot(np.nan_to_num(breaks.spread_m) / 2, section.step_m / np.sqrt(3)),
    )
    linear = Friction(linear_m_s=settings.response.friction_m_s)
    omega = 2 * np.pi / (np.array([wave.period_h for wave in waves_of(settings)]) * 3600)
    waves = wave_response(*rows, omega, friction=_friction(settings))
    curve = None
    if settings.output.response_curves:
        curve = wave_response(*rows, 2 * np.pi / (CURVE_PERIODS_H * 3600), friction=linear)
        curve = _cut_curve(curve, modes.travel_time_s)
    index = resonance_index(omega, np.where((status == "ok")[:, None], modes.pole_rad_s, np.nan))
    return Screened(
        transects=transects,
        profiles=profiles,
        breaks=breaks,
        status=status,
        outer_depth_m=outer_depth_m,
        is_stepped=stepped,
        modes=modes,
        waves=waves,
        index=_without(index, waves.below_inertial),
        curve=curve,
        curve_period_h=CURVE_PERIODS_H,
    )


def _breaks(section: _Section, profiles: Profiles) -> ShelfBreaks:
    """Breaks found, those picked by hand in their place."""
    settings = section.settings.shelf_break
    found = find_shelf_breaks(profiles, settings)
    picked_m = np.full(len(profiles.n_samples), np.nan)
    for row, point in enumerate(section.picks):
        if point is not None:
            along_m = distance_along(section.transects, row, shapely.get_x(point), shapely.get_y(point))
            picked_m[row] = along_m - profiles.shore_m[row]
    picked = measure_picked_breaks(profiles, settings, picked_m)
    return replace(
        found,
        **{
            field.name: np.where(picked.is_picked, getattr(picked, field.name), getattr(found, field.name))
            for field in fields(ShelfBreaks)
        },
    )


def _depth_error(settings: Settings) -> DepthError:
    error = settings.depth_error
    return DepthError(fixed_m=error.fixed_m, per_depth=error.per_depth, correlation_m=error.correlation_km * 1e3)


def _friction(settings: Settings) -> Friction:
    """Friction of the waves asked for: by drag for those with an amplitude offshore."""
    response = settings.response
    if response.drag is None:
        return Friction(linear_m_s=response.friction_m_s)
    amplitude = [response.offshore_amplitude_m.get(wave.name, np.nan) for wave in waves_of(settings)]
    return Friction(linear_m_s=response.friction_m_s, drag=response.drag, offshore_amplitude_m=amplitude)


def _cut_curve(curve: WaveResponse, travel_time_s: FloatArray) -> WaveResponse:
    """Leave out of each curve the periods too short to draw it at its points, and all of it without a break."""
    with np.errstate(invalid="ignore"):
        shown = CURVE_PERIODS_H[None, :] * 3600 >= CURVE_LEAST_SHARE * travel_time_s[:, None]
    return replace(
        curve,
        **{
            name: np.where(shown, getattr(curve, name), np.nan)
            for name in ("gain", "damped_gain", "lag_rad", "edge_ratio")
        },
    )


def _without(index: ResonanceIndex, left_out: NDArray[np.bool_]) -> ResonanceIndex:
    """Same index, none where left out."""
    return ResonanceIndex(
        index=np.where(left_out, np.nan, index.index),
        mode=np.where(left_out, 0, index.mode),
        tuning=np.where(left_out, np.nan, index.tuning),
        strength=np.where(left_out, np.nan, index.strength),
    )


def stack(parts: Sequence[_T]) -> _T:
    """Put results of the same kind together, row below row; ragged rows are padded with what means no value."""
    first = parts[0]
    joined: dict[str, Any] = {}
    for field in fields(first):  # type: ignore[arg-type]
        values = [getattr(part, field.name) for part in parts]
        if is_dataclass(values[0]):
            joined[field.name] = stack(values)
        elif isinstance(values[0], np.ndarray) and not field.name.startswith("curve"):
            joined[field.name] = _stack_rows(values)
        else:
            joined[field.name] = values[0]
    return replace(first, **joined)  # type: ignore[type-var]


def _stack_rows(arrays: Sequence[NDArray[Any]]) -> NDArray[Any]:
    if arrays[0].ndim == 1:
        return np.concatenate(arrays)
    width = max(array.shape[1] for array in arrays)
    none = np.nan if arrays[0].dtype.kind in "fc" else 0
    return np.concatenate(
        [np.pad(array, ((0, 0), (0, width - array.shape[1])), constant_values=none) for array in arrays]
    )


def write_coast(settings: Settings, path: Path, *, overwrite: bool = False) -> tuple[Path, Coast]:
    """Write the generalised coast as lines, to be edited and given back as `coast.file`.

    Raises
    ------
    ShelfmapError
        As `screen`.
    """
    check_target(path, overwrite=overwrite)
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
    return path, coast


def write_transects(settings: Settings, path: Path, *, overwrite: bool = False) -> tuple[Path, Profiles]:
    """Write the transects from shore to their ends, to be edited and given back as `transects.file`.

    Raises
    ------
    ShelfmapError
        As `screen`.
    """
    check_target(path, overwrite=overwrite)
    source = open_grid(settings.grid)
    coast = make_coast(source, settings)
    transects = make_transects(source, coast, settings)
    parts = [
        sample_profiles(source, part.transects, part.step_m, seek_m=settings.coast.generalise_m / 2, islets=part.islets)
        for part in _sections(source, coast, transects, settings)
    ]
    profiles = stack(parts)
    layer = Layer(
        name="transect_lines",
        columns=transect_columns(transects, profiles),
        geometry=transect_geometry(transects, profiles),
    )
    write_layers(
        path, [layer], crs=settings.output.crs, title=settings.title, description=coast.source, overwrite=overwrite
    )
    return path, profiles


def _counts(screened: Screened) -> str:
    counts = Counter(screened.status.tolist())
    listed = ", ".join(f"{counts[status]} {status}" for status in STATUSES if counts[status])
    return f"{len(screened.status)} transects: {listed}"


def _run_layer(run: Run, settings: Settings) -> Layer:
    """Settings, versions, sources, counts and cautions of a run as rows of text."""
    source = run.source
    rows: list[tuple[str, str, str | None]] = [("caution", "cautions", CAUTIONS)]
    rows += [("setting", name, value) for name, value in _flat(settings.model_dump(mode="json"))]
    rows += [
        ("source", "grid", source.path),
        ("source", "grid values", f"positive {source.positive}: {source.positive_why}"),
        ("source", "grid coordinate system", f"{source.projection.name} ({source.crs_why})"),
        ("source", "sample spacing [km]", f"{run.step_m / 1e3:.3f}"),
        ("source", "coast", run.coast.source),
    ]
    rows += [("count", "transects", str(len(run.screened.status)))]
    counts = Counter(run.screened.status.tolist())
    rows += [("count", status, str(counts[status])) for status in STATUSES]
    versions = {
        name: importlib.metadata.version(name) for name in ("numpy", "scipy", "numba", "shapely", "rasterio", "pyogrio")
    }
    rows += [
        ("version", name, value)
        for name, value in ({"shelfmap": __version__, "python": platform.python_version()} | versions).items()
    ]
    topic, name, value = (np.array(column, dtype=object) for column in zip(*rows, strict=True))
    return Layer(name="run", columns={"topic": topic, "name": name, "value": value})


def _flat(tree: dict[str, Any], stem: str = "") -> Iterator[tuple[str, str | None]]:
    """Settings as dotted names and text."""
    for key, value in tree.items():
        if isinstance(value, dict) and value:
            yield from _flat(value, f"{stem}{key}.")
        else:
            yield f"{stem}{key}", None if value is None or value == {} else str(value)
