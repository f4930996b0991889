"""Invented runs of a stated size for the benchmarks: noise with a few shared signals."""

from __future__ import annotations

import gzip
import shutil
from dataclasses import dataclass
from pathlib import Path

import nibabel as nib
import numpy as np


@dataclass(frozen=True)
class Size:
    """Voxel edge in mm, volumes of a run, and distinct runs (the others repeat these)."""

    voxel: float
    volumes: int
    distinct: int = 2


FULL = Size(2.0, 300)
SMALL = Size(8.0, 160)
LARGE = Size(1.0, 150)

N_CONFOUNDS = 30


def write_runs(folder: Path, size: Size, participants: int) -> Path:
    """Write mask, regions, runs, confounds and a table of runs; give the table's path."""
    shape = tuple(round(extent / size.voxel) for extent in (198, 234, 190))
    affine = np.diag([size.voxel, size.voxel, size.voxel, 1.0])
    affine[:3, 3] = (-98, -134, -72)
    ijk = np.indices(shape).reshape(3, -1).T
    xyz = ijk * size.voxel + affine[:3, 3]
    inside = (((xyz - (0, -18, 18)) / (68, 85, 62)) ** 2).sum(axis=1) <= 1
    mask = inside.reshape(shape)
    labels = np.where(inside, 1 + (xyz[:, 0] > 0) + 2 * (xyz[:, 1] > -18), 0).reshape(shape)
    for name, values in {"mask": mask, "networks_dseg": labels}.items():
        nib.save(nib.Nifti1Image(values.astype(np.uint8), affine), folder / f"{name}.nii.gz")
    (folder / "networks_dseg.tsv").write_text(
        "index\tname\n" + "".join(f"{i}\tquarter {i}\n" for i in range(1, 5))
    )
    for number in range(size.distinct):
        _write_run(folder / f"run-{number}.nii.gz", mask, affine, size.volumes, number)
    columns = [f"c{i}" for i in range(N_CONFOUNDS)]
    values = np.random.default_rng(0).standard_normal((size.volumes, N_CONFOUNDS))
    np.savetxt(folder / "confounds.tsv", values, "%.6f", "\t", header="\t".join(columns),
               comments="")  # fmt: skip
    lines = ["participant_id\tbold\tconfounds"]
    for number in range(participants):
        name = f"sub-{number:03d}_bold.nii.gz"
        if not (folder / name).exists():
            _write_copy(folder / f"run-{number % size.distinct}.nii.gz", folder / name, number)
        lines.append(f"sub-{number:03d}\t{name}\tconfounds.tsv")
    table = folder / f"runs-{participants}.tsv"
    table.write_text("\n".join(lines) + "\n")
    return table


def _write_copy(source: Path, target: Path, number: int) -> None:
    """The same images under another name, with a few bytes behind them: no file is a mere copy."""
    shutil.copyfile(source, target)
    with open(target, "ab") as file:
        file.write(gzip.compress(f"{number:08d}".encode(), mtime=0))


def _write_run(path: Path, mask: np.ndarray, affine: np.ndarray, volumes: int, seed: int) -> None:
    if path.exists():
        return
    rng = np.random.default_rng(seed)
    n_voxels = int(mask.sum())
    header = nib.Nifti1Header()
    header.set_data_shape((*mask.shape, volumes))
    header.set_data_dtype(np.int16)
    header.set_sform(affine, 4)
    header.set_qform(affine, 4)
    header.set_xyzt_units("mm", "sec")
    header["pixdim"][4] = 2.0
    header["vox_offset"] = 352
    header["magic"] = b"n+1"
    baseline = 800 + 200 * rng.random(n_voxels)
    loads = rng.standard_normal((5, n_voxels))
    with gzip.open(path, "wb", compresslevel=3) as file:
        file.write(header.binaryblock + b"\0" * 4)
        for _ in range(volumes):
            volume = np.zeros(mask.shape, np.int16)
            signal = 3 * rng.standard_normal(5) @ loads
            volume[mask] = baseline + signal + 8 * rng.standard_normal(n_voxels)
            file.write(volume.tobytes(order="F"))
