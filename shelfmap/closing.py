"""The generalised coast of one tile: its land closed in a local plane in metres, and the boundary cut at the seams.

Pure functions of what they are given, so that tiles can be traced anywhere in any order.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise
from typing import Final

import numpy as np
import shapely
from contourpy import FillType, contour_generator
from numpy.typing import NDArray
from scipy import ndimage

from shelfmap.basins import SHORE_HAIR_M, Basins, Tile, Tiling
from shelfmap.geodesy import LocalPlane, local_projection
from shelfmap.grid import GridSource
from shelfmap.settings import CoastSettings

__all__ = ["TileCoast", "TracingJob", "trace_tiles", "window_of"]

BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]
Geometries = NDArray[np.object_]

#: Round joins of the closing use this many segments a quarter circle: chords stay within 0.5 % of the radius.
QUARTER_SEGMENTS: Final = 8
#: Edges of land polygons are cut at this many cells: longer ones, straight in the grid, bow off in the local plane.
LONGEST_EDGE_CELLS: Final = 4.0
#: Seams between tiles lie off the cells by this much of one: a coast along the cells would lie on both sides of them.
SEAM_CELLS: Final = 0.3719


@dataclass(frozen=True, slots=True, kw_only=True)
class TracingJob:
    """Some neighbouring tiles to trace, and everything that takes."""

    source: GridSource
    settings: CoastSettings
    tiles: tuple[Tile, ...]
    basins: Basins
    """Which water is sea in the windows of the tiles, their margins included."""
    land: tuple[Geometries, ...] | None
    """Land polygons in each window, in grid index, where they stand for the grid's own shoreline."""


@dataclass(frozen=True, slots=True, kw_only=True)
class TileCoast:
    """Generalised coast inside one tile."""

    lines: list[FloatArray]
    """(k, 2) column and row of each piece, in grid index, land on the left."""
    islets: Geometries
    """Polygons (lon, lat) of the land too small to carry stations, met in the tile and its margin."""


def window_of(source: GridSource, tiling: Tiling, tile: Tile, radius_m: float) -> Tile:
    """Tile with the margin that a closing with this radius needs, clipped to the region."""
    lat_deg = np.abs(source.lonlat_of(np.full(2, float(tile.col0)), np.array([tile.row0, tile.row1]))[1]).max()
    _, middle_deg = source.lonlat_of((source.n_cols - 1) / 2, (source.n_rows - 1) / 2)
    shrink = 1.0
    if source.is_geographic:
        shrink = max(0.02, np.cos(np.radians(min(89.0, lat_deg))) / np.cos(np.radians(float(middle_deg))))
    rows = int(3 * radius_m / source.step_y_m) + 3
    cols = int(3 * radius_m / (source.step_x_m * shrink)) + 3
    return tiling.with_margin(tile, rows, cols)


def trace_tiles(job: TracingJob) -> list[TileCoast]:
    """Generalised coast of each tile of a job; windows without a shore are not read.

    Parameters
    ----------
    job : TracingJob
        The tiles.

    Returns
    -------
    list of TileCoast
        In the order of the tiles.
    """
    source, settings = job.source, job.settings
    windows = [window_of(source, job.basins.tiling, tile, settings.generalise_m / 2) for tile in job.tiles]
    if job.land is not None:
        polygons = [shapely.segmentize(land, max_segment_length=LONGEST_EDGE_CELLS) for land in job.land]
    else:
        polygons = _land_of_grid(source, settings.level_m, windows, job.basins)
    tiling = job.basins.tiling
    return [
        _trace_tile(source, settings, tiling, tile, window, land)
        for tile, window, land in zip(job.tiles, windows, polygons, strict=True)
    ]


def _land_of_grid(source: GridSource, level_m: float, windows: Sequence[Tile], basins: Basins) -> list[Geometries]:
    """Land polygons of each window in grid index; none where the window holds no shore."""
    masks = [basins.shore_mask(window) for window in windows]
    grids = source.read_many(
        (window.row0, window.row1, window.col0, window.col1)
        for window, sea in zip(windows, masks, strict=True)
        if sea is not None
    )
    return [
        np.zeros(0, dtype=object) if sea is None else _land_polygons(next(grids).depth_m, level_m, sea, window)
        for window, sea in zip(windows, masks, strict=True)
    ]


@lru_cache(maxsize=1)  # neighbouring windows are mostly of one shape
def _cells(shape: tuple[int, int]) -> tuple[FloatArray, FloatArray]:
    """Column and row of each cell of a window, from its first one."""
    col, row = np.meshgrid(np.arange(shape[1], dtype=float), np.arange(shape[0], dtype=float))
    return col, row


