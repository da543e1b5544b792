"""How the rows that were dropped are spread over units."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from mixbridge.panel.accounting import ByUnit
from mixbridge.panel.columns import Rows

__all__ = ["losses_by_unit"]


def losses_by_unit(units: pd.Series[Any], rows: Rows, unit_keys: pd.Index) -> ByUnit:
    """Count units that lost rows.

    Parameters
    ----------
    units : pandas.Series
        Unit of every row given, missing where it is not known.
    rows : ndarray of int or None
        Positions of the rows used; None for all.
    unit_keys : pandas.Index
        Units of the rows used.

    Returns
    -------
    ByUnit

    Examples
    --------
    >>> hives = pd.Series(["a", "a", "b", "c", "c", "c", None])
    >>> losses_by_unit(hives, np.array([0, 1, 3]), pd.Index(["a", "c"]))
    ByUnit(units_given=3, units_without_usable_row=1, units_with_dropped_rows=1, most_rows_dropped=2)
    """
    if rows is None:
        return ByUnit(len(unit_keys), 0, 0, 0)
    lost = np.ones(len(units), dtype=bool)
    lost[rows] = False
    codes, found = pd.factorize(units[lost].astype(object))
    counts = np.bincount(codes[codes >= 0], minlength=len(found))
    kept = pd.Index(found, dtype=object).isin(unit_keys.astype(object))
    gone, short = int((~kept).sum()), int(kept.sum())
    return ByUnit(len(unit_keys) + gone, gone, short, int(counts[kept].max(initial=0)))
