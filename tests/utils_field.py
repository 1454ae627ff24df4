"""Basins to solve in two dimensions: exactly plane ones for closed forms, real lattices, and orders of convergence."""

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from shelfmap.constants import GRAVITY_M_S2
from shelfmap.longwave import solve_wave
from shelfmap.mesh import Mesh, make_mesh
from shelfmap.waters import SIDES, Waters

G = GRAVITY_M_S2
M2 = 1.405189e-4
#: Friction at its floor, m/s, which stands for none: closed forms take it into account.
NONE = 1e-6
#: Metres from the equator and a meridian: small basins there are all but plane.
PLANE = "+proj=laea +lat_0=0 +lon_0=0 +ellps=WGS84 +units=m"
Complex = NDArray[np.complex128]
Float = NDArray[np.float64]


@dataclass(frozen=True)
class Basin:
    """A mesh on a plane, with its nodes and the centres of its cells in metres."""

    mesh: Mesh
    x_m: Float
    y_m: Float
    cell_x_m: Float
    cell_y_m: Float

    @property
    def edge(self) -> tuple[Float, Float]:
        """Places of the nodes of the open edge."""
        return self.x_m[self.mesh.edge_node], self.y_m[self.mesh.edge_node]

    def solve(self, wave: Callable[[Float, Float], Complex], omega: float, friction: float = NONE) -> Complex:
        """Elevation at the nodes for an edge tide that is a function of place."""
        return solve_wave(self.mesh, omega, friction, np.asarray(wave(*self.edge), dtype=complex))

    def at(self, x_m: float, y_m: float) -> int:
        """Node at a place."""
        distance = np.hypot(self.x_m - x_m, self.y_m - y_m)
        assert distance.min() < 1e-6
        return int(distance.argmin())


def waters_of(
    depth_m: Float,
    open_sides: Iterable[str] | NDArray[np.bool_] = SIDES,
    *,
    crs: str = PLANE,
    x0: float = 0.0,
    y0: float = 0.0,
    dx: float = 1e3,
    dy: float = 1e3,
) -> Waters:
    """Waters of depths (NaN on land), open at those sides of the rectangle or of the cells (4, n_rows, n_cols)."""
    depth = np.asarray(depth_m, dtype=float)
    is_open = np.zeros((4, *depth.shape), dtype=bool)
    if isinstance(open_sides, np.ndarray):
        is_open |= open_sides
    else:
        for side in open_sides:
            at = {"south": np.s_[0, :], "north": np.s_[-1, :], "west": np.s_[:, 0], "east": np.s_[:, -1]}[side]
            is_open[SIDES.index(side)][at] = True
    return Waters(
        crs_wkt=crs, x0=x0, y0=y0, dx=dx, dy=dy, n_rows=depth.shape[0], n_cols=depth.shape[1], wraps=False,
        depth_m=depth, is_open=is_open & ~np.isnan(depth),
    )  # fmt: skip


def plane_basin(
    depth_m: Float,
    dx_m: float,
    dy_m: float | None = None,
    *,
    open_sides: Iterable[str] | NDArray[np.bool_] = SIDES,
    held: bool = True,
    coriolis: float = 0.0,
    turned_deg: float = 0.0,
    skew: float = 0.0,
) -> Basin:
    """Basin on an f-plane without any curvature: metric and Coriolis parameter of its mesh are put in by hand.

    Its south-west corner is the origin. Rows run `turned_deg` north of east; with `skew` a step along a column also
    goes so many steps along the row, and cells are parallelograms.
    """
    depth_m = np.asarray(depth_m, dtype=float)
    dy_m = dx_m if dy_m is None else dy_m
    mesh = make_mesh(waters_of(depth_m, open_sides, dx=dx_m, dy=dy_m), held=held)
    turn = np.radians(turned_deg)
    turning = np.array([[np.cos(turn), np.sin(turn)], [-np.sin(turn), np.cos(turn)]])
    south = np.array([dx_m, 0.0]) @ turning
    west = np.array([skew * dx_m, dy_m]) @ turning
    row, col = np.divmod(mesh.cell, depth_m.shape[1])
    node = np.empty((mesh.n_nodes, 2))
    for corner, (north, east) in enumerate(((0, 0), (0, 1), (1, 1), (1, 0))):
        node[mesh.corner[:, corner]] = np.stack([col + east, row + north], axis=1)
    first, last = node[mesh.edge_node[mesh.side_ends.T]]
    along = np.linalg.norm((last - first) @ np.stack([south, west]), axis=1)
    # how much shorter a stair of the edge counts stays as it is
    mapped = np.sqrt(mesh.sides[mesh.side_cell, np.where(first[:, 1] == last[:, 1], 0, 2)])
    n = len(mesh.cell)
    mesh = replace(
        mesh,
        coriolis_rad_s=np.full(n, coriolis),
        area_m2=np.full(n, south[0] * west[1] - south[1] * west[0]),
        sides=np.tile([south @ south, south @ west, west @ west], (n, 1)),
        south_side=np.tile(south, (n, 1)),
        west_side=np.tile(west, (n, 1)),
        side_m=mesh.side_m * along / mapped,
    )
    place, centre = node @ np.stack([south, west]), np.stack([col + 0.5, row + 0.5], axis=1) @ np.stack([south, west])
    return Basin(mesh, *place.T, *centre.T)


def orders(errors: Sequence[float]) -> Float:
    """Order of convergence between successive doublings of the cells."""
    return np.log2(np.asarray(errors[:-1]) / np.asarray(errors[1:]))


def slowed(omega: complex, depth_m: Float | float, friction: float = NONE) -> Complex:
    """s = r / h - i omega."""
    return np.asarray(friction / np.asarray(depth_m) - 1j * omega)


def wavenumber(omega: complex, depth_m: float, friction: float = NONE, coriolis: float = 0.0) -> complex:
    """Wavenumber of a plane wave over an even bed, 1/m, in the upper half of the plane."""
    s = slowed(omega, depth_m, friction)
    k = complex(np.sqrt(1j * omega * (s * s + coriolis**2) / (G * depth_m * s) + 0j))
    return k if k.imag >= 0 else -k


def exact_currents(
    east_slope: Complex, north_slope: Complex, omega: float, depth_m: float, friction: float, coriolis: float
) -> tuple[Complex, Complex]:
    """Currents of a slope of the surface, by elimination from the equations of motion."""
    s = complex(slowed(omega, depth_m, friction))
    turning = np.linalg.inv(np.array([[s, -coriolis], [coriolis, s]]))
    east, north = -G * (turning @ np.stack([east_slope, north_slope]))
    return east, north


def assert_converges(errors: Sequence[float], finest: float) -> None:
    """Errors on successive doublings fall at second order or faster, to below `finest`."""
    assert len(errors) >= 3
    assert (orders(errors) >= 1.9).all(), (errors, orders(errors))
    assert errors[-1] < finest, errors
