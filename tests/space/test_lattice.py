"""Lattices and their neighbourhoods by counting, and the even selection of voxels."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial import KDTree

from seedaudit.errors import StudyError
from seedaudit.shifts import draw_shifts
from seedaudit.space.grid import VoxelSet
from seedaudit.space.lattice import ball_lattice, evenly_spread, neighbourhoods
from tests.space.samples import isotropic, oblique, random_mask, restored


# Lattice points in a ball of radius n: the numbers of integer points with x2 + y2 + z2 <= n2,
# OEIS A000605 (from memory): 1, 7, 33, 123, 257, 515, 925, 1419.
@pytest.mark.parametrize(
    ("n", "count"), [(1, 7), (2, 33), (3, 123), (4, 257), (5, 515), (6, 925), (7, 1419)]
)
def test_number_of_points(n, count):
    points = ball_lattice(1.5 * n, 1.5)
    assert len(points) == count
    assert (points[0] == 0).all()
    distance = np.linalg.norm(points, axis=1)
    assert (np.diff(np.round(distance, 6)) >= 0).all()
    assert distance.max() == pytest.approx(1.5 * n)


def test_it_is_the_lattice_that_seeds_are_drawn_from():
    drawn = draw_shifts("lattice", count=1, within=7.0, random_state=0, step=2.0)
    np.testing.assert_array_equal(ball_lattice(7.0, 2.0)[1:], drawn)


@pytest.mark.parametrize("step", [0.0, -1.0, 9.0, np.nan])
def test_unusable_steps(step):
    with pytest.raises(StudyError):
        ball_lattice(8.0, step)


def test_neighbourhoods_match_a_loop():
    shifts = ball_lattice(9.0, 1.5)
    usable = (shifts @ [1.0, 0.4, -0.2] < 3.1) & (np.arange(len(shifts)) % 17 != 5)
    found = neighbourhoods(shifts, usable, 5.0, 4.0, 1.5)
    whole = len(ball_lattice(4.0, 1.5)) - 1
    expected = {}
    for row in np.flatnonzero(usable):
        near = [
            other
            for other in np.flatnonzero(usable)
            if other != row and np.linalg.norm(shifts[other] - shifts[row]) <= 4.0 + 1e-9
        ]
        if np.linalg.norm(shifts[row]) <= 5.0 + 1e-9 and len(near) >= whole / 2:
            expected[row] = near
    assert len(expected) < (np.linalg.norm(shifts, axis=1) <= 5).sum()
    assert list(found.candidates) == list(expected)
    for c, near in enumerate(expected.values()):
        np.testing.assert_array_equal(found.points[found.starts[c] : found.starts[c + 1]], near)
        assert found.share[c] == len(near) / whole
    np.testing.assert_array_equal(found.counts, [len(near) for near in expected.values()])


def test_a_whole_lattice_has_whole_neighbourhoods():
    shifts = ball_lattice(14.0, 2.0)
    found = neighbourhoods(shifts, np.ones(len(shifts), bool), 8.0, 6.0, 2.0)
    assert len(found.candidates) == 257
    assert set(found.counts) == {122}
    assert (found.share == 1).all()


def test_the_reported_seed_stays_a_candidate_beside_the_border():
    shifts = ball_lattice(6.0, 2.0)
    usable = shifts[:, 0] <= 0
    usable[1:] &= shifts[1:, 1] < -1
    found = neighbourhoods(shifts, usable, 4.0, 2.0, 2.0)
    assert found.candidates[0] == 0
    assert found.share[0] < 0.5
    with pytest.raises(StudyError, match="no neighbour"):
        neighbourhoods(shifts, np.arange(len(shifts)) == 0, 4.0, 2.0, 2.0)


@pytest.mark.parametrize("sizes", [(3.0, 3.0, 3.0), (2.0, 2.5, 3.5)], ids=["cubic", "oblong"])
@pytest.mark.parametrize("share", [0.02, 0.06, 0.15, 0.3])
def test_voxels_are_evenly_spread(sizes, share):
    # Against a choice by chance: how far any voxel, and the usual one, lies from a taken one.
    grid = oblique((48, 40, 36), sizes=sizes)
    ijk = np.argwhere(np.ones(grid.shape, bool))
    inside = np.linalg.norm(grid.to_world(ijk) - grid.corners().mean(axis=0), axis=1) < 40
    voxels = VoxelSet.from_mask(grid, inside.reshape(grid.shape))
    count = round(share * len(voxels))
    rows = evenly_spread(voxels, count)
    assert len(set(rows)) == len(rows) == count
    chance = np.random.default_rng(0).permutation(len(voxels))[:count]
    distance, by_chance = (
        KDTree(voxels.xyz[taken]).query(voxels.xyz)[0] for taken in (rows, chance)
    )
    assert distance.max() < 0.95 * by_chance.max()
    assert distance.mean() < 0.96 * by_chance.mean()


def test_all_voxels_where_fewer_are_there():
    voxels = VoxelSet.from_mask(oblique(), random_mask())
    assert list(evenly_spread(voxels, 10**6)) == list(range(len(voxels)))


@pytest.mark.parametrize("grid", [oblique(), isotropic(shape=(8, 11, 9))], ids=["oblique", "even"])
@pytest.mark.parametrize("storage", [([2, 0, 1], (1, -1, 1)), ([0, 1, 2], (-1, -1, -1))])
def test_storage_of_the_grid_decides_nothing(grid, storage):
    mask = random_mask(grid.shape)
    first = VoxelSet.from_mask(grid, mask)
    other = VoxelSet.from_mask(*restored(grid, mask, storage))
    assert not np.array_equal(first.ijk, other.ijk)
    np.testing.assert_array_equal(evenly_spread(first, 50), evenly_spread(other, 50))
    np.testing.assert_allclose(first.xyz, other.xyz, atol=1e-9)
