"""Distinct values of a column, gathered chunk by chunk."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError, OptionError
from mixbridge.panel.keys import whole_numbers
from mixbridge.sources.checkpoint import State, restored_series, series_state

__all__ = ["Distinct", "other_sort", "sort_of"]

_SPAN = 1 << 22
"""Integers that lie within this, or within eight times their number, are looked up in a table."""
_LARGEST = np.iinfo(np.int64).max
_AT_ONCE = 8192
"""Values looked up at once: what is made on the way stays in the cache."""


class Distinct:
    """The distinct values of a column without missing ones, in order of first appearance.

    Integers of any width become 64-bit ones or, beyond these, Python's; nullable types become plain ones.

    Parameters
    ----------
    name : str
        The column, for messages.
    whole : bool
        Whether floats are keys, hence must be whole numbers, and become integers.
    """

    def __init__(self, name: str, *, whole: bool) -> None:
        self.name = name
        self._whole = whole
        self._parts: list[pd.Series[Any]] = []
        self._count = 0
        self._sort: str | None = None
        self._dtype: Any = None
        self._categories: pd.Index | None = None
        self._ordered = False
        self._all_categories = True
        self._levels: list[tuple[int, pd.Index]] = []
        self._table: tuple[int, npt.NDArray[np.int32]] | None = None

    def __len__(self) -> int:
        """Return the number of distinct values."""
        return self._count

    def __getstate__(self) -> dict[str, Any]:
        """Leave out what look-ups are made with."""
        values = [self._settled()] if self._count else []
        return {**vars(self), "_parts": values, "_levels": [], "_table": None}

    def __setstate__(self, state: dict[str, Any]) -> None:
        """Make it anew."""
        vars(self).update(state)
        if self._parts:
            self._levels = [(0, pd.Index(self._parts[0]))]

    def blank(self) -> Distinct:
        """Return one that has seen nothing."""
        return Distinct(self.name, whole=self._whole)

    @property
    def rising(self) -> bool:
        """Whether each value is greater than the one that appeared before it."""
        return bool(self._settled().is_monotonic_increasing)

    def add(self, series: pd.Series[Any], place: str) -> None:
        """Take in the values of a chunk; as `enter`, whose places are not needed."""
        self.enter(series, place)

    def enter(self, series: pd.Series[Any], place: str) -> npt.NDArray[np.intp]:
        """Take in the values of a chunk, and return the place of each among the distinct ones.

        Raises
        ------
        DataError
            If their type does not go with the one of the chunks before.
        """
        if not len(series):
            return np.empty(0, dtype=np.intp)
        self._note_categories(series)
        plain = self.plain(series)
        dtype = "category" if isinstance(series.dtype, pd.CategoricalDtype) else series.dtype
        sort = sort_of(plain)
        if self._sort is None:
            self._sort, self._dtype = sort, dtype
        else:
            if sort != self._sort:
                raise other_sort(self.name, place, sort, series.dtype, self._sort)
            self._dtype = dtype if dtype == self._dtype else None
        places = self._look_up(plain)
        new = np.flatnonzero(places < 0)
        if len(new):
            unknown = plain.iloc[new]
            codes, fresh = pd.factorize(unknown)
            places[new] = self._count + codes
            self._learn(pd.Series(fresh))
        return places

    def state(self) -> State:
        """Return what was seen, to be saved.

        Raises
        ------
        OptionError
            If the values cannot be saved.
        """
        if self._categories is not None:
            raise OptionError(
                f"A checkpoint does not hold the categories of {self.name!r}. Leave checkpoint out, or store the "
                "column as text or numbers."
            )
        dtype = None if self._dtype is None else str(self._dtype)
        values = series_state(self._settled()) if self._count else None
        return {"sort": self._sort, "dtype": dtype, "values": values or {}}

    def restore(self, state: State) -> None:
        """Go on from a state."""
        self._sort, self._all_categories = state["sort"], False
        self._dtype = None if state["dtype"] is None else pd.api.types.pandas_dtype(state["dtype"])
        if state["values"]:
            self._learn(restored_series(state["values"]))

    def series(self) -> pd.Series[Any]:
        """Return the distinct values in the type they came in, where all chunks had the same."""
        values = self._settled()
        if self._categories is not None and self._all_categories:
            dtype = pd.CategoricalDtype(self._categories, ordered=self._ordered)
            return pd.Series(pd.Categorical(values, dtype=dtype))
        if self._dtype is not None and self._dtype != "category" and not self._whole_floats():
            return values.astype(self._dtype)
        return values

    def find(self, series: pd.Series[Any]) -> npt.NDArray[np.intp]:
        """Return the place of each value among the distinct ones; -1 for a missing value or a new one."""
        gaps = series.isna().to_numpy(dtype=bool)
        if gaps.any():
            places = np.full(len(series), -1, dtype=np.intp)
            places[~gaps] = self.find(series[~gaps])
            return places
        return self._look_up(self.plain(series))

    def settle(self) -> None:
        """Prepare for look-ups from several threads, when no value will be added any more."""
        values = self._settled()
        if self._levels:
            self._levels = [(0, pd.Index(values))]
            self._levels[0][1].get_indexer(self._levels[0][1][:1])

    def _look_up(self, values: pd.Series[Any]) -> npt.NDArray[np.intp]:
        """Return the place of each value, -1 for one that is not known."""
        if self._table is not None:
            least, table = self._table
            if values.dtype == np.int64:
                return _found_in(table, values.to_numpy(), least)
            self._leave_table()
        places = np.full(len(values), -1, dtype=np.intp)
        for start, level in self._levels:
            new = np.flatnonzero(places < 0)
            if not len(new):
                break
            sought = values if len(new) == len(values) else values.iloc[new]
            if level.dtype == object and sought.dtype != object:
                sought = sought.astype(object)
            found = np.asarray(level.get_indexer(pd.Index(sought)))
            places[new] = np.where(found < 0, -1, found + start)
        return places

    def _learn(self, fresh: pd.Series[Any]) -> None:
        """Append values that are not known yet."""
        start = self._count
        self._parts.append(fresh)
        self._count += len(fresh)
        if fresh.dtype == np.int64 and not self._levels and self._enter_table(fresh.to_numpy(), start):
            return
        if self._table is not None:
            self._leave_table()
            return
        level = pd.Index(fresh)
        # few levels, each at least twice as long as the next: every value is hashed a few times only
        while self._levels and len(self._levels[-1][1]) < 2 * len(level):
            start, before = self._levels.pop()
            if (before.dtype == object) != (level.dtype == object):
                before, level = before.astype(object), level.astype(object)
            if level.dtype == object:  # appended as they are: pandas would make floats of wide integers
                both = np.concatenate([before.to_numpy(), level.to_numpy()])
                level = pd.Index(both, dtype=object, tupleize_cols=False)
            else:
                level = before.append(level)
        self._levels.append((start, level))

    def _enter_table(self, fresh: npt.NDArray[np.int64], start: int) -> bool:
        """Enter integers that lie close together in a table; return whether they do."""
        least, greatest = int(fresh.min()), int(fresh.max())
        old = self._table
        if old is not None:
            least, greatest = min(least, old[0]), max(greatest, old[0] + len(old[1]) - 1)
        span = greatest - least + 1
        if span > max(_SPAN, 8 * self._count) or self._count >= np.iinfo(np.int32).max:
            return False
        table: npt.NDArray[np.int32]
        if old is not None and span <= len(old[1]):
            least, table = old
        else:
            # zeros are not touched before they are used, so that room to grow costs nothing
            size = 2 * span if old is None else max(span, 2 * len(old[1]))
            table = np.zeros(size, dtype=np.int32)
            if (old is not None and least < old[0]) or least + size - 1 > _LARGEST:
                least = max(greatest - size + 1, -_LARGEST - 1)
            if old is not None:
                table[old[0] - least : old[0] - least + len(old[1])] = old[1]
            self._table = least, table
        table[fresh - least] = np.arange(start + 1, start + 1 + len(fresh))
        return True

    def _leave_table(self) -> None:
        self._table = None
        self._levels = [(0, pd.Index(self._settled()))]

    def _settled(self) -> pd.Series[Any]:
        """Return the distinct values as one series."""
        if not self._parts:
            return pd.Series([], dtype=object)
        if len(self._parts) > 1:
            parts = self._parts
            if any(part.dtype == object for part in parts):
                parts = [part.astype(object) for part in parts]
            self._parts = [pd.concat(parts, ignore_index=True)]
        return self._parts[0]

    def plain(self, series: pd.Series[Any]) -> pd.Series[Any]:
        """Return values whose type does not depend on what else is in the chunk."""
        dtype = series.dtype
        if isinstance(dtype, pd.CategoricalDtype):
            series = series.astype(dtype.categories.dtype)
            dtype = series.dtype
        if pd.api.types.is_bool_dtype(dtype):
            return series.astype(bool)
        if pd.api.types.is_float_dtype(dtype):
            floats = series.to_numpy(dtype=np.float64)
            return pd.Series(whole_numbers(self.name, floats) if self._whole else floats)
        if pd.api.types.is_unsigned_integer_dtype(dtype) and len(series) and series.max() > _LARGEST:
            return series.astype(object)
        if pd.api.types.is_integer_dtype(dtype):
            return series.astype(np.int64)
        return series

    _plain = plain

    def _whole_floats(self) -> bool:
        return self._whole and pd.api.types.is_float_dtype(self._dtype)

    def _note_categories(self, series: pd.Series[Any]) -> None:
        """Keep the categories of all chunks, in order of first appearance."""
        if not isinstance(series.dtype, pd.CategoricalDtype):
            self._all_categories = False
            return
        categories, ordered = series.dtype.categories, bool(series.dtype.ordered)
        if self._categories is None:
            self._categories, self._ordered = categories, ordered
        elif not categories.equals(self._categories):
            if self._ordered or ordered:
                raise DataError(
                    f"The ordered categories of column {self.name!r} change within the data; their order would "
                    "be a guess. Give all parts the same categories."
                )
            new = categories[self._categories.get_indexer(categories) < 0]
            self._categories = self._categories.append(new)


def other_sort(name: str, place: str, sort: str, dtype: object, before: str) -> DataError:
    """Make the error for keys of another kind than before."""
    return DataError(
        f"In {place} the column {name!r} holds {sort} ({dtype}); before, it held {before}. Give the column one "
        "type in all parts of the data."
    )


def sort_of(series: pd.Series[Any]) -> str:
    """Say in a word what a column of a chunk holds."""
    dtype = series.dtype
    if pd.api.types.is_bool_dtype(dtype):
        return "truth values"
    if pd.api.types.is_numeric_dtype(dtype):
        return "numbers"
    if pd.api.types.is_object_dtype(dtype) or pd.api.types.is_string_dtype(dtype):
        kind = pd.api.types.infer_dtype(series, skipna=True)
        return "numbers" if kind in ("integer", "floating", "decimal", "mixed-integer-float") else "text"
    return "dates or times"


_sort_of = sort_of


def _found_in(
    table: npt.NDArray[np.int32], values: npt.NDArray[np.int64], least: int
) -> npt.NDArray[np.intp]:
    """Return the entry of each value in a table that begins with one, less one; -1 beyond the table."""
    places = np.empty(len(values), dtype=np.intp)
    for start in range(0, len(values), _AT_ONCE):
        some = slice(start, start + _AT_ONCE)
        # a difference that wraps around is beyond the table too
        offset = (values[some] - least).view(np.uint64)
        beyond = offset >= np.uint64(len(table))
        if beyond.any():
            offset[beyond] = 0
        np.subtract(np.take(table, offset.view(np.int64)), 1, out=places[some])
        if beyond.any():
            places[some][beyond] = -1
    return places
