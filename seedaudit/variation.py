"""Radius as a second axis: how much of the variation comes from position, radius and people."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from seedaudit.consensus.radii import crossed, variation_sources
from seedaudit.groupstate import GroupState
from seedaudit.plan import Plan, kept_placements
from seedaudit.results import SeedAudit, frozen_table, read_only
from seedaudit.tabulation import json_number


def with_radii(audit: SeedAudit, plan: Plan, group: GroupState, which: int) -> SeedAudit:
    """The result of one seed with its sources of variation, if placements have several radii.

    Parameters
    ----------
    audit : SeedAudit
    plan : Plan
    group : GroupState
    which : int
        Number of the seed.
    """
    if plan.study.placements.radii is None or plan.regions is None:
        return audit
    rows = kept_placements(plan.seeds[which], audit.tables["placements"])[1:]
    placements = plan.seeds[which].cloud.table.iloc[plan.seeds[which].used[rows]]
    shifts = placements[["dx", "dy", "dz"]].to_numpy(dtype=float).round(6)
    positions = np.unique(shifts, axis=0, return_inverse=True)[1].ravel()
    means = np.array([record.kept[which].target_means[rows] for record in group.used])
    values, places, radii = crossed(
        means[:, :, : plan.n_regions], positions, placements["radius"].to_numpy(dtype=float)
    )
    if len(values) < 2 or len(places) < 2:
        notes = [*audit.summary["notes"], "no sources of variation: they need two participants "
                 "and two positions that have every radius"]  # fmt: skip
        return replace(audit, summary=read_only({**audit.summary, "radii": None, "notes": notes}))
    found = variation_sources(values, plan.regions.index)
    names = dict(zip(plan.regions.index, plan.regions.names, strict=True))
    table = frozen_table(
        "radii",
        {
            "seed": np.full(len(found["index"]), audit.name, object),
            "region": [names[index] for index in found["index"]],
            **found,
        },
    )
    told: dict[str, Any] = {
        "radii_mm": [float(radius) for radius in radii],
        "n_positions": len(places),
        "n_participants": len(values),
        "median_share": {
            str(source): float(rows["share"].median())
            for source, rows in table.groupby("source", sort=False)
        },
    }
    return replace(
        audit,
        summary=read_only({**audit.summary, "radii": json_number(told)}),
        tables=read_only({**audit.tables, "radii": table}),
    )
