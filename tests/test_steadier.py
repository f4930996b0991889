"""The search for a steadier seed, from the study file to the result folder.

The scores are held against the naive float64 implementation (tests/reference_maps.py) and numpy's
correlation; the recommendation against what was planted in the demo (demo_data/truth.json).
"""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

from seedaudit.auditing import audit, open_checkpoint
from seedaudit.errors import DataError, StudyError
from seedaudit.forecast import forecast
from seedaudit.overview import overview, overview_text
from seedaudit.preflight import make_plan
from seedaudit.searching import neighbourhood_radius
from seedaudit.store import load_audit, save
from seedaudit.study import Study
from tests.reference import rows_of
from tests.reference_maps import (
    ball_rows,
    excluded_voxels,
    largest_edge,
    participant_maps,
    voxel_list,
)
from tests.small_study import RADIUS, SEED_AT, WITHIN, write_small_study

DEMO = Path(__file__).parent.parent / "demo_data"
SEARCH = {"search": 4.0, "step": 4.0, "keep_similarity": 0.5, "targets": 100}


def asked(folder: Path, **sections) -> Study:
    """The study of a folder with more sections, or more keys in those it has."""
    content = Study.load(folder / "study.toml").model_dump(mode="json", exclude_none=True)
    for name, keys in sections.items():
        content[name] = content.get(name, {}) | keys if isinstance(keys, dict) else keys
    content = {name: keys for name, keys in content.items() if keys is not None}
    return Study.from_mapping(content, folder)


@pytest.fixture(scope="module")
def small(tmp_path_factory):
    return write_small_study(tmp_path_factory.mktemp("study"), participants=6)


@pytest.fixture(scope="module")
def searched(small):
    study = asked(small.folder, steadier=SEARCH)
    plan = make_plan(study)
    return SimpleNamespace(small=small, plan=plan, result=audit(plan, workers=2))


@pytest.fixture(scope="module")
def naive(searched):
    """Mean z of each fold's participants at every lattice point, without the program."""
    small, plan = searched.small, searched.plan
    search = plan.seeds[0].search
    voxels = voxel_list(small.mask)
    places = [(*(np.array(SEED_AT) + shift), RADIUS) for shift in search.shifts]
    spheres = [ball_rows(voxels, small.affine, place, RADIUS) for place in places]
    people = [participant_maps(runs, voxels, spheres) for runs in small.runs.values()]
    outside = ~excluded_voxels(voxels, small.affine, places, largest_edge(small.affine))
    rows = rows_of(np.array(voxels), plan.voxels.ijk)[search.targets]
    everywhere = ~np.any([person["missing"][rows] for person in people], axis=0)
    maps = np.array([person["z"][:, rows[everywhere]] for person in people])
    return SimpleNamespace(maps=maps, outside=outside, rows=rows)


def scores(maps, search, of):
    """Stability and likeness of every candidate in some participants, with loops."""
    mean = maps[of].mean(axis=0)
    near = [i for i, s in enumerate(search.shifts) if np.linalg.norm(s) <= 4.0 + 1e-9]
    stability, likeness = [], []
    for c in near:
        apart = np.linalg.norm(search.shifts - search.shifts[c], axis=1)
        around = [i for i in range(len(mean)) if i != c and apart[i] <= WITHIN + 1e-9]
        stability.append(np.mean([np.corrcoef(mean[c], mean[i])[0, 1] for i in around]))
        likeness.append(np.corrcoef(mean[c], mean[0])[0, 1])
    return np.array(stability), np.array(likeness)


def test_targets_lie_outside_every_sphere(searched, naive):
    """None of them is in a sphere of the lattice widened by the largest voxel edge."""
    search = searched.plan.seeds[0].search
    assert naive.outside[naive.rows].all()
    assert search.population == naive.outside.sum()
    assert len(set(search.targets)) == len(search.targets) == min(100, search.population)


def test_scores_are_those_of_a_naive_search(searched, naive):
    """In-sample score, likeness, and the mean of the held-out scores over the splits."""
    table, search = searched.result.table("steadier"), searched.plan.seeds[0].search
    stability, likeness = scores(naive.maps, search, np.arange(6))
    np.testing.assert_allclose(table["stability_in"], stability, atol=2e-5)
    np.testing.assert_allclose(table["similarity_to_reported"], likeness, atol=2e-5)
    # four folds of six participants: 0 and 4, 1 and 5, 2, 3; three ways to halve them
    folds = [[0, 4], [1, 5], [2], [3]]
    halves = [(a, b) for a, b in (((0, 1), (2, 3)), ((0, 2), (1, 3)), ((0, 3), (1, 2)))]
    out, chosen, gain = [], [], []
    for one, other in [*halves, *(pair[::-1] for pair in halves)]:
        choosing, scoring = ([i for f in half for i in folds[f]] for half in (one, other))
        inside, alike = scores(naive.maps, search, choosing)
        held_out = scores(naive.maps, search, scoring)[0]
        best = int(np.argmax(np.where((alike >= 0.5) | (np.arange(len(alike)) == 0), inside, -1)))
        out.append(held_out)
        chosen.append(best)
        gain.append(held_out[best] - held_out[0])
    np.testing.assert_allclose(table["stability_out"], np.mean(out, axis=0), atol=2e-5)
    share = np.bincount(chosen, minlength=len(table)) / len(chosen)
    np.testing.assert_allclose(table["share_chosen"], share, atol=1e-6)
    told = searched.result.summary["seeds"][0]["steadier"]
    assert told["gain"] == pytest.approx(np.mean(gain), abs=3e-5)
    assert (told["n_splits"], told["n_folds"]) == (3, 4)


