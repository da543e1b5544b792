"""The paragraph for the methods section of a paper."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.report.estimators import estimator_of
from mixbridge.report.sections.agreement import agreement_sentence
from mixbridge.report.sections.assumptions import exogeneity_sentence
from mixbridge.report.words import Words, count, num, words_for

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
    account, primary = record["accounting"], record["primary"]
    fit = record["fits"][primary]
    sizes = record["moments"]["sizes"]
    each = f"{count(sizes[0], 'row')} each" if len(sizes) == 1 else f"{sizes[0]} to {sizes[-1]} rows each"
    sentences = [
        f"{record['moments']['outcome']} was modelled by {words.model}, {record['formula']}, with one "
        f"{words.effect} per "
        f"{record['unit']}, on {account['rows_used']} of {account['rows_given']} rows in "
        f"{count(account['units'], 'unit')} ({each}).",
        f"The reported estimates are by {estimator_of(primary).name} ({primary}; {fit['status']}).",
    ]
    if fit["idiosyncratic_variance"] is not None and isinstance(fit["ratio"], float):
        sentences.append(
            f"The {words.unit_variance} is {num(fit['unit_variance'])}, the {words.idiosyncratic_variance} "
            f"{num(fit['idiosyncratic_variance'])}, and the intraclass correlation given the covariates "
            f"{num(fit['icc'], 3)}."
        )
    if record["inference"]["status"] == "computed":
        level = f"{100.0 * record['confidence']:g}"
        sentences.append(
            f"Intervals ({level}%) use the covariance of the model and {record['reference']} references."
        )
    sentences.append(agreement_sentence(record))
    contrast = exogeneity_sentence(record, words)
    if contrast is not None:
        sentences.append(contrast)
    if record["added"] is not None:
        sentences.append(record["added"]["statement"])
    sentences.append(f"Computed with mixbridge {record['software']['mixbridge']}.")
    return " ".join(sentences)
