"""Which worker does what: folds of participants, each swept by one thread.

A fold is the unit of work. Its participants are added one after the other in a fixed order, so
that the digits do not depend on the number of workers.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Sequence
from concurrent.futures import FIRST_EXCEPTION, ThreadPoolExecutor, wait
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from seedaudit._version import __version__
from seedaudit.sweep.checkpoint import Checkpoint
from seedaudit.sweep.cluster import folds_on_cluster
from seedaudit.sweep.digests import digest
from seedaudit.sweep.fold import FoldProgress, run_fold
from seedaudit.sweep.moments import Moments
from seedaudit.sweep.task import (
    LEAST_RESIDUAL_DF,
    Buffers,
    CleaningRecipe,
    ParticipantRecord,
    ParticipantTask,
    RunTask,
    SearchSums,
    SweepTask,
    load_run,
    run_basis,
)

__all__ = [
    "LEAST_RESIDUAL_DF", "CleaningRecipe", "ParticipantRecord", "ParticipantTask", "RunTask",
    "SweepTask", "Swept", "assign_folds", "load_run", "run_basis", "run_fold", "sweep",
    "sweep_key",
]  # fmt: skip


@dataclass(frozen=True)
class Swept:
    """The result of the pass: moments and searches of each fold, and the participants in order."""

    folds: tuple[Moments, ...]
    fold_sizes: tuple[int, ...]
    records: tuple[ParticipantRecord, ...]
    searches: tuple[tuple[SearchSums, ...], ...] = ()


def assign_folds(strata: NDArray[np.int_], folds: int) -> list[NDArray[np.int_]]:
    """Deal participants into folds, stratum after stratum, in table order.

    Parameters
    ----------
    strata : (n,) int
        Group of each participant.
    folds : int
        Wished number of folds; at most n are made.

    Returns
    -------
    list of (n_g,) int
        Rows of each fold, ascending.
    """
    n_folds = min(folds, len(strata))
    dealt = np.argsort(strata, kind="stable")
    return [np.sort(dealt[start::n_folds]) for start in range(n_folds)]


def sweep_key(task: SweepTask, folds: Sequence[Sequence[ParticipantTask]]) -> dict[str, str]:
    """Digests of exactly the settings that change the numbers of the pass, by name."""
    weights, recipe = task.weights, task.cleaning
    runs = [run for fold in folds for participant in fold for run in participant.runs]
    return {
        "program": __version__,
        "mask": digest(task.voxels.ijk, task.voxels.grid.affine, task.voxels.grid.shape),
        "placements": digest(weights.indptr, weights.indices, weights.data),
        "analysis voxels and regions": digest(
            *(part for cloud in task.clouds for part in (
                str(cloud.rows), cloud.analysis, cloud.targets.indptr, cloud.targets.indices,
                cloud.targets.data,
            ))
        ),
        "search for a steadier seed": digest(
            *(part for search in task.searches for part in (
                search.weights.indptr, search.weights.indices, search.weights.data,
                search.targets,
            ))
        ),
        "group design": digest(task.design),
        "participants and folds": digest(
            [[(p.participant, p.row, [r.header.path.name for r in p.runs]) for p in fold]
             for fold in folds]
        ),
        "cleaning": digest(recipe, *(run_basis(run, recipe)[0] for run in runs)),
        "options": digest(
            task.min_coverage, task.set_aside, task.single, task.keep_reported, task.precision
        ),
    }  # fmt: skip


def sweep(
    task: SweepTask,
    folds: Sequence[Sequence[ParticipantTask]],
    *,
    workers: int = 2,
    cluster: str | None = None,
    checkpoint: Checkpoint | None = None,
    on_participant: Callable[[ParticipantRecord], None] = lambda record: None,
) -> Swept:
    """The pass over the data.

    Parameters
    ----------
    task : SweepTask
    folds : sequence of sequences of ParticipantTask
    workers : int
        Threads, each with one fold at a time; reading, decompression and products run outside
        the interpreter lock.
    cluster : str, optional
        Address of a Dask scheduler whose workers do the folds instead.
    checkpoint : Checkpoint, optional
        Where progress is kept; earlier progress is gone on from.
    on_participant : callable
        Told of every finished participant, from the worker's thread.

    Returns
    -------
    Swept

    Raises
    ------
    DataError
        The first bad participant, unless the task sets them aside.
    """
    earlier = [checkpoint.load(n, fold) if checkpoint else None for n, fold in enumerate(folds)]
    for record in (r for progress in earlier if progress for r in progress.records):
        on_participant(record)
    if cluster is None:
        parts = _on_threads(task, folds, earlier, workers, checkpoint, on_participant)
    else:
        parts = folds_on_cluster(cluster, task, folds, earlier, checkpoint, on_participant)
    return Swept(
        tuple(part.moments for part in parts),
        tuple(sum(record.used for record in part.records) for part in parts),
        tuple(sorted((r for part in parts for r in part.records), key=lambda r: r.row)),
        tuple(tuple(part.searches) for part in parts),
    )


def _on_threads(
    task: SweepTask,
    folds: Sequence[Sequence[ParticipantTask]],
    earlier: Sequence[FoldProgress | None],
    workers: int,
    checkpoint: Checkpoint | None,
    on_participant: Callable[[ParticipantRecord], None],
) -> list[FoldProgress]:
    stop, memory = threading.Event(), threading.local()

    def work(number: int) -> FoldProgress:
        if not hasattr(memory, "buffers"):
            memory.buffers = Buffers()

        def after(progress: FoldProgress, last: bool) -> bool:
            on_participant(progress.records[-1])
            if checkpoint:
                checkpoint.note(number, progress, finished=last, now=stop.is_set())
            return not stop.is_set()

        return run_fold(task, folds[number], earlier[number], buffers=memory.buffers, after=after)

    with ThreadPoolExecutor(max_workers=workers) as pool:
        futures = [pool.submit(work, number) for number in range(len(folds))]
        try:
            wait(futures, return_when=FIRST_EXCEPTION)
            failed = [f for f in futures if f.done() and f.exception() is not None]
            if failed:
                failed[0].result()
            return [future.result() for future in futures]
        finally:
            # also on Ctrl-C: every worker ends its participant and keeps its progress
            stop.set()
            pool.shutdown(wait=True, cancel_futures=True)
