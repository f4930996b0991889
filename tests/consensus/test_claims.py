"""Verdicts on claims, against scipy, statsmodels and the rules of the method by hand."""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats
from statsmodels.stats.weightstats import ttost_paired

from seedaudit.consensus.claims import judge_claim, verdict

DISTANCE = np.array([0.0, 1.5, 3.0, 4.5, 6.0, 7.0])


def judged(effects, n=20, spread=0.02, sign=1, **options):
    """A claim whose placements have these true effects; participants differ in level."""
    rng = np.random.default_rng(0)
    means = np.asarray(effects) + 0.1 * rng.standard_normal((n, 1))
    means = means + spread * rng.standard_normal((n, len(effects)))
    given = {"critical": np.full(len(effects), 3.0), "rearrangements": 999, **options}
    return means, judge_claim(
        sign * means, DISTANCE, np.ones((n, 1)), np.ones(1), sign, **given
    )  # fmt: skip


@pytest.mark.parametrize("sign", [1, -1])
def test_a_claim_that_breaks(sign):
    means, found = judged([0.4, 0.4, 0.35, 0.1, 0.0, 0.0], sign=sign)
    expected = stats.ttest_1samp(sign * means, 0)
    np.testing.assert_allclose(found.effect, sign * means.mean(axis=0))
    np.testing.assert_allclose(found.t, expected.statistic, rtol=1e-10)
    np.testing.assert_array_equal(found.passes, sign * expected.statistic >= 3)
    assert found.passes.tolist()[:3] == [True, True, True]
    assert not found.passes[4:].any()
    assert found.share_passing == pytest.approx(found.passes[1:].mean())
    assert found.first_failure == DISTANCE[np.flatnonzero(~found.passes)[0]]
    # the place where it weakens most, signed as the effect is
    assert found.largest_difference == pytest.approx(
        sign * (means - means[:, :1]).mean(axis=0).min()
    )
    assert found.difference_p < 0.01
    assert not found.equivalent
    assert found.verdict == "breaks"


def test_a_claim_that_holds_because_it_passes_everywhere():
    _, found = judged([0.4, 0.4, 0.35, 0.3, 0.3, 0.3])
    assert found.share_passing == 1
    assert np.isnan(found.first_failure)
    # a real difference, larger than the smallest effect of interest, does not break it
    assert found.difference_p < 0.05
    assert abs(found.largest_difference) > 0.05
    assert found.verdict == "holds"


def test_a_claim_that_holds_because_its_effect_is_equivalent():
    effects = [0.075, 0.055, 0.065, 0.055, 0.06, 0.06]
    _, trial = judged(effects)
    # so much is asked that only the reported placement, a little stronger, passes
    critical = np.full(6, np.sort(trial.t)[-2:].mean())
    assert trial.t.argmax() == 0
    means, found = judged(effects, critical=critical)
    assert found.passes[0]
    assert found.share_passing < 0.95
    # two one-sided tests by statsmodels
    p = [ttost_paired(column, means[:, 0], -0.05, 0.05)[0] for column in means[:, 1:].T]
    assert found.equivalent == (np.mean(np.array(p) < 0.05) >= 0.95)
    assert found.equivalent
    assert found.verdict == "holds"
    _, strict = judged(effects, critical=critical, smallest_effect=0.02)
    assert not strict.equivalent
    assert strict.verdict != "holds"


def test_significant_here_and_not_there_is_not_a_difference():
    """Nieuwenhuis et al. 2011: effects alike but noisy pass at some placements only."""
    _, found = judged([0.085, 0.08, 0.08, 0.08, 0.08, 0.08], spread=0.12)
    assert found.passes[0]
    assert found.share_passing < 0.95
    assert found.difference_p > 0.05
    assert found.verdict == "open"


def test_no_difference_is_not_stability_and_a_claim_that_does_not_pass_is_open():
    _, found = judged([0.01, 0.0, 0.01, 0.0, 0.01, 0.0])
    assert not found.passes[0]
    assert found.equivalent
    assert found.verdict == "open"


def test_a_claim_that_grows_does_not_break():
    """Only weakening counts: an effect that becomes larger elsewhere is no failure."""
    _, found = judged([0.1, 0.6, 0.6, 0.6, 0.6, 0.1], critical=np.array([0.5] + [60.0] * 5))
    assert found.passes[0]
    assert found.share_passing == 0
    assert found.verdict == "open"


def test_rule_on_the_effect():
    means, found = judged([0.3, 0.3, 0.1, 0.1, 0.3, 0.3], critical=np.full(6, 0.2), on_effect=True)
    np.testing.assert_array_equal(found.passes, means.mean(axis=0) >= 0.2)


def test_a_contrast_of_groups():
    """Against statsmodels, with a covariate; the paired difference is tested in the same model."""
    rng = np.random.default_rng(3)
    arm, age = np.arange(24) % 2, rng.normal(40, 8, 24)
    design = np.column_stack([np.ones(24), arm, age])
    contrast = np.array([0.0, 1.0, 0.0])
    effects = np.array([0.5, 0.5, 0.4, 0.2, 0.0, 0.0])
    means = arm[:, None] * effects + 0.01 * (age[:, None] - 40)
    means = means + 0.1 * rng.standard_normal((24, 6))
    found = judge_claim(means, DISTANCE, design, contrast, 1, np.full(6, 3.0), rearrangements=999)
    fits = [sm.OLS(column, design).fit() for column in means.T]
    np.testing.assert_allclose(found.effect, [fit.params[1] for fit in fits], rtol=1e-9)
    np.testing.assert_allclose(found.t, [fit.tvalues[1] for fit in fits], rtol=1e-9)
    change = [sm.OLS(column - means[:, 0], design).fit().params[1] for column in means.T[1:]]
    assert found.largest_difference == pytest.approx(min(change))
    assert found.verdict == "breaks"


def test_a_repeated_placement_is_equivalent_and_no_difference():
    rng = np.random.default_rng(4)
    means = np.repeat(0.3 + 0.1 * rng.standard_normal((12, 1)), 6, axis=1)
    found = judge_claim(means, DISTANCE, np.ones((12, 1)), np.ones(1), 1, np.full(6, 3.0))
    assert found.difference_p == 1
    assert found.equivalent
    assert found.verdict == "holds"


@pytest.mark.parametrize(
    ("passes", "steady", "equivalent", "broken", "expected"),
    [
        (True, True, False, False, "holds"), (True, False, True, False, "holds"),
        (True, True, False, True, "holds"), (True, False, True, True, "holds"),
        (True, False, False, True, "breaks"), (True, False, False, False, "open"),
        (False, True, True, True, "open"), (False, False, False, False, "open"),
    ],
)  # fmt: skip
def test_the_three_verdicts(passes, steady, equivalent, broken, expected):
    assert verdict(passes, steady, equivalent, broken) == expected
