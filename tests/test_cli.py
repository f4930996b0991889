"""The command line as a person or a script meets it: codes, streams, help, interruptions."""

from __future__ import annotations

import io
import json
import os
import re
import shutil
import signal
import threading
import time
from pathlib import Path

import pytest
from rich.console import Console

from seedaudit import cli
from seedaudit._version import __version__
from seedaudit.cli import CAUTION, main
from seedaudit.progress import LiveProgress, PlainProgress
from seedaudit.store import load_audit
from tests.breaks import corrupt, put, stored, swap
from tests.small_study import write_small_study

OPTIONS = ["--seed", "-7", "-48", "20", "--space", "native", "--radius", "5", "--within", "5",
           "--count", "4"]  # fmt: skip


@pytest.fixture(scope="module")
def base(tmp_path_factory) -> Path:
    folder = tmp_path_factory.mktemp("base")
    write_small_study(folder, participants=3, two_runs=())
    swap(("count = 12", "count = 4"))(folder)
    return folder


@pytest.fixture
def folder(base, tmp_path, monkeypatch) -> Path:
    """A copy of the study, which is the working directory; without figures."""
    monkeypatch.setattr("seedaudit.report.write_report", lambda audit, folder: None)
    copy = tmp_path / "study"
    shutil.copytree(base, copy)
    monkeypatch.chdir(copy)
    return copy


def left_behind(folder: Path) -> set[str]:
    """What stands in the folder that the study did not bring."""
    brought = ("sub-", "networks_dseg", "mask", "participants", "runs", "study")
    return {path.name for path in folder.iterdir() if not path.name.startswith(brought)}


def test_version(capsys):
    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"seedaudit {__version__}\n"


def test_help_of_the_program(capsys):
    assert main(["--help"]) == 0
    told = capsys.readouterr().out
    for command in ("run", "check", "draw", "synth"):
        assert f"  {command} " in told
    assert " ".join(told.split()).count(CAUTION) == 1


@pytest.mark.parametrize("command", sorted(cli.app.commands))
def test_help_of_every_command(command, capsys):
    """Examples, units and the caution."""
    assert main([command, "--help"]) == 0
    told = capsys.readouterr().out
    assert f"  seedaudit {command} " in told[told.index("Examples:") :]
    assert CAUTION in " ".join(told.split())
    assert max(map(len, told.splitlines())) <= 100


@pytest.mark.parametrize("command", ["run", "check"])
def test_lengths_in_help_have_units(command, capsys):
    main([command, "--help"])
    told = capsys.readouterr().out
    for option in ("--seed", "--radius", "--within"):
        assert "mm" in next(line for line in told.splitlines() if line.startswith(f"  {option} "))
    assert "Lengths and coordinates are in mm." in told


def test_nothing_said_shows_the_commands(capsys):
    assert main([]) == 2
    assert "Commands:" in "".join(capsys.readouterr())


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["audit"], "No such command 'audit'"),
        (["run", "--radios", "6"], "--radius"),
        (["run", "study.toml", "--workers", "0"], "x>=1"),
        (["run", "--seed", "0", "-52"], "requires 3 arguments"),
        (["run"], "no study file and no --seed and no --bold"),
        (["run", "--seed", "0", "-52", "26"], "no --bold"),
        (["check", "--bold", "sub-*_bold.nii*"], "no --seed"),
        (["run", "study.toml", "--radius", "6"], "--radius: given beside a study file"),
        (["run", "study.toml", "other.toml"], "names study.toml, other.toml"),
        (["run", "--space", "moon", "study.toml"], "'mni', 'talairach', 'native'"),
        (["run", *OPTIONS, "--bold", "no-*.nii.gz"], "'no-*.nii.gz' matches no"),
        (["run", *OPTIONS, "--bold", "none.nii.gz"], "none.nii.gz"),
        (["synth"], "Missing argument 'FOLDER'"),
        (["synth", "new", "--participants", "1"], "x>=4"),
        (["synth", "new", "--voxel-size", "20"], "1<=x<=8"),
        (["synth", "."], "is not empty"),
        (["synth", "study.toml"], "is a file"),
    ],
)  # fmt: skip
def test_a_wrong_command(arguments, words, folder, capsys):
    assert main(arguments) == 2
    told = capsys.readouterr()
    assert words in told.err
    assert told.out == ""
    assert left_behind(folder) == set()


