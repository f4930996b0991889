"""A result folder that somebody else made, or damaged: refused in words, never followed."""

from __future__ import annotations

import gzip
import io
import json
import os
import pickle
import shutil
import tracemalloc
from collections.abc import Callable
from pathlib import Path

import nibabel as nib
import numpy as np
import pandas as pd
import pytest

from seedaudit.dictionary import COLUMNS
from seedaudit.errors import DataError
from seedaudit.guards import MOST_BYTES, inert, live
from seedaudit.store import load_audit, read_table, save, write_table
from tests.faults.test_absurd_inputs import HUGE, header_of

Spoil = Callable[[Path], object]


@pytest.fixture(scope="module")
def saved(result, tmp_path_factory) -> Path:
    return save(result, tmp_path_factory.mktemp("saved") / "audit")


@pytest.fixture
def copy(saved, tmp_path) -> Path:
    return Path(shutil.copytree(saved, tmp_path / "audit"))


def linked(name: str) -> Spoil:
    """Put a link to the very same content, which stands outside, in the place of a part."""

    def spoil(folder: Path) -> None:
        outside = folder.parent / "outside"
        shutil.move(folder / name, outside)
        (folder / name).symlink_to(outside)

    return spoil


def written(name: str, content: bytes | str) -> Spoil:
    content = content.encode() if isinstance(content, str) else content
    return lambda folder: (folder / name).write_bytes(content)


def told(change: Callable[[dict], object], name: str = "summary.json") -> Spoil:
    """Change what a JSON file of the folder says."""

    def spoil(folder: Path) -> None:
        content = json.loads((folder / name).read_text())
        change(content)
        (folder / name).write_text(json.dumps(content))

    return spoil


def named(name: object) -> Spoil:
    return told(lambda summary: summary["seeds"][0].update(name=name))


def two_seeds(name: str) -> Spoil:
    """A second seed whose folder would be the named one."""
    return told(lambda summary: summary["seeds"].append({**summary["seeds"][0], "name": name}))


def sparse(name: str, size: int) -> Spoil:
    return lambda folder: os.truncate(folder / name, size)


def fifo(folder: Path) -> None:
    """A pipe, at which a reader would wait for ever."""
    (folder / "tables" / "pairs.tsv").unlink()
    os.mkfifo(folder / "tables" / "pairs.tsv")


def gzip_bomb(folder: Path) -> None:
    """A header that claims 4 GB, and zeros for half a gigabyte of them in half a megabyte."""
    header = nib.Nifti1Header(header_of((2000, 2000, 1000))[:348])
    header.set_data_dtype(np.uint8)
    raw = io.BytesIO()
    with gzip.GzipFile(fileobj=raw, mode="wb", compresslevel=1) as packed:
        packed.write(header.binaryblock + bytes(4))
        for _ in range(64):
            packed.write(bytes(1 << 23))
    (folder / "maps" / "safe.nii.gz").write_bytes(raw.getvalue() + bytes(4_000_000))


def other_shape(folder: Path) -> None:
    image = nib.Nifti1Image.from_filename(folder / "maps" / "safe.nii.gz")
    data = np.asarray(image.dataobj)[1:]
    nib.save(nib.Nifti1Image(data, image.affine, image.header), folder / "maps" / "safe.nii.gz")


def doubles(folder: Path) -> None:
    image = nib.Nifti1Image.from_filename(folder / "maps" / "safe.nii.gz")
    nib.save(nib.Nifti1Image(np.zeros(image.shape), image.affine), folder / "maps" / "safe.nii.gz")


