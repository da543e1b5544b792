"""One fit with unit means, in its two coordinates: within, contextual and between coefficients, jointly.

With ``x beta + xbar delta`` (raw plus means) or ``(x - xbar) beta + xbar (beta + delta)`` (centred plus
means) the fitted values are the same: ``beta`` is the within, ``delta`` the contextual and ``beta + delta``
the between coefficient of a column (Snijders & Bosker 2012, sec. 4.6, place from memory). One covariance of
``(beta, delta)`` gives that of all three.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.correlated.augment import Augmented
from mixbridge.display import Printed
from mixbridge.display.text import by_reason, frame_lines, wrapped
from mixbridge.errors import OptionError
from mixbridge.inference.kenward_roger import kenward_roger
from mixbridge.inference.references import Reference, Robust, pick_reference
from mixbridge.ratio import Curve
from mixbridge.routes import Fit, fit_route

__all__ = ["KINDS", "Coordinates", "coordinates"]

FloatArray = NDArray[np.float64]

KINDS = ("within", "between", "contextual")


@dataclass(frozen=True, slots=True, eq=False)
class Coordinates(Printed):
    """Within, between and contextual coefficients of one fit.

    Attributes
    ----------
    route : str
    covariance_name : str
        ``model``, ``kenward_roger`` or the name given with a robust covariance.
    terms : tuple of str
        Given columns that vary within units.
    rows : ndarray of shape (3 m, p)
        Combinations of the coefficients of the fit: all within, then all between, then all contextual. For
        the route `between` they refer to the fit without unit means, where the between coefficient is one of
        them.
    estimates : ndarray of shape (3 m,)
        NaN where not determined.
    covariance_array : ndarray of shape (3 m, 3 m)
        One joint covariance; singular by construction, ``between = within + contextual``.
    df : ndarray of shape (3 m,)
        Degrees of freedom of each under the rule.
    rule : str
        Key of `mixbridge.inference.references.RULES`.
    reasons : mapping of str to str
        Term -> why one of its coefficients is missing.
    """

    route: str
    covariance_name: str
    terms: tuple[str, ...]
    rows: FloatArray
    estimates: FloatArray
    covariance_array: FloatArray
    df: FloatArray
    rule: str
    reasons: dict[str, str]

    @property
    def labels(self) -> list[tuple[str, str]]:
        """Kind and term of each row."""
        return [(kind, term) for kind in KINDS for term in self.terms]

    @property
    def covariance(self) -> pd.DataFrame:
        """The joint covariance; rows and columns by kind and term."""
        index = pd.MultiIndex.from_tuples(self.labels, names=["kind", "term"])
        return pd.DataFrame(self.covariance_array, index=index, columns=index)

    @property
    def standard_errors(self) -> FloatArray:
        """Standard errors, in the order of `labels`."""
        return np.asarray(np.sqrt(np.diag(self.covariance_array)))

    @property
    def table(self) -> pd.DataFrame:
        """One row per term.

        ``term``; for each of ``within``, ``between``, ``contextual`` the coefficient and, with the endings
        ``_se``, ``_df``, ``_p``, its standard error, degrees of freedom and two-sided p value; ``reason``.
        """
        m, errors = len(self.terms), self.standard_errors
        p_values = [
            Reference(self.rule, float(df)).p_value(float(value / error)) if np.isfinite(value) else np.nan
            for value, error, df in zip(self.estimates, errors, self.df, strict=True)
        ]
        columns: dict[str, object] = {"term": list(self.terms)}
        for at, kind in enumerate(KINDS):
            part = slice(at * m, (at + 1) * m)
            columns[kind] = self.estimates[part]
            columns[f"{kind}_se"] = errors[part]
            columns[f"{kind}_df"] = self.df[part]
            columns[f"{kind}_p"] = p_values[part]
        columns["reason"] = [self.reasons.get(term, "") for term in self.terms]
        return pd.DataFrame(columns)

    def __str__(self) -> str:
        """Return the coefficients with standard errors, and why some are missing."""
        table = self.table
        shown = table[["term", *(name for kind in KINDS for name in (kind, f"{kind}_se")), "contextual_p"]]
        shown = shown.set_axis(["term", *(name for kind in KINDS for name in (kind, "se")), "p"], axis=1)
        texts = by_reason((term, self.reasons[term]) for term in self.terms if self.reasons.get(term))
        head = (
            f"Within, between and contextual coefficients by {self.route}, one fit with unit means; covariance "
            f"{self.covariance_name}, reference {self.rule}; p: contextual coefficient zero."
        )
        return "\n".join([*wrapped([head]), *frame_lines(shown), *wrapped(texts)])


def coordinates(
    augmented: Augmented,
    raw: Curve,
    curve: Curve,
    fit: Fit,
    *,
    rule: str | None = None,
    robust: Robust | None = None,
    covariance: str = "robust",
) -> Coordinates:
    """Return within, between and contextual coefficients of a fit on the panel with unit means.

    Parameters
    ----------
    augmented : Augmented
    raw, curve : Curve
        Of the panel without and with unit means.
    fit : Fit
        Any route on the latter.
    rule : str, optional
        Key of `mixbridge.inference.references.RULES`. Default: that of the ledger; with a robust covariance
        its own Satterthwaite rule where it has one, else ``t_units``. ``kenward_roger`` brings its own
        covariance.
    robust : Robust, optional
        A covariance from elsewhere in place of the model-based one.
    covariance : str
        Name of that covariance.

    Returns
    -------
    Coordinates

    Raises
    ------
    OptionError
        If the fit is not one of the panel with unit means, or rule and covariance do not go together.
    """
    if fit.terms != augmented.names or curve.names != augmented.names:
        raise OptionError(
            f"the fit has the terms {list(fit.terms)}, the panel with unit means {list(augmented.names)}: "
            "give a fit of the study with unit means."
        )
    if fit.route == "between":
        curve, fit = raw, fit_route(raw, "between", fit.conventions, "unit means have no order")
    terms = augmented.varying
    rows, known, reasons = _combinations(augmented, fit)
    fitted = np.isfinite(fit.beta)
    known &= ~(rows[:, ~fitted] != 0.0).any(axis=1)
    m = len(terms)
    estimates = np.full(3 * m, np.nan)
    estimates[known] = rows[known][:, fitted] @ fit.beta[fitted]
    joint = np.full((3 * m, 3 * m), np.nan)
    df = np.full(3 * m, np.nan)
    used = np.flatnonzero(known)
    name, chosen = "model", rule
    if used.size:
        inside, df[used], name, chosen = _law(
            curve, fit, rows[used], rule=rule, robust=robust, covariance=covariance
        )
        joint[np.ix_(used, used)] = inside
    return Coordinates(fit.route, name, terms, rows, estimates, joint, df, chosen or "normal", reasons)


def _combinations(augmented: Augmented, fit: Fit) -> tuple[FloatArray, NDArray[np.bool_], dict[str, str]]:
    """Return the combinations, which of them the model has, and why coefficients are missing."""
    terms, m = augmented.varying, len(augmented.varying)
    rows = np.zeros((3 * m, len(fit.terms)))
    known = np.ones(3 * m, dtype=bool)
    reasons: dict[str, str] = {}
    for j, term in enumerate(terms):
        added, at = augmented.mean_of(term), fit.terms.index(term)
        if fit.route == "between":
            rows[m + j, at] = 1.0
            known[[j, 2 * m + j]] = False
            reasons[term] = "unit means alone: within and contextual coefficient are not told apart"
        elif added is None:
            rows[j, at] = 1.0
            known[[m + j, 2 * m + j]] = False
            reasons[term] = augmented.why_no_mean(term)
        else:
            rows[j, at] = rows[m + j, at] = 1.0
            rows[[m + j, 2 * m + j], fit.terms.index(added)] = 1.0
        unknown = [
            f"{name}: {fit.not_estimable.get(name, fit.status)}"
            for name in (term, added)
            if name in fit.terms and not np.isfinite(fit.beta[fit.terms.index(name)])
        ]
        reasons[term] = "; ".join(part for part in (reasons.get(term, ""), *unknown) if part)
    return rows, known, reasons


def _law(
    curve: Curve, fit: Fit, rows: FloatArray, *, rule: str | None, robust: Robust | None, covariance: str
) -> tuple[FloatArray, FloatArray, str, str]:
    """Return covariance and degrees of freedom of some combinations, and the names of both."""
    if robust is not None:
        if rule == "kenward_roger":
            raise OptionError("Kenward-Roger brings its own adjusted covariance: give no robust one with it.")
        matrix = np.where(np.isfinite(robust.matrix), robust.matrix, 0.0)
        touched = ((rows != 0.0) & ~np.isfinite(np.diag(robust.matrix))).any(axis=1)
        inside = rows @ matrix @ rows.T
        inside[touched] = np.nan
        inside[:, touched] = np.nan
        if robust.satterthwaite is not None and rule in (None, "satterthwaite"):
            degrees = np.full(rows.shape[0], np.nan)
            for at in np.flatnonzero(~touched):
                degrees[at] = robust.satterthwaite(rows[at])
            return inside, degrees, covariance, "satterthwaite"
        if rule == "satterthwaite":
            raise OptionError(f"the covariance {covariance!r} has no Satterthwaite rule.")
        chosen = pick_reference(curve, fit, rows, rule or "t_units")
        return inside, np.array([one.df for one in chosen]), covariance, chosen[0].name
    if rule == "kenward_roger":
        adjusted = kenward_roger(curve, fit)
        half = (
            np.linalg.cholesky(np.eye(adjusted.bend.shape[0]) + 2.0 * adjusted.bend).T
            @ adjusted.root.T
            @ rows.T
        )
        return adjusted.scale * (half.T @ half), adjusted.degrees(rows), "kenward_roger", rule
    chosen = pick_reference(curve, fit, rows, rule)
    half = np.sqrt(fit.scale) * (rows @ fit.root)
    return half @ half.T, np.array([one.df for one in chosen]), "model", chosen[0].name
