"""Coverage of the intervals for coefficients, over designs, with Monte Carlo errors.

X stays as it is in one design and the outcome is drawn anew; moments, curve, fits, degrees of freedom,
covariances and the verdict on exactness are those of the package, called once per replicate. Two things are
taken out of the loop because they do not depend on the outcome, and a test compares both with the table that
users see: degrees of freedom that are counts, and the linear maps from the outcome to the contributions of
units in the robust covariances of `pooled` and `within`, whose weights are fixed.

Run ``python -m benchmarks.calibration_coefficients`` for the table in long form.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, field
from functools import partial
from multiprocessing import get_context

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import stats

from mixbridge.inference.exactness import exact_law
from mixbridge.inference.kenward_roger import kenward_roger
from mixbridge.inference.references import SIMPLE, degrees_of_freedom
from mixbridge.inference.robust import DEFAULTS, multiplier_value, robust_covariance
from mixbridge.inference.robust_adjust import adjust
from mixbridge.inference.robust_regression import Regression, regression_of
from mixbridge.inference.satterthwaite import satterthwaite
from mixbridge.moments import collect
from mixbridge.moments.products import UnitProducts, collect_products
from mixbridge.ratio import Curve, curve_of
from mixbridge.routes import Fit, fit_route

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

ROUTES = ("reml", "swamy_arora", "within", "pooled")
FIXED_WEIGHTS = ("within", "pooled")
"""Routes whose robust contributions are one linear map of the outcome."""
COUNTED = ("normal", "t_rows", "t_within", "t_units", "t_between", "t_constant", "by_level")
"""Rules whose degrees of freedom do not depend on the outcome."""
TERMS = ("within", "between", "both")
"""Covariates: zero mean in every unit; constant in every unit; neither."""
BETA = {"constant": 1.0, "within": 0.5, "between": -0.5, "both": 0.25}
ROOT = "pustejovsky_tipton"
NO_PERIODS = "rows have no periods"
CHUNK_NUMBERS = 1 << 24
Key = tuple[str, str, str]
"""Route, covariance, rule."""


@dataclass(frozen=True)
class Design:
    """Sizes of the units, covariates (keys of `BETA` besides the constant) and the true ψ."""

    name: str
    sizes: tuple[int, ...]
    terms: tuple[str, ...]
    psi: float
    seed: int = 1

    @property
    def names(self) -> tuple[str, ...]:
        """Columns of X."""
        return ("constant", *self.terms)

    def arrays(self) -> tuple[FloatArray, IntArray]:
        """Return X and unit codes."""
        rng = np.random.default_rng(self.seed)
        units = len(self.sizes)
        codes = np.repeat(np.arange(units), self.sizes)
        inside = rng.normal(size=codes.size)
        inside -= (np.bincount(codes, inside) / np.array(self.sizes))[codes]
        means = rng.normal(size=units)[codes]
        both = rng.normal(size=codes.size) + rng.normal(size=units)[codes]
        columns = {"constant": np.ones(codes.size), "within": inside, "between": means, "both": both}
        return np.column_stack([columns[name] for name in self.names]), codes


def _cycle(values: Sequence[int], units: int) -> tuple[int, ...]:
    return tuple(int(v) for v in np.resize(np.array(values), units))


SEPARATE = ("within", "between")
DESIGNS: tuple[Design, ...] = (
    Design("6 units of 4", (4,) * 6, SEPARATE, 0.0),
    Design("6 units of 4", (4,) * 6, TERMS, 1.0),
    Design("6 units of 4", (4,) * 6, SEPARATE, 5.0),
    Design("6 units, sizes 2 to 20", (2, 3, 4, 6, 10, 20), SEPARATE, 0.5),
    Design("12 pairs", (2,) * 12, TERMS, 0.0),
    Design("12 pairs", (2,) * 12, SEPARATE, 5.0),
    Design("12 units of 10", (10,) * 12, SEPARATE, 5.0),
    Design("20 units, sizes 1 to 8", _cycle([1, 1, 2, 3, 8], 20), TERMS, 0.2),
    Design("30 units of 5", (5,) * 30, TERMS, 0.1),
    Design("30 units of 5", (5,) * 30, SEPARATE, 2.0),
    Design("60 units, one of 100 rows", (100,) + (3,) * 59, TERMS, 1.0),
    Design("200 units, sizes 1 to 6", _cycle([1, 2, 3, 4, 5, 6], 200), TERMS, 0.05),
    Design("200 units, sizes 1 to 6", _cycle([1, 2, 3, 4, 5, 6], 200), TERMS, 5.0),
)
"""Thirteen designs: 6 to 200 units, equal sizes and not, ψ from 0 to 5."""


@dataclass(frozen=True)
class Draws:
    """What the replicates of one design gave; arrays have shape (replicates, p).

    Attributes
    ----------
    errors : dict
        By route and covariance: standard errors. Kenward-Roger counts as a covariance.
    degrees : dict
        By route, covariance and rule.
    exact : dict
        By route, covariance and rule: whether the law is marked as exact, as in the table of a term.
    """

    design: Design
    outcomes: FloatArray
    estimates: dict[str, FloatArray] = field(default_factory=dict)
    errors: dict[tuple[str, str], FloatArray] = field(default_factory=dict)
    degrees: dict[Key, FloatArray] = field(default_factory=dict)
    exact: dict[Key, NDArray[np.bool_]] = field(default_factory=dict)

    def half_width(self, key: Key, confidence: float) -> FloatArray:
        """Return half the length of every interval."""
        tail = 0.5 * (1.0 - confidence)
        df = self.degrees[key]
        positive = np.where(df > 0.0, df, 1.0)
        quantile = np.where(np.isinf(df), stats.norm.isf(tail), stats.t.isf(tail, positive))
        return np.asarray(np.where(df > 0.0, quantile, np.nan) * self.errors[key[:2]])


def outcomes_of(design: Design, replicates: int, seed: int) -> FloatArray:
    """Draw outcomes with ``sigma_u^2 = 1``, shape (replicates, n)."""
    x, codes = design.arrays()
    rng = np.random.default_rng(seed)
    mean = x @ np.array([BETA[name] for name in design.names])
    effects = np.sqrt(design.psi) * rng.normal(size=(replicates, len(design.sizes)))
    return np.asarray(mean + effects[:, codes] + rng.normal(size=(replicates, codes.size)))


def reduce(x: FloatArray, y: FloatArray, codes: IntArray, names: Sequence[str]) -> tuple[Curve, UnitProducts]:
    """Reduce rows to the curve and the unit products."""
    keys = pd.RangeIndex(int(codes[-1]) + 1)
    opened, moments = collect(lambda: [(codes, x, y)], (*names, "y"), keys)
    return curve_of(moments), collect_products(lambda: [(codes, x, y)], opened, moments)


def draw(design: Design, replicates: int, seed: int) -> Draws:
    """Draw outcomes and take every estimate, standard error and number of degrees of freedom."""
    x, codes = design.arrays()
    outcomes = outcomes_of(design, replicates, seed)
    draws = Draws(design, outcomes)
    shape = (replicates, x.shape[1])
    rows = np.eye(shape[1])
    laws = {route: np.full(shape, np.nan) for route in ROUTES}
    for route in ROUTES:
        draws.estimates[route] = np.full(shape, np.nan)
        for covariance in ("model", "CR0", "CR1", "CR2", "CR3"):
            draws.errors[route, covariance] = np.full(shape, np.nan)
    draws.errors["reml", "kenward_roger"] = np.full(shape, np.nan)
    adjusted_df = draws.degrees["reml", "kenward_roger", "kenward_roger"] = np.full(shape, np.nan)
    for route in ("reml", "swamy_arora"):
        for covariance in ("model", "CR2"):
            draws.degrees[route, covariance, "satterthwaite"] = np.full(shape, np.nan)
    for at, y in enumerate(outcomes):
        curve, products = reduce(x, y, codes, design.names)
        for route in ROUTES:
            fit = fit_route(curve, route, {}, NO_PERIODS)
            draws.estimates[route][at] = fit.beta
            draws.errors[route, "model"][at] = _model_errors(fit)
            for j in np.flatnonzero(np.isfinite(fit.beta)):
                if design.names[j] in TERMS:
                    laws[route][at, j] = exact_law(curve, fit, rows[j]).df
            if route not in FIXED_WEIGHTS:
                draws.degrees[route, "model", "satterthwaite"][at] = satterthwaite(curve, fit, rows).df
                _robust(draws, at, route, regression_of(curve, products, fit))
            if route == "reml":
                adjusted = kenward_roger(curve, fit)
                draws.errors[route, "kenward_roger"][at] = [adjusted.standard_error(row) for row in rows]
                adjusted_df[at] = adjusted.degrees(rows)
            if at == 0:
                _count(draws, curve, products, fit)
    for route in FIXED_WEIGHTS:
        for kind, maps in contribution_maps(design, route).items():
            draws.errors[route, kind][:] = _errors_by_map(maps, outcomes)
    _mark(draws, laws)
    return draws


def _model_errors(fit: Fit) -> FloatArray:
    errors = np.sqrt(fit.scale * (fit.root**2).sum(axis=1))
    return np.asarray(np.where(np.isfinite(fit.beta), errors, np.nan))


def _robust(draws: Draws, at: int, route: str, regression: Regression) -> None:
    """Take CR0 to CR3 of one replicate on the curve."""
    second = adjust(regression, "CR2", ROOT, regression.root.T)
    draws.degrees[route, "CR2", "satterthwaite"][at] = second.df
    contributions = {
        "CR0": regression.scores(),
        "CR2": second.scores,
        "CR3": adjust(regression, "CR3", ROOT, regression.root[:0].T).scores,
    }
    for kind, scores in contributions.items():
        draws.errors[route, kind][at] = np.sqrt(((scores @ regression.root.T) ** 2).sum(axis=0))
    draws.errors[route, "CR1"][at] = draws.errors[route, "CR0"][at] * np.sqrt(_cr1(regression))


def _cr1(regression: Regression) -> float:
    units = regression.products.units
    return multiplier_value(DEFAULTS["CR1"], regression.side, units, regression.rows, regression.rank)


def _count(draws: Draws, curve: Curve, products: UnitProducts, fit: Fit) -> None:
    """Take the degrees of freedom that do not depend on the outcome."""
    rows = np.eye(curve.rank)
    shape = draws.estimates[fit.route].shape
    for rule in COUNTED:
        df = np.broadcast_to(degrees_of_freedom(curve, fit, rows, rule), shape)
        draws.degrees[fit.route, "model", rule] = df
    for kind in ("CR0", "CR1", "CR2", "CR3"):
        for rule in ("normal", "t_units"):
            draws.degrees[fit.route, kind, rule] = np.full(shape, SIMPLE[rule][1](curve, fit))
    if fit.route in FIXED_WEIGHTS:
        df = robust_covariance(curve, products, fit, kind="CR2", root=ROOT).df
        draws.degrees[fit.route, "CR2", "satterthwaite"] = np.broadcast_to(df, shape)


def contribution_maps(design: Design, route: str) -> dict[str, FloatArray]:
    """Return by kind the linear maps from outcome to contributions of units to coefficients, (N, p, n).

    Found by giving the package one outcome per row of data, a one in that row and zeros elsewhere.
    """
    x, codes = design.arrays()
    n, p = x.shape
    maps = {kind: np.zeros((len(design.sizes), p, n)) for kind in ("CR0", "CR1", "CR2", "CR3")}
    for at, y in enumerate(np.eye(n)):
        curve, products = reduce(x, y, codes, design.names)
        regression = regression_of(curve, products, np.inf if route == "within" else 0.0)
        none = regression.root[:0].T
        contributions = {
            "CR0": regression.scores(),
            "CR2": adjust(regression, "CR2", ROOT, none).scores,
            "CR3": adjust(regression, "CR3", ROOT, none).scores,
        }
        contributions["CR1"] = contributions["CR0"] * np.sqrt(_cr1(regression))
        for kind, scores in contributions.items():
            spread = scores @ regression.root.T
            maps[kind][:, :, at] = np.where(regression.free, spread, np.nan)
    return maps


def _errors_by_map(maps: FloatArray, outcomes: FloatArray) -> FloatArray:
    units, p, n = maps.shape
    found = np.empty((outcomes.shape[0], p))
    step = max(1, CHUNK_NUMBERS // (units * p))
    for start in range(0, outcomes.shape[0], step):
        part = outcomes[start : start + step]
        spread = (part @ maps.reshape(-1, n).T).reshape(part.shape[0], units, p)
        found[start : start + step] = np.sqrt((spread**2).sum(axis=1))
    return found


def _mark(draws: Draws, laws: dict[str, FloatArray]) -> None:
    """Mark what the table of a term marks: degrees of freedom of the exact law, standard error not adjusted."""
    for key, df in draws.degrees.items():
        route, covariance, _ = key
        law = laws[route]
        with np.errstate(invalid="ignore"):
            same = np.isfinite(df) & (np.abs(df - law) <= 1e-7 * law)
            if covariance == "kenward_roger":
                own = draws.errors[route, "model"]
                same &= np.abs(draws.errors[route, covariance] - own) <= 1e-8 * own
        draws.exact[key] = same & (covariance in ("model", "kenward_roger"))


def covered(draws: Draws, key: Key, confidence: float) -> FloatArray:
    """Tell for each replicate and column whether the interval contains the truth; NaN: no interval."""
    truth = np.array([BETA[name] for name in draws.design.names])
    half = draws.half_width(key, confidence)
    hit = (np.abs(draws.estimates[key[0]] - truth) <= half).astype(float)
    return np.asarray(np.where(np.isfinite(half), hit, np.nan))


def calibrate(
    designs: Iterable[Design] = DESIGNS,
    replicates: int = 4_000,
    seed: int = 30_260,
    *,
    confidence: float = 0.95,
    processes: int = 1,
) -> pd.DataFrame:
    """Tabulate coverage.

    Parameters
    ----------
    designs : iterable of Design
    replicates : int
        Per design.
    seed : int
        Each design has a stream of its own, so that the number of processes changes nothing.
    confidence : float
    processes : int

    Returns
    -------
    DataFrame
        One row per design, term and rule: design, units, rows, psi, columns, term, route, covariance, rule,
        nominal, observed, error (Monte Carlo standard error at the nominal value), z, exact (share of the
        replicates in which the package marks the rule as exact), defined (share with an interval), df
        (median).
    """
    task: Callable[[tuple[int, Design]], pd.DataFrame]
    task = partial(_calibrate_one, replicates=replicates, seed=seed, confidence=confidence)
    jobs = list(enumerate(designs))
    if processes == 1:
        return pd.concat([task(job) for job in jobs], ignore_index=True)
    jobs.sort(key=lambda job: -sum(job[1].sizes))  # the longest first: no process then waits for one
    with ProcessPoolExecutor(processes, mp_context=get_context("spawn")) as pool:
        tables = dict(zip((number for number, _ in jobs), pool.map(task, jobs), strict=True))
    return pd.concat([tables[number] for number in sorted(tables)], ignore_index=True)


def _calibrate_one(job: tuple[int, Design], *, replicates: int, seed: int, confidence: float) -> pd.DataFrame:
    number, design = job
    draws = draw(design, replicates, seed + 1_000 * number)
    lines = []
    start = {
        "design": design.name,
        "units": len(design.sizes),
        "rows": sum(design.sizes),
        "psi": design.psi,
        "columns": ", ".join(design.terms),
    }
    for key in draws.degrees:
        hit = covered(draws, key, confidence)
        for j, term in enumerate(design.names):
            defined = np.isfinite(hit[:, j])
            count = int(defined.sum())
            if term not in TERMS or count == 0:
                continue
            observed = float(hit[defined, j].mean())
            error = float(np.sqrt(confidence * (1.0 - confidence) / count))
            lines.append(
                {
                    **start,
                    "term": term,
                    **dict(zip(("route", "covariance", "rule"), key, strict=True)),
                    "nominal": confidence,
                    "observed": observed,
                    "error": error,
                    "z": (observed - confidence) / error,
                    "exact": float(draws.exact[key][:, j].mean()),
                    "defined": count / replicates,
                    "df": float(np.median(draws.degrees[key][defined, j])),
                }
            )
    return pd.DataFrame(lines)


if __name__ == "__main__":
    with pd.option_context("display.width", 250, "display.max_rows", None, "display.max_columns", None):
        print(calibrate().round(4).to_string(index=False))
