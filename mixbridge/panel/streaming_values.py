"""Distinct values of a column, gathered chunk by chunk."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError
from mixbridge.panel.keys import whole_numbers

__all__ = ["Distinct"]

_PENDING = 1 << 16
_LARGEST = np.iinfo(np.int64).max


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
        self._values: pd.Series[Any] | None = None
        self._pending: list[pd.Series[Any]] = []
        self._waiting = 0
        self._dtype: Any = None
        self._categories: pd.Index | None = None
        self._ordered = False
        self._all_categories = True
        self._index: pd.Index | None = None
        self._table: tuple[int, npt.NDArray[np.intp]] | None = None

    def __len__(self) -> int:
        """Return the number of distinct values."""
        return len(self._settled())

    @property
    def settled(self) -> int:
        """At least how many values are distinct, without work."""
        return 0 if self._values is None else len(self._values)

    def add(self, series: pd.Series[Any], place: str) -> None:
        """Take in the values of a chunk.

        Raises
        ------
        DataError
            If their type does not go with the one of the chunks before.
        """
        if not len(series):
            return
        self._note_categories(series)
        plain = self._plain(series)
        seen = None if self._values is None else self._places(plain, self._values) >= 0
        fresh = plain.drop_duplicates() if seen is None else plain[~seen].drop_duplicates()
        dtype = "category" if isinstance(series.dtype, pd.CategoricalDtype) else series.dtype
        if self._values is None and not self._pending:
            self._dtype = dtype
        else:
            known = self._values if self._values is not None else self._pending[0]
            if _sort_of(known) != _sort_of(plain):
                raise DataError(
                    f"In {place} the column {self.name!r} holds {_sort_of(plain)} ({series.dtype}); before, it "
                    f"held {_sort_of(known)}. Give the column one type in all parts of the data."
                )
            self._dtype = dtype if dtype == self._dtype else None
        if len(fresh):
            self._pending.append(fresh)
            self._waiting += len(fresh)
        if self._waiting > max(_PENDING, self.settled):
            self._settled()

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
        return self._places(self._plain(series), self._settled())

    def _places(self, values: pd.Series[Any], known: pd.Series[Any]) -> npt.NDArray[np.intp]:
        """Return the place of each value among known ones."""
        whole = values.dtype == np.int64 and known.dtype == np.int64
        if self._index is None and self._table is None:
            self._prepare(known)
        if self._table is not None and whole:
            least, table = self._table
            offset = values.to_numpy() - least
            inside = (offset >= 0) & (offset < len(table))
            return np.where(inside, table[np.where(inside, offset, 0)], -1)
        if self._index is None:
            self._index = pd.Index(known)
        if self._index.dtype == object and values.dtype != object:
            values = values.astype(object)
        return np.asarray(self._index.get_indexer(pd.Index(values))).astype(np.intp, copy=False)

    def _prepare(self, known: pd.Series[Any]) -> None:
        """Make a table of integers that lie close together, else an index."""
        if known.dtype == np.int64:
            values = known.to_numpy()
            least, greatest = int(values.min()), int(values.max())
            if greatest - least < 4 * len(values) + 1024:
                table = np.full(greatest - least + 1, -1, dtype=np.intp)
                table[values - least] = np.arange(len(values))
                self._table = least, table
                return
        self._index = pd.Index(known)

    def _settled(self) -> pd.Series[Any]:
        """Merge what is pending into the distinct values."""
        if self._pending:
            parts = ([] if self._values is None else [self._values]) + self._pending
            if any(part.dtype == object for part in parts):
                parts = [part.astype(object) for part in parts]
            self._values = pd.concat(parts, ignore_index=True).drop_duplicates(ignore_index=True)
            self._pending, self._waiting = [], 0
            self._index, self._table = None, None
        return self._values if self._values is not None else pd.Series([], dtype=object)

    def _plain(self, series: pd.Series[Any]) -> pd.Series[Any]:
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


def _sort_of(series: pd.Series[Any]) -> str:
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
