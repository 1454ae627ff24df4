r"""2-D long waves on a mesh: the matrix of a wave, its factors, elevations and currents.

Linear, depth-averaged motion with time factor exp(-i omega t), with :math:`s = r / h - i \omega`::

    s u - f v = -g d(eta)/dx,   s v + f u = -g d(eta)/dy,   -i omega eta + div(h u) = 0

The weak form has one unknown a node, bilinear cells, and everything constant in a cell: its flux comes from the
gradient at its centre, and the pattern + - + - of its corners, which has no gradient there, is held by a term without
rotation. No flow through coasts. An open edge either has an elevation of its own or lets waves out: the flow outward
is sqrt(g h) times the elevation less the edge tide, which is twice that of the waves coming in.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import sparse
from scipy.sparse.linalg import splu

from shelfmap._kernels.elements import add_pixels, add_sides
from shelfmap.constants import GRAVITY_M_S2
from shelfmap.errors import FieldError
from shelfmap.mesh import Mesh

__all__ = [
    "Ellipse",
    "Factors",
    "currents",
    "edge_supply",
    "ellipse",
    "factorise",
    "floored_friction",
    "memory_bytes",
    "solve_wave",
    "twist_area",
    "wave_matrix",
]

ComplexArray = NDArray[np.complex128]
FloatArray = NDArray[np.float64]

#: Friction uses r / max(h, this), metres, as the response of transects does.
FRICTION_FLOOR_M: Final = 1.0
#: Friction is at least this, m/s: without any, waves at the inertial period have no finite answer.
LEAST_FRICTION_M_S: Final = 1e-6
#: Share of the full stiffness that the pattern + - + - is given.
TWIST_SHARE: Final = 0.6
#: Less than this times the largest entry of its column, and a diagonal entry is passed over as a pivot.
PIVOT_THRESHOLD: Final = 0.01


def floored_friction(mesh: Mesh, friction_m_s: ArrayLike) -> FloatArray:
    """Rate r / h at which friction slows the water of each cell, (n,), 1/s; see the floors above."""
    friction = np.maximum(
        np.broadcast_to(np.asarray(friction_m_s, dtype=float), mesh.depth_m.shape), LEAST_FRICTION_M_S
    )
    return np.asarray(friction / np.maximum(mesh.depth_m, FRICTION_FLOOR_M))


def twist_area(mesh: Mesh) -> FloatArray:
    """What the pattern + - + - of a cell's corners is multiplied by to stand for a gradient over its area, (n,)."""
    return np.asarray(TWIST_SHARE * (mesh.sides[:, 0] + mesh.sides[:, 2]) / (12.0 * mesh.area_m2))


def wave_matrix(mesh: Mesh, omega: complex, friction_m_s: ArrayLike) -> Any:
    """Matrix of one wave over all nodes, compressed by columns.

    Parameters
    ----------
    mesh : Mesh
        The region.
    omega : complex
        Angular frequency, rad/s; decaying motion has Im omega < 0.
    friction_m_s : float or (n,) array_like of float
        Linear friction r, m/s, of all cells or of each.

    Returns
    -------
    (m, m) sparse matrix of complex128
        Its product with elevations is the supply of water to the nodes, m3/s.
    """
    s = floored_friction(mesh, friction_m_s) - 1j * omega
    spread = np.asarray(GRAVITY_M_S2 * mesh.depth_m / (s * s + mesh.coriolis_rad_s**2), dtype=complex)
    south, product, west = mesh.sides.T
    per_metre = np.stack([west, -product, south], axis=1) / mesh.area_m2[:, None]
    data = np.zeros(len(mesh.indices), dtype=complex)
    add_pixels(
        mesh.corner,
        (-1j * omega * mesh.area_m2).astype(complex),
        spread * s,
        spread * mesh.coriolis_rad_s.astype(complex),
        twist_area(mesh) * GRAVITY_M_S2 * mesh.depth_m / s,
        per_metre,
        mesh.indptr,
        mesh.indices,
        data,
    )
    if not mesh.is_held:
        add_sides(mesh.edge_node[mesh.side_ends], _outflow(mesh), mesh.indptr, mesh.indices, data)
    return sparse.csc_matrix((data, mesh.indices, mesh.indptr), shape=(mesh.n_nodes, mesh.n_nodes))


def _outflow(mesh: Mesh) -> ComplexArray:
    """Flow through each open side of a wave of unit elevation that leaves, m2/s."""
    return (np.sqrt(GRAVITY_M_S2 * mesh.depth_m[mesh.side_cell]) * mesh.side_m).astype(complex)


def edge_supply(mesh: Mesh, matrix: Any) -> Any:
    """What an edge tide supplies to the free nodes: (n_free, k) matrix, for the k nodes of `Mesh.edge_node`."""
    if mesh.is_held:
        return -matrix[: mesh.n_free, mesh.n_free :]
    weight = _outflow(mesh)
    near, far = weight * (5.0 / 12.0), weight / 12.0
    first, last = mesh.side_ends.T
    rows, cols = np.concatenate([first, last, first, last]), np.concatenate([first, last, last, first])
    entries = np.concatenate([near, near, far, far])
    return sparse.csr_matrix((entries, (mesh.edge_node[rows], cols)), shape=(mesh.n_nodes, len(mesh.edge_node)))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Factors:
    """A wave's matrix of the free nodes, factorised, and what its open edge supplies."""

    mesh: Mesh
    supply: Any
    """(n_free, k) sparse: supply to the free nodes from a unit edge tide at each edge node."""
    matrix: Any
    """(n_free, n_free) sparse: what was factorised."""
    solve: Callable[..., ComplexArray]
    """Solves for the free nodes: `solve(b)`, or `solve(b, "T")` with the transposed matrix."""

    def elevation(self, edge: ComplexArray) -> ComplexArray:
        """Elevation at all nodes (m, ...) for an edge tide (k, ...) at the edge nodes."""
        free = self.solve(np.asarray(self.supply @ edge.astype(complex)))
        return np.concatenate([free, edge]) if self.mesh.is_held else free


