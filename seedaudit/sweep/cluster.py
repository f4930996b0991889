"""Folds on the workers of an existing Dask scheduler; the task function is the local one."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from threadpoolctl import threadpool_limits

from seedaudit.errors import Problem, StudyError
from seedaudit.sweep.checkpoint import Checkpoint
from seedaudit.sweep.fold import FoldProgress, run_fold
from seedaudit.sweep.task import ParticipantRecord, ParticipantTask, SweepTask
from seedaudit.workers import reuse_freed_memory

CONNECT = 30
"""Seconds to wait for the scheduler."""

RETRIES = 3
"""Times that a fold is given to another worker when one dies."""


def folds_on_cluster(
    address: str,
    task: SweepTask,
    folds: Sequence[Sequence[ParticipantTask]],
    earlier: Sequence[FoldProgress | None],
    checkpoint: Checkpoint | None,
    on_participant: Callable[[ParticipantRecord], None],
) -> list[FoldProgress]:
    """Sweep every fold on a cluster; a fold whose worker dies is given to another.

    Workers must see the images under the same paths. Progress is kept fold by fold.

    Parameters
    ----------
    address : str
        Of the scheduler, such as tcp://192.0.2.1:8786.
    task, folds, checkpoint, on_participant
        As in `sweep`.
    earlier : sequence of FoldProgress or None
        Progress to go on from.

    Raises
    ------
    StudyError
        Without the package `distributed`, or without a scheduler at the address.
    DataError
        As in `sweep`.
    """
    try:
        from distributed import Client, as_completed
    except ImportError:
        raise StudyError(
            Problem(
                "--cluster",
                "the package `distributed` is not installed",
                "an installed extra",
                "pip install 'seedaudit[cluster]'",
            )
        ) from None
    try:
        client = Client(address, timeout=CONNECT, set_as_default=False)
    except (OSError, ValueError) as error:
        raise StudyError(
            Problem(
                f"--cluster {address}",
                f"no scheduler answers there ({type(error).__name__})",
                "the address of a running Dask scheduler",
                "start one, or leave the option out",
            )
        ) from error
    with client:
        # a task and not scattered data: what dies with a worker can be made again
        shared = client.submit(unchanged, task, retries=RETRIES, pure=False)
        numbers = {
            client.submit(
                fold_on_worker, shared, list(fold), before, retries=RETRIES, pure=False
            ): number
            for number, (fold, before) in enumerate(zip(folds, earlier, strict=True))
        }
        parts: dict[int, FoldProgress] = {}
        for future in as_completed(list(numbers), loop=client.loop):
            number, progress = numbers[future], future.result()
            before = earlier[number]
            for record in progress.records[len(before.records) if before else 0 :]:
                on_participant(record)
            if checkpoint:
                checkpoint.note(number, progress, finished=True, now=False)
            parts[number] = progress
            future.release()
    return [parts[number] for number in range(len(folds))]


def unchanged(task: SweepTask) -> SweepTask:
    """The description of the work, once for each worker."""
    return task


def fold_on_worker(
    task: SweepTask, fold: Sequence[ParticipantTask], before: FoldProgress | None
) -> FoldProgress:
    """One fold with single-threaded products, as on one machine: the same digits."""
    reuse_freed_memory()
    with threadpool_limits(limits=1):
        return run_fold(task, fold, before)
