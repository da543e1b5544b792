"""From a formula and a database relation to a query for the rows used and their design columns."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import pandas as pd
from patsy import EvalEnvironment, EvalFactor

from mixbridge.errors import DataError, FormulaError, OptionError
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.categories import Coded
from mixbridge.panel.coding import digest
from mixbridge.panel.design import Design, lay_out
from mixbridge.panel.factors import Stored
from mixbridge.panel.formula import parse_formula
from mixbridge.panel.parted import refuse_foreign
from mixbridge.panel.pushed_order import Steps, look_at_periods
from mixbridge.panel.pushed_sql import NUMBERS, FactorSQL, NotInSQLError, case_of, factor_sql
from mixbridge.panel.pushed_survey import Survey, levels_of, survey_rows
from mixbridge.panel.readings import factor_columns, make_environment
from mixbridge.panel.roles import check_role
from mixbridge.panel.streaming_walk import Plan
from mixbridge.sources.arrow import to_pandas
from mixbridge.sources.duckdb_source import ROWS, RelationSource, quoted

__all__ = ["Query", "build_query", "columns_of", "fetched_keys", "key_sql"]

FloatArray = npt.NDArray[np.float64]

MOST_COLUMNS = 64
"""Columns beyond which rows are streamed: a query over k columns asks for k (k + 1) / 2 products."""
_WIDE = frozenset(("hugeint", "uhugeint"))
_KEYS = (NUMBERS - {"decimal"}) | {"varchar", "boolean", "enum", "date"}


@dataclass(frozen=True, slots=True, eq=False)
class Query:
    """The rows used as a query, and what is known of them.

    Parameters
    ----------
    source : RelationSource
    sql : str
        Selects the unit as ``k``, each column but the constant as ``x0, x1, ...``, the outcome last, and the period
        as ``p`` where there is one.
    columns : tuple of str
        Design columns, then the outcome.
    constant : int or None
        The intercept column, which the query leaves out.
    origin : numpy.ndarray of shape (k,)
        A number near each column's mean; its value where it has only one.
    terms : mapping of str to slice
    account : Accounting
    unit : str
    period : str or None
    wide_keys : bool
        Whether unit keys are integers beyond 64 bits, fetched as text.
    steps : Steps or None
        What is known of the periods.
    coding : str
        What columns mean beyond their names.
    """

    source: RelationSource
    sql: str
    columns: tuple[str, ...]
    constant: int | None
    origin: FloatArray
    terms: Mapping[str, slice]
    account: Accounting
    unit: str
    period: str | None
    wide_keys: bool
    steps: Steps | None
    coding: str

    @property
    def asked(self) -> list[int]:
        """Places of the columns that the query yields as ``x0, x1, ...``."""
        return [j for j in range(len(self.columns)) if j != self.constant]


def build_query(
    formula: str,
    source: RelationSource,
    *,
    unit: str,
    period: str | None = None,
    incomplete_rows: Literal["drop", "refuse"] = "drop",
    trusted: bool = True,
    env: int | EvalEnvironment = 0,
) -> Query:
    """Write the rows used and their design columns as a query.

    Parameters
    ----------
    formula, unit, period, incomplete_rows, trusted, env
        As `mixbridge.panel.build_panel`.
    source : RelationSource

    Raises
    ------
    NotInSQLError
        If the formula or a column needs more than SQL has; rows can be streamed then.
    FormulaError, DataError, OptionError
        As `mixbridge.panel.build_panel`.
    """
    if incomplete_rows not in ("drop", "refuse"):
        raise OptionError.not_among("incomplete_rows", incomplete_rows, ("drop", "refuse"))
    environment = make_environment(env if trusted else None, reference=1)
    parsed = parse_formula(formula)
    check_role("unit", unit, source.names, ())
    if period is not None:
        check_role("period", period, source.names, ())
        if period == unit:
            raise DataError(
                f"unit and period both name {unit!r}: each row would be a unit of its own, or repeat one."
            )
    reads = factor_columns(parsed, source.names, environment, trusted=trusted)
    keys = (unit,) if period is None else (unit, period)
    plan = Plan(parsed, reads, keys, environment, trusted)
    try:
        refuse_foreign(plan)
    except FormulaError as error:
        raise NotInSQLError("it names what is defined in this program only") from error
    types = source.types
    if types[unit] not in _KEYS:
        raise NotInSQLError(f"the unit keys are of the type {types[unit]}")
    factors = {
        factor: factor_sql(factor.code, {name: types[name] for name in names})
        for factor, names in reads.items()
    }
    if factors[parsed.outcome].number is None:
        raise NotInSQLError("the outcome is not a number")
    survey = survey_rows(source, plan, factors, incomplete_rows)
    levels, survey = levels_of(source, plan, factors, survey)
    learned: dict[EvalFactor, Any] = {
        factor: levels.get(factor, Stored(np.empty((0, 1)))) for factor in parsed.factors
    }
    design = lay_out(parsed.terms, learned, formula)
    if len(design.names) > MOST_COLUMNS:
        raise NotInSQLError(f"it has {len(design.names)} columns")
    written = [
        _column_sql(design, j, [factors[factor] for factor in parsed.factors])
        for j in range(len(design.names))
        if j != design.constant
    ]
    columns = [*written, str(factors[parsed.outcome].number)]
    listed = ", ".join(f"{sql} AS x{j}" for j, sql in enumerate(columns))
    # adding zero makes one key of 0.0 and -0.0
    key = f"{quoted(unit)} + 0.0" if types[unit] in ("float", "double") else quoted(unit)
    when = "" if period is None else f", {quoted(period)} AS p"
    sql = f"SELECT {key} AS k{when}, {listed} FROM {ROWS} WHERE {survey.used}"
    origin = _origin(
        source, sql, columns, constant=design.constant, factors=list(factors.values()), survey=survey
    )
    steps = None if period is None else look_at_periods(source, sql, unit, period, types[period])
    return Query(
        source,
        sql,
        (*design.names, parsed.outcome.name()),
        design.constant,
        origin,
        design.terms,
        survey.account,
        unit,
        period,
        types[unit] in _WIDE,
        steps,
        digest(design.names, [learned[factor] for factor in parsed.factors]),
    )


def _column_sql(design: Design, j: int, factors: list[FactorSQL]) -> str:
    """Write a design column: the product of its pieces."""
    pieces = []
    for piece in design.recipe[j]:
        factor, learned = factors[piece.place], design.factors[piece.place]
        if piece.values is None:
            pieces.append(str(factor.number))
        else:
            assert isinstance(learned, Coded), "a piece with values belongs to a categorical factor"
            values = piece.values.tolist()
            pieces.append(case_of(factor, dict(zip(learned.levels, values, strict=True))))
    return " * ".join(pieces)


def _origin(
    source: RelationSource,
    sql: str,
    columns: list[str],
    *,
    constant: int | None,
    factors: list[FactorSQL],
    survey: Survey,
) -> FloatArray:
    """Return a number near the mean of each column; ask for those that are not a factor as it is."""
    known = {
        factor.number: (survey.means[factor.code], *survey.values[factor.code])
        for factor in factors
        if factor.number is not None
    }
    rest = [j for j, column in enumerate(columns) if column not in known]
    if rest:
        asked = ", ".join(f"favg(x{j}) AS m{j}, min(x{j}) AS a{j}, max(x{j}) AS b{j}" for j in rest)
        row = source.table(f"SELECT {asked} FROM ({sql})").to_pylist()[0]
        known.update({columns[j]: (row[f"m{j}"], row[f"a{j}"], row[f"b{j}"]) for j in rest})
    found = [low if low == high else mean for mean, low, high in (known[column] for column in columns)]
    if constant is not None:
        found.insert(constant, 1.0)
    origin = np.array(found)
    if not np.isfinite(origin).all():
        raise DataError(
            "a product of the formula's columns is too large for a double. Divide a column by a power of ten."
        )
    return origin


def fetched_keys(query: Query, batch: Any) -> pd.Series[Any]:
    """Return the unit keys of a batch of an answer."""
    keys: pd.Series[Any] = to_pandas(batch.select(["k"]))["k"]
    return keys.map(int).astype(object) if query.wide_keys else keys


def key_sql(query: Query) -> str:
    """Return the unit key as it is fetched."""
    return "CAST(k AS VARCHAR) AS k" if query.wide_keys else "k AS k"


def columns_of(query: Query, batch: Any, letter: str = "x") -> FloatArray:
    """Return the columns of a batch as an array of shape (rows, k), the constant put in where the letter is x."""
    out = np.empty((batch.num_rows, len(query.columns)))
    if query.constant is not None:
        out[:, query.constant] = 1.0 if letter == "x" else 0.0
    for place, j in enumerate(query.asked):
        out[:, j] = batch.column(f"{letter}{place}").to_numpy(zero_copy_only=False)
    return out
