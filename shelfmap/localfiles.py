"""Which files may be handed to GDAL: local ones, whole, that send it nowhere else.

GDAL opens far more than files: servers, databases, pipes, and descriptions (XML, JSON) of data that lie elsewhere.
A grid or a coast often comes from a stranger, so that what it names is looked at before GDAL follows it. `CLOSED` is
the second lock: with it, what slips through finds no way out of the machine.
"""

import gzip
import re
import tarfile
import zipfile
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Final
from xml.etree import ElementTree as ET

__all__ = ["CLOSED", "archive_of", "local_file", "why_refused", "why_unnameable"]

#: Options of GDAL under which it reaches no network, runs no code of a file's, and loads nothing a file names.
CLOSED: Final[Mapping[str, str]] = {
    "CPL_VSIL_CURL_ALLOWED_FILENAME": "none",
    "GDAL_HTTP_PROXY": "http://127.0.0.1:9",  # the discard port of this machine: every request ends here
    "GDAL_HTTPS_PROXY": "http://127.0.0.1:9",
    "GDAL_HTTP_CONNECTTIMEOUT": "2",
    "GDAL_VRT_ENABLE_PYTHON": "NO",
    "OGR_SQLITE_ALLOW_EXTERNAL_ACCESS": "NO",
    "GML_DOWNLOAD_SCHEMA": "NO",
    "GML_SKIP_RESOLVE_ELEMS": "ALL",
}

_ARCHIVE: Final = re.compile(r"/vsi(zip|tar|gzip)/+(.+?\.(?:zip|tgz|tar\.gz|tar|gz))((?:/.*)?)", re.IGNORECASE)
_NETWORK: Final = re.compile(r"/vsi|\b[a-z][a-z0-9+.-]+:/|^\w{2,}:|<", re.IGNORECASE)
#: What sends GDAL out of the machine or through a file system of its own, in any text of a description.
_ELSEWHERE: Final = re.compile(r"://|/vsi(?!(?:zip|tar|gzip)/)|^\s*<|^\s*\{|\bPG:|\bMYSQL:|\bODBC:", re.IGNORECASE)
_SERVICE: Final = re.compile(
    rb"<(GDAL_WM|WMS_|WMT_|WMTS|WCS_|OGRWFS|OGROAPIF|OGCAPI|OGRCSW|MRF_META|GDALTileIndex|(\w+:)?\w*Capabilities\b)"
)
_VIRTUAL: Final = re.compile(rb"<(VRTDataset|OGRVRTDataSource)", re.IGNORECASE)
_ROOT: Final = re.compile(rb"(?:\s|<\?.*?\?>|<!--.*?-->)*<([\w:.-]+)", re.DOTALL)
_JSON_ELSEWHERE: Final = re.compile(rb'"gdal_streamed_alg"|"crs"\s*:\s*\{[^{}]*"(?:link|url)"|"stac_version"')
#: Elements and attributes of virtual rasters and layers that name a file.
_FILE_NAMES: Final = ("sourcefilename", "sourcedataset", "srcdatasource")
_SUBDATASET: Final = re.compile(r'[A-Za-z0-9_]+:(?:\d+:)?(?:"([^"]+)"|([^:]+))(?::.*)?')
_NO_FILES: Final = ("srs", "sourcesrs", "targetsrs", "layersrs", "gcplist", "description", "unittype", "categorynames")

#: Characters at which pyogrio cuts a path (measured with 0.13).
_CUTTING: Final = (";", "!", "\n", "\r", "\t")
_HEAD_BYTES: Final = 4096
_MOST_XML_BYTES: Final = 100_000_000
_MOST_MEMBERS: Final = 10_000
#: Dimensions, variables and attributes of a classic netCDF file: the library sets 3 kB aside for each it promises.
_MOST_NAMES: Final = 100_000
#: Virtual files may name virtual files, this deep.
_MOST_LEVELS: Final = 8

