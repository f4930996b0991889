"""Group maps placement by placement, with each fold of participants left out in turn.

A placement's sums of all folds are read once and stay in cache while everything that depends on
them is computed; no merged state and no difference of states is ever formed whole.
"""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from seedaudit.inference.glm import estimate_sums, solve_model
from seedaudit.inference.group import Classifier, GroupMaps, common_df
from seedaudit.sweep.moments import Moments


@dataclass(frozen=True)
class WithoutFolds:
    """What the placements say with each fold left out in turn.

    Parameters
    ----------
    counts : (G, A, 3) int32
        Drawn placements in class +, 0 and - at every voxel.
    sizes : (G, N, 2) int
        Voxels of each placement in class + and in class -, among those that are sized.
    """

    counts: NDArray[np.int32]
    sizes: NDArray[np.int_]


def placement_maps(
    folds: Sequence[Moments],
    fold_sizes: Sequence[int],
    voxels: NDArray[np.bool_],
    contrast: NDArray[np.float64],
    needed: int,
    classes_of: Classifier,
    sized: NDArray[np.bool_],
    *,
    workers: int = 1,
) -> tuple[GroupMaps, WithoutFolds]:
    """Estimate and classify every placement, in full and without each fold.

    Parameters
    ----------
    folds : sequence of Moments
        Of N placements, the reported one first; folds without participants say nothing.
    fold_sizes : sequence of int
        Participants in each fold.
    voxels : (V,) bool
        The A voxels to look at.
    contrast : (p,)
    needed : int
        Participants a voxel needs.
    classes_of : callable
        (statistic, effect, df) -> classes.
    sized : (A,) bool
        Voxels that count for the sizes of maps.
    workers : int
        Threads; the numbers do not depend on it.

    Returns
    -------
    GroupMaps, WithoutFolds
    """
    used = [(fold, size) for fold, size in zip(folds, fold_sizes, strict=True) if size]
    parts = [fold for fold, _ in used]
    frame = [_frame(fold, voxels) for fold in parts]
    total = _sum(frame)
    model = solve_model(total, contrast, needed)
    others = []
    if len(parts) > 1:
        others = [
            solve_model(total - own, contrast, needed - size)
            for own, (_, size) in zip(frame, used, strict=True)
        ]
    df, other_dfs = common_df(model.df), [common_df(other.df) for other in others]
    n, a = parts[0].zz.shape[0], int(voxels.sum())
    effects, statistics = np.empty((2, n, a), np.float32)
    classes = np.empty((n, a), np.int8)
    sizes = np.zeros((len(others), n, 2), int)
    errors = np.empty(a)

    def work(placements: range) -> NDArray[np.int32]:
        counts = np.zeros((len(others), a, 3), np.int32)
        for i in placements:
            sums = [_sums(fold, i, voxels) for fold in parts]
            whole = _total(sums)
            found = estimate_sums(*whole, model)
            effects[i], statistics[i] = found.effect, found.statistic
            classes[i] = classes_of(found.statistic, found.effect, df)
            if i == 0:
                errors[:] = found.standard_error
            for g, (rest, rest_df) in enumerate(zip(others, other_dfs, strict=True)):
                left = estimate_sums(*_difference(whole, sums[g]), rest)
                made = classes_of(left.statistic, left.effect, rest_df)
                sizes[g, i] = [np.count_nonzero(made[sized] == sign) for sign in (1, -1)]
                if i:
                    for column, sign in enumerate((1, 0, -1)):
                        counts[g, :, column] += made == sign
        return counts

    shares = [range(start, n, workers) for start in range(min(workers, n))]
    with ThreadPoolExecutor(len(shares)) as pool:
        counted = list(pool.map(work, shares))
    maps = GroupMaps(effects, statistics, classes, errors, model.df)
    return maps, WithoutFolds(np.sum(counted, axis=0, dtype=np.int32), sizes)


Sums = tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64] | None]


def _frame(fold: Moments, voxels: NDArray[np.bool_]) -> Moments:
    """What a fold's placements share: counts and X'X at the voxels."""
    none = fold.xtz[:, :0]
    return Moments(fold.count, fold.xtx, none, fold.zz[:0], _none_of(fold)).voxels(voxels)


def _none_of(fold: Moments) -> NDArray[np.float64] | None:
    return None if fold.variance is None else fold.variance[:0]


def _sum(frames: Sequence[Moments]) -> Moments:
    total = frames[0] - frames[0]
    for frame in frames:
        total += frame
    return total


def _sums(fold: Moments, i: int, voxels: NDArray[np.bool_]) -> Sums:
    """X'z (p, A), z'z (A,) and known variance (A,) of one placement in one fold, in float64."""
    known = None if fold.variance is None else fold.variance[i][voxels].astype(np.float64)
    xtz = fold.xtz[:, i][:, voxels].astype(np.float64, copy=False)
    return xtz, fold.zz[i][voxels].astype(np.float64, copy=False), known


def _total(sums: Sequence[Sums]) -> Sums:
    """Sum over folds, in their order."""
    xtz, zz, known = (None if part is None else part.copy() for part in sums[0])
    assert xtz is not None
    assert zz is not None
    for part in sums[1:]:
        xtz += part[0]
        zz += part[1]
        if known is not None and part[2] is not None:
            known += part[2]
    return xtz, zz, known


def _difference(whole: Sums, part: Sums) -> Sums:
    known = None if whole[2] is None or part[2] is None else whole[2] - part[2]
    return whole[0] - part[0], whole[1] - part[1], known
