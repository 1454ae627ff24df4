"""Files to read and slow twins to compare with, for the tests of grids."""

import math
from pathlib import Path

import numpy as np
import rasterio
from rasterio.transform import Affine
from scipy.io import netcdf_file

DATA = Path(__file__).parent / "data"


def write_tif(
    path, values, *, x0=0.0, y0=0.0, dx=1.0, dy=1.0, crs="EPSG:4326", south_up=False, east_first=False, **more
):
    """GeoTIFF of values in rows from the south and columns from the west; x0, y0 is the south-west centre."""
    values = np.asarray(values)
    n_rows, n_cols = values.shape
    tags, mask = more.pop("tags", {}), more.pop("mask", None)
    scale, offset = more.pop("scale", 1.0), more.pop("offset", 0.0)
    unit, description = more.pop("unit", None), more.pop("description", None)
    left, right, low, high = x0 - dx / 2, x0 + (n_cols - 0.5) * dx, y0 - dy / 2, y0 + (n_rows - 0.5) * dy
    transform = more.pop("transform", None) or Affine(
        -dx if east_first else dx,
        0,
        right if east_first else left,
        0,
        dy if south_up else -dy,
        low if south_up else high,
    )
    order = slice(None, None, 1 if south_up else -1), slice(None, None, -1 if east_first else 1)
    profile = {"driver": "GTiff", "height": n_rows, "width": n_cols, "count": 1, "dtype": values.dtype, **more}
    with (
        rasterio.Env(GDAL_TIFF_INTERNAL_MASK=True),
        rasterio.open(path, "w", crs=crs, transform=transform, **profile) as out,
    ):
        for band in range(1, profile["count"] + 1):
            out.write(values[order], band)
        out.update_tags(**tags)
        out.scales, out.offsets = [scale] * profile["count"], [offset] * profile["count"]
        if unit:
            out.units = [unit]
        if description:
            out.descriptions = [description]
        if mask is not None:
            out.write_mask(mask[order])
    return path


def write_nc(path, values, lon, lat, *, names=("elevation",), axes_said=True, mapping=False, **attributes):
    """Write a classic netCDF of one or several variables on longitude and latitude."""
    kind = {"i2": "h", "f4": "f", "f8": "d"}[np.asarray(values).dtype.str[1:]]
    with netcdf_file(path, "w") as out:
        for name, axis, word in (("lat", lat, "north"), ("lon", lon, "east")):
            out.createDimension(name, len(axis))
            variable = out.createVariable(name, "d", (name,))
            variable[:] = axis
            if axes_said:
                variable.units = f"degrees_{word}"
        if mapping:
            out.createVariable("crs", "i", ()).grid_mapping_name = "latitude_longitude"
            attributes["grid_mapping"] = "crs"
        for name in names:
            variable = out.createVariable(name, kind, ("lat", "lon"))
            variable[:] = values
            for key, value in attributes.items():
                setattr(variable, key, value)
    return path


def masked_bilinear(depth_m, row, col):
    """Plain-loop twin of the sampling kernel: depth and state at one point of a whole grid that does not wrap."""
    n_rows, n_cols = depth_m.shape
    if not (0 <= row <= n_rows - 1 and 0 <= col <= n_cols - 1):
        return math.nan, 2
    total = weight = 0.0
    for i in range(n_rows):
        for j in range(n_cols):
            w = max(0.0, 1 - abs(row - i)) * max(0.0, 1 - abs(col - j))
            if w > 0 and not math.isnan(depth_m[i, j]):
                total += w * float(depth_m[i, j])
                weight += w
    return (total / weight, 0) if weight >= 0.5 else (math.nan, 1)
