"""A memory budget is kept: folds on disk, then tiles, and no digit changes; it is recorded."""

from __future__ import annotations

import errno
import os
import shutil
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace

import nibabel as nib
import numpy as np
import pandas as pd
import pytest

from seedaudit import forecast as needs
from seedaudit.auditing import Silence, audit, open_checkpoint, plan_folds
from seedaudit.budget import MOST_TILES, fitted, parse_size
from seedaudit.errors import DataError, StudyError
from seedaudit.forecast import BASE_MEMORY, forecast
from seedaudit.preflight import make_plan
from seedaudit.study import Study
from seedaudit.sweep import keeper, schedule
from seedaudit.sweep.checkpoint import Checkpoint
from seedaudit.sweep.correlate import BLOCK
from seedaudit.sweep.tiles import IN_MEMORY, Layout, tile_slices

SHAPE = (30, 34, 28)


@pytest.fixture(scope="module")
def asked(tmp_path_factory):
    """A study of several blocks of voxels, with regions, a claim and a search."""
    folder = tmp_path_factory.mktemp("study")
    rng = np.random.default_rng(0)
    affine = np.diag([4.0, 4.0, 4.0, 1.0])
    affine[:3, 3] = -58, -70, -50
    xyz = np.moveaxis(np.indices(SHAPE), 0, -1) @ affine[:3, :3] + affine[:3, 3]
    mask = (xyz**2).sum(axis=-1) < 53**2
    assert mask.sum() > 2 * BLOCK
    labels = np.where(mask, 1 + (xyz[..., 0] > 0) + 2 * (xyz[..., 1] > 0), 0)
    for name, values in {"mask": mask, "networks_dseg": labels}.items():
        nib.save(nib.Nifti1Image(values.astype(np.uint8), affine), folder / f"{name}.nii.gz")
    (folder / "networks_dseg.tsv").write_text(
        "index\tname\n" + "".join(f"{i}\tquarter {i}\n" for i in range(1, 5))
    )
    (folder / "claims.tsv").write_text(
        "claim\tseed\tregion\tdirection\nback\tseed\tquarter 1\tpositive\n"
    )
    names = []
    for number in range(9):
        signal = rng.standard_normal((30, 4))
        data = 800 + 8 * rng.standard_normal((*SHAPE, 30)) + 6 * signal.T[labels - 1]
        if number == 3:
            data[:3] = 700  # a part that this participant lacks
        names.append(folder / f"sub-{number}_bold.nii.gz")
        nib.save(nib.Nifti1Image(data.astype(np.int16), affine), names[-1])
    content = {
        "data": {"runs": [str(name) for name in names], "mask": "mask.nii.gz",
                 "regions": "networks_dseg.nii.gz"},
        "seed": [{"name": "seed", "at": [-20.0, -12.0, 8.0], "radius": 8.0, "space": "native"}],
        "placements": {"count": 12, "within": 8.0, "controls": 3},
        "claims": {"table": "claims.tsv", "smallest_effect": 0.05},
        "steadier": {"search": 4.0, "step": 4.0, "targets": 100},
    }  # fmt: skip
    return content, folder


@pytest.fixture(scope="module")
def large(asked):
    content, folder = asked
    return make_plan(Study.from_mapping(content, folder))


@pytest.fixture(scope="module")
def whole(large):
    return audit(large, workers=2)


@pytest.mark.parametrize(
    ("text", "size"), [("6GB", 6e9), ("500 mb", 5e8), ("2.5e9", 2.5e9), ("1TB", 1e12)]
)
def test_sizes(text, size):
    assert parse_size(text) == size


@pytest.mark.parametrize("text", ["", "lots", "-1GB", "0", "6 apples", "nan"])
def test_what_is_no_size(text):
    with pytest.raises(StudyError, match="--memory"):
        parse_size(text)


