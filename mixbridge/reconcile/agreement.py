"""The ledger: every route beside the primary one, each gap classed by stated thresholds."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from mixbridge.errors import OptionError
from mixbridge.ratio import Curve
from mixbridge.routes import FITTED, REFERENCE_ROUTES, TRUNCATED, Fit

__all__ = ["CLASSES", "Interval", "Thresholds", "expected_identity", "ledger"]

CLASSES = ("identical", "immaterial", "visible", "conflicting")
"""Classes of a gap between the primary route and another random-effects route, mildest first."""

UNBIASED = ("swamy_arora", "wansbeek_kapteyn", "wallace_hussain", "fitting_constants")
LEDGER_COLUMNS = [
    "term",
    "route",
    "estimate",
    "standard_error",
    "lower",
    "upper",
    "gap",
    "gap_in_se",
    "verdict",
    "reason",
]


@dataclass(frozen=True, slots=True)
class Thresholds:
    """What counts as immaterial.

    Attributes
    ----------
    gap : float
        Largest immaterial gap, in standard errors of the primary route.
    width : float
        Largest immaterial relative difference of interval half-widths.
    rounding : float
        Gap, in standard errors, and relative difference of half-widths, that counts as none.
    """

    gap: float = 0.1
    width: float = 0.1
    rounding: float = 1e-9

    def __post_init__(self) -> None:
        """Refuse thresholds that are not positive numbers."""
        for name in ("gap", "width", "rounding"):
            value = getattr(self, name)
            if not (isinstance(value, (int, float)) and 0.0 < value < np.inf):
                raise OptionError(f"threshold {name}={value!r} is not allowed; allowed: a positive number.")

    def text(self) -> str:
        """Return the thresholds in words."""
        gap = f"gap below {self.gap:g} standard errors of the primary route"
        return f"{gap} and half-widths within {self.width:.0%}"


@dataclass(frozen=True, slots=True)
class Interval:
    """An estimate with its interval.

    Attributes
    ----------
    estimate, standard_error, lower, upper : float
        In the units of the coefficient.
    """

    estimate: float
    standard_error: float
    lower: float
    upper: float

    @property
    def against_zero(self) -> int:
        """Sign that the interval shows: 1, -1, or 0 where it holds zero."""
        return int(self.lower > 0.0) - int(self.upper < 0.0)

    @property
    def half_width(self) -> float:
        """Half the length of the interval."""
        return (self.upper - self.lower) / 2.0


def expected_identity(curve: Curve, a: Fit, b: Fit) -> str:
    """Name the identity that makes two routes agree on these data, or return an empty string.

    Conditions: balanced is one unit size; ``cl(X)``, the column space closed under unit averaging, is
    ``K_w + K_p = K``.

    Parameters
    ----------
    curve : Curve
    a, b : Fit
        Two routes fitted to the curve.

    Returns
    -------
    str
        For example ``identity 13: columns closed under unit averaging``.
    """
    if a.route == b.route:
        return ""
    balanced = len(curve.sizes) == 1
    closed = curve.rank_within + curve.rank_between == curve.rank
    away = a.status == b.status == FITTED and a.ratio > 0.0 and b.ratio > 0.0
    unbiased = [fit.route in UNBIASED for fit in (a, b)]
    minque = [fit.route.startswith("minque") for fit in (a, b)]
    either = [
        one or two or fit.route == "reml" for one, two, fit in zip(unbiased, minque, (a, b), strict=True)
    ]
    if balanced and closed and away and all(either):
        return "identity 12: balanced, columns closed under unit averaging"
    if closed and away and all(unbiased):
        return "identity 13: columns closed under unit averaging"
    if balanced and away and {a.route, b.route} == {"wallace_hussain", "minque_0"}:
        return "identity 14: balanced, the same two forms"
    if balanced and closed and away and {a.route, b.route} == {"amemiya", "ml"}:
        return "identity 12: balanced, columns closed under unit averaging, ML in closed form"
    return ""


def ledger(
    curve: Curve,
    fits: Mapping[str, Fit],
    intervals: Mapping[str, Mapping[str, Interval]],
    primary: str,
    thresholds: Thresholds,
) -> pd.DataFrame:
    """Set every route beside the primary one, term by term.

    Parameters
    ----------
    curve : Curve
    fits : mapping of str to Fit
        By route.
    intervals : mapping of str to mapping of str to Interval
        By route and term.
    primary : str
        The route that the analyst reports.
    thresholds : Thresholds

    Returns
    -------
    DataFrame
        One row per term and route: ``term, route, estimate, standard_error, lower, upper, gap, gap_in_se,
        verdict, reason``. The verdict is ``primary``, ``reference point``, ``not available``, or one of
        `CLASSES`.
    """
    rows: list[list[object]] = []
    for term in curve.names:
        base = intervals[primary][term]
        for key, fit in fits.items():
            here = intervals[key][term]
            pair = _Pair(term, fits[primary], fit, base, here)
            verdict, reason = _verdict(curve, pair, thresholds)
            values = [here.estimate, here.standard_error, here.lower, here.upper, pair.gap, pair.in_se]
            rows.append([term, key, *values, verdict, reason])
    return pd.DataFrame(rows, columns=LEDGER_COLUMNS)


@dataclass(frozen=True, slots=True)
class _Pair:
    """One term by the primary route and by another one."""

    term: str
    primary: Fit
    fit: Fit
    base: Interval
    here: Interval

    @property
    def gap(self) -> float:
        """Estimate minus the primary one."""
        return self.here.estimate - self.base.estimate

    @property
    def in_se(self) -> float:
        """The gap in standard errors of the primary route; NaN where it has none."""
        return self.gap / self.base.standard_error if self.base.standard_error > 0 else np.nan

    @property
    def wider(self) -> float:
        """Half-width relative to the primary one, minus one."""
        return self.here.half_width / self.base.half_width - 1.0


def _verdict(curve: Curve, pair: _Pair, thresholds: Thresholds) -> tuple[str, str]:
    """Return the verdict on one line of the ledger and its reason."""
    fit, primary, term = pair.fit, pair.primary, pair.term
    shown = "" if fit.status == FITTED else fit.status
    if fit.route == primary.route:
        return "primary", fit.not_estimable.get(term, shown)
    if not np.isfinite(pair.here.estimate):
        return "not available", fit.not_estimable.get(term, fit.status)
    if fit.route in REFERENCE_ROUTES:
        return "reference point", shown
    if not np.isfinite(pair.in_se):
        why = primary.not_estimable.get(term, primary.status)
        return "not available", f"no primary estimate to compare with: {why}"
    return _class(curve, pair, thresholds)


def _class(curve: Curve, pair: _Pair, thresholds: Thresholds) -> tuple[str, str]:
    """Return the class of a gap between two random-effects routes, and what makes it."""
    gap, width = abs(pair.in_se), abs(pair.wider)
    if gap <= thresholds.rounding and width <= thresholds.rounding:
        identity = expected_identity(curve, pair.primary, pair.fit)
        return "identical", identity or "equal to rounding, though no identity requires it"
    causes = [
        "" if gap < thresholds.gap else f"gap of {pair.in_se:+.2g} standard errors",
        "" if width < thresholds.width else f"half-width {pair.wider:+.0%}",
        pair.fit.status if pair.fit.status == TRUNCATED else "",
    ]
    reason = ", ".join(cause for cause in causes if cause)
    if gap < thresholds.gap and width < thresholds.width:
        return "immaterial", reason
    if pair.here.against_zero != pair.base.against_zero:
        signs = {1: "above zero", -1: "below zero", 0: "holding zero"}
        change = f"interval {signs[pair.here.against_zero]} instead of {signs[pair.base.against_zero]}"
        return "conflicting", f"{reason}; {change}" if reason else change
    return "visible", reason
