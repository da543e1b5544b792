"""The estimator: the primary route by name and formula, what was chosen on the way, and all routes run."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.display.text import sentence
from mixbridge.report.document import Block, Formula, Heading, Paragraph, Table
from mixbridge.report.estimators import estimator_of
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import Words, num
from mixbridge.routes import REFERENCE_ROUTES, named_route

__all__ = ["chosen_text", "estimator_section", "estimator_text", "routes_table"]

Record = Mapping[str, Any]

_CHOSEN = {
    True: "It was chosen before the results were seen, as the authors state.",
    False: "It was not chosen beforehand, as the authors state.",
    None: "Whether it was chosen before the results were seen is not stated.",
}

_CONVENTIONS: Mapping[tuple[str, object], str] = {
    ("between", "size_weighted"): "unit means are weighted by their number of rows",
    ("between", "unweighted"): "every unit mean counts once",
    ("between", "harmonic"): "unit means count once, with the harmonic mean size in the expectation",
    ("expectation", "exact"): "expectations of both forms are exact",
    ("expectation", "short"): "divisors are n − N and N, without a correction for estimated coefficients",
    ("divisor", "units_minus_one"): "unit intercepts have divisor N − 1",
    ("divisor", "units"): "unit intercepts have divisor N",
    ("count", "rank"): "degrees of freedom count ranks",
    ("count", "columns"): "degrees of freedom count columns",
    ("scale", "own"): "standard errors are scaled by the idiosyncratic variance of the route",
    (
        "scale",
        "gls_residuals",
    ): "standard errors are scaled by the quasi-demeaned residual variance over n − K",
    ("scale", "gls_residuals_n"): "standard errors are scaled by the quasi-demeaned residual variance over n",
    ("reml_constant", "included"): "the restricted log-likelihood contains half of log|X'X| (Harville 1974)",
    ("reml_constant", "omitted"): "the restricted log-likelihood leaves out half of log|X'X|",
}
"""Conventions in words; what is not here is said by its key."""

_SILENT = {"covariance", "multiplier", "reference", "one_row_units"}
"""Conventions that the sections on coefficients and rows speak of, where they are the default."""


def chosen_text(record: Record, chosen_beforehand: bool | None) -> str:
    """Say which route is primary, and whether it was chosen beforehand."""
    primary = record["primary"]
    return f"The primary route is {primary}: {estimator_of(primary).name}. {_CHOSEN[chosen_beforehand]}"


def estimator_text(record: Record, words: Words, chosen_beforehand: bool | None) -> tuple[Block, ...]:
    """Return the primary route by name and formula, its conventions and its status."""
    primary = record["primary"]
    fit, entry = record["fits"][primary], estimator_of(primary)
    blocks: list[Block] = [
        Heading("Estimator"),
        Paragraph(f"{chosen_text(record, chosen_beforehand)} Variances: {entry.components}."),
        Formula(entry.tex, entry.text),
    ]
    curve = primary not in REFERENCE_ROUTES
    where = [entry.symbols] if entry.symbols else []
    if curve:
        blocks.append(
            Formula(
                r"\hat\beta(\psi) = (X'V_0^{-1}X)^{-1}X'V_0^{-1}y,\qquad V_0 = I + \psi ZZ',\qquad "
                r"\lambda_i = 1-(1+T_i\psi)^{-1/2},\quad s_i = \lambda_i(2-\lambda_i)",
                "β(ψ) = (X'V₀⁻¹X)⁻¹X'V₀⁻¹y,   V₀ = I + ψZZ',   λ_i = 1 − (1 + T_i ψ)^(−1/2),   s_i = λ_i (2 − λ_i)",
            )
        )
        where.append(
            "Z holds the indicators of units, T_i is the number of rows of unit i; the coefficients are "
            "those of least "
            "squares on rows less the share λ_i of their unit mean (Fuller & Battese 1974), and s_i is the "
            "weight of a "
            "unit's own data in its predicted effect"
        )
    if where:
        blocks.append(Paragraph(sentence(f"here {'; '.join(where)}")))
    blocks += [Paragraph(text) for text in (_truncation(record), _conventions(record), _status(fit)) if text]
    blocks += [Paragraph(f"Note: {note}.") for note in fit["notes"] if "unit_variance_raw" not in note]
    return tuple(blocks)


def estimator_section(record: Record, words: Words, chosen_beforehand: bool | None) -> tuple[Block, ...]:
    """Return the primary route, its first-stage forms, and all routes that were run."""
    fit = record["fits"][record["primary"]]
    blocks = list(estimator_text(record, words, chosen_beforehand))
    forms = [
        {"form": name, "value": value, "unit": on_unit, "error": on_error}
        for name, value, on_error, on_unit in fit["forms"]
    ]
    if forms:
        columns = {"form": "form", "value": "value", "error": "times σ_u²", "unit": "times σ_α²"}
        blocks.append(
            table_of(
                "forms",
                f"First-stage sums of squares of {record['primary']}, and what each is set equal to.",
                forms,
                columns,
                digits=6,
            )
        )
    blocks.append(routes_table(record))
    return tuple(blocks)


def routes_table(record: Record) -> Table:
    """Return all routes that were run, with how each obtains its components."""
    rows = []
    for key, fit in record["fits"].items():
        entry = estimator_of(key)
        prior = fit["conventions"].get("prior")
        how = entry.components if prior is None else f"{entry.components}; prior {num(prior, 3)}"
        rows.append({"route": key, "name": entry.name, "components": how, "status": fit["status"]})
    columns = {"route": "route", "name": "estimator", "components": "variances", "status": "status"}
    return table_of("routes", "All routes that were run.", rows, columns)


def _truncation(record: Record) -> str | None:
    """Say what the rule about negative estimates did here; None where there is no such rule."""
    route = named_route(record["primary"])[0]
    fit = record["fits"][record["primary"]]
    raw = fit["unit_variance_raw"]
    if route in (*REFERENCE_ROUTES, "ml", "reml", "nerlove") or not isinstance(raw, float):
        return None  # the likelihood is searched over ratios that are not negative; a sample variance is not negative
    if raw < 0.0 and fit["ratio"] == 0.0:
        return (
            f"The unit variance came out as {num(raw)}. It is reported as such, and zero is used in the "
            "coefficients."
        )
    if raw < 0.0:
        return f"The unit variance came out as {num(raw)}; it is reported as such."
    return "A negative unit variance would have been reported as such and zero used; here it is not negative."


def _conventions(record: Record) -> str | None:
    conventions = record["fits"][record["primary"]]["conventions"]
    silent = {key for key in _SILENT if conventions.get(key) in ("default", "model", "kept")}
    said = [
        _CONVENTIONS.get((key, value), f"{key.replace('_', ' ')} is {num(value)}")
        for key, value in conventions.items()
        if key not in silent and value is not None
    ]
    return f"Conventions: {'; '.join(said)}." if said else None


def _status(fit: Mapping[str, Any]) -> str | None:
    said = fit["status"] in (
        "fitted",
        "unit variance truncated",
    )  # the second by the rule about negative estimates
    return None if said else f"Status: {fit['status']}."
