"""The panel that sets each participant's motion beside how far the shifted maps stay alike."""

from __future__ import annotations

import numpy as np
from matplotlib.lines import Line2D

from seedaudit.report.style import LINE, TITLE, TYPE, Sheet, mark, plain_axes, wrapped
from seedaudit.report.words import number
from seedaudit.results import SeedAudit

LEAST_KNOWN = 3
"""Participants whose motion is known, below which nothing is drawn."""

FOOT = 9.0 + 3 * LINE
CHART = 42.0


def motion_known(seed: SeedAudit) -> bool:
    """Whether the confounds tables told the motion of enough participants."""
    people = seed.tables.get("participants")
    return people is not None and int(people["mean_motion"].notna().sum()) >= LEAST_KNOWN


def motion_height(width: float) -> float:
    """Height of the panel, mm."""
    return TITLE + 1 + CHART + FOOT


def motion(seed: SeedAudit, sheet: Sheet, letter: str = "") -> None:
    """Panel of motion: each participant's median and least similarity against mean motion.

    A check and not a test of the hypothesis: it asks whether those who moved drive the
    instability. Participants carry no labels.
    """
    sheet.title("Motion and the similarity of shifted maps, by participant", letter)
    if not motion_known(seed):
        reason = "No column of the confounds tables tells the motion of enough participants."
        sheet.write(0, TITLE, wrapped(reason, sheet.width), linespacing=1.25)
        return
    people = seed.tables["participants"].dropna(subset=["mean_motion", "median_spatial_r"])
    across = people["mean_motion"].to_numpy(dtype=float)
    median = people["median_spatial_r"].to_numpy(dtype=float)
    least = people["min_spatial_r"].to_numpy(dtype=float)
    ax = sheet.place(9.5, TITLE + 1, sheet.width - 10.5, sheet.height - TITLE - 1 - FOOT)
    plain_axes(ax)
    colours = sheet.colours
    ax.vlines(across, least, median, color=colours.soft, linewidth=0.6, zorder=2)
    usual = mark("o", 3.4, colours.plus_pale, colours.ink, 0.5)
    lowest = mark("v", 2.8, colours.paper, colours.ink, 0.5)
    ax.plot(across, least, **lowest, zorder=3)
    ax.plot(across, median, **usual, zorder=4)
    ax.set_ylim(min(0.0, float(np.min(least)) - 0.05), 1.02)
    ax.set_xlabel("mean framewise displacement, mm", fontsize=TYPE, labelpad=1.5)
    ax.set_ylabel("spatial r with reported map", fontsize=TYPE, labelpad=2)
    handles = [
        Line2D([], [], **usual, label="median over drawn placements"),
        Line2D([], [], **lowest, label="least similar placement"),
    ]
    foot = sheet.height - FOOT + 9
    sheet.legend(0, foot, handles, 2 if sheet.width > 95 else 1)
    sheet.write(0, foot + 2 * LINE, f"rank correlation with the median {rank_words(seed)}")


def rank_words(seed: SeedAudit) -> str:
    """The rank correlation of motion and median similarity."""
    found = seed.summary.get("motion_rank_correlation")
    return "n/a" if found is None else number(found, 2)
