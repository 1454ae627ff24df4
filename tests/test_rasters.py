"""GeoTIFFs come out whole, placed right and the same every time, or not at all."""

import errno
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import rasterio

from shelfmap.errors import GridError, OutputExistsError
from shelfmap.rasters import replace_file, write_geotiff

PLACE = {"x0": -20.0, "y0": 30.0, "dx": 0.5, "dy": 0.25, "crs": "EPSG:4326"}
RAMP = np.arange(12, dtype=np.int16).reshape(3, 4)  # first row in the south


def test_file_is_north_up_and_its_corner_cell_lies_where_stated(tmp_path):
    path = write_geotiff(tmp_path / "a.tif", RAMP, **PLACE, description="elevation", tags={"SURVEY": "none"})
    with rasterio.open(path) as file:
        np.testing.assert_array_equal(file.read(1), RAMP[::-1])
        assert file.xy(2, 0) == (-20.0, 30.0)  # last row of the file, first column: south-west
        assert file.xy(0, 3) == (-18.5, 30.5)
        assert file.crs.to_epsg() == 4326
        assert (file.descriptions, file.units, file.nodata) == (("elevation",), ("m",), None)
        assert file.tags()["SURVEY"] == "none"
        assert (file.profile["tiled"], file.compression.value) == (True, "DEFLATE")


@pytest.mark.parametrize("crs", ["EPSG:32631", "EPSG:3035", "EPSG:4326"])
@pytest.mark.parametrize("dtype", ["int16", "float32"])
def test_values_place_and_system_come_back(tmp_path, crs, dtype):
    values = np.random.default_rng(1).normal(0, 1000, (300, 270)).astype(dtype)  # more than one tile each way
    path = write_geotiff(tmp_path / "a.tif", values, **{**PLACE, "crs": crs})
    with rasterio.open(path) as file:
        np.testing.assert_array_equal(file.read(1)[::-1], values)
        assert (file.dtypes[0], f"EPSG:{file.crs.to_epsg()}") == (dtype, crs)


def test_missing_cells_become_the_nodata_value_and_the_input_is_left_alone(tmp_path):
    values = np.array([[1.0, np.nan]], dtype=np.float32)
    path = write_geotiff(tmp_path / "a.tif", values, **PLACE, nodata=-9999.0)
    with rasterio.open(path) as file:
        assert (file.read(1).tolist(), file.nodata) == ([[1.0, -9999.0]], -9999.0)
    assert np.isnan(values[0, 1])


def test_without_nodata_nan_stands_in_the_file(tmp_path):
    path = write_geotiff(tmp_path / "a.tif", np.array([[1.0, np.nan]], dtype=np.float32), **PLACE)
    with rasterio.open(path) as file:
        assert np.isnan(file.read(1)[0, 1])


def test_same_call_gives_same_bytes_and_leaves_nothing_beside(tmp_path):
    tags = {"B": "2", "A": "1"}
    first = write_geotiff(tmp_path / "a.tif", RAMP, **PLACE, tags=tags).read_bytes()
    again = write_geotiff(tmp_path / "b.tif", RAMP, **PLACE, tags=dict(reversed(tags.items()))).read_bytes()
    assert first == again
    assert sorted(path.name for path in tmp_path.iterdir()) == ["a.tif", "b.tif"]


@pytest.mark.parametrize(
    ("values", "change", "message"),
    [
        (RAMP[0], {}, r"shape \(4,\): wanted \(n_rows, n_cols\)"),
        (RAMP[:0], {}, r"shape \(0, 4\): wanted"),
        (RAMP.astype(float), {}, "array of float64: stored is int16 or float32 only; convert it"),
        (np.array([[np.inf]], dtype=np.float32), {}, "infinite values; put NaN"),
        (RAMP, {"nodata": -99999}, "nodata = -99999 does not fit int16"),
        (RAMP, {"nodata": np.nan}, "nodata = nan does not fit int16"),
        (RAMP, {"nodata": 0.5}, "nodata = 0.5 does not fit int16"),
        (RAMP.astype(np.float32), {"nodata": 1e39}, r"nodata = 1e\+39 does not fit float32"),
        (RAMP, {"dy": -0.25}, "cell sides above 0; give the array with its first row in the south"),
        (RAMP, {"x0": np.nan}, "x0 = nan.*must be finite"),
        (RAMP, {"crs": "EPSG:999999"}, "'EPSG:999999' is unknown to GDAL; give one as EPSG:n"),
    ],
)
def test_what_cannot_be_stored_is_named_with_its_cure(tmp_path, values, change, message):
    with pytest.raises(GridError, match=message):
        write_geotiff(tmp_path / "a.tif", values, **{**PLACE, **change})
    assert list(tmp_path.iterdir()) == []


