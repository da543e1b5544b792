"""Units of rows that lie together: numbers that count up, without keeping any key but the last."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.panel.streaming_values import Distinct, other_sort, sort_of
from mixbridge.sources.checkpoint import State, restored_series, series_state

__all__ = ["NotSortedError", "Runs", "Uncounted"]

CodeArray = npt.NDArray[np.intp]


class NotSortedError(Exception):
    """Keys fall somewhere; the message says where."""


class Runs:
    """Numbers the units of rows that are sorted by unit.

    Keys must never fall from one row to the next. That they only lie together is not enough: a unit that came back
    could not be told from a new one without keeping all keys.

    Parameters
    ----------
    name : str
        The column, for messages.
    grouped : bool
        Whether rows of a unit are known to lie together, so that keys may fall.
    """

    def __init__(self, name: str, *, grouped: bool = False) -> None:
        self.name = name
        self.grouped = grouped
        self.count = 0
        self._plain = Distinct(name, whole=True)
        self._sort: str | None = None
        self._last: Any = None

    def __len__(self) -> int:
        """Return the number of units."""
        return self.count

    def blank(self) -> Runs:
        """Return one that has seen nothing."""
        return Runs(self.name, grouped=self.grouped)

    def state(self) -> State:
        """Return what was seen, to be saved."""
        last = {} if self.count == 0 else series_state(pd.Series([self._last]))
        return {"count": self.count, "sort": self._sort, "last": last}

    def restore(self, state: State) -> None:
        """Go on from a state."""
        self.count, self._sort = state["count"], state["sort"]
        self._last = restored_series(state["last"]).iloc[0] if state["last"] else None

    def enter(self, series: pd.Series[Any], place: str) -> CodeArray:
        """Return the number of the unit of each row.

        Raises
        ------
        NotSortedError
            If a key is less than the one before.
        DataError
            If the type of the keys does not go with the one of the chunks before.
        """
        if not len(series):
            return np.empty(0, dtype=np.intp)
        plain = self._checked(series, place)
        steps, keys = _whole_steps(plain) if plain.dtype == np.int64 else _steps(plain, self.grouped)
        if not self.grouped:
            self._check(steps, keys, place)
        begins = steps > 0
        begins[0] = self.count == 0 or keys[0] != self._last
        codes = self.count - 1 + np.cumsum(begins)
        self.count = int(codes[-1]) + 1
        self._last = keys[-1]
        return codes.astype(np.intp, copy=False)

    def _checked(self, series: pd.Series[Any], place: str) -> pd.Series[Any]:
        """Return keys whose type does not depend on the chunk."""
        plain = self._plain.plain(series)
        sort = sort_of(plain)
        if self._sort is not None and sort != self._sort:
            raise other_sort(self.name, place, sort, series.dtype, self._sort)
        self._sort = sort
        return plain

    def _check(self, steps: npt.NDArray[np.signedinteger[Any]], keys: Any, place: str) -> None:
        try:
            falls = self.count > 0 and bool(keys[0] < self._last)
        except TypeError:
            falls = True
        if falls:
            raise NotSortedError(self._says(self._last, keys[0], place))
        low = np.flatnonzero(steps < 0)
        if len(low):
            raise NotSortedError(self._says(keys[low[0] - 1], keys[low[0]], place))

    def _says(self, before: object, key: object, place: str) -> str:
        return f"in {place}, {self.name} {_shown(key)} comes after {_shown(before)}"


class Uncounted(Runs):
    """Looks at keys only, and takes every row for a unit of its own: rows in any order, before they are sorted."""

    def blank(self) -> Uncounted:
        """Return one that has seen nothing."""
        return Uncounted(self.name)

    def enter(self, series: pd.Series[Any], place: str) -> CodeArray:
        """Return a number for each row."""
        self._checked(series, place)
        first, self.count = self.count, self.count + len(series)
        return np.arange(first, self.count)


def _whole_steps(plain: pd.Series[Any]) -> tuple[npt.NDArray[np.signedinteger[Any]], Any]:
    """Return for each integer whether it is more, the same or less than the one before; and the keys."""
    keys = plain.to_numpy()
    steps = np.zeros(len(keys), dtype=np.int8)
    np.greater(keys[1:], keys[:-1], out=steps[1:].view(bool))
    if (keys[1:] < keys[:-1]).any():
        steps[1:][keys[1:] < keys[:-1]] = -1
    return steps, keys


def _steps(plain: pd.Series[Any], grouped: bool) -> tuple[npt.NDArray[np.signedinteger[Any]], Any]:
    """As `_whole_steps`, for keys of any kind: compared once per distinct key and chunk, if not grouped."""
    codes, found = pd.factorize(plain)
    distinct = list(found)
    ranks = np.arange(len(distinct))
    if not (grouped or _rising(distinct)):
        try:
            order = sorted(range(len(distinct)), key=distinct.__getitem__)
        except TypeError:  # keys of kinds that have no order: what comes later counts as less
            order = list(range(len(distinct)))[::-1]
        ranks = np.empty(len(distinct), dtype=np.int64)
        ranks[order] = np.arange(len(distinct))
    steps = np.sign(np.diff(ranks[codes], prepend=ranks[codes[0]]))
    return steps, _Taken(distinct, codes)


class _Taken:
    """Keys by row, looked up among the distinct ones."""

    def __init__(self, distinct: list[Any], codes: npt.NDArray[np.intp]) -> None:
        self._distinct, self._codes = distinct, codes

    def __getitem__(self, row: int) -> Any:
        return self._distinct[self._codes[row]]


def _rising(keys: list[Any]) -> bool:
    try:
        return all(one < two for one, two in pairwise(keys))
    except TypeError:
        return False


def _shown(key: object) -> str:
    return str(key.item() if isinstance(key, np.generic) else key)
