"""Reference distributions for coefficients: every rule, one table per term, and the default of the ledger."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import IdentificationError, OptionError
from mixbridge.inference.exactness import ExactLaw, exact_law
from mixbridge.inference.kenward_roger import kenward_roger
from mixbridge.inference.law import Reference
from mixbridge.inference.satterthwaite import satterthwaite
from mixbridge.moments import column_table
from mixbridge.ratio import Curve
from mixbridge.routes.fitting import REFERENCE_ROUTES
from mixbridge.routes.record import Fit

__all__ = [
    "RULES",
    "Reference",
    "Robust",
    "default_rule",
    "degrees_of_freedom",
    "inference_table",
    "pick_reference",
    "row_of",
]

FloatArray = NDArray[np.float64]

RULES: Mapping[str, str] = {
    "normal": "normal distribution, no degrees of freedom: a large number of units",
    "t_residual": "t with the degrees of freedom of the route's own residual form "
    "(n - K, n - N - K_w, N - K_p, differences - rank)",
    "t_rows": "t with n - K, as if rows were independent",
    "t_within": "t with n - N - K_w",
    "t_units": "t with N - 1",
    "t_between": "t with N - K_p, rank of the unit means",
    "t_constant": "t with N - K_c, unit-constant directions",
    "by_level": "t with n - N - K_w for a column that varies within units, N - K_p for one that does not; "
    "rule of thumb for columns that vary both ways (counted as within) and for combinations (smallest of "
    "their columns)",
    "satterthwaite": "t matched to mean and variance of the estimated variance (Satterthwaite 1946)",
    "kenward_roger": "t with degrees of freedom and adjusted covariance of Kenward & Roger 1997; REML only",
}
"""Each rule with what it means."""

SIMPLE: Mapping[str, tuple[str, Callable[[Curve, Fit], float]]] = {
    "normal": ("", lambda curve, fit: np.inf),
    "t_residual": ("the route's residual form", lambda curve, fit: fit.residual_df),
    "t_rows": ("n - K", lambda curve, fit: float(curve.n - curve.rank)),
    "t_within": ("n - N - K_w", lambda curve, fit: float(curve.df_within)),
    "t_units": ("N - 1", lambda curve, fit: float(curve.units - 1)),
    "t_between": ("N - K_p", lambda curve, fit: float(curve.units - curve.rank_between)),
    "t_constant": ("N - K_c", lambda curve, fit: float(curve.units - curve.rank_constant)),
}


@dataclass(frozen=True, slots=True, eq=False)
class Robust:
    """A covariance of the coefficients from elsewhere (cluster-robust, two-way), with its references.

    Attributes
    ----------
    matrix : ndarray of shape (p, p)
        Covariance, in the order of the terms; NaN for coefficients that are not estimable.
    rules : tuple of str
        Keys of simple `RULES` to show with it.
    satterthwaite : callable or None
        Degrees of freedom of one combination ``l`` for this covariance.
    joint : callable or None
        For rows L: denominator degrees of freedom and scaling of the F statistic.
    """

    matrix: FloatArray
    rules: tuple[str, ...] = ("normal", "t_units")
    satterthwaite: Callable[[FloatArray], float] | None = None
    joint: Callable[[FloatArray], tuple[float, float]] | None = None


def default_rule(fit: Fit) -> str:
    """Return the ledger's rule: the classical t for reference routes, Satterthwaite on the curve."""
    return "t_residual" if fit.route in REFERENCE_ROUTES else "satterthwaite"


def pick_reference(
    curve: Curve, fit: Fit, rows: FloatArray | None = None, rule: str | None = None
) -> tuple[Reference, ...]:
    """Return the reference of each combination under one rule.

    Parameters
    ----------
    curve, fit
        The fit and the panel it was made on.
    rows : ndarray of shape (q, p), optional
        Combinations; every single term unless given.
    rule : str, optional
        Key of `RULES`; `default_rule` unless given. The default for `first_difference` counts its differences
        as independent, which they are not where a unit has more than one.

    Returns
    -------
    tuple of Reference
        With `kenward_roger` the standard error must be that of the adjusted covariance.
    """
    combinations = np.eye(curve.rank) if rows is None else rows
    name = default_rule(fit) if rule is None else rule
    return tuple(Reference(name, float(df)) for df in degrees_of_freedom(curve, fit, combinations, name))


