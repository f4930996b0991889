"""The figure of several seeds, at the top of a result: which can stand in for which."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from matplotlib.figure import Figure

from seedaudit.report.figures import Drawing, write_formats
from seedaudit.report.methods import plain
from seedaudit.report.several import MATRIX_FOOT, seeds_matrix
from seedaudit.report.style import (
    LIGHT,
    LINE,
    MM_PER_INCH,
    TITLE,
    Palette,
    Sheet,
    blank_figure,
    look,
)
from seedaudit.report.words import number

WIDTH = 120.0
MARGIN = 3.0
CELL = 13.0
MOST_HEIGHT = 160.0
"""All in mm."""

NAME = "seeds"


def seeds_figure(
    table: pd.DataFrame, width: float = WIDTH + 2 * MARGIN, colours: Palette = LIGHT
) -> Figure:
    """The matrix of seeds on a page of its own.

    Parameters
    ----------
    table : DataFrame
        The table `seeds`.
    width : float
        Of the page, mm.
    colours : Palette
    """
    count = len(set(table["seed_a"]) | set(table["seed_b"]))
    inner = width - 2 * MARGIN
    height = min(MOST_HEIGHT, TITLE + LINE + 1 + count * CELL + MATRIX_FOOT)
    with look(colours):
        page = blank_figure(width, height + 2 * MARGIN, colours)
        across, down = page.get_size_inches() * MM_PER_INCH
        bounds = (MARGIN / across, MARGIN / down, inner / across, height / down)
        seeds_matrix(table, Sheet(page.add_axes(bounds), colours))
    return page


def save_seeds_figure(table: pd.DataFrame, folder: Path, drawing: Drawing | None = None) -> None:
    """Write the figure and its caption; the same table gives the same bytes."""
    drawing = drawing or Drawing()
    page = seeds_figure(table, min(drawing.width, WIDTH + 2 * MARGIN), drawing.colours)
    described = seeds_caption(table)
    title = "Seed placement audit: seeds against each other"
    write_formats(page, folder, NAME, drawing, title, described)
    text = f"## Caption\n\n{plain(described)}\n"
    (folder / f"{NAME}_caption.md").write_text(text, encoding="utf-8", newline="\n")


def seeds_caption(table: pd.DataFrame) -> str:
    """The caption of the figure, which is its alternative text too, as plain text."""
    words = {True: "interchangeable", False: "not interchangeable"}
    pairs = [
        f"{row.seed_a} and {row.seed_b} ({number(row.distance_mm)} mm apart): {_ratio(row)}, "
        f"{words.get(row.interchangeable, 'cannot be told')}"
        for row in table.itertuples()
    ]
    return (
        "Spatial correlation of the reported maps of every two seeds in independent halves of the "
        "participants, relative to the ceiling (the geometric mean of the two maps' similarities "
        "with themselves across halves), on voxels outside all clouds; on the diagonal, the 5th "
        "percentile of the same measure over a seed's own placements. Two seeds are "
        "interchangeable where they are no less alike than placements of one of them, beyond the "
        f"noise of the participants. {'; '.join(pairs)}."
    )


def _ratio(row: object) -> str:
    value, low, high = (getattr(row, f"relative{end}") for end in ("", "_low", "_high"))
    if not np.isfinite(value):
        return "no ceiling to relate them to"
    interval = f" ({number(low, 2)} to {number(high, 2)})" if np.isfinite(low) else ""
    return f"{number(value, 2)}{interval}"
