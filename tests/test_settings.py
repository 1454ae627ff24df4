"""Settings: every key checked, every fault named with its cure, the schema as committed."""

import json
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st

from shelfmap.errors import SettingsError
from shelfmap.settings import Settings, markdown_settings

SCHEMA = Settings.model_json_schema()


def read(**tables):
    grid_table = {"path": "dem.tif"} | tables.pop("grid", {})
    return Settings.from_dict({"grid": grid_table, **tables}, folder="/data")


@pytest.mark.parametrize(
    ("table", "key", "allowed", "refused"),
    [
        ("grid", "band", [1, 7], [0, -1, 1.5, "one"]),
        ("grid", "positive", ["auto", "up", "down"], ["UP", "", 1]),
        ("grid", "level_shift_m", [-500, 0, 500], [-501, 501, float("inf"), float("nan")]),
        ("grid", "nodata", [-9999, 0.5], ["none", float("nan")]),
        ("grid", "void_is_land", [True, False], ["perhaps", 2]),
        ("coast", "level_m", [-500, 500], [-501, 501, "high"]),
        ("coast", "generalise_km", [0.1, 500], [0, -1, 501]),
        ("coast", "smallest_island_km2", [0, 1e6], [-1]),
        ("coast", "smallest_sea_km2", [0, 1e6], [-1]),
        ("coast", "smallest_enclosed_sea_km2", [0, 1e6], [-1]),
        (
            "coast",
            "box",
            [[-10, 35, -5, 45], [170, -50, -170, -40]],
            [[1, 2, 3], [0, 5, 1, 5], [3, 0, 3, 1], [0, 0, 400, 1]],
        ),
        ("transects", "spacing_km", [0.1, 1000], [0, 1001]),
        ("transects", "length_km", [1, 3000], [0, 3001]),
        ("transects", "step_km", [0.01, 100], [0, 101, 121]),
        ("shelf_break", "slope", [0.001, 0.99], [0, 1]),
        ("shelf_break", "confirm_slope", [0.001, 0.99], [0, 1]),
        ("shelf_break", "smoothing_km", [0.1, 200], [0, 201]),
        ("shelf_break", "sustain_km", [0.1, 200], [0, 201]),
        ("shelf_break", "shallowest_m", [0, 549], [-1, 550]),
        ("shelf_break", "deepest_m", [21, 1000], [0, 20, 1001]),
        ("shelf_break", "least_contrast", [1, 10], [0.9]),
        ("shelf_break", "ocean_m", [550, 4000], [0, 549]),
        ("response", "constituents", [["M2"], ["m2", "k1"]], [["M9"], ["M2", "m2"], [], "M2", [2]]),
        ("response", "periods_h", [[], [0.02, 1000]], [[0.01], [1001], [1, 1]]),
        ("response", "rotation", [True, False], ["perhaps"]),
        ("response", "friction_m_s", [0, 0.1], [-1e-9, 0.2]),
        ("response", "deep_m", [500, 11_000, "deepest"], [499, 11_001, "deep", None, []]),
        ("depth_error", "fixed_m", [0, 1000], [-1, 1001]),
        ("depth_error", "per_depth", [0, 1], [-0.1, 1.1]),
        ("depth_error", "correlation_km", [0.1, 2000], [0, 2001]),
        ("gauges", "amplitude_column", ["{name}_amp", "H_{name}"], ["amp", "{name}{name}", "", 3]),
        ("gauges", "phase_column", ["{name}_phase", "g_{name}"], ["phase", "{name}{name}", 3]),
        ("gauges", "amplitude_unit", ["m", "cm", "mm", "ft"], ["metres", 1]),
        ("gauges", "reach_km", [0, 1000], [-1, 1001]),
        (
            "field",
            "box",
            [[-10, 35, -5, 45], [170, -50, -170, -40]],
            [[1, 2, 3], [0, 5, 1, 5], [3, 0, 3, 1], [0, 0, 400, 1]],
        ),
        ("field", "cell_km", [0.01, 500], [0, -1, 501]),
        ("field", "open_sides", [["south"], ["east", "north"], []], [["up"], ["south", "south"], "south"]),
        ("field", "open_depth_m", [0, 11_000], [-1, 11_001]),
        ("field", "edge", ["radiating", "held"], ["open", 1]),
        ("field", "shallowest_m", [0, 1000], [-1, 1001]),
        ("field", "least_depth_m", [0, 1000], [-1, 1001]),
        ("field", "drag", [False, 1e-4, 0.1], [0, True, -1, 0.2]),
        ("field", "edge_tide_m", [{}, {"M2": 0.5}, {"m2": 20}], [{"M2": 0}, {"M9": 1}, {"Q1": 1}, 1]),
        ("field", "modes", [0, 40], [-1, 41, 1.5]),
        ("field", "mode_period_h", [0.02, 1000], [0.01, 1001]),
        ("field", "spectrum_h", [[1, 30], [0.02, 1000]], [[30, 1], [1, 1], [1], [0, 5], 3]),
        ("field", "memory_gb", [0.5, 4096], [0, -1, 5000]),
        ("output", "profiles", [True, False], [3]),
        ("output", "response_curves", [True, False], [3]),
        ("output", "crs", ["EPSG:3035"], [4326]),
        ("output", "path", ["a.gpkg"], ["", 5]),
    ],
)
def test_every_key_has_its_bounds_and_says_which_key_broke_them(table, key, allowed, refused):
    for value in allowed:
        read(**{table: {key: value}})
    for value in refused:
        with pytest.raises(SettingsError, match=rf"1 setting\(s\) to mend\n  .*{key}"):
            read(**{table: {key: value}})


