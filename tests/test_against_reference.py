"""The whole program against the naive float64 implementation, on a small oblique study."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest

from seedaudit.auditing import audit, plan_folds
from seedaudit.inference.glm import orthonormal_design
from seedaudit.inference.group import ThresholdRule, classifier
from seedaudit.preflight import make_plan
from seedaudit.study import Study
from seedaudit.sweep.moments import merged
from seedaudit.sweep.participant import participant_blocks
from seedaudit.sweep.schedule import load_run, sweep
from tests.reference import classes_stage, maps_stage, reference_audit, rows_of
from tests.small_study import write_small_study
from tests.whole_states import group_maps, some

CUTS = (0.1, 0.2, 0.35, 0.5)


def both(folder, **options) -> SimpleNamespace:
    """The program's plan and result, and the reference on the same placements."""
    small = write_small_study(folder, **options)
    plan = make_plan(Study.load(small.study_file))
    table = plan.seeds[0].cloud.table
    assert table["used"].all()
    # control seeds go through the same pass, as its last rows; the reference knows none
    assert (table["kind"] == "control").tolist() == [False] * 13 + [True] * 20
    table = table[table["kind"] != "control"]
    placements = [tuple(row) for row in table[["x", "y", "z", "radius"]].to_numpy()]
    inputs = (list(small.runs.values()), small.mask, small.affine, placements)
    reference = reference_audit(
        *inputs, small.labels, plan.regions.index, small.design, small.contrast,
        small.rule, small.level, densities=CUTS, effect_cuts=CUTS,
    )  # fmt: skip
    order = rows_of(reference["voxels"], plan.voxels.ijk)
    return SimpleNamespace(
        small=small, plan=plan, inputs=inputs, reference=reference, order=order,
        result=audit(plan, workers=2),
    )  # fmt: skip


@pytest.fixture(scope="module")
def mean_study(tmp_path_factory):
    return both(tmp_path_factory.mktemp("mean"))


@pytest.fixture(scope="module")
def arms_study(tmp_path_factory):
    """Two arms and a covariate, stored flipped and with permuted axes."""
    return both(
        tmp_path_factory.mktemp("arms"), participants=10, model="~ arm + age", rule="p", level=0.05,
        flip=(True, False, True), permute=(2, 0, 1),
    )  # fmt: skip


@pytest.fixture(scope="module", params=["mean_study", "arms_study"])
def case(request):
    return request.getfixturevalue(request.param)


def in_order(case, values):
    """Reference values over its analysis voxels, as a list over the program's mask voxels."""
    whole = np.full(len(case.reference["voxels"]), np.nan)
    whole[case.reference["rows"]] = values
    return whole[case.order]


def test_fisher_z_of_every_participant(case):
    plan = case.plan
    weights = plan.sweep_task(plan.design.matrix).weights[: len(case.inputs[-1])]
    for participant, person in zip(plan.participants, case.reference["participants"], strict=True):
        runs = [load_run(run, plan.cleaning, plan.voxels)[0] for run in participant.runs]
        blocks, _ = participant_blocks(runs, weights)
        parts = list(blocks)
        z = np.concatenate([part.z for part in parts], axis=1)
        valid = np.concatenate([part.valid for part in parts])
        np.testing.assert_array_equal(valid, ~np.asarray(person["missing"])[case.order])
        np.testing.assert_allclose(z[:, valid], person["z"][:, case.order][:, valid], atol=1e-5)


def group_of(case, rule, level):
    """Group maps of the program on the analysis voxels that both sides share."""
    plan = case.plan
    matrix, contrast = orthonormal_design(plan.design.matrix, plan.design.contrast)
    swept = sweep(plan.sweep_task(matrix), plan_folds(plan))
    keep = np.isin(case.order, case.reference["rows"])
    classes_of = classifier(
        ThresholdRule(rule, level), plan.voxels.ijk[keep], plan.voxels.grid.shape
    )
    moments = some(merged(swept.folds), slice(len(case.inputs[-1])), keep)
    return group_maps(moments, contrast, len(plan.participants), classes_of), case.order[keep]


@pytest.mark.parametrize(
    ("rule", "level"),
    [("p", 0.05), ("fdr", 0.05), ("fdr", 0.2), ("bonferroni", 0.05), ("t", 2.5), ("effect", 0.2),
     ("density", 0.1), ("density", 0.33)],
)  # fmt: skip
def test_group_maps_and_classes(case, rule, level):
    maps, rows = group_of(case, rule, level)
    group = case.reference["group"]
    np.testing.assert_allclose(maps.effects, group["effect"][:, rows], atol=1e-5)
    np.testing.assert_allclose(maps.statistics, group["t"][:, rows], rtol=1e-4, atol=1e-4)
    np.testing.assert_allclose(maps.standard_error, group["se"][0, rows], rtol=1e-4)
    expected = classes_stage(case.reference, rule, level)
    position = {row: i for i, row in enumerate(case.reference["rows"])}
    np.testing.assert_array_equal(maps.classes, expected[:, [position[row] for row in rows]])


