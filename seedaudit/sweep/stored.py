"""States of finished folds in files: written tile by tile, read placement by placement."""

from __future__ import annotations

import os
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.sweep.moments import Moments, Steps, Sums, Voxels, in_float64


@dataclass(frozen=True)
class StoredFold:
    """A fold's state of which only counts and X'X are in memory; a `FoldState`.

    The file holds the layers X'z, z'z and, where it is known, the sampling variance, each an array
    (N, V): one placement's row is read in one piece.

    Parameters
    ----------
    path : Path
    shape : (layers, N, V)
    shared : Moments
        Counts and X'X; it holds no placement.
    """

    path: Path
    shape: tuple[int, int, int]
    shared: Moments
    steps: Steps | None

    @property
    def n_placements(self) -> int:
        """N"""
        return self.shape[1]

    def frame(self, voxels: Voxels) -> Moments:
        """See `FoldState`."""
        return self.shared.frame(voxels)

    def sums(self, placement: int, voxels: Voxels) -> Sums:
        """See `FoldState`."""
        layers, n, v = self.shape
        rows = []
        for layer in range(layers):
            offset = (layer * n + placement) * v * self._dtype.itemsize
            rows.append(np.fromfile(self.path, self._dtype, v, offset=offset)[voxels])
        known = rows.pop() if self.shared.variance is not None else None
        return in_float64(np.array(rows[:-1]), rows[-1], known, self.steps)

    @property
    def _dtype(self) -> np.dtype[Any]:
        return np.dtype(np.float64) if self.steps is None else self.steps.dtype


def store_tile(path: Path, n_bytes: int, n_voxels: int, start: int, moments: Moments) -> None:
    """Write the state of one tile, which begins at a voxel, into the file of its fold.

    A file that is not of that many bytes is begun anew, at its full length.

    Raises
    ------
    OSError
        When the disk refuses.
    """
    layers: list[NDArray[Any]] = [*moments.xtz, moments.zz]
    if moments.variance is not None:
        layers.append(moments.variance)
    n, width = moments.zz.shape
    size = moments.zz.dtype.itemsize
    fits = path.exists() and path.stat().st_size == n_bytes
    with open(path, "r+b" if fits else "wb", buffering=0) as file:
        if not fits:
            file.truncate(n_bytes)
        for number, layer in enumerate(layers):
            if width == n_voxels:
                file.seek(number * n * n_voxels * size)
                _write_all(file, layer)
                continue
            for row in range(n):
                file.seek(((number * n + row) * n_voxels + start) * size)
                _write_all(file, layer[row])
        os.fsync(file.fileno())


def _write_all(file: Any, array: NDArray[Any]) -> None:
    view = np.ascontiguousarray(array).data.cast("B")
    while view:
        view = view[file.write(view) :]
