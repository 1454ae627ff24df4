"""A run that was stopped, however rudely, goes on from what it had finished, and ends as if nothing had happened."""

import os
import random
import resource
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import shapely
from utils_pipeline import RESULTS, assert_same_results, settings_for, small_coast

from shelfmap import checkpoint, laying, pipeline
from shelfmap.checkpoint import Checkpoint, digest, files_digest
from shelfmap.errors import GridError, LayerError, ShelfmapError
from shelfmap.pipeline import screen
from shelfmap.rasters import write_geotiff
from shelfmap.vectors import read_vector

#: How many runs are killed; a campaign of 200 takes about a quarter of an hour.
N_KILLS = int(os.environ.get("SHELFMAP_KILLS", "4"))


class Stopped(Exception):
    """Stands in for whatever ends a run."""


@pytest.fixture
def settings(tmp_path, write_grid, monkeypatch):
    """A run of three sections, whose coast is kept though it takes no time."""
    monkeypatch.setattr(laying, "LEAST_KEPT_S", 0.0)
    return settings_for(write_grid(small_coast()), tmp_path, transects={"spacing_km": 1.9, "length_km": 150.0})


def kept_in(settings):
    return sorted(settings.output.path.parent.glob(".*.unfinished/*.done"))


def screen_some(settings, monkeypatch, n_sections):
    """Screen, and stop after some sections."""
    done = []

    def stop(_stage, n, _total):
        done.append(n)
        if n == n_sections:
            raise Stopped

    with pytest.raises(Stopped):
        screen(settings, progress=stop, overwrite=True)


def undisturbed(settings, tmp_path):
    path = tmp_path / "undisturbed" / "out.gpkg"
    path.parent.mkdir()
    output = settings.output.model_copy(update={"path": path})
    screen(settings.model_copy(update={"output": output}))
    return path


@pytest.fixture
def screened_again(monkeypatch):
    """Stations of the sections screened from now on."""
    screened, work = [], pipeline.pack_section

    def noted(section):
        screened.append(int(section.transects.transect_id[0]))
        return work(section)

    monkeypatch.setattr(pipeline, "pack_section", noted)
    return screened


# ---- going on


@pytest.mark.parametrize("n_sections", [1, 2, 3])
def test_finished_sections_are_not_done_again(settings, tmp_path, monkeypatch, screened_again, n_sections):
    screen_some(settings, monkeypatch, n_sections)
    assert len(kept_in(settings)) == 1 + n_sections  # the coast too
    assert not settings.output.path.exists()
    screened_again.clear()
    monkeypatch.setattr(laying, "make_coast", None)  # would fail if it were called
    screen(settings)
    assert screened_again == [1, 65, 129][n_sections:]
    monkeypatch.undo()
    assert_same_results(settings.output.path, undisturbed(settings, tmp_path))
    assert not list(tmp_path.glob(".*"))


@pytest.mark.parametrize("stage", ["laying.make_transects", "pipeline.picked_breaks", "pipeline.unpack"])
def test_a_run_stopped_twice_loses_nothing(settings, tmp_path, monkeypatch, stage):
    """The second time before it has come to what the first one finished."""
    screen_some(settings, monkeypatch, 3)
    before = kept_in(settings)

    def stop(*_):
        raise Stopped

    with monkeypatch.context() as patched:
        patched.setattr(f"shelfmap.{stage}", stop)
        with pytest.raises(Stopped):
            screen(settings)
    assert kept_in(settings) == before
    screen(settings)
    assert_same_results(settings.output.path, undisturbed(settings, tmp_path))


def test_a_run_by_several_processes_goes_on_from_one_by_one(settings, tmp_path, monkeypatch):
    screen_some(settings, monkeypatch, 1)
    screen(settings, workers=2)
    assert_same_results(settings.output.path, undisturbed(settings, tmp_path))


@pytest.mark.parametrize(
    "change",
    [
        {"shelf_break": {"slope": 0.02}},
        {"response": {"friction_m_s": 0.002}},
        {"grid": {"level_shift_m": 1.0}},
        {"coast": {"generalise_km": 12.0}},
        {"transects": {"spacing_km": 1.8}},
    ],
    ids=str,
)
def test_work_of_other_settings_is_not_used_and_goes(settings, monkeypatch, screened_again, change):
    screen_some(settings, monkeypatch, 2)
    before = kept_in(settings)
    (table, update), *_ = change.items()
    stage = getattr(settings, table).model_copy(update=update)
    other = settings.model_copy(update={table: stage})
    screened_again.clear()
    screen_some(other, monkeypatch, 2)
    assert len(screened_again) == 2
    same_coast = table not in ("grid", "coast")
    assert len(set(before) & set(kept_in(settings))) == same_coast


