"""Figures of a calibration as text: cells with z where a rule fails, spreads over designs, Markdown tables."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

LIMIT = 3.5
"""Monte Carlo errors beyond which a figure counts as off: one in 2,000 by chance where a rule holds."""
MINUS = "\u2212"


def title(row: pd.Series) -> str:
    """Name a design."""
    return f"{row['design']}, ψ = {row['psi']:g}"


def cell(row: pd.Series, exact: bool) -> str:
    """Return the figure in per cent, with z if the rule is exact or off; bold: it misleads, italic: it is cautious."""
    z, observed = float(row["z"]), float(row["observed"])
    if np.isnan(z):
        return "none"
    value = f"{100 * observed:.1f}"
    if abs(z) > LIMIT:
        cautious = (z > 0.0) if row["nominal"] > 0.5 else (z < 0.0)
        value = f"*{value}* ({_signed(z)})" if cautious else f"**{value}** ({_signed(z)})"
    elif exact:
        value = f"{value} ({_signed(z)})"
    if row["defined"] < 1.0:
        value += f" of {100 * row['defined']:.0f} %"
    return f"={value}" if exact else value


def spread(rows: pd.DataFrame) -> str:
    """Return lowest and highest coverage over designs, the worst z, and how many designs are off on each side."""
    if rows.empty:
        return ""
    low, high = 100 * rows["observed"].min(), 100 * rows["observed"].max()
    short, wide = int((rows["z"] < -LIMIT).sum()), int((rows["z"] > LIMIT).sum())
    text = f"{low:.1f} to {high:.1f}"
    if not short and not wide:
        return text
    worst = float(rows["z"].min() if short else rows["z"].max())
    text = f"**{low:.1f}** to {high:.1f}" if short else f"{low:.1f} to *{high:.1f}*"
    counts = [f"{short} low" if short else "", f"{wide} high" if wide else ""]
    return f"{text} ({_signed(worst)}; {', '.join(filter(None, counts))} of {len(rows)})"


def markdown(head: Sequence[str], lines: Sequence[Sequence[str]]) -> str:
    """Return a table."""
    rows = ["| " + " | ".join(line) + " |" for line in (head, *lines)]
    return "\n".join([rows[0], "|" + "---|" * len(head), *rows[1:]])


def _signed(z: float) -> str:
    return f"{z:+.1f}".replace("-", MINUS)
