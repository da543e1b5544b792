"""Likelihoods with their constants, the bound on the optimum, and the identities."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.reconcile.cautions import IDENTITIES_HEADING, IDENTITIES_LIMIT
from mixbridge.report.document import Block, Bullets, Heading, Paragraph
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import Words

__all__ = ["identity_section", "optimum_section"]

Record = Mapping[str, Any]


def optimum_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return log-likelihoods and criteria, and what bounds the optimum."""
    blocks: list[Block] = [Heading("Likelihoods and the optimum")]
    found = record["likelihoods"]
    if found["status"] == "computed":
        columns = {
            "likelihood": "likelihood",
            "log_likelihood": "log-likelihood",
            "parameters": "parameters",
            "aic": "AIC",
            "bic_rows": "BIC (n)",
            "bic_units": "BIC (N)",
            "comparable": "may be compared",
        }
        caption = "Log-likelihoods with all constants, and criteria."
        blocks.append(table_of("likelihoods", caption, found["rows"], columns, digits=8))
    else:
        blocks.append(Paragraph(f"Likelihoods: {found['status']}."))
    for key, fit in record["fits"].items():
        if fit["certificate"] is not None:
            blocks += [Paragraph(f"The optimum of {key}:"), Bullets(tuple(fit["certificate"]["statements"]))]
    return tuple(blocks)


def identity_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return the identities under a heading that says what they check."""
    columns = {
        "name": "identity",
        "statement": "statement",
        "verdict": "verdict",
        "difference": "relative difference",
        "tolerance": "tolerance",
        "condition": "condition",
        "source": "source",
    }
    rows = record["identities"]
    if not rows:
        return ()
    return (
        Heading(f"Identities. {IDENTITIES_HEADING}"),
        table_of("identities", "What theory says must agree, on these data.", rows, columns, digits=2),
        Paragraph(IDENTITIES_LIMIT, tone="caution"),
    )
