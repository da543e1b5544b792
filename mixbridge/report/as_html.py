"""A document as one page of HTML that holds everything it shows."""

from __future__ import annotations

import base64
import hashlib
import re
from collections.abc import Iterator, Mapping
from html import escape
from importlib.resources import files
from types import MappingProxyType

from mixbridge.display import visible
from mixbridge.report.cells import Anchors, cell_text, full_text, numeric_columns, wordy
from mixbridge.report.document import (
    Block,
    Bullets,
    Cell,
    Code,
    Document,
    Formula,
    Heading,
    Paragraph,
    Picture,
    Table,
)
from mixbridge.report.svg import inline_svg
from mixbridge.report.symbols import INDEXED, WRITTEN

__all__ = ["html"]

LISTED = 2
"""Levels of headings in the contents."""

WIDTHS = {"wrap": 24, "wide": 80, "essay": 240}
"""A text of more characters than these is broken over lines, and gets a wide or a very wide column."""

MANY = 12
"""A table of more columns than this is printed on a page of its own, on its side."""

BRIEF = 12
"""A table of up to this many rows is not broken across printed pages."""

_TYPES = {"json": "application/json", "csv": "text/csv", "md": "text/markdown"}
_INDEXED = re.compile(INDEXED)
# Letters of scripts written from right to left, with what stands between them.
_RIGHT_TO_LEFT = re.compile(
    "[\u0590-\u08ff\ufb1d-\ufdff\ufe70-\ufefe\U00010800-\U00010fff\U0001e800-\U0001efff]"
    "(?:[^A-Za-z\u00c0-\u024f\u0370-\u058f<>&]*[\u0590-\u08ff\ufb1d-\ufdff\ufe70-\ufefe\U00010800-\U00010fff\U0001e800-\U0001efff])?"
)


def html(document: Document, attachments: Mapping[str, str] = MappingProxyType({})) -> str:
    """Return a document as one page.

    Style, script and drawings are in the page and it asks for nothing from elsewhere, which its content security
    policy forbids too. It follows the light or dark scheme of the reader, is laid out for phones and for print, and
    is complete without its script, which lets tables be sorted and saved as CSV with all digits. In a saved table a
    text that a spreadsheet would run as a formula has an apostrophe before it. Numbers keep the plain hyphen-minus,
    so that what is copied is a number.

    Parameters
    ----------
    document : Document
    attachments : mapping of str to str
        Name of a file -> its text; offered for download at the foot of the page.

    Returns
    -------
    str
        The same document gives the same text.

    Examples
    --------
    >>> from mixbridge.report.document import Document, Paragraph
    >>> page = html(Document("Methods", (Paragraph("a < b"),)), {"record.json": "{}"})
    >>> "<p>a &lt; b</p>" in page, 'download="record.json"' in page
    (True, True)
    """
    style, script = (_part(name) for name in ("style.css", "script.js"))
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    policy = f"default-src 'none'; style-src 'unsafe-inline'; script-src 'sha256-{digest}'; img-src data:"
    anchors = Anchors()
    for name in ("content", "said", "top"):
        anchors.give(name, "")
    headings: list[tuple[int, str, str]] = []
    body = "\n".join(_block(block, anchors, headings) for block in document.blocks)
    title = visible(document.title) or "Document"
    return f"""<!DOCTYPE html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta http-equiv="Content-Security-Policy" content="{policy}">
<meta name="viewport" content="width=device-width, initial-scale=1">
<meta name="color-scheme" content="light dark">
<meta name="referrer" content="no-referrer">
<title>{escape(title)}</title>
<style>
{style}</style>
</head>
<body>
<a class="skip" href="#content">Skip to the text</a>
<header>
<h1>{_marked(title)}</h1>
</header>
{_contents(headings)}<main id="content" tabindex="-1">
{body}
</main>
<footer>
{_attached(attachments)}<p>Style, script, figures and tables are in this file; nothing is loaded from elsewhere.</p>
<p id="said" class="hidden" role="status"></p>
</footer>
<script>{script}</script>
</body>
</html>
"""


