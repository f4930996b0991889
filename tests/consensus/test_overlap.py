"""Overlap and similarity against scipy, scikit-learn, published concordances and plain loops."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy import stats
from scipy.spatial import distance
from sklearn.metrics import cohen_kappa_score, f1_score, jaccard_score

from seedaudit.consensus import overlap


def test_two_small_sets():
    a = np.array([1, 1, 1, 1, 0, 0, 0, 0, 0, 0], dtype=np.int8)
    b = np.array([0, 0, 1, 1, 1, 0, 0, 0, 0, 0], dtype=np.int8)
    table = overlap.dice_with_reference(a, b[None])
    assert table.dice[0, 0] == pytest.approx(4 / 7, abs=1e-12)
    assert table.dice[0, 0] == pytest.approx(1 - distance.dice(a > 0, b > 0), abs=1e-12)
    assert table.dice[0, 0] == pytest.approx(f1_score(a, b), abs=1e-12)
    # J = D / (2 - D) with the Jaccard index of another library.
    jaccard = table.dice[0, 0] / (2 - table.dice[0, 0])
    assert jaccard == pytest.approx(jaccard_score(a, b), abs=1e-12)
    assert np.isnan(table.dice[0, 1])
    assert table.sizes.tolist() == [[3, 0]]


def test_bigrams_and_empty_maps():
    # The word pair night / nacht shares one of four bigrams each: 0.25.
    assert overlap.dice(1, 4, 4) == 0.25
    np.testing.assert_array_equal(overlap.dice([0, 0], [0, 3], [0, 0]), [np.nan, 0.0])


@pytest.mark.parametrize(("d", "kappa"), [(10**2, 0.658228), (10**4, 0.726529)])
def test_kappa_rises_to_dice(d, kappa):
    # Fleiss J.L. (1975) Biometrics 31:651-659 (from memory): on sparse maps they nearly coincide.
    first = np.repeat([1, 1, 0, 0], [20, 10, 5, d])
    second = np.repeat([1, 0, 1, 0], [20, 10, 5, d])
    assert cohen_kappa_score(first, second) == pytest.approx(kappa, abs=1e-6)
    found = overlap.dice_with_reference(first.astype(np.int8), second.astype(np.int8)[None]).dice
    assert found[0, 0] == pytest.approx(40 / 55, abs=1e-12)
    assert found[0, 0] > kappa


def random_classes(n, v, seed):
    rng = np.random.default_rng(seed)
    base = rng.choice([-1, 0, 1], v, p=[0.2, 0.5, 0.3])
    other = rng.choice([-1, 0, 1], (n, v), p=[0.1, 0.6, 0.3])
    return np.where(rng.random((n, v)) < 0.6, base, other).astype(np.int8)


def test_dice_tables_match_libraries():
    classes = random_classes(7, 8192 * 2 + 91, seed=2)
    classes[3][classes[3] == -1] = 0
    classes[4][classes[4] == -1] = 0
    table = overlap.dice_with_reference(classes[0], classes)
    pairs = overlap.dice_pairs(classes)
    for tail, sign in enumerate((1, -1)):
        held = classes == sign
        np.testing.assert_array_equal(table.sizes[:, tail], held.sum(axis=1))
        for a, b in itertools.combinations_with_replacement(range(7), 2):
            filled = held[a].any() or held[b].any()
            expected = f1_score(held[a], held[b]) if filled else np.nan
            np.testing.assert_allclose(pairs[tail][a, b], expected, atol=1e-14)
            np.testing.assert_array_equal(pairs[tail][b, a], pairs[tail][a, b])
            if a == 0:
                np.testing.assert_allclose(table.dice[b, tail], expected, atol=1e-14)
    assert np.isnan(pairs[1][3, 4])


# Bland J.M. & Altman D.G. (1986) Lancet 327:307-310, Table 1, first reading on each meter.
WRIGHT = [494, 395, 516, 434, 476, 557, 413, 442, 650, 433, 417, 656, 267, 478, 178, 423, 427]
MINI = [512, 430, 520, 428, 500, 600, 364, 380, 658, 445, 432, 626, 260, 477, 259, 350, 451]
WRIGHT_2 = [490, 397, 512, 401, 470, 611, 415, 431, 638, 429, 420, 633, 275, 492, 165, 372, 421]


@pytest.mark.parametrize(
    ("x", "y", "concordance"),
    [
        (WRIGHT, MINI, 0.9427424314),
        (WRIGHT, WRIGHT_2, 0.9821305619),
        # Documentation examples of two machine-learning libraries, ddof 0.
        ([2.5, 0, 2, 8], [3, -0.5, 2, 7], 0.9767891683),
        ([1, 1, 0.2], [1, 0.9, 0.2], 0.9876543210),
        # By hand.
        ([1, 2, 3, 4, 5], [2, 3, 4, 5, 6], 0.8),
        ([1, 2, 3, 4, 5], [2, 4, 6, 8, 10], 8 / 19),
    ],
)
def test_published_concordances(x, y, concordance):
    x, y = np.array(x, dtype=float), np.array(y, dtype=float)
    found = overlap.spatial_similarity(x, y[None])
    assert found.concordance[0] == pytest.approx(concordance, abs=1e-9)
    assert found.r[0] == pytest.approx(stats.pearsonr(x, y).statistic, abs=1e-12)
    assert found.rms_difference[0] == pytest.approx(np.sqrt(((x - y) ** 2).mean()), abs=1e-12)


def related_maps(n, v, seed):
    rng = np.random.default_rng(seed)
    shared = rng.standard_normal(v)
    own = rng.standard_normal((n, v))
    return (0.3 + 0.8 * shared + 0.5 * own).astype(np.float32)


def test_correlations_match_numpy_and_one_another():
    effects = related_maps(6, 8192 + 77, seed=5)
    effects[2, 40] = np.nan
    effects[5] = 0.25
    common = np.delete(effects.astype(np.float64), 40, axis=1)
    pairs = overlap.correlation_pairs(effects)
    np.testing.assert_allclose(pairs[:5, :5], np.corrcoef(common[:5]), atol=1e-12)
    assert np.isnan(pairs[5]).all()
    assert np.isnan(pairs[:, 5]).all()
    found = overlap.spatial_similarity(effects[0], effects)
    np.testing.assert_allclose(found.r, pairs[0], atol=1e-12)
    assert found.concordance[0] == pytest.approx(1.0, abs=1e-12)
    assert found.rms_difference[0] == 0.0
    assert found.concordance[5] == pytest.approx(0.0, abs=1e-12)


def test_constant_and_missing_maps():
    ones = np.ones((2, 5))
    found = overlap.spatial_similarity(ones[0], np.stack([ones[0], ones[0] + 1]))
    assert np.isnan(found.r).all()
    np.testing.assert_allclose(found.concordance, [np.nan, 0.0])
    np.testing.assert_allclose(found.rms_difference, [0.0, 1.0])
    missing = np.full((2, 5), np.nan)
    assert np.isnan(np.stack(overlap.spatial_similarity(ones[0], missing))).all()
    assert np.isnan(overlap.correlation_pairs(missing)).all()


def naive_sweep(reference, maps, passes):
    """Mean Dice and size per tail over placements; `passes(values)` marks the kept voxels."""
    means = []
    for sign in (1, -1):
        scores, sizes = [], []
        held = passes(reference) & (np.sign(reference) == sign)
        for row in maps:
            here = passes(row) & (np.sign(row) == sign)
            sizes.append(here.sum())
            if here.sum() + held.sum():
                scores.append(2 * (here & held).sum() / (here.sum() + held.sum()))
        undefined = len(maps) - len(scores)
        means.append((np.mean(scores) if scores else np.nan, undefined, np.mean(sizes)))
    return means


def check_sweep(table, cuts, naive):
    np.testing.assert_array_equal(table["cut"], cuts)
    for c, rows in enumerate(naive):
        for tail, (mean, undefined, size) in zip(("positive", "negative"), rows, strict=True):
            np.testing.assert_allclose(table[f"dice_{tail}_mean"][c], mean, atol=1e-12)
            assert table[f"dice_{tail}_undefined"][c] == undefined
            assert table[f"n_{tail}"][c] == pytest.approx(size, abs=1e-9)


# One decimal makes many ties, at 0 as well; unsorted cuts must keep their order.
@pytest.mark.parametrize("decimals", [1, 7])
@pytest.mark.parametrize("gaps", [False, True])
def test_density_sweep_matches_naive(decimals, gaps):
    maps = np.round(related_maps(5, 311, seed=9), decimals)
    if gaps:
        maps[np.random.default_rng(1).random(maps.shape) < 0.1] = np.nan
    maps[4] = np.abs(maps[4])
    shares = np.array([0.2, 0.01, 0.5, 0.07, 1.0, 0.001])

    def keep(share):
        def passes(values):
            size = np.sort(np.abs(values[~np.isnan(values)]))[::-1]
            k = round(share * size.size)
            return np.abs(values) >= (size[k - 1] if k else np.inf)

        return passes

    sweep = overlap.Sweep.density(maps[0], shares)
    table = sweep.table([sweep.look(row) for row in maps[1:]])
    check_sweep(table, shares, [naive_sweep(maps[0], maps[1:], keep(s)) for s in shares])


@pytest.mark.parametrize("decimals", [1, 7])
def test_value_sweep_matches_naive(decimals):
    maps = np.round(related_maps(5, 311, seed=10).astype(np.float64), decimals)
    maps[2, :30] = np.nan
    maps[0, 20:50] = np.nan
    cuts = np.array([0.5, 0.0, 1.2, 0.3, 2.4, 99.0])
    sweep = overlap.Sweep.value(maps[0], cuts)
    table = sweep.table([sweep.look(row) for row in maps[1:]])
    naive = [naive_sweep(maps[0], maps[1:], lambda v, c=c: np.abs(v) >= c) for c in cuts]
    check_sweep(table, cuts, naive)
    assert np.isnan(table["dice_positive_mean"][-1])
    assert table["dice_positive_undefined"][-1] == 4


def test_dice_of_correlated_maps_at_a_fixed_size():
    # Two normal maps with r = 0.9, each tail cut at 10 %: Dice = P(both above) / 0.1, by the
    # bivariate normal distribution of scipy (0.69).
    cut = stats.norm.isf(0.1)
    joint = stats.multivariate_normal(cov=[[1, 0.9], [0.9, 1]]).cdf([-cut, -cut])
    rng = np.random.default_rng(12)
    x, noise = rng.standard_normal((2, 100_000))
    sweep = overlap.Sweep.density(x, [0.2])
    table = sweep.table([sweep.look(0.9 * x + np.sqrt(0.19) * noise)])
    assert joint / 0.1 == pytest.approx(0.69, abs=0.005)
    for tail in ("positive", "negative"):
        assert table[f"dice_{tail}_mean"][0] == pytest.approx(joint / 0.1, abs=0.012)