TRICKS: dict[str, tuple[Spoil, str]] = {
    "summary is a link": (linked("summary.json"), "symbolic link"),
    "a table is a link": (linked("tables/regions.tsv"), "symbolic link"),
    "the tables are a link": (linked("tables"), "symbolic link"),
    "a map is a link": (linked("maps/safe.nii.gz"), "symbolic link"),
    "the maps are a link": (linked("maps"), "symbolic link"),
    "components are a link": (linked("maps/placement_components.json"), "symbolic link"),
    "a table is a pipe": (fifo, "no ordinary file"),
    "a table is a folder": (
        lambda f: ((f / "tables/pairs.tsv").unlink(), (f / "tables/pairs.tsv").mkdir()),
        "no ordinary file"),
    "seed above the folder": (two_seeds("../posterior"), r"named '../posterior'"),
    "seed at a place": (two_seeds("/etc"), r"named '/etc'"),
    "one seed with a path": (named("../../x"), "letters, digits"),
    "seed without a name": (named(None), "named None"),
    "seed with a list for a name": (named(["x"]), "letters, digits"),
    "two seeds of one name": (two_seeds("posterior"), "each once"),
    "no seeds": (told(lambda s: s.update(seeds=[])), "each once"),
    "seeds are text": (told(lambda s: s.update(seeds="posterior")), "cannot be read"),
    "a list for the summary": (written("summary.json", "[1, 2]"), "no JSON object"),
    "half a summary": (written("summary.json", '{"schema": 1, "title": "x", "se'), "cannot be"),
    "summary of another code": (written("summary.json", b"\xff\xfe{}"), "cannot be read"),
    "summary without a title": (told(lambda s: s.pop("title")), "KeyError: 'title'"),
    "numbers that are none": (written("summary.json", '{"schema": NaN}'), "NaN is no number"),
    "deep nesting": (written("provenance.json", "[" * 200_000), "no JSON object"),
    "a summary of 10 GB": (sparse("summary.json", 10**10), "10000000000 bytes"),
    "a table of 10 GB": (sparse("tables/pairs.tsv", 10**10), "10000000000 bytes"),
    "a map of 10 GB": (sparse("maps/safe.nii.gz", 10**10), "10000000000 bytes"),
    "100 GB in a kilobyte": (
        written("maps/safe.nii.gz", gzip.compress(header_of(HUGE))), "the header asks for"),
    "a file of zeros": (gzip_bomb, "asks for 4000000000 values"),
    "a map of another shape": (other_shape, "the shape is"),
    "a map of doubles": (doubles, "values of type float64"),
    "no image": (written("maps/safe.nii.gz", b"hello"), "not a NIfTI"),
    "half a map": (sparse("maps/effect_mean.nii.gz", 900), "ends early|cannot be read"),
    "pickle for a map": (written("maps/safe.nii.gz", pickle.dumps({"a": 1})), "not a NIfTI"),
    "a missing map": (lambda f: (f / "maps/safe.nii.gz").unlink(), "safe.nii.gz"),
    "a missing table": (lambda f: (f / "tables/pairs.tsv").unlink(), "pairs.tsv"),
    "an empty table": (written("tables/pairs.tsv", ""), "cannot be read"),
    "a ragged table": (written("tables/pairs.tsv", "seed\tx\na\tb\tc\td\n"), "cannot be read"),
    "a table of something else": (written("tables/pairs.tsv", "fish\tsea\n1\t2\n"), "no column"),
    "components of another shape": (
        told(lambda t: t.update(Weights=[[1]]), "maps/placement_components.json"),
        "cannot be read"),
    "components of text": (
        told(lambda t: t.update(Steps="x"), "maps/placement_components.json"), "cannot be read"),
}  # fmt: skip


@pytest.mark.parametrize("name", TRICKS)
def test_tricks_are_refused(name, copy):
    """One kind of error, in words, and in little memory."""
    spoil, words = TRICKS[name]
    spoil(copy)
    tracemalloc.start()
    with pytest.raises(DataError, match=words):
        load_audit(copy)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert peak < 60e6
    assert max(MOST_BYTES.values()) < 10**10


def test_a_link_to_the_folder_itself_is_the_users_own_way(copy):
    (copy.parent / "latest").symlink_to(copy)
    assert load_audit(copy.parent / "latest").summary["schema"] == 1


def test_a_link_at_the_output_leads_to_where_the_result_goes(result, copy):
    link = copy.parent / "latest"
    link.symlink_to(copy)
    (copy / "mine.txt").write_text("of the earlier result")
    assert save(result, link, replace=True) == link
    assert link.is_symlink()
    assert not (copy / "mine.txt").exists()
    assert load_audit(link).summary == result.summary


FORMULAS = [
    "=1+1", "+1", "-1", "@SUM(A1)", "=cmd|' /C calc'!A0", "'=1", "''-2", "\uff1d1", "\uff0b1",
    "\x01=1", "-", "+arm[rested] - arm[restricted]", '=HYPERLINK("x","y")',
]  # fmt: skip
HARMLESS = ["a=b", "n-1", "'quoted'", "O'Neill", "(-7, -48, 20)", "1", "sub-01", "'", "0.8"]


@pytest.mark.parametrize("text", FORMULAS)
def test_formulas_are_made_inert(text):
    """OWASP, CSV injection: a cell must not begin with one of = + - @, nor with a tab or CR."""
    assert inert(text)[0] == "'"
    assert live(inert(text)) == text


@pytest.mark.parametrize("text", HARMLESS)
def test_other_text_stays_as_it_is(text):
    assert inert(text) == text == live(text)


def test_tables_keep_formulas_inert_and_give_them_back(tmp_path):
    words = [*FORMULAS, *HARMLESS, "\t=1", "\r\n@x"]
    table = pd.DataFrame(
        {"claim": words, "target": words, "reported_effect": np.linspace(-1, 1, len(words))}
    )
    write_table(tmp_path / "claims.tsv", table)
    for line in (tmp_path / "claims.tsv").read_text(encoding="utf-8").splitlines()[1:]:
        for cell in line.split("\t")[:2]:
            assert cell.strip('"')[0] not in "=+-@\t\r\uff1d\uff0b\x01"
    again = read_table(tmp_path / "claims.tsv")
    expected = [*FORMULAS, *HARMLESS, "=1", "@x"]
    assert again["claim"].tolist() == expected
    # a column of text stays text where every cell looks like a number
    assert again["target"].tolist() == expected
    # numbers below 0 are no text
    np.testing.assert_allclose(again["reported_effect"], table["reported_effect"], atol=1e-7)


def test_numbers_for_targets_of_claims_stay_text(tmp_path):
    write_table(tmp_path / "claims.tsv", pd.DataFrame({"claim": ["1"], "target": ["0.8"]}))
    write_table(tmp_path / "tolerance.tsv", pd.DataFrame({"seed": ["1"], "target": [0.8]}))
    assert read_table(tmp_path / "claims.tsv")["target"].tolist() == ["0.8"]
    assert read_table(tmp_path / "tolerance.tsv")["target"].tolist() == [0.8]
    assert {"target"} <= set(COLUMNS["claims"]) & set(COLUMNS["tolerance"])
