"""A small sound study, to be broken in copies."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from seedaudit.auditing import audit
from seedaudit.cli import main
from seedaudit.study import Study
from tests.breaks import Break, swap
from tests.small_study import write_small_study


@dataclass(frozen=True)
class Outcome:
    """What a command left: exit code, standard output and error, and the folder of the study."""

    code: int
    out: str
    err: str
    folder: Path


@pytest.fixture(scope="session")
def sound(tmp_path_factory) -> Path:
    """Four participants with one run each, four placements."""
    folder = tmp_path_factory.mktemp("sound")
    write_small_study(folder, participants=4, two_runs=())
    swap(("count = 12", "count = 4"))(folder)
    return folder


@pytest.fixture(scope="session")
def result(sound):
    """The audit of it."""
    return audit(Study.load(sound / "study.toml"))


@pytest.fixture
def folder(sound, tmp_path, monkeypatch) -> Path:
    """A copy of the study, which is the working directory."""
    copy = tmp_path / "study"
    shutil.copytree(sound, copy)
    monkeypatch.chdir(copy)
    return copy


@pytest.fixture
def no_figures(monkeypatch) -> None:
    """Figures are none of the matter and take most of the time."""
    monkeypatch.setattr("seedaudit.report.write_report", lambda audit, folder: None)


@pytest.fixture
def try_it(folder, no_figures, capsys) -> Callable[..., Outcome]:
    """Break the study and say a command to it."""

    def go(command: str, breaks: Break | None = None, *options: str) -> Outcome:
        if breaks is not None:
            breaks(folder)
        code = main([command, "study.toml", *options])
        told = capsys.readouterr()
        return Outcome(code, told.out, told.err, folder)

    return go
