"""The bathymetry of a run: one file, or several over each other, as one source of depths.

Files on one lattice make a sheet (`shelfmap.sheets`); sheets lie over each other in order of priority. The lowest of
them, made large enough for all, is the frame: the cells in which coasts are traced.
"""

import logging
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from shelfmap._kernels.sampling import INSIDE, OUTSIDE, VOID
from shelfmap.errors import GridError
from shelfmap.lattice import Lattice, cells_round
from shelfmap.rasterfile import Indices, RasterHeader, files_behind, projection_of, read_header
from shelfmap.settings import GridSettings
from shelfmap.sheets import Grid, PlacedFile, Sheet, join_files, name_of
from shelfmap.vertical import Positive, check_unit, datum_words, decide_positive

__all__ = ["FARTHEST_VALUE_M", "INSIDE", "OUTSIDE", "VOID", "Grid", "GridSource", "open_grid"]

_LOG = logging.getLogger(__name__)

FloatArray = NDArray[np.float64]
StateArray = NDArray[np.uint8]

#: No sea or mountain is farther from the zero than this, metres: such a value means "missing".
FARTHEST_VALUE_M: Final = 12_000.0
#: A value within that range that writers of grids use for "missing".
FILL_VALUE: Final = -9999.0

# A sample of a large grid: this many windows a side, of this many cells a side.
_SAMPLE_WINDOWS: Final = 8
_SAMPLE_CELLS: Final = 256
# A cell of the frame takes the mean of this many depths a side of a finer sheet, at most.
_MOST_DEPTHS: Final = 4
# So many depths of a finer sheet are taken at a time.
_DEPTHS_AT_A_TIME: Final = 1_000_000


