"""Everything that follows from moments and one variance ratio ψ: the curve on which every random-effects
route is a point.

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
from mixbridge.moments import Moments
from mixbridge.moments.columns import Span, dependency_text, noise, span_of

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
    columns_within: int
    condition: float
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
        """Return ``sum_T weights_T B_T``, whitened."""
        return np.asarray(np.tensordot(weights, self.between_products, axes=1))

    def at(self, psi: float) -> Point:
        """Return generalised least squares at a finite ψ, by QR of the stacked weighted factors."""
        p = self.rank
        weights = np.sqrt(self.sizes / (1.0 + self.sizes * psi))
        stacked = np.vstack([self.within, (weights[:, None, None] * self.between).reshape(-1, p + 1)])
        length = np.sqrt((stacked[:, :p] ** 2).sum(axis=0))
        upper = np.linalg.qr(np.column_stack([stacked[:, :p] / length, stacked[:, p]]), mode="r")
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
        """Return J with ``JJ' = A_xx(psi)^-1``, whitened."""
        p = self.rank
        weights = np.sqrt(self.sizes / (1.0 + self.sizes * psi))
        between = (weights[:, None, None] * self.between).reshape(-1, p + 1)
        return root_of(np.vstack([self.within, between])[:, :p])

    def loadings(self, white: FloatArray) -> tuple[float, FloatArray]:
        """Return the within and, per size, the between sum of squares of the residual ``z'white``, in
        whitened units.

        Returns
        -------
        float, ndarray of shape (G,)
            ``e'Qe`` and ``rho_T = sum_{i: T_i = T} ebar_i^2``.
        """
        inside = self.within @ white
        means = self.between @ white
        return float(inside @ inside), np.asarray((means**2).sum(axis=1))


def curve_of(moments: Moments) -> Curve:
    """Reduce moments to a curve; refuses a design whose columns are dependent, naming the dependency.

    Raises
    ------
    IdentificationError
        If the columns of X are exactly collinear, if there are no more rows than columns, or if X reproduces
        the outcome.
    """
    names = moments.design
    p = len(names)
    if p == 0:
        raise IdentificationError(
            "the formula has no column on its right side; write '1' for an intercept alone."
        )
    z, to_model, offset, floor = _model_coordinates(moments)
    within, between = moments.within @ z[1:], moments.between @ z
    weights = np.sqrt(moments.sizes.astype(float))
    stacked = np.vstack([within, (weights[:, None, None] * between).reshape(-1, p + 1)])
    relative = 1e-7 if moments.note.startswith("ill-conditioned") else 1e-12
    total = span_of(_small(stacked[:, :p]), floor[:p], relative)
    sizes = 1.0 / np.abs(np.diag(to_model))
    _refuse_collinear(total, to_model, names, sizes)
    if moments.rows <= p:
        raise IdentificationError(
            f"{moments.rows} rows for {p} coefficients: no degrees of freedom are left. Use fewer columns or more rows."
        )
    within = np.where((within**2).sum(axis=0) > floor**2, within, 0.0)
    within_span = span_of(_small(within[:, :p]), floor[:p], relative)
    between_stack = _small((weights[:, None, None] * between).reshape(-1, p + 1)[:, :p])
    between_span = span_of(between_stack, floor[:p], relative)
    # unit-constant directions first, so that every matrix on the curve is graded along its axes
    basis = np.hstack([within_span.null, np.eye(p)[:, within_span.kept]])
    constants = within_span.null.shape[1]
    between_plain, columns_within = between, int((within[:, :p] != 0.0).any(axis=0).sum())
    plain, to_plain = to_model, to_model @ basis
    within = np.column_stack([within[:, :p] @ basis, within[:, p]])
    within[:, :constants] = 0.0
    between = np.concatenate([between[:, :, :p] @ basis, between[:, :, p:]], axis=2)
    stacked = np.vstack([within, (weights[:, None, None] * between).reshape(-1, p + 1)])
    upper = np.linalg.qr(stacked, mode="r")
    leftover = abs(float(upper[p, p]))
    size = float(np.sqrt((stacked[:, p] ** 2).sum()))
    if moments.rows > p and leftover <= 1e-13 * size + floor[p]:
        raise IdentificationError(
            f"the outcome {moments.outcome!r} is reproduced exactly by the covariates (perfect fit): there is no error left "
            "to estimate variances from. Look for a covariate that is computed from the outcome."
        )
    upper_x, upper_xy = upper[:p, :p], upper[:p, p]
    residual = float(upper[p, p])
    inverse = solve_triangular(upper, np.eye(p + 1))  # (x*, y*) @ inverse is whitened
    white_within, white_between = within @ inverse, between @ inverse
    scale_y = moments.scale[-1]
    to_beta = np.zeros((p, p + 1))
    to_beta[:, :p] = scale_y * residual * (to_plain @ solve_triangular(upper_x, np.eye(p)))
    to_beta[:, p] = scale_y * (to_plain @ solve_triangular(upper_x, upper_xy)) + offset
    unit = float((scale_y * residual) ** 2)
    length = np.sqrt((upper_x**2).sum(axis=0))
    condition = float(np.linalg.cond(upper_x / length))
    log_det = 2.0 * float(np.log(np.abs(np.diag(upper_x))).sum()) - 2.0 * float(
        np.linalg.slogdet(to_plain)[1]
    )
    within_root = upper_x[:, constants:] @ root_of(within[:, constants:p])
    inverse_basis = np.linalg.inv(basis)
    between_root = upper_x @ (
        inverse_basis[:, between_span.kept] @ root_of(between_stack[:, between_span.kept])
    )
    plain_stack = _small(between_plain.reshape(-1, p + 1)[:, :p])
    unweighted_root = upper_x @ (
        inverse_basis[:, between_span.kept] @ root_of(plain_stack[:, between_span.kept])
    )
    touched_within, touched_between = _touched(within_span, plain), _touched(between_span, plain)
    inner = white_within @ np.append(
        -within_root @ (within_root.T @ (white_within[:, :p].T @ white_within[:, p])), 1.0
    )
    left = float(np.sqrt(inner @ inner))
    nothing = 1e-13 * float(np.sqrt((within[:, p] ** 2).sum())) / abs(residual) + floor[p] / abs(residual)
    return Curve(
        moments=moments,
        names=names,
        sizes=moments.sizes.astype(float),
        counts=moments.counts.astype(float),
        within=white_within,
        between=white_between,
        within_products=white_within.T @ white_within,
        between_products=np.matmul(white_between.transpose(0, 2, 1), white_between),
        to_beta=to_beta,
        unit=unit,
        log_det=log_det,
        within_span=within_span,
        between_span=between_span,
        free_within=~touched_within.any(axis=1),
        free_between=~touched_between.any(axis=1),
        constant_white=np.eye(p)[:, :constants],
        within_root=within_root,
        between_root=between_root,
        unweighted_root=unweighted_root,
        columns_within=columns_within,
        condition=condition,
        within_residual=left**2 if left > nothing else 0.0,
        reasons={
            "within": _reasons(
                within_span, plain, names, touched_within, "within units", sizes, moments.constant
            ),
            "between": _reasons(
                between_span, plain, names, touched_between, "between unit means", sizes, moments.constant
            ),
        },
    )


