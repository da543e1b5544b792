"""Intervals for the components and probabilities of a zero estimate: definitions, exactness, closed forms, reasons."""

from __future__ import annotations

from functools import cache

import numpy as np
import pandas as pd
import pytest
from oracle import routes as oracle_routes
from oracle.dense import Dense
from panels import BY_NAME, PANELS
from scipy import stats
from scipy.optimize import minimize_scalar

from mixbridge.errors import OptionError
from mixbridge.inference.component_intervals import QUANTITIES, component_intervals
from mixbridge.inference.pivot import decreasing_root, no_pivot, pivot_of
from mixbridge.inference.profile_region import profile_region, scale_factors
from mixbridge.inference.signed_sum import probability_negative
from mixbridge.inference.spectrum import spectrum_of
from mixbridge.inference.zero_estimate import form_weights, slope_weights, zero_probabilities
from mixbridge.moments import Moments
from mixbridge.ratio import Curve, curve_of
from mixbridge.routes import LEDGER_ROUTES, Fit, Profile, fit_route
from mixbridge.routes.fitting import named_route
from mixbridge.routes.quadratic import QUADRATIC

PLAIN = [panel.name for panel in PANELS if not panel.tags & {"offset", "ill", "scale"}]
MIXED = (
    "mild_both",
    "singletons_both",
    "huge_unit",
    "balanced_both",
    "mild_hidden",
    "two_units",
    "many_sizes",
)
COLUMNS = ["quantity", "route", "method", "estimate", "lower", "upper", "exact", "note"]


@cache
def curve(name: str) -> Curve:
    panel = BY_NAME[name]
    codes = np.unique(panel.units, return_inverse=True)[1]
    return curve_of(Moments.from_arrays(panel.X, panel.y, codes, panel.names))


@cache
def fits(name: str) -> dict[str, Fit]:
    return {key: fit_route(curve(name), key, {}, "not needed") for key in LEDGER_ROUTES}


def rows(table: pd.DataFrame, **labels: str) -> pd.DataFrame:
    keep = np.logical_and.reduce([table[column] == value for column, value in labels.items()])
    return table[keep]


# ---- the pivot


@pytest.mark.parametrize("name", PLAIN)
def test_pivot_is_the_f_of_quasi_demeaned_regressions(name):
    c, panel = curve(name), BY_NAME[name]
    if no_pivot(c):
        pytest.skip(no_pivot(c))
    d, pivot = Dense(panel.X, panel.y, panel.units), pivot_of(c)
    inside = d.within_residual @ panel.y
    rss = inside @ inside
    for psi in (0.0, 0.05, 1.0, 40.0):
        r = d.gls(np.float64(psi))[2]
        f = (r - rss) / (d.N - d.K + d.K_w) / (rss / (d.n - d.N - d.K_w))
        # the oracle subtracts: its relative error is that of r times r over the difference
        loss = 1e-11 * r / (r - rss) + 1e-14 * np.sqrt(panel.y @ panel.y / rss)
        assert pivot.statistic(psi) == pytest.approx(f, rel=1e-10 + loss)


@pytest.mark.parametrize("name", PLAIN)
def test_pivot_keeps_its_digits_far_out(name):
    """As ψ grows, ψ (r - RSS_w) tends to a limit; subtracting r and RSS_w would leave rounding only."""
    pivot = pivot_of(curve(name))
    far = np.array([pivot.reduction(psi) * psi for psi in (1e12, 1e13)])
    assert far[0] == pytest.approx(far[1], rel=1e-9)  # the next term of the expansion is 1/(ψ T) smaller
    assert far[0] > 0.0


@pytest.mark.parametrize("confidence", [0.5, 0.95, 0.999])
@pytest.mark.parametrize("name", PLAIN)
def test_pivot_set_is_an_inversion(name, confidence):
    pivot = pivot_of(curve(name))
    found = pivot.ratio_set(confidence)
    tail = 0.5 * (1.0 - confidence)
    low, high = stats.f.ppf([tail, 1.0 - tail], pivot.df_between, pivot.df_within)
    if found.empty:
        assert np.isnan([found.lower, found.upper]).all()
        assert found.note.startswith("empty: F(0) = ")
        assert pivot.statistic(0.0) < low
        return
    assert pivot.statistic(found.upper) == pytest.approx(
        low, rel=1e-12
    )  # a root to a few units of the last place
    if found.lower > 0.0:
        assert pivot.statistic(found.lower) == pytest.approx(high, rel=1e-12)
        assert found.note == ""
    else:
        assert pivot.statistic(0.0) <= high
        assert "reaches the boundary" in found.note
    assert 0.0 <= found.lower <= found.upper < np.inf


