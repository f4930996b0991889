"""A first study file, written from what is found in a folder; headers and tables are read only."""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

from seedaudit.errors import Problem, SeedAuditError, StudyError, counted
from seedaudit.inputs.discover import Run, list_runs
from seedaudit.inputs.header import RunHeader, read_header, read_map_header
from seedaudit.inputs.tables import read_table

IMAGE = ("*.nii", "*.nii.gz")
ENTITIES = ("task", "acq", "space", "res", "desc")
"""Parts of a BIDS name that tell versions of one run apart; of each, one is taken."""

REGION_WORDS = ("dseg", "atlas", "region", "network", "parcel", "label")
TEMPLATE_CODE = 4  # NIfTI: MNI-152
MOST_NAMED = 12
NO_TIME = "s; needed for a pass band, and the header has none"


@dataclass(frozen=True)
class Start:
    """What was found in a folder, and the study file that follows from it.

    `text` is the file; `told` are lines for the reader of the screen.
    """

    text: str
    told: tuple[str, ...]


@dataclass
class _Found:
    """The lines of the section `data`, the runs they name, and remarks on what was chosen."""

    data: list[str]
    runs: tuple[Run, ...] = ()
    remarks: list[str] = field(default_factory=list)


def start_study(folder: Path) -> Start:
    """Find runs, mask, regions, participants and confounds in a folder.

    Parameters
    ----------
    folder : Path
        A BIDS derivative data set (with `dataset_description.json`), or a folder of images.

    Raises
    ------
    StudyError
        Where there is no folder, or no run in it.
    """
    if not folder.is_dir():
        raise StudyError(Problem(str(folder), "is no folder", "a folder with the runs of a study"))
    described = (folder / "dataset_description.json").is_file()
    found = (_of_bids(folder) if described else None) or _of_images(folder)
    header = read_header(found.runs[0].bold)
    people = len({run.participant for run in found.runs})
    mask, others = _mask(folder, found.runs)
    regions, remarks = _regions(folder, found.runs)
    found.remarks += remarks
    told = (
        f"{counted(len(found.runs), 'run')} of {counted(people, 'participant')}; the first has "
        f"{header.n_volumes} volumes of {' x '.join(map(str, header.grid.shape))} voxels",
        f"mask: {mask or 'none (voxels present in every run)'}",
        f"regions: {regions or 'none'}",
        *found.remarks,
    )
    lines = [
        "# Written from what was found in the folder; lines that begin with # are proposals.",
        'title = "Seed placement audit"',
        'output = "audit"',
        "",
        "[data]",
        *found.data,
        *(f"# {remark}" for remark in found.remarks),
        _line("mask", mask, "without one: voxels present in every run", "mask.nii.gz"),
        *(f"# mask = {_quoted(name)}" for name in others),
        _line("regions", regions, "label image with a table beside it", "dosenbach2010"),
        *([] if header.repetition_time else [_noted("# repetition_time = 2.0", NO_TIME)]),
        "",
        *_cleaning(found.runs),
        "",
        "[[seed]]",
        'name = "seed"',
        _noted("# at = [x, y, z]", "mm: the coordinate that is audited; needed"),
        _noted(f'space = "{_space(header)}"', "of `at`: mni, talairach or native"),
        _noted("radius = 6", "mm"),
        "",
        "[placements]",
        _noted("within = 6", "mm: how far the seed may have been off"),
        "count = 100",
        "random_state = 20",
        "",
        *_group(folder),
        "",
        "[threshold]",
        _noted('rule = "fdr"', "p, fdr, bonferroni, fwe, t, effect, density"),
        "level = 0.05",
        "",
        _noted("# [claims]", "the sentences a paper wants to make"),
        _noted('# table = "claims.tsv"', "claim, seed, region (or x, y, z, radius), direction"),
        _noted("# smallest_effect = 0.05", "Fisher z"),
    ]
    return Start("\n".join(lines) + "\n", told)


def _of_bids(folder: Path) -> _Found | None:
    """The runs of a BIDS derivative data set: of every part of their names, the commonest."""
    try:
        runs, _ = list_runs(None, folder, bids=".")
    except StudyError:
        return None
    entities = {run: _entities(run.bold) for run in runs}
    chosen: dict[str, str] = {}
    remarks = []
    for name in ENTITIES:
        seen = Counter(own[name] for own in entities.values() if name in own)
        if not seen:
            continue
        value = min(seen, key=lambda key: (-seen[key], key))
        if len(seen) > 1 or len(entities) > seen[value]:
            others = ", ".join(sorted(set(seen) - {value})) or "none"
            remarks.append(f"{name} is {value} in {seen[value]} runs; also there: {others}")
        chosen[name] = value
        entities = {run: own for run, own in entities.items() if own.get(name) == value}
    select = ", ".join(f"{name} = {_quoted(value)}" for name, value in chosen.items())
    data = ['bids = "."', *([f"select = {{ {select} }}"] if select else [])]
    return _Found(data, tuple(entities), remarks)


