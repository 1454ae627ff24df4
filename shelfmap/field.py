"""The 2-D response of a region: every wave, the tide fitted to gauges, natural modes, curves of gain against period."""

import logging
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import KDTree

from shelfmap.edgetide import MOST_SHAPES, EdgeFit, edge_shapes, fit_edge
from shelfmap.errors import FieldError
from shelfmap.freemodes import FreeMode, free_modes
from shelfmap.gauges import Gauges
from shelfmap.geodesy import positions_m
from shelfmap.longwave import currents, factorise, floored_friction, memory_bytes
from shelfmap.mesh import Mesh, make_mesh
from shelfmap.settings import FieldSettings, Settings
from shelfmap.waters import Waters
from shelfmap.waves import Wave, waves_of
from shelfmap.workers import Mapped

__all__ = ["CellWave", "Field", "Points", "Spectrum", "nearest_cells", "solve_field"]

_LOG = logging.getLogger(__name__)

ComplexArray = NDArray[np.complex128]
FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Lorentz's linearisation of the quadratic drag of a harmonic current, r = 8 / (3 pi) Cd U (from memory).
LORENTZ: Final = 8.0 / (3.0 * np.pi)
#: Currents of weather and of waves not asked for, m/s: drag does not vanish where the tide does.
BACKGROUND_M_S: Final = 0.1
#: Friction follows the currents until it changes by less than this, root mean square of the ratio's logarithm; and at
#: most so many times.
FRICTION_CHANGE: Final = 0.02
MOST_TURNS: Final = 25
#: Where the wave is as slow as the Earth turns, and friction weak, the current is a small difference of large numbers:
#: it is left empty where |s^2 + f^2| is below this share of the square of the wave's frequency.
NEAR_INERTIAL: Final = 0.03
#: Gauges that all have less than this, metres, say nothing of the edge tide.
LEAST_TIDE_M: Final = 1e-6
#: Points of a curve of gain against period.
CURVE_POINTS: Final = 60
#: Unit of `memory_gb`.
_GB: Final = 1e9


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CellWave:
    """One wave in every cell of the region, n cells; complex, the angle is the lag.

    Parameters
    ----------
    wave : Wave
        Which one.
    unit : (n,) array
        Elevation over the same edge tide all along the open edge: over its elevation where it is held, over twice the
        wave coming in where it lets waves out.
    unit_east, unit_north : (n,) array
        Current in answer to an edge tide of 1 m, m/s; NaN near the latitude where the wave is inertial.
    tide, tide_east, tide_north : (n,) array, optional
        Elevation, metres, its angle the Greenwich phase lag, and current, m/s, of the tide itself, where it is known.
    fit : EdgeFit, optional
        How it was fitted, to the gauges in reach in their order.
    """

    wave: Wave
    unit: ComplexArray
    unit_east: ComplexArray
    unit_north: ComplexArray
    tide: ComplexArray | None = None
    tide_east: ComplexArray | None = None
    tide_north: ComplexArray | None = None
    fit: EdgeFit | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Points:
    """Places where a curve of gain against period is wanted."""

    name: NDArray[np.object_]
    """(q,) what each is called."""
    lon_deg: FloatArray
    """(q,) longitude, degrees."""
    lat_deg: FloatArray
    """(q,) latitude, degrees."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Spectrum:
    """Response at points against period: gain over a unit edge tide."""

    points: Points
    """The q points."""
    period_h: FloatArray
    """(p,) periods, hours."""
    unit: ComplexArray
    """(p, q) elevation over the edge tide at each point; NaN where no cell is in reach."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Field:
    """The 2-D response of a region."""

    waters: Waters
    mesh: Mesh
    friction_m_s: FloatArray
    """(n,) linear friction used in each cell."""
    waves: tuple[CellWave, ...]
    modes: tuple[FreeMode, ...]
    gauges: Gauges | None
    gauge_cell: IntArray
    """(g,) cell of each gauge; -1 where none is in reach."""
    gauge_away_m: FloatArray
    """(g,) distance of each gauge from its cell, or from the nearest one, metres."""
    spectrum: Spectrum | None
    remarks: tuple[str, ...]

    def on_map(self, values: NDArray[np.float64]) -> FloatArray:
        """Values of the cells (n,) as a map (n_rows, n_cols), NaN on land."""
        out = np.full(self.waters.depth_m.shape, np.nan)
        out.flat[self.mesh.cell] = values
        return out


