"""What the placements of one cloud say together: every conclusion drawn from merged moments."""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.consensus.agreement import (
    agreement_shares,
    class_counts,
    conjunction,
    contested_map,
    effect_spread,
    modal_class,
    placement_to_sampling,
    safe_map,
)
from seedaudit.consensus.ceiling import Ceiling, ceiling
from seedaudit.consensus.chance import fleiss_kappa, gwet_ac1
from seedaudit.consensus.components import placement_share
from seedaudit.consensus.floor import control_similarity, fold_residuals, residual_smoothness
from seedaudit.consensus.lowrank import LowRank, low_rank
from seedaudit.consensus.overlap import (
    Sweep,
    correlation_pairs,
    dice_pairs,
    dice_with_reference,
    spatial_similarity,
)
from seedaudit.consensus.regional import region_rows, region_table, regional_stability
from seedaudit.consensus.resampling import bootstrap_interval, delete_fold_interval
from seedaudit.errors import DataError, Problem
from seedaudit.inference.glm import Estimate, solve_model
from seedaudit.inference.group import GroupMaps, ThresholdRule, classifier
from seedaudit.inference.placementwise import DegreesOfFreedom, WithoutFolds, placement_maps
from seedaudit.sweep.moments import FoldState, merged

DENSITIES = np.arange(1, 51) / 100
VALUE_CUTS = np.arange(1, 21) / 20
"""Fisher z"""
MAP_TOLERANCE, MAP_BYTES = 0.02, 5_000_000
"""Placement maps are kept with this largest error, Fisher z, as far as the space allows."""

Table = dict[str, NDArray[Any]]


@dataclass(frozen=True)
class GroupDesign:
    """The group model of the participants used.

    Parameters
    ----------
    matrix : (n, p)
    contrast : (p,)
    strata : (n,) int
        Participants with equal numbers are exchanged for one another by the bootstrap.
    least_count : int
        Participants that a voxel needs.
    """

    matrix: NDArray[np.float64]
    contrast: NDArray[np.float64]
    strata: NDArray[np.int_]
    least_count: int


@dataclass(frozen=True)
class Space:
    """Where the voxels are: indices `ijk` (V, 3) in a grid of `shape` with voxel edges of `steps`
    (3,) mm, the `analysis` voxels (V,) of the cloud, and the region `labels` (V,), 0 for none, of
    the regions `index` (K,).
    """

    ijk: NDArray[np.int32]
    shape: tuple[int, int, int]
    steps: NDArray[np.float64]
    analysis: NDArray[np.bool_]
    labels: NDArray[np.int32]
    index: NDArray[np.int_]


@dataclass(frozen=True)
class Controls:
    """Control seeds: `folds` of their state, and the voxels `keep` (C, V) that each is compared
    on, which its own widened sphere is no part of.
    """

    folds: Sequence[FoldState]
    keep: NDArray[np.bool_]


@dataclass(frozen=True)
class CloudConsensus:
    """All that is concluded about one cloud.

    Parameters
    ----------
    voxels : (V,) bool
        Analysis voxels that could be estimated; the maps are over these.
    maps : dict of (A,) arrays
        By the names of the result folder.
    similarity, pairs, thresholds, regions : dict of columns
    stability : (value, low, high)
        Gwet's AC1 over the three classes with its jackknife interval.
    kappa : float
        Fleiss' kappa.
    df : float
        Residual degrees of freedom (the smallest, where voxels differ); infinite for scores.
    ceiling : Ceiling or None
        None where no two halves of the participants can be compared.
    controls : dict of columns
        Similarity of the control seeds to the reported placement, a row for each.
    fwhm : float
        Smoothness of the residuals, mm; NaN for one participant.
    """

    voxels: NDArray[np.bool_]
    maps: Table
    similarity: Table
    pairs: Table
    thresholds: Table
    regions: Table
    stability: tuple[float, float, float]
    kappa: float
    df: float
    placement_maps: LowRank
    ceiling: Ceiling | None
    controls: Table
    fwhm: float


