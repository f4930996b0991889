"""What the search for a steadier seed found after the pass: table, headline numbers, and map."""

from __future__ import annotations

from dataclasses import replace
from functools import partial
from typing import Any

import nibabel as nib
import numpy as np
from numpy.typing import NDArray
from scipy.spatial import KDTree

from seedaudit.consensus.neighbourhood import (
    FoldSums,
    correlation_scores,
    fold_products,
    merge_folds,
    voxel_sampling_error,
)
from seedaudit.consensus.steadier import SCORED_ON, Search, steadier_seed
from seedaudit.errors import StudyError
from seedaudit.groupstate import GroupState
from seedaudit.plan import Plan, SeedPlan
from seedaudit.report.words import number, point
from seedaudit.results import SeedAudit, frozen_table, map_image, read_only
from seedaudit.searching import PlannedSearch
from seedaudit.space.grid import Grid
from seedaudit.space.lattice import Neighbourhoods
from seedaudit.sweep.schedule import Swept
from seedaudit.tabulation import json_number

_SLACK = 1e-6  # mm
_CUBE = 3  # steps


def with_search(
    audit: SeedAudit, plan: Plan, swept: Swept, group: GroupState, which: int
) -> SeedAudit:
    """The result of one seed with what its search found, if there was one.

    Parameters
    ----------
    audit : SeedAudit
    plan : Plan
    swept : Swept
    group : GroupState
    which : int
        Number of the seed.
    """
    seed = plan.seeds[which]
    if seed.search is None:
        return audit
    assert plan.study.steadier is not None
    usable = _covered(seed.search, group, which, plan.study.placements.min_coverage)
    sums, sizes = _everybodys(swept, group, which)
    try:
        around = seed.search.around(usable)
    except StudyError as error:
        return _without(audit, "; ".join(problem.brief for problem in error.problems))
    if len(sizes) < 2:
        return _without(audit, "participants are left in one fold only, so they cannot be halved")
    if sums.shape[2] < 3:
        return _without(audit, "hardly any voxel that maps are compared on is there in everybody")
    shifts = seed.search.shifts[around.candidates]
    # cubes of candidates, which have most of their neighbours in common
    cubes = np.floor(shifts / (_CUBE * seed.search.step) + 0.5)
    blocks = np.unique(cubes, axis=0, return_inverse=True)[1].ravel()
    found = steadier_seed(
        partial(correlation_scores, fold_products(sums, around, blocks)),
        np.linalg.norm(shifts, axis=1),
        sizes,
        keep_similarity=plan.study.steadier.keep_similarity,
        random_state=plan.study.placements.random_state,
    )
    places = seed.at + shifts
    told = _headline(found, seed, places, around, sums, sizes)
    told |= {
        "keep_similarity": plan.study.steadier.keep_similarity,
        "n_lost_in_data": int((~usable).sum()),
    }
    volume = _score_volume(plan.voxels.grid, places, found, seed.search.step)
    image = map_image("steadier_score", volume, plan.voxels.grid.affine, plan.first_run.space_code)
    return _extended(audit, told, _columns(found, places, around), image)


def _covered(
    search: PlannedSearch, group: GroupState, which: int, least: float
) -> NDArray[np.bool_]:
    """Lattice points (M,) whose sphere has enough signal in everybody; the reported seed has."""
    coverage = np.minimum.reduce([record.search_coverage[which] for record in group.used])
    usable = coverage >= least
    usable[0] = True
    return np.asarray(usable)


def _everybodys(swept: Swept, group: GroupState, which: int) -> tuple[FoldSums, NDArray[np.int_]]:
    """Sums of z of each fold (G, M, B) over the target voxels that every participant has."""
    filled = np.flatnonzero(swept.fold_sizes)
    parts = [swept.searches[fold][which] for fold in filled]
    everyone = np.sum([part.count for part in parts], axis=0) == len(group.used)
    # a sum of z has six digits in float32, and half the memory
    sums = np.stack([part.z[:, everyone].astype(np.float32) for part in parts])
    return merge_folds(sums, np.array(swept.fold_sizes)[filled])


def _columns(
    found: Search, places: NDArray[np.float64], around: Neighbourhoods
) -> dict[str, NDArray[Any]]:
    position = dict(zip("xyz", places.T, strict=True))
    return {**position, "n_neighbours": around.counts, **found.table}


