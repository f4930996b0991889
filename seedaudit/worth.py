"""What one seed's numbers are worth: the rule settled, the claims judged, how far it reaches."""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from seedaudit.consensus.claims import ClaimResult, judge_claim
from seedaudit.consensus.cloud import CloudConsensus, GroupDesign, Table
from seedaudit.consensus.resampling import bootstrap_interval
from seedaudit.consensus.tolerance import (
    TARGETS,
    decay_fits,
    decay_table,
    most_fragile,
    tolerance_table,
)
from seedaudit.errors import DataError, Problem
from seedaudit.inference.glm import estimate_sums, orthonormal_design, solve_model
from seedaudit.inference.group import ThresholdRule, critical_values
from seedaudit.inference.permutation import holm_adjusted, maximum_test
from seedaudit.plan import Plan, SeedPlan
from seedaudit.space.geometry import ball_mean_correlation
from seedaudit.sweep.moments import FoldState, merged, total_sums

GRID_STEP = 0.25
"""Distances at which the fitted lines are given, mm."""


@dataclass(frozen=True)
class Critical:
    """What a claim must reach at each placement: `values` (N,) of |t|, or of the |effect|."""

    values: NDArray[np.float64]
    on_effect: bool


def settled_rule(
    asked: ThresholdRule,
    reported_z: NDArray[np.float32] | None,
    design: NDArray[np.float64],
    contrast: NDArray[np.float64],
    *,
    rearrangements: int,
    random_state: int,
) -> tuple[ThresholdRule, float | None]:
    """A family-wise rule as the p-value of one voxel that it comes down to; others as they are.

    As a p-value, the critical value carries over to parts of the participants, whose degrees of
    freedom differ.

    Parameters
    ----------
    asked : ThresholdRule
    reported_z : (n, A) float32 or None
        The participants' maps of the reported placement on the analysis voxels, for rule fwe.
    design : (n, p)
    contrast : (p,)
    rearrangements, random_state : int

    Returns
    -------
    rule : ThresholdRule
    critical : float or None
        Family-wise critical |t| of the reported placement.

    Raises
    ------
    DataError
        When no value can be significant with so few participants.
    """
    if asked.rule != "fwe":
        return asked, None
    assert reported_z is not None
    test = maximum_test(
        reported_z, design, contrast, count=rearrangements, random_state=random_state
    )
    critical = test.critical_value(asked.level)
    if not np.isfinite(critical):
        raise DataError(
            Problem(
                "threshold.rule fwe",
                f"{len(design)} participants have too few distinct rearrangements for level "
                f"{asked.level:g}",
                "more participants",
                "another rule",
            )
        )
    df = len(design) - design.shape[1]
    return asked.replaced("p", float(2 * stats.t.sf(critical, df))), critical


def judge_claims(
    plan: Plan,
    seed: SeedPlan,
    means: NDArray[np.float64],
    distance: NDArray[np.float64],
    design: GroupDesign,
    found: CloudConsensus,
    folds: Sequence[FoldState],
    rule: ThresholdRule,
    reported_z: NDArray[np.float32] | None,
    workers: int = 1,
) -> Table:
    """The table of claims about a seed.

    Parameters
    ----------
    plan : Plan
    seed : SeedPlan
    means : (n, N, K)
        Mean z of the claims' targets at the used placements, the reported one first.
    distance : (N,)
        Lengths of the shifts, mm.
    design : GroupDesign
    found : CloudConsensus
    folds : sequence of FoldState
        Of the cloud's placements.
    rule : ThresholdRule
        As asked.
    reported_z : (n, A) float32 or None
        As in `settled_rule`.
    workers : int
        Threads; the numbers do not depend on how many.
    """
    single = len(design.matrix) <= design.matrix.shape[1]
    rows: list[dict[str, Any]] = []
    known: dict[tuple[bytes, int], Critical] = {}
    for column, planned in enumerate(seed.claims):
        claim = planned.claim
        contrast = orthonormal_design(plan.design.matrix, claim.contrast)[1]
        row: dict[str, Any] = {
            "claim": claim.name,
            "target": claim.target,
            "direction": claim.direction,
            "n_voxels": len(planned.members),
        }
        own = means[:, :, column]
        if single or np.isnan(own).any():
            reason = "one participant" if single else "a participant lacks the target"
            rows.append({**row, **_untested(own, reason)})
            continue
        key = (contrast.tobytes(), claim.sign)
        if key not in known:
            known[key] = _critical(
                claim.sign, contrast, design, found.voxels, folds, rule, reported_z, plan, workers
            )
        critical = known[key]
        result = judge_claim(
            own, distance, design.matrix, contrast, claim.sign, critical.values,
            on_effect=critical.on_effect,
            smallest_effect=_smallest(plan),
            safe=plan.study.consensus.safe,
            rearrangements=plan.study.threshold.rearrangements,
            random_state=plan.study.placements.random_state,
        )  # fmt: skip
        low, high = bootstrap_interval(
            design.matrix, own[:, :1], contrast, design.strata,
            random_state=plan.study.placements.random_state,
        )  # fmt: skip
        rows.append({**row, "reported_low": low[0], "reported_high": high[0], **_told(result)})
    table = {key: np.array([row[key] for row in rows]) for key in (rows[0] if rows else {})}
    if rows:
        table["difference_p_holm"] = holm_adjusted(table["difference_p"])
    return table


def _smallest(plan: Plan) -> float:
    assert plan.study.claims is not None
    return plan.study.claims.smallest_effect


