"""Predicted unit effects with prediction intervals, in order."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import scipy

from mixbridge.display.text import number
from mixbridge.report.figures.look import ACCENT, FAINT, below, blank, heading, label, rows_axis

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["draw_effects", "effects_in_words"]

MOST = 60
"""Units that are shown; of more, those at both ends."""


def _shown(study: Any, route: str | None, most: int) -> tuple[Any, int]:
    table = study.unit_effects(route).sort_values("effect", ascending=False, kind="stable")
    hidden = len(table) - most
    if hidden <= 0:
        return table, 0
    half = most // 2
    return table.iloc[np.r_[:half, len(table) - (most - half) : len(table)]], hidden


def draw_effects(
    study: Any, ax: Axes | None, *, route: str | None = None, names: bool = True, most: int = MOST
) -> Axes:
    """Draw effects with normal prediction intervals; without `names` units are only numbered by rank."""
    table, hidden = _shown(study, route, most)
    z = float(scipy.stats.norm.isf((1.0 - study.confidence) / 2.0))
    axes = blank(1.25 + 0.155 * len(table)).subplots() if ax is None else ax
    keys = [
        str(key) if names else f"rank {rank}" for key, rank in zip(table.index, table["rank"], strict=True)
    ]
    rows_axis(axes, keys)
    axes.tick_params(axis="y", labelsize=6.5)
    effect, error = table["effect"].to_numpy(), table["prediction_se"].to_numpy()
    place = np.arange(len(table))
    axes.hlines(place, effect - z * error, effect + z * error, color=ACCENT, lw=1.1)
    axes.scatter(effect, place, s=4.0 + 2.0 * np.sqrt(table["size"].to_numpy()), color=ACCENT, zorder=3)
    axes.axvline(0.0, color=FAINT, lw=0.8, zorder=0)
    if hidden:
        axes.axhline(most // 2 - 0.5, color=FAINT, lw=0.8, ls=":")
    kept = f"; {hidden} units between the two ends are not shown" if hidden else ""
    below(
        axes,
        f"predicted effect with {100 * study.confidence:g}% prediction interval; area of a point by rows{kept}",
    )
    heading(axes, f"Predicted {label(study.panel.unit_name)} effects by {label(route or study.primary)}")
    return axes


def effects_in_words(study: Any, *, route: str | None = None, names: bool = True, most: int = MOST) -> str:
    """Say what the figure shows."""
    table = study.unit_effects(route)
    top, bottom = table["effect"].idxmax(), table["effect"].idxmin()
    who = (f" ({top})", f" ({bottom})") if names else ("", "")
    return (
        f"Predicted effects of {len(table)} units by {route or study.primary}, from "
        f"{number(table['effect'].min())}{who[1]} to "
        f"{number(table['effect'].max())}{who[0]}; prediction standard errors from "
        f"{number(table['prediction_se'].min(), 3)} "
        f"to {number(table['prediction_se'].max(), 3)}."
    )