def conclude(
    folds: Sequence[FoldState],
    fold_sizes: Sequence[int],
    design: GroupDesign,
    space: Space,
    rule: ThresholdRule,
    region_means: NDArray[np.float64],
    controls: Controls,
    *,
    safe: float = 0.95,
    random_state: int = 0,
    workers: int = 1,
) -> CloudConsensus:
    """Draw every conclusion about one cloud.

    Parameters
    ----------
    folds : sequence of FoldState
        Of the cloud's placements, the reported one first.
    fold_sizes : sequence of int
        Participants in each fold.
    design : GroupDesign
    space : Space
    rule : ThresholdRule
    region_means : (n, N, K)
        Mean z of each region in each participant at every placement.
    controls : Controls
    safe : float
        Share of placements.
    random_state : int
        Of the bootstrap.
    workers : int
        Threads; the numbers do not depend on how many.
    """
    # what all placements share: counts and X'X
    frame = merged(fold.frame(slice(None)) for fold in folds)
    estimable = np.isfinite(solve_model(frame, design.contrast, design.least_count).spread)
    voxels = space.analysis & estimable
    if not voxels.any():
        raise DataError(
            Problem(
                "analysis voxels",
                "in none of them can the group model be estimated",
                f"voxels outside the seed's spheres that {design.least_count} participants have",
                "look at the coverage of the runs, the mask, or group.missing = counts",
            )
        )
    complete = voxels & (frame.count == len(design.matrix))
    classes_of = classifier(rule, space.ijk[voxels], space.shape)
    densities = _DensityLooks()
    maps, without, looks = placement_maps(
        folds, fold_sizes, voxels, design.contrast, design.least_count, classes_of,
        complete[voxels], look=densities, workers=workers,
    )  # fmt: skip
    counts = class_counts(maps.classes[1:])
    sizes = [size for size in fold_sizes if size]
    top = ceiling(
        folds,
        fold_sizes,
        design.contrast,
        complete,
        without.sizes,
        region_rows(space.labels[complete], space.index),
        len(space.index),
        controls=controls.folds,
        control_keep=controls.keep[:, complete],
        random_state=random_state,
        workers=workers,
    )
    left_out = range(len(without.tails))
    stability = np.array([gwet_ac1(counts), *(gwet_ac1(without.counts(g)) for g in left_out)])
    low, high = delete_fold_interval(stability[0], stability[1:], sizes)
    regions = _regions(
        maps, counts, without, sizes, space.labels[voxels], space.index, design, region_means, top,
        safe, random_state,
    )  # fmt: skip
    floor = control_similarity(
        controls.folds, voxels, design.contrast, design.least_count, maps,
        controls.keep[:, voxels], classes_of, workers=workers,
    )  # fmt: skip
    return CloudConsensus(
        voxels,
        _maps(maps, counts, safe),
        _similarity(maps),
        _pairs(maps),
        _thresholds(maps, densities.sweep.table(looks[1:]), workers),
        regions,
        (float(stability[0]), float(low), float(high)),
        float(fleiss_kappa(counts)),
        float(np.nanmin(maps.df)) if voxels.any() else float("nan"),
        # the last use of the effects, whose memory it takes
        low_rank(maps.effects, tolerance=MAP_TOLERANCE, most_bytes=MAP_BYTES, overwrite=True),
        top,
        floor,
        _smoothness(folds, fold_sizes, design, space, complete),
    )


def _regions(
    maps: GroupMaps,
    counts: NDArray[np.int32],
    without: WithoutFolds,
    sizes: Sequence[int],
    labels: NDArray[np.int32],
    index: NDArray[np.int_],
    design: GroupDesign,
    region_means: NDArray[np.float64],
    top: Ceiling | None,
    safe: float,
    random_state: int,
) -> Table:
    left_out = [
        regional_stability(labels, index, without.counts(g)) for g in range(len(without.tails))
    ]
    stability = np.array([regional_stability(labels, index, counts), *left_out])
    effects = region_effects(maps.effects, labels, index)
    interval = bootstrap_interval(
        design.matrix, region_means[:, 0], design.contrast, design.strata,
        random_state=random_state,
    )  # fmt: skip
    return region_table(
        labels, index, maps.classes[1:], maps.classes[0], effects[1:], effects[0], *interval,
        *delete_fold_interval(stability[0], stability[1:], sizes), safe,
        ceiling=None if top is None else top.same["ac1"][0, 1:],
        ceiling_relative=None if top is None else top.relative["ac1"][0, 1:],
        placement_share=placement_share(region_means[:, 1:], design.matrix, design.contrast),
    )  # fmt: skip


