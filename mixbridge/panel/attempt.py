"""Learn every factor on the rows at hand, and find the rows that a factor cannot use."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
from patsy import EvalEnvironment, EvalFactor

from mixbridge.errors import DataError, FormulaError
from mixbridge.panel.categories import Coded, code_column, code_values, is_categorical
from mixbridge.panel.columns import Column, Rows, extremes
from mixbridge.panel.factors import (
    Evaluated,
    Numeric,
    Plain,
    Stored,
    as_columns,
    evaluate,
    given_data,
    inner_arguments,
    learn,
    used_data,
)

__all__ = ["Attempt", "Reading", "attempt", "refuse_infinite"]

_CHUNK = 65536
_CARRIED = 8 * np.finfo(np.float64).eps
"""A spread below this share of the largest value is carried in two or three binary digits at most."""


@dataclass(frozen=True, slots=True, eq=False)
class Reading:
    """How one factor is to be read.

    Parameters
    ----------
    factor : patsy.EvalFactor
        The factor.
    columns : mapping of str to Column
        What it reads.
    single : str or None
        The column, where the factor is nothing else; or the argument of ``C``, where `coded`.
    coded : bool
        Whether it is ``C`` of a column.
    by_row : bool
        Whether it works row by row.
    """

    factor: EvalFactor
    columns: Mapping[str, Column]
    single: str | None
    coded: bool
    by_row: bool


@dataclass(frozen=True, slots=True, eq=False)
class Attempt:
    """What was learned, and the rows on which a factor is not a number (positions among the rows used)."""

    learned: Mapping[EvalFactor, Numeric | Coded]
    bad: tuple[tuple[str, npt.NDArray[np.intp]], ...]


@dataclass(frozen=True, slots=True, eq=False)
class _Survey:
    """What one look at the values of a factor shows."""

    bad: npt.NDArray[np.intp]
    infinite: int | None
    least: float
    greatest: float
    narrow: bool


def attempt(
    readings: list[Reading], rows: Rows, labels: pd.Index, environment: EvalEnvironment, outcome: EvalFactor
) -> Attempt:
    """Learn the factors, outcome first, on the rows given.

    Raises
    ------
    DataError
        If a value is infinite, or a spread is below what doubles carry, and no row is about to be dropped.
    """
    learned: dict[EvalFactor, Numeric | Coded] = {}
    bad: list[tuple[str, npt.NDArray[np.intp]]] = []
    complaints: list[DataError] = []
    n = len(labels)
    for reading in readings:
        unusable, complaint = _inner(reading, rows, labels, environment)
        if complaint is not None:
            complaints.append(complaint)
        if not len(unusable) and complaint is None:
            learned[reading.factor] = value = _learn(reading, rows, n, environment)
            if isinstance(value, Coded):
                unusable = np.flatnonzero(value.codes < 0)
            else:
                survey = _survey_plain(value) if isinstance(value, Plain) else _survey(value, n)
                unusable = survey.bad
                complaint = _complaint(reading, survey, labels, is_outcome=reading.factor == outcome)
                complaints += [] if complaint is None else [complaint]
        if len(unusable):
            bad.append((reading.factor.code, unusable))
    if not bad and complaints:
        raise complaints[0]
    return Attempt(learned, tuple(bad))


def _inner(
    reading: Reading, rows: Rows, labels: pd.Index, environment: EvalEnvironment
) -> tuple[npt.NDArray[np.intp], DataError | None]:
    """Look for unusable values in what stateful transforms learn from."""
    nothing = np.empty(0, dtype=np.intp)
    if reading.single is not None:
        return nothing, None
    for argument in inner_arguments(reading.factor, environment):
        inner = Reading(argument, reading.columns, None, False, reading.by_row)
        value = _learn(inner, rows, len(labels), environment)
        if isinstance(value, Coded):
            continue
        survey = _survey(value, len(labels))
        if len(survey.bad):
            return survey.bad, None
        if survey.infinite is not None:
            return nothing, _infinite(argument.code, labels[survey.infinite])
    return nothing, None


def _learn(reading: Reading, rows: Rows, n: int, environment: EvalEnvironment) -> Numeric | Coded:
    """Learn one factor from the rows used: take its column, code it, or evaluate it."""
    factor, columns = reading.factor, reading.columns
    if reading.single is not None:
        return _learn_single(reading, columns[reading.single], rows, environment)
    if not reading.by_row:
        data = given_data(columns, rows)
        value = evaluate(factor, learn(factor, environment, data), data)
        if is_categorical(value):
            return _checked(code_values(factor.code, value), factor, n)
        return Stored(as_columns(factor, value, n))
    state = learn(factor, environment, used_data(columns, rows, 0, n))
    first_value = evaluate(factor, state, used_data(columns, rows, 0, min(_CHUNK, n)))
    if is_categorical(first_value):
        value = first_value if n <= _CHUNK else evaluate(factor, state, used_data(columns, rows, 0, n))
        return _checked(code_values(factor.code, value), factor, n)
    width = as_columns(factor, first_value, min(_CHUNK, n)).shape[1]
    return Evaluated(factor, state, columns, rows, width)


def _learn_single(
    reading: Reading, column: Column, rows: Rows, environment: EvalEnvironment
) -> Plain | Coded:
    """Learn a factor that is a column, or ``C`` of a column."""
    factor = reading.factor
    if reading.coded:
        first = np.zeros(1, dtype=np.intp) if rows is None else rows[:1]
        data = {column.name: column.series.iloc[first]}
        return code_column(
            factor.code, column, rows, evaluate(factor, learn(factor, environment, data), data)
        )
    if column.kind == "number":
        return Plain(column, rows)
    if column.kind == "moment":
        raise FormulaError(
            f"{column.name} holds dates or times. Write C({column.name}) for one indicator per date, or "
            "make a number of it, for example the year."
        )
    return code_column(factor.code, column, rows)


def _checked(coded: Coded, factor: EvalFactor, n: int) -> Coded:
    if len(coded.codes) != n:
        raise FormulaError(
            f"{factor.code} yields {len(coded.codes)} values; needed is one for each of the {n} rows used."
        )
    return coded


def _survey_plain(value: Plain) -> _Survey:
    """Look at a raw column; missing and infinite values are gone already."""
    least, greatest = extremes(value.column, value.rows)
    narrow = _is_narrow(least, greatest)
    return _Survey(np.empty(0, dtype=np.intp), None, float(least), float(greatest), narrow)


def _survey(value: Numeric, n: int) -> _Survey:
    """Look at every value of an evaluated factor once."""
    bad: list[npt.NDArray[np.intp]] = []
    infinite: int | None = None
    least = np.full(value.width, np.inf)
    greatest = np.full(value.width, -np.inf)
    for start in range(0, n, _CHUNK):
        block = value.block(start, min(start + _CHUNK, n))
        low, high = block.min(axis=0), block.max(axis=0)
        if not (np.isfinite(low).all() and np.isfinite(high).all()):
            bad.append(start + np.flatnonzero(np.isnan(block).any(axis=1)))
            where = np.flatnonzero(np.isinf(block).any(axis=1))
            if len(where) and infinite is None:
                infinite = start + int(where[0])
        least, greatest = np.fmin(least, low), np.fmax(greatest, high)
    narrow = any(_is_narrow(low, high) for low, high in zip(least.tolist(), greatest.tolist(), strict=True))
    where = np.concatenate(bad) if bad else np.empty(0, dtype=np.intp)
    return _Survey(where.astype(np.intp), infinite, float(least.min()), float(greatest.max()), narrow)


def _is_narrow(least: float | int, greatest: float | int) -> bool:
    """Whether a spread is below what double precision carries; integers are compared exactly."""
    return bool(0 < greatest - least < _CARRIED * max(abs(least), abs(greatest)))


def _complaint(reading: Reading, survey: _Survey, labels: pd.Index, *, is_outcome: bool) -> DataError | None:
    name = reading.factor.code
    if survey.infinite is not None:
        return _infinite(name, labels[survey.infinite])
    if survey.narrow:
        return DataError(
            f"The values of {name} lie between {survey.least!r} and {survey.greatest!r}: their spread is "
            "below what double precision carries at that size, so digits are lost already. Subtract an "
            "offset before the column is stored as floating-point numbers."
        )
    if is_outcome and survey.least == survey.greatest:
        return DataError(
            f"The outcome {name} has the one value {survey.least:g} in all rows used: there is nothing to "
            "explain."
        )
    return None


def refuse_infinite(column: Column, rows: Rows, labels: pd.Index) -> None:
    """Refuse a raw column with an infinite value in a row that has nothing missing."""
    if column.numbers is None or column.numbers.dtype.kind != "f":
        return
    if all(map(math.isfinite, extremes(column, rows))):
        return
    values = column.numbers if rows is None else column.numbers[rows]
    raise _infinite(f"Column {column.name!r}", labels[int(np.flatnonzero(np.isinf(values))[0])])


def _infinite(name: str, label: Any) -> DataError:
    label = label.item() if isinstance(label, np.generic) else label
    return DataError(
        f"{name} is infinite in the row labelled {label!r}. Correct the value, or set it to missing to have "
        "the row dropped and counted."
    )