def _entities(path: Path) -> dict[str, str]:
    return dict(part.split("-", 1) for part in path.name.split("_") if "-" in part)


def _of_images(folder: Path) -> _Found:
    """The runs of a table `runs.tsv`, of a pattern of names, or simply the 4-D images."""
    if (folder / "runs.tsv").is_file():
        return _Found(['runs = "runs.tsv"'], list_runs("runs.tsv", folder)[0])
    for pattern in ("*_bold.nii*", "**/*_bold.nii*"):
        if any(folder.glob(pattern)):
            return _Found([f"runs = {_quoted(pattern)}"], list_runs(pattern, folder)[0])
    names = [path.name for path in _images(folder) if _volumes(path) > 1]
    if not names:
        raise StudyError(
            Problem(
                str(folder),
                "holds no run",
                "a table runs.tsv, files *_bold.nii.gz, or 4-D images",
                "name the folder that the images are in",
            )
        )
    listed = ",\n    ".join(_quoted(name) for name in names)
    return _Found([f"runs = [\n    {listed},\n]"], list_runs(names, folder)[0])


def _images(folder: Path) -> list[Path]:
    return sorted(path for pattern in IMAGE for path in folder.glob(pattern) if path.is_file())


def _volumes(path: Path) -> int:
    """Volumes of an image; 0 for what cannot be read."""
    try:
        return read_map_header(path).n_volumes
    except SeedAuditError:
        return 0


def _mask(folder: Path, runs: Sequence[Run]) -> tuple[str | None, list[str]]:
    """The mask of the whole study, and others that might be it."""
    used = {run.bold for run in runs}
    names = [
        path.name
        for path in _images(folder)
        if "mask" in path.name.lower() and path not in used and _volumes(path) == 1
    ]
    names.sort(key=len)
    return (names[0], names[1:]) if names else (None, [])


def _regions(folder: Path, runs: Sequence[Run]) -> tuple[str | None, list[str]]:
    """A label image with its table beside it; else what such images lack."""
    used, lacking = {run.bold for run in runs}, []
    for path in _images(folder):
        likely = any(word in path.name.lower() for word in REGION_WORDS)
        if not likely or path in used or _volumes(path) != 1:
            continue
        table = f"{path.name.removesuffix('.gz').removesuffix('.nii')}.tsv"
        if (folder / table).is_file():
            return path.name, []
        lacking.append(f"{path.name} may hold regions; it needs {table} (index, name) beside it")
    return None, lacking


def _cleaning(runs: Sequence[Run]) -> list[str]:
    """A proposal for the section `cleaning`: whether the data are clean only the user knows."""
    table = runs[0].confounds
    if table is None:
        return [_noted("# [cleaning]", "left out: the data are taken as clean")]
    columns = _columns(table)
    motion = [
        f'"{word}_*"' for word in ("trans", "rot") if any(c.startswith(word) for c in columns)
    ]
    tissue = [_quoted(name) for name in ("csf", "white_matter") if name in columns]
    named = ", ".join(columns[:MOST_NAMED]) + (", ..." if len(columns) > MOST_NAMED else "")
    lines = [
        f"# {counted(sum(run.confounds is not None for run in runs), 'run')} with a table of "
        "confounds. Take the # away unless the data are clean already.",
        f"# columns: {named}",
        "# [cleaning]",
        f"# confounds = [{', '.join(motion + tissue)}]",
        _noted("# drift = 1", "polynomial order"),
        _noted("# band = [0.008, 0.09]", "Hz"),
    ]
    if "framewise_displacement" in columns:
        lines.append(
            '# censor = { column = "framewise_displacement", above = 0.5, before = 1, after = 2 }'
        )
    return lines


def _group(folder: Path) -> list[str]:
    table = folder / "participants.tsv"
    columns = _columns(table) if table.is_file() else []
    if not columns:
        return ["[group]", _noted('model = "~ 1"', "the mean of all participants")]
    lines = [
        "[group]",
        f"# participants.tsv has the columns {', '.join(columns)}",
        'table = "participants.tsv"',
        _noted('model = "~ 1"', "such as ~ arm + age"),
    ]
    if len(columns) > 1:
        lines.append(_noted('# effect = "..."', "what is tested, when the model says more"))
    return lines


def _columns(table: Path) -> list[str]:
    try:
        return [str(name) for name in read_table(table).columns]
    except SeedAuditError:
        return []


def _space(header: RunHeader) -> str:
    return "mni" if header.space_code == TEMPLATE_CODE else "native"


def _line(key: str, value: str | None, meaning: str, example: str) -> str:
    if value is None:
        return _noted(f"# {key} = {_quoted(example)}", meaning)
    return f"{key} = {_quoted(value)}"


def _noted(text: str, note: str) -> str:
    """A line with a remark behind it, all remarks in one column."""
    return f"{text:<31} # {note}"


def _quoted(text: str) -> str:
    """A TOML string; JSON's escapes are TOML's."""
    return json.dumps(text, ensure_ascii=False)