def test_pivot_set_in_closed_form_when_balanced():
    """One-way, balanced: ``F(psi) = F(0) / (1 + T psi)``."""
    c = curve("balanced_one_way")
    pivot, size = pivot_of(c), 4
    found = pivot.ratio_set(0.95)
    low, high = stats.f.ppf([0.025, 0.975], pivot.df_between, pivot.df_within)
    f = pivot.statistic(0.0)
    assert found.lower == pytest.approx((f / high - 1.0) / size, rel=1e-11)
    assert found.upper == pytest.approx((f / low - 1.0) / size, rel=1e-11)


@pytest.mark.parametrize("psi", [0.0, 1.0])
def test_pivot_set_covers_as_often_as_it_says(psi):
    """Rows simulated and refitted, unbalanced with covariates of both kinds; four standard errors."""
    panel = BY_NAME["singletons_between"]
    codes = np.unique(panel.units, return_inverse=True)[1]
    rng, replicates, confidence = np.random.default_rng(21), 800, 0.9
    hits = empty = 0
    for _ in range(replicates):
        y = 5.0 + np.sqrt(psi) * rng.normal(size=codes.max() + 1)[codes] + rng.normal(size=codes.size)
        found = pivot_of(curve_of(Moments.from_arrays(panel.X, y, codes))).ratio_set(confidence)
        empty += found.empty
        hits += found.lower <= psi <= found.upper
    assert abs(hits / replicates - confidence) < 4.0 * np.sqrt(confidence * (1.0 - confidence) / replicates)
    if psi == 0.0:  # empty just when F(0) lies below its lower quantile
        assert abs(empty / replicates - 0.05) < 4.0 * np.sqrt(0.05 * 0.95 / replicates)


def test_root_of_a_decreasing_function():
    assert decreasing_root(lambda x: 1.0 / (1.0 + x) - 1e-7, 1.0) == pytest.approx(1e7 - 1.0, rel=1e-9)
    assert decreasing_root(lambda x: 1e-9 - x, 5.0) == pytest.approx(1e-9, rel=1e-14)
    assert decreasing_root(lambda x: -1.0 - x, 1.0) == 0.0
    assert decreasing_root(lambda x: 1.0, 1.0) == np.inf


# ---- profile likelihood


@pytest.mark.parametrize("kind", ["ml", "reml"])
@pytest.mark.parametrize("name", PLAIN)
def test_profile_ends_lie_on_the_contour(name, kind):
    """Each end by definition: the deviance, minimised over the other parameter, is the lowest plus a chi-square quantile."""
    c, fit = curve(name), fits(name)[kind]
    if fit.certificate is None:
        pytest.skip(fit.status)
    region = profile_region(c, kind, fit.certificate, 0.9)
    profile, height = Profile(c, kind), stats.chi2.ppf(0.9, 1)
    lowest = profile.values(np.array([fit.ratio])).deviance[0]
    for end in region.ratio:
        if end > 0.0:
            assert profile.values(np.array([end])).deviance[0] - lowest == pytest.approx(height, abs=1e-9)

    def excess(psi: np.ndarray, idiosyncratic: np.ndarray) -> np.ndarray:
        values = profile.values(psi)
        u = idiosyncratic / (c.unit * values.r / values.m)
        return values.deviance - lowest + values.m * (np.log(u) + 1.0 / u - 1.0)

    grid = np.concatenate([[0.0], np.logspace(-8, 9, 1_000)])
    for end in region.idiosyncratic:
        heights = excess(grid, np.full(grid.size, end))
        best = int(heights.argmin())
        around = grid[max(best - 1, 0)], grid[min(best + 1, grid.size - 1)]
        polished = minimize_scalar(
            lambda psi, end=end: excess(np.array([psi]), np.array([end]))[0], bounds=around, method="bounded"
        ).fun
        # both searches are exact to second order in a step of 1e-8
        assert min(polished, heights.min()) == pytest.approx(height, abs=1e-6)
    for end in region.unit:
        if end == 0.0:
            continue
        logs = np.log(grid[1:])
        heights = excess(grid[1:], end / grid[1:])
        best = int(heights.argmin())
        around = logs[max(best - 1, 0)], logs[min(best + 1, logs.size - 1)]
        polished = minimize_scalar(
            lambda t, end=end: excess(np.exp([t]), end / np.exp([t]))[0], bounds=around, method="bounded"
        ).fun
        assert min(polished, heights.min()) == pytest.approx(height, abs=1e-6)
    if region.ratio[0] == 0.0:
        assert region.unit[0] == 0.0


