"""The result folder: written whole or not at all, and read back."""

from __future__ import annotations

import json
import os
import shutil
import tempfile
from collections.abc import Callable, Mapping
from io import StringIO
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
import pandas as pd

from seedaudit._version import __version__
from seedaudit.consensus.lowrank import LowRank
from seedaudit.dictionary import COLUMNS, MAPS, PLACEMENT_COMPONENTS
from seedaudit.errors import DataError, Problem, StudyError
from seedaudit.results import SCHEMA, SIGNIFICANT_DIGITS, Audit, SeedAudit, read_only
from seedaudit.space.grid import Grid, VoxelSet

WORDS = (
    "seed",
    "kind",
    "flags",
    "threshold",
    "region",
    "state",
    "rule",
    "participant_id",
    "reason",
    "measure",
    "direction",
    "claim",
    "target",
    "verdict",
    "note",
)
"""Columns that hold text even where every cell looks like a number or is empty."""

NUMBERS = (("tolerance", "target"),)
"""Tables in which a column of such a name holds numbers after all."""

Extra = Callable[[Audit, Path], None]

_PLACEMENT_MAPS = "placement_components"


def check_free(folder: Path, *, replace: bool) -> None:
    """Refuse a folder that holds something, before anything is computed.

    Raises
    ------
    StudyError
        If the folder exists and is not to be replaced, or is no earlier result.
    """
    if not folder.exists() or (folder.is_dir() and not any(folder.iterdir())):
        return
    if not (folder / "summary.json").is_file():
        raise StudyError(
            Problem(
                f"output {folder.name}",
                "exists and is not a result folder of this program",
                "a new or empty folder",
                "choose another with --out",
            )
        )
    if not replace:
        raise StudyError(
            Problem(
                f"output {folder.name}",
                "holds an earlier result",
                "results are never overwritten silently",
                "choose another folder with --out, or say --replace",
            )
        )


def save(
    audit: Audit, folder: str | Path, *, replace: bool = False, extra: Extra | None = None
) -> Path:
    """Write a result folder.

    Everything is written to a hidden folder beside the target, which is renamed at the end.

    Parameters
    ----------
    audit : Audit
    folder : path
    replace : bool
        Put the new result in the place of an earlier one.
    extra : callable, optional
        Writes more into the folder, given the audit and the folder: the report.

    Raises
    ------
    StudyError
        If the folder is taken.
    DataError
        If the disk refuses.
    """
    folder = Path(folder)
    check_free(folder, replace=replace)
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        partial = Path(tempfile.mkdtemp(prefix=f".{folder.name}-", dir=folder.parent))
        try:
            _write(audit, partial)
            if extra is not None:
                extra(audit, partial)
            _follow_umask(partial)
            _put(partial, folder)
        finally:
            shutil.rmtree(partial, ignore_errors=True)
    except OSError as error:
        raise DataError(
            Problem(
                f"output {folder.name}",
                f"cannot be written ({error.strerror or error})",
                "a writable folder with enough space",
                "choose another folder with --out",
            )
        ) from error
    return folder


def _put(partial: Path, folder: Path) -> None:
    """Rename into place; an earlier result steps aside first and goes last."""
    if folder.exists():
        old = Path(tempfile.mkdtemp(prefix=f".{folder.name}-old-", dir=folder.parent))
        os.replace(folder, old)
        try:
            os.replace(partial, folder)
        except OSError:
            os.replace(old, folder)
            raise
        shutil.rmtree(old, ignore_errors=True)
    else:
        os.replace(partial, folder)


def _follow_umask(folder: Path) -> None:
    """A temporary folder is private; a result has the permissions of any new folder."""
    mask = os.umask(0)
    os.umask(mask)
    folder.chmod(0o777 & ~mask)


def seed_folder(audit: Audit, folder: Path, name: str) -> Path:
    """Where a seed's tables, maps and texts are: the folder itself when there is only one seed."""
    return folder if len(audit.seeds) == 1 else folder / name


def _write(audit: Audit, folder: Path) -> None:
    _write_json(folder / "summary.json", audit.summary)
    _write_json(folder / "provenance.json", dict(audit.provenance))
    _write_json(
        folder / "dataset_description.json",
        {
            "Name": audit.title,
            "BIDSVersion": "1.11.2",
            "DatasetType": "derivative",
            "GeneratedBy": [{"Name": "seedaudit", "Version": __version__}],
        },
    )
    for seed in audit.seeds:
        own = seed_folder(audit, folder, seed.name)
        (own / "tables").mkdir(parents=True)
        (own / "maps").mkdir()
        for name, table in seed.tables.items():
            write_table(own / "tables" / f"{name}.tsv", table)
            described = {
                key: {"Description": text} | ({"Units": units} if units else {})
                for key, (text, units) in COLUMNS[name].items()
                if key in table.columns
            }
            _write_json(own / "tables" / f"{name}.json", described)
        for name, image in seed.maps.items():
            nib.save(image, own / "maps" / f"{name}.nii.gz")
            text, units = MAPS[name]
            _write_json(
                own / "maps" / f"{name}.json",
                {
                    "Description": text,
                    "Units": units,
                    "Seed": seed.name,
                    "At": seed.summary["at_mm"],
                },
            )
        if seed.placement_maps is not None:
            _write_placement_maps(seed, own / "maps")


