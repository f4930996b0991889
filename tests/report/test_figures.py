"""The figure: size, type, layout without overlap, sides, and files that do not change."""

from __future__ import annotations

import re
import subprocess
import sys
from dataclasses import replace
from itertools import combinations
from pathlib import Path

import matplotlib
import numpy as np
import pandas as pd
import pytest
from matplotlib.axes import Axes
from matplotlib.colors import to_hex, to_rgb
from matplotlib.figure import Figure
from matplotlib.patches import Polygon
from matplotlib.text import Text
from matplotlib.transforms import Bbox
from PIL import Image

from seedaudit.report.charts import MOST_REGIONS, binned_medians, shown_claims, shown_regions
from seedaudit.report.explorer_data import page_colours
from seedaudit.report.figures import (
    FIGURES,
    PAGE,
    PANELS,
    WIDTHS,
    Drawing,
    draw_panel,
    figure,
    save_figure,
    save_figures,
)
from seedaudit.report.panels import blend
from seedaudit.report.reach import WAYS
from seedaudit.report.style import DARK, DIVERGING, LIGHT, fitted, look, text_width, wrapped
from seedaudit.report.words import distance_words, percent
from tests.report.drawing import drawn_texts
from tests.report.invented import LONG, MARKUP, STATES, head_grid, invented_seed
from tests.report.test_landscape import searched, sources

SENTENCE = "Connectivity of the posterior midline with the parietal cortex is positive in everybody"

CASES = {
    "ordinary": {},
    "set aside": {"aside": 7, "grid": head_grid(4.0)},
    "long names": {
        "names": [f"{LONG} {i}" for i in range(12)],
        "claims": [f"{i} {SENTENCE}" for i in range(12)],
    },
    "forty regions": {"names": [f"{i} {LONG}" for i in range(40)], "negative": False, "claims": ()},
    "too many regions": {"names": [f"R{i}" for i in range(160)], "count": 300, "aside": 100},
    "one region": {
        "names": ["Only"],
        "states": ["silent"],
        "participants": 3,
        "count": 3,
        "claims": ("Only",),
    },
    "no regions": {"names": [], "contested": False, "participants": 1, "ceiling": False},
    "no claims": {"claims": (), "ceiling": False},
    "one participant": {"participants": 1},
    "only n/a": {"names": ["A", "B"], "states": ["n/a"]},
    "nothing anywhere": {"nothing": True},
    "oblique": {"grid": head_grid(oblique=True), "names": MARKUP, "claims": MARKUP},
    "an older result": {"worth": False},
    "tiny effects": {"scale": 1e-3},
    "tinier effects": {"scale": 2e-6},
}
PAGES = [
    *((case, 180.0) for case in CASES),
    ("ordinary", WIDTHS[0]),
    ("long names", 112.0),
    ("no claims", 250.0),
]


@pytest.fixture(scope="module", params=PAGES, ids=str)
def drawn(request):
    """A whole figure, what stands on it, and how wide it should be, mm."""
    case, width = request.param
    page = figure(invented_seed(**{"worth": True} | CASES[case]), Drawing(width=width))
    return page, boxes_of(page), width


def boxes_of(page: Figure) -> list[tuple[Text, Bbox]]:
    return [(text, text.get_window_extent()) for text in drawn_texts(page)]


def all_axes(page: Figure) -> list[Axes]:
    return [ax for ax in page.findobj(Axes) if ax.axison]


def test_it_is_as_wide_as_asked_and_fits_one_page(drawn):
    page, _, asked = drawn
    width, height = page.get_size_inches() * 25.4
    assert width == pytest.approx(asked)
    if asked >= 180:
        assert height <= PAGE + 1e-6


def test_no_type_is_smaller_than_7_points(drawn):
    _, boxes, _ = drawn
    assert len(boxes) > 20
    assert min(text.get_fontsize() for text, _ in boxes) >= 7


