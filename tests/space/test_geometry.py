"""Smooth noise and balls, against the published and computed values of Gaussian smoothness."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import ndimage

from seedaudit.space.geometry import (
    FWHM_PER_SD,
    ball_mean_correlation,
    lag_correlation,
    smoothness,
)

# Means over two balls of radius R in noise of smoothness FWHM (mm), at these distances. Closed
# integral evaluated with scipy.integrate.quad; Monte Carlo agreed.
DISTANCES = [1, 2, 4, 6, 8, 10, 12]
BALLS = {
    (4, 4): [0.964205, 0.864049, 0.554024, 0.257627, 0.083109, 0.017548, 0.002288],
    (4, 6): [0.975710, 0.906248, 0.673612, 0.409046, 0.201639, 0.080025, 0.025329],
    (5, 6): [0.980210, 0.923077, 0.724951, 0.482167, 0.269405, 0.125040, 0.047566],
    (5, 8): [0.985580, 0.943534, 0.792251, 0.591314, 0.391574, 0.229488, 0.118669],
    (6, 4): [0.978985, 0.918830, 0.715047, 0.470903, 0.256266, 0.109181, 0.033781],
    (6, 6): [0.983936, 0.937219, 0.770729, 0.554024, 0.345423, 0.184518, 0.083109],
    (6, 8): [0.987589, 0.951246, 0.818404, 0.635933, 0.445241, 0.279955, 0.157438],
    (8, 6): [0.988974, 0.956648, 0.837834, 0.671716, 0.491465, 0.325370, 0.192062],
    (8, 8): [0.990933, 0.964205, 0.864049, 0.718845, 0.554024, 0.394184, 0.257627],
}
# The same with real spheres of voxels on a 2 mm grid, moved along an axis by 2, 4, 6, 8 mm.
VOXEL_SPHERES = {
    (5, 6): [0.928021, 0.740608, 0.505804, 0.292990],
    (6, 6): [0.939368, 0.777878, 0.565428, 0.357224],
    (6, 8): [0.952593, 0.822971, 0.643692, 0.454463],
    (8, 8): [0.963514, 0.861551, 0.714101, 0.547375],
}


@pytest.mark.parametrize(("radius", "fwhm"), BALLS)
def test_means_over_two_balls(radius, fwhm):
    found = ball_mean_correlation(DISTANCES, radius, fwhm)
    np.testing.assert_allclose(found, BALLS[radius, fwhm], atol=1.5e-6)
    assert ball_mean_correlation([0.0], radius, fwhm)[0] == pytest.approx(1)


@pytest.mark.parametrize(("radius", "fwhm"), VOXEL_SPHERES)
def test_real_spheres_are_close_to_balls(radius, fwhm):
    found = ball_mean_correlation([2, 4, 6, 8], radius, fwhm)
    np.testing.assert_allclose(found, VOXEL_SPHERES[radius, fwhm], atol=0.025)


def test_white_noise_is_shared_volume():
    """Equal spheres share 1 - 3x/4 + x^3/16 of their volume, x = d / R (Weisstein, MathWorld)."""
    shared = ball_mean_correlation([0, 2, 3, 9, 12, 30], 6.0, 0.0)
    np.testing.assert_allclose(shared, [1, 0.75231481, 0.6328125, 0.0859375, 0, 0], atol=1e-8)
    nearly = ball_mean_correlation([0, 2, 3, 9, 12, 30], 6.0, 0.1)
    np.testing.assert_allclose(nearly, shared, atol=0.015)


def test_limits_of_smoothness():
    assert ball_mean_correlation([0, 50], 6.0, np.inf).tolist() == [1, 1]
    assert np.isnan(ball_mean_correlation([1.0], 6.0, np.nan)).all()
    # scale invariance: only the ratios count
    one, other = ball_mean_correlation([4], 4, 4), ball_mean_correlation([8], 8, 8)
    np.testing.assert_allclose(one, other, atol=1e-9)


def test_smoothness_of_a_sampled_kernel():
    """Exact lag-1 correlation of gaussian_filter's kernel, by scipy: 0.778640 at SD 1 voxel,
    0.939413 at SD 2; the formula exp(-1 / 4 s^2) gives back FWHM 2.3548 s.
    """
    assert smoothness([0.939413] * 3, [1, 1, 1]) == pytest.approx(2 * FWHM_PER_SD, rel=1e-4)
    assert smoothness([0.778640] * 3, [3, 3, 3]) == pytest.approx(3 * FWHM_PER_SD, rel=1e-3)
    # unequal axes: the geometric mean; an axis without neighbours is left out
    rho = np.exp(-(np.array([2.0, 3.0]) ** 2) / (4 * np.array([2.0, 4.0]) ** 2))
    found = smoothness([*rho, np.nan], [2.0, 3.0, 5.0])
    assert found == pytest.approx(FWHM_PER_SD * np.sqrt(8), rel=1e-9)
    assert smoothness([0.5, -0.1, 0.5], [1, 1, 1]) == 0
    assert smoothness([0.5, 1.0, 0.5], [1, 1, 1]) == np.inf
    assert np.isnan(smoothness([np.nan] * 3, [1, 1, 1]))


def test_lag_correlation_of_simulated_noise():
    """Noise filtered with SD 2 voxels along one axis: 0.9394 at lag 1 (scipy), 0 across."""
    rng = np.random.default_rng(4)
    maps = ndimage.gaussian_filter(rng.standard_normal((30, 60, 40)), (0, 2, 0), mode="wrap")
    maps *= rng.uniform(0.5, 2, (30, 1, 1))  # maps differ in scale
    rows = np.arange(2400).reshape(60, 40)
    residuals = maps.reshape(30, -1)
    along = lag_correlation(residuals, rows[:-1].ravel(), rows[1:].ravel())
    across = lag_correlation(residuals, rows[:, :-1].ravel(), rows[:, 1:].ravel())
    assert along == pytest.approx(0.9394, abs=0.01)
    assert across == pytest.approx(0, abs=0.03)
    assert np.isnan(lag_correlation(residuals, rows[0, :0], rows[0, :0]))
