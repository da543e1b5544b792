"""Tests of sigma_a^2 = 0: published figures, dense definitions, exactness by simulation, reasons."""

from __future__ import annotations

from functools import cache

import numpy as np
import pandas as pd
import pytest
from oracle.dense import Dense
from panels import BY_NAME, PANELS
from scipy import stats
from statsmodels.datasets import grunfeld

import mixbridge.inference.spectrum as spectrum_module
from benchmarks.calibration_variance import (
    DESIGNS,
    EXACT,
    calibrate,
    covered,
    draw,
    p_values,
    replicate_outcome,
)
from mixbridge.inference.component_intervals import component_intervals
from mixbridge.inference.variance_tests import TESTS, multiplier_of, variance_tests
from mixbridge.moments import Moments
from mixbridge.ratio import Curve, curve_of
from mixbridge.routes import fit_route

COLUMNS = [
    "test",
    "statistic",
    "reference",
    "df",
    "df_denominator",
    "p_value",
    "monte_carlo_error",
    "exact",
    "note",
]
PLAIN = [panel.name for panel in PANELS if not panel.tags & {"offset", "ill", "scale"}]
SIMULATED = "finite-sample law, simulated"


@cache
def curve(name: str) -> Curve:
    panel = BY_NAME[name]
    codes = np.unique(panel.units, return_inverse=True)[1]
    return curve_of(Moments.from_arrays(panel.X, panel.y, codes, panel.names))


def moments_curve(x: np.ndarray, y: np.ndarray, codes: np.ndarray) -> Curve:
    return curve_of(Moments.from_arrays(x, y, codes))


def statistic(table: pd.DataFrame, test: str) -> float:
    return float(table.loc[table["test"] == test, "statistic"].iloc[0])


# Baltagi, Econometric Analysis of Panel Data, 5th ed. (2013), Table 2.1 p. 27 and sec. 4.2: the first two as
# quoted in a public
# transcription; the last two from memory. All four were recomputed independently to the printed digits.
PRINTED = {
    "lagrange_multiplier": 798.162,
    "lagrange_multiplier_one_sided": 28.252,
    "f_unit_intercepts": 49.177,
    "likelihood_ratio": 193.091,
}


def test_printed_figures_of_the_investment_panel():
    firms = grunfeld.load_pandas().data
    firms = firms[firms["firm"] != "American Steel"]
    x = np.column_stack([np.ones(len(firms)), firms["value"], firms["capital"]])
    codes = np.unique(firms["firm"], return_inverse=True)[1]
    table = variance_tests(moments_curve(x, firms["invest"].to_numpy(), codes), {}, draws=1_000)
    for test, printed in PRINTED.items():
        assert statistic(table, test) == pytest.approx(printed, abs=0.0005)  # half a unit of the last digit
    first = table.set_index("test").loc["f_unit_intercepts"]
    assert (first["df"], first["df_denominator"]) == (9, 188)
    assert table["p_value"].max() < 1e-2
    assert table["note"].str.startswith("no draw reached it").sum() == 2


@pytest.mark.parametrize("name", PLAIN)
def test_f_compares_regressions_with_and_without_unit_indicators(name):
    panel = BY_NAME[name]
    row = variance_tests(curve(name), {}, draws=0).iloc[0]
    both = np.column_stack([panel.X, Dense(panel.X, panel.y, panel.units).Z])
    rss, rank = [], []
    for x in (panel.X, both):
        basis, length, _ = np.linalg.svd(x / np.sqrt((x**2).sum(axis=0)), full_matrices=False)
        basis = basis[:, length > 1e-9 * length[0]]
        left = panel.y - basis @ (basis.T @ panel.y)
        rss.append(left @ left)
        rank.append(basis.shape[1])
    df, rest = rank[1] - rank[0], len(panel.y) - rank[1]
    f = (rss[0] - rss[1]) / df / (rss[1] / rest)
    assert (row["df"], row["df_denominator"]) == (df, rest)
    # the oracle subtracts two residual sums of squares: a relative error of eps times rss[0] over their
    # difference, times n
    loss = len(panel.y) * 2.2e-16 * (panel.y @ panel.y) / min(rss[0] - rss[1], rss[1]) * 10.0
    assert row["statistic"] == pytest.approx(f, rel=1e-11 + loss)
    assert row["p_value"] == pytest.approx(stats.f.sf(row["statistic"], df, rest), rel=1e-12)
    assert row["exact"]


