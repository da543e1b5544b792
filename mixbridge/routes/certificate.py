"""The optimum of a profile likelihood with bounds that show that nothing else on ψ >= 0 is better.

On an interval ``[a, b]`` (see `likelihood`: r and g' are completely monotone)

    m r'(a)/r(b) + g'(b)                       <= D'  <= m r'(b)/r(a) + g'(a)
    m (r''(b)/r(a) - r'(a)^2/r(b)^2) + g''(a)  <= D'' <= m (r''(a)/r(b) - r'(b)^2/r(a)^2) + g''(b)

so an interval is *settled* once D' has one sign on it, or D'' has one sign and D' changes sign between the
ends (one stationary point inside). Intervals are halved until all are settled. Beyond the last b, with
``L = lim psi^2 |r'|``,

    D >= m log RSS_w + g(b),      psi D' >= b g'(b) - m L / (b RSS_w).

These are bounds evaluated in floating point: ε, printed, allows for rounding.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.routes.likelihood import Profile, Values

__all__ = ["Certificate", "StationaryPoint", "certify"]

FloatArray = NDArray[np.float64]
EPS = float(np.finfo(float).eps)
ROUNDING = 32.0
MAX_ROUNDS = 60
MAX_EVALUATIONS = 20_000


@dataclass(frozen=True, slots=True)
class StationaryPoint:
    """A zero of D', or ψ = 0 where D does not fall there.

    Attributes
    ----------
    psi : float
        Variance ratio.
    deviance : float
        Above the lowest one, in units of deviance (−2 log-likelihood).
    kind : str
        ``minimum``, ``maximum`` or ``boundary minimum``.
    """

    psi: float
    deviance: float
    kind: str


@dataclass(frozen=True, slots=True)
class Certificate:
    """What has been shown about the optimum.

    Attributes
    ----------
    kind : str
        ``ml`` or ``reml``.
    psi : float
        The optimum reported.
    epsilon : float
        Deviance below which differences are not claimed: ``32 · m · 2.2e-16 · max(A_yy / r)``, at least 1e-9.
    stationary : tuple of StationaryPoint
        Every stationary point on ψ >= 0, in increasing ψ.
    slope_at_zero : float
        D'(0).
    excluded : bool
        No ψ >= 0 has a deviance lower by more than ε.
    unresolved : tuple of (float, float)
        Intervals in which D' could not be told from zero.
    tail_from : float
        From here to infinity the tail bounds hold.
    evaluations : int
        Number of ψ at which the deviance was evaluated.
    """

    kind: str
    psi: float
    epsilon: float
    stationary: tuple[StationaryPoint, ...]
    slope_at_zero: float
    excluded: bool
    unresolved: tuple[tuple[float, float], ...]
    tail_from: float
    evaluations: int

    def lines(self) -> list[str]:
        """Return the two statements, value and location, in words."""
        minima = sum("minimum" in point.kind for point in self.stationary)
        value = (
            f"no ratio >= 0 has a {self.kind.upper()} deviance lower by more than {self.epsilon:.1g} "
            f"({self.evaluations} evaluations, tail bounded from {self.tail_from:.3g})"
            if self.excluded
            else f"the bounds did not exclude a better {self.kind.upper()} optimum"
        )
        where = f"{minima} minimum" if minima == 1 else f"{minima} minima"
        lines = [f"value: {value}", f"location: {where} on ratio >= 0, at {_places(self.stationary)}"]
        if self.psi == 0.0:
            lines.append(
                f"zero: the derivative at 0 is {self.slope_at_zero:.3g}, so the deviance does not fall there"
            )
        if self.unresolved:
            spans = ", ".join(f"[{a:.6g}, {b:.6g}]" for a, b in self.unresolved)
            lines.append(f"the derivative could not be told from zero on {spans}")
        return lines


def certify(profile: Profile, within_residual: float, limit: float) -> Certificate:
    """Find the global minimum of the profile deviance on ψ >= 0 and bound everything else.

    Parameters
    ----------
    profile : Profile
        Deviance to minimise.
    within_residual : float
        ``RSS_w > 0`` in whitened units.
    limit : float
        ``lim psi^2 |r'(psi)|``: the sum of squares of the unit remainders about their unweighted regression
        on the unit-constant columns, whitened units.

    Returns
    -------
    Certificate
    """
    curve = profile.curve
    largest = float(curve.sizes[-1])
    grid = np.concatenate([[0.0], np.logspace(-3, 3, 25) / largest])
    seen = _sorted(profile.values(grid))
    while not _tail_settled(seen, within_residual, limit):
        if seen.psi[-1] > 1e100:
            break
        seen = _join(seen, profile.values(seen.psi[-1] * np.array([10.0, 100.0])))
    evaluations = len(seen.psi)
    unresolved: list[tuple[float, float]] = []
    for _ in range(MAX_ROUNDS):
        open_left = np.flatnonzero(~_settled(seen))
        a, b = seen.psi[open_left], seen.psi[open_left + 1]
        narrow = b - a <= 1e-10 * b
        unresolved = list(zip(a[narrow].tolist(), b[narrow].tolist(), strict=True))
        a, b = a[~narrow], b[~narrow]
        if a.size == 0:
            break
        if evaluations + a.size > MAX_EVALUATIONS:
            unresolved += list(zip(a.tolist(), b.tolist(), strict=True))
            break
        middle = np.where(a > 0.0, np.sqrt(a * b), b / 16.0)
        seen = _join(seen, profile.values(middle))
        evaluations += middle.size
    else:
        unresolved += list(zip(a.tolist(), b.tolist(), strict=True))
    roots: list[tuple[float, float, str]] = []
    slope = seen.slope
    if slope[0] >= 0.0:
        roots.append((0.0, float(seen.deviance[0]), "boundary minimum"))
    for i in np.flatnonzero(np.sign(slope[:-1]) * np.sign(slope[1:]) < 0):
        psi, deviance, used = _polish(
            profile, float(seen.psi[i]), float(seen.psi[i + 1]), rising=bool(slope[i + 1] > 0)
        )
        evaluations += used
        roots.append((psi, deviance, "minimum" if slope[i + 1] > 0 else "maximum"))
    best = min((root for root in roots if "minimum" in root[2]), key=lambda root: root[1])
    amplified = float(seen.amplified.max())
    epsilon = max(1e-9, ROUNDING * profile.m * EPS * amplified)
    tail = profile.m * np.log(within_residual) + float(seen.g[-1])
    excluded = (
        not unresolved and bool(tail >= best[1] - epsilon) and _tail_settled(seen, within_residual, limit)
    )
    return Certificate(
        kind=profile.kind,
        psi=float(best[0]),
        epsilon=epsilon,
        stationary=tuple(
            StationaryPoint(float(psi), float(deviance - best[1]), kind) for psi, deviance, kind in roots
        ),
        slope_at_zero=float(slope[0]),
        excluded=excluded,
        unresolved=tuple(unresolved),
        tail_from=float(seen.psi[-1]),
        evaluations=evaluations,
    )


def _settled(v: Values) -> NDArray[np.bool_]:
    """Tell for each interval between consecutive ψ whether its stationary points are known."""
    a, b = slice(None, -1), slice(1, None)
    low = v.m * v.r1[a] / v.r[b] + v.g1[b]
    high = v.m * v.r1[b] / v.r[a] + v.g1[a]
    bend_low = v.m * (v.r2[b] / v.r[a] - (v.r1[a] / v.r[b]) ** 2) + v.g2[a]
    bend_high = v.m * (v.r2[a] / v.r[b] - (v.r1[b] / v.r[a]) ** 2) + v.g2[b]
    slope = v.slope
    one_sign = (low > 0.0) | (high < 0.0)
    convex, concave = bend_low > 0.0, bend_high < 0.0
    # on a convex or concave piece D' is monotone, so its signs at the ends tell all
    return np.asarray(one_sign | ((convex | concave) & (slope[a] != 0.0) & (slope[b] != 0.0)))


def _tail_settled(v: Values, within_residual: float, limit: float) -> bool:
    b = float(v.psi[-1])
    value = v.m * np.log(within_residual) + v.g[-1] >= v.deviance.min()
    return bool(value and b * v.g1[-1] > v.m * limit / (b * within_residual))


def _polish(profile: Profile, a: float, b: float, rising: bool) -> tuple[float, float, int]:
    """Find the zero of D' in an interval where it changes sign: Newton steps kept inside the bracket."""
    psi = np.sqrt(a * b) if a > 0.0 else b / 2.0
    used = 0
    for _ in range(80):
        v = profile.values(np.array([psi]))
        used += 1
        slope, bend = float(v.slope[0]), float(v.bend[0])
        if (slope > 0.0) == rising:
            b = psi
        else:
            a = psi
        step = psi - slope / bend if bend != 0.0 else np.nan
        new = step if a < step < b else (np.sqrt(a * b) if a > 0.0 else b / 4.0)
        if abs(new - psi) <= 4.0 * EPS * psi or b - a <= 4.0 * EPS * b or slope == 0.0:
            break
        psi = new
    return psi, float(v.deviance[0]), used


def _join(left: Values, right: Values) -> Values:
    fields = ("psi", "r", "r1", "r2", "g", "g1", "g2", "amplified")
    both = {name: np.concatenate([getattr(left, name), getattr(right, name)]) for name in fields}
    return _sorted(Values(**both, m=left.m))


def _sorted(v: Values) -> Values:
    order = np.argsort(v.psi, kind="stable")
    fields = ("psi", "r", "r1", "r2", "g", "g1", "g2", "amplified")
    return Values(**{name: getattr(v, name)[order] for name in fields}, m=v.m)


def _places(points: tuple[StationaryPoint, ...]) -> str:
    return "; ".join(
        f"{point.psi:.6g} ({point.kind}" + (f", {point.deviance:.3g} higher)" if point.deviance > 0 else ")")
        for point in points
    )