def solve_field(
    waters: Waters,
    settings: Settings,
    gauges: Gauges | None = None,
    *,
    points: Points | None = None,
    mapped: Mapped = map,
) -> Field:
    """Response of the waters of a region to every wave asked for.

    Parameters
    ----------
    waters : Waters
        The region.
    settings : Settings
        Of which `response` names the waves, rotation and friction, and `field` says the rest.
    gauges : Gauges, optional
        Tide at gauges; the edge tide of each constituent that they have is fitted to them.
    points : Points, optional
        Where gain against period is wanted.
    mapped : Mapped
        Runs over the waves.

    Raises
    ------
    FieldError
        If the solution would take more memory than `field.memory_gb`, or a matrix has no inverse.
    """
    chosen = settings.field or FieldSettings()
    _check_size(waters, chosen)
    mesh = make_mesh(waters, rotation=settings.response.rotation, held=chosen.edge == "held")
    shapes = edge_shapes(mesh)
    waves = waves_of(settings)
    cell, away_m, in_reach = _places(mesh, gauges, settings.gauges.reach_km * 1e3)
    jobs = _Jobs(mesh, shapes, waves, chosen, gauges, cell[in_reach], in_reach)
    friction, remarks = _settled_friction(jobs, settings, mapped)
    done = tuple(mapped(_answer, jobs.of(waves, friction)))
    modes = free_modes(mesh, friction, chosen.mode_period_h, chosen.modes, mapped=mapped) if chosen.modes else []
    return Field(
        waters=waters,
        mesh=mesh,
        friction_m_s=friction,
        waves=done,
        modes=tuple(modes),
        gauges=gauges,
        gauge_cell=np.where(in_reach, cell, -1),
        gauge_away_m=away_m,
        spectrum=_spectrum(mesh, friction, chosen, points, settings.gauges.reach_km * 1e3, mapped),
        remarks=(*waters.remarks, *remarks),
    )


def nearest_cells(mesh: Mesh, lon_deg: FloatArray, lat_deg: FloatArray) -> tuple[IntArray, FloatArray]:
    """Cell of water nearest to each point, as a place in `Mesh.cell`, and how far its centre is, metres."""
    centre = positions_m(mesh.node_lon_deg, mesh.node_lat_deg)[mesh.corner].mean(axis=1)
    away_m, cell = KDTree(centre).query(positions_m(lon_deg, lat_deg))
    return np.asarray(cell, dtype=np.int64), np.asarray(away_m)


def _places(mesh: Mesh, gauges: Gauges | None, reach_m: float) -> tuple[IntArray, FloatArray, NDArray[np.bool_]]:
    """Cell of each gauge, how far it is, and whether that is in reach."""
    if gauges is None:
        return np.empty(0, dtype=np.int64), np.empty(0), np.empty(0, dtype=bool)
    cell, away_m = nearest_cells(mesh, gauges.lon_deg, gauges.lat_deg)
    return cell, away_m, away_m <= reach_m