def test_check_shows_what_run_would_do_and_computes_nothing(folder, capsys, monkeypatch):
    monkeypatch.setattr("seedaudit.auditing.sweep", None)
    assert main(["check", "study.toml"]) == 0
    told = capsys.readouterr()
    for words in ("sub-02_task-rest_run-1_bold.nii.gz", "11 x 14 x 9", "posterior", "SeedSide",
                  "model ~ 1", "GB of memory", "A run would start."):  # fmt: skip
        assert words in told.out
    assert "no analysis voxel in region Outside" in told.err
    assert "Outside; reported" not in told.out
    assert left_behind(folder) == set()


def test_json_alone_on_standard_output(folder, capsys):
    assert main(["check", "study.toml", "--json"]) == 0
    told = capsys.readouterr()
    found = json.loads(told.out)
    assert len(found["runs"]) == found["design"]["participants"] == 3
    assert found["seeds"][0]["placements"] == 4
    assert "warning" in told.err

    assert main(["run", "study.toml", "--json"]) == 0
    told = capsys.readouterr()
    summary = json.loads(told.out)
    assert summary == json.loads((folder / "audit" / "summary.json").read_text())
    assert "reading participants: 3/3" in told.err


def test_warnings_are_told_once_and_counted_at_the_end(folder, capsys):
    assert main(["run", "study.toml"]) == 0
    told = capsys.readouterr().err
    assert told.count("no analysis voxel in region Outside") == 1
    before, _, after = told.partition("reading participants")
    assert "no analysis voxel in region Outside" in before
    assert after.splitlines()[-2].endswith("warnings, 1 of them new:")
    assert "1 participant lacks some mask voxels" in after.splitlines()[-1]


def test_warnings_from_the_pass_are_listed_at_the_end(capsys):
    cli._repeat_warnings(["a", "b", "c"], ["a", "c"], quiet=False)
    assert capsys.readouterr().err.splitlines() == ["3 warnings, 1 of them new:", "  - b"]
    cli._repeat_warnings(["a"], ["a"], quiet=False)
    assert capsys.readouterr().err == "1 warning, as listed above\n"
    cli._repeat_warnings(["a"], [], quiet=True)
    assert capsys.readouterr().err == ""


def test_json_of_a_failure_is_nothing(folder, capsys):
    swap(("radius = 5.0", "radius = 0"))(folder)
    for command in ("check", "run"):
        assert main([command, "study.toml", "--json"]) == 2
        assert capsys.readouterr().out == ""


def test_quiet(folder, capsys):
    assert main(["run", "study.toml", "--quiet"]) == 0
    told = capsys.readouterr()
    assert told.err == ""
    assert "Result folder: audit" in told.out
    assert CAUTION in told.out
    stored(2, corrupt)(folder)
    assert main(["run", "study.toml", "--quiet", "--out", "other"]) == 3
    assert "corrupt" in capsys.readouterr().err, "an error is told all the same"


def test_set_aside_is_quiet_but_coded(folder, capsys):
    put("data", 'on_bad_run = "set-aside"')(folder)
    stored(2, corrupt)(folder)
    assert main(["run", "study.toml", "--quiet"]) == 4
    assert capsys.readouterr().err == ""


def test_progress_on_a_pipe_is_plain_lines(folder, capsys):
    assert main(["run", "study.toml", "--workers", "1"]) == 0
    lines = [line for line in capsys.readouterr().err.splitlines() if "reading" in line]
    number = r"\d+(\.\d+)?"
    for done, line in enumerate(lines, start=1):
        form = rf"reading participants: {done}/3 sub-0\d, {number}/min, {number} s left"
        assert re.fullmatch(form, line), line
    assert len(lines) == 3


def test_progress_on_a_terminal_is_a_live_line(folder, monkeypatch, capsys):
    """One line per stage that is drawn over and over: cursor moves instead of new lines."""
    screen = io.StringIO()
    console = Console(file=screen, force_terminal=True, width=110)
    monkeypatch.setattr("seedaudit.cli.Console", lambda **_: console)
    assert main(["run", "study.toml"]) == 0
    shown = screen.getvalue()
    assert "\x1b[" in shown
    plain = re.sub(r"\x1b\[[0-9;?]*[A-Za-z]", "", shown)
    for words in ("reading participants", "3/3", "/min", "time left"):
        assert words in plain
    assert "reading participants:" not in capsys.readouterr().err


