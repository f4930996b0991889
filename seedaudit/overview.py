"""What `check` shows: the plan as plain data, and as aligned text."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
import pandas as pd

from seedaudit.errors import counted, printable
from seedaudit.forecast import Forecast
from seedaudit.plan import Plan
from seedaudit.report.words import similarity
from seedaudit.searching import PlannedSearch


def overview(plan: Plan, needs: Forecast) -> dict[str, Any]:
    """Runs, placements, regions, design and predicted needs, ready for JSON."""
    return {
        "title": plan.study.title,
        "runs": [
            {
                "participant": participant.participant,
                "file": run.header.path.name,
                "shape": list(run.header.grid.shape),
                "voxel_mm": [round(float(edge), 3) for edge in run.header.grid.voxel_sizes],
                "repetition_time_s": plan.cleaning.repetition_time or run.header.repetition_time,
                "volumes": run.header.n_volumes,
                "residual_df": run.residual_df,
            }
            for participant in plan.participants
            for run in participant.runs
        ],
        "set_aside": [
            {"participant": record.participant, "reason": record.reason}
            for record in plan.set_aside
        ],
        "seeds": [_seed(plan, number) for number in range(len(plan.seeds))],
        "regions": _regions(plan),
        "design": {
            "participants": len(plan.participants),
            "model": plan.study.group.model,
            "columns": list(plan.design.names),
            "effect": plan.design.effect,
        },
        "mask_voxels": len(plan.voxels),
        "choices": list(plan.choices),
        "predicted": {
            "seconds": round(needs.seconds, 1),
            "memory_gb": round(needs.memory / 1e9, 2),
            "disk_mb": round(needs.disk / 1e6, 1),
            "disk_while_running_gb": round(needs.progress / 1e9, 2),
        },
    }


def _seed(plan: Plan, number: int) -> dict[str, Any]:
    seed = plan.seeds[number]
    table = seed.cloud.table
    drawn = table[table["kind"].isin(["jitter", "lattice"])]
    return {
        "name": seed.seed.name,
        "at_mm": [round(float(value), 2) for value in seed.at],
        "radius_mm": seed.seed.radius,
        "within_mm": round(seed.within, 2),
        "placements": len(drawn),
        "used": int(drawn["used"].sum()),
        "sphere_voxels": [int(table["n_voxels"].min()), int(table["n_voxels"].max())],
        "least_coverage": round(float(table["coverage"].min()), 3),
        "exclude_margin_mm": round(float(seed.margin), 2),
        "analysis_voxels": int(seed.analysis.sum()),
        "search": None if seed.search is None else _search(seed.search),
    }


def _search(search: PlannedSearch) -> dict[str, Any]:
    return {
        "search_mm": search.search,
        "step_mm": search.step,
        "within_mm": round(search.within, 2),
        "candidates": len(search.around().candidates),
        "spheres": len(search.shifts),
        "target_voxels": len(search.targets),
        "voxels_outside": search.population,
    }


def _regions(plan: Plan) -> list[dict[str, Any]]:
    if plan.regions is None:
        return []
    analysis = plan.seeds[0].analysis
    return [
        {
            "index": int(index),
            "region": name,
            "mask_voxels": int(np.sum(plan.regions.labels == index)),
            "analysis_voxels": int(np.sum(plan.regions.labels[analysis] == index)),
        }
        for index, name in zip(plan.regions.index, plan.regions.names, strict=True)
    ]


def overview_text(found: dict[str, Any]) -> str:
    """The overview as a person reads it in a terminal."""
    design, needs = found["design"], found["predicted"]
    parts = [
        printable(found["title"]),
        "\nRuns\n"
        + aligned(
            ["participant", "file", "shape", "voxel mm", "TR s", "volumes", "residual df"],
            (
                [
                    run["participant"],
                    run["file"],
                    " x ".join(map(str, run["shape"])),
                    " x ".join(f"{edge:g}" for edge in run["voxel_mm"]),
                    run["repetition_time_s"] or "n/a",
                    run["volumes"],
                    run["residual_df"],
                ]
                for run in found["runs"]
            ),
        ),
        "\nPlacements\n"
        + aligned(
            [
                "seed",
                "at mm",
                "radius mm",
                "within mm",
                "drawn",
                "used",
                "voxels",
                "least coverage",
            ],
            (
                [
                    seed["name"],
                    " ".join(f"{value:g}" for value in seed["at_mm"]),
                    seed["radius_mm"],
                    seed["within_mm"],
                    seed["placements"],
                    seed["used"],
                    "{} to {}".format(*seed["sphere_voxels"]),
                    f"{seed['least_coverage']:.0%}",
                ]
                for seed in found["seeds"]
            ),
        ),
    ]
    searched = [(seed["name"], seed["search"]) for seed in found["seeds"] if seed["search"]]
    if searched:
        parts.append("\nSearch for a steadier seed\n" + _search_text(searched))
    if found["regions"]:
        rows = ([r["region"], r["mask_voxels"], r["analysis_voxels"]] for r in found["regions"])
        head = ["region", "mask voxels", "outside the first seed's cloud"]
        parts.append("\nRegions\n" + aligned(head, rows))
    parts.append(
        f"\nDesign\n  {counted(design['participants'], 'participant')}, model {design['model']}, "
        f"columns {', '.join(design['columns'])}; tested effect: {design['effect']}"
    )
    if found["choices"]:
        parts.append(
            "\nChoices made\n" + "\n".join(f"  - {printable(text)}" for text in found["choices"])
        )
    parts.append(
        f"\nPredicted, roughly: {_duration(needs['seconds'])}, "
        f"{needs['memory_gb']:g} GB of memory, {needs['disk_mb']:g} MB of disk, and "
        f"{needs['disk_while_running_gb']:g} GB more until the result is safe\nA run would start."
    )
    return "\n".join(parts)


def _search_text(searched: Sequence[tuple[str, dict[str, Any]]]) -> str:
    head = ["seed", "search mm", "step mm", "neighbours mm", "candidates", "spheres", "voxels"]
    return aligned(
        head,
        (
            [
                name,
                told["search_mm"],
                told["step_mm"],
                told["within_mm"],
                told["candidates"],
                told["spheres"],
                f"{told['target_voxels']} of {told['voxels_outside']}",
            ]
            for name, told in searched
        ),
    )


def seeds_text(between: pd.DataFrame) -> str:
    """The comparison of several seeds as aligned text."""
    return aligned(
        ["seeds", "apart mm", "relative to ceiling", "95 % interval", "interchangeable"],
        (
            [
                f"{row.seed_a}, {row.seed_b}",
                number(row.distance_mm, 1),
                number(row.relative),
                f"{number(row.relative_low)} to {number(row.relative_high)}",
                {True: "yes", False: "no"}.get(row.interchangeable, "cannot be told"),
            ]
            for row in between.itertuples()
        ),
    )


def regions_text(regions: pd.DataFrame) -> str:
    """The regions of one seed as aligned text."""
    return aligned(
        ["region", "state", "reported z", "range over placements", "stability", "95 % interval"],
        (
            [
                row["region"],
                row["state"],
                number(row["reported_effect"]),
                f"{number(row['effect_min'])} to {number(row['effect_max'])}",
                similarity(row["stability"]),
                f"{similarity(row['stability_low'])} to {similarity(row['stability_high'])}",
            ]
            for row in regions.to_dict("records")
        ),
    )


def number(value: float | None, digits: int = 2) -> str:
    """A number with a true minus sign, or n/a."""
    if value is None or not np.isfinite(value):
        return "n/a"
    text = f"{value:.{digits}f}"
    return text.lstrip("-") if float(text) == 0 else text.replace("-", "\N{MINUS SIGN}")


def aligned(head: Sequence[str], rows: Iterable[Sequence[Any]]) -> str:
    """Columns padded to their widest cell: text to the left, numbers to the right."""
    body = [[printable(str(cell)) for cell in row] for row in rows]
    columns = list(zip(head, *body, strict=True))
    right = [all(_is_number(cell) for cell in column[1:]) for column in columns]
    widths = [max(map(len, column)) for column in columns]
    lines = (
        "  ".join(
            cell.rjust(width) if flush else cell.ljust(width)
            for cell, width, flush in zip(row, widths, right, strict=True)
        ).rstrip()
        for row in (head, *body)
    )
    return "\n".join(f"  {line}" for line in lines)


def _is_number(cell: str) -> bool:
    return cell == "n/a" or cell.strip("\N{MINUS SIGN}-%").replace(".", "", 1).isdigit()


def _duration(seconds: float) -> str:
    if seconds < 90:
        return f"{max(1, round(seconds))} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"