def factorise(mesh: Mesh, omega: complex, friction_m_s: ArrayLike) -> Factors:
    """Factors of a wave's matrix, in the mesh's order of elimination.

    Parameters
    ----------
    mesh, omega, friction_m_s
        As for `wave_matrix`.

    Raises
    ------
    FieldError
        If the matrix has no inverse.
    """
    matrix = wave_matrix(mesh, omega, friction_m_s)
    supply = edge_supply(mesh, matrix)
    if mesh.is_held:
        matrix = matrix[: mesh.n_free, : mesh.n_free]
    try:
        lu = splu(matrix, permc_spec="NATURAL", diag_pivot_thresh=PIVOT_THRESHOLD, options={"SymmetricMode": True})
    except RuntimeError as error:
        raise FieldError(
            f"field: the matrix at {2 * np.pi / abs(omega) / 3600:.4g} h has no inverse ({error}); change the period "
            "or the friction a little"
        ) from error
    return Factors(mesh=mesh, supply=supply, matrix=matrix, solve=lu.solve)


def solve_wave(mesh: Mesh, omega: float, friction_m_s: ArrayLike, edge: ComplexArray | None = None) -> ComplexArray:
    """Elevation at all nodes in answer to an edge tide.

    Parameters
    ----------
    mesh, omega, friction_m_s
        As for `wave_matrix`.
    edge : (k, ...) array of complex, optional
        Edge tide at the nodes of `Mesh.edge_node`: their elevation where the edge is held, twice that of the waves
        coming in where it lets waves out. 1 everywhere by default.

    Returns
    -------
    (m, ...) array of complex
        Re(eta exp(-i omega t)) is the elevation: its angle is the lag.
    """
    edge = np.ones(len(mesh.edge_node), dtype=complex) if edge is None else edge
    return factorise(mesh, omega, friction_m_s).elevation(edge)


def currents(
    mesh: Mesh, elevation: ComplexArray, omega: complex, friction_m_s: ArrayLike
) -> tuple[ComplexArray, ComplexArray]:
    """East and north part of the current at the centres of the cells, (n,) each, m/s.

    Parameters
    ----------
    mesh, omega, friction_m_s
        As for `wave_matrix`.
    elevation : (m,) array of complex
        At the nodes.
    """
    s = floored_friction(mesh, friction_m_s) - 1j * omega
    east, north = mesh.gradient(elevation)
    factor, f = -GRAVITY_M_S2 / (s * s + mesh.coriolis_rad_s**2), mesh.coriolis_rad_s
    return factor * (s * east + f * north), factor * (s * north - f * east)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Ellipse:
    """The ellipse that a current's tip runs through, n cells."""

    major_m_s: FloatArray
    """(n,) largest speed, m/s."""
    minor_m_s: FloatArray
    """(n,) smallest speed, m/s; negative where the current turns clockwise."""
    bearing_deg: FloatArray
    """(n,) compass bearing of the largest speed, from 0 up to 180 degrees."""


def ellipse(east: ComplexArray, north: ComplexArray) -> Ellipse:
    """Ellipse of a current from its east and north part, m/s.

    The sum of two rotary currents, one turning each way (Foreman 1978, Pacific Marine Science Report 78-6, from
    memory).

    Examples
    --------
    >>> flow = ellipse(np.array([1.0 + 0j]), np.array([1.0 + 0j]))
    >>> flow.major_m_s.round(3), flow.bearing_deg.round(3)
    (array([1.414]), array([45.]))
    """
    # u + i v = left exp(i omega t) + right exp(-i omega t), with time factor exp(-i omega t) for u and v
    left, right = (np.conj(east) + 1j * np.conj(north)) / 2, (east + 1j * north) / 2
    inclination = (np.angle(left) + np.angle(right)) / 2
    return Ellipse(
        major_m_s=abs(left) + abs(right),
        minor_m_s=abs(left) - abs(right),
        bearing_deg=np.mod(90.0 - np.degrees(inclination), 180.0),
    )


def memory_bytes(n_free: int, n_shapes: int = 1) -> float:
    """Memory that mesh, factors and a solution for so many edge tides take at most, bytes: an estimate.

    Entries of the factors per unknown grow by 8.3 when these double; SuperLU takes half as much again as their 16 bytes
    while it finds them. Measured peaks of squares and coasts of 3e4 to 1e6 unknowns lie 15 to 27 % below.
    """
    entries = n_free * max(8.3 * np.log2(max(n_free, 2)) - 44.0, 20.0)
    return float(16.0 * entries + max(8.0 * entries, 48.0 * n_free * n_shapes) + 800.0 * n_free)
