"""Satterthwaite, Kenward-Roger, rules and exactness: against dense definitions, closed forms, simulation."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from dense_small_sample import DIGITS, Dense, exact
from oracle import information_covariance, routes
from oracle.fit import dense_panel
from panels import BALANCED, BY_NAME, MILD, PANELS, Panel, make
from scipy import stats
from scipy.linalg import eigh

from mixbridge.errors import IdentificationError, OptionError
from mixbridge.inference.exactness import exact_law
from mixbridge.inference.kenward_roger import kenward_roger
from mixbridge.inference.references import (
    RULES,
    Reference,
    Robust,
    default_rule,
    degrees_of_freedom,
    inference_table,
    pick_reference,
)
from mixbridge.inference.satterthwaite import joint_satterthwaite, satterthwaite
from mixbridge.moments import Moments
from mixbridge.ratio import Curve, curve_of
from mixbridge.routes import Fit, differences_of, fit_route

#: Asked of every panel; found is 1e-14: whitened factors keep the digits at any condition the panels have.
DENSE = 1e-9
#: Closed forms that hold in exact arithmetic, where the only rounding is the engine's.
ROUNDING = 1e-10
#: REML's ratio is located to about 1e-8 of itself: the square root of rounding in the deviance.
LOCATED = 1e-7

GLS = (
    "swamy_arora",
    "wansbeek_kapteyn",
    "wallace_hussain",
    "fitting_constants",
    "minque_0",
    "minque_1",
    "reml",
)
BIASED = ("amemiya", "nerlove", "pooled_minus_within", "ml")

#: Two purely within and two purely between columns, equal sizes; and the same with unequal ones.
CLOSED = make("closed", "", BALANCED, "pure pure between between", seed=5, psi=2.0, tags="balanced closed")
CLOSED_MILD = make("closed_mild", "", MILD, "pure pure between between", seed=5, psi=2.0, tags="closed")


@pytest.fixture(autouse=True)
def _digits():
    with mpmath.workdps(DIGITS):
        yield


def codes(panel: Panel) -> np.ndarray:
    return np.unique(panel.units, return_inverse=True)[1]


def curve(panel: Panel) -> Curve:
    return curve_of(Moments.from_arrays(panel.X, panel.y, codes(panel), panel.names))


def fit(panel: Panel, route: str, scale: str = "own") -> Fit:
    given = {} if scale == "own" else {"scale": scale}

    def differences(step):
        return differences_of(panel.X, panel.y, codes(panel), panel.periods.astype(np.int64), step)

    return fit_route(curve(panel), route, given, differences)


def dense(panel: Panel, one: Fit) -> tuple[Dense, np.ndarray]:
    at = Dense(
        exact(panel.X), codes(panel), mpmath.mpf(one.unit_variance), mpmath.mpf(one.idiosyncratic_variance)
    )
    return at, exact(one.components_covariance)


def combinations(panel: Panel) -> np.ndarray:
    """Every term and one contrast of all of them."""
    p = panel.X.shape[1]
    return np.vstack([np.eye(p), np.where(np.arange(p) % 2, -1.5, 1.0)])


@pytest.mark.parametrize("panel", PANELS, ids=lambda panel: panel.name)
def test_reml_against_the_dense_definitions(panel):
    one = fit(panel, "reml")
    if not one.estimated:
        pytest.skip(one.status)
    at, C = dense(panel, one)
    rows = combinations(panel)
    reference = np.array([float(at.satterthwaite(exact(row), C)) for row in rows])
    assert satterthwaite(curve(panel), one, rows).df == pytest.approx(reference, rel=DENSE)
    adjusted = kenward_roger(curve(panel), one)
    assert adjusted.degrees(rows) == pytest.approx(reference, rel=DENSE)
    wide = at.adjusted(C)
    errors = np.array([float(mpmath.sqrt(exact(row) @ wide @ exact(row))) for row in rows])
    assert np.array([adjusted.standard_error(row) for row in rows]) == pytest.approx(errors, rel=DENSE)
    if panel.X.shape[1] > 1:
        L = rows[-3:-1]
        m, scaling = at.kenward_roger(exact(L), C)
        found = adjusted.scaled_f(L)
        if m > 0 and scaling > 0:
            assert (found.df, found.scaling) == pytest.approx((float(m), float(scaling)), rel=DENSE)
        else:
            assert np.isnan(found.df)
            assert "too few units" in found.notes[-1]


@pytest.mark.parametrize("route", [*GLS[:-1], *BIASED])
@pytest.mark.parametrize(
    "name", ["mild_both", "singletons_between", "balanced_periods_both", "negative_mild"]
)
def test_every_curve_route_against_the_dense_definition(name, route):
    panel = BY_NAME[name]
    one = fit(panel, route)
    at, C = dense(panel, one)
    rows = combinations(panel)
    reference = np.array([float(at.satterthwaite(exact(row), C)) for row in rows])
    assert satterthwaite(curve(panel), one, rows).df == pytest.approx(reference, rel=DENSE)


@pytest.mark.parametrize("name", ["mild_both", "huge_unit_between", "many_sizes_periods", "balanced_means"])
def test_joint_kenward_roger_statistic_against_the_dense_definition(name):
    panel = BY_NAME[name]
    one = fit(panel, "reml")
    at, C = dense(panel, one)
    L = np.eye(panel.X.shape[1])[1:]
    upper = kenward_roger(curve(panel), one).wald_root(L)
    whitened = np.linalg.solve(upper.T, L @ one.beta)
    reference = at.statistic(exact(L), exact(L @ one.beta), C)
    assert whitened @ whitened / len(L) == pytest.approx(float(reference), rel=DENSE)


@pytest.mark.parametrize("name", ["balanced_both", "mild_between", "singletons_both", "huge_unit"])
def test_weights_are_the_inverse_expected_information(name):
    panel = BY_NAME[name]
    one = fit(panel, "reml")
    reference = information_covariance(
        panel.X, panel.y, panel.units, one.unit_variance, one.idiosyncratic_variance, "reml", exact=True
    )
    assert one.components_covariance == pytest.approx(reference, rel=DENSE)


FIRST_STAGES = {
    "swamy_arora": {"between": "size_weighted"},
    "wansbeek_kapteyn": {},
    "wallace_hussain": {"expectation": "exact"},
    "amemiya": {},
    "nerlove": {"divisor": "units_minus_one"},
    "pooled_minus_within": {},
    "fitting_constants": {},
}


@pytest.mark.parametrize("route", FIRST_STAGES)
@pytest.mark.parametrize("name", ["mild_both", "singletons_between", "many_sizes"])
def test_residual_scale_against_a_dense_delta_method(name, route):
    """v = r(psi)/(n - K) l'A(psi)^-1 l as a function of s^2 at the fixed ratio and of the two components."""
    panel = BY_NAME[name]
    one = fit(panel, route, "gls_residuals")
    if not one.unit_variance_raw > 0.0:
        pytest.skip("truncated here; other panels are not")
    big, moved = dense_panel(panel.X, panel.y, panel.units, exact=True)
    real = big.X.dtype.type
    u, a = real(one.idiosyncratic_variance), real(one.unit_variance)
    psi, df, step = a / u, big.n - big.K, real(1e-6)
    stage = getattr(routes, route)(big, routes.degrees(big, "rank"), **FIRST_STAGES[route])
    V, P = big.V(u, a), big.gls_projection(psi)
    forms = [F.T @ F for F in stage.factors]
    covariance_q = np.array([[2 * np.trace(A @ V @ B @ V) for B in forms] for A in forms])
    with_s = np.array([2 * np.trace(P @ V @ A @ V) for A in forms]) / df
    psi_on_q = np.array([1 / u, -psi / u]) @ stage.to_components
    variance_s = 2 * np.trace(P @ V @ P @ V) / df**2
    s = np.trace(P @ V) / df
    for row in combinations(panel):
        shifted = moved.back.T @ row.astype(big.X.dtype)

        def log_v(at, shifted=shifted):
            scale = np.trace(big.gls_projection(at) @ V) / df
            return np.log(scale) + np.log(shifted @ big.gls(at)[1] @ shifted)

        k = (log_v(psi + step) - log_v(psi - step)) / (2 * step)
        spread = (
            variance_s / s**2 + k**2 * (psi_on_q @ covariance_q @ psi_on_q) + 2 * k * (psi_on_q @ with_s) / s
        )
        # the difference quotient leaves step^2 = 1e-12 and 1e-19/step = 1e-13 of a derivative of order one
        assert satterthwaite(curve(panel), one, row[None]).df[0] == pytest.approx(float(2 / spread), rel=1e-9)


