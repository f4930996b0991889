"""Where the targets of the claims lie in the images, seed by seed."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from seedaudit.errors import DataError, Findings, Problem
from seedaudit.inputs.claims import Claim, read_claims
from seedaudit.inputs.design import Design
from seedaudit.inputs.regions import Regions
from seedaudit.plan import PlannedClaim, SeedPlan
from seedaudit.space.grid import VoxelSet
from seedaudit.space.spheres import sphere_weights
from seedaudit.space.talairach import talairach_to_mni
from seedaudit.study import Study

MOSTLY = 0.5
"""A target that keeps less than this share of its mask voxels is said to."""


def plan_claims(
    study: Study,
    design: Design,
    regions: Regions | None,
    seeds: list[SeedPlan],
    voxels: VoxelSet,
    findings: Findings,
) -> list[SeedPlan]:
    """Give each seed its claims, with the analysis voxels of their targets.

    Raises
    ------
    StudyError, DataError
        For a table with problems, or targets without analysis voxels.
    """
    if study.claims is None:
        return seeds
    labels = {} if regions is None else dict(
        zip(regions.names, map(int, regions.index), strict=True)
    )  # fmt: skip
    claims = read_claims(
        study.path(study.claims.table),
        [seed.name for seed in study.seed],
        labels,
        design.contrast,
        design.terms,
    )
    if len(design.matrix) == 1:
        findings.warnings.append("one participant: the claims are described, but not tested")
    planned = []
    for seed in seeds:
        own = [claim for claim in claims if claim.seed == seed.seed.name]
        found = [findings.attempt(_planned, c, seed, regions, voxels, findings) for c in own]
        planned.append(replace(seed, claims=tuple(c for c in found if c is not None)))
    return planned


def _planned(
    claim: Claim,
    seed: SeedPlan,
    regions: Regions | None,
    voxels: VoxelSet,
    findings: Findings,
) -> PlannedClaim:
    members = _members(claim, seed, regions, voxels, findings)
    where = f"claim {claim.name}, target {claim.target}"
    if not len(members):
        raise DataError(
            Problem(where, "no voxel of it lies in the mask", "a target inside the mask",
                    "check the coordinate, its space and the mask")
        )  # fmt: skip
    left = members[seed.analysis[members]]
    share = len(left) / len(members)
    if not len(left):
        raise DataError(
            Problem(
                where,
                f"lies wholly in the spheres of the cloud of seed {seed.seed.name} and their "
                f"margin of {seed.margin:g} mm",
                "a target outside them: a seed is always connected with itself",
                "another target, a smaller cloud, or a smaller exclude_margin",
            )
        )
    if share < MOSTLY:
        findings.warnings.append(
            f"{where}: only {share:.0%} of its voxels lie outside the spheres of the cloud"
        )
    return PlannedClaim(claim, left)


def _members(
    claim: Claim,
    seed: SeedPlan,
    regions: Regions | None,
    voxels: VoxelSet,
    findings: Findings,
) -> NDArray[np.int_]:
    """Mask voxels of the target."""
    if claim.at is None:
        assert regions is not None
        return np.flatnonzero(regions.labels == claim.region)
    at = np.array(claim.at)
    if seed.seed.space == "talairach":
        at = talairach_to_mni(at)
        shown = ", ".join(f"{value:.1f}" for value in at)
        findings.choices.append(
            f"claim {claim.name}: its coordinate is taken as Talairach, like that of its seed; "
            f"in MNI ({shown})"
        )
    return np.asarray(sphere_weights(voxels, at, claim.radius).indices)