def _part(name: str) -> str:
    return files("mixbridge.report").joinpath("page", name).read_text(encoding="utf-8")


def _block(block: Block, anchors: Anchors, headings: list[tuple[int, str, str]]) -> str:  # noqa: PLR0911
    match block:
        case Heading(text, level):
            if not visible(text).strip():
                return ""
            # No level is left out on the way down, so that the outline can be walked.
            level = min(max(level, 1), headings[-1][0] + 1 if headings else 1, 5)
            name = anchors.give("section", text)
            headings.append((level, name, text))
            return f'<h{level + 1} id="{name}">{_marked(text)}</h{level + 1}>'
        case Paragraph(text, tone):
            kind = ' class="caution" role="note"' if tone == "caution" else ""
            return f"<p{kind}>{_marked(text)}</p>"
        case Bullets(items):
            return f"<ul>{''.join(f'<li>{_marked(item)}</li>' for item in items)}</ul>" if items else ""
        case Formula(_, text):
            return f'<div class="formula" role="math">{_formula(text)}</div>'
        case Code(text):
            return f"<pre><code>{_words_whole(visible(text, lines=True))}</code></pre>"
        case Table():
            return _table(block, anchors)
        case Picture(name, svg, alternative, caption):
            anchor = anchors.give("picture", name)
            drawing = inline_svg(svg, anchor, alternative)
            label = escape(visible(caption) or visible(name))
            return (
                f'<figure class="picture" id="{anchor}"><div class="scroll" role="group" tabindex="0" '
                f'aria-label="Figure: {label}">{drawing}</div><figcaption>{_marked(caption)}</figcaption></figure>'
            )


def _contents(headings: list[tuple[int, str, str]]) -> str:
    """Return the list of headings, or nothing where there are too few to be of use."""
    listed = [(level, name, text) for level, name, text in headings if level <= LISTED]
    if len(listed) < 3:
        return ""
    parts, at = [], 0
    for level, name, text in listed:
        parts.append("<ol>" * (level - at) if level > at else "</li>" + "</ol></li>" * (at - level))
        parts.append(f'<li><a href="#{name}">{_marked(text)}</a>')
        at = level
    parts.append("</li></ol>" * at)
    return f'<nav aria-label="Contents">\n<details open><summary>Contents</summary>{"".join(parts)}</details>\n</nav>\n'


def _table(table: Table, anchors: Anchors) -> str:
    """Return a table; a wordy one is laid out entry by entry, with roles that say what the layout no longer shows."""
    anchor = anchors.give("table", table.name)
    right, cards = numeric_columns(table), wordy(table)
    head = "".join(
        _element("columnheader", visible(text), cards, f"{_classes(text, at in right)}{_whole(text)}")
        for at, text in enumerate(table.header)
    )
    rows = "\n".join(
        f"<tr{_role('row', cards)}>"
        + "".join(
            _cell(cell, table.digits, at in right, first=at == 0, label=table.header[at] if cards else None)
            for at, cell in enumerate(row)
        )
        + "</tr>"
        for row in table.rows
    )
    notes = "".join(f'<p class="note">{_marked(note)}</p>' for note in table.notes)
    caption = visible(table.caption) or visible(table.name)
    kind = "table cards" if cards else "table many" if len(table.header) > MANY else "table"
    kind += " brief" if len(table.rows) <= BRIEF and not cards else ""
    group = _role("rowgroup", cards)
    return (
        f'<figure class="{kind}" id="{anchor}"><div class="scroll" role="group" tabindex="0" '
        f'aria-labelledby="{anchor}-caption">\n'
        f'<table{_role("table", cards)} data-name="{anchor.removeprefix("table-")}">'
        f'<caption id="{anchor}-caption"><span>{_marked(caption)}</span></caption>\n'
        f"<thead{group}><tr{_role('row', cards)}>{head}</tr></thead>\n<tbody{group}>\n{rows}\n</tbody>\n</table></div>"
        f"{notes}</figure>"
    )


