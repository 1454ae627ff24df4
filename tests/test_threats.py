"""What a stranger could hide in a grid, a coast or settings: nothing leaves the machine, hangs, or runs code.

A server on this machine must hear nothing, whatever a file or a setting names; DEVELOPERS.md, "Threats", says what
is meant to happen in each case.
"""

import gzip
import hashlib
import os
import pickle
import shutil
import sqlite3
import struct
import subprocess
import sys
import threading
import time
import zipfile
import zlib
from contextlib import closing
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from xml.sax.saxutils import escape

import numpy as np
import pyarrow as pa
import pyogrio
import pytest
import rasterio
import shapely
from rasterio.transform import Affine
from scipy.io import netcdf_file
from test_mutated_grids import GOOD, SETTINGS, VALUES, tif
from test_vector_inputs import TRANSECT, written
from utils_fuzz import assert_sound, invoke, toml_text
from utils_pipeline import settings_for

from shelfmap.errors import LayerError, ShelfmapError
from shelfmap.gaugefile import read_gauges
from shelfmap.layers import pack, unpack
from shelfmap.localfiles import CLOSED
from shelfmap.pipeline import screen
from shelfmap.rasterfile import read_header
from shelfmap.settings import GaugeSettings, GridSettings
from shelfmap.vectors import read_vector

MARK = "SERVER"  # stands for http://127.0.0.1:port in the files below


@pytest.fixture(scope="module")
def server():
    """Address of a server on this machine, and what it was asked."""
    asked = []

    class Listener(BaseHTTPRequestHandler):
        def handle_one_request(self):
            asked.append(self.rfile.readline(200))

    with ThreadingHTTPServer(("127.0.0.1", 0), Listener) as listening:
        threading.Thread(target=listening.serve_forever, daemon=True).start()
        yield f"http://127.0.0.1:{listening.server_port}", asked
        listening.shutdown()


@pytest.fixture
def silent(server, monkeypatch):
    """Address of the server; it must have heard nothing in the end, even where the environment sends clouds to it."""
    address, asked = server
    host = address.removeprefix("http://")
    for name, value in {
        "AWS_S3_ENDPOINT": host, "AWS_HTTPS": "NO", "AWS_VIRTUAL_HOSTING": "FALSE", "AWS_NO_SIGN_REQUEST": "YES",
        "CPL_GS_ENDPOINT": f"{address}/", "GS_NO_SIGN_REQUEST": "YES", "CPL_AZURE_ENDPOINT": address,
        "AZURE_NO_SIGN_REQUEST": "YES", "AZURE_STORAGE_ACCOUNT": "a", "SWIFT_STORAGE_URL": f"{address}/s",
        "SWIFT_AUTH_TOKEN": "t", "OGR_GEOCODE_QUERY_TEMPLATE": f"{address}/g?q=%s", "OGR_GEOCODE_SERVICE": "x",
    }.items():  # fmt: skip
        monkeypatch.setenv(name, value)
    del asked[:]
    yield address
    assert asked == []


def test_the_server_does_hear_what_is_not_held_back(server, tmp_path):
    """Without our guard the same file asks: the tests below can fail."""
    address, asked = server
    del asked[:]
    path = write_text(tmp_path / "a.vrt", raster_vrt(f"{address}/a.tif"))
    with pytest.raises(rasterio.errors.RasterioError), rasterio.open(path) as dataset:
        dataset.read(1)
    assert asked
    del asked[:]
    path = write_text(tmp_path / "b.vrt", vector_vrt(f"{address}/b.json"))
    pyogrio.list_layers(path)
    assert asked


def write_text(path, text):
    path.write_text(text, encoding="utf-8")
    return path


def raster_vrt(source, relative=0, band="", inner=""):
    return (
        '<VRTDataset rasterXSize="30" rasterYSize="12"><SRS>EPSG:4326</SRS><GeoTransform>-1.5,0.1,0,40.6,0,-0.1'
        f'</GeoTransform>{inner}<VRTRasterBand dataType="Float32" band="1"{band}><SimpleSource>'
        f'<SourceFilename relativeToVRT="{relative}">{escape(source)}</SourceFilename><SourceBand>1</SourceBand>'
        "</SimpleSource></VRTRasterBand></VRTDataset>"
    )


