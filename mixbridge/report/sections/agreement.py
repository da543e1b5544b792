"""Every route beside the primary one, and where the gaps come from."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.display.text import sentence
from mixbridge.reconcile.agreement import Thresholds
from mixbridge.report.document import Block, Bullets, Heading, Paragraph
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import Words, count, listed, num
from mixbridge.routes import REFERENCE_ROUTES

__all__ = ["agreement_section", "agreement_sentence", "attribution_section"]

Record = Mapping[str, Any]
MOST_ROWS = 400
"""Rows of the ledger that are printed; the record holds all."""
MOST_TERMS = 8
"""Terms that are named in one sentence."""


def agreement_sentence(record: Record) -> str:
    """Say in which terms the other random-effects routes agree with the primary one, and in which they do not."""
    summary, limits = record["summary"], Thresholds()
    if not summary["other_routes"]:
        return f"No other random-effects route was run beside {record['primary']}."
    other = "random-effects route" if record["primary"] in REFERENCE_ROUTES else "other random-effects route"
    others = count(summary["other_routes"], other)
    if record["inference"]["status"] != "computed":
        return f"{record['primary']} gave no coefficients to set beside those of {others}."
    quiet, loud, none = [], [], []
    for term, verdicts in summary["terms"].items():
        visible, conflicting = verdicts.get("visible", 0), verdicts.get("conflicting", 0)
        if visible or conflicting:
            parts = [
                f"{number} {name}"
                for number, name in ((visible, "visible"), (conflicting, "conflicting"))
                if number
            ]
            loud.append(f"{term} ({', '.join(parts)})")
        elif verdicts.get("identical", 0) or verdicts.get("immaterial", 0):
            quiet.append(term)
        else:
            none.append(term)
    rule = f"gap below {limits.gap:g} standard errors, half-widths within {limits.width:.0%}"
    start = f"Compared with {others} on the same rows, {record['primary']} "
    said = []
    if quiet:
        where = "every term" if not loud and not none else _some(quiet)
        said.append(f"differs at most immaterially in {where} ({rule})")
    if loud:
        more = "" if quiet else f"; immaterial is a {rule}"
        said.append(f"differs more than immaterially in {_some(loud)}{more}")
    if none:
        said.append(f"has no counterpart in {_some(none)}")
    return f"{start}{', '.join(said[:-1])}{', and ' if len(said) > 1 else ''}{said[-1]}."


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
    rows, limits = record["ledger"], Thresholds()
    notes = [
        f"Immaterial: gap below {limits.gap:g} standard errors of the primary route and half-widths within "
        f"{limits.width:.0%}. Visible: more than that. Conflicting: visible, and the interval answers "
        "differently about "
        "zero. Identical: to rounding, by an identity.",
        "pooled, within, between and first_difference answer other questions: they are reference points, not "
        "votes.",
    ]
    if len(rows) > MOST_ROWS:
        notes.append(f"{len(rows) - MOST_ROWS} more rows are in the record.")
    return (
        Heading("All routes side by side"),
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
        return (*blocks, Paragraph(sentence(found["status"])))
    rows = found["rows"]
    if not rows:
        if not record["summary"]["other_routes"]:
            return ()
        return (*blocks, Paragraph("No term is more than immaterially apart in any random-effects route."))
    kept = (
        "the widest gap of each term"
        if found["terms_apart"] == len(rows)
        else (
            f"the widest gap of the {len(rows)} terms furthest apart, of {found['terms_apart']} that are more than "
            "immaterially apart"
        )
    )
    blocks.append(
        Paragraph(
            f"Shown is {kept}. A gap between two routes on the curve comes from their ratios alone; that of "
            "their intervals "
            "also from scale, degrees of freedom and covariance."
        )
    )
    for item in rows:
        if item["status"] != "computed":
            blocks.append(Paragraph(f"No attribution for {item['term']}, {item['route']}: {item['status']}."))
            continue
        gap = num(item["gap_in_se"], 3)
        name = f"{item['term']}: {item['route']} against {record['primary']}, {gap} standard errors"
        blocks += [Heading(name, 2), Bullets(tuple(item["sentences"]))]
    return tuple(blocks)


def _some(names: list[str]) -> str:
    """Return the first names, and how many more there are."""
    if len(names) <= MOST_TERMS:
        return listed(names)
    return f"{', '.join(names[:MOST_TERMS])} and {len(names) - MOST_TERMS} more terms"