def test_scales_that_are_constant_multiples_share_degrees_of_freedom():
    panel = BY_NAME["mild_both"]
    rows = combinations(panel)
    for route in ("ml", "reml"):
        own = satterthwaite(curve(panel), fit(panel, route), rows).df
        for scale in ("gls_residuals", "gls_residuals_n"):
            assert satterthwaite(curve(panel), fit(panel, route, scale), rows).df == pytest.approx(
                own, rel=ROUNDING
            )
    other = [
        satterthwaite(curve(panel), fit(panel, "nerlove", scale), rows).df
        for scale in ("gls_residuals", "gls_residuals_n")
    ]
    assert other[0] == pytest.approx(other[1], rel=ROUNDING)


@pytest.mark.parametrize("route", GLS)
@pytest.mark.parametrize("scale", ["own", "gls_residuals"])
def test_balanced_closed_designs_have_classical_degrees_of_freedom(route, scale):
    """Identity 12: n - N - K_w within, N - K_p between, for every unbiased route, under both scales."""
    panel, c = CLOSED, curve(CLOSED)
    one = fit(panel, route, scale)
    assert one.unit_variance_raw > 0.0
    within, between = float(c.df_within), float(c.units - c.rank_between)
    assert (within, between) == (32 - 8 - 2, 8 - 3)
    assert satterthwaite(c, one, np.eye(5)).df == pytest.approx(
        [between, within, within, between, between], rel=LOCATED
    )
    for rows, df in ((np.eye(5)[1:3], within), (np.eye(5)[3:], between)):
        for decomposition in ("invariant", "as_written"):
            assert joint_satterthwaite(c, one, rows, decomposition).df == pytest.approx(df, rel=LOCATED)


