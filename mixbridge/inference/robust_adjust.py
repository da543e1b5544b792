"""Small-sample adjustments by unit, CR2 and CR3, by algebra on r x r matrices; degrees of freedom of CR2.

In the orthonormal coordinates of `Regression`, ``X*'X* = I``, so that the leverage block of unit i is
``H_i = X*_i X*_i'`` and ``G_i = X*_i'X*_i`` has its nonzero eigenvalues. For any function f,
``X*_i' f(H_i) = f(G_i) X*_i'``, hence with the score ``s_i = X*_i'e*_i``

    CR3                    X*_i'(I - H_i)^-1 e*_i      = (I - G_i)^-1 s_i
    CR2, quasi_demeaned    X*_i'(I - H_i)^(-1/2) e*_i  = (I - G_i)^(-1/2) s_i

CR3 so is ``sum (beta_(i) - beta)(beta_(i) - beta)'`` over deletions of one unit at fixed ψ; it involves no root.

**Which root in CR2.** With ``Phi_i = I + psi J``, weights ``Phi_i^-1`` and ``C_i = Phi_i - X_i M X_i'``, the
covariance of unit i's residuals under the working model, every ``A_i`` with ``A_i C_i A_i' = Phi_i`` makes the
estimator unbiased under the working model; different ones do not give the same numbers:

- ``pustejovsky_tipton``: ``A_i = D_i'(D_i C_i D_i')^(-1/2) D_i`` with ``Phi_i = D_i'D_i`` and the generalised
  inverse of the symmetric root (Pustejovsky & Tipton 2018, their definition of A_i). It does not depend on the
  choice of D_i, triangular or symmetric: two choices differ by an orthogonal factor, which cancels. It is the one
  symmetric non-negative solution.
- ``quasi_demeaned``: Bell & McCaffrey (2002) for the regression on quasi-demeaned rows, whose working model is
  the identity; ``A_i = Phi_i^(1/2) (I - H_i)^(-1/2) Phi_i^(-1/2)`` with the symmetric root of Phi_i. This one does
  depend on the root: a triangular one would give other figures, and these would depend on the order of rows.

Both agree where Phi_i and H_i commute: at ψ = 0, in `within` and `between`, for one-row units, and for balanced
panels whose columns are each purely within or purely between.

The first in r x r algebra: with the symmetric ``D_i = Phi_i^(1/2)`` the contribution is ``X*_i' R^-1 Phi e*_i``,
``R^2 = Phi (I - H) Phi``. Split rows into deviations, where Phi is 1, and the direction of the mean, where it is
``phi = 1 + T psi``. ``R = Phi + [[F D F', F d], [d'F', delta]]`` with F the deviations of X*_i, ``F'F = S``; such
matrices are closed under products through S alone, and ``R^2`` is right if, with ``g = sqrt(w) xbar``,

    D     = -(I + D S D + d d') / 2
    d     = -(phi g + D S d + delta d) / (1 + phi)
    delta = -(phi^2 g'g + d'S d + delta^2) / (2 phi)

a contraction with a rate of about the leverage of the unit. Leverages of all units add up to the rank r, so at
most ``r / LEVERAGE`` units are beyond its use; these get a decomposition of the compressed rows ``[g'; F]``.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.inference.robust_regression import Regression

__all__ = ["ROOTS", "Adjusted", "adjust", "carried_alone"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

ROOTS = ("pustejovsky_tipton", "quasi_demeaned")
LEVERAGE = 0.05
"""Trace of a unit's leverage block up to which series are used: 16 terms then reach the last digit."""
SINGULAR = 1e-10
"""``1 - g`` below which a unit alone carries a direction. Rounding leaves about 1e-14; a true value this small would
multiply residuals by 1e5 (CR2) or 1e10 (CR3), and no digit of them would be left."""
CHUNK_NUMBERS = 1 << 20
"""Numbers per array worked on at once."""


