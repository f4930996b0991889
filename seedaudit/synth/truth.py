"""What was planted, as numbers that an audit of the study can be compared with."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import product
from typing import Any

import numpy as np
from numpy.typing import NDArray

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


def border_distance(at: Sequence[float], warp: Warp) -> float | None:
    """Find how far behind a point a participant's own border lies.

    Parameters
    ----------
    at : (3,) sequence
        mm.
    warp : Warp

    Returns
    -------
    float or None
        mm towards posterior, negative when the point is already across; None beyond 20 mm.
    """
    steps = np.arange(-20, 20, 0.1)
    line = np.array(at) - steps[:, None] * (0, 1, 0)
    across = np.flatnonzero(network_at(warp(line)) == NAMES.index(NEIGHBOUR) + 1)
    return round(float(steps[across[0]]), 1) if len(across) else None


def expected_correlations(
    at: Sequence[float], radius: float, warps: Sequence[Warp], correlation: Floats
) -> Floats:
    """Correlation of a sphere's planted signal with every network, without noise.

    For the mean load m of the sphere on the networks (amplitudes included) and latent
    correlations C, it is C m / sqrt(m' C m).

    Parameters
    ----------
    at : (3,) sequence
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
        counts += np.bincount(network_at(warp(ball + at)).ravel(), minlength=len(counts))
    mix = counts[1:] * AMPLITUDES
    with np.errstate(invalid="ignore"):
        return np.asarray(correlation @ mix / np.sqrt(mix @ correlation @ mix))


def _network_rows(values: Floats) -> dict[str, dict[str, float | int]]:
    return {
        name: {"r": round(float(r), 3), "sign": int(np.sign(r)) if abs(r) >= SIGN_FROM else 0}
        for name, r in zip(NAMES, values, strict=True)
    }


def planted_truth(
    distance: float, warps: dict[str, Warp], smallest_inside: float = 12.0
) -> dict[str, Any]:
    """Collect what the study was built to show.

    Parameters
    ----------
    distance : float
        mm from the reported seed to the planted border.
    warps : dict of participant label to Warp
    smallest_inside : float
        mm in front of the border at which the inner comparison point stands.
    """
    reported = np.array(seed_at(distance))
    points = {
        "reported": (reported, SEED_NETWORK),
        "inside": (np.array(seed_at(smallest_inside)), SEED_NETWORK),
        "across": (np.array(seed_at(-8.0)), NEIGHBOUR),
    }
    pooled = (coupling("rested") + coupling("restricted")) / 2
    drawn = list(warps.values())
    return {
        "units": "mm; r is the correlation of latent signals without noise",
        "seed": {"name": "posterior", "at": reported.tolist(), "radius": SEED_RADIUS},
        "border": {
            "network": SEED_NETWORK,
            "neighbour": NEIGHBOUR,
            "distance": distance,
            "direction": "posterior",
            "direction_vector": [0, -1, 0],
            "nearest_point": [float(reported[0]), BORDER_Y, float(reported[2])],
            "distance_per_participant": {
                label: border_distance(reported, warp) for label, warp in warps.items()
            },
        },
        "points": {
            name: {
                "at": point.tolist(),
                "network": network,
                "expected": _network_rows(expected_correlations(point, SEED_RADIUS, drawn, pooled)),
            }
            for name, (point, network) in points.items()
        },
        "latent_correlations": {
            arm: {"networks": list(NAMES), "r": np.round(coupling(arm), 3).tolist()}
            for arm in ARM_COUPLING
        },
        "arm_difference": {
            "connection": list(ARM_CONNECTION),
            "latent_r": {
                arm: round(float(coupling(arm)[tuple(map(NAMES.index, ARM_CONNECTION))]), 3)
                for arm in ARM_COUPLING
            },
            "sign_rested_minus_restricted": 1,
            "age_effect": 0,
        },
        "claims": {
            str(claim["claim"]): {"expected": claim["expected"], "reason": claim["reason"]}
            for claim in CLAIMS
        },
    }
