"""Placement maps in little space: rounding, errors, and what is left out."""

from __future__ import annotations

import zlib

import numpy as np
import pytest

from seedaudit.consensus import lowrank
from seedaudit.consensus.lowrank import LARGEST_CODE, low_rank, packed


def mixed_maps(n=20, voxels=3000, rank=6, noise=0.0, seed=5):
    """A mean and a few patterns that fade, and noise that belongs to no pattern."""
    rng = np.random.default_rng(seed)
    fading = 0.4 / 2 ** np.arange(rank)
    maps = rng.normal(size=voxels) * 0.2
    maps = maps + (rng.normal(size=(n, rank)) * fading) @ rng.normal(size=(rank, voxels))
    return (maps + noise * rng.normal(size=(n, voxels))).astype(np.float32)


def test_the_largest_error_is_that_of_the_rounded_parts():
    maps = mixed_maps()
    kept = low_rank(maps, tolerance=0.02)
    assert kept.codes.dtype == np.int8
    assert np.abs(kept.codes.astype(int)).max() <= LARGEST_CODE
    rebuilt = kept.codes[0] * kept.steps[0] + kept.weights @ (kept.codes[1:] * kept.steps[1:, None])
    np.testing.assert_allclose(kept.error, np.abs(rebuilt - maps).max(), atol=1e-5)
    np.testing.assert_allclose(kept.maps(), rebuilt)
    assert kept.error < 0.02


@pytest.mark.parametrize("tolerance", [0.2, 0.05, 0.02, 0.005])
def test_components_stop_where_the_tolerance_is_met(tolerance):
    kept = low_rank(mixed_maps(), tolerance=tolerance)
    assert kept.error < tolerance
    assert (kept.errors[:-1] >= tolerance).all()


def test_rounding_costs_few_components():
    """Against numpy.linalg.svd: how many exact singular vectors meet the tolerance."""
    maps = mixed_maps(noise=0.01).astype(float)
    kept = low_rank(maps, tolerance=0.06)
    u, s, vt = np.linalg.svd(maps - maps.mean(axis=0), full_matrices=False)
    exact = (np.abs((u[:, k:] * s[k:]) @ vt[k:]).max() < 0.06 for k in range(1, len(s)))
    needed = 1 + list(exact).index(True)
    assert needed <= len(kept.steps) - 1 <= needed + 3
    np.testing.assert_allclose(np.linalg.norm(kept.weights[:, :3], axis=0), s[:3], rtol=1e-2)


def test_space_is_a_limit_and_the_error_says_so():
    maps = mixed_maps(noise=0.1)
    free = low_rank(maps, tolerance=0.02)
    held = low_rank(
        maps, tolerance=0.02, most_bytes=sum(len(packed(row)) for row in free.codes[:5])
    )
    assert len(held.steps) == 5
    np.testing.assert_array_equal(held.codes, free.codes[:5])
    assert held.error > 0.02
    np.testing.assert_allclose(held.error, np.abs(held.maps() - maps).max(), atol=1e-5)
    fewer = free.first(4)
    np.testing.assert_array_equal(fewer.maps(), held.maps())
    assert fewer.error == held.error


def test_one_extreme_voxel_does_not_spoil_the_others():
    """A voxel near |r| = 1 coarsens the steps of the mean; components take up what that loses."""
    maps = mixed_maps()
    maps[:, 7] = 8.4
    kept = low_rank(maps, tolerance=0.02)
    assert np.abs(kept.maps() - maps).max() < 0.02


def test_equal_maps_need_no_component():
    maps = np.repeat(mixed_maps(n=1), 4, axis=0)
    kept = low_rank(np.zeros((4, 10), np.float32), tolerance=0.02)
    assert kept.codes.shape == (1, 10)
    assert kept.error == 0
    assert low_rank(maps, tolerance=0.5).weights.shape == (4, 0)


def test_packing_is_undone_by_a_running_sum():
    """As the page does it: inflate, then add up modulo 256."""
    codes = np.random.default_rng(1).integers(-127, 128, 5000).astype(np.int8)
    steps = np.frombuffer(zlib.decompress(packed(codes)), np.uint8)
    np.testing.assert_array_equal(np.cumsum(steps, dtype=np.uint8).view(np.int8), codes)


def test_what_is_finer_than_the_steps_ends_the_search(monkeypatch):
    """The rounding of some hundred components is beyond the tolerance, and no step resolves it."""
    monkeypatch.setattr(lowrank, "MOST", 10**6)
    maps = (0.02 * np.random.default_rng(5).standard_normal((500, 2000))).astype(np.float32)
    found = low_rank(maps, tolerance=0.015)
    assert 0.015 < found.error < 0.03
    # every component that is kept says something
    assert (found.codes != 0).any(axis=1).all()
