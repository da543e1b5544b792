"""Every route in words and formulas, with its divisors, as an appendix prints it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from mixbridge.routes import named_route

__all__ = ["ESTIMATORS", "Estimator", "estimator_of"]


@dataclass(frozen=True, slots=True)
class Estimator:
    """One route as printed.

    Attributes
    ----------
    name : str
        Name in full.
    components : str
        How the variance components are obtained, with divisors, as one sentence without a full stop.
    tex, text : str
        The same as a formula; empty where words suffice.
    """

    name: str
    components: str
    tex: str = ""
    text: str = ""


_WITHIN = "σ_u² = RSS_w/(n − N − K_w)"
_WITHIN_TEX = r"\hat\sigma_u^2 = \frac{RSS_w}{n-N-K_w}"

ESTIMATORS: Mapping[str, Estimator] = {
    "pooled": Estimator(
        "ordinary least squares on all rows (pooled)", "no unit variance; error variance RSS/(n − K)"
    ),
    "within": Estimator(
        "within estimator (fixed effects)", "deviations from unit means; error variance RSS_w/(n − N − K_w)"
    ),
    "between": Estimator(
        "between estimator", "regression of unit means, weighted by unit size; error variance RSS/(N − K_p)"
    ),
    "first_difference": Estimator(
        "first differences", "least squares on differences of consecutive periods, without a constant"
    ),
    "swamy_arora": Estimator(
        "feasible generalised least squares after Swamy and Arora",
        "within residual variance with divisor n − N − K_w, and the between residual sum of squares, "
        "weighted by unit "
        "size, set equal to its expectation",
        _WITHIN_TEX + r",\quad \hat\sigma_\alpha^2 = \frac{q_b-(N-K_p)\hat\sigma_u^2}"
        r"{n-\mathrm{tr}[(X'PX)^{+}X'ZZ'X]}",
        f"{_WITHIN},  σ_α² = (q_b − (N − K_p) σ_u²) / (n − tr[(X'PX)⁺X'ZZ'X])",
    ),
    "wansbeek_kapteyn": Estimator(
        "feasible generalised least squares after Wansbeek and Kapteyn",
        "within and between forms in the residuals of the within slopes, after unit-constant columns are "
        "regressed out, "
        "set equal to their expectations",
    ),
    "wallace_hussain": Estimator(
        "feasible generalised least squares after Wallace and Hussain",
        "within and between forms in ordinary least-squares residuals, set equal to their expectations",
    ),
    "amemiya": Estimator(
        "feasible generalised least squares after Amemiya",
        "the forms of Wansbeek and Kapteyn with divisors n − N and n (Amemiya 1971; in unbalanced panels "
        "the form is an "
        "extension of this program)",
        r"\hat\sigma_u^2 = \frac{RSS_w}{n-N},\quad \hat\sigma_\alpha^2 = \frac{q_b-N\hat\sigma_u^2}{n}",
        "σ_u² = RSS_w/(n − N),  σ_α² = (q_b − N σ_u²)/n",
    ),
    "nerlove": Estimator(
        "feasible generalised least squares after Nerlove",
        "σ_u² = RSS_w/n, and the sample variance of estimated unit intercepts with divisor N − 1 "
        "(unit-constant covariates "
        "first regressed out, an extension of this program)",
    ),
    "pooled_minus_within": Estimator(
        "feasible generalised least squares, pooled minus within",
        "pooled residual variance with divisor n − K less the within residual variance with divisor n − "
        "N − K_w",
        _WITHIN_TEX + r",\quad \hat\sigma_\alpha^2 = \frac{RSS_{pooled}}{n-K}-\hat\sigma_u^2",
        f"{_WITHIN},  σ_α² = RSS_pooled/(n − K) − σ_u²",
    ),
    "fitting_constants": Estimator(
        "feasible generalised least squares, fitting constants (Henderson, method III)",
        "within residual variance, and the drop of the residual sum of squares when unit intercepts are "
        "added, set equal "
        "to its expectation",
        _WITHIN_TEX + r",\quad \hat\sigma_\alpha^2 = \frac{RSS_{pooled}-RSS_w-(N-K_c)\hat\sigma_u^2}"
        r"{n-\mathrm{tr}[(X'X)^{-1}X'ZZ'X]}",
        f"{_WITHIN},  σ_α² = (RSS_pooled − RSS_w − (N − K_c) σ_u²) / (n − tr[(X'X)⁻¹X'ZZ'X])",
    ),
    "minque": Estimator(
        "feasible generalised least squares, minimum-norm quadratic estimation",
        "the minimum-norm unbiased quadratic forms at a prior variance ratio",
    ),
    "ml": Estimator(
        "maximum likelihood",
        "the variance ratio that minimises the profile deviance; σ_u² with divisor n",
        r"D(\psi) = n\log r(\psi) + \sum_T m_T\log(1+T\psi),\quad \hat\sigma_u^2 = r(\hat\psi)/n",
        "D(ψ) = n log r(ψ) + Σ_T m_T log(1 + Tψ),  σ_u² = r(ψ)/n",
    ),
    "reml": Estimator(
        "restricted maximum likelihood (REML)",
        "the variance ratio that minimises the restricted profile deviance; σ_u² with divisor n − K",
        r"D(\psi) = (n-K)\log r(\psi) + \sum_T m_T\log(1+T\psi) + \log|A_{xx}(\psi)|,\quad "
        r"\hat\sigma_u^2 = r(\hat\psi)/(n-K)",
        "D(ψ) = (n − K) log r(ψ) + Σ_T m_T log(1 + Tψ) + log|A_xx(ψ)|,  σ_u² = r(ψ)/(n − K)",
    ),
}
"""By key of the route; a key of the ledger such as ``minque_1`` has its route's entry."""


def estimator_of(key: str) -> Estimator:
    """Return the entry of a key of the ledger."""
    return ESTIMATORS[named_route(key)[0]]
