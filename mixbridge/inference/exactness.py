"""Which t law is exact for one linear combination of coefficients in this design, and why, or why none is.

Exact means: under the random-intercept model with normal errors, given X, whatever the variance ratio. Facts
used:

- within regression: ``l'b_w`` and ``RSS_w ~ sigma_u^2 chi^2(n - N - K_w)`` are free of the unit effects and
  independent.
- a combination is *purely within* if ``B_T A^-1 l = 0`` for every size T: then ``l'beta(psi)`` is the within
  estimate at every ψ, with variance ``sigma_u^2 l'(X'QX)^- l``. With the scale ``RSS_w/(n - N - K_w)`` its t
  is exact, whatever the sizes.
- all sizes equal T: errors of unit means have one variance ``sigma_a^2 + sigma_u^2/T``, so the between
  regression is exact with N - K_p. A combination is *purely between* if ``W A^-1 l = 0``; where a route's
  ``sigma_u^2 + T sigma_a^2`` equals the between mean square, so is its t, apart from samples in which the
  unit variance is estimated at zero and the formula switches.
- all sizes one: the two variances are one, and pooled least squares is exact.
- no unit with more than one difference: differences are independent with one variance.

Whether a combination is purely within or between, and whether a route's variance is that of the law, is
tested on the numbers.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy
from numpy.typing import NDArray

from mixbridge.inference.satterthwaite import orthonormal
from mixbridge.ratio import Curve
from mixbridge.routes.fitting import REFERENCE_ROUTES
from mixbridge.routes.least_squares import between
from mixbridge.routes.record import Fit

__all__ = ["NEGLIGIBLE", "ExactLaw", "exact_law"]

FloatArray = NDArray[np.float64]

NEGLIGIBLE = 1e-3
"""Plug-in probability of a zero estimate up to which a law that fails only there counts as exact.

