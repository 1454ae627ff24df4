"""What is written comes back: schema, values, empties, metadata; and faults leave nothing behind."""

import json
import sqlite3
from contextlib import closing, contextmanager

import numpy as np
import pyogrio
import pytest
import shapely
from utils_layers import made_up_layer, waves_for

import shelfmap
from shelfmap.columns import LAYERS, columns_of
from shelfmap.errors import LayerError, OutputExistsError
from shelfmap.geopackage import write_layers
from shelfmap.layers import Layer
from shelfmap.vectors import read_table, read_vector
from shelfmap.words import CAUTIONS, ENUMERATIONS

WAVES = ("m2", "k1", "p0_5h")
SQL_TYPES = {"int64": "INTEGER", "float64": "REAL", "str": "TEXT", "bool": "BOOLEAN"}


def all_layers(n=5):
    return [made_up_layer(name, n, waves_for(name, WAVES)) for name in LAYERS]


def query(path, sql, *values):
    with closing(sqlite3.connect(path)) as database:
        return database.execute(sql, values).fetchall()


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    """All layers in one file."""
    path = tmp_path_factory.mktemp("layers") / "coast.gpkg"
    return write_layers(path, all_layers(), title="A run", description="Made of nothing")


@pytest.mark.parametrize("name", LAYERS)
def test_the_schema_is_the_column_table(written, name):
    columns = columns_of(name, waves_for(name, WAVES))
    sql = [(row[1], row[2]) for row in query(written, f'PRAGMA table_info("{name}")') if row[1] not in ("fid", "geom")]
    assert sql == [(column.name, SQL_TYPES[column.dtype]) for column in columns]
    told = query(
        written,
        "SELECT column_name, name, description FROM gpkg_data_columns WHERE table_name = ? ORDER BY rowid",
        name,
    )
    assert [row[:2] for row in told] == [(column.name, column.alias) for column in columns]
    for column, (_, _, description) in zip(columns, told, strict=True):
        assert description.startswith(column.meaning)
        assert not column.unit or f"Unit: {column.unit}." in description
        assert column.null_means in description


@pytest.mark.parametrize("layer", all_layers(), ids=lambda layer: layer.name)
def test_values_come_back_and_nan_is_null(written, layer):
    back = read_table(written, layer.name)
    assert list(back) == list(layer.columns)
    for column in columns_of(layer.name, layer.waves):
        np.testing.assert_array_equal(back[column.name], layer.columns[column.name])
        nulls = query(written, f'SELECT count(*) FROM "{layer.name}" WHERE "{column.name}" IS NULL')
        assert nulls == [(int(column.dtype == "float64" and column.null_means != ""),)]


@pytest.mark.parametrize("name", LAYERS)
def test_rows_are_numbered_from_one_in_order(written, name):
    assert [row[0] for row in query(written, f'SELECT fid FROM "{name}"')] == [1, 2, 3, 4, 5]
    assert query(written, "SELECT feature_count FROM gpkg_ogr_contents WHERE table_name = ?", name) == [(5,)]


def test_layers_stand_in_order_with_title_description_and_shape(written):
    rows = query(
        written, "SELECT table_name, data_type, identifier, description, srs_id FROM gpkg_contents ORDER BY rowid"
    )
    assert rows == [
        (
            name,
            "features" if kind.geometry else "attributes",
            kind.title,
            kind.description,
            4326 if kind.geometry else 0,
        )
        for name, kind in LAYERS.items()
    ]
    shapes = query(
        written, "SELECT table_name, geometry_type_name, srs_id, z, m FROM gpkg_geometry_columns ORDER BY rowid"
    )
    types = {"line": "LINESTRING", "point": "POINT"}
    assert shapes == [(name, types[kind.geometry], 4326, 0, 0) for name, kind in LAYERS.items() if kind.geometry]


def test_the_metadata_holds_title_origin_program_and_cautions(written):
    info = pyogrio.read_info(written, layer="coast_index")
    assert json.loads(info["dataset_metadata"]["GPKG_METADATA_ITEM_1"]) == {
        "title": "A run",
        "abstract": "Made of nothing",
        "software": f"shelfmap {shelfmap.__version__}",
        "cautions": CAUTIONS,
    }
    assert info["layer_metadata"]["CAUTIONS"] == CAUTIONS


