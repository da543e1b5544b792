"""The vocabulary of an audience. Only names change with it: every claim and every number is the same."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from mixbridge.display.text import number
from mixbridge.errors import OptionError

__all__ = ["AUDIENCES", "VOCABULARY", "Words", "count", "listed", "num", "said_p", "words_for"]


@dataclass(frozen=True, slots=True)
class Words:
    """Names of one audience.

    Attributes
    ----------
    model, effect, error : str
        The model; the unit effect; the rest.
    unit_variance, idiosyncratic_variance : str
        The two components.
    weight : str
        What is subtracted of a unit mean, and the unit's own share in its predicted effect.
    unrelated : str
        The shared assumption.
    gls, within : str
        Slopes of the routes on the curve, and within slopes.
    robust : str
        Standard errors robust to dependence within units.
    contrast : str
        The test that compares the two kinds of slopes.
    """

    model: str
    effect: str
    error: str
    unit_variance: str
    idiosyncratic_variance: str
    weight: str
    unrelated: str
    gls: str
    within: str
    robust: str
    contrast: str


AUDIENCES: Mapping[str, Words] = {
    "economics": Words(
        model="an error-components (random-effects) model",
        effect="unit effect",
        error="idiosyncratic error",
        unit_variance="variance of the unit effects",
        idiosyncratic_variance="variance of the idiosyncratic error",
        weight="quasi-demeaning weight λ, and shrinkage s = λ(2 − λ)",
        unrelated="unit effects uncorrelated with the covariates",
        gls="random-effects (FGLS) slopes",
        within="fixed-effects (within) slopes",
        robust="standard errors clustered by unit",
        contrast="Hausman-type contrast",
    ),
    "biostatistics": Words(
        model="a linear mixed model with a random intercept",
        effect="random intercept",
        error="residual",
        unit_variance="random-intercept variance",
        idiosyncratic_variance="residual variance",
        weight="shrinkage s, and the share λ of a unit mean that is subtracted, s = λ(2 − λ)",
        unrelated="random intercepts unrelated to the covariates",
        gls="fixed-effect slopes of the mixed model",
        within="within-unit slopes",
        robust="cluster-robust (sandwich) standard errors",
        contrast="contrast",
    ),
    "both": Words(
        model="a random-intercept model (in economics: error components)",
        effect="unit effect (random intercept)",
        error="idiosyncratic error (residual)",
        unit_variance="unit variance (random-intercept variance)",
        idiosyncratic_variance="idiosyncratic (residual) variance",
        weight="quasi-demeaning weight λ and shrinkage s = λ(2 − λ)",
        unrelated="unit effects (random intercepts) unrelated to the covariates",
        gls="generalised least-squares (random-effects) slopes",
        within="within (fixed-effects) slopes",
        robust="cluster-robust standard errors (clustered by unit, sandwich)",
        contrast="contrast (Hausman type)",
    ),
}

VOCABULARY: tuple[tuple[str, str, str], ...] = (
    ("unit i, T_i rows", "individual, panel unit", "cluster, subject"),
    ("unit effect α_i", "individual effect", "random intercept"),
    ("idiosyncratic error u_it", "idiosyncratic error", "residual"),
    ("unit variance σ_α²", "variance of the individual effects", "random-intercept variance"),
    ("idiosyncratic variance σ_u²", "variance of the idiosyncratic error", "residual variance"),
    ("ICC, ψ/(1 + ψ)", "share of variance due to the individual effects, ρ", "intraclass correlation"),
    ("weight λ_i", "quasi-demeaning weight, often θ", "share of the cluster mean subtracted"),
    ("shrinkage s_i", "reliability of the estimated individual effect", "shrinkage"),
    ("coefficient β at the ratio of a route", "random-effects (FGLS) coefficient", "fixed effect"),
    ("within slope", "fixed-effects coefficient", "within-cluster effect"),
    ("unit means added", "correlated random effects", "within and between effects apart"),
    ("contrast of within and GLS slopes", "Hausman test", "test of equal within and between effects"),
)
"""Names here, in economics and in biostatistics; in common use (from memory), and authors differ."""


def words_for(audience: str) -> Words:
    """Return the vocabulary of an audience."""
    if audience not in AUDIENCES:
        raise OptionError.not_among("audience", audience, tuple(AUDIENCES))
    return AUDIENCES[audience]


def num(value: Any, digits: int = 4) -> str:
    """Return a value of a record as shown in a sentence: rounded, infinite or not there."""
    if value is None:
        return "not defined"
    if isinstance(value, str):
        return {"inf": "infinite", "-inf": "minus infinite"}.get(value, value)
    if isinstance(value, int):
        return str(value)
    return number(float(value), digits)


def said_p(value: float) -> str:
    """Return ``p = 0.031``; a p value that underflows is not called zero."""
    return f"p = {num(value, 3)}" if value > 0.0 else "p below the smallest number a computer holds"


def count(number_of: int, singular: str, plural: str = "") -> str:
    """Return ``1 unit`` or ``3 units``."""
    return f"{number_of} {singular if number_of == 1 else plural or singular + 's'}"


def listed(names: list[str]) -> str:
    """Return ``a, b and c``."""
    if len(names) < 2:
        return "".join(names)
    return f"{', '.join(names[:-1])} and {names[-1]}"
