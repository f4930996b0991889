"""The result folder: whole or not at all, read back as it was, and safe to hand on."""

from __future__ import annotations

import getpass
import json
import os
import re
import stat

import nibabel as nib
import numpy as np
import pandas as pd
import pytest

from seedaudit.auditing import audit
from seedaudit.dictionary import COLUMNS, MAPS
from seedaudit.errors import DataError, StudyError
from seedaudit.report import write_report
from seedaudit.results import frozen_table
from seedaudit.store import load_audit, read_table, save, write_table
from seedaudit.study import Study
from tests.small_study import write_small_study


@pytest.fixture(scope="module")
def result(tmp_path_factory):
    small = write_small_study(tmp_path_factory.mktemp("study"), participants=6)
    return audit(Study.load(small.study_file))


@pytest.fixture(scope="module")
def folder(result, tmp_path_factory):
    return result.save(tmp_path_factory.mktemp("out") / "audit")


def test_what_is_loaded_is_what_was_saved(result, folder):
    again = load_audit(folder)
    assert again.summary == result.summary
    assert dict(again.provenance) == json.loads(json.dumps(dict(result.provenance)))
    for name in COLUMNS:
        pd.testing.assert_frame_equal(again.table(name), result.table(name), check_dtype=False)
    for name in MAPS:
        saved, loaded = result.maps[name], again.maps[name]
        np.testing.assert_array_equal(np.asarray(loaded.dataobj), np.asarray(saved.dataobj))
        np.testing.assert_allclose(loaded.affine, saved.affine, atol=1e-5)


def test_files_of_the_folder(folder):
    """CONTRACT: the files, a data dictionary beside each table, a description beside each map."""
    names = {
        "summary.json", "provenance.json", "dataset_description.json", "methods.md",
        "figure.pdf", "figure.svg", "figure.png", "figure_caption.md", "report.html",
        "motion.pdf", "motion.svg", "motion.png", "motion_caption.md", "tables", "maps",
    }  # fmt: skip
    assert {path.name for path in folder.iterdir()} == names
    for table in (folder / "tables").glob("*.tsv"):
        header = table.read_text(encoding="utf-8").splitlines()[0].split("\t")
        described = json.loads(table.with_suffix(".json").read_text(encoding="utf-8"))
        assert list(described) == header
        assert all(entry["Description"] for entry in described.values())
    for name in MAPS:
        assert json.loads((folder / "maps" / f"{name}.json").read_text())["Description"]


def test_dataset_description_follows_bids(folder):
    """BIDS 1.11.2, derived data set: Name, BIDSVersion, DatasetType, GeneratedBy with a Name."""
    content = json.loads((folder / "dataset_description.json").read_text())
    assert content["Name"]
    assert content["BIDSVersion"] == "1.11.2"
    assert content["DatasetType"] == "derivative"
    assert content["GeneratedBy"][0]["Name"] == "seedaudit"


def test_maps_carry_both_forms_their_space_and_units(folder):
    for name in MAPS:
        image = nib.Nifti1Image.from_filename(folder / "maps" / f"{name}.nii.gz")
        header = image.header
        # the runs have sform code 2, which decides
        assert int(header["sform_code"]) == int(header["qform_code"]) == 2
        np.testing.assert_allclose(header.get_sform(), header.get_qform(), atol=1e-3)
        assert header.get_xyzt_units()[0] == "mm"
        assert header.get_data_dtype() in (np.float32, np.uint8)
        assert bytes(header["descrip"]).strip(b"\0")


def test_nothing_names_the_machine_or_the_user(folder):
    """CONTRACT: no absolute path, host or user name anywhere in the folder."""
    places = {str(folder.parent), os.path.expanduser("~"), f"/{getpass.getuser()}/"} - {"/"}
    # a whole word: pictures in a text hold any two letters somewhere
    host = re.compile(rf"(?<![\w/+=]){re.escape(os.uname().nodename)}(?![\w/+=])")
    for path in folder.rglob("*"):
        if path.suffix in (".json", ".tsv", ".md", ".svg", ".html"):
            text = path.read_text(encoding="utf-8")
            for place in places:
                assert place not in text, f"{place} in {path.name}"
            assert not host.search(text), path.name