_TIFF: Final = (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")


def archive_of(path: Path) -> tuple[str, Path, str] | None:
    """Kind, file and inner name of a path into a local archive, `/vsizip/a.zip/dem.tif`; None where it is none.

    Examples
    --------
    >>> archive_of(Path("/vsizip/nowhere.zip/dem.tif")) is None
    True
    """
    found = _ARCHIVE.fullmatch(path.as_posix())
    if found is None:
        return None
    # a Path folds the double slash of /vsizip//tmp/a.zip, so the archive may be absolute all the same
    for candidate in (Path("/" + found[2]), Path(found[2])):
        if candidate.is_file():
            return found[1].lower(), candidate, found[3]
    return None


def local_file(path: Path, setting: str) -> tuple[Path | None, str]:
    """Local file behind a path, itself or the archive that holds it, and what is wrong where there is none.

    Parameters
    ----------
    path : Path
        As given by the user.
    setting : str
        Setting it comes from, for the cure.
    """
    if path.is_file():
        return path, ""
    archive = archive_of(path)
    if archive is not None:
        return archive[1], ""
    if path.exists() and not path.is_dir():
        return None, "is a pipe or a device, not a file; copy what it gives into a file"
    if path.is_symlink() and not path.exists():
        return None, "is a link that leads nowhere; mend it or name the file itself"
    text = path.as_posix()
    if _NETWORK.search(text) and not _ARCHIVE.fullmatch(text):
        return None, "network paths are not opened in this version; download the data and name the local file"
    return None, f"no such file; check {setting}, which is relative to the settings file"


def why_unnameable(path: Path) -> str | None:
    """Why the library of vectors takes the name of a file for an address and would cut it; None where it does not.

    Examples
    --------
    >>> why_unnameable(Path("/data/a;b.gpkg"))
    "has ';' in its path, which the library of vectors takes for part of an address; rename the file or folder"
    """
    found = next((c for c in _CUTTING if c in str(path.absolute())), None)
    if found is None:
        return None
    return (
        f"has {found!r} in its path, which the library of vectors takes for part of an address; "
        "rename the file or folder"
    )


def why_refused(path: Path) -> str | None:
    """Why a local file is not handed to GDAL, with the cure; None where it may be.

    Virtual rasters and layers are read, and every file they name is looked at in the same way. Those in an archive,
    descriptions of services, and files beside a raster that are no TIFF are refused.

    Parameters
    ----------
    path : Path
        A regular file, or an archive.

    Raises
    ------
    OSError
        If it cannot be read.
    """
    return _why_refused(path.absolute(), 0)


def _why_refused(path: Path, level: int) -> str | None:
    with path.open("rb") as stream:
        head = stream.read(_HEAD_BYTES)
    return (
        _why_description(path, head, level)
        or _why_netcdf(path, head)
        or next((why for inner in _members(path, head) if (why := _why_member(*inner))), None)
        or _why_beside(path)
    )


def _why_description(path: Path, head: bytes, level: int) -> str | None:
    """What speaks against a file of text that stands for other data."""
    start = head.lstrip(b"\xef\xbb\xbf \t\r\n\0")
    if ".gti." in path.name.lower():
        return "is an index of files that may lie anywhere; name the data themselves"
    if _SERVICE.search(head):
        return "describes a network service, which is not opened in this version; download the data"
    if start.startswith(b"{") and _holds(path, _JSON_ELSEWHERE):
        return "sends its reader elsewhere for its data or its coordinate system; save it as GeoPackage or GeoTIFF"
    if _VIRTUAL.search(head):  # anywhere, as GDAL looks for it
        return _why_virtual(path, level)
    root = _ROOT.match(start)
    name = b"" if root is None else root[1].lower()
    if name.startswith((b"gdal", b"ogr")) and b":" not in name:
        return "describes data that lie elsewhere; name the data themselves"
    return None


def _holds(path: Path, pattern: re.Pattern[bytes]) -> bool:
    """Whether a file holds a pattern of less than 64 KiB, read a piece at a time."""
    with path.open("rb") as stream:
        kept = b""
        while piece := stream.read(1 << 24):
            if pattern.search(kept + piece):
                return True
            kept = piece[-(1 << 16) :]
    return False


def _why_virtual(path: Path, level: int) -> str | None:
    """What speaks against a virtual raster or layer: it is no plain XML, or names what is no local file."""
    if level > _MOST_LEVELS:
        return "names virtual files in a circle, or too deep; name the data themselves"
    content = path.read_bytes() if path.stat().st_size <= _MOST_XML_BYTES else b"<!DOCTYPE"
    if b"<!DOCTYPE" in content or b"<!ENTITY" in content:
        return "is no plain virtual file; make it anew"
    try:
        tree = ET.fromstring(content)
    except (ET.ParseError, ValueError, LookupError) as error:
        return f"is no valid virtual file ({error}); make it anew"
    for element in tree.iter():
        if element.tag.lower() in ("srcsql", "pixelfunctioncode"):
            return f"holds code to run ({element.tag}); save what it makes as a file of its own"
    for kind, text, is_relative in _texts(tree):
        if kind in _FILE_NAMES:
            why = _why_named(path.parent, text.strip(), is_relative, level)
        else:
            why = "is no local file" if _ELSEWHERE.search(text) else None
        if why is not None:
            return f"names {text.strip()[:100]!r}, which {why}; make it anew from local files"
    return None


def _texts(tree: ET.Element) -> Iterator[tuple[str, str, bool]]:
    """Every text and attribute with the lower-case name it stands under, and whether it is relative to the file.

    Remarks and coordinate systems, which name no files but hold addresses, are left out.
    """
    waiting = [(tree, False)]  # not by calls: a file may nest as deep as it likes
    while waiting:
        element, is_remark = waiting.pop()
        kind = element.tag.lower()
        attributes = {key.lower(): value for key, value in element.attrib.items()}
        if kind in _NO_FILES or is_remark:
            continue
        if element.text:
            yield kind, element.text, attributes.get("relativetovrt", "0").strip().lower() in ("1", "yes", "true")
        yield from ((key, value, False) for key, value in attributes.items())
        # metadata of a domain of its own may be sources, overviews or axes
        waiting.extend((inner, kind == "metadata" and "domain" not in attributes) for inner in element)


def _why_named(folder: Path, name: str, is_relative: bool, level: int) -> str | None:
    """What speaks against a file that a virtual one names."""
    path = folder / name if is_relative else Path(name)
    try:
        if not path.is_file() and (found := _SUBDATASET.fullmatch(name)):
            inner = found[1] or found[2]
            path = folder / inner if is_relative else Path(inner)
        archive = archive_of(path)
        path = path if archive is None else archive[1]
        if not path.is_file():
            return "is no local file"
        return _why_refused(path, level + 1)
    except (OSError, ValueError) as error:
        return f"cannot be read ({error})"


def _why_netcdf(path: Path, head: bytes) -> str | None:
    """What speaks against a classic netCDF file: it promises more than it can hold, for which memory is set aside."""
    if head[:4] not in (b"CDF\1", b"CDF\2", b"CDF\5"):
        return None
    word = 8 if head[3] == 5 else 4  # bytes of a count
    promised, size = 0, path.stat().st_size
    with path.open("rb") as stream:

        def number(n_bytes: int = word) -> int:
            return int.from_bytes(stream.read(n_bytes), "big")

        def promises() -> range:
            nonlocal promised
            number(4)  # says of what there is a list
            promised += (n := number())
            return range(n if promised <= _MOST_NAMES else 0)

        def skip(n_bytes: int) -> None:
            stream.seek(min(stream.tell() - (-n_bytes // 4) * 4, size))

        def attributes() -> None:
            for _ in promises():
                skip(number())
                n_value_bytes = (1, 1, 1, 2, 4, 4, 8, 1, 2, 4, 8, 8)[min(number(4), 11)]
                skip(number() * n_value_bytes)

        skip(4 + word)
        for _ in promises():
            skip(number())
            number()
        attributes()
        for _ in promises():
            skip(number())
            skip(number() * word)
            attributes()
            skip(4 + word + (4 if head[3] == 1 else 8))
    return "is damaged: its header promises more than it can hold; copy it anew" if promised > _MOST_NAMES else None


def _members(path: Path, head: bytes) -> Iterator[tuple[str, bytes]]:
    """Name and first bytes of the files in an archive; none where it is no archive, or a damaged one."""
    try:
        if head.startswith(b"PK\x03\x04"):
            with zipfile.ZipFile(path) as archive:
                for member in archive.infolist()[:_MOST_MEMBERS]:
                    with archive.open(member) as stream:
                        yield member.filename, stream.read(_HEAD_BYTES)
        elif path.name.lower().endswith((".tar", ".tgz", ".tar.gz")):
            with tarfile.open(path) as archive:
                for _, entry in zip(range(_MOST_MEMBERS), archive, strict=False):
                    inner = archive.extractfile(entry) if entry.isfile() else None
                    yield entry.name, b"" if inner is None else inner.read(_HEAD_BYTES)
        elif head.startswith(b"\x1f\x8b"):
            with gzip.open(path) as unpacked:
                yield path.stem, unpacked.read(_HEAD_BYTES)
    except (OSError, EOFError, RuntimeError, NotImplementedError, zipfile.BadZipFile, tarfile.TarError):
        return


def _why_member(name: str, head: bytes) -> str | None:
    start = head.lstrip(b"\xef\xbb\xbf \t\r\n\0").lower()
    if _SERVICE.search(head) or start.startswith((b"<vrt", b"<ogr", b"<gdal")) or _JSON_ELSEWHERE.search(head):
        return f"holds {name}, which stands for data that lie elsewhere; unpack the archive and name the data"
    return None


def _start_of(path: Path, n_bytes: int) -> bytes:
    """First bytes of a file; none of what is no file."""
    if not path.is_file():
        return b""
    with path.open("rb") as stream:
        return stream.read(n_bytes)


def _why_beside(path: Path) -> str | None:
    """What speaks against files that GDAL takes as part of a raster: overviews, mask, remarks."""
    for suffix in (".ovr", ".msk", ".aux.xml"):
        beside = path.with_name(path.name + suffix)
        if not beside.exists():
            continue
        content = _start_of(beside, _MOST_XML_BYTES if suffix == ".aux.xml" else 4)
        if not content.startswith(b"<PAM" if suffix == ".aux.xml" else _TIFF) or b"OVERVIEW_FILE" in content.upper():
            return f"has {beside.name} beside it, which is no plain side file; remove it"
    return None
