"""Which water is sea: labels against one whole-grid labelling, whatever the tiles."""

import pickle

import numpy as np
import pytest
from scipy import ndimage
from utils_geometry import open_up, scene

from shelfmap.basins import Tile, Tiling, label_basins
from shelfmap.synthetic import SyntheticGrid


def mask_of(source, *, least_km2, least_enclosed_km2, tile_cells=1024, level_m=0.0, region=None):
    region = region or Tile(0, source.n_rows, 0, source.n_cols)
    tiling = Tiling.cut(source, region, tile_cells=tile_cells, tile_m=1e9)
    basins = label_basins(
        source, tiling, level_m=level_m, smallest_sea_m2=least_km2 * 1e6,
        smallest_enclosed_sea_m2=least_enclosed_km2 * 1e6,
    )  # fmt: skip
    return basins, basins.sea_mask(region)


def whole_grid_mask(water, cell_km2, least_km2, least_enclosed_km2):
    """One labelling of the whole grid: the twin of the tiled one."""
    labels, n = ndimage.label(water)
    edge = set(np.concatenate([labels[0], labels[-1], labels[:, 0], labels[:, -1]]).tolist())
    sea = np.zeros_like(water)
    for k in range(1, n + 1):
        cells = labels == k
        sea |= cells & (cells.sum() * cell_km2 >= (least_km2 if k in edge else least_enclosed_km2))
    return sea


@pytest.mark.parametrize("tile_cells", [8, 13, 37, 1024])
@pytest.mark.parametrize("seed", [1, 2])
def test_tiles_do_not_matter(write_grid, tile_cells, seed):
    """Random water of many winding basins: every cell as in one labelling. Thresholds stand off whole cell counts."""
    rng = np.random.default_rng(seed)
    noise = ndimage.gaussian_filter(rng.normal(size=(71, 93)), 1.2)
    grid = SyntheticGrid(
        elevation_m=np.where(noise > 0, 20.0, -20.0).astype(np.float32),
        x0=5e5, y0=5.5e6, dx=1000.0, dy=1000.0, crs="EPSG:32631", description="noise",
    )  # fmt: skip
    source = open_up(write_grid(grid))
    cell_km2 = source.step_x_m * source.step_y_m / 1e6
    least, least_enclosed = 30.5 * cell_km2, 90.5 * cell_km2
    _, mask = mask_of(source, least_km2=least, least_enclosed_km2=least_enclosed, tile_cells=tile_cells)
    expected = whole_grid_mask(grid.elevation_m < 0, cell_km2, least, least_enclosed)
    assert 0 < expected.sum() < (grid.elevation_m < 0).sum()
    np.testing.assert_array_equal(mask, expected)


def test_enclosed_water_needs_the_larger_area(write_grid):
    """A round lake of 30 km radius, 2827 km2, is sea from that area on and not above it."""
    path = write_grid(scene(lambda x, y: np.where(np.hypot(x, y + 60) < 30, -50.0, -5 * y)))
    source = open_up(path)
    with_lake, _ = mask_of(source, least_km2=500, least_enclosed_km2=2700)
    without, _ = mask_of(source, least_km2=500, least_enclosed_km2=2950)
    assert len(with_lake.areas_m2) == 2
    # cells of 4 km2 along a rim of 190 km: well within 3 %
    assert with_lake.areas_m2[1] / 1e6 == pytest.approx(np.pi * 30**2, rel=0.03)
    assert len(without.areas_m2) == 1


@pytest.mark.parametrize("tile_cells", [8, 1024])
def test_water_beside_missing_cells_may_go_on(write_grid, tile_cells):
    """A sea that ends at missing corners and not at the edge counts as open; a lake on land stays enclosed."""
    path = write_grid(
        scene(
            lambda x, y: np.where(
                np.abs(x) + np.abs(y) > 110, np.nan, np.where(np.hypot(x, y + 40) < 15, -5.0, -5 * y)
            ),
            n=121,
        )
    )
    basins, mask = mask_of(open_up(path), least_km2=500, least_enclosed_km2=1e5, tile_cells=tile_cells)
    assert len(basins.areas_m2) == 1
    assert mask[70, 60]
    assert not mask[40, 60]


def test_water_that_meets_at_a_corner_is_not_connected(write_grid):
    elevation = np.full((20, 20), 10.0, dtype=np.float32)
    elevation[5:10, 5:10] = elevation[10:15, 10:15] = -10.0
    grid = SyntheticGrid(
        elevation_m=elevation, x0=5e5, y0=5.5e6, dx=1000.0, dy=1000.0, crs="EPSG:32631", description="corner"
    )
    basins, _ = mask_of(open_up(write_grid(grid)), least_km2=1, least_enclosed_km2=1)
    assert len(basins.areas_m2) == 2


