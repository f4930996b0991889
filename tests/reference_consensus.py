"""Naive reference, second half: from group maps to classes, agreement, overlap and chance.

Part of `tests.reference`, see there. NaN means undefined.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import stats

Array = NDArray[np.float64]


def two_sided_p(t: float, df: float) -> float:
    """Give the two-sided p of t on df degrees of freedom (normal when df is infinite)."""
    tail = stats.norm.sf(abs(t)) if math.isinf(df) else stats.t.sf(abs(t), df)
    return 2 * float(tail)


def fdr_cut(p: Sequence[float], level: float) -> float:
    """Give the largest p_(k) <= k level / m (Benjamini & Hochberg 1995), or -1 when none is."""
    cut = -1.0
    for k, value in enumerate(sorted(p), start=1):
        if value <= k * level / len(p):
            cut = value
    return cut


def density_cut(t: Sequence[float], level: float) -> float:
    """Give the round(level m)-th largest |t|; infinity when that is none. Ties all pass."""
    keep = round(level * len(t))
    return sorted((abs(value) for value in t), reverse=True)[keep - 1] if keep else math.inf


def classify(effect: Array, t: Array, df: float, rule: str, level: float) -> NDArray[np.int8]:
    """Give the class -1, 0, +1 of each voxel under one rule; a value on the cut passes."""
    if rule in ("p", "fdr", "bonferroni"):
        p = [two_sided_p(value, df) for value in t]
        cut = {"p": level, "fdr": fdr_cut(p, level), "bonferroni": level / max(1, len(p))}[rule]
        passes = [value <= cut for value in p]
    else:
        size = {"t": t, "effect": effect, "density": t}[rule]
        cut = density_cut(list(t), level) if rule == "density" else level
        passes = [abs(value) >= cut for value in size]
    signed = effect if rule == "effect" else t
    classes = np.zeros(len(t), dtype=np.int8)
    for row in range(len(t)):
        classes[row] = int(np.sign(signed[row])) if passes[row] else 0
    return classes


def share(classes: Sequence[int] | NDArray[np.int8], wanted: int) -> float:
    """Give the share of placements (or voxels) in one class; NaN for none at all."""
    return sum(int(c) == wanted for c in classes) / len(classes) if len(classes) else math.nan


def modal(positive: float, negative: float) -> tuple[int, float]:
    """Give the most frequent class and its share; a tie for the first place gives class 0."""
    shares = {1: positive, 0: 1 - positive - negative, -1: negative}
    top = max(shares.values())
    winners = [c for c, value in shares.items() if math.isclose(value, top, abs_tol=1e-9)]
    return (winners[0] if len(winners) == 1 else 0), top


def safe_class(positive: float, negative: float, safe: float) -> int:
    """Give +1 or -1 where at least `safe` of the placements agree on that tail, else 0."""
    if positive >= safe - 1e-9:
        return 1
    return -1 if negative >= safe - 1e-9 else 0


def is_contested(positive: float, negative: float, safe: float) -> bool:
    """Say whether the share of either tail lies strictly between 1 - safe and safe."""
    return any(1 - safe + 1e-9 < value < safe - 1e-9 for value in (positive, negative))


def conjunction(t: Sequence[float]) -> float:
    """Give sign * minimum |t| when all t have one sign, else 0 (Nichols 2005)."""
    signs = {int(np.sign(value)) for value in t}
    return signs.pop() * min(abs(value) for value in t) if len(signs) == 1 else 0.0


def spread(values: Sequence[float]) -> dict[str, float]:
    """Give mean, SD (ddof 1), minimum and maximum."""
    mean = sum(values) / len(values)
    squares = sum((value - mean) ** 2 for value in values)
    sd = math.sqrt(squares / (len(values) - 1)) if len(values) > 1 else math.nan
    return {"mean": mean, "sd": sd, "min": min(values), "max": max(values)}


def dice(a: Sequence[int], b: Sequence[int], tail: int) -> float:
    """Give 2 |A and B| / (|A| + |B|) of one tail (+1 or -1); NaN when both are empty."""
    size = sum(int(c) == tail for c in a) + sum(int(c) == tail for c in b)
    both = sum(int(x) == tail and int(y) == tail for x, y in zip(a, b, strict=True))
    return 2 * both / size if size else math.nan


def concordance(a: Array, b: Array) -> float:
    """Give 2 s_ab / (s_a^2 + s_b^2 + (mean a - mean b)^2), ddof 0 (Lin 1989)."""
    product = float(np.mean((a - a.mean()) * (b - b.mean())))
    return 2 * product / (float(a.var()) + float(b.var()) + float(a.mean() - b.mean()) ** 2)


def rms_difference(a: Array, b: Array) -> float:
    """Give the root mean squared difference of two maps."""
    return math.sqrt(float(np.mean((a - b) ** 2)))


def rater_counts(classes: NDArray[np.int8]) -> list[list[int]]:
    """Count, per voxel, the placements (rows of classes) in class -1, 0 and +1."""
    return [
        [sum(int(c) == k for c in classes[:, row]) for k in (-1, 0, 1)]
        for row in range(classes.shape[1])
    ]


def observed_agreement(counts: Sequence[Sequence[int]]) -> float:
    """Give the mean over voxels of the share of agreeing pairs of raters; NaN without a pair."""
    if not len(counts) or sum(counts[0]) < 2:
        return math.nan
    each = [sum(c * (c - 1) for c in row) / (sum(row) * (sum(row) - 1)) for row in counts]
    return sum(each) / len(each)


def category_shares(counts: Sequence[Sequence[int]]) -> list[float]:
    """Give the mean share of each category over voxels (all have the same number of raters)."""
    total = sum(sum(row) for row in counts)
    return [sum(row[k] for row in counts) / total for k in range(len(counts[0]))]


def corrected(observed: float, chance: float) -> float:
    """Give (observed - chance) / (1 - chance); NaN when chance is 1."""
    return (observed - chance) / (1 - chance) if chance < 1 else math.nan


def gwet_ac1(counts: Sequence[Sequence[int]]) -> float:
    """Give AC1, chance = sum pi (1 - pi) / (q - 1) over all q categories (Gwet 2008)."""
    if not len(counts):
        return math.nan
    shares = category_shares(counts)
    chance = sum(pi * (1 - pi) for pi in shares) / (len(shares) - 1)
    return corrected(observed_agreement(counts), chance)


def fleiss_kappa(counts: Sequence[Sequence[int]]) -> float:
    """Give Fleiss' kappa, chance = sum pi^2 (Fleiss 1971)."""
    if not len(counts):
        return math.nan
    return corrected(observed_agreement(counts), sum(pi**2 for pi in category_shares(counts)))
