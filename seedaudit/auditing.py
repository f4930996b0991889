"""The story of an audit, top to bottom: each step is one call into one room."""

from __future__ import annotations

import tempfile
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any, Protocol

from threadpoolctl import threadpool_limits

from seedaudit.budget import fitted, usual_memory
from seedaudit.conclusions import conclude_seed
from seedaudit.errors import Problem, StudyError, printable
from seedaudit.groupstate import group_state
from seedaudit.inference.glm import orthonormal_design
from seedaudit.inputs.anatomy import anatomy
from seedaudit.plan import Plan
from seedaudit.preflight import make_plan
from seedaudit.provenance import provenance
from seedaudit.results import Audit
from seedaudit.standins import compare_seeds
from seedaudit.steadying import with_search
from seedaudit.study import Study
from seedaudit.sweep.checkpoint import Checkpoint
from seedaudit.sweep.schedule import assign_folds, sweep, sweep_key
from seedaudit.sweep.task import ParticipantRecord, ParticipantTask
from seedaudit.variation import with_radii
from seedaudit.workers import available_cores, reuse_freed_memory


class Progress(Protocol):
    """Told how far the work is; every method may do nothing."""

    def stage(self, name: str, total: int) -> None:
        """A stage of so many steps begins."""

    def step(self, label: str) -> None:
        """One step is done; called from any thread."""


class Silence:
    """Progress that tells nobody."""

    def stage(self, name: str, total: int) -> None:
        """Do nothing."""

    def step(self, label: str) -> None:
        """Do nothing."""


def audit(
    study: Study | Plan,
    *,
    workers: int | None = None,
    progress: Progress | None = None,
    checkpoint: Checkpoint | None = None,
    cluster: str | None = None,
    prepared: Path | None = None,
) -> Audit:
    """Does the seed-correlation result survive small shifts of its seed?

    Parameters
    ----------
    study : Study or Plan
        What is asked; a plan is a study whose inputs are checked already.
    workers : int, optional
        Threads; default: the cores that this process may use.
    progress : Progress, optional
    checkpoint : Checkpoint, optional
        From `open_checkpoint`, entered: where the pass is kept on disk and gone on from. Without
        one, states that do not fit in memory go to the system's temporary folder (TMPDIR).
    cluster : str, optional
        Address of a Dask scheduler whose workers do the pass.
    prepared : Path, optional
        Folder where decompressed runs are kept and found again.

    Returns
    -------
    Audit

    Raises
    ------
    StudyError, DataError
        With every problem that can be found before computing, or the first one in the data.
    """
    workers = available_cores() if workers is None else workers
    if workers < 1:
        raise StudyError(Problem("workers", f"is {workers}", "1 or more"))
    progress = progress or Silence()
    plan = study
    if not isinstance(plan, Plan):
        plan = fitted(make_plan(plan), workers, usual_memory())
    workers = plan.layout.threads(workers)
    reuse_freed_memory()
    started = time.monotonic()

    # an equivalent design with orthonormal columns keeps the digits of the streamed sums
    matrix, contrast = orthonormal_design(plan.design.matrix, plan.design.contrast)
    folds = plan_folds(plan)
    progress.stage("reading participants", len(plan.participants) * plan.layout.tiles)
    # single-threaded products, so that the digits depend on no number of cores
    with threadpool_limits(limits=1), _scratch(plan, cluster, checkpoint) as scratch:
        swept = sweep(
            replace(plan.sweep_task(matrix), prepared=prepared),
            folds,
            layout=plan.layout,
            scratch=scratch,
            workers=workers,
            cluster=cluster,
            checkpoint=checkpoint,
            on_participant=lambda record: progress.step(_label(record)),
        )
        swept_at = time.monotonic()

        group = group_state(plan, swept, matrix, contrast)
        picture, source = anatomy(plan.first_run, template=plan.in_template_space)
        progress.stage("drawing conclusions", len(plan.seeds))
        seeds = []
        for number, seed in enumerate(plan.seeds):
            concluded = conclude_seed(plan, swept, group, number, picture, workers)
            concluded = with_search(concluded, plan, swept, group, number)
            seeds.append(with_radii(concluded, plan, group, number))
            progress.step(seed.seed.name)
        between = compare_seeds(plan, swept, group, seeds)

    timings = {
        "pass over the data": swept_at - started,
        "conclusions": time.monotonic() - swept_at,
    }
    told = provenance(plan, swept, group, timings=timings, workers=workers, anatomy=source)
    return Audit(plan.study.title, tuple(seeds), told, between)


def open_checkpoint(
    plan: Plan, folder: Path, *, fresh: bool = False, tell: Callable[[str], None] = print
) -> Checkpoint:
    """The progress of a plan in a folder, to be entered as a context until the result is safe."""
    matrix, _ = orthonormal_design(plan.design.matrix, plan.design.contrast)
    key = sweep_key(plan.sweep_task(matrix), plan_folds(plan), plan.layout)
    return Checkpoint(folder, key, fresh=fresh, tell=tell)


@contextmanager
def _scratch(
    plan: Plan, cluster: str | None, checkpoint: Checkpoint | None
) -> Iterator[Path | None]:
    """A folder for the states of finished folds, where they leave the memory."""
    if not plan.layout.on_disk and cluster is None:
        yield None
    elif checkpoint is not None:
        checkpoint.state_folder.mkdir(exist_ok=True)
        yield checkpoint.state_folder
    else:
        with tempfile.TemporaryDirectory(prefix="seedaudit-") as folder:
            yield Path(folder)


def plan_folds(plan: Plan) -> list[list[ParticipantTask]]:
    """The participants dealt into folds."""
    rows = assign_folds(plan.design.strata, plan.folds)
    return [[plan.participants[row] for row in fold] for fold in rows]


def audit_images(
    bold: Sequence[str | Path],
    seed: Sequence[float],
    radius: float = 6.0,
    within: float = 6.0,
    *,
    mask: str | Path | None = None,
    regions: str | Path | None = None,
    space: str = "mni",
    workers: int | None = None,
    **placements: Any,
) -> Audit:
    """Audit one seed on a list of runs, one for each participant, without a study file.

    Parameters
    ----------
    bold : sequence of paths
        Cleaned 4-D NIfTI runs on one grid.
    seed : (x, y, z)
        mm
    radius, within : float
        Radius of the sphere and of the cloud, mm.
    mask, regions : path, optional
        As in the study file.
    space : str
        `mni`, `talairach` or `native`.
    workers : int, optional
    **placements
        More keys of the section `placements`.
    """
    content: dict[str, Any] = {
        "data": {"runs": [str(Path(path).absolute()) for path in bold]},
        "seed": [{"at": [float(value) for value in seed], "radius": radius, "space": space}],
        "placements": {"within": within, **placements},
    }
    for key, path in {"mask": mask, "regions": regions}.items():
        if path is not None:
            content["data"][key] = str(path)
    return audit(Study.from_mapping(content), workers=workers)


def _label(record: ParticipantRecord) -> str:
    return printable(record.participant) + ("" if record.used else " (set aside)")
