"""How far the engine may be from a reference: bounds by first-order perturbation theory, computed for each panel.

Stored data are exact. What the engine rounds are sums over rows, so with unit roundoff ``u = eps / 2``
every cross-product carries a relative error of at most ``gamma = n u`` (worst case of a sum of n terms;
Higham 2002, sec. 3.1, place from memory). A factor F of the products is then exact for columns perturbed,
each relative to its own length, by

    eta = gamma * kappa_z * T      from products by Cholesky
    eta = gamma * T                from rows by QR

`kappa_z` is the condition of the unit-centred columns (x, y), scaled. Products are used while their
smallest scaled eigenvalue is above `PRODUCT_FLOOR` (unit means are few here, so their factors come from
rows). ``T`` is the largest unit size: rows are measured from the first of their unit, and subtracting its
mean distance amplifies at most by T.

Least squares of f on F, residual r, column lengths d, columns and f perturbed by eta (Golub & Van Loan,
*Matrix Computations*, sec. 5.3, place from memory), with ``s = |y| + sum d_j |b_j|`` (f is a projection of
y, rounded at the size of y):

    d_j |delta b_j|            <= eta (kappa s + kappa^2 |r|)
    |delta r'r|                <= 2 eta kappa |r| s + (eta kappa s)^2
    |delta (F'F)^-1|_ij        <= 2 eta kappa sqrt((F'F)^-1_ii (F'F)^-1_jj)

The engine whitens by all rows first, so its kappa at any later step is at most the product of that of all
rows and that of the step: `Conditions.combined`. With a constant in X everything is measured from grand
means, and an intercept collects the bounds of the other coefficients times their means, plus the rounding
of the level itself.

A ratio psi that is off by delta moves points on the curve: with ``w = max T / (1 + T psi)``, r the residual
form and ``C = (X'V_0^-1 X)^-1``, since ``|dV_0^-1 / dpsi| <= w V_0^-1``,

    |delta beta_j|  <= delta w sqrt(r C_jj)
    |delta C_ij|    <= delta w sqrt(C_ii C_jj)

Components solve ``C theta = q``, so ``|delta theta| <= |C^-1| (|delta q| + |delta C| |theta|)``. A trace in
C of a form with at least one degree of freedom is a difference of numbers at most n times as large:
``|delta C| <= 2 eta kappa n |C|``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from mixbridge.moments.factors import PRODUCT_FLOOR

EPS = float(np.finfo(float).eps)
PLAIN = 1e-10
"""What is asked for where the condition of the problem allows it."""
NEGLIGIBLE = 1e-11
"""Scaled singular values below it are dependencies of the panel, not near dependencies (those are at 1e-5)."""


def kappa(columns: np.ndarray) -> float:
    """Condition of columns scaled to unit length, zero columns and exact dependencies left out."""
    length = np.sqrt((columns**2).sum(axis=0))
    live = length > NEGLIGIBLE * length.max(initial=0.0)
    if not live.any():
        return 1.0
    values = np.linalg.svd(columns[:, live] / length[live], compute_uv=False)
    values = values[values > NEGLIGIBLE]
    return float(values[0] / values[-1])


@dataclass(frozen=True)
class Conditions:
    """One panel, measured from grand means where X holds a constant, and how it amplifies rounding."""

    x: np.ndarray
    y: np.ndarray
    z: np.ndarray  # unit indicators
    level: np.ndarray  # grand means of x; zero for the constant itself and in panels without one
    level_y: float
    intercept: int | None
    eta: float
    total: float
    within: float
    between: float

    @property
    def n(self) -> int:
        return len(self.y)

    @property
    def sizes(self) -> np.ndarray:
        return self.z.sum(axis=0)

    @property
    def combined(self) -> float:
        """Bound for the condition at any step of a route that passes through within or between slopes."""
        return self.total * max(self.within, self.between)

    def means(self, columns: np.ndarray) -> np.ndarray:
        return (self.z.T @ columns) / self.sizes.reshape(-1, *[1] * (columns.ndim - 1))

    def to_data(self, bound: np.ndarray) -> np.ndarray:
        """Carry bounds for coefficients from grand means to the origin of the data."""
        out = bound.copy()
        if self.intercept is not None:
            out[self.intercept] += np.abs(self.level) @ bound
        return out


def conditions(X: np.ndarray, y: np.ndarray, units: np.ndarray) -> Conditions:
    """Measure a panel; centring is done in long double, so that offsets do not spoil the measurement."""
    wide = X.astype(np.longdouble)
    constant = [j for j in range(X.shape[1]) if X[0, j] != 0 and (X[:, j] == X[0, j]).all()]
    level, level_y, intercept = np.zeros(X.shape[1], dtype=np.longdouble), np.longdouble(0), None
    response = y.astype(np.longdouble)
    if constant:
        intercept = constant[0]
        free = [j for j in range(X.shape[1]) if j != intercept]
        level[free], level_y = wide[:, free].mean(axis=0), response.mean()
    x, r = (wide - level).astype(float), (response - level_y).astype(float)
    z = (units[:, None] == np.unique(units)[None, :]).astype(float)
    sizes = z.sum(axis=0)
    means = (z.T @ np.column_stack([x, r])) / sizes[:, None]
    inside = np.column_stack([x, r]) - means[z.argmax(axis=1)]
    joined = kappa(inside)
    if (
        joined**2 > 2 * inside.shape[1] / PRODUCT_FLOOR
    ):  # then the smallest scaled eigenvalue is below PRODUCT_FLOOR / 2
        joined = 1.0
    return Conditions(
        x=x,
        y=r,
        z=z,
        level=level.astype(float),
        level_y=float(level_y),
        intercept=intercept,
        eta=len(y) * EPS / 2 * joined * float(sizes.max()),
        total=kappa(x),
        within=kappa(inside[:, :-1]),
        between=max(kappa(means[:, :-1]), kappa(np.sqrt(sizes)[:, None] * means[:, :-1])),
    )


@dataclass(frozen=True)
class Bounds:
    """Allowances for the figures of one least-squares fit."""

    beta: np.ndarray
    inverse: np.ndarray  # relative to sqrt(C_ii C_jj)
    residual: float  # absolute, for the residual sum of squares
    residual_form: float


def least_squares(c: Conditions, rows: np.ndarray, f: np.ndarray, beta: np.ndarray, step: float) -> Bounds:
    """Bounds for least squares of f on rows (both measured from grand means) at reference coefficients.

    `step` is the condition of the columns; coefficients that are not estimable (nan) count as zero.
    """
    slope = np.where(np.isfinite(beta), beta, 0.0)
    if c.intercept is not None and np.isfinite(beta[c.intercept]):
        slope[c.intercept] += c.level @ slope - c.level_y
    length = np.sqrt((rows**2).sum(axis=0))
    best = np.linalg.lstsq(rows / np.where(length > 0, length, 1.0), f, rcond=NEGLIGIBLE)[0]
    left = f - rows @ (best / np.where(length > 0, length, 1.0))
    r = float(np.sqrt(left @ left))
    s = float(np.sqrt(c.y @ c.y)) + float(np.abs(best).sum())
    condition = c.total * step
    bound = c.eta * (condition * s + condition**2 * r) / np.where(length > 0, length, np.inf)
    beta_bound = c.to_data(bound)
    if c.intercept is not None:
        beta_bound[c.intercept] += 4 * EPS * (abs(c.level_y) + np.abs(c.level * slope).sum())
    return Bounds(
        beta_bound,
        np.asarray(2 * c.eta * condition),
        2 * c.eta * condition * r * s + (c.eta * condition * s) ** 2,
        r * r,
    )


def at_ratio(c: Conditions, psi: float, beta: np.ndarray) -> Bounds:
    """Bounds for generalised least squares at a finite psi."""
    weight = 1 - 1 / np.sqrt(1 + c.sizes * psi)
    rows = np.column_stack([c.x, c.y])
    rows = rows - c.z @ (weight[:, None] * c.means(rows))
    return least_squares(c, rows[:, :-1], rows[:, -1], beta, kappa(rows[:, :-1]))


def moved_ratio(
    c: Conditions, psi: float, off: float, cov: np.ndarray, scale: float, form: float
) -> tuple[np.ndarray, float]:
    """Bounds for coefficients, and relative ones for the covariance, when psi is off by `off`."""
    pull = off * float((c.sizes / (1 + c.sizes * psi)).max())
    inverse = np.diag(cov) / scale
    return pull * np.sqrt(form * inverse), pull