def test_the_words_a_column_may_hold_are_in_the_file_with_their_meaning(written):
    for name, words in ENUMERATIONS.items():
        rows = query(
            written,
            "SELECT value, description FROM gpkg_data_column_constraints"
            " WHERE constraint_name = ? AND constraint_type = 'enum' ORDER BY rowid",
            name,
        )
        assert rows == [(word, f"{word}: {meaning}") for word, meaning in words.items()]
    bound = query(
        written, "SELECT DISTINCT column_name, constraint_name FROM gpkg_data_columns WHERE constraint_name <> ''"
    )
    assert sorted(bound) == sorted((name, name) for name in ENUMERATIONS)
    used = {value for (value,) in query(written, "SELECT status FROM transects")}
    assert used <= set(ENUMERATIONS["status"])


def test_reading_it_through_gdal_leaves_nothing_beside_it(tmp_path):
    """GDAL 3.12 writes a .aux.xml beside a GeoPackage that carries GDAL's own dataset metadata, on reading it."""
    path = write_layers(tmp_path / "a.gpkg", all_layers(), title="A run")
    for name in LAYERS:
        read_table(path, name)
        pyogrio.read_info(path, layer=name)
    assert [entry.name for entry in tmp_path.iterdir()] == ["a.gpkg"]


def test_the_file_is_sound_and_closed(written):
    assert query(written, "PRAGMA integrity_check") == [("ok",)]
    assert query(written, "PRAGMA foreign_key_check") == []
    assert query(written, "PRAGMA journal_mode") == [("delete",)]
    assert [entry.name for entry in written.parent.iterdir()] == ["coast.gpkg"]


def test_text_with_quotes_tags_and_line_ends_comes_back_unchanged(tmp_path):
    nasty = 'Robert\'); DROP TABLE "transects";-- <b>&amp;</b>\nnext\ttab é 日本 🌊'
    layer = made_up_layer("coast_index", 2, note=np.array([nasty, None], dtype=object))
    path = write_layers(tmp_path / "a.gpkg", [layer], title=nasty, description=nasty)
    assert read_table(path, "coast_index")["note"].tolist() == [nasty, None]
    ((text,),) = query(path, "SELECT metadata FROM gpkg_metadata WHERE mime_type = 'application/json'")
    assert json.loads(text)["title"] == json.loads(text)["abstract"] == nasty


def test_whole_numbers_with_gaps_stay_whole_numbers(tmp_path):
    for i, modes in enumerate([np.array([1.0, np.nan]), np.array([1, None], dtype=object)]):
        path = write_layers(tmp_path / f"{i}.gpkg", [made_up_layer("coast_index", 2, index_mode=modes)])
        assert query(path, "SELECT index_mode, typeof(index_mode) FROM coast_index") == [(1, "integer"), (None, "null")]


def test_numbers_that_differ_only_in_precision_are_stored_as_float64(tmp_path):
    layer = made_up_layer("shelf_breaks", 2, lon_deg=np.array([1, 2], dtype=np.int16), lat_deg=np.float32([0.1, 0.2]))
    back = read_table(write_layers(tmp_path / "a.gpkg", [layer]), "shelf_breaks")
    assert back["lon_deg"].tolist() == [1.0, 2.0]
    assert back["lat_deg"].tolist() == [float(np.float32(0.1)), float(np.float32(0.2))]


def test_empty_layers_keep_their_schema(tmp_path):
    path = write_layers(tmp_path / "a.gpkg", all_layers(n=0))
    assert list(read_table(path, "response")) == [column.name for column in columns_of("response")]
    assert read_vector(path, "transects").geometry.size == 0
    assert query(path, "SELECT geometry_type_name FROM gpkg_geometry_columns WHERE table_name = 'transects'") == [
        ("LINESTRING",)
    ]


def lines(*coordinates):
    out = np.empty(len(coordinates), dtype=object)
    out[:] = [shapely.LineString(pairs) for pairs in coordinates]
    return out


