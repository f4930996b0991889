"""What becomes of a fold when it is finished: it stays in memory, or its state goes to a file.

Both ways its progress is kept on disk, if there is a place for that.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np

from seedaudit.errors import DataError, Problem
from seedaudit.sweep.checkpoint import Checkpoint, disk_refused
from seedaudit.sweep.fold import FoldProgress
from seedaudit.sweep.moments import FoldState, Moments
from seedaudit.sweep.stored import StoredFold, store_tile
from seedaudit.sweep.task import ParticipantRecord, ParticipantTask, SweepTask


class Keeper:
    """Keeps finished folds of a pass, tile after tile.

    Parameters
    ----------
    task : SweepTask
        Of all voxels.
    n_folds : int
    scratch : Path or None
        An existing folder for the states of finished folds; None keeps them in memory.
    checkpoint : Checkpoint or None
    """

    def __init__(
        self, task: SweepTask, n_folds: int, scratch: Path | None, checkpoint: Checkpoint | None
    ) -> None:
        self._task, self._scratch, self._checkpoint = task, scratch, checkpoint
        self._paths = [] if scratch is None else [scratch / f"fold-{n:03d}" for n in range(n_folds)]
        self._tile, self._start = 0, 0
        if checkpoint is not None:
            self._forget_what_is_gone(checkpoint, n_folds)

    @property
    def on_disk(self) -> bool:
        """Whether finished folds leave the memory."""
        return self._scratch is not None

    def _forget_what_is_gone(self, checkpoint: Checkpoint, n_folds: int) -> None:
        """Before anything is made anew, which no earlier note must ever vouch for."""
        for n in range(n_folds):
            if not (self.on_disk and _size(self._paths[n]) == self._n_bytes):
                checkpoint.forget_stored(n)

    def begin(
        self, number: int, tile: slice, folds: Sequence[Sequence[ParticipantTask]]
    ) -> list[FoldProgress | None]:
        """A tile begins: earlier progress of its folds."""
        self._tile, self._start = number, tile.start
        if self._checkpoint is None:
            return [None] * len(folds)
        return [self._checkpoint.load((number, n), fold) for n, fold in enumerate(folds)]

    @property
    def _n_bytes(self) -> int:
        """Of the file of a fold."""
        layers, n, v = self._shape
        return layers * n * v * (8 if self._task.steps is None else self._task.steps.bits // 8)

    @property
    def _shape(self) -> tuple[int, int, int]:
        layers = self._task.design.shape[1] + 1 + self._task.single
        return layers, self._task.weights.shape[0], len(self._task.voxels)

    @staticmethod
    def is_done(progress: FoldProgress | None) -> bool:
        """Whether the fold is finished, with its state in a file."""
        return progress is not None and progress.moments.n_placements == 0

    def note(self, fold: int, progress: FoldProgress, *, finished: bool, now: bool) -> None:
        """Called by a fold's worker after each participant."""
        if self._checkpoint is not None:
            finished = finished and not self.on_disk
            self._checkpoint.note((self._tile, fold), progress, finished=finished, now=now)

    def finished(self, fold: int, progress: FoldProgress) -> FoldProgress:
        """The fold as it is kept: without its placements, if they are in a file now.

        Raises
        ------
        DataError
            If the disk refuses.
        """
        if self._scratch is None:
            return progress
        try:
            store_tile(
                self._paths[fold], self._n_bytes, len(self._task.voxels), self._start,
                progress.moments,
            )  # fmt: skip
        except OSError as error:
            raise disk_refused(self._scratch.parent, error) from error
        # copies: the state's own memory is used again
        kept = replace(progress, moments=progress.moments.frame(slice(None)).wide())
        if self._checkpoint is not None:
            self._checkpoint.note((self._tile, fold), kept, finished=True, now=True)
        return kept

    def states(self, tiles: Sequence[Sequence[FoldProgress]]) -> tuple[FoldState, ...]:
        """The states of all folds, from those of each tile."""
        if self._scratch is None:
            return tuple(part.moments for part in tiles[0])
        shared = [
            joined_frames([parts[n].moments for parts in tiles]) for n in range(len(tiles[0]))
        ]
        return tuple(
            StoredFold(path, self._shape, frame, self._task.steps)
            for path, frame in zip(self._paths, shared, strict=True)
        )


def _size(path: Path) -> int:
    try:
        return path.stat().st_size
    except OSError:
        return -1


def joined_frames(frames: Sequence[Moments]) -> Moments:
    """What the placements share, of all tiles in their order."""
    known = [frame.variance for frame in frames if frame.variance is not None]
    return Moments(
        np.concatenate([frame.count for frame in frames]),
        np.concatenate([frame.xtx for frame in frames], axis=-1),
        np.concatenate([frame.xtz for frame in frames], axis=-1),
        np.concatenate([frame.zz for frame in frames], axis=-1),
        np.concatenate(known, axis=-1) if known else None,
    )


def joined_records(
    tiles: Sequence[Sequence[ParticipantRecord]],
) -> tuple[ParticipantRecord, ...]:
    """One record for each participant, in the order of the design, from those of every tile.

    Raises
    ------
    DataError
        When a file was another one when a later tile was read.
    """
    found = {record.participant: record for record in tiles[0]}
    for record in (record for tile in tiles[1:] for record in tile):
        first = found[record.participant]
        if record.digests != first.digests:
            raise DataError(
                Problem(
                    f"participant {record.participant}",
                    "a run has changed while the audit was at work",
                    "files that stay as they are",
                    "run again",
                )
            )
        for mine, theirs in zip(first.kept, record.kept, strict=True):
            mine += theirs
        maps = [part.reported_z for part in (first, record) if part.reported_z is not None]
        found[record.participant] = replace(
            first,
            n_missing_voxels=first.n_missing_voxels + record.n_missing_voxels,
            reported_z=np.concatenate(maps, axis=1) if maps else None,
        )
    return tuple(sorted(found.values(), key=lambda record: record.row))
