"""Ceiling: the reported placement against itself in halves, and shifted placements against it.

The similarity of the reported map in one half of the participants to the reported map in the
other half is as good as these data allow. The same with a shifted map in the other half, divided
by it, is the ceiling-relative stability: 1 where moving the seed costs nothing beyond sampling.
"""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.consensus.half_classes import class_similarity
from seedaudit.consensus.halves import (
    MOST_SPLITS,
    FoldMaps,
    Halves,
    cross_half_r,
    fold_sums,
    half_splits,
    halves,
    mean_defined,
)
from seedaudit.consensus.resampling import delete_fold_interval
from seedaudit.sweep.moments import Chosen, FoldState

FloatArray = NDArray[np.float64]

CLASS_SPLITS = 4
"""Half-splits that class maps are made for; each takes the maps of 2 + G halves."""

CLASS_PLACEMENTS = 24
"""Drawn placements that class maps of halves are made for, evenly spread over all of them."""

LEAST_CEILING = 0.05
"""Below this similarity of the reported map to itself nothing is related to it."""


@dataclass(frozen=True)
class Ceiling:
    """Similarities across halves for the whole map (column 0) and K regions.

    Parameters
    ----------
    same, shifted, relative : dict of (3, 1 + K) arrays by measure
        Value, lower and upper end of the 95 % interval over participants (delete-a-fold
        jackknife). `shifted` is the mean over the drawn placements.
    placement_relative : (N,)
        Cross-half spatial r of each drawn placement, divided by that of the reported one.
    control_relative : (C,)
        The same for control seeds.
    n_splits, n_class_splits, n_class_placements : int
    """

    same: dict[str, FloatArray]
    shifted: dict[str, FloatArray]
    relative: dict[str, FloatArray]
    placement_relative: FloatArray
    control_relative: FloatArray
    n_splits: int
    n_class_splits: int
    n_class_placements: int


def ceiling(
    folds: Sequence[FoldState],
    sizes: Sequence[int],
    contrast: FloatArray,
    voxels: NDArray[np.bool_],
    tails: NDArray[np.integer[Any]],
    regions: NDArray[np.integer[Any]],
    n_regions: int,
    *,
    controls: Sequence[FoldState] = (),
    control_keep: NDArray[np.bool_] | None = None,
    random_state: int = 0,
    workers: int = 1,
) -> Ceiling | None:
    """Compare halves of the participants, at the reported and at shifted placements.

    Parameters
    ----------
    folds : sequence of FoldState
        Of the placements of a cloud, the reported one first.
    sizes : sequence of int
        Participants in each fold.
    contrast : (p,)
    voxels : (V,) bool
        A voxels that every participant has.
    tails : (1 + G, 1 + N, 2) int
        Sizes in voxels of the + and - classes of every placement's map with all participants, and
        without each fold (of those that hold anyone), which the maps of halves are given.
    regions : (A,) int
        Position of the region of each of these voxels, -1 for none.
    n_regions : int
        K
    controls : sequence of FoldState, optional
        The same folds for the control seeds.
    control_keep : (C, A) bool
        Voxels that a control seed is judged on: not its own sphere.
    random_state : int
        Of the choice of splits where there are too many.
    workers : int
        Threads; the numbers do not depend on how many.

    Returns
    -------
    Ceiling or None
        None without two halves of at least two participants each that the design can be
        estimated in.
    """
    kept = [g for g, size in enumerate(sizes) if size]
    folds, sizes = [folds[g] for g in kept], [sizes[g] for g in kept]
    controls = [controls[g] for g in kept] if controls else ()
    if len(folds) < 2 or not voxels.any():
        return None
    frames = [fold.frame(slice(voxels.argmax(), voxels.argmax() + 1)) for fold in folds]
    if frames[0].variance is not None:
        return None
    members = half_splits(len(folds), MOST_SPLITS, random_state)
    xtx = np.array([frame.xtx[:, :, 0] for frame in frames])
    split = halves(xtx, sizes, contrast, members)
    some = np.flatnonzero(split.usable[0])
    if not len(some):
        return None
    rows = np.flatnonzero(voxels)
    r = _spatial(folds, rows, regions, n_regions, split, workers)
    picked = some[_spread(len(some), CLASS_SPLITS)]
    chosen = 1 + _spread(tails.shape[1] - 1, CLASS_PLACEMENTS)
    by_class = class_similarity(
        folds, sizes, xtx, contrast, np.concatenate([[0], chosen]), rows, tails, regions,
        n_regions, members[picked], workers,
    )  # fmt: skip
    floor = _controls(folds, controls, rows, control_keep, split)
    return _assembled(r, by_class, floor, sizes, (len(some), len(picked), len(chosen)))


