"""Elevations are told from depths by words, then by values, and never by guessing."""

import math

import numpy as np
import pytest
from utils_grid import write_nc, write_tif

from shelfmap.errors import GridError
from shelfmap.grid import open_grid
from shelfmap.settings import GridSettings
from shelfmap.vertical import check_unit, datum_words, decide_positive


@pytest.mark.parametrize(
    ("texts", "positive", "why"),
    [
        ({"positive": " Down "}, "down", 'attribute positive "down"'),
        ({"positive": "up", "long_name": "depth"}, "up", 'attribute positive "up"'),
        ({"standard_name": "height_above_mean_sea_level"}, "up", 'standard_name "height_above_mean_sea_level"'),
        ({"standard_name": "sea_floor_depth_below_geoid"}, "down", 'standard_name "sea_floor_depth_below_geoid"'),
        ({"long_name": "Depths in metres"}, "down", 'long_name "Depths in metres"'),
        ({"band description": "ETOPO elevation"}, "up", 'band description "ETOPO elevation"'),
        ({"variable": "altitude", "long_name": "z"}, "up", 'variable "altitude"'),
        ({"vertical system": "EGM2008 height"}, "up", 'vertical system "EGM2008 height"'),
        ({"vertical system": "MSL depth"}, "down", 'vertical system "MSL depth"'),
    ],
)
def test_words_decide_and_are_quoted(texts, positive, why):
    assert decide_positive(texts, 1.0, 5.0, "dem") == (positive, why)


@pytest.mark.parametrize(
    ("lowest", "highest"), [(-6000, 5100), (0, 6000), (-6000, -1), (10, 20), (-100, 4000), (math.nan, math.nan)]
)
def test_values_that_do_not_tell_are_not_guessed(lowest, highest):
    with pytest.raises(GridError, match=r'cannot tell elevations .*set grid\.positive = "up" .* or "down"'):
        decide_positive({"long_name": "depth or height", "units": "m"}, lowest, highest, "dem")


def test_deepest_a_fifth_larger_than_highest_is_the_limit():
    assert decide_positive({}, -120.0, 100.0, "dem") == ("up", "deepest value -120 m against highest 100 m")
    with pytest.raises(GridError, match=r"-119\.9 to 100"):
        decide_positive({}, -119.9, 100.0, "dem")


def test_contradicting_words_are_both_named():
    with pytest.raises(GridError, match=r'long_name "water depth", variable "elevation"'):
        decide_positive({"long_name": "water depth", "variable": "elevation"}, -5000, 10, "dem")


@pytest.mark.parametrize("unit", ["ft", "Feet", "fathoms", "km", "centimeters", "us-ft", "US survey foot"])
def test_other_lengths_than_metres_are_refused(unit):
    with pytest.raises(GridError, match=f"values are in '{unit}', but must be metres"):
        check_unit(unit, "dem")


@pytest.mark.parametrize("unit", ["m", "metre", "Meters", "", "m above MSL"])
def test_metres_and_unknown_words_pass(unit):
    check_unit(unit, "dem")


def test_datum_words_are_found_once_and_latitude_is_no_datum():
    texts = {
        "z#note": "referred to LAT",
        "note": "referred to LAT",
        "lat#units": "degrees_north",
        "lat#long_name": "latitude",
        "vertical system": "NAVD88 height",
        "standard_name": "height_above_mean_sea_level",
    }
    assert datum_words(texts) == (
        "standard_name: height_above_mean_sea_level",
        "vertical system: NAVD88 height",
        "z#note: referred to LAT",
    )


def test_words_in_files_reach_the_decision(tmp_path):
    values = np.array([[5, 900], [20, 300]], np.int16)
    down = {"positive": "down"}, {"standard_name": "sea_floor_depth_below_sea_surface"}, {"names": ("depth",)}
    for k, attributes in enumerate(down):
        path = write_nc(tmp_path / f"{k}.nc", values, [1.0, 2.0], [3.0, 4.0], **{"names": ("z",), **attributes})
        source = open_grid(GridSettings(path=path))
        assert source.positive == "down"
        assert source.read(0, 2, 0, 2).depth_m[0, 1] == 900
    path = write_tif(tmp_path / "a.tif", values, description="Depth below MSL", tags={"VERTICAL_DATUM": "MSL"})
    source = open_grid(GridSettings(path=path))
    assert (source.positive, source.positive_why) == ("down", 'band description "Depth below MSL"')
    assert "VERTICAL_DATUM: MSL" in source.vertical_words


def test_vertical_part_of_a_compound_system_tells(tmp_path):
    path = write_tif(tmp_path / "a.tif", np.array([[5, 9], [2, 3]], np.int16), crs="EPSG:4326+3855")
    source = open_grid(GridSettings(path=path))
    assert (source.positive, source.positive_why) == ("up", 'vertical system "EGM2008 height"')
    assert source.vertical_words == ("vertical system: EGM2008 height",)


def test_setting_wins_over_every_word_and_is_objected_to(tmp_path, caplog):
    path = write_nc(tmp_path / "a.nc", np.array([[5, 9], [2, 3]], np.int16), [1.0, 2.0], [3.0, 4.0], positive="up")
    source = open_grid(GridSettings(path=path, positive="down"))
    assert source.positive == "down"
    assert source.positive_why == 'set by grid.positive, although attribute positive "up" speaks for up'
    assert "grid.positive = 'down', although" in caplog.text
