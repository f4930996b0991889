"""Voxel grids and sets of voxels, in world millimetres and independent of storage order."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import permutations, product
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from seedaudit.errors import DataError, Problem

_FACE_SLACK = 1e-6  # voxels; a point this close to a face counts as lying on it
_FARTHEST = 1e7  # mm; no image of a body is there
_WORLD_LETTERS = ("LR", "PA", "IS")


@dataclass(frozen=True, eq=False)
class Grid:
    """A regular grid of voxels as an image stores it.

    Parameters
    ----------
    shape : tuple of 3 int
        Voxels along each stored axis, at least 1.
    affine : array (4, 4)
        Voxel index to RAS+ world, mm. Any orientation, voxel shape and handedness, and shear.

    Raises
    ------
    DataError
        If the shape is not three positive whole numbers, or the affine is not an invertible one.
    """

    shape: tuple[int, int, int]
    affine: NDArray[np.float64]

    def __post_init__(self) -> None:
        shape = tuple(int(size) for size in self.shape)
        if len(shape) != 3 or min(shape) < 1:
            raise DataError(Problem("grid shape", str(shape), "three whole numbers, 1 or more"))
        affine = np.array(self.affine, dtype=np.float64)
        if not _is_usable(affine):
            raise DataError(
                Problem(
                    "grid affine",
                    str(affine.tolist()),
                    "4 x 4, finite, within 10 km, last row 0 0 0 1, three axes that span space",
                    "set the orientation in the header of the image again",
                )
            )
        affine.setflags(write=False)
        object.__setattr__(self, "shape", shape)
        object.__setattr__(self, "affine", affine)

    @cached_property
    def voxel_sizes(self) -> NDArray[np.float64]:
        """Length of one step along each stored axis, (3,), mm."""
        return np.asarray(np.linalg.norm(self.affine[:3, :3], axis=0))

    @property
    def voxel_volume(self) -> float:
        """Volume of one voxel, mm3."""
        return float(abs(np.linalg.det(self.affine[:3, :3])))

    @property
    def largest_edge(self) -> float:
        """Length of the longest voxel edge, mm."""
        return float(self.voxel_sizes.max())

    @cached_property
    def inverse(self) -> NDArray[np.float64]:
        """World to voxel index, (4, 4)."""
        return np.asarray(np.linalg.inv(self.affine))

    @cached_property
    def canonical_axes(self) -> tuple[tuple[int, ...], tuple[bool, ...]]:
        """Stored axis closest to R, A and S, and whether each runs against its letter.

        The assignment has the largest summed |cosine|. Ties (an image turned by 45 degrees) are
        settled by the world directions alone, so the storage order has no say in them.
        """
        cosines = self.affine[:3, :3] / self.voxel_sizes

        def merit(axes: tuple[int, ...]) -> tuple[float, ...]:
            toward = np.diag(cosines[:, axes])
            directions = cosines[:, axes] * np.where(toward < 0, -1, 1)
            # adding 0.0 turns -0.0 into 0.0; rounding keeps header noise out of a tie
            rounded = np.round(directions, 4) + 0.0
            return float(np.round(np.abs(toward).sum(), 4)), *rounded.T.ravel().tolist()

        axes = max(permutations(range(3)), key=merit)
        return axes, tuple(bool(cosines[world, axis] < 0) for world, axis in enumerate(axes))

    @property
    def orientation(self) -> str:
        """World direction nearest to each stored axis as letters, such as ``LAS``."""
        letters = [""] * 3
        for world, (axis, reverse) in enumerate(zip(*self.canonical_axes, strict=True)):
            letters[axis] = _WORLD_LETTERS[world][0 if reverse else 1]
        return "".join(letters)

    def corners(self) -> NDArray[np.float64]:
        """World coordinates of the centres of the eight corner voxels, (8, 3), mm."""
        return self.to_world(np.array(list(product(*((0, size - 1) for size in self.shape)))))

    def matches(self, other: Grid, tolerance: float = 1e-3) -> bool:
        """Whether two grids have one shape and every corner within `tolerance` mm."""
        return self.shape == other.shape and self._corner_distance(other) <= tolerance

    def difference(self, other: Grid, tolerance: float = 1e-3) -> str:
        """Words for what differs between two grids, empty when they match."""
        if self.matches(other, tolerance):
            return ""
        pairs: list[tuple[str, ...]] = []
        if self.shape != other.shape:
            pairs.append(("shape", _joined(self.shape, " x "), _joined(other.shape, " x ")))
        if not np.allclose(self.voxel_sizes, other.voxel_sizes, rtol=0, atol=1e-5):
            sizes = (_joined(grid.voxel_sizes, " x ") + " mm" for grid in (self, other))
            pairs.append(("voxel size", *sizes))
        turned = not np.allclose(
            self.affine[:3, :3] / self.voxel_sizes,
            other.affine[:3, :3] / other.voxel_sizes,
            rtol=0,
            atol=1e-5,
        )
        if turned:
            pairs.append(("orientation", *(_turn(grid) for grid in (self, other))))
        if np.abs(self.affine[:3, 3] - other.affine[:3, 3]).max() > tolerance:
            origins = (f"({_joined(grid.affine[:3, 3], ', ')}) mm" for grid in (self, other))
            pairs.append(("first voxel at", *origins))
        words = [f"{what} {mine} against {theirs}" for what, mine, theirs in pairs]
        if self.shape == other.shape:
            words.append(f"corners up to {self._corner_distance(other):.4g} mm apart")
        return "; ".join(words)

    def mirrors(self, other: Grid) -> bool:
        """Whether the same voxel lies on the other side, or the handedness is the opposite one."""
        sides = self.affine[0, :3] @ other.affine[0, :3]
        hands = np.linalg.det(self.affine[:3, :3]) * np.linalg.det(other.affine[:3, :3])
        return bool(sides < 0 or hands < 0)

    def _corner_distance(self, other: Grid) -> float:
        return float(np.linalg.norm(self.corners() - other.corners(), axis=1).max())

    def to_world(self, ijk: ArrayLike) -> NDArray[np.float64]:
        """World coordinates (..., 3), mm, of voxel indices (..., 3)."""
        indices = np.asarray(ijk, dtype=np.float64)
        return np.asarray(indices @ self.affine[:3, :3].T + self.affine[:3, 3])

    def to_voxel(self, xyz: ArrayLike) -> NDArray[np.float64]:
        """Voxel indices (..., 3), not rounded, of world coordinates (..., 3), mm."""
        points = np.asarray(xyz, dtype=np.float64) - self.affine[:3, 3]
        return np.asarray(points @ self.inverse[:3, :3].T)

    def contains(self, xyz: ArrayLike) -> NDArray[np.bool_]:
        """Whether world points (..., 3), mm, lie within the outer faces of the edge voxels."""
        ijk = self.to_voxel(xyz)
        low, high = -0.5 - _FACE_SLACK, np.array(self.shape) - 0.5 + _FACE_SLACK
        return np.asarray(((ijk >= low) & (ijk <= high)).all(axis=-1))

    def voxel_of(self, xyz: ArrayLike) -> NDArray[np.int64]:
        """Indices (..., 3) of the voxels that hold world points (..., 3), mm; may be off the image.

        A point on a face goes to the voxel on its right, anterior or superior side, however the
        image is stored; on the outermost face it goes to the edge voxel.
        """
        ijk = self.to_voxel(xyz)
        nearest = np.empty(ijk.shape, dtype=np.int64)
        for axis, reverse in zip(*self.canonical_axes, strict=True):
            at = ijk[..., axis]
            towards = -1 if reverse else 1
            index = towards * np.floor(towards * at + 0.5 + _FACE_SLACK)
            size = self.shape[axis]
            index = np.where((index == size) & (at <= size - 0.5 + _FACE_SLACK), size - 1, index)
            nearest[..., axis] = np.where((index == -1) & (at >= -0.5 - _FACE_SLACK), 0, index)
        return nearest


@dataclass(frozen=True, eq=False)
class VoxelSet:
    """The voxels of a mask as a list, in an order that does not depend on how they are stored.

    The order is that of an image stored along its closest R, A and S axes with R running fastest:
    the same world data, flipped or permuted in storage, gives the same list of points. Build one
    with `from_mask`.

    Parameters
    ----------
    grid : Grid
        The grid of the mask.
    ijk : array (V, 3) of int32
        Stored indices, in canonical order.
    """

    grid: Grid
    ijk: NDArray[np.int32]

    def __post_init__(self) -> None:
        ijk = np.array(self.ijk, dtype=np.int32).reshape(-1, 3)
        ijk.setflags(write=False)
        object.__setattr__(self, "ijk", ijk)

    @classmethod
    def from_mask(cls, grid: Grid, mask: ArrayLike) -> VoxelSet:
        """List the voxels where a mask of the grid's shape is true.

        Raises
        ------
        DataError
            If the mask has another shape than the grid.
        """
        inside = np.asarray(mask, dtype=bool)
        if inside.shape != grid.shape:
            raise DataError(
                Problem(
                    "mask", f"shape {inside.shape}", f"the grid's shape {grid.shape}", "resample it"
                )
            )
        axes, reverse = grid.canonical_axes
        turned = np.flip(inside.transpose(axes), tuple(np.flatnonzero(reverse)))
        canonical = np.argwhere(turned.T)[:, ::-1]
        ijk = np.empty_like(canonical)
        for column, axis in enumerate(axes):
            index = canonical[:, column]
            ijk[:, axis] = grid.shape[axis] - 1 - index if reverse[column] else index
        return cls(grid, ijk.astype(np.int32))

    def __len__(self) -> int:
        return len(self.ijk)

    @cached_property
    def xyz(self) -> NDArray[np.float64]:
        """World coordinates of the voxel centres, (V, 3), mm."""
        return self.grid.to_world(self.ijk)

    @cached_property
    def file_order(self) -> NDArray[np.int64]:
        """Position of each voxel in the volume as a NIfTI file stores it (first axis fastest)."""
        i, j, k = self.ijk.astype(np.int64).T
        return np.asarray(i + self.grid.shape[0] * (j + self.grid.shape[1] * k))

    @cached_property
    def _row_of_voxel(self) -> NDArray[np.int32]:
        rows = np.full(self.grid.shape, -1, dtype=np.int32)
        rows[tuple(self.ijk.T)] = np.arange(len(self), dtype=np.int32)
        return rows

    def volume(
        self, values: ArrayLike, fill: float | None = None, dtype: Any = None
    ) -> NDArray[Any]:
        """Put one value per voxel back into a volume.

        Parameters
        ----------
        values : array (V,)
            One value per voxel of the set.
        fill : float, optional
            Value elsewhere; NaN for floating types and 0 for others when left out.
        dtype : numpy dtype, optional
            Type of the volume; that of `values` when left out.

        Raises
        ------
        ValueError
            If there is not one value per voxel.
        """
        values = np.asarray(values)
        if values.shape != (len(self),):
            raise ValueError(f"values: shape {values.shape}, allowed ({len(self)},)")
        dtype = np.dtype(values.dtype if dtype is None else dtype)
        if fill is None:
            fill = np.nan if np.issubdtype(dtype, np.inexact) else 0
        out = np.full(self.grid.shape, fill, dtype=dtype, order="F")
        out[tuple(self.ijk.T)] = values
        return out

    def rows_at(self, ijk: ArrayLike) -> NDArray[np.int64]:
        """Row of each voxel (..., 3) of whole indices, -1 outside the set or the image."""
        indices = np.asarray(ijk)
        inside = np.asarray(((indices >= 0) & (indices < self.grid.shape)).all(axis=-1))
        i, j, k = np.moveaxis(np.where(inside[..., None], indices, 0), -1, 0)
        return np.where(inside, self._row_of_voxel[i, j, k], -1).astype(np.int64)

    def subset(self, keep: ArrayLike) -> VoxelSet:
        """Those voxels where `keep` (V,) is true, in the same order.

        Raises
        ------
        ValueError
            If `keep` is not one truth value per voxel.
        """
        chosen = np.asarray(keep)
        if chosen.dtype != bool or chosen.shape != (len(self),):
            raise ValueError(
                f"keep: {chosen.dtype} {chosen.shape}, allowed one bool per voxel ({len(self)},)"
            )
        return VoxelSet(self.grid, self.ijk[chosen])


def _is_usable(affine: NDArray[np.float64]) -> bool:
    if affine.shape != (4, 4) or not np.isfinite(affine).all():
        return False
    if not np.array_equal(affine[3], (0, 0, 0, 1)) or np.abs(affine).max() > _FARTHEST:
        return False
    sizes = np.linalg.norm(affine[:3, :3], axis=0)
    return bool(sizes.min() > 0 and abs(np.linalg.det(affine[:3, :3] / sizes)) > 1e-6)


def _joined(numbers: Any, separator: str) -> str:
    return separator.join(f"{number:.6g}" for number in numbers)


def _turn(grid: Grid) -> str:
    cosines = grid.affine[:3, :3] / grid.voxel_sizes
    tilt = np.degrees(np.arccos(np.clip(np.abs(cosines).max(axis=0), 0, 1))).max()
    return grid.orientation + (f" (tilted {tilt:.3g} degrees)" if tilt > 1e-3 else "")
