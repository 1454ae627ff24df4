"""Grids whose answers are known in closed form: straight and round coasts over piecewise-linear shelves."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from shelfmap.errors import GridError
from shelfmap.geodesy import WGS84, Projection, distance_bearing

__all__ = ["ShelfProfile", "SyntheticGrid", "round_coast", "shelf_profile", "step_profile", "straight_coast"]

FloatArray = NDArray[np.float64]

EARTH_RADIUS_M: Final = 6_371_008.8  # mean radius of WGS84 (2a + b)/3
LAND_SLOPE: Final = 1 / 200  # where the profile starts with deep water at the coast
LAND_TOP_M: Final = 1000.0


@dataclass(frozen=True, slots=True, kw_only=True)
class SyntheticGrid:
    """A made-up elevation grid.

    Parameters
    ----------
    elevation_m : (n_rows, n_cols) array of float32
        Metres, positive up, first row in the south; NaN = missing. Read-only.
    x0, y0 : float
        Centre of the south-west cell, units of `crs`.
    dx, dy : float
        Cell sides, units of `crs`, > 0.
    crs : str
        Coordinate system, ``EPSG:n`` or WKT.
    description : str
        What it shows, in one sentence.
    """

    elevation_m: NDArray[np.float32]
    x0: float
    y0: float
    dx: float
    dy: float
    crs: str
    description: str

    def __post_init__(self) -> None:
        self.elevation_m.setflags(write=False)

    @property
    def x(self) -> FloatArray:
        """(n_cols,) cell centres, west to east, units of `crs`."""
        return np.asarray(self.x0 + self.dx * np.arange(self.elevation_m.shape[1]), dtype=float)

    @property
    def y(self) -> FloatArray:
        """(n_rows,) cell centres, south to north, units of `crs`."""
        return np.asarray(self.y0 + self.dy * np.arange(self.elevation_m.shape[0]), dtype=float)


@dataclass(frozen=True, slots=True, kw_only=True)
class ShelfProfile:
    """Depth against distance from the coast, linear between nodes.

    Parameters
    ----------
    distance_m : (n,) array of float
        Nodes, metres seaward, rising from 0.
    depth_m : (n,) array of float
        Depth there, metres, positive down, >= 0.

    Raises
    ------
    GridError
        If the nodes are fewer than two, do not rise from 0, or lie above the water.
    """

    distance_m: FloatArray
    depth_m: FloatArray

    def __post_init__(self) -> None:
        if not self.distance_m.shape == self.depth_m.shape or self.distance_m.ndim != 1 or self.distance_m.size < 2:
            raise GridError(
                f"profile of {self.distance_m.shape} distances and {self.depth_m.shape} depths: give one depth for "
                "each of two or more distances"
            )
        if self.distance_m[0] != 0.0 or not (np.diff(self.distance_m) > 0.0).all():
            raise GridError(f"profile distances {self.distance_m} must start at 0 and rise; mend their order")
        if not (self.depth_m >= 0.0).all():
            raise GridError(f"profile depths {self.depth_m} must be 0 or more; depth is positive down")
        self.distance_m.setflags(write=False)
        self.depth_m.setflags(write=False)

    def depth_at(self, distance_m: ArrayLike) -> FloatArray:
        """Depth at any distance from the coast, metres, positive down, negative on land.

        Land goes on at the slope of the first stretch of sea bed, so that interpolation between cells finds the
        coast exactly; it rises at 1:200 where that stretch is flat or starts below water (the water's edge then
        stands within one cell of the coast). Land ends in a plain of 1000 m; the sea bed goes on level beyond
        the last node.

        Examples
        --------
        >>> shelf_profile(100e3, 200.0, 0.05, 4000.0).depth_at([-1e3, 50e3, 102e3, 1e6]).tolist()
        [-2.0, 100.0, 300.0, 4000.0]
        """
        distance = np.asarray(distance_m, dtype=float)
        first = self.depth_m[1] / self.distance_m[1] if self.depth_m[0] == 0.0 else 0.0
        land_m = np.maximum(distance * (first or LAND_SLOPE), -LAND_TOP_M)
        return np.where(distance < 0.0, land_m, np.interp(distance, self.distance_m, self.depth_m))


def shelf_profile(
    width_m: float, break_depth_m: float, slope_beyond: float, floor_m: float, coast_depth_m: float = 0.0
) -> ShelfProfile:
    """Shelf that deepens evenly to its break, then an even slope down to a level floor.

    Parameters
    ----------
    width_m, break_depth_m : float
        Distance of the break from the coast and its depth, metres.
    slope_beyond : float
        Gradient of the slope beyond (rise over run), > 0.
    floor_m : float
        Depth of the deep sea, metres, > `break_depth_m`.
    coast_depth_m : float
        Depth at the coast, metres; above 0 the coast is a wall in the water.

    Raises
    ------
    GridError
        If a length or slope is not above 0 or the floor is not below the break.

    Examples
    --------
    >>> shelf_profile(65e3, 130.0, 1 / 15, 4130.0).distance_m
    array([     0.,  65000., 125000.])
    """
    if not (width_m > 0 and slope_beyond > 0 and floor_m > break_depth_m):
        raise GridError(
            f"width_m = {width_m}, slope_beyond = {slope_beyond} must be above 0 and floor_m = {floor_m} below "
            f"break_depth_m = {break_depth_m}; mend them"
        )
    foot_m = width_m + (floor_m - break_depth_m) / slope_beyond
    return ShelfProfile(
        distance_m=np.array([0.0, width_m, foot_m]), depth_m=np.array([coast_depth_m, break_depth_m, floor_m])
    )


def step_profile(width_m: float, shelf_depth_m: float, floor_m: float) -> ShelfProfile:
    """Level shelf with a wall at the coast and a sheer drop to a level floor at `width_m`.

    Raises
    ------
    GridError
        If `width_m` is not above 0 or a depth is negative.

    Examples
    --------
    >>> step_profile(350e3, 100.0, 4000.0).depth_at([0.0, 350e3, 350e3 + 1e-3])
    array([ 100.,  100., 4000.])
    """
    return ShelfProfile(
        distance_m=np.array([0.0, width_m, np.nextafter(width_m, np.inf)]),
        depth_m=np.array([shelf_depth_m, shelf_depth_m, floor_m]),
    )


def straight_coast(
    bearing_deg: float,
    lat_deg: float,
    profile: ShelfProfile,
    *,
    lon_deg: float = 0.0,
    crs: str = WGS84,
    cell: float = 0.05,
    shape: tuple[int, int] = (121, 161),
) -> SyntheticGrid:
    """Coast along a geodesic through the middle of the grid, the sea on one side of it.

    Parameters
    ----------
    bearing_deg : float
        Seaward compass bearing at the grid's middle, degrees; exact there.
    lat_deg, lon_deg : float
        Middle of the grid, degrees.
    profile : ShelfProfile
        Depth against distance from the coast.
    crs : str
        Coordinate system of the grid, geographic or projected.
    cell : float
        Cell side, units of `crs`.
    shape : (n_rows, n_cols)
        Number of cells; odd numbers put a cell centre on the coast.

    Returns
    -------
    SyntheticGrid
        The depth of a cell is that of the profile at the cell's distance from the coast.

    Notes
    -----
    With r and a the geodesic distance and azimuth from the middle, the distance from the coast is the cross-track
    distance ``R asin(sin(r/R) cos(a - bearing))`` (spherical trigonometry, R the Earth's mean radius). On the
    ellipsoid it differs from the geodesic distance by at most 0.04 m up to 100 km from the middle along the coast
    and off it, 0.3 m up to 200 km and 5 m up to 500 km, for latitudes up to 75 degrees (measured).

    Examples
    --------
    >>> grid = straight_coast(270.0, 45.0, shelf_profile(100e3, 200.0, 0.05, 4000.0), crs="EPSG:32631", lon_deg=3.0,
    ...                       cell=5000.0, shape=(3, 5))
    >>> grid.elevation_m[1].round(1)
    array([-20., -10.,   0.,  10.,  20.], dtype=float32)
    """
    x0, y0, distance_m, azimuth_deg = _polar(lon_deg, lat_deg, crs, cell, shape)
    toward_sea = np.cos(np.radians(azimuth_deg - bearing_deg))
    seaward_m = EARTH_RADIUS_M * np.arcsin(np.sin(distance_m / EARTH_RADIUS_M) * toward_sea)
    return SyntheticGrid(
        elevation_m=(-profile.depth_at(seaward_m)).astype(np.float32),
        x0=x0,
        y0=y0,
        dx=cell,
        dy=cell,
        crs=crs,
        description=f"Straight coast, sea toward {bearing_deg:g} degrees at {lat_deg:g} N {lon_deg:g} E",
    )


def round_coast(
    radius_m: float,
    lat_deg: float,
    profile: ShelfProfile,
    *,
    inside: str,
    lon_deg: float = 0.0,
    crs: str = WGS84,
    cell: float = 0.05,
    shape: tuple[int, int] = (121, 161),
) -> SyntheticGrid:
    """Circular island in the sea, or circular basin in the land, in the middle of the grid.

    Parameters
    ----------
    radius_m : float
        Geodesic radius of the shoreline, metres, > 0.
    lat_deg, lon_deg : float
        Middle of the grid, degrees.
    profile : ShelfProfile
        Depth against distance from the shoreline.
    inside : {"land", "sea"}
        What lies within the circle.
    crs, cell, shape
        As in `straight_coast`.

    Returns
    -------
    SyntheticGrid
        The depth of a cell is that of the profile at its geodesic distance from the shoreline.

    Raises
    ------
    GridError
        If `inside` is another word or `radius_m` is not above 0.

    Examples
    --------
    >>> island = round_coast(50e3, 60.0, shelf_profile(20e3, 100.0, 0.05, 1000.0), inside="land")
    >>> float(island.elevation_m[60, 80]), float(island.elevation_m[0, 0])
    (250.0, -1000.0)
    """
    if inside not in ("land", "sea") or not radius_m > 0:
        raise GridError(f"inside = {inside!r} must be 'land' or 'sea' and radius_m = {radius_m} above 0; mend them")
    x0, y0, distance_m, _ = _polar(lon_deg, lat_deg, crs, cell, shape)
    seaward_m = distance_m - radius_m if inside == "land" else radius_m - distance_m
    return SyntheticGrid(
        elevation_m=(-profile.depth_at(seaward_m)).astype(np.float32),
        x0=x0,
        y0=y0,
        dx=cell,
        dy=cell,
        crs=crs,
        description=f"Circle of {inside}, radius {radius_m / 1e3:g} km, at {lat_deg:g} N {lon_deg:g} E",
    )


def _polar(
    lon_deg: float, lat_deg: float, crs: str, cell: float, shape: Sequence[int]
) -> tuple[float, float, FloatArray, FloatArray]:
    """South-west cell centre of a grid round a point, and geodesic distance and azimuth of its cells from it."""
    projection = Projection(crs)
    middle_x, middle_y = projection.from_lonlat(lon_deg, lat_deg)
    n_rows, n_cols = shape
    x0 = float(middle_x) - cell * (n_cols - 1) / 2
    y0 = float(middle_y) - cell * (n_rows - 1) / 2
    lon, lat = projection.to_lonlat(*np.meshgrid(x0 + cell * np.arange(n_cols), y0 + cell * np.arange(n_rows)))
    distance_m, azimuth_deg = distance_bearing(lon_deg, lat_deg, lon, lat)
    return x0, y0, distance_m, azimuth_deg
