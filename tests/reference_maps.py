"""Naive reference, first half: from images in memory to group maps, one plain loop at a time.

Part of `tests.reference`, see there. Rows are voxels in `voxel_list` order; NaN means missing.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Voxel = tuple[int, int, int]
Placement = Sequence[float]  # x, y, z, radius, all mm
SLACK = 1e-6  # mm, so that a voxel exactly on the surface counts whatever the rounding


class Run(NamedTuple):
    """One run: data (X, Y, Z, T), affine (4, 4), nuisance columns (T, k) without intercept."""

    data: Array
    affine: Array
    nuisance: Array


def voxel_list(mask: NDArray[np.bool_]) -> list[Voxel]:
    """List the indices of the voxels of a mask, last axis fastest: the row order of every map."""
    return [(int(i), int(j), int(k)) for i, j, k in np.argwhere(mask)]


def world(affine: Array, voxel: Sequence[float]) -> Array:
    """Give the world coordinate (mm) of a voxel centre: affine times (i, j, k, 1)."""
    return np.asarray(affine[:3, :3] @ np.asarray(voxel, dtype=float) + affine[:3, 3])


def largest_edge(affine: Array) -> float:
    """Give the largest voxel edge (mm): the longest column of the affine's 3 x 3 part."""
    return max(math.sqrt(float(np.sum(affine[:3, axis] ** 2))) for axis in range(3))


def ball_rows(voxels: Sequence[Voxel], affine: Array, at: Placement, radius: float) -> list[int]:
    """List the rows whose voxel centre lies in the closed ball, plus the voxel holding the centre.

    A centre on a face between voxels is held by all the voxels that touch it.
    """
    centre = np.asarray(at[:3], dtype=float)
    position = np.linalg.solve(affine[:3, :3], centre - affine[:3, 3])
    rows = []
    for row, voxel in enumerate(voxels):
        distance = math.sqrt(float(np.sum((world(affine, voxel) - centre) ** 2)))
        holds = bool(np.all(np.abs(position - voxel) <= 0.5 + SLACK))
        if distance <= radius + SLACK or holds:
            rows.append(row)
    return rows


def excluded_voxels(
    voxels: Sequence[Voxel], affine: Array, placements: Sequence[Placement], margin: float
) -> NDArray[np.bool_]:
    """Mark (V,) the union of all spheres, each widened by `margin` mm."""
    excluded = np.zeros(len(voxels), dtype=bool)
    for place in placements:
        for row in ball_rows(voxels, affine, place, place[3] + margin):
            excluded[row] = True
    return excluded


def polynomial_columns(n_volumes: int, order: int) -> Array:
    """Give the powers 1..order of time (T, order), time running from -1 to 1."""
    time = np.linspace(-1.0, 1.0, n_volumes)
    return np.array([time**power for power in range(1, order + 1)]).reshape(order, -1).T


def cosine_columns(n_volumes: int, repetition_time: float, band: tuple[float, float]) -> Array:
    """Give the DCT-II columns (T, k) whose frequency j / (2 T TR) lies outside the band (Hz)."""
    columns = []
    for j in range(1, n_volumes):
        frequency = j / (2 * n_volumes * repetition_time)
        if frequency < band[0] or frequency > band[1]:
            columns.append(np.cos(math.pi * j * (np.arange(n_volumes) + 0.5) / n_volumes))
    return np.array(columns).reshape(len(columns), n_volumes).T


def spike_columns(censored: NDArray[np.bool_]) -> Array:
    """Give one column (T, k) per censored volume, 1 there and 0 elsewhere."""
    volumes = [t for t in range(len(censored)) if censored[t]]
    columns = np.zeros((len(censored), len(volumes)))
    for column, volume in enumerate(volumes):
        columns[volume, column] = 1.0
    return columns


def with_intercept(nuisance: Array) -> Array:
    """Put an intercept before the nuisance columns, each scaled to unit length (same span)."""
    columns = [np.ones(len(nuisance))]
    for column in range(nuisance.shape[1]):
        length = math.sqrt(float(np.sum(nuisance[:, column] ** 2)))
        if length > 0:
            columns.append(nuisance[:, column] / length)
    return np.array(columns).T


def residuals(series: Array, columns: Array) -> Array:
    """Give what least squares on the columns leaves of one series (T,)."""
    coefficients = np.linalg.lstsq(columns, series, rcond=None)[0]
    return np.asarray(series - columns @ coefficients)


def residual_df(nuisance: Array) -> int:
    """Give T - rank of intercept and nuisance columns."""
    return int(len(nuisance) - np.linalg.matrix_rank(with_intercept(nuisance)))


def is_missing(series: Array) -> bool:
    """Say whether a series holds a non-finite value or never changes."""
    return not bool(np.all(np.isfinite(series))) or float(series.max()) == float(series.min())


def missing_voxels(runs: Sequence[Run], voxels: Sequence[Voxel]) -> NDArray[np.bool_]:
    """Mark (V,) the voxels that are missing in any run of one participant."""
    return np.array([any(is_missing(run[0][voxel]) for run in runs) for voxel in voxels])


def correlation(a: Array, b: Array) -> float:
    """Give Pearson's r of two series; NaN when one is constant."""
    a, b = a - a.mean(), b - b.mean()
    size = math.sqrt(float(np.sum(a * a)) * float(np.sum(b * b)))
    return float(np.sum(a * b)) / size if size > 0 else math.nan


