"""The benchmarks, one command: ``python -m tests.benchmarks [--small] [--json FILE]``.

Every line is a ratio of two measurements of the same run of this command, each in a process of
its own; the goal stands beside it. Absolute seconds are for orientation only.
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
import tempfile
from pathlib import Path
from typing import Any

from tests.benchmarks.data import FULL, LARGE, SMALL, Size, write_runs

ROOT = Path(__file__).resolve().parents[2]
SMALL_MEMORY = "0.9GB"


def measured(kind: str, **options: Any) -> dict[str, float]:
    """One measurement in a fresh process, after the files are in the page cache."""
    command = [sys.executable, "-m", "tests.benchmarks.measure", kind, json.dumps(options)]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True)
    if done.returncode:
        raise RuntimeError(f"{kind} {options} failed:\n{done.stderr}")
    found: dict[str, float] = json.loads(done.stdout.splitlines()[-1])
    return found


class Report:
    """Lines of the table, printed as they come."""

    def __init__(self) -> None:
        self.lines: list[dict[str, Any]] = []

    def add(self, what: str, value: float, unit: str, goal: str, detail: str) -> None:
        line = {"what": what, "value": round(value, 3), "unit": unit, "goal": goal,
                "detail": detail}  # fmt: skip
        self.lines.append(line)
        print(f"{what:<58} {value:8.2f} {unit:<6} goal {goal:<8} {detail}", flush=True)


def benchmark(folder: Path, size: Size, *, many: tuple[int, ...], placements: int) -> Report:
    """All measurements; `many` are the numbers of participants of line (e)."""
    report = Report()
    tables = {n: str(write_runs(folder, size, n)) for n in {8, *many}}
    eight = tables[8]
    for n in (8, many[1]):
        measured("decompress", table=tables[n], workers=2)  # brings the files into the page cache
        _against_decompression(report, tables[n], n, placements)

    ours = measured("audit", table=eight, workers=2, placements=100)
    per_run = ours["pass"] / 8
    batch = measured("maskers_batch", table=eight, placements=100)
    report.add("(b) maskers in one batch over the pass, one run", batch["seconds"] / per_run, "x",
               ">= 15", f"{batch['seconds']:.1f} s over {per_run:.2f} s")  # fmt: skip
    loop = measured("maskers_loop", table=eight, placements=placements)
    ours_many = measured("audit", table=eight, workers=2, placements=placements)["pass"] / 8
    report.add(f"(c) loop over {placements} placements over the pass, one run",
               loop["seconds"] / ours_many, "x", ">= 1000",
               f"{loop['seconds']:.0f} s extrapolated from 3 placements")  # fmt: skip
    _memory(report, eight, ours, batch)

    runs = {n: measured("audit", table=tables[n], workers=2, placements=100) for n in many}
    few, most = many[0], many[-1]
    report.add(f"(e) time per participant, {most} over {few}",
               (runs[most]["pass"] / most) / (runs[few]["pass"] / few), "x", "about 1",
               ", ".join(f"{n}: {runs[n]['pass']:.1f} s" for n in many))  # fmt: skip
    report.add(f"(e) peak memory, {most} over {few} participants",
               runs[most]["peak_gb"] / runs[few]["peak_gb"], "x", "about 1",
               ", ".join(f"{n}: {runs[n]['peak_gb']:.2f} GB" for n in many))  # fmt: skip

    alone = measured("audit", table=eight, workers=1, placements=100)
    report.add("(f) one worker over two, the pass", alone["pass"] / ours["pass"], "x", "about 2",
               f"{alone['pass']:.2f} s over {ours['pass']:.2f} s")  # fmt: skip
    _cluster(report, tables)
    _placements(report, eight)
    _prepared(report, eight, folder, ours)
    _search(report, eight, ours)
    return report


def _against_decompression(report: Report, table: str, n: int, placements: int) -> None:
    base = measured("decompress", table=table, workers=2)
    for name, cleaned, goal in [("no cleaning", 0, "<= 1.5"), ("30 confounds, band", 1, "<= 2.0")]:
        found = measured("audit", table=table, workers=2, placements=placements, cleaned=cleaned)
        for part, label in [("pass", "the pass"), ("seconds", "whole run")]:
            report.add(
                f"(a) {label} over decompression, {name}", found[part] / base["seconds"], "x", goal,
                f"{found[part]:.2f} s over {base['seconds']:.2f} s, {n} participants",
            )  # fmt: skip
    report.add("    left-out folds, pairs, sweep, regions over the pass",
               found["maps"] / found["pass"], "x", "< 1",
               f"{found['maps']:.2f} s, {placements} placements, {n} participants")  # fmt: skip


def _memory(report: Report, table: str, ours: dict[str, float], batch: dict[str, float]) -> None:
    report.add("(d) peak memory over that of the batch", ours["peak_gb"] / batch["peak_gb"], "x",
               "<= 0.33", f"{ours['peak_gb']:.2f} GB over {batch['peak_gb']:.2f} GB")  # fmt: skip
    kept = measured("audit", table=table, workers=2, placements=100, memory=SMALL_MEMORY)
    report.add(f"(d) the same with --memory {SMALL_MEMORY}", kept["peak_gb"] / batch["peak_gb"],
               "x", "<= 0.33", f"{kept['peak_gb']:.2f} GB, {kept['tiles']:.0f} tiles, whole run "
               f"{kept['seconds'] / ours['seconds']:.2f} times as long")  # fmt: skip


def large(folder: Path, report: Report) -> None:
    """1 mm and 500 placements within 8 GB; some 60 GB of disk and 15 minutes."""
    (folder / "large").mkdir(exist_ok=True)
    table = str(write_runs(folder / "large", LARGE, 4))
    found = measured("audit", table=table, workers=2, placements=500, memory="8GB")
    report.add("    1 mm, 500 placements with --memory 8GB, peak", found["peak_gb"], "GB", "<= 8",
               f"{found['tiles']:.0f} tiles, 4 participants, {LARGE.volumes} volumes: pass "
               f"{found['pass']:.0f} s, whole run {found['seconds']:.0f} s")  # fmt: skip


def _cluster(report: Report, tables: dict[int, str]) -> None:
    try:
        from distributed import LocalCluster
    except ImportError:
        print("(g) skipped: the extra `cluster` is not installed")
        return
    most = max(tables)
    for n in (8, most):
        options = {"table": tables[n], "workers": 2, "placements": 100}
        local = measured("audit", **options)
        with LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=None,
                          worker_dashboard_address=None, host="127.0.0.1") as cluster:  # fmt: skip
            found = measured("audit", **options, cluster=cluster.scheduler_address)
        report.add("(g) cluster of 2 workers over local, the pass", found["pass"] / local["pass"],
                   "x", "about 1", f"{found['pass']:.2f} s over {local['pass']:.2f} s, {n} "
                   f"participants; client {found['peak_gb']:.2f} GB")  # fmt: skip


def _placements(report: Report, table: str) -> None:
    counts = (2, 100, 1000)
    found = {n: measured("audit", table=table, workers=2, placements=n) for n in counts}
    for n in counts[1:]:
        report.add(f"(h) {n} placements over {counts[0]}, the pass",
                   found[n]["pass"] / found[counts[0]]["pass"], "x", f"<< {n // counts[0]}",
                   f"{found[n]['pass']:.2f} s, {found[n]['peak_gb']:.2f} GB")  # fmt: skip


def _search(report: Report, table: str, plain: dict[str, float]) -> None:
    found = measured("audit", table=table, workers=2, placements=100, searched=1)
    report.add("(i) search of 8 mm at 2 mm over the plain audit, whole run",
               found["seconds"] / plain["seconds"], "x", "<= 3",
               f"{found['seconds']:.1f} s over {plain['seconds']:.1f} s, {found['peak_gb']:.2f} GB "
               f"over {plain['peak_gb']:.2f} GB")  # fmt: skip


def _prepared(report: Report, table: str, folder: Path, local: dict[str, float]) -> None:
    options = {"table": table, "workers": 2, "placements": 100, "prepared": str(folder / "kept")}
    measured("audit", **options)
    again = measured("audit", **options)
    report.add("    second seed from prepared runs over reading, the pass",
               again["pass"] / local["pass"], "x", "< 1",
               f"{again['pass']:.2f} s over {local['pass']:.2f} s")  # fmt: skip


def main() -> None:
    """Parse the options, measure, print, write JSON."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks", description=__doc__)
    parser.add_argument("--small", action="store_true", help="tiny data, in under two minutes")
    parser.add_argument("--large", action="store_true", help="also 1 mm (60 GB of disk)")
    parser.add_argument("--json", type=Path, help="also write the table as JSON")
    parser.add_argument("--folder", type=Path, help="keep the data there (default: temporary)")
    options = parser.parse_args()
    size, many = (SMALL, (2, 4, 8)) if options.small else (FULL, (10, 20, 40))
    with tempfile.TemporaryDirectory() as temporary:
        folder = options.folder or Path(temporary)
        folder.mkdir(parents=True, exist_ok=True)
        report = benchmark(folder, size, many=many, placements=200)
        if options.large:
            large(folder, report)
    if options.json:
        options.json.write_text(json.dumps(report.lines, indent=2) + "\n")


if __name__ == "__main__":
    main()