def vector_vrt(source, relative=0, more=""):
    return (
        f'<OGRVRTDataSource><OGRVRTLayer name="v"><SrcDataSource relativeToVRT="{relative}">{escape(source)}'
        f"</SrcDataSource>{more}<LayerSRS>EPSG:4326</LayerSRS></OGRVRTLayer></OGRVRTDataSource>"
    )


def refused(read, path):
    """Refused in one sentence, within seconds."""
    started = time.monotonic()
    with pytest.raises(ShelfmapError) as caught:
        read(path)
    assert time.monotonic() - started < 20
    assert "\n" not in str(caught.value)
    return str(caught.value)


def read_gauge_file(path):
    return read_gauges(GaugeSettings(file=path), ["M2"])


def read_grid(path):
    """Header and every value."""
    header = read_header(path, GridSettings(path=path))
    with header.file.opened() as dataset:
        header.file.values(dataset, (0, header.file.n_rows, 0, header.file.n_cols))
    return header


# ---- names that lead to a network

WMS = (
    "<GDAL_WMS><Service name='TMS'><ServerUrl>SERVER/${z}/${x}/${y}.png</ServerUrl></Service><DataWindow><UpperLeftX>-2"
    "</UpperLeftX><UpperLeftY>42</UpperLeftY><LowerRightX>2</LowerRightX><LowerRightY>38</LowerRightY><TileLevel>1"
    "</TileLevel><SizeX>30</SizeX><SizeY>12</SizeY></DataWindow><Projection>EPSG:4326</Projection></GDAL_WMS>"
)
RASTER_NAMES = [
    "SERVER/a.tif", "/vsicurl/SERVER/a.tif", "/vsicurl?url=SERVER/a.tif", "/vsicurl_streaming/SERVER/a.tif",
    "/vsis3/b/a", "/vsis3_streaming/b/a", "/vsigs/b/a", "/vsiaz/c/a", "/vsiadls/c/a", "/vsioss/b/a", "/vsiswift/b/a",
    "/vsiswift_streaming/b/a", "/vsiwebhdfs/SERVER/a", "/vsizip//vsicurl/SERVER/a.zip/a.tif",
    "/vsigzip//vsicurl/SERVER/a.gz", "/vsisubfile/0_100,/vsicurl/SERVER/a", "/vsicached?file=/vsicurl/SERVER/a",
    "/vsistdin/", "GTIFF_DIR:1:/vsicurl/SERVER/a", 'NETCDF:"SERVER/a.nc":v', 'HDF5:"SERVER/a.h5"://v', "WMS:SERVER/a",
    "WMTS:SERVER/a", "WCS:SERVER/a", "GTI:SERVER/a.gpkg", 'STACTA:"SERVER/a.json"', 'STACIT:"SERVER/a.json"',
    "DAAS:SERVER/a", "EEDAI:a/b", "PLMOSAIC:mosaic=a", "OGCAPI:SERVER/a", "ZARR:/vsicurl/SERVER/a",
    "vrt:///vsicurl/SERVER/a.tif", "DERIVED_SUBDATASET:LOGAMPLITUDE:SERVER/a.tif", WMS,
]  # fmt: skip
VECTOR_NAMES = [
    "SERVER/a.json", "/vsicurl/SERVER/a.json", "/vsiswift/b/a", "/vsistdin/", "/vsizip//vsicurl/SERVER/a.zip",
    "WFS:SERVER/a", "OAPIF:SERVER/a", "CSW:SERVER/a", "ES:SERVER", "NGW:SERVER/resource/1", "Carto:a", "AmigoCloud:a",
    "ADBC:SERVER", "PG:host=127.0.0.1", "MYSQL:a", "ODBC:a", "MSSQL:server=a", "CSV:/vsicurl/SERVER/a.csv",
    "GeoJSON:SERVER/a", "OGCAPI:SERVER/a", "<OGRWFSDataSource><URL>SERVER/a</URL></OGRWFSDataSource>",
]  # fmt: skip


@pytest.mark.parametrize("name", RASTER_NAMES)
def test_no_name_of_a_grid_leads_out(silent, tmp_path, name):
    """As grid.path, under a folder and bare, and named by a virtual raster."""
    name = name.replace(MARK, silent)
    for path in (Path(name), tmp_path / name.lstrip("/")):
        refused(read_grid, path)
    assert "is no local file" in refused(read_grid, write_text(tmp_path / "a.vrt", raster_vrt(name)))


