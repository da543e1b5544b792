"""Reading a linear hypothesis written with the names of the terms.

A hypothesis is one or more equations separated by commas, each linear in the coefficients: ``forage =
feeding``, ``2*forage - feeding = 1``, ``forage = 0, feeding = 0``, ``a = b = c``. Names are the terms as the
table of coefficients prints them (``C(region)[T.north]``, ``Q("brood frames")``, ``a:b``); spaces inside and
the kind of quotes do not matter. Numbers are read as exact fractions, so that redundant equations are found
without rounding.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import FormulaError, IdentificationError, nearest

__all__ = ["Hypothesis", "read_hypothesis"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Hypothesis:
    """``L beta = c``.

    Attributes
    ----------
    text : str
        As written.
    equations : tuple of str
        The text of each row.
    matrix : ndarray of shape (q, p)
        L, columns in the order of the terms.
    values : ndarray of shape (q,)
        c.
    """

    text: str
    equations: tuple[str, ...]
    matrix: FloatArray
    values: FloatArray


@dataclass(frozen=True, slots=True)
class _Linear:
    """A constant plus a combination of terms, in exact fractions."""

    constant: Fraction
    terms: Mapping[str, Fraction]

    def plus(self, other: _Linear, times: Fraction) -> _Linear:
        names = [*self.terms, *(name for name in other.terms if name not in self.terms)]
        zero = Fraction(0)
        return _Linear(
            self.constant + times * other.constant,
            {name: self.terms.get(name, zero) + times * other.terms.get(name, zero) for name in names},
        )

    def scaled(self, factor: Fraction) -> _Linear:
        return _Linear(self.constant * factor, {name: value * factor for name, value in self.terms.items()})

    @property
    def is_number(self) -> bool:
        return not any(self.terms.values())


def read_hypothesis(text: str, names: Sequence[str]) -> Hypothesis:
    """Read a hypothesis.

    Parameters
    ----------
    text : str
    names : sequence of str
        Terms that exist.

    Returns
    -------
    Hypothesis

    Examples
    --------
    >>> read_hypothesis("2*forage - C(region)[T.b] = 1", ["Intercept", "forage", "C(region)[T.b]"]).matrix
    array([[ 0.,  2., -1.]])
    """
    reader = _Reader(text, tuple(names), tuple(_tokens(text, names)))
    equations = reader.equations()
    rows = [[side.terms.get(name, Fraction(0)) for name in names] for _, side in equations]
    values = [-side.constant for _, side in equations]
    labels = tuple(label for label, _ in equations)
    for label, row in zip(labels, rows, strict=True):
        if not any(row):
            raise FormulaError(
                f"no coefficient is left in {label!r}: the equation says nothing about the model."
            )
    _require_independent(rows, values, labels)
    return Hypothesis(
        text,
        labels,
        np.array([[float(v) for v in row] for row in rows]),
        np.array([float(v) for v in values]),
    )


def _require_independent(rows: list[list[Fraction]], values: list[Fraction], labels: tuple[str, ...]) -> None:
    """Reduce exactly, row by row, remembering which earlier rows make up a row that vanishes."""
    reduced: list[tuple[int, list[Fraction], dict[int, Fraction]]] = []
    redundant: list[str] = []
    for at, (row, value) in enumerate(zip(rows, values, strict=True)):
        rest, made = [*row, value], {at: Fraction(1)}
        for pivot, other, parts in reduced:
            factor = rest[pivot]
            if factor:
                rest = [a - factor * b for a, b in zip(rest, other, strict=True)]
                for key, part in parts.items():
                    made[key] = made.get(key, Fraction(0)) - factor * part
        lead = next((j for j, entry in enumerate(rest[:-1]) if entry), None)
        if lead is None:
            others = ", ".join(repr(labels[key]) for key in sorted(made) if key != at and made[key])
            if rest[-1]:
                raise IdentificationError(
                    f"{labels[at]!r} (row {at + 1}) contradicts {others}: they cannot hold together."
                )
            redundant.append(f"{labels[at]!r} (row {at + 1}) follows from {others}")
            continue
        reduced.append(
            (lead, [a / rest[lead] for a in rest], {key: part / rest[lead] for key, part in made.items()})
        )
    if redundant:
        raise IdentificationError(
            f"the joint hypothesis has redundant rows: {'; '.join(redundant)}. Leave them out."
        )


_NUMBER = re.compile(r"(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_SIGNS = "+-*/()=,"
Token = tuple[str, str, int, int]
"""Kind (``name``, ``number`` or a sign), text, start and end."""


def _pattern(name: str) -> re.Pattern[str]:
    """Match a name whatever the spaces between its parts and the kind of its quotes."""
    parts = re.findall(r"\"[^\"]*\"|'[^']*'|\w+|[^\w\s]", name)
    pieces = [
        rf"[\"']{re.escape(part[1:-1])}[\"']" if len(part) > 1 and part[0] in "\"'" else re.escape(part)
        for part in parts
    ]
    return re.compile(
        r"\s*".join(pieces) + (r"(?![\w\[(:.])" if name and (name[-1].isalnum() or name[-1] in "_])") else "")
    )


def _tokens(text: str, names: Sequence[str]) -> list[Token]:
    patterns = [(name, _pattern(name)) for name in names]
    tokens: list[Token] = []
    at = 0
    while at < len(text):
        if text[at].isspace():
            at += 1
            continue
        found = [(match.end(), name) for name, pattern in patterns if (match := pattern.match(text, at))]
        if found:
            end, name = max(found)
            tokens.append(("name", name, at, end))
        elif number := _NUMBER.match(text, at):
            end = number.end()
            tokens.append(("number", number.group(), at, end))
        elif text[at] in _SIGNS and not text.startswith("**", at):
            end = at + 1
            tokens.append((text[at], text[at], at, end))
        else:
            raise _unknown(text, at, names)
        at = end
    for before, after in pairwise(tokens):
        if before[0] == "number" and after[0] in ("name", "number") and before[3] == after[2]:
            raise FormulaError(f"{text[before[2] : after[3]]!r} in {text!r}: write the product with '*'.")
    return tokens


def _unknown(text: str, at: int, names: Sequence[str]) -> FormulaError:
    if text.startswith("**", at):
        return FormulaError(f"{text!r} is not linear in the coefficients: powers cannot be tested this way.")
    word = re.compile(r"[\w.]+(\([^()]*\))?(\[[^\]]*\])?(:[\w.]+)*|\S").match(text, at)
    found = word.group() if word else text[at:]
    return FormulaError(
        f"{found!r} in {text!r} is not a term; terms: {', '.join(names)}.{nearest(found, names)}"
    )


@dataclass(slots=True)
class _Reader:
    """Recursive descent: equations, sums, products, factors."""

    text: str
    names: tuple[str, ...]
    tokens: tuple[Token, ...]
    at: int = 0

    def equations(self) -> list[tuple[str, _Linear]]:
        found: list[tuple[str, _Linear]] = []
        while True:
            start = self.at
            sides = [self.sum()]
            while self._take("="):
                sides.append(self.sum())
            if self.at < len(self.tokens) and self.tokens[self.at][0] != ",":
                raise self._misplaced("an operator, '=' or ','")
            label = self._label(start)
            if len(sides) == 1:
                raise FormulaError(f"{label!r} has no '=': write {label + ' = 0'!r}.")
            pairs = list(pairwise(sides))
            for number, (left, right) in enumerate(pairs, start=1):
                name = label if len(pairs) == 1 else f"{label} ({number})"
                found.append((name, left.plus(right, Fraction(-1))))
            if self.at == len(self.tokens):
                return found
            self.at += 1

    def sum(self) -> _Linear:
        total = self.product()
        while sign := self._take("+", "-"):
            total = total.plus(self.product(), Fraction(1 if sign == "+" else -1))
        return total

    def product(self) -> _Linear:
        total = self.factor()
        while sign := self._take("*", "/"):
            other = self.factor()
            if sign == "/":
                if not other.is_number:
                    raise self._not_linear()
                if other.constant == 0:
                    raise FormulaError(f"{self.text!r} divides by zero.")
                total = total.scaled(1 / other.constant)
            elif other.is_number:
                total = total.scaled(other.constant)
            elif total.is_number:
                total = other.scaled(total.constant)
            else:
                raise self._not_linear()
        return total

    def factor(self) -> _Linear:
        if sign := self._take("+", "-"):
            return self.factor().scaled(Fraction(1 if sign == "+" else -1))
        if self._take("("):
            inner = self.sum()
            if not self._take(")"):
                raise self._misplaced("')'")
            return inner
        if self.at < len(self.tokens):
            kind, content, _, _ = self.tokens[self.at]
            if kind == "name":
                self.at += 1
                return _Linear(Fraction(0), {content: Fraction(1)})
            if kind == "number":
                self.at += 1
                return _Linear(Fraction(content), {})
        raise self._misplaced("a term or a number")

    def _take(self, *signs: str) -> str | None:
        if self.at < len(self.tokens) and self.tokens[self.at][0] in signs:
            self.at += 1
            return self.tokens[self.at - 1][0]
        return None

    def _label(self, start: int) -> str:
        return self.text[self.tokens[start][2] : self.tokens[self.at - 1][3]]

    def _misplaced(self, wanted: str) -> FormulaError:
        where = (
            "at the end"
            if self.at == len(self.tokens)
            else f"before {self.text[self.tokens[self.at][2] :]!r}"
        )
        return FormulaError(f"{self.text!r} cannot be read: {wanted} is missing {where}.")

    def _not_linear(self) -> FormulaError:
        return FormulaError(
            f"{self.text!r} is not linear in the coefficients: "
            "only sums of numbers times terms can be tested."
        )
