"""One look for every panel: ink, colours, type size, and layout in millimetres.

Nothing here or in the panels goes through pyplot, and the reader's own settings of matplotlib are
neither used nor changed.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import matplotlib
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.legend import Legend
from matplotlib.text import Text
from matplotlib.textpath import text_to_path

MM_PER_INCH = 25.4
MM_PER_POINT = MM_PER_INCH / 72

INK, SOFT, PALE = "#1a1a1a", "#5f5f5f", "#c9c9c9"
TYPE = 7.0
"""Size of all text but panel titles, points; the smallest that print allows."""
TITLE_TYPE = 8.0
LINE = 3.3
"""Height of a line of text with its leading, mm."""
TITLE = 5.2
"""Height that a panel title takes, mm."""
LEAST_PART = 2.0
"""Smaller parts of a panel show nothing, mm."""

DIVERGING = LinearSegmentedColormap.from_list(
    "seedaudit", ["#1f2f7a", "#7f97d8", "#eeeae4", "#e59a4c", "#8f3f00"], N=511
)
"""Indigo to rust through a neutral middle: apart for every common kind of colour vision."""

ANATOMY = LinearSegmentedColormap.from_list(
    "seedaudit-anatomy",
    [(0.0, "#ffffff"), (0.05, "#6c6c6c"), (0.4, "#8c8c8c"), (1.0, "#f4f4f4")],
)
"""Light greys under dark ink; what is empty stays the white of the paper."""

_SETTINGS: Any = {
    "font.family": ["DejaVu Sans"],  # comes with matplotlib, so the bytes do not depend on the host
    "font.size": TYPE,
    "text.parse_math": False,  # a dollar sign in the name of a region is a dollar sign
    "text.color": INK,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.6,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": TYPE,
    "ytick.labelsize": TYPE,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.major.size": 2.5,
    "ytick.major.size": 2.5,
    "hatch.linewidth": 0.5,
    "legend.fontsize": TYPE,
    "legend.frameon": False,
    "pdf.fonttype": 42,
    "svg.fonttype": "path",  # the same letters with every viewer; the words are in the caption
    "svg.hashsalt": "seedaudit",
}


@contextmanager
def look() -> Iterator[None]:
    """The settings of this program's figures, for as long as the context lasts."""
    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(_SETTINGS)
        yield


def blank_figure(width: float, height: float) -> Figure:
    """A white figure of so many mm, without any window system behind it."""
    figure = Figure(figsize=(width / MM_PER_INCH, height / MM_PER_INCH), facecolor="white")
    FigureCanvasAgg(figure)
    return figure


@dataclass(frozen=True)
class Sheet:
    """Axes used as a blank sheet, on which parts are placed in mm from the top left corner.

    Parameters
    ----------
    ax : Axes
        Loses its own frame and ticks.
    """

    ax: Axes

    def __post_init__(self) -> None:
        self.ax.set_axis_off()

    @property
    def width(self) -> float:
        """mm"""
        return float(self.ax.bbox.width / self.ax.figure.dpi * MM_PER_INCH)

    @property
    def height(self) -> float:
        """mm"""
        return float(self.ax.bbox.height / self.ax.figure.dpi * MM_PER_INCH)

    def place(self, left: float, top: float, width: float, height: float) -> Axes:
        """New axes within the sheet.

        Raises
        ------
        ValueError
            If the sheet leaves no room for them.
        """
        w, h = self.width, self.height
        if min(width, height) < LEAST_PART:
            raise ValueError(
                f"axes of {w:.0f} by {h:.0f} mm have no room for this panel; give it about as "
                "much as it has in the figure"
            )
        bounds = (left / w, 1 - (top + height) / h, width / w, height / h)
        return self.ax.inset_axes(bounds)

    def write(self, left: float, top: float, text: str, **options: Any) -> Text:
        """Text with its upper left corner at that place, unless aligned otherwise."""
        options = {"va": "top", "ha": "left", "fontsize": TYPE, **options}
        x, y = left / self.width, 1 - top / self.height
        return self.ax.text(x, y, text, transform=self.ax.transAxes, **options)

    def title(self, text: str, letter: str = "") -> None:
        """The line over a panel, with its letter."""
        if letter:
            self.write(0, 0, letter, fontsize=TITLE_TYPE, weight="bold")
        self.write(4.5 if letter else 0, 0, text, fontsize=TITLE_TYPE)

    def legend(self, left: float, top: float, handles: Sequence[Artist], columns: int) -> Legend:
        """What the markers mean, with its upper left corner at that place."""
        return self.ax.legend(
            handles=list(handles),
            loc="upper left",
            bbox_to_anchor=(left / self.width, 1 - top / self.height),
            ncols=columns,
            fontsize=TYPE,
            frameon=False,
            borderpad=0,
            borderaxespad=0,
            handlelength=1.6,
            handletextpad=0.5,
            columnspacing=1.4,
            labelspacing=0.35,
        )


def text_width(text: str, size: float = TYPE) -> float:
    """Width of one line of text, mm."""
    prop = FontProperties(family="DejaVu Sans", size=size)
    width, _, _ = text_to_path.get_text_width_height_descent(text, prop, ismath=False)
    return float(width * MM_PER_POINT)


def fitted(text: str, width: float, size: float = TYPE) -> str:
    """The text on one line, with its middle left out where it is wider than so many mm.

    Long names of one list tend to differ at either end.
    """
    text = "".join(letter for letter in " ".join(text.split()) if letter.isprintable())
    if text_width(text, size) <= width:
        return text
    few, many = 0, len(text)
    while many - few > 1:
        kept = (few + many) // 2
        if text_width(_without_middle(text, kept), size) <= width:
            few = kept
        else:
            many = kept
    return _without_middle(text, few)


def _without_middle(text: str, kept: int) -> str:
    end = kept // 2
    return f"{text[: kept - end].rstrip()}…{text[len(text) - end :].lstrip()}"


def crowding(count: int) -> tuple[float, bool]:
    """Factor for the size of so many markers, and whether to keep them as pixels in vector files.

    Thousands of vector marks make a file that viewers choke on.
    """
    return min(1.0, max(0.35, (200 / max(count, 1)) ** 0.5)), count > 2000


def plain_axes(ax: Axes) -> None:
    """Leave the left and lower line of a chart only."""
    ax.spines[["top", "right"]].set_visible(False)
    ax.tick_params(labelsize=TYPE, pad=2)
