"""Equal idiosyncratic variances across units.

With within residuals e of unit i (T_i > 1), ``s_i^2 = sum e^2/(T_i - 1)`` and s^2 their pool,

    Wald     sum_i (T_i - 1)(s_i^2/s^2 - 1)^2 / 2
    Levene   one-way F of ``|e_it - median_i|`` between units (Levene 1960; Brown & Forsythe 1974)

The first is the Wald form for unequal unit variances with the null variance ``2 s^4/(T_i - 1)`` of normal errors; its
chi-square(N - 1) law holds for long units only. The second bends less to long tails, but with short units its F law
does not hold either (deviations of one unit add up to zero). Both laws are drawn (`simulated`).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from mixbridge.audit.bench import Bench
from mixbridge.audit.record import Finding
from mixbridge.audit.rows import Groups, groups_of
from mixbridge.audit.simulated import simulate
from mixbridge.errors import IdentificationError

__all__ = ["levene", "variance_wald"]

FloatArray = NDArray[np.float64]
LONG = 50
"""Median unit size from which the F law is used for Levene's statistic."""
EFFECT = (
    "coefficients of all routes stay unbiased but weight noisy units as if they were quiet; model-based "
    "standard errors of "
    "every route are wrong, cluster-robust ones are not; shrinkage and prediction errors of single units are wrong"
)


def _residuals(bench: Bench) -> tuple[FloatArray, Groups]:
    """Return within residuals of units with more than one row."""
    groups = bench.rows.groups
    several = groups.spread(groups.sizes.astype(float)) > 1.0
    if (groups.sizes > 1).sum() < 2 or bench.curve.df_within < 1:
        raise IdentificationError(
            "fewer than two units with more than one row, or no degrees of freedom within units"
        )
    return bench.within_residual[several], groups_of(bench.rows.codes[several])


def variance_wald(bench: Bench) -> Sequence[Finding]:
    """Compare unit variances with their pool."""
    e, groups = _residuals(bench)
    df = groups.sizes.astype(float) - 1.0
    squares = groups.sum(e**2)
    statistic = float(_wald(squares[None, :], df)[0])
    law = simulate(groups.sizes, _wald_of, bench.seed)
    value = statistic if law.share >= 1.0 else statistic * law.share
    p = law.upper(value)
    ratio = squares / df / (squares.sum() / df.sum())
    excess = float((df * (ratio - 1.0) ** 2).sum() - 2.0 * (groups.units - 1)) / float((df + 2.0).sum())
    spread = float(np.sqrt(max(excess, 0.0)))
    low, high = np.quantile(np.sqrt(ratio), [0.1, 0.9])
    return [
        Finding(
            key="variance_wald",
            evidence=f"Wald form for unequal variances of {groups.units} units, from within residuals; "
            "assumes normal errors",
            statistic=statistic,
            reference=law.reference,
            p_value=p,
            departure=f"relative spread of unit variances beyond chance {spread:.2f} (0: equal); standard "
            "deviations of units from "
            f"{low:.2f} (tenth percentile) to {high:.2f} (ninetieth) times the pooled one, chance included",
            consequence=EFFECT,
            conclusion=bench.verdict(
                p,
                "unit variances differ, or errors have long tails, which look the same here; the Levene "
                "row bends less to tails.",
                "Detectable departure: not computed.",
            ),
            numbers={"relative_spread": spread, "units": float(groups.units)},
        )
    ]


def _wald(squares: FloatArray, df: FloatArray) -> FloatArray:
    ratio = squares / df / (squares.sum(axis=1) / df.sum())[:, None]
    return np.asarray(0.5 * ((ratio - 1.0) ** 2 @ df))


def _wald_of(parts: list[FloatArray]) -> FloatArray:
    squares = np.concatenate([(part**2).sum(axis=2) for part in parts], axis=1)
    df = np.concatenate([np.full(part.shape[1], part.shape[2] - 1.0) for part in parts])
    return _wald(squares, df)


def levene(bench: Bench) -> Sequence[Finding]:
    """Compare absolute deviations from unit medians between units."""
    e, groups = _residuals(bench)
    n, units = groups.rows, groups.units
    away = np.abs(e - groups.spread(_medians(e, groups)))
    mean = groups.mean(away)
    between = float(groups.sizes @ (mean - away.mean()) ** 2)
    inside = float(((away - groups.spread(mean)) ** 2).sum())
    if inside == 0.0:
        raise IdentificationError(
            "two rows per unit: absolute deviations from the median do not vary within units"
        )
    statistic = (n - units) / (units - 1.0) * between / inside
    plain = float(stats.f.sf(statistic, units - 1, n - units))
    if np.median(groups.sizes) >= LONG:
        p, reference = plain, f"F({units - 1}, {n - units})"
    else:
        law = simulate(groups.sizes, _levene_of, bench.seed + 1)
        p, reference = law.upper(statistic), law.reference
    ratio = float(np.quantile(mean, 0.9) / np.quantile(mean, 0.1))
    return [
        Finding(
            key="variance_levene",
            evidence=f"Levene's statistic of {units} units, within residuals about unit medians",
            statistic=statistic,
            reference=reference,
            p_value=p,
            departure=f"mean absolute deviation of units: ninetieth over tenth percentile {ratio:.2f}, "
            "chance included",
            consequence=EFFECT,
            conclusion=bench.verdict(
                p,
                "unit variances differ. It does not say along what; the row on covariates looks at that.",
                "Detectable departure: not computed.",
            ),
            numbers={"p_of_f": plain, "ratio_of_deviations": ratio},
        )
    ]


def _medians(e: FloatArray, groups: Groups) -> FloatArray:
    """Return the median of each unit, without a loop over units."""
    code = groups.spread(np.arange(groups.units, dtype=float))
    ordered = e[np.lexsort((e, code))]
    low = groups.starts + (groups.sizes - 1) // 2
    return np.asarray((ordered[low] + ordered[groups.starts + groups.sizes // 2]) / 2.0)


def _levene_of(parts: list[FloatArray]) -> FloatArray:
    away = [np.abs(part - np.median(part, axis=2, keepdims=True)) for part in parts]
    sizes = np.concatenate([np.full(part.shape[1], float(part.shape[2])) for part in parts])
    means = np.concatenate([part.mean(axis=2) for part in away], axis=1)
    inside = sum(((part - part.mean(axis=2, keepdims=True)) ** 2).sum(axis=(1, 2)) for part in away)
    n, units = sizes.sum(), sizes.size
    grand = (means @ sizes) / n
    between = (means - grand[:, None]) ** 2 @ sizes
    return np.asarray((n - units) / (units - 1.0) * between / inside)
