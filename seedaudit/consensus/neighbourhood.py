"""How steady a seed would be at each candidate place: its map beside those of its neighbours.

The map of a set of participants is their mean z, whatever the group model: a place is never
judged by the group effect of interest. It is a sum over folds, so that everything about any set of
folds follows from the products of fold maps, which are computed once.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array

from seedaudit.space.lattice import Neighbourhoods

FloatArray = NDArray[np.float64]
FoldSums = NDArray[np.floating[Any]]
"""(G, M, B): sum of z over the participants of a fold, for every lattice point and voxel."""

# Sets of folds at once: 31 000 pairs of 32 sets take 8 MB.
_SETS = 32


class Scores(NamedTuple):
    """Of every set of folds and candidate, each (H, C).

    `stability` is the mean similarity with the neighbours, `likeness` the similarity with the map
    of the reported seed; both in the same participants.
    """

    stability: FloatArray
    likeness: FloatArray


ScoresOf = Callable[[NDArray[np.bool_]], Scores]
"""From sets of folds (H, G) to their scores."""


@dataclass(frozen=True)
class FoldProducts:
    """Products of the spatially centred maps of every two folds.

    Parameters
    ----------
    own : (M, G, G)
        Of each lattice point with itself.
    pairs : (E, G, G)
        Of each candidate (first fold) with each of its neighbours (second fold).
    reported : (C, G, G)
        Of each candidate with the reported seed.
    around : Neighbourhoods
    """

    own: FloatArray
    pairs: FloatArray
    reported: FloatArray
    around: Neighbourhoods


def merge_folds(
    sums: FoldSums, sizes: NDArray[np.int_], most: int = 12
) -> tuple[FoldSums, NDArray[np.int_]]:
    """At most so many folds, dealt in turn: the products grow with the square of their number.

    Parameters
    ----------
    sums : (G, M, B)
    sizes : (G,)
        Participants in each fold; empty folds are dropped.
    most : int
        2 or more.

    Returns
    -------
    (G', M, B), (G',)
    """
    filled = np.flatnonzero(sizes)
    if len(filled) <= most:
        return (sums, sizes) if len(filled) == len(sizes) else (sums[filled], sizes[filled])
    dealt = [filled[start::most] for start in range(most)]
    merged = np.stack([sums[part].sum(axis=0) for part in dealt])
    return merged, np.array([sizes[part].sum() for part in dealt])


def fold_products(
    sums: FoldSums, around: Neighbourhoods, blocks: NDArray[np.int_] | None = None
) -> FoldProducts:
    """All that correlation needs, from one look at the maps.

    Parameters
    ----------
    sums : (G, M, B)
        Without missing values: voxels that every participant has.
    around : Neighbourhoods
    blocks : (C,) int, optional
        Candidates of one number are multiplied together; near ones share their neighbours, which
        saves most of the time. Default: each on its own.

    Notes
    -----
    2 G² E B operations for E pairs of candidate and neighbour, some times that in blocks; a copy of
    the maps of one block's neighbours is held at a time.
    """
    n_folds, n_points, _ = sums.shape
    n_candidates = len(around.candidates)
    means = sums.mean(axis=2, dtype=np.float64).astype(sums.dtype)

    def centred(rows: NDArray[np.int64]) -> FoldSums:
        return np.asarray(sums[:, rows] - means[:, rows, None])

    own = np.empty((n_points, n_folds, n_folds))
    for row in range(n_points):
        maps = sums[:, row] - means[:, row, None]
        own[row] = maps @ maps.T
    reported = np.empty((n_candidates, n_folds, n_folds))
    pairs = np.empty((len(around.points), n_folds, n_folds))
    owner = np.repeat(np.arange(n_candidates), around.counts)
    blocks = np.arange(n_candidates) if blocks is None else blocks
    for block in np.unique(blocks):
        here = np.flatnonzero(blocks == block)
        edges = np.flatnonzero(blocks[owner] == block)
        points, column = np.unique(around.points[edges], return_inverse=True)
        points = np.append(points, 0)
        products = _products(centred(around.candidates[here]), centred(points))
        pairs[edges] = products[np.searchsorted(here, owner[edges]), column]
        reported[here] = products[:, -1]
    return FoldProducts(own, pairs, reported, around)


def _products(first: FoldSums, second: FoldSums) -> FoldSums:
    """Products over voxels of every two maps (G, a, B) and (G, b, B): (a, b, G, G)."""
    (n_folds, a, n_voxels), b = first.shape, second.shape[1]
    found = first.reshape(-1, n_voxels) @ second.reshape(-1, n_voxels).T
    return found.reshape(n_folds, a, n_folds, b).transpose(1, 3, 0, 2)


def correlation_scores(products: FoldProducts, sets: NDArray[np.bool_]) -> Scores:
    """Spatial Pearson correlations of the mean maps of sets of folds.

    Parameters
    ----------
    products : FoldProducts
    sets : (H, G) bool
        Folds of each set, at least one.

    Returns
    -------
    Scores
        NaN where a map is constant.
    """
    around = products.around
    stability = np.empty((len(sets), len(around.candidates)))
    likeness = np.empty_like(stability)
    own, pairs, reported = (
        array.reshape(len(array), -1) for array in (products.own, products.pairs, products.reported)
    )
    owner = np.repeat(around.candidates, around.counts)
    for start in range(0, len(sets), _SETS):
        block = slice(start, start + _SETS)
        member = sets[block].astype(np.float64)
        both = np.einsum("hg,hf->hgf", member, member).reshape(len(member), -1)
        square = both @ own.T
        with np.errstate(divide="ignore", invalid="ignore"):
            scale = 1 / np.sqrt(np.where(square > 0, square, np.nan))
            r = (both @ pairs.T) * scale[:, owner] * scale[:, around.points]
        stability[block] = np.add.reduceat(r, around.starts[:-1], axis=1) / around.counts
        r = (both @ reported.T) * scale[:, around.candidates] * scale[:, :1]
        likeness[block] = np.clip(r, -1, 1)
    return Scores(stability, likeness)


def dice_scores(
    sums: FoldSums, around: Neighbourhoods, sets: NDArray[np.bool_], share: float = 0.1
) -> Scores:
    """Dice of the positive tails when every map keeps its top share of voxels.

    All maps are then of one size, so that Dice is not a matter of map size.

    Parameters
    ----------
    sums : (G, M, B)
    around : Neighbourhoods
    sets : (H, G) bool
    share : float
        Share of the voxels with the largest mean z that is kept, 0 to 1 (at least one voxel).

    Returns
    -------
    Scores
    """
    n_voxels = sums.shape[2]
    kept = max(1, round(share * n_voxels))
    counts = around.counts
    shape = (len(counts), sums.shape[1])
    averaging = csr_array(
        (np.repeat(1 / counts, counts), around.points, around.starts), shape=shape
    ).astype(np.float32)
    stability, likeness = np.empty((2, len(sets), len(counts)))
    for h, member in enumerate(sets):
        maps = sums[member].sum(axis=0)
        top = np.zeros(maps.shape, np.float32)
        order = np.argpartition(maps, n_voxels - kept, axis=1)[:, n_voxels - kept :]
        np.put_along_axis(top, order, 1.0, axis=1)
        mine = top[around.candidates]
        stability[h] = np.einsum("cv,cv->c", mine, averaging @ top) / kept
        likeness[h] = mine @ top[0] / kept
    return Scores(stability, likeness)


def voxel_sampling_error(
    sums: FoldSums,
    around: Neighbourhoods,
    candidate: int,
    population: int,
    groups: int = 10,
) -> tuple[float, float]:
    """What scoring on some of the voxels only may have changed.

    Parameters
    ----------
    sums : (G, M, B)
    around : Neighbourhoods
    candidate : int
        A candidate.
    population : int
        Voxels that the B were taken from.
    groups : int
        Random groups of voxels that are left out in turn.

    Returns
    -------
    score, gain : float
        Standard errors of the candidate's stability, and of its difference from that of the
        reported seed; of correlation in all participants.

    Notes
    -----
    Delete-a-group jackknife with the correction for a finite population, as in Wolter K.M. (2007)
    Introduction to Variance Estimation, ch. 4. It is that of a random sample; an even one errs
    less, if anything.
    """
    n_voxels = sums.shape[2]
    groups = min(groups, n_voxels // 2)
    if groups < 2:
        return float("nan"), float("nan")
    # at random, so that no regularity of the selection hides in the groups
    member = np.random.default_rng(0).permutation(n_voxels) % groups
    means: list[FloatArray] = []
    for c in (candidate, 0):
        near = around.points[around.starts[c] : around.starts[c + 1]]
        rows = np.concatenate([[around.candidates[c]], near])
        maps = sums[:, rows].sum(axis=0, dtype=np.float64)
        means.append(
            np.array([_mean_correlation(maps[:, member != group]) for group in range(groups)])
        )
    left = max(0.0, 1 - n_voxels / population)
    errors = [
        float(np.sqrt(left * (groups - 1) * np.var(values)))
        for values in (means[0], means[0] - means[1])
    ]
    return errors[0], errors[1]


def _mean_correlation(maps: FloatArray) -> float:
    """Mean spatial correlation of the first map with the others."""
    centred = maps - maps.mean(axis=1, keepdims=True)
    length = np.sqrt(np.einsum("mv,mv->m", centred, centred))
    with np.errstate(divide="ignore", invalid="ignore"):
        return float(np.mean(centred[1:] @ centred[0] / length[1:] / length[0]))
