"""Satterthwaite and Kenward-Roger by definition: dense matrices, 60 digits, panels of up to about 60 rows.

Nothing here knows of unit means, size classes or a closed form of the inverse: V is written out, its blocks
are inverted numerically, derivatives of Phi for Satterthwaite are difference quotients, and P_i and Q_ij of
Kenward and Roger are products of n-row matrices, in the letters of their paper.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import mpmath
import numpy as np

#: Offsets of 1e9 cost 36 digits of X'X, the difference quotients 12: sixty leave a dozen.
DIGITS = 60
#: Relative step of the difference quotients: the error of a central one is its square, 1e-24.
STEP = "1e-12"


def exact(values) -> np.ndarray:
    """Return doubles as mp numbers, taken as exact."""
    array = np.asarray(values, dtype=float)
    out = np.empty(array.shape, dtype=object)
    for at in np.ndindex(array.shape):
        out[at] = mpmath.mpf(float(array[at]))
    return out


def inverse(matrix: np.ndarray) -> np.ndarray:
    """Invert a symmetric matrix of mp numbers."""
    solved = mpmath.matrix(matrix.tolist()) ** -1
    return np.array(solved.tolist(), dtype=object).reshape(matrix.shape)


@dataclass(frozen=True)
class Dense:
    """One panel at given variances."""

    X: np.ndarray
    units: np.ndarray
    unit: object
    idiosyncratic: object

    @cached_property
    def ZZ(self) -> np.ndarray:
        same = self.units[:, None] == self.units[None, :]
        return np.where(same, mpmath.mpf(1), mpmath.mpf(0))

    @cached_property
    def identity(self) -> np.ndarray:
        return np.where(np.eye(len(self.units), dtype=bool), mpmath.mpf(1), mpmath.mpf(0))

    @cached_property
    def V(self) -> np.ndarray:
        return self.idiosyncratic * self.identity + self.unit * self.ZZ

    @cached_property
    def V_inverse(self) -> np.ndarray:
        out = self.identity * 0
        for label in np.unique(self.units):
            rows = np.flatnonzero(self.units == label)
            out[np.ix_(rows, rows)] = inverse(self.V[np.ix_(rows, rows)])
        return out

    @cached_property
    def Phi(self) -> np.ndarray:
        return inverse(self.X.T @ (self.V_inverse @ self.X))

    def at(self, unit, idiosyncratic) -> Dense:
        return Dense(self.X, self.units, unit, idiosyncratic)

    @cached_property
    def Phi_slopes(self) -> list[np.ndarray]:
        """Derivatives of Phi in the unit and the idiosyncratic variance: central difference quotients."""
        step = mpmath.mpf(STEP) * self.idiosyncratic
        a, u = self.unit, self.idiosyncratic
        return [
            (self.at(a + step, u).Phi - self.at(a - step, u).Phi) / (2 * step),
            (self.at(a, u + step).Phi - self.at(a, u - step).Phi) / (2 * step),
        ]

    def satterthwaite(self, row: np.ndarray, C: np.ndarray):
        """2 (l'Phi l)^2 / (g'Cg)."""
        g = np.array([row @ slope @ row for slope in self.Phi_slopes])
        return 2 * (row @ self.Phi @ row) ** 2 / (g @ C @ g)

    @cached_property
    def inverse_slopes(self) -> list[np.ndarray]:
        """dV^-1/dsigma_i X, with dV^-1 = -V^-1 V_i V^-1."""
        return [-(self.V_inverse @ (part @ (self.V_inverse @ self.X))) for part in (self.ZZ, self.identity)]

    @cached_property
    def P(self) -> list[np.ndarray]:
        return [self.X.T @ slope for slope in self.inverse_slopes]

    def adjusted(self, W: np.ndarray) -> np.ndarray:
        """Phi_A = Phi + 2 Phi Lambda Phi."""
        total = self.Phi * 0
        for i in range(2):
            for j in range(2):
                Q = self.inverse_slopes[i].T @ (self.V @ self.inverse_slopes[j])
                total = total + W[i, j] * (Q - self.P[i] @ self.Phi @ self.P[j])
        return self.Phi + 2 * (self.Phi @ total @ self.Phi)

    def kenward_roger(self, L: np.ndarray, W: np.ndarray):
        """Return m and lambda for L (q x p), every step as printed."""
        q = L.shape[0]
        Phi, P = self.Phi, self.P
        Theta = L.T @ inverse(L @ Phi @ L.T) @ L
        M = [Theta @ Phi @ P[i] @ Phi for i in range(2)]
        pairs = [(i, j) for i in range(2) for j in range(2)]
        A1 = sum(W[i, j] * np.trace(M[i]) * np.trace(M[j]) for i, j in pairs)
        A2 = sum(W[i, j] * np.trace(M[i] @ M[j]) for i, j in pairs)
        B = (A1 + 6 * A2) / (2 * q)
        g = ((q + 1) * A1 - (q + 4) * A2) / ((q + 2) * A2)
        d = 3 * q + 2 * (1 - g)
        c1, c2, c3 = g / d, (q - g) / d, (q + 2 - g) / d
        E = 1 / (1 - A2 / q)
        Var = (mpmath.mpf(2) / q) * (1 + c1 * B) / ((1 - c2 * B) ** 2 * (1 - c3 * B))
        rho = Var / (2 * E**2)
        m = 4 + (q + 2) / (q * rho - 1)
        return m, m / (E * (m - 2))

    def statistic(self, L: np.ndarray, estimate: np.ndarray, W: np.ndarray):
        """(L beta)'(L Phi_A L')^-1 (L beta) / q, before the scaling."""
        return estimate @ inverse(L @ self.adjusted(W) @ L.T) @ estimate / L.shape[0]
