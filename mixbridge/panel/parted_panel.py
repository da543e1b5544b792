"""From a formula and rows in parts that stay where they are to all that is needed to take their moments there."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Literal, Protocol

import numpy as np
import numpy.typing as npt
from patsy import EvalEnvironment

from mixbridge.errors import DataError, FormulaError, OptionError
from mixbridge.panel.absent import RowlessPanel
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.coding import lesson_coding
from mixbridge.panel.design import lay_out
from mixbridge.panel.formula import parse_formula
from mixbridge.panel.parted import Recipe, Taught, plan_of, portable, read_rows, refuse_foreign
from mixbridge.panel.parted_learn import Each, PartBook, ReadAll, learn_parts
from mixbridge.panel.readings import factor_columns, make_environment
from mixbridge.panel.roles import check_role
from mixbridge.panel.streaming_learn import blank

__all__ = ["PartedPanel", "PartedRows", "learn_parted"]

FloatArray = npt.NDArray[np.float64]


class Parts(Protocol):
    """Rows in parts that functions can be sent to."""

    @property
    def names(self) -> tuple[object, ...]: ...
    @property
    def index_names(self) -> tuple[object, ...]: ...
    @property
    def each(self) -> Each: ...


class PartedPanel(RowlessPanel):
    """What is known of a panel whose rows stayed where they are."""

    __slots__ = ()

    @property
    def why_apart(self) -> str:
        """Why, and what to do."""
        return (
            "the rows stayed in the partitions where they are and only closed moments came back, which this "
            "question goes beyond. Pass chunks=True to read the partitions one after the other in this process, or "
            "pass a sample of whole units as one frame."
        )

    @property
    def period_note(self) -> str | None:
        """Why periods have no order."""
        if self.period_name is None:
            return None
        return (
            f"{self.period_name}: no pair of unit and period is repeated; rows stay in partitions, where neighbouring "
            "periods do not meet, so what needs their order is left out"
        )


@dataclass(frozen=True, slots=True, eq=False)
class PartedRows:
    """What was learned from the parts.

    Parameters
    ----------
    outcome : str
    names : tuple of str
        Design columns.
    terms : mapping of str to slice
    constant : int or None
    accounting : Accounting
    taught : Taught
        What the parts need to lay out their rows.
    origin : numpy.ndarray of shape (k,)
        The first row used: design columns but the constant, then the outcome.
    books : list of PartBook
        What each part told.
    wanted : list of str
        Columns to read.
    coding : str
        What columns mean beyond their names.
    """

    outcome: str
    names: tuple[str, ...]
    terms: Mapping[str, slice]
    constant: int | None
    accounting: Accounting
    taught: Taught
    origin: FloatArray
    books: list[PartBook]
    wanted: Sequence[str]
    coding: str


def learn_parted(
    formula: str,
    source: Parts,
    *,
    unit: str,
    period: str | None = None,
    incomplete_rows: Literal["drop", "refuse"] = "drop",
    trusted: bool = True,
    env: int | EvalEnvironment = 0,
    read: ReadAll | None = None,
) -> PartedRows:
    """Validate rows in parts and lay out the design of a formula.

    Parameters
    ----------
    formula : str
        As for rows in chunks; it may not name what the caller has defined.
    source : Parts
    unit, period, incomplete_rows, trusted, env
        As `mixbridge.panel.build_panel`.
    read : callable, optional
        As for `mixbridge.panel.parted_learn.learn_parts`.

    Returns
    -------
    PartedRows
    """
    if incomplete_rows not in ("drop", "refuse"):
        raise OptionError.not_among("incomplete_rows", incomplete_rows, ("drop", "refuse"))
    environment = make_environment(env if trusted else None, reference=1)
    parsed = parse_formula(formula)
    check_role("unit", unit, source.names, source.index_names)
    if period is not None:
        check_role("period", period, source.names, source.index_names)
        if period == unit:
            raise DataError(
                f"unit and period both name {unit!r}: each row would be a unit of its own, or repeat one."
            )
    factor_columns(
        parsed, source.names, environment, trusted=trusted
    )  # names and grammar, before anything is sent
    keys = (unit,) if period is None else (unit, period)
    recipe = Recipe(formula, source.names, keys, trusted)
    plan = plan_of(recipe, environment)
    refuse_foreign(plan)
    wanted = plan.wanted
    for name in wanted:
        times = source.names.count(name)
        if times > 1:
            raise DataError(f"The data have {times} columns named {name!r}. Rename or remove all but one.")

    def each(function: object, *given: object) -> list[object]:
        return source.each(function, wanted, *given)

    lesson, told, books = learn_parts(plan, recipe, each, incomplete_rows, read)
    if parsed.outcome in lesson.levels or lesson.numeric[parsed.outcome] != 1:
        shape = (
            "categories" if parsed.outcome in lesson.levels else f"{lesson.numeric[parsed.outcome]} columns"
        )
        raise FormulaError(
            f"The outcome {parsed.outcome.code} yields {shape}; needed is one column of numbers."
        )
    design = lay_out(parsed.terms, {factor: blank(lesson, factor) for factor in parsed.factors}, formula)
    places = {factor: place for place, factor in enumerate(plan.reads)}
    levels = portable({places[factor]: levels for factor, levels in lesson.levels.items()})
    taught = Taught(recipe, told, levels, replace(design, factors=(), terms={}))
    sample = next(book.sample for book in books if book.sample is not None)
    first = next(read_rows(taught, "the first row used", sample))
    return PartedRows(
        parsed.outcome.name(),
        design.names,
        design.terms,
        design.constant,
        lesson.account,
        taught,
        first.z[0, :-1],
        books,
        wanted,
        lesson_coding(design.names, plan, lesson),
    )
