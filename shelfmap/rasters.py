"""Elevations and maps of several bands as GeoTIFFs on disk: whole or not at all.

GDAL makes every file in memory, and its bytes go to the disk in one move. Writing to a full disk by itself, it was
seen to end without an error and with the last kilobytes missing, and to crash over the reduced copies of a map.
"""

import tempfile
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from rasterio import Affine
from rasterio.crs import CRS
from rasterio.errors import CRSError
from rasterio.io import MemoryFile

from shelfmap.errors import GridError, OutputExistsError

__all__ = ["Band", "companions", "place_raster", "replace_file", "write_cog", "write_geotiff"]

#: Predictor of the deflate compression by kind of number: differences for whole numbers, byte planes for reals.
_PREDICTOR: Final = {"int16": 2, "float32": 3}

#: What GDAL and programs on it keep beside a raster and believe more than the raster itself.
_COMPANIONS: Final = (".aux.xml", ".ovr", ".msk")


@dataclass(frozen=True, slots=True, kw_only=True)
class Band:
    """One quantity of a map.

    Parameters
    ----------
    name : str
        What GIS programs list it under, such as ``lag_deg``; different for every band of a map.
    unit : str
        Unit of the values, empty for plain numbers.
    description : str
        What the values mean, in a sentence.
    values : (n_rows, n_cols) float32 array
        First row in the south, first column in the west, NaN where there is no value.
    tags : mapping of str to str
        Further metadata of this band.
    """

    name: str
    unit: str
    description: str
    values: NDArray[np.float32]
    tags: Mapping[str, str] = field(default_factory=dict)


def write_geotiff(  # noqa: PLR0913 - a raster's place is five numbers, and each has a name of its own
    path: str | Path,
    elevation: NDArray[Any],
    *,
    x0: float,
    y0: float,
    dx: float,
    dy: float,
    crs: str,
    nodata: float | None = None,
    description: str = "",
    unit: str = "m",
    tags: Mapping[str, str] | None = None,
    overwrite: bool = False,
) -> Path:
    """Write one band as a north-up GeoTIFF, tiled and deflated; the file is there whole or not at all.

    Parameters
    ----------
    path : str or Path
        File to write; its folder must exist.
    elevation : (n_rows, n_cols) array of float32 or int16
        Values, first row in the south, first column in the west. NaN marks missing cells of a float32 array.
    x0, y0 : float
        Centre of the south-west cell, units of `crs`.
    dx, dy : float
        Cell sides, units of `crs`, > 0.
    crs : str
        Coordinate system, ``EPSG:n`` or WKT.
    nodata : float, optional
        Value declared missing; NaN cells are stored as this value. Without it NaN itself stands in the file.
    description, unit : str
        What the band holds, and its unit.
    tags : mapping of str to str, optional
        Metadata of the file.
    overwrite : bool
        Whether an existing file is replaced.

    Returns
    -------
    Path
        The file written. The same call gives the same bytes as long as GDAL and its zlib are the same.

    Raises
    ------
    GridError
        If the array, the cell sides, `nodata` or `crs` cannot be stored, or the file cannot be written; an earlier
        file is then left as it was.
    OutputExistsError
        If the file, or what GDAL keeps beside it, exists and `overwrite` is off.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     ramp = np.array([[-2, -1], [0, 1]], dtype=np.int16)
    ...     path = write_geotiff(f"{folder}/ramp.tif", ramp, x0=0, y0=50, dx=0.5, dy=0.5, crs="EPSG:4326")
    ...     path.name, path.read_bytes()[:2]
    ('ramp.tif', b'II')
    """
    path = Path(path)
    elevation = _storable(np.asarray(elevation), nodata)
    n_rows, n_cols = elevation.shape
    transform = _north_up(n_rows, x0=x0, y0=y0, dx=dx, dy=dy)
    system = _system(crs)
    _check_target(path, overwrite=overwrite)
    with MemoryFile() as memory:
        with memory.open(
            driver="GTiff", height=n_rows, width=n_cols, count=1, dtype=elevation.dtype, crs=system, nodata=nodata,
            transform=transform, tiled=True, blockxsize=256, blockysize=256, compress="deflate", zlevel=9,
            predictor=_PREDICTOR[elevation.dtype.name], bigtiff="if_safer",
        ) as target:  # fmt: skip
            target.write(elevation[::-1], 1)
            target.set_band_description(1, description)
            target.set_band_unit(1, unit)
            target.update_tags(**dict(sorted((tags or {}).items())))
        _put(path, memory.getbuffer())
    return path


