"""The panels on anatomy: the cloud of placements, and where they agree."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import Circle, Patch
from matplotlib.ticker import FixedLocator
from numpy.typing import NDArray

from seedaudit.report.slices import (
    DIRECTIONS,
    Plane,
    body_frame,
    cloud_rows,
    contested_places,
    excluded_zone,
    near_plane,
    sample,
    sample_smooth,
    step_of,
    whole_plane,
)
from seedaudit.report.style import LINE, TITLE, TYPE, Palette, Sheet, crowding, mark
from seedaudit.report.words import number, plural, point
from seedaudit.results import SeedAudit

FULL_INK = 0.1
"""Share of placements from which a colour covers the anatomy wholly."""

GAP = 3.0
"""Between slices, mm."""
LEAST_WINDOW = 36.0
"""Half the width of the windows of the cloud, mm."""
LEGEND_WIDTH = 58.0
"""Of the legend of the cloud, mm; it stands beside the windows where there is room for both."""
WIDE = 130.0
"""A sheet from this width on has its legends side by side with something, mm."""
LEAST_TITLE = 33.0
"""Least side of a window whose title stands on one line, mm."""
NARROWEST_SLICE = 31.0
"""Of a slice with its two lines of title, mm."""
USUAL_SLICES = 4

SLICE_TITLE = 2 * LINE + 0.5


def reported_mark(colours: Palette) -> dict[str, Any]:
    """Look of the reported centre."""
    return mark("D", 4.2, colours.ink, colours.paper, 0.7)


def _used_mark(colours: Palette) -> dict[str, Any]:
    return mark("o", 2.2, colours.plus_pale, colours.ink, 0.35)


def _aside_mark(colours: Palette) -> dict[str, Any]:
    return mark("x", 3.2, "none", colours.ink, 0.8)


def cloud(seed: SeedAudit, sheet: Sheet, letter: str = "") -> None:
    """Panel of the cloud: three planes through the reported centre, all centres projected."""
    sheet.title("Reported seed and drawn placements", letter)
    beside = sheet.width >= WIDE
    top, foot = _cloud_head(sheet.width), 0.0 if beside else _cloud_foot(sheet.width)
    side = min(_window(sheet.width), sheet.height - top - foot)
    at = np.asarray(seed.summary["at_mm"], dtype=float)
    reach = float(seed.summary["radius_mm"]) + float(seed.summary["within_mm"])
    half = max(LEAST_WINDOW, 2.5 * reach)
    for position, kind in enumerate(DIRECTIONS):
        left = position * (side + GAP)
        plane = near_plane(kind, at, half, step_of(seed))
        ax = sheet.place(left, top, side, side)
        picture(ax, seed, plane, sheet.colours)
        frame(ax, plane, sheet.colours)
        _placements(ax, seed, plane, sheet.colours)
        axis = "xyz"[plane.through]
        parts = kind, f"{axis} = {number(at[plane.through])} mm"
        words = (", " if top < TITLE + 2 * LINE else "\n").join(parts)
        sheet.write(left, TITLE, words, linespacing=1.2)
    handles = _cloud_legend(seed, sheet.colours)
    if beside:
        sheet.legend(3 * (side + GAP) + 2, top + 1, handles, 1)
    else:
        sheet.legend(0, top + side + 1.5, handles, 2 if sheet.width > 105 else 1)


def _window(width: float) -> float:
    """Side of a window of the cloud on a sheet of that width, mm."""
    return (width - 2 * GAP - (LEGEND_WIDTH if width >= WIDE else 0)) / 3


def _cloud_head(width: float) -> float:
    """Height of the titles: two lines over narrow windows, mm."""
    return TITLE + (1 if _window(width) >= LEAST_TITLE else 2) * LINE + 0.5


def _cloud_foot(width: float) -> float:
    return (2 if width > 105 else 4) * LINE + 1.5


def cloud_height(width: float) -> float:
    """Height of the panel at that width, mm."""
    return _cloud_head(width) + _window(width) + (0 if width >= WIDE else _cloud_foot(width))


def _placements(ax: Axes, seed: SeedAudit, plane: Plane, colours: Palette) -> None:
    along, up, _ = DIRECTIONS[plane.kind]
    table = cloud_rows(seed)
    centres = table[["x", "y", "z"]].to_numpy(dtype=float)[:, [along, up]]
    drawn = table["kind"].isin(["jitter", "lattice"]).to_numpy()
    used = table["used"].to_numpy(dtype=bool)
    shrink, many = crowding(len(table))
    for shown, style in (
        (drawn & ~used, _aside_mark(colours)),
        (drawn & used, _used_mark(colours)),
    ):
        size = {"markersize": style["markersize"] * shrink}
        ax.plot(*centres[shown].T, **style | size, rasterized=many)
    at = np.asarray(seed.summary["at_mm"], dtype=float)[[along, up]]
    radius = float(seed.summary["radius_mm"])
    for colour, width in ((colours.paper, 1.8), (colours.ink, 0.8)):
        circle = Circle(
            (at[0], at[1]), radius, fill=False, edgecolor=colour, linewidth=width, zorder=3
        )
        ax.add_patch(circle)
    ax.plot(*at, **reported_mark(colours), zorder=4)


def _cloud_legend(seed: SeedAudit, colours: Palette) -> list[Artist]:
    at, radius = seed.summary["at_mm"], seed.summary["radius_mm"]
    used, aside = seed.summary["n_placements_used"], seed.summary["n_placements_set_aside"]
    circle = mark("o", 6, "none", colours.ink, 1.0)
    handles: list[Artist] = [
        Line2D([], [], **reported_mark(colours), label=f"reported centre {point(at)} mm"),
        Line2D([], [], **circle, label=f"its sphere, radius {number(radius)} mm"),
        Line2D([], [], **_used_mark(colours), label=f"drawn placement, used ({used})"),
    ]
    if aside:
        label = f"drawn placement, set aside ({aside})"
        handles.append(Line2D([], [], **_aside_mark(colours), label=label))
    return handles


def agreement(seed: SeedAudit, sheet: Sheet, letter: str = "", places: int = 3) -> None:
    """Panel of agreement: axial planes at the seed and at the most contested places."""
    sheet.title("Share of placements in class + and in class −", letter)
    found = contested_places(seed, places)
    shown = [("at the reported seed", tuple(float(x) for x in seed.summary["at_mm"]))]
    shown += [(f"contested: {plural(place.n_voxels, 'voxel')}", place.at) for place in found]
    box = body_frame(seed)
    extent = box[1] - box[0]
    columns, rows = _columns(sheet.width, 1 + places)
    room = (sheet.width - GAP * (columns - 1)) / columns
    down = (sheet.height - TITLE - _key_height(sheet.width)) / rows - SLICE_TITLE
    scale = min(room / extent[0], (down - (GAP if rows > 1 else 0)) / extent[1])
    width, height = scale * extent[0], scale * extent[1]
    pitch = SLICE_TITLE + height + GAP
    for number_shown, (label, at) in enumerate(shown):
        row, column = divmod(number_shown, columns)
        left, top = column * (room + GAP), TITLE + row * pitch
        sheet.write(left, top, f"{label}\n{point(at)} mm", linespacing=1.2)
        ax = sheet.place(left, top + SLICE_TITLE, width, height)
        plane = whole_plane("axial", at, box, step_of(seed))
        picture(ax, seed, plane, sheet.colours, overlay=True)
        frame(ax, plane, sheet.colours)
        _zone(ax, seed, plane, sheet.colours)
        _reported_outline(ax, seed, plane, sheet.colours)
        if number_shown:
            _cross(ax, at[0], at[1], 0.06 * extent[0], sheet.colours)
        else:
            ax.plot(at[0], at[1], **reported_mark(sheet.colours))
    if not found:
        sheet.write(room + GAP, TITLE, "No voxel is contested.")
    used_rows = -(-len(shown) // columns)
    _agreement_key(sheet, TITLE + used_rows * pitch - GAP + 1.5)


def _columns(width: float, count: int) -> tuple[int, int]:
    """Columns and rows of so many slices on a sheet of that width, as even as can be.

    A few slices keep the size that they have among `USUAL_SLICES`.
    """
    count = max(count, USUAL_SLICES)
    rows = -(-count // max(1, int((width + GAP) / (NARROWEST_SLICE + GAP))))
    return -(-count // rows), rows


def agreement_height(width: float, seed: SeedAudit, most_slice: float, places: int = 3) -> float:
    """Height of the panel at that width, mm, its slices at most so high."""
    extent = np.diff(body_frame(seed), axis=0)[0]
    columns, rows = _columns(width, 1 + places)
    room = (width - GAP * (columns - 1)) / columns
    slice_height = min(most_slice, room * extent[1] / extent[0])
    between = GAP if rows > 1 else 0
    return TITLE + rows * (SLICE_TITLE + slice_height + between) + _key_height(width)


def picture(
    ax: Axes, seed: SeedAudit, plane: Plane, colours: Palette, *, overlay: bool = False
) -> None:
    """Anatomy, and on it the shares; one image, so that the vector files hold one image."""
    ground = colours.anatomy(np.clip(sample_smooth(seed.maps["anatomy"], plane), 0, 1))[..., :3]
    if overlay:
        positive = np.nan_to_num(sample(seed.maps["agreement_positive"], plane))
        negative = np.nan_to_num(sample(seed.maps["agreement_negative"], plane))
        ground = blend(ground, positive, negative, colours)
    ax.imshow(
        np.round(ground * 255).astype(np.uint8),
        origin="lower",
        extent=plane.window,
        interpolation="none",
        aspect="auto",
    )


def blend(
    ground: NDArray[np.float64],
    positive: NDArray[np.float64],
    negative: NDArray[np.float64],
    colours: Palette,
) -> NDArray[np.float64]:
    """Lay the shares of both tails (...) over colours (..., 3); a voxel in both gets their mean."""
    total = positive + negative
    part = np.divide(positive, total, out=np.zeros_like(total), where=total > 0)[..., None]
    upper = colours.diverging(0.5 + 0.5 * np.clip(positive, 0, 1))[..., :3]
    lower = colours.diverging(0.5 - 0.5 * np.clip(negative, 0, 1))[..., :3]
    cover = np.clip(total / FULL_INK, 0, 1)[..., None]
    return np.asarray((1 - cover) * ground + cover * (part * upper + (1 - part) * lower))


def frame(ax: Axes, plane: Plane, colours: Palette) -> None:
    """Window, border and the letters of the directions."""
    ax.set_xlim(*plane.window[:2])
    ax.set_ylim(*plane.window[2:])
    ax.set_xticks([])
    ax.set_yticks([])
    for spine in ax.spines.values():
        spine.set_color(colours.pale)
    plate: dict[str, Any] = {
        "facecolor": colours.paper, "edgecolor": "none", "alpha": 0.8, "pad": 0.6,
    }  # fmt: skip
    for x, side, letter in zip((0.025, 0.975), ("left", "right"), plane.letters, strict=True):
        ax.text(
            x, 0.03, letter, transform=ax.transAxes, ha=side, va="bottom", fontsize=TYPE,
            weight="bold", bbox=plate,
        )  # fmt: skip


def _zone(ax: Axes, seed: SeedAudit, plane: Plane, colours: Palette) -> None:
    zone = excluded_zone(seed, plane)
    if zone.any():
        ax.contourf(
            plane.across, plane.upward, zone.astype(float), levels=[0.5, 1.5], colors="none",
            hatches=["//////"],
        )  # fmt: skip
        ax.contour(
            plane.across, plane.upward, zone.astype(float), levels=[0.5], colors=colours.ink,
            linewidths=0.5, linestyles="dotted",
        )  # fmt: skip


def _reported_outline(ax: Axes, seed: SeedAudit, plane: Plane, colours: Palette) -> None:
    classes = np.nan_to_num(sample(seed.maps["class_reported"], plane))
    for sign, style in ((1, "solid"), (-1, "dashed")):
        held = (classes == sign).astype(float)
        if held.any() and not held.all():
            ax.contour(
                plane.across, plane.upward, held, levels=[0.5], colors=colours.ink, linewidths=0.5,
                linestyles=style,
            )  # fmt: skip


def _cross(ax: Axes, x: float, y: float, arm: float, colours: Palette) -> None:
    """An open cross, so that the voxel itself stays visible."""
    for width, colour in ((1.8, colours.paper), (0.8, colours.ink)):
        for dx, dy in ((1, 0), (-1, 0), (0, 1), (0, -1)):
            ends = ([x + 0.5 * arm * dx, x + arm * dx], [y + 0.5 * arm * dy, y + arm * dy])
            ax.plot(*ends, color=colour, linewidth=width, solid_capstyle="butt")


def _key_height(width: float) -> float:
    if width >= WIDE:
        return 2 * LINE + 5.8
    return 2 * LINE + 5.8 + (3 if width > 105 else 5) * LINE


def _agreement_key(sheet: Sheet, top: float) -> None:
    """Colour bar of both tails, and what lines and hatching mean."""
    colours = sheet.colours
    beside = sheet.width >= WIDE
    left, width = 6.0, min(66.0, 0.38 * sheet.width if beside else sheet.width - 12)
    ax = sheet.place(left, top, width, 2.6)
    share = np.linspace(-1, 1, 401)
    ground = np.broadcast_to(colours.anatomy(0.6)[:3], (1, share.size, 3))
    bar = blend(ground, np.clip(share, 0, 1)[None], np.clip(-share, 0, 1)[None], colours)
    ax.imshow(bar, extent=(-1, 1, 0, 1), aspect="auto", interpolation="none")
    ax.set_yticks([])
    ax.set_xticks([-1, -0.5, 0, 0.5, 1], ["100 %", "50 %", "0", "50 %", "100 %"], fontsize=TYPE)
    ax.xaxis.set_minor_locator(FixedLocator([-0.95, -0.05, 0.05, 0.95]))
    ax.tick_params(pad=1.5, labelsize=TYPE)
    below = top + 2.6 + 1.2 + LINE
    sheet.write(left, below, "class −")
    sheet.write(left + width, below, "class +", ha="right")
    line: dict[str, Any] = {"color": colours.ink, "linewidth": 0.8}
    handles: list[Artist] = [
        Line2D([], [], **line, label="class + as reported"),
        Line2D([], [], **line, linestyle="dashed", label="class − as reported"),
        Patch(
            facecolor="none", edgecolor=colours.ink, linewidth=0.5, linestyle="dotted",
            hatch="//////", label="not analysed: spheres and margin",
        ),
        Line2D([], [], **reported_mark(colours), label="reported centre"),
        Line2D([], [], **mark("+", 6, "none", colours.ink, 1.0), label="contested"),
    ]  # fmt: skip
    if beside:
        sheet.legend(left + width + 10, top, handles, 2)
    else:
        sheet.legend(0, below + LINE + 1, handles, 2 if sheet.width > 105 else 1)
