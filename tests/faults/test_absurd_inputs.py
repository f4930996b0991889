"""Absurd images through the whole command line: a named error or a reason, in little memory."""

from __future__ import annotations

import gzip
import struct
import tracemalloc
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import nibabel as nib
import numpy as np
import pandas as pd
import pytest

from tests.bad_inputs import DATA_FAULTS, HEADER_FAULTS
from tests.breaks import Break, bold, both, corrupt, filled, image, inflated, put, set_int16, stored
from tests.inputs.images import AFFINE, write_nifti
from tests.test_bad_inputs import BAD_PARTICIPANT, TOO_FEW

MOST_MEMORY = 60e6
"""Bytes that a command on the small study may take at its peak, and a hundred times less than the
headers below ask for."""

HUGE = (1000, 1000, 500, 100)  # x 2 bytes = 100 GB


def header_of(shape: tuple[int, ...], *, version: int = 1, **fields: object) -> bytes:
    """A kilobyte: the header of an int16 image of that shape, and a few zeros for its values."""
    kind = {1: nib.Nifti1Header, 2: nib.Nifti2Header}[version]
    header = kind()
    header.set_data_dtype(np.int16)
    header["dim"][: len(shape) + 1] = (len(shape), *shape)
    header.set_sform(AFFINE, 2)
    header["vox_offset"] = len(header.binaryblock) + 4
    header["magic"] = b"n+1" if version == 1 else header["magic"]
    for name, value in fields.items():
        header[name] = value
    return (header.binaryblock + bytes(1024))[:1024]


def put_file(name: int | str, content: bytes) -> Break:
    """Write these bytes in the place of an image, compressed where its name says so."""

    def breaks(folder: Path) -> None:
        path = bold(folder, name) if isinstance(name, int) else folder / name
        path.write_bytes(gzip.compress(content) if path.suffix == ".gz" else content)

    return breaks


def bomb(folder: Path) -> None:
    """Zeros that take a thousandth of their space when packed, and claim twice of it."""
    content = header_of((100, 100, 100, 20))
    bold(folder, 4).write_bytes(gzip.compress(content + bytes(20_000_000)))


def offset_of(value: float) -> Callable[[bytearray], None]:
    def change(content: bytearray) -> None:
        content[108:112] = struct.pack("<f", value)

    return change


def big_endian_values(content: bytearray) -> None:
    """Turn over the bytes of the values alone: the header says nothing of it."""
    header = nib.Nifti1Header(bytes(content[:348]), check=False)
    start, kind = int(header["vox_offset"]), header.get_data_dtype()
    values = np.frombuffer(bytes(content[start:]), kind)
    content[start:] = values.byteswap().tobytes()


@dataclass(frozen=True)
class Absurd:
    """One absurd image, and the words that must name it."""

    breaks: Break
    words: tuple[str, ...]


IN_HEADERS = {
    "100 GB in a kilobyte, plain": Absurd(
        put_file(3, header_of(HUGE)), ("asks for 100000000352 bytes", "1024 bytes of the file")),
    "100 GB in a kilobyte, gzip": Absurd(
        put_file(4, header_of(HUGE)), ("asks for 100000000352 bytes", "gzip file")),
    "NIfTI-2 of 2^60 volumes": Absurd(
        put_file(4, header_of((11, 14, 9, 2**60), version=2)), ("the header asks for",)),
    "NIfTI-2 beyond 64 bits": Absurd(
        put_file(4, header_of((2**40, 2**40, 2**40, 2**40), version=2)), ("the header asks for",)),
    "40 MB unpacked from 20 kB": Absurd(bomb, ("the header asks for 40000352 bytes",)),
    "values that start beyond the end": Absurd(
        inflated(1, offset_of(3e9)), ("the header asks for 3000",)),
    "values that start nowhere": Absurd(inflated(1, offset_of(np.nan)), ("byte nan (vox_offset)",)),
    "values that start at infinity": Absurd(inflated(1, offset_of(np.inf)), ("byte inf",)),
    "values inside the header": Absurd(inflated(1, offset_of(100.0)), ("byte 100 (vox_offset)",)),
    "negative number of axes": Absurd(inflated(1, set_int16(40, -4)), ("dim is [-4",)),
    "9 axes": Absurd(inflated(1, set_int16(40, 9)), ("dim is [9",)),
    "swapped number of axes": Absurd(inflated(1, set_int16(40, 1024)), ("dim is [1024",)),
    "unknown datatype": Absurd(inflated(1, set_int16(70, 999)), ("datatype 999",)),
    "a header cut short": Absurd(put_file(4, header_of(HUGE)[:200]), ("not a NIfTI",)),
    "a header alone": Absurd(put_file(3, header_of((11, 14, 9, 60))[:352]), ("asks for",)),
    "no magic": Absurd(inflated(1, lambda c: c.__setitem__(slice(344, 348), b"ni1\0")),
                       ("not a NIfTI file of one part",)),
    "affine not finite": Absurd(
        inflated(1, lambda c: c.__setitem__(slice(280, 284), struct.pack("<f", np.nan))),
        ("no usable affine",)),
    "affine flat": Absurd(inflated(1, lambda c: c.__setitem__(slice(280, 296), bytes(16))),
                          ("no usable affine",)),
}  # fmt: skip

