"""Several seeds and several radii, from the study file to the result folder.

What can stand in for what was planted (demo_data/truth.json); numbers are held against numpy and
against the tables of the same result.
"""

from __future__ import annotations

import json
from itertools import combinations

import numpy as np
import pandas as pd
import pytest

from seedaudit.auditing import audit
from seedaudit.cli import main
from seedaudit.errors import DataError
from seedaudit.store import load_audit, read_table, save, write_table
from seedaudit.study import Study
from tests.small_study import SEED_AT, write_small_study
from tests.test_steadier import DEMO, asked


@pytest.fixture(scope="module")
def truth():
    return json.loads((DEMO / "truth.json").read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def seeds():
    return audit(Study.load(DEMO / "study_seeds.toml"), workers=2)


@pytest.fixture(scope="module")
def small(tmp_path_factory):
    return write_small_study(tmp_path_factory.mktemp("study"), participants=6)


def test_seeds_of_one_network_are_interchangeable_and_those_across_the_border_are_not(seeds, truth):
    network = {name: told["network"] for name, told in truth["other_seeds"].items()}
    assert sorted(network.values()).count(truth["border"]["network"]) == 2
    table = seeds.table("seeds")
    assert len(table) == 3
    for row in table.itertuples():
        same = network[row.seed_a] == network[row.seed_b]
        assert row.interchangeable is same
        assert (row.relative > 0.95) if same else (row.relative_high < 0.6)
        apart = np.subtract(*(truth["other_seeds"][s]["at"] for s in (row.seed_a, row.seed_b)))
        assert row.distance_mm == pytest.approx(np.linalg.norm(apart))


def test_the_comparison_is_that_of_the_maps(seeds):
    """Spatial r (numpy) and Dice of the reported maps, on voxels that all seeds are judged on;
    the correlation on all of them, of which the program takes an even choice.
    """
    common = np.all([s.maps["analysis_mask"].get_fdata() > 0 for s in seeds.seeds], axis=0)
    for row in seeds.table("seeds").itertuples():
        a, b = (seeds.seed(name) for name in (row.seed_a, row.seed_b))
        effects = [s.maps["effect_reported"].get_fdata()[common] for s in (a, b)]
        assert row.spatial_r == pytest.approx(np.corrcoef(effects)[0, 1], abs=0.01)
        for sign, tail in ((1, "positive"), (-1, "negative")):
            one, other = (s.maps["class_reported"].get_fdata()[common] == sign for s in (a, b))
            dice = 2 * (one & other).sum() / (one.sum() + other.sum())
            assert getattr(row, f"dice_{tail}") == pytest.approx(dice, abs=1e-7)
        within = [s.table("similarity")["spatial_r"][1:].median() for s in (a, b)]
        assert [row.within_a, row.within_b] == pytest.approx(within, abs=0.01)


def test_the_folder_holds_the_comparison_at_its_top(seeds, tmp_path):
    folder = seeds.save(tmp_path / "audit")
    names = {path.name for path in folder.iterdir()}
    assert {"left", "right", "behind", "tables", "seeds.pdf", "seeds.svg", "seeds.png"} <= names
    again = load_audit(folder)
    pd.testing.assert_frame_equal(again.between, seeds.between, check_dtype=False)
    assert again.summary == seeds.summary
    assert [pair["interchangeable"] for pair in again.summary["interchangeable"]] == [
        True, False, False
    ]  # fmt: skip
    assert "interchangeable" in (folder / "left" / "report.html").read_text(encoding="utf-8")
    methods = (folder / "left" / "methods.md").read_text(encoding="utf-8")
    assert "The 3 seeds of the study went through one pass" in methods
    (folder / "tables" / "seeds.tsv").unlink()
    with pytest.raises(DataError, match=r"seeds\.tsv"):
        load_audit(folder)


def test_what_cannot_be_told_is_neither_yes_nor_no(seeds, tmp_path):
    table = seeds.table("seeds")
    table["interchangeable"] = pd.Series([True, None, False], dtype=object)
    write_table(tmp_path / "seeds.tsv", table)
    lines = (tmp_path / "seeds.tsv").read_text().splitlines()
    assert [line.split("\t")[-1] for line in lines[1:]] == ["true", "n/a", "false"]
    assert list(read_table(tmp_path / "seeds.tsv")["interchangeable"]) == [True, None, False]


def test_one_participant_tells_nothing_but_likeness(small):
    """Without halves of participants there is no ceiling and no verdict."""
    name = next(iter(small.runs))
    seed = [
        {"name": name, "at": list(np.add(SEED_AT, (shift, 0, 0))), "space": "native", "radius": 5}
        for name, shift in (("here", 0.0), ("there", 4.0))
    ]
    run = str(small.bold_files[name, "1"])
    study = asked(
        small.folder, seed=seed, data={"runs": [run]}, cleaning=None, group=None, threshold=None
    )
    row = audit(study).table("seeds").iloc[0]
    assert row["interchangeable"] is None
    assert np.isnan(row["relative"])
    assert 0 < row["spatial_r"] <= 1


def test_the_terminal_says_which_seeds_can_stand_in(small, capsys, tmp_path, monkeypatch):
    monkeypatch.setattr("seedaudit.report.write_report", lambda audit, folder, **more: None)
    text = (small.folder / "study.toml").read_text(encoding="utf-8")
    text = text.replace(
        "[placements]", f'[[seed]]\nname = "second"\nat = {list(SEED_AT)}\nspace = "native"\n'
        "radius = 4.0\n\n[placements]",
    )  # fmt: skip
    (small.folder / "two.toml").write_text(text, encoding="utf-8")
    code = main(["run", str(small.folder / "two.toml"), "--out", str(tmp_path / "out"), "--quiet"])
    assert code == 0
    shown = capsys.readouterr().out
    assert "Seeds against each other" in shown
    assert "posterior, second" in shown


def test_a_first_try_may_look_for_a_steadier_seed(small, capsys, tmp_path, monkeypatch):
    monkeypatch.setattr("seedaudit.report.write_report", lambda audit, folder, **more: None)
    words = [
        "run", "--seed", *map(str, SEED_AT), "--space", "native", "--radius", "5", "--within", "4",
        "--count", "4", "--steadier", "4", "--mask", str(small.mask_file), "--quiet",
        "--bold", str(small.folder / "sub-0[1246]*_bold.nii*"), "--out", str(tmp_path / "out"),
    ]  # fmt: skip
    assert main(words) == 0
    assert "Steadier seed: " in capsys.readouterr().out
    again = load_audit(tmp_path / "out")
    assert again.summary["seeds"][0]["steadier"]["search_mm"] == 4


@pytest.fixture(scope="module")
def radii():
    placements = {"count": 16, "controls": 0, "radii": [4, 6, 9]}
    return audit(asked(DEMO, placements=placements, claims=None, steadier=None), workers=2)


def test_where_the_border_matters_position_is_the_source_of_variation(radii, truth):
    """The neighbour across the border changes with the position, and a network that both sides
    connect with alike does not.
    """
    table = radii.table("radii").set_index(["region", "source"])["share"]
    border = truth["border"]
    assert table[border["neighbour"], "position"] > 0.4
    assert table["lateral-parietal", "position"] < 0.15
    sums = radii.table("radii").groupby("region")["share"].sum()
    np.testing.assert_allclose(sums, 1, atol=1e-6)
    told = radii.summary["seeds"][0]["radii"]
    assert (told["radii_mm"], told["n_positions"], told["n_participants"]) == ([4, 6, 9], 16, 12)


def test_crossed_placements_are_what_the_sources_come_from(radii):
    """Every position has every radius, and the range of the region table comes from all of them."""
    placed = radii.placements.query("placement > 0")
    counts = placed.groupby(["dx", "dy", "dz"])["radius"].agg(["nunique", "size"])
    assert (counts == 3).all(axis=None)


def test_sources_are_kept_in_the_folder(radii, tmp_path):
    folder = save(radii, tmp_path / "audit")
    again = load_audit(folder)
    pd.testing.assert_frame_equal(again.table("radii"), radii.table("radii"), check_dtype=False)
    assert again.summary == radii.summary


def test_one_participant_has_no_sources_of_variation(small):
    run = str(next(iter(small.bold_files.values())))
    study = asked(
        small.folder, data={"runs": [run]}, cleaning=None, group=None, threshold=None,
        placements={"radii": [4, 5], "count": 4},
    )  # fmt: skip
    result = audit(study)
    told = result.summary["seeds"][0]
    assert told["radii"] is None
    assert "no sources of variation" in told["notes"][-1]
    assert "radii" not in result.seeds[0].tables


def test_names_of_pairs(seeds):
    table = seeds.table("seeds")
    names = [seed.name for seed in seeds.seeds]
    assert list(zip(table["seed_a"], table["seed_b"], strict=True)) == list(combinations(names, 2))
