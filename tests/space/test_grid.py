from __future__ import annotations

import pickle

import nibabel as nib
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from nilearn.masking import apply_mask

from seedaudit.errors import DataError
from seedaudit.space import Grid, VoxelSet
from tests.space.samples import (
    SHAPE,
    affine_of,
    full,
    image,
    isotropic,
    oblique,
    random_mask,
    restored,
    storages,
    turns,
)

# CHECKS 15c: the example of the NIfTI-1 standard, a common 2 mm grid, a turn about z
STANDARD = np.array([[2, 0, 0, -9], [0, -3, 0, 16], [0, 0, 4, -20], [0, 0, 0, 1.0]])
COMMON = np.array([[-2, 0, 0, 90], [0, 2, 0, -126], [0, 0, 2, -72], [0, 0, 0, 1.0]])


@pytest.mark.parametrize(("affine", "letters"), [(STANDARD, "RPS"), (COMMON, "LAS")])
def test_orientation_of_the_standard_headers(affine, letters):
    """CHECKS 15c."""
    assert Grid((10, 12, 14), affine).orientation == letters


@pytest.mark.parametrize(
    ("xyz", "ijk"), [((0, -53, 26), (45, 36.5, 49)), ((-5, -49, 40), (47.5, 38.5, 56))]
)
def test_literature_seeds_on_the_common_grid(xyz, ijk):
    """CHECKS 15d: both lie half-way between voxels."""
    grid = Grid((91, 109, 91), COMMON)
    np.testing.assert_allclose(grid.to_voxel(xyz), ijk, atol=1e-12)
    np.testing.assert_allclose(grid.to_world(ijk), xyz, atol=1e-12)


@settings(max_examples=40, deadline=None)
@given(turns, st.floats(-0.3, 0.3))
def test_conversions_agree_with_nibabel(angles, shear):
    """Other library: nibabel.affines."""
    grid = oblique(angles=angles, shear=shear)
    points = np.random.default_rng(1).uniform(-50, 50, (4, 5, 3))
    world = grid.to_world(points)
    np.testing.assert_allclose(world, nib.affines.apply_affine(grid.affine, points), atol=1e-10)
    np.testing.assert_allclose(grid.to_voxel(world), points, atol=1e-10)
    np.testing.assert_allclose(grid.voxel_sizes, nib.affines.voxel_sizes(grid.affine))
    assert grid.voxel_volume == pytest.approx(2 * 2.5 * 3.5)  # shear keeps the volume
    assert grid.largest_edge == pytest.approx(nib.affines.voxel_sizes(grid.affine).max())


@pytest.mark.parametrize("axes", [(0, 1, 2), (2, 0, 1), (1, 0, 2)])
def test_orientation_agrees_with_nibabel(axes):
    """Other library: nibabel.aff2axcodes, on an oblique grid stored six ways."""
    grid, _ = restored(oblique(), np.zeros(SHAPE), (axes, (1, -1, -1)))
    assert grid.orientation == "".join(nib.aff2axcodes(grid.affine))


@settings(max_examples=80, deadline=None)
@given(turns, st.floats(-0.3, 0.3), storages)
def test_order_does_not_depend_on_storage(angles, shear, storage):
    """Exact property: METHODS 1, the same world data stored another way is the same list."""
    grid, mask = oblique(angles=angles, shear=shear), random_mask()
    here = VoxelSet.from_mask(grid, mask)
    there = VoxelSet.from_mask(*restored(grid, mask, storage))
    assert len(here) == mask.sum()
    np.testing.assert_allclose(there.xyz, here.xyz, atol=1e-9)


@settings(max_examples=20, deadline=None)
@given(storages)
def test_order_is_that_of_the_closest_canonical_image(storage):
    """Other library: nibabel.as_closest_canonical, then first axis fastest."""
    grid, stored = restored(oblique(), random_mask(), storage)
    canonical = nib.as_closest_canonical(image(grid, stored.astype(np.uint8)))
    found = np.argwhere(canonical.get_fdata().T > 0)[:, ::-1]
    expected = nib.affines.apply_affine(canonical.affine, found)
    np.testing.assert_allclose(VoxelSet.from_mask(grid, stored).xyz, expected, atol=1e-9)


