"""The claims table: the sentences a paper wants to make, checked against seeds, regions, design."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from seedaudit.errors import DataError, Problem, SeedAuditError, StudyError
from seedaudit.inputs.effect import parse_effect
from seedaudit.inputs.tables import nearest, read_table

NEEDED = ("claim", "direction")
COORDINATE = ("x", "y", "z", "radius")
SIGNS = {"positive": 1, "negative": -1}


@dataclass(frozen=True)
class Claim:
    """One claim: a seed is connected with a target in a direction.

    Parameters
    ----------
    name : str
    seed : str
    direction : str
        `positive`, `negative`, or the contrast that is claimed to be above 0, as written.
    contrast : (p,) array
        Weights of the coefficients of the group model.
    sign : int
        +1 or -1: the sign that the claim gives the contrast.
    region : int or None
        Label of the target region.
    at : (x, y, z) or None
        Centre of the target sphere as given, mm.
    radius : float
        Radius of the target sphere, mm.
    target : str
        The target in words.
    """

    name: str
    seed: str
    direction: str
    contrast: NDArray[np.float64]
    sign: int
    region: int | None
    at: tuple[float, float, float] | None
    radius: float
    target: str


def read_claims(
    path: Path,
    seeds: Sequence[str],
    regions: Mapping[str, int],
    contrast: NDArray[np.float64],
    terms: Mapping[str, NDArray[np.float64]],
) -> tuple[Claim, ...]:
    """Read and check a table of claims.

    Parameters
    ----------
    path : path of a tab-separated table
        Columns claim and direction; seed (may be left out when there is one); and region, or x,
        y, z and radius in mm, in the space in which the seed is given.
    seeds : sequence of str
        Names of the seeds.
    regions : mapping of str to int
        Labels by name.
    contrast : (p,) array
        The study's tested effect, which the directions positive and negative are about.
    terms : mapping of str to (p,) array
        What the contrast of a direction may name.

    Raises
    ------
    StudyError, DataError
        With every problem of the table.
    """
    table = read_table(path)
    absent = [name for name in NEEDED if name not in table.columns]
    if absent:
        raise DataError(
            *(Problem(str(path), f"no column {n!r}", remedy=nearest(n, table.columns))
              for n in absent)
        )  # fmt: skip
    if table.empty:
        raise DataError(Problem(str(path), "holds no claim", "one row for each claim"))
    problems: list[Problem] = []
    names = [str(name) for name in table["claim"] if name is not None]
    problems += [
        Problem(str(path), f"claim {name!r} stands there twice", "a name of its own for each")
        for name in sorted({name for name in names if names.count(name) > 1})
    ]
    claims = []
    for number, row in enumerate(table.to_dict("records"), 1):
        try:
            claims.append(_claim(row, f"{path}, row {number}", seeds, regions, contrast, terms))
        except SeedAuditError as error:
            problems += error.problems
    if problems:
        raise StudyError(*problems)
    return tuple(claims)


def _claim(
    row: Mapping[Any, Any],
    where: str,
    seeds: Sequence[str],
    regions: Mapping[str, int],
    contrast: NDArray[np.float64],
    terms: Mapping[str, NDArray[np.float64]],
) -> Claim:
    problems = []
    name, direction, seed = row["claim"], row["direction"], row.get("seed")
    if name is None:
        problems.append(Problem(where, "no claim", "a name"))
    if seed is None and len(seeds) == 1:
        seed = seeds[0]
    if seed not in seeds:
        found = "no seed" if seed is None else f"seed {seed!r} is none of the study"
        problems.append(Problem(where, found, ", ".join(seeds), nearest(str(seed), seeds)))
    sign, claimed = SIGNS.get(str(direction), 1), contrast
    if direction is None:
        problems.append(Problem(where, "no direction", "positive, negative, or a contrast"))
    elif direction not in SIGNS:
        try:
            claimed = parse_effect(direction, terms)
        except StudyError as error:
            allowed = "positive, negative, or a contrast that is claimed to be above 0"
            problems += [
                Problem(f"{where}, direction {direction!r}", p.found, allowed, p.remedy)
                for p in error.problems
            ]
    region, at, radius = None, None, 0.0
    try:
        region, at, radius = _target(row, where, regions)
    except DataError as error:
        problems += error.problems
    if problems:
        raise StudyError(*problems)
    if at is None:
        target = str(row["region"])
    else:
        target = f"({', '.join(f'{value:g}' for value in at)}), radius {radius:g} mm"
    return Claim(str(name), str(seed), str(direction), claimed, sign, region, at, radius, target)


def _target(
    row: Mapping[Any, Any], where: str, regions: Mapping[str, int]
) -> tuple[int | None, tuple[float, float, float] | None, float]:
    """Label of the target region, or centre and radius of the target sphere."""
    region = row.get("region")
    given = [key for key in COORDINATE if row.get(key) is not None]
    allowed = "either a region, or x, y, z and radius in mm"
    if (region is None) == (not given):
        found = "no target" if region is None else f"a region and also {', '.join(given)}"
        raise DataError(Problem(where, found, allowed))
    if region is not None:
        if region not in regions:
            remedy = nearest(region, regions) if regions else "give `regions` in the section data"
            raise DataError(Problem(where, f"no region {region!r}", "a region by name", remedy))
        return regions[region], None, 0.0
    missing = [key for key in COORDINATE if key not in given]
    numbers = pd.to_numeric(pd.Series([row.get(key) for key in COORDINATE]), errors="coerce")
    x, y, z, radius = numbers.to_numpy(np.float64)
    if missing or not np.isfinite([x, y, z, radius]).all() or radius <= 0:
        found = ", ".join(f"{key} {row.get(key) or 'n/a'}" for key in COORDINATE)
        raise DataError(Problem(where, found, "numbers in mm, radius above 0"))
    return None, (float(x), float(y), float(z)), float(radius)
