"""Coefficients and variance components of the primary route."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.display.text import sentence
from mixbridge.report.document import Block, Heading, Paragraph, Table
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import Words, num
from mixbridge.routes import REFERENCE_ROUTES

__all__ = ["coefficient_section", "coefficient_text", "component_section", "component_text"]

Record = Mapping[str, Any]
MOST_SIZES = 30
"""Distinct unit sizes for which weights are tabulated."""

_METHODS = {
    "exact_pivot": "exact pivot: the F test of unit intercepts inverted (Wald 1947; Harville & Fenech 1985)",
    "exact_chi_square": "exact chi square: RSS_w over chi-square quantiles",
    "profile_likelihood": "profile likelihood: where the deviance is not above its minimum by more than a chi-square "
    "quantile with one degree of freedom",
    "satterthwaite": "satterthwaite: chi-square with matched mean and variance (Satterthwaite 1946)",
    "delta": "delta: estimate and normal quantile times standard error",
}
"""Interval methods for components in words."""

_COLUMNS = {
    "term": "term",
    "estimate": "estimate",
    "standard_error": "standard error",
    "reference": "reference",
    "lower": "lower",
    "upper": "upper",
    "p_value": "p",
}


def coefficient_text(record: Record, words: Words) -> tuple[Block, ...]:
    """Return coefficients with model-based covariance, reference, degrees of freedom and exact p."""
    blocks: list[Block] = [Heading("Coefficients")]
    found = record["inference"]
    if found["status"] != "computed":
        return (*blocks, Paragraph(f"There are none by the primary route: {found['status']}."))
    if found["route"] in REFERENCE_ROUTES:
        rule = "They are those of the residual sum of squares of the route."
    else:
        rule = (
            "They match the mean and variance of the estimated variance of each coefficient "
            "(Satterthwaite 1946; Giesbrecht & Burns 1985)."
        )
    if any(row["reference"] == "not available" and row["estimate"] is not None for row in found["rows"]):
        rule += " Where a reference is not available there is no interval and no p value."
    blocks.append(
        table_of(
            "coefficients",
            f"Coefficients by {found['route']}, covariance of the model, {_level(record)}% intervals.",
            [row for row in found["rows"] if row["estimate"] is not None],
            _COLUMNS,
            notes=(f"In parentheses: degrees of freedom. {rule} p: two-sided, against zero.",),
        )
    )
    lost = record["fits"][record["primary"]]["not_estimable"]
    blocks += [Paragraph(f"No estimate of {term}: {reason}.") for term, reason in lost.items()]
    return tuple(blocks)


def coefficient_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return coefficients with both kinds of covariance."""
    blocks = list(coefficient_text(record, words))
    if record["inference"]["status"] != "computed":
        return tuple(blocks)
    other = record["robust"]
    if other["status"] != "computed":
        blocks.append(Paragraph(sentence(f"{words.robust}: {other['status']}")))
        return tuple(blocks)
    source = "Liang & Zeger 1986; Arellano 1987" if other["route"] == "within" else "Liang & Zeger 1986"
    notes = [
        f"{other['covariance']}: sums of score products of units ({source}); reference t with N − 1 degrees "
        "of freedom. "
        "With few units such standard errors tend to be too small.",
        *(sentence(note) for note in other["notes"]),
    ]
    blocks.append(
        table_of(
            "coefficients-robust",
            f"The same coefficients with {words.robust}, {_level(record)}% intervals.",
            [row for row in other["rows"] if row["estimate"] is not None],
            _COLUMNS,
            notes=tuple(notes),
        )
    )
    return tuple(blocks)


