"""A rehearsal in words: a printout of at most 100 columns, and a paragraph for a protocol."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd

from mixbridge.rehearse.replicates import Runs

__all__ = ["paragraph", "printout", "truth_sentence"]

WIDTH = 100
CAUTION = (
    "All routes share one covariance model and were tried under the truth stated: what they do under another truth "
    "is not shown. Cluster-robust and Kenward-Roger intervals are not among those rehearsed."
)


def truth_sentence(runs: Runs) -> str:
    """Say what was taken as true."""
    model, truth = runs.model, runs.model.truth
    parts = [
        f"unit variance {model.unit_variance:.4g}",
        f"idiosyncratic variance {model.normal.idiosyncratic:.4g}",
        f"ICC {model.icc:.3g}",
    ]
    if model.correlated:
        stated = truth.correlation or truth.contextual
        word = "correlation with the unit mean of" if truth.correlation else "contextual coefficient of"
        parts += [f"{word} {name} {value:.3g}" for name, value in stated.items()]
    else:
        parts.append("unit effects unrelated to the covariates")
    if truth.tail_df is None and truth.unit_tail_df is None:
        parts.append("normal errors and unit effects")
    else:
        for df, who in ((truth.tail_df, "errors"), (truth.unit_tail_df, "unit effects")):
            parts.append(f"{who} from {'the normal distribution' if df is None else f't with {df:.3g} df'}")
    if truth.serial:
        parts.append(f"autocorrelation {truth.serial:.3g} of the errors")
    return ", ".join(parts)


def printout(
    runs: Runs, tables: Mapping[str, pd.DataFrame], *, confidence: float, notes: tuple[str, ...]
) -> str:
    """Return the printout.

    Parameters
    ----------
    runs : Runs
    tables : mapping of str to DataFrame
        ``coefficients, intervals, components, tests``.
    confidence : float
    notes : tuple of str

    Returns
    -------
    str
        Lines of at most 100 columns.
    """
    curve = runs.curve
    lines = [
        f"Rehearsal: {runs.count} replicates, seed {runs.seed}; {curve.units} units, {curve.n} rows",
        *wrapped(f"Truth: {truth_sentence(runs)}."),
        "",
        f"Coefficients (coverage and rejection of 0 by each route's default rule at {confidence:.4g}; MC = Monte",
        "Carlo standard error)",
        f"{'term':<18}{'route':<22}{'bias':>11}{'MC':>9}{'rmse':>11}{'coverage':>10}{'MC':>7}{'rejects 0':>11}",
    ]
    default = default_intervals(tables["intervals"]).set_index(["route", "term"])
    coefficients = tables["coefficients"]
    for term in curve.names:
        for row in _records(coefficients[coefficients["term"] == term]):
            at = (row["route"], term)
            rates = "".join(["         -", "      -", "          -"])
            if at in default.index:
                found: Any = default.loc[at]
                rates = (
                    f"{found['coverage']:>10.3f}{found['coverage_error']:>7.3f}{found['rejection']:>11.3f}"
                )
            lines.append(
                f"{_cut(term, 17):<18}{_cut(row['route'], 21):<22}{_num(row['bias']):>11}"
                f"{_num(row['bias_error'], 2):>9}{_num(row['rmse']):>11}{rates}"
            )
    lines += [
        "",
        "Components",
        f"{'route':<22}{'quantity':<24}{'truth':>10}{'bias':>11}{'MC':>9}{'rmse':>11}{'zero':>8}",
    ]
    for row in _records(tables["components"]):
        if row["quantity"] == "unit_variance_raw":
            continue
        lines.append(
            f"{_cut(row['route'], 21):<22}{row['quantity']:<24}{_num(row['truth']):>10}{_num(row['bias']):>11}"
            f"{_num(row['bias_error'], 2):>9}{_num(row['rmse']):>11}{row['zero']:>8.3f}"
        )
    lines += [
        "",
        f"Tests at level {1.0 - confidence:.4g}",
        f"{'test':<36}{'hypothesis':<26}{'rate':>8}{'MC':>8}  is",
    ]
    for row in _records(tables["tests"]):
        word = "size" if row["true"] else "power"
        lines.append(
            f"{row['test']:<36}{row['hypothesis']:<26}{row['rejection']:>8.3f}{row['rejection_error']:>8.3f}  {word}"
        )
    lines.append("")
    for key, reason in runs.left_out.items():
        lines += wrapped(f"Left out: {key}: {reason}.")
    for note in (*notes, CAUTION):
        lines += wrapped(note)
    return "\n".join(lines)


def paragraph(
    runs: Runs,
    tables: Mapping[str, pd.DataFrame],
    term: str,
    route: str,
    *,
    confidence: float,
    notes: tuple[str, ...],
) -> str:
    """Return sentences for a protocol, about one term by one route.

    Parameters
    ----------
    runs : Runs
    tables : mapping of str to DataFrame
    term, route : str
    confidence : float
    notes : tuple of str

    Returns
    -------
    str
    """
    curve = runs.curve
    coefficients = tables["coefficients"]
    here: Any = coefficients[(coefficients["term"] == term) & (coefficients["route"] == route)].iloc[0]
    text = (
        f"Before the analysis, {runs.count} data sets (seed {runs.seed}) were simulated with {curve.units} units and "
        f"{curve.n} rows under this truth: {truth_sentence(runs)}; the coefficient of {term} was {here['truth']:.4g}. "
        f"Route {route} estimated it with a bias of {here['bias']:.3g} (Monte Carlo standard error "
        f"{here['bias_error']:.2g}) and a root mean square error of {here['rmse']:.3g}."
    )
    default = default_intervals(tables["intervals"])
    chosen = default[(default["term"] == term) & (default["route"] == route)]
    if len(chosen):
        row: Any = chosen.iloc[0]
        word = "size" if here["truth"] == 0.0 else "power"
        text += (
            f" Its {100.0 * confidence:.4g}% interval ({row['rule']}) covered the truth in "
            f"{100.0 * row['coverage']:.1f}% of them "
            f"(±{100.0 * row['coverage_error']:.1f}); the {word} of the test of a zero coefficient was "
            f"{row['rejection']:.3f}."
        )
    components = tables["components"]
    zero = components[components["route"] == route]["zero"]
    if len(zero):
        text += f" The unit variance was estimated as zero in {100.0 * float(zero.iloc[0]):.1f}%."
    for item in _records(tables["tests"]):
        if item["test"] == f"unit_means_{route}" or (
            route not in ("reml", "swamy_arora") and "reml" in item["test"]
        ):
            word = "size" if item["true"] else "power"
            text += (
                f" The test of unit means ({item['test']}) rejected in {100.0 * item['rejection']:.1f}% "
                f"({word} at level {1.0 - confidence:.3g})."
            )
            break
    others = coefficients[(coefficients["term"] == term) & (coefficients["route"] != route)]
    if len(others):
        best: Any = others.iloc[int(others["rmse"].to_numpy().argmin())]
        text += (
            f" Of the other routes {best['route']} had the smallest root mean square error for it, "
            f"{best['rmse']:.3g}."
        )
    return " ".join([text, *notes, CAUTION])


def default_intervals(intervals: pd.DataFrame) -> pd.DataFrame:
    """Keep the default rule of each route: Satterthwaite on the curve, t of the residual form elsewhere."""
    curved = set(intervals.loc[intervals["rule"] == "satterthwaite", "route"])
    rule = np.where(intervals["route"].isin(curved), "satterthwaite", "t_residual")
    return intervals[intervals["rule"] == rule]


def wrapped(text: str) -> list[str]:
    """Break text into lines of at most 100 columns."""
    lines, line = [], ""
    for word in text.split():
        if line and len(line) + 1 + len(word) > WIDTH:
            lines.append(line)
            line = word
        else:
            line = f"{line} {word}".strip()
    return [*lines, line]


def _records(frame: pd.DataFrame) -> list[dict[str, Any]]:
    return [{str(key): value for key, value in row.items()} for row in frame.to_dict("records")]


def _cut(text: str, width: int) -> str:
    return text if len(text) <= width else text[: width - 3] + "..."


def _num(value: float, digits: int = 4) -> str:
    return f"{value:.{digits}g}"
