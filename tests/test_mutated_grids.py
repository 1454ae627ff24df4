"""Good grids spoilt in every way: refused in one sentence, read as before, or flagged; never a traceback, never a hang.

`SHELFMAP_FUZZ=500 python -m pytest tests/test_mutated_grids.py` breaks as many grids at random.
"""

import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import rasterio
from rasterio.enums import ColorInterp
from rasterio.transform import Affine
from utils_fuzz import assert_sound, invoke, toml_text
from utils_grid import write_nc, write_tif
from utils_pipeline import RESULTS, SHELF

from shelfmap.synthetic import straight_coast

EXAMPLES = int(os.environ.get("SHELFMAP_FUZZ", "40"))
GOOD = straight_coast(270.0, 40.0, SHELF, cell=0.1, shape=(12, 30))
#: Whole metres, so that every type that can hold them gives the same depths.
VALUES = np.round(GOOD.elevation_m).astype(np.float32)
PLACE = {"x0": GOOD.x0, "y0": GOOD.y0, "dx": GOOD.dx, "dy": GOOD.dy, "crs": GOOD.crs}
SETTINGS = {
    "coast": {"generalise_km": 40.0},
    "transects": {"spacing_km": 30.0, "length_km": 250.0},
    "output": {"profiles": True},
}


def tif(folder, values=VALUES, **more):
    return write_tif(folder / "g.tif", values, **{**PLACE, **more})


def screen(grid, codes=(0, 1), **grid_settings):
    """Screen a grid: the tables of the output, or the sentence of refusal; nothing else left either way."""
    folder = grid.parent
    before = {path.name for path in folder.iterdir()}
    content = {"grid": {"path": str(grid), "positive": "up", **grid_settings}, **SETTINGS}
    (folder / "s.toml").write_text(toml_text(content), encoding="utf-8")
    result = invoke("screen", folder / "s.toml", "-o", folder / "out.gpkg", codes=codes)
    after = {path.name for path in folder.iterdir()}
    assert after - before - {"s.toml"} == ({"out.gpkg"} if result.exit_code == 0 else set())
    if result.exit_code == 0:
        return assert_sound(folder / "out.gpkg"), result.stderr
    lines = [line for line in result.stderr.splitlines() if not line.startswith("WARNING")]
    assert len(lines) == 1, result.stderr
    assert lines[0].startswith("Error: ")
    assert len(lines[0]) < 700
    return None, lines[0]


@pytest.fixture(scope="module")
def good(tmp_path_factory):
    """Tables of the grid as it should be."""
    tables, said = screen(tif(tmp_path_factory.mktemp("good")), codes=(0,))
    assert set(tables["transects"]["status"]) == {"ok"}
    assert said.endswith(" ok\n")
    return tables


def assert_same(tables, good):
    for layer in RESULTS:
        for name, values in good[layer].items():
            np.testing.assert_array_equal(tables[layer][name], values, err_msg=f"{layer}.{name}")


# ---- storage only: the same answers, bit for bit


def as_uint16(folder):
    """Raised by 10,000 and told so."""
    return tif(folder, (VALUES + 10_000).astype(np.uint16), offset=-10_000.0)


def with_palette(folder):
    """Said to be colours of a table."""
    path = tif(folder, VALUES)
    with rasterio.open(path, "r+") as dataset:
        dataset.colorinterp = [ColorInterp.palette]
    return path


def in_three_bands(folder):
    path = tif(folder, VALUES, count=3)
    with rasterio.open(path, "r+") as dataset:
        dataset.write(np.full(VALUES.shape, -77.0, dtype=np.float32)[None], indexes=[2])
    return path


def with_huge_nodata(folder):
    """A declared fill, far beyond what is stored anywhere."""
    return tif(folder, nodata=-3.4028234663852886e38)


def with_mask_of_ones(folder):
    return tif(folder, mask=np.full(VALUES.shape, 255, dtype=np.uint8))


def with_foreign_metadata(folder):
    return tif(folder, tags={"<b>NOTE</b>": "'; DROP TABLE x; --", "AREA_OR_POINT": "Area"}, description="élévation")


def in_archive(folder):
    tif(folder)
    shutil.make_archive(str(folder / "a"), "zip", folder, "g.tif")
    (folder / "a").mkdir()
    return shutil.move(folder / "a.zip", folder / "a" / "a.zip")


