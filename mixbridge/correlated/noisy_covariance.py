"""Large-sample covariance of coefficients that are corrected for noisy unit means.

With ``q_i = (xbar_i, z_i)``, ``theta = (d, g)``, ``e_i = ybar_i - all columns at the corrected
coefficients``, slopes b_w of the columns ``u_i`` that vary within units and ``c_i = w_i (1 - h_i)(1/T_i -
1/M)``, the corrected coefficients solve

    sum_i psi_i = 0,   psi_i = w_i q_i e_i + (c_i S_w d, 0)
    Var(theta) = A^-1 [ sum psi_i psi_i' + H V_w H' + c^2 F ] A^-1',   A = sum w q q' - (N, 0)
    Cov(theta, b_w) = -A^-1 H V_w,    H = sum w q u',   c = sum c_i,   F = (S_w d'S_w d + S_w d d'S_w)/df

with ``V_w`` the covariance of the slopes and F the sampling variance of ``S_w d`` for normal deviations
(Fuller 1987, sec. 2.2, for equal sizes; from memory). Units may differ in variance; the ratio ψ counts as
known.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.correlated.mundlak import Mundlak
from mixbridge.routes import Fit

__all__ = ["Columns", "corrected_covariance"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Columns:
    """Positions in the panel with unit means.

    Attributes
    ----------
    varying, sampled, means, others : list of int
        Columns that vary within units; those that are sampled; their unit means; all that is constant within
        units and not such a mean.
    """

    varying: list[int]
    sampled: list[int]
    means: list[int]
    others: list[int]


def corrected_covariance(
    mundlak: Mundlak,
    fit: Fit,
    at: Columns,
    *,
    contextual: FloatArray,
    others: FloatArray,
    noise: FloatArray,
    exposure: FloatArray,
    df: int,
) -> FloatArray:
    """Return the covariance of (within, contextual, between, others).

    Parameters
    ----------
    mundlak : Mundlak
    fit : Fit
        The uncorrected fit.
    at : Columns
    contextual, others : ndarray of shape (m,), (o,)
        Corrected coefficients.
    noise : ndarray of shape (m, m)
        ``S_w``.
    exposure : ndarray of shape (G,)
        ``1/T - 1/M`` by size.
    df : int
        Degrees of freedom of ``S_w``.

    Returns
    -------
    ndarray of shape (3 m + o, 3 m + o)
    """
    rows, outcome, level, constant = _unit_rows(mundlak)
    counts = mundlak.augmented.kept().counts
    weight = counts / (1.0 + counts * fit.ratio)
    m, o = len(at.means), len(at.others)
    q, u, z = rows[:, [*at.means, *at.others]], rows[:, at.varying], rows[:, at.others]
    slopes = fit.beta[at.varying]
    rest = outcome - u @ slopes - rows[:, at.means] @ contextual - z @ others
    if constant is not None:
        rest = rest - float(weight @ rest) / float(weight.sum())  # the constant counts from grand means here
    root = np.sqrt(weight)[:, None]
    hat = np.linalg.qr(root * z / _length(root * z))[0]
    share = exposure[np.searchsorted(mundlak.raw.moments.sizes, counts)]
    moved = weight * (1.0 - (hat**2).sum(axis=1)) * share
    score = weight[:, None] * q * rest[:, None]
    pull = noise @ contextual
    score[:, :m] += moved[:, None] * pull
    bread = q.T @ (weight[:, None] * q)
    bread[:m, :m] -= float(moved.sum()) * noise
    link = q.T @ (weight[:, None] * u)
    half = np.sqrt(fit.scale) * fit.root[at.varying]
    within = half @ half.T
    units, used = len(counts), m + o
    meat = score.T @ score * (units / max(units - used, 1)) + link @ within @ link.T
    meat[:m, :m] += float(moved.sum()) ** 2 * (noise * float(contextual @ pull) + np.outer(pull, pull)) / df
    size = _length(q * root)
    inverse = np.linalg.inv(bread / np.outer(size, size)) / np.outer(size, size)
    cross = -inverse @ link @ within
    joint = np.block([[within, cross.T], [cross, inverse @ meat @ inverse.T]])
    change = _to_reported(at, m, o)
    if constant is not None:
        change[3 * m + at.others.index(constant), : len(at.varying)] -= level[at.varying]
        change[3 * m + at.others.index(constant), len(at.varying) :] -= level[[*at.means, *at.others]]
    return np.asarray(change @ joint @ change.T)


def _to_reported(at: Columns, m: int, o: int) -> FloatArray:
    """Return the map from (all slopes, contextual, others) to (within, contextual, between, others)."""
    change = np.zeros((3 * m + o, len(at.varying) + m + o))
    picks = [at.varying.index(column) for column in at.sampled]
    for j, pick in enumerate(picks):
        change[[j, 2 * m + j], pick] = 1.0
        change[[m + j, 2 * m + j], len(at.varying) + j] = 1.0
    change[3 * m :, len(at.varying) + m :] = np.eye(o)
    return change


def _unit_rows(mundlak: Mundlak) -> tuple[FloatArray, FloatArray, FloatArray, int | None]:
    """Return unit means of columns and outcome from their origins, the origins, and the place of the constant."""
    opened, moments = mundlak.augmented.kept(), mundlak.augmented.moments
    names = mundlak.curve.names
    centred = moments.constant is not None
    rows, level = np.zeros((len(opened.keys), len(names))), np.zeros(len(names))
    for j, name in enumerate(names):
        given = opened.columns.index(name)
        if name == moments.constant:
            rows[:, j] = 1.0
            continue
        level[j] = moments.shift[moments.columns.index(name)] if centred else 0.0
        rows[:, j] = opened.means[:, given] + (opened.shift[given] - level[j])
    origin = moments.shift[-1] if centred else 0.0
    outcome = opened.means[:, -1] + (opened.shift[-1] - origin)
    return rows, outcome, level, names.index(moments.constant) if moments.constant is not None else None


def _length(columns: FloatArray) -> FloatArray:
    return np.asarray(np.sqrt((columns**2).sum(axis=0)))
