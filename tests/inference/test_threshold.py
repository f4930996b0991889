"""Critical values, classes and cluster extent against scipy, statsmodels and printed tables."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from statsmodels.stats.multitest import multipletests

from seedaudit.inference.threshold import (
    classify,
    critical_value,
    density_cuts,
    drop_small_clusters,
)

# Benjamini & Hochberg (1995) J. R. Stat. Soc. B 57:289-300, thrombolysis example; the p-values
# and the count of 4 as kept in the test suite of statsmodels.
BH_1995 = """
.0001 .0004 .0019 .0095 .0201 .0278 .0298 .0344 .0459 .3240 .4262 .5719 .6528 .7590 1
"""
BH_1995 = np.array(BH_1995.split(), dtype=float)


def two_sided_t(p, df):
    signs = np.where(np.arange(len(p)) % 3 == 1, -1.0, 1.0)
    return signs * stats.t.isf(np.asarray(p) / 2, df)


@pytest.mark.parametrize("df", [7.0, 20.0, np.inf])
@pytest.mark.parametrize(("rule", "rejected"), [("fdr", 4), ("bonferroni", 3), ("p", 9)])
def test_thrombolysis_example(df, rule, rejected):
    # "Bonferroni 3" from memory of the 1995 paper, recomputed: .05 / 15 = .00333.
    t = two_sided_t(BH_1995, df)
    classes = classify(t, t, df, rule, 0.05)
    np.testing.assert_array_equal(classes[:rejected], np.sign(t[:rejected]))
    assert not classes[rejected:].any()


def random_statistics(seed, decimals):
    rng = np.random.default_rng(seed)
    t = rng.standard_t(15, 997) + 5 * (rng.random(997) < 0.2)
    t = np.round(t * rng.choice([-1, 1], t.size), decimals)
    t[rng.random(t.size) < 0.05] = np.nan
    return t


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("decimals", [1, 12])
@pytest.mark.parametrize("df", [15.0, np.inf, "voxels"])
@pytest.mark.parametrize("level", [0.01, 0.05, 0.4])
def test_fdr_matches_libraries(seed, decimals, df, level):
    t = random_statistics(seed, decimals)
    if df == "voxels":
        df = np.random.default_rng(seed + 50).choice([6.0, 14.0, 15.0, np.inf], t.size)
    tested = ~np.isnan(t)
    p = 2 * stats.t.sf(np.abs(t), df)[tested]
    expected = multipletests(p, level, method="fdr_bh")[0]
    np.testing.assert_array_equal(stats.false_discovery_control(p) <= level, expected)
    classes = classify(t, t, df, "fdr", level)
    np.testing.assert_array_equal(classes[tested] != 0, expected)
    np.testing.assert_array_equal(classes[tested][expected], np.sign(t[tested][expected]))
    assert not classes[~tested].any()
    assert 0 < expected.sum() < expected.size


def test_fdr_just_above_and_just_below_the_line():
    # The slowest case of the iteration: each step removes one voxel, until none is left.
    m = 400
    ranks = np.arange(1, m + 1)
    for offset, expected in ((0.5, 0), (-0.5, m)):
        p = (ranks + offset) * 0.05 / m
        assert multipletests(p, 0.05, method="fdr_bh")[0].sum() == expected
        t = two_sided_t(p, 30)
        assert np.count_nonzero(classify(t, t, 30, "fdr", 0.05)) == expected


@pytest.mark.parametrize("rule", ["fdr", "bonferroni", "density"])
def test_nothing_to_pass_gives_infinity(rule):
    assert critical_value(np.full(5, np.nan), 10, rule, 0.05) == np.inf
    if rule == "fdr":
        assert critical_value(np.linspace(-0.5, 0.5, 9), 10, rule, 0.05) == np.inf


@pytest.mark.parametrize("rule", ["p", "fdr", "bonferroni"])
def test_infinite_statistic_passes(rule):
    t = np.array([0.1, -np.inf, 0.2])
    np.testing.assert_array_equal(classify(t, t, 5, rule, 0.05), [0, -1, 0])


def test_a_statistic_at_the_critical_value_passes():
    # The step-up rule rejects p <= k q / m, equality included: first with k = m, then with k = 1.
    at_m = -critical_value(np.zeros(1), 12, "p", 0.05)
    at_one = critical_value(np.zeros(1), 12, "p", 0.025)
    for rule, statistic in (
        ("p", [at_m]),
        ("fdr", [at_m]),
        ("fdr", [at_one, 0.0]),
        ("bonferroni", [at_one, 0.0]),
    ):
        t = np.array(statistic)
        np.testing.assert_array_equal(classify(t, t, 12, rule, 0.05), np.sign(t))


# Two-sided critical values of t as printed in common handbook tables (.05, .01).
T_TABLE = {
    1: (12.7062, 63.6567),
    2: (4.3027, 9.9248),
    5: (2.5706, 4.0321),
    10: (2.2281, 3.1693),
    20: (2.0860, 2.8453),
    60: (2.0003, 2.6603),
    120: (1.9799, 2.6174),
    np.inf: (1.9599639845, 2.5758293035),
}


@pytest.mark.parametrize("df", T_TABLE)
def test_printed_t_table(df):
    for level, printed in zip((0.05, 0.01), T_TABLE[df], strict=True):
        assert critical_value(np.zeros(3), df, "p", level) == pytest.approx(printed, abs=6e-5)


def test_df_per_voxel():
    df = np.array([5.0, np.inf, 20.0, 5.0])
    statistic = np.array([2.5, 2.5, -2.5, np.nan])
    values = critical_value(statistic, df, "p", 0.05)
    np.testing.assert_allclose(values, stats.t.isf(0.025, df), rtol=1e-12)
    np.testing.assert_array_equal(classify(statistic, statistic, df, "p", 0.05), [0, 1, -1, 0])
    values = critical_value(statistic, df, "bonferroni", 0.05)
    np.testing.assert_allclose(values, stats.t.isf(0.025 / 3, df), rtol=1e-12)


def test_far_tail_keeps_precision():
    t = np.zeros(10)
    value = critical_value(t, np.inf, "p", 1e-250)
    assert value == pytest.approx(stats.norm.isf(5e-251), rel=1e-12)


def test_given_value_of_t():
    t = np.array([3.1, -3.1, 3.0999, np.nan])
    assert critical_value(t, 9, "t", 3.1) == 3.1
    np.testing.assert_array_equal(classify(t, t, 9, "t", 3.1), [1, -1, 0, 0])


@pytest.mark.parametrize("share", [0.01, 0.1, 0.3704, 0.557, 1.0])
@pytest.mark.parametrize("decimals", [0, 12])
def test_density_is_the_kth_largest(share, decimals):
    t = random_statistics(3, decimals)
    size = sorted((abs(v) for v in t if v == v), reverse=True)
    cut = size[round(share * len(size)) - 1]
    assert critical_value(t, 9, "density", share) == cut
    expected = [0 if not abs(v) >= cut else int(np.sign(v)) for v in t]
    np.testing.assert_array_equal(classify(t, t, 9, "density", share), expected)


def test_density_cuts_of_many_shares():
    t = random_statistics(5, 1)
    shares = np.array([0.3, 0.0, 0.02, 1.0, 0.3])
    size = np.sort(t[~np.isnan(t)])[::-1]
    expected = [size[round(s * size.size) - 1] if s else np.inf for s in shares]
    np.testing.assert_array_equal(density_cuts(t, shares), expected)


def test_density_per_tail():
    t = np.array([5.0, 4.0, 4.0, 1.0, 0.5, -0.1, -0.2, np.nan, 3.0, 2.0, 0.3])
    # Ten tested voxels: three per tail, but only two are negative.
    classes = classify(t, t, 9, "density", 0.3, per_tail=True)
    np.testing.assert_array_equal(classes, [1, 1, 1, 0, 0, -1, -1, 0, 0, 0, 0])
    # The second largest value is tied.
    classes = classify(t, t, 9, "density", 0.2, per_tail=True)
    np.testing.assert_array_equal(classes, [1, 1, 1, 0, 0, -1, -1, 0, 0, 0, 0])
    # Both tails together, by |t|: 5, 4, 4.
    np.testing.assert_array_equal(classify(t, t, 9, "density", 0.3), (np.abs(t) >= 4).astype(int))


def test_effect_cut_on_either_scale():
    # Fisher's transform: r = 0.5 is z = 0.5493061443 (printed z tables).
    effect = np.array([0.5494, 0.5492, -0.5494, 0.9, np.nan, 0.45])
    statistic = np.array([0.1, 9.0, -0.1, np.nan, 1.0, 1.0])
    r_classes = classify(statistic, effect, 9, "effect", 0.5, scale="r")
    np.testing.assert_array_equal(r_classes, [1, 0, -1, 0, 0, 0])
    z_classes = classify(statistic, effect, 9, "effect", 0.5)
    np.testing.assert_array_equal(z_classes, [1, 1, -1, 0, 0, 0])
    assert z_classes.dtype == np.int8


@pytest.mark.parametrize(
    ("rule", "level"),
    [("p", 0.0), ("fdr", 1.0), ("density", 1.2), ("density", 0), ("t", -1), ("effect", np.nan)],
)
def test_level_out_of_range(rule, level):
    with pytest.raises(ValueError, match=rule):
        classify(np.ones(3), np.ones(3), 9, rule, level)


def test_unknown_words():
    with pytest.raises(ValueError, match="holm"):
        classify(np.ones(3), np.ones(3), 9, "holm", 0.05)
    with pytest.raises(ValueError, match="effect"):
        critical_value(np.ones(3), 9, "effect", 0.05)
    with pytest.raises(ValueError, match="scale"):
        classify(np.ones(3), np.ones(3), 9, "effect", 0.05, scale="d")
    with pytest.raises(ValueError, match="neighbours"):
        drop_small_clusters(np.ones(1, np.int8), np.zeros((1, 3), int), (1, 1, 1), 2, 8)


@pytest.mark.parametrize(
    ("neighbours", "sizes"), [(6, [1, 1, 2, 2]), (18, [2, 2, 2, 2]), (26, [4, 4, 4, 4])]
)
def test_neighbours(neighbours, sizes):
    # Cluster sizes of these four voxels for 6, 18 and 26 neighbours: scipy.ndimage
    # generate_binary_structure(3, 1 | 2 | 3), counted by hand.
    ijk = np.array([(0, 0, 0), (1, 1, 0), (2, 2, 1), (2, 3, 1)])
    for sign in (1, -1):
        classes = np.full(4, sign, dtype=np.int8)
        for smallest in range(1, 6):
            kept = drop_small_clusters(classes, ijk, (4, 4, 4), smallest, neighbours)
            np.testing.assert_array_equal(kept, np.where(np.array(sizes) >= smallest, sign, 0))


def naive_clusters(classes, ijk, reach):
    """Cluster size of every voxel, grown voxel by voxel from a dictionary."""
    where = {tuple(p): c for p, c in zip(ijk.tolist(), classes.tolist(), strict=True)}
    size = {}
    for start, sign in where.items():
        found, todo = {start}, [start]
        while todo:
            a = todo.pop()
            for b, other in where.items():
                step = np.abs(np.subtract(a, b))
                near = step.max() == 1 and step.sum() <= reach
                if near and other == sign and b not in found:
                    found.add(b)
                    todo.append(b)
        size[start] = len(found) if sign else 0
    return np.array([size[tuple(p)] for p in ijk.tolist()])


@pytest.mark.parametrize(("neighbours", "reach"), [(6, 1), (18, 2), (26, 3)])
def test_clusters_match_naive_growth(neighbours, reach):
    rng = np.random.default_rng(8)
    shape = (3, 5, 6)
    ijk = np.argwhere(rng.random(shape) < 0.8)
    classes = rng.choice([-1, 0, 1], len(ijk), p=[0.3, 0.45, 0.25]).astype(np.int8)
    size = naive_clusters(classes, ijk, reach)
    kept = drop_small_clusters(classes, ijk, shape, 3, neighbours)
    np.testing.assert_array_equal(kept, np.where(size >= 3, classes, 0))
    assert 0 < np.count_nonzero(kept) < np.count_nonzero(classes)
