"""Variance components and influence, against statsmodels and brute force."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from scipy import stats
from statsmodels.formula.api import ols
from statsmodels.stats.anova import anova_lm

from seedaudit.consensus.components import (
    contrast_effects,
    instability_influence,
    placement_share,
)

ONE = np.ones(1)


def layout(rng, n, placements, regions=1, place=0.2, person=0.3, noise=0.1):
    return (
        0.4
        + place * rng.standard_normal((1, placements, regions))
        + person * rng.standard_normal((n, 1, regions))
        + noise * rng.standard_normal((n, placements, regions))
    )


def test_contrast_effects_against_statsmodels():
    rng = np.random.default_rng(0)
    x = np.column_stack([np.ones(14), np.arange(14) % 2, rng.normal(30, 5, 14)])
    y, contrast = rng.standard_normal((14, 6)), np.array([1.0, -1.0, 0.1])
    effect, error = contrast_effects(y, x, contrast)
    tests = [sm.OLS(column, x).fit().t_test(contrast) for column in y.T]
    np.testing.assert_allclose(effect, [t.effect.item() for t in tests], rtol=1e-9)
    np.testing.assert_allclose(error, [t.sd.item() for t in tests], rtol=1e-9)
    assert np.isnan(contrast_effects(y[:1], np.ones((1, 1)), ONE)[1]).all()


def test_share_from_mean_squares_of_the_two_way_layout():
    """By the expected mean squares of statsmodels' analysis of variance of the same layout."""
    y = layout(np.random.default_rng(1), 7, 9)
    frame = pd.DataFrame(
        [(s, i, y[s, i, 0]) for s in range(7) for i in range(9)], columns=["s", "i", "z"]
    )
    mean_sq = anova_lm(ols("z ~ C(s) + C(i)", frame).fit())
    mean_sq = mean_sq["sum_sq"] / mean_sq["df"]
    placement = (mean_sq["C(i)"] - mean_sq["Residual"]) / 7
    sampling = (stats.sem(y[:, :, 0], axis=0) ** 2).mean()
    expected = placement / (placement + sampling)
    found = placement_share(y, np.ones((7, 1)), ONE)
    assert found[0] == pytest.approx(expected, rel=1e-9)


def test_share_finds_planted_components():
    """0.2^2 from placement against (0.3^2 + 0.1^2) / 20 from participants: 0.889."""
    rng = np.random.default_rng(2)
    found = placement_share(layout(rng, 20, 60, 200), np.ones((20, 1)), ONE)
    assert found.mean() == pytest.approx(0.04 / (0.04 + 0.1 / 20), abs=0.02)
    none = placement_share(layout(rng, 20, 60, 200, place=0.0), np.ones((20, 1)), ONE)
    assert none.mean() < 0.01
    assert (none >= 0).all()


def test_share_of_a_contrast_of_groups_and_missing_data():
    rng = np.random.default_rng(3)
    arm = np.arange(20) % 2
    y = layout(rng, 20, 40, 100, place=0.0)
    y += arm[:, None, None] * 0.3 * rng.standard_normal((1, 40, 100))
    x = np.column_stack([np.ones(20), arm])
    expected = 0.09 / (0.09 + 0.1 * (1 / 10 + 1 / 10))
    found = placement_share(y, x, np.array([0.0, 1.0]))
    assert found.mean() == pytest.approx(expected, abs=0.03)
    y[4, :, 0] = np.nan
    assert np.isnan(placement_share(y, x, np.array([0.0, 1.0]))[0])
    assert np.isnan(placement_share(y[:1], np.ones((1, 1)), ONE)).all()


@pytest.mark.parametrize("groups", [False, True])
def test_influence_is_leaving_out_one(groups):
    rng = np.random.default_rng(4)
    y = layout(rng, 9, 12, 5)
    y[3] += 0.8 * rng.standard_normal((12, 5))
    x, contrast = np.ones((9, 1)), ONE
    if groups:
        x, contrast = np.column_stack([np.ones(9), np.arange(9) % 2]), np.array([0.0, 1.0])

    def spread(rows):
        effect = contrast_effects(y[rows].reshape(len(rows), -1), x[rows], contrast)[0]
        return effect.reshape(12, 5).std(axis=0, ddof=1).mean()

    everyone = np.arange(9)
    expected = [spread(everyone) / spread(np.delete(everyone, s)) - 1 for s in everyone]
    found = instability_influence(y, x, contrast)
    np.testing.assert_allclose(found, expected, rtol=1e-9)
    assert found.argmax() == 3
    y[:, :, 2] = np.nan  # a region that nobody has takes no part
    assert not np.isnan(instability_influence(y, x, contrast)).any()
    assert np.isnan(instability_influence(y[:, :, 2:3], x, contrast)).all()
