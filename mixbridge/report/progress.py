"""A progress line, on a terminal or in a notebook, for what takes longer than two seconds."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from typing import TextIO

__all__ = ["PATIENCE", "in_notebook", "progress_line"]

PATIENCE = 2.0
"""Seconds before anything is shown."""

BAR = 30


def in_notebook() -> bool:
    """Whether this runs in a notebook, whose cells show a line drawn over itself as a terminal does."""
    module = sys.modules.get("IPython")
    shell = module.get_ipython() if module is not None and hasattr(module, "get_ipython") else None
    return type(shell).__name__ == "ZMQInteractiveShell"


def progress_line(
    what: str, stream: TextIO | None = None, clock: Callable[[], float] = time.monotonic
) -> Callable[[int, int], None]:
    """Return a callback that draws one line, from two seconds on, on a terminal or in a notebook.

    Parameters
    ----------
    what : str
        What is counted.
    stream : file, optional
        Standard error unless given.
    clock : callable
        Seconds that never go back.

    Returns
    -------
    callable
        Takes what is done and what is asked for; ends the line when all is done.
    """
    target = sys.stderr if stream is None else stream
    start = clock()
    shown = False

    def show(done: int, total: int) -> None:
        nonlocal shown
        spent = clock() - start
        if spent < PATIENCE or not (target.isatty() or in_notebook()):
            return
        if done >= total and not shown:
            return
        full = int(BAR * done / max(total, 1))
        left = spent * (total - done) / max(done, 1)
        target.write(f"\r{what} [{'=' * full}{' ' * (BAR - full)}] {done:,} of {total:,}, {left:.0f} s left ")
        if done >= total:
            target.write("\n")
        target.flush()
        shown = True

    return show
