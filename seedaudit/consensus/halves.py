"""Independent halves of the participants, and how alike the maps of two halves are in space.

A map of the group effect is linear in the sums x'z of the folds, so the spatial correlation
between any two halves follows from products of those sums, formed once for each placement.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations, pairwise
from math import comb
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.sweep.moments import FoldState

FloatArray = NDArray[np.float64]

MOST_SPLITS = 100


@dataclass(frozen=True)
class Halves:
    """Half-splits of G folds, as they are and with each fold left out in turn.

    Parameters
    ----------
    members : (S, G) bool
        Folds of the first half of each split; the others are the second.
    usable : (1 + G, S) bool
        Whether both halves of a split can be estimated: with all folds, and without fold g.
    weights : (2, 1 + G, S, G * p) float64
        The effect of a half is this sum of the folds' x'z; 0 where not usable.
    """

    members: NDArray[np.bool_]
    usable: NDArray[np.bool_]
    weights: FloatArray


def half_splits(n_folds: int, limit: int, random_state: int = 0) -> NDArray[np.bool_]:
    """Ways to halve the folds: every one of them, or a random choice of `limit`.

    Parameters
    ----------
    n_folds : int
        2 or more. An odd number is split as evenly as can be.
    limit : int
    random_state : int

    Returns
    -------
    (S, G) bool
        Folds of the first half. No split appears twice, also not with its halves exchanged.
    """
    size = n_folds // 2
    even = n_folds % 2 == 0
    total = comb(n_folds, size) // (2 if even else 1)
    if total <= max(limit, 1):
        chosen = [c for c in combinations(range(n_folds), size) if not even or 0 in c]
    else:
        rng = np.random.default_rng(random_state)
        found: dict[tuple[int, ...], None] = {}
        while len(found) < limit:
            drawn = set(rng.permutation(n_folds)[:size].tolist())
            if even and 0 not in drawn:
                drawn = set(range(n_folds)) - drawn
            found[tuple(sorted(drawn))] = None
        chosen = list(found)
    members = np.zeros((len(chosen), n_folds), bool)
    for row, half in zip(members, chosen, strict=True):
        row[list(half)] = True
    return members


def halves(
    xtx: FloatArray, sizes: Sequence[int], contrast: FloatArray, members: NDArray[np.bool_]
) -> Halves:
    """Which splits can be estimated, and how the effects of their halves are put together.

    Parameters
    ----------
    xtx : (G, p, p)
        X'X of each fold, where every participant has the voxel.
    sizes : sequence of G int
        Participants in each fold.
    contrast : (p,)
    members : (S, G) bool
    """
    n_folds, p = len(xtx), len(contrast)
    kept = np.vstack([np.ones(n_folds, bool), ~np.eye(n_folds, dtype=bool)])
    usable = np.ones((1 + n_folds, len(members)), bool)
    weights = np.zeros((2, 1 + n_folds, len(members), n_folds * p))
    for half, inside in enumerate((members, ~members)):
        taken = inside[None] & kept[:, None]
        n = taken @ np.asarray(sizes)
        total = np.einsum("dsg,gij->dsij", taken, xtx)
        enough = n >= max(2, p + 1)
        singular = np.linalg.matrix_rank(total, hermitian=True) < p
        fine = enough & ~singular
        usable &= fine
        safe = np.where(fine[..., None, None], total, np.eye(p))
        solved = np.linalg.solve(safe, np.broadcast_to(contrast[:, None], (*fine.shape, p, 1)))
        weights[half] = (taken[..., None] * solved[..., None, :, 0]).reshape(*fine.shape, -1)
    return Halves(members, usable, weights * usable[None, ..., None])


@dataclass(frozen=True)
class FoldMaps:
    """The x'z of every fold at one placement, and what correlations need to know of them.

    Parameters
    ----------
    maps : (G * p, V)
    bounds : (B, 2) int
        First and last + 1 voxel of each set of voxels that is looked at.
    totals : (B, G * p)
        Sums over the voxels of each set.
    covariance : (B, G * p, G * p)
        Centred products within each set.
    """

    maps: FloatArray
    bounds: NDArray[np.integer[Any]]
    totals: FloatArray
    covariance: FloatArray

    @classmethod
    def of(cls, maps: FloatArray, bounds: NDArray[np.integer[Any]]) -> FoldMaps:
        """From the maps, such as those of `fold_sums`."""
        edges, spans = _segments(bounds)
        totals = _over_spans(np.add.reduceat(maps[:, : edges[-1]], edges[:-1], axis=1).T, spans)
        return cls(maps, bounds, totals, _centred_products(maps, maps, bounds, totals, totals))


def _segments(
    bounds: NDArray[np.integer[Any]],
) -> tuple[NDArray[np.integer[Any]], NDArray[np.integer[Any]]]:
    """Ends of the pieces that sets of voxels are made of, so that each voxel is looked at once;
    and the first and last + 1 piece of every set.
    """
    edges = np.unique(bounds)
    return edges, np.searchsorted(edges, bounds)


def _over_spans(pieces: FloatArray, spans: NDArray[np.integer[Any]]) -> FloatArray:
    """Sums over the pieces of every set."""
    return np.array([pieces[first:last].sum(axis=0) for first, last in spans])


def _centred_products(
    x: FloatArray,
    y: FloatArray,
    bounds: NDArray[np.integer[Any]],
    x_totals: FloatArray,
    y_totals: FloatArray,
) -> FloatArray:
    """Of all rows of x with all rows of y, within each set of voxels, (B, rows of x, rows of y)."""
    edges, spans = _segments(bounds)
    pieces = [x[:, start:stop] @ y[:, start:stop].T for start, stop in pairwise(edges)]
    products = _over_spans(np.reshape(pieces, (-1, len(x), len(y))), spans)
    n = np.maximum(bounds[:, 1] - bounds[:, 0], 1)
    return np.asarray(products - np.einsum("bi,bj->bij", x_totals / n[:, None], y_totals))


def fold_sums(
    folds: Sequence[FoldState], placement: int, voxels: NDArray[np.integer[Any]]
) -> FloatArray:
    """The x'z of every fold at one placement, (G * p, V) in the order of `voxels`."""
    return np.concatenate([fold.sums(placement, voxels).xtz for fold in folds])


