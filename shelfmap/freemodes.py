r"""Natural modes of a region: free motion that decays by friction and by the waves it lets out.

With the currents, and one more unknown a cell for the pattern + - + - of its corners, free motion is a linear
eigenvalue problem of first order, damped and turning as it is, although the matrix of elevations alone depends on the
frequency in a complicated way. Arnoldi's method (ARPACK) inverts it near a frequency wanted: eliminating the currents
leaves the matrix of a wave of that frequency, which is factorised once. Each mode is then refined by inverse iteration
with the matrix at its own frequency, whose left vector says how strongly an edge tide drives it.
"""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse.linalg import ArpackNoConvergence, LinearOperator, eigs

from shelfmap._kernels.elements import add_pixels
from shelfmap.constants import GRAVITY_M_S2
from shelfmap.longwave import Factors, factorise, floored_friction, twist_area, wave_matrix
from shelfmap.mesh import EAST, NORTH, TWIST, Mesh

__all__ = ["FreeMode", "free_modes"]

ComplexArray = NDArray[np.complex128]
FloatArray = NDArray[np.float64]

#: Candidates looked at for each mode wanted, and besides: motion without elevation (inertial oscillations) crowds
#: round the inertial period.
_CANDIDATES: Final = 2
_BESIDES: Final = 10
#: A mode that takes part in the response less than this share of the most responsive one is left out.
LEAST_SHARE: Final = 0.02
#: Motion with less of its energy than this in elevations is inertial oscillation, no mode of the water level.
_LEAST_POTENTIAL: Final = 0.05
#: Steps of inverse iteration, and the change of frequency that ends them: the next one would be some 1e-12.
_STEPS: Final = 8
_CHANGE: Final = 1e-6
#: Modes whose frequencies differ by less than this are one.
_SAME: Final = 1e-5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FreeMode:
    """One natural mode.

    Parameters
    ----------
    omega : complex
        Angular frequency, rad/s; Im < 0.
    elevation : (m,) array of complex
        At the nodes; the response it gives to a unit edge tide at its own period, by itself.
    response : float
        Root mean square of that over the waters: how strongly an edge tide drives the mode.
    participation : float
        `response` over that of the most responsive mode found.
    """

    omega: complex
    elevation: ComplexArray
    response: float
    participation: float

    @property
    def period_h(self) -> float:
        """2 pi / Re omega, hours."""
        return float(2 * np.pi / self.omega.real / 3600.0)

    @property
    def q(self) -> float:
        """Re omega / (2 |Im omega|): the amplitude falls by e in Q / pi periods."""
        return float(self.omega.real / (2.0 * abs(self.omega.imag)))


def free_modes(mesh: Mesh, friction_m_s: FloatArray, period_h: float, count: int) -> list[FreeMode]:
    """Natural modes near a period that an edge tide drives, the most responsive first.

    Parameters
    ----------
    mesh : Mesh
        The region; a held edge is a node of every mode.
    friction_m_s : (n,) array of float
        Linear friction of each cell.
    period_h : float
        Where to look, hours.
    count : int
        At most so many.

    Returns
    -------
    list of FreeMode
        Fewer where there are no more of them near enough.
    """
    found: list[FreeMode] = []
    for omega, elevation in _candidates(mesh, friction_m_s, 2 * np.pi / (period_h * 3600.0), count):
        if omega.real <= 0 or omega.imag >= 0 or any(abs(omega - mode.omega) < _SAME * abs(omega) for mode in found):
            continue
        mode = _refined(mesh, friction_m_s, omega, elevation)
        if mode is None or any(abs(mode.omega - other.omega) < _SAME * abs(mode.omega) for other in found):
            continue
        found.append(mode)
    largest = max((mode.response for mode in found), default=0.0)
    ranked = sorted(found, key=lambda mode: -mode.response)
    shared = [
        FreeMode(
            omega=mode.omega,
            elevation=mode.elevation,
            response=mode.response,
            participation=mode.response / largest,
        )
        for mode in ranked
    ]
    return [mode for mode in shared if mode.participation >= LEAST_SHARE][:count]


