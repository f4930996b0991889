"""From what was swept to one seed's frozen result: conclusions, tables, maps, headline."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from seedaudit.consensus.cloud import CloudConsensus, GroupDesign, Space, conclude
from seedaudit.errors import DataError, Problem
from seedaudit.inference.group import ThresholdRule
from seedaudit.plan import Plan, SeedPlan
from seedaudit.report.words import verdict
from seedaudit.results import SeedAudit, frozen_table, map_image, read_only
from seedaudit.sweep.moments import Moments
from seedaudit.sweep.schedule import ParticipantRecord, Swept


@dataclass(frozen=True)
class GroupState:
    """What all seeds share after the pass: who is used, and the working design."""

    used: tuple[ParticipantRecord, ...]
    set_aside: tuple[ParticipantRecord, ...]
    design: GroupDesign


def group_state(
    plan: Plan, swept: Swept, matrix: NDArray[np.float64], contrast: NDArray[np.float64]
) -> GroupState:
    """Sort the participants, and check that the model still stands without those set aside.

    Raises
    ------
    DataError
        If too few participants are left for the design.
    """
    used = tuple(record for record in swept.records if record.used)
    set_aside = (*plan.set_aside, *(record for record in swept.records if not record.used))
    rows = matrix[[record.row for record in used]]
    n, p = len(used), matrix.shape[1]
    single = len(plan.participants) == 1 and n == 1
    if not single and (n <= p or np.linalg.matrix_rank(rows) < p):
        raise DataError(
            Problem(
                "participants",
                f"{n} are left after setting {len(set_aside)} aside, too few or too alike for "
                f"the {p} columns of the model",
                f"at least {p + 1}, in every group",
                "mend the participants set aside, or simplify the model",
            )
        )
    least = n if plan.study.group.missing == "intersection" else max(p + 1, (n + 1) // 2)
    strata = plan.design.strata[[record.row for record in used]]
    return GroupState(used, set_aside, GroupDesign(rows, contrast, strata, least))


def conclude_seed(
    plan: Plan,
    swept: Swept,
    group: GroupState,
    number: int,
    anatomy: NDArray[np.float32],
) -> SeedAudit:
    """Everything about the seed of that number, frozen."""
    seed = plan.seeds[number]
    placements, kept_rows = _seen_everywhere(plan, group, number)
    start = sum(len(other.used) for other in plan.seeds[:number])
    folds = [_of_placements(fold, start + kept_rows) for fold in swept.folds]
    regions = plan.regions
    labels = np.zeros(len(plan.voxels), np.int32) if regions is None else regions.labels
    index = np.zeros(0, int) if regions is None else regions.index
    found = conclude(
        folds,
        swept.fold_sizes,
        group.design,
        Space(plan.voxels.ijk, plan.voxels.grid.shape, seed.analysis, labels, index),
        threshold_rule(plan),
        np.array([record.kept[number].target_means[0] for record in group.used]),
        safe=plan.study.consensus.safe,
        random_state=plan.study.placements.random_state,
    )
    tables = _tables(plan, group, number, placements, kept_rows, found)
    return SeedAudit(
        seed.seed.name,
        read_only(_summary(plan, group, seed, found, tables)),
        read_only(tables),
        read_only(_maps(plan, found, labels, anatomy)),
    )


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
) -> tuple[pd.DataFrame, NDArray[np.int_]]:
    """The placement table, with those set aside whose sphere has too little signal in someone.

    Also the rows, among those swept for this seed, that stay.
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
    kept = np.flatnonzero(~low)
    if len(kept) < 3:
        raise DataError(
            Problem(
                f"seed {seed.seed.name}",
                f"{len(kept) - 1} drawn placement(s) have a signal in every participant",
                "at least 2",
                "look at the coverage of the runs, a smaller cloud, or a lower min_coverage",
            )
        )
    return table, kept


def _of_placements(moments: Moments, rows: NDArray[np.int_]) -> Moments:
    """A view where the rows are consecutive, as they are when no placement was dropped."""
    if len(rows) == rows[-1] - rows[0] + 1:
        return moments.placements(slice(int(rows[0]), int(rows[-1]) + 1))
    return moments.placements(rows)


