"""A panel whose sums per unit a database has taken."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError, OptionError
from mixbridge.panel.absent import Apart
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.pushed_order import Steps, differences_sql
from mixbridge.panel.pushed_query import Query, columns_of, fetched_keys, key_sql

__all__ = ["PushedPanel"]

FloatArray = npt.NDArray[np.float64]
CodeArray = npt.NDArray[np.intp]


@dataclass(frozen=True, eq=False)
class PushedPanel(Apart):
    """A panel whose sums per unit a database has taken; rows are streamed from it when they are asked for.

    Parameters
    ----------
    formula : str
    query : Query
    N : int
        Number of units.
    keys : pandas.Index or None
        Unit keys by code; None where they were not kept.
    source_note : str or None
        How the rows were read.
    """

    formula: str
    query: Query = field(repr=False)
    N: int
    keys: pd.Index | None = field(repr=False)
    source_note: str | None

    @property
    def outcome(self) -> str:
        """Name of the left side."""
        return self.query.columns[-1]

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the design columns."""
        return self.query.columns[:-1]

    @property
    def terms(self) -> Mapping[str, slice]:
        """Columns of each term."""
        return self.query.terms

    @property
    def constant(self) -> int | None:
        """Place of the intercept column."""
        return self.query.constant

    @property
    def unit_name(self) -> str:
        """Column of the units."""
        return self.query.unit

    @property
    def period_name(self) -> str | None:
        """Column of the periods."""
        return self.query.period

    @property
    def period_note(self) -> str | None:
        """How periods were read, or why they have no order."""
        return None if self.query.steps is None else self.query.steps.note

    @property
    def order(self) -> Steps:
        """Steps between neighbouring rows of a unit."""
        reason = "no period given, so rows have no order to difference in; name the column with period="
        return self.query.steps or Steps(reason, reason)

    @property
    def accounting(self) -> Accounting:
        """What became of every row."""
        return self.query.account

    @property
    def n(self) -> int:
        """Number of rows used."""
        return self.query.account.rows_used

    @property
    def unit_keys(self) -> pd.Index:
        """Unit keys by code.

        Raises
        ------
        DataError
            If there were too many to keep.
        """
        if self.keys is None:
            raise DataError(
                "the keys of the units were not kept: there are too many for memory_limit. Ask this question of a "
                "study whose units fit."
            )
        return self.keys

    @property
    def why_apart(self) -> str:
        """Why, and what to do."""
        return (
            "the rows stay in the database and are never held together, which this question needs. Pass chunks=False "
            "to fetch them as one table, or a relation with a sample of whole units."
        )

    def blocks_with_codes(self, rows: int = 8192) -> Iterator[tuple[CodeArray, FloatArray, FloatArray]]:
        """Stream unit codes, design and outcome from the database, block by block.

        Parameters
        ----------
        rows : int
            Most rows per block.

        Raises
        ------
        DataError
            If the rows are not the same as when they were first read.
        """
        if rows < 1:
            raise OptionError(f"rows={rows!r}: a block has at least one row.")
        query, keys, seen = self.query, self.unit_keys, 0
        listed = ", ".join(f"x{j}" for j in range(len(query.asked)))
        for batch in query.source.stream(f"SELECT {key_sql(query)}, {listed} FROM ({query.sql})"):
            codes = np.asarray(keys.get_indexer(pd.Index(fetched_keys(query, batch)))).astype(np.intp)
            seen += len(codes)
            if len(codes) and codes.min() < 0:
                break
            z = columns_of(query, batch)
            for start in range(0, len(codes), rows):
                block = z[start : start + rows]
                yield (
                    codes[start : start + rows],
                    np.ascontiguousarray(block[:, :-1]),
                    np.ascontiguousarray(block[:, -1]),
                )
        if seen != self.n:
            raise DataError(
                "The relation is not what it was when it was first read: units or the number of rows differ. Do not "
                "change its tables while they are in use."
            )

    def blocks(self, rows: int = 8192) -> Iterator[tuple[int, FloatArray, FloatArray]]:
        """Stream position, design and outcome block by block."""
        start = 0
        for _, x, y in self.blocks_with_codes(rows):
            yield start, x, y
            start += len(y)

    def difference_rows(self, step: int) -> Iterator[FloatArray]:
        """Stream differences of rows of a unit that are so many period steps apart and next to each other.

        The database sorts the rows.

        Parameters
        ----------
        step : int
            Period steps.

        Yields
        ------
        numpy.ndarray of shape (m, len(names) + 1)
            Differences of the design columns and, last, of the outcome.
        """
        if self.order.reason is not None:
            raise OptionError(f"There are no differences: {self.order.reason}.")
        query = self.query
        for batch in query.source.stream(differences_sql(query.sql, len(query.asked), step)):
            yield columns_of(query, batch, "d")
