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
class _Tall:
    """An n-by-c matrix ``QX a_w + sum_T P_T X a_T``, as ``F_w a_w`` and ``F_T a_T``.

    ``F_w`` and ``F_T`` are the factors of W and of the B_T.
    """

    within: FloatArray
    means: FloatArray


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
    p = curve.rank
    rows_w, rows_b = curve.within[:, :p], curve.between[:, :, :p]
    tall = _Tall(rows_w @ form.basis, rows_b @ form.basis)
    gains = _Tall(rows_w @ form.slope_within.T, rows_b @ form.slope_between.T)
    weights = form.on_between * curve.sizes
    left_w, left_b = curve.within[:, p], curve.between[:, :, p]
    for _ in range(2):  # the second turn refines: H X H = H
        step = gains.within.T @ left_w + ((weights[:, None] * left_b)[:, :, None] * gains.means).sum(
            axis=(0, 1)
        )
        left_w, left_b = left_w - tall.within @ step, left_b - tall.means @ step
    between = (form.on_means * curve.sizes) @ (left_b**2).sum(axis=1)
    return curve.unit * float(form.on_within * (left_w @ left_w) + between)


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
    ones = np.ones_like(curve.sizes)
    return _trace(curve, form, 1.0, ones), _trace(curve, form, 0.0, curve.sizes)


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
    k = len(forms)
    result = np.zeros((k, k))
    for a in range(k):
        for b in range(a, k):
            result[a, b] = result[b, a] = 2.0 * _trace_pair(curve, forms[a], forms[b], 1.0, on_means)
    return result * idiosyncratic**2


def _cross(curve: Curve, left: _Tall, right: _Tall, on_within: float, on_means: FloatArray) -> FloatArray:
    """Return ``left' D right`` for D with the given weights on Q and on the P_T."""
    weighted = (on_means * curve.sizes)[:, None, None] * right.means
    rows = left.means.shape[0] * left.means.shape[1]
    between = left.means.reshape(rows, -1).T @ weighted.reshape(rows, -1)
    return np.asarray(on_within * (left.within.T @ right.within) + between)


def _outer(
    curve: Curve, left: Form, right: Form, on_within: float, on_means: FloatArray
) -> tuple[_Tall, _Tall]:
    """Return tall matrices l and r with ``L_a V L_b' = V + l r'``."""
    p, ones = curve.rank, np.ones(len(curve.sizes))
    rows_w, rows_b = curve.within[:, :p], curve.between[:, :, :p]
    base_a, base_b = (_Tall(rows_w @ form.basis, rows_b @ form.basis) for form in (left, right))
    gain_a, gain_b = (
        _Tall(rows_w @ form.slope_within.T, form.on_between[:, None, None] * (rows_b @ form.slope_between.T))
        for form in (left, right)
    )
    spread_a, spread_b = (
        _Tall(on_within * gain.within, on_means[:, None, None] * gain.means) for gain in (gain_a, gain_b)
    )
    middle = _cross(curve, gain_a, spread_b, 1.0, ones)  # H_a V H_b'
    return (
        _Tall(
            np.hstack([base_a.within, -spread_b.within]),
            np.concatenate([base_a.means, -spread_b.means], axis=2),
        ),
        _Tall(
            np.hstack([base_b.within @ middle.T - spread_a.within, base_b.within]),
            np.concatenate([base_b.means @ middle.T - spread_a.means, base_b.means], axis=2),
        ),
    )


def _plain(curve: Curve, on_within: float, on_means: FloatArray) -> float:
    """Return the trace of a matrix with the given weights on Q and on the P_T."""
    return float((curve.n - curve.units) * on_within + curve.counts @ on_means)


def _trace(curve: Curve, form: Form, on_within: float, on_means: FloatArray) -> float:
    """Return ``tr(D L V L')``."""
    left, right = _outer(curve, form, form, on_within, on_means)
    plain = _plain(curve, form.on_within * on_within, form.on_means * on_means)
    return plain + float(np.trace(_cross(curve, right, left, form.on_within, form.on_means)))


def _trace_pair(curve: Curve, a: Form, b: Form, on_within: float, on_means: FloatArray) -> float:
    """Return ``tr(D_a O D_b O')`` with ``O = L_a V L_b'``."""
    left, right = _outer(curve, a, b, on_within, on_means)
    both_within, both_means = a.on_within * b.on_within, a.on_means * b.on_means
    plain = _plain(curve, both_within * on_within**2, both_means * on_means**2)
    single = float(np.trace(_cross(curve, right, left, both_within * on_within, both_means * on_means)))
    left_left = _cross(curve, left, left, a.on_within, a.on_means)
    right_right = _cross(curve, right, right, b.on_within, b.on_means)
    return plain + 2.0 * single + float((left_left * right_right).sum())
