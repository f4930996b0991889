"""What a worker does with one participant: read, clean, correlate, add up."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from seedaudit.errors import DataError, Problem
from seedaudit.inputs.nuisance import censored_volumes, nuisance_basis, read_confounds
from seedaudit.inputs.volumes import read_mask, read_run
from seedaudit.space.grid import VoxelSet
from seedaudit.sweep.correlate import CleanRun
from seedaudit.sweep.digests import file_digest
from seedaudit.sweep.moments import Moments
from seedaudit.sweep.participant import Kept, participant_blocks
from seedaudit.sweep.prepared import PreparedRuns
from seedaudit.sweep.task import (
    CleaningRecipe,
    ParticipantRecord,
    ParticipantTask,
    RunTask,
    SearchSums,
    SearchTask,
    SweepTask,
)

_FINEST = np.float32(2.0**40)
"""z of a search is added up in multiples of 1 / this, exactly: the order cannot matter."""


class Buffers:
    """Memory of a worker, used again for every participant and, if finished folds leave it, fold.

    Fresh pages of memory cost about as much time as decompressing what goes into them.
    """

    def __init__(self) -> None:
        self._arrays: list[NDArray[np.float32]] = []
        self._state: Moments | None = None

    def state(self, task: SweepTask) -> Moments:
        """An empty state in the memory of the last one."""
        if self._state is None or self._state.count.shape != (task.n_voxels,):
            self._state = None  # let go before the next is made
            self._state = task.empty_moments()
        else:
            self._state.clear()
        return self._state

    def series(self, number: int, n_volumes: int, n_voxels: int) -> NDArray[np.float32]:
        """The buffer for the run of that number, of at least (n_volumes, n_voxels)."""
        while len(self._arrays) <= number:
            self._arrays.append(np.empty((0, n_voxels), np.float32))
        held = self._arrays[number]
        if len(held) < n_volumes or held.shape[1] != n_voxels:
            self._arrays[number] = np.empty((0, n_voxels), np.float32)
            self._arrays[number] = np.empty((n_volumes, n_voxels), np.float32)
        return self._arrays[number]


def load_run(
    task: RunTask,
    recipe: CleaningRecipe,
    voxels: VoxelSet,
    *,
    out: NDArray[np.float32] | None = None,
    prepared: PreparedRuns | None = None,
    columns: NDArray[np.int_] | None = None,
) -> tuple[CleanRun, int, str]:
    """Read one run, into `out` or from where it was prepared, and build its nuisance basis.

    `columns` are the positions of `voxels` among those of the prepared runs, if not the same.

    Returns
    -------
    run : CleanRun
    n_censored : int
    digest : str
        SHA-256 of the stored file.

    Raises
    ------
    DataError
        For unreadable images or tables.
    """
    basis, n_censored = run_basis(task, recipe)
    if prepared is not None and columns is None:
        data = prepared.run(task.header, out)
    elif prepared is not None and columns is not None:
        data = prepared.some(task.header, columns, out)
    else:
        data = read_run(task.header, voxels, recipe.smooth, out=out)
    finite = data.finite
    if task.mask is not None:
        inside, _ = read_mask(task.mask, voxels.grid)
        finite = finite & inside[tuple(voxels.ijk.T)]
    return CleanRun(data.series, basis, finite), n_censored, data.digest


def run_basis(task: RunTask, recipe: CleaningRecipe) -> tuple[NDArray[np.float64], int]:
    """Orthonormal nuisance basis (T, q) of a run, and its number of censored volumes."""
    n_volumes = task.header.n_volumes
    values, censored = None, None
    if task.confounds is not None:
        if recipe.confounds:
            values, _ = read_confounds(task.confounds, recipe.confounds, n_volumes)
        if recipe.censor is not None:
            column, above, before, after = recipe.censor
            censored = censored_volumes(task.confounds, column, above, before, after, n_volumes)
    elif recipe.confounds or recipe.censor is not None:
        raise DataError(
            Problem(
                task.header.path.name,
                "has no confounds table, but [cleaning] names confounds or censoring",
                "a table of confounds beside every run",
                "add a `confounds` column to the runs table, or leave them out of [cleaning]",
            )
        )
    basis = nuisance_basis(
        n_volumes,
        drift=recipe.drift,
        band=recipe.band,
        repetition_time=recipe.repetition_time or task.header.repetition_time,
        confounds=values,
        censored=censored,
    )
    return basis, 0 if censored is None else int(censored.sum())


def sweep_participant(
    task: SweepTask,
    participant: ParticipantTask,
    moments: Moments,
    searches: Sequence[SearchSums] = (),
    buffers: Buffers | None = None,
) -> ParticipantRecord:
    """Read one participant's runs and add them to the moments and searches of the fold.

    Nothing is added when the data are bad.

    Raises
    ------
    DataError
        Unless the task sets bad participants aside; the record then says why.
    """
    buffers, prepared = buffers or Buffers(), None
    if task.prepared is not None:
        own = task.prepared_voxels or task.voxels
        prepared = PreparedRuns(task.prepared, own, task.cleaning.smooth)
    try:
        loaded = [
            load_run(
                run,
                task.cleaning,
                task.voxels,
                out=buffers.series(number, run.header.n_volumes, len(task.voxels)),
                prepared=prepared,
                columns=task.columns,
            )
            for number, run in enumerate(participant.runs)
        ]
        runs = [run for run, _, _ in loaded]
        blocks, coverage = participant_blocks(
            runs,
            task.weights,
            known_variance=task.single,
            targets=slice(task.ahead, None) if task.ahead else None,
        )
        _check_reported(task, participant, coverage)
    except DataError as error:
        named = [
            replace(problem, where=f"participant {participant.participant}, {problem.where}")
            for problem in error.problems
        ]
        if not task.set_aside:
            raise DataError(*named) from error
        reason = "; ".join(problem.brief for problem in error.problems)
        return ParticipantRecord(
            participant.participant, participant.row, len(participant.runs), used=False,
            reason=reason, digests=tuple(_digest(run.header.path) for run in participant.runs),
        )  # fmt: skip
    kept = tuple(Kept.empty(cloud) for cloud in task.clouds)
    reported = [cloud.rows.start for cloud in task.clouds]
    maps = None
    if task.keep_reported:
        maps = np.full((len(reported), task.n_voxels), np.nan, np.float32)
    n_missing = 0
    for block in blocks:
        moments.add(task.design[participant.row], block)
        n_missing += int((~block.valid).sum())
        for part, cloud in zip(kept, task.clouds, strict=True):
            part.add(cloud, block)
        if maps is not None:
            maps[:, block.where] = np.where(block.valid, block.z[reported], np.nan)
    searched = [
        _search(runs, search, sums) for search, sums in zip(task.searches, searches, strict=True)
    ]
    return ParticipantRecord(
        participant.participant,
        participant.row,
        n_runs=len(runs),
        n_volumes=sum(run.basis.shape[0] for run in runs),
        n_censored=sum(censored for _, censored, _ in loaded),
        residual_df=sum(run.residual_df for run in runs),
        n_missing_voxels=n_missing,
        digests=tuple(digest for _, _, digest in loaded),
        coverage=coverage,
        kept=kept,
        reported_z=maps,
        search_coverage=tuple(searched),
    )


def _digest(path: Path) -> str:
    """Of the file of a participant set aside, to see when it is mended; empty without one."""
    try:
        return file_digest(path)
    except OSError:
        return ""


def _search(runs: Sequence[CleanRun], search: SearchTask, sums: SearchSums) -> NDArray[np.float64]:
    """Add one participant's maps of a lattice; give the coverage of its spheres."""
    blocks, coverage = participant_blocks(runs, search.weights, targets=search.targets)
    for block in blocks:
        block.z[:] = np.rint(block.z * _FINEST) / _FINEST
        sums.z[:, block.where] += block.z
        sums.count[block.where] += block.valid
    return coverage


def _check_reported(
    task: SweepTask, participant: ParticipantTask, coverage: NDArray[np.float64]
) -> None:
    reported = coverage[[cloud.rows.start for cloud in task.clouds]]
    if reported.min() < task.min_coverage:
        names = ", ".join(run.header.path.name for run in participant.runs)
        raise DataError(
            Problem(
                names,
                f"only {reported.min():.0%} of a reported seed sphere holds finite values that "
                "vary",
                f"at least {task.min_coverage:.0%} (min_coverage)",
                "look at the run's coverage, correct the mask or the seed, or set "
                'on_bad_run = "set-aside"',
            )
        )
