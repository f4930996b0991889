"""The panels on anatomy: the cloud of placements, and where they agree."""

from __future__ import annotations

from collections.abc import Sequence
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
from seedaudit.report.style import ANATOMY, DIVERGING, INK, LINE, PALE, TITLE, TYPE, Sheet, crowding
from seedaudit.report.words import number, point
from seedaudit.results import SeedAudit

FULL_INK = 0.1
"""Share of placements from which a colour covers the anatomy wholly."""

COLUMNS = 4
GAP = 3.0
"""Between slices, mm."""
LEAST_WINDOW = 36.0
"""Half the width of the windows of the cloud, mm."""

CLOUD_FOOT = 2 * LINE + 1.5
AGREEMENT_FOOT = 2 * LINE + 5.8
SLICE_TITLE = 2 * LINE + 0.5


def cloud(seed: SeedAudit, sheet: Sheet, letter: str = "") -> None:
    """Panel of the cloud: three planes through the reported centre, all centres projected."""
    sheet.title("Reported seed and drawn placements", letter)
    top = TITLE + LINE + 0.5
    side = min((sheet.width - 2 * GAP) / 3, sheet.height - top - CLOUD_FOOT)
    at = np.asarray(seed.summary["at_mm"], dtype=float)
    reach = float(seed.summary["radius_mm"]) + float(seed.summary["within_mm"])
    half = max(LEAST_WINDOW, 2.5 * reach)
    for position, kind in enumerate(DIRECTIONS):
        left = position * (side + GAP)
        plane = near_plane(kind, at, half, step_of(seed))
        ax = sheet.place(left, top, side, side)
        _picture(ax, seed, plane)
        _frame(ax, plane)
        _placements(ax, seed, plane)
        axis = "xyz"[plane.through]
        label = f"{kind}, {axis} = {number(at[plane.through])} mm"
        sheet.write(left, TITLE, label)
    sheet.legend(0, top + side + 1.5, _cloud_legend(seed), 2)


def _placements(ax: Axes, seed: SeedAudit, plane: Plane) -> None:
    along, up, _ = DIRECTIONS[plane.kind]
    table = cloud_rows(seed)
    centres = table[["x", "y", "z"]].to_numpy(dtype=float)[:, [along, up]]
    drawn = table["kind"].isin(["jitter", "lattice"]).to_numpy()
    used = table["used"].to_numpy(dtype=bool)
    shrink, many = crowding(len(table))
    for shown, style in ((drawn & ~used, _ASIDE), (drawn & used, _USED)):
        size = {"markersize": style["markersize"] * shrink}
        ax.plot(*centres[shown].T, **style | size, rasterized=many)
    at = np.asarray(seed.summary["at_mm"], dtype=float)[[along, up]]
    radius = float(seed.summary["radius_mm"])
    for colour, width in (("white", 1.8), (INK, 0.8)):
        circle = Circle(
            (at[0], at[1]), radius, fill=False, edgecolor=colour, linewidth=width, zorder=3
        )
        ax.add_patch(circle)
    ax.plot(*at, **_REPORTED, zorder=4)


_USED: dict[str, Any] = {
    "linestyle": "none",
    "marker": "o",
    "markersize": 2.2,
    "markerfacecolor": "#e59a4c",
    "markeredgecolor": INK,
    "markeredgewidth": 0.35,
}
_ASIDE: dict[str, Any] = {
    "linestyle": "none",
    "marker": "x",
    "markersize": 3.2,
    "markeredgecolor": INK,
    "markeredgewidth": 0.8,
}
_REPORTED: dict[str, Any] = {
    "linestyle": "none",
    "marker": "D",
    "markersize": 4.2,
    "markerfacecolor": INK,
    "markeredgecolor": "white",
    "markeredgewidth": 0.7,
}


