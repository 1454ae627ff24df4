"""Meshes: nodes at the corners of wet cells, split where two cells only touch; edges; what cells are on the ground."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import ndimage
from scipy.sparse.csgraph import connected_components
from utils_field import plane_basin, waters_of

from shelfmap.errors import FieldError
from shelfmap.geodesy import area_m2, distance_bearing
from shelfmap.longwave import wave_matrix
from shelfmap.mesh import EAST, NORTH, TWIST, make_mesh

N = np.nan
masks = st.integers(0, 2**32 - 1).map(lambda seed: np.random.default_rng(seed).random((7, 8)) < 0.6)


def meshed(wet, held=False, **more):
    return make_mesh(waters_of(np.where(wet, 50.0, N), **more), held=held)


@settings(max_examples=40, deadline=None)
@given(wet=masks)
def test_nodes_are_shared_through_water_only(wet):
    """Cells share nodes as they share sides, directly or through a third cell round the corner; else not."""
    if not wet.any():
        return
    mesh = meshed(wet)
    assert (mesh.cell == np.flatnonzero(wet)).all()
    assert sorted(set(mesh.corner.ravel().tolist())) == list(range(mesh.n_nodes))
    assert all(len(set(corners)) == 4 for corners in mesh.corner.tolist())
    row, col = np.nonzero(wet)
    of_cell = {place: set(nodes) for place, nodes in zip(zip(row, col, strict=True), mesh.corner.tolist(), strict=True)}
    for (r, c), nodes in of_cell.items():
        if (r, c + 1) in of_cell:
            assert len(nodes & of_cell[r, c + 1]) >= 2
        if (r + 1, c + 1) in of_cell:
            round_the_corner = (r, c + 1) in of_cell or (r + 1, c) in of_cell
            assert len(nodes & of_cell[r + 1, c + 1]) == round_the_corner
        if (r + 1, c - 1) in of_cell:
            round_the_corner = (r, c - 1) in of_cell or (r + 1, c) in of_cell
            assert len(nodes & of_cell[r + 1, c - 1]) == round_the_corner
    # as many separate waters as cells that share sides make
    matrix = wave_matrix(mesh, 1.4e-4, 1e-3)
    assert connected_components(abs(matrix))[0] == ndimage.label(wet)[1]


@settings(max_examples=20, deadline=None)
@given(wet=masks, held=st.booleans())
def test_pattern_holds_just_the_nodes_that_share_a_cell(wet, held):
    try:
        mesh = meshed(wet, held)
    except FieldError:
        return
    wanted = {(a, b) for nodes in mesh.corner.tolist() for a in nodes for b in nodes}
    columns = np.repeat(np.arange(mesh.n_nodes), np.diff(mesh.indptr))
    assert set(zip(mesh.indices.tolist(), columns.tolist(), strict=True)) == wanted
    assert len(mesh.indices) == len(wanted)
    for column in range(mesh.n_nodes):
        assert (np.diff(mesh.indices[mesh.indptr[column] : mesh.indptr[column + 1]]) > 0).all()


def test_a_held_edge_comes_last():
    """Numbers of free nodes first; the edge's nodes are those of its sides, shared ones once."""
    depth = np.full((4, 6), 50.0)
    depth[3, 5] = N  # land in the north-east: no open side there
    held, radiating = (plane_basin(depth, 1e3, open_sides=["east"], held=h) for h in (True, False))
    assert held.mesh.is_held
    assert held.mesh.n_free == held.mesh.n_nodes - 4
    assert held.mesh.edge_node.tolist() == list(range(held.mesh.n_free, held.mesh.n_nodes))
    assert not radiating.mesh.is_held
    assert radiating.mesh.n_free == radiating.mesh.n_nodes
    for basin in (held, radiating):
        mesh = basin.mesh
        x, y = basin.edge
        assert (x == 6e3).all()
        assert sorted(y) == [0.0, 1e3, 2e3, 3e3]
        assert mesh.side_m == pytest.approx(1e3)
        assert len(mesh.side_cell) == 3
        # the ends of a side are corners of its cell
        ends = mesh.edge_node[mesh.side_ends]
        assert all(set(pair) <= set(mesh.corner[cell]) for pair, cell in zip(ends, mesh.side_cell, strict=True))


@pytest.mark.parametrize("side", ["south", "east", "north", "west"])
def test_open_sides_lie_where_they_are_said_to(side):
    basin = plane_basin(np.full((3, 5), 50.0), 1e3, 2e3, open_sides=[side])
    x, y = basin.edge
    wanted = {"south": (y, 0.0), "north": (y, 6e3), "west": (x, 0.0), "east": (x, 5e3)}[side]
    assert (wanted[0] == wanted[1]).all()
    assert basin.mesh.side_m == pytest.approx(1e3 if side in {"south", "north"} else 2e3)
    assert len(basin.mesh.side_m) == (5 if side in {"south", "north"} else 3)