def test_balanced_closed_kenward_roger_is_the_exact_f_test():
    panel, c = CLOSED, curve(CLOSED)
    one = fit(panel, "reml")
    adjusted = kenward_roger(c, one)
    assert adjusted.covariance == pytest.approx(one.covariance_array, rel=ROUNDING, abs=1e-15)
    means = np.array([panel.X[panel.units == i].mean(axis=0) for i in range(8)])
    outcome = np.array([panel.y[panel.units == i].mean() for i in range(8)])
    cases = (
        ([1, 2], panel.X[:, 1:3], panel.y - outcome[panel.units], 32 - 8 - 2, [0, 1]),
        ([3, 4], means[:, [0, 3, 4]], outcome, 8 - 3, [1, 2]),
    )
    for terms, F, f, df, tested in cases:
        L = np.eye(5)[terms]
        found = adjusted.scaled_f(L)
        assert (found.df, found.scaling) == pytest.approx((df, 1.0), rel=LOCATED)
        solution = np.linalg.lstsq(F, f, rcond=None)[0]
        covariance = np.linalg.inv(F.T @ F) * ((f - F @ solution) ** 2).sum() / df
        b = solution[tested]
        classical = b @ np.linalg.solve(covariance[np.ix_(tested, tested)], b) / 2
        whitened = np.linalg.solve(adjusted.wald_root(L).T, L @ one.beta)
        assert whitened @ whitened / 2 == pytest.approx(classical, rel=LOCATED)


def test_one_row_kenward_roger_is_the_general_formula():
    """For one row the general steps give 2/A and 1; the engine takes the short way."""
    panel = BY_NAME["mild_both"]
    one = fit(panel, "reml")
    at, C = dense(panel, one)
    for row in combinations(panel):
        m, scaling = at.kenward_roger(exact(row[None]), C)
        found = kenward_roger(curve(panel), one).scaled_f(row[None])
        assert (found.df, found.scaling) == pytest.approx((float(m), float(scaling)), rel=DENSE)


