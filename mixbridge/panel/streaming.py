"""From a formula and rows in chunks to a panel that never holds all rows."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np
import numpy.typing as npt
import pandas as pd
from patsy import EvalEnvironment

from mixbridge.errors import DataError, FormulaError, OptionError
from mixbridge.panel.absent import Apart
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.design import Design, lay_out
from mixbridge.panel.formula import parse_formula
from mixbridge.panel.keys import encode
from mixbridge.panel.readings import factor_columns, make_environment
from mixbridge.panel.roles import check_role
from mixbridge.panel.streaming_learn import Lesson, blank, filled, learn_all
from mixbridge.panel.streaming_order import Order, look_at_order
from mixbridge.panel.streaming_values import Distinct
from mixbridge.panel.streaming_walk import Plan, walk
from mixbridge.sources.chunks import CHUNK_ROWS, ChunkedSource
from mixbridge.sources.chunks_opening import open_chunks

__all__ = ["StreamedPanel", "build_streaming_panel"]

FloatArray = npt.NDArray[np.float64]
CodeArray = npt.NDArray[np.intp]

_MEMORY = 2**32
_COPIES = 4
"""Arrays of units by columns that taking and closing moments hold at the same time: first rows, sums, means, and
means in order of size."""


@dataclass(frozen=True, slots=True, eq=False)
class StreamedPanel(Apart):
    """The recipe of a panel whose rows are read anew each time blocks are asked for.

    Parameters
    ----------
    formula, outcome, names, terms, constant, unit_keys, unit_name, period_name, period_note, accounting
        As in `mixbridge.panel.Panel`.
    n : int
        Number of rows used.
    source_note : str or None
        What was done to make the rows readable more than once.
    order : Order
        Whether rows are sorted by unit and period.
    """

    formula: str
    outcome: str
    names: tuple[str, ...]
    terms: Mapping[str, slice]
    constant: int | None
    unit_keys: pd.Index
    unit_name: str
    period_name: str | None
    accounting: Accounting
    n: int
    source_note: str | None
    order: Order = field(repr=False)
    plan: Plan = field(repr=False)
    lesson: Lesson = field(repr=False)
    design: Design = field(repr=False)
    source: ChunkedSource = field(repr=False)
    unit_codes: CodeArray = field(repr=False)

    @property
    def N(self) -> int:
        """Number of units."""
        return len(self.unit_keys)

    @property
    def period_note(self) -> str | None:
        """How periods were read, or why they have no order."""
        return self.order.note

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
        for codes, x, y, _ in self._blocks(rows):
            yield codes, x, y

    def blocks(self, rows: int = 8192) -> Iterator[tuple[int, FloatArray, FloatArray]]:
        """Yield position, design and outcome block by block, like `mixbridge.panel.Panel.blocks`."""
        start = 0
        for _, x, y, _ in self._blocks(rows):
            yield start, x, y
            start += len(y)

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
        for own, x, y, period in self._blocks(rows):
            codes, when, z = own, self.order.positions[period], np.column_stack([x, y])
            if last is not None:
                codes, when = np.concatenate([last[0], codes]), np.concatenate([last[1], when])
                z = np.concatenate([last[2], z])
            last = codes[-1:], when[-1:], z[-1:]
            later = np.flatnonzero((codes[1:] == codes[:-1]) & (np.diff(when) == step)) + 1
            if len(later):
                yield z[later] - z[later - 1]

    def _blocks(self, rows: int) -> Iterator[tuple[CodeArray, FloatArray, FloatArray, CodeArray]]:
        """Yield codes, design, outcome and, where there are periods, the place of the period."""
        if rows < 1:
            raise OptionError(f"rows={rows!r}: a block has at least one row.")
        lesson, factors = self.lesson, self.plan.formula.factors
        seen = 0
        for step in walk(self.plan, self.source, lesson.stages):
            m = step.used
            seen += m
            if not m:
                continue
            values = {
                reading.factor: value for reading, value in zip(step.readings, step.values, strict=True)
            }
            learned = tuple(filled(lesson, factor, values[factor]) for factor in factors)
            design = replace(self.design, factors=learned)
            response = filled(lesson, self.plan.formula.outcome, values[self.plan.formula.outcome])
            places = lesson.units.find(step.key(self.unit_name))
            if seen > self.n or places.min() < 0:
                raise self._changed(step.place)
            codes = self.unit_codes[places]
            periods = codes
            if lesson.periods is not None and self.period_name is not None:
                periods = lesson.periods.find(step.key(self.period_name))
            for start in range(0, m, rows):
                stop = min(start + rows, m)
                y = np.ascontiguousarray(np.asarray(response.block(start, stop), dtype=np.float64)[:, 0])
                yield codes[start:stop], design.block(start, stop), y, periods[start:stop]
        if seen != self.n:
            raise self._changed("the data as a whole")

    def _changed(self, place: str) -> DataError:
        return DataError(
            f"{place} is not what it was when the data were first read: units or the number of rows differ. "
            "Do not change the data while they are in use; a function given as data yields the same frames at "
            "each call."
        )


def build_streaming_panel(
    formula: str,
    source: object,
    *,
    unit: str,
    period: str | None = None,
    incomplete_rows: Literal["drop", "refuse"] = "drop",
    trusted: bool = True,
    env: int | EvalEnvironment = 0,
    chunk_rows: int = CHUNK_ROWS,
    memory_limit: int = _MEMORY,
) -> StreamedPanel:
    """Validate rows that come in chunks and lay out the design of a formula.

    Memory grows with units times columns and with the rows of a chunk, not with the number of rows.

    Parameters
    ----------
    formula : str
        The fixed part in patsy's notation, with one outcome. What has to see all rows at once (splines, functions
        of whole columns) is refused.
    source : object
        What `mixbridge.sources.chunks_opening.open_chunks` takes: a Parquet file or a folder of them, a text file,
        an Arrow dataset, a function that returns frames, or a stream that can be read once, which is written to a
        temporary file.
    unit, period : str
        Columns of the grouping factor and of the periods within units.
    incomplete_rows : {"drop", "refuse"}
        Whether rows with missing values are dropped and counted, or refused.
    trusted : bool
        Whether the formula may name what the caller can see.
    env : int or patsy.EvalEnvironment
        Where the caller's names are.
    chunk_rows : int
        Most rows of a chunk, where the source does not decide.
    memory_limit : int
        Bytes that the moments of the units may take.

    Returns
    -------
    StreamedPanel

    Raises
    ------
    FormulaError, DataError, OptionError
        As `mixbridge.panel.build_panel`; a DataError also where the parts of the data do not go together or the
        moments would not fit, with the estimate.

    Examples
    --------
    >>> import pandas as pd
    >>> from mixbridge.panel.streaming import build_streaming_panel
    >>> honey = pd.DataFrame({"hive": [1, 2, 1, 2], "kg": [3, 6, 4, None], "forage": [1, 2, 2, 3]})
    >>> panel = build_streaming_panel("kg ~ forage", lambda: [honey[:2], honey[2:]], unit="hive")
    >>> [codes.tolist() for codes, x, y in panel.blocks_with_codes()]
    [[0, 1], [0]]
    """
    if incomplete_rows not in ("drop", "refuse"):
        raise OptionError.not_among("incomplete_rows", incomplete_rows, ("drop", "refuse"))
    environment = make_environment(env if trusted else None, reference=1)
    parsed = parse_formula(formula)
    opened = open_chunks(source, chunk_rows)
    check_role("unit", unit, opened.names, ())
    if period is not None:
        check_role("period", period, opened.names, ())
        if period == unit:
            raise DataError(
                f"unit and period both name {unit!r}: each row would be a unit of its own, or repeat one."
            )
    reads = factor_columns(parsed, opened.names, environment, trusted=trusted)
    keys = (unit,) if period is None else (unit, period)
    plan = Plan(parsed, reads, keys, environment, trusted)
    for name in plan.wanted:
        times = opened.names.count(name)
        if times > 1:
            raise DataError(f"The data have {times} columns named {name!r}. Rename or remove all but one.")
    lesson = learn_all(plan, opened, incomplete_rows, memory_limit / _bytes_per_unit(len(parsed.terms)))
    if parsed.outcome in lesson.levels or lesson.numeric[parsed.outcome] != 1:
        shape = (
            "categories" if parsed.outcome in lesson.levels else f"{lesson.numeric[parsed.outcome]} columns"
        )
        raise FormulaError(
            f"The outcome {parsed.outcome.code} yields {shape}; needed is one column of numbers."
        )
    design = lay_out(parsed.terms, {factor: blank(lesson, factor) for factor in parsed.factors}, formula)
    unit_codes, unit_keys = _units(unit, lesson.units, lesson.account.rows_used)
    _check_memory(len(unit_keys), len(design.names), memory_limit)
    order = look_at_order(
        plan, opened, lesson, unit_codes=unit_codes, unit_keys=unit_keys, most_cells=memory_limit // 16
    )
    return StreamedPanel(
        formula=formula,
        outcome=parsed.outcome.name(),
        names=design.names,
        terms=design.terms,
        constant=design.constant,
        unit_keys=unit_keys,
        unit_name=unit,
        period_name=period,
        accounting=lesson.account,
        n=lesson.account.rows_used,
        source_note=opened.note,
        order=order,
        plan=plan,
        lesson=lesson,
        design=design,
        source=opened,
        unit_codes=unit_codes,
    )


def _units(name: str, units: Distinct, rows: int) -> tuple[CodeArray, pd.Index]:
    """Return the code of each distinct unit in order of first appearance, and the keys by code."""
    codes, keys = encode(name, units.series())
    if len(keys) == 1:
        raise DataError(
            f"All {rows} rows used belong to one unit ({name} {keys[0]}): a variance between units is not "
            "defined. Check that unit= names the grouping column."
        )
    return codes, keys


def _bytes_per_unit(columns: int) -> int:
    """Return the bytes that the moments of a unit take with so many design columns."""
    return 8 * (_COPIES * (columns + 1) + 4)


def _check_memory(units: int, columns: int, limit: int) -> None:
    """Refuse moments that would not fit, before a pass is made for them."""
    needed = units * _bytes_per_unit(columns)
    if needed > limit:
        raise DataError(
            f"The moments of {units:,} units with {columns} columns and the outcome take about "
            f"{needed / 2**20:,.1f} MiB, more than memory_limit = {limit / 2**20:,.1f} MiB. Raise memory_limit, "
            "use fewer columns, or take the moments of parts of the units apart and merge them."
        )
