"""Metres on the ellipsoid: distances, bearings, points along geodesics, unwrapped longitudes, projections."""

from functools import cached_property, lru_cache
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray
from pyproj import CRS, Geod, Proj, Transformer
from pyproj.exceptions import CRSError

from shelfmap.errors import GridError

__all__ = [
    "WGS84",
    "LocalPlane",
    "Projection",
    "area_m2",
    "distance_bearing",
    "geodesic_nodes",
    "local_projection",
    "positions_m",
    "unwrap_along",
    "unwrap_lon_deg",
]

FloatArray = NDArray[np.float64]

WGS84: Final = "EPSG:4326"
_GEOD: Final = Geod(ellps="WGS84")


def distance_bearing(
    lon1_deg: ArrayLike, lat1_deg: ArrayLike, lon2_deg: ArrayLike, lat2_deg: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Geodesic distance and compass bearing from the first points to the second.

    Parameters
    ----------
    lon1_deg, lat1_deg, lon2_deg, lat2_deg : array_like of float
        Degrees, broadcast together.

    Returns
    -------
    distance_m, bearing_deg : array of float
        Metres on WGS84; degrees clockwise from north at the first point, 0 to 360. Geodesics after
        Karney (2013, J. Geodesy 87, 43-55), by PROJ.

    Examples
    --------
    >>> distance_m, bearing_deg = distance_bearing(0.0, 0.0, 1.0, 0.0)
    >>> round(float(distance_m), 1), float(bearing_deg)
    (111319.5, 90.0)
    """
    lon1, lat1, lon2, lat2 = (
        np.array(a, dtype=float) for a in np.broadcast_arrays(lon1_deg, lat1_deg, lon2_deg, lat2_deg)
    )
    forward, _, distance_m = _GEOD.inv(lon1, lat1, lon2, lat2)
    return np.asarray(distance_m), np.mod(np.asarray(forward), 360.0)


def geodesic_nodes(
    lon_deg: ArrayLike, lat_deg: ArrayLike, bearing_deg: ArrayLike, distance_m: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Points on geodesics that leave each start at its bearing.

    Parameters
    ----------
    lon_deg, lat_deg, bearing_deg : (n,) array_like of float
        Starts, degrees, and compass bearings, degrees.
    distance_m : (m,) array_like of float
        Distances from the start, metres; negative runs backwards.

    Returns
    -------
    lon_deg, lat_deg : (n, m) array of float
        Degrees; longitudes without jumps along each geodesic, the first within half a turn of its start.

    Examples
    --------
    >>> lon, lat = geodesic_nodes([179.9], [0.0], [90.0], [0.0, 111319.5])
    >>> lon.round(2)
    array([[179.9, 180.9]])
    """
    lon = np.atleast_1d(np.asarray(lon_deg, dtype=float))[:, None]
    lat = np.atleast_1d(np.asarray(lat_deg, dtype=float))[:, None]
    bearing = np.atleast_1d(np.asarray(bearing_deg, dtype=float))[:, None]
    distance = np.atleast_1d(np.asarray(distance_m, dtype=float))[None, :]
    lon_full, lat_full, bearing_full, distance_full = (
        np.array(a) for a in np.broadcast_arrays(lon, lat, bearing, distance)
    )
    end_lon, end_lat, _ = _GEOD.fwd(lon_full, lat_full, bearing_full, distance_full)
    end_lon = unwrap_along(end_lon)
    return end_lon - 360.0 * np.round((end_lon[:, :1] - lon) / 360.0), np.asarray(end_lat)


def unwrap_lon_deg(lon_deg: ArrayLike, middle_deg: ArrayLike) -> FloatArray:
    """Longitudes moved by whole turns to within 180 degrees of a middle one.

    Examples
    --------
    >>> unwrap_lon_deg([-179.0, 179.0], 180.0)
    array([181., 179.])
    """
    lon = np.asarray(lon_deg, dtype=float)
    middle = np.asarray(middle_deg, dtype=float)
    # whole turns only, so that a longitude that needs none comes back bit for bit
    turns = np.floor((lon - middle + 180.0) / 360.0)
    return np.asarray(lon - 360.0 * turns)


def unwrap_along(lon_deg: ArrayLike) -> FloatArray:
    """Longitudes along lines, moved by whole turns so that no two neighbours differ by more than half a turn.

    Parameters
    ----------
    lon_deg : (..., m) array_like of float
        Degrees; neighbours along the last axis. NaN is left out of account.

    Returns
    -------
    (..., m) array of float
        Degrees; the first of each line stays. Whole turns only, so that one that needs none comes back bit for bit.

    Examples
    --------
    >>> unwrap_along([178.0, -178.0, -175.0])
    array([178., 182., 185.])
    """
    lon = np.array(lon_deg, dtype=float)
    turns = np.nan_to_num(np.round(np.diff(lon, axis=-1) / 360.0))
    lon[..., 1:] -= 360.0 * np.cumsum(turns, axis=-1)
    return lon


def area_m2(lon_deg: ArrayLike, lat_deg: ArrayLike) -> float:
    """Geodesic area inside a ring, square metres, never negative.

    Examples
    --------
    >>> round(area_m2([0, 1, 1, 0], [0, 0, 1, 1]) / 1e6)
    12309
    """
    area, _ = _GEOD.polygon_area_perimeter(np.asarray(lon_deg, dtype=float), np.asarray(lat_deg, dtype=float))
    return abs(float(area))


def positions_m(lon_deg: ArrayLike, lat_deg: ArrayLike) -> FloatArray:
    """Places of points of the ellipsoid in space: distances that know no seam and no pole.

    Parameters
    ----------
    lon_deg, lat_deg : (...) array_like of float
        Degrees.

    Returns
    -------
    (..., 3) array of float
        Metres from the Earth's centre towards longitude 0, longitude 90 on the equator, and the north pole.

    Examples
    --------
    >>> positions_m([0.0, 90.0], [0.0, 0.0]).round(1).tolist()
    [[6378137.0, 0.0, 0.0], [0.0, 6378137.0, 0.0]]
    """
    lon, lat = np.radians(np.asarray(lon_deg, dtype=float)), np.radians(np.asarray(lat_deg, dtype=float))
    across_m = _GEOD.a / np.sqrt(1.0 - _GEOD.es * np.sin(lat) ** 2)
    return np.stack(
        [
            across_m * np.cos(lat) * np.cos(lon),
            across_m * np.cos(lat) * np.sin(lon),
            across_m * (1.0 - _GEOD.es) * np.sin(lat),
        ],
        axis=-1,
    )


class Projection:
    """A coordinate system and its way to longitude and latitude on WGS84, and back.

    Parameters
    ----------
    crs : str
        Anything PROJ reads: ``EPSG:n``, WKT, a PROJ string.

    Raises
    ------
    GridError
        If PROJ does not know the system.

    Examples
    --------
    >>> utm = Projection("EPSG:32631")
    >>> x_m, y_m = utm.from_lonlat(3.0, 0.0)
    >>> round(float(x_m)), abs(round(float(y_m)))
    (500000, 0)
    """

    def __init__(self, crs: str) -> None:
        try:
            self.crs = CRS.from_user_input(crs)
        except CRSError as error:
            raise GridError(f"coordinate system {crs!r} is unknown to PROJ; give one as EPSG:n or WKT") from error

    @property
    def is_geographic(self) -> bool:
        """True where coordinates are longitude and latitude in degrees."""
        return bool(self.crs.is_geographic)

    @property
    def name(self) -> str:
        """Name for people, with the EPSG code where there is one."""
        epsg = self.crs.to_epsg()
        return f"{self.crs.name} (EPSG:{epsg})" if epsg else str(self.crs.name)

    @property
    def metres_per_unit(self) -> float:
        """Length of one unit of a projected system, metres (1 for degrees: not a length)."""
        return 1.0 if self.is_geographic else float(self.crs.axis_info[0].unit_conversion_factor)

    @cached_property
    def _to_lonlat(self) -> Transformer:
        return Transformer.from_crs(self.crs, WGS84, always_xy=True)

    @cached_property
    def _from_lonlat(self) -> Transformer:
        return Transformer.from_crs(WGS84, self.crs, always_xy=True)

    def to_lonlat(self, x: ArrayLike, y: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Longitude and latitude, degrees, of points in this system; geographic ones come back as they are."""
        if self.is_geographic:
            return np.array(x, dtype=float), np.array(y, dtype=float)
        lon, lat = self._to_lonlat.transform(np.asarray(x, dtype=float), np.asarray(y, dtype=float))
        return np.asarray(lon), np.asarray(lat)

    def from_lonlat(self, lon_deg: ArrayLike, lat_deg: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Points in this system; a geographic system takes them as they are, unwrapped longitudes included."""
        if self.is_geographic:
            return np.array(lon_deg, dtype=float), np.array(lat_deg, dtype=float)
        x, y = self._from_lonlat.transform(np.asarray(lon_deg, dtype=float), np.asarray(lat_deg, dtype=float))
        return np.asarray(x), np.asarray(y)


class LocalPlane:
    """Azimuthal equidistant plane in metres round one point, for work within some hundred km of it.

    Parameters
    ----------
    lon_deg, lat_deg : float
        The point, degrees.

    Notes
    -----
    Made by PROJ without its search for the best way between two systems, which takes 7 ms each time; bit for bit the
    same values.
    """

    def __init__(self, lon_deg: float, lat_deg: float) -> None:
        self._proj = Proj(f"+proj=aeqd +lat_0={lat_deg:.6f} +lon_0={lon_deg:.6f} +ellps=WGS84 +units=m +no_defs")

    def from_lonlat(self, lon_deg: ArrayLike, lat_deg: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Metres east and north of the point."""
        x_m, y_m = self._proj(np.array(lon_deg, dtype=float), np.array(lat_deg, dtype=float))
        return np.asarray(x_m), np.asarray(y_m)

    def to_lonlat(self, x_m: ArrayLike, y_m: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Longitude and latitude, degrees, of metres east and north of the point."""
        lon_deg, lat_deg = self._proj(np.array(x_m, dtype=float), np.array(y_m, dtype=float), inverse=True)
        return np.asarray(lon_deg), np.asarray(lat_deg)


@lru_cache(maxsize=64)
def local_projection(lon_deg: float, lat_deg: float) -> LocalPlane:
    """`LocalPlane` round a point, made once."""
    return LocalPlane(lon_deg, lat_deg)