def _model_coordinates(moments: Moments) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Return the map from ``(1, scaled z)`` to model columns and outcome, and back to coefficients.

    With an explicit constant, model columns are centred and scaled; without one they are only scaled, since
    moving the origin would change the model. Returned: map ``(k + 1, p + 1)``; L and o with ``beta = scale_y
    L beta* + o``; and the rounding floor of each model column.
    """
    names, columns = moments.design, moments.columns
    p, k = len(names), len(columns)
    z = np.zeros((k + 1, p + 1))
    to_model = np.zeros((p, p))
    offset = np.zeros(p)
    floor = np.zeros(p + 1)
    bound = noise(moments)
    free = moments.constant is None
    intercept = None if free else names.index(str(moments.constant))
    for j, name in enumerate(names):
        if j == intercept:
            z[0, j] = to_model[j, j] = 1.0
            offset[j] = moments.shift[-1]
            continue
        at = columns.index(name)
        z[at + 1, j] = 1.0
        to_model[j, j] = 1.0 / moments.scale[at]
        floor[j] = bound[at]
        if free:
            z[0, j] = moments.shift[at] / moments.scale[at]
        else:
            to_model[intercept, j] = -moments.shift[at] / moments.scale[at]
    z[k, p] = 1.0
    floor[p] = bound[-1]
    if free:
        z[0, p] = moments.shift[-1] / moments.scale[-1]
    return z, to_model, offset, floor


def _small(factor: FloatArray) -> FloatArray:
    """Return a square factor with the same products."""
    return np.linalg.qr(factor, mode="r") if factor.shape[0] > factor.shape[1] else factor


def root_of(factor: FloatArray) -> FloatArray:
    """Return J with ``JJ' = (F'F)^-1`` for F of full column rank."""
    if factor.shape[1] == 0:
        return np.zeros((0, 0))
    length = np.sqrt((factor**2).sum(axis=0))
    upper = np.linalg.qr(factor / length, mode="r")
    return np.asarray(solve_triangular(upper, np.eye(upper.shape[0])) / length[:, None])


def _touched(span: Span, to_model: FloatArray) -> NDArray[np.bool_]:
    """Tell which coefficients (rows) each null direction (columns) touches; small against what it is made of is zero."""
    null = np.abs(span.null)
    touched = null > 1e-9 * null.max(axis=0, initial=0.0)
    for j in np.flatnonzero((to_model != 0.0).sum(axis=1) > 1):  # the intercept, which collects all origins
        touched[j] = np.abs(to_model[j] @ span.null) > 1e-9 * (np.abs(to_model[j]) @ null)
    return np.asarray(touched)


def _reasons(
    span: Span,
    to_model: FloatArray,
    names: tuple[str, ...],
    touched: NDArray[np.bool_],
    where: str,
    sizes: FloatArray,
    intercept: str | None,
) -> dict[str, str]:
    """Say for each coefficient that is not estimable which dependency hides it."""
    reasons: dict[str, str] = {}
    null = to_model @ span.null
    for j in np.flatnonzero(touched.any(axis=1)):
        at = next(
            (k for k in np.flatnonzero(touched[j]) if span.dependencies[k].column == j),
            int(touched[j].argmax()),
        )
        dependency = span.dependencies[at]
        if dependency.column == j and not dependency.others:
            reasons[names[j]] = f"does not vary {where}"
        else:
            visible = np.where(touched[:, at], null[:, at], 0.0)
            if where.startswith("within"):  # a constant drops out of deviations from unit means
                visible[[name == intercept for name in names]] = 0.0
            text = dependency_text(dependency.column, visible, names, sizes)
            reasons[names[j]] = f"not separable {where}: {text}"
    return reasons


def _refuse_collinear(span: Span, to_model: FloatArray, names: tuple[str, ...], sizes: FloatArray) -> None:
    if not span.dependencies:
        return
    null = to_model @ span.null
    lines = [
        dependency_text(dependency.column, null[:, at], names, sizes)
        for at, dependency in enumerate(span.dependencies)
    ]
    raise IdentificationError(
        f"the columns of the design are exactly collinear: {'; '.join(lines)}. "
        "No data can tell these coefficients apart; leave one column of each dependency out of the formula."
    )
