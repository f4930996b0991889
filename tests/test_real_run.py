"""A single-participant audit of one open real run, in its own space.

The run is no part of the repository. It stands beside the checkout, in shared/data/real_run: one
run of OpenfMRI data set ds000205 with a label image of 116 labels and no names, as carried in the
test data of the PyPI source package nireports (Apache-2.0). It is data of a real person, openly
shared; it is read where it stands, and nothing but the label image goes into a temporary folder,
as its table has to stand beside it.
"""

from __future__ import annotations

import shutil
from pathlib import Path

import nibabel as nib
import numpy as np
import pandas as pd
import pytest
from nilearn.maskers import NiftiSpheresMasker
from nilearn.signal import clean
from scipy import stats
from scipy.spatial import KDTree
from statsmodels.tsa.stattools import acf

from seedaudit import Study, audit, load_audit

FOLDER = Path(__file__).parent.parent.parent / "shared" / "data" / "real_run"
N_LABELS = 116
RADIUS, WITHIN, COUNT, DRIFT = 7.0, 8.0, 40, 2
WANTED = (0.0, -20.0, 30.0)  # mm, scanner space; the seed is the nearest labelled voxel

pytestmark = [
    pytest.mark.real_data,
    pytest.mark.skipif(
        not (FOLDER / "bold.nii.gz").is_file(),
        reason="the open real run is absent: shared/data/real_run beside the checkout",
    ),
]


@pytest.fixture(scope="module")
def labels(tmp_path_factory) -> Path:
    """The label image with the table it lacks, under invented names."""
    path = tmp_path_factory.mktemp("labels") / "labels.nii.gz"
    shutil.copy(FOLDER / "labels.nii.gz", path)
    index = np.unique(np.asarray(nib.Nifti1Image.from_filename(path).dataobj)).astype(int)[1:]
    assert len(index) == N_LABELS
    names = [f"label {number}" for number in index]
    table = pd.DataFrame({"index": index, "name": names})
    table.to_csv(path.with_name("labels.tsv"), sep="\t", index=False)
    return path


@pytest.fixture(scope="module")
def seed(labels) -> list[float]:
    image = nib.Nifti1Image.from_filename(labels)
    brain = nib.affines.apply_affine(image.affine, np.argwhere(image.get_fdata() > 0))
    return brain[KDTree(brain).query(WANTED)[1]].round(2).tolist()


def run(labels, seed, **placements):
    content = {
        "title": "One real run",
        "data": {"runs": [str(FOLDER / "bold.nii.gz")], "regions": str(labels)},
        "cleaning": {"drift": DRIFT},
        "seed": [{"name": "medial", "at": seed, "space": "native", "radius": RADIUS}],
        "placements": {"random_state": 20, **placements},
        "threshold": {"rule": "fdr", "level": 0.05},
    }
    return audit(Study.from_mapping(content), workers=2)


@pytest.fixture(scope="module")
def cloud(labels, seed):
    return run(labels, seed, within=WITHIN, count=COUNT)


@pytest.fixture(scope="module")
def shells(labels, seed):
    return run(labels, seed, draw="shell", distances=[4, 8, 16], count=60)


def test_single_participant(cloud):
    summary = cloud.summary["seeds"][0]
    assert summary["n_participants"] == 1
    assert summary["n_placements_used"] == COUNT
    assert summary["statistic"] == "z"
    assert summary["df"] is None
    # intervals come from resampling participants, and there is only one
    for table, names in [
        (pd.DataFrame([summary]), ("stability_low", "stability_high")),
        (cloud.regions, ("reported_low", "reported_high", "stability_low", "stability_high")),
    ]:
        assert table[list(names)].isna().all(axis=None)
    assert np.isfinite(summary["stability"])
    assert len(cloud.regions) == N_LABELS
    participant = cloud.table("participants").iloc[0]
    assert participant["n_volumes"] == 82
    assert participant["residual_df"] == 82 - 1 - DRIFT


def test_similarity_falls_with_distance(cloud, shells):
    """In every shell the median is lower than in the one before; rank correlation in the ball."""
    drawn = shells.similarity.iloc[1:]
    median = drawn["spatial_r"].groupby(drawn["distance"].round(6)).median()
    assert median.index.tolist() == [4, 8, 16]
    assert (np.diff(median) < -0.02).all()
    assert median.iloc[0] < 0.98
    drawn = cloud.similarity.iloc[1:]
    found = stats.spearmanr(drawn["distance"], drawn["spatial_r"])
    assert found.statistic < -0.4
    assert found.pvalue < 0.01


def test_scores_of_a_few_pairs(cloud, seed):
    """z sqrt(n_eff - 3) with n_eff = n (1 - ab) / (1 + ab), Bartlett (1946): the sphere mean by
    nilearn, the cleaned series by nilearn.signal.clean, a and b by statsmodels' acf.

    n is the residual degrees of freedom plus 1, as for a correlation after partialling out.
    """
    image = nib.Nifti1Image.from_filename(FOLDER / "bold.nii.gz")
    data = np.asarray(image.dataobj, dtype=np.float64)
    image = nib.Nifti1Image(data, image.affine)
    scores = cloud.maps["t_reported"].get_fdata()
    effect = cloud.maps["effect_reported"].get_fdata()
    inside = np.argwhere(cloud.maps["analysis_mask"].get_fdata() > 0)
    assert cloud.placements.loc[0, "coverage"] == 1  # so nilearn needs no mask
    masker = NiftiSpheresMasker([seed], radius=RADIUS, standardize=None, reports=False)
    sphere = masker.fit_transform(image)
    chosen = inside[np.random.default_rng(20).choice(len(inside), 40, replace=False)]
    # the strongest voxel of each sign too
    strength = effect[tuple(inside.T)]
    chosen = np.vstack([chosen, inside[[strength.argmax(), strength.argmin()]]])
    n_volumes = data.shape[-1]
    time = np.linspace(-1, 1, n_volumes)
    drift = np.column_stack([time, time**2])

    def cleaned(series):
        return clean(series, detrend=False, confounds=drift, standardize="zscore_sample")

    series = cleaned(data[tuple(chosen.T)].T)
    (reference,) = cleaned(sphere).T
    a = acf(reference, nlags=1)[1]
    for voxel, y in zip(chosen, series.T, strict=True):
        z = np.arctanh(stats.pearsonr(reference, y).statistic)
        ab = a * acf(y, nlags=1)[1]
        n_eff = (n_volumes - DRIFT) * (1 - ab) / (1 + ab)
        assert effect[tuple(voxel)] == pytest.approx(z, abs=1e-5)
        assert scores[tuple(voxel)] == pytest.approx(z * np.sqrt(n_eff - 3), rel=1e-4, abs=1e-4)


def test_result_folder(cloud, tmp_path):
    """The folder is written with its figure, and read back; nothing in it says where it was."""
    folder = cloud.save(tmp_path / "audit")
    for name in ("figure.pdf", "figure.svg", "figure.png", "methods.md"):
        assert (folder / name).stat().st_size > 1000
    pd.testing.assert_frame_equal(load_audit(folder).regions, cloud.regions)
    for path in folder.rglob("*"):
        if path.suffix in (".json", ".tsv", ".md", ".svg"):
            assert str(FOLDER.parent) not in path.read_text(encoding="utf-8")
