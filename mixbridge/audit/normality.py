"""Normality of errors and of unit effects, from within residuals and from unit remainders.

For standard normal z with known correlations the sums of ``H_3 = z^3 - 3z`` and ``H_4 = z^4 - 6z^2 + 3`` are
uncorrelated, and ``Cov(H_k(z_s), H_k(z_t)) = k! r_st^k``. Within residuals of a unit, scaled to variance one, have
``r = -1/(T_i - 1)``, remainders of units (nearly) ``r = 0``. So with

    S = sum H_3 / sqrt(6 sum_i (T_i - T_i/(T_i - 1)^2)),      K = sum H_4 / sqrt(24 sum_i (T_i + T_i/(T_i - 1)^3))

``S^2 + K^2`` is of the type of Jarque & Bera (1980), chi-square(2) in large samples; for residuals that allows for
demeaning. For what is not large the law is drawn under normality. Demeaning brings residuals closer to normal than
errors are, and error means do the same to remainders: skewness and excess kurtosis of errors and effects are
divided by what is left of them, ``E e^3``, ``E e^4`` for independent errors.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import factorial

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from mixbridge.audit.bench import Bench
from mixbridge.audit.record import Finding
from mixbridge.audit.rows import groups_of
from mixbridge.audit.simulated import simulate
from mixbridge.errors import IdentificationError

__all__ = ["normal_effects", "normal_errors", "standardised_remainders"]

FloatArray = NDArray[np.float64]
ENOUGH = 20_000
"""Count from which chi-square(2) is used."""


def _hermite(z: FloatArray, axis: int = -1) -> tuple[FloatArray, FloatArray]:
    square = z * z
    third = (z * (square - 3.0)).sum(axis=axis)
    return third, (square * (square - 6.0) + 3.0).sum(axis=axis)


def normal_errors(bench: Bench) -> Sequence[Finding]:
    """Look at third and fourth moments of within residuals."""
    groups = bench.rows.groups
    several = groups.spread(groups.sizes.astype(float)) > 1.0
    if not several.any() or bench.curve.df_within < 3:
        raise IdentificationError("fewer than three degrees of freedom within units")
    inner = groups_of(bench.rows.codes[several])
    sizes = inner.sizes.astype(float)
    e = bench.within_residual[several]
    row_size = inner.spread(sizes)
    z = e / np.sqrt(float(e @ e) / float((sizes - 1.0).sum())) / np.sqrt(1.0 - 1.0 / row_size)
    third, fourth = _hermite(z)
    weights = _weights(inner.sizes)
    value = _combined(third[None], fourth[None], weights)[0]
    if z.size >= ENOUGH:
        p, reference = float(stats.chi2.sf(value, 2)), "chi-square(2)"
    else:
        law = simulate(inner.sizes, _drawn, bench.seed + 2)
        p, reference = law.upper(float(value)), law.reference
    left = 1.0 - 1.0 / sizes
    # E e^3 and the fourth cumulant of e_t = u_t - mean, over powers of its standard deviation
    kept3 = float((sizes * (left**3 - (sizes - 1.0) / sizes**3) / left**1.5).sum() / sizes.sum())
    kept4 = float((sizes * (left**4 + (sizes - 1.0) / sizes**4) / left**2).sum() / sizes.sum())
    skewness = float(third) / z.size / kept3 if kept3 > 1e-12 else np.nan
    kurtosis = float(fourth) / z.size / kept4
    m = bench.curve.df_within
    return [
        Finding(
            key="normal_errors",
            evidence="third and fourth moments of within residuals, allowing for demeaning (Jarque & Bera 1980 type)",
            statistic=float(value),
            reference=reference,
            p_value=p,
            departure=f"idiosyncratic error: skewness {skewness:.2f}, excess kurtosis {kurtosis:.2f} "
            "(corrected for demeaning)",
            consequence="coefficients of all routes stay unbiased; intervals of variances, ratio and ICC "
            "that assume normality "
            f"are off: the variance of the within variance is about {1.0 + kurtosis / 2.0:.2f} times the "
            "normal one; tests of the "
            "unit variance and unit variances too",
            conclusion=bench.verdict(
                p,
                "errors are not normal, or their variances differ (which looks like long tails). "
                "Coefficients need neither.",
                f"Detectable with probability {bench.power:g}, roughly: skewness of "
                f"{2.8 * np.sqrt(6.0 / m):.2g} or excess kurtosis of "
                f"{2.8 * np.sqrt(24.0 / m):.2g} alone. Residuals of few rows per unit look normal "
                "whatever the errors.",
            ),
            numbers={
                "skewness": skewness,
                "excess_kurtosis": kurtosis,
                "residual_skewness": float(stats.skew(e)),
                "residual_excess_kurtosis": float(stats.kurtosis(e)),
                "jarque_bera_plain": float(stats.jarque_bera(e).statistic),
            },
        )
    ]


def _weights(sizes: NDArray[np.intp]) -> tuple[float, float]:
    t = sizes.astype(float)
    return (
        factorial(3) * float((t - t / (t - 1.0) ** 2).sum()),
        factorial(4) * float((t + t / (t - 1.0) ** 3).sum()),
    )


def _combined(third: FloatArray, fourth: FloatArray, weights: tuple[float, float]) -> FloatArray:
    """Return ``S^2 + K^2``; without S where every unit has two rows, whose residuals are each other's negative."""
    value = fourth**2 / weights[1]
    return np.asarray(value + third**2 / weights[0]) if weights[0] > 1e-9 else np.asarray(value)