@pytest.mark.parametrize("name", PLAIN)
def test_lagrange_multiplier_is_score_over_information(name):
    """Identity 6, with n-by-n matrices: score of sigma_a^2 in the ML likelihood at 0, sigma_u^2 partialled out."""
    panel = BY_NAME[name]
    d = Dense(panel.X, panel.y, panel.units)
    e = d.M @ panel.y
    s = e @ e / d.n
    score = 0.5 * (e @ d.ZZ @ e / s**2 - np.trace(d.ZZ) / s)  # that of sigma_u^2 is zero at this s
    assert 0.5 * (e @ e / s**2 - d.n / s) == pytest.approx(0.0, abs=1e-9 * d.n / s)
    own, cross, other = np.trace(d.ZZ @ d.ZZ), np.trace(d.ZZ), d.n
    information = 0.5 * (own - cross**2 / other) / s**2
    found = multiplier_of(curve(name))
    # pooled residuals lose the digits by which the outcome is larger than they are
    loss = 1e-10 + 1e-13 * np.sqrt(panel.y @ panel.y / (e @ e))
    assert found.two_sided == pytest.approx(score**2 / information, rel=loss, abs=1e-10)
    assert found.one_sided == pytest.approx(score / np.sqrt(information), rel=loss, abs=1e-10)


def test_score_is_the_derivative_of_the_normal_density():
    panel = BY_NAME["mild_both"]
    d = Dense(panel.X, panel.y, panel.units)
    e = d.M @ panel.y
    s = e @ e / d.n

    def log_density(unit: float) -> float:
        # beta is profiled out, but at its optimum, so the derivative is that at fixed beta
        return float(stats.multivariate_normal(cov=d.V(s, unit)).logpdf(e))

    step = 1e-4 * s
    ends = [log_density(step), log_density(2 * step), log_density(0.0)]
    slope = (4 * ends[0] - ends[1] - 3 * ends[2]) / (2 * step)  # one-sided, second order
    found = multiplier_of(curve("mild_both"))
    own = 0.5 * (np.trace(d.ZZ @ d.ZZ) - d.n) / s**2
    assert found.one_sided == pytest.approx(
        slope / np.sqrt(own), rel=1e-4
    )  # step squared times third derivative


@pytest.mark.parametrize("name", PLAIN)
def test_standardised_form_has_the_moments_of_the_ratio(name):
    panel = BY_NAME[name]
    d = Dense(panel.X, panel.y, panel.units)
    a, df = d.M @ d.ZZ @ d.M, d.n - d.K
    e = d.M @ panel.y
    mean = np.trace(a) / df
    variance = (np.trace(a) ** 2 + 2.0 * np.trace(a @ a)) / (df * (df + 2.0)) - mean**2
    expected = (e @ d.ZZ @ e / (e @ e) - mean) / np.sqrt(variance)
    loss = 1e-9 + 1e-13 * np.sqrt(panel.y @ panel.y / (e @ e))
    assert multiplier_of(curve(name)).standardised == pytest.approx(expected, rel=loss, abs=1e-9)


