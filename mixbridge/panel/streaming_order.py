"""Whether rows that come in chunks are sorted by unit and period."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError
from mixbridge.panel.roles import periods_of
from mixbridge.panel.streaming_learn import Lesson
from mixbridge.panel.streaming_walk import Plan, walk
from mixbridge.sources.chunks import ChunkedSource

__all__ = ["Order", "look_at_order"]


@dataclass(frozen=True, slots=True, eq=False)
class Order:
    """The order of the rows.

    Parameters
    ----------
    note : str or None
        How periods were read; None without periods.
    reason : str or None
        Why rows cannot be differenced as they come; None if they can.
    positions : numpy.ndarray of int64
        Place on an equally spaced scale of each distinct period, in order of first appearance.
    jumps : mapping of int to int
        Period steps between neighbouring rows of a unit, and how often each occurs; empty if not sorted.
    """

    note: str | None
    reason: str | None
    positions: npt.NDArray[np.int64] = field(default_factory=lambda: np.empty(0, dtype=np.int64))
    jumps: Mapping[int, int] = field(default_factory=dict)


def look_at_order(
    plan: Plan,
    source: ChunkedSource,
    lesson: Lesson,
    *,
    unit_codes: npt.NDArray[np.intp],
    unit_keys: pd.Index,
    most_cells: int,
) -> Order:
    """Pass over the keys of the rows used, where there are periods.

    Raises
    ------
    DataError
        If a pair of unit and period is repeated. Where rows are not sorted that is looked for only if there
        are at most `most_cells` combinations, a byte each; else the note says that it was not.
    """
    if lesson.periods is None:
        return Order(
            None, "no period given, so rows have no order to difference in; name the column with period="
        )
    unit, period = plan.keys
    distinct = lesson.periods.series()
    positions, note = periods_of(
        period, distinct, np.arange(len(distinct)), unit, pd.RangeIndex(len(distinct))
    )
    ranks = np.arange(len(distinct)) if positions is None else positions
    cells = len(unit_keys) * len(distinct)
    seen = np.zeros(cells if cells <= most_cells else 0, dtype=bool)
    runs, rising, jumps = 0, True, dict[int, int]()
    last = np.empty(0, dtype=np.intp), np.empty(0, dtype=np.int64)
    for step in walk(plan, source, lesson.stages):
        if not step.used:
            continue
        codes = unit_codes[lesson.units.find(step.key(unit))]
        places = lesson.periods.find(step.key(period))
        if len(seen):
            pairs = codes * len(distinct) + places
            again = seen[pairs] | pd.Index(pairs).duplicated()
            if again.any():
                row = int(np.flatnonzero(again)[0])
                raise _repeated(plan, unit_keys[codes[row]], distinct.iloc[places[row]], step.place)
            seen[pairs] = True
        before = len(last[0])
        codes, when = np.concatenate([last[0], codes]), np.concatenate([last[1], ranks[places]])
        last = codes[-1:], when[-1:]
        same = codes[1:] == codes[:-1]
        runs += int(np.count_nonzero(~same)) + (1 - before)
        steps = np.diff(when)[same]
        rising = rising and bool((steps > 0).all())
        if (steps == 0).any():
            row = int(np.flatnonzero(same & (np.diff(when) == 0))[0]) + 1 - before
            raise _repeated(plan, unit_keys[codes[row + before]], distinct.iloc[places[row]], step.place)
        if rising:
            sizes, counts = np.unique(steps, return_counts=True)
            for size, count in zip(sizes.tolist(), counts.tolist(), strict=True):
                jumps[size] = jumps.get(size, 0) + count
    in_order = runs == len(unit_keys) and rising
    if not (len(seen) or (in_order and positions is not None)):
        note += (
            "; whether a pair of unit and period is repeated was not looked for, since rows are not sorted"
        )
    if positions is None:
        return Order(note, note)
    if not in_order:
        return Order(
            note,
            "rows come in chunks that are not sorted by unit and period, so neighbouring periods do not meet; "
            "sort the data by unit and period, or pass them as one frame",
            positions,
        )
    return Order(note, None, positions, jumps)


def _repeated(plan: Plan, unit: object, period: object, place: str) -> DataError:
    return DataError(
        f"Rows repeat a pair of unit and period, the first in {place}: ({plan.keys[0]} {unit}, {plan.keys[1]} "
        f"{period}). Aggregate them to one row per pair, correct the keys, or leave period out if rows within a "
        "unit have no order."
    )
