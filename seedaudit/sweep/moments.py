"""The one mergeable state: sufficient statistics of the group model.

They form a commutative monoid, so that merging folds, workers, machines, resumed runs and halves
of the participants is one and the same addition.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, fields
from typing import Any, Protocol

import numpy as np
from numpy.typing import DTypeLike, NDArray

from seedaudit.sweep.correlate import ZBlock

Voxels = NDArray[np.bool_] | NDArray[np.integer[Any]] | slice

XX, XZ, ZZ = 2.0**-50, 2.0**-44, 2.0**-38
"""What is added up in float64 are whole multiples of these steps: sums below 2^53 of them are exact
(X'X below 8, X'z below 512, z'z below 32,768; the columns of the design have unit norm, and |z| is
8.4 at the most), so that the order of adding and merging cannot matter. A step is far below the
rounding of z in float32."""

_ROWS = 16  # placements added at once, so that what is computed on the way stays in cache


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

    Accumulated in float64, exactly (see `ZZ`): the residual sum of squares is a difference of
    large sums. When memory is short a fold's part may be float32, which costs a relative error of
    t of about 1e-7 times (mean/SD)² for the few participants of a fold, and exactness; parts are
    merged in float64.

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
        where = block.where
        self.count[where] += block.valid
        self.xtx[:, :, where] += np.multiply.outer(_whole_steps(np.outer(x, x), XX), block.valid)
        for start in range(0, self.n_placements, _ROWS):
            rows = slice(start, start + _ROWS)
            z = block.z[rows].astype(np.float64)
            for j, value in enumerate(x):
                self.xtz[j, rows, where] += _whole_steps(value * z, XZ)
            self.zz[rows, where] += _whole_steps(z * z, ZZ)
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
        known = None if self.variance is None else _wide(self.variance[placement][voxels])
        return Sums(
            _wide(self.xtz[:, placement][:, voxels]), _wide(self.zz[placement][voxels]), known
        )

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

    def named_arrays(self) -> list[tuple[str, NDArray[Any]]]:
        """The arrays of the state by name, those that are kept."""
        pairs = ((field.name, getattr(self, field.name)) for field in fields(self))
        return [(name, value) for name, value in pairs if value is not None]

    def _arrays(self) -> list[NDArray[Any]]:
        return [value for _, value in self.named_arrays()]


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


def _wide(array: NDArray[Any]) -> NDArray[Any]:
    return array.astype(np.float64, copy=False) if array.dtype.kind == "f" else array


def _whole_steps(values: NDArray[np.float64], step: float) -> NDArray[np.float64]:
    """Round to multiples of a step, in place: beside so large a number nothing smaller is kept."""
    large = 1.5 * 2.0**52 * step
    values += large
    values -= large
    return values


def merged(parts: Iterable[Moments]) -> Moments:
    """Sum of the parts in float64, in the order given, so that the digits are always the same."""
    first, *others = parts
    total = Moments(*(_wide(array).copy() for array in first._arrays()))
    for part in others:
        total += part
    return total
