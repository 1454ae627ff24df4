"""The waters of a region: cells, means over blocks, where it is open, what is left out and said; what is refused."""

import numpy as np
import pytest
import shapely
from utils_grid import write_tif

from shelfmap.errors import FieldError
from shelfmap.geodesy import Projection
from shelfmap.grid import open_grid
from shelfmap.mesh import make_mesh
from shelfmap.settings import FieldSettings, GridSettings
from shelfmap.waters import SIDES, open_waters

N = np.nan
ENCLOSED = {"open_depth_m": 0.0, "least_depth_m": 0.0, "shallowest_m": 0.0}


@pytest.fixture
def sea(tmp_path):
    """Source of depths in rows from the south; degrees from 0, 0 unless placed elsewhere."""
    written = []

    def make(depth_m, **place):
        values = -np.asarray(depth_m, dtype=np.float32)
        path = write_tif(tmp_path / f"sea{len(written)}.tif", values, **place)
        written.append(path)
        return open_grid(GridSettings(path=path, positive="up"))

    return make


def waters(source, region=None, open_area=None, **settings):
    polygons = [None if shapes is None else np.array(shapes, dtype=object) for shapes in (region, open_area)]
    return open_waters(source, FieldSettings(**settings), region=polygons[0], open_area=polygons[1])


def opened(found):
    """Number of open sides by name."""
    return {name: int(is_open.sum()) for name, is_open in zip(SIDES, found.is_open, strict=True) if is_open.any()}


def bay(n_rows=6, n_cols=8, land=1):
    """Sea of 300 m in the east, land round the rest."""
    depth = np.full((n_rows, n_cols), 300.0)
    depth[:land], depth[-land:], depth[:, :land] = -10.0, -10.0, -10.0
    return depth


# ---- the region


def test_a_bay_is_open_where_it_meets_the_edge(sea):
    found = waters(sea(bay()))
    assert opened(found) == {"east": 4}
    assert found.is_open[1, 1:-1, -1].all()
    assert (~np.isnan(found.depth_m) == (bay() > 0)).all()
    assert found.remarks == ()
    assert (found.x0, found.y0, found.dx, found.dy) == (0.0, 0.0, 1.0, 1.0)


def test_all_sea_is_open_all_round(sea):
    found = waters(sea(np.full((4, 5), 300.0)))
    assert opened(found) == {"south": 5, "east": 4, "north": 5, "west": 4}
    make_mesh(found, held=True)


def test_a_box_holds_the_cells_whose_centres_it_holds(sea):
    depth = 300.0 + np.arange(60.0).reshape(6, 10)
    found = waters(sea(depth), box=(1.6, 0.5, 7.0, 4.0))
    np.testing.assert_array_equal(found.depth_m, depth[1:5, 2:8])
    assert (found.x0, found.y0) == (2.0, 1.0)


def test_a_box_may_reach_beyond_the_grid(sea):
    depth = np.full((6, 10), 300.0)
    for box in [(-20.0, -20.0, 30.0, 30.0), (-180.0, -90.0, 180.0, 90.0), (5.0, -5.0, 200.0, 50.0)]:
        found = waters(sea(depth), box=box)
        assert found.depth_m.shape == (6, 5 if box[0] == 5.0 else 10)


@pytest.mark.parametrize("turn", [-360.0, 0.0, 360.0])
def test_a_box_on_another_turn_of_the_globe(sea, turn):
    depth = 300.0 + np.arange(60.0).reshape(6, 10)
    found = waters(sea(depth, x0=175.0, dx=1.0), box=(178.0 + min(turn, 0), 0.5, 181.0 + min(turn, 0), 4.0))
    np.testing.assert_array_equal(found.depth_m, depth[1:5, 3:7])


def test_a_box_across_180_of_a_grid_round_the_globe(sea):
    """Columns from -180: the box from 170 to -170 is one stretch of water, with lattice and depths across the seam."""
    depth = np.tile(np.arange(36.0) * 10 + 500, (5, 1))
    source = sea(depth, x0=-175.0, dx=10.0, y0=-20.0, dy=10.0)
    assert source.wraps
    found = waters(source, box=(150.0, -20.0, -150.0, 20.0))
    np.testing.assert_array_equal(found.depth_m[0], [*depth[0, -3:], *depth[0, :3]])
    lon, _ = found.lonlat()
    np.testing.assert_allclose(lon[0] % 360, [155, 165, 175, 185, 195, 205])
    assert opened(found) == {"south": 6, "east": 5, "north": 6, "west": 5}
    assert not found.wraps


def test_a_box_across_180_of_a_grid_that_ends_there(sea):
    """Not round the globe: the box keeps what of it the grid has on one side of 180."""
    source = sea(np.full((5, 20), 300.0), x0=-180.0)
    assert waters(source, box=(170.0, 0.0, -175.5, 4.0)).depth_m.shape == (5, 5)


