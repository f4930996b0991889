"""What hypothesis makes of sound inputs: odd bytes, odd cells, odd keys."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from datetime import timedelta
from pathlib import Path
from typing import Any

from hypothesis import HealthCheck, settings
from hypothesis import strategies as st

from seedaudit.errors import SeedAuditError

LEAST_SHARE = 0.05
"""Of the cases of a kind, at least this many must be refused, and as many let through: inputs that
all fail at the first gate test nothing behind it."""


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


class Tally:
    """Runs steps and counts what they do: give something, or refuse in readable words."""

    def __init__(self) -> None:
        self.passed = self.refused = 0

    def __call__(self, step: Callable[..., Any], *arguments: Any) -> Any:
        """What the step gives, or None; any exception that is none of ours comes through."""
        try:
            given = step(*arguments)
        except SeedAuditError as error:
            self.refused += 1
            for problem in error.problems:
                check_readable(problem.where, problem.found, str(problem))
            return None
        self.passed += 1
        return given

    def check(self, cases: int) -> None:
        """Enough cases, of both kinds."""
        total = self.passed + self.refused
        assert total >= cases
        assert min(self.passed, self.refused) >= LEAST_SHARE * total, (self.passed, self.refused)


def check_readable(where: str, found: str, whole: str) -> None:
    assert where
    assert found
    assert len(whole) < 20_000
    for word in ("Traceback", "<class", " object at 0x", "line 1, in"):
        assert word not in whole


Edit = tuple[str, int, bytes]


def edits(reach: int, most: int = 3) -> st.SearchStrategy[list[Edit]]:
    """Where (within the first bytes) and how a file is changed: put over, put in, cut."""
    kind = st.sampled_from(["over"] * 8 + ["in", "out"])
    content = st.one_of(
        st.binary(min_size=1, max_size=4),
        st.sampled_from([b"\0" * 4, b"\xff" * 4, b"\x7f\xff", b"\x80\0", b"\0\0\x80\x7f"]),
    )
    return st.lists(st.tuples(kind, st.integers(0, reach - 1), content), min_size=1, max_size=most)


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
CELLS = st.one_of(st.sampled_from(ODD_CELLS), st.floats(width=32).map(repr), st.text(max_size=6))
JUNK = st.one_of(
    *[st.just(b"")] * 6,
    st.binary(max_size=4),
    st.sampled_from([b"\t", b"\n", b'"', b"\0", b"\r", b"\xff", b"\n\n\t", b" "]),
)


@st.composite
def tables(draw: st.DrawFn, sound: Mapping[str, Callable[[int], str]], rows: int) -> bytes:
    """A table of sound columns in any order, with a few of them, of the cells or rows spoilt."""
    names = draw(st.permutations(list(sound)))
    cells = [[sound[name](row) for name in names] for row in range(rows)]
    head = list(names)
    for _ in range(draw(st.integers(0, 2))):
        row = draw(st.integers(0, rows - 1))
        cells[row][draw(st.integers(0, len(head) - 1))] = draw(CELLS)
    if draw(st.integers(0, 5)) == 0:
        head[draw(st.integers(0, len(head) - 1))] = draw(st.one_of(CELLS, st.sampled_from(names)))
    if draw(st.integers(0, 5)) == 0:
        cells.pop(draw(st.integers(0, rows - 1)))
    text = "\n".join("\t".join(row) for row in [head, *cells])
    content, junk = text.encode("utf-8", "replace"), draw(JUNK)
    at = draw(st.integers(0, len(content)))
    return content[:at] + junk + content[at:]


def put(path: Path, content: bytes) -> Path:
    path.write_bytes(content)
    return path


WORDS = [
    "1", "0", "-1", "5", "0.5", "1e400", "9" * 30, "0x1F", "nan", "inf", "true", "false",
    "1979-05-27", '""', '"/"', '".."', '"~"', '"mask.nii.gz"', '"fdr"', '"normal"', '"shell"',
    '"\\u0000"', "[]", "[1, [2]]", "[1.0, 2.0]", '["a"]', "{}", "{a = 1}", '"' + "a" * 300 + '"',
    "{ registration = 2.0 }", "'''", "[", "=", "", '"~ arm"', "-0.0", "1e-300", "[3.0, 1.0, nan]",
]  # fmt: skip
LINES = [
    "[data]",
    "[[seed]]",
    "[seed]",
    "",
    "x",
    "at = [0, 0, 0]",
    "[threshold.level]",
    "#",
    "\ufeff",
]


@st.composite
def study_texts(draw: st.DrawFn, text: str) -> bytes:
    """A study file with values, keys or lines changed, and rarely a byte."""
    lines = text.splitlines()
    for _ in range(draw(st.integers(1, 3))):
        at = draw(st.integers(0, len(lines) - 1))
        key, equals, value = lines[at].partition("=")
        match draw(st.sampled_from(["value", "value", "value", "key", "drop", "twice", "line"])):
            case "value":
                word = draw(st.one_of(st.sampled_from(WORDS), st.integers().map(str),
                                      st.floats().map(repr), CELLS.map(repr)))  # fmt: skip
                lines[at] = f"{key}= {word}" if equals else lines[at]
            case "key":
                lines[at] = f"{draw(CELLS)} = {value}" if equals else lines[at]
            case "drop":
                lines.pop(at)
            case "twice":
                lines.insert(at, lines[at])
            case "line":
                lines.insert(at, draw(st.sampled_from(LINES)))
    content, junk = "\n".join(lines).encode("utf-8", "replace"), draw(JUNK)
    at = draw(st.integers(0, len(content)))
    return content[:at] + junk + content[at:]


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


def expressions(names: list[str]) -> st.SearchStrategy[str]:
    """Sums of names with factors, most of them sound."""
    number = st.sampled_from(["2", "0.5", "1e3", "0", "1e308", "1e999", "1e-320"])
    return st.recursive(
        st.one_of(st.sampled_from(names), st.sampled_from(names), number, CELLS),
        lambda part: st.one_of(
            st.tuples(part, st.sampled_from([" + ", " - ", "-", "+"]), part).map("".join),
            st.tuples(number, st.sampled_from(["*", " / "]), part).map("".join),
            part.map("({})".format),
            part.map("-{}".format),
        ),
        max_leaves=6,
    )
