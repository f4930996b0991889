"""The panels without anatomy: similarity against shift distance, and the network regions."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from seedaudit.report.style import (
    INK,
    LINE,
    MM_PER_INCH,
    PALE,
    SOFT,
    TITLE,
    TYPE,
    Sheet,
    crowding,
    fitted,
    plain_axes,
    text_width,
)
from seedaudit.results import SeedAudit

FloatArray = NDArray[np.float64]

ROW = 2.65
"""Least height of a region, mm: a line of the smallest type."""
ROW_AIRY = 4.2
MOST_REGIONS = 40
"""So many rows fit on one page beside the other panels."""
REGION_HEAD, REGION_FOOT = TITLE + LINE + 1.0, 7.5 + 2 * LINE
DECAY_FOOT = 9.0 + 3 * LINE

MEASURES: dict[str, tuple[str, dict[str, Any], dict[str, Any]]] = {
    "dice_positive": (
        "Dice +",
        {"marker": "o", "markerfacecolor": "#e59a4c", "markeredgecolor": "#8f3f00"},
        {"color": "#8f3f00", "linestyle": "solid"},
    ),
    "dice_negative": (
        "Dice −",
        {"marker": "v", "markerfacecolor": "none", "markeredgecolor": "#1f2f7a"},
        {"color": "#1f2f7a", "linestyle": "dashed"},
    ),
    "spatial_r": (
        "spatial r",
        {"marker": "x", "markeredgecolor": SOFT},
        {"color": SOFT, "linestyle": "dotted"},
    ),
}
"""Column of the similarity table: label, look of its points, look of its medians."""

BINS = 6


def decay(seed: SeedAudit, sheet: Sheet, letter: str = "") -> None:
    """Panel of decay: similarity of each drawn placement against its shift, and binned medians."""
    sheet.title("Similarity to the reported placement", letter)
    table = seed.tables["similarity"]
    drawn = table[table["placement"] != 0]
    distance = drawn["distance"].to_numpy(dtype=float)
    ax = sheet.place(8.5, TITLE + 1, sheet.width - 9.5, sheet.height - TITLE - 1 - DECAY_FOOT)
    plain_axes(ax)
    shrink, many = crowding(len(drawn))
    handles: list[Artist] = []
    lowest = 0.0
    for name, (label, points, line) in MEASURES.items():
        values = drawn[name].to_numpy(dtype=float)
        defined = np.isfinite(values)
        points = {"linestyle": "none", "markersize": 3, "markeredgewidth": 0.6, **points}
        line = {"linewidth": 1.3, **line}
        size = {"markersize": 3 * shrink, "markeredgewidth": 0.6 * shrink, "alpha": 0.75}
        ax.plot(distance[defined], values[defined], **points | size, rasterized=many)
        medians = binned_medians(distance[defined], values[defined])
        ax.plot(*medians, color="white", linewidth=2.6, zorder=3)
        ax.plot(*medians, **line, zorder=4)
        lowest = min(lowest, values[defined].min(initial=0.0))
        missing = int((~defined).sum())
        note = f" ({missing} of {len(drawn)} undefined)" if missing else ""
        handles.append(Line2D([], [], **points | line, label=f"{label}{note}"))
    ax.set_xlim(0, max(float(seed.summary["within_mm"]), distance.max(initial=0.0)) * 1.04)
    ax.set_ylim(np.floor(lowest * 10) / 10 - (0.02 if lowest == 0 else 0), 1.03)
    ax.xaxis.set_major_locator(MaxNLocator(6, steps=[1, 2, 5, 10]))
    ax.yaxis.set_major_locator(MaxNLocator(5))
    ax.set_xlabel("shift distance, mm", fontsize=TYPE, labelpad=1.5)
    ax.set_ylabel("similarity", fontsize=TYPE, labelpad=2)
    sheet.legend(0, sheet.height - 3 * LINE, handles, 1)


def binned_medians(distance: FloatArray, values: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Median distance and median value of bins of distance.

    Parameters
    ----------
    distance, values : (N,)
        mm, and finite similarities.

    Returns
    -------
    distance, value : (B,)
        One for each distance where there are few of them, else for `BINS` bins of as many
        placements each (fewer bins where there would be fewer than three placements in one).
    """
    levels, which = np.unique(np.round(distance, 6), return_inverse=True)
    if len(levels) > min(BINS, len(distance) // 2):
        count = max(1, min(BINS, len(distance) // 3))
        order = np.argsort(distance, kind="stable")
        which = np.empty(len(distance), dtype=np.intp)
        which[order] = np.arange(len(distance)) * count // len(distance)
    frame = pd.DataFrame({"distance": distance, "value": values}).groupby(which).median()
    return frame["distance"].to_numpy(), frame["value"].to_numpy()


def regions(seed: SeedAudit, sheet: Sheet, letter: str = "", most: int = MOST_REGIONS) -> None:
    """Panel of regions: effect and range, stability score, and state, a row for each."""
    table = seed.tables["regions"]
    sheet.title("Network regions", letter)
    if not len(table):
        sheet.write(0, TITLE, "The study named no regions, so there is nothing to show here.")
        return
    room = sheet.height - REGION_HEAD - REGION_FOOT
    shown = shown_regions(table, min(most, max(1, int(room / ROW + 1e-6))))
    left = _RegionColumns(sheet)
    height = min(room, ROW_AIRY * len(shown))
    rows = np.arange(len(shown))
    effect = sheet.place(left.effect, REGION_HEAD, left.effect_width, height)
    stability = sheet.place(left.stability, REGION_HEAD, left.stability_width, height)
    for ax in (effect, stability):
        plain_axes(ax)
        ax.set_ylim(len(shown) - 0.5, -0.5)
        ax.set_yticks([])
        ax.spines["left"].set_visible(False)
    _effects(effect, shown, rows)
    _stabilities(stability, shown, rows)
    pitch = height / len(shown)
    for row, (name, state) in enumerate(zip(shown["region"], shown["state"], strict=True)):
        middle = REGION_HEAD + (row + 0.5) * pitch
        sheet.write(0, middle, fitted(str(name), left.effect - 3), va="center_baseline")
        weight = "bold" if state in ("contested", "lost", "gained") else "normal"
        sheet.write(left.state, middle, str(state), va="center_baseline", weight=weight)
    head = REGION_HEAD - LINE - 0.4
    fewer = f" ({len(shown)} of {len(table)}, the least stable)" if len(shown) < len(table) else ""
    sheet.write(0, head, f"region{fewer}")
    sheet.write(left.effect, head, "effect, Fisher z")
    sheet.write(left.stability, head, "stability score")
    sheet.write(left.state, head, "state")
    sheet.legend(0, REGION_HEAD + height + 6.5, _region_legend(shown), 3)


class _RegionColumns:
    """Where the columns of the panel start, and their widths, mm."""

    def __init__(self, sheet: Sheet) -> None:
        state = text_width("contested") * 1.15
        self.effect = 0.33 * sheet.width
        self.state = sheet.width - state
        free = self.state - self.effect - 8
        self.effect_width = 0.6 * free
        self.stability = self.effect + self.effect_width + 5
        self.stability_width = 0.4 * free


def shown_regions(table: pd.DataFrame, most: int) -> pd.DataFrame:
    """The regions of a table, or, where these are too many, the least stable in table order."""
    if len(table) <= most:
        return table
    least = table["stability"].to_numpy(dtype=float).argsort(kind="stable")[:most]
    return table.iloc[np.sort(least)]


def region_heights(n_regions: int) -> float:
    """Height of the panel for so many regions, mm."""
    if not n_regions:
        return TITLE + LINE + 1
    rows = min(n_regions, MOST_REGIONS)
    pitch = ROW_AIRY if rows <= 24 else ROW
    return REGION_HEAD + max(rows, 2) * pitch + REGION_FOOT


def _effects(ax: Axes, table: pd.DataFrame, rows: NDArray[np.int_]) -> None:
    effect = table["reported_effect"].to_numpy(dtype=float)
    low, high = (table[f"reported_{end}"].to_numpy(dtype=float) for end in ("low", "high"))
    least, largest = (table[f"effect_{end}"].to_numpy(dtype=float) for end in ("min", "max"))
    _limits(ax, np.concatenate([[0.0], effect, low, high, least, largest]))
    ax.axvline(0, color=INK, linewidth=0.6, zorder=0)
    ax.barh(rows, largest - least, left=least, height=0.62, color=PALE, linewidth=0, zorder=1)
    ax.hlines(rows, low, high, color=INK, linewidth=0.9, zorder=2)
    ax.plot(effect, rows, **_POINT, zorder=3)
    _not_available(ax, rows[~np.isfinite(effect)])


def _stabilities(ax: Axes, table: pd.DataFrame, rows: NDArray[np.int_]) -> None:
    score = table["stability"].to_numpy(dtype=float)
    low, high = (table[f"stability_{end}"].to_numpy(dtype=float) for end in ("low", "high"))
    silent = (table["state"] == "silent").to_numpy()
    # one wide interval must not press all scores into a corner: it is cut at -1
    bounds = np.clip(np.concatenate([[0.0, 1.0], score, low]), -1, 1)
    _limits(ax, bounds)
    ax.axvline(0, color=INK, linewidth=0.6, zorder=0)
    ax.axvline(1, color=INK, linewidth=0.6, linestyle="dotted", zorder=0)
    ax.hlines(rows, low, high, color=INK, linewidth=0.9, zorder=2)
    ax.plot(score[~silent], rows[~silent], **_POINT, zorder=3)
    ax.plot(score[silent], rows[silent], **_POINT | {"markerfacecolor": "white"}, zorder=3)
    _not_available(ax, rows[~np.isfinite(score)])


_POINT: dict[str, Any] = {
    "linestyle": "none",
    "marker": "o",
    "markersize": 3.6,
    "markerfacecolor": INK,
    "markeredgecolor": INK,
    "markeredgewidth": 0.7,
}


def _limits(ax: Axes, values: FloatArray) -> None:
    known = values[np.isfinite(values)]
    low, high = known.min(), known.max()
    pad = 0.04 * (high - low) or 0.1
    ax.set_xlim(low - pad, high + pad)
    room = ax.bbox.width / ax.figure.dpi * MM_PER_INCH
    ax.xaxis.set_major_locator(MaxNLocator(int(np.clip(room / 9, 1, 5)), steps=[1, 2, 5, 10]))


def _not_available(ax: Axes, rows: NDArray[np.int_]) -> None:
    for row in rows:
        ax.text(
            0.5, row, "n/a", transform=ax.get_yaxis_transform(), fontsize=TYPE, color=SOFT,
            ha="center", va="center_baseline",
            bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.8},
        )  # fmt: skip


def _region_legend(table: pd.DataFrame) -> list[Artist]:
    handles: list[Artist] = [
        Line2D([], [], **_POINT, label="effect as reported; stability score"),
        Patch(facecolor=PALE, label="range over placements"),
    ]
    if (table["state"] == "silent").any():
        hollow: dict[str, Any] = _POINT | {"markerfacecolor": "white"}
        handles.append(Line2D([], [], **hollow, label="score of a silent region"))
    if table[["reported_low", "stability_low"]].notna().any(axis=None):
        line = Line2D([], [], color=INK, linewidth=0.9, label="95 % interval over participants")
        handles.append(line)
    return handles