def test_both_kinds_of_progress_take_names_as_they_are():
    """Square brackets in a label are no markup."""
    screen = io.StringIO()
    with LiveProgress(Console(file=screen, force_terminal=True, width=120)) as live:
        live.stage("reading participants", 2)
        live.step("sub-[red]01[/red]")
    assert "sub-[red]01[/red]" in re.sub(r"\x1b\[[0-9;?]*[A-Za-z]", "", screen.getvalue())
    with PlainProgress(quiet=True) as silent:
        silent.stage("reading", 1)
        silent.step("sub-01")


def test_a_taken_folder(folder, capsys):
    assert main(["run", "study.toml"]) == 0
    capsys.readouterr()
    first = (folder / "audit" / "provenance.json").read_text()
    swap(("random_state = 20", "random_state = 21"))(folder)
    for command in ("run", "check"):
        assert main([command, "study.toml"]) == 2
        told = capsys.readouterr().err
        assert "output audit: holds an earlier result" in told
        assert "--replace" in told
    assert (folder / "audit" / "provenance.json").read_text() == first
    assert main(["run", "study.toml", "--replace"]) == 0
    assert load_audit("audit").provenance["study"]["placements"]["random_state"] == 21
    assert left_behind(folder) == {"audit"}


def test_a_folder_of_somebody_else(folder, capsys):
    (folder / "audit").mkdir()
    (folder / "audit" / "thesis.txt").write_text("ten years")
    for options in ([], ["--replace"]):
        assert main(["run", "study.toml", *options]) == 2
        assert "is not a result folder of this program" in capsys.readouterr().err
    assert (folder / "audit" / "thesis.txt").read_text() == "ten years"


def test_an_empty_folder_is_free(folder):
    (folder / "audit").mkdir()
    assert main(["run", "study.toml", "--quiet"]) == 0
    assert (folder / "audit" / "summary.json").is_file()


@pytest.mark.parametrize("command", ["run", "check"])
def test_an_output_that_cannot_be_written_is_told_before_the_work(command, folder, capsys):
    """Below a file; and, where the system enforces it, below a folder without write permission."""
    assert main([command, "study.toml", "--out", "mask.nii.gz/audit"]) == 2
    told = capsys.readouterr().err
    assert "output audit: cannot be made in" in told
    assert "mask.nii.gz, which is a file" in told
    locked = folder / "locked"
    locked.mkdir(mode=0o500)
    if not os.access(locked, os.W_OK):  # not so for an administrator
        assert main([command, "study.toml", "--out", "locked/deep/audit"]) == 2
        assert "locked, which is not writable" in capsys.readouterr().err
    assert left_behind(folder) == {"locked"}


def test_output_below_folders_that_are_not_there_yet(folder):
    assert main(["run", "study.toml", "--quiet", "--out", "new/deep/audit"]) == 0
    assert (folder / "new" / "deep" / "audit" / "summary.json").is_file()


def without_study(folder: Path) -> None:
    for name in ("study.toml", "runs.tsv", "participants.tsv"):
        (folder / name).unlink()


def test_options_instead_of_a_study_file(folder, capsys):
    without_study(folder)
    arguments = [*OPTIONS, "--bold", "sub-*_bold.nii*", "--mask", "mask.nii.gz",
                 "--regions", "networks_dseg.nii.gz", "--out", "first"]  # fmt: skip
    assert main(["check", *arguments]) == 0
    assert "-7 -48 20" in capsys.readouterr().out
    assert main(["run", *arguments, "--workers", "1"]) == 0
    result = load_audit("first")
    assert result.summary["seeds"][0]["at_mm"] == [-7, -48, 20]
    assert result.summary["seeds"][0]["n_placements_used"] == 4
    assert result.summary["seeds"][0]["n_participants"] == 3
    assert len(result.regions) == 4
    assert str(folder) not in (folder / "first" / "provenance.json").read_text()


def test_a_pattern_that_the_shell_has_opened(folder):
    """--bold sub-*_bold.nii* without quotes: the shell hands over one file after the other."""
    without_study(folder)
    files = sorted(path.name for path in folder.glob("sub-*_bold.nii*"))
    arguments = [*OPTIONS, "--mask", "mask.nii.gz", "--out", "first", "--quiet"]
    assert main(["run", "--bold", *files, *arguments]) == 0
    assert load_audit("first").summary["seeds"][0]["n_participants"] == 3


def test_talairach_option(folder, capsys):
    seed = ["--seed", "-7", "-47.5", "18.2", "--space", "talairach", "--count", "4"]
    assert main(["check", *seed, "--bold", "sub-*_bold.nii*", "--mask", "mask.nii.gz"]) == 0
    assert "Talairach (-7.0, -47.5, 18.2) is MNI (" in capsys.readouterr().out


