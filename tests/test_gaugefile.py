"""Tide gauges read from text and vector files: what is read as meant, and what is refused and how."""

import os
import warnings

import geopandas
import numpy as np
import pytest
import shapely

from shelfmap.demo import write_demo
from shelfmap.errors import LayerError, SettingsError, ShelfmapWarning
from shelfmap.gaugefile import read_gauges
from shelfmap.gauges import Gauges
from shelfmap.settings import GaugeSettings

FIVE = ("M2", "S2", "N2", "K1", "O1")
HEADING = "id,lon,lat,M2_amp_m,M2_phase_deg"
TWO = f"{HEADING}\nA,-1.5,40.25,0.5,90\nB,-1.25,40.5,1.5,270.5\n"


def saved(folder, text, name="g.csv", encoding="utf-8"):
    (folder / name).write_text(text, encoding=encoding, newline="")
    return folder / name


def read(path, constituents=("M2",), **settings):
    return read_gauges(GaugeSettings(file=path, **settings), constituents)


def points(folder, name="g.gpkg", crs="EPSG:4326", shapes=None, **columns):
    columns = columns or {"id": ["A", "B"], "M2_amp_m": [0.5, 1.5], "M2_phase_deg": [90.0, 270.5]}
    shapes = shapes or [shapely.Point(-1.5, 40.25), shapely.Point(-1.25, 40.5)]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # that a shapefile shortens names
        geopandas.GeoDataFrame(columns, geometry=shapes, crs="EPSG:4326").to_crs(crs).to_file(folder / name)
    return folder / name


def assert_two(gauges, tolerance_deg=0.0):
    assert gauges.name.tolist() == ["A", "B"]
    assert gauges.constituents == ("M2",)
    np.testing.assert_allclose(gauges.lon_deg, [-1.5, -1.25], rtol=0, atol=tolerance_deg)
    np.testing.assert_allclose(gauges.lat_deg, [40.25, 40.5], rtol=0, atol=tolerance_deg)
    np.testing.assert_allclose(gauges.amplitude_m, [[0.5], [1.5]], rtol=1e-15)
    np.testing.assert_array_equal(gauges.phase_deg, [[90.0], [270.5]])


# ---- the arrays


def made(**more):
    arrays = {
        "name": np.array(["A", "B", "C"], dtype=object),
        "lon_deg": np.array([1.0, 2.0, 3.0]),
        "lat_deg": np.array([50.0, 51.0, 52.0]),
        "constituents": ("M2", "K1"),
        "amplitude_m": np.array([[1.0, 0.1], [2.0, np.nan], [3.0, 0.3]]),
        "phase_deg": np.array([[0.0, 10.0], [90.0, 20.0], [np.nan, 30.0]]),
    }
    return Gauges(**(arrays | more))


def test_constants_turn_with_a_late_lag_and_are_empty_where_either_is():
    gauges = made()
    np.testing.assert_allclose(gauges.constants("M2")[:2], [1.0, 2.0j], atol=1e-15)
    assert np.isnan(gauges.constants("M2")[2])
    assert np.isnan(gauges.constants("K1")).tolist() == [False, True, False]
    hour_rad = 0.3  # high water comes when w t has reached the lag
    late = (gauges.constants("K1")[0] * np.exp(-1j * np.radians(10.0))).real
    assert late == pytest.approx(0.1)
    assert (gauges.constants("K1")[0] * np.exp(-1j * hour_rad)).real < late


def test_constants_of_another_constituent_are_refused():
    with pytest.raises(LayerError, match="the gauges have no S2; they have M2, K1"):
        made().constants("S2")


