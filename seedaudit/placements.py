"""Clouds of placements: where a seed could have been put, and the spheres that follow."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from math import isfinite, sqrt

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray
from scipy.sparse import csr_array, vstack

from seedaudit.errors import DataError, Problem, StudyError
from seedaudit.shifts import Shifts, draw_shifts, is_length
from seedaudit.space.grid import Grid, VoxelSet
from seedaudit.space.spheres import sphere_coverage, sphere_weights

__all__ = ["Cloud", "add_controls", "build_cloud", "draw_shifts", "uncertainty_sd"]

CONTROL_DISTANCE = 30.0
"""Least distance of a control seed from the reported one, mm."""

_CONTROL_STREAM = 1  # keeps the controls apart from the shifts, which use the random state itself


@dataclass(frozen=True, eq=False)
class Cloud:
    """The placements of one seed and the voxels each of them averages.

    Parameters
    ----------
    table : DataFrame, N rows
        seed, placement (0 = reported), kind (reported, jitter, lattice, control), x, y, z, dx, dy,
        dz, distance, radius (mm), n_voxels, coverage (0 to 1), used, flags (words joined by ``;``).
    weights : csr_array (N, V)
        Sphere weights of every row, unused ones included, not normalised.
    """

    table: pd.DataFrame
    weights: csr_array


def uncertainty_sd(budget: Mapping[str, float]) -> float:
    """Combine independent sources of placement error by root sum of squares.

    Parameters
    ----------
    budget : mapping of str to float
        Standard deviation of each source, mm, 0 or more; at least one above 0.

    Raises
    ------
    StudyError
        If a value is not a length, or none is above 0.
    """
    problems = [
        Problem(f"uncertainty.{source}", f"{sd:g}", "a standard deviation in mm, 0 or more")
        for source, sd in budget.items()
        if not (isfinite(sd) and sd >= 0)
    ]
    if not problems and not any(budget.values()):
        problems = [Problem("uncertainty", "no source above 0 mm", "at least one above 0 mm")]
    if problems:
        raise StudyError(*problems)
    return sqrt(sum(sd**2 for sd in budget.values()))


def build_cloud(
    seed: str,
    at: ArrayLike,
    radius: float,
    voxels: VoxelSet,
    *,
    draw: str = "ball",
    count: int = 100,
    within: float = 6.0,
    random_state: int = 0,
    sd: float | None = None,
    distances: Sequence[float] | None = None,
    step: float | None = None,
    radii: Sequence[float] | None = None,
    snap: bool = False,
    weighting: str = "hard",
    inside: VoxelSet | None = None,
    min_coverage: float = 0.5,
    midline: bool = True,
) -> Cloud:
    """Place a seed as reported and at drawn shifts, and find the voxels of each sphere.

    Parameters
    ----------
    seed : str
        Name of the seed.
    at : array (3,)
        Reported centre, mm, RAS+ world.
    radius : float
        Reported radius, mm.
    voxels : VoxelSet
        The seed mask.
    draw, count, within, random_state, sd, distances, step
        As in `draw_shifts`.
    radii : sequence of float, optional
        Cross every shift with each of these radii, mm; the reported row keeps `radius`.
    snap : bool
        Round shifts to whole voxel steps, so that every whole sphere has the same shape. This may
        carry a shift past `within`, by up to half a voxel's diagonal.
    weighting : {"hard", "soft"}
        As in `sphere_weights`.
    inside : VoxelSet, optional
        Drawn centres must fall in a voxel of this set, on any grid; more are drawn until `count`
        do. A lattice keeps the points that do.
    min_coverage : float
        Placements with less of their sphere in the mask are set aside, 0 to 1.
    midline : bool
        Flag spheres that cross x = 0.

    Raises
    ------
    StudyError
        If an argument is out of range.
    DataError
        If the reported centre is not in the mask, or its sphere is covered too little; if less
        than 1 % of the drawn centres fall `inside`; if fewer than two drawn placements remain.
    """
    centre = np.asarray(at, dtype=np.float64)
    _check_seed(seed, centre, radius, radii, min_coverage)
    _require_centre(seed, centre, voxels)

    def snapped(shifts: Shifts) -> Shifts:
        return _snapped(shifts, voxels.grid) if snap else shifts

    def lies_in(area: VoxelSet, shifts: Shifts) -> NDArray[np.bool_]:
        return area.rows_at(area.grid.voxel_of(centre + snapped(shifts))) >= 0

    drawn = draw_shifts(
        draw,
        count=count,
        within=within,
        random_state=random_state,
        sd=sd,
        distances=distances,
        step=step,
        accept=None if inside is None else partial(lies_in, inside),
    )
    shifts = snapped(drawn)
    sizes = [radius] if radii is None else list(radii)
    all_shifts = np.concatenate([np.zeros((1, 3)), np.repeat(shifts, len(sizes), axis=0)])
    all_radii = np.concatenate([[radius], np.tile(sizes, len(shifts))]).astype(np.float64)
    kind = "lattice" if draw == "lattice" else "jitter"
    cloud = _measure(
        seed, centre, all_shifts, all_radii, voxels, weighting, min_coverage, midline, kind
    )
    _require_usable(seed, cloud.table, min_coverage)
    return cloud


def add_controls(
    cloud: Cloud,
    voxels: VoxelSet,
    count: int,
    *,
    inside: VoxelSet | None = None,
    apart: float = 0.0,
    random_state: int = 0,
    snap: bool = False,
    weighting: str = "hard",
    min_coverage: float = 0.5,
    midline: bool = True,
) -> Cloud:
    """Add control seeds, which have nothing to do with the reported one, as further rows.

    Centres are uniform in the voxels of `inside` (or of the mask), the radius is that of the
    reported seed, and only spheres that are covered enough are taken.

    Parameters
    ----------
    cloud : Cloud
    voxels : VoxelSet
        The seed mask.
    count : int
        Control seeds wanted, 0 or more; fewer are added where there is no room for more.
    inside : VoxelSet, optional
    apart : float
        Least distance from the reported centre, mm, where it is more than `CONTROL_DISTANCE`.
    random_state : int
    snap, weighting, min_coverage, midline
        As in `build_cloud`.
    """
    reported = cloud.table.iloc[0]
    centre = reported[["x", "y", "z"]].to_numpy(np.float64)
    area = voxels if inside is None else inside
    rng = np.random.default_rng([random_state, _CONTROL_STREAM])
    axes, reverse = area.grid.canonical_axes
    # steps along the axes nearest to R, A and S, so that the storage order has no say
    steps = area.grid.affine[:3, list(axes)] * np.where(reverse, -1, 1)
    places = area.xyz + rng.uniform(-0.5, 0.5, (len(area), 3)) @ steps.T
    # rounded, so that what an affine loses in a header does not show
    shifts = np.round(places, 3) - centre
    if snap:
        shifts = _snapped(shifts, voxels.grid)
    far = np.linalg.norm(shifts, axis=1) >= max(apart, CONTROL_DISTANCE)
    shifts = shifts[far & (voxels.rows_at(voxels.grid.voxel_of(centre + shifts)) >= 0)]
    shifts = rng.permutation(shifts)
    chosen: list[NDArray[np.float64]] = []
    # a few more than are missing at a time: most centres are covered well enough
    while len(chosen) < count and len(shifts):
        trial, shifts = shifts[: 2 * count], shifts[2 * count :]
        radius = float(reported["radius"])
        coverage, _ = sphere_coverage(voxels, centre + trial, radius, weighting)
        chosen += list(trial[coverage >= min_coverage])
    if count == 0 or not chosen:
        return cloud
    added = np.array(chosen[:count])
    seed, radii = str(reported["seed"]), np.full(len(added), float(reported["radius"]))
    more = _measure(seed, centre, added, radii, voxels, weighting, min_coverage, midline, "control")
    more.table["placement"] += len(cloud.table)
    more.table["kind"] = "control"
    table = pd.concat([cloud.table, more.table], ignore_index=True)
    return Cloud(table, csr_array(vstack([cloud.weights, more.weights])))


def _measure(
    seed: str,
    centre: NDArray[np.float64],
    shifts: Shifts,
    radii: NDArray[np.float64],
    voxels: VoxelSet,
    weighting: str,
    min_coverage: float,
    midline: bool,
    kind: str,
) -> Cloud:
    centres = centre + shifts
    weights = sphere_weights(voxels, centres, radii, weighting)
    coverage, leaves_image = sphere_coverage(voxels, centres, radii, weighting)
    n_voxels = np.diff(weights.indptr).astype(np.int64)
    used = (coverage >= min_coverage) & (n_voxels > 0)
    marks = {
        "leaves_image": leaves_image,
        "leaves_mask": coverage < 1 - 1e-9,
        "low_coverage": coverage < min_coverage,
        "midline": (np.abs(centres[:, 0]) < radii) & midline,
        "one_voxel": n_voxels == 1,
        "repeat": _repeats(weights),
    }
    flags = [
        ";".join(word for word, marked in zip(marks, row, strict=True) if marked)
        for row in zip(*marks.values(), strict=True)
    ]
    table = pd.DataFrame(
        {
            "seed": seed,
            "placement": np.arange(len(shifts)),
            "kind": ["reported", *[kind] * (len(shifts) - 1)],
            **dict(zip(("x", "y", "z"), centres.T, strict=True)),
            **dict(zip(("dx", "dy", "dz"), shifts.T, strict=True)),
            "distance": np.linalg.norm(shifts, axis=1),
            "radius": radii,
            "n_voxels": n_voxels,
            "coverage": coverage,
            "used": used,
            "flags": flags,
        }
    )
    return Cloud(table, weights)


def _repeats(weights: csr_array) -> NDArray[np.bool_]:
    """Rows that hold the very voxels and weights of an earlier row."""
    seen: set[tuple[bytes, bytes]] = set()
    repeat = np.zeros(weights.shape[0], dtype=bool)
    for row, (start, end) in enumerate(zip(weights.indptr, weights.indptr[1:], strict=False)):
        key = weights.indices[start:end].tobytes(), weights.data[start:end].tobytes()
        repeat[row] = key in seen
        seen.add(key)
    return repeat


def _snapped(shifts: Shifts, grid: Grid) -> Shifts:
    steps = shifts @ grid.inverse[:3, :3].T
    # rounding noise first, so that a shift of exactly half a voxel goes one way on every storage;
    # adding 0.0 turns -0.0 into 0.0
    return np.asarray(np.rint(np.round(steps, 9)) @ grid.affine[:3, :3].T + 0.0)


def _check_seed(
    seed: str,
    centre: NDArray[np.float64],
    radius: float,
    radii: Sequence[float] | None,
    min_coverage: float,
) -> None:
    problems = []
    if centre.shape != (3,) or not np.isfinite(centre).all():
        problems.append(Problem(f"seed {seed}, at", str(centre.tolist()), "x, y, z in mm"))
    for where, size in [("radius", radius), *(("radii", size) for size in radii or ())]:
        if not is_length(size):
            problems.append(Problem(f"seed {seed}, {where}", str(size), "a length above 0 mm"))
    if radii is not None and not len(radii):
        problems.append(Problem(f"seed {seed}, radii", "none", "one or more lengths in mm"))
    if not 0 <= min_coverage <= 1:
        problems.append(Problem("min_coverage", str(min_coverage), "0 to 1"))
    if problems:
        raise StudyError(*problems)


def _require_centre(seed: str, centre: NDArray[np.float64], voxels: VoxelSet) -> None:
    if voxels.rows_at(voxels.grid.voxel_of(centre)) >= 0:
        return
    place = "mask" if voxels.grid.contains(centre) else "image"
    found = f"({_mm(centre)}) lies outside the {place}"
    remedy = "check the coordinate and its space"
    if len(voxels):
        distance = np.linalg.norm(voxels.xyz - centre, axis=1)
        nearest = int(distance.argmin())
        found += f", {distance[nearest]:.1f} mm from the nearest voxel of the mask"
        remedy += f"; that voxel is at ({_mm(voxels.xyz[nearest])})"
    raise DataError(Problem(f"seed {seed}, at", found, "a centre in the mask", remedy))


def _require_usable(seed: str, table: pd.DataFrame, min_coverage: float) -> None:
    if not table["used"].iloc[0]:
        share = table["coverage"].iloc[0]
        raise DataError(
            Problem(
                f"seed {seed}, at",
                f"the mask covers {share:.2f} of the reported sphere",
                f"min_coverage = {min_coverage:g} or more",
                "move the seed, shrink its radius, or lower min_coverage",
            )
        )
    n_drawn, n_used = len(table) - 1, int(table["used"].iloc[1:].sum())
    if n_used < 2:
        raise DataError(
            Problem(
                f"seed {seed}, placements",
                f"{n_used} of {n_drawn} drawn placements can be used",
                "2 or more",
                "draw more, widen `within`, lower min_coverage, or check the mask",
            )
        )


def _mm(point: NDArray[np.float64]) -> str:
    return ", ".join(f"{value:.6g}" for value in point)
