"""Settings drawn at random from their own schema, then spoilt: clean words or a sound output, in time.

`SHELFMAP_FUZZ=5000 python -m pytest tests/test_fuzz_settings.py` draws as many instead of some dozens.
"""

import os
import re
import shutil

import pytest
from hypothesis import HealthCheck, given
from hypothesis import settings as hypothesis_settings
from utils_fuzz import assert_plain, assert_sound, from_schema, invoke, mutated, toml_text
from utils_pipeline import SHELF, small_coast

from shelfmap.errors import SettingsError
from shelfmap.rasters import write_geotiff
from shelfmap.settings import Settings
from shelfmap.synthetic import straight_coast

SCHEMA = Settings.model_json_schema()
EXAMPLES = int(os.environ.get("SHELFMAP_FUZZ", "0"))
BOUNDED = {"deadline": None, "derandomize": not EXAMPLES, "suppress_health_check": list(HealthCheck)}

LEAST_SPACING_KM = 0.5

CONTENTS = mutated(from_schema(SCHEMA, SCHEMA["$defs"]))


@pytest.fixture(scope="module")
def grid(tmp_path_factory):
    """A coast of 90 km in 12 x 30 cells."""
    tiny = straight_coast(270.0, 40.0, SHELF, cell=0.1, shape=(12, 30))
    return write_geotiff(
        tmp_path_factory.mktemp("fuzz") / "g.tif", tiny.elevation_m, x0=tiny.x0, y0=tiny.y0, dx=tiny.dx, dy=tiny.dy,
        crs=tiny.crs,
    )  # fmt: skip


def completed(content, grid):
    """Content on a grid that is there, quick unless it says otherwise."""
    base = {
        "grid": {"path": str(grid), "positive": "up"},
        "coast": {"generalise_km": 40.0},
        "transects": {"spacing_km": 40.0, "length_km": 200.0},
    }
    for name, table in base.items():
        given_table = content.get(name, {})
        content[name] = {**table, **given_table} if isinstance(given_table, dict) else given_table
    return content


def unhurried(content):
    """The same with no more than some hundred stations: legal spacings down to 1 m take their time, 2 ms a station."""
    table = content["transects"]
    spacing = table.get("spacing_km") if isinstance(table, dict) else None
    if isinstance(spacing, int | float) and 0.001 <= spacing < LEAST_SPACING_KM:
        table["spacing_km"] = LEAST_SPACING_KM
    return content


@hypothesis_settings(max_examples=EXAMPLES or 300, **BOUNDED)
@given(content=CONTENTS)
def test_settings_are_taken_or_refused_in_plain_words(content):
    content = completed(content, "dem.tif")
    try:
        Settings.from_dict(content, folder="/data")
    except SettingsError as error:
        assert_plain(str(error))
        first, *faults = str(error).split("\n")
        assert re.fullmatch(r"settings: \d+ setting\(s\) to mend", first)
        assert faults
        for fault in faults:
            assert re.match(r"  \S.*: \S", fault), fault
            assert len(fault) < 600, fault


@hypothesis_settings(max_examples=EXAMPLES or 40, **BOUNDED)
@given(content=CONTENTS)
def test_a_run_ends_in_plain_words_or_with_a_sound_output(content, grid, tmp_path_factory):
    folder = tmp_path_factory.mktemp("run")
    (folder / "s.toml").write_text(toml_text(unhurried(completed(content, grid))), encoding="utf-8")
    out = folder / "out.gpkg"
    result = invoke("screen", folder / "s.toml", "--output", out)
    assert sorted(path.name for path in folder.iterdir()) == (["out.gpkg"] * (result.exit_code == 0)) + ["s.toml"]
    if result.exit_code == 0:
        assert_sound(out)
    else:
        assert result.stdout == ""
        assert re.search(r"^Error: \S", result.stderr, re.MULTILINE), result.stderr
    shutil.rmtree(folder)


def test_more_stations_than_a_run_can_hold_are_refused_with_the_spacing_that_does(tmp_path, write_grid):
    content = {"grid": {"path": str(write_grid(small_coast())), "positive": "up"}, "transects": {"spacing_km": 0.001}}
    (tmp_path / "s.toml").write_text(toml_text(content), encoding="utf-8")
    said = invoke("screen", tmp_path / "s.toml", codes=(1,)).stderr
    assert "transects.spacing_km = 0.001 would put 2.9e+05 stations on 291 km of coast, of 100000 at most; give" in said
    content["transects"]["spacing_km"] = 1e-9
    (tmp_path / "s.toml").write_text(toml_text(content), encoding="utf-8")
    assert "greater than or equal to 0.001" in invoke("screen", tmp_path / "s.toml", codes=(1,)).stderr
