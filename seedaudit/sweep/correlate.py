"""From one run's voxel series to Fisher z of every placement, by exact identities.

With Q the orthonormal nuisance basis and M = I - QQ', a residualised seed series S satisfies
S·Y = S·MY, so the voxel series Y need no residualising; the squared norm of a voxel's residual is
||y||² - ||Q'y||². One product S·Y and one small product Q'Y per run are all that is needed.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

BLOCK = 4096
"""Voxels handled at once: a block of all placements stays in cache."""

LIMIT = 1 - 1e-7
"""Largest |r| that is transformed, so that z is finite."""

CANCELLING = 0.1
"""Residual share of a voxel's sum of squares below which float32 would lose digits."""

LARGEST_Z = float(np.arctanh(LIMIT))
"""About 8.4"""

STEEP = 0.9
"""Correlation above which z magnifies an error of r more than fivefold."""

VANISHED = 1e-13
"""Residual share of the sum of squares below which nothing but float32 rounding is left."""


@dataclass(frozen=True)
class CleanRun:
    """One run, ready for correlation.

    Parameters
    ----------
    series : (T, V) float32
        Voxel series up to a constant per voxel and one positive scale; 0 where not `finite`.
    basis : (T, q) float64
        Orthonormal nuisance basis, the intercept included.
    finite : (V,) bool
        False for voxels with a value that is not finite.
    """

    series: NDArray[np.float32]
    basis: NDArray[np.float64]
    finite: NDArray[np.bool_]

    @property
    def residual_df(self) -> int:
        """Volumes minus the rank of the nuisance basis."""
        return int(self.basis.shape[0] - self.basis.shape[1])


@dataclass(frozen=True)
class ZBlock:
    """Fisher z of all placements at the voxels `where`.

    `z` is (N, B) float32 and 0 where not `valid` (B,). Where they were asked for, `lag_one` (B,)
    is the first-order autocorrelation of the voxel residuals and `variance` (N, B) the sampling
    variance of z.
    """

    where: slice
    z: NDArray[np.float32]
    valid: NDArray[np.bool_]
    lag_one: NDArray[np.float64] | None = None
    variance: NDArray[np.float64] | None = None


def residuals(series: NDArray[np.float64], basis: NDArray[np.float64]) -> NDArray[np.float64]:
    """Part of each series (T, ...) that is orthogonal to the basis (T, q).

    Projected twice: the second time removes what rounding left of the first.
    """
    for _ in range(2):
        series = series - basis @ (basis.T @ series)
    return series


def seed_series(
    run: CleanRun, weights: sparse.csr_array
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Residualised mean series of every sphere, scaled to unit norm, and the sphere's coverage.

    Parameters
    ----------
    run : CleanRun
    weights : (N, V) sparse
        Weight of each voxel in each sphere.

    Returns
    -------
    series : (N, T) float64
        All 0 where a sphere has no variance left.
    coverage : (N,) float64
        Share of the sphere's weight on voxels that vary in this run.
    """
    columns = np.unique(weights.indices)
    used = weights[:, columns]
    members = run.series[:, columns].astype(np.float64)
    varies = run.finite[columns] & (np.ptp(members, axis=0) > 0)
    total = np.asarray(used.sum(axis=1)).ravel()
    present = used @ varies.astype(np.float64)
    sums = (used @ (members * varies).T).T
    sums -= sums.mean(axis=0)
    cleaned = residuals(sums, run.basis)
    norm = np.linalg.norm(cleaned, axis=0)
    alive = norm > np.sqrt(VANISHED) * np.linalg.norm(sums, axis=0)
    series = np.where(alive, cleaned / np.where(alive, norm, 1.0), 0.0).T
    return series, np.where(alive, present / np.maximum(total, np.finfo(float).tiny), 0.0)


def z_blocks(
    run: CleanRun, seeds: NDArray[np.float64], *, lag_one: bool = False, block: int = BLOCK
) -> Iterator[ZBlock]:
    """Fisher z of every seed with every voxel, block by block of the voxel axis.

    Parameters
    ----------
    run : CleanRun
    seeds : (N, T) float64
        Residualised seed series of unit norm (`seed_series`).
    lag_one : bool
        Also give the lag-one autocorrelation of each voxel's residuals.
    block : int
        Voxels in a block.

    Yields
    ------
    ZBlock
    """
    # seeds and nuisance columns in one product, so that a block is read once
    rows = np.concatenate([seeds, run.basis.T]).astype(np.float32)
    n_voxels = run.series.shape[1]
    for start in range(0, n_voxels, block):
        where = slice(start, min(start + block, n_voxels))
        stored = run.series[:, where]
        # the basis holds the intercept: centring changes nothing but the digits that are kept
        series = stored - stored.mean(axis=0)
        total = np.einsum("tv,tv->v", series, series)
        products = rows @ series
        r, explained = products[: len(seeds)], products[len(seeds) :]
        left = total - np.einsum("qv,qv->v", explained, explained)
        valid = run.finite[where] & (total > 0)
        steep = np.maximum(r.max(axis=0), -r.min(axis=0)) > STEEP * np.sqrt(np.maximum(left, 0))
        risky = valid & (steep | (left < CANCELLING * total) | lag_one)
        autocorrelation = np.zeros(len(valid)) if lag_one else None
        if risky.any():
            exact = residuals(stored[:, risky].astype(np.float64), run.basis)
            left_exact = np.einsum("tv,tv->v", exact, exact)
            valid[risky] = left_exact > VANISHED * total[risky]
            left[risky] = left_exact
            r[:, risky] = seeds @ exact
            if autocorrelation is not None:
                shifted = np.einsum("tv,tv->v", exact[1:], exact[:-1])
                safe = np.maximum(left_exact, np.finfo(float).tiny)
                autocorrelation[risky] = shifted / safe
        scale = np.zeros_like(left)
        np.sqrt(left, out=scale, where=valid)
        np.divide(1, scale, out=scale, where=valid)
        r *= scale
        np.clip(r, -LIMIT, LIMIT, out=r)
        yield ZBlock(where, np.arctanh(r, out=r), valid, autocorrelation)


def lag_one_autocorrelation(series: NDArray[np.float64]) -> NDArray[np.float64]:
    """First-order autocorrelation (N,) of residual series (N, T), which have mean 0."""
    squares = np.einsum("nt,nt->n", series, series)
    products = np.einsum("nt,nt->n", series[:, 1:], series[:, :-1])
    return np.divide(products, squares, out=np.zeros_like(products), where=squares > 0)


def effective_volumes(
    volumes: float, a: NDArray[np.float64], b: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Effective number of volumes of a correlation of two AR(1) series.

    n (1 - ab) / (1 + ab), Bartlett (1946) and Quenouille (1948); (N, B) from a (N,) and b (B,).
    """
    product = np.clip(np.multiply.outer(a, b), -0.999, 0.999)
    return np.asarray(volumes * (1 - product) / (1 + product))
