"""The stateful transform ``standardize``, fast on a million rows."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import patsy

__all__ = ["standardize"]


class _Standardize:
    """Subtract the mean and divide by the standard deviation of all rows used.

    Takes the arguments and gives the numbers (to rounding) of patsy's own transform, which walks over the
    rows one
    by one. Chunks are merged by the update of Chan, Golub & LeVeque (1983).
    """

    def __init__(self) -> None:
        self._count = 0
        self._mean: npt.NDArray[np.float64] | None = None
        self._squares: npt.NDArray[np.float64] | None = None

    def memorize_chunk(self, x: Any, center: bool = True, rescale: bool = True, ddof: int = 0) -> None:
        """Take a chunk of rows into count, mean and sum of squares."""
        values = np.asarray(x, dtype=np.float64)
        count, mean = len(values), values.mean(axis=0)
        self._merge(count, mean, ((values - mean) ** 2).sum(axis=0))

    def _merge(self, count: int, mean: Any, squares: Any) -> None:
        """Take in the count, mean and sum of squares of further rows."""
        if self._mean is None or self._squares is None:
            self._count, self._mean, self._squares = count, mean, squares
            return
        total, gap = self._count + count, mean - self._mean
        self._squares = self._squares + squares + gap**2 * (self._count * count / total)
        self._mean = self._mean + gap * (count / total)
        self._count = total

    def memorize_finish(self) -> None:
        """Do nothing: the sums are complete after the last chunk."""

    def transform(
        self, x: Any, center: bool = True, rescale: bool = True, ddof: int = 0
    ) -> npt.NDArray[np.float64]:
        """Return standardized values; a column without spread gives values that are not numbers."""
        assert self._mean is not None, "transform comes after memorize_chunk"
        assert self._squares is not None, "transform comes after memorize_chunk"
        values = np.array(x, dtype=np.float64)
        if center:
            values -= self._mean
        if rescale:
            values /= np.sqrt(self._squares / (self._count - ddof))
        return values


standardize = patsy.stateful_transform(_Standardize)
