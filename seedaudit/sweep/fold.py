"""The unit of work: a fold's participants, added one after the other."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from itertools import zip_longest

from seedaudit.inputs.stream import read_ahead
from seedaudit.sweep.moments import Moments
from seedaudit.sweep.task import (
    ParticipantRecord,
    ParticipantTask,
    SearchSums,
    SweepTask,
)
from seedaudit.sweep.work import Buffers, sweep_participant


@dataclass
class FoldProgress:
    """State of a fold after the participants recorded so far."""

    moments: Moments
    searches: list[SearchSums] = field(default_factory=list)
    records: list[ParticipantRecord] = field(default_factory=list)

    def __iadd__(self, other: FoldProgress) -> FoldProgress:
        """Take in another part of the fold; sums are exact, so any order gives the same digits."""
        self.moments += other.moments
        for mine, theirs in zip(self.searches, other.searches, strict=True):
            mine += theirs
        self.records += other.records
        return self


def run_fold(
    task: SweepTask,
    participants: Sequence[ParticipantTask],
    progress: FoldProgress | None = None,
    *,
    buffers: Buffers | None = None,
    reuse_state: bool = False,
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
    reuse_state : bool
        Put the state into the memory of the worker's last one, which nobody may need any more.
    after : callable
        Called with the progress after each participant, and whether it was the last; False ends
        the fold early.
    """
    buffers = buffers or Buffers()
    if progress is None:
        moments = buffers.state(task) if reuse_state else task.empty_moments()
        progress = FoldProgress(moments, task.empty_searches())
    done = {record.participant for record in progress.records}
    left = [participant for participant in participants if participant.participant not in done]
    for participant, following in zip_longest(left, left[1:]):
        if task.prepared is None and following is not None:
            # the next runs come from the disk while this one is computed
            for run in following.runs:
                read_ahead(run.header.path)
        record = sweep_participant(task, participant, progress.moments, progress.searches, buffers)
        progress.records.append(record)
        if not after(progress, following is None):
            break
    return progress
