"""What a run of the 2-D response leaves behind: all of it or nothing; its longitudes; gauges without a tide."""

import multiprocessing
import os
from concurrent.futures import ProcessPoolExecutor

import numpy as np
import pandas as pd
import pytest
import rasterio
from click.testing import CliRunner
from utils_grid import write_tif
from utils_pipeline import settings_for, small_coast

from shelfmap import fieldrun
from shelfmap.cli import main
from shelfmap.errors import GridError, LayerError, OutputExistsError, ShelfmapError
from shelfmap.fieldrun import run_field
from shelfmap.geopackage import GeoPackage
from shelfmap.vectors import read_table

QUICK = {"cell_km": 15, "modes": 0}
ONE_WAVE = {"constituents": ["M2"]}


@pytest.fixture
def grid(write_grid):
    return write_grid(small_coast())


def quick(grid, folder, /, field=None, **tables):
    return settings_for(grid, folder, **{"response": ONE_WAVE, "field": QUICK | (field or {})} | tables)


def state(folder):
    """Every file below a folder with its bytes."""
    return {path.relative_to(folder): path.read_bytes() for path in folder.rglob("*") if path.is_file()}


def fail(*_, **__):
    raise LayerError("no room")


# ---- all or nothing


@pytest.mark.parametrize("stage", ["write_maps", "_write_layers", "check_unchanged"])
def test_a_run_that_fails_leaves_the_earlier_one_as_it_was(grid, tmp_path, monkeypatch, stage):
    """Maps of one run beside the layers of another would contradict each other."""
    run_field(quick(grid, tmp_path))
    before = state(tmp_path)
    monkeypatch.setattr(fieldrun, stage, fail)
    with pytest.raises(LayerError, match="no room"):
        run_field(quick(grid, tmp_path, field={"cell_km": 20}), overwrite=True)
    assert state(tmp_path) == before


@pytest.mark.parametrize("stage", ["write_maps", "_write_layers", "check_unchanged"])
def test_a_first_run_that_fails_leaves_not_even_the_folder(grid, tmp_path, monkeypatch, stage):
    before = state(tmp_path)
    monkeypatch.setattr(fieldrun, stage, fail)
    with pytest.raises(LayerError, match="no room"):
        run_field(quick(grid, tmp_path))
    assert state(tmp_path) == before
    assert not (tmp_path / "out_field").exists()


def test_an_output_system_that_is_none_is_refused_before_anything_is_solved(grid, tmp_path, monkeypatch):
    monkeypatch.setattr(fieldrun, "solve_region", fail)
    with pytest.raises(LayerError, match="EPSG:999999"):
        run_field(quick(grid, tmp_path, output={"crs": "EPSG:999999"}))
    assert not (tmp_path / "out_field").exists()


def test_a_grid_written_to_while_it_was_read_is_refused(grid, tmp_path, monkeypatch):
    solve = fieldrun.solve_region

    def solve_while_it_changes(*args, **kwargs):
        os.utime(grid, ns=(1, 1))
        return solve(*args, **kwargs)

    monkeypatch.setattr(fieldrun, "solve_region", solve_while_it_changes)
    with pytest.raises(GridError, match="has changed while it was read"):
        run_field(quick(grid, tmp_path))
    assert not (tmp_path / "out_field").exists()


def test_a_second_run_into_the_folder_is_refused(grid, tmp_path, monkeypatch):
    """While one run puts its files in place, another is told so, and harms nothing."""
    refused = []

    def meanwhile(*args):
        if not refused:
            with pytest.raises(LayerError, match="another run is making it") as told:
                run_field(quick(grid, tmp_path), overwrite=True)
            refused.append(told)
        return writing(*args)

    writing = fieldrun._write_layers
    monkeypatch.setattr(fieldrun, "_write_layers", meanwhile)
    done = run_field(quick(grid, tmp_path))
    assert refused
    assert all(path.exists() for path in done.paths)


# ---- what stands beside the maps


def test_what_was_known_of_an_earlier_map_goes_with_it(grid, tmp_path):
    """GIS programs believe the statistics beside a raster more than the raster."""
    done = run_field(quick(grid, tmp_path))
    beside = done.folder / "field_m2.tif.aux.xml"
    beside.write_text("<PAMDataset/>", encoding="utf-8")
    run_field(quick(grid, tmp_path), overwrite=True)
    assert not beside.exists()


def test_side_files_alone_are_not_replaced_unasked(grid, tmp_path):
    folder = tmp_path / "out_field"
    folder.mkdir()
    (folder / "field_m2.tif.ovr").write_bytes(b"mine")
    with pytest.raises(OutputExistsError, match=r"field_m2\.tif\.ovr exists already"):
        run_field(quick(grid, tmp_path))
    assert (folder / "field_m2.tif.ovr").read_bytes() == b"mine"


# ---- workers


