"""The figure: size, type, layout without overlap, sides, and files that do not change."""

from __future__ import annotations

import re
import subprocess
import sys
from itertools import combinations
from pathlib import Path

import matplotlib
import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.text import Text
from PIL import Image

from seedaudit.report.charts import MOST_REGIONS, binned_medians, shown_regions
from seedaudit.report.figures import PAGE, PANELS, draw_panel, figure, save_figure
from seedaudit.report.panels import _blend
from seedaudit.report.style import DIVERGING, fitted, look, text_width
from tests.report.invented import LONG, MARKUP, STATES, head_grid, invented_seed

CASES = {
    "ordinary": {},
    "set aside": {"aside": 7, "grid": head_grid(4.0)},
    "long names": {"names": [f"{LONG} {i}" for i in range(12)]},
    "forty regions": {"names": [f"{i} {LONG}" for i in range(40)], "negative": False},
    "too many regions": {"names": [f"R{i}" for i in range(160)], "count": 300, "aside": 100},
    "one region": {"names": ["Only"], "states": ["silent"], "participants": 3, "count": 3},
    "no regions": {"names": [], "contested": False, "participants": 1},
    "only n/a": {"names": ["A", "B"], "states": ["n/a"]},
    "nothing anywhere": {"nothing": True},
    "oblique": {"grid": head_grid(oblique=True), "names": MARKUP},
}


def drawn_texts(page: Figure) -> list[Text]:
    """Every text that reaches the paper, found by watching the drawing."""
    seen: list[Text] = []
    draw = Text.draw

    def watched(self, renderer):
        if self.get_visible() and self.get_text().strip():
            seen.append(self)
        return draw(self, renderer)

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(Text, "draw", watched)
        page.canvas.draw()
    return seen


@pytest.fixture(scope="module", params=CASES)
def drawn(request):
    """A whole figure and its texts."""
    page = figure(invented_seed(**CASES[request.param]))
    return page, drawn_texts(page)


def all_axes(page: Figure) -> list[Axes]:
    return [ax for ax in page.findobj(Axes) if ax.axison]


def test_it_is_180_mm_wide_and_fits_one_page(drawn):
    page, _ = drawn
    width, height = page.get_size_inches() * 25.4
    assert width == pytest.approx(180)
    assert height <= PAGE + 1e-6


def test_no_type_is_smaller_than_7_points(drawn):
    _, texts = drawn
    assert len(texts) > 20
    assert min(text.get_fontsize() for text in texts) >= 7


def test_no_text_overlaps_another_or_leaves_the_page(drawn):
    page, texts = drawn
    boxes = [(t.get_text(), t.get_window_extent().shrunk(0.98, 0.94)) for t in texts]
    clashes = [(a, b) for (a, ba), (b, bb) in combinations(boxes, 2) if ba.overlaps(bb)]
    assert not clashes
    width, height = page.bbox.size
    for text, box in boxes:
        assert box.x0 >= 0, text
        assert box.y0 >= 0, text
        assert box.x1 <= width, text
        assert box.y1 <= height, text


def test_no_text_lies_over_the_axes_of_another_part(drawn):
    page, texts = drawn
    for ax in all_axes(page):
        frame = ax.get_window_extent().shrunk(0.99, 0.99)
        own = set(ax.findobj(Text))
        over = [
            t.get_text() for t in texts if t not in own and t.get_window_extent().overlaps(frame)
        ]
        assert not over


def test_no_axes_overlap(drawn):
    page, _ = drawn
    frames = [ax.get_window_extent().shrunk(0.99, 0.99) for ax in all_axes(page)]
    assert len(frames) >= 6
    assert not any(a.overlaps(b) for a, b in combinations(frames, 2))


def test_every_state_stands_as_a_word():
    page = figure(invented_seed())
    words = {text.get_text() for text in drawn_texts(page)}
    assert set(STATES) <= words


def test_markup_in_names_is_shown_as_it_is():
    page = figure(invented_seed(names=MARKUP))
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
    assert f"Dice − ({count} of 100 undefined)" in {t.get_text() for t in drawn_texts(page)}


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
    letters = [t.get_text() for t in drawn_texts(figure(invented_seed(grid=head_grid(4.0))))]
    assert letters.count("L") == letters.count("R") == 6  # two near slices, four whole ones
    assert letters.count("P") == letters.count("A") == 1


def test_colours_of_both_tails_meet_in_the_middle():
    ground = np.zeros((1, 3))
    full, none = np.ones(1), np.zeros(1)
    np.testing.assert_allclose(_blend(ground, full, none)[0], DIVERGING(1.0)[:3])
    np.testing.assert_allclose(_blend(ground, none, full)[0], DIVERGING(0.0)[:3])
    np.testing.assert_allclose(_blend(ground, none, none), ground)
    both = _blend(ground, full / 2, full / 2)[0]
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
def test_panels_fill_axes_of_the_reader(panel):
    page = Figure(figsize=(7, 4))
    matplotlib.backends.backend_agg.FigureCanvasAgg(page)
    ax = page.add_subplot()
    assert draw_panel(invented_seed(), panel, ax) is ax
    assert drawn_texts(page)
    assert invented_seed().plot(panel).figure.get_size_inches()[0] > 1


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
    save_figure(invented_seed(), folder)
    return folder


def test_the_same_result_gives_the_same_bytes(files, tmp_path):
    with matplotlib.rc_context({"font.size": 20, "axes.grid": True, "pdf.fonttype": 3}):
        before = dict(matplotlib.rcParams)
        save_figure(invented_seed(), tmp_path)
        assert dict(matplotlib.rcParams) == before
    names = sorted(path.name for path in files.iterdir())
    assert names == ["figure.pdf", "figure.png", "figure.svg"]
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
    assert "Four panels" in svg
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
