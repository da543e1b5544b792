"""What gaps between routes the fitted model alone produces, and how often two routes would conflict under it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
import pandas as pd
import scipy
from numpy.typing import NDArray

from mixbridge.errors import IdentificationError, OptionError
from mixbridge.inference.references import degrees_of_freedom
from mixbridge.resample.replicates import Replicates
from mixbridge.resample.simulated import Share, check_confidence, finite, quantiles, share_at_least
from mixbridge.routes import Fit

__all__ = [
    "CLASSES",
    "RULES",
    "GapNoise",
    "class_shares",
    "column_of",
    "fit_of",
    "gap_noise",
    "half_width_factors",
]

FloatArray = NDArray[np.float64]

CLASSES = ("identical", "immaterial", "visible", "conflicting")
"""Classes of a gap between two routes, mildest first, as the ledger has them."""

RULES = ("normal", "t_residual", "t_rows", "t_within", "t_units", "t_between", "t_constant", "by_level")
"""Reference distributions that do not change with the outcome."""

ROUNDING = 1e-9


@dataclass(frozen=True, slots=True)
class GapNoise:
    """Law of a difference between two routes under the model drawn from, for one term.

    Attributes
    ----------
    term, a, b : str
        The gap is the estimate by `a` minus that by `b`.
    observed : float
        The gap in the data.
    mean, sd : float
        Of the gap over replicates.
    quantiles : mapping of float to float
        By level.
    share : Share
        Replicates with a gap at least as large in size as the observed one (a p-value under the model drawn from).
    resolution : float
        Standard deviation below which a gap is rounding: the routes then agree on every replicate.
    """

    term: str
    a: str
    b: str
    observed: float
    mean: float
    sd: float
    quantiles: Mapping[float, float]
    share: Share
    resolution: float

    @property
    def in_sd(self) -> float:
        """The observed gap in standard deviations of its own noise; NaN where the noise is rounding."""
        return self.observed / self.sd if self.sd > self.resolution else np.nan


def fit_of(replicates: Replicates, key: str) -> Fit:
    """Return a route as fitted to the data; refuses one that is not refitted to the replicates.

    Parameters
    ----------
    replicates : Replicates
    key : str

    Returns
    -------
    Fit
    """
    if key in replicates.left_out:
        raise IdentificationError(f"route {key!r} has no replicates: {replicates.left_out[key]}.")
    if key not in replicates.fits:
        raise OptionError.not_among("route", key, replicates.fits)
    return replicates.fits[key]


def column_of(replicates: Replicates, key: str, term: str) -> int:
    """Return the place of a term; refuses a term that the route does not estimate.

    Parameters
    ----------
    replicates : Replicates
    key, term : str

    Returns
    -------
    int
    """
    fit = fit_of(replicates, key)
    if term not in fit.terms:
        raise OptionError.not_among("term", term, fit.terms)
    at = fit.terms.index(term)
    if not np.isfinite(replicates.routes[key].coefficients[:, at]).any():
        reason = fit.not_estimable.get(term, fit.status)
        raise IdentificationError(f"route {key!r} does not estimate {term!r}: {reason}.")
    return at


def gap_noise(
    replicates: Replicates, term: str, a: str, b: str, levels: Sequence[float] = (0.025, 0.5, 0.975)
) -> GapNoise:
    """Describe the law of the gap between two routes under the model drawn from.

    Parameters
    ----------
    replicates : Replicates
    term : str
    a, b : str
        Routes.
    levels : sequence of float
        Quantiles to give.

    Returns
    -------
    GapNoise
    """
    at = column_of(replicates, a, term)
    column_of(replicates, b, term)
    one, two = (replicates.routes[key].coefficients[:, at] for key in (a, b))
    what = f"a gap between {a!r} and {b!r} in {term!r}"
    gaps = finite(one - two, what)
    observed = float(replicates.fits[a].beta[at] - replicates.fits[b].beta[at])
    if not np.isfinite(observed):
        lost = a if not np.isfinite(replicates.fits[a].beta[at]) else b
        raise IdentificationError(
            f"route {lost!r} gives no {term!r} on the data ({replicates.fits[lost].status}), so there is no gap."
        )
    # two routes that agree differ by rounding, which is no gap on either side
    size = float(np.abs(one[np.isfinite(one)]).max() + np.abs(two[np.isfinite(two)]).max())
    resolution = 64.0 * float(np.finfo(float).eps) * size + 1e-12 * float(np.std(finite(one, what)))
    return GapNoise(
        term=term,
        a=a,
        b=b,
        observed=observed,
        mean=float(gaps.mean()),
        sd=float(gaps.std(ddof=1)) if gaps.size > 1 else np.nan,
        quantiles=MappingProxyType(
            dict(zip(levels, quantiles(gaps, levels, what).tolist(), strict=True)) if levels else {}
        ),
        share=share_at_least(np.abs(gaps), max(abs(observed) - resolution, 0.0), what),
        resolution=resolution,
    )


def half_width_factors(replicates: Replicates, key: str, confidence: float, rule: str) -> FloatArray:
    """Return half-widths of intervals in standard errors, by term.

    Parameters
    ----------
    replicates : Replicates
    key : str
    confidence : float
    rule : str
        One of `RULES`.

    Returns
    -------
    ndarray of shape (p,)
    """
    check_confidence(confidence)
    if rule not in RULES:
        raise OptionError.not_among("rule", rule, RULES)
    fit = fit_of(replicates, key)
    df = degrees_of_freedom(replicates.curve, fit, np.eye(len(fit.terms)), rule)
    return np.asarray(scipy.stats.t.isf((1.0 - confidence) / 2.0, df))


def class_shares(
    replicates: Replicates,
    a: str,
    b: str,
    *,
    confidence: float = 0.95,
    rule: str = "t_residual",
    gap: float = 0.1,
    width: float = 0.1,
) -> pd.DataFrame:
    """Tell how often the gap of `b` from `a` falls into each class of the ledger, term by term.

    Parameters
    ----------
    replicates : Replicates
    a, b : str
        Routes; `a` stands for the primary one.
    confidence : float
    rule : str
        Reference distribution of the intervals on every replicate, one of `RULES`.
    gap, width : float
        Thresholds: largest immaterial gap in standard errors of `a`, largest immaterial relative difference of
        half-widths.

    Returns
    -------
    DataFrame
        One row per term: ``term``, the share of replicates in each of `CLASSES`, ``not_available`` (no estimate by
        one of the routes), and ``conflicting_error``, the Monte Carlo standard error of the share that conflicts.
    """
    for name, threshold in (("gap", gap), ("width", width)):
        if not (isinstance(threshold, (int, float)) and 0.0 < threshold < np.inf):
            raise OptionError(f"threshold {name}={threshold!r} is not allowed; allowed: a positive number.")
    factors = [half_width_factors(replicates, key, confidence, rule) for key in (a, b)]
    first, second = (replicates.routes[key] for key in (a, b))
    with np.errstate(divide="ignore", invalid="ignore"):
        halves = [
            found.standard_errors * factor for found, factor in zip((first, second), factors, strict=True)
        ]
        apart = np.abs(second.coefficients - first.coefficients) / first.standard_errors
        wider = np.abs(halves[1] / halves[0] - 1.0)
    signs = [
        (found.coefficients - half > 0.0).astype(int) - (found.coefficients + half < 0.0)
        for found, half in zip((first, second), halves, strict=True)
    ]
    known = np.isfinite(apart) & np.isfinite(wider)
    identical = known & (apart <= ROUNDING) & (wider <= ROUNDING)
    immaterial = known & ~identical & (apart < gap) & (wider < width)
    conflicting = known & ~identical & ~immaterial & (signs[0] != signs[1])
    visible = known & ~identical & ~immaterial & ~conflicting
    table = pd.DataFrame({"term": replicates.fits[a].terms})
    for name, where in zip(CLASSES, (identical, immaterial, visible, conflicting), strict=True):
        table[name] = where.mean(axis=0)
    table["not_available"] = 1.0 - known.mean(axis=0)
    share = table["conflicting"]
    table["conflicting_error"] = np.sqrt(share * (1.0 - share) / replicates.count)
    return table
