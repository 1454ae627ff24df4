"""Nested dissection: the order in which the nodes of a field are eliminated so that few entries fill in.

George (1973), SIAM J. Numer. Anal. 10, 345-363 (from memory): a line of nodes that cuts a region in two is eliminated
after both halves, and so on within each half.
"""

from typing import Final

import numpy as np
from numpy.typing import NDArray

__all__ = ["dissected"]

IntArray = NDArray[np.int32]

#: Regions of so few nodes are not cut further.
_LEAF: Final = 30
#: Share of a region's nodes on either side of the middle among which the shortest cut is looked for.
_SLACK: Final = 0.2


def dissected(row: IntArray, col: IntArray) -> IntArray:
    """Order of elimination of nodes on a lattice of which no two meet that are more than a row or a column apart.

    Parameters
    ----------
    row, col : (n,) array of int
        Places of the nodes; several may stand in one place.

    Returns
    -------
    (n,) array of int32
        The nodes, first to last.

    Examples
    --------
    >>> order = dissected(np.zeros(101, dtype=np.int32), np.arange(101, dtype=np.int32))
    >>> sorted(order.tolist()) == list(range(101)), int(order[-1])
    (True, 50)
    """
    parts: list[IntArray] = []
    waiting = [np.arange(len(row), dtype=np.int32)]
    # the last part first, backwards at the end: no recursion, and separators come after what they separate
    while waiting:
        nodes = waiting.pop()
        if len(nodes) <= _LEAF:
            parts.append(nodes)
            continue
        rows, cols = row[nodes], col[nodes]
        line = rows if rows.max() - rows.min() > cols.max() - cols.min() else cols
        if line.min() == line.max():
            parts.append(nodes)
            continue
        cut = _shortest_cut(line)
        parts.append(nodes[line == cut])
        waiting += [nodes[line < cut], nodes[line > cut]]
    return np.concatenate(parts[::-1]) if parts else np.empty(0, dtype=np.int32)


def _shortest_cut(line: IntArray) -> int:
    """Line with the fewest nodes of those that leave at least three tenths on either side, or else the middle one."""
    first = int(line.min())
    count = np.bincount(line - first)
    before = np.cumsum(count) - count
    middle = len(line) / 2
    balanced = (before >= (0.5 - _SLACK) * len(line)) & (before + count <= (0.5 + _SLACK) * len(line))
    if not balanced.any():
        return first + int(np.searchsorted(before + count, middle))
    # of equally short ones the most even
    score = count + np.abs(before + count / 2 - middle) / len(line)
    return first + int(np.argmin(np.where(balanced, score, np.inf)))
