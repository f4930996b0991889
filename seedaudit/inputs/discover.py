"""Find the runs of a study: a table, a file pattern, or a BIDS derivative folder."""

from __future__ import annotations

import glob
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from nilearn.interfaces.bids import get_bids_files, parse_bids_filename

from seedaudit.errors import DataError, Problem, StudyError
from seedaudit.inputs.tables import nearest, read_table

_PARTICIPANT = re.compile(r"(?<![0-9A-Za-z])sub-[0-9A-Za-z+]+")
_RUN = re.compile(r"(?<![0-9A-Za-z])(?:ses|run)-[0-9A-Za-z+]+")
_IMAGE = (".nii", ".nii.gz")
# Entities that a confounds table does not share with its run: it belongs to no space.
_IMAGE_ENTITIES = re.compile(r"_(space|res|den|desc)-[0-9A-Za-z+]+")


@dataclass(frozen=True)
class Run:
    """One run of one participant and the files that belong to it.

    Parameters
    ----------
    participant : str
    run : str
        Label that tells the runs of a participant apart, empty when there is one.
    bold : Path
    confounds, mask : Path or None
    """

    participant: str
    run: str
    bold: Path
    confounds: Path | None = None
    mask: Path | None = None


def find_runs(
    runs: str | None,
    base: Path,
    bids: str | None = None,
    select: Mapping[str, str] | None = None,
) -> tuple[Run, ...]:
    """Find all runs and check that their files exist and none is meant twice.

    Parameters
    ----------
    runs : str, optional
        Table (.tsv) with the columns participant_id, bold and optionally run, confounds, mask
        (paths relative to the table), or a file pattern such as ``sub-*_bold.nii.gz``.
    base : Path
        Folder that relative paths and patterns start from.
    bids : str, optional
        BIDS derivative folder, when `runs` is not given.
    select : mapping, optional
        BIDS entities that the runs must have, such as ``{"task": "rest"}``.

    Returns
    -------
    tuple of Run
        In table order, else sorted by path.

    Raises
    ------
    StudyError
        When nothing is found.
    DataError
        With every problem of the table and every missing or repeated file.
    """
    if runs is not None and runs.endswith(".tsv"):
        found, problems = _from_table(base / runs)
    elif runs is not None:
        found, problems = _from_paths(_matching(runs, base), base), []
    elif bids is not None:
        folder = base / bids
        found, problems = _from_paths(_bids_files(folder, select or {}), folder), []
    else:
        raise StudyError(Problem("data", "no runs are given", "runs or bids"))
    problems += _missing_files(found) + _repeated(found)
    if problems:
        raise DataError(*problems)
    return tuple(found)


def _from_table(path: Path) -> tuple[list[Run], list[Problem]]:
    table = read_table(path)
    where = str(path)
    absent = [name for name in ("participant_id", "bold") if name not in table.columns]
    if absent:
        raise DataError(
            *(Problem(where, f"no column {n!r}", remedy=nearest(n, table.columns)) for n in absent)
        )
    if table.empty:
        raise DataError(Problem(where, "no rows", "one row per run"))
    found, problems = [], []
    for number, row in enumerate(table.to_dict("records"), start=1):
        gaps = [name for name in ("participant_id", "bold") if row[name] is None]
        problems += [Problem(where, f"row {number}: no {name}") for name in gaps]
        if gaps:
            continue
        files = {name: path.parent / row[name] for name in ("confounds", "mask") if row.get(name)}
        bold = path.parent / row["bold"]
        found.append(Run(row["participant_id"], row.get("run") or "", bold, **files))
    return found, problems


def _matching(pattern: str, base: Path) -> list[Path]:
    # Joining leaves an absolute pattern as it is; the base itself is no pattern.
    paths = glob.glob(str(Path(glob.escape(str(base)), pattern)), recursive=True)
    images = sorted(Path(path) for path in paths if path.endswith(_IMAGE))
    if not images:
        found = f"{pattern!r} matches no .nii or .nii.gz file"
        found += f" ({len(paths)} other files)" if paths else ""
        raise StudyError(Problem("data.runs", found, "a table (.tsv) or a file pattern"))
    return images


def _bids_files(folder: Path, select: Mapping[str, str]) -> list[Path]:
    def search(filters: Sequence[tuple[str, str]]) -> list[Path]:
        files = get_bids_files(
            glob.escape(str(folder)),
            file_tag="bold",
            file_type="nii*",
            modality_folder="func",
            filters=list(filters),
        )
        return sorted(Path(file) for file in files if str(file).endswith(_IMAGE))

    if not folder.is_dir():
        raise StudyError(Problem("data.bids", f"{folder} is no folder"))
    images = search([(name, str(value)) for name, value in select.items()])
    if images:
        return images
    everything = [parse_bids_filename(file) for file in search([])]
    if not everything:
        found = f"no sub-*/[ses-*/]func/*_bold.nii[.gz] below {folder}"
        raise StudyError(Problem("data.bids", found, "a BIDS derivative folder"))
    seen = {name: sorted({e.get(name) or "n/a" for e in map(_entities, everything)}) for name in select}
    raise StudyError(
        Problem(
            "data.select",
            ", ".join(f"{n}-{v}" for n, v in select.items()) + f" matches none of {len(everything)}",
            "; ".join(f"{name}: {', '.join(values)}" for name, values in seen.items()),
        )
    )
