"""The one mergeable state: sufficient statistics of the group model.

They form a commutative monoid, so that merging folds, workers, machines, resumed runs and halves
of the participants is one and the same addition.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import DTypeLike, NDArray

from seedaudit.sweep.correlate import ZBlock


@dataclass
class Moments:
    """Sufficient statistics of participants for N placements, V voxels and p design columns.

    Accumulated in float64: the residual sum of squares is a difference of large sums. When memory
    is short a fold's part may be float32, which costs a relative error of t of about 1e-7 times
    (mean/SD)² for the few participants of a fold; parts are merged in float64.

    Parameters
    ----------
    count : (V,) int32
        Participants who have the voxel.
    xtx : (p, p, V) float64
        Sum of x x'.
    xtz : (p, N, V) float64
        Sum of x z.
    zz : (N, V) float64
        Sum of z².
    variance : (N, V) float64 or None
        Sum of the known sampling variances of z; kept for a single participant.
    """

    count: NDArray[np.int32]
    xtx: NDArray[np.float64]
    xtz: NDArray[np.float64]
    zz: NDArray[np.float64]
    variance: NDArray[np.float64] | None = None

    @classmethod
    def empty(
        cls,
        p: int,
        n_placements: int,
        n_voxels: int,
        *,
        variance: bool = False,
        dtype: DTypeLike = np.float64,
    ) -> Moments:
        """The neutral element."""
        return cls(
            np.zeros(n_voxels, np.int32),
            np.zeros((p, p, n_voxels)),
            np.zeros((p, n_placements, n_voxels), dtype),
            np.zeros((n_placements, n_voxels), dtype),
            np.zeros((n_placements, n_voxels), dtype) if variance else None,
        )

    def add(self, x: NDArray[np.float64], block: ZBlock) -> None:
        """Add one participant's z at the voxels of a block.

        Parameters
        ----------
        x : (p,)
            The participant's row of the design matrix.
        block : ZBlock
        """
        where, z = block.where, block.z.astype(np.float64)
        self.count[where] += block.valid
        self.xtx[:, :, where] += np.multiply.outer(np.outer(x, x), block.valid)
        for j, value in enumerate(x):
            self.xtz[j, :, where] += value * z
        z *= z
        self.zz[:, where] += z
        if self.variance is not None and block.variance is not None:
            self.variance[:, where] += block.variance

    def __iadd__(self, other: Moments) -> Moments:
        for mine, theirs in zip(self._arrays(), other._arrays(), strict=True):
            mine += theirs
        return self

    def __sub__(self, other: Moments) -> Moments:
        """What is left when a part is taken out again (a fold, for the jackknife)."""
        pairs = zip(self._arrays(), other._arrays(), strict=True)
        return Moments(*(mine - theirs for mine, theirs in pairs))

    def placements(self, rows: slice | NDArray[np.int_]) -> Moments:
        """The state of some placements only (a view, when `rows` is a slice)."""
        known = None if self.variance is None else self.variance[rows]
        return Moments(self.count, self.xtx, self.xtz[:, rows], self.zz[rows], known)

    def voxels(self, keep: NDArray[np.bool_]) -> Moments:
        """The state of some voxels only (a copy)."""
        return Moments(*(array[..., keep] for array in self._arrays()))

    @property
    def n_bytes(self) -> int:
        """Memory of the state in bytes."""
        return sum(array.nbytes for array in self._arrays())

    def named_arrays(self) -> list[tuple[str, NDArray[Any]]]:
        """The arrays of the state by name, those that are kept."""
        pairs = ((field.name, getattr(self, field.name)) for field in fields(self))
        return [(name, value) for name, value in pairs if value is not None]

    def _arrays(self) -> list[NDArray[Any]]:
        return [value for _, value in self.named_arrays()]


def _wide(array: NDArray[Any]) -> DTypeLike:
    return np.float64 if array.dtype.kind == "f" else array.dtype


def merged(parts: Iterable[Moments]) -> Moments:
    """Sum of the parts in float64, in the order given, so that the digits are always the same."""
    first, *others = parts
    total = Moments(*(array.astype(_wide(array)) for array in first._arrays()))
    for part in others:
        total += part
    return total
