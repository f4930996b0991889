"""The search for a steadier seed against a plain loop over splits, choices and folds."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from scipy import stats

from seedaudit.consensus.neighbourhood import Scores
from seedaudit.consensus.steadier import steadier_seed, trade_off_front

MOVED = np.array([0.0, 2.0, 2.0, 2.8, 4.0])


class Invented:
    """Scores of sets of folds that depend on the set in no simple way."""

    def __init__(self, n_folds, better=0.0, noise=0.05, seed=0):
        rng = np.random.default_rng(seed)
        self.fold = rng.normal(0.7, noise, (n_folds, len(MOVED)))
        self.fold[:, 3] += better
        self.like = rng.uniform(0.75, 0.95, (n_folds, len(MOVED)))
        self.asked = 0

    def one(self, folds):
        folds = list(folds)
        stability = self.fold[folds].mean(axis=0) + 0.01 * np.sin(sum(folds) * MOVED)
        likeness = self.like[folds].mean(axis=0)
        likeness[0] = 1.0
        return stability, likeness

    def __call__(self, sets):
        self.asked += len(sets)
        return Scores(*np.array([self.one(np.flatnonzero(row)) for row in sets]).swapaxes(0, 1))


def naive_choice(scores, folds, keep):
    stability, likeness = scores.one(folds)
    allowed = [c for c in range(len(MOVED)) if c == 0 or likeness[c] >= keep]
    return max(allowed, key=lambda c: (stability[c], -c))


def naive_search(scores, n_folds, keep, left_out=None):
    """Every way to halve, each half choosing once; without a fold, it is missing in its half."""
    gains, gains_in, chosen, outside = [], [], [], []
    for first in combinations(range(n_folds), n_folds // 2):
        second = [g for g in range(n_folds) if g not in first]
        if n_folds % 2 == 0 and 0 not in first:
            continue  # the same halves as a split before
        halves = [[g for g in half if g != left_out] for half in (first, second)]
        if not all(halves):
            continue
        for choosing, scoring in (halves, halves[::-1]):
            best = naive_choice(scores, choosing, keep)
            here, there = scores.one(choosing)[0], scores.one(scoring)[0]
            gains.append(there[best] - there[0])
            gains_in.append(here[best] - here[0])
            outside.append(there)
            chosen.append(best)
    return np.mean(gains), np.mean(gains_in), chosen, np.mean(outside, axis=0)


@pytest.mark.parametrize("n_folds", [3, 4, 5, 8])
@pytest.mark.parametrize("better", [0.0, 0.2])
def test_search_matches_a_loop(n_folds, better):
    scores = Invented(n_folds, better, seed=n_folds)
    sizes = np.array([3, 2, 4, 3, 3, 2, 5, 3])[:n_folds]
    found = steadier_seed(scores, MOVED, sizes, keep_similarity=0.82)
    gain, gain_in, chosen, outside = naive_search(scores, n_folds, 0.82)
    assert found.gain == pytest.approx(gain)
    assert found.gain_in == pytest.approx(gain_in)
    assert found.shrinkage == pytest.approx(gain_in - gain)
    share = [chosen.count(c) / len(chosen) for c in range(len(MOVED))]
    np.testing.assert_allclose(found.table["share_chosen"], share)
    assert found.n_splits == len(chosen) / 2

    # Delete-a-fold jackknife for unequal folds: Busing et al. (1999), from memory.
    rest = np.array([naive_search(scores, n_folds, 0.82, g)[0] for g in range(n_folds)])
    h = sizes.sum() / sizes
    pseudo = h * gain - (h - 1) * rest
    centre = n_folds * gain - np.sum((1 - 1 / h) * rest)
    error = np.sqrt(np.mean((pseudo - centre) ** 2 / (h - 1)))
    half = stats.t.ppf(0.975, n_folds - 1) * error
    assert (found.gain_low, found.gain_high) == pytest.approx((gain - half, gain + half))

    everyone = range(n_folds)
    best = naive_choice(scores, everyone, 0.82)
    assert found.recommended == (best if gain - half > 0 else 0)
    np.testing.assert_allclose(found.table["stability_in"], scores.one(everyone)[0])
    np.testing.assert_allclose(found.table["similarity_to_reported"], scores.one(everyone)[1])
    other = np.arange(len(MOVED)) != (found.recommended or -1)
    np.testing.assert_allclose(found.table["stability_out"], outside)
    np.testing.assert_allclose(found.table["gain"][other], (outside - outside[0])[other])


def test_a_better_place_is_recommended_with_the_gain_of_the_search():
    scores = Invented(8, better=0.2)
    found = steadier_seed(scores, MOVED, np.full(8, 3), keep_similarity=0.5)
    assert found.recommended == 3
    row = {name: column[3] for name, column in found.table.items()}
    assert row["recommended"]
    assert row["keeps_identity"]
    assert row["share_chosen"] > 0.9
    assert (row["gain"], row["gain_low"], row["gain_high"]) == (
        found.gain,
        found.gain_low,
        found.gain_high,
    )
    assert row["gain_low"] > 0
    assert found.table["recommended"].sum() == 1


def test_noise_alone_keeps_the_reported_seed():
    kept = []
    for seed in range(60):
        # all candidates alike: the choosing half finds a gain, the other half does not
        found = steadier_seed(
            Invented(8, noise=0.05, seed=100 + seed), MOVED, np.full(8, 3), keep_similarity=0.0
        )
        assert found.gain_in >= 0
        kept.append(found.recommended == 0)
    assert np.mean(kept) >= 0.9


def test_a_better_place_with_another_network_is_not_recommended():
    scores = Invented(8, better=0.2)
    scores.like[:, 3] = 0.4
    found = steadier_seed(scores, MOVED, np.full(8, 3))
    assert found.recommended != 3
    assert found.table["share_chosen"][3] == 0
    assert not found.table["keeps_identity"][3]
    assert not found.table["on_front"][3]
    assert found.table["gain"][3] > 0.1


def test_two_folds_give_no_interval_and_so_no_move():
    found = steadier_seed(Invented(2, better=0.5), MOVED, np.array([4, 4]), keep_similarity=0.0)
    assert found.gain > 0.2
    assert np.isnan([found.gain_low, found.gain_high]).all()
    assert found.recommended == 0
    with pytest.raises(ValueError, match="two folds"):
        steadier_seed(Invented(1), MOVED, np.array([8]))


def test_every_set_of_folds_is_scored_once():
    scores = Invented(8)
    steadier_seed(scores, MOVED, np.full(8, 3))
    # all folds; halves of four; four without one fold of it: three
    assert scores.asked == 1 + 70 + 56


def test_more_splits_than_the_limit_are_drawn():
    scores = Invented(12, better=0.2)
    first, again, other = (
        steadier_seed(scores, MOVED, np.full(12, 2), limit=20, random_state=state)
        for state in (1, 1, 2)
    )
    assert first.n_splits == 20
    assert first.gain == again.gain
    assert first.gain != other.gain
    every = steadier_seed(scores, MOVED, np.full(12, 2), limit=1000)
    assert every.n_splits == 462
    assert first.gain == pytest.approx(every.gain, abs=0.02)


def test_a_candidate_without_a_score_is_never_chosen():
    scores = Invented(6)
    scores.fold[2, 1] = np.nan
    found = steadier_seed(scores, MOVED, np.full(6, 3), keep_similarity=0.0)
    assert found.table["share_chosen"][1] == 0
    assert np.isnan(found.table["stability_out"][1])
    assert np.isnan(found.table["gain"][1])
    assert np.isfinite(found.gain)
    assert np.isfinite(found.table["gain"][2:]).all()


def test_front_matches_a_loop():
    rng = np.random.default_rng(5)
    for _ in range(50):
        moved = np.sort(rng.choice([0, 2, 2.8284271247461903, 4, 4.5], 12))
        stability = np.round(rng.uniform(0.5, 1, 12), 1)
        stability[rng.integers(12)] = np.nan

        def beaten(c, moved=moved, stability=stability):
            return any(
                moved[o] <= moved[c]
                and stability[o] >= stability[c]
                and (moved[o] < moved[c] or stability[o] > stability[c])
                for o in range(12)
            )

        expected = [not np.isnan(stability[c]) and not beaten(c) for c in range(12)]
        np.testing.assert_array_equal(trade_off_front(moved, stability), expected)
