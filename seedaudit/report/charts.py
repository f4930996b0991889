"""The panels in rows: the network regions, and the claims of a paper."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, Rectangle
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from seedaudit.report.style import (
    LIGHT,
    LINE,
    MM_PER_INCH,
    TITLE,
    TYPE,
    Palette,
    Sheet,
    fitted,
    mark,
    plain_axes,
    text_width,
    wrapped,
)
from seedaudit.report.words import percent
from seedaudit.results import SeedAudit

FloatArray = NDArray[np.float64]

ROW = 2.65
"""Least height of a region, mm: a line of the smallest type."""
ROW_AIRY = 4.2
MOST_REGIONS = 40
"""So many rows fit on one page beside the other panels."""
HEAD, FOOT = TITLE + LINE + 1.0, 6.5

BINS = 6


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


def legend_rows(entries: int, columns: int) -> int:
    """Lines that so many entries of a legend take."""
    return -(-entries // columns)


def regions(seed: SeedAudit, sheet: Sheet, letter: str = "", most: int = MOST_REGIONS) -> None:
    """Panel of regions: effect and range, stability score, and state, a row for each."""
    table = seed.tables["regions"]
    sheet.title("Network regions", letter)
    if not len(table):
        reason = "The study named no regions, so there is nothing to show here."
        sheet.write(0, TITLE, wrapped(reason, sheet.width), linespacing=1.25)
        return
    colours, columns = sheet.colours, _legend_columns(sheet.width)
    handles = _region_legend(table, colours)
    room = sheet.height - HEAD - FOOT - legend_rows(len(handles), columns) * LINE
    shown = shown_regions(table, min(most, max(1, int(room / ROW + 1e-6))))
    left = _RegionColumns(sheet)
    height = min(room, ROW_AIRY * len(shown))
    rows = np.arange(len(shown))
    effect = sheet.place(left.effect, HEAD, left.effect_width, height)
    stability = sheet.place(left.stability, HEAD, left.stability_width, height)
    for ax in (effect, stability):
        plain_axes(ax)
        ax.set_ylim(len(shown) - 0.5, -0.5)
        ax.set_yticks([])
        ax.spines["left"].set_visible(False)
    _effects(effect, shown, rows, colours)
    _stabilities(stability, shown, rows, colours)
    pitch = height / len(shown)
    for row, (name, state) in enumerate(zip(shown["region"], shown["state"], strict=True)):
        middle = HEAD + (row + 0.5) * pitch
        sheet.write(0, middle, fitted(str(name), left.effect - 3), va="center_baseline")
        weight = "bold" if state in ("contested", "lost", "gained") else "normal"
        sheet.write(left.state, middle, str(state), va="center_baseline", weight=weight)
    head = HEAD - LINE - 0.4
    fewer = f"{len(shown)} of {len(table)}, least stable"
    sheet.write(0, head, fewer if len(shown) < len(table) else "region")
    sheet.write(left.effect, head, "effect, Fisher z")
    sheet.write(left.stability, head, "stability")
    sheet.write(left.state, head, "state")
    sheet.legend(0, HEAD + height + FOOT, handles, columns)


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


def _legend_columns(width: float) -> int:
    return 3 if width >= 150 else 2 if width >= 95 else 1


def regions_height(table: pd.DataFrame, width: float, room: float = np.inf) -> float:
    """Height of the panel at that width, mm, at most `room` unless even one row needs more."""
    if not len(table):
        return TITLE + 2 * LINE
    handles = _region_legend(table, LIGHT)
    around = HEAD + FOOT + legend_rows(len(handles), _legend_columns(width)) * LINE
    rows = min(len(table), MOST_REGIONS)
    pitch = ROW_AIRY if rows <= 24 else ROW
    return around + max(min(max(rows, 2) * pitch, room - around), 2 * ROW)


def _effects(ax: Axes, table: pd.DataFrame, rows: NDArray[np.int_], colours: Palette) -> None:
    effect = table["reported_effect"].to_numpy(dtype=float)
    low, high = (table[f"reported_{end}"].to_numpy(dtype=float) for end in ("low", "high"))
    least, largest = (table[f"effect_{end}"].to_numpy(dtype=float) for end in ("min", "max"))
    _limits(ax, np.concatenate([[0.0], effect, low, high, least, largest]))
    ax.axvline(0, color=colours.ink, linewidth=0.6, zorder=0)
    band: dict[str, Any] = {"height": 0.62, "color": colours.pale, "linewidth": 0}
    ax.barh(rows, largest - least, left=least, **band, zorder=1)
    ax.hlines(rows, low, high, color=colours.ink, linewidth=0.9, zorder=2)
    ax.plot(effect, rows, **_point(colours), zorder=3)
    _not_available(ax, rows[~np.isfinite(effect)], colours)


def _stabilities(ax: Axes, table: pd.DataFrame, rows: NDArray[np.int_], colours: Palette) -> None:
    score = table["stability"].to_numpy(dtype=float)
    low, high = (table[f"stability_{end}"].to_numpy(dtype=float) for end in ("low", "high"))
    ceiling = _ceiling(table)
    silent = (table["state"] == "silent").to_numpy()
    # one wide interval must not press all scores into a corner: it is cut at -1
    bounds = np.clip(np.concatenate([[0.0, 1.0], score, low, ceiling]), -1, 1)
    _limits(ax, bounds)
    ax.axvline(0, color=colours.ink, linewidth=0.6, zorder=0)
    ax.axvline(1, color=colours.ink, linewidth=0.6, linestyle="dotted", zorder=0)
    ax.hlines(rows, low, high, color=colours.ink, linewidth=0.9, zorder=2)
    ax.plot(score[~silent], rows[~silent], **_point(colours), zorder=3)
    ax.plot(score[silent], rows[silent], **_hollow(colours), zorder=3)
    ax.plot(ceiling, rows, **_ceiling_mark(colours), zorder=4)
    _not_available(ax, rows[~np.isfinite(score)], colours)


def _ceiling(table: pd.DataFrame) -> FloatArray:
    if "ceiling" not in table:
        return np.full(len(table), np.nan)
    return table["ceiling"].to_numpy(dtype=float)


def _point(colours: Palette) -> dict[str, Any]:
    return mark("o", 3.6, colours.ink, colours.ink, 0.7)


def _hollow(colours: Palette) -> dict[str, Any]:
    return mark("o", 3.6, colours.paper, colours.ink, 0.7)


def _ceiling_mark(colours: Palette) -> dict[str, Any]:
    return mark("|", 6.5, "none", colours.plus, 1.2)


def _limits(ax: Axes, values: FloatArray) -> None:
    known = values[np.isfinite(values)]
    low, high = known.min(), known.max()
    pad = 0.04 * (high - low) or 0.1
    ax.set_xlim(low - pad, high + pad)
    room = ax.bbox.width / ax.figure.dpi * MM_PER_INCH
    ticks = next((n for n in (5, 4, 3, 2) if n * _tick_room(high - low, n) <= room), 1)
    ax.xaxis.set_major_locator(MaxNLocator(ticks, steps=[1, 2, 5, 10]))
    ax.xaxis.set_major_formatter(lambda value, _: _tick_text(value))


def _tick_text(value: float) -> str:
    """A number with its own power of ten, where it needs one, and none for the whole axis."""
    return f"{round(value, 12):g}".replace("-", "\N{MINUS SIGN}")


def _tick_room(span: float, ticks: int) -> float:
    """What one label of so many ticks takes, mm: small effects have many digits."""
    step = 10 ** np.floor(np.log10(span / ticks)) if span > 0 else 1.0
    return max(9.0, text_width(_tick_text(-5 * step), TYPE) + 3.0)


def _not_available(ax: Axes, rows: NDArray[np.int_], colours: Palette) -> None:
    for row in rows:
        ax.text(
            0.5, row, "n/a", transform=ax.get_yaxis_transform(), fontsize=TYPE, color=colours.soft,
            ha="center", va="center_baseline",
            bbox={"facecolor": colours.paper, "edgecolor": "none", "pad": 0.8},
        )  # fmt: skip


def _region_legend(table: pd.DataFrame, colours: Palette) -> list[Artist]:
    handles: list[Artist] = [
        Line2D([], [], **_point(colours), label="effect as reported; stability score"),
        Patch(facecolor=colours.pale, label="range over placements"),
    ]
    if (table["state"] == "silent").any():
        handles.append(Line2D([], [], **_hollow(colours), label="score of a silent region"))
    if table[["reported_low", "stability_low"]].notna().any(axis=None):
        line = Line2D([], [], color=colours.ink, linewidth=0.9)
        line.set_label("95 % interval over participants")
        handles.append(line)
    if np.isfinite(_ceiling(table)).any():
        label = "ceiling: itself across halves"
        handles.append(Line2D([], [], **_ceiling_mark(colours), label=label))
    return handles


NAME_BESIDE = 120.0
"""A sheet from this width on has the name of a claim beside its marks, mm; else it is above."""
CLAIM_ROW = 4.4
VERDICT = 12.0
SHARE_WORDS = 11.0
"""Room for "99.5 %", mm."""
BAR = 2.4


def claims(seed: SeedAudit, sheet: Sheet, letter: str = "") -> None:
    """Panel of claims: share of placements where each passes, effect, range and verdict."""
    sheet.title("Claims", letter)
    table = seed.tables.get("claims")
    if table is None or not len(table):
        reason = "The study file names no table of claims, so none was tested."
        sheet.write(0, TITLE, wrapped(reason, sheet.width), linespacing=1.25)
        return
    colours = sheet.colours
    handles = _claim_legend(table, colours)
    columns = _legend_columns(sheet.width)
    foot = FOOT + legend_rows(len(handles), columns) * LINE
    pitch = _claim_pitch(sheet.width)
    room = sheet.height - HEAD - foot
    shown = shown_claims(table, max(1, int(room / pitch + 1e-6)))
    left = _ClaimColumns(sheet)
    head = HEAD - LINE - 0.4
    sheet.write(0, head, "claim" if left.verdict else "verdict")
    if left.verdict:
        sheet.write(left.verdict, head, "verdict")
    sheet.write(left.share, head, "passing")
    sheet.write(left.effect, head, "effect, Fisher z")
    if len(shown) < len(table):
        sheet.write(sheet.width, 0.6, f"{len(shown)} of {len(table)}", ha="right")
    bounds = shown[
        ["reported_effect", "reported_low", "reported_high", "effect_min", "effect_max"]
    ].to_numpy(dtype=float)
    for row, claim in enumerate(shown.to_dict("records")):
        top = HEAD + row * pitch
        ax = _claim_row(sheet, claim, top, left)
        _limits(ax, np.append(bounds.ravel(), 0.0))
        last = row == len(shown) - 1
        ax.spines["bottom"].set_visible(last)
        ax.tick_params(labelbottom=last, bottom=last)
    sheet.legend(0, HEAD + len(shown) * pitch + FOOT, handles, columns)


class _ClaimColumns:
    """Where the columns of the panel start, mm; the verdict is first where names are above."""

    def __init__(self, sheet: Sheet) -> None:
        beside = sheet.width >= NAME_BESIDE
        self.verdict = 0.4 * sheet.width if beside else 0.0
        self.share = self.verdict + VERDICT
        free = sheet.width - self.share - SHARE_WORDS - 3
        self.share_width = min(0.42 * free, 30.0)
        self.effect = self.share + self.share_width + SHARE_WORDS + 2
        self.effect_width = sheet.width - self.effect - 1


def _claim_row(sheet: Sheet, claim: dict[str, Any], top: float, left: _ClaimColumns) -> Axes:
    colours, line = sheet.colours, top
    if left.verdict:
        sheet.write(0, top + CLAIM_ROW / 2, fitted(str(claim["claim"]), left.verdict - 2),
                    va="center_baseline")  # fmt: skip
    else:
        sheet.write(0, top, fitted(str(claim["claim"]), sheet.width))
        line += LINE + 0.3
    middle = line + CLAIM_ROW / 2
    weight = "bold" if claim["verdict"] == "breaks" else "normal"
    sheet.write(left.verdict, middle, str(claim["verdict"]), va="center_baseline", weight=weight)
    share = float(claim["share_passing"])
    after = left.share + left.share_width + 1
    sheet.write(after, middle, percent(share), va="center_baseline")
    bar = sheet.place(left.share, middle - BAR / 2, left.share_width, BAR)
    bar.set_xlim(0, 1)
    bar.set_ylim(0, 1)
    bar.set_xticks([])
    bar.set_yticks([])
    if np.isfinite(share):
        bar.add_patch(Rectangle((0, 0), share, 1, facecolor=colours.minus_pale, linewidth=0))
    ax = sheet.place(left.effect, middle - CLAIM_ROW / 2, left.effect_width, CLAIM_ROW)
    plain_axes(ax)
    ax.spines["left"].set_visible(False)
    ax.set_ylim(-1, 1)
    ax.set_yticks([])
    ax.axvline(0, color=colours.ink, linewidth=0.6, zorder=0)
    least, largest = float(claim["effect_min"]), float(claim["effect_max"])
    ax.barh(0, largest - least, left=least, height=1.1, color=colours.pale, linewidth=0, zorder=1)
    ends = float(claim["reported_low"]), float(claim["reported_high"])
    ax.hlines(0, *ends, color=colours.ink, linewidth=0.9, zorder=2)
    passes = bool(claim["passes_reported"])
    ax.plot(claim["reported_effect"], 0, **(_point if passes else _hollow)(colours), zorder=3)
    if not np.isfinite(claim["reported_effect"]):
        _not_available(ax, np.zeros(1, dtype=int), colours)
    return ax


def _claim_pitch(width: float) -> float:
    return CLAIM_ROW + 0.4 + (0 if width >= NAME_BESIDE else LINE + 1.4)


def shown_claims(table: pd.DataFrame, most: int) -> pd.DataFrame:
    """The claims of a table, or, where these are too many, first those that do not hold."""
    if len(table) <= most:
        return table
    order = table["verdict"].map({"breaks": 0, "open": 1}).fillna(2)
    return table.iloc[np.sort(order.to_numpy().argsort(kind="stable")[:most])]


def claims_height(table: pd.DataFrame | None, width: float, room: float = np.inf) -> float:
    """Height of the panel at that width, mm, at most `room` unless even one row needs more."""
    if table is None or not len(table):
        return TITLE + 2 * LINE
    entries = len(_claim_legend(table, LIGHT))
    around = HEAD + FOOT + legend_rows(entries, _legend_columns(width)) * LINE
    pitch = _claim_pitch(width)
    rows = max(
        1, min(len(table), int((room - around) / pitch)) if np.isfinite(room) else len(table)
    )
    return around + rows * pitch


def _claim_legend(table: pd.DataFrame, colours: Palette) -> list[Artist]:
    handles: list[Artist] = [
        Patch(facecolor=colours.minus_pale, label="share of placements where it passes"),
        Line2D([], [], **_point(colours), label="effect as reported, passing"),
        Patch(facecolor=colours.pale, label="range over placements"),
    ]
    if not table["passes_reported"].all():
        label = "effect as reported, not passing"
        handles.insert(2, Line2D([], [], **_hollow(colours), label=label))
    if table["reported_low"].notna().any():
        line = Line2D([], [], color=colours.ink, linewidth=0.9)
        line.set_label("95 % interval over participants")
        handles.append(line)
    return handles
