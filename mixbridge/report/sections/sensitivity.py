"""How far figures move: along the path, without one-row units, without each unit."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.display.text import sentence
from mixbridge.report.document import Block, Heading, Paragraph
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import Words, count, num

__all__ = ["sensitivity_section"]

Record = Mapping[str, Any]
_SIGNS = {1: "above zero", -1: "below zero", 0: "holding zero"}


def sensitivity_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return the range of each coefficient over the variance ratio, and what deletions do."""
    return (Heading("Sensitivity"), *_paths(record), *_without_singletons(record), *_influence(record))


def _paths(record: Record) -> list[Block]:
    found = record["paths"]
    if found["status"] != "computed":
        return [Paragraph(sentence(f"path over the variance ratio: {found['status']}"))]
    rows = [{**row, "changes": "; ".join(map(_change, row["changes_of_sign"]))} for row in found["rows"]]
    columns = {
        "term": "term",
        "lowest": "lowest",
        "highest": "highest",
        "lowest_allowed": "lowest in the exact set",
        "highest_allowed": "highest in the exact set",
        "changes": "where the interval changes its answer about zero",
    }
    note = "Over all ratios from 0 (pooled) to infinity (within)"
    if any(row["lowest_allowed"] is not None for row in rows):
        note += f", and over the exact {100.0 * record['confidence']:g}% set of the ratio"
    if any(row["changes"] for row in rows):
        note += ". Intervals for the last column: normal quantile, scale of each ratio"
    notes = [f"{note}."]
    if len(rows) < found["terms"]:
        notes.append(f"The first {len(rows)} of {found['terms']} coefficients.")
    caption = "Coefficients of generalised least squares over the variance ratio ψ."
    return [table_of("paths", caption, rows, columns, notes=tuple(notes))]


def _change(change: list[Any]) -> str:
    ratio, below, above = change
    return f"ψ = {num(ratio)}: from {_SIGNS[below]} to {_SIGNS[above]}"


def _without_singletons(record: Record) -> list[Block]:
    found = record["without_singletons"]
    if not record["accounting"]["one_row_units"]:
        return []
    if found["status"] != "computed":
        return [Paragraph(sentence(f"without one-row units: {found['status']}"))]
    columns = {"term": "term", "estimate": "estimate", "moved_in_se": "moved (se of primary)"}
    units = count(found["units"], "unit")
    ratio = "" if found["ratio"] in (None, "inf") else f"; ratio ψ = {num(found['ratio'])}"
    caption = f"{found['route']} without the {units} of one row{ratio}."
    return [table_of("without-one-row-units", caption, found["rows"], columns)]


def _influence(record: Record) -> list[Block]:
    found = record["influence"]
    if found["status"] != "computed":
        return [Paragraph(sentence(f"without each unit in turn: {found['status']}"))]
    columns = {
        "term": "term",
        "largest_in_se": "largest move (se of primary)",
        "sign_changes": "units whose deletion changes the answer against zero",
    }
    caption = f"{found['route']} without each of {count(found['units'], 'unit')} in turn."
    notes = tuple(sentence(note) for note in found["notes"])
    return [table_of("influence", caption, found["rows"], columns, notes=notes)]
