from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from seedaudit.errors import DataError, StudyError
from seedaudit.placements import (
    CONTROL_DISTANCE,
    _snapped,
    add_controls,
    build_cloud,
    draw_shifts,
    uncertainty_sd,
)
from seedaudit.space import Grid, VoxelSet, sphere_coverage, sphere_weights
from tests.space.samples import full, isotropic, oblique, restored, storages, turns

# CONTRACT, columns of placements.tsv
COLUMNS = (
    *("seed", "placement", "kind", "x", "y", "z", "dx", "dy", "dz", "distance"),
    *("radius", "n_voxels", "coverage", "used", "flags"),
)
BIG = (24, 20, 16)


def cloud(voxels=None, at=None, radius=5.0, **options):
    voxels = full(oblique(BIG)) if voxels is None else voxels
    at = voxels.grid.to_world((11.3, 9.6, 7.8)) if at is None else at
    options = {"count": 30, "within": 5.0, "random_state": 4} | options
    return build_cloud("posterior", at, radius, voxels, **options)


def flagged(table, word):
    return table["flags"].str.split(";").map(lambda words: word in words).to_numpy()


def test_table_follows_the_contract():
    """CONTRACT, placements.tsv."""
    voxels = full(oblique(BIG))
    at = voxels.grid.to_world((11.3, 9.6, 7.8))
    table = cloud(voxels, at).table
    assert tuple(table.columns) == COLUMNS
    assert (table["seed"] == "posterior").all()
    np.testing.assert_array_equal(table["placement"], np.arange(31))
    assert table["kind"].tolist() == ["reported"] + ["jitter"] * 30
    np.testing.assert_array_equal(table.loc[0, ["x", "y", "z"]].astype(float), at)
    np.testing.assert_array_equal(table.loc[0, ["dx", "dy", "dz", "distance"]].astype(float), 0)
    shifts = draw_shifts("ball", count=30, within=5.0, random_state=4)
    np.testing.assert_array_equal(table[["dx", "dy", "dz"]][1:], shifts)
    np.testing.assert_allclose(table[["x", "y", "z"]], at + table[["dx", "dy", "dz"]])
    np.testing.assert_allclose(table["distance"][1:], np.linalg.norm(shifts, axis=1))
    assert table["used"].dtype == bool
    assert pd.api.types.is_integer_dtype(table["n_voxels"])


