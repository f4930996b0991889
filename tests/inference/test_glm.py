"""The streamed group model against NIST data, statsmodels and scipy."""

from __future__ import annotations

import importlib.resources

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats

from seedaudit.inference.glm import orthonormal_design, solve_model
from seedaudit.sweep.correlate import ZBlock
from seedaudit.sweep.moments import Moments, merged
from tests.whole_states import estimate


def stream(x, y, contrast, valid=None, needed=None):
    """Add rows one by one, in three folds; y is (n, V), taken as one placement."""
    n, p = x.shape
    working, c = orthonormal_design(x, np.asarray(contrast, float))
    folds = []
    for rows in np.array_split(np.arange(n), 3):
        part = Moments.empty(p, 1, y.shape[1])
        for row in rows:
            keep = np.ones(y.shape[1], bool) if valid is None else valid[row]
            # float64 input: these reference data have more digits than float32 holds
            part.add(working[row], ZBlock(slice(None), np.where(keep, y[row], 0)[None], keep))
        folds.append(part)
    total = merged(folds)
    model = solve_model(total, c, n if needed is None else needed)
    return estimate(total, model, 0), model


def test_nist_norris():
    """NIST StRD Norris (file in the scipy wheel): certified estimates, SDs and residual df."""
    file = importlib.resources.files("scipy.stats.tests.data.nist_linregress") / "Norris.dat"
    lines = file.read_text().splitlines()[60:]
    y, x = np.array([line.split() for line in lines if line.strip()], float).T
    design = np.column_stack([np.ones_like(x), x])
    for contrast, value, sd in [
        ((1, 0), -0.262323073774029, 0.232818234301152),
        ((0, 1), 1.00211681802045, 0.000429796848199937),
    ]:
        found, model = stream(design, y[:, None], contrast)
        np.testing.assert_allclose(found.effect, value, rtol=1e-9)
        np.testing.assert_allclose(found.standard_error, sd, rtol=1e-7)
        assert model.df[0] == 34


def test_nist_longley():
    """NIST StRD Longley (data in statsmodels), higher difficulty: certified estimates and SDs."""
    data = sm.datasets.longley.load_pandas()
    design = np.column_stack([np.ones(16), data.exog.to_numpy(float)])
    certified = [
        (-3482258.63459582, 890420.383607373),
        (15.0618722713733, 84.9149257747669),
        (-0.0358191792925910, 0.0334910077722432),
        (-2.02022980381683, 0.488399681651699),
        (-1.03322686717359, 0.214274163161675),
        (-0.0511041056535807, 0.226073200069370),
        (1829.15146461355, 455.478499142212),
    ]
    for j, (value, sd) in enumerate(certified):
        found, _ = stream(design, data.endog.to_numpy(float)[:, None], np.eye(7)[j])
        np.testing.assert_allclose(found.effect, value, rtol=1e-8)
        np.testing.assert_allclose(found.standard_error, sd, rtol=1e-7)


def test_student_sleep():
    """Student (1908): paired t = -4.0621276834 on 9 df; two-sample pooled t = -1.8608134675."""
    one = np.array([0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0.0, 2.0])
    two = np.array([1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4])
    paired, model = stream(np.ones((10, 1)), (one - two)[:, None], [1])
    np.testing.assert_allclose(paired.statistic, -4.0621276834, rtol=1e-9)
    assert model.df[0] == 9
    arms = np.repeat(np.eye(2), 10, axis=0)
    pooled, model = stream(arms, np.concatenate([one, two])[:, None], [1, -1])
    np.testing.assert_allclose(pooled.statistic, -1.8608134675, rtol=1e-9)
    assert model.df[0] == 18


def test_any_full_rank_design_equals_statsmodels():
    rng = np.random.default_rng(4)
    n, n_voxels = 23, 6
    design = np.column_stack([np.ones(n), rng.integers(0, 2, n), 5000 + 20 * rng.random(n)])
    y = rng.standard_normal((n, n_voxels)) + design[:, [1]]
    contrast = np.array([0.2, 1, -0.01])
    found, _ = stream(design, y, contrast)
    for v in range(n_voxels):
        test = sm.OLS(y[:, v], design).fit().t_test(contrast)
        np.testing.assert_allclose(found.effect[v], test.effect, rtol=1e-8)
        np.testing.assert_allclose(found.statistic[v], test.tvalue.ravel(), rtol=1e-8)


def test_missing_voxels_by_counts_and_by_intersection():
    """With `counts` a voxel is tested in those who have it; with the intersection not at all."""
    rng = np.random.default_rng(5)
    n = 9
    y, x = rng.standard_normal((n, 3)), np.ones((n, 1))
    valid = np.ones((n, 3), bool)
    valid[:4, 1] = False
    valid[1:, 2] = False
    found, model = stream(x, y, [1], valid, needed=2)
    np.testing.assert_allclose(found.statistic[1], stats.ttest_1samp(y[4:, 1], 0).statistic)
    assert model.df[1] == 4
    assert np.isnan(found.statistic[2])
    assert np.isnan(stream(x, y, [1], valid)[0].statistic[1:]).all()


def test_a_voxel_with_one_arm_only_is_not_estimated():
    rng = np.random.default_rng(6)
    arms = np.repeat(np.eye(2), 5, axis=0)
    valid = np.ones((10, 2), bool)
    valid[5:, 1] = False
    found, _ = stream(arms, rng.standard_normal((10, 2)), [1, -1], valid, needed=3)
    assert np.isfinite(found.statistic[0])
    assert np.isnan(found.statistic[1])
    assert np.isnan(found.effect[1])


@pytest.mark.parametrize(("x", "y", "r", "t"), [
    ([2, 3, 4, 5, 6, 9], [5, 7, 7, 9, 12, 11], 0.861430896793535, 3.39229629366861),
])  # fmt: skip
def test_slope_t_equals_that_of_the_correlation(x, y, r, t):
    """Lane, HyperStat Online, significance test for Pearson's r: r = .8614, t = 3.392 on 4 df."""
    design = np.column_stack([np.ones(6), x]).astype(float)
    found, _ = stream(design, np.array(y, float)[:, None], [0, 1])
    np.testing.assert_allclose(found.statistic, t, rtol=1e-10)
    np.testing.assert_allclose(r * np.sqrt(4 / (1 - r * r)), t, rtol=1e-10)
