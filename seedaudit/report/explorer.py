"""The explorer, report.html: one file that needs no network, in which the reader moves the seed."""

from __future__ import annotations

import base64
import hashlib
import re
from collections.abc import Iterable
from io import StringIO
from pathlib import Path
from typing import Any
from urllib.parse import quote

import numpy as np
import pandas as pd
from markupsafe import Markup

from seedaudit.report import CAUTION, explorer_charts
from seedaudit.report.explorer_data import map_arrays, map_numbers, page_data, placement_list
from seedaudit.report.methods import templates
from seedaudit.report.slices import contested_places, grid_of
from seedaudit.report.words import STATES, methods_text
from seedaudit.results import Audit, SeedAudit
from seedaudit.tsv import write_table

LARGEST_PAGE = 8_000_000
"""Bytes of a page."""
LARGEST_DOWNLOAD = 400_000
"""Bytes of a table that the page carries; larger ones are in the result folder only."""
SCRIPTS = ("explorer_maps.js", "explorer_draw.js", "explorer.js")
IDENTIFYING = ("participant_id", "reason")
"""Columns that may name a participant."""


def write_explorer(
    seed: SeedAudit,
    audit: Audit,
    folder: Path,
    *,
    between: pd.DataFrame | None = None,
    labels: bool = False,
) -> None:
    """Write report.html of one seed into its folder.

    Parameters
    ----------
    seed : SeedAudit
        One of the seeds of `audit`.
    audit : Audit
    folder : path
    between : DataFrame, optional
        The table `seeds`, which compares the seeds of the audit.
    labels : bool
        Name the participants.
    """
    page = explorer_page(seed, audit, between=between, labels=labels)
    (folder / "report.html").write_text(page, encoding="utf-8", newline="\n")


def explorer_page(
    seed: SeedAudit, audit: Audit, *, between: pd.DataFrame | None = None, labels: bool = False
) -> str:
    """The page of one seed as text; see `write_explorer`."""
    script, style = page_script(), _source("explorer.css")
    facts = page_facts(seed, audit, labels=labels) | {
        "between": _rows(between),
        "script": Markup(script),
        "style": Markup(style),
        "policy": _policy(script, style),
    }
    numbers, arrays = page_data(seed)
    template = templates().get_template("explorer.html.jinja")
    maps = seed.placement_maps
    if maps is None or not seed.summary["n_analysis_voxels"]:
        return template.render(facts, numbers=numbers, arrays=arrays)
    texts = map_arrays(maps)
    while True:
        kept = maps.first(len(texts) - 1)
        page = template.render(
            facts,
            numbers=numbers | {"maps": map_numbers(kept)},
            arrays=arrays | {f"map{k}": text for k, text in enumerate(texts)},
        )
        over = len(page.encode()) - LARGEST_PAGE
        if over <= 0 or len(texts) == 1:
            return page
        while over > 0 and len(texts) > 1:
            over -= len(texts.pop())


def page_script() -> str:
    """The script of the page: its parts in one block, so that nothing of it is global."""
    parts = "\n".join(_source(name) for name in SCRIPTS)
    return f'"use strict";\n{{\n{parts}}}\n'


def _source(name: str) -> str:
    loader = templates().loader
    assert loader is not None
    return loader.get_source(templates(), name)[0]


def _policy(script: str, style: str) -> str:
    """What the page may do: run its own script, and nothing from anywhere else."""
    script_digest, style_digest = (
        base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()
        for text in (script, style)
    )
    return (
        f"default-src 'none'; script-src 'sha256-{script_digest}'; "
        f"style-src 'sha256-{style_digest}'; base-uri 'none'; form-action 'none'"
    )


def page_facts(seed: SeedAudit, audit: Audit, *, labels: bool) -> dict[str, Any]:
    """All that the template writes down, except the arrays."""
    tables, told = seed.tables, seed.summary
    charts = explorer_charts
    regions = tables["regions"]
    names = _identifying_words(seed, audit)
    farthest = float(told["within_mm"])
    return {
        "title": audit.title,
        "seed": seed,
        "told": told,
        "others": [other.name for other in audit.seeds if other.name != seed.name],
        "link": lambda name: f"../{quote(name)}/report.html",
        "placements": placement_list(seed),
        "places": contested_places(seed),
        "tolerance_measures": charts.MEASURES,
        "decay": charts.decay_charts(seed),
        "roses": _roses(tables.get("tolerance"), farthest),
        "farthest": farthest,
        "regions": _rows(regions),
        "states": STATES,
        "region_places": _region_places(seed),
        "scale": charts.effect_scale(regions),
        "pairs": _pair_summary(tables.get("pairs")),
        "thresholds": charts.threshold_charts(tables["thresholds"])
        if "thresholds" in tables
        else [],
        "claims": _rows(tables.get("claims")),
        "claims_asked": "claims" in audit.provenance["study"],
        "participants": charts.participant_chart(tables["participants"])
        if "participants" in tables
        else None,
        "people": _people(tables.get("participants")),
        "labels": labels,
        "named": _named(tables.get("participants")) if labels else [],
        **_steadier(tables.get("steadier")),
        "steadier_asked": "steadier" in audit.provenance["study"],
        "methods": methods_text(seed, audit),
        "downloads": _downloads(tables, labels=labels),
        "choices": _unnamed(audit.provenance.get("choices", ()), names, labels=labels),
        "warnings": _unnamed(audit.provenance.get("warnings", ()), names, labels=labels),
        "program": audit.provenance["seedaudit"],
        "caution": CAUTION,
    }


