"""The same task function on a real Dask cluster of processes, also with a worker killed."""

from __future__ import annotations

import os
import signal
import threading
import time

import numpy as np
import pytest

from seedaudit.auditing import plan_folds
from seedaudit.errors import DataError, StudyError
from seedaudit.preflight import make_plan
from seedaudit.study import Study
from seedaudit.sweep import cluster as module
from seedaudit.sweep.schedule import sweep
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
