"""Real gauges: the edge tide fitted to a random half of them, the other half predicted; ten splits a window.

Default settings, the same for all windows. Friction follows from the currents of the tide fitted to the same half:
nothing of the other half comes in. Run with ``pytest tests/bench/bench_gauges.py -o "addopts=" -s``; 60 solutions take
some ten minutes on 2 cores. Depths ETOPO1 at 0.1 degree, gauges of TICON-4, NOAA and Kartverket: tests/data/CREDITS.md.
"""

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # before NumPy is loaded

from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np
import pytest

from shelfmap.edgetide import explained_share
from shelfmap.field import nearest_cells, solve_field
from shelfmap.gaugefile import read_gauges
from shelfmap.grid import open_grid
from shelfmap.mesh import make_mesh
from shelfmap.settings import Settings
from shelfmap.waters import open_waters

DATA = Path(__file__).parents[1] / "data"
SPLITS = 10
#: Least median share of M2 explained at gauges left out.
WANTED = {
    "iberia_biscay": 0.75,
    "us_west": 0.75,
    "nw_europe": 0.75,
    "bering_antimeridian": 0.75,
    "gulf_of_maine": 0.65,
    "us_southeast": 0.65,
}


def window_settings(window):
    content = {
        "grid": {"path": str(DATA / f"etopo1_{window}.tif")},
        "gauges": {"file": str(DATA / "gauges.csv")},
        "field": {"modes": 0},
    }
    return Settings.from_dict(content)


def gauges_within(window):
    """Gauges of a window in reach of its water."""
    settings = window_settings(window)
    source = open_grid(settings.grid)
    gauges = read_gauges(settings.gauges, settings.response.constituents)
    col, row = source.index_of(gauges.lon_deg, gauges.lat_deg)
    is_inside = (col > -0.5) & (col < source.n_cols - 0.5) & (row > -0.5) & (row < source.n_rows - 0.5)
    gauges = gauges.rows(is_inside)
    waters = open_waters(source, settings.field)
    return settings, waters, gauges


def explained(job):
    """Share of M2 explained at one half of the gauges, the tide fitted to the other half."""
    window, seed = job
    settings, waters, gauges = gauges_within(window)
    cell, away_m = nearest_cells(make_mesh(waters), gauges.lon_deg, gauges.lat_deg)
    in_reach = away_m <= settings.gauges.reach_km * 1e3
    gauges, cell = gauges.rows(in_reach), cell[in_reach]
    order = np.random.default_rng(seed).permutation(len(gauges))
    known, unseen = order[: len(gauges) // 2], order[len(gauges) // 2 :]
    field = solve_field(waters, settings, gauges.rows(known))
    return explained_share(gauges.constants("M2")[unseen], field.waves[0].tide[cell[unseen]]), len(gauges)


@pytest.fixture(scope="module")
def shares():
    """Share explained by window and split, and how many gauges there are."""
    jobs = [(window, seed) for window in WANTED for seed in range(SPLITS)]
    with ProcessPoolExecutor(2) as pool:
        done = dict(zip(jobs, pool.map(explained, jobs), strict=True))
    return {window: ([done[window, seed][0] for seed in range(SPLITS)], done[window, 0][1]) for window in WANTED}


def test_print_the_table(shares):
    print("\nwindow                gauges  M2 explained at the half left out: median (least, largest of 10)")  # noqa: T201
    for window, (values, count) in shares.items():
        print(f"{window:20s} {count:7d}  {np.median(values):.2f} ({min(values):.2f}, {max(values):.2f})")  # noqa: T201


@pytest.mark.parametrize("window", WANTED)
def test_half_of_the_gauges_explains_the_other(shares, window):
    assert np.median(shares[window][0]) >= WANTED[window]
