"""How much two maps share: Dice per tail, spatial similarity, and Dice against the threshold.

The two tails are never merged. Voxels that are NaN in any of the maps are left out of every
spatial similarity, so that all of them describe the same voxels.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from seedaudit.inference.threshold import density_cuts

FloatArray = NDArray[np.float64]
Classes = NDArray[np.int8]
Maps = NDArray[np.floating[Any]]

# Voxels per matrix product: a block of a few hundred placements stays within some ten MB.
_BLOCK = 8192


class DiceTable(NamedTuple):
    """Dice (N, 2) and map sizes (N, 2) of every placement; columns are + and -."""

    dice: FloatArray
    sizes: NDArray[np.int64]


class Similarity(NamedTuple):
    """Pearson r, Lin's concordance and RMS difference of every placement, each (N,)."""

    r: FloatArray
    concordance: FloatArray
    rms_difference: FloatArray


def dice(both: ArrayLike, first: ArrayLike, second: ArrayLike) -> FloatArray:
    """Dice coefficient from sizes.

    Parameters
    ----------
    both, first, second : (...) arrays
        Voxels in both maps, in the first, in the second; broadcast against one another.

    Returns
    -------
    (...) array, 0 to 1
        NaN where both maps are empty.

    Notes
    -----
    Dice L.R. (1945) Ecology 26:297-302: 2 both / (first + second).
    """
    total = np.add(first, second, dtype=np.float64)
    twice = np.multiply(both, 2.0)
    return np.asarray(np.divide(twice, total, out=np.full(total.shape, np.nan), where=total > 0))


def dice_with_reference(reference: Classes, classes: Classes) -> DiceTable:
    """Dice of every placement with one reference map, per tail, and the map sizes.

    Parameters
    ----------
    reference : (V,) int8 array
        Classes of the reported placement.
    classes : (N, V) int8 array
        Classes of the placements.

    Returns
    -------
    DiceTable
    """
    sizes = np.empty((len(classes), 2), dtype=np.int64)
    both = np.empty_like(sizes)
    for column, sign in enumerate((1, -1)):
        held = reference == sign
        for n, row in enumerate(classes):
            here = row == sign
            sizes[n, column] = np.count_nonzero(here)
            both[n, column] = np.count_nonzero(here & held)
    reference_sizes = [np.count_nonzero(reference == 1), np.count_nonzero(reference == -1)]
    return DiceTable(dice(both, reference_sizes, sizes), sizes)


def dice_pairs(classes: Classes) -> tuple[FloatArray, FloatArray]:
    """Dice of all pairs of placements, per tail.

    Parameters
    ----------
    classes : (N, V) int8 array

    Returns
    -------
    positive, negative : (N, N) arrays, symmetric
        NaN where both maps are empty.
    """
    n_placements, n_voxels = classes.shape
    both = np.zeros((2, n_placements, n_placements))
    for start in range(0, n_voxels, _BLOCK):
        block = classes[:, start : start + _BLOCK]
        for tail, sign in enumerate((1, -1)):
            # A block count is far below 2^24, so float32 holds it exactly.
            here = (block == sign).astype(np.float32)
            both[tail] += here @ here.T
    sizes = both.diagonal(axis1=1, axis2=2)
    positive, negative = dice(both, sizes[:, :, None], sizes[:, None, :])
    return positive, negative


def spatial_similarity(reference: Maps, effects: Maps) -> Similarity:
    """Likeness of every effect map with one reference map.

    Parameters
    ----------
    reference : (V,) array
        Effect of the reported placement, Fisher z.
    effects : (N, V) array
        Effects of the placements, Fisher z.

    Returns
    -------
    Similarity
        r and the concordance are NaN where a map is constant (the concordance: where both are, at
        the same value).

    Notes
    -----
    Lin L.I. (1989) Biometrics 45:255-268, with variances of divisor V (ddof 0).
    """
    common = _common_voxels(effects) & ~np.isnan(reference)
    x = reference[common].astype(np.float64)
    out = np.full((3, len(effects)), np.nan)
    if not x.size:
        return Similarity(*out)
    x_mean, x_var = x.mean(), x.var()
    for n, row in enumerate(effects):
        y = row[common].astype(np.float64)
        shift = x_mean - y.mean()
        y_var = y.var()
        covariance = np.dot(x - x_mean, y - y.mean()) / x.size
        if x_var > 0 and y_var > 0:
            out[0, n] = np.clip(covariance / np.sqrt(x_var * y_var), -1.0, 1.0)
        if x_var + y_var + shift**2 > 0:
            out[1, n] = 2 * covariance / (x_var + y_var + shift**2)
        out[2, n] = np.sqrt(np.mean((x - y) ** 2))
    return Similarity(*out)


def correlation_pairs(effects: Maps) -> FloatArray:
    """Spatial Pearson correlation of all pairs of effect maps.

    Parameters
    ----------
    effects : (N, V) array
        Fisher z.

    Returns
    -------
    (N, N) array, symmetric, -1 to 1
        NaN in the rows and columns of a constant map.
    """
    common = _common_voxels(effects)
    n_placements, n_voxels = effects.shape
    means = np.array([row[common].mean(dtype=np.float64) if common.any() else 0 for row in effects])
    products = np.zeros((n_placements, n_placements))
    for start in range(0, n_voxels, _BLOCK):
        block = effects[:, start : start + _BLOCK][:, common[start : start + _BLOCK]]
        centred = block - means[:, None]
        products += centred @ centred.T
    scale = np.sqrt(products.diagonal())
    scale = np.where(scale > 0, scale, np.nan)
    return np.clip(products / scale / scale[:, None], -1.0, 1.0)