def test_a_line_across_180_is_written_in_two_parts_and_hits_no_box_elsewhere(tmp_path):
    geometry = lines([(170, 10), (190, 10)], [(-170, 5), (-169, 5)])
    path = write_layers(tmp_path / "a.gpkg", [made_up_layer("transects", 2, geometry=geometry)])
    _, _, hits, _ = pyogrio.raw.read(path, layer="transects", bbox=(0, -90, 10, 90))
    assert len(hits) == 0
    shapes = read_vector(path, "transects").geometry
    assert [len(shape.geoms) for shape in shapes] == [2, 1]
    assert shapes[0].length == pytest.approx(20, abs=0.1)  # the parts bulge a little northward on the ellipsoid
    assert query(path, "SELECT geometry_type_name FROM gpkg_geometry_columns") == [("MULTILINESTRING",)]
    assert query(path, "SELECT min_x, max_x FROM gpkg_contents") == [(-180.0, 180.0)]


def test_rows_without_a_shape_are_written_as_null(tmp_path):
    geometry = np.array([None, shapely.LineString(), shapely.LineString([(0, 0), (1, 1)])], dtype=object)
    path = write_layers(tmp_path / "a.gpkg", [made_up_layer("coast_index", 3, geometry=geometry)])
    assert query(path, "SELECT geom IS NULL FROM coast_index") == [(1,), (1,), (0,)]


@pytest.mark.parametrize("crs", ["EPSG:3857", "EPSG:3035", "EPSG:4258"])
def test_another_coordinate_system_is_written_by_its_code_and_reads_back_in_degrees(tmp_path, crs):
    """1e-9 degrees: 0.1 mm, what projections there and back lose."""
    layers = [made_up_layer("shelf_breaks"), made_up_layer("run")]
    path = write_layers(tmp_path / "a.gpkg", layers, crs=crs)
    assert pyogrio.read_info(path, layer="shelf_breaks")["crs"] == crs
    assert query(path, "SELECT srs_id FROM gpkg_geometry_columns") == [(int(crs[5:]),)]
    np.testing.assert_allclose(
        shapely.get_coordinates(read_vector(path).geometry), shapely.get_coordinates(layers[0].geometry), atol=1e-9
    )


@pytest.mark.parametrize(
    ("crs", "message"),
    [
        ("WGS 84", "output crs 'WGS 84' is not of the form EPSG:n"),
        ("+proj=laea", "not of the form EPSG:n"),
        ("EPSG:5773", "neither geographic nor projected"),  # a vertical system: axes would come out swapped
        ("EPSG:4978", "neither geographic nor projected"),
        ("EPSG:99999", "output coordinate system 'EPSG:99999' is unknown"),
    ],
)
def test_a_coordinate_system_without_a_known_code_is_refused(tmp_path, crs, message):
    with pytest.raises(LayerError, match=message.replace("+", r"\+")):
        write_layers(tmp_path / "a.gpkg", all_layers(), crs=crs)


def test_a_coordinate_system_that_cannot_hold_the_coast_is_refused(tmp_path):
    layer = made_up_layer("transects", 1, geometry=lines([(-170, -52), (-170, -53)]))
    with pytest.raises(LayerError, match=r"transects reaches beyond .*\(EPSG:3035\); choose"):
        write_layers(tmp_path / "a.gpkg", [layer], crs="EPSG:3035")
    assert list(tmp_path.iterdir()) == []


def test_the_same_layers_give_the_same_bytes_when_the_date_is_given(tmp_path, monkeypatch):
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1700000000")
    one = write_layers(tmp_path / "1.gpkg", all_layers()).read_bytes()
    other = write_layers(tmp_path / "2.gpkg", all_layers()).read_bytes()
    assert one == other
    assert {row[0] for row in query(tmp_path / "1.gpkg", "SELECT last_change FROM gpkg_contents")} == {
        "2023-11-14T22:13:20.000Z"
    }
    assert pyogrio.get_gdal_config_option("OGR_CURRENT_DATE") is None


def test_a_date_that_is_no_number_is_refused(tmp_path, monkeypatch):
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "yesterday")
    with pytest.raises(LayerError, match="SOURCE_DATE_EPOCH = 'yesterday' is no whole number of seconds"):
        write_layers(tmp_path / "a.gpkg", all_layers())