def fisher_z(r: float) -> float:
    """Give atanh(r), r first clipped to +-(1 - 1e-7)."""
    return math.nan if math.isnan(r) else math.atanh(max(-1 + 1e-7, min(1 - 1e-7, r)))


def lag_one(series: Array) -> float:
    """Give the lag-1 autocorrelation, sum e_t e_(t-1) / sum e_t^2, of a residual series."""
    return float(np.sum(series[1:] * series[:-1]) / np.sum(series * series))


def effective_n(n: float, a: float, b: float) -> float:
    """Give n (1 - ab) / (1 + ab), a and b lag-1 autocorrelations (Bartlett 1946)."""
    return n * (1 - a * b) / (1 + a * b)


def run_maps(
    run: Run, voxels: Sequence[Voxel], spheres: Sequence[Sequence[int]], missing: NDArray[np.bool_]
) -> tuple[Array, Array]:
    """Give Fisher z and effective n, both (N, V), of every placement's sphere mean in one run.

    Missing voxels are left out of the sphere means; n is residual df + 1, which is T without
    nuisance columns.
    """
    data, _, nuisance = run
    columns, n = with_intercept(nuisance), residual_df(nuisance) + 1
    z = np.full((len(spheres), len(voxels)), math.nan)
    n_eff = np.full((len(spheres), len(voxels)), math.nan)
    left = {
        row: residuals(data[voxel], columns) for row, voxel in enumerate(voxels) if not missing[row]
    }
    memory = {row: lag_one(series) for row, series in left.items()}
    for place, sphere in enumerate(spheres):
        members = [data[voxels[row]] for row in sphere if not missing[row]]
        if not members:
            continue
        seed = residuals(np.sum(members, axis=0) / len(members), columns)
        seed_memory = lag_one(seed)
        for row, series in left.items():
            z[place, row] = fisher_z(correlation(seed, series))
            n_eff[place, row] = effective_n(n, seed_memory, memory[row])
    return z, n_eff


def combine_runs(z: Sequence[float], weights: Sequence[float]) -> float:
    """Give the weighted mean of z over runs, weights = residual df - 3."""
    return sum(w * value for w, value in zip(weights, z, strict=True)) / sum(weights)


def combined_sd(n_eff: Sequence[float], weights: Sequence[float]) -> float:
    """Give the SD of that mean: sqrt(sum w^2 / (n_eff - 3)) / sum w; NaN unless every n_eff > 3."""
    if not all(n > 3 for n in n_eff):
        return math.nan
    variance = sum(w * w / (n - 3) for w, n in zip(weights, n_eff, strict=True))
    return math.sqrt(variance) / sum(weights)


def participant_maps(
    runs: Sequence[Run], voxels: Sequence[Voxel], spheres: Sequence[Sequence[int]]
) -> dict[str, Any]:
    """Give one participant's z and sd of z (N, V), missing voxels (V,), residual df per run."""
    missing = missing_voxels(runs, voxels)
    degrees = [residual_df(run[2]) for run in runs]
    weights = [float(df - 3) for df in degrees]
    maps = [run_maps(run, voxels, spheres, missing) for run in runs]
    z, sd = np.full_like(maps[0][0], math.nan), np.full_like(maps[0][0], math.nan)
    for place in range(len(spheres)):
        for row in range(len(voxels)):
            z[place, row] = combine_runs([m[0][place, row] for m in maps], weights)
            sd[place, row] = combined_sd([m[1][place, row] for m in maps], weights)
    return {"z": z, "sd": sd, "missing": missing, "residual_df": degrees}


def contrast_fit(y: Array, design: Array, contrast: Array) -> tuple[float, float, float, int]:
    """Give effect, standard error, t and df of a contrast by ordinary least squares.

    y (n,), design (n, p) of full rank, contrast (p,). Effect c'b with b from lstsq; variance
    s^2 c'(X'X)^-1 c with s^2 = residual sum of squares / (n - p).
    """
    beta = np.linalg.lstsq(design, y, rcond=None)[0]
    df = len(y) - int(np.linalg.matrix_rank(design))
    rest = y - design @ beta
    variance = float(np.sum(rest**2)) / df
    error = math.sqrt(variance * float(contrast @ np.linalg.inv(design.T @ design) @ contrast))
    effect = float(contrast @ beta)
    return effect, error, effect / error, df


def group_maps(
    people: Sequence[Mapping[str, Any]],
    complete: NDArray[np.bool_],
    design: Array,
    contrast: Array,
) -> dict[str, Array]:
    """Give effect, se and t (N, V), NaN off the complete voxels, and df (N,).

    One participant alone: effect z, se the sd of z, t the standard normal score, df infinite.
    """
    shape = people[0]["z"].shape
    maps = {name: np.full(shape, math.nan) for name in ("effect", "se", "t")}
    df = np.full(shape[0], math.inf)
    for place in range(shape[0]):
        for row in np.flatnonzero(complete):
            if len(people) == 1:
                effect, error = people[0]["z"][place, row], people[0]["sd"][place, row]
                score = effect / error
            else:
                y = np.array([person["z"][place, row] for person in people])
                if not np.all(np.isfinite(y)):
                    continue
                effect, error, score, df[place] = contrast_fit(y, design, contrast)
            maps["effect"][place, row], maps["se"][place, row] = effect, error
            maps["t"][place, row] = score
    return {**maps, "df": df}
