"""A document as a LaTeX file."""

from __future__ import annotations

from importlib.resources import files

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
from mixbridge.report.tex_table import tex_table
from mixbridge.report.tex_text import tex_lines, tex_text

__all__ = ["latex"]

_LEVELS = ("section", "subsection", "subsubsection", "paragraph")


def latex(document: Document) -> str:
    r"""Return a document as a whole LaTeX file.

    The class is ``article``; the packages are fontenc, inputenc, textcomp, amsmath, amssymb, array, longtable,
    graphicx and geometry, and lmodern where it is installed. The file is ASCII: Greek letters, signs and accents are
    written as commands, and a character for which ordinary LaTeX has nothing, such as a letter of Arabic, by its code
    point. Every sign in a text stands for itself. A hyphen before a digit is set as a minus sign; the file has
    ``\ensuremath{-}`` there, in tables too. A picture is given by its caption and its alternative in words.

    Parameters
    ----------
    document : Document
        The LaTeX of its formulas is taken as it stands; whoever composes a formula escapes names in it with
        `mixbridge.report.tex_text.tex_text`.

    Returns
    -------
    str
        Ends with one newline. The same document gives the same text.

    Examples
    --------
    >>> from mixbridge.report.document import Document, Paragraph
    >>> print(latex(Document("Methods", (Paragraph("100% of a_1"),))))  # doctest: +ELLIPSIS
    \documentclass[10pt,a4paper]{article}
    ...
    {\LARGE\raggedright Methods\par}
    \medskip
    <BLANKLINE>
    100\% of a\_\allowbreak{}1
    <BLANKLINE>
    \end{document}
    <BLANKLINE>
    """
    preamble = files("mixbridge.report").joinpath("page", "preamble.tex").read_text(encoding="utf-8")
    parts = [
        f"{preamble}\\begin{{document}}\n{{\\LARGE\\raggedright {tex_text(document.title)}\\par}}\n\\medskip",
        *(
            _block(block, after_heading=isinstance(before, Heading))
            for before, block in zip((None, *document.blocks), document.blocks, strict=False)
        ),
        "\\end{document}",
    ]
    return "\n\n".join(part for part in parts if part) + "\n"


def _block(block: Block, *, after_heading: bool) -> str:  # noqa: PLR0911
    match block:
        case Heading(text, level):
            name = _LEVELS[min(max(level, 1), len(_LEVELS)) - 1]
            room = "" if after_heading else r"\roomforheading"
            return rf"{room}\{name}{{{tex_text(text)}}}"
        case Paragraph(text, tone):
            body = tex_text(text)
            return f"\\begin{{caution}}\n{body}\n\\end{{caution}}" if tone == "caution" else body
        case Bullets(items):
            points = "\n".join(rf"\item {tex_text(item)}" for item in items)
            return (
                f"\\begin{{itemize}}\\setlength{{\\itemsep}}{{0pt}}\n{points}\n\\end{{itemize}}"
                if items
                else ""
            )
        case Formula(tex, _):
            return f"\\[\n\\fitted{{{tex}}}\n\\]"
        case Code(text):
            return f"{{\\small\\ttfamily\\raggedright\n{tex_lines(text)}\\par}}"
        case Table():
            return tex_table(block)
        case Picture(_, _, alternative, caption):
            return rf"\textbf{{Figure.}} {tex_text(caption)} In words: {tex_text(alternative)}"