def test_no_text_overlaps_another_or_leaves_the_page(drawn):
    page, boxes, _ = drawn
    inner = [(text.get_text(), box.shrunk(0.98, 0.94)) for text, box in boxes]
    clashes = [(a, b) for (a, ba), (b, bb) in combinations(inner, 2) if ba.overlaps(bb)]
    assert not clashes
    width, height = page.bbox.size
    for text, box in inner:
        assert box.x0 >= 0, text
        assert box.y0 >= 0, text
        assert box.x1 <= width, text
        assert box.y1 <= height, text


def test_no_text_lies_over_the_axes_of_another_part(drawn):
    page, boxes, _ = drawn
    for ax in all_axes(page):
        frame = ax.get_window_extent().shrunk(0.99, 0.99)
        over = [text for text, box in boxes if box.overlaps(frame)]
        own = set(ax.findobj(Text))
        assert [text.get_text() for text in over if text not in own] == []


def test_no_axes_overlap(drawn):
    page, _, _ = drawn
    frames = [ax.get_window_extent().shrunk(0.99, 0.99) for ax in all_axes(page)]
    assert len(frames) >= 1
    assert not any(a.overlaps(b) for a, b in combinations(frames, 2))


def test_every_state_stands_as_a_word():
    page = draw_panel(invented_seed(), "regions").figure
    words = {text.get_text() for text in drawn_texts(page)}
    assert set(STATES) <= words


def test_markup_in_names_is_shown_as_it_is():
    page = draw_panel(invented_seed(names=MARKUP), "regions").figure
    texts = {text.get_text(): text for text in drawn_texts(page)}
    assert set(MARKUP) <= set(texts)
    assert not any(texts[name].get_parse_math() for name in MARKUP)


def test_no_regions_says_why():
    page = draw_panel(invented_seed(names=[]), "regions").figure
    assert "The study named no regions" in " ".join(t.get_text() for t in drawn_texts(page))


def test_undefined_dice_is_counted():
    seed = invented_seed(negative=False)
    count = int(seed.tables["similarity"]["dice_negative"].iloc[1:].isna().sum())
    page = draw_panel(seed, "decay").figure
    words = [t.get_text() for t in drawn_texts(page) if t.get_text().startswith("Dice −")]
    assert words == [f"Dice −\nempty as reported\n{count} undefined"]


@pytest.mark.parametrize("storage", [((0, 1, 2), (1, 1, 1)), ((2, 1, 0), (1, -1, -1))])
@pytest.mark.parametrize("side", ["L", "R"])
def test_a_voxel_of_one_side_is_painted_beside_the_letter_of_that_side(side, storage):
    seed = invented_seed(grid=head_grid(oblique=True), storage=storage, contested=False)
    image = seed.maps["agreement_positive"]
    volume = np.array(image.dataobj)
    volume[np.isfinite(volume)] = 0
    where = np.linalg.inv(image.affine) @ [40.0 if side == "R" else -40.0, -20.0, 28.0, 1.0]
    volume[tuple(np.rint(where[:3]).astype(int))] = 1
    seed.maps["agreement_positive"] = type(image)(volume, image.affine)
    seed.maps["agreement_negative"] = type(image)(np.zeros_like(volume), image.affine)
    seed.maps["class_reported"] = type(image)(np.zeros_like(volume), image.affine)
    page = draw_panel(seed, "agreement").figure
    texts = {t.get_text(): t for t in drawn_texts(page)}
    # the painted pixels themselves, on the slice above the colour bar
    pixels = np.asarray(page.canvas.buffer_rgba())[::-1, :, :3].astype(int)
    rust = np.array(DIVERGING(1.0)[:3]) * 255
    rows, columns = np.nonzero(np.abs(pixels - rust).max(axis=-1) < 6)
    columns = columns[rows > texts[side].get_window_extent().y0]
    assert len(columns)
    near = abs(columns.mean() - texts[side].get_window_extent().x0)
    other = texts["L" if side == "R" else "R"]
    assert near < abs(columns.mean() - other.get_window_extent().x0)
    assert texts["L"].get_window_extent().x0 < texts["R"].get_window_extent().x0


