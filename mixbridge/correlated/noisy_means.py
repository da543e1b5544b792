"""What the noise of unit means does to between and contextual coefficients, and the correction beside them.

Let ``xbar_i = xi_i + vbar_i`` with ``Var(vbar_i) = S_w/T_i``, and let the outcome depend on the values
``xi_i``:

    ybar_i = xbar_i'b_w + xi_i'd + z_i'g + alpha_i + ubar_i

with contextual coefficients d and between coefficients ``b_w + d``. Regression on ``xbar_i`` in place of
``xi_i`` attenuates d. With weights ``w_i = T_i/(1 + T_i psi)``, Z the unit-constant columns with the means of
columns that are not sampled, leverages ``h_i`` of the weighted regression on Z, and S the weighted products of
``xbar`` net of Z,

    E S = S_xi + N,     N = S_w sum_i w_i (1 - h_i) (1/T_i - 1/M),      d = (S - N)^-1 S d_hat

(M rows make up the value of a unit; infinite unless said). The slopes ``b_w`` are untouched. For one
covariate, equal sizes and no further columns this is ``d_hat`` over the reliability ``tau^2/(tau^2 +
s^2/T)`` with both variances from the analysis of variance (Lüdtke et al. 2008; Grilli & Rampichini 2011,
where the correction is for equal sizes; the form with unequal sizes and weights is the errors-in-variables
estimator of moments, Fuller 1987, and its use here ours). Coefficients of Z
become ``g_hat - M_zz^-1 M_zx (d - d_hat)``.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.correlated.choice import chosen_columns
from mixbridge.correlated.mundlak import Mundlak
from mixbridge.correlated.noisy_correction import NO_SIGNAL, added_mean, correction_at, independent
from mixbridge.correlated.noisy_covariance import Columns, corrected_covariance
from mixbridge.correlated.reliability import MeanReliability, mean_reliability, period_columns
from mixbridge.display import Printed
from mixbridge.display.text import frame_lines, wrapped
from mixbridge.errors import OptionError
from mixbridge.routes import Fit

__all__ = ["APPLIED", "NoisyMeans", "noisy_means"]

FloatArray = NDArray[np.float64]

APPLIED = "corrected"
FRAGILE = 0.2
"""Share of signal in the noisiest direction below which the correction is called fragile."""


@dataclass(frozen=True, slots=True, eq=False)
class NoisyMeans(Printed):
    """Reliability of unit means, and corrected coefficients beside the uncorrected ones.

    Attributes
    ----------
    status : str
        ``corrected``, or ``not corrected: <reason>``.
    statement : str
        What is assumed, and when none of this applies.
    notes : tuple of str
    reliabilities : tuple of MeanReliability
        One for each sampled covariate.
    sizes, counts : ndarray
        Distinct unit sizes and the number of units of each.
    terms, others : tuple of str
        Sampled covariates; columns whose means are not noisy but whose coefficients the correction moves.
    estimates, corrected, standard_errors, corrected_errors : ndarray of shape (3 m + o,)
        Within, contextual and between coefficients of the m covariates, then those of `others`.
    expected : ndarray of shape (G, m)
        Contextual coefficients that regression on means over each number of rows would estimate.
    signal : float
        Share of the noisiest direction of the unit means, net of other columns, that is not noise.
    """

    status: str
    statement: str
    notes: tuple[str, ...]
    reliabilities: tuple[MeanReliability, ...]
    sizes: NDArray[np.int64]
    counts: NDArray[np.int64]
    terms: tuple[str, ...]
    others: tuple[str, ...]
    estimates: FloatArray
    corrected: FloatArray
    standard_errors: FloatArray
    corrected_errors: FloatArray
    expected: FloatArray
    signal: float

    @property
    def reliability(self) -> pd.DataFrame:
        """Reliability of unit means by covariate and size.

        ``column, size, units, between_variance, within_variance, reliability, status``.

        Variances are those of the covariate; a negative ``between_variance`` is shown and counted as zero.
        """
        rows = [
            [
                one.column,
                int(size),
                int(count),
                one.between_variance,
                one.within_variance,
                float(value),
                one.fit.status,
            ]
            for one in self.reliabilities
            for size, count, value in zip(
                self.sizes, self.counts, one.at(self.sizes.astype(float)), strict=True
            )
        ]
        header = ["column", "size", "units", "between_variance", "within_variance", "reliability", "status"]
        return pd.DataFrame(rows, columns=header)

    @property
    def correction(self) -> pd.DataFrame:
        """Coefficients as estimated and corrected.

        ``term, coefficient, estimate, standard_error, corrected, corrected_se``; ``coefficient`` is
        ``within``, ``contextual``, ``between`` or, for columns whose means carry no noise, ``own``. The
        standard error of a corrected coefficient is a large-sample one that counts the noise of the
        reliability too, see `noisy_covariance`; that of the estimate is the model-based one of the fit.
        """
        labels = [(term, kind) for kind in ("within", "contextual", "between") for term in self.terms]
        labels += [(term, "own") for term in self.others]
        return pd.DataFrame(
            {
                "term": [term for term, _ in labels],
                "coefficient": [kind for _, kind in labels],
                "estimate": self.estimates,
                "standard_error": self.standard_errors,
                "corrected": self.corrected,
                "corrected_se": self.corrected_errors,
            }
        )

    @property
    def by_size(self) -> pd.DataFrame:
        """Coefficients that units of each size alone would show.

        ``term, size, units, contextual, between``: expected from regression on noisy means, if the corrected
        values are the true ones.
        """
        rows = [
            [term, int(size), int(count), self.expected[g, j], self.corrected[j] + self.expected[g, j]]
            for j, term in enumerate(self.terms)
            for g, (size, count) in enumerate(zip(self.sizes, self.counts, strict=True))
        ]
        return pd.DataFrame(rows, columns=["term", "size", "units", "contextual", "between"])

    def __str__(self) -> str:
        """Return estimates beside corrected ones, reliabilities, and what they take for granted."""
        lines = wrapped([f"Noise of unit means: {self.status}"])
        for table in (
            self.correction,
            self.reliability[["column", "size", "units", "reliability", "status"]],
        ):
            lines += [*frame_lines(table), ""]
        return "\n".join([*lines, *wrapped([self.statement, *self.notes])])


def noisy_means(
    mundlak: Mundlak,
    fit: Fit,
    *,
    sampled: Sequence[str] | None = None,
    population: float = np.inf,
    route: str = "fitting_constants",
) -> NoisyMeans:
    """Report the noise of unit means and the coefficients corrected for it.

    Parameters
    ----------
    mundlak : Mundlak
        With the means of all columns.
    fit : Fit
        A route with a finite variance ratio, on the panel with unit means.
    sampled : sequence of str, optional
        Terms or columns whose rows are a sample of what the unit is like. Unless given: all with a unit
        mean, but for those with one value in each period.
    population : float
        Number of rows of which the value of a unit is the mean; infinite unless given.
    route : str
        Route for the variance components of the covariates. The correction itself uses analysis of variance.

    Returns
    -------
    NoisyMeans
        With the uncorrected coefficients in any case, and a status.

    Raises
    ------
    OptionError
        If the fit does not belong here, or `population` is below the largest unit.
    """
    augmented, moments = mundlak.augmented, mundlak.raw.moments
    if fit.terms != mundlak.curve.names:
        raise OptionError("the fit is not one of the panel with unit means.")
    if not population >= float(moments.sizes.max()):
        raise OptionError(
            f"population={population!r}: the value of a unit cannot be the mean of fewer rows than were seen "
            f"({int(moments.sizes.max())})."
        )
    with_mean = tuple(column for column in augmented.varying if augmented.mean_of(column) is not None)
    if sampled is None:
        timed = period_columns(augmented.panel, augmented.varying)
        terms = tuple(column for column in with_mean if column not in timed)
    else:
        terms = chosen_columns("sampled", sampled, with_mean, augmented.panel.terms, augmented.panel.names)
    fixed = tuple(column for column in augmented.varying if column not in terms)
    reliabilities = tuple(
        mean_reliability(
            moments, column, fixed=independent(mundlak, fixed), population=population, route=route
        )
        for column in terms
    )
    others = tuple(
        name
        for name in mundlak.curve.names
        if name not in (*augmented.varying, *(added_mean(mundlak, t) for t in terms))
    )
    rows = _rows(mundlak, terms, others)
    estimates, errors = _values(fit, rows), _errors(fit, rows)
    reason = _refusal(mundlak, fit, terms)
    corrected, corrected_errors = np.full(estimates.size, np.nan), np.full(estimates.size, np.nan)
    expected, signal = np.full((moments.sizes.size, len(terms)), np.nan), np.nan
    notes: tuple[str, ...] = ()
    if not reason:
        parts = correction_at(mundlak, fit.ratio, terms, others, fixed=fixed, population=population)
        signal = parts.signal
        if not signal > NO_SIGNAL:
            reason = (
                "the unit means vary no more, net of the other columns, than their noise alone would make "
                "them: there is no between variation to correct with"
            )
        else:
            m = len(terms)
            corrected = _values(fit, parts.map(m) @ rows)
            expected = np.array([attenuate @ corrected[m : 2 * m] for attenuate in parts.attenuation])
            joint = corrected_covariance(
                mundlak,
                fit,
                _places(mundlak, terms, others),
                contextual=corrected[m : 2 * m],
                others=corrected[3 * m :],
                noise=parts.noise.T @ parts.noise,
                exposure=1.0 / moments.sizes - 1.0 / population,
                df=mundlak.raw.n - mundlak.raw.units - len(independent(mundlak, fixed)),
            )
            corrected_errors = np.sqrt(np.diag(joint))
            if signal < FRAGILE:
                notes = (
                    f"fragile: only {100.0 * signal:.3g}% of the noisiest direction of the unit means is "
                    "signal; the correction rests on a small difference, and its large-sample standard error is rough",
                )
    return NoisyMeans(
        status=f"not corrected: {reason}" if reason else APPLIED,
        statement=_statement(augmented.panel.unit_name, terms, fixed, population),
        notes=notes,
        reliabilities=reliabilities,
        sizes=moments.sizes,
        counts=moments.counts,
        terms=terms,
        others=others,
        estimates=estimates,
        corrected=corrected,
        standard_errors=errors,
        corrected_errors=corrected_errors,
        expected=expected,
        signal=signal,
    )


def _places(mundlak: Mundlak, terms: tuple[str, ...], others: tuple[str, ...]) -> Columns:
    at = mundlak.curve.names.index
    return Columns(
        varying=[at(name) for name in mundlak.augmented.varying],
        sampled=[at(name) for name in terms],
        means=[at(added_mean(mundlak, name)) for name in terms],
        others=[at(name) for name in others],
    )


def _rows(mundlak: Mundlak, terms: tuple[str, ...], others: tuple[str, ...]) -> FloatArray:
    """Return the combinations of the fit's coefficients: within, contextual, between, others."""
    names = mundlak.curve.names
    each = np.eye(len(names))
    inside = each[[names.index(term) for term in terms]]
    context = each[[names.index(added_mean(mundlak, term)) for term in terms]]
    return np.vstack([inside, context, inside + context, each[[names.index(name) for name in others]]])


