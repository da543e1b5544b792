"""Independence across units: cross-section dependence over common periods.

With within residuals of unit i scaled to ``xi = e / sqrt(sum e^2/(T_i - 1))`` and over all pairs with at least two
common periods (Pesaran 2004, 2015)

    c_ij = sum_{t common} xi_it xi_jt,    v_ij = tr over common t of (I - J/T_i)(I - J/T_j),
    CD   = sum_{i<j} c_ij / sqrt(v_ij) / sqrt(pairs)

For equal periods ``v = T - 1`` and ``c_ij = (T - 1) rho_ij``: Pesaran's statistic but for ``sqrt(T - 1)`` in place of
``sqrt(T)``, the variance of a correlation of T demeaned numbers being ``1/(T - 1)``. Units are first added up by
pattern of observed periods, so that the cost goes with the number of patterns squared.

With indicators of every period in the model, residuals of each period add up to zero and the statistic says nothing
(Juodis & Reese 2022): the row then has a status.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from mixbridge.audit.bench import Bench
from mixbridge.audit.power import detectable_normal
from mixbridge.audit.record import Finding
from mixbridge.audit.rows import groups_of
from mixbridge.errors import IdentificationError

__all__ = ["cross_section"]

FloatArray = NDArray[np.float64]
PATTERNS = 12_000
PERIODS = 2_000


def cross_section(bench: Bench) -> Sequence[Finding]:
    """Average correlations of residuals over pairs of units."""
    rows = bench.rows
    assert rows.ordinals is not None
    groups = rows.groups
    if bench.curve.df_within < 1:
        raise IdentificationError("no degrees of freedom within units")
    several = groups.spread(groups.sizes.astype(float)) > 1.0
    e, inner = bench.within_residual[several], groups_of(rows.codes[several])
    periods, at = np.unique(rows.ordinals[several], return_inverse=True)
    if inner.units < 2 or periods.size < 2:
        raise IdentificationError("fewer than two units with two rows")
    zero = np.abs(np.bincount(at, e)) <= 1e-9 * np.bincount(at, np.abs(e))
    if zero.all():
        return [
            Finding(
                key="cross_section",
                evidence="correlation of within residuals over pairs of units",
                conclusion="Dependence beyond a common shock per period is not shown by this statistic; "
                "standard errors clustered "
                "both ways (covariance='two_way') allow for it.",
                status="not assessable: period effects in the model make the residuals of every period "
                "add up to zero "
                "(Juodis & Reese 2022)",
            )
        ]
    if periods.size > PERIODS:
        raise IdentificationError(
            f"{periods.size} distinct periods: too many for a table of units by periods"
        )
    scale = np.sqrt(inner.sum(e**2) / (inner.sizes - 1.0))
    if not (scale > 0.0).all():
        raise IdentificationError("a unit has within residuals of zero")
    total, variance, squared, pairs = _pairs(
        e / inner.spread(scale),
        at,
        periods.size,
        inner.spread(np.arange(inner.units, dtype=float)).astype(np.intp),
        inner.sizes,
    )
    if pairs < 1.0:
        raise IdentificationError("no two units share two periods")
    cd = total / np.sqrt(pairs)
    p = float(2.0 * stats.norm.sf(abs(cd)))
    correlation = squared / variance
    reach = detectable_normal(bench.level, bench.power) * np.sqrt(pairs) / (variance / pairs) ** 0.5 / pairs
    units = inner.units
    growth = np.sqrt(max(1.0 + (units - 1.0) * correlation, 0.0))
    return [
        Finding(
            key="cross_section",
            evidence=f"correlation of within residuals over {pairs:.0f} pairs of units with two common "
            "periods or more, "
            "averaged (Pesaran 2004, 2015)",
            statistic=cd,
            reference="N(0, 1), two-sided; many units",
            p_value=p,
            departure=f"average correlation between units {correlation:.4f}",
            consequence="coefficients of all routes stay consistent if the common part is unrelated to "
            "the covariates; standard "
            "errors clustered by unit, and model-based ones, do not hold: for a covariate that is the "
            "same for all units in "
            f"a period the right one is larger by a factor of about {growth:.2g}",
            conclusion=bench.verdict(
                p,
                "units share something in each period: period indicators, or standard errors clustered "
                "both ways, allow for a "
                "common shock.",
                f"Detectable with probability {bench.power:g}: an average correlation of {reach:.2g}. "
                "Correlations of both signs "
                "that average to zero stay invisible (clusters of units, neighbours).",
            ),
            numbers={
                "average_correlation": correlation,
                "pairs": pairs,
                "detectable_correlation": float(reach),
                "error_growth_common_covariate": float(growth),
            },
        )
    ]


def _pairs(
    xi: FloatArray, period: NDArray[np.intp], periods: int, unit: NDArray[np.intp], sizes: NDArray[np.intp]
) -> tuple[float, float, float, float]:
    """Return ``sum c/sqrt(v)``, ``sum v``, ``sum c`` and the number of pairs, over pairs with two common periods."""
    seen = np.zeros((sizes.size, periods), dtype=bool)
    seen[unit, period] = True
    packed = np.packbits(seen, axis=1)
    keys = np.ascontiguousarray(packed).view(np.dtype((np.void, packed.shape[1]))).ravel()
    _, first, pattern = np.unique(keys, return_index=True, return_inverse=True)
    count = first.size
    if count > PATTERNS:
        raise IdentificationError(f"{count} distinct patterns of observed periods: too many pairs to visit")
    present = seen[first].astype(float)
    members = np.bincount(pattern, minlength=count).astype(float)
    size = present.sum(axis=1)
    sums = np.zeros((count, periods))
    np.add.at(sums, (pattern[unit], period), xi)
    own = np.bincount(pattern[unit], xi**2, minlength=count)
    total = variance = plain = number = 0.0
    for start in range(0, count, 512):
        part = slice(start, min(start + 512, count))
        common = present[part] @ present.T
        v = common * (1.0 - 1.0 / size[part, None] - 1.0 / size) + common**2 / np.outer(size[part], size)
        c = sums[part] @ sums.T
        weight = np.outer(members[part], members)
        here = np.arange(part.start, part.stop)
        row = here - part.start
        # a pattern with itself: every pair of different units twice, a unit with itself not at all
        c[row, here] -= own[here]
        weight[row, here] -= members[here]
        use = (common >= 2.0) & (v > 1e-9)
        total += float((c[use] / np.sqrt(v[use])).sum())
        variance += float((v * weight)[use].sum())
        plain += float(c[use].sum())
        number += float(weight[use].sum())
    return total / 2.0, variance / 2.0, plain / 2.0, number / 2.0
