"""The study file as settings, and everything it may ask for, run on the small study."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path
from types import SimpleNamespace

import nibabel as nib
import numpy as np
import pandas as pd
import pytest
from nibabel.affines import apply_affine
from nilearn.datasets import fetch_coords_dosenbach_2010
from scipy import ndimage

from seedaudit.cli import main
from seedaudit.errors import StudyError
from seedaudit.store import load_audit
from seedaudit.study import Study
from tests.breaks import Break, both, image, put, swap
from tests.small_brain import SEED_AT
from tests.small_study import write_small_study

LEAST = {"data": {"runs": "sub-*_bold.nii.gz"}, "seed": [{"at": [0, -52, 26]}]}


def study(**sections) -> Study:
    return Study.from_mapping({**LEAST, **sections})


def test_defaults():
    """The defaults that CONTRACT and METHODS state."""
    asked = study()
    seed, placements = asked.seed[0], asked.placements
    assert (asked.output, seed.space, seed.radius) == ("audit", "mni", 6)
    assert (placements.draw, placements.count, placements.min_coverage) == ("ball", 100, 0.5)
    assert (asked.group.model, asked.group.folds) == ("~ 1", 8)
    assert (asked.threshold.rule, asked.threshold.level) == ("fdr", 0.05)
    assert (asked.threshold.neighbours, asked.consensus.safe) == (26, 0.95)
    assert asked.cleaning is None
    assert asked.data.on_bad_run == "stop"


@pytest.mark.parametrize(
    ("rule", "level"),
    [
        ("p", 0.001),
        ("fdr", 0.05),
        ("bonferroni", 0.05),
        ("t", 3),
        ("effect", 0.2),
        ("density", 0.1),
    ],
)
def test_level_of_a_rule(rule, level):
    assert study(threshold={"rule": rule}).threshold.level == level


def test_a_budget_asks_for_a_normal_cloud():
    assert study(placements={"uncertainty": {"registration": 2.5}}).placements.draw == "normal"
    with pytest.raises(StudyError, match='draw = "normal"'):
        study(placements={"uncertainty": {"registration": 2.5}, "draw": "ball"})


def test_frozen():
    with pytest.raises(ValueError, match="frozen"):
        study().title = "another"


def test_paths_start_from_the_study_file(tmp_path):
    (tmp_path / "study.toml").write_text(
        'data = { runs = "*.nii" }\n[[seed]]\nat = [0, -52, 26]\n', encoding="utf-8"
    )
    loaded = Study.load(tmp_path / "study.toml")
    assert loaded.path("mask.nii.gz") == tmp_path / "mask.nii.gz"
    assert loaded.path("/elsewhere/mask.nii.gz") == Path("/elsewhere/mask.nii.gz")


def test_all_problems_together():
    with pytest.raises(StudyError) as raised:
        Study.from_mapping(
            {
                "data": {"runs": "*.nii", "mask": "none.nii", "regions": "none.nii.gz"},
                "seed": [{"at": [0, 0, "6"], "radius": True, "nmae": "a"}],
                "placements": {"count": 1, "within": -1},
                "threshold": {"rule": "FDR", "neighbours": 8},
            }
        )
    where = {problem.where for problem in raised.value.problems}
    assert where == {
        "data.mask", "data.regions", "seed[1].at[3]", "seed[1].radius", "seed[1].nmae",
        "placements.count", "placements.within", "threshold.rule", "threshold.neighbours",
    }  # fmt: skip
    texts = {problem.where: str(problem) for problem in raised.value.problems}
    assert "did you mean `name`?" in texts["seed[1].nmae"]
    assert "did you mean 'fdr'?" in texts["threshold.rule"]
    assert "without quotes" in texts["seed[1].at[3]"]


@pytest.mark.parametrize("key", ["runs", "mask", "regions"])
def test_files_that_cannot_exist(key):
    with pytest.raises(StudyError, match="does not exist"):
        Study.from_mapping({**LEAST, "data": {"runs": "*.nii", key: "no\0file"}})


# ---- What a study may ask for, each run through on real files.


@pytest.fixture(scope="module")
def base(tmp_path_factory) -> Path:
    """Three participants of one run."""
    return write_small_study(tmp_path_factory.mktemp("base"), participants=3, two_runs=()).folder


@pytest.fixture
def audited(base, tmp_path, monkeypatch, capsys) -> Callable[..., SimpleNamespace]:
    """Run a changed copy of the study; the saved result, its first placement table and folder."""
    monkeypatch.setattr("seedaudit.report.write_report", lambda audit, folder: None)
    folder = tmp_path / "study"
    shutil.copytree(base, folder)

    def go(change: Break) -> SimpleNamespace:
        change(folder)
        code = main(["run", str(folder / "study.toml")])
        assert code == 0, capsys.readouterr().err
        result = load_audit(folder / "audit")
        placements = result.seed().table("placements")
        drawn = placements[placements["kind"].isin(["jitter", "lattice"])]
        assert drawn["used"].all()
        return SimpleNamespace(
            result=result, folder=folder, reported=placements.iloc[0], drawn=drawn,
            shifts=drawn[["dx", "dy", "dz"]].to_numpy(), summary=result.seed().summary,
        )  # fmt: skip

    return go


def test_ball(audited):
    got = audited(swap(("count = 12", "count = 16")))
    assert len(got.drawn) == 16
    np.testing.assert_allclose(got.reported[["x", "y", "z"]].astype(float), SEED_AT)
    np.testing.assert_allclose(np.linalg.norm(got.shifts, axis=1), got.drawn["distance"], atol=1e-5)
    assert got.drawn["distance"].between(0, 5).all()


def test_shell(audited):
    got = audited(put("placements", 'draw = "shell"', "distances = [2.0, 4.0]"))
    assert got.drawn["distance"].round(5).value_counts().to_dict() == {2.0: 6, 4.0: 6}


def test_lattice(audited):
    """Points of a cubic lattice within 2 steps of one of them: 33 (OEIS A000605)."""
    got = audited(put("placements", 'draw = "lattice"', "step = 2.5"))
    assert len(got.drawn) == 33 - 1
    assert (got.drawn["kind"] == "lattice").all()
    np.testing.assert_allclose(got.shifts / 2.5, np.round(got.shifts / 2.5), atol=1e-6)


def test_normal(audited):
    got = audited(put("placements", 'draw = "normal"', "sd = 1.0"))
    assert got.drawn["distance"].max() <= 5
    assert 0.5 < np.sqrt(np.mean(got.shifts**2)) < 1.5


def test_uncertainty_budget(audited):
    """Independent errors add by their squares: 1.2 and 0.5 make 1.3 mm; the cloud ends at 3 SD."""
    got = audited(
        both(
            put("placements", "uncertainty = { registration = 1.2, rounding = 0.5 }"),
            swap(("within = 5.0\n", "")),
        )
    )
    assert got.summary["draw"] == "normal"
    assert got.summary["within_mm"] == pytest.approx(3 * 1.3)
    assert got.drawn["distance"].max() <= 3 * 1.3


def test_several_radii(audited):
    got = audited(put("placements", "radii = [4.0, 5.0, 6.0]"))
    assert got.reported["radius"] == 5
    assert got.drawn["radius"].value_counts().to_dict() == {4.0: 12, 5.0: 12, 6.0: 12}
    assert got.drawn.groupby("radius")["n_voxels"].mean().is_monotonic_increasing
    assert got.drawn[["dx", "dy", "dz"]].drop_duplicates().shape[0] == 12


def test_snap(audited):
    """Whole voxel steps of the image, by its own affine; so every sphere has one size."""
    got = audited(put("placements", "snap = true"))
    affine = nib.load(got.folder / "mask.nii.gz").affine
    steps = got.shifts @ np.linalg.inv(affine[:3, :3]).T
    np.testing.assert_allclose(steps, np.round(steps), atol=1e-4)
    assert got.drawn["n_voxels"].unique().tolist() == [got.reported["n_voxels"]]


def test_soft_weighting(audited):
    """A voxel that is only touched counts too: more of them than have their centre inside."""
    got = audited(put("placements", 'weighting = "soft"'))
    mask = nib.load(got.folder / "mask.nii.gz")
    voxels = apply_affine(mask.affine, np.argwhere(np.asarray(mask.dataobj) > 0))
    centres = got.drawn[["x", "y", "z"]].to_numpy()
    inside = np.linalg.norm(voxels[None] - centres[:, None], axis=2) <= 5
    assert (got.drawn["n_voxels"].to_numpy() > inside.sum(axis=1)).all()


def test_inside(audited):
    def grey(folder: Path) -> None:
        mask = nib.load(folder / "mask.nii.gz")
        i = np.indices(mask.shape)
        data = (np.asarray(mask.dataobj) > 0) & ((i[0] + i[1] + i[2]) % 2 == 0)
        nib.save(nib.Nifti1Image(data.astype(np.uint8), mask.affine), folder / "grey.nii.gz")

    got = audited(both(grey, put("placements", 'inside = "grey.nii.gz"')))
    image_ = nib.load(got.folder / "grey.nii.gz")
    centres = got.drawn[["x", "y", "z"]].to_numpy()
    voxels = np.round(apply_affine(np.linalg.inv(image_.affine), centres)).astype(int)
    assert np.asarray(image_.dataobj)[tuple(voxels.T)].all()
    assert len(got.drawn) == 12


SHORT = (("count = 12", "count = 4"),)
NO_CONFOUNDS = ('confounds = ["trans_*", "rot_*"]\n', "")


def test_a_plain_pattern(audited):
    """Without a table of runs, participants are told by their `sub-` labels."""
    got = audited(swap(('runs = "runs.tsv"', 'runs = "sub-*_bold.nii*"'), NO_CONFOUNDS, *SHORT))
    people = got.result.seed().table("participants")
    assert people["participant_id"].tolist() == ["sub-01", "sub-02", "sub-03"]


def test_bids_runs(audited):
    """A derivative folder, selected by an entity; confounds are found by their BIDS names."""

    def bids(folder: Path) -> None:
        for number in (1, 2, 3):
            name = f"sub-{number:02d}"
            func = folder / "deriv" / name / "func"
            func.mkdir(parents=True)
            stem = f"{name}_task-rest"
            old = next(folder.glob(f"{name}_*_bold.nii*"))
            suffix = "".join(old.suffixes)
            shutil.copy(old, func / f"{stem}_space-native_desc-preproc_bold{suffix}")
            shutil.copy(old, func / f"{stem}_space-other_desc-preproc_bold{suffix}")
            shutil.copy(folder / f"{name}_task-rest_run-1_timeseries.tsv",
                        func / f"{stem}_desc-confounds_timeseries.tsv")  # fmt: skip

    got = audited(
        both(
            bids,
            swap(('runs = "runs.tsv"', 'bids = "deriv"\nselect = { space = "native" }'), *SHORT),
        )
    )
    assert got.summary["n_participants"] == 3
    people = got.result.seed().table("participants")
    # volumes minus intercept, drift and the seven matched columns: the confounds were found
    assert (people["residual_df"] == people["n_volumes"] - 9).all()


def test_published_regions(audited):
    """The six networks of Dosenbach et al. 2010 Science 329:1358; the table is nilearn's."""
    atlas = fetch_coords_dosenbach_2010(ordered_regions=False)
    got = audited(
        both(
            *(image(number, codes=(4, 4)) for number in (1, 2, 3)),
            swap(
                ('regions = "networks_dseg.nii.gz"', 'regions = "dosenbach2010"'),
                ('space = "native"', 'space = "mni"'),
                *SHORT,
            ),
        )
    )
    analysis = got.result.maps["analysis_mask"]
    voxels = apply_affine(analysis.affine, np.argwhere(analysis.get_fdata() > 0))
    away = np.linalg.norm(voxels[:, None] - np.asarray(atlas.rois)[None], axis=2)
    owners = np.asarray(atlas.networks)[away.argmin(axis=1)[away.min(axis=1) <= 5]]
    regions = got.result.seed().table("regions").set_index("region")
    assert len(regions) == 6
    assert regions["n_voxels"].sum() == len(owners) > 0
    for name in set(atlas.networks):
        assert regions.loc[name, "n_voxels"] == np.sum(owners == name)
    assert regions.loc[regions["n_voxels"] == 0, "state"].eq("n/a").all()


