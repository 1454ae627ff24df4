"""Time of a run by stage, and of one process against two, on a grid as fine as a 15 arc-second one.

Run with ``pytest tests/bench/bench_pipeline.py -o "addopts=" -s``; the last tests print the table and the ratio.
"""

import time

import numpy as np
import pytest

from shelfmap import pipeline
from shelfmap.geopackage import GeoPackage
from shelfmap.grid import open_grid
from shelfmap.inputs import make_coast, make_transects
from shelfmap.laying import Laid
from shelfmap.pipeline import screen
from shelfmap.profiles import step_of
from shelfmap.rasters import write_geotiff
from shelfmap.sections import pack_section, sample_section
from shelfmap.settings import Settings
from shelfmap.synthetic import shelf_profile, straight_coast
from shelfmap.vectors import read_table

CELL_DEG = 15 / 3600


@pytest.fixture(scope="module")
def settings(tmp_path_factory):
    """Straight coast of 600 km at 40 N, 1301 x 1601 cells, a station every 500 m, transects of 250 km."""
    folder = tmp_path_factory.mktemp("bench")
    grid = straight_coast(
        262.0, 40.0, shelf_profile(100e3, 150.0, 0.05, 4000.0), cell=CELL_DEG, shape=(1301, 1601), lon_deg=-9.0
    )
    write_geotiff(
        folder / "grid.tif", np.round(grid.elevation_m).astype(np.int16), x0=grid.x0, y0=grid.y0, dx=grid.dx,
        dy=grid.dy, crs=grid.crs, description="elevation",
    )  # fmt: skip
    content = {
        "grid": {"path": "grid.tif", "positive": "up"},
        "coast": {"generalise_km": 5.0},
        "transects": {"spacing_km": 0.5, "length_km": 250.0},
    }
    settings = Settings.from_dict(content, folder=folder)
    few = settings.model_copy(update={"transects": settings.transects.model_copy(update={"spacing_km": 100.0})})
    screen(few)  # compiled before the clock starts
    return settings


def test_stages(settings, capsys, tmp_path):
    """What each stage takes, in order, alone in one process."""
    took: dict[str, float] = {}

    def timed(stage, function, *args, **kwargs):
        start = time.perf_counter()
        result = function(*args, **kwargs)
        took[stage] = time.perf_counter() - start
        return result

    source = timed("grid", open_grid, settings.grid)
    coast = timed("coast", make_coast, source, settings)
    transects = timed("transects", make_transects, source, coast, settings)
    laid = Laid(
        source=source,
        stamps=(),
        content="",
        coast=coast,
        transects=transects,
        step_m=step_of(source, settings.transects),
    )
    sections = list(pipeline._sections(laid, settings))
    timed("profiles", lambda: [sample_section(section) for section in sections])
    packed = timed("profiles to rows", lambda: [pack_section(section) for section in sections])

    def write():
        file = GeoPackage(tmp_path / "out.gpkg", settings.output.crs, tmp_path / "out.gpkg")
        columns = pipeline._collect(iter(packed), len(packed), file, None)
        pipeline._finish(file, columns, laid, settings)

    timed("writing", write)
    whole = sum(took.values()) - took["profiles"]
    with capsys.disabled():
        print(f"\n{time.strftime('%F')} {len(transects)} transects, {source.n_rows * source.n_cols:.2g} cells")  # noqa: T201
        for stage, seconds in took.items():
            print(f"  {stage:18s} {seconds:6.2f} s {seconds / whole:5.0%}")  # noqa: T201
    assert len(transects) > 500


def test_two_processes_against_one(settings, capsys):
    """Processes cost their start (imports, some 1.5 s each) and win only on long coasts."""
    took, gains = [], []
    for workers in (1, 2):
        start = time.perf_counter()
        run = screen(settings, overwrite=True, workers=workers)
        took.append(time.perf_counter() - start)
        gains.append(read_table(run.path, "transects")["damped_gain_m2"])
    np.testing.assert_array_equal(*gains)
    with capsys.disabled():
        print(f"\n{time.strftime('%F')} 1 worker {took[0]:.1f} s, 2 workers {took[1]:.1f} s: {took[0] / took[1]:.2f}x")  # noqa: T201