def _cloud_legend(seed: SeedAudit) -> list[Artist]:
    at, radius = seed.summary["at_mm"], seed.summary["radius_mm"]
    used, aside = seed.summary["n_placements_used"], seed.summary["n_placements_set_aside"]
    circle: dict[str, Any] = {
        "marker": "o",
        "markersize": 6,
        "markerfacecolor": "none",
        "markeredgecolor": INK,
    }
    handles: list[Artist] = [
        Line2D([], [], **_REPORTED, label=f"reported centre {point(at)} mm"),
        Line2D([], [], linestyle="none", **circle, label=f"its sphere, radius {number(radius)} mm"),
        Line2D([], [], **_USED, label=f"drawn placement, used ({used})"),
    ]
    if aside:
        handles.append(Line2D([], [], **_ASIDE, label=f"drawn placement, set aside ({aside})"))
    return handles


def agreement(seed: SeedAudit, sheet: Sheet, letter: str = "", places: int = 3) -> None:
    """Panel of agreement: axial planes at the seed and at the most contested places."""
    sheet.title("Share of placements in class + and in class −", letter)
    found = contested_places(seed, places)
    shown = [("at the reported seed", tuple(float(x) for x in seed.summary["at_mm"]))]
    for place in found:
        unit = "voxel" if place.n_voxels == 1 else "voxels"
        shown.append((f"contested: {place.n_voxels} {unit}", place.at))
    frame = body_frame(seed)
    columns = max(COLUMNS, 1 + places)
    extent = frame[1] - frame[0]
    room = (sheet.width - GAP * (columns - 1)) / columns
    top = TITLE + SLICE_TITLE
    scale = min(room / extent[0], (sheet.height - top - AGREEMENT_FOOT) / extent[1])
    width, height = scale * extent[0], scale * extent[1]
    for column, (label, at) in enumerate(shown):
        left = column * (room + GAP)
        sheet.write(left, TITLE, f"{label}\n{point(at)} mm", linespacing=1.2)
        ax = sheet.place(left, top, width, height)
        plane = whole_plane("axial", at, frame, step_of(seed))
        _picture(ax, seed, plane, overlay=True)
        _frame(ax, plane)
        _zone(ax, seed, plane)
        _reported_outline(ax, seed, plane)
        if column:
            _cross(ax, at[0], at[1], 0.06 * extent[0])
        else:
            ax.plot(at[0], at[1], **_REPORTED)
    if not found:
        left = room + GAP
        sheet.write(left, TITLE, "No voxel is contested.")
    _agreement_key(sheet, top + height + 1.5)


def _picture(ax: Axes, seed: SeedAudit, plane: Plane, *, overlay: bool = False) -> None:
    """Anatomy, and on it the shares; one image, so that the vector files hold one image."""
    colours = ANATOMY(np.clip(sample_smooth(seed.maps["anatomy"], plane), 0, 1))[..., :3]
    if overlay:
        positive = np.nan_to_num(sample(seed.maps["agreement_positive"], plane))
        negative = np.nan_to_num(sample(seed.maps["agreement_negative"], plane))
        colours = _blend(colours, positive, negative)
    ax.imshow(
        np.round(colours * 255).astype(np.uint8),
        origin="lower",
        extent=plane.window,
        interpolation="none",
        aspect="auto",
    )


