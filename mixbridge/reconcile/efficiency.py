"""How much precision a quadratic route gives up on this design, against the restricted-likelihood bound.

The sampling covariance of the components of a route, ``C^-1 Cov(q) C^-T``, and its expectation are exact under
normal effects and errors at any values of the variances; both are taken at one pair of values, those of a fitted
route. The bound is the inverse expected information of the restricted likelihood at the same values,
``2 sigma_u^4 [tr P_0P_0, tr P_0P_0ZZ'; ., tr P_0ZZ'P_0ZZ']^-1``, which MINQUE reaches where its prior is the true
ratio (Rao 1971; Harville 1977): no unbiased quadratic form that ignores the coefficients does better.

A route with a bias is set against the bound by its mean squared error, which includes the squared bias; its figure
can exceed one, since a small bias may buy precision. The ratio ``psi = sigma_a^2 / sigma_u^2`` is taken to first
order. Truncation at zero is left out: the figures concern the components before it.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import OptionError
from mixbridge.ratio import Curve
from mixbridge.routes import Fit, named_route
from mixbridge.routes.forms import covariance, expectations
from mixbridge.routes.quadratic import QUADRATIC, NotEstimableError, Pair, minque_pair

__all__ = ["information_bound", "relative_efficiency"]

FloatArray = NDArray[np.float64]
QUANTITIES = ("unit_variance", "idiosyncratic_variance", "ratio")
COLUMNS = [
    "route",
    *QUANTITIES,
    *(f"{name}_sd" for name in QUANTITIES),
    *(f"{name}_bias" for name in QUANTITIES),
    "measure",
    "reason",
]
ROUNDING = 1e-10
"""Bias, relative to the larger component, that counts as none: traces carry about n times the unit roundoff."""


def relative_efficiency(curve: Curve, fits: Mapping[str, Fit], at: Fit) -> pd.DataFrame:
    """Compare the components of each quadratic route with the bound.

    Parameters
    ----------
    curve : Curve
    fits : mapping of str to Fit
        By ledger key; quadratic routes on the rows of the curve are shown, with their conventions.
    at : Fit
        Where the variances are taken from: a route with a positive idiosyncratic variance and a finite ratio, usually
        `reml`.

    Returns
    -------
    DataFrame
        First the bound, then a row per route: ``route``; bound over variance (or over mean squared error) for
        ``unit_variance``, ``idiosyncratic_variance``, ``ratio``; their sampling standard deviations ``_sd`` and
        biases ``_bias``; ``measure``, ``variance`` or ``mean squared error``; and ``reason`` where a route gives
        none.

    Raises
    ------
    OptionError
        If `at` gives no pair of variances.
    """
    idiosyncratic, unit = at.idiosyncratic_variance, at.unit_variance
    if not (idiosyncratic > 0.0 and np.isfinite(unit)):
        raise OptionError(f"route {at.route!r} gives no pair of variances to compare at: {at.status}.")
    theta = np.array([unit, idiosyncratic])
    gradient = np.array([1.0, -unit / idiosyncratic]) / idiosyncratic
    rows: list[list[object]] = []
    try:
        best = _with_ratio(information_bound(curve, idiosyncratic, unit), gradient)
        rows.append(["bound", *[1.0] * 3, *np.sqrt(best), *[0.0] * 3, "variance", ""])
    except NotEstimableError as reason:
        best = np.full(3, np.nan)
        rows.append(["bound", *[np.nan] * 9, "", str(reason)])
    for key, fit in fits.items():
        route = named_route(key)[0]
        if route not in QUADRATIC or fit.rows != curve.n:
            continue
        try:
            pair = QUADRATIC[route](curve, fit.conventions)
            spread, mean = _moments(curve, pair, idiosyncratic, unit)
        except NotEstimableError as reason:
            rows.append([key, *[np.nan] * 9, "", str(reason)])
            continue
        bias = mean - theta
        bias[pair.unbiased | (np.abs(bias) <= ROUNDING * theta.max())] = 0.0
        biases = np.append(bias, gradient @ bias)
        variances = _with_ratio(spread, gradient)
        biased = bool(biases.any())
        loss = variances + biases**2
        measure = "mean squared error" if biased else "variance"
        rows.append([key, *(best / loss), *np.sqrt(variances), *biases, measure, ""])
    return pd.DataFrame(rows, columns=COLUMNS)


def information_bound(curve: Curve, idiosyncratic: float, unit: float) -> FloatArray:
    """Return the inverse expected information of (unit, idiosyncratic) under the restricted likelihood.

    Parameters
    ----------
    curve : Curve
    idiosyncratic, unit : float
        ``sigma_u^2`` and ``sigma_a^2``, variances.

    Returns
    -------
    ndarray of shape (2, 2)

    Raises
    ------
    NotEstimableError
        If within or between variation is used up.
    """
    matrix = minque_pair(curve, unit / idiosyncratic).system
    scale = np.sqrt(np.diag(matrix))
    inverse = np.linalg.inv(matrix / np.outer(scale, scale)) / np.outer(scale, scale)
    return np.asarray(2.0 * idiosyncratic**2 * inverse[::-1, ::-1])


def _moments(curve: Curve, pair: Pair, idiosyncratic: float, unit: float) -> tuple[FloatArray, FloatArray]:
    """Return covariance and expectation of (unit, idiosyncratic) at given variances."""
    scale = np.abs(pair.system).max(axis=1)
    if scale.min() <= 1e-12 * curve.n or np.linalg.cond(pair.system / scale[:, None]) > 1e12:
        raise NotEstimableError("the two forms have proportional expectations")
    inverse = np.linalg.inv(pair.system / scale[:, None])[::-1] / scale
    spread = covariance(curve, pair.forms, idiosyncratic, unit)
    means = np.array([expectations(curve, form) for form in pair.forms]) @ np.array([idiosyncratic, unit])
    return np.asarray(inverse @ spread @ inverse.T), np.asarray(inverse @ means)


def _with_ratio(spread: FloatArray, gradient: FloatArray) -> FloatArray:
    """Return the variances of unit variance, idiosyncratic variance and, to first order, their ratio."""
    return np.append(np.diag(spread), gradient @ spread @ gradient)
