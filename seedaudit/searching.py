"""Where a steadier seed is looked for: the lattice of places, and the voxels they are judged on."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array

from seedaudit.errors import DataError, Findings, Problem, StudyError
from seedaudit.space.grid import VoxelSet
from seedaudit.space.lattice import Neighbourhoods, ball_lattice, evenly_spread, neighbourhoods
from seedaudit.space.spheres import cloud_exclusion, sphere_coverage, sphere_weights
from seedaudit.study import Seed, Study

LEAST_TARGETS = 50
"""A spatial correlation over fewer voxels says nothing about a map."""

MOST_STEPS = 30
"""From the reported seed to the edge of its lattice: some 110 000 points."""

LEAST_FOLDS_FOR_A_MOVE = 3
"""The gain has an interval from so many folds on, and no move is recommended without one."""


@dataclass(frozen=True, eq=False)
class PlannedSearch:
    """The lattice around one reported seed, ready for the pass.

    Parameters
    ----------
    shifts : (M, 3) float64
        Lattice points whose sphere can be used, mm from the reported centre, which is row 0.
    weights : (M, V) sparse
        Their spheres.
    targets : (B,) int
        Rows of the voxels that their maps are compared on.
    population : int
        Mask voxels outside all spheres and the margin, which the targets are an even choice of.
    search, within, step : float
        Largest distance of a candidate, and of a neighbour from its candidate; spacing; mm.
    n_lattice : int
        Lattice points, usable or not.
    """

    shifts: NDArray[np.float64]
    weights: csr_array
    targets: NDArray[np.int64]
    population: int
    search: float
    within: float
    step: float
    n_lattice: int

    def around(self, usable: NDArray[np.bool_] | None = None) -> Neighbourhoods:
        """Candidates and their neighbours among those lattice points (M,) that can be used."""
        everything = np.ones(len(self.shifts), bool)
        usable = everything if usable is None else usable
        return neighbourhoods(self.shifts, usable, self.search, self.within, self.step)


def plan_search(
    study: Study,
    seed: Seed,
    at: NDArray[np.float64],
    placement_error: tuple[float, float | None],
    margin: float,
    voxels: VoxelSet,
    inside: VoxelSet | None,
) -> PlannedSearch | None:
    """The search around one seed, if the study asks for one.

    Parameters
    ----------
    study : Study
    seed : Seed
    at : (3,)
        Its centre in the space of the images, mm.
    placement_error : (within, sd)
        Radius of the cloud, and standard deviation of its draws where they are normal, mm.
    margin : float
        Widening of the spheres that no target lies in, mm.
    voxels : VoxelSet
    inside : VoxelSet, optional
        Places other than the reported one must lie in it.

    Raises
    ------
    StudyError
        If the step does not fit, or no placement error leads to a place that can be used.
    DataError
        If too few voxels are left to compare maps on.
    """
    asked = study.steadier
    if asked is None:
        return None
    within = neighbourhood_radius(*placement_error)
    reach = asked.search + within
    _check_step(asked.step, within, reach)
    lattice = ball_lattice(reach, asked.step)
    coverage, _ = sphere_coverage(voxels, at + lattice, seed.radius, study.placements.weighting)
    usable = coverage >= study.placements.min_coverage
    if inside is not None:
        usable &= inside.rows_at(inside.grid.voxel_of(at + lattice)) >= 0
    usable[0] = True
    shifts = lattice[usable]
    targets = _outside(voxels, at + shifts, seed.radius, margin)
    if len(targets) < LEAST_TARGETS:
        reach += seed.radius + margin
        raise DataError(
            Problem(
                f"seed {seed.name}, steadier",
                f"{len(targets)} mask voxels lie outside every sphere of the search and the "
                f"margin, which reach out to {reach:.3g} mm",
                f"at least {LEAST_TARGETS}, to compare maps on",
                "a smaller `search`, cloud or margin",
            )
        )
    chosen = targets[evenly_spread(voxels.subset(_mask(len(voxels), targets)), asked.targets)]
    planned = PlannedSearch(
        shifts,
        sphere_weights(voxels, at + shifts, seed.radius, study.placements.weighting),
        chosen,
        len(targets),
        asked.search,
        within,
        asked.step,
        len(lattice),
    )
    if len(planned.around().candidates) < 2:
        raise StudyError(
            Problem(
                f"seed {seed.name}, steadier",
                "no place but the reported one has a sphere and neighbours in the mask",
                "another place to choose",
                "a larger `search`, a smaller `step`, or leave the section [steadier] out",
            )
        )
    return planned


def neighbourhood_radius(within: float, sd: float | None) -> float:
    """Radius of the ball that stands for the placement error around each candidate, mm.

    That of the cloud; of a normal cloud, the ball whose points lie as far off in the root mean
    square (3/5 R^2 = 3 sd^2), so that its far tail does not make the lattice large.
    """
    return within if sd is None else min(within, float(np.sqrt(5) * sd))


def check_search(study: Study, participants: int, findings: Findings) -> None:
    """Whether the participants can be halved."""
    if study.steadier is None:
        return
    if participants < 2:
        found = "no search is possible with one participant"
        allowed = "two at least: a place is chosen in one half of them and scored in the other"
        remedy = "leave the section [steadier] out, or add participants"
        findings.wrong(Problem("steadier", found, allowed, remedy), StudyError)
    elif min(participants, study.group.folds) < LEAST_FOLDS_FOR_A_MOVE:
        findings.warnings.append(
            "steadier: with two folds of participants the gain of the search has no interval, so "
            "that the reported seed is kept whatever is found"
        )


def note_search(name: str, search: PlannedSearch | None, findings: Findings) -> None:
    """What was decided about the search around a seed."""
    if search is None:
        return
    around = search.around()
    findings.choices.append(
        f"seed {name}: a steadier one is looked for at {len(around.candidates) - 1} other places "
        f"within {search.search:g} mm on a lattice of {search.step:g} mm, each with its neighbours "
        f"within {search.within:.3g} mm; the maps of {len(search.shifts)} spheres are compared on "
        f"{len(search.targets)} of the {search.population} mask voxels outside all of them"
    )
    share = float(around.share[0])
    if share < 1:
        findings.warnings.append(
            f"seed {name}: {1 - share:.0%} of the neighbours of the reported seed lie outside the "
            "mask; its score describes one side of it"
        )


def _check_step(step: float, within: float, reach: float) -> None:
    if step > within:
        raise StudyError(
            Problem(
                "steadier.step",
                f"is {step:g}, and the placement error reaches {within:.3g} mm",
                "a step that leads to a neighbour within the placement error",
                "a smaller step, or a wider cloud",
            )
        )
    if reach / step > MOST_STEPS:
        raise StudyError(
            Problem(
                "steadier.step",
                f"is {step:g}, and the lattice reaches {reach:.3g} mm, search and placement error",
                f"{reach / MOST_STEPS:.2g} or more",
                "a larger step or a smaller `search`",
            )
        )


def _outside(
    voxels: VoxelSet, centres: NDArray[np.float64], radius: float, margin: float
) -> NDArray[np.int64]:
    """Rows of the voxels outside all spheres widened by the margin."""
    radii = np.full(len(centres), radius)
    return np.flatnonzero(~cloud_exclusion(voxels, centres, radii, margin))


def _mask(length: int, rows: NDArray[np.int64]) -> NDArray[np.bool_]:
    mask = np.zeros(length, bool)
    mask[rows] = True
    return mask