def test_title_and_place_of_the_output_do_not_matter(settings, monkeypatch, screened_again):
    screen_some(settings, monkeypatch, 3)
    screened_again.clear()
    screen(settings.model_copy(update={"title": "another"}))
    assert screened_again == []


def test_work_on_a_grid_that_has_changed_is_not_used(settings, monkeypatch, screened_again):
    """One cell of the sea, the file as old as before."""
    screen_some(settings, monkeypatch, 3)
    path, grid = settings.grid.path, small_coast()
    stat = path.stat()
    elevation_m = grid.elevation_m.copy()
    elevation_m[20, 20] -= 1.0
    write_geotiff(path, elevation_m, x0=grid.x0, y0=grid.y0, dx=grid.dx, dy=grid.dy, crs=grid.crs,
                  description="elevation, positive up", overwrite=True)  # fmt: skip
    os.utime(path, ns=(stat.st_atime_ns, stat.st_mtime_ns))
    screened_again.clear()
    screen(settings)
    assert screened_again == [1, 65, 129]


def test_work_of_another_version_is_not_used(settings, monkeypatch, screened_again):
    screen_some(settings, monkeypatch, 3)
    monkeypatch.setattr(checkpoint, "_code_digest", lambda: "other code")
    screened_again.clear()
    screen(settings)
    assert len(screened_again) == 3


def test_anew_does_all_again(settings, monkeypatch, screened_again):
    screen_some(settings, monkeypatch, 3)
    screened_again.clear()
    screen(settings, anew=True)
    assert len(screened_again) == 3


@pytest.mark.parametrize("damage", [lambda data: data[:-1], lambda data: data[:40], lambda _: b"", bytes.swapcase])
def test_a_damaged_piece_is_done_again(settings, tmp_path, monkeypatch, damage):
    screen_some(settings, monkeypatch, 3)
    for piece in kept_in(settings):
        piece.write_bytes(damage(piece.read_bytes()))
    screen(settings)
    assert_same_results(settings.output.path, undisturbed(settings, tmp_path))


# ---- keys


def test_hashes_tell_any_difference():
    lines = shapely.linestrings([[[0, 0], [1, 1]], [[0, 0], [1, 2]]])
    different = [
        (), ("",), ("", ""), ("ab",), ("a", "b"), (b"ab",), (1,), (1.0,), (np.arange(2),), (np.arange(2.0),),
        (np.arange(2)[:, None],), (lines[:1],), (lines[1:],), (lines,), (np.array([None, lines[0]]),),
        (np.array([lines[0], None]),), (np.array([np.nan]),), (np.array([0.0]),), (np.array([-0.0]),),
    ]  # fmt: skip
    assert len({digest(*parts) for parts in different}) == len(different)


def test_hash_of_files_is_of_their_content(tmp_path):
    for name in "ab":
        (tmp_path / name).write_text("same")
    assert files_digest([tmp_path / "a"]) == files_digest([tmp_path / "b"])
    (tmp_path / "b").write_text("sane")
    assert files_digest([tmp_path / "a"]) != files_digest([tmp_path / "b"])


def test_a_piece_is_kept_whole_or_not_at_all(tmp_path, monkeypatch):
    kept = Checkpoint(tmp_path)
    kept.save("key", b"old")
    monkeypatch.setattr(Path, "replace", lambda *_: (_ for _ in ()).throw(Stopped))
    with pytest.raises(Stopped):
        kept.save("key", b"new")
    assert kept.load("key") == b"old"
    assert kept.load("none") is None


# ---- faults


def start(settings_file, *options, **how):
    command = [Path(sys.executable).with_name("shelfmap"), "screen", settings_file, "--overwrite", *options]
    return subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True, **how)


def finish(settings_file, *options):
    process = start(settings_file, *options)
    _, stderr = process.communicate()
    assert process.returncode == 0, stderr
    return stderr


@pytest.fixture
def settings_file(settings, tmp_path):
    """The same run for the command line."""
    file = tmp_path / "run.toml"
    file.write_text(
        'title = "test"\n[grid]\npath = "grid0.tif"\npositive = "up"\n[coast]\ngeneralise_km = 10.0\n'
        '[transects]\nspacing_km = 1.9\nlength_km = 150.0\n[output]\npath = "out.gpkg"\n',
        encoding="utf-8",
    )
    return file


