"""The exact pivot for the variance ratio: the F test of unit intercepts, at every ψ.

Under normality and at the true ψ, with r(ψ) the residual sum of squares of generalised least squares,

    F(psi) = [(r(psi) - RSS_w) / (N - K_c)] / [RSS_w / (n - N - K_w)]

has the F distribution exactly: ``RSS_w / sigma_u^2`` is chi-square with ``n - N - K_w`` degrees of freedom
and free of the unit effects; ``r(psi) - RSS_w`` is what is left between units, ``sum c_k^2 / (1 + mu_k psi)``
over ``N - K_c`` independent normal c_k of variance ``sigma_u^2 (1 + mu_k psi)``. F decreases in ψ, so the
values it does not reject form an interval (Wald 1947; Seely & El-Bassiouni 1983; Harville & Fenech 1985).
F(0) is the test of equal unit intercepts.

The interval on ψ >= 0 is printed by this rule. Where 0 is not rejected from either side, the lower end is 0.
Where even 0 is rejected because F(0) is too *small*, no ψ >= 0 is left: the set is empty, both ends are NaN,
and the note says so. That is part of exact coverage (it happens with probability (1 - confidence)/2 when ψ =
0) and not an error of computation.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import scipy
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

from mixbridge.ratio import Curve

__all__ = ["Pivot", "RatioSet", "decreasing_root", "no_pivot", "pivot_of"]

FloatArray = NDArray[np.float64]
EPS = float(np.finfo(float).eps)


@dataclass(frozen=True, slots=True)
class RatioSet:
    """Values of ψ >= 0 that the pivot does not reject.

    Attributes
    ----------
    lower, upper : float
        Ends, NaN if the set is empty.
    empty : bool
    note : str
        What happened at the boundary, in words; empty where nothing did.
    """

    lower: float
    upper: float
    empty: bool
    note: str


@dataclass(frozen=True, slots=True)
class Pivot:
    """The F pivot of one panel.

    Attributes
    ----------
    sizes : ndarray of shape (G,)
        Distinct unit sizes.
    inside : ndarray of shape (K_w, p + 1)
        Triangular factor of the within products, without the row of the within residual.
    between : ndarray of shape (G, r, p + 1)
        Factors of the unit means.
    within_residual : float
        ``RSS_w``, whitened.
    df_between, df_within : int
        ``N - K_c`` and ``n - N - K_w``.
    """

    sizes: FloatArray
    inside: FloatArray
    between: FloatArray
    within_residual: float
    df_between: int
    df_within: int

    def reduction(self, psi: float) -> float:
        """Return ``r(psi) - RSS_w``, whitened, without subtracting one from the other."""
        p = self.inside.shape[1] - 1
        weights = np.sqrt(self.sizes / (1.0 + self.sizes * psi))
        rows = np.vstack([self.inside, (weights[:, None, None] * self.between).reshape(-1, p + 1)])
        length = np.sqrt((rows[:, :p] ** 2).sum(axis=0))
        upper = np.asarray(np.linalg.qr(np.column_stack([rows[:, :p] / length, rows[:, p]]), mode="r"))
        slope = solve_triangular(upper[:p, :p], upper[:p, p]) / length
        left = rows @ np.append(-slope, 1.0)
        return float(left @ left)

    def statistic(self, psi: float) -> float:
        """Return ``F(psi)``."""
        return (self.reduction(psi) / self.df_between) / (self.within_residual / self.df_within)

    def p_value(self, psi: float = 0.0) -> float:
        """Return the probability of a larger F at ψ."""
        return float(scipy.stats.f.sf(self.statistic(psi), self.df_between, self.df_within))

    def solve(self, value: float) -> float:
        """Return the ψ >= 0 at which ``F(psi)`` equals `value`; zero if F(0) is not above it."""
        return decreasing_root(lambda psi: self.statistic(psi) / value - 1.0, 1.0 / float(self.sizes[-1]))

    def ratio_set(self, confidence: float) -> RatioSet:
        """Return the ψ >= 0 whose F lies between two quantiles, half of ``1 - confidence`` beyond each."""
        tail = 0.5 * (1.0 - confidence)
        low = float(scipy.stats.f.ppf(tail, self.df_between, self.df_within))
        high = float(scipy.stats.f.isf(tail, self.df_between, self.df_within))
        at_zero = self.statistic(0.0)
        if at_zero < low:
            note = (
                f"empty: F(0) = {at_zero:.4g} lies below the {tail:.4g} quantile {low:.4g}, so even "
                "ratio 0 is rejected; unit means vary less than the model allows; no ratio >= 0 explains it"
            )
            return RatioSet(np.nan, np.nan, True, note)
        upper = self.solve(low)
        if at_zero <= high:
            return RatioSet(
                0.0, upper, False, "reaches the boundary: ratio 0 is not rejected, the lower end is cut there"
            )
        return RatioSet(self.solve(high), upper, False, "")


def no_pivot(curve: Curve) -> str | None:
    """Return why there is no F pivot, or None if there is one."""
    if curve.units <= curve.rank_constant:
        directions = f"K_c = {curve.rank_constant} unit-constant directions"
        return f"N = {curve.units} units for {directions}: nothing is left between units"
    if curve.df_within < 1:
        return f"n - N - K_w = {curve.df_within}: no degrees of freedom within units"
    if not curve.within_residual > 0.0:
        return "the within regression fits exactly: no error is left to compare unit effects with"
    return None


def pivot_of(curve: Curve) -> Pivot:
    """Return the pivot; ask `no_pivot` first."""
    p, constants = curve.rank, curve.rank_constant
    inside = np.zeros((curve.rank_within, p + 1))
    inside[:, constants:] = np.linalg.qr(curve.within[:, constants:], mode="r")[: curve.rank_within]
    return Pivot(
        sizes=curve.sizes,
        inside=inside,
        between=curve.between,
        within_residual=curve.within_residual,
        df_between=curve.units - curve.rank_constant,
        df_within=curve.df_within,
    )


def decreasing_root(function: Callable[[float], float], start: float) -> float:
    """Return the zero on ``[0, inf)`` of a decreasing function, to rounding; 0 if it is not positive there.

    Parameters
    ----------
    function : callable
        Decreasing, negative far out.
    start : float
        A positive number of the order of the zero.
    """
    if not function(0.0) > 0.0:
        return 0.0
    a, b = start, start
    while function(a) <= 0.0:
        a, b = a / 16.0, a
        if a < 1e-300:
            return 0.0
    while function(b) > 0.0:
        a, b = b, 16.0 * b
        if b > 1e300:
            return np.inf
    return float(scipy.optimize.brentq(function, a, b, xtol=EPS * a, rtol=4.0 * EPS))
