"""Sheets: files that share one lattice, read as one grid; windows of it in memory, depths at points.

Inside, rows run from south to north and columns from west to east, `depth_m` is positive down and NaN means
"missing", however the files store them; this is the only place where a sign turns.
"""

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from shelfmap._kernels.sampling import OUTSIDE, sample_points
from shelfmap.errors import GridError
from shelfmap.lattice import Lattice, cells_round
from shelfmap.rasterfile import Indices, RasterFile
from shelfmap.settings import VOID_LAND_M
from shelfmap.vertical import Positive

__all__ = ["Grid", "PlacedFile", "Sheet", "boxes_meet", "join_files", "name_of"]

FloatArray = NDArray[np.float64]
DepthArray = NDArray[np.float32]
StateArray = NDArray[np.uint8]
Box = tuple[float, float, float, float]

#: Lattices whose cells lie within this much of a cell of each other are one.
SAME_LATTICE_CELLS: Final = 0.05
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

    depth_m: DepthArray
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
class PlacedFile:
    """One file of a sheet: where in it the file lies, and what its values mean.

    Parameters
    ----------
    file : RasterFile
        How to read the values.
    row0, col0 : int
        Index of its south-west cell in the sheet.
    n_cols : int
        Columns of it that are used: all but one that repeats the first 360 degrees further on.
    y_begin : float
        Outer edge of the row that the file begins with, grid units.
    crs_why : str
        Where its coordinate system comes from.
    positive, positive_why : str
        "up" for elevations or "down" for depths, and why.
    vertical_words : tuple of str
        Metadata that name a vertical datum.
    """

    file: RasterFile
    row0: int
    col0: int
    n_cols: int
    y_begin: float
    crs_why: str
    positive: Positive
    positive_why: str
    vertical_words: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Sheet(Lattice):
    """Files on one lattice, as strings and numbers without depths.

    Parameters
    ----------
    files : tuple of PlacedFile
        The first that has a depth for a cell gives it.
    level_shift_m : float
        How far the water stands above the grid's zero.
    void_is_land : bool
        Whether cells missing in all files read as land.
    """

    files: tuple[PlacedFile, ...]
    level_shift_m: float
    void_is_land: bool

    @property
    def path(self) -> str:
        """Name of the file, or of the first of them and how many more there are."""
        return name_of(self.files)

    def read(self, row0: int, row1: int, col0: int, col1: int) -> Grid:
        """Depths of a half-open window, clipped to the sheet; columns are taken round the globe where it wraps.

        Raises
        ------
        GridError
            If no cell of the sheet is in the window, or a file has vanished, changed or is damaged.
        """
        [grid] = self.read_many([(row0, row1, col0, col1)])
        return grid

    def read_many(self, windows: Iterable[Indices]) -> Iterator[Grid]:
        """Depths of several windows, one after the other, files opened once; see `read`."""
        for row0, row1, col0, col1 in windows:
            rows = max(row0, 0), min(row1, self.n_rows)
            cols = (col0, min(col1, col0 + self.n_cols)) if self.wraps else (max(col0, 0), min(col1, self.n_cols))
            if rows[0] >= rows[1] or cols[0] >= cols[1]:
                raise GridError(
                    f"{self.path}: window of rows {row0} to {row1} and columns {col0} to {col1} holds no cell of "
                    f"the grid's {self.n_rows} by {self.n_cols}; ask for a window on the grid"
                )
            first = cols[0] % self.n_cols
            yield Grid(
                depth_m=self._depths((*rows, first, first + cols[1] - cols[0])),
                row0=rows[0],
                col0=first,
                wrap_cols=self.n_cols if self.wraps else 0,
            )

    def _depths(self, window: Indices) -> DepthArray:
        """Depths of a window that begins on the sheet, and may run over its seam."""
        row0, row1, col0, col1 = window
        depth_m = np.full((row1 - row0, col1 - col0), np.nan, dtype=np.float32)
        for placed in self.files:
            south, north = max(row0, placed.row0), min(row1, placed.row0 + placed.file.n_rows)
            for turn in (-self.n_cols, 0, self.n_cols) if self.wraps else (0,):
                left = placed.col0 + turn
                west, east = max(col0, left), min(col1, left + placed.n_cols)
                if south >= north or west >= east:
                    continue
                part = depth_m[south - row0 : north - row0, west - col0 : east - col0]
                missing = np.isnan(part)
                if missing.any():
                    place = south - placed.row0, north - placed.row0, west - left, east - left
                    with placed.file.opened() as dataset:
                        value_m = placed.file.values(dataset, place)
                    if placed.positive == "up":
                        np.negative(value_m, out=value_m)
                    if self.level_shift_m:
                        value_m = self.level_shift_m + value_m.astype(np.float64)
                    np.copyto(part, value_m, where=missing, casting="same_kind")
        if self.void_is_land:
            depth_m[np.isnan(depth_m)] = -VOID_LAND_M
        return depth_m

    def sample(self, lon_deg: ArrayLike, lat_deg: ArrayLike) -> tuple[FloatArray, StateArray]:
        """Depth and state at points anywhere on the sheet, read from its files tile by tile; see `Grid.sample`."""
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

    def extended(self, box: Indices) -> "Sheet":
        """Same files on a lattice that also holds a half-open box of cells, as far as there is globe for it."""
        row0, row1 = min(box[0], 0), max(box[1], self.n_rows)
        col0, col1 = min(box[2], 0), max(box[3], self.n_cols)
        period = cells_round(self.dx, is_geographic=self.is_geographic)
        if self.is_geographic:
            row0 = max(row0, min(0, int(np.ceil((-90.0 - self.y0) / self.dy - 1e-3))))
            row1 = min(row1, max(self.n_rows, int((90.0 - self.y0) / self.dy + 1e-3) + 1))
            most = period or int(360.0 / self.dx)
            if self.wraps or col1 - col0 >= most:
                col0 = 0 if period else max(col0, self.n_cols - most)
                col1 = col0 + max(most, self.n_cols)
        wraps = period is not None and col1 - col0 == period
        return replace(
            self,
            x0=self.x0 + col0 * self.dx,
            y0=self.y0 + row0 * self.dy,
            dx=360.0 / period if wraps and period else self.dx,
            n_rows=row1 - row0,
            n_cols=col1 - col0,
            wraps=wraps,
            files=tuple(replace(file, row0=file.row0 - row0, col0=file.col0 - col0) for file in self.files),
        )


