"""The path of a coefficient: values by dense algebra, extrema by brute force, deviances, ranges, sentences."""

from __future__ import annotations

from functools import cache
from itertools import pairwise

import numpy as np
import pytest
from allowance import EPS
from oracle.fit import dense_panel
from panels import BY_NAME
from scipy import stats

import mixbridge
from mixbridge.inference.pivot import pivot_of
from mixbridge.moments import Moments
from mixbridge.ratio import Curve, curve_of
from mixbridge.reconcile.attribution_chains import median_size
from mixbridge.reconcile.attribution_text import say
from mixbridge.reconcile.path import Path, coefficient_path
from mixbridge.reconcile.path_points import Along, along, limit_beta, search_grid
from mixbridge.routes import LEDGER_ROUTES, Fit, Profile, fit_route, log_likelihood

ORDINARY = (
    "balanced_both",
    "balanced_closed",
    "balanced_periods_both",
    "mild_both",
    "mild_between",
    "mild_hidden",
    "mild_no_intercept",
    "mild_no_intercept_within",
    "singletons_between",
    "singletons_hidden",
    "huge_unit_between",
    "many_sizes",
    "two_units",
    "psi_large_huge_unit",
    "negative_mild",
)
"""Panels whose dense matrices have a condition below 1e4, so that plain inverses keep ten digits."""


@cache
def curve_for(name: str) -> Curve:
    panel = BY_NAME[name]
    codes = np.unique(panel.units, return_inverse=True)[1]
    return curve_of(Moments.from_arrays(panel.X, panel.y, codes, panel.names))


@cache
def fits_for(name: str) -> dict[str, Fit]:
    return {key: fit_route(curve_for(name), key, {}, "no order of rows") for key in LEDGER_ROUTES}


@cache
def path_for(name: str, at: int, points: int = 21) -> Path:
    curve = curve_for(name)
    return coefficient_path(curve, fits_for(name), curve.names[at], points=points)


@cache
def fine(name: str) -> Along:
    """Every coefficient on up to 1,800 ratios, another grid than the one searched."""
    return along(curve_for(name), search_grid(curve_for(name), 601))


def terms(names=ORDINARY):
    return [(name, at) for name in names for at in range(BY_NAME[name].X.shape[1])]


# -- points ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ORDINARY)
def test_values_errors_and_slopes_by_dense_matrices(name):
    panel, curve = BY_NAME[name], curve_for(name)
    dense, _ = dense_panel(panel.X, panel.y, panel.units)
    psi = np.array([0.0, 0.03, 0.7, 5.0, 200.0])
    found = along(curve, psi)
    for i, value in enumerate(psi):
        inverse = np.linalg.inv(dense.V(1.0, value))
        middle = np.linalg.inv(dense.X.T @ inverse @ dense.X)
        beta = middle @ dense.X.T @ inverse @ dense.y
        left = dense.y - dense.X @ beta
        scale = left @ inverse @ left / (dense.n - dense.K)
        slope = -middle @ dense.X.T @ inverse @ dense.ZZ @ inverse @ left  # dV^-1/dpsi = -V^-1 ZZ' V^-1
        unit = np.sqrt(scale * np.diag(middle))
        # inverses of matrices with a condition below 1e4 (V at psi = 200: 2e3), in standard errors
        assert (np.abs(found.beta[i] - beta) <= 1e-9 * unit).all()
        np.testing.assert_allclose(found.error[i], unit, rtol=1e-9)
        assert (np.abs(found.slope[i] - slope) <= 1e-8 * unit * curve.sizes[-1]).all()


@pytest.mark.parametrize("name", ORDINARY)
def test_the_end_of_the_path_is_the_limit(name):
    """Within slopes; along unit-constant directions the unweighted regression of unit remainders."""
    panel, curve = BY_NAME[name], curve_for(name)
    dense, _ = dense_panel(panel.X, panel.y, panel.units)
    end = limit_beta(curve)
    # the distance from the limit falls as 1 / psi: at 1e6 it is below 1e-5 of the path's own standard errors
    far = along(curve, np.array([1e6]))
    assert (np.abs(far.beta[0] - end) <= 1e-4 * far.error[0]).all()
    within = fits_for(name)["within"].beta
    free = np.isfinite(within)
    np.testing.assert_allclose(end[free], within[free], rtol=1e-10)
    if curve.rank_constant == 0:
        assert free.all()
        return
    left = dense.averaging @ (dense.y - dense.X @ end)
    constant = dense.averaging @ dense.unit_constant_part
    if constant.shape[1] == 0:  # no unit-constant direction: nothing else to check
        return
    size = np.abs(constant).max() * np.abs(dense.y).max() * dense.N
    assert np.abs(constant.T @ left).max() <= 1e-10 * size  # normal equations, unweighted