def test_several_seeds(audited):
    second = '[[seed]]\nname = "front"\nat = [-4, -36, 24]\nspace = "native"\nradius = 4\n\n'
    got = audited(swap(("[placements]", second + "[placements]"), *SHORT))
    assert [seed.name for seed in got.result.seeds] == ["posterior", "front"]
    for name in ("posterior", "front"):
        own = got.folder / "audit" / name
        table = pd.read_csv(own / "tables" / "placements.tsv", sep="\t")
        assert set(table["seed"]) == {name}
        assert (own / "maps" / "effect_reported.nii.gz").is_file()
    assert not (got.folder / "audit" / "maps").exists()
    assert got.result.seed("front").table("placements")["radius"].iloc[0] == 4
    assert [seed["name"] for seed in got.result.summary["seeds"]] == ["posterior", "front"]


def test_voxels_that_some_lack(audited):
    """`counts` keeps the four voxels that only sub-02 lacks; `intersection` drops them."""
    got = audited(both(put("group", 'missing = "counts"'), swap(*SHORT)))
    kept = got.summary["n_analysis_voxels"]
    shutil.rmtree(got.folder / "audit")
    dropped = audited(swap(('missing = "counts"', 'missing = "intersection"')))
    people = got.result.seed().table("participants").set_index("participant_id")
    assert people.loc["sub-02", "n_missing_voxels"] == 4
    # one of the four lies at the seed, inside the excluded cloud
    assert kept - dropped.summary["n_analysis_voxels"] in (3, 4)