@pytest.mark.parametrize(
    ("crs", "lon", "lat"), [("EPSG:32631", 3.0, 50.0), ("EPSG:3413", -45.0, 89.0), ("EPSG:3571", 180.0, 70.0)]
)
def test_a_box_on_a_projected_map(sea, crs, lon, lat):
    """Cells whose centres lie in it, and no others; its edge has stairs."""
    x, y = Projection(crs).from_lonlat(lon, lat)
    source = sea(np.full((80, 80), 300.0), crs=crs, x0=float(x) - 2e5, y0=float(y) - 2e5, dx=5e3, dy=5e3)
    box = (lon - 1.5, lat - 0.8, lon + 1.5 if lon < 178 else lon + 1.5 - 360, lat + 0.6)
    found = waters(source, box=box)
    away = (found.lonlat()[0] - lon + 180) % 360 - 180
    held = (abs(away) <= 1.5) & (found.lonlat()[1] >= lat - 0.8) & (found.lonlat()[1] <= lat + 0.6)
    assert held.sum() > 30
    np.testing.assert_array_equal(~np.isnan(found.depth_m), held)
    everywhere = np.array(source.lonlat_of(*np.meshgrid(np.arange(80), np.arange(80))))
    away = (everywhere[0] - lon + 180) % 360 - 180
    assert ((abs(away) <= 1.5) & (everywhere[1] >= lat - 0.8) & (everywhere[1] <= lat + 0.6)).sum() == held.sum()


@pytest.mark.parametrize("turn", [0.0, -360.0])
def test_a_polygon_is_the_region(sea, turn):
    """On whatever turn it is drawn; only its surroundings are read. Land beyond its edge closes it, water does not."""
    depth = np.full((20, 30), 300.0)
    depth[:, 12] = -5.0
    region = [shapely.box(5.5 + turn, 4.5, 11.5 + turn, 9.5)]
    found = waters(sea(depth), region)
    assert found.depth_m.shape == (7, 8)
    assert np.isfinite(found.depth_m).sum() == 5 * 6
    assert (found.x0, found.y0) == (5.0, 4.0)
    assert opened(found) == {"south": 6, "north": 6, "west": 5}


def test_polygons_on_both_sides_of_180(sea):
    """Split there as drawn layers are: one stretch of water, no edge along 180."""
    source = sea(np.full((10, 360), 300.0), x0=-179.5)
    found = waters(source, [shapely.MultiPolygon([shapely.box(176, 1.5, 180, 5.5), shapely.box(-180, 1.5, -177, 5.5)])])
    assert np.isfinite(found.depth_m).sum() == 7 * 4
    assert opened(found) == {"south": 7, "east": 4, "north": 7, "west": 4}
    assert found.depth_m.shape == (6, 9)


def test_a_polygon_and_a_box_hold_what_both_hold(sea):
    found = waters(sea(np.full((20, 30), 300.0)), [shapely.Point(10, 10).buffer(5)], box=(10.0, 0.0, 29.0, 19.0))
    lon, lat = found.lonlat()
    np.testing.assert_array_equal(~np.isnan(found.depth_m), np.hypot(lon - 10, lat - 10) < 4.99)
    assert found.depth_m.shape == (20, 20)


# ---- blocks


def test_blocks_are_means_of_their_water_where_half_of_them_is(sea):
    depth = np.full((4, 8), 300.0)
    depth[0, 0:2] = -50.0  # half of the first block, left out of its mean
    depth[2:, 0:2] = -50.0
    depth[3, 0] = 800.0  # a quarter: land
    depth[2:, 2:4] = [[400.0, 500.0], [600.0, -1.0]]
    depth[0:2, 4:6] = N
    depth[0:2, 6:8] = [[N, N], [700.0, 500.0]]
    source = sea(depth, dx=0.01, dy=0.01)
    found = waters(source, cell_km=2.2)
    np.testing.assert_allclose(found.depth_m, [[300, 300, N, 600], [N, 500, 300, 300]])
    assert (found.x0, found.y0, found.dx, found.dy) == pytest.approx((0.005, 0.005, 0.02, 0.02))
    assert "1 cells without a depth taken as land" in found.remarks


def test_blocks_follow_the_sides_of_the_grids_cells(sea):
    """At 60 degrees cells are twice as high as wide: 1 by 2 of them; a remainder in the north and east falls away."""
    found = waters(sea(np.full((9, 9), 300.0), y0=60.0, dx=0.01, dy=0.01), cell_km=1.1)
    assert found.depth_m.shape == (9, 4)
    assert found.step_x_m == pytest.approx(found.step_y_m, rel=0.01)


# ---- open sides


