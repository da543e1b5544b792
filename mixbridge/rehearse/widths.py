"""Half-widths of intervals in standard errors, for every replicate: simple rules, and Satterthwaite along the curve.

Satterthwaite degrees of freedom depend on the estimates through the ratio alone, since everything scales with
``sigma_u^2``. So they are computed at some ratios and interpolated for the replicates between them.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import scipy
from numpy.typing import NDArray

from mixbridge.inference.references import degrees_of_freedom
from mixbridge.inference.satterthwaite import satterthwaite
from mixbridge.ratio import Curve
from mixbridge.resample.batch import Estimates
from mixbridge.routes import FITTED, REFERENCE_ROUTES, Fit, named_route
from mixbridge.routes.forms import covariance
from mixbridge.routes.quadratic import QUADRATIC, minque_pair

__all__ = ["RULES", "factors", "rules_of"]

FloatArray = NDArray[np.float64]

RULES = ("normal", "t_residual", "by_level", "satterthwaite")
"""Interval rules rehearsed; the last is the default of the curve, t_residual that of the reference routes."""

NODES = 33
"""Ratios at which degrees of freedom are computed, interpolated by cubic splines."""


def rules_of(fit: Fit) -> tuple[str, ...]:
    """Return the rules that are rehearsed for a route."""
    return RULES[:3] if named_route(fit.route)[0] in REFERENCE_ROUTES else RULES


def factors(curve: Curve, fit: Fit, found: Estimates, rule: str, confidence: float) -> FloatArray:
    """Return half-widths in standard errors.

    Parameters
    ----------
    curve : Curve
    fit : Fit
        The route, with its conventions.
    found : Estimates
        The same route on the replicates.
    rule : str
    confidence : float

    Returns
    -------
    ndarray of shape (R, p) or (1, p)
        NaN where the rule gives none.
    """
    tail = (1.0 - confidence) / 2.0
    if rule != "satterthwaite":
        df = degrees_of_freedom(curve, fit, np.eye(curve.rank), rule)
        return np.asarray(scipy.stats.t.isf(tail, df))[None, :]
    # an axis on which the ratio is finite, and the curve smooth
    reach = curve.units / curve.n
    live = np.isfinite(found.ratio)
    place = found.ratio / (found.ratio + reach)
    made = np.full((len(place), curve.rank), np.nan)
    if not live.any():
        return made
    low, high = float(place[live].min()), float(place[live].max())
    if high - low < 1e-9:
        made[live] = scipy.stats.t.isf(tail, _degrees(curve, fit, reach * low / (1.0 - low)))
        return made
    # denser near both ends, as the spline needs it
    nodes = low + (high - low) * 0.5 * (1.0 - np.cos(np.linspace(0.0, np.pi, NODES)))
    table = np.array([scipy.stats.t.isf(tail, _degrees(curve, fit, reach * at / (1.0 - at))) for at in nodes])
    known = np.isfinite(table).all(axis=0)
    if known.any():
        spline = scipy.interpolate.CubicSpline(nodes, table[:, known])
        made[np.ix_(live, known)] = spline(place[live])
    return made


def _degrees(curve: Curve, fit: Fit, psi: float) -> FloatArray:
    """Return Satterthwaite degrees of freedom of every term if the route estimated this ratio."""
    there = replace(
        fit,
        ratio=psi,
        unit_variance=psi,
        unit_variance_raw=psi,
        idiosyncratic_variance=1.0,
        scale=1.0,
        status=FITTED,
        components_covariance=_components_covariance(curve, fit, psi),
    )
    return satterthwaite(curve, there, np.eye(curve.rank)).df


def _components_covariance(curve: Curve, fit: Fit, psi: float) -> FloatArray:
    """Return the sampling covariance of (unit, idiosyncratic) at ``sigma_u^2 = 1``, as the route states it."""
    route = named_route(fit.route)[0]
    if route in QUADRATIC:
        pair = QUADRATIC[route](curve, fit.conventions)
        inverse = np.linalg.inv(pair.system)
        both = inverse @ covariance(curve, pair.forms, 1.0, psi) @ inverse.T
        return np.asarray(both[::-1, ::-1])
    if route == "reml":
        information = minque_pair(curve, psi).system
    else:
        shrink = 1.0 / (1.0 + curve.sizes * psi)
        cross = float(curve.counts @ (curve.sizes * shrink**2))
        information = np.array(
            [
                [curve.n - curve.units + float(curve.counts @ shrink**2), cross],
                [cross, float(curve.counts @ (curve.sizes * shrink) ** 2)],
            ]
        )
    scale = np.sqrt(np.diag(information))
    inverse = np.linalg.inv(information / np.outer(scale, scale)) / np.outer(scale, scale)
    return np.asarray(2.0 * inverse[::-1, ::-1])
