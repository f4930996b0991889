"""The command line: commands, exit codes, and all printing."""

from __future__ import annotations

import json
import os
import signal
import sys
import traceback
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import click
from rich.console import Console

from seedaudit._version import __version__
from seedaudit.errors import Problem, SeedAuditError, StudyError

CAUTION = (
    "Research use. A seed that feeds stimulation or surgical targeting, or any decision on a "
    "person's care, needs validated clinical software and licensed practice; local rules decide."
)

DONE, FAULT, SET_ASIDE, INTERRUPTED = 0, 1, 4, 130

EPILOG_RUN = """\b
Examples:
  seedaudit run study.toml
  seedaudit run study.toml --out audit-2 --workers 4
  seedaudit run --seed 0 -52 26 --radius 6 --within 6 --bold 'sub-*_bold.nii.gz' \\
      --mask mask.nii.gz --regions atlas.nii.gz --out audit
"""


def _shared(command: Callable[..., Any]) -> Callable[..., Any]:
    """Options that `run` and `check` share."""
    options = [
        click.argument("study", required=False, type=click.Path(path_type=Path)),
        click.option("--seed", type=float, nargs=3, metavar="X Y Z", help="Seed centre, mm."),
        click.option("--radius", type=float, metavar="MM", help="Sphere radius (default 6)."),
        click.option("--within", type=float, metavar="MM", help="Cloud radius (default 6)."),
        click.option("--count", type=int, metavar="N", help="Placements to draw (default 100)."),
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
def run(out: Path | None, workers: int | None, as_json: bool, quiet: bool, replace: bool,
        fresh: bool, **asked: Any) -> int:  # fmt: skip
    """Audit a study: check everything, read the data once, write the result folder.

    STUDY is a study file (TOML); a first try needs none, give --seed and --bold instead.
    After an interruption the same command goes on where it was.
    """
    from seedaudit.auditing import audit, open_checkpoint
    from seedaudit.preflight import make_plan
    from seedaudit.progress import LiveProgress, PlainProgress
    from seedaudit.store import check_free, save

    study = _study(asked)
    folder = out or study.base / study.output
    check_free(folder, replace=replace)
    plan = make_plan(study)
    console = Console(stderr=True)
    bar = LiveProgress(console) if console.is_terminal and not quiet else PlainProgress(quiet=quiet)
    kept = folder.with_name(f".{folder.name}.progress")
    with _second_interrupt_ends(), open_checkpoint(plan, kept, fresh=fresh, tell=_say) as progress:
        with bar as shown:
            result = audit(plan, workers=workers, progress=shown, checkpoint=progress)
        save(result, folder, replace=replace)
        progress.finish()
    _print_warnings(result.provenance["warnings"], quiet)
    if as_json:
        _print_json(result.summary)
    else:
        for seed in result.seeds:
            _print_seed(seed.summary, seed.table("regions"))
        click.echo(f"\nResult folder: {folder}\n{CAUTION}")
    return SET_ASIDE if result.provenance["group"]["set_aside"] else DONE


@app.command(epilog="\b\nExamples:\n  seedaudit check study.toml\n")
@_shared
def check(out: Path | None, workers: int | None, as_json: bool, quiet: bool, **asked: Any) -> int:
    """Check a study without running it: runs, placements, regions, design, predicted needs.

    Reads headers, tables, mask and regions only, and lists every problem at once; exits with 0
    only when `run` would start.
    """
    from seedaudit.forecast import forecast
    from seedaudit.overview import overview, overview_text
    from seedaudit.preflight import make_plan
    from seedaudit.store import check_free
    from seedaudit.workers import available_cores

    study = _study(asked)
    plan = make_plan(study)
    check_free(out or study.base / study.output, replace=False)
    found = overview(plan, forecast(plan, workers or available_cores()))
    _print_warnings(plan.warnings, quiet)
    if as_json:
        _print_json(found)
    else:
        click.echo(overview_text(found))
    return DONE


@app.command(
    epilog="\b\nExamples:\n  seedaudit synth tide-study\n"
    "  seedaudit synth large --participants 40 --voxel-size 2 --random-state 7\n"
)
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--participants", type=click.IntRange(2), metavar="N", help="Participants.")
@click.option("--voxel-size", type=click.FloatRange(1), metavar="MM", help="Edge of a voxel.")
@click.option("--volumes", type=click.IntRange(20), metavar="N", help="Volumes of a run.")
@click.option("--random-state", type=click.IntRange(0), metavar="N", help="Seed of the chance.")
def synth(folder: Path, **asked: Any) -> int:
    """Write a synthetic study into FOLDER; truth.json there says what an audit must find."""
    from dataclasses import replace

    from seedaudit.synth import DEMO, synth_study

    if folder.exists() and any(folder.iterdir()):
        raise StudyError(
            Problem(str(folder), "is not empty", "a new or empty folder", "choose another")
        )
    settings = replace(DEMO, **{key: value for key, value in asked.items() if value is not None})
    synth_study(folder, settings)
    click.echo(f"Synthetic study: {folder}\nNext: seedaudit run {folder / 'study.toml'}")
    return DONE


def _study(asked: dict[str, Any]) -> Any:
    """The study of a study file, or of options alone."""
    from seedaudit.study import Study

    path = asked.pop("study")
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
        "data": {"runs": given["bold"]},
        "seed": {"at": given["seed"]},
        "placements": {},
    }
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
    click.echo(text, err=True)


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


def _print_warnings(warnings: Sequence[str], quiet: bool) -> None:
    if warnings and not quiet:
        click.echo(f"{len(warnings)} warning(s):", err=True)
        for text in warnings:
            click.echo(f"  - {text}", err=True)


def _print_json(content: Any) -> None:
    click.echo(json.dumps(content, indent=2, ensure_ascii=False))


def _print_seed(summary: Any, regions: Any) -> None:
    from seedaudit.overview import regions_text

    click.echo(f"\n{summary['sentence']}\n")
    if len(regions):
        click.echo(regions_text(regions))


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line and return its exit code."""
    arguments = list(sys.argv[1:] if arguments is None else arguments)
    debug = "--debug" in arguments
    try:
        code = app.main(args=arguments, prog_name="seedaudit", standalone_mode=False)
        return code if isinstance(code, int) else DONE
    except SeedAuditError as error:
        if debug:
            traceback.print_exc()
        count = len(error.problems)
        click.echo(f"{count} problem{'s' if count > 1 else ''}:", err=True)
        for problem in error.problems:
            click.echo(f"  - {problem}", err=True)
        return error.exit_code
    except click.ClickException as error:
        error.show()
        return StudyError.exit_code
    except (KeyboardInterrupt, click.Abort):
        _say("interrupted; the same command goes on from here")
        return INTERRUPTED
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
    click.echo(
        f"unexpected fault in the program ({type(error).__name__}: {error}){where}; "
        "--debug shows the trace",
        err=True,
    )


def entry() -> None:
    """Entry point of the installed command."""
    sys.exit(main())
