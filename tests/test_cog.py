"""Maps of several bands come out cloud-optimised, with names and units, picked overviews and nothing beside them."""

import errno
import struct
import subprocess
import sys
from itertools import pairwise
from pathlib import Path

import numpy as np
import pyogrio
import pytest
import rasterio
from rasterio.vrt import WarpedVRT
from rasterio.warp import transform_bounds

from shelfmap.errors import GridError, OutputExistsError
from shelfmap.rasters import Band, write_cog, write_geotiff

PLACE = {"x0": -20.0, "y0": 30.0, "dx": 0.5, "dy": 0.25, "crs": "EPSG:4326"}
#: Fields of a TIFF directory that the layout is checked by.
WIDTH, COMPRESSION, TILE_WIDTH, OFFSETS, COUNTS, PREDICTOR = 256, 259, 322, 324, 325, 317


def band(name="gain", values=None, **change):
    """Band with something in it; first row in the south."""
    values = np.arange(6, dtype=np.float32).reshape(3, 2) if values is None else np.asarray(values, dtype=np.float32)
    return Band(**{"name": name, "unit": "", "description": f"What {name} means.", "values": values, **change})


def lags(shape=(1100, 1300), seed=1):
    """Lags round the clock: as many just under 360 as just over 0, some void."""
    random = np.random.default_rng(seed)
    values = (random.uniform(-5, 5, shape) % 360).astype(np.float32)
    values[random.uniform(size=shape) < 0.1] = np.nan
    return values


def directories(content):
    """Fields of every directory of a TIFF, in the file's order, each with where it stands; read without GDAL."""
    assert content[:4] == b"II*\0"
    width = {1: 1, 2: 1, 3: 2, 4: 4, 5: 8, 12: 8}
    letter = {1: "B", 2: "c", 3: "H", 4: "I", 12: "d"}
    (place,) = struct.unpack_from("<I", content, 4)
    found = []
    while place:
        (n_fields,) = struct.unpack_from("<H", content, place)
        fields = {"at": place}
        for entry in range(place + 2, place + 2 + 12 * n_fields, 12):
            tag, kind, n = struct.unpack_from("<HHI", content, entry)
            inline = n * width[kind] <= 4
            start = entry + 8 if inline else struct.unpack_from("<I", content, entry + 8)[0]
            fields["end"] = max(fields.get("end", 0), 0 if inline else start + n * width[kind])
            if kind in letter:
                fields[tag] = struct.unpack_from(f"<{n}{letter[kind]}", content, start)
        found.append(fields)
        (place,) = struct.unpack_from("<I", content, place + 2 + 12 * n_fields)
    return found


def test_values_names_units_tags_and_place_come_back(tmp_path):
    lag = np.array([[1.0, np.nan], [359.0, 3.0], [np.nan, 5.0]])  # first row in the south
    bands = [
        band("gain", tags={"PERIOD_H": "12.42"}),
        band("lag_deg", lag, unit="°", description="Behind the wave offshore, 0 <= lag < 360;\npositive: late."),
    ]
    tags = {"TITLE": 'Été <M2> & "more"', "CAUTIONS": "one\ntwo", "TIFFTAG_IMAGEDESCRIPTION": "M2"}
    path = write_cog(tmp_path / "a.tif", bands, **PLACE, tags=tags)
    with rasterio.open(path) as file:
        np.testing.assert_array_equal(file.read()[:, ::-1], [bands[0].values, lag])
        assert file.xy(2, 0) == (-20.0, 30.0)  # last row of the file, first column: south-west
        assert file.xy(0, 1) == (-19.5, 30.5)
        assert (file.descriptions, file.units) == (("gain", "lag_deg"), (None, "°"))
        assert (file.dtypes, file.crs.to_epsg()) == (("float32", "float32"), 4326)
        assert (file.scales, file.offsets) == ((1.0, 1.0), (0.0, 0.0))
        assert np.isnan(file.nodatavals).all()
        assert file.read_masks(2)[::-1].tolist() == [[255, 0], [255, 255], [0, 255]]
        assert file.tags() == {**tags, "AREA_OR_POINT": "Area"}
        of_bands = [{key: file.tags(i)[key] for key in file.tags(i) if "STATISTICS" not in key} for i in (1, 2)]
        assert of_bands[0] == {"DESCRIPTION": "What gain means.", "PERIOD_H": "12.42"}
        assert of_bands[1] == {"DESCRIPTION": bands[1].description}
        assert float(file.tags(2)["STATISTICS_MAXIMUM"]) == 359.0


