"""Many panels with units left out, or repeated, as arrays whose last axis is the panel: sums and solutions.

Products are kept packed, ``(h, m)`` for m panels, and solved as ``(s, s, m)``: each step of an elimination is then one
operation on all panels, which for matrices this small is several times faster than a library call for each.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from mixbridge.resample.deletion_axes import UnitAxes, pack

__all__ = [
    "Batch",
    "Solved",
    "deletions",
    "eliminate",
    "full",
    "quadratic",
    "solved",
    "trace",
    "trace_of_four",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, eq=False)
class Batch:
    """m panels along the same axes.

    Attributes
    ----------
    axes : UnitAxes
    within : ndarray of shape (h, m)
        Packed W.
    between : ndarray of shape (G, h) or (G, h, m)
        Packed B_T: common to all panels before their own unit is taken off, or of each panel.
    counts : ndarray of shape (G, 1) or (G, m)
        Units of each size; common to all before their own unit is taken off, or of each panel.
    own : ndarray of shape (h, m) or None
        Packed ``zbar zbar'`` of the unit that each panel lacks.
    own_class : ndarray of int, shape (m,)
        Size class of that unit; empty without one.
    """

    axes: UnitAxes
    within: FloatArray
    between: FloatArray
    counts: FloatArray
    own: FloatArray | None
    own_class: IntArray

    @property
    def size(self) -> int:
        """Number of panels m."""
        return int(self.within.shape[1])

    def sums(self, weights: FloatArray) -> FloatArray:
        """Return ``sum_T weights_T B_T``, packed.

        Parameters
        ----------
        weights : ndarray of shape (G,) or (G, m)
            Common, or of each panel.

        Returns
        -------
        ndarray of shape (h, m)
        """
        if self.between.ndim == 2:
            total = self.between.T @ weights
            total = total[:, None] if total.ndim == 1 else total
        else:
            pattern = "ghm,g->hm" if weights.ndim == 1 else "ghm,gm->hm"
            total = np.einsum(pattern, self.between, weights)
        if self.own is None:
            return np.broadcast_to(total, self.within.shape)
        return np.asarray(total - self.own * self._of_own(weights))

    def tally(self, values: FloatArray) -> FloatArray:
        """Return ``sum_T m_T values_T`` of each panel.

        Parameters
        ----------
        values : ndarray of shape (G,) or (G, m)

        Returns
        -------
        ndarray of shape (m,)
        """
        table = values[:, None] if values.ndim == 1 else values
        total = (self.counts * table).sum(axis=0)
        if self.own is not None:
            total = total - self._of_own(values)
        return np.array(np.broadcast_to(total, (self.size,)))

    @property
    def rows(self) -> FloatArray:
        """Rows n of each panel."""
        return self.tally(self.axes.curve.sizes)

    @property
    def units(self) -> FloatArray:
        """Units N of each panel."""
        return self.tally(np.ones_like(self.axes.curve.sizes))

    def take(self, at: IntArray | BoolArray) -> Batch:
        """Return some of the panels."""
        return Batch(
            axes=self.axes,
            within=self.within[:, at],
            between=self.between if self.between.ndim == 2 else self.between[:, :, at],
            counts=self.counts if self.counts.shape[1] == 1 else self.counts[:, at],
            own=None if self.own is None else self.own[:, at],
            own_class=self.own_class if self.own is None else self.own_class[at],
        )

    def _of_own(self, weights: FloatArray) -> FloatArray:
        if weights.ndim == 1:
            return weights[self.own_class]
        return np.asarray(weights[self.own_class, np.arange(self.size)])


def deletions(axes: UnitAxes, at: IntArray | slice) -> tuple[Batch, FloatArray]:
    """Return the panel without each of some units in turn.

    Parameters
    ----------
    axes : UnitAxes
    at : ndarray of int or slice
        Units.

    Returns
    -------
    batch : Batch
    own_within : ndarray of shape (h, m)
        Packed within products of the units.
    """
    means, own_within = axes.unit_means(at), axes.unit_within(at)
    rows, columns, _ = pack(axes.order)
    batch = Batch(
        axes=axes,
        within=axes.within[:, None] - own_within,
        between=axes.between,
        counts=axes.curve.counts[:, None],
        own=means[rows] * means[columns],
        own_class=axes.classes[at],
    )
    return batch, own_within


@dataclass(frozen=True, eq=False)
class Solved:
    """Least squares of the outcome on s axes, for m panels; NaN where a pivot is not positive.

    Attributes
    ----------
    pivots : ndarray of shape (s, m)
        D of ``A = L D L'``.
    lower : ndarray of shape (s + 1, s + 1, m)
        L below its diagonal, the outcome being the last row.
    residual : ndarray of shape (m,)
        Residual sum of squares.
    """

    pivots: FloatArray
    lower: FloatArray
    residual: FloatArray

    @cached_property
    def slope(self) -> FloatArray:
        """Coefficients, shape (s, m): what solves ``L'b = l``, l the row of the outcome."""
        s = len(self.pivots)
        slope = self.lower[s, :s].copy()
        for k in range(s - 1, 0, -1):
            slope[:k] -= self.lower[k, :k] * slope[k]
        return slope

    @cached_property
    def inverse(self) -> FloatArray:
        """Inverse products of the axes, shape (s, s, m)."""
        s, m = self.pivots.shape
        rows, result = np.zeros((s, s, m)), np.zeros((s, s, m))
        for k in range(s):  # row k of the inverse of L
            rows[k, k] = 1.0
            for j in range(k):
                rows[k, : j + 1] -= self.lower[k, j] * rows[j, : j + 1]
            row = rows[k, : k + 1]
            result[: k + 1, : k + 1] += row[:, None] * (row / self.pivots[k])[None]
        return result

    @property
    def log_det(self) -> FloatArray:
        """Log-determinant of the products of the axes."""
        return np.asarray(np.log(self.pivots).sum(axis=0))