def cross_half_r(reported: FoldMaps, shifted: FoldMaps, split: Halves) -> FloatArray:
    """Spatial correlation of the reported map in one half with a shifted map in the other.

    Parameters
    ----------
    reported, shifted : FoldMaps
        With the same sets of voxels.
    split : Halves

    Returns
    -------
    (1 + G, B)
        Mean over splits, and over which half holds the reported map; NaN without a usable split
        or variation, and for sets of fewer than three voxels.
    """
    first, second = split.weights.reshape(2, -1, reported.maps.shape[0])
    bounds = reported.bounds
    crossed = _centred_products(
        reported.maps, shifted.maps, bounds, reported.totals, shifted.totals
    )
    result = np.full((split.usable.size, len(bounds)), np.nan)
    for column in np.flatnonzero(bounds[:, 1] - bounds[:, 0] >= 3):
        # rows of maps: the first and the second half's, of the reported and the shifted seed
        cross = crossed[column]
        own_x, own_y = reported.covariance[column], shifted.covariance[column]
        r = [
            _quotient(_form(a, cross, b), _form(a, own_x, a) * _form(b, own_y, b))
            for a, b in ((first, second), (second, first))
        ]
        result[:, column] = (r[0] + r[1]) / 2
    result[~split.usable.ravel()] = np.nan
    return mean_defined(result.reshape(*split.usable.shape, -1), axis=1)


def mean_defined(values: FloatArray, axis: int) -> FloatArray:
    """Mean along an axis over what is no NaN; NaN where nothing is."""
    known = ~np.isnan(values)
    count = known.sum(axis=axis)
    total = np.where(known, values, 0.0).sum(axis=axis)
    return np.divide(total, count, out=np.full(total.shape, np.nan), where=count > 0)


def _form(a: FloatArray, matrix: FloatArray, b: FloatArray) -> FloatArray:
    """a' M b for every pair of rows."""
    return np.einsum("mp,mp->m", a @ matrix, b)


def _quotient(covariance: FloatArray, variances: FloatArray) -> FloatArray:
    # a map that does not vary leaves rounding only
    least = 1e-20 * variances.max(initial=0.0)
    scale = np.sqrt(np.maximum(variances, 0))
    out = np.full(covariance.shape, np.nan)
    np.divide(covariance, scale, out=out, where=variances > least)
    return np.clip(out, -1.0, 1.0)