def globe(elevation):
    """World of 2-degree cells."""
    lon, lat = np.meshgrid(-179.0 + 2 * np.arange(180), -89.0 + 2 * np.arange(90))
    return SyntheticGrid(
        elevation_m=elevation(lon, lat).astype(np.float32),
        x0=-179.0, y0=-89.0, dx=2.0, dy=2.0, crs="EPSG:4326", description="globe",
    )  # fmt: skip


@pytest.mark.parametrize("tile_cells", [8, 50, 1024])
def test_a_sea_over_the_date_line_is_one(write_grid, tile_cells):
    """An enclosed sea from 160 E to 160 W of 4.8e6 km2 is one basin though the columns part it in two."""
    path = write_grid(globe(lambda lon, lat: np.where((np.abs(lon) > 160) & (np.abs(lat) < 10), -100.0, 100.0)))
    basins, mask = mask_of(open_up(path), least_km2=1e3, least_enclosed_km2=6e6, tile_cells=tile_cells)
    assert len(basins.areas_m2) == 1
    # (40 deg in radians) 2 sin(10 deg) R^2, the row centres at odd degrees make it exact to 1 %
    expected = np.radians(40) * 2 * np.sin(np.radians(10)) * 6371.0**2
    assert basins.areas_m2[0] / 1e6 == pytest.approx(expected, rel=0.01)
    assert mask.sum() == 20 * 10


def test_windows_run_over_the_seam(write_grid):
    source = open_up(write_grid(globe(lambda lon, lat: np.where(np.abs(lon) > 160, -100.0, 100.0))))
    basins, mask = mask_of(source, least_km2=1e3, least_enclosed_km2=1e3)
    window = basins.sea_mask(Tile(10, 20, 170, 190))
    np.testing.assert_array_equal(window, np.hstack([mask[10:20, 170:180], mask[10:20, 0:10]]))
    assert window.all()


def test_level_moves_the_water(write_grid):
    """At level 10 m the shore of a 5 m/km beach stands 2 km inland, one row of cells."""
    source = open_up(write_grid(scene(lambda x, y: -5.0 * y)))
    _, low = mask_of(source, least_km2=1, least_enclosed_km2=1)
    _, high = mask_of(source, least_km2=1, least_enclosed_km2=1, level_m=10.0)
    assert (high.sum(axis=0) - low.sum(axis=0) == 1).all()


def test_all_land_has_no_sea(write_grid):
    basins, mask = mask_of(open_up(write_grid(scene(lambda x, y: 0 * x + 5))), least_km2=0, least_enclosed_km2=0)
    assert len(basins.areas_m2) == 0
    assert not mask.any()


@pytest.mark.parametrize("tile_cells", [8, 50])
def test_part_of_the_labels_is_enough_for_a_window(write_grid, tile_cells):
    """What is sent to a worker: the tiles a window meets, over the seam too, and no others."""
    source = open_up(
        write_grid(globe(lambda lon, lat: 100 * np.sin(np.radians(7 * lon)) * np.cos(np.radians(9 * lat))))
    )
    basins, _ = mask_of(source, least_km2=1e5, least_enclosed_km2=1e6, tile_cells=tile_cells)
    for window in (Tile(10, 31, 170, 195), Tile(0, 9, -12, 3), Tile(80, 90, 40, 60)):
        part = pickle.loads(pickle.dumps(basins.near([window])))
        mask = basins.sea_mask(window)
        assert 0 < mask.sum() < mask.size
        assert part.may_hold_shore(window)
        np.testing.assert_array_equal(part.sea_mask(window), mask)
        np.testing.assert_array_equal(part.shore_mask(window), mask)
    with pytest.raises(KeyError):
        part.sea_mask(Tile(0, 90, 0, 180))


def test_windows_all_of_a_kind_hold_no_shore(write_grid):
    """Sea with missing cells and land with a lake; neither is a shore."""
    lake = lambda x, y: np.where(np.hypot(x, y + 60) < 10, -50.0, -5.0 * y)  # noqa: E731
    path = write_grid(scene(lambda x, y: np.where(np.hypot(x, y - 60) < 10, np.nan, lake(x, y))))
    basins, mask = mask_of(open_up(path), least_km2=500, least_enclosed_km2=1e4, tile_cells=30)
    for rows, is_sea in (((0, 50), False), ((70, 121), True)):
        assert basins.shore_mask(Tile(*rows, 0, 121)) is None
        assert mask[slice(*rows)].any() == is_sea
    assert basins.shore_mask(Tile(40, 80, 0, 121)) is not None
    assert not basins.may_hold_shore(Tile(0, 30, 0, 121))
