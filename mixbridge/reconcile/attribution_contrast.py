"""What the gap to a route off the curve is made of: contrasts of within and between variation.

`between` and `first_difference` are not generalised least squares at any ratio, so no ratio explains their gaps.
With one ``sigma_u^2`` and one ψ, and L a coefficient that both sides determine, an efficient estimate is
uncorrelated with its distance from any other linear unbiased one, so

    Var(b_w - b(psi)) = Var b_w - Var b(psi),     Var(b_b - b(psi)) = Var b_b - Var b(psi)
    Var(b_w - b_b)    = Var b_w + Var b_b

(Hausman 1978; identity 5), with ``Var b_b = sigma_u^2 (X'PX)^+ [sum_T T (1 + T psi) B_T] (X'PX)^+`` for the
size-weighted regression of unit means. First differences are compared with the within slopes, and these with the
curve: the model gives no covariance of the first part from the moments.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from mixbridge.inference.contrasts import Contrast, contrasts
from mixbridge.ratio import Curve
from mixbridge.routes import Fit

__all__ = ["GapPart", "joint_contrasts", "off_curve_parts"]

EPS = float(np.finfo(float).eps)
BETWEEN, DIFFERENCES = "between", "first_difference"


@dataclass(frozen=True, slots=True)
class GapPart:
    """One part of a gap to a route off the curve.

    Attributes
    ----------
    name : str
        ``between - reml``, ``within - reml``, ...
    value : float
        Difference of the two coefficients.
    standard_error : float
        Of the difference, under the model at the ratio and variance named in the attribution; NaN where the moments
        do not give it, 0 where the two must agree.
    """

    name: str
    value: float
    standard_error: float

    @property
    def z(self) -> float:
        """Difference over its standard error."""
        return self.value / self.standard_error if self.standard_error > 0.0 else np.nan


def off_curve_parts(
    curve: Curve, a: Fit, b: Fit, term: str, *, within: Fit, base: Fit
) -> tuple[GapPart, ...]:
    """Split ``beta_a - beta_b`` where at least one of the two is off the curve.

    Parameters
    ----------
    curve : Curve
    a, b : Fit
        Both estimate the term.
    term : str
    within : Fit
        The within regression.
    base : Fit
        A curve fit: its ratio and idiosyncratic variance are those of the standard errors.

    Returns
    -------
    tuple of GapPart
        They add up to the gap.
    """
    at = curve.names.index(term)
    trail = [a]
    if DIFFERENCES in (a.route, b.route) and "within" not in (a.route, b.route):
        if not np.isfinite(within.beta[at]):
            return (GapPart(f"{a.route} - {b.route}", float(a.beta[at] - b.beta[at]), np.nan),)
        trail.append(within)
    trail.append(b)
    return tuple(
        GapPart(
            f"{left.route} - {right.route}",
            float(left.beta[at] - right.beta[at]),
            _error(curve, left, right, base, at),
        )
        for left, right in pairwise(trail)
    )


def _error(curve: Curve, left: Fit, right: Fit, base: Fit, at: int) -> float:
    """Return the standard error of a difference under the model at the ratio of the base."""
    routes = {left.route, right.route}
    if DIFFERENCES in routes:
        return np.nan
    squares = {fit.route: _variance(curve, fit, base, at) for fit in (left, right)}
    if routes == {"within", BETWEEN}:
        square = sum(squares.values())
    else:
        other = next(fit for fit in (left, right) if fit.route not in ("within", BETWEEN))
        if other.ratio != base.ratio:  # then neither of the two is efficient at this ratio
            return np.nan
        off = next(iter(routes - {other.route}))
        square = squares[off] - squares[other.route]
        if square <= 64.0 * EPS * curve.condition * squares[off]:
            square = 0.0
    return float(np.sqrt(base.idiosyncratic_variance * square))


def _variance(curve: Curve, fit: Fit, base: Fit, at: int) -> float:
    """Return the sampling variance of a coefficient over ``sigma_u^2``, at the ratio of the base."""
    if fit.route != BETWEEN:
        return float((fit.root[at] ** 2).sum())
    p, weighted = curve.rank, fit.conventions["between"] == "size_weighted"
    root = curve.between_root if weighted else curve.unweighted_root
    weights = curve.sizes if weighted else np.ones(len(curve.sizes))
    # a unit mean has variance sigma_u^2 (1 + T psi) / T
    noise = weights * np.sqrt((1.0 + curve.sizes * base.ratio) / curve.sizes)
    noisy = (noise[:, None, None] * curve.between[:, :, :p]).reshape(-1, p)
    row = curve.to_beta[at, :p]
    return float((((noisy @ root) @ (root.T @ row)) ** 2).sum() / curve.unit)


def joint_contrasts(curve: Curve, a: Fit, b: Fit, base: Fit) -> tuple[Contrast, ...]:
    """Return the joint tests of the same question, over all coefficients that both sides determine.

    Parameters
    ----------
    curve : Curve
    a, b, base : Fit
        As in `off_curve_parts`.

    Returns
    -------
    tuple of Contrast
        With one idiosyncratic variance, weights ``T / (1 + T psi)``: they are one statistic (identity 5). Empty where
        no coefficient is determined by both sides.
    """
    if not np.isfinite(base.ratio) or np.isnan(base.idiosyncratic_variance):
        return ()
    between = BETWEEN in (a.route, b.route)
    inside = bool({"within", DIFFERENCES} & {a.route, b.route})
    name = "within - between" if between and inside else "gls - between" if between else "within - gls"
    return tuple(
        item
        for item in contrasts(curve, base)
        if item.name in (name, "unit means")
        and item.variance == "one idiosyncratic variance"
        and item.weights in ("T / (1 + T psi)", "none")
    )
