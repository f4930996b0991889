"""What is handed on must not harm: table cells that would run, and result folders from others."""

from __future__ import annotations

import json
import re
import stat
from collections.abc import Iterable
from math import prod
from pathlib import Path
from typing import Any

import nibabel as nib

from seedaudit.errors import DataError, Problem
from seedaudit.inputs.header import read_map_header

MOST_BYTES = {".json": 1 << 26, ".tsv": 1 << 30, ".gz": 1 << 30}
"""Largest file of a result folder that is read, by its kind."""

MOST_VALUES = 1 << 28
"""Most values of a map that are read: a file of zeros unpacks to a thousand times its size."""

MOST_HEADER = 4096
"""Most bytes before the values of a map."""

_MAP_TYPES = ("float32", "uint8")

# A spreadsheet takes a cell for a formula by its first letter, the wide forms of these included
# (OWASP, CSV injection). Apostrophes in front count with it, so that one more can be taken off.
_RUNS = re.compile("'*[\0-\x20]*[=+\\-@\uff1d\uff0b\uff0d\uff20]")


def inert(cell: str) -> str:
    """The cell with an apostrophe in front where a spreadsheet would run it as a formula."""
    return f"'{cell}" if _RUNS.match(cell) else cell


def live(cell: str) -> str:
    """The cell that `inert` was given."""
    return cell[1:] if cell.startswith("'") and _RUNS.match(cell) else cell


def own_path(folder: Path, *parts: str) -> Path:
    """A path below a folder from others; no part of it may lead elsewhere.

    Raises
    ------
    DataError
        If a part is a symbolic link.
    """
    path = folder
    for part in parts:
        path = path / part
        if path.is_symlink():
            raise DataError(
                Problem(
                    path.name,
                    f"is a symbolic link in the result folder {folder.name}",
                    "files of the folder itself",
                    "copy the file in its place, if you trust it",
                )
            )
    return path


def own_file(folder: Path, *parts: str) -> Path:
    """An ordinary file of a sound size below a folder from others.

    Raises
    ------
    DataError
        If it is a link, no ordinary file, or larger than `MOST_BYTES`.
    OSError
        If it is not there.
    """
    path = own_path(folder, *parts)
    told, most = path.stat(), MOST_BYTES[path.suffix]
    if not stat.S_ISREG(told.st_mode):
        raise DataError(Problem(path.name, "is no ordinary file", "a file"))
    if told.st_size > most:
        found = f"holds {told.st_size} bytes"
        raise DataError(Problem(path.name, found, f"at most {most} in a result folder"))
    return path


def read_mapping(folder: Path, name: str) -> dict[str, Any]:
    """A JSON object of a result folder.

    Raises
    ------
    DataError
        As `own_file`, or if it is no JSON object.
    """
    path = own_file(folder, name)
    try:
        content = json.loads(path.read_text(encoding="utf-8"), parse_constant=_no_number)
    except RecursionError:
        content = None
    if not isinstance(content, dict):
        raise DataError(Problem(path.name, "holds no JSON object", "as the program wrote it"))
    return content


def _no_number(text: str) -> float:
    raise ValueError(f"{text} is no number of JSON")


def open_map(folder: Path, *parts: str, shape: Iterable[int] | None = None) -> nib.Nifti1Image:
    """A map of a result folder, judged by its header; the values are read when they are used.

    Parameters
    ----------
    folder : Path
    *parts : str
    shape : three int, optional
        What the map must have in space.

    Raises
    ------
    DataError
        As `own_file`, or if its header is damaged, of another shape, or asks for more than
        `MOST_VALUES`.
    """
    path = own_file(folder, *parts)
    header = read_map_header(path)
    size = prod(header.grid.shape) * header.n_volumes
    problems = []
    if header.dtype.name not in _MAP_TYPES:
        problems.append(
            Problem(path.name, f"values of type {header.dtype}", " or ".join(_MAP_TYPES))
        )
    if size > MOST_VALUES or header.offset > MOST_HEADER:
        found = f"the header asks for {size} values from byte {header.offset} on"
        allowed = f"at most {MOST_VALUES} values, which begin by byte {MOST_HEADER}"
        problems.append(Problem(path.name, found, allowed))
    if shape is not None and header.grid.shape != tuple(shape):
        found = f"the shape is {header.grid.shape}"
        problems.append(Problem(path.name, found, f"{tuple(shape)}, as the other maps"))
    if problems:
        raise DataError(*problems)
    return nib.Nifti1Image.from_filename(path)
