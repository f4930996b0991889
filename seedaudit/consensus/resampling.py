"""Intervals from resampling participants: a jackknife over folds and a studentised bootstrap.

Placements are never resampled: they are not samples of anything.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import stats

FloatArray = NDArray[np.float64]

# With fewer participants than this in a stratum, resamples repeat so few of them that the
# studentised quantiles are governed by near-degenerate draws.
SMALLEST_STRATUM = 6

# Below this smallest eigenvalue of the resampled cross product (1 for the sample itself) a
# resample no longer determines the model.
_SINGULAR = 1e-8

# Residuals below this share of the largest response are rounding.
_ROUNDING = 1e-13


def delete_fold_interval(
    full: ArrayLike,
    without: ArrayLike,
    fold_sizes: ArrayLike,
    level: float = 0.95,
    *,
    most: float = 1.0,
) -> tuple[FloatArray, FloatArray]:
    """Jackknife interval of a statistic from its values with one fold of participants left out.

    Parameters
    ----------
    full : (...) array
        Statistic of all participants, at most `most`.
    without : (G, ...) array
        Statistic without fold g.
    fold_sizes : (G,) array
        Participants in fold g, 1 or more.
    level : float
        Confidence level in (0, 1).
    most : float
        Largest value that the statistic can have.

    Returns
    -------
    low, high : (...) arrays
        Centred on `full`, from the t distribution with G - 1 degrees of freedom, `high` at most
        `most`; NaN with fewer than two folds.

    Notes
    -----
    Delete-m_j jackknife for unequal folds: Busing F.M.T.A., Meijer E. & van der Leeden R. (1999)
    Stat. Comput. 9:3-8. With h_j = n / m_j, pseudo-values h_j full - (h_j - 1) without_j, and
    their weighted mean, the variance is the mean of (pseudo_j - mean)^2 / (h_j - 1).
    """
    full = np.asarray(full, dtype=np.float64)
    without = np.asarray(without, dtype=np.float64)
    sizes = np.asarray(fold_sizes, dtype=np.float64)
    n_folds = sizes.size
    if n_folds < 2:
        missing = np.full(full.shape, np.nan)
        return missing, missing.copy()
    h = (sizes.sum() / sizes).reshape(-1, *(1,) * full.ndim)
    pseudo = h * full - (h - 1) * without
    mean = n_folds * full - ((1 - 1 / h) * without).sum(axis=0)
    error = np.sqrt(((pseudo - mean) ** 2 / (h - 1)).mean(axis=0))
    half = stats.t.ppf((1 + level) / 2, n_folds - 1) * error
    return full - half, np.minimum(full + half, most)


def bootstrap_interval(
    x: NDArray[np.floating[Any]],
    z: NDArray[np.floating[Any]],
    contrast: NDArray[np.floating[Any]],
    strata: NDArray[np.integer[Any]],
    *,
    replicates: int = 2000,
    level: float = 0.95,
    random_state: int | np.random.Generator,
) -> tuple[FloatArray, FloatArray]:
    """Bootstrap-t interval of a contrast of ordinary least squares over participants.

    Whole participants (their rows of `x` and `z`) are drawn with replacement within strata, the
    same draws for all K responses. With fewer than `SMALLEST_STRATUM` participants in any stratum
    the ordinary t interval is returned instead.

    Parameters
    ----------
    x : (n, p) array
        Design of full column rank.
    z : (n, K) array
        Responses, Fisher z; NaN gives a NaN interval for that response.
    contrast : (p,) array
        Weights of the coefficients.
    strata : (n,) int array
        Participants with equal numbers are exchanged among one another.
    replicates : int
        Number of resamples.
    level : float
        Confidence level in (0, 1).
    random_state : int or Generator
        Seed of the resampling.

    Returns
    -------
    low, high : (K,) arrays
        NaN when n - p < 1.

    Raises
    ------
    ValueError
        Too few replicates for the level.

    Notes
    -----
    Efron B. & Tibshirani R.J. (1993) An Introduction to the Bootstrap, ch. 12: low and high are
    estimate - t*_(1-a) se and estimate - t*_(a) se, with quantiles by rank [(B + 1) a]. Resamples
    that do not determine the model and its residual variance are left out.
    """
    x, z = np.asarray(x, dtype=np.float64), np.asarray(z, dtype=np.float64)
    n, p = x.shape
    if n - p < 1:
        missing = np.full(z.shape[1], np.nan)
        return missing, missing.copy()
    # In the orthonormal basis Q the sample's own cross product is 1 whatever the units of x.
    q, r = np.linalg.qr(x)
    weights = np.linalg.solve(r.T, np.asarray(contrast, dtype=np.float64))
    coefficients = q.T @ z
    residuals = z - q @ coefficients
    # A constant response leaves rounding only, of which no resample could make sense.
    residuals[:, np.abs(residuals).max(axis=0) <= _ROUNDING * np.abs(z).max(axis=0)] = 0.0
    estimate = weights @ coefficients
    error = np.sqrt((residuals**2).sum(axis=0) / (n - p) * (weights @ weights))
    sizes = np.unique(strata, return_counts=True)[1]
    if sizes.min() < SMALLEST_STRATUM:
        half = stats.t.ppf((1 + level) / 2, n - p) * error
        return estimate - half, estimate + half
    draws = _draw_counts(np.asarray(strata), replicates, np.random.default_rng(random_state))
    shift, shift_error = _refit(q, residuals, weights, draws)
    with np.errstate(divide="ignore", invalid="ignore"):
        t = shift / shift_error
    # 0/0 is a resample that reproduces a response without any spread.
    t[(shift == 0) & (shift_error == 0)] = 0.0
    rank = int(np.floor((len(t) + 1) * (1 - level) / 2 + 1e-9))
    if rank < 1:
        raise ValueError(f"{len(t)} usable replicates are too few for level {level}")
    t.partition([rank - 1, len(t) - rank], axis=0)
    return estimate - t[-rank] * error, estimate - t[rank - 1] * error


def _draw_counts(
    strata: NDArray[np.integer[Any]], replicates: int, rng: np.random.Generator
) -> FloatArray:
    """How often each resample holds each participant, (replicates, n)."""
    counts = np.empty((replicates, strata.size))
    for stratum in np.unique(strata):
        members = np.flatnonzero(strata == stratum)
        chances = np.full(members.size, 1 / members.size)
        counts[:, members] = rng.multinomial(members.size, chances, size=replicates)
    return counts


def _refit(
    q: FloatArray, residuals: FloatArray, weights: FloatArray, draws: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Shift of the contrast from its estimate in every resample, and its standard error.

    Fitting the residuals of the sample instead of the responses gives the shift directly, and the
    residual sum of squares without cancellation.

    Parameters
    ----------
    q : (n, p) array
        Orthonormal design.
    residuals : (n, K) array
    weights : (p,) array
        Contrast in the basis `q`.
    draws : (B, n) array
        How often each resample holds each participant.

    Returns
    -------
    shift, error : (B', K) arrays
        Rows of the B' <= B usable resamples.
    """
    n, p = q.shape
    # p + 1 distinct participants at least, else the residual variance is 0 by construction.
    draws = draws[(draws > 0).sum(axis=1) > p]
    cross = np.einsum("bn,ni,nj->bij", draws, q, q, optimize=True)
    usable = np.linalg.eigvalsh(cross)[:, 0] > _SINGULAR
    draws, cross = draws[usable], cross[usable]
    inner = np.stack([(draws * column) @ residuals for column in q.T], axis=1)
    fitted = np.linalg.solve(cross, inner)
    shift = np.einsum("p,bpk->bk", weights, fitted)
    squares = draws @ residuals**2 - np.einsum("bpk,bpk->bk", inner, fitted)
    spread = np.linalg.solve(cross, np.broadcast_to(weights[:, None], (len(cross), p, 1)))
    error_scale = np.einsum("p,bpo->bo", weights, spread) / (n - p)
    return shift, np.sqrt(np.maximum(squares, 0.0) * error_scale)