@dataclass(frozen=True, slots=True, kw_only=True)
class GridSource(Lattice):
    """What shelfmap understands of the grid: strings and numbers, no depths, so that it travels to workers.

    The lattice is the frame, that of the last sheet.

    Parameters
    ----------
    sheets : tuple of Sheet
        Files on one lattice each, in order of priority; the last holds all.
    boxes : tuple of Indices
        Cells of the frame (row0, row1, col0, col1) that each of the other sheets may give depths to.
    """

    sheets: tuple[Sheet, ...]
    boxes: tuple[Indices, ...]

    @property
    def files(self) -> tuple[PlacedFile, ...]:
        """Every file, sheet by sheet in order of priority."""
        return tuple(file for sheet in self.sheets for file in sheet.files)

    @property
    def path(self) -> str:
        """Name of the raster, or of the first and how many more there are."""
        return name_of(self.files)

    def disk_files(self) -> tuple[Path, ...]:
        """Every local file the depths are read from, those that others refer to among them, in order.

        Raises
        ------
        GridError
            If a raster cannot be opened any more.
        """
        return tuple(dict.fromkeys(path for placed in self.files for path in files_behind(placed.file.path)))

    @property
    def crs_why(self) -> str:
        """Where the coordinate system of the frame comes from."""
        return self.sheets[-1].files[0].crs_why

    @property
    def dtype(self) -> str:
        """Type the values are stored in; all of them, where files differ."""
        return ", ".join(dict.fromkeys(placed.file.dtype for placed in self.files))

    @property
    def positive(self) -> str:
        """What is said of the values: "up" for elevations or "down" for depths, or "up and down" where files differ."""
        return " and ".join(sorted({placed.positive for placed in self.files}, reverse=True))

    @property
    def positive_why(self) -> str:
        """Why, for all files or for each of them."""
        whys = dict.fromkeys(placed.positive_why for placed in self.files)
        if len(whys) == 1:
            return next(iter(whys))
        return "; ".join(f"{placed.file.path} {placed.positive}, {placed.positive_why}" for placed in self.files)

    @property
    def level_shift_m(self) -> float:
        """How far the water stands above the grid's zero."""
        return self.sheets[-1].level_shift_m

    @property
    def void_is_land(self) -> bool:
        """Whether cells missing in all files read as land."""
        return self.sheets[-1].void_is_land

    @property
    def vertical_words(self) -> tuple[str, ...]:
        """Metadata that name a vertical datum, each once."""
        return tuple(sorted({words for placed in self.files for words in placed.vertical_words}))

    def read(self, row0: int, row1: int, col0: int, col1: int) -> Grid:
        """Depths of a half-open window of the frame, clipped to it; columns are taken round the globe where it wraps.

        A cell takes the depth of the first sheet that has one. Where a sheet is finer than the frame that is the mean
        of up to 4 by 4 of its depths spread over the cell, so that coasts follow it; at least half must be known.

        Raises
        ------
        GridError
            If no cell of the grid is in the window, or a file has vanished, changed or is damaged.
        """
        [grid] = self.read_many([(row0, row1, col0, col1)])
        return grid

    def read_many(self, windows: Iterable[Indices]) -> Iterator[Grid]:
        """Depths of several windows, one after the other, files opened once; see `read`."""
        for grid in self.sheets[-1].read_many(windows):
            yield self._overlaid(grid) if self.boxes else grid

    def _overlaid(self, grid: Grid) -> Grid:
        """Same window of the frame with the depths of the sheets above it."""
        depth_m = grid.depth_m.copy()
        n_rows, n_cols = depth_m.shape
        for sheet, (south, north, west, east) in reversed(list(zip(self.sheets, self.boxes, strict=False))):
            row0, row1 = max(south, grid.row0), min(north, grid.row0 + n_rows)
            for turn in (-grid.wrap_cols, 0, grid.wrap_cols) if self.wraps else (0,):
                col0, col1 = max(west + turn, grid.col0), min(east + turn, grid.col0 + n_cols)
                if row0 < row1 and col0 < col1:
                    part = depth_m[row0 - grid.row0 : row1 - grid.row0, col0 - grid.col0 : col1 - grid.col0]
                    above_m = self._means(sheet, (row0, row1, col0, col1))
                    np.copyto(part, above_m, where=~np.isnan(above_m), casting="same_kind")
        return replace(grid, depth_m=depth_m)

    def _means(self, sheet: Sheet, window: Indices) -> FloatArray:
        """Mean depth of a sheet over each cell of a window of the frame; NaN where less than half of it is known."""
        row0, row1, col0, col1 = window
        n = min(max(round(self.step_m / sheet.step_m), 1), _MOST_DEPTHS)
        off = (np.arange(n) + 0.5) / n - 0.5
        cols = np.arange(col0, col1) % self.n_cols  # a cell beyond the seam is the same to the last bit
        col = (cols[:, None] + off).ravel()
        strips = []
        rows = max(1, _DEPTHS_AT_A_TIME // (n * col.size))
        for first, stop in pairwise([*range(row0, row1, rows), row1]):
            row = (np.arange(first, stop)[:, None] + off).ravel()
            depth_m, state = sheet.sample(*self.lonlat_of(*np.meshgrid(col, row)))
            known = (state == INSIDE).reshape(stop - first, n, col1 - col0, n)
            known_m = np.where(known, depth_m.reshape(known.shape), 0.0)
            # added up in one order, whatever the window
            total_m = np.asarray(sum(known_m[:, i, :, j] for i in range(n) for j in range(n)))
            n_known = known.sum(axis=(1, 3))
            strips.append(np.where(2 * n_known >= n * n, total_m / np.maximum(n_known, 1), np.nan))
        return np.concatenate(strips)

    def sample(self, lon_deg: ArrayLike, lat_deg: ArrayLike) -> tuple[FloatArray, StateArray]:
        """Depth and state at points anywhere on the grid, each from the first sheet that has one; see `Grid.sample`."""
        lon, lat = np.broadcast_arrays(np.asarray(lon_deg, dtype=float), np.asarray(lat_deg, dtype=float))
        depth_m = np.full(lon.shape, np.nan)
        state = np.full(lon.shape, OUTSIDE, dtype=np.uint8)
        for sheet in self.sheets:
            wanted = np.flatnonzero(state != INSIDE)
            found_m, found = sheet.sample(lon.flat[wanted], lat.flat[wanted])
            depth_m.flat[wanted] = found_m
            state.flat[wanted] = np.minimum(state.flat[wanted], found)  # inside, else void, else outside
        return depth_m, state


def open_grid(settings: GridSettings) -> GridSource:
    """Understand the rasters of a run from their headers and a bounded sample of their values.

    Parameters
    ----------
    settings : GridSettings
        Path or paths, and whatever the files do not say or say wrong.

    Returns
    -------
    GridSource

    Raises
    ------
    GridError
        If a file is missing, damaged, on a network, not a regular north-up grid of real values in metres, has no
        usable coordinate system, or does not tell elevations from depths; or if the last sheet cannot hold the others.
    """
    parts, told = [], {}
    for path in settings.paths:
        header = read_header(path, settings)
        _check_extent(header)
        check_unit(header.vertical.get("units", ""), header.file.path)
        part = _as_stored(header)
        parts.append(part)
        told[header.file.path] = header.vertical, _sampled_range(part)
    sheets = [
        replace(
            sheet,
            files=tuple(_with_sign(placed, sheet, told, settings) for placed in sheet.files),
            level_shift_m=settings.level_shift_m,
        )
        for sheet in join_files(parts)
    ]
    return _stacked(sheets, void_is_land=settings.void_is_land)


def _stacked(sheets: Sequence[Sheet], *, void_is_land: bool) -> GridSource:
    """Source of sheets in order of priority."""
    *above, last = sheets
    last = replace(last, void_is_land=void_is_land)
    for sheet in above:
        last = last.extended(_cells_of(sheet, last))
    for upper, lower in pairwise([*above, last]):
        if lower.step_m < 0.9 * upper.step_m:
            _LOG.warning(
                "%s has smaller cells than %s, but is used only where that has no depth: name finer files first",
                lower.path,
                upper.path,
            )
    return GridSource(
        **{name: getattr(last, name) for name in Lattice.__dataclass_fields__},
        sheets=(*above, last),
        boxes=tuple(_cells_of(sheet, last) for sheet in above),
    )


def _cells_of(sheet: Sheet, frame: Sheet) -> Indices:
    """Cells of a frame (row0, row1, col0, col1) whose centres lie in the box of a sheet.

    Raises
    ------
    GridError
        If the sheet reaches beyond the frame's map.
    """
    if frame.is_geographic:
        west, south, east, north = sheet.box_deg
        middle_deg = frame.x0 + (frame.n_cols - 1) / 2 * frame.dx
        turn_deg = 360.0 * round((middle_deg - (west + east) / 2) / 360.0)
        col = (np.array([west, east]) + turn_deg - frame.x0) / frame.dx
        row = (np.array([south, north]) - frame.y0) / frame.dy
    else:
        across, along = (np.linspace(-0.5, n - 0.5, 65) for n in (sheet.n_cols, sheet.n_rows))
        col, row = frame.index_of(*sheet.lonlat_of(*np.meshgrid(across, along)))
        if not (np.isfinite(col).all() and np.isfinite(row).all()):
            raise GridError(
                f"{sheet.path}: reaches beyond what {frame.projection.name} can map, the system of the last grid "
                f"{frame.path}; in grid.path name the file that covers the most last"
            )
    hair = 1e-6
    return (
        int(np.ceil(row.min() - hair)), int(np.floor(row.max() + hair)) + 1,
        int(np.ceil(col.min() - hair)), int(np.floor(col.max() + hair)) + 1,
    )  # fmt: skip


def _with_sign(
    placed: PlacedFile,
    sheet: Sheet,
    told: Mapping[str, tuple[Mapping[str, str], tuple[float, float]]],
    settings: GridSettings,
) -> PlacedFile:
    """Same file, told elevations from depths; tiles that say the same are judged by the values of all of them."""
    name = placed.file.path
    texts, _ = told[name]
    ranges = [values for other, values in (told[each.file.path] for each in sheet.files) if other == texts]
    known = np.array([values for values in ranges if np.isfinite(values).all()]).reshape(-1, 2)
    lowest, highest = (float(known[:, 0].min()), float(known[:, 1].max())) if len(known) else (np.nan, np.nan)
    positive, why = settings.positive, "set by grid.positive"
    if positive == "auto":
        positive, why = decide_positive(texts, lowest, highest, name)
    else:
        why += _objection(positive, texts, lowest, highest)
    return replace(placed, positive=positive, positive_why=why)


def _objection(positive: Positive, texts: Mapping[str, str], lowest: float, highest: float) -> str:
    """What speaks against the sign that was set; empty where nothing does."""
    try:
        other, why = decide_positive(texts, lowest, highest, "")
    except GridError:
        return ""
    if other == positive:
        return ""
    _LOG.warning("grid.positive = %r, although %s speaks for %r: look at the range of elevations", positive, why, other)
    return f", although {why} speaks for {other}"


def _as_stored(header: RasterHeader) -> Sheet:
    """Sheet of one file, values taken as stored and as elevations until the sign is known."""
    period = cells_round(header.dx, is_geographic=projection_of(header.crs_wkt).is_geographic)
    # a last column one turn from the first repeats it
    n_cols = header.file.n_cols - (header.file.n_cols - 1 == period)
    wraps = n_cols == period
    placed = PlacedFile(
        file=header.file,
        row0=0,
        col0=0,
        n_cols=n_cols,
        y_begin=header.y_begin,
        crs_why=header.crs_why,
        positive="up",
        positive_why="",
        vertical_words=datum_words(header.tags),
    )
    return Sheet(
        files=(placed,),
        crs_wkt=header.crs_wkt,
        x0=header.x0,
        y0=header.y0,
        dx=360.0 / n_cols if wraps else header.dx,
        dy=header.dy,
        n_rows=header.file.n_rows,
        n_cols=n_cols,
        wraps=wraps,
        level_shift_m=0.0,
        void_is_land=False,
    )


def _check_extent(header: RasterHeader) -> None:
    """Refuse degrees taken for metres, metres taken for degrees, and more than one turn of the globe."""
    projection, name = projection_of(header.crs_wkt), header.file.path
    east = header.x0 + (header.file.n_cols - 1) * header.dx
    north = header.y0 + (header.file.n_rows - 1) * header.dy
    farthest_x, farthest_y = max(-header.x0, east), max(-header.y0, north)
    extent = f"x {header.x0:.8g} to {east:.8g}, y {header.y0:.8g} to {north:.8g}"
    if not projection.is_geographic:
        if farthest_x <= 360 and farthest_y <= 90:
            raise GridError(
                f"{name}: {extent} look like degrees, but {projection.name} counts in metres; "
                'set grid.crs = "EPSG:4326" if they are degrees'
            )
        return
    if farthest_x > 720 or farthest_y > 90 + 1e-3 * header.dy:
        raise GridError(
            f"{name}: {extent} are no degrees, but {projection.name} counts in degrees; "
            "set grid.crs to the system the grid is in"
        )
    if east - header.x0 > 360 + 0.1 * header.dx:
        raise GridError(f"{name}: {extent} goes round the globe more than once; cut it to 360 degrees")


def _sampled_range(source: Sheet) -> tuple[float, float]:
    """Lowest and highest stored value, of all cells of a small grid or of scattered windows of a large one.

    Raises
    ------
    GridError
        If a value is no elevation or depth on Earth: it must mean "missing".
    """
    windows: list[Indices] = [(0, source.n_rows, 0, source.n_cols)]
    if source.n_rows * source.n_cols > _SAMPLE_WINDOWS**2 * _SAMPLE_CELLS**2:
        row_starts, col_starts = (
            np.linspace(0, max(n - _SAMPLE_CELLS, 0), _SAMPLE_WINDOWS).astype(int).tolist()
            for n in (source.n_rows, source.n_cols)
        )
        windows = [(r, r + _SAMPLE_CELLS, c, c + _SAMPLE_CELLS) for r in row_starts for c in col_starts]
    lowest, highest = np.inf, -np.inf
    for grid in source.read_many(windows):
        values = -grid.depth_m[np.isfinite(grid.depth_m)]
        if values.size:
            lowest, highest = min(lowest, float(values.min())), max(highest, float(values.max()))
    for value in (lowest, highest):
        if FARTHEST_VALUE_M < abs(value) < np.inf:
            raise GridError(
                f"{source.path}: value {value:.8g} is no elevation or depth in metres; if it means missing set "
                f"grid.nodata to it, else convert the grid to metres"
            )
    if FILL_VALUE in (lowest, highest):
        name = source.path
        _LOG.warning("%s holds %g, which mostly means missing: then set grid.nodata = %g", name, FILL_VALUE, FILL_VALUE)
    return (lowest, highest) if lowest <= highest else (np.nan, np.nan)