def test_likelihood_with_a_dip_gives_pieces_and_says_so():
    c, fit = curve("two_minima_reml_zero_b"), fits("two_minima_reml_zero_b")["reml"]
    region = profile_region(c, "reml", fit.certificate, 0.3)
    assert len(region.pieces) == 2
    (_, gap_from), (gap_to, _) = region.pieces
    profile = Profile(c, "reml")
    lowest = profile.values(np.array([fit.ratio])).deviance[0]
    inside = profile.values(np.linspace(gap_from, gap_to, 21)[1:-1]).deviance - lowest
    assert (inside > stats.chi2.ppf(0.3, 1)).all()
    note = rows(
        component_intervals(c, {"reml": fit}, 0.3),
        quantity="ratio",
        route="reml",
        method="profile_likelihood",
    )["note"].item()
    assert "the likelihood has a dip" in note
    assert "reaches the boundary" in note


def test_scale_factors_solve_their_equation():
    excess = np.array([0.0, 1e-13, 1e-11, 1e-9, 1e-6, 9.9e-5, 1.01e-4, 1e-3, 0.1, 2.0, 30.0])
    down, up = scale_factors(excess)
    assert (down <= 1.0).all()
    assert (up >= 1.0).all()
    for u in (down, up):
        # the left side is (u - 1)^2/2 near 1: u - 1 carries eps, so the square eps sqrt(8 excess)
        np.testing.assert_allclose(np.log(u) + 1.0 / u - 1.0, excess, rtol=1e-11, atol=1e-15)


# ---- the table


@pytest.mark.parametrize("name", [panel.name for panel in PANELS])
def test_every_row_has_an_interval_or_a_reason(name):
    table = component_intervals(curve(name), fits(name), 0.95)
    assert list(table.columns) == COLUMNS
    assert list(dict.fromkeys(table["quantity"])) == list(QUANTITIES)
    lost = table["lower"].isna() | table["upper"].isna()
    assert (lost == table["note"].str.contains("not computed|empty: ")).all()
    kept = table[~lost]
    assert (kept["lower"] <= kept["upper"]).all()
    assert not kept.loc[kept["method"] == "delta", "exact"].any()
    assert not kept.loc[kept["method"] == "profile_likelihood", "exact"].any()
    ratio, icc = (rows(table, quantity=q, method="exact_pivot").iloc[0] for q in ("ratio", "icc"))
    if np.isfinite(ratio["upper"]):
        assert icc["upper"] == pytest.approx(ratio["upper"] / (1.0 + ratio["upper"]), rel=1e-14)
        assert icc["lower"] == pytest.approx(ratio["lower"] / (1.0 + ratio["lower"]), rel=1e-14, abs=1e-300)