def test_existing_file_is_kept_unless_overwriting_is_allowed(tmp_path):
    path = tmp_path / "a.tif"
    path.write_bytes(b"mine")
    with pytest.raises(OutputExistsError, match="exists already; allow it to be overwritten or choose another name"):
        write_geotiff(path, RAMP, **PLACE)
    assert path.read_bytes() == b"mine"
    write_geotiff(path, RAMP, **PLACE, overwrite=True)
    assert path.read_bytes() != b"mine"


def test_missing_folder_and_a_folder_for_a_file_are_refused(tmp_path):
    with pytest.raises(GridError, match=r"folder .*nowhere does not exist; make it first"):
        write_geotiff(tmp_path / "nowhere" / "a.tif", RAMP, **PLACE)
    with pytest.raises(GridError, match="is a folder; give the name of a file in it"):
        write_geotiff(tmp_path, RAMP, **PLACE)


@pytest.mark.parametrize("step", ["write_bytes", "replace"])
def test_failed_write_says_why_and_keeps_the_earlier_file(tmp_path, monkeypatch, step):
    path = tmp_path / "a.tif"
    path.write_bytes(b"mine")

    def refuse(*_):
        raise PermissionError(errno.EACCES, "Permission denied")

    monkeypatch.setattr(Path, step, refuse)
    with pytest.raises(GridError, match="cannot be written: Permission denied; free space"):
        write_geotiff(path, RAMP, **PLACE, overwrite=True)
    assert [file.name for file in tmp_path.iterdir()] == ["a.tif"]
    assert path.read_bytes() == b"mine"


@pytest.mark.skipif(sys.platform == "win32", reason="file size limits are a POSIX matter")
def test_disk_that_fills_up_half_way_leaves_nothing(tmp_path):
    """A limit on file size stands in for the full disk: the system refuses bytes in mid-file."""
    code = (
        "import resource, sys\n"
        "from pathlib import Path\n"
        "from shelfmap.errors import GridError, OutputExistsError\n"
        "from shelfmap.rasters import replace_file\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (1000, 1000))\n"
        "try:\n"
        "    replace_file(Path(sys.argv[1]), bytes(5000))\n"
        "except GridError as error:\n"
        "    print(error)\n"
    )
    run = subprocess.run(
        [sys.executable, "-c", code, str(tmp_path / "a.tif")], capture_output=True, text=True, check=True
    )
    assert "cannot be written: File too large; free space" in run.stdout
    assert list(tmp_path.iterdir()) == []


def test_a_link_stays_a_link(tmp_path):
    target, link = tmp_path / "target", tmp_path / "link"
    target.write_bytes(b"old")
    link.symlink_to(target)
    replace_file(link, b"new")
    assert link.is_symlink()
    assert target.read_bytes() == b"new"


def test_write_grid_fixture_stores_a_synthetic_grid_as_it_is(write_grid):
    from shelfmap.synthetic import round_coast, shelf_profile

    grid = round_coast(50e3, 60.0, shelf_profile(20e3, 100.0, 0.05, 1000.0), inside="land", shape=(21, 31))
    paths = [write_grid(grid), write_grid(grid)]
    assert paths[0] != paths[1]
    with rasterio.open(paths[0]) as file:
        np.testing.assert_array_equal(file.read(1)[::-1], grid.elevation_m)
        assert file.xy(20, 0) == pytest.approx((grid.x0, grid.y0), abs=1e-12)  # rounding of the half-cell shift
