from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from nilearn.maskers import NiftiSpheresMasker
from scipy.spatial import cKDTree
from scipy.spatial.distance import cdist

from seedaudit.errors import StudyError
from seedaudit.space import (
    Grid,
    VoxelSet,
    cloud_exclusion,
    sphere_coverage,
    sphere_weights,
)
from tests.space.samples import (
    SHAPE,
    full,
    image,
    isotropic,
    oblique,
    random_mask,
    restored,
    storages,
    turns,
)

# CHECKS 9b: OEIS A117609, points of the cubic lattice with x2 + y2 + z2 <= n, n = 0 .. 30
A117609 = (
    *(1, 7, 19, 27, 33, 57, 81, 81, 93, 123, 147, 171, 179, 203, 251, 251),
    *(257, 305, 341, 365, 389, 437, 461, 461, 485, 515, 587, 619, 619, 691, 739),
)
# CHECKS 9b: OEIS A000605, points with x2 + y2 + z2 <= n2, n = 0 .. 12
A000605 = (1, 7, 33, 123, 257, 515, 925, 1419, 2109, 3071, 4169, 5575, 7153)


def counts(voxels, centres, radii):
    return np.diff(sphere_weights(voxels, centres, radii).indptr)


def test_counts_by_squared_radius():
    """CHECKS 9b, OEIS A117609; the ball is closed."""
    voxels = full(isotropic(1.0))
    radii = np.sqrt(np.arange(31))
    np.testing.assert_array_equal(counts(voxels, np.zeros((31, 3)), radii), A117609)


def test_counts_by_radius():
    """CHECKS 9b, OEIS A000605."""
    voxels = full(isotropic(1.0))
    np.testing.assert_array_equal(counts(voxels, np.zeros((13, 3)), np.arange(13)), A000605)


@pytest.mark.parametrize(
    ("size", "expected"),
    [
        (1, (123, 257, 515, 925, 2109, 4169, 7153)),
        (2, (19, 33, 81, 123, 257, 515, 925)),
        (3, (7, 7, 19, 33, 81, 171, 257)),
        (4, (1, 7, 7, 19, 33, 81, 123)),
    ],
)
def test_counts_by_voxel_size(size, expected):
    """CHECKS 9b, table of voxel size against radius."""
    radii = (3, 4, 5, 6, 8, 10, 12)
    found = counts(full(isotropic(float(size))), np.zeros((7, 3)), radii)
    np.testing.assert_array_equal(found, expected)


@pytest.mark.parametrize(
    ("offset", "expected"),
    [
        ((0, 0, 0), (33, 81, 123, 257, 515)),
        ((1, 0, 0), (28, 70, 110, 256, 498)),
        ((1, 1, 0), (36, 56, 112, 268, 536)),
        ((1, 1, 1), (32, 56, 136, 280, 552)),
        ((0.5, 0, 0), (28, 69, 106, 260, 506)),
    ],
)
def test_counts_off_the_grid(offset, expected):
    """CHECKS 9c, left: where the centre sits on the grid changes the count."""
    found = counts(full(isotropic(2.0)), [offset] * 5, (4, 5, 6, 8, 10))
    np.testing.assert_array_equal(found, expected)


@pytest.mark.parametrize(
    ("sizes", "expected"),
    [
        ((3, 3, 4), (19, 31, 65, 121)),
        ((2, 2, 3), (47, 73, 181, 343)),
        ((3.4375, 3.4375, 4), (11, 19, 49, 85)),
    ],
)
def test_counts_of_anisotropic_voxels(sizes, expected):
    """CHECKS 9c, right; turning the grid about the centre changes nothing."""
    for angles in ((0, 0, 0), (12, -20, 31)):
        grid = oblique((15, 16, 17), angles=angles, sizes=sizes)
        centre = grid.to_world((7, 8, 8))
        np.testing.assert_array_equal(counts(full(grid), [centre] * 4, (5, 6, 8, 10)), expected)


def test_a_seed_half_way_between_voxels():
    """CHECKS 15d, 9c: (0, -53, 26), 6 mm, on the common 2 mm grid holds 110 voxels."""
    affine = np.array([[-2, 0, 0, 90], [0, 2, 0, -126], [0, 0, 2, -72], [0, 0, 0, 1.0]])
    voxels = full(Grid((91, 109, 91), affine))
    assert counts(voxels, [(0, -53, 26)], 6) == 110


