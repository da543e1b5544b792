"""Plain algebra to check the engine against: least squares on the factors as the moments hold them.

Columns are scaled, and centred where there is a constant; nothing is whitened and no direction is singled
out. Every weighting
and every map back to the units of the data is written here a second time, on purpose.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.moments import Moments

__all__ = ["EPS", "Plain", "Solved", "largest", "least_squares", "plain_of"]

FloatArray = NDArray[np.float64]
EPS = float(np.finfo(float).eps)


@dataclass(frozen=True, slots=True, eq=False)
class Solved:
    """Least squares on some factor, in scaled columns.

    Attributes
    ----------
    slope : ndarray of shape (p,)
        Coefficients of the scaled columns.
    root : ndarray of shape (p, p)
        J with ``JJ' = (F'F)^-1``.
    residual, total : float
        Residual sum of squares; sum of squares of the outcome, in squared scaled units.
    condition : float
        Condition number of F with columns of unit length.
    log_det : float
        ``log |F'F|``.
    """

    slope: FloatArray
    root: FloatArray
    residual: float
    total: float
    condition: float
    log_det: float


def least_squares(factor: FloatArray) -> Solved:
    """Solve for the last column on the others."""
    return least_squares_of_each(factor[None])[0]


def least_squares_of_each(factors: FloatArray) -> list[Solved]:
    """Solve several problems of one shape, ``factors`` (M, r, p + 1), each for its last column."""
    count, rows, p = factors.shape[0], factors.shape[1], factors.shape[2] - 1
    length = np.sqrt((factors[:, :, :p] ** 2).sum(axis=1))
    scaled = np.concatenate([factors[:, :, :p] / length[:, None, :], factors[:, :, p:]], axis=2)
    if rows <= p:
        scaled = np.concatenate([scaled, np.zeros((count, p + 1 - rows, p + 1))], axis=1)
    upper = np.asarray(np.linalg.qr(scaled, mode="r"))
    r, y = upper[:, :p, :p], upper[:, :, p]
    inverse = np.linalg.inv(r)
    values = np.linalg.svd(r, compute_uv=False) if p else np.ones((count, 1))
    diagonal = np.abs(np.diagonal(r, axis1=1, axis2=2))
    log_det = 2.0 * (np.log(diagonal).sum(axis=1) + np.log(length).sum(axis=1))
    return [
        Solved(
            slope=inverse[i] @ y[i, :p] / length[i],
            root=inverse[i] / length[i][:, None],
            residual=float((y[i, p:] ** 2).sum()),
            total=float((y[i] ** 2).sum()),
            condition=float(values[i, 0] / values[i, -1]),
            log_det=float(log_det[i]),
        )
        for i in range(count)
    ]


@dataclass(frozen=True, slots=True, eq=False)
class Plain:
    """Factors of W and of the B_T in scaled design columns, the outcome last, and the way back.

    Attributes
    ----------
    names : tuple of str
        Design columns in the order of the formula.
    sizes, counts : ndarray of float, shape (G,)
        Distinct unit sizes and the number of units of each.
    within, between : ndarray of shape (k, p + 1), (G, r, p + 1)
        Factors.
    back : ndarray of shape (p, p)
        Scaled coefficients to coefficients in the units of the data; `offset` is then added.
    offset : ndarray of shape (p,)
    unit : float
        Unit of the scaled outcome.
    scale : ndarray of shape (p,)
        Units of the scaled design columns (1 for the constant).
    origin : ndarray of shape (p + 1,)
        Where the columns, and the outcome, were centred, in the units of the data (0 for the constant, or
        without one).
    log_det_back : float
        ``log |det back|`` with the unit of the outcome taken out: what a change of columns adds to ``log
        |X'X|``, halved and negated.
    """

    names: tuple[str, ...]
    sizes: FloatArray
    counts: FloatArray
    within: FloatArray
    between: FloatArray
    back: FloatArray
    offset: FloatArray
    unit: float
    scale: FloatArray
    origin: FloatArray
    log_det_back: float

    @property
    def rank(self) -> int:
        """Number of design columns."""
        return len(self.names)

    def stacked(self, weights: FloatArray) -> FloatArray:
        """Return a factor of ``W + sum_T weights_T B_T``."""
        means = np.sqrt(weights)[:, None, None] * self.between
        return np.vstack([self.within, means.reshape(-1, self.rank + 1)])

    def at(self, psi: float) -> Solved:
        """Return generalised least squares at one ratio."""
        return self.at_each([psi])[0]

    def at_each(self, ratios: Sequence[float]) -> list[Solved]:
        """Return generalised least squares at several ratios."""
        weights = np.sqrt(self.sizes / (1.0 + np.multiply.outer(np.array(ratios), self.sizes)))
        means = weights[:, :, None, None] * self.between
        inside = np.broadcast_to(self.within, (len(ratios), *self.within.shape))
        return least_squares_of_each(
            np.concatenate([inside, means.reshape(len(ratios), -1, self.rank + 1)], axis=1)
        )

    def means(self, weights: FloatArray, kept: NDArray[np.intp]) -> Solved:
        """Return least squares of unit means on some columns, weighted by size class."""
        rows = (np.sqrt(weights)[:, None, None] * self.between).reshape(-1, self.rank + 1)
        return least_squares(rows[:, [*kept, self.rank]])

    def beta(self, slope: FloatArray) -> FloatArray:
        """Return coefficients in the units of the data."""
        return np.asarray(self.back @ slope + self.offset)

    def slope(self, beta: FloatArray) -> FloatArray:
        """Return scaled coefficients from coefficients in the units of the data."""
        return np.asarray(np.linalg.solve(self.back, beta - self.offset))

    def reach(self, solved: Solved) -> FloatArray:
        """Return per coefficient the length of its row of J, from scaled outcome to data units."""
        return np.asarray(np.sqrt(((self.back @ solved.root) ** 2).sum(axis=1)))

    def bounds(
        self, beta: FloatArray, solved: Solved, df: int, engine_total: float = 0.0
    ) -> tuple[FloatArray, FloatArray]:
        """Return sizes (at least the standard errors) and amplification of rounding (at least 1).

        Least squares with backward error ``eps`` moves coefficient j by at most ``eps * condition * |J_j| *
        |outcome|``
        (Golub & Van Loan, *Matrix Computations*, ch. 5; section from memory); the longer of the outcome as
        it is here and as the
        engine holds it counts.
        """
        reach = self.reach(solved)
        size = np.maximum(np.abs(beta), reach * np.sqrt(solved.residual / max(df, 1)))
        return size, np.maximum(
            solved.condition * reach * np.sqrt(max(solved.total, engine_total)) / size, 1.0
        )


def plain_of(moments: Moments) -> Plain:
    """Write moments as factors in scaled design columns."""
    names, columns = moments.design, moments.columns
    p, constant = len(names), moments.constant
    within = np.zeros((moments.within.shape[0], p + 1))
    between = np.zeros((*moments.between.shape[:2], p + 1))
    scale, origin = np.ones(p + 1), np.zeros(p + 1)
    level = moments.between[:, :, 0]
    for j, name in enumerate((*names, moments.outcome)):
        if j < p and name == constant:
            between[:, :, j] = level
            continue
        at = columns.index(name) if j < p else len(columns) - 1
        within[:, j], between[:, :, j] = moments.within[:, at], moments.between[:, :, at + 1]
        scale[j] = moments.scale[at]
        if constant is None:
            between[:, :, j] += moments.shift[at] / moments.scale[at] * level
        else:
            origin[j] = moments.shift[at]
    back, offset = np.diag(scale[p] / scale[:p]), np.zeros(p)
    if constant is not None:
        place = names.index(constant)
        back[place] -= origin[:p] @ back
        offset[place] = origin[p]
    log_det_back = float(-np.log(scale[:p]).sum())
    sizes, counts = moments.sizes.astype(float), moments.counts.astype(float)
    return Plain(
        names, sizes, counts, within, between, back, offset, float(scale[p]), scale[:p], origin, log_det_back
    )


def largest(
    left: FloatArray, right: FloatArray, size: FloatArray, tolerance: FloatArray
) -> tuple[int, FloatArray]:
    """Return where two vectors are furthest apart for their tolerance, and distances relative to `size`."""
    difference = np.abs(left - right) / size
    excess = difference / tolerance
    bad = ~np.isfinite(excess)
    return int(np.argmax(np.where(bad, np.inf, excess))), difference
