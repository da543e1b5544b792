"""How well the mean over the rows of a unit measures what it stands for.

A covariate is taken as ``x_it = xi_i + v_it``: a value of the unit plus independent deviations, with
variances ``tau^2`` and ``s^2``. The mean over T rows has reliability ``tau^2/(tau^2 + s^2/T)``. Where the
value of the unit is itself a mean over M rows, of which T were seen at random, it is ``(tau^2 +
s^2/M)/(tau^2 + s^2/T)``: one when all were seen. Both variances come from the engine, the covariate being
the outcome and the constant (with columns that are not sampled, such as period indicators) the design.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from mixbridge.moments import Moments
from mixbridge.moments.factors import factor_from_rows
from mixbridge.panel import Panel
from mixbridge.ratio import curve_of
from mixbridge.routes import Fit, fit_route

__all__ = ["MeanReliability", "column_moments", "mean_reliability", "period_columns"]

FloatArray = NDArray[np.float64]
CONSTANT = "constant of the covariate"


@dataclass(frozen=True, slots=True, eq=False)
class MeanReliability:
    """Variance components of one covariate.

    Attributes
    ----------
    column : str
    fit : Fit
        Of the covariate as outcome.
    population : float
        M, rows of which the value of a unit is the mean; infinite for the expectation.
    """

    column: str
    fit: Fit
    population: float

    @property
    def between_variance(self) -> float:
        """``tau^2``, before truncation at zero."""
        return self.fit.unit_variance_raw

    @property
    def within_variance(self) -> float:
        """``s^2``."""
        return self.fit.idiosyncratic_variance

    def at(self, sizes: FloatArray) -> FloatArray:
        """Return the reliability of a mean over each number of rows."""
        level = max(self.between_variance, 0.0)
        target = level + self.within_variance / self.population
        return np.asarray(target / (level + self.within_variance / sizes))


def mean_reliability(
    moments: Moments,
    column: str,
    *,
    fixed: Sequence[str] = (),
    population: float = np.inf,
    route: str = "fitting_constants",
) -> MeanReliability:
    """Estimate the variance components of a covariate.

    Parameters
    ----------
    moments : Moments
    column : str
        A design column that varies within units.
    fixed : sequence of str
        Columns that are not sampled; their part in the covariate is no noise.
    population : float
        M, at least as large as the largest unit.
    route : str
        Route of the engine.

    Returns
    -------
    MeanReliability
        Its fit carries the status, such as a negative ``tau^2``.
    """
    curve = curve_of(column_moments(moments, column, fixed))
    fit = fit_route(curve, route, {}, "components of a covariate are taken from rows, not from differences")
    return MeanReliability(column, fit, population)


def column_moments(moments: Moments, column: str, covariates: Sequence[str] = ()) -> Moments:
    """Return moments with a design column as outcome, on a constant and some other columns.

    Parameters
    ----------
    moments : Moments
    column : str
    covariates : sequence of str

    Returns
    -------
    Moments
    """
    picks = np.array([moments.columns.index(name) for name in (*covariates, column)], dtype=np.intp)
    means = np.r_[0, picks + 1]
    result = replace(
        moments,
        design=(CONSTANT, *covariates),
        constant=CONSTANT,
        outcome=column,
        shift=moments.shift[picks],
        scale=moments.scale[picks],
        magnitude=moments.magnitude[picks],
        within=factor_from_rows(moments.within[:, picks]),
        between=np.array([factor_from_rows(factor[:, means]) for factor in moments.between]),
    )
    for array in (result.shift, result.scale, result.magnitude, result.within, result.between):
        array.setflags(write=False)
    return result


def period_columns(panel: Panel, columns: Sequence[str]) -> tuple[str, ...]:
    """Return those of some columns that have one value in each period, the same for all units.

    Parameters
    ----------
    panel : Panel
    columns : sequence of str

    Returns
    -------
    tuple of str
        Empty if the panel has no ordered periods.
    """
    if panel.period_ordinals is None or not columns:
        return ()
    picks = [panel.names.index(name) for name in columns]
    periods, period = np.unique(panel.period_ordinals, return_inverse=True)
    low = np.full((periods.size, len(picks)), np.inf)
    high = -low
    for start, x, y in panel.blocks():
        rows = period[start : start + y.size]
        np.minimum.at(low, rows, x[:, picks])
        np.maximum.at(high, rows, x[:, picks])
    same = (low == high).all(axis=0)
    return tuple(name for name, alike in zip(columns, same, strict=True) if alike)
