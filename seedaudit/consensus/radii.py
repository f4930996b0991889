"""Where the variation of a region's effect comes from: participants, position, or radius."""

from __future__ import annotations

from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

FACTORS = ("participants", "position", "radius")


def crossed(
    values: NDArray[np.floating[Any]], positions: NDArray[np.int_], radii: FloatArray
) -> tuple[FloatArray, NDArray[np.int_], FloatArray]:
    """Arrange values of placements by position and radius.

    Parameters
    ----------
    values : (n, N, K)
        Of n participants, N placements and K regions.
    positions : (N,) int
        Which placements have the same centre.
    radii : (N,)
        mm

    Returns
    -------
    values : (n, P, R, K)
    positions : (P,) int
        Those where every radius occurs, once; the others are left out, which keeps the layout
        balanced.
    radii : (R,)
        Ascending, mm.
    """
    levels, column = np.unique(np.round(radii, 6), return_inverse=True)
    places, row = np.unique(positions, return_inverse=True)
    cell = np.full((len(places), len(levels)), -1)
    count = np.zeros(cell.shape, int)
    cell[row, column] = np.arange(len(row))
    np.add.at(count, (row, column), 1)
    complete = (count == 1).all(axis=1)
    arranged = np.asarray(values, dtype=np.float64)[:, cell[complete]]
    return arranged, places[complete], levels


def mean_squares(values: FloatArray) -> dict[tuple[int, ...], FloatArray]:
    """Mean squares of every effect of a fully crossed layout with one value in each cell.

    Parameters
    ----------
    values : (n_1, ..., n_F, K)
        K independent responses; each factor with two levels or more.

    Returns
    -------
    dict of (K,) arrays
        By the factors of the effect, as axis numbers; the effect of all factors is the residual.
    """
    factors = tuple(range(values.ndim - 1))
    # the sums of squares of numbers far from 0 would lose their digits
    centred = values - values[(0,) * len(factors)]
    centred -= centred.mean(axis=factors)
    found: dict[tuple[int, ...], FloatArray] = {}
    means: dict[tuple[int, ...], FloatArray] = {(): np.zeros(values.shape[-1])}
    for effect in _effects(factors):
        others = tuple(factor for factor in factors if factor not in effect)
        part = centred.mean(axis=others, keepdims=True)
        for smaller in _effects(effect):
            if smaller != effect:
                part = part - means[smaller]
        means[effect] = part
        cells = np.prod([values.shape[factor] for factor in others])
        freedom = np.prod([values.shape[factor] - 1 for factor in effect])
        found[effect] = cells * (part**2).sum(axis=factors) / freedom
    return found


def variance_components(values: FloatArray) -> dict[tuple[int, ...], FloatArray]:
    """Variance components of a fully crossed random layout with one value in each cell.

    Parameters
    ----------
    values : (n_1, ..., n_F, K)
        As in `mean_squares`.

    Returns
    -------
    dict of (K,) arrays
        By the factors of the effect; unbiased, and so sometimes below 0.

    Notes
    -----
    Expected mean squares of the random model (Cornfield J. & Tukey J.W. (1956) Ann. Math. Stat.
    27:907-949): E MS_u is the sum over all v that contain u of N_v times the component of v, N_v
    being the cells of one level of v. Inclusion and exclusion solves that for the components.
    """
    squares = mean_squares(values)
    components = {}
    for effect in squares:
        cells = np.prod(
            [values.shape[factor] for factor in range(values.ndim - 1) if factor not in effect]
        )
        components[effect] = (
            sum(
                (-1) ** (len(larger) - len(effect)) * square
                for larger, square in squares.items()
                if set(effect) <= set(larger)
            )
            / cells
        )
    return components


def variation_sources(values: FloatArray, index: NDArray[np.int_]) -> dict[str, NDArray[Any]]:
    """How much of the variation of each region's mean z comes from what.

    Parameters
    ----------
    values : (n, P, R, K)
        From `crossed`: participants, positions, radii, regions; n and P at least 2. With a single
        radius the layout is participants by positions.
    index : (K,)
        Labels of the regions.

    Returns
    -------
    dict of columns
        A row for each region and source: ``index``; ``source``, such as ``position`` or
        ``participants x position``, ``residual`` being the interaction of all; ``variance``
        (squared Fisher z; negative estimates count as 0); ``share`` of the total.

    Raises
    ------
    ValueError
        Fewer than two participants or positions.
    """
    if values.shape[0] < 2 or values.shape[1] < 2:
        raise ValueError("variance components need two participants and two positions or more")
    names: tuple[str, ...] = FACTORS
    if values.shape[2] == 1:
        values, names = values[:, :, 0], FACTORS[:2]
    components = variance_components(values)
    variance = np.maximum(np.array(list(components.values())), 0)
    total = variance.sum(axis=0)
    share = np.divide(variance, total, out=np.full_like(variance, np.nan), where=total > 0)
    labels = [
        "residual" if len(effect) == len(names) else " x ".join(names[f] for f in effect)
        for effect in components
    ]
    return {
        "index": np.repeat(index, len(labels)),
        "source": np.tile(labels, len(index)),
        "variance": variance.T.ravel(),
        "share": share.T.ravel(),
    }


def _effects(factors: tuple[int, ...]) -> list[tuple[int, ...]]:
    """Every non-empty set of the factors, smaller ones first."""
    return [chosen for size in range(1, len(factors) + 1) for chosen in combinations(factors, size)]
