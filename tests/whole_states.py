"""Group maps from one whole state: what the program does placement by placement, done plainly."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.inference.glm import Estimate, Model, estimate_sums, solve_model
from seedaudit.inference.group import Classifier, common_df
from seedaudit.sweep.moments import Moments


@dataclass(frozen=True)
class WholeMaps:
    """Effects, statistics and classes (N, V) of N placements; errors (V,) of the first."""

    effects: NDArray[np.float32]
    statistics: NDArray[np.float32]
    classes: NDArray[np.int8]
    standard_error: NDArray[np.float64]
    df: NDArray[np.float64]


def some(
    moments: Moments, placements: slice | NDArray[np.int_] = slice(None), voxels: Any = slice(None)
) -> Moments:
    """The state, in float64, of some placements at some voxels."""
    whole = moments.wide()
    known = None if whole.variance is None else whole.variance[placements][:, voxels]
    return Moments(
        whole.count[voxels],
        whole.xtx[:, :, voxels],
        whole.xtz[:, placements][:, :, voxels],
        whole.zz[placements][:, voxels],
        known,
    )


def estimate(moments: Moments, model: Model, placement: int) -> Estimate:
    """Estimate the contrast for one placement at every voxel."""
    return estimate_sums(moments.sums(placement, slice(None)), model)


def group_maps(
    moments: Moments, contrast: NDArray[np.float64], needed: int, classes_of: Classifier
) -> WholeMaps:
    """Estimate and classify every placement.

    Parameters
    ----------
    moments : Moments
        Of one cloud, on its analysis voxels.
    contrast : (p,)
    needed : int
        Participants a voxel needs.
    classes_of : callable
        See `classifier`.
    """
    model = solve_model(moments, contrast, needed)
    shape = moments.zz.shape
    effects = np.empty(shape, np.float32)
    statistics = np.empty(shape, np.float32)
    classes = np.empty(shape, np.int8)
    standard_error = np.empty(shape[1])
    df = common_df(model.df)
    for i in range(shape[0]):
        found = estimate(moments, model, i)
        effects[i], statistics[i] = found.effect, found.statistic
        classes[i] = classes_of(found.statistic, found.effect, df)
        if i == 0:
            standard_error = found.standard_error
    return WholeMaps(effects, statistics, classes, standard_error, model.df)
