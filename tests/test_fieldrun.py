"""Whole runs of the 2-D response: what the folder holds, what bad input gets, what joins the transects."""

import json
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pandas as pd
import pytest
import rasterio
import shapely
from click.testing import CliRunner
from utils_pipeline import settings_for, small_coast

from shelfmap.cli import main
from shelfmap.columns import columns_of
from shelfmap.errors import FieldError, LayerError, OutputExistsError, SettingsError, ShelfmapError
from shelfmap.fieldrun import run_field
from shelfmap.pipeline import screen
from shelfmap.rasters import write_geotiff
from shelfmap.vectors import layers_in, read_table, read_vector

#: Where the small coast has its sea: gauges of an invented tide along its shore.
LATS = np.linspace(39.0, 41.0, 9)


@pytest.fixture(scope="module")
def grid(tmp_path_factory):
    path = tmp_path_factory.mktemp("grid") / "dem.tif"
    made = small_coast()
    return write_geotiff(
        path, made.elevation_m, x0=made.x0, y0=made.y0, dx=made.dx, dy=made.dy, crs=made.crs, description="dem"
    )


@pytest.fixture(scope="module")
def shore_lon(grid):
    """Longitude of the shore at 40 N."""
    with rasterio.open(grid) as file:
        row, _ = file.index(file.bounds.left, 40.0)
        wet = np.flatnonzero(file.read(1)[row] < 0)
        return file.xy(row, wet.max())[0]


@pytest.fixture(scope="module")
def gauges_csv(grid, shore_lon, tmp_path_factory):
    """Gauges on the shore with a tide that grows northward, one far inland."""
    path = tmp_path_factory.mktemp("gauges") / "gauges.csv"
    table = pd.DataFrame({
        "id": [f"G{number}" for number in range(len(LATS))] + ["inland"],
        "lon": [shore_lon] * len(LATS) + [shore_lon + 1.0],
        "lat": [*LATS, 40.0],
        "M2_amp_m": [*(0.8 + 0.1 * (LATS - 40)), 0.5],
        "M2_phase_deg": [*(30 + 5 * (LATS - 40)), 10.0],
        "K1_amp_m": [*([0.1] * len(LATS)), np.nan],
    })  # fmt: skip
    table.to_csv(path, index=False)
    return path


def field_settings(grid, folder, /, **field):
    return settings_for(
        grid, folder, response={"constituents": ["M2", "S2"], "periods_h": [3.0]}, field={"modes": 2, **field}
    )


def write_toml(folder, grid, *lines):
    path = folder / "run.toml"
    path.write_text("\n".join([f"[grid]\npath = '{grid}'\npositive = 'up'", *lines]), encoding="utf-8")
    return path


def run(folder, grid, *lines, options=()):
    return CliRunner().invoke(main, ["field", str(write_toml(folder, grid, *lines)), *options])


# ---- what the folder holds


@pytest.fixture(scope="module")
def made(grid, gauges_csv, tmp_path_factory):
    folder = tmp_path_factory.mktemp("made")
    settings = settings_for(
        grid,
        folder,
        response={"constituents": ["M2", "S2"], "periods_h": [3.0]},
        gauges={"file": str(gauges_csv)},
        field={"modes": 2, "mode_period_h": 4.0, "spectrum_h": [2.0, 20.0]},
    )
    with pytest.warns(UserWarning, match="S2 left out of the gauges: no column"):
        return run_field(settings)


def test_the_folder_holds_a_map_a_wave_and_the_layers(made):
    names = sorted(path.name for path in made.folder.iterdir())
    modes = [f"mode_{number}.tif" for number in range(1, len(made.field.modes) + 1)]
    assert made.folder.name == "out_field"
    assert names == sorted(["field.gpkg", "field_depth.tif", "field_m2.tif", "field_p3h.tif", "field_s2.tif", *modes])
    assert sorted(path.name for path in made.paths) == names
    assert layers_in(made.folder / "field.gpkg") == [
        "gauges", *(["natural_modes"] if modes else []), "field_waves", "field_curves", "run",
    ]  # fmt: skip


