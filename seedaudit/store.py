"""The result folder: written whole or not at all, and read back."""

from __future__ import annotations

import json
import os
import re
import shutil
import tempfile
import zlib
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
import pandas as pd
from nibabel.filebasedimages import ImageFileError
from nibabel.spatialimages import HeaderDataError

from seedaudit._version import __version__
from seedaudit.consensus.lowrank import LowRank
from seedaudit.dictionary import (
    ALL_COLUMNS,
    ALL_MAPS,
    COLUMNS,
    MAPS,
    MAPS_WHERE_ASKED,
    PLACEMENT_COMPONENTS,
)
from seedaudit.errors import DataError, Problem, StudyError
from seedaudit.guards import open_map, own_file, own_path, read_mapping
from seedaudit.results import SCHEMA, Audit, SeedAudit, read_only
from seedaudit.space.grid import Grid, VoxelSet
from seedaudit.study import SAMPLE_NAME
from seedaudit.tsv import read_table, write_table

UNREADABLE = (
    OSError,
    ValueError,
    LookupError,
    TypeError,
    AttributeError,
    ArithmeticError,
    EOFError,
    zlib.error,
    ImageFileError,
    HeaderDataError,
)
"""What the readers of JSON, tables and images raise on damage; a result may come from anyone."""

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
    # a link at the output is the user's own, and leads to where the result goes
    asked, folder = Path(folder), Path(os.path.realpath(folder))
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
        # a template that is missing from the installation is no matter of the disk
        if isinstance(error, LookupError):
            raise
        raise DataError(
            Problem(
                f"output {asked.name}",
                f"cannot be written ({error.strerror or error})",
                "a writable folder with enough space",
                "choose another folder with --out",
            )
        ) from error
    return asked


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
    write_tables(audit, folder)
    for seed in audit.seeds:
        own = seed_folder(audit, folder, seed.name)
        (own / "maps").mkdir()
        for name, image in seed.maps.items():
            nib.save(image, own / "maps" / f"{name}.nii.gz")
            text, units = ALL_MAPS[name]
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


def write_tables(audit: Audit, folder: Path) -> None:
    """Write every table of a result with its data dictionary, where a result folder has them."""
    for seed in audit.seeds:
        own = seed_folder(audit, folder, seed.name) / "tables"
        own.mkdir(parents=True)
        for name, table in seed.tables.items():
            _write_described(own, name, table)
    if audit.between is not None:
        (folder / "tables").mkdir(exist_ok=True)
        _write_described(folder / "tables", "seeds", audit.between)


def _write_described(folder: Path, name: str, table: pd.DataFrame) -> None:
    """A table with its data dictionary beside it."""
    write_table(folder / f"{name}.tsv", table)
    described = {
        key: {"Description": text} | ({"Units": units} if units else {})
        for key, (text, units) in ALL_COLUMNS[name].items()
        if key in table.columns
    }
    _write_json(folder / f"{name}.json", described)


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
    if not (folder / "maps" / f"{_PLACEMENT_MAPS}.json").exists():
        return None
    told = read_mapping(own_path(folder, "maps"), f"{_PLACEMENT_MAPS}.json")
    stored = open_map(folder, "maps", f"{_PLACEMENT_MAPS}.nii.gz", shape=mask.shape)
    inside = np.asarray(stored.dataobj)[tuple(_voxels_of(mask).ijk.T)].T
    codes = np.ascontiguousarray(inside.astype(np.int16) - 128, dtype=np.int8)
    components = len(codes) - 1
    steps, errors = (
        np.array(told[key], dtype=np.float64).reshape(components + 1)
        for key in ("Steps", "LargestErrors")
    )
    weights = np.array(told["Weights"], dtype=np.float64)
    return LowRank(codes, steps, weights.reshape(len(told["Placements"]), components), errors)


def _voxels_of(mask: nib.Nifti1Image) -> VoxelSet:
    x, y, z = mask.shape
    return VoxelSet.from_mask(Grid((x, y, z), mask.affine), np.asarray(mask.dataobj) > 0)


def _write_json(path: Path, content: Mapping[str, Any]) -> None:
    text = json.dumps(content, indent=2, ensure_ascii=False, allow_nan=False)
    # half letters, from file names that are no text, keep their escape, which JSON knows too
    path.write_text(text + "\n", encoding="utf-8", errors="backslashreplace")


def load_audit(folder: str | Path) -> Audit:
    """Read a result folder back; one from others can do no harm.

    Raises
    ------
    DataError
        If the folder is no result of this program, of another schema, incomplete or damaged, or
        anything in it leads elsewhere or asks for too much memory.
    """
    folder = Path(folder)
    try:
        summary, provenance = (
            read_mapping(folder, f"{name}.json") for name in ("summary", "provenance")
        )
        if summary["schema"] != SCHEMA:
            raise DataError(
                Problem(
                    f"{folder.name}/summary.json",
                    f"schema {summary['schema']}",
                    f"schema {SCHEMA}",
                    "run the audit again with this version",
                )
            )
        names = [seed["name"] for seed in summary["seeds"]]
        _check_names(names)
        seeds = tuple(
            _load_seed(own_path(folder, name) if len(names) > 1 else folder, told)
            for name, told in zip(names, summary["seeds"], strict=True)
        )
        title = str(summary["title"])
        between = _load_table(folder, "seeds") if "interchangeable" in summary else None
    except UNREADABLE as error:
        raise DataError(
            Problem(
                f"result folder {folder.name}",
                f"cannot be read ({type(error).__name__}: {error})",
                "a complete result folder of this program",
                "run the audit again",
            )
        ) from error
    return Audit(title, seeds, provenance, between)


def _check_names(names: Sequence[Any]) -> None:
    """Names of seeds become folders: none may be a path."""
    for name in names:
        if not (isinstance(name, str) and re.fullmatch(SAMPLE_NAME, name)):
            found = f"a seed is named {name!r}"
            raise DataError(Problem("summary.json", found, "letters, digits, - and _"))
    if not names or len(set(names)) < len(names):
        raise DataError(Problem("summary.json", f"names the seeds {names}", "each once"))


def _load_seed(folder: Path, summary: dict[str, Any]) -> SeedAudit:
    asked = [name for name in ("steadier", "radii") if summary.get(name)]
    tables = {name: _load_table(folder, name) for name in (*COLUMNS, *asked)}
    maps: dict[str, nib.Nifti1Image] = {}
    shape = None
    for name in (*MAPS, *(MAPS_WHERE_ASKED if "steadier" in asked else ())):
        stored = open_map(folder, "maps", f"{name}.nii.gz", shape=shape)
        shape = stored.shape
        data = np.array(np.asarray(stored.dataobj), dtype=stored.get_data_dtype())
        data.setflags(write=False)
        maps[name] = nib.Nifti1Image(data, stored.affine, stored.header)
    kept = _read_placement_maps(folder, maps["analysis_mask"])
    return SeedAudit(summary["name"], read_only(summary), read_only(tables), read_only(maps), kept)


def _load_table(folder: Path, name: str) -> pd.DataFrame:
    table = read_table(own_file(folder, "tables", f"{name}.tsv"))
    first = next(iter(ALL_COLUMNS[name]))
    if first not in table.columns:
        allowed = ", ".join(ALL_COLUMNS[name])
        raise DataError(Problem(f"{name}.tsv", f"no column {first!r}", allowed))
    return table