def _drawn(parts: list[FloatArray]) -> FloatArray:
    sizes = np.concatenate([np.full(part.shape[1], part.shape[2]) for part in parts])
    square = np.zeros(len(parts[0]))
    for part in parts:
        square = square + (part**2).sum(axis=(1, 2))
    scale = np.sqrt(square / (sizes - 1.0).sum())
    third, fourth = np.zeros(len(square)), np.zeros(len(square))
    for part in parts:
        z = part / scale[:, None, None] / np.sqrt(1.0 - 1.0 / part.shape[2])
        a, b = _hermite(z.reshape(len(z), -1))
        third, fourth = third + a, fourth + b
    return _combined(third, fourth, _weights(sizes))


def standardised_remainders(bench: Bench) -> FloatArray:
    """Return unit remainders over their standard deviation ``sqrt(sigma_a^2 + sigma_u^2/T_i)``, by unit."""
    sizes, fit = bench.rows.groups.sizes.astype(float), bench.primary
    return np.asarray(bench.gls.mean / np.sqrt(fit.idiosyncratic_variance * (fit.ratio + 1.0 / sizes)))


def normal_effects(bench: Bench) -> Sequence[Finding]:
    """Look at third and fourth moments of unit remainders."""
    z = standardised_remainders(bench)
    if z.size < 8:
        raise IdentificationError(f"{z.size} units: too few to speak of third and fourth moments")
    if bench.primary.ratio == 0.0:
        raise IdentificationError("the unit variance is estimated as zero: there are no effects to look at")
    value = float(_remainders(z[None])[0])
    if z.size >= ENOUGH:
        p, reference = float(stats.chi2.sf(value, 2)), "chi-square(2)"
    else:
        law = simulate(np.array([z.size]), lambda parts: _remainders(parts[0][:, 0]), bench.seed + 3)
        p, reference = law.upper(value), f"{law.values.size} draws under normality"
    shrink = (
        bench.primary.ratio * bench.rows.groups.sizes / (1.0 + bench.primary.ratio * bench.rows.groups.sizes)
    )
    standard = (z - z.mean()) / z.std()
    skewness = float((standard**3).mean() / (shrink**1.5).mean())
    kurtosis = float(((standard**4).mean() - 3.0) / (shrink**2).mean())
    n = z.size
    return [
        Finding(
            key="normal_effects",
            evidence=f"third and fourth moments of unit remainders of {bench.primary.route}, standardised "
            "(Jarque & Bera 1980 type)",
            statistic=value,
            reference=reference,
            p_value=p,
            departure=f"unit effect: skewness {skewness:.2f}, excess kurtosis {kurtosis:.2f} (corrected "
            "for the error in unit means)",
            consequence="coefficients stay unbiased; intervals of the unit variance and ICC that assume "
            "normality are off; predicted "
            "effects are still the best linear ones, but their prediction intervals are not right for single units",
            conclusion=bench.verdict(
                p,
                "unit effects are not normal, or a unit-constant covariate is missing, or a few units "
                "are of another kind.",
                f"Detectable with probability {bench.power:g}, roughly: skewness of "
                f"{2.8 * np.sqrt(6.0 / n) / (shrink**1.5).mean():.2g} "
                f"or excess kurtosis of {2.8 * np.sqrt(24.0 / n) / (shrink**2).mean():.2g} alone. "
                "Predicted effects are shrunk towards a "
                "normal shape: their histogram is no evidence.",
            ),
            numbers={
                "skewness": skewness,
                "excess_kurtosis": kurtosis,
                "remainder_skewness": float(stats.skew(z)),
                "remainder_excess_kurtosis": float(stats.kurtosis(z)),
                "jarque_bera_plain": float(stats.jarque_bera(z).statistic),
            },
        )
    ]


def _remainders(z: FloatArray) -> FloatArray:
    """Return the Jarque-Bera statistic of each row."""
    centred = z - z.mean(axis=1, keepdims=True)
    scaled = centred / np.sqrt((centred**2).mean(axis=1, keepdims=True))
    n = z.shape[1]
    third, fourth = (scaled**3).mean(axis=1), (scaled**4).mean(axis=1) - 3.0
    return np.asarray(n / 6.0 * (third**2 + fourth**2 / 4.0))