def write_cog(  # noqa: PLR0913 - a raster's place is five numbers, and each has a name of its own
    path: str | Path,
    bands: Sequence[Band],
    *,
    x0: float,
    y0: float,
    dx: float,
    dy: float,
    crs: str,
    tags: Mapping[str, str] | None = None,
    overwrite: bool = False,
) -> Path:
    """Write bands over the same cells as a Cloud-Optimised GeoTIFF; the file is there whole or not at all.

    NaN is declared to be nodata. Each band carries its name as GDAL's band description, its unit as GDAL's unit, its
    description as tag DESCRIPTION, and its statistics, so that a program that wants them writes no file beside it (for
    a band of NaN alone GDAL does all the same).

    Maps of more than 512 cells a side carry reduced copies for zooming out. Their values are picked, never averaged:
    the mean of lags of 359 and 1 degree would be 180. A narrow peak may therefore be missing when zoomed out.

    Parameters
    ----------
    path : str or Path
        File to write; its folder must exist.
    bands : sequence of Band
        At least one, all of one shape.
    x0, y0 : float
        Centre of the south-west cell, units of `crs`. Longitudes may run on past 180, as for a map from 170 to 203:
        it then stays one piece, at its place on maps of 0 to 360 degrees and, reprojected, on those of the Pacific.
        On a map that ends at 180 only the part west of that shows.
    dx, dy : float
        Cell sides, units of `crs`, > 0.
    crs : str
        Coordinate system, ``EPSG:n`` or WKT.
    tags : mapping of str to str, optional
        Metadata of the file: title, cautions, definitions. A name of the kind ``TIFFTAG_IMAGEDESCRIPTION`` becomes
        that field of the TIFF.
    overwrite : bool
        Whether an existing file is replaced, and what GDAL keeps beside it removed.

    Returns
    -------
    Path
        The file written. The same call gives the same bytes as long as GDAL and its zlib are the same.

    Raises
    ------
    GridError
        If the bands, the cell sides or `crs` cannot be stored, or the file cannot be written; an earlier file is
        then left as it was.
    OutputExistsError
        If the file, or what GDAL keeps beside it, exists and `overwrite` is off.

    Notes
    -----
    Takes about three times the memory of the bands beside them: GDAL's copy, the compressed file, the reduced copies.

    Examples
    --------
    >>> import tempfile
    >>> gain = Band(name="gain", unit="", description="Height over that offshore.", values=np.ones((3, 2), np.float32))
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     write_cog(f"{folder}/map.tif", [gain], x0=0, y0=50, dx=0.5, dy=0.5, crs="EPSG:4326").name
    'map.tif'
    """
    path = Path(path)
    n_rows, n_cols = _common_shape(bands)
    transform = _north_up(n_rows, x0=x0, y0=y0, dx=dx, dy=dy)
    system = _system(crs)
    _check_target(path, overwrite=overwrite)
    with MemoryFile() as memory:
        # level 9 of deflate made 2 % less of a smooth map and took five times as long as the level GDAL uses by itself
        with memory.open(
            driver="COG", height=n_rows, width=n_cols, count=len(bands), dtype="float32", crs=system, nodata=np.nan,
            transform=transform, compress="deflate", predictor="floating_point", blocksize=512, bigtiff="if_safer",
            overview_resampling="nearest", statistics="yes",
        ) as target:  # fmt: skip
            for index, band in enumerate(bands, 1):
                target.write(band.values[::-1], index)
                target.set_band_description(index, band.name)
                target.set_band_unit(index, band.unit)
                target.update_tags(index, **dict(sorted({**band.tags, "DESCRIPTION": band.description}.items())))
            target.update_tags(**dict(sorted((tags or {}).items())))
        _put(path, memory.getbuffer())
    return path


def _common_shape(bands: Sequence[Band]) -> tuple[int, int]:
    """Rows and columns of bands that one file can hold."""
    names = [band.name for band in bands]
    if not all(names) or not names or len(set(names)) < len(names):
        raise GridError(f"bands are named {names}: wanted at least one, each with a name of its own")
    for band in bands:
        _check_values(band.values, ("float32",), f"band {band.name}")
    shapes = {band.name: band.values.shape for band in bands}
    if len(set(shapes.values())) > 1:
        raise GridError(f"bands have shapes {shapes}: wanted one shape; write maps of other cells to their own files")
    n_rows, n_cols = bands[0].values.shape
    return n_rows, n_cols