def time_ceiling(
    first: FoldState,
    second: FoldState,
    rows: NDArray[np.integer[Any]],
    regions: NDArray[np.integer[Any]],
    n_regions: int,
    n_controls: int,
    control_keep: NDArray[np.bool_],
) -> Ceiling:
    """Compare the halves of one participant's time series, by spatial r alone.

    There is no interval: one participant says nothing about others.

    Parameters
    ----------
    first, second : FoldState
        Of the two halves, for the placements of a cloud, the reported one first, and after them
        the control seeds.
    rows : (A,) int
        Voxels to compare on.
    regions : (A,) int
    n_regions : int
    n_controls : int
        C
    control_keep : (C, A) bool
        As in `ceiling`.
    """
    usable = np.array([[True], [False], [False]])
    halves_of = np.eye(2)[:, None, None, :] * usable[None, ..., None]
    split = Halves(np.array([[True, False]]), usable, halves_of)
    folds = (first, second)
    r = _spatial(folds, rows, regions, n_regions, split)
    n_cloud = len(r) - n_controls
    controls = [Chosen(fold, np.arange(n_cloud, len(r))) for fold in folds]
    floor = _controls(folds, controls, rows, control_keep, split)
    return _assembled(r[:n_cloud], {}, floor, [1, 1], (1, 0, 0))


def _controls(
    folds: Sequence[FoldState],
    controls: Sequence[FoldState],
    rows: NDArray[np.integer[Any]],
    keep: NDArray[np.bool_] | None,
    split: Halves,
) -> FloatArray:
    """Cross-half spatial r of the control seeds, (C,)."""
    found = []
    for c, inside in enumerate([] if keep is None else keep):
        bounds = np.array([[0, np.count_nonzero(inside)]])
        reported, control = (
            FoldMaps.of(fold_sums(states, i, rows[inside]), bounds)
            for states, i in ((folds, 0), (controls, c))
        )
        found.append(cross_half_r(reported, control, split)[0, 0])
    return np.array(found)


def _assembled(
    r: FloatArray,
    by_class: dict[str, FloatArray],
    floor: FloatArray,
    sizes: Sequence[int],
    counts: tuple[int, int, int],
) -> Ceiling:
    """All similarities with their intervals; `counts` are those at the end of `Ceiling`."""
    values = {"spatial_r": (r[0], r[1:].mean(axis=0))}
    for name, found in by_class.items():
        values[name] = found[:, 0], mean_defined(found[:, 1:], axis=1)
    same = {name: _interval(found[0], sizes) for name, found in values.items()}
    shifted = {name: _interval(found[1], sizes) for name, found in values.items()}
    relative = {
        name: _interval(_ratio(b, a, _known(same[name])), sizes, np.inf)
        for name, (a, b) in values.items()
    }
    whole, known = r[0, 0, 0], _known(same["spatial_r"])[0]
    return Ceiling(
        same, shifted, relative, _ratio(r[1:, 0, 0], whole, known), _ratio(floor, whole, known),
        *counts,
    )  # fmt: skip


def _spread(total: int, most: int) -> NDArray[np.int_]:
    """Up to `most` positions evenly spread over `total`."""
    return np.unique(np.linspace(0, total - 1, min(most, total)).round().astype(int))


def _spatial(
    folds: Sequence[FoldState],
    rows: NDArray[np.integer[Any]],
    regions: NDArray[np.integer[Any]],
    n_regions: int,
    split: Halves,
    workers: int = 1,
) -> FloatArray:
    """Cross-half spatial r by placement, fold left out, and whole map or region, (N, D, 1 + K)."""
    order = np.argsort(regions, kind="stable")
    edges = np.searchsorted(regions[order], np.arange(n_regions + 1))
    bounds = np.vstack([[0, len(order)], np.stack([edges[:-1], edges[1:]], axis=1)])

    def maps_of(placement: int) -> FoldMaps:
        return FoldMaps.of(fold_sums(folds, placement, rows[order]), bounds)

    reported = maps_of(0)
    with ThreadPoolExecutor(workers) as pool:
        found = pool.map(
            lambda placement: cross_half_r(reported, maps_of(placement), split),
            range(folds[0].n_placements),
        )
        return np.array(list(found))


def _known(same: FloatArray) -> NDArray[np.bool_]:
    """Where the reported map is like itself at all: its similarity is of some size, and above 0
    beyond chance as far as an interval can be told.
    """
    return np.asarray((same[0] >= LEAST_CEILING) & ~(same[1] <= 0))


def _ratio(
    shifted: FloatArray, same: FloatArray | float, known: NDArray[np.bool_] | bool
) -> FloatArray:
    """Shifted over same; NaN where the ceiling is too low for it to mean anything."""
    same = np.broadcast_to(np.asarray(same, dtype=np.float64), np.shape(shifted))
    out = np.full(np.shape(shifted), np.nan)
    return np.asarray(np.divide(shifted, same, out=out, where=known & (same > 0)))


def _interval(values: FloatArray, sizes: Sequence[int], most: float = 1.0) -> FloatArray:
    """Value, low and high (3, 1 + K) from values with all folds and without each."""
    low, high = delete_fold_interval(values[0], values[1:], sizes, most=most)
    return np.stack([values[0], low, high])
