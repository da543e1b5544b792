"""The path: one coefficient, its standard error and both deviances at every ratio from pooled to within.

What the table shows at each ratio is what an analyst would have reported with that ratio: the coefficient, its
standard error with the scale ``r(psi)/(n - K)``, an interval with one stated quantile, and how much worse the ratio
is than the best one in ML and REML deviance (``-2`` log-likelihood). Around it: the exact confidence set of the
ratio (`inference.pivot`), every route's place, the range that the coefficient can take whatever the ratio is, the
range within the set that the data allow, and where the interval's answer about zero changes.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
import scipy
from numpy.typing import NDArray

from mixbridge.display import Printed
from mixbridge.errors import OptionError
from mixbridge.inference.pivot import RatioSet, no_pivot, pivot_of
from mixbridge.ratio import Curve
from mixbridge.reconcile.attribution_chains import median_size, weight_at
from mixbridge.reconcile.path_points import Along, along, extrema, search_grid
from mixbridge.reconcile.path_text import path_sentences
from mixbridge.routes import Fit, Profile, fit_route
from mixbridge.routes.likelihood import Kind

__all__ = ["Path", "changes_of_answer", "coefficient_path", "range_inside"]

FloatArray = NDArray[np.float64]
SIGNS = {1: "above zero", -1: "below zero", 0: "holding zero"}


@dataclass(frozen=True, slots=True, eq=False)
class Path(Printed):
    """One coefficient along the curve.

    Attributes
    ----------
    term : str
    size : float
        Median unit size, at which ``weight`` (lambda) is shown.
    quantile, confidence : float
        Half-width of the intervals in standard errors, and the level of the exact set.
    psi, coefficient, standard_error, ml_deviance, reml_deviance : ndarray of shape (M,)
        Along the path; deviances above their minimum, NaN where the likelihood has no maximum.
    places : tuple of (str, float)
        Routes with their ratios.
    turns : tuple of float
        Ratios of the interior extrema.
    allowed : RatioSet or None
        Exact confidence set of the ratio; None where there is none.
    why_none : str
        Why there is none.
    range_all, range_allowed : (float, float)
        Lowest and highest coefficient over all ratios, and over the exact set.
    changes : tuple of (float, int, int)
        Ratios at which the interval's answer about zero changes: ratio, sign below it, sign above it.
    searched : int
        Number of ratios on which extrema and changes were looked for.
    """

    term: str
    size: float
    quantile: float
    confidence: float
    psi: FloatArray
    coefficient: FloatArray
    standard_error: FloatArray
    ml_deviance: FloatArray
    reml_deviance: FloatArray
    places: tuple[tuple[str, float], ...]
    turns: tuple[float, ...]
    allowed: RatioSet | None
    why_none: str
    range_all: tuple[float, float]
    range_allowed: tuple[float, float]
    changes: tuple[tuple[float, int, int], ...]
    searched: int

    def __post_init__(self) -> None:
        """Make the arrays read-only."""
        for name in ("psi", "coefficient", "standard_error", "ml_deviance", "reml_deviance"):
            getattr(self, name).setflags(write=False)

    @property
    def table(self) -> pd.DataFrame:
        """One row per ratio.

        Columns ``ratio, weight, coefficient, standard_error, lower, upper, against_zero, ml_deviance, reml_deviance,
        allowed`` (in the exact set), ``marks`` (routes, ends of the set, extrema, changes of the answer about zero).
        """
        half = self.quantile * self.standard_error
        low, high = self.coefficient - half, self.coefficient + half
        marks = self._marks()
        return pd.DataFrame(
            {
                "ratio": self.psi,
                "weight": [weight_at(value, self.size) for value in self.psi],
                "coefficient": self.coefficient,
                "standard_error": self.standard_error,
                "lower": low,
                "upper": high,
                "against_zero": (low > 0.0).astype(int) - (high < 0.0).astype(int),
                "ml_deviance": self.ml_deviance,
                "reml_deviance": self.reml_deviance,
                "allowed": [self._inside(value) for value in self.psi],
                "marks": [", ".join(marks.get(float(value), ())) for value in self.psi],
            }
        )

    @property
    def routes(self) -> pd.DataFrame:
        """Rows of the table at which a route lies, one per route."""
        table = self.table.drop(columns="marks").set_index("ratio")
        rows = table.loc[[ratio for _, ratio in self.places]].reset_index()
        rows.insert(0, "route", [route for route, _ in self.places])
        return rows

    @property
    def sentences(self) -> tuple[str, ...]:
        """The path in plain words, every number from the tables."""
        return path_sentences(
            self.term,
            size=self.size,
            quantile=self.quantile,
            confidence=self.confidence,
            ranges=(self.range_all, self.range_allowed),
            turns=self.turns,
            allowed=self.allowed,
            why_none=self.why_none,
            changes=self.changes,
            searched=self.searched,
        )

    def __str__(self) -> str:
        """Return the sentences, one per line."""
        return "\n".join(self.sentences)

    def _inside(self, psi: float) -> bool | None:
        if self.allowed is None:
            return None
        return bool(self.allowed.lower <= psi <= self.allowed.upper)

    def _marks(self) -> dict[float, list[str]]:
        found: dict[float, list[str]] = {}
        for route, ratio in self.places:
            found.setdefault(ratio, []).append(route)
        for ratio in self.turns:
            found.setdefault(ratio, []).append("extremum")
        if self.allowed is not None and not self.allowed.empty:
            found.setdefault(self.allowed.lower, []).append("lower end of the exact set")
            found.setdefault(self.allowed.upper, []).append("upper end of the exact set")
        for ratio, below, above in self.changes:
            found.setdefault(ratio, []).append(f"interval from {SIGNS[below]} to {SIGNS[above]}")
        return found


def coefficient_path(
    curve: Curve,
    fits: Mapping[str, Fit],
    term: str,
    *,
    points: int = 101,
    confidence: float = 0.95,
    quantile: float | None = None,
) -> Path:
    """Follow one coefficient from pooled to within.

    Parameters
    ----------
    curve : Curve
    fits : mapping of str to Fit
        Routes shown on the path; those off the curve, or on other rows, are left out.
    term : str
    points : int
        Ratios shown, even in lambda at the median size; routes and marks are added to them.
    confidence : float
        Level of the exact set, and of the intervals unless `quantile` is given.
    quantile : float, optional
        Half-width of the intervals in standard errors; that of the normal distribution unless given.

    Returns
    -------
    Path

    Raises
    ------
    OptionError
        If there is no such term, or a number is out of range.
    """
    if term not in curve.names:
        raise OptionError.not_among("term", term, curve.names)
    if not (isinstance(points, int) and points >= 2):
        raise OptionError(f"points={points!r} is not allowed; allowed: a whole number of 2 or more.")
    if not 0.0 < confidence < 1.0:
        raise OptionError(f"confidence={confidence!r} is not allowed; allowed: a number between 0 and 1.")
    at, size = curve.names.index(term), median_size(curve)
    width = float(scipy.stats.norm.isf(0.5 * (1.0 - confidence))) if quantile is None else float(quantile)
    seen = along(curve, search_grid(curve, 2 * points))
    turns = extrema(curve, seen, at)
    changes = changes_of_answer(curve, seen, at, width)
    why = no_pivot(curve)
    allowed = None if why is not None else pivot_of(curve).ratio_set(confidence)
    places = tuple(
        (key, fit.ratio) for key, fit in fits.items() if fit.rows == curve.n and not np.isnan(fit.ratio)
    )
    weights = np.linspace(0.0, 1.0, points)[:-1]
    marked = [*turns, *(ratio for ratio, _, _ in changes), *(ratio for _, ratio in places)]
    if allowed is not None and not allowed.empty:
        marked += [allowed.lower, allowed.upper]
    psi = np.unique([*(((1.0 - weights) ** -2 - 1.0) / size), *marked, np.inf])
    shown = along(curve, psi)
    values = np.concatenate(
        [seen.beta[[0, -1], at], along(curve, np.array(turns)).beta[:, at] if turns else []]
    )
    return Path(
        term=term,
        size=size,
        quantile=width,
        confidence=confidence,
        psi=psi,
        coefficient=shown.beta[:, at].copy(),
        standard_error=shown.error[:, at].copy(),
        ml_deviance=_deviance(curve, fits, "ml", psi),
        reml_deviance=_deviance(curve, fits, "reml", psi),
        places=places,
        turns=tuple(turns),
        allowed=allowed,
        why_none=why or "",
        range_all=(float(values.min()), float(values.max())),
        range_allowed=range_inside(curve, allowed, turns, at),
        changes=tuple(changes),
        searched=len(seen.psi),
    )


def range_inside(curve: Curve, allowed: RatioSet | None, turns: list[float], at: int) -> tuple[float, float]:
    """Return the lowest and highest coefficient over the exact set, NaN where there is none."""
    if allowed is None or allowed.empty:
        return np.nan, np.nan
    inside = [psi for psi in turns if allowed.lower < psi < allowed.upper]
    values = along(curve, np.array([allowed.lower, allowed.upper, *inside])).beta[:, at]
    return float(values.min()), float(values.max())


def _deviance(curve: Curve, fits: Mapping[str, Fit], kind: Kind, psi: FloatArray) -> FloatArray:
    """Return the profile deviance above its minimum; infinite at an infinite ratio, NaN without a maximum."""
    fit = fits.get(kind)
    if fit is None or fit.rows != curve.n:
        fit = fit_route(curve, kind, {}, "not asked for")
    if fit.certificate is None:
        return np.full(len(psi), np.nan)
    finite = np.isfinite(psi)
    values = np.full(len(psi), np.inf)
    deviance = Profile(curve, kind).values(np.append(psi[finite], fit.certificate.psi)).deviance
    values[finite] = np.maximum(deviance[:-1] - deviance[-1], 0.0)
    return values


def changes_of_answer(curve: Curve, seen: Along, at: int, quantile: float) -> list[tuple[float, int, int]]:
    """Return where an end of the interval crosses zero: ratio, sign below it, sign above it."""

    def sign(psi: float) -> int:
        one = along(curve, np.array([psi]))
        return int(_signs(one, at, quantile)[0])

    def end(psi: float, side: int) -> float:
        one = along(curve, np.array([psi]))
        return float(one.beta[0, at] - side * quantile * one.error[0, at])

    signs = _signs(seen, at, quantile)
    found: list[tuple[float, int, int]] = []
    for i in np.flatnonzero(signs[1:] != signs[:-1]):
        a, b = float(seen.psi[i]), float(seen.psi[i + 1])
        before, after = int(signs[i]), int(signs[i + 1])
        sides = [
            side for side in (before, after) if side != 0
        ]  # from +1 to -1 both ends cross, one after the other
        if np.isinf(b):
            b = 2.0 * a + 1.0
            while sign(b) != after and b < 1e12 * (a + 1.0):
                b *= 16.0
            if sign(b) != after:
                continue
        crossings = [
            float(scipy.optimize.brentq(end, a, b, args=(side,), xtol=1e-16 * b, rtol=1e-13))
            for side in sides
            if end(a, side) * end(b, side) < 0.0
        ]
        knots = sorted(crossings)
        states = [before, *([0] if len(knots) == 2 else []), after]
        found += [(psi, states[k], states[k + 1]) for k, psi in enumerate(knots)]
    return found


def _signs(seen: Along, at: int, quantile: float) -> NDArray[np.int_]:
    with np.errstate(invalid="ignore"):
        half = quantile * seen.error[:, at]
    low, high = seen.beta[:, at] - half, seen.beta[:, at] + half
    return np.asarray((low > 0.0).astype(int) - (high < 0.0).astype(int))
