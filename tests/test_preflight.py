"""From a study to a plan: what is found, what is judged, what is said once."""

from __future__ import annotations

import shutil
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

from seedaudit.errors import DataError, Findings, Problem, StudyError, listed
from seedaudit.forecast import forecast
from seedaudit.inputs.discover import Run
from seedaudit.overview import aligned, overview, overview_text
from seedaudit.participants import note_people
from seedaudit.preflight import make_plan
from seedaudit.study import Study
from tests.breaks import Break, both, forms_disagree, image, one_more_slice, put, shift_origin, swap
from tests.small_brain import brain_mask
from tests.small_study import REPETITION_TIME, write_small_study


@pytest.fixture(scope="module")
def base(tmp_path_factory) -> Path:
    return write_small_study(tmp_path_factory.mktemp("base"), participants=4).folder


@pytest.fixture
def plan_of(base, tmp_path):
    folder = tmp_path / "study"
    shutil.copytree(base, folder)

    def go(change: Break = lambda folder: None):
        change(folder)
        return make_plan(Study.load(folder / "study.toml"))

    return go


def test_the_plan_of_a_sound_study(plan_of, base):
    """Against nibabel: mask voxels, volumes, TR; and the degrees of freedom counted by hand."""
    plan = plan_of()
    assert [p.participant for p in plan.participants] == ["sub-01", "sub-02", "sub-03", "sub-04"]
    assert [len(p.runs) for p in plan.participants] == [1, 1, 2, 1]
    assert [p.row for p in plan.participants] == [0, 1, 2, 3]
    assert len(plan.voxels) == int((nib.load(base / "mask.nii.gz").get_fdata() > 0).sum())
    for participant in plan.participants:
        for run in participant.runs:
            stored = nib.load(base / run.header.path.name)
            assert run.header.n_volumes == stored.shape[3]
            assert run.header.repetition_time == REPETITION_TIME
            # intercept, drift, and the seven columns that trans_* and rot_* match
            assert run.residual_df == stored.shape[3] - 1 - 1 - 7
    assert plan.set_aside == ()


def test_analysis_voxels_keep_away_from_the_cloud(plan_of):
    """No analysis voxel within radius + margin of a placement; every other mask voxel is one."""
    plan = plan_of(put("consensus", "exclude_margin = 2.0"))
    seed = plan.seeds[0]
    own = seed.cloud.table[seed.cloud.table["used"] & (seed.cloud.table["kind"] != "control")]
    centres = own[["x", "y", "z"]].to_numpy()
    away = np.linalg.norm(plan.voxels.xyz[:, None] - centres[None], axis=2).min(axis=1)
    assert away[seed.analysis].min() > 5 + 2
    # beside the widened spheres, only the voxels that contain a centre are left out
    assert away[~seed.analysis].max() <= 5 + 2 + 1e-6


def test_the_odd_run_is_told_as_odd(plan_of):
    """The grid that most runs share is the usual one, wherever the odd run stands."""
    with pytest.raises(DataError) as raised:
        plan_of(image(1, affine=shift_origin))
    (problem,) = raised.value.problems
    assert problem.where == "sub-01_task-rest_run-1_bold.nii.gz"
    assert "another grid than sub-02_task-rest_run-1_bold.nii.gz" in problem.found


def test_a_second_run_on_another_grid(plan_of):
    """One bad run of two sets the whole participant aside, and only that one."""

    def second(folder: Path) -> None:
        image("sub-03_task-rest_run-2_bold.nii", one_more_slice)(folder)

    plan = plan_of(both(second, put("data", 'on_bad_run = "set-aside"')))
    assert [p.participant for p in plan.participants] == ["sub-01", "sub-02", "sub-04"]
    assert [p.row for p in plan.participants] == [0, 1, 2]
    assert len(plan.design.matrix) == 3
    (record,) = plan.set_aside
    assert (record.participant, record.n_runs, record.used) == ("sub-03", 2, False)
    assert record.reason.startswith("sub-03_task-rest_run-2_bold.nii: is on another grid")


def test_the_model_is_judged_with_everyone_when_a_bad_run_stops(plan_of):
    """A bad run must not be taken for a missing arm."""
    with pytest.raises(DataError) as raised:
        plan_of(both(
            image(2, one_more_slice), image(4, one_more_slice),
            swap(('model = "~ 1"',
                  'model = "~ arm"\neffect = "arm[rested] - arm[restricted]"'))))  # fmt: skip
    assert {problem.where[:6] for problem in raised.value.problems} == {"sub-02"}
    assert "sub-04_task-rest_run-1_bold.nii.gz" in raised.value.problems[0].where


def test_a_mask_of_a_run_and_its_grid(plan_of):
    def own_mask(folder: Path) -> None:
        shutil.copy(folder / "mask.nii.gz", folder / "own.nii.gz")
        image("own.nii.gz", affine=shift_origin)(folder)
        text = (folder / "runs.tsv").read_text().splitlines()
        rows = [text[0] + "\tmask", text[1] + "\town.nii.gz", *(row + "\tn/a" for row in text[2:])]
        (folder / "runs.tsv").write_text("\n".join(rows) + "\n")

    with pytest.raises(DataError, match=r"own\.nii\.gz: another grid than sub-01_task"):
        plan_of(own_mask)


