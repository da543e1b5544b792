"""First looks at parts of the rows: what they tell, and their moments before units are sorted."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.moments.growing import LEVEL_LOSS, Growing
from mixbridge.moments.opened import UNITS_AT_ONCE, _loss
from mixbridge.panel.parted import Recipe, Taught, Told, plan_of, read_rows
from mixbridge.panel.parted_learn import PartBook, read_part
from mixbridge.panel.streaming_rows import OnePass
from mixbridge.panel.streaming_values import Distinct
from mixbridge.panel.streaming_walk import Step

__all__ = ["Grown", "Look", "book_of", "grow_part", "look_at_part"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True, eq=False)
class Grown:
    """Moments of one part before its units are sorted.

    Parameters
    ----------
    keys : pandas.Series
        Units by order of first appearance.
    counts : ndarray of int, shape (N,)
    anchors : ndarray of shape (N, k) or (1, k)
        What the rows of each unit are measured from: the first of them, or one number for all.
    offsets : ndarray of shape (N, k)
        Mean of each unit measured so.
    total, within : ndarray of shape (k, k)
        Products of rows measured so, and of rows minus the mean of their unit.
    rows : tuple of (ndarray of int, pandas.Series)
        Unit and period of rows, a piece for each step; empty without periods.
    """

    keys: pd.Series[Any]
    counts: NDArray[np.int64]
    anchors: FloatArray
    offsets: FloatArray
    total: FloatArray
    within: FloatArray
    rows: tuple[tuple[IntArray, pd.Series[Any]], ...]

    @property
    def loss(self) -> FloatArray:
        """By how much the subtraction of means may have amplified rounding."""
        return _loss(np.diag(self.total), np.diag(self.within))

    @property
    def unfit(self) -> bool:
        """Whether rows were measured from one number, which costs more digits than it may."""
        return len(self.anchors) < len(self.counts) and self.loss.max() > LEVEL_LOSS


@dataclass(frozen=True, slots=True, eq=False)
class Look:
    """What the first look at a part shows, and its moments, where one pass suffices."""

    book: PartBook
    grown: Grown | None


class _Growth:
    """Takes moments of rows as they come."""

    def __init__(self, *, by_unit: bool) -> None:
        self._by_unit = by_unit
        self._growing: Growing | None = None
        self._rows: list[tuple[IntArray, pd.Series[Any]]] = []

    def add(self, codes: IntArray, z: FloatArray) -> None:
        """Take in rows, units numbered by order of first appearance."""
        if self._growing is None:
            self._growing = Growing(z.shape[1], by_unit=self._by_unit)
        self._growing.add(codes, z)

    def note_periods(self, codes: IntArray, period: pd.Series[Any]) -> None:
        """Keep the periods of rows."""
        self._rows.append((codes, period))

    def finish(self, keys: pd.Series[Any]) -> Grown | None:
        """Return the moments, or None without rows."""
        growing = self._growing
        if growing is None:
            return None
        sums, weights = growing.sums[: growing.units, :-1], growing.sums[: growing.units, -1]
        offsets = sums / weights[:, None]
        total = growing.total[:-1, :-1]
        within = total.copy()
        for start in range(0, growing.units, UNITS_AT_ONCE):
            some = slice(start, start + UNITS_AT_ONCE)
            within -= sums[some].T @ offsets[some]
        return Grown(
            keys,
            np.rint(weights).astype(np.int64),
            growing.origin[None, :-1] if growing.anchors is None else growing.anchors[: growing.units, :-1],
            offsets,
            total,
            (within + within.T) / 2.0,
            tuple(self._rows),
        )


def look_at_part(
    recipe: Recipe, told: tuple[Told, ...], place: str, frame: object, *, by_unit: bool = False
) -> Look:
    """Read a part for the first time, and take its moments on the way if all factors are numbers.

    Parameters
    ----------
    recipe : Recipe
    told : tuple of Told
    place : str
    frame : pandas.DataFrame
    by_unit : bool
        Whether rows are measured from the first of their unit in any case.
    """
    plan, growth, complete = plan_of(recipe), _Growth(by_unit=by_unit), True
    one_pass = OnePass(plan, in_turn=True)

    def take(step: Step, codes: IntArray) -> None:
        nonlocal complete
        _, pieces = one_pass(step)
        complete = complete and pieces is not None
        start = 0
        for z in pieces or ():
            growth.add(codes[start : start + len(z)], z)
            start += len(z)
        if complete and len(plan.keys) > 1:
            growth.note_periods(codes, step.key(plan.keys[1]))

    book, keys = read_part(recipe, told, place, frame, take)
    grown = growth.finish(keys) if complete else None
    if grown is not None and grown.unfit:
        return look_at_part(recipe, told, place, frame, by_unit=True)
    return Look(book, grown)


def book_of(look: Look) -> tuple[PartBook, bool]:
    """Return what a part tells, and whether its moments were taken (if it has rows)."""
    return look.book, look.grown is not None or not look.book.used


def grow_part(taught: Taught, place: str, frame: object, *, by_unit: bool = False) -> Grown | None:
    """Take the moments of a part whose design is known, or return None if no row is used.

    Parameters
    ----------
    taught : Taught
    place : str
    frame : pandas.DataFrame
    by_unit : bool
        Whether rows are measured from the first of their unit in any case.
    """
    units, growth = Distinct(taught.recipe.keys[0], whole=True), _Growth(by_unit=by_unit)
    for rows in read_rows(taught, place, frame):
        codes = units.enter(rows.key, rows.place)
        growth.add(codes, rows.z)
        if rows.period is not None:
            growth.note_periods(codes, rows.period)
    grown = growth.finish(units.plain(units.series()))
    if grown is not None and grown.unfit:
        return grow_part(taught, place, frame, by_unit=True)
    return grown
