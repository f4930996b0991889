"""Whatever stands in an input: success, or an error of ours in words a person can read.

Hypothesis makes the inputs, the same ones every time. Nothing else may come out: no other
exception, no case that takes seconds, no memory beyond a limit of the process.
"""

from __future__ import annotations

import gzip
import resource
import shutil
import tomllib
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from seedaudit.cli import main
from seedaudit.errors import SeedAuditError, StudyError
from seedaudit.inputs.claims import read_claims
from seedaudit.inputs.design import build_design
from seedaudit.inputs.discover import find_runs
from seedaudit.inputs.effect import parse_effect
from seedaudit.inputs.nuisance import censored_volumes, nuisance_basis, read_confounds
from seedaudit.inputs.regions import read_regions
from seedaudit.inputs.volumes import first_volume, read_header, read_image, read_mask, read_run
from seedaudit.space.grid import VoxelSet
from seedaudit.store import load_audit, save
from seedaudit.study import Study
from tests.faults.mutations import (
    CELLS,
    JUNK,
    KEYS,
    ODD_CELLS,
    SNIPPETS,
    VALUES,
    edited,
    edits,
    fuzz,
    tables,
    write_cells,
)
from tests.inputs.images import SHAPE, run_values, write_nifti

HEADERS, STREAMS, IMAGES, CONFOUNDS, RUN_TABLES, PEOPLE, EFFECTS = 500, 250, 100, 350, 250, 250, 150
CLAIMS, STUDY_FILES, MAPPINGS, COMMANDS, RESULTS = 250, 350, 300, 80, 120
"""Cases of each kind."""

HEADROOM = 3 << 30
"""Bytes of address space that the process may still take: an absurd allocation fails at once."""


def test_there_are_two_thousand_cases():
    assert HEADERS + STREAMS + CONFOUNDS + RUN_TABLES + CLAIMS + STUDY_FILES + MAPPINGS >= 2000


@pytest.fixture(autouse=True)
def bounded_memory() -> Iterator[None]:
    used = int(Path("/proc/self/statm").read_text().split()[0]) * resource.getpagesize()
    old = resource.getrlimit(resource.RLIMIT_AS)
    resource.setrlimit(resource.RLIMIT_AS, (used + HEADROOM, old[1]))
    yield
    resource.setrlimit(resource.RLIMIT_AS, old)


def outcome(step: Callable[..., Any], *arguments: Any) -> Any:
    """What a step gives, or None where it refuses in readable words."""
    try:
        return step(*arguments)
    except SeedAuditError as error:
        for problem in error.problems:
            assert problem.where
            assert problem.found
            assert len(str(problem)) < 20_000
            for word in ("Traceback", "<class", " object at 0x", "line 1, in"):
                assert word not in str(problem)
        return None


@pytest.fixture(scope="module")
def place(tmp_path_factory) -> Path:
    return tmp_path_factory.mktemp("fuzz")


@pytest.fixture(scope="module")
def runs(place) -> dict[int, bytes]:
    """A run as NIfTI-1 and as NIfTI-2."""
    values = run_values(1, n_volumes=4)
    return {
        version: write_nifti(place / f"{version}.nii", values, "<i2", version=version,
                             qform=None, qform_code=1).read_bytes()
        for version in (1, 2)
    }  # fmt: skip


def read_whole(path: Path) -> None:
    """Everything that is done with a run: header, first volume, series, also smoothed."""
    header = read_header(path)
    first_volume(header)
    if np.prod(header.grid.shape) < 1e5:
        voxels = VoxelSet.from_mask(header.grid, np.ones(header.grid.shape, bool))
        read_run(header, voxels)
        if max(header.grid.voxel_sizes) < 1e3 and min(header.grid.voxel_sizes) > 0.1:
            read_run(header, voxels, 4.0)


@fuzz(HEADERS)
@given(version=st.sampled_from([1, 2]), changes=edits(540), packed=st.booleans())
def test_headers_of_runs(runs, place, version, changes, packed):
    """The first 352 (540) bytes: sizes, types, forms, offsets, scaling, units."""
    content = edited(runs[version], [(k, at % (352 if version == 1 else 540), b)
                                     for k, at, b in changes])  # fmt: skip
    path = place / ("h.nii.gz" if packed else "h.nii")
    path.write_bytes(gzip.compress(content, 1) if packed else content)
    outcome(read_whole, path)


@fuzz(STREAMS)
@given(changes=edits(3000), cut=st.integers(0, 4000), cut_it=st.booleans())
def test_gzip_streams_of_runs(runs, place, changes, cut, cut_it):
    content = edited(gzip.compress(runs[1], 1), changes)
    path = place / "s.nii.gz"
    path.write_bytes(content[:cut] if cut_it else content)
    outcome(read_whole, path)


