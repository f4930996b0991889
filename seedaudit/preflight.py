"""From a study to a plan: find every input, read it as far as its header, check all together.

Nothing is computed on image data here but presence of voxels; a plan exists only when the audit
can start.
"""

from __future__ import annotations

import warnings
from collections.abc import Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from seedaudit.comparisons import note_copies, note_sides
from seedaudit.errors import DataError, Findings, Problem, StudyError, counted
from seedaudit.inputs.design import build_design
from seedaudit.inputs.discover import Run, is_file, list_runs
from seedaudit.inputs.header import RunHeader
from seedaudit.inputs.regions import Regions, read_regions
from seedaudit.inputs.volumes import first_volume, read_mask
from seedaudit.participants import (
    cleaning_recipe,
    note_headers,
    note_people,
    sort_participants,
)
from seedaudit.placements import add_controls, build_cloud
from seedaudit.plan import Plan, SeedPlan, cloud_size
from seedaudit.searching import check_search, note_search, plan_search
from seedaudit.space.grid import VoxelSet
from seedaudit.space.spheres import cloud_exclusion
from seedaudit.space.talairach import talairach_to_mni
from seedaudit.study import Placements, Seed, Study
from seedaudit.sweep.schedule import (
    ParticipantRecord,
    ParticipantTask,
)
from seedaudit.targets import plan_claims

WHOLE_FIELD = 0.95
"""A presence mask that fills more of the image than this has found no background."""


def make_plan(study: Study) -> Plan:
    """Find, check and describe all inputs of a study.

    Raises
    ------
    StudyError, DataError
        With every problem found.
    """
    findings = Findings()
    runs = _listed_runs(study, findings)
    cleaning = cleaning_recipe(study)
    # a file that is missing is told already
    found = [run for run in runs if all(map(is_file, run.files))]
    participants, set_aside = sort_participants(study, found, cleaning, findings)
    # where a bad run stops the audit, the model is judged with everyone in it
    left_out = {record.participant for record in set_aside}
    people = [name for name in dict.fromkeys(run.participant for run in runs)
              if name not in left_out]  # fmt: skip
    table = study.path(study.group.table) if study.group.table else None
    design = None
    if people:
        design = findings.attempt(
            build_design, people, table, study.group.model, study.group.effect
        )
    elif runs:
        findings.wrong(Problem("data", "no participant is left", "at least one"))
    if table is not None and runs:
        findings.attempt(note_people, table, runs, findings)
    note_copies([run for run in found if run.participant not in left_out], findings)
    header = None
    if participants:
        header = participants[0].runs[0].header
        note_headers(study, participants, findings)
        note_sides(participants, findings)
    voxels = findings.attempt(_mask_voxels, study, header, participants, findings)
    regions, seeds = None, []
    if voxels is not None:
        regions = findings.attempt(_regions, study, voxels, findings)
        inside = findings.attempt(_inside, study)
        made = (findings.attempt(_seed_plan, study, seed, voxels, inside) for seed in study.seed)
        seeds = [seed for seed in made if seed is not None]
    if voxels is not None and design is not None and (regions or not study.data.regions):
        asserted = (study, design, regions, seeds, voxels, findings)
        seeds = findings.attempt(plan_claims, *asserted) or seeds
    if people:
        _check_fwe(study, len(people), findings)
        check_search(study, len(people), findings)
    _raise_if_any(findings, set_aside)
    assert voxels is not None
    assert design is not None
    assert participants
    for seed in seeds:
        _note_seed(seed, regions, study, findings)
    return Plan(
        study, voxels, tuple(participants), design, regions, tuple(seeds), cleaning,
        tuple(set_aside), tuple(findings.warnings), tuple(findings.choices),
        folds=study.group.folds,
    )  # fmt: skip


def _listed_runs(study: Study, findings: Findings) -> tuple[Run, ...]:
    """All runs that are listed; what is wrong with the list hides no other problem."""
    data = study.data
    listed = findings.attempt(list_runs, data.runs, study.base, data.bids, data.select)
    runs, problems = listed or ((), ())
    for problem in problems:
        findings.wrong(problem)
    return tuple(runs)


