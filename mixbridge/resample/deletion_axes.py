"""Axes on which W and every B_T keep their digits together, and each unit's products along them.

In whitened coordinates ``W_xx + sum_T T B_T,xx = I``, so that both parts have the same eigenvectors. Along these axes
(unit-constant directions first, then those that do not vary between unit means, then the rest) W_xx is diagonal and the
size-weighted between products nearly so: every matrix on the curve, and the within and the between regression too, is
well conditioned once its diagonal is scaled to one, up to what the sizes make of the classes. The outcome is measured
from generalised least squares at one reference ratio and scaled to ``r = 1`` there.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

from mixbridge.moments import Moments
from mixbridge.moments.coordinates import model_coordinates
from mixbridge.moments.products import UnitProducts
from mixbridge.moments.whitening import axes_of, identified
from mixbridge.ratio import Curve

__all__ = ["UnitAxes", "pack", "unit_axes"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True, eq=False)
class UnitAxes:
    """A panel and its units in common coordinates (p axes, then the outcome).

    Attributes
    ----------
    curve : Curve
    products : UnitProducts
    constants, flat : int
        Leading axes that do not vary within units; axes after them that do not vary between unit means.
    within : ndarray of shape (h,)
        Packed W, ``h = (p + 1)(p + 2) / 2``.
    between : ndarray of shape (G, h)
        Packed B_T.
    classes : ndarray of int, shape (N,)
        Place of each unit's size among the distinct sizes.
    to_data : ndarray of shape (p, p)
        L: data coefficients are ``origin + L b``.
    origin : ndarray of shape (p,)
        Coefficients at the reference ratio.
    worth : float
        What one squared unit of the outcome here is worth in the data.
    from_mean : ndarray of shape (k + 1, p + 1)
        Maps ``(1, scaled mean)`` of a unit.
    from_packed : ndarray of shape (k (k + 1) / 2, h)
        Maps the packed framed products of a unit.
    """

    curve: Curve
    products: UnitProducts
    constants: int
    flat: int
    within: FloatArray
    between: FloatArray
    classes: IntArray
    to_data: FloatArray
    origin: FloatArray
    worth: float
    from_mean: FloatArray
    from_packed: FloatArray

    @property
    def order(self) -> int:
        """Number of coordinates, ``p + 1``."""
        return self.curve.rank + 1

    @property
    def inner(self) -> IntArray:
        """Axes that vary within units."""
        return np.arange(self.constants, self.curve.rank)

    @property
    def outer(self) -> IntArray:
        """Axes that vary between unit means."""
        every = np.arange(self.curve.rank)
        return every[(every < self.constants) | (every >= self.constants + self.flat)]

    def unit_within(self, at: IntArray | slice) -> FloatArray:
        """Return the packed within products of units, shape (h, m)."""
        return np.asarray(self.from_packed.T @ self.products.packed[at].T)

    def unit_means(self, at: IntArray | slice) -> FloatArray:
        """Return the means of units, shape (p + 1, m)."""
        return np.asarray((self.from_mean[0] + self.products.means[at] @ self.from_mean[1:]).T)


@lru_cache(maxsize=64)
def pack(order: int) -> tuple[IntArray, IntArray, IntArray]:
    """Return rows and columns of a packed upper triangle, and the place of each entry of the full matrix in it."""
    rows, columns = np.triu_indices(order)
    places = np.empty((order, order), dtype=np.intp)
    places[rows, columns] = places[columns, rows] = np.arange(rows.size)
    return rows, columns, places


def unit_axes(curve: Curve, products: UnitProducts, reference: float) -> UnitAxes:
    """Choose the axes and map the units to them.

    Parameters
    ----------
    curve : Curve
    products : UnitProducts
        Of the same rows.
    reference : float
        Finite ratio from whose coefficients the outcome is measured.

    Returns
    -------
    UnitAxes
    """
    moments, p = curve.moments, curve.rank
    model, within_span, _ = identified(moments)
    axes = axes_of(moments, model, within_span)
    constants = axes.constants
    turn, flat = _turn(curve, constants)
    point = curve.at(reference)
    residual = point.residual / curve.unit
    change = np.zeros((p + 1, p + 1))
    change[:p, :p] = turn
    change[:, p] = point.white / np.sqrt(residual)
    within, between = curve.within @ change, curve.between @ change
    within[:, :constants] = 0.0
    between[:, :, constants : constants + flat] = 0.0
    weights = curve.sizes / (1.0 + curve.sizes * reference)
    length = np.sqrt((within**2).sum(axis=0) + weights @ (between**2).sum(axis=1))
    length[p] = 1.0
    change, within, between = change / length, within / length, between / length
    rows, columns, _ = pack(p + 1)
    whitened = _basis(axes.basis) @ solve_triangular(axes.upper, np.eye(p + 1)) @ change
    raw = _columns(moments)
    from_mean = raw @ whitened
    from_mean[:, constants : constants + flat] = 0.0
    varies = (model.within**2).sum(axis=0) > 0.0  # the rest is rounding, for the curve too
    deviation = (products.frame @ np.where(varies, raw[1:], 0.0)) @ whitened
    deviation[:, :constants] = 0.0
    return UnitAxes(
        curve=curve,
        products=products,
        constants=constants,
        flat=flat,
        within=(within.T @ within)[rows, columns],
        between=np.matmul(between.transpose(0, 2, 1), between)[:, rows, columns],
        classes=np.searchsorted(moments.sizes, products.sizes),
        to_data=curve.to_beta[:, :p] @ (change[:p, :p] * np.sqrt(residual)),
        origin=point.beta,
        worth=point.residual,
        from_mean=from_mean,
        from_packed=_squared(deviation),
    )


def _turn(curve: Curve, constants: int) -> tuple[FloatArray, int]:
    """Return the axes in whitened coordinates: unit-constant ones, those flat between unit means, the rest."""
    p, flat = curve.rank, curve.between_null.shape[1]
    turn = np.eye(p)
    if p == constants:
        return turn, flat
    basis = (
        np.linalg.qr(curve.between_null[constants:], mode="complete")[0] if flat else np.eye(p - constants)
    )
    rest = basis[:, flat:]
    if rest.shape[1]:
        rest = rest @ np.linalg.svd(curve.within[:, constants:p] @ rest)[2].T
    turn[constants:, constants:] = np.hstack([basis[:, :flat], rest])
    return turn, flat


def _columns(moments: Moments) -> FloatArray:
    """Return the map from ``(1, scaled z)`` to the columns of the model and the outcome."""
    k, one = moments.within.shape[1], np.ones(1, dtype=np.int64)
    plain = replace(moments, within=np.eye(k), between=np.eye(k + 1)[None], sizes=one, counts=one)
    return np.asarray(model_coordinates(plain).between[0])


def _basis(basis: FloatArray) -> FloatArray:
    p = len(basis)
    whole = np.eye(p + 1)
    whole[:p, :p] = basis
    return whole


def _squared(linear: FloatArray) -> FloatArray:
    """Return the map of packed products that a map of vectors makes."""
    left, right, _ = pack(linear.shape[0])
    rows, columns, _ = pack(linear.shape[1])
    mapped = linear[left][:, rows] * linear[right][:, columns]
    crossed = linear[right][:, rows] * linear[left][:, columns]
    return np.asarray(np.where((left == right)[:, None], mapped, mapped + crossed))
