"""What a run will need: time, memory and disk, from headers alone, against what is there."""

from __future__ import annotations

import shutil
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import psutil

from seedaudit.dictionary import MAPS
from seedaudit.errors import Problem, StudyError
from seedaudit.inference.glm import orthonormal_design
from seedaudit.plan import Plan
from seedaudit.searching import PlannedSearch
from seedaudit.standins import MOST_VOXELS
from seedaudit.sweep.correlate import BLOCK
from seedaudit.sweep.schedule import assign_folds
from seedaudit.sweep.tiles import tile_slices

READ_RATE = 150e6
"""Uncompressed bytes a worker reads in a second: the usual order for gzip on one core."""

PRODUCT_RATE = 3e10
"""Floating-point operations a worker's products do in a second: the usual order."""

ESTIMATE_RATE = 1.5e7
"""Voxels of group maps that are estimated and classified in a second: the usual order."""

BASE_MEMORY = 300e6
"""The program itself with its libraries, bytes."""


MARGIN = 1.04
"""For what falls between the arrays that are counted: 2 % was measured at 8 GB."""

MAPS_MEMORY = 25
"""Volumes of the grid in float32 that a result holds."""

OTHER_MAPS = 30
"""Further maps in float64 that a worker's arithmetic on one placement takes at the most."""

CLASS_SPLITS = 4


@dataclass(frozen=True)
class Forecast:
    """Rough needs of a run: `seconds`, and in bytes `memory`, `disk` and `progress`.

    `disk` is what the result takes, `progress` what is kept beside it until the result is safe.
    """

    seconds: float
    memory: float
    disk: float
    progress: float = 0.0


@dataclass(frozen=True)
class _Sizes:
    """What the needs follow from: voxels V, placements N, columns p, folds G, and bytes of a state
    for each voxel.
    """

    voxels: int
    placements: int
    p: int
    folds: int
    state: float

    @classmethod
    def of(cls, plan: Plan) -> _Sizes:
        p, n = plan.design.matrix.shape[1], plan.n_swept
        steps = plan.steps(orthonormal_design(plan.design.matrix, plan.design.contrast)[0])
        each = 8 * (p + 2) if steps is None else steps.dtype.itemsize * (p + 1)
        folds = len(assign_folds(plan.design.strata, plan.folds))
        return cls(len(plan.voxels), n, p, folds, each * n + 8.0 * p * p + 4)


def forecast(plan: Plan, workers: int) -> Forecast:
    """Predict what a run of the plan needs with so many workers."""
    sizes = _Sizes.of(plan)
    workers = min(plan.layout.threads(workers), sizes.folds)
    largest = max(_sweeping(plan, sizes, workers), _concluding(plan, sizes, workers))
    memory = BASE_MEMORY + MARGIN * largest
    disk = len(plan.seeds) * (2.0 * len(MAPS) * sizes.voxels + 60.0 * sizes.placements**2 / 2) + 2e6
    # one fold is written anew while its last state is still there
    whole = sizes.voxels * sizes.state
    states = (sizes.folds + 1) * whole
    if plan.layout.on_disk:
        states = sizes.folds * whole + (workers + 1) * whole / plan.layout.tiles
    progress = states + (sizes.folds + 1) * _search_state(plan)
    return Forecast(_seconds(plan, sizes, workers), memory, disk, progress)


def _sweeping(plan: Plan, sizes: _Sizes, workers: int) -> float:
    """Bytes at the height of the pass: states, and for each worker its series and a block."""
    layout = plan.layout
    runs = [[run.header.n_volumes for run in person.runs] for person in plan.participants]
    tile = max(part.stop - part.start for part in tile_slices(sizes.voxels, layout.tiles))
    read = tile
    if layout.tiles > 1:
        read += _read_for_spheres(plan)
    series = 4.0 * read * max(sum(own) for own in runs)
    block = 8.0 * BLOCK * (sizes.placements * 4 + max(map(max, runs)))
    # the series of the spheres in float64, and what is left of them without nuisance
    block += 16.0 * _read_for_spheres(plan) * max(map(max, runs))
    states = workers if layout.on_disk else sizes.folds
    searched = sizes.folds * _search_state(plan)
    return (
        workers * (series + block)
        + states * tile * sizes.state
        + searched
        + _reported_maps(plan, sizes)
    )


