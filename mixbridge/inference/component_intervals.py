"""Intervals for the unit and idiosyncratic variances, their ratio and the ICC: each rule under its own name.

- ``exact_pivot`` (ratio, ICC): the F pivot inverted; exact under normality. See `pivot` for how an empty set
  is printed.
- ``exact_chi_square`` (idiosyncratic variance): ``RSS_w`` over chi-square quantiles with ``n - N - K_w``
  degrees of freedom; exact under normality.
- ``profile_likelihood`` (all four, `ml` and `reml`): see `profile_region`; large-sample.
- ``satterthwaite`` (both variances, quadratic routes): a variance v with estimated sampling variance s is
  taken as v chi2(d)/d with ``d = 2 v^2 / s`` (Satterthwaite 1946); an approximation, poor for a unit variance
  near zero.
- ``delta`` (all four, every route with components): estimate plus and minus a normal quantile times the
  standard error, which is plugged in and, for ratio and ICC, linearised. Symmetric, unaware of the bound at
  zero; shown because it is printed so often.

No rule here survives kurtosis: intervals for variances rest on normal effects and errors.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
import scipy

from mixbridge.errors import OptionError
from mixbridge.inference.pivot import no_pivot, pivot_of
from mixbridge.inference.profile_region import profile_region
from mixbridge.ratio import Curve
from mixbridge.routes import Fit
from mixbridge.routes.fitting import named_route
from mixbridge.routes.likelihood import Kind
from mixbridge.routes.quadratic import QUADRATIC

__all__ = ["QUANTITIES", "component_intervals"]

QUANTITIES = ("unit_variance", "idiosyncratic_variance", "ratio", "icc")
AT_ZERO = "reaches the boundary: zero is not excluded"
ON_BOUNDARY = "the estimate lies on the boundary, where the usual large-sample reference does not hold"


@dataclass(frozen=True, slots=True)
class _Row:
    quantity: str
    route: str
    method: str
    estimate: float
    lower: float
    upper: float
    exact: bool
    note: str


def component_intervals(curve: Curve, fits: Mapping[str, Fit], confidence: float = 0.95) -> pd.DataFrame:
    """Tabulate intervals for the components.

    Parameters
    ----------
    curve : Curve
    fits : mapping of str to Fit
        Fits of this panel by ledger key; those without components are passed over.
    confidence : float
        Between 0 and 1.

    Returns
    -------
    DataFrame
        Columns quantity, route (``any`` for the two exact rules, which depend on no route), method, estimate,
        lower, upper, exact, note. Ends that do not exist are NaN and the note says why.
    """
    if isinstance(confidence, bool) or not isinstance(confidence, (int, float)) or not 0.0 < confidence < 1.0:
        raise OptionError(
            f"confidence={confidence!r} is not allowed; allowed: a number between 0 and 1, such as 0.95."
        )
    rows = [*_exact(curve, confidence)]
    for key, fit in fits.items():
        route = named_route(key)[0]
        if route in QUADRATIC or route in ("ml", "reml"):
            rows += _of_fit(curve, route, key, fit, confidence)
    rows.sort(key=lambda row: QUANTITIES.index(row.quantity))
    return pd.DataFrame(
        [[getattr(row, name) for name in _Row.__slots__] for row in rows], columns=list(_Row.__slots__)
    )


def _exact(curve: Curve, confidence: float) -> Iterator[_Row]:
    why = no_pivot(curve)
    if why is None:
        pivot = pivot_of(curve)
        found = pivot.ratio_set(confidence)
        middle = pivot.solve(float(scipy.stats.f.median(pivot.df_between, pivot.df_within)))
        note = "estimate: where F(ratio) equals its median" + (f"; {found.note}" if found.note else "")
        ratios = np.array([middle, found.lower, found.upper])
        for quantity, values in (("ratio", ratios), ("icc", ratios / (1.0 + ratios))):
            yield _Row(
                quantity,
                "any",
                "exact_pivot",
                float(values[0]),
                float(values[1]),
                float(values[2]),
                True,
                note,
            )
    else:
        for quantity in ("ratio", "icc"):
            yield _Row(quantity, "any", "exact_pivot", np.nan, np.nan, np.nan, False, f"not computed: {why}")
    df, squares = curve.df_within, curve.within_residual * curve.unit
    if df < 1 or not squares > 0.0:
        why = f"n - N - K_w = {df}" if df < 1 else "the within regression fits exactly"
        row = (np.nan, np.nan, np.nan, False, f"not computed: {why}")
    else:
        tail = 0.5 * (1.0 - confidence)
        row = (
            squares / df,
            squares / scipy.stats.chi2.isf(tail, df),
            squares / scipy.stats.chi2.ppf(tail, df),
            True,
            f"df {df}",
        )
    yield _Row("idiosyncratic_variance", "any", "exact_chi_square", *row)


def _of_fit(curve: Curve, route: str, key: str, fit: Fit, confidence: float) -> Iterator[_Row]:
    estimates = (fit.unit_variance, fit.idiosyncratic_variance, fit.ratio, fit.icc)
    if not np.isfinite(fit.ratio):
        for quantity, estimate in zip(QUANTITIES, estimates, strict=True):
            yield _Row(quantity, key, "delta", estimate, np.nan, np.nan, False, f"not computed: {fit.status}")
        return
    if route in QUADRATIC:
        yield from _satterthwaite(curve, key, fit, confidence)
    elif fit.rows != curve.n:
        for quantity, estimate in zip(QUANTITIES, estimates, strict=True):
            note = "not computed: the fit leaves out one-row units that the panel has"
            yield _Row(quantity, key, "profile_likelihood", estimate, np.nan, np.nan, False, note)
    else:
        yield from _profile(curve, "ml" if route == "ml" else "reml", key, fit, confidence)
    yield from _delta(key, fit, confidence)


def _profile(curve: Curve, kind: Kind, key: str, fit: Fit, confidence: float) -> Iterator[_Row]:
    assert fit.certificate is not None  # every fitted likelihood route has one
    region = profile_region(curve, kind, fit.certificate, confidence)
    low, high = region.ratio
    notes = []
    if fit.ratio == 0.0:
        notes.append(ON_BOUNDARY)
    if len(region.pieces) > 1:
        parts = " and ".join(f"[{a:.4g}, {b:.4g}]" for a, b in region.pieces)
        notes.append(f"the likelihood has a dip: the set of ratios is {parts}, its hull is shown")
    if fit.certificate.unresolved:
        notes.append("some stationary points of the likelihood could not be separated")
    if low == 0.0:
        notes.append(AT_ZERO)
    note = "; ".join(notes)
    inside = "; ".join(text for text in notes if text != AT_ZERO)
    turned = (low / (1.0 + low), high / (1.0 + high))
    ends = (region.unit, region.idiosyncratic, region.ratio, turned)
    estimates = (fit.unit_variance, fit.idiosyncratic_variance, fit.ratio, fit.icc)
    for quantity, estimate, (a, b) in zip(QUANTITIES, estimates, ends, strict=True):
        text = inside if quantity == "idiosyncratic_variance" else note
        yield _Row(quantity, key, "profile_likelihood", estimate, a, b, False, text)


def _satterthwaite(curve: Curve, key: str, fit: Fit, confidence: float) -> Iterator[_Row]:
    tail = 0.5 * (1.0 - confidence)
    variances = np.diag(fit.components_covariance)
    for quantity, value, variance in zip(
        QUANTITIES[:2], (fit.unit_variance_raw, fit.idiosyncratic_variance), variances, strict=True
    ):
        if not value > 0.0 or not variance > 0.0:
            note = (
                f"not computed: the estimate {value:.6g} is not positive, and a multiple of a chi-square is"
            )
            yield _Row(quantity, key, "satterthwaite", value, np.nan, np.nan, False, note)
            continue
        df = 2.0 * value**2 / float(variance)
        with np.errstate(over="ignore", divide="ignore"):
            lower, upper = (
                df * value / scipy.stats.chi2.isf(tail, df),
                df * value / scipy.stats.chi2.ppf(tail, df),
            )
        exact = quantity == "idiosyncratic_variance" and _is_within(curve, fit, value, df)
        note = f"df {df:.4g}" + ("; the same as exact_chi_square" if exact else "")
        yield _Row(quantity, key, "satterthwaite", value, float(lower), float(upper), exact, note)


def _is_within(curve: Curve, fit: Fit, value: float, df: float) -> bool:
    """Tell whether a variance is ``RSS_w`` over its degrees of freedom: then nothing is approximate."""
    own = curve.within_residual * curve.unit
    same = abs(value * curve.df_within - own) < 1e-9 * own and abs(df - curve.df_within) < 1e-6 * df
    return bool(fit.rows == curve.n and same)


def _delta(key: str, fit: Fit, confidence: float) -> Iterator[_Row]:
    z = float(scipy.stats.norm.isf(0.5 * (1.0 - confidence)))
    errors = fit.component_standard_errors
    estimates = (fit.unit_variance_raw, fit.idiosyncratic_variance, fit.ratio, fit.icc)
    for quantity, estimate in zip(QUANTITIES, estimates, strict=True):
        error = float(errors[quantity])
        lower, upper = estimate - z * error, estimate + z * error
        notes = ["normal, symmetric"]
        if quantity != "idiosyncratic_variance":
            if fit.ratio == 0.0:
                notes.append(ON_BOUNDARY)
            if lower <= 0.0:
                notes.append("not cut at zero")
            if quantity == "icc" and upper > 1.0:
                notes.append("not cut at one")
        yield _Row(quantity, key, "delta", float(estimate), lower, upper, False, "; ".join(notes))