def _check_size(waters: Waters, chosen: FieldSettings) -> None:
    """Refuse a region that would take too much memory, before any of it is taken: a cell has about one unknown."""
    count = int(np.count_nonzero(~np.isnan(waters.depth_m)))
    needed_gb = memory_bytes(count, MOST_SHAPES) / _GB
    if needed_gb <= chosen.memory_gb:
        return
    cell_km = np.sqrt(waters.step_x_m * waters.step_y_m) / 1e3
    fits = cell_km * np.ceil(np.sqrt(1.1 * needed_gb / chosen.memory_gb))  # cells are joined in whole numbers
    raise FieldError(
        f"field: {count:,} unknowns in cells of {cell_km:.3g} km would take about {needed_gb:.1f} GB, more than "
        f"field.memory_gb = {chosen.memory_gb:g}; set field.cell_km = {fits:.3g}, take a smaller field.box, "
        "or allow more"
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Job:
    """One wave to be solved; travels to workers."""

    mesh: Mesh
    wave: Wave
    friction: FloatArray
    shapes: FloatArray
    gauge_cell: IntArray
    observed: ComplexArray | None
    """At the gauges in reach."""
    edge_m: float | None
    """Amplitude all along the edge, where it is given."""


@dataclass(frozen=True, slots=True)
class _Jobs:
    """What all waves have in common."""

    mesh: Mesh
    shapes: FloatArray
    waves: tuple[Wave, ...]
    chosen: FieldSettings
    gauges: Gauges | None
    gauge_cell: IntArray
    in_reach: NDArray[np.bool_]

    def observed(self, wave: Wave) -> ComplexArray | None:
        """Tide at the gauges in reach; None where none of them has it, or all say that there is none."""
        if self.gauges is None or wave.name not in self.gauges.constituents:
            return None
        seen = self.gauges.constants(wave.name)[self.in_reach]
        return seen if (abs(seen) > LEAST_TIDE_M).any() else None  # False for NaN

    def known(self) -> list[Wave]:
        """Waves whose tide at the edge is known."""
        return [w for w in self.waves if self.observed(w) is not None or w.name in self.chosen.edge_tide_m]

    def of(self, waves: Sequence[Wave], friction: FloatArray) -> Iterator[_Job]:
        """Jobs of some waves."""
        for wave in waves:
            yield _Job(
                mesh=self.mesh,
                wave=wave,
                friction=friction,
                shapes=self.shapes,
                gauge_cell=self.gauge_cell,
                observed=self.observed(wave),
                edge_m=self.chosen.edge_tide_m.get(wave.name),
            )


def _answer(job: _Job) -> CellWave:
    """Solve one wave: a pure function of its job."""
    mesh, omega = job.mesh, job.wave.omega_rad_s
    uniform = np.ones((len(mesh.edge_node), 1), dtype=complex)
    wanted = uniform if job.observed is None else np.hstack([uniform, job.shapes])
    elevation = factorise(mesh, omega, job.friction).elevation(wanted)
    unit = _in_cells(mesh, elevation[:, 0], omega, job.friction)
    tide, fit = None, None
    if job.observed is not None:
        fit = fit_edge(elevation[:, 1:][mesh.corner[job.gauge_cell]].mean(axis=1), job.observed)
        tide = _in_cells(mesh, elevation[:, 1:] @ fit.amplitude, omega, job.friction)
    elif job.edge_m is not None:
        tide = tuple(job.edge_m * part for part in unit)
    east_north = {} if tide is None else {"tide": tide[0], "tide_east": tide[1], "tide_north": tide[2]}
    return CellWave(wave=job.wave, unit=unit[0], unit_east=unit[1], unit_north=unit[2], fit=fit, **east_north)


def _in_cells(mesh: Mesh, elevation: ComplexArray, omega: float, friction: FloatArray) -> tuple[ComplexArray, ...]:
    """Elevation at the centres of the cells, and east and north part of the current there, where it can be told."""
    s = floored_friction(mesh, friction) - 1j * omega
    is_inertial = abs(s * s + mesh.coriolis_rad_s**2) < NEAR_INERTIAL * omega**2
    flow = (np.where(is_inertial, np.nan, part) for part in currents(mesh, elevation, omega, friction))
    return elevation[mesh.corner].mean(axis=1), *flow


def _settled_friction(jobs: _Jobs, settings: Settings, mapped: Mapped) -> tuple[FloatArray, list[str]]:
    """Linear friction of each cell: that of the settings, or what drag makes of the currents once it has settled."""
    friction = np.full(len(jobs.mesh.cell), settings.response.friction_m_s)
    known = jobs.known()
    if jobs.chosen.drag is None or not known:
        return friction, [f"friction {settings.response.friction_m_s:g} m/s everywhere"]
    friction = np.maximum(friction, LORENTZ * jobs.chosen.drag * BACKGROUND_M_S)
    change, turn = np.inf, 0
    while change > FRICTION_CHANGE and turn < MOST_TURNS:
        turn += 1
        speed = np.full(len(friction), BACKGROUND_M_S**2)
        for done in mapped(_answer, jobs.of(known, friction)):
            if done.tide_east is not None and done.tide_north is not None:
                speed += np.nan_to_num(abs(done.tide_east) ** 2 + abs(done.tide_north) ** 2)
        wanted = LORENTZ * jobs.chosen.drag * np.sqrt(speed)
        change = float(np.sqrt(np.mean(np.log(wanted / friction) ** 2)))
        friction = np.sqrt(friction * wanted)
        _LOG.info("friction, turn %d: changes by %.1f %%", turn, 100 * change)
    low, middle, high = np.percentile(1e3 * friction, (5, 50, 95))
    names = ", ".join(wave.name for wave in known)
    return friction, [
        f"friction from drag {jobs.chosen.drag:g} and currents of {names}, settled to {change:.1%} in {turn} turns: "
        f"{low:.2f}, {middle:.2f}, {high:.2f} mm/s at 5, 50 and 95 % of the cells"
    ]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _PeriodJob:
    mesh: Mesh
    period_h: float
    friction: FloatArray
    cell: IntArray


def _at_points(job: _PeriodJob) -> ComplexArray:
    """Elevation over a unit edge tide at cells, one period."""
    omega = float(2 * np.pi / (job.period_h * 3600))
    edge = np.ones(len(job.mesh.edge_node), dtype=complex)
    elevation = factorise(job.mesh, omega, job.friction).elevation(edge)
    return np.asarray(elevation[job.mesh.corner[job.cell]].mean(axis=1))


def _spectrum(
    mesh: Mesh,
    friction: FloatArray,
    chosen: FieldSettings,
    points: Points | None,
    reach_m: float,
    mapped: Mapped,
) -> Spectrum | None:
    """Curves of gain against period at points, as far as they are in reach of the water."""
    if chosen.spectrum_h is None or points is None:
        return None
    period_h = np.geomspace(*chosen.spectrum_h, CURVE_POINTS)
    cell, away_m = nearest_cells(mesh, points.lon_deg, points.lat_deg)
    jobs = (_PeriodJob(mesh=mesh, period_h=float(period), friction=friction, cell=cell) for period in period_h)
    unit = np.stack(list(mapped(_at_points, jobs)))
    return Spectrum(points=points, period_h=period_h, unit=np.where(away_m <= reach_m, unit, np.nan))
