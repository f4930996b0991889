"""The main job again with general-purpose libraries alone, from the files to the tables.

nilearn reads, masks, cleans, correlates and fits the group model; scipy, statsmodels and
scikit-learn do what follows. Only the placements and their radius are taken from the program.
Source of every expected value here: those libraries (common practice in the field), named in each
test; the worked agreement example has its own.

Where the rules differ:

- nilearn's sphere also is the closed ball around the centre, plus the voxel that contains the
  centre; besides, it adds a voxel whose coordinates, cut to whole mm, equal those of the centre.
  Such a voxel is less than 3.5 mm away, so with a radius above that the voxels are the same.
- nilearn reads a missing value as 0 and scales a constant voxel to 0; this program leaves both out.
- nilearn's cosine filter has a low end only, and removes a cosine that lies on it; the program
  removes the cosines below and above the band and keeps both ends. They agree between two cosines;
  for a whole band the cosines are handed to nilearn as confounds.
- nilearn cuts a censored volume out, the program gives it a nuisance column: the same residuals.
"""

from __future__ import annotations

import warnings
from pathlib import Path
from types import SimpleNamespace

import nibabel as nib
import numpy as np
import pandas as pd
import pytest
from nilearn.glm import threshold_stats_img
from nilearn.glm.second_level import SecondLevelModel
from nilearn.maskers import NiftiLabelsMasker, NiftiMasker, NiftiSpheresMasker
from nilearn.signal import clean
from scipy import fft, stats
from scipy.spatial import KDTree
from sklearn.metrics import f1_score, root_mean_squared_error
from statsmodels.stats.inter_rater import aggregate_raters, fleiss_kappa
from statsmodels.stats.multitest import multipletests

from seedaudit import Study, audit
from seedaudit.consensus.agreement import class_counts
from seedaudit.consensus.chance import gwet_ac1
from seedaudit.inputs.nuisance import nuisance_basis
from seedaudit.preflight import make_plan
from seedaudit.sweep.correlate import seed_series
from seedaudit.sweep.work import load_run
from tests.small_study import RADIUS, write_small_study

DEMO = Path(__file__).parent.parent / "demo_data"
TAILS = {"positive": 1, "negative": -1}


def load64(path: Path) -> nib.Nifti1Image:
    """An image in float64, as the libraries clean in the precision they are given."""
    image = nib.Nifti1Image.from_filename(path)
    return nib.Nifti1Image(image.get_fdata(), image.affine)


def confound_table(path: Path, columns: str) -> pd.DataFrame:
    """The columns that match a regular expression; a missing first difference is 0."""
    table = pd.read_csv(path, sep="\t", na_values="n/a")
    return table.filter(regex=columns).fillna(0)


def correlate(image, mask, centres, radius, **cleaning) -> np.ndarray:
    """Fisher z (X, Y, Z, N) of sphere means with all mask voxels; NaN where nothing varies."""
    options = {"standardize": "zscore_sample", "reports": False}
    detrend = {"detrend": cleaning.pop("detrend", True)}
    spheres = NiftiSpheresMasker(
        centres, radius=radius, mask_img=mask, allow_overlap=True, **options, **detrend
    )
    voxels = NiftiMasker(mask, **options, **detrend)
    seeds = spheres.fit_transform(image, **cleaning)
    series = voxels.fit_transform(image, **cleaning)
    r = np.clip(seeds.T @ series / (len(series) - 1), -0.9999999, 0.9999999)
    z = voxels.inverse_transform(np.arctanh(r)).get_fdata()
    raw = image.get_fdata()
    alive = np.isfinite(raw).all(axis=-1) & (np.ptp(raw, axis=-1) > 0)
    z[~(alive & (mask.get_fdata() > 0))] = np.nan
    return z


def participant_map(small, name, centres) -> np.ndarray:
    """Mean z over a participant's runs, weighted by residual degrees of freedom minus 3."""
    mask, maps, weights = load64(small.mask_file), [], []
    for run, bold in small.bold_files.items():
        if run[0] == name:
            table = confound_table(small.confound_files[run], "^(trans|rot)_")
            maps.append(correlate(load64(bold), mask, centres, RADIUS, confounds=table))
            line = np.vander(np.arange(len(table)), 2)
            rank = np.linalg.matrix_rank(np.column_stack([line, table - table.mean()]))
            weights.append(len(table) - rank - 3)
    return np.average(maps, axis=0, weights=weights)


def second_level(maps, affine, mask, design, contrast) -> dict[str, np.ndarray]:
    """effect_size, stat and z_score (A,) of one placement's participant maps, by nilearn."""
    images = [nib.Nifti1Image(z, affine) for z in maps]
    model = SecondLevelModel(mask_img=mask).fit(images, design_matrix=design)
    made = model.compute_contrast(contrast, second_level_stat_type="t", output_type="all")
    inside = mask.get_fdata() > 0
    return {name: made[name].get_fdata()[inside] for name in ("effect_size", "stat", "z_score")}


