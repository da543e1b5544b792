"""One fit in the words of four fields: names, symbols, formulas and values, all from one ratio.

Names and symbols are those in common use in textbooks and papers of each field (from memory); authors differ, and
the table says where one symbol has two meanings. Every value follows from the ratio and the idiosyncratic variance
of the fit.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from mixbridge.errors import OptionError
from mixbridge.routes import Fit

__all__ = ["FIELDS", "crosswalk"]

FIELDS = ("economics", "biostatistics", "education", "psychology")
"""Fields with names of their own."""

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class _Entry:
    """One quantity: here, then name and symbol per field, formula, value."""

    quantity: str
    symbol: str
    words: tuple[tuple[str, str], ...]
    formula: str
    value: float
    size: float = np.nan
    at: str = ""


def crosswalk(fit: Fit, counts: ArrayLike | None = None) -> pd.DataFrame:
    """Name every quantity of a fit in each field.

    Parameters
    ----------
    fit : Fit
        A route with a variance ratio; an infinite one (`within`) has weights but no unit variance.
    counts : array_like of int, optional
        Number of units of each size in ``fit.sizes``, so that the median is that of units; without it the median is
        that of the distinct sizes, and the table says so.

    Returns
    -------
    DataFrame
        ``quantity``, ``symbol`` (of this project), name and symbol per field (``economics``, ``economics_symbol``,
        ...), ``formula`` in symbols of this project, ``size`` and ``at`` (``min``, ``median``, ``max`` size, for
        quantities that depend on it) and ``value``.

    Raises
    ------
    OptionError
        If the fit has no ratio, or `counts` does not match its sizes.
    """
    if np.isnan(fit.ratio):
        raise OptionError(
            f"route {fit.route!r} has no variance ratio ({fit.status}), so nothing follows from it; "
            "name a route that has."
        )
    sizes = np.asarray(fit.sizes, dtype=float)
    median, middle = float(np.median(sizes)), "median of distinct sizes"
    if counts is not None:
        number = np.asarray(counts)
        if number.shape != sizes.shape or int(number.sum()) != fit.units:
            raise OptionError(
                f"counts must give the number of units of each of the sizes {fit.sizes.tolist()}."
            )
        median, middle = float(np.median(np.repeat(sizes, number.astype(int)))), "median"
    places = (("min", float(sizes[0])), (middle, median), ("max", float(sizes[-1])))
    entries = [*_coefficients(fit), *_variances(fit), *_clash(fit)]
    for at, size in places:
        entries += _by_size(fit, at, size)
    rows = []
    for entry in entries:
        words = [text for pair in entry.words for text in pair]
        rows.append(
            [entry.quantity, entry.symbol, *words, entry.formula, entry.size, entry.at, float(entry.value)]
        )
    named = [name for field in FIELDS for name in (field, f"{field}_symbol")]
    return pd.DataFrame(rows, columns=["quantity", "symbol", *named, "formula", "size", "at", "value"])


def _coefficients(fit: Fit) -> Iterator[_Entry]:
    """Name the coefficients: a *fixed effect* in three fields, while economics calls the within slopes that."""
    kind = {"pooled": "pooled OLS coefficient", "within": "fixed-effects (within) coefficient"}
    economics = kind.get(fit.route, "random-effects (FGLS) coefficient")
    for term, value in fit.coefficients.items():
        yield _Entry(
            f"coefficient of {term}",
            "β",
            (
                (economics, "β"),
                ("fixed effect, marginal slope", "β"),
                ("fixed effect", "γ or β"),
                ("fixed effect", "γ or b"),
            ),
            "(X'V⁻¹X)⁻¹X'V⁻¹y",
            float(value),
        )


def _variances(fit: Fit) -> Iterator[_Entry]:
    unit, error, psi = fit.unit_variance, fit.idiosyncratic_variance, fit.ratio
    yield _Entry(
        "unit variance",
        "σ_α²",
        (
            ("variance of the individual effects", "σ_α² or σ_μ² or σ_u²"),
            ("random-intercept variance, between-subject variance", "σ_b² or D or ν²"),
            ("level-2 (school) variance", "τ_00 or σ_u0²"),
            ("between-person (intercept) variance", "τ_00 or τ²"),
        ),
        "ψ σ_u²",
        unit,
    )
    yield _Entry(
        "unit standard deviation",
        "σ_α",
        (
            ("standard deviation of the individual effects", "σ_α or σ_μ or σ_u"),
            ("standard deviation of the random intercept", "σ_b or √D"),
            ("level-2 standard deviation", "√τ_00 or σ_u0"),
            ("between-person standard deviation", "τ"),
        ),
        "√(σ_α²)",
        float(np.sqrt(unit)),
    )
    yield _Entry(
        "idiosyncratic variance",
        "σ_u²",
        (
            ("variance of the idiosyncratic error", "σ_u² or σ_ε² or σ_ν² or σ_e²"),
            ("residual variance, within-subject variance", "σ²"),
            ("level-1 (pupil) variance", "σ² or σ_e0²"),
            ("within-person residual variance", "σ²"),
        ),
        "as estimated by the route",
        error,
    )
    yield _Entry(
        "idiosyncratic standard deviation",
        "σ_u",
        (
            ("standard deviation of the idiosyncratic error", "σ_u or σ_ε or σ_ν or σ_e"),
            ("residual standard deviation", "σ"),
            ("level-1 standard deviation", "σ or σ_e0"),
            ("within-person residual standard deviation", "σ"),
        ),
        "√(σ_u²)",
        float(np.sqrt(error)),
    )
    yield _Entry(
        "variance ratio",
        "ψ",
        (
            ("ratio of the error components", "σ_α²/σ_u²"),
            ("variance ratio, relative variance of the random intercept", "D/σ²"),
            ("ratio of level-2 to level-1 variance", "τ_00/σ²"),
            ("ratio of between- to within-person variance", "τ_00/σ²"),
        ),
        "σ_α²/σ_u²",
        psi,
    )
    yield _Entry(
        "intraclass correlation, given the covariates",
        "ICC",
        (
            ("share of the variance due to individual effects", "ρ"),
            ("intraclass correlation, exchangeable working correlation", "ρ or α"),
            ("conditional (residual) intraclass correlation, variance partition coefficient", "ρ or VPC"),
            ("conditional intraclass correlation", "ICC"),
        ),
        "ψ/(1 + ψ)",
        fit.icc,
    )
    yield _Entry(
        "total variance, given the covariates",
        "σ_α² + σ_u²",
        (
            ("variance of the composite error", "σ_v² or σ²"),
            ("marginal variance", "D + σ²"),
            ("total residual variance", "τ_00 + σ²"),
            ("total residual variance", "τ_00 + σ²"),
        ),
        "σ_α² + σ_u²",
        unit + error,
    )


def _clash(fit: Fit) -> Iterator[_Entry]:
    """Show the symbol that the fields read in opposite ways."""
    same = (("", ""), ("", ""))
    yield _Entry(
        "the printed symbol σ_u², read as the variance of the unit effects",
        "σ_α²",
        (("where σ_u² goes with σ_e²", "σ_u²"), ("", ""), ("level-2 variance", "σ_u²"), ("", "")),
        "ψ σ_u² in the symbols used here",
        fit.unit_variance,
    )
    yield _Entry(
        "the printed symbol σ_u², read as the variance of the idiosyncratic error",
        "σ_u²",
        (("where σ_u² goes with σ_α² or σ_μ²", "σ_u²"), ("", ""), *same),
        "σ_u² in the symbols used here",
        fit.idiosyncratic_variance,
    )


def _by_size(fit: Fit, at: str, size: float) -> Iterator[_Entry]:
    psi, error = fit.ratio, fit.idiosyncratic_variance
    weight = 1.0 if np.isinf(psi) else float(-np.expm1(-0.5 * np.log1p(size * psi)))
    shrinkage = 1.0 if np.isinf(psi) else size * psi / (1.0 + size * psi)
    none = ("no name of its own", "")
    yield _Entry(
        "quasi-demeaning weight",
        "λ_i",
        (
            ("share of the unit mean that is subtracted", "θ_i or λ_i"),
            none,
            none,
            none,
        ),
        "1 − (1 + T_i ψ)^(−1/2)",
        weight,
        size,
        at,
    )
    yield _Entry(
        "shrinkage",
        "s_i",
        (
            ("weight of the unit's own residual mean in its predicted effect", "T_i σ_α²/(T_i σ_α² + σ_u²)"),
            ("shrinkage factor of the predicted random effect (BLUP)", "n_i D/(n_i D + σ²)"),
            ("reliability of the school mean", "λ_j"),
            ("reliability of the person mean", "λ_j or ICC(2)"),
        ),
        "T_i ψ/(1 + T_i ψ) = λ_i (2 − λ_i)",
        shrinkage,
        size,
        at,
    )
    yield _Entry(
        "variance of a unit mean's error, times its size",
        "σ_1i²",
        (
            ("between-type characteristic root of the error covariance", "σ_1²"),
            ("eigenvalue of the marginal covariance for the subject mean", "σ² + n_i D"),
            ("variance of the school mean times its size", "σ² + n_j τ_00"),
            ("variance of the person mean times its size", "σ² + n_j τ_00"),
        ),
        "σ_u² (1 + T_i ψ)",
        error * (1.0 + size * psi) if np.isfinite(psi) else np.nan,
        size,
        at,
    )
    yield _Entry(
        "design effect of a unit-constant covariate",
        "1 + (T_i − 1) ICC",
        (
            ("variance inflation through grouped errors", "1 + (T_i − 1) ρ"),
            ("design effect, variance inflation factor of clustering", "1 + (n_i − 1) ρ"),
            ("design effect", "1 + (n_j − 1) ρ"),
            ("design effect", "DEFF"),
        ),
        "1 + (T_i − 1) ψ/(1 + ψ)",
        1.0 + (size - 1.0) * fit.icc,
        size,
        at,
    )