def test_all_keys_are_tried_above_or_are_files_and_names():
    """A new setting needs its bounds in the table above."""
    tried = {
        f"{args[0]}.{args[1]}"
        for mark in test_every_key_has_its_bounds_and_says_which_key_broke_them.pytestmark
        for args in mark.args[1]
    }
    drawn = ("coast", "transects", "shelf_break", "gauges", "field")
    rest = {f"{table}.{key}" for table in drawn for key in ("file", "layer")}
    rest |= {f"field.{what}_{key}" for what in ("open", "points") for key in ("file", "layer")} | {"field.folder"}
    rest |= {f"gauges.{key}_column" for key in ("id", "lon", "lat")}
    rest |= {"title", "grid.path", "grid.crs", "grid.variable", "response.drag", "response.offshore_amplitude_m"}
    assert tried | rest == {line.split("`")[1] for line in markdown_settings().splitlines()[2:]}


@pytest.mark.parametrize(
    ("content", "hint"),
    [
        ({"gird": {}}, "gird: no such setting; did you mean 'grid'"),
        ({"grid": {"path": "a", "postive": "up"}}, "grid.postive: no such setting; did you mean 'positive'"),
        ({"shelf_break": {"depest_m": 1}}, "shelf_break.depest_m: no such setting; did you mean 'deepest_m'"),
        ({"response": {"zzz": 1}}, "response.zzz: no such setting; known here: constituents, deep_m, drag"),
        ({"response": {"constituents": ["MK2"]}}, 'constituent "MK2" is unknown; did you mean .[MK]2.'),
        (
            {"response": {"drag": 0.002, "offshore_amplitude_m": {"Q9": 1.0}}},
            'offshore_amplitude_m.Q9: constituent "Q9"',
        ),
    ],
)
def test_a_misspelt_name_gets_the_nearest_right_one(content, hint):
    with pytest.raises(SettingsError, match=hint):
        Settings.from_dict({"grid": {"path": "dem.tif"}} | content)


def test_all_faults_are_named_at_once_each_on_its_line():
    content = {"transects": {"spacing_km": -1, "lenght_km": 5}, "response": {"deep_m": "x"}}
    with pytest.raises(SettingsError) as caught:
        Settings.from_dict(content, where="my.toml")
    assert str(caught.value).splitlines() == [
        "my.toml: 4 setting(s) to mend",
        "  grid: must be given",
        "  transects.spacing_km = -1: input should be greater than or equal to 0.001",
        "  transects.lenght_km: no such setting; did you mean 'length_km'?",
        '  response.deep_m: "x" is no depth of a deep sea: give 500 to 11000 m, or "deepest"',
    ]