SAME = {
    "float64": lambda folder: tif(folder, VALUES.astype(np.float64)),
    "int16": lambda folder: tif(folder, VALUES.astype(np.int16)),
    "int32": lambda folder: tif(folder, VALUES.astype(np.int32)),
    "uint16 with an offset": as_uint16,
    "tenths of metres with a scale": lambda folder: tif(folder, (VALUES * 10).astype(np.int32), scale=0.1),
    "three bands": in_three_bands,
    "colours": with_palette,
    "huge nodata": with_huge_nodata,
    "mask of ones": with_mask_of_ones,
    "metadata": with_foreign_metadata,
    "south up": lambda folder: tif(folder, south_up=True),
    "east first": lambda folder: tif(folder, east_first=True),
    "deflate, tiled": lambda folder: tif(folder, compress="deflate", tiled=True, blockxsize=16, blockysize=16),
    "360 degrees east": lambda folder: tif(folder, x0=GOOD.x0 + 360.0),
    "link": lambda folder: link_to(tif(folder)),
}


def link_to(path):
    link = path.with_name("link.tif")
    link.symlink_to(path.name)
    return link


@pytest.mark.parametrize("name", SAME)
def test_storage_alone_changes_no_number(tmp_path, good, name):
    tables, _ = screen(SAME[name](tmp_path), codes=(0,))
    if name in ("tenths of metres with a scale", "360 degrees east", "south up", "east first"):
        # 0.1 is no binary fraction, and corners of cells are sums
        np.testing.assert_allclose(
            tables["transects"]["shelf_width_km"], good["transects"]["shelf_width_km"], rtol=1e-9
        )
        assert tables["transects"]["status"].tolist() == good["transects"]["status"].tolist()
    else:
        assert_same(tables, good)


def test_netcdf_gives_the_same_answers(tmp_path, good):
    lon = GOOD.x0 + GOOD.dx * np.arange(VALUES.shape[1])
    lat = GOOD.y0 + GOOD.dy * np.arange(VALUES.shape[0])
    tables, _ = screen(write_nc(tmp_path / "g.nc", VALUES, lon, lat), codes=(0,))
    np.testing.assert_allclose(tables["transects"]["shelf_width_km"], good["transects"]["shelf_width_km"], rtol=1e-9)


def test_float16_rounds_and_no_more(tmp_path, good):
    """Where the library writes it: 11 bits, 1 m in 2048."""
    try:
        path = tif(tmp_path, VALUES.astype(np.float16))
    except (TypeError, ValueError, KeyError, rasterio.errors.RasterioError):
        pytest.skip("this GDAL writes no float16")
    tables, _ = screen(path, codes=(0,))
    np.testing.assert_allclose(tables["transects"]["shelf_width_km"], good["transects"]["shelf_width_km"], rtol=0.02)


# ---- refused, in one sentence with the cure


def put(folder, content, name="g.tif"):
    (folder / name).write_bytes(content)
    return folder / name


def cut(share):
    def make(folder):
        path = tif(folder)
        return put(folder, path.read_bytes()[: int(path.stat().st_size * share)])

    return make


def with_transform(*numbers):
    return lambda folder: tif(folder, transform=Affine(*numbers))


def looped(folder):
    (folder / "g.tif").symlink_to("h.tif")
    (folder / "h.tif").symlink_to("g.tif")
    return folder / "g.tif"


def pipe(folder):
    os.mkfifo(folder / "g.tif")
    return folder / "g.tif"


def sided(suffix):
    def make(folder):
        path = tif(folder)
        os.mkfifo(path.with_name(path.name + suffix))
        return path

    return make


def folder_of(folder):
    (folder / "g.tif").mkdir()
    return folder / "g.tif"


def spoilt(row, value):
    values = VALUES.copy()
    values[row, 3] = value
    return values


def checkerboard():
    return np.where(np.indices(VALUES.shape).sum(axis=0) % 2, 50.0, -50.0).astype(np.float32)


