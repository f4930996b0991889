"""Prepared runs: the same digits without a second decompression, and never a stale one."""

from __future__ import annotations

import os
from dataclasses import replace

import nibabel as nib
import numpy as np
import pytest

from seedaudit.auditing import plan_folds
from seedaudit.errors import DataError
from seedaudit.inputs import volumes
from seedaudit.preflight import make_plan
from seedaudit.study import Study
from seedaudit.sweep import prepared as module
from seedaudit.sweep.prepared import PreparedRuns
from seedaudit.sweep.schedule import sweep
from tests.small_study import write_small_study


@pytest.fixture
def plan(tmp_path):
    small = write_small_study(tmp_path / "study", participants=3)
    return make_plan(Study.load(small.study_file))


def swept(plan, folder=None):
    task = replace(plan.sweep_task(plan.design.matrix), prepared=folder)
    return sweep(task, plan_folds(plan))


def test_the_second_time_nothing_is_decompressed_and_no_digit_changes(plan, tmp_path, monkeypatch):
    plain, first = swept(plan), swept(plan, tmp_path / "kept")

    def refuse(*_: object, **__: object) -> None:
        raise AssertionError("a run was read again")

    monkeypatch.setattr(module, "read_run", refuse)
    second = swept(plan, tmp_path / "kept")
    for fold, again, other in zip(plain.folds, first.folds, second.folds, strict=True):
        np.testing.assert_array_equal(fold.zz, again.zz)
        np.testing.assert_array_equal(fold.zz, other.zz)
        np.testing.assert_array_equal(fold.xtz, other.xtz)
    assert [r.digests for r in second.records] == [r.digests for r in plain.records]


def test_a_changed_file_is_read_again(plan, tmp_path):
    header = plan.first_run
    runs = PreparedRuns(tmp_path / "kept", plan.voxels, 0.0)
    before = np.array(runs.run(header).series)
    image = nib.Nifti1Image.from_filename(header.path)
    nib.save(nib.Nifti1Image(image.get_fdata()[..., ::-1], image.affine, image.header), header.path)
    after = runs.run(header)
    assert not np.array_equal(before, after.series)
    np.testing.assert_array_equal(after.series, volumes.read_run(header, plan.voxels).series)


def test_a_touched_but_equal_file_is_used(plan, tmp_path, monkeypatch):
    header = plan.first_run
    runs = PreparedRuns(tmp_path / "kept", plan.voxels, 0.0)
    expected = np.array(runs.run(header).series)
    os.utime(header.path, (1, 1))
    monkeypatch.setattr(module, "read_run", None)
    np.testing.assert_array_equal(runs.run(header).series, expected)


@pytest.mark.parametrize("what", ["series", "description"])
def test_damaged_prepared_runs_are_made_again(plan, tmp_path, what):
    header = plan.first_run
    runs = PreparedRuns(tmp_path / "kept", plan.voxels, 0.0)
    expected = np.array(runs.run(header).series)
    pattern = "*.json" if what == "description" else "*[0-9a-f].npy"
    for file in (tmp_path / "kept").rglob(pattern):
        file.write_bytes(file.read_bytes()[:40])
    np.testing.assert_array_equal(runs.run(header).series, expected)


def test_another_mask_or_smoothing_is_kept_apart(plan, tmp_path):
    header = plan.first_run
    few = plan.voxels.subset(np.arange(len(plan.voxels)) % 2 == 0)
    for voxels, smooth in [(plan.voxels, 0.0), (few, 0.0), (plan.voxels, 6.0)]:
        data = PreparedRuns(tmp_path / "kept", voxels, smooth).run(header)
        expected = volumes.read_run(header, voxels, smooth)
        np.testing.assert_array_equal(data.series, expected.series)
    assert len(list((tmp_path / "kept").iterdir())) == 3


def test_a_disk_that_refuses_is_a_clear_error(plan, tmp_path):
    (tmp_path / "kept").write_text("a file where the folder should be")
    with pytest.raises(DataError, match="prepared runs in kept: cannot be written"):
        PreparedRuns(tmp_path / "kept", plan.voxels, 0.0).run(plan.first_run)
