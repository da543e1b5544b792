"""The columns that say which unit and which period a row belongs to."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError, OptionError, nearest
from mixbridge.panel.keys import encode, repeated_pairs
from mixbridge.panel.periods import ordinals

__all__ = ["check_role", "periods_of", "units_of"]


def check_role(role: str, name: str, available: Sequence[object], index_names: Sequence[object]) -> None:
    """Refuse a unit or period that is not a column of the data."""
    if not isinstance(name, str):
        raise OptionError(f"{role}={name!r}: give the name of a column as text.")
    if name in available:
        return
    hint = (
        f" It is a level of the index: call data.reset_index({name!r}) first." if name in index_names else ""
    )
    raise DataError(
        f"{role}={name!r} is not a column of the data."
        + (hint or nearest(name, [str(column) for column in available]))
        + f" Columns: {', '.join(map(str, available[:12]))}{' and more' if len(available) > 12 else ''}."
    )


def units_of(name: str, series: pd.Series[Any]) -> tuple[npt.NDArray[np.intp], pd.Index]:
    """Assign numbers to the units of the rows used.

    Raises
    ------
    DataError
        If there is one unit only.
    """
    codes, keys = encode(name, series)
    if len(keys) == 1:
        raise DataError(
            f"All {len(codes)} rows used belong to one unit ({name} {keys[0]}): a variance between "
            "units is not defined. Check that unit= names the grouping column."
        )
    return codes, keys


def periods_of(
    name: str, series: pd.Series[Any], units: npt.NDArray[np.intp], unit_name: str, unit_keys: pd.Index
) -> tuple[npt.NDArray[np.int64] | None, str]:
    """Place the periods of the rows used on a scale, after checking that no unit has a period twice.

    Parameters
    ----------
    name : str
        The column of the periods.
    series : pandas.Series
        The period of each row.
    units : numpy.ndarray of int
        The unit of each row.
    unit_name : str
        The column of the units, for messages.
    unit_keys : pandas.Index
        Key of each unit, for messages.

    Raises
    ------
    DataError
        If a (unit, period) pair is repeated.
    """
    ordered = None
    fractional = pd.api.types.is_float_dtype(series.dtype)
    if isinstance(series.dtype, pd.CategoricalDtype):
        ordered = series.dtype.ordered
        codes, keys = np.asarray(series.cat.codes).astype(np.intp), series.cat.categories
    elif fractional or (series.dtype == object and _has_fractions(series)):
        codes, values = pd.factorize(series.to_numpy(dtype=np.float64), sort=True)
        if not np.isfinite(values).all():
            raise DataError(f"Column {name!r} holds infinite periods.")
        keys = pd.Index(values)
    else:
        codes, keys = encode(name, series)
    repeats = repeated_pairs(units, codes, len(keys))
    if len(repeats):
        pairs = list(dict.fromkeys((unit_keys[units[row]], keys[codes[row]]) for row in repeats[:50]))
        shown = ", ".join(f"({unit_name} {unit}, {name} {period})" for unit, period in pairs[:3])
        raise DataError(
            f"{len(repeats)} rows repeat a pair of unit and period, for example {shown}. Aggregate them to "
            "one row per pair, correct the keys, or leave period out if rows within a unit have no order."
        )
    if isinstance(series.dtype, pd.CategoricalDtype):
        if not ordered:
            return None, (
                f"{name}: no order, because its categories are not ordered; what needs consecutive periods "
                "is left out. Use an ordered categorical, integers or dates"
            )
        positions, note = ordinals(name, keys, ordered=True)
    else:
        positions, note = ordinals(name, keys)
    return (None if positions is None else positions[codes]), note


def _has_fractions(series: pd.Series[Any]) -> bool:
    """Whether a column of Python objects holds floats and nothing but numbers."""
    return pd.api.types.infer_dtype(series, skipna=False) in ("floating", "mixed-integer-float", "decimal")
