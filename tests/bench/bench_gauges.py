"""How much of the tide at gauges a fit to other gauges explains, on the coasts of six windows.

Ten times a half of the gauges in reach, drawn at random, settles the edge tide and the friction, and the other half is
predicted; no setting differs between the windows. Run with
``python -m pytest tests/bench/bench_gauges.py -o "addopts=" -s``; the file of gauges decides the constituents.
"""

import csv
import time
from pathlib import Path

import numpy as np
import pytest

from shelfmap.edgetide import explained_share
from shelfmap.field import nearest_cells, solve_field
from shelfmap.gauges import Gauges
from shelfmap.grid import open_grid
from shelfmap.mesh import make_mesh
from shelfmap.settings import Settings
from shelfmap.waters import open_waters

DATA = Path(__file__).parents[1] / "data"
REACH_KM = 15.0
SEEDS = range(10)
#: Median share of M2 wanted in each window.
WANTED = {
    "iberia_biscay": 0.75, "us_west": 0.75, "nw_europe": 0.75, "bering_antimeridian": 0.75, "gulf_of_maine": 0.65,
    "us_southeast": 0.65,
}  # fmt: skip


def read_gauges(path: Path = DATA / "gauges.csv") -> Gauges:
    """All gauges of the file, with every constituent of which it has amplitude and phase."""
    with path.open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    names = tuple(
        column.removesuffix("_amp_m")
        for column in rows[0]
        if column.endswith("_amp_m") and column.replace("_amp_m", "_phase_deg") in rows[0]
    )

    def table(suffix: str) -> np.ndarray:
        return np.array([[float(row[name + suffix] or "nan") for name in names] for row in rows])

    return Gauges(
        name=np.array([row["id"] for row in rows], dtype=object),
        lon_deg=np.array([float(row["lon"]) for row in rows]),
        lat_deg=np.array([float(row["lat"]) for row in rows]),
        constituents=names,
        amplitude_m=table("_amp_m"),
        phase_deg=table("_phase_deg"),
    )


def settings_of(window: str, constituents: tuple[str, ...]) -> Settings:
    return Settings.from_dict({
        "grid": {"path": str(DATA / f"etopo1_{window}.tif")},
        "response": {"constituents": list(constituents)},
        "field": {"modes": 0},
        "gauges": {"path": str(DATA / "gauges.csv"), "reach_km": REACH_KM},
    })  # fmt: skip


class Coast:
    """A window, its gauges in reach of its water, and each one's cell."""

    def __init__(self, window: str, gauges: Gauges) -> None:
        self.settings = settings_of(window, gauges.constituents)
        self.waters = open_waters(open_grid(self.settings.grid), self.settings.field)
        mesh = make_mesh(self.waters)
        cell, away_m = nearest_cells(mesh, gauges.lon_deg, gauges.lat_deg)
        in_reach = away_m <= REACH_KM * 1e3
        self.gauges, self.cell = gauges.rows(in_reach), cell[in_reach]

    def solved(self, chosen: np.ndarray):
        """Field fitted to some gauges, which are all it knows of the tide."""
        return solve_field(self.waters, self.settings, self.gauges.rows(chosen))

    def unseen_shares(self, seed: int) -> np.ndarray:
        """Explained share of each constituent at the half that a fit to the other half has not seen."""
        mixed = np.random.default_rng(seed).permutation(len(self.gauges))
        seen, unseen = np.split(mixed, [len(mixed) // 2])
        field = self.solved(seen)
        return np.array([
            explained_share(self.gauges.constants(done.wave.name)[unseen], done.tide[self.cell[unseen]])
            for done in field.waves
        ])  # fmt: skip

    def left_out_shares(self) -> np.ndarray:
        """Explained share of each constituent, each gauge predicted by all others; friction is settled by all."""
        field = self.solved(np.arange(len(self.gauges)))
        return np.array([
            explained_share(self.gauges.constants(done.wave.name), done.fit.left_out) for done in field.waves
        ])  # fmt: skip


@pytest.mark.parametrize("window", WANTED)
def test_unseen_gauges(window, capsys):
    gauges = read_gauges()
    if not gauges.constituents:
        pytest.skip("needs amplitudes and phases in tests/data/gauges.csv")
    start = time.perf_counter()
    coast = Coast(window, gauges)
    shares = np.array([coast.unseen_shares(seed) for seed in SEEDS])
    left_out = coast.left_out_shares()
    took_s = time.perf_counter() - start
    with capsys.disabled():
        print(f"\n{time.strftime('%F')} {window}: {len(coast.gauges)} gauges, {took_s:.0f} s")  # noqa: T201
        for name, column, alone in zip(gauges.constituents, shares.T, left_out, strict=True):
            print(  # noqa: T201
                f"  {name}  median {np.median(column):.3f}  least {column.min():.3f}  largest {column.max():.3f}  "
                f"each by all others {alone:.3f}"
            )
    assert np.median(shares[:, gauges.constituents.index("M2")]) >= WANTED[window]