@settings(max_examples=20, deadline=None)
@given(storages)
def test_file_order_points_into_the_stored_bytes(storage):
    """Other library: the bytes nibabel writes are the volume with its first axis fastest."""
    grid, stored = restored(oblique(), random_mask(), storage)
    volume = np.random.default_rng(2).normal(size=stored.shape)
    voxels = VoxelSet.from_mask(grid, stored)
    as_stored = np.frombuffer(image(grid, volume).to_bytes(), dtype=np.float64, offset=352)
    np.testing.assert_array_equal(as_stored[voxels.file_order], volume[tuple(voxels.ijk.T)])


def test_values_agree_with_nilearn_for_an_image_stored_as_ras():
    """Other library: nilearn.masking.apply_mask, which lists voxels with the last axis fastest."""
    grid, mask = oblique(angles=(4, -6, 8)), random_mask()
    voxels = VoxelSet.from_mask(grid, mask)
    volume = np.random.default_rng(3).normal(size=SHAPE)
    ours = volume.ravel(order="F")[voxels.file_order]
    theirs = apply_mask(image(grid, volume), image(grid, mask.astype(np.uint8)))
    np.testing.assert_allclose(np.sort(ours), np.sort(theirs))
    np.testing.assert_allclose(voxels.volume(ours)[mask], theirs)


def test_volume_and_rows_at_undo_each_other():
    voxels = VoxelSet.from_mask(oblique(), random_mask())
    rows = voxels.volume(np.arange(len(voxels)), fill=-1)
    everywhere = np.moveaxis(np.indices(SHAPE), 0, -1)
    np.testing.assert_array_equal(voxels.rows_at(everywhere), rows)
    outside = [(-1, 0, 0), (0, 12, 0), (0, 0, 10), (9, 0, 0), (-9, -12, -10)]
    np.testing.assert_array_equal(voxels.rows_at(outside), -1)


def test_volume_fill_follows_the_type():
    voxels = VoxelSet.from_mask(oblique(), random_mask())
    outside = ~random_mask()
    assert np.isnan(voxels.volume(np.ones(len(voxels)))[outside]).all()
    assert (voxels.volume(np.ones(len(voxels), dtype=np.int8))[outside] == 0).all()
    assert (voxels.volume(np.ones(len(voxels)), fill=7, dtype=np.uint8)[outside] == 7).all()
    assert voxels.volume(np.ones(len(voxels)), dtype=np.float32).dtype == np.float32
    with pytest.raises(ValueError, match="values"):
        voxels.volume(np.ones(len(voxels) - 1))


def test_subset_keeps_the_order():
    voxels = VoxelSet.from_mask(oblique(), random_mask())
    keep = np.random.default_rng(4).random(len(voxels)) < 0.5
    np.testing.assert_array_equal(voxels.subset(keep).xyz, voxels.xyz[keep])
    smaller = random_mask() & voxels.volume(keep)
    np.testing.assert_array_equal(
        VoxelSet.from_mask(voxels.grid, smaller).ijk, voxels.subset(keep).ijk
    )
    with pytest.raises(ValueError, match="keep"):
        voxels.subset(np.arange(len(voxels)))


def test_contains_ends_at_the_outer_faces():
    grid = oblique(shear=0.2)
    faces = [(-0.5, 3, 3), (8.5, 3, 3), (3, -0.5, 3), (3, 11.5, 3), (3, 3, -0.5), (3, 3, 9.5)]
    inward = np.sign(np.array([4, 5.5, 4.5]) - faces)
    assert grid.contains(grid.to_world(faces)).all()
    assert grid.contains(grid.to_world(faces + 0.01 * inward)).all()
    assert not grid.contains(grid.to_world(faces - 0.01 * inward)).any()
    assert grid.contains(grid.to_world((0, 0, 0))).shape == ()


@settings(max_examples=60, deadline=None)
@given(turns, storages)
def test_the_voxel_of_a_point_on_a_face_does_not_depend_on_storage(angles, storage):
    """Exact property, with points on faces, edges and corners of voxels."""
    grid = oblique(angles=angles)
    halves = np.moveaxis(np.indices((18, 24, 20)), 0, -1).reshape(-1, 3) / 2 - 0.5
    points = grid.to_world(halves)
    other, _ = restored(grid, np.zeros(SHAPE), storage)
    mine, theirs = grid.voxel_of(points), other.voxel_of(points)
    np.testing.assert_allclose(grid.to_world(mine), other.to_world(theirs), atol=1e-9)
    # it holds the point, and is in the image, the outermost faces included
    assert np.abs(mine - halves).max() <= 0.5
    assert ((mine >= 0) & (mine < SHAPE)).all()


