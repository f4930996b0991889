"""Floor and geometry: how alike maps are that should not be, and smoothness of the noise."""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.consensus.overlap import dice_with_reference, spatial_similarity
from seedaudit.inference.glm import estimate_sums, solve_model
from seedaudit.inference.group import Classifier, GroupMaps
from seedaudit.space.geometry import lag_correlation, smoothness
from seedaudit.sweep.moments import FoldState, merged, total_sums

FloatArray = NDArray[np.float64]


def control_similarity(
    controls: Sequence[FoldState],
    voxels: NDArray[np.bool_],
    contrast: FloatArray,
    needed: int,
    reported: GroupMaps,
    keep: NDArray[np.bool_],
    classes_of: Classifier,
    *,
    workers: int = 1,
) -> dict[str, FloatArray]:
    """Similarity of the maps of unrelated seeds to the reported map.

    Parameters
    ----------
    controls : sequence of FoldState
        Of C control seeds.
    voxels : (V,) bool
        The A analysis voxels of the cloud.
    contrast : (p,)
    needed : int
        Participants a voxel needs.
    reported : GroupMaps
        Maps of the cloud; row 0 is the reported one.
    keep : (C, A) bool
        Voxels that each control is compared on: not its own widened sphere, as the voxels of a
        cloud's spheres are no analysis voxels of the cloud.
    classes_of : callable
    workers : int
        Threads; the numbers do not depend on how many.

    Returns
    -------
    dict of (C,) arrays
        dice_positive, dice_negative, spatial_r, n_positive, n_negative.
    """
    rows = np.flatnonzero(voxels)
    model = solve_model(merged(fold.frame(rows) for fold in controls), contrast, needed)

    def one(c: int) -> list[float]:
        inside = keep[c]
        found = estimate_sums(total_sums(fold.sums(c, rows) for fold in controls), model)
        statistic = np.where(inside, found.statistic, np.nan)
        classes = classes_of(statistic, found.effect, model.df)[inside]
        overlap = dice_with_reference(reported.classes[0, inside], classes[None])
        likeness = spatial_similarity(reported.effects[0, inside], found.effect[None, inside])
        return [*overlap.sizes[0], *overlap.dice[0], likeness.r[0]]

    with ThreadPoolExecutor(workers) as pool:
        values = np.array(list(pool.map(one, range(len(keep)))), dtype=np.float64).reshape(-1, 5)
    names = ("n_positive", "n_negative", "dice_positive", "dice_negative", "spatial_r")
    return dict(zip(names, values.T, strict=True))


def fold_residuals(folds: Sequence[FoldState], voxels: NDArray[np.bool_]) -> FloatArray:
    """Residuals of the group model at the reported placement, summed within folds.

    The part X'(z - X b) of each fold, b being the estimate of all folds, is a sum of participants'
    residual maps, and has their spatial autocorrelation.

    Parameters
    ----------
    folds : sequence of G FoldState
    voxels : (V,) bool
        A voxels that every participant has.

    Returns
    -------
    (G * p, A) array
    """
    rows = np.flatnonzero(voxels)
    xtx = np.array([fold.frame(rows[:1]).xtx[:, :, 0] for fold in folds])
    xtz = np.array([fold.sums(0, rows).xtz for fold in folds])
    coefficients = np.linalg.solve(xtx.sum(axis=0), xtz.sum(axis=0))
    return np.concatenate(xtz - xtx @ coefficients)


def residual_smoothness(
    residuals: FloatArray,
    ijk: NDArray[np.integer[Any]],
    shape: tuple[int, int, int],
    steps: FloatArray,
) -> float:
    """Smoothness of residual maps, full width at half maximum in mm.

    Parameters
    ----------
    residuals : (M, A) array
    ijk : (A, 3) int array
        Voxel indices in a grid of `shape`.
    shape : 3 ints
    steps : (3,) array
        Length of a voxel edge along each axis of the grid, mm.
    """
    row_of = np.full(np.add(shape, 1), -1)
    row_of[tuple(ijk.T)] = np.arange(len(ijk))
    lags = []
    for axis in range(3):
        second = row_of[tuple((ijk + np.eye(3, dtype=int)[axis]).T)]
        first = np.flatnonzero(second >= 0)
        lags.append(lag_correlation(residuals, first, second[first]))
    return smoothness(lags, steps)
