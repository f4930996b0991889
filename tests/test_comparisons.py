"""Copies under two names, and runs of one participant with their sides swapped."""

from __future__ import annotations

import gzip
import shutil
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

from seedaudit import comparisons
from seedaudit.comparisons import note_copies
from seedaudit.errors import DataError, Findings, StudyError
from seedaudit.inputs.discover import Run
from seedaudit.preflight import make_plan
from seedaudit.study import Study
from tests.breaks import (
    bold,
    both,
    cell,
    confounds,
    filled,
    image,
    put,
    shift_origin,
    swap,
    without,
)
from tests.small_brain import brain_mask
from tests.small_study import write_small_study

FIRST, FOURTH = (f"sub-0{number}_task-rest_run-1_bold.nii.gz" for number in (1, 4))


@pytest.fixture(scope="module")
def base(tmp_path_factory) -> Path:
    return write_small_study(tmp_path_factory.mktemp("base"), participants=4).folder


@pytest.fixture
def plan_of(base, tmp_path):
    folder = tmp_path / "study"
    shutil.copytree(base, folder)

    def go(*changes):
        both(*changes)(folder)
        return make_plan(Study.load(folder / "study.toml"))

    return go


def as_it_is(folder: Path) -> None:
    shutil.copy(bold(folder, 1), bold(folder, 4))


def packed_again(folder: Path) -> None:
    """The same content with another level, name and time: no byte of the file need be the same."""
    content = gzip.decompress(bold(folder, 1).read_bytes())
    with open(bold(folder, 4), "wb") as raw, gzip.GzipFile("other", "wb", 1, raw, 7) as packed:
        packed.write(content)


def plain(folder: Path) -> None:
    """Two uncompressed copies."""
    content = gzip.decompress(bold(folder, 1).read_bytes())
    for number in (1, 4):
        bold(folder, number).unlink()
        (folder / f"sub-0{number}_task-rest_run-1_bold.nii").write_bytes(content)
    both(*(cell("runs.tsv", row, "bold", f"sub-0{number}_task-rest_run-1_bold.nii")
           for row, number in ((1, 1), (5, 4))))(folder)  # fmt: skip


UNCLEANED = swap(('confounds = ["trans_*", "rot_*"]\n', ""))
"""The tables of the two participants differ in length, which would be told instead."""


@pytest.mark.parametrize("copy", [as_it_is, packed_again, plain])
def test_a_copy_of_somebody_elses_run(plan_of, copy):
    with pytest.raises(DataError) as raised:
        plan_of(copy, UNCLEANED, put("data", 'on_bad_run = "set-aside"'))
    (problem,) = raised.value.problems
    assert "sub-01_task-rest_run-1_bold.nii" in problem.where
    assert "sub-04_task-rest_run-1_bold.nii" in problem.where
    assert problem.found == "hold the same image (of sub-01, sub-04)"


def test_a_copy_within_a_participant(plan_of):
    """It would count the same volumes twice."""

    def again(folder: Path) -> None:
        first, second = (folder / f"sub-03_task-rest_run-{n}_bold.nii" for n in (1, 2))
        shutil.copy(first, second)

    with pytest.raises(DataError, match=r"hold the same image \(of sub-03\)"):
        plan_of(again)


def test_copied_confounds_are_warned_of(plan_of):
    plan = plan_of(
        UNCLEANED, lambda folder: shutil.copy(confounds(folder, 1), confounds(folder, 4))
    )
    (warning,) = [text for text in plan.warnings if "same confounds" in text]
    assert warning == (
        "sub-01_task-rest_run-1_timeseries.tsv, sub-04_task-rest_run-1_timeseries.tsv: "
        "the same confounds (of sub-01, sub-04); is one a copy?"
    )


def test_a_sound_study_has_no_copies(plan_of, monkeypatch):
    """And no image of it is read as a whole to know so."""
    read: list[Path] = []
    digest = comparisons._digest
    monkeypatch.setattr(comparisons, "_digest", lambda path: read.append(path) or digest(path))
    plan = plan_of()
    assert not [text for text in plan.warnings if "same" in text]
    assert read == []


def test_files_that_only_look_alike(tmp_path):
    """Equal size and equal samples, other content: told apart by the digest."""
    content = bytearray(1_000_000)
    (tmp_path / "a.nii").write_bytes(content)
    content[300_000] = 1
    (tmp_path / "b.nii").write_bytes(content)
    (tmp_path / "c.nii").symlink_to(tmp_path / "a.nii")
    findings = Findings()
    paths = [tmp_path / f"{name}.nii" for name in "abc"]
    assert comparisons._glance(paths[0]) == comparisons._glance(paths[1])
    note_copies([Run(path.stem, "", path) for path in paths], findings)
    # one file by two paths is told where the list of runs is judged
    assert findings.problems == []


def test_unreadable_files_are_no_copies(tmp_path):
    paths = [tmp_path / f"{name}.nii.gz" for name in "ab"]
    for path in paths:
        path.write_bytes(b"\x1f\x8b" + bytes(30))
    findings = Findings()
    note_copies([Run("a", "", tmp_path / "none.nii"), *(Run(p.stem, "", p) for p in paths)],
                findings)  # fmt: skip
    assert findings.problems == []


