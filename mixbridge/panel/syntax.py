"""Python expressions as syntax trees, one thread at a time.

Some releases of CPython (seen with 3.11.7) count the depth of a syntax tree in a place that all threads share, and end
with ``SystemError: AST constructor recursion depth mismatch`` when two threads build one at the same time. Chunks and
partitions are worked on in several threads, so whatever parses does it here.
"""

from __future__ import annotations

import ast
import threading
from functools import lru_cache
from typing import Any

from patsy import EvalEnvironment, EvalFactor

__all__ = ["prepare", "tree_of"]

_ONE_AT_A_TIME = threading.RLock()


@lru_cache(maxsize=512)
def tree_of(code: str) -> ast.expr:
    """Return the syntax tree of an expression; it is shared, and not to be changed.

    Raises
    ------
    SyntaxError, RecursionError
        If the text is not one expression.
    """
    with _ONE_AT_A_TIME:
        return ast.parse(code.strip(), mode="eval").body


def prepare(factor: EvalFactor, state: dict[str, Any], environment: EvalEnvironment) -> int:
    """Let a factor set up its state, which parses its code; return in how many passes it learns."""
    with _ONE_AT_A_TIME:
        return int(factor.memorize_passes_needed(state, environment))