def test_chi_square_satterthwaite_and_delta_by_their_formulas():
    panel = BY_NAME["mild_both"]
    d, table = (
        Dense(panel.X, panel.y, panel.units),
        component_intervals(curve("mild_both"), fits("mild_both"), 0.8),
    )
    left = d.within_residual @ panel.y
    df = d.n - d.N - d.K_w
    exact = rows(table, quantity="idiosyncratic_variance", method="exact_chi_square").iloc[0]
    assert exact["lower"] == pytest.approx(left @ left / stats.chi2.ppf(0.9, df), rel=1e-10)
    assert exact["upper"] == pytest.approx(left @ left / stats.chi2.ppf(0.1, df), rel=1e-10)
    same = rows(table, quantity="idiosyncratic_variance", method="satterthwaite", route="swamy_arora").iloc[0]
    assert same["exact"]
    assert (same["lower"], same["upper"]) == pytest.approx((exact["lower"], exact["upper"]), rel=1e-10)
    other = rows(
        table, quantity="idiosyncratic_variance", method="satterthwaite", route="wallace_hussain"
    ).iloc[0]
    assert not other["exact"]
    fit = fits("mild_both")["wallace_hussain"]
    v, variance = fit.unit_variance, fit.component_covariance.loc["unit_variance", "unit_variance"]
    nu = 2.0 * v**2 / variance
    row = rows(table, quantity="unit_variance", method="satterthwaite", route="wallace_hussain").iloc[0]
    assert row["lower"] == pytest.approx(nu * v / stats.chi2.ppf(0.9, nu), rel=1e-12)
    assert row["upper"] == pytest.approx(nu * v / stats.chi2.ppf(0.1, nu), rel=1e-12)
    row = rows(table, quantity="icc", method="delta", route="reml").iloc[0]
    reml = fits("mild_both")["reml"]
    half = stats.norm.ppf(0.9) * reml.component_standard_errors["icc"]
    assert (row["lower"], row["upper"]) == pytest.approx((reml.icc - half, reml.icc + half), rel=1e-12)


def test_estimate_on_the_boundary_is_said():
    table = component_intervals(curve("negative_mild"), fits("negative_mild"))
    pivot = rows(table, quantity="ratio", method="exact_pivot").iloc[0]
    assert pivot["estimate"] == 0.0
    assert "empty: " in pivot["note"]
    profile = rows(table, quantity="unit_variance", method="profile_likelihood", route="reml").iloc[0]
    assert profile["lower"] == 0.0
    assert "the estimate lies on the boundary" in profile["note"]
    assert "reaches the boundary" in profile["note"]
    satterthwaite = rows(table, quantity="unit_variance", method="satterthwaite", route="swamy_arora").iloc[0]
    assert "is not positive" in satterthwaite["note"]
    delta = rows(table, quantity="unit_variance", method="delta", route="swamy_arora").iloc[0]
    assert delta["lower"] < 0.0
    assert "not cut at zero" in delta["note"]


def test_fit_without_one_row_units_gets_no_profile_of_the_whole_panel():
    c = curve("singletons_both")
    dropped = curve_of(c.moments.without_one_row_units())
    fit = fit_route(dropped, "reml", {}, "not needed")
    table = rows(component_intervals(c, {"reml": fit}), method="profile_likelihood")
    assert table["note"].str.contains("leaves out one-row units").all()
    assert zero_probabilities(c, {"reml": fit})["method"].str.contains("leaves out one-row units").all()


def test_nothing_within_or_between_gives_reasons():
    rng = np.random.default_rng(3)
    codes = np.repeat(np.arange(4), 2)
    x = np.column_stack([np.ones(8), rng.normal(size=(8, 4))])
    c = curve_of(Moments.from_arrays(x, rng.normal(size=8), codes))
    keys = ("swamy_arora", "reml", "minque_0")
    table = component_intervals(c, {key: fit_route(c, key, {}, "not needed") for key in keys})
    assert table.loc[table["route"] == "any", "note"].str.contains("n - N - K_w = 0").all()
    assert (
        table.loc[table["route"].isin(["swamy_arora", "reml"]), "note"].str.startswith("not computed: ").all()
    )


@pytest.mark.parametrize("confidence", [0.0, 1.0, 95, -0.1, "0.95", True, float("nan")])
def test_confidence_is_checked(confidence):
    with pytest.raises(OptionError, match=r"confidence=.*a number between 0 and 1"):
        component_intervals(curve("mild_both"), {}, confidence)


# ---- the probability of a zero estimate


