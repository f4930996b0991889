"""What shows only when runs are held beside each other: copies, and swapped sides."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Hashable, Iterable, Sequence
from itertools import combinations
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.errors import DataError, Findings, Problem, listed
from seedaudit.inputs.discover import Run
from seedaudit.inputs.header import RunHeader
from seedaudit.inputs.stream import opened
from seedaudit.inputs.volumes import first_volume
from seedaudit.sweep.schedule import ParticipantTask

SAMPLE = 1 << 16
"""Bytes of an uncompressed file that are looked at in three places before all of it is."""

ALIKE_R = 0.5
"""Spatial correlation of two first volumes from which they show the same head."""

ALIKE_Z = 0.2
"""How much larger, in Fisher z, it must be with one of them mirrored to doubt the sides."""


def note_copies(runs: Sequence[Run], findings: Findings) -> None:
    """The same content under two names: of images a problem, of confounds tables a warning.

    An image is compressed or not, and compressed in whatever way: its content is compared. What
    can be told apart by size, checksum or samples is not read as a whole.
    """
    images = {run.bold: run.participant for run in runs}
    for paths in _same_content(images):
        who = ", ".join(dict.fromkeys(images[path] for path in paths))
        findings.wrong(
            Problem(
                listed([str(path) for path in paths]),
                f"hold the same image (of {who})",
                "a recording of its own for every run",
                "put the right file in the place of the copy, or leave it out",
            )
        )
    tables = {run.confounds: run.participant for run in runs if run.confounds is not None}
    for paths in _same_content(tables):
        who = ", ".join(dict.fromkeys(tables[path] for path in paths))
        names = listed([path.name for path in paths])
        findings.warnings.append(f"{names}: the same confounds (of {who}); is one a copy?")


def _same_content(paths: Iterable[Path]) -> list[list[Path]]:
    """Files whose content after decompression is the same, the same file by two paths left out."""
    readable = {path.resolve(): path for path in paths if path.is_file()}
    alike = [list(readable.values())]
    for look in (_glance, _digest):
        alike = [group for some in alike for group in _grouped(some, look)]
    return alike


def _grouped(paths: Sequence[Path], look: Callable[[Path], Hashable]) -> list[list[Path]]:
    """Those that look alike; a file that cannot be read is like none."""
    groups: dict[Hashable, list[Path]] = {}
    for path in paths:
        try:
            groups.setdefault(look(path), []).append(path)
        except (OSError, DataError):
            continue
    return [group for group in groups.values() if len(group) > 1]


def _glance(path: Path) -> Hashable:
    """What files with the same content share, at little cost.

    A gzip file ends with the checksum and the size of its content (RFC 1952); some are written in
    blocks, with an empty one at the end.
    """
    size = path.stat().st_size
    with open(path, "rb") as file:
        compressed = file.read(2) == b"\x1f\x8b"
        if compressed and size > 8:
            file.seek(-8, 2)
            end = file.read(8)
            return end if any(end) else (end, size)
        parts = []
        for start in (0, size // 2, max(size - SAMPLE, 0)):
            file.seek(start)
            parts.append(file.read(SAMPLE))
    return (size, *parts)


def _digest(path: Path) -> str:
    total = hashlib.sha256()
    chunk = memoryview(bytearray(1 << 20))
    with opened(path) as stream:
        while got := stream.fill(chunk):
            total.update(chunk[:got])
    return total.hexdigest()


def note_sides(participants: Iterable[ParticipantTask], findings: Findings) -> None:
    """Runs of one participant that look alike only when left and right are swapped in one.

    All runs are on one grid here, so that no header says so: only the images can. A head is
    nearly symmetric, but its runs are far more alike than a run and its mirror image.
    """
    for participant in participants:
        headers = [run.header for run in participant.runs]
        if len(headers) < 2:
            continue
        try:
            volumes = {header.path.name: first_volume(header) for header in headers}
        except DataError:
            continue  # told when the run is read
        axis = _left_right_axis(headers[0])
        for (one, a), (other, b) in combinations(volumes.items(), 2):
            if _mirrored(a, b, axis):
                findings.warnings.append(
                    f"participant {participant.participant}: {other} looks like {one} with left "
                    "and right swapped, though both headers say the same; which one is right?"
                )
                break


def _left_right_axis(header: RunHeader) -> int:
    """The stored axis that runs most along left to right."""
    steps = header.grid.affine[:3, :3] / header.grid.voxel_sizes
    return int(np.abs(steps[0]).argmax())


def _mirrored(a: NDArray[np.float64], b: NDArray[np.float64], axis: int) -> bool:
    as_is, swapped = (_similarity(a, other) for other in (b, np.flip(b, axis)))
    return swapped > ALIKE_R and np.arctanh(swapped) - np.arctanh(as_is) > ALIKE_Z


def _similarity(a: NDArray[np.float64], b: NDArray[Any]) -> float:
    """Spatial correlation where both are finite, inside -1 to 1; 0 where there is none."""
    both = np.isfinite(a) & np.isfinite(b)
    if both.sum() < 3 or np.ptp(a[both]) == 0 or np.ptp(b[both]) == 0:
        return 0.0
    with np.errstate(over="ignore", invalid="ignore"):
        r = float(np.corrcoef(a[both], b[both])[0, 1])
    return float(np.clip(r, -0.999999, 0.999999)) if np.isfinite(r) else 0.0
