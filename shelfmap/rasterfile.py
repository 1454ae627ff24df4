"""Raster files: opening one, its layout, coordinate system and axes, and reading its values.

Together with `rasters`, which writes, the only place that knows the raster library. Values leave here with rows
from south to north, columns from west to east, scaled, and NaN where missing.
"""

import math
import os
import re
import threading
import warnings
from collections import OrderedDict
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any, Final, NamedTuple

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.enums import MaskFlags
from rasterio.errors import NotGeoreferencedWarning, RasterioError
from rasterio.windows import Window

from shelfmap.errors import GridError
from shelfmap.geodesy import WGS84, Projection
from shelfmap.localfiles import CLOSED, archive_of, local_file, why_refused
from shelfmap.settings import GridSettings

__all__ = ["Indices", "RasterFile", "RasterHeader", "disk_file", "files_behind", "projection_of", "read_header"]

#: Half-open window: row0, row1, col0, col1.
Indices = tuple[int, int, int, int]

# Blocks the library keeps: enough for one row of tiles round the globe at 15 arc-seconds.
_CACHE_BYTES: Final = 256 * 2**20

#: Rasters kept open: systems allow a process a few hundred files.
_MOST_HANDLES: Final = 64
_HANDLES: Final = threading.local()
#: Types whose every value a float32 holds exactly.
_EXACT_IN_SINGLE: Final = ("int8", "uint8", "int16", "uint16", "float16", "float32")

#: A compressed block is unpacked whole, however little of it is asked for: none may be larger, bytes.
_MOST_BLOCK_BYTES: Final = 2**30
#: Cells have no smaller sides, degrees or units of the system: they would be one place in double precision.
_LEAST_STEP: Final = 1e-7
#: A larger grid than this is a mistake or a trap: seven times all of the globe at 15 arc-seconds, cells.
_MOST_CELLS: Final = 25_000_000_000


@dataclass(frozen=True, slots=True, kw_only=True)
class RasterFile:
    """How to read the values of one band: strings and numbers only.

    Parameters
    ----------
    path : str
        Name GDAL opens.
    band : int
        Band, from 1.
    dtype : str
        Type its values are stored in.
    n_rows, n_cols : int
        Size of the file.
    flip_rows, flip_cols : bool
        Whether the file runs from north to south, from east to west.
    nodata : float or None
        Stored value that means missing.
    scale, offset : float
        ``value = scale * stored + offset``.
    """

    path: str
    band: int
    dtype: str
    n_rows: int
    n_cols: int
    flip_rows: bool
    flip_cols: bool
    nodata: float | None
    scale: float
    offset: float

    @contextmanager
    def opened(self) -> Iterator[Any]:
        """Open the file for `values`, whatever number of windows is read.

        Raises
        ------
        GridError
            If the file has vanished, has changed or is damaged, now or while it is open.
        """
        with _opened(self.path) as (dataset, _):
            if (dataset.height, dataset.width) != (self.n_rows, self.n_cols):
                raise GridError(f"{self.path}: the file has changed since it was opened first; start again")
            yield dataset

    def values(self, dataset: Any, window: Indices) -> NDArray[np.floating[Any]]:
        """Values of a window that lies in the file, given in rows from the south and columns from the west.

        In single precision where that holds them exactly, else in double precision.

        Raises
        ------
        GridError
            If the file is damaged or shorter than its header says.
        """
        row0, row1, col0, col1 = window
        row_off = self.n_rows - row1 if self.flip_rows else row0
        col_off = self.n_cols - col1 if self.flip_cols else col0
        stored_window = Window(col_off, row_off, col1 - col0, row1 - row0)
        with _named(self.path):
            stored = dataset.read(self.band, window=stored_window)
            missing = self._missing(stored)
            if MaskFlags.per_dataset in dataset.mask_flag_enums[self.band - 1]:
                missing |= dataset.read_masks(self.band, window=stored_window) == 0
        value = stored.astype(np.float32 if stored.dtype in _EXACT_IN_SINGLE else np.float64)
        if (self.scale, self.offset) != (1.0, 0.0):
            value = self.scale * value.astype(np.float64) + self.offset
        value[missing] = np.nan
        return np.asarray(value[:: -1 if self.flip_rows else 1, :: -1 if self.flip_cols else 1])

    def _missing(self, stored: NDArray[Any]) -> NDArray[np.bool_]:
        """Where stored values mean missing."""
        is_float = np.issubdtype(stored.dtype, np.floating)
        missing = ~np.isfinite(stored) if is_float else np.zeros(stored.shape, dtype=bool)
        if self.nodata is None:
            return missing
        nodata: Any = self.nodata
        if is_float:  # a missing value such as -9999.9 is compared as the stored type rounds it
            with np.errstate(over="ignore"):
                nodata = stored.dtype.type(nodata)
        elif np.isfinite(nodata) and nodata == int(nodata):
            nodata = int(nodata)  # compared as it stands, without turning all into floats
        return np.asarray(missing | (stored == nodata))


