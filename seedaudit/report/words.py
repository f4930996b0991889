"""The words of a result: verdict, methods text, caption and alternative text.

Numbers come from the summary, the tables and the provenance of a result and from nowhere else.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from math import ceil, floor, isfinite
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from seedaudit.results import Audit, SeedAudit

NEARLY_EMPTY = 0.01
"""Share of the analysis voxels below which the verdict says how few voxels a map has."""

STATES = {
    "held": "held",
    "contested": "contested",
    "lost": "lost",
    "gained": "gained (not connected as reported)",
    "silent": "silent (never connected)",
    "n/a": "without analysis voxels",
}
_SLACK = 1e-9


def number(value: float | None, digits: int = 1) -> str:
    """A number with at most so many decimals and a true minus sign; n/a when missing."""
    if value is None or not isfinite(value):
        return "n/a"
    text = f"{value:.{digits}f}"
    text = text.rstrip("0").rstrip(".") if "." in text else text
    return "0" if text in ("-0", "") else text.replace("-", "−")


def point(xyz: Sequence[float]) -> str:
    """A coordinate, as (x, y, z)."""
    return f"({', '.join(number(float(value)) for value in xyz)})"


def similarity(value: float | None) -> str:
    """A similarity or score with two decimals, rounded down: never better than it is."""
    if value is None or not isfinite(value):
        return "n/a"
    return f"{floor(value * 100 + _SLACK) / 100:.2f}".replace("-", "−")


def percent(share: float | None) -> str:
    """A share in percent with one decimal (two digits below 1 %); never 0 unless it is 0."""
    if share is None or not isfinite(share):
        return "n/a"
    if 0 < share < 0.0001:
        return "less than 0.01 %"
    return f"{number(share * 100, 1 if share >= 0.01 else 2)} %"


def plural(count: int, noun: str) -> str:
    """A count with its noun."""
    return f"{count} {noun}{'' if count == 1 else 's'}"


def verdict(numbers: Mapping[str, Any]) -> str:
    """One plain sentence on how much of a seed's result its placements share.

    The stability score of all voxels takes no part in it: where hardly anything passes the
    threshold, placements agree on nothing being there, and the score is high for no merit.

    Parameters
    ----------
    numbers : mapping
        The summary of a seed.
    """
    clauses = [*_map_clauses(numbers), *_safety_clause(numbers), _region_clause(numbers)]
    return f"{_subject(numbers)}: {'; '.join(clauses)}."


def _subject(numbers: Mapping[str, Any]) -> str:
    participants = numbers["n_participants"]
    who = "one participant" if participants == 1 else f"{participants} participants"
    aside = numbers.get("n_placements_set_aside") or 0
    more = f", {aside} more set aside" if aside else ""
    return (
        f"Seed {numbers['name']} at {point(numbers['at_mm'])} mm, moved to "
        f"{plural(numbers['n_placements_used'], 'placement')} within "
        f"{number(numbers['within_mm'])} mm{more} ({who}, {numbers['threshold']})"
    )


def _map_clauses(numbers: Mapping[str, Any]) -> list[str]:
    tails = ("positive", "negative")
    clauses = [_tail_clause(numbers, tail) for tail in tails]
    voxels = [numbers[f"n_reported_{tail}"] for tail in tails]
    if not any(voxels):
        drawn = numbers["n_placements_used"]
        never = all(numbers[f"dice_{tail}_undefined"] == drawn for tail in tails)
        if never:
            clauses = ["nothing passes the threshold, as reported or at any drawn placement"]
        alike = similarity(numbers.get("spatial_r_median"))
        clauses += [
            "so there is no reported map to compare with",
            f"the unthresholded maps have a median spatial r of {alike} with the reported one",
        ]
    elif sum(voxels) < NEARLY_EMPTY * numbers["n_analysis_voxels"]:
        clauses.append("so little is there that agreement on the rest of the brain says nothing")
    return clauses


def _tail_clause(numbers: Mapping[str, Any], tail: str) -> str:
    voxels, drawn = numbers[f"n_reported_{tail}"], numbers["n_placements_used"]
    undefined = numbers[f"dice_{tail}_undefined"]
    if not voxels:
        # with an empty reported map, Dice is undefined where the other is empty too, else 0
        found = drawn - undefined
        drawn_ones = (
            f"but {found} of {drawn} drawn placements have one"
            if found
            else "nor at any drawn placement"
        )
        return f"there is no {tail} map as reported, {drawn_ones}"
    share = voxels / numbers["n_analysis_voxels"]
    size = f"{percent(share)} of the analysis voxels"
    if share < NEARLY_EMPTY:
        size = f"only {plural(voxels, 'voxel')}, {size}"
    median, low = (similarity(numbers[f"dice_{tail}_{end}"]) for end in ("median", "p05"))
    less = f", undefined at {undefined} of them" if undefined else ""
    return (
        f"the {tail} map ({size}) has a median Dice of {median} with the reported one "
        f"(5th percentile {low}{less})"
    )


def _safety_clause(numbers: Mapping[str, Any]) -> list[str]:
    """Safe and contested voxels, the first rounded down and the second up."""
    safe, contested = numbers.get("safe_share"), numbers.get("contested_share")
    if safe is None or contested is None or not (safe or contested):
        return []
    down = floor(safe * 1000 + _SLACK) / 1000 if safe >= NEARLY_EMPTY else safe
    up = ceil(contested * 1000 - _SLACK) / 1000 if contested >= NEARLY_EMPTY else contested
    return [
        f"{percent(down)} of the analysis voxels are safely in class + or −, and "
        f"{percent(up)} are contested"
    ]


def _region_clause(numbers: Mapping[str, Any]) -> str:
    counts = numbers.get("regions") or {}
    total = sum(counts.values())
    if not total:
        return "no regions were given"
    told = [(count, words) for state, words in STATES.items() if (count := counts.get(state, 0))]
    if len(told) == 1:
        whole = "the one region is" if total == 1 else f"all {total} regions are"
        return f"{whole} {told[0][1]}"
    listed = [f"{count} {words}" for count, words in told]
    return f"of {total} regions, {', '.join(listed[:-1])} and {listed[-1]}"


def caption(seed: SeedAudit) -> str:
    """The caption of the figure, as plain text."""
    told = seed.summary
    regions = seed.tables["regions"]
    axes = "The right of every coronal and axial slice is the right of the body."
    outlines = "lines enclose what is in class + (solid) or class − (dashed) as reported"
    undefined = [
        f"Dice{sign} is undefined, because both maps are empty, at {count} of "
        f"{told['n_placements_used']}."
        for tail, sign in (("positive", "+"), ("negative", "−"))
        if (count := told[f"dice_{tail}_undefined"])
    ]
    parts = [
        f"Audit of the seed {seed.name} at {point(told['at_mm'])} mm, radius "
        f"{number(told['radius_mm'])} mm: {told['n_placements_used']} drawn placements within "
        f"{number(told['within_mm'])} mm, {plural(told['n_participants'], 'participant')}, "
        f"threshold {told['threshold']}.",
        "(a) Reported centre and sphere, and the centres of the drawn placements projected on "
        f"three planes through the reported centre. {axes}",
        "(b) Share of drawn placements with a voxel in class + and in class −, on axial slices at "
        "the seed and at the most contested voxel of each of the largest contested clusters; "
        f"{outlines}, hatching the voxels left out around the cloud (spheres widened by "
        f"{number(told['exclude_margin_mm'])} mm).",
        "(c) Dice of class + and of class −, and spatial correlation of the effect maps, of each "
        "drawn placement with the reported one; lines join medians of neighbouring distances.",
        *undefined,
    ]
    if len(regions):
        parts.append(
            "(d) Network regions: reported effect, range over the drawn placements (bars), "
            "stability score (Gwet's AC1 over the voxels of the region), and state. A silent "
            "region is stable only because it is never connected."
        )
        if regions[["reported_low", "stability_low"]].notna().any(axis=None):
            parts.append("Lines are 95 % intervals from resampling participants.")
    else:
        parts.append("(d) No regions were given.")
    return " ".join(parts)


def alternative_text(seed: SeedAudit) -> str:
    """What the figure shows, for those who cannot see it, as plain text."""
    told, regions = seed.summary, seed.tables["regions"]
    drawn = seed.tables["similarity"].query("placement != 0")
    farthest = drawn.sort_values("distance").tail(max(1, len(drawn) // 4))
    far = ", ".join(
        f"{label} {similarity(farthest[key].median())}"
        for key, label in (
            ("dice_positive", "Dice+"),
            ("dice_negative", "Dice−"),
            ("spatial_r", "spatial r"),
        )
    )
    states = [
        f"{state}: {', '.join(' '.join(str(name).split()) for name in group['region'])}"
        for state, group in regions.groupby("state", sort=False)
    ]
    return " ".join(
        [
            "Four panels: slices with the cloud of placements, slices with the share of "
            "placements in each class, similarity against shift distance, and network regions.",
            str(told["sentence"]),
            f"Medians of the quarter of placements farthest from the reported centre (from "
            f"{number(farthest['distance'].min())} mm): {far}.",
            f"Regions {'; '.join(states)}." if states else "No regions were given.",
        ]
    )


def methods_text(seed: SeedAudit, audit: Audit) -> str:
    """The methods paragraph with its references, and what was not done, in Markdown.

    Parameters
    ----------
    seed : SeedAudit
        One of the seeds of `audit`.
    audit : Audit
    """
    from seedaudit.report.methods import render_methods

    return render_methods(seed, audit)
