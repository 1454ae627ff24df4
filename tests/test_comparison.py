"""Gauges beside what was computed: the table, the scores, the figure, the verb; and both pictures of a coast."""

import json

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner
from scipy.stats import spearmanr
from utils_pipeline import settings_for, small_coast

from shelfmap.cli import main
from shelfmap.comparing import write_comparison
from shelfmap.comparison import compare
from shelfmap.errors import LayerError, OutputExistsError, SettingsError
from shelfmap.field import solve_field
from shelfmap.geodesy import distance_bearing
from shelfmap.grid import open_grid
from shelfmap.pipeline import screen
from shelfmap.rasters import write_geotiff
from shelfmap.region import solve_region
from shelfmap.vectors import read_table
from shelfmap.waters import open_waters

LATS = np.linspace(39.0, 41.0, 12)


def written(folder, elevation_m, made):
    return write_geotiff(folder / "dem.tif", elevation_m, x0=made.x0, y0=made.y0, dx=made.dx, dy=made.dy, crs=made.crs)


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A screened coast with a region, and gauges whose tide is that of a known edge tide."""
    folder = tmp_path_factory.mktemp("compared")
    made = small_coast()
    grid = written(folder, made.elevation_m, made)
    more = {"response": {"constituents": ["M2"]}, "field": {"edge_tide_m": {"M2": 0.7}, "modes": 0}}
    known = settings_for(grid, folder, **more)
    field = solve_field(open_waters(open_grid(known.grid), known.field), known)
    lon, lat = (place.flat[field.mesh.cell] for place in field.waters.lonlat())
    rows = [int(np.argmax(np.where(abs(lat - wanted) < 0.03, lon, -np.inf))) for wanted in LATS]
    tide = field.waves[0].tide[rows]
    table = {"id": [f"G{n}" for n in range(len(rows))], "lon": lon[rows], "lat": lat[rows]}
    table |= {"M2_amp_m": abs(tide), "M2_phase_deg": np.degrees(np.angle(tide)) % 360}
    pd.DataFrame(table).to_csv(folder / "gauges.csv", index=False)
    screen(settings(folder))
    return folder


def settings(folder, **more):
    tables = {"response": {"constituents": ["M2"]}, "gauges": {"file": "gauges.csv"}, "field": {}} | more
    return settings_for(folder / "dem.tif", folder, **tables)


def toml_of(folder, lines="[field]"):
    path = folder / "run.toml"
    path.write_text(
        "[grid]\npath = 'dem.tif'\npositive = 'up'\n[response]\nconstituents = ['M2']\n[gauges]\nfile = 'gauges.csv'\n"
        f"{lines}\n[output]\npath = 'out.gpkg'\n",
        encoding="utf-8",
    )
    return path


def test_columns_are_those_of_the_layers_and_of_the_nearest_transect(folder):
    comparison = compare(settings(folder))
    table, gauges = pd.DataFrame(comparison.table), pd.DataFrame(read_table(folder / "out.gpkg", "gauges"))
    transects = pd.DataFrame(read_table(folder / "out.gpkg", "transects"))
    usable = transects[transects.damped_gain_m2.notna()]
    for name in ("field_gain_m2", "left_out_m2_m", "left_out_m2_deg", "observed_m2_m"):
        np.testing.assert_array_equal(table[name], gauges[name])
    for row in table.itertuples():
        away_m, _ = distance_bearing(row.lon_deg, row.lat_deg, usable.lon_deg.to_numpy(), usable.lat_deg.to_numpy())
        assert row.transect_away_m2_km == pytest.approx(away_m.min() / 1e3)
        assert row.transect_gain_m2 == usable.damped_gain_m2.iloc[away_m.argmin()]
    (score,) = comparison.scores
    assert score.rho_field == pytest.approx(spearmanr(table.observed_m2_m, table.field_gain_m2).statistic)
    assert score.n_transect == score.n_field == len(LATS)
    assert score.explained_left_out > 0.99  # the tide is one that the region can have
    assert score.rho_left_out > 0.9


def test_only_transects_near_enough_count(folder):
    assert compare(settings(folder), within_km=0.001).scores[0].rho_transect is None
    assert "the transect's gain" not in compare(settings(folder), within_km=0.001).lines()[0]
    assert "the 2-D gain" in compare(settings(folder)).lines()[0]


def test_files_are_written_whole_and_not_over_others(folder):
    first = write_comparison(settings(folder), overwrite=True)[1]
    kept = [path.read_bytes() for path in first]
    assert [path.name for path in first] == ["out_compared.csv", "out_compared.png"]
    assert kept[1].startswith(b"\x89PNG")
    with pytest.raises(OutputExistsError):
        write_comparison(settings(folder))
    again = write_comparison(settings(folder), overwrite=True)[1]
    assert [path.read_bytes() for path in again] == kept
    shown = pd.read_csv(first[0])
    np.testing.assert_allclose(shown.left_out_m2_m, compare(settings(folder)).table["left_out_m2_m"], rtol=1e-5)


def test_verb(folder):
    for path in folder.glob("out_compared.*"):
        path.unlink()
    result = CliRunner().invoke(main, ["compare", str(toml_of(folder)), "--json"])
    assert result.exit_code == 0, result.output
    assert json.loads(result.stdout)["M2"]["n_field"] == len(LATS)
    assert "M2: rank correlation of the amplitude with" in result.stderr
    assert CliRunner().invoke(main, ["compare", str(toml_of(folder))]).exit_code == 2


def test_without_a_region_transects_alone_are_compared(folder, tmp_path):
    for name in ("dem.tif", "gauges.csv"):
        (tmp_path / name).write_bytes((folder / name).read_bytes())
    plain = settings(tmp_path).model_copy(update={"field": None})
    with pytest.raises(LayerError, match="does not exist yet; run shelfmap screen"):
        compare(plain)
    screen(plain)
    (score,) = compare(plain).scores
    assert (score.n_field, score.rho_field, score.explained_left_out) == (0, None, None)
    assert write_comparison(plain)[1][1].read_bytes().startswith(b"\x89PNG")


def test_other_gauges_or_waves_than_screened_are_told(folder):
    pd.read_csv(folder / "gauges.csv").iloc[:5].to_csv(folder / "fewer.csv", index=False)
    with pytest.raises(LayerError, match="was made with other gauges"):
        compare(settings(folder, gauges={"file": "fewer.csv"}))
    other = pd.read_csv(folder / "gauges.csv").rename(columns=lambda name: name.replace("M2", "S2"))
    other.to_csv(folder / "s2.csv", index=False)
    with pytest.raises(LayerError, match="holds no S2"):
        compare(settings(folder, gauges={"file": "s2.csv"}, response={"constituents": ["S2"]}))
    with pytest.raises(SettingsError, match=r"gauges\.file"):
        compare(settings(folder, gauges={}))


# ---- both pictures of a coast


def test_on_a_straight_shelf_transects_and_region_agree(folder, tmp_path):
    """Without rotation and far from the ends, both gains are the same within 5 %, and no transect is doubted."""
    (tmp_path / "dem.tif").write_bytes((folder / "dem.tif").read_bytes())
    straight = settings_for(
        tmp_path / "dem.tif",
        tmp_path,
        response={"constituents": ["M2"], "rotation": False, "deep_m": 3000.0},
        field={"least_depth_m": 1.0, "shallowest_m": 1.0, "open_sides": ["west"]},
    )
    table = pd.DataFrame(read_table(screen(straight).path, "transects"))
    table = table[(table.status == "ok") & table.lat_deg.between(39.5, 40.5)]
    assert len(table) > 5
    np.testing.assert_allclose(table.field_ratio, 1.0, atol=0.05)
    np.testing.assert_allclose(table.field_gain_m2, table.damped_gain_m2 * table.field_ratio, rtol=1e-9)
    assert not table.note.fillna("").str.contains("2-D gain").any()


def test_a_gulf_makes_both_pictures_differ_and_the_note_says_so(tmp_path):
    """A basin dug into the land behind the coast resonates in two dimensions, and no transect sees it."""
    made = small_coast()
    elevation = made.elevation_m.copy()
    rows = slice(20, 36)
    for row in range(rows.start, rows.stop):
        land = np.flatnonzero(elevation[row] >= 0)
        elevation[row, land[0] - 1 : land[-1] - 2] = -12.0  # long and shallow: it holds the tide back
    grid = written(tmp_path, elevation, made)
    gulf = settings_for(
        grid, tmp_path, response={"constituents": ["M2"]}, coast={"generalise_km": 200.0}, field={"modes": 0}
    )
    table = pd.DataFrame(read_table(screen(gulf).path, "transects"))
    off = table[(table.status == "ok") & (abs(np.log(table.field_ratio)) > np.log(1.25))]
    assert len(off)
    assert off.note.str.contains("2-D gain of M2 is .* times the transect's").all()
    assert not (off.confidence == "good").any()


def test_regions_are_read_from_polygons_and_points(folder, tmp_path):
    points = pd.DataFrame({"lon": [0.0], "lat": [0.0]})
    points.to_csv(tmp_path / "points.csv", index=False)
    wanted = settings(folder, field={"points_file": str(tmp_path / "points.csv"), "spectrum_h": [5.0, 20.0]})
    with pytest.raises(LayerError):  # a table without shapes
        solve_region(open_grid(wanted.grid), wanted)


def test_gauges_are_never_written_over(folder):
    """A table of gauges that is called as the comparison would be, even where overwriting is allowed."""
    taken = folder / "out_compared.csv"
    taken.write_bytes((folder / "gauges.csv").read_bytes())
    with pytest.raises(LayerError, match="is an input too and would be lost"):
        write_comparison(settings(folder, gauges={"file": taken.name}), overwrite=True)
    assert taken.read_bytes() == (folder / "gauges.csv").read_bytes()
    taken.unlink()
