"""Values of design columns by unit and period, and which periods each unit has."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import DataError, IdentificationError, OptionError
from mixbridge.moments import OpenMoments
from mixbridge.panel import Panel
from mixbridge.panel.absent import Apart

__all__ = ["PeriodTable", "period_table", "periods_of_panel"]

FloatArray = NDArray[np.float64]
MOST_CELLS = 2 * 10**8
"""Cells of the table beyond which it is refused: 1.6 GB."""


@dataclass(frozen=True, slots=True, eq=False)
class PeriodTable:
    """Design columns by unit and period.

    Attributes
    ----------
    periods : ndarray of int64, shape (T,)
        Ordinals of the periods, ascending.
    values : ndarray of shape (N, T, k)
        NaN where a unit has no row; units in the order of the open moments.
    present : ndarray of bool, shape (N, T)
    columns : tuple of str
        Names of the k columns.
    """

    periods: NDArray[np.int64]
    values: FloatArray
    present: NDArray[np.bool_]
    columns: tuple[str, ...]

    @property
    def same_for_all(self) -> NDArray[np.bool_]:
        """Which columns take one value in each period for all units seen in it: period indicators, trends."""
        low = np.where(self.present[:, :, None], self.values, np.inf).min(axis=0)
        high = np.where(self.present[:, :, None], self.values, -np.inf).max(axis=0)
        size = np.maximum(np.abs(low), np.abs(high)).max(axis=0)
        return np.asarray((high - low <= 8.0 * np.finfo(float).eps * size).all(axis=0))


def periods_of_panel(panel: Panel, what: str) -> NDArray[np.int64]:
    """Return the ordinals of the periods seen.

    Parameters
    ----------
    panel : Panel
    what : str
        What needs them, for the message.

    Raises
    ------
    OptionError
        If the panel has no ordered periods, or its rows are not held.
    """
    if panel.period_name is None:
        raise OptionError(f"{what} needs the column of the periods: name it with period=.")
    if isinstance(panel, Apart):
        raise OptionError(f"{what} cannot be computed: {panel.why_apart}")
    if panel.period_ordinals is None:
        raise OptionError(f"{what} needs ordered periods ({panel.period_note}).")
    return np.unique(panel.period_ordinals)


def period_table(panel: Panel, opened: OpenMoments, columns: tuple[str, ...], what: str) -> PeriodTable:
    """Gather columns by unit and period in one pass over the rows.

    Parameters
    ----------
    panel, opened
        Of one study.
    columns : tuple of str
        Design columns.
    what : str
        What needs the table, for messages.

    Returns
    -------
    PeriodTable

    Raises
    ------
    OptionError
        If there are no ordered periods.
    IdentificationError
        If some unit has several rows in a period.
    DataError
        If the table would be too large.
    """
    periods = periods_of_panel(panel, what)
    units = len(opened.keys)
    cells = units * periods.size * max(len(columns), 1)
    if cells > MOST_CELLS:
        raise DataError(
            f"{what} needs a table of {units:,} units x {periods.size:,} periods x {len(columns)} columns, which would "
            f"take {cells * 8 / 2**30:.1f} GiB. Use fewer columns, or the form with unit means."
        )
    assert panel.period_ordinals is not None, "checked in periods_of_panel"
    period = np.searchsorted(periods, panel.period_ordinals)
    unit = opened.keys.get_indexer(panel.unit_keys)[panel.codes]
    seen = np.bincount(unit * periods.size + period, minlength=units * periods.size)
    if seen.max() > 1:
        raise IdentificationError(
            f"{what} needs one row per unit and period; some unit has several rows in one period. Aggregate them, or "
            "use the form with unit means."
        )
    picks = [panel.names.index(name) for name in columns]
    values = np.full((units, periods.size, len(columns)), np.nan)
    for start, x, y in panel.blocks():
        rows = slice(start, start + y.size)
        values[unit[rows], period[rows]] = x[:, picks]
    return PeriodTable(periods, values, seen.reshape(units, periods.size) > 0, columns)
