"""Certified optima of many profile likelihoods at once.

The bounds are those of `mixbridge.routes.certificate`: on ``[a, b]``, r and g' being completely monotone,

    m r'(a)/r(b) + g'(b)                       <= D'  <= m r'(b)/r(a) + g'(a)
    m (r''(b)/r(a) - r'(a)^2/r(b)^2) + g''(a)  <= D'' <= m (r''(a)/r(b) - r'(b)^2/r(a)^2) + g''(b)

One grid of ψ serves all profiles. An interval that is not settled (D' of one sign, or D'' of one sign, so that the
signs of D' at the ends tell all) is halved until it is, for its own profile; the tail is bounded for each. In every
interval where D' goes from negative to positive one minimum is polished by Newton steps on analytic derivatives, kept
inside it; ψ = 0 is a minimum, exactly, where ``D'(0) >= 0``. The lowest minimum is the optimum.

An optimum is *certified* if no interval of its profile is left unsettled, the tail is excluded, and ``|D'|`` is at most
`GRADIENT` times the sum of the sizes of its two parts, ``m |r'|/r + g'``.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

__all__ = ["GRADIENT", "Deviances", "Optima", "Values", "optima"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
BoolArray = NDArray[np.bool_]

GRADIENT = 1e-10
"""Largest slope of a certified interior optimum, relative to the sum of the sizes of its two parts."""

EPS = float(np.finfo(float).eps)
MAX_ROUNDS = 60
FIELDS = ("psi", "r", "r1", "r2", "g", "g1", "g2")
SPREAD = np.array(
    [*np.arange(0.25, 2.25, 0.25), 2.5, 3.0, 4.0, 6.0, 9.0, 14.0, 22.0, 35.0, 55.0, 90.0, 140.0]
)
"""Distances from the centre of the grid, in standard deviations of the optimum."""


@dataclass(frozen=True, slots=True)
class Values:
    """r and g with two derivatives each: of one profile and ratio per entry, or on a grid common to all.

    Attributes
    ----------
    psi, r, r1, r2, g, g1, g2 : ndarray
        Of shape (M,), one profile each; or, on a grid of M ratios, psi of shape (M,), r of shape (R, M), g of
        shape (M,) or (R, M).
    m : ndarray
        Multiplier of ``log r`` of each profile: shape (M,), or (R, 1) on a grid.
    """

    psi: FloatArray
    r: FloatArray
    r1: FloatArray
    r2: FloatArray
    g: FloatArray
    g1: FloatArray
    g2: FloatArray
    m: FloatArray

    @property
    def deviance(self) -> FloatArray:
        """``D``, up to a constant of the profile."""
        return np.asarray(self.m * np.log(self.r) + self.g)

    @property
    def slope(self) -> FloatArray:
        """``D'``."""
        return np.asarray(self.m * self.r1 / self.r + self.g1)

    @property
    def bend(self) -> FloatArray:
        """``D''``."""
        return np.asarray(self.m * (self.r2 / self.r - (self.r1 / self.r) ** 2) + self.g2)


class Deviances(Protocol):
    """Profile deviances ``D = m log r + g`` of several outcomes or several panels."""

    @property
    def m(self) -> FloatArray:
        """Multiplier of ``log r``, shape (R,)."""

    @property
    def largest(self) -> float:
        """Largest unit size."""

    @property
    def within_residual(self) -> FloatArray:
        """``RSS_w > 0``, shape (R,)."""

    @property
    def limit(self) -> FloatArray:
        """``lim psi^2 |r'(psi)|`` or a bound above it, shape (R,)."""

    @property
    def centre(self) -> tuple[float, float]:
        """Where most optima lie: a ratio, and the standard deviation about it (nan: not known)."""

    def on_grid(self, psi: FloatArray) -> Values:
        """Evaluate all at common ratios: r of shape (R, M), g of shape (M,) or (R, M)."""

    def at(self, which: IntArray, psi: FloatArray, value: bool) -> Values:
        """Evaluate the profiles `which`, each at its own ratio; without `value`, g itself may be left out."""


@dataclass(frozen=True, slots=True)
class Optima:
    """The optimum of each profile.

    Attributes
    ----------
    psi : ndarray of shape (R,)
        Exactly 0 on the boundary.
    residual : ndarray of shape (R,)
        ``r(psi)``.
    fall : ndarray of shape (R,)
        ``D(0) - D(psi) >= 0``, the likelihood ratio statistic of ψ = 0.
    minima : ndarray of int, shape (R,)
        Number of minima on ψ >= 0.
    slope : ndarray of shape (R,)
        ``|D'|`` at an interior optimum, relative as in `GRADIENT`; 0 on the boundary.
    certified : ndarray of bool, shape (R,)
    """

    psi: FloatArray
    residual: FloatArray
    fall: FloatArray
    minima: IntArray
    slope: FloatArray
    certified: BoolArray