def test_missing_and_unknown_columns_are_named():
    layer = made_up_layer("run", 2)
    columns = {"Topic" if name == "topic" else name: values for name, values in layer.columns.items()}
    with pytest.raises(LayerError, match=r"layer run: missing columns \['topic'\], unknown columns \['Topic'\]"):
        Layer(name="run", columns=columns)


def test_a_column_of_a_wave_not_announced_is_unknown():
    layer = made_up_layer("coast_index", 2, ("m2",))
    with pytest.raises(LayerError, match=r"missing columns \[\], unknown columns \['gain_m2', "):
        Layer(name="coast_index", columns=layer.columns, geometry=layer.geometry)


def test_columns_of_other_lengths_or_shapes_are_refused():
    with pytest.raises(LayerError, match=r"1-D and of one length, but are .*'value': \(3,\)"):
        made_up_layer("run", 2, value=np.array(["a", "b", "c"]))
    with pytest.raises(LayerError, match="1-D and of one length"):
        made_up_layer("coast_index", 2, geometry=lines([(0, 0), (1, 1)]))
    with pytest.raises(LayerError, match="1-D and of one length"):
        Layer(name="run", columns={name: np.array([["a"]]) for name in ("topic", "name", "value")})


def test_geometry_must_be_there_for_shapes_and_not_for_tables():
    columns = made_up_layer("coast_index", 1).columns
    with pytest.raises(LayerError, match="coast_index: line geometry must be given"):
        Layer(name="coast_index", columns=columns)
    with pytest.raises(LayerError, match="run: no geometry must be given"):
        made_up_layer("run", 1, geometry=lines([(0, 0), (1, 1)]))


BAD_VALUES = [
    ("transect_id", np.array([1.5, 2.0]), "column transect_id: values are not all int64"),
    ("transect_id", np.array([1.0, np.nan]), "column transect_id: 1 empty value"),
    ("transect_id", np.array(["1", "2"]), "column transect_id: <U1 given, int64 wanted"),
    ("transect_id", np.array([True, False]), "column transect_id: bool given, int64 wanted"),
    ("index_max", np.array([0.5, np.inf]), r"column index_max: 1 infinite value\(s\); give NaN"),
    ("index_max", np.array([0.5, -np.inf], dtype=object), r"column index_max: 1 infinite value"),
    ("status", np.array(["ok", None], dtype=object), "column status: 1 empty value"),
    ("status", np.array(["ok", "OK"]), r"column status: \['OK'\] not among the words ok, no_break"),
    ("note", np.array([1.0, 2.0]), "column note: float64 given, str wanted"),
    ("note", np.array(["a", 2], dtype=object), "column note: values are not all str"),
    ("note", np.array(["a", "\ud800"], dtype=object), "column note: values are not all str"),
]


@pytest.mark.parametrize(("name", "values", "message"), BAD_VALUES)
def test_bad_values_are_refused_by_column_and_nothing_is_left(tmp_path, name, values, message):
    layer = made_up_layer("coast_index", 2, **{name: values})
    with pytest.raises(LayerError, match=f"layer coast_index, {message}"):
        write_layers(tmp_path / "a.gpkg", [made_up_layer("run"), layer])
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("shape", "message"),
    [
        (shapely.Point(0, 0), "only line geometry belongs there"),
        (shapely.LineString([(0, 0), (1, np.inf)]), "holds NaN, infinite"),
        (shapely.LineString([(0, 0), (1, 90.5)]), "latitudes beyond 90"),
        (shapely.LineString([(170, 0), (-170, 0)]), "unwrap its longitudes"),
    ],
)
def test_bad_shapes_are_refused(tmp_path, shape, message):
    layer = made_up_layer("coast_index", 1, geometry=np.array([shape], dtype=object))
    with pytest.raises(LayerError, match=message):
        write_layers(tmp_path / "a.gpkg", [layer])
    assert list(tmp_path.iterdir()) == []


def test_not_a_number_among_coordinates_is_refused(tmp_path):
    """GEOS raises the processor's invalid flag on NaN, which NumPy would report as a warning of its own."""
    with np.errstate(invalid="ignore"):
        layer = made_up_layer("coast_index", 1, geometry=lines([(0, 0), (1, np.nan)]))
        with pytest.raises(LayerError, match="coast_index: geometry holds NaN"):
            write_layers(tmp_path / "a.gpkg", [layer])
    assert list(tmp_path.iterdir()) == []


