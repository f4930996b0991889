"""The errors a user meets: each says what, where, what was found, what is allowed, and a remedy."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from pathlib import PurePath
from typing import TypeVar

Result = TypeVar("Result")


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong, in the parts every message of the program has.

    Parameters
    ----------
    where : str
        File, key or parameter.
    found : str
        What stands there.
    allowed : str
        The rule it breaks.
    remedy : str
        What the user can do about it.
    """

    where: str
    found: str
    allowed: str = ""
    remedy: str = ""

    @property
    def brief(self) -> str:
        """Where (a file by its name alone) and what, for tables that are handed on."""
        return f"{PurePath(self.where).name}: {self.found}"

    def __str__(self) -> str:
        parts = [f"{self.where}: {self.found}"]
        if self.allowed:
            parts.append(f"allowed: {self.allowed}")
        if self.remedy:
            parts.append(f"remedy: {self.remedy}")
        return "; ".join(parts)


class SeedAuditError(Exception):
    """Root of all errors the program raises on purpose; holds one or more problems."""

    exit_code = 1

    def __init__(self, *problems: Problem) -> None:
        if not problems:
            raise ValueError("an error needs at least one problem")
        super().__init__(*problems)
        self.problems = problems

    def __str__(self) -> str:
        return "\n".join(str(problem) for problem in self.problems)


class StudyError(SeedAuditError):
    """The command or the study file is wrong."""

    exit_code = 2


class DataError(SeedAuditError):
    """The data are wrong."""

    exit_code = 3


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
            raise kind(*_together(problem for _, problem in self.problems))


def _together(problems: Iterable[Problem]) -> list[Problem]:
    """Each cause once: what is met on several ways, and what is wrong alike with many files."""
    places: dict[tuple[str, str, str], dict[str, None]] = {}
    for problem in problems:
        key = (problem.found, problem.allowed, problem.remedy)
        places.setdefault(key, {})[problem.where] = None
    return [Problem(listed(list(where)), *rest) for rest, where in places.items()]


def listed(places: Sequence[str], most: int = 10) -> str:
    """The first place in full, more of them by their names, and how many are left."""
    names = [places[0], *(PurePath(place).name for place in places[1:most])]
    more = f" and {len(places) - most} more" if len(places) > most else ""
    return ", ".join(names) + more


def counted(number: int, word: str) -> str:
    """A number with its word, which takes an s unless there is exactly one."""
    return f"{number} {word}" if number == 1 else f"{number} {word}s"


def brief(value: object, most: int = 120) -> str:
    """A value as Python writes it, cut where it is long."""
    text = repr(value)
    return text if len(text) <= most else f"{text[: most - 3]}..."


def printable(text: str) -> str:
    """The text on one line, its control characters and broken letters written as escapes.

    File names may hold anything: a line break, an order to the terminal, bytes of no alphabet.
    """
    return "".join(
        letter if letter.isprintable() else letter.encode("unicode_escape").decode("ascii")
        for letter in text
    )
