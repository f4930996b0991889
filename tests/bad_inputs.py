"""Ways to break the small study, each with the exit code and the words that must answer it.

`HEADER_FAULTS` show before anything is computed, `DATA_FAULTS` only when the voxels are read;
`DECISIONS` are what the program goes on with, saying so.
"""

from __future__ import annotations

import gzip
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
from numpy.typing import NDArray

Break = Callable[[Path], None]


@dataclass(frozen=True)
class Fault:
    """One way to break the study in a folder, and what must come of it."""

    name: str
    breaks: Break
    code: int
    words: tuple[str, ...]
    """All must stand in the message."""
    problems: int | None = None
    """How many problems are listed, where that is the point."""


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


AT, RADIUS = "at = [-7.0, -48.0, 20.0]", "radius = 5.0"
MODEL = 'model = "~ 1"'

STUDY_FAULTS = (
    Fault("unknown key", swap(("drift = 1", "drfit = 1")), 2,
          ("cleaning.drfit", "is no key", "confounds", "did you mean `drift`?")),
    Fault("unknown section", swap(("[consensus]", "[consenus]")), 2,
          ("consenus", "did you mean `consensus`?")),
    Fault("text for a number", swap((RADIUS, 'radius = "6"')), 2,
          ("seed[1].radius", '"6"', "a number", "without quotes")),
    Fault("true for a number", swap((RADIUS, "radius = true")), 2,
          ("seed[1].radius", "is true", "a number")),
    Fault("number for text", swap(('mask = "mask.nii.gz"', "mask = 3")), 2,
          ("data.mask", "is 3", "text in quotes")),
    Fault("number for a list", swap((AT, "at = 5")), 2, ("seed[1].at", "is 5", "list in square brackets")),
    Fault("radius below 0", swap((RADIUS, "radius = -5.0")), 2,
          ("seed[1].radius", "-5.0", "greater than 0")),
    Fault("share above 1", swap(("safe = 0.95", "safe = 1.5")), 2,
          ("consensus.safe", "1.5", "less than or equal to 1")),
    Fault("one placement", swap(("count = 12", "count = 1")), 2,
          ("placements.count", "1", "greater than or equal to 2")),
    Fault("fraction for a count", swap(("count = 12", "count = 12.5")), 2,
          ("placements.count", "12.5", "whole number")),
    Fault("unknown rule", swap(('rule = "fdr"', 'rule = "fdrr"')), 2,
          ("threshold.rule", '"fdrr"', "'bonferroni'", "did you mean 'fdr'?")),
    Fault("level above 1", swap(("level = 0.05", "level = 5")), 2,
          ("threshold", "`level` = 5", "fdr", "above 0, below 1")),
    Fault("unknown draw", put("placements", 'draw = "cube"'), 2,
          ("placements.draw", '"cube"', "'ball'", "'lattice'")),
    Fault("sd with a ball", put("placements", "sd = 2.0"), 2,
          ("placements", "`sd` goes with", 'draw = "normal"')),
    Fault("negative uncertainty",
          put("placements", "uncertainty = { registration = -1.0 }"), 2,
          ("placements.uncertainty", "-1.0", "none negative")),
    Fault("two coordinates", swap((AT, "at = [-7.0, -48.0]")), 2,
          ("seed[1].at: is [-7.0, -48.0]", "3 values"), 1),
    Fault("four coordinates", swap((AT, "at = [-7.0, -48.0, 20.0, 1.0]")), 2,
          ("seed[1].at: is [-7.0, -48.0, 20.0, 1.0]", "3 values"), 1),
    Fault("coordinate not finite", swap((AT, "at = [nan, -48.0, 20.0]")), 2,
          ("seed[1].at[1]", "NaN", "finite")),
    Fault("band that falls", put("cleaning", "band = [0.1, 0.01]"), 2,
          ("cleaning.band", "[0.1, 0.01]", "low < high")),
    Fault("unknown space", swap(('space = "native"', 'space = "MNI152"')), 2,
          ("seed[1].space", '"MNI152"', "'talairach'", "did you mean 'mni'?")),
    Fault("seed without a place", swap((AT, "")), 2, ("seed[1].at", "is missing")),
    Fault("no seed", swap(("[[seed]]", "[seeds]")), 2, ("seed", "is missing")),
    Fault("seed names alike",
          swap(("[placements]", '[[seed]]\nname = "Posterior"\nat = [0, 0, 0]\n\n[placements]')),
          2, ("seed", "`name` of its own")),
    Fault("seed name as a path", swap(('name = "posterior"', 'name = "../posterior"')), 2,
          ("seed[1].name", '"../posterior"', "letters, digits")),
    Fault("one seed as a section", swap(("[[seed]]", "[seed]")), 2,
          ("seed", "write [[seed]], in double brackets"), 1),
    Fault("runs as a number", swap(('runs = "runs.tsv"', "runs = 3")), 2,
          ("data.runs", "is 3", "table", "pattern", "list of files"), 1),
    Fault("no runs", swap(('runs = "runs.tsv"\n', "")), 2, ("data", "`runs` or `bids`")),
    Fault("runs and bids", put("data", 'bids = "."'), 2, ("data", "either `runs` or `bids`")),
    Fault("bad on_bad_run", put("data", 'on_bad_run = "skip"'), 2,
          ("data.on_bad_run", '"skip"', "'stop'", "'set-aside'")),
    Fault("missing file", without("mask.nii.gz"), 2,
          ("data.mask", "'mask.nii.gz' does not exist", "relative to the study file")),
    Fault("missing runs table", without("runs.tsv"), 2, ("data.runs", "'runs.tsv'")),
    Fault("two problems", swap((RADIUS, "radius = 0"), ("drift = 1", "drift = 11"),
                               ('regions = "networks_dseg.nii.gz"', 'regions = "atlas.nii.gz"')), 2,
          ("seed[1].radius", "cleaning.drift", "data.regions", "dosenbach2010"), 3),
    Fault("not TOML", swap(("count = 12", "count = = 12")), 2, ("study.toml", "TOML", "line 21", "mend that line")),
    Fault("not text", lambda f: (f / "study.toml").write_bytes(b"\xff\xfe\x00study"), 2,
          ("study.toml", "not text in UTF-8")),
    Fault("missing study file", without("study.toml"), 2, ("study.toml", "No such file", "check the path")),
    Fault("pattern without a match", swap(('runs = "runs.tsv"', 'runs = "sub-*_asl.nii.gz"')), 2,
          ("data.runs", "'sub-*_asl.nii.gz'", "matches no")),
    Fault("empty bids folder", swap(('runs = "runs.tsv"', 'bids = "."')), 2,
          ("data.bids", "sub-*/func/*_bold.nii.gz")),
)  # fmt: skip

