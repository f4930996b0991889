"""What a rule asks of one more voxel, against the classes that the rule itself gives."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from seedaudit.inference.group import ThresholdRule, critical_values
from seedaudit.inference.threshold import classify

DF = 14


@pytest.fixture(scope="module")
def statistics():
    rng = np.random.default_rng(0)
    t = stats.t.rvs(DF, size=(3, 400), random_state=rng)
    t[:, :60] += np.array([4.0, 2.0, 0.0])[:, None]
    return t


@pytest.mark.parametrize(
    "rule",
    [
        ThresholdRule("p", 0.01), ThresholdRule("fdr", 0.05), ThresholdRule("bonferroni", 0.05),
        ThresholdRule("t", 2.5), ThresholdRule("density", 0.1),
        ThresholdRule("density", 0.1, per_tail=True),
    ],
)  # fmt: skip
@pytest.mark.parametrize("sign", [1, -1])
def test_the_voxels_that_reach_it_are_those_in_the_class(statistics, rule, sign):
    found = critical_values(statistics, np.full(400, float(DF)), rule, sign)
    for t, value in zip(statistics, found, strict=True):
        classes = classify(t, t, float(DF), rule.rule, rule.level, per_tail=rule.per_tail)
        np.testing.assert_array_equal(sign * t >= value, classes == sign)


def test_textbook_value_and_the_most_degrees_of_freedom(statistics):
    """t table: 2.1448 at 14 df, two-sided 0.05; voxels with fewer participants do not count."""
    df = np.full(400, float(DF))
    df[:50] = 9
    found = critical_values(statistics, df, ThresholdRule("p", 0.05), 1)
    np.testing.assert_allclose(found, 2.1448, atol=5e-5)


def test_nothing_passes():
    found = critical_values(np.zeros((1, 50)), np.full(50, 9.0), ThresholdRule("fdr", 0.05), 1)
    assert found[0] == np.inf


def test_no_tail_reaches_past_zero():
    """A share of each tail never takes voxels of the other sign."""
    rule = ThresholdRule("density", 0.9, per_tail=True)
    t = np.linspace(-1, 1, 41)[None]
    value = critical_values(t, np.full(41, 9.0), rule, 1)[0]
    assert 0 < value < 0.05
