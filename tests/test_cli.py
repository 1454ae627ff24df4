"""The command line as people and scripts meet it: exit codes, what goes to stdout and stderr, what is left on disk."""

import json
import os
import pty
import shutil
import signal
import sqlite3
import subprocess
import sys
import time
from contextlib import closing
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner
from utils_grid import write_tif
from utils_pipeline import small_coast

from shelfmap import __version__
from shelfmap.cli import main
from shelfmap.demo import write_demo
from shelfmap.vectors import read_table

SETTINGS = """\
title = "test"
[grid]
path = {grid}
positive = "up"
[coast]
generalise_km = 40.0
[transects]
spacing_km = 20.0
length_km = 200.0
[output]
path = "out.gpkg"
"""
VERBS = ["screen", "inspect", "demo", "coast", "transects", "schema"]


def run(*args, code=0):
    """Run a command in this process; its exit code must be the one given."""
    result = CliRunner().invoke(main, [str(arg) for arg in args])
    assert result.exit_code == code, result.output
    return result


def sentence(result):
    """The one line of error."""
    assert result.stdout == ""
    assert result.stderr.count("\n") == 1, result.stderr
    assert result.stderr.startswith("Error: ")
    return result.stderr.removeprefix("Error: ").rstrip("\n")


def files(folder):
    return sorted(path.name for path in folder.iterdir())


@pytest.fixture
def coast_toml(tmp_path, write_grid):
    """Settings file of a small coast."""
    return settings_file(tmp_path / "coast.toml", write_grid(small_coast()))


def settings_file(path, grid, **changes):
    text = SETTINGS.format(grid=json.dumps(str(grid), ensure_ascii=False))
    for old, new in changes.items():
        text = text.replace(old, new)
    path.write_text(text, encoding="utf-8")
    return path


def tif_of(path, values, **more):
    """Grid of 20 x 20 cells of 0.1 degree, elevations; one number fills it."""
    values = np.broadcast_to(np.asarray(values, dtype=np.float32), (20, 20))
    return write_tif(path, values, x0=0.0, y0=40.0, dx=0.1, dy=0.1, description="elevation", **more)


# ---- what goes where


def test_screen_prints_the_path_on_stdout_and_the_counts_on_stderr(coast_toml):
    result = run("screen", coast_toml)
    path = coast_toml.parent / "out.gpkg"
    assert result.stdout == f"{path}\n"
    assert result.stderr == "15 transects: 15 ok\n"
    assert len(read_table(path, "transects")["status"]) == 15
    assert files(path.parent) == ["coast.toml", "grid0.tif", "out.gpkg"]


def test_json_is_the_only_thing_on_stdout(coast_toml):
    summary = json.loads(run("screen", coast_toml, "--json").stdout)
    assert summary["transects"] == 15
    assert summary["status"] == {"ok": 15}
    assert summary["path"].endswith("out.gpkg")


def test_quiet_says_nothing_but_the_result(coast_toml):
    result = run("screen", coast_toml, "--quiet")
    assert (result.stderr, result.stdout) == ("", f"{coast_toml.parent / 'out.gpkg'}\n")


def test_verbose_says_how_the_grid_was_understood(coast_toml):
    stderr = run("screen", coast_toml, "-v").stderr
    assert "INFO: values of" in stderr
    assert "taken as up: set by grid.positive" in stderr
    assert "INFO: coast: 1 stretches" in stderr


def test_output_is_taken_from_the_working_folder_not_from_that_of_the_settings(coast_toml, tmp_path, monkeypatch):
    (tmp_path / "here").mkdir()
    monkeypatch.chdir(tmp_path / "here")
    result = run("screen", "../coast.toml", "--output", "mine.gpkg")
    assert Path(result.stdout.strip()) == tmp_path / "here" / "mine.gpkg"
    assert files(tmp_path / "here") == ["mine.gpkg"]


