"""Identities 5, 6 and 10: test statistics that are one number in several dresses."""

from __future__ import annotations

import numpy as np

from mixbridge.inference.contrasts import contrasts
from mixbridge.inference.pivot import no_pivot, pivot_of
from mixbridge.inference.variance_tests import multiplier_of
from mixbridge.moments import noise
from mixbridge.reconcile.identities.plain import EPS
from mixbridge.reconcile.identities.registry import Compared, Unmet, identity
from mixbridge.reconcile.identities.setting import Setting, multiple
from mixbridge.routes import Profile

__all__: list[str] = []


@identity(
    number=5,
    name="one chi-square",
    statement="at one ratio and one idiosyncratic variance, the within - GLS contrast = the drop of the residual "
    "sum of squares when unit means are added, over that variance",
    source="Hausman & Taylor 1981; Arellano 1993",
)
def one_chi_square(setting: Setting) -> Compared | Unmet:
    """Compare the contrast of covariances with two residual sums of squares, at the REML ratio."""
    missing = setting.missing("reml")
    if missing:
        return Unmet(missing)
    curve, fit = setting.curve, setting.fits["reml"]
    if fit.ratio not in setting.wide:
        return Unmet("more rows than columns with unit means")
    if setting.with_means.rank < curve.rank_within + curve.rank_between:
        return Unmet("unit means told apart from their columns")
    found = [item for item in contrasts(curve, fit) if item.variance == "one idiosyncratic variance"]
    if not found:
        return Unmet("shared directions: no column varies both within units and between their means")
    contrast = next(item for item in found if item.name == "within - gls")
    if not contrast.smallest > 1e-4 or setting.snapped:
        return Unmet(
            "digits left in the difference of covariances: its smallest eigenvalue, relative to the within "
            f"covariance, is {contrast.smallest:.2g}"
        )
    solved, unit = setting.wide[fit.ratio], setting.with_means.unit**2
    residual = curve.at(fit.ratio).residual
    right = (residual - unit * solved.residual) / fit.idiosyncratic_variance
    size = max(residual / fit.idiosyncratic_variance, 1.0)
    inner = float(np.linalg.cond(curve.within_root))
    lost = curve.condition * setting.engine_condition(fit.ratio) * inner / min(contrast.smallest, 1.0)
    amplified = solved.condition * unit * solved.total / residual + lost
    return Compared(
        f"{contrast.df} shared directions, ratio {fit.ratio:.6g}",
        contrast.statistic,
        right,
        "within - GLS contrast, from the difference of covariances",
        "Wald statistic of the unit means, from residual sums of squares",
        abs(contrast.statistic - right) / size,
        multiple(setting.with_means.rank) * amplified + _stored(setting) / min(contrast.smallest, 1.0),
        f"64 (columns + 1) x 2.2e-16 x (condition with means {solved.condition:.3g} x total over residual sum of "
        f"squares + condition of X x condition of QX {inner:.3g} over the smallest relative eigenvalue "
        f"{contrast.smallest:.3g} of the difference), plus the stored rounding of within deviations over the same; "
        "relative to the residual sum of squares over the variance",
    )


def _stored(setting: Setting) -> float:
    """Return the largest rounding of a stored column relative to its deviations from unit means."""
    moments = setting.curve.moments
    length = np.sqrt((moments.within[:, :-1] ** 2).sum(axis=0))
    floor = noise(moments)[:-1]
    return float(np.max(floor[length > floor] / length[length > floor], initial=0.0))


