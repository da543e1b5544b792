"""Smallest departures that tests of this design detect at a stated power."""

from __future__ import annotations

import numpy as np
import pandas as pd
import scipy
from numpy.typing import NDArray

from mixbridge.errors import IdentificationError, OptionError
from mixbridge.inference.references import pick_reference
from mixbridge.ratio import Curve
from mixbridge.rehearse.truth import unit_mean_covariance
from mixbridge.routes import Fit

__all__ = ["minimum_detectable", "noncentrality_for", "shift_for"]

FloatArray = NDArray[np.float64]
COLUMNS = ["test", "route", "term", "reference", "standard_error", "departure", "in_sd_of_unit_means", "note"]


def minimum_detectable(curve: Curve, fit: Fit, power: float = 0.8, level: float = 0.05) -> pd.DataFrame:
    """Return the smallest departures that tests detect with the power stated.

    Parameters
    ----------
    curve : Curve
    fit : Fit
        Any route; its variances are taken as known.
    power, level : float
        Probability of rejecting at that departure; level of the test.

    Returns
    -------
    DataFrame
        ``test``: ``coefficient`` (two-sided test of 0 by the default reference; t with N - 1 for a robust
        covariance) or ``unit means`` (chi-square of the contrasts between within, GLS and between, for a departure in
        one covariate alone); ``route, term, reference, standard_error, departure`` (outcome units per unit of the
        term), ``in_sd_of_unit_means`` (outcome units: departure times the standard deviation of the unit means),
        ``note``.
    """
    for name, value in (("power", power), ("level", level)):
        if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0.0 < value < 1.0:
            raise OptionError(f"{name}={value!r} is not allowed; allowed: a number between 0 and 1.")
    if not power > level:
        raise OptionError(
            f"power={power!r} is not above level={level!r}: every departure has more power than that."
        )
    if not fit.estimated:
        raise IdentificationError(f"route {fit.route!r} gives no estimates: {fit.status}.")
    if (curve.n, curve.names) != (fit.rows, fit.terms):
        raise OptionError(
            f"the fit used {fit.rows} rows and {fit.terms}, the curve {curve.n} and {curve.names}."
        )
    _, spread = unit_mean_covariance(curve)
    sd = np.sqrt(np.maximum(np.diag(spread), 0.0))
    rows: list[list[object]] = []
    errors = fit.standard_errors.to_numpy()
    references = pick_reference(curve, fit, rule=None if fit.robust is None else "t_units")
    for at, (term, reference) in enumerate(zip(fit.terms, references, strict=True)):
        if not (np.isfinite(errors[at]) and reference.available):
            reason = fit.not_estimable.get(term, "no reference distribution: " + reference.text)
            rows.append(["coefficient", fit.route, term, "none", errors[at], np.nan, np.nan, reason])
            continue
        departure = float(errors[at]) * shift_for(power, level, reference.df)
        note = "standard error taken as the data give it"
        rows.append(
            ["coefficient", fit.route, term, reference.text, errors[at], departure, departure * sd[at], note]
        )
    return pd.DataFrame(rows + _unit_means(curve, fit, power, level, sd), columns=COLUMNS)


def shift_for(power: float, level: float, df: float) -> float:
    """Return the true coefficient, in standard errors, at which a two-sided t test has the power."""

    def gained(shift: float) -> float:
        if not np.isfinite(df) or df > 1e6:
            quantile = scipy.stats.norm.isf(level / 2.0)
            return (
                float(scipy.stats.norm.sf(quantile - shift) + scipy.stats.norm.cdf(-quantile - shift)) - power
            )
        quantile = scipy.stats.t.isf(level / 2.0, df)
        return (
            float(scipy.stats.nct.sf(quantile, df, shift) + scipy.stats.nct.cdf(-quantile, df, shift)) - power
        )

    high = 4.0
    while gained(high) < 0.0:
        high *= 2.0
        if high > 1e6:
            return np.inf
    return float(scipy.optimize.brentq(gained, 0.0, high, xtol=1e-10))


def noncentrality_for(power: float, level: float, df: int) -> float:
    """Return the noncentrality at which a chi-square test has the power."""
    quantile = float(scipy.stats.chi2.isf(level, df))

    def gained(value: float) -> float:
        return float(scipy.stats.ncx2.sf(quantile, df, value)) - power

    high = 8.0
    while gained(high) < 0.0:
        high *= 2.0
    return float(scipy.optimize.brentq(gained, 1e-12, high, xtol=1e-10))


def _unit_means(curve: Curve, fit: Fit, power: float, level: float, sd: FloatArray) -> list[list[object]]:
    df = curve.rank_between - curve.rank_constant
    if df < 1 or not np.isfinite(fit.ratio) or curve.df_within < 1:
        return []
    p = curve.rank
    weights = curve.sizes / (1.0 + curve.sizes * fit.ratio)
    means = curve.weighted_between(weights)[:p, :p]
    root = curve.gls_root(fit.ratio)
    to_white = np.linalg.inv(curve.to_beta[:, :p]) * np.sqrt(curve.unit)
    # what a contextual coefficient adds to the statistic: w'(B - B A^-1 B)w = |B^(1/2) w|^2 - |J'B w|^2
    needed = noncentrality_for(power, level, df)
    rows: list[list[object]] = []
    for at, term in enumerate(curve.names):
        if term == curve.moments.constant:
            continue
        w = to_white[:, at]
        whole = float(w @ means @ w)
        left = whole - float(((root.T @ (means @ w)) ** 2).sum())
        reference = f"chi-square {df}"
        if not left > 1e-10 * whole:
            note = (
                "a contextual effect of it cannot be told from its coefficient, or its unit means do not vary"
            )
            rows.append(["unit means", fit.route, term, reference, np.nan, np.nan, np.nan, note])
            continue
        error = float(np.sqrt(fit.idiosyncratic_variance / left))
        departure = error * float(np.sqrt(needed))
        note = "contextual coefficient of this covariate alone; ratio and variance taken as known"
        rows.append(["unit means", fit.route, term, reference, error, departure, departure * sd[at], note])
    return rows