def test_moments_of_the_ratio_by_simulation():
    panel = BY_NAME["huge_unit"]
    d = Dense(panel.X, panel.y, panel.units)
    e = np.random.default_rng(4).normal(size=(40_000, d.n)) @ d.M
    ratio = ((e @ d.Z) ** 2).sum(axis=1) / (e**2).sum(axis=1)
    one = multiplier_of(curve("huge_unit"))
    e0 = d.M @ panel.y
    own = ((e0 @ d.Z) ** 2).sum() / (e0 @ e0)
    draws = len(ratio)
    # standardised = (own - mean)/sd; mean and sd from draws, four standard errors of each
    centred = ratio - ratio.mean()
    sd = ratio.std()
    error_sd = np.sqrt((centred**4).mean() - sd**4) / (2 * sd * np.sqrt(draws))
    allowance = 4.0 * (1.0 / np.sqrt(draws) + abs(one.standardised) * error_sd / sd)
    assert one.standardised == pytest.approx((own - ratio.mean()) / sd, abs=allowance)


def test_table_has_every_test_and_says_what_is_exact():
    table = variance_tests(curve("mild_both"), {}, seed=3, draws=5_000)
    assert list(table.columns) == COLUMNS
    assert list(dict.fromkeys(table["test"])) == list(TESTS)
    assert set(table.loc[table["exact"], "reference"]) == {"F", SIMULATED}
    assert not table.loc[table["reference"].str.contains("mixture"), "exact"].any()
    assert table["note"].str.len().min() > 0
    assert table.loc[table["reference"] == SIMULATED, "monte_carlo_error"].between(0.0, 0.01).all()
    again = variance_tests(curve("mild_both"), {}, seed=3, draws=5_000)
    pd.testing.assert_frame_equal(table, again)


def test_fits_that_are_given_are_used_and_others_made():
    c = curve("mild_both")
    fits = {kind: fit_route(c, kind, {}, "not needed") for kind in ("ml", "reml")}
    given, made = variance_tests(c, fits, draws=500), variance_tests(c, {}, draws=500)
    pd.testing.assert_frame_equal(given, made)
    for test, kind in (("likelihood_ratio", "ml"), ("restricted_likelihood_ratio", "reml")):
        at_zero = fit_route(c, kind, {}, "not needed").certificate.stationary
        assert statistic(given, test) >= 0.0
        assert at_zero  # the optimum is one of the points the certificate lists
    pooled = curve("negative_mild")
    zero = variance_tests(pooled, {}, draws=500)
    ratios = zero[zero["test"].str.contains("likelihood_ratio")]
    assert (ratios["statistic"] == 0.0).all()
    assert (ratios["p_value"] == 1.0).all()


def test_likelihood_ratio_of_ml_is_twice_the_gain_in_log_likelihood():
    panel = BY_NAME["mild_both"]
    d = Dense(panel.X, panel.y, panel.units)
    e = d.M @ panel.y
    at_zero = -0.5 * d.n * (np.log(2.0 * np.pi * (e @ e) / d.n) + 1.0)
    fit = fit_route(curve("mild_both"), "ml", {}, "not needed")
    table = variance_tests(curve("mild_both"), {}, draws=0)
    assert statistic(table, "likelihood_ratio") == pytest.approx(
        2.0 * (fit.log_likelihood - at_zero), abs=1e-10
    )
    simulated = table[table["reference"] == SIMULATED]
    assert simulated["p_value"].isna().all()
    assert (simulated["note"] == "not computed: no draws asked for").all()


def test_one_row_per_unit_leaves_nothing_to_test_and_says_so():
    rng = np.random.default_rng(1)
    x = np.column_stack([np.ones(12), rng.normal(size=12)])
    table = variance_tests(moments_curve(x, rng.normal(size=12), np.arange(12)), {}, draws=100)
    assert table["p_value"].isna().all()
    assert not table["exact"].any()
    assert table["note"].str.startswith("not computed: ").all()
    assert table.loc[1, "note"].endswith("unit effects and errors cannot be told apart")


