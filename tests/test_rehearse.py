"""Rehearsals against closed forms, against fits to the rows themselves, and against what theory says of bias."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

import mixbridge
import mixbridge.rehearse.rows as by_rows
from mixbridge.errors import IdentificationError, OptionError
from mixbridge.inference import contrasts, satterthwaite, variance_tests
from mixbridge.moments import Moments
from mixbridge.ratio import curve_of
from mixbridge.rehearse import Design, Truth, growth, minimum_detectable, rehearse
from mixbridge.rehearse.assumption_tests import critical_values, statistics
from mixbridge.rehearse.detectable import noncentrality_for, shift_for
from mixbridge.rehearse.replicates import run
from mixbridge.rehearse.rows import draw_rows, reduce_rows, row_space
from mixbridge.rehearse.setting import setting_of
from mixbridge.rehearse.truth import unit_mean_covariance
from mixbridge.rehearse.widths import factors
from mixbridge.resample.batch import estimate, plan
from mixbridge.resample.moment_draws import Draws, coordinates_of, draw, moments_of
from mixbridge.routes import LEDGER_ROUTES, fit_route

Z = 4.5  # Monte Carlo standard errors allowed: about one false alarm in 150,000 comparisons
MIXED = Design(
    40,
    {1: 4, 2: 2, 3: 14, 6: 20},
    {"dose": (1.0, 0.5), "age": (0.0, 2.0, 40.0), "heat": (0.5, 0.3)},
    within_correlation={("dose", "heat"): 0.4},
    between_correlation={("dose", "age"): 0.5},
)
BALANCED = Design(30, 5, {"dose": (1.0, 0.5)})
TAILS = Truth({"dose": 0.4}, icc=0.3, tail_df=5.0, unit_tail_df=6.0, serial=-0.4)


def off(rate, target, count):
    return abs(rate - target) / np.sqrt(target * (1.0 - target) / count)


def test_design_has_the_moments_it_describes():
    design = Design(
        4000,
        [3] * 2000 + [5] * 2000,
        {"a": (2.0, 1.0, 10.0), "b": (0.5, 3.0), "c": (0.0, 1.0)},
        within_correlation={("a", "b"): -0.6},
        between_correlation=[[1.0, 0.3, 0.2], [0.3, 1.0, 0.0], [0.2, 0.0, 1.0]],
    )
    rows = design.rows()
    assert rows.names == ("Intercept", "a", "b", "c")
    means = np.array([rows.x[rows.codes == i].mean(axis=0) for i in range(4000)])
    inside = (rows.x - means[rows.codes])[:, 1:]
    within = inside.T @ inside / (len(rows.x) - 4000)
    # 12,000 degrees of freedom: a variance is known to sqrt(2/12000) = 1.3% of itself
    assert within[:2, :2] == pytest.approx(np.array([[2.0, -0.6], [-0.6, 0.5]]), rel=6 * 0.013)
    assert np.abs(within[2]).max() < 1e-24 * 4000
    size = np.bincount(rows.codes)
    expected = np.array([[1.0, 0.3 * 3**0.5, 0.2], [0.3 * 3**0.5, 3.0, 0.0], [0.2, 0.0, 1.0]])
    expected[:2, :2] += within[:2, :2] * (1.0 / size).mean()
    spread = np.sqrt(np.outer(np.diag(expected), np.diag(expected)) * 2.0 / 4000)
    assert (np.abs(np.cov(means[:, 1:].T) - expected) < 5 * spread).all()
    assert means[:, 1].mean() == pytest.approx(10.0, abs=5 * np.sqrt(expected[0, 0] / 4000))
    assert (design.rows().x == rows.x).all()


def _replicate_by_hand(design, truth):
    """Return a row space, draws of two replicates, and moments of the same rows."""
    rows = design.rows()
    setting = setting_of(design, truth)
    space = row_space(setting.curve, rows)
    stream = np.random.default_rng(5)
    effects = stream.standard_normal((2, design.units))
    errors = stream.standard_normal((2, len(rows.x))) * 1.5
    draws = Draws(np.empty((2, space.space.order)), np.zeros((2, space.space.rest_df.size)))
    reduce_rows(space, effects, errors, draws.e, draws.rest)
    beta = np.linspace(1.0, 2.0, setting.curve.rank)
    outcomes = rows.x @ beta + effects[:, rows.codes] + errors
    return (
        setting,
        space,
        draws,
        beta,
        [Moments.from_arrays(rows.x, y, rows.codes, rows.names) for y in outcomes],
    )


@pytest.mark.parametrize("design", [MIXED, BALANCED], ids=["mixed", "balanced"])
def test_rows_reduced_to_coordinates_are_the_rows(design):
    setting, space, draws, beta, moments = _replicate_by_hand(design, Truth(icc=0.2))
    found = estimate(plan(space.space, setting.fits, 0.25), draws)
    wanted = critical_values(setting.curve, found, 0.05)
    values = statistics(space.space, draws, found, wanted)
    assert set(found) == set(LEDGER_ROUTES) - {"first_difference"}
    for at, each in enumerate(moments):
        curve = curve_of(each)
        fits = {key: fit_route(curve, key, {}, "none") for key in found}
        for key, fit in fits.items():
            here = found[key]
            got = here.coefficients[at] + beta
            # both refine their solutions: only the condition of the columns (about 100, age is not centred) costs digits
            known = np.isfinite(fit.beta)
            assert got[known] == pytest.approx(fit.beta[known], rel=1e-8, abs=1e-8)
            assert here.standard_errors[at][known] == pytest.approx(
                fit.standard_errors.to_numpy()[known], rel=1e-7
            )
            assert here.unit_variance_raw[at] == pytest.approx(fit.unit_variance_raw, rel=1e-6, nan_ok=True)
        table = (
            variance_tests(curve, fits, draws=0)
            .drop_duplicates("test", keep="last")
            .set_index("test")["statistic"]
        )
        for name in (name for name in wanted if not name.startswith("unit_means")):
            assert values[name][at] == pytest.approx(table[name], rel=1e-6, abs=1e-8)
        for key in ("reml", "swamy_arora"):
            wald = next(item for item in contrasts(curve, fits[key]) if item.name == "unit means")
            assert wald.variance == "one idiosyncratic variance"
            assert values[f"unit_means_{key}"][at] == pytest.approx(wald.statistic, rel=1e-6)
            assert wanted[f"unit_means_{key}"].value == pytest.approx(stats.chi2.isf(0.05, wald.df))


def test_rows_and_moments_draw_from_one_law():
    setting = setting_of(MIXED, Truth({"dose": 0.3}, icc=0.25, contextual={"dose": 0.5}))
    one = run(setting.curve, setting.fits, setting.model, 3000, 1)
    two = run(setting.curve, setting.fits, setting.model, 3000, 2, rows=MIXED.rows())
    pairs = [
        (getattr(one.routes[key], name), getattr(two.routes[key], name))
        for key in ("reml", "swamy_arora", "wallace_hussain")
        for name in ("unit_variance_raw", "idiosyncratic_variance")
    ]
    pairs += [
        (one.routes[key].coefficients[:, j], two.routes[key].coefficients[:, j])
        for key in ("pooled", "reml", "between")
        for j in range(4)
    ]
    pairs += [(one.statistics[name], two.statistics[name]) for name in one.tests]
    # one family of about 26 comparisons, error rate 1e-4 in all
    for a, b in pairs:
        assert stats.ks_2samp(a, b).pvalue > 1e-4 / len(pairs)


def test_balanced_one_way_follows_its_closed_laws():
    n, t, psi, count = 12, 4, 0.15, 6000
    design = Design(n, t)
    found = rehearse(design, Truth(ratio=psi, idiosyncratic=2.0), count, 3)
    parts = found.components.set_index(["route", "quantity"])
    df = (n - 1, n * (t - 1))
    zero = stats.f.cdf(1.0 / (1.0 + t * psi), *df)
    for key in ("swamy_arora", "fitting_constants", "reml"):
        assert off(parts.loc[(key, "unit_variance"), "zero"], zero, count) < Z
    raw, inner = (
        parts.loc[("swamy_arora", "unit_variance_raw")],
        parts.loc[("swamy_arora", "idiosyncratic_variance")],
    )
    for row in (raw, inner):
        assert abs(row["bias"]) < Z * row["bias_error"]
    # chi-square laws of the two mean squares
    sd = np.sqrt(2 * (2.0 * (1 + t * psi)) ** 2 / df[0] + 2 * 2.0**2 / df[1]) / t
    assert raw["sd"] == pytest.approx(sd, rel=Z * np.sqrt(0.5 * (2 + 12 / df[0]) / count))
    assert inner["sd"] == pytest.approx(
        2.0 * np.sqrt(2 / df[1]), rel=Z * np.sqrt(0.5 * (2 + 12 / df[1]) / count)
    )
    power = stats.f.sf(stats.f.isf(0.05, *df) / (1.0 + t * psi), *df)
    assert off(found.tests.set_index("test").loc["f_unit_intercepts", "rejection"], power, count) < Z
    # the mean of all rows, its standard error from the between mean square: exact t with N - 1
    covered = found.intervals.set_index(["route", "term", "rule"]).loc[("between", "Intercept", "t_residual")]
    assert off(covered["coverage"], 0.95, count) < Z


def test_within_intervals_and_sizes_are_exact_under_normal_errors():
    count = 6000
    found = rehearse(MIXED, Truth({"heat": 0.0, "dose": 1.0}, ratio=0.0), count, 11, confidence=0.9)
    rates = found.intervals.set_index(["route", "term", "rule"])
    for term in ("dose", "heat"):
        row = rates.loc[("within", term, "t_residual")]
        assert off(row["coverage"], 0.9, count) < Z
    assert off(rates.loc[("within", "heat", "t_residual"), "rejection"], 0.1, count) < Z
    assert off(rates.loc[("pooled", "age", "t_residual"), "coverage"], 0.9, count) < Z  # no unit effects
    tests = found.tests.set_index("test")
    assert tests["true"].all()
    assert off(tests.loc["f_unit_intercepts", "rejection"], 0.1, count) < Z
    age = found.coefficients.query("route == 'within' and term == 'age'")
    assert age.empty  # not estimable from within variation


def _dense_bias(design, gamma, between_only):
    rows = design.rows()
    units = np.eye(design.units)[rows.codes]
    means = units @ np.linalg.lstsq(units, rows.x, rcond=None)[0]
    effect = (means - means.mean(axis=0)) @ gamma
    x = means if between_only else rows.x
    return np.linalg.lstsq(x, effect, rcond=None)[0]


def test_correlated_effects_bias_routes_by_the_formula():
    truth = Truth({"dose": 0.2}, icc=0.4, contextual={"dose": 0.8, "heat": -0.3})
    found = rehearse(MIXED, truth, 4000, 5)
    table = found.coefficients.set_index(["route", "term"])
    gamma = np.array([0.0, 0.8, 0.0, -0.3])
    for key in ("pooled", "between"):
        bias = _dense_bias(MIXED, gamma, key == "between")
        for at, term in enumerate(("dose", "age", "heat"), start=1):
            row = table.loc[(key, term)]
            assert abs(row["bias"] - bias[at]) < Z * row["bias_error"]
    for term in ("dose", "heat"):
        assert abs(table.loc[("within", term), "bias"]) < Z * table.loc[("within", term), "bias_error"]
    assert abs(table.loc[("reml", "dose"), "bias"]) > 20 * table.loc[("reml", "dose"), "bias_error"]
    tests = found.tests.set_index("test")
    assert not tests.loc["unit_means_reml", "true"]
    assert tests.loc["unit_means_reml", "rejection"] > 0.5


def test_an_offset_changes_nothing():
    shifted = replace(BALANCED, covariates={"dose": (1.0, 0.5, 1e6)})
    for truth in (
        Truth(icc=0.3, correlation={"dose": 0.4}),
        Truth(icc=0.3, correlation={"dose": 0.4}, tail_df=5.0),
    ):
        a, b = (rehearse(design, truth, 100, 1).runs.routes["reml"] for design in (BALANCED, shifted))
        # an offset of 1e6 costs six digits of the column as stored
        assert a.coefficients[:, 1] == pytest.approx(b.coefficients[:, 1], rel=1e-7, abs=1e-8)


def test_a_stated_correlation_is_the_correlation():
    setting = setting_of(MIXED, Truth(icc=0.3, correlation={"dose": 0.5, "age": -0.2}, idiosyncratic=2.0))
    model = setting.model
    mean, spread = unit_mean_covariance(setting.curve)
    rows = MIXED.rows()
    dense = np.array([rows.x[rows.codes == i].mean(axis=0) for i in range(40)])
    assert mean == pytest.approx(dense.mean(axis=0), rel=1e-12, abs=1e-12)
    assert spread == pytest.approx(np.cov(dense.T, ddof=0), rel=1e-10, abs=1e-10)
    along = dense @ model.contextual
    assert along.mean() == pytest.approx(0.0, abs=1e-12)  # centred by its part in the intercept
    assert model.unit_variance == pytest.approx(2.0 * 0.3 / 0.7)
    assert along.var() + model.normal.unit == pytest.approx(model.unit_variance, rel=1e-10)
    for at, stated in ((1, 0.5), (2, -0.2)):
        size = np.sqrt(dense[:, at].var() * model.unit_variance)
        assert np.cov(along, dense[:, at], ddof=0)[0, 1] / size == pytest.approx(stated, rel=1e-10)


def test_interpolated_widths_are_those_of_each_fit():
    setting = setting_of(MIXED, Truth({"dose": 1.0}, icc=0.15))
    runs = run(setting.curve, setting.fits, setting.model, 100, 8)
    space = coordinates_of(setting.curve)
    draws = draw(space, setting.model.normal, 8, 0, 100)
    for key in ("swamy_arora", "minque_1", "ml", "reml"):
        found = factors(setting.curve, setting.fits[key], runs.routes[key], "satterthwaite", 0.95)
        for at in (0, 7, 20, 55, 99):
            curve = curve_of(moments_of(space, setting.model.normal, draws, at))
            df = satterthwaite(curve, fit_route(curve, key, {}, "none"), np.eye(curve.rank)).df
            # cubic splines between 33 nodes: far below what 2,000 replicates can show in coverage
            assert found[at] == pytest.approx(stats.t.isf(0.025, df), rel=1e-4)


def test_errors_by_rows_have_the_variance_and_autocorrelation_stated():
    design = Design(50, 6, {"dose": (1.0, 0.5)})
    setting = setting_of(design, replace(TAILS, idiosyncratic=3.0))
    space = row_space(setting.curve, setting.rows)
    stream = np.random.default_rng(1)
    errors = stream.standard_normal((2000, 300))
    steps = space.steps.copy()
    steps[2::6] = 2.0  # a period missing before the third row of each unit
    by_rows._correlate(errors, replace(space, steps=steps), -0.4)
    each = errors.reshape(2000, 50, 6)
    flat = each.reshape(-1, 6)
    expected = np.array([-0.4, 0.16, -0.4, -0.4, -0.4])
    got = (flat[:, 1:] * flat[:, :-1]).mean(axis=0)
    assert np.abs(got - expected).max() < Z * np.sqrt(1.2 / len(flat))
    assert flat.var(axis=0) == pytest.approx(1.0, abs=Z * np.sqrt(2 / len(flat)))
    # unit effects and errors in the draws: E of the within and between sums of squares, from the covariance matrix
    draws = draw_rows(space, setting.model, 4, 0, 3000)
    v = 3.0 * (-0.4) ** np.abs(np.subtract.outer(np.arange(6), np.arange(6)))
    mean = v.mean() + setting.model.normal.unit
    within = (draws.rest[:, 0] + draws.e[:, 0] ** 2) / 50
    between = (draws.rest[:, 1] + (draws.e[:, 1:] ** 2).sum(axis=1)) / 50
    for values, target in ((within, np.trace(v) - 6 * v.mean()), (between, 6 * mean)):
        assert abs(values.mean() - target) < Z * values.std() / np.sqrt(3000)
    # of a fixed seed; a sampler of another scale or shape fails by far at this size
    t = by_rows._sampler(stream, 5.0)((400, 500)).ravel()
    assert stats.kstest(t, stats.t(5.0, scale=np.sqrt(3.0 / 5.0)).cdf).pvalue > 1e-4


@pytest.mark.parametrize("truth", [Truth({"dose": 0.4}, icc=0.3), TAILS], ids=["moments", "rows"])
def test_replicates_are_the_same_whatever_their_number(truth, monkeypatch):
    few, many = rehearse(BALANCED, truth, 150, 9), rehearse(BALANCED, truth, 420, 9)
    other = rehearse(BALANCED, truth, 150, 10)
    # batches of another shape round products differently
    a, b = few.runs.routes["reml"], many.runs.routes["reml"]
    assert a.coefficients == pytest.approx(b.coefficients[:150], rel=1e-10, abs=1e-12)
    assert not np.allclose(a.coefficients, other.runs.routes["reml"].coefficients)
    monkeypatch.setattr(by_rows, "NUMBERS", 1000)
    again = rehearse(BALANCED, truth, 150, 9).runs.routes["reml"]
    assert again.coefficients == pytest.approx(a.coefficients, rel=1e-10, abs=1e-12)


def test_growth_shows_consistency_and_its_failure():
    table = growth(
        BALANCED,
        Truth(icc=0.4, correlation={"dose": 0.5}),
        (1, 4, 16),
        400,
        1,
        routes=["pooled", "within", "reml"],
    )
    dose = table[table["term"] == "dose"].set_index(["route", "times"])
    assert dose.loc[("reml", 16), "units"] == 480
    for key in ("pooled", "reml"):
        bias = dose.loc[key, "bias"]
        assert bias.loc[16] > 20 * dose.loc[(key, 16), "bias_error"]
        # what is left at 480 units is bias: within 10% of the whole error
        assert bias.loc[16] == pytest.approx(dose.loc[(key, 16), "rmse"], rel=0.1)
    level = dose.loc["within", "rmse_root_units"]
    # a root mean square from 400 replicates is known to 1/sqrt(800) = 3.5%
    assert level.loc[16] == pytest.approx(level.loc[1], rel=Z * 0.05)
    rows = growth(BALANCED, replace(TAILS, serial=0.0), (1, 4), 200, 1, routes=["within"])
    late = rows[(rows["term"] == "dose") & (rows["times"] == 4)].iloc[0]
    assert abs(late["bias"]) < Z * late["bias_error"]


def test_power_at_the_detectable_departure_is_the_power_stated():
    # normal: 1.959964 + 0.841621, the other tail adding less than 1e-5
    assert shift_for(0.8, 0.05, np.inf) == pytest.approx(1.959964 + 0.841621, abs=1e-5)
    assert stats.ncx2.sf(stats.chi2.isf(0.05, 3), 3, noncentrality_for(0.9, 0.05, 3)) == pytest.approx(0.9)
    assert noncentrality_for(0.8, 0.05, 1) == pytest.approx(shift_for(0.8, 0.05, np.inf) ** 2, rel=1e-4)
    design, count = Design(150, 4, {"dose": (1.0, 0.5), "age": (0.0, 1.0)}), 4000
    setting = setting_of(design, Truth(icc=0.3, idiosyncratic=2.0))
    runs = run(setting.curve, setting.fits, setting.model, 100, 1)
    at = int(np.argmin(np.abs(runs.routes["within"].scale - 2.0)))
    space = coordinates_of(setting.curve)
    moments = moments_of(space, setting.model.normal, draw(space, setting.model.normal, 1, 0, 100), at)
    curve = curve_of(moments)
    within, reml = (fit_route(curve, key, {}, "none") for key in ("within", "reml"))
    table = minimum_detectable(curve, within).set_index(["test", "term"])
    departure = table.loc[("coefficient", "dose"), "departure"]
    truth = Truth({"dose": float(departure)}, icc=0.3, idiosyncratic=within.idiosyncratic_variance)
    rates = rehearse(design, truth, count, 2).intervals.set_index(["route", "term", "rule"])
    assert off(rates.loc[("within", "dose", "t_residual"), "rejection"], 0.8, count) < Z
    assert np.isnan(table.loc[("coefficient", "age"), "departure"])
    table = minimum_detectable(curve, reml).set_index(["test", "term"])
    assert np.isnan(table.loc[("unit means", "age"), "departure"])
    robust = minimum_detectable(curve, replace(reml, robust=4.0 * reml.covariance.to_numpy()))
    row = robust.set_index(["test", "term"]).loc[("coefficient", "dose")]
    wide = 2.0 * reml.standard_errors["dose"] * shift_for(0.8, 0.05, 149.0)
    assert row["departure"] == pytest.approx(wide, rel=1e-9)
    gamma = float(table.loc[("unit means", "dose"), "departure"])
    truth = Truth(ratio=reml.ratio, idiosyncratic=reml.idiosyncratic_variance, contextual={"dose": gamma})
    rate = rehearse(design, truth, count, 3).tests.set_index("test").loc["unit_means_reml", "rejection"]
    # ratio and variance are estimated, which moves the power of this many units by a percentage point or two
    assert abs(rate - 0.8) < 0.02 + Z * np.sqrt(0.16 / count)


def test_a_study_is_rehearsed_with_its_own_rows():
    data = mixbridge.demo.apiaries()
    study = mixbridge.crosscheck("honey ~ forage + altitude", data, unit="apiary", period="season")
    found = rehearse(study, replicates=200, seed=1)
    assert "first_difference" in found.runs.left_out
    assert found.runs.model.normal.coefficients == pytest.approx(study.fits["reml"].beta)
    moved = rehearse(study, Truth(serial=0.6, tail_df=5.0), 200, 1)
    inner = moved.components.query("route == 'within' or route == 'reml'").query(
        "quantity == 'idiosyncratic_variance'"
    )
    assert (
        inner["bias"] < -5 * inner["bias_error"]
    ).all()  # positive autocorrelation hides in the unit means
    plain = mixbridge.crosscheck("honey ~ forage + altitude", data, unit="apiary")
    with pytest.raises(OptionError, match="period="):
        rehearse(plain, Truth(serial=0.6), 200, 1)
    assert rehearse(plain, Truth(tail_df=5.0), 100, 1).runs.count == 100


def test_texts_hold_the_numbers_and_the_caution():
    truth = Truth({"dose": 0.4}, icc=0.3, correlation={"dose": 0.3}, tail_df=6.0)
    found = rehearse(BALANCED, truth, 200, 1)
    text = str(found)
    assert max(map(len, text.splitlines())) <= 100
    for part in ("Cluster-robust", "unit_means_reml", "t with 6 df"):
        assert part in text
    words = found.paragraph()
    row = found.coefficients.query("route == 'reml' and term == 'dose'").iloc[0]
    assert f"bias of {row['bias']:.3g}" in words
    assert "correlation with the unit mean of dose 0.3" in words
    assert "the power of the test of a zero coefficient" in words
    assert "Route within" in found.paragraph("dose", "within")
    assert set(found.to_dict()) >= {"truth", "coefficients", "intervals", "components", "tests"}
    assert found.statuses()["route"].tolist() == list(found.runs.routes)
    drawn = found.figure("dose")
    panels = drawn.axes
    points = panels[0].lines[0].get_xydata()
    assert points[:, 0] == pytest.approx(found.coefficients.query("term == 'dose'")["bias"].to_numpy())
    assert [label.get_text() for label in panels[0].get_yticklabels()] == found.coefficients.query(
        "term == 'dose'"
    )["route"].tolist()
    assert len(panels[2].get_legend().get_texts()) == 4
    with pytest.raises(OptionError, match="Did you mean 'dose'"):
        found.figure("dosis")
    with pytest.raises(OptionError, match="route"):
        found.paragraph(route="remel")
    with pytest.raises(OptionError, match="term"):
        found.paragraph("Dose")


@pytest.mark.parametrize(
    ("arguments", "error", "words"),
    [
        ({"units": 2}, IdentificationError, "nothing is left between"),
        ({"sizes": 1}, IdentificationError, "within variance is zero"),
        ({"covariates": {"a": (0.0, 1.0)}}, IdentificationError, "zero for every covariate"),
        ({"sizes": [1] * 9 + [2]}, IdentificationError, "degrees of freedom"),
        ({"sizes": {3: 9}}, OptionError, "9 units"),
        ({"sizes": 2.5}, OptionError, "sizes"),
        ({"units": True}, OptionError, "units"),
        ({"covariates": {"a": (-1.0, 1.0)}}, OptionError, "below 0"),
        ({"covariates": {"a": (0.0, 0.0)}}, OptionError, "neither"),
        ({"covariates": {"a": (1.0,)}}, OptionError, "allowed"),
        ({"covariates": {"Intercept": (1.0, 1.0)}}, OptionError, "Intercept"),
        ({"within_correlation": {("a", "b"): 1.5}}, OptionError, "outside"),
        ({"within_correlation": {("a", "x"): 0.5}}, OptionError, "not known"),
        ({"within_correlation": {("a", "k"): 0.5}}, OptionError, "no such variance"),
        ({"between_correlation": np.eye(2)}, OptionError, "3 by 3"),
        (
            {"between_correlation": {("a", "b"): 0.9, ("a", "k"): 0.9, ("b", "k"): -0.9}},
            OptionError,
            "positive definite",
        ),
    ],
)
def test_impossible_designs_are_refused(arguments, error, words):
    good = {"units": 10, "sizes": 3, "covariates": {"a": (1.0, 1.0), "b": (1.0, 1.0), "k": (0.0, 1.0)}}
    Design(**good)
    with pytest.raises(error, match=words):
        Design(**{**good, **arguments})


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ({"icc": 1.0}, "icc"),
        ({"ratio": -0.1}, "ratio"),
        ({"ratio": 1.0, "icc": 0.5}, "two names"),
        ({"idiosyncratic": 0.0}, "idiosyncratic"),
        ({"tail_df": 2.0}, "above 2"),
        ({"serial": 1.0}, "serial"),
        ({"correlation": {"dose": 1.0}}, "between -1 and 1"),
        ({"correlation": {"dose": 0.1}, "contextual": {"dose": 0.1}}, "same thing"),
        ({"coefficients": {"dose": np.inf}}, "finite"),
    ],
)
def test_truths_out_of_range_are_refused(arguments, words):
    with pytest.raises(OptionError, match=words):
        Truth(**arguments)


def test_what_cannot_be_rehearsed_is_refused():
    with pytest.raises(OptionError, match="ratio= or icc="):
        rehearse(BALANCED, Truth(), 100)
    with pytest.raises(OptionError, match="Did you mean 'dose'"):
        rehearse(BALANCED, Truth({"does": 1.0}, icc=0.1), 100)
    with pytest.raises(OptionError, match="at least 100"):
        rehearse(BALANCED, Truth(icc=0.1), 99)
    with pytest.raises(OptionError, match="would explain"):
        rehearse(MIXED, Truth(icc=0.1, correlation={"dose": 0.9, "age": -0.9}), 100)
    with pytest.raises(IdentificationError, match="do not vary"):
        rehearse(MIXED, Truth(icc=0.1, correlation={"Intercept": 0.5}), 100)
    with pytest.raises(OptionError, match="a Design or a Study"):
        rehearse([1, 2], Truth(icc=0.1), 100)
    with pytest.raises(OptionError, match="confidence"):
        rehearse(BALANCED, Truth(icc=0.1), 100, confidence=1.0)
    with pytest.raises(OptionError, match="times"):
        growth(BALANCED, Truth(icc=0.1), (0,), 100)
    setting = setting_of(BALANCED, Truth(icc=0.1))
    for given in ({"power": 1.0}, {"level": 0.0}, {"power": 0.01}):
        with pytest.raises(OptionError):
            minimum_detectable(setting.curve, setting.fits["reml"], **given)
