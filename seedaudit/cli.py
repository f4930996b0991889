"""The command line: commands, exit codes, and all printing."""

from __future__ import annotations

import dataclasses
import json
import os
import signal
import sys
import traceback
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import click
from rich.console import Console

from seedaudit._version import __version__
from seedaudit.asking import ready, shared
from seedaudit.errors import Problem, SeedAuditError, StudyError, counted, printable
from seedaudit.report import CAUTION

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

EPILOG_START = f"""\b
Examples:
  seedaudit start derivatives/preproc
  seedaudit start images --study posterior.toml

{CAUTION}
"""

EPILOG_SYNTH = f"""\b
Examples:
  seedaudit synth tide-study
  seedaudit synth large --participants 40 --voxel-size 2 --random-state 7

{CAUTION}
"""

EPILOG_DRAW = f"""\b
Examples:
  seedaudit draw audit
  seedaudit draw audit --out slides --dark --format png --panels c,rose
  seedaudit draw audit --out column --width 85 --format pdf --panels regions

Panels of the figure: a cloud, b agreement, c decay, d regions, e rose, f claims; where the result
has them, also landscape and front (steadier seed), seeds, radii. Widths are in mm. {CAUTION}
"""


@click.group(
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
    epilog=CAUTION,
)
@click.version_option(__version__, message="seedaudit %(version)s")
@click.option("--debug", is_flag=True, help="Show the full trace of an error.")
def app(debug: bool) -> None:
    """Does a seed-correlation result survive a small shift of its seed?"""


@app.command(epilog=EPILOG_RUN)
@shared
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

    plan, folder, _ = ready(asked, out, workers, memory, replace=replace)
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
    _repeat_warnings(result.provenance["warnings"], plan.warnings, quiet)
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
@shared
def check(out: Path | None, workers: int | None, memory: str | None, as_json: bool, quiet: bool,
          **asked: Any) -> int:  # fmt: skip
    """Check a study without running it: runs, placements, regions, design, predicted needs.

    Reads headers, tables, mask and regions only, and lists every problem at once; exits with 0
    only when `run` would start.
    """
    from seedaudit.overview import overview, overview_text

    plan, _, needs = ready(asked, out, workers, memory, replace=False)
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


@app.command(epilog=EPILOG_START)
@click.argument("folder", type=click.Path(path_type=Path))
@click.option(
    "--study",
    "name",
    default="study.toml",
    metavar="FILE",
    help="Name of the study file in FOLDER (default study.toml).",
)
@click.option("--replace", is_flag=True, help="Write over an earlier study file.")
def start(folder: Path, name: str, replace: bool) -> int:
    """Write a study file into FOLDER from the images and tables found there.

    FOLDER is a BIDS derivative data set or a plain folder of images. The seed is yours to fill in.
    """
    from seedaudit.starting import start_study

    found, path = start_study(folder), folder / name
    try:
        with open(path, "w" if replace else "x", encoding="utf-8") as file:
            file.write(found.text)
    except FileExistsError:
        raise StudyError(
            Problem(str(path), "exists", "a new file", "choose another --study, or --replace")
        ) from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise StudyError(Problem(str(path), f"cannot be written ({reason})")) from error
    for line in found.told:
        click.echo(printable(line))
    click.echo(f"Study file: {path}\nFill in `at`, then: seedaudit check {path}")
    return DONE


@app.command(epilog=EPILOG_DRAW)
@click.argument("results", type=click.Path(path_type=Path))
@click.option(
    "--format",
    "formats",
    type=click.Choice(["pdf", "svg", "png"]),
    multiple=True,
    help="Format of the figures, once for each (default: all).",
)
@click.option(
    "--width",
    type=click.FloatRange(85, 400),
    metavar="MM",
    help="Width of the figures, 85 to 400 mm (default 180).",
)
@click.option("--panels", metavar="LIST", help="Letters or names, with commas: a,b or decay,rose.")
@click.option("--dark", is_flag=True, help="Light ink on dark.")
@click.option(
    "--out",
    type=click.Path(path_type=Path),
    metavar="FOLDER",
    help="Draw there and leave the result as it is.",
)
@click.option("--replace", is_flag=True, help="Put new drawings in the place of those in --out.")
def draw(
    results: Path,
    formats: tuple[str, ...],
    width: float | None,
    panels: str | None,
    dark: bool,
    out: Path | None,
    replace: bool,
) -> int:
    """Draw the figures of a finished result again, without the data.

    RESULTS is a result folder. Captions, methods text, tables and explorer are written again too.
    Without --out they take the place of those in RESULTS, each as a whole.
    """
    from seedaudit.redraw import drawing_of, redraw
    from seedaudit.store import load_audit

    result = load_audit(results)
    drawing = drawing_of(result, formats, width, panels, dark=dark)
    written = redraw(result, out or results, drawing, replace=replace or out is None)
    click.echo(f"Drawn: {counted(len(written), 'file')} in {out or results}")
    return DONE


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


def _print_warnings(warnings: Sequence[str], quiet: bool) -> None:
    if warnings and not quiet:
        _say(f"{counted(len(warnings), 'warning')}:")
        for text in warnings:
            _say(f"  - {text}")


def _repeat_warnings(warnings: Sequence[str], told: Sequence[str], quiet: bool) -> None:
    """How many warnings there are, and those that were not told before the pass."""
    new = [text for text in warnings if text not in told]
    if warnings and not quiet:
        also = f", {len(new)} of them new:" if new else ", as listed above"
        _say(f"{counted(len(warnings), 'warning')}{also}")
        for text in new:
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
