"""Idiosyncratic and unit variance unrelated to the covariates.

Rows: ``e_it^2 T_i/(T_i - 1)`` with within residuals e (unbiased for the error variance up to coefficients) regressed
on a constant and the design columns; all slopes zero, cluster-robust by unit. This is the auxiliary regression of the
Lagrange multiplier test (Breusch & Pagan 1979) without its normality (Koenker 1981), with an allowance for residuals
of one unit being related. ``n R^2``, the plain studentised form, is among the numbers.

Units: ``m_i^2 - sigma_u^2/T_i`` with unit remainders m regressed on a constant and the unit means, by unit.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from mixbridge.audit.bench import Bench
from mixbridge.audit.record import Finding
from mixbridge.audit.regress import Added, WaldTest, add_columns
from mixbridge.audit.rows import Groups, groups_of
from mixbridge.errors import IdentificationError

__all__ = ["along_columns", "along_unit_means"]

FloatArray = NDArray[np.float64]


def along_columns(bench: Bench) -> Sequence[Finding]:
    """Regress squared within residuals on the design columns."""
    groups = bench.rows.groups
    sizes = groups.spread(groups.sizes.astype(float))
    several = sizes > 1.0
    if not several.any() or bench.curve.df_within < 1:
        raise IdentificationError("no degrees of freedom within units")
    inside = groups_of(bench.rows.codes[several])
    squares = bench.within_residual[several] ** 2 * (sizes / (sizes - 1.0 + (sizes == 1.0)))[several]
    x = bench.rows.x[several]
    added, test, worst, ratio, size = _regression(bench, squares, x, inside)
    centred = squares - squares.mean()
    left = added.residual[:, 0]
    numbers = {"n_r_squared": float(squares.size * (1.0 - (left @ left) / (centred @ centred)))}
    return [
        _finding(
            bench,
            "variance_covariates",
            "squared within residuals on the design columns (auxiliary regression of the Lagrange multiplier test), "
            "cluster-robust",
            (test, worst, ratio, size),
            "idiosyncratic variance",
            "coefficients of all routes stay unbiased; model-based standard errors of every route are "
            "wrong for the columns "
            "that the variance follows, cluster-robust ones are not",
            numbers,
        )
    ]


def along_unit_means(bench: Bench) -> Sequence[Finding]:
    """Regress squared unit remainders on unit means."""
    gls, groups = bench.gls, bench.rows.groups
    if groups.sizes.max() == 1:
        raise IdentificationError("every unit has one row: unit and error variance cannot be told apart")
    squares = gls.mean**2 - gls.idiosyncratic_variance / groups.sizes
    if not squares.mean() > 0.0:
        raise IdentificationError(
            "squared unit remainders are on average no larger than the error variance over T: no unit variance is left "
            "that could follow a covariate"
        )
    units = Groups(np.arange(groups.units), np.ones(groups.units, dtype=np.intp))
    _, test, worst, ratio, size = _regression(bench, squares, bench.x_means, units)
    return [
        _finding(
            bench,
            "unit_variance_covariates",
            f"squared unit remainders of {bench.primary.route}, less error variance over T, on the unit means",
            (test, worst, ratio, size),
            "unit variance",
            "coefficients of all routes stay unbiased; model-based standard errors of pooled, between "
            "and the curve are wrong, "
            "within ones are not; predicted effects shrink too much in one part of the units and too "
            "little in another",
            {},
        )
    ]


def _regression(
    bench: Bench, squares: FloatArray, x: FloatArray, groups: Groups
) -> tuple[Added, WaldTest, int, float, float]:
    """Return regression, test, strongest column, fitted variance ratio along it, and detectable ratio."""
    columns = x - x.mean(axis=0)
    columns[:, np.abs(columns).max(axis=0) <= 1e-12 * np.maximum(np.abs(x).max(axis=0), 1e-300)] = 0.0
    added = add_columns(np.ones((len(x), 1)), columns, squares, groups)
    test = added.test()
    z = added.estimate[:, 0] / added.errors[:, 0]
    at = int(np.argmax(np.abs(z)))
    worst = int(added.kept[at])
    spread = float(columns[:, worst].std()) / float(squares.mean())
    half = added.estimate[at, 0] * spread
    high, low = max(1.0 + half, 0.0), max(1.0 - half, 0.0)
    ratio = float(high / low) if low > 0.0 else float("inf")
    _, size = bench.detectable(float(added.errors[at, 0]) * spread, "", test)
    return added, test, worst, ratio, size


def _finding(
    bench: Bench,
    key: str,
    evidence: str,
    found: tuple[WaldTest, int, float, float],
    what: str,
    consequence: str,
    numbers: dict[str, float],
) -> Finding:
    test, worst, ratio, size = found
    name = bench.names[worst]
    shown = (
        f"{ratio:.2f}"
        if 0.0 < ratio < np.inf
        else "no ratio, since the line reaches zero less than one sd from the mean"
    )
    seen = (
        f"about {(1.0 + size) / (1.0 - size):.2g}"
        if size < 1.0
        else "none short of a variance that reaches zero"
    )
    return Finding(
        key=key,
        evidence=evidence,
        statistic=test.statistic,
        reference=test.reference,
        p_value=test.p_value,
        departure=f"{what} one sd above the mean of {name} over one sd below: {shown} (linear fit)",
        consequence=consequence,
        conclusion=bench.verdict(
            test.p_value,
            f"the {what} follows the covariates, or the mean is wrong where they are large.",
            f"Detectable with probability {bench.power:g} along {name} alone: a ratio of {seen}. A "
            "variance that goes up at "
            "both ends of a covariate stays invisible.",
        ),
        numbers={**numbers, "variance_ratio": ratio, "detectable_relative_slope": size},
    )
