"""What the keys in a text file are, found out without keeping them."""

from __future__ import annotations

import pandas as pd

from mixbridge.sources.files import _INTEGER, _INTEGER_OR_WHOLE, _ISO_DATE, _LARGEST, read_key

__all__ = ["KeyTexts"]

_DAY = 10
"""Length of a date without a time: texts of one such length that are different are different dates."""


class KeyTexts:
    """The texts of a key, as `mixbridge.sources.files.read_key` looks at them.

    Parameters
    ----------
    fractions : bool
        Whether decimal fractions become floats. Whether two texts would become one number depends on all of them, so
        that these are kept then.
    """

    def __init__(self, *, fractions: bool) -> None:
        self._fractions = fractions
        self._kept: pd.Series | None = pd.Series([], dtype="str") if fractions else None
        self._table: tuple[pd.Index, pd.Series] | None = None
        self._seen = False
        self._matches = dict.fromkeys((_INTEGER, _INTEGER_OR_WHOLE, _ISO_DATE), True)
        self._longest, self._shortest, self._minus_zero = 0, 2**62, False

    def add(self, texts: pd.Series) -> None:
        """Look at the texts of some lines."""
        present = texts.dropna().drop_duplicates()
        if present.empty:
            return
        if self._kept is not None:
            self._kept = pd.Series(pd.concat([self._kept, present]).unique(), dtype="str")
            return
        self._seen = True
        lengths = present.str.len()
        self._longest = max(self._longest, int(lengths.max()))
        self._shortest = min(self._shortest, int(lengths.min()))
        for pattern, so_far in self._matches.items():
            self._matches[pattern] = so_far and bool(present.str.fullmatch(pattern).all())
        if self._matches[_INTEGER_OR_WHOLE]:
            self._minus_zero = self._minus_zero or bool((_digits(present) == "-0").any())
        if self._matches[_ISO_DATE]:
            dates = pd.to_datetime(present, format="ISO8601", errors="coerce")
            self._matches[_ISO_DATE] = not dates.isna().any()

    @property
    def undecided(self) -> bool:
        """Whether all texts have to be kept to decide."""
        plain = self._shortest == self._longest <= _DAY
        return self._kept is None and self._seen and self._matches[_ISO_DATE] and not plain

    def keep_all(self) -> None:
        """Keep all texts from now on."""
        self._kept = pd.Series([], dtype="str")

    def settle(self) -> None:
        """Decide."""
        if self._kept is not None:
            with_gap = pd.concat([self._kept, pd.Series([None], dtype="str")], ignore_index=True)
            known = read_key(with_gap, fractions=self._fractions)
            self._table, self._kept = (pd.Index(self._kept, dtype=object), known), None

    def read(self, texts: pd.Series) -> pd.Series:
        """Return the keys of some lines."""
        if self._table is not None:
            known, values = self._table
            places = known.get_indexer(pd.Index(texts, dtype=object))
            return values.iloc[places].set_axis(texts.index)
        if not self._seen:
            return texts
        codes, distinct = pd.factorize(texts)
        values = self._converted(pd.Series(distinct, dtype="str"))
        return pd.Series(values.array.take(codes, allow_fill=True), index=texts.index)

    def _converted(self, distinct: pd.Series) -> pd.Series:
        if self._matches[_INTEGER] or self._matches[_INTEGER_OR_WHOLE]:
            if self._longest > _LARGEST or self._minus_zero:
                return distinct
            return _digits(distinct).astype("Int64")
        if self._matches[_ISO_DATE]:
            return pd.to_datetime(distinct, format="ISO8601")
        return distinct


def _digits(texts: pd.Series) -> pd.Series:
    return texts.str.replace(r"\.0*$", "", regex=True)
