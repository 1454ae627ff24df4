"""Depths at points of a real window: the compiled sampler against one library call per point, in the same run."""

from pathlib import Path

import numpy as np
import pytest
import rasterio

from shelfmap.grid import Grid, open_grid
from shelfmap.settings import GridSettings

PATH = Path(__file__).parent.parent / "data" / "etopo1_us_southeast.tif"
N_POINTS = 200_000


@pytest.fixture(scope="module")
def points() -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(7)
    return rng.uniform(-83, -65, N_POINTS), rng.uniform(24, 39, N_POINTS)


@pytest.fixture(scope="module")
def window() -> Grid:
    source = open_grid(GridSettings(path=PATH))
    grid = source.read(0, source.n_rows, 0, source.n_cols)
    grid.sample(0.0, 0.0)  # compiled before the clock starts
    return grid


@pytest.mark.benchmark(group="sample 200k points")
def test_kernel_in_memory(benchmark, points, window):
    col, row = open_grid(GridSettings(path=PATH)).index_of(*points)
    benchmark.pedantic(window.sample, args=(col, row), rounds=20, warmup_rounds=1)


@pytest.mark.benchmark(group="sample 200k points")
def test_from_disk_in_tiles(benchmark, points, window):
    source = open_grid(GridSettings(path=PATH))
    benchmark.pedantic(source.sample, args=points, rounds=5, warmup_rounds=1)


@pytest.mark.benchmark(group="sample 200k points")
def test_one_library_call_per_point(benchmark, points):
    """Plain twin: nearest cell, so it even does less."""

    def sample() -> int:
        with rasterio.open(PATH) as dataset:
            return sum(1 for _ in dataset.sample(zip(*points, strict=True)))

    assert benchmark.pedantic(sample, rounds=1) == N_POINTS
