"""The vocabulary of an audience. Only names change with it: every claim and every number is the same."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from mixbridge.errors import OptionError
from mixbridge.report.text import number

__all__ = ["AUDIENCES", "Words", "count", "listed", "num", "words_for"]


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
        What is subtracted of a unit mean, or the unit's own share in its predicted effect.
    unrelated : str
        The shared assumption.
    """

    model: str
    effect: str
    error: str
    unit_variance: str
    idiosyncratic_variance: str
    weight: str
    unrelated: str


AUDIENCES: Mapping[str, Words] = {
    "economics": Words(
        model="an error-components (random-effects) model",
        effect="unit effect",
        error="idiosyncratic error",
        unit_variance="variance of the unit effects",
        idiosyncratic_variance="variance of the idiosyncratic error",
        weight="quasi-demeaning weight λ",
        unrelated="unit effects uncorrelated with the covariates",
    ),
    "biostatistics": Words(
        model="a linear mixed model with a random intercept",
        effect="random intercept",
        error="residual error",
        unit_variance="random-intercept variance",
        idiosyncratic_variance="residual variance",
        weight="shrinkage s",
        unrelated="random intercepts unrelated to the covariates",
    ),
    "both": Words(
        model="a random-intercept model (in economics: error components)",
        effect="unit effect (random intercept)",
        error="idiosyncratic error (residual)",
        unit_variance="unit variance (random-intercept variance)",
        idiosyncratic_variance="idiosyncratic (residual) variance",
        weight="quasi-demeaning weight λ and shrinkage s = λ(2 − λ)",
        unrelated="unit effects (random intercepts) unrelated to the covariates",
    ),
}


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


def count(number_of: int, singular: str, plural: str = "") -> str:
    """Return ``1 unit`` or ``3 units``."""
    return f"{number_of} {singular if number_of == 1 else plural or singular + 's'}"


def listed(names: list[str]) -> str:
    """Return ``a, b and c``."""
    if len(names) < 2:
        return "".join(names)
    return f"{', '.join(names[:-1])} and {names[-1]}"