def test_steps_of_the_ladder(large, monkeypatch):
    """Enough: as asked. Less: folds on disk. Still less: tiles. Fewer folds last; else an error."""
    # a study whose pass takes more memory than its conclusions
    monkeypatch.setattr(needs, "_concluding", lambda plan, sizes, workers: 1e6)

    def need(layout, folds=8):
        return forecast(replace(large, layout=layout, folds=folds), 2).memory

    enough = fitted(large, 2, need(IN_MEMORY))
    assert (enough.folds, enough.layout, enough.choices) == (8, IN_MEMORY, large.choices)
    disk = fitted(large, 2, need(IN_MEMORY) - 1)
    assert (disk.folds, disk.layout) == (8, Layout(1, on_disk=True))
    assert disk.choices[-1].endswith("of memory: the state of finished folds on disk")
    tiled = fitted(large, 2, need(Layout(1, on_disk=True)) - 1)
    assert (tiled.folds, tiled.layout) == (8, Layout(2, on_disk=True))
    assert "2 passes over the data" in tiled.choices[-1]
    assert forecast(tiled, 2).progress > forecast(enough, 2).progress
    alone = fitted(large, 2, need(Layout(MOST_TILES, True)) - 1)
    assert (alone.folds, alone.layout.workers) == (8, 1)
    assert "1 worker at the most" in alone.choices[-1]
    # conclusions that nothing but fewer folds make smaller
    monkeypatch.setattr(needs, "_concluding", lambda plan, sizes, workers: 4e6 * sizes.folds)
    fewest = fitted(large, 2, need(IN_MEMORY, folds=4))
    assert fewest.folds == 4
    assert "4 folds in the place of 8" in fewest.choices[-1]
    assert len(plan_folds(fewest)) == 4
    with pytest.raises(StudyError, match="at the least"):
        fitted(large, 2, BASE_MEMORY)


def test_what_an_interrupted_run_holds_is_no_further_need(large, tmp_path, monkeypatch):
    wanted = forecast(replace(large, layout=Layout(2, on_disk=True)), 2)
    (tmp_path / ".audit.progress" / "state").mkdir(parents=True)
    held = tmp_path / ".audit.progress" / "state" / "fold-000"
    held.write_bytes(b"1" * (8 << 20))
    free = wanted.disk + wanted.progress - (4 << 20)
    monkeypatch.setattr(shutil, "disk_usage", lambda path: SimpleNamespace(free=free))
    assert needs.strains(wanted, tmp_path / "audit") == []
    held.unlink()
    with pytest.raises(StudyError, match="enough space on the disk"):
        needs.strains(wanted, tmp_path / "audit")


def test_nothing_to_analyse_is_a_clear_error(asked, tmp_path):
    """Two participants who have no voxel in common outside the surroundings of the seed."""
    content, folder = asked
    runs = [Path(shutil.copy(name, tmp_path)) for name in content["data"]["runs"][:4]]
    for side, run in enumerate(runs[:2]):
        image = nib.Nifti1Image.from_filename(run)
        data = np.asarray(image.dataobj).copy()
        xyz = np.moveaxis(np.indices(SHAPE), 0, -1) @ image.affine[:3, :3] + image.affine[:3, 3]
        near = ((xyz - content["seed"][0]["at"]) ** 2).sum(axis=-1) < 20**2
        data[~near & ((xyz[..., 0] > 0) == bool(side))] = 700
        nib.save(nib.Nifti1Image(data, image.affine), run)
    content = {
        "data": {**content["data"], "runs": [str(run) for run in runs]},
        "seed": content["seed"],
        "placements": {"count": 12, "within": 4.0, "controls": 0},
        "consensus": {"exclude_margin": 12.0},
    }
    with pytest.raises(DataError, match="in none of them can the group model be estimated"):
        audit(make_plan(Study.from_mapping(content, folder)))


LAYOUTS = [Layout(1, on_disk=True), Layout(2, on_disk=True), Layout(7, on_disk=True)]


def assert_same(found, expected, claims=True):
    found, expected = found.seeds[0], expected.seeds[0]
    assert found.summary == expected.summary
    assert set(found.tables) == set(expected.tables)
    assert ("steadier" in found.tables) == (len(found.tables["claims"]) > 0) == claims
    for name, table in expected.tables.items():
        pd.testing.assert_frame_equal(table, found.tables[name], check_exact=True)
    for name, image in expected.maps.items():
        np.testing.assert_array_equal(
            np.asarray(image.dataobj), np.asarray(found.maps[name].dataobj), err_msg=name
        )