The probability bounds the error in coverage.
"""

PURE = 1e-18
"""Share of the squared length of ``l`` that is rounding: a coordinate of 1e-9, left at condition 1e6."""


@dataclass(frozen=True, slots=True)
class ExactLaw:
    """The exact t law of an estimate over its standard error.

    Attributes
    ----------
    df : float
        Degrees of freedom; NaN where no t law is exact.
    why : str
        Reason, either way.
    """

    df: float
    why: str


def exact_law(curve: Curve, fit: Fit, row: FloatArray) -> ExactLaw:
    """Find the exact law of ``l'beta_hat`` over its model-based standard error.

    Parameters
    ----------
    curve : Curve
        The panel the fit was made on.
    fit : Fit
        Any route.
    row : ndarray of shape (p,)
        l, over coefficients that the route estimates.
    """
    if not np.isfinite(fit.scale):
        return ExactLaw(np.nan, f"no standard error: {fit.status}")
    if fit.route in REFERENCE_ROUTES:
        return _least_squares(curve, fit)
    law = _on_curve(curve, fit, row)
    if np.isfinite(law.df):
        return law
    return ExactLaw(np.nan, f"{law.why}{_elsewhere(curve, row)}")


def _least_squares(curve: Curve, fit: Fit) -> ExactLaw:  # noqa: PLR0911  (one return per design)
    equal = len(curve.sizes) == 1
    if fit.route == "within":
        if fit.residual_df != curve.df_within:
            return ExactLaw(
                np.nan, "the scale counts columns, not ranks, so it is not an unbiased mean square"
            )
        return ExactLaw(
            fit.residual_df,
            "within estimate and RSS_w are free of the unit effects: t(n - N - K_w) in any design",
        )
    if fit.route == "between":
        if not equal:
            return ExactLaw(np.nan, "unit sizes differ, so errors of unit means have unequal variances")
        if fit.residual_df != curve.units - curve.rank_between:
            return ExactLaw(
                np.nan, "the scale counts columns, not ranks, so it is not an unbiased mean square"
            )
        return ExactLaw(
            fit.residual_df, "equal unit sizes: errors of unit means have one variance, t(N - K_p)"
        )
    if fit.route == "pooled":
        if equal and curve.sizes[0] == 1.0:
            return ExactLaw(fit.residual_df, "every unit has one row: the two variances act as one, t(n - K)")
        return ExactLaw(
            np.nan,
            "rows of a unit are correlated unless the unit variance is zero; t(n - K) is exact only then",
        )
    if curve.sizes.max() <= 2.0:
        return ExactLaw(
            fit.residual_df, "at most one difference per unit: differences are independent with one variance"
        )
    return ExactLaw(
        np.nan,
        "neighbouring differences share an error (moving average of order one), which the scale ignores",
    )


def _on_curve(curve: Curve, fit: Fit, row: FloatArray) -> ExactLaw:
    form = orthonormal(curve, fit.ratio)
    coordinates = form.root.T @ row
    length = float(coordinates @ coordinates)
    inside = float(((form.within @ coordinates) ** 2).sum())
    weights = form.sizes * form.shrink
    means = float(weights @ ((form.between @ coordinates) ** 2).sum(axis=1))
    if means <= PURE * length:
        return _purely_within(curve, fit)
    if inside <= PURE * length and len(curve.sizes) == 1:
        return _purely_between(curve, fit, row, length)
    if inside <= PURE * length:
        return ExactLaw(np.nan, "the combination is purely between, but unit sizes differ")
    return ExactLaw(np.nan, "the estimate mixes within and between variation at an estimated ratio")


def _purely_within(curve: Curve, fit: Fit) -> ExactLaw:
    mean_square = curve.unit * curve.within_residual / curve.df_within if curve.df_within > 0 else np.nan
    if not _same(fit.scale, mean_square):
        return ExactLaw(np.nan, "the combination is purely within, but the scale is not RSS_w/(n - N - K_w)")
    why = "purely within: the within estimate at every ratio, with scale RSS_w/(n - N - K_w)"
    if fit.route != "reml" and fit.conventions.get("scale", "own") == "own":
        return ExactLaw(curve.df_within, why)
    return _unless_zero(curve, fit, curve.df_within, why)


def _purely_between(curve: Curve, fit: Fit, row: FloatArray, length: float) -> ExactLaw:
    regression = between(curve, {"between": "size_weighted", "count": "rank"})
    if regression.df < 1:
        return ExactLaw(np.nan, "no degrees of freedom between units")
    variance = regression.residual / regression.df * float(((regression.root.T @ row) ** 2).sum())
    if not _same(fit.scale * length, variance):
        return ExactLaw(np.nan, "purely between, but sigma_u^2 + T sigma_a^2 is not the between mean square")
    return _unless_zero(
        curve, fit, regression.df, "purely between, equal sizes: the between estimate and mean square"
    )


def _unless_zero(curve: Curve, fit: Fit, df: float, why: str) -> ExactLaw:
    """Weigh a law that fails where the unit variance is zero: between mean square below the within one."""
    if len(curve.sizes) > 1 or fit.ratio == 0.0:
        return ExactLaw(
            np.nan,
            "the ratio is estimated at zero or the sizes differ: the scale is not one mean square",
        )
    df_between = curve.units - curve.rank_between
    chance = float(scipy.stats.f.cdf(1.0 / (1.0 + curve.sizes[0] * fit.ratio), df_between, curve.df_within))
    text = (
        f"{why}; t({df:g}) but for samples with a zero unit variance, "
        f"probability {chance:.2g} at these estimates"
    )
    return ExactLaw(df if chance <= NEGLIGIBLE else np.nan, text)


def _elsewhere(curve: Curve, row: FloatArray) -> str:
    """Say which other route has an exact law for the same coefficients."""
    used = row != 0.0
    found = []
    if curve.df_within > 0 and curve.free_within[used].all():
        found.append("`within` with t(n - N - K_w)")
    if len(curve.sizes) == 1 and curve.units > curve.rank_between and curve.free_between[used].all():
        found.append("`between` with t(N - K_p)")
    return f"; exact here: {' and '.join(found)}" if found else ""


def _same(a: float, b: float) -> bool:
    """Compare two variances that are equal in theory; 1e-8 is the accuracy to which an optimum is located."""
    return bool(np.isfinite(b) and abs(a - b) <= 1e-8 * max(abs(a), abs(b)))
