"""A planted border is found where it is, and a network without one costs nothing."""

from __future__ import annotations

import numpy as np
import pytest

from seedaudit.consensus.ceiling import ceiling
from seedaudit.consensus.overlap import dice_with_reference
from seedaudit.consensus.tolerance import decay_fits, most_fragile, tolerance_table
from seedaudit.inference.group import ThresholdRule, classifier
from seedaudit.sweep.moments import merged
from tests.simulations.world import World, fold_moments, replicates, told
from tests.whole_states import group_maps

ONE = np.ones(1)


def examine(world: World, rule: ThresholdRule, rng: np.random.Generator):
    """Ceiling, and table of tolerances, of one study."""
    folds, sizes = fold_moments(world.maps(rng))
    voxels = np.arange(world.voxels)
    ijk = np.stack([voxels, 0 * voxels, 0 * voxels], axis=1).astype(np.int32)
    classes_of = classifier(rule, ijk, (world.voxels, 1, 1))
    total = merged(folds)
    maps = group_maps(total, ONE, 2, classes_of)
    without = [group_maps(total - fold, ONE, 2, classes_of) for fold in folds]
    tails = [
        np.stack([(part.classes == sign).sum(axis=1) for sign in (1, -1)], axis=1)
        for part in (maps, *without)
    ]
    top = ceiling(
        folds, sizes, ONE, np.ones(world.voxels, bool), np.array(tails), voxels * 3 // world.voxels,
        3,
    )  # fmt: skip
    assert top is not None
    similarity = {
        "dice_positive": dice_with_reference(maps.classes[0], maps.classes[1:]).dice[:, 0],
        "ceiling_relative": top.placement_relative,
    }
    return top, tolerance_table(decay_fits(world.shifts[1:], similarity))


def tolerance(table, measure, direction):
    row = (table["measure"] == measure) & (table["direction"] == direction)
    return float(table["tolerance"][row][0]), bool(table["censored"][row][0])


@pytest.mark.parametrize("radius", [2.5, 4.0, 6.0])
def test_a_border_at_3_mm_is_found_within_1_mm(radius):
    world = World(border=3.0, radius=radius, count=100, participants=20)
    rng = np.random.default_rng(11)
    distances = []
    for _ in range(replicates(3, 30)):
        _, table = examine(world, ThresholdRule("density", 1 / 3), rng)
        for measure in ("dice_positive", "ceiling_relative"):
            found, censored = tolerance(table, measure, "posterior")
            distances.append(found)
            assert abs(found - 3) <= 1, (measure, found)
            assert not censored
            assert tolerance(table, measure, "anterior")[1]
        assert most_fragile(table, "ceiling_relative") == "posterior"
    told(f"border at 3 mm, radius {radius:g}, least", min(distances), len(distances))
    told(f"border at 3 mm, radius {radius:g}, most", max(distances), len(distances))


def test_a_homogeneous_network_costs_nothing_and_a_border_does():
    rng = np.random.default_rng(12)
    seen: dict[str, list[float]] = {"homogeneous": [], "border": []}
    for _ in range(replicates(3, 30)):
        inside, table = examine(World(border=np.inf), ThresholdRule("fdr", 0.05), rng)
        for measure in ("spatial_r", "ac1", "dice_positive"):
            assert abs(inside.relative[measure][0, 0] - 1) <= 0.05, measure
        assert tolerance(table, "ceiling_relative", "all")[1]
        edge, table = examine(World(border=1.0), ThresholdRule("fdr", 0.05), rng)
        for measure in ("spatial_r", "ac1", "dice_positive"):
            assert edge.relative[measure][0, 0] < 0.9, measure
        seen["homogeneous"].append(inside.relative["spatial_r"][0, 0])
        seen["border"].append(edge.relative["spatial_r"][0, 0])
        # clearly: its whole interval lies below
        assert edge.relative["spatial_r"][2, 0] < 0.95
        assert not tolerance(table, "ceiling_relative", "all")[1]
    for name, values in seen.items():
        told(f"ceiling-relative, {name}, least", min(values), len(values))
        told(f"ceiling-relative, {name}, most", max(values), len(values))