@pytest.mark.parametrize("layout", LAYOUTS)
def test_no_digit_depends_on_the_layout(large, whole, layout):
    """Tables, maps and headline of the whole audit, with a claim and a search."""
    assert_same(audit(replace(large, layout=layout), workers=3), whole)


def test_no_digit_depends_on_the_layout_with_one_participant(asked):
    """The sampling variance of z and the halves of the time series go to disk too."""
    content, folder = asked
    one = {name: part for name, part in content.items() if name not in ("claims", "steadier")}
    one["data"] = {**one["data"], "runs": one["data"]["runs"][:1]}
    plan = make_plan(Study.from_mapping(one, folder))
    expected = audit(plan)
    assert expected.seeds[0].summary["ceiling"] is not None
    for layout in LAYOUTS[:2]:
        assert_same(audit(replace(plan, layout=layout)), expected, claims=False)


class Stop(Silence):
    """Ctrl-C after so many participants."""

    def __init__(self, left):
        self.left = left

    def step(self, label):
        self.left -= 1
        if self.left == 0:
            raise KeyboardInterrupt


@pytest.mark.parametrize("after", [3, 9, 12])
def test_an_interrupted_tile_goes_on(large, whole, after, tmp_path):
    """In the first and in the second tile; finished folds are not read again."""
    plan = replace(large, layout=LAYOUTS[1])
    with pytest.raises(KeyboardInterrupt), open_checkpoint(plan, tmp_path / "progress") as kept:
        audit(plan, workers=1, checkpoint=kept, progress=Stop(after))
    told = []
    with open_checkpoint(plan, tmp_path / "progress", tell=told.append) as kept:
        assert_same(audit(plan, workers=2, checkpoint=kept), whole)
    assert told == ["going on from earlier progress"]
    # a state that is no longer there is made again
    (tmp_path / "progress" / "state" / "fold-003").unlink()
    with open_checkpoint(plan, tmp_path / "progress") as kept:
        assert_same(audit(plan, checkpoint=kept), whole)
        kept.finish()
    assert not (tmp_path / "progress").exists()


def stopped(plan, folder, after, workers=1):
    with pytest.raises(KeyboardInterrupt), open_checkpoint(plan, folder) as kept:
        audit(plan, workers=workers, checkpoint=kept, progress=Stop(after))


def resumed(plan, folder, workers=2):
    with open_checkpoint(plan, folder, tell=str) as kept:
        return audit(plan, workers=workers, checkpoint=kept)


def test_states_that_are_lost_twice_are_made_again(large, whole, tmp_path):
    """No tile is believed whose bytes went with the file, however often the run is stopped."""
    plan, folder = replace(large, layout=LAYOUTS[2]), tmp_path / "progress"
    stopped(plan, folder, 25)  # nine participants, three tiles
    shutil.rmtree(folder / "state")
    stopped(plan, folder, 10)
    (folder / "state" / "fold-001").write_bytes(b"")
    stopped(plan, folder, 20)
    assert_same(resumed(plan, folder), whole)


def test_workers_and_memory_may_change_on_the_way(large, whole, tmp_path):
    """Progress is used again wherever the states are; only the tiles must be the same."""
    for number, (first, second) in enumerate(
        [(IN_MEMORY, LAYOUTS[0]), (LAYOUTS[0], IN_MEMORY),
         (LAYOUTS[1], replace(LAYOUTS[1], workers=1))]
    ):  # fmt: skip
        folder = tmp_path / str(number)
        stopped(replace(large, layout=first), folder, 5)
        told = []
        plan = replace(large, layout=second)
        with open_checkpoint(plan, folder, tell=told.append) as kept:
            assert_same(audit(plan, workers=3, checkpoint=kept), whole)
        assert told == ["going on from earlier progress"]


@pytest.fixture
def mutable(asked, tmp_path):
    """A plan of copies of the runs, which may be damaged and mended; and the copies."""
    content, folder = asked
    runs = [Path(shutil.copy(name, tmp_path)) for name in content["data"]["runs"]]
    own = {**content["data"], "runs": [str(run) for run in runs], "on_bad_run": "set-aside"}
    plan = make_plan(Study.from_mapping({**content, "data": own}, folder))
    return replace(plan, layout=LAYOUTS[1]), runs


