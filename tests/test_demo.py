"""The demo holds every case it promises, and the files in the repository are the ones the code makes."""

import csv
import tomllib

import numpy as np
import pytest
import rasterio
from scipy.linalg import eigh_tridiagonal
from scipy.ndimage import binary_dilation, binary_opening, label, map_coordinates

from shelfmap.constants import CONSTITUENTS, EARTH_ROTATION_RAD_S, GRAVITY_M_S2
from shelfmap.demo import demo_gauges, demo_scenario, demo_settings, write_demo
from shelfmap.errors import GridError, OutputExistsError
from shelfmap.geodesy import geodesic_nodes
from shelfmap.settings import Settings

GRID = demo_scenario()
SEAWARD_DEG = 262.0
CELL_KM2 = 111.0**2 * GRID.dx * GRID.dy * np.cos(np.radians(GRID.y))[:, None] * np.ones_like(GRID.elevation_m)


def pieces(mask):
    """Connected pieces of a mask (by sides), each as a mask, those that touch the grid's edge left out."""
    labels, count = label(mask)
    rim = set(labels[[0, -1]].ravel()) | set(labels[:, [0, -1]].ravel())
    return [labels == number for number in range(1, count + 1) if number not in rim]


def area_km2(mask):
    return CELL_KM2[mask].sum()


def profile_m(lon, lat, length_km=600.0, step_km=1.0):
    """Depth along the geodesic seaward from a point, from the first water on."""
    distance_m = np.arange(0.0, length_km * 1e3, step_km * 1e3)
    lon, lat = (a[0] for a in geodesic_nodes(lon, lat, SEAWARD_DEG, distance_m))
    index = [(lat - GRID.y0) / GRID.dy, (lon - GRID.x0) / GRID.dx]
    depth_m = -map_coordinates(GRID.elevation_m.astype(float), index, order=1, cval=np.nan)
    return depth_m[np.argmax(depth_m > 0) :]


def gauge(name):
    columns = demo_gauges()
    return {key: values[columns["name"].index(name)] for key, values in columns.items()}


def from_gauge(name):
    return profile_m(gauge(name)["lon"], gauge(name)["lat"])


def steepest(depth_m, length_km=5):
    """Gradient over 5 km, and the depth where it starts."""
    return (depth_m[length_km:] - depth_m[:-length_km]) / (length_km * 1e3), depth_m[:-length_km]


# ---- the cases


def test_values_are_whole_metres_that_fit_int16_and_the_deep_sea_is_deep():
    values = GRID.elevation_m[~np.isnan(GRID.elevation_m)]
    np.testing.assert_array_equal(values, values.astype(np.int16))
    assert -4600 < values.min() < -4200
    assert 500 < values.max() < 3000


def test_sea_is_one_piece_and_one_lake_below_sea_level_is_none_of_it():
    water = ~(GRID.elevation_m >= 0)  # missing cells lie in the sea
    (lake,) = pieces(water)
    assert label(water)[1] == 2
    assert 500 < area_km2(lake) < 5000
    assert GRID.elevation_m[lake].min() < -20


def test_five_small_islands_and_one_above_500_km2():
    areas = sorted(area_km2(island) for island in pieces(GRID.elevation_m >= 0))
    assert len(areas) == 6
    assert areas[-1] > 550
    assert 50 < areas[0] <= areas[-2] < 400


def test_missing_data_is_one_patch_in_the_midst_of_the_wide_shelf():
    (patch,) = pieces(np.isnan(GRID.elevation_m))
    assert 1000 < area_km2(patch) < 5000
    rim = binary_dilation(patch) & ~patch
    assert GRID.elevation_m[rim].max() < -50
    assert GRID.elevation_m[rim].min() > -120


def test_gulf_faces_land_across_less_than_120_km():
    column = round((gauge("Mirrowen")["lon"] - GRID.x0) / GRID.dx)
    shores = np.flatnonzero(np.diff(GRID.elevation_m[:, column] < 0))
    south = np.argmin(np.abs(GRID.y[shores] - gauge("Mirrowen")["lat"]))
    assert GRID.elevation_m[shores[south] + 1, column] < 0
    assert 50 < (shores[south + 1] - shores[south]) * GRID.dy * 111.0 < 120