@pytest.mark.parametrize("name", VECTOR_NAMES)
def test_no_name_of_a_vector_file_leads_out(silent, tmp_path, name):
    name = name.replace(MARK, silent)
    for path in (Path(name), tmp_path / name.lstrip("/")):
        refused(read_vector, path)
        refused(read_gauge_file, path)
        refused(read_gauge_file, Path(f"{path}.csv"))
    refused(read_vector, write_text(tmp_path / "a.vrt", vector_vrt(name)))
    refused(read_gauge_file, tmp_path / "a.vrt")


# ---- files that lead to a network, to other files, or to code

PYTHON = (
    "<PixelFunctionType>f</PixelFunctionType><PixelFunctionLanguage>Python</PixelFunctionLanguage><PixelFunctionCode>"
    "import os; os.system('touch RAN')</PixelFunctionCode>"
)
JSON_LINE = '"geometry":{"type":"LineString","coordinates":[[0,40],[-1,40]]}'
FEATURES = f'"features":[{{"type":"Feature","properties":{{}},{JSON_LINE}}}]'
GML = (
    '<ogr:FeatureCollection xmlns:xsi="http://www.w3.org/2001/XMLSchema-instance" xsi:schemaLocation="http://ogr/ '
    'SERVER/a.xsd" xmlns:ogr="http://ogr/" xmlns:gml="http://www.opengis.net/gml" xmlns:xlink="http://www.w3.org/1999/'
    'xlink"><gml:featureMember><ogr:a><ogr:g><gml:LineString srsName="EPSG:4326"><gml:coordinates>0,40 -1,40'
    '</gml:coordinates></gml:LineString></ogr:g><ogr:x xlink:href="SERVER/b.gml#a"/></ogr:a></gml:featureMember>'
    "</ogr:FeatureCollection>"
)
KML = (
    '<kml xmlns="http://www.opengis.net/kml/2.2"><Document><NetworkLink><Link><href>SERVER/a.kml</href></Link>'
    "</NetworkLink><Placemark><styleUrl>SERVER/s.kml#a</styleUrl><LineString><coordinates>0,40 -1,40</coordinates>"
    "</LineString></Placemark></Document></kml>"
)
RASTER_FILES = {
    "service": ("a.xml", WMS),
    "map tiles": ("a.xml", "<WMTS><GetCapabilitiesUrl>SERVER/a</GetCapabilitiesUrl></WMTS>"),
    "coverage": ("a.xml", "<WCS_GDAL><ServiceURL>SERVER/a</ServiceURL></WCS_GDAL>"),
    "cached": ("a.mrf", "<MRF_META><CachedSource><Source>SERVER/a.tif</Source></CachedSource></MRF_META>"),
    "index": ("a.xml", "<GDALTileIndexDataset><IndexDataset>SERVER/a.gpkg</IndexDataset></GDALTileIndexDataset>"),
    "catalogue": ("a.json", '{"stac_version":"1.0.0","type":"Feature","assets":{"a":{"href":"SERVER/a.tif"}}}'),
    "attribute": ("a.vrt", raster_vrt("x").replace("<SimpleSource>", '<SimpleSource SourceFilename="SERVER/a.tif">')),
    "lower case": ("a.vrt", raster_vrt("SERVER/a.tif").replace("SourceFilename", "sourcefilename")),
    "overview": ("a.vrt", raster_vrt("g.tif", 1, inner='<Metadata domain="OVERVIEWS"><MDI key="OVERVIEW_FILE">SERVER/a'
                         "</MDI></Metadata>")),
    "python": ("a.vrt", raster_vrt("g.tif", 1, ' subClass="VRTDerivedRasterBand"').replace("<SimpleSource>", PYTHON +
                                                                                          "<SimpleSource>")),
    "itself": ("a.vrt", raster_vrt("a.vrt", 1)),
    "entity": ("a.vrt", '<!DOCTYPE a [<!ENTITY b SYSTEM "SERVER/a">]>' + raster_vrt("g.tif", 1)),
    "deep": ("a.vrt", "<VRTDataset>" + "<a>" * 100_000 + "</a>" * 100_000 + "</VRTDataset>"),
    "metadata": ("a.vrt", raster_vrt("g.tif", 1, inner='<Metadata domain="vrt_sources"><MDI key="source_0">&lt;S'
                         "&gt;&lt;SourceFilename&gt;WMS:x&lt;/SourceFilename&gt;</MDI></Metadata>")),
    "hidden in a TIFF": ("a.tif", "II*\0        " + raster_vrt("SERVER/a.tif")),
    "a pipe": ("a.vrt", raster_vrt("pipe", 1)),
    "a device": ("a.vrt", raster_vrt("/dev/zero")),
}  # fmt: skip
VECTOR_FILES = {
    "service": ("a.xml", "<OGRWFSDataSource><URL>SERVER/a</URL></OGRWFSDataSource>"),
    "pipeline": ("a.gdalg.json", '{"type":"gdal_streamed_alg","command_line":"gdal vector pipeline ! read SERVER/a"}'),
    "crs link": (
        "a.json",
        f'{{"type":"FeatureCollection","crs":{{"type":"link","properties":{{"href":"SERVER/a"}}}},{FEATURES}}}',
    ),
    "escaped crs link": (
        "a.json",
        f'{{"type":"FeatureCollection","crs":{{"type":"lin\\u006b","properties":{{"href":"SERVER/a"}}}},{FEATURES}}}',
    ),
    "schema": ("a.gml", GML),
    "entity": ("a.gml", '<!DOCTYPE a [<!ENTITY b SYSTEM "SERVER/a">]>' + GML.replace("<ogr:x", "&b;<ogr:x")),
    "network link": ("a.kml", KML),
    "sql": ("a.vrt", vector_vrt("g.gpkg", 1, "<SrcSQL dialect='SQLITE'>SELECT ogr_geocode('x'), * FROM v</SrcSQL>")),
    "itself": ("a.vrt", vector_vrt("a.vrt", 1)),
    "a pipe": ("a.vrt", vector_vrt("pipe", 1)),
}  # fmt: skip
#: These are harmless data with addresses in them: read, and nobody is asked.
READ = ("schema", "entity", "network link", "escaped crs link")