def test_killed_runs_end_as_undisturbed_ones(settings, settings_file, tmp_path):
    """SIGKILL at random moments, one to three times before a run is left alone; no part of a file is ever seen."""
    expected = undisturbed(settings, tmp_path)
    begin = time.perf_counter()
    finish(settings_file)
    whole_s = time.perf_counter() - begin
    moment = random.Random(7)
    kills = 0
    while kills < N_KILLS:
        settings.output.path.unlink(missing_ok=True)
        for _ in range(moment.randint(1, 3)):
            process = start(settings_file)
            time.sleep(moment.uniform(0.2, 1.1) * whole_s)
            process.kill()
            process.communicate()
            kills += process.returncode == -signal.SIGKILL
            if settings.output.path.exists():
                assert_same_results(settings.output.path, expected)
        finish(settings_file)
        assert_same_results(settings.output.path, expected)
        assert sorted(path.name for path in tmp_path.iterdir()) == ["grid0.tif", "out.gpkg", "run.toml", "undisturbed"]
    for layer in RESULTS[:3]:
        one, two = read_vector(settings.output.path, layer), read_vector(expected, layer)
        assert shapely.equals_exact(one.geometry, two.geometry).all()


def test_a_full_disk_is_one_sentence_and_the_run_goes_on_once_there_is_room(settings, settings_file, tmp_path):
    """No file may grow beyond 200 kB: the older output stays, and what was finished is kept."""
    expected = undisturbed(settings, tmp_path)
    settings.output.path.write_text("older")
    limits = {"preexec_fn": lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (200_000, 200_000))}
    process = start(settings_file, **limits)
    _, stderr = process.communicate()
    assert process.returncode == 1, stderr
    errors = [line for line in stderr.splitlines() if line.startswith("Error: ")]
    assert len(errors) == 1
    assert "Traceback" not in stderr
    assert "out.gpkg" in errors[0]
    assert "make room on the disk" in errors[0]
    assert settings.output.path.read_text() == "older"
    finish(settings_file)
    assert_same_results(settings.output.path, expected)


@pytest.mark.parametrize("how", ["gone", "cut short"])
def test_a_grid_lost_while_it_is_read_is_one_sentence(settings, monkeypatch, how):
    real = pipeline.picked_breaks

    def lose(*given):
        path = settings.grid.path
        path.unlink() if how == "gone" else os.truncate(path, path.stat().st_size // 2)
        return real(*given)

    monkeypatch.setattr(pipeline, "picked_breaks", lose)
    with pytest.raises(GridError, match=r"grid0\.tif: ") as error:
        screen(settings)
    assert "\n" not in str(error.value)
    assert not settings.output.path.exists()


def test_a_grid_written_to_while_it_is_read_is_refused(settings, monkeypatch):
    real = pipeline.picked_breaks

    def touch(*given):
        os.utime(settings.grid.path, ns=(1, 1))
        return real(*given)

    monkeypatch.setattr(pipeline, "picked_breaks", touch)
    with pytest.raises(GridError, match=r"has changed while it was read; run again once nothing writes to it"):
        screen(settings)
    assert not settings.output.path.exists()


def workers_of(pid):
    """Worker processes a run has started, as Linux tells."""
    try:
        children = Path(f"/proc/{pid}/task/{pid}/children").read_text(encoding="ascii").split()
        return [int(child) for child in children if b"spawn_main" in Path(f"/proc/{child}/cmdline").read_bytes()]
    except OSError:
        return []


@pytest.mark.skipif(not Path(f"/proc/self/task/{os.getpid()}/children").exists(), reason="asks Linux for the processes")
def test_a_killed_worker_is_one_sentence_and_the_run_goes_on(settings, settings_file, tmp_path):
    """As soon as there is one: it has not begun then."""
    expected = undisturbed(settings, tmp_path)
    process = start(settings_file, "--workers", "2")
    deadline = time.monotonic() + 30
    while not (workers := workers_of(process.pid)) and time.monotonic() < deadline:
        time.sleep(0.01)
    os.kill(workers[0], signal.SIGKILL)
    _, stderr = process.communicate()
    assert process.returncode == 1, stderr
    assert "Error: a worker process died" in stderr
    assert "Traceback" not in stderr
    finish(settings_file, "--workers", "2")
    assert_same_results(settings.output.path, expected)


def test_a_second_run_to_the_same_output_is_refused(settings):
    def meanwhile(*_):
        with pytest.raises(LayerError, match="another run is making it right now"):
            screen(settings)

    screen(settings, progress=meanwhile)
    assert settings.output.path.exists()


def test_work_that_cannot_be_kept_is_one_sentence(settings, monkeypatch):
    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(Path, "replace", full)
    with pytest.raises(ShelfmapError, match=r"out\.gpkg.*No space left on device.*make room on the disk"):
        screen(settings)
