"""Numbers and plain-text tables. Nothing is computed here."""

from __future__ import annotations

import math
from collections.abc import Sequence

__all__ = ["WIDTH", "columns", "interval", "number", "shorten", "signed"]

WIDTH = 100
"""Widest line of a screen."""


def number(value: float, digits: int = 4) -> str:
    """Return a number with a given count of significant digits; a dash where there is none."""
    if math.isnan(value):
        return "-"
    if math.isinf(value):
        return "inf" if value > 0 else "-inf"
    if value == 0.0:
        return "0"
    if 1e-4 <= abs(value) < 1e6:
        places = max(0, digits - 1 - math.floor(math.log10(abs(value))))
        return f"{value:.{min(places, 12)}f}"
    return f"{value:.{digits - 1}e}"


def signed(value: float, digits: int = 2) -> str:
    """Return a number with its sign."""
    text = number(value, digits)
    return f"+{text}" if value > 0 else text


def interval(low: float, high: float, digits: int = 4) -> str:
    """Return ``low to high``."""
    return f"{number(low, digits)} to {number(high, digits)}"


def shorten(text: str, width: int) -> str:
    """Cut a text to a width, with an ellipsis in its middle so that both ends stay readable."""
    if len(text) <= width:
        return text
    head = (width - 1) // 2
    return f"{text[:head]}…{text[len(text) - (width - 1 - head) :]}"


def columns(
    rows: Sequence[Sequence[str]], right: Sequence[int] = (), indent: int = 2, gap: int = 2
) -> list[str]:
    """Lay out rows of cells as aligned lines.

    Parameters
    ----------
    rows : sequence of sequence of str
        The first one is the heading.
    right : sequence of int
        Columns set flush right.
    indent : int
        Spaces before each line.
    gap : int
        Spaces between columns.

    Returns
    -------
    list of str
        Lines without trailing spaces.
    """
    widths = [max(len(row[j]) for row in rows) for j in range(len(rows[0]))]
    lines = []
    for row in rows:
        cells = [
            cell.rjust(width) if j in right else cell.ljust(width)
            for j, (cell, width) in enumerate(zip(row, widths, strict=True))
        ]
        lines.append((" " * indent + (" " * gap).join(cells)).rstrip())
    return lines
