"""Lines and points with unwrapped longitudes, brought back to -180..180 and split where they cross 180 degrees."""

import numpy as np
import shapely
from numpy.typing import NDArray

from shelfmap.errors import LayerError
from shelfmap.geodesy import unwrap_lon_deg

__all__ = ["split_antimeridian"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
ObjectArray = NDArray[np.object_]


def split_antimeridian(geometry: ObjectArray) -> ObjectArray:
    """Bring lines and points to longitudes from -180 to 180, cutting lines where they cross the 180 meridian.

    Parameters
    ----------
    geometry : (n,) array of shapely points, linestrings or multilinestrings
        Longitude and latitude, degrees; longitudes unwrapped along each line, any number of turns. None and empty
        ones pass.

    Returns
    -------
    (n,) array of shapely geometry
        Untouched ones are the same objects. A line that crosses becomes a multilinestring, each part within -180
        to 180; the cut lies on the great ellipse through the two neighbours, so that the length stays.

    Raises
    ------
    LayerError
        If a line jumps more than 180 degrees of longitude between neighbours: its longitudes are not unwrapped.

    Notes
    -----
    On a great ellipse ``tan lat`` is a linear mix of ``sin`` and ``cos`` of longitude, on any ellipsoid of revolution:
    ``tan lat sin(a + b) = tan lat_0 sin b + tan lat_1 sin a``, a and b the steps in longitude to the cut and beyond.

    Examples
    --------
    >>> line = shapely.LineString([(170, 0), (190, 0)])
    >>> print(split_antimeridian(np.array([line]))[0])
    MULTILINESTRING ((170 0, 180 0), (-180 0, -170 0))
    """
    out = np.array(geometry, dtype=object)
    bounds = shapely.bounds(out)
    outside = (bounds[:, 0] < -180.0) | (bounds[:, 2] > 180.0)  # False for None and empty: their bounds are NaN
    wide = bounds[:, 2] - bounds[:, 0] > 180.0
    is_point = shapely.get_type_id(out) == shapely.GeometryType.POINT
    _refuse_jumps(out[wide])
    if np.any(outside & is_point):
        out[outside & is_point] = shapely.transform(out[outside & is_point], _wrap)
    if np.any(outside & ~is_point):
        out[outside & ~is_point] = _split_lines(out[outside & ~is_point])
    return out


def _wrap(lonlat_deg: FloatArray) -> FloatArray:
    return np.column_stack([unwrap_lon_deg(lonlat_deg[:, 0], 0.0), lonlat_deg[:, 1]])


def _refuse_jumps(lines: ObjectArray) -> None:
    lonlat, row = shapely.get_coordinates(shapely.get_parts(lines), return_index=True)
    jump_deg = np.where(row[1:] == row[:-1], np.abs(np.diff(lonlat[:, 0])), 0.0)
    if jump_deg.size and jump_deg.max() > 180.0:
        raise LayerError(
            f"a line jumps {jump_deg.max():.1f} degrees of longitude between two points; unwrap its longitudes first, "
            "so that neighbours differ by at most 180"
        )


def _split_lines(lines: ObjectArray) -> ObjectArray:
    """Cut lines, none of them empty, at every 180 + 360 k and shift each piece by whole turns."""
    parts, owner = shapely.get_parts(lines, return_index=True)
    lonlat, row = _with_cuts(*shapely.get_coordinates(parts, return_index=True))

    start = np.flatnonzero(row[1:] == row[:-1])  # first vertex of each segment
    turn = np.floor(((lonlat[start, 0] + lonlat[start + 1, 0]) / 2 + 180.0) / 360.0)
    first = np.ones(start.size, dtype=bool)  # a piece starts with a new line or in a new turn
    first[1:] = (row[start[1:]] != row[start[:-1]]) | (turn[1:] != turn[:-1])
    last = np.append(first[1:], True)
    piece = np.cumsum(first) - 1

    vertex = np.concatenate([start, start[last] + 1])
    vertex_piece = np.concatenate([piece, piece[last]])
    order = np.argsort(vertex_piece, kind="stable")
    vertex, vertex_piece = vertex[order], vertex_piece[order]
    lon_deg = lonlat[vertex, 0] - 360.0 * turn[first][vertex_piece]
    pieces = shapely.linestrings(np.column_stack([lon_deg, lonlat[vertex, 1]]), indices=vertex_piece)
    return _gather(pieces, owner[row[start[first]]])


def _with_cuts(lonlat_deg: FloatArray, row: IntArray) -> tuple[FloatArray, IntArray]:
    """Vertices with one more wherever a segment crosses a meridian 180 + 360 k."""
    lon = lonlat_deg[:, 0]
    low, high = np.minimum(lon[:-1], lon[1:]), np.maximum(lon[:-1], lon[1:])
    cut = 180.0 + 360.0 * np.ceil((low - 180.0) / 360.0)
    at = np.flatnonzero((row[1:] == row[:-1]) & (low < cut) & (cut < high))
    before, beyond = np.radians(np.abs(cut[at] - lon[at])), np.radians(np.abs(lon[at + 1] - cut[at]))
    tan_lat = np.tan(np.radians(lonlat_deg[:, 1]))
    mix = tan_lat[at] * np.sin(beyond) + tan_lat[at + 1] * np.sin(before)
    lat_deg = np.degrees(np.arctan2(mix, np.sin(before + beyond)))
    cuts = np.column_stack([cut[at], lat_deg])
    return np.insert(lonlat_deg, at + 1, cuts, axis=0), np.insert(row, at + 1, row[at])


def _gather(pieces: ObjectArray, owner: IntArray) -> ObjectArray:
    """One line or multiline for each owner 0..n-1, from pieces in order of owner."""
    out: ObjectArray = shapely.multilinestrings(pieces, indices=owner)
    _, first, count = np.unique(owner, return_index=True, return_counts=True)
    out[count == 1] = pieces[first[count == 1]]
    return out
