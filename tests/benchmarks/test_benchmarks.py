"""The benchmark command runs, small: its lines are there; no speed is judged here."""

from __future__ import annotations

import json
import subprocess
import sys

import pytest

from tests.benchmarks.__main__ import ROOT, measured
from tests.benchmarks.data import SMALL, Size, write_runs


@pytest.fixture(scope="module")
def table(tmp_path_factory):
    return str(write_runs(tmp_path_factory.mktemp("bench"), SMALL, 3))


@pytest.mark.parametrize(
    ("kind", "options"),
    [
        ("decompress", {"workers": 2}),
        ("audit", {"workers": 2, "placements": 20, "cleaned": 1}),
        ("audit", {"workers": 2, "placements": 20, "memory": "2GB"}),
        ("maskers_batch", {"placements": 5}),
        ("maskers_loop", {"placements": 5, "measured": 1}),
    ],
)
def test_every_kind_of_measurement(table, kind, options):
    found = measured(kind, table=table, **options)
    assert found["seconds"] > 0
    assert found["peak_gb"] > 0.01
    json.dumps(found)


def test_memory_of_an_audit_keeps_to_its_forecast(table):
    """The predicted peak is not passed by more than a fifth, libraries included."""
    from seedaudit.forecast import forecast
    from seedaudit.preflight import make_plan
    from tests.benchmarks.measure import study

    predicted = forecast(make_plan(study(table, 100)), 2).memory
    found = measured("audit", table=table, workers=2, placements=100)
    assert found["peak_gb"] * 1e9 < 1.2 * predicted


def test_a_memory_budget_is_kept(tmp_path):
    """The measured peak, libraries included, of a study that asks for half as much again."""
    table = str(write_runs(tmp_path, Size(4.0, 160), 4))
    options = {"table": table, "workers": 2, "placements": 400}
    assert measured("audit", **options)["peak_gb"] > 0.65
    found = measured("audit", **options, memory="500MB")
    assert found["tiles"] > 1
    assert found["peak_gb"] <= 0.525


def test_the_command_small(tmp_path):
    """Every line is there, with its goal, in the table and as JSON."""
    written = tmp_path / "lines.json"
    done = subprocess.run(
        [sys.executable, "-m", "tests.benchmarks", "--small", "--json", str(written)],
        cwd=ROOT, capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    lines = json.loads(written.read_text())
    letters = {line["what"][:3] for line in lines if line["what"].startswith("(")}
    assert letters >= {f"({letter})" for letter in "abcdefhi"}
    assert all(line["value"] > 0 and line["goal"] for line in lines)
    assert len(done.stdout.splitlines()) >= len(lines)
