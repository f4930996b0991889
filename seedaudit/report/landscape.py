"""The panels of the search for a steadier seed: where it is steady, and what moving there gains."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib import colormaps
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.colors import Normalize
from matplotlib.lines import Line2D
from matplotlib.patches import Rectangle
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from seedaudit.report.panels import GAP, frame, picture, reported_mark
from seedaudit.report.slices import DIRECTIONS, near_plane, step_of
from seedaudit.report.style import (
    LINE,
    TITLE,
    TYPE,
    Palette,
    Sheet,
    crowding,
    mark,
    plain_axes,
    wrapped,
)
from seedaudit.report.words import number, point
from seedaudit.results import SeedAudit

SHARES = colormaps["cividis"]

LEAST_SPAN = 0.05
"""Least range of the scores that the colours of the landscape cover."""

LANDSCAPE_FOOT = 9.5 + 2 * LINE
BESIDE = 105.0
"""A sheet from this width on has the legend of the landscape beside its colour bar, mm."""


def _moved_mark(colours: Palette) -> dict[str, Any]:
    return mark("*", 8.5, colours.paper, colours.ink, 0.9)


def _lost_mark(colours: Palette) -> dict[str, Any]:
    return mark("x", 2.6, "none", colours.soft)


def landscape_height(width: float) -> float:
    """Height of the panel of the landscape at that width, mm."""
    return TITLE + LINE + 0.5 + (width - 2 * GAP) / 3 + _landscape_foot(width)


def _landscape_foot(width: float) -> float:
    return LANDSCAPE_FOOT + (0 if width >= BESIDE else 3 * LINE + 0.5)


def front_height(width: float) -> float:
    """Height of the panel of the front at that width, mm."""
    return TITLE + 1 + 36 + _front_foot(width)


def _front_foot(width: float) -> float:
    """Axis, and the five entries of the legend in one or two columns, mm."""
    return 9.0 + (3 if width > 95 else 5) * LINE


NO_SEARCH = "No steadier seed was searched for (section steadier of the study file)."


def landscape(seed: SeedAudit, sheet: Sheet, letter: str = "") -> None:
    """Panel of the landscape: the score of every candidate on three planes through the seed."""
    sheet.title("Stability of nearby seeds in other participants", letter)
    if "steadier" not in seed.tables:
        sheet.write(0, TITLE, wrapped(NO_SEARCH, sheet.width), linespacing=1.25)
        return
    table, found = seed.tables["steadier"], seed.summary["steadier"]
    step = float(found["step_mm"])
    at = np.asarray(seed.summary["at_mm"], dtype=float)
    places = table[["x", "y", "z"]].to_numpy(dtype=float)
    score = table["stability_out"].to_numpy(dtype=float)
    keeps = table["keeps_identity"].to_numpy(dtype=bool)
    scale = Normalize(*_limits(score[keeps]))
    top = TITLE + LINE + 0.5
    side = min((sheet.width - 2 * GAP) / 3, sheet.height - top - _landscape_foot(sheet.width))
    half = float(np.abs(places - at).max(initial=0.0)) + 2.5 * step
    for position, kind in enumerate(DIRECTIONS):
        left = position * (side + GAP)
        plane = near_plane(kind, at, half, step_of(seed))
        ax = sheet.place(left, top, side, side)
        picture(ax, seed, plane, sheet.colours)
        frame(ax, plane, sheet.colours)
        along, up, through = DIRECTIONS[kind]
        near = np.abs(places[:, through] - at[through]) < 0.5 * step
        for place, value, kept in zip(places[near], score[near], keeps[near], strict=True):
            colour = SHARES(scale(value)) if kept else None
            _cell(ax, place[[along, up]], step, colour, sheet.colours)
        ax.plot(*at[[along, up]], **reported_mark(sheet.colours), zorder=4)
        if (moved := _moved_to(table)) is not None:
            ax.plot(*places[moved, [along, up]], **_moved_mark(sheet.colours), zorder=5)
        sheet.write(left, TITLE, f"{kind}, {'xyz'[through]} = {number(at[through])} mm")
    _score_bar(sheet, top + side + 1.5, scale)
    beside = sheet.width >= BESIDE
    left, below = (0.42 * sheet.width, 1.5) if beside else (0.0, LANDSCAPE_FOOT + 0.5)
    handles = _landscape_legend(table, at, sheet.colours)
    sheet.legend(left, top + side + below, handles, 1)


def _cell(
    ax: Axes, centre: NDArray[np.float64], step: float, colour: Any, colours: Palette
) -> None:
    """A candidate as a square; one of another network is an outline with a cross."""
    size = 0.94 * step
    corner = (centre[0] - size / 2, centre[1] - size / 2)
    if colour is None:
        style: dict[str, Any] = {
            "facecolor": colours.paper, "edgecolor": colours.soft, "linewidth": 0.4,
        }  # fmt: skip
        ax.plot(*centre, **_lost_mark(colours), zorder=3)
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


def _landscape_legend(
    table: pd.DataFrame, at: NDArray[np.float64], colours: Palette
) -> list[Artist]:
    label = f"reported centre {point(at.tolist())} mm"
    handles: list[Artist] = [
        Line2D([], [], **reported_mark(colours), label=label),
        _recommendation(table, colours),
    ]
    if not table["keeps_identity"].all():
        label = "another network: no candidate"
        handles.append(Line2D([], [], **_lost_mark(colours), label=label))
    return handles


def _recommendation(table: pd.DataFrame, colours: Palette) -> Artist:
    moved = _moved_to(table)
    if moved is None:
        return Line2D(
            [], [], linestyle="none", label="no gain beyond noise: keep the reported seed"
        )
    place = table.iloc[moved]
    label = f"recommended {point(place[['x', 'y', 'z']])} mm, projected"
    return Line2D([], [], **_moved_mark(colours), label=label)


def front(seed: SeedAudit, sheet: Sheet, letter: str = "") -> None:
    """Panel of the front: stability of every candidate against the distance moved."""
    sheet.title("Stability against distance moved", letter)
    if "steadier" not in seed.tables:
        sheet.write(0, TITLE, wrapped(NO_SEARCH, sheet.width), linespacing=1.25)
        return
    table, found = seed.tables["steadier"], seed.summary["steadier"]
    moved = table["moved_mm"].to_numpy(dtype=float)
    score = table["stability_out"].to_numpy(dtype=float)
    keeps = table["keeps_identity"].to_numpy(dtype=bool)
    on_front = table["on_front"].to_numpy(dtype=bool)
    ax = sheet.place(
        9.5, TITLE + 1, sheet.width - 10.5, sheet.height - TITLE - 1 - _front_foot(sheet.width)
    )
    plain_axes(ax)
    colours = sheet.colours
    shrink, many = crowding(len(table))
    size = {"markersize": 2.6 * shrink, "rasterized": many}
    ax.plot(moved[~keeps], score[~keeps], **_lost_mark(colours) | size)
    ax.plot(moved[keeps], score[keeps], **_candidate_mark(colours) | size)
    order = np.flatnonzero(on_front)[np.argsort(moved[on_front], kind="stable")]
    reach = float(moved.max(initial=1.0)) * 1.06
    steps = np.append(moved[order], reach), np.append(score[order], score[order[-1:]])
    ax.plot(*steps, drawstyle="steps-post", color=colours.ink, linewidth=1.1, zorder=3)
    ax.plot(moved[order], score[order], **_front_mark(colours), zorder=4)
    ax.plot(0, score[0], **reported_mark(colours), zorder=5)
    line: dict[str, Any] = {"linestyle": "solid", "color": colours.ink, "linewidth": 1.1}
    handles: list[Artist] = [
        Line2D([], [], **reported_mark(colours), label="reported seed"),
        Line2D([], [], **_front_mark(colours) | line, label="steadiest for its distance"),
        Line2D([], [], **_candidate_mark(colours), label="candidate"),
    ]
    if not keeps.all():
        handles.append(Line2D([], [], **_lost_mark(colours), label="another network"))
    gain, low, high = (found[f"gain{end}"] for end in ("", "_low", "_high"))
    if gain is not None:
        ends = score[0] + np.array([low or gain, gain, high or gain], dtype=float)
        _search_gain(ax, table, ends, colours)
        label = "the search in other participants, 95 %"
        handles.append(Line2D([], [], **_search_mark(colours) | line, label=label))
    ax.set_xlim(-0.04 * reach, reach)
    ax.xaxis.set_major_locator(MaxNLocator(5, steps=[1, 2, 5, 10]))
    ax.yaxis.set_major_locator(MaxNLocator(5))
    ax.set_xlabel("moved, mm", fontsize=TYPE, labelpad=1.5)
    ax.set_ylabel("stability", fontsize=TYPE, labelpad=2)
    sheet.legend(
        0, sheet.height - _front_foot(sheet.width) + 9, handles, 2 if sheet.width > 95 else 1
    )


def _candidate_mark(colours: Palette) -> dict[str, Any]:
    return mark("o", 2.6, colours.pale, colours.soft, 0.4)


def _front_mark(colours: Palette) -> dict[str, Any]:
    return mark("o", 3.6, colours.plus_pale, colours.ink, 0.5)


def _search_mark(colours: Palette) -> dict[str, Any]:
    return mark("s", 4.6, colours.paper, colours.ink, 0.9)


def _search_gain(
    ax: Axes, table: pd.DataFrame, ends: NDArray[np.float64], colours: Palette
) -> None:
    """What the search promises, at the mean distance of the places that it chose."""
    moved = float(table["moved_mm"] @ table["share_chosen"])
    if (row := _moved_to(table)) is not None:
        moved = float(table["moved_mm"].iloc[row])
    for colour, width in ((colours.paper, 2.6), (colours.ink, 1.0)):
        ax.vlines(moved, ends[0], ends[2], color=colour, linewidth=width, zorder=3.5)
    ax.plot(moved, ends[1], **_search_mark(colours), zorder=3.6)
