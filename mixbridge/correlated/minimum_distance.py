"""Minimum distance between the reduced form and the random-intercept model with a projected unit effect.

    theta = argmin (rho - H theta)' S^-1 (rho - H theta),    H_t = Q'Z_t

(Chamberlain 1982, 1984; equation numbers from memory are not given). Weights S:

- ``optimal``: the robust covariance Omega of `reduced_form`. Covariance of theta ``(H'Omega^-1 H)^-1``; the distance
  is chi-square with ``T r - p`` degrees of freedom, and so is the difference of two distances with the same weights
  under further restrictions. Omega has rank below N: with N units and m coefficients it is singular at ``N <= m``, and
  with few units per coefficient tests over-reject and standard errors are too small (Altonji & Segal 1996, from
  memory).
- ``homoscedastic``: ``(V'V/N) kron I``, errors of any covariance within units that is the same for all.
- ``random_effects``: ``(I + psi 11') kron I`` at the ratio of a route: generalised least squares with the projection,
  so that slopes are the within slopes.

The latter two have the sandwich ``(H'S^-1 H)^-1 H'S^-1 Omega S^-1 H (H'S^-1 H)^-1`` as covariance.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import scipy
from numpy.typing import NDArray

from mixbridge.correlated.reduced_form import ReducedForm

__all__ = ["WEIGHTS", "Distance", "distance_of", "weigh"]

FloatArray = NDArray[np.float64]
WEIGHTS = ("optimal", "homoscedastic", "random_effects")
ESTIMATED = "estimated"


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
        Robust to heteroscedasticity and to dependence within units.
    distance : float
        Value of the criterion at the minimum.
    df : int
        Coefficients of the reduced form less parameters.
    reference : str
        When the distance is chi-square.
    """

    weights: str
    status: str
    beta: FloatArray
    covariance: FloatArray
    distance: float = np.nan
    df: int = 0
    reference: str = ""
    root: FloatArray | None = field(default=None, repr=False)

    @property
    def estimated(self) -> bool:
        """Whether there are figures."""
        return self.status == ESTIMATED

    @property
    def p_value(self) -> float:
        """Upper tail of the chi-square distribution at the distance."""
        return float(scipy.stats.chi2.sf(self.distance, self.df)) if self.df > 0 else np.nan


def weigh(form: ReducedForm, weights: str, ratio: float) -> FloatArray | str:
    """Return L with ``L L' = S`` (lower triangular), or why there are no such weights.

    Parameters
    ----------
    form : ReducedForm
    weights : str
        One of `WEIGHTS`.
    ratio : float
        For ``random_effects``.

    Returns
    -------
    ndarray of shape (T r, T r) or str
    """
    periods, r = form.coefficients.shape
    if weights == "optimal":
        if form.units <= form.moments:
            return (
                f"{form.units} units for {form.moments} coefficients of the reduced form: their covariance cannot be "
                "estimated without a singular matrix, which needs more units than coefficients, and many more to be "
                "trusted"
            )
        factor = form.outer_factor()
        if _reciprocal(factor) < 1e-10:
            return "the covariance of the reduced form is singular to rounding: some residuals vanish"
        return factor.T
    if weights == "homoscedastic":
        inner = np.linalg.qr(form.residuals, mode="r") / np.sqrt(form.units)
        if form.units - r < periods or _reciprocal(inner) < 1e-10:
            return f"{form.units - r} residual degrees of freedom for {periods} periods: their covariance is singular"
    else:
        if not np.isfinite(ratio):
            return "the route has no finite variance ratio"
        inner = np.linalg.cholesky(np.eye(periods) + ratio * np.ones((periods, periods))).T
    return np.kron(inner.T, np.eye(r))


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
    count = len(form.names)
    lower = weigh(form, weights, ratio)
    if isinstance(lower, str):
        empty = np.full(count, np.nan), np.full((count, count), np.nan)
        return Distance(weights, f"not estimable: {lower}", *empty)
    if weights == "random_effects":
        lower = lower * np.sqrt(scale)
    h = scipy.linalg.solve_triangular(lower, form.restrictions.reshape(form.moments, -1), lower=True)
    target = scipy.linalg.solve_triangular(lower, form.coefficients.ravel(), lower=True)
    q, upper = np.linalg.qr(h)
    scaled = scipy.linalg.solve_triangular(upper, q.T @ target)
    rest = target - h @ scaled
    inverse = scipy.linalg.solve_triangular(upper, np.eye(len(upper)))
    if weights == "optimal":
        root = inverse
    else:
        # the robust covariance of the whitened moments, between the two halves of the sandwich
        meat = scipy.linalg.solve_triangular(lower, form.outer_factor().T, lower=True)
        root = inverse @ (q.T @ meat)
    beta, covariance = np.full(count, np.nan), np.full((count, count), np.nan)
    beta[form.kept] = scaled / form.scale
    root = root / form.scale[:, None]
    covariance[np.ix_(form.kept, form.kept)] = root @ root.T
    return Distance(
        weights=weights,
        status=ESTIMATED,
        beta=beta,
        covariance=covariance,
        distance=float(rest @ rest),
        df=form.moments - len(form.kept),
        reference=_REFERENCES[weights],
        root=root,
    )


_REFERENCES: Mapping[str, str] = {
    "optimal": "chi-square in large samples",
    "homoscedastic": "chi-square in large samples if errors have one covariance for all units and covariates",
    "random_effects": "chi-square in large samples if errors have the covariance of the random-intercept model",
}


def _reciprocal(factor: FloatArray) -> float:
    """Return the smallest over the largest singular value, columns brought to unit length."""
    length = np.sqrt((factor**2).sum(axis=0))
    if not length.size or length.min() == 0.0:
        return 0.0
    values = np.linalg.svd(factor / length, compute_uv=False)
    return float(values[-1] / values[0])
