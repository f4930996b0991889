"""Find the runs of a study: a table, a file pattern, or a BIDS derivative folder."""

from __future__ import annotations

import glob
import os
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from nilearn.interfaces.bids import get_bids_files

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

    @property
    def files(self) -> tuple[Path, ...]:
        """The files that there must be."""
        return tuple(path for path in (self.bold, self.confounds, self.mask) if path is not None)


def find_runs(
    runs: str | Sequence[str] | None,
    base: Path,
    bids: str | None = None,
    select: Mapping[str, str] | None = None,
) -> tuple[Run, ...]:
    """Find all runs and check that their files exist and none is meant twice.

    Parameters
    ----------
    runs : str or sequence of str, optional
        Table (.tsv) with the columns participant_id, bold and optionally run, confounds, mask
        (paths relative to the table), a file pattern such as ``sub-*_bold.nii.gz``, or files.
    base : Path
        Folder that relative paths and patterns start from.
    bids : str, optional
        BIDS derivative folder, when `runs` is not given.
    select : mapping, optional
        BIDS entities that the runs must have, such as ``{"task": "rest"}``.

    Returns
    -------
    tuple of Run
        In the order of the table or the list, else sorted by path.

    Raises
    ------
    StudyError
        When nothing is found.
    DataError
        With every problem of the table and every missing or repeated file.
    """
    found, problems = list_runs(runs, base, bids, select)
    if problems:
        raise DataError(*problems)
    return found


def list_runs(
    runs: str | Sequence[str] | None,
    base: Path,
    bids: str | None = None,
    select: Mapping[str, str] | None = None,
) -> tuple[tuple[Run, ...], list[Problem]]:
    """As `find_runs`, but what is wrong with some runs is given beside all that are listed."""
    if isinstance(runs, str) and runs.endswith(".tsv"):
        found, problems = _from_table(_expanded(base, runs))
    elif isinstance(runs, str):
        found, problems = _from_paths(_matching(runs, base)), []
    elif runs is not None:
        found, problems = _from_paths([_expanded(base, path) for path in runs]), []
    elif bids is not None:
        found, problems = _from_paths(_bids_files(_expanded(base, bids), select or {})), []
    else:
        raise StudyError(Problem("data", "no runs are given", "runs or bids"))
    return tuple(found), problems + _missing_files(found) + _repeated(found)


def _expanded(base: Path, text: str) -> Path:
    """A path as typed, from the base on; ~ is the home of the user, as everywhere in a study."""
    return base / os.path.expanduser(text)


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
        problems += [
            Problem(where, f"row {number}: no {name}", "a value in every row", "fill it")
            for name in gaps
        ]
        if gaps:
            continue
        files = {
            name: _expanded(path.parent, row[name])
            for name in ("confounds", "mask")
            if row.get(name)
        }
        bold = _expanded(path.parent, row["bold"])
        found.append(Run(row["participant_id"], row.get("run") or "", bold, **files))
    return found, problems


def _matching(pattern: str, base: Path) -> list[Path]:
    # Joining leaves an absolute pattern as it is; the base itself is no pattern.
    full = Path(glob.escape(str(base)), os.path.expanduser(pattern))
    paths = glob.glob(str(full), recursive=True)
    images = sorted(Path(path) for path in paths if path.endswith(_IMAGE))
    if not images:
        found = f"{pattern!r} matches no .nii or .nii.gz file"
        found += f" ({len(paths)} other files)" if paths else ""
        remedy = "correct the pattern; it starts from the folder of the study file"
        raise StudyError(Problem("data.runs", found, "a table (.tsv) or a file pattern", remedy))
    return images


