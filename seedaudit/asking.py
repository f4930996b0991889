"""What `run` and `check` are asked on the command line: options, study, folder, plan."""

from __future__ import annotations

import dataclasses
import os
from collections.abc import Callable, Sequence
from functools import partial
from pathlib import Path
from typing import Any

import click

from seedaudit.errors import Findings, Problem, StudyError


def shared(command: Callable[..., Any]) -> Callable[..., Any]:
    """Options that `run` and `check` share."""
    options = [
        click.argument("study", nargs=-1, type=click.Path(path_type=Path), metavar="[STUDY]"),
        click.option("--seed", type=float, nargs=3, metavar="X Y Z", help="Seed centre, mm."),
        click.option("--radius", type=float, metavar="MM", help="Sphere radius (default 6 mm)."),
        click.option("--within", type=float, metavar="MM", help="Cloud radius (default 6 mm)."),
        click.option("--count", type=int, metavar="N", help="Placements to draw (default 100)."),
        click.option(
            "--steadier", type=float, metavar="MM", help="Look for a steadier seed so far away."
        ),
        click.option(
            "--space",
            type=click.Choice(["mni", "talairach", "native"]),
            help="Space of the seed (default mni).",
        ),
        click.option("--bold", metavar="GLOB", help="4-D runs, quoted: 'sub-*_bold.nii.gz'."),
        click.option("--mask", metavar="FILE", help="Analysis mask on the grid of the runs."),
        click.option(
            "--regions", metavar="FILE", help="Label image with its table, or dosenbach2010."
        ),
        click.option(
            "--out", type=click.Path(path_type=Path), metavar="FOLDER", help="Result folder."
        ),
        click.option(
            "--workers", type=click.IntRange(1), metavar="N", help="Threads (default: all cores)."
        ),
        click.option(
            "--memory",
            metavar="SIZE",
            help="Keep to so much memory, such as 6GB; more then goes to disk.",
        ),
        click.option("--json", "as_json", is_flag=True, help="JSON on standard output."),
        click.option("--quiet", is_flag=True, help="No progress, no warnings."),
    ]
    for option in reversed(options):
        command = option(command)
    return command


def ready(
    asked: dict[str, Any],
    out: Path | None,
    workers: int | None,
    memory: str | None,
    *,
    replace: bool,
) -> tuple[Any, Path, Any]:
    """The plan of what is asked, the folder of its result and its needs, all problems at once."""
    from seedaudit.budget import fitted, parse_size, usual_memory
    from seedaudit.forecast import forecast, strains
    from seedaudit.preflight import make_plan
    from seedaudit.workers import available_cores

    study, findings = _study(asked), Findings()
    folder = out or study.path(study.output)
    folder = folder if folder.name else folder.absolute()
    findings.attempt(partial(check_output, replace=replace), folder)
    plan = findings.attempt(make_plan, study)
    findings.raise_if_any()
    assert plan is not None
    size = usual_memory() if memory is None else parse_size(memory)
    plan = fitted(plan, workers or available_cores(), size)
    needs = forecast(plan, workers or available_cores())
    short = strains(needs, folder)
    plan = dataclasses.replace(plan, warnings=(*plan.warnings, *short))
    return plan, folder, needs


def check_output(folder: Path, *, replace: bool) -> None:
    """Refuse what could only fail after the work: the name, the place, what is there already."""
    from seedaudit.store import check_free

    where = f"output {folder.name[:60]}"
    try:
        # the longest name that is made of it
        os.lstat(folder.absolute().with_name(f".{folder.name}-old-12345678"))
    except (FileNotFoundError, NotADirectoryError):
        pass
    except (OSError, ValueError):  # too long, or with a zero byte
        found = "is no name for a folder"
        raise StudyError(Problem(where, found, "a name of a usual length")) from None
    there = next(parent for parent in folder.absolute().parents if parent.exists())
    if not (there.is_dir() and os.access(there, os.W_OK | os.X_OK)):
        found = f"cannot be made in {there}, which is " + (
            "not writable" if there.is_dir() else "a file"
        )
        raise StudyError(Problem(where, found, "a writable folder", "choose another --out"))
    check_free(folder, replace=replace)


def _study(asked: dict[str, Any]) -> Any:
    """The study of a study file, or of options alone."""
    from seedaudit.study import Study

    path, images = _split(asked.pop("study"))
    given = {key: value for key, value in asked.items() if value is not None}
    if path is not None:
        if given:
            options = ", ".join(f"--{key}" for key in given)
            raise StudyError(
                Problem(options, "given beside a study file", "one or the other",
                        "put it into the study file")
            )  # fmt: skip
        return Study.load(path)
    missing = [f"--{key}" for key in ("seed", "bold") if key not in given]
    if missing:
        raise StudyError(
            Problem(
                "command line",
                f"no study file and no {' and no '.join(missing)}",
                "a study file, or --seed and --bold",
                "see seedaudit run --help",
            )
        )
    content: dict[str, dict[str, Any]] = {
        "data": {"runs": [given["bold"], *images] if images else given["bold"]},
        "seed": {"at": given["seed"]},
        "placements": {},
    }
    if "steadier" in given:
        content["steadier"] = {"search": given["steadier"]}
    for key, section in {
        "mask": "data",
        "regions": "data",
        "radius": "seed",
        "space": "seed",
        "within": "placements",
        "count": "placements",
    }.items():
        if key in given:
            content[section][key] = given[key]
    return Study.from_mapping({**content, "seed": [content["seed"]]}, Path())


def _split(named: Sequence[Path]) -> tuple[Path | None, list[str]]:
    """The study file, and the images that a shell made of an unquoted pattern of --bold."""
    images = [str(path) for path in named if path.name.endswith((".nii", ".nii.gz"))]
    others = [path for path in named if str(path) not in images]
    if len(others) > 1:
        names = ", ".join(map(str, others))
        raise StudyError(Problem("command line", f"names {names}", "one study file"))
    if others and images:
        raise StudyError(
            Problem(images[0], "given beside a study file", "one or the other",
                    "put it into the study file")
        )  # fmt: skip
    return (others[0] if others else None), images