@pytest.mark.parametrize(
    ("index", "names"),
    [([2, 0], ["C", "A"]), (slice(1, None), ["B", "C"]), (np.array([True, False, True]), ["A", "C"]), ([], [])],
)
def test_rows_are_those_asked_for_in_their_order(index, names):
    gauges = made().rows(index)
    assert gauges.name.tolist() == names
    assert len(gauges) == len(names)
    assert [dict(zip("ABC", made().lat_deg, strict=True))[name] for name in names] == gauges.lat_deg.tolist()
    assert gauges.amplitude_m.shape == gauges.phase_deg.shape == (len(names), 2)
    with pytest.raises(ValueError, match="read-only"):
        gauges.lon_deg[:] = 0.0


# ---- files that are good

SEMICOLONS = TWO.replace(",", ";")
DRESSES = {
    "plain": (TWO, {}, "utf-8"),
    "byte order mark": (TWO, {}, "utf-8-sig"),
    "semicolons": (SEMICOLONS, {}, "utf-8"),
    "semicolons and mark": (SEMICOLONS, {}, "utf-8-sig"),
    "tabs": (TWO.replace(",", "\t"), {}, "utf-8"),
    "lines of another system": (TWO.replace("\n", "\r\n"), {}, "utf-8"),
    "no last line end": (TWO.rstrip(), {}, "utf-8"),
    "blank lines": (TWO.replace("\n", "\n\n,,,,\n"), {}, "utf-8"),
    "spaces": (TWO.replace(",", " , "), {}, "utf-8"),
    "quotes": (TWO.replace("A,", '"A",'), {}, "utf-8"),
    "other letters": (TWO.replace("M2_amp_m", "m2_AMP_m").replace("lon,lat", "LON,Lat"), {}, "utf-8"),
    "longitudes to 360": (TWO.replace("-1.5,", "358.5,").replace("-1.25,", "358.75,"), {}, "utf-8"),
    "phases elsewhere": (TWO.replace(",90", ",-270").replace(",270.5", ",630.5"), {}, "utf-8"),
    "columns more": (TWO.replace("\n", ",=1+1,é\n").replace("=1+1", "note", 1), {}, "utf-8"),
    "a column without a name": (TWO.replace("\n", ",\n"), {}, "utf-8"),
    "names mapped": (
        "code,x,y,h M2,g M2\nA,-1.5,40.25,0.5,90\nB,-1.25,40.5,1.5,270.5\n",
        {"id_column": "code", "lon_column": "x", "lat_column": "y", "amplitude_column": "h {name}",
         "phase_column": "g {name}"},
        "utf-8",
    ),
    "centimetres": (TWO.replace(",0.5,", ",50,").replace(",1.5,", ",150,"), {"amplitude_unit": "cm"}, "utf-8"),
    "millimetres": (TWO.replace(",0.5,", ",500,").replace(",1.5,", ",1500,"), {"amplitude_unit": "mm"}, "utf-8"),
    "feet": (
        TWO.replace(",0.5,", f",{0.5 / 0.3048},").replace(",1.5,", f",{1.5 / 0.3048},"),
        {"amplitude_unit": "ft"},
        "utf-8",
    ),
}  # fmt: skip


@pytest.mark.parametrize("dress", DRESSES)
def test_two_gauges_in_any_dress(tmp_path, dress):
    text, settings, encoding = DRESSES[dress]
    assert_two(read(saved(tmp_path, text, encoding=encoding), **settings))


def test_names_of_text_files(tmp_path):
    for name in ("G.CSV", "g.txt", "g.tsv"):
        assert_two(read(saved(tmp_path, TWO, name=name)))


@pytest.mark.parametrize(
    ("name", "crs", "tolerance_deg"),
    [
        ("g.gpkg", "EPSG:4326", 0.0),
        ("g.gpkg", "EPSG:32630", 1e-9),
        ("g.geojson", "EPSG:4326", 0.0),
        ("g.geojson", "EPSG:32630", 1e-9),
        ("g.shp", "EPSG:3857", 1e-9),
    ],
)
def test_points_of_vector_files(tmp_path, name, crs, tolerance_deg):
    settings = {"phase_column": "{name}_phase_d"} if name == "g.shp" else {}  # names of ten characters
    assert_two(read(points(tmp_path, name, crs), **settings), tolerance_deg)


