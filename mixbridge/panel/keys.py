"""Keys of units: codes 0 to N-1, with no two keys made one on the way."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError

__all__ = ["encode", "repeated_pairs", "whole_numbers"]

_LARGEST_WHOLE_DOUBLE = 2.0**53


def encode(name: str, series: pd.Series[Any]) -> tuple[npt.NDArray[np.intp], pd.Index]:
    """Assign codes to the keys of a column without missing values.

    Keys are sorted, so that the codes do not depend on the order of the rows. Whole numbers stored as floats
    are
    keys; fractions are refused, since a rounding error would make a new unit of a row.

    Parameters
    ----------
    name : str
        The column, for messages.
    series : pandas.Series
        The keys.

    Returns
    -------
    codes : numpy.ndarray of int
        Position of each row's key.
    keys : pandas.Index
        The distinct keys, sorted; keys of several types are sorted by type first.
    """
    dtype = series.dtype
    if isinstance(dtype, pd.CategoricalDtype):
        used = series.cat.remove_unused_categories()
        return np.asarray(used.cat.codes).astype(np.intp), used.cat.categories.rename(name)
    if pd.api.types.is_float_dtype(dtype):
        series = pd.Series(whole_numbers(name, series.to_numpy(dtype=np.float64)), index=series.index)
    if series.dtype == object:
        return _encode_objects(name, series)
    if isinstance(series.dtype, np.dtype) and series.dtype.kind in "iu":
        compact = _encode_compact(series.to_numpy())
        if compact is not None:
            return compact[0], pd.Index(compact[1], name=name)
    codes, found = pd.factorize(series, sort=True)
    keys = pd.Index(found, name=name)
    plain = getattr(keys.dtype, "numpy_dtype", None)
    if isinstance(plain, np.dtype) and plain.kind in "iub":  # a nullable type without missing values
        keys = keys.astype(plain)
    return codes.astype(np.intp, copy=False), keys


def _encode_compact(values: npt.NDArray[Any]) -> tuple[npt.NDArray[np.intp], npt.NDArray[Any]] | None:
    """Assign codes to integers that lie close together by a table, without hashing; None if they do not."""
    wide = values.astype(np.uint64 if values.dtype.kind == "u" else np.int64, copy=False)
    least, greatest = wide.min(), wide.max()
    width = greatest.item() - least.item() + 1
    if width > 2 * len(values) + 1024:
        return None
    shifted = (wide - least).astype(np.intp, copy=False)
    present = np.zeros(width, dtype=bool)
    present[shifted] = True
    keys = (np.flatnonzero(present).astype(wide.dtype) + least).astype(values.dtype)
    return (np.cumsum(present) - 1)[shifted], keys


def whole_numbers(name: str, values: npt.NDArray[np.float64]) -> npt.NDArray[np.int64]:
    """Turn floats that are whole numbers into integers; refuse others and those too large."""
    if not np.isfinite(values).all():
        raise DataError(f"Column {name!r} holds infinite keys.")
    odd = np.flatnonzero(values != np.rint(values))
    if len(odd):
        raise DataError(
            f"Column {name!r} holds keys with fractions, for example {values[odd[0]].item()!r}. A rounding "
            "error would make a new key; turn them into integers or text first."
        )
    if np.abs(values).max(initial=0.0) > _LARGEST_WHOLE_DOUBLE:
        raise DataError(
            f"Column {name!r} holds keys above 2^53 as floats, which cannot tell neighbouring whole numbers "
            "apart. Read the column as integers or text, so that keys are not merged."
        )
    return values.astype(np.int64)


def _encode_objects(name: str, series: pd.Series[Any]) -> tuple[npt.NDArray[np.intp], pd.Index]:
    """Assign codes to Python objects: text, integers of any size, tuples, dates."""
    values = series.to_numpy()
    kinds = set(map(type, values))
    numbers = {kind for kind in kinds if issubclass(kind, int | float | np.integer | np.floating)}
    if any(issubclass(kind, bool | np.bool_) for kind in kinds) and numbers - {bool}:
        raise DataError(f"Column {name!r} mixes truth values and numbers: True and 1 would be one key.")
    if any(issubclass(kind, float | np.floating) for kind in kinds):
        floats = np.array(
            [value for value in values if isinstance(value, float | np.floating)], dtype=np.float64
        )
        whole_numbers(name, floats)
    try:
        codes, keys = pd.factorize(values)
    except TypeError as error:
        raise DataError(
            f"Column {name!r} holds keys that cannot be compared ({error}); use text or tuples."
        ) from error
    listed = list(keys)
    if str in kinds and len(kinds) > 1:
        _refuse_lookalikes(name, listed)
    try:
        order = sorted(range(len(listed)), key=listed.__getitem__)
    except TypeError:
        order = sorted(range(len(listed)), key=lambda i: (type(listed[i]).__name__, repr(listed[i])))
    places = np.empty(len(listed), dtype=np.intp)
    places[order] = np.arange(len(listed))
    ordered = np.empty(len(listed), dtype=object)
    for place, i in enumerate(order):
        ordered[place] = listed[i]
    return places[codes], pd.Index(ordered, dtype=object, name=name, tupleize_cols=False)


def _refuse_lookalikes(name: str, keys: list[Any]) -> None:
    """Refuse the text '1' beside the number 1."""
    texts = {key for key in keys if isinstance(key, str)}
    twin = next((key for key in keys if not isinstance(key, str) and str(key) in texts), None)
    if twin is not None:
        raise DataError(
            f"Column {name!r} holds both {twin!r} and {str(twin)!r}: one unit or two? Store all keys as "
            "text or all as numbers."
        )


def repeated_pairs(
    units: npt.NDArray[np.intp], periods: npt.NDArray[np.intp], count: int
) -> npt.NDArray[np.intp]:
    """Return the rows whose (unit, period) pair stands in an earlier row too.

    Parameters
    ----------
    units, periods : numpy.ndarray of int
        Codes of each row.
    count : int
        Number of distinct periods.
    """
    pairs = units.astype(np.int64) * count + periods
    cells = (int(units.max()) + 1) * count
    if cells <= 8 * len(pairs) + 1024:
        seen = np.zeros(cells, dtype=bool)
        seen[pairs] = True
        if np.count_nonzero(seen) == len(pairs):
            return np.empty(0, dtype=np.intp)
    return np.flatnonzero(pd.Index(pairs).duplicated())
