"""Symbols of the model with an index, as texts write them: ``σ_α``, ``u_it``, ``K_w``."""

from __future__ import annotations

import re

__all__ = ["INDEXED", "MARKS", "WRITTEN"]

MARKS = "\u0302\u0303\u0304\u0305\u0307\u0308"
"""Hat, tilde, bar, overline, dot and two dots over the letter before them."""

_END = "(?![A-Za-zα-ω0-9_])"

INDEXED = (
    rf"(?<![A-Za-zα-ωΑ-Ω0-9_])"
    rf"(?:(?P<letter>[α-ω][{MARKS}]?)_(?P<index>it|[αηuiwbgT])"
    rf"|(?P<name>[uyx](?=_it)|[Ts](?=_i)|K(?=_[wpc])|RSS(?=_w)|q(?=_b))_(?P<index_of_name>it|[iwpcb])){_END}"
)
"""A known symbol in running text; names of columns that look alike are set alike, letter for letter."""

WRITTEN = re.compile(
    rf"(?<![A-Za-zα-ωΑ-Ω0-9_])(?P<letter>[A-Za-zα-ωΑ-Ω][{MARKS}]?|RSS)_(?P<index>[A-Za-zα-ω0-9]{{1,2}}){_END}"
)
"""Any letter with an index, in a formula."""
