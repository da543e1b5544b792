"""Learn from chunks of rows: states of transforms, levels, keys, and the account of every row."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import pandas as pd
from patsy import EvalFactor, PatsyError
from patsy.builtins import C

from mixbridge.errors import DataError, FormulaError
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.attempt import Reading, _complaint, _infinite, _is_narrow, _Survey
from mixbridge.panel.build import _MOST_ROUNDS, _check_left
from mixbridge.panel.categories import _MOST_LEVELS, Coded, code_values
from mixbridge.panel.columns import extremes
from mixbridge.panel.factors import Numeric, Plain, Stored, evaluate, used_data
from mixbridge.panel.streaming_values import Distinct
from mixbridge.panel.streaming_walk import Labels, Plan, Stage, Step, Value, stateful, walk
from mixbridge.sources.chunks import ChunkedSource

__all__ = ["Lesson", "Levels", "blank", "filled", "learn_all"]


@dataclass(frozen=True, slots=True, eq=False)
class Levels:
    """A categorical factor: its distinct values, and how they are coded."""

    values: Distinct
    coded: Coded

    def block(self, labels: Labels) -> Coded:
        """Return the coding of some rows."""
        places = self.values.find(labels.series)
        codes = np.where(places < 0, -1, self.coded.codes[places]).astype(self.coded.codes.dtype)
        return replace(self.coded, codes=codes)


@dataclass(frozen=True, slots=True, eq=False)
class Lesson:
    """What the rows have taught.

    Parameters
    ----------
    stages : tuple of Stage
        To be applied to the rows in order.
    numeric : dict of EvalFactor to int
        Width of each numeric factor.
    levels : dict of EvalFactor to Levels
        Each categorical factor.
    units, periods : Distinct
        Distinct keys on the rows used.
    account : Accounting
        What became of every row.
    """

    stages: tuple[Stage, ...]
    numeric: dict[EvalFactor, int]
    levels: dict[EvalFactor, Levels]
    units: Distinct
    periods: Distinct | None
    account: Accounting


@dataclass(slots=True, eq=False)
class _Numbers:
    """Extremes of the columns of a numeric factor, and the first infinite value."""

    reading: Reading
    width: int
    least: list[float | int]
    greatest: list[float | int]
    infinite: str | None = None

    def add(self, value: Plain | Stored, place: str, m: int) -> None:
        """Take in the values of a chunk, none of them missing."""
        if isinstance(value, Plain):
            low, high = extremes(value.column, value.rows)
            lows: list[float | int] = [low]
            highs: list[float | int] = [high]
        else:
            block = value.values
            lows, highs = block.min(axis=0).tolist(), block.max(axis=0).tolist()
            where = np.flatnonzero(np.isinf(block).any(axis=1))
            if len(where) and self.infinite is None:
                self.infinite = f"{int(where[0])} of the {m} used of {place}"
        if value.width != self.width:
            raise FormulaError(
                f"{self.reading.factor.code} yields {value.width} columns in {place} and {self.width} before."
            )
        self.least = [min(pair) for pair in zip(self.least, lows, strict=True)]
        self.greatest = [max(pair) for pair in zip(self.greatest, highs, strict=True)]

    def complaint(self, *, is_outcome: bool) -> DataError | None:
        """Return what is wrong with the values over all rows used, if anything is."""
        if self.infinite is not None:
            return _infinite(self.reading.factor.code, self.infinite)
        narrow = any(_is_narrow(*pair) for pair in zip(self.least, self.greatest, strict=True))
        survey = _Survey(np.empty(0, dtype=np.intp), None, min(self.least), max(self.greatest), narrow)
        return _complaint(self.reading, survey, pd.RangeIndex(0), is_outcome=is_outcome)


@dataclass(slots=True, eq=False)
class _Book:
    """What one round of passes gathers."""

    plan: Plan
    most_units: float
    units: Distinct
    periods: Distinct | None
    given: int = 0
    used: int = 0
    missing: dict[str, int] = field(default_factory=dict)
    dropped: dict[tuple[str, str], int] = field(default_factory=dict)
    bad: dict[str, tuple[int, int]] = field(default_factory=dict)
    numbers: dict[EvalFactor, _Numbers] = field(default_factory=dict)
    labels: dict[EvalFactor, tuple[Distinct, Labels]] = field(default_factory=dict)
    notes: dict[str, str] = field(default_factory=dict)

    def take(self, step: Step) -> None:
        """Take in one chunk."""
        self.given += step.account.rows_given
        self.used += step.used
        for name, count in step.account.missing:
            self.missing[name] = self.missing.get(name, 0) + count
        for cause, name, count in step.account.dropped:
            self.dropped[cause, name] = self.dropped.get((cause, name), 0) + count
        for stage, name, count in step.bad:
            before, so_far = self.bad.get(name, (stage, 0))
            self.bad[name] = min(stage, before), so_far + count
        for reading in step.readings:
            for name, column in reading.columns.items():
                if column.note is not None:
                    self.notes.setdefault(name, column.note)
        if not step.used:
            return
        names = self.plan.keys
        self.units.add(step.key(names[0]), step.place)
        self.check_units(self.units.settled)
        if self.periods is not None:
            self.periods.add(step.key(names[1]), step.place)
        for reading, value in zip(step.readings, step.values, strict=False):
            self._value(reading, value, step)

    def check_units(self, units: int) -> None:
        """Stop before the keys alone fill the memory."""
        if units > self.most_units:
            raise DataError(
                f"The rows read so far have {units:,} units: moments of so many do not fit into memory_limit, "
                f"which allows about {int(self.most_units):,} with these columns. Raise memory_limit, or check "
                "that unit= names the grouping column."
            )

    def _value(self, reading: Reading, value: Value, step: Step) -> None:
        factor = reading.factor
        if isinstance(value, Labels):
            found = self.labels.setdefault(factor, (Distinct(factor.code, whole=False), value))[0]
            found.add(value.series, step.place)
            if len(found) > _MOST_LEVELS:
                _coded(factor, found, value)  # says what is wrong with so many
        elif factor in self.labels:
            raise DataError(f"{factor.code} holds categories at first and numbers in {step.place}.")
        else:
            blank = _Numbers(reading, value.width, [np.inf] * value.width, [-np.inf] * value.width)
            self.numbers.setdefault(factor, blank).add(value, step.place, step.used)

    def account(self) -> Accounting:
        """Return the account of the rows, causes in their order of precedence."""
        reads = list(self.plan.reads.values())
        order = [*zip(("missing unit", "missing period"), self.plan.keys, strict=False)]
        order += [("missing outcome", name) for name in reads[0]]
        order += [("missing covariate", name) for names in reads[1:] for name in names]
        dropped = [(*key, self.dropped[key]) for key in dict.fromkeys(order) if key in self.dropped]
        places = {factor.code: place for place, factor in enumerate(self.plan.reads)}
        for name in sorted(self.bad, key=lambda name: (self.bad[name][0], places[name])):
            dropped.append((f"not a number in {name}", name, self.bad[name][1]))
        missing = {name: self.missing.get(name, 0) for _, name in order}
        return Accounting(self.given, self.used, tuple(dropped), tuple(missing.items()))


def _coded(factor: EvalFactor, values: Distinct, labels: Labels) -> Coded:
    return code_values(factor.code, C(values.series(), labels.contrast, labels.levels))


def learn_all(
    plan: Plan, source: ChunkedSource, incomplete_rows: Literal["drop", "refuse"], most_units: float
) -> Lesson:
    """Pass over the rows until every factor is learned and yields a number on every row left.

    One pass does it, unless a transform learns (then one more before), or one that learns yields something
    that is not a number (then the rows are dropped and it learns anew).

    Parameters
    ----------
    plan : Plan
    source : ChunkedSource
    incomplete_rows : {"drop", "refuse"}
    most_units : float
        Number of units beyond which to stop.
    """
    stages: list[Stage] = []
    for _ in range(_MOST_ROUNDS):
        stage, complaint = _learn_states(plan, source, stages)
        stages.append(stage)
        if stage.spoiled:
            settled = complaint is not None and not any(s.unsettled for s in walk(plan, source, stages))
            if complaint is not None and settled:
                raise complaint
            continue
        periods = Distinct(plan.keys[1], whole=False) if len(plan.keys) > 1 else None
        book = _Book(plan, most_units, Distinct(plan.keys[0], whole=True), periods)
        unsettled = False
        for step in walk(plan, source, stages):
            book.take(step)
            unsettled |= step.unsettled
        if not book.given:
            raise DataError("The data have no rows.")
        book.check_units(len(book.units))
        account = book.account()
        _check_left(account, incomplete_rows)
        if not (stage.states and unsettled):
            return _lesson(plan, book, tuple(stages), account)
    raise DataError(
        f"After {_MOST_ROUNDS} rounds a term still yields values that are not numbers each time it is learned "
        "on the rows left: " + ", ".join(book.bad) + ". Compute it as a column of the data first."
    )


def _learn_states(
    plan: Plan, source: ChunkedSource, stages: Sequence[Stage]
) -> tuple[Stage, DataError | None]:
    """Let the stateful transforms learn from the rows that the stages so far have left."""
    if not _any_stateful(plan):
        return Stage({}), None
    states: dict[EvalFactor, dict[str, Any]] = {}
    spoiled: set[EvalFactor] = set()
    complaint: DataError | None = None
    for step in walk(plan, source, stages):
        m = step.used
        for reading in step.readings if m else ():
            arguments = stateful(reading, plan.environment)
            if not arguments:
                continue
            factor, data = reading.factor, used_data(reading.columns, step.rows, 0, m)
            for argument in arguments:
                values = _argument(plan, argument, data)
                if np.isnan(values).any():
                    spoiled.add(factor)
                elif np.isinf(values).any():
                    spoiled.add(factor)
                    where = int(np.flatnonzero(np.isinf(values.reshape(m, -1)).any(axis=1))[0])
                    complaint = complaint or _infinite(
                        argument.code, f"{where} of the {m} used of {step.place}"
                    )
            if factor not in spoiled:
                _memorize(plan, factor, states, data)
    learned = {factor: state for factor, state in states.items() if factor not in spoiled}
    for factor, state in learned.items():
        factor.memorize_finish(state, 0)
    return Stage(learned, frozenset(spoiled)), complaint


def _any_stateful(plan: Plan) -> bool:
    readings = [Reading(factor, {}, None, False, True) for factor in plan.reads]
    return any(stateful(reading, plan.environment) for reading in readings)


def _argument(plan: Plan, argument: EvalFactor, data: dict[str, Any]) -> npt.NDArray[np.float64]:
    """Evaluate what a transform learns from."""
    state: dict[str, Any] = {}
    argument.memorize_passes_needed(state, plan.environment)
    value = np.asarray(evaluate(argument, state, data))
    if not np.issubdtype(value.dtype, np.number):
        return np.zeros(len(value))
    return value.astype(np.float64)


def _memorize(
    plan: Plan, factor: EvalFactor, states: dict[EvalFactor, dict[str, Any]], data: dict[str, Any]
) -> None:
    with np.errstate(all="ignore"):
        try:
            if factor not in states:
                states[factor] = {}
                if factor.memorize_passes_needed(states[factor], plan.environment) > 1:
                    raise FormulaError(
                        f"{factor.code} learns in several passes; compute a part of it as a column first."
                    )
            factor.memorize_chunk(states[factor], 0, data)
        except (PatsyError, ValueError, TypeError, ArithmeticError) as error:
            raise FormulaError(f"{factor.code} cannot be evaluated: {error}") from error


def _lesson(plan: Plan, book: _Book, stages: tuple[Stage, ...], account: Accounting) -> Lesson:
    """Check the values over all rows used, and code the categories."""
    outcome = plan.formula.outcome
    for factor in plan.reads:
        if factor in book.numbers:
            complaint = book.numbers[factor].complaint(is_outcome=factor == outcome)
            if complaint is not None:
                raise complaint
    levels = {
        factor: Levels(values, _coded(factor, values, labels))
        for factor, (values, labels) in book.labels.items()
    }
    notes = [book.notes[name] for name in plan.wanted if name in book.notes]
    for factor in plan.formula.factors:
        if factor in levels:
            notes += levels[factor].coded.notes
    numeric = {factor: numbers.width for factor, numbers in book.numbers.items()}
    account = replace(account, notes=tuple(notes))
    return Lesson(stages, numeric, levels, book.units, book.periods, account)


def blank(lesson: Lesson, factor: EvalFactor) -> Numeric | Coded:
    """Return a factor without rows, for the layout of the design."""
    if factor in lesson.levels:
        return lesson.levels[factor].coded
    return Stored(np.empty((0, lesson.numeric[factor])))


def filled(lesson: Lesson, factor: EvalFactor, value: Value) -> Numeric | Coded:
    """Return a factor on the rows of a chunk."""
    return lesson.levels[factor].block(value) if isinstance(value, Labels) else value
