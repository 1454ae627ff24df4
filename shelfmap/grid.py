"""Bathymetry rasters: what one holds, windows of it in memory, depths at points.

Inside, rows run from south to north and columns from west to east, `depth_m` is positive down and NaN means
"missing", however the file stores them; this is the only place where a sign or an order turns. An index
(col, row) is a float that is 0 at the centre of the south-west cell.
"""

import logging
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from shelfmap._kernels.sampling import INSIDE, OUTSIDE, VOID, sample_points
from shelfmap.errors import GridError
from shelfmap.geodesy import Projection, distance_bearing, unwrap_lon_deg
from shelfmap.rasterfile import Indices, RasterFile, RasterHeader, files_behind, projection_of, read_header
from shelfmap.settings import VOID_LAND_M, GridSettings
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
# Scattered points are read in tiles of this many cells a side.
_TILE_CELLS: Final = 512


@dataclass(frozen=True, slots=True, kw_only=True)
class Grid:
    """A window of a grid in memory.

    Parameters
    ----------
    depth_m : (n_rows, n_cols) array of float32
        Depth, metres, positive down, rows south to north; NaN = missing. Becomes read-only.
    row0, col0 : int
        Index of its first cell in the source.
    wrap_cols : int
        Columns round the globe where the source goes round it, else 0.
    """

    depth_m: NDArray[np.float32]
    row0: int
    col0: int
    wrap_cols: int = 0

    def __post_init__(self) -> None:
        if self.depth_m.ndim != 2 or self.depth_m.dtype != np.float32 or not self.depth_m.flags.c_contiguous:
            raise GridError(
                f"depth_m is {self.depth_m.dtype} of shape {self.depth_m.shape}; give a C-contiguous 2-D float32 array"
            )
        self.depth_m.setflags(write=False)

    def sample(self, col: ArrayLike, row: ArrayLike) -> tuple[FloatArray, StateArray]:
        """Depth at points, bilinear between cell centres, missing cells left out of the mean.

        Parameters
        ----------
        col, row : array_like of float
            Indices in the source (not in the window), broadcast together.

        Returns
        -------
        depth_m : array of float
            Metres; NaN unless the state is INSIDE.
        state : array of uint8
            INSIDE; VOID where missing cells carry more than half the weight; OUTSIDE beyond the outer cell centres.

        Examples
        --------
        >>> grid = Grid(depth_m=np.array([[10, 20], [np.nan, 40]], dtype=np.float32), row0=0, col0=0)
        >>> depth_m, state = grid.sample([0.25, 0.0, 1.5], [0.0, 1.0, 0.0])
        >>> depth_m, state
        (array([12.5,  nan,  nan]), array([0, 1, 2], dtype=uint8))
        """
        cols, rows = np.broadcast_arrays(np.asarray(col, dtype=float), np.asarray(row, dtype=float))
        depth_m = np.empty(cols.shape)
        state = np.empty(cols.shape, dtype=np.uint8)
        sample_points(
            self.depth_m,
            self.row0,
            self.col0,
            self.wrap_cols,
            rows.ravel(),
            cols.ravel(),
            depth_m.reshape(-1),
            state.reshape(-1),
        )
        return depth_m, state


