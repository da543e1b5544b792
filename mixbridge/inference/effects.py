"""Predicted unit effects, their errors, and three quantities that are all called variance of the effects.

At ratio ψ, with ``s_i = T_i psi / (1 + T_i psi)`` (Henderson 1975; Robinson 1991)

    effect_i            = s_i (ybar_i - xbar_i' beta)
    Var(effect_i - a_i) = sigma_u^2 [ psi (1 - s_i) + s_i^2 xbar_i' (X'V_0^-1 X)^-1 xbar_i ]

the second with components taken as known. The best linear predictor at known coefficients is uncorrelated
with the outcome, hence with the estimated coefficients, so the two terms add.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.moments import OpenMoments
from mixbridge.ratio import Curve
from mixbridge.routes import Fit

__all__ = ["effect_variances", "estimated_intercepts", "predicted_effects"]

FloatArray = NDArray[np.float64]


def predicted_effects(opened: OpenMoments, fit: Fit) -> pd.DataFrame:
    """Predict every unit effect.

    Parameters
    ----------
    opened : OpenMoments
        Counts and means per unit.
    fit : Fit
        A curve route with coefficients.

    Returns
    -------
    DataFrame
        Index: unit keys. ``size``; ``mean_residual`` (``ybar - xbar'beta``); ``shrinkage``; ``effect``;
        ``prediction_se`` (components taken as known); ``rank`` of the effect, 1 the largest.
    """
    sizes = opened.counts.astype(float)
    means = opened.means + opened.shift
    x = means[:, :-1]
    residual = _mean_residual(opened, fit.beta)
    shrink = sizes * fit.ratio / (1.0 + sizes * fit.ratio)
    effect = shrink * residual
    spread = ((x @ fit.root) ** 2).sum(axis=1)
    error = np.sqrt(fit.idiosyncratic_variance * (fit.ratio * (1.0 - shrink) + shrink**2 * spread))
    order = np.empty(len(effect), dtype=np.int64)
    order[np.argsort(-effect, kind="stable")] = np.arange(1, len(effect) + 1)
    return pd.DataFrame(
        {
            "size": opened.counts,
            "mean_residual": residual,
            "shrinkage": shrink,
            "effect": effect,
            "prediction_se": error,
            "rank": order,
        },
        index=opened.keys,
    )


def estimated_intercepts(curve: Curve, opened: OpenMoments) -> FloatArray:
    """Return unit intercepts estimated as parameters, ``ybar_i - xbar_i' b_w``.

    Where within slopes are not all determined, a particular solution is used; the intercepts then absorb the
    rest.
    """
    p = curve.rank
    root = curve.within_root
    slope = root @ ((curve.within[:, :p] @ root).T @ curve.within[:, p])
    beta = curve.to_beta @ np.append(slope, 1.0)
    residual = _mean_residual(opened, beta)
    constant = curve.moments.constant
    return residual if constant is None else residual + beta[curve.names.index(constant)]


def effect_variances(curve: Curve, opened: OpenMoments, fit: Fit) -> pd.DataFrame:
    """Set side by side the three quantities called variance of the unit effects.

    Returns
    -------
    DataFrame
        ``quantity``, ``value`` (a variance) and ``meaning``.
    """
    effects = predicted_effects(opened, fit)["effect"].to_numpy()
    intercepts = estimated_intercepts(curve, opened)
    rows = [
        [
            "intercepts as parameters",
            float(np.var(intercepts, ddof=1)),
            "sample variance (divisor N - 1) of unit intercepts estimated as parameters: sampling noise and "
            "unit-constant covariates included, so too large for the unit variance",
        ],
        [
            "predicted effects",
            float(np.var(effects, ddof=1)),
            "sample variance (divisor N - 1) of predicted effects: shrunk towards zero, so too small for the unit "
            "variance",
        ],
        ["unit variance", fit.unit_variance, "the variance component of the model"],
    ]
    return pd.DataFrame(rows, columns=["quantity", "value", "meaning"])


def _mean_residual(opened: OpenMoments, beta: FloatArray) -> FloatArray:
    """Return ``ybar_i - xbar_i'beta``; the origin is taken out first, so that offsets cost no digits."""
    level = float(opened.shift[-1] - opened.shift[:-1] @ beta)
    return np.asarray(opened.means[:, -1] - opened.means[:, :-1] @ beta + level)
