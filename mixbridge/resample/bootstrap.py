"""The parametric bootstrap in moment space: one record of replicates and the questions it answers.

The model drawn from is a fitted one, with normal errors and unit effects unrelated to the covariates: what the
bootstrap says holds under these assumptions, which it cannot test. `first_difference` is left out, since the order of
rows is not in the moments. Standard errors are model-based throughout, whatever covariance a fit asks for.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.display import Printed
from mixbridge.display.text import frame_lines, wrapped
from mixbridge.errors import IdentificationError, OptionError
from mixbridge.ratio import Curve
from mixbridge.resample.gaps import GapNoise, class_shares, column_of, fit_of, gap_noise
from mixbridge.resample.moment_draws import Truth, truth_of
from mixbridge.resample.replicates import Progress, Replicates, replicate
from mixbridge.resample.simulated import check_confidence, quantiles
from mixbridge.routes import Fit

__all__ = ["Bootstrap", "bootstrap"]

FloatArray = NDArray[np.float64]
Method = Literal["percentile", "t"]

SUMMARY = ["truth", "mean", "bias", "bias_error", "standard_error", "rmse", "replicates"]


@dataclass(frozen=True, slots=True, eq=False)
class Bootstrap(Printed):
    """Replicates of a panel under one of its fits, with every route refitted.

    Attributes
    ----------
    replicates : Replicates
        Draws and estimates, by route: ``bootstrap.replicates.routes["reml"].ratio``.
    under : str
        The route whose fit was drawn from.
    confidence : float
        Level of intervals.
    """

    replicates: Replicates
    under: str
    confidence: float

    @property
    def left_out(self) -> Mapping[str, str]:
        """Routes that are not refitted, with the reason."""
        return self.replicates.left_out

    def __str__(self) -> str:
        """Return how coefficients and components of one route vary, and what that takes for granted."""
        drawn = self.replicates
        key = self.under if self.under in drawn.routes else next(iter(drawn.routes))
        shown = {
            "truth": "truth",
            "mean": "mean",
            "bias": "bias",
            "bias_error": "its error",
            "standard_error": "standard error",
            "model_standard_error": "that of the model",
        }
        lines = [
            f"Bootstrap in moment space, drawn under {self.under}: {drawn.count} replicates, seed {drawn.seed}; {key}"
        ]
        for table, name in ((self.coefficients(), "term"), (self.components(), "quantity")):
            lines += frame_lines(table.loc[table["route"] == key, [name, *shown]].rename(columns=shown))
        counts = ", ".join(f"{count} {status}" for status, count in drawn.statuses(key).items() if count)
        others = ", ".join(route for route in drawn.routes if route != key)
        texts = [
            f"Replicates of {key}: {counts}. Routes besides: {others or 'none'}.",
            *(f"{route} is left out: {reason}." for route, reason in self.left_out.items()),
            "Normal errors and unit effects unrelated to the covariates are taken for granted, and not tested.",
        ]
        return "\n".join([*lines, *wrapped(texts)])

    def statuses(self) -> pd.DataFrame:
        """Return how many replicates have each status, by route, and how many optima are not certified.

        Returns
        -------
        DataFrame
            ``route``, one column per status, ``not certified``.
        """
        rows = [{"route": key, **self.replicates.statuses(key)} for key in self.replicates.routes]
        return pd.DataFrame(rows)

    def components(self) -> pd.DataFrame:
        """Return bias and standard error of variance components, ratio and ICC of every route.

        Returns
        -------
        DataFrame
            ``route, quantity, truth, mean, bias, bias_error`` (Monte Carlo standard error of the bias),
            ``standard_error`` (standard deviation over replicates), ``rmse, replicates`` (those with a value), and
            ``model_standard_error`` (that of the fit to the data). ``unit_variance_raw`` is before truncation at
            zero. A ratio or ICC has no finite mean where ``sigma_u^2`` can be near zero; replicates without a
            ratio are left out and counted.
        """
        truth = self.replicates.truth
        rows: list[list[object]] = []
        for key, found in self.replicates.routes.items():
            fit = self.replicates.fits[key]
            if not np.isfinite(found.unit_variance_raw).any() or fit.route == "pooled":
                continue
            errors = fit.component_standard_errors
            icc = found.ratio / (1.0 + found.ratio)
            quantities = {
                "unit_variance_raw": (found.unit_variance_raw, truth.unit, errors["unit_variance"]),
                "unit_variance": (np.maximum(found.unit_variance_raw, 0.0), truth.unit, np.nan),
                "idiosyncratic_variance": (
                    found.idiosyncratic_variance,
                    truth.idiosyncratic,
                    errors["idiosyncratic_variance"],
                ),
                "ratio": (found.ratio, truth.ratio, errors["ratio"]),
                "icc": (icc, truth.ratio / (1.0 + truth.ratio), errors["icc"]),
            }
            rows += [
                [key, name, *_summary(values, target), float(model)]
                for name, (values, target, model) in quantities.items()
            ]
        return pd.DataFrame(rows, columns=["route", "quantity", *SUMMARY, "model_standard_error"])

    def coefficients(self) -> pd.DataFrame:
        """Return bias and standard error of every coefficient of every route.

        Returns
        -------
        DataFrame
            ``route, term, truth, mean, bias, bias_error, standard_error, rmse, replicates``, and
            ``model_standard_error``, the root mean square of the model-based ones of the replicates.
        """
        rows: list[list[object]] = []
        for key, found in self.replicates.routes.items():
            for at, term in enumerate(self.replicates.fits[key].terms):
                values, errors = found.coefficients[:, at], found.standard_errors[:, at]
                if not np.isfinite(values).any():
                    continue
                known = errors[np.isfinite(errors)]
                model = float(np.sqrt((known**2).mean())) if known.size else np.nan
                target = float(self.replicates.truth.coefficients[at])
                rows.append([key, term, *_summary(values, target), model])
        return pd.DataFrame(rows, columns=["route", "term", *SUMMARY, "model_standard_error"])

    def interval(
        self, term: str, route: str | None = None, method: Method = "t", confidence: float | None = None
    ) -> tuple[float, float]:
        """Return a bootstrap interval of a coefficient.

        Parameters
        ----------
        term : str
        route : str, optional
            The one drawn from unless given.
        method : {"t", "percentile"}
            ``t``: estimate minus quantiles of ``(replicate - truth) / its own standard error`` times the standard
            error of the data. ``percentile``: estimate plus quantiles of ``replicate - truth``; for the route
            drawn from these are the quantiles of the replicates.
        confidence : float, optional

        Returns
        -------
        float, float

        Raises
        ------
        OptionError
            If there are too few replicates for the level.
        IdentificationError
            If the route does not estimate the term.
        """
        key, level = route or self.under, self._level(confidence)
        at = column_of(self.replicates, key, term)
        fit, found = self.replicates.fits[key], self.replicates.routes[key]
        if not np.isfinite(fit.beta[at]):
            raise IdentificationError(f"route {key!r} gives no {term!r} on the data: {fit.status}.")
        deviations = found.coefficients[:, at] - self.replicates.truth.coefficients[at]
        estimate, what = float(fit.beta[at]), f"{term!r} by {key!r}"
        if method == "percentile":
            low, high = quantiles(deviations, level, what)
            return estimate + float(low), estimate + float(high)
        if method != "t":
            raise OptionError.not_among("method", method, ("t", "percentile"))
        error = float(np.sqrt(fit.scale * (fit.root[at] ** 2).sum()))
        if not error > 0.0:
            raise IdentificationError(f"route {key!r} gives no standard error of {term!r}: {fit.status}.")
        with np.errstate(divide="ignore", invalid="ignore"):
            low, high = quantiles(deviations / found.standard_errors[:, at], level, what)
        return estimate - float(high) * error, estimate - float(low) * error

    def intervals(self, route: str | None = None, confidence: float | None = None) -> pd.DataFrame:
        """Return both bootstrap intervals of every coefficient beside estimate and standard error.

        Parameters
        ----------
        route : str, optional
            The one drawn from unless given.
        confidence : float, optional

        Returns
        -------
        DataFrame
            ``term, route, method, estimate, lower, upper``.
        """
        key = route or self.under
        fit = fit_of(self.replicates, key)
        rows = [
            [term, key, method, float(fit.beta[at]), *self.interval(term, key, method, confidence)]
            for at, term in enumerate(fit.terms)
            if np.isfinite(fit.beta[at])
            for method in ("percentile", "t")
        ]
        return pd.DataFrame(rows, columns=["term", "route", "method", "estimate", "lower", "upper"])

    def component_intervals(self, route: str | None = None, confidence: float | None = None) -> pd.DataFrame:
        """Return percentile intervals of the components: quantiles of the replicates.

        Parameters
        ----------
        route : str, optional
            The one drawn from unless given.
        confidence : float, optional

        Returns
        -------
        DataFrame
            ``quantity, route, lower, upper, share_zero`` (replicates with a unit variance of zero or below, whose
            mass an interval that starts at zero holds). Not exact: where the ratio is small or units are few,
            prefer an exact interval.
        """
        key, level = route or self.under, self._level(confidence)
        fit_of(self.replicates, key)
        found = self.replicates.routes[key]
        if not np.isfinite(found.unit_variance_raw).any():
            raise IdentificationError(f"route {key!r} estimates no unit variance.")
        zero = float((found.unit_variance_raw <= 0.0).mean())
        quantities = {
            "unit_variance": np.maximum(found.unit_variance_raw, 0.0),
            "idiosyncratic_variance": found.idiosyncratic_variance,
            "ratio": found.ratio,
            "icc": found.ratio / (1.0 + found.ratio),
        }
        rows = [
            [name, key, *quantiles(values, level, f"{name} by {key!r}").tolist(), zero]
            for name, values in quantities.items()
        ]
        return pd.DataFrame(rows, columns=["quantity", "route", "lower", "upper", "share_zero"])

    def gap_noise(self, term: str, a: str, b: str, levels: Sequence[float] = (0.025, 0.5, 0.975)) -> GapNoise:
        """Describe the law of the gap between two routes under the model drawn from.

        Parameters
        ----------
        term : str
        a, b : str
            Routes; the gap is the estimate by `a` minus that by `b`.
        levels : sequence of float
            Quantiles to give.

        Returns
        -------
        GapNoise
        """
        return gap_noise(self.replicates, term, a, b, levels)

    def gaps(self, primary: str | None = None) -> pd.DataFrame:
        """Set every gap from the primary route beside its own sampling noise.

        Parameters
        ----------
        primary : str, optional
            The route drawn from unless given.

        Returns
        -------
        DataFrame
            ``term, route, gap, sd, gap_in_sd, share_at_least, share_error``; ``share_at_least`` is the share of
            replicates with a gap of at least this size.
        """
        base = primary or self.under
        fit_of(self.replicates, base)
        rows: list[list[object]] = []
        for term in self.replicates.curve.names:
            for key in self.replicates.routes:
                if key == base:
                    continue
                try:
                    found = self.gap_noise(term, key, base, levels=())
                except IdentificationError:
                    continue
                share = found.share
                rows.append([term, key, found.observed, found.sd, found.in_sd, share.value, share.error])
        columns = ["term", "route", "gap", "sd", "gap_in_sd", "share_at_least", "share_error"]
        return pd.DataFrame(rows, columns=columns)

    def classes(
        self,
        b: str,
        a: str | None = None,
        *,
        confidence: float | None = None,
        rule: str = "t_residual",
        gap: float = 0.1,
        width: float = 0.1,
    ) -> pd.DataFrame:
        """Tell how often, under the model drawn from, two routes would be classed as conflicting, and so on.

        Parameters
        ----------
        b : str
            The other route.
        a : str, optional
            The primary one; that drawn from unless given.
        confidence : float, optional
        rule : str
            Reference distribution of the intervals, one that does not change with the outcome; see
            `mixbridge.resample.gaps.RULES`.
        gap, width : float
            Thresholds of the ledger.

        Returns
        -------
        DataFrame
            See `mixbridge.resample.gaps.class_shares`.
        """
        level = self.confidence if confidence is None else confidence
        return class_shares(
            self.replicates, a or self.under, b, confidence=level, rule=rule, gap=gap, width=width
        )

    def _level(self, confidence: float | None) -> tuple[float, float]:
        level = self.confidence if confidence is None else confidence
        check_confidence(level)
        return (1.0 - level) / 2.0, (1.0 + level) / 2.0


def bootstrap(
    curve: Curve,
    fits: Mapping[str, Fit],
    under: str | Truth = "reml",
    replicates: int = 9_999,
    seed: int = 20_050,
    *,
    confidence: float = 0.95,
    workers: int | None = None,
    batch: int | None = None,
    progress: Progress | None = None,
) -> Bootstrap:
    """Draw replicates under a fit and refit every route to each.

    Parameters
    ----------
    curve : Curve
        The panel.
    fits : mapping of str to Fit
        Routes fitted to this panel, with their conventions; all are refitted.
    under : str or Truth
        Key in `fits` of a route with a finite ratio, or a stated model.
    replicates, seed : int
    confidence : float
        Level of intervals.
    workers, batch, progress
        As in `mixbridge.resample.replicate`.

    Returns
    -------
    Bootstrap
    """
    check_confidence(confidence)
    if isinstance(under, Truth):
        truth, name = under, "a stated model"
    else:
        if under not in fits:
            raise OptionError.not_among("under", under, fits)
        truth, name = truth_of(fits[under]), under
    found = replicate(curve, fits, truth, replicates, seed, workers=workers, batch=batch, progress=progress)
    return Bootstrap(found, name, confidence)


def _summary(values: FloatArray, truth: float) -> list[object]:
    """Return truth, mean, bias, its Monte Carlo error, standard deviation, root mean square error, and count."""
    kept = values[np.isfinite(values)]
    if kept.size < 2:
        return [truth, np.nan, np.nan, np.nan, np.nan, np.nan, int(kept.size)]
    mean, sd = float(kept.mean()), float(kept.std(ddof=1))
    rmse = float(np.sqrt(((kept - truth) ** 2).mean()))
    return [truth, mean, mean - truth, sd / float(np.sqrt(kept.size)), sd, rmse, int(kept.size)]
