"""Voxelwise agreement against plain loops, numpy and the minimum-statistic example."""

from __future__ import annotations

import tracemalloc
from collections import Counter

import numpy as np
import pytest
from scipy import stats

from seedaudit.consensus import agreement


def random_classes(n, v, seed=0):
    rng = np.random.default_rng(seed)
    lean = rng.dirichlet((0.5, 0.5, 0.5), v)
    draws = rng.random((n, v))
    return (np.where(draws < lean[:, 0], 1, np.where(draws < lean[:, :2].sum(1), 0, -1))).astype(
        np.int8
    )


# 300 rows cross the internal row blocks, and one class filled throughout would overflow int8.
@pytest.mark.parametrize("n", [1, 7, 127, 128, 300])
def test_counts_and_maps_match_loops(n):
    classes = random_classes(n, 61, seed=n)
    classes[:, 0], classes[:, 1] = 1, -1
    counts = agreement.class_counts(classes)
    assert counts.dtype == np.int32
    positive, negative = agreement.agreement_shares(counts)
    modal, share = agreement.modal_class(counts)
    safe, contested = agreement.safe_map(counts, 0.9), agreement.contested_map(counts, 0.9)
    for v in range(classes.shape[1]):
        held = Counter(classes[:, v].tolist())
        assert counts[v].tolist() == [held[1], held[0], held[-1]]
        assert (positive[v], negative[v]) == (held[1] / n, held[-1] / n)
        most = max(held.values())
        assert modal[v] == next(c for c in (0, 1, -1) if held[c] == most)
        assert share[v] == most / n
        # Exact integers: share >= 9/10, and 1/10 < share < 9/10.
        assert safe[v] == next((c for c in (1, -1) if 10 * held[c] >= 9 * n), 0)
        assert contested[v] == any(n < 10 * held[c] < 9 * n for c in (1, -1))


@pytest.mark.parametrize(
    ("counts", "modal"),
    [((4, 4, 2), 0), ((4, 2, 4), 1), ((2, 4, 4), 0), ((3, 3, 3), 0), ((1, 2, 3), -1)],
)
def test_ties_of_the_modal_class(counts, modal):
    found, share = agreement.modal_class(np.array([counts], dtype=np.int32))
    assert found[0] == modal
    assert share[0] == max(counts) / sum(counts)


@pytest.mark.parametrize("n", [20, 60, 100, 140, 200])
@pytest.mark.parametrize("safe", [0.95, 0.9, 0.8])
def test_bounds_are_exact(n, safe):
    high, low = round(n * safe), round(n * (1 - safe))
    counts = np.array([[c, n - c, 0] for c in (high, high - 1, low, low + 1)], dtype=np.int32)
    np.testing.assert_array_equal(agreement.safe_map(counts, safe), [1, 0, 0, 0])
    np.testing.assert_array_equal(agreement.contested_map(counts, safe), [False, True, False, True])
    mirrored = counts[:, ::-1]
    np.testing.assert_array_equal(agreement.safe_map(mirrored, safe), [-1, 0, 0, 0])


def test_minimum_statistic_example():
    # Rule of Nichols et al. (2005) NeuroImage 25:653-660: the minimum against the ordinary
    # threshold, equal to the largest p against the level. Values by scipy.
    t = np.array([[2, 3.1, 1.5], [4.2, 3.6, 3.9], [2.5, -0.4, 3], [1.8, 1.75, 1.73], [1.7, 5, 5]]).T
    found = agreement.conjunction(t.min(axis=0), t.max(axis=0))
    np.testing.assert_allclose(found, [1.5, 3.6, 0.0, 1.73, 1.7])
    np.testing.assert_allclose(agreement.conjunction(-t.max(axis=0), -t.min(axis=0)), -found)
    largest_p = stats.t.sf(t, 20).max(axis=0)
    np.testing.assert_allclose(
        largest_p[[0, 1, 3, 4]], [0.074618, 0.000894, 0.049517, 0.052316], atol=1e-6
    )
    passes = found >= 1.7247182429
    np.testing.assert_array_equal(passes, [False, True, False, True, False])
    np.testing.assert_array_equal(passes, largest_p <= 0.05)


def test_conjunction_of_zero_and_missing():
    t = np.array([[0.0, np.nan, -2.0, 1.0], [3.0, 2.0, -1.0, -1.0]], dtype=np.float32)
    np.testing.assert_array_equal(
        agreement.conjunction(t.min(axis=0), t.max(axis=0)), [0.0, np.nan, -1.0, 0.0]
    )


def test_spread_matches_numpy():
    # A large offset: the SD must not be taken from sums of squares.
    effects = np.random.default_rng(4).normal(3000.0, 0.01, (23, 37)).astype(np.float32)
    effects[3, 5] = np.nan
    spread = agreement.effect_spread(effects)
    exact = effects.astype(np.float64)
    np.testing.assert_allclose(spread.mean, exact.mean(axis=0), rtol=1e-14)
    np.testing.assert_allclose(spread.sd, exact.std(axis=0, ddof=1), rtol=1e-9)
    np.testing.assert_array_equal(spread.minimum, exact.min(axis=0))
    np.testing.assert_array_equal(spread.maximum, exact.max(axis=0))
    assert np.isnan(spread.mean[5])
    assert np.isnan(agreement.effect_spread(exact[:1]).sd).all()


def test_spread_makes_no_double_precision_copy():
    effects = np.ones((64, 20_000), dtype=np.float32)
    tracemalloc.start()
    agreement.effect_spread(effects)
    agreement.conjunction(effects.min(axis=0), effects.max(axis=0))
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < effects.nbytes / 2


def test_ratio_to_sampling_error():
    ratio = agreement.placement_to_sampling(
        np.array([0.2, 0.1, 0.0, 0.3, np.nan]), np.array([0.1, 0.2, 0.0, np.nan, 0.1])
    )
    np.testing.assert_allclose(ratio, [2.0, 0.5, np.nan, np.nan, np.nan])
