"""How far figures move: along the path, without one-row units, without each unit."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.report.document import Block, Heading, Paragraph
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import Words, count, num

__all__ = ["sensitivity_section"]

Record = Mapping[str, Any]


def sensitivity_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return the range of each coefficient over the variance ratio, and what deletions do."""
    blocks: list[Block] = [Heading("Sensitivity")]
    paths = record["paths"]
    if paths["status"] == "computed":
        columns = {
            "term": "term",
            "lowest": "lowest",
            "highest": "highest",
            "lowest_allowed": "lowest, ratios the data allow",
            "highest_allowed": "highest, ratios the data allow",
        }
        caption = (
            "Coefficients of generalised least squares over all variance ratios, and over the exact set."
        )
        blocks.append(table_of("paths", caption, paths["rows"], columns))
    else:
        blocks.append(Paragraph(f"Path over the variance ratio: {paths['status']}."))
    alone = record["without_singletons"]
    if alone["status"] == "computed":
        columns = {"term": "term", "estimate": "estimate", "moved_in_se": "moved (se of primary)"}
        caption = (
            f"{alone['route']} without the {count(alone['units'], 'unit')} of one row: ratio ψ = "
            f"{num(alone['ratio'])}."
        )
        blocks.append(table_of("without-one-row-units", caption, alone["rows"], columns))
    else:
        blocks.append(Paragraph(f"Without one-row units: {alone['status']}."))
    found = record["influence"]
    if found["status"] == "computed":
        columns = {
            "term": "term",
            "largest_in_se": "largest move (se of primary)",
            "sign_changes": "units whose deletion changes the answer against zero",
        }
        caption = f"{found['route']} without each of {count(found['units'], 'unit')} in turn."
        blocks.append(table_of("influence", caption, found["rows"], columns, notes=tuple(found["notes"])))
    else:
        blocks.append(Paragraph(f"Without each unit in turn: {found['status']}."))
    return tuple(blocks)
