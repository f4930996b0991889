"""What smoothness and overlap alone make two nearby spheres share."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import spherical_jn

FloatArray = NDArray[np.float64]

FWHM_PER_SD = float(np.sqrt(8 * np.log(2)))

_REACH = 6.0  # spectral widths 1 / s: the Gaussian is below 1e-15 beyond


def ball_mean_correlation(distances: ArrayLike, radius: float, fwhm: float) -> FloatArray:
    """Correlation of the means over two equal balls of a smooth stationary noise field.

    Parameters
    ----------
    distances : (D,) array
        Distances of the centres, mm, 0 or more.
    radius : float
        Radius of the balls, mm, above 0.
    fwhm : float
        Smoothness of the field, as white noise filtered by a Gaussian of this full width at half
        maximum, mm; below a hundredth of the radius the field is white, and the shared volume
        alone counts; infinite gives 1, NaN gives NaN.

    Returns
    -------
    (D,) array, 0 to 1

    Notes
    -----
    With s = fwhm / sqrt(8 ln 2) the covariance of the field is exp(-d^2 / 4 s^2), its spectrum
    exp(-k^2 s^2), that of a ball mean 3 j1(kr) / kr, and the covariance of two means is the
    integral of k^2 (3 j1(kr) / kr)^2 exp(-k^2 s^2) sin(kd) / kd over k.
    """
    d = np.asarray(distances, dtype=np.float64)
    if not np.isfinite(fwhm):
        return np.full(d.shape, 1.0 if fwhm > 0 else np.nan)
    if fwhm < radius / 100:
        x = np.minimum(d / radius, 2.0)
        return np.asarray(1 - 0.75 * x + x**3 / 16)
    s = fwhm / FWHM_PER_SD
    # The integrand is even, smooth, and gone at both ends: equal steps converge at once. A step is
    # short beside the fastest oscillation, and beside the Gaussian.
    step = min(0.02 / s, 0.2 / (2 * radius + d.max(initial=0.0)))
    k = np.arange(1, int(_REACH / s / step) + 1) * step
    ball = 3 * spherical_jn(1, k * radius) / (k * radius)
    power = k**2 * ball**2 * np.exp(-((k * s) ** 2))
    covariance = np.sinc(np.multiply.outer(d, k) / np.pi) @ power
    return np.asarray(covariance / power.sum())


def lag_correlation(
    residuals: NDArray[np.floating[Any]],
    first: NDArray[np.integer[Any]],
    second: NDArray[np.integer[Any]],
) -> float:
    """Correlation of neighbouring voxels over noise maps of mean zero.

    Parameters
    ----------
    residuals : (M, V) array
        Residual maps; one is enough.
    first, second : (E,) int arrays
        Rows of the voxels of each pair of neighbours.

    Returns
    -------
    float
        Over all maps and pairs together; NaN without a pair or variation.
    """
    products, squares_first, squares_second = 0.0, 0.0, 0.0
    for row in residuals.astype(np.float64):
        one, other = row[first], row[second]
        products += one @ other
        squares_first += one @ one
        squares_second += other @ other
    scale = np.sqrt(squares_first * squares_second)
    return float(products / scale) if scale > 0 else float("nan")


def smoothness(lag_one: ArrayLike, steps: ArrayLike) -> float:
    """Smoothness of a noise field from the correlation of neighbours along each axis.

    Parameters
    ----------
    lag_one : (3,) array
        Correlation of voxels one step apart; NaN where an axis has no neighbours.
    steps : (3,) array
        Length of a step along each axis, mm.

    Returns
    -------
    float
        Full width at half maximum, mm: the geometric mean over the axes of
        step sqrt(-2 ln 2 / ln rho). 0 where an axis shows no correlation; infinite where one is
        perfect; NaN without any neighbours.

    Notes
    -----
    The estimator needs a kernel of 0.75 voxel (SD) or more: a narrower one is sampled too coarsely
    for exp(-d^2 / 4 s^2) to hold. Forman S.D. et al. (1995) Magn. Reson. Med. 33:636-647.
    """
    rho, step = np.asarray(lag_one, np.float64), np.asarray(steps, np.float64)
    known = ~np.isnan(rho)
    if not known.any():
        return float("nan")
    if (rho[known] <= 0).any():
        return 0.0
    if (rho[known] >= 1).any():
        return float("inf")
    widths = step[known] * np.sqrt(-2 * np.log(2) / np.log(rho[known]))
    return float(np.exp(np.log(widths).mean()))
