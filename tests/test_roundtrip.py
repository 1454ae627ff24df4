"""Layers taken through a GIS and back: the coast, the transects and the breaks, edited as people edit them."""

import geopandas
import numpy as np
import pytest
import shapely
from utils_pipeline import SHELF, settings_for, small_coast

from shelfmap.demo import write_demo
from shelfmap.errors import CoastError, LayerError, SettingsError, ShelfmapWarning, TransectError
from shelfmap.pipeline import screen, write_coast, write_transects
from shelfmap.settings import Settings
from shelfmap.vectors import read_table, read_vector

NUMBERS = ("shelf_width_km", "mean_depth_m", "period1_h", "q1", "gain_m2", "damped_gain_m2")


@pytest.fixture(scope="module")
def demo(tmp_path_factory):
    """Folder with the demo's results (demo.gpkg), its coast and its transects to edit."""
    folder = tmp_path_factory.mktemp("demo")
    settings = Settings.from_toml(write_demo(folder)[-1])
    screen(settings)
    write_coast(settings, folder / "coast.gpkg")
    write_transects(settings, folder / "lines.gpkg")
    return folder


def again(demo, folder, **tables):
    """Screen the demo into another folder with files given by hand."""
    content = {
        "grid": {"path": str(demo / "demo.tif"), "positive": "up"},
        "transects": {"spacing_km": 20.0},
        "response": {"periods_h": [1.0, 3.0]},
        "output": {"path": "out.gpkg"},
    }
    for name, table in tables.items():
        content[name] = {**content.get(name, {}), **table}
    run = screen(Settings.from_dict(content, folder=folder), overwrite=True)
    return read_table(run.path, "transects")


def by_id(table, ids):
    rows = {number: row for row, number in enumerate(table["transect_id"])}
    return [rows[number] for number in ids]


def assert_same_transects(one, two, ids):
    """1e-4: the lines come back as chords of 10 km between coordinates, and their shore is sought anew to 10 um;
    samples move by centimetres in cells of 5 km, and the break, a kink found on them, by metres (1 m of depth on the
    steepest slope of the demo).
    """
    a, b = by_id(one, ids), by_id(two, ids)
    assert one["status"][a].tolist() == two["status"][b].tolist()
    for name in NUMBERS:
        np.testing.assert_allclose(two[name][b], one[name][a], rtol=1e-4, err_msg=name)
    np.testing.assert_allclose(two["break_depth_m"][b], one["break_depth_m"][a], atol=1.0)
    np.testing.assert_allclose(two["fetch_km"][b], one["fetch_km"][a], atol=1e-6)
    np.testing.assert_allclose(two["lat_deg"][b], one["lat_deg"][a], atol=1e-6)  # 0.1 m


# ---- transects


def test_transects_that_nobody_touched_come_back_with_the_same_results(demo, tmp_path):
    first = read_table(demo / "demo.gpkg", "transects")
    second = again(demo, tmp_path, transects={"file": str(demo / "lines.gpkg")})
    assert second["transect_id"].tolist() == first["transect_id"].tolist()
    assert_same_transects(first, second, first["transect_id"])


@pytest.mark.parametrize("crs", ["EPSG:3857", "EPSG:32727"])
def test_transects_saved_in_another_system_come_back_the_same(demo, tmp_path, crs):
    """As a shapefile, too, which is what many people still save; it keeps ten letters of a name."""
    lines = geopandas.read_file(demo / "lines.gpkg").to_crs(crs).rename(columns={"transect_id": "transect_i"})
    lines[["transect_i", "geometry"]].to_file(tmp_path / "lines.shp")
    first = read_table(demo / "demo.gpkg", "transects")
    second = again(demo, tmp_path, transects={"file": "lines.shp"})
    assert_same_transects(first, second, first["transect_id"])