def test_the_voxel_of_a_point_beyond_the_image_is_off_the_image():
    grid = oblique()
    beyond = grid.to_world([(-0.6, 0, 0), (8.7, 0, 0), (0, 30, 0)])
    np.testing.assert_array_equal(grid.voxel_of(beyond), [(-1, 0, 0), (9, 0, 0), (0, 30, 0)])


def test_grids_match_within_a_thousandth_of_a_millimetre():
    grid = oblique()
    assert grid.matches(oblique(origin=(-9.0005, 14, -6)))
    assert not grid.matches(oblique(origin=(-9.002, 14, -6)))
    assert grid.matches(oblique(origin=(-9.002, 14, -6)), tolerance=0.01)
    # a small turn moves the far corner though the first voxel stays
    assert not grid.matches(oblique(angles=(12.0, -20.0, 31.05)))
    assert not grid.matches(oblique(shape=(9, 12, 11)))
    flipped, _ = restored(grid, np.zeros(SHAPE), ((0, 1, 2), (-1, 1, 1)))
    assert not grid.matches(flipped)


@pytest.mark.parametrize(
    ("other", "words"),
    [
        (oblique(shape=(9, 12, 11)), ["shape 9 x 12 x 10 against 9 x 12 x 11"]),
        (
            oblique(sizes=(2, 2.5, 3)),
            ["voxel size 2 x 2.5 x 3.5 mm against 2 x 2.5 x 3 mm", "corners up to 4.5 mm apart"],
        ),
        (
            oblique(origin=(-9, 15, -6)),
            ["first voxel at (-9, 14, -6) mm against (-9, 15, -6) mm", "corners up to 1 mm apart"],
        ),
    ],
)
def test_difference_says_what_differs_and_no_more(other, words):
    assert oblique().difference(other) == "; ".join(words)


def test_difference_names_a_turn():
    said = oblique().difference(oblique(angles=(12, -20, 31.05)))
    assert said.startswith("orientation RAS (tilted 36.7 degrees)")
    assert "voxel size" not in said


def test_difference_names_a_left_right_flip():
    """METHODS 13, a trap: the same numbers stored the other way round."""
    grid = isotropic()
    flipped, _ = restored(grid, np.zeros(grid.shape), ((0, 1, 2), (-1, 1, 1)))
    assert "orientation RAS against LAS" in grid.difference(flipped)
    assert grid.difference(isotropic()) == ""


@pytest.mark.parametrize(
    ("shape", "affine"),
    [
        ((4, 5), np.eye(4)),
        ((4, 5, 0), np.eye(4)),
        ((4, 5, 6), np.eye(3)),
        ((4, 5, 6), np.diag([2, 0, 2, 1])),
        ((4, 5, 6), np.diag([2, np.nan, 2, 1])),
        ((4, 5, 6), np.diag([2, 2, 2, 2])),
        ((4, 5, 6), np.array([[1, 1, 0, 0], [1, 1, 0, 0], [0, 0, 1, 0], [0, 0, 0, 1]])),
    ],
)
def test_a_grid_without_sense_is_refused(shape, affine):
    with pytest.raises(DataError, match="grid"):
        Grid(shape, affine)


def test_a_mask_of_another_shape_is_refused():
    """METHODS 13, a trap: a mask from one grid on another."""
    with pytest.raises(DataError, match=r"\(9, 12, 10\)"):
        VoxelSet.from_mask(oblique(), np.ones((12, 9, 10), dtype=bool))


def test_grids_and_sets_are_read_only_and_travel():
    affine = affine_of()
    grid = Grid(SHAPE, affine)
    affine[0, 3] = 99
    assert grid.affine[0, 3] == -9
    voxels = full(grid)
    with pytest.raises(ValueError, match="read-only"):
        voxels.ijk[0] = 1
    copy = pickle.loads(pickle.dumps(voxels))  # noqa: S301 - as a worker process receives it
    np.testing.assert_array_equal(copy.xyz, voxels.xyz)
    assert len(VoxelSet.from_mask(grid, np.zeros(SHAPE))) == 0
