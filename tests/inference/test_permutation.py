"""Maximum statistics against nilearn, scipy and statsmodels, and exact enumeration."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest
import statsmodels.api as sm
from nilearn.mass_univariate import permuted_ols
from scipy import stats
from statsmodels.stats.multitest import multipletests

from seedaudit.inference.permutation import MaximumTest, holm_adjusted, maximum_test

ONE = np.ones(1)


def responses(n, m, seed, planted=4):
    y = np.random.default_rng(seed).standard_normal((n, m))
    y[:, :planted] += np.linspace(0.5, 1.2, planted)
    return y


def covariate_design(n, seed):
    rng = np.random.default_rng(seed)
    arm = np.arange(n) % 2
    return np.column_stack([np.ones(n), arm, rng.normal(40, 9, n) + 3 * arm])


def test_statistics_are_those_of_scipy_and_statsmodels():
    y = responses(17, 30, 0)
    found = maximum_test(y, np.ones((17, 1)), ONE, count=100)
    expected = stats.ttest_1samp(y, 0).statistic
    np.testing.assert_allclose(found.statistics, np.abs(expected), rtol=1e-10)
    signed = maximum_test(y, np.ones((17, 1)), ONE, two_sided=False, count=100)
    np.testing.assert_allclose(signed.statistics, expected, rtol=1e-10)
    x, contrast = covariate_design(17, 1), np.array([0.0, 1.0, 0.2])
    found = maximum_test(y, x, contrast, two_sided=False, count=100)
    expected = [sm.OLS(column, x).fit().t_test(contrast).tvalue.item() for column in y.T]
    np.testing.assert_allclose(found.statistics, expected, rtol=1e-8)


def agrees(ours: MaximumTest, theirs, n_perm: int) -> None:
    """Family-wise p-values within Monte Carlo error: 5 standard errors of their difference."""
    p = 10 ** -theirs["logp_max_t"][0]
    error = np.sqrt(2 * p * (1 - p) / n_perm) + 2 / n_perm
    np.testing.assert_array_less(np.abs(ours.p_values() - p), 5 * error)
    assert (p < 0.5).sum() >= 2
    quantile = np.quantile(np.abs(theirs["h0_max_t"]), 0.95)
    assert ours.critical_value(0.05) == pytest.approx(quantile, rel=0.05)


def test_sign_flips_agree_with_nilearn():
    y = responses(20, 200, 2)
    theirs = permuted_ols(
        np.ones((20, 1)), y, n_perm=2000, two_sided_test=True, random_state=3, output_type="dict"
    )
    agrees(maximum_test(y, np.ones((20, 1)), ONE, count=2000), theirs, 2000)


def test_permutations_with_a_covariate_agree_with_nilearn():
    x = covariate_design(22, 4)
    y = responses(22, 200, 5, planted=0) + 0.05 * (x[:, 2:] - 40)
    y[:, :4] += x[:, 1:2] * np.linspace(1, 2.5, 4)
    theirs = permuted_ols(
        x[:, 1:2], y, confounding_vars=x[:, 2:], model_intercept=True, n_perm=2000,
        two_sided_test=True, random_state=6, output_type="dict",
    )  # fmt: skip
    agrees(maximum_test(y, x, np.array([0.0, 1.0, 0.0]), count=2000), theirs, 2000)


@pytest.mark.parametrize("two_sided", [True, False])
def test_few_participants_are_enumerated(two_sided):
    """All 2^6 sign flips by hand; |t| knows no difference between a flip and its opposite."""
    y = responses(6, 9, 7)
    found = maximum_test(y, np.ones((6, 1)), ONE, two_sided=two_sided, count=5000)
    assert len(found.maxima) == (32 if two_sided else 64)
    maxima = []
    for signs in product((1, -1), repeat=6):
        t = stats.ttest_1samp(y * np.array(signs)[:, None], 0).statistic
        maxima.append((np.abs(t) if two_sided else t).max())
    expected = [np.mean(np.array(maxima) >= t - 1e-9) for t in found.statistics]
    np.testing.assert_allclose(found.p_values(), expected)


def test_critical_value_is_where_p_crosses_the_level():
    test = MaximumTest(np.array([1.0]), np.arange(1.0, 101.0))
    # exactly 5 of 100 maxima are 96 or more
    assert test.p_values(np.array([96.0, 95.0])).tolist() == [0.05, 0.06]
    value = test.critical_value(0.05)
    assert 95 < value < 95.001
    assert test.critical_value(0.009) == np.inf
    few = maximum_test(responses(5, 4, 8), np.ones((5, 1)), ONE)
    assert few.critical_value(0.05) == np.inf  # the smallest p of 16 rearrangements is 0.0625
    assert few.critical_value(0.0625) < np.inf


def test_the_same_state_gives_the_same_numbers_and_data_are_left_alone():
    y = responses(15, 40, 9)
    before = y.copy()
    one, other = (
        maximum_test(y, np.ones((15, 1)), ONE, count=300, random_state=4) for _ in range(2)
    )
    np.testing.assert_array_equal(one.maxima, other.maxima)
    np.testing.assert_array_equal(y, before)
    third = maximum_test(y, np.ones((15, 1)), ONE, count=300, random_state=5)
    assert (one.maxima != third.maxima).any()
    assert one.maxima[0] == one.statistics.max()


def test_a_response_without_spread_has_no_t():
    y = np.column_stack([np.zeros(9), responses(9, 1, 10, planted=1)])
    found = maximum_test(y, np.ones((9, 1)), ONE)
    assert found.statistics[0] == 0
    assert found.p_values()[0] == 1


def test_more_columns_than_a_block():
    """Blocks of columns and batches of rearrangements change nothing."""
    y = responses(13, 5000, 11)
    whole = maximum_test(y, np.ones((13, 1)), ONE, count=700, random_state=1)
    parts = [
        maximum_test(part, np.ones((13, 1)), ONE, count=700, random_state=1)
        for part in (y[:, :1700], y[:, 1700:])
    ]
    np.testing.assert_allclose(whole.maxima, np.maximum(*(p.maxima for p in parts)), rtol=1e-12)


def test_holm():
    """The 15 p-values of Benjamini & Hochberg (1995), against statsmodels."""
    p = np.array([.0001, .0004, .0019, .0095, .0201, .0278, .0298, .0344, .0459, .3240, .4262,
                  .5719, .6528, .7590, 1.0])  # fmt: skip
    shuffled = np.random.default_rng(0).permutation(p)
    expected = multipletests(shuffled, method="holm")[1]
    np.testing.assert_allclose(holm_adjusted(shuffled), expected, rtol=1e-12)
    np.testing.assert_allclose(holm_adjusted(p)[:4], [0.0015, 0.0056, 0.0247, 0.1140], atol=5e-5)
    with_gap = holm_adjusted(np.array([0.01, np.nan, 0.03]))
    np.testing.assert_array_equal(with_gap, [0.02, np.nan, 0.03])
