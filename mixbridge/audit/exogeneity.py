"""Strict exogeneity: leads of covariates, and feedback from the outcome before.

Leads (Wooldridge 2010, section 10.7.1; number from memory). On rows whose unit is observed one step later,
``y_it = x_it'b + x_i,t+1'd + a_i + u_it`` by the within regression; ``d = 0`` if covariates do not answer to
earlier errors. Columns that depend on the period alone have no lead here (they answer to nobody), nor has a
lead that is a combination of the columns (age, a trend).

Feedback. On rows whose unit was observed one step before, each covariate is regressed on the covariates and the
outcome one step before, the columns of the period alone, and unit intercepts. Given unit intercepts and ``x_i,t-1``
the outcome before spans what its error ``u_i,t-1`` spans, so that its coefficient has mean zero, given the
covariates, if they are strictly exogenous: the bias of lagged outcomes with few periods does not arise in this
direction.

Both see answers to the error of one step before only. Neither sees what moves covariate and error in the same
period, nor errors of measurement without memory.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from mixbridge.audit.bench import Bench
from mixbridge.audit.record import Finding
from mixbridge.audit.regress import Added, add_columns
from mixbridge.audit.rows import Groups, groups_of
from mixbridge.errors import IdentificationError

__all__ = ["feedback", "leads", "of_period_alone"]

FloatArray = NDArray[np.float64]
CANNOT = (
    "What moves covariate and error in the same period, and feedback over more than one step, stay invisible"
)


def of_period_alone(bench: Bench) -> NDArray[np.bool_]:
    """Tell which design columns take one value in every period (indicators, trends, the constant)."""
    rows = bench.rows
    assert rows.ordinals is not None
    order = np.argsort(rows.ordinals, kind="stable")
    starts = groups_of(rows.ordinals[order].astype(np.intp)).starts
    found = np.zeros(rows.x.shape[1], dtype=bool)
    for j in range(rows.x.shape[1]):
        column = rows.x[order, j]
        low, high = np.minimum.reduceat(column, starts), np.maximum.reduceat(column, starts)
        found[j] = bool((high - low).max() <= 1e-12 * max(float(np.abs(column).max()), 1e-300))
    return found


def _pairs(bench: Bench) -> tuple[NDArray[np.intp], Groups]:
    """Return the earlier rows of linked pairs, of units with at least two pairs, and their groups."""
    earlier = np.flatnonzero(bench.links.after)
    codes = bench.rows.codes[earlier]
    per_unit = np.bincount(codes, minlength=int(bench.rows.codes.max()) + 1)
    earlier = earlier[per_unit[codes] > 1]
    if earlier.size == 0:
        raise IdentificationError("no unit has three periods in a row")
    return earlier, groups_of(bench.rows.codes[earlier])


def _answering(bench: Bench) -> NDArray[np.intp]:
    columns = np.flatnonzero(bench.varying & ~of_period_alone(bench))
    if columns.size == 0:
        raise IdentificationError("no covariate varies within units other than with the period alone")
    return columns


def leads(bench: Bench) -> Sequence[Finding]:
    """Add next-period covariates to the within regression."""
    columns, (rows, groups) = _answering(bench), _pairs(bench)
    x, y = bench.rows.x, bench.rows.y
    current = groups.demean(x[rows][:, bench.varying])
    later = groups.demean(x[rows + 1][:, columns])
    added = add_columns(current, later, groups.demean(y[rows]), groups)
    test = added.test()
    names = [bench.names[j] for j in columns[added.kept]]
    spread = bench.sd_within[columns[added.kept]]
    effect, error = added.estimate[:, 0] * spread, added.errors[:, 0] * spread
    worst = int(np.argmax(np.abs(effect / error)))
    before = add_columns(np.zeros((rows.size, 0)), current, groups.demean(y[rows]), groups)
    moved, in_se = _moved(before, added)
    moved_name = [bench.names[j] for j in np.flatnonzero(bench.varying)[before.kept]][moved]
    text, size = bench.detectable(
        float(error[worst]), f"outcome units per within sd of next {names[worst]}", test
    )
    left = [bench.names[j] for k, j in enumerate(columns) if k not in set(added.kept.tolist())]
    numbers = {f"lead:{name}": float(value) for name, value in zip(names, added.estimate[:, 0], strict=True)}
    numbers |= {"rows": float(rows.size), "units": float(groups.units), "detectable_effect": size}
    numbers |= {"chi_square": test.chi_square, "largest_change_in_se": in_se}
    return [
        Finding(
            key="leads",
            evidence=f"next-period {', '.join(names)} added to the within regression, {rows.size} rows of "
            f"{groups.units} units"
            + (f"; {', '.join(left)} left out: determined by the other columns" if left else ""),
            statistic=test.statistic,
            reference=test.reference,
            p_value=test.p_value,
            departure=f"one within sd of next-period {names[worst]} goes with {effect[worst]:.3g} outcome "
            "units; the slope of "
            f"{moved_name} moves by {in_se:.2g} of its standard errors when leads are added",
            consequence=(
                "all routes, within included, would be biased; the bias of within shrinks with the "
                "number of periods, "
                "that of first_difference does not, so the two would differ"
            ),
            conclusion=bench.verdict(
                test.p_value,
                "covariates of the next period go with the error of this one: feedback, anticipation, or an omitted "
                "variable with memory. None of the routes in the ledger repairs that.",
                f"{text} {CANNOT}.",
            ),
            numbers=numbers,
        )
    ]


def _moved(before: Added, after: Added) -> tuple[int, float]:
    """Return the slope that moves most when leads are added, in its standard errors before."""
    kept = before.kept
    change = np.abs(after.others[kept, 0] - before.estimate[:, 0]) / before.errors[:, 0]
    worst = int(np.nanargmax(change))
    return worst, float(change[worst])


def feedback(bench: Bench) -> Sequence[Finding]:
    """Regress covariates on the outcome one step before."""
    columns, (rows, groups) = _answering(bench), _pairs(bench)
    x, y = bench.rows.x, bench.rows.y
    periodic = bench.varying & of_period_alone(bench)
    before = groups.demean(np.column_stack([x[rows][:, bench.varying], x[rows + 1][:, periodic]]))
    target = groups.demean(x[rows + 1][:, columns])
    first = add_columns(before, groups.demean(y[rows])[:, None], target, groups)
    length = np.sqrt((target**2).sum(axis=0))
    free = np.sqrt((first.residual**2).sum(axis=0)) > 1e-8 * length
    if not free.any():
        raise IdentificationError("every covariate is determined by its own past")
    added = add_columns(before, groups.demean(y[rows])[:, None], target[:, free], groups)
    test = added.test()
    names = [bench.names[j] for j in columns[free]]
    shock = float(np.sqrt(bench.within_variance))
    size = added.estimate[0] * shock / bench.sd_within[columns[free]]
    error = added.errors[0] * shock / bench.sd_within[columns[free]]
    worst = int(np.argmax(np.abs(size / error)))
    text, reach = bench.detectable(
        float(error[worst]), f"within sd of {names[worst]} per sd of the error before", test
    )
    numbers = {f"feedback:{name}": float(value) for name, value in zip(names, added.estimate[0], strict=True)}
    numbers |= {"rows": float(rows.size), "units": float(groups.units), "detectable_effect": reach}
    numbers |= {"chi_square": test.chi_square}
    return [
        Finding(
            key="feedback",
            evidence=f"{', '.join(names)} regressed within units on the outcome one step before, given "
            "the covariates one step "
            f"before, {rows.size} rows of {groups.units} units",
            statistic=test.statistic,
            reference=test.reference,
            p_value=test.p_value,
            departure=f"an error of one idiosyncratic sd is followed by {size[worst]:.3g} within sd of "
            f"{names[worst]}",
            consequence=(
                "all routes, within included, would be biased by feedback; most with few periods, and "
                "first_difference "
                "whatever their number"
            ),
            conclusion=bench.verdict(
                test.p_value,
                "covariates answer to the outcome before, or both follow something omitted. None of the "
                "routes in the "
                "ledger repairs that.",
                f"{text} {CANNOT}.",
            ),
            numbers=numbers,
        )
    ]