# -- extrema and ranges ----------------------------------------------------------------------------


@pytest.mark.parametrize(("name", "at"), terms())
def test_ranges_and_extrema_by_brute_force(name, at):
    """On up to 1,800 ratios nothing is outside the range, and something reaches it."""
    curve, path = curve_for(name), path_for(name, at)
    seen = fine(name)
    beta = seen.beta[:, at]
    low, high = path.range_all
    unit = seen.error[:, at].min()
    assert low - 1e-9 * unit <= beta.min() <= low + 1e-3 * max(high - low, 1e-6 * unit)
    assert high + 1e-9 * unit >= beta.max() >= high - 1e-3 * max(high - low, 1e-6 * unit)
    steps = np.diff(beta)
    steps = steps[np.abs(steps) > 1e-10 * unit]
    turning = int((np.sign(steps[1:]) != np.sign(steps[:-1])).sum())
    if high - low > 1e-6 * unit:
        assert len(path.turns) == turning
    for psi in path.turns:
        near = (
            along(curve, psi * (1.0 + np.array([-1e-3, 0.0, 1e-3]))).beta[:, at]
            - along(curve, np.array([psi])).beta[0, at]
        )
        assert near[0] * near[2] >= 0.0  # both neighbours on one side


def test_some_paths_are_not_monotone():
    turned = {name for name, at in terms() if path_for(name, at).turns}
    assert len(turned) >= 3


def test_a_coefficient_that_does_not_move_has_no_extrema():
    """Balanced and closed: the slope of a purely within column is the within slope at every ratio."""
    curve = curve_for("balanced_closed")
    at = next(j for j, name in enumerate(curve.names) if name.startswith("pure"))
    path = path_for("balanced_closed", at)
    assert path.turns == ()
    low, high = path.range_all
    assert high - low <= 1e-12 * abs(high)  # rounding of 1e3 operations at most


@pytest.mark.parametrize(("name", "at"), terms())
def test_range_over_the_exact_set(name, at):
    curve, path = curve_for(name), path_for(name, at)
    allowed = pivot_of(curve).ratio_set(0.95)
    assert path.allowed is not None
    assert (path.allowed.lower, path.allowed.upper) == (allowed.lower, allowed.upper) or allowed.empty
    if allowed.empty:
        assert np.isnan(path.range_allowed).all()
        return
    inside = np.linspace(allowed.lower, min(allowed.upper, 1e12), 401)
    beta = along(curve, inside).beta[:, at]
    unit = along(curve, inside[:1]).error[0, at]
    low, high = path.range_allowed
    assert path.range_all[0] - 1e-9 * unit <= low <= beta.min() + 1e-9 * unit
    assert path.range_all[1] + 1e-9 * unit >= high >= beta.max() - 1e-9 * unit
    if not np.isinf(allowed.upper):
        close = 1e-2 * max(beta.max() - beta.min(), 1e-9 * unit)
        assert beta.min() - low <= close
        assert high - beta.max() <= close


# -- deviances, routes, marks ----------------------------------------------------------------------


@pytest.mark.parametrize("name", ORDINARY)
def test_deviances_are_those_of_the_profile_and_of_the_likelihood(name):
    curve, fits = curve_for(name), fits_for(name)
    path = path_for(name, 0)
    finite = np.isfinite(path.psi)
    for kind, column in (("ml", path.ml_deviance), ("reml", path.reml_deviance)):
        profile = Profile(curve, kind)
        low = profile.values(np.array([fits[kind].ratio])).deviance[0]
        by_profile = profile.values(path.psi[finite]).deviance - low
        # a deviance is a sum of n terms of the size of log r; at the optimum a negative rounding is shown as zero
        slack = 64 * EPS * curve.n * (1 + abs(low))
        assert np.abs(column[finite] - by_profile).max() <= slack
        best = log_likelihood(curve, kind, fits[kind].ratio)
        for psi, value in zip(path.psi[finite], column[finite], strict=True):
            other = 2.0 * (best - log_likelihood(curve, kind, float(psi)))
            assert value == pytest.approx(other, abs=1e-9 * (1 + abs(best)), rel=1e-9)
        assert np.isinf(column[~finite]).all()
        assert column.min() == pytest.approx(0.0, abs=slack)


