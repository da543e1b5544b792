"""The ledger as intervals, one line per route."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from mixbridge.display.text import number
from mixbridge.errors import OptionError
from mixbridge.report.figures.look import (
    ACCENT,
    FAINT,
    INK,
    OTHER,
    below,
    beside,
    blank,
    heading,
    label,
    rows_axis,
)
from mixbridge.routes import REFERENCE_ROUTES

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["chosen_term", "draw_ledger", "ledger_in_words"]

SHAPES = {"primary": "D", "identical": "o", "immaterial": "o", "visible": "s", "conflicting": "X"}
COLOURS = {
    "primary": INK,
    "identical": ACCENT,
    "immaterial": ACCENT,
    "visible": OTHER,
    "conflicting": "#8c1c13",
}


def chosen_term(study: Any, term: str | None) -> str:
    """Return the term asked for, or the one whose widest gap between random-effects routes is largest."""
    names: list[str] = list(study.curve.names)
    if term is not None:
        if term not in names:
            raise OptionError.not_among("term", term, names)
        return term
    ledger = study.ledger
    votes = ledger[~ledger["route"].isin(REFERENCE_ROUTES) & (ledger["route"] != study.primary)]
    constant = study.moments.constant
    gaps = votes[votes["term"] != constant].dropna(subset=["gap_in_se"])
    if gaps.empty:
        return next((name for name in names if name != constant), names[0])
    return str(gaps.loc[gaps["gap_in_se"].abs().idxmax(), "term"])


def draw_ledger(study: Any, ax: Axes | None, *, term: str | None = None) -> Axes:
    """Draw estimate and interval of one term by every route; the primary one is in bold."""
    name = chosen_term(study, term)
    rows = study.ledger[study.ledger["term"] == name]
    routes = rows["route"].tolist()
    axes = blank(1.15 + 0.2 * len(routes)).subplots() if ax is None else ax
    rows_axis(axes, routes, marked=study.primary)
    shown: set[str] = set()
    for place, row in enumerate(rows.itertuples(index=False)):
        if not np.isfinite(row.estimate):
            axes.annotate(
                label(row.reason or "not available", 60),
                (0.01, place),
                xycoords=axes.get_yaxis_transform(),
                color="#5f6b71",
                fontsize=7.5,
                va="center",
            )
            continue
        kind = "primary" if row.route == study.primary else str(row.verdict)
        shape, colour = SHAPES.get(kind, "|"), COLOURS.get(kind, FAINT)
        if np.isfinite(row.lower):
            axes.hlines(place, row.lower, row.upper, color=colour, lw=1.3)
        text = kind if kind not in shown else "_"
        shown.add(kind)
        axes.plot(row.estimate, place, shape, color=colour, ms=5 if shape != "|" else 9, mew=1.4, label=text)
    own = rows[rows["route"] == study.primary]
    if len(own) and np.isfinite(own["estimate"].iloc[0]):
        axes.axvline(float(own["estimate"].iloc[0]), color=INK, lw=0.6, ls=(0, (2, 3)), zorder=0)
    axes.axvline(0.0, color=FAINT, lw=0.6, zorder=0) if _near_zero(rows) else None
    below(axes, f"coefficient of {label(name)}, {100 * study.confidence:g}% intervals")
    beside(axes)
    heading(axes, f"{label(name)}: every route beside {label(study.primary)}")
    return axes


def _near_zero(rows: Any) -> bool:
    """Whether zero lies within reach of the intervals shown."""
    low, high = rows["lower"].min(), rows["upper"].max()
    return bool(np.isfinite(low) and low - 0.3 * (high - low) < 0.0 < high + 0.3 * (high - low))


def ledger_in_words(study: Any, *, term: str | None = None) -> str:
    """Say what the figure shows."""
    name = chosen_term(study, term)
    rows = study.ledger[study.ledger["term"] == name]
    parts = [
        f"{row.route} {number(row.estimate)} ({number(row.lower)} to {number(row.upper)}; {row.verdict})"
        for row in rows.itertuples(index=False)
        if np.isfinite(row.estimate)
    ]
    lost = [f"{row.route}" for row in rows.itertuples(index=False) if not np.isfinite(row.estimate)]
    text = f"Estimate and {100 * study.confidence:g}% interval of {name} by route: {'; '.join(parts)}."
    return text + (f" Not available: {', '.join(lost)}." if lost else "")
