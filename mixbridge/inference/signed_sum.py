"""The probability that a weighted sum of independent chi-squares is negative, by numerical inversion.

For ``S = sum_j w_j chi2(d_j)`` with weights of both signs and ``K(s) = -1/2 sum d_j log(1 - 2 w_j s)``,

    P(S < 0) = -1/(2 pi i) integral of exp(K(s)) / s ds  along  Re s = c,    1/(2 min w) < c < 0

for every such c. The line is put through the minimum of ``K(c) - log(-c)``, where the integrand falls off
without turning, and the integral over the height is taken by the trapezoidal rule in ``asinh``, whose error
for such integrands falls exponentially with the step; the step is halved until nothing changes. Unlike the
inversion on the axis (Imhof 1961; Davies 1980), small probabilities keep their relative precision (Rice 1980,
from memory).
"""

from __future__ import annotations

import numpy as np
import scipy
from numpy.typing import ArrayLike, NDArray

__all__ = ["probability_negative"]

FloatArray = NDArray[np.float64]
EPS = float(np.finfo(float).eps)
TOLERANCE = 1e-13
"""Relative change at which the step is no longer halved."""


def probability_negative(weights: ArrayLike, df: ArrayLike) -> tuple[float, float]:
    """Return ``P(sum_j w_j chi2(d_j) < 0)`` and a bound on its numerical error.

    Parameters
    ----------
    weights, df : array_like of shape (k,)
        Weights, and positive degrees of freedom (not necessarily whole). A weight below 1e-15 of the largest
        is taken as zero.

    Returns
    -------
    float, float

    Examples
    --------
    The F distribution with 3 and 8 degrees of freedom at 0.5:

    >>> from scipy import stats
    >>> p, error = probability_negative([1 / 3, -0.5 / 8], [3, 8])
    >>> bool(abs(p - stats.f.cdf(0.5, 3, 8)) < 1e-12)
    True
    """
    w, d = np.asarray(weights, dtype=float), np.asarray(df, dtype=float)
    keep = (np.abs(w) > 1e-15 * np.abs(w).max(initial=0.0)) & (d > 0.0)
    w, d = w[keep], d[keep]
    if not (w < 0.0).any():
        return 0.0, 0.0
    if not (w > 0.0).any():
        return 1.0, 0.0
    w = w / np.abs(w).max()
    if w @ d >= 0.0:
        return _lower(w, d)
    p, error = _lower(-w, d)
    return 1.0 - p, error


def _lower(w: FloatArray, d: FloatArray) -> tuple[float, float]:
    """Invert for a sum whose mean is not negative."""
    end = -0.5 / float(w.min())  # 1 + 2 w x > 0 for x < end

    def slope(x: float) -> float:
        return 1.0 + float((d * w * x / (1.0 + 2.0 * w * x)).sum())

    high = end
    for k in range(1, 54):
        high = end * (1.0 - 2.0**-k)
        if slope(high) < 0.0:
            break
    x = float(scipy.optimize.brentq(slope, 0.0, high, rtol=1e-14, xtol=1e-300))
    base = 1.0 + 2.0 * w * x
    bend = 2.0 * float((d * (w / base) ** 2).sum()) + 1.0 / x**2
    width = 1.0 / np.sqrt(bend)
    logs = d * np.log1p(2.0 * w * x)
    peak = -0.5 * float(logs.sum()) - np.log(x)
    rounding = 4.0 * EPS * (1.0 + float(np.abs(logs).sum()))
    lift = (w / base) ** 2

    def integrand(t: FloatArray) -> FloatArray:
        y = width * np.sinh(t)
        size = -0.25 * (np.log1p(4.0 * np.multiply.outer(y**2, lift)) @ d) - 0.5 * np.log1p((y / x) ** 2)
        turn = 0.5 * (np.arctan(2.0 * np.multiply.outer(y, w / base)) @ d) + np.arctan(y / x)
        return np.asarray(np.exp(size) * np.cos(turn) * width * np.cosh(t))

    reach = 4.0
    while reach < 400.0 and abs(float(_envelope(reach, width, lift, d, x))) > 1e-17:
        reach += 1.0
    count = 32
    grid = np.linspace(0.0, reach, count + 1)
    values = integrand(grid)
    total = (values.sum() - 0.5 * (values[0] + values[-1])) * (reach / count)
    change = np.inf
    while count < 2**16 and not change <= TOLERANCE * abs(total):
        middle = np.asarray((np.arange(count) + 0.5) * (reach / count), dtype=np.float64)
        finer = 0.5 * (total + float(integrand(middle).sum()) * (reach / count))
        change, total, count = abs(finer - total), finer, 2 * count
    scale = float(np.exp(peak)) / np.pi
    return scale * float(total), scale * (float(change) + rounding * float(abs(total)))


def _envelope(t: float, width: float, lift: FloatArray, d: FloatArray, x: float) -> float:
    """Return the size of the integrand at t, without its turning, relative to that at 0."""
    y = width * np.sinh(t)
    size = -0.25 * float(d @ np.log1p(4.0 * y**2 * lift)) - 0.5 * np.log1p((y / x) ** 2)
    return float(np.exp(size + np.log(np.cosh(t))))
