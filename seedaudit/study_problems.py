"""What the validator finds wrong with a study file, in the words of a person who writes one."""

from __future__ import annotations

import difflib
import json
import re
from collections.abc import Iterator, Sequence
from typing import Any, get_args

from pydantic import BaseModel, ValidationError

from seedaudit.errors import Problem

_TYPES = {
    "string_type": "text in quotes",
    "float_type": "a number",
    "finite_number": "a finite number",
    "int_type": "a whole number",
    "int_from_float": "a whole number",
    "bool_type": "true or false",
    "tuple_type": "a list in square brackets",
    "dict_type": "a section of keys and values",
    "model_type": "a section of keys and values",
    "string_pattern_mismatch": "letters, digits, - and _, with a letter or digit first",
}
"""What is asked for where a type of error of the validator says it is not there."""

RUNS = ("data", "runs")
"""The one key that may be text or a list, so that the validator complains once for each."""


def problems_of(error: ValidationError, root: type[BaseModel]) -> list[Problem]:
    """The problems of a study file, each cause once.

    Parameters
    ----------
    error : ValidationError
        Of the validation of a `root`.
    root : model
        The study file as a whole; the nearest valid keys are looked up in it.
    """
    return [_problem(detail, root) for detail in _causes(error.errors())]


def _causes(details: Sequence[Any]) -> Iterator[Any]:
    """Leave out what only repeats another cause.

    A container is too short because its items are wrong, a list with fixed places lacks several.
    """
    places = [detail["loc"] for detail in details]
    for number, detail in enumerate(details):
        place, kind = detail["loc"], detail["type"]
        inner = any(len(other) > len(place) and other[: len(place)] == place for other in places)
        next_place = (*place[:-1], place[-1] + 1) if isinstance(place[-1], int) else None
        repeats = (
            (kind == "too_short" and inner)
            or (kind == "missing" and next_place in places)
            or (place[:2] == RUNS and any(other[:2] == RUNS for other in places[:number]))
        )
        if not repeats:
            yield detail


def _problem(detail: Any, root: type[BaseModel]) -> Problem:
    """One error of the validator in the words of this program."""
    location, kind, context = detail["loc"], detail["type"], detail.get("ctx", {})
    if location[:2] == RUNS:
        kind, location = "runs", RUNS
    elif kind == "missing" and isinstance(location[-1], int):
        kind, location, context = "too_long", location[:-1], {"max_length": location[-1] + 1}
    where = (
        "".join(
            f"[{part + 1}]" if isinstance(part, int) else f".{part}" for part in location
        ).lstrip(".")
        or "study"
    )
    found = f"is {_shown(detail['input'])}"
    match kind:
        case "extra_forbidden":
            keys = _keys_of(root, location[:-1])
            near = difflib.get_close_matches(str(location[-1]), keys, n=1)
            remedy = f"did you mean `{near[0]}`?" if near else "remove it"
            return Problem(where, "is no key of the study file", ", ".join(keys), remedy)
        case "missing":
            return Problem(where, "is missing", "this key is needed", "add it")
        case "value_error":
            # a section is no value to show: its keys do not go together
            found = found if "." in where else "does not fit together"
            return Problem(where, found, str(context["error"]))
    return Problem(where, found, *_rule(kind, where, detail["input"], context, detail["msg"]))


def _rule(kind: str, where: str, value: Any, context: Any, message: str) -> tuple[str, str]:
    """What is allowed in the place of a value, and a remedy."""
    match kind:
        case "runs":
            return "the name of a table (.tsv), a file pattern, or a list of files", ""
        case "literal_error":
            words = re.findall(r"'([\w-]+)'", context["expected"])
            near = difflib.get_close_matches(str(value).lower(), words, n=1)
            return context["expected"], f"did you mean '{near[0]}'?" if near else ""
        case "too_long":
            return f"{context['max_length']} values", ""
        case "tuple_type" | "too_short" if where == "seed":
            return "at least one section [[seed]]", "write [[seed]], in double brackets"
        case _ if kind in _TYPES:
            quoted = "number" in _TYPES[kind] and _reads_as_number(value)
            return _TYPES[kind], "write it without quotes" if quoted else ""
    return message.replace("Input should be ", ""), ""


def _reads_as_number(value: Any) -> bool:
    try:
        float(value)
    except (TypeError, ValueError):
        return False
    return isinstance(value, str)


def _shown(value: Any) -> str:
    """A value as it may stand in a study file, cut where it is long."""
    text = json.dumps(value, ensure_ascii=False, default=str)
    return text if len(text) <= 60 else text[:57] + "..."


def _keys_of(root: type[BaseModel], location: tuple[int | str, ...]) -> list[str]:
    """The valid keys at a place of the study file."""
    model = root
    for part in location:
        if isinstance(part, int):
            continue
        annotation = model.model_fields[part].annotation
        inner = [annotation, *get_args(annotation)]
        model = next(
            (kind for kind in inner if isinstance(kind, type) and issubclass(kind, BaseModel)),
            model,
        )
    return list(model.model_fields)
