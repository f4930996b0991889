"""An effect written as a sum of named terms, read into contrast weights; nothing is evaluated."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import NoReturn

import numpy as np
from numpy.typing import NDArray

from seedaudit.errors import Problem, StudyError, brief
from seedaudit.inputs.tables import nearest

_NUMBER = re.compile(r"\d+(\.\d*)?([eE][+-]?\d+)?|\.\d+([eE][+-]?\d+)?")
_WORD = re.compile(r"[^\s+\-*/()\[\]]+(\([^()]*\))?(\[[^\]]*\])?(:[^\s+\-*/()\[\]]+(\[[^\]]*\])?)*")
_GOES_ON = re.compile(r"[\w.:\[(]")


def parse_effect(text: str, terms: Mapping[str, NDArray[np.float64]]) -> NDArray[np.float64]:
    """Read a linear combination of terms, such as ``arm[a] - 0.5*(arm[b] + arm[c])``.

    Parameters
    ----------
    text : str
        Names joined by + - * / and parentheses with numbers.
    terms : mapping of str to (p,) array
        Weights that each name stands for.

    Returns
    -------
    (p,) float64

    Raises
    ------
    StudyError
        For an unknown name (with the nearest known one), a slip of grammar, a product of names, a
        number that stands alone, or weights that cancel to nothing.
    """
    parser = _Parser(text, terms)
    try:
        with np.errstate(over="ignore", invalid="ignore"):
            weights = parser.sum()
    except RecursionError:
        parser.fail("parentheses and signs are nested too deeply")
    if parser.kind != "end":
        parser.fail(f"{parser.token!r} is not expected here")
    if weights[-1] != 0:
        parser.fail("a number stands alone")
    if not np.isfinite(weights).all():
        parser.fail("the weights are not finite")
    if np.allclose(weights, 0, rtol=0, atol=1e-12):
        parser.fail("the weights cancel: nothing is asked")
    return weights[:-1]


class _Parser:
    """Recursive descent; a value is p weights and, at the end, a constant."""

    def __init__(self, text: str, terms: Mapping[str, NDArray[np.float64]]) -> None:
        self.text = text
        self.terms = terms
        self.names = sorted(terms, key=len, reverse=True)
        self.size = len(next(iter(terms.values()))) + 1
        self.at = 0
        self.advance()

    def fail(self, found: str, remedy: str = "") -> NoReturn:
        allowed = "a sum of names, with numbers as factors: arm[a] - arm[b]"
        raise StudyError(Problem(f"effect {brief(self.text)}", found, allowed, remedy))

    def advance(self) -> None:
        """Move to the next token; known names are matched whole, whatever signs they hold."""
        self.at += len(self.text[self.at :]) - len(self.text[self.at :].lstrip())
        rest = self.text[self.at :]
        number, word = _NUMBER.match(rest), _WORD.match(rest)
        name = next((n for n in self.names if rest.startswith(n) and _ends(rest, n)), None)
        if not rest:
            self.kind, self.token = "end", "the end"
        elif name is not None:
            self.kind, self.token = "name", name
        elif rest[0] in "+-*/()":
            self.kind, self.token = "sign", rest[0]
        elif number is not None:
            self.kind, self.token = "number", number.group()
        else:
            unknown = word.group() if word else rest[0]
            self.fail(f"unknown name {brief(unknown)}", nearest(unknown, self.terms))
        self.at += len(self.token) if rest else 0

    def take(self, signs: str) -> str:
        """The sign at hand when it is one of these, else nothing."""
        if self.kind != "sign" or self.token not in signs:
            return ""
        sign = self.token
        self.advance()
        return sign

    def sum(self) -> NDArray[np.float64]:
        value = self.product()
        while sign := self.take("+-"):
            value = value + self.product() if sign == "+" else value - self.product()
        return value

    def product(self) -> NDArray[np.float64]:
        value = self.factor()
        while sign := self.take("*/"):
            other = self.factor()
            if sign == "*" and not value[:-1].any():
                value, other = other, value
            if other[:-1].any():
                self.fail("names are multiplied or divided by one another")
            if sign == "/" and other[-1] == 0:
                self.fail("division by zero")
            value = value * other[-1] if sign == "*" else value / other[-1]
        return value

    def factor(self) -> NDArray[np.float64]:
        if sign := self.take("+-"):
            return self.factor() if sign == "+" else -self.factor()
        if self.take("("):
            value = self.sum()
            if not self.take(")"):
                self.fail("a parenthesis is not closed")
            return value
        value = np.zeros(self.size)
        if self.kind == "name":
            value[:-1] = self.terms[self.token]
        elif self.kind == "number":
            value[-1] = float(self.token)
        else:
            self.fail(f"{self.token!r} stands where a name or number should")
        self.advance()
        return value


def _ends(rest: str, name: str) -> bool:
    return not _GOES_ON.match(rest, len(name))
