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
from matplotlib.colors import Colormap, LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.legend import Legend
from matplotlib.text import Text
from matplotlib.textpath import text_to_path

MM_PER_INCH = 25.4
MM_PER_POINT = MM_PER_INCH / 72

TYPE = 7.0
"""Size of all text but panel titles, points; the smallest that print allows."""
TITLE_TYPE = 8.0
LINE = 3.3
"""Height of a line of text with its leading, mm."""
TITLE = 5.2
"""Height that a panel title takes, mm."""
LEAST_PART = 2.0
"""Smaller parts of a panel show nothing, mm."""


def _map(name: str, colours: Sequence[Any]) -> Colormap:
    return LinearSegmentedColormap.from_list(name, colours, N=511)


@dataclass(frozen=True)
class Palette:
    """The colours of one scheme.

    `plus` and `minus` are the two ends of the diverging map, `_pale` what lies between an end and
    the middle. They are apart for every common kind of colour vision.
    """

    paper: str
    ink: str
    soft: str
    pale: str
    plus: str
    plus_pale: str
    neutral: str
    minus_pale: str
    minus: str
    anatomy: Colormap

    @property
    def diverging(self) -> Colormap:
        """Class minus to class plus through a neutral middle."""
        ends = [self.minus, self.minus_pale, self.neutral, self.plus_pale, self.plus]
        return _map("seedaudit", ends)


LIGHT = Palette(
    paper="#ffffff",
    ink="#1a1a1a",
    soft="#5f5f5f",
    pale="#c9c9c9",
    plus="#8f3f00",
    plus_pale="#e59a4c",
    neutral="#eeeae4",
    minus_pale="#7f97d8",
    minus="#1f2f7a",
    # light greys under dark ink; what is empty stays the white of the paper
    anatomy=LinearSegmentedColormap.from_list(
        "seedaudit-anatomy",
        [(0.0, "#ffffff"), (0.05, "#6c6c6c"), (0.4, "#8c8c8c"), (1.0, "#f4f4f4")],
    ),
)
"""Dark ink on white, for print."""

DARK = Palette(
    paper="#15171b",
    ink="#f1efe9",
    soft="#b3b0aa",
    pale="#4a4c53",
    plus="#ffc078",
    plus_pale="#bd6b22",
    neutral="#3b3a40",
    minus_pale="#5b74cf",
    minus="#b3c4ff",
    anatomy=LinearSegmentedColormap.from_list(
        "seedaudit-dark-anatomy",
        [(0.0, "#15171b"), (0.05, "#6e7078"), (0.4, "#53555c"), (1.0, "#26282d")],
    ),
)
"""Light ink on dark, for screens: the ends of the diverging map are bright, its middle is dark."""

INK, ANATOMY, DIVERGING = LIGHT.ink, LIGHT.anatomy, LIGHT.diverging

_SETTINGS: Any = {
    "font.family": ["DejaVu Sans"],  # comes with matplotlib, so the bytes do not depend on the host
    "font.size": TYPE,
    "text.parse_math": False,  # a dollar sign in the name of a region is a dollar sign
    "axes.linewidth": 0.6,
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


_PAPER = ("axes.facecolor", "figure.facecolor", "savefig.facecolor")
_INKED = (
    "text.color", "axes.edgecolor", "axes.labelcolor", "xtick.color", "ytick.color", "hatch.color",
)  # fmt: skip


@contextmanager
def look(colours: Palette = LIGHT) -> Iterator[None]:
    """The settings of this program's figures, for as long as the context lasts."""
    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(_SETTINGS)
        scheme: Any = dict.fromkeys(_PAPER, colours.paper) | dict.fromkeys(_INKED, colours.ink)
        matplotlib.rcParams.update(scheme)
        yield


def blank_figure(width: float, height: float, colours: Palette = LIGHT) -> Figure:
    """An empty figure of so many mm, without any window system behind it."""
    size = (width / MM_PER_INCH, height / MM_PER_INCH)
    figure = Figure(figsize=size, facecolor=colours.paper)
    FigureCanvasAgg(figure)
    return figure


@dataclass(frozen=True)
class Sheet:
    """Axes used as a blank sheet, on which parts are placed in mm from the top left corner.

    Parameters
    ----------
    ax : Axes
        Loses its own frame and ticks.
    colours : Palette
    """

    ax: Axes
    colours: Palette = LIGHT

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


def mark(shape: str, size: float, fill: str, edge: str, width: float = 0.6) -> dict[str, Any]:
    """Look of a marker without a line, as keywords of `Axes.plot`; sizes in points."""
    return {
        "linestyle": "none",
        "marker": shape,
        "markersize": size,
        "markerfacecolor": fill,
        "markeredgecolor": edge,
        "markeredgewidth": width,
    }


def wrapped(text: str, width: float) -> str:
    """The text in lines no wider than so many mm; a longer word loses its middle."""
    lines = [""]
    for word in text.split():
        longer = f"{lines[-1]} {word}".strip()
        if text_width(longer) <= width:
            lines[-1] = longer
        elif lines[-1]:
            lines.append(fitted(word, width))
        else:
            lines[-1] = fitted(word, width)
    return "\n".join(lines)


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