def _land_polygons(depth_m: NDArray[np.float32], level_m: float, sea: BoolArray, window: Tile) -> Geometries:
    """Land of a window as polygons in grid index; lakes are land, missing cells are like the nearest known."""
    below_m = depth_m.astype(np.float64) + level_m
    with np.errstate(invalid="ignore"):
        below_m[(below_m > SHORE_HAIR_M) & ~sea] = -1.0  # lakes
    missing = np.isnan(below_m)
    if missing.any():
        nearest = ndimage.distance_transform_edt(missing, return_distances=False, return_indices=True)
        below_m = below_m[tuple(nearest)]
    col, row = _cells(below_m.shape)
    filled = contour_generator(col, row, below_m, fill_type=FillType.OuterOffset).filled(-np.inf, SHORE_HAIR_M)
    corner = np.array([window.col0, window.row0], dtype=float)
    polygons = [
        shapely.polygons(rings[0], rings[1:] or None)
        for rings in (
            [shapely.linearrings(points[a:b] + corner) for a, b in pairwise(offsets)]
            for points, offsets in zip(*filled, strict=True)
        )
    ]
    return np.array(polygons, dtype=object)


def _trace_tile(
    source: GridSource, settings: CoastSettings, tiling: Tiling, tile: Tile, window: Tile, land: Geometries
) -> TileCoast:
    """Close the land of a window, and cut its boundary to the tile."""
    if not len(land):
        return TileCoast(lines=[], islets=np.zeros(0, dtype=object))
    radius_m = settings.generalise_m / 2
    lon_deg, lat_deg = source.lonlat_of((tile.col0 + tile.col1) / 2, (tile.row0 + tile.row1) / 2)
    plane = local_projection(float(lon_deg), float(lat_deg))

    def to_plane(index: FloatArray) -> FloatArray:
        return np.stack(plane.from_lonlat(*source.lonlat_of(index[:, 0], index[:, 1])), axis=1)

    def to_lonlat(index: FloatArray) -> FloatArray:
        return np.stack(source.lonlat_of(index[:, 0], index[:, 1]), axis=1)

    local = shapely.simplify(shapely.make_valid(shapely.transform(land, to_plane)), radius_m / 50)
    area_m2 = shapely.area(local)
    inside = shapely.box(window.col0 + 0.5, window.row0 + 0.5, window.col1 - 1.5, window.row1 - 1.5)
    is_whole = shapely.covered_by(land, inside)  # land cut by the window may be large
    tiny = is_whole & (area_m2 < (radius_m / 2) ** 2)
    large = ~is_whole | (area_m2 >= settings.smallest_island_km2 * 1e6)
    closed = shapely.union_all(local[~tiny])
    closed = shapely.buffer(closed, radius_m, quad_segs=QUARTER_SEGMENTS)
    closed = shapely.buffer(closed, -radius_m, quad_segs=QUARTER_SEGMENTS)
    parts = shapely.get_parts(closed)
    # islands are bridged to large land only, not to each other
    held, _ = shapely.STRtree(local[large]).query(parts, predicate="intersects")
    kept = np.isin(np.arange(len(parts)), held)
    dropped, _ = shapely.STRtree(parts[~kept]).query(local, predicate="intersects")
    return TileCoast(
        lines=_boundary(source, tiling, tile, parts[kept], plane, radius_m),
        islets=shapely.transform(land[np.union1d(np.flatnonzero(tiny), dropped)], to_lonlat),
    )


def _boundary(
    source: GridSource, tiling: Tiling, tile: Tile, parts: Geometries, plane: LocalPlane, radius_m: float
) -> list[FloatArray]:
    """Boundary of closed land within a tile, land on the left, in grid index."""
    region = tiling.region
    rings = shapely.boundary(shapely.orient_polygons(parts))
    rings = shapely.segmentize(shapely.get_parts(rings), max_segment_length=radius_m / 2)

    def to_index(xy_m: FloatArray) -> FloatArray:
        col, row = source.index_of(*plane.to_lonlat(xy_m[:, 0], xy_m[:, 1]))
        if source.wraps:
            middle = (tile.col0 + tile.col1) / 2
            col = col + source.n_cols * np.round((middle - col) / source.n_cols)
        return np.stack([col, row], axis=1)

    west, east = tile.col0 - SEAM_CELLS, tile.col1 - SEAM_CELLS
    south, north = tile.row0 - SEAM_CELLS, tile.row1 - SEAM_CELLS
    # the edge of the grid is no coast: stay off it by three quarters of a cell
    south, north = max(south, region.row0 + 0.75), min(north, region.row1 - 1.75)
    if not tiling.closes:
        west, east = max(west, region.col0 + 0.75), min(east, region.col1 - 1.75)
    clipped = shapely.clip_by_rect(shapely.transform(rings, to_index), west, south, east, north)
    parts = shapely.get_parts(clipped[~shapely.is_empty(clipped)])
    return [shapely.get_coordinates(part) for part in parts if shapely.get_type_id(part) == 1]
