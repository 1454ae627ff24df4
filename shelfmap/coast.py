"""From a bathymetry grid or a vector file to the coast that stations stand on.

The generalised coast is the shoreline after a morphological closing of the land: every inlet narrower than a stated
width is bridged, everything else stays where it is. It is made tile by tile in a local projection in metres, and the
pieces are joined at the seams.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap.basins import SHORE_HAIR_M, Basins, Tile, Tiling, label_basins
from shelfmap.chains import join_ends
from shelfmap.closing import TracingJob, trace_tiles, window_of
from shelfmap.errors import CoastError
from shelfmap.geodesy import area_m2, distance_bearing, geodesic_nodes, unwrap_along
from shelfmap.grid import INSIDE, GridSource
from shelfmap.settings import CoastSettings
from shelfmap.workers import Mapped

__all__ = ["Coast", "CoastLine", "coast_from_lines", "trace_coast"]

FloatArray = NDArray[np.float64]
Geometries = NDArray[np.object_]


@dataclass(frozen=True, slots=True, kw_only=True)
class CoastLine:
    """One connected piece of the generalised coast, sea on the right hand."""

    lon_deg: FloatArray
    """(k,) longitudes, degrees, without jumps."""
    lat_deg: FloatArray
    """(k,) latitudes, degrees."""
    along_m: FloatArray
    """(k,) distance along the line from its first point, metres."""
    is_closed: bool
    """Whether the last point is the first."""

    @property
    def length_m(self) -> float:
        """Length, metres."""
        return float(self.along_m[-1])

    @classmethod
    def through(cls, lon_deg: FloatArray, lat_deg: FloatArray) -> "CoastLine":
        """Line through points, repeated ones dropped."""
        leg_m, _ = distance_bearing(lon_deg[:-1], lat_deg[:-1], lon_deg[1:], lat_deg[1:])
        keep = np.concatenate([[True], leg_m > 0])
        turn = (lon_deg[-1] - lon_deg[0]) / 360.0
        return cls(
            lon_deg=lon_deg[keep],
            lat_deg=lat_deg[keep],
            along_m=np.concatenate([[0.0], np.cumsum(leg_m[leg_m > 0])]),
            is_closed=bool(abs(lat_deg[-1] - lat_deg[0]) < 1e-9 and abs(turn - round(turn)) < 1e-11),
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Coast:
    """The coast of a region: where stations stand, and which land they leave out."""

    lines: tuple[CoastLine, ...]
    """Connected pieces, longest first, sea on the right hand."""
    islets: Geometries
    """Polygons (lon, lat) of land too small to carry stations."""
    source: str
    """Where it comes from, one clause for people."""

    @property
    def length_km(self) -> float:
        """Length of all pieces, km."""
        return sum(line.length_m for line in self.lines) / 1e3


def trace_coast(
    source: GridSource, settings: CoastSettings, land: Geometries | None = None, *, mapped: Mapped = map
) -> Coast:
    """Trace the generalised coast of a grid, or of land polygons on it.

    Parameters
    ----------
    source : GridSource
        The bathymetry; read tile by tile.
    settings : CoastSettings
        Level, generalisation, smallest island and sea, box.
    land : array of shapely polygons, optional
        Land in longitude and latitude, used instead of the grid's own shoreline.
    mapped : Mapped
        Runs the tiles, in this process by default; the coast is the same bit for bit wherever they run.

    Returns
    -------
    Coast
        Lines with the sea on the right, longest first.

    Raises
    ------
    CoastError
        If there is no sea, or no shoreline at that level.
    """
    region = region_of(source, settings.box, margin_m=2 * settings.generalise_m)
    tiling = Tiling.cut(source, region)
    basins = label_basins(
        source,
        tiling,
        level_m=settings.level_m,
        smallest_sea_m2=settings.smallest_sea_km2 * 1e6,
        smallest_enclosed_sea_m2=settings.smallest_enclosed_sea_km2 * 1e6,
        mapped=mapped,
    )
    if not len(basins.areas_m2):
        raise CoastError(
            f"{source.path}: no water body of at least {settings.smallest_sea_km2:g} km2 in this region; "
            "check that it holds depths here, their sign (grid.positive), the level (grid.level_shift_m) and "
            "coast.smallest_sea_km2"
        )
    in_index = None if land is None else _in_index(source, land, settings.smallest_enclosed_sea_km2 * 1e6)
    pieces: list[FloatArray] = []
    islets: list[Geometries] = []
    for traced in mapped(trace_tiles, _tracing_jobs(source, settings, basins, in_index)):
        for tile in traced:
            pieces.extend(tile.lines)
            islets.append(tile.islets)
    join_cells = max(0.3, 0.05 * settings.generalise_m / 2 / source.step_m)
    chains = join_ends(pieces, tolerance=join_cells, turn=source.n_cols if tiling.closes else None)
    lines, dropped = _sort_out(source, chains, settings)
    if not lines:
        raise CoastError(
            f"{source.path}: no shoreline at level {settings.level_m:g} m here: all of it is water (or land of "
            f"coast.file), or its islands are below coast.smallest_island_km2 = {settings.smallest_island_km2:g}; "
            "where missing cells are the land, set grid.void_is_land = true"
        )
    return Coast(
        lines=tuple(lines),
        islets=np.concatenate([*islets, dropped]),
        source=f"shoreline at {settings.level_m:g} m, inlets under {settings.generalise_km:g} km bridged"
        if land is None
        else f"land polygons of {settings.file}, inlets under {settings.generalise_km:g} km bridged",
    )


def region_of(source: GridSource, box: tuple[float, float, float, float] | None, *, margin_m: float) -> Tile:
    """Part of the grid a box covers, with a margin; the whole grid without a box.

    Raises
    ------
    CoastError
        If the box does not meet the grid.
    """
    if box is None:
        return Tile(0, source.n_rows, 0, source.n_cols)
    west, south, east, north = box
    east = east if east > west else east + 360.0
    edge_lon = np.concatenate([np.linspace(west, east, 50), np.linspace(west, east, 50), [west] * 50, [east] * 50])
    edge_lat = np.concatenate(
        [[south] * 50, [north] * 50, np.linspace(south, north, 50), np.linspace(south, north, 50)]
    )
    col, row = source.index_of(edge_lon, edge_lat)
    if source.wraps:
        first, _ = source.index_of(west, south)
        col = float(first) + (edge_lon - west) / source.dx
    on_map = np.isfinite(col) & np.isfinite(row)
    col, row = (col[on_map], row[on_map]) if on_map.any() else (np.array([-1e9]), np.array([-1e9]))
    rows, cols = int(margin_m / source.step_y_m) + 2, int(margin_m / source.step_x_m) + 2
    row0, row1 = max(0, int(row.min()) - rows), min(source.n_rows, int(row.max()) + rows + 1)
    col0, col1 = int(col.min()) - cols, int(col.max()) + cols + 1
    if source.wraps and col1 - col0 >= source.n_cols:
        col0, col1 = 0, source.n_cols
    elif not source.wraps:
        col0, col1 = max(0, col0), min(source.n_cols, col1)
    if row1 - row0 < 3 or col1 - col0 < 3:
        grid_box = ", ".join(f"{edge:g}" for edge in source.box_deg)
        raise CoastError(
            f"coast.box = {list(box)} lies outside the grid, which covers west, south, east, north = {grid_box}"
        )
    return Tile(row0, row1, col0, col1)


def _in_index(source: GridSource, land: Geometries, smallest_sea_m2: float) -> Geometries:
    """Land on the grid as polygons in its index, joined, lakes filled; round the globe once more on both sides."""
    west, south, east, north = source.box_deg
    spare_deg = 180.0 if source.wraps else 0.5
    land = shapely.make_valid(land)
    moved = [
        shapely.transform(land, lambda lonlat, turn=turn: lonlat + np.array([turn, 0.0]))
        for turn in (-360.0, 0.0, 360.0)
    ]
    cut = shapely.clip_by_rect(np.concatenate(moved), west - spare_deg, south, east + spare_deg, north)
    parts = shapely.get_parts(cut[~shapely.is_empty(cut)])
    # most lands lie apart: a plain union takes minutes on those of a globe
    whole = shapely.get_parts(shapely.disjoint_subset_union_all(parts[shapely.get_dimensions(parts) == 2]))
    rings, number = shapely.get_rings(whole[shapely.get_dimensions(whole) == 2], return_index=True)
    is_shell = np.diff(number, prepend=-1) > 0
    kept = is_shell.copy()
    kept[~is_shell] = [area_m2(*shapely.get_coordinates(hole).T) >= smallest_sea_m2 for hole in rings[~is_shell]]
    polygons = shapely.polygons(rings[kept], indices=number[kept])

    def to_index(lonlat: FloatArray) -> FloatArray:
        x, y = source.projection.from_lonlat(lonlat[:, 0], lonlat[:, 1])
        return np.stack([(x - source.x0) / source.dx, (y - source.y0) / source.dy], axis=1)

    return np.asarray(shapely.get_parts(shapely.make_valid(shapely.transform(polygons, to_index))))


def _tracing_jobs(
    source: GridSource, settings: CoastSettings, basins: Basins, land: Geometries | None
) -> Iterator[TracingJob]:
    """Jobs that trace all tiles in order, those left out that hold no shore."""
    tiling = basins.tiling
    row, band = -1, np.zeros(0, dtype=object)
    for run in tiling.runs():
        tiles = [tiling.tile(i, j) for i, j in run]
        windows = [window_of(source, tiling, tile, settings.generalise_m / 2) for tile in tiles]
        if land is None:
            kept = [k for k, window in enumerate(windows) if basins.may_hold_shore(window)]
        else:
            if run[0][0] != row:  # land is cut to the row of tiles first: a continent has many vertices
                row, band = run[0][0], _cut(land, windows[0].row0, windows[0].row1, -source.n_cols, 2 * source.n_cols)
            cut = [_cut(band, window.row0, window.row1, window.col0, window.col1) for window in windows]
            kept = [k for k, polygons in enumerate(cut) if len(polygons)]
        if kept:
            yield TracingJob(
                source=source,
                settings=settings,
                tiles=tuple(tiles[k] for k in kept),
                basins=basins.near([windows[k] for k in kept] if land is None else []),
                land=None if land is None else tuple(cut[k] for k in kept),
            )


def _cut(land: Geometries, row0: int, row1: int, col0: int, col1: int) -> Geometries:
    """Polygons within the cell centres of a half-open window."""
    cut = shapely.clip_by_rect(land, col0, row0, col1 - 1, row1 - 1)
    parts = shapely.get_parts(cut[~shapely.is_empty(cut)])
    return np.asarray(parts[shapely.get_dimensions(parts) == 2])


def _sort_out(
    source: GridSource, chains: Sequence[FloatArray], settings: CoastSettings
) -> tuple[list[CoastLine], Geometries]:
    """Keep the coasts that carry stations, longest first; return the islands dropped as polygons too."""
    lines: list[CoastLine] = []
    dropped: list[shapely.Geometry] = []
    for chain in chains:
        if source.wraps:
            chain[:, 0] -= source.n_cols * np.round((chain[:, 0].mean() - (source.n_cols - 1) / 2) / source.n_cols)
        lon_deg, lat_deg = source.lonlat_of(chain[:, 0], chain[:, 1])
        line = CoastLine.through(unwrap_along(lon_deg), lat_deg)
        if len(line.lon_deg) < 2 or line.length_m <= 0:
            continue
        signed = 0.5 * float(np.sum(chain[:-1, 0] * chain[1:, 1] - chain[1:, 0] * chain[:-1, 1]))
        signed += 0.5 * float(chain[-1, 0] * chain[0, 1] - chain[0, 0] * chain[-1, 1])
        goes_round = line.is_closed and abs(line.lon_deg[-1] - line.lon_deg[0]) > 180
        least_km2 = settings.smallest_island_km2 if signed > 0 else settings.smallest_sea_km2
        small = not goes_round and area_m2(line.lon_deg, line.lat_deg) < least_km2 * 1e6
        chord_m, _ = distance_bearing(line.lon_deg[0], line.lat_deg[0], line.lon_deg[-1], line.lat_deg[-1])
        if small and chord_m < line.length_m / 2:
            if line.is_closed and signed > 0:
                dropped.append(shapely.polygons(np.stack([line.lon_deg, line.lat_deg], axis=1)))
            continue
        lines.append(line)
    lines.sort(key=lambda line: (-line.length_m, line.lon_deg[0], line.lat_deg[0]))
    return lines, np.array(dropped, dtype=object)


def coast_from_lines(source: GridSource, lines: Geometries, name: str) -> Coast:
    """Take lines of a vector file as the coast, turned so that the sea is on the right.

    Parameters
    ----------
    source : GridSource
        The bathymetry; tells on which side the water is.
    lines : array of shapely lines
        Longitude and latitude, degrees; parts of multi-part lines count singly.
    name : str
        What to call their source.

    Returns
    -------
    Coast
        One piece a line, longest first. Lines with no more water on one side than on the other keep their direction.

    Raises
    ------
    CoastError
        If none of the geometries is a line with a length.
    """
    parts = shapely.get_parts(lines)
    parts = parts[(shapely.get_type_id(parts) == 1) | (shapely.get_type_id(parts) == 2)]
    coast: list[CoastLine] = []
    for part in parts:
        lonlat = shapely.get_coordinates(part)
        line = CoastLine.through(unwrap_along(lonlat[:, 0]), lonlat[:, 1])
        if len(line.lon_deg) < 2:
            continue
        right, left = (_wet_share(source, line, side) for side in (90.0, -90.0))
        if left > right:
            line = CoastLine.through(line.lon_deg[::-1], line.lat_deg[::-1])
        coast.append(line)
    if not coast:
        raise CoastError(f"{name}: holds no line with a length; give the coast as lines, or the land as polygons")
    coast.sort(key=lambda line: (-line.length_m, line.lon_deg[0], line.lat_deg[0]))
    return Coast(lines=tuple(coast), islets=np.zeros(0, dtype=object), source=f"lines of {name}")


def _wet_share(source: GridSource, line: CoastLine, side_deg: float) -> float:
    """Share of points beside a line that are water, looked for two to eight cells away."""
    at_m = (np.arange(64) + 0.5) / 64 * line.length_m
    lon_deg, lat_deg = np.interp(at_m, line.along_m, line.lon_deg), np.interp(at_m, line.along_m, line.lat_deg)
    ahead_m = np.minimum(at_m + line.length_m / 256, line.length_m)
    _, bearing_deg = distance_bearing(
        lon_deg,
        lat_deg,
        np.interp(ahead_m, line.along_m, line.lon_deg),
        np.interp(ahead_m, line.along_m, line.lat_deg),
    )
    away_m = np.array([2.0, 4.0, 8.0]) * source.step_m
    lon_deg, lat_deg = geodesic_nodes(lon_deg, lat_deg, bearing_deg + side_deg, away_m)
    depth_m, state = source.sample(lon_deg.ravel(), lat_deg.ravel())
    return float(np.mean((state == INSIDE) & (depth_m > SHORE_HAIR_M)))
