"""Tests of a zero unit variance, the position on exogeneity, and the audit."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.report.document import Block, Heading, Paragraph
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import Words, num

__all__ = ["audit_section", "exogeneity_section", "exogeneity_sentence", "zero_section"]

Record = Mapping[str, Any]


def zero_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return every test of a zero unit variance with the law it is referred to."""
    found = record["variance_tests"]
    blocks: list[Block] = [Heading("Is the unit variance zero?")]
    if found["status"] != "computed":
        return (*blocks, Paragraph(f"{found['status']}."))
    columns = {
        "test": "test",
        "statistic": "statistic",
        "reference": "null law",
        "df": "df",
        "df_denominator": "denominator df",
        "p_value": "p",
        "exact": "exact under normality",
    }
    note = f"Simulated laws: {found['draws']} draws, seed {found['seed']}."
    return (
        *blocks,
        table_of("zero-tests", "Tests of σ_α² = 0.", found["rows"], columns, notes=(note,)),
    )


def exogeneity_sentence(record: Record, words: Words) -> str | None:
    """Say in one sentence what the contrast of within and generalised least-squares slopes gives."""
    rows = record["contrasts"].get("rows", [])
    for row in rows:
        same = row["contrast"] == "within - gls" and row["variance"] == "one idiosyncratic variance"
        if same and isinstance(row["p_value"], float):
            return (
                f"The contrast of within and generalised least-squares slopes is {num(row['statistic'])} "
                f"on {row['df']} "
                f"degrees of freedom (chi-square, p = {num(row['p_value'], 3)})."
            )
    return None


def exogeneity_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return contrasts, and within, between and contextual coefficients."""
    unrelated = f"{words.unrelated[0].upper()}{words.unrelated[1:]}"
    blocks: list[Block] = [
        Heading("Unit effects and covariates"),
        Paragraph(
            f"{unrelated}: assumed by every route but within and first_difference. What the data show of it:"
        ),
    ]
    sentence = exogeneity_sentence(record, words)
    if sentence is not None:
        blocks.append(Paragraph(sentence))
    contrasts = record["contrasts"]
    if contrasts["status"] == "computed":
        rows = [*contrasts["rows"], *record["contrasts_robust"].get("rows", [])]
        columns = {
            "contrast": "contrast",
            "variance": "variance",
            "between_weights": "weights of unit means",
            "statistic": "statistic",
            "df": "df",
            "p_value": "p",
            "note": "note",
        }
        blocks.append(table_of("contrasts", "Contrasts, each a chi-square.", rows, columns))
        if record["contrasts_robust"]["status"] != "computed":
            blocks.append(Paragraph(f"Cluster-robust contrasts: {record['contrasts_robust']['status']}."))
    else:
        blocks.append(Paragraph(f"Contrasts: {contrasts['status']}."))
    means = record["unit_means"]
    if means["status"] == "computed":
        blocks.append(Paragraph(means["statement"]))
        columns = {
            "term": "term",
            "within": "within",
            "within_se": "se",
            "between": "between",
            "between_se": "se",
            "contextual": "contextual",
            "contextual_se": "se",
            "contextual_p": "p",
        }
        caption = f"Within, between and contextual coefficients by {means['route']}, one fit with unit means."
        blocks.append(table_of("unit-means", caption, means["coordinates"], columns))
        columns = {
            "term": "term",
            "estimate": "estimate",
            "standard_error": "standard error",
            "reference": "reference",
            "p_value": "p",
        }
        if means["coefficients"]:
            caption = f"All coefficients by {means['route']} with unit means in the model."
            blocks.append(table_of("with-unit-means", caption, means["coefficients"], columns))
        blocks += [Paragraph(text) for text in means["certificate"]["statements"]]
    elif record["added"] is not None:
        blocks.append(Paragraph(record["added"]["statement"]))
    else:
        blocks.append(Paragraph(f"Unit means: {means['status']}."))
    return tuple(blocks)


def audit_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return the audit: assumption, evidence, p, departure, conclusion."""
    found = record["audit"]
    blocks: list[Block] = [Heading("Assumptions that all routes share")]
    if found["status"] != "computed":
        return (*blocks, Paragraph(f"{found['status']}."))
    blocks += [Paragraph(text) for text in found["header"]]
    rows = [
        {**row, "status_of_row": "" if row["status_of_row"] == "computed" else row["status_of_row"]}
        for row in found["rows"].values()
    ]
    done = [row for row in rows if not row["status_of_row"].startswith("not ")]
    left = [row for row in rows if row["status_of_row"].startswith("not ")]
    columns = {
        "assumption": "assumption",
        "evidence": "evidence",
        "statistic": "statistic",
        "reference": "reference",
        "p_value": "p",
        "departure": "size of departure",
        "consequence": "what it would do",
        "conclusion": "what may be concluded",
    }
    blocks.append(table_of("audit", "The audit, row by row.", done, columns, digits=3))
    if left:
        columns = {"assumption": "assumption", "evidence": "evidence", "status_of_row": "why not"}
        blocks.append(table_of("audit-not-assessed", "Rows that could not be assessed.", left, columns))
    return tuple(blocks)
