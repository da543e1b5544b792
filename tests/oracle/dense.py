"""The explicit matrices of a small panel: Z, P, Q, V, projections, all n x n and all written out."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from .linear import Columns, coefficients, factorise, lengths


@dataclass(frozen=True)
class Dense:
    """Panel y = X beta + Z alpha + u with everything dense."""

    X: np.ndarray
    y: np.ndarray
    units: np.ndarray

    @cached_property
    def n(self) -> int:
        return self.X.shape[0]

    @cached_property
    def identity(self) -> np.ndarray:
        return np.eye(self.n, dtype=self.X.dtype)

    @cached_property
    def Z(self) -> np.ndarray:
        labels = np.unique(self.units)
        return (self.units[:, None] == labels[None, :]).astype(self.X.dtype)

    @cached_property
    def N(self) -> int:
        return self.Z.shape[1]

    @cached_property
    def sizes(self) -> np.ndarray:
        return self.Z.sum(axis=0)

    @cached_property
    def averaging(self) -> np.ndarray:
        """H = (Z'Z)^-1 Z', N x n: takes rows to unit means."""
        return self.Z.T / self.sizes[:, None]

    @cached_property
    def P(self) -> np.ndarray:
        return self.Z @ self.averaging

    @cached_property
    def Q(self) -> np.ndarray:
        return self.identity - self.P

    @cached_property
    def reference(self) -> np.ndarray:
        return lengths(self.X)

    @cached_property
    def constant_in_units(self) -> np.ndarray:
        """Mark columns equal to one stored number in every unit (exact comparison)."""
        first = self.X[[np.flatnonzero(self.Z[:, i])[0] for i in range(self.N)]]
        return np.all(self.Z @ first == self.X, axis=0)

    @cached_property
    def QX(self) -> np.ndarray:
        return np.where(self.constant_in_units, np.asarray(0, dtype=self.X.dtype), self.Q @ self.X)

    @cached_property
    def pooled(self) -> Columns:
        return factorise(self.X, self.reference)

    @cached_property
    def within(self) -> Columns:
        return factorise(self.QX, self.reference)

    @cached_property
    def between(self) -> Columns:
        """Columns of PX: unit means, each as often as the unit has rows."""
        return factorise(self.P @ self.X, self.reference)

    @cached_property
    def means(self) -> np.ndarray:
        return self.averaging @ self.X

    @cached_property
    def between_unweighted(self) -> Columns:
        return factorise(self.means, self.reference / np.sqrt(np.asarray(self.n, dtype=self.X.dtype)))

    @cached_property
    def M(self) -> np.ndarray:
        return self.identity - self.pooled.projector

    @cached_property
    def within_residual(self) -> np.ndarray:
        """Q - QX (X'QX)^+ X'Q, the residual maker of the within regression."""
        return self.Q - self.within.projector

    @cached_property
    def unit_constant_part(self) -> np.ndarray:
        """X g for a basis of the g with QXg = 0: spans all unit-constant vectors in the column space of X.

        These are not always *columns* of X: with x and x + c, c constant within units, c is one of them.
        """
        return self.P @ self.X @ self.within.null

    @cached_property
    def unit_constant(self) -> Columns:
        return factorise(self.unit_constant_part, lengths(np.abs(self.X) @ np.abs(self.within.null)))

    @cached_property
    def unit_constant_unweighted(self) -> Columns:
        part = self.averaging @ self.unit_constant_part
        return factorise(part, lengths(self.averaging @ (np.abs(self.X) @ np.abs(self.within.null))))

    @cached_property
    def remainder(self) -> np.ndarray:
        """I - X (X'QX)^- X'Q: y to y - X b_w, for one choice of the g-inverse."""
        return self.identity - self.X @ self.within.left

    @property
    def K(self) -> int:
        return self.pooled.rank

    @property
    def K_w(self) -> int:
        return self.within.rank

    @property
    def K_p(self) -> int:
        return self.between.rank

    @cached_property
    def ZZ(self) -> np.ndarray:
        return self.Z @ self.Z.T

    def V(self, idiosyncratic: np.floating, unit: np.floating) -> np.ndarray:
        """Return sigma_u^2 I + sigma_alpha^2 ZZ'."""
        return idiosyncratic * self.identity + unit * self.ZZ

    def inverse_root(self, psi: np.floating) -> np.ndarray:
        """Return (I + psi ZZ')^(-1/2) = Q + P diag((1 + T psi)^(-1/2)): quasi-demeaning, by unit."""
        size = self.Z @ self.sizes
        return self.Q + self.P / np.sqrt(1 + size * psi)[:, None]

    def gls(self, psi: np.floating) -> tuple[np.ndarray, np.ndarray, np.floating]:
        """Return coefficients, (X'V0^-1 X)^- and the residual form e'V0^-1 e at V0 = I + psi ZZ'."""
        root = self.inverse_root(psi)
        F, f = root @ self.X, root @ self.y
        columns = factorise(F, self.reference * 1e-6)
        if columns.rank != self.K:
            raise ArithmeticError(
                "V is nonsingular: the rank of the quasi-demeaned columns must be that of X"
            )
        residual = f - columns.basis @ (columns.basis.T @ f)
        residual = residual - columns.basis @ (columns.basis.T @ residual)
        return coefficients(F, f, columns), columns.inverse, residual @ residual

    def gls_projection(self, psi: np.floating) -> np.ndarray:
        """Return V0^-1 - V0^-1 X (X'V0^-1 X)^+ X'V0^-1."""
        root = self.inverse_root(psi)
        F = root @ self.X
        columns = factorise(F, self.reference * 1e-6)
        return root @ (self.identity - columns.projector) @ root