def solved(packed: FloatArray, order: int, at: IntArray) -> Solved:
    """Solve least squares on the axes `at`; the outcome is the last coordinate.

    Parameters
    ----------
    packed : ndarray of shape (h, m)
    order : int
        Number of coordinates.
    at : ndarray of int, shape (s,)

    Returns
    -------
    Solved
    """
    a = full(packed, order, np.append(at, order - 1))
    pivots = eliminate(a, at.size)
    return Solved(pivots, a, a[at.size, at.size])


def eliminate(a: FloatArray, count: int) -> FloatArray:
    """Eliminate the first axes of symmetric matrices, in place and without pivoting.

    Below the diagonal of these axes then is L of ``L D L'``; what is left of the other coordinates is behind them.

    Parameters
    ----------
    a : ndarray of shape (s, s, m)
    count : int
        Axes to eliminate.

    Returns
    -------
    ndarray of shape (count, m)
        D, NaN where it is not positive.
    """
    s, _, m = a.shape
    pivots, work = np.empty((count, m)), np.empty(s * s * m)
    for k in range(count):
        pivots[k] = np.where(a[k, k] > 0.0, a[k, k], np.nan)
        column, rest = a[k, k + 1 :], s - k - 1
        a[k + 1 :, k] = column / pivots[k]
        product = work[: rest * rest * m].reshape(rest, rest, m)
        np.multiply(a[k + 1 :, k, None], column[None], out=product)
        a[k + 1 :, k + 1 :] -= product
    return pivots


def quadratic(matrices: FloatArray, vectors: FloatArray) -> FloatArray:
    """Return ``v'Mv`` of each panel: matrices of shape (s, s, m), vectors of shape (s, m)."""
    return np.asarray(((matrices * vectors[None]).sum(axis=1) * vectors).sum(axis=0))


def trace(left: FloatArray, right: FloatArray) -> FloatArray:
    """Return ``tr(LR)`` of symmetric matrices of shape (s, s, m)."""
    return np.asarray((left * right).sum(axis=(0, 1)))


def trace_of_four(a: FloatArray, b: FloatArray, c: FloatArray) -> FloatArray:
    """Return ``tr(ABAC)`` of symmetric matrices of shape (s, s, m)."""
    first = np.einsum("ijm,jkm->ikm", a, b)
    second = first if c is b else np.einsum("ijm,jkm->ikm", a, c)
    return np.asarray((first * second.transpose(1, 0, 2)).sum(axis=(0, 1)))


def full(packed: FloatArray, order: int, at: IntArray) -> FloatArray:
    """Return some rows and columns of packed matrices, shape (s, s, m)."""
    return np.take(packed, pack(order)[2][np.ix_(at, at)], axis=0)