def test_the_group_effect_has_no_say(small, searched):
    """Another model and contrast, the same search: it is scored on the mean of all maps."""
    table = pd.DataFrame({"participant_id": list(small.runs), "age": small.ages})
    table.to_csv(small.folder / "ages.tsv", sep="\t", index=False)
    group = {"table": "ages.tsv", "model": "~ age", "effect": "age"}
    other = audit(asked(small.folder, steadier=SEARCH, group=group))
    pd.testing.assert_frame_equal(other.table("steadier"), searched.result.table("steadier"))
    assert "never the group effect" in other.summary["seeds"][0]["steadier"]["scored_on"]


def test_the_map_shows_the_nearest_candidate(searched):
    """Voxel by voxel: the nearest candidate's score, beside candidates only."""
    image = searched.result.maps["steadier_score"]
    table = searched.result.table("steadier")
    table = table[table["keeps_identity"]]
    places, values = table[["x", "y", "z"]].to_numpy(), table["stability_out"].to_numpy()
    volume = np.asarray(image.dataobj)
    inverse = np.linalg.inv(image.affine)
    holding = {tuple(np.rint(inverse[:3, :3] @ p + inverse[:3, 3]).astype(int)) for p in places}
    shown = 0
    for ijk in np.ndindex(*image.shape):
        centre = image.affine[:3, :3] @ ijk + image.affine[:3, 3]
        beside = np.abs(places - centre).max(axis=1).min() <= 2.0 + 1e-6
        if beside or ijk in holding:
            nearest = np.argmin(np.linalg.norm(places - centre, axis=1))
            assert volume[ijk] == pytest.approx(values[nearest], abs=1e-6)
            shown += 1
        else:
            assert np.isnan(volume[ijk])
    assert shown >= len(table)


def test_workers_and_an_interruption_change_no_digit(searched, tmp_path):
    class Stop:
        left = 3

        def stage(self, name, total):
            pass

        def step(self, label):
            self.left -= 1
            if self.left == 0:
                raise KeyboardInterrupt

    def saved(result, name):
        folder = save(result, tmp_path / name)
        files = [*(folder / "tables").iterdir(), *(folder / "maps").iterdir()]
        return {path.name: path.read_bytes() for path in files}

    plain = saved(searched.result, "two workers")
    assert {"steadier.tsv", "steadier_score.nii.gz"} <= set(plain)
    assert saved(audit(searched.plan, workers=1), "one worker") == plain
    kept = open_checkpoint(searched.plan, tmp_path / "progress")
    with pytest.raises(KeyboardInterrupt), kept:
        audit(searched.plan, workers=1, checkpoint=kept, progress=Stop())
    assert list((tmp_path / "progress").glob("fold-*.npz"))
    told = []
    with open_checkpoint(searched.plan, tmp_path / "progress", tell=told.append) as kept:
        resumed = audit(searched.plan, workers=2, checkpoint=kept)
    assert told == ["going on from earlier progress"]
    assert saved(resumed, "resumed") == plain


def test_what_is_loaded_is_what_was_saved(searched, tmp_path):
    folder = save(searched.result, tmp_path / "audit")
    again = load_audit(folder)
    assert again.summary == searched.result.summary
    pd.testing.assert_frame_equal(
        again.table("steadier"), searched.result.table("steadier"), check_dtype=False
    )
    one, other = (r.maps["steadier_score"].get_fdata() for r in (again, searched.result))
    np.testing.assert_array_equal(one, other)
    described = json.loads((folder / "tables" / "steadier.json").read_text())
    assert "never the group effect" in described["stability_in"]["Description"]
    (folder / "tables" / "steadier.tsv").unlink()
    with pytest.raises(DataError, match=r"steadier\.tsv"):
        load_audit(folder)


def test_a_participant_who_lacks_the_surroundings_costs_only_the_search(searched, monkeypatch):
    """Lattice points without a signal in somebody are lost; without neighbours there is no search,
    and the rest of the result stands.
    """
    from seedaudit import steadying

    plan, result = searched.plan, searched.result
    lost = np.zeros(len(plan.seeds[0].search.shifts), bool)
    lost[0] = True
    monkeypatch.setattr(steadying, "_covered", lambda *given: lost)
    without = audit(plan)
    told = without.summary["seeds"][0]
    assert told["steadier"] is None
    assert "no neighbour" in told["notes"][-1]
    assert "steadier" not in without.seeds[0].tables
    pd.testing.assert_frame_equal(without.regions, result.regions)


