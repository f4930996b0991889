"""Where everything in the charts of the explorer stands; the template draws it as SVG."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from seedaudit.report.charts import binned_medians
from seedaudit.report.words import distance_words, number, similarity
from seedaudit.results import SeedAudit

MEASURES = {
    "dice_positive": "Dice +",
    "dice_negative": "Dice −",
    "spatial_r": "spatial r",
    "concordance": "concordance",
    "ceiling_relative": "ceiling-relative stability",
}
"""Names of similarities; those of `_ALWAYS` are shown in every result."""
_ALWAYS = ("dice_positive", "dice_negative", "spatial_r")
DIRECTIONS = {
    "left": (-1, 0), "right": (1, 0), "anterior": (0, 1), "posterior": (0, -1),
}  # fmt: skip
UPRIGHT = {"superior": 1, "inferior": -1}


@dataclass
class Chart:
    """One small chart: a window of numbers on a sheet of units of the page.

    Parameters
    ----------
    title : str
    x, y : (low, high)
        Range of the axes.
    labels : (str, str)
        Of the axes.
    width, height : float
    whole : bool
        The lower axis counts: only whole numbers stand there.
    """

    title: str
    x: tuple[float, float]
    y: tuple[float, float]
    labels: tuple[str, str]
    width: float = 420.0
    height: float = 250.0
    whole: bool = False
    marks: list[dict[str, Any]] = field(default_factory=list)
    lines: list[dict[str, str]] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    left, right, top, bottom = 40.0, 12.0, 12.0, 34.0

    def across(self, value: float) -> float:
        """Place of a number along the sheet."""
        low, high = self.x
        inner = self.width - self.left - self.right
        return round(self.left + (value - low) / (high - low) * inner, 2)

    def down(self, value: float) -> float:
        """Place of a number from the top of the sheet."""
        low, high = self.y
        inner = self.height - self.top - self.bottom
        return round(self.top + (high - value) / (high - low) * inner, 2)

    @property
    def x_ticks(self) -> list[tuple[float, str]]:
        """Places and words along the lower axis."""
        return [(self.across(v), number(v, 2)) for v in _ticks(*self.x, self.whole)]

    @property
    def y_ticks(self) -> list[tuple[float, str]]:
        """Places and words along the left axis."""
        return [(self.down(v), number(v, 2)) for v in _ticks(*self.y)]

    def line(self, x: Iterable[float], y: Iterable[float], look: str, words: str = "") -> None:
        """A line through points; it is broken where a number is missing. `words` name it."""
        path, pen = [], "M"
        for a, b in zip(x, y, strict=True):
            if np.isfinite(b):
                path.append(f"{pen}{self.across(a)} {self.down(b)}")
                pen = "L"
            else:
                pen = "M"
        if path:
            self.lines.append({"path": "".join(path), "look": look, "words": words})

    def level(self, value: float, look: str, words: str) -> None:
        """A level line, with its words."""
        if value is not None and np.isfinite(value):
            self.line(self.x, (value, value), look, words)

    def mark(self, x: float, y: float, shape: str, **more: Any) -> None:
        """One marker; `more` goes to the template."""
        if np.isfinite(x) and np.isfinite(y):
            self.marks.append({"x": self.across(x), "y": self.down(y), "shape": shape, **more})


def _ticks(low: float, high: float, whole: bool = False) -> list[float]:
    places = MaxNLocator(5, integer=whole).tick_values(low, high)
    return [float(v) for v in places if low <= v <= high]


SHAPES = {"dice_positive": "round", "dice_negative": "wedge"}


def decay_charts(seed: SeedAudit) -> list[Chart]:
    """Similarity against shift distance, a chart for each measure."""
    drawn = seed.tables["similarity"].query("placement != 0")
    fits = seed.tables.get("decay")
    extra = [] if fits is None else [m for m in fits["measure"].unique() if m not in _ALWAYS]
    farthest = max(float(seed.summary["within_mm"]), drawn["distance"].max())
    return [_decay(seed, drawn, fits, measure, farthest) for measure in (*_ALWAYS, *extra)]


def _decay(
    seed: SeedAudit, drawn: pd.DataFrame, fits: pd.DataFrame | None, measure: str, farthest: float
) -> Chart:
    own = None if fits is None else fits.query("measure == @measure and direction == 'all'")
    known = drawn[measure].to_numpy(float) if measure in drawn else np.full(len(drawn), np.nan)
    levels = [] if own is None else own[["fitted", "ceiling", "floor", "geometry"]].to_numpy(float)
    everything = np.concatenate([known, np.ravel(levels), [0.0, 1.0]])
    low, high = float(np.nanmin(everything)), float(np.nanmax(everything))
    chart = Chart(
        MEASURES.get(measure, measure), (0, farthest), (np.floor(low * 10) / 10, high + 0.02),
        ("shift distance, mm", "similarity"),
    )  # fmt: skip
    distance = drawn["distance"].to_numpy(float)
    for placement, x, y in zip(drawn["placement"], distance, known, strict=True):
        words = f"placement {placement}: {similarity(y)} at {number(x)} mm"
        chart.mark(x, y, SHAPES.get(measure, "cross"), placement=placement, words=words)
    if own is not None and len(own):
        chart.line(own["distance"], own["fitted"], "fit", "fit that can only fall")
        chart.line(own["distance"], own["geometry"], "geometry", "geometry: two spheres in noise")
        chart.level(own["ceiling"].iloc[0], "ceiling", "ceiling: same seed, other participants")
        chart.level(own["floor"].iloc[0], "floor", "floor: unrelated seeds")
    elif np.isfinite(known).any():
        fine = np.isfinite(known)
        chart.line(*binned_medians(distance[fine], known[fine]), "fit", "medians of neighbours")
    limit = seed.tables.get("tolerance")
    if limit is not None:
        for row in limit.query("measure == @measure and direction == 'all'").itertuples():
            petal = Petal("all", float(row.tolerance), bool(row.censored), int(row.n))
            words = f"tolerance {petal.words}, target {number(row.target, 2)}"
            x = petal.tolerance
            chart.line((x, x), (row.target, chart.y[0]), "target", words)
    undefined = int(np.isnan(known).sum()) if measure in drawn else 0
    if undefined:
        chart.notes.append(f"Undefined (both maps empty) at {undefined} of {len(drawn)}.")
    return chart


@dataclass(frozen=True)
class Petal:
    """Tolerance in one direction, mm; `censored` reads "at least"; NaN: too few placements."""

    direction: str
    tolerance: float
    censored: bool
    n: int

    @property
    def words(self) -> str:
        """As text."""
        if not np.isfinite(self.tolerance):
            return f"unknown ({self.n} placements)"
        return distance_words(self.tolerance, self.censored)


def rose(table: pd.DataFrame | None, measure: str = "dice_positive") -> list[Petal]:
    """Tolerance in each direction for one measure; empty without a table."""
    if table is None or not len(table):
        return []
    rows = table[table["measure"] == measure].set_index("direction")
    return [
        Petal(name, float(row.tolerance), bool(row.censored), int(row.n))
        for name in (*DIRECTIONS, *UPRIGHT)
        if name in rows.index and (row := rows.loc[name]) is not None
    ]


def petal_shapes(petals: Sequence[Petal], farthest: float) -> list[dict[str, Any]]:
    """Outlines of petals around (0, 0), in mm with y downwards; upright ones stand at x = 0."""
    shapes = []
    for petal in petals:
        length = petal.tolerance if np.isfinite(petal.tolerance) else 0.0
        upright = petal.direction in UPRIGHT
        way = (0, UPRIGHT[petal.direction]) if upright else DIRECTIONS[petal.direction]
        along = np.array([way[0], -way[1]], dtype=float)
        side = np.array([along[1], -along[0]])
        half = 0.12 * farthest if upright else 0.32 * length
        tip, wide = length * along, (length if upright else 0.8 * length) * along
        start = side * (half if upright else 0.06 * farthest)
        corners = [start, wide + half * side, tip, wide - half * side, -start]
        label = 1.16 * farthest * along
        shapes.append(
            {
                "points": " ".join(f"{x:.2f},{y:.2f}" for x, y in corners),
                "upright": upright,
                "petal": petal,
                "letter": petal.direction[0].upper(),
                "x": round(float(label[0]), 2),
                "y": round(float(label[1]), 2),
            }
        )
    return shapes


def threshold_charts(table: pd.DataFrame) -> list[Chart]:
    """Dice against the cut, a chart for each rule."""
    titles = {
        "density": ("strongest share of voxels by |t|", "share of voxels"),
        "effect": ("smallest |effect|", "Fisher z"),
    }
    charts = []
    for rule, rows in table.groupby("rule", sort=False):
        title, label = titles.get(str(rule), (str(rule), "cut"))
        cut = rows["cut"].to_numpy(float)
        chart = Chart(title, (0, float(cut.max())), (0, 1.02), (label, "mean Dice"))
        for tail, look, words in (("positive", "plus", "Dice +"), ("negative", "minus", "Dice −")):
            chart.line(cut, rows[f"dice_{tail}_mean"].to_numpy(float), look, words)
        charts.append(chart)
    return charts


def participant_chart(table: pd.DataFrame) -> Chart | None:
    """Median and smallest spatial r of each participant used, sorted, so without any label."""
    used = table[table["used"]].dropna(subset="median_spatial_r").sort_values("median_spatial_r")
    if not len(used):
        return None
    low = min(0.0, float(used["min_spatial_r"].min()))
    n = len(used)
    chart = Chart(
        "spatial r with the reported placement's map", (0.5, n + 0.5),
        (np.floor(low * 10) / 10, 1.02), ("participants, ordered by their median", "spatial r"),
        whole=True,
    )  # fmt: skip
    rows = zip(used["median_spatial_r"], used["min_spatial_r"], strict=True)
    for position, (median, least) in enumerate(rows, start=1):
        chart.line((position, position), (least, median), "stem")
        chart.mark(position, median, "round", words=f"median {similarity(median)}")
        chart.mark(position, least, "dash", words=f"smallest {similarity(least)}")
    return chart


def effect_scale(table: pd.DataFrame) -> float:
    """Largest |effect| of any region, to one decimal upwards; the bars reach so far."""
    columns = ["reported_effect", "effect_min", "effect_max"]
    values = np.abs(table[columns].to_numpy(float)) if len(table) else np.zeros((0, 0))
    known: NDArray[np.float64] = values[np.isfinite(values)]
    return max(0.1, float(np.ceil(known.max(initial=0.0) * 10) / 10))
