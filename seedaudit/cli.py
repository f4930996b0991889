"""The command line: commands, exit codes, and all printing."""

from __future__ import annotations

import dataclasses
import json
import os
import signal
import sys
import traceback
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from datetime import UTC, datetime
from functools import partial
from pathlib import Path
from typing import Any

import click
from rich.console import Console

from seedaudit._version import __version__
from seedaudit.errors import (
    Findings,
    Problem,
    SeedAuditError,
    StudyError,
    counted,
    printable,
)

CAUTION = (
    "Research use. A seed that feeds stimulation or surgical targeting, or any decision on a "
    "person's care, needs validated clinical software and licensed practice; local rules decide."
)

DONE, FAULT, SET_ASIDE, INTERRUPTED = 0, 1, 4, 130

EPILOG_RUN = f"""\b
Examples:
  seedaudit run study.toml
  seedaudit run study.toml --out audit-2 --workers 4
  seedaudit run --seed 0 -52 26 --radius 6 --within 6 --bold 'sub-*_bold.nii.gz' \\
      --mask mask.nii.gz --regions atlas.nii.gz --out audit

Lengths and coordinates are in mm. {CAUTION}
"""

EPILOG_CHECK = f"""\b
Examples:
  seedaudit check study.toml
  seedaudit check study.toml --json
  seedaudit check --seed 0 -52 26 --bold 'sub-*_bold.nii.gz' --mask mask.nii.gz

Lengths and coordinates are in mm. {CAUTION}
"""

EPILOG_SYNTH = f"""\b
Examples:
  seedaudit synth tide-study
  seedaudit synth large --participants 40 --voxel-size 2 --random-state 7

{CAUTION}
"""


def _shared(command: Callable[..., Any]) -> Callable[..., Any]:
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
        click.option("--memory", metavar="SIZE", help="Keep to so much memory, such as 6GB."),
        click.option("--json", "as_json", is_flag=True, help="JSON on standard output."),
        click.option("--quiet", is_flag=True, help="No progress, no warnings."),
    ]
    for option in reversed(options):
        command = option(command)
    return command


@click.group(
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
    epilog=CAUTION,
)
@click.version_option(__version__, message="seedaudit %(version)s")
@click.option("--debug", is_flag=True, help="Show the full trace of an error.")
def app(debug: bool) -> None:
    """Does a seed-correlation result survive a small shift of its seed?"""


@app.command(epilog=EPILOG_RUN)
@_shared
@click.option("--replace", is_flag=True, help="Put the result in the place of an earlier one.")
@click.option("--fresh", is_flag=True, help="Ignore the progress of an interrupted run.")
@click.option("--cluster", metavar="ADDRESS", help="Dask scheduler whose workers do the pass.")
@click.option(
    "--keep-prepared",
    type=click.Path(path_type=Path),
    metavar="DIR",
    help="Keep decompressed runs there for the next seed.",
)
def run(out: Path | None, workers: int | None, memory: str | None, as_json: bool, quiet: bool,
        replace: bool, fresh: bool, cluster: str | None, keep_prepared: Path | None,
        **asked: Any) -> int:  # fmt: skip
    """Audit a study: check everything, read the data once, write the result folder.

    STUDY is a study file (TOML); a first try needs none, give --seed and --bold instead.
    After an interruption the same command goes on where it was.
    """
    from seedaudit.auditing import audit, open_checkpoint
    from seedaudit.overview import seeds_text
    from seedaudit.progress import LiveProgress, PlainProgress

    plan, folder, _ = _ready(asked, out, workers, memory, replace=replace)
    _print_warnings(plan.warnings, quiet)
    console = Console(stderr=True)
    bar = LiveProgress(console) if console.is_terminal and not quiet else PlainProgress(quiet=quiet)
    kept = folder.with_name(f".{folder.name}.progress")
    with _second_interrupt_ends(), open_checkpoint(plan, kept, fresh=fresh, tell=_say) as progress:
        with bar as shown:
            result = audit(
                plan,
                workers=workers,
                progress=shown,
                checkpoint=progress,
                cluster=cluster,
                prepared=keep_prepared,
            )
        result.save(folder, replace=replace)
        progress.finish()
    _print_warnings(result.provenance["warnings"], quiet)
    if as_json:
        _print_json(result.summary)
    else:
        for seed in result.seeds:
            _print_seed(seed.summary, seed.table("regions"))
        if result.between is not None:
            click.echo(f"\nSeeds against each other\n{seeds_text(result.between)}")
        click.echo(f"\nResult folder: {folder}\n{CAUTION}")
    return SET_ASIDE if result.provenance["group"]["set_aside"] else DONE


@app.command(epilog=EPILOG_CHECK)
@_shared
def check(out: Path | None, workers: int | None, memory: str | None, as_json: bool, quiet: bool,
          **asked: Any) -> int:  # fmt: skip
    """Check a study without running it: runs, placements, regions, design, predicted needs.

    Reads headers, tables, mask and regions only, and lists every problem at once; exits with 0
    only when `run` would start.
    """
    from seedaudit.overview import overview, overview_text

    plan, _, needs = _ready(asked, out, workers, memory, replace=False)
    found = overview(plan, needs)
    _print_warnings(plan.warnings, quiet)
    if as_json:
        _print_json(found)
    else:
        click.echo(overview_text(found))
    return DONE