REFUSED = {
    "empty": (lambda folder: put(folder, b""), "cannot be read as a raster"),
    "text": (lambda folder: put(folder, b"depths in metres\n1 2 3\n"), "cannot be read as a raster"),
    "cut in the header": (lambda folder: put(folder, tif(folder).read_bytes()[:6]), "cannot be read as a raster"),
    "cut at half": (cut(0.5), "cannot be read as a raster"),
    "cut at nine tenths": (cut(0.9), "cannot be read as a raster"),
    "folder": (folder_of, "is a folder"),
    "links in a circle": (looped, "link that leads nowhere|no such file"),
    "pipe": (pipe, "is a pipe or a device"),
    "pipe beside it": (sided(".msk"), "no plain side file"),
    "step of zero": (with_transform(0.1, 0, 0, 0, 0.0, 41), "step|regular"),
    "step not a number": (with_transform(0.1, 0, 0, 0, np.nan, 41), "step|regular"),
    "step infinite": (with_transform(np.inf, 0, 0, 0, -0.1, 41), "step|regular"),
    "origin not a number": (with_transform(0.1, 0, np.nan, 0, -0.1, 41), "step|regular"),
    "rotated": (with_transform(0.1, 0.05, 0, 0.05, -0.1, 41), "rotated or sheared"),
    "no place": (lambda folder: tif(folder, crs=None), "has no coordinate system"),
    "degrees called metres": (lambda folder: tif(folder, crs="EPSG:32629"), "look like degrees"),
    "metres called degrees": (lambda folder: tif(folder, x0=5e5, y0=4e6, dx=1e4, dy=1e4), "are no degrees"),
    "one row": (lambda folder: tif(folder, VALUES[:1]), r"has 1 row\(s\)"),
    "one column": (lambda folder: tif(folder, VALUES[:, :1]), r"1 column\(s\)"),
    "two by two": (lambda folder: tif(folder, VALUES[4:6, 14:16]), "no water body|no shoreline"),
    "all land": (lambda folder: tif(folder, np.abs(VALUES) + 1), "grid.positive"),
    "all sea": (lambda folder: tif(folder, -np.abs(VALUES) - 1), "no shoreline"),
    "all missing": (lambda folder: tif(folder, np.full_like(VALUES, -1.0), nodata=-1.0), "no water body"),
    "all not a number": (lambda folder: tif(folder, np.full_like(VALUES, np.nan)), "no water body"),
    "constant zero": (lambda folder: tif(folder, np.zeros_like(VALUES)), "no water body|no shoreline|grid.positive"),
    "complex": (lambda folder: tif(folder, VALUES.astype(np.complex64)), "complex numbers"),
    "feet": (lambda folder: tif(folder, unit="ft"), "values are in 'ft'"),
    "centimetres": (lambda folder: tif(folder, unit="cm"), "values are in 'cm'"),
    "spike beyond the Earth": (lambda folder: tif(folder, spoilt(5, 1e6)), "set grid.nodata"),
    "undeclared fill": (lambda folder: tif(folder, spoilt(5, -32768.0)), "set grid.nodata"),
    "bytes": (lambda folder: tif(folder, np.clip(VALUES, 0, 255).astype(np.uint8)), "no water body|grid.positive"),
    "checkerboard": (lambda folder: tif(folder, checkerboard()), "no water body"),
    "scale of zero": (lambda folder: tif(folder, scale=0.0), "scale"),
    "scale not a number": (lambda folder: tif(folder, scale=np.nan), "scale"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_what_cannot_be_screened_is_refused_in_one_sentence(tmp_path, name):
    make, words = REFUSED[name]
    tables, sentence = screen(make(tmp_path), codes=(1,))
    assert tables is None
    assert re.search(words, sentence), sentence


@pytest.mark.parametrize("name", REFUSED)
def test_inspect_refuses_the_same_or_says_that_it_cannot_be_screened(tmp_path, name):
    """Only the coast itself is beyond it: an all-missing grid is understood, a lake is not looked for."""
    path = REFUSED[name][0](tmp_path)
    understood = {"two by two", "checkerboard"}
    result = invoke("inspect", path, "--positive", "up", codes=(0, 3) if name in understood else (1, 3))
    if result.exit_code == 1:
        assert result.stdout == ""


@pytest.mark.skipif(os.geteuid() == 0, reason="root may read anything")
def test_file_that_may_not_be_read(tmp_path):
    path = tif(tmp_path)
    path.chmod(0)
    assert "make it readable" in screen(path, codes=(1,))[1]


def test_signed_bytes_are_read_as_stored(tmp_path):
    """-128 to 127: a sea of 128 m at most, so no break deeper."""
    tables, _ = screen(tif(tmp_path, np.clip(VALUES, -128, 127).astype(np.int8)), codes=(0,))
    assert "ok" not in set(tables["transects"]["status"])


# ---- flagged: an output, and words in it or beside it


def blocked(value):
    values = VALUES.copy()
    values[:, 8:12] = value
    return values


FLAGGED = {
    "block not a number": (lambda folder: tif(folder, blocked(np.nan)), {}, "void"),
    "block infinite": (lambda folder: tif(folder, blocked(-np.inf)), {}, "void"),
    "block of the fill": (lambda folder: tif(folder, blocked(-9999.0), nodata=-9999.0), {}, "void"),
    "nodata a real depth": (lambda folder: tif(folder, blocked(-150.0), nodata=-150.0), {}, "void"),
}


@pytest.mark.parametrize("name", FLAGGED)
def test_missing_parts_show_in_the_status(tmp_path, name):
    make, settings, status = FLAGGED[name]
    tables, _ = screen(make(tmp_path), codes=(0,), **settings)
    assert status in set(tables["transects"]["status"])


def test_undeclared_minus_9999_is_warned_of(tmp_path):
    _, said = screen(tif(tmp_path, spoilt(5, -9999.0)))
    assert "set grid.nodata = -9999" in said


def test_sign_the_wrong_way_round_is_warned_of(tmp_path):
    """Depths called elevations, where the metadata know better."""
    _, said = screen(tif(tmp_path, -VALUES, description="depth below mean sea level"))
    assert "WARNING: grid.positive = 'up', although" in said


def test_spike_within_the_earth_is_counted_and_changes_no_width(tmp_path, good):
    values = VALUES.copy()
    values[5, 8] = -8000.0
    tables, _ = screen(tif(tmp_path, values), codes=(0,))
    assert sum("smoothed" in note for note in tables["transects"]["note"]) == 1
    np.testing.assert_allclose(tables["transects"]["shelf_width_km"], good["transects"]["shelf_width_km"], rtol=0.01)


# ---- at random


def break_bytes(content, rng):
    """Flip, cut, repeat or overwrite a few bytes, mostly in the header."""
    content = bytearray(content)
    for _ in range(rng.integers(1, 6)):
        place = int(rng.integers(0, min(len(content), 400) if rng.random() < 0.7 else len(content)))
        kind = rng.integers(5)
        if kind == 0:
            content[place] ^= 1 << int(rng.integers(8))
        elif kind == 1:
            content[place] = int(rng.integers(256))
        elif kind == 2:
            content[place : place + 8] = rng.bytes(8)
        elif kind == 3 and len(content) > 50:
            del content[place : place + int(rng.integers(1, 40))]
        elif len(content) > 50:
            del content[int(rng.integers(len(content) // 2, len(content))) :]
    return bytes(content)


RANDOM = """
import sys, faulthandler
from pathlib import Path
import test_mutated_grids as here
faulthandler.dump_traceback_later(float(sys.argv[4]), exit=True)
here.many(Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3]))
"""


def many(folder, first, last):
    """Screen grids broken at random; refusal or a sound output, each in time."""
    lon = GOOD.x0 + GOOD.dx * np.arange(VALUES.shape[1])
    lat = GOOD.y0 + GOOD.dy * np.arange(VALUES.shape[0])
    whole = [
        tif(folder).read_bytes(),
        tif(folder, compress="deflate", tiled=True, blockxsize=16, blockysize=16, nodata=-9999.0).read_bytes(),
        tif(folder, VALUES.astype(np.int16), compress="lzw", scale=1.0).read_bytes(),
        write_nc(folder / "g.nc", VALUES, lon, lat).read_bytes(),
    ]
    (folder / "g.tif").unlink()
    (folder / "g.nc").unlink()
    ends = [0, 0]
    for seed in range(first, last):
        rng = np.random.default_rng(seed)
        work = folder / f"n{seed}"
        work.mkdir()
        path = work / ("g.nc" if seed % 4 == 3 else "g.tif")
        path.write_bytes(break_bytes(whole[seed % 4], rng))
        sys.stdout.write(f"seed {seed}\n")
        sys.stdout.flush()
        tables, _ = screen(path)
        ends[tables is None] += 1
        shutil.rmtree(work)
    sys.stdout.write(f"read {ends[0]} refused {ends[1]}\n")


def test_grids_broken_at_random_are_refused_or_read(tmp_path):
    """In a process of their own: a crash or a hang in the library's C would take the tests with it."""
    done = subprocess.run(
        [sys.executable, "-W", "ignore", "-c", RANDOM, tmp_path, "0", str(EXAMPLES), str(120 + 2 * EXAMPLES)],
        cwd=Path(__file__).parent,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stdout[-300:] + done.stderr[-3000:]
    read, refused = map(int, re.search(r"read (\d+) refused (\d+)", done.stdout).groups())
    assert read + refused == EXAMPLES
    assert read > 0
    assert refused > 0
