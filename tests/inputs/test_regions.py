from __future__ import annotations

import nibabel as nib
import numpy as np
import pytest
from nilearn.datasets import fetch_coords_dosenbach_2010, load_mni152_brain_mask
from nilearn.image import resample_to_img

from seedaudit.errors import DataError
from seedaudit.inputs.regions import read_regions
from seedaudit.space.grid import Grid, VoxelSet
from tests.inputs.images import AFFINE, SHAPE, write_nifti

TABLE = "index\tname\tcolor\n0\tbackground\tn/a\n5\tfront\t#112233\n2\tback\tn/a\n300\tside\tn/a\n"
LABELS = np.array([0, 2, 5, 300])


@pytest.fixture
def voxels():
    mask = np.random.default_rng(0).random(SHAPE) < 0.7
    return VoxelSet.from_mask(Grid(SHAPE, AFFINE), mask)


@pytest.fixture
def image():
    return LABELS[np.random.default_rng(1).integers(0, 4, SHAPE)]


def write(folder, values, table=TABLE, name="nets_dseg.nii.gz", dtype="<i2", **kwargs):
    if table is not None:
        stem = name.removesuffix(".gz").removesuffix(".nii")
        (folder / f"{stem}.tsv").write_text(table)
    return write_nifti(folder / name, values, dtype, **kwargs)


@pytest.mark.parametrize(("name", "dtype"), [("a_dseg.nii.gz", "<i2"), ("a.b.nii", ">f4")])
def test_labels_on_the_same_grid(tmp_path, voxels, image, name, dtype):
    regions = read_regions(write(tmp_path, image, name=name, dtype=dtype), voxels)
    assert regions.index.tolist() == [5, 2, 300]
    assert regions.names == ("front", "back", "side")
    assert regions.labels.dtype == np.int32
    # Source: nibabel's reader at the same indices.
    expected = nib.load(tmp_path / name).get_fdata()[tuple(voxels.ijk.T)]
    np.testing.assert_array_equal(regions.labels, expected)
    assert regions.notes == ()


def test_labels_on_another_grid_are_read_at_world_positions(tmp_path, voxels):
    other = nib.affines.from_matvec(np.diag([3.0, -2.0, 1.5]), [-6.0, 7.0, -4.0])
    image = LABELS[np.random.default_rng(2).integers(0, 4, (9, 11, 12))]
    path = write(tmp_path, image, sform=other)
    regions = read_regions(path, voxels)
    # Source: nilearn.image.resample_to_img, nearest neighbour, zero outside. It ends an image at
    # the centres of its edge voxels, so it gets a border of zeros to reach their outer faces.
    border = nib.affines.from_matvec(other[:3, :3], (other @ [-1, -1, -1, 1])[:3])
    expected = resample_to_img(
        nib.Nifti1Image(np.pad(image, 1).astype(np.int16), border),
        nib.Nifti1Image(np.zeros(SHAPE, np.int16), AFFINE),
        interpolation="nearest",
        copy_header=True,
        force_resample=True,
    ).get_fdata()[tuple(voxels.ijk.T)]
    assert (expected == 0).any()
    assert len(np.unique(expected)) == 4
    np.testing.assert_array_equal(regions.labels, expected)
    (note,) = regions.notes
    assert "nearest neighbour" in note
    assert "nets_dseg.nii.gz" in note
    assert str(tmp_path) not in note


def test_a_region_without_voxels_is_kept_and_noted(tmp_path, voxels, image):
    image = np.where(image == 5, 0, image)
    regions = read_regions(write(tmp_path, image), voxels)
    assert regions.names == ("front", "back", "side")
    assert not (regions.labels == 5).any()
    assert regions.notes == ("regions without a voxel in the analysis mask: front",)


def message(*args, voxels, **kwargs):
    with pytest.raises(DataError) as caught:
        read_regions(write(*args, **kwargs), voxels)
    return str(caught.value)


def test_missing_look_up_names_the_path_that_was_expected(tmp_path, voxels, image):
    text = message(tmp_path, image, None, voxels=voxels)
    assert str(tmp_path / "nets_dseg.tsv") in text


@pytest.mark.parametrize(
    ("table", "found"),
    [
        ("number\tname\n1\ta\n", "no column 'index'"),
        ("index\tlabel\n1\ta\n", "no column 'name'"),
        ("index\tname\n2\ta\n2\tb\n", "index 2 stands there twice"),
        ("index\tname\n2\ta\n3\ta\n", "name a stands there twice"),
        ("index\tname\n2.5\ta\n", "row 1: index 2.5"),
        ("index\tname\n2\ta\nx\tb\n", "row 2: index x"),
        ("index\tname\n-1\ta\n", "row 1: index -1"),
        ("index\tname\n2\tn/a\n", "row 1: no name"),
        ("index\tname\n0\tbackground\n", "names no region"),
        ("index\tname\n5\ta\n", "labels without a row in the look-up table: 2, 300"),
    ],
)
def test_look_up_problems(tmp_path, voxels, image, table, found):
    assert found in message(tmp_path, image, table, voxels=voxels)


