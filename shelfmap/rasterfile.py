"""Raster files: opening one, its layout, coordinate system and axes, and reading its values.

Together with `rasters`, which writes, the only place that knows the raster library. Values leave here with rows
from south to north, columns from west to east, scaled, and NaN where missing.
"""

import re
import warnings
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any, Final

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.enums import MaskFlags
from rasterio.errors import NotGeoreferencedWarning, RasterioError
from rasterio.windows import Window

from shelfmap.errors import GridError
from shelfmap.geodesy import WGS84, Projection
from shelfmap.settings import GridSettings

__all__ = ["Indices", "RasterFile", "RasterHeader", "disk_file", "files_behind", "projection_of", "read_header"]

#: Half-open window: row0, row1, col0, col1.
Indices = tuple[int, int, int, int]

# Blocks the library keeps: enough for one row of tiles round the globe at 15 arc-seconds.
_CACHE_MB: Final = 256

_LOCAL_ARCHIVE: Final = re.compile(r"/vsi(zip|tar|gzip)/+(.+?\.(?:zip|tgz|tar\.gz|tar|gz))((?:/.*)?)", re.IGNORECASE)
_NETWORK_PATH: Final = re.compile(r"/vsi|\b[a-z][a-z0-9+.-]+:/|^\w{2,}:|<", re.IGNORECASE)
_NETWORK_FILE: Final = re.compile(rb"<(GDAL_WMS|GDAL_WMTS|WCS_GDAL|WMS_|WMT_|WMTS|Capabilities)")


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

    def values(self, dataset: Any, window: Indices) -> NDArray[np.float64]:
        """Values of a window that lies in the file, given in rows from the south and columns from the west.

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
            return self._values(dataset, stored_window)

    def _values(self, dataset: Any, stored_window: Window) -> NDArray[np.float64]:
        stored = dataset.read(self.band, window=stored_window)
        missing = ~np.isfinite(stored)
        if self.nodata is not None:
            # a missing value such as -9999.9 is compared as the stored type rounds it
            floating = np.issubdtype(stored.dtype, np.floating)
            with np.errstate(over="ignore"):
                missing |= stored == (stored.dtype.type(self.nodata) if floating else self.nodata)
        if MaskFlags.per_dataset in dataset.mask_flag_enums[self.band - 1]:
            missing |= dataset.read_masks(self.band, window=stored_window) == 0
        value = self.scale * stored.astype(np.float64) + self.offset
        value[missing] = np.nan
        return np.asarray(value[:: -1 if self.flip_rows else 1, :: -1 if self.flip_cols else 1])


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
    with _named(name), rasterio.Env(CPL_VSIL_CURL_ALLOWED_FILENAME="none", GDAL_CACHEMAX=_CACHE_MB):
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            dataset = rasterio.open(name)
        with dataset:
            misplaced = any(issubclass(warning.category, NotGeoreferencedWarning) for warning in caught)
            yield dataset, not (misplaced or dataset.gcps[0] or dataset.rpcs)


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
    if path.is_file():
        return path
    text = path.as_posix()
    if archive := _archive(text):
        return archive
    if not _LOCAL_ARCHIVE.fullmatch(text) and _NETWORK_PATH.search(text):
        raise GridError(
            f"{text}: network paths are not opened in this version; download the grid and name the local file"
        )
    raise GridError(f"{text}: no such file; check grid.path, which is relative to the settings file")


def files_behind(name: str) -> tuple[Path, ...]:
    """Every local file that a raster is read from: itself, those it refers to, or the archive that holds it.

    Raises
    ------
    GridError
        If it cannot be opened.
    """
    with _opened(name) as (dataset, _):
        names = dataset.files or [name]
    found = (_archive(file) or Path(file) for file in names)
    return tuple(sorted({path for path in found if path.is_file()}))


def _archive(name: str) -> Path | None:
    """Archive that holds a file of GDAL's; None for one that stands by itself."""
    archive = _LOCAL_ARCHIVE.fullmatch(name)
    if archive is None:
        return None
    # a Path folds the double slash of /vsizip//tmp/a.zip, so the archive may be absolute all the same
    return next((path for path in (Path("/" + archive[2]), Path(archive[2])) if path.is_file()), None)


def _local_name(path: Path) -> str:
    """Name GDAL opens for a local file."""
    file = disk_file(path)
    if file != path:
        kind, _, inner = _LOCAL_ARCHIVE.fullmatch(path.as_posix()).groups()  # type: ignore[union-attr]
        return f"/vsi{kind.lower()}/{file.as_posix()}{inner}"
    try:
        with file.open("rb") as stream:
            start = stream.read(4096)
    except OSError as error:
        raise GridError(f"{path}: cannot be opened ({error.strerror}); make it readable") from error
    if _NETWORK_FILE.search(start):
        raise GridError(f"{path}: describes a network service, which is not opened in this version; download the grid")
    return str(path)


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
