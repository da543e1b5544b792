"""A document as blocks: what an appendix says, before any format is chosen."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = [
    "Block",
    "Bullets",
    "Cell",
    "Code",
    "Document",
    "Formula",
    "Heading",
    "Paragraph",
    "Picture",
    "Table",
]

Cell = str | int | float
"""Text, a count, or a number that the renderer rounds."""


@dataclass(frozen=True, slots=True)
class Heading:
    """The title of a section; level 1 is the highest below the title of the document."""

    text: str
    level: int = 1


@dataclass(frozen=True, slots=True)
class Paragraph:
    """Plain text in Unicode, without markup of any format; `tone` is ``"caution"`` for what must not be overlooked."""

    text: str
    tone: str = "plain"


@dataclass(frozen=True, slots=True)
class Bullets:
    """Points, each plain text."""

    items: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Formula:
    """A displayed formula: in LaTeX, and in plain Unicode for formats without it and for readers of text."""

    tex: str
    text: str


@dataclass(frozen=True, slots=True)
class Code:
    """Lines to be typed as they stand."""

    text: str


@dataclass(frozen=True, slots=True)
class Table:
    """A table of unrounded cells.

    Attributes
    ----------
    name : str
        Lower-case letters, digits and hyphens: names the file of a download and the anchor.
    caption : str
        Plain text.
    header : tuple of str
        Headings of the columns.
    rows : tuple of tuple of Cell
        Floats are rounded to `digits` significant digits where they are shown, and whole in a download.
    digits : int
        Significant digits of floats.
    notes : tuple of str
        Plain text under the table.
    """

    name: str
    caption: str
    header: tuple[str, ...]
    rows: tuple[tuple[Cell, ...], ...]
    digits: int = 4
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Picture:
    """A figure as SVG, with its alternative in words and a caption."""

    name: str
    svg: str
    alternative: str
    caption: str


Block = Heading | Paragraph | Bullets | Formula | Code | Table | Picture


@dataclass(frozen=True, slots=True)
class Document:
    """A title and blocks in order."""

    title: str
    blocks: tuple[Block, ...]
