"""First differences: OLS without an added constant on differences of consecutive periods."""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np

from .linear import coefficients, factorise, lengths


@dataclass(frozen=True)
class DifferenceFit:
    """Coefficients (nan where not estimable), covariance with scale RSS / (rows - rank)."""

    beta: np.ndarray
    cov: np.ndarray
    scale: float
    rows: int
    rank: int
    df: int


def oracle_first_difference(
    X: np.ndarray,
    y: np.ndarray,
    units: np.ndarray,
    periods: np.ndarray,
    step: int | None = None,
    *,
    exact: bool = False,
) -> DifferenceFit:
    """Difference rows of one unit that are `step` periods apart (smallest step seen if None), then OLS."""
    kind = np.longdouble if exact else np.float64
    X, y = np.asarray(X, dtype=np.float64).astype(kind), np.asarray(y, dtype=np.float64).astype(kind)
    units, periods = np.asarray(units), np.asarray(periods)
    pairs: list[tuple[int, int]] = []
    for unit in np.unique(units):
        rows = np.flatnonzero(units == unit)
        rows = rows[np.argsort(periods[rows])]
        pairs += itertools.pairwise(rows)
    if not pairs:
        raise ValueError("no unit has two periods")
    gaps = np.array([periods[b] - periods[a] for a, b in pairs])
    use = gaps == (gaps.min() if step is None else step)
    first = np.array([a for a, _ in pairs])[use]
    second = np.array([b for _, b in pairs])[use]
    D, d = X[second] - X[first], y[second] - y[first]
    p, rows = X.shape[1], len(d)
    columns = factorise(D, lengths(X) * 1e-6)
    beta = coefficients(D, d, columns)
    residual = d - columns.basis @ (columns.basis.T @ d)
    df = rows - columns.rank
    scale = residual @ residual / df if df >= 1 else kind("nan")
    cov = columns.inverse * scale
    lost = ~columns.estimable
    beta, cov = beta.astype(np.float64), cov.astype(np.float64)
    beta[lost] = np.nan
    cov[lost, :] = np.nan
    cov[:, lost] = np.nan
    assert cov.shape == (p, p)
    return DifferenceFit(beta, cov, float(scale), rows, columns.rank, df)
