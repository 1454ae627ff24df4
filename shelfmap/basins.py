"""Which water is sea: connected water labelled tile by tile, so that no whole grid is ever in memory."""

import zlib
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from shelfmap.grid import Grid, GridSource

__all__ = ["SHORE_HAIR_M", "Basins", "Tile", "Tiling", "label_basins"]

#: Label of missing cells; 0 is land, water is numbered above.
_MISSING = 1

#: Water is deeper than this. Contours are drawn here too: at exactly the level of integer depths they touch themselves.
SHORE_HAIR_M = 1e-6

BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Tile:
    """Half-open window of the grid, in its index: rows from south, columns from west."""

    row0: int
    row1: int
    col0: int
    col1: int


@dataclass(frozen=True, slots=True)
class Tiling:
    """A region of the grid cut into tiles of at most `tile_m` metres and `tile_cells` cells a side."""

    region: Tile
    row_edges: tuple[int, ...]
    col_edges: tuple[int, ...]
    closes: bool
    """Whether the last column's neighbour is the first: the region goes round the globe."""

    @classmethod
    def cut(cls, source: GridSource, region: Tile, *, tile_m: float = 8e5, tile_cells: int = 1024) -> "Tiling":
        """Cut a region; tiles are equal but for the last row and column of them."""
        rows = max(8, min(tile_cells, int(tile_m / source.step_y_m)))
        cols = max(8, min(tile_cells, int(tile_m / source.step_x_m)))
        return cls(
            region=region,
            row_edges=_edges(region.row0, region.row1, rows),
            col_edges=_edges(region.col0, region.col1, cols),
            closes=source.wraps and region.col1 - region.col0 == source.n_cols,
        )

    @property
    def shape(self) -> tuple[int, int]:
        """Tiles from south to north and from west to east."""
        return len(self.row_edges) - 1, len(self.col_edges) - 1

    def tile(self, i: int, j: int) -> Tile:
        """Tile number i from the south, j from the west."""
        return Tile(self.row_edges[i], self.row_edges[i + 1], self.col_edges[j], self.col_edges[j + 1])

    def with_margin(self, tile: Tile, rows: int, cols: int) -> Tile:
        """Same tile with a margin of cells, clipped to the region; columns run on where the region closes."""
        region = self.region
        col0, col1 = tile.col0 - cols, tile.col1 + cols
        if self.closes:
            col1 = min(col1, col0 + source_width(region))
        else:
            col0, col1 = max(col0, region.col0), min(col1, region.col1)
        return Tile(max(tile.row0 - rows, region.row0), min(tile.row1 + rows, region.row1), col0, col1)


def source_width(region: Tile) -> int:
    """Columns of a region."""
    return region.col1 - region.col0


def _edges(start: int, stop: int, size: int) -> tuple[int, ...]:
    n = max(1, round((stop - start) / size))
    return tuple(int(edge) for edge in np.linspace(start, stop, n + 1).round())


class Basins:
    """Sea or not, cell by cell, over a tiled region.

    Parameters
    ----------
    tiling : Tiling
        The region and its tiles.
    packed : dict of (int, int) to bytes
        Labels of each tile's water, int32, compressed.
    is_sea : (n_labels,) array of bool
        Whether a label's basin is sea; label 0 is land, 1 missing.
    areas_m2 : (n_seas,) array of float
        Areas of the basins that are sea, square metres, largest first.
    """

    def __init__(
        self, tiling: Tiling, packed: dict[tuple[int, int], bytes], is_sea: BoolArray, areas_m2: NDArray[np.float64]
    ) -> None:
        self.tiling = tiling
        self.areas_m2 = areas_m2
        self._is_sea = is_sea
        self._packed = packed
        self._tile_mask = lru_cache(maxsize=16)(self._unpack)

    def _unpack(self, i: int, j: int) -> BoolArray:
        tile = self.tiling.tile(i, j)
        labels = np.frombuffer(zlib.decompress(self._packed[i, j]), dtype=np.int32)
        return np.asarray(self._is_sea[labels.reshape(tile.row1 - tile.row0, tile.col1 - tile.col0)])

    def sea_mask(self, window: Tile) -> BoolArray:
        """Whether each cell of a window is sea; the window lies in the region, columns may run past its seam."""
        out = np.zeros((window.row1 - window.row0, window.col1 - window.col0), dtype=bool)
        turn = source_width(self.tiling.region)
        n_i, n_j = self.tiling.shape
        shifts = (-turn, 0, turn) if self.tiling.closes else (0,)
        for i in range(n_i):
            for j in range(n_j):
                tile = self.tiling.tile(i, j)
                row0, row1 = max(tile.row0, window.row0), min(tile.row1, window.row1)
                for shift in shifts:
                    col0, col1 = max(tile.col0 + shift, window.col0), min(tile.col1 + shift, window.col1)
                    if row0 >= row1 or col0 >= col1:
                        continue
                    out[row0 - window.row0 : row1 - window.row0, col0 - window.col0 : col1 - window.col0] = (
                        self._tile_mask(i, j)[
                            row0 - tile.row0 : row1 - tile.row0,
                            col0 - shift - tile.col0 : col1 - shift - tile.col0,
                        ]
                    )
        return out