def test_arrays_are_read_only(result):
    with pytest.raises(ValueError, match="read-only"):
        np.asarray(result.maps["safe"].dataobj)[0, 0, 0] = 1
    with pytest.raises(TypeError):
        result.seeds[0].tables["regions"] = None
    regions = result.regions
    regions.loc[0, "region"] = "changed"
    assert result.regions.loc[0, "region"] != "changed"


def test_an_earlier_result_is_not_overwritten_silently(result, tmp_path):
    folder = result.save(tmp_path / "audit")
    with pytest.raises(StudyError, match="never overwritten silently"):
        result.save(folder)
    marker = folder / "marker.txt"
    marker.write_text("old")
    result.save(folder, replace=True)
    assert not marker.exists()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["audit"]


def test_a_folder_of_something_else_is_never_replaced(result, tmp_path):
    (tmp_path / "thesis").mkdir()
    (tmp_path / "thesis" / "chapter.txt").write_text("mine")
    with pytest.raises(StudyError, match="not a result folder"):
        result.save(tmp_path / "thesis", replace=True)
    assert (tmp_path / "thesis" / "chapter.txt").read_text() == "mine"


def test_the_folder_appears_whole_or_not_at_all(result, tmp_path):
    def full_disk(audit, folder):
        assert not (tmp_path / "audit").exists()
        raise OSError(28, "No space left on device")

    with pytest.raises(DataError, match="No space left"):
        save(result, tmp_path / "audit", extra=full_disk)
    assert list(tmp_path.iterdir()) == []


def test_permissions_follow_the_umask(result, tmp_path):
    old = os.umask(0o027)
    try:
        folder = result.save(tmp_path / "audit")
    finally:
        os.umask(old)
    assert stat.S_IMODE(folder.stat().st_mode) == 0o750
    assert stat.S_IMODE((folder / "summary.json").stat().st_mode) == 0o640


def test_loading_something_else_is_a_clear_error(tmp_path, folder):
    with pytest.raises(DataError, match="cannot be read"):
        load_audit(tmp_path)
    (tmp_path / "summary.json").write_text('{"schema": 99, "title": "x", "seeds": []}')
    (tmp_path / "provenance.json").write_text("{}")
    with pytest.raises(DataError, match="schema 99"):
        load_audit(tmp_path)


def test_two_saves_give_the_same_bytes(result, folder, tmp_path):
    again = result.save(tmp_path / "again")
    for path in sorted(folder.rglob("*")):
        if path.is_file():
            assert path.read_bytes() == (again / path.relative_to(folder)).read_bytes(), path.name


def test_the_explorer_is_redrawn_from_the_folder(folder, tmp_path):
    """Without the data, and with the same bytes; the placement maps come from the folder too."""
    write_report(load_audit(folder), tmp_path)
    assert (tmp_path / "report.html").read_bytes() == (folder / "report.html").read_bytes()
    assert '"maps"' in (tmp_path / "report.html").read_text(encoding="utf-8")


def test_tables_round_trip_awkward_cells(tmp_path):
    table = pd.DataFrame(
        {
            "region": ["1", "n/a region", "tab\tand\nline", '"quoted"'],
            "state": ["held", "n/a", "silent", "lost"],
            "stability": [0.5, np.nan, -0.25, 1.0],
            "used": [True, False, True, False],
        }
    )
    write_table(tmp_path / "t.tsv", table)
    lines = (tmp_path / "t.tsv").read_text(encoding="utf-8").splitlines()
    assert len(lines) == 5
    assert lines[2].split("\t")[2:] == ["n/a", "false"]
    again = read_table(tmp_path / "t.tsv")
    expected = table.assign(region=["1", "n/a region", "tab and line", '"quoted"'])
    pd.testing.assert_frame_equal(again, expected, check_dtype=False)


def test_fractions_that_happen_to_be_whole_stay_fractions(tmp_path):
    """So that a page of the folder is written with the same digits as one of the run."""
    table = frozen_table("regions", {"index": [1, 2], "n_voxels": [3, 4], "sign_share": [1.0, 0.0]})
    write_table(tmp_path / "regions.tsv", table)
    again = read_table(tmp_path / "regions.tsv")
    pd.testing.assert_frame_equal(again, table)
    assert again["sign_share"].dtype == np.float64
    assert again["n_voxels"].dtype == np.int64
