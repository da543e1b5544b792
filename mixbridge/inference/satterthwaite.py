"""Satterthwaite degrees of freedom for linear combinations of coefficients, from the size classes.

The variance of ``l'beta_hat`` is ``v = l'Phi l`` with ``Phi = (X'V^-1 X)^-1 = sigma_u^2 A(psi)^-1``. With
``S_2 = sum_T w_T^2 B_T`` and ``w_T = T/(1 + T psi)``, ``dA/dpsi = -S_2`` and therefore

    dv / dsigma_a^2 = l'A^-1 S_2 A^-1 l
    dv / dsigma_u^2 = l'A^-1 (A - psi S_2) A^-1 l = l'A^-1 (W + sum_T T/(1 + T psi)^2 B_T) A^-1 l
    df = 2 v^2 / (g'C g)

g the gradient and C the sampling covariance of the two components, which each route states (Satterthwaite
1946, for this use Giesbrecht & Burns 1985; places from memory). Both parts of g are sums of squares, so
nothing cancels in them.

**Scale.** Where the covariance is ``s^2 A(psi_hat)^-1`` with ``s^2 = r(psi_hat)/(n - K)`` (or ``/n``), the
variance that is estimated has another sampling law. For `ml` and `reml` that scale is a constant multiple of
the route's own, and degrees of freedom do not see constants. For quadratic routes the delta method is applied
to ``log s^2(psi_hat) + log f(psi_hat)``, ``f = l'A^-1 l``: at fixed ψ ``s^2`` is ``sigma_u^2 chi^2(n - K)/(n
- K)``, its covariance with a form ``y'Dy``, ``DX = 0``, is ``2 sigma_u^2 E(y'Dy)/(n - K)``, and ``E r' =
-sigma_u^2 tr(P_0 ZZ')``, so that

    2/df = 2/(n - K) + k^2 Var(psi_hat) + 2 k Cov(log s^2, psi_hat),   k = l'A^-1 S_2 A^-1 l / f - tr(P_0
    ZZ')/(n - K)

and the last term vanishes for routes with unbiased components.

**At ψ = 0** (a truncated estimate, or an optimum on the boundary) the formula is evaluated with the
derivative to the right and C at a unit variance of zero. It then counts variation of an estimate that cannot
go below zero as if it could; with ψ held at zero the rule would be t with n - K. The result says so.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import OptionError
from mixbridge.ratio import Curve
from mixbridge.routes.fitting import named_route
from mixbridge.routes.forms import expectations
from mixbridge.routes.quadratic import QUADRATIC
from mixbridge.routes.record import Fit

__all__ = [
    "AT_ZERO",
    "Decomposition",
    "Degrees",
    "JointDegrees",
    "Orthonormal",
    "joint_satterthwaite",
    "orthonormal",
    "satterthwaite",
]

FloatArray = NDArray[np.float64]
Decomposition = Literal["invariant", "as_written"]

AT_ZERO = (
    "at an estimated ratio of zero the rule uses the derivative to the right of zero and the components' "
    "covariance at zero; small-sample rules are not defined as usual there, and with the ratio held at zero "
    "the rule would be t with n - K"
)


@dataclass(frozen=True, slots=True)
class Degrees:
    """Degrees of freedom of several linear combinations.

    Attributes
    ----------
    df : ndarray of shape (q,)
        NaN where the rule is not available.
    notes : tuple of str
        What a reader should know: the boundary, or why the rule is not available.
    """

    df: FloatArray
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class JointDegrees:
    """Denominator degrees of freedom of a joint F test.

    Attributes
    ----------
    df : float
    parts : ndarray of shape (q,)
        Degrees of freedom of each one-dimensional part.
    notes : tuple of str
    """

    df: float
    parts: FloatArray
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Orthonormal:
    """The design at one ψ in coordinates where ``X'V_0^-1 X = I``.

    Attributes
    ----------
    psi : float
    root : ndarray of shape (p, p)
        J with ``JJ' = (X'V_0^-1 X)^-1`` in the units of the data: a combination l has coordinates ``J'l``.
    within : ndarray of shape (k, p)
        Factor of ``J'X'QXJ``.
    between : ndarray of shape (G, r, p)
        Factors of ``J' B_T J``.
    sizes, counts : ndarray of shape (G,)
    """

    psi: float
    root: FloatArray
    within: FloatArray
    between: FloatArray
    sizes: FloatArray
    counts: FloatArray

    @property
    def shrink(self) -> FloatArray:
        """``1/(1 + T psi)`` by size."""
        return 1.0 / (1.0 + self.sizes * self.psi)

    def coordinates(self, rows: FloatArray) -> FloatArray:
        """Return ``J'L'``, shape (p, q), for combinations as rows of L."""
        return np.asarray(self.root.T @ rows.T)

    def squares(self, coordinates: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return ``v / sigma_u^2`` and both derivatives of v for each column of coordinates."""
        inside = ((self.within @ coordinates) ** 2).sum(axis=0)
        means = ((self.between @ coordinates) ** 2).sum(axis=1)
        unit = (self.sizes * self.shrink) ** 2 @ means
        idiosyncratic = inside + (self.sizes * self.shrink**2) @ means
        return (coordinates**2).sum(axis=0), np.asarray(unit), np.asarray(idiosyncratic)

    def weighted(self, on_within: float, on_means: FloatArray) -> FloatArray:
        """Return ``J'(on_within X'QX + sum_T on_means_T B_T)J``."""
        rows = self.between.shape[0] * self.between.shape[1]
        scaled = (on_means[:, None, None] * self.between).reshape(rows, -1)
        return np.asarray(
            on_within * (self.within.T @ self.within) + self.between.reshape(rows, -1).T @ scaled
        )