def degrees_of_freedom(curve: Curve, fit: Fit, rows: FloatArray, rule: str) -> FloatArray:
    """Return the degrees of freedom of each combination under one rule; NaN where the rule has none.

    Raises
    ------
    OptionError
        If the rule is not known, or is `kenward_roger` on another route than `reml`.
    """
    if rule not in RULES:
        raise OptionError.not_among("reference", rule, RULES)
    if rule == "satterthwaite":
        return satterthwaite(curve, fit, rows).df
    if rule == "kenward_roger":
        return kenward_roger(curve, fit).degrees(rows)
    if rule == "by_level":
        inside, means = float(curve.df_within), float(curve.units - curve.rank_between)
        each = np.where(_varies_within(curve), inside, means)
        values = np.array([each[row != 0.0].min(initial=np.inf) for row in rows])
    else:
        values = np.full(rows.shape[0], SIMPLE[rule][1](curve, fit))
    return np.where(values > 0.0, values, np.nan)


def row_of(fit: Fit, term: str) -> FloatArray:
    """Return the combination that picks one term.

    Raises
    ------
    OptionError
        If there is no such term.
    IdentificationError
        If the route does not estimate it; the message has the reason.
    """
    if term not in fit.terms:
        raise OptionError.not_among("term", term, fit.terms)
    at = fit.terms.index(term)
    if not np.isfinite(fit.beta[at]):
        reason = fit.not_estimable.get(term, fit.status)
        raise IdentificationError(f"route {fit.route!r} does not estimate {term!r}: {reason}.")
    row = np.zeros(len(fit.terms))
    row[at] = 1.0
    return row


def inference_table(
    curve: Curve,
    fits: Mapping[str, Fit],
    fit: Fit,
    term: str,
    confidence: float = 0.95,
    *,
    robust: Mapping[str, Robust] | None = None,
) -> pd.DataFrame:
    """Put estimate, standard error, reference, interval and p value of one term under each rule.

    Parameters
    ----------
    curve : Curve
        The panel `fit` was made on.
    fits : mapping of str to Fit
        Other fits of the same panel; Kenward-Roger is shown from ``fits["reml"]`` where `fit` is another
        random-effects route.
    fit : Fit
        The route shown.
    term : str
    confidence : float
        Between 0 and 1.
    robust : mapping of str to Robust, optional
        Further covariances by name.

    Returns
    -------
    DataFrame
        One row per rule and covariance: ``rule, route, covariance, estimate, standard_error, reference, df,
        lower, upper, p_value, exact, why``. ``exact``: whether the law holds exactly under the model with
        normal errors in this design, see `mixbridge.inference.exactness`; ``why`` gives the reason, and what
        a rule means at an estimated ratio of zero.
    """
    if not 0.0 < confidence < 1.0:
        raise OptionError(f"confidence={confidence!r} is not allowed; allowed: a number between 0 and 1.")
    row = row_of(fit, term)
    law = exact_law(curve, fit, row)
    estimate, own = _estimate(fit, row), _model_error(fit, row)
    lines: list[dict[str, object]] = []
    for rule in _rules(curve, fit):
        reference = pick_reference(curve, fit, row[None], rule)[0]
        exact, why = _judged(reference, law)
        why = _said(curve, fit, row, rule=rule, reference=reference, why=why)
        lines.append(
            _line(
                rule=rule,
                route=fit.route,
                covariance="model",
                estimate=estimate,
                error=own,
                reference=reference,
                confidence=confidence,
                exact=exact,
                why=why,
            )
        )
    restricted = fit if fit.route == "reml" else fits.get("reml")
    if restricted is not None and fit.route not in REFERENCE_ROUTES:
        lines.append(_kenward_roger_line(curve, restricted, row, confidence))
    for name, given in (robust or {}).items():
        lines.extend(_robust_lines(curve, fit, row, name=name, given=given, confidence=confidence))
    return pd.DataFrame(lines)


