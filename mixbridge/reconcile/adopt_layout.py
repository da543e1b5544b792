"""Find formula, data and unit column for a fitted model, so that a study holds its very rows and columns."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import DataError, OptionError
from mixbridge.reconcile.adopt_read import Readout

__all__ = ["Layout", "key_of_rows", "layouts", "same_columns"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Layout:
    """One way to hand the model to a cross-check.

    Attributes
    ----------
    formula : str
    frame : DataFrame
    unit : str
    period : str or None
    note : str
        How it was made.
    """

    formula: str
    frame: pd.DataFrame
    unit: str
    period: str | None
    note: str


def key_of_rows(
    name: str, given: object, frame: pd.DataFrame | None, rows: pd.Index | None, n: int
) -> NDArray[Any] | None:
    """Return one key per row used.

    Parameters
    ----------
    name : str
        Of the argument, for messages.
    given : str, array_like or None
        A column of the data of the model, or one key for each row used or each row of the data.
    frame, rows, n
        Data of the model, labels of the rows used, their number.

    Raises
    ------
    OptionError
        If there is no such column, or the lengths differ.
    """
    if given is None:
        return None
    if isinstance(given, str):
        if frame is None:
            raise OptionError(
                f"{name}={given!r}: the model was given arrays, without column names; pass an array."
            )
        if given not in frame.columns:
            raise OptionError.not_among(name, given, frame.columns)
        return _used(frame[given].to_numpy(), frame, rows, n, name)
    return _used(np.asarray(given), frame, rows, n, name)


def _used(
    values: NDArray[Any], frame: pd.DataFrame | None, rows: pd.Index | None, n: int, name: str
) -> NDArray[Any]:
    if values.shape == (n,):
        return values
    if frame is not None and rows is not None and values.shape == (len(frame),) and frame.index.is_unique:
        return np.asarray(values[frame.index.get_indexer(rows)])
    raise OptionError(
        f"{name} has shape {values.shape}; the model used {n} rows, and one key for each is needed."
    )


def layouts(
    readout: Readout, groups: NDArray[Any], period: NDArray[Any] | None, names: Sequence[str | None]
) -> list[Layout]:
    """Return the ways to hand the model on, the best first.

    Parameters
    ----------
    readout : Readout
    groups : ndarray
        Unit of each row used.
    period : ndarray or None
    names : pair of str or None
        Columns named for unit and period, if any.
    """
    found = []
    frame, rows = readout.frame, readout.rows
    if readout.formula is not None and frame is not None and rows is not None and frame.index.is_unique:
        used = frame.loc[rows].copy()
        if len(used) == readout.y.size:
            unit = names[0] or _column_of(used, groups) or _free("unit", used.columns)
            used[unit] = groups
            when = None
            if period is not None:
                when = names[1] or _free("period", used.columns)
                used[when] = period
            found.append(Layout(readout.formula, used, unit, when, "formula and data of the model"))
    found.append(_from_columns(readout, groups, period))
    return found


def _column_of(frame: pd.DataFrame, groups: NDArray[Any]) -> str | None:
    """Return the column that holds exactly these keys, if there is one."""
    for name in frame.columns:
        values = frame[name].to_numpy()
        if (
            isinstance(name, str)
            and values.dtype.kind == groups.dtype.kind
            and np.array_equal(values, groups)
        ):
            return name
    return None


def _free(name: str, taken: Sequence[object] | pd.Index) -> str:
    while name in taken:
        name += "_"
    return name


def _from_columns(readout: Readout, groups: NDArray[Any], period: NDArray[Any] | None) -> Layout:
    """Write the design matrix itself as a formula of its columns."""
    columns: dict[str, NDArray[Any]] = {}
    terms, constant = [], False
    for j, name in enumerate(readout.names):
        values = readout.x[:, j]
        if (values == 1.0).all() and not constant:
            constant = True
            continue
        plain = re.sub(r"\W", "_", name)
        label = _free(plain if plain[:1].isalpha() else f"x_{plain}", list(columns))
        columns[label] = values
        terms.append(label)
    outcome = _free(re.sub(r"\W", "_", readout.outcome) or "y", list(columns))
    columns[outcome] = readout.y
    unit = _free("unit", list(columns))
    columns[unit] = groups
    when = None
    if period is not None:
        when = _free("period", list(columns))
        columns[when] = period
    right = " + ".join(([] if constant else ["0"]) + terms) or "1"
    frame = pd.DataFrame(columns)
    if readout.rows is not None:
        frame.index = readout.rows
    return Layout(f"{outcome} ~ {right}", frame, unit, when, "columns of the design matrix of the model")


def same_columns(
    readout: Readout, x: FloatArray, y: FloatArray, names: Sequence[str]
) -> tuple[int, ...] | None:
    """Find the model's columns among those of a study.

    Returns
    -------
    tuple of int or None
        Place in the model of each column of the study; None if rows or columns differ.
    """
    if x.shape != readout.x.shape or not np.array_equal(y, readout.y):
        return None
    places: list[int] = []
    for j, name in enumerate(names):
        order = sorted(range(x.shape[1]), key=lambda at: readout.names[at] != name)
        size = np.abs(x[:, j]).max()
        # the same transform evaluated twice differs by a rounding or two
        match = [
            at
            for at in order
            if at not in places and np.abs(readout.x[:, at] - x[:, j]).max() <= 1e-13 * size
        ]
        if not match:
            return None
        places.append(match[0])
    return tuple(places)


def refuse_units(groups: NDArray[Any] | None, kind: str) -> NDArray[Any]:
    """Return the units, or say that they are needed."""
    if groups is None:
        raise OptionError(f"unit= is needed: a result of {kind} does not hold the units.")
    if pd.isna(pd.Series(groups)).any():
        raise DataError("a row that the model used has no unit.")
    return groups