def _candidates(mesh: Mesh, friction_m_s: FloatArray, omega: float, count: int) -> list[tuple[complex, ComplexArray]]:
    """Frequencies near one and their elevations at the free nodes, the nearest first."""
    motion = _Motion(mesh, friction_m_s, omega)
    n_wanted = min(_CANDIDATES * count + _BESIDES, motion.size - 2)
    operator = LinearOperator((motion.size,) * 2, matvec=motion.inverted, dtype=complex)
    start = np.random.default_rng(0).standard_normal(motion.size) + 0j  # the same in every run
    try:
        inverse, states = eigs(operator, k=n_wanted, v0=start, ncv=min(3 * n_wanted, motion.size), tol=1e-6)
    except ArpackNoConvergence as error:
        inverse, states = error.eigenvalues, error.eigenvectors
    order = [i for i in np.argsort(-abs(inverse)) if motion.potential_share(states[:, i]) >= _LEAST_POTENTIAL]
    return [(complex(omega - 1j / inverse[i]), states[: mesh.n_free, i]) for i in order]


class _Motion:
    """Free motion as a first-order system: elevations of free nodes, then the currents and the twist of each cell.

    x' = -B^-1 A x with x ~ exp(-i omega t); `inverted` gives (A - i omega0 B)^-1 B x.
    """

    def __init__(self, mesh: Mesh, friction_m_s: FloatArray, omega: float) -> None:
        self._mesh, n, n_free = mesh, len(mesh.cell), mesh.n_free
        self.size = n_free + 3 * n
        self._factors = factorise(mesh, omega, friction_m_s)
        self._s = floored_friction(mesh, friction_m_s) - 1j * omega
        self._turn = mesh.coriolis_rad_s
        self._share = 1.0 / (self._s**2 + self._turn**2)
        self._mass = _mass(mesh)
        # gradient at the centre, from both sides of a cell
        area = mesh.area_m2
        along_south, along_west, twist = (_at_cells(mesh, weights) for weights in (EAST, NORTH, TWIST))
        (a_east, a_north), (b_east, b_north) = mesh.south_side.T, mesh.west_side.T
        self._east = sparse.diags_array(b_north / area) @ along_south - sparse.diags_array(a_north / area) @ along_west
        self._north = sparse.diags_array(a_east / area) @ along_west - sparse.diags_array(b_east / area) @ along_south
        self._twist = twist
        self._flow, self._twist_flow = area * mesh.depth_m, twist_area(mesh) * mesh.depth_m

    def potential_share(self, state: ComplexArray) -> float:
        """Share of a state's energy that is in its elevations."""
        elevation, east, north, _ = self._parts(state)
        potential = GRAVITY_M_S2 * float((elevation.conj() @ (self._mass @ elevation)).real)
        return potential / (potential + float((self._flow * (abs(east) ** 2 + abs(north) ** 2)).sum()))

    def _parts(self, state: ComplexArray) -> list[ComplexArray]:
        n, n_free = len(self._mesh.cell), self._mesh.n_free
        return np.split(state.ravel(), [n_free, n_free + n, n_free + 2 * n])

    def inverted(self, state: ComplexArray) -> ComplexArray:
        """Apply the inverse to a state."""
        elevation, east, north, twist = self._parts(state)
        s, f, share = self._s, self._turn, self._share
        east0, north0, twist0 = (s * east + f * north) * share, (s * north - f * east) * share, twist / s
        supply = (
            self._mass @ elevation
            + self._east.T @ (self._flow * east0)
            + self._north.T @ (self._flow * north0)
            + self._twist.T @ (self._twist_flow * twist0)
        )
        new = self._factors.solve(supply)
        slope_east, slope_north = GRAVITY_M_S2 * (self._east @ new), GRAVITY_M_S2 * (self._north @ new)
        return np.concatenate(
            [
                new,
                east0 - (s * slope_east + f * slope_north) * share,
                north0 - (s * slope_north - f * slope_east) * share,
                twist0 - GRAVITY_M_S2 * (self._twist @ new) / s,
            ]
        )


