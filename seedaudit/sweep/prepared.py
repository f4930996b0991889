"""Runs kept decompressed and masked, as memory-mapped arrays, so that a second seed reads fast.

What is kept is what `read_run` gives, before any cleaning: other confounds or another pass band
need no new decompression, and the numbers are the same to the last digit.
"""

from __future__ import annotations

import json
import os
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.errors import DataError, Problem
from seedaudit.inputs.header import RunHeader
from seedaudit.inputs.volumes import RunData, read_run
from seedaudit.space.grid import VoxelSet
from seedaudit.sweep.digests import digest, file_digest

FORMAT = 1


class PreparedRuns:
    """A folder of prepared runs for one voxel set and one smoothing.

    Parameters
    ----------
    folder : Path
        Made when missing; may hold prepared runs of other masks too.
    voxels : VoxelSet
    smooth : float
        FWHM, mm.
    """

    def __init__(self, folder: Path, voxels: VoxelSet, smooth: float) -> None:
        kind = digest(FORMAT, voxels.ijk, voxels.grid.affine, voxels.grid.shape, smooth)
        self._folder = folder / kind[:16]
        self._voxels, self._smooth = voxels, smooth

    def run(self, header: RunHeader, out: NDArray[np.float32] | None = None) -> RunData:
        """The voxel series of a run: kept ones if the file is unchanged, else read and kept.

        Raises
        ------
        DataError
            For a run that cannot be read, or a folder that cannot be written.
        """
        stem = f"{header.path.name.split('.')[0]}-{digest(str(header.path.resolve()))[:12]}"
        kept = self._kept(stem, header)
        if kept is not None:
            return kept
        data = read_run(header, self._voxels, self._smooth, out=out)
        try:
            self._keep(stem, header, data)
        except OSError as error:
            raise DataError(
                Problem(
                    f"prepared runs in {self._folder.parent.name}",
                    f"cannot be written ({error.strerror or error})",
                    "a writable disk with enough space",
                    "free some space, choose another folder, or leave out --keep-prepared",
                )
            ) from error
        return data

    def some(
        self, header: RunHeader, columns: NDArray[np.int_], out: NDArray[np.float32] | None = None
    ) -> RunData:
        """As `run`, for the voxels in those columns only, which are copied into `out`."""
        data = self.run(header)
        if out is None:
            out = np.empty((header.n_volumes, len(columns)), np.float32)
        series = out[: header.n_volumes]
        for t, row in enumerate(_rows(data.series)):
            # with another mode the result would be made beside `out` first
            np.take(row, columns, out=series[t], mode="clip")
        return RunData(series, data.background, data.finite[columns], data.digest)

    def _kept(self, stem: str, header: RunHeader) -> RunData | None:
        try:
            told = json.loads((self._folder / f"{stem}.json").read_text(encoding="utf-8"))
            if told["stamp"] != _stamp(header.path) and file_digest(header.path) != told["digest"]:
                return None
            series = np.load(self._folder / f"{stem}.npy", mmap_mode="r", allow_pickle=False)
            finite = np.load(self._folder / f"{stem}-finite.npy", allow_pickle=False)
        except (OSError, ValueError, KeyError):
            return None
        expected = (header.n_volumes, len(self._voxels))
        if series.shape != expected or finite.shape != expected[1:]:
            return None
        return RunData(series, np.zeros(0, np.float32), finite, told["digest"])

    def _keep(self, stem: str, header: RunHeader, data: RunData) -> None:
        self._folder.mkdir(parents=True, exist_ok=True)
        for name, array in {stem: data.series, f"{stem}-finite": data.finite}.items():
            partial = self._folder / f"{name}.partial"
            with open(partial, "wb") as file:
                np.save(file, array, allow_pickle=False)
            os.replace(partial, self._folder / f"{name}.npy")
        # the description comes last: without it the arrays do not count
        told: dict[str, Any] = {"stamp": _stamp(header.path), "digest": data.digest}
        partial = self._folder / f"{stem}.json.partial"
        partial.write_text(json.dumps(told), encoding="utf-8")
        os.replace(partial, self._folder / f"{stem}.json")


def _rows(series: NDArray[np.float32]) -> Iterator[NDArray[np.float32]]:
    """The rows of an array; of one in a file by reading, so that no page of it stays mapped."""
    if not isinstance(series, np.memmap) or series.filename is None:
        yield from series
        return
    with open(series.filename, "rb", buffering=0) as file:
        file.seek(series.offset)
        for _ in range(len(series)):
            yield np.fromfile(file, np.float32, series.shape[1])


def _stamp(path: Path) -> list[int]:
    """Size and time of change: equal ones are taken as the same content."""
    status = path.stat()
    return [status.st_size, status.st_mtime_ns]
