"""Depths at points of a grid: bilinear, with missing cells left out of the mean."""

from typing import Final

import numpy as np
from numba import njit
from numpy.typing import NDArray

__all__ = ["INSIDE", "OUTSIDE", "VOID", "bilinear_cell", "locate", "sample_points"]

#: States of a sampled point.
INSIDE: Final = 0
VOID: Final = 1
OUTSIDE: Final = 2

# Points this far beyond the outer cell centres, in cells, still count as on them: coordinates carry rounding.
_EDGE_CELLS = 1e-6
# Indices beyond this are no place on a grid and would overflow as integers.
_FARTHEST_CELL = 1e9


@njit(cache=True)
def locate(index: float, first: int, n: int, period: int) -> tuple[int, float]:
    """Cell of a window that lies at or below an index, and the fraction of a cell beyond its centre.

    Integer offsets are taken off the cell, not off the index, so that a window and the whole grid give the
    same fraction bit for bit.

    Parameters
    ----------
    index : float
        Index in the source; NaN is outside.
    first, n : int
        Index of the window's first cell in the source, and its number of cells.
    period : int
        Cells round the globe where the source wraps this way, else 0.

    Returns
    -------
    cell : int
        0 to n - 1, or -1 outside the centres of the outer cells.
    fraction : float
        0 to 1.
    """
    if not abs(index) < _FARTHEST_CELL:
        return -1, 0.0
    cell = int(np.floor(index))
    fraction = index - cell
    cell -= first
    if period > 0:
        cell %= period
        if n == period:
            return cell, fraction
    if cell in (-1, period - 1) and fraction > 1.0 - _EDGE_CELLS:
        return 0, 0.0
    if cell == n - 1 and fraction < _EDGE_CELLS:
        return cell, 0.0
    if cell < 0 or cell >= n - 1:
        return -1, 0.0
    return cell, fraction


@njit(cache=True)
def bilinear_cell(
    depth_m: NDArray[np.float32], row: int, next_row: int, col: int, next_col: int, up: float, right: float
) -> float:
    """Weighted mean of four cells without the missing ones; NaN where these carry more than half the weight.

    The depths are flat, row after row: `row` and `next_row` say where in them a row begins.

    ``sum(v m w) / sum(m w)`` with m = 1 for a value and 0 for NaN: at a cell's centre the cell's own value
    comes back exactly, whatever its neighbours hold.
    """
    total = 0.0
    weight = 0.0
    for begin, w_row in ((row, 1.0 - up), (next_row, up)):
        for j, w_col in ((col, 1.0 - right), (next_col, right)):
            value = float(depth_m[begin + j])
            w = w_row * w_col
            if w > 0.0 and value == value:  # noqa: PLR0124 - not NaN
                total += value * w
                weight += w
    if weight >= 0.5:
        return total / weight
    return np.nan


@njit(cache=True)
def sample_points(
    depth_m: NDArray[np.float32],
    row0: int,
    col0: int,
    wrap_cols: int,
    row: NDArray[np.float64],
    col: NDArray[np.float64],
    out_depth_m: NDArray[np.float64],
    out_state: NDArray[np.uint8],
) -> None:
    """Depth and state at points given by indices of the source the window was cut from.

    Parameters
    ----------
    depth_m : (n_rows, n_cols) array of float32
        Window of the source, NaN = void.
    row0, col0 : int
        Index of its first cell in the source.
    wrap_cols : int
        Columns round the globe where the source wraps, else 0.
    row, col : (n,) array of float
        Points; NaN is outside.
    out_depth_m, out_state : (n,) array of float, of uint8
        Filled: metres, NaN unless the state is INSIDE.
    """
    n_rows, n_cols = depth_m.shape
    flat = depth_m.ravel()
    for k in range(row.size):
        out_depth_m[k] = np.nan
        out_state[k] = OUTSIDE
        i, up = locate(row[k], row0, n_rows, 0)
        j, right = locate(col[k], col0, n_cols, wrap_cols)
        if i < 0 or j < 0:
            continue
        next_col = j + 1 if j + 1 < n_cols else 0
        out_depth_m[k] = bilinear_cell(flat, i * n_cols, min(i + 1, n_rows - 1) * n_cols, j, next_col, up, right)
        out_state[k] = INSIDE if out_depth_m[k] == out_depth_m[k] else VOID