MODEL_FAULTS = (
    Fault("effect that cannot be estimated",
          swap((MODEL, 'model = "~ 0 + arm + C(arm)"\neffect = "arm[rested]"')), 2,
          ("model", "arm")),
    Fault("redundant columns",
          both(table("participants.tsv", lambda rows: [
              row.append("copy" if number == 0 else row[2]) for number, row in enumerate(rows)]),
              swap((MODEL, 'model = "~ age + copy"\neffect = "age"'))), 2,
          ("~ age + copy", "cannot be told apart", "full rank", "leave a term out")),
    Fault("unknown level", swap((MODEL, 'model = "~ arm"\neffect = "arm[restd] - arm[restricted]"')),
          2, ("effect", "'arm[restd]'", "arm[rested]")),
    Fault("unknown column", swap((MODEL, 'model = "~ amr"\neffect = "amr[a]"')), 2,
          ("model '~ amr'", "'amr'", "participants.tsv", "did you mean arm?")),
    Fault("no effect", swap((MODEL, 'model = "~ arm"')), 2, ("no effect", "arm[rested]")),
    Fault("weights that cancel",
          swap((MODEL, 'model = "~ arm"\neffect = "arm[rested] - arm[rested]"')), 2,
          ("effect", "cancel")),
    Fault("code in the model", swap((MODEL, 'model = "~ np.log(age)"\neffect = "age"')), 2,
          ("model", "np.log(age)", "not part of the notation")),
    Fault("model without a table",
          swap((MODEL, 'model = "~ arm"'), ('table = "participants.tsv"\n', "")), 2,
          ("~ arm", "participants table", "[group] table")),
    Fault("participant missing in the table",
          both(table("participants.tsv", drop_rows(2)), swap((MODEL, 'model = "~ age"\neffect = "age"'))),
          3, ("participants.tsv", "'sub-02'", "everyone who has a run")),
    Fault("participant twice in the table",
          both(table("participants.tsv", lambda rows: rows.append(list(rows[1]))),
               swap((MODEL, 'model = "~ age"\neffect = "age"'))), 3,
          ("participants.tsv", "'sub-01'", "2 times", "one row for each")),
    Fault("missing value in the model",
          both(cell("participants.tsv", 3, "age", "n/a"),
               swap((MODEL, 'model = "~ age"\neffect = "age"'))), 3,
          ("participants.tsv", "'age'", "sub-03")),
    Fault("text among numbers",
          both(cell("participants.tsv", 3, "age", "old"),
               swap((MODEL, 'model = "~ age"\neffect = "age"'))), 3,
          ("participants.tsv", "'age'", "'old'", "n/a")),
    Fault("too many columns", swap((MODEL, 'model = "~ arm * age"\neffect = "age"')), 2,
          ("4 columns for 4 participants", "more participants than columns")),
    Fault("one arm only",
          both(*(cell("participants.tsv", row, "arm", "rested") for row in (1, 2, 3, 4)),
               swap((MODEL, 'model = "~ arm"\neffect = "arm[rested] - arm[restricted]"'))), 2,
          ("arm[restricted]",)),
)  # fmt: skip

