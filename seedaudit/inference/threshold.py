"""From a statistic per voxel to a class per voxel: +1, 0 or -1, by one rule for every placement."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import ndimage, special

FloatArray = NDArray[np.float64]
Classes = NDArray[np.int8]

P_RULES = ("p", "fdr", "bonferroni")
_STRUCTURE_RANK = {6: 1, 18: 2, 26: 3}


def critical_value(
    statistic: NDArray[np.floating[Any]], df: ArrayLike, rule: str, level: float
) -> float | FloatArray:
    """Smallest absolute statistic that passes a rule.

    Parameters
    ----------
    statistic : (V,) array
        t or standard normal scores; NaN marks a voxel without a test, which is not counted.
    df : float or (V,) array
        Degrees of freedom; ``inf`` means the normal distribution.
    rule : {"p", "fdr", "bonferroni", "t", "density"}
        Two-sided p, Benjamini-Hochberg over the tested voxels, Bonferroni over the tested voxels,
        a given value of |t|, or the top share of voxels by |t| (ties at the cut all pass).
        ``"effect"`` cuts no statistic (see `classify`), and a family-wise value found by
        permutation is handed over as rule ``"t"``.
    level : float
        Error rate in (0, 1); a value of |t| >= 0; or a share in (0, 1].

    Returns
    -------
    float or (V,) array
        An array only where the rule depends on `df` and `df` is an array; ``inf`` when no value
        passes.

    Raises
    ------
    ValueError
        Unknown rule, or a level outside its range.

    Notes
    -----
    Benjamini Y. & Hochberg Y. (1995) J. R. Stat. Soc. B 57:289-300.
    """
    _check_level(rule, level)
    if rule == "t":
        return float(level)
    tested = np.abs(np.asarray(statistic, dtype=np.float64))
    if rule == "density":
        return float(density_cuts(tested, [level])[0])
    if rule not in P_RULES:
        raise ValueError(f"rule {rule!r} has no critical value; use one of {P_RULES}, t, density")
    dfs, which = np.unique(np.asarray(df, dtype=np.float64), return_inverse=True)
    which = which.reshape(np.shape(df))
    count = int(np.count_nonzero(~np.isnan(tested)))
    if count == 0:
        cut = 0.0
    elif rule == "fdr":
        cut = _step_up_cut(tested, dfs, which, level, count)
    else:
        cut = level if rule == "p" else level / count
    values = _two_sided_quantile(cut, dfs)[which]
    return float(values) if np.ndim(df) == 0 else values


def density_cuts(values: NDArray[np.floating[Any]], shares: ArrayLike) -> FloatArray:
    """Values that cut off the top shares of an array.

    Parameters
    ----------
    values : (V,) array
        NaN is left out and not counted.
    shares : (C,) array
        Shares of the counted values, 0 to 1.

    Returns
    -------
    (C,) array
        The k-th largest value with k = round(share * count), halves to even; ``inf`` where
        k is 0.
    """
    counted = values[~np.isnan(values)]
    ranks = np.rint(np.asarray(shares, dtype=np.float64) * counted.size).astype(np.int64)
    cuts = np.full(ranks.shape, np.inf)
    some = ranks > 0
    if some.any():
        positions = counted.size - ranks[some]
        cuts[some] = np.partition(counted, np.unique(positions))[positions]
    return cuts


def classify(
    statistic: NDArray[np.floating[Any]],
    effect: NDArray[np.floating[Any]],
    df: ArrayLike,
    rule: str,
    level: float,
    scale: str = "z",
    per_tail: bool = False,
) -> Classes:
    """Class of every voxel: the sign of the voxels that pass a rule, 0 for the others.

    Parameters
    ----------
    statistic : (V,) array
        t or standard normal scores; NaN gives class 0.
    effect : (V,) array
        Group effect in Fisher z; looked at by rule ``"effect"`` only.
    df : float or (V,) array
        Degrees of freedom; ``inf`` means the normal distribution.
    rule : str
        A rule of `critical_value`, or ``"effect"``: |effect| of at least `level`.
    level : float
        See `critical_value`; for ``"effect"`` a size >= 0 on the given scale.
    scale : {"z", "r"}
        Scale of an effect cut; r = tanh(z).
    per_tail : bool
        With ``"density"``: the top share of all tested voxels by t and, separately, by -t. A voxel
        is never given the class against its sign, so a tail may hold fewer voxels than its share.

    Returns
    -------
    (V,) int8 array

    Raises
    ------
    ValueError
        Unknown rule or scale, or a level outside its range.
    """
    signed: FloatArray = np.asarray(statistic, dtype=np.float64)
    tested = ~np.isnan(signed)
    if rule == "effect":
        _check_level(rule, level)
        if scale not in ("z", "r"):
            raise ValueError(f"scale {scale!r} is not known; use z or r")
        signed = np.asarray(effect, dtype=np.float64)
        passes = np.abs(np.tanh(signed) if scale == "r" else signed) >= level
    elif rule == "density" and per_tail:
        _check_level(rule, level)
        above = signed >= density_cuts(signed, [level])[0]
        below = signed <= -density_cuts(-signed, [level])[0]
        passes = np.where(signed > 0, above, below)
    else:
        cut = critical_value(signed, df, rule, level)
        # a comparison with NaN is false: class 0; a statistic of 0 has no sign
        above = (signed >= cut) & (signed > 0)
        below = (signed <= -cut) & (signed < 0)
        return above.astype(np.int8) - below.astype(np.int8)
    return np.where(passes & tested, np.sign(signed), 0).astype(np.int8)


def drop_small_clusters(
    classes: Classes,
    ijk: NDArray[np.integer[Any]],
    shape: tuple[int, int, int],
    min_voxels: int,
    neighbours: int,
) -> Classes:
    """Set voxels to class 0 whose cluster of equal sign is smaller than a number of voxels.

    Parameters
    ----------
    classes : (V,) int8 array
        -1, 0, +1. Positive and negative clusters never join.
    ijk : (V, 3) int array
        Voxel indices.
    shape : 3 ints
        Shape of the volume that `ijk` points into.
    min_voxels : int
        Smallest size kept.
    neighbours : {6, 18, 26}
        Voxels that touch: by a face; also by an edge; also by a corner.

    Returns
    -------
    (V,) int8 array

    Raises
    ------
    ValueError
        Unknown number of neighbours.
    """
    if neighbours not in _STRUCTURE_RANK:
        raise ValueError(f"neighbours is {neighbours}; use 6, 18 or 26")
    if min_voxels <= 1:
        return classes
    structure = ndimage.generate_binary_structure(3, _STRUCTURE_RANK[neighbours])
    i, j, k = np.asarray(ijk).T
    kept = classes.copy()
    for sign in (1, -1):
        volume = np.zeros(shape, dtype=bool)
        volume[i, j, k] = classes == sign
        clusters = ndimage.label(volume, structure)[0]
        small = np.bincount(clusters.ravel()) < min_voxels
        small[0] = False
        kept[small[clusters[i, j, k]]] = 0
    return kept


def _check_level(rule: str, level: float) -> None:
    """Raise ValueError when a level is outside the range of its rule."""
    if rule in P_RULES:
        fine, allowed = 0 < level < 1, "between 0 and 1"
    elif rule == "density":
        fine, allowed = 0 < level <= 1, "above 0 and at most 1"
    else:
        fine, allowed = 0 <= level < math.inf, "0 or more"
    if not fine:
        raise ValueError(f"level {level} of rule {rule!r} must be {allowed}")


def _two_sided_quantile(p: float, df: FloatArray) -> FloatArray:
    """Absolute t whose two-sided p is `p`, for every df; inf for p = 0."""
    if p <= 0:
        return np.full(df.shape, np.inf)
    normal = np.isinf(df)
    values = -special.stdtrit(np.where(normal, 1.0, df), p / 2)
    return np.asarray(np.where(normal, -special.ndtri(p / 2), values), dtype=np.float64)


def _step_up_cut(
    magnitude: FloatArray, dfs: FloatArray, which: NDArray[np.intp], level: float, count: int
) -> float:
    """Two-sided p at and below which Benjamini and Hochberg reject; 0 when they reject nothing.

    The step-up rule rejects the largest k with p_(k) <= k level / count. That k is the largest
    fixed point of k -> #{p <= k level / count}, which the iteration from k = count reaches from
    above because the map is monotone. Counting on the t scale needs one quantile per step and df
    in place of one p per voxel.
    """
    first = _two_sided_quantile(level, dfs)
    if dfs.size == 1:
        survivors = [magnitude[magnitude >= first[0]]]
    else:
        passes = magnitude >= first[which]
        survivors = [magnitude[passes & (which == d)] for d in range(dfs.size)]
    k, passing = count, sum(part.size for part in survivors)
    while passing < k:
        # the cut only rises, so that what fails once is never looked at again
        k = passing
        values = _two_sided_quantile(k * level / count, dfs)
        survivors = [part[part >= value] for part, value in zip(survivors, values, strict=True)]
        passing = sum(part.size for part in survivors)
    return k * level / count