def test_every_slice_has_its_letters():
    letters = [t.get_text() for t in drawn_texts(figure(invented_seed()))]
    assert letters.count("L") == letters.count("R") == 6  # two near slices, four whole ones
    assert letters.count("P") == letters.count("A") == 1


def test_colours_of_both_tails_meet_in_the_middle():
    ground = np.zeros((1, 3))
    full, none = np.ones(1), np.zeros(1)
    np.testing.assert_allclose(blend(ground, full, none, LIGHT)[0], DIVERGING(1.0)[:3])
    np.testing.assert_allclose(blend(ground, none, full, LIGHT)[0], DIVERGING(0.0)[:3])
    np.testing.assert_allclose(blend(ground, none, none, LIGHT), ground)
    both = blend(ground, full / 2, full / 2, LIGHT)[0]
    np.testing.assert_allclose(
        both, (np.array(DIVERGING(0.75)[:3]) + np.array(DIVERGING(0.25)[:3])) / 2
    )


def test_the_diverging_map_darkens_to_either_end():
    """So that grey copies keep the size of a share; luminance weights of ITU-R BT.709."""
    luminance = DIVERGING(np.linspace(0, 1, 101))[:, :3] @ [0.2126, 0.7152, 0.0722]
    assert (np.diff(luminance[:51]) > 0).all()
    assert (np.diff(luminance[50:]) < 0).all()


def test_medians_of_shells_and_of_bins():
    shells = np.repeat([2.0, 4.0], 10)
    values = np.tile(np.arange(10.0), 2)
    np.testing.assert_allclose(binned_medians(shells, values), [[2, 4], [4.5, 4.5]])
    ball = np.linspace(0, 8, 60)
    x, y = binned_medians(ball, 1 - ball / 10)
    assert len(x) == 6
    np.testing.assert_allclose(y, [np.median(part) for part in np.split(1 - ball / 10, 6)])
    assert len(binned_medians(np.zeros(0), np.zeros(0))[0]) == 0


def test_too_many_regions_leave_the_least_stable():
    table = invented_seed(names=[f"R{i}" for i in range(160)]).tables["regions"]
    shown = shown_regions(table, MOST_REGIONS)
    assert len(shown) == MOST_REGIONS
    left_out = table.drop(shown.index)["stability"].dropna()
    assert shown["stability"].max() <= left_out.min()
    assert shown["index"].is_monotonic_increasing


def test_long_names_lose_their_middle():
    with look():
        short = fitted(LONG + "\nand more $x$", 40)
        assert text_width(short) <= 40
        assert short.startswith("Left")
        assert short.endswith("$x$")
        assert fitted("Short", 40) == "Short"


@pytest.mark.parametrize("panel", PANELS)
@pytest.mark.parametrize("worth", [True, False])
def test_panels_fill_axes_of_the_reader(panel, worth):
    page = Figure(figsize=(7, 4))
    matplotlib.backends.backend_agg.FigureCanvasAgg(page)
    ax = page.add_subplot()
    seed = invented_seed(worth=worth)
    assert draw_panel(seed, panel, ax) is ax
    assert drawn_texts(page)
    assert seed.plot(panel).figure.get_size_inches()[0] > 1


def words_of(seed, panel, **options):
    """The texts of one panel, and its parts."""
    ax = draw_panel(seed, panel, **options)
    return [text.get_text() for text in drawn_texts(ax.figure)], ax.child_axes


