"""Whatever stands in an input: success, or an error of ours in words a person can read.

Hypothesis makes the inputs, the same ones every time. Nothing else may come out: no other
exception, no case that takes seconds, no memory beyond a limit of the process.
"""

from __future__ import annotations

import gzip
import resource
import shutil
import tomllib
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from seedaudit.cli import main
from seedaudit.errors import StudyError
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
    KEYS,
    ODD_CELLS,
    VALUES,
    Tally,
    check_readable,
    edited,
    edits,
    expressions,
    fuzz,
    put,
    study_texts,
    tables,
)
from tests.inputs.images import SHAPE, run_values, write_nifti

CASES = {
    "headers": 700, "streams": 250, "images": 150, "confounds": 350, "lists of runs": 250,
    "people": 300, "effects": 200, "claims": 250, "study files": 350, "mappings": 300,
    "commands": 80, "results": 120,
}  # fmt: skip

HEADROOM = 3 << 30
"""Bytes of address space that the process may still take: an absurd allocation fails at once."""


def test_there_are_two_thousand_cases():
    assert sum(CASES.values()) >= 3000


@pytest.fixture(autouse=True)
def bounded_memory() -> Iterator[None]:
    used = int(Path("/proc/self/statm").read_text().split()[0]) * resource.getpagesize()
    old = resource.getrlimit(resource.RLIMIT_AS)
    resource.setrlimit(resource.RLIMIT_AS, (used + HEADROOM, old[1]))
    yield
    resource.setrlimit(resource.RLIMIT_AS, old)


@pytest.fixture(scope="module")
def place(tmp_path_factory) -> Path:
    return tmp_path_factory.mktemp("fuzz")


@pytest.fixture(scope="module")
def runs(place) -> dict[int, bytes]:
    """A run as NIfTI-1 and as NIfTI-2, with both forms."""
    values = run_values(1, n_volumes=4)
    return {
        version: write_nifti(place / f"{version}.nii", values, "<i2", version=version,
                             qform_code=1).read_bytes()
        for version in (1, 2)
    }  # fmt: skip


def read_whole(path: Path) -> bool:
    """Everything that is done with a run: header, first volume, series, also smoothed."""
    header = read_header(path)
    first_volume(header)
    if np.prod(header.grid.shape) < 1e5:
        voxels = VoxelSet.from_mask(header.grid, np.ones(header.grid.shape, bool))
        read_run(header, voxels)
        if max(header.grid.voxel_sizes) < 1e3 and min(header.grid.voxel_sizes) > 0.1:
            read_run(header, voxels, 4.0)
    return True


def test_headers_of_runs(runs, place):
    """The first 352 (540) bytes: sizes, types, forms, offsets, scaling, units."""
    outcome = Tally()

    @fuzz(CASES["headers"])
    @given(
        version=st.sampled_from([1, 2]),
        changes=edits(540),
        packed=st.booleans(),
        named=st.integers(0, 4),
    )
    def case(version, changes, packed, named):
        reach = {1: 352, 2: 540}[version]
        content = edited(runs[version], [(kind, at % reach, new) for kind, at, new in changes])
        if named:  # what tells a NIfTI file from any other is left as it was, mostly
            for part in (slice(0, 12), slice(344, 348)) if version == 1 else (slice(0, 12),):
                content = content[: part.start] + runs[version][part] + content[part.stop :]
        path = place / ("h.nii.gz" if packed else "h.nii")
        outcome(read_whole, put(path, gzip.compress(content, 1) if packed else content))

    case()
    outcome.check(CASES["headers"])


def test_gzip_streams_of_runs(runs, place):
    outcome, packed = Tally(), gzip.compress(runs[1], 1)

    @fuzz(CASES["streams"])
    @given(changes=edits(len(packed)), cut=st.one_of(st.none(), st.integers(0, len(packed))))
    def case(changes, cut):
        # the time in the header of a gzip file (bytes 4 to 8) means nothing
        changes = [(kind, 4 + at % 4 if at % 9 == 0 else at, new[:1]) for kind, at, new in changes]
        outcome(read_whole, put(place / "s.nii.gz", edited(packed, changes)[:cut]))

    case()
    outcome.check(CASES["streams"])


def test_masks_and_regions(place):
    """A 3-D image as a mask and as labels, with the table of the labels beside it."""
    outcome, path = Tally(), place / "labels.nii"
    (place / "labels.tsv").write_text("index\tname\n0\tnone\n1\tone\n2\ttwo\n")

    @fuzz(CASES["images"])
    @given(
        changes=edits(600),
        values=st.lists(
            st.sampled_from([0, 1, 2, 1, 2, -1, 0.5, np.nan, np.inf, 1e38]), min_size=1, max_size=3
        ),
    )
    def case(changes, values):
        whole = write_nifti(path, np.resize(np.array(values, np.float32), SHAPE)).read_bytes()
        grid = read_image(path)[1]
        voxels = VoxelSet.from_mask(grid, np.ones(SHAPE, bool))
        for content in (whole, edited(whole, changes)):
            put(path, content)
            outcome(read_mask, path)
            outcome(read_mask, path, grid)
            outcome(read_regions, path, voxels)

    case()
    outcome.check(CASES["images"])