def name_of(files: Sequence[PlacedFile]) -> str:
    """Name of a file, or of the first of several and how many more there are."""
    more = len(files) - 1
    return files[0].file.path + (f" and {more} more file{'s'[: more > 1]}" if more else "")


def boxes_meet(one: Box, other: Box) -> bool:
    """Whether two boxes (west, south, east, north, degrees) have a point in common, whatever turn they are given in.

    Examples
    --------
    >>> boxes_meet((170, 0, 190, 1), (-175, 0, -170, 9)), boxes_meet((0, 0, 5, 1), (0, 2, 5, 3))
    (True, False)
    """
    east_of = (other[0] - one[0]) % 360.0 <= one[2] - one[0]
    west_of = (one[0] - other[0]) % 360.0 <= other[2] - other[0]
    return (east_of or west_of) and one[1] <= other[3] and other[1] <= one[3]


def join_files(parts: Sequence[Sheet]) -> tuple[Sheet, ...]:
    """Sheets of files in order of priority, those on one lattice joined.

    Parameters
    ----------
    parts : sequence of Sheet
        One file each, the one that gives depths first in front.

    Returns
    -------
    tuple of Sheet
        In order of priority. A file joins a sheet in front of others only where it meets none of these: there they
        go first.
    """
    groups: list[list[Sheet]] = []
    boxes: list[list[Box]] = []
    for part in parts:
        box = part.box_deg
        place = len(groups)
        for number in reversed(range(len(groups))):
            if _share_lattice(groups[number][0], part):
                place = number
                break
            if any(boxes_meet(box, other) for other in boxes[number]):
                break
        if place == len(groups):
            groups.append([])
            boxes.append([])
        groups[place].append(part)
        boxes[place].append(box)
    return tuple(_joined(group) if len(group) > 1 else group[0] for group in groups)


def _share_lattice(one: Sheet, other: Sheet) -> bool:
    """Whether cells of two sheets lie on one lattice, to a small part of a cell."""
    if one.is_geographic != other.is_geographic:
        return False
    if not one.is_geographic and one.projection.crs != other.projection.crs:
        return False
    n_rows, n_cols = max(one.n_rows, other.n_rows), max(one.n_cols, other.n_cols)
    drift = max(abs(other.dx / one.dx - 1) * n_cols, abs(other.dy / one.dy - 1) * n_rows)
    offset = np.array([(other.x0 - one.x0) / one.dx, (other.y0 - one.y0) / one.dy])
    return bool(drift < SAME_LATTICE_CELLS and np.abs(offset - np.round(offset)).max() < SAME_LATTICE_CELLS)


def _joined(group: Sequence[Sheet]) -> Sheet:
    """One sheet of several on one lattice."""
    first = group[0]
    rows = np.array([round((part.y0 - first.y0) / first.dy) for part in group])
    cols = np.array([round((part.x0 - first.x0) / first.dx) for part in group])
    widths = np.array([part.n_cols for part in group])
    period = cells_round(first.dx, is_geographic=first.is_geographic)
    if period:
        cols = _round_the_globe(cols, widths, period)
    tops = rows + np.array([part.n_rows for part in group])
    row0, col0 = int(rows.min()), int(cols.min())
    n_rows, n_cols = int(tops.max()) - row0, int((cols + widths).max()) - col0
    wraps = period is not None and n_cols >= period
    y0 = group[int(rows.argmin())].y0
    if first.files[0].file.flip_rows:  # counted from the north as for the whole grid: the same to the last bit
        y0 = group[int(tops.argmax())].files[0].y_begin - first.dy * (n_rows - 0.5)
    return replace(
        first,
        x0=group[int(cols.argmin())].x0,
        y0=y0,
        dx=360.0 / period if wraps and period else first.dx,
        n_rows=n_rows,
        n_cols=period if wraps and period else n_cols,
        wraps=wraps,
        files=tuple(
            replace(part.files[0], row0=int(row) - row0, col0=int(col) - col0)
            for row, col, part in zip(rows, cols, group, strict=True)
        ),
    )


def _round_the_globe(cols: NDArray[np.int64], widths: NDArray[np.int64], period: int) -> NDArray[np.int64]:
    """Columns turned so that all follow the file after the widest gap, or the westernmost as stored without a gap."""
    begin = cols % period
    order = np.argsort(begin, kind="stable")
    reach = np.maximum.accumulate((begin + widths)[order])
    last = reach[-1] - period  # how far the last of them goes on beyond the seam
    gap = begin[order] - np.maximum(np.concatenate([[last], reach[:-1]]), last)
    start = order[gap.argmax()] if gap.max() > 0 else cols.argmin()
    return np.asarray(cols[start] + (cols - cols[start]) % period)
