"""The reference, held to libraries and to published values.

Without this the naive implementation would be only a second opinion of the same authors. Each check
names its source; CHECKS is the project's list of check values.
"""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as sm
from nibabel.affines import apply_affine
from scipy import stats
from scipy.spatial.distance import cdist
from scipy.spatial.distance import dice as scipy_dice
from statsmodels.stats.inter_rater import fleiss_kappa as statsmodels_fleiss

from tests import reference_consensus as second
from tests import reference_maps as first
from tests.reference import agreement_stage, reference_audit, rows_of
from tests.small_study import SmallStudy, write_small_study

NAN = float("nan")
SHORT_COUNT = 5  # placements kept where a test needs a whole reference run but not its size


def short(study: SmallStudy) -> dict[str, object]:
    """Give the arguments of the reference with fewer placements, to keep the tests quick."""
    return {**study.reference_arguments, "placements": study.placements[:SHORT_COUNT]}


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> SmallStudy:
    return write_small_study(tmp_path_factory.mktemp("plain"))


@pytest.fixture(scope="module")
def audit(study: SmallStudy) -> dict:
    return reference_audit(**short(study), densities=[0.05, 0.2], effect_cuts=[0.2])


@pytest.mark.parametrize(
    ("edges", "offset", "radius", "count"),
    [
        # Sphere counts, brute force and OEIS A117609 (CHECKS 9b, 9c)
        ((2, 2, 2), (0, 0, 0), 6, 123),
        ((2, 2, 2), (1, 0, 0), 6, 110),
        ((2, 2, 2), (1, 1, 0), 6, 112),
        ((2, 2, 2), (1, 1, 1), 6, 136),
        ((2, 2, 2), (0.5, 0, 0), 6, 106),
        ((3, 3, 4), (0, 0, 0), 6, 31),
        ((3.4375, 3.4375, 4), (0, 0, 0), 8, 49),
        ((4, 4, 4), (0, 0, 0), 3, 1),
    ],
)
def test_sphere_counts(edges, offset, radius, count):
    affine = np.diag([*edges, 1.0])
    voxels = first.voxel_list(np.ones((13, 14, 12), dtype=bool))
    centre = first.world(affine, (6, 6, 6)) + offset
    assert len(first.ball_rows(voxels, affine, [*centre, radius], radius)) == count


def test_tiny_sphere_holds_its_voxel_and_margin_widens():
    affine = np.diag([3.0, 4.0, 5.0, 1.0])
    voxels = first.voxel_list(np.ones((5, 6, 4), dtype=bool))
    place = (*(first.world(affine, (2, 3, 1)) + np.array([1.2, 1.8, 2.3])), 0.5)
    assert [voxels[r] for r in first.ball_rows(voxels, affine, place, 0.5)] == [(2, 3, 1)]
    assert first.largest_edge(affine) == 5.0
    on_voxel = (*first.world(affine, (2, 3, 1)), 1.0)
    # Within 5 mm of a voxel of 3 x 4 x 5 mm: itself, both neighbours along each axis, and the
    # four diagonal ones in the plane of the 3 and 4 mm axes, 5 mm away exactly (by hand).
    assert first.excluded_voxels(voxels, affine, [on_voxel], 4.0).sum() == 11


@pytest.mark.filterwarnings("ignore:The design matrix is rank-deficient")
def test_residuals_and_r_match_statsmodels_and_scipy():
    rng = np.random.default_rng(3)
    nuisance = np.column_stack([rng.standard_normal((30, 3)), 1e4 + rng.standard_normal(30)])
    nuisance = np.column_stack([nuisance, nuisance[:, 0] - 2 * nuisance[:, 1]])  # rank 4
    x, y = rng.standard_normal((2, 30)) + 500.0
    exog = sm.add_constant(nuisance)
    fitted = [sm.OLS(series, exog).fit() for series in (x, y)]
    columns = first.with_intercept(nuisance)
    left = [first.residuals(series, columns) for series in (x, y)]
    for mine, theirs in zip(left, fitted, strict=True):
        np.testing.assert_allclose(mine, theirs.resid, atol=1e-8)
    assert first.residual_df(nuisance) == fitted[0].df_resid == 25
    assert first.correlation(*left) == pytest.approx(stats.pearsonr(*left).statistic, abs=1e-12)


