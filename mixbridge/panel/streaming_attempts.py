"""Learn from rows in chunks, with or without keeping their units: what fits decides."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from mixbridge.errors import DataError, FormulaError
from mixbridge.panel.design import Design, lay_out
from mixbridge.panel.streaming_learn import Lesson, TooManyUnitsError, _Book, blank, learn_all
from mixbridge.panel.streaming_order import OrderWatch
from mixbridge.panel.streaming_passes import Passes
from mixbridge.panel.streaming_rows import Gather
from mixbridge.panel.streaming_runs import NotSortedError, Runs, Uncounted
from mixbridge.panel.streaming_spill import spill_by_unit
from mixbridge.panel.streaming_values import Distinct
from mixbridge.panel.streaming_walk import Plan
from mixbridge.sources.chunk_options import RECORDS

__all__ = ["Attempts", "Learned", "bytes_per_unit"]

_COPIES = 4
"""Arrays of units by columns that taking and closing moments hold at the same time: first rows, sums, means, and
room to grow."""
_KEYS = 12
"""Words that the key of a unit takes with what it is looked up with."""


@dataclass(frozen=True, slots=True, eq=False)
class Learned:
    """What was learned, and how the rows are read from now on.

    Parameters
    ----------
    plan : Plan
    passes : Passes
    lesson : Lesson
    design : Design
    grouped : bool
        Whether rows were sorted in temporary files.
    """

    plan: Plan
    passes: Passes
    lesson: Lesson
    design: Design
    grouped: bool


def bytes_per_unit(columns: int) -> int:
    """Return the bytes that the moments of a unit take with so many design columns."""
    return 8 * (_COPIES * (columns + 1) + _KEYS)


@dataclass(frozen=True, slots=True, eq=False)
class Attempts:
    """Ways to learn from rows; the first that fits is taken.

    Parameters
    ----------
    plan : Plan
    passes : Passes
    incomplete_rows : {"drop", "refuse"}
    gather : Gather or None
        Takes moments in the same pass, where that is possible.
    grouped : bool
        Whether rows were sorted in temporary files.
    """

    plan: Plan
    passes: Passes
    incomplete_rows: Literal["drop", "refuse"]
    gather: Gather | None = None
    grouped: bool = False

    def learn(self) -> Learned:
        """Learn with units kept if they fit, else without if rows are sorted, else from rows sorted in files.

        Raises
        ------
        DataError
            If nothing fits, or rows are not sorted as declared; besides what `learn_all` raises.
        """
        found = self._first_that_fits()
        if isinstance(found, DataError):
            if self.passes.options.spill is False:
                raise found
            alone = replace(self, gather=None)
            return self._spilled(alone._learned(Uncounted(self.plan.keys[0]), None).lesson, keep=False)
        if found.lesson.order.unsorted and self.passes.options.spill is not False:
            return self._spilled(found.lesson, keep=isinstance(found.lesson.units, Distinct))
        return found

    def _first_that_fits(self) -> Learned | DataError:
        """Learn from the rows as they come, or say why that is not possible unless they are sorted in files."""
        options = self.passes.options
        if options.unit_records is False:
            return self._sorted()
        detect = options.unit_records is None and options.sorted_by_unit is not False
        found = self._kept(RECORDS if detect else np.inf)
        if isinstance(found, TooManyUnitsError) and found.rising and detect:
            closed = self._sorted()
            if isinstance(closed, Learned):
                return closed
            found = self._kept(np.inf)  # rows were sorted up to where units became too many, not beyond
        return self._too_many(found.units) if isinstance(found, TooManyUnitsError) else found

    def _kept(self, most_sorted: float) -> Learned | TooManyUnitsError:
        """Learn, keeping the keys of all units; of sorted rows so many bytes."""
        name, limit = self.plan.keys[0], self.passes.options.memory_limit
        declared = Runs(name) if self.passes.options.sorted_by_unit is True and not self.grouped else None
        try:
            found = self._learned(Distinct(name, whole=True), declared, limit, most_sorted)
        except NotSortedError as error:
            raise self._not_as_declared(error) from error
        except TooManyUnitsError as error:
            return error
        units, columns = len(found.lesson.units), len(found.design.names)
        needed = units * bytes_per_unit(columns)
        if found.lesson.rising and needed > most_sorted:
            return TooManyUnitsError(units, True)
        if needed > limit:
            if self.passes.options.spill is not False:
                return TooManyUnitsError(units, found.lesson.rising)
            raise DataError(
                f"The moments of {units:,} units with {columns} columns and the outcome take about "
                f"{needed / 2**20:,.1f} MiB, more than memory_limit = {limit / 2**20:,.1f} MiB. Raise memory_limit, "
                f"use fewer columns, {_REMEDY}."
            )
        return found

    def _sorted(self) -> Learned | DataError:
        """Learn without keeping units, from rows sorted by unit."""
        try:
            return self._learned(Runs(self.plan.keys[0], grouped=self.grouped), None)
        except NotSortedError as error:
            if self.passes.options.sorted_by_unit is True:
                raise self._not_as_declared(error) from error
            return DataError(
                f"unit_records=False takes rows sorted by unit, but {error}. Sort them, leave unit_records out, or let "
                "them be sorted in temporary files with ChunkOptions(spill=True)."
            )

    def _learned(
        self,
        units: Distinct | Runs,
        declared: Runs | None,
        limit: float = np.inf,
        most_sorted: float = np.inf,
    ) -> Learned:
        """Learn; `units` and `declared` are blank, and made anew for each pass."""
        each = bytes_per_unit(len(self.plan.formula.terms))
        cells = self.passes.options.memory_limit // 16 if isinstance(units, Distinct) else 0

        def begin() -> _Book:
            return _Book(
                self.plan,
                limit / each,
                units.blank(),
                OrderWatch(self.plan.keys[0], self.plan.keys[1], cells) if len(self.plan.keys) > 1 else None,
                most_sorted=most_sorted / each,
                declared=None if declared is None else declared.blank(),
            )

        if self.gather is not None:
            self.gather.begin(sorted_units=isinstance(units, Runs))
        lesson = learn_all(self.plan, self.passes, self.incomplete_rows, begin, self.gather)
        return Learned(self.plan, self.passes, lesson, _design_of(self.plan, lesson), self.grouped)

    def _spilled(self, lesson: Lesson, *, keep: bool) -> Learned:
        """Sort the rows in temporary files, and learn from these."""
        source = spill_by_unit(self.plan, self.passes, lesson)
        try:
            again = Attempts(
                replace(self.plan, kinds={}, forms={}),
                Passes(source, self.passes.options, self.passes.made),
                self.incomplete_rows,
                self.gather,
                grouped=True,
            )
            found = again._kept(np.inf) if keep else again._sorted()
            assert isinstance(found, Learned), "the units fitted before, and rows are grouped now"
        except BaseException:
            source.remove()
            raise
        return replace(found, lesson=replace(found.lesson, account=lesson.account))

    def _too_many(self, units: int) -> DataError:
        limit = self.passes.options.memory_limit
        allowed = limit // bytes_per_unit(len(self.plan.formula.terms))
        return DataError(
            f"The rows read so far have {units:,} units: moments of so many do not fit into memory_limit, which allows "
            f"about {allowed:,} with these columns. Raise memory_limit, {_REMEDY}; or check that unit= names the "
            "grouping column."
        )

    def _not_as_declared(self, error: NotSortedError) -> DataError:
        return DataError(
            f"Rows were declared to be sorted by unit, but {error}. Sort them, with keys never falling, or leave "
            "sorted_by_unit out."
        )


_REMEDY = (
    "sort the rows by unit (closed moments of sorted rows do not grow with the number of units), or let them be sorted "
    "in temporary files with chunks=ChunkOptions(spill=True)"
)


def _design_of(plan: Plan, lesson: Lesson) -> Design:
    """Lay out the design."""
    outcome = plan.formula.outcome
    if outcome in lesson.levels or lesson.numeric[outcome] != 1:
        shape = "categories" if outcome in lesson.levels else f"{lesson.numeric[outcome]} columns"
        raise FormulaError(f"The outcome {outcome.code} yields {shape}; needed is one column of numbers.")
    blanks = {factor: blank(lesson, factor) for factor in plan.formula.factors}
    return lay_out(plan.formula.terms, blanks, plan.formula.text)
