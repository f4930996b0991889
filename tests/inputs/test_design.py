from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.formula.api as smf
from scipy import stats

from seedaudit.errors import DataError, StudyError
from seedaudit.inputs.design import build_design

N = 24


@pytest.fixture
def table(tmp_path):
    random = np.random.default_rng(0)
    frame = pd.DataFrame(
        {
            "participant_id": [f"sub-{i:02}" for i in range(N)],
            "arm": random.permutation(["rested", "restricted", "New-Town ward"] * (N // 3)),
            "site": random.choice(["1", "2", "10"], N),
            "age": random.normal(40, 9, N).round(1),
            "my score": random.normal(0, 1, N).round(3),
            "mixed": ["unknown", *map(str, range(N - 1))],
            "gap": ["n/a", *map(str, range(N - 1))],
            "same": 3,
        }
    )
    path = tmp_path / "participants.tsv"
    frame.to_csv(path, sep="\t", index=False)
    return path


def ids(path):
    return pd.read_csv(path, sep="\t")["participant_id"].tolist()


def t_value(design, y):
    """Ordinary least squares by the normal equations, for the contrast of the design."""
    x, c = design.matrix, design.contrast
    coefficients, _, _, _ = np.linalg.lstsq(x, y, rcond=None)
    residuals = y - x @ coefficients
    variance = residuals @ residuals / (len(y) - x.shape[1])
    return c @ coefficients / np.sqrt(variance * (c @ np.linalg.inv(x.T @ x) @ c))


def response(path):
    return np.random.default_rng(5).normal(size=len(ids(path)))


# Source: Student (1908) sleep data as in CHECKS 14f (values printed by R, C scipy and statsmodels).
SLEEP = [
    [0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0.0, 2.0],
    [1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4],
]


@pytest.fixture
def sleep(tmp_path):
    rows = [f"p{s}_{g}\t{g}\ts{s}" for g in ("first", "second") for s in range(10)]
    path = tmp_path / "sleep.tsv"
    path.write_text("participant_id\tdrug\tsubject\n" + "\n".join(rows) + "\n")
    return path


def test_two_groups_on_the_sleep_data(sleep):
    y = np.concatenate(SLEEP)
    design = build_design(ids(sleep), sleep, "~ drug", "drug[first] - drug[second]")
    assert t_value(design, y) == pytest.approx(-1.8608134675, abs=1e-9)
    assert t_value(design, y) == pytest.approx(stats.ttest_ind(*SLEEP).statistic)
    other = build_design(ids(sleep), sleep, "~ drug", "drug[T.second]")
    assert t_value(other, y) == pytest.approx(1.8608134675, abs=1e-9)
    assert len(np.unique(design.strata)) == 2
    assert (design.strata[:10] == design.strata[0]).all()


def test_paired_on_the_sleep_data(sleep):
    design = build_design(ids(sleep), sleep, "~ drug + subject", "drug[first] - drug[second]")
    y = np.concatenate(SLEEP)
    assert t_value(design, y) == pytest.approx(-4.0621276834, abs=1e-9)
    assert design.matrix.shape == (20, 11)


def test_one_sample_is_the_default():
    design = build_design(["a", "b", "c"])
    assert design.names == ("Intercept",)
    assert design.effect == "Intercept"
    assert design.contrast.tolist() == [1]
    assert design.matrix.dtype == np.float64
    assert design.strata.tolist() == [0, 0, 0]
    y = np.array([0.2, 0.5, 0.1])
    assert t_value(design, y) == pytest.approx(stats.ttest_1samp(y, 0).statistic)


def test_one_participant_alone():
    assert build_design(["a"]).matrix.shape == (1, 1)


@pytest.mark.parametrize(
    ("model", "effect", "formula", "test"),
    [
        ("~ arm + age", "age", "y ~ arm + age", "age = 0"),
        ("~ arm + age", "arm[rested] - arm[restricted]", "y ~ arm + age",
         "arm[T.rested] - arm[T.restricted] = 0"),
        ("~ arm + age", "arm[New-Town ward] - 0.5*(arm[rested] + arm[restricted])",
         "y ~ arm + age", "-0.5 * arm[T.rested] - 0.5 * arm[T.restricted] = 0"),
        ("~ arm*age", "arm[T.rested]:age", "y ~ arm*age", "arm[T.rested]:age = 0"),
        ("~ C(site) + `my score`", "C(site)[10] - site[2]", "y ~ C(site) + score",
         "C(site)[T.10] - C(site)[T.2] = 0"),
        ("~ C(site) + `my score`", "-my score", "y ~ C(site) + score", "-score = 0"),
        ("~ 0 + arm", "arm[rested] / 2 + arm[restricted] / 2", "y ~ 0 + arm",
         "arm[rested] / 2 + arm[restricted] / 2 = 0"),
        ("~ center(age) + scale(`my score`)", "Intercept", "y ~ center(age) + score",
         "Intercept = 0"),
    ],
)  # fmt: skip
def test_contrasts_equal_statsmodels(table, model, effect, formula, test):
    # Source: statsmodels OLS with its own (patsy) formulas.
    y = response(table)
    frame = pd.read_csv(table, sep="\t").assign(y=y)
    frame["score"] = frame["my score"] - (frame["my score"].mean() if "center" in model else 0)
    if "center" in model:
        frame["age"] -= frame["age"].mean()
    fit = smf.ols(formula, frame).fit()
    expected = fit.t_test(test).tvalue.item()
    assert t_value(build_design(ids(table), table, model, effect), y) == pytest.approx(expected)


def test_adjusted_means_equal_predictions_on_a_reference_grid(table):
    # Source: statsmodels predictions averaged over the levels of the other factor, covariate at
    # its mean (the definition of Searle, Speed & Milliken 1980), interactions included.
    y = response(table)
    frame = pd.read_csv(table, sep="\t", dtype={"site": str}).assign(y=y)
    fit = smf.ols("y ~ arm * age + site", frame).fit()
    grid = pd.DataFrame({"arm": "rested", "site": ["1", "2", "10"], "age": frame["age"].mean()})
    design = build_design(ids(table), table, "~ arm*age + C(site)", "arm[rested]")
    coefficients = np.linalg.lstsq(design.matrix, y, rcond=None)[0]
    assert design.contrast @ coefficients == pytest.approx(fit.predict(grid).mean())


def test_rows_follow_the_participants_and_sub_does_not_matter(table):
    wanted = ["sub-07", "03", "sub-11", "01", "sub-05"]
    design = build_design(wanted, table, "~ age", "age")
    frame = pd.read_csv(table, sep="\t").set_index("participant_id")
    expected = [frame.loc["sub-" + name.removeprefix("sub-"), "age"] for name in wanted]
    assert design.matrix[:, 1].tolist() == expected


def test_levels_that_are_numbers_are_sorted_as_numbers(table):
    design = build_design(ids(table), table, "~ C(site)", "Intercept")
    assert design.names == ("Intercept", "C(site)[T.2]", "C(site)[T.10]")


def test_strata_are_the_cells_of_the_factors(table):
    design = build_design(ids(table), table, "~ arm + C(site) + age", "age")
    frame = pd.read_csv(table, sep="\t")
    cells = frame.groupby(["arm", "site"]).ngroup()
    # Source: pandas groups; equal partitions have as many pairs of labels as parts.
    pairs = len(set(zip(design.strata, cells, strict=True)))
    assert pairs == cells.nunique() == len(np.unique(design.strata))


def message(error, *args):
    with pytest.raises(error) as caught:
        build_design(*args)
    return str(caught.value)


@pytest.mark.parametrize(
    "model",
    [
        "~ __import__('os').getcwd()",
        "~ {age + 1}",
        "~ np.log(age)",
        "~ log(age)",
        "~ age[0]",
        "~ C(site, contr.sum)",
        "~ C(scale(age))",
        "~ poly(age, 2)",
        "~ arm**2",
        "~ arm^2",
        "~ arm/site",
        "~ age | arm",
        "~ age %in% arm",
        "~ .",
        "~ 2",
        "~ 'age'",
        "~ [age]",
        "age ~ arm",
        "~ ~ age",
    ],
)
def test_anything_but_the_safe_notation_is_refused(table, model):
    assert "not part of the notation" in message(StudyError, ids(table), table, model, "Intercept")


@pytest.mark.parametrize("model", ["~ arm +", "~ (arm", "~ arm)", "~ arm age", "~ 0", "~ C(age"])
def test_slips_of_grammar_are_study_errors(table, model):
    assert f"model {model!r}" in message(StudyError, ids(table), table, model, "Intercept")


def test_model_problems(table):
    who = ids(table)
    assert "did you mean age" in message(StudyError, who, table, "~ agee", "agee")
    assert "no participants table" in message(StudyError, who, None, "~ age", "age")
    assert "stands both as site and as C(site)" in message(
        StudyError, who, table, "~ site + C(site)", "site"
    )
    several = message(StudyError, who, table, "~ {age} + arm**2", "age")
    assert several.count("not part") >= 2
    text = message(StudyError, who, table, "~ arm + age")
    assert "arm[rested]" in text
    assert "arm[T.rested]" in text
    assert "age" in text


def test_designs_that_estimate_nothing(table):
    who = ids(table)
    assert "no residual degrees of freedom" in message(StudyError, who[:2], table, "~ age", "age")
    assert "same follows from the other columns" in message(
        StudyError, who, table, "~ age + same", "age"
    )
    assert "scale(same) is not finite" in message(StudyError, who, table, "~ scale(same)", "age")
    assert "no residual" in message(StudyError, who, table, "~ C(participant_id)", "Intercept")


def test_nested_factors_are_not_estimable(tmp_path):
    path = tmp_path / "p.tsv"
    rows = [f"p{i}\t{'ab'[i // 4]}\ts{i // 2}" for i in range(8)]
    path.write_text("participant_id\tarm\tsubject\n" + "\n".join(rows) + "\n")
    text = message(StudyError, ids(path), path, "~ arm + subject", "arm[a] - arm[b]")
    assert "follows from the other columns" in text


def test_effect_problems(table):
    def found(effect):
        return message(StudyError, ids(table), table, "~ arm + age", effect)

    assert "did you mean arm[rested]" in found("arm[restd] - arm[restricted]")
    assert "unknown name 'agee'" in found("agee")
    assert "unknown name" in found("arm[rested]:age")
    assert "multiplied" in found("age*age")
    assert "multiplied" in found("1/age")
    assert "a number stands alone" in found("age + 1")
    assert "a number stands alone" in found("2")
    assert "cancel" in found("age - age")
    assert "not closed" in found("2*(age")
    assert "stands where" in found("")
    assert "stands where" in found("age +")
    assert "')' is not expected" in found("age)")
    assert "is not expected" in found("age age")
    assert "zero" in found("age/0")
    assert "unknown name" in found("__import__('os')")


def test_table_problems_come_together(table):
    lines = table.read_text().splitlines()
    table.write_text("\n".join([*lines, lines[3]]) + "\n")
    who = [*ids(table)[:N], "sub-99"]
    text = message(DataError, who, table, "~ gap + mixed + age", "age")
    assert "'sub-02' stands there 2 times" in text
    assert "no row for participant 'sub-99'" in text
    assert "column 'gap' has no value for sub-00" in text
    assert "column 'mixed' mixes numbers and text ('unknown')" in text


def test_table_that_is_no_participants_table(tmp_path):
    (tmp_path / "p.tsv").write_text("participant\tage\na\t1\n")
    assert "participant_id" in message(DataError, ["a"], tmp_path / "p.tsv", "~ age", "age")
    assert "no such file" in message(DataError, ["a"], tmp_path / "none.tsv", "~ 1")


def test_gaps_and_duplicates_of_others_do_not_matter_where_unused(table):
    design = build_design(ids(table)[1:], table, "~ gap", "gap")
    assert design.matrix[:, 1].tolist() == list(range(N - 1))
