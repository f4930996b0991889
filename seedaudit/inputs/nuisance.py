"""The nuisance space of a run: what one orthogonal projection removes from its series."""

from __future__ import annotations

import re
from collections.abc import Sequence
from fnmatch import fnmatchcase
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import linalg

from seedaudit.errors import DataError, Problem
from seedaudit.inputs.tables import nearest, read_table

_DIFFERENCE = re.compile(r"deriv|diff|framewise_displacement|dvars|rmsd|(^|_)(fd|dt)(_|$)", re.I)
_LEADING_ROWS = 2
_RANK_TOLERANCE = 1e-10


def read_confounds(
    path: str | Path, patterns: Sequence[str], n_volumes: int
) -> tuple[NDArray[np.float64], tuple[str, ...]]:
    """Read the confound columns that match any of the patterns.

    Missing values in the first two rows count as 0 in columns that hold differences between
    volumes, by their name; a difference has no value before there are two volumes.

    Parameters
    ----------
    path : path of a tab-separated table with one row per volume
    patterns : sequence of str
        Names or globs (`trans_*`).
    n_volumes : int
        Volumes of the run.

    Returns
    -------
    values : (T, k) float64
    names : tuple of k str
        In table order, each once.

    Raises
    ------
    DataError
        With every problem: a pattern that matches nothing, a wrong number of rows, a value that
        is missing or no number.
    """
    table = _confounds_table(Path(path), n_volumes)
    problems = [
        Problem(
            str(path),
            f"no column matches {pattern!r}",
            "names or globs of columns",
            nearest(pattern.strip("*?"), table.columns),
        )
        for pattern in patterns
        if not any(fnmatchcase(name, pattern) for name in table.columns)
    ]
    names = [n for n in table.columns if any(fnmatchcase(n, p) for p in patterns)]
    values = np.empty((n_volumes, len(names)))
    for column, name in enumerate(names):
        values[:, column] = _numbers(table[name], path, problems)
    if problems:
        raise DataError(*problems)
    return values, tuple(names)


def censored_volumes(
    path: str | Path, column: str, above: float, before: int, after: int, n_volumes: int
) -> NDArray[np.bool_]:
    """Mark the volumes whose value exceeds a limit, and their neighbours in time.

    Parameters
    ----------
    path : path of the confounds table
    column : str
        Column to compare; missing values are allowed as in `read_confounds`.
    above : float
        Limit, in the unit of the column; a volume is marked when its value is larger.
    before, after : int
        How many volumes before and after a marked one are marked too.
    n_volumes : int

    Returns
    -------
    (T,) bool

    Raises
    ------
    DataError
        When the column is absent, or as `read_confounds`.
    """
    table = _confounds_table(Path(path), n_volumes)
    if column not in table.columns:
        remedy = nearest(column, table.columns)
        raise DataError(Problem(str(path), f"no column {column!r}", remedy=remedy))
    problems: list[Problem] = []
    over = _numbers(table[column], path, problems) > above
    if problems:
        raise DataError(*problems)
    censored = np.zeros(n_volumes, bool)
    for t in np.flatnonzero(over):
        censored[max(0, t - before) : t + after + 1] = True
    return censored


def nuisance_basis(
    n_volumes: int,
    *,
    drift: int = 0,
    band: tuple[float, float] | None = None,
    repetition_time: float | None = None,
    confounds: NDArray[np.floating] | None = None,
    censored: NDArray[np.bool_] | None = None,
) -> NDArray[np.float64]:
    """Orthonormal basis of everything that is removed from a run at once.

    One simultaneous regression does not bring back what an earlier step removed (Hallquist et al.
    2013 NeuroImage 82:208; Lindquist et al. 2019 Hum. Brain Mapp. 40:2358). The residual degrees
    of freedom of a run are n_volumes minus the number of columns.

    Parameters
    ----------
    n_volumes : int
        T.
    drift : int
        Order of the polynomial drift (Legendre), 0 for the intercept alone.
    band : (low, high), optional
        Pass band in Hz, both ends included. The cosine k = 1 ... T - 1 (DCT-II) has the frequency
        k / (2 T TR); those outside the band are removed.
    repetition_time : float, optional
        Seconds; needed with a band.
    confounds : (T, k) array, optional
        Finite values.
    censored : (T,) bool, optional
        Volumes to leave out: each gets a column of its own.

    Returns
    -------
    (T, q) float64
        q is the rank of all columns together; the constant is always in their span.

    Raises
    ------
    DataError
        When the confounds or censored volumes have another length, or a band has no TR.
    """
    time = np.linspace(-1, 1, n_volumes)
    parts = [np.polynomial.legendre.legvander(time, drift)]
    cosines = np.empty((n_volumes, 0))
    if band is not None:
        cosines = _cosines_outside(band, n_volumes, repetition_time)
    if confounds is not None:
        _check_rows("confounds", len(confounds), n_volumes)
        # Centring first: beside a large mean the rank test would not see a small variation.
        parts.append(np.asarray(confounds, np.float64) - np.mean(confounds, axis=0))
        parts[-1][:, np.ptp(confounds, axis=0) == 0] = 0
    if censored is not None:
        _check_rows("censored volumes", len(censored), n_volumes)
        parts.append(np.eye(n_volumes)[:, censored])
    return _orthonormal(cosines, np.hstack(parts))