@pytest.mark.parametrize(
    ("tables", "message"),
    [
        ({"grid": {"path": 3}}, "grid.path: path = 3: must be the name of a file, in quotes, or a list of such names"),
        ({"grid": {"path": ["a.tif", 3]}}, r"path = \['a.tif', 3\]: must be the name of a file, in quotes, or a list"),
        ({"grid": {"path": []}}, r"path = \[\]: the list is empty; name at least one file"),
        ({"grid": {"path": ["a.tif", ""]}}, "grid.path: path is empty"),
        ({"grid": {"path": ["a.tif", "b.tif", "a.tif"]}}, "path names 'a.tif' twice; name each file once"),
        (
            {"grid": {"void_is_land": True}, "coast": {"level_m": 10}},
            "mend\n  grid.void_is_land with coast.level_m = 10",
        ),
        ({"transects": {"step_km": 3, "length_km": 14}}, "step_km = 3.0: at most a fifth of length_km = 14.0"),
        ({"response": {"drag": 0.0025}}, "drag and offshore_amplitude_m belong together"),
        ({"response": {"offshore_amplitude_m": {"M2": 1}}}, "drag and offshore_amplitude_m belong together"),
        ({"response": {"drag": 0.002, "offshore_amplitude_m": {"P1": 1}}}, r"names \['P1'\], not among constituents"),
        (
            {"response": {"drag": 0.002, "offshore_amplitude_m": {"M2": 1, "m2": 2}}},
            "the same constituent stands twice",
        ),
        ({"response": {"constituents": [], "periods_h": []}}, "both empty: name at least one wave"),
        ({"shelf_break": {"shallowest_m": 600}}, "must rise in this order"),
        ({"coast": 3}, "coast = 3: input should be a valid dictionary"),
    ],
)
def test_settings_that_do_not_go_together_are_refused_with_the_cure(tables, message):
    with pytest.raises(SettingsError, match=message):
        read(**tables)


def test_missing_cells_are_land_up_to_the_height_the_grid_gives_them():
    assert read(grid={"void_is_land": True}, coast={"level_m": 9.9}).grid.void_is_land
    assert read(grid={"void_is_land": False}, coast={"level_m": 50}).coast.level_m == 50


def test_paths_are_taken_from_the_folder_of_the_file(tmp_path):
    file = tmp_path / "run.toml"
    file.write_text('[grid]\npath = "deep/dem.tif"\n[coast]\nfile = "/abs/coast.gpkg"\n', encoding="utf-8")
    read_back = Settings.from_toml(file)
    assert read_back.grid.path == tmp_path.resolve() / "deep" / "dem.tif"
    assert read_back.coast.file == Path("/abs/coast.gpkg")
    assert read_back.output.path == tmp_path.resolve() / "coast.gpkg"
    assert read_back.transects.file is None


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"[grid\npath = 1", r"run.toml is no valid TOML: .*line 1"),
        (b"title = 'caf\xe9'", "run.toml is no text in UTF-8; save it as UTF-8"),
        (b"", r"run.toml: 1 setting\(s\) to mend\n  grid: must be given"),
    ],
)
def test_files_that_are_no_settings_say_so(tmp_path, content, message):
    file = tmp_path / "run.toml"
    file.write_bytes(content)
    with pytest.raises(SettingsError, match=message):
        Settings.from_toml(file)


def test_a_missing_file_or_a_folder_is_named(tmp_path):
    for path in (tmp_path / "none.toml", tmp_path):
        with pytest.raises(SettingsError, match=f"settings file {path} cannot be read"):
            Settings.from_toml(path)


def test_units_turn_into_si_and_settings_are_frozen():
    found = read()
    assert (found.coast.generalise_m, found.transects.spacing_m, found.transects.length_m) == (20e3, 10e3, 600e3)
    assert (found.shelf_break.smoothing_m, found.shelf_break.sustain_m) == (5e3, 5e3)
    with pytest.raises(ValueError, match="frozen"):
        found.grid.band = 2


def test_the_committed_schema_is_the_one_of_the_settings(repository):
    """Mend with: shelfmap schema > configs/settings.schema.json."""
    text = (repository / "configs" / "settings.schema.json").read_text(encoding="utf-8")
    assert text == json.dumps(SCHEMA, indent=2) + "\n"


