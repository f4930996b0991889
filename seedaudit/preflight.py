"""From a study to a plan: find every input, read it as far as its header, check all together.

Nothing is computed on image data here but presence of voxels; a plan exists only when the audit
can start.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable
from dataclasses import replace
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from seedaudit.errors import DataError, Problem, SeedAuditError, StudyError
from seedaudit.inputs.design import build_design
from seedaudit.inputs.discover import Run, find_runs
from seedaudit.inputs.header import RunHeader, read_header, read_image_header
from seedaudit.inputs.regions import Regions, read_regions
from seedaudit.inputs.volumes import first_volume, read_mask
from seedaudit.placements import build_cloud
from seedaudit.plan import Plan, SeedPlan, cloud_size
from seedaudit.space.grid import Grid, VoxelSet
from seedaudit.space.spheres import cloud_exclusion
from seedaudit.space.talairach import talairach_to_mni
from seedaudit.study import Seed, Study
from seedaudit.sweep.schedule import (
    LEAST_RESIDUAL_DF,
    CleaningRecipe,
    ParticipantRecord,
    ParticipantTask,
    RunTask,
    run_basis,
)

Result = TypeVar("Result")

WHOLE_FIELD = 0.95
"""A presence mask that fills more of the image than this has found no background."""

FEW_DF = 30
"""Residual degrees of freedom of a run below which its correlations are noisy enough to say so."""


class Findings:
    """Problems, warnings and choices, gathered while the plan is made."""

    def __init__(self) -> None:
        self.problems: list[tuple[type[SeedAuditError], Problem]] = []
        self.warnings: list[str] = []
        self.choices: list[str] = []

    def attempt(self, step: Callable[..., Result], *args: object) -> Result | None:
        """Run one step; its problems are kept, so that the next step is checked as well."""
        try:
            return step(*args)
        except SeedAuditError as error:
            self.problems += [(type(error), problem) for problem in error.problems]
            return None

    def wrong(self, problem: Problem, kind: type[SeedAuditError] = DataError) -> None:
        """Add one problem."""
        self.problems.append((kind, problem))

    def raise_if_any(self) -> None:
        """Raise all problems as one error: of the study if any of them is, else of the data."""
        if self.problems:
            kinds = {kind for kind, _ in self.problems}
            kind = StudyError if StudyError in kinds else DataError
            # one cause may be met on several ways
            raise kind(*dict.fromkeys(problem for _, problem in self.problems))


def make_plan(study: Study) -> Plan:
    """Find, check and describe all inputs of a study.

    Raises
    ------
    StudyError, DataError
        With every problem found.
    """
    findings = Findings()
    data = study.data
    runs = findings.attempt(find_runs, data.runs, study.base, data.bids, data.select)
    findings.raise_if_any()
    assert runs is not None
    cleaning = _recipe(study)
    participants, set_aside = _participants(study, runs, cleaning, findings)
    if not participants:
        findings.wrong(Problem("data", "no participant is left", "at least one", "mend the runs"))
        findings.raise_if_any()
    header = participants[0].runs[0].header
    _note_headers(study, participants, findings)
    voxels = findings.attempt(_mask_voxels, study, header.grid, participants, findings)
    design = findings.attempt(
        build_design,
        [p.participant for p in participants],
        study.path(study.group.table) if study.group.table else None,
        study.group.model,
        study.group.effect,
    )
    regions, seeds = None, []
    if voxels is not None:
        regions = findings.attempt(_regions, study, voxels, findings)
        inside = findings.attempt(_inside, study)
        made = (findings.attempt(_seed_plan, study, seed, voxels, inside) for seed in study.seed)
        seeds = [seed for seed in made if seed is not None]
    findings.raise_if_any()
    assert voxels is not None
    assert design is not None
    for seed in seeds:
        _note_seed(seed, regions, study, findings)
    return Plan(
        study, voxels, tuple(participants), design, regions, tuple(seeds), cleaning,
        tuple(set_aside), tuple(findings.warnings), tuple(findings.choices),
    )  # fmt: skip


def _recipe(study: Study) -> CleaningRecipe:
    cleaning, repetition_time = study.cleaning, study.data.repetition_time
    if cleaning is None:
        return CleaningRecipe(repetition_time=repetition_time)
    censor = cleaning.censor
    return CleaningRecipe(
        cleaning.drift,
        cleaning.band,
        cleaning.confounds,
        None if censor is None else (censor.column, censor.above, censor.before, censor.after),
        cleaning.smooth,
        repetition_time,
    )


def _participants(
    study: Study, runs: Iterable[Run], cleaning: CleaningRecipe, findings: Findings
) -> tuple[list[ParticipantTask], list[ParticipantRecord]]:
    """Participants whose runs have headers, grids and confounds in order, and those set aside."""
    by_participant: dict[str, list[Run]] = {}
    for run in runs:
        by_participant.setdefault(run.participant, []).append(run)
    grid = study.data.grid
    declared = None if grid is None else findings.attempt(read_image_header, study.path(grid))
    tasks: list[ParticipantTask] = []
    set_aside: list[ParticipantRecord] = []
    first: RunHeader | None = None
    for participant, own in by_participant.items():
        trial, good = Findings(), []
        for run in own:
            task = trial.attempt(_run_task, run, cleaning, first, declared)
            if task is not None:
                good.append(task)
                first = first or task.header
        if not trial.problems:
            tasks.append(ParticipantTask(participant, len(tasks), tuple(good)))
        elif study.data.on_bad_run == "set-aside":
            reason = "; ".join(problem.brief for _, problem in trial.problems)
            set_aside.append(
                ParticipantRecord(participant, -1, len(own), used=False, reason=reason)
            )
            findings.warnings.append(f"participant {participant} is set aside: {reason}")
        else:
            findings.problems += trial.problems
    return tasks, set_aside


def _run_task(
    run: Run, cleaning: CleaningRecipe, first: RunHeader | None, declared: RunHeader | None
) -> RunTask:
    header = read_header(run.bold, declared)
    task = RunTask(header, run.confounds, run.mask)
    problems = []
    if first is not None and not header.grid.matches(first.grid):
        problems.append(
            Problem(
                run.bold.name,
                f"is on another grid than {first.path.name}: {header.grid.difference(first.grid)}",
                "all runs on one grid",
                "resample the runs to one grid before the audit",
            )
        )
    try:
        basis, _ = run_basis(task, cleaning)
        task = replace(task, nuisance_rank=basis.shape[1])
        if task.residual_df < LEAST_RESIDUAL_DF:
            problems.append(_too_few(task))
    except SeedAuditError as error:
        problems += list(error.problems)
    if run.mask is not None:
        try:
            read_mask(run.mask, header.grid)
        except DataError as error:
            problems += list(error.problems)
    if problems:
        raise DataError(*problems)
    return task


def _too_few(task: RunTask) -> Problem:
    return Problem(
        task.header.path.name,
        f"{task.header.n_volumes} volumes and {task.nuisance_rank} independent nuisance columns "
        f"leave {task.residual_df} residual degrees of freedom",
        f"at least {LEAST_RESIDUAL_DF}",
        "fewer confounds, a wider pass band, less censoring, or longer runs",
    )


def _mask_voxels(
    study: Study, grid: Grid, participants: list[ParticipantTask], findings: Findings
) -> VoxelSet:
    if study.data.mask is not None:
        mask, _ = read_mask(study.path(study.data.mask), grid)
    else:
        mask = _presence(participants, findings)
        findings.choices.append(
            f"no mask was given: {int(mask.sum())} voxels present in the first volume of every run"
        )
    if not mask.any():
        raise DataError(Problem("mask", "holds no voxel", "at least one voxel above 0"))
    return VoxelSet.from_mask(grid, mask)


def _presence(participants: list[ParticipantTask], findings: Findings) -> NDArray[np.bool_]:
    """Voxels that are finite and not 0 in the first volume of every run.

    Unmasked scans have noise where there is no head; then the usual intensity mask of each first
    volume (nilearn.masking.compute_epi_mask) is used as well.
    """
    headers = [run.header for participant in participants for run in participant.runs]
    volumes = [first_volume(header) for header in headers]
    mask = np.logical_and.reduce([np.isfinite(v) & (v != 0) for v in volumes])
    if mask.mean() > WHOLE_FIELD:
        import nibabel as nib
        from nilearn.masking import compute_epi_mask

        affine = headers[0].grid.affine
        for volume in volumes:
            image = nib.Nifti1Image(np.nan_to_num(volume), affine)
            mask &= compute_epi_mask(image, ensure_finite=True).get_fdata() > 0
        findings.choices.append("the images have no empty background: cut by intensity")
    return mask


def _regions(study: Study, voxels: VoxelSet, findings: Findings) -> Regions | None:
    source = study.data.regions
    if source is None:
        findings.warnings.append("no `regions` were given: there will be no table of regions")
        return None
    regions = read_regions(source if source == "dosenbach2010" else study.path(source), voxels)
    findings.choices += regions.notes
    return regions


def _inside(study: Study) -> VoxelSet | None:
    if study.placements.inside is None:
        return None
    mask, grid = read_mask(study.path(study.placements.inside))
    return VoxelSet.from_mask(grid, mask)


def _seed_plan(study: Study, seed: Seed, voxels: VoxelSet, inside: VoxelSet | None) -> SeedPlan:
    asked = study.placements
    at = np.array(seed.at)
    if seed.space == "talairach":
        at = talairach_to_mni(at)
    within, sd = cloud_size(asked)
    cloud = build_cloud(
        seed.name,
        at,
        seed.radius,
        voxels,
        draw=asked.draw,
        count=asked.count,
        within=within,
        random_state=asked.random_state,
        sd=sd,
        distances=asked.distances or ([within] if asked.draw == "shell" else None),
        step=asked.step or (2.0 if asked.draw == "lattice" else None),
        radii=asked.radii,
        snap=asked.snap,
        weighting=asked.weighting,
        inside=inside,
        min_coverage=asked.min_coverage,
        midline=seed.space != "native",
    )
    margin = study.consensus.exclude_margin
    margin = voxels.grid.largest_edge if margin is None else margin
    used = cloud.table[cloud.table["used"]]
    spheres = cloud_exclusion(voxels, used[["x", "y", "z"]].to_numpy(), used["radius"], margin)
    if spheres.all():
        raise DataError(
            Problem(
                f"seed {seed.name}",
                "the spheres of its cloud and the margin cover the whole mask",
                "some analysis voxels outside them",
                "a smaller cloud, radius or margin, or a larger mask",
            )
        )
    return SeedPlan(seed, at, cloud, within, sd, margin, ~spheres)


def _note_headers(study: Study, participants: list[ParticipantTask], findings: Findings) -> None:
    headers = [run.header for participant in participants for run in participant.runs]
    for text, names in _by_text(headers).items():
        others = f" (and {len(names) - 1} more runs)" if len(names) > 1 else ""
        findings.warnings.append(f"{names[0]}{others}: {text}")
    runs = [run for participant in participants for run in participant.runs]
    least = min(runs, key=lambda run: run.residual_df)
    if least.residual_df < FEW_DF:
        findings.warnings.append(
            f"{least.header.path.name}: only {least.residual_df} residual degrees of freedom are "
            "left after cleaning; its correlations are noisy"
        )
    times = Counter(h.repetition_time for h in headers)
    if study.data.repetition_time is None and len(times) > 1:
        listed = ", ".join(f"{time} s ({n} runs)" for time, n in times.items())
        findings.warnings.append(f"the runs differ in repetition time: {listed}")
    if any(seed.space != "native" for seed in study.seed):
        scanner = [h.path.name for h in headers if h.space_code == 1]
        if scanner:
            findings.warnings.append(
                f"{scanner[0]}: the header says scanner space, but the seed is given in a template "
                "space; the coordinates mean little unless the images are in that space "
                f"({len(scanner)} runs)"
            )
    findings.choices.append(
        f"the space of the images is taken from the header (code {headers[0].space_code})"
    )


def _by_text(headers: Iterable[RunHeader]) -> dict[str, list[str]]:
    """The files that each warning of a header is about: one cause often meets every run."""
    found: dict[str, list[str]] = {}
    for header in headers:
        for text in header.warnings:
            found.setdefault(text, []).append(header.path.name)
    return found


def _note_seed(plan: SeedPlan, regions: Regions | None, study: Study, findings: Findings) -> None:
    name, table = plan.seed.name, plan.cloud.table
    if plan.seed.space == "talairach":
        there, here = (", ".join(f"{x:.1f}" for x in xyz) for xyz in (plan.seed.at, plan.at))
        findings.choices.append(
            f"seed {name}: Talairach ({there}) is MNI ({here}) by Lancaster et al. 2007"
        )
    dropped = int((~table["used"]).sum())
    if dropped:
        findings.warnings.append(
            f"seed {name}: {dropped} of {len(table) - 1} placements are set aside, less than "
            f"{study.placements.min_coverage:.0%} of their sphere lies in the mask"
        )
    reported_flags = table["flags"].iloc[0]
    if reported_flags:
        findings.warnings.append(
            f"seed {name}: flags of the reported placement: {reported_flags.replace(';', ', ')}"
        )
    if regions is not None:
        held = np.isin(regions.index, regions.labels[plan.analysis])
        empty = [n for n, any_voxel in zip(regions.names, held, strict=True) if not any_voxel]
        if empty:
            findings.warnings.append(
                f"seed {name}: no analysis voxel in region {', '.join(empty)}; reported as n/a"
            )
