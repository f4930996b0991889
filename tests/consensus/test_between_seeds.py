"""Two seeds against their clouds: a plain loop over halves, and planted networks."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from scipy import stats

from seedaudit.consensus.between_seeds import SeedMaps, _verdict, between_seeds
from seedaudit.consensus.halves import half_splits, halves
from seedaudit.shifts import draw_shifts

NAMES = [
    "a", "b", "distance_mm", "spatial_r", "dice_positive", "dice_negative", "within_a", "within_b",
    "ceiling", "relative", "relative_low", "relative_high", "relative_within_a",
    "relative_within_b", "interchangeable",
]  # fmt: skip


def study(
    centres, border=None, *, noise=0.3, participants=24, folds=8, placements=25, targets=300, seed=0
):
    """Seeds in one network, or on the two sides of a border across x, as fold sums of z.

    Noise is alike at near places, as it is in overlapping spheres.
    """
    rng = np.random.default_rng(seed)
    shifts = draw_shifts("ball", count=placements, within=6.0, random_state=1)
    cloud = np.vstack([np.zeros((1, 3)), shifts])
    places = np.vstack([centre + cloud for centre in np.asarray(centres)])
    gap = np.linalg.norm(places[:, None] - places[None], axis=-1)
    sharing = np.linalg.cholesky(np.exp(-(gap**2) / 25) + 1e-6 * np.eye(len(places)))
    maps = np.random.default_rng(9).normal(0, 0.3, (2, targets))
    member = np.arange(participants) % folds
    z = np.empty((participants, len(places), targets))
    for i in range(participants):
        side = np.ones(len(places))
        if border is not None:
            side = 1 / (1 + np.exp((places[:, 0] - border - rng.normal()) / 1.5))
        own = maps + rng.normal(0, 0.2, maps.shape)
        z[i] = np.outer(side, own[0]) + np.outer(1 - side, own[1])
        z[i] += sharing @ rng.normal(0, noise, (len(places), targets))
    z = z.reshape(participants, len(centres), len(cloud), targets)
    sums = np.stack([z[member == fold].sum(axis=0) for fold in range(folds)])
    effects = z.mean(axis=0)
    sizes = np.bincount(member)
    seeds = [
        SeedMaps(
            np.asarray(centre, float),
            effects[s],
            np.sign(np.round(2 * effects[s, 0])).astype(np.int8),
            sums[:, s].transpose(1, 0, 2),
        )
        for s, centre in enumerate(centres)
    ]
    return seeds, split_of(sizes), sizes.tolist(), z


def split_of(sizes):
    """One-sample half-splits of folds of those sizes."""
    xtx = sizes[:, None, None].astype(float)
    return halves(xtx, sizes.tolist(), np.ones(1), half_splits(len(sizes), 100))


def test_it_matches_a_loop():
    seeds, split, sizes, z = study(
        [(0, 0, 0), (9, 1, 0), (4, 0, 3)], border=5.0, folds=4, participants=10, placements=4,
        targets=60,
    )  # fmt: skip
    found = between_seeds(seeds, split, sizes)
    assert list(found) == NAMES
    member = np.arange(10) % 4

    def crossed(first, second, left_out=None):
        values = []
        for half in combinations(range(4), 2):
            one = np.isin(member, half) & (member != left_out)
            two = ~np.isin(member, half) & (member != left_out)
            values.append(
                stats.pearsonr(first[one].mean(axis=0), second[two].mean(axis=0)).statistic
            )
        return np.mean(values)

    def relative(first, second, left_out=None):
        ceilings = crossed(first, first, left_out) * crossed(second, second, left_out)
        return crossed(first, second, left_out) / np.sqrt(ceilings)

    for row, (a, b) in enumerate(combinations(range(3), 2)):
        got = {name: found[name][row] for name in found}
        assert (got["a"], got["b"]) == (a, b)
        assert got["distance_mm"] == pytest.approx(np.linalg.norm(seeds[a].at - seeds[b].at))
        mean = z.mean(axis=0)
        assert got["spatial_r"] == pytest.approx(np.corrcoef(mean[a, 0], mean[b, 0])[0, 1])
        for name, s in (("a", a), ("b", b)):
            alike = [np.corrcoef(mean[s, 0], mean[s, i])[0, 1] for i in range(1, 5)]
            assert got[f"within_{name}"] == pytest.approx(np.median(alike))
            within = [relative(z[:, s, 0], z[:, s, i]) for i in range(1, 5)]
            assert got[f"relative_within_{name}"] == pytest.approx(np.quantile(within, 0.05))
        full = relative(z[:, a, 0], z[:, b, 0])
        assert got["relative"] == pytest.approx(full)
        assert got["ceiling"] == pytest.approx(
            np.sqrt(crossed(z[:, a, 0], z[:, a, 0]) * crossed(z[:, b, 0], z[:, b, 0]))
        )
        # delete-a-fold jackknife for folds of 3, 3, 2, 2: Busing et al. (1999), from memory
        rest = np.array([relative(z[:, a, 0], z[:, b, 0], fold) for fold in range(4)])
        h = 10 / np.array(sizes)
        pseudo = h * full - (h - 1) * rest
        centre = 4 * full - np.sum((1 - 1 / h) * rest)
        half = stats.t.ppf(0.975, 3) * np.sqrt(np.mean((pseudo - centre) ** 2 / (h - 1)))
        assert got["relative_low"] == pytest.approx(full - half)
        assert got["relative_high"] == pytest.approx(full + half)
        classes = [seeds[s].classes for s in (a, b)]
        both = np.sum((classes[0] == 1) & (classes[1] == 1))
        sizes_plus = [np.sum(c == 1) for c in classes]
        assert got["dice_positive"] == pytest.approx(2 * both / sum(sizes_plus))


@pytest.mark.parametrize("gap", [8.0, 16.0])
def test_two_seeds_of_one_network_are_interchangeable(gap):
    verdicts = []
    for seed in range(12):
        seeds, split, sizes, _ = study([(0, 0, 0), (gap, 0, 0)], placements=15, seed=seed)
        found = between_seeds(seeds, split, sizes)
        verdicts.append(found["interchangeable"][0])
        # in the same people they look less alike than their placements, by shared noise alone
        assert found["spatial_r"][0] < found["within_a"][0]
    assert verdicts.count(True) >= 11


@pytest.mark.parametrize("gap", [8.0, 16.0])
def test_two_seeds_across_a_border_are_not(gap):
    for seed in range(6):
        seeds, split, sizes, _ = study(
            [(0, 0, 0), (gap, 0, 0)], border=gap / 2, placements=15, seed=seed
        )
        assert between_seeds(seeds, split, sizes)["interchangeable"][0] is False


def test_few_noisy_participants_decide_nothing():
    seeds, split, sizes, _ = study(
        [(0, 0, 0), (12, 0, 0)], noise=2.0, participants=8, folds=4, placements=8, targets=80
    )
    found = between_seeds(seeds, split, sizes)
    assert found["interchangeable"][0] is None


def test_verdicts():
    assert _verdict(low=0.95, above=0.01, limit=0.98) is True
    assert _verdict(low=0.85, above=0.01, limit=0.98) is None
    assert _verdict(low=0.75, above=0.01, limit=0.70) is True  # a fragile seed has a wide cloud
    assert _verdict(low=0.95, above=-0.01, limit=0.98) is False
    assert _verdict(low=float("nan"), above=float("nan"), limit=0.98) is None


def test_without_folds_only_the_same_people_are_compared():
    seeds, _, _, _ = study([(0, 0, 0), (8, 0, 0)], placements=4, targets=50)
    found = between_seeds(seeds, None, [1])
    assert np.isfinite(found["spatial_r"]).all()
    assert np.isnan(found["relative"]).all()
    assert np.isnan(found["relative_low"]).all()
    assert found["interchangeable"][0] is None


def test_one_seed_has_nothing_to_be_compared_with():
    seeds, split, sizes, _ = study([(0, 0, 0)], placements=2, targets=20)
    assert between_seeds(seeds, split, sizes) == {}