def _blend(
    colours: NDArray[np.float64], positive: NDArray[np.float64], negative: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Lay the shares of both tails (...) over colours (..., 3); a voxel in both gets their mean."""
    total = positive + negative
    part = np.divide(positive, total, out=np.zeros_like(total), where=total > 0)[..., None]
    upper = DIVERGING(0.5 + 0.5 * np.clip(positive, 0, 1))[..., :3]
    lower = DIVERGING(0.5 - 0.5 * np.clip(negative, 0, 1))[..., :3]
    cover = np.clip(total / FULL_INK, 0, 1)[..., None]
    return np.asarray((1 - cover) * colours + cover * (part * upper + (1 - part) * lower))


def _frame(ax: Axes, plane: Plane) -> None:
    """Window, border and the letters of the directions."""
    ax.set_xlim(*plane.window[:2])
    ax.set_ylim(*plane.window[2:])
    ax.set_xticks([])
    ax.set_yticks([])
    for spine in ax.spines.values():
        spine.set_color(PALE)
    plate: dict[str, Any] = {"facecolor": "white", "edgecolor": "none", "alpha": 0.8, "pad": 0.6}
    for x, side, letter in zip((0.025, 0.975), ("left", "right"), plane.letters, strict=True):
        ax.text(
            x, 0.03, letter, transform=ax.transAxes, ha=side, va="bottom", fontsize=TYPE,
            weight="bold", bbox=plate,
        )  # fmt: skip


def _zone(ax: Axes, seed: SeedAudit, plane: Plane) -> None:
    zone = excluded_zone(seed, plane)
    if zone.any():
        ax.contourf(
            plane.across, plane.upward, zone.astype(float), levels=[0.5, 1.5], colors="none",
            hatches=["//////"],
        )  # fmt: skip
        ax.contour(
            plane.across, plane.upward, zone.astype(float), levels=[0.5], colors=INK,
            linewidths=0.5, linestyles="dotted",
        )  # fmt: skip


def _reported_outline(ax: Axes, seed: SeedAudit, plane: Plane) -> None:
    classes = np.nan_to_num(sample(seed.maps["class_reported"], plane))
    for sign, style in ((1, "solid"), (-1, "dashed")):
        held = (classes == sign).astype(float)
        if held.any() and not held.all():
            ax.contour(
                plane.across, plane.upward, held, levels=[0.5], colors=INK, linewidths=0.5,
                linestyles=style,
            )  # fmt: skip


def _cross(ax: Axes, x: float, y: float, arm: float) -> None:
    """An open cross, so that the voxel itself stays visible."""
    for width, colour in ((1.8, "white"), (0.8, INK)):
        for dx, dy in ((1, 0), (-1, 0), (0, 1), (0, -1)):
            ends = ([x + 0.5 * arm * dx, x + arm * dx], [y + 0.5 * arm * dy, y + arm * dy])
            ax.plot(*ends, color=colour, linewidth=width, solid_capstyle="butt")


def _agreement_key(sheet: Sheet, top: float) -> None:
    """Colour bar of both tails, and what lines and hatching mean."""
    left, width = 6.0, min(66.0, 0.38 * sheet.width)
    ax = sheet.place(left, top, width, 2.6)
    share = np.linspace(-1, 1, 401)
    ground = np.broadcast_to(ANATOMY(0.6)[:3], (1, share.size, 3))
    bar = _blend(ground, np.clip(share, 0, 1)[None], np.clip(-share, 0, 1)[None])
    ax.imshow(bar, extent=(-1, 1, 0, 1), aspect="auto", interpolation="none")
    ax.set_yticks([])
    ax.set_xticks([-1, -0.5, 0, 0.5, 1], ["100 %", "50 %", "0", "50 %", "100 %"], fontsize=TYPE)
    ax.xaxis.set_minor_locator(FixedLocator([-0.95, -0.05, 0.05, 0.95]))
    ax.tick_params(pad=1.5, labelsize=TYPE)
    below = top + 2.6 + 1.2 + LINE
    sheet.write(left, below, "class −")
    sheet.write(left + width, below, "class +", ha="right")
    line: dict[str, Any] = {"color": INK, "linewidth": 0.8}
    handles: Sequence[Artist] = (
        Line2D([], [], **line, label="class + as reported"),
        Line2D([], [], **line, linestyle="dashed", label="class − as reported"),
        Patch(
            facecolor="none", edgecolor=INK, linewidth=0.5, linestyle="dotted", hatch="//////",
            label="not analysed: spheres and margin",
        ),
        Line2D([], [], **_REPORTED, label="reported centre"),
        Line2D([], [], linestyle="none", marker="+", markersize=6, color=INK, label="contested"),
    )  # fmt: skip
    sheet.legend(left + width + 10, top, handles, 2)
