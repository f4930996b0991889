"""The mergeable state: merging is addition, in any grouping, and keeps the digits."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from seedaudit.inference.glm import orthonormal_design, solve_model
from seedaudit.sweep.correlate import LARGEST_Z, ZBlock
from seedaudit.sweep.moments import Moments, Steps, merged
from tests.whole_states import estimate

N, V = 3, 11


def moments_of(x, z, rows, valid=None, steps=None) -> Moments:
    total = Moments.empty(x.shape[1], N, V, steps=steps)
    for row in rows:
        keep = np.ones(V, bool) if valid is None else valid[row]
        for where in (slice(0, 4), slice(4, V)):
            kept = np.where(keep[where], z[row][:, where], 0).astype(np.float32)
            total.add(x[row], ZBlock(where, kept, keep[where]))
    return total


def study(rng, n=12, p=2):
    x = np.column_stack([np.ones(n), rng.standard_normal((n, p - 1))])
    return x, rng.standard_normal((n, N, V)).astype(np.float32)


@settings(max_examples=30, deadline=None)
@given(cuts=st.sets(st.integers(1, 11), max_size=6), seed=st.integers(0, 100))
def test_any_grouping_and_order_give_the_same_digits(cuts, seed):
    rng = np.random.default_rng(seed)
    x, z = study(rng)
    x, _ = orthonormal_design(x, np.ones(2))
    order = rng.permutation(12)
    steps = Steps.of(x, [np.arange(12)])
    whole = moments_of(x, z, range(12), steps=steps)
    bounds = [0, *sorted(cuts), 12]
    parts = [moments_of(x, z, order[a:b], steps=steps) for a, b in pairwise(bounds)]
    again = merged(parts[::-1])
    for (name, value), (_, other) in zip(
        whole.wide().named_arrays(), again.named_arrays(), strict=True
    ):
        np.testing.assert_array_equal(value, other, err_msg=name)
    total = moments_of(x, z, [], steps=steps)
    for part in parts:
        total += part
    for (name, value), (_, other) in zip(whole.named_arrays(), total.named_arrays(), strict=True):
        np.testing.assert_array_equal(value, other, err_msg=name)
    # the sums are those of the participants, to half a step for each of them
    np.testing.assert_allclose(
        again.zz, (z.astype(float) ** 2).sum(axis=0), atol=6 * steps.zz, rtol=0
    )
    np.testing.assert_allclose(
        again.xtz, np.einsum("sp,snv->pnv", x, z.astype(float)), atol=6 * steps.xz, rtol=0
    )


def test_no_sum_passes_the_range_of_32_bits():
    """Everybody at the largest z there is, with a column of one outlier."""
    n = 37
    x, _ = orthonormal_design(
        np.column_stack([np.ones(n), np.arange(n) == 5]).astype(float), np.ones(2)
    )
    steps = Steps.of(x, [np.arange(n)])
    z = np.full((n, N, V), LARGEST_Z, np.float32)
    found = moments_of(x, z, range(n), steps=steps).wide()
    np.testing.assert_allclose(found.zz, n * LARGEST_Z**2, rtol=1e-6)
    np.testing.assert_allclose(found.xtz[:, 0, 0], x.sum(axis=0) * LARGEST_Z, atol=1e-5)


def test_merging_leaves_its_parts_alone():
    x, z = study(np.random.default_rng(1))
    parts = [moments_of(x, z, range(6)), moments_of(x, z, range(6, 12))]
    before = parts[0].zz.copy()
    merged(parts)
    np.testing.assert_array_equal(parts[0].zz, before)


@pytest.mark.parametrize("mean", [0.0, 1.0, 8.0])
def test_no_cancellation_in_the_residual_sum_of_squares(mean):
    """Trap: float32 sums of z² lose the variance when the mean is large beside the spread."""
    rng = np.random.default_rng(2)
    n = 40
    z = (mean + 1e-3 * rng.standard_normal((n, N, V))).astype(np.float32)
    x, contrast = orthonormal_design(np.ones((n, 1)), np.array([1.0]))
    moments = moments_of(x, z, range(n))
    found = estimate(moments, solve_model(moments, contrast, n), 1)
    values = z[:, 1].astype(np.float64)
    np.testing.assert_allclose(found.effect, values.mean(axis=0), rtol=1e-12, atol=1e-12)
    np.testing.assert_allclose(
        found.standard_error, values.std(axis=0, ddof=1) / np.sqrt(n), rtol=1e-6
    )


@pytest.mark.parametrize("mean", [0.0, 1.0, 2.5])
@pytest.mark.parametrize(("n", "sd"), [(24, 0.03), (400, 0.03), (4000, 0.03)])
def test_whole_numbers_keep_t_beside_a_large_mean(mean, n, sd):
    """Trap: t within 1e-4 for the smallest spread that 1,100 volumes allow, up to r = 0.987.

    In float32 the sum of squares loses the variance from a mean of some 30 SD on.
    """
    rng = np.random.default_rng(3)
    z = (mean + sd * rng.standard_normal((n, N, V))).astype(np.float32)
    x, contrast = orthonormal_design(np.ones((n, 1)), np.array([1.0]))
    rows = np.array_split(np.arange(n), 8)
    steps = Steps.of(x, rows)
    assert steps.bits == (32 if n < 2000 else 64)
    total = merged(moments_of(x, z, own, steps=steps) for own in rows)
    found = estimate(total, solve_model(total, contrast, n), 0)
    values = z[:, 0].astype(np.float64)
    expected = values.mean(axis=0) / (values.std(axis=0, ddof=1) / np.sqrt(n))
    np.testing.assert_allclose(found.statistic, expected, rtol=1e-4, atol=1e-4)


@pytest.mark.parametrize(("n", "p"), [(2, 1), (3, 2), (5, 4), (8, 1), (24, 2)])
def test_whole_numbers_keep_what_is_significant(n, p):
    """With one degree of freedom the largest t are those whose residuals are next to nothing."""
    rng = np.random.default_rng(4)
    voxels = 100_000
    x = np.column_stack([np.ones(n), rng.standard_normal((n, p - 1))])
    x, contrast = orthonormal_design(x, np.eye(p)[0])
    z = (0.2 + 0.1 * rng.standard_normal((n, 1, voxels))).astype(np.float32)
    rows = [np.arange(n)[start::8] for start in range(min(n, 8))]
    steps = Steps.of(x, rows)
    t = {}
    for own in (None, steps):
        total = Moments.empty(p, 1, voxels, steps=own)
        for row in range(n):
            total.add(x[row], ZBlock(slice(0, voxels), z[row], np.ones(voxels, bool)))
        wide = total.wide()
        t[own] = estimate(wide, solve_model(wide, contrast, n), 0).statistic
    cut = stats.t.isf(5e-4, n - p)
    significant = np.abs(t[None]) >= cut
    assert significant.sum() > 20
    assert np.isfinite(t[steps]).all()
    differing = significant != (np.abs(t[steps]) >= cut)
    assert differing.sum() <= 2
