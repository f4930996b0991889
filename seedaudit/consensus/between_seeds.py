"""Several seeds in one pass: can one stand in for another, within placement error?

In the same participants, overlapping spheres share their noise and distant ones do not, so two
distant seeds of one network look less alike than two placements of one of them. The question is
therefore put to independent halves of the participants, where no noise is shared, and relative to
the ceiling, which the noise of each map sets by itself.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.consensus.halves import FoldMaps, Halves, cross_half_r
from seedaudit.consensus.overlap import dice_with_reference, spatial_similarity
from seedaudit.consensus.resampling import delete_fold_interval

FloatArray = NDArray[np.float64]

WITHIN = 0.05
"""Quantile of the within-cloud similarities that two seeds must reach."""

ALIKE = 0.9
"""Relative similarity that is called alike even where the clouds are tighter."""


@dataclass(frozen=True)
class SeedMaps:
    """One seed's maps, on voxels that are analysis voxels of every seed.

    Parameters
    ----------
    at : (3,)
        Reported centre, mm.
    effects : (N, B)
        Group effect of the used placements, Fisher z; row 0 is the reported one.
    classes : (A,) int8
        Classes of the reported placement; the A voxels may be more than the B.
    sums : (N, G p, B)
        The same placements' x'z of every fold (`halves.fold_sums`).
    """

    at: NDArray[np.float64]
    effects: NDArray[np.floating[Any]]
    classes: NDArray[np.int8]
    sums: NDArray[np.floating[Any]]


@dataclass(frozen=True)
class _Cloud:
    """Within one cloud: `ceilings` (N, D) of each placement, `relative` (N - 1, D) similarity of
    the drawn placements with the reported one; D: with all folds, and without each.
    """

    ceilings: FloatArray
    relative: FloatArray
    same_people: float


def between_seeds(
    seeds: Sequence[SeedMaps], split: Halves | None, fold_sizes: Sequence[int]
) -> dict[str, NDArray[Any]]:
    """Compare every two seeds, and set that against the placement error of each.

    Parameters
    ----------
    seeds : sequence of SeedMaps
        S of them, each with two placements or more.
    split : Halves or None
        Half-splits of the folds; None where there are no two folds, and nothing can be said but
        how alike the maps of the same participants are.
    fold_sizes : sequence of G int
        Participants in each fold.

    Returns
    -------
    dict of (S (S - 1) / 2,) arrays
        ``a``, ``b``, numbers of the seeds; ``distance_mm``; in the same participants
        ``spatial_r``, ``dice_positive``, ``dice_negative`` of the reported maps, and ``within_a``,
        ``within_b``, the median spatial r of a seed's drawn placements with its reported one;
        ``ceiling``, the geometric mean of the two maps' similarities with themselves in
        independent halves; ``relative``, ``relative_low``, ``relative_high``, the similarity of
        the two maps in independent halves divided by that ceiling, with a 95 % interval over
        participants; ``relative_within_a``, ``relative_within_b``, the 5th percentile of the same
        measure over the placements of a cloud; and ``interchangeable``.

        That is False where `relative` lies below the 5th percentile of either cloud beyond the
        noise of the participants: the other seed changes the map more than placing this one again
        would. It is True where it does not, and the interval excludes a relative similarity below
        both that percentile and `ALIKE`; else None: too few participants to tell.

    Notes
    -----
    Intervals are those of the delete-a-fold jackknife; the percentiles are taken anew without
    each fold.
    """
    clouds = [_within(seed, split) for seed in seeds]
    rows = [
        {"a": a, "b": b, **_compare(seeds[a], seeds[b], clouds[a], clouds[b], split, fold_sizes)}
        for a in range(len(seeds))
        for b in range(a + 1, len(seeds))
    ]
    columns = {name: np.array([row[name] for row in rows]) for name in (rows[0] if rows else {})}
    if rows:
        columns["interchangeable"] = columns["interchangeable"].astype(object)
    return columns


def _within(seed: SeedMaps, split: Halves | None) -> _Cloud:
    alike = spatial_similarity(seed.effects[0], seed.effects[1:]).r
    same_people = _quantile(alike[:, None], 0.5)[0]
    if split is None:
        missing = np.full((len(seed.sums), 1), np.nan)
        return _Cloud(missing, missing[1:], same_people)
    ceilings = np.array([_cross(maps, maps, split) for maps in seed.sums])
    crossed = np.array([_cross(seed.sums[0], maps, split) for maps in seed.sums[1:]])
    return _Cloud(ceilings, crossed / _joint(ceilings[0], ceilings[1:]), same_people)


def _compare(
    a: SeedMaps,
    b: SeedMaps,
    cloud_a: _Cloud,
    cloud_b: _Cloud,
    split: Halves | None,
    fold_sizes: Sequence[int],
) -> dict[str, Any]:
    overlap = dice_with_reference(a.classes, b.classes[None]).dice[0]
    ceiling = _joint(cloud_a.ceilings[0], cloud_b.ceilings[0])
    crossed = np.full(1, np.nan) if split is None else _cross(a.sums[0], b.sums[0], split)
    relative = crossed / ceiling
    lower = [_quantile(cloud.relative, WITHIN) for cloud in (cloud_a, cloud_b)]
    limit = np.maximum(*lower)
    low, high = _interval(relative, fold_sizes)
    _, above = _interval(relative - limit, fold_sizes)
    return {
        "distance_mm": float(np.linalg.norm(a.at - b.at)),
        "spatial_r": float(spatial_similarity(a.effects[0], b.effects[:1]).r[0]),
        "dice_positive": overlap[0],
        "dice_negative": overlap[1],
        "within_a": cloud_a.same_people,
        "within_b": cloud_b.same_people,
        "ceiling": ceiling[0],
        "relative": relative[0],
        "relative_low": low,
        "relative_high": high,
        "relative_within_a": lower[0][0],
        "relative_within_b": lower[1][0],
        "interchangeable": _verdict(low, above, float(limit[0])),
    }


def _verdict(low: float, above: float, limit: float) -> bool | None:
    """`above` is the upper end of the interval of what the similarity has over the limit."""
    if above < 0:
        return False
    # NaN, where there is no interval, decides nothing
    return True if above >= 0 and low >= min(limit, ALIKE) else None


def _cross(first: FloatArray, second: FloatArray, split: Halves) -> FloatArray:
    """Similarity in independent halves, (1 + G,)."""
    everywhere = np.array([[0, first.shape[1]]])
    maps = [FoldMaps.of(sums, everywhere) for sums in (first, second)]
    return cross_half_r(maps[0], maps[1], split)[:, 0]


def _joint(a: FloatArray, b: FloatArray) -> FloatArray:
    """Geometric mean of ceilings; NaN where there is no similarity to be relative to."""
    product = np.where((a > 0) & (b > 0), a * b, np.nan)
    return np.asarray(np.sqrt(product))


def _quantile(values: FloatArray, share: float) -> FloatArray:
    """Quantile of the known values of each column; NaN where there are none."""
    found = np.full(values.shape[1], np.nan)
    for column, row in enumerate(values.T):
        known = row[~np.isnan(row)]
        if known.size:
            found[column] = np.quantile(known, share)
    return found


def _interval(values: FloatArray, fold_sizes: Sequence[int]) -> tuple[float, float]:
    """Of a similarity with all folds and without each; without a bound at 1."""
    full, without = values[0], values[1:]
    if len(without) != len(fold_sizes):
        return float("nan"), float("nan")
    low, high = delete_fold_interval(full, without, fold_sizes, most=np.inf)
    return float(low), float(high)
