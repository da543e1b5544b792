"""A table as LaTeX that breaks across pages and stays within the width of the page; wordy ones entry by entry."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from mixbridge.report.cells import cell_text, numeric_columns, wordy
from mixbridge.report.document import Table
from mixbridge.report.tex_text import tex_text

__all__ = ["tex_table"]

SIZES = (("small", 50.5, 0.75), ("footnotesize", 55.0, 0.9), ("scriptsize", 59.0, 1.0))
"""Sizes of type; the width of the text in em of that size (166 mm, as in the preamble); and the share of it which
columns at their narrowest may take before a smaller size is tried."""

GAP = 0.7
"""Space between two columns, in em."""

WRAPPED = 5.5
"""A column of text may be as narrow as this many em, if its words allow."""

SHORT = 10.5
"""A column of text up to this many em is wrapped only where nothing else helps."""

LONGEST = 14.0
"""No word makes a column wider than this many em: longer ones are broken."""

_NARROW, _WIDE = frozenset("ijltfr.,:;'|!()[] "), frozenset("mwMW@%")


@dataclass(frozen=True, slots=True)
class _Column:
    """One column: all cells in LaTeX, the heading first; widths in em."""

    cells: tuple[str, ...]
    right: bool
    natural: float
    kept: float
    least: float


def tex_table(table: Table) -> str:
    """Return a table as one or more ``longtable`` environments.

    Type shrinks from small to scriptsize, then columns of text are wrapped; columns that still find no room go to
    further tables that repeat the first column. A table with sentences in several columns is set entry by entry.

    Parameters
    ----------
    table : Table

    Returns
    -------
    str
        ASCII. Its packages are ``array`` and ``longtable``; ``entries`` and the rules are in the preamble.
    """
    notes = [f"{{\\footnotesize {tex_text(note)}\\par}}" for note in table.notes]
    if wordy(table):
        return "\n".join([_entries(table), *notes])
    right = numeric_columns(table)
    columns = [
        _column([table.header[at], *(cell_text(row[at], table.digits) for row in table.rows)], at in right)
        for at in range(len(table.header))
    ]
    if not columns:
        return ""
    groups = _groups(columns)
    parts = []
    for place, group in enumerate(groups):
        caption = table.caption
        if len(groups) > 1:
            caption = (
                f"{caption} (Part {place + 1} of {len(groups)}.)"
                if place == 0
                else f"{caption} (Part {place + 1}.)"
            )
        parts.append(_longtable(caption, group))
    return "\n".join([*parts, *notes])


def _column(texts: Sequence[str], right: bool) -> _Column:
    natural = max(_width(text) for text in texts)
    # The heading of a column of numbers may wrap between words; numbers may not.
    pieces = [texts[0], *([] if right else texts[1:])]
    word = min(max(_width(word) for text in pieces for word in text.replace("_", "_ ").split(" ")), LONGEST)
    least = max([word, *map(_width, texts[1:])]) if right else min(natural, max(WRAPPED, word))
    kept = natural if natural <= SHORT and not right else least
    return _Column(tuple(map(tex_text, texts)), right, natural + 0.2, kept + 0.2, least + 0.2)


def _entries(table: Table) -> str:
    """Return each row as a paragraph: its first cell, then headings and cells."""
    labels = [tex_text(text) for text in table.header]
    items = []
    for row in table.rows:
        first, *cells = (tex_text(cell_text(cell, table.digits)) for cell in row)
        parts = [
            rf"\emph{{{label}:}} {cell}"
            for label, cell in zip(labels[1:], cells, strict=True)
            if cell not in {"", "-"}
        ]
        items.append(rf"\item[{{{first}}}] " + "; ".join(parts))
    lines = [rf"\begin{{entries}}{{{tex_text(table.caption)}}}", *items, r"\end{entries}"]
    return "\n".join(lines)


def _width(text: str) -> float:
    """Return about how wide a text is set, in em; a little more rather than less."""
    return sum(
        0.31
        if sign in _NARROW
        else 0.86
        if sign in _WIDE
        else 0.72
        if sign.isupper() or ord(sign) > 0x24F
        else 0.53
        for sign in text
    )


def _groups(columns: list[_Column]) -> list[list[_Column]]:
    """Return the columns in groups, each of which finds room at the smallest size; most often one."""
    room = SIZES[-1][1]
    groups, used = [[columns[0]]], columns[0].least
    for column in columns[1:]:
        if len(groups[-1]) > 1 and used + GAP + column.least > room:
            groups.append([columns[0]])
            used = columns[0].least
        groups[-1].append(column)
        used += GAP + column.least
    return groups


def _longtable(caption: str, columns: list[_Column]) -> str:
    size, widths = _widths(columns)
    kinds = "".join(
        rf">{{\{'raggedleft' if column.right else 'raggedright'}\arraybackslash}}p{{{width:.2f}em}}"
        for column, width in zip(columns, widths, strict=True)
    )
    heading, *rows = (
        " & ".join(cells) + r" \\" for cells in zip(*(column.cells for column in columns), strict=True)
    )
    count = len(columns)
    return "\n".join(
        [
            rf"{{\{size}\setlength{{\tabcolsep}}{{{GAP / 2}em}}",
            rf"\begin{{longtable}}{{@{{}}{kinds}@{{}}}}",
            rf"\caption{{{tex_text(caption)}}}\\",
            r"\thickrule",
            heading,
            r"\thinrule",
            r"\endfirsthead",
            r"\thickrule",
            heading,
            r"\thinrule",
            r"\endhead",
            r"\thickrule",
            rf"\multicolumn{{{count}}}{{@{{}}r@{{}}}}{{\footnotesize continued on the next page}}\\",
            r"\endfoot",
            r"\thickrule",
            r"\endlastfoot",
            *rows,
            r"\end{longtable}}",
        ]
    )


def _widths(columns: list[_Column]) -> tuple[str, list[float]]:
    """Return the size of type and the widths of columns in em."""
    gaps = GAP * (len(columns) - 1)
    natural, kept, least = zip(
        *((column.natural, column.kept, column.least) for column in columns), strict=True
    )
    for narrow in (kept, least):
        for size, room, wrapped in SIZES:
            if sum(natural) + gaps <= room:
                return size, list(natural)
            if sum(narrow) + gaps <= wrapped * room:
                return size, _shared(natural, narrow, room - gaps - sum(narrow))
    size, room, _ = SIZES[-1]
    shrink = (room - gaps) / sum(
        least
    )  # one or two columns that are wider than the page: their words are broken
    return size, [width * shrink for width in least]


def _shared(natural: Sequence[float], least: Sequence[float], spare: float) -> list[float]:
    """Give the room that is left to the columns that want more, in proportion to what they want."""
    wanted = [most - few for most, few in zip(natural, least, strict=True)]
    share = min(1.0, spare / sum(wanted)) if sum(wanted) else 0.0
    return [few + share * more for few, more in zip(least, wanted, strict=True)]
