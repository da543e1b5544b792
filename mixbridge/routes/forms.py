"""Quadratic forms in residuals, from the moments: their values, expectations and sampling covariances.

Every form here is ``q = e'De``: ``e = y - X beta_hat`` with a linear ``beta_hat = H y``, and D constant on
deviations from unit means (``d_w``) and on the unit means of each size (``d_T``). With ``L = I - XH`` and ``V
= sigma_u^2 I + sigma_a^2 ZZ'``,

    E q            = tr(D L V L')
    Cov(q_a, q_b)  = 2 tr(A V B V) = 2 tr(D_a O D_b O'),    O = L_a V L_b'

the second under normality (Searle, Casella & McCulloch 1992, *Variance Components*, app. S; place from
memory). The n-by-n matrices are never formed: all of them are ``QX a_w + sum_T P_T X a_T`` plus multiples of
Q and of the P_T.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.ratio import Curve

__all__ = ["Form", "covariance", "expectations", "value"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Form:
    """One quadratic form ``e'De`` in the residuals of a linear estimator, in whitened coordinates.

    The estimator is ``beta_hat = J h`` with ``h = H_w X'Qy + H_b sum_T h_T X'P_T y``; J spreads the column
    space so that each of its parts is near orthonormal, which keeps the traces accurate where X is
    ill-conditioned within or between.

    Attributes
    ----------
    name : str
        What it is, in words.
    on_within : float
        ``d_w``.
    on_means : ndarray of shape (G,)
        ``d_T``, the weight of ``sum_i T ebar_i^2`` over the units of size T.
    basis : ndarray of shape (p, c)
        J.
    slope_within, slope_between : ndarray of shape (c, p)
        ``H_w`` and ``H_b``.
    on_between : ndarray of shape (G,)
        ``h_T``.
    """

    name: str
    on_within: float
    on_means: FloatArray
    basis: FloatArray
    slope_within: FloatArray
    slope_between: FloatArray
    on_between: FloatArray


@dataclass(frozen=True, slots=True)
class _Rows:
    """The n-by-c matrices of an estimator, as the few rows that have their products.

    The n rows of ``QX a`` stand as ``F_w a`` and those of ``P_T X a`` as ``sqrt(T) F_T a``, with the factors of W
    and of the B_T, one below the other. ``XH = base gain'``.
    """

    form: Form
    base: FloatArray
    gain: FloatArray


def _rows(curve: Curve, form: Form) -> _Rows:
    p, top = curve.rank, curve.within.shape[0]
    flat = curve.between.reshape(-1, p + 1)
    base = np.empty((top + flat.shape[0], form.basis.shape[1]))
    gain = np.empty_like(base)
    np.matmul(curve.within[:, :p], form.basis, out=base[:top])
    np.matmul(flat[:, :p], form.basis, out=base[top:])
    np.matmul(curve.within[:, :p], form.slope_within.T, out=gain[:top])
    np.matmul(flat[:, :p], form.slope_between.T, out=gain[top:])
    root = np.sqrt(curve.sizes)
    base *= _spread(curve, 1.0, root)[:, None]
    gain *= _spread(curve, 1.0, root * form.on_between)[:, None]
    return _Rows(form, base, gain)


def _spread(curve: Curve, on_within: float, on_means: FloatArray) -> FloatArray:
    """Return weights on Q and on the P_T as one weight per row of `_Rows`."""
    top, per_size = curve.within.shape[0], curve.between.shape[1]
    weights = np.empty(top + on_means.size * per_size)
    weights[:top] = on_within
    weights[top:].reshape(-1, per_size)[:] = on_means[:, None]
    return weights


def value(curve: Curve, form: Form) -> float:
    """Return ``q = e'De``.

    Parameters
    ----------
    curve : Curve
    form : Form

    Returns
    -------
    float
        In squared units of the outcome.
    """
    rows, p = _rows(curve, form), curve.rank
    left = np.concatenate(
        [curve.within[:, p], (np.sqrt(curve.sizes)[:, None] * curve.between[:, :, p]).ravel()]
    )
    for _ in range(2):  # the second turn refines: H X H = H
        left = left - rows.base @ (rows.gain.T @ left)
    return curve.unit * float(_spread(curve, form.on_within, form.on_means) @ left**2)


def expectations(curve: Curve, form: Form) -> tuple[float, float]:
    """Return the coefficients of ``sigma_u^2`` and of ``sigma_a^2`` in ``E q``.

    Parameters
    ----------
    curve : Curve
    form : Form

    Returns
    -------
    float, float
    """
    rows, ones = _rows(curve, form), np.ones_like(curve.sizes)
    return _trace(curve, rows, 1.0, ones), _trace(curve, rows, 0.0, curve.sizes)


def covariance(curve: Curve, forms: Sequence[Form], idiosyncratic: float, unit: float) -> FloatArray:
    """Return the normal-theory sampling covariance of several forms at given variances.

    Parameters
    ----------
    curve : Curve
    forms : sequence of Form
    idiosyncratic, unit : float
        ``sigma_u^2`` and ``sigma_a^2``, variances.

    Returns
    -------
    ndarray of shape (len(forms), len(forms))
        In fourth powers of the units of the outcome.
    """
    # in units of sigma_u^2, so that nothing depends on the scale of the outcome
    on_means = 1.0 + curve.sizes * (unit / idiosyncratic)
    k, rows = len(forms), [_rows(curve, form) for form in forms]
    result = np.zeros((k, k))
    for a in range(k):
        for b in range(a, k):
            trace = _trace_pair(curve, rows[a], rows[b], on_means)
            result[a, b] = result[b, a] = 2.0 * trace
    return result * idiosyncratic**2


def _plain(curve: Curve, on_within: float, on_means: FloatArray) -> float:
    """Return the trace of a matrix with the given weights on Q and on the P_T."""
    return float((curve.n - curve.units) * on_within + curve.counts @ on_means)


def _trace(curve: Curve, rows: _Rows, on_within: float, on_means: FloatArray) -> float:
    """Return ``tr(D L V L')``: with ``M = H V H'``, ``L V L' = V + base (M base' - gain'V) - V gain base'``."""
    form, base, gain = rows.form, rows.base, rows.gain
    spread = _spread(curve, on_within, on_means)[:, None] * gain
    turned = base @ (gain.T @ spread).T
    correction = np.einsum("ij,ij->i", base, turned - 2.0 * spread)
    plain = _plain(curve, form.on_within * on_within, form.on_means * on_means)
    return plain + float(_spread(curve, form.on_within, form.on_means) @ correction)


def _trace_pair(curve: Curve, a: _Rows, b: _Rows, on_means: FloatArray) -> float:
    """Return ``tr(D_a O D_b O')`` with ``O = L_a V L_b' = V + l r'``; V has weight one on Q."""
    variance = _spread(curve, 1.0, on_means)
    spread_a, spread_b = variance[:, None] * a.gain, variance[:, None] * b.gain
    left = np.hstack([a.base, -spread_b])
    middle = a.gain.T @ spread_b  # H_a V H_b'
    right = np.hstack([b.base @ middle.T - spread_a, b.base])
    on_a, on_b = (
        _spread(curve, a.form.on_within, a.form.on_means),
        _spread(curve, b.form.on_within, b.form.on_means),
    )
    plain = _plain(
        curve, a.form.on_within * b.form.on_within, a.form.on_means * b.form.on_means * on_means**2
    )
    single = float((on_a * on_b * variance) @ np.einsum("ij,ij->i", left, right))
    left_left = left.T @ (on_a[:, None] * left)
    right_right = right.T @ (on_b[:, None] * right)
    return plain + 2.0 * single + float((left_left * right_right).sum())
