"""Ordinary least squares from sufficient statistics: effect, standard error and t of a contrast."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from seedaudit.sweep.moments import Moments, Sums

SINGULAR = 1e-10
"""Reciprocal condition number of X'X at which a voxel's model cannot be estimated."""


@dataclass(frozen=True)
class Model:
    """What the estimates of all placements share: the solved design at every voxel.

    Parameters
    ----------
    inverse : (p, p, V) float64
        Inverse of X'X; NaN where the model cannot be estimated.
    weights : (p, V) float64
        (X'X)^-1 c, so that the effect is the weighted sum of X'z.
    spread : (V,) float64
        c'(X'X)^-1 c.
    df : (V,) float64
        Residual degrees of freedom; infinite when the sampling variance is known.
    """

    inverse: NDArray[np.float64]
    weights: NDArray[np.float64]
    spread: NDArray[np.float64]
    df: NDArray[np.float64]


@dataclass(frozen=True)
class Estimate:
    """Effect of the contrast, its standard error and test statistic; each (V,), NaN if missing."""

    effect: NDArray[np.float64]
    standard_error: NDArray[np.float64]
    statistic: NDArray[np.float64]


def orthonormal_design(
    matrix: NDArray[np.float64], contrast: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """An equivalent design with X'X = I, and the contrast in its terms.

    Sums of products of the raw columns lose digits when columns are far from orthogonal (a mean
    of thousands beside an SD of one); the streamed sums of these columns do not.

    Parameters
    ----------
    matrix : (n, p) of full column rank
    contrast : (p,)

    Returns
    -------
    (n, p), (p,)
    """
    # scaled first, so that no column is lost beside a larger one
    scale = np.linalg.norm(matrix, axis=0)
    q, r = np.linalg.qr(matrix / scale)
    return q, np.linalg.solve(r.T, contrast / scale)


def solve_model(moments: Moments, contrast: NDArray[np.float64], needed: int) -> Model:
    """Solve the normal equations at every voxel.

    Parameters
    ----------
    moments : Moments
    contrast : (p,)
        In terms of the columns that the moments were made with.
    needed : int
        Participants a voxel needs; p + 1 are needed in any case, or one when the sampling
        variance is known.
    """
    p = len(contrast)
    if moments.variance is None:
        usable = moments.count >= max(needed, p + 1)
        df = np.where(usable, moments.count - p, np.nan).astype(float)
    else:
        usable = moments.count >= max(needed, 1)
        df = np.where(usable, np.inf, np.nan)
    if usable.all():
        inverse = _inverse(moments.xtx)
    else:
        inverse = np.full_like(moments.xtx, np.nan)
        if usable.any():
            inverse[:, :, usable] = _inverse(moments.xtx[:, :, usable])
    weights = np.einsum("ijv,j->iv", inverse, contrast)
    return Model(inverse, weights, np.einsum("iv,i->v", weights, contrast), df)


def _inverse(xtx: NDArray[np.float64]) -> NDArray[np.float64]:
    """Inverse of every (p, p) matrix along the last axis; NaN where singular."""
    same = bool((xtx == xtx[:, :, :1]).all())
    stack = np.moveaxis(xtx[:, :, :1] if same else xtx, -1, 0)
    good = 1 / np.linalg.cond(stack) > SINGULAR
    result = np.full_like(stack, np.nan)
    result[good] = np.linalg.inv(stack[good])
    return np.broadcast_to(np.moveaxis(result, 0, -1), xtx.shape)


def estimate_sums(sums: Sums, model: Model) -> Estimate:
    """Estimate the contrast from the sums of one placement.

    The residual sum of squares is z'z - (X'z)'(X'X)^-1(X'z). Where the sampling variance of z is
    known (one participant) the effect is z itself.
    """
    xtz = sums.xtz
    same = model.inverse.strides[-1] == 0
    inverse, weights = model.inverse, model.weights
    if same:
        # one design for all voxels: small matrices in the place of fields of matrices
        effect = weights[:, 0] @ xtz
        explained = np.einsum("iv,iv->v", xtz, inverse[:, :, 0] @ xtz)
    else:
        effect = np.einsum("iv,iv->v", weights, xtz)
        explained = np.einsum("iv,ijv,jv->v", xtz, inverse, xtz)
    if sums.known is None:
        variance = np.maximum(sums.zz - explained, 0) / model.df * model.spread
    else:
        variance = sums.known * weights[0] ** 2
    standard_error = np.sqrt(variance)
    statistic = np.full_like(effect, np.nan)
    np.divide(effect, standard_error, out=statistic, where=standard_error > 0)
    return Estimate(effect, standard_error, statistic)


def uniform_estimate(
    xtx: NDArray[np.float64], sums: Sums, n: int, contrast: NDArray[np.float64]
) -> Estimate | None:
    """Estimate the contrast of one placement where every participant has every voxel.

    Parameters
    ----------
    xtx : (p, p)
        X'X of n participants, the same at every voxel.
    sums : Sums
        Of the same participants.
    n : int
    contrast : (p,)

    Returns
    -------
    Estimate or None
        None where no residual degree of freedom is left or the design is singular.
    """
    xtz = sums.xtz
    p = len(contrast)
    if n <= p or 1 / np.linalg.cond(xtx) <= SINGULAR:
        return None
    inverse = np.linalg.inv(xtx)
    weights = inverse @ contrast
    effect = weights @ xtz
    explained = np.einsum("iv,iv->v", xtz, inverse @ xtz)
    residual = np.maximum(sums.zz - explained, 0)
    standard_error = np.sqrt(residual / (n - p) * (weights @ contrast))
    statistic = np.full_like(effect, np.nan)
    np.divide(effect, standard_error, out=statistic, where=standard_error > 0)
    return Estimate(effect, standard_error, statistic)
