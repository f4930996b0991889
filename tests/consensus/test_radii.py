"""Variance components against published worked examples, a library, and planted values."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import scipy.stats
import statsmodels.formula.api as smf
from pandas import DataFrame
from statsmodels.stats.anova import anova_lm

from seedaudit.consensus.radii import crossed, mean_squares, variance_components, variation_sources

# Shrout P.E. & Fleiss J.L. (1979) Psychol. Bull. 86:420-428, Table 2: 6 targets x 4 judges.
RATINGS = np.array(
    [[9, 2, 5, 8], [6, 1, 3, 2], [8, 4, 6, 8], [7, 1, 2, 6], [10, 5, 6, 9], [6, 2, 4, 7]]
)
NIST = Path(scipy.stats.__file__).parent / "tests" / "data" / "nist_anova"


def test_shrout_and_fleiss():
    found = mean_squares(RATINGS[:, :, None].astype(float))
    # mean squares and coefficients as recomputed with pingouin; printed .29 and .71
    assert found[0,] == pytest.approx(11.2416667)
    assert found[1,] == pytest.approx(32.4861111)
    assert found[0, 1] == pytest.approx(1.0194444)
    parts = variance_components(RATINGS[:, :, None].astype(float))
    target, judge, residual = parts[0,], parts[1,], parts[0, 1]
    assert target / (target + judge + residual) == pytest.approx(0.2897637795)
    assert target / (target + residual) == pytest.approx(0.7148407148)


@pytest.mark.parametrize(
    ("name", "digits"),
    [("SiRstv", 9), ("AtmWtAg", 8), ("SmLs01", 10), ("SmLs04", 8), ("SmLs06", 6)],
)
def test_nist_certified_sums_of_squares(name, digits):
    # One-way files of the NIST statistical reference data, as they come with scipy. Replicates are
    # a factor without meaning: the within sum of squares is that of replicates and interaction.
    lines = (NIST / f"{name}.dat").read_text().splitlines()
    start = max(i for i, line in enumerate(lines) if line.startswith("Data:"))
    table = np.array([line.split() for line in lines[start + 1 :] if line.strip()], dtype=float)
    between, within = (
        next(line.split() for line in lines if line.startswith(word))
        for word in ("Between", "Within")
    )
    levels = np.unique(table[:, 0])
    values = np.array([table[table[:, 0] == level, 1] for level in levels])[:, :, None]
    found = mean_squares(values)
    groups, replicates = values.shape[:2]
    assert found[0,] * (groups - 1) == pytest.approx(float(between[-3]), rel=10.0**-digits)
    inside = found[1,] * (replicates - 1) + found[0, 1] * (groups - 1) * (replicates - 1)
    assert inside == pytest.approx(float(within[-2]), rel=10.0**-digits)


def test_three_factors_match_statsmodels():
    values = np.random.default_rng(0).normal(0.3, 0.2, (5, 4, 3, 2))
    found = mean_squares(values)
    index = np.indices(values.shape[:3]).reshape(3, -1)
    for k in range(2):
        frame = DataFrame(
            {"s": index[0], "p": index[1], "r": index[2], "z": values[..., k].ravel()}
        )
        # without the highest interaction, which is the residual
        fit = smf.ols("z ~ (C(s) + C(p) + C(r)) ** 2", frame).fit()
        table = anova_lm(fit)
        expected = table["sum_sq"] / table["df"]
        names = {
            (0,): "C(s)", (1,): "C(p)", (2,): "C(r)", (0, 1): "C(s):C(p)", (0, 2): "C(s):C(r)",
            (1, 2): "C(p):C(r)", (0, 1, 2): "Residual",
        }  # fmt: skip
        for effect, name in names.items():
            assert found[effect][k] == pytest.approx(expected[name])


def test_components_are_unbiased():
    # 2000 layouts are the responses of one call. Planted variances, interactions included.
    rng = np.random.default_rng(1)
    shape, k = (6, 5, 3), 2000
    planted = {
        (0,): 0.5, (1,): 0.2, (2,): 0.1, (0, 1): 0.05, (0, 2): 0.02, (1, 2): 0.04, (0, 1, 2): 0.1,
    }  # fmt: skip
    values = np.full((*shape, k), 0.4)
    for effect, variance in planted.items():
        size = [shape[f] if f in effect else 1 for f in range(3)]
        values = values + rng.normal(0, np.sqrt(variance), (*size, k))
    found = variance_components(values)
    assert set(found) == set(planted)
    for effect, variance in planted.items():
        error = found[effect].std() / np.sqrt(k)
        assert found[effect].mean() == pytest.approx(variance, abs=4 * error)


def test_table_of_sources():
    rng = np.random.default_rng(2)
    participant = rng.normal(0, 1, (8, 1, 1, 2))
    position = rng.normal(0, 0.5, (1, 6, 1, 2)) * [1, 0]
    values = participant + position + rng.normal(0, 0.01, (8, 6, 3, 2))
    table = variation_sources(values, np.array([4, 9]))
    assert list(table["source"][:7]) == [
        "participants", "position", "radius", "participants x position", "participants x radius",
        "position x radius", "residual",
    ]  # fmt: skip
    assert list(np.unique(table["index"])) == [4, 9]
    for label in (4, 9):
        here = table["index"] == label
        assert table["share"][here].sum() == pytest.approx(1)
        assert (table["variance"][here] >= 0).all()
    of_position = table["share"][table["source"] == "position"]
    assert of_position[0] > 0.05
    assert of_position[1] < 0.001


def test_a_single_radius_is_participants_by_positions():
    table = variation_sources(RATINGS[:, :, None, None].astype(float), np.array([1]))
    assert list(table["source"]) == ["participants", "position", "residual"]
    assert table["share"][0] == pytest.approx(0.2897637795)


def test_constant_or_missing_regions_have_no_shares():
    values = np.random.default_rng(3).normal(size=(4, 3, 2, 3))
    values[..., 0] = 0.2
    values[..., 1] = np.nan
    table = variation_sources(values, np.array([1, 2, 3]))
    assert np.isnan(table["share"][:14]).all()
    assert (table["variance"][:7] == 0).all()
    assert table["share"][14:].sum() == pytest.approx(1)


def test_too_few_levels():
    with pytest.raises(ValueError, match="two participants"):
        variation_sources(np.zeros((1, 3, 2, 1)), np.array([1]))


def test_placements_are_arranged_by_position_and_radius():
    positions = np.array([7, 7, 3, 3, 5, 3, 5, 9])
    radii = np.array([6.0, 4.0, 4.0, 8.0, 4.0, 6.0, 6.0, 4.0])
    # position 7 lacks one radius of three, and so do 5 and 9
    values = np.random.default_rng(4).normal(size=(2, 8, 3))
    found, kept, levels = crossed(values, positions, radii)
    assert list(kept) == [3]
    assert list(levels) == [4, 6, 8]
    np.testing.assert_array_equal(found[:, 0], values[:, [2, 5, 3]])
    rows = [0, 1, 4, 6]
    found, kept, levels = crossed(values[:, rows], positions[rows], radii[rows])
    assert list(kept) == [5, 7]
    np.testing.assert_array_equal(found, values[:, [[4, 6], [1, 0]]])
