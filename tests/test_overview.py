"""Numbers as a terminal shows them: signs and rounding."""

from __future__ import annotations

import pandas as pd
import pytest

from seedaudit.overview import number, regions_text


@pytest.mark.parametrize(
    ("value", "shown"),
    [(-0.004, "0.00"), (0.0, "0.00"), (-0.006, "−0.01"), (0.125, "0.12"), (None, "n/a")],
)
def test_no_zero_has_a_sign(value, shown):
    assert number(value) == shown


def test_a_score_is_never_rounded_up_to_1():
    row = {
        "region": "A", "state": "held", "reported_effect": -0.001, "effect_min": -0.002,
        "effect_max": 0.2, "stability": 0.9951, "stability_low": 0.989, "stability_high": 0.999,
    }  # fmt: skip
    line = regions_text(pd.DataFrame([row])).splitlines()[-1]
    assert line.split() == ["A", "held", "0.00", "0.00", "to", "0.20", "0.99", "0.98", "to", "0.99"]
