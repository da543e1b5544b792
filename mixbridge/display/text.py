"""Numbers and plain-text tables. Nothing is computed here."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from textwrap import wrap

import numpy as np
import pandas as pd

__all__ = [
    "WIDTH",
    "by_reason",
    "columns",
    "frame_lines",
    "interval",
    "number",
    "sentence",
    "shorten",
    "signed",
    "span",
    "wrapped",
]

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


def span(low: int, high: int) -> str:
    """Return ``low to high``, or the one number that both are.

    Examples
    --------
    >>> span(1, 9), span(4, 4)
    ('1 to 9', '4')
    """
    return f"{low} to {high}" if low < high else f"{low}"


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


def frame_lines(table: pd.DataFrame, *, most: int = 40, widest: int = 30) -> list[str]:
    """Lay out a table as aligned lines, without its index.

    Parameters
    ----------
    table : pandas.DataFrame
        Numbers are set flush right with four significant digits; underscores in its headings become spaces.
    most : int
        Rows shown; how many more there are is said.
    widest : int
        Characters of a cell.

    Returns
    -------
    list of str
        Empty if the table has no row.

    Examples
    --------
    >>> for line in frame_lines(pd.DataFrame({"term": ["forage"], "standard_error": [0.025]})):
    ...     print(line)
      term    standard error
      forage         0.02500
    """
    if table.empty:
        return []
    shown = table.head(most)
    right = [at for at, kind in enumerate(shown.dtypes) if kind.kind in "iuf"]
    rows = [[str(name).replace("_", " ") for name in shown.columns]]
    rows += [[_cell(value, widest) for value in row] for row in shown.itertuples(index=False)]
    more = len(table) - len(shown)
    return columns(rows, right=right) + ([f"  and {more} more rows"] if more else [])


def _cell(value: object, widest: int) -> str:
    if isinstance(value, bool | np.bool_):
        return "yes" if value else "no"
    if isinstance(value, int | np.integer):
        return str(value)
    if isinstance(value, float | np.floating):
        return number(float(value))
    return shorten("-" if value is None else str(value), widest)


def sentence(text: str) -> str:
    """Return a sentence with a full stop, and with a capital unless it begins with a key of the program.

    Examples
    --------
    >>> sentence("few units"), sentence("first_difference is left out")
    ('Few units.', 'first_difference is left out.')
    """
    end = "" if text.endswith((".", "!", "?", ":")) else "."
    key = "_" in text.split(" ", 1)[0]
    return f"{text if key else text[:1].upper() + text[1:]}{end}"


def wrapped(texts: Iterable[str], first: str = "", rest: str = "") -> list[str]:
    """Break texts into lines no wider than a screen, each text on lines of its own.

    Parameters
    ----------
    texts : iterable of str
    first, rest : str
        What the first line of a text, and each further one, begins with.
    """
    return [
        line
        for text in texts
        for line in wrap(
            text,
            WIDTH,
            initial_indent=first,
            subsequent_indent=rest,
            break_long_words=False,
            break_on_hyphens=False,
        )
    ]


def by_reason(pairs: Iterable[tuple[str, str]]) -> list[str]:
    """Return ``names: reason.`` for every reason once, from pairs of name and reason.

    Examples
    --------
    >>> by_reason([("age", "does not vary"), ("x", "no mean"), ("sex", "does not vary")])
    ['age, sex: does not vary.', 'x: no mean.']
    """
    found: dict[str, list[str]] = {}
    for name, reason in pairs:
        found.setdefault(reason, []).append(name)
    return [f"{', '.join(names)}: {reason}." for reason, names in found.items()]