def _bids_files(folder: Path, select: Mapping[str, str]) -> list[Path]:
    if not os.path.isdir(folder):  # which a name that is too long does not upset
        raise StudyError(Problem("data.bids", f"{folder} is no folder", "a BIDS derivative folder"))
    paths = get_bids_files(
        glob.escape(str(folder)), file_tag="bold", file_type="nii*", modality_folder="func"
    )
    everything = sorted(Path(path) for path in paths if str(path).endswith(_IMAGE))
    if not everything:
        found = f"no sub-*/func/*_bold.nii.gz (or with ses-*) below {folder}"
        raise StudyError(Problem("data.bids", found, "a BIDS derivative folder"))
    entities = {
        path: dict(part.split("-", 1) for part in path.name.split("_") if "-" in part)
        for path in everything
    }
    images = [
        path
        for path in everything
        if all(entities[path].get(name) == value for name, value in select.items())
    ]
    if not images:
        seen = {name: {own.get(name, "n/a") for own in entities.values()} for name in select}
        wanted = ", ".join(f"{name} = {value}" for name, value in select.items())
        raise StudyError(
            Problem(
                "data.select",
                f"none of the {len(everything)} runs has {wanted}",
                "; ".join(f"{name} is {', '.join(sorted(v))}" for name, v in seen.items()),
            )
        )
    return images


def _from_paths(images: Sequence[Path]) -> list[Run]:
    full = [Path(os.path.abspath(image)) for image in images]
    shared = os.path.commonpath([image.parent for image in full])
    return [
        Run(_participant(image), _run_label(where.relative_to(shared)), image, _confounds(image))
        for image, where in zip(images, full, strict=True)
    ]


def _participant(image: Path) -> str:
    """The `sub-` label of the file name, else of the nearest folder, else the stem."""
    if label := _PARTICIPANT.search(image.name):
        return label.group()
    folders = (folder.name for folder in image.parents)
    return next((name for name in folders if _PARTICIPANT.fullmatch(name)), _stem(image))


def _run_label(relative: Path) -> str:
    return "_".join(dict.fromkeys(_RUN.findall(str(relative))))


def _confounds(image: Path) -> Path | None:
    """The confounds table beside a run, by its BIDS name or by the stem of the run."""
    stem = _stem(image)
    names = (
        f"{_IMAGE_ENTITIES.sub('', stem)}_desc-confounds_timeseries.tsv",
        f"{image.name.removesuffix('.gz').removesuffix('.nii')}_confounds.tsv",
        f"{stem}_confounds.tsv",
    )
    return next((path for name in names if is_file(path := image.parent / name)), None)


def _stem(image: Path) -> str:
    return image.name.removesuffix(".gz").removesuffix(".nii").removesuffix("_bold")


def _missing_files(runs: Sequence[Run]) -> list[Problem]:
    files = [
        (run, what, path)
        for run in runs
        for what, path in (("bold", run.bold), ("confounds", run.confounds), ("mask", run.mask))
    ]
    return [
        Problem(str(path), f"no such file ({what} of {run.participant})", "", "mend the path")
        for run, what, path in files
        if path is not None and not is_file(path)
    ]


def is_file(path: Path) -> bool:
    """Whether there is such a file; a text that can be no path is none."""
    try:
        return path.is_file()
    except (OSError, ValueError):  # a name that is too long, or holds a zero byte
        return False


def _repeated(runs: Sequence[Run]) -> list[Problem]:
    by_file: dict[Path, list[str]] = {}
    by_label: dict[tuple[str, str], list[str]] = {}
    for run in runs:
        file = Path(os.path.realpath(run.bold)) if is_file(run.bold) else run.bold
        by_file.setdefault(file, []).append(f"{run.participant} {run.run}".strip())
        by_label.setdefault((run.participant, run.run), []).append(run.bold.name)
    problems = [
        Problem(
            str(path),
            f"listed {len(owners)} times ({', '.join(owners)})",
            "each file once",
            "correct the path of one of them",
        )
        for path, owners in by_file.items()
        if len(owners) > 1
    ]
    problems += [
        Problem(
            f"participant {participant}",
            f"{len(names)} files for {f'run {run!r}' if run else 'one run'} ({', '.join(names)})",
            "one file per participant and run",
            "tell them apart by a run column or run- in the names, or select fewer files",
        )
        for (participant, run), names in by_label.items()
        if len(names) > 1
    ]
    return problems
