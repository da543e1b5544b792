"""What minimum distance on the reduced form gives: slopes, projection, tests, and what they do not show."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
import scipy
from numpy.typing import NDArray

from mixbridge.correlated.minimum_distance import WEIGHTS, Distance, distance_of
from mixbridge.correlated.minimum_distance_tests import MEANING, tests_of
from mixbridge.correlated.projection import Projection
from mixbridge.correlated.projection_columns import Origin
from mixbridge.correlated.reduced_form import ReducedForm, reduced_form
from mixbridge.display import Printed
from mixbridge.display.text import frame_lines, wrapped
from mixbridge.errors import OptionError
from mixbridge.moments import OpenMoments
from mixbridge.panel import Panel
from mixbridge.routes import Fit

__all__ = ["MinimumDistance", "minimum_distance"]

FloatArray = NDArray[np.float64]
FEW = 10
"""Units per coefficient of the reduced form, and residual degrees of freedom, below which a note is shown (common
practice)."""

NOT_EVIDENCE = "A test that does not reject proves nothing, and none of them chooses the estimator."
COEFFICIENTS = [
    "term",
    "weights",
    "estimate",
    "standard_error",
    "lower",
    "upper",
    "p_value",
    "few_units_error",
    "few_units_df",
    "few_units_lower",
    "few_units_upper",
    "few_units_p",
    "within",
]


SHOWN = {
    "term": "term",
    "weights": "weights",
    "estimate": "estimate",
    "standard_error": "error",
    "p_value": "p",
    "few_units_error": "error, few",
    "few_units_p": "p, few",
    "within": "within",
}
"""Columns of the coefficients that are printed, and their headings."""
MOST = 90
"""Coefficients printed at most; the table holds all of them."""


@dataclass(frozen=True, slots=True, eq=False)
class MinimumDistance(Printed):
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
    origins: Mapping[str, Origin] = field(repr=False)
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

        ``term, weights, estimate``; ``standard_error, lower, upper, p_value`` in large samples, with normal reference;
        ``few_units_error``, ``_df``, ``_lower``, ``_upper``, ``_p`` with the t reference for few units of
        `mixbridge.correlated.minimum_distance`; ``within``. Standard errors are robust to heteroscedasticity and to
        dependence within units. NaN where the weights are not estimable: see `status`.
        """
        tail = (1.0 - self.confidence) / 2.0
        z = float(scipy.stats.norm.isf(tail))
        rows = []
        for j, found in self._cells(projected=False):
            name = self.form.names[j]
            estimate, error = float(found.beta[j]), float(np.sqrt(found.covariance[j, j]))
            few, df = error * float(np.sqrt(found.inflation)), found.residual_df
            half = few * float(scipy.stats.t.isf(tail, df))
            rows.append(
                (
                    name,
                    found.weights,
                    estimate,
                    *(error, estimate - z * error, estimate + z * error),
                    float(2.0 * scipy.stats.norm.sf(abs(estimate / error))) if error > 0.0 else np.nan,
                    *(few, df, estimate - half, estimate + half),
                    float(2.0 * scipy.stats.t.sf(abs(estimate / few), df)) if few > 0.0 else np.nan,
                    float(self.within.get(name, np.nan)),
                )
            )
        return pd.DataFrame(rows, columns=COEFFICIENTS)

    @property
    def projection(self) -> pd.DataFrame:
        """Coefficients of the projection.

        ``column, period, weights, estimate, standard_error, few_units_error``; the period is its ordinal.
        """
        rows = []
        for j, found in self._cells(projected=True):
            origin, error = self.origins[self.form.names[j]], float(np.sqrt(found.covariance[j, j]))
            few = error * float(np.sqrt(found.inflation))
            rows.append((origin.column, origin.period, found.weights, float(found.beta[j]), error, few))
        header = ["column", "period", "weights", "estimate", "standard_error", "few_units_error"]
        return pd.DataFrame(rows, columns=header)

    @property
    def tests(self) -> pd.DataFrame:
        """Tests: ``tested, weights, kind, statistic, df, p_value, p_few_units, reference, meaning``.

        ``overidentification`` is the distance itself. ``equal over periods``: coefficients of the projection of each
        column are equal, so that it is one on unit means (Mundlak 1978); ``no correlation``: all of them are zero. With
        optimal weights the Wald statistic of linear restrictions is the difference of the distances with and without
        them, one number. The reference names both laws, or says why there is none. Not rejecting proves nothing.
        """
        return tests_of(self.form, self.distances, self.origins)

    def _cells(self, *, projected: bool) -> list[tuple[int, Distance]]:
        """Return places of parameters, of the projection or of the design, with each kind of weights."""
        places = [j for j, name in enumerate(self.form.names) if (name in self.origins) is projected]
        return [(j, found) for j in places for found in self.distances]

    def __str__(self) -> str:
        """Return the size of the problem, slopes, tests and cautions."""
        size = self.size
        head = (
            f"Minimum distance: {size['coefficients']} reduced-form coefficients, {size['parameters']} parameters, "
            f"{size['units']} units, {size['periods']} periods"
        )
        lines = wrapped([head])
        for found in self.distances:
            lines += wrapped([f"{found.weights}: {found.status}"], "  ", "    ")
        estimated = [found.weights for found in self.distances if found.estimated]
        slopes = self.coefficients.rename(columns=SHOWN)[list(SHOWN.values())]
        slopes = slopes[~slopes["term"].isin(self.form.apart) & slopes["weights"].isin(estimated)]
        tests = self.tests[["tested", "weights", "statistic", "df", "p_value", "p_few_units"]]
        tests.columns = ["tested", "weights", "statistic", "df", "p", "p, few"]
        for table in (slopes, tests):
            lines += ["", *frame_lines(table, most=MOST)]
        texts = [
            f"{tested}: {meaning}." for tested, meaning in MEANING.items() if tested in set(tests["tested"])
        ]
        for row in self.tests.itertuples(index=False):
            if str(row.reference).startswith("not ") and self.with_weights(str(row.weights)).estimated:
                texts.append(f"{row.tested}, {row.weights}: {row.reference}.")
        return "\n".join([*lines, "", *wrapped([*texts, *self.notes])])


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
    return MinimumDistance(
        form,
        distances,
        dict(projection.origins),
        within.coefficients,
        confidence,
        size,
        (*_cautions(form, distances[0]), *_conventions(panel, form, fit), *_columns(panel, form, projection)),
    )