def beside(folder):
    """What files may name: a good grid, a good vector file, a pipe."""
    tif(folder)
    written(folder, [TRANSECT], name="g.gpkg")
    os.mkfifo(folder / "pipe")


@pytest.mark.parametrize("name", RASTER_FILES)
def test_no_raster_leads_out_or_runs_code(silent, tmp_path, monkeypatch, name):
    monkeypatch.chdir(tmp_path)
    beside(tmp_path)
    file_name, text = RASTER_FILES[name]
    refused(read_grid, write_text(tmp_path / file_name, text.replace(MARK, silent)))
    assert not (tmp_path / "RAN").exists()


@pytest.mark.parametrize("name", VECTOR_FILES)
def test_no_vector_file_leads_out_or_runs_code(silent, tmp_path, name):
    beside(tmp_path)
    file_name, text = VECTOR_FILES[name]
    path = write_text(tmp_path / file_name, text.replace(MARK, silent))
    refused(read_gauge_file, path)
    refused(read_gauge_file, write_text(tmp_path / "a.csv", path.read_text(encoding="utf-8")))
    if name in READ:
        assert len(read_vector(path).geometry) == 1
    else:
        refused(read_vector, path)


def test_virtual_files_of_local_data_are_read(tmp_path):
    """Mosaics are how people use tiles, and virtual layers how they use tables."""
    beside(tmp_path)
    for source, relative in (("g.tif", 1), (str(tmp_path / "g.tif"), 0)):
        remark = '<Metadata><MDI key="history">https://example.org/a.tif</MDI></Metadata>'
        path = write_text(tmp_path / "a.vrt", raster_vrt(source, relative, inner=remark))
        assert read_grid(path).file.n_cols == 30
    path = write_text(tmp_path / "b.vrt", vector_vrt("g.gpkg", 1).replace('name="v"', 'name="g"'))
    assert shapely.equals(read_vector(path).geometry[0], TRANSECT)


