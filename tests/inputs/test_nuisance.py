from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from nilearn.glm.first_level.design_matrix import create_cosine_drift
from scipy import fft, signal

from seedaudit.errors import DataError
from seedaudit.inputs.nuisance import censored_volumes, nuisance_basis, read_confounds

T = 60
NAMES = [
    "trans_x",
    "trans_y",
    "csf",
    "trans_x_derivative1",
    "framewise_displacement",
    "trans_z",
]


def write_table(path, names, columns):
    rows = ["\t".join(names)]
    rows += ["\t".join(str(cell) for cell in row) for row in zip(*columns, strict=True)]
    path.write_text("\n".join(rows) + "\n")
    return path


@pytest.fixture
def table(tmp_path):
    columns = [list(c) for c in np.random.default_rng(0).normal(size=(6, T)).round(4)]
    columns[3][0] = "n/a"
    columns[4] = ["n/a"] + [0.1] * (T - 1)
    columns[4][20] = 0.9
    columns[4][40] = 0.50001
    columns[4][50] = 0.5
    return write_table(tmp_path / "c.tsv", NAMES, columns)


def removed(basis, series):
    return series - basis @ (basis.T @ series)


def same_span(a, b):
    return np.allclose(removed(a, b), 0, atol=1e-9) and np.allclose(removed(b, a), 0, atol=1e-9)


def test_basis_is_orthonormal_and_holds_the_constant():
    confounds = np.random.default_rng(1).normal(1e4, 1, (T, 3))
    basis = nuisance_basis(
        T, drift=2, band=(0.02, 0.1), repetition_time=2.0, confounds=confounds,
        censored=np.arange(T) == 7,
    )  # fmt: skip
    np.testing.assert_allclose(basis.T @ basis, np.eye(basis.shape[1]), atol=1e-12)
    np.testing.assert_allclose(removed(basis, np.ones(T)), 0, atol=1e-12)
    np.testing.assert_allclose(removed(basis, confounds), 0, atol=1e-8)
    np.testing.assert_allclose(removed(basis, np.eye(T)[7]), 0, atol=1e-12)


@pytest.mark.parametrize("drift", [0, 1, 2, 3])
def test_drift_removes_polynomials(drift):
    # Source: scipy.signal.detrend for order 0 and 1; numpy.polyfit for any order.
    series = np.random.default_rng(2).normal(size=T).cumsum()
    t = np.arange(T)
    basis = nuisance_basis(T, drift=drift)
    assert basis.shape == (T, drift + 1)
    expected = series - np.polyval(np.polyfit(t, series, drift), t)
    np.testing.assert_allclose(removed(basis, series), expected, atol=1e-9)
    if drift < 2:
        kind = ["constant", "linear"][drift]
        np.testing.assert_allclose(removed(basis, series), signal.detrend(series, type=kind))


def test_cosines_span_those_of_scipy_and_nilearn():
    # Source: scipy.fft.dct (type II, orthonormal): row k of the transform is cosine k.
    rows = fft.dct(np.eye(T), type=2, norm="ortho", axis=0)
    frequency = np.arange(T) / (2 * T * 2.0)
    low, high = 0.02, 0.1
    basis = nuisance_basis(T, band=(low, high), repetition_time=2.0)
    outside = (frequency < low) | (frequency > high)
    assert same_span(basis, rows[outside].T)
    np.testing.assert_allclose(removed(basis, rows[~outside].T), rows[~outside].T, atol=1e-10)
    # Source: nilearn's high-pass drift (all cosines up to a frequency, with the constant last).
    drift = create_cosine_drift(0.021, np.arange(T) * 2.0)
    top = (drift.shape[1] - 1) / (2 * T * 2.0)
    high_pass = nuisance_basis(T, band=(top + 1e-6, 1.0), repetition_time=2.0)
    assert same_span(high_pass, drift / np.linalg.norm(drift, axis=0))


