"""Least-squares routes: `pooled`, `within`, `between`, and `first_difference` from rows in order."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.moments import factor_from_rows, noise, span_of, stack_factors
from mixbridge.ratio import Curve
from mixbridge.routes.quadratic import NotEstimableError

__all__ = ["Differences", "LeastSquares", "between", "differences_of", "first_difference", "pooled", "within"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class LeastSquares:
    """Coefficients and the residual form that scales them.

    Attributes
    ----------
    beta : ndarray of shape (p,)
        In the units of the data, NaN where not estimable.
    root : ndarray of shape (p, r)
        J with ``JJ'`` the inverse cross-products of the regression (zero rows where not estimable).
    residual : float
        Residual sum of squares, squared units of the outcome.
    df : int
        Degrees of freedom of the scale ``residual / df``; below one there is no scale.
    rank : int
        Number of directions that the regression determines.
    reasons : mapping of str to str
        Coefficient -> why it is not estimable.
    form : str
        Name of the residual form.
    """

    beta: FloatArray
    root: FloatArray
    residual: float
    df: int
    rank: int
    reasons: Mapping[str, str]
    form: str


def pooled(curve: Curve) -> LeastSquares:
    """Ordinary least squares on all rows: ψ = 0, scale ``RSS/(n - K)``.

    Parameters
    ----------
    curve : Curve

    Returns
    -------
    LeastSquares
    """
    point = curve.at(0.0)
    df = curve.n - curve.rank
    return LeastSquares(
        point.beta, point.root, point.residual, df, curve.rank, {}, "pooled residual sum of squares"
    )


def within(curve: Curve, conventions: Mapping[str, object]) -> LeastSquares:
    """Least squares on deviations from unit means: scale ``RSS_w/(n - N - K_w)``.

    Parameters
    ----------
    curve : Curve
    conventions : mapping
        ``count`` is read.

    Returns
    -------
    LeastSquares
        Unit intercepts are not reported.
    """
    p = curve.rank
    columns = curve.columns_within if conventions["count"] == "columns" else curve.rank_within
    df = curve.n - curve.units - columns
    if curve.rank_within == 0:
        raise NotEstimableError("no covariate varies within units")
    slope = _solve(curve.within[:, :p], curve.within[:, p], curve.within_root)
    residual = curve.unit * curve.within_residual
    form = "within residual sum of squares"
    return _off(curve, slope, curve.within_root, "within", residual=residual, df=df, form=form)


def between(curve: Curve, conventions: Mapping[str, object]) -> LeastSquares:
    """Least squares on unit means, weighted by size or each counted once; scale ``RSS/(N - K_p)``.

    Parameters
    ----------
    curve : Curve
    conventions : mapping
        ``between`` and ``count`` are read.

    Returns
    -------
    LeastSquares
    """
    p = curve.rank
    df = curve.units - (p if conventions["count"] == "columns" else curve.rank_between)
    weighted = conventions["between"] == "size_weighted"
    weights = np.sqrt(curve.sizes) if weighted else np.ones(len(curve.sizes))
    stacked = (weights[:, None, None] * curve.between).reshape(-1, p + 1)
    root = curve.between_root if weighted else curve.unweighted_root
    slope = _solve(stacked[:, :p], stacked[:, p], root)
    left = stacked @ np.append(-slope, 1.0)
    residual = curve.unit * float(left @ left)
    form = f"between residual sum of squares, {'size-weighted' if weighted else 'unweighted'}"
    return _off(curve, slope, root, "between", residual=residual, df=df, form=form)


def _solve(x: FloatArray, y: FloatArray, root: FloatArray) -> FloatArray:
    """Return least-squares coefficients through an orthonormal basis ``x @ root``, with one refinement."""
    basis = x @ root
    slope = root @ (basis.T @ y)
    return np.asarray(slope + root @ (basis.T @ (y - x @ slope)))


def _off(
    curve: Curve, slope: FloatArray, root: FloatArray, side: str, *, residual: float, df: int, form: str
) -> LeastSquares:
    """Bring an off-curve regression to the units of the data and blank what it does not determine."""
    p = curve.rank
    free = curve.free_within if side == "within" else curve.free_between
    beta = curve.to_beta @ np.append(slope, 1.0)
    beta[~free] = np.nan
    scaled = curve.to_beta[:, :p] @ root / np.sqrt(curve.unit)
    scaled[~free] = 0.0
    return LeastSquares(beta, scaled, residual, df, root.shape[1], curve.reasons[side], form)


@dataclass(frozen=True, slots=True)
class Differences:
    """Products of differences of consecutive rows of the same unit.

    Attributes
    ----------
    factor : ndarray of shape (p + 1, p + 1)
        F with ``F'F`` the products of differenced (x, y), in the units of the data.
    count : int
        Number of differences.
    step : int
        Period steps between the two rows of a difference.
    gaps : int
        Pairs of neighbouring rows further apart than one step, never differenced.
    """

    factor: FloatArray
    count: int
    step: int
    gaps: int


def differences_of(
    x: FloatArray, y: FloatArray, codes: IntArray, ordinals: NDArray[np.int64], step: int | None
) -> Differences:
    """Difference consecutive periods within units; a gap is never differenced over.

    Parameters
    ----------
    x, y : ndarray of shape (n, p), (n,)
        Design columns and outcome, any order of rows.
    codes, ordinals : ndarray of shape (n,)
        Unit and period of each row.
    step : int or None
        Period steps of a difference; the smallest one seen unless stated.

    Returns
    -------
    Differences

    Raises
    ------
    NotEstimableError
        If there is nothing to difference.
    """
    order = np.lexsort((ordinals, codes))
    same = codes[order[1:]] == codes[order[:-1]]
    jumps = np.diff(ordinals[order])[same]
    if jumps.size == 0:
        raise NotEstimableError("no unit has two rows to difference")
    used_step = int(jumps.min()) if step is None else step
    later = np.flatnonzero(same)[jumps == used_step] + 1
    if later.size == 0:
        raise NotEstimableError(f"no two rows of a unit are {used_step} period steps apart")
    factor = np.zeros((x.shape[1] + 1, x.shape[1] + 1))
    for picks in _slices(later, 16384):
        now, before = order[picks], order[picks - 1]
        rows = np.column_stack([x[now] - x[before], y[now] - y[before]])
        factor = stack_factors(factor, factor_from_rows(rows))
    return Differences(factor, int(later.size), used_step, int((jumps != used_step).sum()))


def _slices(positions: IntArray, length: int) -> Iterator[IntArray]:
    for start in range(0, positions.size, length):
        yield positions[start : start + length]


def first_difference(curve: Curve, products: Differences) -> LeastSquares:
    """Least squares on differences, without an added constant; scale ``RSS/(differences - rank)``.

    Parameters
    ----------
    curve : Curve
    products : Differences

    Returns
    -------
    LeastSquares
    """
    names, moments = curve.names, curve.moments
    p = len(names)
    bound = np.zeros(p)
    for j, name in enumerate(names):
        if name != moments.constant:
            at = moments.columns.index(name)
            bound[j] = noise(moments)[at] * moments.scale[at]
    factor = products.factor
    span = span_of(factor[:, :p], bound)
    df = products.count - span.rank
    if span.rank == 0:
        raise NotEstimableError("no covariate changes between consecutive periods")
    length = np.sqrt((factor[:, span.kept] ** 2).sum(axis=0))
    q, r = np.linalg.qr(factor[:, span.kept] / length)
    inverse = np.linalg.inv(r) / length[:, None]
    slope = inverse @ (q.T @ factor[:, p])
    left = factor[:, p] - factor[:, span.kept] @ slope
    beta = np.full(p, np.nan)
    root = np.zeros((p, span.rank))
    beta[span.kept], root[span.kept] = slope, inverse
    free = (np.abs(span.null) < 1e-9 * np.abs(span.null).max(axis=0, initial=1.0)).all(axis=1)
    beta[~free] = np.nan
    root[~free] = 0.0
    reasons = {
        name: "does not change between consecutive periods, or not separately"
        for name, ok in zip(names, free, strict=True)
        if not ok
    }
    residual = float(left @ left)
    return LeastSquares(
        beta, root, residual, df, span.rank, reasons, "residual sum of squares of differences"
    )
