"""What the numbers of an audit come from: versions, study, inputs, decisions.

Holds file names and the paths of the study file as typed, never an absolute path, host or user.
"""

from __future__ import annotations

import platform
import re
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import PurePosixPath, PureWindowsPath
from typing import Any

import numpy as np

from seedaudit._version import __version__
from seedaudit.errors import counted
from seedaudit.groupstate import GroupState
from seedaudit.plan import Plan
from seedaudit.sweep.schedule import Swept

HOME = re.compile(r"~[^\s/\\+*:]*[/\\]")
"""A path from somebody's home on. A model such as `~ a` or `~a+b` is none."""

LIBRARIES = ("numpy", "scipy", "nibabel", "nilearn", "pandas", "scikit-learn", "matplotlib")


def provenance(
    plan: Plan,
    swept: Swept,
    group: GroupState,
    *,
    timings: dict[str, float],
    workers: int,
    anatomy: str,
) -> dict[str, Any]:
    """The content of provenance.json, also what the methods text is written from."""
    headers = [run.header for participant in plan.participants for run in participant.runs]
    volumes = [header.n_volumes for header in headers]
    grid = plan.voxels.grid
    warnings = [
        *plan.warnings,
        *(f"participant {r.participant} is set aside: {r.reason}" for r in swept.records
          if not r.used),
        *_missing_voxels(plan, group),
    ]  # fmt: skip
    return {
        "seedaudit": __version__,
        "python": platform.python_version(),
        "libraries": {name: version(name) for name in LIBRARIES},
        "finished": datetime.now(UTC).isoformat(timespec="seconds"),
        "study": shortened(plan.study.model_dump(mode="json", exclude_none=True)),
        "data": {
            "grid_shape": list(grid.shape),
            "voxel_mm": [round(float(edge), 4) for edge in grid.voxel_sizes],
            "space_code": plan.first_run.space_code,
            "mask_voxels": len(plan.voxels),
            "runs": len(headers),
            "volumes": [min(volumes), max(volumes)],
            "repetition_time_s": plan.cleaning.repetition_time or plan.first_run.repetition_time,
            "anatomy": anatomy,
        },
        "group": {
            "participants": len(group.used),
            "set_aside": len(group.set_aside),
            "model": plan.study.group.model,
            "columns": list(plan.design.names),
            "effect": plan.design.effect,
            "folds": int(np.count_nonzero(swept.fold_sizes)),
            "residual_df": [r.residual_df for r in group.used],
        },
        "regions": {
            "source": "none" if plan.regions is None else file_name(plan.study.data.regions or ""),
            "count": 0 if plan.regions is None else len(plan.regions.names),
        },
        "inputs": {
            record.participant: {
                run.header.path.name: digest
                for run, digest in zip(
                    plan.participants[record.row].runs, record.digests, strict=True
                )
            }
            for record in group.used
        },
        "digest": "SHA-256 of each run as stored",
        "choices": list(plan.choices),
        "warnings": warnings,
        "workers": workers,
        "seconds": {stage: round(seconds, 3) for stage, seconds in timings.items()},
    }


def _missing_voxels(plan: Plan, group: GroupState) -> list[str]:
    lost = [r for r in group.used if r.n_missing_voxels]
    if not lost:
        return []
    worst = max(lost, key=lambda r: r.n_missing_voxels)
    rule = (
        "left out for everyone"
        if plan.study.group.missing == "intersection"
        else "analysed in those who have them"
    )
    return [
        f"{counted(len(lost), 'participant')} {'lacks' if len(lost) == 1 else 'lack'} some mask "
        "voxels (constant or not finite), at most "
        f"{worst.n_missing_voxels} of {len(plan.voxels)} in {worst.participant}; {rule}"
    ]


def shortened(content: Any) -> Any:
    """The same content with paths that lead out of the study cut to their last part."""
    if isinstance(content, dict):
        return {key: shortened(value) for key, value in content.items()}
    if isinstance(content, list):
        return [shortened(value) for value in content]
    return file_name(content) if isinstance(content, str) else content


def file_name(text: str) -> str:
    """A path below the study as typed; of one that starts elsewhere, the last part.

    The folders above a study may hold a name or a place as well as those above a home.
    """
    absolute = PurePosixPath(text).is_absolute() or PureWindowsPath(text).is_absolute()
    elsewhere = absolute or HOME.match(text) or ".." in PureWindowsPath(text).parts
    return PureWindowsPath(text).name if elsewhere else text
