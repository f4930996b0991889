"""A steadier seed, chosen honestly: chosen in one half of the participants, scored in the other.

The best of many noisy scores is too good. So the gain of the search is what the place chosen in
one half gains in the other half, over all ways to halve the folds; and without a gain beyond noise
the reported seed is kept.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.consensus.halves import MOST_SPLITS, half_splits
from seedaudit.consensus.neighbourhood import Scores, ScoresOf
from seedaudit.consensus.resampling import delete_fold_interval

FloatArray = NDArray[np.float64]
Sets = NDArray[np.bool_]

SCORED_ON = "overall mean map of all participants, never the group effect of interest"
"""What the output says of the scores."""


@dataclass(frozen=True)
class Search:
    """What the search for a steadier seed found.

    Parameters
    ----------
    table : dict of (C,) arrays
        A row for each candidate, the reported seed first; see `steadier_seed`.
    recommended : int
        Row of the recommended candidate; 0 means: keep the reported seed.
    gain, gain_low, gain_high : float
        Gain of the search over the reported seed in the half that had no part in the choice, and
        its 95 % interval over participants (NaN with fewer than three folds).
    chosen_in, chosen_out : float
        Mean score of the chosen place in the half that chose it, and in the other half.
    gain_in : float
        The gain as the choosing half would have it: too good.
    n_splits : int
        Ways to halve the folds that were used.
    """

    table: dict[str, NDArray[Any]]
    recommended: int
    gain: float
    gain_low: float
    gain_high: float
    chosen_in: float
    chosen_out: float
    gain_in: float
    n_splits: int

    @property
    def shrinkage(self) -> float:
        """What of the in-sample gain is lost in other participants."""
        return self.gain_in - self.gain


@dataclass(frozen=True)
class _Outcome:
    """Means over the splits: of the search, and of every candidate."""

    gain: float
    gain_in: float
    chosen_in: float
    chosen_out: float
    stability: FloatArray
    share_chosen: FloatArray


def steadier_seed(
    scores_of: ScoresOf,
    moved: FloatArray,
    fold_sizes: NDArray[np.int_],
    *,
    keep_similarity: float = 0.8,
    limit: int = MOST_SPLITS,
    random_state: int = 0,
    level: float = 0.95,
) -> Search:
    """Look for a steadier place for a seed.

    Parameters
    ----------
    scores_of : callable
        From sets of folds to scores, such as `correlation_scores` with its first argument bound.
        Candidate 0 is the reported seed.
    moved : (C,)
        Distance of each candidate from the reported seed, mm, ascending.
    fold_sizes : (G,) int
        Participants in each fold, 1 or more; two folds at least.
    keep_similarity : float
        Similarity with the map of the reported seed that a candidate must have in the half that
        chooses, 0 to 1.
    limit : int
        Most splits; each is used in both directions.
    random_state : int
        Of the splits, where there are more than the limit.
    level : float
        Of the intervals.

    Returns
    -------
    Search
        Columns of the table: ``moved_mm``; ``stability_in``, the score in all participants;
        ``stability_out``, the mean score in the half that had no part in a choice; ``gain``,
        ``gain_low``, ``gain_high``, its difference from the reported seed's, as for a place named
        beforehand; ``similarity_to_reported`` and ``keeps_identity`` in all participants;
        ``share_chosen``, the share of choices that fell on the candidate; ``on_front``: no
        candidate that moves as little or less is as steady or steadier; ``recommended``.

        In the row of a recommended move the gain and its interval are those of the search, so that
        the choice among all candidates is paid for.

    Raises
    ------
    ValueError
        Fewer than two folds.

    Notes
    -----
    The two halves share no participant, so the gain is unbiased for the gain that a search with
    half of the participants has in others. The interval is the jackknife over folds of the whole
    search: without a fold, the choices are made anew.
    """
    n_folds = len(fold_sizes)
    if n_folds < 2:
        raise ValueError(f"halves need two folds or more, found {n_folds}")
    halves = half_splits(n_folds, limit, random_state)
    everybody = np.ones((1, n_folds), dtype=bool)
    kept = [everybody, *(~np.eye(n_folds, dtype=bool))] if n_folds > 2 else [everybody]
    sides = [_both_sides(halves, folds) for folds in kept]
    needed = np.concatenate([everybody, *(np.concatenate(pair) for pair in sides)])
    sets, where = np.unique(needed, axis=0, return_inverse=True)
    found = scores_of(sets)
    # a candidate without a score in some set is never chosen in any
    known = np.isfinite(found.stability).all(axis=0)
    scores = Scores(
        np.where(known, found.stability, -np.inf), np.nan_to_num(found.likeness, nan=-1.0)
    )

    ends = np.cumsum([1, *(2 * len(choosing) for choosing, _ in sides)])
    rows = np.split(where.ravel(), ends[:-1])
    outcomes = [
        _honest(scores, *np.split(row, 2), keep_similarity=keep_similarity) for row in rows[1:]
    ]
    full, without = outcomes[0], outcomes[1:]
    low, high = _interval(full.gain, [one.gain for one in without], fold_sizes, level)
    total = Scores(scores.stability[rows[0]], scores.likeness[rows[0]])
    best = int(_choices(total, keep_similarity)[0])
    recommended = best if low > 0 else 0
    table = _table(full, without, total, moved, fold_sizes, keep_similarity, level)
    table["recommended"] = np.arange(len(moved)) == recommended
    if recommended:
        for name, value in (("gain", full.gain), ("gain_low", low), ("gain_high", high)):
            table[name][recommended] = value
    return Search(
        table, recommended, full.gain, float(low), float(high), full.chosen_in, full.chosen_out,
        full.gain_in, len(halves),
    )  # fmt: skip


def _both_sides(halves: Sets, kept: NDArray[np.bool_]) -> tuple[Sets, Sets]:
    """The halves that choose and the halves that score, of the folds that are kept."""
    first, second = halves & kept, ~halves & kept
    filled = first.any(axis=1) & second.any(axis=1)
    first, second = first[filled], second[filled]
    return np.concatenate([first, second]), np.concatenate([second, first])


def _choices(scores: Scores, keep_similarity: float) -> NDArray[np.intp]:
    """The steadiest candidate of each set that keeps the identity; the nearest among equals."""
    kept = scores.likeness >= keep_similarity
    kept[:, 0] = True
    return np.argmax(np.where(kept, scores.stability, -np.inf), axis=1)


def _honest(
    scores: Scores,
    choosing: NDArray[np.intp],
    scoring: NDArray[np.intp],
    *,
    keep_similarity: float,
) -> _Outcome:
    """Choose in one half, score in the other."""
    chose = Scores(scores.stability[choosing], scores.likeness[choosing])
    chosen = _choices(chose, keep_similarity)
    each = np.arange(len(chosen))
    out = scores.stability[scoring]
    inside, outside = chose.stability[each, chosen], out[each, chosen]
    return _Outcome(
        float(np.mean(outside - out[:, 0])),
        float(np.mean(inside - chose.stability[:, 0])),
        float(inside.mean()),
        float(outside.mean()),
        out.mean(axis=0),
        np.bincount(chosen, minlength=out.shape[1]) / len(chosen),
    )


def _interval(
    full: Any, without: list[Any], fold_sizes: NDArray[np.int_], level: float
) -> tuple[FloatArray, FloatArray]:
    value = np.asarray(full, dtype=np.float64)
    if not without:
        missing = np.full(value.shape, np.nan)
        return missing, missing.copy()
    return delete_fold_interval(value, np.array(without), fold_sizes, level)


def _table(
    full: _Outcome,
    without: list[_Outcome],
    total: Scores,
    moved: FloatArray,
    fold_sizes: NDArray[np.int_],
    keep_similarity: float,
    level: float,
) -> dict[str, NDArray[Any]]:
    finite = [
        np.where(np.isfinite(one.stability), one.stability, np.nan) for one in (full, *without)
    ]
    stability = finite[0]
    gains = [values - values[0] for values in finite]
    low, high = _interval(gains[0], gains[1:], fold_sizes, level)
    keeps = total.likeness[0] >= keep_similarity
    keeps[0] = True
    return {
        "moved_mm": np.asarray(moved, dtype=np.float64),
        "stability_in": np.where(np.isfinite(total.stability[0]), total.stability[0], np.nan),
        "stability_out": stability,
        "gain": gains[0],
        "gain_low": low,
        "gain_high": high,
        "similarity_to_reported": total.likeness[0],
        "keeps_identity": keeps,
        "share_chosen": full.share_chosen,
        "on_front": trade_off_front(moved, np.where(keeps, stability, np.nan)),
    }


def trade_off_front(moved: FloatArray, stability: FloatArray) -> NDArray[np.bool_]:
    """Which candidates no other one beats: none moves as little and is as steady, or better.

    Parameters
    ----------
    moved : (C,)
        mm
    stability : (C,)
        NaN for candidates that do not count.

    Returns
    -------
    (C,) bool
        Equal candidates stand on the front together.
    """
    front = np.zeros(len(moved), dtype=bool)
    distance = np.round(moved, 6)
    best = -np.inf
    for length in np.unique(distance):
        here = np.flatnonzero((distance == length) & ~np.isnan(stability))
        if len(here) and stability[here].max() > best:
            best = stability[here].max()
            front[here[stability[here] == best]] = True
    return front