def _smoothness(
    folds: Sequence[FoldState],
    fold_sizes: Sequence[int],
    design: GroupDesign,
    space: Space,
    complete: NDArray[np.bool_],
) -> float:
    used = [fold for fold, size in zip(folds, fold_sizes, strict=True) if size]
    if len(design.matrix) <= design.matrix.shape[1] or len(used) < 2 or not complete.any():
        return float("nan")
    residuals = fold_residuals(used, complete)
    return residual_smoothness(residuals, space.ijk[complete], space.shape, space.steps)


def region_effects(
    effects: NDArray[np.float32], labels: NDArray[np.int32], index: NDArray[np.int_]
) -> NDArray[np.float64]:
    """Mean group effect (N, K) of the voxels of each region; NaN for a region without any."""
    rows = region_rows(labels, index)
    inside = np.flatnonzero(rows >= 0)
    n_voxels = np.bincount(rows[inside], minlength=len(index)).astype(np.float64)
    n_voxels[n_voxels == 0] = np.nan
    # row by row: no copy of all maps, however large a region is
    sums = [np.bincount(rows[inside], row[inside], minlength=len(index)) for row in effects]
    return np.array(sums) / n_voxels


def _maps(maps: GroupMaps, counts: NDArray[np.int32], safe: float) -> Table:
    positive, negative = agreement_shares(counts)
    spread = effect_spread(maps.effects[1:])
    return {
        "agreement_positive": positive,
        "agreement_negative": negative,
        "modal_class": modal_class(counts)[0],
        "modal_share": modal_class(counts)[1],
        "safe": safe_map(counts, safe),
        "contested": contested_map(counts, safe),
        "conjunction": conjunction(maps.lowest, maps.highest),
        "effect_reported": maps.effects[0].copy(),
        "effect_mean": spread.mean,
        "effect_sd": spread.sd,
        "effect_range": spread.maximum - spread.minimum,
        "placement_to_sampling": placement_to_sampling(spread.sd, maps.standard_error),
        "t_reported": maps.statistic,
        "class_reported": maps.classes[0],
    }


def _similarity(maps: GroupMaps) -> Table:
    overlap = dice_with_reference(maps.classes[0], maps.classes)
    likeness = spatial_similarity(maps.effects[0], maps.effects)
    return {
        "n_positive": overlap.sizes[:, 0],
        "n_negative": overlap.sizes[:, 1],
        "dice_positive": overlap.dice[:, 0],
        "dice_negative": overlap.dice[:, 1],
        "spatial_r": likeness.r,
        "concordance": likeness.concordance,
        "rms_difference": likeness.rms_difference,
    }


def _pairs(maps: GroupMaps) -> Table:
    positive, negative = dice_pairs(maps.classes[1:])
    r = correlation_pairs(maps.effects[1:])
    a, b = np.triu_indices(len(r), 1)
    return {
        "a": a + 1,
        "b": b + 1,
        "dice_positive": positive[a, b],
        "dice_negative": negative[a, b],
        "spatial_r": r[a, b],
    }


class _DensityLooks:
    """Asked of every placement while its statistic is at hand, of the reported one first."""

    sweep: Sweep

    def __call__(self, found: Estimate, df: DegreesOfFreedom) -> NDArray[np.int64]:
        statistic = found.statistic.astype(np.float32)
        if not hasattr(self, "sweep"):
            self.sweep = Sweep.density(statistic, DENSITIES)
        return self.sweep.look(statistic)


def _thresholds(maps: GroupMaps, by_density: Table, workers: int) -> Table:
    by_effect = Sweep.value(maps.effects[0], VALUE_CUTS)
    with ThreadPoolExecutor(workers) as pool:
        looks = list(pool.map(by_effect.look, maps.effects[1:]))
    sweeps = {"density": by_density, "effect": by_effect.table(looks)}
    return {
        "rule": np.repeat(list(sweeps), [len(sweep["cut"]) for sweep in sweeps.values()]),
        **{name: np.concatenate([sweep[name] for sweep in sweeps.values()]) for name in by_density},
    }
