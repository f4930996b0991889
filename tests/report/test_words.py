"""Verdict, caption and alternative text say what the numbers say, and nothing better."""

from __future__ import annotations

import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from seedaudit.report.captions import alternative_text, caption
from seedaudit.report.words import distance_words, number, percent, similarity, verdict
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
        {"dice_positive_median": 0.8279, "dice_positive_p05": 0.6199},
        ["median Dice 0.82 (5th percentile 0.61) for class + (4.2 % of voxels)", "12 participants"],
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
        ["class + is empty as reported but not at 12 of 100", "no reported map to compare with"],
    ),
    "empty tail": (
        {
            "n_reported_negative": 0,
            "dice_negative_median": None,
            "dice_negative_p05": None,
            "dice_negative_undefined": 100,
        },
        ["class − is empty as reported and at all placements"],
    ),
    "nearly empty": (
        {"n_reported_positive": 7, "n_reported_negative": 0, "stability": 0.999},
        ["only 7 voxels or 0.03 %", "agreement on the rest of the brain says nothing"],
    ),
    "no regions": ({"regions": {}}, ["No regions were given"]),
    "all silent": (
        {"regions": {"silent": 7}},
        ["All 7 regions are silent (never connected)"],
    ),
    "a group contrast": (
        {"regions": {"silent": 7, "gained": 1}, "effect_kind": "difference"},
        ["1 gained, 7 silent (no difference as reported)"],
    ),
    "a slope": ({"regions": {"silent": 1}, "effect_kind": "slope"}, ["(no effect as reported)"]),
    "several states": (
        {"regions": {"contested": 2, "held": 3, "n/a": 1}},
        ["Of 6 regions, 3 held, 2 contested, 1 without analysis voxels"],
    ),
    "missing": (
        {"dice_positive_median": None, "dice_positive_p05": None, "safe_share": None},
        ["median Dice n/a"],
    ),
    "worth": (
        {
            "ceiling_relative": 0.889,
            "tolerance_mm": 4.97,
            "tolerance_measure": "dice_positive",
            "tolerance_target": 0.8,
            "tolerance_censored": False,
        },
        ["ceiling-relative stability 0.88", "similar (Dice + 0.8) within 4.9 mm"],
    ),
    "censored": (
        {
            "tolerance_mm": 7.96,
            "tolerance_measure": "ceiling_relative",
            "tolerance_target": 0.9,
            "tolerance_censored": True,
        },
        ["similar (ceiling-relative stability 0.9) within at least 7.9 mm"],
    ),
    "claims": (
        {"claims": {"holds": 2, "breaks": 1, "open": 1}},
        ["of 4 claims 2 hold, 1 breaks and 1 is open"],
    ),
    "one claim": ({"claims": {"holds": 0, "breaks": 1, "open": 0}}, ["the one claim breaks"]),
    "all claims": ({"claims": {"holds": 0, "breaks": 0, "open": 3}}, ["all 3 claims are open"]),
    "no claims": ({"claims": {"holds": 0, "breaks": 0, "open": 0}}, ["silent (never connected)"]),
    "the seed": ({"name": "seed"}, ["The seed at (−8, −56, 28) mm"]),
}


@pytest.mark.parametrize("case", CASES)
def test_verdict(case):
    changes, phrases = CASES[case]
    sentence = verdict(numbers(**changes))
    for phrase in phrases:
        assert phrase in sentence
    assert sentence.endswith(".")
    assert sentence.count(". ") == 1  # one on the map, one on what is claimed
    assert len(re.findall(r"\w[\w.-]*", sentence)) < 80
    assert "nan" not in sentence.lower()
    assert "None" not in sentence
    assert ("claim" in sentence) == ("claims" in changes and "no claims" not in case)


def test_a_few_regions_of_a_state_are_named():
    regions = [("Left", "held"), ("Right\nback", "held"), ("A, b", "lost"), ("x" * 31, "gained")]
    regions += [(f"R{i}", "contested") for i in range(4)] + [("Out", "n/a")]
    counts = {"held": 2, "lost": 1, "gained": 1, "contested": 4, "n/a": 1}
    told = verdict(numbers(regions=counts), regions)
    assert (
        "Of 9 regions, Left and Right back held, 4 contested, 1 lost, 1 gained, 1 without" in told
    )


@given(st.floats(0.1, 50))
def test_a_tolerance_is_never_shown_longer_than_it_is(value):
    shown = float(distance_words(value, False).removesuffix(" mm"))
    assert value - 0.1001 < shown <= value + 1e-8
    assert distance_words(value, True) == f"at least {distance_words(value, False)}"


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
    in_a_column = [number(x, 2, fixed=True) for x in (-0.1, -0.004, 0.72, 3.0)]
    assert in_a_column == ["−0.10", "0.00", "0.72", "3.00"]


def test_the_caption_states_what_is_on_the_page():
    told = caption(invented_seed(negative=False))
    assert "94 of 100" in told
    assert "the right of the body" in told
    assert "(−8, −56, 28) mm" in told
    assert "95 % intervals" in told


def test_the_caption_has_a_part_for_each_panel():
    told = caption(invented_seed(worth=True))
    for words in ("(a) Reported", "(b) Share", "(c) Dice", "(d) Network", "(e) Tolerance",
                  "(f) Claims", "unrelated seeds", "(isotonic)", "Upright strokes"):  # fmt: skip
        assert words in told
    alone = caption(invented_seed(worth=True), ["rose"])
    assert "(a)" not in alone
    assert "Tolerance in each direction" in alone
    assert "Network" not in alone


def test_the_caption_names_the_statistic():
    assert "threshold fdr 0.05 on t." in caption(invented_seed())
    assert "the standard normal score z" in caption(invented_seed(participants=1))
    assert "halves of the series" in caption(invented_seed(participants=1, worth=True))


def test_the_caption_of_a_contrast_says_what_is_absent():
    told = caption(invented_seed(worth=True, effect_kind="difference"))
    assert "no difference as reported" in told
    assert "never connected" not in told


def test_many_regions_are_counted_for_the_ear():
    told = alternative_text(invented_seed(names=[f"R{i}" for i in range(40)], states=["held"]))
    assert "held: 40 regions" in told


def test_alternative_text_reads_the_rose_and_the_claims():
    seed = invented_seed(worth=True)
    told = alternative_text(seed)
    row = seed.tables["tolerance"].query("measure == 'ceiling_relative' & direction == 'left'")
    assert f"left {distance_words(row['tolerance'].iloc[0], row['censored'].iloc[0])}" in told
    assert "Parietal holds (passes at 100 % of placements)" in told
    assert told.startswith("Six panels: ")


def test_a_single_participant_gets_no_word_about_intervals():
    assert "interval" not in caption(invented_seed(participants=1))


def test_alternative_text_names_the_regions_of_each_state():
    seed = invented_seed(names=["A", "B", "C"], states=["held", "contested", "held"])
    told = alternative_text(seed)
    assert "held: A, C; contested: B" in told
    drawn = seed.tables["similarity"].iloc[1:].sort_values("distance").tail(25)
    assert f"Dice + {similarity(drawn['dice_positive'].median())}" in told


@pytest.mark.parametrize("function", [caption, alternative_text])
def test_no_regions_is_said(function):
    assert "No regions were given" in function(invented_seed(names=[]))