@pytest.mark.parametrize(
    "name", ["mild_both", "singletons_between", "negative_mild", "balanced_periods_both"]
)
@pytest.mark.parametrize("route", ["reml", "swamy_arora", "wallace_hussain"])
def test_invariant_to_coordinates_of_x_and_scale_of_y(name, route):
    panel = BY_NAME[name]
    p = panel.X.shape[1]
    R = np.eye(p) + np.triu(np.random.default_rng(3).integers(-2, 3, (p, p)), 1) * (np.arange(p) > 0)
    moved = Panel("", panel.X @ R, 1000.0 * panel.y, panel.units, panel.periods, panel.names, "")
    here, there = fit(panel, route), fit(moved, route)
    rows = combinations(panel)
    # l'beta = (R'l)'(R^-1 beta); the ratio itself is located anew in other coordinates
    before, after = (
        satterthwaite(curve(panel), here, rows).df,
        satterthwaite(curve(moved), there, rows @ R).df,
    )
    assert after == pytest.approx(before, rel=LOCATED)
    joint = [
        joint_satterthwaite(curve(q), f, L).df
        for q, f, L in ((panel, here, rows[1:p]), (moved, there, rows[1:p] @ R))
    ]
    assert joint[0] == pytest.approx(joint[1], rel=LOCATED)
    if route == "reml":
        a, b = kenward_roger(curve(panel), here), kenward_roger(curve(moved), there)
        assert b.scaled_f(rows[:p] @ R).df == pytest.approx(a.scaled_f(rows[:p]).df, rel=LOCATED)
        errors = [[k.standard_error(row) for row in L] for k, L in ((a, rows), (b, rows @ R))]
        assert errors[1] == pytest.approx(1000.0 * np.array(errors[0]), rel=LOCATED)


def test_joint_satterthwaite_as_written_is_the_published_split_and_depends_on_the_writing():
    panel, c = BY_NAME["many_sizes"], curve(BY_NAME["many_sizes"])
    one = fit(panel, "reml")
    at, C = dense(panel, one)
    L = np.eye(4)[1:]
    phi = (L @ at.Phi @ L.T).astype(float)
    parts = np.array([float(at.satterthwaite(exact(v @ L), C)) for v in np.linalg.eigh(phi)[1].T])
    E = (parts / (parts - 2.0)).sum()
    found = joint_satterthwaite(c, one, L, "as_written")
    assert np.sort(found.parts) == pytest.approx(np.sort(parts), rel=DENSE)
    assert found.df == pytest.approx(2.0 * E / (E - 3.0), rel=DENSE)
    other = np.array([[1.0, -3.0, 0.0], [0.0, 1.0, 5.0], [0.0, 0.0, 1.0]]) @ L
    assert abs(joint_satterthwaite(c, one, other, "as_written").df / found.df - 1.0) > 1e-3
    free = joint_satterthwaite(c, one, L)
    assert joint_satterthwaite(c, one, other).df == pytest.approx(free.df, rel=ROUNDING)


def test_invariant_split_has_parts_uncorrelated_with_their_slopes():
    panel = BY_NAME["many_sizes"]
    one = fit(panel, "reml")
    at, C = dense(panel, one)
    L = exact(np.eye(4)[1:])
    phi, slope = (L @ at.Phi @ L.T).astype(float), (L @ at.Phi_slopes[0] @ L.T).astype(float)
    vectors = eigh(slope, phi)[1]  # the generalised problem: an independent way to the same vectors
    parts = np.array([float(at.satterthwaite(exact(v @ np.eye(4)[1:]), C)) for v in vectors.T])
    assert np.sort(joint_satterthwaite(curve(panel), one, np.eye(4)[1:]).parts) == pytest.approx(
        np.sort(parts), rel=DENSE
    )


def test_too_few_degrees_for_the_joint_rule_use_the_smallest_and_say_so():
    panel = BY_NAME["two_units_balanced"]
    one = fit(panel, "reml")
    found = joint_satterthwaite(curve(panel), one, np.eye(2))
    assert found.parts.min() <= 2.0
    assert found.df == found.parts.min()
    assert "smallest part" in found.notes[-1]