@pytest.mark.parametrize("first", [3, 12])
@pytest.mark.parametrize("damaged_first", [True, False])
def test_a_run_that_is_damaged_or_mended_on_the_way(
    mutable, large, whole, tmp_path, first, damaged_first
):
    """In the first and in the second tile: what is there at the end is what counts."""
    plan, runs = mutable
    good, bad = runs[4].read_bytes(), runs[4].read_bytes()[:-3000]
    runs[4].write_bytes(bad if damaged_first else good)
    stopped(plan, tmp_path / "progress", first)
    runs[4].write_bytes(good if damaged_first else bad)
    found = resumed(plan, tmp_path / "progress")
    if damaged_first:
        assert_same(found, whole)
    else:
        assert found.provenance["group"]["set_aside"] == 1
        assert_same(found, audit(plan))


def test_a_kill_between_a_state_and_its_note(mutable, whole, tmp_path, monkeypatch):
    """The note of an earlier state must not vouch for a later one, when the file comes back."""
    plan, runs = mutable
    folder, good = tmp_path / "progress", runs[0].read_bytes()
    stopped(plan, folder, 12)
    runs[0].write_bytes(runs[8].read_bytes() + good)  # other images, readable
    noted = Checkpoint.note

    def killed(self, unit, progress, *, finished, now):
        if finished:
            raise KeyboardInterrupt
        noted(self, unit, progress, finished=finished, now=now)

    with monkeypatch.context() as patched:
        patched.setattr(Checkpoint, "note", killed)
        with pytest.raises(KeyboardInterrupt):
            resumed(plan, folder)
    runs[0].write_bytes(good)
    assert_same(resumed(plan, folder), whole)


def test_another_layout_does_not_use_earlier_progress(large, whole, tmp_path):
    told = []
    for layout in (LAYOUTS[1], LAYOUTS[2]):
        plan = replace(large, layout=layout)
        with open_checkpoint(plan, tmp_path / "progress", tell=told.append) as kept:
            assert_same(audit(plan, checkpoint=kept), whole)
    assert told == ["earlier progress is not used (changed: tiles of the voxels)"]


def test_a_full_disk_is_a_clear_error(large, tmp_path, monkeypatch):
    def full(*_):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(keeper, "store_tile", full)
    plan = replace(large, layout=LAYOUTS[0])
    with (
        open_checkpoint(plan, tmp_path / ".audit.progress") as kept,
        pytest.raises(DataError, match=r"progress folder \.audit\.progress: cannot be written"),
    ):
        audit(plan, checkpoint=kept)


def test_a_file_that_changes_between_tiles_is_an_error(large, monkeypatch):
    def changed(tiles):
        tiles[1][0] = replace(tiles[1][0], digests=("another",))
        return keeper.joined_records(tiles)

    monkeypatch.setattr(schedule, "joined_records", changed)
    with pytest.raises(DataError, match="a run has changed while the audit was at work"):
        audit(replace(large, layout=LAYOUTS[1]))


def test_set_aside_in_the_first_tile_is_set_aside_in_all(asked, tmp_path):
    content, folder = asked
    runs = [str(shutil.copy(name, tmp_path)) for name in content["data"]["runs"]]
    damaged = Path(runs[4])
    damaged.write_bytes(damaged.read_bytes()[:-3000])
    content = {**content, "data": {**content["data"], "runs": runs, "on_bad_run": "set-aside"}}
    plan = make_plan(Study.from_mapping(content, folder))
    expected = audit(plan)
    assert expected.provenance["group"]["set_aside"] == 1
    assert_same(audit(replace(plan, layout=LAYOUTS[1])), expected)


def test_tiles_from_prepared_runs(large, whole, tmp_path):
    for _ in ("kept", "used"):
        found = audit(replace(large, layout=LAYOUTS[1]), prepared=tmp_path / "kept")
        assert_same(found, whole)


def test_tiles_are_whole_blocks():
    tiles = tile_slices(10 * BLOCK + 5, 3)
    assert [tile.start for tile in tiles] == [0, 4 * BLOCK, 7 * BLOCK]
    assert tiles[-1].stop == 10 * BLOCK + 5
    assert tile_slices(5, 3) == [slice(0, 5)]
