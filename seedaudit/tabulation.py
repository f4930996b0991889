"""One seed's conclusions as the tables and the headline numbers of a result."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import stats

from seedaudit.consensus.cloud import CloudConsensus, Table
from seedaudit.consensus.components import instability_influence
from seedaudit.dictionary import COLUMNS
from seedaudit.groupstate import GroupState
from seedaudit.inputs.design import Design
from seedaudit.plan import Plan, SeedPlan
from seedaudit.results import frozen_table
from seedaudit.worth import Reach

VERDICTS = ("holds", "breaks", "open")

CEILING_MEASURE = "spatial_r"
"""The headline's ceiling, floor and ceiling-relative stability: no threshold has a say in it."""


@dataclass(frozen=True)
class Found:
    """All that was found about one seed.

    `placements` is the table of all placements; `kept_rows` and `control_rows` those swept rows
    that are used; `region_means` (n, N, K) the regions' mean z at the drawn placements;
    `critical` the family-wise critical value, where the rule has one.
    """

    seed: SeedPlan
    placements: pd.DataFrame
    kept_rows: NDArray[np.int_]
    control_rows: NDArray[np.int_]
    cloud: CloudConsensus
    claims: Table
    reach: Reach
    region_means: NDArray[np.float64]
    critical: float | None


def tables(
    plan: Plan, group: GroupState, number: int, found: Found, threshold: str
) -> dict[str, pd.DataFrame]:
    """All tables of one seed, by name.

    Parameters
    ----------
    plan : Plan
    group : GroupState
    number : int
        Of the seed.
    found : Found
    threshold : str
        The rule in words.
    """
    cloud, name = found.cloud, found.seed.seed.name
    row_of = found.seed.used[found.kept_rows]
    names = found.placements["placement"].to_numpy()[row_of]
    distance = found.placements["distance"].to_numpy()[row_of]
    regions = [] if plan.regions is None else list(plan.regions.names)
    pairs = {k: v for k, v in cloud.pairs.items() if k not in "ab"}
    similarity = {
        "placement": names, "distance": distance, "threshold": threshold, **cloud.similarity,
    }  # fmt: skip
    if cloud.ceiling is not None:
        similarity["ceiling_relative"] = np.concatenate([[1.0], cloud.ceiling.placement_relative])
    control = found.placements.iloc[found.seed.used[found.control_rows]]
    columns: dict[str, dict[str, Any]] = {
        "placements": dict(found.placements),
        "similarity": similarity,
        "pairs": {
            "placement_a": names[cloud.pairs["a"]],
            "placement_b": names[cloud.pairs["b"]],
            **pairs,
        },
        "regions": {"region": regions, **cloud.regions},
        "thresholds": cloud.thresholds,
        "controls": {
            "placement": control["placement"].to_numpy(),
            "distance": control["distance"].to_numpy(),
            **cloud.controls,
        },
        "ceiling": _ceiling(found, regions),
        "decay": found.reach.decay,
        "tolerance": found.reach.tolerance,
        "claims": found.claims,
        "participants": _participants(group, number, found),
    }
    return {key: _frozen(key, name, value) for key, value in columns.items()}


def _frozen(table: str, seed: str, columns: dict[str, Any]) -> pd.DataFrame:
    """A table in which every row names the seed."""
    columns = columns or {key: [] for key in COLUMNS[table] if key != "seed"}
    rows = max(len(column) for column in columns.values() if not isinstance(column, str))
    return frozen_table(table, {"seed": [seed] * rows, **columns})


def _ceiling(found: Found, regions: list[str]) -> dict[str, Any]:
    """Similarities across halves, a row for each measure of the whole map and of each region."""
    top = found.cloud.ceiling
    if top is None:
        return {}
    columns: dict[str, list[Any]] = {key: [] for key in ("region", "measure", "n_splits")}
    kinds = {"same": top.same, "shifted": top.shifted, "relative": top.relative}
    ends = ("", "_low", "_high")
    columns |= {f"{kind}{end}": [] for kind in kinds for end in ends}
    for measure in top.same:
        columns["region"] += ["", *regions]
        columns["measure"] += [measure] * (1 + len(regions))
        splits = top.n_splits if measure == "spatial_r" else top.n_class_splits
        columns["n_splits"] += [splits] * (1 + len(regions))
        for kind, values in kinds.items():
            for end, row in zip(ends, values[measure], strict=True):
                columns[f"{kind}{end}"] += row.tolist()
    return columns


def _participants(group: GroupState, number: int, found: Found) -> dict[str, Any]:
    influence = instability_influence(
        found.region_means, group.design.matrix, group.design.contrast
    )
    rows = []
    for position, record in enumerate((*group.used, *group.set_aside)):
        row: dict[str, Any] = {
            "participant_id": record.participant,
            "n_runs": record.n_runs,
            "n_volumes": record.n_volumes,
            "n_censored": record.n_censored,
            "residual_df": record.residual_df,
            "n_missing_voxels": record.n_missing_voxels,
            "mean_motion": np.nan,
            "median_spatial_r": np.nan,
            "min_spatial_r": np.nan,
            "influence": np.nan,
            "used": record.used,
            "reason": record.reason,
        }
        if record.used:
            drawn = record.kept[number].similarity[found.kept_rows[1:]]
            row["mean_motion"] = group.motion[position]
            row["median_spatial_r"] = float(np.median(drawn))
            row["min_spatial_r"] = float(drawn.min())
            row["influence"] = influence[position]
        rows.append(row)
    return {str(key): column for key, column in pd.DataFrame(rows).to_dict("series").items()}