@pytest.mark.parametrize("suffix", [".ovr", ".msk", ".aux.xml"])
def test_files_beside_a_raster_lead_nowhere(silent, tmp_path, suffix):
    path = tif(tmp_path)
    pam = f'<PAMDataset><Metadata domain="OVERVIEWS"><MDI key="OVERVIEW_FILE">{silent}/a</MDI></Metadata></PAMDataset>'
    write_text(Path(f"{path}{suffix}"), pam if suffix == ".aux.xml" else raster_vrt(f"{silent}/a.tif"))
    assert f"has g.tif{suffix} beside it" in refused(read_grid, path)
    Path(f"{path}{suffix}").unlink()
    write_text(
        Path(f"{path}.aux.xml"), "<PAMDataset><Metadata><MDI key='a'>http://127.0.0.1</MDI></Metadata></PAMDataset>"
    )
    read_grid(path)


def test_overviews_named_inside_a_raster_lead_nowhere(silent, tmp_path):
    path = tif(tmp_path)
    with rasterio.open(path, "r+") as dataset:
        dataset.update_tags(ns="OVERVIEWS", OVERVIEW_FILE=f"{silent}/a.tif")
    read_grid(path)


@pytest.mark.parametrize("pack", ["zip", "tar", "gz"])
def test_archives_hold_data_only(silent, tmp_path, pack):
    inside = write_text(tmp_path / "a.vrt", raster_vrt(f"{silent}/a.tif"))
    if pack == "gz":
        path = tmp_path / "a.vrt.gz"
        path.write_bytes(gzip.compress(inside.read_bytes()))
        named = [Path(f"/vsigzip/{path}")]
    else:
        path = Path(shutil.make_archive(str(tmp_path / "p" / "a"), pack, tmp_path, "a.vrt"))
        named = [Path(f"/vsi{pack}/{path}/a.vrt")]
    for name in [*named, path]:
        # an unpacked tar shows GDAL the description in its first bytes, so that it is taken for one itself
        words = "no valid virtual file" if pack == "tar" else "stands for data that lie elsewhere"
        assert words in refused(read_grid, name)
        assert words in refused(read_vector, name)


SQL = {
    "geocode": "CREATE VIEW w AS SELECT geom, ogr_geocode('x') AS a FROM v",
    "extension": "CREATE VIEW w AS SELECT geom, load_extension('/tmp/x.so') AS a FROM v",
    "write": "CREATE VIEW w AS SELECT geom, writefile('RAN', 'x') AS a FROM v",
    "trigger": "CREATE TRIGGER t AFTER INSERT ON v BEGIN SELECT ogr_geocode('x'); END",
}


@pytest.mark.parametrize("name", SQL)
def test_geopackages_run_no_code(silent, tmp_path, monkeypatch, name):
    monkeypatch.chdir(tmp_path)
    path = written(tmp_path, [TRANSECT])
    with closing(sqlite3.connect(path)) as database, database:
        database.execute(SQL[name])
        if "VIEW" in SQL[name]:
            database.execute("INSERT INTO gpkg_contents (table_name, data_type, srs_id) VALUES ('w', 'features', 4326)")
            database.execute("INSERT INTO gpkg_geometry_columns VALUES ('w', 'geom', 'LINESTRING', 4326, 0, 0)")
    refused(lambda file: read_vector(file, "w" if "VIEW" in SQL[name] else "v"), path)
    assert not (tmp_path / "RAN").exists()


def test_geopackage_with_a_virtual_table_of_the_network(silent, tmp_path):
    path = written(tmp_path, [TRANSECT])
    with closing(sqlite3.connect(path)) as database, database:
        database.execute("PRAGMA writable_schema = ON")
        database.execute(
            "INSERT INTO sqlite_master (type, name, tbl_name, rootpage, sql) VALUES ('table', 'w', 'w', 0, ?)",
            (f"CREATE VIRTUAL TABLE w USING VirtualOGR('{silent}/a.json')",),
        )
        database.execute("INSERT INTO gpkg_contents (table_name, data_type, srs_id) VALUES ('w', 'features', 4326)")
        database.execute("INSERT INTO gpkg_geometry_columns VALUES ('w', 'geom', 'LINESTRING', 4326, 0, 0)")
    refused(lambda file: read_vector(file, "w"), path)


def test_formulas_and_markup_in_a_table_stay_text(tmp_path):
    text = '=HYPERLINK("http://127.0.0.1/")<script>'
    path = written(tmp_path, [TRANSECT], transect_id=[1], note=[text])
    assert read_vector(path).columns["note"].tolist() == [text]


