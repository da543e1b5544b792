"""Internal instruments: columns that the analyst declares unrelated to the unit effect identify the others.

With columns X that vary within units and Z that do not, ``1`` marking those declared unrelated to the unit
effect,

    y_it = x1_it'b1 + x2_it'b2 + z1_i'g1 + z2_i'g2 + alpha_i + u_it

is estimated in four steps (Hausman & Taylor 1981):

1. within regression: ``b_w`` and ``sigma_u^2 = RSS_w/(n - N - K_w)``;
2. unit remainders ``d_i = ybar_i - xbar_i'b_w`` on Z by two-stage least squares with ``x1`` and ``z1`` as
   instruments;
3. with its residuals r_i, ``sigma_a^2 = mean(r_i^2) - sigma_u^2 mean(1/T_i)``: consistent, without a correction
   for the coefficients of step 2;
4. two-stage least squares on quasi-demeaned rows, ``theta_i = 1 - (1 + T_i psi)^(-1/2)``, with the instruments

       Qx (all columns),   (1 - theta_i) x1bar_i,   (1 - theta_i) z1_i

   and covariance ``sigma_u^2 (R'P_A R)^-1``.

The instruments of the second kind are the unit means of ``x1`` (Breusch, Mizon & Schmidt 1989, for this
reading). Amemiya & MaCurdy (1986) take the values of ``x1`` in each period instead, which needs a balanced
panel and assumes more: see `period_values`.

Instruments of the first kind have no between part and those of the second no within part, so all
cross-products are ``W`` and weighted sums of the ``B_T``: nothing here reads rows. With unequal sizes it
matters whether the second kind is quasi-demeaned as above or not (weights ``(1 - theta_i)``); in balanced
panels the two span the same space.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from mixbridge.correlated.choice import chosen_columns
from mixbridge.correlated.instrumented import Instrumented, Roles, estimate
from mixbridge.errors import IdentificationError, OptionError
from mixbridge.moments import Moments, column_table, span_of
from mixbridge.moments.coordinates import ModelCoordinates
from mixbridge.moments.whitening import identified

__all__ = ["FirstStep", "Setting", "Weighting", "first_step_of", "hausman_taylor", "prepare"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
Weighting = Literal["quasi_demeaned", "plain"]
FirstForm = Literal["unit_means", "rows"]
ScaleForm = Literal["own", "residuals"]


@dataclass(frozen=True, slots=True, eq=False)
class Setting:
    """What all estimators with internal instruments share.

    Attributes
    ----------
    moments : Moments
    model : ModelCoordinates
    roles : Roles
        Which column is what.
    x, x1, z, z1, z2 : ndarray of int
        Positions of columns in the model.
    slopes : ndarray of shape (len(x),)
        Within slopes, in model coordinates.
    within_variance : float
        ``sigma_u^2`` over the squared scale of the outcome.
    """

    moments: Moments
    model: ModelCoordinates
    roles: Roles
    x: IntArray
    x1: IntArray
    z: IntArray
    z1: IntArray
    z2: IntArray
    slopes: FloatArray
    within_variance: float

    @property
    def sizes(self) -> FloatArray:
        """Distinct unit sizes."""
        return self.moments.sizes.astype(float)

    def floor(self, columns: IntArray) -> FloatArray:
        """Return the length, over all rows, that rounding of the data can produce in some columns."""
        return np.asarray(self.model.floor[columns])

    def means(self, weights: FloatArray) -> FloatArray:
        """Return a factor of ``sum_T weights_T^2 B_T`` in model columns."""
        between = weights[:, None, None] * self.model.between
        return np.asarray(between.reshape(-1, between.shape[2]))


@dataclass(frozen=True, slots=True)
class FirstStep:
    """Variance components from the first step, over the squared scale of the outcome."""

    idiosyncratic: float
    unit: float

    @property
    def ratio(self) -> float:
        """``psi``, zero where the unit variance came out negative."""
        return max(self.unit, 0.0) / self.idiosyncratic


def hausman_taylor(
    moments: Moments,
    unrelated: Sequence[str],
    *,
    terms: Mapping[str, slice] | None = None,
    instruments: Weighting = "quasi_demeaned",
    first_step: FirstForm = "unit_means",
    scale: ScaleForm = "own",
) -> Instrumented:
    """Estimate with internal instruments after Hausman & Taylor (1981), from closed moments.

    Parameters
    ----------
    moments : Moments
    unrelated : sequence of str
        Columns or terms declared unrelated to the unit effect, among those that vary within units and those
        that do not. The constant always is.
    terms : mapping of str to slice, optional
        Columns of each term of the formula.
    instruments : {"quasi_demeaned", "plain"}
        Whether instruments between units are transformed for unequal sizes.
    first_step : {"unit_means", "rows"}
        Whether step 2 has the unit means of ``x1`` as instruments, or its values row by row; the latter is
        noisier and also in print.
    scale : {"own", "residuals"}
        Variance that multiplies the inverse cross-products: ``sigma_u^2`` of step 1, or the residual sum of
        squares of step 4 over ``n - K``.

    Returns
    -------
    Instrumented

    Raises
    ------
    IdentificationError
        If there are fewer instruments than unit-constant columns that may be related to the unit effect, if
        these do not determine the coefficients, or if the within regression leaves no variance.
    OptionError
        If a name or an option is not known.
    """
    for name, value, allowed in (
        ("instruments", instruments, ("quasi_demeaned", "plain")),
        ("first_step", first_step, ("unit_means", "rows")),
        ("scale", scale, ("own", "residuals")),
    ):
        if value not in allowed:
            raise OptionError.not_among(name, value, allowed)
    setting = prepare(moments, unrelated, terms)
    step = first_step_of(setting, first_step)
    shrink = 1.0 / np.sqrt(1.0 + setting.sizes * step.ratio)
    weights = np.sqrt(setting.sizes)
    picks = np.r_[setting.z1, setting.x1]
    regressors = setting.means(weights * shrink)
    given = (regressors if instruments == "quasi_demeaned" else setting.means(weights))[:, picks]
    return estimate(
        moments=moments,
        model=setting.model,
        roles=setting.roles,
        components=(step.unit, step.idiosyncratic),
        regressors=regressors,
        instruments=given,
        floor=setting.floor(picks),
        excluded=regressors[:, setting.x1],
        excluded_floor=setting.floor(setting.x1),
        method="hausman_taylor",
        conventions={"instruments": instruments, "first_step": first_step, "scale": scale},
        statement=_statement(setting, instruments),
    )


def prepare(moments: Moments, unrelated: Sequence[str], terms: Mapping[str, slice] | None = None) -> Setting:
    """Sort the columns by what the analyst declares, and take the within regression; arguments as above."""
    model, within_span, _ = identified(moments)
    levels = column_table(moments).set_index("column")["level"]
    names = model.names
    covariates = tuple(name for name in names if levels[name] != "constant")
    chosen = chosen_columns("unrelated", unrelated, covariates, terms, names)
    inside = [name for name in names if levels[name] in ("within", "both")]
    constant = [name for name in names if name not in inside]
    if not inside:
        raise IdentificationError(
            "no column varies within units: there is no within regression to start from."
        )
    kept = {names[j] for j in within_span.kept}
    hidden = [name for name in inside if name not in kept]
    if hidden:
        raise IdentificationError(
            f"within variation does not tell {', '.join(hidden)} from other columns: internal instruments "
            "start from the within slopes. Leave one column of each dependency out of the formula."
        )
    roles = Roles(
        x1=tuple(name for name in inside if name in chosen),
        x2=tuple(name for name in inside if name not in chosen),
        z1=tuple(name for name in constant if name in chosen or levels[name] == "constant"),
        z2=tuple(name for name in constant if name not in chosen and levels[name] != "constant"),
    )
    at = {name: j for j, name in enumerate(names)}

    def places(columns: Sequence[str]) -> IntArray:
        return np.array([at[name] for name in columns], dtype=np.intp)

    x = places(inside)
    length = np.sqrt((model.within[:, x] ** 2).sum(axis=0))
    slopes = np.linalg.lstsq(model.within[:, x] / length, model.within[:, -1], rcond=None)[0] / length
    left = model.within[:, -1] - model.within[:, x] @ slopes
    df = moments.rows - moments.units - x.size
    whole = float((model.within[:, -1] ** 2).sum())
    if df < 1 or not left @ left > 1e-26 * whole:
        raise IdentificationError(
            f"the within regression leaves no variance (n - N - K_w = {df}): there are no components to "
            "weight with."
        )
    return Setting(
        moments,
        model,
        roles,
        x,
        places(roles.x1),
        places([name for name in names if name in constant]),
        places(roles.z1),
        places(roles.z2),
        slopes,
        float(left @ left) / df,
    )


def first_step_of(setting: Setting, form: FirstForm = "unit_means") -> FirstStep:
    """Return the consistent components of steps 1 to 3.

    Parameters
    ----------
    setting : Setting
    form : {"unit_means", "rows"}
        Instruments of step 2.

    Raises
    ------
    IdentificationError
        If the instruments do not determine the coefficients of the unit-constant columns.
    """
    z = setting.z
    means = setting.means(np.sqrt(setting.sizes))
    _order_condition(setting, means)
    if z.size == 0:
        coefficients = np.zeros(0)
    else:
        every = np.r_[setting.z1, setting.x1]
        instruments = means[:, every]
        target = np.column_stack([means[:, z], means[:, -1] - means[:, setting.x] @ setting.slopes])
        if form == "rows":
            inner = setting.model.within[:, every]
            instruments = np.vstack([instruments, inner])
            target = np.vstack([target, np.zeros((inner.shape[0], target.shape[1]))])
        projected = orthonormal(instruments, setting.floor(every)).T @ target
        length = np.sqrt((projected[:, :-1] ** 2).sum(axis=0))
        span = span_of(projected[:, :-1], np.zeros(z.size), 1e-10)
        if span.rank < z.size:
            names = [setting.model.names[z[d.column]] for d in span.dependencies]
            raise IdentificationError(
                f"rank condition: the instruments do not tell the coefficients of {', '.join(names)} from "
                f"the others; the unit means of {', '.join(setting.roles.x1) or 'no column'} are unrelated "
                "to them between units, or collinear."
            )
        coefficients = np.linalg.lstsq(projected[:, :-1] / length, projected[:, -1], rcond=None)[0] / length
    weights = np.zeros(len(setting.model.names) + 1)
    weights[setting.x], weights[z], weights[-1] = -setting.slopes, -coefficients, 1.0
    squares = float(((setting.model.between @ weights) ** 2).sum())
    counts, units = setting.moments.counts.astype(float), setting.moments.units
    noise = setting.within_variance * float(counts @ (1.0 / setting.sizes)) / units
    return FirstStep(setting.within_variance, squares / units - noise)


def orthonormal(columns: FloatArray, floor: FloatArray) -> FloatArray:
    """Return an orthonormal basis of some columns; those that are dependent, or rounding, are left out."""
    span = span_of(columns, floor, 1e-10)
    length = np.sqrt((columns[:, span.kept] ** 2).sum(axis=0))
    return np.asarray(np.linalg.qr(columns[:, span.kept] / length)[0])


def _order_condition(setting: Setting, means: FloatArray) -> None:
    """Refuse a model with fewer instruments between units than coefficients that need one."""
    roles, needed = setting.roles, len(setting.roles.z2)
    every = np.r_[setting.z1, setting.x1]
    span = span_of(means[:, every], setting.floor(every), 1e-10)
    useful = int((span.kept >= setting.z1.size).sum())
    if useful < needed:
        related = ", ".join(roles.z2)
        candidates = ", ".join(roles.x2) or "none is left"
        offered = (
            f"the unit means of {', '.join(roles.x1)} give {useful}"
            if roles.x1
            else "no column that varies within units is declared unrelated"
        )
        raise IdentificationError(
            f"order condition: {needed} unit-constant column(s) may be related to the unit effect "
            f"({related}) and need as many instruments; {offered}. Declare more columns that vary within "
            f"units unrelated (candidates: {candidates}), or {related} itself."
        )


def _statement(setting: Setting, weighting: Weighting) -> str:
    roles = setting.roles
    balanced = setting.moments.sizes.size == 1
    sizes = (
        "All units have the same size, so that transforming the instruments for unequal sizes changes "
        "nothing."
        if balanced
        else "Units differ in size: the instruments between units are quasi-demeaned by theta_i, like the rows."
        if weighting == "quasi_demeaned"
        else "Units differ in size: the rows are quasi-demeaned by theta_i, the instruments between units are not."
    )
    return f"{roles.text} {sizes}"
