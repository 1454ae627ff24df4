"""Scenes drawn in kilometres, the stages run on them, and slow twins of the geometry."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from pyproj import Geod

from shelfmap.coast import Coast, trace_coast
from shelfmap.geodesy import Projection
from shelfmap.grid import GridSource, open_grid
from shelfmap.profiles import Profiles, sample_profiles, step_of
from shelfmap.settings import CoastSettings, GridSettings, TransectSettings
from shelfmap.synthetic import SyntheticGrid
from shelfmap.transects import Transects, lay_transects

GEOD = Geod(ellps="WGS84")
EMPTY = np.zeros(0, dtype=object)


@dataclass(frozen=True)
class Laid:
    """Everything up to the profiles of one grid."""

    source: GridSource
    coast: Coast
    transects: Transects
    profiles: Profiles


def open_up(path: Path, **settings) -> GridSource:
    return open_grid(GridSettings(path=path, positive="up", **settings))


def lay(path, coast_settings=None, *, spacing_km=20.0, length_km=200.0, land=None, **grid_settings) -> Laid:
    """Coast, transects and profiles of a grid file."""
    coast_settings = coast_settings or CoastSettings(smallest_sea_km2=500.0)
    settings = TransectSettings(spacing_km=spacing_km, length_km=length_km)
    source = open_up(path, **grid_settings)
    coast = trace_coast(source, coast_settings, land)
    transects = lay_transects(coast, settings, coast_settings)
    profiles = sample_profiles(
        source, transects, step_of(source, settings), seek_m=coast_settings.generalise_m / 2, islets=coast.islets
    )
    return Laid(source, coast, transects, profiles)


def scene(elevation, *, n=121, cell_m=2000.0, crs="EPSG:32631", lat_deg=50.0, lon_deg=3.0) -> SyntheticGrid:
    """Square grid whose elevation is a function of kilometres east and north of its middle."""
    off_km = cell_m / 1e3 * (np.arange(n) - n // 2)
    middle_x, middle_y = Projection(crs).from_lonlat(lon_deg, lat_deg)
    return SyntheticGrid(
        elevation_m=np.asarray(elevation(*np.meshgrid(off_km, off_km)), dtype=np.float32),
        x0=float(middle_x) - cell_m * (n // 2),
        y0=float(middle_y) - cell_m * (n // 2),
        dx=cell_m,
        dy=cell_m,
        crs=crs,
        description="scene",
    )


def scene_km(source: GridSource, lon_deg, lat_deg) -> tuple[np.ndarray, np.ndarray]:
    """Kilometres east and north of the middle of a scene."""
    col, row = source.index_of(lon_deg, lat_deg)
    return (col - source.n_cols // 2) * source.dx / 1e3, (row - source.n_rows // 2) * source.dy / 1e3


def angle_between(a_deg, b_deg):
    return np.abs((np.asarray(a_deg) - b_deg + 180.0) % 360.0 - 180.0)


def slow_depth(elevation_m, col, row) -> float:
    """Depth by the textbook bilinear formula, missing cells left out of the mean; NaN outside."""
    i, j = int(np.floor(row)), int(np.floor(col))
    n_rows, n_cols = elevation_m.shape
    if not (0 <= i < n_rows - 1 and 0 <= j < n_cols - 1):
        return np.nan
    up, right = row - i, col - j
    weights = np.array([[(1 - up) * (1 - right), (1 - up) * right], [up * (1 - right), up * right]])
    depth = -elevation_m[i : i + 2, j : j + 2].astype(float)
    known = ~np.isnan(depth)
    if weights[known].sum() < 0.5:
        return np.nan
    return float((weights[known] * depth[known]).sum() / weights[known].sum())
