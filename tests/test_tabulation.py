"""What kind of effect is tested, which decides what a silent region lacks."""

from __future__ import annotations

import pytest

from seedaudit.inputs.design import build_design
from seedaudit.tabulation import effect_kind


@pytest.mark.parametrize(
    ("model", "effect", "kind"),
    [
        ("~ 1", None, "mean"),
        ("~ age", "Intercept", "mean"),
        ("~ center(age)", "center(age)", "slope"),
        ("~ arm + age", "arm[rested] - arm[restricted]", "difference"),
        ("~ arm + age", "arm[rested]", "mean"),
        ("~ arm", "0.5 * arm[rested] + 0.5 * arm[restricted]", "mean"),
    ],
)
def test_a_mean_changes_with_a_constant_and_the_others_do_not(model, effect, kind, tmp_path):
    names = [f"sub-{i:02d}" for i in range(8)]
    rows = [
        f"{name}\t{('rested', 'restricted')[i % 2]}\t{20 + i * i}" for i, name in enumerate(names)
    ]
    table = tmp_path / "participants.tsv"
    table.write_text("\n".join(["participant_id\tarm\tage", *rows]) + "\n", encoding="utf-8")
    assert effect_kind(build_design(names, table, model, effect)) == kind
