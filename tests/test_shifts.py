from __future__ import annotations

import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from seedaudit.errors import DataError, StudyError
from seedaudit.shifts import draw_shifts


def ball(count=2000, within=6.0, random_state=3, **options):
    return draw_shifts("ball", count=count, within=within, random_state=random_state, **options)


def normal(sd, count=2000, within=6.0, random_state=3):
    return draw_shifts("normal", count=count, within=within, random_state=random_state, sd=sd)


def shell(distances, count=300, random_state=3, **options):
    return draw_shifts(
        "shell",
        count=count,
        within=9.0,
        random_state=random_state,
        distances=distances,
        **options,
    )


def length(shifts):
    return np.linalg.norm(shifts, axis=1)


def test_ball_is_uniform_in_the_ball():
    """scipy.stats: the radius has density 3 r^2 / R^3, each coordinate 3 (R^2 - x^2) / (4 R^3)."""
    shifts = ball()
    assert length(shifts).max() <= 6
    assert stats.kstest(length(shifts), stats.powerlaw(3, scale=6).cdf).pvalue > 0.2
    for column in shifts.T:
        # that density is a beta(2, 2) stretched over (-R, R)
        assert stats.kstest(column, stats.beta(2, 2, loc=-6, scale=12).cdf).pvalue > 0.2


def test_normal_is_a_truncated_normal():
    """scipy.stats: the radius of an isotropic normal is chi with 3 df, cut at `within`."""
    shifts = normal(sd=2.5)
    assert length(shifts).max() <= 6
    chi = stats.chi(3, scale=2.5)
    assert stats.kstest(length(shifts), lambda r: chi.cdf(r) / chi.cdf(6.0)).pvalue > 0.2
    # nothing to cut: the standard deviation along each axis is the one asked for
    wide = normal(sd=2.5, within=50.0)
    for column in wide.T:
        assert stats.kstest(column, stats.norm(scale=2.5).cdf).pvalue > 0.2
        assert column.std() == pytest.approx(2.5, rel=0.02)


def test_a_normal_much_wider_than_its_limit_is_a_ball():
    """Exact limit."""
    found = length(normal(sd=1e4))
    assert stats.kstest(found, stats.powerlaw(3, scale=6).cdf).pvalue > 0.2


@pytest.mark.parametrize("shifts", [ball(), normal(sd=3.0), shell((2, 4, 6), count=1998)])
def test_directions_are_isotropic(shifts):
    """Exact: the mean direction is 0 and its second moment a third of the identity."""
    directions = shifts / length(shifts)[:, None]
    np.testing.assert_allclose(directions.mean(axis=0), 0, atol=0.01)
    np.testing.assert_allclose(directions.T @ directions / len(shifts), np.eye(3) / 3, atol=0.01)


@pytest.mark.parametrize("count", [1, 2, 37, 100])
def test_any_count_is_balanced_better_than_chance(count):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        shifts = ball(count=count)
    assert shifts.shape == (count, 3)
    if count == 100:
        # standard error of a mean coordinate of 100 independent points: R / sqrt(5) / 10
        assert np.abs(shifts.mean(axis=0)).max() < 6 / np.sqrt(5) / 10


def test_a_larger_count_continues_the_smaller():
    np.testing.assert_array_equal(ball(count=200)[:50], ball(count=50))


@pytest.mark.parametrize(
    "options",
    [
        {"draw": "ball"},
        {"draw": "normal", "sd": 2.0},
        {"draw": "shell", "distances": (2.0, 5.0)},
    ],
)
def test_draws_repeat_with_their_random_state_only(options):
    first, again, other = (
        draw_shifts(count=64, within=6.0, random_state=state, **options) for state in (7, 7, 8)
    )
    np.testing.assert_array_equal(first, again)
    assert np.abs(first - other).max() > 0.5


def test_shell_splits_the_count_over_the_distances():
    shifts = shell((2.0, 4.5, 9.0), count=100)
    found, times = np.unique(length(shifts).round(9), return_counts=True)
    np.testing.assert_array_equal(found, (2.0, 4.5, 9.0))
    np.testing.assert_array_equal(times, (34, 33, 33))


def test_shell_directions_are_evenly_spread():
    """Exact: a cap of height h holds h / 2 of the sphere; 300 random points miss by up to 0.08."""
    directions = shell((1.0,))
    axes = stats.uniform_direction(3, seed=1).rvs(200)
    for height in (0.2, 0.5, 1.0):
        share = (directions @ axes.T > 1 - height).mean(axis=0)
        np.testing.assert_allclose(share, height / 2, atol=0.025)
    nearest = np.sort(directions @ directions.T, axis=1)[:, -2]
    # 3.09 / sqrt(n) is the closest pair of this lattice (from memory; common practice)
    assert np.arccos(nearest).min() > 2.9 / np.sqrt(300)


def test_shells_are_turned_independently():
    shifts = shell((2.0, 4.0), count=60)
    inner, outer = shifts[:30] / 2, shifts[30:] / 4
    assert (inner @ outer.T).max(axis=1).min() < 0.999


@pytest.mark.parametrize(("step", "points"), [(1.0, 925), (2.0, 123), (6.0, 7), (4.0, 19)])
def test_lattice_holds_every_point_but_zero(step, points):
    """CHECKS 9b, OEIS A117609 at (6 / step)^2."""
    shifts = draw_shifts("lattice", count=1, within=6.0, random_state=0, step=step)
    assert len(np.unique(shifts, axis=0)) == len(shifts) == points - 1
    assert length(shifts).min() == step
    assert length(shifts).max() <= 6
    assert (np.diff(length(shifts)) >= -1e-9).all()
    np.testing.assert_allclose(shifts, step * np.rint(shifts / step), atol=1e-12)


