"""Standard errors of one fit under every convention of presentation, in stages of rising cost.

- model: scale variants of the model-based covariance; Kenward-Roger for `reml`; for `ml` and `reml` the inverse of the
  joint observed information of coefficients and ratio;
- unit sums: CR0 and, with each multiplier, CR1: one pass over the unit products per distinct regression;
- adjusted: CR2 and CR3 with each multiplier: one small factorisation per unit besides;
- two-way: by unit and by period: passes over the rows, where periods are known.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import IdentificationError, MixbridgeError, OptionError
from mixbridge.inference.kenward_roger import kenward_roger
from mixbridge.inference.robust import DEFAULTS, MULTIPLIERS, multiplier_value, robust_covariance
from mixbridge.inference.robust_regression import Regression
from mixbridge.inference.robust_two_way import TWO_WAY_MULTIPLIERS
from mixbridge.reconcile.match_ratio import points_at
from mixbridge.reconcile.match_space import Searchable
from mixbridge.reconcile.match_values import Fitted
from mixbridge.routes import Profile, axes_of

__all__ = ["JOINT", "STAGES", "Presented", "errors_at", "joint_errors"]

FloatArray = NDArray[np.float64]
Presented = tuple[dict[str, str], FloatArray]
"""Conventions of presentation that differ from the defaults, and standard errors."""

JOINT = "observed_information"
"""Name of a covariance that is searched and is no convention of `study.fit`."""
STAGES: Mapping[str, str] = {
    "model": "model-based, every scale, Kenward-Roger, joint observed information",
    "unit sums": "CR0 and CR1, every multiplier",
    "adjusted": "CR2 and CR3, every multiplier",
    "two-way": "by unit and by period, every multiplier",
}
"""Each stage in words, in the order of the search."""


def errors_at(study: Searchable, fitted: Fitted, stage: str) -> list[Presented]:
    """Return the standard errors of a fit at one stage.

    Parameters
    ----------
    study : Searchable
    fitted : Fitted
    stage : str
        A key of `STAGES`.

    Returns
    -------
    list of (dict, ndarray)
        Empty where the stage does not apply to the route or cannot be computed on these data.
    """
    if stage == "model":
        return list(_model(fitted))
    named = {axis.name: axis.values for axis in axes_of(fitted.route)}
    if "covariance" not in named or not fitted.fit.estimated:
        return []
    if stage == "two-way":
        return list(_two_way(study, fitted)) if "two_way" in named["covariance"] else []
    wanted = ("CR0", "CR1") if stage == "unit sums" else ("CR2", "CR3")
    kinds = [kind for kind in wanted if kind in named["covariance"]]
    multipliers = [str(name) for name in named["multiplier"] if name in MULTIPLIERS]
    products = study.products
    if fitted.side.one_row_units == "dropped":
        products = products.without_sizes(1)
    found: list[Presented] = []
    base: FloatArray | None = None
    for kind in kinds:
        if base is None or stage == "adjusted":
            try:
                made = robust_covariance(
                    fitted.side.curve,
                    products,
                    fitted.fit,
                    kind="CR0" if stage == "unit sums" else kind,
                    multiplier="none",
                )
            except (IdentificationError, OptionError):
                continue
            base = np.sqrt(np.diag(made.covariance_array))
        found += list(_multiplied(kind, base, multipliers, made.regression, made.units))
    return found


def _model(fitted: Fitted) -> Iterator[Presented]:
    fit, curve = fitted.fit, fitted.side.curve
    lengths = fitted.root_lengths
    scales = {"own": fit.scale}
    if any(axis.name == "scale" for axis in axes_of(fitted.route)) and np.isfinite(fit.ratio):
        scales["gls_residuals"] = fitted.residual / (curve.n - curve.rank)
        scales["gls_residuals_n"] = fitted.residual / curve.n
    seen: list[float] = []
    for name, scale in scales.items():
        if any(abs(scale - other) <= 1e-12 * abs(other) for other in seen):
            continue  # for likelihood routes one of the variants is the route's own
        seen.append(scale)
        with np.errstate(invalid="ignore"):
            yield ({} if name == "own" else {"scale": name}), lengths * np.sqrt(scale)
    if fitted.route in ("ml", "reml") and fit.estimated:
        joint = joint_errors(fitted)
        if joint is not None:
            yield {"covariance": JOINT}, joint
    if fitted.route == "reml" and fit.estimated:
        try:
            adjusted = kenward_roger(curve, fit).covariance
        except (MixbridgeError, np.linalg.LinAlgError):
            return
        with np.errstate(invalid="ignore"):
            yield {"reference": "kenward_roger"}, np.sqrt(np.diag(adjusted))


def joint_errors(fitted: Fitted) -> FloatArray | None:
    """Return standard errors from the observed information of coefficients and ratio together.

    With ``D`` the profile deviance, its inverse has for the coefficients the block
    ``sigma_u^2 (X'V_0^-1 X)^-1 + b'(psi) b'(psi)' 2 / D''(psi)``: some programs print it for mixed models.

    Parameters
    ----------
    fitted : Fitted
        Of `ml` or `reml`.

    Returns
    -------
    ndarray or None
        None at ratio 0, and where the deviance is not convex.
    """
    fit, curve = fitted.fit, fitted.side.curve
    if not 0.0 < fit.ratio < np.inf:
        return None
    psi = np.array([fit.ratio])
    bend = float(Profile(curve, "reml" if fitted.route == "reml" else "ml").values(psi).bend[0])
    if not bend > 0.0:
        return None
    slope = points_at(curve, np.arange(curve.rank), psi).slope[0]
    return np.asarray(np.sqrt(fit.scale * fitted.root_lengths**2 + 2.0 * slope**2 / bend))


def _multiplied(
    kind: str, base: FloatArray, multipliers: list[str], regression: Regression, units: int
) -> Iterator[Presented]:
    for name in multipliers:
        if kind in ("CR0", "CR1") and (kind == "CR0") != (name == "none"):
            continue
        try:
            factor = multiplier_value(name, regression.side, units, regression.rows, regression.rank)
        except (IdentificationError, OptionError):
            continue
        presentation = {"covariance": kind}
        if name != DEFAULTS[kind]:
            presentation["multiplier"] = name
        yield presentation, base * np.sqrt(factor)


def _two_way(study: Searchable, fitted: Fitted) -> Iterator[Presented]:
    if study.panel.period_ordinals is None or fitted.route == "between":
        return
    for name in TWO_WAY_MULTIPLIERS:
        try:
            made = study.robust(fitted.fit, "two_way", name)
        except (IdentificationError, OptionError):
            continue
        variances = np.diag(made.covariance_array)
        presentation = {"covariance": "two_way"}
        if name != "units":
            presentation["multiplier"] = name
        with np.errstate(invalid="ignore"):
            yield presentation, np.sqrt(np.where(variances >= 0.0, variances, np.nan))
