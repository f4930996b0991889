"""Placement by placement gives what whole states give, for any number of workers."""

from __future__ import annotations

import numpy as np
import pytest

from seedaudit.consensus.agreement import class_counts
from seedaudit.inference.glm import orthonormal_design
from seedaudit.inference.group import ThresholdRule, classifier
from seedaudit.inference.placementwise import placement_maps
from seedaudit.sweep.correlate import ZBlock
from seedaudit.sweep.moments import Moments, merged
from tests.whole_states import group_maps, some

N, SHAPE = 7, (5, 6, 4)
V = int(np.prod(SHAPE))


def folds_of(rng, sizes, *, missing=False):
    """Moments of each fold for a mean and a covariate, and the contrast."""
    n = sum(sizes)
    x = np.column_stack([np.ones(n), rng.standard_normal(n)])
    working, contrast = orthonormal_design(x, np.array([1.0, 0.3]))
    z = 0.4 * rng.standard_normal((n, N, V)) + 0.3 * rng.standard_normal(V)
    parts, row = [], 0
    for size in sizes:
        part = Moments.empty(2, N, V)
        for _ in range(size):
            valid = np.ones(V, bool)
            if missing and row == 2:
                valid[:20] = False
            block = np.where(valid, z[row], 0).astype(np.float32)
            part.add(working[row], ZBlock(slice(0, V), block, valid))
            row += 1
        parts.append(part)
    return parts, contrast


@pytest.mark.parametrize("workers", [1, 3])
@pytest.mark.parametrize("missing", [False, True])
@pytest.mark.parametrize("rule", [("fdr", 0.2), ("p", 0.05), ("density", 0.2)])
def test_equals_whole_states(workers, missing, rule):
    rng = np.random.default_rng(3)
    sizes = [4, 0, 3, 5]
    folds, contrast = folds_of(rng, sizes, missing=missing)
    voxels = rng.random(V) < 0.8
    sized = rng.random(int(voxels.sum())) < 0.7
    ijk = np.argwhere(np.ones(SHAPE)).astype(np.int32)[voxels]
    classes_of = classifier(ThresholdRule(*rule), ijk, SHAPE)
    needed = 8 if missing else 12
    maps, without, seen = placement_maps(
        folds,
        sizes,
        voxels,
        contrast,
        needed,
        classes_of,
        sized,
        look=lambda found, df: found.statistic,
        workers=workers,
    )
    total = some(merged(folds), voxels=voxels)
    expected = group_maps(total, contrast, needed, classes_of)
    np.testing.assert_allclose(maps.effects, expected.effects, rtol=1e-6)
    np.testing.assert_allclose(np.array(seen), expected.statistics, rtol=1e-5)
    np.testing.assert_array_equal(maps.statistic, seen[0])
    np.testing.assert_array_equal(maps.lowest, np.min(seen, axis=0))
    np.testing.assert_array_equal(maps.highest, np.max(seen, axis=0))
    np.testing.assert_array_equal(maps.classes, expected.classes)
    np.testing.assert_allclose(maps.standard_error, expected.standard_error, rtol=1e-9)
    for column, sign in enumerate((1, -1)):
        np.testing.assert_array_equal(
            without.sizes[0, :, column], (maps.classes[:, sized] == sign).sum(axis=1)
        )
    used = [(fold, size) for fold, size in zip(folds, sizes, strict=True) if size]
    for g, (fold, size) in enumerate(used):
        rest = group_maps(total - some(fold, voxels=voxels), contrast, needed - size, classes_of)
        np.testing.assert_array_equal(without.counts(g), class_counts(rest.classes[1:]))
        for column, sign in enumerate((1, -1)):
            np.testing.assert_array_equal(
                without.sizes[1 + g, :, column], (rest.classes[:, sized] == sign).sum(axis=1)
            )


def test_one_fold_has_nothing_to_leave_out():
    folds, contrast = folds_of(np.random.default_rng(4), [6])
    every = np.ones(V, bool)
    ijk = np.argwhere(np.ones(SHAPE)).astype(np.int32)
    classes_of = classifier(ThresholdRule("p", 0.05), ijk, SHAPE)
    maps, without, _ = placement_maps(folds, [6], every, contrast, 6, classes_of, every)
    assert len(without.tails) == 0
    expected = [[(row == sign).sum() for sign in (1, -1)] for row in maps.classes]
    np.testing.assert_array_equal(without.sizes, [expected])