def test_interrupted(folder, capsys, monkeypatch):
    """A real signal in the middle of the pass: code 130, no result, and the next run goes on."""
    step, told_once = PlainProgress.step, threading.Event()

    def interrupting(self: PlainProgress, label: str) -> None:
        step(self, label)
        if not told_once.is_set():  # twice would end the process at once
            told_once.set()
            os.kill(os.getpid(), signal.SIGINT)
            time.sleep(0.2)

    monkeypatch.setattr(PlainProgress, "step", interrupting)
    assert main(["run", "study.toml", "--workers", "1"]) == 130
    told = capsys.readouterr()
    assert "interrupted" in told.err
    assert "goes on" in told.err
    assert told.out == ""
    assert not (folder / "audit").exists()
    monkeypatch.setattr(PlainProgress, "step", step)
    assert main(["run", "study.toml", "--workers", "1"]) == 0
    assert left_behind(folder) == {"audit"}


def test_an_unexpected_fault(folder, capsys, monkeypatch):
    """A short report of where, without what: no data, no label, no path."""

    def broken(*_: object) -> None:
        secret = f"{folder}/sub-02 41 years"
        raise RuntimeError(secret)

    monkeypatch.setattr("seedaudit.sweep.correlate.seed_series", broken)
    monkeypatch.setattr("seedaudit.sweep.participant.seed_series", broken)
    assert main(["run", "study.toml"]) == 1
    told = capsys.readouterr()
    assert told.out == ""
    assert "unexpected fault in the program (RuntimeError" in told.err
    assert "--debug" in told.err
    assert "Traceback" not in told.err
    (report,) = folder.glob("seedaudit-fault-*.txt")
    assert report.name in told.err
    text = report.read_text()
    assert "RuntimeError" in text
    assert "participant.py:" in text
    for secret in ("sub-02", "41 years", str(folder.parent), "/"):
        assert secret not in text
    assert not (folder / "audit").exists()


def test_a_fault_where_no_report_can_be_written(folder, capsys, monkeypatch):
    monkeypatch.setattr("seedaudit.preflight.make_plan", lambda study: 1 / 0)
    monkeypatch.setattr(Path, "write_text", lambda *_, **__: (_ for _ in ()).throw(OSError("full")))
    assert main(["check", "study.toml"]) == 1
    assert "ZeroDivisionError" in capsys.readouterr().err
    assert left_behind(folder) == set()


@pytest.mark.parametrize("arguments", [["--debug", "check", "study.toml"],
                                       ["check", "study.toml", "--debug"]])  # fmt: skip
def test_debug_shows_the_trace(arguments, folder, capsys):
    swap(("radius = 5.0", "radius = 0"))(folder)
    assert main(arguments) == 2
    assert "Traceback (most recent call last)" in capsys.readouterr().err


def test_a_reader_that_has_seen_enough(folder, monkeypatch):
    """`seedaudit check study.toml | head -1` is no fault of the program."""

    def closed(*_: object, **__: object) -> None:
        raise BrokenPipeError

    monkeypatch.setattr("seedaudit.cli.overview_text", closed, raising=False)
    monkeypatch.setattr("seedaudit.overview.overview_text", closed)
    monkeypatch.setattr("sys.stdout", io.StringIO())
    assert main(["check", "study.toml"]) == 0
    assert left_behind(folder) == set()


def test_synth_check_run(tmp_path, monkeypatch, capsys):
    """From nothing to a result with its report, by the commands that the program itself names."""
    monkeypatch.chdir(tmp_path)
    small = ["--participants", "4", "--voxel-size", "8", "--volumes", "60"]
    assert main(["synth", "tide", *small]) == 0
    told = capsys.readouterr().out
    command = told[told.index("Next: seedaudit ") :].split()[2:]
    assert command == ["run", str(Path("tide/study.toml"))]
    swap(("count = 100", "count = 6"))(tmp_path / "tide")
    assert main(["check", command[1]]) == 0
    assert main(command) == 0
    told = capsys.readouterr()
    assert "Result folder:" in told.out
    result = tmp_path / "tide" / "audit"
    for name in ("summary.json", "provenance.json", "methods.md", "figure.png", "maps", "tables"):
        assert (result / name).exists(), name
    assert load_audit(result).summary["seeds"][0]["n_participants"] == 4