def _write_placement_maps(seed: SeedAudit, folder: Path) -> None:
    kept, mask = seed.placement_maps, seed.maps["analysis_mask"]
    assert kept is not None
    voxels = _voxels_of(mask)
    codes = np.zeros((*mask.shape, len(kept.codes)), np.uint8)
    codes[tuple(voxels.ijk.T)] = (kept.codes.T.astype(np.int16) + 128).astype(np.uint8)
    header = mask.header.copy()
    header["descrip"] = b"mean and components of the effect maps of all placements"
    nib.save(nib.Nifti1Image(codes, mask.affine, header), folder / f"{_PLACEMENT_MAPS}.nii.gz")
    described = {
        "Description": PLACEMENT_COMPONENTS,
        "Units": "Fisher z",
        "Placements": seed.tables["similarity"]["placement"].tolist(),
        "Steps": kept.steps.tolist(),
        "LargestErrors": kept.errors.tolist(),
        "Weights": kept.weights.tolist(),
    }
    _write_json(folder / f"{_PLACEMENT_MAPS}.json", described)


def _read_placement_maps(folder: Path, mask: nib.Nifti1Image) -> LowRank | None:
    if not (folder / f"{_PLACEMENT_MAPS}.json").exists():
        return None
    told = json.loads((folder / f"{_PLACEMENT_MAPS}.json").read_text(encoding="utf-8"))
    stored = nib.Nifti1Image.from_filename(folder / f"{_PLACEMENT_MAPS}.nii.gz")
    inside = np.asarray(stored.dataobj)[tuple(_voxels_of(mask).ijk.T)].T
    codes = np.ascontiguousarray(inside.astype(np.int16) - 128, dtype=np.int8)
    steps, errors = np.array(told["Steps"]), np.array(told["LargestErrors"])
    weights = np.array(told["Weights"]).reshape(-1, len(codes) - 1)
    return LowRank(codes, steps, weights, errors)


def _voxels_of(mask: nib.Nifti1Image) -> VoxelSet:
    return VoxelSet.from_mask(Grid(mask.shape, mask.affine), np.asarray(mask.dataobj) > 0)


def write_table(path: Path | StringIO, table: pd.DataFrame) -> None:
    """Write a BIDS table: tabs, `n/a` for missing, true and false in small letters."""
    shown = table.copy()
    for key in shown.columns:
        if shown[key].dtype == bool:
            shown[key] = np.where(shown[key], "true", "false")
        elif key in WORDS:
            shown[key] = [" ".join(str(cell).split()) for cell in shown[key]]
            shown[key] = shown[key].replace("", "n/a")
    shown.to_csv(
        path,
        sep="\t",
        index=False,
        na_rep="n/a",
        float_format=f"%.{SIGNIFICANT_DIGITS}g",
        lineterminator="\n",
    )


def read_table(path: Path) -> pd.DataFrame:
    """Read a table as `write_table` wrote it."""
    words = [key for key in WORDS if (path.stem, key) not in NUMBERS]
    table = pd.read_csv(
        path,
        sep="\t",
        na_values=["n/a"],
        keep_default_na=False,
        dtype={key: str for key in words},
        float_precision="round_trip",
    )
    for key in table.columns:
        if key in words:
            table[key] = table[key].fillna("n/a" if key == "state" else "")
        elif key == "used":
            table[key] = table[key].astype(bool)
    return table


def _write_json(path: Path, content: Mapping[str, Any]) -> None:
    text = json.dumps(content, indent=2, ensure_ascii=False, allow_nan=False)
    path.write_text(text + "\n", encoding="utf-8")


def load_audit(folder: str | Path) -> Audit:
    """Read a result folder back.

    Raises
    ------
    DataError
        If the folder is no result of this program, of another schema, or incomplete.
    """
    folder = Path(folder)
    try:
        summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
        provenance = json.loads((folder / "provenance.json").read_text(encoding="utf-8"))
        if summary["schema"] != SCHEMA:
            raise DataError(
                Problem(
                    f"{folder.name}/summary.json",
                    f"schema {summary['schema']}",
                    f"schema {SCHEMA}",
                    "run the audit again with this version",
                )
            )
        several = len(summary["seeds"]) > 1
        seeds = tuple(
            _load_seed(folder / s["name"] if several else folder, s) for s in summary["seeds"]
        )
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise DataError(
            Problem(
                f"result folder {folder.name}",
                f"cannot be read ({type(error).__name__}: {error})",
                "a complete result folder of this program",
                "run the audit again",
            )
        ) from error
    return Audit(summary["title"], seeds, provenance)


def _load_seed(folder: Path, summary: dict[str, Any]) -> SeedAudit:
    tables = {name: read_table(folder / "tables" / f"{name}.tsv") for name in COLUMNS}
    maps = {}
    for name in MAPS:
        stored = nib.Nifti1Image.from_filename(folder / "maps" / f"{name}.nii.gz")
        data = np.array(stored.dataobj, dtype=stored.get_data_dtype())
        data.setflags(write=False)
        maps[name] = nib.Nifti1Image(data, stored.affine, stored.header)
    kept = _read_placement_maps(folder / "maps", maps["analysis_mask"])
    return SeedAudit(summary["name"], read_only(summary), read_only(tables), read_only(maps), kept)
