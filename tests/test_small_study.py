"""The small study on disk, read back with nibabel, csv and tomllib: files and memory agree."""

from __future__ import annotations

import csv
import tomllib
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

from tests.small_brain import EDGES
from tests.small_study import REPETITION_TIME, SmallStudy, write_small_study


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> SmallStudy:
    return write_small_study(tmp_path_factory.mktemp("plain"))


def test_files_on_disk(study):
    folder = study.folder
    for path in [*study.bold_files.values(), study.mask_file, study.regions_file]:
        image = nib.load(path)
        assert int(image.header["sform_code"]) == 2
        assert int(image.header["qform_code"]) == 4
        assert image.header.get_xyzt_units() == ("mm", "sec")
        np.testing.assert_allclose(image.get_qform(), image.get_sform(), atol=1e-4)
        np.testing.assert_allclose(image.header.get_zooms()[:3], EDGES, rtol=1e-6)
        if image.ndim == 4:
            assert image.header.get_zooms()[3] == REPETITION_TIME
            assert 40 <= image.shape[3] <= 60
    kinds = {nib.load(path).header.get_data_dtype().str for path in study.bold_files.values()}
    assert kinds == {"<i2", "<f4", ">f4"}
    settings = tomllib.loads(study.study_file.read_text())
    assert set(settings) >= {"data", "cleaning", "seed", "placements", "group", "threshold"}
    for key in ("runs", "mask", "regions"):
        assert (folder / settings["data"][key]).is_file()


def read_table(path: Path) -> list[dict[str, str]]:
    """Read a TSV as a list of rows."""
    with path.open(newline="") as file:
        return list(csv.DictReader(file, delimiter="\t"))


def test_tables_agree_with_memory(study):
    runs = read_table(study.folder / "runs.tsv")
    assert [row["participant_id"] for row in runs].count("sub-03") == 2
    assert len(runs) == sum(len(arrays) for arrays in study.runs.values())
    for row in runs:
        confounds = read_table(study.folder / row["confounds"])
        _, _, nuisance = study.runs[row["participant_id"]][int(row["run"]) - 1]
        assert len(confounds) == len(nuisance)
        assert confounds[0]["framewise_displacement"] == "n/a"
        assert [float(line["rot_y"]) for line in confounds] == nuisance[:, 4].tolist()
    people = read_table(study.participants_file)
    assert tuple(row["arm"] for row in people) == study.arms
    assert {int(r["index"]) for r in read_table(study.folder / "networks_dseg.tsv")} == {1, 2, 5, 7}


def test_scaled_images_are_stored_as_integers(study):
    """The raw integers times slope plus intercept are the values in memory (NIfTI-1 standard)."""
    path = study.bold_files["sub-03", "1"]
    image = nib.load(path)
    raw = np.asarray(image.dataobj.get_unscaled())
    slope, intercept = image.dataobj.slope, image.dataobj.inter
    assert slope == pytest.approx(0.043)
    assert np.nanmean(raw * slope + intercept) == pytest.approx(1000, abs=10)  # base of the signals
    np.testing.assert_allclose(raw * slope + intercept, study.runs["sub-03"][0].data, rtol=1e-6)


@pytest.mark.parametrize(
    ("flip", "permute"),
    [((True, False, False), (0, 1, 2)), ((False, True, True), (2, 0, 1))],
)
def test_storage_orders_hold_the_same_world_data(study, tmp_path, flip, permute):
    """nibabel brings every storage order to the same canonical image."""
    other = write_small_study(tmp_path, flip=flip, permute=permute)
    pairs = [(study.mask_file, other.mask_file), (study.regions_file, other.regions_file)]
    pairs += [(study.bold_files[key], other.bold_files[key]) for key in study.bold_files]
    for mine, theirs in pairs:
        a, b = (nib.as_closest_canonical(nib.load(path)) for path in (mine, theirs))
        assert nib.load(mine).affine.tolist() != nib.load(theirs).affine.tolist()
        np.testing.assert_allclose(a.affine, b.affine, atol=1e-4)
        np.testing.assert_array_equal(a.get_fdata(), b.get_fdata())


def test_study_file_of_two_arms(tmp_path):
    two = write_small_study(tmp_path, model="~ arm + age", participants=4, two_runs=())
    group = tomllib.loads(two.study_file.read_text())["group"]
    assert group["model"] == "~ arm + age"
    assert group["effect"] == "arm[rested] - arm[restricted]"
    assert two.design.shape == (4, 3)
    with pytest.raises(ValueError, match="arm"):
        write_small_study(tmp_path, model="~ arm")