def test_min_extent(audited):
    got = audited(
        both(
            swap(('rule = "fdr"', 'rule = "effect"'), ("level = 0.05", "level = 0.15"), *SHORT),
            put("threshold", "min_extent = 700.0", "neighbours = 6"),
        )
    )
    t_map = got.result.maps["effect_reported"].get_fdata()
    # 700 mm3 are 11 voxels of 4.1 x 3.6 x 4.6 mm; faces only, each tail on its own
    for tail, sign in (("positive", 1), ("negative", -1)):
        clusters, _ = ndimage.label(np.nan_to_num(sign * t_map) >= 0.15)
        sizes = np.bincount(clusters.ravel())[1:]
        assert got.summary[f"n_reported_{tail}"] == sizes[sizes >= 11].sum()
    assert "at least 700 mm3" in got.summary["threshold"]


def test_density_of_each_tail(audited):
    got = audited(
        both(
            swap(('rule = "fdr"', 'rule = "density"'), ("level = 0.05", "level = 0.1"), *SHORT),
            put("threshold", "per_tail = true"),
        )
    )
    table = got.result.seed().table("similarity")
    share = 0.1 * got.summary["n_analysis_voxels"]
    for tail in ("n_positive", "n_negative"):
        assert table[tail].nunique() == 1
        assert abs(table[tail].iloc[0] - share) <= 1


