"""Every text of a document, in order: what it says apart from formulas and commands."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from mixbridge.report.document import Block, Bullets, Document, Heading, Paragraph, Picture, Table

__all__ = ["texts_of"]


def texts_of(document: Document | Iterable[Block]) -> Iterator[str]:
    """Yield the texts of a document: headings, paragraphs, points, captions, headings and texts of tables, notes.

    Parameters
    ----------
    document : Document or iterable of Block

    Yields
    ------
    str
        Numbers in cells, formulas and commands are no texts.
    """
    for block in document.blocks if isinstance(document, Document) else document:
        match block:
            case Heading(text) | Paragraph(text):
                yield text
            case Bullets(items):
                yield from items
            case Table():
                yield block.caption
                yield from block.header
                yield from (cell for row in block.rows for cell in row if isinstance(cell, str))
                yield from block.notes
            case Picture(_, _, alternative, caption):
                yield caption
                yield alternative