def test_edited_transects_keep_their_identities_and_the_others_their_results(demo, tmp_path):
    """Deleted, moved, reordered, turned round, made multi-part, and one added without an identity."""
    lines = geopandas.read_file(demo / "lines.gpkg").set_index("transect_id", drop=False)
    lines = lines.drop(index=[3, 50])
    lines.loc[9, "geometry"] = shapely.affinity.translate(lines.geometry[9], 0.0, -0.08)
    lines.loc[12, "geometry"] = shapely.reverse(lines.geometry[12])
    lines.loc[80, "geometry"] = shapely.reverse(lines.geometry[80])
    points = shapely.get_coordinates(lines.geometry[70])
    lines.loc[70, "geometry"] = shapely.MultiLineString([points[:2], points[1:]])
    added = lines.loc[[76]].assign(transect_id=np.nan, geometry=shapely.affinity.translate(lines.geometry[76], 0, 0.05))
    edited = geopandas.pd.concat([lines.iloc[::-1], added], ignore_index=True)
    edited["transect_id"] = edited["transect_id"].astype("Int64")
    edited["surveyed by"] = "me"
    edited.to_file(tmp_path / "edited.gpkg", layer="mine")
    first = read_table(demo / "demo.gpkg", "transects")
    second = again(demo, tmp_path, transects={"file": "edited.gpkg", "layer": "mine"})
    new = set(second["transect_id"]) - set(first["transect_id"])
    assert set(first["transect_id"]) - set(second["transect_id"]) == {3, 50}
    assert new == {len(first["transect_id"]) + 1}
    assert_same_transects(first, second, sorted(set(second["transect_id"]) - new - {9}))
    (moved,) = by_id(second, [9])
    assert second["lat_deg"][moved] < first["lat_deg"][by_id(first, [9])[0]] - 0.05
    assert second["status"][moved] == "ok"
    assert second["shelf_width_km"][by_id(second, new)[0]] < 30  # on the narrow shelf, where it was put


def test_lines_sketched_from_land_without_identities_are_numbered(tmp_path, write_grid):
    """Two clicks each, 20 km inland to 150 km off: shore, width and bearing follow from the depths under them."""
    lines = [shapely.LineString([(0.25, lat), (-1.8, lat)]) for lat in (39.5, 40.0, 40.5)]
    geopandas.GeoDataFrame(geometry=lines, crs="EPSG:4326").to_file(tmp_path / "sketch.geojson")
    settings = settings_for(write_grid(small_coast()), tmp_path, transects={"file": "sketch.geojson"})
    table = read_table(screen(settings).path, "transects")
    assert table["transect_id"].tolist() == [1, 2, 3]
    assert set(table["status"]) == {"ok"}
    np.testing.assert_allclose(table["lon_deg"], 0.0, atol=0.01)
    np.testing.assert_allclose(table["shelf_width_km"], 100.0, atol=4.3)  # a cell
    np.testing.assert_allclose(table["bearing_deg"], 270.0, atol=2.0)  # a geodesic due west bends


@pytest.mark.parametrize(("ids", "fault"), [(["a", "b"], "'a', 'b'"), ([1.5, 2.0], "'1.5'")], ids=["text", "fractions"])
def test_identities_that_are_no_whole_numbers_are_refused(tmp_path, write_grid, ids, fault):
    lines = [shapely.LineString([(0.25, lat), (-1.8, lat)]) for lat in (39.5, 40.0)]
    geopandas.GeoDataFrame({"transect_id": ids}, geometry=lines, crs="EPSG:4326").to_file(tmp_path / "lines.gpkg")
    settings = settings_for(write_grid(small_coast()), tmp_path, transects={"file": "lines.gpkg"})
    with pytest.raises(
        TransectError, match=rf"transect_id holds {fault}, no whole number .*; make it an integer column"
    ):
        screen(settings)


def test_identities_stored_as_fractions_by_a_gis_are_taken_where_whole(tmp_path, write_grid):
    lines = [shapely.LineString([(0.25, lat), (-1.8, lat)]) for lat in (39.5, 40.0)]
    frame = geopandas.GeoDataFrame({"transect_id": [7.0, np.nan]}, geometry=lines, crs="EPSG:4326")
    frame.to_file(tmp_path / "lines.gpkg")
    settings = settings_for(write_grid(small_coast()), tmp_path, transects={"file": "lines.gpkg"})
    assert read_table(screen(settings).path, "transects")["transect_id"].tolist() == [7, 8]


def test_file_of_transects_without_lines_is_refused(tmp_path, write_grid):
    geopandas.GeoDataFrame(geometry=[shapely.Point(0, 40)], crs="EPSG:4326").to_file(tmp_path / "points.gpkg")
    settings = settings_for(write_grid(small_coast()), tmp_path, transects={"file": "points.gpkg"})
    with pytest.raises(TransectError, match="holds no lines; draw each transect from the shore seaward"):
        screen(settings)


# ---- the coast


def statuses_by_place(table):
    return {(round(lon, 2), round(lat, 2)): word for lon, lat, word in zip(*_places(table), strict=True)}


def _places(table):
    return table["lon_deg"], table["lat_deg"], table["status"]