def summary(
    plan: Plan,
    group: GroupState,
    found: Found,
    made: dict[str, pd.DataFrame],
    threshold: str,
) -> dict[str, Any]:
    """The headline numbers of one seed, without the sentence.

    Parameters
    ----------
    plan : Plan
    group : GroupState
    found : Found
    made : dict of DataFrame
        From `tables`.
    threshold : str
        The rule in words.
    """
    cloud, seed = found.cloud, found.seed
    drawn = made["similarity"].iloc[1:]
    placed = made["placements"].query("kind != 'control'")
    states = made["regions"]["state"].value_counts()
    numbers: dict[str, Any] = {
        "name": seed.seed.name,
        "at_mm": [round(float(value), 3) for value in seed.at],
        "radius_mm": seed.seed.radius,
        "within_mm": round(seed.within, 3),
        "draw": plan.study.placements.draw,
        "exclude_margin_mm": round(float(seed.margin), 3),
        "n_participants": len(group.used),
        "n_placements_used": len(drawn),
        "n_placements_set_aside": int((~placed["used"]).sum()),
        "n_analysis_voxels": int(cloud.voxels.sum()),
        "n_reported_positive": int(made["similarity"]["n_positive"].iloc[0]),
        "n_reported_negative": int(made["similarity"]["n_negative"].iloc[0]),
        "threshold": threshold,
        "critical_value": found.critical,
        "statistic": "t" if np.isfinite(cloud.df) else "z",
        "df": cloud.df if np.isfinite(cloud.df) else None,
        "effect_kind": effect_kind(plan.design),
        "stability": cloud.stability[0],
        "stability_low": cloud.stability[1],
        "stability_high": cloud.stability[2],
        "fleiss_kappa": cloud.kappa,
        "safe_share": _share(cloud.maps["safe"] != 0),
        "contested_share": _share(cloud.maps["contested"]),
        "spatial_r_median": float(drawn["spatial_r"].median()),
    }
    for tail in ("positive", "negative"):
        overlap = drawn[f"dice_{tail}"].dropna()
        numbers[f"dice_{tail}_median"] = float(overlap.median()) if len(overlap) else None
        numbers[f"dice_{tail}_p05"] = float(overlap.quantile(0.05)) if len(overlap) else None
        numbers[f"dice_{tail}_undefined"] = len(drawn) - len(overlap)
    numbers["regions"] = {str(state): int(count) for state, count in states.items()}
    numbers |= _worth(found, made)
    return {key: json_number(value) for key, value in numbers.items()}


def effect_kind(design: Design) -> str:
    """What is tested: a `mean`, a `difference` of levels, or a `slope`.

    A mean changes with what is added to every participant; the others do not.
    """
    ones = np.ones(len(design.matrix))
    constant, *_ = np.linalg.lstsq(design.matrix, ones, rcond=None)
    if not np.isclose(design.contrast @ constant, 0, atol=1e-8):
        return "mean"
    return "difference" if "[" in design.effect else "slope"


def _worth(found: Found, made: dict[str, pd.DataFrame]) -> dict[str, Any]:
    """Ceiling, floor, tolerance, claims, motion, and what could not be told."""
    top, floor = found.cloud.ceiling, found.cloud.controls[CEILING_MEASURE]
    relative = [None] * 3 if top is None else top.relative[CEILING_MEASURE][:, 0].tolist()
    verdicts = made["claims"]["verdict"] if len(made["claims"]) else pd.Series(dtype=str)
    people = made["participants"].dropna(subset=["mean_motion", "median_spatial_r"])
    motion = None
    if len(people) > 2 and people["mean_motion"].nunique() > 1:
        motion = float(stats.spearmanr(people["mean_motion"], people["median_spatial_r"])[0])
    return {
        "ceiling_measure": CEILING_MEASURE,
        "ceiling": None if top is None else float(top.same[CEILING_MEASURE][0, 0]),
        "ceiling_relative": relative[0],
        "ceiling_relative_low": relative[1],
        "ceiling_relative_high": relative[2],
        "n_half_splits": 0 if top is None else top.n_splits,
        "n_class_half_splits": 0 if top is None else top.n_class_splits,
        "n_class_placements": 0 if top is None else top.n_class_placements,
        "floor": float(np.nanmedian(floor)) if np.isfinite(floor).any() else None,
        "n_controls": len(floor),
        "smoothness_mm": found.cloud.fwhm,
        **found.reach.headline,
        "claims": {verdict: int((verdicts == verdict).sum()) for verdict in VERDICTS},
        "motion_rank_correlation": motion,
        "notes": _notes(found, relative[0]),
    }


def _notes(found: Found, relative: float | None) -> list[str]:
    """What could not be told, and why."""
    notes = []
    if relative is None:
        notes.append(
            "no ceiling: it needs two halves of at least two participants that the model can be "
            "estimated in"
        )
    elif not np.isfinite(relative):
        notes.append(
            "no ceiling-relative stability: the reported map of one half of the participants is "
            "not like that of the other half beyond chance, so nothing can be related to it"
        )
    if not len(found.control_rows):
        notes.append("no floor: there are no control seeds")
    return notes


def _share(chosen: NDArray[Any]) -> float:
    return float(np.mean(chosen != 0)) if len(chosen) else float("nan")


def json_number(value: Any) -> Any:
    """Numbers rounded to six digits for reading; a missing number is null in JSON."""
    if isinstance(value, dict):
        return {key: json_number(item) for key, item in value.items()}
    if isinstance(value, float):
        return float(f"{value:.6g}") if np.isfinite(value) else None
    return value
