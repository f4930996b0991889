"""Tiles of the voxel axis: a pass for each, when the state of all voxels does not fit in memory.

What a tile adds to the sums does not depend on how the voxels are tiled: tiles end where blocks of
voxels end, and everything that is summed over voxels or participants is exact.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from seedaudit.space.grid import VoxelSet
from seedaudit.sweep.correlate import BLOCK
from seedaudit.sweep.participant import CloudTargets
from seedaudit.sweep.task import SearchTask, SweepTask


@dataclass(frozen=True)
class Layout:
    """How the pass keeps to its memory.

    Parameters
    ----------
    tiles : int
        Passes over the data, each for a part of the voxels.
    on_disk : bool
        Whether a finished fold leaves the memory for a file; always with several tiles.
    workers : int or None
        Threads at the most; None for as many as are given.
    """

    tiles: int = 1
    on_disk: bool = False
    workers: int | None = None

    def threads(self, given: int) -> int:
        """Threads that are used of those given."""
        return given if self.workers is None else min(given, self.workers)


IN_MEMORY = Layout()


def tile_slices(n_voxels: int, tiles: int) -> list[slice]:
    """Voxels of each tile: whole blocks, about equally many; fewer tiles where there are fewer
    blocks.
    """
    blocks = -(-n_voxels // BLOCK)
    edges = np.unique(np.linspace(0, blocks, min(tiles, blocks) + 1).round().astype(int)) * BLOCK
    edges[-1] = n_voxels
    return [slice(a, b) for a, b in pairwise(edges.tolist())]


def read_for_spheres(task: SweepTask) -> NDArray[np.int_]:
    """Voxels that every tile reads: those of all spheres, and those that a search looks at."""
    used = [task.weights.indices, *(search.weights.indices for search in task.searches)]
    return np.unique(np.concatenate([*used, *(search.targets for search in task.searches)]))


def tile_task(task: SweepTask, tile: slice) -> SweepTask:
    """The task of one tile, which the same worker does in the same way.

    Parameters
    ----------
    task : SweepTask
        Of all voxels.
    tile : slice
        From `tile_slices`. The first one does the searches too.
    """
    n_voxels = len(task.voxels)
    if (tile.start, tile.stop) == (0, n_voxels):
        return task
    ahead = read_for_spheres(task)
    columns = np.concatenate([ahead, np.arange(tile.start, tile.stop)])
    position = np.full(n_voxels, -1)
    position[ahead] = np.arange(len(ahead))

    def moved(weights: sparse.csr_array) -> sparse.csr_array:
        parts = (weights.data, position[weights.indices], weights.indptr)
        return sparse.csr_array(parts, shape=(weights.shape[0], len(columns)))

    searches = [SearchTask(moved(s.weights), position[s.targets]) for s in task.searches]
    return replace(
        task,
        voxels=VoxelSet(task.voxels.grid, task.voxels.ijk[columns]),
        weights=moved(task.weights),
        clouds=tuple(
            CloudTargets(cloud.rows, cloud.analysis[tile], cloud.targets[tile])
            for cloud in task.clouds
        ),
        searches=tuple(searches) if tile.start == 0 else (),
        ahead=len(ahead),
        columns=columns,
        prepared_voxels=task.voxels,
    )
