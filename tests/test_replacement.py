"""A file appears whole or not at all, and an older one stays as it was after any failure."""

import os
import sqlite3
from contextlib import closing
from functools import partial
from pathlib import Path

import pytest

from shelfmap.errors import LayerError, OutputExistsError
from shelfmap.replacement import check_target, replacing


def database(path, mode="DELETE"):
    """A small SQLite file, closed."""
    with closing(sqlite3.connect(path)) as connection:
        connection.execute(f"PRAGMA journal_mode={mode}")
        connection.execute("CREATE TABLE t (a)")
        connection.execute("INSERT INTO t VALUES (1)")
        connection.commit()
    return path


def replace(target):
    with replacing(target) as part:
        part.write_text("new")


def names(folder):
    return sorted(entry.name for entry in folder.iterdir())


def test_the_new_file_appears_only_at_the_end(tmp_path):
    target = tmp_path / "a.gpkg"
    with replacing(target) as part:
        part.write_text("new")
        assert not target.exists()
        assert part.parent.parent == tmp_path  # the same file system: moving is one step
        assert part.suffix == ".gpkg"
    assert target.read_text() == "new"
    assert names(tmp_path) == ["a.gpkg"]


def test_a_failure_leaves_the_old_file_bit_for_bit_and_no_part(tmp_path):
    target = database(tmp_path / "a.gpkg")
    before = target.read_bytes()

    def break_off():
        with replacing(target) as part:
            part.write_text("half")
            raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        break_off()
    assert target.read_bytes() == before
    assert names(tmp_path) == ["a.gpkg"]


def test_a_second_run_to_the_same_file_is_refused_and_does_no_harm(tmp_path):
    """With one part for both, each would remove the other's."""
    target = tmp_path / "a.gpkg"
    with replacing(target) as first:
        first.write_text("first")
        with pytest.raises(LayerError, match=r"a\.gpkg: another run is making it right now; wait for that"):
            replace(target)
    assert target.read_text() == "first"
    replace(target)
    assert target.read_text() == "new"
    assert names(tmp_path) == ["a.gpkg"]


def test_what_a_killed_run_left_is_taken_over(tmp_path):
    folder = tmp_path / ".a.gpkg.unfinished"
    folder.mkdir()
    for name in ("lock", "a.gpkg", "a.gpkg-journal"):
        (folder / name).write_text("half")
    with replacing(tmp_path / "a.gpkg") as part:
        assert names(folder) == ["lock"]
        part.write_text("new")
    assert names(tmp_path) == ["a.gpkg"]


def test_files_that_are_not_ours_keep_their_folder(tmp_path):
    folder = tmp_path / ".a.gpkg.unfinished"
    folder.mkdir()
    (folder / "mine.txt").write_text("precious")
    replace(tmp_path / "a.gpkg")
    assert names(folder) == ["mine.txt"]


@pytest.mark.parametrize("name", ["a.gpkg.part.gpkg", "a.gpkg.part", "a.gpkg.part.gpkg-journal", "a.gpkg.bak"])
def test_no_other_file_of_the_user_is_touched(tmp_path, name):
    (tmp_path / name).write_text("precious")
    replace(tmp_path / "a.gpkg")
    assert (tmp_path / name).read_text() == "precious"


@pytest.mark.parametrize("mode", ["DELETE", "WAL"])
def test_a_file_that_nobody_holds_is_replaced_and_nothing_stays_beside_it(tmp_path, mode):
    target = database(tmp_path / "a.gpkg", mode)
    replace(target)
    assert target.read_text() == "new"
    assert names(tmp_path) == ["a.gpkg"]


@pytest.mark.parametrize(
    ("mode", "reading"), [("WAL", False), ("WAL", True), ("DELETE", True)], ids=["wal idle", "wal reading", "reading"]
)
def test_a_file_that_another_program_holds_is_not_replaced(tmp_path, mode, reading):
    """In write-ahead mode an open connection is enough, even one that does nothing."""
    target = database(tmp_path / "a.gpkg", mode)
    with closing(sqlite3.connect(target, isolation_level=None)) as other:
        if reading:
            other.execute("BEGIN")
        assert other.execute("SELECT a FROM t").fetchall() == [(1,)]
        before = target.read_bytes()
        for attempt in (replace, partial(check_target, overwrite=True)):
            with pytest.raises(LayerError, match=r"a\.gpkg is in use by another program \(.*\); close it there"):
                attempt(target)
        assert target.read_bytes() == before
        assert other.execute("SELECT a FROM t").fetchall() == [(1,)]
    assert names(tmp_path) == ["a.gpkg"]


