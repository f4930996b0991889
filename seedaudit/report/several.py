"""The panels of several seeds, and of several radii."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.patches import Patch, Rectangle

from seedaudit.report.landscape import SHARES
from seedaudit.report.style import (
    INK,
    LINE,
    TITLE,
    TYPE,
    Palette,
    Sheet,
    fitted,
    plain_axes,
    text_width,
    wrapped,
)
from seedaudit.results import SeedAudit

MATRIX_FOOT = 2.5 + 5 * LINE
SOURCES_FOOT = 9.0 + 4 * LINE
LEAST_CELL, LARGEST_CELL = 6.0, 16.0
"""Of the matrix of seeds, mm: the least has room for a word."""
ROW = 3.2
"""Height of a region in the panel of sources, mm."""

MATRIX_WORDS = (
    "yes, no: whether one seed can stand in for the other within placement error (?: too few "
    "participants to tell). Diagonal: 5th percentile over the seed's own placements."
)

SOURCES: dict[str, tuple[str, str]] = {
    "participants": ("minus", ""),
    "position": ("plus", ""),
    "radius": ("plus_pale", ""),
    "position x radius": ("plus_pale", "xxxx"),
    "participants x position": ("minus_pale", ""),
    "participants x radius": ("minus_pale", "////"),
    "residual": ("neutral", ""),
}
"""Sources of variation in the order of the bars: colour of the palette, and hatching."""


def seeds(
    seed: SeedAudit, sheet: Sheet, letter: str = "", between: pd.DataFrame | None = None
) -> None:
    """Panel of several seeds; `between` is the table that compares them."""
    if between is None:
        sheet.title("Similarity of seeds", letter)
        reason = f"There is no other seed to compare {seed.name} with."
        sheet.write(0, TITLE, wrapped(reason, sheet.width), linespacing=1.25)
        return
    seeds_matrix(between, sheet, letter)


def seeds_height(between: pd.DataFrame | None, width: float) -> float:
    """Height of the panel of seeds at that width, mm."""
    if between is None:
        return TITLE + LINE
    count = len({*between["seed_a"], *between["seed_b"]})
    return TITLE + LINE + 1 + min(count * LARGEST_CELL, 0.66 * width) + MATRIX_FOOT


def radii(seed: SeedAudit, sheet: Sheet, letter: str = "", most: int = 40) -> None:
    """Panel of sources of variation, for several radii."""
    if "radii" not in seed.tables:
        sheet.title("Sources of variation", letter)
        reason = "The placements have one radius, so radius is no source of variation here."
        sheet.write(0, TITLE, wrapped(reason, sheet.width), linespacing=1.25)
        return
    variation(seed.tables["radii"], sheet, letter, most)


def radii_height(table: pd.DataFrame | None) -> float:
    """Height of the panel of sources, mm."""
    if table is None:
        return TITLE + 2 * LINE
    return TITLE + 1 + SOURCES_FOOT + 1.4 * ROW * min(40, table["region"].nunique())


def seeds_matrix(table: pd.DataFrame, sheet: Sheet, letter: str = "") -> None:
    """Panel of several seeds: how alike every two are, relative to what noise allows.

    Parameters
    ----------
    table : DataFrame
        The table `seeds`.
    sheet : Sheet
    letter : str
    """
    sheet.title("Similarity of seeds, relative to the ceiling", letter)
    names = list(dict.fromkeys([*table["seed_a"], *table["seed_b"]]))
    label = 0.34 * sheet.width
    top = TITLE + LINE + 1
    room = min(sheet.width - label, sheet.height - top - MATRIX_FOOT)
    count = min(len(names), max(2, int(room / LEAST_CELL)))
    if count < len(names):
        sheet.write(0, TITLE, f"first {count} of {len(names)}")
    names = names[:count]
    cell = min(room / count, LARGEST_CELL)
    ax = sheet.place(label, top, count * cell, count * cell)
    ax.set_xlim(-0.5, count - 0.5)
    ax.set_ylim(count - 0.5, -0.5)
    ax.set_xticks([])
    ax.set_yticks([])
    for row, name in enumerate(names):
        middle = top + (row + 0.5) * cell
        sheet.write(0, middle, fitted(f"{row + 1}  {name}", label - 2), va="center_baseline")
        sheet.write(label + (row + 0.5) * cell, TITLE, str(row + 1), ha="center")
        _matrix_cell(ax, row, row, np.nan, _within(table, name), cell, sheet.colours)
    shown = table["seed_a"].isin(names) & table["seed_b"].isin(names)
    for pair in table[shown].itertuples():
        a, b = names.index(str(pair.seed_a)), names.index(str(pair.seed_b))
        value = float(pair.relative)
        words = f"{_two(value)}\n{_verdict(pair.interchangeable)}"
        for row, column in ((a, b), (b, a)):
            _matrix_cell(ax, row, column, value, words, cell, sheet.colours)
    told = wrapped(MATRIX_WORDS, 0.92 * sheet.width)
    sheet.write(0, top + count * cell + 2, told, linespacing=1.25)


def _matrix_cell(
    ax: Axes, row: int, column: int, value: float, words: str, cell: float, colours: Palette
) -> None:
    known = np.isfinite(value)
    shown = float(np.clip(value, 0, 1)) if known else 0.0
    style: dict[str, Any] = {
        "facecolor": SHARES(shown) if known else colours.paper, "edgecolor": colours.paper,
    }  # fmt: skip
    ax.add_patch(Rectangle((column - 0.5, row - 0.5), 1, 1, linewidth=0.8, **style))
    # on the colours of shares, which are the same on any paper
    ink = ("white" if shown < 0.55 else INK) if known else colours.ink
    if cell < 2.4 * LINE:
        words = words.splitlines()[-1]
    if text_width(words.splitlines()[0]) > cell:
        words = ""
    ax.text(
        column, row, words, ha="center", va="center", fontsize=TYPE, color=ink, linespacing=1.2,
        weight="bold" if known and words.endswith("yes") else "normal",
    )  # fmt: skip


def _within(table: pd.DataFrame, name: str) -> str:
    for side in ("a", "b"):
        rows = table[table[f"seed_{side}"] == name]
        if len(rows):
            return _two(float(rows[f"relative_within_{side}"].iloc[0]))
    return ""


def _two(value: float) -> str:
    return f"{value:.2f}".replace("-", "−") if np.isfinite(value) else "n/a"


def _verdict(interchangeable: Any) -> str:
    return {True: "yes", False: "no"}.get(interchangeable, "?")


def variation(table: pd.DataFrame, sheet: Sheet, letter: str = "", most: int = 40) -> None:
    """Panel of sources: what the variation of each region's effect comes from.

    Parameters
    ----------
    table : DataFrame
        The table `radii` of one seed.
    sheet : Sheet
    letter : str
    most : int
        Regions at most; those with the largest share of position are shown.
    """
    sheet.title("Sources of variation of the regions' mean z", letter)
    shares = table.pivot(index="region", columns="source", values="share")
    shares = shares.loc[list(dict.fromkeys(table["region"]))].dropna()
    named = [source for source in SOURCES if source in shares]
    room = sheet.height - TITLE - 1 - SOURCES_FOOT
    most = min(most, max(1, int(room / ROW)))
    if len(shares) > most:
        kept = shares["position"].to_numpy().argsort(kind="stable")[::-1][:most]
        shares = shares.iloc[np.sort(kept)]
    label = 0.3 * sheet.width
    height = min(room, len(shares) * 1.4 * ROW)
    ax = sheet.place(label, TITLE + 1, sheet.width - label - 4, height)
    plain_axes(ax)
    ax.spines["left"].set_visible(False)
    rows = np.arange(len(shares))
    left = np.zeros(len(shares))
    for source in named:
        width = shares[source].to_numpy(dtype=float)
        ax.barh(rows, width, left=left, height=0.74, **_source_look(source, sheet.colours))
        left += width
    ax.set_xlim(0, 1)
    ax.set_ylim(len(shares) - 0.5, -0.5)
    ax.set_yticks([])
    ax.set_xticks([0, 0.25, 0.5, 0.75, 1], ["0", "25 %", "50 %", "75 %", "100 %"], fontsize=TYPE)
    ax.set_xlabel("share of the variance", fontsize=TYPE, labelpad=1.5)
    pitch = height / max(1, len(shares))
    for row, name in enumerate(shares.index):
        middle = TITLE + 1 + (row + 0.5) * pitch
        sheet.write(0, middle, fitted(str(name), label - 2), va="center_baseline")
    handles: list[Artist] = [
        Patch(label=source.replace(" x ", " × "), **_source_look(source, sheet.colours))
        for source in named
    ]
    sheet.legend(0, TITLE + 1 + height + 9, handles, 3 if sheet.width > 120 else 2)


def _source_look(source: str, colours: Palette) -> dict[str, Any]:
    fill, hatch = SOURCES[source]
    return {
        "facecolor": getattr(colours, fill), "hatch": hatch, "edgecolor": colours.ink,
        "linewidth": 0.4,
    }  # fmt: skip