SPACE_FAULTS = (
    Fault("seed outside the image", swap((AT, "at = [100, -48, 20]")), 3,
          ("seed posterior", "(100, -48, 20)", "outside the image", "mm from the nearest voxel",
           "that voxel is at", "space")),
    Fault("seed outside the mask", swap((AT, "at = [-15, -62, 5]")), 3,
          ("seed posterior", "(-15, -62, 5)", "outside the mask", "mm from the nearest voxel")),
    Fault("seed barely covered",
          both(swap((AT, "at = [-11.3, -52.4, 12.1]")), put("placements", "min_coverage = 1.0")), 3,
          ("seed posterior", "the mask covers 0.", "min_coverage = 1", "shrink its radius")),
    Fault("one placement left",
          both(put("placements", "min_coverage = 1.0"),
               swap(("within = 5.0", "within = 20"), ("count = 12", "count = 4"))), 3,
          ("seed posterior", "1 of 4 drawn placements can be used", "2 or more", "min_coverage")),
    Fault("mask on another grid", image("mask.nii.gz", affine=shift_origin), 3,
          ("mask.nii.gz", "sub-01_task-rest_run-1_bold.nii.gz", "first voxel at", "resample")),
    Fault("empty mask", image("mask.nii.gz", filled(0)), 3, ("mask.nii.gz", "empty mask")),
    Fault("probability mask",
          image("mask.nii.gz", lambda d: d * np.linspace(0.1, 1, d.shape[0])[:, None, None]), 3,
          ("mask.nii.gz", "values beside 0", "0.1", "threshold")),
    Fault("4-D mask", image("mask.nii.gz", lambda d: np.stack([d, d], axis=-1)), 3,
          ("mask.nii.gz", "4-D", "3-D")),
    Fault("neither mask nor background", swap(('mask = "mask.nii.gz"\n', "")), 3,
          ("no voxel is present in the first volume of every run", "give a `mask`")),
    Fault("label image without look-up", without("networks_dseg.tsv"), 3,
          ("networks_dseg.nii.gz", "networks_dseg.tsv does not exist", "index and name", "write")),
    Fault("labels missing from the look-up", table("networks_dseg.tsv", drop_rows(2, 3)), 3,
          ("networks_dseg.nii.gz", "2, 5", "look-up", "add the rows")),
    Fault("look-up without a name column", cell("networks_dseg.tsv", 0, "name", "nam"), 3,
          ("networks_dseg.tsv", "'name'", "nam")),
    Fault("regions without overlap",
          image("networks_dseg.nii.gz", affine=lambda a: a.__setitem__((slice(0, 3), 3), 500.0)), 3,
          ("networks_dseg.nii.gz", "no region has a voxel")),
    Fault("probability atlas", image("networks_dseg.nii.gz", lambda d: d * 0.5), 3,
          ("networks_dseg.nii.gz", "no labels", "label image")),
    Fault("cloud over the whole mask", put("consensus", "exclude_margin = 100.0"), 3,
          ("seed posterior", "cover the whole mask", "smaller cloud")),
    Fault("inside without overlap",
          both(lambda f: (f / "grey.nii.gz").write_bytes((f / "mask.nii.gz").read_bytes()),
               image("grey.nii.gz", affine=lambda a: a.__setitem__((slice(0, 3), 3), 500.0)),
               put("placements", 'inside = "grey.nii.gz"')), 3,
          ("inside", "0 of", "drawn centres", "at least 1%")),
)  # fmt: skip