def whole_job(folder: Path, **options) -> SimpleNamespace:
    """The program's result, and the participant and group maps of the same placements."""
    small = write_small_study(folder, **options)
    plan = make_plan(Study.load(small.study_file))
    result = audit(plan, workers=2)
    # the reported placement and its cloud; control seeds elsewhere are no part of it
    cloud = result.placements[result.placements["kind"] != "control"]
    assert cloud["used"].all()
    centres = cloud[["x", "y", "z"]].to_numpy()
    z = np.array([participant_map(small, name, centres) for name in small.runs])
    complete = np.isfinite(z).all(axis=(0, -1))
    ijk = np.argwhere(complete)
    xyz = nib.affines.apply_affine(small.affine, ijk)
    reach = RADIUS + nib.affines.voxel_sizes(small.affine).max()
    analysed = np.zeros(complete.shape, np.uint8)
    analysed[tuple(ijk[KDTree(centres).query(xyz)[0] > reach].T)] = 1
    mask = nib.Nifti1Image(analysed, small.affine)
    design = pd.DataFrame(
        small.design, columns=["intercept", "arm", "age"][: small.design.shape[1]]
    )
    group = [
        second_level(z[..., i], small.affine, mask, design, small.contrast)
        for i in range(len(centres))
    ]
    return SimpleNamespace(
        small=small, plan=plan, result=result, centres=centres, z=z, mask=mask,
        inside=analysed > 0, df=len(design) - design.shape[1],
        **{name: np.array([maps[name] for maps in group]) for name in group[0]},
    )  # fmt: skip


@pytest.fixture(scope="module")
def mean_study(tmp_path_factory):
    job = whole_job(tmp_path_factory.mktemp("mean"))
    p = 2 * stats.t.sf(np.abs(job.stat), job.df)
    passes = [multipletests(row, alpha=0.05, method="fdr_bh")[0] for row in p]
    job.classes = (np.sign(job.stat) * passes).astype(int)
    return job


@pytest.fixture(scope="module")
def arms_study(tmp_path_factory):
    """Two arms and a covariate, uncorrected p; stored flipped and with permuted axes."""
    job = whole_job(
        tmp_path_factory.mktemp("arms"), participants=10, model="~ arm + age", rule="p", level=0.05,
        flip=(True, False, True), permute=(2, 0, 1),
    )  # fmt: skip
    passes = 2 * stats.t.sf(np.abs(job.stat), job.df) <= 0.05
    job.classes = (np.sign(job.stat) * passes).astype(int)
    return job


@pytest.fixture(scope="module", params=["mean_study", "arms_study"])
def job(request):
    return request.getfixturevalue(request.param)


def test_seed_series(mean_study):
    """Sphere means and their cleaning, by nilearn's NiftiSpheresMasker and signal.clean.

    Equal means of 40 and more volumes of noisy voxels are means over the same voxels.
    """
    plan, small = mean_study.plan, mean_study.small
    task = plan.participants[0].runs[0]
    weights = plan.seeds[0].cloud.weights[: len(mean_study.centres)]
    run, _, _ = load_run(task, plan.cleaning, plan.voxels)
    masker = NiftiSpheresMasker(
        mean_study.centres, radius=RADIUS, mask_img=load64(small.mask_file), allow_overlap=True,
        standardize=None, reports=False,
    )  # fmt: skip
    image = load64(task.header.path)
    raw = masker.fit_transform(image)
    ours = weights @ image.get_fdata()[tuple(plan.voxels.ijk.T)] / weights.sum(axis=1)[:, None]
    np.testing.assert_allclose(ours, raw.T, rtol=1e-12)
    table = confound_table(task.confounds, "^(trans|rot)_")
    cleaned = clean(raw, confounds=table.to_numpy(), detrend=True, standardize=None)
    expected = cleaned.T / np.linalg.norm(cleaned.T, axis=1, keepdims=True)
    np.testing.assert_allclose(seed_series(run, weights)[0], expected, atol=1e-5)


def test_analysis_voxels(job):
    """The mask without voxels near a sphere, by scipy's KDTree, or missing in someone."""
    np.testing.assert_array_equal(job.result.maps["analysis_mask"].get_fdata() > 0, job.inside)


