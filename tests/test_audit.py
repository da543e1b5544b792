"""The audit: each statistic against its plain definition, the table's contract, and small seeded calibrations."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from scipy import stats

import mixbridge
from mixbridge.audit import CHECKS, audit

FORMULA = "honey ~ forage + feeding + altitude"


@pytest.fixture(scope="module")
def study():
    return mixbridge.crosscheck(FORMULA, mixbridge.demo.apiaries(), unit="apiary", period="season")


@pytest.fixture(scope="module")
def found(study):
    return study.audit()


@pytest.fixture(scope="module")
def rows(study):
    """Return the rows used with within residuals, in pandas."""
    x, y = study.panel.matrix()
    frame = pd.DataFrame(x[:, 1:3], columns=["forage", "feeding"])
    frame["y"], frame["unit"], frame["time"] = y, study.panel.codes, study.panel.period_ordinals
    inside = frame[["forage", "feeding", "y"]] - frame.groupby("unit")[["forage", "feeding", "y"]].transform(
        "mean"
    )
    slope = np.linalg.lstsq(inside[["forage", "feeding"]], inside["y"], rcond=None)[0]
    frame["e"] = inside["y"] - inside[["forage", "feeding"]] @ slope
    return frame.sort_values(["unit", "time"])


def test_every_check_answers_and_every_row_is_complete(found):
    table = found.table
    for check in CHECKS:
        assert any(key.startswith(check.key) for key in table.index), check.key
    for _, row in table.iterrows():
        for column in ("assumption", "evidence", "consequence", "conclusion"):
            assert len(str(row[column])) > 5, row
        assert np.isnan(row["p_value"]) or 0.0 <= row["p_value"] <= 1.0
        if np.isnan(row["statistic"]):
            assert len(row["status"]) > 3
    text = str(found)
    assert text.startswith("All routes share one covariance model")
    assert "Not rejecting is not evidence" in text
    assert "No row chooses an estimator" in text


def test_feeding_is_found_and_forage_is_not(found):
    assert found["unit_means_model:feeding"].p_value < 1e-5
    assert found["unit_means_robust:feeding"].p_value < 1e-3
    assert found["unit_means_model:forage"].p_value > 0.1


def test_unit_means_row_is_the_contrast(study, found):
    table = study.contrasts()
    joint = table[(table["contrast"] == "unit means") & (table["variance"] == "one idiosyncratic variance")]
    np.testing.assert_allclose(found["unit_means_model"].statistic, joint["statistic"].item(), rtol=1e-9)


def test_serial_correlation_from_first_differences(rows, found):
    """Wooldridge 2010, 10.6.3 (place from memory): residuals of differences on those one step before, clustered by unit."""
    steps = rows.groupby("unit")["time"].diff() == 1
    d = rows[["forage", "feeding", "y"]].groupby(rows["unit"]).diff()[steps]
    slope = np.linalg.lstsq(d[["forage", "feeding"]], d["y"], rcond=None)[0]
    e = pd.Series(np.nan, index=rows.index)
    e[d.index] = d["y"] - d[["forage", "feeding"]] @ slope
    before = e.groupby(rows["unit"]).shift(1)
    pairs = e.notna() & before.notna() & steps
    coefficient = float((e[pairs] * before[pairs]).sum() / (before[pairs] ** 2).sum())
    assert f"coefficient {coefficient:.3f}" in found["serial_differences"].evidence
    assert f"{int(pairs.sum())} pairs" in found["serial_differences"].evidence


def test_durbin_watson_form(rows, found):
    """Bhargava, Franzini & Narendranathan 1982: squared differences of within residuals over their squares."""
    steps = rows.groupby("unit")["time"].diff() == 1
    jumps = rows.groupby("unit")["e"].diff()[steps]
    value = float((jumps**2).sum() / (rows["e"] ** 2).sum())
    np.testing.assert_allclose(found["serial_durbin_watson"].statistic, value, rtol=1e-9)


def test_levene_is_scipy_s(rows, found):
    groups = [part["e"].to_numpy() for _, part in rows.groupby("unit") if len(part) > 1]
    statistic = stats.levene(*groups, center="median").statistic
    values = [found["variance_levene"].statistic, *found["variance_levene"].numbers.values()]
    assert np.isclose(values, statistic, rtol=1e-9).any(), (statistic, values)


def test_cross_section_dependence(rows, found):
    """Sum over pairs of products of scaled residuals in common periods, each over its standard deviation."""
    wide = rows.pivot(index="time", columns="unit", values="e")
    wide = wide.loc[:, wide.notna().sum() > 1]
    size = wide.notna().sum()
    scaled = wide / np.sqrt((wide**2).sum() / (size - 1))
    total, pairs = 0.0, 0
    for at, i in enumerate(scaled.columns):
        for j in scaled.columns[:at]:
            common = scaled[[i, j]].dropna()
            if len(common) < 2:
                continue
            # tr (I - J/T_i)(I - J/T_j) over the common periods
            a, b = (np.eye(len(common)) - 1.0 / size[k] for k in (i, j))
            total += float(common[i] @ common[j]) / np.sqrt(np.trace(a @ b))
            pairs += 1
    assert f"{pairs} pairs" in found["cross_section"].evidence
    np.testing.assert_allclose(found["cross_section"].statistic, total / np.sqrt(pairs), rtol=1e-9)


def test_cross_section_is_pesaran_s_for_equal_periods():
    """Pesaran 2015 but for sqrt(T - 1) in place of sqrt(T)."""
    study = simulated(5, n_units=10, periods=8)
    x, y = study.panel.matrix()
    inside = np.column_stack([x[:, 1], y]).reshape(10, 8, 2)
    inside -= inside.mean(axis=1, keepdims=True)
    a, b = inside.reshape(-1, 2).T
    e = (b - a * (a @ b) / (a @ a)).reshape(10, 8)
    upper = np.corrcoef(e)[np.triu_indices(10, 1)]
    value = np.sqrt(8 - 1.0) * upper.sum() / np.sqrt(len(upper))
    np.testing.assert_allclose(
        audit(study, checks=["cross_section"])["cross_section"].statistic, value, rtol=1e-9
    )


def test_without_periods_what_needs_them_is_not_assessable():
    plain = mixbridge.crosscheck(FORMULA, mixbridge.demo.apiaries(), unit="apiary")
    table = plain.audit().table
    for key in ("leads", "serial_differences", "serial_durbin_watson", "cross_section"):
        row = table.loc[next(name for name in table.index if name.startswith(key))]
        assert "not assessable: no period" in row["status"]
        assert np.isnan(row["p_value"])


def test_names_of_units_can_be_hidden(study):
    shown = str(audit(study, checks=["outlying_units"]))
    hidden = str(audit(study, checks=["outlying_units"], show_units=False))
    assert any(key in shown for key in study.panel.unit_keys)
    assert not any(key in hidden for key in study.panel.unit_keys)


def simulated(seed, n_units=40, periods=6, *, serial=0.0, related=0.0, tails=False):
    rng = np.random.default_rng(seed)
    unit = np.repeat(np.arange(n_units), periods)
    x = rng.normal(size=unit.size) + rng.normal(size=n_units)[unit]
    noise = rng.standard_t(3, size=(n_units, periods)) if tails else rng.normal(size=(n_units, periods))
    for t in range(1, periods):
        noise[:, t] = serial * noise[:, t - 1] + np.sqrt(1 - serial**2) * noise[:, t]
    effect = rng.normal(size=n_units) + related * np.bincount(unit, x) / periods
    frame = pd.DataFrame({"unit": unit, "time": np.tile(np.arange(periods), n_units), "x": x})
    frame["y"] = x + effect[unit] + noise.ravel()
    return mixbridge.crosscheck("y ~ x", frame, unit="unit", period="time")


SIZED = ["unit_means_model", "serial_differences", "serial_durbin_watson", "cross_section", "leads"]


def test_tests_hold_their_level_when_everything_holds():
    """120 panels: the share of rejections at 5% within four standard errors of it (0.05 +- 0.08)."""
    rejected = dict.fromkeys(SIZED, 0)
    for seed in range(120):
        found = audit(simulated(seed), checks=SIZED)
        for key in SIZED:
            rejected[key] += found[key].p_value < 0.05
    for key, count in rejected.items():
        assert abs(count / 120 - 0.05) <= 4 * np.sqrt(0.05 * 0.95 / 120), (key, count)


@pytest.mark.parametrize(
    ("check", "departure"),
    [
        ("serial_differences", {"serial": 0.6}),
        ("serial_durbin_watson", {"serial": 0.6}),
        ("unit_means_model", {"related": 1.0}),
        ("normal_errors", {"tails": True}),
    ],
)
def test_tests_see_what_they_are_for(check, departure):
    """20 panels with the departure: most are rejected, far above the level."""
    hits = [audit(simulated(seed, **departure), checks=[check])[check].p_value < 0.05 for seed in range(20)]
    assert np.mean(hits) > 0.6


def test_variance_along_a_covariate_is_near_the_studentised_form():
    """The plain n R^2 of squared residuals on the columns, among the numbers of the row, against statsmodels."""
    study = simulated(7)
    found = audit(study, checks=["variance_covariates"])["variance_covariates"]
    x, y = study.panel.matrix()
    codes = study.panel.codes
    inside = np.column_stack([x[:, 1], y])
    inside -= np.array([np.bincount(codes, column) / 6 for column in inside.T]).T[codes]
    e = inside[:, 1] - inside[:, 0] * (inside[:, 0] @ inside[:, 1]) / (inside[:, 0] @ inside[:, 0])
    fit = sm.OLS(e**2 * 6 / 5, x).fit()
    assert np.isclose(list(found.numbers.values()), len(y) * fit.rsquared, rtol=1e-6).any(), found.numbers


def test_unit_variance_is_not_judged_where_none_is_left():
    check = ["unit_variance_covariates"]
    rng = np.random.default_rng(11)
    data = pd.DataFrame({"unit": np.repeat(np.arange(30), 4), "x": rng.normal(size=120)})
    data["y"] = data["x"] + rng.normal(size=120)
    single = mixbridge.crosscheck("y ~ x", data.groupby("unit").head(1), unit="unit")
    row = audit(single, checks=check).findings[0]
    assert "every unit has one row" in row.status
    assert np.isnan(row.statistic)
    inside = data[["x", "y"]] - data.groupby("unit")[["x", "y"]].transform(
        "mean"
    )  # no differences between units
    level = inside.assign(unit=data["unit"], x=data["x"])
    row = audit(mixbridge.crosscheck("y ~ x", level, unit="unit"), checks=check).findings[0]
    assert "no unit variance" in row.status