@dataclass(frozen=True)
class Sweep:
    """Dice with one reference map at many cuts; placements are looked at one by one.

    A voxel passes the first b cuts in `order` (loosest first), and no other. With the number of
    passed cuts as a bin per sign, one joint histogram with the reference holds the sizes and
    overlaps at every cut.

    Parameters
    ----------
    cuts : (C,)
        As they are named in the table.
    order : (C,) int
    values_at : callable
        From the absolute values of a map to the absolute value of every cut.
    reference : (V,) int
        Bins of the reference map.
    """

    cuts: FloatArray
    order: NDArray[np.intp]
    values_at: Callable[[FloatArray], FloatArray]
    reference: NDArray[np.int64]

    @classmethod
    def density(cls, reference: Maps, shares: ArrayLike) -> Sweep:
        """Every map keeps its top share of voxels by |t|.

        Parameters
        ----------
        reference : (V,) array
            t of the reported placement; NaN marks a voxel without a test.
        shares : (C,) array
            Shares of the tested voxels, 0 to 1.
        """
        shares = np.asarray(shares, dtype=np.float64)
        order = np.argsort(-shares)

        def values_at(size: FloatArray) -> FloatArray:
            return density_cuts(size, shares)

        return cls(shares, order, values_at, _bins(reference, order, values_at))

    @classmethod
    def value(cls, reference: Maps, cuts: ArrayLike) -> Sweep:
        """Every map keeps the voxels of at least one absolute value.

        Parameters
        ----------
        reference : (V,) array
            Effect of the reported placement; NaN marks a missing voxel.
        cuts : (C,) array
            Absolute values, 0 or more, on the scale of the effects.
        """
        cuts = np.asarray(cuts, dtype=np.float64)
        order = np.argsort(cuts)
        return cls(cuts, order, lambda size: cuts, _bins(reference, order, lambda size: cuts))

    def look(self, values: Maps) -> NDArray[np.int64]:
        """Sizes of one placement's map (V,), of the reference and of what both share.

        Returns
        -------
        (3, 2, C) array
            What both share, the reference, the map; tails + and -; cuts in `order`.
        """
        n_cuts = self.cuts.size
        width = 2 * n_cuts + 1
        bins = _bins(values, self.order, self.values_at)
        joint = np.bincount(self.reference * width + bins, minlength=width**2)
        found = np.empty((3, 2, n_cuts), dtype=np.int64)
        square = joint.reshape(width, width)
        for tail, side in enumerate((square, square[::-1, ::-1])):
            # passing[a, b]: voxels past at least a + 1 cuts in the reference and b + 1 here.
            passing = side[:, n_cuts + 1 :][::-1, ::-1].cumsum(axis=0).cumsum(axis=1)[::-1, ::-1]
            found[0, tail] = passing[n_cuts + 1 :].diagonal()
            found[1, tail] = side[n_cuts + 1 :].sum(axis=1)[::-1].cumsum()[::-1]
            found[2, tail] = passing[0]
        return found

    def table(self, looks: Sequence[NDArray[np.int64]]) -> dict[str, FloatArray]:
        """Means over placements from what `look` gave for each.

        Returns
        -------
        dict of (C,) arrays
            ``cut``; ``dice_positive_mean`` and ``dice_negative_mean`` over the placements where
            Dice is defined (NaN where it never is); ``dice_positive_undefined`` and
            ``dice_negative_undefined``, the number of placements left out; ``n_positive`` and
            ``n_negative``, the mean map sizes of the placements.
        """
        both, first, second = np.stack(looks, axis=1)
        overlap = dice(both, first, second)
        undefined = np.isnan(overlap).sum(axis=0)
        defined = len(looks) - undefined
        mean = np.divide(
            np.nansum(overlap, axis=0), defined,
            out=np.full(defined.shape, np.nan), where=defined > 0,
        )  # fmt: skip
        table = {"cut": self.cuts}
        back = np.argsort(self.order)
        for tail, name in enumerate(("positive", "negative")):
            table[f"dice_{name}_mean"] = mean[tail, back]
            table[f"dice_{name}_undefined"] = undefined[tail, back].astype(np.float64)
            table[f"n_{name}"] = second[:, tail].mean(axis=0)[back]
        return table


def _bins(
    values: Maps, order: NDArray[np.intp], values_at: Callable[[FloatArray], FloatArray]
) -> NDArray[np.int64]:
    """Number of passed cuts, with the sign of the value, counted from the number of cuts."""
    size = np.abs(values.astype(np.float64))
    passed = np.searchsorted(values_at(size)[order], size, side="right")
    signs = np.where(np.isnan(values), 0, np.sign(values)).astype(np.int64)
    return passed * signs + len(order)


def _common_voxels(maps: Maps) -> NDArray[np.bool_]:
    """Voxels that are a number in every map."""
    common = np.ones(maps.shape[1], dtype=bool)
    for row in maps:
        common &= ~np.isnan(row)
    return common
