"""A memory budget kept: finished folds go to disk, then the voxels are done in tiles.

Neither changes a digit, nor do fewer workers, which come next. Fewer folds are the last resort.
"""

from __future__ import annotations

from dataclasses import replace
from itertools import product

import psutil

from seedaudit.errors import Problem, StudyError, counted
from seedaudit.forecast import forecast
from seedaudit.plan import Plan
from seedaudit.sweep.tiles import Layout

USUAL_SHARE = 0.8
"""Share of the machine's memory that a run keeps to when nothing is said."""

LEAST_FOLDS = 4
"""Folds below which a jackknife interval says little."""

MOST_TILES = 64

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
    """The plan as it fits into so many bytes; what that takes stands among its choices.

    Raises
    ------
    StudyError
        If it does not fit in any way.
    """
    fewest = min(plan.folds, LEAST_FOLDS)
    for folds, layout in product(dict.fromkeys((plan.folds, fewest)), _layouts(workers)):
        trial = replace(plan, folds=folds, layout=layout)
        if forecast(trial, workers).memory <= memory:
            words = _words(trial, plan.folds, memory)
            return replace(trial, choices=(*plan.choices, *words))
    most = replace(plan, folds=fewest, layout=Layout(MOST_TILES, True, 1))
    least = forecast(most, workers).memory
    raise StudyError(
        Problem(
            "memory",
            f"{memory / 1e9:.1f} GB to keep to; this study needs about {least / 1e9:.1f} GB at the "
            "least",
            "enough memory for the maps of all placements of a seed",
            "fewer placements, a smaller mask, or a machine with more memory",
        )
    )


def _layouts(workers: int) -> list[Layout]:
    """From the fastest to the one that takes least memory."""
    threads: list[int | None] = [None]
    while workers > 1:
        workers //= 2
        threads.append(workers)
    tiles = range(1, MOST_TILES + 1)
    return [Layout(), *(Layout(n, True, most) for most in threads for n in tiles)]


def _words(plan: Plan, asked: int, memory: float) -> list[str]:
    parts = []
    if plan.folds < asked:
        parts.append(f"{plan.folds} folds in the place of {asked}")
    if plan.layout.on_disk:
        parts.append("the state of finished folds on disk")
    if plan.layout.tiles > 1:
        parts.append(f"{plan.layout.tiles} passes over the data, each for a part of the voxels")
    if plan.layout.workers is not None:
        parts.append(f"{counted(plan.layout.workers, 'worker')} at the most")
    return [f"to keep to {memory / 1e9:.1f} GB of memory: {', '.join(parts)}"] if parts else []
