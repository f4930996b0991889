"""Several seeds of one study: which of them can stand in for each other."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from seedaudit.consensus.between_seeds import SeedMaps, between_seeds
from seedaudit.consensus.halves import MOST_SPLITS, Halves, half_splits, halves
from seedaudit.groupstate import GroupState
from seedaudit.inference.glm import estimate_sums, solve_model
from seedaudit.plan import Plan, kept_placements
from seedaudit.results import SeedAudit, frozen_table
from seedaudit.space.lattice import evenly_spread
from seedaudit.sweep.moments import FoldState, merged, total_sums
from seedaudit.sweep.schedule import Swept

MOST_VOXELS = 8000
"""Common analysis voxels, evenly spread, that the unthresholded maps are compared on."""


def compare_seeds(
    plan: Plan, swept: Swept, group: GroupState, seeds: Sequence[SeedAudit]
) -> pd.DataFrame | None:
    """The table `seeds`; None with a single seed, or no voxel that all of them are judged on.

    Parameters
    ----------
    plan : Plan
    swept : Swept
    group : GroupState
    seeds : sequence of SeedAudit
        The results of the seeds, in the order of the plan.
    """
    common = np.logical_and.reduce([seed.analysis for seed in plan.seeds])
    count = np.sum([fold.frame(slice(None)).count for fold in swept.folds], axis=0)
    common &= count == len(group.used)
    if len(seeds) < 2 or common.sum() < 3:
        return None
    everywhere = np.flatnonzero(common)
    rows = everywhere[evenly_spread(plan.voxels.subset(common), MOST_VOXELS)]
    filled = np.flatnonzero(swept.fold_sizes)
    folds = [swept.folds[fold] for fold in filled]
    sizes = [swept.fold_sizes[fold] for fold in filled]
    maps = [
        _seed_maps(plan, group, number, seed, folds, everywhere, rows)
        for number, seed in enumerate(seeds)
    ]
    found = between_seeds(maps, _halves(plan, group, folds, sizes, rows[0]), sizes)
    names = np.array([seed.name for seed in seeds], object)
    return frozen_table(
        "seeds", {"seed_a": names[found["a"]], "seed_b": names[found["b"]], **found}
    )


def _halves(
    plan: Plan, group: GroupState, folds: Sequence[FoldState], sizes: Sequence[int], voxel: int
) -> Halves | None:
    """Half-splits of the folds; None where no two halves can be estimated."""
    frames = [fold.frame(slice(voxel, voxel + 1)) for fold in folds]
    if len(folds) < 2 or frames[0].variance is not None:
        return None
    members = half_splits(len(folds), MOST_SPLITS, plan.study.placements.random_state)
    xtx = np.array([frame.xtx[:, :, 0] for frame in frames])
    split = halves(xtx, sizes, group.design.contrast, members)
    return split if split.usable[0].any() else None


def _seed_maps(
    plan: Plan,
    group: GroupState,
    number: int,
    seed: SeedAudit,
    folds: Sequence[FoldState],
    everywhere: NDArray[np.int_],
    rows: NDArray[np.int_],
) -> SeedMaps:
    """One seed's maps: classes on all common voxels, what is computed from sums on some."""
    start = sum(len(other.used) for other in plan.seeds[:number])
    kept = start + kept_placements(plan.seeds[number], seed.tables["placements"])
    frame = merged(fold.frame(rows) for fold in folds)
    model = solve_model(frame, group.design.contrast, group.design.least_count)
    effects = np.empty((len(kept), len(rows)))
    sums = np.empty((len(kept), len(folds) * len(group.design.contrast), len(rows)))
    for row, placement in enumerate(kept):
        parts = [fold.sums(int(placement), rows) for fold in folds]
        effects[row] = estimate_sums(total_sums(parts), model).effect
        sums[row] = np.concatenate([part.xtz for part in parts])
    volume = np.asarray(seed.maps["class_reported"].dataobj)
    classes = volume[tuple(plan.voxels.ijk[everywhere].T)]
    return SeedMaps(
        plan.seeds[number].at,
        effects,
        np.nan_to_num(classes).astype(np.int8),
        sums,
    )
