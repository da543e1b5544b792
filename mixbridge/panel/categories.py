"""Categories: levels that occur in the rows used, and the code of each row."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError, FormulaError
from mixbridge.panel.columns import Column, Rows

__all__ = ["Coded", "code_column", "code_values", "is_categorical"]

_MOST_LEVELS = 2000


@dataclass(frozen=True, slots=True, eq=False)
class Coded:
    """A categorical factor.

    Parameters
    ----------
    codes : numpy.ndarray of int
        Position in `levels` for each row used; -1 where the value is missing.
    levels : tuple
        The levels that occur, in order.
    contrast : object
        The coding that the formula asks for, as patsy takes it, or None.
    notes : tuple of str
        Which levels were left out.
    """

    codes: npt.NDArray[np.signedinteger[Any]]
    levels: tuple[Any, ...]
    contrast: Any = None
    notes: tuple[str, ...] = ()

    def block(self, start: int, stop: int) -> npt.NDArray[np.signedinteger[Any]]:
        """Return the codes of used rows from start to stop."""
        return self.codes[start:stop]


def is_categorical(value: Any) -> bool:
    """Whether the value of a factor is coded by levels instead of entering as numbers."""
    if _is_box(value) or isinstance(getattr(value, "dtype", None), pd.CategoricalDtype):
        return True
    return not np.issubdtype(np.asarray(value).dtype, np.number)


def _is_box(value: Any) -> bool:
    """Whether a value is what patsy's ``C`` returns."""
    return all(hasattr(value, part) for part in ("data", "contrast", "levels"))


def code_column(name: str, column: Column, rows: Rows, box: Any = None) -> Coded:
    """Code a column by its own values.

    Parameters
    ----------
    name : str
        Name of the factor.
    column : Column
        The column.
    rows : numpy.ndarray of int or None
        The rows used.
    box : object, optional
        What patsy's ``C`` returned for a part of the column: its coding and levels are used.
    """
    series = column.taken(rows)
    if series.dtype == object and column.numbers is not None:
        values = column.numbers if rows is None else column.numbers[rows]
        series = pd.Series(values.astype(bool) if column.kind == "truth" else values)
    return _code(name, series, getattr(box, "levels", None), getattr(box, "contrast", None))


def code_values(name: str, value: Any) -> Coded:
    """Code the value of an evaluated factor."""
    levels = value.levels if _is_box(value) else None
    contrast = getattr(value, "contrast", None)
    while _is_box(value):
        value = value.data
    if getattr(value, "ndim", 1) != 1:
        raise DataError(f"{name} yields categories in {value.ndim} dimensions; one column is needed.")
    return _code(name, value if isinstance(value, pd.Series) else pd.Series(value), levels, contrast)


def _code(name: str, series: pd.Series[Any], explicit: Any, contrast: Any) -> Coded:
    present: list[Any]
    if isinstance(series.dtype, pd.CategoricalDtype):
        codes, present = np.asarray(series.cat.codes), list(series.cat.categories)
    else:
        codes, uniques = pd.factorize(series)
        order, present = _sorted(uniques.tolist())
        codes = np.where(codes < 0, -1, order[codes]) if (codes < 0).any() else order[codes]
    if explicit is not None:
        if isinstance(explicit, str) or not isinstance(explicit, Iterable):
            raise FormulaError(f"{name} gives levels={explicit!r}; needed is a list of levels.")
        codes, present = _to_explicit(name, codes, present, list(explicit))
    counts = np.bincount(codes[codes >= 0] if codes.min(initial=0) < 0 else codes, minlength=len(present))
    used = np.flatnonzero(counts)
    notes = []
    if len(used) < len(present):
        gone = [str(present[i]) for i in np.flatnonzero(counts == 0)]
        shown = ", ".join(gone[:5]) + (f" and {len(gone) - 5} more" if len(gone) > 5 else "")
        notes.append(f"{name}: levels that no row used has were left out: {shown}")
        relabel = np.full(len(present) + 1, -1, dtype=np.intp)  # the last entry serves the code -1
        relabel[used] = np.arange(len(used))
        codes, present = relabel[codes], [present[i] for i in used]
    if len(present) == 1:
        notes.append(
            f"{name}: all rows used have the one level {present[0]}, so it cannot be told from the constant"
        )
    if len(present) > 2 and all(isinstance(level, str) and _is_number(level) for level in present):
        notes.append(
            f"{name}: its levels are numbers stored as text and were read as categories; if they are "
            "amounts, convert the column to numbers"
        )
    if len(present) > _MOST_LEVELS:
        raise DataError(
            f"{name} has {len(present)} levels, each of them a column. Categories with so many levels are "
            "units: name them by unit=, or group them. If the values are amounts, convert the column to "
            "numbers."
        )
    return Coded(codes.astype(np.min_scalar_type(-len(present) - 1)), tuple(present), contrast, tuple(notes))


def _is_number(text: str) -> bool:
    """Whether a text can be read as a number."""
    try:
        float(text)
    except ValueError:
        return False
    return True


def _sorted(levels: list[Any]) -> tuple[npt.NDArray[np.intp], list[Any]]:
    """Return the place of each level in sorted order, and the levels sorted (by type and text if need be)."""
    try:
        order = sorted(range(len(levels)), key=levels.__getitem__)
    except TypeError:
        order = sorted(range(len(levels)), key=lambda i: (type(levels[i]).__name__, str(levels[i])))
    places = np.empty(len(levels), dtype=np.intp)
    places[order] = np.arange(len(levels))
    return places, [levels[i] for i in order]


def _to_explicit(
    name: str, codes: npt.NDArray[Any], present: list[Any], explicit: list[Any]
) -> tuple[npt.NDArray[Any], list[Any]]:
    """Move codes to the levels that the formula lists."""
    place = {level: i for i, level in enumerate(explicit)}
    strange = [level for i, level in enumerate(present) if level not in place and (codes == i).any()]
    if strange:
        raise DataError(
            f"{name} lists levels {explicit}, but the rows used also hold "
            f"{', '.join(map(repr, strange[:5]))}. Add them to the list, or drop these rows."
        )
    moves = np.array([place.get(level, -1) for level in present] + [-1], dtype=np.intp)
    return moves[codes], explicit
