"""The account of every row: given, used, dropped and why."""

from __future__ import annotations

from dataclasses import dataclass, field

import pandas as pd

__all__ = ["Accounting", "ByUnit"]


@dataclass(frozen=True, slots=True)
class ByUnit:
    """How dropped rows are spread over units; rows without a unit are in no unit.

    Parameters
    ----------
    units_given : int
        Units with at least one row in the data.
    units_without_usable_row : int
        Those that lost all their rows.
    units_with_dropped_rows : int
        Those that lost some rows and kept some.
    most_rows_dropped : int
        Most rows lost by one of these.
    """

    units_given: int
    units_without_usable_row: int
    units_with_dropped_rows: int
    most_rows_dropped: int


@dataclass(frozen=True, slots=True)
class Accounting:
    """What became of the rows.

    A dropped row is counted under one cause, the first that applies in the order: missing unit, missing
    period,
    missing outcome, missing covariate (the first in the order of the formula), not a number in a term.

    Parameters
    ----------
    rows_given, rows_used : int
        Rows of the data, and rows that enter the fits.
    dropped : tuple of (str, str, int)
        Cause, column (or term), and number of rows; causes without rows are left out.
    missing : tuple of (str, int)
        Missing values of each column used, whether or not the row was dropped for another cause first.
    notes : tuple of str
        What was done with the columns on the way, for example levels left out because no row used has them.
    by_unit : ByUnit or None
        How dropped rows are spread over units, where it was counted; it takes no part in comparisons.
    """

    rows_given: int
    rows_used: int
    dropped: tuple[tuple[str, str, int], ...] = ()
    missing: tuple[tuple[str, int], ...] = ()
    notes: tuple[str, ...] = ()
    by_unit: ByUnit | None = field(default=None, compare=False)

    @property
    def rows_dropped(self) -> int:
        """Rows given that are not used."""
        return self.rows_given - self.rows_used

    @property
    def table(self) -> pd.DataFrame:
        """Dropped rows by cause: columns ``cause``, ``column``, ``rows``."""
        return pd.DataFrame(list(self.dropped), columns=["cause", "column", "rows"]).astype(
            {"cause": object, "column": object, "rows": int}
        )

    @property
    def missing_table(self) -> pd.DataFrame:
        """Missing values by column used: columns ``column``, ``rows``."""
        return pd.DataFrame(list(self.missing), columns=["column", "rows"]).astype(
            {"column": object, "rows": int}
        )

    def lines(self) -> list[str]:
        """Return the account as lines of text, one per cause, then the notes."""
        if not self.rows_dropped:
            first = [f"{self.rows_given} rows given, all used."]
        else:
            first = [f"{self.rows_given} rows given, {self.rows_used} used, {self.rows_dropped} dropped:"]
        causes = [
            f"  {cause}: {rows}" if cause.endswith(column) else f"  {cause} ({column}): {rows}"
            for cause, column, rows in self.dropped
        ]
        return first + causes + [f"  note: {note}" for note in self.notes]
