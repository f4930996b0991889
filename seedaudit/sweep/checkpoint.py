"""Progress of the pass on disk: what one can trust after a kill, a full disk or a power cut.

A fold's state is written to a temporary file, flushed and renamed. Progress is used again only
under the same key (digests of exactly the settings that change numbers) and for the same inputs
(digests of the runs that were added). Finished folds are kept until the whole pass is done.
"""

from __future__ import annotations

import json
import os
import shutil
import threading
import time
import zipfile
import zlib
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any, Self

import numpy as np
from filelock import FileLock, Timeout
from numpy.typing import NDArray

from seedaudit.errors import DataError, Problem, StudyError
from seedaudit.sweep.digests import file_digest
from seedaudit.sweep.fold import FoldProgress
from seedaudit.sweep.moments import Moments, Steps
from seedaudit.sweep.participant import Kept
from seedaudit.sweep.task import ParticipantRecord, ParticipantTask, SearchSums

EVERY = 30.0
"""Seconds of work that may be lost, if a participant does not take longer."""

FORMAT = 2

UNREADABLE = (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile, zlib.error)
SCALARS = (
    "participant", "row", "n_runs", "n_volumes", "n_censored", "residual_df",
    "n_missing_voxels", "used", "reason",
)  # fmt: skip


Unit = tuple[int, int]
"""Number of a tile and of a fold."""


class Checkpoint:
    """The progress folder of one run; used as a context, in which no second run may enter.

    Parameters
    ----------
    folder : Path
        Made when it is missing; removed by `finish`.
    key : mapping of str to str
        Digests of the settings, by what they are called.
    every : float
        Seconds between writes.
    fresh : bool
        Ignore earlier progress.
    tell : callable
        Told what became of earlier progress.
    """

    def __init__(
        self,
        folder: Path,
        key: Mapping[str, str],
        *,
        every: float = EVERY,
        fresh: bool = False,
        tell: Callable[[str], None] = lambda text: None,
    ) -> None:
        self._folder, self._key, self._every, self._tell = folder, dict(key), every, tell
        self._fresh = fresh
        self._guard = threading.Lock()
        self._pending: dict[Unit, FoldProgress] = {}
        self._saved: dict[Unit, float] = {}
        self._lock = FileLock(folder / "lock")

    def __enter__(self) -> Self:
        try:
            self._folder.mkdir(parents=True, exist_ok=True)
            self._lock.acquire(timeout=0)
        except Timeout:
            raise StudyError(
                Problem(
                    self._folder.name,
                    "another run is at work on this output",
                    "one run at a time",
                    "wait for it, or choose another folder with --out",
                )
            ) from None
        except OSError as error:
            raise self._refused(error) from error
        try:
            self._adopt()
        except OSError as error:
            self._lock.release()
            raise self._refused(error) from error
        self._began = time.monotonic()
        return self

    def __exit__(self, *_: object) -> None:
        self._lock.release()

    def _adopt(self) -> None:
        """Keep earlier progress only under the same key; say what has changed."""
        content = {"format": str(FORMAT), **self._key}
        path = self._folder / "key.json"
        kept = sorted(self._folder.glob("fold-*.npz"))
        if kept:
            try:
                earlier = json.loads(path.read_text(encoding="utf-8"))
            except UNREADABLE:
                earlier = {}
            changed = [name for name in content if earlier.get(name) != content[name]]
            if self._fresh or changed:
                why = "--fresh" if self._fresh else "changed: " + ", ".join(changed)
                self._tell(f"earlier progress is not used ({why})")
                for fold in kept:
                    fold.unlink()
                shutil.rmtree(self.state_folder, ignore_errors=True)
            else:
                self._tell("going on from earlier progress")
        _write_whole(path, json.dumps(content, indent=1).encode())

    @property
    def state_folder(self) -> Path:
        """Where the states of finished folds are, if they leave the memory."""
        return self._folder / "state"

    def load(self, unit: Unit, participants: Sequence[ParticipantTask]) -> FoldProgress | None:
        """Progress of a fold in a tile, if there is any that can be used.

        The state of a fold that is finished and has left the memory holds no placement.
        """
        stored = self._path(unit, stored=True)
        path = stored if stored.exists() else self._path(unit)
        if not path.exists():
            return None
        try:
            progress = _read(path)
            why = _outdated(progress, participants)
        except UNREADABLE:
            progress, why = None, f"{path.name} is damaged and is made again"
        if why:
            self._tell(why)
            # gone before anything is made anew, which it must never vouch for
            self.forget(unit)
            return None
        return progress

    def forget(self, unit: Unit) -> None:
        """Drop the progress of a fold in a tile."""
        for stored in (True, False):
            self._path(unit, stored=stored).unlink(missing_ok=True)

    def forget_stored(self, fold: int) -> None:
        """Drop what vouches for the state of a fold, in all tiles."""
        for path in self._folder.glob(f"fold-{fold:03d}-tile-*-stored.npz"):
            path.unlink()

    def note(self, unit: Unit, progress: FoldProgress, *, finished: bool, now: bool) -> None:
        """Called by a fold's worker after each participant: write what is due.

        Raises
        ------
        DataError
            If the disk refuses: progress that cannot be kept is not silently given up.
        """
        with self._guard:
            if finished:
                self._pending[unit] = progress
            due = time.monotonic() - self._saved.get(unit, self._began) >= self._every
            if not (due or now):
                return
            writes = {**self._pending, unit: progress}
            try:
                for number, part in writes.items():
                    stored = not part.moments.n_placements
                    _write(self._path(number, stored=stored), part)
                    if stored:
                        self._path(number).unlink(missing_ok=True)
                    self._saved[number] = time.monotonic()
            except OSError as error:
                raise self._refused(error) from error
            self._pending.clear()

    def finish(self) -> None:
        """The pass is done and its result is safe: remove the progress."""
        shutil.rmtree(self._folder, ignore_errors=True)

    def _path(self, unit: Unit, *, stored: bool = False) -> Path:
        tile, fold = unit
        ending = "-stored" if stored else ""
        return self._folder / f"fold-{fold:03d}-tile-{tile:03d}{ending}.npz"

    def _refused(self, error: OSError) -> DataError:
        return disk_refused(self._folder, error)


