"""The waters of a region: which cells of the grid are solved in two dimensions, and where they are open."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
import shapely
from numpy.typing import NDArray
from scipy import ndimage

from shelfmap.errors import FieldError
from shelfmap.geodesy import unwrap_lon_deg
from shelfmap.grid import GridSource
from shelfmap.lattice import Lattice
from shelfmap.settings import FieldSettings

__all__ = ["SIDES", "Waters", "open_waters"]

BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]
Geometries = NDArray[np.object_]
#: West, south, east, north, degrees.
Box = tuple[float, float, float, float]
#: Rows and columns: row0, row1, col0, col1.
Window = tuple[int, int, int, int]

#: Sides of a cell, in the order of every array with one row a side.
SIDES: Final = ("south", "east", "north", "west")
#: The cell across each side: rows and columns away.
_ACROSS: Final = ((-1, 0), (0, 1), (1, 0), (0, -1))
#: What a cell of the grid takes while the region is read, bytes.
_CELL_BYTES: Final = 30


@dataclass(frozen=True, slots=True, kw_only=True)
class Waters(Lattice):
    """Cells of a region, on a lattice of its own, that water reaches from its open edge.

    Parameters
    ----------
    depth_m : (n_rows, n_cols) array of float64
        Depth, metres; NaN where there is no water of the region.
    is_open : (4, n_rows, n_cols) array of bool
        Whether the south, east, north and west side of a cell is open sea.
    remarks : tuple of str
        What was done to the grid's water, a sentence each.
    """

    depth_m: FloatArray
    is_open: BoolArray
    remarks: tuple[str, ...] = ()

    def lonlat(self) -> tuple[FloatArray, FloatArray]:
        """Longitude and latitude of the cells' centres, (n_rows, n_cols), degrees."""
        return self.lonlat_of(*np.meshgrid(np.arange(self.n_cols), np.arange(self.n_rows)))


def open_waters(
    source: GridSource,
    settings: FieldSettings,
    *,
    region: Geometries | None = None,
    open_area: Geometries | None = None,
) -> Waters:
    """Waters of a region of a grid.

    Parameters
    ----------
    source : GridSource
        The bathymetry.
    settings : FieldSettings
        The region, its cells, what counts as water and as open.
    region, open_area : array of polygons, optional
        What `file` and `open_file` of the settings hold, longitude and latitude.

    Raises
    ------
    FieldError
        If the region does not meet the grid, holds no water, or no water of it meets an open edge; or is too large.
    """
    blocks = _blocks(source, settings.cell_km)
    lattice, depth_m = _read(source, _window_of(source, settings.box, region, blocks), blocks, settings.memory_gb)
    inside = _inside(lattice, settings.box, region)
    is_wet = inside & (depth_m > 0) & (depth_m >= settings.shallowest_m)
    if not is_wet.any():
        raise FieldError(
            f"field: no water as deep as {settings.shallowest_m:g} m in the region; check field.box, "
            "field.shallowest_m and grid.positive"
        )
    meets_edge = _outer_sides(inside, depth_m) & is_wet
    is_open = _opened(lattice, depth_m, meets_edge, settings, open_area)
    reached, is_open = _reached(is_wet, is_open)
    kept_m = np.where(reached, np.maximum(depth_m, settings.least_depth_m), np.nan)
    waters = Waters(
        **{name: getattr(lattice, name) for name in Lattice.__dataclass_fields__}, depth_m=kept_m, is_open=is_open
    )
    return replace(waters, remarks=_remarks(waters, inside, depth_m, is_wet, settings))


def _blocks(source: GridSource, cell_km: float | None) -> tuple[int, int]:
    """Rows and columns of the grid in a cell of the region."""
    if cell_km is None:
        return 1, 1
    return max(1, round(cell_km * 1e3 / source.step_y_m)), max(1, round(cell_km * 1e3 / source.step_x_m))


