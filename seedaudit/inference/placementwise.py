"""Group maps placement by placement, with each fold of participants left out in turn.

A placement's sums of all folds are read once and stay in cache while everything that depends on
them is computed; no merged state, no difference of states and no field of all statistics is ever
formed whole.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from seedaudit.inference.glm import Estimate, Model, estimate_sums, solve_model
from seedaudit.inference.group import Classifier, GroupMaps, common_df
from seedaudit.sweep.moments import FoldState, Moments, merged, total_sums

Seen = TypeVar("Seen")
DegreesOfFreedom = float | NDArray[np.float64]
SIGNS = (1, -1)


@dataclass(frozen=True)
class WithoutFolds:
    """What the placements say with each fold left out in turn.

    Parameters
    ----------
    tails : (G, 2, A) int
        Drawn placements in class + and in class - at every voxel.
    n_drawn : int
    sizes : (1 + G, N, 2) int
        Voxels of each placement in class + and in class -, among those that are sized; with
        everybody, and without each fold.
    """

    tails: NDArray[np.unsignedinteger[Any]]
    n_drawn: int
    sizes: NDArray[np.int_]

    def counts(self, fold: int) -> NDArray[np.int32]:
        """Drawn placements in class +, 0 and - without that fold, (A, 3)."""
        positive, negative = self.tails[fold].astype(np.int32)
        return np.stack([positive, self.n_drawn - positive - negative, negative], axis=1)


@dataclass
class _Seen:
    """What one thread has gathered over its placements."""

    tails: NDArray[np.unsignedinteger[Any]]
    lowest: NDArray[np.float64]
    highest: NDArray[np.float64]


def placement_maps(
    folds: Sequence[FoldState],
    fold_sizes: Sequence[int],
    voxels: NDArray[np.bool_],
    contrast: NDArray[np.float64],
    needed: int,
    classes_of: Classifier,
    sized: NDArray[np.bool_],
    *,
    look: Callable[[Estimate, DegreesOfFreedom], Seen] | None = None,
    workers: int = 1,
) -> tuple[GroupMaps, WithoutFolds, list[Seen]]:
    """Estimate and classify every placement, in full and without each fold.

    Parameters
    ----------
    folds : sequence of FoldState
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
    look : callable, optional
        (estimate, df) -> anything small, asked of every placement while its maps are at hand; of
        the reported placement first.
    workers : int
        Threads; the numbers do not depend on it.

    Returns
    -------
    GroupMaps, WithoutFolds, and what `look` gave in the order of the placements
    """
    rows = np.flatnonzero(voxels)
    used = [(fold, size) for fold, size in zip(folds, fold_sizes, strict=True) if size]
    parts = [fold for fold, _ in used]
    model, others = _models(parts, [size for _, size in used], rows, contrast, needed)
    df, other_dfs = common_df(model.df), [common_df(other.df) for other in others]
    n, a, g = parts[0].n_placements, len(rows), len(others)
    effects, classes = np.empty((n, a), np.float32), np.empty((n, a), np.int8)
    sizes = np.zeros((1 + g, n, 2), int)
    statistic, errors = np.empty((2, a))
    seen: list[Any] = [None] * n

    def one(i: int, into: _Seen) -> None:
        sums = [fold.sums(i, rows) for fold in parts]
        whole = total_sums(sums)
        found = estimate_sums(whole, model)
        made = classes_of(found.statistic, found.effect, df)
        effects[i], classes[i] = found.effect, made
        np.minimum(into.lowest, found.statistic, out=into.lowest)
        np.maximum(into.highest, found.statistic, out=into.highest)
        for column, sign in enumerate(SIGNS):
            sizes[0, i, column] = np.count_nonzero((made == sign) & sized)
        if i == 0:
            statistic[:], errors[:] = found.statistic, found.standard_error
        if look is not None:
            seen[i] = look(found, df)
        for fold, (rest, rest_df) in enumerate(zip(others, other_dfs, strict=True)):
            left = estimate_sums(whole - sums[fold], rest)
            made = classes_of(left.statistic, left.effect, rest_df)
            for column, sign in enumerate(SIGNS):
                here = made == sign
                sizes[1 + fold, i, column] = np.count_nonzero(here & sized)
                if i:
                    into.tails[fold, column] += here

    def work(placements: range) -> _Seen:
        into = _Seen(
            np.zeros((g, 2, a), np.min_scalar_type(n)), np.full(a, np.inf), np.full(a, -np.inf)
        )
        for i in placements:
            one(i, into)
        return into

    first = work(range(1))
    shares = [range(1 + start, n, workers) for start in range(min(workers, n - 1))]
    with ThreadPoolExecutor(max(1, len(shares))) as pool:
        for share in pool.map(work, shares):
            first.tails += share.tails
            np.minimum(first.lowest, share.lowest, out=first.lowest)
            np.maximum(first.highest, share.highest, out=first.highest)
    maps = GroupMaps(
        effects, classes, statistic, errors, first.lowest, first.highest, model.df
    )  # fmt: skip
    return maps, WithoutFolds(first.tails, n - 1, sizes), seen


def _models(
    parts: Sequence[FoldState],
    sizes: Sequence[int],
    rows: NDArray[np.int_],
    contrast: NDArray[np.float64],
    needed: int,
) -> tuple[Model, list[Model]]:
    """The model of everybody, and without each fold where there is more than one."""
    frames: list[Moments] = [part.frame(rows) for part in parts]
    total = merged(frames)
    model = solve_model(total, contrast, needed)
    if len(parts) < 2:
        return model, []
    return model, [
        solve_model(total - own, contrast, needed - size)
        for own, size in zip(frames, sizes, strict=True)
    ]