def disk_refused(folder: Path, error: OSError) -> DataError:
    """The error for progress, or for states, that cannot be written."""
    return DataError(
        Problem(
            f"progress folder {folder.name}",
            f"cannot be written ({error.strerror or error})",
            "a writable disk with enough space beside the output",
            "free some space and say the same command again, or choose another --out",
        )
    )


def _outdated(progress: FoldProgress, participants: Sequence[ParticipantTask]) -> str:
    """Why progress cannot be used; empty if it can.

    Those set aside count too: their files may be whole by now.
    """
    tasks = {task.participant: task for task in participants}
    records = {record.participant: record for record in progress.records}
    finished = not progress.moments.n_placements
    if not set(records) <= set(tasks) or (finished and set(records) != set(tasks)):
        return "other participants take part now; their fold is made again"
    for name, record in records.items():
        for run, digest in zip(tasks[name].runs, record.digests, strict=False):
            if file_digest(run.header.path) != digest:
                return f"{run.header.path.name} has changed since; its fold is made again"
    return ""


def _write(path: Path, progress: FoldProgress) -> None:
    arrays: dict[str, NDArray[Any]] = {
        f"moments_{name}": value for name, value in progress.moments.named_arrays()
    }
    if (steps := progress.moments.steps) is not None:
        arrays["steps"] = np.array([steps.xz, steps.zz, steps.bits])
    rows = []
    for i, record in enumerate(progress.records):
        row = {name: getattr(record, name) for name in SCALARS}
        rows.append(
            {
                **row,
                "digests": list(record.digests),
                "kept_voxels": [kept.n_voxels for kept in record.kept],
                "searches": len(record.search_coverage),
            }
        )
        for name in ("coverage", "reported_z"):
            if (value := getattr(record, name)) is not None:
                arrays[f"{i}_{name}"] = value
        for c, kept in enumerate(record.kept):
            arrays |= {f"{i}_{c}_{name}": value for name, value in kept.arrays().items()}
        for c, coverage in enumerate(record.search_coverage):
            arrays[f"{i}_{c}_search"] = coverage
    for c, search in enumerate(progress.searches):
        arrays[f"search_{c}_z"], arrays[f"search_{c}_count"] = search.z, search.count
    arrays["records"] = np.frombuffer(json.dumps(rows).encode(), np.uint8)
    partial = path.with_suffix(".partial")
    with open(partial, "wb") as file:
        np.savez(file, allow_pickle=False, **arrays)
        file.flush()
        os.fsync(file.fileno())
    os.replace(partial, path)


def _read(path: Path) -> FoldProgress:
    with np.load(path, allow_pickle=False) as stored:
        arrays = {name: stored[name] for name in stored.files}
    rows = json.loads(arrays["records"].tobytes())
    records = []
    for i, row in enumerate(rows):
        voxels, digests = row.pop("kept_voxels"), tuple(row.pop("digests"))
        searched = range(row.pop("searches"))
        kept = tuple(
            Kept(n, *(arrays[f"{i}_{c}_{name}"] for name in Kept.NAMES))
            for c, n in enumerate(voxels)
        )
        records.append(
            ParticipantRecord(
                **row,
                digests=digests,
                coverage=arrays.get(f"{i}_coverage"),
                kept=kept,
                reported_z=arrays.get(f"{i}_reported_z"),
                search_coverage=tuple(arrays[f"{i}_{c}_search"] for c in searched),
            )
        )
    prefix = "moments_"
    state = {n.removeprefix(prefix): a for n, a in arrays.items() if n.startswith(prefix)}
    searches: list[SearchSums] = []
    while f"search_{len(searches)}_z" in arrays:
        name = f"search_{len(searches)}"
        searches.append(SearchSums(arrays[f"{name}_z"], arrays[f"{name}_count"]))
    steps = None
    if "steps" in arrays:
        xz, zz, bits = arrays["steps"].tolist()
        steps = Steps(xz, zz, int(bits))
    moments = Moments(**state, steps=steps)
    if not moments.n_placements:
        return FoldProgress(moments, searches, records)
    # those set aside are tried again: nothing of them is in the state
    return FoldProgress(moments, searches, [r for r in records if r.used])


def _write_whole(path: Path, content: bytes) -> None:
    partial = path.with_suffix(".partial")
    with open(partial, "wb") as file:
        file.write(content)
        file.flush()
        os.fsync(file.fileno())
    os.replace(partial, path)
