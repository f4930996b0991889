"""Several seeds in one pass: can one stand in for another, within placement error?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.consensus.overlap import dice_with_reference, spatial_similarity

FloatArray = NDArray[np.float64]

WITHIN = 0.05
"""Quantile of the within-cloud similarities that two seeds must reach."""


@dataclass(frozen=True)
class SeedMaps:
    """One seed's maps.

    Parameters
    ----------
    at : (3,)
        Reported centre, mm.
    voxels : (A,) int
        Rows of its analysis voxels in the mask, ascending.
    effects : (N, A)
        Effect maps of the used placements, Fisher z; row 0 is the reported one.
    classes : (A,) int8
        Classes of the reported placement.
    ceiling : float
        Similarity of the reported map with itself in independent halves; NaN where unknown.
    """

    at: NDArray[np.float64]
    voxels: NDArray[np.integer[Any]]
    effects: NDArray[np.floating[Any]]
    classes: NDArray[np.int8]
    ceiling: float = float("nan")


def between_seeds(seeds: Sequence[SeedMaps]) -> dict[str, NDArray[Any]]:
    """Compare every two seeds, and set that against the placement error of each.

    Both the similarity of two reported maps and the similarities within the two clouds are taken
    over the voxels that are analysis voxels of both seeds, in the same participants.

    Parameters
    ----------
    seeds : sequence of SeedMaps
        S of them.

    Returns
    -------
    dict of (S (S - 1) / 2,) arrays
        ``a``, ``b``, numbers of the seeds; ``distance_mm``; ``n_voxels``, common voxels;
        ``spatial_r``, ``dice_positive``, ``dice_negative`` of the reported maps; ``within_a``,
        ``within_b``, the median similarity of each seed's drawn placements with its reported one,
        and ``within_a_p05``, ``within_b_p05``, the 5th percentile; ``ceiling``, the geometric mean
        of the two seeds' ceilings, which bounds the correlation of two maps in independent halves;
        ``interchangeable``: the similarity is at or above the 5th percentile of both clouds, so
        that taking the other seed changes the map no more than placing this one again does.
    """
    rows = [
        _compare(seeds[a], seeds[b]) | {"a": a, "b": b}
        for a in range(len(seeds))
        for b in range(a + 1, len(seeds))
    ]
    names = ("a", "b", "distance_mm", "n_voxels", "spatial_r", "dice_positive", "dice_negative",
             "within_a", "within_b", "within_a_p05", "within_b_p05", "ceiling",
             "interchangeable")  # fmt: skip
    return {name: np.array([row[name] for row in rows]) for name in names}


def _compare(a: SeedMaps, b: SeedMaps) -> dict[str, Any]:
    common, of_a, of_b = np.intersect1d(a.voxels, b.voxels, assume_unique=True, return_indices=True)
    effects_a, effects_b = a.effects[:, of_a], b.effects[:, of_b]
    r = float(spatial_similarity(effects_a[0], effects_b[:1]).r[0])
    overlap = dice_with_reference(a.classes[of_a], b.classes[of_b][None]).dice[0]
    within = [spatial_similarity(maps[0], maps[1:]).r for maps in (effects_a, effects_b)]
    lower = [_quantile(values) for values in within]
    return {
        "distance_mm": float(np.linalg.norm(a.at - b.at)),
        "n_voxels": len(common),
        "spatial_r": r,
        "dice_positive": overlap[0],
        "dice_negative": overlap[1],
        "within_a": _quantile(within[0], 0.5),
        "within_b": _quantile(within[1], 0.5),
        "within_a_p05": lower[0],
        "within_b_p05": lower[1],
        "ceiling": float(np.sqrt(max(a.ceiling, 0) * max(b.ceiling, 0))),
        "interchangeable": bool(r >= max(lower)),
    }


def _quantile(values: FloatArray, share: float = WITHIN) -> float:
    known = values[~np.isnan(values)]
    return float(np.quantile(known, share)) if known.size else float("nan")
