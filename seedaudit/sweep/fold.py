"""The unit of work: a fold's participants, added one after the other."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

from seedaudit.sweep.moments import Moments
from seedaudit.sweep.task import (
    Buffers,
    ParticipantRecord,
    ParticipantTask,
    SearchSums,
    SweepTask,
    sweep_participant,
)


@dataclass
class FoldProgress:
    """State of a fold after the participants recorded so far."""

    moments: Moments
    searches: list[SearchSums] = field(default_factory=list)
    records: list[ParticipantRecord] = field(default_factory=list)


def run_fold(
    task: SweepTask,
    participants: Sequence[ParticipantTask],
    progress: FoldProgress | None = None,
    *,
    buffers: Buffers | None = None,
    after: Callable[[FoldProgress, bool], bool] = lambda progress, last: True,
) -> FoldProgress:
    """The one task of every kind of worker: sweep a fold, from earlier progress if there is any.

    Parameters
    ----------
    task : SweepTask
    participants : sequence of ParticipantTask
        Of the fold, in the order in which they are added.
    progress : FoldProgress, optional
    buffers : Buffers, optional
        The worker's memory.
    after : callable
        Called with the progress after each participant, and whether it was the last; False ends
        the fold early.
    """
    progress = progress or FoldProgress(task.empty_moments(), task.empty_searches())
    buffers = buffers or Buffers()
    done = {record.participant for record in progress.records}
    left = [participant for participant in participants if participant.participant not in done]
    for participant in left:
        record = sweep_participant(task, participant, progress.moments, progress.searches, buffers)
        progress.records.append(record)
        if not after(progress, participant is left[-1]):
            break
    return progress
