r"""Natural modes of a region: free motion that decays by friction and by the waves it lets out.

A mode is a complex frequency at which the matrix of a wave has no inverse. Where to look is told by the response to an
edge tide over a range of periods: rational functions of the frequency through it (AAA: Nakatsukasa, Sete & Trefethen
2018, SIAM J. Sci. Comput. 40, A1494-A1522, from memory) have their poles near the modes that an edge tide drives.
Inertial oscillations and ponds, which it does not, never come up. Each mode is then refined by inverse iteration with
the matrix at its own frequency, whose left vector says how strongly an edge tide drives it.
"""

import warnings
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import AAA
from scipy.linalg import qr

from shelfmap.longwave import Factors, factorise, wave_matrix
from shelfmap.mesh import Mesh
from shelfmap.workers import Mapped

__all__ = ["FreeMode", "free_modes"]

ComplexArray = NDArray[np.complex128]
FloatArray = NDArray[np.float64]

#: Modes are looked for from half the period wanted to twice it, at so many frequencies.
SPAN: Final = 2.0
FREQUENCIES: Final = 32
#: Cells whose response is looked at, and those of them, the most independent, that rational functions are put through.
_CELLS: Final = 20_000
_SERIES: Final = 10
#: Poles refined for each mode wanted, at most.
_TRIED: Final = 5
#: Poles more strongly damped than this have no period to speak of.
_LEAST_Q: Final = 0.5
#: A mode that takes part in the response less than this share of the most responsive one is left out.
LEAST_SHARE: Final = 0.02
#: Steps of inverse iteration, and the change of frequency that ends them: the next one would be some 1e-12.
_STEPS: Final = 8
_CHANGE: Final = 1e-6
#: A pole is no mode if refining moves it by more than this; poles nearer to each other than that, and modes nearer than
#: the last, are one: among inertial oscillations a mode comes up several times.
_FARTHEST: Final = 0.05
_SAME_POLE: Final = 0.01
_SAME: Final = 0.003
#: A pole counts if it gives this share of the largest response of its place, and a mode if it raises the water
#: somewhere by this share of the edge tide.
_LEAST_RESIDUE: Final = 0.02
LEAST_PEAK: Final = 0.5


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


def free_modes(
    mesh: Mesh, friction_m_s: FloatArray, period_h: float, count: int, *, mapped: Mapped = map
) -> list[FreeMode]:
    """Natural modes that an edge tide drives, from half a period to twice it, the most responsive first.

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
    mapped : Mapped
        Runs over the frequencies looked at.
    """
    poles = _poles(mesh, friction_m_s, period_h, mapped)[: _TRIED * count]
    refined = mapped(_refined, (_Job(mesh=mesh, omega=pole, friction_m_s=friction_m_s) for pole in poles))
    found = [mode for mode in refined if mode is not None and abs(mode.elevation).max() >= LEAST_PEAK]
    ranked: list[FreeMode] = []
    for mode in sorted(found, key=lambda mode: -mode.response):
        if all(abs(mode.omega - other.omega) > _SAME * abs(mode.omega) for other in ranked):
            ranked.append(mode)
    return [
        replace(mode, participation=mode.response / ranked[0].response)
        for mode in ranked[:count]
        if mode.response >= LEAST_SHARE * ranked[0].response
    ]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Job:
    """A frequency to look at; travels to workers."""

    mesh: Mesh
    omega: complex
    friction_m_s: FloatArray


def _respond(job: _Job) -> ComplexArray:
    """Elevation of cells all over the region in answer to a unit edge tide."""
    n = len(job.mesh.cell)
    cell = np.unique(np.linspace(0, n - 1, min(_CELLS, n)).astype(np.int64))
    edge = np.ones(len(job.mesh.edge_node), dtype=complex)
    elevation = factorise(job.mesh, job.omega, job.friction_m_s).elevation(edge)
    return np.asarray(elevation[job.mesh.corner[cell]].mean(axis=1))


def _poles(mesh: Mesh, friction_m_s: FloatArray, period_h: float, mapped: Mapped) -> list[complex]:
    """Poles of the response in the range looked at, those that matter most first."""
    middle = 2 * np.pi / (period_h * 3600.0)
    omega = middle * np.geomspace(1 / SPAN, SPAN, FREQUENCIES)
    jobs = (_Job(mesh=mesh, omega=float(each), friction_m_s=friction_m_s) for each in omega)
    response = np.stack(list(mapped(_respond, jobs)))
    _, _, order = qr(response, mode="economic", pivoting=True)
    poles: list[tuple[float, complex]] = []
    for series in response[:, order[:_SERIES]].T:
        # as many terms as there may be, for friction leaves it no rational function; poles of noise drop out by residue
        with warnings.catch_warnings():
            warnings.filterwarnings("ignore", "AAA failed to converge", RuntimeWarning)
            rational = AAA(omega / middle, series, rtol=1e-8, max_terms=FREQUENCIES // 2)
        share = abs(rational.residues() / rational.poles().imag) / abs(series).max()
        poles += [(float(weight), complex(middle * pole)) for weight, pole in zip(share, rational.poles(), strict=True)]
    kept: list[complex] = []
    for share, pole in sorted(poles, key=lambda pair: -pair[0]):
        in_range = omega[0] < pole.real < omega[-1] and 0 < -2 * _LEAST_Q * pole.imag < pole.real
        if share >= _LEAST_RESIDUE and in_range and all(abs(pole - o) > _SAME_POLE * abs(o) for o in kept):
            kept.append(pole)
    return kept


def _refined(job: _Job) -> FreeMode | None:
    """Mode near a frequency, by inverse iteration with its own matrix; None where that leads elsewhere."""
    mesh, friction_m_s, omega = job.mesh, job.friction_m_s, job.omega
    first = omega
    right = left = np.ones(mesh.n_free, dtype=complex)
    for _ in range(_STEPS):
        factors = factorise(mesh, omega, friction_m_s)
        slope = _slope(mesh, friction_m_s, omega)
        for _ in range(2):
            right, left = _unit(factors.solve(slope @ right)), _unit(factors.solve(slope.T @ left, "T"))
        step = complex((left @ (factors.matrix @ right)) / (left @ (slope @ right)))
        omega -= step
        if abs(step) < _CHANGE * abs(omega):
            break
        if not abs(omega - first) < _FARTHEST * abs(first):
            return None
    if omega.imag >= 0:
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


def _driven(factors: Factors, slope: Any, omega: complex, left: ComplexArray, right: ComplexArray) -> FreeMode:
    """Mode scaled to what it adds to the response to a unit edge tide at its own period."""
    mesh = factors.mesh
    drive = left @ np.asarray(factors.supply.sum(axis=1)).ravel()
    free = right * drive / (left @ (slope @ right)) / (-1j * omega.imag)
    elevation = np.concatenate([free, np.zeros(mesh.n_nodes - mesh.n_free, dtype=complex)])
    at_cells = abs(elevation[mesh.corner].mean(axis=1)) ** 2
    response = float(np.sqrt((at_cells * mesh.area_m2).sum() / mesh.area_m2.sum()))
    return FreeMode(omega=omega, elevation=elevation, response=response, participation=1.0)