def test_bands_are_the_field(made):
    """Cell by cell, as float32, and where the grid has them."""
    done = made.field.waves[0]
    with rasterio.open(made.folder / "field_m2.tif") as file:
        assert file.descriptions == (
            "gain", "lag_deg", "current_per_m", "amplitude_m", "phase_deg", "major_m_s", "minor_m_s", "bearing_deg",
        )  # fmt: skip
        assert file.units == (None, "deg", "s-1", "m", "deg", "m s-1", "m s-1", "deg")
        gain, amplitude, phase = (file.read(number)[::-1] for number in (1, 4, 5))
        np.testing.assert_array_equal(gain, made.field.on_map(abs(done.unit)).astype(np.float32))
        np.testing.assert_array_equal(amplitude, made.field.on_map(abs(done.tide)).astype(np.float32))
        lon, lat = file.xy(file.height - 1, 0)  # its first row is the north
        assert (lon, lat) == pytest.approx((made.source.x0, made.source.y0), abs=1e-9)
        assert "Not for navigation" in file.tags()["cautions"]
        assert "twice the wave that comes in" in file.tags(1)["DESCRIPTION"]
        assert (np.nan_to_num(phase) >= 0).all()
        assert (np.nan_to_num(phase) < 360).all()
    with rasterio.open(made.folder / "field_s2.tif") as file:  # no gauge has it
        assert file.descriptions == ("gain", "lag_deg", "current_per_m")


def test_gauges_say_what_came_of_them(made):
    table = pd.DataFrame(read_table(made.folder / "field.gpkg", "gauges")).set_index("gauge")
    assert set(table.gauge_use[:-1]) == {"fitted"}
    assert table.gauge_use["inland"] == "out_of_reach"
    assert table.cell_away_km["inland"] > 15
    assert np.isnan(table.fitted_m2_m["inland"])
    near = table.drop("inland")
    # a tide this smooth is met to the local error allowed, 3 %
    np.testing.assert_allclose(near.fitted_m2_m, near.observed_m2_m, rtol=0.05)
    np.testing.assert_allclose(near.fitted_m2_deg, near.observed_m2_deg, atol=3)
    assert (near.left_out_error_m2_m < 4 * near.expected_error_m2_m).all()
    points = read_vector(made.folder / "field.gpkg", "gauges")
    np.testing.assert_allclose(shapely.get_y(points.geometry), table.lat_deg)


def test_curves_are_the_gain_at_the_waves_of_their_periods(made):
    curves = pd.DataFrame(read_table(made.folder / "field.gpkg", "field_curves"))
    assert len(curves) == 60 * (len(LATS) + 1)
    at_gauge = curves[curves.point == "G4"]
    waves = pd.DataFrame(read_table(made.folder / "field.gpkg", "field_waves"))
    gauges = pd.DataFrame(read_table(made.folder / "field.gpkg", "gauges")).set_index("gauge")
    drawn = np.interp(np.log(waves.period_h[0]), np.log(at_gauge.period_h), at_gauge.gain)
    assert drawn == pytest.approx(gauges.field_gain_m2["G4"], rel=5e-3)  # 60 points, drawn straight between
    assert curves[curves.point == "inland"].gain.isna().all()


def test_run_layer_tells_sources_and_remarks(made):
    table = pd.DataFrame(read_table(made.folder / "field.gpkg", "run"))
    said = dict(zip(table.name, table.value, strict=True))
    assert said["field.modes"] == "2"
    assert said["cells"] == str(len(made.field.mesh.cell))
    assert any("friction from drag" in value for value in table.value.dropna())


def test_any_number_of_workers_gives_the_same(made, grid, gauges_csv, tmp_path):
    settings = settings_for(
        grid,
        tmp_path,
        response={"constituents": ["M2"], "periods_h": [3.0]},
        gauges={"file": str(gauges_csv)},
        field={"modes": 1, "mode_period_h": 4.0},
    )
    alone = run_field(settings)
    with ThreadPoolExecutor(2) as pool:
        shared = run_field(settings, executor=pool, overwrite=True)
    for one, other in zip(alone.field.waves, shared.field.waves, strict=True):
        np.testing.assert_array_equal(one.unit, other.unit)
    np.testing.assert_array_equal(alone.field.friction_m_s, shared.field.friction_m_s)
    assert [mode.omega for mode in alone.field.modes] == [mode.omega for mode in shared.field.modes]


# ---- the command line


def test_verb_prints_the_folder_and_says_what_came_of_it(grid, gauges_csv, tmp_path):
    result = run(
        tmp_path, grid, f"[gauges]\nfile = '{gauges_csv}'", "[response]\nconstituents = ['M2']", "[field]\nmodes = 0"
    )
    assert result.exit_code == 0, result.output
    assert result.stdout.strip() == str(tmp_path / "coast_field")
    assert "M2: largest gain" in result.stderr
    assert "9 gauges, 0 off, each explained from the others to" in result.stderr


