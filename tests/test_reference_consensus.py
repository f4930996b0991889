"""The reference's classes, agreement, overlap and chance, held to libraries and published values.

Each check names its source; CHECKS is the project's list of check values.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from scipy.spatial.distance import dice as scipy_dice
from sklearn.metrics import cohen_kappa_score
from statsmodels.stats.inter_rater import fleiss_kappa as statsmodels_fleiss
from statsmodels.stats.multitest import multipletests

from tests import reference_consensus as second
from tests.reference_maps import correlation

# Thrombolysis example of Benjamini & Hochberg 1995 (CHECKS 7): BH rejects 4,
# Bonferroni 3 (that count from memory)
BH_P = [0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344, 0.0459, 0.3240]
BH_P += [0.4262, 0.5719, 0.6528, 0.7590, 1.000]


@pytest.mark.parametrize(("rule", "passing"), [("fdr", 4), ("bonferroni", 3), ("p", 9)])
def test_p_rules_on_published_example(rule, passing):
    order = np.random.default_rng(1).permutation(15)
    t = stats.norm.isf(np.array(BH_P)[order] / 2) * np.where(order % 2, -1, 1)
    classes = second.classify(np.zeros(15), t, np.inf, rule, 0.05)
    expected = np.where(order < passing, np.where(order % 2, -1, 1), 0)
    assert classes.tolist() == expected.tolist()


def test_fdr_matches_statsmodels_on_random_p():
    rng = np.random.default_rng(11)
    for _ in range(20):
        t = rng.standard_normal(60) * rng.uniform(0.5, 4)
        p = 2 * stats.t.sf(np.abs(t), 9)
        theirs = multipletests(p, 0.1, method="fdr_bh")[0]
        mine = second.classify(np.zeros(60), t, 9, "fdr", 0.1)
        assert (mine != 0).tolist() == theirs.tolist()


def test_size_rules_by_hand():
    t = np.array([3.0, -2.0, 2.0, -1.0, 0.5, 0.0])
    effect = np.array([0.1, -0.3, 0.0, 0.3, -0.2, 0.2])
    classes = {
        (rule, level): second.classify(effect, t, 9, rule, level).tolist()
        for rule, level in [("t", 2.0), ("effect", 0.3), ("density", 2 / 6), ("density", 0.01)]
    }
    assert classes["t", 2.0] == [1, -1, 1, 0, 0, 0]
    assert classes["effect", 0.3] == [0, -1, 0, 1, 0, 0]
    assert classes["density", 2 / 6] == [1, -1, 1, 0, 0, 0]  # the tie for second place passes
    assert classes["density", 0.01] == [0] * 6


def test_voxel_states_by_hand():
    assert second.modal(0.5, 0.2) == (1, 0.5)
    assert second.modal(0.4, 0.4) == (0, 0.4)
    assert [second.safe_class(*pair, 0.95) for pair in [(0.95, 0), (0, 1), (0.94, 0)]] == [1, -1, 0]
    shares = [(0.95, 0.05), (0.05, 0), (0.5, 0), (0, 0.06), (0.9, 0.1), (0, 1)]
    states = [second.is_contested(*pair, 0.95) for pair in shares]
    assert states == [False, False, True, True, True, False]
    assert second.spread([1.0, 2.0, 6.0]) == {
        "mean": 3.0,
        "sd": pytest.approx(np.std([1, 2, 6], ddof=1)),
        "min": 1.0,
        "max": 6.0,
    }


def test_conjunction_minimum():
    # Minimum statistic of the worked t maps (CHECKS 13, after Nichols 2005); mixed signs give 0
    rows = [(2.0, 3.1, 1.5), (4.2, 3.6, 3.9), (2.5, -0.4, 3.0), (-1.8, -1.75, -1.73)]
    assert [second.conjunction(row) for row in rows] == [1.5, 3.6, 0.0, -1.73]


def test_dice():
    a, b = [1, 1, 1, 1, 0, 0, 0, 0, 0, -1], [0, 0, 1, 1, 1, 0, 0, 0, -1, 0]
    # CHECKS 3: 4/7, also one minus scipy's dissimilarity
    assert second.dice(a, b, 1) == pytest.approx(4 / 7)
    theirs = scipy_dice(np.array(a) == 1, np.array(b) == 1)
    assert second.dice(a, b, 1) == pytest.approx(1 - theirs)
    assert second.dice(a, b, -1) == 0.0
    assert np.isnan(second.dice([0, 1], [0, 0], -1))
    assert second.dice(a, a, -1) == 1.0


def test_concordance_peak_flow():
    """Bland & Altman 1986, peak flow, first readings: 0.9427424314 with ddof 0 (CHECKS 6a)."""
    wright = "494 395 516 434 476 557 413 442 650 433 417 656 267 478 178 423 427"
    mini = "512 430 520 428 500 600 364 380 658 445 432 626 260 477 259 350 451"
    x, y = (np.array(text.split(), dtype=float) for text in (wright, mini))
    assert second.concordance(x, y) == pytest.approx(0.9427424314, abs=1e-10)
    assert correlation(x, y) == pytest.approx(0.9432794469, abs=1e-10)
    assert second.rms_difference(x, y) ** 2 == pytest.approx(np.mean((x - y) ** 2))


# Fleiss 1971, 30 patients, 6 psychiatrists, 5 categories (CHECKS 4b)
FLEISS = """00060 03003 01401 00006 03030 20400 00402 20310 20040 00006
10050 11040 03300 10050 02031 00501 30012 51000 02040 10203
00006 01050 02013 20040 10041 05010 40002 02040 10500 00006"""


def test_chance_corrected_agreement_published():
    counts = [[int(digit) for digit in group] for group in FLEISS.split()]
    assert second.observed_agreement(counts) == pytest.approx(5 / 9)
    assert second.fleiss_kappa(counts) == pytest.approx(0.4302445201, abs=1e-10)
    assert second.fleiss_kappa(counts) == pytest.approx(statsmodels_fleiss(counts), abs=1e-12)
    assert second.gwet_ac1(counts) == pytest.approx(0.4478845158, abs=1e-10)
    # The two-rater paradox table: AC1 0.940776 (CHECKS 4e, irrCAC)
    table = [[2, 0]] * 118 + [[1, 1]] * 7
    assert second.gwet_ac1(table) == pytest.approx(0.940776, abs=1e-6)
    # Its Cohen kappa is below zero (scikit-learn), and so is Fleiss' here
    a, b = [0] * 123 + [1] * 2, [0] * 118 + [1] * 5 + [0] * 2
    assert cohen_kappa_score(a, b) == pytest.approx(-0.023392, abs=1e-6)
    assert second.fleiss_kappa(table) < 0


def test_counts_and_undefined_chance():
    classes = np.array([[1, 0, -1], [1, 0, 0]], dtype=np.int8)
    assert second.rater_counts(classes) == [[0, 0, 2], [0, 2, 0], [1, 1, 0]]
    one_class = [[0, 4, 0]] * 3
    assert second.gwet_ac1(one_class) == 1.0
    assert np.isnan(second.fleiss_kappa(one_class))
