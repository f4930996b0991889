"""Intervals cover what they are about 93 to 97 times in 100 (nominal: 95)."""

from __future__ import annotations

import numpy as np
import pytest

from seedaudit.consensus.agreement import class_counts
from seedaudit.consensus.chance import gwet_ac1
from seedaudit.consensus.halves import FoldMaps, cross_half_r, fold_sums, half_splits, halves
from seedaudit.consensus.resampling import bootstrap_interval, delete_fold_interval
from seedaudit.inference.group import ThresholdRule, classifier
from seedaudit.sweep.moments import merged
from tests.simulations.world import World, allowed, fold_moments, replicates, told
from tests.whole_states import group_maps

ONE = np.ones(1)


def check_coverage(what, low, high, truth) -> None:
    """The share of intervals that hold the truth is within 93 to 97 % but for chance."""
    low, high = np.asarray(low), np.asarray(high)
    covered = told(f"coverage, {what}", np.mean((low <= truth) & (truth <= high)), len(low))
    margin = allowed(0.95, len(low))
    assert 0.93 - margin <= covered <= 0.97 + margin, covered


@pytest.mark.parametrize("skewed", [False, True])
def test_effect_of_a_region(skewed):
    """Bootstrap-t over 20 participants, also with a skewed distribution of participants."""
    rng, truth, low, high = np.random.default_rng(1), 0.3, [], []
    for number in range(replicates(30, 200)):
        spread = rng.gamma(2.0, 1.0, (20, 40)) - 2 if skewed else rng.standard_normal((20, 40))
        ends = bootstrap_interval(
            np.ones((20, 1)), truth + 0.2 * spread, ONE, np.zeros(20, int), replicates=999,
            random_state=number,
        )  # fmt: skip
        low += ends[0].tolist()
        high += ends[1].tolist()
    check_coverage(f"effect{' (skewed)' if skewed else ''}", low, high, truth)


def test_stability_and_ceiling_relative_stability():
    """Jackknife over 8 folds of 24 participants whose borders differ.

    The truth is the mean over all studies: what such a study gives in the long run.
    """
    world = World(count=12, participants=24, own_border=1.0)
    voxels = np.arange(world.voxels)
    ijk = np.stack([voxels, 0 * voxels, 0 * voxels], axis=1).astype(np.int32)
    classes_of = classifier(ThresholdRule("p", 0.01), ijk, (world.voxels, 1, 1))
    members = half_splits(8, 100)
    rng = np.random.default_rng(2)
    found: dict[str, list[tuple[float, float, float]]] = {}
    for _ in range(replicates(300, 2000)):
        folds, sizes = fold_moments(world.maps(rng))
        total = merged(folds)
        scores = [
            gwet_ac1(class_counts(group_maps(part, ONE, 2, classes_of).classes[1:]))
            for part in (total, *(total - fold for fold in folds))
        ]
        split = halves(np.array([f.xtx[:, :, 0] for f in folds]), sizes, ONE, members)
        bounds = np.array([[0, world.voxels]])
        maps = [FoldMaps.of(fold_sums(folds, i, voxels), bounds) for i in range(world.count + 1)]
        r = np.array([cross_half_r(maps[0], shifted, split)[:, 0] for shifted in maps])
        for name, values in (
            ("stability", np.array(scores)),
            ("ceiling", r[0]),
            ("relative", r[1:].mean(axis=0) / r[0]),
        ):
            low, high = delete_fold_interval(values[0], values[1:], sizes, most=np.inf)
            found.setdefault(name, []).append((float(values[0]), float(low), float(high)))
    for name, values in found.items():
        full, low, high = np.array(values).T
        check_coverage(name, low, high, full.mean())
