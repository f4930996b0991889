"""Regional table against plain loops and the definitions of the states."""

from __future__ import annotations

import numpy as np
import pytest
from sklearn.metrics import f1_score

from seedaudit.consensus import chance, regional
from seedaudit.consensus.agreement import class_counts

INDEX = np.array([7, 2, 40, 9, 5])
# Region 40 has no voxel, and label 3 is in no row.
LABELS = np.random.default_rng(0).choice([0, 2, 3, 5, 7, 9], 431, p=[0.2, 0.2, 0.1, 0.1, 0.3, 0.1])
N = 40
REPORTED_EFFECT = np.array([0.3, 0.05, 0.1, -0.2, -0.01])


@pytest.fixture(scope="module")
def study():
    rng = np.random.default_rng(1)
    field = np.clip(np.rint(rng.normal(0, 0.8, LABELS.size)), -1, 1)
    field[LABELS == 5] = 0
    field[LABELS == 9] = np.abs(field[LABELS == 9])
    other = np.clip(np.rint(rng.normal(0, 0.6, (N, LABELS.size))), -1, 1)
    classes = np.where(rng.random(other.shape) < 0.7, field, other)
    classes[:, LABELS == 5] = 0
    effects = rng.normal([0.3, 0.02, 0.0, -0.2, 0.01], 0.05, (N, 5))
    return classes.astype(np.int8), field.astype(np.int8), effects


def table_of(study, **more):
    classes, reported, effects = study
    numbers = [REPORTED_EFFECT, REPORTED_EFFECT - 0.1, REPORTED_EFFECT + 0.1]
    numbers += [np.full(5, 0.5), np.full(5, 0.7)]
    return regional.region_table(LABELS, INDEX, classes, reported, effects, *numbers, **more)


def naive_call(row):
    plus, minus = np.mean(row == 1), np.mean(row == -1)
    if max(plus, minus) < 0.10:
        return 0
    return 1 if plus >= minus else -1


def test_columns_of_the_contract(study):
    names = (
        "index n_voxels reported_positive reported_negative reported_effect reported_low "
        "reported_high effect_mean effect_sd effect_min effect_max sign_share dice_positive_mean "
        "dice_positive_p05 dice_positive_undefined dice_negative_mean dice_negative_p05 "
        "dice_negative_undefined pairwise_agreement stability stability_low stability_high ceiling "
        "ceiling_relative placement_share state"
    )
    table = table_of(study)
    assert list(table) == names.split()
    assert {column.shape for column in table.values()} == {(5,)}
    assert np.isnan(table["ceiling"]).all()


def test_table_matches_loops(study):
    classes, reported, effects = study
    ceiling = np.linspace(0.5, 0.9, 5)
    table = table_of(study, ceiling=ceiling, ceiling_relative=ceiling / 2)
    for k, number in enumerate(INDEX):
        inside = np.flatnonzero(np.equal(LABELS, number))
        assert table["n_voxels"][k] == inside.size
        if not inside.size:
            continue
        drawn, here = classes[:, inside], reported[inside]
        assert table["reported_positive"][k] == np.mean(here == 1)
        assert table["reported_negative"][k] == np.mean(here == -1)
        assert table["effect_mean"][k] == pytest.approx(effects[:, k].mean(), abs=1e-14)
        assert table["effect_sd"][k] == pytest.approx(effects[:, k].std(ddof=1), abs=1e-14)
        assert table["effect_min"][k] == min(effects[:, k])
        assert table["effect_max"][k] == max(effects[:, k])
        assert table["sign_share"][k] == np.mean(effects[:, k] * REPORTED_EFFECT[k] > 0)
        for tail, sign in (("positive", 1), ("negative", -1)):
            scores = [
                f1_score(here == sign, row == sign)
                for row in drawn
                if (here == sign).any() or (row == sign).any()
            ]
            assert table[f"dice_{tail}_undefined"][k] == N - len(scores)
            mean = np.mean(scores) if scores else np.nan
            low = np.percentile(scores, 5) if scores else np.nan
            np.testing.assert_allclose(table[f"dice_{tail}_mean"][k], mean, atol=1e-12)
            np.testing.assert_allclose(table[f"dice_{tail}_p05"][k], low, atol=1e-12)
        counts = np.array([[np.sum(v == c) for c in (1, 0, -1)] for v in drawn.T])
        assert table["pairwise_agreement"][k] == pytest.approx(chance.pairwise_agreement(counts))
        assert table["stability"][k] == pytest.approx(chance.gwet_ac1(counts), abs=1e-12)
        assert table["ceiling_relative"][k] == ceiling[k] / 2
        same = sum(naive_call(row) == naive_call(here) for row in drawn)
        states = ("silent", "gained") if naive_call(here) == 0 else ("held", "lost")
        if 20 * same >= 19 * N:
            assert table["state"][k] == states[0]
        else:
            assert table["state"][k] == (states[1] if 20 * same <= N else "contested")
    assert table["state"][4] == "silent"
    assert table["stability"][4] == 1.0
    assert table["dice_positive_undefined"][4] == N
    assert table["dice_negative_undefined"][3] not in (0, N)


