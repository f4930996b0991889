"""Group maps from one whole state: what the program does placement by placement, done plainly."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from seedaudit.inference.glm import estimate, solve_model
from seedaudit.inference.group import Classifier, GroupMaps, common_df
from seedaudit.sweep.moments import Moments


def group_maps(
    moments: Moments, contrast: NDArray[np.float64], needed: int, classes_of: Classifier
) -> GroupMaps:
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
    return GroupMaps(effects, statistics, classes, standard_error, model.df)
