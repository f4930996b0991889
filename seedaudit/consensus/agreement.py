"""Agreement of placements voxel by voxel: shares, safe and contested maps, conjunction, spread.

Every function takes placements as rows. Which rows those are is the caller's choice; the audit
passes the drawn placements, because the reported one is the reference and not a draw.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
Classes = NDArray[np.int8]
Counts = NDArray[np.int32]

# An int8 sum of this many classes cannot overflow.
_INT8_ROWS = 127


class Spread(NamedTuple):
    """Mean, SD (ddof 1), minimum and maximum over placements, each (V,)."""

    mean: FloatArray
    sd: FloatArray
    minimum: FloatArray
    maximum: FloatArray


def class_counts(classes: Classes) -> Counts:
    """Number of placements in each class at every voxel.

    Parameters
    ----------
    classes : (N, V) int8 array
        -1, 0, +1.

    Returns
    -------
    (V, 3) int32 array
        Counts of +, 0 and -, in this order; rows sum to N.
    """
    n_placements, n_voxels = classes.shape
    signed = np.zeros(n_voxels, dtype=np.int32)
    nonzero = np.zeros(n_voxels, dtype=np.int32)
    # Short int8 sums keep a whole row in few cache lines; the last bit of -1 and of +1 is 1.
    for start in range(0, n_placements, _INT8_ROWS):
        part_signed = np.zeros(n_voxels, dtype=np.int8)
        part_nonzero = np.zeros(n_voxels, dtype=np.int8)
        for row in classes[start : start + _INT8_ROWS]:
            part_signed += row
            part_nonzero += row & 1
        signed += part_signed
        nonzero += part_nonzero
    positive = (nonzero + signed) // 2
    counts = np.stack([positive, n_placements - nonzero, nonzero - positive], axis=1)
    return counts.astype(np.int32, copy=False)


def agreement_shares(counts: Counts) -> tuple[FloatArray, FloatArray]:
    """Share of placements in class + and in class - at every voxel.

    Parameters
    ----------
    counts : (V, 3) int array
        From `class_counts`.

    Returns
    -------
    positive, negative : (V,) arrays, 0 to 1
    """
    total = counts.sum(axis=1)
    return counts[:, 0] / total, counts[:, 2] / total


def modal_class(counts: Counts) -> tuple[Classes, FloatArray]:
    """Most frequent class of every voxel, and its share.

    A tie goes to 0 where 0 takes part in it (no claim without a majority), else to +.

    Parameters
    ----------
    counts : (V, 3) int array
        From `class_counts`.

    Returns
    -------
    modal : (V,) int8 array
    share : (V,) array, 0 to 1
    """
    positive, zero, negative = counts.T
    tail = np.where(positive >= negative, 1, -1)
    modal = np.where(zero >= np.maximum(positive, negative), 0, tail).astype(np.int8)
    return modal, counts.max(axis=1) / counts.sum(axis=1)


def safe_map(counts: Counts, safe: float = 0.95) -> Classes:
    """Class that at least a share `safe` of the placements gives the voxel, 0 where none does.

    Parameters
    ----------
    counts : (V, 3) int array
        From `class_counts`.
    safe : float
        Share of placements, above 0.5 and at most 1.

    Returns
    -------
    (V,) int8 array
        +1 or -1 where that non-zero class is safe.
    """
    positive, negative = agreement_shares(counts)
    return (positive >= safe).astype(np.int8) - (negative >= safe).astype(np.int8)


def contested_map(counts: Counts, safe: float = 0.95) -> NDArray[np.bool_]:
    """Voxels where the share in + or the share in - lies strictly between 1 - safe and safe.

    Parameters
    ----------
    counts : (V, 3) int array
        From `class_counts`.
    safe : float
        Share of placements, above 0.5 and at most 1.

    Returns
    -------
    (V,) bool array
    """
    total = counts.sum(axis=1, keepdims=True)
    tails = counts[:, [0, 2]]
    # The share outside is divided out anew: 1 - 0.9 is not the double nearest to 0.1.
    between = (tails / total < safe) & ((total - tails) / total < safe)
    return np.asarray(between.any(axis=1))


def conjunction(lowest: FloatArray, highest: FloatArray) -> FloatArray:
    """Smallest |t| over placements with its sign where the sign is constant, else 0.

    Parameters
    ----------
    lowest, highest : (V,) arrays
        Smallest and largest t or standard normal score over the placements; NaN stays NaN.

    Returns
    -------
    (V,) float64 array
        To be held against the ordinary critical value of one map.

    Notes
    -----
    Minimum statistic, conjunction null: Nichols T. et al. (2005) NeuroImage 25:653-660.
    """
    return np.asarray(np.maximum(lowest, 0.0) + np.minimum(highest, 0.0))


def effect_spread(effects: NDArray[np.floating[Any]]) -> Spread:
    """Mean, SD, minimum and maximum of the group effect over placements.

    Parameters
    ----------
    effects : (N, V) array
        Fisher z; NaN at one placement gives NaN.

    Returns
    -------
    Spread
        The SD is NaN for one placement.
    """
    n_placements, n_voxels = effects.shape
    mean = effects.mean(axis=0, dtype=np.float64)
    squares = np.zeros(n_voxels)
    # Deviations from the mean, row by row: no cancellation, and no float64 copy of all rows.
    for row in effects:
        squares += (row - mean) ** 2
    sd = np.sqrt(squares / (n_placements - 1)) if n_placements > 1 else np.full(n_voxels, np.nan)
    lowest, highest = effects.min(axis=0), effects.max(axis=0)
    return Spread(mean, sd, lowest.astype(np.float64), highest.astype(np.float64))


def placement_to_sampling(sd: FloatArray, se: FloatArray) -> FloatArray:
    """SD over placements divided by the standard error of the reported effect.

    Parameters
    ----------
    sd : (V,) array
        SD of the effect over placements, Fisher z.
    se : (V,) array
        Standard error of the effect at the reported placement, Fisher z.

    Returns
    -------
    (V,) array
        Above 1, the place of the seed matters more than who was scanned. NaN where `se` is 0.
    """
    ratio = np.full(np.shape(sd), np.nan)
    np.divide(sd, se, out=ratio, where=se > 0)
    return ratio