@dataclass(frozen=True, slots=True)
class _Pieces:
    """Intervals of several profiles with the values at both ends."""

    which: IntArray
    left: Values
    right: Values

    def take(self, at: BoolArray | IntArray) -> _Pieces:
        return _Pieces(self.which[at], _take(self.left, at), _take(self.right, at))

    def join(self, other: _Pieces) -> _Pieces:
        which = np.concatenate([self.which, other.which])
        return _Pieces(which, _join(self.left, other.left), _join(self.right, other.right))


def optima(deviances: Deviances) -> Optima:
    """Find the global minimum of each deviance on ψ >= 0, with its certificate.

    Parameters
    ----------
    deviances : Deviances

    Returns
    -------
    Optima
    """
    seen = deviances.on_grid(_grid(deviances))
    height, slope = seen.deviance, seen.slope
    lowest, zero = height.min(axis=1), height[:, 0]
    settled = _settled(seen, slope)
    turns = (slope[:, :-1] < 0.0) & (slope[:, 1:] > 0.0)
    found = _pieces(seen, *np.nonzero(settled & turns))
    open_ = _pieces(seen, *np.nonzero(~settled))
    every = np.arange(zero.size)
    extended, excluded = _tail(deviances, _pieces(seen, every, np.full(zero.size, seen.psi.size - 2)), lowest)
    open_ = open_.join(extended)
    doubtful = ~excluded
    for _ in range(MAX_ROUNDS):
        done = _settled_pieces(open_)
        narrow = ~done & (open_.right.psi - open_.left.psi <= 1e-10 * open_.right.psi)
        doubtful[open_.which[narrow]] = True
        found = found.join(open_.take((done | narrow) & (open_.left.slope < 0.0) & (open_.right.slope > 0.0)))
        open_ = open_.take(~(done | narrow))
        if open_.which.size == 0:
            break
        a, b = open_.left.psi, open_.right.psi
        middle = deviances.at(open_.which, np.where(a > 0.0, np.sqrt(a * b), b / 16.0), True)
        np.minimum.at(lowest, open_.which, middle.deviance)
        open_ = _Pieces(np.tile(open_.which, 2), _join(open_.left, middle), _join(middle, open_.right))
    doubtful[open_.which] = True
    found = found.join(open_.take((open_.left.slope < 0.0) & (open_.right.slope > 0.0)))
    return _chosen(deviances, found, _pick(seen, every, np.zeros(zero.size, dtype=np.intp)), doubtful)


def _chosen(deviances: Deviances, found: _Pieces, origin: Values, doubtful: BoolArray) -> Optima:
    """Polish every minimum and take the lowest of each profile."""
    zero, boundary = origin.deviance, origin.slope >= 0.0
    count = zero.size
    place = _polish(deviances, found)
    last = deviances.at(found.which, place, True)
    steep = np.abs(last.slope) / (np.abs(last.m * last.r1 / last.r) + last.g1)
    order = np.lexsort((last.deviance, found.which))
    psi, top, residual = np.zeros(count), np.full(count, np.inf), origin.r.copy()
    top[boundary] = zero[boundary]
    slope = np.zeros(count)
    minima = np.bincount(found.which, minlength=count) + boundary
    inner, first = np.unique(found.which[order], return_index=True)
    picked = order[first]
    lower = last.deviance[picked] < top[inner]
    inner, picked = inner[lower], picked[lower]
    psi[inner], top[inner] = place[picked], last.deviance[picked]
    residual[inner], slope[inner] = last.r[picked], steep[picked]
    lost = ~np.isfinite(top)  # no minimum was seen: not certified, ψ = 0 stands for it
    top[lost] = zero[lost]
    return Optima(
        psi=psi,
        residual=residual,
        fall=np.maximum(zero - top, 0.0),
        minima=minima.astype(np.intp),
        slope=slope,
        certified=~(doubtful | lost) & (slope <= GRADIENT),
    )


def _grid(deviances: Deviances) -> FloatArray:
    """Return zero, four steps a decade, and a finer part about the centre."""
    centre, spread = deviances.centre
    coarse = np.concatenate([[0.0], np.logspace(-3, 3, 25) / deviances.largest])
    if not (np.isfinite(spread) and spread > 0.0):
        return coarse
    fine = centre + spread * np.concatenate([-SPREAD, [0.0], SPREAD])
    near = (fine > coarse[1]) & (fine <= max(2.0 * centre, centre + 4.0 * spread))
    return np.unique(np.concatenate([coarse, fine[near]]))


