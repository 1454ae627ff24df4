"""The column table: complete, without clashes, and fit for a README."""

from collections import Counter

import pytest

from shelfmap.columns import COLUMNS, LAYERS, columns_of, markdown_table
from shelfmap.constants import CONSTITUENTS
from shelfmap.errors import LayerError
from shelfmap.words import ENUMERATIONS, wave_label

WAVES = [*(wave_label(name) for name in CONSTITUENTS), *(wave_label(period) for period in (0.5, 1.0, 2.0, 12.0))]


@pytest.mark.parametrize("layer", LAYERS)
def test_names_and_titles_are_unique_and_titles_differ_from_names_by_more_than_case(layer):
    columns = columns_of(layer, WAVES)
    names = [column.name for column in columns]
    assert max(Counter(names).values()) == 1
    assert all(name == name.lower() and name not in ("fid", "geom") for name in names)
    assert max(Counter(column.alias.lower() for column in columns).values()) == 1
    # a title that differs from the name only in case reads back empty (measured with GDAL 3.12)
    assert all(column.alias.lower() != column.name for column in columns)


def test_every_column_says_what_it_means_and_belongs_to_known_layers():
    for column in COLUMNS:
        assert column.meaning.endswith(".")
        assert not column.null_means or column.null_means.endswith(".")
        assert column.layers
        assert set(column.layers) <= set(LAYERS)
        assert column.dtype in ("int64", "float64", "str", "bool")


def test_a_unit_stands_in_the_title_and_ends_the_name():
    endings = {"km": "_km", "m": "_m", "h": "_h", "deg": "_deg", "m/s": "_m_s", "1/km": "_per_km"}
    for column in COLUMNS:
        if column.unit:
            assert column.alias.endswith(f"[{column.unit}]")
            assert column.name.endswith(endings[column.unit])
        else:
            assert not column.name.endswith(("_km", "_m", "_h", "_deg", "_m_s"))


def test_integers_flags_and_keys_are_never_floats():
    kinds = {column.name: column.dtype for column in COLUMNS}
    assert kinds["transect_id"] == kinds["index_mode"] == kinds["n_filled"] == "int64"
    assert kinds["crosses"] == kinds["picked"] == kinds["filled"] == "bool"
    assert all(kinds[name] == "str" for name in ENUMERATIONS)


def test_layers_hold_the_agreed_columns():
    expected = {
        "coast_index": "transect_id coast_part coast_km status note index_max index_constituent index_mode index_class "
        "tuning strength confidence shelf_width_km break_depth_m period1_h period1_sd_h q1 gain_m2 "
        "damped_gain_m2 lag_m2_deg edge_ratio_m2 index_m2",
        "transects": "transect_id coast_part coast_km lon_deg lat_deg bearing_deg search_km length_km end_reason "
        "crosses status note index_max index_constituent index_mode index_class tuning strength "
        "confidence shelf_width_km break_depth_m break_contrast break_spread_km mean_depth_m "
        "travel_time_h quarter_wave_h period1_h period1_sd_h pole1_h q1 damped_q1 period2_h pole2_h q2 "
        "period3_h pole3_h q3 current_antinode_km kernel_peak_share deep_m friction_m_s n_bridged "
        "n_filled n_despiked fetch_km gain_m2 damped_gain_m2 lag_m2_deg edge_ratio_m2 index_m2",
        "profiles": "transect_id distance_km lon_deg lat_deg depth_m filled period1_kernel_per_km",
        "response": "transect_id wave kind period_h gain damped_gain lag_deg edge_ratio index",
        "run": "topic name value",
    }
    for layer, names in expected.items():
        assert [column.name for column in columns_of(layer, ["m2"])] == names.split()


def test_waves_follow_one_another_in_the_order_given():
    names = [column.name for column in columns_of("coast_index", ["s2", "m2"]) if column.name.startswith("gain_")]
    assert names == ["gain_s2", "gain_m2"]


def test_titles_and_meanings_name_the_wave_as_people_do():
    column = next(column for column in columns_of("transects", ["p0_5h"]) if column.name == "gain_p0_5h")
    assert column.alias == "Gain at 0.5 h"
    assert "of 0.5 h at the shore" in column.meaning


@pytest.mark.parametrize(
    ("layer", "waves", "message"),
    [
        ("coasts", (), "layer 'coasts' is unknown; the layers are coast_index, transects"),
        ("transects", ("m2", "m2"), "the same one stands twice"),
        ("transects", ("M2",), "'M2' is no wave label"),
        ("transects", ("m2", "M2"), "'M2' is no wave label"),  # names that differ only in case
    ],
)
def test_wrong_layers_and_waves_are_refused(layer, waves, message):
    with pytest.raises(LayerError, match=message):
        columns_of(layer, waves)


@pytest.mark.parametrize("layer", LAYERS)
def test_the_table_for_readme_has_a_row_of_four_cells_for_every_column(layer):
    rows = markdown_table(layer).splitlines()
    wanted = [column.name for column in COLUMNS if layer in column.layers]
    assert [row.split("|")[1].strip(" `") for row in rows[2:]] == wanted
    assert {row.count("|") for row in rows} == {5}


def test_the_table_for_readme_refuses_an_unknown_layer():
    with pytest.raises(LayerError, match="unknown"):
        markdown_table("coasts")
