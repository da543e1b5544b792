"""The variance ratios at which the curve passes through every printed coefficient.

For coefficient ``b_j(psi) = l'b`` let ``v(psi) = l'A_xx^-1 l`` and r(ψ) the residual sum of squares. Then

    b_j' = -l'A_xx^-1 (S_2 c)_x,      |b_j'| <= sqrt(v' |r'|)        (Cauchy-Schwarz)

with ``S_2 = sum_T w_T^2 B_T`` and ``c = (-b, 1)``, and so on any interval [a, b], by Cauchy-Schwarz once more, b_j
varies by at most ``tv = sqrt((v(b) - v(a)) (r(a) - r(b)))`` in all and stays inside ``(b_j(a) + b_j(b) -+ tv) / 2``.
Neither b_j nor this argument changes if the within residual is taken off the outcome and A is multiplied by ψ, so that
with ``u = v / psi``, which falls, and ``q = psi (r - RSS_w)``, which rises, ``sqrt((u(a) - u(b)) (q(b) - q(a)))`` is a
bound too: the sharper one far out for columns that do not vary within units. Intervals of ψ are halved until the
smaller bound shows them inside or outside what the figure can stand for, or is below `FINE` of the last printed digit.
Ends are then found to rounding by Newton steps with b_j', kept inside their bracket.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.ratio import Curve
from mixbridge.reconcile.printed import PrintedFigure

__all__ = ["Points", "RatioUnion", "compatible_ratios", "points_at"]

FloatArray = NDArray[np.float64]
Interval = tuple[float, float]
FINE = 5e-3
"""Share of the last printed digit below which an excursion of the coefficient can go unseen."""
ROUNDS = 60
MOST = 20_000
"""Evaluations after which what is undecided is judged by its ends, and `complete` is False."""
EPS = float(np.finfo(float).eps)


@dataclass(frozen=True, slots=True)
class RatioUnion:
    """A set of ratios ψ >= 0, as a union of closed intervals.

    Attributes
    ----------
    intervals : tuple of (float, float)
        Increasing; the last upper end can be infinite.
    by_term : tuple of (str, tuple of (float, float))
        The same for each printed coefficient alone.
    one_row_units : str
        ``kept`` or ``dropped``.
    complete : bool
        Whether every interval was decided to the stated resolution.
    """

    intervals: tuple[Interval, ...]
    by_term: tuple[tuple[str, tuple[Interval, ...]], ...]
    one_row_units: str
    complete: bool

    def holds(self, psi: float) -> bool:
        """Tell whether a ratio lies in the set, ends allowed to rounding."""
        slack = 1e-9 * psi if np.isfinite(psi) else 0.0
        return any(low - slack <= psi <= high + slack for low, high in self.intervals)


@dataclass(frozen=True, slots=True)
class Points:
    """Points of the curve in increasing ψ.

    Attributes
    ----------
    psi, residual : ndarray of shape (M,)
        Ratios, and r in whitened units.
    beta, spread, slope : ndarray of shape (M, q)
        For the coefficients asked for: b_j in the units of the data, v in whitened units, and b_j'.
    """

    psi: FloatArray
    beta: FloatArray
    spread: FloatArray
    residual: FloatArray
    slope: FloatArray

    def __add__(self, other: Points) -> Points:
        """Join two sets of points."""
        psi = np.concatenate([self.psi, other.psi])
        order = np.argsort(psi, kind="stable")
        return Points(
            psi[order],
            np.concatenate([self.beta, other.beta])[order],
            np.concatenate([self.spread, other.spread])[order],
            np.concatenate([self.residual, other.residual])[order],
            np.concatenate([self.slope, other.slope])[order],
        )


def compatible_ratios(
    curve: Curve, figures: tuple[PrintedFigure, ...], error: float, one_row_units: str = "kept"
) -> RatioUnion | None:
    """Find the ratios that the printed coefficients allow.

    Parameters
    ----------
    curve : Curve
    figures : tuple of PrintedFigure
        Those of coefficients are used.
    error : float
        Computing error allowed, relative to the coefficient.
    one_row_units : str
        Said in the result.

    Returns
    -------
    RatioUnion or None
        None where no coefficient was printed. Figures count as rounded or cut.
    """
    named = [figure for figure in figures if figure.quantity.startswith("b:")]
    if not named:
        return None
    at = np.array([curve.names.index(figure.quantity[2:]) for figure in named])
    slack = np.array([error * (abs(figure.value) + figure.half_unit) for figure in named])
    low = np.array([figure.widest[0] for figure in named]) - slack
    high = np.array([figure.widest[1] for figure in named]) + slack
    fine = FINE * 2.0 * np.array([figure.half_unit for figure in named])
    nodes = points_at(curve, at, np.concatenate([[0.0], np.logspace(-6, 8, 57) / curve.sizes[0]]))
    complete = False
    for _ in range(ROUNDS):
        open_left = np.flatnonzero(_undecided(nodes, low, high, fine, curve.within_residual))
        if open_left.size == 0:
            complete = True
            break
        if nodes.psi.size + open_left.size > MOST:
            break
        a, b = nodes.psi[open_left], nodes.psi[open_left + 1]
        nodes = nodes + points_at(curve, at, np.where(a > 0.0, np.sqrt(a * b), b / 16.0))
    by_term = tuple(
        (curve.names[term], _inside(curve, at, j, nodes, (float(low[j]), float(high[j]))))
        for j, term in enumerate(at)
    )
    common: tuple[Interval, ...] = ((0.0, np.inf),)
    for _, intervals in by_term:
        common = _intersection(common, intervals)
    return RatioUnion(common, by_term, one_row_units, complete)


def points_at(curve: Curve, at: NDArray[np.intp], psi: FloatArray) -> Points:
    """Evaluate coefficients, v, r and the derivatives of the coefficients at several ratios.

    Parameters
    ----------
    curve : Curve
    at : ndarray of int
        Places of the coefficients.
    psi : ndarray
        Ratios.

    Returns
    -------
    Points
    """
    p, count = curve.rank, psi.size
    weight = curve.sizes / (1.0 + np.multiply.outer(psi, curve.sizes))
    flat = curve.between_products.reshape(curve.sizes.size, -1)
    a = (weight @ flat).reshape(count, p + 1, p + 1) + curve.within_products
    s2 = (weight**2 @ flat).reshape(count, p + 1, p + 1)
    length = np.sqrt(np.diagonal(a, axis1=1, axis2=2))
    scaled = a / (length[:, :, None] * length[:, None, :])
    pivot = np.linalg.cholesky(scaled)[:, p, p] * length[:, p]
    unit = length[:, :p, None]
    rows = np.broadcast_to(curve.to_beta[at, :p].T, (count, p, at.size))
    solved = np.linalg.solve(scaled[:, :p, :p], np.concatenate([a[:, :p, p:], rows], axis=2) / unit) / unit
    white, by_row = solved[:, :, 0], solved[:, :, 1:]
    beta = white @ curve.to_beta[at, :p].T + curve.to_beta[at, p]
    c = np.column_stack([-white, np.ones(count)])
    pull = np.matmul(s2, c[:, :, None])[:, :p, 0]
    slope = -np.einsum("mpj,mp->mj", by_row, pull)
    return Points(psi, beta, np.einsum("pj,mpj->mj", rows[0], by_row), pivot**2, slope)


def _undecided(
    nodes: Points, low: FloatArray, high: FloatArray, fine: FloatArray, within_residual: float
) -> NDArray[np.bool_]:
    """Tell for each interval between nodes whether some coefficient can still cross an end of its figure there."""
    a, b = nodes.beta[:-1], nodes.beta[1:]
    grown = np.maximum(nodes.spread[1:] - nodes.spread[:-1], 0.0)
    lost = np.maximum(nodes.residual[:-1] - nodes.residual[1:], 0.0)[:, None]
    total = np.sqrt(grown * lost)
    psi = nodes.psi[1:]  # the first interval, from zero, has only the first bound
    eased = nodes.spread[1:] / psi[:, None]
    left = psi * (nodes.residual[1:] - within_residual)
    far = np.maximum(eased[:-1] - eased[1:], 0.0) * np.maximum(left[1:] - left[:-1], 0.0)[:, None]
    total[1:] = np.minimum(total[1:], np.sqrt(far))
    bottom, top = (a + b - total) / 2.0, (a + b + total) / 2.0
    crosses = ((bottom < low) & (top > low)) | ((bottom < high) & (top > high))
    narrow = nodes.psi[1:] - nodes.psi[:-1] <= 1e-12 * nodes.psi[1:]
    return np.asarray((crosses & (total > fine)).any(axis=1) & ~narrow)


def _inside(
    curve: Curve, at: NDArray[np.intp], j: int, nodes: Points, figure: Interval
) -> tuple[Interval, ...]:
    """Return the intervals in which one coefficient lies inside its figure."""
    beta = nodes.beta[:, j]
    cuts = {0.0, np.inf}
    for level in figure:
        side = beta > level
        for left in np.flatnonzero(side[:-1] != side[1:]):
            cuts.add(
                _crossing(curve, at[j : j + 1], level, float(nodes.psi[left]), float(nodes.psi[left + 1]))
            )
    ends = sorted(cuts)
    found: list[Interval] = []
    for low, high in itertools.pairwise(ends):
        between = beta[(nodes.psi >= low) & (nodes.psi <= high)]
        if between.size == 0:
            middle = np.sqrt(low * high) if low > 0.0 else high / 2.0
            between = points_at(curve, at[j : j + 1], np.array([middle])).beta[:, 0]
        # the node furthest from either end of the figure decides: nodes at the cuts themselves are rounding
        depth = np.minimum(between - figure[0], figure[1] - between)
        if depth[np.argmax(np.abs(depth))] >= 0.0:
            if found and found[-1][1] == low:
                found[-1] = (found[-1][0], high)
            else:
                found.append((low, high))
    return tuple(found)


def _crossing(curve: Curve, at: NDArray[np.intp], level: float, a: float, b: float) -> float:
    """Find where a coefficient crosses a level in a bracket: Newton steps kept inside, else halving."""
    rising = bool(points_at(curve, at, np.array([b])).beta[0, 0] > level)
    psi = np.sqrt(a * b) if a > 0.0 else b / 2.0
    for _ in range(100):
        point = points_at(curve, at, np.array([psi]))
        gap, slope = float(point.beta[0, 0]) - level, float(point.slope[0, 0])
        if (gap > 0.0) == rising:
            b = psi
        else:
            a = psi
        step = psi - gap / slope if slope != 0.0 else np.nan
        new = step if a < step < b else (np.sqrt(a * b) if a > 0.0 else b / 4.0)
        if abs(new - psi) <= 4.0 * EPS * psi or b - a <= 4.0 * EPS * b:
            break
        psi = new
    return float(psi)


def _intersection(left: tuple[Interval, ...], right: tuple[Interval, ...]) -> tuple[Interval, ...]:
    found = [(max(a, c), min(b, d)) for a, b in left for c, d in right if max(a, c) <= min(b, d)]
    return tuple(sorted(found))
