"""The words of a result: its verdict, and how numbers are written.

Numbers come from the summary, the tables and the provenance of a result and from nowhere else.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from math import floor, isfinite
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from seedaudit.results import Audit, SeedAudit

NEARLY_EMPTY = 0.01
"""Share of the analysis voxels below which the verdict says how few voxels a map has."""

STATES = {
    "held": "held",
    "contested": "contested",
    "lost": "lost",
    "gained": "gained",
    "silent": "silent",
    "n/a": "without analysis voxels",
}
ABSENT = {
    "mean": "never connected",
    "difference": "no difference as reported",
    "slope": "no effect as reported",
}
"""What a silent region lacks, by the kind of effect that is tested."""

MEASURES = {
    "dice_positive": "Dice +",
    "dice_negative": "Dice −",
    "spatial_r": "spatial r",
    "ceiling_relative": "ceiling-relative stability",
}

NAMED = 3
"""So many regions of one state are named in the verdict; more are counted."""
LONGEST_NAME = 30

_SLACK = 1e-9


def number(value: float | None, digits: int = 1, *, fixed: bool = False) -> str:
    """A number with at most so many decimals, or exactly so many where numbers stand in a column,
    and a true minus sign; n/a when missing.
    """
    if value is None or not isfinite(value):
        return "n/a"
    text = f"{value:.{digits}f}"
    if "." in text and not fixed:
        text = text.rstrip("0").rstrip(".")
    if float(text) == 0:
        text = text.removeprefix("-")
    return text.replace("-", "−")


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


def distance_words(distance: float, censored: bool) -> str:
    """A tolerance with one decimal, rounded down: never farther than it is."""
    text = number(floor(distance * 10 + _SLACK) / 10)
    return f"at least {text} mm" if censored else f"{text} mm"


def seed_words(name: str) -> str:
    """A seed in the middle of a sentence; without a name of its own it is just the seed."""
    return "the seed" if name == "seed" else f"the seed {name}"


def absent_words(numbers: Mapping[str, Any]) -> str:
    """What a silent region lacks."""
    return ABSENT[numbers.get("effect_kind") or "mean"]


def verdict(numbers: Mapping[str, Any], regions: Iterable[tuple[str, str]] = ()) -> str:
    """What a seed's placements share, in a plain sentence on the map and one on what is claimed.

    The stability score of all voxels takes no part in it: where hardly anything passes the
    threshold, placements agree on nothing being there, and the score is high for no merit.

    Parameters
    ----------
    numbers : mapping
        The summary of a seed.
    regions : iterable of (name, state)
        The regions, of which a few are named.
    """
    first = "; ".join([*_map_clauses(numbers), *_worth_clauses(numbers)])
    second = "; ".join([_region_clause(numbers, regions), *_claim_clause(numbers)])
    return f"{_subject(numbers)}: {first}. {second[0].upper()}{second[1:]}."


def _subject(numbers: Mapping[str, Any]) -> str:
    participants = numbers["n_participants"]
    who = "one participant" if participants == 1 else f"{participants} participants"
    aside = numbers.get("n_placements_set_aside") or 0
    more = f", {aside} more set aside" if aside else ""
    return (
        f"{_start(numbers['name'])} at {point(numbers['at_mm'])} mm, moved to "
        f"{plural(numbers['n_placements_used'], 'placement')} within "
        f"{number(numbers['within_mm'])} mm{more} ({who}, {numbers['threshold']})"
    )


def _start(name: str) -> str:
    return "The seed" if name == "seed" else f"Seed {name}"


def _map_clauses(numbers: Mapping[str, Any]) -> list[str]:
    tails = ("positive", "negative")
    voxels = [numbers[f"n_reported_{tail}"] for tail in tails]
    if not any(voxels):
        alike = similarity(numbers.get("spatial_r_median"))
        drawn = numbers["n_placements_used"]
        if all(numbers[f"dice_{tail}_undefined"] == drawn for tail in tails):
            nothing = "nothing passes the threshold, as reported or at any drawn placement"
        else:
            nothing = ", and ".join(_empty_tail(numbers, tail) for tail in tails)
        return [
            f"{nothing}, so there is no reported map to compare with",
            f"unthresholded, the median spatial r with the reported one is {alike}",
        ]
    told = [tail for tail, count in zip(tails, voxels, strict=True) if count]
    overlap = " and ".join(_overlap(numbers, tail, first=tail == told[0]) for tail in told)
    clauses = [f"median Dice {overlap}"]
    clauses += [_empty_tail(numbers, tail) for tail in tails if tail not in told]
    if sum(voxels) < NEARLY_EMPTY * numbers["n_analysis_voxels"]:
        clauses.append("so little that agreement on the rest of the brain says nothing")
    return clauses


def _sign(tail: str) -> str:
    return {"positive": "+", "negative": "−"}[tail]


def _overlap(numbers: Mapping[str, Any], tail: str, *, first: bool) -> str:
    """Median and 5th percentile of Dice, with the size of the map, without which it is nothing."""
    voxels = numbers[f"n_reported_{tail}"]
    share = voxels / numbers["n_analysis_voxels"]
    size = percent(share)
    if share < NEARLY_EMPTY:
        size = f"only {plural(voxels, 'voxel')} or {size}"
    median, low = (similarity(numbers[f"dice_{tail}_{end}"]) for end in ("median", "p05"))
    lower, of = (f"5th percentile {low}", " of voxels") if first else (low, "")
    return f"{median} ({lower}) for class {_sign(tail)} ({size}{of})"


def _empty_tail(numbers: Mapping[str, Any], tail: str) -> str:
    # with an empty reported map, Dice is undefined where the other is empty too, else 0
    drawn = numbers["n_placements_used"]
    found = drawn - numbers[f"dice_{tail}_undefined"]
    also = f"but not at {found} of {drawn} placements" if found else "and at all placements"
    return f"class {_sign(tail)} is empty as reported {also}"


def _worth_clauses(numbers: Mapping[str, Any]) -> list[str]:
    """What moving costs beyond sampling, and how far it may go."""
    clauses = []
    if (relative := numbers.get("ceiling_relative")) is not None:
        clauses.append(f"ceiling-relative stability {similarity(relative)}")
    if (distance := numbers.get("tolerance_mm")) is not None:
        measure = MEASURES[numbers["tolerance_measure"]]
        within = distance_words(distance, bool(numbers["tolerance_censored"]))
        target = number(numbers["tolerance_target"], 2)
        clauses.append(f"similar ({measure} {target}) within {within}")
    return clauses


def _region_clause(numbers: Mapping[str, Any], regions: Iterable[tuple[str, str]]) -> str:
    counts = numbers.get("regions") or {}
    total = sum(counts.values())
    if not total:
        return "no regions were given"
    words = dict(STATES, silent=f"silent ({absent_words(numbers)})")
    told = [state for state in STATES if counts.get(state)]
    if len(told) == 1:
        whole = "the one region is" if total == 1 else f"all {total} regions are"
        return f"{whole} {words[told[0]]}"
    names: dict[str, list[str]] = {state: [] for state in told}
    for name, state in regions:
        names.setdefault(state, []).append(" ".join(str(name).split()))
    parts = []
    for state in told:
        few = names[state] if len(names[state]) == counts[state] else []
        named = state != "n/a" and 0 < len(few) <= NAMED and all(map(_fits_in_a_list, few))
        parts.append(f"{joined(few) if named else counts[state]} {words[state]}")
    return f"of {total} regions, {', '.join(parts)}"


def _fits_in_a_list(name: str) -> bool:
    return len(name) <= LONGEST_NAME and not set(name) & set(",;:")


def joined(names: Sequence[str]) -> str:
    """Names as a list in a sentence."""
    return " and ".join(filter(None, [", ".join(names[:-1]), *names[-1:]]))


def _claim_clause(numbers: Mapping[str, Any]) -> list[str]:
    counts = numbers.get("claims") or {}
    total = sum(counts.values())
    if not total:
        return []
    single = {"holds": "holds", "breaks": "breaks", "open": "is open"}
    several = {"holds": "hold", "breaks": "break", "open": "are open"}
    told = [state for state in single if counts.get(state)]
    if len(told) == 1:
        whole = "the one claim" if total == 1 else f"all {total} claims"
        return [f"{whole} {(single if total == 1 else several)[told[0]]}"]
    parts = [f"{counts[s]} {(single if counts[s] == 1 else several)[s]}" for s in told]
    return [f"of {total} claims {joined(parts)}"]


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