@dataclass(frozen=True, slots=True, eq=False)
class Adjusted:
    """Adjusted contributions of units, and the law of CR2 for some linear combinations.

    Attributes
    ----------
    scores : ndarray of shape (N, r)
        Contribution of each unit in orthonormal coordinates.
    df : ndarray of shape (c,)
        Satterthwaite degrees of freedom of each combination.
    expectation : ndarray of shape (c,)
        Expected over true variance of each combination under the working model.
    """

    scores: FloatArray
    df: FloatArray
    expectation: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class _Units:
    """Cross-products of some units, orthonormal coordinates."""

    inner: FloatArray  # S, (m, r, r)
    mean: FloatArray  # g = sqrt(w) xbar, (m, r)
    score: FloatArray  # S_xe, (m, r)
    mean_score: FloatArray  # sqrt(w) ebar, (m,)
    growth: FloatArray  # phi, (m,)

    @property
    def leverage(self) -> FloatArray:
        """``G = S + gg'``."""
        return np.asarray(self.inner + self.mean[:, :, None] * self.mean[:, None, :])

    def pick(self, at: NDArray[np.bool_]) -> _Units:
        """Return some of the units."""
        return _Units(
            *(getattr(self, name)[at] for name in ("inner", "mean", "score", "mean_score", "growth"))
        )


Parts = tuple[FloatArray, FloatArray, FloatArray]
"""Contributions (m, r); of combinations ``q = X*'a`` (m, r, c) and ``a'a`` (m, c)."""


def adjust(regression: Regression, kind: str, root: str, combinations: FloatArray) -> Adjusted:
    """Return the contributions of all units to the coefficients under CR2 or CR3, and degrees of freedom.

    Parameters
    ----------
    regression : Regression
    kind : {'CR2', 'CR3'}
    root : {'pustejovsky_tipton', 'quasi_demeaned'}
        For CR2, see the head of this file.
    combinations : ndarray of shape (r, c)
        One per column, orthonormal coordinates; what is said of them has a meaning for CR2.

    Returns
    -------
    Adjusted
        Where ``I - H_i`` is singular a generalised inverse is used; `carried_alone` finds these units.

    Notes
    -----
    The variance estimate of a combination is ``sum_i (a_i'e*_i)^2`` with ``e* = (I - H) y*``. Under the
    working model y* has the identity as covariance, so the estimate is distributed as ``y*'(sum_i b_i b_i') y*``,
    ``b_i = (I - H)_.i a_i``, with (Bell & McCaffrey 2002)

        b_i'b_j = [i = j] a_i'a_i - q_i'q_j,        q_i = X*_i'a_i
        df = (sum b_i'b_i)^2 / sum_ij (b_i'b_j)^2
        sum_ij (b_i'b_j)^2 = sum (a_i'a_i)^2 - 2 sum (a_i'a_i)(q_i'q_i) + || sum q_i q_i' ||^2

    which needs r numbers per unit and combination and no matrix of units by units.
    """
    r, c = combinations.shape
    scores = np.empty((regression.products.units, r))
    mean, squares, cross, outer = np.zeros(c), np.zeros(c), np.zeros(c), np.zeros((c, r, r))
    for start, units in _chunks(regression, c):
        leverage = units.leverage
        high = np.trace(leverage, axis1=1, axis2=2) > LEVERAGE
        for small in (True, False):
            group = ~high if small else high
            if not group.any():
                continue
            some = units.pick(group)
            if kind == "CR2" and root == "pustejovsky_tipton" and regression.correlated:
                part, q, length = (_symmetric_low if small else _symmetric_high)(some, combinations)
            else:
                part, q, length = _direct(some, combinations, 1.0 if kind == "CR3" else 0.5, small)
            scores[start + np.flatnonzero(group)] = part
            reach = (q**2).sum(axis=1)
            mean += (length - reach).sum(axis=0)
            squares += (length**2).sum(axis=0)
            cross += (length * reach).sum(axis=0)
            by_combination = q.transpose(2, 1, 0)
            outer += np.matmul(by_combination, by_combination.transpose(0, 2, 1))
    second = squares - 2.0 * cross + (outer**2).sum(axis=(1, 2))
    df = np.divide(mean**2, second, out=np.full(c, np.nan), where=second > 0.0)
    return Adjusted(scores, df, mean / (combinations**2).sum(axis=0))