@dataclass(frozen=True, slots=True, kw_only=True)
class RasterHeader:
    """What the header of a raster says, checked to be a regular north-up grid of real numbers.

    Parameters
    ----------
    file : RasterFile
        How to read its values.
    crs_wkt, crs_why : str
        Coordinate system and where it comes from.
    x0, y0 : float
        Centre of the south-west cell, grid units.
    dx, dy : float
        Cell sides, grid units, > 0.
    y_begin : float
        Outer edge of the row that the file begins with, grid units.
    tags : mapping of str
        Every text of the metadata, by label.
    vertical : mapping of str
        The texts among them that may tell elevations from depths, by attribute, the most telling first.
    """

    file: RasterFile
    crs_wkt: str
    crs_why: str
    x0: float
    y0: float
    dx: float
    dy: float
    y_begin: float
    tags: Mapping[str, str]
    vertical: Mapping[str, str]


def read_header(path: Path, settings: GridSettings) -> RasterHeader:
    """Read and check the header of one raster; its path in the settings is not used.

    Raises
    ------
    GridError
        If the file is missing, damaged or on a network, has not the band or variable asked for, is no regular
        north-up grid of real numbers, or has no usable coordinate system.
    """
    name = _with_variable(_local_name(path), settings.variable)
    band = settings.band
    with _opened(name) as (dataset, is_georeferenced):
        _check_layout(dataset, band, is_georeferenced, name)
        tags = {**dataset.tags(), **dataset.tags(band)}
        crs_wkt, crs_why = _crs_of(dataset, settings.crs, tags, name)
        transform, height, width = dataset.transform, dataset.height, dataset.width
        file = RasterFile(
            path=name,
            band=band,
            dtype=str(dataset.dtypes[band - 1]),
            n_rows=height,
            n_cols=width,
            flip_rows=transform.e < 0,
            flip_cols=transform.a < 0,
            nodata=dataset.nodatavals[band - 1] if settings.nodata is None else settings.nodata,
            scale=float(dataset.scales[band - 1]),
            offset=float(dataset.offsets[band - 1]),
        )
        vertical = _vertical_texts(dataset, band, projection_of(crs_wkt))
    return RasterHeader(
        file=file,
        crs_wkt=crs_wkt,
        crs_why=crs_why,
        x0=transform.c + transform.a * (0.5 if transform.a > 0 else width - 0.5),
        y0=transform.f + transform.e * (0.5 if transform.e > 0 else height - 0.5),
        dx=abs(transform.a),
        dy=abs(transform.e),
        y_begin=transform.f,
        tags=tags | vertical,
        vertical=vertical,
    )


@lru_cache(maxsize=64)
def projection_of(crs: str) -> Projection:
    """`Projection` of a system, made once."""
    return Projection(crs)


@contextmanager
def _opened(name: str) -> Iterator[tuple[Any, bool]]:
    """Open a raster without a network; also tell whether the file places its cells at all."""
    with _named(name), rasterio.Env(**CLOSED, GDAL_CACHEMAX=_CACHE_BYTES):
        yield _handle(name)


def _handle(name: str) -> tuple[Any, bool]:
    """Open raster, kept open for the next windows, so that blocks unpacked for one serve the others.

    One for each thread and process, opened anew once any file it is read from has changed or gone.
    """
    handles: OrderedDict[tuple[str, int], _Handle] = _HANDLES.__dict__.setdefault("open", OrderedDict())
    key = (name, os.getpid())
    if key not in handles or handles[key].stamps != _stamps(handles[key].files):
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            dataset = rasterio.open(name)
        misplaced = any(issubclass(warning.category, NotGeoreferencedWarning) for warning in caught)
        is_georeferenced = not (misplaced or dataset.gcps[0] or dataset.rpcs)
        files = _disk_files(dataset.files or [name])
        handles[key] = _Handle(dataset, is_georeferenced, files, _stamps(files))
        while len(handles) > _MOST_HANDLES:
            handles.popitem(last=False)  # closed once nobody reads from it
    handles.move_to_end(key)
    return handles[key].dataset, handles[key].is_georeferenced


