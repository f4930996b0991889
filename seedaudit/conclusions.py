"""From what was swept to one seed's frozen result: conclusions, tables, maps, headline."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.sparse import csr_array

from seedaudit.consensus.ceiling import Ceiling, time_ceiling
from seedaudit.consensus.cloud import (
    CloudConsensus,
    Controls,
    Space,
    conclude,
)
from seedaudit.consensus.regional import region_rows
from seedaudit.errors import DataError, Problem
from seedaudit.groupstate import GroupState
from seedaudit.inference.group import ThresholdRule
from seedaudit.plan import Plan, SeedPlan
from seedaudit.report.words import verdict
from seedaudit.results import SeedAudit, map_image, read_only
from seedaudit.space.spheres import cloud_exclusion
from seedaudit.sweep.moments import Chosen, FoldState
from seedaudit.sweep.schedule import Swept
from seedaudit.tabulation import Found, summary, tables
from seedaudit.timehalves import time_halves
from seedaudit.worth import judge_claims, reach, settled_rule


def conclude_seed(
    plan: Plan,
    swept: Swept,
    group: GroupState,
    number: int,
    anatomy: NDArray[np.float32],
    workers: int = 1,
) -> SeedAudit:
    """Everything about the seed of that number, frozen."""
    seed = plan.seeds[number]
    placements, kept_rows, control_rows = _seen_everywhere(plan, group, number)
    start = sum(len(other.used) for other in plan.seeds[:number])
    folds = [Chosen(fold, start + kept_rows) for fold in swept.folds]
    controls = [Chosen(fold, start + control_rows) for fold in swept.folds]
    means = np.array([record.kept[number].target_means[kept_rows] for record in group.used])
    space = _space(plan, seed)
    reported_z = _reported_maps(group, number, seed.analysis)
    rule, critical = settled_rule(
        threshold_rule(plan), reported_z, group.design.matrix, group.design.contrast,
        rearrangements=plan.study.threshold.rearrangements,
        random_state=plan.study.placements.random_state,
    )  # fmt: skip
    found = conclude(
        folds,
        swept.fold_sizes,
        group.design,
        space,
        rule,
        means[:, :, : plan.n_regions],
        _controls(plan, seed, controls, control_rows),
        safe=plan.study.consensus.safe,
        random_state=plan.study.placements.random_state,
        workers=workers,
    )
    if found.ceiling is None and len(plan.participants) == 1:
        found = replace(
            found,
            ceiling=_time_ceiling(plan, seed, found, space, kept_rows, control_rows, swept.scratch),
        )
    shifts = placements[["dx", "dy", "dz"]].to_numpy()[seed.used[kept_rows]]
    claims = judge_claims(
        plan, seed, means[:, :, plan.n_regions :], np.linalg.norm(shifts, axis=1), group.design,
        found, folds, threshold_rule(plan), reported_z, workers,
    )  # fmt: skip
    all_found = Found(
        seed, placements, kept_rows, control_rows, found, claims,
        reach(seed, found, shifts[1:]), means[:, 1:, : plan.n_regions], critical,
    )  # fmt: skip
    made = tables(plan, group, number, all_found, threshold_words(plan))
    numbers = summary(plan, group, all_found, made, threshold_words(plan))
    states = zip(made["regions"]["region"], made["regions"]["state"], strict=True)
    return SeedAudit(
        seed.seed.name,
        read_only({**numbers, "sentence": verdict(numbers, states)}),
        read_only(made),
        read_only(_maps(plan, found, space.labels, anatomy)),
        found.placement_maps,
    )


def _space(plan: Plan, seed: SeedPlan) -> Space:
    """Where the voxels are, with regions or without any."""
    regions, grid = plan.regions, plan.voxels.grid
    labels = np.zeros(len(plan.voxels), np.int32) if regions is None else regions.labels
    index = np.zeros(0, int) if regions is None else regions.index
    return Space(plan.voxels.ijk, grid.shape, grid.voxel_sizes, seed.analysis, labels, index)


def _reported_maps(
    group: GroupState, number: int, analysis: NDArray[np.bool_]
) -> NDArray[np.float32] | None:
    """Maps (n, A) of the reported placement, on the analysis voxels that everybody has."""
    kept = [record.reported_z for record in group.used]
    if any(maps is None for maps in kept):
        return None
    maps = np.array([maps[number] for maps in kept if maps is not None])
    return np.asarray(maps[:, analysis & np.isfinite(maps).all(axis=0)])


def threshold_rule(plan: Plan) -> ThresholdRule:
    """The rule of the study, with the smallest cluster in voxels of the grid."""
    asked = plan.study.threshold
    assert asked.level is not None
    voxels = int(np.ceil(asked.min_extent / plan.voxels.grid.voxel_volume - 1e-9))
    return ThresholdRule(
        asked.rule, asked.level, asked.scale, asked.per_tail, max(1, voxels), asked.neighbours
    )


def threshold_words(plan: Plan) -> str:
    """The rule in a few words, as in the column `threshold`."""
    asked = plan.study.threshold
    words = f"{asked.rule} {asked.level:g}"
    if asked.rule == "effect":
        words += f" ({asked.scale})"
    if asked.rule == "density" and asked.per_tail:
        words += " per tail"
    return words + (f", at least {asked.min_extent:g} mm3" if asked.min_extent else "")


def _seen_everywhere(
    plan: Plan, group: GroupState, number: int
) -> tuple[pd.DataFrame, NDArray[np.int_], NDArray[np.int_]]:
    """The placement table, with those set aside whose sphere has too little signal in someone.

    Also the rows, among those swept for this seed, that stay: of the cloud, and of the controls.
    """
    seed = plan.seeds[number]
    start = sum(len(other.used) for other in plan.seeds[:number])
    rows = slice(start, start + len(seed.used))
    coverage = np.minimum.reduce(
        [record.coverage[rows] for record in group.used if record.coverage is not None]
    )
    low = coverage < plan.study.placements.min_coverage
    table = seed.cloud.table.copy()
    for row in seed.used[low]:
        table.loc[row, "used"] = False
        flags = [*filter(None, str(table.loc[row, "flags"]).split(";")), "missing_in_data"]
        table.loc[row, "flags"] = ";".join(sorted(flags))
    control = table["kind"].to_numpy()[seed.used] == "control"
    kept = np.flatnonzero(~low & ~control)
    if len(kept) < 3:
        raise DataError(
            Problem(
                f"seed {seed.seed.name}",
                f"{len(kept) - 1} drawn placement(s) have a signal in every participant",
                "at least 2",
                "look at the coverage of the runs, a smaller cloud, or a lower min_coverage",
            )
        )
    return table, kept, np.flatnonzero(~low & control)


def _controls(
    plan: Plan, seed: SeedPlan, folds: Sequence[FoldState], rows: NDArray[np.int_]
) -> Controls:
    """The control seeds of those rows, each with the voxels outside its own widened sphere."""
    own = seed.cloud.table.iloc[seed.used[rows]]
    keep = np.ones((len(rows), len(plan.voxels)), bool)
    for kept, (x, y, z, radius) in zip(
        keep, own[["x", "y", "z", "radius"]].to_numpy(dtype=float), strict=True
    ):
        kept[:] = ~cloud_exclusion(plan.voxels, [[x, y, z]], [radius], seed.margin)
    return Controls(folds, keep)


def _time_ceiling(
    plan: Plan,
    seed: SeedPlan,
    found: CloudConsensus,
    space: Space,
    kept_rows: NDArray[np.int_],
    control_rows: NDArray[np.int_],
    scratch: Path | None,
) -> Ceiling:
    """Halves of the time series, for one participant."""
    chosen = seed.used[np.concatenate([kept_rows, control_rows])]
    within = None
    if scratch is not None:
        within = scratch / "halves"
        within.mkdir(exist_ok=True)
    first, second = time_halves(plan, csr_array(seed.cloud.weights[chosen]), within)
    counts = [half.frame(slice(None)).count for half in (first, second)]
    rows = np.flatnonzero(found.voxels & (counts[0] > 0) & (counts[1] > 0))
    keep = _controls(plan, seed, (), control_rows).keep[:, rows]
    labels = region_rows(space.labels[rows], space.index)
    return time_ceiling(first, second, rows, labels, len(space.index), len(keep), keep)


def _maps(
    plan: Plan, found: CloudConsensus, labels: NDArray[np.int32], anatomy: NDArray[np.float32]
) -> dict[str, Any]:
    grid, code = plan.voxels.grid, plan.first_run.space_code
    inner = plan.voxels.subset(found.voxels)
    volumes = {
        name: inner.volume(values, fill=0 if name == "contested" else np.nan, dtype=np.float32)
        for name, values in found.maps.items()
    }
    volumes["analysis_mask"] = inner.volume(np.ones(len(inner)), fill=0, dtype=np.float32)
    volumes["region_labels"] = plan.voxels.volume(labels, fill=0, dtype=np.float32)
    volumes["anatomy"] = anatomy
    return {name: map_image(name, volume, grid.affine, code) for name, volume in volumes.items()}
