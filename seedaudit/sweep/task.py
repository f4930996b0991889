"""What a worker is asked, and what is kept of each participant."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from seedaudit.inputs.volumes import RunHeader
from seedaudit.space.grid import VoxelSet
from seedaudit.sweep.moments import Moments, Steps
from seedaudit.sweep.participant import CloudTargets, Kept

LEAST_RESIDUAL_DF = 4
"""A run's weight is its residual degrees of freedom minus 3."""


@dataclass(frozen=True)
class RunTask:
    """One run to read: its header, its confounds table and its own mask, if any.

    `nuisance_rank` is the number of independent nuisance columns, the intercept included.
    """

    header: RunHeader
    confounds: Path | None = None
    mask: Path | None = None
    nuisance_rank: int = 1

    @property
    def residual_df(self) -> int:
        """Volumes minus independent nuisance columns."""
        return self.header.n_volumes - self.nuisance_rank


@dataclass(frozen=True)
class ParticipantTask:
    """One participant: the label, the row of the design matrix, and the runs."""

    participant: str
    row: int
    runs: tuple[RunTask, ...]


@dataclass(frozen=True)
class CleaningRecipe:
    """The nuisance columns of a run; `censor` is (column, above, before, after)."""

    drift: int = 0
    band: tuple[float, float] | None = None
    confounds: tuple[str, ...] = ()
    censor: tuple[str, float, int, int] | None = None
    smooth: float = 0.0
    repetition_time: float | None = None


@dataclass(frozen=True)
class SearchTask:
    """Spheres of a lattice around one seed, looked at on an even subset of voxels only.

    Parameters
    ----------
    weights : (M, V) sparse
        Spheres of the lattice points.
    targets : (B,) int
        Rows of the voxels that their maps are known at.
    """

    weights: sparse.csr_array
    targets: NDArray[np.int_]


@dataclass
class SearchSums:
    """Sum of z (M, B) over participants, and how many have each target voxel (B,)."""

    z: NDArray[np.float64]
    count: NDArray[np.int_]

    def __iadd__(self, other: SearchSums) -> SearchSums:
        self.z += other.z
        self.count += other.count
        return self


@dataclass(frozen=True)
class SweepTask:
    """All that a worker needs to know.

    Parameters
    ----------
    voxels : VoxelSet
        Mask voxels.
    weights : (N, V) sparse
        Spheres of all placements of all seeds.
    clouds : tuple of CloudTargets
        One for each seed.
    design : (n, p)
    cleaning : CleaningRecipe
    min_coverage : float
        Share of a reported sphere that must vary in every run.
    set_aside : bool
        Leave out a participant whose data are bad, instead of stopping.
    single : bool
        One participant: keep the sampling variance of z.
    keep_reported : bool
        Keep each participant's z map of every reported placement (for permutation).
    searches : tuple of SearchTask
        One for each seed where a steadier one is looked for; may be empty.
    prepared : Path or None
        Folder where decompressed runs are kept and found again.
    steps : Steps or None
        Of the state; None for float64.
    ahead : int
        Voxels at the front of `voxels` that are read for the spheres only; no map holds them.
    columns : (V,) int or None
        Where `voxels` are in `prepared_voxels`, when they are not the same.
    prepared_voxels : VoxelSet or None
        Voxels of the prepared runs; None for `voxels`.
    """

    voxels: VoxelSet
    weights: sparse.csr_array
    clouds: tuple[CloudTargets, ...]
    design: NDArray[np.float64]
    cleaning: CleaningRecipe
    min_coverage: float = 0.5
    set_aside: bool = False
    single: bool = False
    keep_reported: bool = False
    searches: tuple[SearchTask, ...] = ()
    prepared: Path | None = None
    steps: Steps | None = None
    ahead: int = 0
    columns: NDArray[np.int_] | None = None
    prepared_voxels: VoxelSet | None = None

    @property
    def n_voxels(self) -> int:
        """Voxels of the maps."""
        return len(self.voxels) - self.ahead

    def empty_moments(self) -> Moments:
        """The neutral element for this task."""
        return Moments.empty(
            self.design.shape[1],
            self.weights.shape[0],
            self.n_voxels,
            variance=self.single,
            steps=self.steps,
        )

    def empty_searches(self) -> list[SearchSums]:
        """The neutral element of the lattices."""
        return [
            SearchSums(
                np.zeros((search.weights.shape[0], len(search.targets))),
                np.zeros(len(search.targets), int),
            )
            for search in self.searches
        ]


@dataclass(frozen=True)
class ParticipantRecord:
    """What is kept of a participant beside the moments.

    `coverage` (N,) is the smallest share of each sphere that varies in the participant's runs;
    `reported_z` (clouds, V) is z of the reported placements, NaN where missing, if it was kept;
    `search_coverage` is the like of `coverage` for the lattice of each search.
    """

    participant: str
    row: int
    n_runs: int
    n_volumes: int = 0
    n_censored: int = 0
    residual_df: int = 0
    n_missing_voxels: int = 0
    digests: tuple[str, ...] = ()
    coverage: NDArray[np.float64] | None = None
    kept: tuple[Kept, ...] = ()
    reported_z: NDArray[np.float32] | None = None
    search_coverage: tuple[NDArray[np.float64], ...] = ()
    used: bool = True
    reason: str = ""