def test_effect_and_t_maps(job):
    """nilearn's SecondLevelModel on z maps that nilearn made."""
    found = {name: image.get_fdata()[job.inside] for name, image in job.result.maps.items()}
    np.testing.assert_allclose(found["effect_reported"], job.effect_size[0], atol=1e-5)
    np.testing.assert_allclose(found["t_reported"], job.stat[0], rtol=1e-4, atol=1e-4)
    drawn = job.effect_size[1:]
    np.testing.assert_allclose(found["effect_mean"], drawn.mean(axis=0), atol=1e-5)
    np.testing.assert_allclose(found["effect_sd"], drawn.std(axis=0, ddof=1), atol=1e-5)
    error = job.effect_size[0] / job.stat[0]
    np.testing.assert_allclose(
        found["placement_to_sampling"], drawn.std(axis=0, ddof=1) / error, rtol=1e-4
    )


def test_one_sample_t(mean_study):
    """scipy.stats.ttest_1samp over the participants, at the reported placement."""
    z = mean_study.z[:, mean_study.inside]
    t = mean_study.result.maps["t_reported"].get_fdata()[mean_study.inside]
    np.testing.assert_allclose(t, stats.ttest_1samp(z[..., 0], 0).statistic, rtol=1e-4, atol=1e-4)
    assert mean_study.result.summary["seeds"][0]["df"] == mean_study.df == 7


def test_classes(job):
    """Classes of all placements: statsmodels' multipletests on p of scipy, or p alone."""
    found = job.result.maps["class_reported"].get_fdata()[job.inside]
    np.testing.assert_array_equal(found, job.classes[0])
    for tail, sign in TAILS.items():
        sizes = (job.classes == sign).sum(axis=1)
        np.testing.assert_array_equal(job.result.similarity[f"n_{tail}"], sizes)
        assert sizes.min() > 0
        share = job.result.maps[f"agreement_{tail}"].get_fdata()[job.inside]
        np.testing.assert_allclose(share, (job.classes[1:] == sign).mean(axis=0), atol=1e-6)


def test_classes_of_the_whole_library_chain(mean_study):
    """nilearn's threshold_stats_img on its own z scores keeps the very voxels."""
    scores = np.zeros(mean_study.inside.shape)
    scores[mean_study.inside] = mean_study.z_score[0]
    kept, _ = threshold_stats_img(
        nib.Nifti1Image(scores, mean_study.small.affine), mean_study.mask,
        alpha=0.05, height_control="fdr", two_sided=True,
    )  # fmt: skip
    found = mean_study.result.maps["class_reported"].get_fdata()
    np.testing.assert_array_equal(np.nan_to_num(found), np.sign(kept.get_fdata()))


def test_similarity(job):
    """Dice is scikit-learn's f1_score; spatial r is scipy's pearsonr."""
    table = job.result.similarity
    for i, row in enumerate(table.itertuples()):
        for tail, sign in TAILS.items():
            expected = f1_score(job.classes[0] == sign, job.classes[i] == sign)
            assert getattr(row, f"dice_{tail}") == pytest.approx(expected, abs=1e-7)
        r = stats.pearsonr(job.effect_size[0], job.effect_size[i]).statistic
        assert row.spatial_r == pytest.approx(r, abs=1e-5)
        rms = root_mean_squared_error(job.effect_size[0], job.effect_size[i])
        assert row.rms_difference == pytest.approx(rms, abs=1e-5)
    assert table["dice_negative"].min() < 1


def test_pairs(job):
    """As `test_similarity`, for all pairs of drawn placements."""
    for row in job.result.table("pairs").itertuples():
        a, b = row.placement_a, row.placement_b
        for tail, sign in TAILS.items():
            expected = f1_score(job.classes[a] == sign, job.classes[b] == sign)
            assert getattr(row, f"dice_{tail}") == pytest.approx(expected, abs=1e-7)
        r = stats.pearsonr(job.effect_size[a], job.effect_size[b]).statistic
        assert row.spatial_r == pytest.approx(r, abs=1e-5)


def test_chance_corrected_agreement(job):
    """Fleiss' kappa by statsmodels; AC1 by its formula on the same counts of ratings."""
    counts, _ = aggregate_raters(job.classes[1:].T)
    assert counts.shape[1] == 3
    summary = job.result.summary["seeds"][0]
    assert summary["fleiss_kappa"] == pytest.approx(fleiss_kappa(counts), rel=1e-5)
    raters = len(job.classes) - 1
    agreement = np.mean((counts * (counts - 1)).sum(axis=1) / (raters * (raters - 1)))
    shares = counts.mean(axis=0) / raters
    chance = np.sum(shares * (1 - shares)) / 2
    assert summary["stability"] == pytest.approx((agreement - chance) / (1 - chance), rel=1e-5)


def test_region_effects(job):
    """nilearn's NiftiLabelsMasker averages its own group effect over the labels."""
    effect = np.zeros(job.inside.shape)
    effect[job.inside] = job.effect_size[0]
    masker = NiftiLabelsMasker(
        job.small.regions_file, mask_img=job.mask, standardize=None, reports=False
    )
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", ".*labels were removed.*")  # one lies outside the mask
        means = masker.fit_transform(nib.Nifti1Image(effect[..., None], job.small.affine))
    present = job.result.regions[job.result.regions["n_voxels"] > 0]
    np.testing.assert_allclose(present["reported_effect"], np.ravel(means), atol=1e-5)


