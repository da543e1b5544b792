"""The profile likelihood in ψ, with analytic first and second derivatives, for many ψ at once.

Up to constants (Hartley & Rao 1967; Patterson & Thompson 1971; Harville 1977)

    D(psi) = m log r(psi) + g(psi)
    ML:    m = n,      g = sum_T m_T log(1 + T psi)
    REML:  m = n - K,  g = sum_T m_T log(1 + T psi) + log |A_xx(psi)|

With w_T = T / (1 + T psi), S_k = sum_T w_T^k B_T and c = (-beta(psi), 1):

    r'  = -c' S_2 c,   r'' = 2 c' S_3 c - 2 v' A_xx^-1 v,  v = (S_2 c)_x
    g'  = sum m_T w_T - tr(A_xx^-1 S_2)
    g'' = -sum m_T w_T^2 + 2 tr(A_xx^-1 S_3) - tr(A_xx^-1 S_2 A_xx^-1 S_2)

(traces for REML only). In the spectral form of ``K'VK`` with ``K'X = 0``, r is ``const + sum c_k^2 / (1 +
mu_k psi)`` and the g of REML is ``const + sum log(1 + mu_k psi)``: r and g' are completely monotone, so r
decreases, is convex, and r'' decreases; g increases, is concave, and g'' increases.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from mixbridge.ratio import Curve, Point

__all__ = ["Kind", "Profile", "Values", "log_likelihood", "log_likelihood_at"]

FloatArray = NDArray[np.float64]
Kind = Literal["ml", "reml"]


@dataclass(frozen=True, slots=True)
class Values:
    """Residual r, log-determinant part g, and their derivatives, at several ψ (whitened units: ``r(0) = 1``).

    Attributes
    ----------
    psi, r, r1, r2, g, g1, g2 : ndarray of shape (M,)
        Ratios; r and g, each with its first and second derivative.
    amplified : ndarray of shape (M,)
        ``A_yy / r``: by how much the subtraction in r amplifies rounding.
    m : int
        Multiplier of ``log r``.
    """

    psi: FloatArray
    r: FloatArray
    r1: FloatArray
    r2: FloatArray
    g: FloatArray
    g1: FloatArray
    g2: FloatArray
    amplified: FloatArray
    m: int

    @property
    def deviance(self) -> FloatArray:
        """``D``, up to a constant."""
        return self.m * np.log(self.r) + self.g

    @property
    def slope(self) -> FloatArray:
        """``D'``."""
        return self.m * self.r1 / self.r + self.g1

    @property
    def bend(self) -> FloatArray:
        """``D''``."""
        return self.m * (self.r2 / self.r - (self.r1 / self.r) ** 2) + self.g2


@dataclass(frozen=True, slots=True)
class Profile:
    """Profile deviance of one kind on one curve.

    Attributes
    ----------
    curve : Curve
    kind : {"ml", "reml"}
    """

    curve: Curve
    kind: Kind

    @property
    def m(self) -> int:
        """Multiplier of ``log r``: n, or n - K."""
        return self.curve.n - (self.curve.rank if self.kind == "reml" else 0)

    def values(self, psi: FloatArray) -> Values:
        """Evaluate r, g and two derivatives of each.

        Parameters
        ----------
        psi : ndarray of shape (M,)
            Variance ratios.

        Returns
        -------
        Values
        """
        curve, count = self.curve, len(psi)
        p, g_count = curve.rank, len(curve.sizes)
        weight = curve.sizes / (1.0 + np.multiply.outer(psi, curve.sizes))
        powers = np.concatenate([weight, weight**2, weight**3]) @ curve.between_products.reshape(g_count, -1)
        a, s2, s3 = powers.reshape(3, count, p + 1, p + 1)
        a += curve.within_products
        length = np.sqrt(np.diagonal(a, axis1=1, axis2=2))
        scaled = a / (length[:, :, None] * length[:, None, :])
        pivots = np.diagonal(np.linalg.cholesky(scaled), axis1=1, axis2=2) * length
        r = pivots[:, p] ** 2
        right = [a[:, :p, p:], s2[:, :p, :]]
        if self.kind == "reml":
            right.append(s3[:, :p, :p])
        unit = length[:, :p, None]
        solved = np.linalg.solve(scaled[:, :p, :p], np.concatenate(right, axis=2) / unit) / unit
        c = np.concatenate([-solved[:, :, :1], np.ones((count, 1, 1))], axis=1)
        row = c.transpose(0, 2, 1)
        s2c = s2 @ c
        r1 = -(row @ s2c)[:, 0, 0]
        solved_v = solved[:, :, 1 : p + 2] @ c  # A_xx^-1 (S_2 c)_x
        r2 = 2.0 * (row @ (s3 @ c) - s2c[:, :p].transpose(0, 2, 1) @ solved_v)[:, 0, 0]
        g = np.log1p(np.multiply.outer(psi, curve.sizes)) @ curve.counts
        g1 = weight @ curve.counts
        g2 = -(weight**2) @ curve.counts
        if self.kind == "reml":
            inner = solved[:, :, 1 : p + 1]  # A_xx^-1 S_2,xx
            g = g + 2.0 * np.log(pivots[:, :p]).sum(axis=1)
            g1 = g1 - np.trace(inner, axis1=1, axis2=2)
            g2 = g2 + 2.0 * np.trace(solved[:, :, p + 2 :], axis1=1, axis2=2)
            g2 = g2 - (inner * inner.transpose(0, 2, 1)).sum(axis=(1, 2))
        return Values(psi, r, r1, np.maximum(r2, 0.0), g, g1, g2, a[:, p, p] / r, self.m)


def log_likelihood(curve: Curve, kind: Kind, psi: float, constant: bool = True) -> float:
    """Return the log-likelihood at ψ, maximised over all else, with its constants.

    Parameters
    ----------
    curve : Curve
    kind : {"ml", "reml"}
    psi : float
        Variance ratio.
    constant : bool
        For REML: whether ``½ log|X'X|`` is included. With it the value does not depend on the coordinates of
        X; neither compares different column spaces (Harville 1974).

    Returns
    -------
    float
    """
    return log_likelihood_at(curve, kind, curve.at(psi), constant)


def log_likelihood_at(curve: Curve, kind: Kind, point: Point, constant: bool = True) -> float:
    """Return `log_likelihood` at a point of the curve that is known already."""
    m = curve.n - (curve.rank if kind == "reml" else 0)
    g = float(curve.counts @ np.log1p(curve.sizes * point.psi))
    value = -0.5 * (m * np.log(2.0 * np.pi * point.residual / m) + m + g)
    if kind == "reml":
        sign, root_det = np.linalg.slogdet(point.root)
        log_axx = -2.0 * float(root_det) if sign else np.nan
        value -= 0.5 * (log_axx - (curve.log_det if constant else 0.0))
    return float(value)
