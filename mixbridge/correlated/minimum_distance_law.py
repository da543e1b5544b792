"""Upper tail of a weighted sum of chi-squares: the law of a distance whose weights are not the optimal ones.

For ``S = sum_j w_j chi2(1)``, all ``w_j > 0``, and ``K(s) = -1/2 sum log(1 - 2 w_j s)``,

    P(S > x) = 1/(2 pi i) integral of exp(K(s) - s x) / s ds,    crossing the real axis at 0 < c < 1/(2 max w)

The path crosses at the minimum of ``K(c) - log c - c x`` and bends to the right as ``c + i y + a y^2``, close to the
path of steepest descent, so that the integrand does not turn and falls off like ``exp(-a x y^2)``; the singularities
lie on the real axis to the right of c, inside the parabola. The trapezoidal rule in ``asinh`` converges exponentially,
and small probabilities keep their relative precision (Rice 1980, from memory; on the axis: Imhof 1961).
"""

from __future__ import annotations

import numpy as np
import scipy
from numpy.typing import NDArray

__all__ = ["upper_tail"]

FloatArray = NDArray[np.float64]
TOLERANCE = 1e-12
"""Relative change at which the step is no longer halved."""


def upper_tail(x: float, weights: FloatArray) -> float:
    """Return ``P(sum_j w_j chi2(1) > x)``.

    Parameters
    ----------
    x : float
    weights : ndarray of shape (k,)
        Not negative. Those below 1e-14 of the largest are taken as zero.

    Returns
    -------
    float
        NaN if no weight is positive.

    Examples
    --------
    With equal weights it is a chi-square:

    >>> import numpy as np
    >>> from scipy import stats
    >>> bool(abs(upper_tail(24.0, np.full(7, 2.0)) / stats.chi2.sf(12.0, 7) - 1.0) < 1e-11)
    True
    """
    largest = float(np.max(weights, initial=0.0))
    if not largest > 0.0 or not np.isfinite(x):
        return np.nan
    if x <= 0.0 or x > 1e9 * largest * weights.size:
        return float(x <= 0.0)
    w = weights[weights > 1e-14 * largest] / largest
    level = x / largest
    end = 0.5

    def slope(c: float) -> float:
        return float((w / (1.0 - 2.0 * w * c)).sum()) - 1.0 / c - level

    low = 0.5 / (1.0 + level + w.size)  # slope < 0: the sum is below 2 k there, and 1/c = 2 + 2 x + 2 k
    c = float(scipy.optimize.brentq(slope, low, end * (1.0 - 1e-15), xtol=1e-300, rtol=1e-14))
    base = 1.0 - 2.0 * w * c
    second = float((2.0 * (w / base) ** 2).sum()) + 1.0 / c**2
    third = float((8.0 * (w / base) ** 3).sum()) - 2.0 / c**3
    gap = end - c
    bend = float(np.clip(third / (6.0 * second), 0.02 / gap, 0.34 / gap))
    width = 1.0 / np.sqrt(second)
    start = -0.5 * float(np.log(base).sum()) - np.log(c) - c * level

    def integrand(t: FloatArray) -> FloatArray:
        y = width * np.sinh(t)
        s = c + 1j * y + bend * y**2
        logs = np.zeros(s.shape, dtype=complex)
        for weight in np.array_split(w, max(1, w.size // 256)):
            logs -= 0.5 * np.log(1.0 - 2.0 * np.multiply.outer(s, weight)).sum(axis=1)
        value = np.exp(logs - np.log(s) - s * level - start) * (1j + 2.0 * bend * y)
        return np.asarray(value.imag * width * np.cosh(t), dtype=np.float64)

    reach = 4.0
    # beyond this the integrand, one at the crossing, is below rounding of the sum
    while reach < 60.0 and float(np.abs(integrand(np.array([reach, reach + 0.3]))).max()) > 1e-18:
        reach += 1.0
    count = 32
    values = integrand(np.linspace(0.0, reach, count + 1))
    total = float(values.sum() - 0.5 * (values[0] + values[-1])) * (reach / count)
    change = np.inf
    while count < 2**14 and not change <= TOLERANCE * abs(total):
        middle = np.asarray((np.arange(count) + 0.5) * (reach / count), dtype=np.float64)
        finer = 0.5 * (total + float(integrand(middle).sum()) * (reach / count))
        change, total, count = abs(finer - total), finer, 2 * count
    return float(np.clip(np.exp(start) / np.pi * total, 0.0, 1.0))
