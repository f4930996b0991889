"""A memory budget is kept by folds, then by precision; the choice is recorded."""

from __future__ import annotations

import numpy as np
import pytest

from seedaudit.auditing import audit, plan_folds
from seedaudit.budget import fitted, parse_size
from seedaudit.errors import StudyError
from seedaudit.forecast import BASE_MEMORY, forecast
from seedaudit.preflight import make_plan
from seedaudit.study import Study
from tests.small_study import write_small_study


@pytest.fixture(scope="module")
def plan(tmp_path_factory):
    small = write_small_study(tmp_path_factory.mktemp("study"), participants=8)
    text = small.study_file.read_text().replace("folds = 4", "folds = 8")
    small.study_file.write_text(text)
    return make_plan(Study.load(small.study_file))


@pytest.mark.parametrize(
    ("text", "size"), [("6GB", 6e9), ("500 mb", 5e8), ("2.5e9", 2.5e9), ("1TB", 1e12)]
)
def test_sizes(text, size):
    assert parse_size(text) == size


@pytest.mark.parametrize("text", ["", "lots", "-1GB", "0", "6 apples", "nan"])
def test_what_is_no_size(text):
    with pytest.raises(StudyError, match="--memory"):
        parse_size(text)


def test_steps_of_the_ladder(plan):
    """Enough: as asked. Less: fewer folds. Still less: half precision. Too little: an error."""

    def need(folds, precision):
        from dataclasses import replace

        return forecast(replace(plan, folds=folds, precision=precision), 2).memory

    enough = fitted(plan, 2, need(8, "float64"))
    assert (enough.folds, enough.precision, enough.choices) == (8, "float64", plan.choices)
    fewer = fitted(plan, 2, need(8, "float64") - 1)
    assert (fewer.folds, fewer.precision) == (4, "float64")
    assert "4 folds in the place of 8" in fewer.choices[-1]
    assert len(plan_folds(fewer)) == 4
    half = fitted(plan, 2, need(4, "float64") - 1)
    assert (half.folds, half.precision) == (4, "float32")
    assert "float32" in half.choices[-1]
    with pytest.raises(StudyError, match="at the least"):
        fitted(plan, 2, BASE_MEMORY)


def test_half_precision_gives_the_same_maps(plan):
    """t within 1e-4 relative, as the whole program is held to."""
    from dataclasses import replace

    whole, half = audit(plan), audit(replace(plan, precision="float32"))
    for name in ("t_reported", "effect_mean", "conjunction"):
        np.testing.assert_allclose(
            half.maps[name].get_fdata(), whole.maps[name].get_fdata(), rtol=1e-4, atol=1e-4
        )