def a_number(row: int) -> str:
    return f"{(row * 7) % 5}.{row}"


def test_confounds_tables(place):
    outcome = Tally()
    names = ("trans_x", "trans_y_derivative1", "framewise_displacement", "csf")

    @fuzz(CASES["confounds"])
    @given(
        content=tables(dict.fromkeys(names, a_number), 8),
        patterns=st.lists(
            st.one_of(
                st.sampled_from(["*", "trans_*", "csf", "[", "[!a]*", "?"]), st.text(max_size=4)
            ),
            min_size=1,
            max_size=2,
        ),
        column=st.sampled_from(names),
    )
    def case(content, patterns, column):
        path = put(place / "confounds.tsv", content)
        found = outcome(read_confounds, path, patterns, 8)
        over = outcome(censored_volumes, path, column, 0.5, 1, 2, 8)
        if found is not None:
            assert np.isfinite(found[0]).all()
            basis = nuisance_basis(8, drift=1, confounds=found[0], censored=over)
            assert np.isfinite(basis).all()
            np.testing.assert_allclose(basis.T @ basis, np.eye(basis.shape[1]), atol=1e-6)

    case()
    outcome.check(CASES["confounds"])


def test_lists_of_runs(place):
    """Tables, patterns, lists and BIDS folders."""
    outcome, base = Tally(), place / "runs"
    base.mkdir()
    for row in range(3):
        (base / f"{row}.nii").write_bytes(b"")
        (base / f"{row}.tsv").write_bytes(b"")
    sound = {
        "participant_id": "sub-{}".format,
        "bold": "{}.nii".format,
        "run": str,
        "confounds": "{}.tsv".format,
        "mask": lambda row: "n/a",
    }
    odd = st.one_of(
        st.sampled_from([*ODD_CELLS, "**", "*.nii", "../*", "[a-", "**/*.nii.gz"]),
        st.text(max_size=8),
    )

    @fuzz(CASES["lists of runs"])
    @given(
        content=tables(sound, 3),
        which=st.sampled_from(["table"] * 4 + ["*", "list", "bids"]),
        text=odd,
    )
    def case(content, which, text):
        put(base / "runs.tsv", content)
        match which:
            case "table":
                outcome(find_runs, "runs.tsv", base)
            case "*":
                outcome(find_runs, text, base)
            case "list":
                outcome(find_runs, [text, "0.nii", str(base / "1.nii")], base)
            case "bids":
                outcome(find_runs, None, base, text, {text: text})

    case()
    outcome.check(CASES["lists of runs"])


NAMES = ["age", "arm", "C(arm)", "center(age)", "scale(age)", "1", "0", "`odd name`", "site"]
ASKED = [
    ("1", None),
    ("age", "age"),
    ("arm", "arm[a] - arm[b]"),
    ("C(arm)", "C(arm)[a]"),
    ("center(age)", "center(age)"),
    ("arm + age", "age"),
    ("0 + age", "age"),
]
"""Models with an effect that goes with them."""
SIGNS = [" + ", " - ", ":", "*", " ", "~", "(", ")", "**2", "|", "[", "{"]