def test_a_journal_left_by_a_crash_is_not_played_back_into_the_new_file(tmp_path):
    (tmp_path / "a.gpkg").write_text("no database " * 100)
    (tmp_path / "a.gpkg-journal").write_bytes(b"\0" * 512)
    (tmp_path / "a.gpkg-wal").write_bytes(b"\0" * 512)
    replace(tmp_path / "a.gpkg")
    assert names(tmp_path) == ["a.gpkg"]


def test_a_journal_beside_no_file_is_left_alone_and_named(tmp_path):
    (tmp_path / "a.gpkg-wal").write_text("precious")
    with pytest.raises(LayerError, match=r"a\.gpkg-wal beside it would be taken as part of it; move them"):
        replace(tmp_path / "a.gpkg")
    assert names(tmp_path) == ["a.gpkg-wal"]
    assert (tmp_path / "a.gpkg-wal").read_text() == "precious"


def test_an_old_file_that_is_no_database_is_replaced(tmp_path):
    target = tmp_path / "a.gpkg"
    target.write_text("a text that only ends in .gpkg " * 100)
    replace(target)
    assert target.read_text() == "new"


def test_a_link_stays_a_link(tmp_path):
    (tmp_path / "far").mkdir()
    real = tmp_path / "far" / "real.gpkg"
    real.write_text("")
    link = tmp_path / "a.gpkg"
    link.symlink_to(real)
    with replacing(link) as part:
        part.write_text("new")
    assert link.is_symlink()
    assert real.read_text() == "new"


def test_names_with_marks_that_mean_something_in_addresses_work(tmp_path):
    target = database(tmp_path / "a ?mode=ro&x#1 100%25.gpkg")
    replace(target)
    assert target.read_text() == "new"


def test_a_move_the_system_refuses_is_one_sentence(tmp_path, monkeypatch):
    target = tmp_path / "a.gpkg"

    def refuse(self, other):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "replace", refuse)
    with pytest.raises(LayerError, match=r"cannot be put in place \(Permission denied\); close it in other programs"):
        replace(target)
    assert names(tmp_path) == []


def test_an_existing_file_is_refused_unless_it_may_be_overwritten(tmp_path):
    target = database(tmp_path / "a.gpkg")
    with pytest.raises(OutputExistsError, match=r"a\.gpkg exists already; allow it to be overwritten"):
        check_target(target, overwrite=False)
    with pytest.raises(FileExistsError):
        check_target(target, overwrite=False)
    check_target(target, overwrite=True)
    check_target(tmp_path / "b.GPKG", overwrite=False)


@pytest.mark.parametrize(
    ("name", "message"),
    [
        ("a.shp", r"does not end in \.gpkg; .*name it a\.gpkg"),
        ("a", r"does not end in \.gpkg"),
        ("none/a.gpkg", r"there is no folder .*none; make it first"),
        ("folder.gpkg", r"is a folder; give the name of a file in it"),
        ("file/a.gpkg", r"there is no folder"),
    ],
)
def test_a_path_that_cannot_be_written_is_refused_with_the_cure(tmp_path, name, message):
    (tmp_path / "folder.gpkg").mkdir()
    (tmp_path / "file").write_text("")
    with pytest.raises(LayerError, match=message):
        check_target(tmp_path / name, overwrite=True)


@pytest.mark.parametrize(
    ("closed", "message"), [("", "folder .* is read-only; write to"), ("a.gpkg", "a.gpkg is read-only")]
)
def test_a_read_only_folder_or_file_is_refused(tmp_path, monkeypatch, closed, message):
    """The system's answer is put in by hand: the superuser may write anywhere."""
    target = database(tmp_path / "a.gpkg")
    monkeypatch.setattr(os, "access", lambda path, mode: Path(path) != (tmp_path / closed))
    with pytest.raises(LayerError, match=message):
        check_target(target, overwrite=True)


def test_links_in_a_circle_are_one_sentence(tmp_path):
    loop = tmp_path / "loop.gpkg"
    loop.symlink_to(loop)
    with pytest.raises(LayerError, match=r"loop\.gpkg is a link that leads nowhere; remove it"):
        check_target(loop, overwrite=True)