def test_lattice_keeps_its_outermost_points():
    """Six points at 3 x 0.1, which is not 0.3 in floating point."""
    shifts = draw_shifts("lattice", count=1, within=0.3, random_state=0, step=0.1)
    assert len(shifts) == 123 - 1  # CHECKS 9b: radius 3 on a unit lattice


@settings(max_examples=20, deadline=None)
@given(st.sampled_from(["ball", "normal", "shell"]), st.integers(1, 90), st.floats(-3, 3))
def test_acceptance_draws_on_until_the_count_is_reached(draw, count, cut):
    options = {"count": max(count, 2), "within": 6.0, "random_state": 5}
    options |= {"sd": 3.0} if draw == "normal" else {}
    options |= {"distances": (4.0, 6.0)} if draw == "shell" else {}
    shifts = draw_shifts(draw, **options, accept=lambda s: s[:, 0] > cut)
    assert len(shifts) == max(count, 2)
    assert (shifts[:, 0] > cut).all()
    free = draw_shifts(draw, **options, accept=lambda s: np.ones(len(s), dtype=bool))
    np.testing.assert_array_equal(free, draw_shifts(draw, **options))


def test_accepted_draws_keep_the_distribution():
    """scipy.stats: half a ball has the radii of the whole one."""
    half = ball(count=1500, accept=lambda s: s @ (0.6, 0.0, 0.8) > 0)
    assert stats.kstest(length(half), stats.powerlaw(3, scale=6).cdf).pvalue > 0.2
    half = shell((4.0, 8.0), count=301, accept=lambda s: s[:, 1] > 0)
    np.testing.assert_array_equal(
        np.unique(length(half).round(9), return_counts=True)[1], (151, 150)
    )
    # the mean direction of a half sphere is half the radius along its axis
    mean = (half / length(half)[:, None]).mean(axis=0)
    np.testing.assert_allclose(mean, (0, 0.5, 0), atol=0.05)


def test_a_shell_batch_cut_short_favours_no_side():
    """Exact: thinned without regard to direction, the mean direction stays near 0."""
    for state in range(4):
        chance = np.random.default_rng(state)
        kept = shell(
            (1.0,), 600, state, accept=lambda s, chance=chance: chance.random(len(s)) < 0.75
        )
        # 0.02 is two standard errors; the last batch taken in order of height gives 0.17
        assert np.linalg.norm(kept.mean(axis=0)) < 0.07


def test_lattice_keeps_what_is_accepted():
    shifts = draw_shifts(
        "lattice", count=1, within=6.0, random_state=0, step=2.0, accept=lambda s: s[:, 2] > 0
    )
    # CHECKS 9b: of 123 points, 29 lie in the middle plane (x2 + y2 <= 9)
    assert len(shifts) == (123 - 29) / 2


def test_acceptance_under_one_percent_is_an_error():
    """A cap of height h of a ball: its share is h^2 (3R - h) / (4 R^3)."""
    with pytest.raises(DataError, match=r"inside: \d+ of 16384 drawn centres \(0\.[234]\d%\)"):
        ball(count=100, accept=lambda s: s[:, 0] > 6 - 0.42)  # 0.36 %
    assert len(ball(count=100, accept=lambda s: s[:, 0] > 6 - 1.0)) == 100  # 1.97 %
    with pytest.raises(DataError, match=r"inside: 0 of"):
        shell((4.0,), count=20, accept=lambda s: np.zeros(len(s), dtype=bool))


@pytest.mark.parametrize(
    ("draw", "left_out"),
    [("normal", {"sd": 3.0}), ("shell", {"distances": [6.0]}), ("lattice", {"step": 2.0})],
)
def test_what_is_left_out_follows_the_study_file(draw, left_out):
    """CONTRACT, [placements]: half of `within`, `within` alone, 2 mm."""
    options = {"count": 20, "within": 6.0, "random_state": 0}
    np.testing.assert_array_equal(
        draw_shifts(draw, **options), draw_shifts(draw, **options, **left_out)
    )


@pytest.mark.parametrize(
    ("options", "word"),
    [
        ({"draw": "cube"}, "draw: 'cube'; allowed: ball, normal, shell, lattice"),
        ({"count": 0}, "count: 0"),
        ({"within": 0.0}, "within: 0"),
        ({"within": np.inf}, "within: inf"),
        ({"random_state": -1}, "random_state: -1"),
        ({"draw": "normal", "sd": 0.0}, "sd: 0"),
        ({"draw": "lattice", "step": -1.0}, "step: -1"),
        ({"draw": "shell", "distances": []}, "distances: "),
        ({"draw": "shell", "distances": [3.0, 7.0]}, "distances: .* up to within = 6 mm"),
        ({"draw": "shell", "distances": [3.0, 0.0]}, "distances"),
        ({"draw": "shell", "distances": [1.0, 2.0], "count": 1}, "count: 1"),
    ],
)
def test_senseless_draws_are_refused(options, word):
    sound = {"draw": "ball", "count": 10, "within": 6.0, "random_state": 0}
    with pytest.raises(StudyError, match=word):
        draw_shifts(**(sound | options))


def test_all_problems_are_named_at_once():
    with pytest.raises(StudyError) as error:
        draw_shifts("ball", count=0, within=-1.0, random_state=-1)
    assert len(error.value.problems) == 3