def carried_alone(regression: Regression) -> tuple[IntArray, FloatArray]:
    """Return the units without which the columns are dependent, and the directions that each carries alone.

    Parameters
    ----------
    regression : Regression

    Returns
    -------
    ndarray of int
        Positions of the units.
    ndarray of shape (r, d)
        Orthonormal directions, orthonormal coordinates: eigenvectors of G_i for the eigenvalue one. In such a
        direction every residual of the unit is zero whatever the outcome.
    """
    r = regression.rank
    suspects = np.flatnonzero(regression.leverages() > 1.0 - r * SINGULAR)  # at most r units
    means = regression.means(suspects)[:, :r] * np.sqrt(regression.weights[suspects])[:, None]
    within = regression.within(suspects)[:, :r, :r]
    values, vectors = np.linalg.eigh(within + means[:, :, None] * means[:, None, :])
    unit, direction = np.nonzero(1.0 - values <= SINGULAR)
    return suspects[np.unique(unit)], vectors[unit, :, direction].T


def _chunks(regression: Regression, columns: int) -> Iterator[tuple[int, _Units]]:
    """Yield cross-products of consecutive units, with the position of the first."""
    r = regression.rank
    growth = regression.growth
    size = max(1, CHUNK_NUMBERS // ((r + 1) * (r + 1 + columns)))
    for start in range(0, growth.size, size):
        at = slice(start, min(start + size, growth.size))
        means = regression.means(at) * np.sqrt(regression.weights[at])[:, None]
        inner = regression.within(at)
        yield start, _Units(inner[:, :r, :r], means[:, :r], inner[:, :r, r], means[:, r], growth[at])


def _steps(units: _Units, factor: float, done: float) -> int:
    """Return how many steps, each gaining `factor` times the leverage, are left until the last digit."""
    rate = factor * float(np.trace(units.leverage, axis1=1, axis2=2).max())
    return 1 if rate < 1e-17 else max(1, math.ceil(math.log(1e-17) / math.log(rate) - done))


def _direct(units: _Units, combinations: FloatArray, power: float, small: bool) -> Parts:
    """Return contributions ``(I - G)^-power s`` and those of combinations, where only G is needed."""
    g = units.leverage
    full = units.score + units.mean * units.mean_score[:, None]
    vectors = np.concatenate(
        [full[:, :, None], np.broadcast_to(combinations, (g.shape[0], *combinations.shape))], axis=2
    )
    if small:  # the binomial series
        total = term = vectors
        for j in range(1, _steps(units, 1.0, 0.0) + 1):
            term = np.matmul(g, term) * ((power + j - 1.0) / j)
            total = total + term
    else:  # eigenvectors; a direction of which nothing is left counts as zero
        values, basis = np.linalg.eigh(g)
        rest = 1.0 - values
        weight = np.where(rest > SINGULAR, np.maximum(rest, SINGULAR) ** -power, 0.0)
        total = np.matmul(basis, weight[:, :, None] * np.matmul(basis.transpose(0, 2, 1), vectors))
    half = total[:, :, 1:]
    q = np.matmul(g, half)
    return total[:, :, 0], q, (half * q).sum(axis=1)


def _symmetric_low(units: _Units, combinations: FloatArray) -> Parts:
    """Return the `pustejovsky_tipton` contributions of units of small leverage, by the contraction."""
    s, g, phi = units.inner, units.mean[:, :, None], units.growth[:, None, None]
    m, r = units.mean.shape
    one = np.eye(r)
    size = np.matmul(g.transpose(0, 2, 1), g)
    dd, d, delta = one / -2.0, phi / (1.0 + phi) * -g, phi / -2.0 * size
    for _ in range(_steps(units, 2.0, 1.0)):
        ds = np.matmul(dd, s)
        dd, d, delta = (
            (one + np.matmul(ds, dd) + d * d.transpose(0, 2, 1)) / -2.0,
            -(phi * g + np.matmul(ds, d) + delta * d) / (1.0 + phi),
            -(phi * size + (np.matmul(d.transpose(0, 2, 1), np.matmul(s, d)) + delta**2) / phi) / 2.0,
        )
    # R v = (S-part, mean part); its last line in units of phi, or pivoting would compare phi with one
    system = np.empty((m, r + 1, r + 1))
    system[:, :r, :r] = one + np.matmul(s, dd)
    system[:, :r, r:] = np.matmul(s, d)
    system[:, r:, :r] = d.transpose(0, 2, 1) / phi
    system[:, r:, r:] = 1.0 + delta / phi
    right = np.empty((m, r + 1, 1 + combinations.shape[1]))
    right[:, :r, 0], right[:, r, 0] = units.score, units.mean_score
    right[:, :r, 1:], right[:, r, 1:] = np.matmul(s, combinations), (units.mean @ combinations) / phi[:, 0]
    solved = np.linalg.solve(system, right)
    part = solved[:, :r, 0] + units.mean * solved[:, r:, 0]
    h = combinations - np.matmul(dd, solved[:, :r, 1:]) - d * solved[:, r:, 1:]
    sh, nu = np.matmul(s, h), phi * solved[:, r:, 1:]
    return part, sh + g * nu, (h * sh).sum(axis=1) + nu[:, 0] ** 2


def _symmetric_high(units: _Units, combinations: FloatArray) -> Parts:
    """Return the same for units of any leverage, by decompositions of the compressed rows ``[g'; F]``."""
    s, g, phi = units.inner, units.mean, units.growth
    m, r = g.shape
    values, basis = np.linalg.eigh(s)
    live = values > 1e-15 * np.maximum(values[:, -1:], 0.0)
    length = np.sqrt(np.where(live, values, 0.0))
    x = np.concatenate([g[:, None, :], length[:, :, None] * basis.transpose(0, 2, 1)], axis=1)
    growth = np.ones((m, r + 1))
    growth[:, 0] = phi
    leverage, axes = np.linalg.eigh(np.matmul(x, x.transpose(0, 2, 1)))
    rest = 1.0 - leverage
    nothing = rest <= SINGULAR
    half = np.sqrt(np.where(nothing, 0.0, rest))[:, :, None] * axes.transpose(0, 2, 1)
    # R^2 = (half Phi)'(half Phi); the graded column of the mean stands first, so that its size spoils no other
    _, sigma, right = np.linalg.svd(half * growth[:, None, :])
    lost = np.arange(r + 1) >= (r + 1 - nothing.sum(axis=1))[:, None]
    inverse = np.where(lost, 0.0, 1.0 / np.where(lost, 1.0, sigma))
    inner = np.matmul(basis.transpose(0, 2, 1), units.score[:, :, None])[:, :, 0]
    inner = np.where(live, inner / np.where(live, length, 1.0), 0.0)
    e = np.concatenate([(phi * units.mean_score)[:, None], inner], axis=1)[:, :, None]
    vectors = np.concatenate([e, np.matmul(x, combinations)], axis=2)
    solved = np.matmul(right.transpose(0, 2, 1), inverse[:, :, None] * np.matmul(right, vectors))
    e[:, 0] = 0.0  # of deviations the identity part of R^-1 is taken out: it keeps its digits
    part = units.score + np.matmul(x.transpose(0, 2, 1), solved[:, :, :1] - e)[:, :, 0]
    a = growth[:, :, None] * solved[:, :, 1:]
    return part, np.matmul(x.transpose(0, 2, 1), a), (a**2).sum(axis=1)
