"""How far a seed can be moved: monotone decay of similarity, and where it falls below a target."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sklearn.isotonic import IsotonicRegression

FloatArray = NDArray[np.float64]

DIRECTIONS = ("all", "left", "right", "posterior", "anterior", "inferior", "superior")
"""All placements, then the sectors in the order -x, +x, -y, +y, -z, +z."""

TARGETS = {
    "dice_positive": 0.8,
    "dice_negative": 0.8,
    "ceiling_relative": 0.9,
}
"""Similarity that a placement must keep, by measure."""

LEAST_PLACEMENTS = 3
"""Fewer placements in a direction describe no decay."""


@dataclass(frozen=True)
class Decay:
    """Monotone fit of a similarity against distance.

    Parameters
    ----------
    distance, fitted : (M,) arrays
        Corners of the fit, which is straight between them; `distance` starts at 0, mm.
    n : int
        Placements behind it.
    reach : float
        Farthest of them, mm.
    """

    distance: FloatArray
    fitted: FloatArray
    n: int
    reach: float

    def at(self, distances: FloatArray) -> FloatArray:
        """The fit at any distance up to `reach`; NaN beyond."""
        values = np.interp(distances, self.distance, self.fitted)
        return np.where(np.asarray(distances) <= self.reach + 1e-9, values, np.nan)

    def tolerance(self, target: float) -> tuple[float, bool]:
        """Distance at which the fit falls below the target, mm; or `reach`, and True: censored."""
        below = np.flatnonzero(self.fitted < target)
        if not len(below):
            return self.reach, True
        corner = int(below[0])
        high, low = self.fitted[corner - 1 : corner + 1]
        start, stop = self.distance[corner - 1 : corner + 1]
        return float(start + (stop - start) * (high - target) / (high - low)), False


def sectors(shifts: FloatArray) -> NDArray[np.intp]:
    """Position in `DIRECTIONS` of the axis sector that each shift lies in.

    Parameters
    ----------
    shifts : (N, 3) array
        mm, RAS+.

    Returns
    -------
    (N,) int
        1 to 6: the axis of the largest component, with its sign; 0 for no shift. A tie goes to
        the first axis.
    """
    size = np.abs(shifts)
    axis = size.argmax(axis=1)
    along = np.take_along_axis(shifts, axis[:, None], axis=1)[:, 0]
    return np.where(size.max(axis=1) > 0, 1 + 2 * axis + (along > 0), 0)


def decay_fit(distance: FloatArray, similarity: FloatArray, start: float = 1.0) -> Decay | None:
    """Fit a similarity that can only fall with distance.

    Parameters
    ----------
    distance : (N,) array
        mm, above 0.
    similarity : (N,) array
        NaN where undefined.
    start : float
        Similarity of the reported placement to itself.

    Returns
    -------
    Decay or None
        None with fewer than `LEAST_PLACEMENTS` defined similarities.

    Notes
    -----
    Isotonic least squares (Barlow R.E. et al. 1972, Statistical Inference under Order
    Restrictions), from scikit-learn; no value above `start` is fitted.
    """
    defined = ~np.isnan(similarity)
    if defined.sum() < LEAST_PLACEMENTS:
        return None
    x, y = distance[defined], similarity[defined]
    fit = IsotonicRegression(increasing=False, y_max=start).fit(x, y)
    corners, fitted = fit.X_thresholds_, fit.y_thresholds_
    return Decay(
        np.concatenate([[0.0], corners]),
        np.concatenate([[start], fitted]).astype(np.float64),
        int(defined.sum()),
        float(x.max()),
    )


def decay_fits(
    shifts: FloatArray, similarity: dict[str, FloatArray]
) -> dict[tuple[str, str], Decay | None]:
    """Fits by measure and direction.

    Parameters
    ----------
    shifts : (N, 3) array
        Shifts of the drawn placements, mm, RAS+.
    similarity : dict of (N,) arrays
        Similarity to the reported placement by measure.
    """
    distance = np.linalg.norm(shifts, axis=1)
    sector = sectors(shifts)
    fits = {}
    for measure, values in similarity.items():
        for number, direction in enumerate(DIRECTIONS):
            chosen = (sector == number) if number else np.ones(len(shifts), bool)
            fits[measure, direction] = decay_fit(distance[chosen], values[chosen])
    return fits


def decay_table(
    fits: dict[tuple[str, str], Decay | None],
    distances: FloatArray,
    ceilings: dict[str, float],
    floors: dict[str, float],
    geometry: dict[str, FloatArray],
) -> dict[str, NDArray[Any]]:
    """Columns of the fitted lines at the given distances, one block for each fit.

    Parameters
    ----------
    fits : dict
        From `decay_fits`; a fit that is None has no rows.
    distances : (D,) array
        mm; each fit ends at its own farthest placement.
    ceilings, floors : dict of float by measure
    geometry : dict of (D,) arrays by measure
    """
    columns: dict[str, list[Any]] = {
        key: []
        for key in ("measure", "direction", "distance", "fitted", "n", "ceiling", "floor",
                    "geometry")
    }  # fmt: skip
    missing = np.full(len(distances), np.nan)
    for (measure, direction), fit in fits.items():
        if fit is None:
            continue
        inside = distances < fit.reach
        # the last row stands at the farthest placement, wherever that is
        line = np.interp(fit.reach, distances, geometry.get(measure, missing))
        rows = int(inside.sum()) + 1
        columns["distance"] += [*distances[inside], fit.reach]
        columns["fitted"] += [*fit.at(distances[inside]), fit.fitted[-1]]
        columns["geometry"] += [*geometry.get(measure, missing)[inside], line]
        constant = {
            "measure": measure,
            "direction": direction,
            "n": fit.n,
            "ceiling": ceilings.get(measure, np.nan),
            "floor": floors.get(measure, np.nan),
        }
        for key, value in constant.items():
            columns[key] += [value] * rows
    return {key: np.array(values) for key, values in columns.items()}


def tolerance_table(fits: dict[tuple[str, str], Decay | None]) -> dict[str, NDArray[Any]]:
    """Tolerance by measure and direction, for the measures that have a target.

    Columns measure, target, direction, tolerance (mm), censored, n, farthest (mm): a censored
    tolerance reads "at least".
    """
    rows = []
    for (measure, direction), fit in fits.items():
        if measure not in TARGETS:
            continue
        target = TARGETS[measure]
        value, censored, n, reach = np.nan, False, 0, np.nan
        if fit is not None:
            value, censored = fit.tolerance(target)
            n, reach = fit.n, fit.reach
        rows.append((measure, target, direction, value, censored, n, reach))
    names = ("measure", "target", "direction", "tolerance", "censored", "n", "farthest")
    return {name: np.array(column) for name, column in zip(names, zip(*rows, strict=True),
                                                           strict=True)}  # fmt: skip


def most_fragile(table: dict[str, NDArray[Any]], measure: str) -> str | None:
    """Direction of the smallest tolerance of a measure; None where none falls below the target."""
    chosen = (table["measure"] == measure) & (table["direction"] != "all") & ~table["censored"]
    chosen &= ~np.isnan(table["tolerance"])
    if not chosen.any():
        return None
    rows = np.flatnonzero(chosen)
    return str(table["direction"][rows[table["tolerance"][rows].argmin()]])