def test_only_stretches_that_get_deep_are_open(sea):
    """Water at the edge joined with deep water at the edge is open with it; a shallow mouth elsewhere is a coast."""
    depth = bay(8, 8)
    depth[3, 0] = 150.0  # a mouth in the west
    depth[1, -1] = 20.0  # beside 300 m in the east
    source = sea(depth)
    assert opened(waters(source)) == {"east": 6}
    assert opened(waters(source, open_depth_m=100.0)) == {"east": 6, "west": 1}
    assert opened(waters(source, open_sides=["west"])) == {"west": 1}
    assert opened(waters(source, open_sides=["east", "west"])) == {"east": 6, "west": 1}
    mouth = [shapely.box(-1, 2.6, 0, 3.4)]
    assert opened(waters(source, open_area=mouth)) == {"west": 1}
    assert opened(waters(source, open_area=[shapely.box(359, 2.6, 360, 3.4)])) == {"west": 1}
    assert opened(waters(source, open_area=[shapely.box(7.4, 0.0, 8, 3.4)])) == {"east": 3}


def test_ponds_and_diagonal_contacts_are_left_out(sea):
    depth = bay(8, 9)
    depth[:, 4] = -1.0
    depth[3, 4] = -1.0
    depth[1:4, 5] = -1.0
    depth[3, 4] = 40.0  # joins the west, and meets the east at a corner only
    found = waters(sea(depth))
    assert np.isnan(found.depth_m[:, :5]).all()
    assert found.remarks == ("19 cells of water that does not reach the open edge left out",)
    depth[4, 4] = 40.0
    assert waters(sea(depth)).remarks == ()


def test_remarks_count_what_was_done(sea):
    depth = bay(6, 8)
    depth[2, 3:5] = 1.0  # under 2 m: land
    depth[3, 3:6] = 5.0  # under 10 m: 10 m
    depth[4, 4] = N
    found = waters(sea(depth))
    assert found.remarks == (
        "2 cells shallower than field.shallowest_m = 2 m taken as land",
        "3 cells of 25 taken to be field.least_depth_m = 10 m deep",
        "1 cells without a depth taken as land",
    )
    assert np.isnan(found.depth_m[2, 3:5]).all()
    assert (found.depth_m[3, 3:6] == 10).all()
    assert waters(sea(bay()), **ENCLOSED).remarks == ()


def test_depth_zero_is_land_even_where_all_water_is_taken(sea):
    depth = bay()
    depth[2, 3] = 0.0
    assert np.isnan(waters(sea(depth), **ENCLOSED).depth_m[2, 3])


def test_a_single_wet_cell(sea):
    """Works where waves leave it; where every corner is held it is refused."""
    depth = np.full((3, 3), -10.0)
    depth[1, 2] = 300.0
    found = waters(sea(depth))
    assert opened(found) == {"east": 1}
    assert make_mesh(found).n_nodes == 4
    assert make_mesh(found, held=True).n_free == 2


# ---- refusals


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"open_depth_m": 500.0}, r"no open edge of 500 m or deeper .*deepest water there has 300 m.*larger field.box"),
        ({"open_sides": ["west"]}, "field.open_sides: the west side .* all land; the sides with water are east"),
        ({"box": (20.0, 0.0, 30.0, 5.0)}, "field.box = .* holds no centre of a cell of the grid, which covers"),
        ({"box": (3.2, 2.2, 3.4, 2.4)}, "field.box = .* holds no centre"),
        ({"box": (0.0, 0.0, 7.0, 0.4)}, "no water as deep as 2 m in the region"),
        ({"shallowest_m": 400.0}, "no water as deep as 400 m in the region; check field.box"),
        ({"box": (1.0, 1.0, 3.0, 3.0), "cell_km": 450.0}, "field.cell_km: .* does not fit into the region of 3 by 3"),
    ],
)
def test_refusals_say_what_to_do(sea, settings, words):
    with pytest.raises(FieldError, match=words):
        waters(sea(bay()), **settings)


def test_refusals_of_polygons(sea):
    source = sea(bay())
    with pytest.raises(FieldError, match=r"field.file's polygons .* holds no centre"):
        waters(source, [shapely.box(40, 40, 50, 50)])
    with pytest.raises(FieldError, match=r"field.file: its polygons hold no cell"):
        waters(source, [shapely.Polygon([(2.1, 2.1), (6.9, 2.4), (2.4, 6.9)])], box=(5.6, 3.6, 7, 5))
    with pytest.raises(FieldError, match=r"field.open_file: no water at the region's edge"):
        waters(source, open_area=[shapely.box(2, 2, 4, 4)])
    enclosed = bay()
    enclosed[:, -1] = -5
    with pytest.raises(FieldError, match=r"no water meets its edge"):
        waters(sea(enclosed))


def test_too_many_cells_are_refused_unread(sea, monkeypatch):
    monkeypatch.setattr("shelfmap.waters._CELL_BYTES", 1e8)
    with pytest.raises(FieldError, match=r"the region has 6 by 8 cells of the grid, more than the 40 that"):
        waters(sea(bay()))
    assert waters(sea(bay()), box=(3.0, 1.0, 7.0, 4.0)).depth_m.shape == (4, 5)
