"""Tables as text: tabs, `n/a` for what is missing, and nothing that a spreadsheet would run."""

from __future__ import annotations

from io import StringIO
from pathlib import Path

import numpy as np
import pandas as pd

from seedaudit.dictionary import ALL_COLUMNS, COUNT
from seedaudit.guards import inert, live
from seedaudit.results import SIGNIFICANT_DIGITS

WORDS = (
    "seed",
    "kind",
    "flags",
    "threshold",
    "region",
    "state",
    "rule",
    "participant_id",
    "reason",
    "measure",
    "direction",
    "claim",
    "target",
    "verdict",
    "note",
    "source",
    "seed_a",
    "seed_b",
)
"""Columns that hold text even where every cell looks like a number or is empty."""

NUMBERS = (("tolerance", "target"),)
"""Tables in which a column of such a name holds numbers after all."""

NAMED = ("placement", "placement_a", "placement_b", "index")
"""Columns of whole numbers that count nothing."""

_VERDICTS = {True: "true", False: "false", None: "n/a"}
"""Whether two seeds are interchangeable: the one column that may say that it cannot be told."""


def write_table(path: Path | StringIO, table: pd.DataFrame) -> None:
    """Write a BIDS table: tabs, `n/a` for missing, true and false in small letters.

    Text that a spreadsheet would run as a formula gets an apostrophe in front.
    """
    shown = table.copy()
    for key in shown.columns:
        if shown[key].dtype == bool:
            shown[key] = np.where(shown[key], "true", "false")
        elif key == "interchangeable":
            shown[key] = [_VERDICTS[cell] for cell in shown[key]]
        elif not pd.api.types.is_numeric_dtype(shown[key]):
            shown[key] = [inert(" ".join(str(cell).split())) for cell in shown[key]]
            shown[key] = shown[key].replace("", "n/a")
    shown.to_csv(
        path,
        sep="\t",
        index=False,
        encoding="utf-8",
        errors="backslashreplace",
        na_rep="n/a",
        float_format=f"%.{SIGNIFICANT_DIGITS}g",
        lineterminator="\n",
    )


def read_table(path: Path) -> pd.DataFrame:
    """Read a table as `write_table` wrote it."""
    words = [key for key in WORDS if (path.stem, key) not in NUMBERS]
    table = pd.read_csv(
        path,
        sep="\t",
        na_values=["n/a"],
        keep_default_na=False,
        dtype={key: str for key in words},
    )
    if not isinstance(table.index, pd.RangeIndex):  # what pandas makes of rows that are too long
        raise ValueError(f"rows of {path.name} are longer than its first")
    for key in table.columns:
        if key in words:
            table[key] = table[key].fillna("n/a" if key == "state" else "").map(live)
        elif key == "used":
            table[key] = table[key].astype(bool)
        elif table[key].dtype.kind == "i" and not _whole(path.stem, key):
            table[key] = table[key].astype(np.float64)  # all of them happen to be whole
        elif key == "interchangeable":
            told = {text: verdict for verdict, text in _VERDICTS.items()}
            cells = [told.get(str(cell).lower()) for cell in table[key]]
            table[key] = pd.Series(cells, dtype=object)
    return table


def _whole(table: str, key: str) -> bool:
    """Whether a column holds whole numbers: counts, and numbers that stand for something."""
    columns = ALL_COLUMNS.get(table, {})
    return key not in columns or key in NAMED or columns[key][1] == COUNT