@pytest.mark.parametrize("crs", ["EPSG:4326", "EPSG:3857"])
def test_coast_that_nobody_touched_comes_back_with_the_same_stations(demo, tmp_path, crs):
    """Lines hold no islands without stations, so a transect may end at one as at facing land; all else is the same."""
    coast = geopandas.read_file(demo / "coast.gpkg").to_crs(crs)
    coast["remark"] = "checked"
    coast.to_file(tmp_path / "coast.gpkg")
    first = read_table(demo / "demo.gpkg", "transects")
    second = again(demo, tmp_path, coast={"file": "coast.gpkg"})
    assert len(second["status"]) == len(first["status"])
    same = first["status"] != "island"
    assert (second["status"] == first["status"])[same].all()
    for name in NUMBERS:
        np.testing.assert_allclose(second[name][same], first[name][same], rtol=1e-4, err_msg=name)


def test_coast_lines_turned_round_deleted_and_moved(demo, tmp_path):
    """A line drawn with the sea on the left is turned; a deleted one has no stations; a moved vertex moves stations."""
    coast = geopandas.read_file(demo / "coast.gpkg")
    points = shapely.get_coordinates(coast.geometry[0])
    points[40:45] += [0.06, 0.0]  # 6 km landward
    coast = coast.iloc[[0]].set_geometry([shapely.reverse(shapely.LineString(points))], crs=coast.crs)
    coast.to_file(tmp_path / "coast.gpkg")
    first = read_table(demo / "demo.gpkg", "transects")
    second = again(demo, tmp_path, coast={"file": "coast.gpkg"})
    assert set(second["coast_part"]) == {1}
    west = (second["bearing_deg"] > 180) & (second["bearing_deg"] < 360)
    assert west.mean() > 0.75
    counts = {word: (second["status"] == word).sum() for word in ("ok", "no_break", "facing_land")}
    for word, count in counts.items():
        assert abs(count - ((first["status"] == word) & (first["coast_part"] == 1)).sum()) <= 5


def test_coast_line_added_by_hand_gets_stations(demo, tmp_path):
    """A line along the ramp in the south, in two parts, the sea on its left."""
    line = shapely.MultiLineString([[(-17.5, -39.2), (-17.5, -39.6)], [(-17.5, -39.6), (-17.5, -40.2)]])
    geopandas.GeoDataFrame(geometry=[line], crs="EPSG:4326").to_file(tmp_path / "mine.gpkg")
    table = again(demo, tmp_path, coast={"file": "mine.gpkg"})
    assert len(table["status"]) == 5  # 44 and 67 km of it, every 20
    assert ((table["bearing_deg"] - 270) % 360 < 5).all() or (abs(table["bearing_deg"] - 270) < 5).all()
    assert set(table["status"]) == {"no_break"}


def test_land_polygons_give_the_coast(tmp_path, write_grid):
    """Land drawn 12 km short of the grid's own shoreline; the stations stand on what was drawn, results from depths."""
    land = shapely.box(0.0, 37.0, 4.0, 43.0)
    geopandas.GeoDataFrame(geometry=[land], crs="EPSG:4326").to_file(tmp_path / "land.gpkg")
    grid = write_grid(small_coast())
    drawn = read_table(screen(settings_for(grid, tmp_path, coast={"file": "land.gpkg"})).path, "transects")
    traced = read_table(screen(settings_for(grid, tmp_path), overwrite=True).path, "transects")
    assert len(drawn["status"]) == len(traced["status"])
    assert set(drawn["status"]) == {"ok"}
    np.testing.assert_allclose(drawn["bearing_deg"], 270.0, atol=1.0)
    np.testing.assert_allclose(drawn["shelf_width_km"], traced["shelf_width_km"], atol=0.5)


def test_points_are_no_coast(tmp_path, write_grid):
    geopandas.GeoDataFrame(geometry=[shapely.Point(0, 40)], crs="EPSG:4326").to_file(tmp_path / "points.gpkg")
    settings = settings_for(write_grid(small_coast()), tmp_path, coast={"file": "points.gpkg"})
    with pytest.raises(CoastError, match=r"holds neither lines nor polygons; give the coast as lines, or the land as"):
        screen(settings)


# ---- breaks picked by hand


@pytest.fixture
def picked(tmp_path, write_grid):
    """Screen a small coast, edit its breaks, screen again with them: the results before, and a function for after."""
    grid = write_grid(small_coast())
    first = screen(settings_for(grid, tmp_path))
    frame = geopandas.read_file(first.path, layer="shelf_breaks")

    def after(edit):
        edit(frame).to_file(tmp_path / "picked.gpkg")
        settings = settings_for(grid, tmp_path, shelf_break={"file": "picked.gpkg"}, output={"path": "second.gpkg"})
        return read_table(screen(settings, overwrite=True).path, "transects")

    return read_table(first.path, "transects"), after


