"""Likelihoods with their constants, the bound on the optimum, and the identities."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.display.text import sentence
from mixbridge.reconcile.cautions import IDENTITIES_HEADING, IDENTITIES_LIMIT
from mixbridge.report.document import Block, Bullets, Formula, Heading, Paragraph
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
        blocks.append(
            table_of(
                "likelihoods",
                "Log-likelihoods with all constants, and criteria.",
                found["rows"],
                columns,
                digits=8,
            )
        )
        blocks.append(
            Formula(
                r"\ell(\psi) = -\tfrac{1}{2}\left[m\log\frac{2\pi r(\psi)}{m} + m + \sum_T m_T\log(1+T\psi)\right]",
                "ℓ(ψ) = −½ [m log(2π r(ψ)/m) + m + Σ_T m_T log(1 + Tψ)]",
            )
        )
        blocks.append(
            Paragraph(
                "Here m = n for ML. REML has m = n − K and adds −½ log|X'V₀⁻¹X|; with its constant also ½ log|X'X|."
            )
        )
    else:
        blocks.append(Paragraph(sentence(f"likelihoods: {found['status']}")))
    for key, fit in record["fits"].items():
        if fit["certificate"] is not None:
            statements = tuple(sentence(text) for text in fit["certificate"]["statements"])
            blocks += [
                Paragraph(f"What bounds the optimum of {key}, in floating point:"),
                Bullets(statements),
            ]
    return tuple(blocks)


def identity_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return the identities under a heading that says what they check."""
    rows = record["identities"]
    used = [row for row in rows if row["verdict"] != "does not apply"]
    left = [row for row in rows if row["verdict"] == "does not apply"]
    if not rows:
        return ()
    blocks: list[Block] = [Heading(f"Identities. {IDENTITIES_HEADING}")]
    columns = {
        "name": "identity",
        "statement": "statement",
        "verdict": "verdict",
        "difference": "relative difference",
        "tolerance": "tolerance",
        "condition": "condition",
        "source": "source",
    }
    if used:
        blocks.append(
            table_of("identities", "What theory says must agree, on these data.", used, columns, digits=2)
        )
    if left:
        columns = {"name": "identity", "condition": "condition that is not met"}
        blocks.append(table_of("identities-apart", "Identities that do not apply here.", left, columns))
    return (*blocks, Paragraph(IDENTITIES_LIMIT, tone="caution"))
