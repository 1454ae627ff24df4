"""Where the work of a run is done: in this process, in processes on this machine, or on a cluster."""

import itertools
import multiprocessing
import os
import signal
import threading
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import BrokenExecutor, Executor, Future, ProcessPoolExecutor
from contextlib import contextmanager
from typing import Any, Final, Protocol, TypeVar

from shelfmap.errors import SettingsError, ShelfmapError

__all__ = ["Mapped", "mapping"]

_Job = TypeVar("_Job")
_Result = TypeVar("_Result")

#: Jobs that go to a worker together, so that it has work while this process is busy writing.
TOGETHER: Final = 4
#: Such parcels handed out ahead of the one waited for, by worker: enough to keep all busy, few enough that results
#: waiting for their turn do not fill the memory.
AHEAD: Final = 4
#: How often a cluster tries a job again whose worker was lost.
RETRIES: Final = 3
#: How long a cluster may take to answer at first, seconds.
_PATIENCE_S: Final = 10


class Mapped(Protocol):
    """Like the builtin `map` of one iterable: results in the order of the jobs, which are taken a few ahead."""

    def __call__(self, function: Callable[[_Job], _Result], jobs: Iterable[_Job], /) -> Iterator[_Result]:
        """Results of a function, job by job."""


@contextmanager
def mapping(
    workers: int = 1,
    executor: Executor | None = None,
    scheduler: str | None = None,
    *,
    together: int = TOGETHER,
) -> Iterator[Mapped]:
    """Give the `map` of a run.

    Parameters
    ----------
    workers : int
        Processes to start on this machine; 1 works in this one.
    executor : Executor, optional
        Does the work instead; it stays open.
    scheduler : str, optional
        Address of a dask.distributed scheduler whose workers do it; they need the same package, and the grid under the
        same path.

    Raises
    ------
    SettingsError
        If there are fewer workers than one, or no scheduler answers, or its library is not installed.
    ShelfmapError
        If a worker process dies.
    """
    if workers < 1:
        raise SettingsError(f"workers = {workers}: at least 1")
    try:
        if executor is not None:
            yield _ordered(executor, AHEAD * (os.cpu_count() or 1), together)
        elif scheduler is not None:
            with _cluster(scheduler, together) as mapped:
                yield mapped
        elif workers == 1:
            yield map
        else:
            # workers leave Ctrl-C to this process, which then ends them
            context = multiprocessing.get_context("spawn")
            with ProcessPoolExecutor(workers, mp_context=context, initializer=_obey_parent) as pool:
                yield _ordered(pool, AHEAD * workers, together)
    except BrokenExecutor as error:
        raise ShelfmapError(
            f"a worker process died ({error}), most often for want of memory; run again with fewer workers or a larger "
            'transects.step_km, and in a script call screen under if __name__ == "__main__"'
        ) from error


def _ordered(executor: Executor, ahead: int, together: int) -> Mapped:
    """Map over an executor in order, with at most `ahead` parcels of jobs handed out and not yet collected."""

    def mapped(function: Callable[[_Job], _Result], jobs: Iterable[_Job], /) -> Iterator[_Result]:
        remaining = iter(jobs)
        parcels = iter(lambda: list(itertools.islice(remaining, together)), [])
        waiting: deque[Future[list[_Result]]] = deque(
            executor.submit(_each, function, parcel) for parcel in itertools.islice(parcels, ahead)
        )
        try:
            while waiting:
                results = waiting.popleft().result()
                waiting.extend(executor.submit(_each, function, parcel) for parcel in itertools.islice(parcels, 1))
                yield from results
        finally:
            for future in waiting:
                future.cancel()

    return mapped


def _each(function: Callable[[_Job], _Result], jobs: list[_Job]) -> list[_Result]:
    return [function(job) for job in jobs]


@contextmanager
def _cluster(address: str, together: int) -> Iterator[Mapped]:
    """Map over the workers of a dask.distributed scheduler; jobs of workers that are lost are done again by others."""
    try:
        from distributed import Client  # noqa: PLC0415 - an extra, and slow to import
    except ImportError as error:
        raise SettingsError(
            f'scheduler {address}: the library for clusters is not installed; pip install "shelfmap[cluster]"'
        ) from error
    try:
        client: Any = Client(address, timeout=_PATIENCE_S, set_as_default=False)  # type: ignore[no-untyped-call]
    except (OSError, ValueError, TypeError) as error:
        raise SettingsError(
            f"scheduler {address} does not answer ({type(error).__name__}); start it, or correct the address, such as "
            "tcp://10.0.0.1:8786"
        ) from error
    with client:
        n_workers = len(client.scheduler_info()["workers"])
        if not n_workers:
            raise SettingsError(f"scheduler {address} has no workers; start some and run again")
        # pure=False: dask would else take equal jobs of two runs for one
        yield _ordered(client.get_executor(pure=False, retries=RETRIES), AHEAD * n_workers, together)


def _obey_parent() -> None:
    """In a worker: leave Ctrl-C to the parent, and end when it has ended, however that came about."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    parent = multiprocessing.parent_process()

    def follow() -> None:
        if parent is not None:
            parent.join()
            os._exit(1)

    threading.Thread(target=follow, daemon=True).start()
