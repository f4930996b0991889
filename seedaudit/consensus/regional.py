"""What happens to every network region when the seed moves."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from seedaudit.consensus.agreement import class_counts, effect_spread
from seedaudit.consensus.chance import ac1_from_shares, unit_agreement
from seedaudit.consensus.overlap import dice

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer[Any]]
Classes = NDArray[np.int8]

# Share of a region's voxels from which its larger tail is called.
CALL_SHARE = 0.10


def regional_stability(labels: IntArray, index: IntArray, counts: IntArray) -> FloatArray:
    """Gwet's AC1 over the voxels of every region, with the placements as raters.

    Parameters
    ----------
    labels : (V,) int array
        Region of every voxel, 0 for none.
    index : (K,) int array
        Regions in the wanted order; labels that are not in it are ignored.
    counts : (V, 3) int array
        Drawn placements in class +, 0 and -, from `class_counts`.

    Returns
    -------
    (K,) array
        At most 1, negative values kept; NaN for a region without voxels and for N < 2.
    """
    return _stability(region_rows(labels, index), len(index), counts)[1]


def region_calls(positive: IntArray, negative: IntArray, n_voxels: IntArray) -> Classes:
    """Call of a region: its larger tail where it holds `CALL_SHARE` of the voxels, else 0.

    Parameters
    ----------
    positive, negative : (..., K) int arrays
        Voxels of the region in class + and -; a tie goes to +.
    n_voxels : (K,) int array

    Returns
    -------
    (..., K) int8 array
        0 for a region without voxels.
    """
    larger = np.maximum(positive, negative)
    called = larger / np.maximum(n_voxels, 1) >= CALL_SHARE
    return np.where(called, np.where(positive >= negative, 1, -1), 0).astype(np.int8)


def region_states(
    reported_call: Classes, calls: Classes, n_voxels: IntArray, safe: float = 0.95
) -> NDArray[np.str_]:
    """State of every region, from its call at the reported and at the drawn placements.

    Parameters
    ----------
    reported_call : (K,) int8 array
        Call at the reported placement.
    calls : (N, K) int8 array
        Calls at the drawn placements.
    n_voxels : (K,) int array
    safe : float
        Share of placements, above 0.5 and at most 1.

    Returns
    -------
    (K,) str array
        With s the share of drawn placements that repeat the reported call: ``held`` (called,
        s >= safe), ``silent`` (not called, s >= safe), ``lost`` (called, s <= 1 - safe),
        ``gained`` (not called, s <= 1 - safe), ``contested`` (between), ``n/a`` (no voxels).
    """
    same = (calls == reported_call).mean(axis=0)
    different = (calls != reported_call).mean(axis=0)
    called = reported_call != 0
    stable = np.where(called, "held", "silent")
    turned = np.where(called, "lost", "gained")
    # The share outside is counted anew: 1 - 0.9 is not the double nearest to 0.1.
    state = np.where(same >= safe, stable, np.where(different >= safe, turned, "contested"))
    return np.where(np.asarray(n_voxels) > 0, state, "n/a")


def region_table(
    labels: IntArray,
    index: IntArray,
    classes: Classes,
    reported_classes: Classes,
    region_effects: NDArray[np.floating[Any]],
    reported_effect: FloatArray,
    reported_low: FloatArray,
    reported_high: FloatArray,
    stability_low: FloatArray,
    stability_high: FloatArray,
    safe: float = 0.95,
    *,
    ceiling: FloatArray | None = None,
    ceiling_relative: FloatArray | None = None,
    placement_share: FloatArray | None = None,
) -> dict[str, NDArray[Any]]:
    """One row per region: the reported result, its spread over placements, and its state.

    Parameters
    ----------
    labels : (V,) int array
        Region of every voxel, 0 for none.
    index : (K,) int array
        Regions in the order of the rows.
    classes : (N, V) int8 array
        Classes of the drawn placements.
    reported_classes : (V,) int8 array
        Classes of the reported placement.
    region_effects : (N, K) array
        Group effect of every region at the drawn placements, Fisher z.
    reported_effect, reported_low, reported_high : (K,) arrays
        Effect of the reported placement and its interval, Fisher z.
    stability_low, stability_high : (K,) arrays
        Interval of the stability score.
    safe : float
        Share of placements, above 0.5 and at most 1.
    ceiling, ceiling_relative, placement_share : (K,) arrays, optional
        NaN when not given.

    Returns
    -------
    dict of (K,) arrays
        The columns of the region table from ``index`` to ``state``. Numbers are NaN for a region
        without voxels, but for the counts ``n_voxels`` (0) and ``..._undefined`` (N).
    """
    rows = region_rows(labels, index)
    n_regions = len(index)
    joint = _joint_counts(rows, n_regions, reported_classes, classes)
    reported = joint[0].sum(axis=-1)
    drawn = joint.sum(axis=2)
    n_voxels = reported.sum(axis=-1)
    agreement, stability = _stability(rows, n_regions, class_counts(classes))
    missing = np.full(n_regions, np.nan)
    table: dict[str, NDArray[Any]] = {
        "reported_positive": reported[:, 2] / np.maximum(n_voxels, 1),
        "reported_negative": reported[:, 0] / np.maximum(n_voxels, 1),
        "reported_effect": reported_effect,
        "reported_low": reported_low,
        "reported_high": reported_high,
        **_effect_columns(region_effects, reported_effect),
        **_dice_columns(joint, "positive"),
        **_dice_columns(joint, "negative"),
        "pairwise_agreement": agreement,
        "stability": stability,
        "stability_low": stability_low,
        "stability_high": stability_high,
        "ceiling": missing if ceiling is None else ceiling,
        "ceiling_relative": missing if ceiling_relative is None else ceiling_relative,
        "placement_share": missing if placement_share is None else placement_share,
    }
    for name, column in table.items():
        if column.dtype.kind == "f":
            table[name] = np.where(n_voxels > 0, column, np.nan)
    calls = region_calls(drawn[..., 2], drawn[..., 0], n_voxels)
    reported_call = region_calls(reported[:, 2], reported[:, 0], n_voxels)
    state = region_states(reported_call, calls, n_voxels, safe)
    return {"index": np.asarray(index), "n_voxels": n_voxels, **table, "state": state}


def region_rows(labels: IntArray, index: IntArray) -> NDArray[np.intp]:
    """Position of every voxel's label in `index`, -1 for none.

    Parameters
    ----------
    labels : (V,) int array
        0 for none.
    index : (K,) int array

    Returns
    -------
    (V,) int array
    """
    if len(index) == 0:
        return np.full(len(labels), -1, dtype=np.intp)
    order = np.argsort(index)
    found = np.searchsorted(index, labels, sorter=order)
    row = order[np.minimum(found, len(index) - 1)]
    return np.where((np.asarray(index)[row] == labels) & (labels != 0), row, -1)


def _stability(
    rows: NDArray[np.intp], n_regions: int, counts: IntArray
) -> tuple[FloatArray, FloatArray]:
    """Pairwise agreement and AC1 of every region, (K,) each, from counts (V, 3)."""
    inside = np.flatnonzero(rows >= 0)
    region = rows[inside]
    n_placements = counts[:1].sum()
    counts = counts[inside]
    n_voxels = np.bincount(region, minlength=n_regions).astype(np.float64)
    n_voxels[n_voxels == 0] = np.nan
    agreement = np.bincount(region, unit_agreement(counts), minlength=n_regions) / n_voxels
    sums = [np.bincount(region, column, minlength=n_regions) for column in counts.T]
    shares = np.stack(sums, axis=1) / n_voxels[:, None] / n_placements
    return agreement, ac1_from_shares(agreement, shares)


def _joint_counts(
    rows: NDArray[np.intp], n_regions: int, reported: Classes, classes: Classes
) -> NDArray[np.int64]:
    """Voxels by placement, region, reported class and drawn class (-, 0, +), (N, K, 3, 3)."""
    inside = np.flatnonzero(rows >= 0)
    code = rows[inside] * 9 + (reported[inside].astype(np.int64) + 1) * 3 + 1
    joint = np.empty((len(classes), n_regions, 3, 3), dtype=np.int64)
    for n, row in enumerate(classes):
        joint[n] = np.bincount(code + row[inside], minlength=9 * n_regions).reshape(-1, 3, 3)
    return joint


def _effect_columns(
    effects: NDArray[np.floating[Any]], reported: FloatArray
) -> dict[str, FloatArray]:
    """Spread of the regional effects over placements, and the share with the reported sign."""
    spread = effect_spread(effects)
    same = np.where(np.isnan(effects), np.nan, np.sign(effects) == np.sign(reported))
    sign_share = np.where(np.isnan(reported), np.nan, same.mean(axis=0))
    return {
        "effect_mean": spread.mean,
        "effect_sd": spread.sd,
        "effect_min": spread.minimum,
        "effect_max": spread.maximum,
        "sign_share": sign_share,
    }


def _dice_columns(joint: NDArray[np.int64], tail: str) -> dict[str, NDArray[Any]]:
    """Mean, 5th percentile and number undefined of the Dice of one tail, (K,) each."""
    side = {"negative": 0, "positive": 2}[tail]
    overlap = dice(joint[..., side, side], joint[..., side, :].sum(-1), joint[..., side].sum(-1))
    undefined = np.isnan(overlap).sum(axis=0)
    some = undefined < len(overlap)
    mean, low = np.full((2, joint.shape[1]), np.nan)
    mean[some] = np.nanmean(overlap[:, some], axis=0)
    low[some] = np.nanquantile(overlap[:, some], 0.05, axis=0)
    return {
        f"dice_{tail}_mean": mean,
        f"dice_{tail}_p05": low,
        f"dice_{tail}_undefined": undefined,
    }
