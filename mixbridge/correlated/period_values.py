"""Internal instruments from each period's values: Amemiya & MaCurdy (1986).

Where the unrelated columns ``x1`` are unrelated to the unit effect in every single period, and not only on
average, all their values ``x1_i1, ..., x1_iT`` are instruments for every row of unit i: T instruments
between units for each column in place of one. This needs a balanced panel in which all units are seen in the
same periods. Everything else is as in `instruments`, the components included.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from mixbridge.correlated.instrumented import Instrumented, estimate
from mixbridge.correlated.instruments import FirstForm, ScaleForm, Setting, first_step_of, prepare
from mixbridge.errors import OptionError
from mixbridge.moments import Moments, OpenMoments, span_of
from mixbridge.panel import Panel
from mixbridge.routes import Fit

__all__ = ["amemiya_macurdy"]

FloatArray = NDArray[np.float64]
METHOD = "amemiya_macurdy"


def amemiya_macurdy(
    panel: Panel,
    opened: OpenMoments,
    moments: Moments,
    unrelated: Sequence[str],
    *,
    first_step: FirstForm = "unit_means",
    scale: ScaleForm = "own",
) -> Instrumented:
    """Estimate with each period's values of the unrelated columns as instruments.

    Parameters
    ----------
    panel, opened, moments
        Of one study.
    unrelated : sequence of str
        Columns or terms declared unrelated to the unit effect, as for `hausman_taylor`.
    first_step : {"unit_means", "rows"}
    scale : {"own", "residuals"}

    Returns
    -------
    Instrumented
        With a status and the reason, and no estimates, where periods are missing, unordered or not the same
        for all units, or where there are no fewer instruments than units.

    Raises
    ------
    IdentificationError, OptionError
        As for `hausman_taylor`.
    """
    for name, value, allowed in (
        ("first_step", first_step, ("unit_means", "rows")),
        ("scale", scale, ("own", "residuals")),
    ):
        if value not in allowed:
            raise OptionError.not_among(name, value, allowed)
    setting = prepare(moments, unrelated, panel.terms)
    conventions: dict[str, str] = {"first_step": first_step, "scale": scale}
    reason = _unbalanced(panel, moments)
    if reason:
        return _without(setting, reason, conventions)
    step = first_step_of(setting, first_step)
    size = int(moments.sizes[0])
    shrink = 1.0 / np.sqrt(1.0 + size * step.ratio)
    regressors = np.sqrt(size) * shrink * _unit_rows(setting, opened)
    values = np.sqrt(size) * shrink * _values(setting, panel, opened)
    instruments = np.column_stack([regressors[:, setting.z1], values])
    value_floor = np.tile(setting.floor(setting.x1), size)
    floor = np.r_[setting.floor(setting.z1), value_floor]
    rank = span_of(instruments, floor, 1e-10).rank
    if rank >= moments.units:
        reason = (
            f"{len(setting.x1)} unrelated columns in {size} periods give {rank} independent instruments "
            f"between units for {moments.units} units: the instruments would reproduce the unit means. "
            "Declare fewer columns"
        )
        return _without(setting, reason, conventions)
    return estimate(
        moments=moments,
        model=setting.model,
        roles=setting.roles,
        components=(step.unit, step.idiosyncratic),
        regressors=regressors,
        instruments=instruments,
        floor=floor,
        excluded=values,
        excluded_floor=value_floor,
        method=METHOD,
        conventions=conventions,
        statement=(
            f"{setting.roles.text} Instruments between units: the values of "
            f"{', '.join(setting.roles.x1) or 'no column'} in each of {size} periods. This assumes that they "
            "are unrelated to the unit effect period by period."
        ),
    )


def _unbalanced(panel: Panel, moments: Moments) -> str:
    """Say why there are no period-by-period values for all units; empty if there are."""
    if panel.period_name is None:
        return "period-by-period values need the column of the periods: name it with period="
    ordinals = panel.period_ordinals
    if ordinals is None:
        return f"period-by-period values need ordered periods ({panel.period_note})"
    if moments.sizes.size > 1:
        return (
            f"period-by-period values need a balanced panel; units here have from {moments.sizes[0]} to "
            f"{moments.sizes[-1]} rows. hausman_taylor takes unit means and allows that"
        )
    periods = np.unique(ordinals).size
    if periods != moments.sizes[0]:
        return (
            f"period-by-period values need the same periods for all units; units have {moments.sizes[0]} "
            f"rows each, in {periods} periods altogether"
        )
    if np.unique(np.column_stack([panel.codes, ordinals]), axis=0).shape[0] != panel.n:
        return "period-by-period values need one row per unit and period; some unit has several rows in one period"
    return ""


def _unit_rows(setting: Setting, opened: OpenMoments) -> FloatArray:
    """Return the unit means of model columns and outcome, one row per unit."""
    moments, names = setting.moments, setting.model.names
    rows = np.zeros((len(opened.keys), len(names) + 1))
    for j, name in enumerate((*names, moments.outcome)):
        last = j == len(names)
        if name == moments.constant and not last:
            rows[:, j] = 1.0
            continue
        at = len(moments.columns) - 1 if last else moments.columns.index(name)
        given = len(opened.columns) - 1 if last else opened.columns.index(name)
        origin = 0.0 if moments.constant is None else moments.shift[at]
        rows[:, j] = (opened.means[:, given] - (origin - opened.shift[given])) / moments.scale[at]
    return rows


def _values(setting: Setting, panel: Panel, opened: OpenMoments) -> FloatArray:
    """Return the scaled values of the unrelated columns: units are rows, pairs of period and column columns."""
    moments = setting.moments
    picks = [panel.names.index(name) for name in setting.roles.x1]
    at = [moments.columns.index(name) for name in setting.roles.x1]
    assert panel.period_ordinals is not None, "checked before"
    period = np.unique(panel.period_ordinals, return_inverse=True)[1]
    place = opened.keys.get_indexer(panel.unit_keys)[panel.codes]
    values = np.zeros((len(opened.keys), int(moments.sizes[0]), len(picks)))
    origin = np.zeros(len(at)) if moments.constant is None else moments.shift[at]
    for start, x, y in panel.blocks():
        rows = slice(start, start + y.size)
        values[place[rows], period[rows]] = (x[:, picks] - origin) / moments.scale[at]
    return values.reshape(len(opened.keys), -1)


def _without(setting: Setting, reason: str, conventions: dict[str, str]) -> Instrumented:
    """Return a result without estimates, with the reason."""
    moments, names = setting.moments, setting.model.names
    fit = Fit(
        route=METHOD,
        conventions=conventions,
        status=f"not estimable: {reason}",
        notes=(),
        terms=names,
        beta=np.full(len(names), np.nan),
        root=np.zeros((len(names), 0)),
        not_estimable=dict.fromkeys(names, reason),
        sizes=moments.sizes,
        rows=moments.rows,
        units=moments.units,
    )
    return Instrumented(fit, setting.roles, setting.roles.text)