def test_no_degrees_of_freedom_between_or_within():
    rng = np.random.default_rng(2)
    codes = np.repeat(np.arange(4), 3)
    between = np.column_stack([np.ones(12), rng.normal(size=(4, 3))[codes]])
    table = variance_tests(moments_curve(between, rng.normal(size=12), codes), {}, draws=100).set_index(
        "test"
    )
    assert "K_c = 4" in table.loc["f_unit_intercepts", "note"]
    assert "does not vary" in table.loc["lagrange_multiplier_standardised", "note"]
    pairs = np.repeat(np.arange(4), 2)
    within = np.column_stack([np.ones(8), rng.normal(size=(8, 4))])
    table = variance_tests(moments_curve(within, rng.normal(size=8), pairs), {}, draws=100).set_index("test")
    assert "n - N - K_w = 0" in table.loc["f_unit_intercepts", "note"]
    assert table.loc["likelihood_ratio", "p_value"].isna().all()


def test_too_many_ranks_leave_the_other_tests(monkeypatch):
    monkeypatch.setattr(spectrum_module, "RANK_LIMIT", 2)
    table = variance_tests(curve("mild_both"), {}, draws=100)
    simulated = table["reference"] == SIMULATED
    assert table.loc[simulated, "note"].str.contains("ranks adding up to").all()
    assert table.loc[simulated, "p_value"].isna().all()
    assert table.loc[~simulated, "p_value"].notna().all()


@cache
def calibration() -> pd.DataFrame:
    return calibrate([DESIGNS[k] for k in (0, 3, 4, 6, 7)], replicates=2_000, seed=77, null_draws=20_000)


def test_exact_rules_keep_their_level():
    """Identity 10 and the exact null laws: within 4 Monte Carlo errors of nominal, over five designs."""
    table = calibration()
    exact = table[table["exact"]]
    assert set(exact["rule"]) == EXACT
    assert len(exact) == 3 * 3 + 5 * 2  # tests where ψ = 0, intervals everywhere
    assert (exact["z"].abs() < 4.0).all(), exact


def test_rules_that_fail_are_seen_to_fail():
    """With few units mixture and multiplier reject too rarely, and delta intervals cover too rarely."""
    table = calibration()
    few = table[table["units"] == 6]
    sizes = few[few["what"] == "size"].groupby("rule")["z"].min()
    assert sizes["likelihood_ratio (mixture)"] < -4.0
    assert sizes["lagrange_multiplier"] < -4.0
    delta = table[(table["rule"] == "delta") & (table["quantity"] == "idiosyncratic_variance")]
    assert delta["z"].min() < -10.0


@pytest.mark.parametrize("number", [1, 2, 4])
def test_calibration_decides_as_the_functions_do(number):
    """Compare the study's vectorised rules, replicate by replicate, with what users call."""
    design = DESIGNS[number]
    draws = draw(design, 12, 5)
    x, codes = design.arrays()
    p = p_values(draws, 4_000, 6)
    hits = covered(draws, 0.95)
    truth = {"unit_variance": design.psi, "idiosyncratic_variance": 1.0, "ratio": design.psi}
    truth["icc"] = design.psi / (1.0 + design.psi)
    for at in range(12):
        c = moments_curve(x, replicate_outcome(draws, design, at), codes)
        fits = {key: fit_route(c, key, {}, "not needed") for key in ("ml", "reml", "fitting_constants")}
        table = variance_tests(c, fits, seed=6, draws=4_000)
        for row in table.itertuples():
            kind = "" if "likelihood_ratio" not in row.test else " (mixture)"
            kind = " (simulated)" if row.reference == SIMULATED else kind
            # one draw more or less: the statistic of the data is rounded otherwise than the draws
            allowed = 1.1 / 4_000 if kind == " (simulated)" else 1e-12
            assert row.p_value == pytest.approx(p[row.test + kind][at], rel=1e-7, abs=allowed)
        for row in component_intervals(c, fits).itertuples():
            key = (row.quantity, row.route, row.method)
            if key not in hits:
                continue
            if np.isnan(row.lower):
                assert hits[key][at] != 1.0  # empty set, or no interval
            else:
                assert hits[key][at] == (row.lower <= truth[row.quantity] <= row.upper), (key, at, row)
