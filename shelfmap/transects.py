"""From a coast to transects: stations along it, seaward bearings, and the geodesics to sample."""

import logging
from dataclasses import dataclass
from typing import Final

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap.coast import Coast, CoastLine
from shelfmap.errors import TransectError
from shelfmap.geodesy import distance_bearing, geodesic_nodes, unwrap_along, unwrap_lon_deg
from shelfmap.settings import CoastSettings, TransectSettings

__all__ = ["Transects", "coast_pieces", "crossing_transects", "lay_transects", "transects_from_lines"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

_LOG = logging.getLogger(__name__)

#: Straight lines of this length in longitude and latitude leave a geodesic by at most 2.3 m at latitude 45, 8 at 75
#: and 13 at 80 (measured): far below a cell.
NODE_M: Final = 1e4
#: No degree of latitude is shorter than this, metres.
_LEAST_DEGREE_M: Final = 1.1e5
#: More stations than these are no screening; their results would not fit in memory.
MOST_STATIONS: Final = 100_000
#: Points each side of a station that its bearing is taken from.
_BEARING_POINTS: Final = 16


@dataclass(frozen=True, slots=True, kw_only=True)
class Transects:
    """Lines to sample, one row a transect, in order along the coast."""

    transect_id: IntArray
    """(n,) identity, kept through editing."""
    coast_part: IntArray
    """(n,) piece of the coast, 1 for the longest; 0 where drawn away from the coast."""
    coast_m: FloatArray
    """(n,) distance along that piece, metres; NaN away from the coast."""
    piece_start_m: FloatArray
    """(n,) where along the coast the stretch a station stands for begins, metres; NaN away from the coast."""
    piece_stop_m: FloatArray
    """(n,) where it ends."""
    is_drawn: BoolArray
    """(n,) True where the line was drawn or edited by hand."""
    lon_deg: FloatArray
    """(n,) station, longitude."""
    lat_deg: FloatArray
    """(n,) station, latitude."""
    bearing_deg: FloatArray
    """(n,) seaward compass bearing at the station."""
    node_m: FloatArray
    """(n, k) distance of each node from the station, metres, rising; negative landward; NaN beyond the last."""
    node_lon_deg: FloatArray
    """(n, k) longitude of each node, unwrapped."""
    node_lat_deg: FloatArray
    """(n, k) latitude of each node."""

    def __len__(self) -> int:
        return len(self.transect_id)

    def rows(self, start: int, stop: int) -> "Transects":
        """Some of them, from row `start` up to `stop`."""
        return Transects(**{name: getattr(self, name)[start:stop] for name in self.__slots__})


def lay_transects(coast: Coast, settings: TransectSettings, coast_settings: CoastSettings) -> Transects:
    """Put stations along a coast and lay a geodesic seaward from each.

    Parameters
    ----------
    coast : Coast
        Pieces with the sea on the right.
    settings : TransectSettings
        Spacing and length.
    coast_settings : CoastSettings
        Width over which the bearing is taken, and the box that stations must lie in.

    Returns
    -------
    Transects
        Every piece is cut into equal parts of about the spacing, a station in the middle of each. The bearing is
        square to the line from the centroid of the coast behind the station to that of the coast ahead of it, each
        over `generalise_km`. Nodes begin half of `generalise_km` landward, where the shoreline is searched.

    Raises
    ------
    TransectError
        If no station lies in the box, or the coast is far longer than the spacing.
    """
    _refuse_crowd(coast, settings)
    back_m = coast_settings.generalise_m / 2
    columns: dict[str, list[FloatArray]] = {name: [] for name in ("part", "along", "piece", "lon", "lat", "bearing")}
    for part, line in enumerate(coast.lines, start=1):
        n = max(1, round(line.length_m / settings.spacing_m))
        along_m = np.asarray((np.arange(n) + 0.5) * (line.length_m / n), dtype=np.float64)
        lon_deg, lat_deg = _points_along(line, along_m)
        keep = _in_box(lon_deg, lat_deg, coast_settings.box)
        bearing_deg = _seaward_bearings(line, along_m[keep], coast_settings.generalise_m)
        for name, values in (
            ("part", np.full(keep.sum(), float(part))),
            ("along", along_m[keep]),
            ("piece", np.full(keep.sum(), line.length_m / n)),
            ("lon", lon_deg[keep]),
            ("lat", lat_deg[keep]),
            ("bearing", bearing_deg),
        ):
            columns[name].append(values)
    table = {name: np.concatenate(values) for name, values in columns.items()}
    if not len(table["lon"]):
        raise TransectError(f"no station lies in coast.box = {list(coast_settings.box or ())}; move or widen the box")
    spread = np.linspace(0.0, settings.length_m, max(2, int(np.ceil(settings.length_m / NODE_M)) + 1))
    node_m = np.concatenate([np.linspace(-back_m, 0.0, max(2, int(np.ceil(back_m / NODE_M)) + 1))[:-1], spread])
    node_lon, node_lat = geodesic_nodes(table["lon"], table["lat"], table["bearing"], node_m)
    return Transects(
        transect_id=np.arange(1, len(node_lon) + 1, dtype=np.int64),
        coast_part=table["part"].astype(np.int64),
        coast_m=table["along"],
        piece_start_m=table["along"] - table["piece"] / 2,
        piece_stop_m=table["along"] + table["piece"] / 2,
        is_drawn=np.zeros(len(node_lon), dtype=bool),
        lon_deg=table["lon"],
        lat_deg=table["lat"],
        bearing_deg=table["bearing"],
        node_m=np.broadcast_to(node_m, node_lon.shape).copy(),
        node_lon_deg=node_lon,
        node_lat_deg=node_lat,
    )


def _refuse_crowd(coast: Coast, settings: TransectSettings) -> None:
    """Refuse a spacing that would take more stations than a run can hold."""
    length_m = sum(line.length_m for line in coast.lines)
    if length_m / settings.spacing_m > MOST_STATIONS:
        raise TransectError(
            f"transects.spacing_km = {settings.spacing_km:g} would put {length_m / settings.spacing_m:.2g} stations on "
            f"{length_m / 1e3:.0f} km of coast, of {MOST_STATIONS} at most; give "
            f"{np.ceil(length_m / MOST_STATIONS) / 1e3:g} or more"
        )


def _points_along(line: CoastLine, along_m: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Points at distances along a line; past the ends of a closed one it goes round again."""
    turn_deg = 0.0
    if line.is_closed:
        turns = np.floor(along_m / line.length_m)
        turn_deg = turns * (line.lon_deg[-1] - line.lon_deg[0])
        along_m = along_m - turns * line.length_m
    lon_deg = np.interp(along_m, line.along_m, line.lon_deg) + turn_deg
    return lon_deg, np.interp(along_m, line.along_m, line.lat_deg)


def _seaward_bearings(line: CoastLine, along_m: FloatArray, width_m: float) -> FloatArray:
    """Compass bearing square to the coast on its right hand, degrees."""
    reach_m = min(width_m, line.length_m / 4) if line.is_closed else width_m
    offset_m = (np.arange(-_BEARING_POINTS, _BEARING_POINTS + 1) / _BEARING_POINTS) * reach_m
    at_m = along_m[:, None] + offset_m
    if not line.is_closed:
        at_m = np.clip(at_m, 0.0, line.length_m)
    lon_deg, lat_deg = _points_along(line, at_m)
    here_lon, here_lat = _points_along(line, along_m)
    distance_m, bearing_deg = distance_bearing(here_lon[:, None], here_lat[:, None], lon_deg, lat_deg)
    east_m = distance_m * np.sin(np.radians(bearing_deg))
    north_m = distance_m * np.cos(np.radians(bearing_deg))
    ahead = slice(_BEARING_POINTS, None)
    behind = slice(None, _BEARING_POINTS + 1)
    tangent_deg = np.degrees(
        np.arctan2(
            east_m[:, ahead].mean(axis=1) - east_m[:, behind].mean(axis=1),
            north_m[:, ahead].mean(axis=1) - north_m[:, behind].mean(axis=1),
        )
    )
    return np.asarray(np.mod(tangent_deg + 90.0, 360.0))


def _in_box(lon_deg: FloatArray, lat_deg: FloatArray, box: tuple[float, float, float, float] | None) -> BoolArray:
    if box is None:
        return np.ones(len(lon_deg), dtype=bool)
    west, south, east, north = box
    east = east if east > west else east + 360.0
    lon = unwrap_lon_deg(lon_deg, (west + east) / 2)
    return np.asarray((lon >= west) & (lon <= east) & (lat_deg >= south) & (lat_deg <= north))


def coast_pieces(coast: Coast, transects: Transects) -> NDArray[np.object_]:
    """Stretch of coast each station stands for.

    Returns
    -------
    (n,) array of shapely lines
        Longitude and latitude, degrees, longitudes without jumps; None away from the coast.
    """
    pieces = np.full(len(transects), None, dtype=object)
    for part in np.unique(transects.coast_part[transects.coast_part > 0]).tolist():
        rows, line = np.flatnonzero(transects.coast_part == part), coast.lines[part - 1]
        start_m = np.maximum(transects.piece_start_m[rows], 0.0)
        stop_m = np.minimum(transects.piece_stop_m[rows], line.length_m)
        first = np.searchsorted(line.along_m, start_m + 1e-6)
        n_inside = np.maximum(np.searchsorted(line.along_m, stop_m - 1e-6) - first, 0)
        # of each stretch its start, the vertices of the coast inside it, its end
        stretch = np.repeat(np.arange(len(rows)), n_inside + 2)
        begins = np.cumsum(n_inside + 2) - (n_inside + 2)
        vertex = first[stretch] + np.arange(len(stretch)) - begins[stretch] - 1
        at_m = line.along_m[np.minimum(vertex, len(line.along_m) - 1)]
        at_m[begins], at_m[begins + n_inside + 1] = start_m, stop_m
        lon_deg, lat_deg = (np.interp(at_m, line.along_m, degrees) for degrees in (line.lon_deg, line.lat_deg))
        pieces[rows] = shapely.linestrings(lon_deg, lat_deg, indices=stretch)
    return pieces


def transects_from_lines(
    lines: NDArray[np.object_], transect_id: IntArray | None, coast: Coast, spacing_m: float
) -> Transects:
    """Take transects drawn or edited by hand, each from the shore seaward.

    Parameters
    ----------
    lines : (n,) array of shapely lines
        Longitude and latitude, degrees. Parts of a multi-part line are one transect, in their order.
    transect_id : (n,) array of int or None
        Identities to keep; repeated ones and those below 1 are numbered anew above the largest.
    coast : Coast
        The coast they stand on.
    spacing_m : float
        Length of coast a transect stands for at most, metres.

    Returns
    -------
    Transects
        The station is the first point of each line; it stands for the coast halfway to its neighbours. Lines that
        begin farther than `spacing_m` from any coast belong to none.

    Raises
    ------
    TransectError
        If there is no line with a length among them.
    """
    drawn = [i for i, line in enumerate(lines) if shapely.get_dimensions(line) == 1 and shapely.length(line) > 0]
    nodes_of = {i: _nodes_of(shapely.get_coordinates(lines[i])) for i in drawn}
    usable = [i for i in drawn if nodes_of[i].shape[1] > 1]  # a line round the globe to its start has no length
    if not usable:
        raise TransectError("the file of transects holds no line with a length; draw each from the shore seaward")
    if len(usable) < len(lines):
        _LOG.warning("%d of the transects drawn have no length and are left out", len(lines) - len(usable))
    nodes = [nodes_of[i] for i in usable]
    n, k = len(usable), max(node.shape[1] for node in nodes)
    padded = np.full((3, n, k), np.nan)
    for row, node in enumerate(nodes):
        padded[:, row, : node.shape[1]] = node
    lon_deg, lat_deg = padded[1, :, 0].copy(), padded[2, :, 0].copy()
    _, bearing_deg = distance_bearing(lon_deg, lat_deg, padded[1, :, 1], padded[2, :, 1])
    part, coast_m = _nearest_on_coast(coast, lon_deg, lat_deg, spacing_m)
    start_m, stop_m = _halfway(part, coast_m, spacing_m)
    return Transects(
        transect_id=_identities(None if transect_id is None else transect_id[usable], n),
        coast_part=part,
        coast_m=coast_m,
        piece_start_m=start_m,
        piece_stop_m=stop_m,
        is_drawn=np.ones(n, dtype=bool),
        lon_deg=lon_deg,
        lat_deg=lat_deg,
        bearing_deg=bearing_deg,
        node_m=padded[0],
        node_lon_deg=padded[1],
        node_lat_deg=padded[2],
    )


def _nearest_on_coast(
    coast: Coast, lon_deg: FloatArray, lat_deg: FloatArray, within_m: float
) -> tuple[IntArray, FloatArray]:
    """Piece of coast each point is nearest to and the distance along it; 0 and NaN where none is within reach."""
    part, coast_m = np.zeros(len(lon_deg), dtype=np.int64), np.full(len(lon_deg), np.nan)
    if not coast.lines:
        return part, coast_m
    number = np.concatenate([np.full(len(line.along_m) - 1, i) for i, line in enumerate(coast.lines, start=1)])
    ends = np.concatenate(
        [np.stack([_legs(a) for a in (c.lon_deg, c.lat_deg, c.along_m)]) for c in coast.lines], axis=1
    )
    squeeze = np.maximum(np.cos(np.radians(lat_deg)), 0.01)
    reach_deg = within_m / _LEAST_DEGREE_M
    tree = shapely.STRtree(shapely.linestrings(ends[:2].transpose(1, 2, 0)))
    for turn_deg in (0.0, 360.0, -360.0):
        lon = lon_deg + turn_deg
        around = shapely.box(
            lon - reach_deg / squeeze, lat_deg - reach_deg, lon + reach_deg / squeeze, lat_deg + reach_deg
        )
        row, leg = tree.query(around)
        # a plane round each point, straight legs in it: exact enough to choose a leg and a place on it
        east = (ends[0, leg] - lon[row, None]) * squeeze[row, None]
        north = ends[1, leg] - lat_deg[row, None]
        step_east, step_north = np.diff(east)[:, 0], np.diff(north)[:, 0]
        share = -(east[:, 0] * step_east + north[:, 0] * step_north) / (step_east**2 + step_north**2)
        share = np.clip(share, 0.0, 1.0)
        on_lon, on_lat = (a[leg, 0] + share * (a[leg, 1] - a[leg, 0]) for a in ends[:2])
        away_m, _ = distance_bearing(lon[row], lat_deg[row], on_lon, on_lat)
        order = np.lexsort((leg, away_m, row))
        order = order[away_m[order] < within_m]
        _, first = np.unique(row[order], return_index=True)
        best = order[first]
        best = best[np.isnan(coast_m[row[best]])]
        part[row[best]] = number[leg[best]]
        coast_m[row[best]] = ends[2, leg[best], 0] + share[best] * np.diff(ends[2, leg[best]])[:, 0]
    return part, coast_m


def _legs(values: FloatArray) -> FloatArray:
    """Values at both ends of each leg of a line, (k - 1, 2)."""
    return np.stack([values[:-1], values[1:]], axis=1)


def _halfway(part: IntArray, coast_m: FloatArray, spacing_m: float) -> tuple[FloatArray, FloatArray]:
    """Stretch of coast of each station: halfway to its neighbours, at most half the spacing each way."""
    start_m, stop_m = coast_m - spacing_m / 2, coast_m + spacing_m / 2
    for number in np.unique(part[part > 0]):
        rows = np.flatnonzero(part == number)
        rows = rows[np.argsort(coast_m[rows], kind="stable")]
        middle_m = (coast_m[rows[1:]] + coast_m[rows[:-1]]) / 2
        start_m[rows[1:]] = np.maximum(start_m[rows[1:]], middle_m)
        stop_m[rows[:-1]] = np.minimum(stop_m[rows[:-1]], middle_m)
    return start_m, stop_m


def _nodes_of(lonlat: FloatArray) -> FloatArray:
    """Nodes (distance, longitude, latitude) along a drawn line, at most `NODE_M` apart on geodesics."""
    lon_deg, lat_deg = unwrap_along(lonlat[:, 0]), lonlat[:, 1]
    leg_m, bearing_deg = distance_bearing(lon_deg[:-1], lat_deg[:-1], lon_deg[1:], lat_deg[1:])
    out = [np.array([[0.0], [lon_deg[0]], [lat_deg[0]]])]
    start_m = 0.0
    for i, leg in enumerate(leg_m):
        if leg <= 0:
            continue
        if leg > NODE_M:
            along_m = np.linspace(0.0, leg, int(np.ceil(leg / NODE_M)) + 1)[1:-1]
            lon, lat = geodesic_nodes(lon_deg[i], lat_deg[i], bearing_deg[i], along_m)
            out.append(np.stack([start_m + along_m, lon[0], lat[0]]))
        out.append(np.array([[start_m + leg], [lon_deg[i + 1]], [lat_deg[i + 1]]]))
        start_m += leg
    return np.concatenate(out, axis=1)


def _identities(given: IntArray | None, n: int) -> IntArray:
    """Identities as given, each once; the rest numbered above the largest."""
    if given is None:
        return np.arange(1, n + 1, dtype=np.int64)
    _, first = np.unique(given, return_index=True)
    keep = np.zeros(n, dtype=bool)
    keep[first] = True
    keep &= given > 0
    out = given.astype(np.int64)
    if not keep.all():
        repeated = [str(number) for number in np.unique(given[~keep & (given > 0)])[:5]]
        _LOG.warning(
            "%d transects without a transect_id of their own were numbered anew%s",
            (~keep).sum(),
            f"; these stood more than once: {', '.join(repeated)}" if repeated else "",
        )
    out[~keep] = max(0, int(given.max(initial=0))) + np.arange(1, (~keep).sum() + 1)
    return out


def crossing_transects(start_lonlat: FloatArray, end_lonlat: FloatArray, coast_part: IntArray) -> BoolArray:
    """Which transects of one coast cross another between their starts and their ends.

    Parameters
    ----------
    start_lonlat, end_lonlat : (n, 2) array of float
        Ends of each transect, degrees, longitudes unwrapped; NaN where it has none. Straight in between: where two
        shelves cross is wanted, not to the metre.
    coast_part : (n,) array of int
        Only transects of the same piece of coast are compared.

    Returns
    -------
    (n,) array of bool
        True for both of a crossing pair.
    """
    crosses = np.zeros(len(start_lonlat), dtype=bool)
    rows = np.flatnonzero(np.isfinite(start_lonlat).all(axis=1) & np.isfinite(end_lonlat).all(axis=1))
    if len(rows) < 2:
        return crosses
    lines = shapely.linestrings(np.stack([start_lonlat[rows], end_lonlat[rows]], axis=1))
    first, second = shapely.STRtree(lines).query(lines, predicate="intersects")
    pair = (first < second) & (coast_part[rows[first]] == coast_part[rows[second]]) & (coast_part[rows[first]] > 0)
    crosses[rows[first[pair]]] = True
    crosses[rows[second[pair]]] = True
    return crosses