def mirrored(data):
    """The image turned over along its first axis, the header left as it is."""
    return data[::-1]


SECOND = "sub-03_task-rest_run-2_bold.nii"


def heads(data):
    """A head that is nearly, and not quite, the same on both sides, with a little noise."""
    mask = brain_mask()
    x = np.arange(data.shape[0])[:, None, None, None]
    data[...] = np.where(mask[..., None], 1000 + 8 * x, 5) + 0.02 * data
    return data


def test_sides_swapped_between_two_runs(plan_of):
    """The second run is stored mirrored under an unchanged header; only its image can tell."""
    plan = plan_of(image("sub-03_task-rest_run-1_bold.nii", heads), image(SECOND, heads),
                   image(SECOND, mirrored))  # fmt: skip
    (warning,) = [text for text in plan.warnings if "left and right swapped" in text]
    assert warning.startswith(f"participant sub-03: {SECOND} looks like sub-03_task-rest_run-1")


@pytest.mark.parametrize(
    "change",
    [
        image(SECOND, heads),
        image(SECOND, lambda data: data[:, ::-1]),
        image(SECOND, filled(7.0)),
        image(SECOND, filled(np.nan, volumes=slice(0, 1))),
    ],
    ids=["in order", "front and back", "constant", "NaN"],
)
def test_no_sides_to_doubt(plan_of, change):
    plan = plan_of(image("sub-03_task-rest_run-1_bold.nii", heads), change,
                   put("data", 'on_bad_run = "set-aside"'))  # fmt: skip
    assert not [text for text in plan.warnings if "swapped" in text]


def test_one_run_on_the_other_side(plan_of):
    """The affine of one run puts the same voxel on the other side of the head."""

    def flip(affine):
        affine[0] *= -1

    with pytest.raises(DataError, match="one mirrors the other; allowed: all runs on one grid"):
        plan_of(image(SECOND, affine=flip))
    # a grid that is only moved mirrors nothing


def test_a_moved_grid_mirrors_nothing(plan_of):
    with pytest.raises(DataError) as raised:
        plan_of(image(SECOND, affine=shift_origin))
    assert "mirrors" not in str(raised.value)


def forms(change):
    """Write sub-04 with its qform changed against its sform."""

    def breaks(folder: Path) -> None:
        run = nib.Nifti1Image.from_filename(bold(folder, 4))
        other = change @ run.affine
        run.set_qform(other, 4)
        nib.save(nib.Nifti1Image(run.get_fdata(dtype=np.float32), None, run.header),
                 bold(folder, 4))  # fmt: skip

    return breaks


@pytest.mark.parametrize(
    ("change", "mirrors"),
    [
        (np.diag([-1.0, 1, 1, 1]), True),  # of opposite handedness
        (np.diag([-1.0, -1, 1, 1]), True),  # turned about the long axis: left is right
        (nib.affines.from_matvec(np.eye(3), [0, 3, 0]), False),
    ],
    ids=["mirrored", "turned", "moved"],
)
def test_forms_that_contradict_each_other_about_the_sides(plan_of, change, mirrors):
    plan = plan_of(forms(change))
    (warning,) = [text for text in plan.warnings if "disagree" in text]
    assert ("one mirrors the other" in warning) is mirrors
    assert warning.endswith("the sform is used")


def test_either_handedness_of_the_whole_study_is_legal(tmp_path):
    """Left-handed and right-handed storage of the same world data: nothing to warn of."""
    for flip in ((False, False, False), (True, False, False)):
        small = write_small_study(tmp_path / str(flip[0]), participants=3, flip=flip)
        plan = make_plan(Study.load(small.study_file))
        assert not [text for text in plan.warnings if "swapped" in text or "mirrors" in text]


def test_a_bad_list_of_runs_hides_nothing(plan_of):
    """A missing run and a listed twice one, with a bad mask, seed, label and model beside them."""
    with pytest.raises(StudyError) as raised:
        plan_of(
            without(FOURTH),
            cell("runs.tsv", 2, "bold", FIRST),
            image("mask.nii.gz", lambda data: data * 0),
            swap(('model = "~ 1"', 'model = "~ amr"')),
        )
    told = str(raised.value)
    for words in (
        f"{FOURTH}: no such file (bold of sub-04)",
        "listed 2 times",
        "empty mask",
        "'amr'",
    ):
        assert words in told
    # and the same run is too long for the confounds of another
    assert len(raised.value.problems) == 5


def test_no_run_at_all_hides_nothing(plan_of):
    with pytest.raises(StudyError) as raised:
        plan_of(
            swap(('runs = "runs.tsv"', 'runs = "no-*.nii.gz"'),
                 ("at = [-7.0, -48.0, 20.0]", "at = [100.0, 0.0, 0.0]")),
            cell("networks_dseg.tsv", 0, "name", "nam"),
        )  # fmt: skip
    told = str(raised.value)
    for words in ("'no-*.nii.gz' matches no", "outside the image", "'name'"):
        assert words in told