@pytest.mark.parametrize(
    ("d1", "d2"), [(1, 1), (1, 2), (3, 8), (5, 36), (199, 1_800), (99_999, 900_000), (1, 10**6)]
)
@pytest.mark.parametrize("f", [1e-3, 0.1, 0.5, 1.0, 1.02, 2.0, 10.0])
def test_signed_sum_of_two_is_the_f_distribution(d1, d2, f):
    p, error = probability_negative([1.0 / d1, -f / d2], [d1, d2])
    assert p == pytest.approx(
        stats.f.cdf(f, d1, d2), abs=error + 2e-11
    )  # the reference itself: 1e6 degrees of freedom
    assert error < 1e-9


def test_small_probabilities_keep_relative_precision():
    p, error = probability_negative([1.0 / 50, -0.05 / 360], [50, 360])
    assert p == pytest.approx(stats.f.cdf(0.05, 50, 360), rel=1e-11)
    assert p < 1e-16
    assert error < 1e-10 * p


def test_signed_sum_of_many_by_simulation():
    rng = np.random.default_rng(0)
    weights, df = rng.normal(size=7), rng.integers(1, 5, size=7)
    draws = 400_000
    share = (rng.chisquare(df, (draws, 7)) @ weights < 0.0).mean()
    p, _ = probability_negative(weights, df)
    assert abs(p - share) < 4.0 * np.sqrt(p * (1.0 - p) / draws)
    assert probability_negative(-weights, df)[0] == pytest.approx(1.0 - p, abs=1e-13)


def test_signed_sum_with_one_sign_is_certain():
    assert probability_negative([1.0, 0.0], [2, 3]) == (0.0, 0.0)
    assert probability_negative([-1.0], [2]) == (1.0, 0.0)
    assert probability_negative([], []) == (0.0, 0.0)


ORACLE = {
    "swamy_arora": lambda d, k: oracle_routes.swamy_arora(d, k, "size_weighted"),
    "wansbeek_kapteyn": oracle_routes.wansbeek_kapteyn,
    "wallace_hussain": lambda d, k: oracle_routes.wallace_hussain(d, k, "exact"),
    "amemiya": oracle_routes.amemiya,
    "nerlove": lambda d, k: oracle_routes.nerlove(d, k, "units_minus_one"),
    "pooled_minus_within": oracle_routes.pooled_minus_within,
    "fitting_constants": oracle_routes.fitting_constants,
    "minque_0": lambda d, k: oracle_routes.minque(d, k, 0.0),
    "minque_1": lambda d, k: oracle_routes.minque(d, k, 1.0),
}


@pytest.mark.parametrize("key", ORACLE)
@pytest.mark.parametrize("name", MIXED)
def test_weights_are_the_eigenvalues_of_the_dense_form(name, key):
    panel, c, fit = BY_NAME[name], curve(name), fits(name)[key]
    d = Dense(panel.X, panel.y, panel.units)
    stage = ORACLE[key](d, oracle_routes.degrees(d, "rank"))
    if stage.to_components is None:
        assert fit.status.startswith("not estimable")
        return
    form = sum(a * factor.T @ factor for a, factor in zip(stage.to_components[0], stage.factors, strict=True))
    psi = 0.6
    root = d.Q + d.P * np.sqrt(1.0 + psi * (d.Z @ d.sizes))[:, None]  # V^(1/2)
    expected = np.linalg.eigvalsh(root @ form @ root)
    pair = QUADRATIC[named_route(key)[0]](c, fit.conventions)
    weights, df = form_weights(c, pair.forms, np.linalg.inv(pair.system)[1], psi)
    assert (df == df.round()).all()
    mine = np.sort(np.repeat(weights, df.astype(int)))
    # rounding of two eigenproblems relative to the largest eigenvalue; conditions below 1e3
    np.testing.assert_allclose(mine, expected, rtol=0, atol=1e-10 * np.abs(expected).max())


@pytest.mark.parametrize("name", MIXED)
@pytest.mark.parametrize("kind", ["ml", "reml"])
def test_slope_weights_give_the_slope_its_mean(name, kind):
    """``E[-r(0) D'(0)] = m E[-r'(0)] - g'(0) E[r(0)]`` by dense traces."""
    panel, psi = BY_NAME[name], 0.4
    d = Dense(panel.X, panel.y, panel.units)
    v = d.V(np.float64(1.0), np.float64(psi))
    m = d.n - (d.K if kind == "reml" else 0)
    g1 = np.trace(d.M @ d.ZZ) if kind == "reml" else d.n
    mean = m * np.trace(d.M @ d.ZZ @ d.M @ v) - g1 * np.trace(d.M @ v)
    weights, df = slope_weights(spectrum_of(curve(name)), kind, psi)
    assert weights @ df == pytest.approx(mean, rel=1e-10, abs=1e-9 * m * d.n)
    slope = Profile(curve(name), kind).values(np.zeros(1)).slope[0]
    assert np.isfinite(slope)