def test_points_count_more_than_columns_of_coordinates(tmp_path):
    path = points(tmp_path, id=["A", "B"], lon=[9.0, 9.0], M2_amp_m=[0.5, 1.5], M2_phase_deg=[90.0, 270.5])
    assert_two(read(path))


def test_a_vector_file_may_hold_text_gaps_parts_and_longitudes_to_360(tmp_path):
    path = points(
        tmp_path,
        shapes=[shapely.MultiPoint([(203.0, 60.0)]), shapely.Point(181.0, 61.0)],
        id=[7, 8], M2_amp_m=["0.5", None], M2_phase_deg=[np.nan, 3.0],
    )  # fmt: skip
    gauges = read(path)
    assert gauges.name.tolist() == ["7", "8"]
    np.testing.assert_array_equal(gauges.lon_deg, [-157.0, -179.0])
    np.testing.assert_array_equal(gauges.amplitude_m[:, 0], [0.5, np.nan])
    np.testing.assert_array_equal(gauges.phase_deg[:, 0], [np.nan, 3.0])


def test_a_layer_is_chosen(tmp_path):
    points(tmp_path)
    frame = geopandas.GeoDataFrame({"id": ["C"]}, geometry=[shapely.Point(0, 0)], crs="EPSG:4326")
    frame.to_file(tmp_path / "g.gpkg", layer="other")
    assert_two(read(tmp_path / "g.gpkg", layer="g"))
    with pytest.raises(LayerError, match="name one of g, other"):
        read(tmp_path / "g.gpkg")


def test_values_may_be_missing(tmp_path):
    text = f"{HEADING}\nA,1,2,,90\nB,1,2,0.5,\nC,1,2,NaN,NA\nD,1,2\nE,1,2,0,0\n"
    gauges = read(saved(tmp_path, text))
    np.testing.assert_array_equal(gauges.amplitude_m[:, 0], [np.nan, 0.5, np.nan, np.nan, 0.0])
    np.testing.assert_array_equal(gauges.phase_deg[:, 0], [90.0, np.nan, np.nan, np.nan, 0.0])
    assert np.isnan(gauges.constants("M2")).tolist() == [True, True, True, True, False]


def test_phases_are_from_0_up_to_360(tmp_path):
    given = [0, 360, -1, 719, -720, -1e-17, 359.9]
    text = HEADING + "".join(f"\nA{n},1,2,0.5,{value}" for n, value in enumerate(given))
    np.testing.assert_array_equal(read(saved(tmp_path, text)).phase_deg[:, 0], [0, 0, 359, 359, 0, 0, 359.9])


def test_two_gauges_may_stand_at_the_same_place(tmp_path):
    assert len(read(saved(tmp_path, f"{HEADING}\nA,1,2,0.5,9\nB,1,2,0.5,9\n"))) == 2


# ---- identities


def test_gauges_without_an_identity_are_numbered(tmp_path):
    assert read(saved(tmp_path, "lon,lat,M2_amp_m,M2_phase_deg\n1,2,3,4\n5,6,7,8\n")).name.tolist() == ["1", "2"]
    assert read(saved(tmp_path, f"{HEADING}\n007,1,2,3,4\n,1,2,3,4\n")).name.tolist() == ["007", "2"]


def test_identities_that_stand_twice_get_a_number_no_other_has(tmp_path):
    path = saved(tmp_path, HEADING + "".join(f"\n{name},1,2,3,4" for name in ("A", "A-2", "A", "B", "A")))
    with pytest.warns(ShelfmapWarning, match="'A' stand twice or more"):
        names = read(path).name.tolist()
    assert names == ["A", "A-2", "A-3", "B", "A-4"]


