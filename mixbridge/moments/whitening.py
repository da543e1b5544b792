"""Whitening: the design turned to graded axes, on which the cross-products of all rows are the identity.

Model columns are combined so that the unit-constant directions come first: every matrix on the curve is then
graded along its axes. One triangular factor of all rows along these axes does the rest; it leaves every later
matrix with the condition that comes from the weighting alone.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

from mixbridge.errors import IdentificationError
from mixbridge.moments.closed import Moments
from mixbridge.moments.columns import Span, dependency_text, span_of
from mixbridge.moments.coordinates import ModelCoordinates, model_coordinates, refuse_collinear
from mixbridge.moments.factors import root_of, upper_factor

__all__ = ["Axes", "axes_of", "identified", "stack_sizes"]

FloatArray = NDArray[np.float64]

NEAR = 1e5
"""Condition number from which near-collinearity is named: five of sixteen digits are lost."""


def identified(moments: Moments) -> tuple[ModelCoordinates, Span, Span]:
    """Return model coordinates and what they identify; refuses dependent columns and too few rows.

    Parameters
    ----------
    moments : Moments

    Returns
    -------
    model : ModelCoordinates
        With exact zeros in columns of the within factor that are rounding.
    within_span, between_span : Span
        Of QX and of PX.

    Raises
    ------
    IdentificationError
        If the columns of X are exactly collinear, or if there are no more rows than columns.
    """
    model = model_coordinates(moments)
    p = len(model.names)
    floor, weights = model.floor[:p], np.sqrt(moments.sizes.astype(float))
    relative = 1e-7 if moments.note.startswith("ill-conditioned") else 1e-12
    everything = stack_sizes(model.within, model.between, weights)
    refuse_collinear(model, span_of(_small(everything[:, :p]), floor, relative))
    if moments.rows <= p:
        raise IdentificationError(
            f"{moments.rows} rows for {p} coefficients: no degrees of freedom are left. "
            "Use fewer columns or more rows."
        )
    varies = (model.within**2).sum(axis=0) > model.floor**2
    model = replace(model, within=np.where(varies, model.within, 0.0))
    within_span = span_of(_small(model.within[:, :p]), floor, relative)
    between_span = span_of(_small(_rows(model.between, weights)[:, :p]), floor, relative)
    return model, within_span, between_span


@dataclass(frozen=True, slots=True)
class Axes:
    """Axes along which the curve is graded, and the triangular factor of all rows along them.

    Model columns are combined so that the unit-constant directions come first; ``(x*, y*)`` along the axes,
    times the inverse of `upper`, is whitened.

    Attributes
    ----------
    basis : ndarray of shape (p, p)
        Axes in model coordinates.
    constants : int
        Number of unit-constant directions ``K_c``.
    within, between : ndarray of shape (k, p + 1), (G, r, p + 1)
        Factors of W and of each B_T along the axes; the outcome is the last column.
    upper : ndarray of shape (p + 1, p + 1)
        Upper triangular, its products those of all rows along the axes.
    """

    basis: FloatArray
    constants: int
    within: FloatArray
    between: FloatArray
    upper: FloatArray

    @property
    def upper_x(self) -> FloatArray:
        """The part of `upper` that belongs to X."""
        return self.upper[:-1, :-1]

    @property
    def residual(self) -> float:
        """Length of the pooled residual in model coordinates, with the sign of the decomposition."""
        return float(self.upper[-1, -1])

    @property
    def condition(self) -> float:
        """Condition number of X along the axes, its columns scaled to unit length."""
        length = np.sqrt((self.upper_x**2).sum(axis=0))
        return float(np.linalg.cond(self.upper_x / length))

    def near_dependency(self, model: ModelCoordinates) -> str:
        """Name the combination of columns that nearly vanishes; empty below a condition number of 1e5.

        Parameters
        ----------
        model : ModelCoordinates
            Of which the axes are combinations.

        Returns
        -------
        str
            Such as ``x3 ≈ 2·x1 - x2``.
        """
        if self.condition < NEAR:
            return ""
        length = np.sqrt((self.upper_x**2).sum(axis=0))
        weakest = np.linalg.svd(self.upper_x / length)[2][-1] / length
        null = model.to_model @ (self.basis @ weakest)
        reach = np.abs(null) * model.typical
        if model.constant is not None:
            reach[model.names.index(model.constant)] = 0.0
        shown = np.where(reach >= 1e-3 * reach.max(), null, 0.0)
        column = int(np.flatnonzero(shown)[-1])
        digits = [float(f"{value:.3g}") for value in shown / shown[column]]
        return dependency_text(column, np.array(digits), model.names).replace(" = ", " ≈ ", 1)

    def log_det(self, model: ModelCoordinates) -> float:
        """Return ``log |X'X|`` in the units of the data.

        Parameters
        ----------
        model : ModelCoordinates
            Of which the axes are combinations.

        Returns
        -------
        float
        """
        along = 2.0 * float(np.log(np.abs(np.diag(self.upper_x))).sum())
        return along - 2.0 * float(np.linalg.slogdet(model.to_model @ self.basis)[1])

    def whitened(self, factor: FloatArray) -> FloatArray:
        """Return factors along the axes in whitened coordinates.

        Parameters
        ----------
        factor : ndarray of shape (..., p + 1)
            `within` or `between`.

        Returns
        -------
        ndarray
            Of the same shape.
        """
        return np.asarray(factor @ solve_triangular(self.upper, np.eye(len(self.upper))))

    def to_beta(self, model: ModelCoordinates, scale: float) -> FloatArray:
        """Return the linear map from a whitened ``(beta, 1)`` to coefficients in the units of the data.

        Parameters
        ----------
        model : ModelCoordinates
            Of which the axes are combinations.
        scale : float
            Unit of the scaled outcome.

        Returns
        -------
        ndarray of shape (p, p + 1)
        """
        p = len(self.basis)
        to_model = model.to_model @ self.basis
        result = np.zeros((p, p + 1))
        result[:, :p] = scale * self.residual * (to_model @ solve_triangular(self.upper_x, np.eye(p)))
        result[:, p] = scale * (to_model @ solve_triangular(self.upper_x, self.upper[:p, p])) + model.offset
        return result

    def null(self, span: Span) -> FloatArray:
        """Return null directions, given in model coordinates, in whitened ones.

        Parameters
        ----------
        span : Span

        Returns
        -------
        ndarray of shape (p, p - rank)
        """
        return np.asarray(self.upper_x @ np.linalg.solve(self.basis, span.null))

    def within_root(self) -> FloatArray:
        """Return J with ``JJ'`` a generalised inverse of the whitened ``X'QX``.

        Returns
        -------
        ndarray of shape (p, K_w)
        """
        return np.asarray(self.upper_x[:, self.constants :] @ root_of(self.within[:, self.constants : -1]))

    def between_root(self, model: ModelCoordinates, span: Span, weights: FloatArray) -> FloatArray:
        """Return J with ``JJ'`` a generalised inverse of the whitened weighted products of unit means.

        Parameters
        ----------
        model : ModelCoordinates
            Of which the axes are combinations.
        span : Span
            Of PX.
        weights : ndarray of shape (G,)
            Root of the weight of a unit mean, by size.

        Returns
        -------
        ndarray of shape (p, K_p)
        """
        factor = _small(_rows(model.between, weights)[:, :-1])
        basis = np.linalg.inv(self.basis)[:, span.kept]
        return np.asarray(self.upper_x @ (basis @ root_of(factor[:, span.kept])))

    def within_residual(self, white: FloatArray, root: FloatArray, floor: float) -> float:
        """Return the whitened within residual sum of squares, zero where it is rounding.

        Parameters
        ----------
        white : ndarray of shape (k, p + 1)
            Whitened factor of W.
        root : ndarray of shape (p, K_w)
            As from `within_root`.
        floor : float
            Length of the outcome that rounding of the stored data alone can produce.

        Returns
        -------
        float
        """
        slope = root @ (root.T @ (white[:, :-1].T @ white[:, -1]))
        inner = white @ np.append(-slope, 1.0)
        left, residual = float(np.sqrt(inner @ inner)), abs(self.residual)
        nothing = 1e-13 * float(np.sqrt((self.within[:, -1] ** 2).sum())) / residual + floor / residual
        return left**2 if left > nothing else 0.0


def axes_of(moments: Moments, model: ModelCoordinates, within_span: Span) -> Axes:
    """Turn model columns to graded axes; refuses an outcome that the covariates reproduce.

    Parameters
    ----------
    moments : Moments
    model : ModelCoordinates
        From `identified`, as is `within_span`.
    within_span : Span

    Returns
    -------
    Axes

    Raises
    ------
    IdentificationError
        If X reproduces the outcome.
    """
    p = len(model.names)
    basis = np.hstack([within_span.null, np.eye(p)[:, within_span.kept]])
    constants = within_span.null.shape[1]
    within = np.column_stack([model.within[:, :p] @ basis, model.within[:, p]])
    within[:, :constants] = 0.0
    between = np.concatenate([model.between[:, :, :p] @ basis, model.between[:, :, p:]], axis=2)
    stacked = stack_sizes(within, between, np.sqrt(moments.sizes.astype(float)))
    axes = Axes(basis, constants, within, between, upper_factor(stacked))
    size = float(np.sqrt((stacked[:, p] ** 2).sum()))
    if abs(axes.residual) <= 1e-13 * size + model.floor[p]:
        raise IdentificationError(
            f"the outcome {moments.outcome!r} is reproduced exactly by the covariates (perfect fit): "
            "there is no error left to estimate variances from. "
            "Look for a covariate that is computed from the outcome."
        )
    return axes


def stack_sizes(within: FloatArray, between: FloatArray, weights: FloatArray) -> FloatArray:
    """Return a factor of ``W + sum_T weights_T^2 B_T``.

    Parameters
    ----------
    within : ndarray of shape (k, c)
        Factor of W.
    between : ndarray of shape (G, r, c)
        Factor of each B_T.
    weights : ndarray of shape (G,)
        Root of the weight of each size.

    Returns
    -------
    ndarray of shape (k + G r, c)
    """
    return np.vstack([within, _rows(between, weights)])


def _rows(between: FloatArray, weights: FloatArray) -> FloatArray:
    """Return a factor of ``sum_T weights_T^2 B_T``."""
    return np.asarray((weights[:, None, None] * between).reshape(-1, between.shape[2]))


def _small(factor: FloatArray) -> FloatArray:
    """Return a square factor with the same products."""
    return upper_factor(factor) if factor.shape[0] > factor.shape[1] else factor