SHARED = [
    (5, [(60, (2, 0, 0)), (39, (0, 4, 0)), (18, (0, 0, 6)), (9, (-8, 0, 0))]),
    (6, [(94, (2, 0, 0)), (69, (0, 4, 0)), (44, (0, 0, 6)), (23, (-8, 0, 0))]),
    (8, [(208, (2, 0, 0)), (163, (0, 4, 0)), (118, (0, 0, 6)), (81, (-8, 0, 0))]),
    (5, [(50, (2, 2, 0)), (44, (2, 2, 2))]),
    (6, [(80, (2, 2, 0)), (68, (2, 2, 2))]),
    (8, [(190, (2, 2, 0)), (172, (2, 2, 2))]),
]


@pytest.mark.parametrize(("radius", "cases"), SHARED)
def test_shared_voxels_of_two_spheres(radius, cases):
    """CHECKS 9d."""
    centres = [(0, 0, 0), *(shift for _, shift in cases)]
    weights = sphere_weights(full(isotropic(2.0)), centres, radius)
    shared = (weights[[0]] @ weights.T).toarray()[0, 1:]
    np.testing.assert_array_equal(shared, [count for count, _ in cases])


def test_white_noise_identity():
    """CHECKS 9d, identity: the correlation of two sphere means of white voxels."""
    shifts = [(0, 0, 0), (2, 0, 0), (4, 0, 0), (6, 0, 0), (8, 0, 0)]
    weights = sphere_weights(full(isotropic(2.0)), shifts, 6).toarray()
    means = weights / weights.sum(axis=1, keepdims=True)
    cov = means @ means.T
    found = cov[0, 1:] / cov[0, 0]
    np.testing.assert_allclose(found, (0.764228, 0.560976, 0.357724, 0.186992), atol=1e-6)


@pytest.mark.parametrize(
    ("radius", "fwhm", "expected"),
    [
        (5, 6, (0.928021, 0.740608, 0.505804, 0.292990)),
        (6, 8, (0.952593, 0.822971, 0.643692, 0.454463)),
    ],
)
def test_smooth_noise_over_voxel_spheres(radius, fwhm, expected):
    """CHECKS 12d: double sum of 4^-(d/FWHM)^2 over the voxel lists."""
    voxels = full(isotropic(2.0))
    weights = sphere_weights(voxels, [(d, 0, 0) for d in (0, 2, 4, 6, 8)], radius)
    lists = [voxels.xyz[row.indices] for row in (weights[[i]] for i in range(5))]
    cov = [np.mean(4.0 ** -((cdist(lists[0], other) / fwhm) ** 2)) for other in lists]
    np.testing.assert_allclose(np.array(cov[1:]) / cov[0], expected, atol=1e-6)


@pytest.mark.parametrize(
    ("radii", "apart", "dice"),
    [((6, 6), 3, 0.6328125), ((6, 6), 9, 0.0859375), ((8, 6), 5, 0.4255837912)],
)
def test_overlap_tends_to_the_lens_of_two_balls(radii, apart, dice):
    """CHECKS 9a: lens volume (MathWorld, Sphere-Sphere Intersection)."""
    grid = oblique((56, 56, 56), sizes=(0.35, 0.4, 0.45), origin=(-9, 0, -9))
    middle = grid.to_world((27.5, 27.5, 27.5))
    along = np.array([0.6, 0.0, 0.8]) * apart / 2
    voxels = full(grid)
    weights = sphere_weights(voxels, [middle - along, middle + along], radii)
    coverage, _ = sphere_coverage(voxels, [middle - along, middle + along], radii)
    np.testing.assert_array_equal(coverage, 1)
    shared = (weights[[0]] @ weights[[1]].T).toarray().item()
    assert 2 * shared / weights.sum() == pytest.approx(dice, abs=0.004)


def test_soft_weights_add_up_to_the_volume_of_the_ball():
    """Exact: 4/3 pi r^3, wherever the centre sits; the hard count is off by up to 20 %."""
    grid = oblique((15, 15, 15))
    centres = grid.to_world(np.random.default_rng(0).uniform(6.5, 7.5, (20, 3)))
    soft = sphere_weights(full(grid), centres, 6, "soft")
    volumes = soft.sum(axis=1) * grid.voxel_volume
    np.testing.assert_allclose(volumes, 4 / 3 * np.pi * 6**3, rtol=0.012)
    hard = sphere_weights(full(grid), centres, 6).sum(axis=1) * grid.voxel_volume
    assert volumes.std() < hard.std() / 5
    assert soft.data.max() == 1
    assert soft.data.min() > 0


