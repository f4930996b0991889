"""The synthetic study holds what its truth file says, seen with other libraries than its own."""

from __future__ import annotations

import hashlib
import json
import tomllib
from dataclasses import asdict
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
import pandas as pd
import pytest
from nilearn.glm.first_level import glover_hrf
from nilearn.maskers import NiftiLabelsMasker, NiftiMasker, NiftiSpheresMasker

from seedaudit.errors import StudyError
from seedaudit.synth import DEMO, SynthSettings, synth_study
from seedaudit.synth.atlas import (
    AMPLITUDES,
    NAMES,
    build_brain,
    coupling,
    draw_warps,
    network_at,
    network_loads,
)
from seedaudit.synth.signals import (
    MOTION,
    SmoothNoise,
    haemodynamic_response,
    latent_series,
    simulate_run,
)
from seedaudit.synth.truth import border_distance, expected_correlations

TINY = SynthSettings(
    participants=4, voxel_size=6.0, volumes=120, noise=0.5, coupling_sd=0.0, random_state=7
)
MINUTE = SynthSettings(participants=4, voxel_size=8.0, volumes=20, random_state=3)
DEMO_FOLDER = Path(__file__).parent.parent / "demo_data"
POINTS = ("reported", "inside", "across")


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return synth_study(tmp_path_factory.mktemp("synth") / "tiny", TINY).parent


@pytest.fixture(scope="module")
def truth(study: Path) -> dict:
    return json.loads((study / "truth.json").read_text())


def load_image(path: Path) -> Any:
    return nib.load(path)


def read_tsv(path: Path) -> pd.DataFrame:
    return pd.read_csv(path, sep="\t", na_values=["n/a"], keep_default_na=False)


def seed_maps(study: Path, truth: dict, *, clean: bool) -> tuple[np.ndarray, np.ndarray]:
    """Mean Fisher z over runs, points by regions and points by voxels, by nilearn alone."""
    by_region, by_voxel = [], []
    for row in read_tsv(study / "runs.tsv").itertuples():
        table = read_tsv(study / row.confounds).fillna(0)
        confounds = table[[*MOTION, "csf"]] if clean else None
        options: dict = {"t_r": TINY.repetition_time, "standardize": "zscore_sample"}
        if clean:
            options["detrend"] = True
        bold = load_image(study / row.bold)
        mask = study / "mask.nii.gz"
        spheres = NiftiSpheresMasker(
            [truth["points"][point]["at"] for point in POINTS],
            radius=6,
            mask_img=mask,
            allow_overlap=True,
            **options,
        ).fit_transform(bold, confounds=confounds)
        regions = NiftiLabelsMasker(study / "networks_dseg.nii.gz", **options).fit_transform(
            bold, confounds=confounds
        )
        voxels = NiftiMasker(mask, **options).fit_transform(bold, confounds=confounds)
        n = len(spheres) - 1
        by_region.append(np.arctanh(spheres.T @ regions / n))
        by_voxel.append(np.arctanh(np.clip(spheres.T @ voxels / n, -0.999, 0.999)))
    return np.mean(by_region, axis=0), np.mean(by_voxel, axis=0)


@pytest.fixture(scope="module")
def cleaned(study: Path, truth: dict) -> tuple[np.ndarray, np.ndarray]:
    return seed_maps(study, truth, clean=True)


@pytest.mark.parametrize("point", POINTS)
def test_seed_correlations_have_the_planted_signs(
    cleaned: tuple[np.ndarray, np.ndarray], truth: dict, point: str
) -> None:
    found = cleaned[0][POINTS.index(point)]
    expected = truth["points"][point]["expected"]
    strong = [name for name in NAMES if abs(expected[name]["r"]) >= 0.3]
    assert len(strong) >= 4
    for name in strong:
        assert np.sign(found[NAMES.index(name)]) == expected[name]["sign"], name