def test_whole_numbers_with_gaps_stay_whole(tmp_path):
    path = points(tmp_path, id=[5, None], M2_amp_m=[0.5, 1.5], M2_phase_deg=[90.0, 270.5])
    assert read(path).name.tolist() == ["5", "2"]


# ---- constituents that are not there


def test_constituents_without_columns_or_values_are_left_out_with_a_word(tmp_path):
    text = "id,lon,lat,S2_amp_m,S2_phase_deg,M2_amp_m,M2_phase_deg,K1_amp_m,K1_phase_deg\nA,1,2,0.2,5,0.5,9,,\n"
    with pytest.warns(ShelfmapWarning) as caught:
        gauges = read(saved(tmp_path, text), FIVE)
    assert gauges.constituents == ("M2", "S2")
    np.testing.assert_array_equal(gauges.amplitude_m, [[0.5, 0.2]])
    np.testing.assert_array_equal(gauges.phase_deg, [[9.0, 5.0]])
    said = [str(warning.message) for warning in caught]
    assert len(said) == 2
    assert said[0].endswith("N2, O1 left out of the gauges: no column '{name}_amp_m'")
    assert said[1].endswith("K1 left out of the gauges: no amplitude in their columns")
    assert {warning.filename for warning in caught} == {__file__}


def test_amplitudes_without_phases_are_kept_with_a_word(tmp_path):
    path = saved(tmp_path, "id,lon,lat,M2_amp_m,M2_phase_d\nA,1,2,0.5,9\n")
    with pytest.warns(ShelfmapWarning, match="has no phases of M2.*the closest 'M2_phase_d'.*gauges.phase_column"):
        gauges = read(path)
    np.testing.assert_array_equal(gauges.amplitude_m, [[0.5]])
    np.testing.assert_array_equal(gauges.phase_deg, [[np.nan]])


# ---- files that are bad


def row(text):
    return f"{TWO}{text}\n"


REFUSED = {
    "nothing": ("", "is empty; give a heading"),
    "blank lines": ("\n\n , \n", "is empty; give a heading"),
    "a heading alone": (HEADING + "\n", "holds no gauges"),
    "no amplitude anywhere": (f"{HEADING}\nA,1,2,,5\n", "the columns 'M2_amp_m' are empty"),
    "negative amplitude": (row("C,1,2,-0.5,4"), "line 4: 'M2_amp_m' is '-0.5', allowed are 0 to 20 m"),
    "infinite amplitude": (row("C,1,2,inf,4"), "line 4: 'M2_amp_m' is 'inf', allowed are 0 to 20 m"),
    "absurd amplitude": (row("C,1,2,20.1,4"), "line 4: 'M2_amp_m' is '20.1', allowed .*amplitude_unit = 'm'"),
    "missing as -999": (row("C,1,2,-999,4"), "'-999', allowed are 0 to 20 m; .*leave cells without a value empty"),
    "text in amplitudes": (row("C,1,2,high,4"), "line 4: 'M2_amp_m' is 'high', no number"),
    "grouped digits": (row("C,1,2,1_0,4"), "line 4: 'M2_amp_m' is '1_0', no number"),
    "text in phases": (row("C,1,2,1,late"), "line 4: 'M2_phase_deg' is 'late', no number"),
    "infinite phase": (row("C,1,2,1,-inf"), "line 4: 'M2_phase_deg' is '-inf', allowed"),
    "missing phase as -999": (row("C,1,2,1,-999"), "line 4: 'M2_phase_deg' is '-999', allowed are -720 to 720"),
    "text in latitudes": (row("C,1,2N,1,4"), "line 4: 'lat' is '2N', no number"),
    "latitude beyond the pole": (row("C,1,90.5,1,4"), "line 4: 'lat' is '90.5', allowed are -90 to 90 degrees"),
    "metres for degrees": (row("C,500000,40,1,4"), "line 4: 'lon' is '500000', allowed are -360 to 360 degrees"),
    "no latitude": (row("C,1,,1,4"), "line 4: 'lat' is '', no coordinate; give it, or delete the row"),
    "no longitude": (row("C,nan,1,1,4"), "line 4: 'lon' is 'nan', no coordinate"),
    "lines counted with blanks": (TWO.replace("\n", "\n\n") + "C,1,2,x,4", "line 7: 'M2_amp_m' is 'x'"),
    "decimal commas": (row("C,1,5,2,5,1,4"), "line 4: has 7 values for 5 columns; write numbers with a decimal point"),
    "decimal comma": (SEMICOLONS + "C;1,5;2;1;4", "line 4: 'lon' is '1,5', no number; write .* decimal point"),
    "open quote": (row('"C,1,2,1,4'), "mend the quotes there"),
    "quote before text": (row('"C"x,1,2,1,4'), "line 4: .*mend the quotes there"),
    "column twice": (TWO.replace("id,", "lat,"), "two columns are called 'lat'; rename one"),
    "zeros": (TWO.replace("A", "\0"), "is no text in UTF-8"),
    "control characters": (row("C,1,2,\x1b[2J,4"), r"'M2_amp_m' is '\\x1b\[2J', no number"),
    "a long value": (row(f"C,1,2,{'x' * 5000},4"), r"is 'x{39}\.\.\., no number"),
    "too long a value": (row(f"C,1,2,{'x' * 200_000},4"), "field larger than field limit"),
}  # fmt: skip


