"""The panels of the search for a steadier seed, of several seeds, and of several radii."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib import colormaps
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.colors import Normalize
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, Rectangle
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from seedaudit.report.panels import _REPORTED, GAP, _frame, _picture
from seedaudit.report.slices import DIRECTIONS, near_plane, step_of
from seedaudit.report.style import (
    INK,
    LINE,
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
from seedaudit.report.words import number, point
from seedaudit.results import SeedAudit

SHARES = colormaps["cividis"]

LEAST_SPAN = 0.05
"""Least range of the scores that the colours of the landscape cover."""

LANDSCAPE_FOOT = 9.5 + 2 * LINE
FRONT_FOOT = 9.0 + 4 * LINE
MATRIX_FOOT = 2.5 + 5 * LINE
SOURCES_FOOT = 9.0 + 4 * LINE
LEAST_CELL = 6.0
"""Of the matrix of seeds, mm: room for a word."""
ROW = 3.2
"""Height of a region in the panel of sources, mm."""

_MOVED: dict[str, Any] = {
    "linestyle": "none",
    "marker": "*",
    "markersize": 8.5,
    "markerfacecolor": "white",
    "markeredgecolor": INK,
    "markeredgewidth": 0.9,
}
_LOST: dict[str, Any] = {
    "linestyle": "none",
    "marker": "x",
    "markersize": 2.6,
    "markeredgecolor": SOFT,
    "markeredgewidth": 0.6,
}

MATRIX_WORDS = (
    "yes, no: whether one seed can stand in for the other within placement error (?: too few "
    "participants to tell). Diagonal: 5th percentile over the seed's own placements."
)

SOURCES: dict[str, dict[str, Any]] = {
    "participants": {"facecolor": "#1f2f7a"},
    "position": {"facecolor": "#8f3f00"},
    "radius": {"facecolor": "#e59a4c"},
    "position x radius": {"facecolor": "#e59a4c", "hatch": "xxxx"},
    "participants x position": {"facecolor": "#7f97d8"},
    "participants x radius": {"facecolor": "#7f97d8", "hatch": "////"},
    "residual": {"facecolor": "#eeeae4"},
}
"""Sources of variation in the order of the bars, and their look."""


def landscape(seed: SeedAudit, sheet: Sheet, letter: str = "") -> None:
    """Panel of the landscape: the score of every candidate on three planes through the seed."""
    sheet.title("Stability around the reported seed, in other participants", letter)
    table, found = seed.tables["steadier"], seed.summary["steadier"]
    step = float(found["step_mm"])
    at = np.asarray(seed.summary["at_mm"], dtype=float)
    places = table[["x", "y", "z"]].to_numpy(dtype=float)
    score = table["stability_out"].to_numpy(dtype=float)
    keeps = table["keeps_identity"].to_numpy(dtype=bool)
    scale = Normalize(*_limits(score[keeps]))
    top = TITLE + LINE + 0.5
    side = min((sheet.width - 2 * GAP) / 3, sheet.height - top - LANDSCAPE_FOOT)
    half = float(np.abs(places - at).max(initial=0.0)) + 2.5 * step
    for position, kind in enumerate(DIRECTIONS):
        left = position * (side + GAP)
        plane = near_plane(kind, at, half, step_of(seed))
        ax = sheet.place(left, top, side, side)
        _picture(ax, seed, plane)
        _frame(ax, plane)
        along, up, through = DIRECTIONS[kind]
        near = np.abs(places[:, through] - at[through]) < 0.5 * step
        for place, value, kept in zip(places[near], score[near], keeps[near], strict=True):
            _cell(ax, place[[along, up]], step, SHARES(scale(value)) if kept else None)
        ax.plot(*at[[along, up]], **_REPORTED, zorder=4)
        if (moved := _moved_to(table)) is not None:
            ax.plot(*places[moved, [along, up]], **_MOVED, zorder=5)
        sheet.write(left, TITLE, f"{kind}, {'xyz'[through]} = {number(at[through])} mm")
    _score_bar(sheet, top + side + 1.5, scale)
    sheet.legend(0.42 * sheet.width, top + side + 1.5, _landscape_legend(table, at), 1)


def _cell(ax: Axes, centre: NDArray[np.float64], step: float, colour: Any) -> None:
    """A candidate as a square; one of another network is an outline with a cross."""
    size = 0.94 * step
    corner = (centre[0] - size / 2, centre[1] - size / 2)
    if colour is None:
        style: dict[str, Any] = {"facecolor": "white", "edgecolor": SOFT, "linewidth": 0.4}
        ax.plot(*centre, **_LOST, zorder=3)
    else:
        style = {"facecolor": colour, "edgecolor": "none"}
    ax.add_patch(Rectangle(corner, size, size, zorder=2, **style))


def _moved_to(table: pd.DataFrame) -> int | None:
    """Row of the recommended candidate, unless it is the reported seed."""
    row = int(np.argmax(table["recommended"].to_numpy(dtype=bool)))
    return row or None


def _limits(values: NDArray[np.float64]) -> tuple[float, float]:
    known = values[np.isfinite(values)]
    if not known.size:
        return 0.0, 1.0
    low, high = float(known.min()), float(known.max())
    # where little differs, no colour may shout
    return min(low, high - LEAST_SPAN), high


def _score_bar(sheet: Sheet, top: float, scale: Normalize) -> None:
    ax = sheet.place(2, top, 0.34 * sheet.width, 2.6)
    low, high = scale.inverse(np.array([0.0, 1.0]))
    ax.imshow(
        np.linspace(0, 1, 256)[None],
        extent=(low, high, 0, 1),
        cmap=SHARES,
        aspect="auto",
        interpolation="none",
    )
    ax.set_yticks([])
    ax.xaxis.set_major_locator(MaxNLocator(3))
    ax.tick_params(pad=1.5, labelsize=TYPE)
    words = "mean spatial r with the maps\nof its own neighbours"
    sheet.write(2, top + 2.6 + 1.4 + LINE, words, linespacing=1.25)


def _landscape_legend(table: pd.DataFrame, at: NDArray[np.float64]) -> list[Artist]:
    handles: list[Artist] = [
        Line2D([], [], **_REPORTED, label=f"reported centre {point(at.tolist())} mm"),
        _recommendation(table),
    ]
    if not table["keeps_identity"].all():
        handles.append(Line2D([], [], **_LOST, label="another network: no candidate"))
    return handles


def _recommendation(table: pd.DataFrame) -> Artist:
    moved = _moved_to(table)
    if moved is None:
        return Line2D(
            [], [], linestyle="none", label="no gain beyond noise: keep the reported seed"
        )
    place = table.iloc[moved]
    label = f"recommended {point(place[['x', 'y', 'z']])} mm, projected"
    return Line2D([], [], **_MOVED, label=label)


def front(seed: SeedAudit, sheet: Sheet, letter: str = "") -> None:
    """Panel of the front: stability of every candidate against the distance moved."""
    sheet.title("Stability against distance moved", letter)
    table, found = seed.tables["steadier"], seed.summary["steadier"]
    moved = table["moved_mm"].to_numpy(dtype=float)
    score = table["stability_out"].to_numpy(dtype=float)
    keeps = table["keeps_identity"].to_numpy(dtype=bool)
    on_front = table["on_front"].to_numpy(dtype=bool)
    ax = sheet.place(9.5, TITLE + 1, sheet.width - 10.5, sheet.height - TITLE - 1 - FRONT_FOOT)
    plain_axes(ax)
    shrink, many = crowding(len(table))
    size = {"markersize": 2.6 * shrink, "rasterized": many}
    ax.plot(moved[~keeps], score[~keeps], **_LOST | size)
    ax.plot(moved[keeps], score[keeps], **_CANDIDATE | size)
    order = np.flatnonzero(on_front)[np.argsort(moved[on_front], kind="stable")]
    reach = float(moved.max(initial=1.0)) * 1.06
    steps = np.append(moved[order], reach), np.append(score[order], score[order[-1:]])
    ax.plot(*steps, drawstyle="steps-post", color=INK, linewidth=1.1, zorder=3)
    ax.plot(moved[order], score[order], **_ON_FRONT, zorder=4)
    ax.plot(0, score[0], **_REPORTED, zorder=5)
    handles: list[Artist] = [
        Line2D([], [], **_REPORTED, label="reported seed"),
        Line2D([], [], **_ON_FRONT | {"linestyle": "solid"}, label="steadiest for its distance"),
        Line2D([], [], **_CANDIDATE, label="candidate"),
    ]
    if not keeps.all():
        handles.append(Line2D([], [], **_LOST, label="another network"))
    gain, low, high = (found[f"gain{end}"] for end in ("", "_low", "_high"))
    if gain is not None:
        _search_gain(ax, table, score[0] + np.array([low or gain, gain, high or gain], dtype=float))
        handles.append(
            Line2D(
                [], [], **_SEARCH | {"linestyle": "solid"},
                label="the search in other participants, 95 %",
            )
        )  # fmt: skip
    ax.set_xlim(-0.04 * reach, reach)
    ax.xaxis.set_major_locator(MaxNLocator(5, steps=[1, 2, 5, 10]))
    ax.yaxis.set_major_locator(MaxNLocator(5))
    ax.set_xlabel("moved, mm", fontsize=TYPE, labelpad=1.5)
    ax.set_ylabel("stability", fontsize=TYPE, labelpad=2)
    sheet.legend(0, sheet.height - 4 * LINE, handles, 2 if sheet.width > 95 else 1)


_CANDIDATE: dict[str, Any] = {
    "linestyle": "none",
    "marker": "o",
    "markersize": 2.6,
    "markerfacecolor": PALE,
    "markeredgecolor": SOFT,
    "markeredgewidth": 0.4,
}
_ON_FRONT: dict[str, Any] = {
    "linestyle": "none",
    "color": INK,
    "linewidth": 1.1,
    "marker": "o",
    "markersize": 3.6,
    "markerfacecolor": "#e59a4c",
    "markeredgecolor": INK,
    "markeredgewidth": 0.5,
}

_SEARCH: dict[str, Any] = {
    "linestyle": "none",
    "color": INK,
    "linewidth": 1.0,
    "marker": "s",
    "markersize": 4.6,
    "markerfacecolor": "white",
    "markeredgecolor": INK,
    "markeredgewidth": 0.9,
}


def _search_gain(ax: Axes, table: pd.DataFrame, ends: NDArray[np.float64]) -> None:
    """What the search promises, at the mean distance of the places that it chose."""
    moved = float(table["moved_mm"] @ table["share_chosen"])
    if (row := _moved_to(table)) is not None:
        moved = float(table["moved_mm"].iloc[row])
    for colour, width in (("white", 2.6), (INK, 1.0)):
        ax.vlines(moved, ends[0], ends[2], color=colour, linewidth=width, zorder=6)
    ax.plot(moved, ends[1], **_SEARCH, zorder=7)


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
    cell = min(room / count, 16.0)
    ax = sheet.place(label, top, count * cell, count * cell)
    ax.set_xlim(-0.5, count - 0.5)
    ax.set_ylim(count - 0.5, -0.5)
    ax.set_xticks([])
    ax.set_yticks([])
    for row, name in enumerate(names):
        middle = top + (row + 0.5) * cell
        sheet.write(0, middle, fitted(f"{row + 1}  {name}", label - 2), va="center_baseline")
        sheet.write(label + (row + 0.5) * cell, TITLE, str(row + 1), ha="center")
        _matrix_cell(ax, row, row, np.nan, _within(table, name), cell)
    shown = table["seed_a"].isin(names) & table["seed_b"].isin(names)
    for pair in table[shown].itertuples():
        a, b = names.index(str(pair.seed_a)), names.index(str(pair.seed_b))
        value = float(pair.relative)
        words = f"{_two(value)}\n{_verdict(pair.interchangeable)}"
        for row, column in ((a, b), (b, a)):
            _matrix_cell(ax, row, column, value, words, cell)
    told = _wrapped(MATRIX_WORDS, 0.92 * sheet.width)
    sheet.write(0, top + count * cell + 2, told, linespacing=1.25)


def _matrix_cell(ax: Axes, row: int, column: int, value: float, words: str, cell: float) -> None:
    known = np.isfinite(value)
    shown = float(np.clip(value, 0, 1)) if known else 0.0
    style: dict[str, Any] = {"facecolor": SHARES(shown) if known else "white", "edgecolor": "white"}
    ax.add_patch(Rectangle((column - 0.5, row - 0.5), 1, 1, linewidth=0.8, **style))
    ink = "white" if known and shown < 0.55 else INK
    if cell < 2.4 * LINE:
        words = words.splitlines()[-1]
    if text_width(words.splitlines()[0]) > cell:
        words = ""
    ax.text(
        column, row, words, ha="center", va="center", fontsize=TYPE, color=ink, linespacing=1.2,
        weight="bold" if known and words.endswith("yes") else "normal",
    )  # fmt: skip


def _wrapped(text: str, width: float) -> str:
    """The text in lines no wider than so many mm."""
    lines = [""]
    for word in text.split():
        longer = f"{lines[-1]} {word}".strip()
        if text_width(longer) <= width:
            lines[-1] = longer
        else:
            lines.append(word)
    return "\n".join(lines)


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
        style = {"edgecolor": INK, "linewidth": 0.4, **SOURCES[source]}
        ax.barh(rows, width, left=left, height=0.74, **style)
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
        Patch(edgecolor=INK, linewidth=0.4, label=source.replace(" x ", " × "), **SOURCES[source])
        for source in named
    ]
    sheet.legend(0, TITLE + 1 + height + 9, handles, 3 if sheet.width > 120 else 2)
