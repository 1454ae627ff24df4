"""Which water is sea: connected water labelled tile by tile, so that no whole grid is ever in memory."""

import zlib
from bisect import bisect_left, bisect_right
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from shelfmap.grid import Grid, GridSource
from shelfmap.workers import Mapped

__all__ = ["JOB_TILES", "SHORE_HAIR_M", "Basins", "Tile", "Tiling", "label_basins"]

#: Tiles in one job at most, neighbours in a row: the file is opened, and its blocks unpacked, once for all of them.
JOB_TILES: Final = 8

#: Labels of land and of missing cells in a tile; its water is numbered from `_FIRST`.
_MISSING: Final = 1
_FIRST: Final = 2

#: Kinds of cells: land with its lakes, missing, sea.
_LAND_KIND, _MISSING_KIND, _SEA_KIND = 0, 1, 2

#: Water is deeper than this. Contours are drawn here too: at exactly the level of integer depths they touch themselves.
SHORE_HAIR_M = 1e-6

BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
KindArray = NDArray[np.uint8]
LabelArray = NDArray[np.uint8 | np.uint16 | np.uint32]


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

    def runs(self) -> Iterator[tuple[tuple[int, int], ...]]:
        """Numbers (i, j) of all tiles, row by row, in runs of neighbours short enough for one job."""
        n_i, n_j = self.shape
        for i in range(n_i):
            for j in range(0, n_j, JOB_TILES):
                yield tuple((i, k) for k in range(j, min(j + JOB_TILES, n_j)))

    def met(self, window: Tile) -> Iterator[tuple[int, int, int]]:
        """Numbers (i, j) of the tiles that a window meets, and the columns each is shifted by to do so."""
        turn = source_width(self.region)
        for shift in (-turn, 0, turn) if self.closes else (0,):
            for i in _spanned(self.row_edges, window.row0, window.row1):
                for j in _spanned(self.col_edges, window.col0 - shift, window.col1 - shift):
                    yield i, j, shift

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


def _spanned(edges: Sequence[int], start: int, stop: int) -> range:
    """Numbers of the intervals between edges that the half-open interval from start to stop meets."""
    return range(max(bisect_right(edges, start) - 1, 0), min(bisect_left(edges, stop), len(edges) - 1))


def _edges(start: int, stop: int, size: int) -> tuple[int, ...]:
    n = max(1, round((stop - start) / size))
    return tuple(int(edge) for edge in np.linspace(start, stop, n + 1).round())


@dataclass(frozen=True, slots=True, kw_only=True)
class _Waters:
    """Waters of one tile by label, which hold within the tile only, packed small."""

    packed: bytes
    dtype: str
    areas_m2: FloatArray
    """(k,) area of the cells of each label, square metres."""
    beside_missing: BoolArray
    """(k,) whether a cell of the label lies beside a missing one, or is missing itself."""
    sides: dict[str, LabelArray]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Kinds:
    """Kinds of the cells of one tile: its packed labels, and what each label is."""

    packed: bytes
    dtype: str
    kind: KindArray
    held: frozenset[int]
    """Kinds that occur in the tile."""


