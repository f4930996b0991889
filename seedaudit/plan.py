"""The plan of an audit: every input found, checked and described, ready for the pass."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import sparse

from seedaudit.inputs.claims import Claim
from seedaudit.inputs.design import Design
from seedaudit.inputs.header import RunHeader
from seedaudit.inputs.regions import Regions
from seedaudit.placements import Cloud, uncertainty_sd
from seedaudit.searching import PlannedSearch
from seedaudit.space.grid import VoxelSet
from seedaudit.study import Placements, Seed, Study
from seedaudit.sweep.moments import Steps
from seedaudit.sweep.participant import CloudTargets
from seedaudit.sweep.schedule import (
    IN_MEMORY,
    CleaningRecipe,
    Layout,
    ParticipantRecord,
    ParticipantTask,
    SweepTask,
    assign_folds,
)
from seedaudit.sweep.task import SearchTask

USUAL_WITHIN = 6.0
CUT_OFF_SD = 3.0
"""A normal cloud drawn from an uncertainty budget ends at this many standard deviations."""


@dataclass(frozen=True)
class PlannedClaim:
    """A claim, and the rows of the analysis voxels that its target holds."""

    claim: Claim
    members: NDArray[np.int_]


@dataclass(frozen=True)
class SeedPlan:
    """One seed's cloud and the voxels it is judged on.

    Parameters
    ----------
    seed : Seed
        As asked.
    at : (3,) float64
        Centre in the space of the images, mm.
    cloud : Cloud
    within : float
        Radius of the cloud, mm.
    sd : float or None
        Standard deviation of a normal cloud, mm.
    margin : float
        Widening of the spheres that no analysis uses, mm.
    analysis : (V,) bool
        Mask voxels outside all spheres of the cloud widened by the margin; those of control seeds
        are no part of the cloud.
    claims : tuple of PlannedClaim
    search : PlannedSearch or None
        Where a steadier seed is looked for, if it is.
    """

    seed: Seed
    at: NDArray[np.float64]
    cloud: Cloud
    within: float
    sd: float | None
    margin: float
    analysis: NDArray[np.bool_]
    claims: tuple[PlannedClaim, ...] = ()
    search: PlannedSearch | None = None

    @property
    def used(self) -> NDArray[np.int_]:
        """Rows of the placement table that go into the pass."""
        return np.flatnonzero(self.cloud.table["used"].to_numpy(dtype=bool))


@dataclass(frozen=True)
class Plan:
    """Everything that the pass needs, checked.

    `design` has one row for each of `participants`; `set_aside` are those left out already;
    `warnings` are for the user's attention, `choices` what the program decided. `folds` are as
    asked, or fewer where memory leaves no other way; `layout` is how the pass keeps to its memory
    (`seedaudit.budget`).
    """

    study: Study
    voxels: VoxelSet
    participants: tuple[ParticipantTask, ...]
    design: Design
    regions: Regions | None
    seeds: tuple[SeedPlan, ...]
    cleaning: CleaningRecipe
    set_aside: tuple[ParticipantRecord, ...]
    warnings: tuple[str, ...]
    choices: tuple[str, ...]
    folds: int = 8
    layout: Layout = IN_MEMORY

    @property
    def first_run(self) -> RunHeader:
        """Header of the first run, which all others agree with."""
        return self.participants[0].runs[0].header

    @property
    def in_template_space(self) -> bool:
        """Whether the seeds are given in a template space, which the images are then in too."""
        return any(seed.seed.space != "native" for seed in self.seeds)

    @property
    def n_swept(self) -> int:
        """Placements that go into the pass, over all seeds."""
        return sum(len(seed.used) for seed in self.seeds)

    def sweep_task(self, design: NDArray[np.float64]) -> SweepTask:
        """What the workers of the pass need, with an equivalent design of their own (n, p)."""
        weights = sparse.vstack([seed.cloud.weights[seed.used] for seed in self.seeds]).tocsr()
        clouds, start = [], 0
        for seed in self.seeds:
            rows = slice(start, start + len(seed.used))
            clouds.append(CloudTargets(rows, seed.analysis, self._targets(seed)))
            start = rows.stop
        return SweepTask(
            self.voxels,
            sparse.csr_array(weights),
            tuple(clouds),
            design,
            self.cleaning,
            min_coverage=self.study.placements.min_coverage,
            set_aside=self.study.data.on_bad_run == "set-aside",
            single=len(self.participants) == 1,
            keep_reported=self.study.threshold.rule == "fwe",
            steps=self.steps(design),
            searches=tuple(
                SearchTask(seed.search.weights, seed.search.targets)
                for seed in self.seeds
                if seed.search is not None
            ),
        )

    def steps(self, design: NDArray[np.float64]) -> Steps | None:
        """Of the state: one participant's is read as it is, a group's is a sum."""
        if len(self.participants) == 1:
            return None
        return Steps.of(design, assign_folds(self.design.strata, self.folds))

    @property
    def n_regions(self) -> int:
        """Network regions; the first targets of every cloud."""
        return 0 if self.regions is None else len(self.regions.index)

    def _targets(self, seed: SeedPlan) -> sparse.csr_array:
        """Voxels by target: the regions, then the targets of the seed's claims."""
        members = []
        if self.regions is not None:
            labels = np.where(seed.analysis, self.regions.labels, 0)
            members = [np.flatnonzero((labels == k) & (labels != 0)) for k in self.regions.index]
        members += [claim.members for claim in seed.claims]
        rows = np.concatenate([np.zeros(0, int), *members])
        columns = np.repeat(np.arange(len(members)), [len(rows) for rows in members])
        shape = (len(self.voxels), len(members))
        return sparse.csr_array((np.ones(len(rows)), (rows, columns)), shape=shape)


def kept_placements(seed: SeedPlan, table: pd.DataFrame) -> NDArray[np.int_]:
    """Rows, among those swept for a seed, of the placements that its result kept.

    Parameters
    ----------
    seed : SeedPlan
    table : DataFrame
        The placements of the result, where more may be set aside than before the pass.

    Returns
    -------
    (N,) int
        The reported one first; control seeds are no placements.
    """
    swept = table.iloc[seed.used]
    kept = swept["used"].to_numpy(dtype=bool) & (swept["kind"].to_numpy() != "control")
    return np.flatnonzero(kept)


def cloud_size(asked: Placements) -> tuple[float, float | None]:
    """Radius of the cloud and standard deviation of its draws, mm."""
    if asked.uncertainty is not None:
        sd = uncertainty_sd(asked.uncertainty)
        return asked.within or CUT_OFF_SD * sd, sd
    within = asked.within or (max(asked.distances) if asked.distances else USUAL_WITHIN)
    if asked.draw == "normal":
        return within, asked.sd or within / 2
    return within, None
