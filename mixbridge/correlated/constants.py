"""What identifies the coefficient of a column that is constant within units, and what unit means do to it.

Generalised least squares at ratio ψ gives such a column z the coefficient of a regression between units, with
weights ``T/(1 + T psi)``, of ``ybar_i - xbar_i'b`` on all unit-constant columns. Without unit means b are the
slopes of the same fit; with the unit mean of every column that varies within units, b are the between
coefficients of these columns: the coefficient of z is then that of a regression on unit means alone.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.correlated.augment import Augmented
from mixbridge.moments import column_table
from mixbridge.moments.coordinates import model_coordinates
from mixbridge.ratio import Curve
from mixbridge.routes import Fit

__all__ = ["constant_columns", "share_left", "unit_constant_table"]

FloatArray = NDArray[np.float64]

COLUMNS = [
    "term",
    "route",
    "identified_by",
    "estimate",
    "standard_error",
    "identified_by_with_means",
    "with_means",
    "with_means_se",
    "change",
    "change_in_se",
    "share_left",
    "meaning",
]


def constant_columns(curve: Curve) -> tuple[str, ...]:
    """Return the covariates that are constant within units and vary between them."""
    table = column_table(curve.moments).set_index("column")["level"]
    return tuple(name for name in curve.names if table[name] == "between")


def share_left(augmented: Augmented, curve: Curve, term: str) -> float:
    """Return the share of a unit-constant column's variation that the unit means leave to it.

    Parameters
    ----------
    augmented : Augmented
    curve : Curve
        Of the panel with unit means.
    term : str
        A column that is constant within units.

    Returns
    -------
    float
        Residual sum of squares of the column on the other unit-constant columns and the unit means, over that
        on the other unit-constant columns alone; units weighted by their rows.
    """
    model = model_coordinates(curve.moments)
    weights = np.sqrt(curve.moments.sizes.astype(float))
    rows = (weights[:, None, None] * model.between).reshape(-1, len(curve.names) + 1)
    others = [
        name
        for name in curve.names
        if name not in (*augmented.varying, *augmented.added, term)  # unit-constant, the intercept included
    ]
    target = rows[:, curve.names.index(term)]
    alone = _rest(rows[:, [curve.names.index(name) for name in others]], target)
    beside = _rest(rows[:, [curve.names.index(name) for name in (*others, *augmented.added)]], target)
    return beside / alone


def unit_constant_table(
    augmented: Augmented, raw: Curve, curve: Curve, fits: Mapping[str, Fit], with_means: Mapping[str, Fit]
) -> pd.DataFrame:
    """Set the coefficients of unit-constant columns without and with unit means side by side.

    Parameters
    ----------
    augmented : Augmented
    raw, curve : Curve
        Without and with the unit means.
    fits, with_means : mapping of str to Fit
        Routes by key, without and with the unit means; those in both are shown.

    Returns
    -------
    DataFrame
        One row per column and route: ``term, route, identified_by, estimate, standard_error,
        identified_by_with_means, with_means, with_means_se, change, change_in_se, share_left, meaning``.
        ``change_in_se`` is in standard errors of the estimate without unit means; ``share_left`` as from
        `share_left`; ``meaning`` says in words what changed. Empty if no covariate is constant within units.
    """
    unit = augmented.panel.unit_name
    rows: list[list[object]] = []
    for term in constant_columns(raw):
        left = share_left(augmented, curve, term)
        for key in (key for key in fits if key in with_means):
            before, after = _estimate(fits[key], term), _estimate(with_means[key], term)
            change = after[0] - before[0]
            rows.append(
                [
                    term,
                    key,
                    _identified(key, unit, fits[key], term),
                    *before,
                    _identified_with_means(key, unit, with_means[key], term, augmented.partial),
                    *after,
                    change,
                    change / before[1],
                    left,
                    _meaning(augmented, key, term, before=before, after=after, left=left),
                ]
            )
    return pd.DataFrame(rows, columns=COLUMNS)


def _rest(x: FloatArray, y: FloatArray) -> float:
    """Return the residual sum of squares of y on some columns."""
    length = np.sqrt((x**2).sum(axis=0))
    columns = x[:, length > 0.0] / length[length > 0.0]
    left = y - columns @ np.linalg.lstsq(columns, y, rcond=None)[0] if columns.size else y
    return float(left @ left)


def _estimate(fit: Fit, term: str) -> tuple[float, float]:
    return float(fit.coefficients[term]), float(fit.standard_errors[term])


def _identified(key: str, unit: str, fit: Fit, term: str) -> str:
    if not np.isfinite(fit.coefficients[term]):
        return f"nothing: {fit.not_estimable.get(term, fit.status)}"
    if key == "between":
        return f"variation between {unit} means, net of the means of the other columns"
    return (
        f"variation between {unit} units, net of the other columns at their slopes in this fit, which mix "
        "within and between variation"
    )


def _identified_with_means(key: str, unit: str, fit: Fit, term: str, partial: bool) -> str:
    if not np.isfinite(fit.coefficients[term]):
        return f"nothing: {fit.not_estimable.get(term, fit.status)}"
    if key == "between":
        return "as without unit means: a regression on unit means has them already"
    some = "the unit means in the model and of the other columns" if partial else "the unit means"
    return f"variation between {unit} units, net of {some}"


def _meaning(
    augmented: Augmented,
    key: str,
    term: str,
    *,
    before: tuple[float, float],
    after: tuple[float, float],
    left: float,
) -> str:
    unit = augmented.panel.unit_name
    if not (np.isfinite(before[0]) and np.isfinite(after[0])):
        return (
            f"{term} does not change within units; {key} removes all differences between units and with them "
            f"every trace of {term}. Unit means do not bring it back."
            if key in ("within", "first_difference")
            else f"{key} gives no coefficient of {term}."
        )
    if key == "between":
        return (
            f"A regression on unit means compares averages already: unit means change nothing. {term} must "
            f"be unrelated to the {unit} effect, given the averages of the other columns."
        )
    shared = 100.0 * (1.0 - left)
    others = ", ".join(augmented.source.values())
    same = f"the same value of {others}" if augmented.source else "the same covariates"
    move = after[0] - before[0]
    in_se = f", {abs(move) / before[1]:.2g} standard errors" if before[1] > 0.0 else ""
    return (
        f"Without unit means, {before[0]:.4g} (standard error {before[1]:.3g}) compares rows of units that "
        f"differ in {term} and have {same}; with them, {after[0]:.4g} ({after[1]:.3g}) compares units that "
        f"have the same averages of {others} too: a move of {move:.3g}{in_se}. The averages share "
        f"{shared:.3g}% of what {term} varies between units beside the other unit-constant columns; "
        f"{100.0 * left:.3g}% is left to identify it. Unit means free the slopes of columns that vary within "
        f"units, not {term}: it must still be unrelated to what is left of the {unit} effect. If {term} "
        "itself moves these averages, that part of its effect is not in the coefficient with unit means."
    )