def test_presence_without_a_mask(plan_of):
    """Voxels that hold something in every first volume: here the brain less what one run lacks."""

    def emptied(number: int):
        def change(data):
            data[~brain_mask()] = 0
            if number == 4:
                data[5, 7, 4] = 0

        return change

    change = both(
        *(image(number, emptied(number)) for number in (1, 2, 3, 4)),
        image("sub-03_task-rest_run-2_bold.nii", emptied(0)),
        swap(('mask = "mask.nii.gz"\n', "")))  # fmt: skip
    plan = plan_of(change)
    expected = brain_mask()
    expected[5, 7, 4] = False
    found = np.zeros(expected.shape, bool)
    found[tuple(plan.voxels.ijk.T)] = True
    np.testing.assert_array_equal(found, expected)
    assert f"no mask was given: {expected.sum()} voxels" in " ".join(plan.choices)


def test_repetition_time_of_the_study_wins(plan_of):
    """0.8 s from the study in place of 2 s: other cosines lie outside the band."""
    slow = plan_of(put("cleaning", "band = [0.02, 0.5]"))
    n = slow.participants[0].runs[0].header.n_volumes
    fast = make_plan(_with(slow.study, {"repetition_time": 0.8}))
    for plan, time in ((slow, 2.0), (fast, 0.8)):
        frequency = np.arange(1, n) / (2 * n * time)
        removed = int(np.sum((frequency < 0.02) | (frequency > 0.5)))
        assert plan.participants[0].runs[0].residual_df == n - 1 - 1 - 7 - removed


def _with(study: Study, data: dict) -> Study:
    content = study.model_dump(mode="json", exclude_none=True)
    content["data"] |= data
    return Study.from_mapping(content, study.base)


def test_one_cause_is_warned_of_once(plan_of):
    plan = plan_of(both(*(forms_disagree(number) for number in (1, 2, 4))))
    (warning,) = [text for text in plan.warnings if "disagree" in text]
    assert warning.startswith("sub-01_task-rest_run-1_bold.nii.gz (and 2 more runs): the sform")


def test_people_in_one_table_only(tmp_path):
    """A leading `sub-` does not matter."""
    (tmp_path / "people.tsv").write_text("participant_id\n01\nsub-02\nsub-09\nn/a\n")
    findings = Findings()
    runs = [Run(name, "", Path(f"{name}.nii")) for name in ("sub-01", "02", "sub-03")]
    note_people(tmp_path / "people.tsv", runs, findings)
    assert findings.warnings == [
        "people.tsv: sub-09 have no run and take no part",
        "people.tsv: sub-03 have runs but no row in the table",
    ]


def test_findings_keep_every_problem_and_the_graver_kind():
    findings = Findings()

    def wrong(kind: type, where: str, found: str) -> None:
        raise kind(Problem(where, found, "rule", "remedy"))

    assert findings.attempt(wrong, DataError, "/data/a.tsv", "is bad") is None
    assert findings.attempt(wrong, DataError, "/data/b.tsv", "is bad") is None
    assert findings.attempt(wrong, DataError, "/data/a.tsv", "is bad") is None
    assert findings.attempt(int, "7") == 7
    with pytest.raises(DataError) as raised:
        findings.raise_if_any()
    assert raised.value.problems == (Problem("/data/a.tsv, b.tsv", "is bad", "rule", "remedy"),)
    findings.attempt(wrong, StudyError, "effect", "is unknown")
    with pytest.raises(StudyError) as raised:
        findings.raise_if_any()
    assert len(raised.value.problems) == 2
    Findings().raise_if_any()


def test_long_lists_are_cut():
    places = [f"/data/run-{number}.nii" for number in range(1, 14)]
    assert listed(places, most=2) == "/data/run-1.nii, run-2.nii and 11 more"
    assert listed(places[:1]) == "/data/run-1.nii"


def test_overview_is_the_plan(plan_of):
    plan = plan_of(put("placements", "min_coverage = 0.8"))
    needs = forecast(plan, 2)
    found = overview(plan, needs)
    assert [run["volumes"] for run in found["runs"]] == [
        run.header.n_volumes for person in plan.participants for run in person.runs
    ]
    assert found["mask_voxels"] == len(plan.voxels)
    assert {r["region"]: r["mask_voxels"] for r in found["regions"]}["Outside"] == 0
    text = overview_text(found)
    rows = [line for line in text.splitlines() if line.strip().startswith("sub-")]
    assert len(rows) == 5
    assert len({len(row) for row in rows}) == 1, "columns stand under one another"


def test_needs_grow_with_the_cloud(plan_of):
    few = plan_of()
    content = few.study.model_dump(mode="json", exclude_none=True)
    content["placements"]["count"] = 60
    many = make_plan(Study.from_mapping(content, few.study.base))
    small, large = forecast(few, 2), forecast(many, 2)
    assert small.seconds < large.seconds
    assert small.memory < large.memory
    assert small.disk < large.disk


def test_alignment():
    shown = aligned(["name", "z"], [["a", "0.10"], ["longer", "n/a"], ["b", "\N{MINUS SIGN}12.5"]])
    assert shown.splitlines() == [
        "  name        z",
        "  a        0.10",
        "  longer    n/a",
        "  b       \N{MINUS SIGN}12.5",
    ]