def orthonormal(curve: Curve, psi: float) -> Orthonormal:
    """Return the design at ψ in coordinates where ``X'V_0^-1 X = I``."""
    p = curve.rank
    root = curve.gls_root(psi)
    return Orthonormal(
        psi=psi,
        root=curve.to_beta[:, :p] @ root / np.sqrt(curve.unit),
        within=curve.within[:, :p] @ root,
        between=curve.between[:, :, :p] @ root,
        sizes=curve.sizes,
        counts=curve.counts,
    )


def satterthwaite(curve: Curve, fit: Fit, rows: FloatArray) -> Degrees:
    """Return Satterthwaite degrees of freedom for linear combinations of the coefficients of one fit.

    Parameters
    ----------
    curve : Curve
        The panel the fit was made on (without one-row units if the fit left them out).
    fit : Fit
        Any route; those without a sampling covariance of components (`between`, `first_difference`) get NaN
        and the reason.
    rows : ndarray of shape (q, p)
        Combinations l, in the order of the terms.

    Returns
    -------
    Degrees

    Raises
    ------
    OptionError
        If the curve is not the one the fit was made on.
    """
    if (curve.n, curve.names) != (fit.rows, fit.terms):
        raise OptionError(
            f"the fit used {fit.rows} rows and {fit.terms}, "
            f"the moments hold {curve.n} rows and {curve.names}."
        )
    q = rows.shape[0]
    if not np.isfinite(fit.scale):
        return _none(q, f"the route gives no standard errors: {fit.status}")
    if fit.route in ("pooled", "within"):  # a chi-square scale times a constant
        return Degrees(np.full(q, 2.0 * fit.scale**2 / fit.components_covariance[1, 1]), ())
    if not np.isfinite(fit.components_covariance).all():
        return _none(q, "the route has no sampling covariance of its variance components")
    notes = (AT_ZERO,) if fit.ratio == 0.0 else ()
    form = orthonormal(curve, fit.ratio)
    value, unit, idiosyncratic = form.squares(form.coordinates(rows))
    route = named_route(fit.route)[0]
    if fit.conventions.get("scale", "own") == "own" or route in ("ml", "reml"):
        gradient = np.array([unit, idiosyncratic]) / value
        spread = np.einsum(
            "iq,ij,jq->q", gradient, fit.components_covariance / fit.idiosyncratic_variance**2, gradient
        )
    else:
        spread = _spread_of_residual_scale(curve, fit, form, unit / value, route)
    return Degrees(np.asarray(2.0 / spread), notes)


