"""A world in numbers whose answers are known: two networks with a plane between them.

The seed stands in one network at a known distance from the plane. What its sphere averages is a
mixture of the two networks' signals, by the share of its volume beyond the plane (the cap of a
sphere). All maps are made from time series, participant by participant. Values are invented.
"""

from __future__ import annotations

import os
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from seedaudit.shifts import draw_shifts
from seedaudit.sweep.correlate import ZBlock
from seedaudit.sweep.moments import Moments

Array = NDArray[np.float64]

LONG = os.environ.get("SEEDAUDIT_LONG_SIMULATIONS", "") not in ("", "0")
"""Set this environment variable to run the settings for hand runs."""


def replicates(short: int, long: int) -> int:
    """How many replicates this run makes."""
    return long if LONG else short


def told(what: str, value: float, n: int) -> float:
    """Print a result, for the table of hand runs (`pytest -s`), and give it back."""
    print(f"\n{what}: {value:.3f} (n = {n})", end="")
    return value


def allowed(rate: float, n: int, errors: float = 3.0) -> float:
    """How far a rate seen in n replicates may lie from its true value, by chance alone."""
    return errors * float(np.sqrt(rate * (1 - rate) / n))


@dataclass(frozen=True)
class World:
    """Settings of the world; lengths in mm.

    `border` is the distance of the plane behind the seed (infinite: there is none), `strength` the
    correlation of each network's target voxels with its signal, `own_border` the spread of the
    plane over participants.
    """

    border: float = 3.0
    radius: float = 4.0
    within: float = 8.0
    count: int = 24
    participants: int = 16
    volumes: int = 60
    voxels: int = 240
    strength: float = 0.5
    own_border: float = 0.0

    @property
    def shifts(self) -> Array:
        """Row 0 is the reported placement."""
        drawn = draw_shifts("ball", count=self.count, within=self.within, random_state=1)
        return np.vstack([np.zeros(3), drawn])

    def beyond(self, offset: float = 0.0) -> Array:
        """Share (1 + count,) of each sphere beyond the plane, which `offset` moves away."""
        if not np.isfinite(self.border):
            return np.zeros(self.count + 1)
        # distance of the plane behind each centre; y points to the front
        distance = self.border + offset + self.shifts[:, 1]
        height = np.clip(self.radius - distance, 0, 2 * self.radius)
        return height**2 * (3 * self.radius - height) / (4 * self.radius**3)

    def maps(self, rng: np.random.Generator) -> Array:
        """Fisher z (participants, 1 + count, voxels) of one study.

        A third of the voxels belongs to the seed's network, a third to the other one, a third to
        neither.
        """
        n, t, v = self.participants, self.volumes, self.voxels
        networks = rng.standard_normal((n, t, 2))
        member = np.arange(v) * 3 // v
        signal = np.where(member < 2, self.strength, 0.0)
        voxels = rng.standard_normal((n, t, v)) * np.sqrt(1 - signal**2)
        voxels += signal * networks[:, :, np.minimum(member, 1)]
        offsets = rng.normal(0, self.own_border, n) if self.own_border else np.zeros(n)
        mixture = np.array([self.beyond(offset) for offset in offsets])
        seeds = (
            networks[:, :, :1] * (1 - mixture[:, None])
            + networks[:, :, 1:] * mixture[:, None]
            + self._local_noise(rng)
        )
        return np.arctanh(_correlations(seeds, voxels))

    def _local_noise(self, rng: np.random.Generator) -> Array:
        """Noise of the sphere means (n, t, 1 + count): alike where the spheres overlap."""
        apart = np.linalg.norm(self.shifts[:, None] - self.shifts[None], axis=2)
        root = np.linalg.cholesky(np.exp(-((apart / 5) ** 2)) + 1e-6 * np.eye(len(apart)))
        noise = rng.standard_normal((self.participants, self.volumes, len(apart)))
        return 0.5 * noise @ root.T


def _correlations(seeds: Array, voxels: Array) -> Array:
    """Correlation (n, N, V) of series (n, t, N) and (n, t, V)."""
    one = seeds - seeds.mean(axis=1, keepdims=True)
    other = voxels - voxels.mean(axis=1, keepdims=True)
    one /= np.linalg.norm(one, axis=1, keepdims=True)
    other /= np.linalg.norm(other, axis=1, keepdims=True)
    return np.asarray(one.transpose(0, 2, 1) @ other)


def fold_moments(z: Array, n_folds: int = 8) -> tuple[list[Moments], list[int]]:
    """Moments of a one-sample model, participants dealt into folds in turn."""
    _, n_placements, n_voxels = z.shape
    folds, sizes = [], []
    for start in range(n_folds):
        part = z[start::n_folds]
        moments = Moments.empty(1, n_placements, n_voxels)
        for row in part:
            block = ZBlock(slice(0, n_voxels), row.astype(np.float32), np.ones(n_voxels, bool))
            moments.add(np.ones(1), block)
        folds.append(moments)
        sizes.append(len(part))
    return folds, sizes
