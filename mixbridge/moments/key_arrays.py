"""Unit keys as one array and a few words, so that a file brings back the same keys with the same type.

| kind | array | keys |
|---|---|---|
| ``range`` | start, stop, step | consecutive numbers |
| ``number`` | the keys in their own type | integers, truth values, floats |
| ``time`` | 64-bit counts since 1970 in UTC | dates with time of day, with or without a zone; durations; periods |
| ``date`` | UTF-8 text, a JSON list of ISO dates | calendar dates |
| ``text`` | UTF-8 text, a JSON list | text, integers of any size, mixtures of text and numbers |
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from datetime import date
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import DataError

__all__ = ["keys_as_array", "keys_from_array", "same_kind_of_keys"]

Array = NDArray[Any]
KINDS = {
    "integer": "numbers",
    "floating": "numbers",
    "boolean": "truth values",
    "string": "text",
    "empty": "",
    "date": "dates",
    "datetime": "times",
    "datetime64": "times",
}


def keys_as_array(keys: pd.Index) -> tuple[dict[str, Any], Array]:
    """Return what to say of the keys, JSON-ready, and the array that holds them.

    Parameters
    ----------
    keys : pandas.Index

    Returns
    -------
    dict, ndarray

    Raises
    ------
    DataError
        If the keys are tuples or other objects.
    """
    if isinstance(keys.dtype, pd.CategoricalDtype):
        keys = keys.astype(keys.dtype.categories.dtype)
    words: dict[str, Any] = {
        "dtype": str(keys.dtype),
        "name": keys.name if isinstance(keys.name, str) else None,
    }
    if isinstance(keys, pd.RangeIndex):
        return {**words, "kind": "range"}, np.array([keys.start, keys.stop, keys.step], dtype=np.int64)
    plain = getattr(keys.dtype, "numpy_dtype", keys.dtype)
    if isinstance(plain, np.dtype) and plain.kind in "biuf":
        return {**words, "kind": "number", "dtype": str(plain)}, np.asarray(keys.to_numpy(dtype=plain))
    if isinstance(keys, pd.DatetimeIndex | pd.TimedeltaIndex | pd.PeriodIndex):
        return {**words, "kind": "time"}, np.asarray(keys.asi8)
    values = keys.tolist()
    kinds = set(map(type, values))
    if kinds == {date}:
        return {**words, "kind": "date"}, _as_bytes(list(map(date.isoformat, values)))
    if any(issubclass(kind, np.generic) for kind in kinds):
        values = [value.item() if isinstance(value, np.generic) else value for value in values]
        kinds = set(map(type, values))
    if isinstance(keys, pd.MultiIndex) or not all(issubclass(kind, str | int | float) for kind in kinds):
        raise DataError(
            "only units keyed by numbers, texts or dates can be saved; use such a column as the unit."
        )
    return {**words, "kind": "text"}, _as_bytes(values)


def keys_from_array(words: Mapping[str, Any], array: Array) -> pd.Index:
    """Return keys from what `keys_as_array` made.

    Parameters
    ----------
    words : mapping
    array : ndarray

    Returns
    -------
    pandas.Index
    """
    kind, name, dtype = words["kind"], words["name"], words["dtype"]
    if kind == "range":
        start, stop, step = array.tolist()
        return pd.RangeIndex(start, stop, step, name=name)
    if kind == "number":
        return pd.Index(array, name=name)
    if kind == "time":
        return _times(array, dtype, name)
    values = json.loads(array.tobytes())
    if kind == "date":
        return pd.Index(list(map(date.fromisoformat, values)), dtype=object, name=name)
    return pd.Index(values, dtype="object" if dtype == "object" else "str", name=name, tupleize_cols=False)


def same_kind_of_keys(one: pd.Index, two: pd.Index) -> None:
    """Refuse to look for units by keys that can never be equal.

    Parameters
    ----------
    one, two : pandas.Index

    Raises
    ------
    DataError
        If the keys of one part are numbers and those of the other text, or the like.
    """
    kinds = [_kind(keys) for keys in (one, two)]
    if "" in kinds or kinds[0] == kinds[1]:
        return
    raise DataError(
        f"units are keyed by {kinds[0]} in one part ({one[0]!r}) and by {kinds[1]} in the other ({two[0]!r}): the same "
        "unit would not be found. Give the unit the same type in all parts."
    )


def _kind(keys: pd.Index) -> str:
    """Return what keys are in words; empty where they may be anything."""
    if isinstance(keys, pd.DatetimeIndex):
        return "times without a zone" if keys.tz is None else "times with a zone"
    if isinstance(keys.dtype, pd.CategoricalDtype):
        return _kind(keys.dtype.categories)
    plain = getattr(keys.dtype, "numpy_dtype", keys.dtype)
    if isinstance(plain, np.dtype) and plain.kind in "iuf":
        return "numbers"
    return KINDS.get(pd.api.types.infer_dtype(keys, skipna=False), "")


def _as_bytes(values: list[Any]) -> Array:
    return np.frombuffer(json.dumps(values).encode("ascii"), dtype=np.uint8)


def _times(array: Array, dtype: str, name: str | None) -> pd.Index:
    if dtype.startswith("period["):
        return pd.PeriodIndex(
            pd.arrays.PeriodArray(array, dtype=pd.PeriodDtype(dtype[len("period[") : -1])), name=name
        )
    if dtype.startswith("timedelta64["):
        return pd.TimedeltaIndex(array.view(dtype), name=name)
    found = pd.api.types.pandas_dtype(dtype)
    if isinstance(found, pd.DatetimeTZDtype):
        return (
            pd.DatetimeIndex(array.view(f"M8[{found.unit}]"), name=name)
            .tz_localize("UTC")
            .tz_convert(found.tz)
        )
    return pd.DatetimeIndex(array.view(dtype), name=name)