@pytest.mark.parametrize("fault", REFUSED)
def test_a_bad_file_is_refused_in_one_sentence(tmp_path, fault):
    text, message = REFUSED[fault]
    path = saved(tmp_path, text)
    with pytest.raises(LayerError, match=message) as caught:
        read(path)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)
    assert len(str(caught.value)) < 300 + len(str(path))


BAD_COLUMNS = {
    "no longitudes": (
        "id,longitude,lat,M2_amp_m\n", {},
        "has no column 'lon'; its columns are 'id', 'longitude', 'lat', 'M2_amp_m', the closest 'longitude'; name the "
        "right one as gauges.lon_column",
    ),
    "no latitudes": ("id,lon,Latit.,M2_amp_m\n", {}, "no column 'lat'.*closest 'Latit.'.*as gauges.lat_column"),
    "nothing alike": ("a,b\n", {}, "no column 'lon'; its columns are 'a', 'b'; name the right one"),
    "identities that were named": (HEADING + "\n", {"id_column": "code"}, "no column 'code'.*as gauges.id_column"),
    "alike twice": ("id,LON,Lon,lat,M2_amp_m\n", {}, "'LON', 'Lon' are all like 'lon'"),
    "no constituent": (
        "id,lon,lat,M2_hight,K2_amp_m\n", {},
        "no amplitudes of M2, S2, N2, K1, O1, no column 'M2_amp_m' or alike; .*the closest 'K2_amp_m'.*"
        "as gauges.amplitude_column",
    ),
    "a hundred columns": (",".join(f"c{n}" for n in range(100)) + "\n", {}, r"'c29', \.\.\.; name"),
}  # fmt: skip


@pytest.mark.parametrize("fault", BAD_COLUMNS)
def test_columns_that_are_not_there_are_named_with_the_setting(tmp_path, fault):
    heading, settings, message = BAD_COLUMNS[fault]
    path = saved(tmp_path, heading + ",".join("1" * len(heading.split(","))) + "\n")
    with pytest.raises(SettingsError, match=message) as caught:
        read(path, FIVE, **settings)
    assert "\n" not in str(caught.value)


def test_an_exact_name_counts_more_than_one_alike(tmp_path):
    assert_two(read(saved(tmp_path, TWO.replace("\n", ",9\n").replace("deg,9", "deg,LAT"))))


