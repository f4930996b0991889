"""Exact properties of the whole audit: what must not change the answer does not."""

from __future__ import annotations

from pathlib import Path

import nibabel as nib
import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from seedaudit.auditing import audit
from seedaudit.results import Audit
from seedaudit.study import Study
from tests.small_study import write_small_study

TABLES = (
    "placements", "similarity", "pairs", "regions", "thresholds", "controls", "ceiling", "decay",
    "tolerance",
)  # fmt: skip
few = settings(
    max_examples=8, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    small = write_small_study(tmp_path_factory.mktemp("plain"), participants=6)
    return small, audit(Study.load(small.study_file), workers=1)


def assert_same(one: Audit, other: Audit, atol: float = 0.0, tables=TABLES) -> None:
    for name in tables:
        pd.testing.assert_frame_equal(
            one.table(name), other.table(name), check_exact=atol == 0, rtol=0, atol=atol or 1e-12
        )
    assert one.summary.keys() == other.summary.keys()


def world_values(image: nib.Nifti1Image) -> np.ndarray:
    """Voxel values sorted by world position, whatever the storage order."""
    closest = nib.as_closest_canonical(image)
    return np.asarray(closest.dataobj)


@few
@given(flip=st.tuples(*[st.booleans()] * 3), permute=st.permutations([0, 1, 2]))
def test_flips_and_axis_permutations_change_no_digit(plain, tmp_path_factory, flip, permute):
    """Trap: a left-right flip. The same world data give the same tables and maps, bit by bit."""
    _, reference = plain
    folder = tmp_path_factory.mktemp("turned")
    small = write_small_study(folder, participants=6, flip=flip, permute=tuple(permute))
    found = audit(Study.load(small.study_file), workers=1)
    assert_same(reference, found, atol=1e-9)
    for name, image in found.maps.items():
        np.testing.assert_allclose(
            world_values(image), world_values(reference.maps[name]), atol=1e-5, err_msg=name
        )
        np.testing.assert_allclose(
            nib.as_closest_canonical(image).affine,
            nib.as_closest_canonical(reference.maps[name]).affine,
            atol=1e-4,
        )


@pytest.mark.parametrize("workers", [2, 3, 5])
def test_more_workers_change_no_digit(plain, workers):
    small, reference = plain
    found = audit(Study.load(small.study_file), workers=workers)
    assert_same(reference, found)
    pd.testing.assert_frame_equal(
        reference.table("participants"), found.table("participants"), check_exact=True
    )
    for name, image in found.maps.items():
        np.testing.assert_array_equal(
            np.asarray(image.dataobj), np.asarray(reference.maps[name].dataobj), err_msg=name
        )


def rewritten(small, folder: Path, change) -> Study:
    """The study with every run changed by `change(number, stored 4-D values)` as float64."""
    for number, path in enumerate(sorted(small.bold_files.values())):
        image = nib.Nifti1Image.from_filename(path)
        new = nib.Nifti1Image(change(number, image.get_fdata()), image.affine, dtype=np.float64)
        new.set_sform(image.affine, 2)
        new.set_qform(image.affine, 4)
        new.header.set_xyzt_units("mm", "sec")
        new.header["pixdim"][4] = image.header["pixdim"][4]
        nib.save(new, path)
    return Study.load(folder / "study.toml")


@few
@given(seed=st.integers(0, 2**31))
def test_intensity_of_a_voxel_does_not_matter(plain, tmp_path_factory, seed):
    """An offset per voxel and a positive scale per run leave every correlation as it is."""
    _, reference = plain
    folder = tmp_path_factory.mktemp("rescaled")
    small = write_small_study(folder, participants=6)
    rng = np.random.default_rng(seed)

    def change(number, values):
        offset = rng.uniform(-10_000, 10_000, values.shape[:3])
        return values * rng.uniform(0.01, 100) + offset[..., None]

    found = audit(rewritten(small, folder, change), workers=2)
    similarity = ["spatial_r", "concordance", "rms_difference", "dice_positive", "dice_negative"]
    np.testing.assert_allclose(
        reference.similarity[similarity], found.similarity[similarity], atol=2e-4
    )
    np.testing.assert_allclose(
        reference.maps["effect_reported"].get_fdata(),
        found.maps["effect_reported"].get_fdata(),
        atol=1e-4,
    )


@few
@given(order=st.permutations(range(7)))
def test_the_order_of_participants_does_not_matter(plain, tmp_path_factory, order):
    """Folds and bootstrap draws follow the table; everything else is the same."""
    _, reference = plain
    folder = tmp_path_factory.mktemp("permuted")
    small = write_small_study(folder, participants=6)
    runs = pd.read_csv(folder / "runs.tsv", sep="\t")
    runs.iloc[list(order)].to_csv(folder / "runs.tsv", sep="\t", index=False)
    found = audit(Study.load(small.study_file), workers=2)
    assert_same(reference, found, atol=1e-6, tables=("placements", "pairs", "controls"))
    resampled = ["reported_low", "reported_high", "stability_low", "stability_high", "ceiling",
                 "ceiling_relative"]  # fmt: skip
    for name in ("similarity", "regions"):
        pd.testing.assert_frame_equal(
            reference.table(name).drop(columns=resampled, errors="ignore"),
            found.table(name).drop(columns=resampled, errors="ignore"),
            rtol=0,
            atol=1e-6,
        )


def test_mean_10000_with_sd_1(tmp_path):
    """Trap: float32 cancellation. Data of mean 10,000 and SD 1 give the answer of centred data."""
    centred, raised = tmp_path / "centred", tmp_path / "raised"
    results = []
    for folder, level in [(centred, 0.0), (raised, 10_000.0)]:
        small = write_small_study(folder, participants=4)

        def change(number, values, level=level):
            spread = values.std(axis=3, keepdims=True)
            mean = values.mean(axis=3, keepdims=True)
            return (values - mean) / np.where(spread > 0, spread, 1) + level

        results.append(audit(rewritten(small, folder, change), workers=2))
    one, other = (result.maps["effect_reported"].get_fdata() for result in results)
    np.testing.assert_allclose(one, other, atol=1e-5)