def test_the_decay_is_what_its_tables_say():
    """Points, fit, ceiling, floor, geometry and tolerance, of each measure in its own chart."""
    seed = invented_seed(worth=True)
    words, charts = words_of(seed, "decay")
    drawn = seed.tables["similarity"].iloc[1:]
    measures = ("dice_positive", "dice_negative", "spatial_r", "ceiling_relative")
    for measure, chart in zip(measures, charts, strict=True):
        shown = [np.column_stack(line.get_data()).astype(float) for line in chart.lines]
        fit = seed.tables["decay"].query("measure == @measure and direction == 'all'")
        points = drawn[["distance", measure]].to_numpy()
        low, high = chart.get_ylim()
        wanted = [points[(points[:, 1] >= low) & (points[:, 1] <= high)]]
        for level in ("fitted", "ceiling", "floor", "geometry"):
            if fit[level].notna().any():
                wanted.append(fit[["distance", level]].to_numpy())
        limits = seed.tables["tolerance"].query("measure == @measure and direction == 'all'")
        for row in limits.itertuples():
            wanted.append(np.array([[row.tolerance, row.target]]))
            assert any(distance_words(row.tolerance, row.censored) in text for text in words)
        for want in wanted:
            assert any(
                line.shape == want.shape and np.allclose(line, want, equal_nan=True)
                for line in shown
            ), measure
    assert len(wanted) == 5  # ceiling-relative: points, fit, ceiling, floor, tolerance


def petals(seed):
    words, parts = words_of(seed, "rose")
    shapes = [patch for patch in parts[0].patches if isinstance(patch, Polygon)]
    return words, shapes


def test_petals_are_as_long_as_the_tolerance_and_point_that_way():
    seed = invented_seed(worth=True)
    table = seed.tables["tolerance"].query("measure == 'ceiling_relative'").set_index("direction")
    table.loc["left", ["tolerance", "censored"]] = 7.25, True
    table.loc["superior", "tolerance"] = np.nan
    seed = replace(seed, tables=dict(seed.tables) | {"tolerance": table.reset_index()})
    words, shapes = petals(seed)
    ways = [way for way in WAYS if way != "superior"]
    for way, shape in zip(ways, shapes, strict=True):
        corners = shape.get_xy()
        tip = corners[np.linalg.norm(corners, axis=1).argmax()]
        assert np.linalg.norm(tip) == pytest.approx(table.loc[way, "tolerance"])
        assert np.degrees(np.arctan2(tip[1], tip[0])) % 360 == pytest.approx(WAYS[way])
        assert (shape.get_linestyle() == "dashed") == (way == "left")
    assert "left\nat least 7.2 mm" in words
    assert "superior\nunknown" in words
    for way in ("right", "anterior", "posterior", "inferior"):
        assert f"{way}\n{distance_words(table.loc[way, 'tolerance'], False)}" in words


def test_claims_show_share_range_and_verdict():
    seed = invented_seed(worth=True)
    words, parts = words_of(seed, "claims")
    table = seed.tables["claims"]
    for row, share, effect in zip(table.itertuples(), parts[::2], parts[1::2], strict=True):
        assert {row.claim, row.verdict, percent(row.share_passing)} <= set(words)
        assert share.patches[0].get_width() == pytest.approx(row.share_passing)
        assert share.get_xlim() == (0, 1)
        (band,) = effect.patches
        assert band.get_x() == pytest.approx(row.effect_min)
        assert band.get_x() + band.get_width() == pytest.approx(row.effect_max)
        assert effect.lines[1].get_xdata()[0] == pytest.approx(row.reported_effect)
        hollow = effect.lines[1].get_markerfacecolor() == LIGHT.paper
        assert hollow != row.passes_reported


def test_too_many_claims_leave_those_that_do_not_hold():
    table = invented_seed(worth=True, claims=[str(i) for i in range(12)]).tables["claims"]
    shown = shown_claims(table, 6)
    assert set(table.query("verdict == 'breaks'")["claim"]) <= set(shown["claim"])
    assert "holds" not in set(shown["verdict"])
    assert len(shown) == 6
    assert shown.index.is_monotonic_increasing


