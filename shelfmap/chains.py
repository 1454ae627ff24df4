"""Directed lines joined end to start, so that a coast traced tile by tile becomes whole."""

from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

__all__ = ["join_ends"]

FloatArray = NDArray[np.float64]


def join_ends(pieces: Sequence[FloatArray], *, tolerance: float, turn: int | None = None) -> list[FloatArray]:
    """Join directed lines whose end lies at another's start.

    Parameters
    ----------
    pieces : sequence of (k, 2) array of float
        Directed lines.
    tolerance : float
        Greatest distance between an end and the start it is joined to, in the unit of the lines; nearest first.
    turn : int, optional
        Width after which the first coordinate comes round again.

    Returns
    -------
    list of (k, 2) array of float
        Chains; a closed one has its first point again at its end.
    """
    if not pieces:
        return []
    starts, ends = np.array([p[0] for p in pieces]), np.array([p[-1] for p in pieces])
    if turn is not None:
        tree = cKDTree(np.column_stack([np.mod(starts[:, 0], turn), starts[:, 1]]), boxsize=[turn, 1e9])
        pairs = tree.query_ball_point(np.column_stack([np.mod(ends[:, 0], turn), ends[:, 1]]), tolerance)
    else:
        pairs = cKDTree(starts).query_ball_point(ends, tolerance)

    def gap(i: int, j: int) -> float:
        across = ends[i, 0] - starts[j, 0]
        if turn is not None:
            across -= turn * round(across / turn)
        return float(np.hypot(across, ends[i, 1] - starts[j, 1]))

    candidates = sorted((gap(i, j), i, j) for i, near in enumerate(pairs) for j in near)
    follows: dict[int, int] = {}
    led: set[int] = set()
    for distance, i, j in candidates:
        tiny = i == j and len(pieces[i]) < 4
        if i in follows or j in led or (tiny and distance > 0):
            continue
        follows[i] = j
        led.add(j)
    return list(_chains(pieces, follows, led, turn))


def _chains(
    pieces: Sequence[FloatArray], follows: dict[int, int], led: set[int], turn: int | None
) -> Iterator[FloatArray]:
    """Walk the pieces from each open start, then round each closed chain."""
    done: set[int] = set()
    for first in [i for i in range(len(pieces)) if i not in led] + list(range(len(pieces))):
        if first in done:
            continue
        parts, i = [pieces[first]], first
        done.add(i)
        while follows.get(i, first) not in done:
            i = follows[i]
            done.add(i)
            part = pieces[i]
            if turn is not None:
                part = part + np.array([turn * round((parts[-1][-1, 0] - part[0, 0]) / turn), 0.0])
            parts.append(part[1:])
        chain = np.concatenate(parts)
        if follows.get(i) == first:
            end = (
                chain[0]
                if turn is None
                else chain[0] + np.array([turn * round((chain[-1, 0] - chain[0, 0]) / turn), 0.0])
            )
            chain = np.concatenate([chain[:-1], end[None]])
        if len(chain) > 1:
            yield chain