def test_region_without_voxels(study):
    table = table_of(
        study, ceiling=np.ones(5), ceiling_relative=np.ones(5), placement_share=np.ones(5)
    )
    assert table["state"][2] == "n/a"
    for name, column in table.items():
        if column.dtype.kind == "f":
            assert np.isnan(column[2]), name
            assert not np.isnan(column[0]), name
    assert table["n_voxels"][2] == 0
    assert table["dice_positive_undefined"][2] == N


def test_stability_alone_is_the_column_of_the_table(study):
    alone = regional.regional_stability(LABELS, INDEX, class_counts(study[0]))
    np.testing.assert_array_equal(alone, table_of(study)["stability"])
    assert np.isnan(regional.regional_stability(LABELS, INDEX, class_counts(study[0][:1]))).all()
    assert regional.regional_stability(
        LABELS, np.array([], dtype=int), class_counts(study[0])
    ).shape == (0,)


def test_label_zero_is_no_region(study):
    assert np.isnan(
        regional.regional_stability(LABELS, np.array([0]), class_counts(study[0]))
    ).all()


def test_missing_effects_stay_missing(study):
    classes, reported, effects = study
    gaps = effects.copy()
    gaps[3, 0] = np.nan
    table = table_of((classes, reported, gaps))
    for name in ("effect_mean", "effect_sd", "effect_min", "effect_max", "sign_share"):
        assert np.isnan(table[name][0])
        assert not np.isnan(table[name][1])


@pytest.mark.parametrize(
    ("positive", "negative", "call"),
    [(10, 0, 1), (9, 0, 0), (9, 10, -1), (30, 30, 1), (30, 31, -1), (0, 0, 0)],
)
def test_call_of_a_region(positive, negative, call):
    found = regional.region_calls(np.array([positive]), np.array([negative]), np.array([100]))
    assert found.tolist() == [call]


@pytest.mark.parametrize("safe", [0.95, 0.9])
def test_states_at_their_bounds(safe):
    n = 100
    high, low = round(100 * safe), round(100 * (1 - safe))
    cases = [
        (1, 1, high, "held"),
        (-1, -1, high, "held"),
        (1, 1, high - 1, "contested"),
        (1, 1, low + 1, "contested"),
        (1, 1, low, "lost"),
        (-1, -1, 0, "lost"),
        (0, 0, high, "silent"),
        (0, 0, high - 1, "contested"),
        (0, 0, low + 1, "contested"),
        (0, 0, low, "gained"),
    ]
    reported = np.array([case[0] for case in cases], dtype=np.int8)
    calls = np.zeros((n, len(cases)), dtype=np.int8)
    for k, (call, repeated, times, _) in enumerate(cases):
        calls[:times, k] = repeated
        calls[times:, k] = 0 if call else -1
    voxels = np.full(len(cases), 50)
    states = regional.region_states(reported, calls, voxels, safe)
    assert states.tolist() == [case[3] for case in cases]
    assert set(regional.region_states(reported, calls, voxels * 0, safe)) == {"n/a"}


def test_a_flip_of_sign_is_lost():
    calls = np.full((20, 1), -1, dtype=np.int8)
    states = regional.region_states(np.array([1], dtype=np.int8), calls, np.array([9]))
    assert states.tolist() == ["lost"]