def test_one_fold_left_is_no_search(small):
    """Both participants of the second fold are bad: nothing is left to halve."""
    study = asked(
        small.folder, steadier=SEARCH, group={"folds": 2}, data={"on_bad_run": "set-aside"}
    )
    plan = make_plan(study)
    moved = tuple(
        replace(person, runs=tuple(replace(run, mask=small.regions_file) for run in person.runs))
        if person.row % 2
        else person
        for person in plan.participants
    )
    result = audit(replace(plan, participants=moved, folds=2))
    told = result.summary["seeds"][0]
    assert (told["n_participants"], told["steadier"]) == (3, None)
    assert "one fold" in told["notes"][-1]


def test_check_tells_the_search(searched):
    needs = forecast(searched.plan, 2)
    found = overview(searched.plan, needs)["seeds"][0]["search"]
    assert (found["candidates"], found["spheres"]) == (7, 57)
    assert "Search for a steadier seed" in overview_text(overview(searched.plan, needs))
    assert any("steadier one is looked for at 6 other places" in c for c in searched.plan.choices)
    seed = replace(searched.plan.seeds[0], search=None)
    plain = forecast(replace(searched.plan, seeds=(seed,)), 2)
    assert needs.seconds > plain.seconds
    assert needs.progress > plain.progress


@pytest.mark.parametrize(
    ("keys", "words"),
    [
        ({"step": 9.0}, "`step` = 9 must not be above `search` = 4"),
        ({"step": 0.0}, "steadier.step"),
        ({"search": 8.0, "step": 7.0}, "placement error reaches 5 mm"),
        ({"search": 40.0, "step": 0.5}, "larger step or a smaller `search`"),
        ({"targets": 5}, "steadier.targets"),
        ({"keep_similarty": 0.5}, "did you mean `keep_similarity`"),
        ({"search": 20.0, "step": 4.0}, "to compare maps on"),
    ],
)
def test_what_cannot_be_searched_is_said_before_computing(small, keys, words):
    with pytest.raises((StudyError, DataError)) as caught:
        make_plan(asked(small.folder, steadier={**SEARCH, **keys}))
    assert words in str(caught.value)


def test_one_participant_cannot_be_halved(small):
    first = str(next(iter(small.bold_files.values())))
    with pytest.raises(StudyError, match="no search is possible with one participant"):
        make_plan(asked(small.folder, steadier=SEARCH, data={"runs": [first]}, cleaning={
            "confounds": []}, group={"table": None}))  # fmt: skip


def test_a_normal_cloud_stands_for_a_ball_of_the_same_spread():
    """Root mean square distance of a ball of radius R: R sqrt(3/5), by quasi-random points."""
    rng = np.random.default_rng(0)
    points = rng.uniform(-1, 1, (200_000, 3))
    points = points[np.linalg.norm(points, axis=1) <= 1] * neighbourhood_radius(12.0, 3.0)
    assert np.sqrt(np.mean(points**2)) == pytest.approx(3.0, rel=0.01)
    assert neighbourhood_radius(6.0, None) == 6.0
    assert neighbourhood_radius(4.0, 3.0) == 4.0


@pytest.fixture(scope="module")
def truth():
    return json.loads((DEMO / "truth.json").read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def demo():
    return audit(asked(DEMO, placements={"count": 20, "controls": 0}), workers=2)


def test_the_recommendation_moves_away_from_the_planted_border(demo, truth):
    told = demo.summary["seeds"][0]["steadier"]
    assert told["recommended"] == "move"
    border, at = truth["border"], np.array(truth["seed"]["at"])
    moved = np.array(told["recommended_mm"]) - at
    assert moved @ truth["steadier"]["direction_vector"] > 0.9 * np.linalg.norm(moved)
    # the place is deeper in the network than the search error of one step
    depth = (np.array(told["recommended_mm"]) - border["nearest_point"]) @ border[
        "direction_vector"
    ]
    assert -depth > border["distance"] + told["step_mm"]
    assert told["gain_low"] > 0
    table = demo.table("steadier").set_index("moved_mm", drop=False)
    across = table[
        (table[["x", "y", "z"]] - border["nearest_point"]) @ border["direction_vector"] > 0
    ]
    assert not across["keeps_identity"].any()
    assert across["share_chosen"].sum() == 0
    assert "move posterior" in told["sentence"]


def test_the_middle_of_a_network_is_kept(truth):
    """The centre of the planted ball of the seed's network (seedaudit/synth/atlas.py)."""
    seed = [{"name": "middle", "at": [-8, -46, 28], "radius": 6}]
    placements = {"count": 20, "controls": 0, "within": 6}
    result = audit(
        asked(DEMO, seed=seed, placements=placements, claims=None, steadier={"search": 8}),
        workers=2,
    )
    told = result.summary["seeds"][0]["steadier"]
    assert told["recommended"] == "keep"
    assert told["recommended_mm"] == [-8, -46, 28]
    assert "keep middle where it is" in told["sentence"]
