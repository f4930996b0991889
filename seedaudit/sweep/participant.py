"""One participant's runs into the state of a fold, and what is kept of the participant."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from seedaudit.sweep.correlate import (
    BLOCK,
    CleanRun,
    ZBlock,
    effective_volumes,
    lag_one_autocorrelation,
    seed_series,
    z_blocks,
)
from seedaudit.sweep.moments import whole


@dataclass(frozen=True)
class CloudTargets:
    """What of a participant's maps is kept for one seed's cloud.

    Parameters
    ----------
    rows : slice
        Placements of the cloud; the first of them is the reported one.
    analysis : (V,) bool
        Analysis voxels of the cloud.
    targets : (V, K) sparse
        1 where an analysis voxel belongs to a target (a network region).
    """

    rows: slice
    analysis: NDArray[np.bool_]
    targets: sparse.csr_array


_OF_Z, _OF_SQUARES = 2.0**-28, 2.0**-25
"""Sums over voxels are added up as multiples of these, and are exact for 10 million voxels: the
tiles that the voxels are read in do not show in the digits."""

_ROWS = 16  # placements at once, so that their float64 copy stays in cache


@dataclass
class Kept:
    """What is kept of one participant for one cloud, all of it small: sums over analysis voxels.

    Parameters
    ----------
    n_voxels : int
    sums, squares, products : (N,)
        Of each placement's z, of its square, and of its product with the reported placement's.
    target_sums : (N, K)
        Of z over the voxels of each target.
    target_counts : (K,)
    """

    n_voxels: int
    sums: NDArray[np.float64]
    squares: NDArray[np.float64]
    products: NDArray[np.float64]
    target_sums: NDArray[np.float64]
    target_counts: NDArray[np.float64]

    NAMES: ClassVar = ("sums", "squares", "products", "target_sums", "target_counts")

    @classmethod
    def empty(cls, cloud: CloudTargets) -> Kept:
        """The neutral element."""
        n, k = cloud.rows.stop - cloud.rows.start, cloud.targets.shape[1]
        return cls(0, np.zeros(n), np.zeros(n), np.zeros(n), np.zeros((n, k)), np.zeros(k))

    def add(self, cloud: CloudTargets, block: ZBlock) -> None:
        """Add the z of one block of voxels."""
        keep = np.flatnonzero(block.valid & cloud.analysis[block.where])
        if not keep.size:
            return
        z = block.z[cloud.rows]
        if keep.size < z.shape[1]:
            z = z[:, keep]
        members = cloud.targets[block.where.start + keep]
        present = np.unique(members.indices)
        # one product gives the sums, the products with the reported map, and those of the targets
        columns = np.empty((keep.size, 2 + present.size))
        columns[:, 0], columns[:, 1] = 1, z[0]
        columns[:, 2:] = members[:, present].toarray()
        for start in range(0, len(z), _ROWS):
            rows = slice(start, start + _ROWS)
            wide = z[rows].astype(np.float64)
            found = wide @ columns
            self.products[rows] += whole(found[:, 1], _OF_SQUARES)
            self.sums[rows] += whole(found[:, 0], _OF_Z)
            self.target_sums[rows, present] += whole(found[:, 2:], _OF_Z)
            self.squares[rows] += whole(np.einsum("nv,nv->n", wide, wide), _OF_SQUARES)
        self.n_voxels += keep.size
        self.target_counts[present] += columns[:, 2:].sum(axis=0)

    def __iadd__(self, other: Kept) -> Kept:
        self.n_voxels += other.n_voxels
        for mine, theirs in zip(self.arrays().values(), other.arrays().values(), strict=True):
            mine += theirs
        return self

    def arrays(self) -> dict[str, NDArray[np.float64]]:
        """All but the number of voxels, by name."""
        return {name: getattr(self, name) for name in self.NAMES}

    @property
    def similarity(self) -> NDArray[np.float64]:
        """Spatial correlation (N,) of each placement's z map with the reported placement's."""
        n = max(self.n_voxels, 1)
        covariance = self.products - self.sums * self.sums[0] / n
        variance = np.maximum(self.squares - self.sums**2 / n, 0)
        scale = np.sqrt(variance * variance[0])
        return np.divide(covariance, scale, out=np.full_like(covariance, np.nan), where=scale > 0)

    @property
    def target_means(self) -> NDArray[np.float64]:
        """Mean z (N, K) over the voxels of each target, NaN without any."""
        return self.target_sums / np.where(self.target_counts > 0, self.target_counts, np.nan)


def participant_blocks(
    runs: Sequence[CleanRun],
    weights: sparse.csr_array,
    *,
    known_variance: bool = False,
    targets: NDArray[np.int_] | slice | None = None,
    block: int = BLOCK,
) -> tuple[Iterator[ZBlock], NDArray[np.float64]]:
    """Fisher z of one participant: the mean over runs weighted by (residual df - 3).

    A voxel counts only where it is valid in every run.

    Parameters
    ----------
    runs : sequence of CleanRun
        Each with more than 3 residual degrees of freedom.
    weights : (N, V) sparse
        Spheres of the placements.
    known_variance : bool
        Also give the sampling variance of z: 1 / (n_eff - 3) for a run, n_eff being the effective
        number of volumes of each pair of seed and voxel, and that of the weighted mean.
    targets : (B,) int or slice, optional
        Rows of the voxels to correlate with; default: all. Blocks are then slices of these.
    block : int
        Voxels in a block.

    Returns
    -------
    blocks : iterator of ZBlock
    coverage : (N,)
        Smallest coverage of each sphere over the runs; 0 where a run gives it no series.
    """
    seeds, coverages = zip(*(seed_series(run, weights) for run in runs), strict=True)
    share = run_weights(runs)
    if targets is not None:
        runs = [CleanRun(r.series[:, targets], r.basis, r.finite[targets]) for r in runs]

    def blocks() -> Iterator[ZBlock]:
        streams = [
            z_blocks(run, own, lag_one=known_variance, block=block)
            for run, own in zip(runs, seeds, strict=True)
        ]
        for parts in zip(*streams, strict=True):
            valid = np.logical_and.reduce([part.valid for part in parts])
            z = parts[0].z if len(parts) == 1 else _weighted_mean(share, parts) * valid
            variance = _variance(share, runs, seeds, parts) if known_variance else None
            yield ZBlock(parts[0].where, z.astype(np.float32, copy=False), valid, variance=variance)

    return blocks(), np.minimum.reduce(coverages)


def _weighted_mean(share: NDArray[np.float64], parts: Sequence[ZBlock]) -> NDArray[np.float64]:
    mean = np.zeros(parts[0].z.shape)
    for weight, part in zip(share, parts, strict=True):
        mean += weight * part.z
    return mean


def _variance(
    share: NDArray[np.float64],
    runs: Sequence[CleanRun],
    seeds: Sequence[NDArray[np.float64]],
    parts: Sequence[ZBlock],
) -> NDArray[np.float64]:
    """Sampling variance (N, B) of the weighted mean of z over runs."""
    variance = np.zeros(parts[0].z.shape)
    for weight, run, own, part in zip(share, runs, seeds, parts, strict=True):
        assert part.lag_one is not None
        lag_one = lag_one_autocorrelation(own)
        volumes = effective_volumes(run.residual_df + 1, lag_one, part.lag_one)
        # at 3 effective volumes or fewer there is no information: infinite variance
        with np.errstate(divide="ignore"):
            variance += weight**2 / np.maximum(volumes - 3, 0)
    return variance


def run_weights(runs: Sequence[CleanRun]) -> NDArray[np.float64]:
    """Share of each run in the participant's mean z: proportional to (residual df - 3)."""
    freedom = np.array([run.residual_df - 3 for run in runs], dtype=float)
    return freedom / freedom.sum()