@app.command(epilog=EPILOG_SYNTH)
@click.argument("folder", type=click.Path(path_type=Path))
@click.option(
    "--participants", type=click.IntRange(4), metavar="N", help="Participants, 4 or more."
)
@click.option(
    "--voxel-size", type=click.FloatRange(1, 8), metavar="MM", help="Edge of a voxel, 1 to 8 mm."
)
@click.option(
    "--volumes", type=click.IntRange(20), metavar="N", help="Volumes of a run, 20 or more."
)
@click.option("--random-state", type=click.IntRange(0), metavar="N", help="Seed of the chance.")
def synth(folder: Path, **asked: Any) -> int:
    """Write a synthetic study into FOLDER; truth.json there says what an audit must find."""
    from seedaudit.synth import DEMO, synth_study

    if folder.exists() and not (folder.is_dir() and not any(folder.iterdir())):
        found = "is not empty" if folder.is_dir() else "is a file"
        raise StudyError(Problem(str(folder), found, "a new or empty folder", "choose another"))
    given = {key: value for key, value in asked.items() if value is not None}
    settings = dataclasses.replace(DEMO, **given)
    synth_study(folder, settings)
    click.echo(f"Synthetic study: {folder}\nNext: seedaudit run {folder / 'study.toml'}")
    return DONE


def _ready(
    asked: dict[str, Any],
    out: Path | None,
    workers: int | None,
    memory: str | None,
    *,
    replace: bool,
) -> tuple[Any, Path, Any]:
    """The plan of what is asked, the folder of its result and its needs, all problems at once."""
    from seedaudit.budget import fitted, parse_size
    from seedaudit.forecast import forecast, strains
    from seedaudit.preflight import make_plan
    from seedaudit.workers import available_cores

    study, findings = _study(asked), Findings()
    folder = out or study.path(study.output)
    folder = folder if folder.name else folder.absolute()
    findings.attempt(partial(_check_output, replace=replace), folder)
    plan = findings.attempt(make_plan, study)
    findings.raise_if_any()
    assert plan is not None
    if memory is not None:
        plan = fitted(plan, workers or available_cores(), parse_size(memory))
    needs = forecast(plan, workers or available_cores())
    short = strains(needs, folder)
    plan = dataclasses.replace(plan, warnings=(*plan.warnings, *short))
    return plan, folder, needs


def _check_output(folder: Path, *, replace: bool) -> None:
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


def _say(text: str) -> None:
    click.echo(printable(text), err=True)


@contextmanager
def _second_interrupt_ends() -> Iterator[None]:
    """The first Ctrl-C lets every worker end its participant; the second ends at once."""

    def interrupted(*_: object) -> None:
        signal.signal(signal.SIGINT, lambda *_: os._exit(INTERRUPTED))
        _say("interrupted: ending the participants at work (again to end at once)")
        raise KeyboardInterrupt

    earlier = signal.signal(signal.SIGINT, interrupted)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, earlier)


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


def _print_warnings(warnings: Sequence[str], quiet: bool) -> None:
    if warnings and not quiet:
        _say(f"{counted(len(warnings), 'warning')}:")
        for text in warnings:
            _say(f"  - {text}")


def _print_json(content: Any) -> None:
    text = json.dumps(content, indent=2, ensure_ascii=False)
    # half letters, from file names that are no text, keep their escape, which JSON knows too
    click.echo(text.encode("utf-8", "backslashreplace").decode("utf-8"))


def _print_seed(summary: Any, regions: Any) -> None:
    from seedaudit.overview import regions_text

    click.echo(f"\n{summary['sentence']}\n")
    if len(regions):
        click.echo(regions_text(regions))
    if (search := summary.get("steadier")) is not None:
        click.echo(f"\n{search['sentence']}")


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line and return its exit code."""
    arguments = list(sys.argv[1:] if arguments is None else arguments)
    debug = "--debug" in arguments
    # said at the end, after a command that failed, as well as in front
    arguments = [text for text in arguments if text != "--debug"]
    try:
        code = app.main(args=arguments, prog_name="seedaudit", standalone_mode=False)
        return code if isinstance(code, int) else DONE
    except SeedAuditError as error:
        if debug:
            traceback.print_exc()
        _say(f"{counted(len(error.problems), 'problem')}:")
        for problem in error.problems:
            _say(f"  - {problem}")
        return error.exit_code
    except click.ClickException as error:
        error.show()
        return StudyError.exit_code
    except (KeyboardInterrupt, click.Abort):
        _say("interrupted; the same command goes on from here")
        return INTERRUPTED
    except MemoryError:
        _say("the memory of the machine does not suffice: fewer --workers, folds or placements")
        _say("need less; the same command goes on from here")
        return FAULT
    except BrokenPipeError:  # the reader of the output, such as `head`, has seen enough
        sys.stdout = open(os.devnull, "w")  # noqa: SIM115 - so that closing it does not fail too
        return DONE
    except Exception as error:
        if debug:
            traceback.print_exc()
        _report_fault(error)
        return FAULT


def _report_fault(error: Exception) -> None:
    """Say that the program is at fault, and leave a short report without data."""
    stamp = datetime.now(UTC).strftime("%Y%m%d-%H%M%S")
    steps = traceback.extract_tb(error.__traceback__)
    lines = [f"seedaudit {__version__}, {stamp}", f"{type(error).__name__}"]
    lines += [f"  {Path(s.filename).name}:{s.lineno} in {s.name}" for s in steps]
    path = Path(f"seedaudit-fault-{stamp}.txt")
    try:
        path.write_text("\n".join(lines) + "\n", encoding="utf-8")
        where = f"; a short report without data is in {path}"
    except OSError:
        where = ""
    _say(
        f"unexpected fault in the program ({type(error).__name__}: {error}){where}; "
        "--debug shows the trace"
    )


def entry() -> None:
    """Entry point of the installed command."""
    sys.exit(main())
