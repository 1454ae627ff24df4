"""A file written beside its target and put in its place only when whole."""

import os
import sqlite3
from collections.abc import Iterator
from contextlib import closing, contextmanager, suppress
from pathlib import Path
from typing import IO, Final

from shelfmap.errors import LayerError, OutputExistsError
from shelfmap.localfiles import why_unnameable

__all__ = ["check_name", "check_target", "placing", "replacing", "unfinished"]

#: How long another program may hold the old file before it counts as in use, seconds.
_PATIENCE_S: Final = 0.5

#: Longest name and path of an output, bytes: parts beside it bear longer names.
_NAME_BYTES: Final = 200
_PATH_BYTES: Final = 3000
#: What SQLite leaves beside a file while it is open or after a crash.
_COMPANIONS: Final = ("-journal", "-wal", "-shm")

#: Held, by the system's means, by the run that works in a folder.
_LOCK: Final = "lock"


def check_name(path: Path) -> None:
    """Refuse a name that no disk takes, or that the library of vectors would cut.

    Raises
    ------
    LayerError
        If it does not do.
    """
    if len(os.fsencode(path.name)) > _NAME_BYTES or len(os.fsencode(path.absolute())) > _PATH_BYTES:
        raise LayerError(
            f"output {path.name[:40]}...: the name is too long for the disk; give one of under {_NAME_BYTES}"
        )
    if why := why_unnameable(path):
        raise LayerError(f"output {path}: {why}")


def check_target(path: str | Path, *, overwrite: bool) -> None:
    """Refuse a GeoPackage path that could not be written; worth asking before a long run.

    Raises
    ------
    OutputExistsError
        If the file is there and may not be overwritten.
    LayerError
        If the name does not end in .gpkg, names a folder, the file or its folder cannot be written to, or another
        program holds the file.
    """
    path = Path(path)
    check_name(path)
    folder = _real(path).parent
    if path.suffix.lower() != ".gpkg":
        raise LayerError(
            f"output {path} does not end in .gpkg; layers are written as GeoPackage: name it {path.stem}.gpkg"
        )
    if path.is_dir():
        raise LayerError(f"output {path} is a folder; give the name of a file in it")
    if path.exists() and not path.is_file():
        raise LayerError(f"output {path} is a pipe or a device; give the name of a file")
    if not folder.is_dir():
        raise LayerError(f"output {path}: there is no folder {folder}; make it first or correct the path")
    if not os.access(folder, os.W_OK):
        raise LayerError(f"output {path}: folder {folder} is read-only; write to another folder or open it for writing")
    if path.exists() and not overwrite:
        raise OutputExistsError(f"output {path} exists already; allow it to be overwritten or give another name")
    if path.exists() and not os.access(path, os.W_OK):
        raise LayerError(f"output {path} is read-only; open it for writing or give another name")
    if path.exists():
        _refuse_if_held(_real(path))


@contextmanager
def unfinished(path: str | Path) -> Iterator[Path]:
    """Folder beside `path` for what is not whole yet, held by this run alone until the end.

    It stays only if something was kept in it. A run that was killed leaves it behind; the next one takes it over.

    Raises
    ------
    LayerError
        If another run holds it, or it cannot be made.
    """
    target = _real(Path(path))
    folder = target.with_name(f".{target.name}.unfinished")
    try:
        lock = _lock(folder, target)
    except LayerError:
        raise
    except OSError as error:
        raise LayerError(
            f"output {target}: {folder.name} cannot be made beside it ({error.strerror}); make room, or write to "
            "another folder"
        ) from error
    try:
        yield folder
    finally:
        (folder / _LOCK).unlink(missing_ok=True)
        with suppress(OSError):  # something is kept in it
            folder.rmdir()
        lock.close()