@fuzz(IMAGES)
@given(
    changes=edits(600),
    values=st.lists(
        st.sampled_from([0, 1, 2, -1, 0.5, np.nan, np.inf, 1e38]), min_size=1, max_size=4
    ),
)
def test_masks_and_regions(place, changes, values):
    """A 3-D image as a mask and as labels, with a table beside it that is none of its own."""
    data = np.resize(np.array(values, np.float32), SHAPE)
    path = write_nifti(place / "labels.nii", data)
    (place / "labels.tsv").write_text("index\tname\n0\tnone\n1\tone\n2\ttwo\n")
    whole = path.read_bytes()
    grid = read_image(path)[1]
    voxels = VoxelSet.from_mask(grid, np.ones(SHAPE, bool))
    for content in (whole, edited(whole, changes)):
        path.write_bytes(content)
        outcome(read_mask, path)
        outcome(read_mask, path, grid)
        outcome(read_regions, path, voxels)


@fuzz(CONFOUNDS)
@given(
    rows=tables(["trans_x", "trans_y_derivative1", "framewise_displacement", "csf"], 8),
    junk=JUNK,
    at=st.integers(0, 500),
    censored=st.booleans(),
    pattern=st.one_of(
        st.sampled_from(["*", "trans_*", "csf", "[", "[!a]*", "?"]), st.text(max_size=4)
    ),
)
def test_confounds_tables(place, rows, junk, at, censored, pattern):
    path = write_cells(place / "confounds.tsv", rows, junk, at)
    found = outcome(read_confounds, path, [pattern], 8)
    over = outcome(censored_volumes, path, rows[0][0].strip(), 0.5, 1, 2, 8) if censored else None
    if found is not None:
        assert np.isfinite(found[0]).all()
        basis = outcome(lambda: nuisance_basis(8, drift=1, confounds=found[0], censored=over))
        assert basis is None or np.isfinite(basis).all()


@fuzz(RUN_TABLES)
@given(rows=tables(["participant_id", "bold", "run", "confounds", "mask"], 3), junk=JUNK,
       at=st.integers(0, 200), which=st.sampled_from(["table", "pattern", "list", "bids"]),
       text=st.one_of(st.sampled_from([*ODD_CELLS, "**", "*.nii", "../*", "[a-", "**/*.nii.gz"]),
                      st.text(max_size=8)))  # fmt: skip
def test_lists_of_runs(place, rows, junk, at, which, text):
    base = place / "runs"
    base.mkdir(exist_ok=True)
    write_cells(base / "runs.tsv", rows, junk, at)
    ask = {"table": ("runs.tsv",), "pattern": (text,), "list": ([text, "x.nii", "/y.nii"],),
           "bids": (None,)}[which]  # fmt: skip
    more = (text, {text: text}) if which == "bids" else ()
    outcome(find_runs, *ask, base, *more)


WORDS = [
    "age",
    "arm",
    "site",
    "1",
    "0",
    "+",
    "-",
    "*",
    ":",
    "~",
    "(",
    ")",
    "C(arm)",
    "center(age)",
    "scale(age)",
    "C(",
    "`odd name`",
    "`",
    "{",
    "}",
    "|",
    "**2",
    "[",
    "np",
    ".",
    "I(age)",
]


@fuzz(PEOPLE)
@given(
    rows=tables(["participant_id", "age", "arm", "odd name"], 5),
    junk=JUNK,
    at=st.integers(0, 300),
    words=st.lists(st.one_of(st.sampled_from(WORDS), CELLS), max_size=6),
    effect=st.one_of(st.none(), st.sampled_from(["age", "arm[a]", "arm[a] - arm[b]"]), CELLS),
)
def test_models_and_people(place, rows, junk, at, words, effect):
    for number, row in enumerate(rows[1:], 1):
        row[0] = f"sub-{number}" if len(row) > 1 else row[0]
    path = write_cells(place / "people.tsv", rows, junk, at)
    people = [f"sub-{number}" for number in range(1, 6)]
    found = outcome(build_design, people, path, "~ " + " ".join(words), effect)
    if found is not None:
        assert np.isfinite(found.matrix).all()
        assert np.isfinite(found.contrast).all()


TERMS = {"age": np.array([1.0, 0]), "arm[a]": np.array([0, 1.0]), "arm[b - c]": np.array([1.0, 1])}