def _read(source: GridSource, window: Window, blocks: tuple[int, int], memory_gb: float) -> tuple[Lattice, FloatArray]:
    """Lattice and depths of a window, means over blocks; a cell is water where at least half of its block is."""
    row0, row1, col0, col1 = window
    rows, cols = blocks
    n_rows, n_cols = (row1 - row0) // rows, (col1 - col0) // cols
    if n_rows < 1 or n_cols < 1:
        raise FieldError(
            f"field.cell_km: a cell of {rows} by {cols} cells of the grid does not fit into the region of "
            f"{row1 - row0} by {col1 - col0}; give smaller cells or a larger region"
        )
    most = int(memory_gb * 1e9 / _CELL_BYTES)
    if (row1 - row0) * (col1 - col0) > most:
        raise FieldError(
            f"field: the region has {row1 - row0} by {col1 - col0} cells of the grid, more than the {most:,} that "
            f"field.memory_gb = {memory_gb:g} has room for; take a smaller field.box or a coarser grid"
        )
    depth_m = source.read(row0, row0 + n_rows * rows, col0, col0 + n_cols * cols).depth_m.astype(float)
    lattice = Lattice(
        crs_wkt=source.crs_wkt,
        x0=source.x0 + (col0 + (cols - 1) / 2) * source.dx,
        y0=source.y0 + (row0 + (rows - 1) / 2) * source.dy,
        dx=source.dx * cols,
        dy=source.dy * rows,
        n_rows=n_rows,
        n_cols=n_cols,
        wraps=False,
    )
    if blocks == (1, 1):
        return lattice, depth_m
    wet_m = np.where(depth_m > 0, depth_m, 0.0).reshape(n_rows, rows, n_cols, cols)
    n_wet = (wet_m > 0).sum(axis=(1, 3))
    mean_m = np.where(2 * n_wet >= rows * cols, wet_m.sum(axis=(1, 3)) / np.maximum(n_wet, 1), 0.0)
    is_unknown = np.isnan(depth_m).reshape(n_rows, rows, n_cols, cols).all(axis=(1, 3))
    return lattice, np.where(is_unknown, np.nan, mean_m)


def _window_of(source: GridSource, box: Box | None, region: Geometries | None, blocks: tuple[int, int]) -> Window:
    """Rows and columns of the grid to read: those of the box, or of the polygons and a cell round them."""
    if box is not None:
        return _window(source, box, "field.box")
    if region is None:
        return 0, source.n_rows, 0, source.n_cols
    row0, row1, col0, col1 = _window(source, _bounds(region), "the box of field.file's polygons")
    rows, cols = blocks
    row0, row1 = max(0, row0 - rows), min(source.n_rows, row1 + rows)
    if source.wraps:
        return row0, row1, col0 - cols, min(col1 + cols, col0 - cols + source.n_cols)
    return row0, row1, max(0, col0 - cols), min(source.n_cols, col1 + cols)


def _bounds(polygons: Geometries) -> Box:
    """West, south, east, north of polygons, the shorter way round the globe; east above west."""
    west, south, east, north = shapely.bounds(shapely.get_parts(polygons)).T
    order = np.argsort(west % 360.0)
    start, width = (west % 360.0)[order], (east - west)[order]
    end = np.maximum.accumulate(start + width)
    gap = np.append(start[1:], start[0] + 360.0) - end
    widest = int(np.argmax(gap))  # the polygons begin beyond the widest gap
    first = start[(widest + 1) % len(start)]
    last = end[-1] if widest == len(start) - 1 else max(end[-1], end[widest] + 360.0)
    return float(first), float(south.min()), float(last), float(north.max())


def _window(source: GridSource, box: Box, name: str) -> Window:
    """Rows and columns of the grid whose centres a box holds."""
    west, south, east, north = box
    east = east if east > west else east + 360.0
    across, along = np.linspace(west, east, 200), np.linspace(south, north, 200)
    col, row = source.index_of(
        np.concatenate([across, across, np.full(200, west), np.full(200, east)]),
        np.concatenate([np.full(200, south), np.full(200, north), along, along]),
    )
    if source.is_geographic:  # on the turn of the globe on which the box has most of the grid
        turns = (west + 360.0 * np.arange(-3, 4) - source.x0) / source.dx
        n_held = np.minimum(turns + (east - west) / source.dx, source.n_cols - 1.0) - np.maximum(turns, 0.0)
        first = source.index_of(west, south)[0] if source.wraps else turns[np.argmax(n_held)]
        col = np.array([first, first + (east - west) / source.dx])
    col, row = col[np.isfinite(col)], row[np.isfinite(row)]
    if len(col) and len(row):
        hair = 1e-6
        row0, row1 = max(0, int(np.ceil(row.min() - hair))), min(source.n_rows, int(np.floor(row.max() + hair)) + 1)
        col0, col1 = int(np.ceil(col.min() - hair)), int(np.floor(col.max() + hair)) + 1
        if not source.wraps:
            col0, col1 = max(0, col0), min(source.n_cols, col1)
        if row0 < row1 and col0 < col1:
            return row0, row1, col0, min(col1, col0 + source.n_cols)
    covered = ", ".join(f"{edge:g}" for edge in source.box_deg)
    raise FieldError(
        f"{name} = {[round(edge, 6) for edge in box]} holds no centre of a cell of the grid, which covers "
        f"west, south, east, north = {covered}"
    )


def _inside(lattice: Lattice, box: Box | None, region: Geometries | None) -> BoolArray:
    """Which cells belong to the region."""
    lon, lat = lattice.lonlat_of(*np.meshgrid(np.arange(lattice.n_cols), np.arange(lattice.n_rows)))
    inside = np.ones(lon.shape, dtype=bool)
    if box is not None and not lattice.is_geographic:
        west, south, east, north = box
        middle = (west + (east if east > west else east + 360.0)) / 2
        turned = unwrap_lon_deg(lon, middle)
        inside &= (abs(turned - middle) <= middle - west) & (lat >= south) & (lat <= north)
    if region is not None:
        inside &= _within(region, lon, lat)
    if not inside.any():
        raise FieldError("field.file: its polygons hold no cell of the region; check where they lie and field.box")
    return inside