@pytest.mark.parametrize("crs", ["EPSG:32631", "EPSG:3035", "EPSG:3832"])
def test_projected_systems(tmp_path, crs):
    path = write_cog(tmp_path / "a.tif", [band()], x0=5e5, y0=3e6, dx=1000.0, dy=500.0, crs=crs)
    with rasterio.open(path) as file:
        assert (f"EPSG:{file.crs.to_epsg()}", file.xy(2, 0), file.res) == (crs, (5e5, 3e6), (1000.0, 500.0))


def test_longitudes_run_on_past_180_in_one_piece(tmp_path):
    values = np.arange(40 * 330).reshape(40, 330) + 1.0
    place = {"x0": 170.05, "y0": -13.95, "dx": 0.1, "dy": 0.1, "crs": "EPSG:4326"}
    path = write_cog(tmp_path / "a.tif", [band(values=values)], **place)
    with rasterio.open(path) as file:
        assert tuple(file.bounds) == pytest.approx((170.0, -14.0, 203.0, -10.0), abs=1e-9)
        assert next(file.sample([(195.0, -12.0)])) > 0
        west, _, east, _ = transform_bounds(file.crs, "EPSG:3832", *file.bounds)  # Mercator about 150 degrees east
        assert east - west == pytest.approx(np.radians(33) * 6378137.0, rel=1e-6)
        with WarpedVRT(file, crs="EPSG:3832") as pacific:
            shown = pacific.read(1)
            assert np.isfinite(shown[20]).all()
            assert pacific.width == pytest.approx(330, abs=2)


@pytest.mark.parametrize("shape", [(1, 1), (3, 2), (512, 512)])
def test_small_maps_have_no_overviews_and_are_cloud_optimised_all_the_same(tmp_path, shape):
    path = write_cog(tmp_path / "a.tif", [band(values=np.ones(shape)), band("lag_deg", np.zeros(shape))], **PLACE)
    with rasterio.open(path) as file:
        assert (file.shape, file.overviews(1)) == (shape, [])
        assert file.tags(ns="IMAGE_STRUCTURE")["LAYOUT"] == "COG"
    assert len(directories(path.read_bytes())) == 1


def test_the_library_takes_it_for_cloud_optimised(tmp_path):
    path = write_cog(tmp_path / "a.tif", [band("lag_deg", lags()), band("gain", lags(seed=2))], **PLACE)
    with rasterio.open(path) as file:
        structure = file.tags(ns="IMAGE_STRUCTURE")
        assert (structure["LAYOUT"], structure["COMPRESSION"], structure["PREDICTOR"]) == ("COG", "DEFLATE", "3")
        assert (file.profile["tiled"], file.block_shapes[0]) == (True, (512, 512))
        assert [file.overviews(i) for i in file.indexes] == [[2, 4]] * 2


def test_directories_come_first_and_the_smallest_overview_before_larger_ones(tmp_path):
    """The layout, read from the bytes: header, directories from full size down, then data from coarse to fine."""
    content = write_cog(tmp_path / "a.tif", [band("lag_deg", lags()), band("gain", lags())], **PLACE).read_bytes()
    assert content[8:].startswith(b"GDAL_STRUCTURAL_METADATA_SIZE=")
    ghost = content[8 : 8 + 43 + int(content[38:44])].decode()
    assert {"LAYOUT=IFDS_BEFORE_DATA", "BLOCK_ORDER=ROW_MAJOR", "BLOCK_LEADER=SIZE_AS_UINT4"} <= set(ghost.split("\n"))
    found = directories(content)
    assert [fields[WIDTH] for fields in found] == [(1300,), (650,), (325,)]
    assert all((fields[TILE_WIDTH], fields[PREDICTOR]) == ((512,), (3,)) for fields in found)
    assert all(fields[COMPRESSION] == (8,) for fields in found)  # deflate
    assert all(one["at"] < other["at"] for one, other in pairwise(found))
    assert max(fields["end"] for fields in found) <= min(min(fields[OFFSETS]) for fields in found)
    tiles = [tile for fields in found[::-1] for tile in zip(fields[OFFSETS], fields[COUNTS], strict=True)]
    assert len(tiles) == 1 + 4 + 9
    for (offset, size), following in pairwise([*tiles, (len(content) + 4, 0)]):
        assert struct.unpack_from("<I", content, offset - 4) == (size,)  # leader
        assert content[offset + size : offset + size + 4] == content[offset + size - 4 : offset + size]  # trailer
        assert following[0] == offset + size + 8  # after a trailer and the next leader