def _cell(cell: Cell, digits: int, right: bool, *, first: bool, label: str | None) -> str:
    shown, full = cell_text(cell, digits), full_text(cell)
    kept = f' data-value="{full}"' if full is not None else _whole(cell) if isinstance(cell, str) else ""
    kept += f' data-label="{escape(visible(label))}"' if label is not None and not first else ""
    role = "rowheader" if first else "cell"
    return _element(role, shown, label is not None, f"{_classes(shown, right)}{kept}")


_SCOPES = {"columnheader": "col", "rowheader": "row"}


def _element(role: str, shown: str, stated: bool, attributes: str) -> str:
    """Return one cell; a heading without words is a cell like others."""
    if not shown.strip():
        role = "cell"
    tag, scope = ("th", f' scope="{_SCOPES[role]}"') if role in _SCOPES else ("td", "")
    return f"<{tag}{scope}{_role(role, stated)}{attributes}>{_isolated(shown)}</{tag}>"


def _role(name: str, stated: bool) -> str:
    return f' role="{name}"' if stated else ""


def _classes(text: str, right: bool) -> str:
    """Return the attribute for what is set flush right and for what is broken over lines."""
    names = ["n"] if right else []
    names += [name for name, most in WIDTHS.items() if len(text) > most]
    return f' class="{" ".join(names)}"' if names else ""


def _whole(text: str) -> str:
    """Return the attribute that keeps a text whose shown form differs, for the download."""
    if visible(text) == text:
        return ""
    kept = text.encode("utf-8", "replace").decode("utf-8")
    kept = "".join(
        sign if sign in "\t\n" or sign >= " " else "\ufffd" for sign in re.sub("\r\n?", "\n", kept)
    )
    return f' data-text="{escape(kept)}"'


def _attached(attachments: Mapping[str, str]) -> str:
    links = []
    for name, text in attachments.items():
        kind = _TYPES.get(name.rpartition(".")[2], "text/plain")
        data = base64.b64encode(text.encode("utf-8")).decode("ascii")
        shown = escape(visible(name))
        links.append(
            f'<li><a download="{shown}" href="data:{kind};charset=utf-8;base64,{data}">{shown}</a></li>'
        )
    return f'<div class="attachments"><p>Attached:</p><ul>{"".join(links)}</ul></div>\n' if links else ""


def _marked(text: str) -> str:
    """Return running text: the index of a known symbol is set below."""
    shown = visible(text)
    return "".join(_lowered(shown, _INDEXED))


def _formula(text: str) -> str:
    return "\n".join("".join(_lowered(line, WRITTEN)) for line in visible(text, lines=True).split("\n"))


def _lowered(text: str, pattern: re.Pattern[str]) -> Iterator[str]:
    at = 0
    for match in pattern.finditer(text):
        base, _, index = match[0].partition("_")
        yield _isolated(text[at : match.start()])
        yield f"{escape(base, quote=False)}<sub>{escape(index, quote=False)}</sub>"
        at = match.end()
    yield _isolated(text[at:])


def _words_whole(text: str) -> str:
    """Return lines in which no option breaks after its hyphens."""
    parts = re.split(r"((?<!\S)-\S{1,24}(?!\S))", text)
    return "".join(
        f"<span>{_isolated(part)}</span>" if at % 2 else _isolated(part) for at, part in enumerate(parts)
    )


def _isolated(text: str) -> str:
    """Return escaped text; runs written from right to left do not turn around what stands beside them."""
    return _RIGHT_TO_LEFT.sub(lambda match: f"<bdi>{match[0]}</bdi>", escape(text, quote=False))