def test_fisher_z_table_and_clip():
    # Fisher's table; exact forms ln 2 and ln 3 (CHECKS 1a)
    assert first.fisher_z(0.6) == pytest.approx(np.log(2), abs=1e-12)
    assert first.fisher_z(0.8) == pytest.approx(np.log(3), abs=1e-12)
    assert first.fisher_z(-1.0) == -first.fisher_z(1.0) == pytest.approx(np.arctanh(-1 + 1e-7))


def test_lag_one_and_effective_n():
    # NIST StRD NumAcc1 and NumAcc2, certified lag-1 autocorrelations (CHECKS 14c, from memory)
    accurate = np.array([10000001.0, 10000003.0, 10000002.0])
    assert first.lag_one(accurate - accurate.mean()) == pytest.approx(-0.5, abs=1e-9)
    wave = np.array([1.2] + [1.1, 1.3] * 500)
    assert first.lag_one(wave - wave.mean()) == pytest.approx(-0.999, abs=1e-9)
    # Effective n at n = 200 (Quenouille 1948; CHECKS 11)
    for a, b, n_eff in [(0.3, 0.3, 166.9725), (0.7, 0.4, 112.5), (0.5, -0.5, 333.3333)]:
        assert first.effective_n(200, a, b) == pytest.approx(n_eff, abs=1e-4)


def test_single_participant_score_matches_simulation():
    """sd(z) of AR(1) pairs, a = .5, b = .3, T = 200: 0.08227 simulated (CHECKS 11; 3 %)."""
    sd = first.combined_sd([first.effective_n(200, 0.5, 0.3)], [197.0])
    assert sd == pytest.approx(0.08227, rel=0.03)
    # Two equal runs halve the variance; weights pull the mean (by hand).
    assert first.combined_sd([103.0, 103.0], [7.0, 7.0]) == pytest.approx(0.1 / np.sqrt(2))
    assert first.combine_runs([0.2, 0.5], [10.0, 20.0]) == pytest.approx(0.4)
    assert first.combined_sd([103.0, 103.0], [1.0, 3.0]) == pytest.approx(0.1 * np.sqrt(10) / 4)
    assert np.isnan(first.combined_sd([2.5], [7.0]))


def test_run_maps_leave_missing_voxels_out_of_the_sphere():
    rng = np.random.default_rng(5)
    data = rng.standard_normal((4, 1, 1, 25))
    data[1] = 7.0
    nuisance = rng.standard_normal((25, 2))
    run = first.Run(data, np.eye(4), nuisance)
    voxels = first.voxel_list(np.ones((4, 1, 1), dtype=bool))
    missing = first.missing_voxels([run], voxels)
    assert missing.tolist() == [False, True, False, False]
    z, _ = first.run_maps(run, voxels, [[0, 1, 2], [1]], missing)
    exog = sm.add_constant(nuisance)
    mean = sm.OLS((data[0, 0, 0] + data[2, 0, 0]) / 2, exog).fit().resid
    other = sm.OLS(data[3, 0, 0], exog).fit().resid
    # Partial correlation as correlation of residuals: scipy pearsonr on statsmodels residuals
    assert z[0, 3] == pytest.approx(np.arctanh(stats.pearsonr(mean, other).statistic), abs=1e-12)
    assert np.isnan(z[0, 1])
    assert np.isnan(z[1]).all()


def test_missing_in_one_run_is_missing():
    rng = np.random.default_rng(6)
    runs = [
        first.Run(rng.standard_normal((5, 1, 1, 12)), np.eye(4), np.empty((12, 0))) for _ in "ab"
    ]
    runs[0].data[1] = 3.0
    runs[1].data[2] = 0.0
    runs[1].data[3, 0, 0, 4] = np.inf
    missing = first.missing_voxels(runs, first.voxel_list(np.ones((5, 1, 1), dtype=bool)))
    assert missing.tolist() == [False, True, True, True, False]


def test_nuisance_columns():
    """Cosine columns are orthogonal to each other and to the mean (DCT-II, common practice)."""
    columns = first.cosine_columns(50, 2.0, (0.02, 0.1))
    # j / 200 Hz: below .02 are j = 1..3, above .1 are j = 21..49 (by hand)
    assert columns.shape == (50, 3 + 29)
    np.testing.assert_allclose(columns.T @ columns, 25 * np.eye(32), atol=1e-9)
    np.testing.assert_allclose(columns.sum(axis=0), 0, atol=1e-9)
    assert first.spike_columns(np.array([False, True, False, True])).tolist() == [
        [0, 0],
        [1, 0],
        [0, 0],
        [0, 1],
    ]
    assert np.linalg.matrix_rank(first.with_intercept(first.polynomial_columns(9, 3))) == 4


