"""What one pass over rows in chunks gathers: counts, extremes, levels, units, periods."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import pandas as pd
from patsy import EvalFactor
from patsy.builtins import C

from mixbridge.errors import DataError, FormulaError
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.attempt import Reading, _complaint, _infinite, _is_narrow, _Survey
from mixbridge.panel.categories import _MOST_LEVELS, Coded, code_values
from mixbridge.panel.columns import extremes
from mixbridge.panel.factors import Plain, Stored
from mixbridge.panel.streaming_order import OrderWatch
from mixbridge.panel.streaming_runs import Runs
from mixbridge.panel.streaming_values import Distinct
from mixbridge.panel.streaming_walk import Labels, Plan, Span, Step, Value
from mixbridge.sources.checkpoint import State

__all__ = ["TooManyUnitsError"]

CodeArray = npt.NDArray[np.intp]


@dataclass(slots=True, eq=False)
class _Numbers:
    """Extremes of the columns of a numeric factor, and the first infinite value."""

    reading: Reading
    width: int
    least: list[float | int]
    greatest: list[float | int]
    infinite: str | None = None

    def add(self, value: Plain | Stored, place: str, m: int, span: Span | None = None) -> None:
        """Take in the values of a chunk, none of them missing; `span` holds their extremes if known."""
        if isinstance(value, Plain):
            low, high = span or extremes(value.column, value.rows)
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


class TooManyUnitsError(Exception):
    """The moments of so many units are more than what may be kept.

    Parameters
    ----------
    units : int
        Units seen so far.
    rising : bool
        Whether the rows so far are sorted by unit.
    """

    def __init__(self, units: int, rising: bool) -> None:
        super().__init__(units, rising)
        self.units, self.rising = units, rising


@dataclass(slots=True, eq=False)
class _Book:
    """What one round of passes gathers.

    Parameters
    ----------
    plan : Plan
    most_units : float
        Number of units beyond which to stop.
    units : Distinct or Runs
    watch : OrderWatch or None
        Looks at periods.
    most_sorted : float
        Number of units beyond which to stop as long as rows are sorted by unit.
    declared : Runs or None
        Verifies that rows are sorted, where that was declared.
    """

    plan: Plan
    most_units: float
    units: Distinct | Runs
    watch: OrderWatch | None
    given: int = 0
    used: int = 0
    missing: dict[str, int] = field(default_factory=dict)
    dropped: dict[tuple[str, str], int] = field(default_factory=dict)
    bad: dict[str, tuple[int, int]] = field(default_factory=dict)
    numbers: dict[EvalFactor, _Numbers] = field(default_factory=dict)
    labels: dict[EvalFactor, tuple[Distinct, Labels]] = field(default_factory=dict)
    notes: dict[str, str] = field(default_factory=dict)
    most_sorted: float = np.inf
    declared: Runs | None = None
    rising: bool = True
    last: int = 0

    def take(self, step: Step) -> CodeArray:
        """Take in one chunk; return the unit of each row used, numbered by order of first appearance."""
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
            return np.empty(0, dtype=np.intp)
        names = self.plan.keys
        keys = step.key(names[0])
        codes = self.units.enter(keys, step.place)
        if self.declared is not None:
            self.declared.enter(keys, step.place)
        self.check_units(codes)
        if self.watch is not None:
            periods = step.key(names[1])
            self.watch.take(codes, periods, step.place, len(self.units), lambda row: keys.iloc[row])
        for reading, value in zip(step.readings, step.values, strict=False):
            self._value(reading, value, step)
        return codes

    def check_units(self, codes: CodeArray) -> None:
        """Stop before moments fill the memory."""
        units = len(self.units)
        self.rising = self.rising and codes[0] >= self.last and not (codes[1:] < codes[:-1]).any()
        self.last = int(codes[-1])
        if units > self.most_sorted and self.rising and isinstance(self.units, Distinct):
            self.rising = self.units.rising
            if self.rising:
                raise TooManyUnitsError(units, self.rising)
        if units > self.most_units:
            raise TooManyUnitsError(units, self.rising)

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
            span = step.spans.get(value.column.name) if isinstance(value, Plain) else None
            self.numbers.setdefault(factor, blank).add(value, step.place, step.used, span)

    def state(self) -> State:
        """Return what was seen, to be saved; levels of categories are not."""
        numbers = {
            factor.code: [found.width, found.least, found.greatest, found.infinite]
            for factor, found in self.numbers.items()
        }
        return {
            "units": self.units.state(),
            "watch": {} if self.watch is None else self.watch.state(),
            "declared": {} if self.declared is None else self.declared.state(),
            "counts": [self.given, self.used, bool(self.rising), self.last],
            "missing": list(self.missing.items()),
            "dropped": [[*cause, count] for cause, count in self.dropped.items()],
            "bad": [[name, *pair] for name, pair in self.bad.items()],
            "notes": list(self.notes.items()),
            "kinds": [[name, *pair] for name, pair in self.plan.kinds.items()],
            "numbers": list(numbers.items()),
        }

    def restore(self, state: State) -> int:
        """Go on from a state; return the number of rows given so far."""
        self.units.restore(state["units"])
        if self.watch is not None:
            self.watch.restore(state["watch"])
        if self.declared is not None:
            self.declared.restore(state["declared"])
        self.given, self.used, self.rising, self.last = state["counts"]
        self.missing = dict(map(tuple, state["missing"]))
        self.dropped = {(cause, name): count for cause, name, count in state["dropped"]}
        self.bad = {name: (stage, count) for name, stage, count in state["bad"]}
        self.notes = dict(map(tuple, state["notes"]))
        self.plan.kinds.update({name: (kind, place) for name, kind, place in state["kinds"]})
        factors = {factor.code: factor for factor in self.plan.reads}
        for code, (width, least, greatest, infinite) in state["numbers"]:
            reading = Reading(factors[code], {}, None, False, True)
            self.numbers[factors[code]] = _Numbers(reading, width, least, greatest, infinite)
        return self.given

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