@pytest.mark.parametrize(("hertz", "kept"), [(0.003, 0), (0.05, 1), (0.2, 0)])
def test_sinusoids_outside_the_band_are_removed_and_inside_kept(hertz, kept):
    n, tr = 400, 2.0
    wave = np.sin(2 * np.pi * hertz * tr * (np.arange(n) + 0.5) + 0.4)
    left = removed(nuisance_basis(n, band=(0.01, 0.1), repetition_time=tr), wave)
    assert (left @ left) / (wave @ wave) == pytest.approx(kept, abs=0.03)


def test_band_edges_belong_to_the_band():
    # k / (2 T TR) = 1 / (2 * 50 * 0.7) * k: edges at k = 7 and k = 21, whatever the rounding.
    n, tr = 50, 0.7
    basis = nuisance_basis(n, band=(7 / (2 * n * tr), 21 / (2 * n * tr)), repetition_time=tr)
    assert basis.shape[1] == n - 15


def test_rank_counts_repeated_dependent_constant_and_offset_columns_once():
    random = np.random.default_rng(3)
    a, b = random.normal(size=(2, T))
    confounds = np.column_stack(
        [a, 1e-9 * a, a + 2 * b, b, np.zeros(T), np.full(T, 0.1), 1e6 + b, np.arange(T)]
    )
    basis = nuisance_basis(T, drift=1, confounds=confounds)
    assert basis.shape[1] == 4  # constant, line, a, b
    assert same_span(basis, np.linalg.qr(np.column_stack([np.ones(T), np.arange(T), a, b]))[0])


def test_a_small_variation_on_a_huge_mean_counts():
    # float64 holds 1e11 + b to about 1e-5; beside the mean that is below any rank tolerance.
    b = np.random.default_rng(8).normal(size=T)
    basis = nuisance_basis(T, confounds=(1e11 + b)[:, None])
    assert basis.shape[1] == 2
    np.testing.assert_allclose(removed(basis, b), 0, atol=1e-4)


def test_more_columns_than_volumes_leave_nothing():
    confounds = np.random.default_rng(4).normal(size=(10, 25))
    assert nuisance_basis(10, confounds=confounds).shape == (10, 10)


@given(st.integers(0, 2**32 - 1), st.integers(0, 3), st.booleans())
def test_projection_equals_least_squares(seed, drift, spikes):
    # Source: numpy.linalg.lstsq residuals on the raw columns.
    random = np.random.default_rng(seed)
    confounds = random.normal(random.normal(0, 100), 2, (30, 4))
    censored = random.random(30) < 0.1 if spikes else None
    basis = nuisance_basis(30, drift=drift, confounds=confounds, censored=censored)
    raw = [np.vander(np.linspace(-1, 1, 30), drift + 1), confounds]
    if censored is not None:
        raw.append(np.eye(30)[:, censored])
    columns = np.hstack(raw)
    series = random.normal(size=30)
    fitted = columns @ np.linalg.lstsq(columns, series, rcond=None)[0]
    np.testing.assert_allclose(removed(basis, series), series - fitted, atol=1e-7)


def test_band_without_repetition_time():
    with pytest.raises(DataError, match="repetition time"):
        nuisance_basis(T, band=(0.01, 0.1))


def test_lengths_must_fit():
    with pytest.raises(DataError, match=r"59 rows.*60"):
        nuisance_basis(T, confounds=np.ones((59, 1)))
    with pytest.raises(DataError, match=r"61 rows.*60"):
        nuisance_basis(T, censored=np.zeros(61, bool))


def test_confounds_come_in_table_order_without_repeats(table):
    values, names = read_confounds(table, ["trans_?", "csf", "trans_*"], T)
    assert names == ("trans_x", "trans_y", "csf", "trans_x_derivative1", "trans_z")
    assert values.shape == (T, 5)
    assert values[0, 3] == 0
    # Source: numpy's own text reader.
    raw = np.genfromtxt(table, delimiter="\t", skip_header=1)
    np.testing.assert_array_equal(values[:, [0, 1, 2, 4]], raw[:, [0, 1, 2, 5]])