def test_contrast_matches_statsmodels():
    rng = np.random.default_rng(7)
    design = np.column_stack([np.ones(9), np.arange(9) % 2, rng.standard_normal(9)])
    y, contrast = rng.standard_normal(9), np.array([0.0, 1.0, -0.5])
    theirs = sm.OLS(y, design).fit().t_test(contrast)
    effect, error, t, df = first.contrast_fit(y, design, contrast)
    np.testing.assert_allclose(
        [effect, error, t], [theirs.effect[0], theirs.sd[0, 0], theirs.tvalue[0, 0]]
    )
    assert df == theirs.df_denom == 6
    assert second.two_sided_p(t, df) == pytest.approx(float(theirs.pvalue), rel=1e-10)


def test_paired_sleep_data():
    """Student's sleep data, paired t = -4.0621, p = .002833 (Student 1908; CHECKS 14f)."""
    one = np.array([0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0, 2.0])
    two = np.array([1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4])
    _, _, t, df = first.contrast_fit(one - two, np.ones((10, 1)), np.ones(1))
    assert t == pytest.approx(-4.0621276834, abs=1e-9)
    assert second.two_sided_p(t, df) == pytest.approx(0.0028328902, abs=1e-9)
    assert second.two_sided_p(1.9599639845, np.inf) == pytest.approx(0.05, abs=1e-10)


def test_maps_of_the_study_match_statsmodels(study, audit):
    """z and t of one voxel from the images on disk, by statsmodels, then by scipy's t test."""
    people, group, voxels = audit["participants"], audit["group"], audit["voxels"]
    row = int(audit["rows"][37])
    sphere = [tuple(voxels[r]) for r in audit["spheres"][2]]
    for person, runs in zip(people, study.runs.values(), strict=True):
        z, weights = [], []
        for data, _, nuisance in runs:
            good = [v for v in sphere if np.isfinite(data[v]).all() and np.ptp(data[v]) > 0]
            exog = sm.add_constant(nuisance)
            fits = [
                sm.OLS(series, exog).fit()
                for series in (np.mean([data[v] for v in good], axis=0), data[tuple(voxels[row])])
            ]
            z.append(np.arctanh(stats.pearsonr(fits[0].resid, fits[1].resid).statistic))
            weights.append(fits[0].df_resid - 3)
        assert person["z"][2, row] == pytest.approx(np.average(z, weights=weights), abs=1e-9)
    theirs = stats.ttest_1samp([person["z"][2, row] for person in people], 0)
    assert group["t"][2, row] == pytest.approx(theirs.statistic, rel=1e-10)
    assert group["df"][2] == theirs.df == len(people) - 1


def test_study_has_structure_in_both_tails(audit):
    classes, agreement = audit["classes"], audit["agreement"]
    assert 300 <= len(audit["rows"]) < len(audit["voxels"]) <= 650
    assert (classes == 1).sum(axis=1).min() > 20
    assert (classes == -1).sum(axis=1).min() > 20
    assert agreement["contested"].any()
    assert {-1, 0, 1} == set(agreement["safe"].tolist())
    assert audit["regions"][7] == {"n_voxels": 0}
    assert audit["participants"][1]["missing"].sum() == 4
    assert (~audit["complete"]).sum() == 4


def test_analysis_voxels_by_distance(study, audit):
    """scipy distances from nibabel's voxel centres to the placements; margin 4.6 mm, radius 5."""
    xyz = apply_affine(study.affine, audit["voxels"])
    distance = cdist(xyz, np.array(study.placements[:SHORT_COUNT])[:, :3]).min(axis=1)
    assert audit["margin"] == pytest.approx(4.6, abs=1e-6)
    expected = np.flatnonzero((distance > 9.6) & audit["complete"])
    assert audit["rows"].tolist() == expected.tolist()
    assert 0 < audit["excluded"].sum() < len(xyz) / 2