@fuzz(EFFECTS)
@given(st.lists(st.one_of(st.sampled_from([*TERMS, "+", "-", "*", "/", "(", ")", "2", "0", "1e308",
                                           "1e-320", "1e999", ".", "e", "arm", "arm["]), CELLS),
                max_size=9))  # fmt: skip
def test_effects(words):
    weights = outcome(parse_effect, " ".join(words), TERMS)
    assert weights is None or np.isfinite(weights).all()


@pytest.mark.parametrize("depth", [1000, 100_000])
def test_deep_nesting(depth, place, tmp_path):
    """Beyond what a parser can follow: an error as for any other slip."""
    with pytest.raises(StudyError):
        parse_effect("(" * depth + "age", TERMS)
    outcome(build_design, ["a", "b"], None, "~ " + "(" * depth + "1" + ")" * depth)
    (tmp_path / "study.toml").write_text("a = " + "[" * depth + "]" * depth)
    with pytest.raises(StudyError):
        Study.load(tmp_path / "study.toml")


@fuzz(CLAIMS)
@given(rows=tables(["claim", "direction", "seed", "region", "x", "y", "z", "radius"], 3), junk=JUNK,
       at=st.integers(0, 300))  # fmt: skip
def test_claims_tables(place, rows, junk, at):
    spread = {"direction": "positive", "seed": "s", "region": "front"}
    for row in rows[1:]:
        for column, name in enumerate(rows[0]):
            if name in spread and "." in row[column]:
                row[column] = spread[name]
    path = write_cells(place / "claims.tsv", rows, junk, at)
    found = outcome(read_claims, path, ["s"], {"front": 1}, TERMS["age"], TERMS)
    for claim in found or ():
        assert claim.sign in (-1, 1)
        assert claim.at is None or (np.isfinite(claim.at).all() and claim.radius > 0)


@pytest.fixture(scope="module")
def study_text(sound) -> bytes:
    return (sound / "study.toml").read_bytes()


@fuzz(STUDY_FILES)
@given(
    changes=st.lists(
        st.tuples(
            st.sampled_from(["over", "in", "out"]),
            st.integers(0, 700),
            st.one_of(SNIPPETS, st.binary(min_size=1, max_size=3)),
        ),
        min_size=1,
        max_size=3,
    )
)
def test_study_files(sound, study_text, changes):
    """Read, checked and shown; those that hold lead to files of the sound study."""
    path = sound.parent / "fuzzed.toml"
    path.write_bytes(edited(study_text, changes))
    outcome(Study.load, path)


@fuzz(MAPPINGS)
@given(section=KEYS, key=KEYS, value=VALUES, more=st.dictionaries(KEYS, VALUES, max_size=2))
def test_mappings(sound, study_text, section, key, value, more):
    """A sound study with odd values in the places of sound ones, and odd sections beside them."""
    content = tomllib.loads(study_text.decode())
    inner = content.get(section)
    if isinstance(inner, list):
        inner = inner[0]
    if isinstance(inner, dict):
        inner[key] = value
    study = outcome(Study.from_mapping, {**content, **more}, sound)
    assert study is None or isinstance(study, Study)


@pytest.fixture
def study_copy(sound, tmp_path) -> Path:
    return Path(shutil.copytree(sound, tmp_path / "study"))


@fuzz(COMMANDS)
@given(file=st.sampled_from(["study.toml", "runs.tsv", "participants.tsv", "networks_dseg.tsv",
                             "mask.nii.gz", "networks_dseg.nii.gz",
                             "sub-03_task-rest_run-1_bold.nii",
                             "sub-01_task-rest_run-1_timeseries.tsv"]),
       changes=edits(560), command=st.just("check"))  # fmt: skip
def test_whole_commands(study_copy, file, changes, command):
    """Through the command line: 0, 2 or 3, and never a fault of the program."""
    path = study_copy / file
    whole = path.read_bytes()
    path.write_bytes(edited(whole, changes))
    try:
        assert main([command, str(study_copy / "study.toml"), "--quiet"]) in (0, 2, 3)
    finally:
        path.write_bytes(whole)


@pytest.fixture(scope="module")
def saved(result, tmp_path_factory) -> Path:
    return save(result, tmp_path_factory.mktemp("saved") / "audit")


@fuzz(RESULTS)
@given(number=st.integers(0, 200), changes=edits(400))
def test_damaged_results(saved, number, changes):
    """Any file of a result folder; what is loaded all the same can be shown."""
    files = sorted(path for path in saved.rglob("*") if path.is_file())
    path = files[number % len(files)]
    whole = path.read_bytes()
    path.write_bytes(edited(whole, changes))
    try:
        found = outcome(load_audit, saved)
        assert found is None or found.title is not None
    finally:
        path.write_bytes(whole)
