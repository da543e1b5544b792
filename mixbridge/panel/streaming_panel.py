"""A panel whose rows are read anew each time they are asked for."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import closing
from dataclasses import dataclass, field, replace
from typing import TypeVar

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError, OptionError
from mixbridge.panel.absent import Apart
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.design import Design
from mixbridge.panel.streaming_learn import Lesson, filled
from mixbridge.panel.streaming_order import Order
from mixbridge.panel.streaming_passes import Pass, Passes
from mixbridge.panel.streaming_rows import Gather, pieces, values_of, z_pieces
from mixbridge.panel.streaming_runs import NotSortedError, Runs
from mixbridge.panel.streaming_walk import Plan, Step
from mixbridge.sources.checkpoint import State

__all__ = ["StreamedPanel", "UnitKeys"]

FloatArray = npt.NDArray[np.float64]
CodeArray = npt.NDArray[np.intp]
Made = TypeVar("Made")
_Rows = tuple[str, CodeArray | pd.Series, CodeArray, Made]
"""Where some rows come from, the codes of their units or the keys, the places of their periods, and the rows."""


@dataclass(frozen=True, slots=True, eq=False)
class UnitKeys:
    """Keys of units that are kept.

    Parameters
    ----------
    codes : numpy.ndarray of int
        Code of each unit, in order of first appearance.
    keys : pandas.Index
        Keys by code, sorted.
    """

    codes: CodeArray
    keys: pd.Index


@dataclass(slots=True, eq=False)
class _Seen:
    """What is saved of a later pass."""

    stage: str
    runs: Runs
    gather: Gather | None
    used: int = 0
    given: int = 0

    def state(self) -> State:
        assert self.gather is not None, "only what takes moments is saved"
        return {
            "used": self.used,
            "given": self.given,
            "runs": self.runs.state(),
            "gather": self.gather.state(),
        }

    def restore(self, state: State) -> int:
        assert self.gather is not None, "only what takes moments is saved"
        self.used, self.given = state["used"], state["given"]
        self.runs.restore(state["runs"])
        self.gather.restore(state["gather"])
        return self.given


@dataclass(frozen=True, slots=True, eq=False)
class StreamedPanel(Apart):
    """The recipe of a panel whose rows are read anew each time blocks are asked for.

    Parameters
    ----------
    formula, outcome, names, terms, constant, unit_name, period_name, accounting
        As in `mixbridge.panel.Panel`.
    known : UnitKeys or None
        Keys of the units; None where they were not kept: units are numbered as they come, then.
    grouped : bool
        Whether rows of a unit are known to lie together, although keys may fall.
    """

    formula: str
    outcome: str
    names: tuple[str, ...]
    terms: Mapping[str, slice]
    constant: int | None
    unit_name: str
    period_name: str | None
    accounting: Accounting
    known: UnitKeys | None = field(repr=False)
    grouped: bool = field(repr=False)
    plan: Plan = field(repr=False)
    lesson: Lesson = field(repr=False)
    design: Design = field(repr=False)
    rows_read: Passes = field(repr=False)

    @property
    def n(self) -> int:
        """Number of rows used."""
        return self.accounting.rows_used

    @property
    def N(self) -> int:
        """Number of units."""
        return len(self.lesson.units)

    @property
    def unit_keys(self) -> pd.Index:
        """Key of each unit, sorted.

        Raises
        ------
        DataError
            If they were not kept.
        """
        if self.known is None:
            raise DataError(
                f"this question needs the keys of all {self.N:,} units, which were not kept: rows are sorted by unit, "
                "and closed moments are all that was taken. chunks=ChunkOptions(unit_records=True) keeps them."
            )
        return self.known.keys

    @property
    def order(self) -> Order:
        """Whether rows are sorted by unit and period."""
        return self.lesson.order

    @property
    def period_note(self) -> str | None:
        """How periods were read, or why they have no order."""
        return self.order.note

    @property
    def source_note(self) -> str:
        """What was done to make the rows readable, and how often they were read to take the moments."""
        made = self.rows_read.for_moments[0] if self.rows_read.for_moments else len(self.passes)
        read = f"rows read in chunks, in {made} pass{'' if made == 1 else 'es'}"
        note = self.rows_read.source.note
        return read if note is None else f"{note}; {read}"

    @property
    def passes(self) -> tuple[Pass, ...]:
        """The passes made over the rows so far."""
        return tuple(self.rows_read.made)

    def blocks_with_codes(self, rows: int = 8192) -> Iterator[tuple[CodeArray, FloatArray, FloatArray]]:
        """Yield unit codes, design and outcome block by block, as `mixbridge.moments.collect` takes them.

        Parameters
        ----------
        rows : int
            Most rows per block.

        Raises
        ------
        DataError
            If the data are not the same as when they were first read.
        """
        for codes, x, y, _ in self._blocks(rows, "rows unit by unit"):
            yield codes, x, y

    def blocks(self, rows: int = 8192) -> Iterator[tuple[int, FloatArray, FloatArray]]:
        """Yield position, design and outcome block by block, like `mixbridge.panel.Panel.blocks`."""
        start = 0
        for _, x, y, _ in self._blocks(rows, "rows"):
            yield start, x, y
            start += len(y)

    def laid_out(self, what: str, gather: Gather | None = None) -> Iterator[tuple[CodeArray, FloatArray]]:
        """Yield units and rows chunk by chunk, as moments take them while they are read.

        Parameters
        ----------
        what : str
            What the pass is for.
        gather : Gather, optional
            What takes them in; its state is saved now and then, where that was asked for.

        Yields
        ------
        codes : numpy.ndarray of int
            Units numbered by order of first appearance.
        z : numpy.ndarray
            As `mixbridge.panel.streaming_rows.z_of`; a chunk in several pieces if it is large.
        """

        def make(step: Step) -> Iterable[FloatArray]:
            learned = {
                factor: filled(self.lesson, factor, value) for factor, value in values_of(step).items()
            }
            factors = [learned[factor] for factor in self.plan.formula.factors]
            return z_pieces(self.design, factors, learned[self.plan.formula.outcome], step.used)

        for codes, _, laid_out in self._over(make, what, by_appearance=True, gather=gather):
            start = 0
            for z in laid_out:
                yield codes[start : start + len(z)], z
                start += len(z)

    def difference_rows(self, step: int, rows: int = 8192) -> Iterator[FloatArray]:
        """Yield differences of rows of a unit that are so many period steps apart and next to each other.

        Parameters
        ----------
        step : int
            Period steps.
        rows : int
            Most rows per block.

        Yields
        ------
        numpy.ndarray of shape (m, len(names) + 1)
            Differences of the design columns and, last, of the outcome; blocks without one are left out.

        Raises
        ------
        OptionError
            If rows are not sorted; `order.reason` says so beforehand.
        """
        if self.order.reason is not None:
            raise OptionError(f"There are no differences: {self.order.reason}.")
        last: tuple[CodeArray, npt.NDArray[np.int64], FloatArray] | None = None
        for own, x, y, period in self._blocks(rows, "differences of consecutive periods"):
            codes, when, z = own, self.order.positions[period], np.column_stack([x, y])
            if last is not None:
                codes, when = np.concatenate([last[0], codes]), np.concatenate([last[1], when])
                z = np.concatenate([last[2], z])
            last = codes[-1:], when[-1:], z[-1:]
            later = np.flatnonzero((codes[1:] == codes[:-1]) & (np.diff(when) == step)) + 1
            if len(later):
                yield z[later] - z[later - 1]

    def _blocks(self, rows: int, what: str) -> Iterator[tuple[CodeArray, FloatArray, FloatArray, CodeArray]]:
        """Yield codes, design, outcome and, where there are periods, the place of the period."""
        if rows < 1:
            raise OptionError(f"rows={rows!r}: a block has at least one row.")

        def make(step: Step) -> Iterable[tuple[FloatArray, FloatArray]]:
            learned = {
                factor: filled(self.lesson, factor, value) for factor, value in values_of(step).items()
            }
            factors = tuple(learned[factor] for factor in self.plan.formula.factors)
            design, response = replace(self.design, factors=factors), learned[self.plan.formula.outcome]

            def lay_out(start: int, stop: int) -> tuple[FloatArray, FloatArray]:
                y = np.ascontiguousarray(np.asarray(response.block(start, stop), dtype=np.float64)[:, 0])
                return design.block(start, stop), y

            return pieces(lay_out, step.used, len(self.names) + 1, rows)

        for codes, periods, made in self._over(make, what, by_appearance=False):
            start = 0
            for x, y in made:
                yield codes[start : start + len(y)], x, y, periods[start : start + len(y)]
                start += len(y)

    def _over(
        self,
        make: Callable[[Step], Made],
        what: str,
        *,
        by_appearance: bool,
        gather: Gather | None = None,
    ) -> Iterator[tuple[CodeArray, CodeArray, Made]]:
        """Pass over the rows; yield unit codes, places of periods and what is made of the rows of a chunk."""
        lesson, none = self.lesson, np.empty(0, dtype=np.intp)

        def work(step: Step) -> tuple[Step, tuple[CodeArray, CodeArray, Made] | None]:
            if not step.used:
                return step, None
            units = none if isinstance(lesson.units, Runs) else lesson.units.find(step.key(self.unit_name))
            periods = none
            if lesson.periods is not None and self.period_name is not None:
                periods = lesson.periods.find(step.key(self.period_name))
            return step, (units, periods, make(step))

        runs = Runs(self.unit_name, grouped=self.grouped)
        seen = _Seen("moments-sorted" if self.known is None else "moments-units", runs, gather)
        if gather is None:
            walked = self.rows_read.over(self.plan, lesson.stages, work, what)
        else:
            walked = self.rows_read.saved_over(self.plan, lesson.stages, work, what, seen)
        with closing(walked) as chunks:
            for step, rows in chunks:
                seen.given += step.account.rows_given
                if rows is None:
                    continue
                codes, periods, made = rows
                seen.used += step.used
                if isinstance(lesson.units, Runs):
                    codes = self._numbered(runs, step)
                elif codes.min() >= 0 and self.known is not None and not by_appearance:
                    codes = self.known.codes[codes]
                if seen.used > self.n or codes.min() < 0 or (len(periods) and periods.min() < 0):
                    raise self._changed(step.place)
                yield codes, periods, made
        if seen.used != self.n or (isinstance(lesson.units, Runs) and len(runs) != self.N):
            raise self._changed("the data as a whole")

    def _numbered(self, runs: Runs, step: Step) -> CodeArray:
        try:
            return runs.enter(step.key(self.unit_name), step.place)
        except NotSortedError as error:
            raise self._changed(step.place) from error

    def _changed(self, place: str) -> DataError:
        return DataError(
            f"{place} is not what it was when the data were first read: units or the number of rows differ. "
            "Do not change the data while they are in use; a function given as data yields the same frames at "
            "each call."
        )