@pytest.mark.parametrize(
    ("radius", "height", "cap"), [(5, 2, 54.4542726622), (6, 1, 17.8023583703)]
)
def test_soft_coverage_of_a_sphere_cut_by_the_mask(radius, height, cap):
    """CHECKS 9a: volume of a spherical cap."""
    grid = isotropic(1.0)
    cut = radius - height  # the outer face of the last voxel of the mask
    centre = np.array([0.5, 0.13, -0.21])
    mask = np.zeros(grid.shape, dtype=bool)
    mask[: 15 + cut + 1] = True
    voxels = VoxelSet.from_mask(grid, mask)
    coverage, leaves = sphere_coverage(voxels, [centre], radius, "soft")
    expected = 1 - cap / (4 / 3 * np.pi * radius**3)
    assert coverage[0] == pytest.approx(expected, abs=0.002)
    assert not leaves[0]


def naive(voxels, centre, radius, samples=1):
    """Plain loops over every voxel and, for soft weights, every point of it."""
    grid = voxels.grid
    along = (np.arange(samples) + 0.5) / samples - 0.5
    own = tuple(grid.voxel_of(centre))
    row = np.zeros(len(voxels))
    for v, ijk in enumerate(voxels.ijk):
        inside = 0
        for du in along:
            for dv in along:
                for dw in along:
                    point = grid.affine[:3, :3] @ np.add(ijk, (du, dv, dw)) + grid.affine[:3, 3]
                    inside += np.sum((point - centre) ** 2) <= (radius + 1e-6) ** 2
        row[v] = inside / samples**3
        if tuple(ijk) == own:
            row[v] = max(row[v], 1 / samples**3)
    return row


@settings(max_examples=25, deadline=None)
@given(
    turns,
    st.floats(-0.3, 0.3),
    st.tuples(*[st.floats(-2, 12)] * 3),
    st.floats(0, 9),
)
def test_members_agree_with_plain_loops(angles, shear, at, radius):
    """Naive second implementation, near and beyond the edges too."""
    grid = oblique(angles=angles, shear=shear)
    voxels = VoxelSet.from_mask(grid, random_mask())
    centre = grid.to_world(at)
    found = sphere_weights(voxels, [centre], [radius]).toarray()[0]
    np.testing.assert_array_equal(found, naive(voxels, centre, radius))


@pytest.mark.parametrize("radius", [0.05, 1.5, 4.0])
def test_soft_members_agree_with_plain_loops(radius):
    """Naive second implementation."""
    grid = oblique((5, 6, 4), shear=0.2)
    voxels = VoxelSet.from_mask(grid, random_mask((5, 6, 4), share=0.9))
    centre = grid.to_world((2.2, 3.1, 1.4))
    found = sphere_weights(voxels, [centre], radius, "soft").toarray()[0]
    np.testing.assert_allclose(found, naive(voxels, centre, radius, samples=5), atol=1e-12)


def test_sphere_means_agree_with_nilearn():
    """Other library: nilearn.maskers.NiftiSpheresMasker, centres off the grid, sphere means."""
    grid, mask = oblique(), random_mask(share=0.8)
    voxels = VoxelSet.from_mask(grid, mask)
    centres = grid.to_world(np.random.default_rng(5).uniform((2, 3, 2), (6, 8, 7), (12, 3)))
    data = np.random.default_rng(6).normal(size=(*SHAPE, 4))
    masker = NiftiSpheresMasker(
        [tuple(c) for c in centres],
        radius=5.0,
        mask_img=image(grid, mask.astype(np.uint8)),
        allow_overlap=True,
        standardize=None,
    )
    theirs = masker.fit_transform(image(grid, data)).T
    weights = sphere_weights(voxels, centres, 5.0)
    series = data[tuple(voxels.ijk.T)]
    np.testing.assert_allclose(weights @ series / weights.sum(axis=1)[:, None], theirs, atol=1e-6)


@settings(max_examples=40, deadline=None)
@given(turns, storages, st.sampled_from(["hard", "soft"]), st.integers(0, 10**6))
def test_weights_do_not_depend_on_storage(angles, storage, weighting, seed):
    """Exact property: METHODS 1, centres on voxels, faces and corners included."""
    grid, mask = oblique(angles=angles), random_mask()
    rng = np.random.default_rng(seed)
    centres = grid.to_world(rng.integers(-2, 24, (6, 3)) / 2)
    radii = rng.choice([0.0, 0.4, 2.0, 2.5, 6.0], 6)
    here = VoxelSet.from_mask(grid, mask)
    there = VoxelSet.from_mask(*restored(grid, mask, storage))
    mine = sphere_weights(here, centres, radii, weighting)
    theirs = sphere_weights(there, centres, radii, weighting)
    np.testing.assert_array_equal(mine.toarray(), theirs.toarray())
    np.testing.assert_array_equal(mine.indices, theirs.indices)
    for ours, others in zip(
        sphere_coverage(here, centres, radii, weighting),
        sphere_coverage(there, centres, radii, weighting),
        strict=True,
    ):
        np.testing.assert_allclose(ours, others, atol=1e-12)