class _Handle(NamedTuple):
    """A raster that is kept open, and the state of its files then."""

    dataset: Any
    is_georeferenced: bool
    files: tuple[Path, ...]
    stamps: list[tuple[int, ...]]


def _stamps(files: Iterable[Path]) -> list[tuple[int, ...]]:
    """Identity, size and time of change of files; nothing for one that has gone."""
    stamps: list[tuple[int, ...]] = []
    for file in files:
        try:
            stat = file.stat()
            stamps.append((stat.st_ino, stat.st_size, stat.st_mtime_ns))
        except OSError:
            stamps.append(())
    return stamps


def _disk_files(names: Iterable[str]) -> tuple[Path, ...]:
    """Local files, archives among them, behind names of GDAL's."""
    paths = [Path(name) for name in names]
    found = (path if (archive := archive_of(path)) is None else archive[1] for path in paths)
    return tuple(sorted({path for path in found if path.is_file()}))


@contextmanager
def _named(name: str) -> Iterator[None]:
    """Turn an error of the library into ours, with the name of the file: several may be open."""
    try:
        yield
    except RasterioError as error:
        reason = str(error.__cause__ or error).splitlines()[0][:160]
        raise GridError(
            f"{name}: cannot be read as a raster ({reason}); "
            "give a whole file in a format GDAL reads, such as GeoTIFF or netCDF"
        ) from error


def disk_file(path: Path) -> Path:
    """Give the local file behind a path: itself, or the archive that holds it.

    Raises
    ------
    GridError
        If it does not exist, is a folder, or is no local file.
    """
    if path.is_dir():
        raise GridError(f"{path}: is a folder; name the raster file in it")
    file, why = local_file(path, "grid.path")
    if file is None:
        raise GridError(f"{path.as_posix()}: {why}")
    return file


def files_behind(name: str) -> tuple[Path, ...]:
    """Every local file that a raster is read from: itself, those it refers to, or the archive that holds it.

    Raises
    ------
    GridError
        If it cannot be opened.
    """
    with _opened(name) as (dataset, _):
        return _disk_files(dataset.files or [name])


def _local_name(path: Path) -> str:
    """Name GDAL opens for a local file."""
    file = disk_file(path)
    try:
        why = why_refused(file)
    except OSError as error:
        raise GridError(f"{path}: cannot be opened ({error.strerror}); make it readable") from error
    if why is not None:
        raise GridError(f"{path}: {why}")
    archive = archive_of(path) if file != path else None
    if archive is not None:
        return f"/vsi{archive[0]}/{file.as_posix()}{archive[2]}"
    return str(path.absolute()) if ":" in str(path) else str(path)  # GDAL takes what stands before a colon for a driver


def _with_variable(name: str, variable: str | None) -> str:
    """Name GDAL opens for one variable of a file that may hold several."""
    with _opened(name) as (dataset, _):
        names: dict[str, str] = {re.split(r"[:/]", sub)[-1]: sub for sub in dataset.subdatasets}
        has_bands = dataset.count > 0
        only = dataset.tags(1).get("NETCDF_VARNAME", "") if has_bands else ""
    known = ", ".join(names) or only or "none"
    if variable is None:
        if names and not has_bands:
            raise GridError(f"{name}: holds several variables ({known}); name one in grid.variable")
        return name
    if variable not in names and variable != only:
        raise GridError(f"{name}: holds no variable {variable!r}; there are: {known}; mend or drop grid.variable")
    return names.get(variable, name)