def _values(fit: Fit, rows: FloatArray) -> FloatArray:
    fitted = np.isfinite(fit.beta)
    values = rows[:, fitted] @ fit.beta[fitted]
    values[(rows[:, ~fitted] != 0.0).any(axis=1)] = np.nan
    return np.asarray(values)


def _errors(fit: Fit, rows: FloatArray) -> FloatArray:
    errors = np.sqrt(fit.scale) * np.sqrt(((rows @ fit.root) ** 2).sum(axis=1))
    errors[~np.isfinite(_values(fit, rows))] = np.nan
    return np.asarray(errors)


def _refusal(mundlak: Mundlak, fit: Fit, terms: tuple[str, ...]) -> str:
    """Say why there is nothing to correct; empty if there is."""
    raw = mundlak.raw
    if not terms:
        return "no covariate has a unit mean that is a sample of rows"
    if mundlak.augmented.partial:
        return "the unit means of some columns are not in the model, so that slopes are not the within slopes"
    if not np.isfinite(fit.beta).all() or not np.isfinite(fit.ratio):
        return f"the route {fit.route!r} has no finite variance ratio or no coefficients of unit means ({fit.status})"
    lost = [term for term in terms if not raw.free_within[raw.names.index(term)]]
    if lost:
        return f"within variation does not determine the slopes of {', '.join(lost)}"
    if raw.df_within < 1:
        return "no degrees of freedom within units"
    return ""


def _statement(unit: str, terms: tuple[str, ...], fixed: tuple[str, ...], population: float) -> str:
    whole = (
        "a mean over many more rows than were seen"
        if np.isinf(population)
        else f"the mean over {population:g} rows, of which those seen are a random part"
    )
    beside = f" Taken without noise: {', '.join(fixed)}." if fixed else ""
    return (
        f"For {', '.join(terms) or 'no covariate'} the value of each {unit} is taken to be "
        f"{whole}, and deviations of single rows from it to be independent with the same covariance in all "
        f"units (trends and serial correlation make the noise larger or smaller than shown).{beside} Within "
        "slopes need no correction. The correction does not apply where the mean over the rows seen is "
        "itself the value that matters, as for a complete group or period, or for totals that the rows make "
        "up; nor where unit means only serve to obtain the within slopes. Corrected values are shown beside "
        "the estimates and replace nothing."
    )