class Basins:
    """Sea or not, cell by cell, over a tiled region or the part of it round a window.

    Parameters
    ----------
    tiling : Tiling
        The region and its tiles.
    tiles : dict of (int, int) to _Kinds
        What is known of each tile.
    areas_m2 : (n_seas,) array of float
        Areas of the basins that are sea, square metres, largest first.
    """

    def __init__(self, tiling: Tiling, tiles: dict[tuple[int, int], _Kinds], areas_m2: FloatArray) -> None:
        self.tiling = tiling
        self.areas_m2 = areas_m2
        self._tiles = tiles

    def near(self, windows: Iterable[Tile]) -> "Basins":
        """The same of the tiles that windows meet only: small enough to be sent to another process."""
        tiles = {(i, j): self._tiles[i, j] for window in windows for i, j, _ in self.tiling.met(window)}
        return Basins(self.tiling, tiles, self.areas_m2)

    def may_hold_shore(self, window: Tile) -> bool:
        """Whether the tiles that a window meets hold both sea and land, known without unpacking them."""
        held = frozenset[int]().union(*(self._tiles[i, j].held for i, j, _ in self.tiling.met(window)))
        return {_LAND_KIND, _SEA_KIND} <= held

    def sea_mask(self, window: Tile) -> BoolArray:
        """Whether each cell of a window is sea; the window lies in the region, columns may run past its seam."""
        return np.asarray(self._kinds(window) == _SEA_KIND)

    def shore_mask(self, window: Tile) -> BoolArray | None:
        """The same; None where the window holds no sea, or no land and no lake either."""
        kinds = self._kinds(window)
        sea = kinds == _SEA_KIND
        return np.asarray(sea) if sea.any() and (kinds == _LAND_KIND).any() else None

    def _kinds(self, window: Tile) -> KindArray:
        out = np.zeros((window.row1 - window.row0, window.col1 - window.col0), dtype=np.uint8)
        for i, j, shift in self.tiling.met(window):
            tile, kinds = self.tiling.tile(i, j), self._tiles[i, j]
            row0, row1 = max(tile.row0, window.row0), min(tile.row1, window.row1)
            col0, col1 = max(tile.col0 + shift, window.col0), min(tile.col1 + shift, window.col1)
            here = out[row0 - window.row0 : row1 - window.row0, col0 - window.col0 : col1 - window.col0]
            if len(kinds.held) == 1:
                here[:] = next(iter(kinds.held))
                continue
            labels = _unpacked(kinds.packed, kinds.dtype).reshape(-1, tile.col1 - tile.col0)
            here[:] = kinds.kind[
                labels[row0 - tile.row0 : row1 - tile.row0, col0 - shift - tile.col0 : col1 - shift - tile.col0]
            ]
        return out


@lru_cache(maxsize=12)  # the neighbours of a tile, and those of the next one
def _unpacked(packed: bytes, dtype: str) -> LabelArray:
    """Labels of a tile, row after row."""
    return np.frombuffer(zlib.decompress(packed), dtype=dtype)


