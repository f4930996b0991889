"""One participant alone: halves of the time series, where there are no halves of participants."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from seedaudit.plan import Plan
from seedaudit.sweep.correlate import BLOCK, CleanRun, residuals
from seedaudit.sweep.fold import FoldProgress
from seedaudit.sweep.keeper import Keeper
from seedaudit.sweep.moments import FoldState, Moments, Steps
from seedaudit.sweep.participant import participant_blocks
from seedaudit.sweep.task import SweepTask
from seedaudit.sweep.tiles import tile_slices, tile_task
from seedaudit.sweep.work import load_run

ONE = np.ones((1, 1))


def time_halves(
    plan: Plan, weights: sparse.csr_array, scratch: Path | None
) -> tuple[FoldState, FoldState]:
    """Maps of the first and of the second halves of the runs of a plan's one participant.

    The runs are read once more. Each is cleaned as a whole, because half a run may have no more
    volumes than there are nuisance columns, and its residuals are cut in two.

    Parameters
    ----------
    plan : Plan
    weights : (N, V) sparse
        Spheres of the placements.
    scratch : Path or None
        An existing folder for the states, if they are to leave the memory.
    """
    task = replace(
        plan.sweep_task(ONE), weights=weights, clouds=(), searches=(), single=False,
        steps=Steps.of(ONE, [np.arange(1)]),
    )  # fmt: skip
    keeper = Keeper(task, 2, scratch, None)
    tiles = []
    for number, tile in enumerate(tile_slices(len(task.voxels), plan.layout.tiles)):
        keeper.begin(number, tile, [[], []])
        states = _of_tile(plan, tile_task(task, tile))
        tiles.append([keeper.finished(n, FoldProgress(state)) for n, state in enumerate(states)])
    first, second = keeper.states(tiles)
    return first, second


def _of_tile(plan: Plan, task: SweepTask) -> tuple[Moments, Moments]:
    first, second = [], []
    for run_task in plan.participants[0].runs:
        run, _, _ = load_run(run_task, plan.cleaning, task.voxels)
        middle = len(run.series) // 2
        cleaned = _cleaned(run)
        first.append(_part(cleaned[:middle], run.finite))
        second.append(_part(cleaned[middle:], run.finite))
    return _moments(first, task), _moments(second, task)


def _cleaned(run: CleanRun) -> NDArray[np.float32]:
    result = np.empty_like(run.series)
    for start in range(0, result.shape[1], BLOCK):
        where = slice(start, start + BLOCK)
        result[:, where] = residuals(run.series[:, where].astype(np.float64), run.basis)
    return result


def _part(series: NDArray[np.float32], finite: NDArray[np.bool_]) -> CleanRun:
    return CleanRun(series, np.full((len(series), 1), 1 / np.sqrt(len(series))), finite)


def _moments(runs: list[CleanRun], task: SweepTask) -> Moments:
    moments = task.empty_moments()
    for block in participant_blocks(runs, task.weights, targets=slice(task.ahead, None))[0]:
        moments.add(ONE[0], block)
    return moments
