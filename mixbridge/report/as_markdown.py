"""A document as Markdown with the tables that code hosts show."""

from __future__ import annotations

import re
from collections.abc import Sequence

from mixbridge.display import visible
from mixbridge.report.cells import cell_text, numeric_columns
from mixbridge.report.document import (
    Block,
    Bullets,
    Code,
    Document,
    Formula,
    Heading,
    Paragraph,
    Picture,
    Table,
)

__all__ = ["markdown"]

PADDED = 48
"""Cells up to this width are padded, so that columns line up in the source too."""

_INLINE = {
    **{sign: f"\\{sign}" for sign in "\\`*_[]|~^"},
    "&": "&amp;",
    "<": "&lt;",
    ">": "&gt;",
    "$": "&#36;",  # some hosts set what stands between two of them as a formula
}
_SIGNS = re.compile(r"[\\`*_\[\]|~^&<>$]")
_START = re.compile(r"^(?:[-+#=](?=\s|$)|[-+#=]{2,}|#)|^(\d{1,9})([.)])(?=\s|$)")
_LINKS = re.compile(r"(?<=\w)(:)(?=//)|(?<=\bwww)(\.)", re.IGNORECASE)


def markdown(document: Document) -> str:
    r"""Return a document as Markdown.

    Headings begin with ``#``, cautions are quoted, formulas and commands stand in fenced blocks, and a picture is
    given by its caption and its alternative in words, since Markdown holds no picture. What a text holds is shown
    and never read as markup: no raw HTML, no link, no emphasis comes out of it. Numbers keep the plain
    hyphen-minus, so they can be read back.

    Parameters
    ----------
    document : Document

    Returns
    -------
    str
        Ends with one newline. The same document gives the same text.

    Examples
    --------
    >>> from mixbridge.report.document import Document, Paragraph
    >>> print(markdown(Document("Methods", (Paragraph("Units: a_1 and <b>."),))))
    # Methods
    <BLANKLINE>
    Units: a\_1 and &lt;b&gt;.
    <BLANKLINE>
    """
    parts = [f"# {_heading(document.title)}", *(_block(block) for block in document.blocks)]
    return "\n\n".join(part for part in parts if part) + "\n"


def _block(block: Block) -> str:  # noqa: PLR0911
    match block:
        case Heading(text, level):
            return f"{'#' * min(max(level, 1) + 1, 6)} {_heading(text)}"
        case Paragraph(text, tone):
            return f"> {_line(text)}" if tone == "caution" else _line(text)
        case Bullets(items):
            return "\n".join(f"- {_line(item)}" for item in items)
        case Formula(_, text):
            return _fenced(text, "text")
        case Code(text):
            return _fenced(text, "text")
        case Table():
            return _table(block)
        case Picture(_, _, alternative, caption):
            return f"**Figure.** {_inline(caption)}\n\nIn words: {_inline(alternative)}"


def _table(table: Table) -> str:
    """Return a table with its caption above and its notes below."""
    right = numeric_columns(table)
    cells = [
        [_inline(text) for text in table.header],
        *([_inline(cell_text(cell, table.digits)) for cell in row] for row in table.rows),
    ]
    widths = [
        max([3, *(len(row[at]) for row in cells if len(row[at]) <= PADDED)])
        for at in range(len(table.header))
    ]
    rule = [f"{'-' * (width - 1)}:" if at in right else "-" * width for at, width in enumerate(widths)]

    def line(row: Sequence[str]) -> str:
        padded = (
            text.rjust(width) if at in right else text.ljust(width)
            for at, (text, width) in enumerate(zip(row, widths, strict=True))
        )
        return f"| {' | '.join(padded)} |"

    lines = [line(cells[0]), f"| {' | '.join(rule)} |", *(line(row) for row in cells[1:])]
    caption = f"**{_inline(table.caption.strip())}**\n\n" if table.caption.strip() else ""
    notes = "".join(f"\n\n{_line(note)}" for note in table.notes)
    return caption + "\n".join(lines) + notes


def _fenced(text: str, kind: str) -> str:
    """Return lines between fences longer than any run of backticks in them."""
    shown = visible(text, lines=True)
    longest = max((len(run) for run in re.findall("`+", shown)), default=0)
    fence = "`" * max(3, longest + 1)
    return f"{fence}{kind}\n{shown}\n{fence}"


def _heading(text: str) -> str:
    """Return the text of a heading, where number signs at the end would close it."""
    return re.sub(r"(?<=[ #])#$", r"\\#", _line(text))


def _line(text: str) -> str:
    """Return a text that begins a line, where some signs would begin a list, a heading or a rule."""
    shown = visible(text)
    start = _START.match(shown)
    if start is None:
        return _escaped(shown)
    if start[1]:
        return f"{start[1]}\\{start[2]}{_escaped(shown[start.end() :])}"
    return f"\\{start[0]}{_escaped(shown[start.end() :])}"


def _inline(text: str) -> str:
    """Return a text on one line whose signs stand for themselves."""
    return _escaped(visible(text))


def _escaped(shown: str) -> str:
    return _LINKS.sub(lambda match: f"\\{match[0]}", _SIGNS.sub(lambda match: _INLINE[match[0]], shown))
