"""Small grids shared by the tests of this room, and the same data stored another way."""

from __future__ import annotations

import nibabel as nib
import numpy as np
from hypothesis import strategies as st
from nibabel import orientations
from scipy.spatial.transform import Rotation

from seedaudit.space import Grid, VoxelSet

SHAPE = (9, 12, 10)

# the 45 degree turns are ties between two assignments of stored axes to R, A and S
turns = st.one_of(
    st.tuples(*[st.sampled_from([0.0, 45.0, -45.0, 90.0, 135.0, 180.0])] * 3),
    st.tuples(*[st.floats(-180, 180)] * 3),
)
storages = st.tuples(st.permutations([0, 1, 2]), st.tuples(*[st.sampled_from([1, -1])] * 3))


def affine_of(angles=(12.0, -20.0, 31.0), sizes=(2.0, 2.5, 3.5), shear=0.0, origin=(-9, 14, -6)):
    """Oblique, anisotropic, sheared on request."""
    skew = np.eye(3)
    skew[0, 1] = shear
    affine = np.eye(4)
    affine[:3, :3] = Rotation.from_euler("xyz", angles, degrees=True).as_matrix() @ skew * sizes
    affine[:3, 3] = origin
    return affine


def oblique(shape=SHAPE, **options):
    return Grid(shape, affine_of(**options))


def isotropic(size=2.0, shape=(31, 33, 35)):
    """Cubic voxels, with world (0, 0, 0) at the centre of voxel (15, 16, 17)."""
    affine = np.diag([size, size, size, 1.0])
    affine[:3, 3] = -size * np.array([15, 16, 17])
    return Grid(shape, affine)


def full(grid):
    return VoxelSet.from_mask(grid, np.ones(grid.shape, dtype=bool))


def restored(grid, volume, storage):
    """Store the same world data with other axes and directions (nibabel.orientations)."""
    axes, signs = storage
    turn = np.column_stack([axes, signs]).astype(float)
    stored = orientations.apply_orientation(volume, turn)
    affine = grid.affine @ orientations.inv_ornt_aff(turn, grid.shape)
    return Grid(stored.shape, affine), stored


def random_mask(shape=SHAPE, share=0.6, seed=0):
    return np.random.default_rng(seed).random(shape) < share


def image(grid, volume):
    return nib.Nifti1Image(volume, grid.affine)
