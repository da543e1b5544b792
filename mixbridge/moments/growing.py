"""Moments of rows whose units become known only as they are read."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import suppress

import numpy as np
import pandas as pd
from numpy.typing import NDArray

with suppress(ImportError):  # as in opened.py, which says in COMPILED whether it is there
    from scipy.sparse._sparsetools import csc_matvecs

from mixbridge.errors import DataError
from mixbridge.moments.opened import (
    COMPILED,
    UNITS_AT_ONCE,
    OpenMoments,
    _loss,
    _products,
    _refuse_non_finite,
    add_by_unit,
)
from mixbridge.sources.checkpoint import State

__all__ = ["Growing", "entries_of"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
BLOCK_ROWS = 8192
LEVEL = 16.0
"""Variance of a column over that within units, up to which rows are measured from one number for all units."""
LEVEL_LOSS = 256.0
"""Amplified rounding above which they should have been measured unit by unit after all."""
_FEW_UNITS = 1024
_FREEDOM = 256
"""Rows beyond one for each unit that it takes to tell the variance within units."""
_EARLY_ROWS = 4 * BLOCK_ROWS
"""Rows after which this is asked for the first time; what it costs grows with the units met so far."""


def entries_of(columns: tuple[str, ...], constant: int | None) -> IntArray:
    """Return the positions among the columns of the entries of z but the last, which is one in each row.

    Parameters
    ----------
    columns : tuple of str
        Design columns, then the outcome.
    constant : int or None
        The explicit constant, for which the last entry of z stands.
    """
    return np.array([j for j in range(len(columns)) if j != constant], dtype=np.intp)


class Growing:
    """Per unit the sum of differences from a number, and the number of rows; one product over all units.

    As in `mixbridge.moments.opened.gather`, with z = (design columns without the constant, outcome, 1) in one
    array. What z is measured from has a zero in the last place, so that the sums of the last entry are the
    numbers of rows. With d the differences and dbar their mean in a unit, whatever they are measured from,

        W = sum dd' - sum_i T_i dbar_i dbar_i'.

    The first rows are measured from the first row of their unit. If in these no column varies so much more between
    units than within that the subtraction would cost digits, all rows are measured from their common mean instead,
    which need not be looked up. A column constant within units never passes for that.

    Parameters
    ----------
    width : int
        Length of z.
    by_unit : bool
        Whether rows are measured from the first row of their unit in any case.
    """

    def __init__(self, width: int, *, by_unit: bool = False) -> None:
        self.width, self.units = width, 0
        self.by_unit = by_unit
        self.anchors: FloatArray | None = np.empty((_FEW_UNITS, width))
        self.origin = np.zeros(width)
        self.sums = np.zeros((_FEW_UNITS, width))
        self.total = np.zeros((width, width))
        self._buffer = np.empty((BLOCK_ROWS, width))
        self._starts, self._ones = np.arange(BLOCK_ROWS + 1, dtype=np.intp), np.ones(BLOCK_ROWS)
        self._undecided = not by_unit

    def add(self, codes: IntArray, z: FloatArray) -> None:
        """Take in rows.

        Parameters
        ----------
        codes : ndarray of int, shape (b,)
            Units by order of first appearance: a unit not seen before has the next number.
        z : ndarray of shape (b, width)
        """
        for start in range(0, codes.size, BLOCK_ROWS):
            part, rows = codes[start : start + BLOCK_ROWS], z[start : start + BLOCK_ROWS]
            if part.max() >= self.units:
                self._enter(part, rows)
            d = self._buffer[: part.size]
            if self.anchors is None:
                np.subtract(rows, self.origin, out=d)
            else:
                np.take(self.anchors, part, axis=0, out=d, mode="clip")
                np.subtract(rows, d, out=d)
            self.total += _products(d, d)
            self._add_up(part, d)
            if self._undecided and start + BLOCK_ROWS == _EARLY_ROWS:
                self._decide()
        if self._undecided:
            self._undecided = False
            if self.anchors is not None:
                self._decide()

    def _add_up(self, codes: IntArray, d: FloatArray) -> None:
        if not COMPILED:  # pragma: no cover
            add_by_unit(self.sums, codes, d)
            return
        units, width = self.sums.shape
        csc_matvecs(
            units,
            codes.size,
            width,
            self._starts[: codes.size + 1],
            codes,
            self._ones[: codes.size],
            d.reshape(-1),
            self.sums.reshape(-1),
        )

    def _enter(self, codes: IntArray, rows: FloatArray) -> None:
        """Make room for units not seen before, and keep their first row."""
        units = int(codes.max()) + 1
        self.sums = _with_room(self.sums, self.units, units, np.zeros)
        if self.anchors is not None:
            new = np.flatnonzero(codes >= self.units)
            highest = np.maximum.accumulate(codes[new])
            first = new[np.diff(highest, prepend=self.units - 1) > 0]
            self.anchors = _with_room(self.anchors, self.units, units, np.empty)
            self.anchors[self.units : units] = np.take(rows, first, axis=0)
            self.anchors[self.units : units, -1] = 0.0
        self.units = units

    def _decide(self) -> None:
        """Measure from one number from now on, if the rows so far say that this costs no digits."""
        assert self.anchors is not None, "nothing was decided yet"
        sums, counts = self.sums[: self.units, :-1], self.sums[: self.units, -1:]
        rows = float(counts.sum())
        if rows < self.units + _FREEDOM:
            return
        dbar = sums / counts
        anchors = self.anchors[: self.units, :-1]
        within = np.diag(self.total)[:-1] - (sums * dbar).sum(axis=0)
        origin = anchors[0] + (counts * (anchors - anchors[0] + dbar)).sum(axis=0) / rows
        gap = anchors - origin
        cross = sums.T @ gap
        products = self.total[:-1, :-1] + cross + cross.T + gap.T @ (counts * gap)
        freedom = rows - self.units
        if not (np.diag(products) / rows <= LEVEL * within / freedom).all():
            return
        sums += counts * gap
        self.total[:-1, :-1] = (products + products.T) / 2.0
        self.total[-1, :-1] = self.total[:-1, -1] = sums.sum(axis=0)
        self.origin[:-1] = origin
        self.anchors = None

    def state(self) -> State:
        """Return what was taken, to be saved."""
        return {
            "anchors": np.empty((0, self.width)) if self.anchors is None else self.anchors[: self.units],
            "by_unit": self.anchors is not None,
            "origin": self.origin,
            "sums": self.sums[: self.units],
            "total": self.total,
        }

    def restore(self, state: State) -> None:
        """Go on from a state."""
        self.anchors = state["anchors"] if state["by_unit"] else None
        self.origin, self.sums, self.total = state["origin"], state["sums"], state["total"]
        self.units, self._undecided = len(self.sums), False

    def finish(
        self, codes: IntArray, keys: pd.Index, columns: tuple[str, ...], constant: int | None
    ) -> OpenMoments:
        """Return the moments; no rows can be added after it.

        Parameters
        ----------
        codes : ndarray of int, shape (N,)
            Place in `keys` of each unit in order of first appearance.
        keys : pandas.Index
        columns : tuple of str
            Design columns, an explicit constant included, then the outcome.
        constant : int or None
            Place of that constant.
        """
        if self.units != len(keys):
            raise DataError(
                f"the rows read have {self.units} units, and {len(keys)} are known: they changed."
            )
        at = entries_of(columns, constant)
        counts = np.empty(self.units, dtype=np.int64)
        counts[codes] = np.rint(self.sums[: self.units, -1])
        means = np.zeros((self.units, len(columns)))
        origin = (self.origin if self.anchors is None else self.anchors[0])[:-1].copy()
        inner = self.total[:-1, :-1].copy()
        for start in range(0, self.units, UNITS_AT_ONCE):
            part = slice(start, min(start + UNITS_AT_ONCE, self.units))
            sums = self.sums[part, :-1]
            dbar = sums / self.sums[part, -1:]
            inner -= sums.T @ dbar
            rows = np.zeros((len(dbar), len(columns)))
            rows[:, at] = dbar if self.anchors is None else (self.anchors[part, :-1] - origin) + dbar
            means[codes[part]] = rows
        shift, within, spread = np.ones(len(columns)), np.zeros((len(columns),) * 2), np.zeros(len(columns))
        shift[at] = origin
        within[np.ix_(at, at)] = (inner + inner.T) / 2.0
        spread[at] = np.diag(self.total)[:-1]
        _refuse_non_finite(np.diag(spread), columns)
        self.sums = np.empty((0, self.width))
        self.anchors = None
        return OpenMoments(columns, keys, counts, shift, means, within, _loss(spread, np.diag(within)))


def _with_room(
    array: FloatArray, used: int, wanted: int, make: Callable[[tuple[int, int]], FloatArray]
) -> FloatArray:
    """Return the array, or a longer one with the lines in use, if it has fewer lines than wanted."""
    if wanted <= len(array):
        return array
    longer = make((max(wanted, 2 * len(array)), array.shape[1]))
    longer[:used] = array[:used]
    return longer