def test_four_inlets_are_narrower_than_25_km():
    """What an opening with a disc five cells across takes away from the sea, islands filled, are the inlets."""
    land = GRID.elevation_m >= 0
    sea = ~land & ~np.logical_or.reduce(pieces(~land)) | np.logical_or.reduce(pieces(land))
    sea_out = np.pad(sea, 10, mode="edge")
    rows, cols = np.mgrid[-2:3, -2:3]
    opened = binary_opening(sea_out, rows**2 + cols**2 <= 5)[10:-10, 10:-10]
    labels, count = label(sea & ~opened)
    assert sum(area_km2(labels == number) > 400 for number in range(1, count + 1)) == 4


@pytest.mark.parametrize("name", ["Velmarrow", "Oskeld", "Tarrowin"])
def test_wide_shelf_is_tuned_to_m2(name):
    """Period with a node at the break, from a finite-volume eigenvalue problem on the grid's own profile.

    3 %: the peak of the gain is that broad (Q near 5), and the break is known to a cell of 5 km in 355.
    """
    depth_m = from_gauge(name)
    depth_m = depth_m[: np.argmax(depth_m > 200)]
    known = ~np.isnan(depth_m)  # across the missing patch as it would be bridged
    depth_m = np.interp(np.arange(depth_m.size), np.flatnonzero(known), depth_m[known])
    flux = GRAVITY_M_S2 * (depth_m[1:] + depth_m[:-1]) / 2 / 1e3**2  # faces between nodes 1 km apart
    diagonal = np.append(0.0, flux[:-1]) + flux
    (mu,) = eigh_tridiagonal(diagonal, -flux[:-1], select="i", select_range=(0, 0), eigvals_only=True)
    f = 2 * EARTH_ROTATION_RAD_S * np.sin(np.radians(gauge(name)["lat"]))
    assert 2 * np.pi / np.sqrt(mu + f**2) / 3600 == pytest.approx(CONSTITUENTS["M2"].period_h, rel=0.03)


def test_wide_shelf_reaches_along_300_km_of_coast():
    widths_km = [np.argmax(profile_m(lon, lat) > 200) for lon, lat in _coast_points(-28.0, -30.9, 15)]
    assert sum(335 < width_km < 385 for width_km in widths_km) >= 13  # the rows of the inlet measure it too


def test_narrow_shelf_drops_steeply_within_25_km():
    depth_m = from_gauge("Skarn Vey")
    assert 10 < np.argmax(depth_m > 150) < 30
    assert depth_m[40] > 1000


def test_ramp_shows_no_gradient_of_1_in_100_at_any_depth_a_break_may_have():
    for lon, lat in _coast_points(-39.3, -40.2, 5):
        gradient, start_m = steepest(profile_m(lon, lat, length_km=300.0))
        assert gradient[start_m < 550].max() < 0.01
        assert start_m.max() > 1500


def _coast_points(north, south, count):
    """Points of the mainland coast on parallels: the first land from the west that is no island."""
    rows = np.round((np.linspace(north, south, count) - GRID.y0) / GRID.dy).astype(int)
    land = GRID.elevation_m >= 0
    for island in pieces(land):
        land &= ~island
    return [(GRID.x[np.argmax(land[row])], GRID.y[row]) for row in rows]


# ---- gauges


def test_gauges_stand_at_the_water_beside_land():
    columns = demo_gauges()
    for name, lon, lat in zip(columns["name"], columns["lon"], columns["lat"], strict=True):
        row, col = round((lat - GRID.y0) / GRID.dy), round((lon - GRID.x0) / GRID.dx)
        around = GRID.elevation_m[row - 2 : row + 3, col - 2 : col + 3]
        assert (around < 0).any(), name
        assert (around >= 0).any(), name