def test_stairs_of_the_edge_count_as_the_edge():
    """A diagonal edge of n steps is n sqrt 2 long, far from its ends; a spit open on both sides keeps its sides."""
    n = 60
    row, col = np.mgrid[:n, :n]
    wet = col <= row
    is_open = np.zeros((4, n, n), dtype=bool)
    is_open[0] = is_open[1] = wet & (col == row)
    mesh = make_mesh(waters_of(np.where(wet, 50.0, N), is_open))
    middle = mesh.side_m[(mesh.node_lat_deg[mesh.edge_node][mesh.side_ends].mean(axis=1) > 0.05)][:20]
    assert middle == pytest.approx(1e3 / np.sqrt(2), rel=1e-3)
    spit = make_mesh(waters_of(np.full((9, 1), 50.0), ["west", "east"]))
    assert spit.side_m == pytest.approx(1e3, rel=1e-3)


def test_all_on_a_held_edge_is_refused():
    with pytest.raises(FieldError, match="every corner of its water lies on the open edge"):
        make_mesh(waters_of([[50.0, 50.0]]), held=True)
    single = make_mesh(waters_of([[N, 50.0, N]], ["south"]), held=True)
    assert (single.n_free, single.n_nodes) == (2, 4)


def test_meshes_are_read_only():
    mesh = meshed(np.ones((2, 2), dtype=bool))
    with pytest.raises(ValueError, match="read-only"):
        mesh.depth_m[0] = 1.0


# ---- on the ground

PLACES = {
    "geographic": {"crs": "EPSG:4326", "x0": 5.0, "y0": 58.0, "dx": 0.02, "dy": 0.01},
    "southern": {"crs": "EPSG:4326", "x0": 170.0, "y0": -45.0, "dx": 0.02, "dy": 0.02},
    "across 180": {"crs": "EPSG:4326", "x0": 179.97, "y0": 10.0, "dx": 0.02, "dy": 0.02},
    "utm": {"crs": "EPSG:32631", "x0": 7e5, "y0": 6.2e6},
    "conic": {"crs": "+proj=lcc +lat_1=40 +lat_2=60 +lat_0=50 +lon_0=-30", "x0": 1e6, "y0": 4e5},
    "stretched": {"crs": "EPSG:3857", "x0": 1e6, "y0": 9e6},
    "polar": {"crs": "EPSG:3413", "x0": -2e5, "y0": 3e5},
    "beside the pole": {"crs": "EPSG:3413", "x0": -1e3, "y0": 2e3},
}


@pytest.mark.parametrize("name", PLACES)
def test_cells_have_their_size_and_direction_on_the_ground(name):
    """Areas and sides of the ellipsoid to 1e-4, by geodesics; sides point where their bearings do."""
    waters = waters_of(np.full((3, 4), 50.0), **PLACES[name])
    mesh = make_mesh(waters)
    for i, cell in enumerate(mesh.cell):
        row, col = divmod(int(cell), 4)
        lon, lat = waters.lonlat_of(col + np.array([-0.5, 0.5, 0.5, -0.5]), row + np.array([-0.5, -0.5, 0.5, 0.5]))
        assert mesh.area_m2[i] == pytest.approx(area_m2(lon, lat), rel=1e-4)
        middles = waters.lonlat_of(col + np.array([-0.5, 0.5, 0, 0]), row + np.array([0, 0, -0.5, 0.5]))
        for first, side, square in ((0, mesh.south_side[i], 0), (2, mesh.west_side[i], 2)):
            (lon0, lon1), (lat0, lat1) = (angle[first : first + 2] for angle in middles)
            length, _ = distance_bearing(lon0, lat0, lon1, lat1)
            assert np.hypot(*side) == pytest.approx(float(length), rel=1e-4)
            assert mesh.sides[i, square] == pytest.approx(float(length) ** 2, rel=2e-4)
            centre = waters.lonlat_of(col, row)
            _, bearing = distance_bearing(*centre, lon1, lat1)
            assert side / np.hypot(*side) == pytest.approx(
                [np.sin(np.radians(bearing)), np.cos(np.radians(bearing))], abs=2e-3
            )


@pytest.mark.parametrize("name", [name for name in PLACES if name != "beside the pole"])
def test_gradients_are_east_and_north_whatever_the_map(name):
    """Of the latitude: 0 east, one over the meridian's radius north."""
    mesh = make_mesh(waters_of(np.full((3, 4), 50.0), **PLACES[name]))
    east, north = mesh.gradient(mesh.node_lat_deg.astype(complex))
    metres, _ = distance_bearing(0.0, mesh.node_lat_deg.mean() - 0.05, 0.0, mesh.node_lat_deg.mean() + 0.05)
    assert north.real == pytest.approx(0.1 / float(metres), rel=2e-3)
    assert abs(east).max() < 2e-3 * abs(north).max()


def test_patterns_of_the_corners():
    """A plane has its slopes at the centre and no pattern + - + -, on cells that lean too."""
    basin = plane_basin(np.full((3, 3), 50.0), 1e3, 2e3, turned_deg=25.0, skew=0.4)
    plane = (2e-3 * basin.x_m - 3e-3 * basin.y_m + 1).astype(complex)
    east, north = basin.mesh.gradient(plane)
    assert east == pytest.approx(2e-3)
    assert north == pytest.approx(-3e-3)
    assert abs(plane[basin.mesh.corner] @ TWIST).max() < 1e-12
    assert EAST @ NORTH == EAST @ TWIST == NORTH @ TWIST == 0
