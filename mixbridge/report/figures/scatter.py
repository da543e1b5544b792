"""Within and between scatter of one covariate, each with its slope."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from mixbridge.display.text import number
from mixbridge.errors import OptionError
from mixbridge.report.figures.ledger import chosen_term
from mixbridge.report.figures.look import ACCENT, FAINT, OTHER, below, blank, heading, label

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["draw_scatter", "scatter_in_words"]

MOST = 4000
"""Points of a panel; of more rows, evenly spaced ones."""


def _term(study: Any, term: str | None) -> str:
    within = study.fit("within")
    usable = [name for name in within.terms if np.isfinite(within.coefficients[name])]
    if not usable:
        raise OptionError("no slope is determined within units: there is no within scatter to draw.")
    if term is not None:
        if term not in usable:
            raise OptionError.not_among("term", term, usable)
        return term
    first = chosen_term(study, None)
    return first if first in usable else usable[0]


def _points(study: Any, name: str) -> dict[str, Any]:
    """Return partial residuals: rows about their unit means, and unit means, other columns taken out at each fit."""
    within, between = study.fit("within"), study.fit("between")
    x, y = study.panel.matrix()
    codes = study.panel.codes
    j = study.panel.names.index(name)
    counts = np.bincount(codes).astype(float)
    mean_x = np.column_stack([np.bincount(codes, column) for column in x.T]) / counts[:, None]
    mean_y = np.bincount(codes, y) / counts
    b_w = np.nan_to_num(within.beta)
    inner = x - mean_x[codes]
    rest = (y - mean_y[codes]) - inner @ b_w
    found = {"within_x": inner[:, j], "within_y": rest + inner[:, j] * b_w[j], "within": float(b_w[j])}
    slope = float(between.coefficients.get(name, np.nan))
    if np.isfinite(slope):
        b_b = np.nan_to_num(between.beta)
        residual = mean_y - mean_x @ b_b
        middle = float(np.average(mean_x[:, j], weights=counts))
        found |= {
            "between_x": mean_x[:, j],
            "between_y": residual + (mean_x[:, j] - middle) * slope,
            "between": slope,
            "middle": middle,
            "sizes": counts,
        }
    return found


def draw_scatter(study: Any, ax: Axes | None, *, term: str | None = None) -> Axes:
    """Draw deviations from unit means and unit means side by side; on a given axes, the deviations alone."""
    name = _term(study, term)
    points = _points(study, name)
    left: Axes
    right: Axes | None
    left, right = blank(3.1).subplots(1, 2, sharey=True) if ax is None else (ax, None)
    step = max(1, -(-len(points["within_x"]) // MOST))
    left.plot(
        points["within_x"][::step], points["within_y"][::step], "o", color=ACCENT, ms=2.6, alpha=0.45, mew=0
    )
    _line(left, points["within_x"], 0.0, points["within"])
    some = f", every {step}th row" if step > 1 else ""
    below(left, f"{label(name)} minus its unit mean{some}")
    left.set_ylabel(f"{label(study.panel.outcome)}, other columns taken out")
    heading(left, f"within: slope {number(points['within'])}")
    if right is None:
        return left
    if "between" not in points:
        right.set_axis_off()
        right.annotate("no slope between unit means", (0.1, 0.5), xycoords="axes fraction")
        return left
    area = 6.0 + 40.0 * points["sizes"] / points["sizes"].max()
    right.scatter(points["between_x"], points["between_y"], s=area, facecolor="none", edgecolor=OTHER, lw=0.9)
    _line(right, points["between_x"], points["middle"], points["between"])
    below(right, f"unit mean of {label(name)}; area by rows")
    heading(right, f"between: slope {number(points['between'])}")
    for part in (left, right):
        part.axhline(0.0, color=FAINT, lw=0.5, zorder=0)
    return left


def _line(ax: Axes, x: Any, middle: float, slope: float) -> None:
    inner = middle == 0.0
    ends = np.array([x.min(), x.max()])
    ax.plot(ends, slope * (ends - middle), "-" if inner else "--", color=ACCENT if inner else OTHER, lw=1.6)


def scatter_in_words(study: Any, *, term: str | None = None) -> str:
    """Say what the figure shows."""
    name = _term(study, term)
    points = _points(study, name)
    text = (
        f"{study.panel.outcome} against {name}, other columns taken out. Deviations from unit means of "
        f"{len(points['within_x'])} rows have slope {number(points['within'])}"
    )
    if "between" in points:
        text += f"; means of {len(points['between_x'])} units have slope {number(points['between'])}"
    return f"{text}."