@pytest.mark.parametrize(
    ("panel", "case", "reason"),
    [
        ("claims", {"claims": ()}, "names no table of claims"),
        ("decay", {"ceiling": False}, "too few participants for two halves"),
        ("decay", {"nothing": True}, "both maps are empty"),
        ("rose", {"count": 2}, "No tolerance"),
        ("landscape", {}, "No steadier seed was searched for"),
        ("seeds", {}, "no other seed"),
        ("radii", {}, "have one radius"),
    ],
)
def test_a_panel_without_content_says_why(panel, case, reason):
    words, _ = words_of(invented_seed(worth=True, **case), panel)
    assert reason in " ".join(" ".join(words).split())


def test_a_reported_map_that_halves_do_not_repeat_has_no_ceiling_relative_stability():
    seed = invented_seed(worth=True)
    similar = seed.tables["similarity"].assign(ceiling_relative=np.nan)
    seed = replace(seed, tables=dict(seed.tables) | {"similarity": similar})
    words, _ = words_of(seed, "decay")
    assert "is not repeated across halves" in " ".join(" ".join(words).split())


def test_similarities_beyond_the_axis_stand_at_its_edge():
    seed = invented_seed(worth=True)
    similar = seed.tables["similarity"].copy()
    similar.loc[1:2, "ceiling_relative"] = 4.0, -3.0
    seed = replace(seed, tables=dict(seed.tables) | {"similarity": similar})
    _, charts = words_of(seed, "decay")
    low, high = charts[3].get_ylim()
    edges = [line.get_ydata() for line in charts[3].lines if len(line.get_ydata()) == 1]
    assert {low, high} <= {float(y[0]) for y in edges}
    assert -0.5 < low < high < 1.5


def test_the_ceiling_of_a_region_is_marked():
    seed = invented_seed(worth=True)
    _, (_, stability) = words_of(seed, "regions")
    marks = next(line for line in stability.lines if line.get_marker() == "|")
    np.testing.assert_allclose(marks.get_xdata(), seed.tables["regions"]["ceiling"])


def test_the_dark_scheme_has_no_colour_of_the_light_one():
    page = figure(invented_seed(worth=True), Drawing(dark=True))
    with look(DARK):
        page.canvas.draw()
    light = {to_hex(getattr(LIGHT, name)) for name in ("paper", "ink", "soft", "pale", "plus")}
    for artist in page.findobj(lambda a: a.get_visible()):
        for part in ("color", "facecolor", "edgecolor", "markerfacecolor", "markeredgecolor"):
            colour = getattr(artist, f"get_{part}", lambda: None)()
            if isinstance(colour, str) and colour != "none":
                assert to_hex(colour) not in light, (artist, part)
    pixels = np.asarray(page.canvas.buffer_rgba())[..., :3]
    assert np.median(pixels) < 40
    assert page_colours()["dark"]["ink"] == [round(c * 255) for c in to_rgb(DARK.ink)]


def test_the_dark_diverging_map_brightens_to_either_end():
    """As the light one darkens; luminance weights of ITU-R BT.709."""
    luminance = DARK.diverging(np.linspace(0, 1, 101))[:, :3] @ [0.2126, 0.7152, 0.0722]
    assert (np.diff(luminance[:50]) < 0).all()
    assert (np.diff(luminance[51:]) > 0).all()


def test_chosen_panels_get_letters_in_order():
    page = figure(invented_seed(worth=True), Drawing(panels=("claims", "decay")))
    assert letters(page) == ["a", "b"]
    assert letters(figure(invented_seed(worth=True), Drawing(panels=("rose",)))) == []


def letters(page: Figure) -> list[str]:
    """The letters of the panels."""
    texts = [t for t in drawn_texts(page) if t.get_fontsize() > 7 and t.get_weight() == "bold"]
    return [text.get_text() for text in texts]


