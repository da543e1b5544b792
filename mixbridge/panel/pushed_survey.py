"""Ask a database what became of every row, and what each factor holds on the rows used."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd
from patsy import EvalFactor

from mixbridge.errors import DataError
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.attempt import Reading, _complaint, _is_narrow, _Survey
from mixbridge.panel.build import _check_left
from mixbridge.panel.categories import Coded
from mixbridge.panel.columns import read_column
from mixbridge.panel.pushed_sql import FLOATS, FactorSQL, NotInSQLError
from mixbridge.panel.streaming_book import _coded
from mixbridge.panel.streaming_values import Distinct
from mixbridge.panel.streaming_walk import Labels, Plan, _single
from mixbridge.sources.arrow import to_pandas
from mixbridge.sources.duckdb_source import ROWS, RelationSource, quoted

__all__ = ["Survey", "levels_of", "survey_rows"]

_MOST_FETCHED = 65536


@dataclass(frozen=True, slots=True)
class Survey:
    """What the rows hold.

    Parameters
    ----------
    account : Accounting
    used : str
        The condition, in SQL, under which a row is used.
    means : mapping of str to float
        Mean over the rows used of each numeric factor, by its code.
    values : mapping of str to (float, float)
        Least and greatest value of each.
    """

    account: Accounting
    used: str
    means: Mapping[str, float]
    values: Mapping[str, tuple[float, float]]


def missing_sql(name: str, types: Mapping[str, str]) -> str:
    """Return the condition under which a value of a column is missing: NULL, or not a number."""
    column = quoted(name)
    return f"({column} IS NULL OR isnan({column}))" if types[name] in FLOATS else f"({column} IS NULL)"


def survey_rows(
    source: RelationSource, plan: Plan, factors: Mapping[EvalFactor, FactorSQL], incomplete_rows: str
) -> Survey:
    """Count rows by cause, then look at the values of every numeric factor on the rows used.

    Parameters
    ----------
    source : RelationSource
    plan : Plan
    factors : mapping
        Each factor in SQL, outcome first.
    incomplete_rows : {"drop", "refuse"}

    Raises
    ------
    DataError
        If no row is left, a value is infinite, or a spread is below what doubles carry.
    """
    holes = _holes(plan)
    conditions = [missing_sql(name, source.types) for _, name in holes]
    complete = _none_of(conditions)
    evaluated = [factor for factor in factors.values() if factor.evaluated]
    unusable = [f"isnan({factor.number})" for factor in evaluated]
    used = " AND ".join([complete, *(f"NOT {condition}" for condition in unusable)])
    asked = {"given": "count(*)", "used": _count(used)}
    for i, condition in enumerate(conditions):
        asked[f"missing{i}"] = _count(condition)
        asked[f"dropped{i}"] = _count(f"{condition} AND {_none_of(conditions[:i])}")
    for i, condition in enumerate(unusable):
        before = " AND ".join([complete, *(f"NOT {earlier}" for earlier in unusable[:i])])
        asked[f"unusable{i}"] = _count(f"{before} AND {condition}")
    floats = [name for name in dict.fromkeys(_read(plan)) if source.types[name] in FLOATS]
    for i, name in enumerate(floats):
        asked[f"infinite{i}"] = _count(f"{complete} AND isinf({quoted(name)})")
    row = _first_row(source, asked, ROWS)
    if not row["given"]:
        raise DataError("The data have no rows.")
    account = _account(row, holes, evaluated)
    _check_left(account, incomplete_rows)
    for i, name in enumerate(floats):
        if row[f"infinite{i}"]:
            raise _infinite(f"Column {name!r}", row[f"infinite{i}"])
    numeric = {factor: found for factor, found in factors.items() if found.number is not None}
    asked = {}
    for i, found in enumerate(numeric.values()):
        exact = found.number if found.column is None else quoted(found.column)
        asked[f"least{i}"], asked[f"greatest{i}"] = f"min({exact})", f"max({exact})"
        asked[f"mean{i}"] = f"favg({found.number})"
    row = _first_row(source, asked, f"{ROWS} WHERE {used}")
    means, values = {}, {}
    for i, (factor, found) in enumerate(numeric.items()):
        low, high = (_python_number(row[f"{end}{i}"]) for end in ("least", "greatest"))
        if not np.isfinite([float(low), float(high)]).all():
            raise _infinite(found.code, None)
        complaint = _complaint(
            Reading(factor, {}, None, False, True),
            _Survey(np.empty(0, dtype=np.intp), None, float(low), float(high), _is_narrow(low, high)),
            pd.RangeIndex(0),
            is_outcome=factor == plan.formula.outcome,
        )
        if complaint is not None:
            raise complaint
        means[found.code], values[found.code] = float(row[f"mean{i}"]), (float(low), float(high))
    return Survey(account, used, means, values)


def _count(condition: str) -> str:
    return f"CAST(count_if({condition}) AS BIGINT)"


def _first_row(source: RelationSource, asked: Mapping[str, str], rows: str) -> dict[str, Any]:
    """Ask for named expressions over rows."""
    listed = ", ".join(f"{sql} AS {name}" for name, sql in asked.items())
    found: dict[str, Any] = source.table(f"SELECT {listed} FROM {rows}").to_pylist()[0]
    return found


def _holes(plan: Plan) -> list[tuple[str, str]]:
    """Return what can be missing, in the order in which a row is counted."""
    outcome, *covariates = plan.reads.values()
    holes = [*zip(("missing unit", "missing period"), plan.keys, strict=False)]
    holes += [("missing outcome", name) for name in outcome]
    seen = set(outcome)
    for names in covariates:
        holes += [("missing covariate", name) for name in names if name not in seen]
        seen.update(names)
    return holes


def _read(plan: Plan) -> list[str]:
    return [name for names in plan.reads.values() for name in names]


def _none_of(conditions: Sequence[str]) -> str:
    return f"NOT ({' OR '.join(conditions)})" if conditions else "true"


def _account(
    row: Mapping[str, Any], holes: Sequence[tuple[str, str]], evaluated: Sequence[FactorSQL]
) -> Accounting:
    dropped = [
        (cause, name, row[f"dropped{i}"]) for i, (cause, name) in enumerate(holes) if row[f"dropped{i}"]
    ]
    dropped += [
        (f"not a number in {factor.code}", factor.code, row[f"unusable{i}"])
        for i, factor in enumerate(evaluated)
        if row[f"unusable{i}"]
    ]
    missing = {name: row[f"missing{i}"] for i, (_, name) in enumerate(holes)}
    return Accounting(row["given"], row["used"], tuple(dropped), tuple(missing.items()))


def _python_number(value: Any) -> float | int:
    """Return a number that a database gave: integers of any width come as decimals."""
    return value if isinstance(value, int | float) else int(value) if value == int(value) else float(value)


def _infinite(name: str, count: int | None) -> DataError:
    where = (
        "in a row used" if count is None else f"in {count} row{'s' if count > 1 else ''} with nothing missing"
    )
    return DataError(
        f"{name} is infinite {where} of the relation. Correct the value, or set it to NULL to have the row dropped and "
        "counted."
    )


def levels_of(
    source: RelationSource, plan: Plan, factors: Mapping[EvalFactor, FactorSQL], survey: Survey
) -> tuple[dict[EvalFactor, Coded], Survey]:
    """Ask for the distinct values of every categorical factor, and code them as rows in chunks are.

    Returns
    -------
    dict of EvalFactor to Coded
    Survey
        With the notes on levels.

    Raises
    ------
    NotInSQLError
        If a level cannot be written in SQL.
    """
    found: dict[EvalFactor, Coded] = {}
    for factor, written in factors.items():
        if written.number is not None:
            continue
        name = str(written.column)
        answer = source.table(
            f"SELECT DISTINCT {quoted(name)} AS level FROM {ROWS} WHERE {survey.used} LIMIT {_MOST_FETCHED + 1}"
        )
        if answer.num_rows > _MOST_FETCHED:
            raise DataError(
                f"{written.code} has more than {_MOST_FETCHED} levels, each of them a column. Categories with so "
                "many levels are units: name them by unit=, or group them."
            )
        if source.types[name] in ("hugeint", "uhugeint"):
            raise NotInSQLError(f"{written.code} has levels of the type {source.types[name]}")
        series = to_pandas(answer)["level"]
        column = read_column(name, series)
        labels = _single(plan, Reading(factor, {name: column}, name, written.coded, True), column, None)
        assert isinstance(labels, Labels), "a column that is not a number is coded"
        values = Distinct(written.code, whole=False)
        values.add(labels.series, "the relation")
        found[factor] = _coded(factor, values, labels)
    notes = tuple(note for factor in plan.formula.factors if factor in found for note in found[factor].notes)
    return found, replace(survey, account=replace(survey.account, notes=notes))
