"""Statuses, doubts and confidences, each brought about by a small hand-made profile."""

from dataclasses import replace

import numpy as np
import pytest
from utils_shelfbreak import bent, profiles_of

from shelfmap import words
from shelfmap._kernels import tracing
from shelfmap.assess import LEAST_SAMPLES, confidences, doubts, neighbour_doubts, sills, statuses, usable
from shelfmap.profiles import END_REASONS, START_REASONS
from shelfmap.settings import ShelfBreakSettings
from shelfmap.shelfbreak import measure_picked_breaks

OCEAN_M = 1000.0
STEP_M = 1000.0
SHELF = bent([0, 60, 120], [0, 120, 3000], STEP_M, 120e3)
SHALLOW = bent([0, 120], [0, 90], STEP_M, 120e3)


def one(row, break_m, end="search_length", start="shore"):
    """A profile with its break, if any, where it is said to be; clear in every way."""
    profiles = replace(
        profiles_of([row], STEP_M),
        end_reason=np.array([END_REASONS.index(end) if end else -1]),
        start_reason=np.array([START_REASONS.index(start)]),
    )
    breaks = measure_picked_breaks(profiles, ShelfBreakSettings(), np.array([break_m]))
    return profiles, replace(breaks, spread_m=np.zeros(1), found_share=np.ones(1))


def test_reasons_stand_in_the_order_of_the_compiled_codes():
    assert [END_REASONS[code] for code in (tracing.LENGTH, tracing.GRID_EDGE, tracing.LAND)] == [
        "search_length",
        "edge_of_grid",
        "facing_land",
    ]
    assert [END_REASONS[code] for code in (tracing.ISLAND, tracing.VOID)] == ["island", "void"]
    assert tuple(words.END_REASONS) == END_REASONS
    starts = (tracing.AT_SHORE, tracing.IN_WATER, tracing.NO_WATER, tracing.START_OUTSIDE, tracing.START_VOID)
    assert [START_REASONS[code] for code in starts] == ["shore", "open_water", "not_sea", "edge_of_grid", "void"]


@pytest.mark.parametrize(
    ("row", "break_m", "end", "start", "status"),
    [
        (SHELF, 60e3, "search_length", "shore", "ok"),
        (SHELF, 60e3, "search_length", "open_water", "ok"),
        (SHELF, 60e3, "edge_of_grid", "shore", "ok"),  # the break was found before the edge
        (SHELF, 60e3, "facing_land", "shore", "ok"),  # land beyond the open ocean counts no more
        (SHELF, 60e3, "island", "shore", "ok"),
        (SHELF[:70], 60e3, "facing_land", "shore", "facing_land"),  # 528 m deep at most: a strait
        (SHELF[:70], 60e3, "island", "shore", "island"),
        (SHALLOW, np.nan, "search_length", "shore", "no_break"),
        (SHELF, np.nan, "facing_land", "shore", "no_break"),
        (SHALLOW, np.nan, "facing_land", "shore", "facing_land"),
        (SHALLOW, np.nan, "island", "shore", "island"),
        (SHALLOW, np.nan, "edge_of_grid", "shore", "edge_of_grid"),
        (SHALLOW, np.nan, "void", "shore", "void"),
        (SHALLOW[: LEAST_SAMPLES - 1], np.nan, "search_length", "shore", "too_short"),
        (SHALLOW[: LEAST_SAMPLES - 1], np.nan, "facing_land", "shore", "facing_land"),
        (SHALLOW[:0], np.nan, "", "not_sea", "not_sea"),
        (SHALLOW[:0], np.nan, "", "edge_of_grid", "edge_of_grid"),
        (SHALLOW[:0], np.nan, "", "void", "void"),
    ],
)
def test_every_status_has_its_case(row, break_m, end, start, status):
    profiles, breaks = one(row, break_m, end, start)
    assert statuses(profiles, breaks, OCEAN_M).tolist() == [status]
    assert status in words.STATUSES


def test_gains_need_a_break_or_the_open_ocean():
    cases = [(SHELF, 60e3, True), (SHELF, np.nan, True), (SHALLOW, np.nan, False)]
    for row, break_m, expected in cases:
        profiles, breaks = one(row, break_m)
        assert usable(statuses(profiles, breaks, OCEAN_M), profiles, OCEAN_M).tolist() == [expected]
    profiles, breaks = one(SHALLOW, np.nan, "facing_land")
    assert not usable(statuses(profiles, breaks, OCEAN_M), profiles, OCEAN_M).any()


def remarks(profiles, breaks, crosses=False, width_change=1.0, kernel_share=0.01, period_error=0.01, damped_q=4.0):
    own = doubts(profiles, breaks, *(np.array([value]) for value in (kernel_share, period_error, damped_q)))
    of_neighbours = neighbour_doubts(np.array([crosses]), np.array([width_change]))
    return [text[0] for text, holds in (*own, *of_neighbours) if holds[0]]


