"""One measurement in a process of its own: prints seconds and peak memory as JSON.

Run by the benchmark, not by hand: ``python -m tests.benchmarks.measure KIND OPTIONS``.
"""

from __future__ import annotations

import json
import resource
import sys
import time
import warnings
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

SEED = (0.0, -52.0, 26.0)


SEARCH = {"search": 8.0, "step": 2.0}
"""mm; with neighbourhoods of 6 mm a lattice of 1419 spheres."""


def study(table: str, placements: int, *, cleaned: bool = False, searched: bool = False) -> Any:
    """A study of the benchmark's runs."""
    from seedaudit.study import Study

    content: dict[str, Any] = {
        "data": {"runs": table, "mask": "mask.nii.gz", "regions": "networks_dseg.nii.gz"},
        "seed": [{"at": list(SEED), "radius": 6.0}],
        "placements": {"count": placements, "within": 6.0},
    }
    if cleaned:
        content["cleaning"] = {"confounds": ["c*"], "drift": 1, "band": [0.008, 0.09]}
    if searched:
        content["steadier"] = SEARCH
    return Study.from_mapping(content, Path(table).parent)


def decompress(table: str, workers: int) -> dict[str, float]:
    """Decompress the same files with the fastest library on the same cores."""
    from isal import igzip

    folder = Path(table).parent
    lines = Path(table).read_text().splitlines()[1:]
    paths = [folder / line.split("\t")[1] for line in lines]
    buffer_size = 1 << 20

    def one(path: Path) -> None:
        buffer = bytearray(buffer_size)
        with igzip.open(path, "rb") as file:
            while file.readinto(buffer):
                pass

    started = time.perf_counter()
    with ThreadPoolExecutor(workers) as pool:
        list(pool.map(one, paths))
    return {"seconds": time.perf_counter() - started}


def audit(
    table: str,
    workers: int,
    placements: int,
    cleaned: int = 0,
    searched: int = 0,
    cluster: str = "",
    prepared: str = "",
    memory: str = "",
) -> dict[str, float]:
    """A whole audit from Python: plan, pass, conclusions; `maps` are what is computed from the
    maps of all placements: estimates with every fold left out, pairs, sweep and regions.
    """
    from seedaudit.auditing import audit as run
    from seedaudit.budget import fitted, parse_size
    from seedaudit.consensus import cloud
    from seedaudit.preflight import make_plan

    options: dict[str, Any] = {"workers": workers}
    if cluster:
        options["cluster"] = cluster
    if prepared:
        options["prepared"] = Path(prepared)
    asked = study(table, placements, cleaned=bool(cleaned), searched=bool(searched))
    spent = [
        _timed(cloud, name) for name in ("placement_maps", "_pairs", "_thresholds", "_regions")
    ]
    started = time.perf_counter()
    plan = make_plan(asked)
    if memory:
        plan = fitted(plan, workers, parse_size(memory))
    result = run(plan if memory else asked, **options)
    took = time.perf_counter() - started
    return {
        "seconds": took,
        "pass": result.provenance["seconds"]["pass over the data"],
        "maps": sum(map(sum, spent)),
        "tiles": plan.layout.tiles,
    }


def _timed(module: Any, name: str) -> list[float]:
    """The seconds that each call of a function will take."""
    inner, seconds = getattr(module, name), []

    def outer(*arguments: Any, **options: Any) -> Any:
        started = time.perf_counter()
        found = inner(*arguments, **options)
        seconds.append(time.perf_counter() - started)
        return found

    setattr(module, name, outer)
    return seconds


def maskers_batch(table: str, placements: int) -> dict[str, float]:
    """nilearn: all seeds in one masker, all voxels in another, one product, for one run."""
    import numpy as np
    from nilearn.maskers import NiftiMasker, NiftiSpheresMasker

    folder, centres = Path(table).parent, _centres(table, placements)
    path = str(folder / "run-0.nii.gz")
    started = time.perf_counter()
    seeds = NiftiSpheresMasker(centres, radius=6, allow_overlap=True, standardize=False)
    a = seeds.fit_transform(path)
    b = NiftiMasker(str(folder / "mask.nii.gz"), standardize=False).fit_transform(path)
    a = (a - a.mean(axis=0)) / a.std(axis=0)
    b = (b - b.mean(axis=0)) / np.maximum(b.std(axis=0), 1e-12)
    np.arctanh(np.clip(a.T @ b / len(a), -1 + 1e-7, 1 - 1e-7))
    return {"seconds": time.perf_counter() - started}


def maskers_loop(table: str, placements: int, measured: int = 3) -> dict[str, float]:
    """nilearn: the usual loop over placements, some measured and extrapolated, for one run."""
    import numpy as np
    from nilearn.maskers import NiftiMasker, NiftiSpheresMasker

    folder, centres = Path(table).parent, _centres(table, placements)
    path = str(folder / "run-0.nii.gz")
    started = time.perf_counter()
    for centre in centres[:measured]:
        a = NiftiSpheresMasker([centre], radius=6, standardize=False).fit_transform(path)
        masker = NiftiMasker(str(folder / "mask.nii.gz"), standardize=False)
        b = masker.fit_transform(path)
        a, b = a - a.mean(axis=0), b - b.mean(axis=0)
        norm = np.linalg.norm(a, axis=0)[:, None] * np.maximum(np.linalg.norm(b, axis=0), 1e-12)
        np.arctanh(np.clip(a.T @ b / norm, -1 + 1e-7, 1 - 1e-7))
    took = time.perf_counter() - started
    return {"seconds": took / measured * placements, "measured": measured}


def _centres(table: str, placements: int) -> list[tuple[float, ...]]:
    from seedaudit.preflight import make_plan

    plan = make_plan(study(table, placements))
    drawn = plan.seeds[0].cloud.table
    drawn = drawn[drawn["kind"] == "jitter"]
    return [tuple(map(float, row)) for row in drawn[["x", "y", "z"]].to_numpy()]


def main() -> None:
    """Measure the kind named on the command line; options are JSON."""
    warnings.simplefilter("ignore")
    kind, options = sys.argv[1], json.loads(sys.argv[2])
    kinds = {f.__name__: f for f in (decompress, audit, maskers_batch, maskers_loop)}
    found = kinds[kind](**options)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    print(json.dumps({**found, "peak_gb": peak / 1e9}))


if __name__ == "__main__":
    main()
