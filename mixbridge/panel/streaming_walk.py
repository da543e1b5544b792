"""Walk over chunks of rows: which rows are used, and what each factor is on them."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
from patsy import EvalEnvironment, EvalFactor, PatsyError
from patsy.builtins import C

from mixbridge.errors import DataError, FormulaError
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.attempt import Reading, refuse_infinite
from mixbridge.panel.build import _check_outcome, _complete_rows
from mixbridge.panel.categories import is_categorical
from mixbridge.panel.columns import Column, Rows, extremes, read_column
from mixbridge.panel.factors import (
    Plain,
    Stored,
    as_columns,
    evaluate,
    inner_arguments,
    learn,
    used_data,
)
from mixbridge.panel.formula import Formula, called_names
from mixbridge.panel.readings import read_factors
from mixbridge.sources.chunks import Chunk, ChunkedSource

__all__ = ["Labels", "Plan", "Stage", "Step", "Value", "stateful", "step_of", "walk"]

_WHOLE_DATA = ("bs", "cr", "cc", "te")


@dataclass(frozen=True, slots=True, eq=False)
class Labels:
    """The values of a categorical factor on the rows used of a chunk, with the coding asked for."""

    series: pd.Series[Any]
    levels: Any = None
    contrast: Any = None


Value = Plain | Stored | Labels
Span = tuple[float | int, float | int]


@dataclass(frozen=True, slots=True, eq=False)
class Plan:
    """What to read and how.

    Parameters
    ----------
    formula : Formula
        The formula.
    reads : mapping
        Columns of each factor, outcome first.
    keys : tuple of str
        Column of the units and, if given, of the periods.
    environment : patsy.EvalEnvironment
        Where functions are looked up.
    trusted : bool
        Whether expressions outside the grammar could be accepted.
    kinds : dict
        What each column holds, with the place where that was first seen; filled by the first walk.
    forms : dict
        By what the columns hold: of each factor the column that it is, whether that is coded, and whether it works
        row by row.
    blanks : dict
        States of factors that have nothing to learn.
    """

    formula: Formula
    reads: Mapping[EvalFactor, tuple[str, ...]]
    keys: tuple[str, ...]
    environment: EvalEnvironment
    trusted: bool
    kinds: dict[str, tuple[str, str]] = field(default_factory=dict)
    forms: dict[tuple[str, ...], list[tuple[str | None, bool, bool]]] = field(default_factory=dict)
    blanks: dict[EvalFactor, dict[str, Any]] = field(default_factory=dict)

    @property
    def wanted(self) -> list[str]:
        """Every column needed, each once."""
        return list(dict.fromkeys([*self.keys, *(name for names in self.reads.values() for name in names)]))


@dataclass(frozen=True, slots=True, eq=False)
class Stage:
    """States that stateful transforms have learned, and the factors whose argument was unusable somewhere.

    A factor of the second kind learns nothing at this stage: the rows concerned are dropped, and it learns at
    the next one.
    """

    states: Mapping[EvalFactor, dict[str, Any]]
    spoiled: frozenset[EvalFactor] = frozenset()


@dataclass(frozen=True, slots=True, eq=False)
class Step:
    """One chunk: the rows used, and every factor on them.

    Parameters
    ----------
    place : str
        Where the chunk comes from.
    frame : pandas.DataFrame
        All its rows.
    rows : numpy.ndarray of int or None
        The rows used.
    readings : list of Reading
        How the factors are read, outcome first; empty if no row is used.
    values : list
        The value of each factor; empty where the walk had no stage.
    account : Accounting
        Rows dropped because something is missing.
    bad : tuple of (int, str, int)
        Rows dropped because a factor is not a number: stage, factor, and how many.
    unsettled : bool
        Whether the last stage dropped a row.
    spans : mapping
        Least and greatest value of columns of numbers, where no stage dropped a row.
    """

    place: str
    frame: pd.DataFrame
    rows: Rows
    readings: list[Reading]
    values: list[Value]
    account: Accounting
    bad: tuple[tuple[int, str, int], ...] = ()
    unsettled: bool = False
    spans: Mapping[str, Span | None] = field(default_factory=dict)

    @property
    def used(self) -> int:
        """Number of rows used."""
        return len(self.frame) if self.rows is None else len(self.rows)

    def key(self, name: str) -> pd.Series[Any]:
        """Return a key column on the rows used."""
        series = self.frame[name]
        return series if self.rows is None else series.iloc[self.rows]


def walk(plan: Plan, source: ChunkedSource, stages: Sequence[Stage]) -> Iterator[Step]:
    """Read the chunks; at each stage drop the rows on which a factor is not a number.

    Parameters
    ----------
    plan : Plan
    source : ChunkedSource
    stages : sequence of Stage
        In order; the values yielded are those of the last one.
    """
    for chunk in source.chunks(plan.wanted, plan.keys):
        if len(chunk.frame):
            yield step_of(plan, chunk, stages)


def step_of(plan: Plan, chunk: Chunk, stages: Sequence[Stage]) -> Step:
    """Read one chunk that has rows; after the first one with rows used, chunks do not depend on each other."""
    frame = chunk.frame
    if not isinstance(frame.index, pd.RangeIndex) or frame.index.start:
        frame = frame.reset_index(drop=True)
    columns: dict[str, Column] = {}
    spans: dict[str, Span | None] = {}
    for name in (name for names in plan.reads.values() for name in names):
        try:
            columns[name], spans[name] = _read(name, frame[name])
        except DataError as error:
            raise DataError(f"{chunk.place}: {error}") from error
    outline = [
        Reading(factor, {name: columns[name] for name in names}, None, False, True)
        for factor, names in plan.reads.items()
    ]
    rows, account = _complete_rows(frame, plan.keys, outline, columns)
    if not account.rows_used:
        return Step(chunk.place, frame, rows, [], [], account)
    _same_kinds(plan, columns, chunk.place)
    for name, column in columns.items():
        known = spans[name] if rows is None else None
        spans[name] = _finite(column, rows, chunk.place, known or _span(column, rows))
    readings = _readings(plan, columns)
    values: list[Value] = []
    bad: list[tuple[int, str, int]] = []
    stale = False
    for number, stage in enumerate(stages):
        values, keep, found = _at_stage(plan, readings, rows, len(frame), stage)
        bad += [(number, name, count) for name, count in found]
        stale = keep is not None
        if keep is not None:
            rows = np.flatnonzero(keep) if rows is None else rows[keep]
    if stale:
        left = 0 if rows is None else len(rows)
        values = []
        if left:
            values, _, _ = _at_stage(plan, readings, rows, len(frame), stages[-1])
    spans = {} if bad else spans
    return Step(chunk.place, frame, rows, readings, values, account, tuple(bad), stale, spans)


def _readings(plan: Plan, columns: Mapping[str, Column]) -> list[Reading]:
    """Decide how factors are read; the decision depends on the kinds of the columns only, and is kept."""
    kinds = tuple(column.kind for column in columns.values())
    forms = plan.forms.get(kinds)
    if forms is None:
        readings = read_factors(plan.reads, columns, plan.environment, trusted=plan.trusted)
        _check_outcome(readings[0])
        for reading in readings:
            _refuse_whole(reading)
        plan.forms[kinds] = [(reading.single, reading.coded, reading.by_row) for reading in readings]
        return readings
    return [
        Reading(factor, {name: columns[name] for name in names}, *form)
        for (factor, names), form in zip(plan.reads.items(), forms, strict=True)
    ]


def _read(name: str, series: pd.Series[Any]) -> tuple[Column, Span | None]:
    """Find out what a column holds, and its extremes where that is one look at plain doubles."""
    if series.dtype != np.float64 or not len(series):
        return read_column(name, series), None
    numbers = series.to_numpy()
    span = numbers.min().item(), numbers.max().item()
    if math.isnan(span[0]):
        return read_column(name, series), None
    return Column(name, "number", series, numbers, None), span


def _span(column: Column, rows: Rows) -> Span | None:
    return None if column.numbers is None else extremes(column, rows)


def _finite(column: Column, rows: Rows, place: str, span: Span | None) -> Span | None:
    """Return the extremes of a column; refuse an infinite value, and say where it is."""
    numbers = column.numbers
    if numbers is not None and span is not None and not all(map(math.isfinite, span)):
        labels = pd.Index([f"{i} of {place}" for i in range(len(numbers))], dtype=object)
        refuse_infinite(column, rows, labels if rows is None else labels[rows])
    return span


def _same_kinds(plan: Plan, columns: Mapping[str, Column], place: str) -> None:
    """Refuse a column that holds another kind of values than before."""
    for name, column in columns.items():
        kind, where = plan.kinds.setdefault(name, (column.kind, place))
        if kind != column.kind:
            raise DataError(
                f"In {place} the column {name!r} holds values of the kind {column.kind} "
                f"({column.series.dtype}); in {where} they were of the kind {kind}. Give the column one type in "
                "all parts of the data."
            )


def _refuse_whole(reading: Reading) -> None:
    """Refuse what has to see all rows at once."""
    code = reading.factor.code
    if reading.single is not None:
        return
    learns = [name for name in _WHOLE_DATA if name in called_names(code)]
    if learns:
        raise FormulaError(
            f"{code} needs all rows at once: {learns[0]} learns its knots from the whole column, and the data "
            "come in chunks. Pass the data as one frame, or compute its columns first."
        )
    if not reading.by_row:
        raise FormulaError(
            f"{code} cannot be computed chunk by chunk: it is not an expression of which is known that every "
            "value depends on its own row only. Pass the data as one frame, or compute it as a column first."
        )


def stateful(reading: Reading, environment: EvalEnvironment) -> list[EvalFactor]:
    """Return the arguments that a factor's stateful transforms learn from.

    Raises
    ------
    FormulaError
        If one is inside another.
    """
    if reading.single is not None:
        return []
    arguments = inner_arguments(reading.factor, environment)
    for argument in arguments:
        if inner_arguments(argument, environment):
            raise FormulaError(
                f"{reading.factor.code} has one learning transform inside another, which data in chunks do not "
                "allow. Compute the inner one as a column first."
            )
    return arguments


def _at_stage(
    plan: Plan, readings: Sequence[Reading], rows: Rows, n: int, stage: Stage
) -> tuple[list[Value], npt.NDArray[np.bool_] | None, list[tuple[str, int]]]:
    """Evaluate every factor; return the values, which rows to keep (None: all), and rows dropped by factor."""
    m = n if rows is None else len(rows)
    values: list[Value] = []
    keep: npt.NDArray[np.bool_] | None = None
    counts: list[tuple[str, int]] = []
    for reading in readings:
        if m == 0:
            break
        unusable = np.zeros(m, dtype=bool)
        if reading.factor in stage.spoiled:
            for argument in stateful(reading, plan.environment):
                inner = _evaluated(plan, Reading(argument, reading.columns, None, False, True), rows, m, None)
                unusable = _unusable(inner)
                if unusable.any():
                    break
        else:
            values.append(_evaluated(plan, reading, rows, m, stage.states.get(reading.factor)))
            if not isinstance(values[-1], Plain):
                unusable = _unusable(values[-1])
        if unusable.any():
            keep = np.ones(m, dtype=bool) if keep is None else keep
            new = int(np.count_nonzero(unusable & keep))
            keep &= ~unusable
            if new:
                counts.append((reading.factor.code, new))
    return values, keep, counts


def _unusable(value: Value) -> npt.NDArray[np.bool_]:
    if isinstance(value, Labels):
        return value.series.isna().to_numpy(dtype=bool)
    if isinstance(value, Plain):  # its missing values are gone already
        return np.zeros(0, dtype=bool)
    return np.asarray(np.isnan(value.values).any(axis=1), dtype=bool)


def _evaluated(plan: Plan, reading: Reading, rows: Rows, m: int, state: dict[str, Any] | None) -> Value:
    factor, columns = reading.factor, reading.columns
    if reading.single is not None:
        return _single(plan, reading, columns[reading.single], rows)
    data = used_data(columns, rows, 0, m)
    value = evaluate(factor, _state(plan, factor, data) if state is None else state, data)
    if not is_categorical(value):
        return Stored(as_columns(factor, value, m))
    levels, contrast = getattr(value, "levels", None), getattr(value, "contrast", None)
    while hasattr(value, "contrast") and hasattr(value, "levels") and hasattr(value, "data"):
        value = value.data
    if getattr(value, "ndim", 1) != 1:
        raise DataError(f"{factor.code} yields categories in {value.ndim} dimensions; one column is needed.")
    series = value.reset_index(drop=True) if isinstance(value, pd.Series) else pd.Series(value)
    if len(series) != m:
        raise FormulaError(
            f"{factor.code} yields {len(series)} values; needed is one for each of the {m} rows used."
        )
    return Labels(series, levels, contrast)


def _state(plan: Plan, factor: EvalFactor, data: Mapping[str, Any]) -> dict[str, Any]:
    """Return the state of a factor that learns from these rows; one that learns nothing is made once."""
    state = plan.blanks.get(factor)
    if state is None:
        state = learn(factor, plan.environment, data)
        if not state["transforms"]:
            plan.blanks[factor] = state
    return state


def _single(plan: Plan, reading: Reading, column: Column, rows: Rows) -> Value:
    """Take a factor that is a column, or ``C`` of a column."""
    if not reading.coded:
        if column.kind == "number":
            return Plain(column, rows)
        if column.kind == "moment":
            raise FormulaError(
                f"{column.name} holds dates or times. Write C({column.name}) for one indicator per date, or "
                "make a number of it, for example the year."
            )
    series = column.taken(rows)
    if series.dtype == object and column.numbers is not None:
        numbers = column.numbers if rows is None else column.numbers[rows]
        series = pd.Series(numbers.astype(bool) if column.kind == "truth" else numbers)
    if not reading.coded:
        return Labels(series)
    first = {column.name: column.taken(rows).iloc[:1]}
    try:
        box = evaluate(reading.factor, _state(plan, reading.factor, first), first)
    except PatsyError as error:
        raise FormulaError(f"{reading.factor.code} cannot be evaluated: {error}") from error
    if not hasattr(box, "levels"):
        box = C(box)
    return Labels(series, box.levels, box.contrast)
