"""The rows: how many, in which units, what was lost and why."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.display.text import sentence
from mixbridge.report.document import Block, Heading, Paragraph
from mixbridge.report.sections.cells import table_of
from mixbridge.report.words import Words, count

__all__ = ["data_section", "rows_text"]

Record = Mapping[str, Any]
MOST_SIZES = 30
"""Distinct unit sizes that are tabulated; with more, the smallest, the median and the largest are said."""


def rows_text(record: Record) -> str:
    """Return rows, units and sizes in words."""
    account, sizes = record["accounting"], record["moments"]["sizes"]
    given, used, one = account["rows_given"], account["rows_used"], account["one_row_units"]
    rows = f"All {count(used, 'row')} were used" if given == used else f"{used} of {given} rows were used"
    text = f"{rows}, in {count(account['units'], 'unit')} ({record['unit']}). "
    if len(sizes) == 1:
        text += f"The panel is balanced: each unit has {count(sizes[0], 'row')}."
    else:
        middle = f"{account['median_size']:g}"
        text += f"The panel is unbalanced: units have {sizes[0]} to {sizes[-1]} rows, median {middle}."
    if one and len(sizes) > 1:
        text += f" {sentence(count(one, 'unit'))[:-1]} {'has' if one == 1 else 'have'} one row."
    return text


def data_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return rows, units, sizes, what was lost and why."""
    account = record["accounting"]
    blocks: list[Block] = [Heading("Rows and units"), Paragraph(rows_text(record))]
    sizes = [
        {"size": size, "units": units}
        for size, units in zip(record["moments"]["sizes"], record["moments"]["counts"], strict=True)
    ]
    if 2 <= len(sizes) <= MOST_SIZES:
        columns = {"size": "rows per unit", "units": "units"}
        blocks.append(table_of("sizes", "Units by number of rows used.", sizes, columns))
    if account["dropped"]:
        lost = [
            {"cause": cause, "column": column, "rows": rows} for cause, column, rows in account["dropped"]
        ]
        columns = {"cause": "cause", "column": "column", "rows": "rows"}
        blocks.append(table_of("dropped", "Rows dropped, each counted under its first cause.", lost, columns))
        blocks.append(Paragraph(_by_unit(account["by_unit"])))
    missing = [{"column": name, "rows": rows} for name, rows in account["missing"] if rows]
    if missing:
        columns = {"column": "column", "rows": "missing"}
        blocks.append(table_of("missing", "Missing values by column, over all rows given.", missing, columns))
    if record["source"]:
        blocks.append(Paragraph(sentence(f"source of the rows: {record['source']}")))
    blocks += [Paragraph(f"Note: {note}.") for note in account["notes"]]
    ranks = record["ranks"]
    blocks.append(
        Paragraph(
            f"Degrees of freedom count ranks: n = {account['rows_used']}, N = {account['units']}, K = "
            f"{ranks['total']} "
            f"for the columns, K_w = {ranks['within']} for their deviations from unit means, K_p = "
            f"{ranks['between']} "
            f"for their unit means, K_c = {ranks['unit_constant']} for combinations that are constant within units."
        )
    )
    return tuple(blocks)


def _by_unit(found: Mapping[str, int] | None) -> str:
    """Say how the rows lost are spread over units."""
    if found is None:
        return "How the rows dropped are spread over units was not counted."
    given, none = found["units_given"], found["units_without_usable_row"]
    some, most = found["units_with_dropped_rows"], found["most_rows_dropped"]
    if none:
        text = (
            f"Of {count(given, 'unit')} in the data {none} {'has' if none == 1 else 'have'} no usable row. "
        )
    else:
        text = f"Every one of the {count(given, 'unit')} in the data keeps a row. "
    if some:
        lost = (
            f"one row {'' if some == 1 else 'each'}".strip()
            if most == 1
            else f"at most {count(most, 'row')} each"
        )
        lost = f"{most} rows" if some == 1 and most > 1 else lost
        text += f"{some} of the units used lost {lost}."
    else:
        text += "The units used lost no row."
    return text
