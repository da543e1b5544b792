"""Tests of a zero unit variance and of unit means, on every replicate at once, from the numbers drawn.

With ``r(psi)`` the residual sum of squares of GLS and ``r_w`` and ``r_b(psi)`` those of the within and of the between
regression with weights ``1/(1 + T psi)``, the Wald statistic of the unit means is ``(r - r_w - r_b) / sigma_u^2``; what
is not along the columns of X cancels. It is the one chi-square of the within, GLS and between contrasts.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import scipy
from numpy.typing import NDArray

from mixbridge.inference.pivot import no_pivot
from mixbridge.ratio import Curve
from mixbridge.resample.batch import Estimates
from mixbridge.resample.moment_draws import Coordinates, Draws

__all__ = ["CONTRAST_ROUTES", "Critical", "critical_values", "statistics"]

FloatArray = NDArray[np.float64]

CONTRAST_ROUTES = ("reml", "swamy_arora")
"""Routes at whose ratio and variance the unit means are tested."""


@dataclass(frozen=True, slots=True)
class Critical:
    """When a test rejects.

    Attributes
    ----------
    hypothesis : {"zero unit variance", "unrelated unit effects"}
    value : float
        Statistics above it reject.
    reference : str
        Law the value is a quantile of.
    """

    hypothesis: str
    value: float
    reference: str


def critical_values(curve: Curve, routes: Mapping[str, object], level: float) -> dict[str, Critical]:
    """Return every test that this panel and these routes allow.

    Parameters
    ----------
    curve : Curve
    routes : mapping
        Routes refitted, by key.
    level : float

    Returns
    -------
    dict of str to Critical
    """
    zero, unrelated = "zero unit variance", "unrelated unit effects"
    found: dict[str, Critical] = {}
    if no_pivot(curve) is None:
        df = (curve.units - curve.rank_constant, curve.df_within)
        value = float(scipy.stats.f.isf(level, *df))
        found["f_unit_intercepts"] = Critical(zero, value, f"F({df[0]}, {df[1]}), exact")
    if curve.n > curve.units:
        one = float(scipy.stats.norm.isf(level))
        two = float(scipy.stats.chi2.isf(level, 1))
        found["lagrange_multiplier"] = Critical(zero, two, "chi-square 1")
        found["lagrange_multiplier_one_sided"] = Critical(zero, one, "normal")
        found["lagrange_multiplier_standardised"] = Critical(zero, one, "normal")
    # half the mass at zero: rejects at twice the level of chi-square 1
    half = float(scipy.stats.chi2.isf(min(2.0 * level, 1.0), 1))
    for key, name in (("ml", "likelihood_ratio"), ("reml", "restricted_likelihood_ratio")):
        if key in routes:
            found[name] = Critical(zero, half, "half chi-square 0, half chi-square 1")
    shared = curve.rank_between - curve.rank_constant
    if shared > 0 and curve.df_within > 0:
        for key in CONTRAST_ROUTES:
            if key in routes:
                value = float(scipy.stats.chi2.isf(level, shared))
                found[f"unit_means_{key}"] = Critical(unrelated, value, f"chi-square {shared}")
    return found


def statistics(
    space: Coordinates, draws: Draws, found: Mapping[str, Estimates], wanted: Mapping[str, Critical]
) -> dict[str, FloatArray]:
    """Compute the statistics of a batch of replicates.

    Parameters
    ----------
    space : Coordinates
    draws : Draws
    found : mapping of str to Estimates
        With the coefficients of the errors drawn.
    wanted : mapping of str to Critical

    Returns
    -------
    dict of str to ndarray of shape (R,)
        NaN where a route gives no ratio.
    """
    curve, inside = space.curve, space.within_order
    left = draws.e - (draws.e @ space.x) @ space.x.T
    squares = left**2
    pooled = squares.sum(axis=1) + draws.rest.sum(axis=1)
    values: dict[str, FloatArray] = {}
    if "f_unit_intercepts" in wanted:
        within = draws.rest[:, 0]
        between = squares.sum(axis=1) + draws.rest[:, 1:].sum(axis=1)
        values["f_unit_intercepts"] = (between / (curve.units - curve.rank_constant)) / (
            within / curve.df_within
        )
    if "lagrange_multiplier" in wanted:
        d = (
            squares[:, inside:] @ curve.sizes[space.block[inside:]] + draws.rest[:, 1:] @ curve.sizes
        ) / pooled
        spread = float(curve.counts @ curve.sizes**2) - curve.n
        one = curve.n * (d - 1.0) / np.sqrt(2.0 * spread)
        centre, sd = _law_of_ratio(curve)
        values["lagrange_multiplier"] = one**2
        values["lagrange_multiplier_one_sided"] = one
        values["lagrange_multiplier_standardised"] = (
            (d - centre) / sd if sd > 0.0 else np.full(len(d), np.nan)
        )
    for key, name in (("ml", "likelihood_ratio"), ("reml", "restricted_likelihood_ratio")):
        if name in wanted:
            values[name] = found[key].fall
    for key in CONTRAST_ROUTES:
        if f"unit_means_{key}" in wanted:
            values[f"unit_means_{key}"] = _unit_means(space, draws.e, found[key])
    return values


def _law_of_ratio(curve: Curve) -> tuple[float, float]:
    """Return mean and standard deviation of ``d = e'ZZ'e / e'e``, e the pooled residuals, at a zero unit variance."""
    n, k, sizes, counts = curve.n, curve.rank, curve.sizes, curve.counts
    means = curve.between_products[:, :k, :k]
    traces = np.trace(means, axis1=1, axis2=2)
    once = n - float(sizes**2 @ traces)
    inner = np.tensordot(sizes**2, means, axes=1)
    twice = float(counts @ sizes**2 - 2.0 * (sizes**3 @ traces) + (inner**2).sum())
    df = n - k
    variance = 2.0 * (df * twice - once**2) / (df**2 * (df + 2.0))
    return once / df, float(np.sqrt(variance)) if variance > 1e-12 * (once / df) ** 2 else 0.0


