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
        How the variance components are obtained, with divisors and source, as a phrase without a full stop.
    tex, text : str
        Components, or coefficients of a route off the curve, as a formula; empty where words suffice.
    symbols : str
        What the symbols of the formula mean that the model does not explain; empty where there are none.
    """

    name: str
    components: str
    tex: str = ""
    text: str = ""
    symbols: str = ""


_WITHIN = "σ_u² = RSS_w/(n − N − K_w)"
_WITHIN_TEX = r"\hat\sigma_u^2 = \frac{RSS_w}{n-N-K_w}"
_RSS = "RSS_w is the within residual sum of squares"
_POOLED = "RSS_pooled that of ordinary least squares on all rows"
_MEANS = "P replaces a value by the mean of its unit"
_DEVIANCE = (
    "r(ψ) is the generalised residual sum of squares at the ratio ψ, m_T the number of units with T rows"
)
_PAIR_TEX = (
    r"\begin{pmatrix} q_1 \\ q_2 \end{pmatrix} = "
    r"C \begin{pmatrix} \hat\sigma_u^2 \\ \hat\sigma_\alpha^2 \end{pmatrix}"
)
_PAIR = "(q₁, q₂)' = C (σ_u², σ_α²)'"
_REMAINDERS = (
    "q_b is the sum of squares, weighted by unit size, of the unit means of y − Xb after unit-constant columns "
    "are regressed out, b the within slopes"
)

ESTIMATORS: Mapping[str, Estimator] = {
    "pooled": Estimator(
        "ordinary least squares on all rows (pooled)",
        "no unit variance; error variance RSS/(n − K)",
        r"\hat\beta = (X'X)^{-1}X'y",
        "β = (X'X)⁻¹X'y",
    ),
    "within": Estimator(
        "the within estimator (fixed effects)",
        "no unit variance; error variance RSS_w/(n − N − K_w)",
        r"\hat\beta = (X'QX)^{+}X'Qy",
        "β = (X'QX)⁺X'Qy",
        "Q takes deviations from unit means, and columns that do not vary within units have no coefficient",
    ),
    "between": Estimator(
        "the between estimator",
        "no unit variance; error variance RSS/(N − K_p) of the regression of unit means",
        r"\hat\beta = (X'PX)^{+}X'Py",
        "β = (X'PX)⁺X'Py",
        "P replaces a value by the mean of its unit, so that unit means are weighted by the number of rows",
    ),
    "first_difference": Estimator(
        "first differences",
        "no unit variance; error variance RSS over the number of differences less their rank",
        r"\hat\beta = (\Delta X'\Delta X)^{+}\Delta X'\Delta y",
        "β = (ΔX'ΔX)⁺ΔX'Δy",
        "Δ takes differences of consecutive periods of a unit, never over a gap, and no constant is added",
    ),
    "swamy_arora": Estimator(
        "feasible generalised least squares after Swamy and Arora",
        "within residual variance with divisor n − N − K_w, and the between residual sum of squares set equal to "
        "its expectation (Swamy & Arora 1972; unequal sizes: Baltagi & Chang 1994)",
        _WITHIN_TEX + r",\quad \hat\sigma_\alpha^2 = \frac{q_b-(N-K_p)\hat\sigma_u^2}"
        r"{n-\mathrm{tr}[(X'PX)^{+}X'ZZ'X]}",
        f"{_WITHIN},  σ_α² = (q_b − (N − K_p) σ_u²) / (n − tr[(X'PX)⁺X'ZZ'X])",
        f"{_RSS}, q_b that of the regression of unit means weighted by unit size; {_MEANS}",
    ),
    "wansbeek_kapteyn": Estimator(
        "feasible generalised least squares after Wansbeek and Kapteyn",
        "within residual variance with divisor n − N − K_w, and the unit means of within residuals, unit-constant "
        "columns regressed out, set equal to their expectation (Wansbeek & Kapteyn 1989)",
        _WITHIN_TEX + r",\quad \hat\sigma_\alpha^2 = \frac{q_b-c_1\hat\sigma_u^2}{c_2}",
        f"{_WITHIN},  σ_α² = (q_b − c₁ σ_u²)/c₂",
        f"{_RSS}; {_REMAINDERS}; its expectation is c₁ σ_u² + c₂ σ_α²",
    ),
    "wallace_hussain": Estimator(
        "feasible generalised least squares after Wallace and Hussain",
        "within and between sums of squares of ordinary least-squares residuals, set equal to their expectations "
        "(Wallace & Hussain 1969; unequal sizes: Baltagi & Chang 1994)",
        _PAIR_TEX,
        _PAIR,
        "q₁ = e'Qe and q₂ = e'Pe in residuals e of ordinary least squares on all rows, P means within units, "
        "Q = I − P; C holds their expectations",
    ),
    "amemiya": Estimator(
        "feasible generalised least squares after Amemiya",
        "the forms of Wansbeek and Kapteyn with divisors n − N and n (Amemiya 1971; for unequal sizes an extension "
        "of this program)",
        r"\hat\sigma_u^2 = \frac{RSS_w}{n-N},\quad \hat\sigma_\alpha^2 = \frac{q_b-N\hat\sigma_u^2}{n}",
        "σ_u² = RSS_w/(n − N),  σ_α² = (q_b − N σ_u²)/n",
        f"{_RSS}; {_REMAINDERS}",
    ),
    "nerlove": Estimator(
        "feasible generalised least squares after Nerlove",
        "RSS_w/n, and the sample variance of estimated unit intercepts (Nerlove 1971; unit-constant columns first "
        "regressed out, an extension of this program)",
        r"\hat\sigma_u^2 = \frac{RSS_w}{n},\quad \hat\sigma_\alpha^2 = \frac{q_b}{N-1}",
        "σ_u² = RSS_w/n,  σ_α² = q_b/(N − 1)",
        f"{_RSS}, q_b the unweighted sum of squares of the unit means of y − Xb after unit-constant columns are "
        "regressed out, b the within slopes",
    ),
    "pooled_minus_within": Estimator(
        "feasible generalised least squares, pooled minus within",
        "pooled residual variance with divisor n − K less the within residual variance with divisor n − N − K_w "
        "(textbook form, as in Greene 2018)",
        _WITHIN_TEX + r",\quad \hat\sigma_\alpha^2 = \frac{RSS_{pooled}}{n-K}-\hat\sigma_u^2",
        f"{_WITHIN},  σ_α² = RSS_pooled/(n − K) − σ_u²",
        f"{_RSS}, {_POOLED}",
    ),
    "fitting_constants": Estimator(
        "feasible generalised least squares, fitting constants",
        "within residual variance with divisor n − N − K_w, and the drop of the residual sum of squares when unit "
        "intercepts are added, set equal to its expectation (method III of Henderson 1953)",
        _WITHIN_TEX + r",\quad \hat\sigma_\alpha^2 = \frac{RSS_{pooled}-RSS_w-(N-K_c)\hat\sigma_u^2}"
        r"{n-\mathrm{tr}[(X'X)^{-1}X'ZZ'X]}",
        f"{_WITHIN},  σ_α² = (RSS_pooled − RSS_w − (N − K_c) σ_u²) / (n − tr[(X'X)⁻¹X'ZZ'X])",
        f"{_RSS}, {_POOLED}",
    ),
    "minque": Estimator(
        "feasible generalised least squares, minimum-norm quadratic estimation",
        "minimum-norm quadratic unbiased forms at a prior ratio (Rao 1971)",
        _PAIR_TEX + r",\quad q_1 = y'P_0P_0y,\quad q_2 = y'P_0ZZ'P_0y",
        f"{_PAIR},  q₁ = y'P₀P₀y,  q₂ = y'P₀ZZ'P₀y",
        "P₀ = V₀⁻¹ − V₀⁻¹X(X'V₀⁻¹X)⁻¹X'V₀⁻¹ with V₀ at the prior ratio; C holds the expectations of the two forms",
    ),
    "ml": Estimator(
        "maximum likelihood (ML)",
        "the ratio ψ ≥ 0 with the smallest profile deviance, and σ_u² with divisor n (Hartley & Rao 1967)",
        r"D(\psi) = n\log r(\psi) + \sum_T m_T\log(1+T\psi),\quad \hat\sigma_u^2 = r(\hat\psi)/n",
        "D(ψ) = n log r(ψ) + Σ_T m_T log(1 + Tψ),  σ_u² = r(ψ)/n",
        _DEVIANCE,
    ),
    "reml": Estimator(
        "restricted maximum likelihood (REML)",
        "the ratio ψ ≥ 0 with the smallest restricted profile deviance, and σ_u² with divisor n − K "
        "(Patterson & Thompson 1971; "
        "Harville 1977)",
        r"D(\psi) = (n-K)\log r(\psi) + \sum_T m_T\log(1+T\psi) + \log|X'V_0^{-1}X|,\quad "
        r"\hat\sigma_u^2 = r(\hat\psi)/(n-K)",
        "D(ψ) = (n − K) log r(ψ) + Σ_T m_T log(1 + Tψ) + log|X'V₀⁻¹X|,  σ_u² = r(ψ)/(n − K)",
        _DEVIANCE,
    ),
}
"""By key of the route; a key of the ledger such as ``minque_1`` has its route's entry."""


def estimator_of(key: str) -> Estimator:
    """Return the entry of a key of the ledger."""
    return ESTIMATORS[named_route(key)[0]]
