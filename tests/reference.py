"""The naive second implementation: what the program must reproduce, written from the methods alone.

Plain loops over participants, placements and voxels in float64, explicit residuals, one small
function per quantity (`reference_maps` up to the group maps, `reference_consensus` after them). It
shares no code with the package and is built to be read, not to be fast: a study of a few hundred
voxels takes seconds. Row 0 of everything that has a placement axis is the reported placement; the
others are the drawn ones. NaN means missing or undefined.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tests.reference_consensus import (
    classify,
    concordance,
    conjunction,
    dice,
    fleiss_kappa,
    gwet_ac1,
    is_contested,
    modal,
    observed_agreement,
    rater_counts,
    rms_difference,
    safe_class,
    share,
    spread,
)
from tests.reference_maps import (
    Array,
    Placement,
    Run,
    ball_rows,
    contrast_fit,
    correlation,
    excluded_voxels,
    group_maps,
    largest_edge,
    participant_maps,
    voxel_list,
)


def maps_stage(
    participants: Sequence[Sequence[Run]],
    mask: NDArray[np.bool_],
    affine: Array,
    placements: Sequence[Placement],
    design: Array,
    contrast: Array,
    exclude_margin: float | None = None,
) -> dict[str, Any]:
    """Give voxels, spheres, analysis voxels, participant maps and group maps.

    Parameters
    ----------
    participants
        Per participant, the runs.
    mask : (X, Y, Z) bool
    affine : (4, 4)
        Of the mask; every run must have the same.
    placements
        x, y, z, radius in mm; the first is the reported one.
    design, contrast : (n, p), (p,)
    exclude_margin : mm
        Default: the largest voxel edge.
    """
    for run in (run for runs in participants for run in runs):
        assert run[0].shape[:3] == mask.shape
        assert np.allclose(run[1], affine, atol=1e-3)
    voxels = voxel_list(mask)
    margin = largest_edge(affine) if exclude_margin is None else exclude_margin
    spheres = [ball_rows(voxels, affine, place, place[3]) for place in placements]
    people = [participant_maps(runs, voxels, spheres) for runs in participants]
    complete = np.array(
        [not any(person["missing"][row] for person in people) for row in range(len(voxels))]
    )
    excluded = excluded_voxels(voxels, affine, placements, margin)
    rows = np.flatnonzero(complete & ~excluded)
    for person in people:
        person["spatial_r"] = np.array(
            [correlation(person["z"][0, rows], z[rows]) for z in person["z"]]
        )
    return {
        "voxels": np.array(voxels),
        "spheres": spheres,
        "margin": margin,
        "excluded": excluded,
        "complete": complete,
        "rows": rows,
        "participants": people,
        "group": group_maps(people, complete, np.asarray(design), np.asarray(contrast)),
    }


def classes_stage(maps: Mapping[str, Any], rule: str, level: float) -> NDArray[np.int8]:
    """Give the classes (N, A) of every placement on the analysis voxels, each by the same rule."""
    group, rows = maps["group"], maps["rows"]
    return np.array(
        [
            classify(group["effect"][i, rows], group["t"][i, rows], group["df"][i], rule, level)
            for i in range(len(group["df"]))
        ]
    )


def agreement_stage(
    maps: Mapping[str, Any], classes: NDArray[np.int8], safe: float
) -> dict[str, Array]:
    """Give the voxelwise maps (A,) of agreement and effect over the drawn placements."""
    group, out = maps["group"], []
    for column, row in enumerate(maps["rows"]):
        positive, negative = share(classes[1:, column], 1), share(classes[1:, column], -1)
        effect = spread(list(group["effect"][1:, row]))
        modal_class, modal_share = modal(positive, negative)
        out.append(
            {
                "positive": positive,
                "negative": negative,
                "modal_class": modal_class,
                "modal_share": modal_share,
                "safe": safe_class(positive, negative, safe),
                "contested": is_contested(positive, negative, safe),
                "conjunction": conjunction(list(group["t"][:, row])),
                **{f"effect_{name}": value for name, value in effect.items()},
                "placement_to_sampling": effect["sd"] / group["se"][0, row],
            }
        )
    return {name: np.array([voxel[name] for voxel in out]) for name in (out[0] if out else ())}


def similarity(
    maps: Mapping[str, Any], classes: NDArray[np.int8], a: int, b: int
) -> dict[str, Any]:
    """Compare two placements on the analysis voxels: Dice by tail, and the group effect maps."""
    x, y = (maps["group"]["effect"][i, maps["rows"]] for i in (a, b))
    return {
        "placement_a": a,
        "placement_b": b,
        "dice_positive": dice(classes[a], classes[b], 1),
        "dice_negative": dice(classes[a], classes[b], -1),
        "spatial_r": correlation(x, y),
        "concordance": concordance(x, y),
        "rms_difference": rms_difference(x, y),
    }


def dice_summary(classes: NDArray[np.int8], tail: int) -> dict[str, float]:
    """Give mean, 5th percentile and undefined count of Dice of drawn against reported."""
    values = [dice(classes[0], drawn, tail) for drawn in classes[1:]]
    defined = [value for value in values if not math.isnan(value)]
    return {
        "mean": sum(defined) / len(defined) if defined else math.nan,
        "p05": float(np.percentile(defined, 5)) if defined else math.nan,
        "undefined": len(values) - len(defined),
    }


def region_effect(
    maps: Mapping[str, Any], rows: Sequence[int], place: int, design: Array, contrast: Array
) -> float:
    """Give the group effect of the participants' region-mean z (the mean z of one alone)."""
    y = np.array([np.mean([p["z"][place, row] for row in rows]) for p in maps["participants"]])
    return float(y[0]) if len(y) == 1 else contrast_fit(y, design, contrast)[0]