def test_overviews_hold_values_of_the_map_only(tmp_path):
    values = lags()
    path = write_cog(tmp_path / "a.tif", [band("lag_deg", values, unit="°")], **PLACE)
    for level in (0, 1):
        with rasterio.open(path, overview_level=level) as file:
            reduced = file.read(1)
        step = 2 ** (level + 1)
        assert reduced.shape == (1100 // step, 1300 // step)
        assert np.isin(reduced[np.isfinite(reduced)], values).all()
        assert np.isnan(reduced).mean() == pytest.approx(0.1, abs=0.01)  # void where the picked cell is void
        assert not ((reduced > 5) & (reduced < 355)).any()


def test_same_call_gives_same_bytes_and_leaves_nothing_beside(tmp_path):
    tags = {"B": "2", "A": "1"}
    files = []
    for name, order in (("a.tif", 1), ("b.tif", -1)):
        given = dict(list(tags.items())[::order])
        bands = [band("lag_deg", lags(), tags=given), band("gain", lags(seed=2))]
        files.append(write_cog(tmp_path / name, bands, **PLACE, tags=given).read_bytes())
    assert files[0] == files[1]
    assert sorted(path.name for path in tmp_path.iterdir()) == ["a.tif", "b.tif"]


def test_reading_and_asking_for_statistics_leaves_nothing_beside(tmp_path):
    """A raster without statistics gets a file with them written beside it: here by a plain GeoTIFF, to be sure."""
    path = write_cog(tmp_path / "a.tif", [band("lag_deg", lags()), band("gain", lags(seed=2))], **PLACE)
    plain = write_geotiff(tmp_path / "plain.tif", lags(), **PLACE, nodata=np.nan)
    for raster in (path, plain):
        with pytest.raises(pyogrio.errors.DataSourceError):
            pyogrio.read_info(raster)
        asked = "import sys, rasterio\nwith rasterio.open(sys.argv[1]) as file:\n    file.read()\n"
        asked += "    [(file.statistics(i), file.stats(indexes=i), file.checksum(i)) for i in file.indexes]\n"
        subprocess.run([sys.executable, "-W", "ignore", "-c", asked, str(raster)], check=True)
    assert sorted(file.name for file in tmp_path.iterdir()) == ["a.tif", "plain.tif", "plain.tif.aux.xml"]


def test_void_bands_are_written(tmp_path):
    path = write_cog(tmp_path / "a.tif", [band(), band("lag_deg", np.full((3, 2), np.nan))], **PLACE)
    with rasterio.open(path) as file:
        assert np.isnan(file.read(2)).all()
        assert file.tags(2)["STATISTICS_VALID_PERCENT"] == "0"


@pytest.mark.parametrize("suffix", [".aux.xml", ".ovr", ".msk"])
def test_what_was_known_of_a_replaced_map_goes_with_it(tmp_path, suffix):
    path, beside = tmp_path / "a.tif", tmp_path / f"a.tif{suffix}"
    beside.write_bytes(b"of another map")
    with pytest.raises(OutputExistsError, match=rf"a\.tif\{suffix} exists already"):
        write_cog(path, [band()], **PLACE)
    assert [file.name for file in tmp_path.iterdir()] == [beside.name]
    write_cog(path, [band()], **PLACE, overwrite=True)
    assert [file.name for file in tmp_path.iterdir()] == ["a.tif"]


@pytest.mark.parametrize(
    ("bands", "change", "message"),
    [
        ([], {}, r"bands are named \[\]: wanted at least one, each with a name of its own"),
        ([band(), band()], {}, r"bands are named \['gain', 'gain'\]"),
        ([band("")], {}, r"bands are named \[''\]"),
        ([band(values=np.ones(4))], {}, r"band gain of shape \(4,\): wanted \(n_rows, n_cols\)"),
        ([band(values=np.ones((0, 4)))], {}, r"band gain of shape \(0, 4\): wanted"),
        ([band(), band("lag_deg", np.ones((2, 3)))], {}, r"'lag_deg': \(2, 3\)\}: wanted one shape; write maps of"),
        ([band(), Band(name="u", unit="", description="", values=np.ones((3, 2)))], {}, "band u of float64: stored is"),
        (
            [Band(name="u", unit="", description="", values=np.ones((3, 2), np.int16))],
            {},
            "u of int16: stored is float32",
        ),
        ([band(values=[[np.inf]])], {}, "band gain holds infinite values; put NaN"),
        ([band()], {"dy": -0.25}, "cell sides above 0; give the array with its first row in the south"),
        ([band()], {"x0": np.nan}, "x0 = nan.*must be finite"),
        ([band()], {"crs": "EPSG:999999"}, "'EPSG:999999' is unknown to GDAL; give one as EPSG:n"),
    ],
)
def test_what_cannot_be_stored_is_named_with_its_cure(tmp_path, bands, change, message):
    with pytest.raises(GridError, match=message):
        write_cog(tmp_path / "a.tif", bands, **{**PLACE, **change})
    assert list(tmp_path.iterdir()) == []


def test_existing_file_is_kept_unless_overwriting_is_allowed(tmp_path):
    path = tmp_path / "a.tif"
    path.write_bytes(b"mine")
    with pytest.raises(OutputExistsError, match="exists already; allow it to be overwritten or choose another name"):
        write_cog(path, [band()], **PLACE)
    assert path.read_bytes() == b"mine"
    write_cog(path, [band()], **PLACE, overwrite=True)
    assert path.read_bytes() != b"mine"


def test_missing_folder_and_a_folder_for_a_file_are_refused(tmp_path):
    with pytest.raises(GridError, match=r"folder .*nowhere does not exist; make it first"):
        write_cog(tmp_path / "nowhere" / "a.tif", [band()], **PLACE)
    with pytest.raises(GridError, match="is a folder; give the name of a file in it"):
        write_cog(tmp_path, [band()], **PLACE)


@pytest.mark.parametrize("step", ["write_bytes", "replace"])
def test_failed_write_says_why_and_keeps_the_earlier_file(tmp_path, monkeypatch, step):
    path, beside = tmp_path / "a.tif", tmp_path / "a.tif.aux.xml"
    path.write_bytes(b"mine")
    beside.write_bytes(b"about mine")

    def refuse(*_):
        raise PermissionError(errno.EACCES, "Permission denied")

    monkeypatch.setattr(Path, step, refuse)
    with pytest.raises(GridError, match="cannot be written: Permission denied; free space"):
        write_cog(path, [band()], **PLACE, overwrite=True)
    assert {file.name: file.read_bytes() for file in tmp_path.iterdir()} == {
        "a.tif": b"mine", "a.tif.aux.xml": b"about mine",
    }  # fmt: skip


@pytest.mark.skipif(sys.platform == "win32", reason="file size limits are a POSIX matter")
@pytest.mark.parametrize("missing", [1, 1000, 1_000_000])
def test_disk_that_fills_up_leaves_nothing_even_at_the_last_byte(tmp_path, missing):
    """GDAL writing by itself lost the last kilobytes without an error; a limit on file size is the full disk here."""
    code = (
        "import resource, sys\n"
        "import numpy as np\n"
        "from shelfmap.errors import GridError\n"
        "from shelfmap.rasters import Band, write_cog\n"
        "noise = np.random.default_rng(1).normal(size=(700, 700)).astype(np.float32)\n"
        "def write(name):\n"
        "    band = Band(name='gain', unit='', description='', values=noise)\n"
        "    return write_cog(f'{sys.argv[1]}/{name}', [band], x0=0, y0=0, dx=1, dy=1, crs='EPSG:3857')\n"
        "path = write('whole.tif')\n"
        "size = path.stat().st_size\n"
        "path.unlink()\n"
        f"resource.setrlimit(resource.RLIMIT_FSIZE, (size - {missing}, size - {missing}))\n"
        "try:\n"
        "    write('a.tif')\n"
        "except GridError as error:\n"
        "    print(error)\n"
    )
    run = subprocess.run([sys.executable, "-c", code, str(tmp_path)], capture_output=True, text=True, check=True)
    assert "cannot be written: File too large; free space" in run.stdout
    assert list(tmp_path.iterdir()) == []