@dataclass(frozen=True, slots=True, kw_only=True)
class GridSource:
    """What shelfmap understands of a raster: strings and numbers, no depths, so that it travels to workers.

    Parameters
    ----------
    file : RasterFile
        How to read the values.
    crs_wkt, crs_why : str
        Coordinate system and where it comes from.
    x0, y0 : float
        Centre of the south-west cell, grid units.
    dx, dy : float
        Cell sides, grid units, > 0.
    n_rows, n_cols : int
        Cells, without a last column that repeats the first 360 degrees further on.
    wraps : bool
        True where the columns go once round the globe.
    positive, positive_why : str
        "up" for elevations or "down" for depths, and why.
    level_shift_m : float
        How far the water stands above the grid's zero.
    void_is_land : bool
        Whether missing cells read as land.
    vertical_words : tuple of str
        Metadata that name a vertical datum.
    """

    file: RasterFile
    crs_wkt: str
    crs_why: str
    x0: float
    y0: float
    dx: float
    dy: float
    n_rows: int
    n_cols: int
    wraps: bool
    positive: Positive
    positive_why: str
    level_shift_m: float
    void_is_land: bool
    vertical_words: tuple[str, ...]

    @property
    def path(self) -> str:
        """Name of the raster."""
        return self.file.path

    def files(self) -> tuple[Path, ...]:
        """Every local file the depths are read from, sorted.

        Raises
        ------
        GridError
            If the raster cannot be opened any more.
        """
        return files_behind(self.path)

    @property
    def is_geographic(self) -> bool:
        """True where coordinates are degrees."""
        return self.projection.is_geographic

    @property
    def projection(self) -> Projection:
        """Way between the grid's coordinates and longitude, latitude."""
        return projection_of(self.crs_wkt)

    @property
    def step_x_m(self) -> float:
        """Length on the ground of a cell's west-east side in the middle of the grid, metres."""
        return self._step_m(1.0, 0.0)

    @property
    def step_y_m(self) -> float:
        """Length on the ground of a cell's south-north side in the middle of the grid, metres."""
        return self._step_m(0.0, 1.0)

    @property
    def step_m(self) -> float:
        """The smaller of the two cell sides in the middle of the grid, metres."""
        return min(self.step_x_m, self.step_y_m)

    def _step_m(self, cols: float, rows: float) -> float:
        col, row = (self.n_cols - 1) / 2, (self.n_rows - 1) / 2
        half = np.array([-0.5, 0.5])
        lon_deg, lat_deg = self.lonlat_of(col + half * cols, row + half * rows)
        distance_m, _ = distance_bearing(lon_deg[0], lat_deg[0], lon_deg[1], lat_deg[1])
        return float(distance_m)

    @property
    def box_deg(self) -> tuple[float, float, float, float]:
        """West, south, east, north of the cells' outer edges, degrees; east above west, past 180 where need be."""
        across = np.linspace(-0.5, self.n_cols - 0.5, 65)
        along = np.linspace(-0.5, self.n_rows - 0.5, 65)
        col = np.concatenate([across, across, np.full(65, -0.5), np.full(65, self.n_cols - 0.5)])
        row = np.concatenate([np.full(65, -0.5), np.full(65, self.n_rows - 0.5), along, along])
        lon, lat = self.lonlat_of(col, row)
        if not self.is_geographic:
            middle_lon, _ = self.lonlat_of((self.n_cols - 1) / 2, (self.n_rows - 1) / 2)
            on_earth = np.isfinite(lon) & np.isfinite(lat)
            lon, lat = unwrap_lon_deg(lon[on_earth], middle_lon), lat[on_earth]
        west, south, east, north = float(lon.min()), float(lat.min()), float(lon.max()), float(lat.max())
        for pole in (-90.0, 90.0):
            if not self.is_geographic and self._holds(0.0, pole):
                west, east, south, north = -180.0, 180.0, min(south, pole), max(north, pole)
        return west, max(south, -90.0), east, min(north, 90.0)

    def _holds(self, lon_deg: float, lat_deg: float) -> bool:
        col, row = self.index_of(lon_deg, lat_deg)
        return bool(-0.5 <= col <= self.n_cols - 0.5 and -0.5 <= row <= self.n_rows - 0.5)

    def index_of(self, lon_deg: ArrayLike, lat_deg: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Index (col, row) of points; 0 is the centre of the west column, of the south row.

        On a geographic grid longitudes are first turned into its range: from its first column on where it goes
        round the globe, else within 180 degrees of its middle.
        """
        x, y = self.projection.from_lonlat(lon_deg, lat_deg)
        if self.is_geographic:
            middle_deg = self.x0 + (180.0 if self.wraps else (self.n_cols - 1) / 2 * self.dx)
            x = unwrap_lon_deg(x, middle_deg)
        return (x - self.x0) / self.dx, (y - self.y0) / self.dy

    def lonlat_of(self, col: ArrayLike, row: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Longitude and latitude, degrees, of indices; on a geographic grid in the grid's own range."""
        x = self.x0 + np.asarray(col, dtype=float) * self.dx
        y = self.y0 + np.asarray(row, dtype=float) * self.dy
        return self.projection.to_lonlat(x, y)

    def read(self, row0: int, row1: int, col0: int, col1: int) -> Grid:
        """Depths of a half-open window, clipped to the grid; columns are taken round the globe where it wraps.

        Raises
        ------
        GridError
            If no cell of the grid is in the window, or the file has vanished, changed or is damaged.
        """
        [grid] = self.read_many([(row0, row1, col0, col1)])
        return grid

    def read_many(self, windows: Iterable[Indices]) -> Iterator[Grid]:
        """Depths of several windows, one after the other, the file opened once; see `read`."""
        with self.file.opened() as dataset:
            for row0, row1, col0, col1 in windows:
                rows = max(row0, 0), min(row1, self.n_rows)
                cols = (col0, min(col1, col0 + self.n_cols)) if self.wraps else (max(col0, 0), min(col1, self.n_cols))
                if rows[0] >= rows[1] or cols[0] >= cols[1]:
                    raise GridError(
                        f"{self.path}: window of rows {row0} to {row1} and columns {col0} to {col1} holds no cell of "
                        f"the grid's {self.n_rows} by {self.n_cols}; ask for a window on the grid"
                    )
                yield self._window(dataset, rows, cols)

    def _window(self, dataset: Any, rows: tuple[int, int], cols: tuple[int, int]) -> Grid:
        """Read a window that lies on the grid, in two pieces where it runs over the seam."""
        first = cols[0] % self.n_cols
        last = first + cols[1] - cols[0]
        pieces = [(first, min(last, self.n_cols)), (0, last - self.n_cols)]
        value_m = np.hstack([self.file.values(dataset, (*rows, *piece)) for piece in pieces if piece[0] < piece[1]])
        depth_m = self.level_shift_m + (value_m if self.positive == "down" else -value_m)
        if self.void_is_land:
            depth_m[np.isnan(depth_m)] = -VOID_LAND_M
        return Grid(
            depth_m=np.ascontiguousarray(depth_m, dtype=np.float32),
            row0=rows[0],
            col0=first,
            wrap_cols=self.n_cols if self.wraps else 0,
        )

    def sample(self, lon_deg: ArrayLike, lat_deg: ArrayLike) -> tuple[FloatArray, StateArray]:
        """Depth and state at points anywhere on the grid, read from the file tile by tile; see `Grid.sample`."""
        col, row = np.broadcast_arrays(*self.index_of(lon_deg, lat_deg))
        depth_m = np.full(col.shape, np.nan)
        state = np.full(col.shape, OUTSIDE, dtype=np.uint8)
        near = (np.abs(col) <= self.n_cols) & (row > -1) & (row < self.n_rows)
        if not self.wraps:
            near &= (col > -1) & (col < self.n_cols)
        here = np.flatnonzero(near)
        tile_row, tile_col = (np.ravel(index)[here].astype(int) // _TILE_CELLS for index in (row, col))
        n_across = self.n_cols // _TILE_CELLS + 1
        tile = tile_row * n_across + tile_col
        order = np.argsort(tile, kind="stable")
        tiles, starts = np.unique(tile[order], return_index=True)
        corners = [(t // n_across * _TILE_CELLS, t % n_across * _TILE_CELLS) for t in tiles.tolist()]
        grids = self.read_many((r, r + _TILE_CELLS + 1, c, c + _TILE_CELLS + 1) for r, c in corners)
        parts = np.split(here[order], starts[1:])
        for grid, part in zip(grids, parts, strict=False):  # no point near: one empty part, no grid
            depth_m.flat[part], state.flat[part] = grid.sample(col.flat[part], row.flat[part])
        return depth_m, state


def open_grid(settings: GridSettings) -> GridSource:
    """Understand a raster from its header and a bounded sample of its values.

    Parameters
    ----------
    settings : GridSettings
        Path, and whatever the file does not say or says wrong.

    Returns
    -------
    GridSource

    Raises
    ------
    GridError
        If the file is missing, damaged, on a network, not a regular north-up grid of real values in metres, has no
        usable coordinate system, or does not tell elevations from depths.
    """
    header = read_header(settings)
    name = header.file.path
    _check_extent(header)
    check_unit(header.vertical.get("units", ""), name)
    as_stored = _source_of(header)
    lowest, highest = _sampled_range(as_stored)
    if FILL_VALUE in (lowest, highest):
        _LOG.warning("%s holds %g, which mostly means missing: then set grid.nodata = %g", name, FILL_VALUE, FILL_VALUE)
    positive, why = settings.positive, "set by grid.positive"
    if positive == "auto":
        positive, why = decide_positive(header.vertical, lowest, highest, name)
    else:
        why += _objection(positive, header.vertical, lowest, highest)
    return replace(
        as_stored,
        positive=positive,
        positive_why=why,
        level_shift_m=settings.level_shift_m,
        void_is_land=settings.void_is_land,
    )


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


def _source_of(header: RasterHeader) -> GridSource:
    """Give the source of a header, values taken as stored and as elevations until the sign is known."""
    is_geographic = projection_of(header.crs_wkt).is_geographic
    n_cols = header.file.n_cols
    cells_round = 360.0 / header.dx
    # a last column one turn from the first repeats it; a tenth of a cell allows for steps stored in short decimals
    repeats = is_geographic and abs(n_cols - 1 - cells_round) < 0.1
    wraps = repeats or (is_geographic and abs(n_cols - cells_round) < 0.1)
    n_cols -= repeats
    return GridSource(
        file=header.file,
        crs_wkt=header.crs_wkt,
        crs_why=header.crs_why,
        x0=header.x0,
        y0=header.y0,
        dx=360.0 / n_cols if wraps else header.dx,
        dy=header.dy,
        n_rows=header.file.n_rows,
        n_cols=n_cols,
        wraps=wraps,
        positive="up",
        positive_why="",
        level_shift_m=0.0,
        void_is_land=False,
        vertical_words=datum_words(header.tags),
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


def _sampled_range(source: GridSource) -> tuple[float, float]:
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
    return (lowest, highest) if lowest <= highest else (np.nan, np.nan)
