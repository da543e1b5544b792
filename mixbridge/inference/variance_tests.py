"""Tests of sigma_a^2 = 0: exact, score, likelihood ratio, each under the reference it is usually given.

With e the pooled residuals (``r(0) = e'e``) and ``d = e'ZZ'e / e'e``:

- *F of unit intercepts*: ``F(0)`` of `pivot`; exact under normality.
- *Lagrange multiplier*, two-sided: ``n^2 (d - 1)^2 / (2 (sum T_i^2 - n))`` (Breusch & Pagan 1980; unequal
  sizes Baltagi & Li 1990): the squared ML score at 0 over the expected information with ``sigma_u^2``
  partialled out.
- its *signed root*, one-sided (Honda 1985).
- *standardised*: ``(d - E d) / sd d`` with the exact moments under sigma_a^2 = 0 (Moulton & Randolph 1989). d
  and ``e'e`` are independent, so

      E d = tr(MZZ')/(n - K),   Var d = 2 [(n - K) tr(MZZ'MZZ') - tr(MZZ')^2] / [(n - K)^2 (n - K + 2)]

- *likelihood ratio* and *restricted likelihood ratio*: with their finite-sample null laws by simulation (see
  `likelihood_ratio`), and with the half-and-half mixture of chi-squares with 0 and 1 degrees of freedom, an
  approximation that is often poor.

``exact`` marks a p-value that is uniform (or, where the statistic can be zero, valid at every attainable
level) under normality and sigma_a^2 = 0 in samples of this size and design.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
import scipy

from mixbridge.errors import DataError
from mixbridge.inference.likelihood_ratio import NullLaw, mixture_p, null_laws, observed_ratio
from mixbridge.inference.pivot import no_pivot, pivot_of
from mixbridge.inference.spectrum import spectrum_of
from mixbridge.ratio import Curve
from mixbridge.routes import Fit, fit_route
from mixbridge.routes.likelihood import Kind

__all__ = ["TESTS", "Multiplier", "multiplier_of", "variance_tests"]

TESTS = (
    "f_unit_intercepts",
    "lagrange_multiplier",
    "lagrange_multiplier_one_sided",
    "lagrange_multiplier_standardised",
    "likelihood_ratio",
    "restricted_likelihood_ratio",
)
"""Keys of the tests, in the order of the table."""


@dataclass(frozen=True, slots=True)
class Multiplier:
    """The Lagrange multiplier statistic in its three forms.

    Attributes
    ----------
    two_sided, one_sided, standardised : float
        NaN where not computable.
    reason : str
        Why not, else empty.
    reason_standardised : str
    """

    two_sided: float
    one_sided: float
    standardised: float
    reason: str = ""
    reason_standardised: str = ""


@dataclass(frozen=True, slots=True)
class _Row:
    test: str
    statistic: float
    reference: str
    df: float
    df_denominator: float
    p_value: float
    monte_carlo_error: float
    exact: bool
    note: str


def variance_tests(
    curve: Curve,
    fits: Mapping[str, Fit],
    seed: int = 20_040,
    draws: int = 100_000,
    *,
    progress: Callable[[int, int], None] | None = None,
) -> pd.DataFrame:
    """Tabulate the tests of sigma_a^2 = 0.

    Parameters
    ----------
    curve : Curve
    fits : mapping of str to Fit
        Fits of this panel; `ml` and `reml` are taken from here, or fitted if they are not here (or leave out
        one-row units).
    seed, draws : int
        Of the simulated null laws; no simulation if `draws` is 0.
    progress : callable, optional
        Called with draws done and draws asked for.

    Returns
    -------
    DataFrame
        Columns test, statistic, reference, df, df_denominator, p_value, monte_carlo_error (standard error of
        a simulated p-value), exact, note. What cannot be computed is NaN and the note says why.
    """
    rows = [_f_test(curve), *_multiplier_rows(curve)]
    laws: Mapping[Kind, NullLaw] | str = "no draws asked for"
    why = no_pivot(curve)
    if draws != 0:
        try:
            laws = why if why is not None else null_laws(spectrum_of(curve), draws, seed, progress=progress)
        except DataError as reason:
            laws = str(reason)
    for test, kind in zip(TESTS[4:], ("ml", "reml"), strict=True):
        rows += _ratio_rows(curve, fits, test, "ml" if kind == "ml" else "reml", laws)
    return pd.DataFrame(
        [[getattr(row, name) for name in _Row.__slots__] for row in rows], columns=list(_Row.__slots__)
    )


def multiplier_of(curve: Curve) -> Multiplier:
    """Return the three Lagrange multiplier statistics."""
    n, k, sizes, counts = curve.n, curve.rank, curve.sizes, curve.counts
    if n == curve.units:
        reason = "every unit has one row, so unit effects and errors cannot be told apart"
        return Multiplier(np.nan, np.nan, np.nan, reason, reason)
    means = curve.between_products[:, :k, :k]
    d = float(sizes**2 @ curve.between_products[:, k, k])
    spread = float(counts @ sizes**2) - n
    one_sided = n * (d - 1.0) / np.sqrt(2.0 * spread)
    once = n - float(sizes**2 @ np.trace(means, axis1=1, axis2=2))
    inner = np.tensordot(sizes**2, means, axes=1)
    twice = float(counts @ sizes**2 - 2.0 * (sizes**3 @ np.trace(means, axis1=1, axis2=2)) + (inner**2).sum())
    df = n - k
    variance = 2.0 * (df * twice - once**2) / (df**2 * (df + 2.0))
    if not variance > 1e-12 * (once / df) ** 2:
        reason = "the ratio of quadratic forms does not vary: nothing is left within units, or between them"
        return Multiplier(one_sided**2, one_sided, np.nan, "", reason)
    return Multiplier(one_sided**2, one_sided, (d - once / df) / np.sqrt(variance))


def _f_test(curve: Curve) -> _Row:
    why = no_pivot(curve)
    if why is not None:
        return _Row(TESTS[0], np.nan, "F", np.nan, np.nan, np.nan, np.nan, False, f"not computed: {why}")
    pivot = pivot_of(curve)
    note = "equal unit intercepts; exact under normality"
    return _Row(
        TESTS[0],
        pivot.statistic(0.0),
        "F",
        pivot.df_between,
        pivot.df_within,
        pivot.p_value(),
        np.nan,
        True,
        note,
    )


def _multiplier_rows(curve: Curve) -> list[_Row]:
    found = multiplier_of(curve)
    two, one, three = found.two_sided, found.one_sided, found.standardised
    large = "large-sample in the number of units"
    rows = [
        (
            TESTS[1],
            two,
            "chi-square",
            1.0,
            float(scipy.stats.chi2.sf(two, 1)),
            f"two-sided; {large}",
            found.reason,
        ),
        (
            TESTS[2],
            one,
            "normal",
            np.nan,
            float(scipy.stats.norm.sf(one)),
            f"against a positive variance; {large}",
            found.reason,
        ),
        (
            TESTS[3],
            three,
            "normal",
            np.nan,
            float(scipy.stats.norm.sf(three)),
            f"against a positive variance; mean and variance exact, shape {large}",
            found.reason_standardised,
        ),
    ]
    return [
        _Row(
            test,
            value,
            reference,
            df,
            np.nan,
            p,
            np.nan,
            False,
            f"not computed: {reason}" if reason else note,
        )
        for test, value, reference, df, p, note, reason in rows
    ]


def _ratio_rows(
    curve: Curve, fits: Mapping[str, Fit], test: str, kind: Kind, laws: Mapping[Kind, NullLaw] | str
) -> list[_Row]:
    fit = fits.get(kind)
    if fit is None or fit.rows != curve.n:
        fit = fit_route(curve, kind, {}, "not needed")
    simulated, mixture = "finite-sample law, simulated", "mixture, half chi-square 0 and half chi-square 1"
    if not np.isfinite(fit.ratio):
        note = f"not computed: {fit.status}"
        return [
            _Row(test, np.nan, name, np.nan, np.nan, np.nan, np.nan, False, note)
            for name in (simulated, mixture)
        ]
    statistic = observed_ratio(curve, kind, fit.ratio)
    if isinstance(laws, str):
        first = _Row(
            test, statistic, simulated, np.nan, np.nan, np.nan, np.nan, False, f"not computed: {laws}"
        )
    else:
        law = laws[kind]
        p, error = law.p_value(statistic)
        note = (
            f"exact under normality up to the Monte Carlo error; {law.sorted.size} draws, seed {law.seed}; "
            f"zero in a share {law.zero:.3f} of them"
        )
        if statistic > law.sorted[-1]:
            note = f"no draw reached it, so p is known to be small only: more draws would tell more; {note}"
        first = _Row(test, statistic, simulated, np.nan, np.nan, p, error, True, note)
    note = "approximation for many independent units; compare the simulated row"
    return [first, _Row(test, statistic, mixture, 1.0, np.nan, mixture_p(statistic), np.nan, False, note)]