def _check_layout(dataset: Any, band: int, is_georeferenced: bool, name: str) -> None:
    """Refuse rasters that are no regular north-up grid of real values."""
    if not 1 <= band <= dataset.count:
        raise GridError(f"{name}: has {dataset.count} band(s), no band {band}; set grid.band to one it has")
    if "complex" in str(dataset.dtypes[band - 1]):
        raise GridError(f"{name}: holds complex numbers; give a grid of real elevations or depths")
    block_bytes = math.prod(dataset.block_shapes[band - 1]) * np.dtype(dataset.dtypes[band - 1]).itemsize
    if dataset.width * dataset.height > _MOST_CELLS or block_bytes > _MOST_BLOCK_BYTES:
        raise GridError(
            f"{name}: says it has {dataset.height} by {dataset.width} cells in blocks of {block_bytes / 1e6:.0f} MB; "
            f"cut it to the region, of {_MOST_CELLS:.0e} cells at most, and write it in blocks of less than 1 GB"
        )
    if dataset.width < 2 or dataset.height < 2:
        raise GridError(
            f"{name}: has {dataset.height} row(s) and {dataset.width} column(s); a grid needs two of each at least"
        )
    if not is_georeferenced:
        raise GridError(
            f"{name}: does not say where its cells lie on a regular grid (no geotransform; unevenly spaced or "
            "missing coordinates); warp it to a regular north-up grid"
        )
    transform = dataset.transform
    steps = abs(transform.a), abs(transform.e)
    if not (np.isfinite(transform[:6]).all() and min(steps) >= _LEAST_STEP):
        raise GridError(
            f"{name}: cells have sides of {transform.a:g} and {transform.e:g} from {transform.c:g}, {transform.f:g}; "
            f"give a grid of steps of {_LEAST_STEP:g} at least, at finite places"
        )
    scale, offset = dataset.scales[band - 1], dataset.offsets[band - 1]
    if not (np.isfinite([scale, offset]).all() and scale != 0):
        raise GridError(f"{name}: values are scaled by {scale:g} and moved by {offset:g}; set a finite scale, not 0")
    if max(abs(transform.b), abs(transform.d)) > 1e-9 * max(abs(transform.a), abs(transform.e)):
        raise GridError(f"{name}: is rotated or sheared; warp it to a north-up grid")


def _crs_of(dataset: Any, wanted: str | None, tags: Mapping[str, str], name: str) -> tuple[str, str]:
    """Coordinate system as WKT and where it comes from."""
    if wanted is not None:
        crs, why = wanted, "set by grid.crs"
    elif dataset.crs is not None:
        crs, why = dataset.crs.to_wkt(), "from the file"
    elif _has_degree_axes(tags):
        crs, why = WGS84, "taken as EPSG:4326, for its axes are longitude and latitude in degrees"
    else:
        raise GridError(f"{name}: has no coordinate system; set grid.crs, such as EPSG:4326 for degrees")
    system = projection_of(crs).crs
    cure = "; warp the grid to EPSG:4326 or a projected system, or set grid.crs"
    if not (system.is_geographic or system.is_projected):
        raise GridError(f"{name}: {system.type_name} {system.name!r} does not say where cells lie on a map{cure}")
    if system.is_geographic:
        meridian = system.prime_meridian
        if system.is_derived or (meridian is not None and meridian.longitude != 0):
            raise GridError(f"{name}: {system.name!r} has a rotated pole or a meridian other than Greenwich{cure}")
        if abs(system.axis_info[0].unit_conversion_factor - np.pi / 180) > 1e-9:
            raise GridError(f"{name}: {system.name!r} counts in {system.axis_info[0].unit_name}, not degrees{cure}")
    return str(system.to_wkt()), why


def _has_degree_axes(tags: Mapping[str, str]) -> bool:
    """Whether netCDF attributes say that the axes are longitude and latitude (CF 1.11, sections 4.1 and 4.2)."""
    units = {text.lower() for label, text in tags.items() if label.endswith("#units")}
    return all(any(re.fullmatch(rf"degrees?_?{side}\w*", unit) for unit in units) for side in "en")


def _vertical_texts(dataset: Any, band: int, projection: Projection) -> dict[str, str]:
    """Texts that may tell elevations from depths, by attribute, the most telling first."""
    tags = dataset.tags(band)
    texts = {key: tags.get(key, "") for key in ("positive", "standard_name", "long_name")}
    texts["units"] = dataset.units[band - 1] or ""
    texts["band description"] = dataset.descriptions[band - 1] or ""
    texts["variable"] = tags.get("NETCDF_VARNAME", "")
    texts["vertical system"] = ", ".join(part.name for part in projection.crs.sub_crs_list if part.is_vertical)
    return {label: text for label, text in texts.items() if text}
