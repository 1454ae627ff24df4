"""What shelfmap understands of a grid, for people: the report of `shelfmap inspect`."""

import math
from dataclasses import asdict, dataclass, replace
from typing import Any, Final

import numpy as np

from shelfmap.grid import FARTHEST_VALUE_M, GridSource, open_grid
from shelfmap.rasterfile import disk_file
from shelfmap.settings import GridSettings
from shelfmap.sheets import PlacedFile, Sheet

__all__ = ["FileReport", "GridReport", "inspect_grid"]

# Cells held in memory at a time.
_BLOCK_CELLS: Final = 4_000_000


@dataclass(frozen=True, slots=True, kw_only=True)
class FileReport:
    """What one file of a grid is.

    Parameters
    ----------
    path, crs, crs_why : str
        Name of the raster; its coordinate system and where that comes from.
    sheet : int
        Files of one number share a lattice and are read as one grid; number 1 gives depths first, the last carries
        the coast.
    n_rows, n_cols : int
        Cells.
    step_x_m, step_y_m : float
        Cell sides on the ground in the middle of the sheet.
    positive, positive_why : str
        "up" for elevations or "down" for depths, and why.
    """

    path: str
    sheet: int
    crs: str
    crs_why: str
    n_rows: int
    n_cols: int
    step_x_m: float
    step_y_m: float
    positive: str
    positive_why: str

    @classmethod
    def of(cls, placed: PlacedFile, sheet: Sheet, number: int) -> "FileReport":
        """Report of a file of a sheet that has a number."""
        return cls(
            path=placed.file.path,
            sheet=number,
            crs=sheet.projection.name,
            crs_why=placed.crs_why,
            n_rows=placed.file.n_rows,
            n_cols=placed.file.n_cols,
            step_x_m=sheet.step_x_m,
            step_y_m=sheet.step_y_m,
            positive=placed.positive,
            positive_why=placed.positive_why,
        )

    def line(self) -> str:
        """Give the report as one line for people."""
        return (
            f"{self.path}: sheet {self.sheet}, {self.n_rows} rows by {self.n_cols} columns, cells of "
            f"{self.step_x_m:.0f} m by {self.step_y_m:.0f} m, {self.crs}, {self.crs_why}; "
            f"positive {self.positive}: {self.positive_why}"
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class GridReport:
    """What a grid holds and whether it can be screened.

    Of several files, numbers of cells and what they hold are those of the cells in which the coast is traced: of the
    last sheet, with the depths of the sheets above it.

    Parameters
    ----------
    path, crs, crs_why : str
        Name of the raster; its coordinate system and where that comes from.
    box_deg : tuple of float
        West, south, east, north of the cells' outer edges.
    n_rows, n_cols : int
        Cells; a column that repeats the first is not counted.
    wraps : bool
        True where the columns go once round the globe.
    step_x_m, step_y_m : float
        Cell sides on the ground in the middle of the grid.
    positive, positive_why : str
        "up" for elevations or "down" for depths, and why.
    level_shift_m : float
        How far the water stands above the grid's zero.
    void_is_land : bool
        Whether missing cells count as land.
    vertical_words : tuple of str
        Metadata that name a vertical datum.
    dtype : str
        Type the values are stored in.
    sea_share, land_share, void_share : float
        Shares of the cells, by number: below the water, at it or above, missing.
    lowest_m, highest_m : float
        Extreme elevations above the grid's zero; NaN where all cells are missing.
    bytes_on_disk, bytes_in_memory : int
        Size of the files, and of the whole grid as float32.
    can_screen : bool
        Whether the grid can be screened, and if not, `reasons` with what to do.
    reasons : tuple of str
        Why not, one sentence each.
    files : tuple of FileReport
        Each file, sheet by sheet in order of priority.
    """

    path: str
    crs: str
    crs_why: str
    box_deg: tuple[float, float, float, float]
    n_rows: int
    n_cols: int
    wraps: bool
    step_x_m: float
    step_y_m: float
    positive: str
    positive_why: str
    level_shift_m: float
    void_is_land: bool
    vertical_words: tuple[str, ...]
    dtype: str
    sea_share: float
    land_share: float
    void_share: float
    lowest_m: float
    highest_m: float
    bytes_on_disk: int
    bytes_in_memory: int
    can_screen: bool
    reasons: tuple[str, ...]
    files: tuple[FileReport, ...]

    def as_dict(self) -> dict[str, Any]:
        """Fields for JSON: NaN as None, tuples as lists."""
        fields = {key: list(value) if isinstance(value, tuple) else value for key, value in asdict(self).items()}
        return {key: None if isinstance(value, float) and math.isnan(value) else value for key, value in fields.items()}

    def lines(self) -> list[str]:
        """Give the report as lines of text for people."""
        west, south, east, north = self.box_deg
        meaning = {"up": "elevations", "down": "depths"}.get(self.positive, "elevations and depths")
        shares = f"sea {self.sea_share:.1%}, land {self.land_share:.1%}, missing {self.void_share:.1%}"
        disk, memory = _size(self.bytes_on_disk), _size(self.bytes_in_memory)
        lines = [
            f"grid         {self.path}",
            f"system       {self.crs}, {self.crs_why}",
            f"box          west {west:.4f}, south {south:.4f}, east {east:.4f}, north {north:.4f} degrees",
            f"cells        {self.n_rows} rows by {self.n_cols} columns{', round the globe' if self.wraps else ''}",
            f"cell         {self.step_x_m:.0f} m by {self.step_y_m:.0f} m in the middle of the grid",
            f"values       {meaning}, positive {self.positive}: {self.positive_why}",
            f"range        {self.lowest_m:.1f} m to {self.highest_m:.1f} m above the grid's zero",
            f"water level  {self.level_shift_m:+.2f} m on the grid's zero, which is taken as mean sea level",
            f"datum words  {'; '.join(self.vertical_words) or 'none in the metadata'}",
            f"cells are    {shares}{' (counts as land)' if self.void_is_land else ''}",
            f"size         {disk} on disk as {self.dtype}, {memory} whole in memory",
            f"screening    {'possible' if self.can_screen else 'not possible'}",
        ]
        files = [f"file {number:<8}{file.line()}" for number, file in enumerate(self.files, 1)]
        reasons = [f"             {reason}" for reason in self.reasons]
        return lines[:1] + (files if len(files) > 1 else []) + lines[1:] + reasons


def inspect_grid(settings: GridSettings) -> GridReport:
    """Understand a grid and count what it holds, a block of rows at a time.

    Parameters
    ----------
    settings : GridSettings
        As for `open_grid`.

    Returns
    -------
    GridReport

    Raises
    ------
    GridError
        If the grid cannot be read or understood at all, as for `open_grid`.
    """
    source = open_grid(settings)
    n_sea, n_land, lowest_m, highest_m = _count(source)
    n_cells = source.n_rows * source.n_cols
    n_void = n_cells - n_sea - n_land
    reasons = _reasons(source, n_sea, n_land + n_void * source.void_is_land, lowest_m, highest_m)
    return GridReport(
        path=source.path,
        crs=source.projection.name,
        crs_why=source.crs_why,
        box_deg=source.box_deg,
        n_rows=source.n_rows,
        n_cols=source.n_cols,
        wraps=source.wraps,
        step_x_m=source.step_x_m,
        step_y_m=source.step_y_m,
        positive=source.positive,
        positive_why=source.positive_why,
        level_shift_m=source.level_shift_m,
        void_is_land=source.void_is_land,
        vertical_words=source.vertical_words,
        dtype=source.dtype,
        sea_share=n_sea / n_cells,
        land_share=n_land / n_cells,
        void_share=n_void / n_cells,
        lowest_m=lowest_m,
        highest_m=highest_m,
        bytes_on_disk=sum(disk_file(path).stat().st_size for path in settings.paths),
        bytes_in_memory=4 * n_cells,
        can_screen=not reasons,
        reasons=reasons,
        files=tuple(
            FileReport.of(placed, sheet, number)
            for number, sheet in enumerate(source.sheets, 1)
            for placed in sheet.files
        ),
    )


def _count(source: GridSource) -> tuple[int, int, float, float]:
    """Sea cells, land cells, lowest and highest elevation above the grid's zero; NaN without any value."""
    rows = max(1, _BLOCK_CELLS // source.n_cols)
    blocks = [(row, row + rows, 0, source.n_cols) for row in range(0, source.n_rows, rows)]
    n_sea = n_land = 0
    lowest_m, highest_m = math.inf, -math.inf
    last = replace(source.sheets[-1], void_is_land=False)
    for grid in replace(source, sheets=(*source.sheets[:-1], last)).read_many(blocks):
        depth_m = grid.depth_m[~np.isnan(grid.depth_m)]
        if depth_m.size:
            n_sea += int(np.count_nonzero(depth_m > 0))
            n_land += int(np.count_nonzero(depth_m <= 0))
            lowest_m = min(lowest_m, source.level_shift_m - float(depth_m.max()))
            highest_m = max(highest_m, source.level_shift_m - float(depth_m.min()))
    if n_sea + n_land == 0:
        return 0, 0, math.nan, math.nan
    return n_sea, n_land, lowest_m, highest_m


def _reasons(source: GridSource, n_sea: int, n_land: int, lowest_m: float, highest_m: float) -> tuple[str, ...]:
    """Why a grid cannot be screened, each with what to do; none where it can."""
    if math.isnan(lowest_m):
        return ("All cells are missing: check grid.nodata and grid.band.",)
    reasons = []
    if n_sea == 0:
        reasons.append(
            f"No cell lies below the water, with values taken as positive {source.positive}: check grid.positive, "
            "grid.level_shift_m and the region."
        )
    if n_land == 0:
        cure = "" if source.void_is_land else "; where missing cells are the land, set grid.void_is_land = true"
        reasons.append(f"No cell is land, so there is no shoreline: take a larger region{cure}.")
    if max(-lowest_m, highest_m) > FARTHEST_VALUE_M:
        farthest = lowest_m if -lowest_m > highest_m else highest_m
        reasons.append(
            f"Elevation {farthest:.8g} m is none on Earth: if it means missing set grid.nodata to the value stored, "
            "else convert the grid to metres."
        )
    return tuple(reasons)


def _size(n_bytes: int) -> str:
    """Bytes in the unit people would use (powers of 1000)."""
    size = float(n_bytes)
    for unit in ("bytes", "kB", "MB"):
        if size < 1000:
            return f"{size:.3g} {unit}"
        size /= 1000
    return f"{size:.3g} GB"
