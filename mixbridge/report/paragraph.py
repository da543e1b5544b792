"""The paragraph for the methods section of a paper."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.display.text import sentence
from mixbridge.report.estimators import estimator_of
from mixbridge.report.sections.agreement import agreement_sentence
from mixbridge.report.sections.assumptions import exogeneity_sentence
from mixbridge.report.sections.model import named_model
from mixbridge.report.words import Words, count, listed, num, words_for
from mixbridge.routes import REFERENCE_ROUTES

__all__ = ["methods_paragraph", "paragraph_of"]

Record = Mapping[str, Any]


def methods_paragraph(study: Any, *, audience: str = "both") -> str:
    """Return the paragraph of a study.

    Parameters
    ----------
    study : Study
    audience : str
        A key of `mixbridge.report.words.AUDIENCES`.

    Returns
    -------
    str
    """
    return paragraph_of(study.to_dict(), words_for(audience))


def paragraph_of(record: Record, words: Words) -> str:
    """Return model, rows, estimator, components, agreement and exogeneity as one paragraph."""
    found = [
        _model(record, words),
        _estimator(record),
        _components(record, words),
        agreement_sentence(record),
        exogeneity_sentence(record, words),
        None if record["added"] is None else sentence(record["added"]["statement"]),
        f"Computed with mixbridge {record['software']['mixbridge']}.",
    ]
    return " ".join(text for text in found if text)


def _model(record: Record, words: Words) -> str:
    account, sizes = record["accounting"], record["moments"]["sizes"]
    given, used = account["rows_given"], account["rows_used"]
    rows = f"all {used} rows" if given == used else f"{used} of {given} rows"
    if account["dropped"]:
        rows += f" ({listed([_lost(*entry) for entry in account['dropped']])} dropped)"
    each = f"{count(sizes[0], 'row')} each" if len(sizes) == 1 else f"{sizes[0]} to {sizes[-1]} rows each"
    model, effect = named_model(record, words)
    return (
        f"{record['moments']['outcome']} was modelled by {model}, {record['formula']}, with one {effect} per "
        f"{record['unit']}, on {rows} in {count(account['units'], 'unit')} ({each})."
    )


def _lost(cause: str, column: str, rows: int) -> str:
    """Return ``3 with missing covariate forage``."""
    return f"{rows} with {cause}" if cause.endswith(column) else f"{rows} with {cause} {column}"


def _estimator(record: Record) -> str:
    primary, fit = record["primary"], record["fits"][record["primary"]]
    status = "" if fit["status"] == "fitted" else f" ({fit['status']})"
    found = record["inference"]
    if found["status"] != "computed":
        return f"The route reported is {estimator_of(primary).name}{status}; it gave no coefficients."
    rule = (
        "the degrees of freedom of their residuals"
        if primary in REFERENCE_ROUTES
        else "Satterthwaite degrees of freedom"
    )
    return (
        f"Estimates are by {estimator_of(primary).name}{status}; {100.0 * record['confidence']:g}% intervals "
        "rest on the "
        f"covariance of the model and t distributions with {rule}."
    )


def _components(record: Record, words: Words) -> str | None:
    fit = record["fits"][record["primary"]]
    if record["primary"] in REFERENCE_ROUTES or not isinstance(fit["icc"], float):
        return None
    return (
        f"The {words.unit_variance} is {num(fit['unit_variance'])}, the {words.idiosyncratic_variance} "
        f"{num(fit['idiosyncratic_variance'])}, and the intraclass correlation given the covariates "
        f"{num(fit['icc'], 3)}."
    )
