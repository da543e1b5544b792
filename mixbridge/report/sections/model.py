"""The model, the rows it was fitted to, and the estimator."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from mixbridge.report.document import Block, Formula, Heading, Paragraph
from mixbridge.report.estimators import estimator_of
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import Words, count, listed, num

__all__ = ["data_section", "estimator_section", "median_size", "model_section"]

Record = Mapping[str, Any]

_LEVELS = {
    "both": "varies within and between units",
    "within": "varies within units only",
    "between": "constant within units",
    "constant": "constant",
}


def model_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return the equation with both error terms and the level of each variable."""
    outcome, unit = _outcome(record), record["unit"]
    subject = "rows" if record["period"] is None else f"periods ({record['period']})"
    blocks: list[Block] = [
        Heading("Model"),
        Paragraph(
            f"{words.model[0].upper()}{words.model[1:]} was fitted for {outcome}, with one {words.effect} per "
            f"{unit}; i counts units and t "
            f"{subject} within them. Fixed part: {record['formula']}."
        ),
        Formula(
            r"y_{it} = x_{it}'\beta + \alpha_i + u_{it},\qquad \mathrm{Var}(\alpha_i) = \sigma_\alpha^2,\quad "
            r"\mathrm{Var}(u_{it}) = \sigma_u^2,\quad \psi = \sigma_\alpha^2/\sigma_u^2",
            "y_it = x_it'β + α_i + u_it,   Var(α_i) = σ_α²,   Var(u_it) = σ_u²,   ψ = σ_α²/σ_u²",
        ),
        Paragraph(
            f"α_i is the {words.effect}, u_it the {words.error}; both have mean zero and are independent "
            "of each other "
            f"and across units. All random-effects routes take {words.unrelated}."
        ),
    ]
    rows = [{**row, "level": _LEVELS.get(str(row["level"]), str(row["level"]))} for row in record["columns"]]
    notes = []
    if record["added"] is not None:
        notes.append(record["added"]["statement"])
    columns = {
        "column": "column",
        "level": "level",
        "within_share": "within share",
        "mean": "mean",
        "sd_within": "sd within",
        "sd_between": "sd between",
    }
    caption = (
        "Columns of the model and the outcome: level, share of within variation, mean, standard deviations."
    )
    blocks.append(table_of("columns", caption, rows, columns, digits=3, notes=tuple(notes)))
    return tuple(blocks)


def data_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return rows, units, sizes, what was lost and why."""
    account, moments = record["accounting"], record["moments"]
    sizes = moments["sizes"]
    middle = median_size(moments["sizes"], moments["counts"])
    size = (
        f"each with {count(sizes[0], 'row')}"
        if len(sizes) == 1
        else f"with {sizes[0]} to {sizes[-1]} rows, median {middle:g}"
    )
    one = account["one_row_units"]
    text = (
        f"{account['rows_used']} of {account['rows_given']} rows were used, in "
        f"{count(account['units'], 'unit')}, {size}."
    )
    if one:
        text += f" {count(one, 'unit')} {'has' if one == 1 else 'have'} one row."
    blocks: list[Block] = [Heading("Rows and units"), Paragraph(text)]
    if account["dropped"]:
        lost = [
            {"cause": cause, "column": column, "rows": rows} for cause, column, rows in account["dropped"]
        ]
        columns = {"cause": "cause", "column": "column", "rows": "rows"}
        blocks.append(table_of("dropped", "Rows dropped, each counted under its first cause.", lost, columns))
    missing = [{"column": name, "rows": rows} for name, rows in account["missing"] if rows]
    if missing:
        columns = {"column": "column", "rows": "missing"}
        blocks.append(table_of("missing", "Missing values by column, over all rows given.", missing, columns))
    if record["source"]:
        blocks.append(Paragraph(f"Source of the rows: {record['source']}."))
    blocks += [Paragraph(f"{note[0].upper()}{note[1:]}.") for note in account["notes"]]
    ranks = record["ranks"]
    blocks.append(
        Paragraph(
            f"Ranks: K = {ranks['total']} of the columns, K_w = {ranks['within']} of their deviations "
            "from unit means, "
            f"K_p = {ranks['between']} of their unit means, K_c = {ranks['unit_constant']} unit-constant "
            "directions; n = "
            f"{account['rows_used']}, N = {account['units']}."
        )
    )
    return tuple(blocks)


def estimator_section(record: Record, words: Words, chosen_beforehand: bool | None) -> tuple[Block, ...]:
    """Return the primary route by name and formula, and all routes that were run."""
    primary = record["primary"]
    fit, entry = record["fits"][primary], estimator_of(primary)
    when = {
        True: "It was chosen before the results were seen, as the authors state.",
        False: "It was not chosen beforehand, as the authors state.",
        None: "Whether it was chosen before the results were seen is not stated.",
    }[chosen_beforehand]
    blocks: list[Block] = [
        Heading("Estimator"),
        Paragraph(
            f"The primary route is {primary}: {entry.name}. {when} Components: {entry.components}. "
            f"Status: {fit['status']}."
        ),
    ]
    if entry.tex:
        blocks.append(Formula(entry.tex, entry.text))
    blocks += [
        Formula(
            r"\hat\beta(\psi) = (X'V_0^{-1}X)^{-1}X'V_0^{-1}y,\qquad V_0 = I + \psi ZZ',\qquad "
            r"\lambda_i = 1-(1+T_i\psi)^{-1/2},\quad s_i = \lambda_i(2-\lambda_i)",
            "β(ψ) = (X'V₀⁻¹X)⁻¹X'V₀⁻¹y,   V₀ = I + ψZZ',   λ_i = 1 − (1 + T_i ψ)^(−1/2),   s_i = λ_i (2 − λ_i)",
        ),
        Paragraph(
            "A unit variance estimated below zero is shown as it came and zero is used; no estimate is "
            "changed otherwise."
        ),
    ]
    chosen = {
        key: value
        for key, value in fit["conventions"].items()
        if value not in ("default", "own", "model", None)
    }
    if chosen:
        text = listed([f"{key.replace('_', ' ')} {num(value)}" for key, value in chosen.items()])
        blocks.append(Paragraph(f"Conventions of the primary route: {text}."))
    blocks += [Paragraph(f"{note[0].upper()}{note[1:]}.") for note in fit["notes"]]
    others = [key for key in record["fits"] if key != primary]
    if others:
        blocks.append(Paragraph(f"All routes run beside it: {listed(others)}."))
    return tuple(blocks)


def median_size(sizes: list[int], counts: list[int]) -> float:
    """Return the median unit size from distinct sizes and their counts."""
    upto = np.cumsum(counts)
    total = int(upto[-1])
    middle = np.searchsorted(upto, [(total + 1) // 2, total // 2 + 1])
    return float(np.asarray(sizes)[middle].mean())


def _outcome(record: Record) -> str:
    return str(record["moments"]["outcome"])
