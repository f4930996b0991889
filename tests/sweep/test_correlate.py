"""Correlation, cleaning and Fisher z of one run, against brute force and handbook values."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import sparse, stats

from seedaudit.inputs.nuisance import nuisance_basis
from seedaudit.sweep.correlate import (
    LIMIT,
    CleanRun,
    effective_volumes,
    lag_one_autocorrelation,
    residuals,
    seed_series,
    z_blocks,
)

T, V = 60, 37


def make_run(rng, series=None, finite=None, drift=1, confounds=3) -> CleanRun:
    series = rng.standard_normal((T, V)) if series is None else series
    columns = rng.standard_normal((T, confounds)) if confounds else None
    basis = nuisance_basis(T, drift=drift, confounds=columns)
    finite = np.ones(V, bool) if finite is None else finite
    return CleanRun(series.astype(np.float32), basis, finite)


def spheres(rng, n=4) -> sparse.csr_array:
    dense = np.zeros((n, V))
    for row in dense:
        row[rng.choice(V, 5, replace=False)] = 1
    return sparse.csr_array(dense)


def brute_force_z(run: CleanRun, weights) -> np.ndarray:
    """Residualise everything explicitly in float64 and correlate series by series."""
    series = run.series.astype(np.float64)
    fitted = run.basis @ np.linalg.lstsq(run.basis, series, rcond=None)[0]
    clean = series - fitted
    dense = weights.toarray()
    z = np.empty((len(dense), V))
    for i, row in enumerate(dense):
        seed = clean[:, row > 0].mean(axis=1)
        for v in range(V):
            r = stats.pearsonr(seed, clean[:, v]).statistic
            z[i, v] = np.arctanh(np.clip(r, -LIMIT, LIMIT))
    return z


def all_z(run, weights, block=7):
    seeds, coverage = seed_series(run, weights)
    blocks = list(z_blocks(run, seeds, block=block))
    z = np.concatenate([part.z for part in blocks], axis=1)
    return z, np.concatenate([part.valid for part in blocks]), coverage


def test_equals_explicit_residuals_in_float64():
    rng = np.random.default_rng(1)
    run, weights = make_run(rng), spheres(rng)
    z, valid, coverage = all_z(run, weights)
    assert valid.all()
    np.testing.assert_allclose(coverage, 1)
    np.testing.assert_allclose(z, brute_force_z(run, weights), atol=1e-5)


@pytest.mark.parametrize("drift_size", [0.0, 10.0, 1000.0, 1e5])
def test_float32_does_not_lose_digits_under_a_large_drift(drift_size):
    """Trap: the squared norm of a residual is a difference; r stays within 1e-5 of float64."""
    rng = np.random.default_rng(2)
    ramp = np.linspace(-1, 1, T)[:, None]
    series = rng.standard_normal((T, V)) + drift_size * ramp * rng.uniform(0.5, 1, V)
    run, weights = make_run(rng, series), spheres(rng)
    z, valid, _ = all_z(run, weights)
    assert valid.all()
    np.testing.assert_allclose(np.tanh(z), np.tanh(brute_force_z(run, weights)), atol=1e-5)


def test_first_levels_of_the_fisher_table():
    """z(0.5) = ln(3)/2, z(0.6) = ln 2, z(0.8) = ln 3 (Fisher & Yates, z table; exact)."""
    rng = np.random.default_rng(3)
    a, b = residuals(rng.standard_normal((T, 2)), np.full((T, 1), T**-0.5)).T
    a /= np.linalg.norm(a)
    b -= a * (a @ b)
    b /= np.linalg.norm(b)
    wanted = np.array([0.5, 0.6, 0.8])
    series = np.zeros((T, V))
    series[:, 0] = a
    series[:, 1:4] = a[:, None] * wanted + b[:, None] * np.sqrt(1 - wanted**2)
    weights = np.zeros((1, V))
    weights[0, 0] = 1
    run = make_run(rng, series * 100, drift=0, confounds=0)
    z, valid, _ = all_z(run, sparse.csr_array(weights))
    expected = [np.log(3) / 2, np.log(2), np.log(3)]
    np.testing.assert_allclose(z[0, 1:4], expected, atol=1e-5)
    assert valid[:4].all()
    assert not valid[4:].any()


def test_a_seed_voxel_alone_stays_finite():
    """r = 1 is clipped on purpose: atanh(1 - 1e-7) = 8.4."""
    rng = np.random.default_rng(4)
    weights = np.zeros((1, V))
    weights[0, 5] = 1
    z, _, _ = all_z(make_run(rng), sparse.csr_array(weights))
    assert np.isfinite(z).all()
    assert 7.5 < z[0, 5] <= np.arctanh(LIMIT) + 0.1


def test_constant_and_non_finite_voxels_are_invalid_and_leave_the_spheres():
    rng = np.random.default_rng(5)
    series = rng.standard_normal((T, V))
    series[:, 3] = 7.0
    series[:, 8] = 0.0
    finite = np.ones(V, bool)
    finite[8] = False
    weights = np.zeros((2, V))
    weights[0, [3, 4, 5, 8]] = 1
    weights[1, [3, 8]] = 1
    run = make_run(rng, series, finite)
    z, valid, coverage = all_z(run, sparse.csr_array(weights))
    np.testing.assert_array_equal(np.flatnonzero(~valid), [3, 8])
    assert not z[:, ~valid].any()
    np.testing.assert_allclose(coverage, [0.5, 0])
    assert not z[1].any()
    alone = np.zeros((1, V))
    alone[0, [4, 5]] = 1
    np.testing.assert_allclose(z[0], all_z(run, sparse.csr_array(alone))[0][0], atol=1e-5)


def test_a_voxel_that_equals_a_confound_has_nothing_left():
    rng = np.random.default_rng(6)
    confound = rng.standard_normal(T)
    series = rng.standard_normal((T, V))
    series[:, 2] = 5 * confound + 1
    run = CleanRun(
        series.astype(np.float32),
        nuisance_basis(T, confounds=confound.astype(np.float32).astype(float)[:, None]),
        np.ones(V, bool),
    )
    # the stored voxel equals the confound up to float32 rounding: 1e-14 of its sum of squares
    _, valid, _ = all_z(run, spheres(rng))
    assert not valid[2]
    assert valid.sum() == V - 1


@settings(max_examples=25, deadline=None)
@given(
    scale=st.floats(0.01, 1000),
    offset=st.floats(-1000, 1000),
    block=st.integers(1, 50),
    seed=st.integers(0, 1000),
)
def test_intensity_scale_offset_and_block_do_not_matter(scale, offset, block, seed):
    rng = np.random.default_rng(seed)
    series = rng.standard_normal((T, V))
    weights = spheres(rng)
    run = make_run(rng, series)
    changed = CleanRun((scale * series + offset * scale).astype(np.float32), run.basis, run.finite)
    np.testing.assert_allclose(
        np.tanh(all_z(run, weights)[0]), np.tanh(all_z(changed, weights, block)[0]), atol=2e-4
    )


def test_lag_one_of_nist_numacc():
    """NIST StRD NumAcc1 and NumAcc2: certified lag-1 autocorrelation -0.5 and -0.999."""
    first = np.array([10000001.0, 10000003.0, 10000002.0])
    second = np.concatenate([[1.2], np.tile([1.1, 1.3], 500)])
    for series, certified in [(first, -0.5), (second, -0.999)]:
        centred = (series - series.mean())[None]
        np.testing.assert_allclose(lag_one_autocorrelation(centred), certified, rtol=1e-9)


@pytest.mark.parametrize(
    ("a", "b", "expected"),
    [(0, 0, 200), (0.3, 0.3, 166.9725), (0.5, 0.3, 147.8261), (0.5, 0.5, 120), (0.7, 0.4, 112.5),
     (0.8, 0.8, 43.9024), (0.9, 0.9, 20.9945), (0.5, -0.5, 333.3333)],
)  # fmt: skip
def test_effective_volumes(a, b, expected):
    """n (1 - ab) / (1 + ab), n = 200: Quenouille (1948), Bartlett (1946)."""
    found = effective_volumes(200, np.array([a]), np.array([b]))
    np.testing.assert_allclose(found, [[expected]], atol=5e-5)


def test_effective_volumes_predict_the_spread_of_z():
    """Simulated: SD of z of independent AR(1) pairs, a = b = 0.5, n = 200, is 1/sqrt(n_eff - 3)."""
    rng = np.random.default_rng(7)
    n, replicates, a = 200, 4000, 0.5
    noise = rng.standard_normal((2, replicates, n + 50))
    for t in range(1, n + 50):
        noise[..., t] += a * noise[..., t - 1]
    x, y = noise[..., 50:] - noise[..., 50:].mean(axis=-1, keepdims=True)
    r = (x * y).sum(-1) / np.sqrt((x**2).sum(-1) * (y**2).sum(-1))
    n_eff = effective_volumes(n, np.array([a]), np.array([a]))[0, 0]
    # three standard errors of an SD from 4000 replicates, and the 3 % that the formula is good for
    assert abs(np.arctanh(r).std() * np.sqrt(n_eff - 3) - 1) < 0.03 + 3 / np.sqrt(2 * replicates)
