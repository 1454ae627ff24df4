"""Command line: parse, call, print. Results go to stdout, everything else to stderr."""

import functools
import json
import logging
import os
import signal
import sys
import threading
import traceback
import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from shelfmap import __version__
from shelfmap.errors import OutputExistsError, ShelfmapError, ShelfmapWarning

if TYPE_CHECKING:
    from shelfmap.settings import Settings

__all__ = ["main"]

_F = TypeVar("_F", bound=Callable[..., Any])

_FIRST_STEPS = """\b
First steps:
  shelfmap demo my_demo            an invented coast, ready to look at and to edit
  shelfmap inspect dem.tif         what shelfmap understands of your grid
  shelfmap screen settings.toml    the main job
"""

EXIT_FAILED = 1
EXIT_USAGE = 2
EXIT_NO = 3


def _spoken(command: _F) -> _F:
    """Give a verb -v and -q; its warnings and logs become lines on stderr, its errors one sentence and an exit code."""

    @click.option("-v", "--verbose", count=True, help="Say more; twice for everything, tracebacks too.")
    @click.option("-q", "--quiet", count=True, help="Say less: errors only.")
    @functools.wraps(command)
    def spoken(*args: Any, verbose: int, quiet: int, **kwargs: Any) -> None:
        level = max(logging.DEBUG, logging.WARNING - 10 * (verbose - quiet))
        with _messages(level), _tidy_end():
            try:
                command(*args, **kwargs)
            except ShelfmapError as error:
                if level <= logging.DEBUG:
                    click.echo(traceback.format_exc(), err=True, nl=False)
                taken = isinstance(error, OutputExistsError)
                click.echo(_plain(f"Error: {error}{' (--overwrite allows it)' if taken else ''}"), err=True)
                raise click.exceptions.Exit(EXIT_USAGE if taken else EXIT_FAILED) from None
            except MemoryError as error:
                click.echo(
                    f"Error: memory ran out ({_plain(str(error)) or 'no more to be had'}); take a smaller region, "
                    "a larger transects.spacing_km, transects.step_km or field.cell_km",
                    err=True,
                )
                raise click.exceptions.Exit(EXIT_FAILED) from None

    return spoken  # type: ignore[return-value]


@contextmanager
def _tidy_end() -> Iterator[None]:
    """Let a request to terminate end the run as Ctrl-C does: workers stopped, nothing half-written left."""

    def end(number: int, _frame: object) -> None:
        raise SystemExit(128 + number)

    if threading.current_thread() is not threading.main_thread():  # only there may signals be handled
        yield
        return
    before = signal.signal(signal.SIGTERM, end)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


@contextmanager
def _messages(level: int) -> Iterator[None]:
    """Print logs from `level` on and, unless quiet, warnings: a line each."""
    log, handler = logging.getLogger("shelfmap"), logging.StreamHandler()
    handler.setFormatter(logging.Formatter("%(levelname)s: %(message)s"))
    handler.addFilter(_plain_record)
    before = log.level
    log.addHandler(handler)
    log.setLevel(level)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("always", ShelfmapWarning)
            warnings.showwarning = lambda message, *_, **__: _say(f"Warning: {message}")
            yield
    finally:
        log.setLevel(before)
        log.removeHandler(handler)


_settings_file = click.argument("settings_file", metavar="SETTINGS.toml", type=click.Path(path_type=Path))
_overwrite = click.option("--overwrite", is_flag=True, help="Replace files that are there already.")
_as_json = click.option("--json", "as_json", is_flag=True, help="Print a summary as JSON instead of the path.")
_workers = click.option("--workers", default=1, show_default=True, type=click.IntRange(1), help="Processes to use.")
_anew = click.option("--anew", is_flag=True, help="Do all again, whatever a stopped run has left.")
_scheduler = click.option(
    "--scheduler", metavar="ADDRESS", help="Use the workers of a dask scheduler, such as tcp://10.0.0.1:8786."
)


def _output(default: str) -> Callable[[_F], _F]:
    return click.option(
        "--output", "-o", type=click.Path(path_type=Path), help=f"GeoPackage to write [default: {default}]"
    )


