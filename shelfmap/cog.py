"""Maps as Cloud-Optimised GeoTIFFs: several bands, each with its name, unit and meaning; whole or not at all."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np
from numpy.typing import NDArray
from rasterio import Affine
from rasterio.io import MemoryFile

from shelfmap.errors import GridError
from shelfmap.lattice import Lattice
from shelfmap.rasters import check_raster_target, crs_of, replace_file

__all__ = ["Band", "write_cog"]

#: Cells a side of a block.
_BLOCK: Final = 512


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Band:
    """One band of a map.

    Parameters
    ----------
    name : str
        What a GIS calls it.
    unit : str
        Unit of its values; empty for pure numbers.
    meaning : str
        One sentence in the user's words.
    values : (n_rows, n_cols) array of float
        Rows south to north; NaN where there is no value.
    """

    name: str
    unit: str
    meaning: str
    values: NDArray[np.floating]


def write_cog(
    path: str | Path,
    bands: Sequence[Band],
    lattice: Lattice,
    *,
    tags: Mapping[str, str] | None = None,
    overwrite: bool = False,
) -> Path:
    """Write a map as a Cloud-Optimised GeoTIFF of float32 bands, deflated, with overviews where it is large.

    Overviews repeat cells and make no means: lags of 359 and 1 degree have none. A map across 180 degrees runs on past
    it. The same call gives the same bytes as long as GDAL and its zlib are the same.

    Parameters
    ----------
    path : str or Path
        File to write; its folder must exist.
    bands : sequence of Band
        All of the lattice's shape.
    lattice : Lattice
        Where the cells lie.
    tags : mapping of str to str, optional
        Metadata of the file.
    overwrite : bool
        Whether an existing file is replaced.

    Raises
    ------
    GridError
        If a band has another shape or infinite values, or the file cannot be written; an earlier file is then left
        as it was.
    OutputExistsError
        If the file exists and `overwrite` is off.
    """
    path = Path(path)
    for band in bands:
        if band.values.shape != (lattice.n_rows, lattice.n_cols):
            raise GridError(
                f"band {band.name} of shape {band.values.shape}: the map has {lattice.n_rows} rows of {lattice.n_cols}"
            )
        if np.isinf(band.values).any():
            raise GridError(f"band {band.name} holds infinite values; put NaN where there is no value")
    check_raster_target(path, overwrite=overwrite)
    dx, dy = lattice.dx, lattice.dy
    west, north = lattice.x0 - dx / 2, lattice.y0 + (lattice.n_rows - 0.5) * dy
    # in memory first: GDAL writes the file anew in its order when it is closed, and what fails then leaves no trace
    with MemoryFile() as memory:
        with memory.open(
            driver="COG", height=lattice.n_rows, width=lattice.n_cols, count=len(bands), dtype="float32", nodata=np.nan,
            crs=crs_of(lattice.crs_wkt), transform=Affine(dx, 0.0, west, 0.0, -dy, north),
            compress="deflate", level=9, predictor="yes", blocksize=_BLOCK, overview_resampling="nearest",
        ) as target:  # fmt: skip
            for number, band in enumerate(bands, start=1):
                target.write(band.values[::-1].astype(np.float32), number)
                target.set_band_description(number, band.name)
                target.set_band_unit(number, band.unit)
                target.update_tags(number, meaning=band.meaning)
            target.update_tags(**dict(sorted((tags or {}).items())))
        replace_file(path, memory.getbuffer())
    return path