def _lock(folder: Path, target: Path) -> IO[str]:
    """Make the folder and hold its lock, which the system lets go when this process ends, however that comes about."""
    if folder.is_symlink():
        raise LayerError(f"output {target}: {folder} is a link to another folder; remove it")
    while True:
        folder.mkdir(exist_ok=True)
        lock = open(folder / _LOCK, "a", encoding="utf-8", opener=_open_no_link)  # noqa: SIM115
        if not _is_ours(lock):
            lock.close()
            raise LayerError(f"output {target}: another run is making it right now; wait for that, or use another name")
        with suppress(FileNotFoundError):
            if (folder / _LOCK).stat().st_ino == os.fstat(lock.fileno()).st_ino:
                return lock
        lock.close()  # the run that held it has just ended and removed it


def _open_no_link(path: str, flags: int) -> int:
    """Open a file, not what a link leads to: a folder from a stranger may hold links into this user's files."""
    return os.open(path, flags | getattr(os, "O_NOFOLLOW", 0), 0o666)


def _is_ours(lock: IO[str]) -> bool:
    """Whether the lock could be had; where the system knows no locks, it counts as ours."""
    try:
        import fcntl  # noqa: PLC0415 - not on every system
    except ImportError:
        return True
    try:
        fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    except OSError:
        return True  # a network file system without locks
    return True


@contextmanager
def placing(folder: Path, path: str | Path) -> Iterator[Path]:
    """Name to write to in `folder`, moved onto `path` at the end if nothing went wrong.

    On any failure the part is removed and the old file stays as it was. The old file is replaced only while no other
    program holds it: replacing a SQLite file that is open elsewhere in write-ahead mode can destroy it.

    Raises
    ------
    LayerError
        If the old file is in use, the new one cannot be moved into its place, or files of SQLite's stand beside a
        target that is not there.
    """
    target = _real(Path(path))
    part = folder / target.name
    _remove(part)  # of a run that was killed
    try:
        yield part
        _to_disk(part)
        _clear_companions(target)
        _move(part, target)
    finally:
        _remove(part)


@contextmanager
def replacing(path: str | Path) -> Iterator[Path]:
    """Name to write to beside `path`, moved onto it if nothing went wrong; see `unfinished` and `placing`."""
    with unfinished(path) as folder, placing(folder, path) as part:
        yield part


def _remove(part: Path) -> None:
    for suffix in ("", *_COMPANIONS):
        part.with_name(part.name + suffix).unlink(missing_ok=True)


def _to_disk(part: Path) -> None:
    """Wait until the system has written a file, so that a power cut after the move finds it whole."""
    with part.open("rb") as stream:
        os.fsync(stream.fileno())


def _real(path: Path) -> Path:
    """Follow links, so that a link stays one when its target is replaced."""
    try:
        return path.resolve()
    except (OSError, RuntimeError) as error:  # Python 3.11 and 3.12 raise RuntimeError for links in a circle
        raise LayerError(f"output {path} is a link that leads nowhere; remove it or give another name") from error


def _clear_companions(target: Path) -> None:
    """Remove what a crash left beside the old file: a journal would be played back into the new one."""
    companions = [path for suffix in _COMPANIONS if (path := target.with_name(target.name + suffix)).exists()]
    if target.exists():
        _refuse_if_held(target)
        for path in companions:
            path.unlink(missing_ok=True)
    elif companions:
        names = ", ".join(path.name for path in companions)
        raise LayerError(
            f"output {target}: {names} beside it would be taken as part of it; move them or use another name"
        )


def _move(part: Path, target: Path) -> None:
    try:
        part.replace(target)
    except OSError as error:
        raise LayerError(
            f"output {target} cannot be put in place ({error.strerror}); close it in other programs or use another name"
        ) from error


def _refuse_if_held(target: Path) -> None:
    """Take the old file for ourselves for a moment, leaving write-ahead mode; fail if somebody else has it."""
    try:
        with closing(
            sqlite3.connect(f"{target.as_uri()}?mode=rw", uri=True, timeout=_PATIENCE_S, isolation_level=None)
        ) as database:
            database.execute("PRAGMA journal_mode=DELETE")
            database.execute("BEGIN EXCLUSIVE")
            database.execute("ROLLBACK")
    except sqlite3.OperationalError as error:
        raise LayerError(
            f"output {target} is in use by another program ({error}); close it there and run again, or use another name"
        ) from error
    except sqlite3.DatabaseError:
        return  # no SQLite file, so nobody holds one