def test_effect_on_the_scale_of_r(audited):
    """The cut is on the correlation: tanh of the mean Fisher z."""
    got = audited(
        both(
            swap(('rule = "fdr"', 'rule = "effect"'), ("level = 0.05", "level = 0.2"), *SHORT),
            put("threshold", 'scale = "r"'),
        )
    )
    effect = got.result.maps["effect_reported"].get_fdata()
    assert got.summary["threshold"] == "effect 0.2 (r)"
    assert got.summary["n_reported_positive"] == np.sum(np.tanh(effect) >= 0.2)
    assert got.summary["n_reported_negative"] == np.sum(np.tanh(effect) <= -0.2)


def test_cleaning_is_counted(audited):
    """Residual degrees of freedom: volumes minus intercept, drift, confounds, spikes, cosines."""
    got = audited(
        both(
            put(
                "cleaning",
                "band = [0.02, 0.25]",
                "smooth = 6.0",
                'censor = { column = "framewise_displacement", above = 0.25 }',
            ),
            swap(*SHORT),
        )
    )
    for row in got.result.seed().table("participants").to_dict("records"):
        table = pd.read_csv(
            got.folder / f"{row['participant_id']}_task-rest_run-1_timeseries.tsv",
            sep="\t", na_values="n/a",
        )  # fmt: skip
        n = row["n_volumes"]
        spikes = int((table["framewise_displacement"] > 0.25).sum())
        # DCT-II frequencies k / (2 n TR) below 0.02 Hz, TR = 2 s; 0.25 Hz is the highest
        slow = int(np.sum(np.arange(1, n) / (4 * n) < 0.02 - 1e-12))
        assert row["n_censored"] == spikes
        assert row["residual_df"] == n - 1 - 1 - 7 - spikes - slow


def test_smoothing_makes_maps_smoother(audited):
    """Neighbours differ less, for the spread of the map, in smoothed data."""

    def roughness(got) -> float:
        effect = got.result.maps["effect_reported"].get_fdata()
        return float(np.nanmean(np.abs(np.diff(effect, axis=0))) / np.nanstd(effect))

    rough = audited(swap(*SHORT))
    before = roughness(rough)
    shutil.rmtree(rough.folder / "audit")
    assert roughness(audited(put("cleaning", "smooth = 8.0"))) < 0.8 * before


def test_a_seed_without_cleaning(audited):
    """Without the section the data are taken as clean: the intercept alone goes."""
    got = audited(swap(("[cleaning]\n", ""), NO_CONFOUNDS, ("drift = 1\n", ""), *SHORT))
    people = got.result.seed().table("participants")
    assert (people["residual_df"] == people["n_volumes"] - 1).all()
