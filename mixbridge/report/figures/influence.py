"""How far each unit, left out, moves a coefficient."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from mixbridge.display.text import number, signed
from mixbridge.report.figures.ledger import chosen_term
from mixbridge.report.figures.look import (
    ACCENT,
    FAINT,
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

__all__ = ["draw_influence", "influence_in_words"]

MOST = 25
"""Units that are shown, the most influential ones."""


def _moved(study: Any, term: str | None, most: int) -> tuple[str, Any, int, Any]:
    name = chosen_term(study, term)
    found = study.leave_one_out(routes=[study.primary])
    moved = found.influence()[name].dropna()
    deciding = found.deciding()
    units = set(deciding.loc[(deciding["term"] == name) & (deciding["route"] == study.primary), "unit"])
    order = moved.abs().sort_values(ascending=False, kind="stable").index
    return name, moved.loc[order[:most]], len(moved), units


def draw_influence(
    study: Any, ax: Axes | None, *, term: str | None = None, names: bool = True, most: int = MOST
) -> Axes:
    """Draw the change of a coefficient in standard errors; units that decide its sign have another shape."""
    name, moved, count, deciding = _moved(study, term, most)
    axes = blank(1.3 + 0.19 * len(moved)).subplots() if ax is None else ax
    keys = [str(key) if names else f"unit {place}" for place, key in enumerate(moved.index, start=1)]
    rows_axis(axes, keys)
    place = np.arange(len(moved))
    decides = np.array([key in deciding for key in moved.index], dtype=bool)
    axes.hlines(place, 0.0, moved.to_numpy(), color=FAINT, lw=1.0)
    axes.plot(moved.to_numpy()[~decides], place[~decides], "o", color=ACCENT, ms=4.5, label="answer stays")
    if decides.any():
        axes.plot(
            moved.to_numpy()[decides],
            place[decides],
            "X",
            color=OTHER,
            ms=6.5,
            label="answer against zero changes",
        )
        beside(axes)
    axes.axvline(0.0, color=FAINT, lw=0.8)
    shown = f"; the {len(moved)} most influential of {count} units" if count > len(moved) else ""
    below(
        axes, f"change of {label(name)} without the unit, in standard errors of {label(study.primary)}{shown}"
    )
    heading(axes, f"{label(name)} by {label(study.primary)} without each unit")
    return axes


def influence_in_words(study: Any, *, term: str | None = None, names: bool = True, most: int = MOST) -> str:
    """Say what the figure shows."""
    name, moved, count, deciding = _moved(study, term, most)
    first = f" ({moved.index[0]})" if names else ""
    return (
        f"Change of {name} by {study.primary} when each of {count} units is left out: the largest is "
        f"{signed(float(moved.iloc[0]), 3)} standard errors{first}, the median size of those shown "
        f"{number(float(moved.abs().median()), 3)}. {len(deciding)} deletions change the answer against zero."
    )
