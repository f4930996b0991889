"""Which worker does what: folds of participants, each swept by one thread.

A fold is the unit of work. What is added up over participants is exact, so that the digits depend
neither on the number of workers nor on where they are, nor on how the pass keeps to its memory.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Sequence
from concurrent.futures import FIRST_EXCEPTION, ThreadPoolExecutor, wait
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from seedaudit._version import __version__
from seedaudit.sweep.checkpoint import Checkpoint
from seedaudit.sweep.cluster import folds_on_cluster
from seedaudit.sweep.digests import digest
from seedaudit.sweep.fold import FoldProgress, run_fold
from seedaudit.sweep.keeper import Keeper, joined_records
from seedaudit.sweep.moments import FoldState
from seedaudit.sweep.task import (
    LEAST_RESIDUAL_DF,
    CleaningRecipe,
    ParticipantRecord,
    ParticipantTask,
    RunTask,
    SearchSums,
    SweepTask,
)
from seedaudit.sweep.tiles import IN_MEMORY, Layout, tile_slices, tile_task
from seedaudit.sweep.work import Buffers, load_run, run_basis

__all__ = [
    "IN_MEMORY", "LEAST_RESIDUAL_DF", "CleaningRecipe", "Layout", "ParticipantRecord",
    "ParticipantTask", "RunTask", "SweepTask", "Swept", "assign_folds", "load_run", "run_basis",
    "run_fold", "sweep", "sweep_key",
]  # fmt: skip


@dataclass(frozen=True)
class Swept:
    """The result of the pass: states and searches of each fold, and the participants in order;
    `scratch` is the folder that finished folds are in, if they left the memory.
    """

    folds: tuple[FoldState, ...]
    fold_sizes: tuple[int, ...]
    records: tuple[ParticipantRecord, ...]
    searches: tuple[tuple[SearchSums, ...], ...] = ()
    scratch: Path | None = None


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


def sweep_key(
    task: SweepTask, folds: Sequence[Sequence[ParticipantTask]], layout: Layout = IN_MEMORY
) -> dict[str, str]:
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
            task.min_coverage, task.set_aside, task.single, task.keep_reported, task.steps
        ),
        # no number depends on it, but what is on disk is laid out by it
        "tiles of the voxels": digest(layout.tiles),
    }  # fmt: skip


def sweep(
    task: SweepTask,
    folds: Sequence[Sequence[ParticipantTask]],
    *,
    layout: Layout = IN_MEMORY,
    scratch: Path | None = None,
    workers: int = 2,
    cluster: str | None = None,
    checkpoint: Checkpoint | None = None,
    on_participant: Callable[[ParticipantRecord], None] = lambda record: None,
) -> Swept:
    """The pass over the data, or one for each tile of the voxels.

    Parameters
    ----------
    task : SweepTask
    folds : sequence of sequences of ParticipantTask
    layout : Layout
        How it keeps to its memory.
    scratch : Path, optional
        An existing folder for the states of finished folds, which then leave the memory; needed
        for several tiles. The result reads from it.
    workers : int
        Threads, each with one fold at a time; reading, decompression and products run outside
        the interpreter lock.
    cluster : str, optional
        Address of a Dask scheduler whose workers do the folds instead.
    checkpoint : Checkpoint, optional
        Where progress is kept; earlier progress is gone on from.
    on_participant : callable
        Told of every finished participant of every tile, from the worker's thread.

    Returns
    -------
    Swept

    Raises
    ------
    DataError
        The first bad participant, unless the task sets them aside.
    """
    if layout.tiles > 1 and scratch is None:
        raise ValueError("several tiles need a folder for the states of finished folds")
    keeper = Keeper(task, len(folds), scratch, checkpoint)
    tiles: list[list[FoldProgress]] = []
    for number, tile in enumerate(tile_slices(len(task.voxels), layout.tiles)):
        # whoever was set aside in the first tile would be again
        out = {r.participant for part in tiles[:1] for f in part for r in f.records if not r.used}
        left = [[p for p in fold if p.participant not in out] for fold in folds]
        earlier = keeper.begin(number, tile, left)
        for record in (r for progress in earlier if progress for r in progress.records):
            on_participant(record)
        own = tile_task(task, tile)
        if cluster is None:
            tiles.append(_on_threads(own, left, earlier, workers, keeper, on_participant))
        else:
            tiles.append(folds_on_cluster(cluster, own, left, earlier, keeper, on_participant))
    records = joined_records([[r for part in parts for r in part.records] for parts in tiles])
    sizes = tuple(sum(r.used for r in part.records) for part in tiles[-1])
    searches = tuple(tuple(part.searches) for part in tiles[0])
    return Swept(keeper.states(tiles), sizes, records, searches, scratch)


def _on_threads(
    task: SweepTask,
    folds: Sequence[Sequence[ParticipantTask]],
    earlier: list[FoldProgress | None],
    workers: int,
    keeper: Keeper,
    on_participant: Callable[[ParticipantRecord], None],
) -> list[FoldProgress]:
    stop, memory = threading.Event(), threading.local()

    def work(number: int) -> FoldProgress:
        if not hasattr(memory, "buffers"):
            memory.buffers = Buffers()
        # let go as soon as it has been gone on from
        before, earlier[number] = earlier[number], None
        if before is not None and keeper.is_done(before):
            return before

        def after(progress: FoldProgress, last: bool) -> bool:
            on_participant(progress.records[-1])
            keeper.note(number, progress, finished=last, now=stop.is_set())
            return not stop.is_set()

        progress = run_fold(
            task, folds[number], before, buffers=memory.buffers, reuse_state=keeper.on_disk,
            after=after,
        )  # fmt: skip
        return progress if stop.is_set() else keeper.finished(number, progress)

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