def _line(
    *,
    rule: str,
    route: str,
    covariance: str,
    estimate: float,
    error: float,
    reference: Reference,
    confidence: float,
    exact: bool,
    why: str,
) -> dict[str, object]:
    lower, upper = reference.interval(estimate, error, confidence)
    return {
        "rule": rule,
        "route": route,
        "covariance": covariance,
        "estimate": estimate,
        "standard_error": error,
        "reference": reference.text,
        "df": reference.df,
        "lower": lower,
        "upper": upper,
        "p_value": reference.p_value(estimate / error),
        "exact": exact,
        "why": why,
    }


def _rules(curve: Curve, fit: Fit) -> list[str]:
    """Return the rules to show; the route's own residual form only where it is not n - K already."""
    return [
        rule
        for rule in RULES
        if rule != "kenward_roger" and not (rule == "t_residual" and fit.residual_df == curve.n - curve.rank)
    ]


def _judged(reference: Reference, law: ExactLaw) -> tuple[bool, str]:
    if not np.isfinite(law.df):
        return False, law.why
    if np.isfinite(reference.df) and abs(reference.df - law.df) <= 1e-7 * law.df:
        return True, law.why
    return False, f"exact is t({law.df:g}): {law.why}"


def _said(curve: Curve, fit: Fit, row: FloatArray, *, rule: str, reference: Reference, why: str) -> str:
    """Add what a rule means here: no degrees of freedom, the boundary, a rule of thumb."""
    if rule == "satterthwaite":
        why = "; ".join([*satterthwaite(curve, fit, row[None]).notes, why])
    elif not reference.available:
        text = SIMPLE[rule][0] if rule in SIMPLE else "the level of the term"
        why = f"no degrees of freedom left by {text}; {why}"
    elif rule == "by_level":
        used = (
            column_table(curve.moments)
            .set_index("column")["level"]
            .loc[[curve.names[j] for j in np.flatnonzero(row)]]
        )
        if (used == "both").any():
            why = f"rule of thumb: the column varies within and between units and is counted as within; {why}"
    return why


def _kenward_roger_line(curve: Curve, fit: Fit, row: FloatArray, confidence: float) -> dict[str, object]:
    reference, error, exact = Reference("kenward_roger", np.nan), np.nan, False
    try:
        adjusted = kenward_roger(curve, fit)
    except OptionError as reason:
        why = str(reason)
    else:
        reference = Reference("kenward_roger", float(adjusted.degrees(row[None])[0]))
        error, own = adjusted.standard_error(row), _model_error(fit, row)
        exact, why = _judged(reference, exact_law(curve, fit, row))
        if exact and abs(error - own) > 1e-8 * own:
            exact, why = False, f"the standard error is adjusted; {why}"
        why = "; ".join([*adjusted.notes, why])
    return _line(
        rule="kenward_roger",
        route=fit.route,
        covariance="kenward_roger",
        estimate=_estimate(fit, row),
        error=error,
        reference=reference,
        confidence=confidence,
        exact=exact,
        why=why,
    )


def _robust_lines(
    curve: Curve, fit: Fit, row: FloatArray, *, name: str, given: Robust, confidence: float
) -> list[dict[str, object]]:
    used = np.flatnonzero(row)
    error = float(np.sqrt(row[used] @ given.matrix[np.ix_(used, used)] @ row[used]))
    references = [pick_reference(curve, fit, row[None], rule)[0] for rule in given.rules]
    if given.satterthwaite is not None:
        references.append(Reference("satterthwaite", float(given.satterthwaite(row))))
    return [
        _line(
            rule=one.name,
            route=fit.route,
            covariance=name,
            estimate=_estimate(fit, row),
            error=error,
            reference=one,
            confidence=confidence,
            exact=False,
            why="a sandwich covariance has no exact law in finite samples",
        )
        for one in references
    ]


def _estimate(fit: Fit, row: FloatArray) -> float:
    used = row != 0.0  # coefficients that are not estimable are NaN
    return float(row[used] @ fit.beta[used])


def _model_error(fit: Fit, row: FloatArray) -> float:
    """Return the model-based standard error, through the root: no digits are lost to offsets of columns."""
    return float(np.sqrt(fit.scale) * np.sqrt(((fit.root.T @ row) ** 2).sum()))


def _varies_within(curve: Curve) -> NDArray[np.bool_]:
    levels = column_table(curve.moments).set_index("column")["level"]
    return np.array([levels.loc[name] in ("within", "both") for name in curve.names])