@click.group(epilog=_FIRST_STEPS, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(__version__, prog_name="shelfmap")
def main() -> None:
    """Say where tides and other long waves grow along a coast, from a bathymetry grid.

    Screening from gridded depths: not for navigation or any purpose involving safety at sea.
    """
    # rasters, vectors and projections have a PROJ each, in workers too: all read this when they are loaded
    os.environ["PROJ_NETWORK"] = "OFF"
    # the dense blocks of a matrix's factors are small: more threads are no faster, and workers would crowd each other
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")


@main.command(epilog="Example: shelfmap screen coast.toml --output coast.gpkg --workers 2")
@_settings_file
@_output("output.path of the settings")
@_overwrite
@_anew
@_workers
@_scheduler
@_as_json
@_spoken
def screen(settings_file: Path, output: Path | None, as_json: bool, **how: Any) -> None:
    """Screen a coast: transects, shelf breaks and resonance index into one GeoPackage.

    A run that was stopped goes on from its finished sections of coast when the same command is given again.
    """
    settings = _read(settings_file)
    if output is not None:
        written = settings.output.model_copy(update={"path": output.absolute()})
        settings = settings.model_copy(update={"output": written})
    _screen(settings, as_json=as_json, **how)


@main.command(epilog="Example: shelfmap field coast.toml --workers 2")
@_settings_file
@click.option("--output", "-o", type=click.Path(path_type=Path), help="Folder to write [default: NAME_field]")
@_overwrite
@_workers
@_scheduler
@_as_json
@_spoken
def field(settings_file: Path, output: Path | None, as_json: bool, **how: Any) -> None:
    """Solve a region in two dimensions: maps of tides and natural modes, gauges, into one folder.

    The tide at the open edge is fitted to the gauges in gauges.file, where that is given.
    """
    from shelfmap.fieldrun import run_field
    from shelfmap.settings import FieldSettings

    settings = _read(settings_file)
    chosen = settings.field or FieldSettings()
    if output is not None:
        chosen = chosen.model_copy(update={"folder": output.absolute()})
    run = run_field(settings.model_copy(update={"field": chosen}), **how)
    summary = run.summary()
    for line in _field_lines(summary):
        _say(line)
    click.echo(json.dumps(summary) if as_json else run.folder)


def _field_lines(summary: dict[str, Any]) -> Iterator[str]:
    """Say what came of a region, a line for each wave, mode and remark."""
    yield f"{summary['cells']} cells of water, open edge {summary['edge']}"
    yield from summary["remarks"]
    for wave in summary["waves"]:
        name = wave["wave"] or f"{wave['period_h']:g} h"
        text = f"{name}: largest gain {wave['largest_gain']:.1f} at {wave['largest_lon_deg']:.2f}, "
        text += f"{wave['largest_lat_deg']:.2f}"
        if wave["n_gauges"]:
            text += (
                f"; {wave['n_gauges']} gauges, {wave['n_off']} off, each explained from the others to "
                f"{wave['explained_left_out']:.0%}"
            )
        yield text
    for mode in summary["modes"]:
        yield (
            f"natural mode {mode['mode']}: {mode['period_h']:.2f} h, Q {mode['q']:.1f}, "
            f"participation {mode['participation']:.0%}"
        )


@main.command(epilog="Example: shelfmap compare coast.toml --within 30")
@_settings_file
@click.option(
    "--within",
    "within_km",
    default=50.0,
    show_default=True,
    type=click.FloatRange(0, 1000),
    help="How far from a gauge a transect may be, km.",
)
@_overwrite
@_as_json
@_spoken
def compare(settings_file: Path, within_km: float, overwrite: bool, as_json: bool) -> None:
    """Put gauges beside the transects and the 2-D response that were computed there.

    Reads the output of 'shelfmap screen' and the gauges of the settings; writes a table and a figure beside it.
    """
    from shelfmap.comparing import write_comparison

    comparison, paths = write_comparison(_read(settings_file), within_km=within_km, overwrite=overwrite)
    for line in comparison.lines():
        _say(line)
    click.echo(json.dumps(comparison.summary()) if as_json else "\n".join(map(str, paths)))


@main.command(epilog="Example: shelfmap inspect dem.tif --positive up")
@click.argument("grid", type=click.Path(path_type=Path))
@click.option("--positive", type=click.Choice(["auto", "up", "down"]), help="Whether values are elevations or depths.")
@click.option("--crs", help="Coordinate system, where the file lacks one: EPSG:n.")
@click.option("--variable", help="Variable of a netCDF file that holds several.")
@click.option("--band", type=click.IntRange(1), help="Band of the raster.")
@_as_json
@_spoken
def inspect(grid: Path, as_json: bool, **given: Any) -> None:
    """Print what shelfmap understands of a grid, or of the grid in a settings file.

    Ends with exit code 3, and the reason, where the grid cannot be screened.
    """
    from shelfmap.inspection import inspect_grid
    from shelfmap.settings import Settings

    if grid.suffix.lower() == ".toml":
        settings = _read(grid).grid
        settings = settings.model_copy(update={name: value for name, value in given.items() if value is not None})
    else:
        table = {"path": str(grid)} | {name: value for name, value in given.items() if value is not None}
        settings = Settings.from_dict({"grid": table}, folder=Path.cwd(), where="command line").grid
    report = inspect_grid(settings)
    click.echo(json.dumps(report.as_dict(), indent=2) if as_json else _plain("\n".join(report.lines())))
    if not report.can_screen:
        raise click.exceptions.Exit(EXIT_NO)


@main.command(epilog="Example: shelfmap demo my_demo")
@click.argument("folder", metavar="DIR", type=click.Path(path_type=Path))
@_overwrite
@_workers
@_as_json
@_spoken
def demo(folder: Path, overwrite: bool, workers: int, as_json: bool) -> None:
    """Write the demo into a folder, an invented coast with settings to edit, and screen it."""
    from shelfmap.demo import write_demo

    settings_file = write_demo(folder, overwrite=overwrite)[-1]
    _screen(_read(settings_file), as_json=as_json, overwrite=overwrite, workers=workers)


@main.command(epilog="Example: shelfmap coast coast.toml --output coast_lines.gpkg")
@_settings_file
@_output("coast_lines.gpkg beside the settings")
@_overwrite
@_workers
@_spoken
def coast(settings_file: Path, output: Path | None, overwrite: bool, workers: int) -> None:
    """Write the generalised coast, to edit in a GIS and give back as coast.file."""
    from shelfmap.pipeline import write_coast

    path = output or settings_file.with_name("coast_lines.gpkg")
    traced = write_coast(_read(settings_file), path, overwrite=overwrite, workers=workers)
    length_km = sum(line.length_m for line in traced.lines) / 1e3
    _say(f"{len(traced.lines)} stretches of coast, {length_km:.0f} km in all: {traced.source}")
    click.echo(path)


@main.command(epilog="Example: shelfmap transects coast.toml --output transect_lines.gpkg")
@_settings_file
@_output("transect_lines.gpkg beside the settings")
@_overwrite
@_workers
@_spoken
def transects(settings_file: Path, output: Path | None, overwrite: bool, workers: int) -> None:
    """Write the transects, to edit in a GIS and give back as transects.file."""
    from shelfmap.pipeline import write_transects

    path = output or settings_file.with_name("transect_lines.gpkg")
    count = write_transects(_read(settings_file), path, overwrite=overwrite, workers=workers)
    _say(f"{count} transects")
    click.echo(path)


@main.command(epilog="Example: shelfmap schema > settings.schema.json")
def schema() -> None:
    """Print the JSON schema of the settings, for editors that check TOML as you type."""
    from shelfmap.settings import Settings

    click.echo(json.dumps(Settings.model_json_schema(), indent=2))


def _read(settings_file: Path) -> "Settings":
    from shelfmap.settings import Settings

    if settings_file.suffix.lower() != ".toml":
        raise click.UsageError(
            f"{settings_file} is no settings file, whose name ends in .toml; "
            "'shelfmap demo DIR' writes one to start from, 'shelfmap inspect' takes a grid"
        )
    return Settings.from_toml(settings_file)


def _say(text: str, *, end: str = "\n") -> None:
    """Tell people, not programs; quiet means quiet."""
    if logging.getLogger("shelfmap").isEnabledFor(logging.WARNING):
        click.echo(_plain(text) + end, err=True, nl=False)


def _plain(text: str) -> str:
    """Text without the control characters that file names and settings may hold: a terminal would obey them."""
    return "".join(c if c.isprintable() or c == "\n" else f"\\u{ord(c):04x}" for c in text)


def _plain_record(record: logging.LogRecord) -> bool:
    record.msg, record.args = _plain(record.getMessage()), None
    return True


def _screen(settings: "Settings", *, as_json: bool, **how: Any) -> None:
    """Screen with progress and a count of statuses on stderr, path or summary on stdout."""
    from shelfmap import pipeline

    def progress(stage: str, done: int, total: int) -> None:
        _say(f"{stage} {done}/{total}", end="\r")  # whatever is printed next overwrites it

    shown = progress if sys.stderr.isatty() else None
    run = pipeline.screen(settings, progress=shown, **how)
    summary = run.summary()
    counts = ", ".join(f"{count} {status}" for status, count in summary["status"].items())
    _say(f"{summary['transects']} transects: {counts}")
    click.echo(json.dumps(summary) if as_json else run.path)