def test_zero_ratio_is_said():
    panel, c = BY_NAME["negative_mild"], curve(BY_NAME["negative_mild"])
    for route in ("reml", "swamy_arora"):
        notes = satterthwaite(c, fit(panel, route), np.eye(c.rank)).notes
        assert "ratio of zero" in notes[0]
        assert "n - K" in notes[0]
    assert "ratio of zero" in kenward_roger(c, fit(panel, "reml")).notes[0]
    assert (
        satterthwaite(curve(BY_NAME["mild_both"]), fit(BY_NAME["mild_both"], "reml"), np.eye(3)).notes == ()
    )
    table = inference_table(c, {}, fit(panel, "reml"), panel.names[1]).set_index("rule")
    assert "ratio of zero" in table.loc["satterthwaite", "why"]
    assert "ratio of zero" in table.loc["kenward_roger", "why"]


def test_reference_routes_have_their_classical_degrees_of_freedom():
    panel, c = BY_NAME["mild_both"], curve(BY_NAME["mild_both"])
    rows = np.eye(3)[1:]
    assert satterthwaite(c, fit(panel, "pooled"), rows).df == pytest.approx([38 - 3] * 2, rel=ROUNDING)
    assert satterthwaite(c, fit(panel, "within"), rows).df == pytest.approx([38 - 8 - 2] * 2, rel=ROUNDING)
    for route in ("between", "first_difference"):
        without = satterthwaite(c, fit(panel, route), rows)
        assert np.isnan(without.df).all()
        assert "no sampling covariance" in without.notes[0]
    expected = {"pooled": 38 - 3, "within": 38 - 8 - 2, "between": 8 - 3, "first_difference": 38 - 8 - 2}
    for route, df in expected.items():
        assert default_rule(fit(panel, route)) == "t_residual"
        assert [one.df for one in pick_reference(c, fit(panel, route), rows)] == [df, df]
    picked = pick_reference(c, fit(panel, "swamy_arora"))
    assert [one.name for one in picked] == ["satterthwaite"] * 3


def test_simple_rules_count_what_they_say():
    panel, c = BY_NAME["mild_between"], curve(BY_NAME["mild_between"])  # constant, both, between
    one = fit(panel, "reml")
    found = {rule: degrees_of_freedom(c, one, np.eye(3), rule) for rule in RULES}
    # n = 38, N = 8, K = 3, K_w = 1, K_p = 3, K_c = 2
    assert found["normal"].tolist() == [np.inf] * 3
    assert found["t_rows"].tolist() == [35.0] * 3
    assert found["t_within"].tolist() == [29.0] * 3
    assert found["t_units"].tolist() == [7.0] * 3
    assert found["t_between"].tolist() == [5.0] * 3
    assert found["t_constant"].tolist() == [6.0] * 3
    assert found["by_level"].tolist() == [5.0, 29.0, 5.0]
    assert degrees_of_freedom(c, one, np.array([[0.0, 1.0, -1.0]]), "by_level").tolist() == [5.0]
    with pytest.raises(OptionError, match="by_level"):
        degrees_of_freedom(c, one, np.eye(3), "by_levels")


@pytest.mark.parametrize("df", [1.0, 3.7, 40.0, 1e5, np.inf])
@pytest.mark.parametrize("t", [0.0, 0.3, 2.5, 37.0, 1e4])
def test_p_values_to_the_far_tail(df, t):
    reference = Reference("t", df)
    if np.isinf(df):
        tail = mpmath.erfc(mpmath.mpf(t) / mpmath.sqrt(2))
    else:
        x = df / (df + mpmath.mpf(t) ** 2)
        tail = mpmath.betainc(mpmath.mpf(df) / 2, 0.5, 0, x, regularized=True)
    # the incomplete beta keeps ten digits; the logarithm at 1e5 degrees of freedom keeps eps times its size
    assert reference.log_p_value(-t) == pytest.approx(float(mpmath.log(tail)), rel=1e-10, abs=1e-12)
    assert reference.p_value(t) == pytest.approx(float(tail), rel=1e-9)


