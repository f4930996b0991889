"""What hypothesis makes of the inputs: bytes changed, cells that are odd, keys in wrong places."""

from __future__ import annotations

from collections.abc import Callable
from datetime import timedelta
from pathlib import Path
from typing import Any

from hypothesis import HealthCheck, settings
from hypothesis import strategies as st


def fuzz(cases: int) -> Callable[..., Any]:
    """So many cases, always the same; each must end within seconds on a busy machine."""
    return settings(
        max_examples=cases,
        derandomize=True,
        database=None,
        deadline=timedelta(seconds=6),
        suppress_health_check=list(HealthCheck),
        print_blob=False,
    )


Edit = tuple[str, int, bytes]


def edits(reach: int) -> st.SearchStrategy[list[Edit]]:
    """Where (within the first bytes) and how a file is changed: put over, put in, cut."""
    kind = st.sampled_from(["over", "over", "over", "in", "out"])
    content = st.one_of(
        st.binary(min_size=1, max_size=4),
        st.sampled_from([b"\0" * 4, b"\xff" * 4, b"\x7f\xff", b"\x80\0", b"\0\0\x80\x7f"]),
    )
    return st.lists(st.tuples(kind, st.integers(0, reach - 1), content), min_size=1, max_size=4)


def edited(content: bytes, changes: list[Edit]) -> bytes:
    for kind, at, new in changes:
        rest = {"over": at + len(new), "in": at, "out": at + len(new)}[kind]
        content = content[:at] + (b"" if kind == "out" else new) + content[rest:]
    return content


ODD_CELLS = [
    "", "n/a", "NaN", "nan", "inf", "-inf", "1e999", "-1e400", "0x10", "1_000", "true", "=1+1",
    '"', '""', '"a', "'", "\ufeff", "\x00", "\x1b[2J", "a" * 300, "\u0661", "1,5", " 1 ", "1e5",
    "-0", "sub-01", "/", "..", "~", "~nobody/x", ".", "*", "[", "ü", "\u202e", "1" * 400,
]  # fmt: skip
CELLS = st.one_of(
    st.sampled_from(ODD_CELLS),
    st.floats(width=32).map(repr),
    st.text(max_size=6),
)


def write_cells(path: Path, rows: list[list[str]], junk: bytes, at: int) -> Path:
    content = "\n".join("\t".join(row) for row in rows).encode("utf-8", "replace")
    at = at % (len(content) + 1)
    path.write_bytes(content[:at] + junk + content[at:])
    return path


JUNK = st.one_of(
    st.just(b""),
    st.just(b""),
    st.binary(max_size=5),
    st.sampled_from([b"\t", b"\n", b'"', b"\0", b"\r", b"\xff", b"\n\n\t"]),
)


@st.composite
def tables(draw, names: list[str], rows: int) -> list[list[str]]:
    """Rows below a header of known and unknown names, most cells sound."""
    head = draw(st.lists(st.one_of(st.sampled_from(names), CELLS), min_size=1, max_size=6))
    sound = [[f"{row}.{column}" for column in range(len(head))] for row in range(rows)]
    for _ in range(draw(st.integers(0, 3))):
        row = draw(st.integers(0, rows - 1))
        sound[row][draw(st.integers(0, len(head) - 1))] = draw(CELLS)
    keep = draw(st.integers(max(0, rows - 1), rows)) if draw(st.booleans()) else rows
    return [head, *sound[:keep]]


SNIPPETS = st.sampled_from([
    b"[", b"]", b"[[", b"=", b'"', b"'''", b"\n", b"{", b"}", b"#", b"nan", b"inf", b"-", b"1e400",
    b"9" * 30, b"0x1F", b"true", b"1979-05-27", b"[[seed]]\n", b"[data]\n", b"\xff", b"\0", b".",
    b'"/"', b"''", b"[1, [2]]", b"{a = 1}", b"~", b"\\u0000", b"\xef\xbb\xbf",
])  # fmt: skip


KEYS = st.one_of(st.sampled_from([
    "data", "seed", "placements", "group", "threshold", "cleaning", "consensus", "claims", "runs",
    "at", "radius", "name", "mask", "model", "rule", "level", "within", "draw", "count", "select",
]), st.text(max_size=4))  # fmt: skip
VALUES = st.recursive(
    st.one_of(st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=6),
              st.sampled_from(["fdr", "ball", "normal", "runs.tsv", "/", "..", "\0", "a" * 300])),
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(KEYS, inner, max_size=3)),
    max_leaves=6,
)  # fmt: skip