def test_processes_give_the_same_bytes_as_one(grid, tmp_path):
    """Every map, byte for byte, whoever solves its wave; the executor stays the caller's."""
    settings = quick(grid, tmp_path, field={"modes": 2, "mode_period_h": 4.0}, response={"constituents": ["M2", "K1"]})
    alone = run_field(settings)
    assert alone.field.modes
    maps = {path.name: path.read_bytes() for path in alone.paths if path.suffix == ".tif"}
    with ProcessPoolExecutor(2, mp_context=multiprocessing.get_context("spawn")) as pool:
        shared = run_field(settings, executor=pool, overwrite=True)
        assert pool.submit(int, 3).result() == 3
    assert {path.name: path.read_bytes() for path in shared.paths if path.suffix == ".tif"} == maps


# ---- longitudes, gauges


def test_longitudes_of_layers_end_at_180_and_maps_run_on(tmp_path):
    """A gulf in the east of a box across the meridian: its layers are drawn where gauges are."""
    elevation = np.full((12, 30), 50.0, dtype=np.float32)
    elevation[4:8, :28] = -np.linspace(3000.0, 20.0, 28, dtype=np.float32)
    path = write_tif(tmp_path / "gulf.tif", elevation, x0=178.0, y0=55.0, dx=0.2, dy=0.2)
    done = run_field(settings_for(path, tmp_path, response=ONE_WAVE, field={"modes": 2, "mode_period_h": 2.0}))
    (lon_deg,) = read_table(done.folder / "field.gpkg", "field_waves")["largest_lon_deg"]
    assert lon_deg == pytest.approx(178.0 + 27 * 0.2 - 360.0, abs=0.5)  # at the head of the gulf
    with rasterio.open(done.folder / "field_m2.tif") as file:
        assert file.bounds.right == pytest.approx(184.0 - 0.1)


@pytest.mark.parametrize("amplitudes", [[0.0], [0.0, 0.0], [1e-300, 0.0]])
def test_gauges_without_any_tide_leave_the_edge_tide_unknown(grid, tmp_path, amplitudes):
    """A constituent that does not exist here: nothing to fit, not even a division by its size."""
    with rasterio.open(grid) as file:
        row, _ = file.index(file.bounds.left, 40.0)
        shore_lon = file.xy(row, np.flatnonzero(file.read(1)[row] < 0).max())[0]
    n = len(amplitudes)
    pd.DataFrame(
        {
            "id": [f"G{number}" for number in range(n)],
            "lon": [shore_lon] * n,
            "lat": 40.0 + 0.3 * np.arange(n),
            "M2_amp_m": amplitudes,
            "M2_phase_deg": [0.0] * n,
        }
    ).to_csv(tmp_path / "gauges.csv", index=False)
    done = run_field(quick(grid, tmp_path, gauges={"file": "gauges.csv"}))
    assert done.field.waves[0].fit is None
    table = read_table(done.folder / "field.gpkg", "gauges")
    assert set(table["gauge_use"]) == {"no_value"}
    assert np.isnan(table["left_out_error_m2_m"]).all()


@pytest.mark.parametrize(
    ("name", "shape", "said"),
    [
        ("file", "point", "field.file: .* holds no polygons; draw polygons in it"),
        ("open_file", "point", "field.open_file: .* holds no polygons; draw polygons in it"),
        ("points_file", "polygon", "field.points_file: .* holds no points; draw points in it"),
    ],
)
def test_drawings_of_another_kind_are_refused_by_the_setting_that_names_them(grid, tmp_path, name, shape, said):
    drawn = {"point": {"type": "Point", "coordinates": [-1, 40]}} | {
        "polygon": {"type": "Polygon", "coordinates": [[[-3, 39], [0, 39], [0, 41], [-3, 39]]]}
    }
    content = {"type": "FeatureCollection", "features": [{"type": "Feature", "geometry": drawn[shape]}]}
    (tmp_path / "drawn.geojson").write_text(str(content).replace("'", '"'), encoding="utf-8")
    with pytest.raises(ShelfmapError, match=said):
        run_field(quick(grid, tmp_path, field={name: "drawn.geojson", "spectrum_h": [3.0, 9.0]}))


@pytest.mark.parametrize("title", ["a <b> & \"c\" 'd' Ærø", "two\nlines"])
def test_any_title_comes_through(grid, tmp_path, title):
    """GDAL keeps the title of a map as XML."""
    done = run_field(quick(grid, tmp_path).model_copy(update={"title": title}))
    with rasterio.open(done.folder / "field_m2.tif") as file:
        assert file.tags()["title"] == title


def test_verb_ends_in_one_sentence_where_the_layers_cannot_be_written(grid, tmp_path, monkeypatch):
    monkeypatch.setattr(GeoPackage, "finish", fail)
    (tmp_path / "run.toml").write_text(
        f"[grid]\npath = '{grid}'\npositive = 'up'\n[field]\ncell_km = 15\nmodes = 0\n",
        encoding="utf-8",
    )
    result = CliRunner().invoke(main, ["field", str(tmp_path / "run.toml")])
    assert result.exit_code == 1
    assert result.stderr.splitlines()[-1] == "Error: no room"
    assert not (tmp_path / "coast_field").exists()
