"""What minimum distance on the reduced form gives: slopes, projection, tests, and what they do not show."""

from __future__ import annotations

from dataclasses import dataclass, field
from itertools import pairwise
from textwrap import wrap

import numpy as np
import pandas as pd
import scipy
from numpy.typing import NDArray

from mixbridge.correlated.minimum_distance import WEIGHTS, Distance, distance_of
from mixbridge.correlated.projection import Projection
from mixbridge.correlated.projection_columns import Origin
from mixbridge.correlated.reduced_form import ReducedForm, reduced_form
from mixbridge.errors import OptionError
from mixbridge.moments import OpenMoments
from mixbridge.panel import Panel
from mixbridge.routes import Fit

__all__ = ["MinimumDistance", "minimum_distance"]

FloatArray = NDArray[np.float64]
FEW = 10
"""Units per coefficient of the reduced form below which the note on small samples is shown (common practice)."""

NOT_EVIDENCE = "A test that does not reject proves nothing, and none of them chooses the estimator."


@dataclass(frozen=True, slots=True, eq=False)
class MinimumDistance:
    """Minimum distance with every kind of weights.

    Attributes
    ----------
    form : ReducedForm
    distances : tuple of Distance
        One per kind of weights, each with its status.
    origins : mapping of str to Origin
        Column of the projection -> design column and period.
    within : pandas.Series
        Within slopes, for comparison.
    confidence : float
        Level of the intervals.
    size : dict
        ``units``, ``periods``, ``coefficients`` of the reduced form, ``parameters``, ``restrictions``.
    notes : tuple of str
    """

    form: ReducedForm = field(repr=False)
    distances: tuple[Distance, ...]
    origins: dict[str, Origin] = field(repr=False)
    within: pd.Series
    confidence: float
    size: dict[str, int]
    notes: tuple[str, ...]

    def with_weights(self, weights: str) -> Distance:
        """Return the result for one kind of weights."""
        for found in self.distances:
            if found.weights == weights:
                return found
        raise OptionError.not_among("weights", weights, [found.weights for found in self.distances])

    @property
    def status(self) -> pd.DataFrame:
        """Columns ``weights, status``."""
        return pd.DataFrame(
            [(found.weights, found.status) for found in self.distances], columns=["weights", "status"]
        )

    @property
    def coefficients(self) -> pd.DataFrame:
        """Coefficients of the design columns.

        ``term, weights, estimate, standard_error, lower, upper, p_value, within``. Normal references; standard errors
        are robust to heteroscedasticity and to dependence within units.
        """
        z = float(scipy.stats.norm.isf((1.0 - self.confidence) / 2.0))
        rows = []
        for j, name in enumerate(self.form.names):
            if name in self.origins:
                continue
            for found in self.distances:
                estimate, error = float(found.beta[j]), float(np.sqrt(found.covariance[j, j]))
                p = float(2.0 * scipy.stats.norm.sf(abs(estimate / error))) if error > 0.0 else np.nan
                ends = (estimate - z * error, estimate + z * error)
                rows.append(
                    (name, found.weights, estimate, error, *ends, p, float(self.within.get(name, np.nan)))
                )
        header = ["term", "weights", "estimate", "standard_error", "lower", "upper", "p_value", "within"]
        return pd.DataFrame(rows, columns=header)

    @property
    def projection(self) -> pd.DataFrame:
        """Coefficients of the projection: ``column, period, weights, estimate, standard_error``."""
        rows = []
        for j, name in enumerate(self.form.names):
            if name not in self.origins:
                continue
            origin = self.origins[name]
            for found in self.distances:
                error = float(np.sqrt(found.covariance[j, j]))
                rows.append((origin.column, origin.period, found.weights, float(found.beta[j]), error))
        return pd.DataFrame(rows, columns=["column", "period", "weights", "estimate", "standard_error"])

    @property
    def tests(self) -> pd.DataFrame:
        """Tests: ``tested, weights, kind, statistic, df, p_value, reference``.

        ``overidentification`` is the distance itself: all that the model says about the reduced form, strict
        exogeneity and one slope for all periods included. ``equal over periods``: coefficients of the projection of
        each column are equal, so that it is one on unit means (Mundlak 1978); ``no correlation``: all of them are
        zero. With optimal weights the Wald statistic of linear restrictions is the difference of the distances with
        and without them, one number. Not rejecting proves nothing.
        """
        rows: list[tuple[object, ...]] = []
        for found in self.distances:
            if not found.estimated:
                rows.append(
                    ("overidentification", found.weights, "distance", np.nan, 0, np.nan, found.status)
                )
                continue
            law = (found.distance, found.df, found.p_value)
            rows.append(("overidentification", found.weights, "distance", *law, found.reference))
            kind = "difference of distances" if found.weights == "optimal" else "Wald"
            for tested, matrix in self._restrictions().items():
                rows.append(
                    (tested, found.weights, kind, *_wald(found, matrix), "chi-square in large samples")
                )
        return pd.DataFrame(
            rows, columns=["tested", "weights", "kind", "statistic", "df", "p_value", "reference"]
        )

    def _restrictions(self) -> dict[str, FloatArray]:
        """Return restriction matrices on the identified parameters of the projection."""
        names, kept = self.form.names, set(self.form.kept.tolist())
        places = [j for j, name in enumerate(names) if name in self.origins and j in kept]
        series: dict[str, list[int]] = {}
        for j in places:
            series.setdefault(self.origins[names[j]].column, []).append(j)
        equal = []
        for own in series.values():
            for a, b in pairwise(own):
                row = np.zeros(len(names))
                row[a], row[b] = 1.0, -1.0
                equal.append(row)
        found = {"no correlation": np.eye(len(names))[places]}
        if equal:
            found["equal over periods"] = np.array(equal)
        return {name: matrix for name, matrix in found.items() if len(matrix)}

    def _statuses(self) -> list[str]:
        texts = [f"  {found.weights}: {found.status}" for found in self.distances]
        return [
            line for text in texts for line in wrap(text, 100, subsequent_indent="    ", initial_indent="")
        ]

    def __str__(self) -> str:
        """Return the size of the problem, slopes, tests and cautions."""
        size = self.size
        head = (
            f"Minimum distance: {size['coefficients']} reduced-form coefficients, {size['parameters']} parameters, "
            f"{size['units']} units, {size['periods']} periods"
        )
        lines = [head, *self._statuses(), ""]
        shown = self.coefficients.drop(columns=["lower", "upper"])
        with pd.option_context("display.width", 100, "display.max_columns", 10, "display.max_colwidth", 24):
            lines += shown.to_string(index=False, float_format=lambda v: f"{v:.4g}").splitlines()
            tests = self.tests.drop(columns="reference")
            lines += ["", *tests.to_string(index=False, float_format=lambda v: f"{v:.4g}").splitlines()]
        return "\n".join([*lines, "", *(line for note in self.notes for line in wrap(note, 100))])


