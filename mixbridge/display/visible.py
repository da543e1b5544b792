"""Characters that cannot be seen but change what is seen, written out."""

from __future__ import annotations

import re

__all__ = ["visible"]

_HIDDEN = re.compile(
    "["
    "\x00-\x08\x0e-\x1b\x7f-\x84\x86-\x9f"  # controls that are no white space
    "\u202a-\u202e\u2066-\u2069"  # embeddings, overrides and isolates of direction
    "\ufeff\ufff9-\ufffb"  # byte order mark, interlinear annotation
    "\ud800-\udfff"  # halves of surrogate pairs, which no encoding takes
    "\ufdd0-\ufdef"  # noncharacters, with the last two of each plane
    + "".join(chr(0x10000 * plane + 0xFFFE) + chr(0x10000 * plane + 0xFFFF) for plane in range(17))
    + "]"
)
_SPACE = re.compile("[ \t-\r\x1c-\x1f\x85\u2028\u2029]+")  # spaces that forbid a break stay


def visible(text: str, *, lines: bool = False) -> str:
    r"""Return a text that shows all it holds and reorders nothing around it.

    Control characters, controls of the direction of writing that could turn around the text after them, halves of
    surrogate pairs and noncharacters are written out, such as ``⟨U+202E⟩``. Runs of white space become one space.
    Letters of every script, marks and joiners stay as they are.

    Parameters
    ----------
    text : str
        From a user or from the program.
    lines : bool
        Keep lines and the spaces in them, for text that is set as it stands.

    Returns
    -------
    str
        Can be encoded as UTF-8.

    Examples
    --------
    >>> visible("apiary\u202e7\n")
    'apiary⟨U+202E⟩7'
    """
    shown = _HIDDEN.sub(lambda match: f"⟨U+{ord(match[0]):04X}⟩", text)
    if lines:
        return "\n".join(shown.expandtabs(4).splitlines())
    return _SPACE.sub(" ", shown).strip(" ")
