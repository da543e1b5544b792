"""Ask a database about the periods of its rows."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from mixbridge.errors import DataError
from mixbridge.panel.roles import periods_of
from mixbridge.sources.arrow import to_pandas
from mixbridge.sources.duckdb_source import RelationSource

__all__ = ["Steps", "differences_sql", "look_at_periods"]

_MOST_PERIODS = 100_000
_WHOLE = ("tinyint", "smallint", "integer", "bigint", "utinyint", "usmallint", "uinteger")
_IN_ORDER = "PARTITION BY k ORDER BY p"


@dataclass(frozen=True, slots=True)
class Steps:
    """Periods, and steps between neighbouring rows of a unit.

    Parameters
    ----------
    note : str
        How periods were read, or why they have no order.
    reason : str or None
        Why rows cannot be differenced; None if they can.
    jumps : mapping of int to int
        Period steps between neighbouring rows of a unit, and how often each occurs.
    """

    note: str
    reason: str | None
    jumps: Mapping[int, int] = field(default_factory=dict)


def look_at_periods(source: RelationSource, sql: str, unit: str, period: str, kind: str) -> Steps:
    """Check that no pair of unit and period is repeated, and count the steps between neighbouring rows.

    Parameters
    ----------
    source : RelationSource
    sql : str
        Selects the rows used, unit ``k`` and period ``p`` among their columns.
    unit, period : str
        Names of the columns, for messages.
    kind : str
        Type of the period column.

    Raises
    ------
    DataError
        If a pair is repeated.
    """
    answer = source.table(
        "SELECT CAST(k AS VARCHAR) AS k, CAST(p AS VARCHAR) AS p FROM "
        f"(SELECT k, p FROM ({sql}) GROUP BY k, p HAVING count(*) > 1 LIMIT 1)"
    )
    if answer.num_rows:
        row = answer.to_pylist()[0]
        raise DataError(
            f"Rows repeat a pair of unit and period, for example ({unit} {row['k']}, {period} {row['p']}). Aggregate "
            "them to one row per pair, correct the keys, or leave period out if rows within a unit have no order."
        )
    return _steps(source, sql, unit, period, kind)


def _steps(source: RelationSource, sql: str, unit: str, period: str, kind: str) -> Steps:
    distinct = to_pandas(
        source.table(f"SELECT DISTINCT p FROM ({sql}) ORDER BY p LIMIT {_MOST_PERIODS + 1}")
    )["p"]
    if len(distinct) > _MOST_PERIODS:
        note = f"{period}: no order in steps, because there are more than {_MOST_PERIODS:,} of them"
        return Steps(note, note)
    positions, note = periods_of(
        period, distinct, np.arange(len(distinct)), unit, pd.RangeIndex(len(distinct))
    )
    if positions is None:
        return Steps(note, note)
    if kind not in _WHOLE:
        return Steps(
            note,
            f"the database counts steps between whole numbers, and {period} is of the type {kind}; make it a whole "
            "number in the relation, or pass chunks=False",
        )
    answer = source.table(
        f"SELECT step, count(*) AS often FROM (SELECT p::BIGINT - lag(p::BIGINT) OVER ({_IN_ORDER}) AS step "
        f"FROM ({sql})) WHERE step IS NOT NULL GROUP BY step ORDER BY step"
    )
    jumps = {int(row["step"]): int(row["often"]) for row in answer.to_pylist()}
    return Steps(note, None, jumps)


def differences_sql(sql: str, columns: int, step: int) -> str:
    """Return the query for differences of rows of a unit that are so many steps apart and next to each other."""
    listed = ", ".join(f"x{j} - lag(x{j}) OVER w AS d{j}" for j in range(columns))
    names = ", ".join(f"d{j}" for j in range(columns))
    return (
        f"SELECT {names} FROM (SELECT {listed}, p::BIGINT - lag(p::BIGINT) OVER w AS step FROM ({sql}) "
        f"WINDOW w AS ({_IN_ORDER})) WHERE step = {int(step)}"
    )