def _rows(table: pd.DataFrame | None) -> list[dict[str, Any]]:
    return [] if table is None else table.to_dict("records")


def _steadier(table: pd.DataFrame | None) -> dict[str, Any]:
    """The candidates worth a row, and the recommended one unless it is the reported seed."""
    if table is None or not len(table):
        return {"steadier": [], "moved": None}
    shown = table[table["on_front"] | table["recommended"] | (table["moved_mm"] == 0)]
    moved = shown[shown["recommended"] & (shown["moved_mm"] > 0)]
    return {"steadier": _rows(shown), "moved": _rows(moved)[0] if len(moved) else None}


def _roses(table: pd.DataFrame | None, farthest: float) -> list[dict[str, Any]]:
    """A rose for each measure with a target."""
    if table is None or not len(table):
        return []
    roses = []
    for measure, rows in table.groupby("measure", sort=False):
        petals = explorer_charts.rose(rows, str(measure))
        overall = rows[rows["direction"] == "all"]
        roses.append(
            {
                "name": explorer_charts.MEASURES.get(str(measure), str(measure)),
                "target": float(rows["target"].iloc[0]),
                "petals": petals,
                "shapes": explorer_charts.petal_shapes(petals, farthest),
                "overall": [
                    explorer_charts.Petal("all", row.tolerance, bool(row.censored), int(row.n))
                    for row in overall.itertuples()
                ],
            }
        )
    return roses


def _region_places(seed: SeedAudit) -> list[tuple[float, float, float] | None]:
    """A place to look at each region: its analysis voxel nearest to its centre of gravity, mm."""
    mask = seed.maps["analysis_mask"]
    labels = np.asarray(seed.maps["region_labels"].dataobj)
    places: list[tuple[float, float, float] | None] = []
    for index in seed.tables["regions"]["index"]:
        ijk = np.argwhere((labels == index) & (np.asarray(mask.dataobj) > 0))
        if not len(ijk):
            places.append(None)
            continue
        xyz = grid_of(mask).to_world(ijk)
        x, y, z = xyz[np.linalg.norm(xyz - xyz.mean(axis=0), axis=1).argmin()].round(2).tolist()
        places.append((x, y, z))
    return places


def _pair_summary(table: pd.DataFrame | None) -> list[dict[str, Any]]:
    """Median, 5th percentile and number undefined of the similarity of all pairs."""
    if table is None or not len(table):
        return []
    rows = []
    for measure in ("dice_positive", "dice_negative", "spatial_r"):
        known = table[measure].dropna()
        rows.append(
            {
                "measure": measure,
                "name": explorer_charts.MEASURES[measure],
                "median": float(known.median()) if len(known) else None,
                "low": float(known.quantile(0.05)) if len(known) else None,
                "undefined": len(table) - len(known),
                "pairs": len(table),
            }
        )
    return rows


def _people(table: pd.DataFrame | None) -> dict[str, Any]:
    if table is None:
        return {"used": 0, "aside": 0}
    used = table[table["used"]]
    return {
        "used": len(used),
        "aside": len(table) - len(used),
        "median": float(used["median_spatial_r"].median()) if len(used) else None,
        "least": float(used["min_spatial_r"].min()) if len(used) else None,
    }


def _named(table: pd.DataFrame | None) -> list[dict[str, Any]]:
    return [] if table is None else _rows(table.sort_values("median_spatial_r"))


def _identifying_words(seed: SeedAudit, audit: Audit) -> set[str]:
    """Labels of participants and names of their files."""
    table = seed.tables.get("participants")
    words = set() if table is None else {str(label) for label in table["participant_id"]}
    for label, files in audit.provenance.get("inputs", {}).items():
        words |= {label, *files, *(name.split(".")[0] for name in files)}
    return {word for word in words if word}


def _unnamed(texts: Iterable[str], words: set[str], *, labels: bool) -> tuple[list[str], int]:
    """The texts that name nobody, and how many do and are left out."""
    texts = list(texts)
    if labels or not words:
        return texts, 0
    listed = "|".join(re.escape(word) for word in sorted(words))
    naming = re.compile(rf"(?<![^\W_])(?:{listed})(?![^\W_])", re.IGNORECASE)
    kept = [text for text in texts if not naming.search(text)]
    return kept, len(texts) - len(kept)


def _downloads(tables: Any, *, labels: bool) -> list[dict[str, Any]]:
    """Each table as a data URL, or without one where it is too large to be carried."""
    offered = []
    for name, table in sorted(tables.items()):
        shown = table
        if name == "participants" and not labels:
            # in an order that comes from the numbers, so that it tells nobody apart
            shown = table.drop(columns=[c for c in IDENTIFYING if c in table])
            shown = shown.sort_values(list(shown.columns), kind="stable")
        text = StringIO()
        write_table(text, shown)
        content = text.getvalue().encode()
        url = f"data:text/tab-separated-values;base64,{base64.b64encode(content).decode()}"
        offered.append(
            {
                "name": f"{name}.tsv",
                "rows": len(shown),
                "url": url if len(content) <= LARGEST_DOWNLOAD else None,
            }
        )
    return offered
