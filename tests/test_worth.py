"""What the numbers are worth, end to end: the demo's planted truth, small studies, refusals."""

from __future__ import annotations

import json
import tomllib
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from nilearn.mass_univariate import permuted_ols
from scipy import stats

from seedaudit.auditing import audit
from seedaudit.consensus.claims import judge_claim
from seedaudit.dictionary import COLUMNS
from seedaudit.errors import DataError, SeedAuditError, StudyError
from seedaudit.preflight import make_plan
from seedaudit.store import read_table, write_table
from seedaudit.study import Study
from tests.small_study import write_small_study

DEMO = Path(__file__).parent.parent / "demo_data"


@pytest.fixture(scope="module")
def demo():
    return audit(Study.load(DEMO / "study.toml"))


def changed(folder: Path, **sections) -> Study:
    """The study of a folder with some keys changed."""
    content = tomllib.loads((folder / "study.toml").read_text(encoding="utf-8"))
    for name, keys in sections.items():
        content[name] = {**content.get(name, {}), **keys}
    return Study.from_mapping(content, folder)


def test_verdicts_of_the_demo_are_the_planted_ones(demo):
    truth = json.loads((DEMO / "truth.json").read_text(encoding="utf-8"))
    table = demo.table("claims").set_index("claim")
    for claim, planted in truth["claims"].items():
        assert table.loc[claim, "verdict"] == planted["expected"], claim
    assert demo.summary["seeds"][0]["claims"] == {"holds": 1, "breaks": 1, "open": 1}
    assert list(demo.table("claims").columns) == list(COLUMNS["claims"])


def test_the_demo_is_fragile_where_its_border_is(demo):
    truth = json.loads((DEMO / "truth.json").read_text(encoding="utf-8"))
    told = demo.summary["seeds"][0]
    assert told["most_fragile_direction"] == truth["border"]["direction"] == "posterior"
    table = demo.table("tolerance")
    row = table[(table["measure"] == "ceiling_relative") & (table["direction"] == "posterior")]
    # planted 3 mm behind the seed
    assert abs(row["tolerance"].item() - truth["border"]["distance"]) <= 1.5
    assert told["ceiling_relative_high"] < 1
    assert told["floor"] < 0.3 < told["ceiling"]


def test_tables_agree_with_one_another(demo):
    told, seed = demo.summary["seeds"][0], demo.seeds[0]
    top = seed.table("ceiling")
    whole = top[(top["region"] == "") & (top["measure"] == "spatial_r")].iloc[0]
    assert told["ceiling"] == pytest.approx(whole["same"], rel=1e-5)
    assert told["ceiling_relative"] == pytest.approx(whole["relative"], rel=1e-5)
    regions = seed.table("regions").set_index("region")
    by_class = top[top["measure"] == "ac1"].set_index("region")
    for name in regions.index:
        assert regions.loc[name, "ceiling"] == by_class.loc[name, "same"]
    assert told["floor"] == pytest.approx(seed.table("controls")["spatial_r"].median(), rel=1e-5)
    drawn = seed.table("similarity").iloc[1:]
    assert drawn["ceiling_relative"].mean() == pytest.approx(told["ceiling_relative"], rel=1e-5)
    decay = seed.table("decay")
    for row in seed.table("tolerance").query("not censored").dropna().itertuples():
        line = decay[(decay["measure"] == row.measure) & (decay["direction"] == row.direction)]
        before = line[line["distance"] < row.tolerance - 0.25]["fitted"]
        after = line[line["distance"] > row.tolerance + 0.25]["fitted"]
        assert (before >= row.target - 1e-9).all()
        assert (after <= row.target + 1e-9).all()


def test_controls_are_far_alike_and_no_part_of_the_cloud(demo):
    table = demo.table("placements")
    controls = table[table["kind"] == "control"]
    assert len(controls) == 20
    assert (controls["distance"] >= 30).all()
    assert (controls["radius"] == table["radius"].iloc[0]).all()
    assert (controls["coverage"] >= 0.5).all()
    assert not set(controls["placement"]) & set(demo.table("similarity")["placement"])
    grey = make_plan(Study.load(DEMO / "study.toml"))
    assert any("control seeds" in text for text in grey.choices)
    without = audit(changed(DEMO, placements={"controls": 0, "count": 10}))
    told = without.summary["seeds"][0]
    assert told["floor"] is None
    assert any("no floor" in note for note in told["notes"])
    # nothing else depends on them
    again = audit(changed(DEMO, placements={"controls": 5, "count": 10}))
    pd.testing.assert_frame_equal(again.table("regions"), without.table("regions"))