def _tail(deviances: Deviances, last: _Pieces, lowest: FloatArray) -> tuple[_Pieces, BoolArray]:
    """Go on to larger ψ where the tail is not excluded; return the new intervals and where it is excluded."""
    excluded = np.ones(lowest.size, dtype=bool)
    extra = last.take(np.zeros(0, dtype=np.intp))
    while True:
        here = last.which
        value = deviances.m[here] * np.log(deviances.within_residual[here]) + last.right.g >= lowest[here]
        b = last.right.psi
        rising = b * last.right.g1 > deviances.m[here] * deviances.limit[here] / (
            b * deviances.within_residual[here]
        )
        last = last.take(~(value & rising))
        if last.which.size == 0:
            break
        if last.right.psi[0] > 1e100:
            excluded[last.which] = False
            break
        further = deviances.at(last.which, 10.0 * last.right.psi, True)
        np.minimum.at(lowest, last.which, further.deviance)
        last = _Pieces(last.which, last.right, further)
        extra = extra.join(last)
    return extra, excluded


def _polish(deviances: Deviances, found: _Pieces) -> FloatArray:
    """Find the zero of D' in each interval where it goes from negative to positive."""
    low, high = found.left.psi.copy(), found.right.psi.copy()
    below, above = found.left.slope, found.right.slope
    psi = low + (high - low) * (below / (below - above))  # where the chord of D' is zero
    open_ = np.arange(psi.size)
    for _ in range(80):
        if open_.size == 0:
            break
        here = psi[open_]
        v = deviances.at(found.which[open_], here, False)
        slope, bend = v.slope, v.bend
        rises = slope > 0.0
        high[open_[rises]], low[open_[~rises]] = here[rises], here[~rises]
        a, b = low[open_], high[open_]
        with np.errstate(divide="ignore", invalid="ignore"):
            step = here - slope / bend
        inside = (step > a) & (step < b)
        new = np.where(inside, step, np.where(a > 0.0, np.sqrt(a * b), b / 4.0))
        moved = np.abs(new - here)
        psi[open_] = np.where(slope == 0.0, here, new)
        # Newton doubles the digits: after a step of 1e-9 nothing is left to gain
        done = (moved <= 1e-9 * here) & inside | (b - a <= 4.0 * EPS * b) | (slope == 0.0)
        open_ = open_[~done]
    return psi


def _settled(v: Values, slope: FloatArray) -> BoolArray:
    """Tell for each profile (row) and interval between consecutive ψ whether its stationary points are known."""
    left, right = (
        Values(**{name: getattr(v, name)[..., part] for name in FIELDS}, m=v.m)
        for part in (np.s_[:-1], np.s_[1:])
    )
    return _known(left, right, (slope[:, :-1] != 0.0) & (slope[:, 1:] != 0.0))


def _settled_pieces(pieces: _Pieces) -> BoolArray:
    return _known(pieces.left, pieces.right, (pieces.left.slope != 0.0) & (pieces.right.slope != 0.0))


def _known(a: Values, b: Values, apart: BoolArray) -> BoolArray:
    m = a.m
    one_sign = (m * a.r1 / b.r + b.g1 > 0.0) | (m * b.r1 / a.r + a.g1 < 0.0)
    convex = m * (b.r2 / a.r - (a.r1 / b.r) ** 2) + a.g2 > 0.0
    concave = m * (a.r2 / b.r - (b.r1 / a.r) ** 2) + b.g2 < 0.0
    return np.asarray(one_sign | ((convex | concave) & apart))


def _pieces(v: Values, which: IntArray, left: IntArray) -> _Pieces:
    """Return the intervals of profiles that begin at places on the grid."""
    return _Pieces(which, _pick(v, which, left), _pick(v, which, left + 1))


def _pick(v: Values, which: IntArray, at: IntArray) -> Values:
    def of(array: FloatArray) -> FloatArray:
        return np.asarray(array[at] if array.ndim == 1 else array[which, at])

    return Values(**{name: of(getattr(v, name)) for name in FIELDS}, m=v.m[which, 0])


def _take(v: Values, at: BoolArray | IntArray) -> Values:
    return Values(**{name: getattr(v, name)[at] for name in FIELDS}, m=v.m[at])


def _join(left: Values, right: Values) -> Values:
    both = {name: np.concatenate([getattr(left, name), getattr(right, name)]) for name in FIELDS}
    return Values(**both, m=np.concatenate([left.m, right.m]))
