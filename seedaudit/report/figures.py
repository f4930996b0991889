"""The supplementary figure: its panels by name, the page they make, and the files it goes to."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from seedaudit.report.charts import decay, region_heights, regions
from seedaudit.report.panels import (
    AGREEMENT_FOOT,
    CLOUD_FOOT,
    COLUMNS,
    GAP,
    SLICE_TITLE,
    agreement,
    cloud,
)
from seedaudit.report.slices import body_frame
from seedaudit.report.style import LINE, MM_PER_INCH, TITLE, Sheet, blank_figure, look
from seedaudit.report.words import alternative_text
from seedaudit.results import SeedAudit

WIDTH = 180.0
"""Width of the figure, mm: a full page of most journals."""

MARGIN = 3.0
CLOUD_WIDTH = 108.0
BETWEEN = 5.0
PAGE = 257.0
"""Most that the figure may be high, mm: an A4 page with 20 mm above and below."""
SLICE_HEIGHTS = 30.0, 44.0
"""Least and most that an axial slice takes, mm; what lies between depends on the regions."""

PANELS: dict[str, Callable[..., None]] = {
    "cloud": cloud,
    "agreement": agreement,
    "decay": decay,
    "regions": regions,
}
"""Panels by name; each draws one seed on a sheet."""


def draw_panel(seed: SeedAudit, panel: str, ax: Axes | None = None, **options: Any) -> Axes:
    """Draw one panel of the figure.

    Parameters
    ----------
    seed : SeedAudit
    panel : str
        A name of `PANELS`.
    ax : Axes, optional
        Filled with the panel, in type of fixed size; default: a new figure of fitting size.
    **options
        `letter`; for `agreement`, `places`: how many contested places; for `regions`, `most`: how
        many rows.

    Returns
    -------
    Axes
        The parts of the panel are its child axes.

    Raises
    ------
    ValueError
        If there is no panel of that name.
    """
    if panel not in PANELS:
        raise ValueError(f"no panel {panel!r}; there are {', '.join(PANELS)}")
    with look():
        if ax is None:
            width = {"cloud": CLOUD_WIDTH, "decay": _decay_width()}.get(panel, WIDTH - 2 * MARGIN)
            height = panel_heights(seed)[panel]
            page = blank_figure(width + 2 * MARGIN, height + 2 * MARGIN)
            ax = _sheet(page, MARGIN, MARGIN, width, height).ax
        PANELS[panel](seed, Sheet(ax), **options)
    return ax


def figure(seed: SeedAudit) -> Figure:
    """The supplementary figure of one seed: one page, `WIDTH` mm wide."""
    heights = panel_heights(seed)
    first = heights["cloud"]
    total = first + heights["agreement"] + heights["regions"] + 2 * BETWEEN + 2 * MARGIN
    with look():
        page = blank_figure(WIDTH, total)
        top = MARGIN
        cloud(seed, _sheet(page, MARGIN, top, CLOUD_WIDTH, first), "a")
        top += first + BETWEEN
        agreement(seed, _sheet(page, MARGIN, top, WIDTH - 2 * MARGIN, heights["agreement"]), "b")
        left = MARGIN + CLOUD_WIDTH + BETWEEN
        decay(seed, _sheet(page, left, MARGIN, _decay_width(), first), "c")
        top += heights["agreement"] + BETWEEN
        regions(seed, _sheet(page, MARGIN, top, WIDTH - 2 * MARGIN, heights["regions"]), "d")
    return page


def panel_heights(seed: SeedAudit) -> dict[str, float]:
    """Height of each panel at its width in the figure, mm."""
    window = (CLOUD_WIDTH - 2 * GAP) / 3
    first = TITLE + LINE + 0.5 + window + CLOUD_FOOT
    low, high = body_frame(seed)
    extent = high - low
    room = (WIDTH - 2 * MARGIN - GAP * (COLUMNS - 1)) / COLUMNS
    last = region_heights(len(seed.tables["regions"]))
    around = TITLE + SLICE_TITLE + AGREEMENT_FOOT
    left = PAGE - first - last - around - 2 * BETWEEN - 2 * MARGIN
    slices = min(float(np.clip(left, *SLICE_HEIGHTS)), room * extent[1] / extent[0])
    return {"cloud": first, "decay": first, "agreement": around + slices, "regions": last}


def _decay_width() -> float:
    return WIDTH - 2 * MARGIN - CLOUD_WIDTH - BETWEEN


def _sheet(page: Figure, left: float, top: float, width: float, height: float) -> Sheet:
    """A sheet on a page, in mm from its top left corner."""
    across, down = page.get_size_inches() * MM_PER_INCH
    bounds = (left / across, 1 - (top + height) / down, width / across, height / down)
    return Sheet(page.add_axes(bounds))


def save_figure(seed: SeedAudit, folder: Path) -> None:
    """Write figure.pdf, figure.svg and figure.png; the same seed gives the same bytes."""
    page = figure(seed)
    title = f"Seed placement audit: {seed.name}"
    described = alternative_text(seed)
    with look():
        page.savefig(
            folder / "figure.pdf",
            dpi=300,
            metadata={"Title": title, "Subject": described, "CreationDate": None, "ModDate": None},
        )
        page.savefig(
            folder / "figure.svg",
            dpi=300,
            metadata={"Title": title, "Description": described, "Date": None},
        )
        page.savefig(folder / "figure.png", dpi=300, metadata={"Title": title})