def test_crossing_the_border_changes_the_map(cleaned: tuple[np.ndarray, np.ndarray]) -> None:
    similarity = np.corrcoef(cleaned[1])
    reported, inside, across = range(3)
    assert similarity[reported, inside] > 0.7
    assert similarity[inside, across] < 0.4
    dorsal, visual = NAMES.index("attention-dorsal"), NAMES.index("visual-medial")
    assert cleaned[0][inside, dorsal] < -0.2 < 0.2 < cleaned[0][across, dorsal]
    # The reported seed is tied to the neighbour only because its sphere reaches over.
    assert cleaned[0][reported, visual] > cleaned[0][inside, visual] + 0.15


def test_removing_confounds_matters(
    study: Path, truth: dict, cleaned: tuple[np.ndarray, np.ndarray]
) -> None:
    raw = seed_maps(study, truth, clean=False)[1]
    inside = POINTS.index("inside")
    assert raw[inside].mean() > cleaned[1][inside].mean() + 0.15
    assert abs(cleaned[1][inside].mean()) < 0.1


def test_motion_drift_and_nuisance_are_all_that_leaks() -> None:
    brain = build_brain(8.0)
    stored, table = simulate_run(
        np.random.default_rng(1),
        brain,
        np.zeros((len(brain.voxels), len(NAMES)), dtype=np.float32),
        coupling("rested"),
        SynthSettings(volumes=60, noise=0.0, quantum=0.1),
    )
    series = stored[tuple(brain.voxels.ijk.T)].T * 0.1
    line = np.arange(60.0)
    model = np.column_stack([np.ones(60), line, table[[*MOTION, "global_signal"]]])
    residual = series - model @ np.linalg.lstsq(model, series, rcond=None)[0]
    # A rounding error is uniform over one step: SD step / sqrt(12).
    assert residual.std() < 1.2 * 0.1 / np.sqrt(12)
    moved = np.linalg.norm(brain.motion[:, :3], axis=1)
    edge = moved > np.quantile(moved, 0.9)
    explained = np.abs(brain.motion @ table[list(MOTION)].to_numpy().T).mean(axis=1)
    assert explained[edge].mean() > 4 * explained[~edge].mean()


def test_the_same_settings_give_the_same_bytes(tmp_path: Path) -> None:
    def digests(name: str, settings: SynthSettings) -> dict[str, str]:
        folder = synth_study(tmp_path / name, settings).parent
        return {
            path.relative_to(folder).as_posix(): hashlib.sha256(path.read_bytes()).hexdigest()
            for path in sorted(folder.rglob("*"))
            if path.is_file()
        }

    first = digests("first", MINUTE)
    assert first == digests("second", MINUTE)
    other = digests("other", SynthSettings(**{**asdict(MINUTE), "random_state": 4}))
    assert all(first[name] != other[name] for name in first if name.endswith("_bold.nii.gz"))
    # RFC 1952: byte 3 holds the flags (a file name would set one), bytes 4 to 7 the time stamp.
    for path in (tmp_path / "first").rglob("*.nii.gz"):
        assert path.read_bytes()[3:8] == bytes(5)


def test_images_carry_both_mni_forms(study: Path) -> None:
    mask = load_image(study / "mask.nii.gz")
    outside = np.asarray(mask.dataobj) == 0
    for path in sorted(study.rglob("*.nii.gz")):
        image = load_image(path)
        # NIfTI-1: code 4 is MNI-152, unit codes mm and s.
        assert int(image.header["sform_code"]) == int(image.header["qform_code"]) == 4
        np.testing.assert_allclose(image.get_qform(), image.get_sform(), atol=1e-4)
        np.testing.assert_allclose(image.affine, mask.affine)
        assert image.header.get_xyzt_units() == ("mm", "sec")
        assert np.linalg.det(image.affine[:3, :3]) < 0
        assert not np.asarray(image.dataobj)[outside].any()
    bold = load_image(study / read_tsv(study / "runs.tsv").bold[0])
    assert bold.get_data_dtype() == np.int16
    assert bold.header.get_zooms()[3] == TINY.repetition_time
    assert bold.dataobj.slope == TINY.quantum
    brightness = bold.get_fdata()[..., 0][~outside]
    assert brightness.min() > 0
    low, middle, high = np.quantile(brightness, (0.1, 0.5, 0.99))
    assert low < 820
    assert 800 < middle < 950
    assert high > 1000


