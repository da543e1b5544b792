"""Whether rows that come in chunks are sorted by unit and period."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError
from mixbridge.panel.roles import periods_of
from mixbridge.panel.streaming_values import Distinct
from mixbridge.sources.checkpoint import State

__all__ = ["NO_PERIOD", "Order", "OrderWatch"]

CodeArray = npt.NDArray[np.intp]
NO_PERIOD = "no period given, so rows have no order to difference in; name the column with period="
_PAIRS = 2**20


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

    @property
    def unsorted(self) -> bool:
        """Whether periods have an order, and rows do not keep it."""
        return self.reason is not None and len(self.positions) > 0


class OrderWatch:
    """Looks at units and periods as rows pass by.

    Steps between neighbouring rows of a unit are counted by the two periods, so that the scale on which periods lie
    need not be known before all of them were seen.

    Parameters
    ----------
    unit, period : str
        The columns.
    most_cells : int
        Combinations of unit and period, a byte each, up to which a repeated pair is looked for anywhere; beyond,
        and where it is 0, it is found between neighbouring rows only.
    """

    def __init__(self, unit: str, period: str, most_cells: int) -> None:
        self.unit, self.period = unit, period
        self.periods = Distinct(period, whole=False)
        self.runs = 0
        self.together = True
        self._seen = np.zeros((0, 0), dtype=bool)
        self._most_cells = most_cells
        self._last = np.empty(0, dtype=np.intp), np.empty(0, dtype=np.intp)
        self._pairs: list[tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]] = []
        self._waiting = 0

    def take(
        self,
        codes: CodeArray,
        periods: pd.Series[Any],
        place: str,
        units: int,
        key: Callable[[int], object],
    ) -> None:
        """Take in the rows of a chunk.

        Parameters
        ----------
        codes : numpy.ndarray of int
            Number of the unit of each row.
        periods : pandas.Series
            Its period.
        place : str
            Where the chunk comes from.
        units : int
            Number of units seen so far.
        key : callable
            Returns the key of the unit of a row, for messages.

        Raises
        ------
        DataError
            If a pair of unit and period is repeated.
        """
        places = self.periods.enter(periods, place)
        before = len(self._last[0])
        own, when = np.concatenate([self._last[0], codes]), np.concatenate([self._last[1], places])
        same = own[1:] == own[:-1]
        self.runs += int(np.count_nonzero(~same)) + (1 - before)
        self.together = self.together and self.runs == units
        again = np.flatnonzero(same & (when[1:] == when[:-1])) + 1 - before
        if not len(again):
            again = self._seen_before(codes, places, units)
        if len(again):
            row = int(again[0])
            raise DataError(
                f"Rows repeat a pair of unit and period, the first in {place}: ({self.unit} {key(row)}, {self.period} "
                f"{periods.iloc[row]}). Aggregate them to one row per pair, correct the keys, or leave period out "
                "if rows within a unit have no order."
            )
        if self.together:
            self._count(when[:-1][same], when[1:][same])
        self._last = own[-1:], when[-1:]

    def _seen_before(self, codes: CodeArray, places: CodeArray, units: int) -> CodeArray:
        """Return the rows whose pair was seen before, and note those of this chunk."""
        if not self._most_cells:
            return np.empty(0, dtype=np.intp)
        rows, columns = self._seen.shape
        if units > rows or len(self.periods) > columns:
            rows = rows if units <= rows else max(units, 2 * rows)
            columns = columns if len(self.periods) <= columns else max(len(self.periods), 2 * columns)
            if units * len(self.periods) > self._most_cells:
                self._seen, self._most_cells = np.zeros((0, 0), dtype=bool), 0
                return np.empty(0, dtype=np.intp)
            seen = np.zeros((rows, columns), dtype=bool)
            seen[: self._seen.shape[0], : self._seen.shape[1]] = self._seen
            self._seen = seen
        flat = self._seen.reshape(-1)
        pairs = codes * columns + places
        again = np.take(flat, pairs) | pd.Index(pairs).duplicated()
        flat[pairs] = True
        return np.flatnonzero(again)

    def _count(self, one: CodeArray, two: CodeArray) -> None:
        """Count pairs of periods."""
        periods = len(self.periods)
        if periods**2 <= 4 * len(one) + 2**16:
            found = np.bincount(one * periods + two, minlength=periods**2)
            pairs = np.flatnonzero(found)
            counts = found[pairs]
            pairs = (pairs // periods << 32) | pairs % periods
        else:
            pairs, counts = np.unique(one.astype(np.int64) << 32 | two, return_counts=True)
        self._pairs.append((pairs, counts))
        self._waiting += len(pairs)
        if self._waiting > _PAIRS:
            self._settle()

    def _settle(self) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]:
        none = np.empty(0, dtype=np.int64)
        pairs = np.concatenate([none, *(part[0] for part in self._pairs)])
        counts = np.concatenate([none, *(part[1] for part in self._pairs)])
        distinct, place = np.unique(pairs, return_inverse=True)
        total = np.zeros(len(distinct), dtype=np.int64)
        np.add.at(total, place, counts)
        self._pairs, self._waiting = [(distinct, total)], 0
        return distinct, total

    def state(self) -> State:
        """Return what was seen, to be saved."""
        pairs, counts = self._settle()
        return {
            "periods": self.periods.state(),
            "runs": self.runs,
            "together": self.together,
            "seen": self._seen,
            "cells": self._most_cells,
            "last": np.stack(self._last),
            "pairs": pairs,
            "counts": counts,
        }

    def restore(self, state: State) -> None:
        """Go on from a state."""
        self.periods.restore(state["periods"])
        self.runs, self.together = state["runs"], state["together"]
        self._seen, self._most_cells = state["seen"], state["cells"]
        self._last = state["last"][0], state["last"][1]
        self._pairs, self._waiting = [(state["pairs"], state["counts"])], 0

    def finish(self) -> Order:
        """Say how the rows were ordered."""
        distinct = self.periods.series()
        positions, note = periods_of(
            self.period, distinct, np.arange(len(distinct)), self.unit, pd.RangeIndex(len(distinct))
        )
        ranks = np.arange(len(distinct)) if positions is None else positions
        pairs, counts = self._settle()
        steps = ranks[pairs & (2**32 - 1)] - ranks[pairs >> 32]
        in_order = self.together and bool((steps > 0).all())
        if not (self._most_cells or (in_order and positions is not None)):
            note += "; whether a pair of unit and period is repeated was not looked for, since rows are not sorted"
        if positions is None:
            return Order(note, note)
        if not in_order:
            return Order(
                note,
                "rows come in chunks that are not sorted by unit and period, so neighbouring periods do not meet; "
                "sort the data by unit and period, pass them as one frame, or let them be sorted in temporary files "
                "with chunks=ChunkOptions(spill=True)",
                positions,
            )
        sizes, place = np.unique(steps, return_inverse=True)
        total = np.zeros(len(sizes), dtype=np.int64)
        np.add.at(total, place, counts)
        return Order(note, None, positions, dict(zip(sizes.tolist(), total.tolist(), strict=True)))
