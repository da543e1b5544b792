"""Cluster-robust covariances by definition: explicit matrices per unit, refits for deletions, n x n for degrees of freedom.

Slow and obvious; nothing here is shared with the package. Roots of matrices come from eigenvalues, the bread from QR.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

CUT = 1e-10  # eigenvalues of a residual covariance below this are zero: true zeros come out near 1e-15


@dataclass(frozen=True)
class Dense:
    """Generalised least squares of y on X with one covariance block per unit."""

    X: np.ndarray
    y: np.ndarray
    units: np.ndarray
    V: np.ndarray  # n x n

    @property
    def blocks(self):
        return [np.flatnonzero(self.units == i) for i in np.unique(self.units)]

    @cached_property
    def root(self):
        """J with JJ' the bread: through QR, so that X J stays orthonormal even if columns nearly coincide."""
        half = np.linalg.cholesky(np.linalg.inv(self.V)).T
        length = np.sqrt(((half @ self.X) ** 2).sum(axis=0))
        return np.linalg.inv(np.linalg.qr(half @ self.X / length, mode="r")) / length[:, None]

    @property
    def bread(self):
        return self.root @ self.root.T

    @property
    def beta(self):
        half = np.linalg.cholesky(np.linalg.inv(self.V)).T
        return np.linalg.lstsq(half @ self.X, half @ self.y, rcond=None)[0]

    def weighted(self, rows):
        return np.linalg.solve(self.V[np.ix_(rows, rows)], self.X[rows])

    def adjustment(self, rows, root):
        """A_i of CR2; the pseudo-inverse root where a residual covariance is singular."""
        v = self.V[np.ix_(rows, rows)]
        c = v - (self.X[rows] @ self.root) @ (self.X[rows] @ self.root).T
        if root == "pustejovsky_tipton":
            d = np.linalg.cholesky(v).T
            return d.T @ power(d @ c @ d.T, -0.5) @ d
        half, back = power(v, 0.5), power(v, -0.5)
        return half @ power(back @ c @ back, -0.5) @ back

    def covariance(self, kind, root="pustejovsky_tipton"):
        if kind == "CR3":
            spread = []
            for rows in self.blocks:
                rest = np.setdiff1d(np.arange(len(self.y)), rows)
                less = Dense(self.X[rest], self.y[rest], self.units[rest], self.V[np.ix_(rest, rest)])
                spread.append(less.beta - self.beta)
            return np.array(spread).T @ np.array(spread)
        e = self.y - self.X @ self.beta
        scores = []
        for rows in self.blocks:
            a = self.adjustment(rows, root) if kind == "CR2" else np.eye(len(rows))
            scores.append(self.root @ ((self.weighted(rows) @ self.root).T @ (a @ e[rows])))
        return np.array(scores).T @ np.array(scores)

    def degrees(self, weights, root="pustejovsky_tipton"):
        """Satterthwaite degrees of freedom of CR2, and expected over true variance, by n x n matrices."""
        n = len(self.y)
        hat = (self.X @ self.root) @ (self.X @ self.root).T @ np.linalg.inv(self.V)
        columns = []
        for rows in self.blocks:
            pick = np.eye(n)[rows]
            a = self.adjustment(rows, root)
            reach = (self.weighted(rows) @ self.root) @ (self.root.T @ weights)
            columns.append((np.eye(n) - hat).T @ pick.T @ a.T @ reach)
        p = np.array(columns).T
        products = p.T @ self.V @ p
        return np.trace(products) ** 2 / (products**2).sum(), np.trace(products) / (
            weights @ self.bread @ weights
        )


def power(matrix, exponent):
    """Return a symmetric power, zero where an eigenvalue is zero."""
    values, vectors = np.linalg.eigh((matrix + matrix.T) / 2)
    safe = np.where(values > CUT, values, 1.0)
    return (vectors * np.where(values > CUT, safe**exponent, 0.0)) @ vectors.T


def on_curve(X, y, units, psi):
    """Return the regression of a random-effects route at psi."""
    same = units[:, None] == units[None, :]
    return Dense(X, y, units, np.eye(len(y)) + psi * same)


def absorbed(X, y, units):
    """Return the regression with one indicator per unit; coefficients of X come first."""
    indicators = (units[:, None] == np.unique(units)[None, :]).astype(float)
    return Dense(np.column_stack([X, indicators]), y, units, np.eye(len(y)))


def of_means(X, y, units, weighted):
    """Return the regression on unit means; each unit is one row."""
    labels = np.unique(units)
    size = np.array([(units == i).sum() for i in labels], dtype=float)
    means = np.array([np.append(X[units == i].mean(axis=0), y[units == i].mean()) for i in labels])
    return Dense(means[:, :-1], means[:, -1], labels, np.diag(1 / size if weighted else np.ones_like(size)))
