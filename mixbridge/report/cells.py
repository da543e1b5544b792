"""Cells of a table as every format shows them, and names that occur once in a document."""

from __future__ import annotations

import re
from numbers import Integral, Real

from mixbridge.display import visible
from mixbridge.display.text import number
from mixbridge.report.document import Table

__all__ = ["Anchors", "cell_text", "full_text", "numeric_columns", "wordy"]

SENTENCE, ENTRY = 80, 320
"""Characters of a cell that make it a sentence; characters of a row, on average, that make it an entry."""


def cell_text(cell: object, digits: int) -> str:
    """Return a cell as shown: a count whole, a number rounded to significant digits, a text on one line."""
    if isinstance(cell, bool):
        return "yes" if cell else "no"
    if isinstance(cell, str):
        return visible(cell)
    if isinstance(cell, Integral):
        return str(int(cell))
    return number(float(cell), digits) if isinstance(cell, Real) else visible(str(cell))


def full_text(cell: object) -> str | None:
    """Return a number with all its digits, so that reading it gives it back; None for a text."""
    if isinstance(cell, bool | str) or not isinstance(cell, Real):
        return None
    return str(int(cell)) if isinstance(cell, Integral) else repr(float(cell))


def numeric_columns(table: Table) -> frozenset[int]:
    """Return the columns that are set flush right: at least half of what they hold is numbers."""
    found = set()
    for at in range(len(table.header)):
        cells = [row[at] for row in table.rows if row[at] not in {"", "-"}]
        numbers = sum(full_text(cell) is not None for cell in cells)
        if numbers and 2 * numbers >= len(cells):
            found.add(at)
    return frozenset(found)


def wordy(table: Table) -> bool:
    """Return whether rows hold so many words that they are better read as entries than across columns."""
    if not table.rows:
        return False
    words = [[len(cell) if isinstance(cell, str) else 0 for cell in row] for row in table.rows]
    sentences = sum(max(column) > SENTENCE for column in zip(*words, strict=True))
    return sentences >= 2 and sum(map(sum, words)) > ENTRY * len(words)


class Anchors:
    """Names made of lower-case ASCII letters, digits and hyphens, each given once."""

    def __init__(self) -> None:
        self._given: set[str] = set()

    def give(self, prefix: str, text: str) -> str:
        """Return a name that was not given before; the same calls in the same order give the same names."""
        stem = re.sub(r"[^a-z0-9]+", "-", text.lower()).strip("-")[:60].strip("-")
        stem = f"{prefix}-{stem}" if stem else prefix
        name, more = stem, 2
        while name in self._given:
            name, more = f"{stem}-{more}", more + 1
        self._given.add(name)
        return name
