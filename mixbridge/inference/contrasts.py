"""Contrasts between routes that hold and do not hold when unit effects are unrelated to the covariates.

In whitened coordinates let L span the linear combinations of coefficients that both within variation and unit
means determine (``L'v = 0`` for every v with ``QXv = 0`` or ``PXv = 0``; there are ``K_p - K_c`` of them).
With

    within   b_w = (X'QX)^- X'Qy                     M_w = (X'QX)^-
    GLS      b(psi) = A_xx^-1 A_xy                   M_g = A_xx^-1
    between  b_b = (sum w xbar xbar')^- sum w xbar ybar   M_b = (sum w xbar xbar')^-,  w = T / (1 + T psi)

and one variance ``sigma_u^2`` for all, ``L'(b_w - b)``, ``L'(b - b_b)`` and ``L'(b_w - b_b)`` have
covariances ``sigma_u^2 L'(M_w - M_g)L``, ``sigma_u^2 L'(M_b - M_g)L`` and ``sigma_u^2 L'(M_w + M_b)L``, and
give one chi-square, that of the Wald test of the unit means (Hausman 1978; Hausman & Taylor 1981; Arellano
1993). With other weights of the between fit its covariance is taken under the same model. With a variance of
its own for each route, which most printed figures use, the three differ, and a difference of covariances need
not be non-negative: then there is no statistic.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
import scipy
from numpy.typing import NDArray

from mixbridge.inference.robust_regression import regression_of
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import Curve, root_of
from mixbridge.routes import Fit

__all__ = ["Contrast", "contrast_table", "contrast_terms", "contrasts", "shared_directions"]

FloatArray = NDArray[np.float64]
EPS = float(np.finfo(float).eps)


@dataclass(frozen=True, slots=True)
class Contrast:
    """One contrast.

    Attributes
    ----------
    name : str
        ``within - gls``, ``gls - between``, ``within - between`` or ``unit means``.
    variance : str
        ``one idiosyncratic variance``, ``each route's own`` or ``cluster-robust``.
    weights : str
        Weights of the between fit: ``T / (1 + T psi)``, ``size`` or ``one``.
    statistic : float
        Quadratic form of the contrast; NaN where its covariance is not positive definite.
    df : int
        Number of identified directions.
    p_value : float
        Upper tail of chi-square.
    smallest, largest : float
        Extreme eigenvalues of the covariance of the contrast, relative to that of the within coefficients
        (for ``unit means``, of the between coefficients): what is below zero shows that the difference is no
        covariance.
    note : str
        What to know.
    """

    name: str
    variance: str
    weights: str
    statistic: float
    df: int
    p_value: float
    smallest: float
    largest: float
    note: str


@dataclass(frozen=True, slots=True)
class _Side:
    """An estimator in the shared directions.

    Attributes
    ----------
    values : ndarray of shape (d,)
    under_model : ndarray of shape (d, d)
        Covariance over ``sigma_u^2`` under the model at the ratio of the fit.
    printed : ndarray of shape (d, d)
        Covariance over the route's own variance, as its own printout takes it.
    variance : float
        The route's own variance.
    """

    values: FloatArray
    under_model: FloatArray
    printed: FloatArray
    variance: float


def shared_directions(curve: Curve) -> FloatArray:
    """Return L, an orthonormal basis of what both kinds of variation determine: shape (p, K_p - K_c)."""
    lost = np.hstack([curve.constant_white, curve.between_null])
    if lost.shape[1] == 0:
        return np.eye(curve.rank)
    left, _, _ = np.linalg.svd(lost, full_matrices=True)
    return np.asarray(left[:, lost.shape[1] :])


def contrasts(curve: Curve, fit: Fit, products: UnitProducts | None = None) -> tuple[Contrast, ...]:
    """Compute every contrast at the ratio and variances of a fit.

    Parameters
    ----------
    curve : Curve
    fit : Fit
        A curve route with a positive idiosyncratic variance.
    products : UnitProducts, optional
        Of the same rows: adds cluster-robust contrasts.

    Returns
    -------
    tuple of Contrast
        Empty where there is no shared direction or the fit has no finite ratio.
    """
    directions = shared_directions(curve)
    if directions.shape[1] == 0 or not np.isfinite(fit.ratio) or curve.df_within < 1:
        return ()
    inside, gls = _within(curve, directions), _gls(curve, fit.ratio, directions)
    common = fit.idiosyncratic_variance
    found: list[Contrast] = []
    for weights in ("T / (1 + T psi)", "size", "one"):
        between = _between(curve, fit.ratio, weights, directions)
        for variance in ("one idiosyncratic variance", "each route's own"):
            own = variance != "one idiosyncratic variance"
            v_w, v_g, v_b = (
                (side.variance * side.printed if own else common * side.under_model) / curve.unit
                for side in (inside, gls, between)
            )
            if weights == "T / (1 + T psi)":
                found.append(
                    _contrast(("within - gls", variance, "none"), inside.values - gls.values, v_w - v_g, v_w)
                )
            found.append(
                _contrast(("gls - between", variance, weights), gls.values - between.values, v_b - v_g, v_w)
            )
            found.append(
                _contrast(
                    ("within - between", variance, weights), inside.values - between.values, v_w + v_b, v_w
                )
            )
            if weights == "T / (1 + T psi)":
                found.append(_unit_means(curve, fit, inside, between, own))
    if products is not None:
        found += _robust(curve, fit, products, directions)
    return tuple(found)


def _robust(curve: Curve, fit: Fit, products: UnitProducts, directions: FloatArray) -> list[Contrast]:
    """Test the contrasts with a covariance robust to any dependence within units.

    ``b_w`` and ``b_b``, weights ``T / (1 + T psi)``, are the two halves of the regression with unit means; with
    its residuals and one multiplier N / (N - 1) the within - between, within - GLS and unit-means forms are one
    statistic, since the three contrasts are linear images of one another (Arellano 1993).
    """
    inside = regression_of(curve, products, np.inf)
    between = regression_of(curve, products, "between", curve.sizes / (1.0 + curve.sizes * fit.ratio))
    to_white = np.linalg.inv(curve.to_beta[:, :-1])
    parts = [directions.T @ to_white @ side.root for side in (inside, between)]
    influence = inside.scores() @ parts[0].T - between.scores() @ parts[1].T
    units, d = influence.shape
    gap = _within(curve, directions).values - _between(curve, fit.ratio, "T / (1 + T psi)", directions).values
    covariance = influence.T @ influence * (units / (units - 1.0))
    measure = parts[0] @ parts[0].T
    name = "cluster-robust, multiplier N/(N - 1)"
    if units <= d:
        reason = f"{units} units for {d} directions: a cluster-robust covariance of this rank does not exist"
        return [Contrast("unit means", name, "T / (1 + T psi)", np.nan, d, np.nan, np.nan, np.nan, reason)]
    item = _contrast(("unit means", name, "T / (1 + T psi)"), gap, covariance, measure)
    return [item, replace(item, name="within - between"), replace(item, name="within - gls", weights="none")]


def contrast_table(found: tuple[Contrast, ...]) -> pd.DataFrame:
    """Return contrasts as a table."""
    columns = [
        "contrast",
        "variance",
        "between_weights",
        "statistic",
        "df",
        "p_value",
        "smallest",
        "largest",
        "note",
    ]
    rows = [
        [
            item.name,
            item.variance,
            item.weights,
            item.statistic,
            item.df,
            item.p_value,
            item.smallest,
            item.largest,
            item.note,
        ]
        for item in found
    ]
    return pd.DataFrame(rows, columns=columns)


def contrast_terms(curve: Curve, fit: Fit, within: Fit) -> pd.DataFrame:
    """Return both sides of the within - GLS contrast for each covariate, with one idiosyncratic variance.

    Returns
    -------
    DataFrame
        ``term, within, gls, difference, difference_se, in_se`` (in standard errors of the GLS coefficient),
        ``z``, ``reason``; a coefficient that within variation does not determine has no contrast, and a
        column without shared variation no ``z``.
    """
    rows: list[list[object]] = []
    inside = within.root @ within.root.T
    gls = fit.root @ fit.root.T
    for j, term in enumerate(curve.names):
        if not curve.free_within[j]:
            rows.append([term, np.nan, fit.beta[j], *[np.nan] * 4, curve.reasons["within"].get(term, "")])
            continue
        gap = within.beta[j] - fit.beta[j]
        square = fit.idiosyncratic_variance * (inside[j, j] - gls[j, j])
        none = square <= 64.0 * EPS * curve.condition * fit.idiosyncratic_variance * inside[j, j]
        error = 0.0 if none else float(np.sqrt(square))
        z = np.nan if none else gap / error
        reason = "no variation between unit means: nothing to contrast" if none else ""
        scale = float(np.sqrt(fit.idiosyncratic_variance * gls[j, j]))
        rows.append([term, within.beta[j], fit.beta[j], gap, error, gap / scale, z, reason])
    return pd.DataFrame(
        rows, columns=["term", "within", "gls", "difference", "difference_se", "in_se", "z", "reason"]
    )


def _within(curve: Curve, directions: FloatArray) -> _Side:
    p = curve.rank
    slope = curve.within_root @ ((curve.within[:, :p] @ curve.within_root).T @ curve.within[:, p])
    root = directions.T @ curve.within_root
    return _Side(
        directions.T @ slope,
        root @ root.T,
        root @ root.T,
        curve.unit * curve.within_residual / curve.df_within,
    )


def _gls(curve: Curve, psi: float, directions: FloatArray) -> _Side:
    point = curve.at(psi)
    root = directions.T @ curve.gls_root(psi)
    return _Side(
        -directions.T @ point.white[:-1],
        root @ root.T,
        root @ root.T,
        point.residual / (curve.n - curve.rank),
    )


def _between(curve: Curve, psi: float, weights: str, directions: FloatArray) -> _Side:
    """Between regression with the given weights; its own variance is its residual variance over ``N - K_p``."""
    p = curve.rank
    weight = {"size": curve.sizes, "one": np.ones(len(curve.sizes))}.get(
        weights, curve.sizes / (1.0 + curve.sizes * psi)
    )
    stacked = (np.sqrt(weight)[:, None, None] * curve.between).reshape(-1, p + 1)
    basis = _complement(curve.between_null, p)
    root = basis @ root_of(stacked[:, :p] @ basis)
    slope = root @ ((stacked[:, :p] @ root).T @ stacked[:, p])
    left = stacked @ np.append(-slope, 1.0)
    df = curve.units - curve.rank_between
    variance = curve.unit * float(left @ left) / df if df > 0 else np.nan
    spread = directions.T @ root
    # a unit mean has variance sigma_u^2 (1 + T psi) / T
    noise = np.sqrt(weight * (1.0 + curve.sizes * psi) / curve.sizes)
    noisy = (noise[:, None, None] * (np.sqrt(weight)[:, None, None] * curve.between)).reshape(-1, p + 1)[
        :, :p
    ]
    middle = noisy @ root @ spread.T
    return _Side(directions.T @ slope, middle.T @ middle, spread @ spread.T, variance)


def _complement(null: FloatArray, p: int) -> FloatArray:
    """Return an orthonormal basis of what is orthogonal to some columns."""
    if null.shape[1] == 0:
        return np.eye(p)
    return np.asarray(np.linalg.svd(null, full_matrices=True)[0][:, null.shape[1] :])


def _unit_means(curve: Curve, fit: Fit, inside: _Side, between: _Side, own: bool) -> Contrast:
    """Wald test of the added unit means; own variance: residual variance of the regression that holds them."""
    variance = fit.idiosyncratic_variance
    name = "one idiosyncratic variance"
    if own:
        name = "each route's own"
        df = curve.n - curve.rank_within - curve.rank_between
        rest = curve.unit * curve.within_residual + between.variance * (curve.units - curve.rank_between)
        variance = rest / df if df > 0 else np.nan
    spread = inside.under_model + between.under_model
    gap = between.values - inside.values
    variance /= curve.unit
    return _contrast(
        ("unit means", name, "T / (1 + T psi)"), gap, variance * spread, variance * between.under_model
    )


def _contrast(
    label: tuple[str, str, str], gap: FloatArray, covariance: FloatArray, measure: FloatArray
) -> Contrast:
    """Form the statistic if the covariance of the contrast is positive definite; say so if it is not."""
    name, variance, weights = label
    df = gap.size
    if not np.isfinite(covariance).all():
        reason = "a route has no variance of its own here: no degrees of freedom"
        return Contrast(name, variance, weights, np.nan, df, np.nan, np.nan, np.nan, reason)
    values, vectors = np.linalg.eigh(measure)
    scale = vectors / np.sqrt(values)
    inner = scale.T @ covariance @ scale
    eigenvalues = np.linalg.eigvalsh((inner + inner.T) / 2.0)
    smallest, largest = float(eigenvalues[0]), float(eigenvalues[-1])
    if smallest <= 16.0 * df * EPS * max(1.0, largest):
        below = int((eigenvalues <= 0.0).sum())
        reason = (
            f"the difference of the two covariances is not positive definite ({below} of {df} eigenvalues not above "
            "zero), "
            "so it is no covariance and there is no statistic"
        )
        return Contrast(name, variance, weights, np.nan, df, np.nan, smallest, largest, reason)
    turned = scale.T @ gap
    statistic = float(turned @ np.linalg.solve(inner, turned))
    return Contrast(
        name,
        variance,
        weights,
        statistic,
        df,
        float(scipy.stats.chi2.sf(statistic, df)),
        smallest,
        largest,
        "",
    )