RUN_FAULTS = (
    Fault("3-D file", image(4, lambda d: d[..., 0]), 3,
          ("sub-04_task-rest_run-1_bold.nii.gz", "3-D image", "4-D run", "whole series")),
    Fault("5-D file", image(4, lambda d: np.stack([d, d], axis=-1)), 3,
          ("sub-04_task-rest_run-1_bold.nii.gz", "5 axes")),
    Fault("other shape", image(4, one_more_slice), 3,
          ("sub-04_task-rest_run-1_bold.nii.gz", "sub-01_task-rest_run-1_bold.nii.gz",
           "shape 11 x 14 x 10 against 11 x 14 x 9", "one grid", "resample")),
    Fault("other voxel size", image(4, affine=larger_voxels), 3,
          ("sub-04_task-rest_run-1_bold.nii.gz", "sub-01_task-rest_run-1_bold.nii.gz",
           "voxel size 4.51 x 3.6 x 4.6 mm against 4.1 x 3.6 x 4.6 mm")),
    Fault("other origin", image(4, affine=shift_origin), 3,
          ("sub-04_task-rest_run-1_bold.nii.gz", "sub-01_task-rest_run-1_bold.nii.gz",
           "first voxel at", "2 mm apart")),
    Fault("other orientation", image(4, affine=rotated), 3,
          ("sub-04_task-rest_run-1_bold.nii.gz", "sub-01_task-rest_run-1_bold.nii.gz",
           "orientation")),
    Fault("no affine", image(4, codes=(0, 0)), 3,
          ("sub-04_task-rest_run-1_bold.nii.gz", "no affine is coded", "sform_code", "data.grid")),
    Fault("not an image", stored(4, lambda _: b"hello"), 3,
          ("sub-04_task-rest_run-1_bold.nii.gz", "not a NIfTI file", ".nii.gz")),
    Fault("empty file", stored(4, lambda _: b""), 3,
          ("sub-04_task-rest_run-1_bold.nii.gz", "an empty file", "copy the file again")),
    Fault("truncated plain file", stored(3, lambda b: b[:-1000]), 3,
          ("sub-03_task-rest_run-1_bold.nii", "the header asks for", "truncated")),
    Fault("wrong byte order", inflated(1, swapped_lengths), 3,
          ("sub-01_task-rest_run-1_bold.nii.gz", "vox_offset")),
    Fault("odd one first", image(1, one_more_slice), 3,
          ("sub-01_task-rest_run-1_bold.nii.gz: is on another grid than sub-02", "11 x 14 x 10"),
          1),
    Fault("a folder in its place",
          lambda f: (bold(f, 4).unlink(), (f / "sub-04_task-rest_run-1_bold.nii.gz").mkdir()), 3,
          ("sub-04_task-rest_run-1_bold.nii.gz",)),
    Fault("absurd size", inflated(1, set_int16(42, 30000)), 3,
          ("sub-01_task-rest_run-1_bold.nii.gz", "the header asks for", "truncated")),
    Fault("complex values", inflated(1, set_int16(70, 32)), 3,
          ("sub-01_task-rest_run-1_bold.nii.gz", "complex64")),
    Fault("negative length", inflated(1, set_int16(46, -3)), 3,
          ("sub-01_task-rest_run-1_bold.nii.gz", "dim is")),
    Fault("confounds rows", table("sub-04_task-rest_run-1_timeseries.tsv", drop_rows(3)), 3,
          ("sub-04_task-rest_run-1_timeseries.tsv", "59 rows", "60 volumes", "dropped")),
    Fault("missing confound column",
          swap(('"rot_*"]', '"rot_*", "framewise_displacment"]')), 3,
          ("sub-01_task-rest_run-1_timeseries.tsv", "'framewise_displacment'",
           "did you mean framewise_displacement?"), 1),
    Fault("missing column in one run", table("sub-04_task-rest_run-1_timeseries.tsv",
                                             lambda rows: [rows[0].__setitem__(i, "r" + n[4:])
                                                           for i, n in enumerate(rows[0])
                                                           if n.startswith("rot")]), 3,
          ("sub-04_task-rest_run-1_timeseries.tsv", "'rot_*'")),
    Fault("n/a in the middle", cell("sub-04_task-rest_run-1_timeseries.tsv", 20, "trans_y", "n/a"), 3,
          ("sub-04_task-rest_run-1_timeseries.tsv", "'trans_y'", "row 20", "n/a")),
    Fault("text in a confound", cell("sub-04_task-rest_run-1_timeseries.tsv", 20, "trans_y", "oops"), 3,
          ("'trans_y'", "row 20", "'oops'")),
    Fault("no confounds", both(table("runs.tsv", drop_column("confounds"))), 3,
          ("sub-01_task-rest_run-1_bold.nii.gz", "no confounds table", "[cleaning]", "runs table")),
    Fault("censor column missing",
          put("cleaning", 'censor = { column = "fd", above = 0.5 }'), 3,
          ("sub-01_task-rest_run-1_timeseries.tsv", "'fd'", "framewise_displacement")),
    Fault("too few volumes",
          table("sub-04_task-rest_run-1_timeseries.tsv", many_columns), 3,
          ("sub-04_task-rest_run-1_bold.nii.gz", "60 volumes", "0 residual degrees of freedom",
           "at least 4", "fewer confounds")),
    Fault("all volumes censored", put("cleaning", 'censor = { column = "trans_x", above = -9 }'), 3,
          ("0 residual degrees of freedom", "less censoring")),
    Fault("band without TR",
          both(every_run(lambda n: image(n, repetition_time=0.0)),
               put("cleaning", "band = [0.008, 0.1]")), 3,
          ("sub-01_task-rest_run-1_bold.nii.gz", "no repetition time", "0.008 to 0.1 Hz",
           "`repetition_time`"), 1),
    Fault("missing bold file", without("sub-04_task-rest_run-1_bold.nii.gz"), 3,
          ("sub-04_task-rest_run-1_bold.nii.gz", "no such file", "sub-04")),
    Fault("missing confounds file", without("sub-04_task-rest_run-1_timeseries.tsv"), 3,
          ("sub-04_task-rest_run-1_timeseries.tsv", "no such file", "confounds of sub-04")),
    Fault("same file twice",
          cell("runs.tsv", 4, "bold", "sub-01_task-rest_run-1_bold.nii.gz"), 3,
          ("sub-01_task-rest_run-1_bold.nii.gz", "listed 2 times", "sub-01", "sub-04")),
    Fault("same participant and run", cell("runs.tsv", 4, "participant_id", "sub-01"), 3,
          ("sub-01", "2 files for run '1'", "one file per participant and run", "run column")),
    Fault("no bold column", cell("runs.tsv", 0, "bold", "bolt"), 3,
          ("runs.tsv", "'bold'", "did you mean bolt?")),
    Fault("no participant in a row", cell("runs.tsv", 3, "participant_id", "n/a"), 3,
          ("runs.tsv", "row 3", "participant_id")),
    Fault("table without rows", table("runs.tsv", drop_rows(1, 2, 3, 4)), 3,
          ("runs.tsv", "no rows")),
    Fault("ragged table", table("runs.tsv", lambda rows: rows[2].append("more")), 3,
          ("runs.tsv", "cannot be read (Expected 4 fields in line 3, saw 5)", "tab-separated")),
    Fault("empty table", lambda f: (f / "runs.tsv").write_text(""), 3,
          ("runs.tsv", "cannot be read")),
    Fault("two bad runs", both(image(4, one_more_slice), image(2, lambda d: d[..., 0])), 3,
          ("sub-02_task-rest_run-1_bold.nii.gz", "sub-04_task-rest_run-1_bold.nii.gz", "3-D",
           "shape"), 2),
    Fault("a bad run, a bad mask, a bad effect",
          both(image(4, one_more_slice), image("mask.nii.gz", filled(0)),
               swap((MODEL, 'model = "~ arm"\neffect = "arm[restd]"'))), 2,
          ("sub-04_task-rest_run-1_bold.nii.gz", "empty mask", "'arm[restd]'"), 3),
)  # fmt: skip

