"""Minimum distance between the reduced form and the random-intercept model with a projected unit effect.

    theta = argmin (rho - H theta)' S^-1 (rho - H theta),    H_t = Q'Z_t

(Chamberlain 1982, 1984; equation numbers from memory are not given). Weights S:

- ``optimal``: the robust covariance Omega of `reduced_form`. Covariance of theta ``(H'Omega^-1 H)^-1``; the distance
  D is chi-square with ``q = T r - p`` degrees of freedom in large samples, and so is the difference of two distances
  with the same weights under further restrictions. Omega has rank below N: with N units and m coefficients it is
  singular at ``N <= m``, and with few units per coefficient tests over-reject and standard errors are too small
  (Altonji & Segal 1996, from memory).
- ``homoscedastic``: ``(V'V/N) kron I``, errors of any covariance within units that is the same for all.
- ``random_effects``: ``s (I + psi 11') kron I`` at the ratio of a route: generalised least squares with the projection,
  so that slopes are the within slopes.

The latter two have the sandwich ``(H'S^-1 H)^-1 H'S^-1 Omega S^-1 H (H'S^-1 H)^-1`` as covariance, and their
distance is not chi-square: with ``S = LL'``, ``M = I - A(A'A)^-1 A'``, ``A = L^-1 H`` it is, in large samples, the
weighted sum of chi-squares with the eigenvalues of ``M L^-1 Omega L^-T M`` as weights (`minimum_distance_law`).

Each figure has a second reference, for few units, which holds in so far as ``N Omega`` is Wishart with ``v = N - r``
degrees of freedom; with infinitely many units it is the first. For optimal weights

    D (v - q + 1)/(N q) ~ F(q, v - q + 1)
    Var theta = (1 + D/N) N/(v - q) (H'Omega^-1 H)^-1,    t with v - q

(Hotelling 1931; Rao 1959 for generalised least squares with an estimated covariance, both from memory); for the other
weights the covariance is N/v times the sandwich, t with v, and the weights of chi-squares grow by N/v, or by
``N/(v - T - 1)`` where the T x T covariance is estimated: the mean of an inverse Wishart matrix. The use here, for
moments that are not normal, is our own, and an approximation; the calibration by simulation shows what it is worth.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy
from numpy.typing import NDArray

from mixbridge.correlated.minimum_distance_law import upper_tail
from mixbridge.correlated.reduced_form import LARGEST, ReducedForm, outer_rows

__all__ = ["WEIGHTS", "Distance", "distance_of", "weigh"]

FloatArray = NDArray[np.float64]
WEIGHTS = ("optimal", "homoscedastic", "random_effects")
ESTIMATED = "estimated"
SINGULAR = 1e-10
"""Smallest over largest singular value of a factor, columns of unit length, below which its square is singular: less
than six of sixteen digits would be left."""


@dataclass(frozen=True, slots=True, eq=False)
class Distance:
    """Minimum distance with one kind of weights.

    Attributes
    ----------
    weights : str
    status : str
        ``estimated``, or ``not estimable: <reason>``.
    beta : ndarray of shape (p,)
        Parameters by name of the reduced form; NaN where not identified.
    covariance : ndarray of shape (p, p)
        Robust to heteroscedasticity and to dependence within units; in large samples.
    distance : float
        Value of the criterion at the minimum.
    df : int
        Coefficients of the reduced form less parameters.
    p_value, p_few_units : float
        Of the distance, in large samples and for few units.
    reference : str
        What the distance is compared with, or why there is no p value.
    inflation, residual_df : float
        For few units: factor of the covariance, and degrees of freedom of t.
    """

    weights: str
    status: str
    beta: FloatArray
    covariance: FloatArray
    distance: float = np.nan
    df: int = 0
    p_value: float = np.nan
    p_few_units: float = np.nan
    reference: str = ""
    inflation: float = np.nan
    residual_df: float = np.nan

    @property
    def estimated(self) -> bool:
        """Whether there are figures."""
        return self.status == ESTIMATED


def weigh(form: ReducedForm, weights: str, ratio: float, scale: float = 1.0) -> FloatArray | str:
    """Return a lower triangular root of the weights, or why there are none.

    Parameters
    ----------
    form : ReducedForm
    weights : str
        One of `WEIGHTS`.
    ratio, scale : float
        Variance ratio and idiosyncratic variance, for ``random_effects``.

    Returns
    -------
    ndarray or str
        L with ``LL' = S`` of shape (T r, T r) for ``optimal``; for the others of shape (T, T), with
        ``LL' kron I = S``.
    """
    if weights == "random_effects":
        return _compound(form.coefficients.shape[0], ratio, scale)
    if form.vanishing:
        shown = ", ".join(map(str, form.vanishing))
        return (
            f"the covariates fit the outcome exactly in {shown}: the covariance of the residuals is singular"
        )
    return _optimal(form) if weights == "optimal" else _homoscedastic(form)


def _compound(periods: int, ratio: float, scale: float) -> FloatArray | str:
    if not np.isfinite(ratio):
        return "the route has no finite variance ratio"
    if not scale > 0.0:
        return "the route has no positive idiosyncratic variance"
    return np.asarray(np.linalg.cholesky(scale * (np.eye(periods) + ratio * np.ones((periods, periods)))))


def _homoscedastic(form: ReducedForm) -> FloatArray | str:
    periods = form.residuals.shape[1]
    inner = np.linalg.qr(form.residuals, mode="r") / np.sqrt(form.units)
    if form.left < periods or _reciprocal(inner) < SINGULAR:
        return f"{form.left} residual degrees of freedom for {periods} periods: their covariance is singular"
    return np.asarray(inner.T)


def _optimal(form: ReducedForm) -> FloatArray | str:
    if form.units <= form.moments:
        return (
            f"{form.units} units for {form.moments} coefficients of the reduced form: their covariance cannot be "
            "estimated without a singular matrix, which needs more units than coefficients, and many more to be "
            "trusted"
        )
    if form.moments > LARGEST:
        return (
            f"{form.moments} coefficients of the reduced form; a covariance is formed for {LARGEST} at most"
        )
    factor = form.outer_factor()
    if _reciprocal(factor) < SINGULAR:
        return "the covariance of the reduced form is singular to rounding: some residuals vanish"
    return factor.T


def distance_of(form: ReducedForm, weights: str, ratio: float, scale: float = 1.0) -> Distance:
    """Minimise the distance with one kind of weights.

    Parameters
    ----------
    form : ReducedForm
    weights : str
        One of `WEIGHTS`.
    ratio, scale : float
        Variance ratio and idiosyncratic variance, for ``random_effects``.

    Returns
    -------
    Distance
    """
    count, df = len(form.names), form.moments - len(form.kept)
    lower = weigh(form, weights, ratio, scale)
    if isinstance(lower, str):
        empty = np.full(count, np.nan), np.full((count, count), np.nan)
        return Distance(weights, f"not estimable: {lower}", *empty, df=df)
    h = _whiten(lower, form.restrictions)
    target = _whiten(lower, form.coefficients[:, :, None])[:, 0]
    q, upper = np.linalg.qr(h)
    scaled = scipy.linalg.solve_triangular(upper, q.T @ target)
    rest = target - h @ scaled
    found = float(rest @ rest)
    inverse = scipy.linalg.solve_triangular(upper, np.eye(len(upper)))
    if weights == "optimal":
        root = inverse
        known = _optimal_law(form, found, df)
    else:
        errors = scipy.linalg.solve_triangular(lower, form.residuals.T, lower=True).T
        scores = _scores(errors, form.basis, q)
        root = inverse @ scores.T
        known = _other_law(form, weights, found, df, errors=errors, directions=q, scores=scores)
    beta, covariance = np.full(count, np.nan), np.full((count, count), np.nan)
    beta[form.kept], root = form.in_data_units(scaled, root)
    covariance[np.ix_(form.kept, form.kept)] = root @ root.T
    return Distance(weights, ESTIMATED, beta, covariance, found, df, *known)


def _optimal_law(form: ReducedForm, found: float, df: int) -> tuple[float, float, str, float, float]:
    """Return p values, reference, and factor and degrees of freedom for few units, with optimal weights."""
    n, left = form.units, form.left - df
    inflation = (1.0 + found / n) * n / left if left > 0 else np.nan
    if df == 0:
        return np.nan, np.nan, "exactly identified: no restriction to test", inflation, float(left)
    p = float(scipy.stats.chi2.sf(found, df))
    if left < 0:
        text = (
            "chi-square; none for few units, which needs more residual degrees of freedom than restrictions"
        )
        return p, np.nan, text, np.nan, np.nan
    few = float(scipy.stats.f.sf(found * (left + 1) / (n * df), df, left + 1))
    return p, few, f"chi-square; for few units F({df}, {left + 1})", inflation, float(left)


def _other_law(
    form: ReducedForm,
    weights: str,
    found: float,
    df: int,
    *,
    errors: FloatArray,
    directions: FloatArray,
    scores: FloatArray,
) -> tuple[float, float, str, float, float]:
    """Return the same with simpler weights; whitened residuals, basis of the whitened restrictions, scores."""
    n, left = form.units, form.left
    known = n / left, float(left)
    if df == 0:
        return np.nan, np.nan, "exactly identified: no restriction to test", *known
    if left < errors.shape[1]:
        text = f"not given: {left} residual degrees of freedom for {errors.shape[1]} periods"
        return np.nan, np.nan, text, *known
    if min(n, form.moments) > LARGEST:
        text = f"not given: {min(n, form.moments)} eigenvalues; {LARGEST} are computed at most"
        return np.nan, np.nan, text, *known
    spread = _eigenvalues(errors, form.basis, directions, scores)[-df:]
    p = upper_tail(found, spread)
    still = left - errors.shape[1] - 1 if weights == "homoscedastic" else left
    text = "weighted sum of chi-squares, robust"
    if still <= 0:
        return p, np.nan, f"{text}; none for few units: {left} residual degrees of freedom", *known
    return p, upper_tail(found, spread * (n / still)), text, *known


def _eigenvalues(
    errors: FloatArray, basis: FloatArray, directions: FloatArray, scores: FloatArray
) -> FloatArray:
    """Return the eigenvalues of ``M L^-1 Omega L^-T M``, ascending, from the smaller of two Gram matrices."""
    units, moments = errors.shape[0], directions.shape[0]
    if units <= moments:
        gram = (errors @ errors.T) * (basis @ basis.T) - scores @ scores.T
    else:
        gram = np.zeros((moments, moments))
        for start in range(0, units, moments):
            rows = outer_rows(errors[start : start + moments], basis[start : start + moments])
            rows = rows - scores[start : start + moments] @ directions.T
            gram += rows.T @ rows
    return np.asarray(np.clip(np.linalg.eigvalsh(gram), 0.0, None))


def _scores(errors: FloatArray, basis: FloatArray, directions: FloatArray) -> FloatArray:
    """Return ``(v_i kron q_i)' directions`` for each unit, shape (N, p), without the N x T r matrix."""
    stacked = directions.reshape(errors.shape[1], basis.shape[1], -1)
    total = np.zeros((errors.shape[0], stacked.shape[2]))
    for t in range(errors.shape[1]):
        total += errors[:, t, None] * (basis @ stacked[t])
    return total


def _whiten(lower: FloatArray, values: FloatArray) -> FloatArray:
    """Return ``L^-1 values`` for values of shape (T, r, k), as (T r, k)."""
    periods, r, k = values.shape
    flat = values.reshape(lower.shape[0], -1)
    return np.asarray(scipy.linalg.solve_triangular(lower, flat, lower=True).reshape(periods * r, k))


def _reciprocal(factor: FloatArray) -> float:
    """Return the smallest over the largest singular value, columns brought to unit length."""
    length = np.sqrt((factor**2).sum(axis=0))
    if not length.size or length.min() == 0.0:
        return 0.0
    values = np.linalg.svd(factor / length, compute_uv=False)
    return float(values[-1] / values[0])
