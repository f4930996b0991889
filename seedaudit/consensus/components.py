"""Whose share the uncertainty is: of the place of the seed, or of who was scanned."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


def contrast_effects(
    responses: NDArray[np.floating[Any]], design: FloatArray, contrast: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Effect of a contrast and its standard error for every response, by ordinary least squares.

    Parameters
    ----------
    responses : (n, M) array
        NaN in a column gives NaN.
    design : (n, p) array
        Full column rank.
    contrast : (p,)

    Returns
    -------
    effect, standard_error : (M,) arrays
        The standard error is NaN when n <= p.
    """
    n, p = design.shape
    q, r = np.linalg.qr(design)
    g = np.linalg.solve(r.T, contrast)
    coefficients = q.T @ responses
    effect = g @ coefficients
    if n <= p:
        return effect, np.full(effect.shape, np.nan)
    residuals = responses - q @ coefficients
    variance = np.einsum("nm,nm->m", residuals, residuals) / (n - p)
    return effect, np.sqrt(variance * (g @ g))


def placement_share(
    target_means: FloatArray, design: FloatArray, contrast: FloatArray
) -> FloatArray:
    """Share of the variance of a regional effect that comes from where the seed was put.

    Participants and placements are crossed random factors. The placement component is the
    variance of the effect over placements, less what the interaction with participants puts into
    it; the sampling component is the squared standard error of the effect at one placement.

    Parameters
    ----------
    target_means : (n, N, K) array
        Mean z of each region in each participant at the drawn placements.
    design : (n, p) array
    contrast : (p,)

    Returns
    -------
    (K,) array
        placement / (placement + sampling), 0 to 1; a negative placement component counts as 0.
        NaN where data are missing, n <= p, or N < 2.

    Notes
    -----
    Expected mean squares of the two-way layout: Searle S.R. et al. (1992) Variance Components.
    """
    n, n_placements, n_regions = target_means.shape
    p = design.shape[1]
    if n <= p or n_placements < 2:
        return np.full(n_regions, np.nan)
    flat = target_means.reshape(n, -1)
    effect, error = (
        part.reshape(n_placements, n_regions) for part in contrast_effects(flat, design, contrast)
    )
    q, r = np.linalg.qr(design)
    g = np.linalg.solve(r.T, contrast)
    residuals = (flat - q @ (q.T @ flat)).reshape(target_means.shape)
    apart = residuals - residuals.mean(axis=1, keepdims=True)
    interaction = (apart**2).sum(axis=(0, 1)) / ((n - p) * (n_placements - 1))
    placement = np.maximum(effect.var(axis=0, ddof=1) - interaction * (g @ g), 0)
    sampling = (error**2).mean(axis=0)
    total = placement + sampling
    return np.divide(placement, total, out=np.full(n_regions, np.nan), where=total > 0)


def instability_influence(
    target_means: FloatArray, design: FloatArray, contrast: FloatArray
) -> FloatArray:
    """How much each participant adds to the spread of the regional effects over placements.

    Parameters
    ----------
    target_means : (n, N, K) array
        Mean z of each region in each participant at the drawn placements; regions with a missing
        value are left out.
    design : (n, p) array
    contrast : (p,)

    Returns
    -------
    (n,) array
        Relative change of the mean (over regions) SD over placements when the participant comes
        in: above 0, the result would be steadier without. NaN where the design cannot be
        estimated without the participant, or no region is left.
    """
    n, n_placements, _ = target_means.shape
    p = design.shape[1]
    known = target_means[:, :, ~np.isnan(target_means).any(axis=(0, 1))]
    if n <= p or n_placements < 2 or not known.shape[2]:
        return np.full(n, np.nan)
    flat = known.reshape(n, -1)
    q, r = np.linalg.qr(design)
    g = np.linalg.solve(r.T, contrast)
    coefficients = q.T @ flat
    residuals = flat - q @ coefficients
    leverage = np.einsum("np,np->n", q, q)

    def spread(effect: FloatArray) -> float:
        return float(effect.reshape(n_placements, -1).std(axis=0, ddof=1).mean())

    whole = spread(g @ coefficients)
    influence = np.full(n, np.nan)
    for s in range(n):
        if leverage[s] < 1 - 1e-9:
            # the fit without one row, in closed form
            without = g @ coefficients - (q[s] @ g) / (1 - leverage[s]) * residuals[s]
            rest = spread(without)
            influence[s] = (whole - rest) / rest if rest > 0 else np.nan
    return influence
