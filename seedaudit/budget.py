"""A memory budget kept: fewer folds first, then a state of half precision; else an error."""

from __future__ import annotations

from dataclasses import replace

import psutil

from seedaudit.errors import Problem, StudyError
from seedaudit.forecast import forecast
from seedaudit.plan import Plan

USUAL_SHARE = 0.8
"""Share of the machine's memory that a run keeps to when nothing is said."""

LEAST_FOLDS = 4
"""Folds below which a jackknife interval says little; only the last resort goes lower."""

UNITS = {"": 1.0, "B": 1.0, "KB": 1e3, "MB": 1e6, "GB": 1e9, "TB": 1e12}


def parse_size(text: str) -> float:
    """Bytes from a size such as 6GB, 500 MB or 6e9.

    Raises
    ------
    StudyError
        If it is no size.
    """
    stripped = text.strip().upper()
    number = stripped.rstrip("KMGTB")
    unit = stripped[len(number) :]
    try:
        size = float(number) * UNITS[unit]
    except (ValueError, KeyError):
        size = 0.0
    if not 0 < size < float("inf"):
        raise StudyError(Problem("--memory", f"is {text!r}", "a size such as 6GB or 500MB"))
    return size


def usual_memory() -> float:
    """Bytes that a run keeps to when nothing is said; of all memory, so that it does not vary."""
    return USUAL_SHARE * float(psutil.virtual_memory().total)


def fitted(plan: Plan, workers: int, memory: float) -> Plan:
    """The plan as it fits into so many bytes; what was given up stands among its choices.

    Raises
    ------
    StudyError
        If it does not fit in any way.
    """
    asked = plan.folds
    fewer = min(asked, LEAST_FOLDS)
    steps = [(asked, "float64"), (fewer, "float64"), (fewer, "float32"), (2, "float32")]
    for folds, precision in steps:
        trial = replace(plan, folds=folds, precision=precision)
        if forecast(trial, workers).memory > memory:
            continue
        if (folds, precision) == steps[0]:
            return trial
        text = f"to keep to {memory / 1e9:.1f} GB of memory: {folds} folds in the place of {asked}"
        if precision != "float64":
            text += f", their state in {precision}"
        return replace(trial, choices=(*plan.choices, text))
    least = forecast(replace(plan, folds=2, precision="float32"), workers).memory
    raise StudyError(
        Problem(
            "memory",
            f"{memory / 1e9:.1f} GB to keep to; this study needs about {least / 1e9:.1f} GB at the "
            "least",
            "enough memory for the state of all placements",
            "fewer placements or workers, a smaller mask, or a machine with more memory",
        )
    )
