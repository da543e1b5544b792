"""Kenward & Roger (1997) for REML: adjusted covariance, degrees of freedom, scaling, from the size classes.

With ``V = sigma_a^2 ZZ' + sigma_u^2 I``, ``V_a = ZZ'``, ``V_u = I``, ``Phi = (X'V^-1 X)^-1`` and W the
inverse expected information of ``(sigma_a^2, sigma_u^2)`` under REML,

    P_i     = X' (dV^-1/dsigma_i) X = -X'V^-1 V_i V^-1 X
    Q_ij    = X' (dV^-1/dsigma_i) V (dV^-1/dsigma_j) X = X'V^-1 V_i V^-1 V_j V^-1 X
    R_ij    = X'V^-1 (d^2 V/dsigma_i dsigma_j) V^-1 X = 0                     (V is linear in both variances)
    Lambda  = sum_ij W_ij (Q_ij - P_i Phi P_j - R_ij/4)
    Phi_A   = Phi + 2 Phi Lambda Phi

For a hypothesis ``L beta = c`` with l independent rows and ``Theta = L'(L Phi L')^-1 L``,

    A1 = sum_ij W_ij tr(Theta Phi P_i Phi) tr(Theta Phi P_j Phi)
    A2 = sum_ij W_ij tr(Theta Phi P_i Phi Theta Phi P_j Phi)
    B  = (A1 + 6 A2)/(2 l)
    g  = ((l + 1) A1 - (l + 4) A2)/((l + 2) A2)
    d  = 3 l + 2 (1 - g)
    c1 = g/d,   c2 = (l - g)/d,   c3 = (l + 2 - g)/d
    E* = 1/(1 - A2/l)
    V* = (2/l) (1 + c1 B)/((1 - c2 B)^2 (1 - c3 B))
    rho    = V*/(2 E*^2)
    m      = 4 + (l + 2)/(l rho - 1)
    lambda = m/(E* (m - 2))
    lambda (L beta_hat - c)'(L Phi_A L')^-1 (L beta_hat - c)/l  ~  F(l, m)

(Kenward & Roger 1997, Biometrics 53; equations from memory, each step proved again on dense matrices in the
tests). For ``l = 1`` these reduce to ``m = 2/A1``, ``lambda = 1``: Satterthwaite's degrees of freedom with
the expected information, and an adjusted standard error.

On a unit of size T the eigenvalues of ``sigma_u^2 V^-1`` are 1 (deviations) and ``1/(1 + T psi)`` (the mean),
those of ``ZZ'`` 0 and T. In coordinates with ``X'V_0^-1 X = I`` all matrices are therefore weighted sums of W
and the B_T; with ``w = T/(1 + T psi)``, ``h = 1/(1 + T psi)``

    -P_a : sum w^2 B_T            Q_aa : sum w^3 B_T
    -P_u : W + sum T h^2 B_T      Q_au : sum w^2 h B_T      Q_uu : W + sum T h^3 B_T

in powers of ``sigma_u^2`` that cancel against those of W, taken as ``W/sigma_u^4``.

**At ψ = 0** the expansion behind the method does not hold (the estimate cannot go below zero). The formulas
are evaluated there as they stand, with the information at zero, and the result says so; with ψ held at zero,
least squares with t(n - K) is the rule.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import OptionError
from mixbridge.inference.satterthwaite import orthonormal
from mixbridge.ratio import Curve
from mixbridge.routes.record import Fit

__all__ = ["AT_ZERO", "KenwardRoger", "ScaledF", "kenward_roger"]

FloatArray = NDArray[np.float64]

AT_ZERO = (
    "at an estimated ratio of zero the Kenward-Roger expansion does not hold; it is evaluated at zero as it "
    "stands, and with the ratio held at zero the rule would be t with n - K"
)


@dataclass(frozen=True, slots=True)
class ScaledF:
    """Reference of one joint hypothesis.

    Attributes
    ----------
    df : float
        m; NaN where the method gives no positive degrees of freedom or scaling.
    scaling : float
        λ, multiplies the F statistic that uses the adjusted covariance.
    a1, a2 : float
        The two traces everything else follows from.
    notes : tuple of str
    """

    df: float
    scaling: float
    a1: float
    a2: float
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True, eq=False)
class KenwardRoger:
    """The adjusted covariance, and what degrees of freedom follow from.

    Attributes
    ----------
    scale : float
        ``sigma_u^2``.
    bend : ndarray of shape (p, p)
        Λ in coordinates where ``X'V_0^-1 X = I``: ``Phi_A = sigma_u^2 J (I + 2 bend) J'``.
    root : ndarray of shape (p, p)
        J with ``JJ' = (X'V_0^-1 X)^-1``.
    spread : ndarray of shape (2, 2)
        ``W / sigma_u^4``, order (unit, idiosyncratic).
    slopes : ndarray of shape (2, p, p)
        ``-P_i`` in those coordinates, same order, without powers of ``sigma_u^2``.
    notes : tuple of str
    """

    scale: float
    bend: FloatArray
    root: FloatArray
    spread: FloatArray
    slopes: FloatArray
    notes: tuple[str, ...]

    @property
    def covariance(self) -> FloatArray:
        """``Phi_A``, the adjusted covariance of the coefficients."""
        return np.asarray(
            self.scale * (self.root @ (np.eye(self.bend.shape[0]) + 2.0 * self.bend) @ self.root.T)
        )

    def standard_error(self, row: FloatArray) -> float:
        """Return the adjusted standard error of one combination."""
        return float(np.sqrt(self.scale * (1.0 + 2.0 * self._excess(row)) * ((self.root.T @ row) ** 2).sum()))

    def _excess(self, row: FloatArray) -> float:
        coordinates = self.root.T @ row
        return float(coordinates @ self.bend @ coordinates / (coordinates @ coordinates))

    def wald_root(self, rows: FloatArray) -> FloatArray:
        """Return U upper triangular with ``U'U = L Phi_A L'``, through factors: offsets cost no digits."""
        inner = np.linalg.cholesky(np.eye(self.bend.shape[0]) + 2.0 * self.bend)
        return np.asarray(np.sqrt(self.scale) * np.linalg.qr(inner.T @ self.root.T @ rows.T, mode="r"))

    def degrees(self, rows: FloatArray) -> FloatArray:
        """Return m for each row taken alone (λ is 1 there)."""
        coordinates = self.root.T @ rows.T
        coordinates = coordinates / np.sqrt((coordinates**2).sum(axis=0))
        traces = np.einsum("iq,kij,jq->kq", coordinates, self.slopes, coordinates)
        return np.asarray(2.0 / np.einsum("kq,kl,lq->q", traces, self.spread, traces))

    def scaled_f(self, rows: FloatArray) -> ScaledF:
        """Return m and λ for the joint hypothesis of q independent rows."""
        basis = np.linalg.qr(self.root.T @ rows.T)[0]
        inner = np.einsum("ip,kij,jq->kpq", basis, self.slopes, basis)
        traces = np.trace(inner, axis1=1, axis2=2)
        a1 = float(traces @ self.spread @ traces)
        a2 = float(np.einsum("kl,kpq,lqp->", self.spread, inner, inner))
        return _reference(a1, a2, rows.shape[0], self.notes)


def kenward_roger(curve: Curve, fit: Fit) -> KenwardRoger:
    """Return the Kenward-Roger adjustment of a REML fit.

    Parameters
    ----------
    curve : Curve
        The panel the fit was made on.
    fit : Fit
        Route `reml` with its own scale.

    Raises
    ------
    OptionError
        If the fit is not REML, has another scale, or has no coefficients.
    """
    if fit.route != "reml":
        raise OptionError(
            f"Kenward-Roger belongs to the route 'reml', not to {fit.route!r}; use Satterthwaite."
        )
    if fit.conventions.get("scale") == "gls_residuals_n":
        raise OptionError("Kenward-Roger belongs to the scale 'own' of 'reml', not to 'gls_residuals_n'.")
    if not (fit.estimated and np.isfinite(fit.components_covariance).all()):
        raise OptionError(f"Kenward-Roger needs a REML estimate; the status of the fit is: {fit.status}.")
    if (curve.n, curve.names) != (fit.rows, fit.terms):
        raise OptionError(
            f"the fit used {fit.rows} rows and {fit.terms}, "
            f"the moments hold {curve.n} rows and {curve.names}."
        )
    form = orthonormal(curve, fit.ratio)
    shrink, sizes = form.shrink, form.sizes
    weight = sizes * shrink
    slopes = np.array([form.weighted(0.0, weight**2), form.weighted(1.0, sizes * shrink**2)])
    q_aa = form.weighted(0.0, weight**3)
    q_au = form.weighted(0.0, weight**2 * shrink)
    q_uu = form.weighted(1.0, sizes * shrink**3)
    spread = fit.components_covariance / fit.idiosyncratic_variance**2
    bend = (
        spread[0, 0] * (q_aa - slopes[0] @ slopes[0])
        + spread[0, 1] * (2.0 * q_au - slopes[0] @ slopes[1] - slopes[1] @ slopes[0])
        + spread[1, 1] * (q_uu - slopes[1] @ slopes[1])
    )
    notes = (AT_ZERO,) if fit.ratio == 0.0 else ()
    return KenwardRoger(fit.idiosyncratic_variance, (bend + bend.T) / 2.0, form.root, spread, slopes, notes)


def _reference(a1: float, a2: float, q: int, notes: tuple[str, ...]) -> ScaledF:
    """Return m and λ from A1, A2.

    ``l rho - 1`` is written over a common denominator and multiplied out, so that it keeps its digits when A1
    and A2 are tiny (many units), and stays defined where V* has its pole.
    """
    if q == 1:
        return ScaledF(2.0 / a1, 1.0, a1, a2, notes)
    b = (a1 + 6.0 * a2) / (2.0 * q)
    g = ((q + 1.0) * a1 - (q + 4.0) * a2) / ((q + 2.0) * a2)
    d = 3.0 * q + 2.0 * (1.0 - g)
    x, s, t, y = g / d * b, (q - g) / d * b, (q + 2.0 - g) / d * b, a2 / q
    # l rho - 1 = ((1 + x)(1 - y)^2 - (1 - s)^2 (1 - t)) / ((1 - s)^2 (1 - t))
    above = x - 2.0 * y + 2.0 * s + t + y * y * (1.0 + x) - 2.0 * x * y - s * s - 2.0 * s * t + s * s * t
    m = 4.0 + (q + 2.0) * (1.0 - s) ** 2 * (1.0 - t) / above
    scaling = m * (1.0 - y) / (m - 2.0) if m != 2.0 else np.nan
    if not (m > 0.0 and scaling > 0.0 and np.isfinite(m * scaling)):
        note = (
            f"Kenward-Roger gives no usable law for this joint hypothesis "
            f"(m = {m:.4g}, lambda = {scaling:.4g}): too few units"
        )
        return ScaledF(np.nan, np.nan, a1, a2, (*notes, note))
    if m <= 4.0:
        notes = (
            *notes,
            f"m = {m:.4g}: the moments that Kenward-Roger matches do not exist, the formulas are continued",
        )
    return ScaledF(m, scaling, a1, a2, notes)
