"""Coasts, transects and breaks drawn by hand, by people and by programs: taken, left out with a word, or refused."""

import json
import os
import re
import sqlite3
import warnings
from contextlib import closing

import geopandas
import numpy as np
import pytest
import shapely
from shapely import LineString, MultiLineString, Point, Polygon, box
from test_mutated_grids import SETTINGS, tif
from utils_fuzz import assert_sound, invoke, toml_text

from shelfmap.vectors import read_table

COAST = LineString([(0, 39.5), (0, 40.5)])
TRANSECT = LineString([(0.02, 40.0), (-1.5, 40.0)])
BREAK = Point(-1.15, 39.9)
LAND = box(0, 30, 10, 50)


def frame(shapes, crs="EPSG:4326", **columns):
    columns = columns or {"transect_id": range(1, len(shapes) + 1)}
    return geopandas.GeoDataFrame(columns, geometry=shapes, crs=crs)


def screen(folder, use, path, codes=(0, 1), **settings):
    """Screen with a vector file: tables or None, and what was said."""
    content = {"grid": {"path": str(tif(folder)), "positive": "up"}, **{k: dict(v) for k, v in SETTINGS.items()}}
    content.setdefault(use, {}).update(file=str(path), **settings)
    before = {entry.name for entry in folder.iterdir()} | {"s.toml"}
    (folder / "s.toml").write_text(toml_text(content), encoding="utf-8")
    result = invoke("screen", folder / "s.toml", "-o", folder / "out.gpkg", codes=codes)
    assert {entry.name for entry in folder.iterdir()} - before == ({"out.gpkg"} if result.exit_code == 0 else set())
    return (assert_sound(folder / "out.gpkg") if result.exit_code == 0 else None), result.stderr


def written(folder, shapes, name="v.gpkg", **more):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # that this is no good file
        frame(shapes, **more).to_file(folder / name)
    return folder / name


def not_a_number():
    with np.errstate(invalid="ignore"):
        return LineString([(np.nan, 40), (1, 40)])


def geojson(folder, geometry):
    feature = {"type": "Feature", "properties": {"transect_id": 1}, "geometry": geometry}
    text = json.dumps({"type": "FeatureCollection", "features": [feature]})
    (folder / "v.geojson").write_text(text, encoding="utf-8")
    return folder / "v.geojson"


@pytest.mark.parametrize(
    ("use", "shape", "n"),
    [("coast", COAST, 4), ("coast", LAND, 4), ("transects", TRANSECT, 1), ("shelf_break", BREAK, 4)],
)
def test_good_shapes_give_a_sound_output(tmp_path, use, shape, n):
    tables, said = screen(tmp_path, use, written(tmp_path, [shape]), codes=(0,))
    assert "arning" not in said.replace("WARNING", "Warning") or use == "shelf_break"
    assert tables["transects"]["status"].tolist() == ["ok"] * n


SAME = {
    "other system": lambda folder: written_in(folder, "EPSG:32630"),
    "degrees in a file of other axes": lambda folder: written_in(folder, "EPSG:4269"),
    "heights": lambda folder: written(folder, [LineString([(0.02, 40.0, 7), (-1.5, 40.0, np.nan)])]),
    "in parts": lambda folder: written(folder, [MultiLineString([[(0.02, 40), (-0.5, 40)], [(-0.6, 40), (-1.5, 40)]])]),
    "in a collection": lambda folder: written(folder, [shapely.GeometryCollection([TRANSECT])]),
    "a turn away": lambda folder: written(
        folder, [shapely.transform(TRANSECT, lambda xy: xy + np.array([360.0, 0.0]))]
    ),
    "text of whole numbers": lambda folder: written(folder, [TRANSECT], transect_id=["1"]),
    "shapefile": lambda folder: written(folder, [TRANSECT], name="v.shp"),
    "flatgeobuf": lambda folder: written(folder, [TRANSECT], name="v.fgb"),
    "with a point": lambda folder: written(folder, [TRANSECT, BREAK]),
    "with a line of no length": lambda folder: written(folder, [TRANSECT, LineString([(-1, 40), (-1, 40)])]),
    "with nothing": lambda folder: written(folder, [TRANSECT, None]),
    "from sea to shore": lambda folder: written(folder, [TRANSECT.reverse()]),
}
TOLD = {
    "with a point": "1 shapes that are no lines are left out",
    "with a line of no length": "1 of the transects drawn have no length and are left out",
    "with nothing": "1 row(s) without a shape are left out",
    "from sea to shore": "were turned round",
}


