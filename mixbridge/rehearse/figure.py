"""A rehearsal as a figure: bias, error and coverage of one term, route by route."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from mixbridge.errors import OptionError

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["figure_of"]

MARKS = {"normal": "o", "t_residual": "s", "by_level": "^", "satterthwaite": "D"}
BLUE = "#0b5fa5"


def figure_of(coefficients: pd.DataFrame, intervals: pd.DataFrame, term: str, confidence: float) -> Figure:
    """Draw three panels: bias, root mean square error, and coverage by interval rule.

    Parameters
    ----------
    coefficients, intervals : DataFrame
        As in `Rehearsal`.
    term : str
    confidence : float

    Returns
    -------
    matplotlib.figure.Figure
        Bars are two Monte Carlo standard errors to each side.

    Raises
    ------
    OptionError
        If there is no such term, or matplotlib is not installed.
    """
    rows = coefficients[coefficients["term"] == term]
    if rows.empty:
        raise OptionError.not_among("term", term, coefficients["term"].unique())
    try:
        from matplotlib.figure import Figure  # noqa: PLC0415 -- optional
    except ImportError:
        raise OptionError("figures need matplotlib: pip install 'mixbridge[plots]'.") from None
    routes = rows["route"].tolist()
    place = np.arange(len(routes), dtype=float)
    figure = Figure(figsize=(11.0, 1.6 + 0.3 * len(routes)), layout="constrained")
    bias, error, coverage = figure.subplots(1, 3, sharey=True)
    style = {"fmt": "o", "color": BLUE, "capsize": 2.0}
    bias.errorbar(rows["bias"].to_numpy(), place, xerr=2.0 * rows["bias_error"].to_numpy(), **style)
    bias.axvline(0.0, color="0.6", linewidth=0.8)
    error.errorbar(rows["rmse"].to_numpy(), place, xerr=2.0 * rows["rmse_error"].to_numpy(), **style)
    error.set_xlim(left=0.0)
    here = intervals[intervals["term"] == term]
    for shift, (rule, mark) in zip(np.linspace(-0.25, 0.25, len(MARKS)), MARKS.items(), strict=True):
        part = here[here["rule"] == rule]
        height = np.array([routes.index(route) for route in part["route"]], dtype=float) + shift
        coverage.errorbar(
            part["coverage"].to_numpy(),
            height,
            xerr=2.0 * part["coverage_error"].to_numpy(),
            fmt=mark,
            markersize=4.0,
            label=rule,
        )
    coverage.axvline(confidence, color="0.6", linewidth=0.8)
    coverage.legend(fontsize="small")
    bias.set_yticks(place, routes)
    bias.invert_yaxis()
    for panel, word in ((bias, "bias"), (error, "root mean square error"), (coverage, "coverage by rule")):
        panel.set_xlabel(word)
    figure.suptitle(f"{term}: bars are two Monte Carlo standard errors to each side")
    return figure