def test_zero_probabilities_in_closed_form_when_balanced():
    """Balanced and closed: every unbiased route and REML are zero just when the F of unit intercepts is below one."""
    name = "balanced_closed"
    c, pivot = curve(name), pivot_of(curve(name))
    table = zero_probabilities(c, fits(name))
    assert table["exact"].all()
    unbiased = (
        "swamy_arora",
        "wansbeek_kapteyn",
        "wallace_hussain",
        "fitting_constants",
        "minque_0",
        "minque_1",
        "reml",
    )
    for row in table[table["route"].isin(unbiased)].itertuples():
        expected = stats.f.cdf(1.0 / (1.0 + 4 * row.ratio), pivot.df_between, pivot.df_within)
        assert row.probability == pytest.approx(
            expected, rel=1e-9
        )  # the fitted ratio carries a few roundings
    assert (table.loc[table["route"] == "nerlove", "probability"] == 0.0).all()


def test_bound_for_reml_is_the_truncation_of_minque_at_prior_zero():
    """D'(0) of REML has the sign of the MINQUE(0) unit variance, in any design."""
    for name in MIXED:
        table = zero_probabilities(curve(name), fits(name), draws=0)
        under = rows(table, under="zero").set_index("route")["probability"]
        assert under["reml"] == pytest.approx(under["minque_0"], rel=1e-9)


@pytest.mark.parametrize("psi", [0.0, 0.5])
def test_zero_estimates_happen_as_often_as_computed(psi):
    """Rows simulated and refitted; four standard errors, those of the simulated probabilities added."""
    panel = BY_NAME["huge_unit"]
    codes = np.unique(panel.units, return_inverse=True)[1]
    rng, replicates = np.random.default_rng(8), 300
    keys = ("swamy_arora", "wallace_hussain", "pooled_minus_within", "ml", "reml")
    counts = dict.fromkeys(keys, 0)
    for _ in range(replicates):
        y = np.sqrt(psi) * rng.normal(size=codes.max() + 1)[codes] + rng.normal(size=codes.size)
        c = curve_of(Moments.from_arrays(panel.X, y, codes))
        for key in keys:
            fit = fit_route(c, key, {}, "not needed")
            counts[key] += bool(fit.ratio == 0.0 if key in ("ml", "reml") else fit.unit_variance_raw < 0.0)
    c = curve("huge_unit")
    s = spectrum_of(c)
    for key, count in counts.items():
        if key in ("ml", "reml"):
            bound, _ = probability_negative(*slope_weights(s, key, psi))
            share = count / replicates
            assert share < bound + 4.0 * np.sqrt(bound * (1.0 - bound) / replicates)
            if psi > 0.0:
                continue
            simulated = rows(zero_probabilities(c, {key: fits("huge_unit")[key]}), under="zero").iloc[1]
            p, error = simulated["probability"], simulated["error"]
        else:
            pair = QUADRATIC[key](c, fits("huge_unit")[key].conventions)
            p, error = probability_negative(*form_weights(c, pair.forms, np.linalg.inv(pair.system)[1], psi))
        assert abs(count / replicates - p) < 4.0 * (np.sqrt(p * (1.0 - p) / replicates) + error)


def test_zero_table_says_what_it_could_not_compute():
    rng = np.random.default_rng(1)
    x = np.column_stack([np.ones(12), rng.normal(size=12)])
    c = curve_of(Moments.from_arrays(x, rng.normal(size=12), np.arange(12)))
    table = zero_probabilities(
        c, {key: fit_route(c, key, {}, "not needed") for key in ("swamy_arora", "reml", "within")}
    )
    assert list(table["route"]) == ["swamy_arora", "reml"]
    assert table["probability"].isna().all()
    assert table["method"].str.startswith("not computed: ").all()
