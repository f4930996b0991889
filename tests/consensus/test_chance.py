"""Chance-corrected agreement against published examples and statsmodels."""

from __future__ import annotations

import numpy as np
import pytest
from statsmodels.stats import inter_rater

from seedaudit.consensus import chance

# Fleiss J.L. (1971) Psychol. Bull. 76:378-382, Table 1: 30 patients, 6 raters, 5 diagnoses.
FLEISS_1971 = """
00060 03003 01401 00006 03030 20400 00402 20310 20040 00006
10050 11040 03300 10050 02031 00501 30012 51000 02040 10203
00006 01050 02013 20040 10041 05010 40002 02040 10500 00006
"""
FLEISS_1971 = np.array([[int(digit) for digit in patient] for patient in FLEISS_1971.split()])
# 14 raters, 10 items, 5 categories: encyclopedia example of Fleiss' kappa, kept in the test file
# of statsmodels.
TEN_ITEMS = """
0 0 0 0 14 | 0 2 6 4 2 | 0 0 3 5 6 | 0 3 9 2 0 | 2 2 8 1 1
7 7 0 0 0  | 3 2 6 3 0 | 2 5 3 2 2 | 6 5 2 1 0 | 0 2 2 3 7
"""
TEN_ITEMS = np.array(TEN_ITEMS.replace("|", " ").split(), dtype=int).reshape(10, 5)
# 12 units, 4 raters, gaps: Gwet, Handbook of Inter-Rater Reliability (0 is no rating).
GAPS = np.array(
    [
        [1, 2, 3, 3, 2, 1, 4, 1, 2, 0, 0, 0],
        [1, 2, 3, 3, 2, 2, 4, 1, 2, 5, 0, 0],
        [0, 3, 3, 3, 2, 3, 4, 2, 2, 5, 1, 3],
        [1, 2, 3, 3, 2, 4, 4, 1, 2, 5, 1, 0],
    ]
)


def counts_of_table(table):
    """Counts per record of a two-rater table."""
    rows = []
    for (a, b), times in np.ndenumerate(np.array(table)):
        one = np.bincount([a, b], minlength=len(table))
        rows += [one] * int(times)
    return np.array(rows)


def test_fleiss_1971():
    assert FLEISS_1971.sum(axis=0).tolist() == [26, 26, 30, 55, 43]
    assert chance.pairwise_agreement(FLEISS_1971) == pytest.approx(5 / 9, abs=1e-12)
    assert chance.fleiss_kappa(FLEISS_1971) == pytest.approx(0.4302445201, abs=1e-9)
    # AC1 from the formula, checked with an independent library at the time of design.
    assert chance.gwet_ac1(FLEISS_1971) == pytest.approx(0.4478845158, abs=1e-9)


def test_ten_items():
    assert chance.pairwise_agreement(TEN_ITEMS) == pytest.approx(0.3780219780, abs=1e-9)
    assert chance.fleiss_kappa(TEN_ITEMS) == pytest.approx(0.2099307044, abs=1e-9)
    assert chance.gwet_ac1(TEN_ITEMS) == pytest.approx(0.2256141508, abs=1e-9)
    units = [1, 0.253, 0.308, 0.440, 0.330, 0.462, 0.242, 0.176, 0.286, 0.286]
    np.testing.assert_allclose(chance.unit_agreement(TEN_ITEMS), units, atol=5.1e-4)


@pytest.mark.parametrize(
    ("counts", "agreement", "kappa"),
    [([[7, 1], [3, 5]], 0.607143, 0.161905), ([[6, 1, 0], [0, 7, 0]], None, 0.708333)],
)
def test_small_cases(counts, agreement, kappa):
    # Online calculator values kept in the test file of statsmodels.
    assert chance.fleiss_kappa(np.array(counts)) == pytest.approx(kappa, abs=1e-6)
    if agreement:
        assert chance.pairwise_agreement(np.array(counts)) == pytest.approx(agreement, abs=1e-6)


