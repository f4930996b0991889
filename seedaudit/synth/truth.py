"""What was planted, as numbers that an audit of the study can be compared with."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import product
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from seedaudit.synth.atlas import (
    AMPLITUDES,
    ARM_CONNECTION,
    ARM_COUPLING,
    BORDER_Y,
    NAMES,
    NEIGHBOUR,
    SEED_NETWORK,
    SEED_XZ,
    Warp,
    coupling,
    network_at,
)

Floats = NDArray[np.float64]

SEED_RADIUS = 6.0  # mm
INSIDE, ACROSS = 12.0, -8.0  # mm in front of the border, of the points to compare with
OTHER_SEEDS = {
    "left": (-8.0, BORDER_Y + INSIDE, 28.0),
    "right": (8.0, BORDER_Y + INSIDE, 28.0),
    "behind": (-8.0, BORDER_Y + ACROSS, 28.0),
}
"""Seeds of the study of several seeds: two in the seed's network, one across the border."""
SIGN_FROM = 0.2  # latent correlations below it are called 0
OCCIPITAL_TARGET = (14.0, -88.0, 6.0)  # mm, well inside the neighbour
CLAIMS: tuple[dict[str, Any], ...] = (
    {
        "claim": "occipital",
        "target": OCCIPITAL_TARGET,
        "expected": "breaks",
        "reason": "the target is in the network across the border; the seed's network has no "
        "connection with it",
    },
    {
        "claim": "lateral",
        "target": "lateral-parietal",
        "expected": "holds",
        "reason": "the networks on both sides of the border are connected with the target",
    },
    {
        "claim": "cerebellar",
        "target": "cerebellar",
        "expected": "open",
        "reason": "planted, but too weak to be seen in a small study",
    },
)


def seed_at(border_distance: float) -> tuple[float, float, float]:
    """Give the reported seed, mm, that stands so far in front of the planted border."""
    return (SEED_XZ[0], BORDER_Y + border_distance, SEED_XZ[1])


def border_distance(at: ArrayLike, warp: Warp) -> float | None:
    """Find how far behind a point a participant's own border lies.

    Parameters
    ----------
    at : (3,) array
        mm.
    warp : Warp

    Returns
    -------
    float or None
        mm towards posterior, negative when the point is already across; None beyond 20 mm.
    """
    steps = np.arange(-20, 20, 0.1)
    line = np.asarray(at) - steps[:, None] * (0, 1, 0)
    across = np.flatnonzero(network_at(warp(line)) == NAMES.index(NEIGHBOUR) + 1)
    return round(float(steps[across[0]]), 1) if len(across) else None


def expected_correlations(
    at: ArrayLike, radius: float, warps: Sequence[Warp], correlation: Floats
) -> Floats:
    """Correlation of a sphere's planted signal with every network, without noise.

    For the mean load m of the sphere on the networks (amplitudes included) and latent
    correlations C, it is C m / sqrt(m' C m).

    Parameters
    ----------
    at : (3,) array
        mm.
    radius : float
        mm.
    warps : sequence of Warp
        The sphere's load is averaged over them.
    correlation : (K, K) array

    Returns
    -------
    (K,) array
        NaN where the sphere holds no network.
    """
    steps = np.arange(-radius, radius + 0.5, 1.0)
    ball = np.array([p for p in product(steps, repeat=3) if np.linalg.norm(p) <= radius])
    counts = np.zeros(len(NAMES) + 1)
    for warp in warps:
        counts += np.bincount(
            network_at(warp(ball + np.asarray(at))).ravel(), minlength=len(counts)
        )
    mix = counts[1:] * AMPLITUDES
    with np.errstate(invalid="ignore"):
        return np.asarray(correlation @ mix / np.sqrt(mix @ correlation @ mix))


def _network_rows(values: Floats) -> dict[str, dict[str, float | int]]:
    return {
        name: {"r": round(float(r), 3) + 0.0, "sign": int(np.sign(r)) if abs(r) >= SIGN_FROM else 0}
        for name, r in zip(NAMES, values, strict=True)
    }


def _points(distance: float, warps: Sequence[Warp]) -> dict[str, Any]:
    """Say what to expect at the reported seed, deeper in its network, and across the border."""
    pooled = np.mean([coupling(arm) for arm in ARM_COUPLING], axis=0)
    places = {
        "reported": (seed_at(distance), SEED_NETWORK),
        "inside": (seed_at(INSIDE), SEED_NETWORK),
        "across": (seed_at(ACROSS), NEIGHBOUR),
    }
    return {
        name: {
            "at": at,
            "network": network,
            "expected": _network_rows(expected_correlations(at, SEED_RADIUS, warps, pooled)),
        }
        for name, (at, network) in places.items()
    }


def _arm_difference() -> dict[str, Any]:
    first, second = (NAMES.index(name) for name in ARM_CONNECTION)
    return {
        "connection": ARM_CONNECTION,
        "latent_r": {arm: round(float(coupling(arm)[first, second]), 3) for arm in ARM_COUPLING},
        "sign_rested_minus_restricted": 1,
        "age_effect": 0,
    }


def planted_truth(distance: float, warps: Mapping[str, Warp]) -> dict[str, Any]:
    """Collect what the study was built to show.

    Parameters
    ----------
    distance : float
        mm from the reported seed to the planted border.
    warps : mapping of participant label to Warp
    """
    at = seed_at(distance)
    return {
        "units": "mm; r is the correlation of latent signals without noise, arms pooled",
        "seed": {"name": "posterior", "at": at, "radius": SEED_RADIUS},
        "border": {
            "network": SEED_NETWORK,
            "neighbour": NEIGHBOUR,
            "distance": distance,
            "direction": "posterior",
            "direction_vector": (0, -1, 0),
            "nearest_point": seed_at(0),
            "distance_per_participant": {
                label: border_distance(at, warp) for label, warp in warps.items()
            },
        },
        "points": _points(distance, list(warps.values())),
        "latent_correlations": {
            "networks": NAMES,
            **{arm: (np.round(coupling(arm), 3) + 0.0).tolist() for arm in ARM_COUPLING},
        },
        "arm_difference": _arm_difference(),
        "steadier": {
            "direction_vector": (0, 1, 0),
            "reason": "away from the border, towards the middle of the seed's own network",
        },
        "other_seeds": {
            name: {"at": place, "network": NAMES[int(network_at(np.array(place))) - 1]}
            for name, place in OTHER_SEEDS.items()
        },
        "claims": {
            claim["claim"]: {"expected": claim["expected"], "reason": claim["reason"]}
            for claim in CLAIMS
        },
    }
