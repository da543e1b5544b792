"""Unit size unrelated to unit effects and covariates (selection, informative size).

Nijman & Verbeek (1992) add functions of what was observed to the random-effects regression: the number of rows T_i,
whether a unit was observed in every period, whether a row's unit is observed in the next period. Under ignorable
selection their coefficients are zero. Here they join the quasi-demeaned regression at the ratio of the primary route,
clustered by unit; ``log T_i`` is a further form. Size is also regressed on the unit means of the covariates.
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

__all__ = ["complete_units", "log_size", "next_presence", "size_and_covariates", "size_linear"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
EFFECT = (
    "pooled, between and the curve would be biased where size goes with the unit effect, most where big "
    "units count most "
    "(size-weighted forms); within and first_difference would not be biased by that, but would be if "
    "size goes with the "
    "errors"
)
CANNOT = (
    "Selection on what was not observed in a way that these functions of size do not follow stays "
    "invisible, and so does "
    "everything about units never seen"
)


def _quasi(bench: Bench, values: FloatArray, groups: Groups) -> FloatArray:
    weight = bench.quasi(bench.primary.ratio, groups.sizes)
    mean = groups.mean(values)
    return np.asarray(values - groups.spread((weight * mean.T).T))


def _unequal(bench: Bench) -> FloatArray:
    sizes = bench.rows.groups.sizes.astype(float)
    if np.ptp(sizes) == 0.0:
        raise _SameSizeError(f"every unit has {sizes[0]:.0f} rows")
    return sizes


class _SameSizeError(IdentificationError):
    """Size cannot be related to anything where it does not vary."""


def _added(bench: Bench, column: FloatArray, keep: NDArray[np.bool_] | None = None) -> Added:
    rows = bench.rows
    x, y, codes = rows.x, rows.y, rows.codes
    if keep is not None:
        x, y, codes, column = x[keep], y[keep], codes[keep], column[keep]
    groups = groups_of(codes)
    return add_columns(
        _quasi(bench, x, groups), _quasi(bench, column[:, None], groups), _quasi(bench, y, groups), groups
    )


def _finding(bench: Bench, key: str, evidence: str, unit: str, added: Added) -> Finding:
    test = added.test()
    value, error = float(added.estimate[0, 0]), float(added.errors[0, 0])
    moved = np.abs(added.others[:, 0] - bench.primary.beta)
    if bench.constant is not None:
        moved[bench.constant] = np.nan
    in_se = moved / bench.primary.standard_errors.to_numpy()
    text, size = bench.detectable(error, unit, test)
    departure = f"{value:.3g} {unit}"
    if len(added.residual) == bench.curve.n and np.isfinite(in_se).any():
        worst = int(np.nanargmax(in_se))
        departure += f"; {bench.names[worst]} moves by {in_se[worst]:.2g} standard errors when it is added"
    return Finding(
        key=key,
        evidence=evidence,
        statistic=test.statistic,
        reference=test.reference,
        p_value=test.p_value,
        departure=departure,
        consequence=EFFECT,
        conclusion=bench.verdict(
            test.p_value,
            "how much of a unit was observed goes with its level, given the covariates. It does not say "
            "why, nor that adding "
            "it repairs the slopes.",
            f"{text} {CANNOT}.",
        ),
        numbers={"coefficient": value, "standard_error": error, "detectable": size},
    )


def size_linear(bench: Bench) -> Sequence[Finding]:
    """Add the number of rows of the unit."""
    added = _added(bench, bench.rows.groups.spread(_unequal(bench)))
    evidence = f"number of rows T added to {bench.primary.route} (Nijman & Verbeek 1992)"
    return [_finding(bench, "unit_size", evidence, "outcome units per row of the unit", added)]


def log_size(bench: Bench) -> Sequence[Finding]:
    """Add the logarithm of the number of rows of the unit."""
    added = _added(bench, bench.rows.groups.spread(np.log2(_unequal(bench))))
    evidence = f"logarithm of the number of rows added to {bench.primary.route}"
    return [_finding(bench, "unit_size_log", evidence, "outcome units per doubling of T", added)]


def complete_units(bench: Bench) -> Sequence[Finding]:
    """Add an indicator of units with the largest number of rows."""
    sizes = _unequal(bench)
    whole = sizes == sizes.max()
    added = _added(bench, bench.rows.groups.spread(whole.astype(float)))
    evidence = (
        f"indicator of the {int(whole.sum())} complete units (T = {sizes.max():.0f}) added to {bench.primary.route} "
        "(Nijman & Verbeek 1992)"
    )
    return [
        _finding(bench, "unit_complete", evidence, "outcome units, complete against incomplete units", added)
    ]


def next_presence(bench: Bench) -> Sequence[Finding]:
    """Add an indicator of being observed one step later, on rows before the last period."""
    _unequal(bench)
    ordinals = bench.rows.ordinals
    assert ordinals is not None
    keep = ordinals + bench.links.step <= ordinals.max()
    present = bench.links.after.astype(float)
    if keep.sum() == 0 or np.ptp(present[keep]) == 0.0:
        raise IdentificationError("every row before the last period is followed by one")
    added = _added(bench, present, keep)
    evidence = (
        f"indicator of being observed one period later added to {bench.primary.route}, on the "
        f"{int(keep.sum())} rows before the "
        "last period (Nijman & Verbeek 1992)"
    )
    return [
        _finding(bench, "next_presence", evidence, "outcome units, followed against not followed rows", added)
    ]


def size_and_covariates(bench: Bench) -> Sequence[Finding]:
    """Regress unit sizes on unit means of the covariates."""
    sizes = _unequal(bench)
    means = bench.x_means - bench.x_means.mean(axis=0)
    units = Groups(np.arange(sizes.size), np.ones(sizes.size, dtype=np.intp))
    means[:, np.abs(means).max(axis=0) <= 1e-12 * np.maximum(np.abs(bench.x_means).max(axis=0), 1e-300)] = 0.0
    added = add_columns(np.ones((sizes.size, 1)), means, sizes, units)
    test = added.test()
    effect = added.estimate[:, 0] * means[:, added.kept].std(axis=0)
    error = added.errors[:, 0] * means[:, added.kept].std(axis=0)
    at = int(np.argmax(np.abs(effect / error)))
    name = bench.names[int(added.kept[at])]
    text, size = bench.detectable(float(error[at]), f"rows per sd of the unit mean of {name}", test)
    return [
        Finding(
            key="size_covariates",
            evidence="unit sizes regressed on unit means of the covariates, variances of any kind",
            statistic=test.statistic,
            reference=test.reference,
            p_value=test.p_value,
            departure=f"one sd of the unit mean of {name} goes with {effect[at]:.3g} rows",
            consequence="no bias by itself: routes that count rows and routes that count units describe "
            "different mixes of "
            "covariates, which matters where slopes differ between units",
            conclusion=bench.verdict(
                test.p_value, "big and small units differ in their covariates.", f"{text}"
            ),
            numbers={"rows_per_sd": float(effect[at]), "detectable": size},
        )
    ]
