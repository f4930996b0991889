"""The panels of the search, of several seeds and of radii: layout, and what they say."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pandas as pd
import pytest
from matplotlib.colors import to_hex
from matplotlib.patches import Rectangle

from seedaudit.consensus.radii import variation_sources
from seedaudit.report.landscape import SHARES, front, landscape
from seedaudit.report.several import SOURCES, seeds_matrix, variation
from seedaudit.report.style import Sheet, blank_figure, look
from seedaudit.results import SeedAudit
from seedaudit.space.lattice import ball_lattice
from tests.report.drawing import drawn_texts
from tests.report.invented import AT, LONG, MARKUP, head_grid, invented_seed


def searched(moved=0, *, lost=True, interval=True, search=6.0):
    """An invented seed with a search for a steadier one; `moved` is the row recommended."""
    shifts = ball_lattice(search, 2.0)
    rng = np.random.default_rng(0)
    score = (
        0.9 - 0.01 * np.linalg.norm(shifts - [4, 0, -2], axis=1) + rng.normal(0, 0.003, len(shifts))
    )
    keeps = (shifts[:, 2] > -5) | (not lost)
    best = np.maximum.accumulate(np.where(keeps, score, -1))
    table = pd.DataFrame(
        {
            "seed": "posterior",
            **dict(zip("xyz", (shifts + AT).T, strict=True)),
            "moved_mm": np.linalg.norm(shifts, axis=1),
            "stability_out": score,
            "keeps_identity": keeps,
            "share_chosen": np.arange(len(shifts)) == 5,
            "on_front": keeps & (score == best),
            "recommended": np.arange(len(shifts)) == moved,
        }
    )
    base = invented_seed(grid=head_grid(8.0))
    found = {"step_mm": 2.0, "gain": 0.03, "gain_low": 0.01, "gain_high": 0.05}
    if not interval:
        found |= {"gain_low": None, "gain_high": None}
    return SeedAudit(
        "posterior",
        {**base.summary, "steadier": found},
        {**base.tables, "steadier": table},
        base.maps,
    )


def pairs(names, *, known=True):
    rows = []
    for i, (a, b) in enumerate(combinations(names, 2)):
        rows.append(
            {
                "seed_a": a,
                "seed_b": b,
                "relative": (0.98, 0.31, -0.04)[i % 3] if known else np.nan,
                "relative_within_a": 0.97 if known else np.nan,
                "relative_within_b": 0.92 if known else np.nan,
                "interchangeable": (True, False, None)[i % 3] if known else None,
            }
        )
    return pd.DataFrame(rows)


def sources(names, radii=3):
    rng = np.random.default_rng(1)
    k = len(names)
    values = rng.normal(0, 0.2, (9, 1, 1, k)) + rng.normal(0, 0.1, (1, 8, 1, k))
    values = values + rng.normal(0, 0.05, (9, 8, radii, k))
    table = pd.DataFrame(variation_sources(values, np.arange(k)))
    return table.assign(region=np.array(names, dtype=object)[table["index"]])


PANELS = {
    "landscape": lambda sheet: landscape(searched(30), sheet, "a"),
    "landscape kept": lambda sheet: landscape(searched(lost=False), sheet, "a"),
    "landscape wide": lambda sheet: landscape(searched(search=12.0), sheet, "a"),
    "front": lambda sheet: front(searched(30), sheet, "b"),
    "front kept": lambda sheet: front(searched(interval=False, lost=False), sheet, "b"),
    "two seeds": lambda sheet: seeds_matrix(pairs(["one", "two"]), sheet, "c"),
    "five seeds": lambda sheet: seeds_matrix(pairs([*MARKUP[:4], LONG]), sheet, "c"),
    "ten seeds": lambda sheet: seeds_matrix(pairs([f"{i} {LONG}" for i in range(10)]), sheet, "c"),
    "too many seeds": lambda sheet: seeds_matrix(
        pairs([f"{i} {LONG}" for i in range(24)]), sheet, "c"
    ),
    "unknown": lambda sheet: seeds_matrix(pairs(["one", "two", "three"], known=False), sheet, "c"),
    "sources": lambda sheet: variation(sources(["A", *MARKUP, LONG]), sheet, "d"),
    "many regions": lambda sheet: variation(sources([f"R{i}" for i in range(90)]), sheet, "d"),
    "one radius": lambda sheet: variation(sources(["A", "B"], radii=1), sheet, "d"),
}


@pytest.fixture(scope="module", params=[(name, width) for name in PANELS for width in (108, 174)])
def page(request):
    name, width = request.param
    with look():
        page = blank_figure(width + 6, 106)
        bounds = (3 / (width + 6), 3 / 106, width / (width + 6), 100 / 106)
        PANELS[name](Sheet(page.add_axes(bounds)))
    return page


def test_type_is_large_enough_and_nothing_overlaps(page):
    texts = drawn_texts(page)
    assert len(texts) > 5
    assert min(text.get_fontsize() for text in texts) >= 7
    boxes = [(t.get_text(), t.get_window_extent().shrunk(0.98, 0.94)) for t in texts]
    assert not [(a, b) for (a, ba), (b, bb) in combinations(boxes, 2) if ba.overlaps(bb)]
    width, height = page.bbox.size
    for text, box in boxes:
        assert 0 <= box.x0 <= box.x1 <= width, text
        assert 0 <= box.y0 <= box.y1 <= height, text


def words(draw):
    with look():
        page = blank_figure(180, 106)
        sheet = Sheet(page.add_axes((0.02, 0.02, 0.96, 0.96)))
        draw(sheet)
    return [text.get_text() for text in drawn_texts(page)], sheet


def test_the_landscape_says_whether_to_move():
    kept, _ = words(lambda sheet: landscape(searched(0), sheet))
    assert any("keep the reported seed" in text for text in kept)
    moved, _ = words(lambda sheet: landscape(searched(30), sheet))
    place = searched(30).tables["steadier"].iloc[30]
    coordinate = f"({place.x:g}, {place.y:g}, {place.z:g})".replace("-", "−")
    assert any(coordinate in text and "recommended" in text for text in moved)
    assert not any("keep" in text for text in moved)


def test_cells_lie_where_their_candidates_are():
    seed = searched(0, lost=False)
    _, sheet = words(lambda sheet: landscape(seed, sheet))
    table = seed.tables["steadier"]
    axial = sheet.ax.child_axes[2]
    cells = {
        (round(p.get_x() + p.get_width() / 2, 6), round(p.get_y() + p.get_height() / 2, 6)): p
        for p in axial.patches
        if isinstance(p, Rectangle)
    }
    here = table[np.isclose(table["z"], AT[2])]
    assert set(cells) == set(zip(here["x"].round(6), here["y"].round(6), strict=True))
    score = table["stability_out"]
    for row in here.itertuples():
        share = (row.stability_out - score.min()) / (score.max() - score.min())
        assert to_hex(cells[row.x, row.y].get_facecolor()) == to_hex(SHARES(share))


def test_small_differences_are_not_painted_large():
    seed = searched(0, lost=False)
    flat = seed.tables["steadier"].assign(stability_out=np.linspace(0.9, 0.901, 123))
    seed = SeedAudit(seed.name, seed.summary, {**seed.tables, "steadier": flat}, seed.maps)
    _, sheet = words(lambda sheet: landscape(seed, sheet))
    colours = [p.get_facecolor()[0] for ax in sheet.ax.child_axes[:3] for p in ax.patches]
    assert np.ptp(colours) < 0.05


def test_the_front_shows_the_interval_of_the_search():
    seed = searched(30)
    _, sheet = words(lambda sheet: front(seed, sheet))
    ax = sheet.ax.child_axes[0]
    reported = seed.tables["steadier"]["stability_out"][0]
    segment = ax.collections[-1].get_segments()[0]
    np.testing.assert_allclose(segment[:, 1], reported + np.array([0.01, 0.05]))
    np.testing.assert_allclose(segment[:, 0], seed.tables["steadier"]["moved_mm"][30])


def test_the_matrix_is_symmetric_and_says_yes_no_or_nothing():
    shown, _ = words(lambda sheet: seeds_matrix(pairs(["one", "two", "three"]), sheet))
    assert shown.count("0.98\nyes") == shown.count("0.31\nno") == shown.count("−0.04\n?") == 2
    unknown, _ = words(lambda sheet: seeds_matrix(pairs(["one", "two"], known=False), sheet))
    assert unknown.count("n/a\n?") == 2


def test_bars_fill_the_whole_and_carry_hatches():
    table = sources(["A", "B"])
    _, sheet = words(lambda sheet: variation(table, sheet))
    bars = sheet.ax.child_axes[0].patches
    assert len(bars) == 2 * len(SOURCES)
    for row in range(2):
        here = [bar for bar in bars if round(bar.get_y() + bar.get_height() / 2) == row]
        assert sum(bar.get_width() for bar in here) == pytest.approx(1)
    assert len(set(SOURCES.values())) == len(SOURCES)


def test_the_regions_that_depend_most_on_position_are_kept():
    table = sources([f"R{i}" for i in range(60)])
    table.loc[(table["region"] == "R17") & (table["source"] == "position"), "share"] = 0.99
    shown, _ = words(lambda sheet: variation(table, sheet, most=5))
    named = [text for text in shown if text.startswith("R")]
    assert len(named) == 5
    assert "R17" in named