def test_committed_settings_files_are_valid(repository):
    files = sorted((repository / "configs").glob("*.toml"))
    assert files
    for file in files:
        Settings.from_toml(file)


def test_the_table_for_readme_holds_every_setting_with_its_meaning():
    rows = markdown_settings().splitlines()
    n_settings = sum(len(kind["properties"]) for kind in SCHEMA["$defs"].values()) + 1  # and the title
    assert len(rows) == n_settings + 2
    assert all(row.count("|") == 4 and row.endswith(". |") for row in rows[2:])
    assert "| `response.deep_m` | `4000.0` | " in markdown_settings()


def _values(part):
    """Values drawn from one part of the schema, bounds included, and some that break it."""
    if "$ref" in part:
        part = SCHEMA["$defs"][part["$ref"].rsplit("/", 1)[1]]
    kinds = [part, *part.get("anyOf", [])]
    drawn = [st.none(), st.text(max_size=3), st.booleans(), st.sampled_from(["M2", "K1", "", "deepest"])]
    for kind in kinds:
        if "enum" in kind:
            drawn.append(st.sampled_from(kind["enum"]))
        if kind.get("type") in ("number", "integer"):
            bounds = [kind.get(key, 1.0) for key in ("minimum", "maximum", "exclusiveMinimum", "exclusiveMaximum")]
            drawn += [st.sampled_from(bounds), st.floats(), st.integers(-5, 10**20)]
        if kind.get("type") == "array":
            drawn.append(
                st.lists(st.one_of(st.floats(), st.integers(-400, 400), st.sampled_from(["M2", "s2"])), max_size=5)
            )
        if kind.get("type") == "object" and "properties" in kind:
            return st.fixed_dictionaries(
                {}, optional={key: _values(value) for key, value in kind["properties"].items()}
            )
        if kind.get("type") == "object":
            drawn.append(st.dictionaries(st.sampled_from(["M2", "m2", "Q1", "x"]), st.floats(), max_size=3))
    return st.one_of(drawn)


@given(st.fixed_dictionaries({}, optional={key: _values(value) for key, value in SCHEMA["properties"].items()}))
@hypothesis_settings(max_examples=200, deadline=None)
def test_any_content_is_either_taken_or_refused_as_settings(content):
    try:
        found = Settings.from_dict(content)
    except SettingsError:
        pass
    else:
        again = Settings.from_dict(json.loads(found.model_dump_json()))
        assert again == found


def test_several_grids_keep_their_order_and_stand_in_the_folder(tmp_path):
    """From TOML and back from JSON; one file or many, `paths` has them all."""
    (tmp_path / "a.toml").write_text('[grid]\npath = ["z.tif", "/abs/a.nc", "b/c.tif"]\n', encoding="utf-8")
    found = Settings.from_toml(tmp_path / "a.toml")
    names = [path.as_posix() for path in found.grid.paths]
    assert names == [f"{tmp_path.as_posix()}/z.tif", "/abs/a.nc", f"{tmp_path.as_posix()}/b/c.tif"]
    assert Settings.from_dict(json.loads(found.model_dump_json())) == found
    assert read(grid={"path": "one.tif"}).grid.paths == (read(grid={"path": "one.tif"}).grid.path,)


def test_null_characters_and_endless_nesting_are_one_sentence(tmp_path):
    with pytest.raises(SettingsError, match="holds a null character"):
        read(output={"path": "a\0b.gpkg"})
    (tmp_path / "deep.toml").write_text("a=" + "[" * 5000, encoding="utf-8")
    with pytest.raises(SettingsError, match="nests its values too deeply"):
        Settings.from_toml(tmp_path / "deep.toml")


def test_byte_order_mark_is_no_fault(tmp_path):
    (tmp_path / "a.toml").write_text('[grid]\npath = "dem.tif"\n', encoding="utf-8-sig")
    assert Settings.from_toml(tmp_path / "a.toml").grid.path == tmp_path / "dem.tif"


def test_more_periods_than_columns_are_refused_before_any_work():
    with pytest.raises(SettingsError, match="at most 200 items"):
        read(response={"periods_h": [float(n) for n in range(1, 202)]})
