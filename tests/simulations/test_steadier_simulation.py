"""A short version of the simulation; run the module itself for the long one."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.simulations.steadier_simulation import BORDER, CENTRED, FLAT, simulate

RUNS = 40


def small(world):
    """The same world with fewer target voxels, and no place far from the best one."""
    return replace(world, targets=150, search=4.5)


@pytest.fixture(scope="module")
def border():
    return simulate(small(BORDER), RUNS, random_state=0, truth_from=200)


@pytest.fixture(scope="module")
def flat():
    return simulate(small(FLAT), RUNS, random_state=1, truth_from=200)


def test_planted_best_place_is_found_within_one_lattice_step(border):
    assert border.recovered.mean() >= 0.8


def test_the_reported_seed_is_kept_where_none_is_better(flat):
    assert flat.kept.mean() >= 0.9
    assert simulate(small(CENTRED), RUNS, random_state=2, truth_from=20).kept.mean() >= 0.9


def test_the_gain_in_other_people_is_unbiased_and_the_one_in_the_same_people_is_not(border, flat):
    # three standard errors: one chance in 400 for each, of a fixed random state
    for report in (border, flat):
        assert abs(report.bias) <= 3 * report.error
    too_good = flat.gain_in - flat.truth
    error = np.hypot(too_good.std(ddof=1) / np.sqrt(RUNS), flat.truth_error)
    assert too_good.mean() > 3 * error


def test_the_interval_holds_the_true_gain(border, flat):
    # 95 % wished for; 80 runs at 95 % have fewer than 71 hits in one of 100 cases
    assert np.mean([border.covered, flat.covered]) >= 0.88