def joint_satterthwaite(
    curve: Curve, fit: Fit, rows: FloatArray, decomposition: Decomposition = "invariant"
) -> JointDegrees:
    """Return denominator degrees of freedom for the F test of ``L beta = c``, q independent rows.

    The Wald statistic is split into q uncorrelated squared t statistics with degrees of freedom ν_m; with ``E
    = sum nu_m/(nu_m - 2)`` the F statistic ``Wald/q`` is referred to ``F(q, 2E/(E - q))``, the law with the
    same expectation (Fai & Cornelius 1996, from memory).

    Parameters
    ----------
    curve, fit, rows
        As in `satterthwaite`.
    decomposition : {"invariant", "as_written"}
        How the statistic is split. ``as_written``: by the eigenvectors of ``L Phi L'``, as published; the
        answer then depends on how the same hypothesis is written (units of the covariates, order of
        differences) and is arbitrary where eigenvalues are equal. ``invariant``: by the vectors that
        diagonalise both ``L Phi L'`` and its derivative in ψ, so that the parts stay uncorrelated when ψ
        moves; this choice is the project's own and does not depend on how the hypothesis is written.

    Returns
    -------
    JointDegrees
        Where some ν_m is at most 2 its term has no expectation; the smallest ν_m is used (which the rule
        approaches as ν_m falls to 2), and a note says so.
    """
    q = rows.shape[0]
    plain = satterthwaite(curve, fit, rows)
    if q == 1 or not np.isfinite(plain.df).all():
        return JointDegrees(float(plain.df[0]) if q == 1 else np.nan, plain.df, plain.notes)
    if fit.route in ("pooled", "within"):
        return JointDegrees(float(plain.df[0]), plain.df, plain.notes)
    form = orthonormal(curve, fit.ratio)
    coordinates = form.coordinates(rows)
    if decomposition == "as_written":
        turned = np.linalg.eigh(coordinates.T @ coordinates)[1].T @ rows
    else:
        basis, upper = np.linalg.qr(coordinates)
        means = form.between @ basis
        weights = (form.sizes * form.shrink) ** 2
        turn = np.linalg.eigh(np.einsum("t,tri,trj->ij", weights, means, means))[1]
        turned = np.linalg.solve(upper, turn).T @ rows
    parts = satterthwaite(curve, fit, turned).df
    if parts.min() <= 2.0:
        note = (
            f"a part of the joint hypothesis has {parts.min():.3g} degrees of freedom, too few for the "
            "expectation that the rule matches: the smallest part's degrees of freedom are used"
        )
        return JointDegrees(float(parts.min()), parts, (*plain.notes, note))
    excess = float((2.0 / (parts - 2.0)).sum())  # E - q
    return JointDegrees(2.0 * (q + excess) / excess, parts, plain.notes)


def _none(q: int, reason: str) -> Degrees:
    return Degrees(np.full(q, np.nan), (reason,))


def _spread_of_residual_scale(
    curve: Curve, fit: Fit, form: Orthonormal, slope: FloatArray, route: str
) -> FloatArray:
    """Return the delta-method variance of ``log(s^2 f)``, ``s^2 = r(psi_hat)/(n - K)``; see above."""
    df = curve.n - curve.rank
    weights = form.sizes * form.shrink
    projected = float(curve.counts @ weights - np.trace(form.weighted(0.0, weights**2)))  # tr P_0 ZZ'
    k = slope - projected / df
    # from here on in units of sigma_u^2
    psi_gradient = np.array([1.0, -fit.ratio])
    covariance = fit.components_covariance / fit.idiosyncratic_variance**2
    pair = QUADRATIC[route](curve, fit.conventions)
    means = np.array([expectations(curve, one) for one in pair.forms]) @ np.array([1.0, fit.ratio])
    centre = np.linalg.solve(pair.system, means)[::-1]  # expected (unit, idiosyncratic)
    cross = 2.0 / df * float(psi_gradient @ centre)
    return np.asarray(2.0 / df + k**2 * float(psi_gradient @ covariance @ psi_gradient) + 2.0 * k * cross)
