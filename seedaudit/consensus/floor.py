"""Floor and geometry: how alike maps are that should not be, and smoothness of the noise."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.consensus.overlap import dice_with_reference, spatial_similarity
from seedaudit.inference.glm import estimate, solve_model
from seedaudit.inference.group import Classifier, GroupMaps
from seedaudit.space.geometry import lag_correlation, smoothness
from seedaudit.sweep.moments import Moments, merged

FloatArray = NDArray[np.float64]


def control_similarity(
    controls: Moments,
    contrast: FloatArray,
    needed: int,
    reported: GroupMaps,
    keep: NDArray[np.bool_],
    classes_of: Classifier,
) -> dict[str, FloatArray]:
    """Similarity of the maps of unrelated seeds to the reported map.

    Parameters
    ----------
    controls : Moments
        Of C control seeds, on the analysis voxels of the cloud.
    contrast : (p,)
    needed : int
        Participants a voxel needs.
    reported : GroupMaps
        Maps of the cloud; row 0 is the reported one.
    keep : (C, A) bool
        Voxels that each control is compared on: not its own widened sphere, as the voxels of a
        cloud's spheres are no analysis voxels of the cloud.
    classes_of : callable

    Returns
    -------
    dict of (C,) arrays
        dice_positive, dice_negative, spatial_r, n_positive, n_negative.
    """
    model = solve_model(controls, contrast, needed)
    columns: dict[str, list[float]] = {
        name: []
        for name in ("n_positive", "n_negative", "dice_positive", "dice_negative", "spatial_r")
    }
    for c, inside in enumerate(keep):
        found = estimate(controls, model, c)
        statistic = np.where(inside, found.statistic, np.nan)
        classes = classes_of(statistic, found.effect, model.df)[inside]
        overlap = dice_with_reference(reported.classes[0, inside], classes[None])
        likeness = spatial_similarity(reported.effects[0, inside], found.effect[None, inside])
        for column, tail in enumerate(("positive", "negative")):
            columns[f"n_{tail}"].append(overlap.sizes[0, column])
            columns[f"dice_{tail}"].append(overlap.dice[0, column])
        columns["spatial_r"].append(likeness.r[0])
    return {name: np.array(values, dtype=np.float64) for name, values in columns.items()}


def fold_residuals(folds: Sequence[Moments], voxels: NDArray[np.bool_]) -> FloatArray:
    """Residuals of the group model at the reported placement, summed within folds.

    The part X'(z - X b) of each fold, b being the estimate of all folds, is a sum of participants'
    residual maps, and has their spatial autocorrelation.

    Parameters
    ----------
    folds : sequence of G Moments
    voxels : (V,) bool
        A voxels that every participant has.

    Returns
    -------
    (G * p, A) array
    """
    parts = [fold.placements(slice(0, 1)).voxels(voxels) for fold in folds]
    total = merged(parts)
    coefficients = np.linalg.solve(total.xtx[:, :, 0], total.xtz[:, 0])
    return np.concatenate([part.xtz[:, 0] - part.xtx[:, :, 0] @ coefficients for part in parts])


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