# ---- coordinate systems

SYSTEMS = [
    "+proj=pipeline +step +proj=hgridshift +grids=SERVER/a.tif",
    "+proj=longlat +ellps=GRS80 +nadgrids=SERVER/a.tif +type=crs",
    "+proj=longlat +ellps=GRS80 +nadgrids=@us_noaa_alaska.tif +type=crs",
    "+proj=longlat +geoidgrids=SERVER/g.tif +type=crs", "+init=SERVER/a:1", "SERVER/a", "file:///etc/passwd",
    "EPSG:4326+5773", "<gml:CRS/>", '{"$schema": "SERVER/a"}', "'; DROP--",
]  # fmt: skip


def test_no_coordinate_system_leads_out(silent, tmp_path, monkeypatch):
    """Even where the environment lets PROJ use a network: in a process of its own, since PROJ looks only once."""
    grid = tif(tmp_path)
    for n, system in enumerate(SYSTEMS):
        content = {"grid": {"path": str(grid), "positive": "up", "crs": system.replace(MARK, silent)}, **SETTINGS}
        write_text(tmp_path / f"s{n}.toml", toml_text(content))
    monkeypatch.setenv("PROJ_NETWORK", "ON")
    monkeypatch.setenv("PROJ_NETWORK_ENDPOINT", silent)
    program = (
        "from click.testing import CliRunner\nfrom shelfmap.cli import main\n"
        f"for n in range({len(SYSTEMS)}):\n"
        "    result = CliRunner().invoke(main, ['screen', f's{n}.toml', '-o', f'{n}.gpkg'])\n"
        "    assert result.exit_code in (0, 1) and 'Traceback' not in result.stderr, (n, result.output)\n"
        "    assert result.exception is None or isinstance(result.exception, SystemExit), (n, result.exception)\n"
        "import pyproj.network\nassert not pyproj.network.is_network_enabled()\n"
    )
    subprocess.run([sys.executable, "-W", "ignore", "-c", program], cwd=tmp_path, check=True, timeout=200)


# ---- bombs


def bomb(path, side, tile):
    """A TIFF of a few hundred bytes that says it has side x side cells in deflated tiles of zeros."""
    block = zlib.compress(bytes(1000))
    tags = [
        (256, 4, 1, side), (257, 4, 1, side), (258, 3, 1, 32), (259, 3, 1, 8), (262, 3, 1, 1), (277, 3, 1, 1),
        (322, 4, 1, tile), (323, 4, 1, tile), (324, 4, 1, 0), (325, 4, 1, len(block)), (339, 3, 1, 3),
    ]  # fmt: skip
    start = 8 + 2 + 12 * len(tags) + 4
    entries = b"".join(
        struct.pack("<HHI", tag, kind, n) + struct.pack("<I", start if tag == 324 else value)
        for tag, kind, n, value in tags
    )
    path.write_bytes(b"II*\0" + struct.pack("<I", 8) + struct.pack("<H", len(tags)) + entries + bytes(4) + block)
    write_text(path.with_suffix(".tfw"), "0.00001\n0\n0\n-0.00001\n0\n40\n")
    return path


@pytest.mark.parametrize(("side", "tile"), [(2**31 - 16, 2**31 - 16), (100_000, 100_000), (40_000, 40_000)])
def test_rasters_that_unpack_to_more_than_the_memory_are_refused(tmp_path, side, tile):
    refused(read_grid, bomb(tmp_path / "g.tif", side, tile))


def test_an_endless_sparse_raster_is_refused(tmp_path):
    """As large as the format allows, and next to nothing on disk."""
    path = tmp_path / "g.tif"
    profile = {"driver": "GTiff", "width": 2_000_000, "height": 1_000_000, "count": 1, "dtype": "int16"}
    transform = Affine(1e-5, 0, 0, 0, -1e-5, 40)
    more = {"tiled": True, "sparse_ok": True, "compress": "deflate", "bigtiff": "yes"}
    with rasterio.open(path, "w", crs="EPSG:4326", transform=transform, **profile, **more):
        pass
    assert "cut it to the region" in refused(read_grid, path)