def written_in(folder, crs):
    frame([TRANSECT]).to_crs(crs).to_file(folder / "v.gpkg")
    return folder / "v.gpkg"


@pytest.mark.parametrize("name", SAME)
def test_one_transect_in_any_dress(tmp_path, name):
    """2 km: what a chord of 1.3 degrees instead of one of a UTM zone is off, and a gap bridged."""
    tables, said = screen(tmp_path, "transects", SAME[name](tmp_path), codes=(0,))
    assert tables["transects"]["transect_id"].tolist() == [1]
    assert tables["transects"]["status"].tolist() == ["ok"]
    assert tables["transects"]["shelf_width_km"][0] == pytest.approx(98.5, abs=2.0)
    assert TOLD.get(name, "") in said


CURVED = "CIRCULARSTRING (0.02 40.0, -0.6 40.2, -1.3 40.0)"


def test_a_curve_is_taken_as_a_line(tmp_path):
    """As GDAL writes it: a GeoPackage that holds a circular string."""
    wkt = tmp_path / "v.vrt"
    (tmp_path / "v.csv").write_text(f'transect_id,WKT\n1,"{CURVED}"\n', encoding="utf-8")
    wkt.write_text(
        '<OGRVRTDataSource><OGRVRTLayer name="v"><SrcDataSource relativeToVRT="1">v.csv</SrcDataSource>'
        '<GeometryField encoding="WKT" field="WKT"/><LayerSRS>EPSG:4326</LayerSRS></OGRVRTLayer></OGRVRTDataSource>',
        encoding="utf-8",
    )
    tables, _ = screen(tmp_path, "transects", wkt, codes=(0,))
    assert tables["transects"]["status"].tolist() == ["ok"]


def text(content, name="v.geojson"):
    def make(folder):
        (folder / name).write_text(content, encoding="utf-8")
        return folder / name

    return make


def nested(depth):
    def make(folder):
        path = geojson(folder, {"type": "Polygon", "coordinates": ["deep"]})
        path.write_text(path.read_text(encoding="utf-8").replace('"deep"', "[" * depth + "]" * depth), encoding="utf-8")
        return path

    return make


REFUSED = {
    "no rows": (lambda folder: written(folder, []), "holds no|neither"),
    "no shapes": (lambda folder: written(folder, [None]), "holds no|neither"),
    "empty shapes": (lambda folder: written(folder, [LineString()]), "holds no|neither"),
    "no system": (lambda folder: written(folder, [TRANSECT], crs=None), "has no coordinate system"),
    "metres called degrees": (
        lambda folder: written(folder, [LineString([(5e5, 4e6), (4e5, 4e6)])]),
        "no longitude and latitude",
    ),
    "not a number": (
        lambda folder: written(folder, [not_a_number()]),
        "no longitude and latitude",
    ),
    "infinite": (lambda folder: written(folder, [LineString([(np.inf, 40), (1, 40)])]), "no longitude and latitude"),
    "beyond the pole": (lambda folder: written(folder, [LineString([(0, 89), (0, 95)])]), "no longitude and latitude"),
    "no length": (
        lambda folder: written(folder, [LineString([(0, 40), (0, 40)])]),
        "no line with a length|must be points",
    ),
    "round the globe to its start": (
        lambda folder: written(folder, [LineString([(-180, 40), (180, 40)])]),
        "no line with a length|must be points",
    ),
    "one point of a line": (
        lambda folder: geojson(folder, {"type": "LineString", "coordinates": [[1, 40]]}),
        "cannot be read",
    ),
    "no numbers": (
        lambda folder: geojson(folder, {"type": "LineString", "coordinates": [["a"], []]}),
        "holds no|neither",
    ),
    "open ring": (
        lambda folder: geojson(folder, {"type": "Polygon", "coordinates": [[[0, 39], [3, 39], [3, 42]]]}),
        "cannot be read",
    ),
    "cut GeoJSON": (text('{"type": "FeatureCollection", "features": [{'), "cannot be read"),
    "text called GeoPackage": (text("hello", "v.gpkg"), "cannot be read"),
    "empty GeoPackage": (text("", "v.gpkg"), "cannot be read"),
    "deep nesting": (nested(3000), "cannot be read|holds no|neither"),
    "table": (text("transect_id,a\n1,2\n", "v.csv"), "holds no shapes"),
    "folder": (lambda folder: folder, "is a folder"),
    "nowhere": (lambda folder: folder / "no.gpkg", "no such file"),
}


