"""Plain Unicode text as LaTeX in ASCII: nothing in it is read as a command."""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Iterator

from mixbridge.display import visible
from mixbridge.report.symbols import INDEXED, MARKS
from mixbridge.report.tex_signs import ACCENTS, BELOW, HATS, LETTERS, MATH, PLAIN, RAISED, TEXT

__all__ = ["tex_lines", "tex_text"]

LONG = 24
"""A word longer than this may be broken anywhere after every `PIECE` characters, since no hyphenation knows it."""

PIECE = 8

_RAISED, _BELOW = "".join(RAISED), "".join(BELOW)
_SYMBOL = re.compile(
    rf"(?:{INDEXED}|(?P<alone>[α-ωΓΔΘΛΞΠΣΦΨΩϕϵ][{MARKS}]?|[A-Za-z][{MARKS}]))"
    rf"(?P<below>[{_BELOW}]*)(?P<raised>[{_RAISED}]*)"
    rf"|(?P<alone_raised>[{_RAISED}]+)|(?P<alone_below>[{_BELOW}]+)"
    rf"|(?P<accented>[A-Za-z][{''.join(ACCENTS)}])"
    rf"|(?P<minus>(?<![\w.)\]-])-(?=\.?\d|inf\b))"
)
_PAIRS = re.compile(r"([-,'!?])(?=[-,'`])")


def tex_text(text: str) -> str:
    r"""Return a text on one line for the body of a LaTeX document.

    Greek letters and signs of mathematics are set as such, ``σ_α²`` and the other symbols of the model with their
    index below, a hyphen before a digit as a minus sign, letters with accents by the accent. A character for which
    ordinary LaTeX has nothing is named by its code point, in the macro ``\codepoints`` of the preamble.

    Parameters
    ----------
    text : str
        Plain text; every sign in it stands for itself.

    Returns
    -------
    str
        ASCII; braces balance.

    Examples
    --------
    >>> print(tex_text("50% of σ_α² < β̂_1 & é"))
    50\% of \ensuremath{\sigma_{\alpha}^{2}} \textless{} \ensuremath{\hat{\beta}}\_\allowbreak{}1 \& \'{e}
    """
    return " ".join(_word(word, prose=True) for word in _composed(visible(text)).split(" "))


def tex_lines(text: str) -> str:
    r"""Return lines as they stand, in a fixed width, each able to break after its spaces.

    Parameters
    ----------
    text : str
        Lines to be typed or copied.

    Returns
    -------
    str
        Lines that end with ``\\``, to stand in a paragraph of its own in a typewriter font.
    """
    lines = []
    for line in _composed(visible(text, lines=True)).split("\n"):
        body = line.lstrip(" ")
        words = [_word(word, prose=False) for word in body.split(" ")]
        lines.append(r"\mbox{}" + "~" * (len(line) - len(body)) + r"\ ".join(words))
    return "\\\\\n".join(lines)


def _composed(text: str) -> str:
    return unicodedata.normalize("NFC", text)


def _word(word: str, *, prose: bool) -> str:
    return "".join(_pieces(list(_signs(word, prose=prose)), len(word)))


def _pieces(signs: list[str], length: int) -> Iterator[str]:
    """Yield signs, with places to break in a long word."""
    if length <= LONG:
        yield from signs
        return
    run = 0
    for sign in signs:
        yield sign
        run += 1
        if run >= PIECE or sign in {".", "/", ":", ";", "=", "+"}:
            yield r"\allowbreak{}"
            run = 0


def _signs(word: str, *, prose: bool) -> Iterator[str]:
    """Yield the LaTeX of each sign; what is not known is gathered and named by its code points."""
    unknown: list[str] = []
    at = 0
    while at < len(word):
        match = _SYMBOL.match(word, at)
        sign = _symbol(match, prose=prose) if match else _single(word, at, prose=prose)
        if sign is None:
            unknown.append(f"{ord(word[at]):04X}")
        else:
            yield from _named(unknown)
            unknown = []
            yield sign
        at = match.end() if match else at + 1
    yield from _named(unknown)


def _named(points: list[str]) -> Iterator[str]:
    if points:
        yield rf"\codepoints{{{' '.join(points)}}}"


def _symbol(match: re.Match[str], *, prose: bool) -> str:
    """Return the LaTeX of characters that make one symbol."""
    part = {name: text or "" for name, text in match.groupdict().items()}
    if part["minus"]:
        return r"\ensuremath{-}" if prose else r"\mbox{-}"
    if part["alone_raised"]:
        return rf"\ensuremath{{{{}}^{{{_ordinary(part['alone_raised'], RAISED)}}}}}"
    if part["alone_below"]:
        return rf"\ensuremath{{{{}}_{{{_ordinary(part['alone_below'], BELOW)}}}}}"
    if part["accented"]:
        return rf"\{ACCENTS[part['accented'][1]]}{{{part['accented'][0]}}}"
    base = part["letter"] or part["name"] or part["alone"]
    mark = base[-1] if base[-1] in HATS else ""
    letter = base.removesuffix(mark)
    inner = MATH.get(letter, letter) if len(letter) == 1 else rf"\mathrm{{{letter}}}"
    inner = rf"\{HATS[mark]}{{{inner}}}" if mark else inner
    index = part["index"] or part["index_of_name"]
    below = MATH.get(index, index) + _ordinary(part["below"], BELOW)
    raised = _ordinary(part["raised"], RAISED)
    inner += f"_{{{below}}}" if below else ""
    inner += f"^{{{raised}}}" if raised else ""
    return rf"\ensuremath{{{inner}}}"


def _ordinary(text: str, table: dict[str, str]) -> str:
    return "".join(table[sign] for sign in text)


def _single(word: str, at: int, *, prose: bool) -> str | None:
    """Return the LaTeX of one character, or None where there is none."""
    sign = word[at]
    if sign in PLAIN:
        if not prose and sign in {"'", "-"}:  # straight, and no break after a hyphen of an option
            return r"\textquotesingle{}" if sign == "'" else r"\mbox{-}"
        # Two hyphens, commas or quotes in a row would become another sign; an empty group does not stop all engines.
        return rf"{sign}\kern0pt{{}}" if _PAIRS.match(word, at) else sign
    for table in (TEXT, LETTERS):
        if sign in table:
            return table[sign]
    return rf"\ensuremath{{{MATH[sign]}}}" if sign in MATH else _accented(sign)


def _accented(sign: str) -> str | None:
    """Return a Latin letter with its accents, or None."""
    separate = unicodedata.normalize("NFD", sign)
    letter, marks = separate[0], separate[1:]
    if not marks or not (letter in LETTERS or (letter.isascii() and letter.isalpha())):
        return None
    if not set(marks) <= set(ACCENTS):
        return None
    text = LETTERS.get(letter, letter)
    for mark in marks:
        text = rf"\{ACCENTS[mark]}{{{text}}}"
    return text