def test_gauges_see_the_tide_grow_on_the_wide_shelf():
    columns = demo_gauges()
    assert len(set(columns["id"])) == len(set(columns["name"])) == 12
    assert gauge("Tarrowin")["M2_amp_m"] > 3 * gauge("Skarn Vey")["M2_amp_m"]
    assert all(0 <= phase < 360 for wave in ("M2", "S2") for phase in columns[f"{wave}_phase_deg"])


# ---- the files


def test_another_seed_gives_another_relief_and_the_same_seed_the_same():
    np.testing.assert_array_equal(demo_scenario().elevation_m, GRID.elevation_m)
    assert (demo_scenario(seed=1).elevation_m != GRID.elevation_m).mean() > 0.5


def test_written_twice_the_bytes_are_the_same_and_few(tmp_path):
    first, again = write_demo(tmp_path / "a"), write_demo(tmp_path / "b" / "c")
    assert [path.read_bytes() for path in first] == [path.read_bytes() for path in again]
    assert first[0].stat().st_size < 1_000_000


def test_files_in_the_repository_are_what_the_code_makes(tmp_path, repository):
    """Cells, place and tags are compared, not bytes: other builds of GDAL deflate differently."""
    grid_path, gauges_path, _ = write_demo(tmp_path)
    with rasterio.open(grid_path) as made, rasterio.open(repository / "demo_grids" / "demo.tif") as kept:
        np.testing.assert_array_equal(kept.read(1), made.read(1))
        assert kept.profile == made.profile
        assert kept.tags() == made.tags()
        assert kept.descriptions == made.descriptions
    assert (repository / "demo_grids" / "demo_gauges.csv").read_bytes() == gauges_path.read_bytes()
    text = demo_settings("../demo_grids/demo.tif", "../demo_grids/demo_gauges.csv")
    assert (repository / "configs" / "demo.toml").read_bytes() == text.encode()
    assert sorted(path.name for path in (repository / "demo_grids").iterdir()) == ["demo.tif", "demo_gauges.csv"]
    assert (repository / "demo_grids" / "demo.tif").stat().st_size < 1_000_000


def test_grid_on_disk_is_the_scenario(tmp_path):
    with rasterio.open(write_demo(tmp_path)[0]) as file:
        stored = np.where(file.read(1)[::-1] == file.nodata, np.nan, file.read(1)[::-1])
        np.testing.assert_array_equal(stored, GRID.elevation_m)
        assert file.xy(file.height - 1, 0) == pytest.approx((GRID.x0, GRID.y0), abs=1e-9)  # rounding


def test_gauges_on_disk_are_the_columns(tmp_path):
    with write_demo(tmp_path)[1].open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    columns = demo_gauges()
    assert list(rows[0]) == list(columns)
    assert [float(row["M2_amp_m"]) for row in rows] == columns["M2_amp_m"]


def test_settings_are_valid_show_every_section_and_point_at_the_files(tmp_path, repository):
    grid_path, _, settings_path = write_demo(tmp_path)
    settings = Settings.from_toml(settings_path)
    assert settings.grid.path == grid_path
    assert settings.transects.spacing_km == 20.0
    assert set(tomllib.loads(settings_path.read_text(encoding="utf-8"))) == set(Settings.model_fields)
    assert Settings.from_toml(repository / "configs" / "demo.toml").grid.path.is_file()


def test_existing_demo_is_kept_unless_overwriting_is_allowed(tmp_path):
    (tmp_path / "demo.toml").write_text("mine", encoding="utf-8")
    with pytest.raises(OutputExistsError, match=r"demo\.toml exists already; allow it to be overwritten or choose"):
        write_demo(tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["demo.toml"]
    write_demo(tmp_path, overwrite=True)
    assert (tmp_path / "demo.toml").read_text(encoding="utf-8") == demo_settings()


def test_folder_that_cannot_be_made_is_named(tmp_path):
    (tmp_path / "file").write_text("", encoding="utf-8")
    with pytest.raises(GridError, match=r"folder .*file.* cannot be made: .*; choose another folder"):
        write_demo(tmp_path / "file" / "demo")
