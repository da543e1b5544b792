"""Least squares with a Wald test that allows for any dependence within units.

With columns ``[X, Z]`` of full rank, ``Z~`` the part of Z orthogonal to X, ``D = Z~'Z~`` and residuals e of the
whole regression, unit i contributes ``d_i = D^-1 Z~_i'e_i`` to the error of the coefficients g of Z, and

    V = N/(N - 1) sum_i d_i d_i',    W = g'V^-1 g,    W (N - q) / (q (N - 1)) against F(q, N - q),

the form of Hotelling's T^2, exact for means of N normal vectors and closer than chi-square for few units.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats
from scipy.linalg import solve_triangular

from mixbridge.audit.rows import Groups
from mixbridge.errors import IdentificationError
from mixbridge.moments import span_of, upper_factor

__all__ = ["Added", "WaldTest", "add_columns", "wald"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
NOTHING = 1e-9
"""Share of the length of a column that counts as nothing once the columns before it are taken out."""


@dataclass(frozen=True, slots=True)
class WaldTest:
    """A joint test that some estimates are zero.

    Attributes
    ----------
    statistic : float
        ``W (N - q) / (q (N - 1))``.
    df : tuple of int
        ``(q, N - q)``.
    p_value : float
    chi_square : float
        W.
    """

    statistic: float
    df: tuple[int, int]
    p_value: float
    chi_square: float

    @property
    def reference(self) -> str:
        """The reference in words."""
        return f"F({self.df[0]}, {self.df[1]}), cluster-robust by unit"


def wald(estimate: FloatArray, influence: FloatArray) -> WaldTest:
    """Test that estimates are zero, from what each unit contributes to their errors.

    Parameters
    ----------
    estimate : ndarray of shape (q,)
    influence : ndarray of shape (N, q)
        Contribution of each unit; units without one are left out of the count.

    Returns
    -------
    WaldTest

    Raises
    ------
    IdentificationError
        If there are not more units than estimates, or their covariance is singular.
    """
    q = estimate.size
    scale = np.sqrt((influence**2).sum(axis=0))
    active = int((np.abs(influence) > 1e-12 * scale).any(axis=1).sum())
    if active <= q or active < 3 or not (scale > 0.0).all():
        raise IdentificationError(
            f"{active} units contribute to {q} estimates: too few for a covariance by unit"
        )
    turned = influence / scale
    values = np.linalg.svd(turned, compute_uv=False)
    if values[-1] < 1e-7 * values[0]:
        raise IdentificationError(f"the covariance by unit of the {q} estimates is singular")
    upper = np.linalg.qr(turned, mode="r")
    whitened = solve_triangular(upper, estimate / scale, trans="T")
    chi_square = float(whitened @ whitened) * (active - 1.0) / active
    f = chi_square * (active - q) / (q * (active - 1.0))
    return WaldTest(f, (q, active - q), float(stats.f.sf(f, q, active - q)), chi_square)


@dataclass(frozen=True, slots=True, eq=False)
class Added:
    """Coefficients of added columns, for one or more outcomes.

    Attributes
    ----------
    kept : ndarray of int
        Added columns that are no combination of the others.
    estimate : ndarray of shape (q, c)
        Coefficient of each kept column for each outcome.
    influence : ndarray of shape (N, q, c)
        Contribution of each unit to its error.
    bread : ndarray of shape (q, q)
        ``(Z~'Z~)^-1``.
    residual : ndarray of shape (n, c)
        Of the whole regression.
    rank : int
        Number of independent columns, added ones included.
    others : ndarray of shape (p, c)
        Coefficients of the first columns; NaN where a combination of earlier ones.
    """

    kept: IntArray
    estimate: FloatArray
    influence: FloatArray
    bread: FloatArray
    residual: FloatArray
    rank: int
    others: FloatArray

    @property
    def errors(self) -> FloatArray:
        """Cluster-robust standard errors, shape (q, c), multiplier N/(N - 1) over contributing units."""
        squares = (self.influence**2).sum(axis=0)
        active = (np.abs(self.influence) > 1e-12 * np.sqrt(squares)).any(axis=(1, 2)).sum()
        return np.asarray(np.sqrt(squares * active / max(active - 1, 1)))

    def test(self) -> WaldTest:
        """Test that all of them are zero."""
        return wald(self.estimate.ravel(), self.influence.reshape(len(self.influence), -1))


def add_columns(x: FloatArray, z: FloatArray, y: FloatArray, groups: Groups) -> Added:
    """Regress outcomes on columns and added columns.

    Parameters
    ----------
    x : ndarray of shape (n, p)
        Columns that come first; a dependent one is left out.
    z : ndarray of shape (n, r)
        Added columns; those that depend on columns before them are left out.
    y : ndarray of shape (n,) or (n, c)
        Outcomes.
    groups : Groups
        Units of the rows, sorted.

    Returns
    -------
    Added

    Raises
    ------
    IdentificationError
        If no added column is left, or no residual.
    """
    whole = np.column_stack([x, z])
    outcomes = y[:, None] if y.ndim == 1 else y
    length = np.sqrt((whole**2).sum(axis=0))
    scale = np.where(length > 0.0, length, 1.0)
    p = x.shape[1]
    span = span_of(upper_factor(whole / scale), np.full(whole.shape[1], 1e-12), NOTHING)
    kept = span.kept
    extra = kept[kept >= p]
    if extra.size == 0:
        raise IdentificationError("the added columns are combinations of those in the model")
    if len(whole) <= kept.size:
        raise IdentificationError(f"{len(whole)} rows for {kept.size} columns")
    q, r = np.linalg.qr(whole[:, kept] / scale[kept])
    turned = q.T @ outcomes
    coefficients = solve_triangular(r, turned) / scale[kept, None]
    residual = outcomes - q @ turned
    first = kept.size - extra.size
    back = solve_triangular(r[first:, first:], np.eye(extra.size)) / scale[extra, None]
    rest = q[:, first:]
    scores = np.stack([groups.sum(rest * residual[:, [c]]) for c in range(outcomes.shape[1])], axis=2)
    others = np.full((p, outcomes.shape[1]), np.nan)
    others[kept[:first]] = coefficients[:first]
    return Added(
        kept=extra - p,
        estimate=coefficients[first:],
        influence=np.einsum("ab,ubc->uac", back, scores),
        bread=back @ back.T,
        residual=residual,
        rank=int(kept.size),
        others=others,
    )
