"""Every route beside the primary one, and where the gaps come from."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.report.document import Block, Bullets, Heading, Paragraph
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import Words, count, listed, num

__all__ = ["agreement_section", "agreement_sentence", "attribution_section"]

Record = Mapping[str, Any]
CLASSES = ("identical", "immaterial", "visible", "conflicting")
MOST_ROWS = 400
"""Rows of the ledger that are printed; the record holds all."""


def agreement_sentence(record: Record) -> str:
    """Say in one sentence for each term in how many routes it agrees."""
    summary = record["summary"]
    if not summary["other_routes"]:
        return "No other random-effects route was run."
    parts = []
    for term, verdicts in summary["terms"].items():
        text = listed([f"{verdicts[name]} {name}" for name in CLASSES if verdicts.get(name)])
        parts.append(f"{term}: {text or 'not available'}")
    return (
        f"Classes of {count(summary['other_routes'], 'other random-effects route')} against "
        f"{record['primary']}: "
        f"{'; '.join(parts)}."
    )


def agreement_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return the ledger: all routes, term by term, with the class of each gap."""
    columns = {
        "term": "term",
        "route": "route",
        "estimate": "estimate",
        "standard_error": "standard error",
        "lower": "lower",
        "upper": "upper",
        "gap_in_se": "gap (se of primary)",
        "verdict": "class",
        "reason": "reason",
    }
    rows = record["ledger"]
    notes = [
        "Immaterial: gap below 0.1 standard errors of the primary route and half-widths within 10%; "
        "conflicting: not "
        "immaterial, and the answer against zero changes.",
        "pooled, within, between and first_difference answer other questions: reference points, not votes.",
    ]
    if len(rows) > MOST_ROWS:
        notes.append(f"{len(rows) - MOST_ROWS} more rows are in the record.")
    return (
        Heading("All routes"),
        Paragraph(agreement_sentence(record)),
        table_of(
            "ledger",
            f"Every term by every route beside {record['primary']}; references: {record['reference']}.",
            rows[:MOST_ROWS],
            columns,
            notes=tuple(notes),
        ),
    )


def attribution_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return for each term that is not immaterial where its widest gap comes from."""
    found = record["attributions"]
    blocks: list[Block] = [Heading("Where the gaps come from")]
    if found["status"] != "computed":
        return (*blocks, Paragraph(f"{found['status']}."))
    if not found["rows"]:
        return (*blocks, Paragraph("No term is more than immaterially apart in any random-effects route."))
    for item in found["rows"]:
        if item["status"] != "computed":
            blocks.append(Paragraph(f"{item['term']}, {item['route']}: {item['status']}."))
            continue
        name = (
            f"{item['term']}: {item['route']} against {record['primary']}, {num(item['gap_in_se'], 3)} "
            "standard errors"
        )
        blocks += [Heading(name, 2), Bullets(tuple(item["sentences"]))]
    return tuple(blocks)