def test_reported_placement_is_no_draw_but_counts_in_the_conjunction():
    """Two voxels, three placements, every number by hand."""
    effect = np.array([[0.9, 0.5], [0.1, -0.2], [0.3, -0.4]])
    group = {"effect": effect, "t": 10 * effect, "se": np.array([[0.5, 0.1], [9, 9], [9, 9]])}
    classes = np.array([[1, 1], [0, -1], [1, -1]], dtype=np.int8)
    maps = agreement_stage({"group": group, "rows": [0, 1]}, classes, 0.95)
    assert maps["positive"].tolist() == [0.5, 0.0]
    assert maps["negative"].tolist() == [0.0, 1.0]
    assert maps["safe"].tolist() == [0, -1]
    assert maps["contested"].tolist() == [True, False]
    flipped = agreement_stage({"group": group, "rows": [0, 1]}, -classes, 0.95)
    assert flipped["contested"].tolist() == [True, False]
    assert maps["conjunction"].tolist() == [pytest.approx(1.0), 0.0]
    np.testing.assert_allclose(maps["effect_mean"], [0.2, -0.3])
    np.testing.assert_allclose(maps["placement_to_sampling"], np.sqrt(0.02) / [0.5, 0.1])


def test_reference_follows_its_own_definitions_vectorised(audit):
    """The loops against whole-array numpy, scipy percentiles and statsmodels' kappa."""
    classes, effect, rows = audit["classes"], audit["group"]["effect"], audit["rows"]
    drawn = classes[1:]
    np.testing.assert_allclose(audit["agreement"]["positive"], (drawn == 1).mean(axis=0))
    np.testing.assert_allclose(audit["agreement"]["effect_sd"], effect[1:, rows].std(0, ddof=1))
    ratio = effect[1:, rows].std(0, ddof=1) / audit["group"]["se"][0, rows]
    np.testing.assert_allclose(audit["agreement"]["placement_to_sampling"], ratio)
    t = audit["group"]["t"][:, rows]
    lowest = np.where((t > 0).all(0), t.min(0), np.where((t < 0).all(0), t.max(0), 0))
    np.testing.assert_array_equal(audit["agreement"]["conjunction"], lowest)
    counts = np.stack([(drawn == k).sum(axis=0) for k in (-1, 0, 1)], axis=1)
    assert audit["kappa"] == pytest.approx(statsmodels_fleiss(counts), abs=1e-12)
    for i, one in enumerate(audit["similarity"], start=1):
        assert one["dice_positive"] == pytest.approx(overlap(classes[0] == 1, classes[i] == 1))
        assert one["dice_negative"] == pytest.approx(overlap(classes[0] == -1, classes[i] == -1))
        a, b = effect[0, rows], effect[i, rows]
        assert one["spatial_r"] == pytest.approx(stats.pearsonr(a, b).statistic, abs=1e-12)
        moments = np.cov(a, b, ddof=0)
        lin = 2 * moments[0, 1] / (np.trace(moments) + (a.mean() - b.mean()) ** 2)
        assert one["concordance"] == pytest.approx(lin, abs=1e-12)
    assert len(audit["pairs"]) == SHORT_COUNT * (SHORT_COUNT - 1) // 2
    z = audit["participants"][4]["z"][:, rows]
    np.testing.assert_allclose(audit["participants"][4]["spatial_r"], np.corrcoef(z)[0], atol=1e-12)
    density = audit["sweep"][1]
    magnitude = np.abs(t)
    top = magnitude >= np.sort(magnitude, axis=1)[:, [-round(0.2 * len(rows))]]
    for name, tail in (("positive", top & (t > 0)), ("negative", top & (t < 0))):
        mean = np.nanmean([overlap(tail[0], one) for one in tail[1:]])
        assert density[f"dice_{name}_mean"] == pytest.approx(mean)
        assert density[f"n_{name}"] == tail[0].sum()
    assert density["n_positive"] + density["n_negative"] == round(0.2 * len(rows))


def overlap(a, b):
    """Give one minus scipy's Dice dissimilarity; NaN when both are empty."""
    return 1 - scipy_dice(a, b) if (a | b).any() else NAN


def chance_corrected(classes):
    """Give AC1 of (raters, voxels) classes from the mean category shares (Gwet 2008)."""
    n = len(classes)
    counts = np.stack([(classes == k).sum(axis=0) for k in (-1, 0, 1)])
    agreement = ((counts**2).sum(axis=0) - n).mean() / (n * (n - 1))
    shares = counts.mean(axis=1) / n
    chance = (1 - (shares**2).sum()) / 2
    return (agreement - chance) / (1 - chance)


