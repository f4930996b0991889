"""Control seeds and smoothness of residuals, against plain computation and planted noise."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import ndimage
from sklearn.metrics import f1_score

from seedaudit.consensus.floor import control_similarity, fold_residuals, residual_smoothness
from seedaudit.inference.group import ThresholdRule, classifier
from seedaudit.space.geometry import FWHM_PER_SD
from seedaudit.sweep.correlate import ZBlock
from seedaudit.sweep.moments import Chosen, Moments, merged
from tests.whole_states import group_maps, some

ONE = np.ones(1)


def moments_of(z, design):
    """One Moments for each half of the participants."""
    n, n_placements, n_voxels = z.shape
    parts = []
    for rows in np.array_split(np.arange(n), 2):
        part = Moments.empty(design.shape[1], n_placements, n_voxels)
        for s in rows:
            block = ZBlock(slice(0, n_voxels), z[s].astype(np.float32), np.ones(n_voxels, bool))
            part.add(design[s], block)
        parts.append(part)
    return parts


def test_controls_are_compared_outside_their_own_sphere():
    rng = np.random.default_rng(0)
    truth = np.stack([rng.standard_normal(80), rng.standard_normal(80), np.zeros(80)])
    truth[1:, :8] = 5.0  # their own spheres
    z = truth + 0.8 * rng.standard_normal((10, 3, 80))
    ijk = np.stack([np.arange(80), np.zeros(80), np.zeros(80)], axis=1).astype(np.int32)
    classes_of = classifier(ThresholdRule("p", 0.05), ijk, (80, 1, 1))
    folds = moments_of(z, np.ones((10, 1)))
    reported = group_maps(some(merged(folds), slice(0, 1)), ONE, 10, classes_of)
    keep = np.ones((2, 80), bool)
    keep[:, :8] = False
    controls = [Chosen(fold, np.array([1, 2])) for fold in folds]
    found = control_similarity(
        controls, np.ones(80, bool), ONE, 10, reported, keep, classes_of, workers=2
    )
    mean = z.mean(axis=0)
    t = mean / (z.std(axis=0, ddof=1) / np.sqrt(10))
    classes = np.where(np.abs(t) >= 2.2621571627, np.sign(t), 0)[:, 8:]  # t table, df 9
    for c in (0, 1):
        r = np.corrcoef(mean[0, 8:], mean[1 + c, 8:])[0, 1]
        assert found["spatial_r"][c] == pytest.approx(r, abs=1e-5)
        for tail, sign in (("positive", 1), ("negative", -1)):
            expected = f1_score(classes[0] == sign, classes[1 + c] == sign)
            assert found[f"dice_{tail}"][c] == pytest.approx(expected)
            assert found[f"n_{tail}"][c] == (classes[1 + c] == sign).sum()


@pytest.mark.parametrize("design", ["mean", "arms"])
def test_smoothness_of_residuals_is_that_of_the_noise(design):
    """White noise filtered with SD 1.5 voxels, under a rough map of effects: FWHM 3.53 voxels.

    scipy's exact lag-1 correlation at SD 1.5 is 0.894839, where the formula holds.
    """
    rng = np.random.default_rng(1)
    shape, edges = (17, 20, 15), np.array([2.0, 2.5, 3.0])
    noise = ndimage.gaussian_filter(rng.standard_normal((24, *shape)), (0, 1.5, 1.5, 1.5),
                                    mode="wrap")  # fmt: skip
    mask = rng.random(shape) < 0.8
    ijk = np.argwhere(mask)
    effects = 3 * rng.standard_normal(len(ijk))
    x = np.ones((24, 1))
    if design == "arms":
        x = np.column_stack([np.ones(24), np.arange(24) % 2])
    z = 5 * noise[:, mask][:, None] + (x.sum(axis=1)[:, None] * effects)[:, None]
    residuals = fold_residuals(moments_of(z, x), np.ones(len(ijk), bool))
    assert residuals.shape == (2 * x.shape[1], len(ijk))
    # X'(z - Xb) over all folds is 0: that is what makes b the estimate
    np.testing.assert_allclose(residuals.reshape(2, -1, len(ijk)).sum(axis=0), 0, atol=1e-4)
    expected = 1.5 * FWHM_PER_SD * np.exp(np.log(edges).mean())
    assert residual_smoothness(residuals, ijk, shape, edges) == pytest.approx(expected, rel=0.1)