def test_ten_voxels_four_maps():
    # Exact arithmetic: p_a 5/6, kappa 5/9, AC1 11/15.
    on = np.array([4, 4, 4, 4, 4, 4, 3, 2, 1, 0])
    counts = np.stack([on, 4 - on], axis=1)
    assert chance.pairwise_agreement(counts) == pytest.approx(5 / 6, abs=1e-12)
    assert chance.fleiss_kappa(counts) == pytest.approx(5 / 9, abs=1e-12)
    assert chance.gwet_ac1(counts) == pytest.approx(11 / 15, abs=1e-12)


@pytest.mark.parametrize(
    ("table", "agreement", "ac1"),
    [
        # High-agreement paradox table; credit to Feinstein & Cicchetti (1990) from memory.
        ([[118, 5], [2, 0]], 0.944, 0.940776),
        # 100 records, two abstractors (public data set of Gwet's work; 0.8493305 as printed there).
        ([[13, 0, 0], [0, 20, 7], [0, 4, 56]], 0.89, 0.8493305),
        ([[40, 4, 4, 17], [6, 25, 2, 13], [4, 1, 21, 12], [15, 5, 9, 45]], 0.587444, 0.456158),
    ],
)
def test_gwet_tables(table, agreement, ac1):
    counts = counts_of_table(table)
    assert chance.pairwise_agreement(counts) == pytest.approx(agreement, abs=1e-6)
    assert chance.gwet_ac1(counts) == pytest.approx(ac1, abs=1e-6)


def test_units_with_different_numbers_of_ratings():
    counts = np.array([np.bincount(unit, minlength=6)[1:] for unit in GAPS.T])
    assert chance.pairwise_agreement(counts) == pytest.approx(0.818182, abs=1e-6)
    assert chance.gwet_ac1(counts) == pytest.approx(0.775444, abs=1e-6)
    assert chance.fleiss_kappa(counts) == pytest.approx(0.761169, abs=1e-6)
    # The unit with one rating is in the shares and in no pair; a unit without any is in neither.
    assert np.isnan(chance.unit_agreement(counts)).tolist() == [False] * 11 + [True]
    unrated = np.vstack([counts, np.zeros(5, dtype=int)])
    assert chance.gwet_ac1(unrated) == chance.gwet_ac1(counts)
    assert chance.gwet_ac1(counts[:-1]) != pytest.approx(0.775444, abs=1e-4)


@pytest.mark.parametrize("seed", range(3))
def test_kappa_matches_statsmodels(seed):
    rng = np.random.default_rng(seed)
    counts = rng.multinomial(9, (0.2, 0.7, 0.1), size=40).astype(np.int32)
    assert chance.fleiss_kappa(counts) == pytest.approx(inter_rater.fleiss_kappa(counts), abs=1e-12)


def test_one_category_for_all():
    counts = np.array([[5, 0, 0]] * 4)
    assert chance.gwet_ac1(counts) == 1.0
    assert np.isnan(chance.fleiss_kappa(counts))


def test_no_pairs():
    counts = np.array([[1, 0], [0, 1], [0, 0]])
    assert np.isnan(chance.pairwise_agreement(counts))
    assert np.isnan(chance.gwet_ac1(counts))
    assert np.isnan(chance.fleiss_kappa(counts))
    assert np.isnan(chance.gwet_ac1(np.zeros((0, 3), dtype=int)))


def test_negative_agreement_is_kept():
    assert chance.gwet_ac1(np.array([[1, 1], [1, 1]])) == pytest.approx(-1.0)


def test_one_category_is_refused():
    with pytest.raises(ValueError, match="two categories"):
        chance.gwet_ac1(np.array([[3], [3]]))


def test_counts_of_hundreds_do_not_overflow():
    counts = np.array([[40_000, 40_000], [80_000, 0]], dtype=np.int32)
    n = 80_000
    halves = 2 * 40_000 * 39_999 / (n * (n - 1))
    assert chance.pairwise_agreement(counts) == pytest.approx((halves + 1) / 2, abs=1e-12)
