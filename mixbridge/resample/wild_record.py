"""The record of a wild cluster bootstrap: statistics, p-values, and intervals by inverting the test."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from mixbridge.display import Printed
from mixbridge.display.text import interval, number, sentence, wrapped
from mixbridge.errors import IdentificationError, OptionError
from mixbridge.resample.simulated import BEYOND, check_confidence, quantiles

__all__ = ["Parts", "WildBootstrap"]

FloatArray = NDArray[np.float64]

TIE = 1e-9
"""Relative difference below which two statistics are equal: the identity is among the listed weights, and signs
exchanged give the same size."""
NOTHING = 1e-12
"""Variance, as a share of the squares it is made of, that is rounding."""
CARRIED = 1e-20
"""Variance, as a share of the sum of squared residuals, that is rounding: a unit that carries the direction alone."""
WIDEST = 1e6
"""Distance, in standard errors, beyond which an interval counts as unbounded."""


@dataclass(frozen=True, slots=True, eq=False)
class Parts:
    """Sums over units of one replicate each, from which its statistic follows for any value of the hypothesis.

    Attributes
    ----------
    score, pull : ndarray of shape (R, r)
        ``sum v_i s_i``, ``sum v_i g_i``.
    score_pull, pull_pull : ndarray of shape (R, r)
        ``sum v_i (s_i'u) g_i``, ``sum v_i (g_i'u) g_i``.
    squares : ndarray of shape (R, 3)
        Sums of ``v_i^2`` times ``(s_i'u)^2``, ``(s_i'u)(g_i'u)``, ``(g_i'u)^2``.
    """

    score: FloatArray
    pull: FloatArray
    score_pull: FloatArray
    pull_pull: FloatArray
    squares: FloatArray

    @classmethod
    def join(cls, parts: Sequence[Parts]) -> Parts:
        """Return the replicates of several, one after the other."""
        return cls(*(np.concatenate([getattr(part, field.name) for part in parts]) for field in fields(cls)))


@dataclass(frozen=True, slots=True, eq=False)
class WildBootstrap(Printed):
    """A hypothesis on one combination of coefficients and its bootstrap law.

    Attributes
    ----------
    hypothesis : str
        The combination.
    estimate, value : float
        Estimate of the combination, and its value under the hypothesis.
    length, factor, direction, gram : float, float, ndarray, ndarray
        Length of the combination in the coordinates of the regression, multiplier of CR1, direction of the
        combination, ``sum g_i g_i'``.
    energy : float
        Residual sum of squares of the regression.
    observed, drawn : Parts
        With all weights one; of the replicates.
    weights : str
    listed : bool
        Whether all weights were gone through.
    restricted : bool
    units : int
    psi : float
        Variance ratio; infinite for within, NaN for between.
    notes : tuple of str
    """

    hypothesis: str
    estimate: float
    value: float
    length: float
    factor: float
    direction: FloatArray
    gram: FloatArray
    energy: float
    observed: Parts
    drawn: Parts
    weights: str
    listed: bool
    restricted: bool
    units: int
    psi: float
    notes: tuple[str, ...]

    def __str__(self) -> str:
        """Return estimate, statistic, p values and interval."""
        lines = [
            f"Wild cluster bootstrap of {self.hypothesis} = {self.value:g}",
            f"  estimate {number(self.estimate)}, CR1 standard error {number(self.standard_error)}, statistic "
            f"{number(self.statistic)}",
            f"  p {number(self.p_value)}, equal-tailed {number(self.p_equal_tailed)}",
        ]
        try:
            lines.append(f"  95% interval {interval(*self.interval())}")
        except (IdentificationError, OptionError) as reason:
            lines += wrapped([f"  no 95% interval: {reason}"])
        return "\n".join([*lines, *wrapped(sentence(note) for note in self.notes)])

    @property
    def replicates(self) -> int:
        """Number of replicates."""
        return len(self.drawn.score)

    @property
    def standard_error(self) -> float:
        """CR1 standard error of the combination."""
        return float(self._spread(self.observed, 0.0)[0]) * self.length

    @property
    def statistic(self) -> float:
        """``(estimate - value)`` over its CR1 standard error."""
        return self._statistic(self.value)

    @property
    def statistics(self) -> FloatArray:
        """The statistic of every replicate; infinite where its variance is zero."""
        return self._statistics(self.value)

    @property
    def p_value(self) -> float:
        """Two-sided: share of replicates whose statistic is at least as far from zero.

        Where weights are drawn, one is added to the count and to the number of replicates; where they are listed, the
        data are among them.
        """
        return self._p_value(self.value)

    @property
    def p_equal_tailed(self) -> float:
        """Twice the smaller of the two one-sided shares, at most one."""
        drawn, here = self.statistics, self.statistic
        room = TIE * abs(here)
        above, below = float((drawn >= here - room).sum()), float((drawn <= here + room).sum())
        return min(1.0, 2.0 * min(self._share(above), self._share(below)))

    def critical_value(self, level: float = 0.05) -> float:
        """Return the size of the statistic that is exceeded with this probability.

        Parameters
        ----------
        level : float

        Returns
        -------
        float

        Raises
        ------
        OptionError
            If there are too few replicates for the level.
        """
        self._refuse_few(level)
        sizes = np.abs(self.statistics)
        if self.listed:
            return float(np.quantile(sizes, 1.0 - level, method="higher"))
        return float(quantiles(sizes, [1.0 - level], "a statistic")[0])

    def interval(self, confidence: float = 0.95) -> tuple[float, float]:
        """Return an interval for the combination.

        With restricted residuals the values that the two-sided test does not reject, for the same weights: the first
        crossing on either side of the estimate is taken, infinite where there is none. Without, estimate plus and minus
        the critical value times the standard error.

        Parameters
        ----------
        confidence : float

        Returns
        -------
        float, float

        Raises
        ------
        OptionError
            If there are too few replicates for the level.
        """
        check_confidence(confidence)
        level = 1.0 - confidence
        self._refuse_few(level)
        if not self.restricted:
            half = self.critical_value(level) * self.standard_error
            return self.estimate - half, self.estimate + half
        return self._edge(-1.0, level), self._edge(1.0, level)

    def _edge(self, side: float, level: float) -> float:
        """Return the first value away from the estimate that is rejected."""
        inside, step = 0.0, 0.25 * self.standard_error
        outside = step
        while self._p_value(self.estimate + side * outside) > level * (1.0 + TIE):
            inside = outside
            outside = outside + step if outside < 8.0 * self.standard_error else 1.5 * outside
            if outside > WIDEST * self.standard_error:
                return side * np.inf
        for _ in range(60):
            middle = 0.5 * (inside + outside)
            if self._p_value(self.estimate + side * middle) > level * (1.0 + TIE):
                inside = middle
            else:
                outside = middle
        return self.estimate + side * outside

    def _refuse_few(self, level: float) -> None:
        if not 0.0 < level < 1.0:
            raise OptionError(f"level={level!r} is not allowed; allowed: a number between 0 and 1.")
        if self.listed:
            if 2.0 / self.replicates > level:
                raise IdentificationError(
                    f"with {self.units} units and {self.weights} weights no p-value is below "
                    f"{2.0 / self.replicates:.3g}: nothing can be rejected at {level:.3g}. Use Webb's weights."
                )
            return
        needed = int(np.ceil(BEYOND / level - 1e-6))
        if self.replicates < needed:
            raise OptionError(
                f"{self.replicates} replicates are too few for a level of {level:.4g}: {BEYOND} replicates beyond it "
                f"need {needed} in all."
            )

    def _share(self, count: float) -> float:
        return count / self.replicates if self.listed else (1.0 + count) / (1.0 + self.replicates)

    def _p_value(self, value: float) -> float:
        here = abs(self._statistic(value))
        return self._share(float((np.abs(self._statistics(value)) >= here * (1.0 - TIE)).sum()))

    def _statistic(self, value: float) -> float:
        error = self._spread(self.observed, 0.0)[0] * self.length
        if not error > 0.0:
            raise IdentificationError(
                f"the CR1 variance of {self.hypothesis} is zero: one unit carries it alone, or residuals vanish."
            )
        return float((self.estimate - value) / error)

    def _statistics(self, value: float) -> FloatArray:
        shift = (self.estimate - value) / self.length if self.restricted else 0.0
        along = (self.drawn.score + self.drawn.pull * shift) @ self.direction
        error = self._spread(self.drawn, shift)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = along / error
        return np.where(error > 0.0, ratio, np.where(along < 0.0, -np.inf, np.inf))

    def _spread(self, parts: Parts, shift: float) -> FloatArray:
        """Return the CR1 standard error along the direction, zero where it is rounding."""
        delta = parts.score + parts.pull * shift
        own = parts.squares @ np.array([1.0, 2.0 * shift, shift**2])
        crossed = ((parts.score_pull + parts.pull_pull * shift) * delta).sum(axis=1)
        common = ((delta @ self.gram) * delta).sum(axis=1)
        variance = own - 2.0 * crossed + common
        floor = np.maximum(NOTHING * (own + common), CARRIED * (self.energy + shift**2))
        return np.sqrt(self.factor * np.where(variance > floor, variance, 0.0))