def _north_up(n_rows: int, *, x0: float, y0: float, dx: float, dy: float) -> Affine:
    """From column and row of the file, first row in the north, to the place of the cell's north-west corner."""
    if not (dx > 0 and dy > 0 and np.isfinite([x0, y0, dx, dy]).all()):
        raise GridError(
            f"x0 = {x0}, y0 = {y0}, dx = {dx}, dy = {dy}: all must be finite and the cell sides above 0; "
            "give the array with its first row in the south"
        )
    return Affine(dx, 0.0, x0 - dx / 2, 0.0, -dy, y0 + (n_rows - 0.5) * dy)


def _system(crs: str) -> CRS:
    """Give the coordinate system as GDAL knows it."""
    try:
        return CRS.from_user_input(crs)
    except CRSError as error:
        raise GridError(f"coordinate system {crs!r} is unknown to GDAL; give one as EPSG:n or WKT") from error


def _check_values(values: NDArray[Any], kinds: Sequence[str], what: str) -> None:
    """Refuse an array that is no raster of finite numbers of one of these kinds."""
    if values.ndim != 2 or values.size == 0:
        raise GridError(f"{what} of shape {values.shape}: wanted (n_rows, n_cols) with at least one cell")
    if values.dtype.name not in kinds:
        raise GridError(f"{what} of {values.dtype}: stored is {' or '.join(kinds)} only; convert it with .astype")
    if np.isinf(values).any():
        raise GridError(f"{what} holds infinite values; put NaN where there is no value")


def _storable(elevation: NDArray[Any], nodata: float | None) -> NDArray[Any]:
    """Give the array as it goes into the file, NaN as `nodata` where there is one."""
    _check_values(elevation, list(_PREDICTOR), "array")
    if nodata is None:
        return elevation
    if not _fits(nodata, elevation.dtype):
        raise GridError(f"nodata = {nodata} does not fit {elevation.dtype}; choose a value that does, say -32768")
    return np.where(np.isnan(elevation), elevation.dtype.type(nodata), elevation)


def _fits(value: float, dtype: np.dtype[Any]) -> bool:
    """Whether a number survives being stored as `dtype`."""
    if dtype.kind == "f":
        return bool(np.isnan(value) or abs(value) <= float(np.finfo(dtype).max))
    limits = np.iinfo(dtype)
    return float(value).is_integer() and limits.min <= value <= limits.max


def _check_target(path: Path, *, overwrite: bool) -> None:
    """Refuse a target that cannot or must not be written, before any work is done."""
    if path.is_dir():
        raise GridError(f"{path} is a folder; give the name of a file in it")
    if not path.parent.is_dir():
        raise GridError(f"folder {path.parent} does not exist; make it first or write elsewhere")
    there = [file for file in (path, *companions(path)) if file.exists()]
    if there and not overwrite:
        raise OutputExistsError(f"{there[0]} exists already; allow it to be overwritten or choose another name")


def companions(path: Path) -> list[Path]:
    """Files that GDAL keeps beside a raster, there or not."""
    return [path.with_name(path.name + suffix) for suffix in _COMPANIONS]


def _put(path: Path, content: memoryview) -> None:
    """Replace a raster, and remove what was known of the earlier one: GDAL would take it for the new one's."""
    replace_file(path, content)
    _forget(path)


def _forget(path: Path) -> None:
    for companion in companions(path):
        companion.unlink(missing_ok=True)


def place_raster(part: Path, path: Path) -> Path:
    """Path of a whole raster, moved there from `part` on the same disk; what was known of an earlier one goes.

    Raises
    ------
    GridError
        If it cannot be moved.
    """
    try:
        part.replace(path)
    except OSError as error:
        raise GridError(
            f"{path} cannot be put in place ({error.strerror}); close it in other programs and run again"
        ) from error
    _forget(path)
    return path


def replace_file(path: Path, content: bytes | memoryview) -> None:
    """Put bytes under a name in one move: all of them are there, or what was there before.

    Raises
    ------
    GridError
        If they cannot be written, with the system's reason.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     replace_file(Path(folder, "note.txt"), b"80 m")
    ...     Path(folder, "note.txt").read_text()
    '80 m'
    """
    target = path.resolve()  # through links, so that a link stays one
    try:
        with tempfile.TemporaryDirectory(prefix=f".{target.name}.", suffix=".part", dir=target.parent) as folder:
            part = Path(folder, target.name)  # a folder of its own: no other file is touched
            part.write_bytes(content)
            part.replace(target)
    except OSError as error:
        raise GridError(
            f"{path} cannot be written: {error.strerror}; free space, close the program that holds it "
            "or choose a folder you may write to"
        ) from error
