"""Closed moments of rows sorted by unit: a unit is done with when the next one begins.

Nothing is kept per unit but the one that is open. The means of units that are complete wait until there are some tens
of thousands; then those of one size T go into their class, which keeps their number m, their mean c and a triangular
factor F of the products of their deviations from it. Two sets of units of a size merge as (Chan, Golub & LeVeque 1983)

    c = c_1 + m_2/m (c_2 - c_1),    F'F = F_1'F_1 + F_2'F_2 + m_1 m_2/m (c_2 - c_1)(c_2 - c_1)',

by QR of the stacked factors, so that neither an offset nor collinear means cost digits. At the end, with s the grand
mean over rows, the factor of sum (1, zbar - s)'(1, zbar - s) is ``sqrt(m) (1, c - s)`` above F.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import DataError
from mixbridge.moments.closed import LOSS_LIMIT, Moments
from mixbridge.moments.factors import eigen_factor, factor_from_products, factor_from_rows, stack_factors
from mixbridge.moments.growing import BLOCK_ROWS, entries_of
from mixbridge.moments.opened import _loss, _products, _refuse_non_finite, add_by_unit
from mixbridge.panel.streaming_rows import CELLS
from mixbridge.sources.checkpoint import State

__all__ = ["SizeClass", "SortedClasses", "SortedFactor"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
WAITING = 2**16
"""Units whose means wait to go into their classes together; fewer where there are many columns."""


class SizeClass:
    """Units of one size.

    Parameters
    ----------
    count : int
        Number of units m.
    mean : ndarray of shape (k,)
        Mean c of their means.
    factor : ndarray of shape (k, k)
        F with ``F'F`` the products of deviations of their means from c.
    """

    __slots__ = ("count", "factor", "mean")

    def __init__(self, count: int, mean: FloatArray, factor: FloatArray) -> None:
        self.count, self.mean, self.factor = count, mean, factor

    @classmethod
    def of(cls, means: FloatArray) -> SizeClass:
        """Take the class of some units; from products where these carry the digits, as `close` does."""
        m, k = means.shape
        off = means - means[0]  # what is the same in all of them is exactly zero
        step = off.mean(axis=0)
        off -= step
        factor = factor_from_products(off.T @ off) if m > 8 * (k + 1) else None
        return cls(m, means[0] + step, factor_from_rows(off) if factor is None else factor)

    def merge(self, other: SizeClass) -> None:
        """Take in further units."""
        count = self.count + other.count
        gap = other.mean - self.mean
        extra = np.sqrt(self.count * (other.count / count)) * gap
        self.factor = stack_factors(self.factor, other.factor, extra[None])
        self.mean = self.mean + gap * (other.count / count)
        self.count = count


class SortedClasses:
    """Takes rows whose units come one after the other.

    Parameters
    ----------
    width : int
        Length of z = (design columns without the constant, outcome, 1).
    """

    def __init__(self, width: int) -> None:
        self.width = width
        self.total = np.zeros((width, width))
        self.taken = np.zeros((width - 1, width - 1))
        self.classes: dict[int, SizeClass] = {}
        self.units = 0
        self.open: tuple[int, FloatArray, FloatArray] | None = None
        self.origin = np.empty(0)
        self.level = np.ones(width - 1, dtype=bool)
        self._first = np.empty(0)
        self._waiting: list[tuple[NDArray[np.int64], FloatArray]] = []
        self._number = 0

    def add(self, codes: IntArray, z: FloatArray) -> None:
        """Take in rows.

        Parameters
        ----------
        codes : ndarray of int, shape (b,)
            Number of the unit, never falling, without gaps.
        z : ndarray of shape (b, width)
        """
        for start in range(0, codes.size, BLOCK_ROWS):
            self._add(codes[start : start + BLOCK_ROWS], z[start : start + BLOCK_ROWS])

    def _add(self, codes: IntArray, z: FloatArray) -> None:
        lines, anchors, sums = lines_of(self.open, codes, z)
        if not self.origin.size:
            self.origin = anchors[0, :-1].copy()
        d = z - np.take(anchors, lines, axis=0)
        self.total += _products(d, d)
        add_by_unit(sums, lines, d)
        self.open = int(codes[-1]), anchors[-1], sums[-1]
        self._complete(anchors[:-1], sums[:-1])

    def _complete(self, anchors: FloatArray, sums: FloatArray) -> None:
        """Take in units all of whose rows were seen."""
        if not len(sums):
            return
        counts = np.rint(sums[:, -1]).astype(np.int64)
        dbar = sums[:, :-1] / sums[:, -1:]
        self.taken += sums[:, :-1].T @ dbar
        means = (anchors[:, :-1] - self.origin) + dbar
        if not self._first.size:
            self._first = means[0]
        self.level &= (means == self._first).all(axis=0)
        self.units += len(means)
        self._waiting.append((counts, means))
        self._number += len(means)
        if self._number >= min(WAITING, CELLS // self.width):
            self._settle()

    def _settle(self) -> None:
        """Let the means that wait go into their classes."""
        if not self._waiting:
            return
        counts = np.concatenate([part[0] for part in self._waiting])
        means = np.concatenate([part[1] for part in self._waiting])
        self._waiting, self._number = [], 0
        order = np.argsort(counts, kind="stable")
        ordered = counts[order]
        starts = np.flatnonzero(np.diff(ordered, prepend=0))
        for start, units in zip(starts, np.split(order, starts[1:]), strict=True):
            found = SizeClass.of(means[units])
            known = self.classes.setdefault(int(ordered[start]), found)
            if known is not found:
                known.merge(found)

    def state(self) -> State:
        """Return what was taken, to be saved."""
        none = np.empty(0)
        number, anchor, sums = self.open or (-1, none, none)
        sizes = sorted(self.classes)
        k = self.width - 1
        return {
            "total": self.total,
            "taken": self.taken,
            "units": self.units,
            "origin": self.origin,
            "first": self._first,
            "level": self.level,
            "open": number,
            "anchor": anchor,
            "sums": sums,
            "sizes": np.array(sizes, dtype=np.int64),
            "counts": np.array([self.classes[size].count for size in sizes], dtype=np.int64),
            "means": np.array([self.classes[size].mean for size in sizes]).reshape(-1, k),
            "factors": np.array([self.classes[size].factor for size in sizes]).reshape(-1, k, k),
            "waiting_counts": np.concatenate([np.empty(0, np.int64), *(part[0] for part in self._waiting)]),
            "waiting_means": np.concatenate([np.empty((0, k)), *(part[1] for part in self._waiting)]),
        }

    def restore(self, state: State) -> None:
        """Go on from a state."""
        self.total, self.taken, self.units = state["total"], state["taken"], state["units"]
        self.origin, self._first, self.level = state["origin"], state["first"], state["level"]
        self.open = None if state["open"] < 0 else (state["open"], state["anchor"], state["sums"])
        rest = zip(state["counts"].tolist(), state["means"], state["factors"], strict=True)
        self.classes = {
            size: SizeClass(*each) for size, each in zip(state["sizes"].tolist(), rest, strict=True)
        }
        self._waiting = [(state["waiting_counts"], state["waiting_means"])]
        self._number = len(state["waiting_counts"])

    def close_last(self) -> None:
        """Take in the unit that is open: there are no more rows."""
        if self.open is None:
            raise DataError("there are no rows to take moments of.")
        _, anchor, sums = self.open
        self._complete(anchor[None], sums[None])
        self.open = None
        self._settle()

    @property
    def within(self) -> FloatArray:
        """W of the entries of z but the last, once the last unit is closed."""
        within = self.total[:-1, :-1] - self.taken
        return np.asarray((within + within.T) / 2.0)

    @property
    def needs_rows(self) -> bool:
        """Whether W lost digits, so that its factor is to be taken from the rows in another pass."""
        within = self.within
        spread = np.diag(self.total)[:-1]
        if not np.isfinite(spread).all():
            return False  # refused when the moments are closed
        return bool(_loss(spread, np.diag(within)).max() > LOSS_LIMIT) or factor_from_products(within) is None

    def finish(
        self, columns: tuple[str, ...], constant: int | None, factor: FloatArray | None = None
    ) -> Moments:
        """Return the closed moments.

        Parameters
        ----------
        columns : tuple of str
            Design columns, an explicit constant included, then the outcome.
        constant : int or None
            Place of that constant.
        factor : ndarray of shape (k, k), optional
            Factor of W from the rows.
        """
        names = [columns[j] for j in entries_of(columns, constant)]
        _refuse_non_finite(np.diag(np.diag(self.total)[:-1]), tuple(names))
        if self.level[-1] and self.total[-2, -2] == 0.0:
            raise DataError(
                f"the outcome {names[-1]!r} has the same value in every row: nothing can be fitted."
            )
        within = self.within
        keep = np.arange(len(names))
        if constant is None:  # a column of ones is the constant, whatever it is called
            ones = np.flatnonzero(
                self.level[:-1] & (np.diag(self.total)[:-2] == 0.0) & (self.origin + self._first == 1.0)[:-1]
            )
            keep = np.delete(keep, ones[:1])
            constant = columns.index(names[ones[0]]) if ones.size else None
        sizes = np.array(sorted(self.classes), dtype=np.int64)
        found = [self.classes[size] for size in sizes.tolist()]
        counts = np.array([each.count for each in found], dtype=np.int64)
        centres = np.array([each.mean for each in found])
        factors = np.array([each.factor for each in found])
        rows = float((sizes * counts).sum())
        move = (sizes * counts).astype(float) @ centres / rows
        centres -= move
        squares = counts[:, None] * centres**2 + (factors**2).sum(axis=1)
        spread = np.sqrt((np.diag(within) + sizes @ squares)[keep] / rows)
        scale = np.exp2(np.round(np.log2(np.where(spread > 0.0, spread, 1.0))))
        note = "within products by QR of unit-centred rows"
        if factor is None:
            factor = factor_from_products(within)
            note = "within products of rows measured from their unit's first"
        if factor is None:
            factor = eigen_factor(within)
            note = "ill-conditioned within products without a second pass over the rows"
        between = np.zeros((len(sizes), keep.size + 1, keep.size + 1))
        between[:, 0, 0] = np.sqrt(counts)
        between[:, 0, 1:] = np.sqrt(counts)[:, None] * centres[:, keep] / scale
        if keep.size == len(names):
            between[:, 1:, 1:] = factors / scale
        else:
            for at, each in enumerate(factors):
                between[at, 1:, 1:] = factor_from_rows(each[:, keep] / scale)
        shift = (self.origin + move)[keep]
        moments = Moments(
            design=columns[:-1],
            constant=None if constant is None else columns[constant],
            outcome=columns[-1],
            shift=shift,
            scale=scale,
            magnitude=np.hypot(spread, shift),
            sizes=sizes,
            counts=counts,
            within=factor[:, keep] / scale,
            between=between,
            note=note,
        )
        for name in moments.__slots__:
            value = getattr(moments, name)
            if isinstance(value, np.ndarray):
                value.setflags(write=False)
        return moments


class SortedFactor:
    """The factor of W from rows whose units come one after the other.

    A part of a unit in one block is measured from its own mean; two parts with T_1 and T_2 rows add the row
    ``sqrt(T_1 T_2 / (T_1 + T_2)) (mean_2 - mean_1)``.

    Parameters
    ----------
    width : int
        Length of z.
    """

    def __init__(self, width: int) -> None:
        self.factor = np.zeros((width - 1, width - 1))
        self._open: tuple[int, float, FloatArray, FloatArray] | None = None

    def add(self, codes: IntArray, z: FloatArray) -> None:
        """Take in rows, as `SortedClasses.add`."""
        for start in range(0, codes.size, BLOCK_ROWS):
            self._add(codes[start : start + BLOCK_ROWS], z[start : start + BLOCK_ROWS])

    def _add(self, codes: IntArray, z: FloatArray) -> None:
        lines, anchors, sums = lines_of(None, codes, z)
        d = z - np.take(anchors, lines, axis=0)
        add_by_unit(sums, lines, d)
        count, dbar = sums[:, -1], sums[:, :-1] / sums[:, -1:]
        rows = d[:, :-1] - np.take(dbar, lines, axis=0)
        parts = [self.factor, rows]
        first = count[0], anchors[0, :-1], dbar[0]
        if self._open is not None and self._open[0] == codes[0]:
            _, before, anchor, offset = self._open
            both = before + first[0]
            gap = (first[1] - anchor) + (first[2] - offset)
            parts.append((np.sqrt(before * (first[0] / both)) * gap)[None])
            first = both, anchor, offset + gap * (first[0] / both)
        last = first if len(count) == 1 else (count[-1], anchors[-1, :-1], dbar[-1])
        self._open = int(codes[-1]), float(last[0]), last[1].copy(), last[2].copy()
        self.factor = stack_factors(*parts)


def lines_of(
    before: tuple[int, FloatArray, FloatArray] | None, codes: IntArray, z: FloatArray
) -> tuple[IntArray, FloatArray, FloatArray]:
    """Return the line of each row, and per line what its unit is measured from and the sums so far.

    Parameters
    ----------
    before : tuple of int, ndarray, ndarray, or None
        The unit that is open, which has the first line; None if there is none.
    codes : ndarray of int
    z : ndarray
    """
    width = z.shape[1]
    least = int(codes[0]) if before is None else before[0]
    begins = np.flatnonzero(np.diff(codes, prepend=least - 1 if before is None else least))
    anchors = np.take(z, begins, axis=0)
    anchors[:, -1] = 0.0
    sums = np.zeros((begins.size + (before is not None), width))
    if before is not None:
        anchors = np.concatenate([before[1][None], anchors])
        sums[0] = before[2]
    return codes - least, anchors, sums