def label_basins(
    source: GridSource,
    tiling: Tiling,
    *,
    level_m: float,
    smallest_sea_m2: float,
    smallest_enclosed_sea_m2: float,
    mapped: Mapped = map,
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
    mapped : Mapped
        Runs the labelling of tiles.

    Returns
    -------
    Basins
        Cells are joined through their sides only: water that meets at a corner is not connected.
    """
    runs = list(tiling.runs())
    jobs = ((source, tuple(tiling.tile(i, j) for i, j in run), level_m) for run in runs)
    waters: dict[tuple[int, int], _Waters] = {}
    for run, labelled in zip(runs, mapped(_label_tiles, jobs), strict=True):
        waters.update(zip(run, labelled, strict=True))
    of_all, n_labels = _number_all(waters)
    basin, is_open = _join(tiling, waters, of_all, n_labels)
    area_m2 = np.zeros(basin.max() + 1)
    for at, water in waters.items():
        np.add.at(area_m2, basin[of_all[at]], water.areas_m2)
    sea = area_m2 >= np.where(is_open, smallest_sea_m2, smallest_enclosed_sea_m2)
    sea[basin[:_FIRST]] = False
    kind_of = np.where(sea[basin], _SEA_KIND, _LAND_KIND).astype(np.uint8)
    kind_of[_MISSING] = _MISSING_KIND
    tiles = {
        at: _Kinds(
            packed=water.packed,
            dtype=water.dtype,
            kind=kind_of[of_all[at]],
            held=frozenset(np.unique(kind_of[of_all[at]][water.areas_m2 > 0]).tolist()),
        )
        for at, water in waters.items()
    }
    return Basins(tiling, tiles, np.sort(area_m2[sea])[::-1])


def _label_tiles(job: tuple[GridSource, Sequence[Tile], float]) -> list[_Waters]:
    """Label the waters of some tiles, each on its own."""
    source, tiles, level_m = job
    grids = source.read_many((tile.row0, tile.row1, tile.col0, tile.col1) for tile in tiles)
    return [_label_tile(grid, level_m, _cell_area_m2(source, tile)) for tile, grid in zip(tiles, grids, strict=True)]


def _label_tile(grid: Grid, level_m: float, cell_m2: FloatArray) -> _Waters:
    """Label the waters of a tile whose rows have cells of these areas."""
    water = is_water(grid.depth_m, level_m)
    if water.all() or not water.any():  # most tiles of a globe
        found, n = water.astype(np.int32), int(water[0, 0])
    else:
        found, n = ndimage.label(water)
    missing = np.isnan(grid.depth_m)
    found += found > 0  # 1 is for missing cells
    found[missing] = _MISSING
    labels = found.astype(np.min_scalar_type(n + 1))
    beside_missing = np.zeros(_FIRST + n, dtype=bool)
    if missing.any():
        beside_missing[np.unique(labels[ndimage.binary_dilation(missing)])] = True
    return _Waters(
        packed=zlib.compress(labels.tobytes(), 1),
        dtype=labels.dtype.str,
        areas_m2=_label_areas_m2(labels, cell_m2, _FIRST + n),
        beside_missing=beside_missing,
        sides={
            "south": labels[0].copy(),
            "north": labels[-1].copy(),
            "west": labels[:, 0].copy(),
            "east": labels[:, -1].copy(),
        },
    )


def is_water(depth_m: NDArray[np.float32], level_m: float) -> BoolArray:
    """Whether each cell is known water: deeper than the shoreline, and not missing."""
    with np.errstate(invalid="ignore"):
        return np.asarray(depth_m.astype(np.float64) + level_m > SHORE_HAIR_M)


def _label_areas_m2(labels: LabelArray, cell_m2: FloatArray, n_labels: int) -> FloatArray:
    """Area of each label, square metres, added up by runs of like cells along the rows."""
    flat, n_cols = labels.ravel(), labels.shape[1]
    is_first = np.ones(len(flat), dtype=bool)
    is_first[1:] = flat[1:] != flat[:-1]
    is_first[::n_cols] = True
    first = np.flatnonzero(is_first)
    run_m2 = np.diff(first, append=len(flat)) * cell_m2[first // n_cols]
    return np.bincount(flat[first], weights=run_m2, minlength=n_labels).astype(np.float64)


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


def _number_all(waters: dict[tuple[int, int], _Waters]) -> tuple[dict[tuple[int, int], IntArray], int]:
    """Numbers of each tile's labels among those of all tiles, land and missing cells shared, and how many there are."""
    of_all: dict[tuple[int, int], IntArray] = {}
    n_labels = _FIRST
    for at, water in waters.items():
        n = len(water.areas_m2) - _FIRST
        of_all[at] = np.concatenate([np.arange(_FIRST), np.arange(n_labels, n_labels + n)])
        n_labels += n
    return of_all, n_labels


def _join(
    tiling: Tiling,
    waters: dict[tuple[int, int], _Waters],
    of_all: dict[tuple[int, int], IntArray],
    n_labels: int,
) -> tuple[IntArray, BoolArray]:
    """Basin of every label, and whether each basin reaches the region's edge or missing cells."""
    n_i, n_j = tiling.shape
    pairs: list[IntArray] = [np.zeros((2, 0), dtype=np.int64)]
    is_open = np.zeros(n_labels, dtype=bool)
    for (i, j), water in waters.items():
        numbers = of_all[i, j]
        is_open[numbers[water.beside_missing]] = True
        east = (i, j + 1) if j + 1 < n_j else ((i, 0) if tiling.closes else None)
        north = (i + 1, j) if i + 1 < n_i else None
        at_edge = {"east": east is None, "north": north is None, "south": i == 0, "west": j == 0 and not tiling.closes}
        for name in (name for name, is_edge in at_edge.items() if is_edge):
            is_open[numbers[water.sides[name]]] = True
        for near, name, facing in ((east, "east", "west"), (north, "north", "south")):
            if near is not None:
                pairs.append(_meetings(numbers[water.sides[name]], of_all[near][waters[near].sides[facing]]))
    joined = np.concatenate(pairs, axis=1)
    beside_missing = (joined == _MISSING).any(axis=0)
    is_open[joined[:, beside_missing].ravel()] = True
    joined = joined[:, ~beside_missing]
    graph = coo_array((np.ones(joined.shape[1], dtype=np.int8), (joined[0], joined[1])), shape=(n_labels, n_labels))
    n_basins, basin = connected_components(graph, directed=False)
    return np.asarray(basin, dtype=np.int64), np.bincount(basin, weights=is_open, minlength=n_basins) > 0


def _meetings(side: IntArray, facing: IntArray) -> IntArray:
    """Pairs of labels, land apart, that meet along two sides; a pair once for each stretch of it."""
    pairs = np.stack([side, facing])
    is_first = np.ones(len(side), dtype=bool)
    is_first[1:] = (pairs[:, 1:] != pairs[:, :-1]).any(axis=0)
    return np.asarray(pairs[:, is_first & (pairs > 0).all(axis=0)])
