"""Periods on an equally spaced scale, where there is one."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd

__all__ = ["ordinals"]

Read = tuple[npt.NDArray[np.int64] | None, str]

_WHOLE = 1e-6
"""How far a gap between fractional periods may be from a multiple of the smallest one, relative to that one.
Rounding of stored decimals near 2000 in steps of 0.01 leaves 1e-10; a calendar written as decimals rounded to
three digits leaves 1e-2 and is not equally spaced."""

_LARGEST = 2**62  # differences of such ordinals still fit in 64 bits


def ordinals(  # noqa: PLR0911  (one return per kind reads best)
    name: str, keys: pd.Index, ordered: bool = False
) -> Read:
    """Place distinct periods on an equally spaced scale.

    Parameters
    ----------
    name : str
        The column.
    keys : pandas.Index
        The distinct periods, sorted; for categories all of them in their order.
    ordered : bool
        Whether the periods are ordered categories.

    Returns
    -------
    positions : numpy.ndarray of int64 or None
        One per key; None if there is no such scale.
    note : str
        How they were read, or why there is none.
    """
    if ordered:
        return np.arange(
            len(keys), dtype=np.int64
        ), f"{name}: ordered categories, each one step after the one before"
    if isinstance(keys, pd.PeriodIndex):
        return keys.asi8.astype(np.int64), f"{name}: calendar periods of frequency {keys.freqstr}"
    if keys.dtype == object:
        keys = _infer(keys)
    if isinstance(keys, pd.PeriodIndex | pd.DatetimeIndex):
        return _dates(name, keys) if isinstance(keys, pd.DatetimeIndex) else ordinals(name, keys)
    if pd.api.types.is_bool_dtype(keys.dtype):
        return keys.to_numpy().astype(np.int64), f"{name}: truth values, False before True"
    if pd.api.types.is_integer_dtype(keys.dtype):
        return _integers(name, keys)
    if pd.api.types.is_float_dtype(keys.dtype):
        return _fractions(name, keys.to_numpy(dtype=np.float64))
    if isinstance(keys, pd.TimedeltaIndex):
        return _fractions(name, keys.to_numpy().astype("timedelta64[ns]").astype(np.float64))
    return None, (
        f"{name}: no order, because its values are "
        f"{'categories without an order' if ordered is None else 'text'} or mixed; what needs consecutive "
        "periods is left out. Use integers, dates or an ordered categorical"
    )


def _infer(keys: pd.Index) -> pd.Index:
    """Turn Python integers and dates stored as objects into a typed index; leave the rest."""
    kind = pd.api.types.infer_dtype(keys, skipna=False)
    if kind == "integer" and min(keys) > -_LARGEST and max(keys) < _LARGEST:
        return pd.Index(np.array(list(keys), dtype=np.int64))
    if kind in ("date", "datetime", "datetime64"):
        return pd.DatetimeIndex(pd.to_datetime(list(keys)))
    if kind == "period":
        return pd.PeriodIndex(list(keys))
    return keys


def _integers(name: str, keys: pd.Index) -> Read:
    least, greatest = int(keys.min()), int(keys.max())
    if not (least > -_LARGEST and greatest < _LARGEST):
        return (
            None,
            f"{name}: no order, because its integers are too large to count steps between; subtract a base",
        )
    values = keys.to_numpy(dtype=np.int64)
    note = f"{name}: integers as they are"
    if (
        least >= 1800_01
        and greatest <= 2199_12
        and np.isin(values % 100, np.arange(1, 13)).all()
        and least // 100 < greatest // 100
    ):
        note += (
            "; they look like year and month written together, where December to January is not one step: "
            f"pandas.PeriodIndex(data[{name!r}].astype(str), freq='M') counts months"
        )
    return values, note


def _fractions(name: str, values: npt.NDArray[np.float64]) -> Read:
    if (values == np.rint(values)).all() and np.abs(values).max() < 2.0**53:
        return values.astype(np.int64), f"{name}: whole numbers as they are"
    order = np.argsort(values)
    gaps = np.diff(values[order])
    if not len(gaps):
        return np.zeros(len(values), dtype=np.int64), f"{name}: a single period"
    steps = gaps / gaps.min()
    if not np.isfinite(steps).all() or (np.abs(steps - np.rint(steps)) > _WHOLE * steps).any():
        return (
            None,
            f"{name}: no order in steps, because its gaps are not multiples of the smallest one "
            f"({gaps.min():g})",
        )
    positions = np.empty(len(values), dtype=np.int64)
    positions[order] = np.concatenate([[0], np.cumsum(np.rint(steps))]).astype(np.int64)
    return positions, f"{name}: numbers in steps of {gaps.min():g}"


def _dates(name: str, keys: pd.DatetimeIndex) -> Read:
    """Choose the calendar step that the dates keep best; of equals the longest."""
    local = keys.tz_localize(None).as_unit("ns")
    year, month = local.year.to_numpy().astype(np.int64), local.month.to_numpy().astype(np.int64)
    day = local.normalize().to_numpy().astype("datetime64[D]").astype(np.int64)
    scales = {
        "year": year,
        "quarter": 4 * year + (month - 1) // 3,
        "month": 12 * year + month - 1,
        "week": (day + 3) // 7,  # 1970-01-01 was a Thursday: weeks from Monday
        "day": day,
    }
    if len(local) == 1:
        return scales["day"], f"{name}: a single date"
    shares = {}
    for step, scale in scales.items():
        gaps = np.diff(np.sort(scale))
        if gaps.min() > 0:  # else two dates fall into one step
            shares[step] = float((gaps == gaps.min()).mean())
    if not shares:
        since = (local - local.min()).to_numpy().astype("timedelta64[ns]").astype(np.int64)
        smallest = int(np.diff(np.sort(since)).min())
        if (since % smallest).any():
            return (
                None,
                f"{name}: no order in steps, because its times are not multiples of the smallest gap apart",
            )
        return since // smallest, f"{name}: times in steps of {pd.Timedelta(smallest, unit='ns')}"
    step = max(shares, key=shares.__getitem__)
    kept = (
        "" if shares[step] == 1 else f" ({shares[step]:.0%} of the gaps between dates are the smallest one)"
    )
    return scales[step], f"{name}: dates counted by {step}{kept}"
