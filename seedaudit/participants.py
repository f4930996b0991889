"""Who takes part: the runs of each participant judged by headers, grids and confounds."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import replace
from pathlib import Path

from seedaudit.errors import DataError, Findings, Problem, SeedAuditError, listed
from seedaudit.inputs.discover import Run
from seedaudit.inputs.header import RunHeader, read_header, read_image_header
from seedaudit.inputs.tables import read_table
from seedaudit.inputs.volumes import read_mask
from seedaudit.study import Study
from seedaudit.sweep.schedule import (
    LEAST_RESIDUAL_DF,
    CleaningRecipe,
    ParticipantRecord,
    ParticipantTask,
    RunTask,
    run_basis,
)

FEW_DF = 30
"""Residual degrees of freedom of a run below which its correlations are noisy enough to say so."""


def cleaning_recipe(study: Study) -> CleaningRecipe:
    """The nuisance columns that the section [cleaning] asks for."""
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


def sort_participants(
    study: Study, runs: Sequence[Run], cleaning: CleaningRecipe, findings: Findings
) -> tuple[list[ParticipantTask], list[ParticipantRecord]]:
    """Participants whose runs have headers, grids and confounds in order, and those set aside."""
    grid = study.data.grid
    declared = None if grid is None else findings.attempt(read_image_header, study.path(grid))
    trials = {run.participant: Findings() for run in runs}
    headers = {run: trials[run.participant].attempt(read_header, run.bold, declared)
               for run in runs}  # fmt: skip
    usual = _usual_grid(header for header in headers.values() if header is not None)
    ready = {run: trials[run.participant].attempt(_run_task, run, header, cleaning, usual)
             for run, header in headers.items() if header is not None}  # fmt: skip
    tasks: list[ParticipantTask] = []
    set_aside: list[ParticipantRecord] = []
    for participant, trial in trials.items():
        own = [run for run in runs if run.participant == participant]
        if not trial.problems:
            good = tuple(task for run in own if (task := ready[run]) is not None)
            tasks.append(ParticipantTask(participant, len(tasks), good))
        elif study.data.on_bad_run == "set-aside":
            reason = "; ".join(problem.brief for _, problem in trial.problems)
            set_aside.append(
                ParticipantRecord(participant, -1, len(own), used=False, reason=reason)
            )
            findings.warnings.append(f"participant {participant} is set aside: {reason}")
        else:
            findings.problems += trial.problems
    return tasks, set_aside


def _usual_grid(headers: Iterable[RunHeader]) -> RunHeader | None:
    """The first run on the grid that most runs share, so that an odd one is told as odd."""
    alike: list[list[RunHeader]] = []
    for header in headers:
        same = next((group for group in alike if group[0].grid.matches(header.grid)), None)
        if same is None:
            alike.append([header])
        else:
            same.append(header)
    return max(alike, key=len)[0] if alike else None


def _run_task(run: Run, header: RunHeader, cleaning: CleaningRecipe, usual: RunHeader) -> RunTask:
    task = RunTask(header, run.confounds, run.mask)
    problems = []
    if not header.grid.matches(usual.grid):
        mirrored = "; one mirrors the other" if header.grid.mirrors(usual.grid) else ""
        difference = header.grid.difference(usual.grid) + mirrored
        problems.append(
            Problem(
                run.bold.name,
                f"is on another grid than {usual.path.name}: {difference}",
                "all runs on one grid",
                "resample the runs to one grid before the audit",
            )
        )
    if cleaning.band is not None and not (cleaning.repetition_time or header.repetition_time):
        problems.append(_no_repetition_time(run, cleaning.band))
    else:
        try:
            basis, _ = run_basis(task, cleaning)
            task = replace(task, nuisance_rank=basis.shape[1])
            if task.residual_df < LEAST_RESIDUAL_DF:
                problems.append(_too_few(task))
        except SeedAuditError as error:
            problems += list(error.problems)
    if run.mask is not None:
        try:
            read_mask(run.mask, header.grid, run.bold.name)
        except DataError as error:
            problems += list(error.problems)
    if problems:
        raise DataError(*problems)
    return task


def _no_repetition_time(run: Run, band: tuple[float, float]) -> Problem:
    return Problem(
        run.bold.name,
        "the header holds no repetition time",
        f"a time in seconds, needed for the band {band[0]:g} to {band[1]:g} Hz",
        "set `repetition_time` in the section [data]",
    )


def _too_few(task: RunTask) -> Problem:
    return Problem(
        task.header.path.name,
        f"{task.header.n_volumes} volumes and {task.nuisance_rank} independent nuisance columns "
        f"leave {task.residual_df} residual degrees of freedom",
        f"at least {LEAST_RESIDUAL_DF}",
        "fewer confounds, a wider pass band, less censoring, or longer runs",
    )


def note_people(table: Path, runs: Iterable[Run], findings: Findings) -> None:
    """Who stands only in one of the two tables; the model itself asks for those it needs."""
    column = read_table(table).get("participant_id")
    if column is None:
        return
    in_table, scanned = (
        {str(name).removeprefix("sub-"): str(name) for name in names}
        for names in (column.dropna(), (run.participant for run in runs))
    )
    for one, other, text in (
        (in_table, scanned, "have no run and take no part"),
        (scanned, in_table, "have runs but no row in the table"),
    ):
        names = [name for key, name in one.items() if key not in other]
        if names:
            findings.warnings.append(f"{table.name}: {listed(names)} {text}")


def note_headers(study: Study, participants: list[ParticipantTask], findings: Findings) -> None:
    """What of the headers is for the user's attention."""
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
        kinds = ", ".join(
            f"{'none' if time is None else f'{time:g} s'} in {n} run{'s' if n > 1 else ''}"
            for time, n in times.items()
        )
        findings.warnings.append(f"the runs differ in repetition time: {kinds}")
    odd = [time for time in times if time is not None and not 0.05 <= time <= 20]
    if study.data.repetition_time is None and odd:
        findings.warnings.append(
            f"a repetition time of {odd[0]:g} s is not plausible; a header may hold milliseconds "
            "as seconds (set `repetition_time` in the section [data])"
        )
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