def test_figures_of_other_tables_appear_with_them(tmp_path):
    seed = searched(30)
    people = pd.DataFrame(
        {
            "mean_motion": [0.1, 0.2, 0.3],
            "median_spatial_r": [0.9, 0.8, 0.8],
            "min_spatial_r": [0.7, 0.5, 0.4],
        }
    )
    more = {"radii": sources(["A", "B"]), "participants": people}
    seed = replace(seed, tables=dict(seed.tables) | more)
    panels = ("rose", "front", "radii", "motion")
    save_figures(seed, tmp_path, Drawing(formats=("png",), panels=panels))
    assert {path.stem for path in tmp_path.glob("*.png")} == set(FIGURES)
    assert "One panel" in (tmp_path / "steadier_caption.md").read_text(encoding="utf-8")


@pytest.mark.parametrize("width", [WIDTHS[0], 180.0])
@pytest.mark.parametrize("name", ["steadier", "radii"])
def test_the_other_figures_hold_together(name, width):
    seed = searched(30)
    seed = replace(seed, tables=dict(seed.tables) | {"radii": sources(["A", LONG, *MARKUP])})
    page = figure(seed, Drawing(width=width), name=name)
    test_no_text_overlaps_another_or_leaves_the_page((page, boxes_of(page), width))
    test_no_axes_overlap((page, None, width))


def test_wrapped_lines_fit():
    with look():
        lines = wrapped(f"{SENTENCE} {'x' * 80}", 30).splitlines()
        assert len(lines) > 3
        assert max(map(text_width, lines)) <= 30


def test_axes_without_room_are_refused():
    ax = Figure(figsize=(1, 0.6)).add_subplot()
    with pytest.raises(ValueError, match="have no room for this panel"):
        draw_panel(invented_seed(), "cloud", ax)


def test_an_unknown_panel_is_named():
    with pytest.raises(ValueError, match="no panel 'clouds'; there are cloud, agreement"):
        draw_panel(invented_seed(), "clouds")


@pytest.fixture(scope="module")
def files(tmp_path_factory):
    folder = tmp_path_factory.mktemp("figure")
    save_figure(invented_seed(worth=True), folder)
    return folder


def test_the_same_result_gives_the_same_bytes(files, tmp_path):
    with matplotlib.rc_context({"font.size": 20, "axes.grid": True, "pdf.fonttype": 3}):
        before = dict(matplotlib.rcParams)
        save_figure(invented_seed(worth=True), tmp_path)
        assert dict(matplotlib.rcParams) == before
    names = sorted(path.name for path in files.iterdir())
    assert names == ["figure.pdf", "figure.png", "figure.svg", "figure_caption.md"]
    for name in names:
        assert (files / name).read_bytes() == (tmp_path / name).read_bytes()


def test_files_have_size_fonts_and_words_and_no_date(files):
    pdf = (files / "figure.pdf").read_bytes()
    assert b"/FontFile2" in pdf
    assert b"/Type3" not in pdf
    assert b"Date" not in pdf
    box = re.search(rb"/MediaBox \[ ?0 0 ([\d.]+) ([\d.]+)", pdf)
    assert box is not None
    assert float(box[1]) == pytest.approx(180 / 25.4 * 72, abs=0.01)
    svg = (files / "figure.svg").read_text(encoding="utf-8")
    assert "<text" not in svg  # letters are outlines
    assert "<dc:date>" not in svg
    assert "Six panels" in svg
    with Image.open(files / "figure.png") as png:
        assert png.info["dpi"][0] == pytest.approx(300, abs=0.1)
        assert png.width == pytest.approx(180 / 25.4 * 300, abs=1)


def test_drawing_needs_no_pyplot():
    code = (
        "import sys; from tests.report.invented import *; "
        "from seedaudit.report.figures import figure; figure(invented_seed()).canvas.draw(); "
        "assert 'matplotlib.pyplot' not in sys.modules"
    )
    root = Path(__file__).resolve().parents[2]
    subprocess.run([sys.executable, "-c", code], cwd=root, check=True)