def test_confound_problems_come_together(table):
    with pytest.raises(DataError) as caught:
        read_confounds(table, ["tranx_x", "rot_*", "csf"], T)
    text = str(caught.value)
    assert len(caught.value.problems) == 2
    assert "'tranx_x'" in text
    assert "did you mean trans_x" in text
    assert "'rot_*'" in text


def test_row_count_names_both_numbers(table):
    with pytest.raises(DataError, match="60 rows, but the run has 61 volumes"):
        read_confounds(table, ["csf"], T + 1)


@pytest.mark.parametrize(
    ("name", "gaps", "message"),
    [
        ("dvars", [0], None),
        ("rot_x_derivative1_power2", [0, 1], None),
        ("fd", [0], None),
        ("framewise_displacement", [0, 1, 2], "row 3: n/a"),
        ("framewise_displacement", [1], "row 2: n/a"),
        ("csf", [0], "column 'csf', row 1: n/a"),
        ("csf", [3, 5, 6], "row 4: n/a (and in 2 more rows)"),
    ],
)
def test_gaps(tmp_path, name, gaps, message):
    column = [1.5] * T
    for t in gaps:
        column[t] = "n/a"
    path = write_table(tmp_path / "c.tsv", [name], [column])
    if message is None:
        values, _ = read_confounds(path, [name], T)
        assert values[gaps].tolist() == [[0]] * len(gaps)
        assert (np.delete(values, gaps) == 1.5).all()
    else:
        with pytest.raises(DataError) as caught:
            read_confounds(path, [name], T)
        assert message in str(caught.value)


@pytest.mark.parametrize("cell", ["abc", "inf", "1,5"])
def test_cells_that_are_no_numbers(tmp_path, cell):
    path = write_table(tmp_path / "c.tsv", ["csf"], [[1.0] * 4 + [cell] + [2.0] * 5])
    with pytest.raises(DataError, match=f"row 5: '{cell}'"):
        read_confounds(path, ["csf"], 10)


def test_censored_volumes(table):
    # By hand: 0.9 at 20 and 0.50001 at 40 exceed 0.5; 0.5 at 50 does not; n/a at 0 does not.
    path = table
    censored = censored_volumes(path, "framewise_displacement", 0.5, 0, 0, T)
    assert np.flatnonzero(censored).tolist() == [20, 40]
    censored = censored_volumes(path, "framewise_displacement", 0.5, 1, 2, T)
    assert np.flatnonzero(censored).tolist() == [19, 20, 21, 22, 39, 40, 41, 42]
    with pytest.raises(DataError, match="did you mean framewise_displacement"):
        censored_volumes(path, "framewise_displacment", 0.5, 0, 0, T)


def test_censoring_at_the_ends(tmp_path):
    path = write_table(tmp_path / "c.tsv", ["fd"], [[2.0] + [0.0] * 8 + [2.0]])
    assert np.flatnonzero(censored_volumes(path, "fd", 1, 2, 2, 10)).tolist() == [0, 1, 2, 7, 8, 9]


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ("a\ta\n1\t2\n", "twice"),
        ("a\tb\n1\t2\t3\n", "cannot be read"),
        ("", "cannot be read"),
    ],
)
def test_broken_tables(tmp_path, content, message):
    path = tmp_path / "c.tsv"
    path.write_text(content, encoding="utf-8")
    with pytest.raises(DataError, match=message):
        read_confounds(path, ["b"], 1 if content else 0)


def test_missing_table(tmp_path):
    with pytest.raises(DataError, match="no such file"):
        read_confounds(tmp_path / "none.tsv", ["a"], 3)
    (tmp_path / "binary.tsv").write_bytes(b"\xff\xfe\x00\x80")
    with pytest.raises(DataError, match="cannot be read"):
        read_confounds(tmp_path / "binary.tsv", ["a"], 3)
