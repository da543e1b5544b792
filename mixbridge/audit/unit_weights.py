"""How much each unit counts, and what the answer is when every unit counts the same.

The mean of a unit has weight ``w_i = T_i/(1 + T_i psi)`` in generalised least squares at ψ: from T (pooled, rows count)
to 1/psi (units count). What is within units always counts by rows. The second check weights everything that a unit
contributes, deviations and mean, by ``1/T_i`` (weighted estimating equations for clusters of informative size,
Williamson, Datta & Satten 2003) and tests the difference from the unweighted answer, clustered by unit.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from mixbridge.audit.bench import Bench, usable
from mixbridge.audit.record import NO_TEST, Finding
from mixbridge.audit.regress import wald
from mixbridge.errors import IdentificationError

__all__ = ["equal_weights", "implied_weights"]

FloatArray = NDArray[np.float64]


def implied_weights(bench: Bench) -> Sequence[Finding]:
    """Tabulate the weight of unit means by route."""
    sizes = bench.rows.groups.sizes.astype(float)
    numbers: dict[str, float] = {}
    words = []
    ratios = {key: fit.ratio for key, fit in bench.study.fits.items() if usable(fit)}
    ratios.setdefault("pooled", 0.0)
    units = sizes.size
    for key, psi in ratios.items():
        weight = sizes / (1.0 + sizes * psi)
        effective = float(weight.sum() ** 2 / (weight @ weight))
        largest = float(weight.max() / weight.sum())
        numbers |= {
            f"effective_units:{key}": effective,
            f"largest_share:{key}": largest,
            f"largest_over_smallest:{key}": float(weight.max() / weight.min()),
        }
        if key in ("pooled", bench.primary.route):
            words.append(
                f"{key}: the largest unit counts {weight.max() / weight.min():.3g} times the smallest, as many as "
                f"{effective:.3g} equal units"
            )
    return [
        Finding(
            key="implied_weights",
            evidence=f"weights T/(1 + T psi) of the {units} unit means, by route; unit sizes from "
            f"{sizes.min():.0f} to "
            f"{sizes.max():.0f}",
            departure="; ".join(words),
            consequence="pooled and size-weighted between count rows, a large ratio counts units, the "
            "curve lies between; if slopes "
            "or levels differ with size these are different questions",
            conclusion="Which units should count is a choice about the target, not something that the data show.",
            status=NO_TEST,
            numbers=numbers,
        )
    ]


def equal_weights(bench: Bench) -> Sequence[Finding]:
    """Compare the answer with that in which every unit counts the same."""
    rows, groups = bench.rows, bench.rows.groups
    sizes = groups.sizes.astype(float)
    if np.ptp(sizes) == 0.0:
        raise IdentificationError(f"every unit has {sizes[0]:.0f} rows: both answers are one")
    shrink = bench.quasi(bench.primary.ratio, sizes)
    x = rows.x - groups.spread(shrink[:, None] * bench.x_means)
    y = rows.y - groups.spread(shrink * groups.mean(rows.y))
    length = np.sqrt((x**2).sum(axis=0))
    x = x / length
    answers, influences = [], []
    for weight in (np.ones_like(sizes), 1.0 / sizes):
        root = np.sqrt(groups.spread(weight))
        q, r = np.linalg.qr(x * root[:, None])
        beta = np.linalg.solve(r, q.T @ (y * root))
        score = groups.sum(q * (root * (y - x @ beta))[:, None])
        answers.append(beta)
        influences.append(np.linalg.solve(r, score.T).T)
    gap, influence = answers[1] - answers[0], influences[1] - influences[0]
    test = wald(gap, influence)
    units = test.df[0] + test.df[1]
    error = np.sqrt((influence**2).sum(axis=0) * units / (units - 1.0)) / length
    gap, of_route = gap / length, bench.primary.standard_errors.to_numpy()
    free = np.arange(gap.size) != (-1 if bench.constant is None else bench.constant)
    places = np.flatnonzero(free) if free.any() else np.arange(gap.size)
    j = int(places[np.argmax(np.abs(gap / of_route)[places])])
    name = bench.names[j]
    text, size = bench.detectable(float(error[j]), f"of difference for {name}", test)
    route = bench.primary.route
    numbers: dict[str, float] = {"chi_square": test.chi_square, "detectable": size}
    for k, label in enumerate(bench.names):
        if free[k]:  # the intercept of centred columns is not that of the formula
            numbers[f"by_rows:{label}"] = float(answers[0][k] / length[k])
            numbers[f"by_units:{label}"] = float(answers[1][k] / length[k])
    return [
        Finding(
            key="equal_weights",
            evidence=f"{route} against the same with every unit's contribution divided by its size, "
            "clustered by unit",
            statistic=test.statistic,
            reference=test.reference,
            p_value=test.p_value,
            departure=f"largest for {name}: {answers[0][j] / length[j]:.4g} by {route}, "
            f"{answers[1][j] / length[j]:.4g} with equal "
            f"units, {abs(gap[j] / of_route[j]):.2g} standard errors of {route}",
            consequence="routes that count rows and routes that count units would answer different "
            "questions; size-weighted and "
            "unweighted between fits differ too",
            conclusion=bench.verdict(
                test.p_value,
                "slopes or levels differ with unit size, or covariates and errors do: say whether units "
                "or rows are the target.",
                text,
            ),
            numbers=numbers,
        )
    ]