def test_no_layers_and_layers_given_twice_are_refused(tmp_path):
    with pytest.raises(LayerError, match="give at least one, and each once"):
        write_layers(tmp_path / "a.gpkg", [])
    with pytest.raises(LayerError, match=r"layers \['run', 'run'\]; give"):
        write_layers(tmp_path / "a.gpkg", [made_up_layer("run"), made_up_layer("run")])


def test_inputs_stay_as_they_are(tmp_path):
    layer = made_up_layer("transects", 2, WAVES, geometry=lines([(179, 0), (181, 0)], [(0, 0), (1, 1)]))
    shapes, before = layer.geometry.copy(), {name: values.copy() for name, values in layer.columns.items()}
    write_layers(tmp_path / "a.gpkg", [layer], crs="EPSG:3857")
    assert all(one is other for one, other in zip(layer.geometry, shapes, strict=True))
    for name, values in before.items():
        np.testing.assert_array_equal(layer.columns[name], values)


def test_an_older_file_is_replaced_only_when_asked(tmp_path):
    path = write_layers(tmp_path / "a.gpkg", all_layers())
    before = path.read_bytes()
    with pytest.raises(OutputExistsError, match="exists already"):
        write_layers(path, [made_up_layer("run")])
    assert path.read_bytes() == before
    write_layers(path, [made_up_layer("run")], overwrite=True)
    assert [name for name, _ in pyogrio.list_layers(path)] == ["run"]


def test_an_older_file_open_elsewhere_stays_and_the_message_says_so(tmp_path):
    path = write_layers(tmp_path / "a.gpkg", all_layers())
    before = path.read_bytes()
    with closing(sqlite3.connect(path, isolation_level=None)) as other:
        other.execute("BEGIN")
        other.execute("SELECT * FROM run").fetchone()
        with pytest.raises(LayerError, match="is in use by another program"):
            write_layers(path, [made_up_layer("run")], overwrite=True)
    assert path.read_bytes() == before
    assert [entry.name for entry in tmp_path.iterdir()] == ["a.gpkg"]


@contextmanager
def files_up_to(n_bytes):
    """Let no file of this process grow beyond a size, as on a full disk."""
    resource = pytest.importorskip("resource", reason="limits of a process are POSIX only")
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (n_bytes, hard))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))


@pytest.mark.parametrize("n_bytes", [10_000, 130_000, 200_000])
def test_a_disk_that_fills_up_leaves_the_older_file_and_no_part(tmp_path, n_bytes):
    """At the first page, while the tables are made, and among the rows."""
    path = write_layers(tmp_path / "a.gpkg", [made_up_layer("run")])
    before = path.read_bytes()
    layers = all_layers(n=2000)
    with (
        files_up_to(n_bytes),
        pytest.raises(LayerError, match=r"a\.gpkg cannot be written \(.*\); make room on the disk"),
    ):
        write_layers(path, layers, overwrite=True)
    assert path.read_bytes() == before
    assert [entry.name for entry in tmp_path.iterdir()] == ["a.gpkg"]


def test_rows_that_get_lost_on_the_way_are_noticed(tmp_path, monkeypatch):
    write = pyogrio.write_arrow
    monkeypatch.setattr(pyogrio, "write_arrow", lambda table, *args, **kwargs: write(table.slice(1), *args, **kwargs))
    with pytest.raises(LayerError, match="layer run: 4 of 5 rows arrived"):
        write_layers(tmp_path / "a.gpkg", [made_up_layer("run")])
    assert list(tmp_path.iterdir()) == []


def test_a_name_in_capitals_and_with_spaces_is_written(tmp_path):
    path = write_layers(tmp_path / "Küste ?#1.GPKG", [made_up_layer("run")])
    assert read_table(path, "run")["topic"].size == 5


def test_a_missing_layer_is_named(written):
    with pytest.raises(LayerError, match="has no layer 'sites'; its layers are coast_index, transects"):
        read_table(written, "sites")
