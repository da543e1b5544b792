"""Null laws of unit-wise statistics of within residuals, drawn under equal variances and normality.

A draw gives every unit of size T the deviations of T normal numbers from their mean. Coefficients are not estimated
in the draws: their part in n - N degrees of freedom is small, and the statistics are of single units. The law is drawn
with at most `UNITS` units of the same mix of sizes; with more units than that, its mean and standard deviation, the
latter times ``sqrt(UNITS/N)``, give a normal reference.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

__all__ = ["DRAWS", "Law", "simulate"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
DRAWS = 999
UNITS = 1_000
NUMBERS = 6_000_000
"""Largest count of normal numbers of one law; more draws would need more time than the audit."""


@dataclass(frozen=True, slots=True, eq=False)
class Law:
    """Drawn values of a statistic.

    Attributes
    ----------
    values : ndarray
        Sorted.
    share : float
        Units drawn over units of the panel; below one the reference is normal.
    """

    values: FloatArray
    share: float

    @property
    def reference(self) -> str:
        """The reference in words."""
        drawn = f"{self.values.size} draws under equal variances and normality"
        return drawn if self.share >= 1.0 else f"normal with moments from {drawn} of a part of the units"

    def upper(self, value: float) -> float:
        """Return the upper-tail p-value."""
        if self.share >= 1.0:
            above = self.values.size - np.searchsorted(self.values, value, side="left")
            return float((1 + above) / (1 + self.values.size))
        spread = float(self.values.std(ddof=1)) * np.sqrt(self.share)
        return float(stats.norm.sf((value - float(self.values.mean())) / spread))


def simulate(
    sizes: IntArray, statistic: Callable[[list[FloatArray]], FloatArray], seed: int, draws: int = DRAWS
) -> Law:
    """Draw the law of a statistic.

    Parameters
    ----------
    sizes : ndarray of int, shape (N,)
        Rows per unit.
    statistic : callable
        Takes, per distinct size, an array of shape (draws, units, T) of deviations; returns one value per draw.
    seed : int
    draws : int

    Returns
    -------
    Law
    """
    rng = np.random.default_rng(seed)
    chosen = np.sort(sizes)
    limit = int(min(UNITS, max(NUMBERS / draws / chosen.mean(), 50.0)))
    share = 1.0
    if chosen.size > limit:
        share = limit / chosen.size
        chosen = chosen[((np.arange(limit) + 0.5) / limit * chosen.size).astype(np.intp)]
    distinct, counts = np.unique(chosen, return_counts=True)
    at_once = max(1, int(1_000_000 / chosen.sum()))
    found = []
    for start in range(0, draws, at_once):
        some = min(at_once, draws - start)
        parts = []
        for size, count in zip(distinct, counts, strict=True):
            normal = rng.normal(size=(some, count, size))
            parts.append(normal - normal.mean(axis=2, keepdims=True))
        found.append(statistic(parts))
    return Law(np.sort(np.concatenate(found)), share)
