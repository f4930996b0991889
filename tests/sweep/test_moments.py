"""The mergeable state: merging is addition, in any grouping, and keeps the digits."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from seedaudit.inference.glm import orthonormal_design, solve_model
from seedaudit.sweep.correlate import ZBlock
from seedaudit.sweep.moments import Moments, merged
from tests.whole_states import estimate

N, V = 3, 11


def moments_of(x, z, rows, valid=None) -> Moments:
    total = Moments.empty(x.shape[1], N, V)
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
    whole = moments_of(x, z, range(12))
    bounds = [0, *sorted(cuts), 12]
    parts = [moments_of(x, z, order[a:b]) for a, b in pairwise(bounds)]
    again = merged(parts[::-1])
    for (name, value), (_, other) in zip(whole.named_arrays(), again.named_arrays(), strict=True):
        np.testing.assert_array_equal(value, other, err_msg=name)
    rest = merged(parts[1:]) if len(parts) > 1 else moments_of(x, z, [])
    for (name, value), (_, other) in zip(
        (whole - parts[0]).named_arrays(), rest.named_arrays(), strict=True
    ):
        np.testing.assert_array_equal(value, other, err_msg=name)
    # the sums themselves are those of the participants, to float64's digits
    np.testing.assert_allclose(whole.zz, (z.astype(float) ** 2).sum(axis=0), rtol=1e-10)
    np.testing.assert_allclose(whole.xtz, np.einsum("sp,snv->pnv", x, z), atol=1e-12)


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


@pytest.mark.parametrize("ratio", [1.0, 10.0, 30.0])
def test_half_precision_of_the_folds_keeps_t(ratio):
    """With float32 parts of few participants t stays within 1e-4, mean/SD up to 30."""
    rng = np.random.default_rng(3)
    n = 24
    z = (0.05 * (ratio + rng.standard_normal((n, N, V)))).astype(np.float32)
    x, contrast = orthonormal_design(np.ones((n, 1)), np.array([1.0]))
    found = {}
    for dtype in (np.float64, np.float32):
        folds = []
        for rows in np.array_split(np.arange(n), 8):
            part = Moments.empty(1, N, V, dtype=dtype)
            for row in rows:
                part.add(x[row], ZBlock(slice(0, V), z[row], np.ones(V, bool)))
            folds.append(part)
        total = merged(folds)
        assert total.zz.dtype == np.float64
        found[dtype] = estimate(total, solve_model(total, contrast, n), 0).statistic
    np.testing.assert_allclose(found[np.float32], found[np.float64], rtol=1e-4)
