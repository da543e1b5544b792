"""Pieces of HTML for a notebook: no script, nothing from outside, colours of the notebook's own theme."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from html import escape

from mixbridge.display.visible import visible

__all__ = ["Printed", "fragment", "preformatted", "table"]

STYLE = (
    "<style>"
    ".mixbridge{font-size:.92em;line-height:1.4;max-width:100%;overflow-x:auto}"
    ".mixbridge pre{font-size:.95em;line-height:1.35;margin:.4em 0;white-space:pre;background:none;padding:0}"
    ".mixbridge table{border-collapse:collapse;margin:.5em 0;font-variant-numeric:tabular-nums;border:0}"
    ".mixbridge caption{caption-side:top;text-align:left;padding:.2em 0 .4em;color:inherit;font-weight:600}"
    ".mixbridge th,.mixbridge td{padding:.15em .8em;text-align:left;border:0;vertical-align:top;"
    "background:none;white-space:nowrap}"
    ".mixbridge .n{text-align:right}"
    ".mixbridge .w{white-space:normal;overflow-wrap:anywhere;min-width:14em;max-width:32em}"
    ".mixbridge pre.w{white-space:pre-wrap;max-width:none}"
    ".mixbridge thead th{border-bottom:1px solid currentColor}"
    ".mixbridge tbody th{font-weight:400}"
    ".mixbridge summary{cursor:pointer}"
    "</style>"
)


WRAPPED, LINE = 28, 110
"""Characters from which a cell, and from which a line of text, is broken."""


def fragment(*parts: str) -> str:
    """Return pieces of HTML as one output of a notebook; formulas between dollar signs are left alone."""
    return f'<div class="mixbridge tex2jax_ignore mathjax_ignore">{STYLE}{"".join(parts)}</div>'


def preformatted(text: str) -> str:
    """Return lines of text as they stand; where one is very long, lines are broken at the width of the notebook."""
    shown = visible(text, lines=True)
    kind = ' class="w"' if any(len(line) > LINE for line in shown.split("\n")) else ""
    return f"<pre{kind}>{escape(shown)}</pre>"


def table(
    caption: str, header: Sequence[str], rows: Sequence[Sequence[str]], right: Collection[int] = ()
) -> str:
    """Return a table of text.

    Parameters
    ----------
    caption : str
        Plain text.
    header : sequence of str
        Headings of the columns.
    rows : sequence of sequence of str
        The first cell of each row is its heading.
    right : collection of int
        Columns set flush right.

    Returns
    -------
    str
        One ``table`` element with a caption.

    Examples
    --------
    >>> table("Bees & honey", ["term", "estimate"], [["forage", "0.24"]], right=[1])[:43]
    '<table><caption>Bees &amp; honey</caption><'
    """

    def cell(at: int, text: str, tag: str, scope: str = "") -> str:
        kind = "n" if at in right else "w" if len(text) > WRAPPED else ""
        classed = f' class="{kind}"' if kind else ""
        return f"<{tag}{scope}{classed}>{escape(visible(text))}</{tag}>"

    head = "".join(cell(at, text, "th", ' scope="col"') for at, text in enumerate(header))
    body = "".join(
        "<tr>"
        + "".join(
            cell(at, text, "td") if at else cell(at, text, "th", ' scope="row"')
            for at, text in enumerate(row)
        )
        + "</tr>"
        for row in rows
    )
    return (
        f"<table><caption>{escape(visible(caption))}</caption>"
        f"<thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"
    )


class Printed:
    """A record whose text is shown as it stands in a notebook."""

    __slots__ = ()

    def _repr_html_(self) -> str:
        """Return the printed form as HTML."""
        return fragment(preformatted(str(self)))
