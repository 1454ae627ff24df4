"""Words of the output: each once, with a meaning, and wave names that never clash."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from shelfmap.constants import CONSTITUENTS
from shelfmap.errors import LayerError
from shelfmap.words import CAUTIONS, END_REASONS, ENUMERATIONS, STATUSES, wave_label, wave_title


def test_every_constituent_has_its_own_label_and_comes_back():
    labels = [wave_label(name) for name in CONSTITUENTS]
    assert len(set(labels)) == len(labels)
    assert [wave_title(label) for label in labels] == list(CONSTITUENTS)


@given(st.floats(0.001, 1e5), st.floats(0.001, 1e5))
def test_two_periods_share_a_label_only_if_they_are_the_same_number(one, other):
    assert (wave_label(one) == wave_label(other)) == (one == other)


@given(st.floats(0.001, 1e5))
def test_a_period_label_is_a_plain_lower_case_name_and_gives_the_period_back(period_h):
    label = wave_label(period_h)
    assert label.replace("_", "").isalnum()
    assert label == label.lower()
    assert label not in {name.lower() for name in CONSTITUENTS}
    assert float(wave_title(label).removesuffix(" h")) == period_h


@pytest.mark.parametrize("wave", ["m2", "M9", ""])
def test_an_unknown_constituent_is_refused_with_the_known_ones(wave):
    with pytest.raises(LayerError, match=r"constituent .* is unknown; use one of Sa, .*M2"):
        wave_label(wave)


@pytest.mark.parametrize("period_h", [0.0, -1.0, float("nan"), float("inf"), 1e-9])
def test_a_period_out_of_range_is_refused(period_h):
    with pytest.raises(LayerError, match=r"give hours from 0\.001 to 100000"):
        wave_label(period_h)


@pytest.mark.parametrize("label", ["M2", "max", "p", "p0_50h", "pxh", "p-1h", ""])
def test_what_is_no_label_is_refused(label):
    with pytest.raises(LayerError, match="is no wave label"):
        wave_title(label)


def test_statuses_and_end_reasons_are_the_agreed_words():
    assert list(STATUSES) == ["ok", "no_break", "facing_land", "island", "edge_of_grid", "void", "too_short", "not_sea"]
    assert list(END_REASONS) == ["search_length", "edge_of_grid", "facing_land", "island", "void"]


def test_every_word_has_a_meaning_in_one_sentence():
    for words in ENUMERATIONS.values():
        assert all(meaning.endswith(".") and "\n" not in meaning for meaning in words.values())


def test_the_cautions_say_what_they_must():
    for must in ("Screening", "Not for navigation", "datum", "no prediction of water level", "permits"):
        assert must in CAUTIONS
