"""Maximum statistics by rearranging participants: family-wise error without a model of the noise.

The tested effect is turned into one regressor orthogonal to all others of the design. Residuals
of the reduced model are rearranged among participants (Freedman & Lane 1983) where that model
holds the mean, and their signs are flipped where it does not (a one-sample test, for instance):
Winkler A.M. et al. (2014) NeuroImage 92:381-397.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import islice, permutations, product
from math import factorial
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

FloatArray = NDArray[np.float64]

REARRANGEMENTS = 5000

_COLUMNS = 4096
_BATCH = 500
_SLACK = 1e-9


@dataclass(frozen=True)
class MaximumTest:
    """Observed statistics and the largest one under each rearrangement.

    Parameters
    ----------
    statistics : (M,) array
        t of every response as observed.
    maxima : (B,) array
        Largest t, or |t|, over the responses; the first one is that of the data as they are.
    """

    statistics: FloatArray
    maxima: FloatArray

    def p_values(self, statistics: FloatArray | None = None) -> FloatArray:
        """Share of the rearrangements whose maximum is at least as large, (M,)."""
        tested = self.statistics if statistics is None else statistics
        below = np.searchsorted(np.sort(self.maxima), tested * (1 - _SLACK), side="left")
        return (len(self.maxima) - below) / len(self.maxima)

    def critical_value(self, level: float) -> float:
        """Smallest statistic whose family-wise p is at most `level`; inf where none can be."""
        allowed = int(level * len(self.maxima) + _SLACK)
        if allowed < 1:
            return float("inf")
        # a statistic must exceed this one, which too many maxima reach
        return float(np.sort(self.maxima)[-1 - allowed] * (1 + _SLACK))


def maximum_test(
    responses: NDArray[np.floating[Any]],
    design: FloatArray,
    contrast: FloatArray,
    *,
    two_sided: bool = True,
    count: int = REARRANGEMENTS,
    random_state: int | np.random.Generator = 0,
) -> MaximumTest:
    """Test one contrast of many responses against the distribution of their maximum.

    Parameters
    ----------
    responses : (n, M) array
        One row per participant, no missing values. A response without residual spread has t = 0.
    design : (n, p) array
        Full column rank, n > p.
    contrast : (p,) array
        Weights of the coefficients.
    two_sided : bool
        Maximum of \\|t\\|; else of t, for effects above 0 only.
    count : int
        Rearrangements, the data as they are included; all distinct ones where they are fewer.
    random_state : int or Generator

    Returns
    -------
    MaximumTest
        `statistics` are t, or \\|t\\| when `two_sided`.
    """
    tested, nuisance = _partition(np.asarray(design, np.float64), np.asarray(contrast, np.float64))
    n, n_nuisance = nuisance.shape
    df = n - n_nuisance - 1
    flips = _needs_flips(nuisance)
    operators = list(_operators(n, flips, two_sided, count, np.random.default_rng(random_state)))
    n_responses = responses.shape[1]
    statistics = np.empty(n_responses)
    maxima = np.full(sum(len(signs) for _, signs in operators), -np.inf)
    for start in range(0, n_responses, _COLUMNS):
        columns = slice(start, min(start + _COLUMNS, n_responses))
        scaled = _scaled_residuals(responses[:, columns], nuisance)
        done = 0
        for order, signs in operators:
            # rearranging the regressors back is the same as rearranging the residuals
            slopes = _slopes(scaled, tested, nuisance, order, signs)
            if two_sided:
                slopes = np.abs(slopes)
            if done == 0:
                statistics[columns] = slopes[0]
            here = maxima[done : done + len(slopes)]
            np.maximum(here, slopes.max(axis=1), out=here)
            done += len(slopes)
    return MaximumTest(_as_t(statistics, df), _as_t(maxima, df))


def holm_adjusted(p: FloatArray) -> FloatArray:
    """Step-down adjusted p-values (M,) of a family; NaN is no member of it.

    Holm S. (1979) Scand. J. Stat. 6:65-70.
    """
    adjusted = np.full(len(p), np.nan)
    order = np.argsort(p)[: np.count_nonzero(~np.isnan(p))]
    steps = np.asarray(p)[order] * np.arange(len(order), 0, -1)
    adjusted[order] = np.minimum(np.maximum.accumulate(steps), 1.0)
    return adjusted


def _partition(design: FloatArray, contrast: FloatArray) -> tuple[FloatArray, FloatArray]:
    """The tested regressor (n,) and an orthonormal basis (n, p - 1) of the reduced model.

    With the design Q R and g = R^-T c, the contrast is g'Q'y, and it is 0 in expectation exactly
    when E[y] lies in Q times the complement of g.
    """
    q, r = np.linalg.qr(design)
    g = np.linalg.solve(r.T, contrast)
    return q @ g / np.linalg.norm(g), q @ linalg.null_space(g[None, :])


def _needs_flips(nuisance: FloatArray) -> bool:
    """Whether the mean is part of what is tested, so that participants are no exchangeable rows."""
    ones = np.full(len(nuisance), 1 / np.sqrt(len(nuisance)))
    return bool(np.linalg.norm(ones - nuisance @ (nuisance.T @ ones)) > 1e-8)


def _distinct(n: int, flips: bool, two_sided: bool) -> int:
    if flips:
        # flipping everyone leaves |t| as it is
        return int(2 ** min(n - two_sided, 62))
    return factorial(min(n, 20))


def _operators(
    n: int, flips: bool, two_sided: bool, count: int, rng: np.random.Generator
) -> Iterator[tuple[NDArray[np.intp], FloatArray]]:
    """Batches of orders (B, n) and signs (B, n) of the participants; the first does nothing."""
    every = _distinct(n, flips, two_sided) <= count
    if every:
        free = n - two_sided
        rows: Iterator[Any] = (
            ((1,) * (n - free) + signs for signs in product((1, -1), repeat=free))
            if flips
            else permutations(range(n))
        )
    else:
        start = [np.ones(n) if flips else np.arange(n)]
        drawn = (rng.choice((-1, 1), n) if flips else rng.permutation(n) for _ in range(count - 1))
        rows = (row for part in (start, drawn) for row in part)
    while batch := list(islice(rows, _BATCH)):
        chosen = np.array(batch)
        if flips:
            yield np.tile(np.arange(n), (len(chosen), 1)), chosen.astype(np.float64)
        else:
            yield chosen.astype(np.intp), np.ones(chosen.shape)


def _scaled_residuals(responses: NDArray[np.floating[Any]], nuisance: FloatArray) -> FloatArray:
    """Residuals (n, M) of the reduced model at unit length, 0 where nothing is left of them."""
    values = responses.astype(np.float64)
    residuals = values - nuisance @ (nuisance.T @ values)
    length = np.linalg.norm(residuals, axis=0)
    left = length > 1e-12 * np.linalg.norm(values, axis=0)
    return np.divide(residuals, length, out=np.zeros_like(residuals), where=left)


def _slopes(
    scaled: FloatArray,
    tested: FloatArray,
    nuisance: FloatArray,
    order: NDArray[np.intp],
    signs: FloatArray,
) -> FloatArray:
    """Partial correlation (B, M) of the tested regressor with the rearranged residuals."""
    slopes = (tested[order] * signs) @ scaled
    if nuisance.shape[1]:
        explained = np.zeros_like(slopes)
        for column in nuisance.T:
            explained += ((column[order] * signs) @ scaled) ** 2
        slopes /= np.sqrt(np.maximum(1 - explained, 1e-12))
    return slopes


def _as_t(slopes: FloatArray, df: int) -> FloatArray:
    """t of a partial correlation."""
    with np.errstate(divide="ignore"):
        return np.asarray(slopes * np.sqrt(df / np.maximum(1 - slopes**2, 0)))
