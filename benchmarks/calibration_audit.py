"""Size and power of the tests of the audit by simulation: ``python -m benchmarks.calibration_audit``.

Each design draws panels in which every assumption holds, and counts how often each test rejects; then it breaks one
assumption at a time, by a stated amount, and counts again for the tests that look at it. Power is that of a stated
alternative, never of an observed departure.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.audit import audit
from mixbridge.study import crosscheck

FloatArray = NDArray[np.float64]

JOINT = ("unit_means_model", "unit_means_robust")
TERMS = ("unit_means_model:", "unit_means_robust:")
STRICT = ("leads", "feedback")
SERIAL = (
    "serial_differences",
    "serial_durbin_watson",
    "serial_unequal_spacing",
    "serial_one_sided",
)
SIZES = ("unit_size", "unit_size_log", "unit_complete")
TESTS = (
    *JOINT,
    *TERMS,
    *STRICT,
    *SERIAL,
    "serial_joint",
    "variance_wald",
    "variance_levene",
    "variance_covariates",
    "unit_variance_covariates",
    "cross_section",
    *SIZES,
    "next_presence",
    "size_covariates",
    "equal_weights",
    "normal_errors",
    "normal_effects",
    "outlying_rows",
    "outlying_units",
)
"""Keys of the checks that test something."""


@dataclass(frozen=True)
class Design:
    """Units, periods and covariates of a simulated panel.

    Attributes
    ----------
    name : str
    units, periods : int
    psi : float
        Variance ratio; the error variance is one.
    missing : float
        Share of rows lost at random.
    memory : float
        First-order autocorrelation of the within part of the covariate.
    indicators : bool
        Whether the model has an indicator per period.
    tails : str
        ``normal``, ``t5`` or ``skewed`` (centred chi-square with 4 degrees of freedom) errors and effects.
    """

    name: str
    units: int
    periods: int
    psi: float = 1.0
    missing: float = 0.0
    memory: float = 0.0
    indicators: bool = False
    tails: str = "normal"


DESIGNS = (
    Design("balanced, 40 units", 40, 5),
    Design("balanced, 150 units", 150, 4, psi=0.5),
    Design("few units, long", 16, 12),
    Design("third of the rows missing", 60, 8, missing=1 / 3),
    Design("period indicators", 60, 6, indicators=True, missing=0.1),
    Design("covariate with memory", 60, 6, memory=0.8, missing=0.15),
    Design("no unit effects", 60, 5, psi=0.0, missing=0.15),
    Design("large unit effects", 60, 5, psi=8.0, missing=0.15),
    Design("long tails", 80, 6, missing=0.15, tails="t5"),
    Design("skewed", 80, 6, missing=0.15, tails="skewed"),
)


@dataclass(frozen=True)
class Alternative:
    """One assumption broken.

    Attributes
    ----------
    name : str
    what : str
        The departure, in words.
    keys : tuple of str
        Checks that look at it.
    """

    name: str
    what: str
    keys: tuple[str, ...]


ALTERNATIVES = (
    Alternative(
        "correlated_effects",
        "x has 0.8 times the unit effect (sd of x about its mean 1) added",
        (*JOINT, *TERMS),
    ),
    Alternative("feedback", "x has 0.6 times the error of the period before added", STRICT),
    Alternative("serial", "first-order autocorrelation of the error 0.4", (*SERIAL, "serial_joint")),
    Alternative(
        "unit_variances",
        "standard deviations of units 0.5 and 1.5, half each",
        ("variance_wald", "variance_levene"),
    ),
    Alternative("variance_x", "standard deviation of the error exp(0.4 x)", ("variance_covariates",)),
    Alternative(
        "unit_variance_w", "standard deviation of the effect exp(0.6 w)", ("unit_variance_covariates",)
    ),
    Alternative("period_shocks", "a common shock per period with standard deviation 0.6", ("cross_section",)),
    Alternative("informative_size", "units with effect above zero lose half of their rows", SIZES),
    Alternative(
        "informative_loss",
        "a row is missing with probability 0.6 if the error before is below -0.5",
        ("next_presence",),
    ),
    Alternative("size_and_w", "units with w above zero lose half of their rows", ("size_covariates",)),
    Alternative("slope_by_size", "units with few rows have a slope larger by 1", ("equal_weights",)),
    Alternative(
        "tails", "errors and effects t with 3 degrees of freedom", ("normal_errors", "normal_effects")
    ),
    Alternative(
        "outlier",
        "one row off by 6, one unit off by 6 standard deviations",
        ("outlying_rows", "outlying_units"),
    ),
)

NOT_NULL: Mapping[str, tuple[str, ...]] = {
    "long tails": ("variance_wald", "normal_errors", "normal_effects", "outlying_rows", "outlying_units"),
    "skewed": ("variance_wald", "normal_errors", "normal_effects", "outlying_rows", "outlying_units"),
    "no unit effects": ("unit_variance_covariates", "normal_effects"),
    **dict.fromkeys(
        (
            "balanced, 40 units",
            "balanced, 150 units",
            "few units, long",
            "third of the rows missing",
            "period indicators",
            "covariate with memory",
            "large unit effects",
        ),
        ("serial_joint",),
    ),
}
"""Checks whose null does not hold in a design: what they assume beyond the assumption they look at."""


def _noise(
    design: Design, rng: np.random.Generator, shape: tuple[int, ...], tails: str | None = None
) -> FloatArray:
    kind = design.tails if tails is None else tails
    if kind == "normal":
        return rng.normal(size=shape)
    if kind == "skewed":
        return (rng.chisquare(4, size=shape) - 4.0) / np.sqrt(8.0)
    df = int(kind[1:])
    return rng.standard_t(df, size=shape) / np.sqrt(df / (df - 2.0))


def draw(design: Design, rng: np.random.Generator, broken: str = "") -> pd.DataFrame:
    """Draw one panel.

    Parameters
    ----------
    design : Design
    rng : numpy.random.Generator
    broken : str
        Name of an alternative; none of them holds unless given.

    Returns
    -------
    DataFrame
        ``y, x, w, unit, period``; x varies both ways, w between units only.
    """
    n, t = design.units, design.periods
    tails = "t3" if broken == "tails" else None
    w = rng.normal(size=n)
    effect = np.sqrt(design.psi) * _noise(design, rng, (n,), tails)
    if broken == "unit_variance_w":
        effect = effect * np.exp(0.6 * w)
    u = _noise(design, rng, (n, t), tails)
    if broken == "serial":
        for s in range(1, t):
            u[:, s] = 0.4 * u[:, s - 1] + np.sqrt(1.0 - 0.16) * u[:, s]
    x = rng.normal(size=(n, t))
    for s in range(1, t):
        x[:, s] = design.memory * x[:, s - 1] + np.sqrt(1.0 - design.memory**2) * x[:, s]
    x += rng.normal(size=(n, 1))
    if broken == "correlated_effects":
        x += 0.8 * effect[:, None]
    if broken == "feedback":
        x[:, 1:] += 0.6 * u[:, :-1]
    if broken == "variance_x":
        u *= np.exp(0.4 * x)
    if broken == "unit_variances":
        u *= np.where(np.arange(n) % 2 == 0, 0.5, 1.5)[:, None]
    if broken == "period_shocks":
        u += 0.6 * rng.normal(size=t)
    keep = rng.random((n, t)) >= design.missing
    thinned = rng.random((n, t)) < 0.5
    if broken == "informative_size":
        keep &= ~(thinned & (effect > 0.0)[:, None])
    if broken == "size_and_w":
        keep &= ~(thinned & (w > 0.0)[:, None])
    if broken == "slope_by_size":
        keep &= ~(thinned & (np.arange(n) % 2 == 0)[:, None])
    if broken == "informative_loss":
        keep[:, 1:] &= ~((u[:, :-1] < -0.5) & (rng.random((n, t - 1)) < 0.6))
    keep[:, 0] |= ~keep.any(axis=1)
    slope = 1.0 + (broken == "slope_by_size") * (np.arange(n) % 2 == 0)[:, None]
    if broken == "outlier":
        u[0, np.flatnonzero(keep[0])[0]] += 6.0
        effect[-1] += 6.0 * np.sqrt(design.psi + 1.0 / keep[-1].sum())
    y = 1.0 + slope * x + 0.5 * w[:, None] + effect[:, None] + u
    unit, period = np.nonzero(keep)
    return pd.DataFrame({"y": y[keep], "x": x[keep], "w": w[unit], "unit": unit, "period": period})


def p_values(design: Design, data: pd.DataFrame, keys: Iterable[str], seed: int) -> dict[str, float]:
    """Return the p-value of every test on one panel; NaN where a row has a status instead."""
    formula = "y ~ x + w + C(period)" if design.indicators else "y ~ x + w"
    study = crosscheck(formula, data, unit="unit", period="period", routes=("reml", "within", "pooled"))
    found = {item.key: item.p_value for item in audit(study, checks=tuple(keys), seed=seed)}
    # per term: the covariate x
    return {
        key: found[f"{key}x"] if f"{key}x" in found else found.get(key.rstrip(":"), np.nan) for key in keys
    }


def calibrate(
    designs: Iterable[Design] = DESIGNS,
    replicates: int = 1_000,
    seed: int = 20_080,
    *,
    level: float = 0.05,
    alternatives: Iterable[Alternative] = ALTERNATIVES,
    power_replicates: int | None = None,
    progress: Callable[[str], None] | None = None,
) -> pd.DataFrame:
    """Tabulate size under the null and power against stated alternatives.

    Parameters
    ----------
    designs : iterable of Design
    replicates : int
        Per design, for the size.
    seed : int
    level : float
    alternatives : iterable of Alternative
    power_replicates : int, optional
        Per design and alternative; a quarter of `replicates` unless given.
    progress : callable, optional
        Called with the name of each part.

    Returns
    -------
    DataFrame
        design, units, periods, test, what (``size`` or ``power``; ``size, null does not hold`` where the test
        assumes more than the design keeps), alternative, nominal, observed, error (Monte Carlo standard error, at the
        nominal value for sizes), z (for sizes), defined (share of panels that give a p-value).
    """
    some = max(1, replicates // 4) if power_replicates is None else power_replicates
    rows = []
    for number, design in enumerate(designs):
        parts = [("", TESTS, replicates), *((a.name, a.keys, some) for a in alternatives)]
        for place, (broken, keys, count) in enumerate(parts):
            if progress is not None:
                progress(f"{design.name}: {broken or 'null'}")
            rng = np.random.default_rng([seed, number, place])
            found = pd.DataFrame(
                [
                    p_values(design, draw(design, rng, broken), keys, int(rng.integers(2**31)))
                    for _ in range(count)
                ]
            )
            for key in keys:
                rows.append(_row(design, key, broken, found[key].dropna().to_numpy(), count, level))
    names = [
        "design",
        "units",
        "periods",
        "test",
        "what",
        "alternative",
        "nominal",
        "observed",
        "error",
        "z",
        "defined",
    ]
    return pd.DataFrame(rows, columns=names)


def _row(
    design: Design, key: str, broken: str, p: FloatArray, count: int, level: float
) -> tuple[str | int | float, ...]:
    observed = float((p <= level).mean()) if p.size else np.nan
    start = (design.name, design.units, design.periods, key)
    if broken:
        error = np.sqrt(observed * (1.0 - observed) / p.size) if p.size else np.nan
        return (*start, "power", broken, level, observed, error, np.nan, p.size / count)
    holds = key not in NOT_NULL.get(design.name, ()) and not (key == "serial_joint" and design.psi > 0.0)
    error = np.sqrt(level * (1.0 - level) / p.size) if p.size else np.nan
    what = "size" if holds else "size, null does not hold"
    return (*start, what, "", level, observed, error, (observed - level) / error, p.size / count)


def main(replicates: int = 1_000, seed: int = 20_080) -> pd.DataFrame:
    """Run the whole calibration.

    Parameters
    ----------
    replicates : int
    seed : int

    Returns
    -------
    DataFrame
        As `calibrate`.
    """
    return calibrate(replicates=replicates, seed=seed)


if __name__ == "__main__":
    with pd.option_context("display.width", 200, "display.max_rows", None, "display.max_columns", None):
        print(main().round(4).to_string(index=False))