def test_warning_is_one_line(coast_toml, tmp_path):
    """A break picked on land, of the transect that has it."""
    (tmp_path / "picked.csv").write_text("transect_id,WKT\n5,POINT (0.4 40.0)\n", encoding="utf-8")
    vrt = '<OGRVRTDataSource><OGRVRTLayer name="picked"><SrcDataSource relativeToVRT="1">picked.csv</SrcDataSource>'
    vrt += '<GeometryField encoding="WKT" field="WKT"/><LayerSRS>EPSG:4326</LayerSRS>'
    vrt += '<Field name="transect_id" type="Integer"/></OGRVRTLayer></OGRVRTDataSource>'
    (tmp_path / "picked.vrt").write_text(vrt, encoding="utf-8")
    with coast_toml.open("a", encoding="utf-8") as file:
        file.write('[shelf_break]\nfile = "picked.vrt"\n')
    warning, counts = run("screen", coast_toml).stderr.splitlines()
    assert warning.startswith("Warning: breaks picked for transect_id 5 lie beyond the depths")
    assert counts == "15 transects: 15 ok"
    assert run("screen", coast_toml, "--overwrite", "-q").stderr == ""


def test_coast_and_transects_print_their_paths(coast_toml, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    result = run("coast", "coast.toml")
    assert result.stdout == "coast_lines.gpkg\n"
    assert result.stderr.startswith("1 stretches of coast, 291 km in all: shoreline at 0 m")
    result = run("transects", "coast.toml", "--output", tmp_path / "t.gpkg")
    assert result.stdout == f"{tmp_path / 't.gpkg'}\n"
    assert result.stderr == "15 transects\n"
    assert len(read_table(tmp_path / "t.gpkg", "transect_lines")["transect_id"]) == 15
    run("coast", "coast.toml", code=2)
    run("coast", "coast.toml", "--overwrite")


def test_demo_writes_settings_that_screen_takes(tmp_path):
    result = run("demo", tmp_path / "demo", "--json")
    assert json.loads(result.stdout)["transects"] > 100
    assert files(tmp_path / "demo") == ["demo.gpkg", "demo.tif", "demo.toml", "demo_gauges.csv"]
    run("screen", tmp_path / "demo" / "demo.toml", "--overwrite", "-q")


def test_schema_is_json_and_names_every_section():
    schema = json.loads(run("schema").stdout)
    assert {"grid", "coast", "transects", "shelf_break", "response", "output"} <= set(schema["properties"])


# ---- help and usage


@pytest.mark.parametrize("verb", VERBS)
def test_help_of_each_verb_shows_an_example(verb):
    assert f"Example: shelfmap {verb}" in run(verb, "--help").stdout


def test_help_names_every_verb_and_the_first_steps():
    text = run("--help").stdout
    assert all(f"  {verb} " in text for verb in VERBS)
    assert "shelfmap demo my_demo " in text
    assert "not for navigation" in " ".join(text.split())


def test_version():
    assert run("--version").stdout == f"shelfmap, version {__version__}\n"


@pytest.mark.parametrize(
    ("args", "hint"),
    [
        (["scren", "x.toml"], "Did you mean 'screen'?"),
        (["screen", "x.toml", "--overwritte"], "Did you mean '--overwrite'?"),
        (["screen"], "Missing argument 'SETTINGS.toml'"),
        (["screen", "x.toml", "--workers", "0"], "0 is not in the range x>=1"),
        (["screen", "dem.tif"], "dem.tif is no settings file, whose name ends in .toml; 'shelfmap demo DIR' writes"),
    ],
)
def test_usage_errors_end_with_code_2_and_a_hint(args, hint):
    result = run(*args, code=2)
    assert hint in result.stderr
    assert result.stdout == ""


# ---- what goes wrong


def test_missing_settings_file(tmp_path):
    assert sentence(run("screen", tmp_path / "no.toml", code=1)).endswith("cannot be read: No such file or directory")


def test_misspelt_setting_is_named_with_the_right_one(tmp_path):
    path = settings_file(tmp_path / "coast.toml", "x.tif", spacing_km="spacing_kn")
    stderr = run("screen", path, code=1).stderr
    assert "transects.spacing_kn: no such setting; did you mean 'spacing_km'?" in stderr


def test_missing_grid_is_named_with_its_path(tmp_path):
    path = settings_file(tmp_path / "coast.toml", "missing.tif")
    message = sentence(run("screen", path, code=1))
    assert str(tmp_path / "missing.tif") in message
    assert files(tmp_path) == ["coast.toml"]


def test_grid_without_coordinate_system(tmp_path):
    tif_of(tmp_path / "g.tif", 1.0, crs=None)
    path = settings_file(tmp_path / "coast.toml", "g.tif")
    assert "grid.crs" in sentence(run("screen", path, code=1))


@pytest.mark.parametrize(
    ("values", "words"),
    [
        (100.0, "grid.positive"),
        (-100.0, "no shoreline"),
        (-32768.0, "no water body"),
        (np.where(np.arange(20) < 1, -5.0, 50.0), "no water body of at least 2000 km2"),
    ],
    ids=["all land", "all water", "all missing", "no sea"],
)
def test_grid_that_holds_no_coast(tmp_path, values, words):
    tif_of(tmp_path / "g.tif", values, nodata=-32768.0)
    path = settings_file(tmp_path / "coast.toml", "g.tif")
    assert words in sentence(run("screen", path, code=1))
    assert files(tmp_path) == ["coast.toml", "g.tif"]


def test_grid_smaller_than_the_distance_of_stations_still_gets_one(tmp_path):
    """Twenty cells of 200 m: one station, that ends at the grid's edge."""
    values = np.broadcast_to(np.where(np.arange(20) < 10, -20.0, 20.0).astype(np.float32), (20, 20))
    write_tif(tmp_path / "g.tif", values, x0=0.0, y0=40.0, dx=0.002, dy=0.002)
    path = settings_file(tmp_path / "coast.toml", "g.tif", generalise_km="smallest_sea_km2 = 1.0\ngeneralise_km")
    assert run("screen", path).stderr == "1 transects: 1 edge_of_grid\n"


def test_existing_output_ends_with_code_2_and_stays(coast_toml):
    out = coast_toml.parent / "out.gpkg"
    out.write_text("mine", encoding="utf-8")
    message = sentence(run("screen", coast_toml, code=2))
    assert "exists already" in message
    assert message.endswith("(--overwrite allows it)")
    assert out.read_text(encoding="utf-8") == "mine"
    run("screen", coast_toml, "--overwrite")
    assert len(read_table(out, "transects")["status"]) == 15


def test_missing_folder_is_refused_before_any_work(coast_toml):
    message = sentence(run("screen", coast_toml, "--output", coast_toml.parent / "no" / "out.gpkg", code=1))
    assert message.endswith("no; make it first or correct the path")
    assert files(coast_toml.parent) == ["coast.toml", "grid0.tif"]


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write anywhere")
def test_read_only_folder_is_refused(coast_toml):
    folder = coast_toml.parent / "shut"
    folder.mkdir(mode=0o555)
    assert "read-only" in sentence(run("screen", coast_toml, "--output", folder / "out.gpkg", code=1))


def test_read_only_folder_is_refused_as_the_system_says(coast_toml, monkeypatch):
    """The same where tests run as root, who may write anywhere: only the system's answer is made up."""
    monkeypatch.setattr("shelfmap.replacement.os.access", lambda _path, mode: mode != os.W_OK)
    assert "is read-only; write to another folder" in sentence(run("screen", coast_toml, code=1))


def test_output_open_in_another_program_stays_as_it_was(coast_toml):
    run("screen", coast_toml)
    out = coast_toml.parent / "out.gpkg"
    with closing(sqlite3.connect(out, isolation_level=None)) as gis:
        gis.execute("BEGIN IMMEDIATE")
        result = run("screen", coast_toml, "--overwrite", code=1)
        assert "is in use by another program" in result.stderr
        gis.execute("ROLLBACK")
    assert len(read_table(out, "transects")["status"]) == 15
    assert files(out.parent) == ["coast.toml", "grid0.tif", "out.gpkg"]


def test_output_that_is_no_geopackage(coast_toml):
    message = sentence(run("screen", coast_toml, "--output", coast_toml.parent / "out.shp", code=1))
    assert message.endswith("layers are written as GeoPackage: name it out.gpkg")


def stop(*_, **__):
    raise KeyboardInterrupt


@pytest.mark.parametrize("stage", ["laying.open_grid", "laying.make_coast"])
def test_run_interrupted_early_leaves_the_older_output_and_nothing_else(coast_toml, monkeypatch, stage):
    run("screen", coast_toml)
    out = coast_toml.parent / "out.gpkg"
    before = out.read_bytes()
    monkeypatch.setattr(f"shelfmap.{stage}", stop)
    result = run("screen", coast_toml, "--overwrite", code=1)
    assert result.stderr.strip() == "Aborted!"
    assert out.read_bytes() == before
    assert files(out.parent) == ["coast.toml", "grid0.tif", "out.gpkg"]


@pytest.mark.parametrize("stage", ["pipeline.station_layers", "geopackage._add_metadata", "replacement._move"])
def test_run_interrupted_late_keeps_its_sections_and_goes_on_from_them(coast_toml, monkeypatch, stage):
    folder, out = coast_toml.parent, coast_toml.parent / "out.gpkg"
    run("screen", coast_toml)
    before = out.read_bytes()
    with monkeypatch.context() as patched:
        patched.setattr(f"shelfmap.{stage}", stop)
        told = run("screen", coast_toml, "--overwrite", code=1).stderr
    assert f"is kept in {folder / '.out.gpkg.unfinished'}: the same run goes on from it" in told
    assert out.read_bytes() == before
    assert files(folder) == [".out.gpkg.unfinished", "coast.toml", "grid0.tif", "out.gpkg"]
    kept = files(folder / ".out.gpkg.unfinished")
    assert [Path(file).suffix for file in kept] == [".done"]
    told = run("screen", coast_toml, "--overwrite").stderr
    assert "1 of 1 sections were finished by an earlier run and are used" in told
    assert files(folder) == ["coast.toml", "grid0.tif", "out.gpkg"]


def test_traceback_is_shown_with_vv_only(tmp_path):
    assert "Traceback" not in run("screen", tmp_path / "no.toml", "-v", code=1).stderr
    stderr = run("screen", tmp_path / "no.toml", "-vv", code=1).stderr
    assert stderr.startswith("Traceback")
    assert stderr.splitlines()[-1].startswith("Error: settings file")


# ---- names


@pytest.mark.parametrize("name", ["with space", 'it\'s "quoted"', "Straße ñ 海岸", "100%_#1"])
def test_names_of_all_kinds(tmp_path, write_grid, name):
    folder = tmp_path / name
    folder.mkdir()
    shutil.copy(write_grid(small_coast()), folder / f"{name}.tif")
    path = settings_file(folder / f"{name}.toml", f"{name}.tif")
    assert run("screen", path, "-o", folder / f"{name}.gpkg").stdout == f"{folder / name}.gpkg\n"
    assert run("inspect", folder / f"{name}.tif").stdout.splitlines()[0].endswith(f"{name}.tif")
    run("transects", path, "-o", folder / "lines.gpkg")
    assert files(folder) == sorted([f"{name}.gpkg", f"{name}.tif", f"{name}.toml", "lines.gpkg"])


# ---- inspect


def test_inspect_tells_people_and_programs_the_same(coast_toml):
    grid = coast_toml.parent / "grid0.tif"
    text = run("inspect", grid, "--positive", "up").stdout
    assert "positive up: set by grid.positive" in text
    assert "screening    possible" in text
    report = json.loads(run("inspect", grid, "--positive", "up", "--json").stdout)
    assert report["can_screen"] is True
    assert report["positive"] == "up"
    assert (report["n_rows"], report["n_cols"]) == small_coast().elevation_m.shape


def test_inspect_takes_the_settings_of_a_run(coast_toml):
    report = json.loads(run("inspect", coast_toml, "--json").stdout)
    assert report["path"] == str(coast_toml.parent / "grid0.tif")
    assert json.loads(run("inspect", coast_toml, "--positive", "down", "--json").stdout)["positive"] == "down"


def test_inspect_takes_a_path_from_the_working_folder(coast_toml, monkeypatch):
    monkeypatch.chdir(coast_toml.parent)
    assert run("inspect", "grid0.tif").stdout.splitlines()[0].endswith("grid0.tif")


@pytest.mark.parametrize(
    ("values", "reason"),
    [(100.0, "No cell lies below the water"), (-100.0, "No cell is land"), (-32768.0, "All cells are missing")],
)
def test_inspect_ends_with_code_3_where_the_grid_cannot_be_screened(tmp_path, values, reason):
    grid = tif_of(tmp_path / "g.tif", values, nodata=-32768.0)
    result = run("inspect", grid, "--positive", "up", code=3)
    assert "screening    not possible" in result.stdout
    assert reason in result.stdout
    report = json.loads(run("inspect", grid, "--positive", "up", "--json", code=3).stdout)
    assert report["can_screen"] is False
    assert reason in report["reasons"][0]


def test_inspect_of_what_is_no_grid(tmp_path):
    (tmp_path / "notes.txt").write_text("hello", encoding="utf-8")
    assert "notes.txt" in sentence(run("inspect", tmp_path / "notes.txt", code=1))
    assert "no.tif" in sentence(run("inspect", tmp_path / "no.tif", code=1))


# ---- as a process


def test_whole_process_with_workers(coast_toml):
    """Through the installed command: stdout, stderr and the exit code as a shell sees them."""
    command = Path(sys.executable).with_name("shelfmap")
    more = coast_toml.read_text(encoding="utf-8").replace("spacing_km = 20.0", "spacing_km = 2.0")
    coast_toml.write_text(more, encoding="utf-8")
    done = subprocess.run(
        [command, "screen", coast_toml.name, "--workers", "2", "--json"],
        cwd=coast_toml.parent,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0
    assert json.loads(done.stdout)["transects"] > 128
    assert done.stderr.endswith(" ok\n")
    assert done.stderr.count("\n") == 1  # no progress where nobody watches


def test_progress_is_drawn_on_a_terminal_and_overwritten(coast_toml):
    """A pseudo-terminal as stderr; stdout still holds the path alone."""
    ours, theirs = pty.openpty()
    command = Path(sys.executable).with_name("shelfmap")
    done = subprocess.run([command, "screen", coast_toml], stdout=subprocess.PIPE, stderr=theirs, text=True, check=True)
    os.close(theirs)
    drawn = os.read(ours, 4096).decode()
    os.close(ours)
    assert drawn == "sections 1/1\r15 transects: 15 ok\r\n"
    assert done.stdout == f"{coast_toml.parent / 'out.gpkg'}\n"


def children_of(pid):
    """Processes a process has started, as Linux tells; empty once it has ended."""
    try:
        return {int(child) for child in Path(f"/proc/{pid}/task/{pid}/children").read_text(encoding="ascii").split()}
    except OSError:
        return set()


def runs(pid):
    """Whether a process runs; one that has ended and waits to be counted does not."""
    try:
        return Path(f"/proc/{pid}/stat").read_text(encoding="ascii").rpartition(")")[2].split()[0] != "Z"
    except OSError:
        return False


@pytest.mark.skipif(not Path(f"/proc/self/task/{os.getpid()}/children").exists(), reason="asks Linux for the processes")
@pytest.mark.parametrize(("number", "code"), [(signal.SIGTERM, 143), (signal.SIGKILL, -9)])
def test_ended_run_leaves_no_worker_and_no_output(tmp_path, number, code):
    """However the parent ends, its workers end too."""
    write_demo(tmp_path)
    toml = (tmp_path / "demo.toml").read_text(encoding="utf-8").replace("spacing_km = 20.0", "spacing_km = 1.0")
    (tmp_path / "many.toml").write_text(toml, encoding="utf-8")
    command = Path(sys.executable).with_name("shelfmap")
    process = subprocess.Popen(
        [command, "screen", str(tmp_path / "many.toml"), "--workers", "2"], stderr=subprocess.PIPE
    )
    started, deadline = set(), time.monotonic() + 30
    while len(started) < 3 and time.monotonic() < deadline and process.poll() is None:  # two workers and their tracker
        time.sleep(0.02)
        started |= children_of(process.pid)
    process.send_signal(number)
    process.communicate(timeout=30)
    assert len(started) >= 3
    assert process.returncode == code
    deadline = time.monotonic() + 10
    while any(map(runs, started)) and time.monotonic() < deadline:
        time.sleep(0.05)
    assert not [pid for pid in started if runs(pid)]
    assert not (tmp_path / "demo.gpkg").exists()


def test_module_is_the_command():
    done = subprocess.run([sys.executable, "-m", "shelfmap", "--version"], capture_output=True, text=True, check=True)
    assert done.stdout == f"shelfmap, version {__version__}\n"
