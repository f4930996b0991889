"""Planes through maps: the same world, whatever the storage."""

from __future__ import annotations

import nibabel as nib
import numpy as np
import pytest
from hypothesis import given, settings

from seedaudit.report.slices import (
    Plane,
    cloud_rows,
    contested_places,
    excluded_zone,
    near_plane,
    sample,
    sample_smooth,
    whole_plane,
)
from tests.report.invented import AT, head_grid, invented_seed
from tests.space.samples import image, oblique, restored, storages

WINDOW = (-40.0, 40.0, -30.0, 50.0)


def naive_sample(picture: nib.Nifti1Image, plane: Plane) -> np.ndarray:
    """Point by point with nibabel's own affine functions."""
    data = picture.get_fdata()
    to_voxel = np.linalg.inv(picture.affine)
    out = np.full(plane.points.shape[:2], np.nan)
    for row, column in np.ndindex(out.shape):
        place = np.rint(nib.affines.apply_affine(to_voxel, plane.points[row, column])).astype(int)
        if (place >= 0).all() and (place < data.shape).all():
            out[row, column] = data[tuple(place)]
    return out


@pytest.mark.parametrize("kind", ["coronal", "sagittal", "axial"])
def test_every_point_takes_the_voxel_that_holds_it(kind):
    grid = oblique()
    centre = grid.corners().mean(axis=0)
    volume = np.arange(np.prod(grid.shape), dtype=np.float32).reshape(grid.shape)
    # an odd place, so that no point lies on the face of a voxel, where rounding may differ
    plane = near_plane(kind, np.add(centre, (0.137, 0.211, -0.173)), 22, 0.93)
    found = sample(image(grid, volume), plane)
    np.testing.assert_array_equal(found, naive_sample(image(grid, volume), plane))
    assert np.isfinite(found).any()


@settings(max_examples=12, deadline=None)
@given(storages)
def test_storage_changes_no_plane(storage):
    grid = oblique()
    volume = np.random.default_rng(0).random(grid.shape).astype(np.float32)
    plane = near_plane("coronal", grid.corners().mean(axis=0), 20, 1.0)
    stored_grid, stored = restored(grid, volume, storage)
    again = image(stored_grid, np.ascontiguousarray(stored))
    for function in (sample, sample_smooth):
        np.testing.assert_allclose(
            function(again, plane), function(image(grid, volume), plane), atol=1e-6
        )


@settings(max_examples=12, deadline=None)
@given(storages)
@pytest.mark.parametrize(
    ("kind", "world"), [("coronal", (0, 2)), ("sagittal", (1, 2)), ("axial", (0, 1))]
)
def test_one_voxel_appears_at_its_world_place(kind, world, storage):
    grid = head_grid(oblique=True)
    place = np.array([31.0, -44.0, 22.0])
    ijk = tuple(grid.voxel_of(place))
    volume = np.zeros(grid.shape, np.float32)
    volume[ijk] = 1
    stored_grid, stored = restored(grid, volume, storage)
    plane = whole_plane(kind, grid.to_world(np.array(ijk)), np.array([[-90] * 3, [90] * 3]), 1.0)
    found = sample(image(stored_grid, np.ascontiguousarray(stored)), plane, outside=0) == 1
    rows, columns = np.nonzero(found)
    seen = [plane.across[columns].mean(), plane.upward[rows].mean()]
    # nibabel's affine says where the voxel is; a voxel is 3 to 5 mm wide
    true = nib.affines.apply_affine(grid.affine, ijk)
    np.testing.assert_allclose(seen, true[list(world)], atol=2.0)


def test_letters_name_the_ends_of_the_horizontal_axis():
    assert Plane("axial", AT, WINDOW).letters == ("L", "R")
    assert Plane("coronal", AT, WINDOW).letters == ("L", "R")
    assert Plane("sagittal", AT, WINDOW).letters == ("P", "A")
    for kind in ("axial", "coronal", "sagittal"):
        plane = Plane(kind, AT, WINDOW)
        assert (np.diff(plane.across) > 0).all()
        assert (np.diff(plane.upward) > 0).all()


def test_contested_places_are_the_largest_clusters_at_a_share_of_one_half():
    seed = invented_seed(grid=head_grid(4.0))
    places = contested_places(seed)
    assert len(places) == 3
    assert sorted((p.n_voxels for p in places), reverse=True) == [p.n_voxels for p in places]
    contested = seed.maps["contested"].get_fdata() > 0
    shares = [seed.maps[f"agreement_{tail}"].get_fdata() for tail in ("positive", "negative")]
    off = np.fmin(*(np.abs(share - 0.5) for share in shares))
    to_voxel = np.linalg.inv(seed.maps["contested"].affine)
    for place in places:
        ijk = np.rint(nib.affines.apply_affine(to_voxel, place.at)).astype(int)
        assert contested[tuple(ijk)]
        assert off[tuple(ijk)] < 0.1


@pytest.mark.parametrize("storage", [((2, 0, 1), (1, -1, -1)), ((1, 2, 0), (-1, 1, -1))])
def test_contested_places_do_not_depend_on_the_order_in_the_file(storage):
    grid = head_grid(oblique=True)
    stored = contested_places(invented_seed(grid=grid, storage=storage))
    straight = contested_places(invented_seed(grid=grid))
    assert [p.n_voxels for p in stored] == [p.n_voxels for p in straight]
    np.testing.assert_allclose([p.at for p in stored], [p.at for p in straight], atol=2e-3)


def test_fewer_contested_places_when_there_are_fewer():
    assert contested_places(invented_seed(contested=False)) == []


def test_the_excluded_zone_is_what_the_spheres_took_from_the_analysis():
    seed = invented_seed(grid=head_grid(4.0))
    plane = near_plane("axial", AT, 30, 1.0)
    zone = excluded_zone(seed, plane)
    used = seed.tables["placements"].query("used and kind != 'control'")
    centres = used[["x", "y", "z"]].to_numpy()
    distance = np.linalg.norm(plane.points[..., None, :] - centres, axis=-1).min(axis=-1)
    # by hand: sphere of 6 mm and margin; a 4 mm voxel reaches 3.5 mm from its centre
    edge = 6.0 + 4.0
    assert zone[distance < edge - 3.5].all()
    assert not zone[distance > edge + 3.5].any()
    # and between the two, exactly the voxels that the analysis lost there
    lost = sample(seed.maps["analysis_mask"], plane) == 0
    near = distance < edge + 3.4
    np.testing.assert_array_equal(zone[near], lost[near])


def test_control_seeds_are_no_part_of_the_cloud():
    seed = invented_seed()
    controls = seed.tables["placements"].query("kind == 'control'")
    assert len(controls) == 5
    for at in controls[["x", "y", "z"]].to_numpy():
        plane = near_plane("axial", at, 8, 1.0)
        assert not excluded_zone(seed, plane).any()
    assert len(cloud_rows(seed)) == 101
