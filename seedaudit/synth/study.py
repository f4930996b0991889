"""Writes a synthetic study: runs, masks, tables, a study file, and the truth."""

from __future__ import annotations

import gzip
import json
from dataclasses import asdict
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
import pandas as pd
from nibabel.fileholders import FileHolder
from numpy.typing import NDArray

from seedaudit.errors import Problem, StudyError
from seedaudit.space.grid import Grid
from seedaudit.synth.atlas import (
    ARM_COUPLING,
    NAMES,
    Brain,
    Warp,
    build_brain,
    coupling,
    draw_warps,
    network_at,
    network_loads,
)
from seedaudit.synth.settings import SynthSettings
from seedaudit.synth.signals import personal_coupling, simulate_run
from seedaudit.synth.truth import CLAIMS, OTHER_SEEDS, SEED_RADIUS, planted_truth, seed_at

MNI_SPACE = 4  # NIfTI-1 code for MNI-152 coordinates
REPEATED = 3  # the participant, counted from 1, who has two runs


def synth_study(folder: Path | str, settings: SynthSettings | None = None) -> Path:
    """Write a synthetic study whose true answer is known; one run is in memory at a time.

    Parameters
    ----------
    folder : path
        Made when missing; must be empty.
    settings : SynthSettings, optional

    Returns
    -------
    Path
        The study file.

    Raises
    ------
    StudyError
        If the folder holds files already.
    """
    settings = settings or SynthSettings()
    folder = Path(folder)
    if folder.exists() and any(folder.iterdir()):
        raise StudyError(Problem(str(folder), "not empty", "a new or empty folder", "name another"))
    folder.mkdir(parents=True, exist_ok=True)
    brain = build_brain(settings.voxel_size)
    people = _participants(settings)
    drawn = draw_warps(_generator(settings, 0, 1), settings.participants, settings.border_sd)
    warps = dict(zip(people["participant_id"], drawn, strict=True))
    _write_template(folder, brain)
    runs: list[dict[str, str]] = []
    for number, (label, arm) in enumerate(
        zip(people["participant_id"], people["arm"], strict=True), start=1
    ):
        runs += _write_participant(folder, brain, settings, number, label, arm, warps[label])
    _write_table(folder / "runs.tsv", pd.DataFrame(runs))
    _write_people(folder, people)
    _write_claims(folder)
    truth = {
        **planted_truth(settings.border_distance, warps),
        "settings": asdict(settings),
    }
    _write_json(folder / "truth.json", truth)
    return _write_study_files(folder, settings)


def _generator(settings: SynthSettings, *keys: int) -> np.random.Generator:
    """Give every participant and run a stream of its own, whatever the other settings are."""
    return np.random.default_rng([settings.random_state, *keys])


def _participants(settings: SynthSettings) -> pd.DataFrame:
    rng = _generator(settings, 0, 0)
    numbers = range(1, settings.participants + 1)
    width = max(2, len(str(settings.participants)))
    arms = list(ARM_COUPLING)
    return pd.DataFrame(
        {
            "participant_id": [f"sub-{number:0{width}d}" for number in numbers],
            "arm": [arms[number % 2] for number in numbers],
            "age": rng.integers(21, 60, settings.participants),
        }
    )


def _write_participant(
    folder: Path,
    brain: Brain,
    settings: SynthSettings,
    number: int,
    label: str,
    arm: str,
    warp: Warp,
) -> list[dict[str, str]]:
    """Write the runs of one participant and give their rows of the table of runs."""
    loads = network_loads(brain.voxels.xyz, settings.voxel_size, warp)
    correlation = personal_coupling(
        _generator(settings, number, 0), coupling(arm), settings.coupling_sd
    )
    func = folder / label / "func"
    func.mkdir(parents=True)
    rows = []
    n_runs = 2 if number == REPEATED else 1
    for run in range(1, n_runs + 1):
        stored, confounds = simulate_run(
            _generator(settings, number, run), brain, loads, correlation, settings
        )
        stem = f"{label}_task-rest" + (f"_run-{run}" if n_runs > 1 else "")
        image = func / f"{stem}_bold.nii.gz"
        table = func / f"{stem}_desc-confounds_timeseries.tsv"
        _write_image(image, stored, brain.voxels.grid, settings.quantum, settings.repetition_time)
        _write_table(table, confounds, "%.5f")
        rows.append(
            {
                "participant_id": label,
                "run": str(run),
                "bold": image.relative_to(folder).as_posix(),
                "confounds": table.relative_to(folder).as_posix(),
            }
        )
    return rows


def _write_image(
    path: Path,
    stored: NDArray[Any],
    grid: Grid,
    slope: float = 1.0,
    repetition_time: float | None = None,
) -> None:
    """Write integers with both MNI forms; no time stamp and no name in the gzip header."""
    image = nib.Nifti1Image(stored, grid.affine)
    image.set_sform(grid.affine, code=MNI_SPACE)
    image.set_qform(grid.affine, code=MNI_SPACE)
    image.header.set_xyzt_units("mm", "sec")
    image.header.set_slope_inter(slope, 0)
    if repetition_time is not None:
        image.header["pixdim"][4] = repetition_time
    with (
        path.open("wb") as file,
        gzip.GzipFile(filename="", mode="wb", fileobj=file, compresslevel=6, mtime=0) as packed,
    ):
        image.to_file_map({"image": FileHolder(fileobj=packed)})