@identity(
    number=6,
    name="multiplier and score",
    statement="Lagrange multiplier statistic for a zero unit variance = squared ML score at 0 over its expected "
    "information, the idiosyncratic variance partialled out",
    source="Breusch & Pagan 1980; Baltagi & Li 1990",
)
def multiplier_is_score(setting: Setting) -> Compared | Unmet:
    """Compare the residual form of the statistic with the derivative of the profile deviance."""
    missing = setting.missing("pooled")
    if missing:
        return Unmet(missing)
    curve = setting.curve
    left = multiplier_of(curve)
    if not np.isfinite(left.two_sided):
        return Unmet(left.reason or "statistic not computable")
    values = Profile(curve, "ml").values(np.array([0.0]))
    score = -0.5 * float(values.slope[0])
    information = 0.5 * (float(curve.counts @ curve.sizes**2) - curve.n)
    right = score**2 / information
    # the score is a difference of two terms of size n; its square doubles the relative error
    size = max(right, curve.n**2 / information)
    return Compared(
        "some unit has two rows",
        left.two_sided,
        right,
        "n^2 (1 - e'ZZ'e/e'e)^2 / (2 sum T^2 - 2 n), pooled residuals",
        "squared score of the profile likelihood over its information",
        abs(left.two_sided - right) / size,
        multiple(curve.rank) * curve.condition,
        f"64 (columns + 1) x 2.2e-16 x condition of X {curve.condition:.3g}; relative to the squares that are "
        "subtracted in the score",
    )


@identity(
    number=10,
    name="pivot at zero",
    statement="the exact pivot at ratio 0 = the F test of equal unit intercepts",
    source="Wald 1947; Seely & El-Bassiouni 1983; Harville & Fenech 1985",
)
def pivot_is_f(setting: Setting) -> Compared | Unmet:
    """Compare the pivot with the F statistic from the pooled and the within fit."""
    curve = setting.curve
    why = no_pivot(curve)
    if why is not None:
        return Unmet(why)
    missing = setting.missing("pooled", "within")
    if missing:
        return Unmet(missing)
    pooled, within = setting.fits["pooled"], setting.fits["within"]
    restricted, free = (fit.scale * fit.residual_df for fit in (pooled, within))
    df = curve.units - curve.rank_constant
    right = (restricted - free) / df / (free / within.residual_df)
    left = pivot_of(curve).statistic(0.0)
    size = restricted / df / (free / within.residual_df)
    inner = float(np.linalg.cond(curve.within_root)) if curve.rank_within else 1.0
    return Compared(
        f"N - K_c = {df}, n - N - K_w = {curve.df_within}",
        left,
        right,
        "pivot at ratio 0",
        "F of unit intercepts, from pooled and within residual sums of squares",
        abs(left - right) / size,
        multiple(curve.rank) * curve.condition * inner + 8.0 * EPS * curve.n**0.5,
        f"64 (columns + 1) x 2.2e-16 x condition of X {curve.condition:.3g} x condition of QX {inner:.3g}; relative "
        "to the pooled residual sum of squares",
    )


@identity(
    number=10,
    name="inverted pivot",
    statement="the ends of the exact set for the ratio are where the pivot's p value is half of one minus the level",
    source="Wald 1947; Harville & Fenech 1985",
)
def inverted_pivot(setting: Setting) -> Compared | Unmet:
    """Compare the tail probability at the upper end of the 95% set with 0.025."""
    curve = setting.curve
    missing = setting.missing("pooled")
    if missing:
        return Unmet(missing)
    why = no_pivot(curve)
    if why is not None:
        return Unmet(why)
    pivot = pivot_of(curve)
    found = pivot.ratio_set(0.95)
    if found.empty or not found.upper > 0.0:
        return Unmet("an end above zero: the set is empty or holds 0 alone")
    upper_tail = float(pivot.p_value(found.upper))
    left = min(upper_tail, 1.0 - upper_tail)
    return Compared(
        f"exact 95% set {found.lower:.6g} to {found.upper:.6g}",
        left,
        0.025,
        "tail probability of the pivot at the upper end",
        "half of one minus the level",
        abs(left - 0.025) / 0.025,
        5e-10 + multiple(curve.rank) * curve.condition * curve.n,
        "relative stop of the root at 4 roundings, amplified by at most n in the tail probability",
    )
