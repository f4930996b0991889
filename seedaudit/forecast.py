"""What a run will need: time, memory and disk, from headers alone, against what is there."""

from __future__ import annotations

import shutil
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import psutil

from seedaudit.dictionary import MAPS
from seedaudit.errors import Problem, StudyError
from seedaudit.plan import Plan
from seedaudit.sweep.correlate import BLOCK
from seedaudit.sweep.schedule import assign_folds

READ_RATE = 150e6
"""Uncompressed bytes a worker reads in a second: the usual order for gzip on one core."""

PRODUCT_RATE = 3e10
"""Floating-point operations a worker's products do in a second: the usual order."""

ESTIMATE_RATE = 1.5e7
"""Voxels of group maps that are estimated and classified in a second: the usual order."""

BASE_MEMORY = 300e6
"""The program itself with its libraries, bytes."""


@dataclass(frozen=True)
class Forecast:
    """Rough needs of a run: `seconds`, and in bytes `memory`, `disk` and `progress`.

    `disk` is what the result takes, `progress` what is kept beside it until the result is safe.
    """

    seconds: float
    memory: float
    disk: float
    progress: float = 0.0


def forecast(plan: Plan, workers: int) -> Forecast:
    """Predict what a run of the plan needs with so many workers."""
    n_voxels, n_placements = len(plan.voxels), plan.n_swept
    p = plan.design.matrix.shape[1]
    runs = [[run.header for run in participant.runs] for participant in plan.participants]
    n_folds = len(assign_folds(plan.design.strata, plan.folds))
    workers = min(workers, n_folds)

    layers = p + 1 + (len(plan.participants) == 1)
    digits = np.dtype(plan.precision).itemsize
    one_state = n_voxels * (digits * layers * n_placements + 8 * p * p + 4)
    searched = [seed.search for seed in plan.seeds if seed.search is not None]
    search_state = sum(8.0 * len(one.shifts) * len(one.targets) for one in searched)
    series = max(4 * n_voxels * sum(h.n_volumes for h in own) for own in runs)
    block = 8 * BLOCK * (n_placements * 4 + max(h.n_volumes for own in runs for h in own))
    sweeping = workers * (series + block)
    largest = max(len(seed.used) for seed in plan.seeds)
    # effects, statistics and classes of a cloud, its parts for pairs and low rank, and counts of
    # classes with each fold left out, for every worker
    concluding = n_voxels * (18 * largest + 12 * n_folds * workers + 150)
    # float32 copies of a search's sums, of all folds and of one block of candidates
    judging = n_folds * max((4.0 * len(s.shifts) * len(s.targets) for s in searched), default=0)
    states = n_folds * (one_state + search_state)
    memory = BASE_MEMORY + states + max(sweeping, concluding, 2 * judging)

    stored = sum(float(np.prod(h.grid.shape)) * h.n_volumes * h.dtype.itemsize
                 for own in runs for h in own)  # fmt: skip
    products = 2.0 * n_placements * n_voxels * sum(h.n_volumes for own in runs for h in own)
    products += sum(2.0 * len(one.shifts) * len(one.targets) * h.n_volumes
                    for one in searched for own in runs for h in own)  # fmt: skip
    pairs = sum(float(one.around().counts.sum()) * len(one.targets) for one in searched)
    estimates = n_placements * n_voxels * (n_folds + 1)
    seconds = (stored / READ_RATE + products / PRODUCT_RATE) / workers + estimates / ESTIMATE_RATE
    # every pair of a candidate and its neighbour, for every two folds, in blocks
    seconds += 4 * n_folds**2 * pairs / PRODUCT_RATE
    disk = len(plan.seeds) * (2.0 * len(MAPS) * n_voxels + 60.0 * n_placements**2 / 2) + 2e6
    # one fold is written anew while its last state is still there
    progress = (n_folds + 1) * (one_state + search_state)
    return Forecast(seconds, memory, disk, progress)


def strains(needs: Forecast, output: Path) -> list[str]:
    """What of the machine will be short, for the user's attention.

    Parameters
    ----------
    needs : Forecast
    output : Path
        Where the result will be; it need not exist.

    Raises
    ------
    StudyError
        If result and progress plainly do not fit on the disk of the output.
    """
    there = next(parent for parent in output.absolute().parents if parent.exists())
    wanted, free = needs.disk + needs.progress, shutil.disk_usage(there).free
    if wanted > free:
        raise StudyError(
            Problem(
                f"output {output.name}",
                f"about {_size(wanted)} are needed (result and progress), {_size(free)} are free",
                "enough space on the disk of the output",
                "free some, choose another disk with --out, or ask for fewer placements",
            )
        )
    available = psutil.virtual_memory().available
    if needs.memory <= available:
        return []
    return [
        f"about {_size(needs.memory)} of memory will be needed, {_size(available)} are free: "
        "fewer --workers, folds or placements need less"
    ]


def _size(count: float) -> str:
    return f"{count / 1e9:.1f} GB" if count >= 1e8 else f"{count / 1e6:.1f} MB"