def test_intervals_hold_their_level_and_missing_df_gives_no_figures():
    reference = Reference("t", 4.5)
    lower, upper = reference.interval(2.0, 0.5, 0.9)
    assert stats.t.cdf((upper - 2.0) / 0.5, 4.5) == pytest.approx(0.95, rel=1e-12)
    assert 2.0 - lower == pytest.approx(upper - 2.0, rel=1e-15)
    assert reference.joint_p_value(2.5**2, 1) == pytest.approx(reference.p_value(2.5), rel=1e-12)
    assert Reference("normal", np.inf).joint_p_value(3.0, 2) == pytest.approx(
        stats.chi2.sf(6.0, 2), rel=1e-12
    )
    for df in (np.nan, 0.0, -1.0):
        nothing = Reference("t", df)
        assert not nothing.available
        assert nothing.text == "not available"
        assert np.isnan([nothing.quantile(0.95), nothing.p_value(1.0), nothing.log_p_value(1.0)]).all()


def exact_rules(panel: Panel, route: str, term: str, **other: Fit) -> set[str]:
    table = inference_table(curve(panel), other, fit(panel, route), term)
    return set(table.loc[table["exact"], "rule"])


def test_what_the_table_calls_exact():
    within = {"t_within", "by_level", "satterthwaite"}
    x, z = CLOSED.names[1], CLOSED.names[3]
    # purely within with the scale RSS_w/(n - N - K_w): exact whatever the sizes
    for panel in (CLOSED, CLOSED_MILD):
        for route in ("swamy_arora", "wansbeek_kapteyn", "fitting_constants", "pooled_minus_within"):
            assert exact_rules(panel, route, x) == within
        assert exact_rules(panel, "within", x) == {*within, "t_residual"}
        assert exact_rules(panel, "pooled", x) == set()
        for route in ("amemiya", "nerlove", "ml"):
            assert exact_rules(panel, route, x) == set()
    # REML weights the size classes when sizes differ
    assert exact_rules(CLOSED_MILD, "reml", x) == set()
    # K_p = K_c here
    assert exact_rules(CLOSED, "between", z) == {"t_residual", "t_between", "t_constant", "by_level"}
    assert exact_rules(CLOSED_MILD, "between", z) == set()
    assert exact_rules(CLOSED, "pooled", z) == set()
    mixed = BY_NAME["mild_both"]
    assert exact_rules(mixed, "reml", mixed.names[1]) == set()
    why = inference_table(curve(mixed), {}, fit(mixed, "reml"), mixed.names[1])["why"]
    assert why.str.contains("exact here: `within`").all()


def test_a_zero_estimate_must_be_improbable_for_between_and_reml_to_be_exact():
    strong = make("strong", "", BALANCED, "pure between", seed=8, psi=400.0, tags="balanced closed")
    x, z = strong.names[1], strong.names[2]
    assert exact_rules(strong, "reml", x) == {"t_within", "by_level", "satterthwaite", "kenward_roger"}
    for route in ("reml", "swamy_arora", "minque_1"):
        found = exact_rules(strong, route, z)
        assert {"t_between", "t_constant", "by_level", "satterthwaite"} <= found
    weak = BY_NAME["psi_near_zero"]
    assert exact_rules(weak, "reml", weak.names[1]) == set()
    law = exact_law(curve(weak), fit(weak, "reml"), np.eye(3)[1])
    df_between, df_within = 6, 23
    chance = stats.f.cdf(1.0 / (1.0 + 4.0 * 1e-4), df_between, df_within)
    assert f"{chance:.2g}" in law.why
    assert "t(23)" in law.why


def test_special_designs_of_reference_routes():
    pairs = BY_NAME["pairs_balanced"]
    assert "t_residual" in exact_rules(pairs, "first_difference", pairs.names[1])
    longer = BY_NAME["balanced_both"]
    assert exact_rules(longer, "first_difference", longer.names[1]) == set()
    table = inference_table(curve(longer), {}, fit(longer, "first_difference"), longer.names[1])
    assert table["why"].str.contains("moving average").all()


