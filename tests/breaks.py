"""Ways to break the small study in a folder, or to ask it for something else."""

from __future__ import annotations

import gzip
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
from numpy.typing import NDArray

Break = Callable[[Path], None]


def bold(folder: Path, number: int) -> Path:
    """The (first) run of participant `number` of the small study."""
    return next(folder.glob(f"sub-{number:02d}_task-rest_run-1_bold.nii*"))


def confounds(folder: Path, number: int) -> Path:
    """The confounds table of that run."""
    return folder / f"sub-{number:02d}_task-rest_run-1_timeseries.tsv"


def swap(*pairs: tuple[str, str], file: str = "study.toml") -> Break:
    """Replace text in the study file; each old text must be there."""

    def breaks(folder: Path) -> None:
        text = (folder / file).read_text(encoding="utf-8")
        for old, new in pairs:
            assert old in text, old
            text = text.replace(old, new, 1)
        (folder / file).write_text(text, encoding="utf-8")

    return breaks


def put(section: str, *lines: str) -> Break:
    """Add lines to the top of a section of the study file."""
    return swap((f"[{section}]\n", f"[{section}]\n" + "\n".join(lines) + "\n"))


def both(*breaks: Break) -> Break:
    """Break the study in several ways."""

    def all_of_them(folder: Path) -> None:
        for one in breaks:
            one(folder)

    return all_of_them


def table(name: str, change: Callable[[list[list[str]]], Any]) -> Break:
    """Change the cells of a table in place: a list of rows, the header row first."""

    def breaks(folder: Path) -> None:
        path = folder / name
        rows = [line.split("\t") for line in path.read_text(encoding="utf-8").splitlines()]
        change(rows)
        path.write_text("\n".join("\t".join(row) for row in rows) + "\n", encoding="utf-8")

    return breaks


def cell(name: str, row: int, column: str, value: str) -> Break:
    """Set one cell; row 0 is the header row."""

    def change(rows: list[list[str]]) -> None:
        rows[row][rows[0].index(column)] = value

    return table(name, change)


def image(
    which: int | str,
    change: Callable[[NDArray[Any]], NDArray[Any] | None] = lambda data: None,
    *,
    affine: Callable[[NDArray[Any]], Any] = lambda affine: None,
    codes: tuple[int, int] | None = None,
    repetition_time: float | None = None,
) -> Break:
    """Rewrite an image, by its name or the number of its participant, with other data or header.

    `change` and `affine` may change their argument in place or return another array; `codes` are
    those of sform and qform.
    """

    def breaks(folder: Path) -> None:
        path = bold(folder, which) if isinstance(which, int) else folder / which
        old = nib.Nifti1Image.from_filename(path)
        # stored as float32, so that NaN has a place
        data, grid = np.asarray(old.get_fdata(dtype=np.float32)), old.affine.copy()
        changed, moved = change(data), affine(grid)
        data = data if changed is None else changed
        grid = grid if moved is None else moved
        new = nib.Nifti1Image(data.astype(np.float32), grid)
        new.header.set_xyzt_units("mm", "sec")
        both_codes = (2, 4) if codes is None else codes
        new.set_sform(grid, both_codes[0])
        new.set_qform(grid, both_codes[1])
        if data.ndim == 4:
            new.header["pixdim"][4] = 2.0 if repetition_time is None else repetition_time
        nib.save(new, path)

    return breaks


def filled(value: float, *, volumes: slice = slice(None)) -> Callable[[NDArray[Any]], None]:
    """Set every voxel of those volumes to one value."""

    def change(data: NDArray[Any]) -> None:
        data[..., volumes] = value

    return change


def stored(number: int, change: Callable[[bytes], bytes]) -> Break:
    """Change the bytes of a run as they are on disk."""

    def breaks(folder: Path) -> None:
        path = bold(folder, number)
        path.write_bytes(change(path.read_bytes()))

    return breaks


def inflated(number: int, change: Callable[[bytearray], Any]) -> Break:
    """Change the bytes of a gzip run before compression."""

    def breaks(folder: Path) -> None:
        path = bold(folder, number)
        content = bytearray(gzip.decompress(path.read_bytes()))
        change(content)
        path.write_bytes(gzip.compress(bytes(content)))

    return breaks


def corrupt(content: bytes) -> bytes:
    """The same gzip file with bytes in its middle turned over."""
    middle = len(content) // 2
    turned = bytes(255 - byte for byte in content[middle : middle + 64])
    return content[:middle] + turned + content[middle + 64 :]


def without(name: str) -> Break:
    """Delete a file."""
    return lambda folder: (folder / name).unlink()


def rotated(affine: NDArray[Any]) -> NDArray[Any]:
    """The affine turned by 3 degrees about z."""
    a = np.deg2rad(3)
    turn = np.eye(4)
    turn[:2, :2] = [[np.cos(a), -np.sin(a)], [np.sin(a), np.cos(a)]]
    return np.asarray(turn @ affine)


def shift_origin(affine: NDArray[Any]) -> None:
    affine[0, 3] += 2.0


def larger_voxels(affine: NDArray[Any]) -> None:
    affine[:3, 0] *= 1.1


def one_more_slice(data: NDArray[Any]) -> NDArray[Any]:
    return np.concatenate([data, data[:, :, -1:]], axis=2)


def set_int16(at: int, value: int) -> Callable[[bytearray], None]:
    """Write a little-endian int16 of a NIfTI-1 header."""

    def change(content: bytearray) -> None:
        content[at : at + 2] = value.to_bytes(2, "little", signed=True)

    return change


def swapped_lengths(content: bytearray) -> None:
    """Turn over the bytes of the image lengths (dim), as after a careless change of byte order."""
    for at in range(40, 56, 2):
        content[at : at + 2] = content[at : at + 2][::-1]


def shortened(content: bytearray) -> None:
    """Take the last 5000 bytes away."""
    del content[-5000:]


def many_columns(rows: list[list[str]]) -> None:
    """Add 60 columns of noise named trans_noise_*: more than the volumes of any run can bear."""
    rng = np.random.default_rng(4)
    rows[0] += [f"trans_noise_{i:02d}" for i in range(60)]
    for row in rows[1:]:
        row += [f"{value:.4f}" for value in rng.standard_normal(60)]


def drop_column(name: str) -> Callable[[list[list[str]]], None]:
    def change(rows: list[list[str]]) -> None:
        at = rows[0].index(name)
        for row in rows:
            del row[at]

    return change


def drop_rows(*numbers: int) -> Callable[[list[list[str]]], None]:
    def change(rows: list[list[str]]) -> None:
        for number in sorted(numbers, reverse=True):
            del rows[number]

    return change


def every_run(breaks: Callable[[int], Break], numbers: Sequence[int] = (1, 2, 3, 4)) -> Break:
    return both(*(breaks(number) for number in numbers))


def forms_disagree(number: int) -> Break:
    """Write a run whose qform is shifted by 3 mm against its sform."""

    def breaks(folder: Path) -> None:
        path = bold(folder, number)
        run = nib.Nifti1Image.from_filename(path)
        moved = run.affine.copy()
        moved[1, 3] += 3.0
        run.set_qform(moved, 4)
        nib.save(nib.Nifti1Image(run.get_fdata(dtype=np.float32), None, run.header), path)

    return breaks


AT, RADIUS = "at = [-7.0, -48.0, 20.0]", "radius = 5.0"
MODEL = 'model = "~ 1"'
"""Lines of the study file, to be replaced."""
