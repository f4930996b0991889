"""What bad input gets, through the command line: exit code, words, and nothing left behind."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import nibabel as nib
import numpy as np
import pandas as pd
import pytest

from seedaudit.cli import main
from seedaudit.store import load_audit
from tests.bad_inputs import DATA_FAULTS, HEADER_FAULTS, Fault
from tests.breaks import (
    AT,
    MODEL,
    Break,
    bold,
    both,
    cell,
    corrupt,
    every_run,
    filled,
    forms_disagree,
    image,
    one_more_slice,
    put,
    stored,
    swap,
    table,
)
from tests.small_brain import brain_mask
from tests.small_study import write_small_study


@dataclass(frozen=True)
class Outcome:
    """What a command left."""

    code: int
    out: str
    err: str
    folder: Path

    def table(self, name: str) -> pd.DataFrame:
        return pd.read_csv(self.folder / "audit" / "tables" / f"{name}.tsv", sep="\t",
                           na_values="n/a", keep_default_na=False)  # fmt: skip

    @property
    def participants(self) -> pd.DataFrame:
        return self.table("participants").set_index("participant_id")


@pytest.fixture(scope="module")
def base(tmp_path_factory) -> Path:
    """Four participants, two arms, one run each; sub-02 lacks four voxels."""
    return write_small_study(tmp_path_factory.mktemp("base"), participants=4, two_runs=()).folder


@pytest.fixture
def try_it(base, tmp_path, capsys, monkeypatch) -> Callable[..., Outcome]:
    """Break a copy of the study and say a command to it; figures are none of this matter."""
    monkeypatch.setattr("seedaudit.report.write_report", lambda audit, folder: None)
    monkeypatch.chdir(tmp_path)
    folder = tmp_path / "study"
    shutil.copytree(base, folder)

    def go(command: str, breaks: Break | None = None, *options: str) -> Outcome:
        if breaks is not None:
            breaks(folder)
        code = main([command, str(folder / "study.toml"), *options])
        told = capsys.readouterr()
        return Outcome(code, told.out, told.err, folder)

    return go


def by_name(faults: tuple[Fault, ...]) -> dict[str, object]:
    return {"argvalues": faults, "ids": [fault.name.replace(" ", "_") for fault in faults]}


def check_message(fault: Fault, outcome: Outcome) -> None:
    assert outcome.code == fault.code, outcome.err
    assert outcome.out == ""
    assert not [word for word in fault.words if word not in outcome.err], outcome.err
    assert "Traceback" not in outcome.err
    lines = outcome.err[outcome.err.index(" problem") :].splitlines()[1:]
    assert lines
    assert all(line.startswith("  - ") for line in lines), "a message is one line"
    if fault.problems is not None:
        assert len(lines) == fault.problems, outcome.err
    assert not (outcome.folder / "audit").exists()


def test_the_base_is_in_order(try_it):
    outcome = try_it("run")
    assert outcome.code == 0
    assert outcome.participants["used"].all()


@pytest.mark.parametrize("fault", **by_name(HEADER_FAULTS))
def test_found_before_computing(fault, try_it):
    """`check` and `run` say the very same, and neither reads a run or leaves a folder."""
    before = try_it("check", fault.breaks)
    check_message(fault, before)
    after = try_it("run")
    assert (after.code, after.out, after.err) == (before.code, "", before.err)
    names = {path.name for path in before.folder.iterdir() if "audit" in path.name}
    assert not names


@pytest.mark.parametrize("fault", **by_name(DATA_FAULTS))
def test_found_in_the_data(fault, try_it):
    assert try_it("check", fault.breaks).code == 0
    check_message(fault, try_it("run"))


def test_how_far_a_seed_is_off_and_the_nearest_voxel(try_it):
    """Distance and voxel against numpy and nibabel on the mask itself."""
    at = np.array([-15.0, -62.0, 5.0])
    outcome = try_it("check", swap((AT, "at = [-15, -62, 5]")))
    mask = nib.load(outcome.folder / "mask.nii.gz")
    centres = nib.affines.apply_affine(mask.affine, np.argwhere(mask.get_fdata() > 0))
    away = np.linalg.norm(centres - at, axis=1)
    assert f"{away.min():.1f} mm from the nearest voxel" in outcome.err
    x, y, z = centres[away.argmin()]
    assert f"that voxel is at ({x:.6g}, {y:.6g}, {z:.6g})" in outcome.err


def test_every_problem_of_a_study_at_once(try_it, tmp_path):
    """Runs, mask, regions, seed, model and output: one list."""
    (tmp_path / "study" / "taken").mkdir()
    (tmp_path / "study" / "taken" / "notes.txt").write_text("mine")
    outcome = try_it("run", both(
        image(4, one_more_slice), image(2, lambda data: data[..., 0]),
        cell("networks_dseg.tsv", 0, "name", "nam"), swap((AT, "at = [100, 0, 0]")),
        swap((MODEL, 'model = "~ amr"'), ('output = "audit"', 'output = "taken"'))))  # fmt: skip
    assert outcome.code == 2
    assert outcome.err.startswith("6 problems:\n")
    for words in ("11 x 14 x 10", "3-D image", "'name'", "outside the image", "'amr'", "taken"):
        assert words in outcome.err
    assert (outcome.folder / "taken" / "notes.txt").read_text() == "mine"


def test_alike_problems_of_many_runs_are_one(try_it):
    outcome = try_it("check", swap(('"rot_*"]', '"rot_*", "csf"]')))
    assert outcome.err.startswith("1 problem:\n")
    assert outcome.err.count("csf") == 1
    for number in (1, 2, 3, 4):
        assert f"sub-{number:02d}_task-rest_run-1_timeseries.tsv" in outcome.err


def empty_beside_the_brain(data):
    data[~brain_mask()] = 0


# What the program goes on with, saying so: (how, words among the warnings or choices).
DECISIONS = {
    "empty region": (lambda folder: None, ("no analysis voxel in region Outside", "n/a")),
    "extra people": (
        table("participants.tsv", lambda rows: rows.append(["sub-77", "rested", "30"])),
        ("participants.tsv: sub-77 have no run and take no part",)),
    "people without a row": (
        table("participants.tsv", lambda rows: rows.pop()),
        ("participants.tsv: sub-04 have runs but no row in the table",)),
    "another TR": (
        image(4, repetition_time=1.5),
        ("differ in repetition time", "2 s in 3 runs", "1.5 s in 1 run")),
    "TR in milliseconds": (
        every_run(lambda number: image(number, repetition_time=2000.0)),
        ("2000 s is not plausible", "milliseconds", "`repetition_time`")),
    "forms disagree": (
        forms_disagree(4),
        ("sub-04_task-rest_run-1_bold.nii.gz", "the sform (code 2)", "the qform (code 4)",
         "disagree by up to 3 mm", "the sform is used")),
    "MNI seed in scanner space": (
        both(*(image(n, codes=(1, 1)) for n in (1, 2, 3, 4)),
             swap(('space = "native"', 'space = "mni"'))),
        ("scanner space", "template space", "4 runs")),
    "few degrees of freedom": (
        lambda folder: put("cleaning", 'censor = { column = "framewise_displacement", '
                           "above = 0.18 }")(folder), ("residual degrees of freedom", "noisy")),
    "declared grid": (
        both(image(4, codes=(0, 0)), put("data", 'grid = "mask.nii.gz"')),
        ("sub-04_task-rest_run-1_bold.nii.gz", "codes no affine; on the grid of mask.nii.gz")),
    "placements set aside": (
        both(put("placements", "min_coverage = 0.85"), swap(("within = 5.0", "within = 16"))),
        ("of 12 placements are set aside", "85% of their sphere")),
    "no regions": (
        swap(('regions = "networks_dseg.nii.gz"\n', "")), ("no `regions` were given",)),
    "Talairach seed": (
        swap((AT, "at = [-7.0, -47.5, 18.2]"), ('space = "native"', 'space = "talairach"')),
        ("Talairach (-7.0, -47.5, 18.2) is MNI (", "Lancaster et al. 2007")),
    "no mask": (
        both(*(image(number, empty_beside_the_brain) for number in (1, 2, 3, 4)),
             swap(('mask = "mask.nii.gz"\n', ""))),
        ("no mask was given: 602 voxels present in the first volume of every run",)),
    "regions on another grid": (
        image("networks_dseg.nii.gz", affine=lambda affine: affine.__setitem__((0, 3),
              affine[0, 3] + 1.0)),
        ("networks_dseg.nii.gz is on another grid than the runs", "nearest neighbour")),
}  # fmt: skip


@pytest.mark.parametrize("name", DECISIONS)
def test_stated_decisions(name, try_it):
    """`check` states it, `run` goes through and keeps it in the provenance."""
    breaks, words = DECISIONS[name]
    checked = try_it("check", breaks)
    assert checked.code == 0, checked.err
    assert not [word for word in words if word not in checked.err + checked.out]
    ran = try_it("run", None)
    assert ran.code == 0, ran.err
    kept = load_audit(ran.folder / "audit").provenance
    stated = "\n".join([*kept["warnings"], *kept["choices"]])
    assert not [word for word in words if word not in stated]
    assert str(ran.folder) not in (ran.folder / "audit" / "provenance.json").read_text()


def test_talairach_seed_is_converted(try_it):
    """The MNI point against nilearn-free arithmetic: the inverse of the published 4 x 4 matrix.

    Lancaster et al. 2007 Hum. Brain Mapp. 28:1194, pooled matrix, from memory.
    """
    pooled = np.array([
        [0.9357, 0.0029, -0.0072, -1.0423], [-0.0065, 0.9396, -0.0726, -1.3940],
        [0.0103, 0.0752, 0.8967, 3.6475], [0, 0, 0, 1.0]])  # fmt: skip
    outcome = try_it("run", DECISIONS["Talairach seed"][0])
    reported = outcome.table("placements").iloc[0]
    expected = np.linalg.solve(pooled, [-7.0, -47.5, 18.2, 1])[:3]
    np.testing.assert_allclose(reported[["x", "y", "z"]].astype(float), expected, atol=0.01)


def test_missing_voxels_are_recorded(try_it):
    """sub-02 lacks 3 constant voxels and one with a NaN; 5 more are made constant in sub-03."""

    def constant(data):
        mask = np.asarray(nib.load(outcome_folder / "mask.nii.gz").dataobj) > 0
        chosen = np.argwhere(mask)[100:105]
        data[tuple(chosen.T)] = 3.0

    outcome_folder = try_it("check").folder
    outcome = try_it("run", image(3, constant))
    assert outcome.code == 0
    missing = outcome.participants["n_missing_voxels"]
    assert missing.to_dict() == {"sub-01": 0, "sub-02": 4, "sub-03": 5, "sub-04": 0}
    assert "2 participants lack some mask voxels" in outcome.err
    assert "at most 5 of" in outcome.err
    assert "left out for everyone" in outcome.err
    effect = nib.load(outcome.folder / "audit" / "maps" / "effect_reported.nii.gz").get_fdata()
    mask = np.asarray(nib.load(outcome.folder / "mask.nii.gz").dataobj) > 0
    assert np.isnan(effect[tuple(np.argwhere(mask)[102])])


SET_ASIDE = put("data", 'on_bad_run = "set-aside"')
BAD_PARTICIPANT: dict[str, tuple[Break, str]] = {
    "3-D": (image(4, lambda data: data[..., 0]), "3-D image"),
    "other grid": (image(4, one_more_slice), "is on another grid than sub-01"),
    "confounds rows": (cell("sub-04_task-rest_run-1_timeseries.tsv", 9, "rot_x", "n/a"), "'rot_x'"),
    "not an image": (stored(4, lambda content: b"no image at all"), "not a NIfTI"),
    "unreadable table": (
        lambda f: (f / "sub-04_task-rest_run-1_timeseries.tsv").write_bytes(b"a\tb\n1\t2\t3\n"),
        "cannot be read"),
    "truncated": (stored(4, lambda content: content[: len(content) // 2]), "ends early"),
    "corrupt": (stored(4, corrupt), "corrupt"),
    "constant": (image(4, filled(700.0)), "0% of a reported seed sphere"),
    "NaN": (image(4, filled(np.nan)), "0% of a reported seed sphere"),
}  # fmt: skip


@pytest.mark.parametrize("name", BAD_PARTICIPANT)
def test_set_aside(name, try_it):
    breaks, reason = BAD_PARTICIPANT[name]
    outcome = try_it("run", both(breaks, SET_ASIDE))
    assert outcome.code == 4
    row = outcome.participants.loc["sub-04"]
    assert not row["used"]
    assert reason in row["reason"]
    assert row["reason"].startswith("sub-04_task-rest_run-1")
    assert "participant sub-04 is set aside" in outcome.err
    for path in (outcome.folder / "audit").rglob("*"):
        if path.suffix in (".tsv", ".json"):
            assert str(outcome.folder.parent) not in path.read_text(encoding="utf-8"), path
    kept = load_audit(outcome.folder / "audit")
    assert kept.provenance["group"] == {**kept.provenance["group"], "participants": 3,
                                        "set_aside": 1}  # fmt: skip
    assert kept.seed().summary["n_participants"] == 3


def test_setting_aside_is_the_audit_of_the_others(try_it):
    """The same numbers as a study that never held the bad participant."""
    without = try_it("run", table("runs.tsv", lambda rows: rows.pop()))
    assert without.code == 0
    expected = without.table("similarity")
    shutil.rmtree(without.folder / "audit")
    row = ["sub-04", "1", bold(without.folder, 4).name, "sub-04_task-rest_run-1_timeseries.tsv"]
    again = table("runs.tsv", lambda rows: rows.append(row))
    outcome = try_it("run", both(again, stored(4, corrupt), SET_ASIDE))
    assert outcome.code == 4
    pd.testing.assert_frame_equal(outcome.table("similarity"), expected, rtol=1e-6)


ARMS = swap((MODEL, 'model = "~ arm"\neffect = "arm[rested] - arm[restricted]"'))
TOO_FEW: dict[str, tuple[Break, tuple[str, ...]]] = {
    "an arm is gone, by headers": (
        both(ARMS, image(2, lambda data: data[..., 0]), image(4, lambda data: data[..., 0])),
        ("arm[restricted]", "2 set aside", "sub-02", "3-D image")),
    "an arm is gone, by data": (
        both(ARMS, stored(2, corrupt), stored(4, corrupt)),
        ("participants", "2 are left after setting 2 aside", "2 columns")),
    "all are gone": (
        both(*(image(number, lambda data: data[..., 0]) for number in (1, 2, 3, 4))),
        ("no participant is left", "4 set aside", "sub-03 (sub-03_task-rest_run-1_bold.nii: ")),
    "one of four is left": (
        both(*(stored(number, corrupt) for number in (1, 2, 4))),
        ("1 are left after setting 3 aside",)),
}  # fmt: skip


@pytest.mark.parametrize("name", TOO_FEW)
def test_too_few_left_after_setting_aside(name, try_it):
    breaks, words = TOO_FEW[name]
    outcome = try_it("run", both(breaks, SET_ASIDE))
    assert outcome.code in (2, 3)
    assert not [word for word in words if word not in outcome.err], outcome.err
    assert not (outcome.folder / "audit").exists()


def keep_runs(*rows: int) -> Break:
    """Keep these rows of the table of runs alone."""

    def change(cells: list[list[str]]) -> None:
        cells[1:] = [cells[row] for row in rows]

    return table("runs.tsv", change)


GROUPS: dict[str, tuple[Break, int, float | None, int]] = {
    # how, participants, residual df of the group model (None: normal score), folds
    "more folds than people": (swap(("folds = 4", "folds = 64")), 4, 3, 4),
    "two participants": (keep_runs(1, 3), 2, 1, 2),
    "one participant": (keep_runs(1), 1, None, 1),
    "a group with one member": (both(ARMS, keep_runs(1, 2, 3)), 3, 1, 3),
}


@pytest.mark.parametrize("name", GROUPS)
def test_small_groups(name, try_it):
    breaks, people, df, folds = GROUPS[name]
    outcome = try_it("run", breaks)
    assert outcome.code == 0, outcome.err
    kept = load_audit(outcome.folder / "audit")
    summary = kept.seed().summary
    assert (summary["n_participants"], summary["df"]) == (people, df)
    assert summary["statistic"] == ("z" if df is None else "t")
    assert kept.provenance["group"]["folds"] == folds
    assert outcome.table("regions")["stability"].notna().any()
