"""How far long work is: one live line per stage on a terminal, plain lines elsewhere."""

from __future__ import annotations

import sys
import threading
import time
from types import TracebackType
from typing import Self

from rich.console import Console
from rich.progress import (
    BarColumn,
    MofNCompleteColumn,
    Progress,
    ProgressColumn,
    Task,
    TaskID,
    TextColumn,
    TimeRemainingColumn,
)
from rich.text import Text


class Rate(ProgressColumn):
    """Steps in a minute, so far."""

    def render(self, task: Task) -> Text:
        speed = task.finished_speed or task.speed
        return Text(f"{60 * speed:.1f}/min" if speed else "-/min")


class LiveProgress:
    """A bar with participants done, rate and time left, on standard error."""

    def __init__(self, console: Console) -> None:
        self._bar = Progress(
            TextColumn("{task.description}"),
            BarColumn(),
            MofNCompleteColumn(),
            Rate(),
            TextColumn("time left"),
            TimeRemainingColumn(elapsed_when_finished=True),
            TextColumn("{task.fields[label]}", markup=False),
            console=console,
        )
        self._task: TaskID | None = None

    def __enter__(self) -> Self:
        self._bar.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._bar.stop()

    def stage(self, name: str, total: int) -> None:
        """Begin a stage of so many steps."""
        self._task = self._bar.add_task(name, total=total, label="")

    def step(self, label: str) -> None:
        """Tell that one step is done."""
        if self._task is not None:
            self._bar.update(self._task, advance=1, label=label)


class PlainProgress:
    """One line per step on standard error, for pipes and log files."""

    def __init__(self, *, quiet: bool = False) -> None:
        self._quiet = quiet
        self._lock = threading.Lock()
        self._name, self._total, self._done, self._started = "", 0, 0, 0.0

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        pass

    def stage(self, name: str, total: int) -> None:
        """Begin a stage of so many steps."""
        self._name, self._total, self._done = name, total, 0
        self._started = time.monotonic()

    def step(self, label: str) -> None:
        """Tell that one step is done."""
        with self._lock:
            self._done += 1
            elapsed = time.monotonic() - self._started
            left = elapsed / self._done * (self._total - self._done)
            if not self._quiet:
                print(
                    f"{self._name}: {self._done}/{self._total} {label}, "
                    f"{60 * self._done / max(elapsed, 1e-9):.1f}/min, {left:.0f} s left",
                    file=sys.stderr,
                    flush=True,
                )