def _at_cells(mesh: Mesh, weights: FloatArray) -> Any:
    """Matrix (n, n_free) that adds up the elevations at the corners of each cell."""
    n = len(mesh.cell)
    entries = np.tile(weights, n), (np.repeat(np.arange(n), 4), mesh.corner.ravel())
    return sparse.csr_array(entries, shape=(n, mesh.n_nodes))[:, : mesh.n_free]


def _mass(mesh: Mesh) -> Any:
    """Matrix of the free nodes that turns elevations into volumes."""
    data, none = np.zeros(len(mesh.indices), dtype=complex), np.zeros(len(mesh.cell), dtype=complex)
    add_pixels(
        mesh.corner,
        mesh.area_m2.astype(complex),
        none,
        none,
        none,
        np.zeros_like(mesh.sides),
        mesh.indptr,
        mesh.indices,
        data,
    )
    whole = sparse.csc_array((data.real, mesh.indices, mesh.indptr), shape=(mesh.n_nodes,) * 2)
    return whole[: mesh.n_free, : mesh.n_free]


def _refined(mesh: Mesh, friction_m_s: FloatArray, omega: complex, elevation: ComplexArray) -> FreeMode | None:
    """Mode near a frequency, by inverse iteration with its own matrix; None where that leads elsewhere."""
    first = omega
    right, left = elevation / np.linalg.norm(elevation), elevation.conj() / np.linalg.norm(elevation)
    for _ in range(_STEPS):
        factors = factorise(mesh, omega, friction_m_s)
        slope = _slope(mesh, friction_m_s, omega)
        for _ in range(2):
            right, left = _unit(factors.solve(slope @ right)), _unit(factors.solve(slope.T @ left, "T"))
        step = _newton_step(mesh, friction_m_s, omega, slope, left, right)
        omega -= step
        if abs(step) < _CHANGE * abs(omega):
            break
    if omega.real <= 0 or omega.imag >= 0 or abs(omega - first) > 0.05 * abs(first):
        return None
    return _driven(factors, slope, omega, left, right)


def _unit(vector: ComplexArray) -> ComplexArray:
    return vector / np.linalg.norm(vector)


def _free_matrix(mesh: Mesh, omega: complex, friction_m_s: FloatArray) -> Any:
    matrix = wave_matrix(mesh, omega, friction_m_s)
    return matrix[: mesh.n_free, : mesh.n_free] if mesh.is_held else matrix


def _slope(mesh: Mesh, friction_m_s: FloatArray, omega: complex) -> Any:
    """Derivative of the matrix by the frequency: a central difference, whose error is some 1e-9 of it."""
    step = 1e-4 * abs(omega)
    return (_free_matrix(mesh, omega + step, friction_m_s) - _free_matrix(mesh, omega - step, friction_m_s)) / (
        2 * step
    )


def _newton_step(
    mesh: Mesh, friction_m_s: FloatArray, omega: complex, slope: Any, left: ComplexArray, right: ComplexArray
) -> complex:
    """How far the frequency at which the matrix has no inverse lies below `omega`."""
    return complex((left @ (_free_matrix(mesh, omega, friction_m_s) @ right)) / (left @ (slope @ right)))


def _driven(factors: Factors, slope: Any, omega: complex, left: ComplexArray, right: ComplexArray) -> FreeMode:
    """Mode scaled to what it adds to the response to a unit edge tide at its own period."""
    mesh = factors.mesh
    drive = left @ np.asarray(factors.supply.sum(axis=1)).ravel()
    free = right * drive / (left @ (slope @ right)) / (-1j * omega.imag)
    elevation = np.concatenate([free, np.zeros(mesh.n_nodes - mesh.n_free, dtype=complex)])
    at_cells = abs(elevation[mesh.corner].mean(axis=1)) ** 2
    response = float(np.sqrt((at_cells * mesh.area_m2).sum() / mesh.area_m2.sum()))
    return FreeMode(omega=omega, elevation=elevation, response=response, participation=1.0)