def label_basins(
    source: GridSource,
    tiling: Tiling,
    *,
    level_m: float,
    smallest_sea_m2: float,
    smallest_enclosed_sea_m2: float,
) -> Basins:
    """Find the water that is sea: large enough, and larger still where it is known to be enclosed.

    Parameters
    ----------
    source : GridSource
        The bathymetry.
    tiling : Tiling
        Region and tiles; each tile is read once.
    level_m : float
        Elevation of the shoreline, metres.
    smallest_sea_m2, smallest_enclosed_sea_m2 : float
        Least area of a basin that reaches the edge of the region or missing cells, beyond which it may go on, and of
        one enclosed by land, square metres.

    Returns
    -------
    Basins
        Cells are joined through their sides only: water that meets at a corner is not connected.
    """
    n_i, n_j = tiling.shape
    packed: dict[tuple[int, int], bytes] = {}
    sides: dict[tuple[int, int], dict[str, IntArray]] = {}
    areas: list[NDArray[np.float64]] = [np.zeros(_MISSING + 1)]
    open_labels: list[IntArray] = []
    n_labels = _MISSING + 1
    for i in range(n_i):
        for j in range(n_j):
            tile = tiling.tile(i, j)
            labels, n = _tile_labels(source.read(tile.row0, tile.row1, tile.col0, tile.col1), level_m, n_labels)
            cell_m2 = _cell_area_m2(source, tile)
            counted = np.bincount(labels.ravel(), weights=np.repeat(cell_m2, labels.shape[1]), minlength=n_labels + n)
            areas.append(counted[n_labels : n_labels + n].astype(np.float64))
            packed[i, j] = zlib.compress(labels.tobytes(), 1)
            sides[i, j] = {
                "south": labels[0].astype(np.int64),
                "north": labels[-1].astype(np.int64),
                "west": labels[:, 0].astype(np.int64),
                "east": labels[:, -1].astype(np.int64),
            }
            open_labels.append(np.unique(labels[ndimage.binary_dilation(labels == _MISSING)]).astype(np.int64))
            n_labels += n
    basin, at_edge = _join(tiling, sides, n_labels)
    area = np.bincount(basin, weights=np.concatenate(areas)).astype(np.float64)
    is_open = np.zeros(len(area), dtype=bool)
    is_open[basin[np.concatenate([at_edge, *open_labels])]] = True
    sea = area >= np.where(is_open, smallest_sea_m2, smallest_enclosed_sea_m2)
    sea[basin[: _MISSING + 1]] = False
    return Basins(tiling, packed, sea[basin], np.sort(area[sea])[::-1])


def _tile_labels(grid: Grid, level_m: float, first: int) -> tuple[NDArray[np.int32], int]:
    """Labels of a tile's cells, its water numbered from `first`, and the number of its waters."""
    labels, n = ndimage.label(is_water(grid, level_m))
    labels = np.where(labels > 0, labels + (first - 1), np.where(np.isnan(grid.depth_m), _MISSING, 0))
    return labels.astype(np.int32), n


def is_water(grid: Grid, level_m: float) -> BoolArray:
    """Whether each cell is known water: deeper than the shoreline, and not missing."""
    with np.errstate(invalid="ignore"):
        return np.asarray(grid.depth_m + np.float32(level_m) > SHORE_HAIR_M)


def _cell_area_m2(source: GridSource, tile: Tile) -> NDArray[np.float64]:
    """Area of one cell in each row of a tile, square metres.

    On a sphere in latitude, good to 1 %; of a projected grid, that in its middle.
    """
    rows = np.arange(tile.row0, tile.row1)
    area = np.full(len(rows), source.step_x_m * source.step_y_m)
    if source.is_geographic:
        _, lat_deg = source.lonlat_of(np.zeros(len(rows)), rows.astype(float))
        _, middle_deg = source.lonlat_of(0.0, (source.n_rows - 1) / 2)
        area = area * np.cos(np.radians(np.clip(lat_deg, -90, 90))) / np.cos(np.radians(middle_deg))
    return area


def _join(
    tiling: Tiling, sides: dict[tuple[int, int], dict[str, IntArray]], n_labels: int
) -> tuple[IntArray, IntArray]:
    """Basin number of every label, and the labels at the region's edge or beside missing cells of another tile."""
    n_i, n_j = tiling.shape
    pairs: list[IntArray] = []
    edge: list[IntArray] = []
    for (i, j), side in sides.items():
        east = (i, j + 1) if j + 1 < n_j else ((i, 0) if tiling.closes else None)
        north = (i + 1, j) if i + 1 < n_i else None
        edge.extend(side[name] for name, there in (("east", east), ("north", north)) if there is None)
        if i == 0:
            edge.append(side["south"])
        if j == 0 and not tiling.closes:
            edge.append(side["west"])
        if east is not None:
            pairs.append(np.stack([side["east"], sides[east]["west"]]))
        if north is not None:
            pairs.append(np.stack([side["north"], sides[north]["south"]]))
    joined = np.concatenate(pairs, axis=1) if pairs else np.zeros((2, 0), dtype=np.int64)
    joined = joined[:, (joined > 0).all(axis=0)]
    beside_missing = (joined == _MISSING).any(axis=0)
    edge.append(joined[:, beside_missing].ravel())
    joined = joined[:, ~beside_missing]
    graph = coo_array((np.ones(joined.shape[1], dtype=np.int8), (joined[0], joined[1])), shape=(n_labels, n_labels))
    _, basin = connected_components(graph, directed=False)
    return np.asarray(basin, dtype=np.int64), np.unique(np.concatenate(edge))
