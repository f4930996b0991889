"""Group maps of every placement of a cloud: effect, test statistic and class per voxel."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.inference.threshold import (
    classify,
    critical_value,
    density_cuts,
    drop_small_clusters,
)


@dataclass(frozen=True)
class ThresholdRule:
    """The rule that makes classes, the same for every placement.

    Parameters
    ----------
    rule : str
        p, fdr, bonferroni, t, effect or density; fwe must be settled as p first, which takes the
        participants' own maps.
    level : float
    scale : str
        `z` or `r`, for rule effect.
    per_tail : bool
        For rule density.
    min_voxels : int
        Smallest cluster.
    neighbours : int
        6, 18 or 26.
    """

    rule: str
    level: float
    scale: str = "z"
    per_tail: bool = False
    min_voxels: int = 1
    neighbours: int = 26

    def replaced(self, rule: str, level: float) -> ThresholdRule:
        """The same with another rule and level."""
        return replace(self, rule=rule, level=level)


@dataclass(frozen=True)
class GroupMaps:
    """Maps of N placements on the analysis voxels V of a cloud; row 0 is the reported placement.

    Parameters
    ----------
    effects : (N, V) float32
    classes : (N, V) int8
    statistic, standard_error : (V,)
        Of the reported placement.
    lowest, highest : (V,)
        Smallest and largest statistic of any placement; NaN where one of them has none.
    df : (V,)
        Infinite for a standard normal statistic.
    """

    effects: NDArray[np.float32]
    classes: NDArray[np.int8]
    statistic: NDArray[np.float64]
    standard_error: NDArray[np.float64]
    lowest: NDArray[np.float64]
    highest: NDArray[np.float64]
    df: NDArray[np.float64]


Classifier = Callable[
    [NDArray[np.float64], NDArray[np.float64], float | NDArray[np.float64]], NDArray[np.int8]
]


def common_df(df: NDArray[np.float64]) -> float | NDArray[np.float64]:
    """One number where all estimable voxels have the same degrees of freedom, else the field."""
    known = df[~np.isnan(df)]
    if len(known) and (known == known[0]).all():
        return float(known[0])
    return df


def classifier(
    rule: ThresholdRule, ijk: NDArray[np.int32], shape: tuple[int, int, int]
) -> Classifier:
    """A function (statistic, effect, df) -> classes for the voxels `ijk` (V, 3)."""

    def classes(
        statistic: NDArray[np.float64],
        effect: NDArray[np.float64],
        df: float | NDArray[np.float64],
    ) -> NDArray[np.int8]:
        made = classify(
            statistic, effect, df, rule.rule, rule.level, scale=rule.scale, per_tail=rule.per_tail
        )
        return drop_small_clusters(made, ijk, shape, rule.min_voxels, rule.neighbours)

    return classes


def critical_values(
    statistics: NDArray[np.floating[Any]],
    df: NDArray[np.float64],
    rule: ThresholdRule,
    sign: int,
) -> NDArray[np.float64]:
    """What the rule asks of the statistic of one more voxel in each map.

    Parameters
    ----------
    statistics : (N, V)
    df : (V,)
        The further voxel has every participant, so the most degrees of freedom of any.
    rule : ThresholdRule
        Not of rule effect, which asks nothing of the statistic.
    sign : int
        +1 or -1: the tail of the further voxel, where the rule takes a share of each tail.

    Returns
    -------
    (N,) array
        Of |statistic|; inf where no voxel passes.
    """
    if rule.rule == "density" and rule.per_tail:
        cuts = [density_cuts(sign * row, [rule.level])[0] for row in statistics]
        # no class against the sign, however far the share reaches
        return np.maximum(cuts, np.finfo(np.float64).tiny)
    # the critical value falls with the degrees of freedom
    return np.array(
        [np.nanmin(critical_value(row, df, rule.rule, rule.level)) for row in statistics]
    )
