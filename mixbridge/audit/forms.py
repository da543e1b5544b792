"""Null moments of quadratic forms in neighbouring rows, without any n x n matrix.

A is the adjacency of rows one period step apart (`Links`), J_i the matrix of ones of a unit. With
``V_0^-1 = I - c_i J_i`` per unit and ``P = V_0^-1 - G G'``, ``G = V_0^-1 X J``, ``JJ' = (X'V_0^-1 X)^-1``:

    generalised least squares at psi    c_i = psi / (1 + T_i psi)
    within (psi -> infinity)            c_i = 1 / T_i,  G an orthonormal basis of QX

Only sums over units of degrees and of rows of G are needed. For a residual ``Py`` with ``y ~ N(0, sigma^2 V_0)``
on m = n - rank degrees of freedom, ratios ``y'PBPy / y'Py`` are independent of their denominator, so that

    E = tr(PB)/m,    Cov = 2 (m tr(PB_1 PB_2) - tr(PB_1) tr(PB_2)) / (m^2 (m + 2)).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.audit.bench import Bench

__all__ = ["Traces", "difference_traces", "ratio_moments", "traces"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Traces:
    """Traces of A and of ``ZZ' = J`` between P.

    Attributes
    ----------
    a, j : float
        ``tr(PA)``, ``tr(PJ)``.
    aa, aj, jj : float
        ``tr(PAPA)``, ``tr(PAPJ)``, ``tr(PJPJ)``.
    df : int
        m, the trace of ``P V_0``.
    """

    a: float
    j: float
    aa: float
    aj: float
    jj: float
    df: int


def traces(bench: Bench, psi: float) -> Traces:
    """Take the traces at a ratio; infinite for the within regression.

    Parameters
    ----------
    bench : Bench
    psi : float

    Returns
    -------
    Traces
    """
    rows, links = bench.rows, bench.links
    sizes = rows.groups.sizes.astype(float)
    degree = links.degree
    ends, squares = rows.groups.sum(degree), rows.groups.sum(degree**2)
    if np.isinf(psi):
        c, g = 1.0 / sizes, bench.within_basis
        df, left = bench.curve.df_within, np.zeros_like(sizes)
    else:
        c, left = psi / (1.0 + sizes * psi), 1.0 / (1.0 + sizes * psi)
        x = rows.x @ bench.gls_at(psi, 1.0).root
        g = x - rows.groups.spread((c * sizes)[:, None] * rows.groups.mean(x))
        df = bench.curve.n - bench.curve.rank
    near = links.neighbours(g)
    total = rows.groups.sum(g)
    at_ends = rows.groups.sum(degree[:, None] * g)  # 1'A G of each unit
    inner = g.T @ near
    twice = near.T @ near - (c[:, None] * at_ends).T @ at_ends  # G'A V_0^-1 A G
    cross = (left[:, None] * at_ends).T @ total  # G'A V_0^-1 J G
    outer = total.T @ total
    return Traces(
        a=float(-(c @ ends) - np.trace(inner)),
        j=float(sizes @ left - np.trace(outer)),
        aa=float(degree.sum() - 2.0 * (c @ squares) + (c * ends) @ (c * ends) - 2.0 * np.trace(twice))
        + float((inner**2).sum()),
        aj=float(left**2 @ ends - 2.0 * np.trace(cross) + (inner * outer).sum()),
        jj=float((sizes * left) @ (sizes * left) - 2.0 * (sizes * left) @ (total**2).sum(axis=1))
        + float((outer**2).sum()),
        df=df,
    )


def difference_traces(bench: Bench) -> tuple[float, float]:
    """Return ``tr(MD)`` and ``tr(MDMD)`` of the within regression, D the squared differences over links.

    ``D = degree - A`` takes a constant to zero, so that the unit means drop out.
    """
    links = bench.links
    degree, g = links.degree, bench.within_basis
    image = degree[:, None] * g - links.neighbours(g)
    inner = g.T @ image
    plain = float((degree**2).sum() + degree.sum())
    return float(degree.sum() - np.trace(inner)), plain - 2.0 * float((image**2).sum()) + float(
        (inner**2).sum()
    )


def ratio_moments(trace: FloatArray, products: FloatArray, df: int) -> tuple[FloatArray, FloatArray]:
    """Return mean and covariance of the ratios ``y'PBPy / y'Py`` under normality.

    Parameters
    ----------
    trace : ndarray of shape (b,)
        ``tr(PB)``.
    products : ndarray of shape (b, b)
        ``tr(PB_1 PB_2)``.
    df : int

    Returns
    -------
    ndarray of shape (b,), ndarray of shape (b, b)
    """
    return trace / df, 2.0 * (df * products - np.outer(trace, trace)) / (df**2 * (df + 2.0))