def _write_template(folder: Path, brain: Brain) -> None:
    voxels = brain.voxels
    everywhere = np.ones(len(voxels), dtype=np.uint8)
    for name, values in {
        "mask": everywhere,
        "grey": brain.grey.astype(np.uint8),
        "networks_dseg": network_at(voxels.xyz).astype(np.uint8),
    }.items():
        _write_image(folder / f"{name}.nii.gz", voxels.volume(values, 0), voxels.grid)
    names = pd.DataFrame({"index": np.arange(1, len(NAMES) + 1), "name": NAMES})
    _write_table(folder / "networks_dseg.tsv", names)


def _write_people(folder: Path, people: pd.DataFrame) -> None:
    _write_table(folder / "participants.tsv", people)
    levels = {
        "rested": "usual sleep before the scan (invented)",
        "restricted": "shortened sleep before the scan (invented)",
    }
    description = {
        "arm": {"Description": "Arm of the invented experiment", "Levels": levels},
        "age": {"Description": "Age at the scan; without effect", "Units": "year"},
    }
    _write_json(folder / "participants.json", description)


def _write_claims(folder: Path) -> None:
    rows = []
    for claim in CLAIMS:
        target = claim["target"]
        in_sphere = not isinstance(target, str)
        x, y, z = target if in_sphere else (None, None, None)
        rows.append(
            {
                "claim": claim["claim"],
                "seed": "posterior",
                "x": x,
                "y": y,
                "z": z,
                "radius": SEED_RADIUS if in_sphere else None,
                "region": None if in_sphere else target,
                "direction": "positive",
            }
        )
    _write_table(folder / "claims.tsv", pd.DataFrame(rows), "%g")


def _write_table(path: Path, table: pd.DataFrame, float_format: str | None = None) -> None:
    text = table.to_csv(
        sep="\t", index=False, na_rep="n/a", float_format=float_format, lineterminator="\n"
    )
    path.write_text(text, encoding="utf-8", newline="\n")


def _write_json(path: Path, content: dict[str, Any]) -> None:
    path.write_text(json.dumps(content, indent=2) + "\n", encoding="utf-8", newline="\n")


STUDY_FILE = """\
title = "{title}"
output = "{output}"

[data]
runs = "runs.tsv"
mask = "mask.nii.gz"
regions = "networks_dseg.nii.gz"

[cleaning]
confounds = ["trans_*", "rot_*", "csf"]
drift = 1
band = [0.008, 0.1]             # Hz
censor = {{ column = "framewise_displacement", above = 0.5, before = 0, after = 1 }}

{seeds}
[placements]
within = {within:g}                      # mm
draw = "ball"
count = {count}
random_state = 20
inside = "grey.nii.gz"

[group]
table = "participants.tsv"
{group}

[threshold]
{threshold}

[consensus]
safe = 0.95
"""

SEED_SECTION = """\
[[seed]]
name = "{name}"
at = [{at}]             # mm
space = "mni"
radius = {radius:g}
"""

STEADIER_SECTION = """
[steadier]
search = 8                      # mm
step = 4                        # mm
keep_similarity = 0.8
"""

CLAIMS_SECTION = """
[claims]
table = "claims.tsv"
smallest_effect = 0.05          # Fisher z
"""


def _write_study_files(folder: Path, settings: SynthSettings) -> Path:
    reported = {"posterior": seed_at(settings.border_distance)}
    means = {"group": 'model = "~ 1"', "threshold": 'rule = "fdr"\nlevel = 0.05'}
    arms = {
        "group": 'model = "~ arm + age"\neffect = "arm[rested] - arm[restricted]"',
        # The arms of the demonstration are too small for a corrected threshold.
        "threshold": 'rule = "p"\nlevel = 0.01',
    }
    files = {
        "study.toml": _study_text("Posterior seed, invented sleep study", "audit", reported, means)
        + CLAIMS_SECTION
        + STEADIER_SECTION,
        "study_arms.toml": _study_text(
            "Posterior seed, rested against restricted (invented)", "audit_arms", reported, arms
        ),
        "study_seeds.toml": _study_text(
            "Three seeds, invented sleep study", "audit_seeds", OTHER_SEEDS, means, within=6,
            count=40,
        ),
    }  # fmt: skip
    for name, text in files.items():
        (folder / name).write_text(text, encoding="utf-8", newline="\n")
    return folder / "study.toml"


def _study_text(
    title: str,
    output: str,
    seeds: dict[str, tuple[float, float, float]],
    sections: dict[str, str],
    *,
    within: float = 8,
    count: int = 100,
) -> str:
    """A study file of these seeds."""
    written = [
        SEED_SECTION.format(
            name=name, at=", ".join(f"{value:g}" for value in at), radius=SEED_RADIUS
        )
        for name, at in seeds.items()
    ]
    return STUDY_FILE.format(
        title=title,
        output=output,
        seeds="\n".join(written),
        within=within,
        count=count,
        **sections,
    )
