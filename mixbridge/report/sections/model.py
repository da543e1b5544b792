"""The model: its equation, the level of each variable, and the words of two fields."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.display.text import sentence
from mixbridge.report.document import Block, Formula, Heading, Paragraph, Table
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import VOCABULARY, Words
from mixbridge.routes import REFERENCE_ROUTES

__all__ = ["model_section", "model_text", "named_model", "vocabulary_section"]

Record = Mapping[str, Any]

_LEVELS = {
    "both": "varies within and between units",
    "within": "varies within units only",
    "between": "constant within units",
    "constant": "constant",
}


def named_model(record: Record, words: Words) -> tuple[str, str]:
    """Return the model and the unit effect as named, without randomness where the primary route has none."""
    if record["primary"] in REFERENCE_ROUTES:
        return "a linear model", "unit effect"
    return words.model, words.effect


def model_text(record: Record, words: Words) -> tuple[Block, ...]:
    """Return the equation with both error terms and what is assumed of them."""
    rows = "rows" if record["period"] is None else f"periods ({record['period']})"
    model, effect = named_model(record, words)
    assumed = ""
    if any(route not in REFERENCE_ROUTES for route in record["fits"]):
        assumed = (
            f" All random-effects routes assume {words.unrelated}. Likelihoods, and tests and intervals of "
            "variances, also "
            "assume that both are normal."
        )
    blocks: list[Block] = [
        Heading("Model"),
        Paragraph(
            f"{sentence(model)[:-1]} was fitted for {record['moments']['outcome']}, with one {effect} per "
            f"{record['unit']}; i counts units and t {rows} within them. Fixed part: {record['formula']}."
        ),
        Formula(
            r"y_{it} = x_{it}'\beta + \alpha_i + u_{it},\qquad \mathrm{Var}(\alpha_i) = \sigma_\alpha^2,\quad "
            r"\mathrm{Var}(u_{it}) = \sigma_u^2,\quad \psi = \sigma_\alpha^2/\sigma_u^2",
            "y_it = x_it'β + α_i + u_it,   Var(α_i) = σ_α²,   Var(u_it) = σ_u²,   ψ = σ_α²/σ_u²",
        ),
        Paragraph(
            f"α_i is the {effect}, u_it the {words.error}. Each has mean zero and one variance; all of them are "
            f"independent of one another.{assumed}"
        ),
    ]
    if record["added"] is not None:
        blocks.append(Paragraph(sentence(record["added"]["statement"])))
    return tuple(blocks)


def model_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return the model with the level of each variable."""
    return (*model_text(record, words), _columns(record))


def vocabulary_section() -> tuple[Block, ...]:
    """Return the words of economics and biostatistics side by side."""
    caption = "Names of the same quantities; in common use, from memory, and authors differ."
    header = ("here", "in economics", "in biostatistics")
    return (Heading("Words of two fields"), Table("vocabulary", caption, header, VOCABULARY))


def _columns(record: Record) -> Table:
    rows = [{**row, "level": _LEVELS.get(str(row["level"]), str(row["level"]))} for row in record["columns"]]
    columns = {
        "column": "column",
        "level": "level",
        "within_share": "within share",
        "mean": "mean",
        "sd_within": "sd within",
        "sd_between": "sd between",
    }
    return table_of(
        "columns",
        "Columns of the model and the outcome.",
        rows,
        columns,
        digits=3,
        notes=(
            "Within share: share of the sum of squares about the grand mean that lies within units. Standard "
            "deviations: "
            "within units with divisor n − N; between, of unit means weighted by rows, with divisor N − 1. "
            "Means and "
            "shares are over the rows used.",
        ),
    )
