"""The ratio of two interval half-widths as a product of exact factors.

The half-width of term j is, for every route,

    sqrt(C_jj(psi)) * sqrt(scale) * (robust / model se) * (adjusted / unadjusted se) * quantile

with ``C(psi) = (X'V_0^-1 X)^-1``. Taking logarithms of the quotient of two routes,

    log(half-width a / half-width b) = ratio + scale + covariance type + small-sample adjustment + reference

Each factor but the third is a property of each route alone, so no order of changes matters for it. Where the two
routes use different kinds of covariance, the kind can be changed first (at the ratio of b) or last (at the ratio
of a): a robust covariance depends on the ratio in its own way, and on the scale not at all. Both orders are taken
where the standard errors they need are given; the factor is their average, with its range. Two routes with the
same robust covariance differ through the ratio only.

The small-sample factor compares the standard error of the interval with that of the fit (Kenward & Roger 1997
adjust it); the reference factor compares quantiles, whose degrees of freedom may depend on the ratio.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.reconcile.agreement import Interval
from mixbridge.routes import Fit

__all__ = ["FACTORS", "WidthFactor", "width_factors"]

FloatArray = NDArray[np.float64]
StandardErrors = Callable[[Fit, str], FloatArray]

FACTORS = ("ratio", "scale", "covariance type", "small-sample adjustment", "reference")
"""The factors, in this order."""


@dataclass(frozen=True, slots=True)
class WidthFactor:
    """One factor of a quotient of half-widths.

    Attributes
    ----------
    name : str
        One of `FACTORS`.
    log : float
        Natural logarithm of the factor, averaged over the orders of changes.
    lowest, highest : float
        Its range over these orders.
    a, b : str
        What each route uses.
    """

    name: str
    log: float
    lowest: float
    highest: float
    a: str
    b: str


def width_factors(
    a: Fit, b: Fit, term: str, intervals: tuple[Interval, Interval], errors: StandardErrors | None = None
) -> tuple[WidthFactor, ...]:
    """Split ``log(half-width a / half-width b)`` of one term.

    Parameters
    ----------
    a, b : Fit
        Two routes that estimate the term.
    term : str
    intervals : (Interval, Interval)
        Of the term, by a and by b, at one level.
    errors : callable, optional
        Returns the standard errors of a fit under another kind of covariance (``model``, ``CR1``, ...), so that both
        orders can be taken where the two kinds differ.

    Returns
    -------
    tuple of WidthFactor
        One per name in `FACTORS`; they add up to the logarithm. Empty where a half-width is not positive.
    """
    here, there = intervals
    if not (here.half_width > 0.0 and there.half_width > 0.0):
        return ()
    at = a.terms.index(term)
    sides = _Side(a, at), _Side(b, at)
    orders = _orders(*sides, errors)
    values = np.array([*orders]).T
    quantiles = [one.half_width / one.standard_error for one in intervals]
    raised = [one.standard_error / side.own for one, side in zip(intervals, sides, strict=True)]
    shown = [
        (f"{a.ratio:.6g}", f"{b.ratio:.6g}"),
        (f"{a.scale:.6g}", f"{b.scale:.6g}"),
        (_kind(a), _kind(b)),
        (f"{raised[0]:.6g}", f"{raised[1]:.6g}"),
        (f"{quantiles[0]:.6g}", f"{quantiles[1]:.6g}"),
    ]
    logs = [*values, np.log([raised[0] / raised[1]]), np.log([quantiles[0] / quantiles[1]])]
    return tuple(
        WidthFactor(name, float(value.mean()), float(value.min()), float(value.max()), *text)
        for name, value, text in zip(FACTORS, logs, shown, strict=True)
    )


def _kind(fit: Fit) -> str:
    return "model" if fit.robust is None else str(fit.conventions.get("covariance", "model"))


@dataclass(frozen=True, slots=True)
class _Side:
    """One route and the place of the term in it."""

    fit: Fit
    at: int

    @property
    def unscaled(self) -> float:
        """Root of ``C_jj``."""
        return float(np.sqrt((self.fit.root[self.at] ** 2).sum()))

    @property
    def model(self) -> float:
        return self.unscaled * float(np.sqrt(self.fit.scale))

    @property
    def own(self) -> float:
        robust = self.fit.robust
        return self.model if robust is None else float(np.sqrt(robust[self.at, self.at]))

    def error(self, kind: str, errors: StandardErrors | None) -> float:
        """Return the standard error under a kind of covariance; NaN where it is not at hand."""
        if kind == "model":
            return self.model
        if kind == _kind(self.fit):
            return self.own
        return np.nan if errors is None else float(errors(self.fit, kind)[self.at])


def _orders(a: _Side, b: _Side, errors: StandardErrors | None) -> list[tuple[float, float, float]]:
    """Return (ratio, scale, covariance type) for each order of changing ratio and kind of covariance."""
    kinds = _kind(a.fit), _kind(b.fit)
    found = []
    for kind in dict.fromkeys(kinds):  # under this kind the ratio is changed
        start, end = b.error(kind, errors), a.error(kind, errors)
        # one of the two is the route's own: the change of kind happens at the other route
        change = float(np.log(start / b.own) + np.log(a.own / end))
        if kind == "model":
            ratio, scale = np.log(a.unscaled / b.unscaled), 0.5 * np.log(a.fit.scale / b.fit.scale)
        else:
            ratio, scale = np.log(end / start), 0.0
        if np.isfinite([ratio, scale, change]).all():
            found.append((float(ratio), float(scale), change))
    if found:
        return found
    # two robust kinds, neither known at the other route: by way of the model's covariance
    ratio, scale = np.log(a.unscaled / b.unscaled), 0.5 * np.log(a.fit.scale / b.fit.scale)
    return [(float(ratio), float(scale), float(np.log(a.own / a.model) - np.log(b.own / b.model)))]