@pytest.mark.parametrize("use", ["coast", "transects", "shelf_break"])
@pytest.mark.parametrize("name", REFUSED)
def test_what_is_no_drawing_is_refused_in_one_sentence(tmp_path, name, use):
    make, words = REFUSED[name]
    tables, said = screen(tmp_path, use, make(tmp_path), codes=(1,))
    assert tables is None
    error = [line for line in said.splitlines() if line.startswith("Error: ")]
    assert len(error) == 1
    assert any(word in error[0] for word in words.split("|")), error[0]


@pytest.mark.parametrize(
    ("land", "words"),
    [
        (box(-50, 0, 50, 80), "no shoreline"),
        (box(100, 10, 110, 20), "no shoreline"),
        (Polygon([(0, 39), (0, 41), (0, 39)]), "no shoreline"),
    ],
    ids=["covers all", "far away", "no area"],
)
def test_land_that_leaves_no_coast_is_refused(tmp_path, land, words):
    _, said = screen(tmp_path, "coast", written(tmp_path, [land]), codes=(1,))
    assert words in said


def test_land_that_crosses_itself_is_mended_as_far_as_it_goes(tmp_path):
    """A bow tie across the coast: either half is land."""
    bow = Polygon([(0, 39), (3, 41), (3, 39), (0, 41)])
    tables, _ = screen(tmp_path, "coast", written(tmp_path, [bow]))
    assert tables is None or len(tables["transects"]["status"])


def test_polygons_and_lines_together_are_told_of(tmp_path):
    _, said = screen(tmp_path, "coast", written(tmp_path, [LAND, COAST]), codes=(0,))
    assert "1 shapes that are no polygons, which are taken as land are left out" in said


@pytest.mark.parametrize("given", [["north"], [2.5], [2**40]])
@pytest.mark.parametrize(("use", "shape"), [("transects", TRANSECT), ("shelf_break", BREAK)])
def test_identities_that_are_none_are_named(tmp_path, given, use, shape):
    _, said = screen(tmp_path, use, written(tmp_path, [shape], transect_id=given), codes=(1,))
    assert f"the column transect_id holds {str(given[0])!r}, no whole number" in said


def test_repeated_identities_are_numbered_anew_with_a_word(tmp_path):
    other = LineString([(0.02, 40.2), (-1.5, 40.2)])
    path = written(tmp_path, [TRANSECT, other, TRANSECT], transect_id=[7, 7, None])
    tables, said = screen(tmp_path, "transects", path, codes=(0,))
    assert tables["transects"]["transect_id"].tolist() == [7, 8, 9]
    assert "2 transects without a transect_id of their own were numbered anew; these stood more than once: 7" in said


@pytest.mark.parametrize("given", [[1, 1], [99, 1]])
def test_breaks_picked_twice_or_for_nobody_are_refused(tmp_path, given):
    path = written(tmp_path, [BREAK, BREAK], transect_id=given)
    _, said = screen(tmp_path, "shelf_break", path, codes=(1,))
    assert "transect_id 1 has two breaks" in said or "no transect of this run has transect_id 99" in said


def test_a_view_that_never_ends_is_refused(tmp_path):
    path = written(tmp_path, [TRANSECT])
    with closing(sqlite3.connect(path)) as database, database:
        database.execute(
            "CREATE VIEW w AS WITH RECURSIVE c(x) AS (SELECT 1 UNION ALL SELECT x + 1 FROM c) SELECT x, geom FROM v, c"
        )
        database.execute("INSERT INTO gpkg_contents (table_name, data_type, srs_id) VALUES ('w', 'features', 4326)")
        database.execute("INSERT INTO gpkg_geometry_columns VALUES ('w', 'geom', 'LINESTRING', 4326, 0, 0)")
    _, said = screen(tmp_path, "transects", path, codes=(1,), layer="w")
    assert "is a view that calls itself" in said


