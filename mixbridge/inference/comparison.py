"""Information criteria, comparison of fixed parts, and variance explained in both families of definitions."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.ratio import Curve
from mixbridge.routes import Fit, log_likelihood

__all__ = ["criteria", "same_column_space", "variance_explained"]

FloatArray = NDArray[np.float64]


def criteria(curve: Curve, fits: dict[str, Fit]) -> pd.DataFrame:
    """Return log-likelihoods with AIC and BIC.

    Parameters
    ----------
    curve : Curve
    fits : mapping of str to Fit
        With ``ml`` and ``reml``.

    Returns
    -------
    DataFrame
        ``likelihood``, ``log_likelihood``, ``parameters`` (K + 2 for ML, 2 for REML, in which coefficients
        are integrated out), ``aic``, ``bic_rows`` (penalty log n), ``bic_units`` (penalty log N) and
        ``comparable`` in words. The REML row is there with and without ``½ log|X'X|`` (Harville 1974).
    """
    columns = ["likelihood", "log_likelihood", "parameters", "aic", "bic_rows", "bic_units", "comparable"]
    rows: list[list[object]] = []
    for kind, constant in (("ml", True), ("reml", True), ("reml", False)):
        fit = fits[kind]
        if not fit.estimated:
            rows.append([kind, *[np.nan] * 5, fit.status])
            continue
        value = log_likelihood(curve, kind, fit.ratio, constant)  # type: ignore[arg-type]  # kind is one of the two
        count = curve.rank + 2 if kind == "ml" else 2
        name = (
            {True: "reml, with half log|X'X|", False: "reml, without it"}[constant]
            if kind == "reml"
            else "ml"
        )
        span = (
            "across fixed parts on the same rows"
            if kind == "ml"
            else "only between models with the same column space of X"
            if constant
            else "only between models with the same columns of X"
        )
        penalties = [2.0 * count, count * np.log(curve.n), count * np.log(curve.units)]
        rows.append([name, value, count, *(-2.0 * value + penalty for penalty in penalties), span])
    return pd.DataFrame(rows, columns=columns)


def same_column_space(a: Curve, b: Curve) -> bool:
    """Tell whether two designs on the same rows have one column space, as far as moments show it.

    Same rank and the same projection: for equal outcomes and rows the pooled, within and restricted sums of
    squares agree. Names decide first; equal names in any order are one space.
    """
    if set(a.names) == set(b.names):
        return True
    if a.rank != b.rank or a.rank_within != b.rank_within or a.rank_between != b.rank_between:
        return False
    at = (0.0, 0.3, 3.0)
    left, right = ([curve.at(psi).residual for psi in at] for curve in (a, b))
    # residuals carry eps times the condition of each design
    return bool(
        np.allclose(left, right, rtol=1e3 * np.finfo(float).eps * max(a.condition, b.condition), atol=0.0)
    )


def variance_explained(curve: Curve, fit: Fit) -> pd.DataFrame:
    """Return shares of variance under the definitions of both fields.

    Parameters
    ----------
    curve : Curve
    fit : Fit
        A route with coefficients for every column.

    Returns
    -------
    DataFrame
        ``measure``, ``value`` and ``definition``: squared correlations of ``x'beta`` with the outcome within
        units, between unit means (each unit once) and over rows; marginal and conditional shares (Nakagawa &
        Schielzeth 2013), with the variance of ``x'beta`` over rows, divisor n - 1.
    """
    moments = curve.moments
    columns = moments.columns
    slope = np.array([fit.beta[curve.names.index(name)] for name in columns[:-1]]) * moments.scale[:-1]
    pick = np.column_stack([np.append(slope, 0.0), np.append(np.zeros(len(slope)), moments.scale[-1])])
    inside = moments.within @ pick
    within = inside.T @ inside
    means = moments.between @ np.vstack([np.zeros(2), pick])
    level = moments.between[:, :, 0]

    def about_mean(weights: FloatArray) -> FloatArray:
        total = np.einsum("g,gri,grj->ij", weights, means, means)
        sums = np.einsum("g,gr,gri->i", weights, level, means)
        return np.asarray(total - np.outer(sums, sums) / float(weights @ curve.counts))

    between, rows = about_mean(np.ones(len(curve.sizes))), within + about_mean(curve.sizes)
    explained = rows[0, 0] / (curve.n - 1)
    whole = explained + fit.unit_variance + fit.idiosyncratic_variance
    values = [
        ["within", _squared_correlation(within), "squared correlation of deviations from unit means"],
        ["between", _squared_correlation(between), "squared correlation of unit means, each unit once"],
        ["overall", _squared_correlation(rows), "squared correlation over rows"],
        ["marginal", explained / whole, "variance of x'beta over it plus both variance components"],
        [
            "conditional",
            (explained + fit.unit_variance) / whole,
            "the same with the unit variance in the numerator",
        ],
    ]
    return pd.DataFrame(values, columns=["measure", "value", "definition"])


def _squared_correlation(products: FloatArray) -> float:
    if not (products[0, 0] > 0.0 and products[1, 1] > 0.0):
        return float("nan")
    return float(products[0, 1] ** 2 / (products[0, 0] * products[1, 1]))
