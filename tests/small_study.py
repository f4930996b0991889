"""A small synthetic study on disk, written with nibabel and numpy alone, and the same in memory."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
from numpy.typing import NDArray

from tests.reference_maps import Run, polynomial_columns
from tests.small_brain import (
    MOTION,
    REGIONS,
    SEED_AT,
    Array,
    base_affine,
    bold_data,
    brain_mask,
    label_volume,
    motion_series,
    positions,
)

REPETITION_TIME = 2.0  # s
RADIUS, WITHIN, COUNT = 5.0, 5.0, 12  # mm, mm, drawn placements
PATTERNS = ("trans_*", "rot_*")
DRIFT = 1
RunName = tuple[str, str]  # participant, run
SCALING = (0.043, 900.0)  # slope and intercept of the images kept as int16


@dataclass(frozen=True)
class SmallStudy:
    """Where the files are, and what a program that reads them rightly has in memory.

    `runs` maps each participant to its runs as `(data, affine, nuisance)`, values as nibabel reads
    them back; `nuisance` (T, k) holds the matched confounds and the drift, no intercept. `mask`,
    `labels` and `affine` are in the orientation of the files. `placements` is a seeded example
    cloud, row 0 the reported one, x, y, z, radius in mm; the program draws its own.
    """

    folder: Path
    bold_files: dict[RunName, Path]
    confound_files: dict[RunName, Path]
    runs: dict[str, list[Run]]
    mask: NDArray[np.bool_]
    labels: NDArray[np.int_]
    affine: Array
    arms: tuple[str, ...]
    ages: tuple[int, ...]
    design: Array
    contrast: Array
    placements: list[tuple[float, float, float, float]]
    rule: str
    level: float

    @property
    def study_file(self) -> Path:
        return self.folder / "study.toml"

    @property
    def mask_file(self) -> Path:
        return self.folder / "mask.nii.gz"

    @property
    def regions_file(self) -> Path:
        return self.folder / "networks_dseg.nii.gz"

    @property
    def participants_file(self) -> Path:
        return self.folder / "participants.tsv"

    @property
    def reference_arguments(self) -> dict[str, Any]:
        """The keyword arguments of `tests.reference.reference_audit`."""
        return {
            "participants": list(self.runs.values()),
            "mask": self.mask,
            "affine": self.affine,
            "placements": self.placements,
            "labels": self.labels,
            "region_indices": list(REGIONS),
            "design": self.design,
            "contrast": self.contrast,
            "rule": self.rule,
            "level": self.level,
        }


def reorient(
    data: NDArray[Any], affine: Array, flip: Sequence[bool], permute: Sequence[int]
) -> tuple[NDArray[Any], Array]:
    """Store the same world data with its axes permuted, then some of the new axes reversed."""
    data = np.transpose(data, [*permute, *range(3, data.ndim)])
    affine = affine[:, [*permute, 3]].copy()
    for axis in range(3):
        if flip[axis]:
            data = np.flip(data, axis)
            affine[:3, 3] += affine[:3, axis] * (data.shape[axis] - 1)
            affine[:3, axis] *= -1
    return np.ascontiguousarray(data), affine


def write_table(path: Path, columns: Mapping[str, Sequence[object]]) -> None:
    """Write a TSV of equally long columns; None becomes n/a."""
    rows = [list(columns), *zip(*columns.values(), strict=True)]
    text = ["\t".join("n/a" if cell is None else str(cell) for cell in row) for row in rows]
    path.write_text("\n".join(text) + "\n", encoding="utf-8")


def write_confounds(path: Path, motion: Array) -> Array:
    """Write the confound table of a run; give the columns (T, 7) that the patterns match.

    The derivative and the framewise displacement (rotations on a 50 mm sphere) have no first value;
    a missing first derivative counts as 0.
    """
    steps = np.abs(np.diff(motion, axis=0)) * ([1.0] * 3 + [50.0] * 3)
    derivative = np.round(np.diff(motion[:, 0]), 6)
    columns: dict[str, Sequence[object]] = {
        "framewise_displacement": [None, *np.round(steps.sum(axis=1), 6)],
        "trans_x_derivative1": [None, *derivative],
        **{name: list(motion[:, i]) for i, name in enumerate(MOTION)},
    }
    write_table(path, columns)
    return np.column_stack([motion, np.concatenate([[0.0], derivative])])


def write_image(
    path: Path, data: NDArray[Any], affine: Array, *, codes: tuple[int, int], scaled: bool = False
) -> None:
    """Write a NIfTI-1 image with both forms, units and TR; `scaled` stores int16 with a slope."""
    if scaled:
        data = np.round((data - SCALING[1]) / SCALING[0]).astype(np.int16)
    order = ">" if data.dtype.byteorder == ">" else "<"
    image = nib.Nifti1Image(data, affine, nib.Nifti1Header(endianness=order), dtype=data.dtype)
    if scaled:
        image.header.set_slope_inter(*SCALING)
    image.set_sform(affine, codes[0])
    image.set_qform(affine, codes[1])
    image.header.set_xyzt_units("mm", "sec")
    if data.ndim == 4:
        image.header["pixdim"][4] = REPETITION_TIME
    nib.save(image, path)


def write_run(
    folder: Path,
    stem: str,
    rng: np.random.Generator,
    number: int,
    *,
    flip: Sequence[bool],
    permute: Sequence[int],
    codes: tuple[int, int],
) -> tuple[Path, Path, Run]:
    """Write image and confounds of one run of participant `number`; give both paths and the run.

    Storage goes round: int16 .nii.gz, float32 .nii.gz, int16 .nii, big-endian float32 .nii.gz.
    Participant 1 has three constant voxels and one with a NaN.
    """
    n_volumes = 40 + int(rng.integers(0, 21))
    motion = motion_series(rng, n_volumes)
    data = bold_data(rng, motion, rested=number % 2 == 0)
    if number == 1:
        inside = np.argwhere(brain_mask())
        near_seed = np.argmin(np.sum((positions()[tuple(inside.T)] - SEED_AT) ** 2, axis=1))
        for row in (near_seed, 40, 200):
            data[tuple(inside[row])] = 512.0
        data[(*inside[300], 5)] = np.nan
    kind = number % 4
    scaled = kind in (0, 2)
    bold = folder / f"{stem}_bold.nii{'' if kind == 2 else '.gz'}"
    confounds = folder / f"{stem}_timeseries.tsv"
    stored, affine = reorient(data, base_affine(), flip, permute)
    stored = stored if scaled else stored.astype(">f4" if kind == 3 else "<f4")
    write_image(bold, stored, affine, codes=codes, scaled=scaled)
    matched = write_confounds(confounds, motion)
    image = nib.Nifti1Image.from_filename(bold)
    nuisance = np.column_stack([matched, polynomial_columns(n_volumes, DRIFT)])
    data = np.asarray(image.get_fdata(), dtype=np.float64)
    return bold, confounds, Run(data, image.affine, nuisance)


def study_text(model: str, effect: str, rule: str, level: float) -> str:
    """Give the text of the study file."""
    contrast = f'effect = "{effect}"\n' if effect else ""
    return f"""title = "Small synthetic study"