@pytest.mark.parametrize("weighting", ["hard", "soft"])
def test_weights_belong_to_the_rows(weighting):
    grid = oblique(BIG)
    voxels = VoxelSet.from_mask(grid, np.random.default_rng(0).random(BIG) < 0.8)
    at = voxels.xyz[len(voxels) // 2]
    made = cloud(voxels, at, weighting=weighting)
    centres, radii = made.table[["x", "y", "z"]], made.table["radius"]
    expected = sphere_weights(voxels, centres, radii, weighting)
    np.testing.assert_array_equal(made.weights.toarray(), expected.toarray())
    np.testing.assert_array_equal(made.table["n_voxels"], (expected.toarray() > 0).sum(axis=1))
    coverage, _ = sphere_coverage(voxels, centres, radii, weighting)
    np.testing.assert_array_equal(made.table["coverage"], coverage)


def test_the_same_random_state_gives_the_same_cloud():
    first, again, other = cloud(), cloud(), cloud(random_state=5)
    pd.testing.assert_frame_equal(first.table, again.table)
    assert abs(first.weights - again.weights).nnz == 0
    assert not np.allclose(first.table[["dx", "dy", "dz"]], other.table[["dx", "dy", "dz"]])


@settings(max_examples=25, deadline=None)
@given(turns, storages, st.booleans(), st.sampled_from([2.0, 0.875]))
def test_a_cloud_does_not_depend_on_storage(angles, storage, snap, step):
    """Exact property: METHODS 1. Lattice steps of half a voxel tie on purpose."""
    grid = oblique((10, 11, 12), angles=angles, sizes=(1.75, 2.5, 3.5))
    mask = np.random.default_rng(1).random((10, 11, 12)) < 0.9
    mask[5, 5, 6] = True
    at = grid.to_world((5, 5, 6))
    options = {"draw": "lattice", "step": step, "within": 2.0, "snap": snap, "radius": 4.0}
    here = cloud(VoxelSet.from_mask(grid, mask), at, **options)
    there = cloud(VoxelSet.from_mask(*restored(grid, mask, storage)), at, **options)
    pd.testing.assert_frame_equal(here.table, there.table, atol=1e-9)
    np.testing.assert_array_equal(here.weights.toarray(), there.weights.toarray())


@settings(max_examples=25, deadline=None)
@given(storages)
def test_a_shift_of_half_a_voxel_snaps_one_way_on_every_storage(storage):
    """Exact property: on this turned grid rounding leaves some halves just under a half."""
    grid = oblique((10, 11, 12), angles=(30, 0, 0), sizes=(0.7, 1.1, 3.3))
    other, _ = restored(grid, np.zeros(grid.shape), storage)
    halves = np.array(np.meshgrid(*[(0.5, 1.5, 2.5)] * 3)).reshape(3, -1).T
    shifts = halves @ grid.affine[:3, :3].T
    np.testing.assert_allclose(_snapped(shifts, other), _snapped(shifts, grid), atol=1e-9)


@settings(max_examples=25, deadline=None)
@given(turns, st.floats(-0.2, 0.2), st.integers(0, 1000), st.sampled_from(["hard", "soft"]))
def test_snapped_placements_hold_equally_many_voxels(angles, shear, seed, weighting):
    """Exact property: METHODS 1, whole voxel steps keep the shape of the sphere."""
    voxels = full(oblique(BIG, angles=angles, shear=shear))
    made = cloud(voxels, snap=True, random_state=seed, weighting=weighting).table
    interior = made["coverage"] == 1
    assert interior.sum() > 20
    assert made.loc[interior, "n_voxels"].nunique() == 1
    steps = made[["dx", "dy", "dz"]].to_numpy() @ voxels.grid.inverse[:3, :3].T
    np.testing.assert_allclose(steps, np.rint(steps), atol=1e-9)
    # the reported centre stays where it was reported
    np.testing.assert_allclose(voxels.grid.to_voxel(made.loc[0, ["x", "y", "z"]]), (11.3, 9.6, 7.8))
    # never farther from the draw than half a voxel along each stored axis
    drawn = draw_shifts("ball", count=30, within=5.0, random_state=seed)
    assert np.abs(steps[1:] - drawn @ voxels.grid.inverse[:3, :3].T).max() <= 0.5 + 1e-9


def test_jitter_alone_changes_the_count():
    """CHECKS 9c and METHODS 1: 2 mm voxels, 6 mm, from a voxel centre, half-steps away."""
    voxels = full(isotropic(2.0))
    made = cloud(voxels, (0, 0, 0), 6.0, draw="lattice", step=1.0, within=2.0).table
    expected = {0: 123, 1: 110, 2: 112, 3: 136}  # by the number of coordinates half-way
    halves = (np.abs(made[["dx", "dy", "dz"]].to_numpy()) == 1).sum(axis=1)
    np.testing.assert_array_equal(made["n_voxels"], [expected[n] for n in halves])
    assert len(made) == 33  # CHECKS 9b: A000605(2) points within two steps
    assert made["kind"].tolist() == ["reported"] + ["lattice"] * 32


def test_radii_are_crossed_with_the_shifts():
    plain, crossed = cloud().table, cloud(radii=(3.0, 4.0)).table
    assert len(crossed) == 1 + 2 * 30
    assert crossed.loc[0, "radius"] == 5.0
    for offset, radius in enumerate((3.0, 4.0)):
        block = crossed[1 + offset :: 2]
        assert (block["radius"] == radius).all()
        np.testing.assert_array_equal(block[["x", "y", "z"]], plain[["x", "y", "z"]][1:])


def test_centres_stay_inside_a_mask_on_another_grid():
    voxels = full(oblique(BIG))
    at = voxels.grid.to_world((11.3, 9.6, 7.8))
    grey = isotropic(1.5, (41, 43, 45))
    grey = Grid(grey.shape, grey.affine + np.pad(at[:, None], ((0, 1), (3, 0))))
    mask = np.random.default_rng(2).random(grey.shape) < 0.3
    inside = VoxelSet.from_mask(grey, mask)
    for snap in (False, True):
        made = cloud(voxels, at, inside=inside, snap=snap).table
        assert len(made) == 31
        nearest = np.rint(grey.to_voxel(made[["x", "y", "z"]][1:])).astype(int)
        assert mask[tuple(nearest.T)].all()
    everywhere = cloud(voxels, at, inside=full(grey))
    pd.testing.assert_frame_equal(everywhere.table, cloud(voxels, at).table)
    lattice = {"draw": "lattice", "step": 1.0}
    kept = cloud(voxels, at, inside=inside, **lattice).table
    assert 0.2 < (len(kept) - 1) / (len(cloud(voxels, at, **lattice).table) - 1) < 0.4


def test_hopeless_inside_says_the_rate():
    voxels = full(oblique(BIG))
    far = np.zeros(BIG, dtype=bool)
    far[0, 0, 0] = True
    with pytest.raises(DataError, match=r"inside: 0 of \d+ drawn centres \(0\.00%\)"):
        cloud(voxels, inside=VoxelSet.from_mask(voxels.grid, far))


def test_midline_flag_is_about_crossing_x_0():
    voxels = full(isotropic(2.0))
    made = cloud(voxels, (5, 0, 0), 5.0, within=4.0)
    np.testing.assert_array_equal(flagged(made.table, "midline"), np.abs(made.table["x"]) < 5)
    assert flagged(made.table, "midline").any()
    assert not flagged(made.table, "midline")[0]  # it only touches
    assert not flagged(cloud(voxels, (5, 0, 0), midline=False).table, "midline").any()


def test_flags_where_the_mask_and_the_image_end():
    grid = isotropic(2.0)
    mask = np.indices(grid.shape)[0] <= 15  # world x <= 0; the image ends at x = -31
    lattice = {"draw": "lattice", "step": 2.0, "within": 4.0}
    table = cloud(VoxelSet.from_mask(grid, mask), (-2, 0, 0), 6.0, **lattice).table
    # layers of the 123 voxels: 29 where x = 0, then 25 and 21 and 1 (points with
    # x2 + y2 <= 9, 8, 5, 0: 29, 25, 21, 1)
    lost = {-6: 0, -4: 1, -2: 1 + 21, 0: 1 + 21 + 25, 2: 1 + 21 + 25 + 29}
    left = np.array([123 - lost[round(x)] for x in table["x"]])
    np.testing.assert_array_equal(table["n_voxels"], left)
    np.testing.assert_allclose(table["coverage"], left / 123)
    np.testing.assert_array_equal(flagged(table, "leaves_mask"), left < 123)
    np.testing.assert_array_equal(flagged(table, "low_coverage"), left < 123 / 2)
    np.testing.assert_array_equal(table["used"], left >= 123 / 2)
    assert 0 < table["used"].sum() < len(table)
    assert not flagged(table, "leaves_image").any()
    edge = cloud(full(grid), (-27, 0, 0), 6.0, **lattice).table
    np.testing.assert_array_equal(flagged(edge, "leaves_image"), edge["coverage"] < 1)
    np.testing.assert_array_equal(flagged(edge, "leaves_mask"), edge["coverage"] < 1)
    assert flagged(edge, "leaves_image").any()
    assert edge["flags"].iloc[0] == "leaves_image;leaves_mask"


def test_a_placement_without_voxels_is_never_used():
    grid = isotropic(2.0)
    mask = np.zeros(grid.shape, dtype=bool)
    mask[15:17, 16, 17] = True
    made = cloud(
        *(VoxelSet.from_mask(grid, mask), (0, 0, 0), 1.0),
        **{"draw": "lattice", "step": 1.0, "within": 4.0, "min_coverage": 0.0},
    )
    empty = made.table["n_voxels"] == 0
    assert empty.any()
    np.testing.assert_array_equal(made.table["used"], ~empty)
    assert made.weights.shape == (257, 2)  # CHECKS 9b: A000605(4), all rows are kept


def test_one_voxel_and_repeat_flags():
    """Shifts under half a 2 mm voxel leave a 1 mm sphere on the voxel of its centre."""
    made = cloud(full(isotropic(2.0)), (0, 0, 0), 0.5, within=0.9, midline=False).table
    assert made.loc[0, "flags"] == "one_voxel"
    assert (made.loc[1:, "flags"] == "one_voxel;repeat").all()
    assert made["used"].all()


def test_repeat_means_the_same_voxels_as_an_earlier_row():
    made = cloud(snap=True, within=3.0)
    rows = [tuple(made.weights[[i]].indices) for i in range(31)]
    expected = [row in rows[:i] for i, row in enumerate(rows)]
    np.testing.assert_array_equal(flagged(made.table, "repeat"), expected)
    assert any(expected)


def test_a_reported_centre_outside_the_mask_says_how_far():
    grid = isotropic(2.0)
    mask = np.indices(grid.shape)[0] <= 15
    voxels = VoxelSet.from_mask(grid, mask)
    with pytest.raises(DataError) as error:
        cloud(voxels, (7, 4, 6), 6.0)
    assert "lies outside the mask, 7.0 mm from the nearest voxel" in str(error.value)
    assert "that voxel is at (0, 4, 6)" in str(error.value)
    with pytest.raises(DataError, match=r"outside the image, 470\.0 mm"):
        cloud(voxels, (-500, 4, 6), 6.0)
    empty = VoxelSet.from_mask(grid, np.zeros(grid.shape))
    with pytest.raises(DataError, match="outside the mask"):
        cloud(empty, (0, 0, 0), 6.0)


def test_a_reported_sphere_that_is_hardly_covered_is_an_error():
    grid = isotropic(2.0)
    mask = np.zeros(grid.shape, dtype=bool)
    mask[15, 16, 17] = True
    with pytest.raises(DataError, match=r"covers 0\.01 of the reported sphere"):
        cloud(VoxelSet.from_mask(grid, mask), (0, 0, 0), 6.0)


def test_fewer_than_two_usable_draws_is_an_error():
    with pytest.raises(DataError, match="1 of 1 drawn placements"):
        cloud(count=1)
    assert len(cloud(count=2).table) == 3
    grid = isotropic(2.0)
    mask = np.zeros(grid.shape, dtype=bool)
    mask[13:18, 14:19, 15:20] = True
    with pytest.raises(DataError, match="0 of 6 drawn placements"):
        cloud(
            *(VoxelSet.from_mask(grid, mask), (0, 0, 0), 4.0),
            **{"draw": "lattice", "step": 8.0, "within": 8.0},
        )


@pytest.mark.parametrize(
    ("options", "word"),
    [
        ({"at": (0, 1)}, "seed posterior, at"),
        ({"at": (0, 1, np.nan)}, "seed posterior, at"),
        ({"radius": 0.0}, "seed posterior, radius: 0"),
        ({"radii": []}, "seed posterior, radii: none"),
        ({"radii": [3.0, -1.0]}, "seed posterior, radii: -1"),
        ({"min_coverage": 1.5}, "min_coverage: 1.5"),
        ({"weighting": "gentle"}, "weighting: 'gentle'"),
        ({"draw": "normal", "sd": 0.0}, "sd"),
    ],
)
def test_senseless_arguments_are_refused(options, word):
    with pytest.raises(StudyError, match=word):
        cloud(**options)


@pytest.mark.parametrize(
    ("budget", "sd"),
    [
        ({"registration": 3.0, "rounding": 4.0}, 5.0),
        ({"registration": 1.0, "template": 2.0, "landmark": 2.0}, 3.0),
        ({"registration": 2.5, "template": 0.0}, 2.5),
    ],
)
def test_uncertainty_is_the_root_of_the_sum_of_squares(budget, sd):
    """Exact, Pythagorean triples and quadruples."""
    assert uncertainty_sd(budget) == pytest.approx(sd)


@pytest.mark.parametrize(
    "budget", [{}, {"rounding": 0.0}, {"rounding": -1.0}, {"rounding": np.nan}]
)
def test_an_uncertainty_without_sense_is_refused(budget):
    with pytest.raises(StudyError, match="uncertainty"):
        uncertainty_sd(budget)


WIDE = (26, 30, 24)


def with_controls(voxels=None, count=12, **options):
    voxels = full(oblique(WIDE)) if voxels is None else voxels
    own = cloud(voxels, voxels.grid.to_world((5.3, 6.1, 5.2)))
    return own, add_controls(own, voxels, count, random_state=3, **options), voxels


def test_controls_are_further_rows_far_away():
    own, made, voxels = with_controls()
    assert made.table["kind"].tolist() == own.table["kind"].tolist() + ["control"] * 12
    np.testing.assert_array_equal(made.table["placement"], np.arange(43))
    pd.testing.assert_frame_equal(made.table[:31], own.table)
    controls = made.table[31:]
    assert (controls["distance"] >= CONTROL_DISTANCE).all()
    assert (controls["radius"] == 5).all()
    assert controls["used"].all()
    centres = controls[["x", "y", "z"]].to_numpy(dtype=float)
    expected = sphere_weights(voxels, centres, np.full(12, 5.0))
    np.testing.assert_array_equal(made.weights[31:].toarray(), expected.toarray())
    np.testing.assert_array_equal(made.weights[:31].toarray(), own.weights.toarray())
    again = with_controls()[1]
    pd.testing.assert_frame_equal(made.table, again.table)
    _, farther, _ = with_controls(apart=45.0)
    assert (farther.table["distance"][31:] >= 45).all()


def test_controls_stay_inside_and_covered():
    voxels = full(oblique(WIDE))
    area = VoxelSet.from_mask(voxels.grid, np.indices(WIDE)[0] > 20)
    _, made, _ = with_controls(voxels, inside=area, min_coverage=0.7)
    controls = made.table[31:]
    centres = controls[["x", "y", "z"]].to_numpy(dtype=float)
    assert (area.rows_at(area.grid.voxel_of(centres)) >= 0).all()
    assert (controls["coverage"] >= 0.7).all()


def test_no_room_for_controls():
    small = full(oblique((9, 8, 7)))
    own = cloud(small, small.grid.to_world((4.2, 4.1, 3.3)), within=2.0)
    assert add_controls(own, small, 5) is own
    _, made, _ = with_controls(count=0)
    assert len(made.table) == 31


@pytest.mark.parametrize(
    "storage", [((1, 2, 0), (1, -1, 1)), ((0, 1, 2), (-1, -1, -1)), ((2, 1, 0), (1, 1, -1))]
)
def test_controls_do_not_depend_on_the_storage_order(storage):
    voxels = full(oblique(WIDE))
    _, made, _ = with_controls(voxels)
    turned = full(restored(voxels.grid, np.ones(WIDE), storage)[0])
    own = cloud(turned, voxels.grid.to_world((5.3, 6.1, 5.2)))
    found = add_controls(own, turned, 12, random_state=3)
    np.testing.assert_allclose(
        found.table[["x", "y", "z"]].to_numpy(float), made.table[["x", "y", "z"]].to_numpy(float)
    )
