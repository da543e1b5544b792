"""What several routes share on a batch of panels: solutions at the ends of the curve, and forms in unit remainders."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from mixbridge.resample.deletion_batch import Batch, Solved, eliminate, full, quadratic, solved, trace

__all__ = ["Sums"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Sums:
    """Lazily computed sums of one batch; weights are those of unit means, ``sum_T weight_T B_T``.

    Attributes
    ----------
    batch : Batch
    """

    batch: Batch

    @property
    def order(self) -> int:
        """Number of coordinates."""
        return self.batch.axes.order

    @property
    def every(self) -> IntArray:
        """All axes."""
        return np.arange(self.batch.axes.curve.rank)

    @cached_property
    def rows(self) -> FloatArray:
        """Rows n."""
        return self.batch.rows

    @cached_property
    def units(self) -> FloatArray:
        """Units N."""
        return self.batch.units

    @cached_property
    def residual_df(self) -> FloatArray:
        """``n - K``, at least one: panels with fewer rows are fitted on their own."""
        return np.maximum(self.rows - self.batch.axes.curve.rank, 1.0)

    @property
    def sizes(self) -> FloatArray:
        """Distinct unit sizes."""
        return self.batch.axes.curve.sizes

    @cached_property
    def by_size(self) -> FloatArray:
        """``sum T B_T``."""
        return self.batch.sums(self.sizes)

    @cached_property
    def by_square(self) -> FloatArray:
        """``sum T^2 B_T = X'ZZ'X``."""
        return self.batch.sums(self.sizes**2)

    @cached_property
    def once(self) -> FloatArray:
        """``sum B_T``."""
        return self.batch.sums(np.ones_like(self.sizes))

    @cached_property
    def by_inverse(self) -> FloatArray:
        """``sum B_T / T``."""
        return self.batch.sums(1.0 / self.sizes)

    @cached_property
    def within(self) -> Solved:
        """The within regression, on the axes that vary within units."""
        return solved(self.batch.within, self.order, self.batch.axes.inner)

    @cached_property
    def pooled(self) -> Solved:
        """Ordinary least squares."""
        return solved(self.batch.within + self.by_size, self.order, self.every)

    def between(self, weighted: bool) -> Solved:
        """Return the regression of unit means, weighted by size or each counted once."""
        return self._between_weighted if weighted else self._between_once

    @cached_property
    def _between_weighted(self) -> Solved:
        return solved(self.by_size, self.order, self.batch.axes.outer)

    @cached_property
    def _between_once(self) -> Solved:
        return solved(self.once, self.order, self.batch.axes.outer)

    def remainders(self, weighted: bool) -> FloatArray:
        """Return the sum of squares of unit remainders about their regression on the unit-constant axes."""
        return self._remainders_weighted[0] if weighted else self._remainders_once[0]

    @cached_property
    def _remainders_weighted(self) -> tuple[FloatArray, FloatArray]:
        return self._remainders(self.by_size)

    @cached_property
    def _remainders_once(self) -> tuple[FloatArray, FloatArray]:
        return self._remainders(self.once)

    def _remainders(self, packed: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return the form, and what is left of the products of unit means after the constants."""
        constants = self.batch.axes.constants
        a = full(packed, self.order, np.arange(self.order))
        eliminate(a, constants)
        left = a[constants:, constants:]
        residual = np.concatenate([-self.within.slope, np.ones((1, self.batch.size))])
        return quadratic(left, residual), left

    def remainder_expectations(self) -> tuple[FloatArray, FloatArray]:
        """Return the exact coefficients of the two variances in the expectation of the size-weighted form.

        ``N - K_c + tr(W_vv^+ C_vv)``, C what is left of ``sum T B_T`` after the constants, and
        ``n - tr(B_cc^-1 (X'ZZ'X)_cc)``.
        """
        left, constants = self._remainders_weighted[1], self.batch.axes.constants
        at = np.arange(constants)
        inverse, square = solved(self.by_size, self.order, at).inverse, full(self.by_square, self.order, at)
        count = self.units - constants + trace(self.within.inverse, left[:-1, :-1])
        return count, self.rows - trace(inverse, square)

    def thin(self) -> BoolArray:
        """Tell which panels have lost a direction within or between: less than a hundredth of one is left."""
        lost = np.zeros(self.batch.size, dtype=bool)
        axes = self.batch.axes
        for packed, reference, at in (
            (self.batch.within, axes.within, axes.inner),
            (self.by_size, self.sizes @ axes.between, axes.outer),
            (self.once, axes.between.sum(axis=0), axes.outer),
        ):
            scale = np.diagonal(full(reference[:, None], self.order, at)[:, :, 0])
            a = full(packed, self.order, at)
            a /= np.sqrt(scale[:, None, None] * scale[None, :, None])
            if at.size:
                smallest = np.linalg.eigvalsh(a.transpose(2, 0, 1))[:, 0]
                lost |= ~(smallest > THIN)
        return lost


THIN = 0.01
"""Smallest eigenvalue, of all units' being about one, from which subtraction keeps its digits: two are lost at most."""
