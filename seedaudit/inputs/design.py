"""The group model: design matrix, contrast and strata from a table and two short texts."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from itertools import product
from pathlib import Path

import numpy as np
import pandas as pd
from formulaic import Formula, ModelMatrix
from formulaic.errors import FormulaicError
from formulaic.parser.algos.tokenize import tokenize
from numpy.typing import NDArray
from scipy import linalg

from seedaudit.errors import DataError, Problem, StudyError, brief
from seedaudit.inputs.effect import parse_effect
from seedaudit.inputs.tables import nearest, read_table

_CALL = re.compile(r"(?P<function>C|center|scale)\(\s*(`(?P<quoted>[^`]+)`|(?P<plain>\w+))\s*\)")
_RANK_TOLERANCE = 1e-10


@dataclass(frozen=True)
class Design:
    """A full-rank design and the one contrast that is tested.

    Parameters
    ----------
    matrix : (n, p) float64
        One row per participant, in the order asked for.
    names : tuple of p str
    contrast : (p,) float64
        Weights of the coefficients.
    effect : str
        The contrast as the user wrote it.
    strata : (n,) int
        Equal for rows that share the levels of every factor of the model.
    terms : mapping of str to (p,) array
        The names that an effect may be written with, and the weights they stand for.
    """

    matrix: NDArray[np.float64]
    names: tuple[str, ...]
    contrast: NDArray[np.float64]
    effect: str
    strata: NDArray[np.int64]
    terms: Mapping[str, NDArray[np.float64]] = field(default_factory=dict)


def build_design(
    participants: Sequence[str],
    table_path: str | Path | None = None,
    model: str = "~ 1",
    effect: str | None = None,
) -> Design:
    """Build the design matrix and contrast of the group model.

    Parameters
    ----------
    participants : sequence of n str
        Rows, in order; a leading ``sub-`` does not matter.
    table_path : path, optional
        Tab-separated table with a column participant_id; needed when the model names columns.
    model : str
        Wilkinson notation with columns of the table, + - * : ( ) 0 1, C(x), center(x), scale(x).
        A column of numbers is a covariate, unless C(x) makes it a factor; text is a factor.
    effect : str, optional
        A sum of coefficients by column name, and of ``factor[level]``: the mean at that level,
        adjusted to equal weights of the levels of the other factors and to the mean of every
        covariate (least-squares mean; Searle, Speed & Milliken 1980 Am. Stat. 34:216). Where a
        coefficient has the same name, the adjusted mean is meant. May be left out when the model
        has one column.

    Raises
    ------
    StudyError
        For a model or effect that cannot be understood or estimated.
    DataError
        For a table that does not hold what the model needs.
    """
    factors, covariates = _model_columns(model)
    data = _read_columns(participants, table_path, model, factors, covariates)
    matrix = _model_matrix(model, data)
    values = np.ascontiguousarray(matrix.to_numpy(dtype=np.float64))
    names = tuple(str(name) for name in matrix.columns)
    _check_rank(model, values, names)
    terms = dict(zip(names, np.eye(len(names)), strict=True)) | _adjusted_means(matrix, data)
    if effect is None:
        if len(names) > 1:
            raise StudyError(
                Problem(
                    f"model {brief(model)}",
                    f"{len(names)} columns, but no effect says what is tested",
                    f"effect = a sum of {', '.join(terms)}",
                )
            )
        effect = names[0]
    return Design(values, names, parse_effect(effect, terms), effect, _strata(data), terms)


def _model_columns(model: str) -> tuple[set[str], set[str]]:
    """Columns inside C(...) and columns elsewhere, after refusing all but the safe notation.

    formulaic would evaluate calls and braces as Python, so they never reach it.
    """
    factors: set[str] = set()
    others: set[str] = set()
    refused = []
    try:
        for token in tokenize(model):
            text, kind = token.token, token.kind.value
            call = _CALL.fullmatch(text) if kind == "python" else None
            if kind == "name":
                others.add(text)
            elif call is not None:
                name = call["quoted"] or call["plain"]
                (factors if call["function"] == "C" else others).add(name)
            elif not (
                (kind == "operator" and set(text) <= set("~+-:*") and "**" not in text)
                or (kind == "value" and text in ("0", "1"))
                or (kind == "context" and text in "()")
            ):
                refused.append(text)
    except (FormulaicError, RecursionError) as error:
        raise _model_error(model, error) from error
    if "~" in model.strip().lstrip("~") or model.count("~") > 1:
        refused.append("~ after the first place")
    problems = [
        Problem(
            f"model {brief(model)}",
            f"{text!r} is not part of the notation",
            "columns of the table, + - * : ( ) 0 1, C(x), center(x), scale(x)",
        )
        for text in refused
    ]
    problems += [
        Problem(
            f"model {brief(model)}",
            f"{name!r} stands both as {name} and as C({name})",
            "one of them",
        )
        for name in sorted(factors & others)
    ]
    if problems:
        raise StudyError(*problems)
    return factors, others


def _read_columns(
    participants: Sequence[str],
    table_path: str | Path | None,
    model: str,
    factors: set[str],
    others: set[str],
) -> pd.DataFrame:
    """The columns of the model, one row per participant: categories or float64."""
    needed = sorted(factors | others)
    empty = pd.DataFrame(index=range(len(participants)))
    if table_path is None:
        if needed:
            found = f"it names {', '.join(needed)}, but there is no participants table"
            raise StudyError(Problem(f"model {brief(model)}", found, remedy="set [group] table"))
        return empty
    table = read_table(Path(table_path))
    if not needed:
        return empty
    where = str(table_path)
    if "participant_id" not in table.columns:
        remedy = nearest("participant_id", table.columns)
        raise DataError(Problem(where, "no column 'participant_id'", remedy=remedy))
    unknown = [name for name in needed if name not in table.columns]
    if unknown:
        raise StudyError(
            *(
                Problem(
                    f"model {brief(model)}",
                    f"{name!r} is no column of {where}",
                    remedy=nearest(name, table.columns),
                )
                for name in unknown
            )
        )
    rows, problems = _rows(participants, table["participant_id"], where)
    data = {
        name: _column(table[name].iloc[rows], name in factors, where, participants, problems)
        for name in needed
    }
    if problems:
        raise DataError(*problems)
    return pd.DataFrame(data)


def _rows(
    participants: Sequence[str], column: pd.Series, where: str
) -> tuple[list[int], list[Problem]]:
    """Table row of each participant, and what is wrong with the column of names."""
    ids = [str(name or "").removeprefix("sub-") for name in column]
    repeated = {key: str(name) for key, name in zip(ids, column, strict=True) if ids.count(key) > 1}
    problems = [
        Problem(
            where,
            f"participant {name!r} stands there {ids.count(key)} times",
            "one row for each",
            "delete the others",
        )
        for key, name in sorted(repeated.items())
    ]
    row_of = {name: row for row, name in enumerate(ids)}
    wanted = [name.removeprefix("sub-") for name in participants]
    problems += [
        Problem(
            where,
            f"no row for participant {full!r}",
            "a row for everyone who has a run",
            "add the row, or leave the runs out",
        )
        for full, name in zip(participants, wanted, strict=True)
        if name not in row_of
    ]
    return [row_of[name] for name in wanted if name in row_of], problems


def _column(
    cells: pd.Series, factor: bool, where: str, participants: Sequence[str], problems: list[Problem]
) -> NDArray[np.float64] | pd.Categorical:
    name = str(cells.name)
    missing = cells.isna().to_numpy()
    if missing.any():
        who = ", ".join(p for p, gone in zip(participants, missing, strict=False) if gone)
        found = f"column {name!r} has no value for {who}"
        remedy = "fill it, or leave these participants or this column out"
        problems.append(Problem(where, found, "a value for everyone", remedy))
    numbers = pd.to_numeric(cells, errors="coerce").to_numpy(np.float64)
    is_number = np.isfinite(numbers)
    if is_number.any() and not factor:
        if not (is_number | missing).all():
            odd = str(cells.iloc[int(np.flatnonzero(~is_number & ~missing)[0])])
            found = f"column {name!r} mixes numbers and text ({odd!r})"
            remedy = f"write n/a for missing numbers, or C({name}) for a factor"
            problems.append(Problem(where, found, "all numbers or all text", remedy))
        return numbers
    present = cells[~missing].unique().tolist()
    by_number = is_number[~missing].all()
    return pd.Categorical(cells, categories=sorted(present, key=float if by_number else str))


def _model_matrix(model: str, data: pd.DataFrame) -> ModelMatrix:
    try:
        # An empty context, so that no name of this module is seen; and no row dropped in silence.
        with np.errstate(divide="ignore", invalid="ignore"):
            matrix = Formula(model).get_model_matrix(data, context={}, na_action="ignore")
    except (FormulaicError, TypeError, ValueError, RecursionError) as error:
        raise _model_error(model, error) from error
    if not isinstance(matrix, ModelMatrix) or matrix.shape[1] == 0:
        raise StudyError(
            Problem(f"model {brief(model)}", "it has no columns", "~ 1, ~ arm + age, ...")
        )
    return matrix


def _model_error(model: str, error: Exception) -> StudyError:
    text = str(error).strip().splitlines()[0] if str(error).strip() else type(error).__name__
    text = "it is nested too deeply" if isinstance(error, RecursionError) else text
    return StudyError(
        Problem(f"model {brief(model)}", text, "Wilkinson notation, such as ~ arm + age")
    )


def _check_rank(model: str, values: NDArray[np.float64], names: tuple[str, ...]) -> None:
    n, p = values.shape
    where = f"model {brief(model)}"
    if not np.isfinite(values).all():
        bad = [
            name
            for name, column in zip(names, values.T, strict=True)
            if not np.isfinite(column).all()
        ]
        raise StudyError(Problem(where, f"{', '.join(bad)} is not finite (a constant column?)"))
    lengths = np.linalg.norm(values, axis=0)
    _, r, order = linalg.qr(
        values / np.where(lengths > 0, lengths, 1), mode="economic", pivoting=True
    )
    rank = int((np.abs(np.diag(r)) > _RANK_TOLERANCE).sum())
    # One participant alone has a score of its own and needs no residual degrees of freedom.
    if n <= p and (n, p) != (1, 1):
        found = f"{p} columns for {n} participants leave no residual degrees of freedom"
        raise StudyError(Problem(where, found, "more participants than columns", "a smaller model"))
    if rank < p:
        dependent = ", ".join(names[column] for column in sorted(order[rank:]))
        found = f"{dependent} follows from the other columns, so the effects cannot be told apart"
        raise StudyError(Problem(where, found, "a design of full rank", "leave a term out"))


def _adjusted_means(matrix: ModelMatrix, data: pd.DataFrame) -> dict[str, NDArray[np.float64]]:
    """Weights of the adjusted mean at every level of every factor, by ``factor[level]``."""
    levels = {
        name: list(data[name].cat.categories)
        for name in data.columns
        if isinstance(data[name].dtype, pd.CategoricalDtype)
    }
    if not levels:
        return {}
    cells = pd.DataFrame(list(product(*levels.values())), columns=list(levels))
    grid = pd.DataFrame(
        {
            name: pd.Categorical(cells[name], categories=levels[name])
            if name in levels
            else np.full(len(cells), data[name].mean())
            for name in data.columns
        }
    )
    rows = matrix.model_spec.get_model_matrix(grid, context={}).to_numpy(dtype=np.float64)
    spellings = {name: [name] for name in levels}
    for factor in matrix.model_spec.factors:
        if call := _CALL.fullmatch(factor.expr):
            spellings.get(call["quoted"] or call["plain"], []).append(factor.expr)
    return {
        f"{spelling}[{level}]": rows[(cells[name] == level).to_numpy()].mean(axis=0)
        for name, known in levels.items()
        for spelling in spellings[name]
        for level in known
    }


def _strata(data: pd.DataFrame) -> NDArray[np.int64]:
    codes = [column.cat.codes for _, column in data.select_dtypes("category").items()]
    if not codes:
        return np.zeros(len(data), np.int64)
    return (
        np.unique(np.column_stack(codes), axis=0, return_inverse=True)[1].ravel().astype(np.int64)
    )
