"""The audit: every assumption that all routes share, with what the data can and cannot show."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.display.text import sentence
from mixbridge.report.document import Block, Bullets, Heading, Paragraph
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import Words

__all__ = ["audit_section"]

Record = Mapping[str, Any]


def audit_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return the audit, assumption by assumption: evidence, p, departure, conclusion, and what it would do."""
    found = record["audit"]
    blocks: list[Block] = [Heading("Assumptions that all routes share")]
    if found["status"] != "computed":
        return (*blocks, Paragraph(sentence(found["status"])))
    blocks += [Paragraph(text) for text in found["header"]]
    done: dict[str, list[Mapping[str, Any]]] = {}
    left = []
    for key, row in found["rows"].items():
        if row["status_of_row"].startswith("not "):
            left.append({**row, "why": row["status_of_row"].partition(": ")[2] or row["status_of_row"]})
        else:
            done.setdefault(row["assumption"], []).append({**row, "row": key.replace("_", " ")})
    columns = {
        "row": "row",
        "evidence": "evidence",
        "statistic": "statistic",
        "reference": "reference",
        "p_value": "p",
        "departure": "size of departure",
        "conclusion": "what may be concluded",
    }
    for number, (assumption, rows) in enumerate(done.items(), 1):
        blocks.append(Heading(sentence(assumption).rstrip("."), 2))
        blocks.append(table_of(f"audit-{number}", f"Evidence: {assumption}.", rows, columns, digits=3))
        effects = tuple(dict.fromkeys(sentence(row["consequence"]) for row in rows if row["consequence"]))
        if effects:
            blocks += [Paragraph("What a departure would do:"), Bullets(effects)]
    if left:
        blocks.append(Heading("Not assessed", 2))
    for why in dict.fromkeys(row["why"] for row in left):
        rows = [row for row in left if row["why"] == why]
        blocks.append(Paragraph(f"{sentence(why)} So there is nothing, neither for nor against, from:"))
        blocks.append(Bullets(tuple(f"{row['assumption']}: {row['evidence']}" for row in rows)))
    return tuple(blocks)
