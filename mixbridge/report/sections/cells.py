"""Tables of a document from rows of a record."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from mixbridge.report.document import Cell, Table

__all__ = ["table_of"]


def table_of(
    name: str,
    caption: str,
    rows: Sequence[Mapping[str, Any]],
    columns: Mapping[str, str],
    *,
    digits: int = 4,
    notes: tuple[str, ...] = (),
) -> Table:
    """Return some columns of rows under headings.

    Parameters
    ----------
    name, caption : str
        As in `Table`.
    rows : sequence of mapping
        Plain values: numbers, text, None, ``"inf"``.
    columns : mapping of str to str
        Key -> heading, in order.
    digits : int
        Significant digits shown.
    notes : tuple of str

    Returns
    -------
    Table
        Without columns that hold nothing.
    """
    used = [key for key in columns if not rows or any(row.get(key) not in ("", None) for row in rows)]
    cells = tuple(tuple(_cell(key, row.get(key)) for key in used) for row in rows)
    return Table(name, caption, tuple(columns[key] for key in used), cells, digits, notes)


_SPACED = ("quantity", "method", "test")
"""Columns of keys, shown with spaces for underscores."""


_COUNTS = ("df", "df_denominator", "parameters")
"""Columns whose whole numbers are shown as such."""


def _cell(key: str, value: Any) -> Cell:
    if key in _SPACED and isinstance(value, str):
        return value.replace("_", " ")
    if value is None:
        return "-"
    if key in _COUNTS and isinstance(value, float) and value.is_integer():
        return int(value)
    if isinstance(value, bool):
        return "yes" if value else "no"
    return value if isinstance(value, int | float) else str(value)