def _headline(
    found: Search,
    seed: SeedPlan,
    places: NDArray[np.float64],
    around: Neighbourhoods,
    sums: FoldSums,
    sizes: NDArray[np.int_],
) -> dict[str, Any]:
    assert seed.search is not None
    moved = found.table["moved_mm"]
    shown = found.recommended or int(found.table["share_chosen"].argmax())
    errors = voxel_sampling_error(sums, around, shown, seed.search.population)
    told: dict[str, Any] = {
        "recommended": "move" if found.recommended else "keep",
        "recommended_mm": [round(float(value), 3) for value in places[found.recommended]],
        "moved_mm": float(moved[found.recommended]),
        "gain": found.gain,
        "gain_low": found.gain_low,
        "gain_high": found.gain_high,
        "gain_in_sample": found.gain_in,
        "shrinkage": found.shrinkage,
        "stability_reported": float(found.table["stability_out"][0]),
        "stability_chosen": found.chosen_out,
        "n_splits": found.n_splits,
        "n_folds": len(sizes),
        "search_mm": seed.search.search,
        "within_mm": seed.search.within,
        "step_mm": seed.search.step,
        "n_candidates": len(places),
        "n_lattice": len(seed.search.shifts),
        "n_targets": int(sums.shape[2]),
        "n_voxels_outside": seed.search.population,
        "target_error_score": errors[0],
        "target_error_gain": errors[1],
        "scored_on": SCORED_ON,
    }
    return {**told, "sentence": _sentence(seed.seed.name, told)}


def _sentence(name: str, told: dict[str, Any]) -> str:
    """The recommendation in words."""
    interval = "no interval with two folds"
    if np.isfinite(told["gain_low"]):
        interval = f"95 % interval {number(told['gain_low'], 3)} to {number(told['gain_high'], 3)}"
    gained = (
        f"the search gains {number(told['gain'], 3)} ({interval}) of the mean spatial r between "
        f"the map and those of its neighbours within {number(told['within_mm'])} mm, in "
        "participants who had no part in the choice"
    )
    advice = f"move {name} by {number(told['moved_mm'])} mm to {point(told['recommended_mm'])} mm"
    if told["recommended"] == "keep":
        advice, gained = f"keep {name} where it is", f"{gained}: nothing beyond noise"
    return f"Steadier seed: {advice}; {gained}. Scored on the {SCORED_ON}."


def _score_volume(
    grid: Grid, places: NDArray[np.float64], found: Search, step: float
) -> NDArray[np.float64]:
    """Held-out score of the nearest candidate, in voxels that hold one or lie beside one."""
    kept = found.table["keeps_identity"]
    places, score = places[kept], found.table["stability_out"][kept]
    holding = grid.voxel_of(places)
    reach = np.ceil(np.linalg.norm(grid.inverse[:3, :3], axis=1) * step).astype(int)
    low = np.maximum(holding.min(axis=0) - reach, 0)
    high = np.minimum(holding.max(axis=0) + reach + 1, grid.shape)
    sides = [np.arange(*ends) for ends in zip(low, high, strict=True)]
    ijk = np.stack(np.meshgrid(*sides, indexing="ij"), axis=-1).reshape(-1, 3)
    centres = grid.to_world(ijk)
    tree = KDTree(places)
    # the largest coordinate of the difference: a cube about each candidate
    beside = tree.query(centres, p=np.inf)[0] <= step / 2 + _SLACK
    volume = np.full(grid.shape, np.nan)
    holds = np.zeros(grid.shape, bool)
    holds[tuple(holding.T)] = True
    shown = beside | holds[tuple(ijk.T)]
    nearest = tree.query(centres[shown])[1]
    volume[tuple(ijk[shown].T)] = score[nearest]
    return volume


def _extended(
    audit: SeedAudit,
    told: dict[str, Any],
    columns: dict[str, NDArray[Any]],
    image: nib.Nifti1Image,
) -> SeedAudit:
    columns = {"seed": np.full(len(columns["x"]), audit.name, object), **columns}
    return replace(
        audit,
        summary=read_only({**audit.summary, "steadier": json_number(told)}),
        tables=read_only({**audit.tables, "steadier": frozen_table("steadier", columns)}),
        maps=read_only({**audit.maps, "steadier_score": image}),
    )


def _without(audit: SeedAudit, reason: str) -> SeedAudit:
    """A search that the data do not allow costs no more than itself."""
    notes = [*audit.summary["notes"], f"no search for a steadier seed: {reason}"]
    return replace(audit, summary=read_only({**audit.summary, "steadier": None, "notes": notes}))