def test_every_route_has_its_place():
    study = mixbridge.crosscheck(
        "honey ~ forage + feeding + altitude", mixbridge.demo.apiaries(), unit="apiary", period="season"
    )
    path = coefficient_path(study.curve, study.fits, "feeding")
    rows = path.routes.set_index("route")
    assert set(rows.index) == set(study.fits) - {"between", "first_difference"}
    ledger = study.ledger.query("term == 'feeding'").set_index("route")
    for route in rows.index:
        # the same point of the curve; within by two formulas of its slopes
        assert rows.loc[route, "coefficient"] == pytest.approx(ledger.loc[route, "estimate"], rel=1e-11)
    marks = path.table.set_index("ratio")["marks"]
    for route, ratio in path.places:
        assert route in marks.loc[ratio]
    assert path.table["ratio"].is_monotonic_increasing
    assert path.table["weight"].iloc[[0, -1]].tolist() == [0.0, 1.0]
    size = median_size(study.curve)
    finite = path.table.iloc[:-1]
    np.testing.assert_allclose(finite["weight"], 1 - (1 + size * finite["ratio"]) ** -0.5, atol=4 * EPS)
    inside = path.table["allowed"]
    assert path.table.loc[inside, "ratio"].between(path.allowed.lower, path.allowed.upper).all()
    assert not path.table.loc[~inside, "ratio"].between(path.allowed.lower, path.allowed.upper).any()


@pytest.mark.parametrize(("name", "at"), terms())
def test_changes_of_the_answer_about_zero_by_brute_force(name, at):
    path = path_for(name, at)
    seen = fine(name)
    half = stats.norm.isf(0.025) * seen.error[:, at]
    low, high = seen.beta[:, at] - half, seen.beta[:, at] + half
    signs = (low > 0).astype(int) - (high < 0).astype(int)
    for psi, sign in zip(seen.psi, signs, strict=True):
        state = signs[0]
        for place, _, above in path.changes:
            if psi > place:
                state = above
        if all(abs(psi - place) > 1e-6 * (1 + place) for place, _, _ in path.changes):
            assert sign == state, (psi, path.changes)
    if path.changes:
        assert path.changes[0][1] == signs[0]
        for before, after in pairwise(path.changes):
            assert before[2] == after[1]
            assert before[0] < after[0]


# -- sentences -------------------------------------------------------------------------------------


def test_sentences_have_the_numbers_of_the_tables():
    study = mixbridge.crosscheck(
        "honey ~ forage + feeding + altitude", mixbridge.demo.apiaries(), unit="apiary", period="season"
    )
    for term in study.curve.names:
        path = coefficient_path(study.curve, study.fits, term)
        text = str(path)
        for value in (*path.range_all, *path.range_allowed):
            assert say(value, 5) in text
        for value in (*path.turns, path.allowed.lower, path.allowed.upper, *(c[0] for c in path.changes)):
            assert say(value, 4) in text
        assert ("turns at ratio" in text) == bool(path.turns)
        assert ("changes its answer about zero" in text) == bool(path.changes)
        assert ("the same at every ratio" in text) != bool(path.changes)
        among = any(path.allowed.lower < psi < path.allowed.upper for psi, _, _ in path.changes)
        assert (", among the ratios" in text) == among
    wide = coefficient_path(study.curve, study.fits, "feeding", quantile=100.0)
    assert wide.changes == ()
    assert (wide.table["against_zero"] == 0).all()


def test_an_empty_set_is_said():
    """Unit means that are more alike than chance makes them: even ratio 0 is rejected from above."""
    rng = np.random.default_rng(4)
    codes = np.repeat(np.arange(12), 5)
    x = rng.normal(size=60)
    y = x + rng.normal(size=60)
    y -= 0.999 * (np.bincount(codes, y - x) / 5)[codes]
    curve = curve_of(Moments.from_arrays(np.column_stack([np.ones(60), x]), y, codes, ("one", "x")))
    fits = {key: fit_route(curve, key, {}, "no periods") for key in LEDGER_ROUTES}
    path = coefficient_path(curve, fits, "x")
    assert path.allowed.empty
    assert "is empty" in str(path)
    assert not path.table["allowed"].any()
    assert np.isnan(path.range_allowed).all()
