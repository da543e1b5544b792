"""REML and ML of the random-intercept model at 50 digits, for panels of up to about 60 rows.

Everything starts from the doubles as stored, taken as exact. V0 = I + psi ZZ' is compound symmetric by unit,

    V0_i^-1 = I - psi / (1 + T psi) J,    log|V0_i| = log(1 + T psi),

so cross-products of z = (x, y) collapse to one matrix within and one of unit means per distinct size:

    z'V0^-1 z = W + sum_T  T / (1 + T psi) B_T,   B_T = sum of zbar_i zbar_i' over units of size T.

The profile deviance up to a constant is D = m log r + g, for REML with m = n - K and
g = sum log(1 + T psi) + log|X'V0^-1 X|, for ML with m = n and without the last term; r = e'V0^-1 e at the GLS
coefficients. `X` must have full column rank.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from mpmath import mp, mpf

DIGITS = 50
#: psi grid for the scan: 10 points per decade from 1e-6 to 1e10, with 0 in front.
GRID = (0.0, *(10.0 ** (k / 10) for k in range(-60, 101)))

Matrix = list[list[mpf]]


@dataclass(frozen=True)
class Products:
    """Exact cross-products of z = (x, y), as mp numbers."""

    within: Matrix
    between: dict[int, Matrix]
    count: dict[int, int]
    n: int
    p: int


@dataclass(frozen=True)
class Profile:
    """The profile at one psi."""

    deviance: mpf
    slope: mpf
    r: mpf
    beta: tuple[mpf, ...]
    inverse: Matrix  # (X'V0^-1 X)^-1
    log_det_v: mpf
    log_det_xvx: mpf


@dataclass(frozen=True)
class Optimum:
    """The global minimum over psi >= 0, as floats rounded from 50 digits, and every stationary point."""

    psi: float
    unit_variance: float
    idiosyncratic_variance: float
    beta: np.ndarray
    cov: np.ndarray
    deviance: float
    log_likelihood: float  # REML: with + log|X'X| / 2
    log_likelihood_omitted: float  # REML: without; ML: the same as log_likelihood
    minima: tuple[tuple[float, float], ...]  # (psi, deviance) of each local minimum, lowest first
    stationary: tuple[float, ...]
    slope_at_zero: float

    @property
    def standard_errors(self) -> np.ndarray:
        return np.sqrt(np.diag(self.cov))


def _outer_sum(rows: list[list[Fraction]], p: int) -> list[list[Fraction]]:
    return [[sum((r[i] * r[j] for r in rows), Fraction(0)) for j in range(p)] for i in range(p)]


def _mp(matrix: list[list[Fraction]]) -> Matrix:
    return [[mpf(v.numerator) / mpf(v.denominator) for v in row] for row in matrix]


def products(X: np.ndarray, y: np.ndarray, units: np.ndarray) -> Products:
    """Collect the products in rational arithmetic, then round once to 50 digits."""
    z = np.column_stack([np.asarray(X, dtype=np.float64), np.asarray(y, dtype=np.float64)])
    rows = [[Fraction(float(v)) for v in row] for row in z]
    q = z.shape[1]
    deviations: list[list[Fraction]] = []
    means: dict[int, list[list[Fraction]]] = {}
    for unit in np.unique(units):
        own = [rows[t] for t in np.flatnonzero(units == unit)]
        mean = [sum((r[j] for r in own), Fraction(0)) / len(own) for j in range(q)]
        means.setdefault(len(own), []).append(mean)
        deviations += [[v - m for v, m in zip(r, mean, strict=True)] for r in own]
    with mp.workdps(DIGITS):
        return Products(
            within=_mp(_outer_sum(deviations, q)),
            between={T: _mp(_outer_sum(rows_T, q)) for T, rows_T in means.items()},
            count={T: len(rows_T) for T, rows_T in means.items()},
            n=len(rows),
            p=q - 1,
        )


def _cholesky(A: Matrix) -> Matrix:
    p = len(A)
    L = [[mpf(0)] * p for _ in range(p)]
    for j in range(p):
        d = A[j][j] - mp.fsum(v * v for v in L[j][:j])
        if d <= A[j][j] * mpf(10) ** (-DIGITS // 2 - 10):
            raise ZeroDivisionError("columns are dependent")
        L[j][j] = mp.sqrt(d)
        for i in range(j + 1, p):
            L[i][j] = (A[i][j] - mp.fdot(L[i][:j], L[j][:j])) / L[j][j]
    return L


def _invert(A: Matrix) -> tuple[Matrix, mpf]:
    """Return the inverse and the log determinant of a positive definite matrix."""
    L = _cholesky(A)
    p = len(A)
    inverse = [[mpf(0)] * p for _ in range(p)]
    root = [[mpf(0)] * p for _ in range(p)]  # L^-1
    for k in range(p):
        root[k][k] = 1 / L[k][k]
        for i in range(k + 1, p):
            root[i][k] = -mp.fdot(L[i][k:i], [root[t][k] for t in range(k, i)]) / L[i][i]
    for i in range(p):
        for j in range(i + 1):
            inverse[i][j] = inverse[j][i] = mp.fdot(
                [root[t][i] for t in range(i, p)], [root[t][j] for t in range(i, p)]
            )
    return inverse, 2 * mp.fsum(mp.log(L[i][i]) for i in range(p))


def evaluate(panel: Products, psi: mpf, kind: str) -> Profile:
    """Evaluate the profile deviance, its slope and the fit at one psi. Call within 50 digits."""
    p, q = panel.p, panel.p + 1
    A = [row[:] for row in panel.within]
    for T, B in panel.between.items():
        weight = T / (1 + T * psi)
        for i in range(q):
            for j in range(q):
                A[i][j] += weight * B[i][j]
    inverse, log_det = _invert([row[:p] for row in A[:p]])
    Axy = [A[i][p] for i in range(p)]
    beta = [mp.fdot(inverse[i], Axy) for i in range(p)]
    r = A[p][p] - mp.fdot(beta, Axy)
    direction = [-b for b in beta] + [mpf(1)]
    slope_r, slope_g, log_v = mpf(0), mpf(0), mpf(0)
    for T, B in panel.between.items():
        weight = T / (1 + T * psi)
        slope_r -= weight**2 * mp.fdot(direction, [mp.fdot(B[i], direction) for i in range(q)])
        slope_g += panel.count[T] * weight
        log_v += panel.count[T] * mp.log(1 + T * psi)
        if kind == "reml":
            slope_g -= weight**2 * mp.fsum(inverse[i][j] * B[i][j] for i in range(p) for j in range(p))
    m = {"reml": panel.n - p, "ml": panel.n}[kind]
    g = log_v + (log_det if kind == "reml" else 0)
    return Profile(m * mp.log(r) + g, m * slope_r / r + slope_g, r, tuple(beta), inverse, log_v, log_det)


def mp_profile(X: np.ndarray, y: np.ndarray, units: np.ndarray, psi: float, kind: str) -> mpf:
    """Return the deviance D(psi) = m log r + g at 50 digits."""
    with mp.workdps(DIGITS):
        return evaluate(products(X, y, units), mpf(psi), kind).deviance


def _root(panel: Products, low: mpf, high: mpf, slope_low: mpf, slope_high: mpf, kind: str) -> mpf:
    """Refine a sign change of the slope by regula falsi with the weights of Anderson and Bjorck (1973)."""
    for _ in range(200):
        if abs(high - low) <= mpf(10) ** -40 * high:
            break
        new = high - slope_high * (high - low) / (slope_high - slope_low)
        slope = evaluate(panel, new, kind).slope
        if slope == 0:
            return new
        if mp.sign(slope) == mp.sign(slope_high):
            factor = 1 - slope / slope_high
            slope_low *= factor if factor > 0 else mpf("0.5")
        else:
            low, slope_low = high, slope_high
        move = abs(new - high)
        high, slope_high = new, slope
        if move <= mpf(10) ** -36 * abs(new):
            break
    else:
        raise ArithmeticError("the root of the slope was not reached")
    return high


def stationary_points(panel: Products, kind: str) -> list[tuple[mpf, int]]:
    """Return each psi > 0 where the slope changes sign on the grid: +1 at a minimum, -1 at a maximum."""
    found: list[tuple[mpf, int]] = []
    before = mpf(0)
    slope_before = evaluate(panel, before, kind).slope
    for point in GRID[1:]:
        now = mpf(point)
        slope = evaluate(panel, now, kind).slope
        if slope_before != 0 and mp.sign(slope) != mp.sign(slope_before):
            found.append((_root(panel, before, now, slope_before, slope, kind), int(mp.sign(slope))))
        before, slope_before = now, slope
    return found


_DONE: dict[tuple[bytes, bytes, bytes, str], Optimum] = {}


def mp_optimum(X: np.ndarray, y: np.ndarray, units: np.ndarray, kind: str) -> Optimum:
    """Return the global minimum of the profile deviance over psi >= 0; remembered by data, it takes a while.

    Parameters
    ----------
    X, y, units : array
        Full-rank design, response, unit labels.
    kind : {"reml", "ml"}

    Returns
    -------
    Optimum
        Components with divisor n - K (REML) or n (ML), which also scales the covariance of the coefficients.
    """
    key = (np.ascontiguousarray(X).tobytes(), y.tobytes(), np.ascontiguousarray(units).tobytes(), kind)
    if key not in _DONE:
        _DONE[key] = _optimum(X, y, units, kind)
    return _DONE[key]


def _optimum(X: np.ndarray, y: np.ndarray, units: np.ndarray, kind: str) -> Optimum:
    with mp.workdps(DIGITS):
        panel = products(X, y, units)
        at_zero = evaluate(panel, mpf(0), kind)
        roots = stationary_points(panel, kind)
        minima = [psi for psi, sign in roots if sign > 0]
        if at_zero.slope >= 0:
            minima.append(mpf(0))
        if not minima:
            raise ArithmeticError("the deviance decreases over the whole grid")
        ranked = sorted((evaluate(panel, psi, kind).deviance, psi) for psi in minima)
        psi = ranked[0][1]
        best = evaluate(panel, psi, kind)
        m = {"reml": panel.n - panel.p, "ml": panel.n}[kind]
        sigma = best.r / m
        log_likelihood = -(m * (mp.log(2 * mp.pi * sigma) + 1) + best.log_det_v) / 2
        constant = mpf(0)
        if kind == "reml":
            log_likelihood -= best.log_det_xvx / 2
            constant = at_zero.log_det_xvx / 2  # V0 = I at psi = 0
        return Optimum(
            psi=float(psi),
            unit_variance=float(psi * sigma),
            idiosyncratic_variance=float(sigma),
            beta=np.array([float(b) for b in best.beta]),
            cov=np.array([[float(v * sigma) for v in row] for row in best.inverse]),
            deviance=float(best.deviance),
            log_likelihood=float(log_likelihood + constant),
            log_likelihood_omitted=float(log_likelihood),
            minima=tuple((float(at), float(value)) for value, at in ranked),
            stationary=tuple(float(at) for at, _ in sorted(roots)),
            slope_at_zero=float(at_zero.slope),
        )


def mp_slopes(X: np.ndarray, y: np.ndarray, units: np.ndarray, psi: float, kind: str) -> tuple[mpf, mpf]:
    """Return the slope by formula and by a central difference of the deviance."""
    with mp.workdps(DIGITS):
        panel = products(X, y, units)
        h = mpf(10) ** -15 * (1 + mpf(psi))
        up, down = (evaluate(panel, mpf(psi) + s * h, kind).deviance for s in (1, -1))
        return evaluate(panel, mpf(psi), kind).slope, (up - down) / (2 * h)


__all__ = [
    "Optimum",
    "evaluate",
    "mp_optimum",
    "mp_profile",
    "mp_slopes",
    "products",
    "stationary_points",
]