def _cautions(form: ReducedForm, optimal: Distance) -> list[str]:
    """Say what few units do."""
    found = []
    if optimal.estimated and form.units < FEW * form.moments:
        found.append(
            f"{form.units / form.moments:.1f} units per coefficient of the reduced form: with optimal weights "
            "estimates are then biased, standard errors too small, and tests reject too often (Altonji & Segal 1996, "
            "from memory). The columns for few units correct part of it."
        )
    if form.left < FEW * form.coefficients.shape[0]:
        found.append(
            f"{form.units} units less {form.basis.shape[1]} columns leave {form.left} residual degrees of freedom in "
            "each period: no robust covariance can be trusted, with any weights, and large samples are far away."
        )
    return [*found, NOT_EVIDENCE]


def _conventions(panel: Panel, form: ReducedForm, fit: Fit) -> list[str]:
    """Say units of measurement, weights, references."""
    ratio = f"Weights random_effects take the ratio of {fit.route}, {fit.ratio:.4g}. "
    return [
        f"Slopes are in units of {panel.outcome} per unit of the column, the others and the {panel.unit_name} effect "
        f"fixed; coefficients of the projection in units of {panel.outcome} per unit of the column in that period, "
        f"and not causal. Statistics of tests have no unit of measurement. Each {panel.unit_name} counts as one unit.",
        "Under the model all weights and the within route estimate the same slopes and differ in how they weight "
        "noise. Where they lie apart by more than their errors, the model is in doubt, not one of them.",
        f"{ratio if np.isfinite(fit.ratio) else ''}Errors are robust to heteroscedasticity and to dependence within "
        f"units; no multiplier in large samples (times {np.sqrt(form.units / form.left):.3f} with N/(N - r)). 'few': "
        "references of Hotelling and Rao, as if moments were normal.",
    ]


def _columns(panel: Panel, form: ReducedForm, projection: Projection) -> list[str]:
    """Say which columns stay out of the projection, and which are combinations of others."""
    found = []
    if form.apart:
        found.append(
            f"Intercepts of periods, out of the projection and of what is printed: {', '.join(form.apart)}."
        )
    if panel.constant is None:
        found.append(
            "The formula has no constant: the mean of the outcome at zero covariates is taken as zero, in the "
            "projection too, and the distance tests that with the rest."
        )
    dropped = list(projection.augmented.dropped.values())
    if dropped:
        more = f", and so are {len(dropped) - 1} more" if len(dropped) > 1 else ""
        found.append(f"Not in the projection, being determined by other columns: {dropped[0]}{more}.")
    return found + [f"{name} is not identified: {reason}." for name, reason in form.lost.items()]
