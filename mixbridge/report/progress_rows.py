"""A line on the terminal that counts rows while they are read."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from typing import TextIO

from mixbridge.report.progress import BAR, PATIENCE, in_notebook

__all__ = ["rows_line"]

_EVERY = 0.2
"""Seconds between two drawings."""


def rows_line(
    stream: TextIO | None = None, clock: Callable[[], float] = time.monotonic
) -> Callable[[int, int | None], None]:
    """Return a callback that draws a line for each pass over the rows, from two seconds on.

    Parameters
    ----------
    stream : file, optional
        Standard error unless given.
    clock : callable
        Seconds that never go back.

    Returns
    -------
    callable
        Takes the rows read in this pass, and how many there are or None. Fewer rows than before begin a new pass;
        the line ends when all are read.
    """
    target = sys.stderr if stream is None else stream
    start, before, drawn, number, width = clock(), 0, 0.0, 1, 0

    def show(done: int, total: int | None) -> None:
        nonlocal start, before, drawn, number, width
        now = clock()
        if done < before:  # a pass that was broken off
            number, start = number + 1, now
            width = 0
        before = done
        ended = total is not None and done >= total
        if ended or (now - start >= PATIENCE and now - drawn >= _EVERY):
            shown = width > 0
            if (target.isatty() or in_notebook()) and (shown or not ended):
                drawn = now
                text = _text(number, done, total, max(now - start, 1e-9))
                target.write("\r" + text.ljust(width) + ("\n" if ended else ""))
                target.flush()
                width = len(text)
        if ended:
            number, start, before, width = number + 1, now, 0, 0

    return show


def _text(number: int, done: int, total: int | None, spent: float) -> str:
    rate = done / spent
    speed = f"{rate / 1e6:.3g} million" if rate >= 1e6 else f"{rate:,.0f}"
    if total is None:
        return f"pass {number}: {done:,} rows, {speed} a second"
    full = int(BAR * done / max(total, 1))
    left = (total - done) / max(rate, 1e-9)
    bar = "=" * full + " " * (BAR - full)
    return f"pass {number} [{bar}] {done:,} of {total:,} rows, {speed} a second, {left:.0f} s left"
