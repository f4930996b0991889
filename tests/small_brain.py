"""The brain of the small study: a grid, a mask, regions and signals in world space.

Smooth signals: one around the seed, one elsewhere that rises and falls with it, one that goes
against it, and one beside the seed that has nothing to do with it, so that moving the seed changes
the map. How strong the coupling is depends on the arm. All values are invented.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
SHAPE = (11, 14, 9)
EDGES = (4.1, 3.6, 4.6)  # mm
CENTRE = np.array([3.0, -41.0, 22.0])  # mm, world position of the grid's middle
SEED_AT = (-7.0, -48.0, 20.0)  # mm
PARTNER, OPPOSITE, BESIDE = (13.0, -29.0, 25.0), (8.0, -53.0, 31.0), (-10.0, -40.0, 15.0)  # mm
REGIONS = {1: "SeedSide", 2: "Partner", 5: "Opposite", 7: "Outside"}  # 7 has no voxel in the mask
MOTION = ("trans_x", "trans_y", "trans_z", "rot_x", "rot_y", "rot_z")


def base_affine() -> Array:
    """Give an affine (4, 4) with unequal edges, turned 12 degrees about z and 5 about x."""
    a, b = np.deg2rad([12.0, 5.0])
    about_z = np.array([[np.cos(a), -np.sin(a), 0], [np.sin(a), np.cos(a), 0], [0, 0, 1]])
    about_x = np.array([[1, 0, 0], [0, np.cos(b), -np.sin(b)], [0, np.sin(b), np.cos(b)]])
    affine = np.eye(4)
    affine[:3, :3] = about_z @ about_x @ np.diag(EDGES)
    affine[:3, 3] = CENTRE - affine[:3, :3] @ ((np.array(SHAPE) - 1) / 2)
    return affine


def positions() -> Array:
    """Give the world coordinate (X, Y, Z, 3) of every voxel of the base grid."""
    affine, ijk = base_affine(), np.moveaxis(np.indices(SHAPE), 0, -1)
    return np.asarray(ijk @ affine[:3, :3].T + affine[:3, 3])


def blob(centre: Sequence[float], width: float = 6.0) -> Array:
    """Give a Gaussian (X, Y, Z) of 1 at `centre`, SD `width` mm."""
    return np.asarray(np.exp(-np.sum((positions() - centre) ** 2, axis=-1) / (2 * width**2)))


def brain_mask() -> NDArray[np.bool_]:
    """Give an ellipsoid with one corner cut away, so that no reflection maps it on itself."""
    i, j, k = np.indices(SHAPE)
    middle, half = (np.array(SHAPE) - 1) / 2, 0.47 * np.array(SHAPE)
    ijk = np.stack([i, j, k], axis=-1)
    inside = np.sum(((ijk - middle) / half) ** 2, axis=-1) <= 1
    return np.asarray(inside & ~((i > 7) & (j > 8) & (k < 3)))


def label_volume(mask: NDArray[np.bool_]) -> NDArray[np.int16]:
    """Give the regions: balls around the signals inside the mask, and one wholly outside it."""
    labels = np.zeros(SHAPE, dtype=np.int16)
    for index, centre in ((1, (-4.0, -34.0, 24.0)), (2, PARTNER), (5, OPPOSITE)):
        near = np.sum((positions() - centre) ** 2, axis=-1) <= 10.0**2
        labels[near & mask & (labels == 0)] = index
    labels[:2, :3, :2] = 7
    labels[mask & (labels == 7)] = 0
    return labels


def smooth_noise(rng: np.random.Generator, n_volumes: int, count: int, memory: float) -> Array:
    """Give `count` AR(1) series (T, count) of unit variance."""
    series = rng.standard_normal((n_volumes, count))
    for t in range(1, n_volumes):
        series[t] = memory * series[t - 1] + np.sqrt(1 - memory**2) * series[t]
    return series


def bold_data(rng: np.random.Generator, motion: Array, rested: bool) -> Array:
    """Give one run (X, Y, Z, T) in the base orientation: signals, drift, motion and noise."""
    n_volumes = len(motion)
    seed, partner, opposite, beside = smooth_noise(rng, n_volumes, 4, 0.35).T
    coupling = 0.9 if rested else 0.5
    rest = np.sqrt(1 - coupling**2)
    signals = (
        (SEED_AT, seed),
        (PARTNER, coupling * seed + rest * partner),
        (OPPOSITE, -coupling * seed + rest * opposite),
        (BESIDE, beside),
    )
    data = 1000.0 + 80.0 * rng.standard_normal((*SHAPE, 1))
    data = data + 8.0 * rng.standard_normal((*SHAPE, n_volumes))
    for centre, series in signals:
        data += 18.0 * blob(centre)[..., None] * series
    data += 25.0 * rng.standard_normal((*SHAPE, 1)) * np.linspace(-1, 1, n_volumes)
    data += 4.0 * rng.standard_normal((*SHAPE, len(MOTION))) @ (motion / motion.std(axis=0)).T
    return np.asarray(data)


def motion_series(rng: np.random.Generator, n_volumes: int) -> Array:
    """Give six head motion series (T, 6), mm and rad, rounded as they stand in the table."""
    steps = rng.standard_normal((n_volumes, 6)) * ([0.03] * 3 + [0.0006] * 3)
    return np.asarray(np.round(np.cumsum(steps, axis=0), 6))