def minimum_distance(
    panel: Panel, opened: OpenMoments, projection: Projection, *, fit: Fit, within: Fit, confidence: float
) -> MinimumDistance:
    """Fit the random-intercept model to the reduced form by minimum distance.

    Parameters
    ----------
    panel, opened
        Of a study of a balanced panel, without the projection.
    projection : Projection
        Of the same study on all periods.
    fit : Fit
        A route of the study with the projection: its ratio and idiosyncratic variance make the weights
        ``random_effects``.
    within : Fit
        The within route, for comparison.
    confidence : float
        Level of the intervals.

    Returns
    -------
    MinimumDistance

    Raises
    ------
    IdentificationError, OptionError
        If the panel is not balanced, has no ordered periods, or fewer units than columns.
    """
    form = reduced_form(panel, opened, projection)
    scale = fit.idiosyncratic_variance
    distances = tuple(distance_of(form, weights, fit.ratio, scale) for weights in WEIGHTS)
    size = {
        "units": form.units,
        "periods": form.coefficients.shape[0],
        "coefficients": form.moments,
        "parameters": len(form.kept),
        "restrictions": form.moments - len(form.kept),
    }
    notes = [
        f"Weights random_effects take the ratio of {fit.route}, {fit.ratio:.4g}. Standard errors are robust to "
        "heteroscedasticity and to dependence within units.",
        NOT_EVIDENCE,
    ]
    if form.units < FEW * form.moments:
        notes.insert(
            0,
            f"{form.units / form.moments:.1f} units per coefficient of the reduced form: optimal weights are then "
            "known to understate standard errors and to reject too often (Altonji & Segal 1996, from memory).",
        )
    notes += [f"{name} is not identified: {reason}." for name, reason in form.lost.items()]
    return MinimumDistance(
        form, distances, dict(projection.origins), within.coefficients, confidence, size, tuple(notes)
    )


def _wald(found: Distance, matrix: FloatArray) -> tuple[float, int, float]:
    """Return the Wald statistic of ``matrix @ theta = 0``, its degrees of freedom and p value."""
    gap, spread = _of_kept(found, matrix)
    statistic = float(gap @ np.linalg.solve(spread, gap))
    df = matrix.shape[0]
    return statistic, df, float(scipy.stats.chi2.sf(statistic, df))


def _of_kept(found: Distance, matrix: FloatArray) -> tuple[FloatArray, FloatArray]:
    kept = np.isfinite(found.beta)
    rows = matrix[:, kept]
    return rows @ found.beta[kept], rows @ found.covariance[np.ix_(kept, kept)] @ rows.T