def test_verb_needs_no_section_of_its_own(grid, tmp_path):
    result = run(tmp_path, grid, "[response]\nconstituents = ['M2']", options=["--json", "-o", str(tmp_path / "maps")])
    assert result.exit_code == 0, result.output
    summary = json.loads(result.stdout)
    assert summary["folder"] == str(tmp_path / "maps")
    assert summary["waves"][0]["explained_left_out"] is None
    assert summary["edge"] == "radiating"
    assert any("friction 0.001 m/s everywhere" in remark for remark in summary["remarks"])


def test_what_is_there_is_left_unless_told_otherwise(grid, tmp_path):
    lines = "[response]\nconstituents = ['M2']\n[field]\nmodes = 0\ncell_km = 20"
    assert run(tmp_path, grid, lines).exit_code == 0
    (tmp_path / "coast_field" / "mine.txt").write_text("mine")
    before = (tmp_path / "coast_field" / "field_m2.tif").read_bytes()
    again = run(tmp_path, grid, lines)
    assert again.exit_code == 2
    assert "exists already" in again.stderr
    assert (tmp_path / "coast_field" / "field_m2.tif").read_bytes() == before
    assert run(tmp_path, grid, lines, options=["--overwrite"]).exit_code == 0
    assert (tmp_path / "coast_field" / "mine.txt").read_text() == "mine"


def test_maps_of_modes_that_are_found_no_more_go(grid, tmp_path):
    settings = field_settings(grid, tmp_path, mode_period_h=4.0, cell_km=15)
    found = run_field(settings).field.modes
    assert found
    fewer = field_settings(grid, tmp_path, mode_period_h=200.0, cell_km=15)
    assert not run_field(fewer, overwrite=True).field.modes
    assert not list((tmp_path / "out_field").glob("mode_*.tif"))


# ---- what bad input gets


@pytest.mark.parametrize(
    ("lines", "said"),
    [
        ("[field]\nbox = [0, 0, 5, 5]", "field.box"),
        ("[field]\nopen_depth_m = 9000", "no open edge of 9000 m or deeper"),
        ("[field]\nopen_sides = ['east']", "the east side of the region is all land"),
        ("[field]\nshallowest_m = 900\nbox = [-10.6, 39.5, -10.0, 40.5]", "field"),
        ("[field]\ncell_km = 500", "field.cell_km"),
        ("[field]\nmemory_gb = 0.001", "field.memory_gb"),
        ("[field]\nfile = 'nowhere.gpkg'", "nowhere.gpkg"),
        ("[field]\ncel_km = 3", "did you mean 'cell_km'"),
        ("[field]\nedge_tide_m = { N2 = 0.1 }\n[response]\nconstituents = ['M2']", "not among response.constituents"),
        ("[gauges]\nfile = 'nowhere.csv'", "nowhere.csv: no such file"),
        ("[gauges]\nfile = 'run.toml'", "run.toml"),
    ],
)
def test_bad_input_gets_a_sentence_and_leaves_nothing(grid, tmp_path, lines, said):
    result = run(tmp_path, grid, lines)
    assert result.exit_code == 1, result.output
    assert said in result.stderr
    assert "Traceback" not in result.output
    assert [path.name for path in tmp_path.iterdir()] == ["run.toml"]


def test_cells_named_by_the_refusal_fit(grid, tmp_path):
    """Too many unknowns: the cell size in the message is one that the memory allows."""
    with pytest.raises(FieldError, match=r"set field\.cell_km = ") as refused:
        run_field(field_settings(grid, tmp_path, modes=0, memory_gb=0.002))
    cell_km = float(str(refused.value).split("field.cell_km = ")[1].split(",")[0])
    assert run_field(field_settings(grid, tmp_path, modes=0, memory_gb=0.002, cell_km=cell_km)).paths


@pytest.mark.parametrize("depths", ["one_cell", "all_sea"])
def test_extreme_regions_are_solved(tmp_path, depths):
    """A single wet cell in the corner of a rocky box, and a box without any land: the edge tide itself, all but."""
    elevation = np.full((12, 12), 50.0 if depths == "one_cell" else -3000.0, dtype=np.float32)
    elevation[0, 0] = -3000.0
    path = write_geotiff(tmp_path / "box.tif", elevation, x0=0, y0=40, dx=0.1, dy=0.1, crs="EPSG:4326")
    done = run_field(field_settings(path, tmp_path, modes=0))
    np.testing.assert_allclose(abs(done.field.waves[0].unit), 1.0, atol=0.02)  # the box is a hundredth of a wave