# ---- names of all kinds

#: A semicolon, an exclamation mark and a line break in file names are refused, see below.
NAMES = [
    'quo"te',
    "apo'strophe",
    "new\nline",
    "'; DROP TABLE transects; --",
    "<script>alert(1)</script>",
    "&amp;]]>",
    "%s {0}",
]


@pytest.mark.parametrize("name", NAMES)
def test_names_come_through_verbatim(tmp_path, name):
    """Title, file, layer, column and attribute of that name; the output stays a sound GeoPackage that holds it."""
    file_name = re.sub(r"[/\n;!]", "_", name)
    folder = tmp_path / f"d {file_name}"
    folder.mkdir()
    collection = {
        "type": "FeatureCollection",
        "name": name,
        "features": [
            {
                "type": "Feature",
                "properties": {"transect_id": 1, f"a {name}": name},
                "geometry": shapely.geometry.mapping(TRANSECT),
            }
        ],
    }
    (folder / f"{file_name}.geojson").write_text(json.dumps(collection), encoding="utf-8")
    grid = tif(folder).rename(folder / f"{file_name}.tif")
    content = {
        "title": name,
        "grid": {"path": grid.name, "positive": "up"},
        **{key: dict(value) for key, value in SETTINGS.items()},
    }
    content["transects"].update(file=f"{file_name}.geojson", layer=name)
    (folder / "s.toml").write_text(toml_text(content), encoding="utf-8")
    out = folder / f"out {file_name}.gpkg"
    result = invoke("screen", folder / "s.toml", "-o", out, codes=(0,))
    assert result.stdout == f"{out}\n"
    assert_sound(out)
    run = read_table(out, "run")
    values = dict(zip(run["name"].tolist(), run["value"].tolist(), strict=True))
    assert values["title"] == name
    assert values["transects.layer"] == name
    assert values["grid.path"] == str(grid)
    with closing(sqlite3.connect(out)) as database:
        texts = [text for (text,) in database.execute("SELECT metadata FROM gpkg_metadata")]
    [about] = [json.loads(text) for text in texts if text.startswith("{")]
    assert about["title"] == name
    for verb in ("coast", "transects"):
        invoke(verb, folder / "s.toml", "-o", folder / f"{verb}.gpkg", codes=(0,))
    invoke("inspect", grid, "--positive", "up", codes=(0,))


@pytest.mark.parametrize("name", ["a;b", "a!b", "x.zip!b", "a\nb", "a\tb"])
def test_file_names_that_would_be_cut_are_refused_before_any_work(tmp_path, name):
    """The library of vectors would write or read another file."""
    path = written(tmp_path, [TRANSECT]).rename(tmp_path / f"{name}.gpkg")
    _, said = screen(tmp_path, "transects", path, codes=(1,))
    assert "rename the file" in said
    good = written(tmp_path, [TRANSECT])
    screen(tmp_path, "transects", good, codes=(0,))
    before = sorted(tmp_path.iterdir())
    for verb in ("screen", "coast", "transects"):
        result = invoke(verb, tmp_path / "s.toml", "-o", tmp_path / f"new {name}.gpkg", codes=(1,))
        assert "takes for part of an address" in result.stderr
        assert sorted(tmp_path.iterdir()) == before


@pytest.mark.parametrize(
    "name", ["x" * 300 + ".gpkg", "x" * 210 + ".gpkg", "é" * 120 + ".gpkg", "y/" * 2000 + "x.gpkg"]
)
def test_output_names_too_long_are_refused(tmp_path, name):
    screen(tmp_path, "transects", written(tmp_path, [TRANSECT]), codes=(0,))
    result = invoke("screen", tmp_path / "s.toml", "-o", tmp_path / name, codes=(1,))
    assert "too long for the disk" in result.stderr


def test_output_that_is_a_pipe_is_refused(tmp_path):
    screen(tmp_path, "transects", written(tmp_path, [TRANSECT]), codes=(0,))
    os.mkfifo(tmp_path / "pipe.gpkg")
    result = invoke("screen", tmp_path / "s.toml", "-o", tmp_path / "pipe.gpkg", "--overwrite", codes=(1,))
    assert "is a pipe or a device" in result.stderr
