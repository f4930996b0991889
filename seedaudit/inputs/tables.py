"""Tab-separated tables as text: what is a number is for the reader of a column to decide."""

from __future__ import annotations

from collections.abc import Iterable
from difflib import get_close_matches
from pathlib import Path

import pandas as pd

from seedaudit.errors import DataError, Problem

_MISSING = ("n/a", "N/A", "NA", "nan", "NaN", "")
_PARSER = "Error tokenizing data. C error: "  # what pandas puts before its reason


def read_table(path: Path) -> pd.DataFrame:
    """Read a tab-separated table with a header row; every cell is text, missing ones are None.

    Parameters
    ----------
    path : Path
        UTF-8; `n/a` (the BIDS word) and its usual variants mean missing.

    Raises
    ------
    DataError
        When the file is missing, is no table, or repeats a column name.
    """
    try:
        cells = pd.read_csv(
            path,
            sep="\t",
            header=None,
            dtype=str,
            keep_default_na=False,
            encoding="utf-8-sig",
            skip_blank_lines=True,
        )
    except FileNotFoundError:
        raise DataError(Problem(str(path), "no such file")) from None
    except (OSError, ValueError) as error:  # pandas' own errors are ValueErrors
        reason = getattr(error, "strerror", None) or " ".join(str(error).split())
        found = f"cannot be read ({reason.removeprefix(_PARSER)})"
        allowed = "a tab-separated table in UTF-8, every row as long as the first"
        raise DataError(Problem(str(path), found, allowed, "mend the table")) from error
    cells = cells.fillna("").map(str.strip)
    names = cells.iloc[0].tolist()
    repeated = sorted({name for name in names if names.count(name) > 1})
    if repeated:
        found = f"column {', '.join(map(repr, repeated))} stands there twice"
        raise DataError(Problem(str(path), found, "unique column names"))
    table = cells.iloc[1:].reset_index(drop=True).set_axis(names, axis=1).astype(object)
    return table.mask(table.isin(_MISSING), None)


def nearest(name: str, known: Iterable[str], count: int = 3) -> str:
    """A remedy that names what may have been meant."""
    known = list(known)
    close = get_close_matches(name, known, n=count, cutoff=0.5)
    if close:
        return f"did you mean {' or '.join(close)}?"
    return f"there are: {', '.join(known[:20])}{', ...' if len(known) > 20 else ''}"
