"""Scores of candidate places against plain loops over participants, voxels and neighbours."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from scipy.spatial.distance import dice as dice_distance

from seedaudit.consensus.neighbourhood import (
    correlation_scores,
    dice_scores,
    fold_products,
    merge_folds,
    voxel_sampling_error,
)
from seedaudit.space.lattice import ball_lattice, neighbourhoods

SETS = np.array([[1, 1, 0, 0], [0, 1, 1, 1], [0, 0, 0, 1], [1, 1, 1, 1]], bool)


@pytest.fixture(scope="module")
def world():
    """z of 9 participants in 4 unequal folds on a small lattice, some of it unusable."""
    rng = np.random.default_rng(3)
    shifts = ball_lattice(7.0, 2.0)
    usable = shifts[:, 0] < 4.5
    around = neighbourhoods(shifts, usable, 4.0, 3.0, 2.0)
    smooth = np.exp(-((shifts[:, None] - shifts[None]) ** 2).sum(axis=-1) / 20)
    z = smooth @ rng.normal(0.1, 0.3, (9, len(shifts), 50)) + rng.normal(0, 0.3, 50)
    member = np.array([0, 0, 1, 1, 1, 2, 2, 3, 3])
    sums = np.stack([z[member == fold].sum(axis=0) for fold in range(4)])
    return shifts, around, z, member, sums


def naive_scores(world, similarity):
    """Mean over the participants of a set, then one neighbour after the other."""
    shifts, around, z, member, _ = world
    stability, likeness = np.empty((2, len(SETS), len(around.candidates)))
    for h, folds in enumerate(SETS):
        people = [i for i in range(len(z)) if folds[member[i]]]
        maps = np.mean([z[i] for i in people], axis=0)
        for c, row in enumerate(around.candidates):
            near = [
                other
                for other in range(len(shifts))
                if other != row
                and shifts[other, 0] < 4.5
                and np.linalg.norm(shifts[other] - shifts[row]) <= 3.0 + 1e-9
            ]
            stability[h, c] = np.mean([similarity(maps[row], maps[other]) for other in near])
            likeness[h, c] = similarity(maps[row], maps[0])
    return stability, likeness


def test_correlation_matches_a_loop(world):
    _, around, _, _, sums = world
    found = correlation_scores(fold_products(sums, around), SETS)
    expected = naive_scores(world, lambda a, b: stats.pearsonr(a, b).statistic)
    np.testing.assert_allclose(found, expected, atol=1e-12)


def test_single_precision_keeps_five_digits(world):
    _, around, _, _, sums = world
    exact = correlation_scores(fold_products(sums, around), SETS)
    # a mean far from 0, as under a global signal, must not cost digits either
    single = correlation_scores(fold_products((sums + 3).astype(np.float32), around), SETS)
    np.testing.assert_allclose(single, exact, atol=1e-5)


def test_dice_matches_a_loop(world):
    _, around, _, _, sums = world

    def similarity(a, b):
        # scipy's Dice of the ten largest values of each map
        return 1 - dice_distance(a >= np.sort(a)[-10], b >= np.sort(b)[-10])

    found = dice_scores(sums, around, SETS, share=0.2)
    np.testing.assert_allclose(found, naive_scores(world, similarity), atol=1e-6)


def test_many_sets_go_through_in_blocks(world):
    _, around, _, _, sums = world
    products = fold_products(sums, around)
    many = correlation_scores(products, np.tile(SETS, (20, 1)))
    once = correlation_scores(products, SETS)
    np.testing.assert_allclose(many.stability, np.tile(once.stability, (20, 1)), rtol=1e-12)


def test_a_constant_map_has_no_score(world):
    _, around, _, _, sums = world
    flat = sums.copy()
    flat[:, around.candidates[2]] = 0.0
    found = correlation_scores(fold_products(flat, around), SETS)
    assert np.isnan(found.stability[:, 2]).all()
    # its neighbours are scored with a map that is none, and so have no score either
    near = np.isin(around.candidates, around.points[around.starts[2] : around.starts[3]])
    assert np.isnan(found.stability[:, near]).all()
    assert np.isfinite(found.stability[:, ~near & (np.arange(len(near)) != 2)]).all()


def test_folds_are_merged_and_empty_ones_dropped():
    sums = np.arange(5 * 2 * 3, dtype=float).reshape(5, 2, 3)
    sizes = np.array([2, 0, 3, 1, 4])
    kept, kept_sizes = merge_folds(sums, sizes)
    np.testing.assert_array_equal(kept, sums[[0, 2, 3, 4]])
    np.testing.assert_array_equal(kept_sizes, [2, 3, 1, 4])
    merged, merged_sizes = merge_folds(sums, sizes, most=3)
    np.testing.assert_array_equal(merged, [sums[0] + sums[4], sums[2], sums[3]])
    np.testing.assert_array_equal(merged_sizes, [6, 3, 1])
    same, _ = merge_folds(sums, np.ones(5, int))
    assert same is sums


def test_voxel_sampling_error_is_the_spread_over_samples():
    # Truth: the spread of the scores over many samples of voxels from one population.
    rng = np.random.default_rng(4)
    shifts = ball_lattice(4.0, 2.0)
    around = neighbourhoods(shifts, np.ones(len(shifts), bool), 2.0, 2.0, 2.0)
    smooth = np.exp(-((shifts[:, None] - shifts[None]) ** 2).sum(axis=-1) / 12)
    population, taken = 3000, 600
    maps = smooth @ rng.normal(0, 1, (1, len(shifts), population))
    everyone = np.ones((1, 1), bool)
    scores, gains, errors = [], [], []
    for _ in range(150):
        sample = maps[:, :, rng.permutation(population)[:taken]]
        stability = correlation_scores(fold_products(sample, around), everyone).stability[0]
        scores.append(stability[3])
        gains.append(stability[3] - stability[0])
        errors.append(voxel_sampling_error(sample, around, 3, population))
    # the root mean square of 150 jackknives with 9 degrees of freedom each: about 5 % error
    typical = np.sqrt(np.mean(np.square(errors), axis=0))
    assert typical[0] == pytest.approx(np.std(scores), rel=0.15)
    assert typical[1] == pytest.approx(np.std(gains), rel=0.15)
    assert voxel_sampling_error(maps, around, 3, population) == (0.0, 0.0)
    assert np.isnan(voxel_sampling_error(maps[:, :, :3], around, 3, population)).all()