def region_summary(
    maps: Mapping[str, Any],
    classes: NDArray[np.int8],
    members: Sequence[int],
    design: Array,
    contrast: Array,
) -> dict[str, float]:
    """Give the numbers of one region; members are positions among the analysis voxels."""
    if not len(members):
        return {"n_voxels": 0}
    inside = classes[:, list(members)]
    rows = [int(maps["rows"][member]) for member in members]
    effects = [region_effect(maps, rows, i, design, contrast) for i in range(len(classes))]
    counts = rater_counts(inside[1:])
    same_sign = [np.sign(effect) == np.sign(effects[0]) for effect in effects[1:]]
    return {
        "n_voxels": len(members),
        "reported_positive": share(inside[0], 1),
        "reported_negative": share(inside[0], -1),
        "reported_effect": effects[0],
        **{f"effect_{name}": value for name, value in spread(effects[1:]).items()},
        "sign_share": sum(map(int, same_sign)) / len(same_sign),
        **{f"dice_positive_{name}": value for name, value in dice_summary(inside, 1).items()},
        **{f"dice_negative_{name}": value for name, value in dice_summary(inside, -1).items()},
        "pairwise_agreement": observed_agreement(counts),
        "stability": gwet_ac1(counts),
    }


def sweep(maps: Mapping[str, Any], rule: str, cuts: Sequence[float]) -> list[dict[str, Any]]:
    """Give, per cut, the mean Dice of drawn against reported and the reported map's sizes."""
    rows = []
    for cut in cuts:
        classes = classes_stage(maps, rule, cut)
        rows.append(
            {
                "rule": rule,
                "cut": cut,
                "dice_positive_mean": dice_summary(classes, 1)["mean"],
                "dice_negative_mean": dice_summary(classes, -1)["mean"],
                "n_positive": sum(int(c) == 1 for c in classes[0]),
                "n_negative": sum(int(c) == -1 for c in classes[0]),
            }
        )
    return rows


def reference_audit(
    participants: Sequence[Sequence[Run]],
    mask: NDArray[np.bool_],
    affine: Array,
    placements: Sequence[Placement],
    labels: NDArray[np.int_],
    region_indices: Sequence[int],
    design: Array,
    contrast: Array,
    rule: str,
    level: float,
    exclude_margin: float | None = None,
    *,
    safe: float = 0.95,
    densities: Sequence[float] = (),
    effect_cuts: Sequence[float] = (),
) -> dict[str, Any]:
    """Run the whole reference; the parameters are those of `maps_stage` and of the stages below.

    Returns
    -------
    dict
        Everything of `maps_stage`, and `classes` (N, A), `agreement` (maps (A,)), `similarity` (per
        drawn placement, against the reported one), `pairs` (all pairs, the reported one included),
        `ac1`, `kappa`, `regions` (by index) and `sweep`.
    """
    design, contrast = np.asarray(design, dtype=float), np.asarray(contrast, dtype=float)
    maps = maps_stage(participants, mask, affine, placements, design, contrast, exclude_margin)
    classes = classes_stage(maps, rule, level)
    counts = rater_counts(classes[1:])
    label_of = [int(labels[tuple(maps["voxels"][row])]) for row in maps["rows"]]
    regions = {}
    for index in region_indices:
        members = [i for i, label in enumerate(label_of) if label == index]
        regions[index] = region_summary(maps, classes, members, design, contrast)
    return {
        **maps,
        "classes": classes,
        "agreement": agreement_stage(maps, classes, safe),
        "similarity": [similarity(maps, classes, 0, i) for i in range(1, len(placements))],
        "pairs": [
            similarity(maps, classes, a, b) for a, b in combinations(range(len(placements)), 2)
        ],
        "ac1": gwet_ac1(counts),
        "kappa": fleiss_kappa(counts),
        "regions": regions,
        "sweep": sweep(maps, "density", densities) + sweep(maps, "effect", effect_cuts),
    }


def rows_of(voxels: Sequence[Sequence[int]], other: Sequence[Sequence[int]]) -> NDArray[np.int_]:
    """Give, for each voxel of `other`, its row in `voxels`: translates between two list orders."""
    row = {tuple(int(i) for i in voxel): position for position, voxel in enumerate(voxels)}
    return np.array([row[tuple(int(i) for i in voxel)] for voxel in other], dtype=int)
