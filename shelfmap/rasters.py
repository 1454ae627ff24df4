"""Elevations as a GeoTIFF on disk: whole or not at all."""

import tempfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from rasterio import Affine
from rasterio.crs import CRS
from rasterio.errors import CRSError
from rasterio.io import MemoryFile

from shelfmap.errors import GridError, OutputExistsError

__all__ = ["check_raster_target", "crs_of", "replace_file", "write_geotiff"]

#: Predictor of the deflate compression by kind of number: differences for whole numbers, byte planes for reals.
_PREDICTOR = {"int16": 2, "float32": 3}


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
        If the file exists and `overwrite` is off.

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
    if not (dx > 0 and dy > 0 and np.isfinite([x0, y0, dx, dy]).all()):
        raise GridError(
            f"x0 = {x0}, y0 = {y0}, dx = {dx}, dy = {dy}: all must be finite and the cell sides above 0; "
            "give the array with its first row in the south"
        )
    system = crs_of(crs)
    check_raster_target(path, overwrite=overwrite)
    n_rows, n_cols = elevation.shape
    # in memory first: a full disk is then an ordinary error of writing bytes, never a file that looks finished
    with MemoryFile() as memory:
        with memory.open(
            driver="GTiff", height=n_rows, width=n_cols, count=1, dtype=elevation.dtype, crs=system, nodata=nodata,
            transform=Affine(dx, 0.0, x0 - dx / 2, 0.0, -dy, y0 + (n_rows - 0.5) * dy),
            tiled=True, blockxsize=256, blockysize=256, compress="deflate", zlevel=9, bigtiff="if_safer",
            predictor=_PREDICTOR[elevation.dtype.name],
        ) as target:  # fmt: skip
            target.write(elevation[::-1], 1)
            target.set_band_description(1, description)
            target.set_band_unit(1, unit)
            target.update_tags(**dict(sorted((tags or {}).items())))
        replace_file(path, memory.getbuffer())
    return path


def _storable(elevation: NDArray[Any], nodata: float | None) -> NDArray[Any]:
    """Give the array as it goes into the file, NaN as `nodata` where there is one."""
    if elevation.ndim != 2 or elevation.size == 0:
        raise GridError(f"array of shape {elevation.shape}: wanted (n_rows, n_cols) with at least one cell")
    if elevation.dtype.name not in _PREDICTOR:
        raise GridError(f"array of {elevation.dtype}: only float32 and int16 are stored; convert it with .astype")
    if np.isinf(elevation).any():
        raise GridError("array holds infinite values; put NaN where there is no value")
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


def crs_of(crs: str) -> CRS:
    """Coordinate system as GDAL knows it.

    Raises
    ------
    GridError
        If GDAL does not know it.
    """
    try:
        return CRS.from_user_input(crs)
    except CRSError as error:
        raise GridError(f"coordinate system {crs!r} is unknown to GDAL; give one as EPSG:n or WKT") from error


def check_raster_target(path: Path, *, overwrite: bool) -> None:
    """Refuse a target that cannot or must not be written, before any work is done.

    Raises
    ------
    GridError
        If it is a folder, or its folder does not exist.
    OutputExistsError
        If it exists and may not be replaced.
    """
    if path.is_dir():
        raise GridError(f"{path} is a folder; give the name of a file in it")
    if not path.parent.is_dir():
        raise GridError(f"folder {path.parent} does not exist; make it first or write elsewhere")
    if path.exists() and not overwrite:
        raise OutputExistsError(f"{path} exists already; allow it to be overwritten or choose another name")


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
