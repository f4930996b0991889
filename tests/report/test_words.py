"""Verdict, caption and alternative text say what the numbers say, and nothing better."""

from __future__ import annotations

import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from seedaudit.report.words import alternative_text, caption, number, percent, similarity, verdict
from tests.report.invented import invented_seed


def numbers(**others):
    return dict(invented_seed().summary) | others


NOTHING = {
    "n_reported_positive": 0,
    "n_reported_negative": 0,
    "dice_positive_median": None,
    "dice_positive_p05": None,
    "dice_positive_undefined": 100,
    "dice_negative_median": None,
    "dice_negative_p05": None,
    "dice_negative_undefined": 100,
    "safe_share": 0.0,
    "contested_share": 0.0,
    "stability": 1.0,
}

CASES = {
    "ordinary": (
        {"dice_positive_median": 0.8279, "dice_positive_p05": 0.6199, "contested_share": 0.04321},
        ["median Dice of 0.82", "5th percentile 0.61", "4.4 % are contested", "12 participants"],
    ),
    "safe and contested": (
        {"safe_share": 0.0812, "contested_share": 0.2},
        ["8.1 % of the analysis voxels are safely", "20 % are contested"],
    ),
    "set aside": ({"n_placements_set_aside": 7}, ["7 more set aside"]),
    "single": ({"n_participants": 1, "df": None}, ["(one participant, fdr 0.05)"]),
    "nothing at all": (
        NOTHING,
        [
            "nothing passes the threshold, as reported or at any drawn placement",
            "no reported map to compare with",
        ],
    ),
    "nothing as reported": (
        NOTHING | {"dice_positive_undefined": 88, "dice_positive_median": 0.0},
        ["but 12 of 100 drawn placements have one", "no reported map to compare with"],
    ),
    "empty tail": (
        {
            "n_reported_negative": 0,
            "dice_negative_median": None,
            "dice_negative_p05": None,
            "dice_negative_undefined": 100,
        },
        ["there is no negative map as reported, nor at any drawn placement"],
    ),
    "nearly empty": (
        {"n_reported_positive": 7, "n_reported_negative": 0, "stability": 0.999},
        ["only 7 voxels, 0.03 %", "agreement on the rest of the brain says nothing"],
    ),
    "no regions": ({"regions": {}}, ["no regions were given"]),
    "all silent": (
        {"regions": {"silent": 7}},
        ["all 7 regions are silent (never connected)"],
    ),
    "several states": (
        {"regions": {"contested": 2, "held": 3, "n/a": 1}},
        ["of 6 regions, 3 held, 2 contested and 1 without analysis voxels"],
    ),
    "missing": (
        {"dice_positive_median": None, "dice_positive_p05": None, "safe_share": None},
        ["median Dice of n/a"],
    ),
}


@pytest.mark.parametrize("case", CASES)
def test_verdict(case):
    changes, phrases = CASES[case]
    sentence = verdict(numbers(**changes))
    for phrase in phrases:
        assert phrase in sentence
    assert sentence.endswith(".")
    assert sentence.count(". ") == 0  # one sentence
    assert "nan" not in sentence.lower()
    assert "None" not in sentence


@pytest.mark.parametrize("stability", [-0.2, 0.3, 0.999, 1.0, None])
def test_the_score_of_all_voxels_takes_no_part_in_the_verdict(stability):
    told = verdict(numbers(stability=stability))
    assert told == verdict(numbers(stability=0.5))
    assert not re.search(r"\b(robust|stable|excellent|good|reliable|reproducible)\b", told)


@given(st.floats(-1, 1))
def test_a_similarity_is_never_shown_better_than_it_is(value):
    shown = float(similarity(value).replace("−", "-"))
    assert shown <= value + 1e-8
    assert shown > value - 0.0101


@given(st.floats(1e-9, 1))
def test_a_share_above_0_never_reads_0(share):
    assert percent(share) not in ("0 %", "0.0 %")


def test_numbers_are_written_with_a_true_minus_and_no_trailing_zeros():
    assert [number(x) for x in (-56.0, -0.04, 2.50, 100.0)] == ["−56", "0", "2.5", "100"]
    assert number(None) == number(float("nan")) == "n/a"


def test_the_caption_states_what_is_on_the_page():
    told = caption(invented_seed(negative=False))
    assert "94 of 100" in told
    assert "the right of the body" in told
    assert "(−8, −56, 28) mm" in told
    assert "95 % intervals" in told


def test_a_single_participant_gets_no_word_about_intervals():
    assert "interval" not in caption(invented_seed(participants=1))


def test_alternative_text_names_the_regions_of_each_state():
    seed = invented_seed(names=["A", "B", "C"], states=["held", "contested", "held"])
    told = alternative_text(seed)
    assert "held: A, C; contested: B" in told
    drawn = seed.tables["similarity"].iloc[1:].sort_values("distance").tail(25)
    assert f"Dice+ {similarity(drawn['dice_positive'].median())}" in told


@pytest.mark.parametrize("function", [caption, alternative_text])
def test_no_regions_is_said(function):
    assert "No regions were given" in function(invented_seed(names=[]))
