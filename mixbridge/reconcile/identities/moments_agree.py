"""Identities 12, 13 and 14: where balance or a closed column space makes different routes one."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.reconcile.identities.ends import SIZE, within_bounds
from mixbridge.reconcile.identities.plain import EPS, largest, least_squares
from mixbridge.reconcile.identities.registry import Compared, Unmet, identity
from mixbridge.reconcile.identities.restricted import scoring_step
from mixbridge.reconcile.identities.setting import Setting, components_ratio, multiple
from mixbridge.routes import Fit

__all__: list[str] = []

FloatArray = NDArray[np.float64]
QUARTET = ("swamy_arora", "wansbeek_kapteyn", "wallace_hussain", "fitting_constants")
WHAT = ("idiosyncratic variance", "unit variance")


@dataclass(frozen=True, slots=True)
class _Closed:
    """Components from the within and the between residual sum of squares, by plain least squares.

    Attributes
    ----------
    components, sizes : ndarray of shape (2,)
        ``(sigma_u^2, sigma_a^2)``; what their distance is measured by: sigma_u^2, and |sigma_a^2| plus what
        was subtracted for it.
    within, between : float
        Both sums of squares, squared units of the outcome.
    coefficient : float
        Coefficient of sigma_a^2 in the expectation of `between`.
    condition : float
        The larger of the conditions of QX and PX.
    stored : float
        Share of the sums of squares that rounding of the stored columns can make.
    carried : float
        Length of the within fit carried to the unit means, over that of what is left of them, twice.
    """

    components: FloatArray
    sizes: FloatArray
    within: float
    between: float
    coefficient: float
    condition: float
    stored: float
    carried: float


def _anova(setting: Setting, weighted: bool = True) -> _Closed | Unmet:
    """Compute components from plain regressions of deviations and of unit means (weighted by size or not)."""
    curve, plain = setting.curve, setting.plain
    df_w, df_b = curve.df_within, curve.units - curve.rank_between
    if df_w < 1 or df_b < 1:
        return Unmet(f"degrees of freedom within and between units: n - N - K_w = {df_w}, N - K_p = {df_b}")
    if not curve.within_residual > 0.0:
        return Unmet("positive within residual sum of squares: the within regression fits exactly")
    kept_w, kept_b = curve.within_span.kept, curve.between_span.kept
    inner = least_squares(plain.within[:, [*kept_w, plain.rank]])
    weights = plain.sizes if weighted else np.ones(len(plain.sizes))
    outer = plain.means(weights, kept_b)
    rows = plain.between[:, :, kept_b] @ outer.root
    spread = (rows**2).sum(axis=(1, 2))
    n, harmonic = float(curve.n), curve.units / float(plain.counts @ (1.0 / plain.sizes))
    coefficient = n - float(plain.sizes**2 @ spread) if weighted else df_b
    on_idiosyncratic = df_b if weighted else df_b / harmonic
    within, between = inner.residual * plain.unit**2, outer.residual * plain.unit**2
    first = within / df_w
    second = (between - on_idiosyncratic * first) / coefficient
    inner_slope, pooled = np.zeros(plain.rank), plain.at(0.0).slope
    inner_slope[kept_w] = inner.slope
    moved = setting.hidden_length(np.abs(pooled) + np.abs(inner_slope)) * plain.unit
    lengths = np.sqrt(plain.sizes @ (plain.between[:, :, :-1] ** 2).sum(axis=1))
    return _Closed(
        np.array([first, second]),
        np.array([first, abs(second) + on_idiosyncratic * first / coefficient]),
        within,
        between,
        float(coefficient),
        max(inner.condition, outer.condition),
        float(2.0 * moved * (within**-0.5 + between**-0.5)),
        float(2.0 * (np.abs(inner_slope) @ lengths) * plain.unit * between**-0.5),
    )


def _solved_rounding(setting: Setting, fit: Fit) -> FloatArray:
    """Return the rounding of solved components, per unit rounding: ``|C^-1| (|dC| theta + dq)``.

    dC: rounding of traces, relative to what projections are subtracted from (T-fold weights make it up to T times as
    large), amplified by n over the degrees of freedom. dq: twice the root of the form times the length of what the
    engine squares, the pooled residual.
    """
    curve, largest_size = setting.curve, float(setting.curve.sizes[-1])
    _, values, first, second = zip(*fit.forms_table, strict=True)
    system, q = np.column_stack([first, second]), np.abs(np.array(values))
    theta = np.abs([fit.idiosyncratic_variance, fit.unit_variance_raw])
    loss = curve.n / max(curve.df_within, 1) + curve.units / max(curve.units - curve.rank_constant, 1)
    prior = float(str(fit.conventions.get("prior", 0.0)))
    whole = np.array([float(curve.n), float(curve.counts @ (curve.sizes / (1.0 + curve.sizes * prior) ** 2))])
    row = np.maximum(np.maximum(np.abs(system[:, 0]), np.abs(system[:, 1]) / largest_size), whole) * loss
    traces = row[:, None] * np.array([1.0, largest_size])
    forms = 2.0 * np.sqrt(q * np.maximum(q, curve.unit * np.maximum(1.0, row / curve.n)))
    return np.asarray(np.abs(np.linalg.inv(system)) @ (traces @ theta + forms))


def _against(setting: Setting, closed: _Closed, routes: Iterable[str], condition: str, what: str) -> Compared:
    """Compare the components of several routes with those of the closed form."""
    found: list[tuple[float, Compared]] = []
    curve = setting.curve
    m, df_b = curve.n - curve.rank, curve.units - curve.rank_between
    own = closed.sizes * (
        1.0 + closed.between / closed.within + curve.n / curve.df_within + curve.units / df_b
    )
    for key in routes:
        fit = setting.fits[key]
        left = np.array([fit.idiosyncratic_variance, fit.unit_variance_raw])
        if fit.forms_table:
            ours = _solved_rounding(setting, fit)
        else:
            step = scoring_step(setting, max(components_ratio(fit), 0.0))
            ours = step.amplified * np.maximum(closed.sizes, step.errors) * (m / curve.df_within + m / df_b)
        reason = max(closed.condition, curve.condition)
        tolerance = (
            multiple(curve.rank) * reason * ((ours + own) / closed.sizes + closed.carried) + closed.stored
        )
        at, difference = largest(left, closed.components, closed.sizes, tolerance)
        outcome = Compared(
            condition,
            left[at],
            closed.components[at],
            f"{WHAT[at]}: {key}",
            f"{WHAT[at]}: {what}",
            difference[at],
            tolerance[at],
            f"64 (columns + 1) x 2.2e-16 x condition {reason:.3g} x rounding of forms and traces carried "
            "through the route's own equations, and of the within fit carried to unit means "
            f"{closed.carried:.3g}, plus {closed.stored:.1g} for the rounding of the stored columns; "
            "relative to the component (for the unit variance, plus what is subtracted for it)",
        )
        found.append((difference[at] / tolerance[at], outcome))
    return max(found, key=lambda pair: np.inf if np.isnan(pair[0]) else pair[0])[1]


def _unbiased(
    setting: Setting, keys: Iterable[str], between: tuple[str, ...] = ("size_weighted",)
) -> list[str]:
    """Return the fits among `keys` that solve exact expectations with ranks as degrees of freedom."""
    found = []
    for key in keys:
        fit = setting.fits.get(key)
        if fit is None or not np.isfinite(fit.idiosyncratic_variance):
            continue
        c = fit.conventions
        exact = c.get("expectation", "exact") == "exact" and c.get("count", "rank") == "rank"
        if exact and c.get("between", "size_weighted") in between:
            found.append(key)
    return found


@identity(
    number=12,
    name="one analysis of variance",
    statement="balanced, column space closed under unit averaging: every unbiased quadratic route, the "
    "minimum-norm ones at any prior, and REML away from zero give the components of the analysis of "
    "variance",
    source="Searle, Casella & McCulloch 1992, ch. 4 (place from memory)",
)
def balanced_components(setting: Setting) -> Compared | Unmet:
    """Compare the raw components of these routes with plain analysis of variance."""
    if not setting.balanced:
        return Unmet(f"balanced: units have {len(setting.curve.sizes)} different sizes")
    if not setting.closed:
        return Unmet(f"column space closed under unit averaging: {setting.ranks}")
    closed = _anova(setting)
    if isinstance(closed, Unmet):
        return closed
    norm = [key for key, fit in setting.fits.items() if "prior" in fit.conventions]
    routes = _unbiased(setting, (*QUARTET, *norm), ("size_weighted", "harmonic", "unweighted"))
    interior = closed.components[1] > 1e-9 * closed.sizes[1]
    if interior and setting.missing("reml") is None:
        routes.append("reml")
    if not routes:
        return Unmet("no unbiased route was fitted on these rows")
    condition = f"balanced; closed under unit averaging ({setting.ranks}); routes {', '.join(routes)}"
    return _against(setting, closed, routes, condition, "analysis of variance")


@identity(
    number=12,
    name="maximum likelihood in closed form",
    statement="balanced, column space closed under unit averaging: ML away from zero is RSS_w/(n - N) and "
    "(q_b/N - sigma_u^2)/T",
    source="Searle, Casella & McCulloch 1992, ch. 4 (place from memory)",
)
def balanced_ml(setting: Setting) -> Compared | Unmet:
    """Compare the ML components with their closed form."""
    if not setting.balanced:
        return Unmet(f"balanced: units have {len(setting.curve.sizes)} different sizes")
    if not setting.closed:
        return Unmet(f"column space closed under unit averaging: {setting.ranks}")
    missing = setting.missing("ml")
    closed = _anova(setting)
    if missing or isinstance(closed, Unmet):
        return closed if isinstance(closed, Unmet) else Unmet(str(missing))
    curve, size = setting.curve, float(setting.curve.sizes[0])
    first = closed.within / (curve.n - curve.units)
    second = (closed.between / curve.units - first) / size
    if not second > 1e-9 * first / size:
        return Unmet(f"away from zero: the closed form of the unit variance is {second:.6g}")
    form = _Closed(
        np.array([first, second]),
        np.array([first, second + first / size]),
        closed.within,
        closed.between,
        closed.coefficient,
        closed.condition,
        closed.stored,
        closed.carried,
    )
    return _against(
        setting, form, ["ml"], "balanced; closed under unit averaging; unit variance positive", "closed form"
    )


@identity(
    number=13,
    name="four quadratic routes are one",
    statement="unbalanced, column space closed under unit averaging: swamy_arora, wallace_hussain, "
    "wansbeek_kapteyn and fitting_constants still agree",
    source="each residual maker splits into a within and a between part",
)
def closed_components(setting: Setting) -> Compared | Unmet:
    """Compare these four with plain within and between sums of squares and their expectation."""
    if setting.balanced:
        return Unmet("unbalanced: all units have one size, see identity 12")
    if not setting.closed:
        return Unmet(f"column space closed under unit averaging: {setting.ranks}")
    closed = _anova(setting)
    if isinstance(closed, Unmet):
        return closed
    routes = _unbiased(setting, QUARTET)
    if not routes:
        return Unmet("none of the four routes was fitted on these rows")
    condition = f"unbalanced; closed under unit averaging ({setting.ranks}); routes {', '.join(routes)}"
    return _against(setting, closed, routes, condition, "within and size-weighted between sums of squares")


@identity(
    number=14,
    name="pooled residuals and minimum norm at zero",
    statement="balanced: wallace_hussain = minimum norm with prior 0",
    source="both use the same two sums of squares of pooled residuals; Rao 1971",
)
def wallace_hussain_is_minque_zero(setting: Setting) -> Compared | Unmet:
    """Compare the raw components of the two routes."""
    if not setting.balanced:
        return Unmet(f"balanced: units have {len(setting.curve.sizes)} different sizes")
    zero = [key for key, fit in setting.fits.items() if fit.conventions.get("prior") == 0.0]
    pair = _unbiased(setting, ["wallace_hussain", *zero[:1]])
    if len(pair) < 2:
        return Unmet("wallace_hussain with exact expectations and minque with prior 0 fitted on these rows")
    one, other = setting.fits[pair[0]], setting.fits[pair[1]]
    left = np.array([one.idiosyncratic_variance, one.unit_variance_raw])
    right = np.array([other.idiosyncratic_variance, other.unit_variance_raw])
    errors = np.sqrt(np.maximum(np.diag(other.components_covariance), 0.0))[::-1]
    size = np.fmax(np.fmax(np.abs(right), errors), setting.curve.unit * EPS)
    rounding = _solved_rounding(setting, one) + _solved_rounding(setting, other)
    stored = setting.snapped * setting.stored_length(setting.plain.beta(setting.plain.at(0.0).slope))
    _, values, first, second = zip(*other.forms_table, strict=True)
    moved = np.abs(np.linalg.inv(np.column_stack([first, second]))) @ (2.0 * stored * np.sqrt(np.abs(values)))
    tolerance = (multiple(setting.curve.rank) * setting.curve.condition * rounding + moved) / size
    at, difference = largest(left, right, size, tolerance)
    return Compared(
        "balanced",
        left[at],
        right[at],
        f"{WHAT[at]}: wallace_hussain",
        f"{WHAT[at]}: {pair[1]}",
        difference[at],
        tolerance[at],
        f"64 (columns + 1) x 2.2e-16 x condition of X {setting.curve.condition:.3g} x rounding of forms and "
        "traces carried through both pairs of equations; relative to the component or its standard error, "
        "whichever is larger",
    )


@identity(
    number=14,
    name="harmonic and size-weighted form",
    statement="balanced: swamy_arora is the same from unweighted unit means with the harmonic mean size",
    source="all weights are equal",
)
def harmonic_is_weighted(setting: Setting) -> Compared | Unmet:
    """Compare swamy_arora with the unweighted regression of unit means and the harmonic mean size."""
    if not setting.balanced:
        return Unmet(f"balanced: units have {len(setting.curve.sizes)} different sizes")
    routes = _unbiased(setting, ["swamy_arora"], ("size_weighted", "harmonic", "unweighted"))
    if not routes:
        return Unmet("swamy_arora with ranks as degrees of freedom fitted on these rows")
    closed = _anova(setting, weighted=False)
    if isinstance(closed, Unmet):
        return closed
    return _against(setting, closed, routes, "balanced", "unweighted unit means, harmonic mean size")


@identity(
    number=14,
    name="differences of two rows",
    statement="no unit with more than two rows, none left out for a gap: first differences without a "
    "constant = within slopes",
    source="the deviations from a mean of two are plus and minus half the difference",
)
def differences_are_within(setting: Setting) -> Compared | Unmet:
    """Compare the two sets of slopes."""
    largest_size = int(setting.curve.sizes[-1])
    if largest_size != 2:
        return Unmet(f"two rows per unit: the largest unit has {largest_size}")
    missing = setting.missing("within", "first_difference")
    if missing:
        return Unmet(missing)
    pairs, fit = int(setting.curve.counts[-1]), setting.fits["first_difference"]
    used = int(fit.residual_df) + fit.rank
    if used != pairs:
        return Unmet(f"no gap: {pairs - used} of {pairs} differences were left out because the step differs")
    left, right = fit.beta, setting.fits["within"].beta
    free = np.flatnonzero(np.isfinite(left) & np.isfinite(right))
    size, amplified, inner = within_bounds(setting, free)
    root = float(np.sqrt(setting.curve.n)) * inner
    tolerance = multiple(setting.curve.rank) * (setting.curve.condition + root) * amplified
    at, difference = largest(left[free], right[free], size, tolerance)
    name = setting.curve.names[free[at]]
    return Compared(
        "no unit with more than two rows, no gap",
        left[free[at]],
        right[free[at]],
        f"{name}: first_difference",
        f"{name}: within",
        difference[at],
        tolerance[at],
        f"64 (columns + 1) x 2.2e-16 x (condition of X {setting.curve.condition:.3g} + root of n x "
        f"condition of QX {inner:.3g}, for moments taken from rows) x amplification in this coefficient; "
        f"{SIZE}",
    )
