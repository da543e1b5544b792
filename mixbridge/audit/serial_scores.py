"""Score tests of serial correlation jointly with, and beside, unit effects (Baltagi & Li 1995).

The covariance is ``sigma_u^2 (R(a) + psi J)`` with R a first-order autoregression (or moving average: the
derivative at a = 0 is the same adjacency A of neighbouring periods). Derived here for any spacing and any sizes from
the restricted likelihood, so that estimated coefficients are allowed for; for equal sizes without gaps, and without
that allowance, they are the forms of the paper.

Joint, ``psi = 0`` and ``a = 0``. With pooled residuals e, the ratios ``(e'ZZ'e, e'Ae)/e'e`` minus their exact means,
in their exact covariance (`forms`): chi-square with 2 degrees of freedom. Plain form, in `numbers`, equal sizes T:
``N T^2 / (2 (T-1)(T-2)) (A^2 - 4AB + 2TB^2)``, ``A = e'ZZ'e/e'e - 1``, ``B = sum e_t e_{t-1}/e'e``.

One-sided, ``a = 0`` given ``psi >= 0``. At restricted maximum likelihood with ``g = V_0^-1 (y - X beta)``, score
``s = (g'Ag/sigma_u^2 - tr PA)/2``; information ``tr(PB_1 PB_2)/2`` for B among A, ``ZZ'`` and ``V_0``; the part of s
orthogonal to the other two scores over its standard deviation is normal. This is the efficient score, so that it also
serves where the unit variance is estimated as zero.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy import stats

from mixbridge.audit.bench import Bench, usable
from mixbridge.audit.forms import ratio_moments, traces
from mixbridge.audit.power import detectable_normal
from mixbridge.audit.record import Finding
from mixbridge.audit.serial import EFFECT, FOUND
from mixbridge.errors import IdentificationError

__all__ = ["joint_score", "one_sided_score"]


def joint_score(bench: Bench) -> Sequence[Finding]:
    """Test no unit effects and no serial correlation together."""
    pooled, links, groups = bench.gls_at(0.0, 1.0), bench.links, bench.rows.groups
    e = pooled.deviation + groups.spread(pooled.mean)
    square = float(e @ e)
    values = np.array([float((groups.sum(e) ** 2).sum()), float(e @ links.neighbours(e))]) / square
    t = traces(bench, 0.0)
    mean, covariance = ratio_moments(np.array([t.j, t.a]), np.array([[t.jj, t.aj], [t.aj, t.aa]]), t.df)
    if np.linalg.cond(covariance / np.sqrt(np.outer(np.diag(covariance), np.diag(covariance)))) > 1e10:
        raise IdentificationError(
            "unit effects and serial correlation cannot be told apart (two periods per unit)"
        )
    gap = values - mean
    statistic = float(gap @ np.linalg.solve(covariance, gap))
    p = float(stats.chi2.sf(statistic, 2))
    error = np.sqrt(np.diag(covariance))
    n, sizes, pairs = float(e.size), groups.sizes.astype(float), float(links.count)
    a, b = values[0] - 1.0, values[1] / 2.0
    information = np.array([[float(sizes @ sizes) - n, 2.0 * pairs], [2.0 * pairs, 2.0 * pairs]]) / 2.0
    score = n * np.array([a, 2.0 * b]) / 2.0
    singular = abs(np.linalg.det(information)) < 1e-12 * information[0, 0] * information[1, 1]
    plain = np.nan if singular else float(score @ np.linalg.solve(information, score))
    return [
        Finding(
            key="serial_joint",
            evidence="joint score test of no unit effects and no serial correlation, from pooled "
            "residuals (Baltagi & Li 1995), "
            "with exact means and covariance under normality",
            statistic=statistic,
            reference="chi-square(2)",
            p_value=p,
            departure=f"unit effects {gap[0] / error[0]:.2g}, neighbouring periods "
            f"{gap[1] / error[1]:.2g} standard deviations from "
            "what independence gives",
            consequence="pooled standard errors would be too small; either cause alone makes the other "
            "look present, so this row "
            "does not say which",
            conclusion=bench.verdict(
                p,
                "rows of a unit go together. Which of the two it is, the one-sided row and the tests of "
                "the unit variance show.",
                "Detectable departure: not computed.",
            ),
            numbers={"plain": plain, "z_unit_effects": gap[0] / error[0], "z_neighbours": gap[1] / error[1]},
        )
    ]


def one_sided_score(bench: Bench) -> Sequence[Finding]:
    """Test serial correlation beside unit effects, against positive correlation."""
    fit = bench.study.fits.get("reml") or bench.study.fit("reml")
    if not usable(fit):
        raise IdentificationError(f"route reml: {fit.status}")
    gls, links, groups = bench.gls_at(fit.ratio, fit.idiosyncratic_variance), bench.links, bench.rows.groups
    sizes = groups.sizes.astype(float)
    left = 1.0 / (1.0 + sizes * fit.ratio)
    g = gls.deviation + groups.spread(left * gls.mean)
    t = traces(bench, fit.ratio)
    total = groups.sum(g)
    scores = 0.5 * np.array(
        [
            float(g @ links.neighbours(g)) / fit.idiosyncratic_variance - t.a,
            float(total @ total) / fit.idiosyncratic_variance - t.j,
            0.0,
        ]
    )
    information = 0.5 * np.array([[t.aa, t.aj, t.a], [t.aj, t.jj, t.j], [t.a, t.j, float(t.df)]])
    weights = np.linalg.solve(information[1:, 1:], information[1:, 0])
    effective = float(information[0, 0] - weights @ information[1:, 0])
    if effective <= 1e-10 * information[0, 0]:
        raise IdentificationError(
            "serial correlation and unit effects cannot be told apart (two periods per unit)"
        )
    score = float(scores[0] - weights @ scores[1:])
    z = score / np.sqrt(effective)
    p = float(stats.norm.sf(z))
    reach = detectable_normal(bench.level, bench.power, sides=1) / np.sqrt(effective)
    return [
        Finding(
            key="serial_one_sided",
            evidence="score test of positive serial correlation beside unit effects, at reml (ratio "
            f"{fit.ratio:.4g}; Baltagi & Li "
            "1995), given normality",
            statistic=z,
            reference="N(0, 1), upper tail",
            p_value=p,
            departure=f"autocorrelation over one step about {score / effective:.3f} (one scoring step from zero)",
            consequence=EFFECT,
            conclusion=bench.verdict(
                p,
                f"{FOUND}.",
                f"Detectable with probability {bench.power:g}: {reach:.3g}, to first order. Negative "
                "correlation is not looked for "
                "here.",
            ),
            numbers={
                "two_sided_p": float(2.0 * stats.norm.sf(abs(z))),
                "autocorrelation_one_step": score / effective,
                "detectable_autocorrelation": reach,
            },
        )
    ]
