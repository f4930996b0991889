"""The same task function on a real Dask cluster of processes, also with a worker killed."""

from __future__ import annotations

import gc
import os
import signal
import threading
import time
from dataclasses import replace

import numpy as np
import pytest

from seedaudit.auditing import plan_folds
from seedaudit.errors import DataError, StudyError
from seedaudit.preflight import make_plan
from seedaudit.study import Study
from seedaudit.sweep import cluster as module
from seedaudit.sweep import schedule
from seedaudit.sweep.keeper import Keeper
from seedaudit.sweep.moments import Moments
from seedaudit.sweep.schedule import sweep
from seedaudit.sweep.task import SearchTask
from tests.small_study import write_small_study

distributed = pytest.importorskip("distributed", reason="the extra `cluster` is not installed")


@pytest.fixture(scope="module")
def plan(tmp_path_factory):
    small = write_small_study(tmp_path_factory.mktemp("study"), participants=6)
    return make_plan(Study.load(small.study_file))


@pytest.fixture(scope="module")
def local(plan):
    return sweep(plan.sweep_task(plan.design.matrix), plan_folds(plan))


@pytest.fixture
def cluster():
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None,
        host="127.0.0.1", worker_dashboard_address=None,
    ) as running:  # fmt: skip
        yield running


def assert_same(one, other):
    for fold, again in zip(one.folds, other.folds, strict=True):
        np.testing.assert_array_equal(fold.zz, again.zz)
        np.testing.assert_array_equal(fold.xtz, again.xtz)
        np.testing.assert_array_equal(fold.count, again.count)
    assert [r.participant for r in one.records] == [r.participant for r in other.records]
    for a, b in zip(one.records, other.records, strict=True):
        np.testing.assert_array_equal(a.kept[0].similarity, b.kept[0].similarity)


def test_a_cluster_gives_the_same_digits(plan, local, cluster):
    told = []
    found = sweep(
        plan.sweep_task(plan.design.matrix), plan_folds(plan),
        cluster=cluster.scheduler_address, on_participant=told.append,
    )  # fmt: skip
    assert_same(local, found)
    assert {record.participant for record in told} == {r.participant for r in local.records}


def test_parts_of_a_fold_are_merged_in_pairs(plan, local, cluster, monkeypatch):
    """Folds of several parts, here of one participant each, also in tiles and with a search."""
    monkeypatch.setattr(module, "PART", 1)
    folds = [plan_folds(plan)[0] + plan_folds(plan)[1], [], *plan_folds(plan)[2:]]
    task = plan.sweep_task(plan.design.matrix)
    task = replace(task, searches=(SearchTask(task.weights, np.arange(0, len(plan.voxels), 7)),))
    expected = sweep(task, folds)
    found = sweep(task, folds, cluster=cluster.scheduler_address)
    assert_same(expected, found)
    for one, other in zip(expected.searches, found.searches, strict=True):
        np.testing.assert_array_equal(one[0].z, other[0].z)
        np.testing.assert_array_equal(one[0].count, other[0].count)


def test_the_client_holds_one_state_at_a_time(plan, local, cluster, monkeypatch, tmp_path):
    """When a fold has come and goes to its file, no other fold's state is with the client."""
    held = []

    class Watched(Keeper):
        def finished(self, fold, progress):
            gc.collect()
            states = [o for o in gc.get_objects() if isinstance(o, Moments) and o.n_placements]
            held.append(len([state for state in states if state is not progress.moments]))
            return super().finished(fold, progress)

    before = [o for o in gc.get_objects() if isinstance(o, Moments) and o.n_placements]
    monkeypatch.setattr(schedule, "Keeper", Watched)
    found = sweep(
        plan.sweep_task(plan.design.matrix), plan_folds(plan), scratch=tmp_path,
        cluster=cluster.scheduler_address,
    )  # fmt: skip
    assert held == [len(before)] * len(plan_folds(plan))
    for fold, again in zip(local.folds, found.folds, strict=True):
        for placement in range(fold.n_placements):
            one, other = (f.sums(placement, slice(None)) for f in (fold, again))
            np.testing.assert_array_equal(one.xtz, other.xtz)
            np.testing.assert_array_equal(one.zz, other.zz)


def slow_fold(task, fold, before):
    time.sleep(1.0)
    return module.run_fold(task, fold, before)


def test_a_killed_worker_loses_nothing(plan, local, cluster, monkeypatch):
    monkeypatch.setattr(module, "fold_on_worker", slow_fold)
    victim = next(iter(cluster.workers.values())).pid

    def kill():
        time.sleep(0.7)
        os.kill(victim, signal.SIGKILL)

    killer = threading.Thread(target=kill)
    killer.start()
    found = sweep(
        plan.sweep_task(plan.design.matrix), plan_folds(plan), cluster=cluster.scheduler_address
    )
    killer.join()
    assert_same(local, found)


def test_bad_data_on_a_worker_is_the_same_error(tmp_path, cluster):
    small = write_small_study(tmp_path, participants=3)
    plan = make_plan(Study.load(small.study_file))
    path = small.bold_files["sub-02", "1"]
    path.write_bytes(path.read_bytes()[:-3000])
    with pytest.raises(DataError, match=r"participant sub-02.*truncated"):
        sweep(
            plan.sweep_task(plan.design.matrix), plan_folds(plan),
            cluster=cluster.scheduler_address,
        )  # fmt: skip


def test_no_scheduler_at_the_address_is_a_clear_error(plan, monkeypatch):
    monkeypatch.setattr(module, "CONNECT", 1)
    with pytest.raises(StudyError, match="no scheduler answers"):
        sweep(plan.sweep_task(plan.design.matrix), plan_folds(plan), cluster="tcp://127.0.0.1:9")