def test_motion_and_influence(demo):
    table = demo.table("participants")
    assert table["mean_motion"].between(0.01, 1).all()
    expected = stats.spearmanr(table["mean_motion"], table["median_spatial_r"])[0]
    told = demo.summary["seeds"][0]["motion_rank_correlation"]
    assert told == pytest.approx(expected, abs=1e-5)
    confounds = sorted((DEMO / "sub-03" / "func").glob("*.tsv"))
    values = pd.concat([pd.read_csv(path, sep="\t") for path in confounds])
    mean = values["framewise_displacement"].mean()  # one volume of each run has none
    row = table[table["participant_id"] == "sub-03"]
    assert row["mean_motion"].item() == pytest.approx(mean, rel=1e-5)
    assert table["influence"].notna().all()


def test_tables_survive_the_disk(demo, tmp_path):
    for name in ("claims", "tolerance", "decay", "ceiling", "controls", "participants"):
        table = demo.table(name)
        write_table(tmp_path / f"{name}.tsv", table)
        pd.testing.assert_frame_equal(
            read_table(tmp_path / f"{name}.tsv"), table, check_dtype=False
        )


def test_family_wise_rule_against_nilearn(tmp_path):
    """The reported map's family-wise significant voxels are those of nilearn's permuted_ols."""
    write_small_study(tmp_path, participants=10)
    study = changed(tmp_path, threshold={"rule": "fwe", "level": 0.05})
    found = audit(study)
    told = found.summary["seeds"][0]
    # z of every participant, from the pass itself with the maps kept
    from seedaudit.auditing import plan_folds
    from seedaudit.sweep.schedule import sweep

    plan = make_plan(study)
    swept = sweep(plan.sweep_task(np.ones((10, 1))), plan_folds(plan))
    z = np.array([record.reported_z[0] for record in swept.records])
    z = z[:, plan.seeds[0].analysis & np.isfinite(z).all(axis=0)].astype(float)
    theirs = permuted_ols(
        np.ones((10, 1)), z, n_perm=4000, two_sided_test=True, random_state=1, output_type="dict"
    )
    # all 512 distinct sign flips, and random ones: Monte Carlo error alone
    assert told["critical_value"] == pytest.approx(
        np.quantile(np.abs(theirs["h0_max_t"]), 0.95), rel=0.03
    )
    passed = told["n_reported_positive"] + told["n_reported_negative"]
    t = np.abs(stats.ttest_1samp(z, 0).statistic)
    assert passed == (t >= told["critical_value"]).sum()
    assert passed > 0


def claims_file(folder: Path, rows: str) -> dict:
    head = "claim\tx\ty\tz\tradius\tregion\tdirection\n"
    (folder / "claims.tsv").write_text(head + rows, encoding="utf-8")
    return {"table": "claims.tsv", "smallest_effect": 0.05}


def test_claims_about_groups_are_the_judgement_of_their_means(tmp_path):
    """The program's table against `judge_claim` on means taken from the participants' records."""
    write_small_study(tmp_path, participants=10, model="~ arm + age", rule="p", level=0.05)
    rows = (
        "more\tn/a\tn/a\tn/a\tn/a\tPartner\tpositive\n"
        "less\tn/a\tn/a\tn/a\tn/a\tPartner\tarm[restricted] - arm[rested]\n"
        "mean\tn/a\tn/a\tn/a\tn/a\tOpposite\t-0.5*(arm[rested] + arm[restricted])\n"
    )
    study = changed(tmp_path, claims=claims_file(tmp_path, rows))
    found = audit(study).table("claims").set_index("claim")
    plan = make_plan(study)
    from seedaudit.auditing import plan_folds
    from seedaudit.sweep.schedule import sweep

    swept = sweep(plan.sweep_task(plan.design.matrix), plan_folds(plan))
    n_drawn = int((plan.seeds[0].cloud.table["kind"] == "jitter").sum())
    distance = plan.seeds[0].cloud.table["distance"].to_numpy()[: n_drawn + 1]
    critical = np.full(n_drawn + 1, stats.t.ppf(0.975, 10 - 3))
    for column, claim in enumerate(plan.seeds[0].claims, plan.n_regions):
        means = np.array([r.kept[0].target_means[: n_drawn + 1, column] for r in swept.records])
        expected = judge_claim(
            means, distance, plan.design.matrix, claim.claim.contrast, claim.claim.sign, critical,
            random_state=20,
        )  # fmt: skip
        row = found.loc[claim.claim.name]
        assert row["verdict"] == expected.verdict
        assert row["reported_effect"] == pytest.approx(expected.effect[0], abs=1e-6)
        assert row["reported_t"] == pytest.approx(expected.t[0], rel=1e-5)
        assert row["share_passing"] == pytest.approx(expected.share_passing)
        assert row["difference_p"] == pytest.approx(expected.difference_p, abs=1e-6)
        assert row["reported_low"] < row["reported_effect"] < row["reported_high"]
    # the same sentence, said the other way round
    assert found.loc["less", "reported_effect"] == pytest.approx(
        -found.loc["more", "reported_effect"]
    )


