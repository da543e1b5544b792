"""Values as JSON holds them: numbers as they are, infinities as text, undefined numbers as null."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pandas as pd

__all__ = ["plain", "plain_array", "plain_series", "plain_table"]


def plain(value: Any) -> Any:
    """Return a JSON value: numbers as they are, infinities as text, undefined numbers as null."""
    if isinstance(value, (bool, str)) or value is None:
        return value
    if isinstance(value, (int, np.integer)):
        return int(value)
    if isinstance(value, (float, np.floating)):
        number = float(value)
        if math.isnan(number):
            return None
        return ("inf" if number > 0 else "-inf") if math.isinf(number) else number
    return str(value)


def plain_series(series: pd.Series) -> dict[str, Any]:
    """Return a series by label."""
    return {str(key): plain(value) for key, value in series.items()}


def plain_array(values: np.ndarray[Any, Any]) -> list[Any]:
    """Return a matrix as a list of rows."""
    return [[plain(value) for value in row] for row in values]


def plain_table(table: pd.DataFrame) -> list[dict[str, Any]]:
    """Return a table as a list of rows by column."""
    return [{str(key): plain(value) for key, value in row.items()} for row in table.to_dict("records")]
