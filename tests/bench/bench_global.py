"""The whole globe: time by stage and peak memory against the floor, reading the grid and writing the layers once.

Run with ``python -m pytest tests/bench/bench_global.py -o "addopts=" -s``. The depths are ETOPO5 (Debian package
ferret-datasets, public domain, NOAA 1988) drawn finer by bilinear interpolation: coasts and depths of the real world,
and as many cells as today's global grids. ``SHELFMAP_WORLD=240`` takes 15 arc-seconds, 3.7e9 cells, instead of 1
arc-minute.
"""

import os
import re
import resource
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pyogrio
import pytest
import rasterio
from rasterio.transform import Affine
from rasterio.windows import Window

ETOPO5 = Path("/usr/share/ferret-vis/data/etopo5.cdf")
CELLS_PER_DEGREE = int(os.environ.get("SHELFMAP_WORLD", "60"))
STRIP = 512

pytestmark = pytest.mark.skipif(not ETOPO5.exists(), reason="needs ETOPO5 from the Debian package ferret-datasets")


def write_world(path: Path, cells_per_degree: int) -> None:
    """ETOPO5 as int16 metres on a finer lattice, tiled and deflated."""
    with rasterio.open(ETOPO5) as source:
        node = source.read(1)[::-1].astype(np.float32)  # 90 S to 90 N, 0 E to 359 55' E, every 5'
    node = np.hstack([node, node[:, :1]])
    n_rows, n_cols = 180 * cells_per_degree, 360 * cells_per_degree
    col = (np.arange(n_cols) + 0.5) / cells_per_degree * 12
    j, right = col.astype(int), (col % 1).astype(np.float32)
    profile = {
        "driver": "GTiff", "height": n_rows, "width": n_cols, "count": 1, "dtype": "int16", "crs": "EPSG:4326",
        "transform": Affine(1 / cells_per_degree, 0, 0, 0, -1 / cells_per_degree, 90), "tiled": True,
        "blockxsize": STRIP, "blockysize": STRIP, "compress": "deflate", "zlevel": 1, "predictor": 2,
        "num_threads": 2, "BIGTIFF": "IF_SAFER",
    }  # fmt: skip
    with rasterio.open(path, "w", **profile) as out:
        out.descriptions = ["elevation"]
        for top in range(0, n_rows, STRIP):
            rows = np.arange(top, min(top + STRIP, n_rows))
            row = (180 - (rows + 0.5) / cells_per_degree) * 12
            i, up = row.astype(int), (row % 1).astype(np.float32)[:, None]
            strip = (1 - up) * node[i] + up * node[i + 1]
            value = strip[:, j] * (1 - right) + strip[:, j + 1] * right
            out.write(np.rint(value).astype(np.int16), 1, window=Window(0, top, n_cols, len(rows)))


def read_once(path: Path) -> float:
    """Seconds that reading every block once takes."""
    start = time.perf_counter()
    with rasterio.open(path) as source:
        for top in range(0, source.height, STRIP):
            source.read(1, window=Window(0, top, source.width, min(STRIP, source.height - top)))
    return time.perf_counter() - start


def write_once(path: Path, copy: Path) -> float:
    """Seconds that writing the layers of a GeoPackage takes by the plain writer, from memory."""
    took = 0.0
    for name, kind in pyogrio.list_layers(path):
        meta, table = pyogrio.read_arrow(path, layer=name)
        drawn = {} if kind is None else {"geometry_name": meta["geometry_name"], "geometry_type": kind}
        start = time.perf_counter()
        pyogrio.write_arrow(table, copy, layer=name, driver="GPKG", crs=meta["crs"], **drawn)
        took += time.perf_counter() - start
    return took


def screened(folder: Path, workers: int, **tables: str) -> dict[str, float]:
    """Seconds by stage of a run, as it logs them, and as a whole; its transects; the peak of any of its processes."""
    text = '[grid]\npath = "world.tif"\n[output]\npath = "world.gpkg"\n'
    text += "".join(f"[{name}]\n{line}\n" for name, line in tables.items())
    (folder / "run.toml").write_text(text, encoding="utf-8")
    command = [sys.executable, "-m", "shelfmap", "screen", "run.toml", "--overwrite", "-v", "--workers", str(workers)]
    start = time.perf_counter()
    done = subprocess.run(command, cwd=folder, stderr=subprocess.PIPE, stdout=subprocess.DEVNULL, text=True, check=True)
    found = {
        stage: float(seconds) for stage, seconds in re.findall(r"^INFO: ([a-z ]+): ([\d.]+) s$", done.stderr, re.M)
    }
    found["whole"] = time.perf_counter() - start
    found["stations"] = float(re.findall(r"^(\d+) transects: ", done.stderr, re.M)[0])
    found["peak_mib"] = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024
    return found


def show(capsys: pytest.CaptureFixture[str], title: str, found: dict[str, float]) -> None:
    with capsys.disabled():
        print(f"\n{time.strftime('%F')} {title}")  # noqa: T201
        for name, value in found.items():
            print(f"  {name:14s} {value:10.1f}")  # noqa: T201


def test_globe(tmp_path_factory, capsys):
    """One run by one process, one by two, and what part of each is the floor."""
    folder = tmp_path_factory.mktemp("world")
    write_world(folder / "world.tif", CELLS_PER_DEGREE)
    runs = {workers: screened(folder, workers) for workers in (1, 2)}
    floor = {
        "read once": read_once(folder / "world.tif"),
        "write once": write_once(folder / "world.gpkg", folder / "copy.gpkg"),
    }
    few = screened(folder, 1, coast="box = [-20.0, 30.0, 40.0, 66.0]")
    for workers, found in runs.items():
        show(capsys, f"{workers} worker(s), {CELLS_PER_DEGREE} cells a degree", found)
    show(capsys, "floor", floor)
    show(capsys, "a box of the same grid", few)
    show(capsys, "ratios", {
        "1 worker / floor": runs[1]["whole"] / sum(floor.values()),
        "2 workers / floor": runs[2]["whole"] / sum(floor.values()),
        "1 / 2 workers": runs[1]["whole"] / runs[2]["whole"],
        "ms a transect": 1e3 * runs[1]["sections"] / runs[1]["stations"],
        "ms, few": 1e3 * few["sections"] / few["stations"],
    })  # fmt: skip
    assert runs[1]["stations"] == runs[2]["stations"]
