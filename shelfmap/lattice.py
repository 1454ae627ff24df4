"""Regular lattices of cells on a map: where cells lie, which cell lies where, how large they are on the ground.

An index (col, row) is a float that is 0 at the centre of the south-west cell.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from shelfmap.geodesy import Projection, distance_bearing, unwrap_lon_deg
from shelfmap.rasterfile import projection_of

__all__ = ["Lattice", "cells_round"]

FloatArray = NDArray[np.float64]

# The round of the globe may miss whole cells by this much of one: steps are stored in short decimals.
_CLOSING_CELLS = 0.1


@dataclass(frozen=True, slots=True, kw_only=True)
class Lattice:
    """Cells of equal sides on a map.

    Parameters
    ----------
    crs_wkt : str
        Coordinate system.
    x0, y0 : float
        Centre of the south-west cell, grid units.
    dx, dy : float
        Cell sides, grid units, > 0.
    n_rows, n_cols : int
        Cells, without a last column that repeats the first 360 degrees further on.
    wraps : bool
        True where the columns go once round the globe.
    """

    crs_wkt: str
    x0: float
    y0: float
    dx: float
    dy: float
    n_rows: int
    n_cols: int
    wraps: bool

    @property
    def is_geographic(self) -> bool:
        """True where coordinates are degrees."""
        return self.projection.is_geographic

    @property
    def projection(self) -> Projection:
        """Way between the grid's coordinates and longitude, latitude."""
        return projection_of(self.crs_wkt)

    @property
    def step_x_m(self) -> float:
        """Length on the ground of a cell's west-east side in the middle of the grid, metres."""
        return self._step_m(1.0, 0.0)

    @property
    def step_y_m(self) -> float:
        """Length on the ground of a cell's south-north side in the middle of the grid, metres."""
        return self._step_m(0.0, 1.0)

    @property
    def step_m(self) -> float:
        """The smaller of the two cell sides in the middle of the grid, metres."""
        return min(self.step_x_m, self.step_y_m)

    def _step_m(self, cols: float, rows: float) -> float:
        col, row = (self.n_cols - 1) / 2, (self.n_rows - 1) / 2
        half = np.array([-0.5, 0.5])
        lon_deg, lat_deg = self.lonlat_of(col + half * cols, row + half * rows)
        distance_m, _ = distance_bearing(lon_deg[0], lat_deg[0], lon_deg[1], lat_deg[1])
        return float(distance_m)

    @property
    def box_deg(self) -> tuple[float, float, float, float]:
        """West, south, east, north of the cells' outer edges, degrees; east above west, past 180 where need be."""
        across = np.linspace(-0.5, self.n_cols - 0.5, 65)
        along = np.linspace(-0.5, self.n_rows - 0.5, 65)
        col = np.concatenate([across, across, np.full(65, -0.5), np.full(65, self.n_cols - 0.5)])
        row = np.concatenate([np.full(65, -0.5), np.full(65, self.n_rows - 0.5), along, along])
        lon, lat = self.lonlat_of(col, row)
        if not self.is_geographic:
            middle_lon, _ = self.lonlat_of((self.n_cols - 1) / 2, (self.n_rows - 1) / 2)
            on_earth = np.isfinite(lon) & np.isfinite(lat)
            lon, lat = unwrap_lon_deg(lon[on_earth], middle_lon), lat[on_earth]
        west, south, east, north = float(lon.min()), float(lat.min()), float(lon.max()), float(lat.max())
        for pole in (-90.0, 90.0):
            if not self.is_geographic and self._holds(0.0, pole):
                west, east, south, north = -180.0, 180.0, min(south, pole), max(north, pole)
        return west, max(south, -90.0), east, min(north, 90.0)

    def _holds(self, lon_deg: float, lat_deg: float) -> bool:
        col, row = self.index_of(lon_deg, lat_deg)
        return bool(-0.5 <= col <= self.n_cols - 0.5 and -0.5 <= row <= self.n_rows - 0.5)

    def index_of(self, lon_deg: ArrayLike, lat_deg: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Index (col, row) of points; 0 is the centre of the west column, of the south row.

        On a geographic grid longitudes are first turned into its range: from its first column on where it goes
        round the globe, else within 180 degrees of its middle.
        """
        x, y = self.projection.from_lonlat(lon_deg, lat_deg)
        if self.is_geographic:
            middle_deg = self.x0 + (180.0 if self.wraps else (self.n_cols - 1) / 2 * self.dx)
            x = unwrap_lon_deg(x, middle_deg)
        return (x - self.x0) / self.dx, (y - self.y0) / self.dy

    def lonlat_of(self, col: ArrayLike, row: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Longitude and latitude, degrees, of indices; on a geographic grid in the grid's own range."""
        x = self.x0 + np.asarray(col, dtype=float) * self.dx
        y = self.y0 + np.asarray(row, dtype=float) * self.dy
        return self.projection.to_lonlat(x, y)


def cells_round(lattice_dx: float, *, is_geographic: bool) -> int | None:
    """Whole cells of a width in degrees that go round the globe; None where no whole number does, or on a flat map.

    Examples
    --------
    >>> cells_round(3.3333333, is_geographic=True), cells_round(0.7, is_geographic=True)
    (108, None)
    """
    cells = 360.0 / lattice_dx
    return round(cells) if is_geographic and abs(cells - round(cells)) < _CLOSING_CELLS else None