def _mask_voxels(
    study: Study,
    header: RunHeader | None,
    participants: list[ParticipantTask],
    findings: Findings,
) -> VoxelSet | None:
    """The analysis mask; without a run that can be used, what the mask alone tells."""
    if study.data.mask is not None:
        wanted = () if header is None else (header.grid, header.path.name)
        mask, grid = read_mask(study.path(study.data.mask), *wanted)
    elif header is None:
        return None
    else:
        grid = header.grid
        mask = _presence(participants, findings)
        findings.choices.append(
            f"no mask was given: {int(mask.sum())} voxels present in the first volume of every run"
        )
    if not mask.any():
        raise DataError(
            Problem(
                "data",
                "no voxel is present in the first volume of every run",
                "a mask, or runs that overlap",
                "give a `mask` in the section [data]",
            )
        )
    return VoxelSet.from_mask(grid if header is None else header.grid, mask)


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
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")  # an empty mask is a problem of its own below
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
    cloud = add_controls(
        cloud,
        voxels,
        asked.controls,
        inside=inside,
        apart=within + 2 * float(used["radius"].max()) + margin,
        random_state=asked.random_state,
        snap=asked.snap,
        weighting=asked.weighting,
        min_coverage=asked.min_coverage,
        midline=seed.space != "native",
    )
    search = plan_search(study, seed, at, (within, sd), margin, voxels, inside)
    return SeedPlan(seed, at, cloud, within, sd, margin, ~spheres, search=search)


def _raise_if_any(findings: Findings, set_aside: Sequence[ParticipantRecord]) -> None:
    """Raise all problems, with whom the model may miss beside them."""
    if findings.problems and set_aside:
        reasons = ", ".join(f"{record.participant} ({record.reason})" for record in set_aside)
        found = f"{len(set_aside)} set aside: {reasons}"
        remedy = "mend these runs if the model needs them"
        findings.wrong(Problem("participants", found, remedy=remedy))
    findings.raise_if_any()


def _note_seed(plan: SeedPlan, regions: Regions | None, study: Study, findings: Findings) -> None:
    name, table = plan.seed.name, plan.cloud.table
    if plan.seed.space == "talairach":
        there, here = (", ".join(f"{x:.1f}" for x in xyz) for xyz in (plan.seed.at, plan.at))
        findings.choices.append(
            f"seed {name}: Talairach ({there}) is MNI ({here}) by Lancaster et al. 2007"
        )
    controls = table["kind"] == "control"
    dropped = int((~table["used"]).sum())
    if dropped:
        findings.warnings.append(
            f"seed {name}: {dropped} of {int((~controls).sum()) - 1} placements are set aside, "
            f"less than {study.placements.min_coverage:.0%} of their sphere lies in the mask"
        )
    _note_controls(name, table[controls], study.placements, findings)
    note_search(name, plan.search, findings)
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


def _note_controls(
    name: str, controls: pd.DataFrame, asked: Placements, findings: Findings
) -> None:
    if len(controls):
        area = "the mask" if asked.inside is None else "the `inside` mask"
        findings.choices.append(
            f"seed {name}: {len(controls)} control seeds were drawn at random in {area}, "
            f"{controls['distance'].min():.0f} mm or more away"
        )
    if len(controls) < asked.controls:
        findings.warnings.append(
            f"seed {name}: room for {len(controls)} of {asked.controls} control seeds far enough "
            "away; the floor rests on these" + ("" if len(controls) else " (there is none)")
        )


def _check_fwe(study: Study, n: int, findings: Findings) -> None:
    """Whether a family-wise rule can be met by rearranging the participants."""
    threshold = study.threshold
    assert threshold.level is not None
    if threshold.rule != "fwe":
        return
    least = 0.5 ** (n - 1)
    if least > threshold.level:
        found = f"flipping the signs of {counted(n, 'participant')} gives no p below {least:.2g}"
        allowed = f"participants enough for level {threshold.level:g}"
        findings.wrong(Problem("threshold.rule fwe", found, allowed, "another rule"), StudyError)
    if study.group.missing == "counts":
        found = (
            'cannot go with missing = "counts": participants cannot be exchanged where some lack'
        )
        remedy = 'leave `missing` at "intersection", or take another rule'
        findings.wrong(Problem("threshold.rule fwe", found, "", remedy), StudyError)