def test_a_clear_straight_shelf_raises_no_doubt():
    assert remarks(*one(SHELF, 60e3)) == []


@pytest.mark.parametrize(
    ("change", "remark"),
    [
        ({"crosses": True}, "crosses another transect before the break"),
        ({"width_change": 1.6}, "shelf width changes 1.6-fold to a neighbour"),
        ({"kernel_share": 0.06}, "one sample holds 6% of the period"),
        ({"period_error": 0.2}, "period uncertain by 20%"),
        ({"damped_q": 0.9}, "friction all but stops mode 1, Q 0.9"),
    ],
)
def test_doubts_of_the_surroundings(change, remark):
    assert remarks(*one(SHELF, 60e3), **change) == [remark]


@pytest.mark.parametrize(
    ("change", "remark"),
    [
        ({"found_share": np.array([5 / 9])}, "break found by 56% of the thresholds and smoothings tried"),
        ({"spread_m": np.array([19e3])}, "break moves by 19.0 km with threshold and smoothing"),
        ({"contrast": np.array([2.9])}, "break is faint, contrast 2.9"),
    ],
)
def test_doubts_of_the_break(change, remark):
    profiles, breaks = one(SHELF, 60e3)
    assert remarks(profiles, replace(breaks, **change)) == [remark]


def test_doubts_of_the_profile():
    profiles, breaks = one(bent([0, 3.9, 60], [0, 120, 3000], STEP_M, 60e3), 3900.0)
    assert "shelf is 3.9 samples wide" in remarks(profiles, breaks)
    profiles, breaks = one(SHELF, 60e3)
    filled = profiles.is_filled.copy()
    filled[0, 58:63] = True  # two on the shelf, three beyond
    assert remarks(replace(profiles, is_filled=filled), breaks) == [
        "samples on the shelf bridged, filled or smoothed: 2"
    ]
    assert remarks(*one(SHELF, 60e3, start="open_water")) == ["starts in open water, off a bridged inlet"]


@pytest.mark.parametrize(
    ("bed", "basin_m", "sill_m", "status"),
    [
        ([0, 120, 40], 120, 40, "ok"),
        ([0, 120, 20], 120, 20, "ok"),
        ([0, 800, 10], 800, 10, "island"),
        ([0, 15, 1], np.nan, np.nan, "ok"),  # a pond behind a bar is no basin
    ],
)
def test_a_basin_behind_a_sill_is_doubted_and_one_shut_off_is_no_shelf(bed, basin_m, sill_m, status):
    row = bent([0, 20, 40, 60, 120], [*bed, 130, 3000], STEP_M, 120e3)
    profiles, breaks = one(row, 60e3)
    found = [depth_m[0] for depth_m in sills(profiles, breaks)]
    if np.isfinite(basin_m):
        assert found == pytest.approx([basin_m, sill_m])
    else:
        assert found[0] / found[1] < 4
    assert statuses(profiles, breaks, OCEAN_M).tolist() == [status]
    doubted = basin_m > 4 * sill_m
    assert remarks(profiles, breaks) == [f"basin of {basin_m:.0f} m behind a sill of {sill_m:.1f} m"] * doubted


def test_a_deep_sea_beyond_the_break_is_no_basin():
    row = bent([0, 60, 80, 100, 120], [0, 120, 900, 100, 90], STEP_M, 120e3)
    basin_m, sill_m = sills(*one(row, 60e3))
    assert basin_m == sill_m


def test_without_a_break_a_bank_before_the_greatest_depth_counts():
    row = bent([0, 40, 60, 80, 120], [0, 800, 5, 100, 3000], STEP_M, 120e3)
    profiles, breaks = one(row, np.nan)
    assert [depth_m[0] for depth_m in sills(profiles, breaks)] == pytest.approx([800, 5])
    assert statuses(profiles, breaks, OCEAN_M).tolist() == ["island"]
    beyond = bent([0, 60, 80, 120], [0, 3000, 5, 10], STEP_M, 120e3)
    assert statuses(*one(beyond, np.nan), OCEAN_M).tolist() == ["no_break"]


def test_confidence_falls_with_doubts_and_is_empty_without_an_index():
    found = confidences(np.array([True, True, True, True, False]), np.array([0, 1, 2, 7, 0]))
    assert found.tolist() == ["good", "fair", "poor", "poor", None]
    assert set(found[:4]) == set(words.CONFIDENCES)


def test_without_a_break_no_doubt_of_the_break_is_raised():
    profiles, breaks = one(SHALLOW, np.nan)
    unknown = replace(breaks, spread_m=np.full(1, np.nan), found_share=np.full(1, np.nan))
    assert remarks(profiles, unknown, width_change=np.nan, kernel_share=np.nan, period_error=np.nan) == []
