"""Iterated forms as paths: generalised least squares with likelihood divisors, and MINQUE."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pandas as pd
import scipy
from numpy.typing import NDArray

from mixbridge.errors import IdentificationError, OptionError
from mixbridge.ratio import Curve
from mixbridge.routes.likelihood import Profile
from mixbridge.routes.quadratic import NotEstimableError, minque_pair, solve

__all__ = ["STARTS", "iterate"]

FloatArray = NDArray[np.float64]
STARTS = ("pooled", "within", "between")
COLUMNS = ["step", "ratio", "unit_variance", "idiosyncratic_variance", "deviance", "status"]


def iterate(
    curve: Curve, kind: str, start: str | float, steps: int = 500, tolerance: float = 1e-12
) -> pd.DataFrame:
    """Iterate a feasible estimator and return every step.

    Parameters
    ----------
    curve : Curve
    kind : {"gls", "minque"}
        What is iterated. ``gls``: coefficients at the current ratio, then the ratio that maximises the
        likelihood given these coefficients (in a balanced panel ``sigma_u^2 = e'Qe/(n - N)`` and
        ``sigma_1^2 = e'Pe/N``), and so on: each step raises the likelihood, and in balanced panels the path
        is monotone from both ends (Breusch 1987). ``minque``: the prior of each step is the estimate of the
        last; a point where it stays is a stationary point of the restricted likelihood (Harville 1977).
    start : {"pooled", "within", "between"} or float
        Coefficients, or ratio, to start from.
    steps : int
        Largest number of steps.
    tolerance : float
        Relative change of the ratio that counts as none.

    Returns
    -------
    DataFrame
        ``step``, ``ratio``, ``unit_variance`` and ``idiosyncratic_variance`` (variances; the unit variance
        before truncation), ``deviance`` (profile, up to a constant: ML for ``gls``, REML for ``minque``) and
        ``status`` (``moving``, ``converged``, or why it stopped).
    """
    if kind not in ("gls", "minque"):
        raise OptionError.not_among("iterate", kind, ("gls", "minque"))
    number = isinstance(start, (int, float)) and not isinstance(start, bool)
    if not number and start not in STARTS:
        raise OptionError.not_among("start", start, (*STARTS, "a ratio >= 0"))
    if number and not (np.isfinite(float(start)) and float(start) >= 0.0):
        raise OptionError(
            f"start={start!r} is not allowed; allowed: {', '.join(STARTS)}, or a finite ratio >= 0."
        )
    if curve.df_within < 1 or not curve.within_residual > 0.0:
        raise IdentificationError(
            "within units no error is left to estimate a variance from, so there is no path."
        )
    path = _gls(curve, start) if kind == "gls" else _minque(curve, start)
    profile = Profile(curve, "ml" if kind == "gls" else "reml")
    rows: list[list[object]] = []
    last = np.nan
    for step, (ratio, unit, idiosyncratic, stop) in zip(range(steps + 1), path, strict=False):
        deviance = (
            float(profile.values(np.array([max(ratio, 0.0)])).deviance[0]) if np.isfinite(ratio) else np.nan
        )
        status = stop or (
            "converged" if abs(ratio - last) <= tolerance * max(abs(ratio), tolerance) else "moving"
        )
        rows.append([step, ratio, unit, idiosyncratic, deviance, status])
        if status != "moving":
            break
        last = ratio
    else:
        rows[-1][-1] = f"not converged after {steps} steps"
    return pd.DataFrame(rows, columns=COLUMNS)


def _start_white(curve: Curve, start: str) -> FloatArray:
    """Return ``(-beta, 1)``, whitened, of a least-squares route."""
    p = curve.rank
    if start == "pooled":
        return np.append(np.zeros(p), 1.0)
    if start == "between":
        if curve.rank_between < p:
            raise IdentificationError(
                "start='between' needs coefficients for every column, "
                f"but unit means have rank {curve.rank_between} of {p}."
            )
        products = curve.weighted_between(curve.sizes)
        return np.append(-curve.between_root @ (curve.between_root.T @ products[:p, p]), 1.0)
    slope = curve.within_root @ (curve.within_root.T @ curve.within_products[:p, p])
    c = curve.rank_constant
    if c:
        means = curve.weighted_between(np.ones(len(curve.sizes)))
        slope[:c] += np.linalg.lstsq(means[:c, :c], means[:c, p] - means[:c, :p] @ slope, rcond=None)[0]
    return np.append(-slope, 1.0)


def _gls(curve: Curve, start: str | float) -> Iterator[tuple[float, float, float, str]]:
    white = _start_white(curve, start) if isinstance(start, str) else curve.at(float(start)).white
    while True:
        inside, means = curve.loadings(white)
        ratio = _best_ratio(curve, inside, means)
        rest = inside + float((curve.sizes / (1.0 + curve.sizes * ratio)) @ means)
        idiosyncratic = curve.unit * rest / curve.n
        yield ratio, ratio * idiosyncratic, idiosyncratic, ""
        white = curve.at(ratio).white


def _best_ratio(curve: Curve, inside: float, means: FloatArray) -> float:
    """Maximise the likelihood in ψ for fixed residuals.

    The ratio minimises ``n log(e'Qe + sum w_T rho_T) + sum m_T log(1 + T psi)``.
    """

    def slope(psi: float) -> float:
        weight = curve.sizes / (1.0 + curve.sizes * psi)
        rest = inside + weight @ means
        return float(curve.counts @ weight - curve.n * (weight**2 @ means) / rest)

    def deviance(psi: float) -> float:
        rest = inside + (curve.sizes / (1.0 + curve.sizes * psi)) @ means
        return float(curve.n * np.log(rest) + curve.counts @ np.log1p(curve.sizes * psi))

    high = 1.0 / float(curve.sizes[0])
    while slope(high) <= 0.0 and high < 1e100:
        high *= 10.0
    grid = np.concatenate([[0.0], np.geomspace(1e-9 * high, high, 200)])
    weights = curve.sizes / (1.0 + np.multiply.outer(grid, curve.sizes))
    slopes = weights @ curve.counts - curve.n * (weights**2 @ means) / (inside + weights @ means)
    found = [0.0] if slopes[0] >= 0.0 else []
    for i in np.flatnonzero((slopes[:-1] < 0.0) & (slopes[1:] >= 0.0)):
        found.append(float(scipy.optimize.brentq(slope, grid[i], grid[i + 1], xtol=1e-300, rtol=8.9e-16)))
    return min(found, key=deviance)


def _minque(curve: Curve, start: str | float) -> Iterator[tuple[float, float, float, str]]:
    if isinstance(start, str) and start != "pooled":
        raise OptionError(
            f"start={start!r} is not allowed for 'minque'; allowed: 'pooled' (ratio 0), or a ratio >= 0."
        )
    prior = 0.0 if isinstance(start, str) else float(start)
    while True:
        try:
            components = solve(curve, minque_pair(curve, prior))
        except NotEstimableError as reason:
            yield np.nan, np.nan, np.nan, f"stopped: {reason}"
            return
        unit, idiosyncratic = components.unit, components.idiosyncratic
        if not idiosyncratic > 0.0:
            yield np.nan, unit, idiosyncratic, "stopped: idiosyncratic variance not positive"
            return
        prior = max(unit, 0.0) / idiosyncratic
        yield prior, unit, idiosyncratic, ""