def test_the_voxel_of_the_centre_always_belongs():
    grid = oblique()
    voxels = full(grid)
    centre = grid.to_world((3.4, 5.4, 4.4))  # 1.7 mm or more from every voxel centre
    for weighting in ("hard", "soft"):
        weights = sphere_weights(voxels, [centre], 0.01, weighting)
        assert weights.nnz == 1
        np.testing.assert_array_equal(voxels.ijk[weights.indices[0]], (3, 5, 4))


def test_coverage_and_leaving_the_image():
    """By hand: 2 mm voxels, 6 mm sphere of 123; centre on an edge voxel loses its far half."""
    grid = isotropic(2.0)
    edge, middle, beyond = grid.to_world([(0, 16, 17), (15, 16, 17), (-9, 16, 17)])
    coverage, leaves = sphere_coverage(full(grid), [edge, middle, beyond], 6)
    # layers of the sphere: 29 in the middle one (points with x2 + y2 <= 9), 47 on each side
    np.testing.assert_allclose(coverage, [(123 + 29) / 2 / 123, 1, 0])
    np.testing.assert_array_equal(leaves, [True, False, True])
    half = VoxelSet.from_mask(grid, np.indices(grid.shape)[0] <= 15)
    coverage, leaves = sphere_coverage(half, [middle], 6)
    np.testing.assert_allclose(coverage, (123 + 29) / 2 / 123)
    assert not leaves[0]


@settings(max_examples=20, deadline=None)
@given(turns, st.floats(0, 4), st.integers(0, 1000))
def test_exclusion_agrees_with_a_tree_search(angles, margin, seed):
    """Other library: scipy.spatial.cKDTree, plus the voxels that hold the centres."""
    grid = oblique(angles=angles)
    voxels = VoxelSet.from_mask(grid, random_mask())
    rng = np.random.default_rng(seed)
    centres = grid.to_world(rng.uniform(-1, 10, (5, 3)))
    radii = rng.uniform(0.1, 5, 5)
    found = cloud_exclusion(voxels, centres, radii, margin)
    expected = np.zeros(len(voxels), dtype=bool)
    for near in cKDTree(voxels.xyz).query_ball_point(centres, radii + margin + 1e-6):
        expected[near] = True
    own = voxels.rows_at(grid.voxel_of(centres))
    expected[own[own >= 0]] = True
    np.testing.assert_array_equal(found, expected)


def test_exclusion_holds_every_voxel_of_every_sphere():
    voxels = full(oblique())
    centres = voxels.grid.to_world(np.random.default_rng(8).uniform(2, 8, (6, 3)))
    held = sphere_weights(voxels, centres, 4.0).sum(axis=0) > 0
    excluded = cloud_exclusion(voxels, centres, np.full(6, 4.0), margin=voxels.grid.largest_edge)
    assert excluded[held].all()
    assert excluded.sum() > held.sum()


def test_no_spheres_and_no_voxels():
    assert sphere_weights(full(oblique()), np.empty((0, 3)), 6).shape == (0, 1080)
    empty = VoxelSet.from_mask(oblique(), np.zeros(SHAPE))
    assert sphere_weights(empty, [(0, 0, 0)], 6).shape == (1, 0)
    coverage, _ = sphere_coverage(empty, [(0, 0, 0)], 6)
    assert coverage[0] == 0


@pytest.mark.parametrize(
    ("centres", "radii", "weighting", "word"),
    [
        ([(0, 0, 0)], 6, "gentle", "weighting: 'gentle'; allowed: hard or soft"),
        ([(0, np.nan, 0)], 6, "hard", "centre"),
        ([(0, 0, 0)], -1, "hard", "radius: -1"),
        ([(0, 0, 0)], np.inf, "hard", "radius"),
    ],
)
def test_senseless_spheres_are_refused(centres, radii, weighting, word):
    with pytest.raises(StudyError, match=word):
        sphere_weights(full(oblique()), centres, radii, weighting)
