"""Reading shapes of any vector file in longitude and latitude."""

import json
import sqlite3
from contextlib import closing

import geopandas
import numpy as np
import pytest
import shapely

from shelfmap.errors import LayerError, ShelfmapWarning
from shelfmap.vectors import read_table, read_vector

SHAPES = [shapely.LineString([(3, 50), (4, 51)]), shapely.Point(3, 52)]


def frame(crs="EPSG:4326", shapes=SHAPES):
    return geopandas.GeoDataFrame({"transect_id": [7, 8], "name": ["a", None]}, geometry=shapes, crs=crs)


def test_shapes_and_columns_come_back_as_written(tmp_path):
    frame().to_file(tmp_path / "a.gpkg", layer="mixed")
    data = read_vector(tmp_path / "a.gpkg")
    assert data.layer == "mixed"
    assert data.path == tmp_path / "a.gpkg"
    assert [shape.wkt for shape in data.geometry] == [shape.wkt for shape in SHAPES]
    assert data.columns["transect_id"].tolist() == [7, 8]
    assert data.columns["name"].tolist() == ["a", None]


@pytest.mark.parametrize("name", ["a.geojson", "a.fgb"])
def test_other_formats_are_read_too(tmp_path, name):
    frame().to_file(tmp_path / name)
    shapes = read_vector(tmp_path / name).geometry
    assert {shape.wkt for shape in shapes} == {shape.wkt for shape in SHAPES}


@pytest.mark.parametrize("crs", ["EPSG:3857", "EPSG:32631", "+proj=laea +lat_0=52 +lon_0=3"])
def test_any_projection_comes_back_in_degrees(tmp_path, crs):
    """1e-9 degrees: 0.1 mm, what projections there and back lose."""
    frame().to_crs(crs).to_file(tmp_path / "a.gpkg")
    data = read_vector(tmp_path / "a.gpkg")
    np.testing.assert_allclose(shapely.get_coordinates(data.geometry), shapely.get_coordinates(SHAPES), atol=1e-9)


def test_heights_are_dropped(tmp_path):
    high = [shapely.LineString([(3, 50, 9), (4, 51, 9)]), shapely.Point(3, 52, 9)]
    frame(shapes=high).to_file(tmp_path / "a.gpkg")
    assert not shapely.has_z(read_vector(tmp_path / "a.gpkg").geometry).any()


def test_rows_without_a_shape_are_left_out_and_counted(tmp_path):
    frame(shapes=[None, SHAPES[0]]).to_file(tmp_path / "a.gpkg", layer="x")
    with pytest.warns(ShelfmapWarning, match=r"a\.gpkg, layer x: 1 row\(s\) without a shape are left out"):
        data = read_vector(tmp_path / "a.gpkg")
    assert data.columns["transect_id"].tolist() == [8]
    assert data.geometry.tolist() == [SHAPES[0]]


def test_several_layers_must_be_named(tmp_path):
    path = tmp_path / "a.gpkg"
    for layer in ("north", "south"):
        frame().to_file(path, layer=layer)
    with pytest.raises(LayerError, match="holds several layers; name one of north, south"):
        read_vector(path)
    assert read_vector(path, "south").layer == "south"
    with pytest.raises(LayerError, match="has no layer 'east'; its layers are north, south"):
        read_vector(path, "east")


def test_tables_without_shapes_are_no_choice(tmp_path):
    path = tmp_path / "a.gpkg"
    frame().to_file(path, layer="drawn")
    import pyogrio

    pyogrio.write_dataframe(frame().drop(columns="geometry"), path, layer="table")
    assert read_vector(path).layer == "drawn"
    with pytest.raises(LayerError, match="layer table is a table without shapes; choose among"):
        read_vector(path, "table")
    assert read_table(path, "table")["transect_id"].tolist() == [7, 8]


def test_a_file_of_tables_only_is_refused(tmp_path):
    path = tmp_path / "a.csv"
    path.write_text("a,b\n1,2\n")
    with pytest.raises(LayerError, match="holds no shapes, only tables"):
        read_vector(path)


def test_a_file_without_coordinate_system_is_refused(tmp_path):
    path = tmp_path / "a.csv"
    path.write_text('id,WKT\n1,"POINT (3 52)"\n')
    with pytest.raises(LayerError, match=r"has no coordinate system; assign it in a GIS"):
        read_vector(path)


def test_a_drawing_without_a_place_on_earth_is_refused(tmp_path):
    """A local system: known to the file, but with no way to longitude and latitude."""
    frame(crs='LOCAL_CS["site grid",UNIT["metre",1]]').to_file(tmp_path / "a.gpkg")
    with pytest.raises(LayerError, match=r"a\.gpkg: .*save it in a system with an EPSG code"):
        read_vector(tmp_path / "a.gpkg")


def test_coordinates_that_cannot_be_in_their_system_are_refused(tmp_path):
    frame(crs="EPSG:32631", shapes=[shapely.Point(1e30, 1e30), SHAPES[1]]).to_file(tmp_path / "a.gpkg")
    with pytest.raises(LayerError, match="some points lie outside WGS 84 / UTM zone 31N"):
        read_vector(tmp_path / "a.gpkg")


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (None, ": no such file; check"),
        (b"", " cannot be read .*give a vector file that GDAL reads"),
        (b"SQLite format 3\0rest", " cannot be read .*give a vector"),
    ],
)
def test_missing_and_unreadable_files_are_refused(tmp_path, content, message):
    path = tmp_path / "a.gpkg"
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(LayerError, match=rf"a\.gpkg{message}"):
        read_vector(path)
    with pytest.raises(LayerError, match=rf"a\.gpkg{message}"):
        read_table(path, "a")


def test_a_broken_shape_is_refused(tmp_path):
    path = tmp_path / "a.geojson"
    feature = {"type": "Feature", "properties": {}, "geometry": {"type": "LineString", "coordinates": [[0, 0]]}}
    path.write_text(json.dumps({"type": "FeatureCollection", "features": [feature]}))
    with pytest.raises(LayerError, match="cannot be read"):
        read_vector(path)


def test_reading_leaves_the_file_alone(tmp_path):
    path = tmp_path / "a.gpkg"
    frame().to_file(path)
    with closing(sqlite3.connect(path)) as database:
        database.execute("PRAGMA journal_mode=DELETE")
    before = path.read_bytes()
    read_vector(path)
    assert path.read_bytes() == before
    assert [entry.name for entry in tmp_path.iterdir()] == ["a.gpkg"]
