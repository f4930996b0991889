"""Decay with distance and tolerance, against scikit-learn, brute force and answers by hand."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from scipy.optimize import LinearConstraint, minimize

from seedaudit.consensus.tolerance import (
    DIRECTIONS,
    decay_fit,
    decay_fits,
    decay_table,
    most_fragile,
    sectors,
    tolerance_table,
)


def test_sectors_are_the_named_directions():
    """RAS+: x to the right, y to the front, z upwards. Trap: a left-right flip."""
    named = {
        "right": (3, -1, 2), "left": (-3, 2, 1), "anterior": (1, 4, -2), "posterior": (-1, -4, 3),
        "superior": (0, 1, 2), "inferior": (1, -1, -2.5), "all": (0, 0, 0),
    }  # fmt: skip
    found = sectors(np.array(list(named.values()), dtype=float))
    assert [DIRECTIONS[k] for k in found] == list(named)
    assert set(DIRECTIONS) == set(named)
    assert DIRECTIONS[sectors(np.array([[-2.0, 2.0, 2.0]]))[0]] == "left"  # a tie: the first axis


def test_the_fit_is_the_least_squares_falling_one():
    """Against constrained least squares by scipy.optimize."""
    rng = np.random.default_rng(0)
    x = np.sort(rng.uniform(0.5, 8, 14))
    y = 0.98 - 0.06 * x + 0.08 * rng.standard_normal(14)
    fit = decay_fit(x, y)
    falling = LinearConstraint(np.eye(14)[:-1] - np.eye(14)[1:], 0, np.inf)
    expected = minimize(
        lambda f: ((f - y) ** 2).sum(), np.sort(y)[::-1], constraints=[falling],
        bounds=[(-1, 1)] * 14, tol=1e-12,
    )  # fmt: skip
    np.testing.assert_allclose(fit.at(x), expected.x, atol=1e-5)
    assert fit.at(np.array([0.0]))[0] == 1
    assert np.isnan(fit.at(np.array([8.5]))[0])
    assert all(one >= other for one, other in pairwise(fit.fitted))


def test_tolerance_by_hand():
    fit = decay_fit(np.array([1.0, 2, 4, 6]), np.array([0.95, 0.9, 0.7, 0.7]))
    assert fit.tolerance(0.8) == (pytest.approx(3.0), False)  # half way from 2 to 4 mm
    assert fit.tolerance(0.95) == (pytest.approx(1.0), False)
    # never below: at least the farthest placement, censored
    assert fit.tolerance(0.7) == (6.0, True)
    steep = decay_fit(np.array([2.0, 3, 4]), np.array([0.0, 0.0, 0.0]))
    assert steep.tolerance(0.8) == (pytest.approx(0.4), False)
    # better than the reported placement is no reason to begin above 1
    better = decay_fit(np.array([1.0, 2, 3]), np.array([1.2, 1.1, 0.5]))
    assert better.fitted.max() == 1
    assert better.tolerance(0.75) == (pytest.approx(2.5), False)


def test_undefined_similarities_are_left_out():
    x = np.array([1.0, 2, 3, 4])
    fit = decay_fit(x, np.array([0.9, np.nan, 0.5, 0.3]))
    assert fit.n == 3
    assert decay_fit(x, np.array([0.9, np.nan, np.nan, 0.3])) is None


@pytest.fixture(scope="module")
def one_sided():
    """Similarity falls with the way to the back alone: 1 - 0.1 mm."""
    rng = np.random.default_rng(1)
    shifts = rng.uniform(-8, 8, (900, 3))
    similarity = {
        "dice_positive": 1 - 0.1 * np.maximum(-shifts[:, 1], 0),
        "dice_negative": np.full(900, np.nan),
        "spatial_r": np.ones(900),
    }
    return shifts, similarity


def test_directions_and_the_most_fragile(one_sided):
    shifts, similarity = one_sided
    fits = decay_fits(shifts, similarity)
    table = tolerance_table(fits)
    assert set(table["measure"]) == {"dice_positive", "dice_negative"}  # r alone has no target
    found = {
        direction: (tolerance, censored)
        for measure, direction, tolerance, censored in zip(
            table["measure"], table["direction"], table["tolerance"], table["censored"],
            strict=True,
        )
        if measure == "dice_positive"
    }  # fmt: skip
    # -y is 2 mm at the target, and 0.7 to 1 of the length of a shift in that sector
    assert 2 < found["posterior"][0] < 3
    assert not found["posterior"][1]
    assert found["anterior"] == (pytest.approx(np.linalg.norm(
        shifts[sectors(shifts) == DIRECTIONS.index("anterior")], axis=1).max()), True)  # fmt: skip
    assert most_fragile(table, "dice_positive") == "posterior"
    assert most_fragile(table, "dice_negative") is None
    lost = table["measure"] == "dice_negative"
    assert np.isnan(table["tolerance"][lost]).all()
    assert (table["n"][lost] == 0).all()


def test_decay_table(one_sided):
    shifts, similarity = one_sided
    fits = decay_fits(shifts, similarity)
    distances = np.arange(0, 14, 0.5)
    geometry = {"spatial_r": np.linspace(1, 0, len(distances))}
    table = decay_table(fits, distances, {"spatial_r": 0.9}, {"spatial_r": 0.1}, geometry)
    assert len({len(column) for column in table.values()}) == 1
    rows = (table["measure"] == "dice_positive") & (table["direction"] == "posterior")
    fit = fits["dice_positive", "posterior"]
    assert table["distance"][rows][-1] == fit.reach
    np.testing.assert_array_equal(table["fitted"][rows], fit.at(table["distance"][rows]))
    assert (table["n"][rows] == fit.n).all()
    assert np.isnan(table["geometry"][rows]).all()
    rows = (table["measure"] == "spatial_r") & (table["direction"] == "all")
    assert (table["ceiling"][rows] == 0.9).all()
    assert (table["floor"][rows] == 0.1).all()
    line = np.interp(table["distance"][rows], distances, geometry["spatial_r"])
    np.testing.assert_allclose(table["geometry"][rows], line)
    assert "dice_negative" not in table["measure"]