def _unit_means(space: Coordinates, e: FloatArray, route: Estimates) -> FloatArray:
    curve, at = space.curve, space.within_order
    values = np.full(len(e), np.nan)
    live = np.flatnonzero(np.isfinite(route.ratio))
    weight = 1.0 / (1.0 + np.multiply.outer(route.ratio[live], curve.sizes))[:, space.block[at:]]
    slope = np.linalg.solve(space.to_beta, route.coefficients[live].T).T
    left = e[live] - slope @ space.x.T
    gls = (left[:, :at] ** 2).sum(axis=1) + (left[:, at:] ** 2 * weight).sum(axis=1)
    basis = _complement(curve.between_null, curve.rank)
    base = space.x[at:] @ basis
    # one product table for all replicates: weights depend on the size only
    classes = np.array(
        [base[space.block[at:] == g].T @ base[space.block[at:] == g] for g in range(len(curve.sizes))]
    )
    by_size = 1.0 / (1.0 + np.multiply.outer(route.ratio[live], curve.sizes))
    products = np.tensordot(by_size, classes, axes=1)
    length = np.sqrt(np.diagonal(products, axis1=1, axis2=2))
    products /= length[:, :, None] * length[:, None, :]
    right = ((left[:, at:] * weight) @ base) / length
    step = np.linalg.solve(products, right[:, :, None])[:, :, 0] / length
    apart = left[:, at:] - step @ base.T
    between = (apart**2 * weight).sum(axis=1)
    values[live] = np.maximum(gls - between, 0.0) / route.idiosyncratic_variance[live]
    return values


def _complement(null: FloatArray, p: int) -> FloatArray:
    """Return an orthonormal basis of what is orthogonal to some columns."""
    if null.shape[1] == 0:
        return np.eye(p)
    return np.asarray(np.linalg.svd(null, full_matrices=True)[0][:, null.shape[1] :])