def test_maps(case):
    names = {
        "agreement_positive": "positive",
        "agreement_negative": "negative",
        "modal_class": "modal_class",
        "modal_share": "modal_share",
        "safe": "safe",
        "conjunction": "conjunction",
        "effect_mean": "effect_mean",
        "effect_sd": "effect_sd",
        "placement_to_sampling": "placement_to_sampling",
    }
    ijk = tuple(case.plan.voxels.ijk.T)
    for ours, theirs in names.items():
        found = case.result.maps[ours].get_fdata()
        expected = in_order(case, case.reference["agreement"][theirs])
        np.testing.assert_allclose(found[ijk], expected, rtol=1e-4, atol=2e-5, err_msg=ours)
        outside = np.ones(found.shape, bool)
        outside[ijk] = False
        assert np.isnan(found[outside]).all()
    expected = in_order(case, case.reference["agreement"]["contested"])
    found = case.result.maps["contested"].get_fdata()[ijk]
    np.testing.assert_array_equal(found, np.nan_to_num(expected))
    analysed = case.result.maps["analysis_mask"].get_fdata()[ijk]
    np.testing.assert_array_equal(analysed > 0, ~np.isnan(expected))
    reference = case.reference
    spread = reference["agreement"]
    np.testing.assert_allclose(
        case.result.maps["effect_range"].get_fdata()[ijk],
        in_order(case, spread["effect_max"] - spread["effect_min"]),
        atol=2e-5,
    )


def test_similarity_and_pairs(case):
    columns = ["dice_positive", "dice_negative", "spatial_r", "concordance", "rms_difference"]
    found = case.result.table("similarity").iloc[1:]
    for column in columns:
        expected = [row[column] for row in case.reference["similarity"]]
        np.testing.assert_allclose(found[column], expected, atol=2e-5, err_msg=column)
    classes = case.reference["classes"]
    for column, tail in [("n_positive", 1), ("n_negative", -1)]:
        np.testing.assert_array_equal(
            case.result.table("similarity")[column], (classes == tail).sum(axis=1)
        )
    pairs = case.result.table("pairs")
    expected = [row for row in case.reference["pairs"] if row["placement_a"] > 0]
    for column in ["placement_a", "placement_b", "dice_positive", "dice_negative", "spatial_r"]:
        np.testing.assert_allclose(
            pairs[column], [row[column] for row in expected], atol=2e-5, err_msg=column
        )


def test_regions_and_chance_corrected_agreement(case):
    table = case.result.regions.set_index("index")
    for index, expected in case.reference["regions"].items():
        for column, value in expected.items():
            np.testing.assert_allclose(
                table.loc[index, column], value, atol=2e-5, err_msg=f"{index} {column}"
            )
    summary = case.result.summary["seeds"][0]
    np.testing.assert_allclose(summary["stability"], case.reference["ac1"], rtol=1e-5)
    np.testing.assert_allclose(summary["fleiss_kappa"], case.reference["kappa"], rtol=1e-5)


def test_threshold_sweep(case):
    table = case.result.table("thresholds")
    for expected in case.reference["sweep"]:
        row = table[(table["rule"] == expected["rule"]) & np.isclose(table["cut"], expected["cut"])]
        for tail in ("positive", "negative"):
            column = f"dice_{tail}_mean"
            np.testing.assert_allclose(row[column].item(), expected[column], atol=2e-5)
        classes = classes_stage(case.reference, expected["rule"], expected["cut"])[1:]
        np.testing.assert_allclose(row["n_positive"].item(), (classes == 1).sum(axis=1).mean())


def test_participants(arms_study, mean_study):
    """Similarity of the shifted maps within a participant, over that participant's own voxels."""
    for case in (arms_study, mean_study):
        table = case.result.table("participants")
        margin_rows = np.flatnonzero(~case.reference["excluded"])
        for row, person in zip(table.itertuples(), case.reference["participants"], strict=True):
            own = margin_rows[~np.asarray(person["missing"])[margin_rows]]
            z = person["z"][:, own]
            r = [np.corrcoef(z[0], drawn)[0, 1] for drawn in z[1:]]
            np.testing.assert_allclose(row.median_spatial_r, np.median(r), atol=1e-5)
            np.testing.assert_allclose(row.min_spatial_r, min(r), atol=1e-5)


def test_single_participant_scores(tmp_path):
    small = write_small_study(tmp_path, participants=1, two_runs=("sub-01",), rule="p", level=0.01)
    plan = make_plan(Study.load(small.study_file))
    table = plan.seeds[0].cloud.table.query("kind != 'control'")
    placements = [tuple(r) for r in table[["x", "y", "z", "radius"]].to_numpy()]
    reference = maps_stage(
        list(small.runs.values()), small.mask, small.affine, placements, np.ones((1, 1)), np.ones(1)
    )
    order = rows_of(reference["voxels"], plan.voxels.ijk)
    runs = [load_run(run, plan.cleaning, plan.voxels)[0] for run in plan.participants[0].runs]
    weights = plan.sweep_task(np.ones((1, 1))).weights[: len(table)]
    parts = list(participant_blocks(runs, weights, known_variance=True)[0])
    z = np.concatenate([part.z for part in parts], axis=1)
    variance = np.concatenate([part.variance for part in parts], axis=1)
    complete = reference["complete"][order]
    expected = reference["group"]["t"][:, order][:, complete]
    found = (z / np.sqrt(variance))[:, complete]
    # far beyond the clip of r neither side has digits: the voxels of a sphere itself
    ordinary = np.abs(z[:, complete]) < 4
    np.testing.assert_allclose(found[ordinary], expected[ordinary], rtol=1e-4, atol=1e-4)
    result = audit(plan)
    summary = result.summary["seeds"][0]
    assert summary["statistic"] == "z"
    assert summary["df"] is None
    assert summary["stability_low"] is None
    analysis = np.isin(order, reference["rows"])
    np.testing.assert_allclose(
        result.maps["t_reported"].get_fdata()[tuple(plan.voxels.ijk[analysis].T)],
        reference["group"]["t"][0, order[analysis]],
        rtol=1e-4,
        atol=1e-4,
    )
