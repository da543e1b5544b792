"""The rows of a panel in order of units and periods, and sums over units and over neighbouring periods."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.panel import Panel

__all__ = ["Groups", "Links", "Rows", "groups_of", "links_of", "rows_of"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class Groups:
    """Rows sorted by unit: where each unit starts and how many rows it has.

    Attributes
    ----------
    starts, sizes : ndarray of int, shape (m,)
        Of every unit that has a row.
    """

    starts: IntArray
    sizes: IntArray

    @property
    def units(self) -> int:
        """Number of units."""
        return len(self.sizes)

    @property
    def rows(self) -> int:
        """Number of rows."""
        return int(self.sizes.sum())

    def sum(self, values: FloatArray) -> FloatArray:
        """Add up rows by unit."""
        return np.asarray(np.add.reduceat(values, self.starts, axis=0))

    def mean(self, values: FloatArray) -> FloatArray:
        """Average rows by unit."""
        total = self.sum(values)
        return np.asarray((total.T / self.sizes).T)

    def spread(self, by_unit: FloatArray) -> FloatArray:
        """Repeat a value per unit over its rows."""
        return np.asarray(np.repeat(by_unit, self.sizes, axis=0))

    def demean(self, values: FloatArray) -> FloatArray:
        """Take unit means away."""
        return np.asarray(values - self.spread(self.mean(values)))


def groups_of(codes: IntArray) -> Groups:
    """Find the units in sorted codes."""
    starts = np.flatnonzero(np.diff(codes, prepend=codes[0] - 1))
    return Groups(starts, np.diff(starts, append=codes.size))


@dataclass(frozen=True, slots=True, eq=False)
class Rows:
    """Rows sorted by unit and, where periods have an order, by period within unit.

    Attributes
    ----------
    x : ndarray of shape (n, p)
        Design columns; with a constant in the design, the others are measured from their grand mean.
    y : ndarray of shape (n,)
        Outcome, measured from its grand mean where there is a constant.
    codes : ndarray of int, shape (n,)
        Unit of each row.
    ordinals : ndarray of int or None
        Period of each row on an equally spaced scale.
    order : ndarray of int
        Position of each row in the panel.
    groups : Groups
    """

    x: FloatArray
    y: FloatArray
    codes: IntArray
    ordinals: NDArray[np.int64] | None
    order: IntArray
    groups: Groups


def rows_of(panel: Panel, constant: int | None) -> Rows:
    """Read the rows of a panel once and sort them.

    Parameters
    ----------
    panel : Panel
    constant : int or None
        Place of the column of ones.

    Returns
    -------
    Rows
    """
    x, y = panel.matrix()
    codes, ordinals = panel.codes, panel.period_ordinals
    order = np.argsort(codes, kind="stable") if ordinals is None else np.lexsort((ordinals, codes))
    x, y = x[order], y[order]
    if constant is not None:
        level = x.mean(axis=0)
        level[constant] = 0.0
        x -= level
        y = y - y.mean()
    sorted_codes = codes[order]
    return Rows(
        x, y, sorted_codes, None if ordinals is None else ordinals[order], order, groups_of(sorted_codes)
    )


@dataclass(frozen=True, slots=True, eq=False)
class Links:
    """Pairs of neighbouring rows of a unit that are one period step apart.

    Attributes
    ----------
    after : ndarray of bool, shape (n,)
        Whether the next row is the same unit one step later.
    step : int
        Ordinal distance of one step: the smallest one seen.
    gaps : int
        Neighbouring rows of a unit further apart, never linked.
    """

    after: NDArray[np.bool_]
    step: int
    gaps: int

    @property
    def count(self) -> int:
        """Number of links."""
        return int(self.after.sum())

    @property
    def before(self) -> NDArray[np.bool_]:
        """Whether the row before is the same unit one step earlier."""
        return np.concatenate([[False], self.after[:-1]])

    @property
    def degree(self) -> FloatArray:
        """Number of links of each row: 0, 1 or 2."""
        return self.after.astype(float) + self.before

    def neighbours(self, values: FloatArray) -> FloatArray:
        """Return ``A values``: for each row the sum over the rows it is linked to."""
        here = self.after if values.ndim == 1 else self.after[:, None]
        out = np.zeros_like(values)
        out[:-1] += np.where(here[:-1], values[1:], 0.0)
        out[1:] += np.where(here[:-1], values[:-1], 0.0)
        return out


def links_of(rows: Rows) -> Links | None:
    """Link rows one step apart; None without an order of periods or without two rows in any unit."""
    if rows.ordinals is None:
        return None
    same = rows.codes[1:] == rows.codes[:-1]
    jumps = np.diff(rows.ordinals)
    if not same.any():
        return None
    step = int(jumps[same].min())
    linked = same & (jumps == step)
    return Links(np.append(linked, False), step, int(same.sum() - linked.sum()))