def test_models_and_people(place):
    outcome, people = Tally(), [f"sub-{row}" for row in range(6)]
    sound = {
        "participant_id": "sub-{}".format,
        "age": a_number,
        "arm": lambda row: "ab"[row % 2],
        "odd name": lambda row: "uv"[row // 3],
    }
    term = st.one_of(*[st.sampled_from(NAMES)] * 5, CELLS)
    sign = st.one_of(*[st.just(" + ")] * 4, st.sampled_from(SIGNS))
    sums = st.one_of(*[st.just([])] * 2, st.lists(st.tuples(sign, term), max_size=2))
    odd = st.tuples(term, st.one_of(st.none(), st.just("age"), CELLS))

    @fuzz(CASES["people"])
    @given(content=tables(sound, 6), asked=st.one_of(*[st.sampled_from(ASKED)] * 3, odd), more=sums)
    def case(content, asked, more):
        path = put(place / "people.tsv", content)
        first, effect = asked
        model = "~ " + first + "".join(sign + term for sign, term in more)
        found = outcome(build_design, people, path, model, effect)
        if found is not None:
            assert np.isfinite(found.matrix).all()
            assert np.isfinite(found.contrast).all()
            columns = found.matrix / np.linalg.norm(found.matrix, axis=0)
            assert np.linalg.matrix_rank(columns) == columns.shape[1]

    case()
    outcome.check(CASES["people"])


TERMS = {"age": np.array([1.0, 0]), "arm[a]": np.array([0, 1.0]), "arm[b - c]": np.array([1.0, 1])}


def test_effects():
    outcome = Tally()

    @fuzz(CASES["effects"])
    @given(expressions(list(TERMS)))
    def case(text):
        weights = outcome(parse_effect, text, TERMS)
        assert weights is None or (np.isfinite(weights).all() and weights.any())

    case()
    outcome.check(CASES["effects"])


@pytest.mark.parametrize("depth", [1000, 100_000])
def test_deep_nesting(depth, tmp_path):
    """Beyond what a parser can follow: an error as for any other slip."""
    for text in ("(" * depth + "age", "-" * depth + "age"):
        with pytest.raises(StudyError):
            parse_effect(text, TERMS)
    Tally()(build_design, ["a", "b"], None, "~ " + "(" * depth + "1" + ")" * depth)
    (tmp_path / "study.toml").write_text("a = " + "[" * depth + "]" * depth)
    with pytest.raises(StudyError):
        Study.load(tmp_path / "study.toml")


def test_claims_tables(place):
    outcome = Tally()
    either = {
        "claim": "c{}".format,
        "direction": lambda row: ["positive", "age", "negative"][row],
        "seed": lambda row: "s",
    }
    region = {**either, "region": lambda row: "front"}
    sphere = {**either, "x": a_number, "y": a_number, "z": a_number, "radius": lambda row: "6"}

    @fuzz(CASES["claims"])
    @given(st.one_of(tables(region, 3), tables(sphere, 3)))
    def case(content):
        path = put(place / "claims.tsv", content)
        found = outcome(read_claims, path, ["s"], {"front": 1}, TERMS["age"], TERMS)
        for claim in found or ():
            assert claim.sign in (-1, 1)
            assert claim.at is None or (np.isfinite(claim.at).all() and claim.radius > 0)

    case()
    outcome.check(CASES["claims"])


@pytest.fixture(scope="module")
def study_copy(sound, tmp_path_factory) -> Path:
    return Path(shutil.copytree(sound, tmp_path_factory.mktemp("copy") / "study"))


def test_study_files(study_copy):
    """TOML with values, keys, lines or bytes changed."""
    outcome = Tally()
    whole = (study_copy / "study.toml").read_text()

    @fuzz(CASES["study files"])
    @given(study_texts(whole))
    def case(content):
        outcome(Study.load, put(study_copy / "changed.toml", content))

    case()
    outcome.check(CASES["study files"])


def test_mappings(study_copy):
    """A sound study with odd values in the places of sound ones, and odd sections beside them."""
    outcome, whole = Tally(), (study_copy / "study.toml").read_text()

    @fuzz(CASES["mappings"])
    @given(section=KEYS, key=KEYS, value=VALUES, more=st.dictionaries(KEYS, VALUES, max_size=2))
    def case(section, key, value, more):
        content = tomllib.loads(whole)
        inner = content.get(section)
        inner = inner[0] if isinstance(inner, list) else inner
        if isinstance(inner, dict):
            inner[key] = value
        outcome(Study.from_mapping, {**content, **more}, study_copy)

    case()
    outcome.check(CASES["mappings"])


def test_whole_commands(study_copy, capsys):
    """Through the command line: 0, 2 or 3 with words, and never a fault of the program."""
    codes: dict[int, int] = {}
    whole = (study_copy / "study.toml").read_text()
    files = [
        "runs.tsv",
        "participants.tsv",
        "networks_dseg.tsv",
        "mask.nii.gz",
        "networks_dseg.nii.gz",
        "sub-03_task-rest_run-1_bold.nii",
        "sub-01_task-rest_run-1_timeseries.tsv",
    ]

    @fuzz(CASES["commands"])
    @given(
        file=st.one_of(st.none(), st.sampled_from(files)),
        changes=edits(560),
        text=study_texts(whole),
    )
    def case(file, changes, text):
        path = study_copy / (file or "study.toml")
        before = path.read_bytes()
        put(path, edited(before, changes) if file else text)
        try:
            code = main(["check", str(study_copy / "study.toml"), "--quiet"])
        finally:
            put(path, before)
        codes[code] = codes.get(code, 0) + 1
        told = capsys.readouterr().err
        if code:
            check_readable("stderr", told, told)

    case()
    assert set(codes) == {0, 2, 3}, codes


def test_damaged_results(result, tmp_path):
    """Any file of a result folder; what is read all the same has its title and its tables."""
    outcome, saved = Tally(), save(result, tmp_path / "audit")
    files = sorted(path for path in saved.rglob("*") if path.is_file())

    @fuzz(CASES["results"])
    @given(path=st.sampled_from(files), changes=edits(400))
    def case(path, changes):
        before = path.read_bytes()
        put(path, edited(before, changes))
        try:
            found = outcome(load_audit, saved)
        finally:
            put(path, before)
        assert found is None or len(found.seeds) == 1

    case()
    outcome.check(CASES["results"])
