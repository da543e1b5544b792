"""Bounds that show, for a panel without one unit, that its likelihood has one stationary point next to the known one.

All units give r, g and the leverages at every ψ of a grid; unit i adds, at ``beta(psi)`` of all units,

    q = its part of r(psi),   h = tr A^-1 A_i,   k = tr A^-1 S_2 A^-1 A_i,   u = w_i^2 zbar'A^-1 zbar

(A_i its part of A_xx, ``w = T/(1 + T psi)``): linear maps of its products, so that a grid costs little. With
``|Delta| = sqrt(h q)/(1 - h)``, a bound of how far beta moves in the norm of A, and W the largest w, the panel without
the unit has

    r - q/(1 - h)                                      <= r_i    <= r - q
    (sqrt(-r') - sqrt(W)|Delta|)_+^2 - w_i q/(1 - h)^2 <= -r_i'  <= (sqrt(-r') + sqrt(W)|Delta|)^2
    g' - w_i - k/(1 - h) + u                           <= g_i'   <= g' - w_i - k + u/(1 - h)

(REML; ML: ``g_i' = g' - w_i``). By Cauchy-Schwarz in the norm of A: the unit's score is at most ``sqrt(h q)`` long, and
``A_(i)^-1`` lies between ``A^-1`` and ``A^-1 + A^-1 A_i A^-1/(1 - h)``. The interval bounds of
`mixbridge.routes.certificate` need nothing else outside ``[a, b]`` about the optimum. On ``[a, b]`` D is convex if

    m (r_i''(b)/r_i(a) - r_i'(a)^2/r_i(b)^2) + g''(a) > 0,     r_i'' >= 2 r_i'^2/(r_i - RSS_w,i)

g'' of all units being below g_i'' (the eigenvalues that make g' of a panel without a unit interlace with those of all),
and r'' being bounded by Cauchy-Schwarz in the spectral form. Where sizes differ so much that this bound is of no use,
r'' and g'' are evaluated at a and b.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from mixbridge.resample.deletion_axes import UnitAxes, pack
from mixbridge.resample.deletion_batch import Batch, full, solved
from mixbridge.resample.deletion_values import evaluate
from mixbridge.resample.optima import FIELDS, Values
from mixbridge.routes.likelihood import Kind

__all__ = ["Neighbourhood", "convex", "neighbourhood"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

WIDTHS = (0.3, 0.2, 0.15, 0.1, 0.07, 0.05, 0.03, 0.02, 0.01)
"""Half-widths tried for ``[a, b]``, relative to ψ (on the boundary: b in units of one over the largest size)."""
CONVEX = 0.3
"""Share of the second derivative at the optimum that its bound on ``[a, b]`` must keep for all units."""
SLACK = 0.5
"""Share of the slope at the nearer end that the bound on an interval must keep for all units."""
LEVERAGE = 0.5
"""Leverage of a unit up to which the bounds are of use."""
MANY = 5000
"""Units from which the cheaper bound of r'' on ``[a, b]`` is tried first; below, the interval should rather be wide."""
MOST = 400
"""Largest grid; a likelihood that asks for more is searched in full."""


@dataclass(frozen=True, slots=True, eq=False)
class Neighbourhood:
    """A grid on which the likelihood of all units is settled with room to spare.

    Attributes
    ----------
    kind : {"ml", "reml"}
    psi : float
        Optimum of all units.
    a, b : float
        Ends of the interval about it; a is 0 on the boundary.
    plain : bool
        Whether the bound of r'' by Cauchy-Schwarz serves on ``[a, b]``.
    grid : Values
        Of all units, psi of shape (M,), increasing; a and b are in it.
    weights : ndarray of shape (M, G)
        ``w_T`` on the grid.
    maps : ndarray of shape (3 M, h)
        What makes q, h and k of packed products, one after the other.
    """

    kind: Kind
    psi: float
    a: float
    b: float
    plain: bool
    grid: Values
    weights: FloatArray
    maps: FloatArray

    def excludes(
        self,
        batch: Batch,
        own_within: FloatArray,
        m: FloatArray,
        within_residual: FloatArray,
        limit: FloatArray,
    ) -> BoolArray:
        """Tell for which panels D' is negative before ``[a, b]`` and positive after, and, if `plain`, D convex between.

        Parameters
        ----------
        batch : Batch
            Panels without one unit each.
        own_within : ndarray of shape (h, M)
            Packed within products of that unit.
        m : ndarray
            Multiplier of ``log r``.
        within_residual : ndarray
            ``RSS_w`` of each panel.
        limit : ndarray
            ``lim psi^2 |r'|`` of each panel.
        """
        assert batch.own is not None
        count = self.grid.psi.size
        of_within = (self.maps @ own_within).reshape(3, count, -1)
        of_mean = (self.maps @ batch.own).reshape(3, count, -1)
        w = self.weights[:, batch.own_class]
        q, h, k = of_within + w * of_mean
        u = w**2 * of_mean[1]
        usable = (h < LEVERAGE).all(axis=0)
        rest = 1.0 / (1.0 - np.minimum(h, LEVERAGE))
        v = self.grid
        r_high, r_low = v.r[:, None] - q, v.r[:, None] - q * rest
        usable &= (r_low > 0.0).all(axis=0)
        r_low = np.where(r_low > 0.0, r_low, np.nan)
        moved = np.sqrt(np.maximum(self.weights[:, -1:] * h * q, 0.0)) * rest
        root = np.sqrt(np.maximum(-v.r1, 0.0))[:, None]
        fall_low = np.maximum(root - moved, 0.0) ** 2 - w * q * rest**2
        fall_high = (root + moved) ** 2
        rise_low = rise_high = v.g1[:, None] - w
        if self.kind == "reml":
            rise_low, rise_high = rise_low - k * rest + u, rise_high - k + u * rest
        low = rise_low[1:] - m * fall_high[:-1] / r_low[1:]
        high = rise_high[:-1] - m * np.maximum(fall_low[1:], 0.0) / r_high[:-1]
        below, above = v.psi[1:] <= self.a, v.psi[:-1] >= self.b
        usable &= (high[below] < 0.0).all(axis=0) & (low[above] > 0.0).all(axis=0)
        first, second = np.flatnonzero(v.psi == self.a)[0], np.flatnonzero(v.psi == self.b)[0]
        usable &= rise_low[second] > m * fall_high[second] / r_low[second]
        if self.psi > 0.0:
            usable &= rise_high[first] < m * np.maximum(fall_low[first], 0.0) / r_high[first]
        if self.plain:
            bent = 2.0 * np.maximum(fall_low[second], 0.0) ** 2 / (r_high[second] - within_residual)
            bend = bent / r_high[first] - (fall_high[first] / r_low[second]) ** 2
            usable &= m * bend + v.g2[first] > 0.0
        last = v.psi[-1]  # from here on psi g_i' grows and psi |r_i'| is below limit / psi
        rising = last * rise_low[-1] > m * limit / (last * within_residual)
        return np.asarray(usable & rising)


def neighbourhood(axes: UnitAxes, kind: Kind, psi: float) -> Neighbourhood | None:
    """Look for an interval about the optimum and a grid beyond it that settle the likelihood of all units with room.

    Parameters
    ----------
    axes : UnitAxes
    kind : {"ml", "reml"}
    psi : float
        Certified optimum of all units.

    Returns
    -------
    Neighbourhood or None
        None where there is more than one stationary point, or hardly one.
    """
    curve = axes.curve
    everything = Batch(
        axes, axes.within[:, None], axes.between, curve.counts[:, None], None, np.zeros(0, dtype=np.intp)
    )
    m = np.array([float(curve.n - (curve.rank if kind == "reml" else 0))])

    def values(ratios: FloatArray) -> Values:
        parts = [evaluate(everything, kind, ratio[None], m) for ratio in ratios]
        table = {name: np.array([getattr(part, name)[0] for part in parts]) for name in FIELDS}
        return Values(**table, m=m)

    inside = float(solved(everything.within, axes.order, axes.inner).residual[0])
    ends = _ends(values, psi, float(curve.sizes[-1]), inside, first=curve.units > MANY)
    if ends is None:
        return None
    a, b, plain = ends
    wide = np.concatenate([[0.0], np.logspace(-3, 5, 17) / curve.sizes[-1], [3.0 * a, 30.0 * b]])
    grid = values(np.unique(np.concatenate([[a, b], wide[(wide < a) | (wide > b)]])))
    for _ in range(40):
        unsettled = _unsettled(grid, a, b)
        if not unsettled.any():
            break
        if grid.psi.size + int(unsettled.sum()) > MOST:
            return None
        left, right = grid.psi[:-1][unsettled], grid.psi[1:][unsettled]
        more = values(np.where(left > 0.0, np.sqrt(left * right), right / 16.0))
        order = np.argsort(np.concatenate([grid.psi, more.psi]))
        grid = Values(
            **{name: np.concatenate([getattr(grid, name), getattr(more, name)])[order] for name in FIELDS},
            m=m,
        )
    else:
        return None
    weights = curve.sizes / (1.0 + np.multiply.outer(grid.psi, curve.sizes))
    return Neighbourhood(kind, psi, a, b, plain, grid, weights, _maps(everything, weights))


def _ends(
    values: Callable[[FloatArray], Values], psi: float, largest: float, inside: float, *, first: bool
) -> tuple[float, float, bool] | None:
    """Return an interval on which the deviance of all units is convex with room to spare, and by which bound."""
    bend = float(values(np.array([psi])).bend[0])
    for plain in (first, not first):
        for width in WIDTHS:
            a, b = (psi / (1.0 + width), psi * (1.0 + width)) if psi > 0.0 else (0.0, width / largest)
            left, right = values(np.array([a])), values(np.array([b]))
            around = (psi == 0.0 or left.slope[0] < 0.0) and right.slope[0] > 0.0
            if plain:
                right = replace(right, r2=2.0 * right.r1**2 / (right.r - inside))
            if around and convex(left, right)[0] > CONVEX * bend > 0.0:
                return a, b, plain
    return None


def convex(a: Values, b: Values) -> FloatArray:
    """Return a lower bound of D'' between two ratios, from the values at both."""
    return np.asarray(a.m * (b.r2 / a.r - (a.r1 / b.r) ** 2) + a.g2)


def _unsettled(v: Values, a: float, b: float) -> BoolArray:
    low = v.m * v.r1[:-1] / v.r[1:] + v.g1[1:]
    high = v.m * v.r1[1:] / v.r[:-1] + v.g1[:-1]
    slope = np.abs(v.slope)
    room = SLACK * np.minimum(slope[:-1], slope[1:])
    below, above = v.psi[1:] <= a, v.psi[:-1] >= b
    return np.asarray((below & ~(high < -room)) | (above & ~(low > room)))


def _maps(everything: Batch, weights: FloatArray) -> FloatArray:
    """Return the coefficients of q, h and k on packed products, for each ratio of the grid."""
    axes = everything.axes
    order, p = axes.order, axes.order - 1
    rows, columns, _ = pack(order)
    twice = np.where(rows == columns, 1.0, 2.0)
    maps = np.empty((3, weights.shape[0], rows.size))
    for at, w in enumerate(weights):
        line = solved(everything.within + everything.sums(w), order, np.arange(p))
        c = np.append(-line.slope[:, 0], 1.0)
        inverse = np.zeros((order, order))
        inverse[:p, :p] = line.inverse[:, :, 0]
        middle = full(everything.sums(w**2), order, np.arange(order))[:, :, 0]
        for kind, matrix in enumerate((np.outer(c, c), inverse, inverse @ middle @ inverse)):
            maps[kind, at] = matrix[rows, columns] * twice
    return maps.reshape(-1, rows.size)