def test_look_up_problems_come_together(tmp_path, voxels, image):
    table = "index\tname\n2\ta\n2\tb\nx\tn/a\n"
    with pytest.raises(DataError) as caught:
        read_regions(write(tmp_path, image, table), voxels)
    assert len(caught.value.problems) == 3


@pytest.mark.parametrize("odd", [0.5, -1.0, np.nan])
def test_values_that_are_no_labels(tmp_path, voxels, image, odd):
    values = image.astype(float)
    values[0, 0, 0] = odd
    assert "no labels" in message(tmp_path, values, dtype="<f4", voxels=voxels)


def test_images_that_cannot_be_used(tmp_path, voxels, image):
    four = np.stack([image, image], axis=-1)
    assert "4-D image (2 volumes)" in message(tmp_path, four, voxels=voxels)
    assert "no region has a voxel" in message(tmp_path, 0 * image, voxels=voxels)
    far = AFFINE.copy()
    far[:3, 3] += 500
    assert "no region has a voxel" in message(tmp_path, image, sform=far, voxels=voxels)


@pytest.fixture(scope="module")
def brain():
    image = load_mni152_brain_mask(resolution=4)
    return VoxelSet.from_mask(Grid(image.shape, image.affine), image.get_fdata() > 0)


def test_dosenbach(brain):
    regions = read_regions("dosenbach2010", brain)
    # Source: names and sizes of CHECKS 16 (the table inside nilearn).
    assert regions.names == (
        "cerebellum", "cingulo-opercular", "default", "fronto-parietal", "occipital",
        "sensorimotor",
    )  # fmt: skip
    assert regions.index.tolist() == [1, 2, 3, 4, 5, 6]
    assert "Science 329:1358" in regions.notes[0]
    # Source: coordinates of CHECKS 16; the voxel at each centre is within 5 mm on a 4 mm grid.
    centres = {
        "default": [(0, 51, 32), (-6, 50, -1), (-5, -52, 17), (-6, -56, 29)],
        "cingulo-opercular": [(38, 21, -1), (9, 20, 34)],
        "fronto-parietal": [(-32, -58, 46)],
        "sensorimotor": [(0, -1, 52)],
        "occipital": [(-5, -80, 9)],
    }
    for name, points in centres.items():
        for point in points:
            row = np.linalg.norm(brain.xyz - point, axis=1).argmin()
            assert regions.names[regions.labels[row] - 1] == name


def test_dosenbach_spheres_against_plain_distances(brain):
    # Source: all distances by brute force from nilearn's table in its other (ordered) form.
    table = fetch_coords_dosenbach_2010(ordered_regions=True)
    regions = read_regions("dosenbach2010", brain)
    centres = np.asarray(table.rois, float)
    distance = np.linalg.norm(brain.xyz[:, None] - centres, axis=2)
    nearest = distance.min(axis=1)
    np.testing.assert_array_equal(regions.labels > 0, nearest <= 5 + 1e-6)
    for row in np.flatnonzero(regions.labels):
        at_nearest = np.flatnonzero(distance[row] <= nearest[row] + 1e-6)
        names = {str(table.networks.iloc[i]) for i in at_nearest}
        assert regions.names[regions.labels[row] - 1] in names


def test_dosenbach_spheres_of_two_networks_never_meet():
    # Source: nilearn's table; so the nearest centre within 5 mm is always the only network.
    table = fetch_coords_dosenbach_2010(ordered_regions=False)
    centres, networks = np.asarray(table.rois, float), np.asarray(table.networks, str)
    distance = np.linalg.norm(centres[:, None] - centres, axis=2)
    assert distance[networks[:, None] != networks].min() > 10 + 1e-3


def test_dosenbach_does_not_depend_on_storage(brain):
    flipped = brain.grid.affine @ np.array(
        [[0, -1, 0, brain.grid.shape[0] - 1], [1, 0, 0, 0], [0, 0, 1, 0], [0, 0, 0, 1]], float
    )
    mask = np.zeros(brain.grid.shape, bool)
    mask[tuple(brain.ijk.T)] = True
    turned = VoxelSet.from_mask(
        Grid((mask.shape[1], mask.shape[0], mask.shape[2]), flipped), mask[::-1].swapaxes(0, 1)
    )
    a, b = read_regions("dosenbach2010", brain), read_regions("dosenbach2010", turned)
    np.testing.assert_allclose(brain.xyz, turned.xyz)
    np.testing.assert_array_equal(a.labels, b.labels)