def test_archives_that_unpack_to_more_than_the_disk_are_not_unpacked(tmp_path):
    """A zip of zeros, a thousand to one: its first bytes are looked at, no more."""
    path = tmp_path / "a.zip"
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("a.tif", bytes(200_000_000))
    refused(read_grid, Path(f"/vsizip/{path}/a.tif"))
    refused(read_vector, path)


@pytest.mark.parametrize("version", [1, 2])
def test_netcdf_that_promises_what_it_cannot_hold_is_refused(tmp_path, version):
    """Two million attributes in 2 kB: the library would set aside 7 GB for them, and take a quarter of a minute."""
    path, lon = tmp_path / "g.nc", GOOD.x0 + GOOD.dx * np.arange(VALUES.shape[1])
    with netcdf_file(path, "w", version=version) as file:
        for name, values in (("lat", GOOD.y0 + GOOD.dy * np.arange(VALUES.shape[0])), ("lon", lon)):
            file.createDimension(name, len(values))
            file.createVariable(name, "f8", (name,))[:] = values
            file.variables[name].units = "degrees_north" if name == "lat" else "degrees_east"
        file.createVariable("elevation", "f4", ("lat", "lon"))[:] = VALUES
        file.variables["elevation"].units = "m"
    assert read_grid(path).file.n_cols == 30
    content = path.read_bytes()
    lists = [at for at in range(0, len(content) - 8, 4) if content[at : at + 8] == bytes([0, 0, 0, 12, 0, 0, 0, 1])]
    assert len(lists) == 3
    for at in lists:
        path.write_bytes(content[: at + 5] + b"\x20" + content[at + 6 :])
        assert "promises more than it can hold" in refused(read_grid, path)
        assert "promises more than it can hold" in refused(read_vector, path)


# ---- settings of a stranger


def test_settings_read_files_anywhere_and_write_over_none(tmp_path):
    """Reading outside the folder of the settings is allowed: with the rights of the user, and it goes nowhere."""
    (tmp_path / "in").mkdir()
    (tmp_path / "mine.gpkg").write_text("mine", encoding="utf-8")
    tif(tmp_path)
    content = {"grid": {"path": "../g.tif", "positive": "up"}, **SETTINGS, "output": {"path": "../mine.gpkg"}}
    path = write_text(tmp_path / "in" / "s.toml", toml_text(content))
    assert "exists already" in invoke("screen", path, codes=(2,)).stderr
    assert (tmp_path / "mine.gpkg").read_text(encoding="utf-8") == "mine"
    (tmp_path / "mine.gpkg").unlink()
    invoke("screen", path, codes=(0,))
    assert_sound(tmp_path / "mine.gpkg")


@pytest.mark.parametrize("out", ["/etc/passwd", "/dev/full", "x.sh", ".bashrc", "http://127.0.0.1/a.gpkg"])
def test_settings_name_no_output_but_a_new_geopackage(tmp_path, out):
    content = {"grid": {"path": str(tif(tmp_path)), "positive": "up"}, **SETTINGS, "output": {"path": out}}
    before = sorted(tmp_path.iterdir())
    invoke("screen", write_text(tmp_path / "s.toml", toml_text(content)), codes=(1,))
    assert [path for path in sorted(tmp_path.iterdir()) if path.name != "s.toml"] == before


# ---- kept work of a stranger


@pytest.fixture
def stopped(tmp_path):
    """Settings of a run that was stopped after its only section, and what it kept of that."""
    settings = settings_for(tif(tmp_path), tmp_path, transects={"spacing_km": 30.0, "length_km": 250.0})

    def stop(*_):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        screen(settings, progress=stop)
    [piece] = tmp_path.glob(".out.gpkg.unfinished/*.done")
    return settings, piece


def forge(piece, data):
    piece.write_bytes(hashlib.sha256(data).digest() + data)


class Runs:
    def __reduce__(self):
        return os.mkdir, ("RAN",)


@pytest.mark.parametrize("data", [b"x", b"x" * 1000, pickle.dumps(Runs()), b"\xff\xff\xff\xff\x10\0\0\0" + bytes(16)])
def test_forged_kept_work_is_refused_and_runs_no_code(stopped, tmp_path, monkeypatch, data):
    """With the checksum it should have: that guards against damage only."""
    monkeypatch.chdir(tmp_path)
    settings, piece = stopped
    forge(piece, data)
    with pytest.raises(LayerError, match="kept work was not written by this program; run again with --anew"):
        screen(settings)
    assert not (tmp_path / "RAN").exists()
    screen(settings, anew=True)
    assert_sound(tmp_path / "out.gpkg")


