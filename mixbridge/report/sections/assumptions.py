"""Tests of a zero unit variance, and the position on unit effects that are related to the covariates."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from mixbridge.display.text import sentence
from mixbridge.report.contrast import contrast_row
from mixbridge.report.document import Block, Heading, Paragraph
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import Words, count, num, said_p

__all__ = ["exogeneity_section", "exogeneity_sentence", "zero_section"]

Record = Mapping[str, Any]

_SOURCES = (
    ("f_unit_intercepts", "F of unit intercepts: Wald 1947"),
    ("lagrange_multiplier", "Lagrange multiplier: Breusch & Pagan 1980, unequal sizes Baltagi & Li 1990"),
    ("lagrange_multiplier_one_sided", "one-sided: Honda 1985"),
    ("lagrange_multiplier_standardised", "standardised: Moulton & Randolph 1989"),
    ("likelihood_ratio", "finite-sample laws of likelihood ratios: Crainiceanu & Ruppert 2004"),
)


def zero_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return every test of a zero unit variance with the law it is referred to."""
    found = record["variance_tests"]
    blocks: list[Block] = [Heading("Is the unit variance zero?")]
    if found["status"] != "computed":
        return (*blocks, Paragraph(sentence(found["status"])))
    columns = {
        "test": "test",
        "statistic": "statistic",
        "reference": "null law",
        "df": "df",
        "df_denominator": "denominator df",
        "p_value": "p",
        "monte_carlo_error": "Monte Carlo error of p",
        "exact": "exact under normality",
    }
    known = {row["test"] for row in found["rows"] if isinstance(row["statistic"], float)}
    notes = list(_notes(found["rows"]))
    sources = [text for key, text in _SOURCES if key in known]
    if sources:
        notes.append(sentence("; ".join(sources)))
    return (
        *blocks,
        table_of("zero-tests", "Tests of σ_α² = 0.", found["rows"], columns, notes=tuple(notes)),
    )


def _notes(rows: list[Mapping[str, Any]]) -> Iterator[str]:
    """Say each note once, with the tests that it belongs to."""
    for note in dict.fromkeys(row["note"] for row in rows if row["note"]):
        names = dict.fromkeys(
            f"{row['test'].replace('_', ' ')} ({row['reference']})" for row in rows if row["note"] == note
        )
        yield f"{sentence(', '.join(names))[:-1]}: {note}."


def exogeneity_sentence(record: Record, words: Words) -> str | None:
    """Say in one sentence what the contrast of within and generalised least-squares slopes gives."""
    row = contrast_row(record)
    if row is None:
        return None
    freedom = count(row["df"], "degree of freedom", "degrees of freedom")
    return (
        f"The {words.contrast} of {words.within} and {words.gls} is {num(row['statistic'])} on {freedom} "
        "(chi-square, "
        f"{said_p(row['p_value'])})."
    )


def exogeneity_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return the position of the primary route, contrasts, and within, between and contextual coefficients."""
    blocks: list[Block] = [Heading("Unit effects and covariates"), Paragraph(_position(record, words))]
    said = exogeneity_sentence(record, words)
    if said is not None:
        blocks.append(Paragraph(said))
    contrasts = record["contrasts"]
    if contrasts["status"] == "computed":
        rows = [*contrasts["rows"], *record["contrasts_robust"].get("rows", [])]
    if contrasts["status"] == "computed" and not rows:
        blocks.append(Paragraph(f"There is no contrast to form{_no_contrast(record)}."))
    elif contrasts["status"] == "computed":
        columns = {
            "contrast": "contrast",
            "variance": "variance",
            "between_weights": "weights of unit means",
            "statistic": "statistic",
            "df": "df",
            "p_value": "p",
            "note": "note",
        }
        note = (
            "At one ratio and one idiosyncratic variance the forms are one statistic (Hausman 1978; Hausman "
            "& Taylor 1981; "
            "Arellano 1993); other rows show what other conventions print."
        )
        blocks.append(
            table_of(
                "contrasts",
                f"Contrasts at the ratio of {contrasts['route']}, each a chi-square.",
                rows,
                columns,
                notes=(note,),
            )
        )
        if record["contrasts_robust"]["status"] != "computed":
            blocks.append(
                Paragraph(sentence(f"cluster-robust contrasts: {record['contrasts_robust']['status']}"))
            )
    else:
        blocks.append(Paragraph(sentence(f"contrasts: {contrasts['status']}")))
    return (*blocks, *_unit_means(record), *_projection(record))


def _position(record: Record, words: Words) -> str:
    """Say what the primary route takes for granted, and which routes do not."""
    primary = record["primary"]
    free = [key for key in ("within", "first_difference") if key in record["fits"]]
    if record["added"] is not None:
        return (
            f"Given the columns added, in the form stated under the model, {primary} assumes that what is "
            "left of the unit "
            "effect is unrelated to the covariates."
        )
    if primary in ("within", "first_difference"):
        text = (
            f"{primary} does not assume {words.unrelated}; pooled, between and the random-effects routes do."
        )
    else:
        text = f"{primary} assumes {words.unrelated}"
        text += f"; {' and '.join(free)} {'does' if len(free) == 1 else 'do'} not." if free else "."
    return text


def _no_contrast(record: Record) -> str:
    if record["added"] is not None:
        return ": with the columns added the slopes are the within slopes at every ratio"
    return (
        ": within and generalised least squares share no slope"
        if record["ranks"]["within"]
        else (": no column varies within units")
    )


def _unit_means(record: Record) -> list[Block]:
    means = record["unit_means"]
    if means["status"] != "computed":
        return [] if record["added"] is not None else [Paragraph(sentence(f"unit means: {means['status']}"))]
    blocks: list[Block] = []
    if record["added"] is None:
        source = "Adding unit means to the model (Mundlak 1978; unequal sizes: Wooldridge 2019). "
        blocks.append(Paragraph(f"{source}{means['statement']}"))
    columns = {
        "term": "term",
        "within": "within",
        "within_se": "se of within",
        "between": "between",
        "between_se": "se of between",
        "contextual": "contextual",
        "contextual_se": "se of contextual",
        "contextual_p": "p of contextual",
    }
    caption = f"Within, between and contextual coefficients by {means['route']}, one fit with unit means."
    blocks.append(table_of("unit-means", caption, means["coordinates"], columns))
    columns = {
        "tested": "tested",
        "statistic": "F",
        "df1": "df",
        "df2": "denominator df",
        "p_value": "p",
        "note": "note",
    }
    blocks.append(table_of("unit-means-tests", "Tests of the unit means.", means["tests"], columns))
    columns = {
        "term": "term",
        "estimate": "estimate",
        "standard_error": "standard error",
        "reference": "reference",
        "p_value": "p",
    }
    if means["coefficients"] and record["added"] is None:
        caption = f"All coefficients by {means['route']} with unit means in the model."
        blocks.append(table_of("with-unit-means", caption, means["coefficients"], columns))
    return blocks + [Paragraph(text) for text in means["certificate"]["statements"]]


def _projection(record: Record) -> list[Block]:
    found = record["projection"]
    if found["status"] != "computed":
        return (
            []
            if record["added"] is None or record["unit_means"]["status"] == "computed"
            else [Paragraph(sentence(f"tests of the projection: {found['status']}"))]
        )
    rows = found["tests"]
    headings = {key: key.replace("_", " ") for key in rows[0]} if rows else {}
    return [table_of("projection-tests", "Tests of the restrictions inside the projection.", rows, headings)]
