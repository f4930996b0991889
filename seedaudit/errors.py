"""The errors a user meets: each says what, where, what was found, what is allowed, and a remedy."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import PurePath


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
