"""Work shared out over this process, threads, processes and a cluster: results in order, few at a time, none lost."""

import builtins
import os
import signal
import time
import warnings
from concurrent.futures import BrokenExecutor, Executor, Future, ThreadPoolExecutor

import pytest
from utils_pipeline import assert_same_results, settings_for, small_coast

from shelfmap.errors import SettingsError, ShelfmapError
from shelfmap.pipeline import screen
from shelfmap.workers import AHEAD, TOGETHER, mapping


def double(x):
    return 2 * x


def slow_first(x):
    time.sleep(0.2 if x == 0 else 0.0)
    return x


class Counting(Executor):
    """Does the work at once, and counts the parcels handed out."""

    def __init__(self):
        self.handed_out = 0

    def submit(self, function, /, *args):
        self.handed_out += 1
        done = Future()
        done.set_result(function(*args))
        return done


@pytest.mark.parametrize("workers", [1, 2])
def test_results_come_in_the_order_of_the_jobs(workers):
    with mapping(workers) as mapped:
        assert list(mapped(slow_first, range(40))) == list(range(40))
        assert list(mapped(double, [])) == []
        assert list(mapped(double, iter([3]))) == [6]


def test_threads_of_the_caller_stay_open():
    with ThreadPoolExecutor(3) as threads:
        with mapping(executor=threads) as mapped:
            assert list(mapped(slow_first, range(40))) == list(range(40))
        assert threads.submit(double, 3).result() == 6


def test_only_a_few_jobs_are_handed_out_ahead():
    """So that a long coast fills no memory: jobs are taken from their source as results are taken away."""
    ahead = AHEAD * os.cpu_count()
    taken = []
    jobs = (taken.append(k) or k for k in range(1000))
    executor = Counting()
    with mapping(executor=executor) as mapped:
        results = mapped(double, jobs)
        assert [next(results) for _ in range(10)] == [2 * k for k in range(10)]
        n_parcels = ahead + -(-10 // TOGETHER)
        assert executor.handed_out == n_parcels
        assert len(taken) == n_parcels * TOGETHER
        results.close()
    assert executor.handed_out == n_parcels


def test_a_broken_executor_is_one_sentence():
    def use():
        with mapping(2):
            raise BrokenExecutor("gone")

    with pytest.raises(ShelfmapError, match=r"^a worker process died \(gone\).*; run again with fewer workers"):
        use()


def test_fewer_than_one_worker_is_refused():
    with pytest.raises(SettingsError, match="workers = 0: at least 1"), mapping(0):
        pass


# ---- clusters


@pytest.fixture(scope="module")
def cluster():
    """Two processes of dask's on this machine, started anew if one dies."""
    distributed = pytest.importorskip("distributed")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        with distributed.LocalCluster(
            n_workers=2, threads_per_worker=1, host="127.0.0.1", dashboard_address=None
        ) as workers:
            yield workers


@pytest.fixture
def settings(tmp_path, write_grid):
    return settings_for(write_grid(small_coast()), tmp_path, transects={"spacing_km": 0.9, "length_km": 150.0})


def at(settings, path):
    return settings.model_copy(update={"output": settings.output.model_copy(update={"path": path})})


def test_cluster_gives_the_same_tables(cluster, settings, tmp_path):
    alone = screen(settings)
    shared = screen(at(settings, tmp_path / "shared.gpkg"), scheduler=cluster.scheduler_address)
    assert_same_results(alone.path, shared.path)


def test_cluster_that_loses_a_worker_gives_the_same_tables(cluster, settings, tmp_path):
    """The first section that is done has a worker killed; its jobs go to the other, or to one started in its place."""
    alone = screen(settings)
    killed = []

    def kill(_stage, _done, total):
        if not killed and total >= 5:
            worker = next(iter(cluster.workers.values()))
            killed.append(worker.pid)
            os.kill(worker.pid, signal.SIGKILL)

    shared = screen(at(settings, tmp_path / "shared.gpkg"), scheduler=cluster.scheduler_address, progress=kill)
    assert len(killed) == 1
    assert_same_results(alone.path, shared.path)


def test_scheduler_that_does_not_answer_is_one_sentence(monkeypatch):
    pytest.importorskip("distributed")
    monkeypatch.setattr("shelfmap.workers._PATIENCE_S", 1)
    with (
        pytest.raises(SettingsError, match=r"scheduler tcp://127\.0\.0\.1:9 does not answer .*; start it"),
        mapping(scheduler="tcp://127.0.0.1:9"),
    ):
        pass


def test_missing_library_is_one_sentence(monkeypatch):
    real = builtins.__import__

    def without(name, *args):
        if name == "distributed":
            raise ImportError(name)
        return real(name, *args)

    monkeypatch.setattr(builtins, "__import__", without)
    with pytest.raises(SettingsError, match=r'pip install "shelfmap\[cluster\]"'), mapping(scheduler="tcp://x:1"):
        pass
