"""Which voxels a sphere holds, and with what weight."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.sparse import csr_array

from seedaudit.errors import Problem, StudyError
from seedaudit.space.grid import Grid, VoxelSet

WEIGHTINGS = ("hard", "soft")
_SLACK = 1e-6  # mm; the ball is closed, and rounding must not open it
_SAMPLES = 5  # points along each voxel edge from which `soft` estimates a volume

Member = tuple[NDArray[np.int64], NDArray[np.float64]]


def sphere_weights(
    voxels: VoxelSet, centres: ArrayLike, radii: ArrayLike, weighting: str = "hard"
) -> csr_array:
    """Weigh the voxels of a set by their membership in spheres, one row per sphere.

    A sphere holds the voxels whose centre lies within its radius (closed ball), and always the
    voxel that contains its own centre.

    Parameters
    ----------
    voxels : VoxelSet
        The set, V voxels.
    centres : array (N, 3)
        World coordinates, mm.
    radii : array (N,) or float
        Radii, mm, 0 or more.
    weighting : {"hard", "soft"}
        1 for each voxel held, or the share of the voxel's volume inside the sphere, counted on
        5 x 5 x 5 points of the voxel.

    Returns
    -------
    csr_array (N, V) of float64
        Weights, not normalised; columns sorted. Voxels outside the set are left out.

    Raises
    ------
    StudyError
        If the weighting is unknown, or a centre or radius is no usable number.
    """
    columns: list[NDArray[np.int64]] = []
    values: list[NDArray[np.float64]] = []
    for ijk, weights in _members(voxels.grid, centres, radii, weighting):
        rows = voxels.rows_at(ijk)
        order = np.argsort(rows)
        order = order[rows[order] >= 0]
        columns.append(rows[order])
        values.append(weights[order])
    ends = np.cumsum([0, *(len(row) for row in columns)])
    shape = (len(columns), len(voxels))
    if not columns:
        return csr_array(shape, dtype=np.float64)
    return csr_array((np.concatenate(values), np.concatenate(columns), ends), shape=shape)


def sphere_coverage(
    voxels: VoxelSet, centres: ArrayLike, radii: ArrayLike, weighting: str = "hard"
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Measure how much of each whole sphere a voxel set holds.

    Parameters are those of `sphere_weights`. The whole sphere is the one on the endless grid.

    Returns
    -------
    coverage : array (N,)
        Share of the whole sphere's weight inside the set, 0 to 1.
    leaves_image : array (N,) of bool
        Whether part of the sphere lies beyond the image.
    """
    coverage, leaves = [], []
    for ijk, weights in _members(voxels.grid, centres, radii, weighting):
        held = voxels.rows_at(ijk) >= 0
        coverage.append(weights[held].sum() / weights.sum())
        leaves.append(bool(((ijk < 0) | (ijk >= voxels.grid.shape)).any()))
    return np.array(coverage, dtype=np.float64), np.array(leaves, dtype=bool)


def cloud_exclusion(
    voxels: VoxelSet, centres: ArrayLike, radii: ArrayLike, margin: float
) -> NDArray[np.bool_]:
    """Mark the voxels held by any sphere widened by a margin.

    Parameters
    ----------
    voxels, centres, radii
        As in `sphere_weights`.
    margin : float
        Added to every radius, mm, 0 or more.

    Returns
    -------
    array (V,) of bool
        True where a voxel belongs to the union, the voxels that contain the centres included.
    """
    excluded = np.zeros(len(voxels), dtype=bool)
    widened = np.asarray(radii, dtype=np.float64) + margin
    for ijk, _ in _members(voxels.grid, centres, widened, "hard"):
        rows = voxels.rows_at(ijk)
        excluded[rows[rows >= 0]] = True
    return excluded


def _members(grid: Grid, centres: ArrayLike, radii: ArrayLike, weighting: str) -> Iterator[Member]:
    """Indices (k, 3) and weights (k,) of each sphere's voxels on the endless grid."""
    centres, radii = _checked(centres, radii, weighting)
    steps = grid.affine[:3, :3]
    soft = weighting == "soft"
    inside_voxel = _sub_voxel_points() @ steps.T if soft else np.zeros((1, 3))
    reach = float(np.linalg.norm(inside_voxel, axis=1).max())
    nearest = grid.voxel_of(centres)
    off_centre = grid.to_world(nearest) - centres
    windows = {radius: _window(grid, radius + reach) for radius in np.unique(radii)}
    for base, shift, radius in zip(nearest, off_centre, radii, strict=True):
        offsets = windows[radius]
        from_centre = offsets @ steps.T + shift
        distance = np.linalg.norm(from_centre, axis=1)
        weights = (distance <= radius - reach + _SLACK).astype(np.float64)
        if soft:
            edge = np.flatnonzero((distance <= radius + reach + _SLACK) & (weights == 0))
            # |a + b|^2 as |a|^2 + 2 a.b + |b|^2, which spares an array of every point
            square = (distance[edge] ** 2)[:, None] + 2 * from_centre[edge] @ inside_voxel.T
            within = square + (inside_voxel**2).sum(axis=1) <= (radius + _SLACK) ** 2
            weights[edge] = within.mean(axis=1)
        own = len(offsets) // 2  # the window is symmetric about the voxel that holds the centre
        weights[own] = max(weights[own], 1 / len(inside_voxel))
        held = weights > 0
        yield base + offsets[held], weights[held]


def _checked(
    centres: ArrayLike, radii: ArrayLike, weighting: str
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    points = np.asarray(centres, dtype=np.float64).reshape(-1, 3)
    lengths = np.broadcast_to(np.asarray(radii, dtype=np.float64), len(points))
    problems = []
    if weighting not in WEIGHTINGS:
        problems.append(Problem("weighting", repr(weighting), " or ".join(WEIGHTINGS)))
    if not np.isfinite(points).all():
        problems.append(Problem("centre", "a coordinate is not a number", "finite mm"))
    if not (np.isfinite(lengths).all() and (lengths >= 0).all()):
        problems.append(Problem("radius", f"{lengths.min():g}", "0 mm or more"))
    if problems:
        raise StudyError(*problems)
    return points, lengths


def _window(grid: Grid, radius: float) -> NDArray[np.int64]:
    """Every index offset a ball can reach, wherever in the middle voxel its centre lies."""
    # the extent of a ball along an index axis is its radius times the norm of that row of the
    # inverse affine, which holds for oblique and sheared axes too
    reach = radius * np.linalg.norm(grid.inverse[:3, :3], axis=1)
    half = np.floor(reach + 0.5 + 1e-5).astype(np.int64)
    axes = [np.arange(-size, size + 1) for size in half]
    return np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)


def _sub_voxel_points() -> NDArray[np.float64]:
    """Evenly spaced points of a unit voxel about its centre, (125, 3), in voxel units."""
    along = (np.arange(_SAMPLES) + 0.5) / _SAMPLES - 0.5
    return np.stack(np.meshgrid(along, along, along, indexing="ij"), axis=-1).reshape(-1, 3)
