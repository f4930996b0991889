"""A study file from what is in a folder: it runs once the seed is filled in."""

from __future__ import annotations

import tomllib
import zlib

import nibabel as nib
import numpy as np
import pytest

from seedaudit.cli import main
from seedaudit.errors import StudyError
from seedaudit.preflight import make_plan
from seedaudit.starting import start_study
from seedaudit.study import Study
from tests.small_study import SEED_AT, write_small_study

AFFINE = np.diag([4.0, 4.0, 4.0, 1.0])


def write_image(path, volumes=1, code=4):
    path.parent.mkdir(parents=True, exist_ok=True)
    shape = (6, 7, 8) if volumes == 1 else (6, 7, 8, volumes)
    values = (
        np.random.default_rng(zlib.crc32(str(path).encode()))
        .integers(1, 99, shape)
        .astype(np.int16)
    )
    image = nib.Nifti1Image(values if volumes > 1 else np.ones(shape, np.int16), AFFINE)
    image.header.set_sform(AFFINE, code)
    nib.save(image, path)


def filled(folder, at):
    """The plan of the written file, with the seed's coordinate filled in."""
    path = folder / "study.toml"
    path.write_text(path.read_text().replace("# at = [x, y, z]", f"at = {list(map(float, at))}"))
    return make_plan(Study.load(path))


def test_a_study_with_everything(tmp_path, capsys):
    small = write_small_study(tmp_path, participants=4)
    small.study_file.unlink()
    assert main(["start", str(tmp_path)]) == 0
    told = capsys.readouterr().out
    assert "of 4 participants" in told
    assert "mask: mask.nii.gz" in told
    assert "regions: networks_dseg.nii.gz" in told
    # the seed is the one thing that only the user knows
    assert main(["check", str(tmp_path / "study.toml")]) == 2
    assert "seed[1].at: is missing" in capsys.readouterr().err
    plan = filled(tmp_path, SEED_AT)
    assert len(plan.participants) == 4
    assert plan.regions is not None
    text = (tmp_path / "study.toml").read_text()
    assert '# confounds = ["trans_*", "rot_*"' in text
    assert "# participants.tsv has the columns participant_id, " in text
    cleaned = text.replace("# [cleaning]", "[cleaning]").replace("# confounds", "confounds")
    assert tomllib.loads(cleaned)["cleaning"]["confounds"][:2] == ["trans_*", "rot_*"]


@pytest.mark.parametrize(
    ("names", "runs"),
    [
        (["sub-1_bold.nii.gz", "sub-2_bold.nii"], "*_bold.nii*"),
        (["sub-1/func/sub-1_bold.nii.gz", "sub-2/sub-2_bold.nii"], "**/*_bold.nii*"),
        (["rest one.nii.gz", 'rest "two".nii.gz'], ['rest "two".nii.gz', "rest one.nii.gz"]),
    ],
)
def test_plain_folders_of_images(tmp_path, names, runs):
    for name in names:
        write_image(tmp_path / name, volumes=12)
    write_image(tmp_path / "brain_mask.nii.gz")
    write_image(tmp_path / "anatomy.nii.gz")
    content = tomllib.loads(start_study(tmp_path).text)
    assert content["data"] == {"runs": runs, "mask": "brain_mask.nii.gz"}
    assert content["seed"] == [{"name": "seed", "space": "mni", "radius": 6}]


def test_of_a_bids_data_set_the_commonest_version_of_the_runs_is_taken(tmp_path):
    (tmp_path / "dataset_description.json").write_text("{}")
    for person in ("01", "02", "03"):
        for space in ("T1w", "MNI152NLin2009cAsym"):
            if (person, space) != ("03", "T1w"):
                name = f"sub-{person}_task-rest_space-{space}_desc-preproc_bold.nii.gz"
                write_image(tmp_path / f"sub-{person}" / "func" / name, volumes=12)
    write_image(tmp_path / "mask.nii.gz")
    found = start_study(tmp_path)
    content = tomllib.loads(found.text)
    assert content["data"]["bids"] == "."
    assert content["data"]["select"] == {
        "task": "rest", "space": "MNI152NLin2009cAsym", "desc": "preproc",
    }  # fmt: skip
    assert "space is MNI152NLin2009cAsym in 3 runs; also there: T1w" in found.told
    (tmp_path / "study.toml").write_text(found.text)
    assert len(filled(tmp_path, (1, 13, 13)).participants) == 3


def test_a_table_of_runs_comes_first(tmp_path):
    write_image(tmp_path / "a_bold.nii.gz", volumes=12)
    (tmp_path / "runs.tsv").write_text("participant_id\tbold\nsub-7\ta_bold.nii.gz\n")
    assert tomllib.loads(start_study(tmp_path).text)["data"]["runs"] == "runs.tsv"


def test_images_of_another_space_are_native(tmp_path):
    write_image(tmp_path / "a_bold.nii.gz", volumes=12, code=1)
    assert tomllib.loads(start_study(tmp_path).text)["seed"][0]["space"] == "native"


def test_labels_without_their_table_are_told(tmp_path):
    write_image(tmp_path / "a_bold.nii.gz", volumes=12)
    write_image(tmp_path / "labels.nii.gz")
    found = start_study(tmp_path)
    assert "labels.nii.gz may hold regions; it needs labels.tsv (index, name) beside it" in (
        found.told
    )
    assert "regions" not in tomllib.loads(found.text)["data"]
    (tmp_path / "labels.tsv").write_text("index\tname\n1\tonly\n")
    assert tomllib.loads(start_study(tmp_path).text)["data"]["regions"] == "labels.nii.gz"


def test_what_cannot_be_started_from(tmp_path):
    with pytest.raises(StudyError, match="is no folder"):
        start_study(tmp_path / "nowhere")
    write_image(tmp_path / "anatomy.nii.gz")
    (tmp_path / "broken.nii.gz").write_bytes(b"no image")
    with pytest.raises(StudyError, match="holds no run"):
        start_study(tmp_path)


def test_an_earlier_study_file_is_kept(tmp_path, capsys):
    write_image(tmp_path / "a_bold.nii.gz", volumes=12)
    (tmp_path / "study.toml").write_text("mine")
    assert main(["start", str(tmp_path)]) == 2
    assert "study.toml: exists" in capsys.readouterr().err
    assert (tmp_path / "study.toml").read_text() == "mine"
    assert main(["start", str(tmp_path), "--study", "other.toml"]) == 0
    assert main(["start", str(tmp_path), "--replace"]) == 0
    assert (tmp_path / "study.toml").read_text() == (tmp_path / "other.toml").read_text()