output = "audit"

[data]
runs = "runs.tsv"
mask = "mask.nii.gz"
regions = "networks_dseg.nii.gz"

[cleaning]
confounds = ["{PATTERNS[0]}", "{PATTERNS[1]}"]
drift = {DRIFT}

[[seed]]
name = "posterior"
at = [{SEED_AT[0]}, {SEED_AT[1]}, {SEED_AT[2]}]
space = "native"
radius = {RADIUS}

[placements]
within = {WITHIN}
count = {COUNT}
random_state = 20

[group]
table = "participants.tsv"
model = "{model}"
{contrast}folds = 4

[threshold]
rule = "{rule}"
level = {level}

[consensus]
safe = 0.95
"""


def example_cloud(random_state: int) -> list[tuple[float, float, float, float]]:
    """Give the reported placement and COUNT others, uniform in the ball of WITHIN mm."""
    rng = np.random.default_rng(random_state)
    places = [(*SEED_AT, RADIUS)]
    while len(places) <= COUNT:
        shift = rng.uniform(-WITHIN, WITHIN, 3)
        if np.sum(shift**2) <= WITHIN**2:
            x, y, z = np.round(np.array(SEED_AT) + shift, 3).tolist()
            places.append((x, y, z, RADIUS))
    return places


def group_design(model: str, arms: Sequence[str], ages: Sequence[int]) -> tuple[Array, Array, str]:
    """Give matrix, contrast and the study file's wording of it, for `~ 1` or `~ arm + age`."""
    ones = np.ones(len(arms))
    if model == "~ 1":
        return ones[:, None], np.array([1.0]), ""
    if model != "~ arm + age":
        raise ValueError(f"model: {model!r}; allowed: '~ 1', '~ arm + age'")
    rested = np.array([float(arm == "rested") for arm in arms])
    matrix = np.column_stack([ones, rested, np.array(ages, dtype=float)])
    return matrix, np.array([0.0, 1.0, 0.0]), "arm[rested] - arm[restricted]"


