"""Natural modes of a region against closed forms, a published one, and direct solutions."""

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
from scipy.optimize import newton
from utils_field import G, orders, plane_basin
from utils_grid import DATA

from shelfmap.freemodes import free_modes
from shelfmap.grid import open_grid
from shelfmap.longwave import solve_wave, wave_matrix
from shelfmap.mesh import make_mesh
from shelfmap.settings import FieldSettings, Settings
from shelfmap.waters import open_waters

LENGTH_M, DEPTH_M, FRICTION = 300e3, 40.0, 5e-4


def bay(n, *, held=True, depth_m=DEPTH_M, length_m=LENGTH_M):
    """Bay of even depth, closed but for its west."""
    return plane_basin(np.full((3, n), depth_m), length_m / n, open_sides=["west"], held=held)


def found(basin, period_h, count=6, friction=FRICTION, **more):
    return free_modes(basin.mesh, np.full(len(basin.mesh.cell), friction), period_h, count, **more)


def damped(wavenumber, depth_m=DEPTH_M, friction=FRICTION):
    """Free frequency of a wavenumber with friction: omega^2 + i omega r / h = g h k^2."""
    rate = friction / depth_m
    return np.sqrt(G * depth_m * wavenumber**2 - rate**2 / 4) - 1j * rate / 2


def test_modes_of_a_bay_with_a_held_mouth_converge_at_second_order_or_better():
    """Quarter and three quarters of a wave, damped by friction: 16.8 and 5.6 h."""
    exact = [damped((2 * n + 1) * np.pi / (2 * LENGTH_M)) for n in range(2)]
    errors = []
    for n in (20, 40, 80):
        modes = sorted(found(bay(n), 9.7), key=lambda mode: mode.omega.real)
        errors.append(max(abs(mode.omega - wanted) / abs(wanted) for mode, wanted in zip(modes, exact, strict=True)))
    assert (orders(errors) >= 1.9).all()
    assert errors[-1] < 1e-4


def test_a_bay_that_radiates_decays_as_fast_as_its_step_says():
    """Shelf of 100 m beside 4000 m: the pole of a step shelf, Q = (pi / 4) / atanh(sqrt(h1 / h2)) = 4.93."""
    h1, h2, length_m = 100.0, 4000.0, 350e3
    floor = 1e-6  # friction is never less

    def excess(omega):
        """Flow off the shelf less that which the deep sea takes, for a wave that is 1 high at the head."""
        s = floor / h1 - 1j * omega
        k = np.sqrt(1j * omega * s / (G * h1))
        return G * h1 * k * np.sin(k * length_m) / s - np.sqrt(G * h2) * np.cos(k * length_m)

    frictionless = np.sqrt(G * h1) / length_m * (np.pi / 2 - 1j * np.arctanh(np.sqrt(h1 / h2)))
    exact = newton(excess, frictionless, tol=1e-16)
    assert exact == pytest.approx(frictionless, rel=1e-4)
    errors = []
    for n in (35, 70, 140):
        depth = np.where(np.arange(n + n // 7) < n // 7, h2, h1)  # the deep sea lies in the west
        basin = plane_basin(np.tile(depth, (3, 1)), length_m / n, open_sides=["west"], held=False)
        modes = found(basin, 12.4, friction=floor)
        errors.append(min(abs(mode.omega - exact) / abs(exact) for mode in modes))
    assert (orders(errors) >= 1.9).all()
    assert errors[-1] < 1e-5


def test_rotating_basin_against_newton_on_its_own_determinant():
    """A gulf with rotation has no closed form: its matrix must be singular there, which a coarse basin can show."""
    basin = plane_basin(np.full((6, 12), 50.0), 25e3, open_sides=["west"], held=True, coriolis=1.2e-4)
    modes = found(basin, 12.0)
    assert modes
    for mode in modes:
        n = basin.mesh.n_free
        matrix = wave_matrix(basin.mesh, mode.omega, FRICTION)[:n, :n].toarray()
        values = np.linalg.svd(matrix, compute_uv=False)
        assert values[-1] < 1e-8 * values[0]
        assert values[-2] > 1e-5 * values[0]


def test_modes_add_up_to_the_response_near_resonance():
    """At its own period the response is the first mode's within what all others give, a tenth."""
    basin = bay(40)
    mode = max(found(basin, 16.8), key=lambda mode: mode.response)
    direct = solve_wave(basin.mesh, mode.omega.real, FRICTION)
    head = abs(direct).argmax()
    assert mode.elevation[head] == pytest.approx(direct[head], rel=0.1)
    assert abs(mode.elevation[basin.mesh.edge_node]).max() == 0  # the mouth is held


def test_the_most_responsive_comes_first_and_workers_change_nothing():
    basin = bay(40)
    modes = found(basin, 8.0)
    assert [mode.participation for mode in modes] == sorted((mode.participation for mode in modes), reverse=True)
    assert modes[0].participation == 1.0
    with ThreadPoolExecutor(2) as pool:
        again = found(basin, 8.0, mapped=pool.map)
    assert [mode.omega for mode in again] == [mode.omega for mode in modes]


def test_no_mode_where_there_is_none_and_no_more_than_wanted():
    assert found(bay(20), 500.0) == []
    assert len(found(bay(40), 6.0, count=1)) == 1


def gulf_modes(**chosen):
    """Modes of the Gulf of Maine window that swing most in the gulf, with default settings but for those."""
    friction = chosen.pop("friction", 1e-3)
    settings = Settings.from_dict({"grid": {"path": str(DATA / "etopo1_gulf_of_maine.tif")}})
    waters = open_waters(open_grid(settings.grid), FieldSettings(**chosen))
    mesh = make_mesh(waters, held=chosen.get("edge") == "held")
    modes = free_modes(mesh, np.full(len(mesh.cell), friction), 12.42, 12)
    for mode in modes:
        node = abs(mode.elevation).argmax()
        lon, lat = mesh.node_lon_deg[node], mesh.node_lat_deg[node]
        # land between 64 and 63.5 W parts the Bay of Fundy from another sea
        if -71 < lon < -64 and 41 < lat < 45.7:
            yield mode


@pytest.mark.real
def test_gravest_mode_of_the_gulf_of_maine_is_the_published_one(record_property):
    """13.3 h: Garrett 1972, Nature 238, 441; within 10 %, and Q from 3 to 7. Measured: 12.27 h, 6.4."""
    gravest = max(gulf_modes(), key=lambda mode: mode.period_h)
    record_property("period_h", gravest.period_h)
    record_property("q", gravest.q)
    assert gravest.period_h == pytest.approx(13.3, rel=0.1)
    assert 3 < gravest.q < 7


@pytest.mark.real
@pytest.mark.parametrize("chosen", [{"friction": 2e-3}, {"least_depth_m": 2.0}, {"edge": "held"}], ids=str)
def test_what_the_gulf_of_maine_owes_to_friction_depth_and_edge(chosen, record_property):
    """The period hardly moves, Q does: 2 mm/s halves it, a held edge raises it by half. Cells of 20 km, to be quick."""
    gravest = max(gulf_modes(cell_km=20.0, **chosen), key=lambda mode: mode.period_h)
    record_property("period_h", gravest.period_h)
    record_property("q", gravest.q)
    assert gravest.period_h == pytest.approx(12.27, rel=0.06)
