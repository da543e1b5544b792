"""Factors of a formula as things that yield their values for a block of rows."""

from __future__ import annotations

import ast
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from patsy import EvalEnvironment, EvalFactor, PatsyError

from mixbridge.errors import FormulaError
from mixbridge.panel.columns import Column, Rows
from mixbridge.panel.syntax import prepare, tree_of

__all__ = [
    "Evaluated",
    "Numeric",
    "Plain",
    "Stored",
    "as_columns",
    "evaluate",
    "given_data",
    "inner_arguments",
    "learn",
    "used_data",
]


@dataclass(frozen=True, slots=True, eq=False)
class Plain:
    """A column that enters as it is."""

    column: Column
    rows: Rows
    width: int = 1

    def block(self, start: int, stop: int) -> npt.NDArray[np.float64]:
        """Return used rows from start to stop, shape (rows, 1)."""
        return self.column.floats(self.rows, start, stop)[:, None]


@dataclass(frozen=True, slots=True, eq=False)
class Evaluated:
    """An expression that works row by row, evaluated for each block anew."""

    factor: EvalFactor
    state: dict[str, Any]
    columns: Mapping[str, Column]
    rows: Rows
    width: int

    def block(self, start: int, stop: int) -> npt.NDArray[np.float64]:
        """Return used rows from start to stop, shape (rows, width)."""
        value = evaluate(self.factor, self.state, used_data(self.columns, self.rows, start, stop))
        return as_columns(self.factor, value, stop - start)


@dataclass(frozen=True, slots=True, eq=False)
class Stored:
    """An expression that may look at other rows: evaluated once on all rows used, and kept."""

    values: npt.NDArray[np.float64]

    @property
    def width(self) -> int:
        """Number of columns."""
        return int(self.values.shape[1])

    def block(self, start: int, stop: int) -> npt.NDArray[np.float64]:
        """Return used rows from start to stop, shape (rows, width)."""
        return self.values[start:stop]


Numeric = Plain | Evaluated | Stored


def used_data(columns: Mapping[str, Column], rows: Rows, start: int, stop: int) -> dict[str, Any]:
    """Return what an expression that works row by row reads for a block.

    Numbers come as doubles whatever they are stored as, so that powers of small integers cannot overflow.
    """
    data: dict[str, Any] = {}
    for name, column in columns.items():
        if column.kind == "number":
            data[name] = column.floats(rows, start, stop)
        elif column.kind == "truth":
            data[name] = column.floats(rows, start, stop).astype(bool)
        else:
            data[name] = column.series.iloc[slice(start, stop) if rows is None else rows[start:stop]]
    return data


def given_data(columns: Mapping[str, Column], rows: Rows) -> dict[str, Any]:
    """Return what other expressions read: the used rows of each column as a Series, nullable types undone."""
    data: dict[str, Any] = {}
    for name, column in columns.items():
        series = column.taken(rows)
        plain = isinstance(series.dtype, np.dtype) and series.dtype.kind in "iufb"
        if plain or column.numbers is None:
            data[name] = series
        else:
            data[name] = series.astype("bool" if column.kind == "truth" else _plain_type(series))
    return data


def _plain_type(series: Any) -> np.dtype[Any]:
    """Return the numpy type that a nullable column without missing values fits into."""
    plain = getattr(series.dtype, "numpy_dtype", None)
    return plain if isinstance(plain, np.dtype) and plain.kind in "iufb" else np.dtype(np.float64)


def learn(factor: EvalFactor, environment: EvalEnvironment, data: Mapping[str, Any]) -> dict[str, Any]:
    """Let the stateful transforms of a factor learn from all rows used; return the factor's state."""
    state: dict[str, Any] = {}
    with np.errstate(all="ignore"):
        try:
            for step in range(prepare(factor, state, environment)):
                factor.memorize_chunk(state, step, data)
                factor.memorize_finish(state, step)
        except (PatsyError, ValueError, TypeError, ArithmeticError) as error:
            raise _cannot(factor, error) from error
    return state


def evaluate(factor: EvalFactor, state: dict[str, Any], data: Mapping[str, Any]) -> Any:
    """Evaluate a factor; what is not a number in the result is for the caller to find and count."""
    with np.errstate(all="ignore"):  # every NaN and infinity is looked for afterwards, and counted or refused
        try:
            return factor.eval(state, data)
        except PatsyError as error:
            raise _cannot(factor, error) from error


def _cannot(factor: EvalFactor, error: Exception) -> FormulaError:
    return FormulaError(f"{factor.code} cannot be evaluated: {error}")


def as_columns(factor: EvalFactor, value: Any, rows: int) -> npt.NDArray[np.float64]:
    """Return the value of a numeric factor as doubles of shape (rows, width)."""
    values = np.asarray(value)
    if values.dtype.kind == "c":
        raise FormulaError(f"{factor.code} yields complex numbers. Use a real part or a modulus.")
    values = values.astype(np.float64, copy=False)
    if values.ndim == 1:
        values = values[:, None]
    if values.ndim != 2 or values.shape[0] != rows:
        found = "one number" if values.ndim == 0 else f"shape {np.asarray(value).shape}"
        raise FormulaError(
            f"{factor.code} yields {found}; needed is one value for each of the {rows} rows used. A vector "
            "from outside the data must be a column of the data, so that dropped rows are dropped from it "
            "too."
        )
    return values


def inner_arguments(factor: EvalFactor, environment: EvalEnvironment) -> list[EvalFactor]:
    """Return the arguments that stateful transforms learn from, innermost first.

    A value that is not a number must be found there: a mean learned from it would spoil every row.
    """
    found: list[EvalFactor] = []

    def visit(node: ast.AST) -> None:
        for child in ast.iter_child_nodes(node):
            visit(child)
        if (
            isinstance(node, ast.Call)
            and isinstance(node.func, ast.Name)
            and node.args
            and hasattr(environment.namespace.get(node.func.id), "__patsy_stateful_transform__")
        ):
            found.append(EvalFactor(ast.unparse(node.args[0])))

    visit(tree_of(factor.code))
    return found
