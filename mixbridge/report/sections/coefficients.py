"""Coefficients and variance components of the primary route."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.report.document import Block, Heading, Paragraph
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import Words, num

__all__ = ["coefficient_section", "component_section"]

Record = Mapping[str, Any]


def coefficient_section(record: Record, words: Words, *, robust: bool = True) -> tuple[Block, ...]:
    """Return coefficients with covariance type, reference, degrees of freedom and exact p."""
    blocks: list[Block] = [Heading("Coefficients")]
    found = record["inference"]
    if found["status"] != "computed":
        return (*blocks, Paragraph(f"There are none by the primary route: {found['status']}."))
    level = f"{100.0 * record['confidence']:g}"
    columns = {
        "term": "term",
        "estimate": "estimate",
        "standard_error": "standard error",
        "reference": "reference",
        "lower": "lower",
        "upper": "upper",
        "p_value": "p",
    }
    blocks.append(
        table_of(
            "coefficients",
            f"Coefficients by {found['route']}, covariance of the model, {level}% intervals.",
            found["rows"],
            columns,
            notes=("Degrees of freedom in parentheses; two-sided p values against zero.",),
        )
    )
    other = record["robust"]
    if robust and other["status"] == "computed":
        blocks.append(
            table_of(
                "coefficients-robust",
                "The same coefficients with standard errors robust to dependence within units "
                f"({other['covariance']}, "
                f"multiplier N/(N − 1)), {level}% intervals.",
                other["rows"],
                columns,
                notes=("With few units robust standard errors tend to be too small.",),
            )
        )
    elif robust:
        blocks.append(Paragraph(f"Cluster-robust standard errors: {other['status']}."))
    lost = record["fits"][record["primary"]]["not_estimable"]
    blocks += [Paragraph(f"{term} is not estimable: {reason}.") for term, reason in lost.items()]
    return tuple(blocks)


def component_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return variance components, ICC, weights and their intervals with methods."""
    primary = record["primary"]
    fit = record["fits"][primary]
    blocks: list[Block] = [Heading("Variance components")]
    if fit["idiosyncratic_variance"] is None:
        return (*blocks, Paragraph(f"{primary} estimates none."))
    text = (
        f"By {primary} the {words.unit_variance} is {num(fit['unit_variance'])} and the "
        f"{words.idiosyncratic_variance} {num(fit['idiosyncratic_variance'])} (variances); ratio ψ = "
        f"{num(fit['ratio'])}, "
        f"intraclass correlation ψ/(1 + ψ) = {num(fit['icc'], 3)}."
    )
    raw = fit["unit_variance_raw"]
    if isinstance(raw, float) and raw < 0.0:
        text += f" The unit variance as estimated is {num(raw)}; zero was used."
    blocks.append(Paragraph(text))
    weights, shares = list(fit["quasi_demeaning"].values()), list(fit["shrinkage"].values())
    if weights and all(isinstance(value, float) for value in (*weights, *shares)):
        sizes = list(fit["quasi_demeaning"])
        if len(weights) == 1:
            words_of = f"λ = {num(weights[0], 3)} and shrinkage s = {num(shares[0], 3)} for every unit"
        else:
            words_of = (
                f"λ runs from {num(weights[0], 3)} (units of {sizes[0]}) to {num(weights[-1], 3)} (units "
                f"of {sizes[-1]}), "
                f"shrinkage s from {num(shares[0], 3)} to {num(shares[-1], 3)}"
            )
        blocks.append(Paragraph(f"Weights of unit means ({words.weight}): {words_of}."))
    intervals = record["component_intervals"]
    if intervals["status"] == "computed":
        rows = [row for row in intervals["rows"] if row["route"] in (primary, "any")]
        columns = {
            "quantity": "quantity",
            "method": "method",
            "estimate": "estimate",
            "lower": "lower",
            "upper": "upper",
            "exact": "exact under normality",
            "note": "note",
        }
        if rows:
            caption = f"Intervals for the components of {primary}."
            blocks.append(table_of("component-intervals", caption, rows, columns))
    columns = {
        "route": "route",
        "unit_variance": "unit variance",
        "unit_variance_se": "se",
        "idiosyncratic_variance": "idiosyncratic variance",
        "idiosyncratic_variance_se": "se",
        "ratio": "ratio ψ",
        "icc": "ICC",
        "status": "status",
    }
    caption = "Variance components by every route, with sampling standard errors under normality."
    blocks.append(table_of("components", caption, record["components"], columns))
    return tuple(blocks)
