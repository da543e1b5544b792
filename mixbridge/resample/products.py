"""Profile likelihoods of many panels or outcomes from their products, each at its own ψ.

Nothing need be common: any source that gives ``A(psi)``, ``S_2`` and ``S_3`` (see `mixbridge.routes.likelihood`), each
for a profile and a ratio, can be searched by `mixbridge.resample.optima`. Panels without one of their units are such a
source; so are replicates with too many unit sizes for a spectrum, below.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.resample.moment_draws import Coordinates, Draws
from mixbridge.resample.optima import Values
from mixbridge.routes.likelihood import Kind

__all__ = ["ProductDeviances", "Products", "drawn_products"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
CHUNK = 2**21
"""Entries of the matrices in work at one time."""


@dataclass(frozen=True, slots=True)
class Products:
    """Weighted products of the columns (X, outcome) of M profiles, each at its own ratio.

    Attributes
    ----------
    a, s2, s3 : ndarray of shape (M, p + 1, p + 1)
        ``A(psi)``, ``sum w_T^2 B_T``, ``sum w_T^3 B_T``, ``w_T = T/(1 + T psi)``.
    log, first, second : ndarray of shape (M,)
        ``sum m_T log(1 + T psi)``, ``sum m_T w_T``, ``sum m_T w_T^2``.
    """

    a: FloatArray
    s2: FloatArray
    s3: FloatArray
    log: FloatArray
    first: FloatArray
    second: FloatArray


@dataclass(frozen=True, slots=True)
class ProductDeviances:
    """Profile deviances from products; see `mixbridge.resample.optima.Deviances`.

    Attributes
    ----------
    source : callable
        Gives `Products` for profile numbers and ratios.
    kind : {"ml", "reml"}
    m : ndarray of shape (R,)
        ``n`` or ``n - K`` of each profile.
    largest : float
        Largest unit size.
    within_residual, limit : ndarray of shape (R,)
        ``RSS_w > 0``, and the sum of squares of the unit remainders about their unweighted regression on the
        unit-constant columns.
    centre : tuple of float
        A ratio near which most optima lie and their standard deviation about it, NaN where not known.
    entries : int
        Length of the largest array behind one product, for the size of the pieces in work.
    """

    source: Callable[[IntArray, FloatArray], Products]
    kind: Kind
    m: FloatArray
    largest: float
    within_residual: FloatArray
    limit: FloatArray
    centre: tuple[float, float] = (np.nan, np.nan)
    entries: int = 1

    def on_grid(self, psi: FloatArray) -> Values:
        """Evaluate all at common ratios."""
        count = self.m.size
        flat = self.at(np.repeat(np.arange(count), psi.size), np.tile(psi, count), True)
        r, r1, r2, g, g1, g2 = (
            getattr(flat, name).reshape(count, -1) for name in ("r", "r1", "r2", "g", "g1", "g2")
        )
        return Values(psi, r, r1, r2, g, g1, g2, self.m[:, None])

    def at(self, which: IntArray, psi: FloatArray, value: bool) -> Values:
        """Evaluate some profiles, each at its own ratio."""
        if which.size == 0:
            none = np.zeros(0)
            return Values(none, none, none, none, none, none, none, none)
        step = max(CHUNK // self.entries, 1)
        parts = [self._some(which[at : at + step], psi[at : at + step]) for at in range(0, which.size, step)]
        r, r1, r2, g, g1, g2 = np.concatenate(parts, axis=1)
        return Values(psi, r, r1, r2, g, g1, g2, self.m[which])

    def _some(self, which: IntArray, psi: FloatArray) -> FloatArray:
        """Return r, r', r'', g, g', g'' as rows."""
        of = self.source(which, psi)
        p = of.a.shape[1] - 1
        length = np.sqrt(np.diagonal(of.a, axis1=1, axis2=2))
        both = length[:, :, None] * length[:, None, :]
        lower = np.linalg.cholesky(of.a / both)
        inverse = np.linalg.inv(lower)  # everything in columns that A turns to orthonormal ones
        s2, s3 = (np.matmul(inverse, np.matmul(s / both, inverse.transpose(0, 2, 1))) for s in (of.s2, of.s3))
        pivot = lower[:, p, p] * length[:, p]
        # the last orthonormal column is the residual over sqrt(r)
        r = pivot**2
        r1 = -r * s2[:, p, p]
        r2 = 2.0 * r * (s3[:, p, p] - (s2[:, p, :p] ** 2).sum(axis=1))
        g, g1, g2 = of.log, of.first, -of.second
        if self.kind == "reml":
            diagonal = np.diagonal(lower, axis1=1, axis2=2)[:, :p] * length[:, :p]
            g = g + 2.0 * np.log(diagonal).sum(axis=1)
            g1 = g1 - np.trace(s2[:, :p, :p], axis1=1, axis2=2)
            g2 = g2 + 2.0 * np.trace(s3[:, :p, :p], axis1=1, axis2=2) - (s2[:, :p, :p] ** 2).sum(axis=(1, 2))
        return np.array([r, r1, np.maximum(r2, 0.0), g, g1, g2])


def drawn_products(
    space: Coordinates, kind: Kind, draws: Draws, products: FloatArray, limit: FloatArray
) -> ProductDeviances:
    """Return the profile deviances of replicates from their products by size.

    Parameters
    ----------
    space : Coordinates
    kind : {"ml", "reml"}
    draws : Draws
    products : ndarray of shape (1 + G, p * p)
        ``X'QX``, then ``T B_T`` of X for each size.
    limit : ndarray of shape (R,)
        As in `ProductDeviances`.

    Returns
    -------
    ProductDeviances
    """
    curve, p = space.curve, space.curve.rank

    def source(which: IntArray, psi: FloatArray) -> Products:
        shrink = 1.0 / (1.0 + np.multiply.outer(psi, curve.sizes))
        pull = curve.sizes * shrink
        e, rest = draws.e[which], draws.rest[which]
        made = []
        for on_within, on_means in ((1.0, shrink), (0.0, pull * shrink), (0.0, pull**2 * shrink)):
            weights = np.column_stack([np.full(psi.size, on_within), on_means])
            matrix = np.empty((psi.size, p + 1, p + 1))
            matrix[:, :p, :p] = (weights @ products).reshape(-1, p, p)
            weighted = e * space.spread(on_within, on_means)
            matrix[:, p, :p] = matrix[:, :p, p] = weighted @ space.x
            matrix[:, p, p] = np.einsum("rd,rd->r", weighted, e) + np.einsum("rg,rg->r", weights, rest)
            made.append(matrix)
        a, s2, s3 = made
        log = np.log1p(np.multiply.outer(psi, curve.sizes)) @ curve.counts
        return Products(a, s2, s3, log, pull @ curve.counts, pull**2 @ curve.counts)

    return ProductDeviances(
        source=source,
        kind=kind,
        m=np.full(len(draws.e), float(curve.n - (p if kind == "reml" else 0))),
        largest=float(curve.sizes[-1]),
        within_residual=draws.rest[:, 0],
        limit=limit,
        entries=max(space.order, (p + 1) ** 2),
    )
