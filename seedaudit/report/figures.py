"""The figures: their panels by name, the pages they make, and the files they go to."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from seedaudit.report.captions import alternative_text, caption, lettered
from seedaudit.report.charts import claims, claims_height, regions, regions_height
from seedaudit.report.landscape import front, front_height, landscape, landscape_height
from seedaudit.report.methods import plain
from seedaudit.report.motion import motion, motion_height, motion_known
from seedaudit.report.panels import agreement, agreement_height, cloud, cloud_height
from seedaudit.report.reach import decay, decay_height, rose, rose_height
from seedaudit.report.several import radii, radii_height, seeds, seeds_height
from seedaudit.report.style import (
    DARK,
    LIGHT,
    MM_PER_INCH,
    Palette,
    Sheet,
    blank_figure,
    look,
)
from seedaudit.results import SeedAudit

WIDTH = 180.0
"""Width of a figure, mm: a full page of most journals."""
WIDTHS = 85.0, 400.0
"""Least and largest width, mm: from one column of a journal to a poster."""
STACKED = 150.0
"""Below this width every panel has a row of its own, mm."""

MARGIN = 3.0
BETWEEN = 5.0
LEFT_SHARE = 0.657
"""Of the width that two panels side by side share."""
PAGE = 257.0
"""Most that a figure of `WIDTH` may be high, mm: an A4 page with 20 mm above and below."""
SLICE_HEIGHTS = 30.0, 44.0
"""Least and most that an axial slice takes, mm; what lies between depends on the rows."""

FORMATS = ("pdf", "svg", "png")

PANELS: dict[str, Callable[..., None]] = {
    "cloud": cloud,
    "agreement": agreement,
    "decay": decay,
    "regions": regions,
    "rose": rose,
    "claims": claims,
    "landscape": landscape,
    "front": front,
    "seeds": seeds,
    "radii": radii,
    "motion": motion,
}
"""Panels by name; each draws one seed on a sheet."""

FIGURES: dict[str, tuple[tuple[str, ...], ...]] = {
    "figure": (("cloud",), ("agreement",), ("decay", "rose"), ("regions", "claims")),
    "steadier": (("landscape",), ("front",)),
    "radii": (("radii",),),
    "motion": (("motion",),),
}
"""Rows of panels by the name of the file."""


@dataclass(frozen=True)
class Drawing:
    """How figures are drawn.

    Parameters
    ----------
    formats : sequence of {"pdf", "svg", "png"}
    width : float
        mm, within `WIDTHS`.
    panels : sequence of str, optional
        Names of `PANELS`; default: all.
    dark : bool
        Light ink on dark.
    """

    formats: Sequence[str] = FORMATS
    width: float = WIDTH
    panels: Sequence[str] | None = None
    dark: bool = False

    @property
    def colours(self) -> Palette:
        """The scheme."""
        return DARK if self.dark else LIGHT

    def wants(self, panel: str) -> bool:
        """Whether a panel is to be drawn."""
        return self.panels is None or panel in self.panels

    def rows(self, name: str) -> list[tuple[str, ...]]:
        """The rows of a figure with the panels that are wanted; none: no such figure."""
        rows = [tuple(filter(self.wants, row)) for row in FIGURES[name]]
        if self.width < STACKED:
            rows = [(panel,) for panel in PANELS if any(panel in row for row in rows)]
        return [row for row in rows if row]


def present(name: str, seed: SeedAudit) -> bool:
    """Whether the result holds what a figure shows."""
    if name == "motion":
        return motion_known(seed)
    return name == "figure" or name in seed.tables


def draw_panel(seed: SeedAudit, panel: str, ax: Axes | None = None, **options: Any) -> Axes:
    """Draw one panel of a figure.

    Parameters
    ----------
    seed : SeedAudit
    panel : str
        A name of `PANELS`.
    ax : Axes, optional
        Filled with the panel, in type of fixed size; default: a new figure of fitting size.
    **options
        `letter`; for `agreement`, `places`: how many contested places; for `regions` and `radii`,
        `most`: how many rows; for `seeds`, `between`: the table that compares the seeds.

    Returns
    -------
    Axes
        The parts of the panel are its child axes.

    Raises
    ------
    ValueError
        If there is no panel of that name, or no room for it.
    """
    if panel not in PANELS:
        raise ValueError(f"no panel {panel!r}; there are {', '.join(PANELS)}")
    with look():
        if ax is None:
            rows = [row for rows in FIGURES.values() for row in rows if panel in row]
            row = rows[0] if rows else (panel,)
            width = _widths(row, WIDTH)[row.index(panel)]
            height = (
                seeds_height(options.get("between"), width)
                if panel == "seeds"
                else _height(panel, width, seed)
            )
            page = blank_figure(width + 2 * MARGIN, height + 2 * MARGIN)
            ax = _sheet(page, MARGIN, MARGIN, width, height).ax
        PANELS[panel](seed, Sheet(ax), **options)
    return ax


def figure(seed: SeedAudit, drawing: Drawing | None = None, *, name: str = "figure") -> Figure:
    """One figure of a seed: the supplementary figure, or another name of `FIGURES`."""
    drawing = drawing or Drawing()
    rows = drawing.rows(name)
    heights = _row_heights(rows, seed, drawing.width)
    total = sum(heights) + BETWEEN * (len(rows) - 1) + 2 * MARGIN
    letters = lettered([panel for panel in PANELS if any(panel in row for row in rows)])
    with look(drawing.colours):
        page = blank_figure(drawing.width, total, drawing.colours)
        top = MARGIN
        for row, height in zip(rows, heights, strict=True):
            left = MARGIN
            for panel, width in zip(row, _widths(row, drawing.width), strict=True):
                sheet = _sheet(page, left, top, width, height, drawing.colours)
                PANELS[panel](seed, sheet, letters[panel])
                left += width + BETWEEN
            top += height + BETWEEN
    return page


def _widths(row: Sequence[str], width: float) -> list[float]:
    """Widths of the panels of a row on a page of that width, mm."""
    inner = width - 2 * MARGIN
    if len(row) == 1:
        return [inner]
    left = LEFT_SHARE * (inner - BETWEEN)
    return [left, inner - BETWEEN - left]


def _height(panel: str, width: float, seed: SeedAudit, room: float = np.inf) -> float:
    """Height of a panel at that width, mm; `room` limits those made of rows."""
    tables = seed.tables
    heights: dict[str, Callable[[], float]] = {
        "cloud": lambda: cloud_height(width),
        "agreement": lambda: agreement_height(width, seed, SLICE_HEIGHTS[1]),
        "decay": lambda: decay_height(width, seed),
        "rose": lambda: rose_height(width),
        "regions": lambda: regions_height(tables["regions"], width, room),
        "claims": lambda: claims_height(tables.get("claims"), width, room),
        "landscape": lambda: landscape_height(width),
        "front": lambda: front_height(width),
        "radii": lambda: radii_height(tables.get("radii")),
        "motion": lambda: motion_height(width),
    }
    return heights[panel]()


def _row_heights(rows: Sequence[Sequence[str]], seed: SeedAudit, width: float) -> list[float]:
    """Heights of the rows, so that they fit `PAGE` where two panels stand side by side."""

    def height(row: Sequence[str], room: float = np.inf) -> float:
        return max(map(partial(_height, seed=seed, room=room), row, _widths(row, width)))

    if width < STACKED:
        return [height(row) for row in rows]
    free = PAGE - BETWEEN * (len(rows) - 1) - 2 * MARGIN
    slices = rows.index(("agreement",)) if ("agreement",) in rows else None
    least = agreement_height(width - 2 * MARGIN, seed, SLICE_HEIGHTS[0])
    fixed = sum(height(row) for row in rows if not {"regions", "claims", "agreement"} & set(row))
    room = free - fixed - (0 if slices is None else least)
    heights = [height(row, room) for row in rows]
    if slices is not None:
        heights[slices] = max(least, heights[slices] - max(0, sum(heights) - free))
    return heights


def _sheet(
    page: Figure, left: float, top: float, width: float, height: float, colours: Palette = LIGHT
) -> Sheet:
    """A sheet on a page, in mm from its top left corner."""
    across, down = page.get_size_inches() * MM_PER_INCH
    bounds = (left / across, 1 - (top + height) / down, width / across, height / down)
    return Sheet(page.add_axes(bounds), colours)


def save_figure(
    seed: SeedAudit, folder: Path, drawing: Drawing | None = None, *, name: str = "figure"
) -> None:
    """Write one figure in every format, and its caption; the same seed gives the same bytes."""
    drawing = drawing or Drawing()
    page = figure(seed, drawing, name=name)
    panels = [panel for row in drawing.rows(name) for panel in row]
    described = alternative_text(seed, panels)
    write_formats(page, folder, name, drawing, f"Seed placement audit: {seed.name}", described)
    text = (
        f"## Caption\n\n{plain(caption(seed, panels))}\n\n"
        f"## Alternative text\n\n{plain(described)}\n"
    )
    (folder / f"{name}_caption.md").write_text(text, encoding="utf-8", newline="\n")


def write_formats(
    page: Figure, folder: Path, name: str, drawing: Drawing, title: str, described: str
) -> None:
    """Write a page in every format that is wanted, with its title and what it shows, undated."""
    metadata: dict[str, dict[str, Any]] = {
        "pdf": {"Title": title, "Subject": described, "CreationDate": None, "ModDate": None},
        "svg": {"Title": title, "Description": described, "Date": None},
        "png": {"Title": title},
    }
    with look(drawing.colours):
        for kind in drawing.formats:
            page.savefig(folder / f"{name}.{kind}", dpi=300, metadata=metadata[kind])


def save_figures(seed: SeedAudit, folder: Path, drawing: Drawing | None = None) -> None:
    """Write every figure that the result holds something for and that is wanted."""
    drawing = drawing or Drawing()
    for name in FIGURES:
        if drawing.rows(name) and present(name, seed):
            save_figure(seed, folder, drawing, name=name)
