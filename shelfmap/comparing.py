"""A comparison with gauges written down: a table and a figure beside the output."""

from pathlib import Path

import pandas as pd

from shelfmap.comparison import Comparison, compare
from shelfmap.errors import LayerError, OutputExistsError
from shelfmap.figures import comparison_figure
from shelfmap.rasters import replace_file
from shelfmap.settings import Settings

__all__ = ["write_comparison"]


def write_comparison(
    settings: Settings, *, within_km: float = 50.0, overwrite: bool = False
) -> tuple[Comparison, tuple[Path, Path]]:
    """Compare an output with its gauges, and write the table as CSV and the figure as PNG beside it.

    Parameters
    ----------
    settings, within_km
        As for `compare`.
    overwrite : bool
        Whether files of an earlier comparison may be replaced.

    Raises
    ------
    OutputExistsError
        If one of the files is there and may not be replaced.
    ShelfmapError
        As `compare`, or if a file cannot be written or is one that is read.
    """
    stem = settings.output.path.stem
    table, figure = (settings.output.path.with_name(f"{stem}_compared.{kind}") for kind in ("csv", "png"))
    inputs = {path.resolve() for path in (*settings.grid.paths, settings.gauges.file) if path is not None}
    for path in (table, figure):
        if path.resolve() in inputs:
            raise LayerError(f"output {path} is an input too and would be lost; give another output.path or rename it")
        if path.exists() and not overwrite:
            raise OutputExistsError(f"output {path} exists already; allow it to be overwritten or move it")
    comparison = compare(settings, within_km=within_km)
    title = settings.title or stem
    replace_file(table, pd.DataFrame(comparison.table).to_csv(index=False, float_format="%.6g").encode())
    replace_file(figure, comparison_figure(comparison, f"{title}: gauges against what was computed"))
    return comparison, (table, figure)
