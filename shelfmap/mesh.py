"""The mesh of a field: one unknown per corner of a wet cell, and what the cells are on the ground."""

from dataclasses import dataclass, fields
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from shelfmap._kernels.elements import meetings
from shelfmap.constants import EARTH_ROTATION_RAD_S
from shelfmap.dissection import dissected
from shelfmap.errors import FieldError
from shelfmap.geodesy import positions_m
from shelfmap.waters import Waters

__all__ = ["EAST", "NORTH", "TWIST", "Mesh", "make_mesh"]

BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int32]

#: Corners of a cell, south-west, south-east, north-east, north-west: what they add to the gradient per cell eastward
#: and northward at its centre, and to the pattern + - + - that has none.
EAST: Final = np.array([-0.5, 0.5, 0.5, -0.5])
NORTH: Final = np.array([-0.5, -0.5, 0.5, 0.5])
TWIST: Final = np.array([1.0, -1.0, 1.0, -1.0])
#: Corners at the ends of the south, east, north and west side.
_ENDS: Final = ((0, 1), (1, 2), (3, 2), (0, 3))
#: Corners from the lattice's point of view: rows and columns from the cell.
_PLACES: Final = ((0, 0), (0, 1), (1, 1), (1, 0))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Mesh:
    """Cells of water and the nodes at their corners, numbered in the order in which they are eliminated.

    Two cells that touch at a corner only have a node each there, so that nothing flows between them. All arrays are
    read-only.

    Parameters
    ----------
    cell : (n,) array of int
        Place of each cell of water in the region, row by row.
    corner : (n, 4) array of int32
        Nodes at its corners: south-west, south-east, north-east, north-west.
    depth_m : (n,) array of float
        Depth.
    coriolis_rad_s : (n,) array of float
        Coriolis parameter at its centre; 0 where the Earth does not turn.
    area_m2 : (n,) array of float
        Area.
    sides : (n, 3) array of float
        Products of the vectors along its south and west side, metres squared: south by south, south by west, west by
        west.
    south_side, west_side : (n, 2) array of float
        East and north part of these vectors, metres.
    node_lon_deg, node_lat_deg : (m,) array of float
        Where the nodes are.
    n_free : int
        Nodes whose elevation is unknown: the first ones. The others are those of an edge that is held.
    edge_node : (k,) array of int32
        Nodes on the open edge.
    side_ends : (l, 2) array of int32
        Nodes at the ends of each open side, as places in `edge_node`.
    side_cell : (l,) array of int32
        Its cell, as a place in `cell`.
    side_m : (l,) array of float
        Its length along the edge, in which the stairs of an edge askew to the rows are smoothed.
    indptr, indices : arrays of int32
        Pattern of the matrix of all nodes, compressed by columns.
    """

    cell: NDArray[np.int64]
    corner: IntArray
    depth_m: FloatArray
    coriolis_rad_s: FloatArray
    area_m2: FloatArray
    sides: FloatArray
    south_side: FloatArray
    west_side: FloatArray
    node_lon_deg: FloatArray
    node_lat_deg: FloatArray
    n_free: int
    edge_node: IntArray
    side_ends: IntArray
    side_cell: IntArray
    side_m: FloatArray
    indptr: IntArray
    indices: IntArray

    def __post_init__(self) -> None:
        for field in fields(self):
            value = getattr(self, field.name)
            if isinstance(value, np.ndarray):
                value.setflags(write=False)

    @property
    def n_nodes(self) -> int:
        """Nodes, those of a held edge among them."""
        return len(self.node_lon_deg)

    @property
    def is_held(self) -> bool:
        """Whether the open edge has an elevation of its own."""
        return self.n_free < self.n_nodes

    def gradient(self, elevation: NDArray[np.complex128]) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
        """East and north part of the gradient at the centres of the cells.

        Parameters
        ----------
        elevation : (m,) array of complex
            At the nodes.

        Returns
        -------
        (n,) array of complex, twice
            Per metre.
        """
        at_corner = elevation[self.corner]
        along_south, along_west = at_corner @ EAST, at_corner @ NORTH
        # the gradient whose products with both sides are these
        east = (self.west_side[:, 1] * along_south - self.south_side[:, 1] * along_west) / self.area_m2
        north = (self.south_side[:, 0] * along_west - self.west_side[:, 0] * along_south) / self.area_m2
        return east, north