def _within(polygons: Geometries, lon: FloatArray, lat: FloatArray) -> BoolArray:
    """Whether points lie in any of the polygons, whatever turn of the globe these are drawn on."""
    held = shapely.union_all(polygons)
    is_held: BoolArray = np.any([shapely.contains_xy(held, lon + turn, lat) for turn in (-360.0, 0.0, 360.0)], axis=0)
    return is_held


def _outer_sides(inside: BoolArray, depth_m: FloatArray) -> BoolArray:
    """Sides (4, n_rows, n_cols) of the region's cells beyond which the region ends, and the land does not begin."""
    goes_on = np.pad(~inside & ~(depth_m <= 0), 1, constant_values=True)
    n_rows, n_cols = inside.shape
    return np.array([inside & goes_on[1 + row : 1 + row + n_rows, 1 + col : 1 + col + n_cols] for row, col in _ACROSS])


def _opened(
    lattice: Lattice,
    depth_m: FloatArray,
    meets_edge: BoolArray,
    settings: FieldSettings,
    open_area: Geometries | None,
) -> BoolArray:
    """Those of the sides at the region's edge that are open."""
    is_open: BoolArray
    if open_area is not None:
        lon, lat = _side_middles(lattice)
        is_open = meets_edge & _within(open_area, lon, lat)
        if not is_open.any():
            raise FieldError(
                "field.open_file: no water at the region's edge lies in its polygons; draw them over the edge's water"
            )
        return is_open
    if settings.open_sides is not None:
        for name in settings.open_sides:
            if not meets_edge[SIDES.index(name)].any():
                raise FieldError(
                    f"field.open_sides: the {name} side of the region is all land; the sides with water are "
                    f"{', '.join(side for side, row in zip(SIDES, meets_edge, strict=True) if row.any()) or 'none'}"
                )
        wanted = np.isin(SIDES, settings.open_sides)
        return np.asarray(meets_edge & wanted[:, None, None])
    stretch, n_stretches = ndimage.label(meets_edge.any(axis=0), structure=np.ones((3, 3)))
    deepest_m = ndimage.maximum(depth_m, stretch, np.arange(1, n_stretches + 1)) if n_stretches else np.empty(0)
    is_deep = np.concatenate([[False], np.asarray(deepest_m) >= settings.open_depth_m])
    is_open = meets_edge & is_deep[stretch]
    if not is_open.any():
        found = f"its deepest water there has {max(deepest_m):.0f} m" if n_stretches else "no water meets its edge"
        raise FieldError(
            f"field: no open edge of {settings.open_depth_m:g} m or deeper at the edge of the region ({found}); take a "
            "larger field.box, name the sides in field.open_sides, or lower field.open_depth_m"
        )
    return np.asarray(is_open)


def _side_middles(lattice: Lattice) -> tuple[FloatArray, FloatArray]:
    """Longitude and latitude of the middle of each side of each cell, (4, n_rows, n_cols)."""
    col, row = np.meshgrid(np.arange(lattice.n_cols, dtype=float), np.arange(lattice.n_rows, dtype=float))
    return lattice.lonlat_of(
        np.array([col + east / 2 for _, east in _ACROSS]), np.array([row + north / 2 for north, _ in _ACROSS])
    )


def _reached(is_wet: BoolArray, is_open: BoolArray) -> tuple[BoolArray, BoolArray]:
    """Cells that water reaches from an open side through sides of cells, and the open sides of these."""
    basin, _ = ndimage.label(is_wet)
    reached = np.isin(basin, np.unique(basin[is_open.any(axis=0)])) & is_wet
    return reached, np.asarray(is_open & reached)


def _remarks(
    waters: Waters, inside: BoolArray, depth_m: FloatArray, is_wet: BoolArray, settings: FieldSettings
) -> tuple[str, ...]:
    """What was left out or changed, with its number of cells."""
    is_kept = ~np.isnan(waters.depth_m)
    remarks: Sequence[tuple[int, str]] = (
        (
            int((inside & (depth_m > 0) & ~is_wet).sum()),
            f"cells shallower than field.shallowest_m = {settings.shallowest_m:g} m taken as land",
        ),
        (int((is_wet & ~is_kept).sum()), "cells of water that does not reach the open edge left out"),
        (
            int((is_kept & (depth_m < settings.least_depth_m)).sum()),
            f"cells of {int(is_kept.sum())} taken to be field.least_depth_m = {settings.least_depth_m:g} m deep",
        ),
        (int((inside & np.isnan(depth_m)).sum()), "cells without a depth taken as land"),
    )
    return tuple(f"{count} {what}" for count, what in remarks if count)