def test_stored_steps_scale_back_to_the_signal(tmp_path: Path) -> None:
    fine, coarse = (
        load_image(
            next(
                synth_study(
                    tmp_path / str(quantum), SynthSettings(**{**asdict(MINUTE), "quantum": quantum})
                ).parent.rglob("sub-01*_bold.nii.gz")
            )
        ).get_fdata()
        for quantum in (0.1, 16.0)
    )
    assert 0 < np.abs(fine - coarse).max() <= 8.05


def test_tables_of_the_study(study: Path) -> None:
    runs, people = read_tsv(study / "runs.tsv"), read_tsv(study / "participants.tsv")
    assert runs.participant_id.value_counts().to_dict() == {
        "sub-01": 1,
        "sub-02": 1,
        "sub-03": 2,
        "sub-04": 1,
    }
    assert people.arm.value_counts().to_dict() == {"rested": 2, "restricted": 2}
    claims = read_tsv(study / "claims.tsv")
    columns = ["claim", "seed", "x", "y", "z", "radius", "region", "direction"]
    assert list(claims.columns) == columns
    assert claims.region.dropna().isin(NAMES).all()
    assert list(read_tsv(study / "networks_dseg.tsv").name) == list(NAMES)
    for row in runs.itertuples():
        table = read_tsv(study / row.confounds)
        missing = table.isna()
        late = [name for name in table if name.endswith("_derivative")]
        assert len(late) == 6
        assert missing.iloc[0].sum() == 7
        assert not missing.iloc[1:].any(axis=None)
        assert missing.loc[0, [*late, "framewise_displacement"]].all()
        # Power et al. 2012, as sums written out: 50 mm turns radian into mm.
        for t in (1, 57, len(table) - 1):
            jump = (table.loc[t, list(MOTION)] - table.loc[t - 1, list(MOTION)]).abs()
            total = jump.iloc[:3].sum() + 50 * jump.iloc[3:].sum()
            assert table.framewise_displacement[t] == pytest.approx(total, abs=2e-3)


def test_truth_agrees_with_the_study_file_and_the_label_image(study: Path, truth: dict) -> None:
    seed = tomllib.loads((study / "study.toml").read_text())["seed"][0]
    assert seed["at"] == truth["seed"]["at"]
    assert seed["radius"] == truth["seed"]["radius"]
    assert truth["border"]["distance"] == TINY.border_distance
    assert set(truth["claims"]) == set(read_tsv(study / "claims.tsv").claim)
    at = np.array(truth["seed"]["at"])
    step = np.array(truth["border"]["direction_vector"])
    before, after = (at + (TINY.border_distance + d) * step for d in (-0.01, 0.01))
    assert NAMES[network_at(before) - 1] == truth["border"]["network"]
    assert NAMES[network_at(after) - 1] == truth["border"]["neighbour"]
    labels = load_image(study / "networks_dseg.nii.gz")
    for point in truth["points"].values():
        i, j, k = np.round(np.linalg.inv(labels.affine) @ [*point["at"], 1])[:3].astype(int)
        assert NAMES[int(labels.dataobj[i, j, k]) - 1] == point["network"]
    planted = truth["arm_difference"]["latent_r"]
    assert planted["rested"] > planted["restricted"] + 0.4


def test_participants_have_borders_of_their_own(truth: dict) -> None:
    found = list(truth["border"]["distance_per_participant"].values())
    assert len(set(found)) == len(found)
    assert np.std(found) > 0.5
    warps = draw_warps(np.random.default_rng(5), 40, 2.0)
    at = np.array([-8.0, -57.0, 28.0])
    moves = np.array([warp(at[None])[0] - at for warp in warps])
    np.testing.assert_allclose(moves.mean(axis=0), 0, atol=1e-9)
    assert 1.0 < moves.std() < 3.0
    # To first order the border moves against the displacement of the point that looks for it.
    shifts = [border_distance(at, warp) for warp in warps]
    assert np.corrcoef(moves[:, 1], np.array(shifts, dtype=float))[0, 1] > 0.8
    centres = build_brain(8.0).voxels.xyz
    first, second = (network_loads(centres, 8.0, warp) for warp in warps[:2])
    assert np.abs(first - second).max() > 0.3
    assert first.sum(axis=1).max() <= 1


