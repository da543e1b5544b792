"""At least sixty small named panels, each with its trouble. All designs have full column rank.

Covariates are rounded to multiples of 2^-16, so that offsets and hidden unit-constant combinations are exact
and not so up to rounding only; responses keep all their digits.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from two_minima import draw

GRAIN = 2.0**-16


@dataclass(frozen=True)
class Panel:
    """A small panel as arrays."""

    name: str
    X: np.ndarray = field(repr=False)
    y: np.ndarray = field(repr=False)
    units: np.ndarray = field(repr=False)
    periods: np.ndarray = field(repr=False)
    names: tuple[str, ...]
    note: str
    tags: frozenset[str] = frozenset()

    @property
    def has_intercept(self) -> bool:
        return "Intercept" in self.names


BALANCED = (4,) * 8
MILD = (2, 3, 3, 4, 5, 6, 7, 8)
SINGLETONS = (1, 1, 1, 1, 1, 1, 1, 2, 2, 3, 4, 5)
HUGE = (2, 1, 3, 2, 2, 30)
TWO = (7, 12)
TWO_BALANCED = (9, 9)
PAIRS = (2,) * 12
MANY = (1, 1, 2, 2, 2, 3, 3, 3, 4, 4, 5, 5, 6, 9)
SIZES = {
    "BALANCED": BALANCED,
    "MILD": MILD,
    "SINGLETONS": SINGLETONS,
    "HUGE": HUGE,
    "TWO": TWO,
    "TWO_BALANCED": TWO_BALANCED,
    "PAIRS": PAIRS,
    "MANY": MANY,
}


def _covariate(
    kind: str, rng: np.random.Generator, units: np.ndarray, made: dict[str, np.ndarray]
) -> np.ndarray:
    """Make one covariate: what it is, not how it is called."""
    n, N = len(units), int(units.max()) + 1
    within, between = rng.normal(size=n), rng.normal(size=N)[units]
    last = list(made.values())[-1] if made else np.zeros(n)
    means = np.array([last[units == i].mean() for i in range(N)])[units]
    trend = np.concatenate([np.arange(k) for k in np.bincount(units)]).astype(float)
    values = {
        "within": within,
        "both": within + between,
        "between": between,
        "binary": (within > 0).astype(float),
        "trend": trend,
        "near_within": last + between + 1e-5 * within,
        "near_between": last + 1e-5 * between + (within - _unit_means(within, units)),
        "hidden": last + between,
    }
    if kind == "mean":
        return means  # keeps its digits: the mean of stored numbers, one number per unit
    if (
        kind == "pure"
    ):  # plus and minus the same multiple within each unit, in any order of rows: means exactly 0
        step = trend - (np.bincount(units)[units] - 1) / 2
        return step * (1 + np.round(4 * rng.random(N))[units])
    if kind == "near_within" or kind == "near_between":
        return np.round(values[kind] / 2.0**-36) * 2.0**-36
    return np.round(values[kind] / GRAIN) * GRAIN


def _unit_means(v: np.ndarray, units: np.ndarray) -> np.ndarray:
    return (np.bincount(units, v) / np.bincount(units))[units]


def make(
    name: str,
    note: str,
    sizes: tuple[int, ...],
    kinds: str = "both between",
    *,
    seed: int,
    intercept: bool = True,
    psi: float = 1.0,
    indicators: bool = False,
    gaps: bool = False,
    tags: str = "",
) -> Panel:
    """Draw a panel. `kinds` are names of covariates; `indicators` adds one per period but the first seen."""
    rng = np.random.default_rng(seed)
    units = np.repeat(np.arange(len(sizes)), sizes)
    periods = np.concatenate([np.arange(k) for k in sizes])
    if gaps:
        longest = max(sizes) + 2
        periods = np.concatenate([np.sort(rng.permutation(longest)[:k]) for k in sizes])
    made: dict[str, np.ndarray] = {}
    for kind in kinds.split():
        made[f"{kind}_{len(made) + 1}"] = _covariate(kind, rng, units, made)
    columns = {"Intercept": np.ones(len(units))} if intercept else {}
    columns.update(made)
    if indicators:
        seen = np.unique(periods)
        columns.update({f"period_{t}": (periods == t).astype(float) for t in seen[1 if intercept else 0 :]})
    X = np.column_stack(list(columns.values()))
    slopes = np.round(rng.normal(size=X.shape[1]) * 8) / 4 + 0.125
    effect = np.sqrt(psi) * rng.normal(size=len(sizes))
    y = X @ slopes + effect[units] + rng.normal(size=len(units))
    if np.linalg.matrix_rank(X / np.abs(X).max(axis=0)) < X.shape[1]:
        raise ArithmeticError(f"{name}: columns are dependent")
    return Panel(name, X, y, units, periods, tuple(columns), note, frozenset(tags.split()))


def moved(
    panel: Panel, name: str, note: str, *, x: float = 0.0, y: float = 0.0, tags: str = "offset"
) -> Panel:
    """Add offsets to the covariates (not the intercept, not indicators) and to the response."""
    free = np.array([n != "Intercept" and not n.startswith("period_") for n in panel.names])
    return replace(
        panel, name=name, note=note, X=panel.X + x * free, y=panel.y + y, tags=panel.tags | set(tags.split())
    )


def scaled(panel: Panel, name: str, note: str, *, x: float = 1.0, y: float = 1.0) -> Panel:
    """Multiply the covariates and the response."""
    free = np.array([n != "Intercept" and not n.startswith("period_") for n in panel.names])
    X = panel.X * np.where(free, x, 1.0)
    return replace(panel, name=name, note=note, X=X, y=panel.y * y, tags=panel.tags | {"scale"})


def shuffled(panel: Panel, name: str, seed: int) -> Panel:
    """Put the rows in random order and give the units other, unordered labels."""
    rng = np.random.default_rng(seed)
    order = rng.permutation(len(panel.y))
    labels = rng.permutation(10_000)[: panel.units.max() + 1]
    return replace(
        panel,
        name=name,
        note=f"{panel.note}; rows shuffled",
        X=panel.X[order],
        y=panel.y[order],
        units=labels[panel.units][order],
        periods=panel.periods[order],
        tags=panel.tags | {"shuffled"},
    )


def negative(panel: Panel, name: str, note: str, share: float = 0.05) -> Panel:
    """Shrink the unit means of the response around the fit, so that the unit variance comes out negative."""
    fit = panel.X @ np.linalg.lstsq(panel.X, panel.y, rcond=None)[0]
    residual = panel.y - fit
    means = _unit_means(residual, panel.units)
    y = fit + residual - (1 - share) * means
    return replace(panel, name=name, note=note, y=y, tags=panel.tags | {"negative"})


def near_zero(panel: Panel, name: str, psi: float) -> Panel:
    """Rescale the between part of a balanced, closed panel: every unbiased route estimates just this psi."""
    X, y, units = panel.X, panel.y, panel.units
    size = int(np.bincount(units)[0])
    D = (units[:, None] == np.arange(units.max() + 1)).astype(float)
    P = D @ D.T / size
    PX, QX = P @ X, X - P @ X
    between = P @ y - PX @ np.linalg.lstsq(PX, P @ y, rcond=None)[0]
    within = y - P @ y - QX @ np.linalg.lstsq(QX, y - P @ y, rcond=None)[0]
    df_b, df_w = D.shape[1] - np.linalg.matrix_rank(PX), len(y) - D.shape[1] - np.linalg.matrix_rank(QX)
    target = (within @ within / df_w) * (1 + size * psi) * df_b
    y = y + (np.sqrt(target / (between @ between)) - 1) * between
    note = f"every unbiased route estimates psi = {psi:g}"
    return replace(panel, name=name, note=note, y=y, tags=panel.tags | {"near_zero"})


def two_minima(name: str, seed: int, attempt: int, tags: str) -> Panel:
    """Make a panel that the search in two_minima.py found."""
    X, y, units = draw(seed, attempt)
    periods = np.concatenate([np.arange(k) for k in np.bincount(units)])
    names = ("Intercept", *(f"x_{j}" for j in range(1, X.shape[1])))
    return Panel(
        name, X, y, units, periods, names, "two local minima", frozenset(tags.split()) | {"two_minima"}
    )


#: name | note | sizes | kinds of covariates | options | tags. The seed is the place in the list, from 1.
STRUCTURES = """
balanced_one_way | intercept only, closed | BALANCED |  |  | balanced closed
balanced_both | covariates vary both ways | BALANCED | both both |  | balanced
balanced_closed | purely within, purely between | BALANCED | pure between |  | balanced closed
balanced_means | unit means added | BALANCED | both mean between |  | balanced closed
balanced_periods | PX rank-deficient | BALANCED | pure between | indicators | balanced closed periods
balanced_periods_both | PX deficient, not closed | BALANCED | both between | indicators | balanced periods
balanced_no_intercept | no intercept | BALANCED | both between | no_intercept | balanced
balanced_no_intercept_closed | no intercept, closed | BALANCED | pure between | no_intercept | balanced closed
balanced_all_periods | all period indicators | BALANCED | both | no_intercept indicators | balanced periods
balanced_hidden | x and x + unit-constant: QX rank-deficient | BALANCED | both hidden |  | balanced hidden
balanced_trend | trend and binary covariate | BALANCED | trend binary between |  | balanced
pairs_balanced | two periods | PAIRS | both between |  | balanced two_periods
pairs_periods | two periods, indicator | PAIRS | both | indicators | balanced two_periods periods
two_units_balanced | two units | TWO_BALANCED | both |  | balanced few
two_units_one_way | two units, intercept only | TWO_BALANCED |  |  | balanced closed few
mild_one_way | unbalanced, intercept only | MILD |  |  | closed
mild_both | unbalanced, both ways | MILD | both both |  |
mild_between | unbalanced, unit-constant covariate | MILD | both between |  |
mild_closed | unbalanced, closed | MILD | pure between |  | closed
mild_means | unbalanced, unit means added | MILD | both mean between |  | closed
mild_between_only | only unit-constant covariates | MILD | between between |  | closed
mild_no_intercept | unbalanced, no intercept | MILD | both between | no_intercept |
mild_no_intercept_closed | no intercept, closed | MILD | pure between | no_intercept | closed
mild_no_intercept_within | no intercept, no unit-constant part | MILD | both | no_intercept |
mild_periods | unbalanced, period indicators | MILD | both | indicators | periods
mild_all_periods | unbalanced, all period indicators | MILD | both | no_intercept indicators | periods
mild_gaps | gaps in the periods | MILD | both between | gapped | gaps
mild_hidden | x and x + unit-constant: QX rank-deficient | MILD | both hidden |  | hidden
mild_hidden_no_intercept | hidden, no intercept | MILD | both hidden | no_intercept | hidden
mild_trend | trend, binary | MILD | trend binary |  |
singletons_both | most units have one row | SINGLETONS | both |  | singletons
singletons_between | singletons, unit-constant covariate | SINGLETONS | both between |  | singletons
singletons_one_way | singletons, intercept only | SINGLETONS |  |  | singletons closed
singletons_no_intercept | singletons, no intercept | SINGLETONS | both between | no_intercept | singletons
singletons_hidden | singletons, hidden unit-constant part | SINGLETONS | both hidden |  | singletons hidden
huge_unit | one unit has three quarters of the rows | HUGE | both |  | huge
huge_unit_between | one huge unit, unit-constant covariate | HUGE | both between |  | huge
huge_unit_one_way | one huge unit, intercept only | HUGE |  |  | huge closed
two_units | two units of different size | TWO | both |  | few
two_units_one_way_unbalanced | two units, intercept only | TWO |  |  | few closed
many_sizes | eight distinct sizes | MANY | both both between |  |
many_sizes_periods | eight sizes, period indicators | MANY | both | indicators | periods
"""


def _structures() -> list[Panel]:
    """Balanced, unbalanced and awkward shapes with ordinary data."""
    panels = []
    for seed, line in enumerate(STRUCTURES.strip().splitlines(), start=1):
        name, note, sizes, kinds, options, tags = (part.strip() for part in line.split("|"))
        panels.append(
            make(
                name,
                note,
                SIZES[sizes],
                kinds,
                seed=seed,
                intercept="no_intercept" not in options,
                indicators="indicators" in options,
                gaps="gapped" in options,
                tags=tags,
            )
        )
    return panels


def _strengths() -> list[Panel]:
    """Unit variances near zero, huge, estimated below zero."""
    return [
        make(
            "psi_huge_balanced",
            "psi = 1e6",
            BALANCED,
            "both between",
            seed=51,
            psi=1e6,
            tags="balanced psi_huge",
        ),
        make("psi_huge_mild", "psi = 1e6", MILD, "both between", seed=52, psi=1e6, tags="psi_huge"),
        make(
            "psi_huge_singletons",
            "psi = 1e6",
            SINGLETONS,
            "both",
            seed=53,
            psi=1e6,
            tags="singletons psi_huge",
        ),
        make(
            "psi_huge_one_way",
            "psi = 1e6, intercept only",
            MILD,
            "",
            seed=54,
            psi=1e6,
            tags="psi_huge closed",
        ),
        make(
            "psi_large_huge_unit", "psi = 100, one huge unit", HUGE, "both", seed=55, psi=100.0, tags="huge"
        ),
        make("psi_zero_mild", "true psi = 0", MILD, "both between", seed=56, psi=0.0),
        near_zero(
            make("", "", BALANCED, "pure between", seed=57, tags="balanced closed"), "psi_near_zero", 1e-4
        ),
        near_zero(make("", "", BALANCED, "", seed=58, tags="balanced closed"), "psi_near_zero_one_way", 1e-3),
        negative(make("", "", BALANCED, "both", seed=59, tags="balanced"), "negative_balanced", "below zero"),
        negative(make("", "", MILD, "both between", seed=60), "negative_mild", "below zero"),
        negative(
            make("", "", BALANCED, "", seed=61, tags="balanced closed"), "negative_one_way", "below zero"
        ),
        negative(
            make("", "", SINGLETONS, "both", seed=62, tags="singletons"), "negative_singletons", "below zero"
        ),
    ]


def _numerics() -> list[Panel]:
    """Offsets, scales, near collinearity, row order."""
    mild = make("", "", MILD, "both between", seed=71)
    balanced = make("", "", BALANCED, "both between", seed=72, tags="balanced")
    single = make("", "", SINGLETONS, "both between", seed=73, tags="singletons")
    return [
        moved(mild, "offset_y_1e6", "y + 1e6", y=1e6),
        moved(mild, "offset_y_1e9", "y + 1e9", y=1e9),
        moved(mild, "offset_x_1e6", "x + 1e6", x=1e6),
        moved(mild, "offset_x_1e9", "x + 1e9", x=1e9),
        moved(balanced, "offset_both_1e6", "x + 1e6, y + 1e6", x=1e6, y=1e6),
        moved(balanced, "offset_both_1e9", "x + 1e9, y - 1e9", x=1e9, y=-1e9),
        moved(single, "offset_singletons_1e9", "x + 1e9, y + 1e9", x=1e9, y=1e9),
        scaled(mild, "scale_x_1e-8", "x * 1e-8", x=1e-8),
        scaled(mild, "scale_x_1e8", "x * 1e8", x=1e8),
        scaled(mild, "scale_y_1e-8", "y * 1e-8", y=1e-8),
        scaled(mild, "scale_y_1e8", "y * 1e8", y=1e8),
        scaled(balanced, "scale_both", "x * 1e8, y * 1e-8", x=1e8, y=1e-8),
        make(
            "ill_within", "two covariates equal within to 1e-5", MILD, "both near_within", seed=74, tags="ill"
        ),
        make(
            "ill_between",
            "two covariates equal between to 1e-5",
            MILD,
            "both near_between",
            seed=75,
            tags="ill",
        ),
        make(
            "ill_within_balanced",
            "equal within to 1e-5",
            BALANCED,
            "both near_within",
            seed=76,
            tags="balanced ill",
        ),
        shuffled(mild, "shuffled_mild", 77),
        shuffled(single, "shuffled_singletons", 78),
        shuffled(make("", "gaps", MILD, "both", seed=79, gaps=True, tags="gaps"), "shuffled_gaps", 79),
    ]


def _two_minima() -> list[Panel]:
    """Found by `search_two_minima` with seeds 1 and 7; the tests assert which minimum is lower."""
    return [
        two_minima("two_minima_reml_zero_a", 7, 1064, "reml_two lowest_zero_reml"),
        two_minima("two_minima_reml_zero_b", 7, 3563, "reml_two lowest_zero_reml"),
        two_minima("two_minima_reml_zero_c", 7, 4792, "reml_two lowest_zero_reml"),
        two_minima("two_minima_reml_zero_d", 7, 4650, "reml_two lowest_zero_reml"),
        two_minima("two_minima_reml_interior_a", 1, 1058, "reml_two lowest_interior_reml"),
        two_minima("two_minima_reml_interior_b", 1, 2915, "reml_two lowest_interior_reml"),
        two_minima("two_minima_reml_interior_c", 1, 1309, "reml_two lowest_interior_reml"),
        two_minima("two_minima_both", 7, 1084, "reml_two lowest_interior_reml ml_two lowest_zero_ml"),
        two_minima("two_minima_ml_zero", 1, 299, "ml_two lowest_zero_ml"),
        two_minima("two_minima_ml_interior", 1, 2815, "ml_two lowest_interior_ml"),
    ]


PANELS: tuple[Panel, ...] = (*_structures(), *_strengths(), *_numerics(), *_two_minima())
BY_NAME = {panel.name: panel for panel in PANELS}


def tagged(*tags: str) -> list[Panel]:
    """Return the panels that carry all these tags."""
    return [panel for panel in PANELS if panel.tags.issuperset(tags)]
