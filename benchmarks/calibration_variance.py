"""Size of the tests of sigma_a^2 = 0 and coverage of the component intervals, over designs, with Monte Carlo
errors.

Under normal errors everything studied here depends on the outcome through ``c_k^2`` by eigenvalue and
``RSS_w`` (the spectral form), so a replicate is a draw of those few numbers and all replicates are handled at
once. `replicate_outcome` turns one such draw back into rows of data; a test takes some through the functions
that users call and compares decision by decision.

Run ``python -m benchmarks.calibration_variance`` for the table of the documentation.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import stats

from mixbridge.inference.likelihood_ratio import draw_squares, null_laws, suprema
from mixbridge.inference.profile_region import scale_factors
from mixbridge.inference.spectrum import Spectrum, spectrum_of
from mixbridge.moments import Moments
from mixbridge.ratio import Curve, curve_of

FloatArray = NDArray[np.float64]
EXACT = {
    "f_unit_intercepts",
    "likelihood_ratio (simulated)",
    "restricted_likelihood_ratio (simulated)",
    "exact_pivot",
    "exact_chi_square",
}
"""Rules that must lie within Monte Carlo error of their nominal level."""


@dataclass(frozen=True)
class Design:
    """Sizes of the units, numbers of covariates that vary within (and between) and between units only, and
    the true ψ."""

    name: str
    sizes: tuple[int, ...]
    within: int
    between: int
    psi: float
    seed: int = 1

    def arrays(self) -> tuple[FloatArray, NDArray[np.intp]]:
        """Return X with a constant, and unit codes."""
        rng = np.random.default_rng(self.seed)
        codes = np.repeat(np.arange(len(self.sizes)), self.sizes)
        columns = [np.ones(codes.size)]
        for _ in range(self.within):
            columns.append(rng.normal(size=codes.size) + rng.normal(size=len(self.sizes))[codes])
        columns += [rng.normal(size=len(self.sizes))[codes] for _ in range(self.between)]
        return np.column_stack(columns), codes


def _cycle(values: Sequence[int], units: int) -> tuple[int, ...]:
    return tuple(int(v) for v in np.resize(np.array(values), units))


DESIGNS: tuple[Design, ...] = (
    Design("6 units of 4, constant only", (4,) * 6, 0, 0, 0.0),
    Design("6 units of 4, covariates", (4,) * 6, 1, 1, 0.0),
    Design("6 units of 4, covariates", (4,) * 6, 1, 1, 1.0),
    Design("6 units, sizes 2 to 20", (2, 3, 4, 6, 10, 20), 1, 0, 0.0),
    Design("6 units, sizes 2 to 20", (2, 3, 4, 6, 10, 20), 1, 0, 0.5),
    Design("12 pairs", (2,) * 12, 1, 1, 0.0),
    Design("12 pairs", (2,) * 12, 1, 1, 5.0),
    Design("20 units, sizes 1 to 8", _cycle([1, 1, 2, 3, 8], 20), 2, 1, 0.0),
    Design("20 units, sizes 1 to 8", _cycle([1, 1, 2, 3, 8], 20), 2, 1, 0.2),
    Design("30 units of 5, 6 covariates", (5,) * 30, 3, 3, 0.0),
    Design("30 units of 5, 6 covariates", (5,) * 30, 3, 3, 0.1),
    Design("60 units, one of 100 rows", (100,) + (3,) * 59, 1, 1, 0.0),
    Design("60 units, one of 100 rows", (100,) + (3,) * 59, 1, 1, 1.0),
    Design("200 units, sizes 1 to 6", _cycle([1, 2, 3, 4, 5, 6], 200), 2, 2, 0.0),
    Design("200 units, sizes 1 to 6", _cycle([1, 2, 3, 4, 5, 6], 200), 2, 2, 0.05),
    Design("200 units, sizes 1 to 6", _cycle([1, 2, 3, 4, 5, 6], 200), 2, 2, 5.0),
)
"""Sixteen designs: 6 to 200 units, equal sizes and not, ψ from 0 to 5."""


@dataclass(frozen=True)
class Draws:
    """Replicates of one design in spectral form, at ``sigma_u^2 = 1``."""

    curve: Curve
    spectrum: Spectrum
    psi: float
    between: FloatArray
    within: FloatArray

    @property
    def total(self) -> FloatArray:
        """Return ``r(0)``."""
        return np.asarray(self.between.sum(axis=1) + self.within)


def draw(design: Design, replicates: int, seed: int) -> Draws:
    """Draw replicates of a design."""
    x, codes = design.arrays()
    curve = curve_of(Moments.from_arrays(x, np.random.default_rng(0).normal(size=codes.size), codes))
    spectrum = spectrum_of(curve)
    parts = list(draw_squares(spectrum, replicates, np.random.default_rng(seed), design.psi))
    return Draws(
        curve, spectrum, design.psi, np.vstack([b for b, _ in parts]), np.concatenate([w for _, w in parts])
    )


def p_values(draws: Draws, null_draws: int, seed: int) -> dict[str, FloatArray]:
    """Return the p-value of each test for each replicate."""
    s, between, within, total = draws.spectrum, draws.between, draws.within, draws.total
    df_between, m = float(s.multiplicities.sum()), s.n - s.rank
    found: dict[str, FloatArray] = {}
    f = (between.sum(axis=1) / df_between) / (within / s.zeros)
    found["f_unit_intercepts"] = stats.f.sf(f, df_between, s.zeros)
    d = between @ s.values / total
    one_sided = s.n * (d - 1.0) / np.sqrt(2.0 * (float(s.counts @ s.sizes**2) - s.n))
    found["lagrange_multiplier"] = stats.chi2.sf(one_sided**2, 1)
    found["lagrange_multiplier_one_sided"] = stats.norm.sf(one_sided)
    twice = float(s.multiplicities @ s.values**2)
    spread = np.sqrt(2.0 * (m * twice - s.trace**2) / (m**2 * (m + 2.0)))
    found["lagrange_multiplier_standardised"] = stats.norm.sf((d - s.trace / m) / spread)
    laws = null_laws(s, null_draws, seed)
    for name, kind in (("likelihood_ratio", "ml"), ("restricted_likelihood_ratio", "reml")):
        value = suprema(s, between, within, kind).value
        law = laws[kind].sorted
        above = law.size - np.searchsorted(law, value, side="left")
        found[f"{name} (simulated)"] = np.where(value > 0.0, (1.0 + above) / (1.0 + law.size), 1.0)
        found[f"{name} (mixture)"] = np.where(value > 0.0, 0.5 * stats.chi2.sf(value, 1), 1.0)
    return found


def covered(draws: Draws, confidence: float) -> dict[tuple[str, str, str], FloatArray]:
    """Tell for each replicate which interval contains the truth; keys are quantity, route, method. NaN: no
    interval."""
    s, between, within, psi = draws.spectrum, draws.between, draws.within, draws.psi
    tail = 0.5 * (1.0 - confidence)
    df_between = float(s.multiplicities.sum())
    found: dict[tuple[str, str, str], FloatArray] = {}
    f = ((between / (1.0 + s.values * psi)).sum(axis=1) / df_between) / (within / s.zeros)
    low, high = stats.f.ppf(tail, df_between, s.zeros), stats.f.isf(tail, df_between, s.zeros)
    found["ratio", "any", "exact_pivot"] = _as_float((f >= low) & (f <= high))
    low, high = stats.chi2.ppf(tail, s.zeros), stats.chi2.isf(tail, s.zeros)
    found["idiosyncratic_variance", "any", "exact_chi_square"] = _as_float((within >= low) & (within <= high))
    for kind in ("ml", "reml"):
        found.update(_likelihood_covered(draws, kind, confidence))
    found.update(_quadratic_covered(draws, confidence))
    return found


def _likelihood_covered(draws: Draws, kind: str, confidence: float) -> dict[tuple[str, str, str], FloatArray]:
    s, between, within, truth = draws.spectrum, draws.between, draws.within, draws.psi
    m = s.n - (s.rank if kind == "reml" else 0)
    roots, powers = (s.values, s.multiplicities) if kind == "reml" else (s.sizes, s.counts)
    best = suprema(s, between, within, kind)
    allowance = stats.chi2.ppf(confidence, 1)
    grid = np.concatenate([[0.0], np.logspace(-4, 4, 400) / s.values[-1], np.atleast_1d(truth)])
    r = within[:, None] + between @ (1.0 / (1.0 + np.multiply.outer(s.values, grid)))
    height = m * np.log(draws.total[:, None] / r) - np.log1p(np.multiply.outer(grid, roots)) @ powers
    room = allowance - (best.value[:, None] - height)  # what is left for the second parameter at each psi
    down, up = scale_factors(np.maximum(room, 0.0) / m)
    center = r / m
    inside = room >= 0.0
    found: dict[tuple[str, str, str], FloatArray] = {}
    found["ratio", kind, "profile_likelihood"] = _as_float(inside[:, -1])
    for quantity, value, true in (
        ("idiosyncratic_variance", center, 1.0),
        ("unit_variance", center * grid, truth),
    ):
        least = np.where(inside, value * down, np.inf).min(axis=1)
        most = np.where(inside, value * up, -np.inf).max(axis=1)
        found[quantity, kind, "profile_likelihood"] = _as_float((least <= true) & (true <= most))
    at = best.psi
    v = 1.0 / (1.0 + at[:, None] * s.values)
    scale = (within + (between * v).sum(axis=1)) / m
    if kind == "reml":
        first = s.zeros + v**2 @ s.multiplicities
        cross, second = (v**2 * s.values) @ s.multiplicities, (v * s.values) ** 2 @ s.multiplicities
    else:
        v = 1.0 / (1.0 + at[:, None] * s.sizes)
        first = s.n - s.counts.sum() + v**2 @ s.counts
        cross, second = (v**2 * s.sizes) @ s.counts, (v * s.sizes) ** 2 @ s.counts
    det = first * second - cross**2
    variances = 2.0 * scale[:, None] ** 2 * np.column_stack([first, -cross, second]) / det[:, None]
    found.update(_delta_covered(at * scale, scale, variances, draws, kind, confidence))
    return found


def _quadratic_covered(draws: Draws, confidence: float) -> dict[tuple[str, str, str], FloatArray]:
    """Cover by the route fitting_constants, whose forms are diagonal in the spectrum."""
    s, between, within = draws.spectrum, draws.between, draws.within
    df_between = float(s.multiplicities.sum())
    idiosyncratic = within / s.zeros
    raw = (between.sum(axis=1) - df_between * idiosyncratic) / s.trace
    ratio = np.maximum(raw, 0.0) / idiosyncratic
    spread_between = 2.0 * ((1.0 + ratio[:, None] * s.values) ** 2 @ s.multiplicities)
    spread_within = 2.0 * s.zeros
    unit = (spread_between + (df_between / s.zeros) ** 2 * spread_within) / s.trace**2
    cross = -(df_between / s.zeros**2) * spread_within / s.trace * np.ones_like(raw)
    own = spread_within / s.zeros**2 * np.ones_like(raw)
    variances = idiosyncratic[:, None] ** 2 * np.column_stack([unit, cross, own])
    key = "fitting_constants"
    found = _delta_covered(raw, idiosyncratic, variances, draws, key, confidence)
    df = 2.0 * raw**2 / variances[:, 0]
    tail = 0.5 * (1.0 - confidence)
    positive = raw > 0.0
    safe = np.where(positive, df, 1.0)
    with np.errstate(over="ignore", divide="ignore"):
        low, high = safe * raw / stats.chi2.isf(tail, safe), safe * raw / stats.chi2.ppf(tail, safe)
    hit = _as_float((low <= draws.psi) & (draws.psi <= high))
    found["unit_variance", key, "satterthwaite"] = np.where(positive, hit, np.nan)
    return found


def _delta_covered(
    unit: FloatArray,
    idiosyncratic: FloatArray,
    variances: FloatArray,
    draws: Draws,
    key: str,
    confidence: float,
) -> dict[tuple[str, str, str], FloatArray]:
    """Cover by estimate plus and minus z standard errors; columns of variances: unit, covariance,
    idiosyncratic."""
    z = stats.norm.isf(0.5 * (1.0 - confidence))
    ratio = np.maximum(unit, 0.0) / idiosyncratic
    of_ratio = (
        variances[:, 0] - 2.0 * ratio * variances[:, 1] + ratio**2 * variances[:, 2]
    ) / idiosyncratic**2
    psi = draws.psi
    rows = (
        ("unit_variance", unit, variances[:, 0], psi),
        ("idiosyncratic_variance", idiosyncratic, variances[:, 2], 1.0),
        ("ratio", ratio, of_ratio, psi),
        ("icc", ratio / (1.0 + ratio), of_ratio / (1.0 + ratio) ** 4, psi / (1.0 + psi)),
    )
    return {
        (quantity, key, "delta"): _as_float(np.abs(estimate - true) <= z * np.sqrt(np.maximum(variance, 0.0)))
        for quantity, estimate, variance, true in rows
    }


def replicate_outcome(draws: Draws, design: Design, at: int) -> FloatArray:
    """Return an outcome whose spectral squares are those of replicate `at`; dense, for small designs."""
    x, codes = design.arrays()
    n = codes.size
    basis = np.linalg.qr(x, mode="complete")[0][:, x.shape[1] :]
    z = (codes[:, None] == np.arange(codes.max() + 1)).astype(float)
    values, vectors = np.linalg.eigh(basis.T @ z @ z.T @ basis)
    y = np.zeros(n)
    zeros = draws.spectrum.zeros
    directions = basis @ vectors
    y += directions[:, 0] * np.sqrt(draws.within[at])
    place = zeros
    for k, multiplicity in enumerate(draws.spectrum.multiplicities.astype(int)):
        assert np.allclose(values[place : place + multiplicity], draws.spectrum.values[k])
        y += directions[:, place] * np.sqrt(draws.between[at, k])
        place += multiplicity
    return y


def calibrate(
    designs: Iterable[Design] = DESIGNS,
    replicates: int = 4_000,
    seed: int = 20_260,
    *,
    level: float = 0.05,
    confidence: float = 0.95,
    null_draws: int = 20_000,
) -> pd.DataFrame:
    """Tabulate size and coverage.

    Parameters
    ----------
    designs : iterable of Design
        Tests are studied where ψ = 0, intervals everywhere.
    replicates : int
        Per design.
    seed : int
    level, confidence : float
    null_draws : int
        Of the simulated null laws, drawn once per design; their error is part of `error`.

    Returns
    -------
    DataFrame
        One row per design and rule: design, units, rows, psi, what (``size`` or ``coverage``), quantity,
        route, rule, nominal, observed, error (Monte Carlo standard error at the nominal value), z, exact,
        defined (share of replicates that give an interval). For an interval that not every replicate gives,
        `observed` is among those that do.
    """
    rows = []
    for number, design in enumerate(designs):
        draws = draw(design, replicates, seed + 1_000 * number)
        start = (design.name, len(design.sizes), sum(design.sizes), design.psi)
        if design.psi == 0.0:
            for rule, p in p_values(draws, null_draws, seed + 1_000 * number + 1).items():
                extra = 1.0 / null_draws if "simulated" in rule else 0.0
                error = np.sqrt(level * (1.0 - level) * (1.0 / replicates + extra))
                size = float((p <= level).mean())
                rows.append((*start, "size", "", "", rule, level, size, error, rule in EXACT, 1.0))
        for (quantity, route, rule), hit in covered(draws, confidence).items():
            defined = np.isfinite(hit)
            count = int(defined.sum())
            observed = float(hit[defined].mean()) if count else np.nan
            error = np.sqrt(confidence * (1.0 - confidence) / count) if count else np.nan
            labels = ("coverage", quantity, route, rule, confidence, observed, error, rule in EXACT)
            rows.append((*start, *labels, count / replicates))
    names = [
        "design",
        "units",
        "rows",
        "psi",
        "what",
        "quantity",
        "route",
        "rule",
        "nominal",
        "observed",
        "error",
        "exact",
        "defined",
    ]
    table = pd.DataFrame(rows, columns=names)
    table.insert(names.index("exact"), "z", (table["observed"] - table["nominal"]) / table["error"])
    return table


def _as_float(value: NDArray[np.bool_]) -> FloatArray:
    return value.astype(float)


if __name__ == "__main__":
    with pd.option_context("display.width", 200, "display.max_rows", None, "display.max_columns", None):
        print(calibrate().round(4).to_string(index=False))