def test_files_that_are_no_text(tmp_path):
    (tmp_path / "latin.csv").write_bytes(TWO.replace("A", "é").encode("latin-1"))
    (tmp_path / "wide.csv").write_text(TWO, encoding="utf-16")
    (tmp_path / "folder.csv").mkdir()
    os.mkfifo(tmp_path / "pipe.csv")
    for name, message in {
        "latin.csv": "is no text in UTF-8; save it as UTF-8",
        "wide.csv": "is no text in UTF-8; save it as UTF-8",
        "folder.csv": "no such file",
        "none.csv": "no such file; check gauges.file",
        "none.gpkg": "no such file",
        "pipe.csv": "is a pipe or a device",
    }.items():
        with pytest.raises(LayerError, match=message):
            read(tmp_path / name)


def test_a_file_must_be_named_and_constituents_be_asked_for(tmp_path):
    with pytest.raises(SettingsError, match=r"gauges.file is not given; name a CSV"):
        read_gauges(GaugeSettings(), FIVE)
    with pytest.raises(SettingsError, match="no constituents are asked of the gauges"):
        read(saved(tmp_path, TWO), ())


def test_text_has_no_layers(tmp_path):
    with pytest.raises(SettingsError, match=r"gauges.layer = 'g': .* is text, which has no layers; leave it out"):
        read(saved(tmp_path, TWO), layer="g")


@pytest.mark.parametrize(
    ("shapes", "columns", "message"),
    [
        ([shapely.Point(0, 0), shapely.LineString([(0, 0), (1, 1)])], {}, "row 2: is a LineString; give each gauge as"),
        ([shapely.MultiPoint([(0, 0), (1, 1)]), shapely.Point(0, 0)], {}, "row 1: is a MultiPoint; give each gauge as"),
        (None, {"M2_amp_m": [0.5, -1.0]}, "row 2: 'M2_amp_m' is -1.0, allowed are 0 to 20 m"),
        (None, {"M2_amp_m": [np.inf, 1.0]}, "row 1: 'M2_amp_m' is inf, allowed are 0 to 20 m"),
        (None, {"M2_amp_m": ["0.5", "x"]}, "row 2: 'M2_amp_m' is 'x', no number"),
    ],
)
def test_a_bad_vector_file_is_refused_in_one_sentence(tmp_path, shapes, columns, message):
    columns = {"id": ["A", "B"], "M2_amp_m": [0.5, 1.5], "M2_phase_deg": [90.0, 270.5]} | columns
    with pytest.raises(LayerError, match=message):
        read(points(tmp_path, shapes=shapes, **columns))


def test_a_vector_file_without_rows_is_refused(tmp_path):
    geopandas.GeoDataFrame({"id": []}, geometry=[], crs="EPSG:4326").to_file(tmp_path / "g.geojson")
    with pytest.raises(LayerError, match="holds no gauges"):
        read(tmp_path / "g.geojson")


# ---- files of the repository


def test_the_vendored_gauges_are_read_whole(repository):
    gauges = read(repository / "tests" / "data" / "gauges.csv", FIVE)
    assert gauges.constituents == FIVE
    assert len(gauges) == len(set(gauges.name)) == 598
    known = np.isfinite([gauges.constants(name) for name in FIVE]).sum(axis=1)
    assert known.tolist() == [598, 598, 598, 597, 598]
    first = {"M2": 0.0943 * np.exp(1j * np.radians(100.5)), "O1": 0.0156 * np.exp(1j * np.radians(278.0))}
    assert gauges.name[0] == "A0000"
    for name, value in first.items():
        assert gauges.constants(name)[0] == pytest.approx(value)


def test_the_gauges_of_the_demo_are_read_with_default_settings(tmp_path):
    path = write_demo(tmp_path)[1]
    with pytest.warns(ShelfmapWarning, match="N2, K1, O1 left out of the gauges"):
        gauges = read(path, FIVE)
    assert (gauges.name[0], gauges.constituents, len(gauges)) == ("D01", ("M2", "S2"), 12)
    assert np.isfinite(gauges.constants("M2")).all()
