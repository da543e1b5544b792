"""What an estimate over its standard error is compared with: quantiles, intervals, p values from the tail."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy

__all__ = ["Reference"]


@dataclass(frozen=True, slots=True)
class Reference:
    """A rule and its degrees of freedom: what an estimate over its standard error is compared with.

    Attributes
    ----------
    name : str
        Key of `mixbridge.inference.references.RULES`.
    df : float
        Degrees of freedom; infinite for the normal; NaN where the rule is not available.

    Examples
    --------
    >>> Reference("t_units", 9.0).text
    't(9)'
    >>> round(Reference("normal", float("inf")).quantile(0.95), 4)
    1.96
    """

    name: str
    df: float

    @property
    def available(self) -> bool:
        """Whether there are positive degrees of freedom."""
        return bool(self.df > 0.0)

    @property
    def text(self) -> str:
        """Short form for tables."""
        if not self.available:
            return "not available"
        return "normal" if np.isinf(self.df) else f"t({self.df:.6g})"

    def quantile(self, confidence: float) -> float:
        """Return the half-width of an interval in standard errors."""
        tail = (1.0 - confidence) / 2.0
        if not self.available:
            return np.nan
        return float(scipy.stats.norm.isf(tail) if np.isinf(self.df) else scipy.stats.t.isf(tail, self.df))

    def interval(self, estimate: float, standard_error: float, confidence: float) -> tuple[float, float]:
        """Return the two-sided interval."""
        half = self.quantile(confidence) * standard_error
        return estimate - half, estimate + half

    def p_value(self, statistic: float) -> float:
        """Return the two-sided p value of an estimate over its standard error, from the tail itself."""
        if not self.available:
            return np.nan
        size = abs(statistic)
        return float(
            2.0 * (scipy.stats.norm.sf(size) if np.isinf(self.df) else scipy.stats.t.sf(size, self.df))
        )

    def log_p_value(self, statistic: float) -> float:
        """Return the natural logarithm of `p_value`; it stays finite where the p value underflows."""
        if not self.available:
            return np.nan
        size = abs(statistic)
        if np.isinf(self.df):
            return float(np.log(2.0) + scipy.stats.norm.logsf(size))
        p = self.p_value(statistic)
        if p > 1e-290 or np.isinf(size):
            return float(np.log(p)) if p > 0.0 else -np.inf
        # I_x(a, 1/2) = x^a F(a, 1/2; a + 1; x)/(a B(a, 1/2)), x = df/(df + t^2)
        a, x = self.df / 2.0, 1.0 / (1.0 + size / self.df * size)
        log_x = float(-np.log1p(size / self.df * size))
        return float(
            a * log_x
            + np.log(scipy.special.hyp2f1(a, 0.5, a + 1.0, x))
            - np.log(a)
            - scipy.special.betaln(a, 0.5)
        )

    def joint_p_value(self, statistic: float, q: int) -> float:
        """Return the p value of an F statistic with q rows (chi-square over q for the normal)."""
        if not self.available:
            return np.nan
        return float(
            scipy.stats.chi2.sf(q * statistic, q)
            if np.isinf(self.df)
            else scipy.stats.f.sf(statistic, q, self.df)
        )
