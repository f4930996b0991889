"""The lattice of a search sees, on its subset of voxels, what the placements see everywhere."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from seedaudit.auditing import plan_folds
from seedaudit.preflight import make_plan
from seedaudit.study import Study
from seedaudit.sweep.checkpoint import _read, _write
from seedaudit.sweep.fold import run_fold
from seedaudit.sweep.schedule import sweep, sweep_key
from seedaudit.sweep.task import SearchTask
from tests.small_study import write_small_study


@pytest.fixture(scope="module")
def searched(tmp_path_factory):
    """Lattice spheres that are the placements of the cloud, and a design of ones."""
    small = write_small_study(tmp_path_factory.mktemp("study"), participants=4)
    plan = make_plan(Study.load(small.study_file))
    task = plan.sweep_task(np.ones((4, 1)))
    targets = np.arange(0, len(plan.voxels), 7)
    return plan, replace(task, searches=(SearchTask(task.weights, targets),))


def test_sums_of_z_equal_those_of_the_placements(searched):
    plan, task = searched
    swept = sweep(task, plan_folds(plan))
    for fold, (search,) in zip(swept.folds, swept.searches, strict=True):
        targets = task.searches[0].targets
        np.testing.assert_allclose(search.z, fold.wide().xtz[0][:, targets], atol=1e-5)
        np.testing.assert_array_equal(search.count, fold.count[targets])
    for record in swept.records:
        np.testing.assert_allclose(record.search_coverage[0], record.coverage)


def test_progress_of_a_search_is_kept_on_disk(searched, tmp_path):
    plan, task = searched
    progress = run_fold(task, plan_folds(plan)[0])
    _write(tmp_path / "fold.npz", progress)
    again = _read(tmp_path / "fold.npz")
    np.testing.assert_array_equal(again.searches[0].z, progress.searches[0].z)
    np.testing.assert_array_equal(
        again.records[0].search_coverage[0], progress.records[0].search_coverage[0]
    )
    without = sweep_key(replace(task, searches=()), plan_folds(plan))
    changed = {name for name, value in sweep_key(task, plan_folds(plan)).items()
               if value != without[name]}  # fmt: skip
    assert changed == {"search for a steadier seed"}
