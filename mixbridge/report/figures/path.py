"""The coefficient path from pooled to within, with every route's place, and the profile deviance below."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from mixbridge.display.text import number
from mixbridge.report.figures.ledger import chosen_term
from mixbridge.report.figures.look import (
    ACCENT,
    BAND,
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

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["draw_path", "path_in_words"]

DEVIANCE = 12.0
"""Deviance above the minimum up to which the profile is shown."""


def draw_path(study: Any, ax: Axes | None, *, term: str | None = None) -> Axes:
    """Draw one coefficient against the weight lambda of a unit of median size.

    Alone, the figure has two more panels: the place of each route on the path, one line each, and the profile
    deviances.
    """
    name = chosen_term(study, term)
    path = study.path(name)
    table, routes = path.table, path.routes
    axes: Axes
    places: Axes | None
    deviance: Axes | None
    if ax is None:
        count = len(routes)
        parts = blank(3.6 + 0.17 * count).subplots(
            3, 1, sharex=True, height_ratios=[2.2, 0.17 * count + 0.25, 1.1]
        )
        axes, places, deviance = parts
    else:
        axes, places, deviance = ax, None, None
    _curve(axes, path, table, routes, study.primary)
    heading(axes, f"{label(name)} along the variance ratio")
    if places is None or deviance is None:
        below(axes, _weight(path))
        return axes
    routes = routes.sort_values("ratio", kind="stable")
    rows_axis(places, routes["route"].tolist(), marked=study.primary)
    places.plot(routes["weight"], range(len(routes)), "o", color=ACCENT, ms=4)
    places.spines["bottom"].set_visible(False)
    places.tick_params(axis="x", length=0)
    for column, style, colour in (("reml_deviance", "-", INK), ("ml_deviance", "--", OTHER)):
        values = table[column].to_numpy(dtype=float)
        if np.isfinite(values).any():
            deviance.plot(
                table["weight"], values, style, color=colour, lw=1.2, label=column.split("_")[0].upper()
            )
    deviance.set_ylim(-0.4, DEVIANCE)
    deviance.set_ylabel("deviance")
    beside(deviance)
    below(deviance, _weight(path))
    return axes


def _curve(axes: Axes, path: Any, table: Any, routes: Any, primary: str) -> None:
    if table["allowed"].any():
        inside = table[table["allowed"]]
        axes.axvspan(
            float(inside["weight"].min()),
            float(inside["weight"].max()),
            color=BAND,
            lw=0,
            zorder=0,
            label=f"ratios in the exact {100 * path.confidence:g}% set",
        )
    axes.fill_between(
        table["weight"],
        table["lower"],
        table["upper"],
        color=ACCENT,
        alpha=0.16,
        lw=0,
        label="pointwise interval",
    )
    axes.plot(table["weight"], table["coefficient"], color=ACCENT, label="generalised least squares")
    others = routes[routes["route"] != primary]
    axes.plot(others["weight"], others["coefficient"], "o", color=ACCENT, ms=4, mfc="white", label="routes")
    own = routes[routes["route"] == primary]
    axes.plot(own["weight"], own["coefficient"], "D", color=INK, ms=5.5, label=label(primary))
    low, high = float(table["lower"].min()), float(table["upper"].max())
    if low < 0.0 < high:
        axes.axhline(0.0, color=FAINT, lw=0.6, zorder=0)
    axes.set_ylabel("coefficient")
    axes.set_xlim(-0.02, 1.02)
    beside(axes)


def _weight(path: Any) -> str:
    return f"weight λ of a unit with {path.size:g} rows: 0 is pooled, 1 is within"


def path_in_words(study: Any, *, term: str | None = None) -> str:
    """Say what the figure shows."""
    name = chosen_term(study, term)
    path = study.path(name)
    places = "; ".join(f"{route} at ratio {number(ratio)}" for route, ratio in path.places)
    return f"{' '.join(path.sentences)} Places of the routes: {places}."
