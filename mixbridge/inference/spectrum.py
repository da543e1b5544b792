"""The spectrum of the unit variance after the covariates, from the size classes; no N-by-N matrix is formed.

With K an orthonormal basis of what is orthogonal to X, ``K'VK = sigma_u^2 (I + psi K'ZZ'K)``. The nonzero
eigenvalues μ of ``K'ZZ'K`` are those of ``Z'MZ``, ``M = I - X (X'X)^-1 X'``; there are ``N - K_c`` of them,
and ``n - N - K_w`` zeros. In whitened coordinates

    Z'MZ = D - D Xb Xb' D,      D = diag(T_i),  Xb the unit means of X

and every direction inside a size class that is orthogonal to that class's unit means is an eigenvector with
eigenvalue exactly T. What is left is a symmetric matrix whose order is the sum over classes of the ranks of
their unit means.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import DataError
from mixbridge.ratio import Curve

__all__ = ["RANK_LIMIT", "Spectrum", "class_factors", "spectrum_of"]

FloatArray = NDArray[np.float64]

RANK_LIMIT = 4000
"""Largest sum of ranks for which the eigenvalues are taken (about half a minute and 0.4 GB at the limit)."""

SAME = 1e-10
"""Eigenvalues closer than this, relative to the largest, are counted as one."""


@dataclass(frozen=True, slots=True)
class Spectrum:
    """Eigenvalues that the null laws of both likelihood ratios are made of.

    Attributes
    ----------
    values : ndarray of shape (k,)
        Distinct nonzero eigenvalues μ of ``K'ZZ'K``, increasing.
    multiplicities : ndarray of float, shape (k,)
        Their multiplicities; they add up to ``N - K_c``.
    sizes, counts : ndarray of float, shape (G,)
        Eigenvalues of ``Z'Z`` (the unit sizes) and their multiplicities, for the likelihood that is not
        restricted.
    zeros : int
        ``n - N - K_w``.
    n, rank : int
        Rows, and rank of X.
    """

    values: FloatArray
    multiplicities: FloatArray
    sizes: FloatArray
    counts: FloatArray
    zeros: int
    n: int
    rank: int

    @property
    def trace(self) -> float:
        """``tr(M ZZ')``, the sum of the eigenvalues."""
        return float(self.multiplicities @ self.values)


def class_factors(curve: Curve) -> list[FloatArray]:
    """Return per size class the unit means of X in a basis of their span, ``min(m_T, K)`` rows at most.

    Directions in which they vanish to rounding (1e-15 of a whitened column) are left out: with or without
    them, their eigenvalue is T.
    """
    p = curve.rank
    factors = []
    for size, count, factor in zip(curve.sizes, curve.counts, curve.between, strict=True):
        _, singular, right = np.linalg.svd(factor[:, :p], full_matrices=False)
        keep = np.flatnonzero(np.sqrt(size) * singular > 1e-15)[: min(int(count), p)]
        factors.append(singular[keep, None] * right[keep])
    total = sum(factor.shape[0] for factor in factors)
    if total > RANK_LIMIT:
        raise DataError(
            f"the unit means of X have ranks adding up to {total} over {len(factors)} distinct unit sizes; "
            f"exact null laws are taken up to {RANK_LIMIT}. The F test of unit intercepts has no such limit."
        )
    return factors


def spectrum_of(curve: Curve) -> Spectrum:
    """Return the spectrum.

    Raises
    ------
    DataError
        If the sum of ranks exceeds `RANK_LIMIT`.
    """
    factors = class_factors(curve)
    ranks = np.array([factor.shape[0] for factor in factors])
    weights = np.repeat(curve.sizes, ranks)
    means = weights[:, None] * np.vstack(factors)
    dense = np.diag(weights) - means @ means.T
    inner = np.linalg.eigvalsh(dense)[curve.rank_constant :]
    values = np.concatenate([np.maximum(inner, 0.0), curve.sizes])
    multiplicities = np.concatenate([np.ones(inner.size), curve.counts - ranks])
    values, multiplicities = _merged(values[multiplicities > 0], multiplicities[multiplicities > 0])
    return Spectrum(
        values=values,
        multiplicities=multiplicities,
        sizes=curve.sizes,
        counts=curve.counts,
        zeros=curve.df_within,
        n=curve.n,
        rank=curve.rank,
    )


def _merged(values: FloatArray, multiplicities: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Count neighbouring values that differ by rounding only as one."""
    if values.size == 0:
        return values, multiplicities
    order = np.argsort(values, kind="stable")
    values, multiplicities = values[order], multiplicities[order]
    start = np.concatenate([[0], 1 + np.flatnonzero(np.diff(values) > SAME * values[-1])])
    together = np.add.reduceat(multiplicities, start)
    return np.add.reduceat(values * multiplicities, start) / together, together
