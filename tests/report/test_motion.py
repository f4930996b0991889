"""The panel of motion: what it draws stands in the tables, and it says why when it is empty."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from seedaudit.report.captions import alternative_text, caption
from seedaudit.report.figures import draw_panel, present
from seedaudit.results import SeedAudit
from tests.report.invented import invented_seed


def with_motion(motion) -> SeedAudit:
    seed = invented_seed()
    count = len(motion)
    people = pd.DataFrame(
        {
            "participant_id": [f"sub-{i}" for i in range(count)],
            "mean_motion": motion,
            "median_spatial_r": np.linspace(0.9, 0.5, count),
            "min_spatial_r": np.linspace(0.6, -0.2, count),
            "used": True,
        }
    )
    tables = {**seed.tables, "participants": people}
    summary = {**seed.summary, "motion_rank_correlation": -0.64}
    return SeedAudit(seed.name, summary, tables, seed.maps)


def test_points_are_those_of_the_table():
    seed = with_motion([0.05, 0.1, np.nan, 0.3])
    sheet = draw_panel(seed, "motion")
    chart = sheet.child_axes[0]
    drawn = [line.get_xydata() for line in chart.lines]
    known = seed.tables["participants"].dropna()
    for column in ("median_spatial_r", "min_spatial_r"):
        expected = known[["mean_motion", column]].to_numpy()
        assert any(np.array_equal(points, expected) for points in drawn)
    assert chart.get_ylim()[0] < -0.2
    assert any("−0.64" in text.get_text() for text in sheet.texts)
    assert not any("sub-" in text.get_text() for text in sheet.texts)


@pytest.mark.parametrize("motion", [[np.nan] * 4, [0.1, 0.2]])
def test_without_known_motion_it_says_why(motion):
    seed = with_motion(motion)
    assert not present("motion", seed)
    sheet = draw_panel(seed, "motion")
    assert any("No column" in text.get_text() for text in sheet.texts)


def test_caption_calls_it_a_check():
    seed = with_motion([0.05, 0.1, 0.3])
    assert "not a test" in caption(seed, ["motion"])
    assert "−0.64" in caption(seed, ["motion"])
    assert "motion" in alternative_text(seed, ["motion"])