def test_regions_vectorised(study, audit):
    """Region effect: by linearity the mean of the group effect over the region's voxels."""
    labels = study.labels[tuple(audit["voxels"][audit["rows"]].T)]
    for index in (1, 2, 5):
        region, inside = audit["regions"][index], labels == index
        effects = audit["group"]["effect"][:, audit["rows"][inside]].mean(axis=1)
        assert region["n_voxels"] == inside.sum() > 10
        assert region["reported_effect"] == pytest.approx(effects[0], abs=1e-12)
        assert region["effect_sd"] == pytest.approx(effects[1:].std(ddof=1), abs=1e-12)
        same = np.sign(effects[1:]) == np.sign(effects[0])
        assert region["sign_share"] == pytest.approx(same.mean())
        pairs = [
            (a == b).mean()
            for i, a in enumerate(audit["classes"][1:, inside])
            for b in audit["classes"][i + 2 :, inside]
        ]
        assert region["pairwise_agreement"] == pytest.approx(np.mean(pairs))
        stability = chance_corrected(audit["classes"][1:, inside])
        assert region["stability"] == pytest.approx(stability, abs=1e-12)
        for name, tail in (("positive", 1), ("negative", -1)):
            passing = audit["classes"][:, inside] == tail
            assert region[f"reported_{name}"] == pytest.approx(passing[0].mean())
            values = [overlap(passing[0], one) for one in passing[1:]]
            assert region[f"dice_{name}_undefined"] == np.isnan(values).sum()
            if not np.isnan(values).all():
                assert region[f"dice_{name}_mean"] == pytest.approx(np.nanmean(values))
                assert region[f"dice_{name}_p05"] == pytest.approx(np.nanpercentile(values, 5))


def test_single_participant(study):
    """One person alone: the score is z over the sd of the weighted mean of two runs."""
    runs = study.runs["sub-03"]
    arguments = {**short(study), "participants": [runs], "design": [[1.0]], "contrast": [1.0]}
    arguments["placements"] = study.placements[:2]
    alone = reference_audit(**arguments)
    row = int(alone["rows"][5])
    voxel, sphere = tuple(alone["voxels"][row]), alone["spheres"][1]
    variance, weights, z = [], [], []
    for data, _, nuisance in runs:
        exog = sm.add_constant(nuisance)
        mean = np.mean([data[tuple(alone["voxels"][r])] for r in sphere], axis=0)
        fits = [sm.OLS(series, exog).fit() for series in (mean, data[voxel])]
        # Mean-removed lag-1 autocorrelation: statsmodels acf, same divisor
        a, b = (sm.tsa.acf(fit.resid, nlags=1, fft=False)[1] for fit in fits)
        n = fits[0].df_resid + 1
        variance.append(1 / (n * (1 - a * b) / (1 + a * b) - 3))
        weights.append(fits[0].df_resid - 3)
        z.append(np.arctanh(stats.pearsonr(fits[0].resid, fits[1].resid).statistic))
    sd = np.sqrt(np.dot(np.square(weights), variance)) / np.sum(weights)
    expected = np.average(z, weights=weights) / sd
    assert alone["group"]["t"][1, row] == pytest.approx(expected, rel=1e-8)
    assert np.isinf(alone["group"]["df"]).all()


@pytest.mark.parametrize(
    ("flip", "permute"),
    [((True, False, False), (0, 1, 2)), ((False, True, True), (2, 0, 1))],
)
def test_storage_order_changes_nothing(study, audit, tmp_path, flip, permute):
    """The same world data in another storage order gives the same voxels, maps and regions."""
    other = write_small_study(tmp_path, flip=flip, permute=permute)
    again = reference_audit(**short(other))
    back = np.linalg.inv(study.affine) @ other.affine
    ijk = np.rint(again["voxels"] @ back[:3, :3].T + back[:3, 3]).astype(int)
    order = rows_of(ijk, audit["voxels"])
    here, there = audit["group"], again["group"]
    np.testing.assert_allclose(there["t"][:, order], here["t"], rtol=1e-6, atol=1e-8)
    assert again["ac1"] == pytest.approx(audit["ac1"], abs=1e-12)
    for index, region in audit["regions"].items():
        assert again["regions"][index] == pytest.approx(region, nan_ok=True, abs=1e-9)


def test_two_arm_model(tmp_path):
    study = write_small_study(tmp_path, model="~ arm + age", rule="p", participants=8)
    audit = reference_audit(**{**short(study), "placements": study.placements[:2]})
    classes, regions = audit["classes"], audit["regions"]
    assert regions[2]["reported_effect"] > 0.25
    assert regions[5]["reported_effect"] < -0.25
    assert (classes == 1).any(axis=1).all()
    assert (classes == -1).any(axis=1).all()