def write_mask_and_regions(
    folder: Path, *, flip: Sequence[bool], permute: Sequence[int], codes: tuple[int, int]
) -> tuple[NDArray[np.bool_], NDArray[np.int_]]:
    """Write mask, label image and label table; give mask and labels in the files' orientation."""
    mask, affine = reorient(brain_mask(), base_affine(), flip, permute)
    labels, _ = reorient(label_volume(brain_mask()), base_affine(), flip, permute)
    write_image(folder / "mask.nii.gz", mask.astype(np.uint8), affine, codes=codes)
    write_image(folder / "networks_dseg.nii.gz", labels, affine, codes=codes)
    write_table(
        folder / "networks_dseg.tsv", {"index": list(REGIONS), "name": list(REGIONS.values())}
    )
    return mask, labels.astype(np.int64)


def run_table(
    bolds: Mapping[RunName, Path], confounds: Mapping[RunName, Path]
) -> dict[str, list[str]]:
    """Give the columns of runs.tsv; paths are relative to the folder."""
    return {
        "participant_id": [name for name, _ in bolds],
        "run": [run for _, run in bolds],
        "bold": [path.name for path in bolds.values()],
        "confounds": [path.name for path in confounds.values()],
    }


def write_small_study(
    folder: Path | str,
    *,
    participants: int = 8,
    seed: int = 20,
    two_runs: Sequence[str] = ("sub-03",),
    flip: Sequence[bool] = (False, False, False),
    permute: Sequence[int] = (0, 1, 2),
    model: str = "~ 1",
    rule: str = "fdr",
    level: float = 0.05,
    codes: tuple[int, int] = (2, 4),
) -> SmallStudy:
    """Write the study into `folder` (made when missing) and give it with its in-memory twin.

    Parameters
    ----------
    participants
        How many; the arms alternate, rested first.
    seed
        Of the random generator: the same seed gives the same world data for every storage order.
    two_runs
        Participants with a second run.
    flip, permute
        How images, mask and labels are stored: axes permuted first, then reversed. Only the order
        in the files changes, not the world data.
    model
        "~ 1" or "~ arm + age" (effect: rested minus restricted).
    rule, level
        Of the threshold section.
    codes
        sform and qform code of every image.
    """
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    rng = np.random.default_rng(seed)
    names = [f"sub-{number + 1:02d}" for number in range(participants)]
    arms = tuple("rested" if number % 2 == 0 else "restricted" for number in range(participants))
    ages = tuple(int(age) for age in rng.integers(20, 61, participants))
    design, contrast, effect = group_design(model, arms, ages)
    bolds: dict[RunName, Path] = {}
    confounds: dict[RunName, Path] = {}
    runs: dict[str, list[Run]] = {name: [] for name in names}
    for number, name in enumerate(names):
        for run in ("1", "2") if name in two_runs else ("1",):
            stem = f"{name}_task-rest_run-{run}"
            bolds[name, run], confounds[name, run], arrays = write_run(
                folder, stem, rng, number, flip=flip, permute=permute, codes=codes
            )
            runs[name].append(arrays)
    mask, labels = write_mask_and_regions(folder, flip=flip, permute=permute, codes=codes)
    write_table(folder / "participants.tsv", {"participant_id": names, "arm": arms, "age": ages})
    write_table(folder / "runs.tsv", run_table(bolds, confounds))
    text = study_text(model, effect, rule, level)
    (folder / "study.toml").write_text(text, encoding="utf-8")
    return SmallStudy(
        folder=folder,
        bold_files=bolds,
        confound_files=confounds,
        runs=runs,
        mask=mask,
        labels=labels,
        affine=nib.Nifti1Image.from_filename(folder / "mask.nii.gz").affine,
        arms=arms,
        ages=ages,
        design=design,
        contrast=contrast,
        placements=example_cloud(seed),
        rule=rule,
        level=level,
    )