def _told(result: ClaimResult) -> dict[str, Any]:
    note = "" if result.passes[0] else "does not pass at the reported placement"
    return {
        "reported_effect": result.effect[0],
        "reported_t": result.t[0],
        "passes_reported": bool(result.passes[0]),
        "share_passing": result.share_passing,
        "first_failure_mm": result.first_failure,
        "effect_min": result.effect[1:].min(),
        "effect_max": result.effect[1:].max(),
        "largest_difference": result.largest_difference,
        "difference_p": result.difference_p,
        "equivalent": result.equivalent,
        "verdict": result.verdict,
        "note": note,
    }


def _untested(means: NDArray[np.float64], reason: str) -> dict[str, Any]:
    effect = means[0] if len(means) == 1 else np.full(means.shape[1], np.nan)
    missing = dict.fromkeys(
        ("reported_low", "reported_high", "reported_t", "share_passing", "first_failure_mm",
         "largest_difference", "difference_p"),
        np.nan,
    )  # fmt: skip
    return {
        **missing,
        "reported_effect": effect[0],
        "passes_reported": False,
        "effect_min": effect[1:].min(),
        "effect_max": effect[1:].max(),
        "equivalent": False,
        "verdict": "open",
        "note": f"not tested: {reason}",
    }


def _critical(
    sign: int,
    contrast: NDArray[np.float64],
    design: GroupDesign,
    voxels: NDArray[np.bool_],
    folds: Sequence[FoldState],
    asked: ThresholdRule,
    reported_z: NDArray[np.float32] | None,
    plan: Plan,
    workers: int,
) -> Critical:
    """What the rule asks at each placement, in the maps of a claimed contrast."""
    placements = range(folds[0].n_placements)
    if asked.rule == "effect":
        level = np.arctanh(asked.level) if asked.scale == "r" else asked.level
        return Critical(np.full(len(placements), level), on_effect=True)
    rule, _ = settled_rule(
        asked, reported_z, design.matrix, contrast,
        rearrangements=plan.study.threshold.rearrangements,
        random_state=plan.study.placements.random_state,
    )  # fmt: skip
    rows = np.flatnonzero(voxels)
    model = solve_model(merged(fold.frame(rows) for fold in folds), contrast, design.least_count)

    def one(placement: int) -> float:
        sums = total_sums(fold.sums(placement, rows) for fold in folds)
        statistic = estimate_sums(sums, model).statistic.astype(np.float32)
        return float(critical_values(statistic[None], model.df, rule, sign)[0])

    with ThreadPoolExecutor(workers) as pool:
        return Critical(np.array(list(pool.map(one, placements))), on_effect=False)


@dataclass(frozen=True)
class Reach:
    """How far the seed can be moved: the tables `decay` and `tolerance`, and their headline."""

    decay: Table
    tolerance: Table
    headline: dict[str, Any]


def reach(seed: SeedPlan, found: CloudConsensus, shifts: NDArray[np.float64]) -> Reach:
    """Decay of similarity with distance, and the tolerances that follow.

    Parameters
    ----------
    seed : SeedPlan
    found : CloudConsensus
    shifts : (N, 3)
        Of the used drawn placements, mm.
    """
    similarity = {
        name: np.asarray(found.similarity[name][1:], np.float64)
        for name in ("dice_positive", "dice_negative", "spatial_r")
    }
    for tail in ("positive", "negative"):
        if not found.similarity[f"n_{tail}"][0]:
            # a tail that is empty as reported has nothing that could be lost
            similarity[f"dice_{tail}"][:] = np.nan
    top = found.ceiling
    ceilings = {"ceiling_relative": 1.0}
    floors = {name: _median(found.controls[name]) for name in similarity}
    if top is not None:
        similarity["ceiling_relative"] = top.placement_relative
        ceilings |= {name: float(value[0, 0]) for name, value in top.same.items()}
        floors["ceiling_relative"] = _median(top.control_relative)
    fits = decay_fits(shifts, similarity)
    farthest = float(np.linalg.norm(shifts, axis=1).max())
    distances = np.arange(0.0, farthest + GRID_STEP, GRID_STEP)
    geometry = {"spatial_r": ball_mean_correlation(distances, seed.seed.radius, found.fwhm)}
    tolerance = tolerance_table(fits)
    return Reach(
        decay_table(fits, distances, ceilings, floors, geometry), tolerance, _headline(tolerance)
    )


def _headline(tolerance: Table) -> dict[str, Any]:
    """The overall tolerance of the first measure that has one, and all of them by measure."""
    told: dict[str, dict[str, Any]] = {}
    for measure in TARGETS:
        row = np.flatnonzero((tolerance["measure"] == measure) & (tolerance["direction"] == "all"))
        if len(row) and np.isfinite(tolerance["tolerance"][row[0]]):
            told[measure] = {
                "target": float(tolerance["target"][row[0]]),
                "mm": float(tolerance["tolerance"][row[0]]),
                "censored": bool(tolerance["censored"][row[0]]),
                "most_fragile_direction": most_fragile(tolerance, measure),
            }
    first = next(iter(told.values()), {})
    # directions are compared by what is least noisy, and no threshold has a say in
    compared = "ceiling_relative" if "ceiling_relative" in told else next(iter(told), None)
    return {
        "tolerance_measure": next(iter(told), None),
        "tolerance_target": first.get("target"),
        "tolerance_mm": first.get("mm"),
        "tolerance_censored": first.get("censored"),
        "most_fragile_direction": told.get(compared or "", {}).get("most_fragile_direction"),
        "most_fragile_measure": compared,
        "tolerances": told,
    }


def _median(values: NDArray[np.float64]) -> float:
    known = values[~np.isnan(values)]
    return float(np.median(known)) if len(known) else float("nan")
