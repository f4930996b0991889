"""The one mergeable state: sufficient statistics of the group model.

They form a commutative monoid, so that merging folds, workers, machines, resumed runs and halves
of the participants is one and the same addition.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from math import floor, log2
from typing import Any, Protocol

import numpy as np
from numpy.typing import DTypeLike, NDArray

from seedaudit.sweep.correlate import LARGEST_Z, ZBlock

Voxels = NDArray[np.bool_] | NDArray[np.integer[Any]] | slice

XX = 2.0**-50
"""Products of columns of the design, which have unit norm, are added up as multiples of this: sums
below 8 are then exact, and the order of adding cannot matter."""

_ROWS = 16  # placements added at once, so that what is computed on the way stays in cache


COARSEST = 2.0**-15
"""Step of z'z above which 32 bits no longer hold what t needs: for folds of some 460."""

LEAST_DF = 2
"""With fewer residual degrees of freedom in half of the participants, one fold left out, residual
sums of squares are often next to nothing, and 32 bits no longer tell them from it."""


@dataclass(frozen=True)
class Steps:
    """What one unit of a state in whole numbers is worth: of X'z, and of z'z.

    Sums of whole numbers are exact, so that the order of adding and merging cannot matter; and the
    rounding of a contribution does not grow with its size, so that a small variance beside a large
    mean keeps its digits, as it would not in float32.

    Parameters
    ----------
    xz, zz : float
        Powers of two.
    bits : int
        32 or 64, of a number.
    """

    xz: float
    zz: float
    bits: int = 32

    @property
    def dtype(self) -> np.dtype[Any]:
        """Of the numbers."""
        return np.dtype(f"i{self.bits // 8}")

    @classmethod
    def of(cls, design: NDArray[np.float64], folds: Iterable[NDArray[np.int_]]) -> Steps:
        """The finest steps with which no sum of a fold can pass the range.

        Parameters
        ----------
        design : (n, p)
        folds : iterable of (n_g,) int
            Rows of the design in each fold.
        """
        parts = [design[rows] for rows in folds]
        sizes = sorted(len(part) for part in parts)
        # the smallest half of the folds, and what is left of it without one of them
        least_df = sum(sizes[: max(1, len(sizes) // 2 - 1)]) - design.shape[1]
        xz = max(np.abs(part).sum(axis=0).max() for part in parts) * LARGEST_Z
        zz = max(len(part) for part in parts) * LARGEST_Z**2

        def finest(exponent: int, bits: int) -> Steps:
            of_xz, of_zz = (2.0 ** -floor(exponent - log2(largest)) for largest in (xz, zz))
            return cls(of_xz, of_zz, bits)

        # one bit is spared for the rounding of each contribution; float64 holds 52
        narrow = finest(30, 32)
        return narrow if narrow.zz <= COARSEST and least_df >= LEAST_DF else finest(52, 64)


@dataclass
class Sums:
    """Sums of one placement over some participants: X'z (p, V), z'z (V,) and, where it is known,
    the summed sampling variance of z (V,); float64. May be views, so they are not to be changed.
    """

    xtz: NDArray[np.float64]
    zz: NDArray[np.float64]
    known: NDArray[np.float64] | None = None

    def __sub__(self, other: Sums) -> Sums:
        known = None if self.known is None or other.known is None else self.known - other.known
        return Sums(self.xtz - other.xtz, self.zz - other.zz, known)


def total_sums(parts: Iterable[Sums]) -> Sums:
    """The sum of the parts, as a copy."""
    first, *others = parts
    known = None if first.known is None else first.known.copy()
    total = Sums(first.xtz.copy(), first.zz.copy(), known)
    for part in others:
        total.xtz += part.xtz
        total.zz += part.zz
        if total.known is not None and part.known is not None:
            total.known += part.known
    return total


class FoldState(Protocol):
    """The state of a fold as conclusions read it: placement by placement, in float64."""

    @property
    def n_placements(self) -> int:
        """N"""

    def frame(self, voxels: Voxels) -> Moments:
        """What the placements share, counts and X'X, at some voxels; it holds no placement."""

    def sums(self, placement: int, voxels: Voxels) -> Sums:
        """The sums of one placement at some voxels."""


@dataclass
class Moments:
    """Sufficient statistics of participants for N placements, V voxels and p design columns.

    The residual sum of squares is a difference of large sums. A state in float64 bears that, and
    so does one in whole numbers, mostly of 32 bits and so in half the memory (see `Steps`).

    Parameters
    ----------
    count : (V,) int32
        Participants who have the voxel.
    xtx : (p, p, V) float64
        Sum of x x'.
    xtz : (p, N, V) float64 or int
        Sum of x z.
    zz : (N, V) float64 or int
        Sum of z².
    variance : (N, V) float64 or None
        Sum of the known sampling variances of z; kept for a single participant.
    steps : Steps or None
        What the whole numbers are worth; None for a state in float64.
    """

    count: NDArray[np.int32]
    xtx: NDArray[np.float64]
    xtz: NDArray[Any]
    zz: NDArray[Any]
    variance: NDArray[np.float64] | None = None
    steps: Steps | None = None

    @classmethod
    def empty(
        cls,
        p: int,
        n_placements: int,
        n_voxels: int,
        *,
        variance: bool = False,
        steps: Steps | None = None,
    ) -> Moments:
        """The neutral element."""
        dtype: DTypeLike = np.float64 if steps is None else steps.dtype
        return cls(
            np.zeros(n_voxels, np.int32),
            np.zeros((p, p, n_voxels)),
            np.zeros((p, n_placements, n_voxels), dtype),
            np.zeros((n_placements, n_voxels), dtype),
            np.zeros((n_placements, n_voxels)) if variance else None,
            steps,
        )

    def clear(self) -> None:
        """Become the neutral element again, in the same memory."""
        for _, array in self.named_arrays():
            array.fill(0)

    def add(self, x: NDArray[np.float64], block: ZBlock) -> None:
        """Add one participant's z at the voxels of a block.

        Parameters
        ----------
        x : (p,)
            The participant's row of the design matrix.
        block : ZBlock
        """
        where = block.where
        self.count[where] += block.valid
        self.xtx[:, :, where] += np.multiply.outer(whole(np.outer(x, x), XX), block.valid)
        for start in range(0, self.n_placements, _ROWS):
            rows = slice(start, start + _ROWS)
            z = block.z[rows].astype(np.float64)
            if self.steps is None:
                for j, value in enumerate(x):
                    self.xtz[j, rows, where] += value * z
                self.zz[rows, where] += z * z
                continue
            for j, value in enumerate(x):
                units = np.rint((value / self.steps.xz) * z)
                self.xtz[j, rows, where] += units.astype(self.steps.dtype)
            z *= z
            z *= 1 / self.steps.zz
            self.zz[rows, where] += np.rint(z, out=z).astype(self.steps.dtype)
        if self.variance is not None and block.variance is not None:
            self.variance[:, where] += block.variance

    @property
    def n_placements(self) -> int:
        """N"""
        return self.zz.shape[0]

    def frame(self, voxels: Voxels) -> Moments:
        """See `FoldState`."""
        n_voxels = len(self.count[voxels])
        none = np.zeros((0, n_voxels))
        return Moments(
            self.count[voxels],
            self.xtx[:, :, voxels],
            np.zeros((self.xtz.shape[0], 0, n_voxels)),
            none,
            None if self.variance is None else none,
        )

    def sums(self, placement: int, voxels: Voxels) -> Sums:
        """See `FoldState`."""
        known = None if self.variance is None else self.variance[placement][voxels]
        xtz, zz = self.xtz[:, placement][:, voxels], self.zz[placement][voxels]
        return in_float64(xtz, zz, known, self.steps)

    def __iadd__(self, other: Moments) -> Moments:
        for (_, mine), (_, theirs) in zip(self.named_arrays(), other.named_arrays(), strict=True):
            mine += theirs
        return self

    def __sub__(self, other: Moments) -> Moments:
        """What is left when a part is taken out again (a fold, for the jackknife)."""
        known = None
        if self.variance is not None and other.variance is not None:
            known = self.variance - other.variance
        return Moments(
            self.count - other.count,
            self.xtx - other.xtx,
            self.xtz - other.xtz,
            self.zz - other.zz,
            known,
            self.steps,
        )

    def named_arrays(self) -> list[tuple[str, NDArray[Any]]]:
        """The arrays of the state by name, those that are kept."""
        names = ("count", "xtx", "xtz", "zz", "variance")
        pairs = ((name, getattr(self, name)) for name in names)
        return [(name, value) for name, value in pairs if value is not None]

    def copy(self) -> Moments:
        """The same in memory of its own."""
        known = None if self.variance is None else self.variance.copy()
        return Moments(
            self.count.copy(), self.xtx.copy(), self.xtz.copy(), self.zz.copy(), known, self.steps
        )

    def wide(self) -> Moments:
        """A copy in float64."""
        known = None if self.variance is None else self.variance.copy()
        xz, zz = (1.0, 1.0) if self.steps is None else (self.steps.xz, self.steps.zz)
        return Moments(self.count.copy(), self.xtx.copy(), self.xtz * xz, self.zz * zz, known)


def in_float64(
    xtz: NDArray[Any], zz: NDArray[Any], known: NDArray[np.float64] | None, steps: Steps | None
) -> Sums:
    """Sums from the rows of a state."""
    return Sums(xtz, zz, known) if steps is None else Sums(xtz * steps.xz, zz * steps.zz, known)


@dataclass(frozen=True)
class Chosen:
    """Some placements of a fold's state, by their rows; a `FoldState` itself."""

    state: FoldState
    rows: NDArray[np.int_]

    @property
    def n_placements(self) -> int:
        """N"""
        return len(self.rows)

    def frame(self, voxels: Voxels) -> Moments:
        """See `FoldState`."""
        return self.state.frame(voxels)

    def sums(self, placement: int, voxels: Voxels) -> Sums:
        """See `FoldState`."""
        return self.state.sums(int(self.rows[placement]), voxels)


def whole(values: NDArray[np.float64], step: float) -> NDArray[np.float64]:
    """Round to whole multiples of a power of two, in place: their sums are then exact."""
    values /= step
    np.rint(values, out=values)
    values *= step
    return values


def merged(parts: Iterable[Moments]) -> Moments:
    """Sum of the parts in float64."""
    first, *others = parts
    total = first.wide()
    for part in others:
        total += part.wide()
    return total
