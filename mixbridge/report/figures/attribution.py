"""A gap between two routes as a waterfall of causes."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from mixbridge.display.text import number, signed
from mixbridge.errors import OptionError
from mixbridge.report.figures.ledger import chosen_term
from mixbridge.report.figures.look import ACCENT, INK, OTHER, below, blank, heading, label, rows_axis
from mixbridge.routes import REFERENCE_ROUTES

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["attribution_in_words", "draw_attribution"]


def _split(study: Any, term: str | None, a: str | None, b: str | None) -> tuple[str, Any]:
    name = chosen_term(study, term)
    if a is None:
        ledger = study.ledger
        rows = ledger[(ledger["term"] == name) & ~ledger["route"].isin(REFERENCE_ROUTES)]
        rows = rows[rows["route"] != study.primary].dropna(subset=["gap_in_se"])
        if rows.empty:
            raise OptionError(f"no other random-effects route estimates {name!r}: there is no gap to split.")
        a = str(rows.loc[rows["gap_in_se"].abs().idxmax(), "route"])
    found = study.attribution(name, a, b)
    if not found.chains:
        raise OptionError(
            f"{a!r} and {found.gap.b!r} are one point of the curve, or one of them is off it: there are "
            "no changes to draw."
        )
    return name, found


def draw_attribution(
    study: Any, ax: Axes | None, *, term: str | None = None, a: str | None = None, b: str | None = None
) -> Axes:
    """Draw the average share of each cause between the estimates of b and a, with its range over the legal chains."""
    name, found = _split(study, term, a, b)
    gap, causes = found.gap, found.causes
    names = [gap.b, *causes["cause"].tolist(), gap.a]
    axes = blank(1.3 + 0.3 * len(names)).subplots() if ax is None else ax
    rows_axis(axes, names, marked=study.primary)
    at = gap.estimate_b
    axes.plot(at, 0, "D", color=INK, ms=6)
    for place, row in enumerate(causes.itertuples(index=False), start=1):
        step = float(row.coefficient)
        colour = ACCENT if step > 0 else OTHER
        axes.barh(
            place, step, left=at, height=0.5, color=colour, hatch="" if step > 0 else "//", edgecolor="white"
        )
        axes.vlines(at, place - 1 + (0.25 if place > 1 else 0.0), place + 0.25, color=INK, lw=0.6)
        axes.hlines(
            place + 0.36,
            at + float(row.coefficient_lowest),
            at + float(row.coefficient_highest),
            color=INK,
            lw=0.8,
        )
        at += step
    axes.vlines(at, len(names) - 2 + 0.25, len(names) - 1, color=INK, lw=0.6)
    axes.plot(gap.estimate_a, len(names) - 1, "o", color=INK, ms=6)
    axes.margins(x=0.06)
    axes.use_sticky_edges = False
    below(axes, f"coefficient of {label(name)}; thin lines: range of a share over the legal chains")
    moved = (gap.estimate_a - gap.estimate_b) / gap.standard_error
    heading(axes, f"{label(name)}: from {label(gap.b)} to {label(gap.a)}, {signed(moved)} standard errors")
    return axes


def attribution_in_words(
    study: Any, *, term: str | None = None, a: str | None = None, b: str | None = None
) -> str:
    """Say what the figure shows."""
    name, found = _split(study, term, a, b)
    gap = found.gap
    parts = [
        f"{row.cause} {signed(float(row.coefficient), 3)} ({signed(float(row.coefficient_lowest), 3)} to "
        f"{signed(float(row.coefficient_highest), 3)})"
        for row in found.causes.itertuples(index=False)
    ]
    total = np.asarray(found.causes["coefficient"], dtype=float).sum()
    return (
        f"{name} moves from {number(gap.estimate_b)} by {gap.b} to {number(gap.estimate_a)} by {gap.a}, "
        f"{signed(float(total), 3)} in all: {'; '.join(parts)}."
    )
