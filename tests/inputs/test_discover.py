from __future__ import annotations

import pytest

from seedaudit.errors import DataError, StudyError
from seedaudit.inputs.discover import Run, find_runs


def touch(folder, *names):
    for name in names:
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_bytes(b"")


def table(folder, *lines):
    path = folder / "runs.tsv"
    path.write_text("\n".join("\t".join(line) for line in lines) + "\n")
    return path


def test_table_keeps_its_order_and_is_relative_to_itself(tmp_path):
    touch(tmp_path / "study", "b.nii", "a.nii", "a2.nii", "a.tsv", "m.nii")
    table(
        tmp_path / "study",
        ["participant_id", "bold", "run", "confounds", "mask", "remark"],
        ["sub-02", "b.nii", "n/a", "n/a", "n/a", "x"],
        ["007", "a.nii", "1", "a.tsv", "m.nii", "n/a"],
        ["007", str(tmp_path / "study" / "a2.nii"), "2", "a.tsv", "n/a", "n/a"],
    )
    study = tmp_path / "study"
    assert find_runs("study/runs.tsv", tmp_path) == (
        Run("sub-02", "", study / "b.nii", None, None),
        Run("007", "1", study / "a.nii", study / "a.tsv", study / "m.nii"),
        Run("007", "2", study / "a2.nii", study / "a.tsv", None),
    )


def problems(error, *args, **kwargs):
    with pytest.raises(error) as caught:
        find_runs(*args, **kwargs)
    return caught.value.problems


def test_table_problems_come_together(tmp_path):
    touch(tmp_path, "a.nii", "b.nii", "c.nii")
    table(
        tmp_path,
        ["participant_id", "bold", "confounds", "mask"],
        ["p1", "a.nii", "gone.tsv", "n/a"],
        ["p2", "./a.nii", "n/a", "n/a"],
        ["p3", "none.nii", "n/a", "lost.nii"],
        ["p4", "b.nii", "n/a", "n/a"],
        ["p4", "c.nii", "n/a", "n/a"],
        ["p5", "n/a", "n/a", "n/a"],
        ["n/a", "c.nii", "n/a", "n/a"],
    )
    texts = [str(problem) for problem in problems(DataError, "runs.tsv", tmp_path)]
    expected = [
        "row 6: no bold",
        "row 7: no participant_id",
        "gone.tsv: no such file (confounds of p1)",
        "none.nii: no such file (bold of p3)",
        "lost.nii: no such file (mask of p3)",
        "a.nii: listed 2 times (p1, p2)",
        "participant p4: 2 files for one run (b.nii, c.nii)",
    ]
    assert len(texts) == len(expected)
    for text, part in zip(texts, expected, strict=True):
        assert part in text


def test_same_run_twice(tmp_path):
    touch(tmp_path, "a.nii", "b.nii")
    table(
        tmp_path,
        ["participant_id", "run", "bold"],
        ["p1", "1", "a.nii"],
        ["p1", "1", "b.nii"],
    )
    (problem,) = problems(DataError, "runs.tsv", tmp_path)
    assert "2 files for run '1'" in str(problem)


def test_one_file_under_two_names(tmp_path):
    touch(tmp_path, "sub-1_bold.nii")
    (tmp_path / "sub-2_bold.nii").symlink_to(tmp_path / "sub-1_bold.nii")
    (problem,) = problems(DataError, "sub-*", tmp_path)
    assert "listed 2 times (sub-1, sub-2)" in str(problem)


def test_missing_columns_and_tables(tmp_path):
    table(tmp_path, ["participant", "bolt"], ["p1", "a.nii"])
    found = problems(DataError, "runs.tsv", tmp_path)
    assert [problem.found for problem in found] == [
        "no column 'participant_id'",
        "no column 'bold'",
    ]
    assert "did you mean bolt" in found[1].remedy
    table(tmp_path, ["participant_id", "bold"])
    assert "no rows" in str(problems(DataError, "runs.tsv", tmp_path)[0])
    assert "no such file" in str(problems(DataError, "none.tsv", tmp_path)[0])