def make_mesh(waters: Waters, *, rotation: bool = True, held: bool = False) -> Mesh:
    """Mesh of the waters of a region.

    Parameters
    ----------
    waters : Waters
        Their cells, and where these are open.
    rotation : bool
        Whether the Earth turns.
    held : bool
        Whether the open edge has an elevation of its own, rather than letting waves out.

    Raises
    ------
    FieldError
        If every node lies on a held edge, so that nothing is unknown.
    """
    is_wet = ~np.isnan(waters.depth_m)
    row, col = np.nonzero(is_wet)
    corner, node_row, node_col = _corners(is_wet, row, col)
    sides = [np.flatnonzero(is_open[row, col]) for is_open in waters.is_open]
    ends = np.concatenate([corner[cells][:, _ENDS[side]] for side, cells in enumerate(sides)])
    on_edge = np.zeros(len(node_row), dtype=bool)
    on_edge[ends] = True
    is_free = ~on_edge if held else np.ones_like(on_edge)
    if not is_free.any():
        raise FieldError("field: every corner of its water lies on the open edge, which is held; take a larger region")
    order = _elimination_order(node_row, node_col, is_free)
    number = np.empty(len(order), dtype=np.int32)
    number[order] = np.arange(len(order), dtype=np.int32)
    numbered, ends = number[corner], number[ends]
    edge_node = np.unique(ends)
    indptr, indices = np.zeros(len(order) + 1, np.int32), np.empty(9 * len(order), np.int32)
    n_entries = meetings(numbered, indptr, indices)
    south_side, west_side, sides_m2 = _ground(waters, is_wet)
    lon, lat = waters.lonlat_of(node_col[order] - 0.5, node_row[order] - 0.5)
    coriolis = 2.0 * EARTH_ROTATION_RAD_S * np.sin(np.radians(waters.lonlat()[1][is_wet]))
    side_cell = np.concatenate(sides).astype(np.int32)
    across = np.repeat([0, 2, 0, 2], [len(cells) for cells in sides])  # south and north sides run along the south one
    counted = _straightened(waters, row, col, sides_m2)
    counts = np.concatenate([share[cells] for share, cells in zip(counted, sides, strict=True)])
    return Mesh(
        cell=np.flatnonzero(is_wet),
        corner=numbered,
        depth_m=waters.depth_m[is_wet],
        coriolis_rad_s=coriolis * rotation,
        area_m2=south_side[:, 0] * west_side[:, 1] - south_side[:, 1] * west_side[:, 0],
        sides=sides_m2,
        south_side=south_side,
        west_side=west_side,
        node_lon_deg=lon,
        node_lat_deg=lat,
        n_free=int(is_free.sum()),
        edge_node=edge_node,
        side_ends=np.searchsorted(edge_node, ends).astype(np.int32),
        side_cell=side_cell,
        side_m=np.sqrt(sides_m2[side_cell, across]) * counts,
        indptr=indptr,
        indices=indices[:n_entries].copy(),
    )


def _corners(is_wet: BoolArray, row: NDArray[np.int64], col: NDArray[np.int64]) -> tuple[IntArray, IntArray, IntArray]:
    """Nodes of each wet cell (n, 4), and row and column of each node; a node stands at the south-west of its cell.

    Where two cells touch at a corner and no other water does, the northern one takes a node of its own.
    """
    wet = np.pad(is_wet, 1)
    south_west, south_east, north_west, north_east = wet[:-1, :-1], wet[:-1, 1:], wet[1:, :-1], wet[1:, 1:]
    is_node = south_west | south_east | north_west | north_east
    touches = (south_west & north_east & ~south_east & ~north_west) | (
        south_east & north_west & ~south_west & ~north_east
    )
    first = np.cumsum(is_node).reshape(is_node.shape) - 1
    second = is_node.sum() + np.cumsum(touches).reshape(is_node.shape) - 1
    corner = np.empty((len(row), 4), dtype=np.int32)
    for place, (north, east) in enumerate(_PLACES):
        at = row + north, col + east
        corner[:, place] = np.where(touches[at] & (north == 0), second[at], first[at])
    rows, cols = (
        np.concatenate(pair).astype(np.int32) for pair in zip(np.nonzero(is_node), np.nonzero(touches), strict=True)
    )
    return corner, rows, cols


def _straightened(
    waters: Waters, row: NDArray[np.int64], col: NDArray[np.int64], sides_m2: FloatArray
) -> list[FloatArray]:
    """Share of the length of the south, east, north and west side of each cell that counts where it is open.

    The stairs of an edge askew to the rows are longer than it, up to 1.4 times, and would let waves out too easily. So
    a side counts as the cosine of the angle between it and the edge among the cells two rows and columns round it.
    """
    south, east, north, west = waters.is_open.astype(float)
    eastward, northward = (
        ndimage.uniform_filter(facing, 5, mode="constant")[row, col] * np.sqrt(length_m2)
        for facing, length_m2 in ((east - west, sides_m2[:, 2]), (north - south, sides_m2[:, 0]))
    )
    length = np.hypot(eastward, northward)
    has_direction = length > 1e-6 * np.sqrt(sides_m2[:, 0])  # not so on a spit with edges on both sides
    return [
        np.clip(np.divide(part, length, out=np.ones_like(length), where=has_direction), 0.0, 1.0)
        for part in (-northward, eastward, northward, -eastward)
    ]


def _elimination_order(row: IntArray, col: IntArray, is_free: BoolArray) -> NDArray[np.int64]:
    """Nodes in the order of their numbers: free ones by nested dissection, then the held ones."""
    free = np.flatnonzero(is_free)
    return np.concatenate([free[dissected(row[free], col[free])], np.flatnonzero(~is_free)])


def _ground(waters: Waters, is_wet: BoolArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Vectors along the south and the west side of each wet cell, east and north, metres; and their products.

    They are chords between the middles of opposite sides, measured in space, whatever the map.
    """
    col, row = np.meshgrid(np.arange(waters.n_cols + 1) - 0.5, np.arange(waters.n_rows + 1) - 0.5)
    place = positions_m(*waters.lonlat_of(col, row))
    south = ((place[:-1, 1:] - place[:-1, :-1] + place[1:, 1:] - place[1:, :-1]) / 2)[is_wet]
    west = ((place[1:, :-1] - place[:-1, :-1] + place[1:, 1:] - place[:-1, 1:]) / 2)[is_wet]
    lon, lat = (np.radians(angle[is_wet]) for angle in waters.lonlat())
    east = np.stack([-np.sin(lon), np.cos(lon), np.zeros_like(lon)], axis=1)
    north = np.stack([-np.sin(lat) * np.cos(lon), -np.sin(lat) * np.sin(lon), np.cos(lat)], axis=1)
    south_side, west_side = (
        np.stack([(side * direction).sum(axis=1) for direction in (east, north)], axis=1) for side in (south, west)
    )
    products = [(a * b).sum(axis=1) for a, b in ((south_side, south_side), (south_side, west_side), (west_side,) * 2)]
    return south_side, west_side, np.stack(products, axis=1)
