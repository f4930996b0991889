"""One participant's runs into the state of a fold, and what is kept of the participant."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

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


@dataclass(frozen=True)
class Kept:
    """What is kept of one participant for one cloud: both small.

    `similarity` (N,) is the spatial correlation of each placement's z map with the reported
    placement's; `target_means` (N, K) is mean z over the voxels of each target, NaN without any.
    """

    similarity: NDArray[np.float64]
    target_means: NDArray[np.float64]


class KeptSums:
    """Running sums behind `Kept`, fed block by block."""

    def __init__(self, cloud: CloudTargets) -> None:
        n, k = cloud.rows.stop - cloud.rows.start, cloud.targets.shape[1]
        self.cloud = cloud
        self.n_voxels = 0
        self.sums = np.zeros(n)
        self.squares = np.zeros(n)
        self.products = np.zeros(n)
        self.target_sums = np.zeros((n, k))
        self.target_counts = np.zeros(k)

    def add(self, block: ZBlock) -> None:
        """Add the z of one block of voxels."""
        keep = block.valid & self.cloud.analysis[block.where]
        z = block.z[self.cloud.rows][:, keep].astype(np.float64)
        self.n_voxels += z.shape[1]
        self.sums += z.sum(axis=1)
        self.squares += np.einsum("nv,nv->n", z, z)
        self.products += z @ z[0]
        members = self.cloud.targets[block.where][keep]
        self.target_sums += (members.T @ z.T).T
        self.target_counts += np.asarray(members.sum(axis=0)).ravel()

    def finish(self) -> Kept:
        """The similarity and the target means."""
        n = max(self.n_voxels, 1)
        covariance = self.products - self.sums * self.sums[0] / n
        variance = np.maximum(self.squares - self.sums**2 / n, 0)
        scale = np.sqrt(variance * variance[0])
        similarity = np.divide(
            covariance, scale, out=np.full_like(covariance, np.nan), where=scale > 0
        )
        counts = np.where(self.target_counts > 0, self.target_counts, np.nan)
        return Kept(similarity, self.target_sums / counts)


def participant_blocks(
    runs: Sequence[CleanRun],
    weights: sparse.csr_array,
    *,
    known_variance: bool = False,
    targets: NDArray[np.int_] | None = None,
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
    targets : (B,) int, optional
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
