"""Coefficients along the curve, from pooled to within: values, slopes in ψ, standard errors, extrema.

With ``A(psi) = W + sum_T w_T B_T``, ``w_T = T/(1 + T psi)``, ``S_2 = sum_T w_T^2 B_T`` and ``c = (-beta, 1)``, the
normal equations ``A_x. c = 0`` give

    beta'(psi) = -A_xx^-1 (S_2 c)_x.

At an infinite ratio the coefficients are the within slopes, and along unit-constant directions the unweighted
regression of unit remainders; the standard error there is that of the within slopes, infinite for what the within
variation does not determine. Standard errors take the scale ``r(psi)/(n - K)`` of each ψ, the REML one.

A coefficient is a rational function of ψ and need not be monotone. Its interior extrema are the zeros of
``beta_j'``; they are bracketed on a grid that is even in ``lambda = 1 - (1 + T psi)^(-1/2)`` for the smallest, the
median and the largest size, and polished. Two zeros between neighbouring grid points would be missed together.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy
from numpy.typing import NDArray

from mixbridge.ratio import Curve

__all__ = ["Along", "along", "extrema", "limit_beta", "search_grid"]

FloatArray = NDArray[np.float64]
FLAT = 1e-9
"""Movement of a coefficient, in standard errors, that counts as none."""


@dataclass(frozen=True, slots=True, eq=False)
class Along:
    """Every coefficient at several ratios.

    Attributes
    ----------
    psi : ndarray of shape (M,)
        Ratios, increasing; the last may be infinite.
    beta, error, slope : ndarray of shape (M, p)
        Coefficients, standard errors at scale ``r(psi)/(n - K)``, derivatives in ψ (zero at infinity).
    """

    psi: FloatArray
    beta: FloatArray
    error: FloatArray
    slope: FloatArray


def along(curve: Curve, psi: FloatArray) -> Along:
    """Evaluate the curve at several ratios.

    Parameters
    ----------
    curve : Curve
    psi : ndarray of shape (M,)
        May hold infinity.

    Returns
    -------
    Along
    """
    found = [_at(curve, float(value)) for value in psi]
    beta, error, slope = (np.array(part) for part in zip(*found, strict=True))
    return Along(psi, beta, error, slope)


def _at(curve: Curve, psi: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    p, df = curve.rank, curve.n - curve.rank
    if np.isinf(psi):
        root = curve.to_beta[:, :p] @ curve.within_root / np.sqrt(curve.unit)
        error = np.sqrt(curve.unit * curve.within_residual / df) * np.sqrt((root**2).sum(axis=1))
        error[~curve.free_within] = np.inf
        return limit_beta(curve), error, np.zeros(p)
    point = curve.at(psi)
    weights = (curve.sizes / (1.0 + curve.sizes * psi)) ** 2
    means = curve.between @ point.white
    push = np.einsum("t,trj,tr->j", weights, curve.between[:, :, :p], means)
    root = curve.gls_root(psi)
    slope = -curve.to_beta[:, :p] @ (root @ (root.T @ push))
    error = np.sqrt(point.residual / df) * np.sqrt((point.root**2).sum(axis=1))
    return point.beta, error, slope


def limit_beta(curve: Curve) -> FloatArray:
    """Return the limit of the coefficients as the ratio grows.

    Parameters
    ----------
    curve : Curve

    Returns
    -------
    ndarray of shape (p,)
    """
    p, c = curve.rank, curve.rank_constant
    slope = curve.within_root @ ((curve.within[:, :p] @ curve.within_root).T @ curve.within[:, p])
    if c:
        flat = curve.between.reshape(-1, p + 1)
        left = flat[:, p] - flat[:, :p] @ slope
        slope[:c] += np.linalg.lstsq(flat[:, :c], left, rcond=None)[0]
    return np.asarray(curve.to_beta @ np.append(slope, 1.0))


def search_grid(curve: Curve, points: int) -> FloatArray:
    """Return ratios, 0 and infinity included, even in lambda at the smallest, median and largest size.

    Parameters
    ----------
    curve : Curve
    points : int
        Per size.

    Returns
    -------
    ndarray
        Increasing.
    """
    median = np.median(np.repeat(curve.sizes, curve.counts.astype(int)))
    weights = np.linspace(0.0, 1.0, points)[:-1]
    grids = [
        ((1.0 - weights) ** -2 - 1.0) / size for size in {curve.sizes[0], float(median), curve.sizes[-1]}
    ]
    return np.append(np.unique(np.concatenate(grids)), np.inf)


def extrema(curve: Curve, seen: Along, at: int) -> list[float]:
    """Return the ratios of the interior extrema of one coefficient.

    Parameters
    ----------
    curve : Curve
    seen : Along
        On a grid that brackets them.
    at : int
        Which coefficient.

    Returns
    -------
    list of float
        Increasing; empty where the coefficient moves by rounding only.
    """
    beta, slope = seen.beta[:, at], seen.slope[:, at]
    unit = float(np.min(seen.error[:, at]))
    if not np.ptp(beta) > FLAT * unit:
        return []
    found = []
    for i in range(len(slope) - 2):  # the last slope, at infinity, is zero in the limit
        if slope[i] * slope[i + 1] >= 0.0:
            continue
        a, b = float(seen.psi[i]), float(seen.psi[i + 1])
        root = float(
            scipy.optimize.brentq(lambda psi: _at(curve, psi)[2][at], a, b, xtol=1e-16 * b, rtol=1e-14)
        )
        height = _at(curve, root)[0][at]
        if min(abs(height - beta[0]), abs(height - beta[-1])) > FLAT * unit:
            found.append(root)
    return found
