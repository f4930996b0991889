"""One participant alone: halves of the time series, where there are no halves of participants."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from seedaudit.plan import Plan
from seedaudit.sweep.correlate import BLOCK, CleanRun, residuals
from seedaudit.sweep.moments import Moments
from seedaudit.sweep.participant import participant_blocks
from seedaudit.sweep.task import load_run


def time_halves(plan: Plan, weights: sparse.csr_array) -> tuple[Moments, Moments]:
    """Maps of the first and of the second halves of the runs of a plan's one participant.

    The runs are read once more. Each is cleaned as a whole, because half a run may have no more
    volumes than there are nuisance columns, and its residuals are cut in two.

    Parameters
    ----------
    plan : Plan
    weights : (N, V) sparse
        Spheres of the placements.
    """
    first, second = [], []
    for task in plan.participants[0].runs:
        run, _, _ = load_run(task, plan.cleaning, plan.voxels)
        middle = len(run.series) // 2
        cleaned = _cleaned(run)
        first.append(_part(cleaned[:middle], run.finite))
        second.append(_part(cleaned[middle:], run.finite))
    return _moments(first, weights), _moments(second, weights)


def _cleaned(run: CleanRun) -> NDArray[np.float32]:
    result = np.empty_like(run.series)
    for start in range(0, result.shape[1], BLOCK):
        where = slice(start, start + BLOCK)
        result[:, where] = residuals(run.series[:, where].astype(np.float64), run.basis)
    return result


def _part(series: NDArray[np.float32], finite: NDArray[np.bool_]) -> CleanRun:
    return CleanRun(series, np.full((len(series), 1), 1 / np.sqrt(len(series))), finite)


def _moments(runs: list[CleanRun], weights: sparse.csr_array) -> Moments:
    moments = Moments.empty(1, weights.shape[0], weights.shape[1])
    for block in participant_blocks(runs, weights)[0]:
        moments.add(np.ones(1), block)
    return moments
