"""Agreement between placements beyond what their class shares alone would give.

All functions take counts of ratings, (units, categories). Units may have different numbers of
ratings: a unit with one rating counts in the category shares but in no pair, a unit without any
is ignored.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


def unit_agreement(counts: NDArray[np.integer[Any]]) -> FloatArray:
    """Share of the pairs of ratings of each unit that agree.

    Parameters
    ----------
    counts : (V, q) int array
        Ratings per unit and category.

    Returns
    -------
    (V,) array, 0 to 1
        NaN for a unit with fewer than two ratings.
    """
    total = counts.sum(axis=1, dtype=np.float64)
    agreeing = np.einsum("vq,vq->v", counts, counts, dtype=np.float64) - total
    pairs = total * (total - 1)
    out = np.full(total.shape, np.nan)
    np.divide(agreeing, pairs, out=out, where=pairs > 0)
    return out


def pairwise_agreement(counts: NDArray[np.integer[Any]]) -> float:
    """Mean over units of the share of agreeing pairs of ratings.

    Parameters
    ----------
    counts : (V, q) int array
        Ratings per unit and category.

    Returns
    -------
    float
        0 to 1; NaN without a unit that has two ratings.
    """
    agreement = unit_agreement(counts)
    paired = agreement[~np.isnan(agreement)]
    return float(paired.mean()) if paired.size else float("nan")


def category_shares(counts: NDArray[np.integer[Any]]) -> FloatArray:
    """Mean over units of the share of ratings in each category.

    Parameters
    ----------
    counts : (V, q) int array
        Ratings per unit and category.

    Returns
    -------
    (q,) array
        Sums to 1; NaN without a rating.
    """
    total = counts.sum(axis=1)
    rated = total > 0
    if not rated.any():
        return np.full(counts.shape[1], np.nan)
    return np.asarray((counts[rated] / total[rated, None]).mean(axis=0))


def ac1_from_shares(agreement: FloatArray, shares: FloatArray) -> FloatArray:
    """Gwet's AC1 from pairwise agreement and category shares.

    Parameters
    ----------
    agreement : (...) array
        Pairwise agreement p_a, 0 to 1.
    shares : (..., q) array
        Category shares, q >= 2.

    Returns
    -------
    (...) array
        (p_a - p_e) / (1 - p_e) with p_e = sum of share (1 - share) / (q - 1), at most 1/q.

    Raises
    ------
    ValueError
        Fewer than two categories.

    Notes
    -----
    Gwet K.L. (2008) Br. J. Math. Stat. Psychol. 61:29-48.
    """
    q = shares.shape[-1]
    if q < 2:
        raise ValueError(f"AC1 needs two categories or more, found {q}")
    chance = (shares * (1 - shares)).sum(axis=-1) / (q - 1)
    return np.asarray((agreement - chance) / (1 - chance))


def gwet_ac1(counts: NDArray[np.integer[Any]]) -> float:
    """Gwet's AC1.

    Parameters
    ----------
    counts : (V, q) int array
        Ratings per unit and category, q >= 2 (categories nobody used count as well).

    Returns
    -------
    float
        At most 1, negative values kept; NaN without a unit that has two ratings.

    Raises
    ------
    ValueError
        Fewer than two categories.
    """
    agreement = np.asarray(pairwise_agreement(counts))
    return float(ac1_from_shares(agreement, category_shares(counts)))


def fleiss_kappa(counts: NDArray[np.integer[Any]]) -> float:
    """Fleiss' kappa.

    Parameters
    ----------
    counts : (V, q) int array
        Ratings per unit and category.

    Returns
    -------
    float
        NaN without a unit that has two ratings, and NaN when all ratings are in one category:
        chance agreement is then 1 and kappa is 0/0.

    Notes
    -----
    Fleiss J.L. (1971) Psychol. Bull. 76:378-382; for unequal numbers of ratings the category
    shares are means of the shares within units, as for AC1.
    """
    if np.count_nonzero(counts.sum(axis=0)) < 2:
        return float("nan")
    chance = float((category_shares(counts) ** 2).sum())
    return (pairwise_agreement(counts) - chance) / (1 - chance)
