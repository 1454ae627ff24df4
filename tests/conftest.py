"""Fixtures shared by all tests, and the versions that results hang on."""

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pyproj
import pytest
import rasterio

from shelfmap.rasters import write_geotiff
from shelfmap.synthetic import SyntheticGrid


def pytest_report_header() -> str:
    return (
        f"numpy {np.__version__}, rasterio {rasterio.__version__} with GDAL {rasterio.__gdal_version__}, "
        f"pyproj {pyproj.__version__} with PROJ {pyproj.proj_version_str}"
    )


@pytest.fixture
def repository() -> Path:
    """Top folder of the repository."""
    return Path(__file__).resolve().parent.parent


@pytest.fixture
def write_grid(tmp_path: Path) -> Callable[[SyntheticGrid], Path]:
    """Write synthetic grids as float32 GeoTIFFs, a new name each."""
    written: list[Path] = []

    def write(grid: SyntheticGrid) -> Path:
        path = write_geotiff(
            tmp_path / f"grid{len(written)}.tif",
            grid.elevation_m,
            x0=grid.x0,
            y0=grid.y0,
            dx=grid.dx,
            dy=grid.dy,
            crs=grid.crs,
            description="elevation, positive up",
        )
        written.append(path)
        return path

    return write