def test_kept_work_forged_with_care_is_believed(stopped, tmp_path):
    """What DEVELOPERS.md says is not held off: whoever writes to the folder of the output may as well write there."""
    settings, piece = stopped
    stations = unpack(piece.read_bytes()[32:])
    table = stations["stations"]
    at = table.column_names.index("shelf_width_km")
    stations["stations"] = table.set_column(at, "shelf_width_km", pa.array([12.0] * len(table)))
    forge(piece, pack(stations))
    screen(settings)
    assert set(read_vector(tmp_path / "out.gpkg", "transects").columns["shelf_width_km"]) == {12.0}


@pytest.mark.parametrize("name", ["lock", "part", "folder"])
def test_links_in_the_folder_of_kept_work_lead_nowhere(stopped, tmp_path, name):
    settings, piece = stopped
    (tmp_path / "mine").mkdir()
    mine = tmp_path / "mine" / "a.done"
    mine.write_text("precious", encoding="utf-8")
    folder = piece.parent
    if name == "folder":
        shutil.rmtree(folder)
        folder.symlink_to(tmp_path / "mine")
    elif name == "lock":
        (folder / "lock").symlink_to(mine)
    else:
        piece.with_suffix(".part").symlink_to(mine)
        piece.unlink()
    if name == "part":
        screen(settings)
    else:
        with pytest.raises(LayerError, match="link"):
            screen(settings)
    assert mine.read_text(encoding="utf-8") == "precious"


# ---- the whole program, watched


@pytest.mark.skipif(shutil.which("strace") is None, reason="strace is not installed: it sees every socket of a process")
def test_no_verb_opens_a_socket_to_anywhere(tmp_path):
    """Good files and bad ones; sockets between processes of ours (workers) do not count."""
    beside(tmp_path)
    good = {"grid": {"path": "g.tif", "positive": "up"}, **SETTINGS}
    write_text(tmp_path / "good.toml", toml_text(good))
    write_text(tmp_path / "wms.vrt", raster_vrt(WMS.replace(MARK, "http://127.0.0.1:9")))
    write_text(tmp_path / "wfs.xml", "<OGRWFSDataSource><URL>http://127.0.0.1:9</URL></OGRWFSDataSource>")
    write_text(tmp_path / "worse.toml", toml_text({**good, "coast": {"file": "wfs.xml"}}))
    program = (
        "import os, subprocess, sys\n"
        "for args in ('screen good.toml --workers 2', 'inspect wms.vrt', 'screen worse.toml'):\n"
        "    subprocess.run([sys.executable, '-m', 'shelfmap', *args.split()], capture_output=True)\n"
    )
    done = subprocess.run(
        ["strace", "-fqq", "-e", "trace=connect,sendto,sendmsg,bind", "-o", "trace.txt", sys.executable, "-c", program],
        cwd=tmp_path, capture_output=True, text=True, check=False, timeout=300,
    )  # fmt: skip
    if "ptrace" in done.stderr or not (tmp_path / "trace.txt").exists():
        pytest.skip("strace may not watch processes here")
    assert (tmp_path / "out.gpkg").exists() or (tmp_path / "coast.gpkg").exists()
    lines = (tmp_path / "trace.txt").read_text(encoding="utf-8").splitlines()
    assert [line for line in lines if "AF_INET" in line] == []


def test_both_libraries_are_closed_while_reading_and_left_as_they_were(tmp_path, monkeypatch):
    """What the options are during a call, and that the caller's own come back."""
    seen = {}
    real = pyogrio.raw.read

    def spy(*args, **kwargs):
        seen.update({name: pyogrio.get_gdal_config_option(name) for name in CLOSED})
        return real(*args, **kwargs)

    monkeypatch.setattr(pyogrio.raw, "read", spy)
    before = {name: pyogrio.get_gdal_config_option(name) for name in CLOSED}
    read_vector(written(tmp_path, [TRANSECT]))
    assert {name: str(value) for name, value in seen.items()}.keys() == CLOSED.keys()
    assert all(value is not None for value in seen.values())
    assert {name: pyogrio.get_gdal_config_option(name) for name in CLOSED} == before
