"""Generalised least squares as a curve in the variance ratio ψ: every random-effects route is a point on it.

With ``Q`` the projection on deviations from unit means, ``P = I - Q``, and ``V / sigma_u^2 = I + psi ZZ'``,

    V^-1 sigma_u^2 = Q + sum_i P_i / (1 + T_i psi)
    A(psi)         = W + sum_T T / (1 + T psi) B_T
    beta(psi)      = A_xx^-1 A_xy,      r(psi) = A_yy - A_yx beta(psi)

(Fuller & Battese 1974; Harville 1977). All algebra is done in *whitened* coordinates: columns are combined so
that ``A(0) = I``, the outcome having become the pooled residual of length one. This costs one triangular
solve and leaves every later matrix with the condition that comes from the weighting alone.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

from mixbridge.errors import IdentificationError
from mixbridge.moments import Moments, Span
from mixbridge.moments.coordinates import hidden, touched
from mixbridge.moments.factors import root_of, upper_factor
from mixbridge.moments.whitening import axes_of, identified, stack_sizes

__all__ = ["Curve", "Point", "curve_of", "root_of"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Point:
    """Generalised least squares at one ψ.

    Attributes
    ----------
    psi : float
        Variance ratio.
    beta : ndarray of shape (p,)
        Coefficients, in the order of the formula and the units of the data.
    root : ndarray of shape (p, p)
        J with ``JJ' = (X'(I + psi ZZ')^-1 X)^-1``.
    residual : float
        ``r(psi)``, the residual sum of squares of the quasi-demeaned regression, in squared units of the
        outcome.
    white : ndarray of shape (p + 1,)
        ``(-beta, 1)`` in whitened coordinates.
    """

    psi: float
    beta: FloatArray
    root: FloatArray
    residual: float
    white: FloatArray

    @property
    def unscaled(self) -> FloatArray:
        """``(X'(I + psi ZZ')^-1 X)^-1``, to be multiplied by a variance."""
        return self.root @ self.root.T


@dataclass(frozen=True, slots=True)
class Curve:
    """A panel reduced to what depends on ψ only.

    Attributes
    ----------
    moments : Moments
        Where it came from.
    names : tuple of str
        Coefficients, in the order of the formula.
    sizes, counts : ndarray of float, shape (G,)
        Distinct unit sizes and the number of units of each.
    within, between : ndarray of shape (k, p + 1), (G, r, p + 1)
        Whitened factors of W and of each B_T; the outcome is the last column.
    within_products, between_products : ndarray of shape (p + 1, p + 1), (G, p + 1, p + 1)
        The products of these factors.
    to_beta : ndarray of shape (p, p + 1)
        Linear map from a whitened ``(beta, 1)`` to coefficients in the units of the data.
    unit : float
        Pooled residual sum of squares: what one whitened squared outcome unit is worth.
    log_det : float
        ``log |X'X|`` in the units of the data.
    within_span, between_span : Span
        Ranks, dependencies and null directions of QX and PX, in model coordinates (order `names`, scaled,
        centred).
    free_within, free_between : ndarray of bool, shape (p,)
        Whether each coefficient is estimable from within, or from between, variation alone.
    constant_white : ndarray of shape (p, K_c)
        Whitened coefficients of the unit-constant directions of the column space of X.
    within_root, between_root, unweighted_root : ndarray of shape (p, K_w), (p, K_p), (p, K_p)
        J with ``JJ'`` a generalised inverse of whitened ``X'QX``, of ``X'PX``, of ``sum xbar xbar'``.
    between_null : ndarray of shape (p, p - K_p)
        Whitened directions that do not vary between unit means.
    columns_within : int
        Number of columns of X that vary within units (the rank counts directions instead).
    within_residual : float
        Whitened within residual sum of squares ``RSS_w``; zero where it is rounding.
    reasons : mapping
        Under ``within`` and ``between``: why a coefficient is not estimable from that variation alone.
    condition : float
        Condition number of X with columns centred (where there is a constant) and scaled to unit length.
    """

    moments: Moments
    names: tuple[str, ...]
    sizes: FloatArray
    counts: FloatArray
    within: FloatArray
    between: FloatArray
    within_products: FloatArray
    between_products: FloatArray
    to_beta: FloatArray
    unit: float
    log_det: float
    within_span: Span
    between_span: Span
    free_within: NDArray[np.bool_]
    free_between: NDArray[np.bool_]
    constant_white: FloatArray
    within_root: FloatArray
    between_root: FloatArray
    unweighted_root: FloatArray
    between_null: FloatArray
    columns_within: int
    condition: float
    near_dependency: str
    within_residual: float
    reasons: Mapping[str, Mapping[str, str]] = field(default_factory=dict)

    @property
    def n(self) -> int:
        """Number of rows."""
        return self.moments.rows

    @property
    def units(self) -> int:
        """Number of units N."""
        return self.moments.units

    @property
    def rank(self) -> int:
        """``K = rank X`` (X has full column rank here)."""
        return len(self.names)

    @property
    def rank_within(self) -> int:
        """``K_w = rank QX``."""
        return self.within_span.rank

    @property
    def rank_between(self) -> int:
        """``K_p = rank PX``."""
        return self.between_span.rank

    @property
    def rank_constant(self) -> int:
        """``K_c = K - K_w``."""
        return self.rank - self.rank_within

    @property
    def df_within(self) -> int:
        """``n - N - K_w``."""
        return self.n - self.units - self.rank_within

    def weighted_between(self, weights: FloatArray) -> FloatArray:
        """Return ``sum_T weights_T B_T``, whitened.

        Parameters
        ----------
        weights : ndarray of shape (G,)

        Returns
        -------
        ndarray of shape (p + 1, p + 1)
        """
        return np.asarray(np.tensordot(weights, self.between_products, axes=1))

    def at(self, psi: float) -> Point:
        """Return generalised least squares at a finite ψ, by QR of the stacked weighted factors.

        Parameters
        ----------
        psi : float
            Variance ratio ``sigma_a^2 / sigma_u^2 >= 0``.

        Returns
        -------
        Point
        """
        p = self.rank
        stacked = self._stacked(psi)
        length = np.sqrt((stacked[:, :p] ** 2).sum(axis=0))
        upper = upper_factor(np.column_stack([stacked[:, :p] / length, stacked[:, p]]))
        slope = solve_triangular(upper[:p, :p], upper[:p, p]) / length
        root = solve_triangular(upper[:p, :p], np.eye(p)) / length[:, None]
        return Point(
            psi=psi,
            beta=self.to_beta @ np.append(slope, 1.0),
            root=self.to_beta[:, :p] @ root / np.sqrt(self.unit),
            residual=float(upper[p, p] ** 2) * self.unit,
            white=np.append(-slope, 1.0),
        )

    def gls_root(self, psi: float) -> FloatArray:
        """Return J with ``JJ' = A_xx(psi)^-1``, whitened.

        Parameters
        ----------
        psi : float
            Variance ratio.

        Returns
        -------
        ndarray of shape (p, p)
        """
        return root_of(self._stacked(psi)[:, : self.rank])

    def loadings(self, white: FloatArray) -> tuple[float, FloatArray]:
        """Return the within and, per size, the between sum of squares of the residual ``z'white``.

        Parameters
        ----------
        white : ndarray of shape (p + 1,)
            ``(-beta, 1)`` in whitened coordinates, as in `Point`.

        Returns
        -------
        float, ndarray of shape (G,)
            ``e'Qe`` and ``rho_T = sum_{i: T_i = T} ebar_i^2``, in whitened squared units of the outcome.
        """
        inside = self.within @ white
        means = self.between @ white
        return float(inside @ inside), np.asarray((means**2).sum(axis=1))

    def _stacked(self, psi: float) -> FloatArray:
        """Return a whitened factor of ``A(psi)``."""
        return stack_sizes(self.within, self.between, np.sqrt(self.sizes / (1.0 + self.sizes * psi)))


def curve_of(moments: Moments) -> Curve:
    """Reduce moments to a curve; refuses a design whose columns are dependent, naming the dependency.

    Parameters
    ----------
    moments : Moments

    Returns
    -------
    Curve

    Raises
    ------
    IdentificationError
        If the columns of X are exactly collinear, if there are no more rows than columns, or if X reproduces
        the outcome.
    """
    p = len(moments.design)
    if p == 0:
        raise IdentificationError(
            "the formula has no column on its right side; write '1' for an intercept alone."
        )
    model, within_span, between_span = identified(moments)
    axes = axes_of(moments, model, within_span)
    within, between = axes.whitened(axes.within), axes.whitened(axes.between)
    within_root = axes.within_root()
    sizes = moments.sizes.astype(float)
    return Curve(
        moments=moments,
        names=moments.design,
        sizes=sizes,
        counts=moments.counts.astype(float),
        within=within,
        between=between,
        within_products=within.T @ within,
        between_products=np.matmul(between.transpose(0, 2, 1), between),
        to_beta=axes.to_beta(model, moments.scale[-1]),
        unit=float((moments.scale[-1] * axes.residual) ** 2),
        log_det=axes.log_det(model),
        within_span=within_span,
        between_span=between_span,
        free_within=~_any(touched(model, within_span)),
        free_between=~_any(touched(model, between_span)),
        constant_white=np.eye(p)[:, : axes.constants],
        within_root=within_root,
        between_root=axes.between_root(model, between_span, np.sqrt(sizes)),
        unweighted_root=axes.between_root(model, between_span, np.ones(len(sizes))),
        between_null=axes.null(between_span),
        columns_within=int(_any(model.within[:, :p].T != 0.0).sum()),
        condition=axes.condition,
        near_dependency=axes.near_dependency(model),
        within_residual=axes.within_residual(within, within_root, model.floor[p]),
        reasons={
            "within": hidden(model, within_span, "within units"),
            "between": hidden(model, between_span, "between unit means"),
        },
    )


def _any(table: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Tell for each row whether anything in it is true."""
    return np.asarray(table.any(axis=1))
