"""How much of the information on the variance components each route uses."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from mixbridge.display.text import number
from mixbridge.errors import OptionError
from mixbridge.report.figures.look import ACCENT, INK, OTHER, below, beside, blank, heading, rows_axis

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["draw_efficiency", "efficiency_in_words"]

SHOWN = {"unit_variance": ("o", ACCENT), "idiosyncratic_variance": ("s", OTHER), "ratio": ("^", INK)}


def _table(study: Any) -> Any:
    table = study.efficiency()
    table = table[(table["route"] != "bound") & np.isfinite(table["ratio"].to_numpy(dtype=float))]
    if table.empty:
        raise OptionError("no route shown has an efficiency here: study.efficiency() says why for each.")
    return table


def draw_efficiency(study: Any, ax: Axes | None) -> Axes:
    """Draw efficiency relative to the bound, at the components of the primary route."""
    table = _table(study)
    names = table["route"].tolist()
    axes = blank(1.35 + 0.22 * len(names)).subplots() if ax is None else ax
    rows_axis(axes, names, marked=study.primary)
    for column, (shape, colour) in SHOWN.items():
        axes.plot(
            table[column].to_numpy(dtype=float),
            range(len(names)),
            shape,
            color=colour,
            ms=5,
            mfc="none" if shape == "s" else colour,
            label=column.replace("_", " "),
        )
    axes.axvline(1.0, color=INK, lw=0.8)
    below(
        axes, "efficiency against the bound for unbiased estimators (1); biased routes by mean squared error"
    )
    beside(axes)
    heading(axes, f"Efficiency of the components, at those of {study.primary}")
    return axes


def efficiency_in_words(study: Any) -> str:
    """Say what the figure shows."""
    rows = [
        f"{row.route}: unit variance {number(row.unit_variance, 3)}, idiosyncratic variance "
        f"{number(row.idiosyncratic_variance, 3)}, ratio {number(row.ratio, 3)} ({row.measure})"
        for row in _table(study).itertuples(index=False)
    ]
    return f"Efficiency against the bound, at the components of {study.primary}. {'; '.join(rows)}."
