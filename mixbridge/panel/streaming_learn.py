"""Learn from chunks of rows: states of transforms, levels, keys, and the account of every row."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import closing
from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
from patsy import EvalFactor, PatsyError

from mixbridge.errors import DataError, FormulaError
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.attempt import Reading, _infinite
from mixbridge.panel.build import _MOST_ROUNDS, _check_left
from mixbridge.panel.categories import Coded
from mixbridge.panel.factors import Numeric, Stored, evaluate, used_data
from mixbridge.panel.streaming_book import TooManyUnitsError, _Book, _coded, _Numbers
from mixbridge.panel.streaming_order import NO_PERIOD, Order
from mixbridge.panel.streaming_passes import Passes
from mixbridge.panel.streaming_rows import Gather, OnePass
from mixbridge.panel.streaming_runs import Runs
from mixbridge.panel.streaming_values import Distinct
from mixbridge.panel.streaming_walk import Labels, Plan, Stage, Step, Value, stateful, walk
from mixbridge.panel.syntax import prepare
from mixbridge.sources.checkpoint import State
from mixbridge.sources.chunks import ChunkedSource

FloatArray = npt.NDArray[np.float64]
__all__ = ["Lesson", "Levels", "TooManyUnitsError", "_Book", "_Numbers", "blank", "filled", "learn_all"]


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
    units : Distinct or Runs
        The units of the rows used: their keys, or their number only.
    periods : Distinct or None
        Distinct periods of the rows used.
    order : Order
        How the rows were ordered.
    account : Accounting
        What became of every row.
    rising : bool
        Whether rows are sorted by unit, keys never falling.
    """

    stages: tuple[Stage, ...]
    numeric: dict[EvalFactor, int]
    levels: dict[EvalFactor, Levels]
    units: Distinct | Runs
    periods: Distinct | None
    order: Order
    account: Accounting
    rising: bool = False


def learn_all(
    plan: Plan,
    passes: Passes,
    incomplete_rows: Literal["drop", "refuse"],
    begin: Callable[[], _Book],
    gather: Gather | None = None,
) -> Lesson:
    """Pass over the rows until every factor is learned and yields a number on every row left.

    One pass does it, unless a transform learns (then one more before), or one that learns yields something
    that is not a number (then the rows are dropped and it learns anew).

    Parameters
    ----------
    plan : Plan
    passes : Passes
    incomplete_rows : {"drop", "refuse"}
    begin : callable
        Returns the book in which a pass is entered.
    gather : Gather, optional
        Takes moments in the same pass, where the formula allows.
    """
    stages: list[Stage] = []
    for _ in range(_MOST_ROUNDS):
        stage, complaint = _learn_states(plan, passes, stages)
        stages.append(stage)
        if stage.spoiled:
            settled = complaint is not None and not any(
                step.unsettled for step in _steps(plan, passes, stages, "values that are not numbers")
            )
            if complaint is not None and settled:
                raise complaint
            continue
        book = begin()
        unsettled = False
        one_pass = OnePass(plan) if gather is not None and not stage.states and len(stages) == 1 else None
        if one_pass is None or gather is None:
            walked = passes.over(plan, stages, _alone, "account of rows, levels and units")
        else:
            walked = passes.saved_over(plan, stages, one_pass, one_pass, _First(book, gather, one_pass))
        with closing(walked) as rows:
            for step, laid_out in rows:
                codes = book.take(step)
                unsettled |= step.unsettled
                start = 0
                for z in laid_out or ():
                    assert gather is not None, "rows are laid out for it only"
                    gather.add(codes[start : start + len(z)], z)
                    start += len(z)
        if not book.given:
            raise DataError("The data have no rows.")
        account = book.account()
        _check_left(account, incomplete_rows)
        if not (stage.states and unsettled):
            return _lesson(plan, book, tuple(stages), account)
    raise DataError(
        f"After {_MOST_ROUNDS} rounds a term still yields values that are not numbers each time it is learned "
        "on the rows left: " + ", ".join(book.bad) + ". Compute it as a column of the data first."
    )


@dataclass(frozen=True, slots=True, eq=False)
class _First:
    """What is saved of the first pass."""

    book: _Book
    gather: Gather
    one_pass: OnePass

    @property
    def stage(self) -> str:
        return "first-sorted" if isinstance(self.book.units, Runs) else "first-units"

    def state(self) -> State | None:
        if not self.one_pass.possible:
            return None
        return {"book": self.book.state(), "gather": self.gather.state()}

    def restore(self, state: State) -> int:
        self.gather.restore(state["gather"])
        return self.book.restore(state["book"])


def _alone(step: Step) -> tuple[Step, Iterable[FloatArray] | None]:
    return step, None


def _steps(plan: Plan, source: ChunkedSource | Passes, stages: Sequence[Stage], what: str) -> Iterator[Step]:
    """Walk over the chunks of a source, which may know how it is to be passed over."""
    if isinstance(source, Passes):
        return source.over(plan, stages, lambda step: step, what)
    return walk(plan, source, stages)


def _learn_states(
    plan: Plan, source: ChunkedSource | Passes, stages: Sequence[Stage]
) -> tuple[Stage, DataError | None]:
    """Let the stateful transforms learn from the rows that the stages so far have left."""
    if not _any_stateful(plan):
        return Stage({}), None
    states: dict[EvalFactor, dict[str, Any]] = {}
    spoiled: set[EvalFactor] = set()
    complaint: DataError | None = None
    for step in _steps(plan, source, stages, "what transforms learn"):
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
    prepare(argument, state, plan.environment)
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
                if prepare(factor, states[factor], plan.environment) > 1:
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
    watch = book.watch
    periods, order = (None, Order(None, NO_PERIOD)) if watch is None else (watch.periods, watch.finish())
    for values in (book.units, periods, *(each.values for each in levels.values())):
        if isinstance(values, Distinct):
            values.settle()
    rising = book.rising and (isinstance(book.units, Runs) or book.units.rising)
    return Lesson(stages, numeric, levels, book.units, periods, order, account, rising)


def blank(lesson: Lesson, factor: EvalFactor) -> Numeric | Coded:
    """Return a factor without rows, for the layout of the design."""
    if factor in lesson.levels:
        return lesson.levels[factor].coded
    return Stored(np.empty((0, lesson.numeric[factor])))


def filled(lesson: Lesson, factor: EvalFactor, value: Value) -> Numeric | Coded:
    """Return a factor on the rows of a chunk."""
    return lesson.levels[factor].block(value) if isinstance(value, Labels) else value