@pytest.mark.parametrize(
    ("row", "kind", "words"),
    [
        ("c\tn/a\tn/a\tn/a\tn/a\tPartnr\tpositive", StudyError, "did you mean Partner"),
        ("c\tn/a\tn/a\tn/a\tn/a\tPartner\tarm[x]", StudyError, "positive, negative, or a contrast"),
        ("c\tn/a\tn/a\tn/a\tn/a\tOutside\tpositive", DataError, "no voxel of it lies in the mask"),
        ("c\t-7\t-48\t20\t2\tn/a\tpositive", DataError, "lies wholly in the spheres of the cloud"),
        ("c\t500\t0\t0\t4\tn/a\tpositive", DataError, "no voxel of it lies in the mask"),
    ],
)  # fmt: skip
def test_problems_of_claims_are_found_before_computing(tmp_path, row, kind, words):
    write_small_study(tmp_path, participants=4)
    with pytest.raises(SeedAuditError, match=words) as caught:
        make_plan(changed(tmp_path, claims=claims_file(tmp_path, row + "\n")))
    assert isinstance(caught.value, kind)


def test_one_participant_says_what_it_cannot_tell(tmp_path):
    write_small_study(tmp_path, participants=1, two_runs=("sub-01",), rule="p", level=0.01)
    rows = "c\tn/a\tn/a\tn/a\tn/a\tPartner\tpositive\n"
    found = audit(changed(tmp_path, claims=claims_file(tmp_path, rows)))
    told = found.summary["seeds"][0]
    assert told["ceiling_relative_low"] is None
    assert told["floor"] is not None
    assert told["smoothness_mm"] is None
    assert found.table("ceiling")["measure"].unique().tolist() == ["spatial_r"]
    assert found.table("regions")["ceiling"].isna().all()
    claim = found.table("claims").iloc[0]
    assert claim["verdict"] == "open"
    assert "one participant" in claim["note"]
    assert np.isfinite(claim["reported_effect"])
    assert list(found.table("ceiling").columns) == list(COLUMNS["ceiling"])


def test_halves_of_the_time_series_of_one_participant(tmp_path):
    """Each run cleaned as a whole by least squares, cut in two, and correlated from scratch."""
    small = write_small_study(tmp_path, participants=1, two_runs=("sub-01",), rule="p", level=0.01)
    plan = make_plan(Study.load(small.study_file))
    seed = plan.seeds[0]
    weights = seed.cloud.weights[seed.used].toarray()
    ijk = tuple(plan.voxels.ijk.T)
    z, shares = [[], []], []
    for run in small.runs["sub-01"]:
        series = run.data[ijk].T.astype(float)
        x = np.column_stack([np.ones(len(series)), run.nuisance])
        clean = series - x @ np.linalg.lstsq(x, series, rcond=None)[0]
        middle = len(series) // 2
        shares.append((middle, len(series) - middle))
        for half, part in enumerate((clean[:middle], clean[middle:])):
            seeds = part @ (weights / weights.sum(axis=1, keepdims=True)).T
            both = np.corrcoef(seeds.T, part.T)[: len(weights), len(weights) :]
            z[half].append(np.arctanh(np.clip(both, -1 + 1e-7, 1 - 1e-7)))
    maps = [np.average(part, axis=0, weights=np.array(shares)[:, half] - 4)
            for half, part in enumerate(z)]  # fmt: skip
    one, other = (part[:, seed.analysis] for part in maps)
    n_drawn = int((seed.cloud.table["kind"] == "jitter").sum())
    r = [(np.corrcoef(one[0], other[i])[0, 1] + np.corrcoef(other[0], one[i])[0, 1]) / 2
         for i in range(n_drawn + 1)]  # fmt: skip
    told = audit(plan).summary["seeds"][0]
    assert told["ceiling"] == pytest.approx(r[0], abs=1e-4)
    assert told["ceiling_relative"] == pytest.approx(np.mean(r[1:]) / r[0], abs=1e-4)


def test_a_family_wise_rule_needs_participants(tmp_path):
    write_small_study(tmp_path, participants=4)
    with pytest.raises(StudyError, match="flipping the signs of 4"):
        make_plan(changed(tmp_path, threshold={"rule": "fwe", "level": 0.05}))
    with pytest.raises(StudyError, match="intersection"):
        make_plan(
            changed(tmp_path, threshold={"rule": "fwe", "level": 0.2}, group={"missing": "counts"})
        )