IN_DATA = {
    "corrupt block": Absurd(stored(4, corrupt), ("corrupt",)),
    "NaN volumes": Absurd(image(4, filled(np.nan, volumes=slice(10, 20))), ("finite values",)),
    "infinite volumes": Absurd(image(4, filled(np.inf, volumes=slice(3, 4))), ("finite values",)),
    "all constant": Absurd(image(4, filled(5.0)), ("finite values that vary",)),
    "values of the other byte order": Absurd(
        both(image(4), inflated(4, big_endian_values)), ("finite values",)),
}  # fmt: skip

OTHER_IMAGES = {
    "mask of 100 GB": Absurd(put_file("mask.nii.gz", header_of(HUGE[:3])), ("the header asks",)),
    "regions of 100 GB": Absurd(
        put_file("networks_dseg.nii.gz", header_of(HUGE[:3])), ("the header asks",)),
    "grey matter of 100 GB": Absurd(
        both(put_file("grey.nii.gz", header_of(HUGE[:3])),
             put("placements", 'inside = "grey.nii.gz"')), ("grey.nii.gz", "the header asks")),
    "declared grid of 100 GB": Absurd(
        both(put_file("grey.nii.gz", header_of(HUGE[:3])), put("data", 'grid = "grey.nii.gz"')),
        ("grey.nii.gz", "the header asks")),
    "mask cut short": Absurd(
        lambda f: (f / "mask.nii.gz").write_bytes((f / "mask.nii.gz").read_bytes()[:-40]),
        ("mask.nii.gz", "ends early")),
}  # fmt: skip

SET_ASIDE = put("data", 'on_bad_run = "set-aside"')


@pytest.fixture
def frugal():
    """Hold what happens in the test to a peak of memory."""
    tracemalloc.start()
    yield
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert peak < MOST_MEMORY


def by_name(table: dict[str, Absurd]) -> dict[str, object]:
    return {"argvalues": table.values(), "ids": [name.replace(" ", "_") for name in table]}


@pytest.mark.parametrize("absurd", **by_name(IN_HEADERS | OTHER_IMAGES))
def test_found_in_headers(absurd, try_it, frugal):
    outcome = try_it("check", absurd.breaks)
    assert outcome.code == 3, outcome.err
    assert outcome.err.count("\n  - ") == 1, outcome.err
    assert not [word for word in absurd.words if word not in outcome.err], outcome.err


@pytest.mark.parametrize("absurd", **by_name(IN_DATA))
def test_stops_the_run(absurd, try_it):
    outcome = try_it("run", absurd.breaks)
    assert outcome.code == 3, outcome.err
    assert not [word for word in absurd.words if word not in outcome.err], outcome.err
    assert "sub-04" in outcome.err
    assert not (outcome.folder / "audit").exists()


@pytest.mark.parametrize("absurd", **by_name(IN_DATA | {
    name: IN_HEADERS[name] for name in ("100 GB in a kilobyte, gzip", "unknown datatype")
}))  # fmt: skip
def test_is_set_aside(absurd, try_it):
    outcome = try_it("run", both(absurd.breaks, SET_ASIDE))
    assert outcome.code == 4, outcome.err
    table = pd.read_csv(outcome.folder / "audit" / "tables" / "participants.tsv", sep="\t")
    (row,) = table[~table["used"]].to_dict("records")
    # the limit is no part of a reason
    assert absurd.words[0] in row["reason"]
    assert row["reason"].startswith(row["participant_id"])


def test_a_whole_file_of_the_other_byte_order_is_read(folder, try_it):
    """NIfTI allows either order; the header tells which, and the numbers are the same."""
    path = bold(folder, 4)
    run = nib.Nifti1Image.from_filename(path)
    values = np.asarray(run.dataobj)
    header = run.header.as_byteswapped()
    nib.save(nib.Nifti1Image(values, run.affine, header), path)
    assert path.read_bytes() != b""
    assert try_it("check").code == 0


def test_how_many_bad_inputs_there_are():
    """At least 60, each with its exit code and its words."""
    tables = (HEADER_FAULTS, DATA_FAULTS, BAD_PARTICIPANT, TOO_FEW,
              IN_HEADERS, IN_DATA, OTHER_IMAGES)  # fmt: skip
    assert sum(map(len, tables)) >= 120
    assert all(fault.words for fault in (*HEADER_FAULTS, *DATA_FAULTS))
    assert {fault.code for fault in HEADER_FAULTS} == {2, 3}


def test_the_fixture_writes_what_nibabel_reads(tmp_path):
    """The byte-level writer against nibabel, so that the absurd fields are the fault."""
    path = write_nifti(tmp_path / "x.nii", np.zeros((4, 3, 2, 5)), "<i2")
    assert nib.Nifti1Image.from_filename(path).shape == (4, 3, 2, 5)
    assert len(header_of(HUGE)) == 1024
    assert nib.Nifti1Header(header_of(HUGE)[:348]).get_data_shape() == HUGE
