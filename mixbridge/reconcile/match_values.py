"""Elementary quantities of one printout: everything a figure can mean, computed from one fit."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import DataError, IdentificationError
from mixbridge.inference.contrasts import contrasts
from mixbridge.inference.likelihood_ratio import observed_ratio
from mixbridge.inference.pivot import no_pivot, pivot_of
from mixbridge.inference.variance_tests import multiplier_of
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import Curve
from mixbridge.routes import Fit, fit_route, log_likelihood

__all__ = ["Fitted", "Printout", "Side", "weight_summary"]

FloatArray = NDArray[np.float64]
SAME = 1e-9
"""Relative difference below which two fits count as one. Fits whose equality is a theorem differ by rounding times
condition, commonly below 1e-12; printed figures rarely have more than eight digits."""


COMPONENTS: Mapping[str, Callable[[Fit], float]] = {
    "unit_variance": lambda fit: fit.unit_variance,
    "unit_sd": lambda fit: _root(fit.unit_variance),
    "idiosyncratic_variance": lambda fit: fit.idiosyncratic_variance,
    "idiosyncratic_sd": lambda fit: _root(fit.idiosyncratic_variance),
    "icc": lambda fit: fit.icc,
    "ratio": lambda fit: fit.ratio,
}


@dataclass(frozen=True, eq=False)
class Side:
    """A panel with its one-row units kept or dropped, and the statistics that no route changes.

    Attributes
    ----------
    one_row_units : str
        ``kept`` or ``dropped``.
    curve : Curve
    products : UnitProducts or None
        For cluster-robust contrasts; None where these are not searched.
    """

    one_row_units: str
    curve: Curve
    products: UnitProducts | None = None

    @cached_property
    def _multiplier(self) -> tuple[float, float, float]:
        found = multiplier_of(self.curve)
        return found.two_sided, found.one_sided, found.standardised

    def statistic(self, key: str) -> float:
        """Return a test statistic for no unit variance; NaN where there is none."""
        if key.startswith("lagrange_multiplier"):
            place = {"lagrange_multiplier": 0, "lagrange_multiplier_one_sided": 1}.get(key, 2)
            return self._multiplier[place]
        return self._others[key]

    @cached_property
    def _others(self) -> dict[str, float]:
        f = np.nan if no_pivot(self.curve) is not None else pivot_of(self.curve).statistic(0.0)
        found = {"f_unit_intercepts": f}
        for name, kind in (("likelihood_ratio", "ml"), ("restricted_likelihood_ratio", "reml")):
            fit = fit_route(self.curve, kind, {}, "not asked for here")
            known = np.isfinite(fit.ratio)
            found[name] = (
                observed_ratio(self.curve, "ml" if kind == "ml" else "reml", fit.ratio) if known else np.nan
            )
        return found


@dataclass(frozen=True, eq=False)
class Fitted:
    """One fit of the search.

    Attributes
    ----------
    side : Side
    route : str
    conventions : mapping
        Conventions of estimation that differ from the defaults.
    fit : Fit
    same : tuple of str
        Conventions of the same route that give the same fit on these data.
    """

    side: Side
    route: str
    conventions: Mapping[str, object]
    fit: Fit
    same: tuple[str, ...] = ()

    @cached_property
    def residual(self) -> float:
        """Residual sum of squares of the quasi-demeaned regression; NaN off the curve."""
        if not np.isfinite(self.fit.ratio):
            return np.nan
        return self.side.curve.at(self.fit.ratio).residual

    @cached_property
    def root_lengths(self) -> FloatArray:
        """Standard errors over the square root of the scale."""
        lengths = np.sqrt((self.fit.root**2).sum(axis=1))
        return np.where(np.isfinite(self.fit.beta), lengths, np.nan)

    def equals(self, other: Fitted) -> bool:
        """Tell whether two fits agree to rounding in coefficients, components, scale and degrees of freedom."""
        a, b = self.fit, other.fit
        left = [a.unit_variance_raw, a.idiosyncratic_variance, a.ratio, a.scale, a.log_likelihood]
        right = [b.unit_variance_raw, b.idiosyncratic_variance, b.ratio, b.scale, b.log_likelihood]
        if (a.rows, a.units) != (b.rows, b.units):
            return False
        size = np.nanmax(np.abs([a.idiosyncratic_variance, a.scale, 0.0]))
        numbers = np.isclose(left, right, rtol=SAME, atol=0.0, equal_nan=True)
        numbers[0] |= abs(left[0] - right[0]) <= SAME * size
        slack = SAME * np.nan_to_num(self.root_lengths * np.sqrt(max(np.nan_to_num(a.scale), 0.0)))
        both_lost = ~np.isfinite(a.beta) & ~np.isfinite(b.beta)
        with np.errstate(invalid="ignore"):
            coefficients = both_lost | (np.abs(a.beta - b.beta) <= slack + SAME * np.abs(a.beta))
        return bool(numbers.all() and coefficients.all())

    @cached_property
    def likelihoods(self) -> dict[str, float]:
        """Log-likelihood by REML constant: of the route where it is one, else of least squares as a normal model."""
        curve, fit = self.side.curve, self.fit
        if fit.route == "reml" and np.isfinite(fit.ratio):
            return {
                name: log_likelihood(curve, "reml", fit.ratio, name == "included")
                for name in ("included", "omitted")
            }
        if fit.route == "ml" and np.isfinite(fit.ratio):
            return {"included": fit.log_likelihood}
        if fit.route == "pooled":
            return {"included": log_likelihood(curve, "ml", 0.0)}
        if fit.route == "within" and curve.within_residual > 0.0:
            n = curve.n
            value = -0.5 * n * (np.log(2.0 * np.pi * curve.within_residual * curve.unit / n) + 1.0)
            return {"included": float(value)}
        return {"included": np.nan}

    @cached_property
    def contrasts(self) -> dict[str, float]:
        """Contrast statistics by their names among the quantities."""
        if not (self.fit.estimated and np.isfinite(self.fit.ratio) and self.fit.idiosyncratic_variance > 0.0):
            return {}
        try:
            every = contrasts(self.side.curve, self.fit, self.side.products)
        except (DataError, IdentificationError):
            return {}
        found: dict[str, float] = {}
        for item in every:
            if item.variance.startswith("cluster-robust"):
                found["unit means, cluster-robust"] = item.statistic
            elif item.name in ("within - gls", "unit means"):
                found[f"{item.name}, {item.variance}"] = item.statistic
            else:
                found[f"{item.name}, {item.variance}, between weights {item.weights}"] = item.statistic
        return found


@dataclass(frozen=True, eq=False)
class Printout:
    """One fit with one way of presenting it: all figures follow.

    Attributes
    ----------
    fitted : Fitted
    presentation : mapping of str to str
        Conventions of presentation that differ from the defaults.
    errors : ndarray of shape (p,)
        Standard errors.
    """

    fitted: Fitted
    presentation: Mapping[str, str]
    errors: FloatArray

    @property
    def conventions(self) -> dict[str, object]:
        """All conventions that differ from the defaults."""
        return {**self.fitted.conventions, **self.presentation}

    @property
    def log_likelihood(self) -> float:
        """With or without the REML constant, as presented."""
        return self.fitted.likelihoods.get(self.presentation.get("reml_constant", "included"), np.nan)

    def value(self, key: str, negative: bool = False) -> float:
        """Return an elementary quantity; NaN where this route has none.

        Parameters
        ----------
        key : str
            As in the readings of `printed_quantities`.
        negative : bool
            Whether the figure was printed with a minus: then a unit variance is the one before truncation.
        """
        fit = self.fitted.fit
        kind, _, rest = key.partition(":")
        if kind in ("b", "se", "t"):
            at = fit.terms.index(rest)
            number = {"b": fit.beta[at], "se": self.errors[at]}.get(kind)
            return float(fit.beta[at] / self.errors[at] if number is None else number)
        if kind == "contrast":
            return self.fitted.contrasts.get(rest, np.nan)
        if kind.endswith(("quasi_demeaning", "shrinkage")):
            return weight_summary(self.fitted.side.curve, fit.ratio, kind, rest)
        if kind in COMPONENTS:
            return fit.unit_variance_raw if negative and kind == "unit_variance" else COMPONENTS[kind](fit)
        if kind in ("aic", "bic") or kind.endswith("log_likelihood"):
            return self._criterion(kind, rest)
        return self.fitted.side.statistic(key)

    def _criterion(self, kind: str, rest: str) -> float:
        if kind == "log_likelihood":
            return self.log_likelihood
        if kind == "minus_2_log_likelihood":
            return -2.0 * self.log_likelihood
        fit, curve = self.fitted.fit, self.fitted.side.curve
        count, _, by = rest.partition(":")
        within = fit.route == "within"
        coefficients = curve.rank_within + curve.units if within else curve.rank
        variances = 1 if fit.route in ("pooled", "within") else 2
        parameters = {
            "coefficients and variances": coefficients + variances,
            "coefficients": coefficients,
            "variances": variances,
        }[count]
        price = 2.0 if kind == "aic" else np.log(curve.n if by == "log n" else curve.units)
        return float(-2.0 * self.log_likelihood + price * parameters)


def weight_summary(curve: Curve, ratio: float, kind: str, summary: str) -> float:
    """Summarise λ or s over unit sizes at one ratio.

    Parameters
    ----------
    curve : Curve
        Gives sizes and their counts.
    ratio : float
    kind : str
        ``quasi_demeaning`` or ``shrinkage``, or ``one minus`` either.
    summary : str
        ``min``, ``max``, ``median over units``, ``median over rows``, ``mean over units``, ``at the mean size``,
        ``at the harmonic mean size``.

    Returns
    -------
    float
        NaN where the ratio is.
    """
    sizes, counts = curve.sizes, curve.counts
    if summary == "at the mean size":
        sizes, counts = np.array([curve.n / curve.units]), np.ones(1)
    elif summary == "at the harmonic mean size":
        sizes, counts = np.array([curve.units / float(counts @ (1.0 / sizes))]), np.ones(1)
    if np.isposinf(ratio):
        weights = np.ones_like(sizes)
    elif kind.endswith("quasi_demeaning"):
        weights = 1.0 - 1.0 / np.sqrt(1.0 + sizes * ratio)
    else:
        weights = sizes * ratio / (1.0 + sizes * ratio)
    if kind.startswith("one minus"):
        weights = 1.0 - weights
    if summary == "max":
        return float(weights.max())
    if summary == "mean over units":
        return float(weights @ counts / counts.sum())
    if summary.startswith("median"):
        return _median(weights, counts * (sizes if summary.endswith("rows") else 1.0))
    return float(weights.min())


def _median(values: FloatArray, counts: FloatArray) -> float:
    """Return the median of values repeated so often: the mean of the two in the middle."""
    order = np.argsort(values)
    reached = np.cumsum(counts[order])
    half = reached[-1] / 2.0
    low = int(np.searchsorted(reached, half, side="left"))
    high = int(np.searchsorted(reached, half, side="right"))
    return float((values[order[low]] + values[order[min(high, values.size - 1)]]) / 2.0)


def _root(variance: float) -> float:
    return math.sqrt(variance) if variance >= 0.0 else math.nan
