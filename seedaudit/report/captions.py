"""The captions of the figures, and what they show in words for those who cannot see them."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

from seedaudit.consensus.tolerance import LEAST_PLACEMENTS
from seedaudit.report.words import (
    MEASURES,
    STATES,
    absent_words,
    distance_words,
    joined,
    number,
    percent,
    plural,
    point,
    seed_words,
    similarity,
)
from seedaudit.results import SeedAudit

MAIN = ("cloud", "agreement", "decay", "regions", "rose", "claims")
"""Panels of the supplementary figure in the order of their letters."""

LISTED = 12
"""So many regions of one state are named to a listener; more are counted."""

COUNTS = ("no", "one", "two", "three", "four", "five", "six")


def lettered(panels: Sequence[str]) -> dict[str, str]:
    """The letter of each panel; one alone has none."""
    if len(panels) == 1:
        return {panels[0]: ""}
    return dict(zip(panels, "abcdefghij", strict=False))


def caption(seed: SeedAudit, panels: Sequence[str] = MAIN) -> str:
    """The caption of a figure of these panels, as plain text."""
    told = seed.summary
    start = (
        f"Audit of {seed_words(told['name'])} at {point(told['at_mm'])} mm, radius "
        f"{number(told['radius_mm'])} mm: {told['n_placements_used']} drawn placements within "
        f"{number(told['within_mm'])} mm, {plural(told['n_participants'], 'participant')}, "
        f"threshold {told['threshold']} on {_statistic(seed)}."
    )
    ordered = [panel for panel in CAPTIONS if panel in panels]
    letters = lettered(ordered)
    parts = [start]
    for panel in ordered:
        mark = f"({letters[panel]}) " if letters[panel] else ""
        parts.append(f"{mark}{CAPTIONS[panel](seed)}")
    return " ".join(parts)


def _statistic(seed: SeedAudit) -> str:
    if seed.summary["statistic"] == "z":
        return "the standard normal score z of the one participant"
    return "t"


def _cloud(seed: SeedAudit) -> str:
    return (
        "Reported centre and sphere, and the centres of the drawn placements projected on three "
        "planes through the reported centre. The right of every coronal and axial slice is the "
        "right of the body."
    )


def _agreement(seed: SeedAudit) -> str:
    margin = number(seed.summary["exclude_margin_mm"])
    return (
        "Share of drawn placements with a voxel in class + and in class −, on axial slices at the "
        "seed and at the most contested voxel of each of the largest contested clusters; lines "
        "enclose what is in class + (solid) or class − (dashed) as reported, hatching the voxels "
        f"left out around the cloud (spheres widened by {margin} mm)."
    )


def _decay(seed: SeedAudit) -> str:
    told, fits = seed.summary, seed.tables.get("decay")
    halves = "participants" if told["n_participants"] > 1 else "series"
    parts = [
        "Dice of class + and of class −, and spatial correlation of the effect maps, of each drawn "
        f"placement with the reported one, and its spatial correlation across halves of the "
        f"{halves} relative to that of the reported map with itself (ceiling-relative)."
    ]
    if fits is None or not len(fits):
        parts.append("Lines join medians of neighbouring distances.")
    else:
        parts.append("Solid lines: fits that can only fall with distance (isotonic).")
        levels = {
            "ceiling": (
                f"Dashed: ceiling, the same for the reported map in two halves of the {halves} (so "
                "it can lie below the similarity of maps from all of them)."
            ),
            "floor": f"Dotted: floor, the median over {told.get('n_controls')} unrelated seeds.",
            "geometry": (
                "Dash-dotted: the correlation that overlap and smoothness alone would give two "
                "spheres."
            ),
        }
        parts += [words for key, words in levels.items() if fits[key].notna().any()]
    limits = told.get("tolerances") or {}
    if limits:
        targets = joined(
            [f"{MEASURES[name]} {number(limit['target'], 2)}" for name, limit in limits.items()]
        )
        parts.append(
            f"Triangles: tolerance, the distance at which the fit falls below its target "
            f"({targets}); an open triangle: it does not within the cloud."
        )
    parts += [
        f"Dice{sign} is undefined, because both maps are empty, at {count} of "
        f"{told['n_placements_used']}."
        for tail, sign in (("positive", " +"), ("negative", " −"))
        if (count := told[f"dice_{tail}_undefined"])
    ]
    return " ".join(parts)


def _regions(seed: SeedAudit) -> str:
    regions = seed.tables["regions"]
    if not len(regions):
        return "No regions were given."
    parts = [
        "Network regions: reported effect, range over the drawn placements (bars), stability score "
        "(Gwet's AC1 over the voxels of the region), and state."
    ]
    if (regions["state"] == "silent").any():
        absent = absent_words(seed.summary)
        parts.append(f"A silent region is stable only because nothing is there ({absent}).")
    if "ceiling" in regions and regions["ceiling"].notna().any():
        parts.append("Upright strokes: the same score of the reported map in two halves.")
    if regions[["reported_low", "stability_low"]].notna().any(axis=None):
        parts.append("Lines are 95 % intervals from resampling participants.")
    return " ".join(parts)


def _rose(seed: SeedAudit) -> str:
    told, table = seed.summary, seed.tables.get("tolerance")
    measure = told.get("most_fragile_measure")
    if measure is None or table is None:
        return "No tolerance could be estimated."
    rows = table[(table["measure"] == measure) & (table["direction"] != "all")]
    target = number(told["tolerances"][measure]["target"], 2)
    parts = [
        f"Tolerance in each direction: how far the seed can be moved that way before the fit of "
        f"{MEASURES[measure]} falls below {target}; each placement belongs to the axis sector its "
        "shift lies in."
    ]
    if rows["censored"].any():
        parts.append("Dashed petals: at least so far, to the last placement of that sector.")
    if rows["tolerance"].isna().any():
        parts.append(f"Unknown: fewer than {LEAST_PLACEMENTS} placements in that sector.")
    if (fragile := told.get("most_fragile_direction")) is not None:
        parts.append(f"Most fragile direction: {fragile}.")
    return " ".join(parts)


def _claims(seed: SeedAudit) -> str:
    table = seed.tables.get("claims")
    if table is None or not len(table):
        return "No claims were tested."
    parts = [
        "Claims: share of the drawn placements in which each passes, reported effect with its "
        "range over placements (bars), and verdict: holds, breaks (weaker at some placement by "
        "more than chance and the smallest effect of interest), or open."
    ]
    failing = table[~table["passes_reported"].to_numpy(dtype=bool)]
    if len(failing):
        parts.append("A hollow circle: the claim does not pass at the reported placement.")
    if table["reported_low"].notna().any():
        parts.append("Lines are 95 % intervals from resampling participants.")
    return " ".join(parts)


def _landscape(seed: SeedAudit) -> str:
    found = seed.summary.get("steadier")
    if not found:
        return "No steadier seed was searched for."
    return (
        "Mean spatial correlation of the map of every candidate with those of its neighbours, in "
        "participants that had no part in a choice, on three planes through the reported centre "
        f"(lattice of {number(found['step_mm'])} mm)."
    )


def _front(seed: SeedAudit) -> str:
    if not seed.summary.get("steadier"):
        return "No steadier seed was searched for."
    return (
        "The same against the distance moved; the line joins the steadiest candidates for their "
        "distance, and the square with its 95 % interval is what the search gains in participants "
        "that had no part in the choice."
    )


def _radii(seed: SeedAudit) -> str:
    if "radii" not in seed.tables:
        return "The placements have one radius."
    return (
        "Shares of the variance of each region's mean z that come from participants, from the "
        "position and the radius of the seed, and from their interactions."
    )


def _motion(seed: SeedAudit) -> str:
    found = seed.summary.get("motion_rank_correlation")
    rank = "" if found is None else f" (rank correlation {number(found, 2)})"
    return (
        "For each participant, the median and the least spatial correlation of the drawn "
        "placements' maps with the reported placement's, against mean framewise "
        f"displacement{rank}. A check of who drives the instability, and not a test of the "
        "hypothesis."
    )


CAPTIONS: dict[str, Callable[[SeedAudit], str]] = {
    "cloud": _cloud,
    "agreement": _agreement,
    "decay": _decay,
    "regions": _regions,
    "rose": _rose,
    "claims": _claims,
    "landscape": _landscape,
    "front": _front,
    "radii": _radii,
    "motion": _motion,
}


def alternative_text(seed: SeedAudit, panels: Sequence[str] = MAIN) -> str:
    """What a figure of these panels shows, as plain text."""
    shown = [panel for panel in CAPTIONS if panel in panels]
    names = ", ".join(PANEL_WORDS[panel] for panel in shown)
    count = COUNTS[len(shown)].capitalize()
    parts = [f"{count} {'panel' if len(shown) == 1 else 'panels'}: {names}."]
    if set(shown) & set(MAIN):
        parts.append(str(seed.summary["sentence"]))
    details: dict[str, Callable[[SeedAudit], str]] = {
        "decay": _farthest_words,
        "regions": _state_words,
        "rose": _direction_words,
        "claims": _verdict_words,
    }
    parts += [words(seed) for panel, words in details.items() if panel in shown]
    return " ".join(filter(None, parts))


PANEL_WORDS = {
    "cloud": "slices with the cloud of placements",
    "agreement": "slices with the share of placements in each class",
    "decay": "similarity against shift distance",
    "regions": "network regions",
    "rose": "tolerance by direction",
    "claims": "claims with their verdicts",
    "landscape": "slices with the stability of every candidate seed",
    "front": "stability against distance moved",
    "radii": "sources of variation by region",
    "motion": "similarity of the shifted maps against motion, by participant",
}


def _farthest_words(seed: SeedAudit) -> str:
    drawn = seed.tables["similarity"].query("placement != 0")
    farthest = drawn.sort_values("distance").tail(max(1, len(drawn) // 4))
    far = ", ".join(
        f"{MEASURES[key]} {similarity(farthest[key].median())}"
        for key in ("dice_positive", "dice_negative", "spatial_r")
    )
    start = number(farthest["distance"].min())
    return (
        f"Medians of the quarter of placements farthest from the reported centre (from {start} "
        f"mm): {far}."
    )


def _state_words(seed: SeedAudit) -> str:
    regions = seed.tables["regions"]
    groups = dict(list(regions.groupby("state", sort=False)))
    told = []
    for state in filter(groups.__contains__, STATES):
        names = [" ".join(str(name).split()) for name in groups[state]["region"]]
        listed = ", ".join(names) if len(names) <= LISTED else f"{len(names)} regions"
        told.append(f"{state}: {listed}")
    return f"Regions {'; '.join(told)}." if told else "No regions were given."


def _direction_words(seed: SeedAudit) -> str:
    measure, table = seed.summary.get("most_fragile_measure"), seed.tables.get("tolerance")
    if measure is None or table is None:
        return ""
    rows = table[(table["measure"] == measure) & (table["direction"] != "all")]
    told = [
        f"{row.direction} {distance_words(row.tolerance, bool(row.censored))}"
        for row in rows.itertuples()
        if np.isfinite(row.tolerance)
    ]
    return f"Tolerance ({MEASURES[measure]}): {', '.join(told)}." if told else ""


def _verdict_words(seed: SeedAudit) -> str:
    table = seed.tables.get("claims")
    if table is None or not len(table):
        return "No claims were tested."
    told = [
        f"{' '.join(str(row.claim).split())} {row.verdict} (passes at {percent(row.share_passing)} "
        "of placements)"
        for row in table.itertuples()
    ]
    return f"Claims: {'; '.join(told)}."