def _reported_maps(plan: Plan, sizes: _Sizes) -> float:
    """Every participant's map of every reported placement, for permutation."""
    if plan.study.threshold.rule != "fwe":
        return 0.0
    return 4.0 * len(plan.participants) * len(plan.seeds) * sizes.voxels


def _read_for_spheres(plan: Plan) -> int:
    """Voxels that every tile reads beside its own."""
    used = [seed.cloud.weights[seed.used].indices for seed in plan.seeds]
    used += [part for one in _searches(plan) for part in (one.weights.indices, one.targets)]
    return len(np.unique(np.concatenate(used)))


def _concluding(plan: Plan, sizes: _Sizes, workers: int) -> float:
    """Bytes at the height of the conclusions about one seed."""
    v, p, g = sizes.voxels, sizes.p, sizes.folds
    largest = max(len(seed.used) for seed in plan.seeds)
    # effects and classes of a cloud; counts and X'X, twice; models without each fold; reported sums
    shared = 5.0 * largest + g * (2 * (4 + 8 * p * p) + 8 * (3 * p + 2))
    # counts of classes without each fold, a placement's sums, arithmetic, and classes of halves
    own = 4.0 * g + 8 * g * (p + 1) + 8 * OTHER_MAPS + 2 * CLASS_SPLITS * (2 + g // 2)
    maps = 4.0 * MAPS_MEMORY * len(plan.seeds) * float(np.prod(plan.voxels.grid.shape))
    states = 0.0 if plan.layout.on_disk else g * v * sizes.state
    # two copies of the maps of one reported placement beside all of them
    states += _reported_maps(plan, sizes) * (1 + 2 / len(plan.seeds))
    if len(plan.participants) == 1:
        states += 2 * v * 8.0 * largest / (plan.layout.tiles if plan.layout.on_disk else 1)
    # float32 copies of a search's sums, of all folds and of one block of candidates
    judging = (
        2 * g * max((4.0 * len(s.shifts) * len(s.targets) for s in _searches(plan)), default=0)
    )
    between = 8.0 * g * p * MOST_VOXELS * sizes.placements if len(plan.seeds) > 1 else 0.0
    largest_step = max(v * (shared + (1 + workers) * own), judging, between)
    return states + maps + g * _search_state(plan) + largest_step


def _searches(plan: Plan) -> list[PlannedSearch]:
    return [seed.search for seed in plan.seeds if seed.search is not None]


def _search_state(plan: Plan) -> float:
    return sum(8.0 * len(one.shifts) * len(one.targets) for one in _searches(plan))


def _seconds(plan: Plan, sizes: _Sizes, workers: int) -> float:
    searched = _searches(plan)
    headers = [run.header for person in plan.participants for run in person.runs]
    stored = sum(float(np.prod(h.grid.shape)) * h.n_volumes * h.dtype.itemsize for h in headers)
    volumes = float(sum(h.n_volumes for h in headers))
    products = 2.0 * sizes.placements * sizes.voxels * volumes
    products += sum(2.0 * len(one.shifts) * len(one.targets) * volumes for one in searched)
    pairs = sum(float(one.around().counts.sum()) * len(one.targets) for one in searched)
    reading = stored * plan.layout.tiles / READ_RATE + products / PRODUCT_RATE
    estimates = sizes.placements * sizes.voxels * (sizes.folds + 1)
    # every pair of a candidate and its neighbour, for every two folds, in blocks
    judging = 4 * sizes.folds**2 * pairs / PRODUCT_RATE
    return reading / workers + estimates / ESTIMATE_RATE + judging


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
    # what an interrupted run has left there already is no further need
    kept = _held(output.with_name(f".{output.name}.progress"))
    wanted = needs.disk + max(needs.progress - kept, 0)
    free = shutil.disk_usage(there).free
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


def _held(folder: Path) -> float:
    """Bytes on disk of the files in a folder, if there is one."""
    held = 0.0
    for path in folder.rglob("*"):
        with suppress(OSError):  # it may go while it is looked at
            # not the length: files of states have holes where a tile is missing
            held += 512.0 * getattr(path.stat(), "st_blocks", 0)
    return held


def _size(count: float) -> str:
    return f"{count / 1e9:.1f} GB" if count >= 1e8 else f"{count / 1e6:.1f} MB"