def _tables(
    plan: Plan,
    group: GroupState,
    number: int,
    placements: pd.DataFrame,
    kept_rows: NDArray[np.int_],
    found: CloudConsensus,
) -> dict[str, pd.DataFrame]:
    seed = plan.seeds[number]
    row_of = seed.used[kept_rows]
    names = placements["placement"].to_numpy()[row_of]
    distance = placements["distance"].to_numpy()[row_of]
    head = {"seed": seed.seed.name}
    regions = [] if plan.regions is None else list(plan.regions.names)
    pairs = {k: v for k, v in found.pairs.items() if k not in "ab"}
    return {
        "placements": frozen_table("placements", dict(placements)),
        "similarity": frozen_table(
            "similarity",
            {
                **head,
                "placement": names,
                "distance": distance,
                "threshold": threshold_words(plan),
                **found.similarity,
            },
        ),
        "pairs": frozen_table(
            "pairs",
            {
                **head,
                "placement_a": names[found.pairs["a"]],
                "placement_b": names[found.pairs["b"]],
                **pairs,
            },
        ),
        "regions": frozen_table(
            "regions", {"seed": [seed.seed.name] * len(regions), "region": regions, **found.regions}
        ),
        "thresholds": frozen_table("thresholds", {**head, **found.thresholds}),
        "participants": _participants(group, number, kept_rows),
    }


def _participants(group: GroupState, number: int, kept_rows: NDArray[np.int_]) -> pd.DataFrame:
    rows = []
    for record in (*group.used, *group.set_aside):
        row: dict[str, Any] = {
            "participant_id": record.participant,
            "n_runs": record.n_runs,
            "n_volumes": record.n_volumes,
            "n_censored": record.n_censored,
            "residual_df": record.residual_df,
            "n_missing_voxels": record.n_missing_voxels,
            "median_spatial_r": np.nan,
            "min_spatial_r": np.nan,
            "used": record.used,
            "reason": record.reason,
        }
        if record.used:
            drawn = record.kept[number].similarity[kept_rows[1:]]
            row["median_spatial_r"] = float(np.median(drawn))
            row["min_spatial_r"] = float(drawn.min())
        rows.append(row)
    return frozen_table("participants", pd.DataFrame(rows).to_dict("series"))


def _summary(
    plan: Plan,
    group: GroupState,
    seed: SeedPlan,
    found: CloudConsensus,
    tables: dict[str, pd.DataFrame],
) -> dict[str, Any]:
    drawn = tables["similarity"].iloc[1:]
    states = tables["regions"]["state"].value_counts()
    numbers: dict[str, Any] = {
        "name": seed.seed.name,
        "at_mm": [round(float(value), 3) for value in seed.at],
        "radius_mm": seed.seed.radius,
        "within_mm": round(seed.within, 3),
        "draw": plan.study.placements.draw,
        "exclude_margin_mm": round(float(seed.margin), 3),
        "n_participants": len(group.used),
        "n_placements_used": len(drawn),
        "n_placements_set_aside": int((~tables["placements"]["used"]).sum()),
        "n_analysis_voxels": int(found.voxels.sum()),
        "n_reported_positive": int(tables["similarity"]["n_positive"].iloc[0]),
        "n_reported_negative": int(tables["similarity"]["n_negative"].iloc[0]),
        "threshold": threshold_words(plan),
        "statistic": "t" if np.isfinite(found.df) else "z",
        "df": found.df if np.isfinite(found.df) else None,
        "stability": found.stability[0],
        "stability_low": found.stability[1],
        "stability_high": found.stability[2],
        "fleiss_kappa": found.kappa,
        "safe_share": _share(found.maps["safe"] != 0),
        "contested_share": _share(found.maps["contested"]),
        "spatial_r_median": float(drawn["spatial_r"].median()),
    }
    for tail in ("positive", "negative"):
        overlap = drawn[f"dice_{tail}"].dropna()
        numbers[f"dice_{tail}_median"] = float(overlap.median()) if len(overlap) else None
        numbers[f"dice_{tail}_p05"] = float(overlap.quantile(0.05)) if len(overlap) else None
        numbers[f"dice_{tail}_undefined"] = len(drawn) - len(overlap)
    numbers["regions"] = {str(state): int(count) for state, count in states.items()}
    numbers = {key: _json_number(value) for key, value in numbers.items()}
    return {**numbers, "sentence": verdict(numbers)}


def _share(chosen: NDArray[Any]) -> float:
    return float(np.mean(chosen != 0)) if len(chosen) else float("nan")


def _json_number(value: Any) -> Any:
    """Numbers rounded to six digits for reading; a missing number is null in JSON."""
    if isinstance(value, float):
        return float(f"{value:.6g}") if np.isfinite(value) else None
    return value


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