def _cosines_outside(
    band: tuple[float, float], n_volumes: int, repetition_time: float | None
) -> NDArray[np.float64]:
    low, high = band
    if repetition_time is None or not repetition_time > 0:
        raise DataError(
            Problem(
                "repetition time",
                "the header holds none",
                f"a time in seconds, needed for the band {low:g} to {high:g} Hz",
                "set repetition_time in the study file",
            )
        )
    k = np.arange(1, n_volumes)
    frequency = k / (2 * n_volumes * repetition_time)
    slack = 1e-9 * frequency  # so that rounding does not decide about a band edge
    removed = k[(frequency < low - slack) | (frequency > high + slack)]
    angle = np.pi * np.outer(2 * np.arange(n_volumes) + 1, removed) / (2 * n_volumes)
    return np.asarray(np.sqrt(2 / n_volumes) * np.cos(angle))


def _orthonormal(cosines: NDArray[np.float64], columns: NDArray[np.float64]) -> NDArray[np.float64]:
    """Orthonormal basis of the span, by QR with column pivoting on columns of unit length.

    The cosines are orthonormal as they are; only what the columns add to them is decomposed.
    """
    lengths = np.linalg.norm(columns, axis=0)
    added = columns[:, lengths > 0] / lengths[lengths > 0]
    q, r, _ = linalg.qr(_beyond(cosines, added), mode="economic", pivoting=True)
    rank = int((np.abs(np.diag(r)) > _RANK_TOLERANCE).sum())
    # Once more: unit length magnifies what rounding left of the cosines in a small remainder.
    q, _ = linalg.qr(_beyond(cosines, q[:, :rank]), mode="economic")
    return np.hstack([cosines, q])


def _beyond(cosines: NDArray[np.float64], columns: NDArray[np.float64]) -> NDArray[np.float64]:
    return columns - cosines @ (cosines.T @ columns)


def _confounds_table(path: Path, n_volumes: int) -> pd.DataFrame:
    table = read_table(path)
    if len(table) != n_volumes:
        found = f"{len(table)} rows, but the run has {n_volumes} volumes"
        allowed = "one row per volume below the header row"
        remedy = "take the table of this very run; were volumes dropped from one of the two?"
        raise DataError(Problem(str(path), found, allowed, remedy))
    return table


def _numbers(cells: pd.Series, path: str | Path, problems: list[Problem]) -> NDArray[np.float64]:
    """The column as numbers, its leading gaps as 0 where they are allowed."""
    name = str(cells.name)
    values = pd.to_numeric(cells, errors="coerce").to_numpy(np.float64, copy=True)
    missing = cells.isna().to_numpy()
    if _DIFFERENCE.search(name):
        leading = np.logical_and.accumulate(missing)
        leading[_LEADING_ROWS:] = False
        values[leading] = 0
    bad = np.flatnonzero(~np.isfinite(values))
    if bad.size:
        row = int(bad[0])
        found = "n/a" if missing[row] else repr(cells.iloc[row])
        more = f" (and in {bad.size - 1} more rows)" if bad.size > 1 else ""
        problems.append(
            Problem(
                str(path),
                f"column {name!r}, row {row + 1}: {found}{more}",
                f"numbers; n/a only in the first {_LEADING_ROWS} rows of differences",
                "leave the column out, or mend the table",
            )
        )
    return values


def _check_rows(what: str, rows: int, n_volumes: int) -> None:
    if rows != n_volumes:
        raise DataError(Problem(what, f"{rows} rows", f"{n_volumes}, the number of volumes"))


def column_mean(path: str | Path, column: str, n_volumes: int) -> float:
    """Mean of one confound column over the volumes that have a value; NaN without the column.

    Parameters
    ----------
    path : path of the confounds table
    column : str
    n_volumes : int

    Raises
    ------
    DataError
        When the table has another number of rows.
    """
    table = _confounds_table(Path(path), n_volumes)
    if column not in table.columns:
        return float("nan")
    values = pd.to_numeric(table[column], errors="coerce").to_numpy(np.float64)
    return float(np.nanmean(values)) if np.isfinite(values).any() else float("nan")
