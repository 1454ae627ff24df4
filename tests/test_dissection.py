"""The order of elimination: every node once, separators after what they separate, few entries that fill in."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import ndimage, sparse
from scipy.sparse.linalg import splu
from utils_field import plane_basin

from shelfmap.dissection import dissected
from shelfmap.longwave import wave_matrix


def coast_mask(seed, shape):
    """Sea with bays, islands and ponds."""
    rough = ndimage.gaussian_filter(np.random.default_rng(seed).normal(size=shape), min(shape) / 20)
    return rough > np.quantile(rough, 0.35)


def neighbours(row, col):
    """Symmetric pattern of nodes that meet: none more than a row or a column apart."""
    at = {}
    for i, place in enumerate(zip(row.tolist(), col.tolist(), strict=True)):
        at.setdefault(place, []).append(i)
    pairs = [
        (i, j)
        for (r, c), nodes in at.items()
        for i in nodes
        for dr in (-1, 0, 1)
        for dc in (-1, 0, 1)
        for j in at.get((r + dr, c + dc), ())
    ]
    i, j = np.array(pairs).T
    return sparse.csc_matrix((np.where(i == j, 20.0, -1.0), (i, j)), shape=(len(row), len(row)))


def fill(matrix, order=None):
    """Entries of the factors, in an order or in that of scipy's minimum degree."""
    if order is not None:
        matrix = matrix[order][:, order].tocsc()
    lu = splu(
        matrix, permc_spec="NATURAL" if order is not None else "MMD_AT_PLUS_A", diag_pivot_thresh=0.01,
        options={"SymmetricMode": True},
    )  # fmt: skip
    return lu.L.nnz + lu.U.nnz


shapes = st.tuples(st.integers(1, 40), st.integers(1, 40))


@settings(max_examples=60, deadline=None)
@given(shape=shapes, seed=st.integers(0, 999), share=st.floats(0.05, 1.0), doubled=st.integers(0, 20))
def test_every_node_stands_in_the_order_once(shape, seed, share, doubled):
    """On scattered masks too, in which some places hold two nodes."""
    rng = np.random.default_rng(seed)
    row, col = np.nonzero(rng.random(shape) < share)
    again = rng.integers(0, max(len(row), 1), doubled if len(row) else 0)
    row, col = (np.concatenate([axis, axis[again]]).astype(np.int32) for axis in (row, col))
    order = dissected(row, col)
    assert order.dtype == np.int32
    assert sorted(order.tolist()) == list(range(len(row)))
    assert (order == dissected(row, col)).all()
    # what place and which way the lattice is counted from does not count
    assert (order == dissected(row + 1000, col - 7)).all()


@pytest.mark.parametrize(
    ("row", "col"),
    [
        ([], []),
        ([5], [7]),
        ([3] * 500, [4] * 500),  # all in one place
        ([0] * 300, range(300)),
        (range(300), [0] * 300),
        ([0] * 150 + [1000] * 150, [*range(150), *range(150)]),  # two rows far apart
        ([0] * 10 + [1] * 990, [*range(10), *range(990)]),
        (range(400), range(400)),
    ],
)
def test_odd_shapes(row, col):
    row, col = np.array(row, dtype=np.int32), np.array(col, dtype=np.int32)
    order = dissected(row, col)
    assert sorted(order.tolist()) == list(range(len(row)))


def test_a_line_is_cut_in_the_middle():
    """The last node parts the others evenly, and so on: the factors of a line of n nodes have some 3 n entries."""
    line = np.arange(4001, dtype=np.int32)
    order = dissected(np.zeros_like(line), line)
    assert order[-1] == 2000
    assert fill(neighbours(np.zeros_like(line), line), order) < 2 * 3.2 * len(line)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_the_last_line_parts_a_coast_in_two(seed):
    """No way round the nodes that are eliminated last, and neither part is small."""
    row, col = (axis.astype(np.int32) for axis in np.nonzero(coast_mask(seed, (90, 140))))
    order = dissected(row, col)
    last_col = col[order[-1]]
    n_last = int(np.argmax(col[order[::-1]] != last_col))
    assert n_last == (col == last_col).sum()  # all of one column of the wider direction
    rest = order[:-n_last]
    assert not neighbours(row, col)[rest[col[rest] < last_col]][:, rest[col[rest] > last_col]].nnz
    assert 0.3 < (col < last_col).mean() < 0.7


@pytest.mark.parametrize("seed", [1, 2])
def test_coasts_fill_in_less_than_in_the_orders_scipy_has(seed):
    """Some 50,000 unknowns: a fifth below COLAMD, its default.

    Minimum degree has up to a fifth fewer here; from 130,000 on it has more, a fifth on a coast like this one.
    """
    mask = coast_mask(seed, (250, 320))
    mesh = plane_basin(np.where(mask, 50.0, np.nan), 5e3, open_sides=["east"], held=False).mesh
    matrix = wave_matrix(mesh, 1.4e-4, 1e-3)
    ours = fill(matrix, np.arange(mesh.n_nodes))  # the mesh is in that order
    default = splu(matrix)
    assert ours < 0.8 * (default.L.nnz + default.U.nnz)
    assert ours < 1.2 * fill(matrix)


def test_entries_grow_as_n_log_n_on_squares():
    """Quadrupled unknowns add 15 or so entries each; in rows one after the other they would double them."""
    per_node = []
    for n in (50, 100, 200):
        row, col = (axis.ravel().astype(np.int32) for axis in np.mgrid[:n, :n])
        order = dissected(row, col)
        mesh_pattern = sparse.kron(*[sparse.diags([1.0, 2.0, 1.0], [-1, 0, 1], (n, n))] * 2).tocsc()
        mesh_pattern += 30 * sparse.eye(n * n)
        per_node.append(fill(mesh_pattern.tocsc(), order) / n**2)
    assert (np.diff(per_node) < 17).all()
