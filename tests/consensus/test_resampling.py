"""Jackknife and bootstrap intervals against scipy, statsmodels and exact enumeration."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats

from seedaudit.consensus import resampling
from seedaudit.consensus.resampling import bootstrap_interval, delete_fold_interval

# Mouse survival times: Efron B. & Tibshirani R.J. (1993), ch. 2 (data from memory).
MICE = np.array([94.0, 197, 16, 38, 99, 141, 23])


def test_jackknife_of_single_participants_is_the_t_interval():
    # Folds of one: the jackknife of a mean is the ordinary standard error, to the digit.
    values = np.random.default_rng(0).normal(0.3, 0.2, 11)
    without = np.array([np.delete(values, i).mean() for i in range(11)])
    low, high = delete_fold_interval(values.mean(), without, np.ones(11))
    expected = stats.ttest_1samp(values, 0).confidence_interval(0.95)
    np.testing.assert_allclose((low, high), expected, rtol=1e-12)


def test_jackknife_of_equal_folds_is_the_t_interval_of_fold_means():
    values = np.random.default_rng(1).normal(0.3, 0.2, (6, 4))
    without = np.array([np.delete(values, g, axis=0).mean() for g in range(6)])
    low, high = delete_fold_interval(values.mean(), without, np.full(6, 4), level=0.9)
    expected = stats.ttest_1samp(values.mean(axis=1), 0).confidence_interval(0.9)
    np.testing.assert_allclose((low, high), expected, rtol=1e-12)


def test_jackknife_of_unequal_folds():
    # For a mean the pseudo-values are the fold means (algebra), so the variance of Busing et al.
    # (1999, from memory) is mean((fold mean - mean)^2 / (n / m - 1)).
    rng = np.random.default_rng(2)
    folds = [rng.normal(0.2, 0.3, m) for m in (5, 3, 4, 7)]
    sizes = np.array([len(fold) for fold in folds])
    everyone = np.concatenate(folds)
    without = np.array(
        [np.concatenate(folds[:g] + folds[g + 1 :]).mean() for g in range(len(folds))]
    )
    terms = [
        (fold.mean() - everyone.mean()) ** 2 / (everyone.size / fold.size - 1) for fold in folds
    ]
    half = stats.t.ppf(0.975, 3) * math.sqrt(sum(terms) / 4)
    low, high = delete_fold_interval(everyone.mean(), without, sizes)
    np.testing.assert_allclose((low, high), everyone.mean() + np.array([-half, half]), rtol=1e-12)


def test_jackknife_of_unequal_folds_has_the_right_spread():
    # Mean of the variance estimate over many samples against the true variance of a mean, 1 / n.
    rng = np.random.default_rng(3)
    sizes = np.array([2, 3, 4, 3])
    values = rng.standard_normal((12, 20_000))
    member = np.repeat(np.arange(4), sizes)
    without = np.stack([values[member != g].mean(axis=0) for g in range(4)])
    low, high = delete_fold_interval(values.mean(axis=0) - 50, without - 50, sizes)
    error = (high - low) / 2 / stats.t.ppf(0.975, 3)
    assert (error**2).mean() == pytest.approx(1 / 12, rel=0.03)


def test_jackknife_shapes_and_limits():
    full = np.array([[0.99, 0.5, np.nan]])
    without = np.stack([full - 0.1, full + 0.005, full])
    low, high = delete_fold_interval(full, without, [4, 4, 4])
    assert low.shape == high.shape == (1, 3)
    assert high[0, 0] == 1.0
    assert low[0, 0] < 0.99
    assert high[0, 1] - 0.5 == pytest.approx(0.5 - low[0, 1])
    assert np.isnan([low[0, 2], high[0, 2]]).all()
    assert np.isnan(delete_fold_interval(full, full[None], [4])).all()


def test_exact_bootstrap_error_of_a_mean():
    # All 7^7 resamples, as 1716 multisets with their probabilities: 23.3635234373 by enumeration
    # (printed 23.36, from memory).
    draws, chances = [], []
    for members in itertools.combinations_with_replacement(range(7), 7):
        counts = np.bincount(members, minlength=7)
        ways = math.factorial(7) // math.prod(math.factorial(int(c)) for c in counts)
        draws.append(counts)
        chances.append(ways / 7**7)
    draws, chances = np.array(draws, dtype=float), np.array(chances)
    q = np.full((7, 1), 1 / np.sqrt(7))
    weights = np.array([1 / np.sqrt(7)])
    residuals = (MICE - MICE.mean())[:, None]
    shift, error = resampling._refit(q, residuals, weights, draws)
    usable = (draws > 0).sum(axis=1) > 1
    assert usable.sum() == 1716 - 7
    # The seven resamples of one mouse repeated have no standard error and are left out.
    left_out = (residuals[:, 0] ** 2).sum() / 7**7
    assert chances.sum() == pytest.approx(1.0)
    variance = (chances[usable] * shift[:, 0] ** 2).sum() + left_out
    assert math.sqrt(variance) == pytest.approx(23.3635234373, abs=1e-9)
    # Each standard error is the ordinary one of its resample.
    for row in (0, 400, 1200):
        sample = np.repeat(MICE, draws[usable][row].astype(int))
        assert shift[row, 0] == pytest.approx(sample.mean() - MICE.mean(), abs=1e-9)
        assert error[row, 0] == pytest.approx(stats.sem(sample), rel=1e-9)


def two_groups(n_each, seed, k=3):
    rng = np.random.default_rng(seed)
    n = 2 * n_each
    group = np.repeat([0, 1], n_each)
    x = np.column_stack([np.ones(n), group, rng.normal(40, 9, n)])
    z = 0.2 + 0.3 * group[:, None] + rng.gamma(1.5, 0.2, (n, k))
    return x, z, group


def test_resampled_fits_match_statsmodels():
    x, z, strata = two_groups(8, seed=5)
    contrast = np.array([0.0, 1.0, -0.5])
    q, r = np.linalg.qr(x)
    residuals = z - q @ (q.T @ z)
    weights = np.linalg.solve(r.T, contrast)
    draws = resampling._draw_counts(strata, 6, np.random.default_rng(1))
    np.testing.assert_array_equal(draws[:, strata == 0].sum(axis=1), 8)
    shift, error = resampling._refit(q, residuals, weights, draws)
    for b, k in itertools.product(range(6), range(3)):
        rows = np.repeat(np.arange(16), draws[b].astype(int))
        test = sm.OLS(z[rows, k], x[rows]).fit().t_test(contrast)
        here = sm.OLS(z[:, k], x).fit().t_test(contrast)
        assert shift[b, k] == pytest.approx((test.effect - here.effect).item(), abs=1e-10)
        assert error[b, k] == pytest.approx(test.sd.item(), rel=1e-8)


def test_few_participants_get_the_ordinary_interval():
    x, z, strata = two_groups(5, seed=6)
    contrast = np.array([0.0, 1.0, 0.0])
    low, high = bootstrap_interval(x, z, contrast, strata, level=0.9, random_state=0)
    for k in range(3):
        expected = sm.OLS(z[:, k], x).fit().t_test(contrast).conf_int(alpha=0.1)[0]
        np.testing.assert_allclose((low[k], high[k]), expected, rtol=1e-9)
    one = np.ones((5, 1))
    low, high = bootstrap_interval(one, z[:5], np.ones(1), np.zeros(5, int), random_state=0)
    expected = stats.ttest_1samp(z[:5], 0).confidence_interval(0.95)
    np.testing.assert_allclose((low, high), expected, rtol=1e-10)


def test_no_residual_degrees_of_freedom():
    x, z, strata = two_groups(2, seed=7)
    x = np.column_stack([x, [0.0, 1.0, 4.0, 2.0]])
    found = bootstrap_interval(x, z, np.array([0, 1.0, 0, 0]), strata, random_state=0)
    assert np.isnan(found).all()
    assert np.shape(found) == (2, 3)


def naive_bootstrap_t(values, replicates, rng):
    """One-sample studentised interval, resample by resample."""
    n, mean, sem = len(values), values.mean(), stats.sem(values)
    t = []
    while len(t) < replicates:
        sample = values[rng.integers(0, n, n)]
        if len(np.unique(sample)) > 1:
            t.append((sample.mean() - mean) / stats.sem(sample))
    low, high = np.quantile(t, [0.025, 0.975])
    return mean - high * sem, mean - low * sem


def test_interval_of_a_skewed_sample_matches_a_naive_loop():
    values = np.random.default_rng(8).gamma(1.0, 0.3, 18)
    low, high = bootstrap_interval(
        np.ones((18, 1)), values[:, None], np.ones(1), np.zeros(18, int),
        replicates=20_000, random_state=1,
    )  # fmt: skip
    expected = naive_bootstrap_t(values, 4000, np.random.default_rng(2))
    width = expected[1] - expected[0]
    np.testing.assert_allclose((low[0], high[0]), expected, atol=0.06 * width)
    # Skewed to the right: the interval reaches further up than down.
    assert high[0] - values.mean() > 1.15 * (values.mean() - low[0])


@pytest.mark.parametrize("shape", ["normal", "skewed"])
def test_coverage(shape):
    # 1500 independent studies are the columns of one call; the binomial error is 0.6 points.
    rng = np.random.default_rng(11)
    n, k = 24, 1500
    group = np.repeat([0, 1], n // 2)
    noise = rng.standard_normal((n, k)) if shape == "normal" else rng.gamma(2.0, 1.0, (n, k))
    z = 0.4 * group[:, None] + noise
    x = np.column_stack([np.ones(n), group])
    low, high = bootstrap_interval(
        x, z, np.array([0.0, 1.0]), group, replicates=800, random_state=12
    )
    assert np.mean((low <= 0.4) & (high >= 0.4)) == pytest.approx(0.95, abs=0.025)


def test_reproducible_and_free_of_units():
    x, z, strata = two_groups(9, seed=9)
    contrast = np.array([0.0, 1.0, 0.0])
    first = bootstrap_interval(x, z, contrast, strata, replicates=400, random_state=3)
    again = bootstrap_interval(x, z, contrast, strata, replicates=400, random_state=3)
    other = bootstrap_interval(x, z, contrast, strata, replicates=400, random_state=4)
    np.testing.assert_array_equal(first, again)
    assert not np.allclose(first, other)
    scaled = x * [1, 1, 1e6]
    np.testing.assert_allclose(
        bootstrap_interval(scaled, z, contrast, strata, replicates=400, random_state=3),
        first,
        rtol=1e-9,
    )


def test_missing_and_constant_responses():
    z = np.random.default_rng(10).normal(0.2, 0.1, (8, 3))
    z[2, 0] = np.nan
    z[:, 1] = 0.25
    low, high = bootstrap_interval(
        np.ones((8, 1)), z, np.ones(1), np.zeros(8, int), replicates=300, random_state=0
    )
    assert np.isnan([low[0], high[0]]).all()
    np.testing.assert_allclose((low[1], high[1]), 0.25, atol=1e-12)
    assert low[2] < z[:, 2].mean() < high[2]


def test_a_covariate_that_resamples_can_lose():
    # One participant carries the covariate: resamples without it determine nothing and are left
    # out; the rest give a finite interval.
    x = np.column_stack([np.ones(10), np.eye(10)[0]])
    z = np.random.default_rng(13).normal(0, 1, (10, 2))
    low, high = bootstrap_interval(
        x, z, np.array([1.0, 0.0]), np.zeros(10, int), replicates=500, random_state=0
    )
    assert np.isfinite([low, high]).all()
    assert (low < z[1:].mean(axis=0)).all()
    assert (z[1:].mean(axis=0) < high).all()


def test_too_few_replicates():
    z = np.random.default_rng(14).normal(0, 1, (10, 1))
    with pytest.raises(ValueError, match="too few"):
        bootstrap_interval(
            np.ones((10, 1)), z, np.ones(1), np.zeros(10, int), replicates=20, random_state=0
        )
