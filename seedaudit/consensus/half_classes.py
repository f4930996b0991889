"""Class maps of two halves of the participants, and how much they agree.

Half as many participants pass a test of significance at far fewer voxels, which says nothing
about the seed. So the class maps of halves are cut by t to the sizes, tail by tail, that the
placement's map has with all participants.
"""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from itertools import compress, product
from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.consensus.chance import ac1_from_shares
from seedaudit.consensus.halves import mean_defined
from seedaudit.consensus.overlap import dice
from seedaudit.inference.glm import Estimate, uniform_estimate
from seedaudit.sweep.moments import FoldState, Sums, total_sums

FloatArray = NDArray[np.float64]
Classes = NDArray[np.int8]
HalfClasses = dict[tuple[int, int], Classes | None]

MEASURES = ("ac1", "dice_positive", "dice_negative")


def class_similarity(
    folds: Sequence[FoldState],
    sizes: Sequence[int],
    xtx: FloatArray,
    contrast: FloatArray,
    placements: NDArray[np.integer[Any]],
    rows: NDArray[np.integer[Any]],
    tails: NDArray[np.integer[Any]],
    regions: NDArray[np.integer[Any]],
    n_regions: int,
    members: NDArray[np.bool_],
    workers: int = 1,
) -> dict[str, FloatArray]:
    """AC1 and Dice between the classes of two halves, as in `ceiling`.

    Parameters
    ----------
    xtx : (G, p, p)
        X'X of each fold.
    placements : (M,) int
        Placements to compare with the reported one; the first of them is the reported one itself.
    rows : (A,) int
        Voxels that every participant has.
    members : (S, G) bool
        Folds of the first halves.
    workers : int
        Threads.

    Returns
    -------
    dict of (1 + G, M, 1 + K) arrays
        Means over splits, over which half holds the reported map, and over what is defined.
    """
    bucket = np.where(regions < 0, n_regions, regions).astype(np.int64)
    shape = (1 + len(folds), len(placements), 2 * len(members), 1 + n_regions)
    found = {name: np.full(shape, np.nan) for name in MEASURES}

    def classes(placement: int) -> list[HalfClasses]:
        parts = [fold.sums(placement, rows) for fold in folds]
        return [_half_classes(parts, xtx, sizes, contrast, m, tails[:, placement]) for m in members]

    reported = classes(int(placements[0]))

    def compare(m: int) -> None:
        shifted = classes(int(placements[m])) if m else reported
        for s, (one, other) in enumerate(zip(reported, shifted, strict=True)):
            for variant, half in product(range(1 + len(folds)), (0, 1)):
                x, y = one[half, variant], other[1 - half, variant]
                if x is None or y is None:
                    continue
                for name, value in _measures(bucket, n_regions, x, y).items():
                    found[name][variant, m, 2 * s + half] = value

    with ThreadPoolExecutor(workers) as pool:
        list(pool.map(compare, range(len(placements))))
    return {name: mean_defined(values, axis=2) for name, values in found.items()}


def _half_classes(
    parts: Sequence[Sums],
    xtx: FloatArray,
    sizes: Sequence[int],
    contrast: FloatArray,
    inside: NDArray[np.bool_],
    tails: NDArray[np.integer[Any]],
) -> HalfClasses:
    """Classes by half and variant: 0 has all folds, variant 1 + g is without fold g.

    None where a half is too small for the design.
    """
    made: HalfClasses = {}
    for half, chosen in enumerate((inside, ~inside)):
        total, frame = total_sums(compress(parts, chosen)), xtx[chosen].sum(axis=0)
        n = int(np.asarray(sizes)[chosen].sum())
        # where the fold is in the other half, only the sizes change
        same = np.flatnonzero(np.concatenate([[True], ~chosen]))
        everyone = _classes(uniform_estimate(frame, total, n, contrast), tails[same])
        made |= {(half, int(variant)): c for variant, c in zip(same, everyone, strict=True)}
        for g in np.flatnonzero(chosen).tolist():
            rest = uniform_estimate(frame - xtx[g], total - parts[g], n - sizes[g], contrast)
            made[half, g + 1] = _classes(rest, tails[g + 1 : g + 2])[0]
    return made


def _classes(
    estimate: Estimate | None, tails: NDArray[np.integer[Any]]
) -> Sequence[Classes | None]:
    """The so many largest t as class +, the so many smallest as class -, for pairs of sizes."""
    if estimate is None:
        return [None] * len(tails)
    t = np.nan_to_num(estimate.statistic.astype(np.float32))
    upper, lower = len(t) - np.maximum(tails[:, 0], 1), np.maximum(tails[:, 1], 1) - 1
    ordered = np.partition(t, np.unique(np.concatenate([upper, lower])))
    made = []
    for positive, negative, high, low in zip(*tails.T, ordered[upper], ordered[lower], strict=True):
        # no class against the sign, also where the half has fewer voxels of it
        above = (t >= high) & (t > 0) & (positive > 0)
        below = (t <= low) & (t < 0) & (negative > 0)
        made.append(above.astype(np.int8) - below)
    return made


def _measures(
    bucket: NDArray[np.int64], n_regions: int, x: Classes, y: Classes
) -> dict[str, FloatArray]:
    """AC1 of two raters and Dice of each tail, for the whole map and each region, (1 + K,)."""
    code = bucket * 9 + (x.astype(np.int64) * 3 + y + 4)
    counts = np.bincount(code, minlength=9 * (n_regions + 1)).reshape(-1, 3, 3)
    joint = np.concatenate([counts.sum(axis=0)[None], counts[:n_regions]]).astype(np.float64)
    total = joint.sum(axis=(1, 2))
    total = np.where(total > 0, total, np.nan)
    agreement = np.einsum("kii->k", joint) / total
    in_x, in_y = joint.sum(axis=2), joint.sum(axis=1)
    shares = (in_x + in_y) / 2 / total[:, None]
    return {
        "ac1": ac1_from_shares(agreement, shares),
        "dice_positive": dice(joint[:, 2, 2], in_x[:, 2], in_y[:, 2]),
        "dice_negative": dice(joint[:, 0, 0], in_x[:, 0], in_y[:, 0]),
    }
