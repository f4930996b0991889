"""An invented brain in MNI world millimetres: tissues, networks, and each participant's borders."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product

import numpy as np
from numpy.typing import NDArray

from seedaudit.space.grid import Grid, VoxelSet

Floats = NDArray[np.float64]

CSF, GREY, WHITE = 1, 2, 3
BASELINE = {0: 0.0, CSF: 1100.0, GREY: 900.0, WHITE: 800.0}

BORDER_Y = -60.0  # mm; the plane that the seed's network shares with its posterior neighbour
SEED_XZ = (-8.0, 28.0)
SEED_NETWORK = "posterior-midline"
NEIGHBOUR = "visual-medial"
ARM_CONNECTION = ("posterior-midline", "frontal-midline")
ARM_COUPLING = {"rested": 0.70, "restricted": 0.0}


@dataclass(frozen=True)
class Network:
    """A network as balls in the right hemisphere; each ball is mirrored to the left.

    Parameters
    ----------
    name : str
    amplitude : float
        Standard deviation of its signal, relative to the other networks.
    nodes : tuple of (x, y, z, radius)
        mm.
    """

    name: str
    amplitude: float
    nodes: tuple[tuple[float, float, float, float], ...]


# The two balls at y = -46 and y = -74 have one radius, so their border is the plane half-way.
NETWORKS = (
    Network(SEED_NETWORK, 1.0, ((8, -46, 28, 18), (26, -36, -16, 9))),
    Network("lateral-parietal", 1.0, ((48, -60, 34, 15), (57, -20, -16, 12))),
    Network("frontal-midline", 1.0, ((7, 52, 8, 16), (7, 44, -10, 11), (20, 34, 44, 12))),
    Network("sensorimotor", 1.0, ((38, -24, 56, 15), (8, -16, 62, 12), (53, -8, 32, 12))),
    Network(NEIGHBOUR, 1.7, ((8, -74, 28, 18), (10, -86, 4, 16), (27, -84, 10, 11))),
    Network("attention-dorsal", 1.0, ((27, -58, 56, 13), (27, 0, 54, 11), (46, -66, -4, 12))),
    Network("salience-insular", 1.0, ((38, 16, -2, 13), (5, 20, 38, 13), (57, -34, 26, 9))),
    Network("cerebellar", 1.0, ((28, -62, -38, 14), (8, -70, -32, 12))),
)
NAMES = tuple(network.name for network in NETWORKS)
AMPLITUDES = np.array([network.amplitude for network in NETWORKS])

# Correlations between latent time courses; pairs that are not listed are 0.
COUPLINGS = {
    (SEED_NETWORK, "lateral-parietal"): 0.60,
    (SEED_NETWORK, "attention-dorsal"): -0.55,
    (SEED_NETWORK, "salience-insular"): -0.40,
    (SEED_NETWORK, "cerebellar"): 0.10,
    (NEIGHBOUR, "lateral-parietal"): 0.50,
    (NEIGHBOUR, "attention-dorsal"): 0.55,
    (NEIGHBOUR, "frontal-midline"): -0.35,
    (NEIGHBOUR, "sensorimotor"): 0.40,
    (NEIGHBOUR, "cerebellar"): 0.10,
    ("lateral-parietal", "frontal-midline"): 0.20,
    ("frontal-midline", "attention-dorsal"): -0.40,
    ("attention-dorsal", "sensorimotor"): 0.30,
    ("attention-dorsal", "salience-insular"): 0.35,
    ("sensorimotor", "salience-insular"): 0.20,
    ("sensorimotor", "cerebellar"): 0.25,
}


def nearest_correlation(matrix: Floats) -> Floats:
    """Clip the eigenvalues of a symmetric matrix at 0.02 and rescale its diagonal to 1.

    Parameters
    ----------
    matrix : (K, K) array
    """
    values, vectors = np.linalg.eigh(matrix)
    clipped = (vectors * np.maximum(values, 0.02)) @ vectors.T
    scale = 1 / np.sqrt(np.diag(clipped))
    return np.asarray(clipped * np.outer(scale, scale))


def coupling(arm: str) -> Floats:
    """Give the planted correlations between networks in one arm, (K, K)."""
    matrix = np.eye(len(NETWORKS))
    pairs = {**COUPLINGS, ARM_CONNECTION: ARM_COUPLING[arm]}
    for (first, second), value in pairs.items():
        i, j = NAMES.index(first), NAMES.index(second)
        matrix[i, j] = matrix[j, i] = value
    return nearest_correlation(matrix)


def network_at(xyz: Floats) -> NDArray[np.int32]:
    """Give the network that owns each point: 1 to K, or 0 for none.

    The owner is the ball whose surface is nearest (distance minus radius), if the point is in it.

    Parameters
    ----------
    xyz : (..., 3) array
        mm.
    """
    points = np.asarray(xyz, dtype=np.float64)
    owner = np.zeros(points.shape[:-1], dtype=np.int32)
    nearest = np.zeros(points.shape[:-1])
    for index, network in enumerate(NETWORKS, start=1):
        for (x, y, z, radius), side in product(network.nodes, (-1, 1)):
            outside = np.linalg.norm(points - (side * x, y, z), axis=-1) - radius
            closer = outside < nearest
            owner[closer], nearest[closer] = index, outside[closer]
    return owner


@dataclass(frozen=True)
class Warp:
    """A smooth random displacement of the borders, as a sum of cosine waves.

    Random waves with normal frequencies approximate a Gaussian field with a Gaussian
    covariance (Rahimi A., Recht B. 2007), and so do not depend on a grid.

    Parameters
    ----------
    frequencies : (F, 3) array
        Radian per mm.
    phases : (F,) array
    amplitudes : (F, 3) array
        mm.
    """

    frequencies: Floats
    phases: Floats
    amplitudes: Floats

    def __call__(self, xyz: Floats) -> Floats:
        """Give the place in the undisplaced brain that each point (..., 3) belongs to."""
        return xyz + np.cos(xyz @ self.frequencies.T + self.phases) @ self.amplitudes


def draw_warps(
    rng: np.random.Generator, count: int, sd: float, length: float = 25.0
) -> tuple[Warp, ...]:
    """Draw warps whose mean is no displacement, so that the planted border is the average one.

    Parameters
    ----------
    rng : numpy.random.Generator
    count : int
        At least 2.
    sd : float
        SD of the displacement over participants, per axis, mm.
    length : float
        Correlation length of the displacement, mm.
    """
    waves = 48
    frequencies = rng.standard_normal((waves, 3)) / length
    phases = rng.uniform(0, 2 * np.pi, waves)
    amplitudes = rng.standard_normal((count, waves, 3)) * sd * np.sqrt(2 / waves)
    amplitudes = (amplitudes - amplitudes.mean(axis=0)) * np.sqrt(count / (count - 1))
    return tuple(Warp(frequencies, phases, personal) for personal in amplitudes)


def network_loads(xyz: Floats, voxel_size: float, warp: Warp | None = None) -> NDArray[np.float32]:
    """Give the share of each voxel that belongs to each network, (V, K), from 8 points a voxel.

    Parameters
    ----------
    xyz : (V, 3) array
        Voxel centres, mm.
    voxel_size : float
        mm.
    warp : Warp, optional
    """
    loads = np.zeros((len(xyz), len(NETWORKS) + 1), dtype=np.float32)
    rows = np.arange(len(xyz))
    for corner in product((-0.25, 0.25), repeat=3):
        points = xyz + np.array(corner) * voxel_size
        loads[rows, network_at(warp(points) if warp else points)] += 0.125
    return loads[:, 1:]


def _ellipsoid(xyz: Floats, centre: tuple[float, ...], semi: tuple[float, ...]) -> Floats:
    """Distance from a centre in units of the semi-axes: below 1 inside."""
    return np.asarray(np.linalg.norm((xyz - centre) / semi, axis=-1))


def tissue_at(xyz: Floats) -> NDArray[np.int8]:
    """Give the tissue at each point: 0 outside the brain, or CSF, GREY, WHITE.

    Parameters
    ----------
    xyz : (..., 3) array
        mm.
    """
    x, y, z = np.abs(xyz[..., 0]), xyz[..., 1], xyz[..., 2]
    mirrored = np.stack([x, y, z], axis=-1)
    depth = 68 * (1 - _ellipsoid(xyz, (0, -17, 9), (67, 85, 63)))
    small = 30 * (1 - _ellipsoid(xyz, (0, -61, -36), (47, 31, 23)))
    depth = np.maximum(depth, small)
    fold = np.sin(x / 5.5 + y / 13) * np.sin(y / 6.5 - z / 15) + np.sin(z / 6 + x / 17)
    medial = (x < 8) & ((z > 24) | (y > 34) | (y < -44))
    nuclei = (_ellipsoid(mirrored, (25, 3, 2), (8, 15, 9)) < 1) | (
        _ellipsoid(mirrored, (10, -18, 8), (8, 12, 8)) < 1
    )
    tissue = np.full(depth.shape, WHITE, dtype=np.int8)
    tissue[(depth < 11 + 6 * fold) | medial | nuclei | (network_at(xyz) > 0)] = GREY
    sulcus = (depth < 13) & (np.abs(fold) < 0.09)
    fissure = (x < 1.2) & medial
    tissue[sulcus | fissure | (depth < 2) | ventricle_at(xyz)] = CSF
    tissue[depth <= 0] = 0
    return tissue


def ventricle_at(xyz: Floats) -> NDArray[np.bool_]:
    """Tell which points (..., 3) lie in the two ventricles."""
    mirrored = np.concatenate([np.abs(xyz[..., :1]), xyz[..., 1:]], axis=-1)
    return (_ellipsoid(mirrored, (11, -2, 17), (7, 27, 8)) < 1) | (
        _ellipsoid(mirrored, (22, -38, 10), (8, 13, 9)) < 1
    )


@dataclass(frozen=True)
class Brain:
    """The template on a grid.

    Parameters
    ----------
    voxels : VoxelSet
        The brain mask.
    baseline : (V,) array
        Mean signal.
    grey, ventricle : (V,) bool arrays
    motion : (V, 6) array
        Signal change per mm along x, y, z and per radian about them: minus gradient times
        displacement, so that it is large where the brain ends.
    """

    voxels: VoxelSet
    baseline: Floats
    grey: NDArray[np.bool_]
    ventricle: NDArray[np.bool_]
    motion: Floats


def build_brain(voxel_size: float) -> Brain:
    """Build the brain on a grid with the extent of the MNI field of view, stored left-handed.

    Parameters
    ----------
    voxel_size : float
        mm.
    """
    shape = tuple(int(extent // voxel_size) + 1 for extent in (180, 216, 180))
    affine = np.diag([-voxel_size, voxel_size, voxel_size, 1.0])
    affine[:3, 3] = (90, -126, -72)
    grid = Grid((shape[0], shape[1], shape[2]), affine)
    everywhere = grid.to_world(np.moveaxis(np.indices(shape), 0, -1))
    voxels = VoxelSet.from_mask(grid, tissue_at(everywhere) > 0)
    corners = [np.array(c) * voxel_size for c in product((-0.25, 0.25), repeat=3)]
    tissues = np.stack([tissue_at(voxels.xyz + corner) for corner in corners])
    levels = np.array([BASELINE[code] for code in range(4)])
    baseline = levels[tissues].mean(axis=0)
    slopes = np.gradient(voxels.volume(baseline, fill=0), voxel_size)
    # The first axis runs from right to left, so its slope changes sign in world coordinates.
    slope = np.stack([-slopes[0], slopes[1], slopes[2]], axis=-1)[tuple(voxels.ijk.T)]
    return Brain(
        voxels,
        baseline,
        (tissues == GREY).mean(axis=0) >= 0.5,
        ventricle_at(voxels.xyz),
        -np.concatenate([slope, np.cross(voxels.xyz, slope)], axis=1),
    )
