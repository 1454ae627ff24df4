"""The report says what a grid holds and whether it can be screened."""

import json
import re

import numpy as np
import pytest
from utils_grid import DATA, write_tif

from shelfmap import inspection
from shelfmap.inspection import inspect_grid
from shelfmap.settings import GridSettings


def report_of(path, **settings):
    return inspect_grid(GridSettings(path=path, **settings))


def mixed(tmp_path):
    values = np.array([[-40, -30, -20], [-10, 0, 5], [-99, -99, 12]], np.float32)
    return write_tif(tmp_path / "a.tif", values, nodata=-99, x0=4.0, y0=50.0, dx=0.1, dy=0.1)


def test_shares_and_range_count_every_cell_once(tmp_path):
    """Zero counts as land; the range is above the grid's own zero."""
    report = report_of(mixed(tmp_path))
    assert (report.sea_share, report.land_share, report.void_share) == (4 / 9, 3 / 9, 2 / 9)
    assert (report.lowest_m, report.highest_m) == (-40.0, 12.0)
    assert report.bytes_in_memory == 36
    assert report.bytes_on_disk == (tmp_path / "a.tif").stat().st_size
    assert report.can_screen
    assert report.reasons == ()


def test_level_shift_floods_land_but_not_the_range(tmp_path):
    report = report_of(mixed(tmp_path), level_shift_m=6.0)
    assert (report.sea_share, report.lowest_m, report.highest_m) == (6 / 9, -40.0, 12.0)


def test_blocks_do_not_change_the_report(tmp_path, monkeypatch):
    at_once = report_of(DATA / "etopo1_iberia_biscay.tif")
    monkeypatch.setattr(inspection, "_BLOCK_CELLS", 1000)
    assert report_of(DATA / "etopo1_iberia_biscay.tif") == at_once


@pytest.mark.parametrize(
    ("values", "settings", "reason"),
    [
        ([[5, 9], [2, 3]], {"positive": "up"}, "No cell lies below the water, with values taken as positive up"),
        ([[5, 9], [2, 3]], {"positive": "down"}, "No cell is land.*take a larger region; where missing cells"),
        ([[5, 5], [5, 5]], {"positive": "down", "nodata": 5}, "All cells are missing: check grid.nodata"),
        ([[5, 7], [5, 7]], {"positive": "down", "nodata": 5}, "No cell is land"),
    ],
)
def test_grids_that_cannot_be_screened_say_why(tmp_path, values, settings, reason):
    report = report_of(write_tif(tmp_path / "a.tif", np.array(values, np.int16)), **settings)
    assert not report.can_screen
    assert len(report.reasons) == 1
    assert report.lines()[-1].strip() == report.reasons[0]
    assert re.search(reason, report.reasons[0])


def test_missing_cells_can_stand_for_the_land(tmp_path):
    path = write_tif(tmp_path / "a.tif", np.array([[5, 7], [5, 7]], np.int16), nodata=5)
    report = report_of(path, positive="down", void_is_land=True)
    assert report.can_screen
    assert report.void_share == 0.5
    assert "missing 50.0% (counts as land)" in "\n".join(report.lines())


def test_fill_value_missed_by_the_sample_is_found_by_the_count(tmp_path):
    """Opening looks at scattered windows of a large grid; counting sees every cell."""
    values = np.tile(np.linspace(-4000, 900, 2600).astype(np.int16), (2600, 1))
    values[300, 300] = -32768
    path = write_tif(tmp_path / "a.tif", values, dx=0.01, dy=0.01, compress="deflate")
    report = report_of(path)
    assert not report.can_screen
    assert "Elevation -32768 m is none on Earth" in report.reasons[0]


def test_report_is_json_without_nan(tmp_path):
    report = report_of(write_tif(tmp_path / "a.tif", np.full((2, 2), 5, np.int16), nodata=5), positive="up")
    fields = json.loads(json.dumps(report.as_dict(), allow_nan=False))
    assert fields["lowest_m"] is None
    assert fields["void_share"] == 1.0
    assert fields["box_deg"] == [-0.5, -0.5, 1.5, 1.5]


@pytest.mark.real
def test_lines_for_people_on_a_real_window():
    lines = report_of(DATA / "etopo1_us_southeast.tif").lines()
    text = "\n".join(lines)
    assert "WGS 84 (EPSG:4326), from the file" in text
    assert "151 rows by 181 columns" in text
    assert "elevations, positive up: deepest value -6060 m against highest 1560 m" in text
    assert "screening    possible" in text
