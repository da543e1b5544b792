"""The regression behind a route, unit by unit: scores and leverages from `UnitProducts`.

Every route but `first_difference` is least squares on rows of which each unit keeps its deviations (factor a, 0 or 1)
and its mean (weight w_i, rows squared). With ``S_i`` the within products of unit i and ``zbar_i`` its mean,

    X*_i'X*_i = a S_xx,i + w_i xbar_i xbar_i',     X*_i'e*_i = a S_xe,i + w_i xbar_i ebar_i

    curve at psi   a = 1, w_i = T_i / (1 + T_i psi)     X* = V_0^(-1/2) X, the quasi-demeaned rows
    within         a = 1, w_i = 0                       deviations from unit means; unit intercepts are absorbed
    between        a = 0, w_i = T_i or 1                one mean per unit, weighted by size or not

Columns are combined so that ``sum_i X*_i'X*_i = I`` (the *orthonormal* coordinates of the regression): then
``X*_i'X*_i`` is at once the leverage of the unit, and coefficients are ``root @ b``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

from mixbridge.errors import DataError, IdentificationError, OptionError
from mixbridge.moments import Moments, noise, upper_factor
from mixbridge.moments.coordinates import model_coordinates
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import Curve
from mixbridge.routes import Fit

__all__ = ["Regression", "regression_of"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

SAME = 1e-4
"""Length, as a share of a column's own, by which within products may differ and still be of the same rows. Rounding
leaves about 1e-7 (its square is 1e-14); other rows differ by far more."""


@dataclass(frozen=True, slots=True, eq=False)
class Regression:
    """Least squares on transformed rows, in coordinates in which the products of its r columns are the identity.

    Attributes
    ----------
    side : str
        ``curve``, ``within`` or ``between``.
    psi : float
        Variance ratio: infinite for `within`, NaN for `between`.
    products : UnitProducts
    weights : ndarray of shape (N,)
        Weight w_i of each unit's mean.
    deviations : bool
        Whether deviations from unit means enter (a = 1).
    rank, rows : int
        Rank r and number of rows of the regression (units for `between`).
    root : ndarray of shape (p, r)
        Maps orthonormal to data coefficients: ``(X*'X*)^-1 = root root'``.
    free : ndarray of bool, shape (p,)
        Which coefficients the regression determines.
    from_mean, from_scaled, from_framed : ndarray of shape (k + 1, r + 1), (k, r + 1), (k, r + 1)
        Map ``(1, scaled mean)``, a scaled and a framed deviation to orthonormal columns and residual; the residual is
        in units of the outcome.
    """

    side: str
    psi: float
    products: UnitProducts
    weights: FloatArray
    deviations: bool
    rank: int
    rows: int
    root: FloatArray
    free: NDArray[np.bool_]
    from_mean: FloatArray
    from_scaled: FloatArray
    from_framed: FloatArray

    @property
    def correlated(self) -> bool:
        """Whether the working model has correlation within units: on the curve at ψ > 0."""
        return self.side == "curve" and self.psi > 0.0

    @property
    def growth(self) -> FloatArray:
        """``1 + T_i psi``: variance of ``sqrt(T_i)`` times a unit mean under the working model; one off the curve."""
        if self.side != "curve":
            return np.ones(self.products.units)
        return np.asarray(1.0 + self.products.sizes * self.psi)

    def means(self, at: slice | IntArray = slice(None)) -> FloatArray:
        """Return means of orthonormal columns and residual, shape (m, r + 1)."""
        return np.asarray(self.from_mean[0] + self.products.means[at] @ self.from_mean[1:])

    def scores(self) -> FloatArray:
        """Return ``X*_i'e*_i`` of every unit, shape (N, r): one linear map of the packed products."""
        r = self.rank
        means = self.means()
        scores = means[:, :r] * (self.weights * means[:, r])[:, None]
        if self.deviations:
            left, right = np.triu_indices(self.from_framed.shape[0])
            x, e = self.from_framed[:, :r], self.from_framed[:, r]
            mapped = x[left] * e[right, None] + x[right] * e[left, None]
            mapped[left == right] /= 2.0
            scores += self.products.packed @ mapped
        return np.asarray(scores)

    def leverages(self) -> FloatArray:
        """Return the trace of every unit's leverage block, shape (N,); they add up to r."""
        r = self.rank
        traces = self.weights * (self.means()[:, :r] ** 2).sum(axis=1)
        if self.deviations:
            left, right = np.triu_indices(self.from_framed.shape[0])
            mapped = np.where(left == right, 1.0, 2.0) * (
                self.from_framed[left, :r] * self.from_framed[right, :r]
            ).sum(axis=1)
            traces += self.products.packed @ mapped
        return np.asarray(traces)

    def within(self, at: slice | IntArray) -> FloatArray:
        """Return within products of orthonormal columns and residual, shape (m, r + 1, r + 1); zero if a = 0."""
        r, k = self.rank + 1, self.from_framed.shape[0]
        if not self.deviations:
            return np.zeros((self.products.sizes[at].size, r, r))
        framed = self.products.framed(at)
        half = (framed.reshape(-1, k) @ self.from_framed).reshape(-1, k, r)
        whole = np.matmul(self.from_framed.T, half)
        return np.asarray((whole + whole.transpose(0, 2, 1)) / 2.0)


def regression_of(
    curve: Curve,
    products: UnitProducts,
    point: float | str | Fit,
    between: str | FloatArray = "size_weighted",
) -> Regression:
    """Set up the regression of a route on the unit products.

    Parameters
    ----------
    curve : Curve
    products : UnitProducts
        Of the same rows as the curve.
    point : float, str or Fit
        A variance ratio (infinite: the within regression), ``"between"``, or a fit of any route but
        `first_difference`.
    between : {'size_weighted', 'unweighted'} or ndarray of shape (G,)
        Weight of a unit mean, or its values by size. For a fit of `between` the convention of the fit is used instead.
    """
    _same_rows(curve, products)
    side, psi = _point(curve, point)
    if isinstance(point, Fit) and side == "between":
        between = str(point.conventions.get("between", between))
    model, z = model_coordinates(curve.moments), _to_model_columns(curve.moments)
    p = curve.rank
    varies = (model.within**2).sum(axis=0) > model.floor**2  # the rest is rounding, for the curve too
    inner, to_deviation = np.where(varies, model.within, 0.0), np.where(varies, z[1:], 0.0)
    by_size, kept, free = _weights(curve, side, psi, between)
    if kept.size == 0:
        raise IdentificationError(f"no column varies {side} units: that regression has no coefficients.")
    outer = (np.sqrt(by_size)[:, None, None] * model.between).reshape(-1, p + 1)
    stacked = {"curve": np.vstack([inner, outer]), "within": inner, "between": outer}[side]
    columns = stacked[:, kept]
    length = np.sqrt((columns**2).sum(axis=0))
    upper = upper_factor(np.column_stack([columns / length, stacked[:, p]]))
    r = kept.size
    inverse = solve_triangular(upper[:r, :r], np.eye(r)) / length[:, None]
    scale = float(curve.moments.scale[-1])
    change = np.zeros((p + 1, r + 1))
    change[kept, :r] = inverse
    change[kept, r] = -scale * (inverse @ upper[:r, r])
    change[p, r] = scale
    weights = by_size[np.searchsorted(curve.moments.sizes, products.sizes)]
    return Regression(
        side=side,
        psi=psi,
        products=products,
        weights=weights,
        deviations=side != "between",
        rank=r,
        rows=curve.units if side == "between" else curve.n,
        root=model.to_model[:, kept] @ inverse,
        free=free,
        from_mean=z @ change,
        from_scaled=to_deviation @ change,
        from_framed=(products.frame @ to_deviation) @ change,
    )


def _to_model_columns(moments: Moments) -> FloatArray:
    """Return the map from ``(1, scaled z)`` to the columns of `ModelCoordinates`, shape (k + 1, p + 1)."""
    columns, p = moments.columns, len(moments.design)
    z = np.zeros((len(columns) + 1, p + 1))
    for j, name in enumerate((*moments.design, moments.outcome)):
        if j < p and name == moments.constant:
            z[0, j] = 1.0
            continue
        at = len(columns) - 1 if j == p else columns.index(name)
        z[at + 1, j] = 1.0
        if moments.constant is None:
            z[0, j] = moments.shift[at] / moments.scale[at]
    return z


def _weights(
    curve: Curve, side: str, psi: float, between: str | FloatArray
) -> tuple[FloatArray, IntArray, NDArray[np.bool_]]:
    """Return the weight of a unit mean by size, the columns kept and the coefficients determined."""
    every = np.ones(curve.rank, dtype=bool)
    if side == "curve":
        return curve.sizes / (1.0 + curve.sizes * psi), np.flatnonzero(every), every
    if side == "within":
        return np.zeros_like(curve.sizes), curve.within_span.kept, curve.free_within
    if not isinstance(between, str):
        return between, curve.between_span.kept, curve.free_between
    if between not in ("size_weighted", "unweighted"):
        raise OptionError.not_among("between", between, ("size_weighted", "unweighted"))
    weights = curve.sizes if between == "size_weighted" else np.ones_like(curve.sizes)
    return weights, curve.between_span.kept, curve.free_between


def _point(curve: Curve, point: float | str | Fit) -> tuple[str, float]:
    """Return the side of the curve and ψ."""
    if isinstance(point, Fit):
        if point.route == "first_difference":
            raise OptionError(
                "unit products hold no order of periods, so there is no covariance by unit for first_difference here."
            )
        if not point.estimated:
            raise IdentificationError(f"the route {point.route!r} gave no coefficients ({point.status}).")
        if (point.rows, point.units) != (curve.n, curve.units):
            raise DataError(
                f"the fit uses {point.rows} rows of {point.units} units, the curve {curve.n} of {curve.units}: "
                "take both from the same rows."
            )
        if point.route == "between":
            return "between", np.nan
        return _point(curve, point.ratio)
    if isinstance(point, str):
        if point == "between":
            return "between", np.nan
        raise OptionError.not_among("point", point, ("a ratio from 0 to infinity", "a fit", "between"))
    psi = float(point)
    if np.isnan(psi) or psi < 0.0:
        raise OptionError(f"a variance ratio of {psi} is not allowed: it runs from 0 to infinity.")
    return ("within", psi) if np.isinf(psi) else ("curve", psi)


def _same_rows(curve: Curve, products: UnitProducts) -> None:
    """Refuse unit products that do not belong to the moments of the curve."""
    moments = curve.moments
    same = (
        (moments.design, moments.constant, moments.outcome)
        == (products.design, products.constant, products.outcome)
        and np.array_equal(moments.shift, products.shift)
        and np.array_equal(moments.scale, products.scale)
    )
    sizes, counts = np.unique(products.sizes, return_counts=True)
    same = same and np.array_equal(sizes, moments.sizes) and np.array_equal(counts, moments.counts)
    if same:
        w, total = moments.within.T @ moments.within, products.within_total()
        length = SAME * np.sqrt(np.diag(w)) + noise(moments)
        same = bool((np.abs(w - total) <= np.outer(length, length)).all())
    if not same:
        raise DataError(
            f"the unit products ({products.rows} rows, {products.units} units) and the moments ({moments.rows} rows, "
            f"{moments.units} units) are not of the same rows and columns: gather both from the same source, and leave "
            "out the same units in both."
        )
