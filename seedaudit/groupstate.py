"""Who takes part after the pass, and whether the group model still stands."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from seedaudit.consensus.cloud import GroupDesign
from seedaudit.errors import DataError, Problem
from seedaudit.inputs.nuisance import column_mean
from seedaudit.plan import Plan
from seedaudit.sweep.schedule import ParticipantRecord, Swept

MOTION = "framewise_displacement"
"""Column of the confounds that tells of motion; else the column that censors volumes."""


@dataclass(frozen=True)
class GroupState:
    """What all seeds share after the pass: who is used, the working design, and mean motion of
    those used, in the column's unit; NaN where no table tells it.
    """

    used: tuple[ParticipantRecord, ...]
    set_aside: tuple[ParticipantRecord, ...]
    design: GroupDesign
    motion: NDArray[np.float64]


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
    motion = np.array([_mean_motion(plan, record) for record in used])
    return GroupState(used, set_aside, GroupDesign(rows, contrast, strata, least), motion)


def _mean_motion(plan: Plan, record: ParticipantRecord) -> float:
    """Mean motion over a participant's runs, each weighted by its volumes."""
    censor = None if plan.study.cleaning is None else plan.study.cleaning.censor
    runs = plan.participants[record.row].runs
    for column in (MOTION, *(() if censor is None else (censor.column,))):
        means = [
            np.nan
            if run.confounds is None
            else column_mean(run.confounds, column, run.header.n_volumes)
            for run in runs
        ]
        if np.isfinite(means).all():
            return float(np.average(means, weights=[run.header.n_volumes for run in runs]))
    return float("nan")