def test_gauges_without_phases_or_in_other_seas_fit_nothing(grid, gauges_csv, tmp_path):
    table = pd.read_csv(gauges_csv)
    table["M2_phase_deg"] = np.nan
    table.loc[0, ["lon", "lat"]] = [100.0, -40.0]
    table.to_csv(tmp_path / "gauges.csv", index=False)
    settings = settings_for(
        grid, tmp_path, response={"constituents": ["M2"]}, gauges={"file": "gauges.csv"}, field={"modes": 0}
    )
    done = run_field(settings)
    assert done.field.waves[0].fit is None
    shown = pd.DataFrame(read_table(done.folder / "field.gpkg", "gauges"))
    assert shown.gauge_use.tolist() == ["out_of_reach", *["no_value"] * 8, "out_of_reach"]


@pytest.mark.parametrize("count", [1, 2])
def test_fewer_gauges_than_shapes_are_enough(grid, gauges_csv, tmp_path, count):
    pd.read_csv(gauges_csv).iloc[4 : 4 + count].to_csv(tmp_path / "gauges.csv", index=False)
    settings = settings_for(
        grid, tmp_path, response={"constituents": ["M2"]}, gauges={"file": "gauges.csv"}, field={"modes": 0}
    )
    done = run_field(settings)
    tide = abs(done.field.waves[0].tide)
    assert np.isfinite(tide).all()
    assert tide.max() < 2.0  # observed 0.8 m: what the gauges leave open stays near nothing


def test_a_folder_that_cannot_be_is_refused_before_anything_is_solved(grid, tmp_path):
    (tmp_path / "taken").write_text("mine")
    for folder, said in ((tmp_path / "taken", "is a file"), (tmp_path / "no" / "where", "there is no folder")):
        with pytest.raises(FieldError, match=said):
            run_field(field_settings(grid, tmp_path, folder=str(folder)))
    kept = tmp_path / "in"
    kept.mkdir()
    copy = kept / "field_depth.tif"
    copy.write_bytes(grid.read_bytes())
    with pytest.raises(FieldError, match="is an input too"):
        run_field(field_settings(copy, tmp_path, folder=str(kept)), overwrite=True)
    with pytest.raises(OutputExistsError):
        run_field(field_settings(grid, tmp_path, folder=str(kept)))


# ---- joined to the transects


def test_transects_gain_columns_only_with_a_field(grid, gauges_csv, tmp_path):
    settings = settings_for(
        grid, tmp_path, response={"constituents": ["M2"]}, gauges={"file": str(gauges_csv)}, field={}
    )
    path = screen(settings).path
    assert list(read_table(path, "transects")) == [c.name for c in columns_of("transects", ["m2"], with_field=True)]
    assert {"gauges", "field_waves"} <= set(layers_in(path))
    assert "natural_modes" not in layers_in(path)
    table = pd.DataFrame(read_table(path, "transects"))
    inner = table[table.lat_deg.between(39.5, 40.5) & (table.status == "ok")]
    assert len(inner) > 5
    np.testing.assert_allclose(inner.field_tide_m2_m, 0.8, atol=0.1)
    np.testing.assert_allclose(inner.field_phase_m2_deg, 30.0, atol=5)
    plain = screen(settings.model_copy(update={"field": None}), overwrite=True).path
    assert not [name for name in read_table(plain, "transects") if name.startswith("field_")]


def test_errors_of_a_region_leave_an_older_output_of_transects(grid, tmp_path):
    settings = settings_for(grid, tmp_path)
    path = screen(settings).path
    before = path.read_bytes()
    bad = settings_for(grid, tmp_path, field={"open_depth_m": 9000})
    with pytest.raises(ShelfmapError, match="no open edge"):
        screen(bad, overwrite=True)
    assert path.read_bytes() == before


def test_gauges_are_no_output(grid, gauges_csv, tmp_path):
    copy = tmp_path / "out.gpkg"
    copy.write_bytes(gauges_csv.read_bytes())
    with pytest.raises((LayerError, SettingsError), match=r"is gauges\.file too and would be lost"):
        screen(settings_for(grid, tmp_path, gauges={"file": str(copy)}), overwrite=True)


def test_currents_of_waves_slower_than_the_earth_turns_are_left_empty(grid, tmp_path):
    """K1 at 40 N: cells do not resolve them. Its gain is there; M2's currents are too."""
    done = run_field(settings_for(grid, tmp_path, response={"constituents": ["M2", "K1"]}, field={"modes": 0}))
    for label, is_there in (("m2", True), ("k1", False)):
        with rasterio.open(done.folder / f"field_{label}.tif") as file:
            gain, current = file.read(1), file.read(3)
        assert np.isfinite(gain).any()
        assert np.isfinite(current[np.isfinite(gain)]).all() == is_there
        assert np.isfinite(current).any() == is_there
