"""Finished work of a run, kept beside its output until that is whole, so that a run that was stopped can go on.

Everything is filed under the hash of all it was made from: work of other settings, another grid or another version is
never taken for this run's.
"""

import hashlib
import logging
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager, suppress
from functools import lru_cache
from pathlib import Path
from typing import Any, Final

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap import __version__
from shelfmap.errors import LayerError
from shelfmap.replacement import unfinished

__all__ = ["Checkpoint", "digest", "files_digest"]

_SUFFIX: Final = ".done"
_SUM_BYTES: Final = 32

_LOG = logging.getLogger(__name__)


class Checkpoint:
    """Finished pieces of work in a folder, as bytes by key.

    Parameters
    ----------
    folder : Path
        Where they are kept.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._ours: set[str] = set()
        self._is_claimed = False

    @classmethod
    @contextmanager
    def beside(cls, path: Path, *, anew: bool = False) -> Iterator["Checkpoint"]:
        """Checkpoint of a run that writes `path`; emptied when the run is whole, else kept and said so.

        Raises
        ------
        LayerError
            If another run is writing the same file.
        """
        with unfinished(path) as folder:
            checkpoint = cls(folder)
            if anew:
                checkpoint.clear()
            try:
                yield checkpoint
            except BaseException:
                checkpoint._keep()
                raise
            checkpoint.clear()

    def claim(self, keys: Sequence[str]) -> list[bool]:
        """Say which pieces of work this run is made of; give which of them are there, though one may be damaged."""
        self._ours.update(keys)
        self._is_claimed = True
        return [self._file(key).exists() for key in keys]

    def load(self, key: str) -> bytes | None:
        """Piece of work of a key; None where it is not there or not whole."""
        self._ours.add(key)
        try:
            content = self._file(key).read_bytes()
        except OSError:
            return None
        checksum, data = content[:_SUM_BYTES], content[_SUM_BYTES:]
        return data if hashlib.sha256(data).digest() == checksum else None

    def save(self, key: str, data: bytes) -> None:
        """Keep a piece of work: whole or not at all, whatever happens meanwhile.

        Raises
        ------
        LayerError
            If there is no room for it.
        """
        part = self._file(key).with_suffix(".part")
        try:
            part.unlink(missing_ok=True)  # of a killed run, or a link that somebody put there
            part.write_bytes(hashlib.sha256(data).digest() + data)
            part.replace(self._file(key))
        except OSError as error:
            raise LayerError(
                f"{self.folder}: finished work cannot be kept ({error.strerror}); make room on the disk or write to "
                "another folder"
            ) from error
        self._ours.add(key)

    def clear(self) -> None:
        """Remove all that is kept."""
        for file in self._files():
            file.unlink(missing_ok=True)

    def _file(self, key: str) -> Path:
        return self.folder / f"{key}{_SUFFIX}"

    def _files(self) -> list[Path]:
        return [*self.folder.glob(f"*{_SUFFIX}"), *self.folder.glob("*.part")]

    def _keep(self) -> None:
        """Leave finished work and say so; once this run has said what its own is, remove the rest."""
        with suppress(OSError):
            files = self._files()
            strangers = [file for file in files if file.suffix != _SUFFIX or file.stem not in self._ours]
            for file in strangers if self._is_claimed else []:
                file.unlink(missing_ok=True)
            if n_kept := len(files) - len(strangers if self._is_claimed else []):
                _LOG.warning(
                    "finished work (%d pieces) is kept in %s: the same run goes on from it; delete it if unwanted",
                    n_kept,
                    self.folder,
                )


def digest(*parts: Any) -> str:
    """Hash of texts, bytes, numbers and arrays, geometries among them; different for different content.

    Examples
    --------
    >>> digest("a", np.arange(3)) == digest("a", np.arange(3))
    True
    >>> digest("a", "b") == digest("ab")
    False
    """
    sha = hashlib.sha256()
    for part in parts:
        content = _content(part)
        sha.update(f"{type(part).__name__} {len(content)} ".encode())
        sha.update(content)
    return sha.hexdigest()


def _content(part: Any) -> bytes:
    if isinstance(part, bytes):
        return part
    if isinstance(part, np.ndarray):
        values: NDArray[Any] = part
        if values.dtype == object:  # geometries, None among them
            return digest(*(b"" if wkb is None else wkb for wkb in shapely.to_wkb(values))).encode()
        return f"{values.dtype.str} {values.shape} ".encode() + np.ascontiguousarray(values).tobytes()
    return str(part).encode("utf-8", "surrogatepass")


@lru_cache(maxsize=1)
def _code_digest() -> str:
    """Hash of this package's own code, for work done by other code is other work."""
    package = Path(__file__).parent
    return digest(__version__, *(file.read_bytes() for file in sorted(package.rglob("*.py"))))


def files_digest(files: Iterable[Path]) -> str:
    """Hash of the code of this package and of the content of files, in their order."""
    parts: list[str] = [_code_digest()]
    for file in files:
        with file.open("rb") as stream:
            parts.append(hashlib.file_digest(stream, "sha256").hexdigest())
    return digest(*parts)