def test_worked_agreement_of_two_class_maps():
    """100 records, two abstractors, three categories: AC1 0.8493305, p_a 0.89.

    Public data set of Gwet's work, 0.8493305 as printed by the R package for it; here the
    categories are the classes of two maps.
    """
    table = np.array([[13, 0, 0], [0, 20, 7], [0, 4, 56]])
    first, second = (index.repeat(table.ravel()) - 1 for index in np.indices((3, 3)).reshape(2, -1))
    classes = np.array([first, second], dtype=np.int8)
    assert np.mean(first == second) == pytest.approx(0.89)
    assert gwet_ac1(class_counts(classes)) == pytest.approx(0.8493305, abs=5e-8)


@pytest.mark.parametrize(("n_volumes", "t_r", "removed"), [(60, 2.0, 3), (73, 3.0, 5)])
def test_low_end_of_the_band(n_volumes, t_r, removed):
    """nilearn.signal.clean with its cosine filter, its high_pass between two cosines."""
    high_pass = (removed + 0.5) / (2 * n_volumes * t_r)
    noise = np.random.default_rng(n_volumes).standard_normal((n_volumes, 5))
    expected = clean(
        noise, detrend=False, standardize=None, filter="cosine", high_pass=high_pass, t_r=t_r
    )
    basis = nuisance_basis(n_volumes, band=(high_pass, 1.0), repetition_time=t_r)
    assert basis.shape[1] == removed + 1
    residual = noise - basis @ (basis.T @ noise)
    np.testing.assert_allclose(residual, expected - expected.mean(axis=0), atol=1e-9)


def demo_run(row, mask, at, radius) -> tuple[np.ndarray, int, int]:
    """z map of one demo run cleaned by nilearn as its study file says, residual df, censored."""
    table = confound_table(DEMO / row.confounds, "^(trans_.|rot_.|csf$)")
    motion = confound_table(DEMO / row.confounds, "^framewise_displacement$").iloc[:, 0]
    image = load64(DEMO / row.bold)
    n_volumes, t_r = len(table), 3.0
    frequency = np.arange(n_volumes) / (2 * n_volumes * t_r)
    cosines = fft.idct(np.eye(n_volumes), axis=0, norm="ortho")
    outside = (frequency < 0.008) | (frequency > 0.1)
    outside[0] = False
    line = np.arange(n_volumes)[:, None]
    columns = np.column_stack([line, table, cosines[:, outside]])
    censored = (motion > 0.5) | (motion.shift(1, fill_value=0) > 0.5)
    kept = np.flatnonzero(~censored)
    z = correlate(
        image, mask, [at], radius, detrend=False, confounds=columns, sample_mask=kept
    )[..., 0]  # fmt: skip
    rank = np.linalg.matrix_rank(np.column_stack([np.ones(n_volumes), columns])[kept])
    return z, len(kept) - rank, int(censored.sum())


def test_band_confounds_and_censoring(tmp_path):
    """One demo participant with two runs, cleaned by nilearn.signal.clean: scipy's cosines as
    confounds, censored volumes cut out.
    """
    study = Study.load(DEMO / "study.toml")
    content = study.model_dump(mode="json", exclude_none=True)
    table = pd.read_csv(DEMO / "runs.tsv", sep="\t", dtype=str)
    rows = table[table["participant_id"] == "sub-03"]
    assert len(rows) == 2
    for column in ("bold", "confounds"):
        rows = rows.assign(**{column: [str(DEMO / name) for name in rows[column]]})
    rows.to_csv(tmp_path / "runs.tsv", sep="\t", index=False)
    content["data"] |= {"runs": str(tmp_path / "runs.tsv")}
    content["placements"] |= {"count": 3}
    content.pop("steadier", None)  # needs two participants
    result = audit(Study.from_mapping(content, DEMO))
    mask = load64(DEMO / "mask.nii.gz")
    at, radius = study.seed[0].at, study.seed[0].radius
    maps, freedom, censored = zip(
        *(demo_run(row, mask, at, radius) for row in rows.itertuples()), strict=True
    )
    expected = np.average(maps, axis=0, weights=np.array(freedom) - 3)
    participant = result.table("participants").iloc[0]
    assert participant["residual_df"] == sum(freedom)
    assert participant["n_censored"] == sum(censored) > 0
    inside = result.maps["analysis_mask"].get_fdata() > 0
    found = result.maps["effect_reported"].get_fdata()[inside]
    np.testing.assert_allclose(found, expected[inside], atol=1e-5)