def test_moved_breaks_change_their_transects_and_no_others(picked):
    """20 km along the transect, a little off it: the width follows to the metre, the depth is that of the profile."""
    first, after = picked
    lat = first["lat_deg"][4]
    km_per_deg = 111.32 * np.cos(np.radians(lat))

    def edit(frame):
        frame = frame.iloc[[4, 9]].copy()
        point = frame.geometry.iloc[0]
        frame.geometry = [shapely.Point(point.x + 20 / km_per_deg, point.y + 0.02), frame.geometry.iloc[1]]
        return frame

    second = after(edit)
    ids = first["transect_id"]
    width_km = second["shelf_width_km"][4]
    assert width_km == pytest.approx(first["shelf_width_km"][4] - 20, abs=0.2)  # 111.32 is a sphere's, 0.2 %
    assert second["break_depth_m"][4] == pytest.approx(float(SHELF.depth_at([width_km * 1e3])[0]), abs=1.0)
    assert second["quarter_wave_h"][4] < first["quarter_wave_h"][4]
    others = ids != ids[4]
    np.testing.assert_allclose(second["shelf_width_km"][others], first["shelf_width_km"][others], rtol=1e-6)


def test_picked_breaks_are_marked(picked):
    _, after = picked
    table = after(lambda frame: frame.iloc[[4, 9]])
    assert np.isnan(table["break_spread_km"][[4, 9]]).all()
    assert np.isfinite(np.delete(table["break_spread_km"], [4, 9])).all()


def test_break_picked_beyond_the_depths_is_not_used_and_said(picked):
    first, after = picked
    with pytest.warns(ShelfmapWarning, match=r"picked for transect_id 5 lie beyond the depths of these transects"):
        second = after(lambda frame: frame.iloc[[4]].set_geometry([shapely.Point(0.4, frame.geometry.iloc[4].y)]))
    np.testing.assert_array_equal(second["shelf_width_km"], first["shelf_width_km"])


def test_two_breaks_on_one_transect_are_refused(picked):
    _, after = picked
    with pytest.raises(SettingsError, match=r"transect_id 5 has two breaks; leave one"):
        after(lambda frame: geopandas.pd.concat([frame.iloc[[4]], frame.iloc[[4]]]))
    with pytest.raises(SettingsError, match=r"transect_id 5 has two breaks; leave one"):
        after(lambda frame: frame.iloc[[4]].set_geometry([shapely.MultiPoint([(-1.0, 39.7), (-1.1, 39.7)])]))


def test_break_of_no_transect_is_refused(picked):
    _, after = picked
    with pytest.raises(SettingsError, match=r"no transect of this run has transect_id 999; delete or mend"):
        after(lambda frame: frame.iloc[[4]].assign(transect_id=999))


def test_breaks_must_be_points_with_an_identity(picked):
    _, after = picked
    with pytest.raises(SettingsError, match="must be points with a column transect_id"):
        after(lambda frame: frame[["geometry"]])


def test_layer_must_be_named_where_the_file_holds_several(demo, tmp_path):
    with pytest.raises(LayerError, match=r"demo\.gpkg holds several layers; name one of"):
        again(demo, tmp_path, transects={"file": str(demo / "demo.gpkg")})


def test_line_in_several_parts_drawn_from_the_sea_is_one_transect(tmp_path, write_grid):
    """Reversing a multi-part line part by part would start the transect in the middle of it."""
    straight = settings_for(write_grid(small_coast()), tmp_path)
    screen(straight)
    drawn = read_vector(straight.output.path, "transects")
    line = shapely.get_coordinates(drawn.geometry[7])
    half = len(line) // 2
    for number, name, parts in (
        (0, "one.gpkg", [line]),
        (1, "two.gpkg", [line[half:][::-1], line[: half + 1][::-1]]),
    ):
        shape = shapely.multilinestrings([shapely.linestrings(part) for part in parts])
        geopandas.GeoDataFrame({"transect_id": [8]}, geometry=[shape], crs="EPSG:4326").to_file(tmp_path / name)
        settings = straight.model_copy(
            update={
                "transects": straight.transects.model_copy(update={"file": tmp_path / name}),
                "output": straight.output.model_copy(update={"path": tmp_path / f"out{number}.gpkg"}),
            }
        )
        screen(settings)
    one, two = (read_table(tmp_path / f"out{number}.gpkg", "transects") for number in (0, 1))
    for name in ("lon_deg", "lat_deg", "length_km", "shelf_width_km", "gain_m2"):
        np.testing.assert_allclose(one[name], two[name], rtol=1e-6, err_msg=name)