def test_expected_correlations_match_a_simulation() -> None:
    rng = np.random.default_rng(2)
    at = np.array([-8.0, -58.0, 28.0])
    warps = draw_warps(rng, 3, 2.0)
    latent = rng.multivariate_normal(np.zeros(len(NAMES)), coupling("rested"), 40_000)
    points = rng.uniform(-6, 6, (40_000, 3))
    points = points[np.linalg.norm(points, axis=1) <= 6] + at
    signals = np.column_stack([np.zeros(len(latent)), latent * AMPLITUDES])
    owners = np.concatenate([network_at(warp(points)) for warp in warps])
    seed = signals @ np.bincount(owners, minlength=signals.shape[1])
    simulated = [np.corrcoef(seed, column)[0, 1] for column in latent.T]
    expected = expected_correlations(at, 6.0, warps, coupling("rested"))
    np.testing.assert_allclose(simulated, expected, atol=0.03)


@pytest.mark.parametrize("arm", ["rested", "restricted"])
def test_latent_series_have_the_planted_correlations(arm: str) -> None:
    series = latent_series(np.random.default_rng(4), coupling(arm), 20_000, 2.0)
    np.testing.assert_allclose(np.corrcoef(series.T), coupling(arm), atol=0.05)
    np.testing.assert_allclose(series.var(axis=0), 1, atol=0.06)
    power = np.abs(np.fft.rfft(series, axis=0)) ** 2
    frequency = np.fft.rfftfreq(len(series), 2.0)
    assert power[frequency < 0.1].sum() > 0.9 * power.sum()


def test_haemodynamic_response_is_glovers() -> None:
    times = np.arange(0, 32, 0.1)
    response = haemodynamic_response(times)
    # Glover (1999), from memory: the first term peaks at 6 x 0.9 s, an undershoot follows.
    assert times[response.argmax()] == pytest.approx(5.4, abs=0.4)
    assert -0.4 < response.min() < -0.1
    assert 10 < times[response.argmin()] < 14
    # nilearn's response has the same form with gamma densities of slightly other shape.
    other = glover_hrf(t_r=0.1, oversampling=1, time_length=32.0)
    assert np.corrcoef(response, other[: len(response)])[0, 1] > 0.97


def test_noise_is_smooth_in_space_and_remembers_in_time() -> None:
    brain = build_brain(8.0)
    noise = SmoothNoise(np.random.default_rng(6), brain, fwhm=8.0 * np.sqrt(8 * np.log(2)))
    values = np.stack([noise.next() for _ in range(400)])
    assert values.std() == pytest.approx(1, abs=0.02)
    assert (values[1:] * values[:-1]).mean() == pytest.approx(0.35, abs=0.02)
    # A sampled Gaussian kernel of s = 1 voxel: CHECKS, item 12b (scipy.ndimage).
    for lag, expected in ((1, 0.778640), (2, 0.367879)):
        beside = brain.voxels.rows_at(brain.voxels.ijk + np.array([0, lag, 0]))
        both = beside >= 0
        product = (values[:, both] * values[:, beside[both]]).mean()
        assert product == pytest.approx(expected, abs=0.02)


def test_settings_out_of_range_are_named_at_once() -> None:
    with pytest.raises(StudyError) as caught:
        SynthSettings(participants=1, voxel_size=50)
    assert [problem.where for problem in caught.value.problems] == ["participants", "voxel_size"]


def test_a_folder_with_files_is_left_alone(tmp_path: Path) -> None:
    (tmp_path / "notes.txt").write_text("mine")
    with pytest.raises(StudyError, match="not empty"):
        synth_study(tmp_path, MINUTE)
    assert [path.name for path in tmp_path.iterdir()] == ["notes.txt"]


@pytest.mark.skipif(not DEMO_FOLDER.is_dir(), reason="the package is installed without the demo")
def test_the_demo_is_the_demo_setting_and_small() -> None:
    recorded = json.loads((DEMO_FOLDER / "truth.json").read_text())
    assert recorded["settings"] == asdict(DEMO)
    assert sum(path.stat().st_size for path in DEMO_FOLDER.rglob("*.gz")) < 10e6
