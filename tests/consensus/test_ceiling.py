"""Halves of participants: the fast way against maps made half by half with plain least squares."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from sklearn.metrics import f1_score

from seedaudit.consensus.ceiling import ceiling
from seedaudit.consensus.chance import gwet_ac1
from seedaudit.consensus.half_classes import class_similarity
from seedaudit.consensus.halves import FoldMaps, cross_half_r, fold_sums, half_splits, halves
from seedaudit.inference.glm import uniform_estimate
from seedaudit.sweep.correlate import ZBlock
from seedaudit.sweep.moments import Chosen, Moments, merged

V, N, FOLDS = 90, 5, 4  # voxels, placements (row 0 reported), folds
BOUNDS = np.array([[0, V], [10, 50], [50, 52]])


@pytest.fixture(scope="module", params=["mean", "arms"])
def study(request):
    """z (n, N, V), design, contrast, folds as rows, and the folds' moments."""
    rng = np.random.default_rng(7)
    n = 15
    pattern = rng.standard_normal((N, V)).cumsum(axis=0) * 0.3
    z = pattern + rng.standard_normal((n, N, V)) * 0.7
    design, contrast = np.ones((n, 1)), np.ones(1)
    if request.param == "arms":
        design = np.column_stack([np.ones(n), np.arange(n) // FOLDS % 2, rng.normal(0, 1, n)])
        contrast = np.array([0.0, 1.0, 0.0])
    rows = [np.arange(n)[start::FOLDS] for start in range(FOLDS)]
    moments = []
    for members in rows:
        part = Moments.empty(design.shape[1], N, V)
        for s in members:
            block = ZBlock(slice(0, V), z[s].astype(np.float32), np.ones(V, bool))
            part.add(design[s], block)
        moments.append(part)
    return z.astype(np.float32).astype(float), design, contrast, rows, moments


def fit(z, design, contrast, members):
    """Effect and t (N, V) of some participants, by least squares on their rows."""
    x, y = design[members], z[members].reshape(len(members), -1)
    beta, *_ = np.linalg.lstsq(x, y, rcond=None)
    df = len(members) - x.shape[1]
    variance = ((y - x @ beta) ** 2).sum(axis=0) / df * (contrast @ np.linalg.inv(x.T @ x)
                                                         @ contrast)  # fmt: skip
    effect = contrast @ beta
    return effect.reshape(N, V), (effect / np.sqrt(variance)).reshape(N, V)


def half_pairs(study, members, left_out=None):
    """Participants of both halves of each split, one fold left out."""
    rows = study[3]
    for inside in members:
        yield tuple(
            np.sort(np.concatenate([rows[g] for g in np.flatnonzero(half) if g != left_out]))
            for half in (inside, ~inside)
        )


def test_every_split_once():
    for n_folds, count in ((2, 1), (3, 3), (4, 3), (5, 10), (6, 10), (8, 35)):
        members = half_splits(n_folds, 100)
        assert members.shape == (count, n_folds)
        halves_found = {frozenset((frozenset(np.flatnonzero(row)), frozenset(np.flatnonzero(~row))))
                        for row in members}  # fmt: skip
        expected = {
            frozenset((frozenset(half), frozenset(set(range(n_folds)) - set(half))))
            for half in combinations(range(n_folds), n_folds // 2)
        }
        assert halves_found == expected
    some = half_splits(12, 40, random_state=1)
    assert some.shape == (40, 12)
    assert (some.sum(axis=1) == 6).all()
    assert len({tuple(row) for row in some}) == 40
    assert some[:, 0].all()
    np.testing.assert_array_equal(some, half_splits(12, 40, random_state=1))


def test_spatial_r_against_maps_of_halves(study):
    z, design, contrast, rows, moments = study
    members = half_splits(FOLDS, 10)
    sizes = [len(part) for part in rows]
    split = halves(np.array([m.xtx[:, :, 0] for m in moments]), sizes, contrast, members)
    voxels = np.arange(V)
    for i in range(N):
        found = cross_half_r(
            *(FoldMaps.of(fold_sums(moments, k, voxels), BOUNDS) for k in (0, i)), split
        )
        assert found.shape == (1 + FOLDS, len(BOUNDS))
        assert np.isnan(found[:, 2]).all()  # two voxels
        for d, left_out in enumerate([None, *range(FOLDS)]):
            for column, (start, stop) in enumerate(BOUNDS[:2]):
                values = []
                for one, other in half_pairs(study, members, left_out):
                    if min(len(one), len(other)) <= design.shape[1]:
                        continue
                    a = fit(z, design, contrast, one)[0][:, start:stop]
                    b = fit(z, design, contrast, other)[0][:, start:stop]
                    values += [np.corrcoef(a[0], b[i])[0, 1], np.corrcoef(b[0], a[i])[0, 1]]
                np.testing.assert_allclose(found[d, column], np.mean(values), atol=1e-6)


def test_estimate_of_a_half_is_least_squares(study):
    z, design, contrast, rows, moments = study
    members = np.concatenate([rows[0], rows[2]])
    total = merged([moments[0], moments[2]])
    xtx, sums = total.xtx[:, :, 0], total.sums(3, slice(None))
    found = uniform_estimate(xtx, sums, len(members), contrast)
    effect, t = fit(z, design, contrast, members)
    np.testing.assert_allclose(found.effect, effect[3], atol=1e-6)
    np.testing.assert_allclose(found.statistic, t[3], rtol=1e-5, atol=1e-6)
    assert uniform_estimate(xtx, sums, design.shape[1], contrast) is None


def naive_classes(t, tails):
    order = np.argsort(t)
    classes = np.zeros(len(t), int)
    classes[order[len(t) - tails[0] :]] = 1
    classes[order[: tails[1]]] = -1
    return np.where(np.sign(t) == classes, classes, 0)


def test_classes_of_halves_have_the_sizes_of_the_whole(study):
    """AC1 and Dice of both halves' class maps, cut by t to given sizes, from scratch."""
    z, design, contrast, rows, moments = study
    sizes = [len(part) for part in rows]
    rng = np.random.default_rng(3)
    tails = rng.integers(5, 30, (1 + FOLDS, N, 2))
    tails[:, 2, 1] = 0
    regions = np.array([-1, 0, 1])[np.arange(V) % 3]
    members = half_splits(FOLDS, 10)[:2]
    placements = np.array([0, 2, 4])
    found = class_similarity(
        moments,
        sizes,
        np.array([fold.xtx[:, :, 0] for fold in moments]),
        contrast,
        placements,
        np.arange(V),
        tails,
        regions,
        2,
        members,
    )
    for d, left_out in enumerate([None, *range(FOLDS)]):
        pairs = [
            pair for pair in half_pairs(study, members, left_out)
            if min(map(len, pair)) > design.shape[1]
        ]  # fmt: skip
        t = [[fit(z, design, contrast, half)[1] for half in pair] for pair in pairs]
        for m, i in enumerate(placements):
            for column, inside in enumerate([np.ones(V, bool), regions == 0, regions == 1]):
                values = {"ac1": [], "dice_positive": [], "dice_negative": []}
                for a, b in t:
                    for one, other in ((a, b), (b, a)):
                        x = naive_classes(one[0], tails[d, 0])[inside]
                        y = naive_classes(other[i], tails[d, i])[inside]
                        counts = np.array([[np.sum(v == c) for c in (1, 0, -1)]
                                           for v in np.stack([x, y], axis=1)])  # fmt: skip
                        values["ac1"].append(gwet_ac1(counts))
                        for name, sign in (("dice_positive", 1), ("dice_negative", -1)):
                            if (x == sign).any() or (y == sign).any():
                                values[name].append(f1_score(x == sign, y == sign))
                for name, expected in values.items():
                    np.testing.assert_allclose(
                        found[name][d, m, column], np.mean(expected) if expected else np.nan,
                        atol=1e-12, err_msg=name,
                    )  # fmt: skip


def whole(study, **options):
    _, _, contrast, rows, moments = study
    tails = np.full((1 + FOLDS, N, 2), 12)
    regions = np.array([-1, 0, 1])[np.arange(V) % 3]
    return ceiling(
        moments, [len(part) for part in rows], contrast, np.ones(V, bool), tails, regions, 2,
        **options,
    )  # fmt: skip


def test_ceiling_puts_it_together(study):
    found = whole(study)
    assert found.n_splits == found.n_class_splits == 3
    assert found.n_class_placements == N - 1
    for name in ("spatial_r", "ac1", "dice_positive", "dice_negative"):
        same, shifted = found.same[name], found.shifted[name]
        assert same.shape == (3, 3)
        known = ~np.isnan(found.relative[name][0])
        np.testing.assert_allclose(
            found.relative[name][0, known], shifted[0, known] / same[0, known]
        )
        # nothing is related to a map that is not like itself
        np.testing.assert_array_equal(known, (same[0] >= 0.05) & ~(same[1] <= 0))
    if not np.isnan(found.relative["spatial_r"][0, 0]):
        mean = found.placement_relative.mean()
        assert mean == pytest.approx(found.relative["spatial_r"][0, 0], abs=1e-12)


def test_a_control_that_is_the_reported_seed_has_ratio_one(study):
    moments = study[4]
    keep = np.ones((2, V), bool)
    found = whole(study, controls=[Chosen(m, np.array([0, 3])) for m in moments],
                  control_keep=keep)  # fmt: skip
    np.testing.assert_allclose(found.control_relative[0], 1.0 if np.isfinite(
        found.placement_relative[0]) else np.nan)  # fmt: skip
    np.testing.assert_allclose(found.control_relative[1], found.placement_relative[2])


def test_it_says_when_there_are_no_halves():
    """Fewer than two participants in a half, one fold, or no voxel that everybody has."""
    rng = np.random.default_rng(0)
    parts = []
    for _ in range(3):
        part = Moments.empty(1, N, V)
        part.add(np.ones(1), ZBlock(slice(0, V), rng.standard_normal((N, V)).astype(np.float32),
                                    np.ones(V, bool)))  # fmt: skip
        parts.append(part)
    tails = np.full((4, N, 2), 3)
    regions = np.full(V, -1)
    everything = np.ones(V, bool)
    one = np.ones(1)
    assert ceiling(parts, [1, 1, 1], one, everything, tails, regions, 0) is None
    assert ceiling(parts[:1], [1], one, everything, tails, regions, 0) is None
    assert ceiling(parts, [1, 1, 1], one, ~everything, tails, regions, 0) is None
    four = [*parts, merged(parts[:2])]
    found = ceiling(four, [1, 1, 1, 2], one, everything, np.full((5, N, 2), 3), regions, 0)
    assert found is not None
    # only {2, 1 person} against {1, 1}: two participants or more in each half
    assert found.n_splits == 3


def test_relative_stability_is_free_of_sampling_noise():
    """Two placements with the same true map, and one with another: 1, and their true r.

    The correlation of true maps is what remains when noise is divided out (correction for
    attenuation; Spearman C. 1904 Am. J. Psychol. 15:72-101, from memory).
    """
    rng = np.random.default_rng(5)
    a, b = rng.standard_normal((2, 4000))
    truth = np.stack([a, a, 0.6 * a + 0.8 * b])
    parts, sizes = [], []
    for _ in range(8):
        part = Moments.empty(1, 3, 4000)
        for _ in range(3):
            z = truth + 2 * rng.standard_normal((3, 4000))
            part.add(np.ones(1), ZBlock(slice(0, 4000), z.astype(np.float32), np.ones(4000, bool)))
        parts.append(part)
        sizes.append(3)
    found = ceiling(parts, sizes, np.ones(1), np.ones(4000, bool), np.full((9, 3, 2), 100),
                    np.full(4000, -1), 0)  # fmt: skip
    np.testing.assert_allclose(found.placement_relative, [1.0, 0.6], atol=0.03)
    # reliability of a mean of 12 with noise variance 4: 1 / (1 + 4 / 12)
    assert found.same["spatial_r"][0, 0] == pytest.approx(0.75, abs=0.02)
    low, high = found.relative["spatial_r"][1:, 0]
    assert low < 0.8 < high
