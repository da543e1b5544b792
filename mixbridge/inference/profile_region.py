"""Profile likelihood intervals for the ratio and for both variances, ML or REML.

With D the deviance in ψ alone (``sigma_u^2`` profiled out; see `routes.likelihood`) and ``s(psi) =
r(psi)/m``, the deviance in both is

    D(psi, sigma_u^2) = D(psi) + m (log u + 1/u - 1),      u = sigma_u^2 / s(psi)

*Ratio*: all ψ >= 0 with ``D(psi) <= min D + c``, c the chi-square quantile with one degree of freedom. The
stationary points of D are all known (see `routes.certificate`), so between neighbours D is monotone and every
crossing is found by bracketing. *Variances*: the two-parameter profile. A value belongs to the interval if
the region ``D(psi, sigma_u^2) <= min D + c`` contains it for some ψ. At given ψ that region is ``u_low <= u
<= u_high``, the two roots of ``log u + 1/u - 1 = (c - D(psi) + min D)/m`` (Lambert's W), so the ends are the
extremes over ψ of ``s u`` for ``sigma_u^2`` and ``psi s u`` for ``sigma_a^2``.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import scipy
from numpy.typing import NDArray
from scipy.special import lambertw

from mixbridge.ratio import Curve
from mixbridge.routes import Certificate, Profile
from mixbridge.routes.likelihood import Kind

__all__ = ["Region", "profile_region", "scale_factors"]

FloatArray = NDArray[np.float64]
POINTS = 241
"""Grid over the ratio interval on which the extremes of the variances are bracketed."""


@dataclass(frozen=True, slots=True)
class Region:
    """Profile likelihood intervals of one route.

    Attributes
    ----------
    ratio, idiosyncratic, unit : (float, float)
        Intervals for ψ, ``sigma_u^2``, ``sigma_a^2``, the last two in squared units of the outcome.
    pieces : tuple of (float, float)
        The set of ψ; more than one piece where the likelihood has a dip inside. The intervals are hulls.
    """

    ratio: tuple[float, float]
    idiosyncratic: tuple[float, float]
    unit: tuple[float, float]
    pieces: tuple[tuple[float, float], ...]


def profile_region(curve: Curve, kind: Kind, certificate: Certificate, confidence: float) -> Region:
    """Return the intervals at a level; the certificate supplies the optimum and all stationary points."""
    profile = Profile(curve, kind)
    allowance = float(scipy.stats.chi2.ppf(confidence, 1))
    lowest = float(profile.values(np.array([certificate.psi])).deviance[0])

    def excess(psi: float) -> float:
        return float(profile.values(np.array([psi])).deviance[0]) - lowest - allowance

    pieces = _pieces(excess, [point.psi for point in certificate.stationary], 1.0 / float(curve.sizes[-1]))
    low, high = pieces[0][0], pieces[-1][1]

    def ends(psi: FloatArray) -> tuple[FloatArray, FloatArray]:
        values = profile.values(psi)
        inside = allowance - (values.deviance - lowest)
        down, up = scale_factors(np.maximum(inside, 0.0) / profile.m)
        center = curve.unit * values.r / profile.m
        lost = inside < -1e-9  # a gap between pieces
        return np.where(lost, np.inf, center * down), np.where(lost, -np.inf, center * up)

    largest = float(curve.sizes[-1])
    turn = np.sin(
        np.linspace(-0.5 * np.pi, 0.5 * np.pi, POINTS)
    )  # dense at both ends, where the factors move fastest
    place = np.log1p(largest * low) + 0.5 * (turn + 1.0) * (
        np.log1p(largest * high) - np.log1p(largest * low)
    )

    def extreme(sign: float, of_unit: bool) -> float:
        def height(t: FloatArray) -> FloatArray:
            psi = np.expm1(t) / largest
            down, up = ends(psi)
            return sign * (down if sign > 0.0 else up) * (psi if of_unit else 1.0)

        return sign * _minimum(height, place)

    unit = 0.0 if low == 0.0 else extreme(1.0, True), extreme(-1.0, True)
    return Region((low, high), (extreme(1.0, False), extreme(-1.0, False)), unit, tuple(pieces))


def scale_factors(excess: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the roots ``u <= 1 <= U`` of ``log u + 1/u - 1 = excess``, excess >= 0."""
    # Lambert's W loses half its digits at its branch point: a series there, for v = 1/u, v - 1 - log v = s^2 / 2
    near = excess < 1e-4
    argument = -np.exp(-1.0 - np.where(near, 1.0, excess))
    step = np.sqrt(2.0 * np.where(near, excess, 0.0))
    down = 1.0 / np.where(near, 1.0 + _series(step), -lambertw(argument, -1).real)
    up = 1.0 / np.where(near, 1.0 + _series(-step), -lambertw(argument, 0).real)
    return down, up


def _series(s: FloatArray) -> FloatArray:
    """Return x with ``x - log(1 + x) = s^2 / 2`` and the sign of s; the next term is ``s^6 / 17010``."""
    return s * (1.0 + s * (1.0 / 3.0 + s * (1.0 / 36.0 + s * (-1.0 / 270.0 + s / 4320.0))))


def _pieces(
    excess: Callable[[float], float], stationary: list[float], scale: float
) -> list[tuple[float, float]]:
    """Return the intervals of ψ >= 0 on which the excess is not positive, given all its stationary points."""
    knots = sorted({0.0, *stationary})
    beyond = 16.0 * max(knots[-1], scale)
    while excess(beyond) <= 0.0:
        beyond *= 16.0
    knots.append(beyond)
    heights = [excess(knot) for knot in knots]
    crossings = [
        float(scipy.optimize.brentq(excess, a, b, xtol=1e-18 * b, rtol=1e-14))
        for a, b, left, right in zip(knots[:-1], knots[1:], heights[:-1], heights[1:], strict=True)
        if (left <= 0.0) != (right <= 0.0)
    ]
    if heights[0] <= 0.0:
        crossings.insert(0, 0.0)
    return list(zip(crossings[::2], crossings[1::2], strict=True))


def _minimum(function: Callable[[FloatArray], FloatArray], place: FloatArray) -> float:
    """Return the minimum over the grid and its neighbourhood, polished."""
    heights = function(place)
    best = int(heights.argmin())
    a, b = place[max(best - 1, 0)], place[min(best + 1, place.size - 1)]
    found = scipy.optimize.minimize_scalar(
        lambda t: float(function(np.array([t]))[0]),
        bounds=(a, b),
        method="bounded",
        options={"xatol": 1e-9 * (b - a)},
    )
    return float(min(heights[best], found.fun))
