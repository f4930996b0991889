"""The lattice on which a steadier seed is looked for, and an even selection of target voxels."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import KDTree

from seedaudit.errors import Problem, StudyError
from seedaudit.space.grid import VoxelSet

_SLACK = 1e-6  # mm; both balls are closed, and rounding must not open them
_GOLDEN = 1.2207440846057596


@dataclass(frozen=True)
class Neighbourhoods:
    """Candidates and the lattice points around each of them, in compressed rows.

    Parameters
    ----------
    candidates : (C,) int64
        Lattice rows of the candidates; the first is row 0, the reported seed.
    starts : (C + 1,) int64
        Candidate c has the neighbours ``points[starts[c]:starts[c + 1]]``.
    points : (E,) int64
        Lattice rows, ascending within a candidate, without the candidate itself.
    share : (C,) float64
        Share of the neighbours of an unbounded lattice that are there, 0 to 1.
    """

    candidates: NDArray[np.int64]
    starts: NDArray[np.int64]
    points: NDArray[np.int64]
    share: NDArray[np.float64]

    @property
    def counts(self) -> NDArray[np.int64]:
        """Neighbours of each candidate, (C,)."""
        return np.diff(self.starts)


def ball_lattice(within: float, step: float) -> NDArray[np.float64]:
    """Every point of a cubic lattice in a ball about one of its points.

    Parameters
    ----------
    within : float
        Radius of the closed ball, mm.
    step : float
        Spacing along each world axis, mm, above 0 and at most `within`.

    Returns
    -------
    (M, 3) array
        mm, sorted by distance; row 0 is the centre.

    Raises
    ------
    StudyError
        If the step is no usable length.
    """
    if not (np.isfinite(step) and 0 < step <= within):
        raise StudyError(Problem("step", f"{step:g}", f"above 0 and up to {within:g} mm"))
    reach = int(within / step + _SLACK)
    side = np.arange(-reach, reach + 1) * step
    points = np.stack(np.meshgrid(side, side, side, indexing="ij"), axis=-1).reshape(-1, 3)
    distance = np.linalg.norm(points, axis=1)
    order = np.argsort(np.round(distance, 6), kind="stable")
    return np.asarray(points[order[distance[order] <= within + _SLACK]])


def neighbourhoods(
    shifts: NDArray[np.float64],
    usable: NDArray[np.bool_],
    search: float,
    within: float,
    step: float,
    least_share: float = 0.5,
) -> Neighbourhoods:
    """Which lattice points may take the place of the seed, and who their neighbours are.

    Parameters
    ----------
    shifts : (M, 3)
        Lattice out to `search` + `within` about the reported seed, which is row 0; mm.
    usable : (M,) bool
        Points whose sphere has a map; the reported seed is one of them.
    search : float
        Largest distance of a candidate from the reported seed, mm.
    within : float
        Largest distance of a neighbour from its candidate, mm; the step or more.
    step : float
        Spacing of the lattice, mm.
    least_share : float
        Share of its neighbours that a candidate needs, 0 to 1: beside the border of the mask, a
        placement error can go to one side only, and the score would describe that side. The
        reported seed needs one neighbour only.

    Raises
    ------
    StudyError
        If no placement error of `within` reaches a neighbour of the reported seed.
    """
    rows = np.flatnonzero(usable)
    near = rows[np.linalg.norm(shifts[rows], axis=1) <= search + _SLACK]
    tree = KDTree(shifts[rows])
    found = tree.query_ball_point(shifts[near], within + _SLACK, return_sorted=True)
    around = [rows[hits][rows[hits] != row] for row, hits in zip(near, found, strict=True)]
    whole = len(ball_lattice(within, step)) - 1
    share = np.array([len(points) / whole for points in around])
    kept = [i for i in range(len(near)) if share[i] >= least_share or (not near[i] and share[i])]
    if not kept or near[kept[0]] != 0:
        raise StudyError(
            Problem(
                "steadier",
                "the reported seed has no neighbour with a map",
                f"lattice points within {within:g} mm of it, in the mask",
            )
        )
    counts = [len(around[i]) for i in kept]
    return Neighbourhoods(
        near[kept].astype(np.int64),
        np.cumsum([0, *counts], dtype=np.int64),
        np.concatenate([around[i] for i in kept]).astype(np.int64),
        share[kept],
    )


def evenly_spread(voxels: VoxelSet, count: int) -> NDArray[np.int64]:
    """Take so many voxels, evenly spread in space.

    Parameters
    ----------
    voxels : VoxelSet
    count : int
        1 or more.

    Returns
    -------
    (min(count, V),) int64
        Rows, ascending; the same voxels whatever the storage of the grid.

    Notes
    -----
    A voxel is taken where a linear function of its indices, modulo 1, is small. With the powers
    of the generalised golden ratio (the real root of x^4 = x + 1) as coefficients the voxels
    taken keep their distance in all directions, at any count.
    """
    axes, reverse = voxels.grid.canonical_axes
    index = voxels.ijk[:, list(axes)].astype(np.int64)
    last = np.array(voxels.grid.shape)[list(axes)] - 1
    index = np.where(reverse, last - index, index)
    height = (index @ _GOLDEN ** -np.arange(1.0, 4.0)) % 1
    return np.sort(np.argsort(height, kind="stable")[:count])
