"""How much more a large unit counts than a small one, by route."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from mixbridge.display.text import number
from mixbridge.errors import OptionError
from mixbridge.report.figures.look import ACCENT, FAINT, INK, below, blank, heading, rows_axis

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["draw_weights", "weights_in_words"]


def _shares(study: Any) -> tuple[int, int, list[tuple[str, float]]]:
    """Return smallest and largest size, and by route the weight of the largest unit over that of the smallest."""
    sizes = study.moments.sizes
    low, high = int(sizes[0]), int(sizes[-1])
    if low == high:
        raise OptionError(f"all units have {low} rows: every route gives their means the same weight.")
    found = []
    for route, fit in study.fits.items():
        if np.isfinite(fit.ratio):
            found.append((route, (high / (1.0 + high * fit.ratio)) / (low / (1.0 + low * fit.ratio))))
    if not found:
        raise OptionError("no route shown has a finite variance ratio: there are no weights to draw.")
    return low, high, sorted(found, key=lambda pair: -pair[1])


def draw_weights(study: Any, ax: Axes | None) -> Axes:
    """Draw ``w(T_max) / w(T_min)`` with ``w(T) = T / (1 + T psi)``, from counting rows to counting units."""
    low, high, shares = _shares(study)
    names = [route for route, _ in shares]
    values = [value for _, value in shares]
    axes = blank(1.25 + 0.2 * len(names)).subplots() if ax is None else ax
    rows_axis(axes, names, marked=study.primary)
    axes.hlines(range(len(names)), 1.0, values, color=ACCENT, lw=1.3)
    colours = [INK if name == study.primary else ACCENT for name in names]
    axes.scatter(values, range(len(names)), color=colours, s=22, zorder=3)
    axes.axvline(1.0, color=INK, lw=0.8)
    axes.axvline(high / low, color=FAINT, lw=0.8, ls="--")
    axes.set_xlim(0.0, high / low * 1.06)
    below(
        axes,
        f"weight of the mean of a unit with {high} rows over that of a unit with {low}\n"
        f"solid line: units count alike (1); dashed line: rows count alike ({number(high / low, 3)})",
    )
    heading(axes, "How much more a large unit counts than a small one")
    return axes


def weights_in_words(study: Any) -> str:
    """Say what the figure shows."""
    low, high, shares = _shares(study)
    parts = ", ".join(f"{route} {number(value, 3)}" for route, value in shares)
    return (
        f"Weight of the mean of a unit with {high} rows over that of a unit with {low}, by route: "
        f"{parts}. One would count "
        f"units alike, {number(high / low, 3)} rows alike."
    )