def test_pattern(tmp_path):
    folder = tmp_path / "odd [name]"
    touch(
        folder,
        "sub-02_run-2_bold.nii.gz",
        "sub-02_run-1_bold.nii.gz",
        "sub-01_ses-a_run-1_space-X_desc-preproc_bold.nii",
        "sub-01_ses-a_run-1_desc-confounds_timeseries.tsv",
        "sub-02_run-1_bold_confounds.tsv",
        "sub-02_run-2_confounds.tsv",
        "sub-02_run-1_bold.json",
    )
    runs = find_runs("sub-*_bold*", folder)
    assert runs == (
        Run(
            "sub-01",
            "ses-a_run-1",
            folder / "sub-01_ses-a_run-1_space-X_desc-preproc_bold.nii",
            folder / "sub-01_ses-a_run-1_desc-confounds_timeseries.tsv",
        ),
        Run(
            "sub-02",
            "run-1",
            folder / "sub-02_run-1_bold.nii.gz",
            folder / "sub-02_run-1_bold_confounds.tsv",
        ),
        Run(
            "sub-02",
            "run-2",
            folder / "sub-02_run-2_bold.nii.gz",
            folder / "sub-02_run-2_confounds.tsv",
        ),
    )
    assert find_runs(str(tmp_path / "odd ?name?" / "sub-*.nii*"), tmp_path / "elsewhere") == runs


def test_participants_from_folders_and_stems(tmp_path):
    touch(tmp_path, "sub-a/ses-1/rest.nii", "sub-a/ses-2/rest.nii", "sub-b/ses-1/rest.nii")
    found = [(run.participant, run.run) for run in find_runs("*/*/rest.nii", tmp_path)]
    assert found == [("sub-a", "ses-1"), ("sub-a", "ses-2"), ("sub-b", "ses-1")]
    touch(tmp_path, "flat/p1_bold.nii.gz", "flat/p2.nii")
    assert [run.participant for run in find_runs("flat/*", tmp_path)] == ["p1", "p2"]


def test_pattern_problems(tmp_path):
    touch(tmp_path, "a.txt", "sub-1_a.nii", "sub-1_b.nii")
    assert "(1 other files)" in str(problems(StudyError, "*.txt", tmp_path)[0])
    assert "matches no" in str(problems(StudyError, "x*.nii", tmp_path)[0])
    (problem,) = problems(DataError, "sub-*", tmp_path)
    assert "sub-1_a.nii, sub-1_b.nii" in problem.found
    assert "no runs are given" in str(problems(StudyError, None, tmp_path)[0])


@pytest.fixture
def derivative(tmp_path):
    names = [
        "sub-01/ses-1/func/sub-01_ses-1_task-rest_space-MNI_desc-preproc_bold.nii.gz",
        "sub-01/ses-1/func/sub-01_ses-1_task-rest_space-T1w_desc-preproc_bold.nii.gz",
        "sub-01/ses-1/func/sub-01_ses-1_task-rest_desc-confounds_timeseries.tsv",
        "sub-01/ses-1/func/sub-01_ses-1_task-rest_space-MNI_desc-brain_mask.nii.gz",
        "sub-01/ses-1/anat/sub-01_ses-1_T1w.nii.gz",
        "sub-02/ses-1/func/sub-02_ses-1_task-rest_space-MNI_desc-preproc_bold.nii.gz",
        "sub-02/ses-1/func/sub-02_ses-1_task-rest_space-MNI_desc-preproc_bold.json",
    ]
    touch(tmp_path / "derivatives" / "prep [1]", *names)
    return tmp_path


def test_bids(derivative):
    select = {"task": "rest", "space": "MNI", "desc": "preproc"}
    one, two = find_runs(None, derivative, "derivatives/prep [1]", select)
    folder = derivative / "derivatives" / "prep [1]"
    func = folder / "sub-01" / "ses-1" / "func"
    assert one == Run(
        "sub-01",
        "ses-1",
        func / "sub-01_ses-1_task-rest_space-MNI_desc-preproc_bold.nii.gz",
        func / "sub-01_ses-1_task-rest_desc-confounds_timeseries.tsv",
    )
    assert (two.participant, two.run, two.confounds) == ("sub-02", "ses-1", None)


def test_bids_problems(derivative):
    (problem,) = problems(DataError, None, derivative, "derivatives/prep [1]")
    assert "2 files for run 'ses-1'" in problem.found
    select = {"task": "rest", "space": "MNI305"}
    (problem,) = problems(StudyError, None, derivative, "derivatives/prep [1]", select)
    assert problem.found == "none of the 3 runs has task = rest, space = MNI305"
    assert problem.allowed == "task is rest; space is MNI, T1w"
    assert "is no folder" in str(problems(StudyError, None, derivative, "nowhere")[0])
    assert "no sub-*" in str(problems(StudyError, None, derivative, "derivatives")[0])
