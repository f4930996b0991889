"""Does the search for a steadier seed find a planted best place, and stay where none is better?

Fold sums of z are drawn on a lattice of places directly. A place inside a ball-shaped parcel has
the parcel's target map; outside, the map changes with the direction from the parcel; at its border
maps mix. Each participant has a parcel centre and target maps of their own, and noise that
overlapping places share.

Run ``python -m tests.simulations.steadier_simulation --runs 200`` for the long version.
"""

from __future__ import annotations

import argparse
from dataclasses import dataclass, replace
from functools import cached_property, partial

import numpy as np

from seedaudit.consensus.neighbourhood import correlation_scores, fold_products
from seedaudit.consensus.steadier import Search, steadier_seed
from seedaudit.space.lattice import Neighbourhoods, ball_lattice, neighbourhoods


@dataclass(frozen=True)
class World:
    """What is planted.

    `best` is the centre of the parcel, mm from the reported seed; None: one homogeneous network,
    in which no place is better than another.
    """

    best: tuple[float, float, float] | None
    search: float = 6.0
    within: float = 4.0
    step: float = 2.0
    parcel: float = 6.0
    edge: float = 1.5
    border_sd: float = 1.0
    noise: float = 0.5
    targets: int = 300
    participants: int = 24
    folds: int = 8

    @cached_property
    def shifts(self) -> np.ndarray:
        """The lattice, mm."""
        return ball_lattice(self.search + self.within, self.step)

    @cached_property
    def around(self) -> Neighbourhoods:
        """The candidates and their neighbours."""
        usable = np.ones(len(self.shifts), bool)
        return neighbourhoods(self.shifts, usable, self.search, self.within, self.step)

    @cached_property
    def sharing(self) -> np.ndarray:
        """What makes noise at near places alike: correlation exp(-d^2 / 4 s^2), s = 2.5 mm."""
        gap = self.shifts[:, None] - self.shifts[None]
        covariance = np.exp(-(gap**2).sum(axis=-1) / (4 * 2.5**2))
        return np.linalg.cholesky(covariance + 1e-6 * np.eye(len(gap)))

    @cached_property
    def maps(self) -> np.ndarray:
        """Mean target maps of the parcel, and of the three directions around it."""
        return np.random.default_rng(1).normal(0, 0.3, (4, self.targets))

    def draw(self, rng: np.random.Generator, sizes: list[int]) -> np.ndarray:
        """Sums of z (G, M, B) of folds of new participants."""
        return np.stack([self._fold(rng, size) for size in sizes])

    def _fold(self, rng: np.random.Generator, size: int) -> np.ndarray:
        shape = (len(self.shifts), self.targets)
        total = self.sharing @ rng.normal(0, self.noise * np.sqrt(size), shape)
        for _ in range(size):
            own = self.maps + rng.normal(0, 0.2, self.maps.shape)
            total += self.mixture(rng.normal(0, self.border_sd, 3)) @ own
        return total

    def mixture(self, moved: np.ndarray) -> np.ndarray:
        """Weights (M, 4) of the maps at each place, of a parcel that lies that much off."""
        if self.best is None:
            return np.tile([1.0, 0.0, 0.0, 0.0], (len(self.shifts), 1))
        gap = self.shifts - self.best - moved
        length = np.linalg.norm(gap, axis=1, keepdims=True)
        share = 1 / (1 + np.exp((length - self.parcel) / self.edge))
        return np.hstack([share, (1 - share) * gap / np.maximum(length, 1e-9)])

    def search_once(self, rng: np.random.Generator) -> Search:
        """One study, searched."""
        sizes = [self.participants // self.folds] * self.folds
        products = fold_products(self.draw(rng, sizes), self.around)
        moved = np.linalg.norm(self.shifts[self.around.candidates], axis=1)
        return steadier_seed(partial(correlation_scores, products), moved, np.array(sizes))

    def expected_scores(self, rng: np.random.Generator, studies: int) -> np.ndarray:
        """Scores (studies, C) that half of the participants have, from new participants."""
        scores = []
        for _ in range(studies):
            sums = self.draw(rng, [self.participants // 2])
            products = fold_products(sums, self.around)
            scores.append(correlation_scores(products, np.ones((1, 1), bool)).stability[0])
        return np.array(scores)


@dataclass(frozen=True)
class Report:
    """Of every run: where it moved to, and the gain found, in-sample, and true."""

    recovered: np.ndarray
    kept: np.ndarray
    gain: np.ndarray
    gain_in: np.ndarray
    truth: np.ndarray
    covered: np.ndarray
    truth_error: float

    @property
    def bias(self) -> float:
        """Mean difference of the gain found in other people from the true gain."""
        return float(np.mean(self.gain - self.truth))

    @property
    def error(self) -> float:
        """Standard error of the bias: of the runs, and of the true gain's own simulation."""
        bias = self.gain - self.truth
        return float(np.hypot(bias.std(ddof=1) / np.sqrt(len(bias)), self.truth_error))

    def __str__(self) -> str:
        return (
            f"runs {len(self.gain)}: within one step {self.recovered.mean():.1%}, kept "
            f"{self.kept.mean():.1%}; gain in other people {self.gain.mean():.4f}, true "
            f"{self.truth.mean():.4f}, difference {self.bias:+.5f} (standard error "
            f"{self.error:.5f}); gain in-sample {self.gain_in.mean():.4f}; interval holds the true "
            f"gain in {self.covered.mean():.1%}"
        )


def simulate(world: World, runs: int, random_state: int, truth_from: int = 300) -> Report:
    """Search many studies of one world."""
    rng, other = np.random.default_rng(random_state).spawn(2)
    fresh = world.expected_scores(other, truth_from)
    fresh_gains = fresh - fresh[:, :1]
    expected = fresh_gains.mean(axis=0)
    best = np.zeros(3) if world.best is None else np.array(world.best)
    found = []
    chosen = np.zeros(len(expected))
    for _ in range(runs):
        search = world.search_once(rng)
        place = world.shifts[world.around.candidates[search.recommended]]
        truth = float(search.table["share_chosen"] @ expected)
        chosen += search.table["share_chosen"] / runs
        found.append(
            (
                np.linalg.norm(place - best) <= world.step + 1e-6,
                search.recommended == 0,
                search.gain,
                search.gain_in,
                truth,
                search.gain_low <= truth <= search.gain_high,
            )
        )
    truth_error = (fresh_gains @ chosen).std(ddof=1) / np.sqrt(truth_from)
    return Report(*np.array(found, dtype=float).T, float(truth_error))


BORDER = World(best=(4.0, 0.0, -2.0))
FLAT = World(best=None)
CENTRED = World(best=(0.0, 0.0, 0.0))


def main() -> None:
    """Print the long version."""
    parser = argparse.ArgumentParser(description=main.__doc__)
    parser.add_argument("--runs", type=int, default=200)
    runs = parser.parse_args().runs
    worlds = {
        "border": BORDER,
        "border in more noise": replace(BORDER, noise=1.0),
        "homogeneous": FLAT,
        "already best": CENTRED,
    }
    for number, (name, world) in enumerate(worlds.items()):
        print(f"{name}: {simulate(world, runs, number, 4 * runs)}", flush=True)


if __name__ == "__main__":
    main()
