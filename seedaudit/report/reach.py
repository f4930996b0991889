"""The panels of reach: how similarity falls with distance, and how far each direction allows."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import Circle, Polygon
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from seedaudit.report.charts import binned_medians, legend_rows
from seedaudit.report.style import (
    LIGHT,
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
from seedaudit.report.words import MEASURES, distance_words, number
from seedaudit.results import SeedAudit

FloatArray = NDArray[np.float64]

SHORT = MEASURES | {"ceiling_relative": "ceiling-relative"}
"""What stands over the charts, in their order."""

LIMITS = -0.3, 1.3
"""A similarity beyond these stands at the edge of its chart, as a triangle."""

AXIS = 9.5
"""Room for the numbers and the label of the left axis, mm."""
BETWEEN = 2.5
HEAD = 2 * LINE + 0.5
PLOT = 26.0
"""Height of a chart, mm."""
FOOT = 8.0

FOUND, OPEN = "\N{BLACK DOWN-POINTING TRIANGLE}", "\N{WHITE RIGHT-POINTING TRIANGLE}"
"""A tolerance, and one that is a lower bound."""

WAYS = {
    "superior": 90, "anterior": 45, "right": 0, "inferior": 270, "posterior": 225, "left": 180,
}  # fmt: skip
"""Angle of each direction in the rose, degrees: the axes of the body as in a drawing of a box."""

ROSE_LIST = 21.0
"""Width of the list beside the rose, mm."""


def _look(measure: str, colours: Palette) -> tuple[dict[str, Any], str]:
    """Look of the points of a measure, and the colour of its line."""
    looks = {
        "dice_positive": (mark("o", 3, colours.plus_pale, colours.plus), colours.plus),
        "dice_negative": (mark("v", 3, "none", colours.minus), colours.minus),
        "spatial_r": (mark("x", 3, "none", colours.soft), colours.ink),
        "ceiling_relative": (mark("s", 2.4, "none", colours.soft), colours.ink),
    }
    return looks[measure]


def decay(seed: SeedAudit, sheet: Sheet, letter: str = "") -> None:
    """Panel of decay: for each measure the placements, the falling fit, and what it is worth."""
    sheet.title("Similarity to the reported placement", letter)
    columns = _columns(sheet.width)
    rows = len(MEASURES) // columns
    width = (sheet.width - AXIS - BETWEEN * (columns - 1)) / columns
    handles = _decay_legend(seed, sheet.colours)
    foot = FOOT + legend_rows(len(handles), _decay_legend_columns(sheet.width)) * LINE
    head = HEAD + (LINE if _undefined(seed) else 0)
    room = (sheet.height - TITLE - foot) / rows
    limits = _limits(seed)
    for position, measure in enumerate(MEASURES):
        row, column = divmod(position, columns)
        left, top = AXIS + column * (width + BETWEEN), TITLE + row * room
        height = room - head - (4.5 if row < rows - 1 else 0)
        ax = sheet.place(left, top + head, width, height)
        plain_axes(ax)
        ax.set_xlim(0, 1.04 * _farthest(seed))
        ax.set_ylim(*limits)
        ax.xaxis.set_major_locator(MaxNLocator(max(2, int(width / 7)), steps=[1, 2, 4, 5, 10]))
        ax.yaxis.set_major_locator(MaxNLocator(6, steps=[1, 2, 5]))
        if column:
            ax.tick_params(labelleft=False)
        sheet.write(left, top, "\n".join(_head(seed, measure)), linespacing=1.25)
        if (reason := _why_not(seed, measure)) is not None:
            told = wrapped(reason, width - 2)
            ax.text(0.06, 0.94, told, transform=ax.transAxes, va="top", fontsize=TYPE,
                    linespacing=1.25)  # fmt: skip
        else:
            _chart(ax, seed, measure, sheet.colours)
    middle = AXIS + (sheet.width - AXIS) / 2
    bottom = TITLE + rows * room
    sheet.write(middle, bottom + 4, "shift distance, mm", ha="center")
    sheet.write(0, TITLE + rows * room / 2, "similarity", rotation=90, va="center")
    sheet.legend(0, bottom + FOOT, handles, _decay_legend_columns(sheet.width))


def _columns(width: float) -> int:
    return len(MEASURES) if width >= 100 else 2


def _decay_legend_columns(width: float) -> int:
    return 3 if width >= 110 else 2


def decay_height(width: float, seed: SeedAudit) -> float:
    """Height of the panel at that width, mm."""
    rows = len(MEASURES) // _columns(width)
    entries = legend_rows(len(_decay_legend(seed, LIGHT)), _decay_legend_columns(width))
    head = HEAD + (LINE if _undefined(seed) else 0)
    return TITLE + rows * (head + PLOT) + (rows - 1) * 4.5 + FOOT + entries * LINE


def _farthest(seed: SeedAudit) -> float:
    return max(float(seed.summary["within_mm"]), float(seed.tables["similarity"]["distance"].max()))


def _drawn(seed: SeedAudit) -> pd.DataFrame:
    table = seed.tables["similarity"]
    return table[table["placement"] != 0]


def _values(seed: SeedAudit, measure: str) -> FloatArray:
    drawn = _drawn(seed)
    if measure not in drawn:
        return np.full(len(drawn), np.nan)
    return drawn[measure].to_numpy(dtype=float)


def _fit(seed: SeedAudit, measure: str) -> pd.DataFrame:
    """Rows of the fit over all directions; none where it was not made."""
    table = seed.tables.get("decay")
    if table is None:
        return pd.DataFrame(columns=["distance", "fitted", "ceiling", "floor", "geometry"])
    return table[(table["measure"] == measure) & (table["direction"] == "all")]


def _undefined(seed: SeedAudit) -> bool:
    """Whether a Dice is undefined somewhere, which takes a line of its own."""
    return any(len(_head(seed, measure)) > 2 for measure in MEASURES)


def _limits(seed: SeedAudit) -> tuple[float, float]:
    known = [_values(seed, measure) for measure in MEASURES]
    for measure in MEASURES:
        known += list(_fit(seed, measure)[["ceiling", "floor", "geometry"]].to_numpy(float).T)
    values = np.concatenate(known)
    values = values[np.isfinite(values)]
    low, high = values.min(initial=0.0), values.max(initial=1.0)
    low = np.floor(low * 10) / 10 - (0.02 if low == 0 else 0)
    return max(float(low), LIMITS[0]), min(float(high) + 0.03, LIMITS[1])


def _head(seed: SeedAudit, measure: str) -> list[str]:
    """What stands over a chart: its measure, its tolerance, and how much of it is undefined."""
    lines = [SHORT[measure], ""]
    if (limit := tolerance(seed, measure)) is not None:
        shape = OPEN if limit["censored"] else FOUND
        lines[1] = f"{shape} {distance_words(limit['mm'], limit['censored'])}"
    elif measure.startswith("dice") and not seed.summary[f"n_reported_{measure[5:]}"]:
        lines[1] = "empty as reported"
    values = _values(seed, measure)
    missing = int(np.isnan(values).sum())
    if measure.startswith("dice") and 0 < missing < len(values):
        lines.append(f"{missing} undefined")
    return lines


def tolerance(seed: SeedAudit, measure: str, direction: str = "all") -> dict[str, Any] | None:
    """Target, distance in mm and whether it is a lower bound; None where there is none."""
    table = seed.tables.get("tolerance")
    if table is None:
        return None
    rows = table[(table["measure"] == measure) & (table["direction"] == direction)]
    if not len(rows) or not np.isfinite(rows["tolerance"].iloc[0]):
        return None
    row = rows.iloc[0]
    return {
        "target": float(row["target"]),
        "mm": float(row["tolerance"]),
        "censored": bool(row["censored"]),
    }


def _why_not(seed: SeedAudit, measure: str) -> str | None:
    """Why a chart is empty."""
    if np.isfinite(_values(seed, measure)).any():
        return None
    if measure != "ceiling_relative":
        return "Undefined everywhere: both maps are empty."
    if seed.summary.get("ceiling") is None:
        return "No ceiling: too few participants for two halves."
    return "The reported map is not repeated across halves beyond chance."


def _chart(ax: Axes, seed: SeedAudit, measure: str, colours: Palette) -> None:
    points, ink = _look(measure, colours)
    distance = _drawn(seed)["distance"].to_numpy(dtype=float)
    values = _values(seed, measure)
    defined = np.isfinite(values)
    distance, values = distance[defined], values[defined]
    shrink, many = crowding(len(values))
    size = {key: points[key] * shrink for key in ("markersize", "markeredgewidth")}
    low, high = ax.get_ylim()
    inside = (values >= low) & (values <= high)
    ax.plot(distance[inside], values[inside], **points | size, alpha=0.7, rasterized=many)
    for beyond, shape, edge in ((values < low, 11, low), (values > high, 10, high)):
        if beyond.any():
            triangle = points | size | {"marker": shape, "clip_on": False}
            ax.plot(distance[beyond], np.full(beyond.sum(), edge), **triangle)
    fit = _fit(seed, measure)
    for name, style in _levels(colours).items():
        if fit[name].notna().any():
            ax.plot(fit["distance"], fit[name], **style, zorder=2.5)
    line = (fit["distance"], fit["fitted"]) if len(fit) else binned_medians(distance, values)
    ax.plot(*line, color=colours.paper, linewidth=2.6, zorder=3)
    ax.plot(*line, color=ink, linewidth=1.3, zorder=4)
    if (limit := tolerance(seed, measure)) is not None:
        x, y = limit["mm"], limit["target"]
        ax.plot([0, x, x], [y, y, low], color=colours.ink, linewidth=0.6, zorder=4)
        ax.plot(x, y, **_tolerance_mark(colours, censored=limit["censored"]), zorder=5)


def _levels(colours: Palette) -> dict[str, dict[str, Any]]:
    """Look of what a similarity is held against."""
    return {
        "ceiling": {"color": colours.ink, "linewidth": 0.9, "linestyle": "dashed"},
        "floor": {"color": colours.ink, "linewidth": 1.1, "linestyle": "dotted"},
        "geometry": {"color": colours.soft, "linewidth": 1.0, "linestyle": "dashdot"},
    }


def _tolerance_mark(colours: Palette, *, censored: bool) -> dict[str, Any]:
    if censored:
        return mark(">", 4.5, colours.paper, colours.ink, 0.8)
    return mark("v", 4.5, colours.ink, colours.ink)


def _decay_legend(seed: SeedAudit, colours: Palette) -> list[Artist]:
    """Only what is there."""
    fitted = any(len(_fit(seed, measure)) for measure in MEASURES)
    name = "falling fit (isotonic)" if fitted else "medians of neighbours"
    handles: list[Artist] = [
        Line2D([], [], **mark("o", 3, "none", colours.ink), label="drawn placement"),
        Line2D([], [], color=colours.ink, linewidth=1.3, label=name),
    ]
    told = {
        "ceiling": "ceiling: itself across halves",
        "floor": "floor: unrelated seeds",
        "geometry": "geometry: spheres alone",
    }
    for level, style in _levels(colours).items():
        if any(_fit(seed, measure)[level].notna().any() for measure in MEASURES):
            handles.append(Line2D([], [], **style, label=told[level]))
    limits = [limit for m in MEASURES if (limit := tolerance(seed, m)) is not None]
    for censored, words in ((False, "tolerance at the target"), (True, "no limit in the cloud")):
        if any(limit["censored"] == censored for limit in limits):
            style = _tolerance_mark(colours, censored=censored)
            handles.append(Line2D([], [], **style, label=words))
    return handles


def rose(seed: SeedAudit, sheet: Sheet, letter: str = "") -> None:
    """Panel of directions: the tolerance along each of the six ways out of the seed."""
    sheet.title("Tolerance by direction", letter)
    measure = rose_measure(seed)
    if measure is None:
        reason = (
            "No tolerance: it needs at least three placements with a defined similarity to the "
            "reported map."
        )
        sheet.write(0, TITLE, wrapped(reason, sheet.width), linespacing=1.25)
        return
    limits = {way: tolerance(seed, measure, way) for way in WAYS}
    overall = tolerance(seed, measure)
    target = next(limit["target"] for limit in (overall, *limits.values()) if limit is not None)
    words = f"mm until {MEASURES[measure]} is below {number(target, 2)}"
    sheet.write(0, TITLE, words)
    top = TITLE + LINE + 1
    side = min(sheet.width - ROSE_LIST - 2, sheet.height - top)
    _petals(sheet, top, side, _farthest(seed), limits)
    _rose_list(seed, sheet, side + 2, top, limits)


def rose_measure(seed: SeedAudit) -> str | None:
    """The measure that directions are compared by."""
    told = seed.summary.get("most_fragile_measure")
    return told if told in MEASURES and "tolerance" in seed.tables else None


def _petals(
    sheet: Sheet, top: float, side: float, farthest: float, limits: dict[str, dict[str, Any] | None]
) -> None:
    colours = sheet.colours
    ax = sheet.place(0, top, side, side)
    reach = 1.24 * farthest
    ax.set_xlim(-reach, reach)
    ax.set_ylim(-reach, reach)
    ax.set_axis_off()
    rings = [ring for ring in MaxNLocator(2, steps=[1, 2, 4, 5]).tick_values(0, farthest)
             if 0 < ring <= farthest + 1e-9]  # fmt: skip
    for ring in rings:
        ax.add_patch(Circle((0, 0), ring, fill=False, edgecolor=colours.pale, linewidth=0.6))
        x, y = ring * _unit(315)
        plate: dict[str, Any] = {"facecolor": colours.paper, "edgecolor": "none", "pad": 0.4}
        ax.text(x, y, number(ring), ha="center", va="center", fontsize=TYPE, color=colours.soft,
                bbox=plate)  # fmt: skip
    for way, angle in WAYS.items():
        along = _unit(angle)
        x, y = 1.12 * farthest * along
        ax.text(x, y, way[0].upper(), ha="center", va="center_baseline",
                fontsize=TYPE)  # fmt: skip
        if (limit := limits[way]) is None:
            continue
        side_way = np.array([-along[1], along[0]])
        tip, belly = limit["mm"] * along, 0.62 * limit["mm"] * along
        half = 0.2 * limit["mm"] * side_way
        style: dict[str, Any] = {"facecolor": colours.plus_pale, "edgecolor": colours.ink}
        if limit["censored"]:
            style = {"facecolor": colours.paper, "edgecolor": colours.ink, "linestyle": "dashed"}
        ax.add_patch(Polygon([(0, 0), belly + half, tip, belly - half], linewidth=0.8, **style))
    ax.plot(0, 0, **mark("D", 2.4, colours.ink, colours.paper, 0.4), zorder=4)


def _unit(angle: float) -> FloatArray:
    """The direction of an angle in degrees, from the right and upwards."""
    return np.array([np.cos(np.radians(angle)), np.sin(np.radians(angle))])


def _rose_list(
    seed: SeedAudit, sheet: Sheet, left: float, top: float, limits: dict[str, dict[str, Any] | None]
) -> None:
    pitch = min(2 * LINE + 0.7, (sheet.height - top) / len(limits))
    fragile = seed.summary.get("most_fragile_direction")
    for row, (way, limit) in enumerate(limits.items()):
        words = "unknown" if limit is None else distance_words(limit["mm"], limit["censored"])
        weight = "bold" if way == fragile else "normal"
        sheet.write(left, top + row * pitch, f"{way}\n{words}", linespacing=1.15, weight=weight)


def rose_height(width: float) -> float:
    """Height of the panel at that width, mm."""
    return TITLE + LINE + 1 + max(min(width - ROSE_LIST - 2, 48.0), len(WAYS) * (2 * LINE + 0.7))
