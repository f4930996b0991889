"""The demo is what its truth file says, and the audit finds what was planted in it.

Expected values come from demo_data/truth.json: the plan of the generator, with nothing in it that
an audit computed.
"""

from __future__ import annotations

import json
from pathlib import Path
from types import SimpleNamespace

import nibabel as nib
import numpy as np
import pytest
from scipy import stats

from seedaudit import Study, audit

DEMO = Path(__file__).parent.parent / "demo_data"
MEGABYTE = 2**20
CLEAR = 0.3  # latent correlation from which a connection is seen with 12 participants
AXES = ("x", "y", "z")


@pytest.fixture(scope="module")
def truth() -> dict:
    return json.loads((DEMO / "truth.json").read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def result():
    return audit(Study.load(DEMO / "study.toml"), workers=2)


@pytest.fixture(scope="module")
def arms():
    return audit(Study.load(DEMO / "study_arms.toml"), workers=2)


def groups(result, truth) -> SimpleNamespace:
    """Drawn placements by where their centre is: beyond the planted border, or before it."""
    border = truth["border"]
    table = result.placements.merge(result.similarity, on=["seed", "placement", "distance"])
    drawn = table[table["placement"] > 0]
    beyond = (drawn[list(AXES)] - border["nearest_point"]) @ border["direction_vector"] > 0
    assert 10 < beyond.sum() < len(drawn) - 10
    return SimpleNamespace(all=drawn, across=drawn[beyond], home=drawn[~beyond])


def sector(drawn):
    """The direction of each shift: the axis it is longest along, and the sign."""
    names = {
        "x": ("left", "right"),
        "y": ("posterior", "anterior"),
        "z": ("inferior", "superior"),
    }
    shifts = drawn[["dx", "dy", "dz"]].to_numpy()
    longest = np.abs(shifts).argmax(axis=1)
    signs = (np.take_along_axis(shifts, longest[:, None], axis=1)[:, 0] > 0).astype(int)
    return np.array([names[AXES[axis]][sign] for axis, sign in zip(longest, signs, strict=True)])


def test_size_and_border(truth):
    size = sum(path.stat().st_size for path in DEMO.rglob("*") if path.is_file())
    assert size <= 10 * MEGABYTE
    seed, border = truth["seed"], truth["border"]
    reported = Study.load(DEMO / "study.toml").seed[0]
    assert list(reported.at) == seed["at"]
    assert reported.radius == seed["radius"]
    # the border is a plane: its distance is that of the nearest point, along its direction
    gap = np.subtract(border["nearest_point"], seed["at"])
    assert gap @ border["direction_vector"] == pytest.approx(3.0)
    assert np.linalg.norm(gap) == pytest.approx(3.0)


def test_border_in_the_label_image(truth, result):
    """Along the line through the seed the label changes within a voxel of the planted border."""
    labels = result.maps["region_labels"].get_fdata()
    names = dict(zip(result.regions["index"], result.regions["region"], strict=True))
    border = truth["border"]
    direction = np.array(border["direction_vector"])
    inverse = np.linalg.inv(nib.Nifti1Image.from_filename(DEMO / "mask.nii.gz").affine)

    def network(at) -> str:
        voxel = np.rint(nib.affines.apply_affine(inverse, at)).astype(int)
        return names[int(labels[tuple(voxel)])]

    assert network(border["nearest_point"] - 5.0 * direction) == border["network"]
    assert network(border["nearest_point"] + 5.0 * direction) == border["neighbour"]


def test_placements_across_the_border_give_another_map(result, truth):
    """Medians apart by a margin, and rank-sum p (scipy) below 1e-6; sizes of 24 and 76.

    Only the negative tail: the reported sphere reaches over the border itself, so that its positive
    map holds both networks and loses one of them in either direction.
    """
    found = groups(result, truth)
    for column, margin in [("spatial_r", 0.2), ("dice_negative", 0.4), ("concordance", 0.2)]:
        assert found.home[column].median() - found.across[column].median() > margin
        p = stats.mannwhitneyu(found.across[column], found.home[column], alternative="less").pvalue
        assert p < 1e-6
    larger = found.across["rms_difference"].median() - found.home["rms_difference"].median()
    assert larger > 0.05


def test_similarity_falls_towards_the_border(result, truth):
    """How far a shift goes along the planted direction ranks the spatial correlation beyond it."""
    found = groups(result, truth)
    border = truth["border"]
    depth = (found.all[list(AXES)] - border["nearest_point"]) @ border["direction_vector"]
    beyond = depth > -1
    rho = stats.spearmanr(depth[beyond], found.all["spatial_r"][beyond]).statistic
    assert rho < -0.8


def test_planted_direction_is_the_most_damaging(result, truth):
    drawn = groups(result, truth).all
    for column in ("spatial_r", "dice_negative"):
        median = drawn[column].groupby(sector(drawn)).median()
        assert len(median) == 6
        assert median.idxmin() == truth["border"]["direction"]
        others = median.drop(truth["border"]["direction"])
        assert others.min() - median.min() > 0.1


@pytest.mark.parametrize("measure", ["dice_negative", "ceiling_relative"])
def test_most_fragile_direction(result, truth, measure):
    """The tolerances name the planted direction, by the measures that fall across the border."""
    found = result.summary["seeds"][0]["tolerances"][measure]
    assert found["most_fragile_direction"] == truth["border"]["direction"]
    decay = result.table("decay")
    farthest = decay[decay["measure"] == measure].groupby("direction")["fitted"].last()
    assert farthest.idxmin() == truth["border"]["direction"]


def test_planted_connections_as_reported(result, truth):
    """Signs of the reported effects; clear connections have an interval without 0."""
    expected = truth["points"]["reported"]["expected"]
    table = result.regions.set_index("region")
    assert set(table.index) == set(expected)
    for region, planted in expected.items():
        row = table.loc[region]
        if planted["sign"]:
            assert np.sign(row["reported_effect"]) == planted["sign"]
        if abs(planted["r"]) >= CLEAR:
            assert row["reported_low"] * row["reported_high"] > 0
            share = "reported_positive" if planted["sign"] > 0 else "reported_negative"
            assert row[share] > 0.5
    r = [expected[region]["r"] for region in table.index]
    assert stats.spearmanr(r, table["reported_effect"]).statistic > 0.9


def test_states_on_both_sides_of_the_border(result, truth):
    """The seed's own network is held, the neighbour contested; the planted change of sign shows."""
    table = result.regions.set_index("region")
    border = truth["border"]
    assert table.loc[border["network"], "state"] == "held"
    assert table.loc[border["neighbour"], "state"] == "contested"
    inside, across = (truth["points"][point]["expected"] for point in ("inside", "across"))
    turning = [name for name in inside if inside[name]["sign"] * across[name]["sign"] < 0]
    assert "attention-dorsal" in turning
    steady = [name for name in inside if inside[name]["sign"] == across[name]["sign"] != 0]
    assert steady == ["lateral-parietal"]
    for name in turning:
        assert table.loc[name, "effect_min"] < -0.1
        assert table.loc[name, "effect_max"] > 0.1
        assert table.loc[name, "state"] == "contested"
    assert table.loc[steady, "state"].tolist() == ["held"]
    assert table.loc[steady, "stability"].min() > table.loc[turning, "stability"].max()


def test_headline(result):
    summary = result.summary["seeds"][0]
    assert summary["n_participants"] == 12
    assert summary["n_placements_used"] == 100
    participants = result.table("participants").set_index("participant_id")
    assert participants.loc["sub-03", "n_runs"] == 2
    assert participants["used"].all()
    assert summary["regions"]["contested"] >= 2
    assert summary["contested_share"] > summary["safe_share"] > 0


def test_arms(arms, truth):
    """The one planted difference of the arms has its sign; the other regions' intervals hold 0."""
    table = arms.regions.set_index("region")
    seed_network, target = truth["arm_difference"]["connection"]
    assert seed_network == truth["border"]["network"]
    row = table.loc[target]
    assert (
        np.sign(row["reported_effect"]) == truth["arm_difference"]["sign_rested_minus_restricted"]
    )
    assert row["reported_low"] > 0
    assert row["reported_positive"] > 0.1
    assert row["sign_share"] == 1
    for _, other in table.drop(target).iterrows():
        assert other["reported_low"] < 0 < other["reported_high"]
    # two arms and age: 12 - 3
    assert arms.summary["seeds"][0]["df"] == 9
    # the connection is one of the seed's network, so it fades beyond the border
    found = groups(arms, truth)
    assert found.home["spatial_r"].median() - found.across["spatial_r"].median() > 0.2
