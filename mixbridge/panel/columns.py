"""The raw columns a formula names: what each holds, what is missing, how it becomes numbers."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError

__all__ = ["Column", "Kind", "Rows", "extremes", "pick", "read_column"]

Kind = Literal["number", "truth", "text", "category", "moment"]
Rows = npt.NDArray[np.intp] | None
"""Positions of the rows used, or None for all of them."""

_CHUNK = 65536

_OBJECT_KINDS: dict[str, Kind] = {
    "string": "text",
    "integer": "number",
    "floating": "number",
    "mixed-integer-float": "number",
    "decimal": "number",
    "boolean": "truth",
    "datetime": "moment",
    "datetime64": "moment",
    "date": "moment",
    "period": "moment",
    "timedelta": "moment",
    "timedelta64": "moment",
    "time": "moment",
}


def pick(values: npt.NDArray[Any], rows: Rows, start: int, stop: int) -> npt.NDArray[Any]:
    """Return the values of the used rows from start to stop: a view where all rows are used."""
    taken: npt.NDArray[Any] = values[start:stop] if rows is None else values[rows[start:stop]]
    return taken


@dataclass(frozen=True, slots=True, eq=False)
class Column:
    """One raw column.

    Parameters
    ----------
    name : str
        Its name.
    kind : {"number", "truth", "text", "category", "moment"}
        What it holds.
    series : pandas.Series
        The column as given. Kept, so that pandas copies before it writes into the user's frame later.
    numbers : numpy.ndarray or None
        For numbers and truth values an array of a numeric dtype, a view of the series where that is possible.
        Missing values are NaN.
    missing : numpy.ndarray of bool or None
        Where it is missing; None where nowhere.
    note : str or None
        How it was read, where that is not evident.
    """

    name: str
    kind: Kind
    series: pd.Series[Any]
    numbers: npt.NDArray[Any] | None
    missing: npt.NDArray[np.bool_] | None
    note: str | None = None

    def floats(self, rows: Rows, start: int, stop: int) -> npt.NDArray[np.float64]:
        """Return used rows as doubles; for numbers and truth values only."""
        assert self.numbers is not None, "only numbers have floats"
        return pick(self.numbers, rows, start, stop).astype(np.float64, copy=False)

    def taken(self, rows: Rows) -> pd.Series[Any]:
        """Return the used rows of the series."""
        return self.series if rows is None else self.series.iloc[rows]


def read_column(name: str, series: pd.Series[Any]) -> Column:
    """Find out what a column holds and where it is missing.

    Raises
    ------
    DataError
        If it holds something that is neither numbers, truth values, text, categories nor dates.
    """
    kind = _kind(name, series)
    note = None
    if kind in ("number", "truth"):
        dtype = series.dtype
        if isinstance(dtype, np.dtype) and dtype.kind in "iufb":
            numbers = series.to_numpy()
        else:
            numbers = _to_floats(name, series)
            if pd.api.types.is_object_dtype(dtype) and kind == "number":
                note = f"{name} is stored as objects; its numbers were read as numbers"
        if numbers.dtype.kind in "iub":
            missing = None
        else:
            # A minimum is NaN as soon as one value is: cheaper than a mask nobody needs.
            holes = len(numbers) > 0 and np.isnan(np.min(numbers))
            missing = np.isnan(numbers) if holes else None
        return Column(name, kind, series, numbers, missing, note)
    mask = series.isna().to_numpy(dtype=bool)
    return Column(name, kind, series, None, mask if mask.any() else None, note)


def _to_floats(name: str, series: pd.Series[Any]) -> npt.NDArray[np.float64]:
    try:
        return series.to_numpy(dtype=np.float64, na_value=np.nan)
    except (TypeError, ValueError, OverflowError) as error:
        raise DataError(f"Column {name!r} ({series.dtype}) cannot be read as numbers: {error}.") from error


def _kind(name: str, series: pd.Series[Any]) -> Kind:  # noqa: PLR0911  (one return per kind reads best)
    dtype = series.dtype
    if isinstance(dtype, pd.CategoricalDtype):
        return "category"
    if pd.api.types.is_bool_dtype(dtype):
        return "truth"
    if pd.api.types.is_complex_dtype(dtype):
        raise DataError(f"Column {name!r} holds complex numbers. Use its real part or its modulus.")
    if pd.api.types.is_numeric_dtype(dtype):
        return "number"
    if (
        pd.api.types.is_datetime64_any_dtype(dtype)
        or pd.api.types.is_timedelta64_dtype(dtype)
        or isinstance(dtype, pd.PeriodDtype)
    ):
        return "moment"
    if pd.api.types.is_object_dtype(dtype):
        inferred = pd.api.types.infer_dtype(series, skipna=True)
        if inferred == "empty":
            return "number"
        if inferred in _OBJECT_KINDS:
            return _OBJECT_KINDS[inferred]
        raise DataError(
            f"Column {name!r} mixes kinds of values ({inferred}; for example {_examples(series)}). Make it "
            "all numbers or all text first."
        )
    if pd.api.types.is_string_dtype(dtype):
        return "text"
    inferred = pd.api.types.infer_dtype(series.head(1000), skipna=True)
    if inferred in _OBJECT_KINDS:
        return _OBJECT_KINDS[inferred]
    raise DataError(
        f"Column {name!r} has the type {dtype}, which a formula cannot use. Make it numbers or text."
    )


def _examples(series: pd.Series[Any]) -> str:
    """Show one value of each of two types."""
    present = series.dropna()
    types = present.map(type)
    return " and ".join(repr(present[(types == kind).to_numpy()].iloc[0]) for kind in types.unique()[:2])


def extremes(column: Column, rows: Rows) -> tuple[float | int, float | int]:
    """Return least and greatest of the used rows, exact for integers; infinity passes through.

    The rows used have no missing value in the column.
    """
    values = column.numbers
    assert values is not None, "only numbers have extremes"
    if rows is None:
        return values.min().item(), values.max().item()
    least, greatest = [], []
    for start in range(0, len(rows), _CHUNK):
        part = values[rows[start : start + _CHUNK]]
        least.append(part.min().item())
        greatest.append(part.max().item())
    return min(least), max(greatest)
