"""Serial correlation left in the idiosyncratic error.

Differences (Wooldridge 2010, section 10.6.3; number from memory). With residuals r of the regression in first
differences, ``r_it = rho r_i,t-1 + error`` over three periods in a row, clustered by unit. Without serial
correlation of u, ``rho = -1/2``; under a first-order autoregression of u with coefficient a, ``rho = (a - 1)/2``.

Within residuals e. With links between rows of a unit one period step apart,

    d   = sum_links (e_t - e_{t-1})^2 / sum e^2       Bhargava, Franzini & Narendranathan (1982)
    d*  = 2 - 2 sum_links e_t e_{t-1} / sum e^2       Baltagi & Wu (1999)

The second is the locally best invariant form: at a = 0 the derivative of the covariance has ones where rows are
one step apart and nothing where a gap lies between, so that only links enter, yet every row counts in the
numerator. (Written here from that property; the four-part sum of the paper adds up to it, from memory.) The first
leaves half of the square of a row out wherever a unit or a run of periods begins or ends. Both have
exact mean and variance under normality and given X (`forms`); the reference is a beta law on the range of the
form with these two moments (the device of Durbin & Watson 1951).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from mixbridge.audit.bench import Bench
from mixbridge.audit.forms import difference_traces, ratio_moments, traces
from mixbridge.audit.power import detectable_normal
from mixbridge.audit.record import COMPUTED, Finding
from mixbridge.audit.regress import wald
from mixbridge.audit.rows import groups_of
from mixbridge.errors import IdentificationError

__all__ = ["durbin_watson", "first_differences", "unequal_spacing"]

FloatArray = NDArray[np.float64]
EFFECT = (
    "coefficients of all routes stay consistent, their model-based standard errors do not hold: within "
    "and the curve are "
    "too sure under positive correlation, first_difference under none; the unit variance takes up part "
    "of it, so ICC and "
    "shrinkage are too large under positive correlation"
)
FOUND = (
    "errors of one unit go together beyond the unit effect, or the form in time is wrong (omitted trend or period "
    "effects)"
)


def first_differences(bench: Bench) -> Sequence[Finding]:
    """Regress residuals of first differences on those before."""
    links = bench.links
    later = np.flatnonzero(links.before)
    x, y = bench.rows.x, bench.rows.y
    dx, dy = x[later] - x[later - 1], y[later] - y[later - 1]
    residual = dy - dx @ np.linalg.lstsq(dx, dy, rcond=None)[0]
    whole = np.full(y.size, np.nan)
    whole[later] = residual
    third = later[links.before[later - 1]]
    if third.size == 0:
        raise IdentificationError("no unit has three periods in a row")
    groups = groups_of(bench.rows.codes[third])
    now, before = whole[third], whole[third - 1]
    length = float(before @ before)
    rho = float(now @ before) / length
    influence = groups.sum(before * (now - rho * before))[:, None] / length
    test = wald(np.array([rho + 0.5]), influence)
    error = abs(rho + 0.5) / np.sqrt(test.chi_square) if test.chi_square > 0.0 else np.nan
    text, size = bench.detectable(
        2.0 * error, "of first-order autocorrelation (standard error at the estimate)", test
    )
    return [
        Finding(
            key="serial_differences",
            evidence=f"residuals of first differences on those one step before, coefficient {rho:.3f} against -0.5, "
            f"{third.size} pairs of {groups.units} units; allows for unequal variances",
            statistic=test.statistic,
            reference=test.reference,
            p_value=test.p_value,
            departure=f"first-order autocorrelation of the idiosyncratic error {1.0 + 2.0 * rho:.3f} if "
            "it is autoregressive",
            consequence=EFFECT,
            conclusion=bench.verdict(
                test.p_value,
                f"{FOUND}. The coefficient below -0.5 means negative, above it positive correlation.",
                f"{text} A pattern that leaves neighbouring differences correlated by -0.5 stays invisible.",
            ),
            numbers={
                "coefficient": rho,
                "autocorrelation": 1.0 + 2.0 * rho,
                "chi_square": test.chi_square,
                "pairs": float(third.size),
                "detectable_autocorrelation": size,
            },
        )
    ]


def durbin_watson(bench: Bench) -> Sequence[Finding]:
    """Compare squared differences of within residuals with their squares."""
    links, e = bench.links, bench.within_residual
    if bench.curve.df_within < 2:
        raise IdentificationError("fewer than two degrees of freedom within units")
    later = np.flatnonzero(links.before)
    d = float(((e[later] - e[later - 1]) ** 2).sum() / (e @ e))
    first, second = difference_traces(bench)
    p, mean, spread = _beta(d, first, second, bench.curve.df_within, 0.0, 4.0)
    balanced = links.gaps == 0 and len(bench.curve.sizes) == 1
    shape = (
        ""
        if balanced
        else f"; {links.gaps} gaps and unequal sizes lower the value expected without correlation"
    )
    return [
        Finding(
            key="serial_durbin_watson",
            evidence="squared differences of within residuals one step apart over their squares, "
            f"{links.count} pairs; "
            f"expected {mean:.3f} without correlation (Bhargava, Franzini & Narendranathan 1982){shape}",
            statistic=d,
            reference="beta on (0, 4) with the exact mean and variance under normality, two-sided",
            p_value=p,
            departure=f"{d:.3f} against {mean:.3f}: {_side(d, mean, spread)}",
            consequence=EFFECT,
            conclusion=bench.verdict(
                p,
                f"{FOUND}.",
                "Detectable departure: not computed for this form; see the row for unequal spacing.",
            ),
            numbers={"expected": mean, "standard_deviation": spread, "z": (d - mean) / spread},
        )
    ]


def unequal_spacing(bench: Bench) -> Sequence[Finding]:
    """Form the locally best invariant statistic, for any spacing of periods."""
    links, e = bench.links, bench.within_residual
    df = bench.curve.df_within
    if df < 2:
        raise IdentificationError("fewer than two degrees of freedom within units")
    r = float(e @ links.neighbours(e) / (e @ e))
    found = traces(bench, np.inf)
    # A has eigenvalues between -2 and 2
    p, mean, spread = _beta(r, found.a, found.aa, df, -2.0, 2.0)
    one_step = (r * df - found.a) / found.aa
    reach = detectable_normal(bench.level, bench.power) * np.sqrt(2.0 / found.aa)
    jumps = np.diff(bench.rows.ordinals) if bench.rows.ordinals is not None else np.zeros(0)
    same = bench.rows.codes[1:] == bench.rows.codes[:-1]
    distances, counts = np.unique(jumps[same] // links.step, return_counts=True)
    listed = ", ".join(f"{c} x {g}" for g, c in list(zip(distances, counts, strict=True))[:5])
    return [
        Finding(
            key="serial_unequal_spacing",
            evidence="locally best invariant form for any spacing of periods (Baltagi & Wu 1999); "
            "neighbouring rows by "
            f"distance in steps (number x steps): {listed}{', ...' if distances.size > 5 else ''}; expected "
            f"{2.0 - mean:.3f} without correlation",
            statistic=2.0 - r,
            reference="beta on (0, 4) with the exact mean and variance under normality, two-sided",
            p_value=p,
            departure=f"autocorrelation over one step about {one_step:.3f} (one scoring step from zero)",
            consequence=EFFECT,
            conclusion=bench.verdict(
                p,
                f"{FOUND}.",
                f"Detectable with probability {bench.power:g}: {reach:.3g} of autocorrelation over one "
                "step, to first order. "
                "Correlation over other distances only stays invisible.",
            ),
            status=COMPUTED,
            numbers={
                "expected": 2.0 - mean,
                "standard_deviation": spread,
                "z": (mean - r) / spread,
                "autocorrelation_one_step": one_step,
                "detectable_autocorrelation": reach,
            },
        )
    ]


def _beta(
    value: float, trace: float, square: float, df: int, low: float, high: float
) -> tuple[float, float, float]:
    """Return the two-sided p-value of a ratio from a beta law with its moments, mean and standard deviation."""
    mean_array, covariance = ratio_moments(np.array([trace]), np.array([[square]]), df)
    mean, variance = float(mean_array[0]), float(covariance[0, 0])
    if variance <= 1e-12:
        raise IdentificationError(
            "the form has one value whatever the errors (two periods per unit): it shows nothing"
        )
    width = high - low
    m, v = (mean - low) / width, variance / width**2
    total = m * (1.0 - m) / v - 1.0
    law = stats.beta(m * total, (1.0 - m) * total)
    at = (value - low) / width
    return float(min(1.0, 2.0 * min(law.cdf(at), law.sf(at)))), mean, float(np.sqrt(variance))


def _side(d: float, mean: float, spread: float) -> str:
    z = (d - mean) / spread
    return f"{abs(z):.2g} standard deviations {'below, positive' if z < 0 else 'above, negative'} correlation side"
