"""Folds on the workers of an existing Dask scheduler; the task function is the local one."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Any

from threadpoolctl import threadpool_limits

from seedaudit.errors import Problem, StudyError
from seedaudit.sweep.fold import FoldProgress, run_fold
from seedaudit.sweep.keeper import Keeper
from seedaudit.sweep.task import ParticipantRecord, ParticipantTask, SweepTask
from seedaudit.workers import reuse_freed_memory

CONNECT = 30
"""Seconds to wait for the scheduler."""

RETRIES = 3
"""Times that a fold is given to another worker when one dies."""


PART = 16
"""Participants of a fold that one task does at the most; the parts are merged on the workers."""


def folds_on_cluster(
    address: str,
    task: SweepTask,
    folds: Sequence[Sequence[ParticipantTask]],
    earlier: Sequence[FoldProgress | None],
    keeper: Keeper,
    on_participant: Callable[[ParticipantRecord], None],
) -> list[FoldProgress]:
    """Sweep every fold on a cluster; a part of a fold whose worker dies is given to another.

    Workers must see the images under the same paths. The parts of a fold are merged in pairs, on
    the workers; the client takes one fold at a time, and a finished fold goes where the keeper
    puts it. Progress is kept fold by fold.

    Parameters
    ----------
    address : str
        Of the scheduler, such as tcp://192.0.2.1:8786.
    task, folds, keeper, on_participant
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
        parts: dict[int, FoldProgress] = {}
        numbers: dict[Any, int] = {}
        for number, (fold, before) in enumerate(zip(folds, earlier, strict=True)):
            if before is not None and keeper.is_done(before):
                parts[number] = before
            else:
                numbers[_fold_as_a_tree(client, shared, fold, before)] = number
        for future in as_completed(list(numbers), loop=client.loop):
            number = numbers.pop(future)
            before = earlier[number]
            progress = future.result()
            future.release()
            for record in progress.records[len(before.records) if before else 0 :]:
                on_participant(record)
            if not keeper.on_disk:
                keeper.note(number, progress, finished=True, now=False)
            parts[number] = keeper.finished(number, progress)
            del progress
    return [parts[number] for number in range(len(folds))]


def _fold_as_a_tree(
    client: Any, shared: Any, fold: Sequence[ParticipantTask], before: FoldProgress | None
) -> Any:
    """The future of a whole fold: its parts, merged in pairs, and the pairs again."""
    done = {record.participant for record in before.records} if before else set()
    left = [participant for participant in fold if participant.participant not in done]
    groups = [left[start : start + PART] for start in range(0, len(left), PART)] or [[]]
    level = [
        client.submit(
            fold_on_worker, shared, group, None if number else before, retries=RETRIES, pure=False
        )
        for number, group in enumerate(groups)
    ]
    while len(level) > 1:
        pairs = [level[start : start + 2] for start in range(0, len(level), 2)]
        level = [
            client.submit(merged_parts, *pair, retries=RETRIES, pure=False)
            if len(pair) == 2
            else pair[0]
            for pair in pairs
        ]
    return level[0]


def unchanged(task: SweepTask) -> SweepTask:
    """The description of the work, once for each worker."""
    return task


def fold_on_worker(
    task: SweepTask, fold: Sequence[ParticipantTask], before: FoldProgress | None
) -> FoldProgress:
    """Part of a fold with single-threaded products, as on one machine: the same digits."""
    reuse_freed_memory()
    with threadpool_limits(limits=1):
        return run_fold(task, fold, before)


def merged_parts(first: FoldProgress, second: FoldProgress) -> FoldProgress:
    """Two parts of a fold as one; both stay as they are, for a lost result to be made again."""
    total = FoldProgress(
        first.moments.copy(),
        [replace(sums, z=sums.z.copy(), count=sums.count.copy()) for sums in first.searches],
        list(first.records),
    )
    total += second
    return total