def component_text(record: Record, words: Words) -> tuple[Block, ...]:
    """Return variance components, ICC and the range of weights in words."""
    primary = record["primary"]
    fit = record["fits"][primary]
    blocks: list[Block] = [Heading("Variance components")]
    if not isinstance(fit["idiosyncratic_variance"], float):
        return (*blocks, Paragraph(f"{primary} estimates none."))
    if fit["ratio"] == "inf":
        text = (
            f"{primary} estimates the {words.idiosyncratic_variance} as "
            f"{num(fit['idiosyncratic_variance'])}, and no "
            f"{words.unit_variance}: unit effects are taken as they are."
        )
        return (*blocks, Paragraph(text))
    if primary == "pooled":
        text = f"pooled takes the {words.unit_variance} to be zero; its error variance is "
        return (*blocks, Paragraph(f"{text}{num(fit['idiosyncratic_variance'])}."))
    text = (
        f"By {primary} the {words.unit_variance} is {num(fit['unit_variance'])} and the "
        f"{words.idiosyncratic_variance} {num(fit['idiosyncratic_variance'])}; the ratio ψ is {num(fit['ratio'])}, "
        f"and the intraclass correlation ψ/(1 + ψ), given the covariates, {num(fit['icc'], 3)}."
    )
    raw = fit["unit_variance_raw"]
    if isinstance(raw, float) and raw < 0.0:
        text += f" As estimated the first is {num(raw)}; zero was used."
    blocks.append(Paragraph(text))
    weights = _weights(fit, words)
    return (*blocks, Paragraph(weights)) if weights else tuple(blocks)


def component_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return variance components, weights by size, intervals with methods, and components of all routes."""
    primary = record["primary"]
    blocks = list(component_text(record, words))
    by_size = _weights_by_size(record)
    if by_size is not None:
        blocks.append(by_size)
    intervals = record["component_intervals"]
    rows = [row for row in intervals.get("rows", []) if row["route"] in (primary, "any")]
    if rows:
        columns = {
            "quantity": "quantity",
            "method": "method",
            "estimate": "estimate",
            "lower": "lower",
            "upper": "upper",
            "exact": "exact under normality",
            "note": "note",
        }
        caption = f"Intervals for the components, {_level(record)}%."
        used = {str(row["method"]) for row in rows}
        note = sentence("; ".join(text for key, text in _METHODS.items() if key in used))
        blocks.append(table_of("component-intervals", caption, rows, columns, notes=(note,)))
    columns = {
        "route": "route",
        "unit_variance": "unit variance",
        "unit_variance_se": "its standard error",
        "idiosyncratic_variance": "idiosyncratic variance",
        "idiosyncratic_variance_se": "standard error of that",
        "ratio": "ratio ψ",
        "icc": "ICC",
        "status": "status",
    }
    caption = "Variance components by every route, with sampling standard errors under normality."
    note = "Unit variances are shown as estimated, also where they are negative; the ratio is the one used."
    negative = any(
        isinstance(row["unit_variance"], float) and row["unit_variance"] < 0.0 for row in record["components"]
    )
    blocks.append(
        table_of("components", caption, record["components"], columns, notes=(note,) if negative else ())
    )
    return tuple(blocks)


def _level(record: Record) -> str:
    return f"{100.0 * record['confidence']:g}"


def _weights(fit: Mapping[str, Any], words: Words) -> str | None:
    """Say what λ and the shrinkage are, over unit sizes."""
    weights, shares = list(fit["quasi_demeaning"].values()), list(fit["shrinkage"].values())
    if not weights or not all(isinstance(value, float) for value in (*weights, *shares)):
        return None
    start = f"Weights of unit means ({words.weight}): "
    if fit["ratio"] == 0.0:
        return (
            f"{start}both are 0 at ψ = 0, so nothing of a unit mean is subtracted and every predicted effect is "
            "zero."
        )
    sizes = list(fit["quasi_demeaning"])
    if len(weights) == 1:
        return f"{start}λ = {num(weights[0], 3)} and s = {num(shares[0], 3)} for every unit."
    return (
        f"{start}λ runs from {num(weights[0], 3)} (units with {sizes[0]} "
        f"{'row' if sizes[0] == '1' else 'rows'}) to "
        f"{num(weights[-1], 3)} (units with {sizes[-1]} rows), s from {num(shares[0], 3)} to {num(shares[-1], 3)}."
    )


def _weights_by_size(record: Record) -> Table | None:
    fit = record["fits"][record["primary"]]
    rows = [
        {"size": int(size), "weight": weight, "shrinkage": fit["shrinkage"][size]}
        for size, weight in fit["quasi_demeaning"].items()
    ]
    if not 2 < len(rows) <= MOST_SIZES or not isinstance(fit["ratio"], float) or fit["ratio"] == 0.0:
        return None
    columns = {"size": "rows per unit", "weight": "λ", "shrinkage": "s"}
    return table_of("weights", "Weights by number of rows.", rows, columns)