def test_table_contents():
    panel, c = BY_NAME["mild_between"], curve(BY_NAME["mild_between"])
    one, term = fit(panel, "swamy_arora"), panel.names[1]
    matrix = 4.0 * one.covariance_array
    robust = {"CR1": Robust(matrix, rules=("normal", "t_units"), satterthwaite=lambda row: 3.5)}
    table = inference_table(c, {"reml": fit(panel, "reml")}, one, term, 0.9, robust=robust)
    assert list(table.columns) == [
        *("rule", "route", "covariance", "estimate", "standard_error", "reference", "df"),
        *("lower", "upper", "p_value", "exact", "why"),
    ]
    row = table.set_index(["covariance", "rule"]).loc[("CR1", "satterthwaite")]
    assert row["df"] == 3.5
    assert row["standard_error"] == pytest.approx(2.0 * one.standard_errors[term], rel=1e-12)
    half = stats.t.isf(0.05, 3.5) * row["standard_error"]
    assert row["upper"] == pytest.approx(one.coefficients[term] + half, rel=1e-12)
    assert row["p_value"] == pytest.approx(
        2 * stats.t.sf(abs(row["estimate"] / row["standard_error"]), 3.5), rel=1e-9
    )
    other = table[table["rule"] == "kenward_roger"].iloc[0]
    assert other["route"] == "reml"
    assert other["estimate"] == pytest.approx(fit(panel, "reml").coefficients[term], rel=1e-12)
    assert (table["why"].str.len() > 0).all()
    assert "rule of thumb" in table.set_index("rule").loc["by_level", "why"]


def test_refusals():
    panel, c = BY_NAME["mild_between"], curve(BY_NAME["mild_between"])
    with pytest.raises(IdentificationError, match="does not vary within units"):
        inference_table(c, {}, fit(panel, "within"), panel.names[2])
    with pytest.raises(OptionError, match="Did you mean"):
        inference_table(c, {}, fit(panel, "reml"), panel.names[1] + "x")
    with pytest.raises(OptionError, match="between 0 and 1"):
        inference_table(c, {}, fit(panel, "reml"), panel.names[1], 95.0)
    with pytest.raises(OptionError, match="'reml'"):
        kenward_roger(c, fit(panel, "ml"))
    with pytest.raises(OptionError, match="gls_residuals_n"):
        kenward_roger(c, fit(panel, "reml", "gls_residuals_n"))
    with pytest.raises(OptionError, match="rows"):
        satterthwaite(curve(BY_NAME["mild_both"]), fit(panel, "reml"), np.eye(3))


REPLICATES = 500


def test_simulated_coverage_of_what_is_called_exact_and_failure_of_the_normal():
    """Unbalanced closed design, ratio 0.3: a within slope is exact, z for a between slope is not."""
    rng = np.random.default_rng(20)
    X, units = CLOSED_MILD.X, CLOSED_MILD.units
    level = 0.9
    hits = {"exact": 0, "normal": 0}
    for _ in range(REPLICATES):
        y = np.sqrt(0.3) * rng.normal(size=8)[units] + rng.normal(size=len(units))
        c = curve_of(Moments.from_arrays(X, y, units, CLOSED_MILD.names))
        one = fit_route(c, "swamy_arora", {}, "no periods")
        error = one.standard_errors.to_numpy()
        df = satterthwaite(c, one, np.eye(5)[1:2]).df[0]
        assert df == pytest.approx(c.df_within, rel=1e-8)
        hits["exact"] += abs(one.beta[1]) <= Reference("t", df).quantile(level) * error[1]
        hits["normal"] += abs(one.beta[3]) <= Reference("normal", np.inf).quantile(level) * error[3]
    noise = np.sqrt(level * (1 - level) / REPLICATES)
    assert abs(hits["exact"] / REPLICATES - level) < 3.5 * noise  # one false alarm in two thousand seeds
    # t(5) against z: coverage 0.84, four and a half standard errors below
    assert hits["normal"] / REPLICATES < level - 2 * noise