HEADER_FAULTS = (*STUDY_FAULTS, *MODEL_FAULTS, *SPACE_FAULTS, *RUN_FAULTS)

DATA_FAULTS = (
    Fault("truncated gzip", stored(4, lambda b: b[: len(b) // 2]), 3,
          ("participant sub-04", "sub-04_task-rest_run-1_bold.nii.gz", "ends early", "copy")),
    Fault("corrupt gzip", stored(4, corrupt), 3,
          ("participant sub-04", "sub-04_task-rest_run-1_bold.nii.gz", "corrupt", "copy")),
    Fault("wrong checksum", stored(4, lambda b: b[:-8] + b"\0\0\0\0" + b[-4:]), 3,
          ("participant sub-04", "sub-04_task-rest_run-1_bold.nii.gz", "corrupt", "copy")),
    Fault("data shorter than the header says", inflated(4, lambda b: b.__delitem__(slice(-5000, None))), 3,
          ("participant sub-04", "sub-04_task-rest_run-1_bold.nii.gz", "end within volume 60 of 60")),
    Fault("all-constant run", image(4, filled(700.0)), 3,
          ("participant sub-04", "sub-04_task-rest_run-1_bold.nii.gz", "0%", "signal that varies",
           "min_coverage", "set-aside")),
    Fault("all-NaN run", image(4, filled(np.nan)), 3,
          ("participant sub-04", "sub-04_task-rest_run-1_bold.nii.gz", "0%", "signal that varies")),
    Fault("one NaN volume", image(4, filled(np.nan, volumes=slice(9, 10))), 3,
          ("participant sub-04", "sub-04_task-rest_run-1_bold.nii.gz", "0%", "signal")),
)  # fmt: skip


def without_mask(folder: Path) -> None:
    """A folder of runs alone: no study file, mask or regions."""
    for name in ("study.toml", "runs.tsv", "participants.tsv"):
        (folder / name).unlink()


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
