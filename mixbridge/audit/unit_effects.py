"""Unit effects unrelated to the covariates: contrasts of routes, which are tests of the unit means.

Joint: the Wald statistic of the unit means at the ratio of the primary route (`mixbridge.inference.contrasts`),
model-based with one idiosyncratic variance, and cluster-robust. Per term of the formula: the gap within minus GLS,
model-based with covariance ``sigma_u^2 (M_w - M_g)`` restricted to the columns of the term, and cluster-robust from
what each unit contributes to both estimates (Hausman 1978; Hausman & Taylor 1981; Mundlak 1978; Arellano 1993).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from mixbridge.audit.bench import Bench
from mixbridge.audit.power import detectable_chi_square, detectable_f, detectable_normal
from mixbridge.audit.record import Finding
from mixbridge.audit.regress import wald
from mixbridge.errors import IdentificationError
from mixbridge.inference.contrasts import Contrast, contrast_terms, contrasts
from mixbridge.inference.robust_regression import regression_of
from mixbridge.routes import Fit

__all__ = ["joint_model", "joint_robust", "terms_model", "terms_robust"]

FloatArray = NDArray[np.float64]
EPS = float(np.finfo(float).eps)

BIASED = (
    "every route on the curve short of within, and pooled and between, would be biased for the named "
    "slopes by their gap "
    "and more; within and first_difference would not be biased by this"
)
FOUND = (
    "the covariates and the unit effects go together, or another assumption fails that moves the two slopes apart "
    "(endogeneity, a wrong form, measurement error). It does not say which, and does not make within slopes causal"
)
BLIND = (
    "Related effects that happen to leave both slopes equal are invisible, and so is what varies over time. "
    "The contrast says nothing about unit-constant covariates"
)


def joint_model(bench: Bench) -> Sequence[Finding]:
    """Test all unit means at once under the model."""
    item = _joint(contrasts(bench.curve, bench.primary, None), "one idiosyncratic variance")
    size = detectable_chi_square(item.df, bench.level, bench.power)
    numbers = {"df": float(item.df), "detectable_noncentrality": size}
    return [
        Finding(
            key="unit_means_model",
            evidence=f"Wald statistic of the unit means at the ratio of {bench.primary.route}, model-based",
            statistic=item.statistic,
            reference=f"chi-square({item.df})",
            p_value=item.p_value,
            departure=_largest(bench),
            consequence=BIASED,
            conclusion=bench.verdict(
                item.p_value,
                FOUND + ".",
                f"Detectable with probability {bench.power:g}: {np.sqrt(size):.3g} standard errors of the "
                "contrast in "
                f"one direction. {BLIND}.",
            ),
            numbers=numbers,
        )
    ]


def joint_robust(bench: Bench) -> Sequence[Finding]:
    """Test all unit means at once, with a covariance robust to any dependence within units."""
    item = _joint(contrasts(bench.curve, bench.primary, bench.study.products), "cluster-robust")
    units, q = bench.curve.units, item.df
    f = item.statistic * (units - q) / (q * (units - 1.0))
    p = float(stats.f.sf(f, q, units - q))
    size = detectable_f(q, units - q, bench.level, bench.power)
    return [
        Finding(
            key="unit_means_robust",
            evidence=(
                "Wald statistic of the unit means, cluster-robust by unit with N/(N - 1), in the form of "
                "Hotelling's T^2; "
                "needs neither equal variances nor independent errors within units"
            ),
            statistic=f,
            reference=f"F({q}, {units - q}), cluster-robust by unit",
            p_value=p,
            departure=_largest(bench),
            consequence=BIASED,
            conclusion=bench.verdict(
                p,
                FOUND + ".",
                f"Detectable with probability {bench.power:g}: {np.sqrt(size):.3g} robust standard errors of the "
                f"contrast in one direction. {BLIND}.",
            ),
            numbers={"chi_square": item.statistic, "df": float(q), "detectable_noncentrality": size},
        )
    ]


def _joint(found: tuple[Contrast, ...], variance: str) -> Contrast:
    for item in found:
        if item.name == "unit means" and item.variance.startswith(variance):
            if not np.isfinite(item.statistic):
                raise IdentificationError(item.note)
            return item
    raise IdentificationError("no coefficient is determined both within units and between unit means")


def terms_model(bench: Bench) -> Sequence[Finding]:
    """Contrast within and GLS slopes term by term, under the model."""
    fit, within = bench.primary, bench.study.fit("within")
    spread = within.root @ within.root.T - fit.root @ fit.root.T
    found = []
    for term, columns in _terms(bench, within, fit):
        gap = (within.beta - fit.beta)[columns]
        covariance = fit.idiosyncratic_variance * spread[np.ix_(columns, columns)]
        scale = np.sqrt(np.diag(covariance))
        values, vectors = np.linalg.eigh(covariance / np.outer(scale, scale))
        keep = values > 1e-10
        turned = vectors[:, keep].T @ (gap / scale)
        statistic, df = float((turned**2 / values[keep]).sum()), int(keep.sum())
        p = float(stats.chi2.sf(statistic, df))
        reach = detectable_normal(bench.level, bench.power) * scale
        found.append(
            _term(bench, "model", term, columns, fit, within, statistic, f"chi-square({df})", p, reach)
        )
    return found


def terms_robust(bench: Bench) -> Sequence[Finding]:
    """Contrast within and GLS slopes term by term, cluster-robust."""
    fit, within = bench.primary, bench.study.fit("within")
    products = bench.study.products
    inside = regression_of(bench.curve, products, np.inf)
    gls = regression_of(bench.curve, products, fit.ratio)
    influence = inside.scores() @ inside.root.T - gls.scores() @ gls.root.T
    found = []
    for term, columns in _terms(bench, within, fit):
        test = wald((within.beta - fit.beta)[columns], influence[:, columns])
        units = test.df[0] + test.df[1]
        error = np.sqrt((influence[:, columns] ** 2).sum(axis=0) * units / (units - 1.0))
        reach = np.sqrt(detectable_f(1, units - 1, bench.level, bench.power)) * error
        found.append(
            _term(
                bench,
                "robust",
                term,
                columns,
                fit,
                within,
                test.statistic,
                test.reference,
                test.p_value,
                reach,
            )
        )
    return found


def _terms(bench: Bench, within: Fit, fit: Fit) -> list[tuple[str, list[int]]]:
    """Return the terms of the formula with columns whose contrast has a variance."""
    table = contrast_terms(bench.curve, fit, within)
    usable = np.isfinite(table["z"].to_numpy())
    terms = {
        term: [j for j in range(place.start, place.stop) if usable[j]]
        for term, place in bench.study.panel.terms.items()
    }
    found = [(term, columns) for term, columns in terms.items() if columns]
    if not found:
        raise IdentificationError("no coefficient is determined both within units and between unit means")
    return found


def _term(
    bench: Bench,
    kind: str,
    term: str,
    columns: list[int],
    fit: Fit,
    within: Fit,
    statistic: float,
    reference: str,
    p: float,
    reach: FloatArray,
) -> Finding:
    gap = within.beta - fit.beta
    error = fit.standard_errors.to_numpy()
    j = columns[int(np.argmax(np.abs(gap[columns]) / error[columns]))]
    at = float(reach[columns.index(j)])
    name = bench.names[j]
    numbers: dict[str, float] = {}
    for place, column in enumerate(columns):
        label = bench.names[column]
        numbers |= {
            f"within:{label}": float(within.beta[column]),
            f"gls:{label}": float(fit.beta[column]),
            f"gap_in_se:{label}": float(gap[column] / error[column]),
            f"detectable_gap:{label}": float(reach[place]),
        }
    how = "model-based" if kind == "model" else "cluster-robust by unit"
    return Finding(
        key=f"unit_means_{kind}:{term}",
        evidence=f"within minus {fit.route}, {term} alone, {how}",
        statistic=statistic,
        reference=reference,
        p_value=p,
        departure=f"{name}: within {within.beta[j]:.4g}, {fit.route} {fit.beta[j]:.4g}, gap {gap[j]:.3g} "
        f"= {gap[j] / error[j]:.2g} standard errors of {fit.route}",
        consequence=BIASED,
        conclusion=bench.verdict(
            p,
            FOUND + ".",
            f"Detectable with probability {bench.power:g}: a gap of {at:.3g} for {name} "
            f"({at / error[j]:.2g} standard errors of {fit.route}). {BLIND}.",
        ),
        numbers=numbers,
    )


def _largest(bench: Bench) -> str:
    fit, within = bench.primary, bench.study.fit("within")
    table = contrast_terms(bench.curve, fit, within).dropna(subset=["in_se"])
    if table.empty:  # only combinations of slopes are determined within units
        return (
            f"no single slope has both a within and a {fit.route} value; the test is of combinations of them"
        )
    worst = table.iloc[int(table["in_se"].abs().to_numpy().argmax())]
    return (
        f"largest gap: {worst['term']}, within {worst['within']:.4g} against {fit.route} {worst['gls']:.4g}, "
        f"{abs(worst['in_se']):.2g} standard errors of {fit.route}"
    )
